"""What the cutter meets: arcs, depths, widths, chips and speeds of cuts whose geometry is known in closed form."""

from __future__ import annotations

import math

import numpy as np
import pytest

from anticlast import outline
from anticlast.cutter import Cutter
from anticlast.records import Floats
from anticlast.stock import _field_kernels, _load_kernels
from anticlast.stock.clearance import clearance_through_time, first_contact, slack_mm
from anticlast.stock.field import LEAST_COSINE
from anticlast.stock.rings import ANGLES, RINGS, rings_of
from stock_bench import BALL, BULL, FLAT, SADDLE, block, engage, line, motion

STEP_DEG = 360.0 / ANGLES  # arcs are told in whole steps
INCH = 25.4


def middle(values: Floats) -> Floats:
    """The middle third of a pass: no ends."""
    return values[len(values) // 3 : 2 * len(values) // 3]


# ---------------------------------------------------------------------------------------- arcs and sections


def test_slot_engages_half_a_turn() -> None:
    found, _ = engage(block(), motion(line((-25, 2, 5), (25, 2, 5), 4)), FLAT)
    assert np.all(np.degrees(middle(found.arc_rad)) == pytest.approx(180.0, abs=2.1 * STEP_DEG))
    assert np.all(np.degrees(middle(found.entry_rad)) == pytest.approx(0.0, abs=1.1 * STEP_DEG))
    assert np.all(middle(found.depth_mm) == pytest.approx(5.0, abs=1e-9))
    assert middle(found.width_mm).mean() == pytest.approx(6.0, rel=0.005)
    # Q = depth width feed.
    assert middle(found.removal_mm3_min).mean() == pytest.approx(5.0 * 6.0 * 600.0, rel=0.005)
    # Feed per tooth 600 / (2 * 6000), met in full straight ahead.
    assert middle(found.chip_max_mm).max() == pytest.approx(0.05, rel=0.002)
    assert middle(found.speed_fast_mm_min).max() == pytest.approx(2.0 * math.pi * 3.0 * 6000.0, rel=1e-9)


@pytest.mark.parametrize("moves", [2, 320], ids=["long moves", "short moves"])
@pytest.mark.parametrize("width", [1.0, 2.0, 3.0])
def test_side_milling_engages_acos_of_the_width(width: float, moves: int) -> None:
    """Arc acos(1 - a_e / R); stock on the right of the feed: from 180 degrees less the arc, to 180 (climb, M3)."""
    found, _ = engage(block(), motion(line((-40, 23.0 - width, 5), (40, 23.0 - width, 5), moves)), FLAT)
    arc = math.degrees(math.acos(1.0 - width / 3.0))
    assert np.degrees(np.median(middle(found.arc_rad))) == pytest.approx(arc, abs=1.5 * STEP_DEG)
    assert np.degrees(np.median(middle(found.exit_rad))) == pytest.approx(180.0, abs=1.1 * STEP_DEG)
    # A wall is known to a cell at most: a fraction of it on the mean of a window of ten cells.
    assert np.median(middle(found.width_mm)) == pytest.approx(width, abs=0.1)
    back, _ = engage(block(), motion(line((40, 23.0 - width, 5), (-40, 23.0 - width, 5), moves)), FLAT)
    assert np.degrees(np.median(middle(back.entry_rad))) == pytest.approx(0.0, abs=1.1 * STEP_DEG)


def test_a_turned_part_meets_the_same() -> None:
    """Side milling along Y against the same along X: the grid's own direction must not show."""
    along_x, _ = engage(block(), motion(line((-40, 21.0, 5), (40, 21.0, 5), 80)), FLAT)
    along_y, _ = engage(block(), motion(line((31.0, -30, 5), (31.0, 30, 5), 80)), FLAT)
    assert np.median(middle(along_y.section_mm2)) == pytest.approx(
        np.median(middle(along_x.section_mm2)), rel=0.05
    )


def test_finishing_takes_stepover_times_depth_less_the_cusp() -> None:
    """Section s ap - cusp, cusp = R s - [(s/2) sqrt(R^2 - s^2/4) + R^2 asin(s / 2R)] (derived: strip under the arcs)."""
    radius, step, depth = 3.0, 0.5, 0.3
    cusp = radius * step - (
        step / 2 * math.sqrt(radius**2 - step**2 / 4) + radius**2 * math.asin(step / (2 * radius))
    )
    assert cusp == pytest.approx(1.737924e-3, rel=1e-6)
    field = block()
    sections = []
    for y in np.arange(-6.0, 6.0, step):
        found, _ = engage(field, motion(line((-25, y, 10.0 - depth), (25, y, 10.0 - depth), 150)), BALL)
        sections.append(np.median(middle(found.section_mm2)))
    assert np.mean(sections[8:]) == pytest.approx(step * depth - cusp, rel=0.01)
    # Depth is that of the stock, width (section over depth) the stepover.
    assert np.median(middle(found.depth_mm)) == pytest.approx(depth, abs=0.002)
    assert np.median(middle(found.width_mm)) == pytest.approx(step, rel=0.03)


def test_depth_along_the_normal_of_the_surface() -> None:
    """A ball leaned 20 degrees under a flat top, 0.4 mm over the saddle point.

    The saddle falls away aside by a y^2, over sqrt(2 R t) that the ball is wide at depth t: 0.4 (1 + 2 R a) at most.
    """
    field = block(0.25, top_mm=0.4)
    axis = [math.sin(math.radians(20.0)), 0.0, math.cos(math.radians(20.0))]
    xy = np.column_stack((np.linspace(-12, 12, 60), np.full(60, 0.0)))
    tips = SADDLE.offset(xy, 3.0) - 3.0 * np.array(axis)
    found, _ = engage(field, motion(tips, [axis] * 60), BALL, along_normal=True)
    k = len(found.depth_mm) // 2
    assert found.depth_mm[k] == pytest.approx(0.4 * (1.0 + 2.0 * 3.0 * 0.005), abs=0.005)


def test_nothing_is_met_in_air_and_on_a_second_pass() -> None:
    field = block()
    air, _ = engage(field, motion(line((-25, 0, 12), (25, 0, 12), 50)), FLAT)
    assert not air.section_mm2.any()
    assert not air.force_peak_n.any()
    moves = motion(line((-25, 0, 6), (25, 0, 6), 50))
    engage(field, moves, BULL)
    again, _ = engage(field, moves, BULL)
    assert again.volume_mm3.sum() < 1e-9
    assert not again.force_peak_n.any()


# ---------------------------------------------------------------------------------------- the ball's effective diameter


@pytest.mark.parametrize(
    ("diameter", "depth", "effective"),
    [(0.25, 0.005, 0.070), (0.375, 0.035, 0.218), (0.5, 0.01, 0.140), (0.5, 0.05, 0.300), (0.75, 0.025, 0.269),
     (1.0, 0.1, 0.600), (1.25, 0.25, 1.000)],
)  # fmt: skip
def test_effective_diameter_of_the_makers_table(diameter: float, depth: float, effective: float) -> None:
    """Dapra, Ball nose feed/speed compensation, Table 1 (inch): diameter and depth to effective diameter, to its last digit."""
    radius = diameter / 2 * INCH
    ball = Cutter(1, "ball", radius, radius, 2, 4 * radius, radius, 6 * radius)
    assert ball.effective_diameter_mm(depth * INCH) == pytest.approx(effective * INCH, abs=0.0006 * INCH)


@pytest.mark.parametrize(("diameter", "depth", "factor"), [(0.5, 0.05, 1.7), (1.0, 0.1, 1.7)])
def test_slot_with_a_ball_meets_the_makers_table(diameter: float, depth: float, factor: float) -> None:
    """Fastest engaged point at pi D_e n, and the thickest chip thinned to f_z D_e / D: Dapra Table 2 gives D / D_e, 1.7.

    Points stand 5 degrees apart on the ball: D_e is known to the ring, and the chip to half a ring.
    """
    radius = diameter / 2 * INCH
    ball = Cutter(1, "ball", radius, radius, 2, 3 * radius, radius, 6 * radius)
    deep = depth * INCH
    found, _ = engage(block(), motion(line((-20, 0, 10 - deep), (20, 0, 10 - deep), 4)), ball)
    effective = ball.effective_diameter_mm(deep)
    ring = 2.0 * radius * math.radians(5.0)
    speed = np.median(middle(found.speed_fast_mm_min))
    assert speed == pytest.approx(math.pi * effective * 6000.0, abs=math.pi * ring * 6000.0)
    thinned = 0.05 / np.median(middle(found.chip_max_mm))
    assert thinned == pytest.approx(factor, abs=0.1)
    assert np.all(middle(found.speed_slow_mm_min) == 0.0)


def test_tilted_ball_does_not_cut_on_its_axis() -> None:
    """D = 10, ap = 0.3, leaned 30 degrees sideways: engaged by acos(1 - 2 ap / D) to both sides of the contact at R sin 30.

    Slowest at 2 R sin(30 - 19.9), fastest at D sin(30 + 19.9) = 7.65 (methods of the tilted effective diameter).
    """
    ball = Cutter(1, "ball", 5.0, 5.0, 2, 20.0, 5.0, 30.0)
    lean = math.radians(30.0)
    axis = np.array([0.0, math.sin(lean), math.cos(lean)])
    tips = line((-20, 0, 14.7), (20, 0, 14.7), 8) - 5.0 * axis
    found, _ = engage(block(), motion(tips, np.tile(axis, (9, 1))), ball, rpm=6000.0)
    depth_angle = math.acos(1.0 - 2.0 * 0.3 / 10.0)
    ring = 2.0 * 5.0 * math.radians(5.0) * math.pi * 6000.0
    fast = 10.0 * math.sin(lean + depth_angle) * math.pi * 6000.0
    slow = 10.0 * math.sin(lean - depth_angle) * math.pi * 6000.0
    assert np.median(middle(found.speed_fast_mm_min)) == pytest.approx(fast, abs=ring)
    assert np.median(middle(found.speed_slow_mm_min)) == pytest.approx(slow, abs=ring)
    assert np.median(middle(found.speed_slow_mm_min)) > 0.0


# ---------------------------------------------------------------------------------------- kernels and their twins


def test_rings_cover_the_cutter() -> None:
    """Rings add up to the surface: ball 2 pi R^2 and its flutes 2 pi R h (Archimedes), bull by Pappus, flat by its disc."""
    for cutter in (FLAT, BALL, BULL):
        rings = rings_of(cutter)
        assert len(rings.edge_mm) == RINGS
        area = np.sum(2.0 * math.pi * rings.place[:, 1] * rings.edge_mm)
        corner, disc = cutter.corner_radius_mm, cutter.radius_mm - cutter.corner_radius_mm
        end = math.pi * disc**2 + 2.0 * math.pi * (disc * corner * math.pi / 2 + corner**2)
        side = 2.0 * math.pi * cutter.radius_mm * (cutter.flute_length_mm - corner)
        assert area == pytest.approx(end + side, rel=0.001)
        normal = np.hypot(rings.place[:, 2], rings.place[:, 3])
        assert set(np.round(normal, 12)) <= {0.0, 1.0}


def _station_twin(
    hits: np.ndarray, cutter: Cutter, tooth_mm: float, law: tuple[float, float]
) -> dict[str, float]:
    """Upright cutter, feed along x, by plain loops: tangential force over a turn, its mean, its peak, the section."""
    rings = rings_of(cutter)
    force = np.zeros(ANGLES)
    section = torque = 0.0
    for ring in range(RINGS):
        _, radius, radial, _ = rings.place[ring]
        for m in range(ANGLES):
            angle = 2.0 * math.pi * (m + 0.5) / ANGLES
            share = radial * math.sin(angle)
            if hits[ring, m] and share > LEAST_COSINE:
                chip = tooth_mm * share
                one = (law[0] + law[1] / chip) * chip * rings.edge_mm[ring]
                force[m] += one
                torque += one * radius * cutter.flutes / ANGLES
                section += share * radius * rings.edge_mm[ring] * 2.0 * math.pi / ANGLES
    teeth = [
        sum(force[(m + t * ANGLES // cutter.flutes) % ANGLES] for t in range(cutter.flutes))
        for m in range(ANGLES)
    ]
    return {
        "mean": force.sum() * cutter.flutes / ANGLES,
        "peak": max(teeth),
        "section": section,
        "torque": torque,
    }


@pytest.mark.parametrize("cutter", [FLAT, BALL, BULL], ids=lambda cutter: cutter.shape)
def test_station_loads_agree_with_their_twin(cutter: Cutter) -> None:
    rng = np.random.default_rng(6)
    hits = (rng.uniform(size=(1, RINGS, ANGLES)) < 0.4).astype(np.uint8)
    frame = np.array([[0.0, 0, 0, 0, 0, 1, 0, 1, 0, 1, 0, 0, 0, 0, 0]])
    rings = rings_of(cutter)
    out = np.zeros((1, _load_kernels.COLUMNS))
    _load_kernels.station_loads(
        0, 1, hits, frame, np.zeros(1, np.int64), rings.place[None], rings.edge_mm[None], rings.inner_mm[None],
        rings.outer_mm[None], rings.rim[None], np.array([cutter.flutes]), np.array([0.04]), np.array([[0.0, 0.0, 767.01, 27.7]]),
        LEAST_COSINE, out,
    )  # fmt: skip
    twin = _station_twin(hits[0], cutter, 0.04, (767.01, 27.7))
    assert out[0, _load_kernels.AREA] == pytest.approx(twin["section"], rel=1e-9)
    assert out[0, _load_kernels.MEAN_HIGH] == pytest.approx(twin["mean"], rel=1e-9)
    assert out[0, _load_kernels.PEAK_HIGH] == pytest.approx(twin["peak"], rel=1e-9)
    assert out[0, _load_kernels.TORQUE_HIGH] == pytest.approx(twin["torque"], rel=1e-9)


def test_front_points_agree_with_their_twin() -> None:
    """A leaned bull before a step in the stock: every point asked one by one whether it stands in material."""
    field = block(0.5)
    field.high_mm[0][:, : field.grid.columns // 2] = 4.0
    axis = np.array([0.2, -0.1, 1.0])
    axis /= np.linalg.norm(axis)
    feed = np.array([0.8, 0.6, 0.0])
    across = np.cross(axis, feed)
    across /= np.linalg.norm(across)
    point = np.array([0.3, 0.2, 6.5])
    stations = np.concatenate((point, axis, across, feed, np.zeros(3)))[None, :]
    rings = rings_of(BULL)
    grid = (field.grid.u0_mm, field.grid.v0_mm, field.grid.spacing_mm, 0)
    angle = 2.0 * math.pi * (np.arange(ANGLES) + 0.5) / ANGLES
    circle = np.column_stack((np.cos(angle), np.sin(angle)))
    hits = np.zeros((RINGS, ANGLES), np.uint8)
    ahead = 0.1
    _field_kernels.sample_front(
        0, stations, rings.place, circle, grid, (-1, field.grid.rows), 50.0, ahead, LEAST_COSINE, field.high_mm, field.low_mm,
        field.count, hits,
    )  # fmt: skip
    forward = np.cross(across, axis)
    twin = np.zeros_like(hits)
    for ring, (height, radius, radial, axial) in enumerate(rings.place):
        for m in range(ANGLES):
            out = circle[m, 0] * across + circle[m, 1] * forward
            normal = radial * out + axial * axis
            if normal @ feed < LEAST_COSINE:
                continue
            place = (
                point
                + height * axis
                + radius * out
                + ahead * (1.0 + 2.0 * (1.0 - normal[2] ** 2) ** 2) * feed
            )
            row = math.floor((place[1] - grid[1]) / grid[2])
            twin[ring, m] = _field_kernels.in_material(
                *place, grid, row, field.high_mm, field.low_mm, field.count
            )
    assert np.array_equal(hits, twin)
    assert 100 < hits.sum() < 0.6 * hits.size


# ---------------------------------------------------------------------------------------- clearance through time

LONG = Cutter(1, "flat", 3.0, 0.0, 2, 10.0, 3.0, 20.0, ((8.0, 20.0),))


def bodies(moves: object) -> dict[str, object]:
    found, contacts = clearance_through_time(block(), moves, [LONG], SADDLE)  # type: ignore[arg-type]
    return {**{body.body: body for body in found}, "contacts": contacts}


def test_shank_in_its_own_slot_is_clear_and_holder_stands_over_it() -> None:
    """5 mm deep with 10 mm of flutes: shank 5 mm over the top, holder face 15 mm (closed form). Rapids 2.3 mm over the top."""
    found = bodies(
        motion(
            [[-45, 2, 30], [-45, 2, 5], [40, 2, 5], [40, 2, 30], [0, 8, 30], [0, 8, 12.3], [0, 8, 30]],
            rapid=[1, 1, 0, 1, 1, 1, 1],
        )
    )
    slack = slack_mm(0.25, 15.0)
    assert found["shank"].distance_mm == pytest.approx(5.0, abs=slack)
    assert found["holder 1"].distance_mm == pytest.approx(15.0, abs=slack)
    assert found["cutting end"].distance_mm == pytest.approx(2.3, abs=slack)
    assert found["cutting end"].line in (6, 7)
    assert found["contacts"] == ()
    assert all(body.first_row == -1 for name, body in found.items() if name != "contacts")


def test_slot_deeper_than_the_flutes_is_found() -> None:
    """13 mm deep with 10 mm of flutes: the shank runs 3 mm deep in stock, a radius of 3 mm into it; holder 7 mm over the top."""
    found = bodies(motion([[-45, 2, 30], [-45, 2, -3], [40, 2, -3], [40, 2, 30]], rapid=[1, 1, 0, 1]))
    assert found["shank"].distance_mm == pytest.approx(-3.0, abs=slack_mm(0.25, 0.0))
    assert found["shank"].first_line == 3
    assert found["holder 1"].distance_mm == pytest.approx(7.0, abs=slack_mm(0.25, 7.0))


def test_rapid_into_stock_is_found_with_its_line_and_volume() -> None:
    """Down to 0.5 mm below the top at rapid: pi R^2 / 2 taken; and once the stock is gone the same rapid is free."""
    moves = motion([[-45, 2, 30], [0, 2, 30], [0, 2, 9.5], [0, 2, 30], [0, 2, 9.5]], rapid=[1, 1, 1, 1, 1])
    contacts = bodies(moves)["contacts"]
    assert [contact.line for contact in contacts] == [3]
    assert contacts[0].volume_mm3 == pytest.approx(math.pi * 9.0 * 0.5, rel=0.01)
    first = first_contact(block(), moves, [LONG], SADDLE)
    assert first == contacts[0]
    free = motion([[-45, 2, 30], [0, 2, 30], [0, 2, 11.0], [0, 2, 30]], rapid=[1, 1, 1, 1])
    assert first_contact(block(), free, [LONG], SADDLE) is None


def test_holder_beside_a_wall_is_seen_sideways() -> None:
    """Holder of radius 8 below the top of a wall, its axis 11 mm from it: 3 mm between them, none of it vertical."""
    low = Cutter(1, "flat", 3.0, 0.0, 2, 4.0, 3.0, 6.0, ((8.0, 20.0),))
    shape = outline.rectangle((30.0, 40.0), center_mm=(15.0, 0.0))
    moves = motion([[-11.0, -10.0, 0.0], [-11.0, 10.0, 0.0]])
    found, _ = clearance_through_time(block(shape=shape), moves, [low], SADDLE)
    holder = next(body for body in found if body.body == "holder 1")
    assert holder.distance_mm == pytest.approx(3.0, abs=slack_mm(0.25, 3.0))
    assert holder.at_mm[0] == pytest.approx(0.0, abs=0.3)


def test_tilted_holder_against_brute_force() -> None:
    """Twin: many points of every column against every one of 161 poses; nothing is cut, the ball stays above."""
    cutter = Cutter(1, "ball", 3.0, 3.0, 2, 10.0, 2.5, 20.0, ((8.0, 20.0), (14.0, 20.0)))
    field = block(0.5)
    share = np.linspace(0.0, 1.0, 41)
    angle = np.radians(20.0 + 40.0 * share)
    axes = np.column_stack((np.sin(angle), 0.2 * np.sin(angle), np.cos(angle)))
    axes /= np.linalg.norm(axes, axis=1, keepdims=True)
    tips = np.column_stack((-25.0 + 30.0 * share, 4.0 * share, 13.0 + 2.0 * np.sin(6.0 * share)))
    found, _ = clearance_through_time(field, motion(tips, axes), [cutter], SADDLE)
    x, y = (values[field.count > 0] for values in field.grid.middles_xy())
    points = np.concatenate(
        [np.column_stack((x, y, np.full(len(x), z))) for z in (10.0, 9.5, 9.0, 8.0, 5.0, 0.0)]
    )
    fine = np.linspace(0.0, 1.0, 161)
    tip = np.column_stack([np.interp(fine, share, column) for column in tips.T])
    axis = np.column_stack([np.interp(fine, share, column) for column in axes.T])
    axis /= np.linalg.norm(axis, axis=1, keepdims=True)
    for body, shape in zip(found[1:], cutter.bodies()[1:], strict=True):
        least = math.inf
        for k in range(len(fine)):
            offset = points - tip[k]
            height = offset @ axis[k]
            out = (
                np.sqrt(np.maximum(0.0, np.einsum("ij,ij->i", offset, offset) - height**2)) - shape.radius_mm
            )
            end = np.maximum(shape.low_mm - height, height - shape.high_mm)
            apart = np.hypot(np.maximum(out, 0.0), np.maximum(end, 0.0)) + np.minimum(
                np.maximum(out, end), 0.0
            )
            least = min(least, float(apart.min()))
        assert body.distance_mm == pytest.approx(least, abs=body.slack_mm), body.body
        assert 0 < body.line <= 41
