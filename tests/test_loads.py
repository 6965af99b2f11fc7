"""Forces, power and bending against published worked examples and closed forms; limits and what is said about them."""

from __future__ import annotations

import math
import re
from dataclasses import replace

import numpy as np
import pytest

from anticlast import materials, outline
from anticlast.cutter import Cutter
from anticlast.records import Job
from anticlast.stock import _load_kernels
from anticlast.stock.clearance import BodyClearance, RapidContact
from anticlast.stock.limits import flagged, limits_of, load_findings
from anticlast.stock.loads import RADIAL_SHARE, bending_mm_per_n, breaking_force_n, laws_of, loads_of
from anticlast.stock.pass_loads import PassLoad
from conftest import JobMaker
from stock_bench import FLAT, block, engage, line, motion

MICROMETRE = 1e-3


# ---------------------------------------------------------------------------------------- material laws


@pytest.mark.parametrize(("name", "feed_mm", "kc"), [("brass", 0.2, 950.0), ("mild steel", 0.3, 1820.0)])
def test_kienzle_laws_give_back_the_makers_table(name: str, feed_mm: float, kc: float) -> None:
    """Mitsubishi Materials, specific cutting force for face milling, MPa at mm per tooth: our fit is within 6 % of it."""
    law = next(force for force in materials.material(name).forces if "Mitsubishi" in force.source)
    assert law.at(feed_mm) == pytest.approx(kc, rel=0.06)
    found = np.empty(2)
    _load_kernels.specific(feed_mm, np.array([[law.kc11_n_mm2, law.mc, law.ktc_n_mm2, law.kte_n_mm]]), found)
    assert found[0] == found[1] == pytest.approx(law.at(feed_mm), rel=1e-12)


def test_laws_come_as_a_range_or_not_at_all_and_a_job_may_override(make_job: JobMaker) -> None:
    assert laws_of(make_job(material="acetal")).shape == (0, 4)
    metal = laws_of(make_job(material="aluminium 6061"))
    assert len(metal) == len(materials.material("aluminium 6061").forces) > 1
    found = np.empty(2)
    _load_kernels.specific(0.02, metal, found)
    assert tuple(found) == pytest.approx(
        materials.material("aluminium 6061").specific_force_n_mm2(0.02), rel=1e-12
    )
    own = laws_of(make_job(material="acetal", stock_extra="specific_force = [60.0, 120.0]"))
    _load_kernels.specific(0.02, own, found)
    assert tuple(found) == (60.0, 120.0)


# ---------------------------------------------------------------------------------------- force and power


def test_power_of_the_makers_worked_example() -> None:
    """Tool steel, vc 80, ap 2, ae 80, vf 280, D 250, z 12, efficiency 0.8: n 101.91, fz 0.228, kc 1800 -> 1.68 kW.

    Mitsubishi Materials, cutting power for face milling. The field cuts an 80 mm wide block with the 250 mm cutter.
    """
    rpm = 1000.0 * 80.0 / (math.pi * 250.0)
    assert rpm == pytest.approx(101.91, abs=0.06)
    assert 280.0 / (12 * rpm) == pytest.approx(0.228, abs=0.0015)
    mill = Cutter(1, "flat", 125.0, 0.0, 12, 20.0, 40.0, 60.0)
    field = block(1.0, top_mm=2.0, bottom_mm=-4.0, shape=outline.rectangle((300.0, 80.0)))
    found, segments = engage(field, motion(line((-320, 0, 0), (20, 0, 0), 20)), mill, feed_mm_min=280.0, rpm=rpm,
                             laws=((0.0, 0.0, 1800.0, 0.0),))  # fmt: skip
    place = segments.ends[:, 0] ** 2 + segments.ends[:, 1] ** 2
    inside = (place < 100.0**2) & (found.power_w[:, 0] > 0.0)
    power = np.median(found.power_w[inside, 0])
    assert power / 0.8 == pytest.approx(1680.0, abs=5.0 + 0.01 * 1680.0)
    exact = 1800.0 * 2.0 * 80.0 * 280.0 / 60e3
    assert power == pytest.approx(exact, rel=0.01)


def _slot_forces(ktc: float, kte: float, teeth: int, depth: float, tooth: float) -> tuple[float, float]:
    """Mean tangential force, and mean of its part across the feed, in a slot; straight teeth, 100000 angles."""
    angle = (np.arange(100_000) + 0.5) / 100_000 * math.pi
    tangential = (ktc * tooth * np.sin(angle) + kte) * depth
    scale = teeth / 2.0  # half the turn cuts
    return float(tangential.mean() * scale), float((tangential * np.sin(angle)).mean() * scale)


def test_slot_mean_force_of_the_textbook() -> None:
    """N = 2, ap = 1, fz = 0.05, K_tc 767.01, K_te 27.7 (7075-T6, Review 2021 Table 5): mean force across the feed 36.80962 N.

    By the mechanistic form N a / 4 K_tc c + N a / pi K_te (Altintas, Manufacturing Automation; from memory, numbers derived).

    The same integral without the sine is the mean tangential force; the field's own slot must give that.
    """
    mean, across = _slot_forces(767.01, 27.7, 2, 1.0, 0.05)
    assert across == pytest.approx(36.80962, abs=1e-4)
    found, _ = engage(
        block(),
        motion(line((-25, 2, 9), (25, 2, 9), 4)),
        FLAT,
        feed_mm_min=600.0,
        rpm=6000.0,
        laws=((0, 0, 767.01, 27.7),),
    )
    middle = slice(len(found.rpm) // 3, 2 * len(found.rpm) // 3)
    # Half of it rubs all round: one angle more or less at either end of the arc is 1.5 % of the whole.
    assert np.median(found.force_mean_n[middle, 0]) == pytest.approx(mean, rel=0.05)
    # One tooth at a time, straight ahead the most: (K_tc fz + K_te) ap.
    assert np.median(found.force_peak_n[middle, 0]) == pytest.approx(767.01 * 0.05 + 27.7, rel=0.08)
    # Power = mean tangential force times cutting speed, torque times angular speed.
    speed = math.pi * 6.0e-3 * 100.0
    assert np.median(found.power_w[middle, 0]) == pytest.approx(mean * speed, rel=0.05)
    assert np.median(found.torque_mean_nmm[middle, 0]) == pytest.approx(3.0 * mean, rel=0.05)


@pytest.mark.parametrize("width", [1.0, 2.0, 3.0])
def test_side_milling_mean_force(width: float) -> None:
    """Constant kc: mean tangential force N / (2 pi) kc ap fz (1 - cos arc) = N kc ap fz ae / (2 pi R)."""
    found, _ = engage(block(), motion(line((-40, 23.0 - width, 5), (40, 23.0 - width, 5), 160)), FLAT)
    middle = slice(len(found.rpm) // 3, 2 * len(found.rpm) // 3)
    exact = 2.0 / (2.0 * math.pi) * 1000.0 * 5.0 * 0.05 * width / 3.0
    assert np.mean(found.force_mean_n[middle, 0]) == pytest.approx(exact, rel=0.08)


def test_unknown_feed_gives_geometry_only() -> None:
    found, _ = engage(block(), motion(line((-25, 2, 5), (25, 2, 5), 4)), FLAT, rpm=0.0)
    assert found.section_mm2.max() > 29.0
    assert not found.force_peak_n.any()
    assert not found.speed_fast_mm_min.any()


# ---------------------------------------------------------------------------------------- bending


def test_bending_of_the_plain_and_the_fluted_rod() -> None:
    """F L^3 / (3 E pi d^4 / 64), carbide 600 GPa: F 20, L 30, d 6 -> 4.71570 um; fluted at 0.8 d -> 11.51294 um (derived)."""
    plain = Cutter(1, "flat", 3.0, 0.0, 2, 1e-9, 3.0, 30.0)
    fluted = Cutter(1, "flat", 3.0, 0.0, 2, 30.0, 3.0, 30.0)
    assert 20.0 * bending_mm_per_n(plain) == pytest.approx(4.71570 * MICROMETRE, rel=1e-5)
    assert 20.0 * bending_mm_per_n(fluted) == pytest.approx(11.51294 * MICROMETRE, rel=1e-5)


def test_bending_of_a_stepped_rod_agrees_with_quadrature() -> None:
    """Integral of F x^2 / (E I(x)) from the tip (unit-load method), by a fine sum."""
    cutter = Cutter(1, "ball", 2.0, 2.0, 2, 9.0, 3.0, 32.0)
    x = (np.arange(200_000) + 0.5) / 200_000 * 32.0
    stiff = 600e3 * math.pi * np.where(x < 9.0, 2 * 0.8 * 2.0, 6.0) ** 4 / 64.0
    assert bending_mm_per_n(cutter) == pytest.approx(float(np.mean(x**2 / stiff) * 32.0), rel=1e-6)


def test_breaking_force_is_where_the_stress_is_reached() -> None:
    """sigma = 32 F l / (pi d^3) at the root of the flutes, d at 0.8 of the diameter: back to 1000 N/mm^2."""
    cutter = Cutter(1, "ball", 3.0, 3.0, 2, 16.0, 3.0, 16.5)
    force = breaking_force_n(cutter)
    assert 32.0 * force * 16.0 / (math.pi * 4.8**3) == pytest.approx(1000.0, rel=1e-9)


def test_mark_is_the_part_of_bending_across_the_surface() -> None:
    found, segments = engage(block(), motion(line((-25, 2, 5), (25, 2, 5), 4)), FLAT)
    tilt = np.full(len(segments), math.radians(30.0))
    loads = loads_of(found, (FLAT,), segments.shape, tilt, True)
    k = len(segments) // 2
    share = math.sqrt(1.0 + RADIAL_SHARE[1] ** 2)
    assert loads.force_n[k, 1] == pytest.approx(share * found.force_peak_n[k, 1])
    assert loads.deflection_mm[k, 1] == pytest.approx(loads.force_n[k, 1] * bending_mm_per_n(FLAT))
    assert loads.mark_mm[k, 1] == pytest.approx(0.5 * loads.deflection_mm[k, 1])
    assert np.all(np.isnan(loads_of(found, (FLAT,), segments.shape, tilt, False).deflection_mm))


# ---------------------------------------------------------------------------------------- limits


def one_pass(**changes: object) -> PassLoad:
    pair = (1.0, 2.0)
    base = PassLoad(
        operation=1, number=7, cutter=1, line_first=30, line_last=60, length_mm=50.0, removed_mm3=20.0, depth_mm=0.3,
        depth_mean_mm=0.3, width_mm=0.4, width_mean_mm=0.4, engaged_rad=1.0, entry_rad=0.5, exit_rad=1.5,
        removal_mm3_min=200.0, removal_mean_mm3_min=180.0, chip_mm=0.01, chip_mean_mm=0.005, speed_mm_min=(1e4, 1e5),
        tangential_mean_n=pair, tangential_peak_n=pair, force_n=(10.0, 20.0), torque_nmm=pair, power_w=(5.0, 10.0),
        deflection_mm=(0.001, 0.002), mark_mm=(0.0005, 0.001), force_line=41, power_line=42, chip_line=43, speed_line=44,
        deflection_line=45,
    )  # fmt: skip
    return replace(base, **changes)


@pytest.fixture
def job(make_job: JobMaker) -> Job:
    return make_job(material="aluminium 6061", machine="mill-3")


def findings(job: Job, *passes: PassLoad) -> dict[str, object]:
    return {finding.check: finding for finding in load_findings(job, passes, (), (), 0.0)}


def test_light_pass_is_ok_everywhere(job: Job) -> None:
    assert all(finding.ok for finding in findings(job, one_pass()).values())
    assert flagged(job, one_pass()).flags == ()


@pytest.mark.parametrize(
    ("changes", "flag", "line", "says"),
    [
        ({"force_n": (500.0, 900.0)}, "force", 41, "lower the feed to about"),
        ({"power_w": (300.0, 700.0)}, "power", 42, "takes up to 700 W, over 350 W"),
        ({"chip_mm": 0.5}, "chip", 43, "turn the spindle faster"),
        ({"speed_mm_min": (0.0, 1e6)}, "speed", 44, "lower the spindle speed by 50 %"),
        ({"mark_mm": (0.01, 0.02)}, "bending", 45, "less stickout or a thicker cutter"),
    ],
)
def test_overload_names_pass_and_line_and_says_what_to_change(
    job: Job, changes: dict[str, object], flag: str, line: int, says: str
) -> None:
    heavy = one_pass(**changes)
    found = findings(job, one_pass(number=3), heavy)[f"{flag}, operation 1"]
    assert not found.ok
    assert found.warning
    assert found.line == line
    assert "operation 1, pass 7" in found.message
    assert re.search(says, found.message)
    assert flag in flagged(job, heavy).flags


def test_suggested_feed_scales_to_the_limit(job: Job) -> None:
    limit = next(limit for limit in limits_of(job, one_pass(power_w=(1.0, 700.0))) if limit.flag == "power")
    assert limit.advice.startswith("lower the feed to about 750 mm/min")  # 1500 * 350 / 700


def test_limits_of_the_job_withhold(make_job: JobMaker) -> None:
    job = make_job(material="aluminium 6061", machine="mill-3")
    tight = replace(job.cutters[0], max_force_n=15.0, max_deflection_mm=0.0015)
    own = replace(job, cutters=(tight,))
    found = findings(own, one_pass())
    assert not found["force, operation 1"].ok
    assert not found["force, operation 1"].warning
    assert not found["bending, operation 1"].warning
    assert found["bending, operation 1"].limit == 0.0015


def test_unknown_material_is_said_and_not_guessed(make_job: JobMaker) -> None:
    nan = (math.nan, math.nan)
    job = make_job(material="acetal", machine="mill-3")
    silent = one_pass(force_n=nan, power_w=nan, deflection_mm=nan, mark_mm=nan)
    found = findings(job, silent)
    assert "cutting force" in found
    assert "acetal" in found["cutting force"].message
    assert "specific_force" in found["cutting force"].message
    assert not any(check.startswith(("force,", "power,", "bending,")) for check in found)


def test_ball_on_its_axis_is_flagged(job: Job) -> None:
    assert flagged(job, one_pass(speed_mm_min=(0.0, 1e5))).flags == ("axis",)


def test_collisions_with_stock_fail_and_overhangs_warn(job: Job) -> None:
    body = BodyClearance(1, "shank", -0.8, 0.2, 12, 55, (1.0, 2.0), 11, 54)
    contact = RapidContact(9, 51, 3.0)
    found = {finding.check: finding for finding in load_findings(job, [one_pass()], [body], [contact], 5.0)}
    shank, rapids, overhangs = found["shank of T1 in stock"], found["rapids in stock"], found["overhangs"]
    assert "first on line 54" in shank.message
    assert rapids.line == 51
    assert [one.ok for one in (shank, rapids, overhangs)] == [False] * 3
    assert [one.warning for one in (shank, rapids, overhangs)] == [False, False, True]
