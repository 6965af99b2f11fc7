"""Closed loops out of DXF and SVG drawings, in mm, Y up.

Curves are cut into chords with their ends on the curve, none further from it than a given chord error. DXF
arcs, circles, ellipses and polylines with bulges are taken in closed form; splines evaluated by ezdxf. Text,
dimensions, hatches and whatever lies on a layer that is off or frozen is passed over.
"""

from __future__ import annotations

import itertools
import math
import re
from collections.abc import Iterable, Iterator, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import shapely
from shapely.geometry import LineString, Polygon

from anticlast.errors import OutlineError
from anticlast.outline_checks import checked_ring, place
from anticlast.tolerances import OUTLINE_GAP_MM

if TYPE_CHECKING:
    from anticlast.records import Floats, Ints

# Millimetres in a drawing unit, by the DXF header variable $INSUNITS. 0 is "no unit".
_DXF_UNIT_MM = {
    1: 25.4, 2: 304.8, 4: 1.0, 5: 10.0, 6: 1000.0, 8: 25.4e-6, 9: 0.0254, 10: 914.4, 13: 1e-3, 14: 100.0
}  # fmt: skip


def read_loops(path: Path, scale_mm: float, chord_mm: float) -> tuple[Floats, list[Floats]]:
    """Return the outer loop and the holes drawn in a file.

    Parameters
    ----------
    path : Path
        ``.dxf`` or ``.svg``.
    scale_mm : float
        Length of a drawing unit where the file does not state one: a DXF without ``$INSUNITS``, an SVG
        whose ``width`` is missing or a plain number.
    chord_mm : float
        Largest distance between a curve and its chords.

    Returns
    -------
    outer : (n, 2)
        Ring of the biggest loop, mm, Y up; first point not repeated.
    holes : list of (n, 2)

    Raises
    ------
    OutlineError
    """
    readers = {".dxf": _dxf_curves, ".svg": _svg_curves}
    reader = readers.get(path.suffix.lower())
    if reader is None:
        raise OutlineError(f"found {path.name!r}; an outline file has to end in .dxf or .svg")
    if not path.is_file():
        raise OutlineError(f"{path} does not exist or is not a file")
    curves = [curve for curve in reader(path, scale_mm, chord_mm) if len(curve) > 1]
    return _nested(_closed(curves, path.name), path.name)


# ---------------------------------------------------------------------------------------- chords


def arc_points(centre: Floats, radius: float, start_rad: float, sweep_rad: float, chord: float) -> Floats:
    """Return points on a circular arc, ends included, (n, 2); a full circle has a multiple of four chords."""
    step = 2.0 * math.acos(max(1.0 - chord / radius, 0.5))
    quarters = max(1, math.ceil(abs(sweep_rad) / step / 4.0 - 1e-12))
    angle = start_rad + sweep_rad * np.linspace(0.0, 1.0, 4 * quarters + 1)
    return centre + radius * np.column_stack((np.cos(angle), np.sin(angle)))


def bulged_points(vertices: Floats, bulges: Floats, closed: bool, chord: float) -> Floats:
    """Return points along a polyline whose edges may be arcs, (n, 2).

    A bulge is the tangent of a quarter of the arc's sweep, positive to the left: centre and radius follow
    from the chord (derived here: the sagitta is bulge times half the chord).
    """
    ends = np.roll(vertices, -1, axis=0)
    pieces = [vertices[:1]]
    for index in range(len(vertices) if closed else len(vertices) - 1):
        start, end, bulge = vertices[index], ends[index], float(bulges[index])
        half = (end - start) / 2.0
        if bulge == 0.0 or not half.any():
            pieces.append(end[None])
            continue
        left = np.array([-half[1], half[0]])
        centre = start + half + left * (1.0 - bulge * bulge) / (2.0 * bulge)
        spoke = start - centre
        arc = arc_points(
            centre, math.hypot(*spoke), math.atan2(spoke[1], spoke[0]), 4.0 * math.atan(bulge), chord
        )
        arc[-1] = end
        pieces.append(arc[1:])
    return np.concatenate(pieces)


def bezier_points(controls: Floats, chord: float) -> Floats:
    """Return points on a quadratic or cubic Bezier curve, ends included, (n, 2).

    Between points dt apart a curve leaves its chord by at most dt^2 / 8 times the greatest second
    derivative, which for a Bezier of degree d is at most d (d - 1) times the greatest second difference of
    its control points (standard bounds).
    """
    degree = len(controls) - 1
    bend = degree * (degree - 1) * float(np.hypot(*np.diff(controls, n=2, axis=0).T).max())
    t = np.linspace(0.0, 1.0, max(1, math.ceil(math.sqrt(bend / (8.0 * chord)))) + 1)[:, None]
    weights = [math.comb(degree, k) * t**k * (1.0 - t) ** (degree - k) for k in range(degree + 1)]
    return sum(
        (weight * control for weight, control in zip(weights, controls, strict=True)), np.zeros((1, 2))
    )


# ---------------------------------------------------------------------------------------- DXF


def _dxf_curves(path: Path, scale_mm: float, chord_mm: float) -> list[Floats]:
    """Return the curves of a DXF file's model space, mm."""
    try:
        import ezdxf
    except ImportError:
        raise OutlineError('reading a .dxf file needs ezdxf: pip install "anticlast[cad]"') from None
    try:
        document = ezdxf.readfile(path)
    except (OSError, UnicodeError, ValueError, ezdxf.DXFError) as error:
        raise OutlineError(f"{path.name} cannot be read as DXF ({error})") from None
    unit = int(document.header.get("$INSUNITS", 0))
    if unit != 0 and unit not in _DXF_UNIT_MM:
        raise OutlineError(f"{path.name} has $INSUNITS {unit}; known are 0 and {sorted(_DXF_UNIT_MM)}")
    scale = _DXF_UNIT_MM.get(unit, scale_mm)
    hidden = {layer.dxf.name.lower() for layer in document.layers if layer.is_off() or layer.is_frozen()}
    curves = []
    for entity in _without_blocks(document.modelspace()):
        if entity.dxf.get("layer", "0").lower() not in hidden:
            curve = _dxf_curve(entity, chord_mm / scale)
            if curve is not None:
                curves.append(np.asarray(curve, dtype=np.float64)[:, :2] * scale)
    return curves


def _without_blocks(entities: Iterable[Any]) -> Iterator[Any]:
    """Yield entities with inserted blocks replaced by what they hold."""
    for entity in entities:
        if entity.dxftype() == "INSERT":
            yield from _without_blocks(entity.virtual_entities())
        else:
            yield entity


def _dxf_curve(entity: Any, chord: float) -> Any | None:
    """Return points (n, 2 or 3) along one entity in drawing units, or None if it is no curve."""
    kind = entity.dxftype()
    if kind == "LINE":
        return [tuple(entity.dxf.start), tuple(entity.dxf.end)]
    if kind in {"CIRCLE", "ARC"}:
        start = math.radians(entity.dxf.start_angle) if kind == "ARC" else 0.0
        end = math.radians(entity.dxf.end_angle) if kind == "ARC" else 2.0 * math.pi
        centre = np.array(tuple(entity.dxf.center))
        sweep = (end - start) % (2.0 * math.pi) or 2.0 * math.pi
        flat = arc_points(centre[:2], float(entity.dxf.radius), start, sweep, chord)
        return _in_world(entity, flat, float(centre[2]))
    if kind == "ELLIPSE":
        start, end = float(entity.dxf.start_param), float(entity.dxf.end_param)
        sweep = (end - start) % (2.0 * math.pi) or 2.0 * math.pi
        # The second derivative over the parameter is the radius at most: chord error <= major step^2 / 8.
        step = math.sqrt(8.0 * chord / entity.dxf.major_axis.magnitude)
        quarters = math.ceil(sweep / min(step, 1.0) / 4.0)
        return [
            tuple(point) for point in entity.vertices(start + sweep * np.linspace(0, 1, 4 * quarters + 1))
        ]
    if kind == "SPLINE":
        return _spline_points(entity.construction_tool(), chord)
    if kind == "LWPOLYLINE":
        rows = np.array(entity.get_points("xyb"), dtype=np.float64).reshape(-1, 3)
        flat = (
            bulged_points(rows[:, :2], rows[:, 2], bool(entity.closed), chord) if len(rows) else rows[:, :2]
        )
        return _in_world(entity, flat, float(entity.dxf.elevation))
    if kind == "POLYLINE" and (entity.is_2d_polyline or entity.is_3d_polyline):
        where = np.array([tuple(vertex.dxf.location) for vertex in entity.vertices]).reshape(-1, 3)
        bulges = np.array([vertex.dxf.get("bulge", 0.0) for vertex in entity.vertices])
        if entity.is_3d_polyline:
            return np.concatenate((where, where[:1])) if entity.is_closed else where
        flat = (
            bulged_points(where[:, :2], bulges, bool(entity.is_closed), chord) if len(where) else where[:, :2]
        )
        return _in_world(entity, flat, 0.0)
    return None


def _spline_points(spline: Any, chord: float) -> Floats:
    """Return points (n, 3) along a B-spline over its domain; a periodic one ends short of its outer knots.

    Each knot span is halved evenly until its halfway points keep to their chords; the error falls fourfold
    with each halving, so what lies between is no further away than they are.
    """
    knots, degree = np.array(spline.knots()), int(spline.degree)
    inner = np.unique(knots[degree : len(knots) - degree])
    pieces = []
    for start, end in itertools.pairwise(inner):
        for halvings in range(3, 16):
            t = np.linspace(start, end, 2 * 2**halvings + 1)
            points = np.array([tuple(point) for point in spline.points(t)])
            off = points[1::2] - (points[:-1:2] + points[2::2]) / 2.0
            if np.linalg.norm(off, axis=1).max() <= chord:
                break
        pieces.append(points[:-1])
    return np.concatenate((*pieces, points[-1:]))


def _in_world(entity: Any, flat: Floats, height: float) -> list[tuple[float, ...]]:
    """Turn points of an entity's own plane into drawing coordinates (a mirrored part lies face down)."""
    return [
        tuple(point) for point in entity.ocs().points_to_wcs((float(x), float(y), height) for x, y in flat)
    ]


# ---------------------------------------------------------------------------------------- SVG


def _svg_curves(path: Path, scale_mm: float, chord_mm: float) -> list[Floats]:
    """Return the curves of an SVG file, mm, Y turned up.

    With ``width`` in mm, cm, in, pt, pc or Q the drawing has that size; otherwise one user unit is
    ``scale_mm``.
    """
    try:
        import svgelements
    except ImportError:
        raise OutlineError('reading a .svg file needs svgelements: pip install "anticlast[cad]"') from None
    try:
        # At 25.4 pixels to the inch one pixel is one millimetre.
        drawing = svgelements.SVG.parse(str(path), reify=True, ppi=25.4)
        shapes = [
            svgelements.Path(each) for each in drawing.elements() if isinstance(each, svgelements.Shape)
        ]
        width = str(drawing.values["attributes"].get("width", ""))
    except (OSError, SyntaxError, ValueError, TypeError, KeyError, AttributeError) as error:
        raise OutlineError(f"{path.name} cannot be read as SVG ({error})") from None
    scale = 1.0 if re.fullmatch(r"\s*[-+.\deE]+\s*(mm|cm|in|pt|pc|Q)\s*", width) else scale_mm
    curves = []
    for shape in shapes:
        shape.reify()
        for piece in shape.as_subpaths():
            curves.append(_svg_subpath(piece, chord_mm / scale) * (scale, -scale))
    return curves


def _svg_subpath(segments: Iterable[Any], chord: float) -> Floats:
    """Return points along one subpath, (n, 2), Y still down."""
    points: list[Floats] = []
    for segment in segments:
        kind = type(segment).__name__
        if kind == "Move":
            points = [np.array([[segment.end.x, segment.end.y]])]
        elif kind == "Arc":
            widest = max(float(abs(segment.rx)), float(abs(segment.ry)))
            steps = max(1, math.ceil(abs(segment.sweep) / min(math.sqrt(8.0 * chord / widest), 1.0)))
            t = np.linspace(0.0, 1.0, steps + 1)[1:]
            points.append(np.array([(at.x, at.y) for at in (segment.point(float(share)) for share in t)]))
        elif kind in {"CubicBezier", "QuadraticBezier"}:
            controls = ("control1", "control2") if kind == "CubicBezier" else ("control",)
            given = [segment.start, *(getattr(segment, each) for each in controls), segment.end]
            points.append(bezier_points(np.array([(at.x, at.y) for at in given]), chord)[1:])
        elif segment.end is not None:
            points.append(np.array([[segment.end.x, segment.end.y]]))
    return np.concatenate(points) if points else np.empty((0, 2))


# ---------------------------------------------------------------------------------------- loops


def _closed(curves: Sequence[Floats], name: str) -> list[Floats]:
    """Return all closed loops, loose curves joined where their ends meet within ``OUTLINE_GAP_MM``."""
    if not curves:
        raise OutlineError(f"{name} holds no line, arc or curve")
    if not all(np.isfinite(curve).all() for curve in curves):
        raise OutlineError(f"{name} holds a coordinate that is not a finite number")
    gaps = np.array([math.hypot(*(curve[0] - curve[-1])) for curve in curves])
    lengths = np.array([float(np.hypot(*np.diff(curve, axis=0).T).sum()) for curve in curves])
    loops = [curve for curve, gap, length in zip(curves, gaps, lengths, strict=True)
             if gap <= OUTLINE_GAP_MM < length / 2.0]  # fmt: skip
    loose = [curve for curve, gap, length in zip(curves, gaps, lengths, strict=True)
             if gap > OUTLINE_GAP_MM and length > OUTLINE_GAP_MM]  # fmt: skip
    return loops + (_joined(loose, name) if loose else [])


def _joined(loose: list[Floats], name: str) -> list[Floats]:
    """Join loose curves end to end into loops; every curve has to be used."""
    ends = np.array([point for curve in loose for point in (curve[0], curve[-1])])
    meeting = _meeting(ends)
    place_of = np.array([ends[meeting == label].mean(axis=0) for label in range(meeting.max() + 1)])
    lines = []
    for index, curve in enumerate(loose):
        inner = curve[1:-1]
        lines.append(
            np.concatenate(
                (place_of[meeting[2 * index]][None], inner, place_of[meeting[2 * index + 1]][None])
            )
        )
    faces, bridges, dangles, crossing = shapely.polygonize_full([LineString(line) for line in lines])
    if not (bridges.is_empty and dangles.is_empty):
        free = np.flatnonzero(np.bincount(meeting) == 1)
        raise OutlineError(_open_ends(place_of[free], name))
    if not crossing.is_empty:
        checked_ring(shapely.get_coordinates(shapely.get_parts(crossing)[0]), f"the loop in {name}")
    return [shapely.get_coordinates(face.exterior) for face in shapely.get_parts(faces)]


def _meeting(ends: Floats) -> Ints:
    """Return a label 0, 1, ... for each end (n,); ends within ``OUTLINE_GAP_MM`` of each other share one."""
    points = np.atleast_1d(np.asarray(shapely.points(ends)))
    one, other = shapely.STRtree(points).query(points, predicate="dwithin", distance=OUTLINE_GAP_MM)
    label = np.arange(len(ends))
    while True:
        before = label.copy()
        np.minimum.at(label, one, before[other])
        if (label == before).all():
            return np.unique(label, return_inverse=True)[1]


def _open_ends(ends: Floats, name: str) -> str:
    """Say where line work is open: the two free ends nearest to each other and the gap between them."""
    if len(ends) < 2:
        return f"{name} holds lines that belong to no closed loop; close or delete them"
    points = np.atleast_1d(np.asarray(shapely.points(ends)))
    tree = shapely.STRtree(points)
    pairs, distances = tree.query_nearest(points, exclusive=True, return_distance=True, all_matches=False)
    nearest = int(np.argmin(distances))
    first, second = ends[pairs[0][nearest]], ends[pairs[1][nearest]]
    return (
        f"{name} holds lines that do not close: {len(ends)} free ends, the nearest two "
        f"{distances[nearest]:.4g} mm apart at {place(first)} and {place(second)} mm; ends have to meet "
        f"within {OUTLINE_GAP_MM:g} mm"
    )


def _nested(loops: list[Floats], name: str) -> tuple[Floats, list[Floats]]:
    """Sort loops into the outer one and its holes; a loop drawn twice counts once."""
    rings = [checked_ring(loop, f"the loop in {name}") for loop in loops]
    regions = [shapely.normalize(Polygon(ring)) for ring in rings]
    order = sorted(range(len(rings)), key=lambda index: -regions[index].area)
    if not order:
        raise OutlineError(f"{name} holds no closed loop")
    outer = regions[order[0]]
    kept: list[int] = []
    apart = 0
    for index in order:
        if any(_same(regions[index], regions[other]) for other in kept):
            continue
        kept.append(index)
        if not outer.intersects(regions[index]):
            apart += 1
        elif not outer.covers(regions[index]):
            crossing = shapely.get_coordinates(shapely.intersection(outer.exterior, regions[index].exterior))
            raise OutlineError(
                f"two loops in {name} cross at {place(crossing[0])} mm; loops have to lie inside the outline"
            )
    if apart:
        raise OutlineError(
            f"{name} holds {apart + 1} separate regions; an outline is one region, with or without holes"
        )
    return rings[kept[0]], [rings[index] for index in kept[1:]]


def _same(one: Polygon, other: Polygon) -> bool:
    return bool(shapely.equals_exact(one, other, tolerance=OUTLINE_GAP_MM))
