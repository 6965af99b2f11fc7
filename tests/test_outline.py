"""Outlines against closed forms, shapely's set operations, and drawings made by ezdxf or written as text."""

from __future__ import annotations

import itertools
import math
import pickle
import sys
from pathlib import Path

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from shapely.geometry import LineString, Polygon

from anticlast import outline
from anticlast.errors import OutlineError
from anticlast.outline import Outline
from anticlast.tolerances import OUTLINE_CHORD_MM, OUTLINE_GAP_MM, SAME_POINT_MM

MICROMETRE = 1e-3
SQUARE = [(-10, -10), (10, -10), (10, 10), (-10, 10)]


def ring_with_holes() -> Outline:
    return outline.polygon(
        [(-30, -20), (30, -20), (30, 20), (0, 32), (-30, 20)],
        holes_mm=[[(-20, -10), (-8, -10), (-8, 4)], [(5, 0), (15, 0), (15, 10), (5, 10)]],
    )


@st.composite
def star_outlines(draw: st.DrawFn) -> Outline:
    """Star-shaped polygons about the origin, some with a hole; never self-crossing by construction."""
    count = draw(st.integers(3, 14))
    reach = draw(st.lists(st.floats(5.0, 40.0), min_size=count, max_size=count))
    angle = 2 * np.pi * np.arange(count) / count + draw(st.floats(0, 1))
    shell = np.column_stack((reach * np.cos(angle), reach * np.sin(angle)))
    holes = [shell * draw(st.floats(0.2, 0.7))] if draw(st.booleans()) else []
    shift = draw(st.tuples(st.floats(-20, 20), st.floats(-20, 20)))
    return outline.polygon(shell, holes, shift)


# ------------------------------------------------------------------------------------------ builders


def test_circle_area_and_bounds_against_closed_form() -> None:
    disc = outline.circle(90.0, (3.0, -4.0))
    assert disc.bounds == pytest.approx((-42.0, -49.0, 48.0, 41.0), abs=1e-12)
    # Vertices on the circle: area short by at most 2/3 of chord error times length (parabola segments).
    short = math.pi * 45.0**2 - disc.area_mm2
    assert 0.0 < short <= 2.0 / 3.0 * OUTLINE_CHORD_MM * math.pi * 90.0 * (1 + 1e-6)
    radii = np.hypot(*(disc.boundary_points(1e9) - (3.0, -4.0)).T)
    assert radii == pytest.approx(np.full(radii.size, 45.0), abs=1e-12)


@pytest.mark.parametrize("diameter", [0.001, 0.05, 1.0, 20.0, 150.0])
def test_chord_error_of_circles_is_within_the_promise(diameter: float) -> None:
    disc = outline.circle(diameter)
    corners = shapely.get_coordinates(disc.polygon.exterior)
    middles = (corners[:-1] + corners[1:]) / 2
    sag = diameter / 2 - np.hypot(*middles.T)
    assert sag.max() <= OUTLINE_CHORD_MM * (1 + 1e-6)
    assert len(corners) >= 5


def test_slot_is_a_stadium() -> None:
    stadium = outline.slot((60.0, 20.0), (1.0, 2.0))
    assert stadium.bounds == pytest.approx((-29.0, -8.0, 31.0, 12.0), abs=1e-12)
    assert stadium.area_mm2 == pytest.approx(
        40 * 20 + math.pi * 100, abs=2 / 3 * OUTLINE_CHORD_MM * 20 * math.pi
    )
    assert stadium.perimeter_mm == pytest.approx(80 + 20 * math.pi, abs=5 * MICROMETRE)
    upright = outline.slot((20.0, 60.0))
    assert upright.bounds == pytest.approx((-10.0, -30.0, 10.0, 30.0), abs=1e-12)
    # A slot as long as wide is a circle.
    assert outline.slot((20.0, 20.0)).area_mm2 == pytest.approx(outline.circle(20.0).area_mm2, abs=1e-9)


@pytest.mark.parametrize("radius", [0.0, 0.5, 7.0, 20.0])
def test_rectangle_with_corner_radius(radius: float) -> None:
    plate = outline.rectangle((90.0, 40.0), radius, (5.0, 0.0))
    exact = 90 * 40 - (4 - math.pi) * radius**2
    assert plate.area_mm2 == pytest.approx(exact, abs=OUTLINE_CHORD_MM * 2 * math.pi * radius + 1e-9)
    assert plate.bounds == pytest.approx((-40.0, -20.0, 50.0, 20.0), abs=1e-12)


def test_polygon_area_by_the_surveyors_formula() -> None:
    plate = ring_with_holes()
    assert plate.area_mm2 == pytest.approx(60 * 40 + 60 * 12 / 2 - 12 * 14 / 2 - 100, rel=1e-12)


def test_polygon_points_are_counted_from_its_centre() -> None:
    assert outline.polygon(SQUARE, center_mm=(100, 7)).bounds == (90.0, -3.0, 110.0, 17.0)


@pytest.mark.parametrize(
    ("points", "holes", "said"),
    [
        ([(0, 0), (1, 0)], [], r"outline has 2 different points; at least three"),
        ([(0, 0), (1, 0), (1, 0), (0, 0)], [], r"2 different points"),
        ([], [], r"not a list of \[x, y\] pairs"),
        ([(0, 0, 1), (1, 0, 1), (1, 1, 1)], [], r"not a list of \[x, y\] pairs"),
        ([(0, 0), (1, "one"), (1, 1)], [], r"not a list of \[x, y\] pairs"),
        ([(0, 0), (10, 10), (10, 0), (0, 10)], [], r"crosses itself at \(5, 5\) mm"),
        ([(0, 0), (5, 5), (10, 10)], [], r"encloses no area"),
        ([(0, 0), (math.nan, 5), (10, 10)], [], r"point 2 of the outline is not a finite number"),
        ([(0, 0), (1, 5), (math.inf, 10)], [], r"point 3 of the outline is not a finite number"),
        (SQUARE, [[(20, 20), (30, 20), (30, 30)]], r"a hole lies outside the outline"),
        (SQUARE, [[(0, 0), (30, 0), (0, 5)]], r"crosses itself"),
        (SQUARE, [[(0, 0), (3, 3), (3, 0), (0, 3)]], r"hole 1 crosses itself at \(1.5, 1.5\)"),
        (
            SQUARE,
            [[(-5, -5), (5, -5), (5, 5), (-5, 5)], [(0, 0), (1, 0), (0, 1)]],
            r"hole lies inside another",
        ),
    ],
)
def test_bad_polygons_get_a_sentence(points: list, holes: list, said: str) -> None:
    with pytest.raises(OutlineError, match=said):
        outline.polygon(points, holes)


def test_bad_sizes_get_a_sentence() -> None:
    with pytest.raises(OutlineError, match=r"the width is -3 mm; it has to be a positive length"):
        outline.rectangle((-3.0, 4.0))
    with pytest.raises(OutlineError, match=r"the diameter is nan mm"):
        outline.circle(math.nan)
    with pytest.raises(
        OutlineError, match=r"corner radius is 6 mm; with sides 10 by 20 mm it can be 0 to 5 mm"
    ):
        outline.rectangle((10.0, 20.0), 6.0)
    with pytest.raises(OutlineError, match=r"centre has to be two finite numbers"):
        outline.circle(3.0, (0.0, math.nan))


# ------------------------------------------------------------------------------------------ questions


def test_boundary_counts_as_inside_and_nan_as_outside() -> None:
    plate = ring_with_holes()
    edge = plate.boundary_points(0.37)
    assert plate.contains(edge).all()
    assert plate.contains([(30, 0), (30 + 3 * SAME_POINT_MM, 0), (10, 5), (math.nan, 0)]).tolist() == [
        True, False, False, False,
    ]  # fmt: skip


@settings(derandomize=True, max_examples=40, deadline=None)
@given(star_outlines(), st.integers(0, 2**32 - 1))
def test_contains_agrees_with_distance(shape: Outline, seed: int) -> None:
    points = np.random.default_rng(seed).uniform(-60, 60, (300, 2))
    away = np.asarray(shapely.distance(shape.polygon, shapely.points(points)))
    inside = shape.contains(points)
    assert inside[away == 0.0].all()
    # At a corner the mitred slack reaches past SAME_POINT_MM, never past its mitre limit.
    assert not inside[away > 8.0 * SAME_POINT_MM].any()


def test_contains_segment() -> None:
    plate = ring_with_holes()
    ends = np.array([[-25, -15], [25, -15], [25, 15], [-25, 15]], dtype=float)
    assert plate.contains_segment(ends[0], ends[1]).tolist() == [True]
    assert plate.contains_segment(ends[0], ends[1:]).tolist() == [True, False, True]
    assert plate.contains_segment((-30, -20), (30, -20)).tolist() == [True]
    assert plate.contains_segment((0, 32), (30, 20)).tolist() == [True]  # along a slanted edge
    assert plate.contains_segment((-8, -10), (-8, 4)).tolist() == [True]  # along the edge of a hole
    assert plate.contains_segment((25, 0), (35, 0)).tolist() == [False]


def test_v_range_of_a_turned_rectangle() -> None:
    plate = outline.rectangle((30.0, 10.0), center_mm=(1.0, 2.0))
    for degrees in (0, 30, 90, 200):
        d = math.radians(degrees)
        middle = -math.sin(d) + 2 * math.cos(d)
        half = 15 * abs(math.sin(d)) + 5 * abs(math.cos(d))
        assert plate.v_range(d) == pytest.approx((middle - half, middle + half), abs=1e-12)


def test_survives_pickling() -> None:
    plate = pickle.loads(pickle.dumps(ring_with_holes()))
    assert plate == ring_with_holes()
    assert plate.contains([(0, 0), (-10, -8)]).tolist() == [True, False]


# ------------------------------------------------------------------------------------------ clipping


def clipped_by_shapely(shape: Outline, direction: float, v: float) -> list[tuple[float, float]]:
    along = np.array([math.cos(direction), math.sin(direction)])
    foot = v * np.array([-along[1], along[0]])
    line = LineString([foot - 500 * along, foot + 500 * along])
    pieces = [piece for piece in shapely.get_parts(shape.polygon.intersection(line)) if piece.length > 0]
    spans = sorted(tuple(sorted(shapely.get_coordinates(piece) @ along)) for piece in pieces)
    return [(float(span[0]), float(span[-1])) for span in spans]


@settings(derandomize=True, max_examples=60, deadline=None)
@given(star_outlines(), st.floats(0, 2 * np.pi), st.lists(st.floats(-50, 50), min_size=1, max_size=6))
def test_clip_lines_agrees_with_shapely_intersection(
    shape: Outline, direction: float, lines: list[float]
) -> None:
    index, u0, u1 = shape.clip_lines(direction, lines)
    assert (np.diff(index) >= 0).all()
    for number, v in enumerate(lines):
        mine = list(zip(u0[index == number], u1[index == number], strict=True))
        theirs = clipped_by_shapely(shape, direction, v)
        # Near a corner round-off decides about an interval; total length is what both must agree on.
        assert sum(b - a for a, b in mine) == pytest.approx(sum(b - a for a, b in theirs), abs=1e-3)
        if len(mine) == len(theirs):
            long = [(m, t) for m, t in zip(mine, theirs, strict=True) if t[1] - t[0] > 0.1]
            for m, t in long:
                assert m == pytest.approx(t, abs=1e-3)
        assert all(a < b for a, b in mine)
        assert all(mine[k][1] < mine[k + 1][0] for k in range(len(mine) - 1))


def test_clip_lines_through_corners_and_along_edges() -> None:
    plate = outline.rectangle((90.0, 60.0))
    for direction, half, reach in ((0.0, 30.0, 45.0), (math.pi / 2, 45.0, 30.0), (math.pi, 30.0, 45.0)):
        for v in (-half, 0.0, half):
            assert plate.clip_line(direction, v) == pytest.approx(np.array([[-reach, reach]]), abs=1e-9)
        assert plate.clip_line(direction, half + 1e-4).shape == (0, 2)
    diamond = outline.polygon([(10, 0), (0, 10), (-10, 0), (0, -10)])
    assert diamond.clip_line(0.0, 10.0).shape == (0, 2)  # a touched corner has no length
    assert diamond.clip_line(0.0, 0.0) == pytest.approx(np.array([[-10.0, 10.0]]), abs=1e-12)
    side = diamond.clip_line(math.pi / 4, -math.sqrt(50))  # along a side, direction +x +y
    assert side == pytest.approx(np.array([[-math.sqrt(50), math.sqrt(50)]]), abs=1e-9)


def test_clip_line_along_the_edge_of_a_hole_and_of_a_step() -> None:
    holed = outline.polygon(SQUARE, [[(-5, -5), (5, -5), (5, 5), (-5, 5)]])
    assert holed.clip_line(0.0, 5.0) == pytest.approx(np.array([[-10.0, 10.0]]))
    assert holed.clip_line(0.0, 0.0) == pytest.approx(np.array([[-10.0, -5.0], [5.0, 10.0]]))
    step = outline.polygon([(0, 0), (10, 0), (10, 5), (4, 5), (4, 9), (0, 9)])
    assert step.clip_line(0.0, 5.0) == pytest.approx(np.array([[0.0, 10.0]]))
    assert step.clip_line(0.0, 5.1) == pytest.approx(np.array([[0.0, 4.0]]))


def test_clip_lines_keeps_the_order_asked_for() -> None:
    plate = ring_with_holes()
    lines = [5.0, -15.0, 40.0, 5.0, 31.0]
    index, u0, u1 = plate.clip_lines(0.0, lines)
    for number, v in enumerate(lines):
        found = np.column_stack((u0, u1))[index == number]
        assert found == pytest.approx(plate.clip_line(0.0, v), abs=1e-12)
    assert index.tolist() == [0, 0, 0, 1, 3, 3, 3, 4] or index.tolist() == [0, 0, 1, 3, 3, 4]
    assert plate.clip_lines(0.0, [])[0].size == 0


def test_area_by_clipping_is_the_area() -> None:
    plate = ring_with_holes()
    spacing = 0.01
    v0, v1 = plate.v_range(0.7)
    lines = np.arange(v0 + spacing / 2, v1, spacing)
    _, u0, u1 = plate.clip_lines(0.7, lines)
    assert (u1 - u0).sum() * spacing == pytest.approx(plate.area_mm2, rel=1e-5)


# ------------------------------------------------------------------------------ points, triangles, growing


def test_grid_holds_every_inside_node_once() -> None:
    plate = ring_with_holes()
    nodes = plate.grid(0.5)
    assert np.unique(nodes, axis=0).shape == nodes.shape
    count = sum(
        plate.polygon.intersects(shapely.Point(0.5 * i, 0.5 * j))
        for i, j in itertools.product(range(-62, 63), range(-42, 66))
    )
    assert len(nodes) == count
    assert len(outline.rectangle((3.0, 2.0)).grid(0.1)) == 31 * 21  # both edges are nodes


def test_boundary_points_are_on_the_boundary_and_near_each_other() -> None:
    plate = ring_with_holes()
    points = plate.boundary_points(0.7)
    assert np.asarray(shapely.distance(plate.polygon.boundary, shapely.points(points))).max() < 1e-12
    for ring in (plate.polygon.exterior, *plate.polygon.interiors):
        at = np.sort(
            [ring.project(shapely.Point(*p)) for p in points if ring.distance(shapely.Point(*p)) < 1e-12]
        )
        assert np.diff(np.append(at, ring.length)).max() <= 0.7 + 1e-9


def meeting_edges(triangles: np.ndarray) -> tuple[int, int, int]:
    """Return numbers of edges met once, twice and more often, corners welded at 0.1 nm."""
    welded = np.round(triangles.reshape(-1, 2) / 1e-7).astype(np.int64)
    _, index = np.unique(welded, axis=0, return_inverse=True)
    faces = index.reshape(-1, 3)
    edges = np.sort(np.concatenate((faces[:, [0, 1]], faces[:, [1, 2]], faces[:, [2, 0]])), axis=1)
    _, count = np.unique(edges, axis=0, return_counts=True)
    return int((count == 1).sum()), int((count == 2).sum()), int((count > 2).sum())


@settings(derandomize=True, max_examples=25, deadline=None)
@given(star_outlines(), st.floats(0.8, 9.0))
def test_triangles_fill_the_region_and_meet_edge_to_edge(shape: Outline, longest: float) -> None:
    triangles = shape.triangles(longest)
    one, two = triangles[:, 1] - triangles[:, 0], triangles[:, 2] - triangles[:, 0]
    areas = (one[:, 0] * two[:, 1] - one[:, 1] * two[:, 0]) / 2
    assert (areas >= 0.0).all()
    assert areas.sum() == pytest.approx(shape.area_mm2, rel=1e-9)
    sides = np.hypot(*(triangles - np.roll(triangles, 1, axis=1)).transpose(2, 0, 1))
    assert sides.max() <= longest * (1 + 1e-9)


@pytest.mark.parametrize(
    "shape",
    [
        outline.circle(40.0),
        outline.rectangle((90.0, 60.0)),
        outline.polygon([(10, 0), (0, 10), (-10, 0), (0, -10)]),
        outline.slot((60.0, 12.0), (0.5, 0.5)),
        ring_with_holes(),
    ],
    ids=["circle", "rectangle", "diamond", "slot", "holes"],
)
@pytest.mark.parametrize("longest", [0.9, math.sqrt(2.0), 7.0])
def test_lone_edges_of_the_triangles_are_the_boundary(shape: Outline, longest: float) -> None:
    triangles = shape.triangles(longest)
    once, _, more = meeting_edges(triangles)
    assert more == 0
    corners = triangles.reshape(-1, 2)
    rim = np.asarray(shapely.distance(shape.polygon.boundary, shapely.points(corners))) < 1e-9
    # Each boundary ring of k points has k edges, and only those may be met once.
    assert once == np.unique(np.round(corners[rim] / 1e-7).astype(np.int64), axis=0).shape[0]


def test_grown_against_steiners_formula() -> None:
    # Steiner: a convex region grows by perimeter * d + pi d^2; a mitred rectangle by 4 d^2 instead of pi d^2.
    plate = outline.rectangle((90.0, 40.0))
    assert plate.grown(3.0).area_mm2 == pytest.approx(3600 + 260 * 3 + 9 * math.pi, abs=0.02)
    assert plate.grown(3.0, "mitre").area_mm2 == pytest.approx(96 * 46, rel=1e-12)
    assert plate.grown(-3.0).area_mm2 == pytest.approx(84 * 34, rel=1e-12)
    annulus = Outline(outline.circle(90.0).polygon.difference(outline.circle(40.0).polygon))
    chord = 2 / 3 * OUTLINE_CHORD_MM * math.pi * 2 * (48 + 20)
    assert annulus.grown(3.0).area_mm2 == pytest.approx(math.pi * (48**2 - 17**2), abs=2 * chord)
    assert annulus.grown(-3.0).area_mm2 == pytest.approx(math.pi * (42**2 - 23**2), abs=2 * chord)
    assert plate.grown(0.0) is plate


def test_grown_keeps_its_distance() -> None:
    plate = ring_with_holes()
    for distance in (2.0, -2.0):
        rim = plate.grown(distance).boundary_points(0.5)
        away = np.asarray(shapely.distance(plate.polygon.boundary, shapely.points(rim)))
        assert away.max() <= 2.0 + 1e-9
        assert away.min() >= 2.0 - OUTLINE_CHORD_MM - 1e-9


def test_shrinking_may_split_but_not_swallow() -> None:
    dumbbell = outline.polygon(
        [
            (-20, -8),
            (-5, -8),
            (-5, -1),
            (5, -1),
            (5, -8),
            (20, -8),
            (20, 8),
            (5, 8),
            (5, 1),
            (-5, 1),
            (-5, 8),
            (-20, 8),
        ]
    )
    halves = dumbbell.grown(-2.0)
    assert shapely.get_num_geometries(halves.polygon) == 2
    # Each half is 11 by 12 and swells into the neck between two arcs of radius 2 about its corners: by
    # 2 * integral of 2 - sqrt(4 - s^2), s from 0 to 1 = 4 - sqrt(3) - 2 pi / 3.
    swell = 4 - math.sqrt(3) - 2 * math.pi / 3
    assert halves.area_mm2 == pytest.approx(2 * (11 * 12 + swell), abs=5 * OUTLINE_CHORD_MM)
    tip = 5 + math.sqrt(3)
    # Both arcs are short of their radius by up to the chord error, and meet at 60 degrees to the line.
    slack = 1.2 * OUTLINE_CHORD_MM
    assert halves.clip_line(0.0, 0.0) == pytest.approx(np.array([[-18, -tip], [tip, 18]]), abs=slack)
    with pytest.raises(OutlineError, match=r"in by 9 mm leaves nothing"):
        dumbbell.grown(-9.0)


# ------------------------------------------------------------------------------------------ drawings: DXF


def dxf(path: Path, units: int | None = 4):
    ezdxf = pytest.importorskip("ezdxf")
    document = ezdxf.new()
    document.header["$INSUNITS"] = units if units is not None else 0
    return document, document.modelspace(), lambda: (document.saveas(path), path)[1]


def test_dxf_polyline_with_bulges_and_round_hole(tmp_path: Path) -> None:
    _, space, save = dxf(tmp_path / "stadium.dxf")
    # A stadium: straights of 40, ends half circles of radius 10 (bulge 1).
    space.add_lwpolyline([(100, 0, 0), (140, 0, 1), (140, 20, 0), (100, 20, 1)], format="xyb", close=True)
    space.add_circle((120, 10), 4)
    space.add_text("not part of it")
    found = outline.from_file(save(), center_mm=(1.0, 2.0))
    assert found.area_mm2 == pytest.approx(800 + 100 * math.pi - 16 * math.pi, abs=0.05)
    assert found.bounds == pytest.approx((-29.0, -8.0, 31.0, 12.0), abs=OUTLINE_CHORD_MM)
    assert len(found.polygon.interiors) == 1
    assert not found.contains([(1.0, 2.0)])[0]


def test_dxf_chord_error_of_bulges(tmp_path: Path) -> None:
    _, space, save = dxf(tmp_path / "arc.dxf")
    bulge = math.tan(math.radians(70) / 4)
    half = 30 * math.sin(math.radians(35))
    # An arc of radius 30 over 70 degrees above its chord, walked counter-clockwise: its bulge is positive.
    space.add_lwpolyline([(half, 0, bulge), (-half, 0, 0), (0, -5, 0)], format="xyb", close=True)
    found = outline.from_file(save())
    sector = 30**2 / 2 * (math.radians(70) - math.sin(math.radians(70)))
    assert found.area_mm2 == pytest.approx(sector + 5 * half, abs=OUTLINE_CHORD_MM * 37)
    assert found.bounds[3] - found.bounds[1] == pytest.approx(
        5 + 30 * (1 - math.cos(math.radians(35))), abs=1e-6
    )


def test_dxf_ellipse_and_spline(tmp_path: Path) -> None:
    _, space, save = dxf(tmp_path / "ellipse.dxf")
    space.add_ellipse((5, 5), major_axis=(30, 10), ratio=0.4)
    spline = space.add_spline()  # periodic: its domain ends short of the outer knots
    spline.set_closed([(0, 0, 0), (6, 0, 0), (9, 6, 0), (3, 9, 0), (-2, 5, 0)], degree=3)
    found = outline.from_file(save())
    assert shapely.Polygon(found.polygon.exterior).area == pytest.approx(math.pi * 1000 * 0.4, abs=0.15)
    tool = spline.construction_tool()
    dense = np.array(
        [tuple(p)[:2] for p in tool.points(np.linspace(tool.knots()[3], tool.knots()[-4], 4001))]
    )
    hole = shapely.Polygon(found.polygon.interiors[0]).area
    assert hole == pytest.approx(shapely.Polygon(dense).area, abs=0.03)


def test_dxf_clamped_spline_against_scipy(tmp_path: Path) -> None:
    interpolate = pytest.importorskip("scipy.interpolate")
    _, space, save = dxf(tmp_path / "spline.dxf")
    corners = np.array([(0, 0, 0), (40, 0, 0), (40, 30, 0), (20, -5, 0), (0, 30, 0), (0, 0, 0)], dtype=float)
    spline = space.add_open_spline(corners, degree=3)
    found = outline.from_file(save())
    curve = interpolate.BSpline(np.array(list(spline.knots)), corners[:, :2], 3)(np.linspace(0, 3, 20001))
    curve -= (curve.min(axis=0) + curve.max(axis=0)) / 2
    assert found.area_mm2 == pytest.approx(shapely.Polygon(curve).area, abs=0.1)
    away = np.asarray(shapely.distance(found.polygon.boundary, shapely.points(curve)))
    assert away.max() <= 1.2 * OUTLINE_CHORD_MM  # the bounding box moves by a little of it as well


def test_dxf_loose_lines_and_arcs_are_joined_in_any_order_and_sense(tmp_path: Path) -> None:
    _, space, save = dxf(tmp_path / "loose.dxf")
    gap = OUTLINE_GAP_MM / 3
    space.add_line((40, 20), (0, 20 + gap))
    space.add_arc((40, 10), 10, 270, 90)
    space.add_line((40, gap), (0, 0))
    space.add_arc((0, 10), 10, 90, 270)
    found = outline.from_file(save())
    assert found.area_mm2 == pytest.approx(800 + 100 * math.pi, abs=0.3)
    assert len(found.polygon.interiors) == 0


@pytest.mark.parametrize(("units", "scale", "size"), [(1, 1.0, 25.4), (5, 99.0, 10.0), (None, 2.0, 2.0)])
def test_dxf_units(tmp_path: Path, units: int | None, scale: float, size: float) -> None:
    _, space, save = dxf(tmp_path / "units.dxf", units)
    space.add_lwpolyline([(0, 0), (3, 0), (3, 2), (0, 2)], close=True)
    found = outline.from_file(save(), scale_mm=scale)
    assert found.area_mm2 == pytest.approx(6 * size**2, rel=1e-9)


def test_dxf_blocks_mirrored_planes_and_hidden_layers(tmp_path: Path) -> None:
    document, space, save = dxf(tmp_path / "blocks.dxf")
    block = document.blocks.new("plate")
    block.add_lwpolyline([(0, 0), (30, 0), (30, 20), (0, 20)], close=True)
    space.add_blockref("plate", (10, 10), dxfattribs={"xscale": 2, "yscale": 2, "rotation": 90})
    # On a plane that faces down x runs the other way: this hole lies at x = -10, inside the turned plate.
    space.add_circle((10, 30), 3, dxfattribs={"extrusion": (0, 0, -1)})
    document.layers.add("construction").off()
    space.add_line((0, 0), (5, 5), dxfattribs={"layer": "construction"})
    found = outline.from_file(save())
    assert found.bounds == pytest.approx((-20, -30, 20, 30), abs=1e-9)
    assert found.area_mm2 == pytest.approx(2400 - 9 * math.pi, abs=0.02)
    hole = shapely.Polygon(found.polygon.interiors[0]).centroid
    assert (hole.x, hole.y) == pytest.approx((0, -10), abs=1e-6)  # (-10, 30) less the middle (-10, 40)


def test_dxf_polyline_entity_and_doubled_loop(tmp_path: Path) -> None:
    _, space, save = dxf(tmp_path / "old.dxf")
    for _ in range(2):
        space.add_polyline2d([(0, 0, 0), (10, 0, 1), (10, 10, 0), (0, 10, 0)], format="xyb", close=True)
    found = outline.from_file(save())
    assert found.area_mm2 == pytest.approx(100 + 12.5 * math.pi, abs=0.02)
    assert len(found.polygon.interiors) == 0


def test_dxf_faults_get_a_sentence(tmp_path: Path) -> None:
    _, space, save = dxf(tmp_path / "gap.dxf")
    space.add_lwpolyline([(0, 0), (10, 0), (10, 10), (0, 10), (0, 0.3)])
    with pytest.raises(
        OutlineError, match=r"2 free ends, the nearest two 0.3 mm apart at \(0, 0.*\) and \(0, 0"
    ):
        outline.from_file(save())
    _, space, save = dxf(tmp_path / "two.dxf")
    for x in (0, 20, 40):
        space.add_circle((x, 0), 5)
    with pytest.raises(OutlineError, match=r"two\.dxf holds 3 separate regions"):
        outline.from_file(save())
    _, space, save = dxf(tmp_path / "cross.dxf")
    space.add_circle((0, 0), 5)
    space.add_circle((5, 0), 4)
    with pytest.raises(OutlineError, match=r"two loops in cross\.dxf cross at \(3\.4"):
        outline.from_file(save())
    _, space, save = dxf(tmp_path / "island.dxf")
    for radius in (9, 6, 3):
        space.add_circle((0, 0), radius)
    with pytest.raises(OutlineError, match=r"a hole lies inside another hole"):
        outline.from_file(save())
    _, space, save = dxf(tmp_path / "bow.dxf")
    space.add_lwpolyline([(0, 0), (10, 10), (10, 0), (0, 10)], close=True)
    with pytest.raises(OutlineError, match=r"the loop in bow\.dxf crosses itself at \(5, 5\)"):
        outline.from_file(save())
    _, space, save = dxf(tmp_path / "none.dxf")
    space.add_text("nothing to cut")
    with pytest.raises(OutlineError, match=r"holds no line, arc or curve"):
        outline.from_file(save())
    _, space, save = dxf(tmp_path / "unit.dxf", 7)
    space.add_circle((0, 0), 5)
    with pytest.raises(OutlineError, match=r"\$INSUNITS 7; known are"):
        outline.from_file(save())


def test_unreadable_files_get_a_sentence(tmp_path: Path) -> None:
    with pytest.raises(OutlineError, match=r"absent\.dxf does not exist"):
        outline.from_file(tmp_path / "absent.dxf")
    for name, text in (
        ("a.dxf", "0\nSECTION\nnonsense"),
        ("b.dxf", "no drawing"),
        ("c.svg", "<svg x"),
        ("d.svg", "<a/>"),
    ):
        (tmp_path / name).write_text(text, encoding="utf-8")
        with pytest.raises(
            OutlineError,
            match=rf"{name[0]}\.(dxf cannot be read as DXF|svg cannot be read as SVG|svg holds no)",
        ):
            outline.from_file(tmp_path / name)
    (tmp_path / "plan.pdf").write_text("x", encoding="utf-8")
    with pytest.raises(
        OutlineError, match=r"found 'plan\.pdf'; an outline file has to end in \.dxf or \.svg"
    ):
        outline.from_file(tmp_path / "plan.pdf")


@pytest.mark.parametrize(("suffix", "package"), [(".dxf", "ezdxf"), (".svg", "svgelements")])
def test_missing_package_is_named(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, suffix: str, package: str
) -> None:
    monkeypatch.setitem(sys.modules, package, None)
    path = tmp_path / f"plan{suffix}"
    path.write_text("x", encoding="utf-8")
    with pytest.raises(OutlineError, match=rf'needs {package}: pip install "anticlast\[cad\]"'):
        outline.from_file(path)


# ------------------------------------------------------------------------------------------ drawings: SVG

SVG = '<svg xmlns="http://www.w3.org/2000/svg" xmlns:xlink="http://www.w3.org/1999/xlink" {size}>{body}</svg>'


def svg(path: Path, size: str, body: str) -> Path:
    path.write_text(SVG.format(size=size, body=body), encoding="utf-8")
    return path


@pytest.mark.parametrize(
    ("size", "scale", "unit"),
    [
        ('width="100mm" height="50mm" viewBox="0 0 200 100"', 9.0, 0.5),
        ('width="4in" height="2in" viewBox="0 0 400 200"', 9.0, 0.254),
        ('width="20cm" height="10cm" viewBox="0 0 200 100"', 9.0, 1.0),
        ('width="200" height="100" viewBox="0 0 200 100"', 3.0, 3.0),
        ('viewBox="0 0 200 100"', 1.0, 1.0),
        ("", 25.4, 25.4),
    ],
)
def test_svg_units(tmp_path: Path, size: str, scale: float, unit: float) -> None:
    pytest.importorskip("svgelements")
    body = '<rect x="10" y="10" width="180" height="80" rx="8"/><circle cx="50" cy="30" r="10"/>'
    found = outline.from_file(svg(tmp_path / "plate.svg", size, body), scale_mm=scale)
    exact = (180 * 80 - (4 - math.pi) * 64 - math.pi * 100) * unit**2
    # svgelements takes a millimetre for 0.0393701 inch: 0.5e-6 too long.
    assert found.area_mm2 == pytest.approx(exact, rel=2e-6, abs=0.2 * unit)
    # Y turned up: the circle, above the middle as drawn, lies at positive part Y.
    hole = shapely.Polygon(found.polygon.interiors[0]).centroid
    assert (hole.x, hole.y) == pytest.approx((-50 * unit, 20 * unit), rel=1e-5)


def test_svg_curves_against_closed_forms(tmp_path: Path) -> None:
    pytest.importorskip("svgelements")
    # Quadratic with x linear in t: y = 30 * 2 t (1 - t), so the area is 40 * 30 * 2 / 6.
    body = '<path d="M0,0 Q20,-30 40,0 A20,20 0 0 1 0,0 Z"/>'
    found = outline.from_file(svg(tmp_path / "curved.svg", 'width="100mm" viewBox="0 0 100 100"', body))
    assert found.area_mm2 == pytest.approx(40 * 30 / 3 + math.pi * 400 / 2, abs=0.1)
    body = '<path d="M0,0 C10,-30 20,-30 30,0 L30,10 0,10 Z" transform="rotate(30) translate(40 5)"/>'
    found = outline.from_file(
        svg(tmp_path / "cubic.svg", 'width="100mm" height="100mm" viewBox="0 0 100 100"', body)
    )
    # x is linear in t, so the area is 30 * integral of 30 * 3 t (1 - t) = 30 * 30 / 2.
    assert found.area_mm2 == pytest.approx(450 + 300, abs=0.1)


def test_svg_hidden_used_and_open_parts(tmp_path: Path) -> None:
    pytest.importorskip("svgelements")
    body = (
        '<defs><circle id="c" r="5"/></defs><g style="display:none"><rect width="3" height="3"/></g>'
        '<use xlink:href="#c" x="50" y="50"/><text x="1" y="2">plate</text>'
        '<path d="M10,10 L90,10"/><path d="M90,90 L90,10"/><polyline points="90,90 10,90 10,10"/>'
    )
    found = outline.from_file(
        svg(tmp_path / "mixed.svg", 'width="100mm" height="100mm" viewBox="0 0 100 100"', body)
    )
    assert found.area_mm2 == pytest.approx(6400 - 25 * math.pi, abs=0.1)
    with pytest.raises(OutlineError, match=r"2 free ends, the nearest two 7 mm apart"):
        outline.from_file(svg(tmp_path / "open.svg", "", '<path d="M0,0 L7,0 7,7 0,7"/>'))


# ------------------------------------------------------------------------------ chord bounds of the readers


hundredths = st.integers(-3000, 3000)


@settings(derandomize=True, max_examples=50, deadline=None)
@given(st.lists(st.tuples(hundredths, hundredths), min_size=3, max_size=4, unique=True))
def test_bezier_chord_error_is_within_the_promise(controls: list[tuple[int, int]]) -> None:
    from anticlast.outline_files import bezier_points

    given_points = np.array(controls) / 100
    chain = bezier_points(given_points, 0.01)
    t = np.linspace(0, 1, 1500)[:, None]
    degree = len(controls) - 1
    dense = sum(
        math.comb(degree, k) * t**k * (1 - t) ** (degree - k) * given_points[k] for k in range(degree + 1)
    )
    away = shapely.distance(LineString(chain), shapely.points(dense))
    assert np.max(away) <= 0.01 + 1e-9


def test_outline_refuses_what_is_not_a_region() -> None:
    with pytest.raises(OutlineError, match="the outline is empty"):
        Outline(Polygon())
    with pytest.raises(OutlineError, match="the outline is empty"):
        Outline(LineString([(0, 0), (1, 1)]))  # type: ignore[arg-type]
