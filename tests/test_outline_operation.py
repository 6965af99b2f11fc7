"""The outline operation: where the cutter goes, tabs and skin, ways down, what it leaves alone. Brute force as truth."""

from __future__ import annotations

import math

import numpy as np
import pytest
import shapely

from anticlast import pipeline
from anticlast.errors import BadInput, CannotPlan
from anticlast.job import parse_job
from anticlast.passes.layers import plan_layers
from anticlast.passes.loop import Loop
from anticlast.passes.profile_cut import plan_outline
from anticlast.passes.tabs import lay_tabs
from anticlast.records import CutterPath, Job, Purpose
from raster_stock import NOTHING, RasterStock

MICROMETRE = 1e-3

OUTLINE = """\
[job]
name = "outline"
units = "mm"
[part]
a = 0.008
[part.outline]
{outline}
[stock]
material = "acetal"
top = 4.0
bottom = -8.0
margin = {margin}
[machine]
file = "{machine}"
part_origin = [0.0, 0.0, 40.0]
[[cutter]]
number = 1
shape = "flat"
diameter = 6.0
flute_length = {flutes}
stickout = 32.0
holder = [[16.0, 20.0], [32.0, 25.0]]
{rough}
[[operation]]
does = "outline"
cutter = 1
spindle = 9000
feed = 600
{more}
"""
ROUGH = """\
[[operation]]
does = "rough"
cutter = 1
allowance = 0.3
spindle = 9000
feed = 1000
"""
SHAPES = {
    "rectangle": 'shape = "rectangle"\nsize = [30.0, 24.0]',
    "rounded": 'shape = "rectangle"\nsize = [30.0, 24.0]\ncorner_radius = 5.0',
    "circle": 'shape = "circle"\ndiameter = 28.0',
    "L": 'shape = "polygon"\npoints = [[-16.0, -14.0], [16.0, -14.0], [16.0, 0.0], [0.0, 0.0], [0.0, 14.0], [-16.0, 14.0]]',
    "holed": 'shape = "polygon"\npoints = [[-15.0, -12.0], [15.0, -12.0], [15.0, 12.0], [-15.0, 12.0]]\n'
    "holes = [[[-6.0, -5.0], [6.0, -5.0], [6.0, 5.0], [-6.0, 5.0]], [[9.0, 0.0], [11.0, 0.0], [11.0, 2.0], [9.0, 2.0]]]",
}


def outline_job(
    outline: str = "rectangle",
    more: str = "",
    margin: float = 12.0,
    rough: str = "",
    flutes: float = 20.0,
    machine: str = "mill-3",
) -> Job:
    text = OUTLINE.format(
        outline=SHAPES[outline], more=more, margin=margin, rough=rough, flutes=flutes, machine=machine
    )
    return parse_job(text, "job.toml")


def plan(job: Job) -> CutterPath:
    return plan_outline(job, job.operations[-1], lambda axis: axis)


def cut(
    job: Job, path: CutterPath, stock: RasterStock | None = None
) -> tuple[RasterStock, dict[Purpose, float]]:
    stock = RasterStock(job.stock.outline, job.stock.top_mm) if stock is None else stock
    _, volume = stock.run(path, path.operation.cutter.radius_mm)
    return stock, volume


def lines(path: CutterPath) -> np.ndarray:
    ends = [np.stack((s.tip_mm[:-1, :2], s.tip_mm[1:, :2]), axis=1) for s in path.stretches]
    return shapely.linestrings(np.concatenate(ends))


@pytest.mark.parametrize("outline", SHAPES)
@pytest.mark.parametrize("margin", [2.0, 12.0])
def test_the_cutter_stays_its_radius_off_the_outline_and_cuts_up_to_it(outline: str, margin: float) -> None:
    job = outline_job(outline, margin=margin)
    path = plan(job)
    radius, tolerance = path.operation.cutter.radius_mm, path.operation.tolerance_mm
    away = shapely.distance(job.part.outline.polygon, lines(path))
    assert away.min() >= radius
    # Along the whole outline the cut comes to within the tolerance; inner corners are left with the cutter's radius.
    rim = job.part.outline.boundary_points(0.5)
    track = shapely.union_all(lines(path))
    missed = shapely.distance(track, shapely.points(rim)) - radius
    reachable = shapely.buffer(shapely.buffer(job.part.outline.polygon, radius), -radius)
    near = shapely.distance(shapely.boundary(reachable), shapely.points(rim)) < tolerance
    assert near.mean() > 0.75
    assert missed[near].max() <= 1.5 * tolerance + job.part.outline.flattening_mm


@pytest.mark.parametrize("outline", ["rounded", "L", "holed"])
def test_the_part_is_never_cut_and_links_cut_nothing(outline: str) -> None:
    job = outline_job(outline)
    stock, volume = cut(job, plan(job))
    xy = stock.xy.reshape(-1, 2)
    inside = job.part.outline.contains(xy)
    assert np.all(stock.height.ravel()[inside] == job.stock.top_mm)
    assert volume[Purpose.LINK] <= 0.5
    assert volume[Purpose.CUT] > 0.0


@pytest.mark.parametrize("outline", ["rectangle", "circle", "holed"])
def test_climbing_round_the_outside_and_inside_holes(outline: str) -> None:
    """The part lies to the right of every long cutting move on the floor of the groove that goes round once."""
    job = outline_job(outline, more="tabs = 0")
    path = plan(job)
    radius = path.operation.cutter.radius_mm
    right = wrong = 0
    for stretch in path.stretches:
        step = np.diff(stretch.tip_mm, axis=0)
        for k in np.flatnonzero(
            (stretch.purpose[1:] == Purpose.CUT) & (np.hypot(step[:, 0], step[:, 1]) > 0.3)
        ):
            along = step[k, :2] / np.hypot(*step[k, :2])
            middle = 0.5 * (stretch.tip_mm[k, :2] + stretch.tip_mm[k + 1, :2])
            side = (radius + 0.3) * np.array([along[1], -along[0]])
            met = job.part.outline.contains([middle + side, middle - side])
            right, wrong = right + int(met[0]), wrong + int(met[1])
    assert right > 30
    assert wrong == 0


def test_tabs_stand_to_their_height_and_width_and_nothing_else_holds_the_part() -> None:
    job = outline_job("circle", more="tabs = 3\ntab_width = 2.5\ntab_height = 1.2")
    stock, _ = cut(job, plan(job))
    turn = np.arange(0.0, 360.0, 0.1)
    middle = 17.0 * np.column_stack(
        (np.cos(np.radians(turn)), np.sin(np.radians(turn)))
    )  # of the groove, 14 + 3
    height = stock.at(middle)
    top, floor = job.stock.bottom_mm + 1.2, job.stock.bottom_mm
    assert set(np.unique(np.round(height, 6))) == {round(floor, 6), round(top, 6)}
    angles = turn[height > floor + 0.1]
    tabs = np.split(angles, np.flatnonzero(np.diff(angles) > 20.0) + 1)
    if angles[0] + 360.0 - angles[-1] < 20.0 and len(tabs) > 1:
        tabs = [np.concatenate((tabs[-1] - 360.0, tabs[0])), *tabs[1:-1]]
    assert len(tabs) == 3
    # Across the middle of the groove a tab is as wide as asked; discs of the cutter's radius round its ends make it wider
    # towards both walls. On the circle of 17 mm the chord is the arc to 1 %.
    for tab in tabs:
        assert np.ptp(np.radians(tab)) * 17.0 == pytest.approx(2.5, abs=1.5 * stock.cell)


def test_tabs_lie_where_the_contour_is_straight_and_held() -> None:
    ring = shapely.get_coordinates(shapely.box(-20.0, -10.0, 20.0, 10.0))[::-1]
    loop = Loop(ring)
    blank = shapely.box(-40.0, -40.0, 40.0, 40.0)
    tabs = lay_tabs(loop, 4, 3.0, 6.0, blank)
    assert len(tabs) == 4
    for low, high in tabs:
        assert loop.bend_rad(low, high) == pytest.approx(0.0, abs=1e-9)
        assert high - low == pytest.approx(6.0)
    # A blank that ends beside the groove on all sides has nothing to hold a tab.
    assert lay_tabs(loop, 4, 3.0, 6.0, shapely.box(-22.0, -12.0, 22.0, 12.0)) == []


def test_skin_and_depth() -> None:
    for more, floor in (("skin = 0.4", -7.6), ("depth = 6.5", -2.5)):
        job = outline_job("rounded", more=more)
        path = plan(job)
        stock, _ = cut(job, path)
        xy = stock.xy.reshape(-1, 2)
        track = shapely.union_all(lines(path))
        groove = shapely.dwithin(track, shapely.points(xy), 2.0)
        assert np.unique(np.round(stock.height.ravel()[groove], 6)).tolist() == [pytest.approx(floor)]


@pytest.mark.parametrize("more", ["tabs = 0", "tabs = 4\ntab_height = 2.0", "skin = 0.3"])
@pytest.mark.parametrize("outline", ["rectangle", "holed"])
def test_no_way_down_in_stock_is_steeper_than_the_ramp(outline: str, more: str) -> None:
    job = outline_job(outline, more=more)
    path = plan(job)
    stock = RasterStock(job.stock.outline, job.stock.top_mm)
    limit = math.tan(path.operation.cutter.ramp_angle_rad)
    ramped = 0
    for stretch in path.stretches:
        for k in range(1, len(stretch.tip_mm)):
            step = stretch.tip_mm[k] - stretch.tip_mm[k - 1]
            count = max(1, math.ceil(float(np.linalg.norm(step)) / 0.3))
            taken = sum(
                stock.cut(stretch.tip_mm[k - 1] + share * step, 3.0)
                for share in np.arange(1, count + 1) / count
            )
            if step[2] < 0.0:
                flat = float(np.hypot(step[0], step[1]))
                gentle = -step[2] <= limit * flat + 1e-9
                assert gentle or taken <= 0.1, (stretch.tip_mm[k - 1], stretch.tip_mm[k], taken)
                ramped += int(gentle and taken > 0.0)
    assert ramped > 0


def test_an_open_blank_is_entered_from_outside() -> None:
    """With 2 mm of margin a 6 mm cutter starts every layer with no stock under it, and goes in on an arc, not down."""
    job = outline_job("rectangle", margin=2.0)
    path = plan(job)
    for stretch in path.stretches:
        step = np.diff(stretch.tip_mm, axis=0)
        assert np.all(step[stretch.purpose[1:] != Purpose.LINK, 2] == 0.0)
    _, volume = cut(job, path)
    assert volume[Purpose.LINK] <= 0.1
    assert volume[Purpose.ENTRY] == 0.0
    assert any("no blank beyond the groove" in note for note in path.notes)


def test_after_roughing_it_starts_at_the_surface_and_cuts_little_air() -> None:
    job = outline_job("rectangle", rough=ROUGH, margin=8.0)
    block = outline_job("rectangle", margin=8.0)
    path, full = plan(job), plan(block)
    assert path.cut_length_mm < 0.9 * full.cut_length_mm
    stock = RasterStock(job.stock.outline, job.stock.top_mm)
    stock.run(plan_layers(job, job.operations[0], lambda axis: axis), 3.0)
    before = stock.height.copy()
    _, volume = cut(job, path, stock)
    assert volume[Purpose.LINK] <= 0.5
    # Highest stock along the contour, from the raster as roughed; the first cut is no more than a layer below it.
    xy = stock.xy.reshape(-1, 2)
    groove = shapely.dwithin(shapely.union_all(lines(path)), shapely.points(xy), 3.0)
    highest = float(before.ravel()[groove & (before.ravel() > NOTHING)].max())
    cuts = np.concatenate([s.tip_mm[1:][s.purpose[1:] == Purpose.CUT, 2] for s in path.stretches])
    assert highest - 2 * 0.15 * 6.0 <= cuts.max() < highest


def test_what_does_not_fit_is_refused() -> None:
    with pytest.raises(CannotPlan, match=r"shank of cutter 1 would go 2\.00 mm deep between the walls"):
        plan(outline_job(flutes=10.0))
    with pytest.raises(BadInput, match=r"depth: found 13 mm; needs at most the height of the blank, 12 mm"):
        outline_job(more="depth = 13.0")
    with pytest.raises(BadInput, match="skin: given besides depth"):
        outline_job(more="depth = 3.0\nskin = 0.2")
    with pytest.raises(BadInput, match='scallop: has no place in an operation that does "outline"'):
        outline_job(more="scallop = 0.1")


def test_small_holes_are_told() -> None:
    assert "1 holes are too small for cutter 1 and are not cut" in plan(outline_job("holed")).notes


def test_inch_job_is_the_same_path() -> None:
    text = OUTLINE.format(
        outline='shape = "rectangle"\nsize = [25.4, 20.32]', more="tab_height = 1.27\ntolerance = 0.00254", margin=12.7, rough="",
        flutes=20.32, machine="mill-3",
    ).replace("stickout = 32.0", "stickout = 30.48").replace("holder = [[16.0, 20.0], [32.0, 25.0]]\n", "")  # fmt: skip
    text = text.replace("feed = 600", "feed = 635").replace("diameter = 6.0", "diameter = 6.35")
    text = (
        text.replace("top = 4.0", "top = 5.08")
        .replace("bottom = -8.0", "bottom = -7.62")
        .replace("0.0, 40.0]", "0.0, 38.1]")
    )
    inch = text.replace('units = "mm"', 'units = "inch"')
    for mm, other in (
        ("a = 0.008", "a = 0.2032"), ("[25.4, 20.32]", "[1.0, 0.8]"), ("tab_height = 1.27", "tab_height = 0.05"),
        ("0.00254", "0.0001"), ("margin = 12.7", "margin = 0.5"), ("flute_length = 20.32", "flute_length = 0.8"),
        ("stickout = 30.48", "stickout = 1.2"), ("feed = 635", "feed = 25"), ("diameter = 6.35", "diameter = 0.25"),
        ("top = 5.08", "top = 0.2"), ("bottom = -7.62", "bottom = -0.3"), ("0.0, 38.1]", "0.0, 1.5]"),
    ):  # fmt: skip
        assert mm in inch, mm
        inch = inch.replace(mm, other)
    inch = inch.replace("part_origin", "clearance = 0.2\npart_origin")
    text = text.replace("part_origin", "clearance = 5.08\npart_origin")
    first, second = plan(parse_job(text, "job.toml")), plan(parse_job(inch, "job.toml"))
    assert len(first.stretches) == len(second.stretches)
    for one, other in zip(first.stretches, second.stretches, strict=True):
        assert np.abs(one.tip_mm - other.tip_mm).max() < 1e-6


@pytest.mark.parametrize(
    ("machine", "outline", "margin", "more"),
    [
        ("mill-3", "rounded", 3.0, ""),
        ("trunnion-ac", "circle", 12.0, ""),
        ("head-b-table-c", "holed", 9.0, "skin = 0.3"),
    ],
)
def test_rough_and_outline_are_released(
    machine: str, outline: str, margin: float, more: str, tmp_path
) -> None:
    text = OUTLINE.format(
        outline=SHAPES[outline], more=more, margin=margin, rough=ROUGH, flutes=20.0, machine=machine
    )
    job_file = tmp_path / "job.toml"
    job_file.write_text(text, encoding="utf-8")
    made = pipeline.make(job_file, tmp_path / "out", grid_mm=0.3)
    assert made.released, [finding.message for finding in made.findings if not finding.ok]
    entry = made.operations[-1]
    assert (entry.does, entry.pattern) == ("outline", "profile")
    assert made.proof.gouge_max_mm == 0.0
