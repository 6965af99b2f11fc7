"""Roughing in layers: where the cutter may stand, engagement, links, ramps, and what is left. Brute force as truth."""

from __future__ import annotations

import math

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st

from anticlast import pipeline
from anticlast.cutter import Cutter
from anticlast.errors import BadInput, CannotPlan
from anticlast.job import parse_job
from anticlast.passes import ramp
from anticlast.passes.layers import plan_layers
from anticlast.passes.rough import limits
from anticlast.passes.rough.contour import LEVEL_MM, Grid
from anticlast.passes.rough.field import TipField
from anticlast.passes.rough.layout import layout
from anticlast.passes.rough.peel import Bite, grown, peel
from anticlast.passes.rough.walk import Walk
from anticlast.records import CutterPath, Job, Purpose
from anticlast.saddle import Saddle
from conftest import job_text
from raster_stock import NOTHING, RasterStock

MICROMETRE = 1e-3

CUTTERS = {
    "flat": Cutter(1, "flat", 5.0, 0.0, 2, 20.0, 5.0, 40.0),
    "bull": Cutter(1, "bull", 5.0, 1.5, 2, 20.0, 5.0, 40.0),
    "ball": Cutter(1, "ball", 4.0, 4.0, 2, 20.0, 4.0, 40.0),
}

ROUGH = """\
[job]
name = "rough"
units = "mm"
[part]
a = 0.01
[part.outline]
{outline}
[stock]
material = "acetal"
top = 6.0
bottom = -14.0
margin = {margin}
{stock}
[machine]
file = "mill-3"
part_origin = [0.0, 0.0, 40.0]
[[cutter]]
number = 1
{cutter}
flute_length = 20.0
stickout = 40.0
holder = [[16.0, 20.0], [32.0, 25.0]]
[[cutter]]
number = 2
shape = "flat"
diameter = 4.0
flute_length = 16.0
stickout = 40.0
[[operation]]
does = "rough"
cutter = 1
allowance = 0.4
spindle = 9000
feed = 1000
{more}
"""
SHAPES = {
    "rectangle": 'shape = "rectangle"\nsize = [36.0, 30.0]',
    "circle": 'shape = "circle"\ndiameter = 36.0',
    "L": 'shape = "polygon"\npoints = [[-18.0, -15.0], [18.0, -15.0], [18.0, 0.0], [0.0, 0.0], [0.0, 15.0], [-18.0, 15.0]]',
    "holed": 'shape = "polygon"\npoints = [[-18.0, -15.0], [18.0, -15.0], [18.0, 15.0], [-18.0, 15.0]]\n'
    "holes = [[[-7.0, -7.0], [7.0, -7.0], [7.0, 7.0], [-7.0, 7.0]]]",
}
SORTS = {
    "flat": 'shape = "flat"\ndiameter = 10.0',
    "bull": 'shape = "bull"\ndiameter = 10.0\ncorner_radius = 1.5',
    "ball": 'shape = "ball"\ndiameter = 8.0',
}


def rough_job(
    outline: str = "rectangle", cutter: str = "flat", more: str = "", margin: float = 3.0, stock: str = ""
) -> Job:
    text = ROUGH.format(outline=SHAPES[outline], cutter=SORTS[cutter], more=more, margin=margin, stock=stock)
    return parse_job(text, "job.toml")


def plan(job: Job, index: int = 0) -> CutterPath:
    return plan_layers(job, job.operations[index], lambda axis: axis)


def bottom_points(cutter: Cutter, turns: int = 48) -> np.ndarray:
    """Points (n, 3) on the cutting end and a little of the flutes, from the tip."""
    heights = np.append(np.linspace(0.0, cutter.corner_radius_mm, 12), cutter.corner_radius_mm + 3.0)
    radii = np.array([limits.radius_at_mm(cutter, height) for height in heights])
    turn = np.linspace(0.0, 2.0 * math.pi, turns, endpoint=False)
    ring = np.stack((np.cos(turn), np.sin(turn), np.zeros(turns)), axis=1)
    points = [radius * ring + (0.0, 0.0, height) for radius, height in zip(radii, heights, strict=True)]
    return np.vstack((*points, [[0.0, 0.0, 0.0]]))


def tips(path: CutterPath) -> np.ndarray:
    return np.concatenate([stretch.tip_mm for stretch in path.stretches])


# ------------------------------------------------------------------------------------ where the cutter may stand


@pytest.mark.parametrize("sort", CUTTERS)
@pytest.mark.parametrize("allowance", [0.0, 0.4])
def test_lowest_tip_height_is_that_of_a_sampled_cutter(sort: str, allowance: float) -> None:
    """The cutter grown by the allowance, sampled in 1200 x 1500 points: never higher, and lower by the sampling only."""
    cutter, saddle = CUTTERS[sort], Saddle(0.006, 0.011, 0.4)
    xy = np.random.default_rng(4).uniform(-30.0, 30.0, (12, 2))
    height = TipField.of_cutter(saddle, cutter, allowance).height(xy)
    radius = np.linspace(0.0, cutter.radius_mm + allowance, 1200)
    corner = cutter.corner_radius_mm + allowance
    out = np.maximum(radius - (cutter.radius_mm - cutter.corner_radius_mm), 0.0)
    profile = corner - np.sqrt(np.maximum(corner**2 - out**2, 0.0))
    turn = np.linspace(0.0, 2.0 * math.pi, 1500)
    for place, found in zip(xy, height, strict=True):
        x = place[0] + radius[:, None] * np.cos(turn)
        y = place[1] + radius[:, None] * np.sin(turn)
        brute = float((saddle.height(x, y) - profile[:, None]).max()) + allowance
        assert -1e-9 <= found - brute <= 0.03 * MICROMETRE


def test_slope_of_the_lowest_tip_height_agrees_with_differences() -> None:
    field = TipField.of_cutter(Saddle(0.006, 0.011, 0.4), CUTTERS["bull"], 0.3)
    xy = np.random.default_rng(5).uniform(-30.0, 30.0, (40, 2))
    _, slope = field.height_and_slope(xy)
    step = 1e-4
    for axis in (0, 1):
        shift = step * np.eye(2)[axis]
        rate = (field.height(xy + shift) - field.height(xy - shift)) / (2.0 * step)
        assert np.abs(rate - slope[:, axis]).max() < 1e-5


@pytest.mark.parametrize("level", [3.0, 0.4, 0.0, -2.5])
def test_region_of_a_layer_against_the_height_itself(level: float) -> None:
    field = TipField.of_cutter(Saddle(0.008, 0.008, 0.3), CUTTERS["flat"], 0.4)
    grid = Grid.over((-35.0, -30.0, 35.0, 30.0), 0.8, field.height_and_slope)
    region = grid.below(level)
    xy = np.random.default_rng(6).uniform((-33.0, -28.0), (33.0, 28.0), (4000, 2))
    height = field.height(xy)
    inside = shapely.contains_xy(region, xy[:, 0], xy[:, 1])
    assert height[inside].max() <= level + LEVEL_MM
    # What is given away by chords: less than a hundredth of a millimetre in height, not regions.
    assert height[~inside].min() >= level - 0.01
    rim = shapely.get_coordinates(shapely.segmentize(shapely.boundary(region), 0.05))
    on_box = shapely.distance(shapely.boundary(grid.inner), shapely.points(rim)) < 1e-9
    assert field.height(rim[~on_box]).max() <= level + LEVEL_MM


@pytest.mark.parametrize("sort", CUTTERS)
@pytest.mark.parametrize(("a", "b"), [(0.01, 0.01), (0.002, 0.02), (0.02, 0.003)])
def test_lowest_tip_height_has_neither_summit_nor_lowest_point(sort: str, a: float, b: float) -> None:
    """So a region below a level is known by its rim, and reaches out of the blank."""
    field = TipField.of_cutter(
        Saddle(a, b, 0.0), CUTTERS[sort], 0.3
    )  # its valley along the grid, lest nodes miss it
    z = Grid.over((-25.0, -25.0, 25.0, 25.0), 0.5, field.height_and_slope).z_mm
    around = np.stack([np.roll(np.roll(z, i, 0), j, 1) for i in (-1, 0, 1) for j in (-1, 0, 1) if i or j])
    inner = (slice(1, -1), slice(1, -1))
    assert not np.any((z < around.min(axis=0))[inner])
    assert not np.any((z > around.max(axis=0))[inner])


# ------------------------------------------------------------------------------------ the whole operation


@pytest.mark.parametrize(
    ("outline", "cutter"), [("rectangle", "flat"), ("circle", "bull"), ("holed", "ball"), ("L", "flat")]
)
def test_no_point_of_the_cutter_comes_nearer_than_the_allowance(outline: str, cutter: str) -> None:
    job = rough_job(outline, cutter)
    path = plan(job)
    operation = job.operations[0]
    middles = np.concatenate([0.5 * (stretch.tip_mm[1:] + stretch.tip_mm[:-1]) for stretch in path.stretches])
    rows = np.vstack((tips(path), middles))
    some = np.random.default_rng(7).choice(rows[rows[:, 2] < job.stock.top_mm], 1500)
    points = (some[:, None, :] + bottom_points(operation.cutter)).reshape(-1, 3)
    _, distance = Saddle.of(job.part).closest(points)
    assert distance.min() >= operation.allowance_mm - 0.2 * MICROMETRE


def cut_raster(job: Job, path: CutterPath, stock: RasterStock | None = None):
    stock = RasterStock(job.stock.outline, job.stock.top_mm) if stock is None else stock
    return stock, *stock.run(path, limits.cut_radius_mm(path.operation))


def left_over(job: Job, stock: RasterStock) -> np.ndarray:
    """Stock over the surface along its normal at the raster's nodes inside the outline (n,)."""
    xy = stock.xy.reshape(-1, 2)
    inside = job.part.outline.contains(xy)
    saddle = Saddle.of(job.part)
    return (stock.height.ravel()[inside] - saddle.height(*xy[inside].T)) / saddle.stretch(xy[inside])


@pytest.mark.parametrize("outline", ["rectangle", "circle", "L", "holed"])
def test_engagement_and_what_is_left_of_an_open_blank(outline: str) -> None:
    job = rough_job(outline)
    operation = job.operations[0]
    path = plan(job)
    stock, cuts, volume = cut_raster(job, path)
    radius, width = limits.cut_radius_mm(operation), limits.cut_width_mm(operation)
    straight = math.degrees(math.acos(1.0 - width / radius))
    # The limit holds on straight runs; where passes turn into a corner a little more is engaged. Never a slot.
    assert np.quantile(cuts.angle_deg, 0.95) <= straight
    assert cuts.angle_deg.max() <= 1.6 * straight
    assert np.quantile(cuts.width_mm, 0.99) <= 0.5 * 2.0 * radius
    assert cuts.width_mm.max() < 0.9 * 2.0 * radius
    assert volume[Purpose.LINK] <= 0.5
    assert volume[Purpose.ENTRY] == 0.0
    left = left_over(job, stock)
    assert left.min() >= operation.allowance_mm - 0.2 * MICROMETRE
    assert (
        left.max() <= limits.left_mm(operation, job.part) + 0.1
    )  # a cell of the raster on the steepest slope, 0.36
    assert f"{limits.left_mm(operation, job.part):.2f} mm are left" in path.notes[0]


def test_volume_taken_is_that_of_the_layers() -> None:
    """Raster against the plan areas of the layers by shapely: sum of area times thickness."""
    job = rough_job()
    found = layout(job.part, job.stock, job.operations, job.clearance_mm)
    _, _, volume = cut_raster(job, plan(job))
    levels = [z for z, _ in found.after.cleared]
    areas = [shapely.intersection(area, job.stock.outline.polygon).area for _, area in found.after.cleared]
    above = [job.stock.top_mm, *levels[:-1]]
    closed = sum(area * (high - low) for area, high, low in zip(areas, above, levels, strict=True))
    assert sum(volume.values()) == pytest.approx(closed, rel=0.01)


def test_slotting_only_where_it_is_asked_for() -> None:
    asked = rough_job(more="slotting = true\nwidth_of_cut = 9.0")
    _, cuts, _ = cut_raster(asked, plan(asked))
    assert cuts.width_mm.max() > 0.9 * 10.0
    with pytest.raises(
        BadInput, match=r"width_of_cut.*at most half the diameter without slotting = true, 5 mm"
    ):
        rough_job(more="width_of_cut = 9.0")


def test_one_way_climbs_everywhere() -> None:
    """Stock to the right of the feed: the front's engaged side is the right one on every move of every pass."""
    job = rough_job(more='way = "one-way"')
    path = plan(job)
    stock = RasterStock(job.stock.outline, job.stock.top_mm)
    radius = limits.cut_radius_mm(job.operations[0])
    right = wrong = 0
    for stretch in path.stretches:
        for k in range(1, len(stretch.tip_mm)):
            step = stretch.tip_mm[k] - stretch.tip_mm[k - 1]
            long = float(np.hypot(step[0], step[1]))
            if stretch.purpose[k] == Purpose.CUT and long > 2.0:
                along = step[:2] / long
                middle = 0.5 * (stretch.tip_mm[k] + stretch.tip_mm[k - 1])
                side = 0.9 * radius * np.array([[along[1], -along[0]], [-along[1], along[0]]])
                met = stock.at(middle[:2] + side) > middle[2] + 1e-6
                right, wrong = right + bool(met[0]), wrong + bool(met[1])
            for share in np.linspace(0.0, 1.0, max(2, math.ceil(np.linalg.norm(step) / 0.3) + 1)):
                stock.cut(stretch.tip_mm[k - 1] + share * step, radius)
    assert right > 25
    assert wrong <= 0.02 * right


# ------------------------------------------------------------------------------------ closed regions


@pytest.mark.parametrize("cutter", ["flat", "ball"])
def test_closed_stock_is_entered_on_a_ramp(cutter: str) -> None:
    job = rough_job(cutter=cutter, more="reach = 10.0", margin=20.0)
    path = plan(job)
    angle = job.operations[0].cutter.ramp_angle_rad
    falls = 0
    for stretch in path.stretches:
        step = np.diff(stretch.tip_mm, axis=0)
        entry = stretch.purpose[1:] == Purpose.ENTRY
        plan_mm = np.hypot(step[entry, 0], step[entry, 1])
        assert np.all(-step[entry, 2] <= math.tan(angle) * plan_mm + 1e-9)
        falls += int(np.sum(step[entry, 2] < 0.0))
        assert np.all(step[stretch.purpose[1:] == Purpose.CUT, 2] == 0.0)
    assert falls > 0
    stock, cuts, volume = cut_raster(job, path)
    assert volume[Purpose.LINK] <= 2.0
    assert volume[Purpose.ENTRY] > 0.0
    assert np.quantile(cuts.width_mm, 0.99) < 0.8 * 2.0 * limits.cut_radius_mm(job.operations[0])
    if cutter == "flat":
        left = left_over(job, stock)
        assert left.min() >= 0.4 - 0.2 * MICROMETRE
        assert left.max() <= limits.left_mm(job.operations[0], job.part) + 0.1
        untouched = ~job.part.outline.grown(10.3, corners="mitre").contains(stock.xy.reshape(-1, 2))
        heights = stock.height.ravel()[untouched]
        assert np.all((heights == job.stock.top_mm) | (heights == NOTHING))


@settings(max_examples=40, derandomize=True, deadline=None)
@given(
    radius=st.floats(0.2, 8.0),
    drop=st.floats(0.05, 6.0),
    degrees=st.floats(0.5, 20.0),
    length=st.floats(0.5, 30.0),
)
def test_ramps_fall_by_their_angle_and_reach_the_floor(
    radius: float, drop: float, degrees: float, length: float
) -> None:
    tangent = math.tan(math.radians(degrees))
    bent = length * np.array([[0.0, 0.0], [0.6, 0.0], [0.6, 0.4]])
    for way in (
        ramp.helix((1.0, -2.0), radius, 3.0, 3.0 - drop, math.radians(degrees)),
        ramp.along(bent, 3.0, 3.0 - drop, math.radians(degrees)),
    ):
        step = np.diff(way, axis=0)
        plan_mm = np.hypot(step[:, 0], step[:, 1])
        assert way[0, 2] == 3.0
        assert way[-1, 2] == pytest.approx(3.0 - drop, abs=1e-9)
        assert np.all(-step[:, 2] <= tangent * plan_mm * (1.0 + 1e-6) + 1e-9)
        assert -step[:, 2].sum() == pytest.approx(tangent * plan_mm.sum(), rel=5e-3)
    on = shapely.distance(shapely.linestrings(bent), shapely.points(way[:, :2]))
    assert on.max() < 1e-9


# ------------------------------------------------------------------------------------ rest stock, other blanks, units


SECOND = """
[[operation]]
does = "rough"
cutter = 2
allowance = 0.4
spindle = 12000
feed = 800
depth_of_cut = 0.8
"""


def test_a_second_cutter_cuts_only_what_the_first_left() -> None:
    job = rough_job(more=SECOND)
    first, second = plan(job), plan(job, 1)
    alone = parse_job(
        ROUGH.format(
            outline=SHAPES["rectangle"], cutter=SORTS["flat"], more="", margin=3.0, stock=""
        ).replace('does = "rough"\ncutter = 1\n', 'does = "rough"\ncutter = 2\ndepth_of_cut = 0.8\n'),
        "job.toml",
    )
    assert second.cut_length_mm < 0.35 * plan(alone).cut_length_mm
    stock, _, before = cut_raster(job, first)
    stock, cuts, after = cut_raster(job, second, stock)
    assert after[Purpose.LINK] <= 0.5
    assert 0.0 < sum(after.values()) < 0.3 * sum(before.values())
    assert cuts.angle_deg.max() < 150.0
    left = left_over(job, stock)
    assert left.min() >= 0.4 - 0.2 * MICROMETRE
    assert left.max() <= limits.left_mm(job.operations[1], job.part) + 0.1


def test_a_blank_brought_near_the_form_before_loses_only_what_stands_on_it() -> None:
    block, near = rough_job(), rough_job(stock="allowance = 3.0")
    assert plan(near).cut_length_mm < 0.8 * plan(block).cut_length_mm
    with pytest.raises(CannotPlan, match="no stock"):
        plan(rough_job(stock="allowance = 0.3"))


def test_inch_job_is_the_same_path() -> None:
    text = job_text(machine="mill-3", outline='shape = "rectangle"\nsize = [25.4, 20.32]', a=0.01, top=5.08, bottom=-10.16,
                    margin=2.54, stock_extra="", diameter=7.62, cutter_shape="flat", clearance=5.08)  # fmt: skip
    text = (
        text.replace('does = "finish"', 'does = "rough"')
        .replace('pattern = "raster"\n', "")
        .replace("scallop = 0.01\n", "")
    )
    text = text.replace("feed = 1500", "feed = 1524\nallowance = 0.254").replace(
        "tolerance = 0.004", "tolerance = 0.00508"
    )
    inch = text.replace('units = "mm"', 'units = "inch"').replace("a = 0.01", "a = 0.254")
    for mm, other in (
        ("size = [25.4, 20.32]", "size = [1.0, 0.8]"), ("top = 5.08", "top = 0.2"), ("bottom = -10.16", "bottom = -0.4"),
        ("margin = 2.54", "margin = 0.1"), ("7.62", "0.3"), ("clearance = 5.08", "clearance = 0.2"),
        ("feed = 1524\nallowance = 0.254", "feed = 60\nallowance = 0.01"), ("tolerance = 0.00508", "tolerance = 0.0002"),
        ("flute_length = 18.0", "flute_length = 0.7"), ("stickout = 34.0", "stickout = 1.4"),
        ("[[16.0, 20.0], [32.0, 25.0]]", "[]"), ("part_origin = [0.0, 0.0, 30.0]", "part_origin = [0.0, 0.0, 1.2]"),
    ):  # fmt: skip
        assert mm in inch
        inch = inch.replace(mm, other)
    first, second = plan(parse_job(text, "job.toml")), plan(parse_job(inch, "job.toml"))
    assert second.passes == first.passes
    assert second.cut_length_mm == pytest.approx(first.cut_length_mm, rel=2e-3)
    levels = [np.unique(np.round(tips(path)[:, 2], 6)) for path in (first, second)]
    assert np.abs(levels[1] - levels[0]).max() < 2e-6
    assert np.abs(tips(second).max(axis=0) - tips(first).max(axis=0)).max() < 0.05


# ------------------------------------------------------------------------------------ pieces


def test_peeling_a_square_by_hand() -> None:
    """A square of 20 peeled by 2: passes at 5 - 2 outside, each round 2 further in, 5 rounds to the middle."""
    square = shapely.box(-10.0, -10.0, 10.0, 10.0)
    room = shapely.box(-40.0, -40.0, 40.0, 40.0)
    pieces, rest = peel(room, square, Bite(5.0, 2.0, 5.0))
    assert rest.is_empty
    assert [piece.round for piece in pieces] == [0, 1, 2, 3, 4]
    for number, piece in enumerate(pieces):
        assert piece.closed
        x0, y0, x1, y1 = shapely.linestrings(piece.xy).bounds
        side = 10.0 - 2.0 * number + 3.0
        assert (x0, y0, x1, y1) == pytest.approx((-side, -side, side, side), abs=0.03)
        assert not shapely.is_ccw(shapely.linearrings(piece.xy))  # the stock in the middle is to its right


def test_ways_in_air_go_round_the_stock() -> None:
    stock = shapely.box(-5.0, -5.0, 5.0, 5.0)
    walk = Walk(shapely.box(-20.0, -20.0, 20.0, 20.0), stock, 3.0)
    way = walk.way(np.array([-15.0, 0.5]), np.array([15.0, 0.0]))
    assert way is not None
    assert shapely.distance(stock, shapely.linestrings(way)) >= 3.0 - 0.05
    # Round a square grown by 3, seen from (-15, 0.5) to (15, 0): tangent, arc, straight 10, arc, tangent.
    assert shapely.linestrings(way).length < 36.0
    walk.cut(grown(stock, 1.0))
    assert len(walk.way(np.array([-15.0, 0.5]), np.array([15.0, 0.0]))) == 2


def test_a_cutter_that_cannot_stand_upright_is_refused() -> None:
    job = rough_job(more="axis = [0.2, 0.0, 1.0]")
    with pytest.raises(CannotPlan, match=r"along part Z, and it stands 11\.3 degrees off"):
        plan(job)


@pytest.mark.parametrize(
    ("more", "fault"),
    [
        (
            "depth_of_cut = 25.0",
            r"depth_of_cut: found 25 mm; needs at most the flute length of the cutter, 20 mm",
        ),
        ("width_of_cut = 2.0\nstepover = 2.0", r"width_of_cut: given besides stepover"),
        ("reach = 5.0", r"reach: found 5 mm; needs at least the diameter of the cutter, 10 mm"),
        (
            "tabs = 3",
            r'tabs: has no place in an operation that does "rough"; only in one that does "outline"',
        ),
    ],
)
def test_keys_that_do_not_fit_are_told(more: str, fault: str) -> None:
    with pytest.raises(BadInput, match=fault):
        rough_job(more=more)


def test_defaults_come_from_the_cutter() -> None:
    operation = rough_job().operations[0]
    assert (limits.cut_depth_mm(operation), limits.cut_width_mm(operation)) == (2.5, 2.5)
    stepover = rough_job(more="stepover = 1.5").operations[0]
    assert limits.cut_width_mm(stepover) == 1.5
    # Ball of 4 mm: radius sqrt(2 R h - h^2) at the top of a 2 mm layer; cusps R - sqrt(R^2 - w^2 / 4) between passes.
    ball = rough_job(cutter="ball").operations[0]
    assert limits.cut_radius_mm(ball) == pytest.approx(math.sqrt(2 * 4 * 2 - 4), rel=1e-12)
    assert limits.cusp_mm(ball) == pytest.approx(4.0 - math.sqrt(16.0 - 1.0), rel=1e-12)


# ------------------------------------------------------------------------------------ from the block to the surface


WHOLE = """
[[cutter]]
number = 3
shape = "ball"
diameter = 6.0
flute_length = 18.0
stickout = 40.0
[[operation]]
does = "semi-finish"
cutter = 3
allowance = 0.15
scallop = 0.05
spindle = 12000
feed = 1500
direction = 90.0
tolerance = 0.01
[[operation]]
does = "finish"
cutter = 3
scallop = 0.02
spindle = 12000
feed = 1500
direction = 90.0
tolerance = 0.005
"""


def test_rough_semi_finish_and_finish_are_released(tmp_path) -> None:
    job_file = tmp_path / "job.toml"
    text = ROUGH.format(
        outline='shape = "rectangle"\nsize = [24.0, 18.0]',
        cutter=SORTS["flat"],
        more=WHOLE,
        margin=3.0,
        stock="",
    )
    job_file.write_text(text, encoding="utf-8")
    made = pipeline.make(job_file, tmp_path / "out", grid_mm=0.2)
    assert made.released, [finding.message for finding in made.findings if not finding.ok]
    rough, semi, finish = made.operations
    assert (rough.does, rough.pattern, rough.scallop_predicted_mm) == ("rough", "layers", 0.0)
    assert rough.cut_length_mm > 0.0
    assert 0.0 < finish.scallop_predicted_mm <= 0.02
    note = f"leaves 0.150 to {0.15 + semi.scallop_predicted_mm:.3f} mm on the surface"
    assert any(note in text for text in made.cutter_paths[1].notes)
    assert made.proof.gouge_max_mm <= 0.005 + 0.2 * MICROMETRE
