"""The best feed direction, against brute force with scipy and against passes as they are planned."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy.integrate import dblquad
from scipy.optimize import minimize_scalar

from anticlast import outline as outlines
from anticlast.errors import CannotPlan
from anticlast.outline import Outline
from anticlast.passes.direction import (
    best_direction,
    convex_axis_rad,
    cut_length_mm,
    most_convex_direction_rad,
    widest_strip_rad,
)
from anticlast.passes.plan import plan_operation
from anticlast.passes.scallop import second_order_step
from anticlast.saddle import Saddle
from conftest import JobMaker

R, H = 3.0, 0.005
DEGREE = math.radians(1.0)
TENTH = 0.1 * DEGREE

# Rotated, unequal, and off the saddle point: nothing is symmetric but the first.
SADDLES = {
    "plain": (Saddle(0.005, 0.005, 0.0), outlines.rectangle((60.0, 60.0))),
    "rotated": (Saddle(0.01, 0.01, math.radians(30.0)), outlines.rectangle((60.0, 30.0))),
    "flat hollow": (Saddle(0.004, 0.012, math.radians(20.0)), outlines.rectangle((40.0, 40.0), 0.0, (25.0, 30.0))),
    "deep hollow": (Saddle(0.015, 0.005, math.radians(-50.0)), outlines.rectangle((30.0, 20.0), 0.0, (10.0, -8.0))),
    "holed": (
        Saddle(0.008, 0.006, math.radians(70.0)),
        outlines.polygon(
            [(-20.0, -15.0), (20.0, -15.0), (20.0, 8.0), (5.0, 15.0), (-20.0, 15.0)],
            [[(-4.0, -3.0), (6.0, -3.0), (6.0, 3.0), (-4.0, 3.0)]],
        ),
    ),
}  # fmt: skip


@pytest.fixture(params=SADDLES, name="part")
def _part(request: pytest.FixtureRequest) -> tuple[Saddle, Outline]:
    return SADDLES[request.param]


def apart(first_rad: float, second_rad: float) -> float:
    """Angle between two directions of passes that run both ways."""
    return abs((first_rad - second_rad + math.pi / 2) % math.pi - math.pi / 2)


def slope_along(saddle: Saddle, xy: np.ndarray, direction_rad: float) -> np.ndarray:
    zx, zy = saddle.gradient(xy[:, 0], xy[:, 1])
    return np.hypot(1.0, zx * math.cos(direction_rad) + zy * math.sin(direction_rad))


def plan_step(saddle: Saddle, xy: np.ndarray, direction_rad: float) -> np.ndarray:
    """Plan step from the surface step of the torsion formula (Kim 2007): p = s sqrt(1 + z_u^2) / W."""
    step = second_order_step(saddle, R, xy, direction_rad, H)
    return step * slope_along(saddle, xy, direction_rad) / saddle.stretch(xy)


def test_widest_strip_at_a_place(part: tuple[Saddle, Outline]) -> None:
    """Brute force: scipy's bounded search of the torsion formula's stepover over all directions."""
    saddle, outline = part
    xy = outline.grid(7.0)[::3]
    for place, found in zip(xy, widest_strip_rad(saddle, xy), strict=True):
        here = place[None]

        def narrow(direction: float, here: np.ndarray = here) -> float:
            return -float(second_order_step(saddle, R, here, direction, H)[0])

        tried = np.linspace(0.0, math.pi, 19)
        start = tried[int(np.argmin([narrow(direction) for direction in tried]))]
        best = minimize_scalar(
            narrow, bounds=(start - 0.2, start + 0.2), method="bounded", options={"xatol": 1e-8}
        )
        assert apart(float(best.x), float(found)) < 0.01 * DEGREE
        # Closed form: s = sqrt(8 h / (1/R - k_max)), the strip of the length floor.
        k_max = float(saddle.principal(here)[0][0])
        assert narrow(float(found)) == pytest.approx(-math.sqrt(8.0 * H / (1.0 / R - k_max)), rel=1e-9)


def test_length_everywhere_is_the_integral_of_area_over_strip() -> None:
    """scipy.integrate.dblquad of W / s, s the torsion formula's stepover, over a rectangle."""
    for name in ("plain", "flat hollow"):
        saddle, outline = SADDLES[name]
        x0, y0, x1, y1 = outline.bounds
        for direction in (0.3, 1.9):

            def density(y: float, x: float, saddle: Saddle = saddle, direction: float = direction) -> float:
                xy = np.array([[x, y]])
                return float(saddle.stretch(xy)[0] / second_order_step(saddle, R, xy, direction, H)[0])

            wanted, _ = dblquad(density, x0, x1, y0, y1, epsabs=0.0, epsrel=1e-7)
            got = cut_length_mm(saddle, outline, R, H, direction, "everywhere")
            assert got == pytest.approx(wanted, rel=1e-6)


def brute_one_step(saddle: Saddle, outline: Outline, direction: float) -> float:
    """Smallest plan step over a fine grid, and the slope summed over it: no quadrature of ours."""
    x0, y0, x1, y1 = outline.bounds
    x, y = (np.linspace(low, high, 121) for low, high in ((x0, x1), (y0, y1)))
    edge = outline.boundary_points(0.2)
    narrowest = min(
        float(plan_step(saddle, xy, direction).min())
        for xy in (edge, np.stack(np.meshgrid(x, y), -1).reshape(-1, 2))
    )
    cell = (x1 - x0) * (y1 - y0) / 120**2
    middle = np.stack(np.meshgrid(0.5 * (x[1:] + x[:-1]), 0.5 * (y[1:] + y[:-1])), -1).reshape(-1, 2)
    return cell * float(slope_along(saddle, middle, direction).sum()) / narrowest


def brute_by_pass(saddle: Saddle, outline: Outline, direction: float) -> float:
    """Passes marched one by one: each a plan step on, by the least of the torsion formula along it."""
    c, s = math.cos(direction), math.sin(direction)
    low, high = outline.v_range(direction)
    v, total = low, 0.0
    while v < high:
        cuts = outline.clip_line(direction, v + 1e-6)
        step, length = 0.05, 0.0
        for u0, u1 in cuts:
            u = np.linspace(u0, u1, 400)
            xy = np.column_stack((u * c - v * s, u * s + v * c))
            step = float(plan_step(saddle, xy, direction).min())
            length += float(np.trapezoid(slope_along(saddle, xy, direction), u))
        total += length
        v += step
    return total


@pytest.mark.parametrize("name", ["rotated", "flat hollow", "deep hollow"])
def test_best_for_one_step_against_brute_force(name: str) -> None:
    saddle, outline = SADDLES[name]
    found = best_direction(saddle, outline, R, H, "one step")
    assert found.cut_length_mm == pytest.approx(
        brute_one_step(saddle, outline, found.direction_rad), rel=1e-3
    )
    tried = np.radians(np.arange(0.0, 180.0, 3.0))
    lengths = [brute_one_step(saddle, outline, float(direction)) for direction in tried]
    start = float(tried[int(np.argmin(lengths))])
    best = minimize_scalar(
        lambda direction: brute_one_step(saddle, outline, direction),
        bounds=(start - 0.05, start + 0.05), method="bounded", options={"xatol": 1e-4},
    )  # fmt: skip
    assert found.cut_length_mm <= float(best.fun) * 1.001
    # The length is level at the best: a few tenths of a degree are within the brute force's own grain.
    assert apart(found.direction_rad, float(best.x)) < 0.5 * DEGREE


@pytest.mark.parametrize("name", ["rotated", "flat hollow", "holed"])
def test_best_pass_by_pass_against_marched_passes(name: str) -> None:
    """Whole passes are marched, so brute lengths jump by a share of a pass; 1.5 % is about one pass of these parts."""
    saddle, outline = SADDLES[name]
    found = best_direction(saddle, outline, R, H, "pass by pass")
    assert found.cut_length_mm == pytest.approx(
        brute_by_pass(saddle, outline, found.direction_rad), rel=0.015
    )
    for degrees in range(0, 180, 20):
        assert found.cut_length_mm <= brute_by_pass(saddle, outline, math.radians(degrees)) * 1.015


def test_best_is_the_least_of_its_own_measure(part: tuple[Saddle, Outline]) -> None:
    saddle, outline = part
    for spacing in ("one step", "pass by pass", "everywhere"):
        found = best_direction(saddle, outline, R, H, spacing)
        tried = np.radians(np.arange(0.0, 180.0, 2.0))
        least = min(cut_length_mm(saddle, outline, R, H, float(d), spacing) for d in tried)
        assert found.cut_length_mm <= least * (1.0 + 1e-5)
        assert 0.0 <= found.direction_rad < math.pi


@pytest.mark.parametrize("rotate_deg", [0.0, 30.0, 115.0])
@pytest.mark.parametrize(("a", "b"), [(0.008, 0.008), (0.004, 0.009), (0.012, 0.003)])
def test_mirrored_outline_has_the_closed_form(rotate_deg: float, a: float, b: float) -> None:
    """A circle is mirrored in both of the saddle's axes: feed along the convex one, rotate + 90 degrees."""
    saddle, outline = Saddle(a, b, math.radians(rotate_deg)), outlines.circle(30.0)
    found = best_direction(saddle, outline, R, H)
    assert found.own_axis
    assert found.direction_rad == pytest.approx(math.radians((rotate_deg + 90.0) % 180.0), abs=1e-12)
    assert convex_axis_rad(saddle) == pytest.approx(found.direction_rad, abs=1e-12)
    assert apart(most_convex_direction_rad(saddle, outline), found.direction_rad) < TENTH


def test_turning_the_part_turns_the_direction() -> None:
    saddle, outline = SADDLES["flat hollow"]
    turn = math.radians(37.0)
    c, s = math.cos(turn), math.sin(turn)
    corners = np.asarray(outline.polygon.exterior.coords)[:-1]
    turned = outlines.polygon([(x * c - y * s, x * s + y * c) for x, y in corners])
    first = best_direction(saddle, outline, R, H)
    second = best_direction(replace(saddle, rotate_rad=saddle.rotate_rad + turn), turned, R, H)
    assert apart(second.direction_rad, first.direction_rad + turn) < TENTH
    assert second.cut_length_mm == pytest.approx(first.cut_length_mm, rel=1e-5)


def test_scallop_does_not_matter_and_lengths_go_with_its_root() -> None:
    saddle, outline = SADDLES["deep hollow"]
    first, second = (best_direction(saddle, outline, R, height) for height in (0.002, 0.018))
    assert apart(first.direction_rad, second.direction_rad) < TENTH
    assert first.cut_length_mm / second.cut_length_mm == pytest.approx(3.0, rel=1e-9)


def test_least_strip_is_the_narrowest_stepover() -> None:
    saddle, outline = SADDLES["rotated"]
    found = best_direction(saddle, outline, R, H)
    xy = np.vstack((outline.boundary_points(0.3), outline.grid(0.3)))
    narrowest = second_order_step(saddle, R, xy, found.direction_rad, H).min()
    assert found.least_strip_mm == pytest.approx(float(narrowest), rel=1e-3)


def test_most_convex_is_the_least_mean_curvature_and_the_limit_of_small_balls(
    part: tuple[Saddle, Outline],
) -> None:
    saddle, outline = part
    xy = outline.grid(0.5)
    weight = saddle.stretch(xy)

    def mean(direction: float) -> float:
        return float(np.average(saddle.along(xy, direction)[0], weights=weight))

    found = most_convex_direction_rad(saddle, outline)
    best = minimize_scalar(mean, bounds=(found - 0.5, found + 0.5), method="bounded", options={"xatol": 1e-6})
    # The grid of 0.5 mm leaves the edge out by up to half a cell.
    assert apart(found, float(best.x)) < 0.5 * DEGREE
    assert mean(found) <= min(mean(math.radians(degrees)) for degrees in range(180)) + 1e-6
    small = best_direction(saddle, outline, 0.01, 1e-5, "everywhere")
    assert apart(found, small.direction_rad) < 0.2 * DEGREE


@pytest.mark.parametrize(
    "surface",
    [
        {"a": 0.012, "extra_part": "b = 0.004\nrotate = 25.0"},
        {"a": 0.006, "extra_part": "b = 0.012\nrotate = -60.0"},
        {"a": 0.01, "extra_part": ""},
    ],
)
def test_planned_passes_are_shortest_along_it(make_job: JobMaker, surface: dict[str, object]) -> None:
    """The planner's exact cusps against the leading order: no direction 15 degrees or more off is shorter.

    Passes are whole, so a pass's length (2 % here) is allowed.
    """
    job = make_job(
        machine="mill-3", outline='shape = "circle"\ndiameter = 22.0', top=8.0, bottom=-8.0, pattern="graded",
        limit="scallop = 0.003", tolerance=0.002, stock_extra="", **surface,
    )  # fmt: skip
    (operation,) = job.operations
    saddle = Saddle.of(job.part)
    found = best_direction(saddle, job.part.outline, operation.cutter.radius_mm, 0.003)

    def planned(direction: float) -> float:
        turned = replace(operation, direction_rad=direction)
        return plan_operation(
            job, turned, lambda axis: np.tile((0.0, 0.0, 1.0), (len(axis), 1))
        ).cut_length_mm

    best = planned(found.direction_rad)
    assert best == pytest.approx(found.cut_length_mm, rel=0.03)
    others = [planned(found.direction_rad + math.radians(off)) for off in (-75, -45, -15, 15, 45, 75, 90)]
    assert best <= min(others) * 1.02
    assert best < max(others) * 0.99


def test_what_cannot_be_is_refused() -> None:
    saddle, outline = Saddle(0.02, 0.02, 0.0), outlines.circle(20.0)
    with pytest.raises(CannotPlan, match="does not fit"):
        best_direction(saddle, outline, 25.5, H)
    with pytest.raises(CannotPlan, match="impossible"):
        best_direction(saddle, outline, R, 3.5)
    with pytest.raises(ValueError, match="spacing"):
        cut_length_mm(saddle, outline, R, H, 0.0, "by feel")  # type: ignore[arg-type]
