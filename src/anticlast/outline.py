"""The plan outline of a part or blank: a flat region in part coordinates, looked at along Z.

Curves are held as polygons. Their vertices lie on the true curve, quarter points of circles included, so
bounds are exact; between vertices the true curve is at most ``flattening_mm`` away. A convex arc therefore
loses, and a concave arc gains, two thirds of that times its length in area. The boundary belongs to the
region, with ``SAME_POINT_MM`` of slack for round-off.

Plan coordinates of a direction d (radians from part X): u = x cos d + y sin d along it,
v = -x sin d + y cos d to its left.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Literal

import numpy as np
import numpy.typing as npt
import shapely
from shapely.geometry import MultiPolygon, Polygon

from anticlast.errors import OutlineError
from anticlast.outline_checks import check_region, checked_ring
from anticlast.outline_cuts import cell_triangles, cut_edges
from anticlast.tolerances import OUTLINE_CHORD_MM, SAME_POINT_MM

if TYPE_CHECKING:
    from anticlast.records import Bools, Floats, Ints

Corners = Literal["round", "mitre"]

# A mitred corner reaches at most this many times the distance grown; sharper corners are cut off square.
_MITRE_LIMIT = 8.0


def _arc_steps(radius_mm: float, sweep_rad: float, chord_mm: float) -> int:
    """Return how many equal chords keep an arc within a chord error; sagitta = r (1 - cos(step / 2))."""
    if radius_mm <= chord_mm:
        return max(3, math.ceil(abs(sweep_rad) / (math.pi / 4)))
    step = 2.0 * math.acos(1.0 - chord_mm / radius_mm)
    return max(1, math.ceil(abs(sweep_rad) / step - 1e-12))


def _rings(geometry: Polygon | MultiPolygon) -> list[Floats]:
    """Return every ring of a region as (n, 2), the first vertex repeated at the end."""
    parts = shapely.get_parts(geometry)
    return [shapely.get_coordinates(ring) for part in parts for ring in (part.exterior, *part.interiors)]


@dataclass(frozen=True, slots=True)
class Outline:
    """A closed plan region in part coordinates, mm.

    Attributes
    ----------
    polygon : shapely Polygon or MultiPolygon
        The region; more than one piece only after shrinking.
    flattening_mm : float
        Furthest the true curve lies from the polygon's edges.
    """

    polygon: Polygon | MultiPolygon
    flattening_mm: float = OUTLINE_CHORD_MM
    _roomy: Polygon | MultiPolygon = field(init=False, repr=False, compare=False)
    _edges: Floats = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        check_region(self.polygon)
        roomy = shapely.buffer(
            self.polygon, SAME_POINT_MM, join_style="mitre", mitre_limit=_MITRE_LIMIT, quad_segs=1
        )
        shapely.prepare(roomy)
        # The search index is built at the first question; asked here, so that threads may share it later.
        shapely.intersects_xy(roomy, 0.0, 0.0)
        edges = np.concatenate([np.hstack((ring[:-1], ring[1:])) for ring in _rings(self.polygon)])
        edges.flags.writeable = False
        object.__setattr__(self, "_roomy", roomy)
        object.__setattr__(self, "_edges", edges)

    # ------------------------------------------------------------------------------------ measures

    @property
    def bounds(self) -> tuple[float, float, float, float]:
        """Smallest x, smallest y, largest x, largest y, mm."""
        return tuple(float(value) for value in self.polygon.bounds)  # type: ignore[return-value]

    @property
    def area_mm2(self) -> float:
        """Plan area of the polygon, holes taken off."""
        return float(self.polygon.area)

    @property
    def perimeter_mm(self) -> float:
        """Length of all rings of the polygon, holes included."""
        return float(self.polygon.length)

    def v_range(self, direction_rad: float) -> tuple[float, float]:
        """Return the smallest and largest v that the region reaches, mm, for a direction in radians."""
        v = -self._edges[:, 0] * math.sin(direction_rad) + self._edges[:, 1] * math.cos(direction_rad)
        return float(v.min()), float(v.max())

    # ------------------------------------------------------------------------------------ questions

    def contains(self, xy: npt.ArrayLike) -> Bools:
        """Tell which points lie inside or on the boundary.

        Parameters
        ----------
        xy : (n, 2)
            Points in part coordinates, mm.

        Returns
        -------
        (n,) bool
            Points up to ``SAME_POINT_MM`` outside count as on the boundary. nan is outside.
        """
        points = np.asarray(xy, dtype=np.float64).reshape(-1, 2)
        return np.asarray(shapely.intersects_xy(self._roomy, points[:, 0], points[:, 1]))

    def contains_segment(self, p: npt.ArrayLike, q: npt.ArrayLike) -> Bools:
        """Tell which straight segments stay inside or on the boundary all the way.

        Parameters
        ----------
        p, q : (n, 2) or (2,)
            Ends in part coordinates, mm; shapes broadcast.

        Returns
        -------
        (n,) bool
        """
        start, end = np.broadcast_arrays(
            np.atleast_2d(np.asarray(p, dtype=np.float64)), np.atleast_2d(np.asarray(q, dtype=np.float64))
        )
        return np.asarray(shapely.covers(self._roomy, shapely.linestrings(np.stack((start, end), axis=1))))

    # ------------------------------------------------------------------------------------ clipping

    def clip_line(self, direction_rad: float, v_mm: float) -> Floats:
        """Return the intervals of u inside the region on one plan line.

        Parameters
        ----------
        direction_rad : float
            Direction of the line, radians from part X.
        v_mm : float
            Its distance to the left of the part origin, seen along the direction.

        Returns
        -------
        (k, 2)
            u where the line enters and leaves, ascending, mm.
        """
        _, u0, u1 = self.clip_lines(direction_rad, [v_mm])
        return np.column_stack((u0, u1))

    def clip_lines(self, direction_rad: float, v_mm: npt.ArrayLike) -> tuple[Ints, Floats, Floats]:
        """Return the intervals of u inside the region on many parallel plan lines.

        A line along an edge counts as inside: what is returned is the union of the cuts just above and just
        below the line, which for a closed region is the cut itself. Intervals shorter than
        ``SAME_POINT_MM`` (a touched corner) are left out.

        Parameters
        ----------
        direction_rad : float
            Direction of the lines, radians from part X.
        v_mm : (m,)
            Their distances to the left of the part origin, in any order.

        Returns
        -------
        line_index : (k,) int64
            Row of ``v_mm`` that the interval lies on, ascending.
        u0, u1 : (k,)
            Where the line enters and leaves, ascending within a line, mm.
        """
        wanted = np.asarray(v_mm, dtype=np.float64).reshape(-1)
        order = np.argsort(wanted, kind="stable")
        along, across = self._turned_edges(direction_rad)
        line_index, u0, u1 = cut_edges(along, across, wanted[order])
        line_index = order[line_index]
        arranged = np.lexsort((u0, line_index))
        return line_index[arranged], u0[arranged], u1[arranged]

    def _turned_edges(self, direction_rad: float) -> tuple[Floats, Floats]:
        """Return u (m, 2) and v (m, 2) of the ends of every edge; shared vertices come out bit-equal."""
        cos, sin = math.cos(direction_rad), math.sin(direction_rad)
        x, y = self._edges[:, 0::2], self._edges[:, 1::2]
        return x * cos + y * sin, y * cos - x * sin

    # ------------------------------------------------------------------------------------ points and pieces

    def grid(self, spacing_mm: float) -> Floats:
        """Return the points inside at whole multiples of a spacing in x and y, (n, 2), mm, row by row."""
        x0, y0, x1, y1 = self.bounds
        x = spacing_mm * np.arange(math.ceil(x0 / spacing_mm - 1e-9), math.floor(x1 / spacing_mm + 1e-9) + 1)
        y = spacing_mm * np.arange(math.ceil(y0 / spacing_mm - 1e-9), math.floor(y1 / spacing_mm + 1e-9) + 1)
        points = np.stack(np.meshgrid(x, y), axis=-1).reshape(-1, 2)
        return points[self.contains(points)]

    def boundary_points(self, spacing_mm: float) -> Floats:
        """Return points on every ring, vertices included, neighbours at most a spacing apart, (n, 2), mm."""
        rings = _rings(shapely.segmentize(self.polygon, spacing_mm))
        return np.concatenate([ring[:-1] for ring in rings])

    def triangles(self, max_edge_mm: float) -> Floats:
        """Cut the region into triangles that share whole edges.

        Whole square cells are halved; cells that the boundary cuts are clipped and filled by a constrained
        Delaunay triangulation. The cells are laid so that no vertex of the outline falls on a cell line, so
        neighbours always meet in the same points.

        Parameters
        ----------
        max_edge_mm : float
            No edge is longer, mm.

        Returns
        -------
        (m, 3, 2)
            Corners, counter-clockwise seen from +Z, mm. Neighbours' corners agree to round-off.
        """
        return cell_triangles(self.polygon, max_edge_mm)

    # ------------------------------------------------------------------------------------ other outlines

    def grown(self, distance_mm: float, corners: Corners = "round") -> Outline:
        """Return the outline moved outwards, or inwards for a negative distance.

        Parameters
        ----------
        distance_mm : float
        corners : {"round", "mitre"}
            Round keeps every point of the new outline at the distance; mitre keeps corners sharp.

        Raises
        ------
        OutlineError
            Nothing is left.
        """
        if distance_mm == 0.0:
            return self
        chord = max(self.flattening_mm, OUTLINE_CHORD_MM)
        quarter = _arc_steps(abs(distance_mm), math.pi / 2, chord)
        moved = shapely.buffer(
            self.polygon, distance_mm, quad_segs=quarter, join_style=corners, mitre_limit=_MITRE_LIMIT
        )
        if moved.is_empty:
            raise OutlineError(f"moving the outline in by {-distance_mm:g} mm leaves nothing of it")
        return Outline(moved, chord if corners == "round" else self.flattening_mm)


# ---------------------------------------------------------------------------------------- builders


def _size(value_mm: float, what: str) -> float:
    if not (math.isfinite(value_mm) and value_mm > 0.0):
        raise OutlineError(f"{what} is {value_mm:g} mm; it has to be a positive length")
    return float(value_mm)


def _centre(center_mm: Sequence[float]) -> Floats:
    centre = np.array(center_mm, dtype=np.float64)
    if centre.shape != (2,) or not np.isfinite(centre).all():
        raise OutlineError("the centre has to be two finite numbers, [x, y]")
    return centre


def _cornered(corners: Floats, radius_mm: float, centre: Floats) -> Outline:
    """Return the convex outline of four corner arcs about given centres, counter-clockwise from +x +y."""
    steps = _arc_steps(radius_mm, math.pi / 2, OUTLINE_CHORD_MM)
    angle = np.linspace(0.0, math.pi / 2, steps + 1)
    arc = radius_mm * np.column_stack((np.cos(angle), np.sin(angle)))
    arc[0], arc[-1] = (radius_mm, 0.0), (0.0, radius_mm)
    ring = []
    for corner in corners:
        ring.append(corner + arc)
        arc = np.column_stack((-arc[:, 1], arc[:, 0]))
    return Outline(Polygon(checked_ring(np.concatenate(ring) + centre, "the outline")), OUTLINE_CHORD_MM)


def rectangle(
    size_mm: Sequence[float], corner_radius_mm: float = 0.0, center_mm: Sequence[float] = (0.0, 0.0)
) -> Outline:
    """Return a rectangle, its sides parallel to part X and Y.

    Parameters
    ----------
    size_mm : (width, height)
        Along X and Y, mm.
    corner_radius_mm : float
        0 for sharp corners; at most half the shorter side.
    center_mm : (x, y)

    Raises
    ------
    OutlineError
        A size is not positive, or the corner radius does not fit.
    """
    half = np.array([_size(size_mm[0], "the width"), _size(size_mm[1], "the height")]) / 2.0
    if not 0.0 <= corner_radius_mm <= half.min() + SAME_POINT_MM:
        raise OutlineError(
            f"the corner radius is {corner_radius_mm:g} mm; with sides {2 * half[0]:g} by {2 * half[1]:g} mm "
            f"it can be 0 to {half.min():g} mm"
        )
    signs = np.array([[1.0, 1.0], [-1.0, 1.0], [-1.0, -1.0], [1.0, -1.0]])
    centre = _centre(center_mm)
    if corner_radius_mm == 0.0:
        return Outline(Polygon(signs * half + centre), 0.0)
    return _cornered(signs * np.maximum(half - corner_radius_mm, 0.0), float(corner_radius_mm), centre)


def circle(diameter_mm: float, center_mm: Sequence[float] = (0.0, 0.0)) -> Outline:
    """Return a circle of a diameter (mm) about a centre."""
    return _cornered(np.zeros((4, 2)), _size(diameter_mm, "the diameter") / 2.0, _centre(center_mm))


def slot(size_mm: Sequence[float], center_mm: Sequence[float] = (0.0, 0.0)) -> Outline:
    """Return a slot: a rectangle with half-round ends.

    Parameters
    ----------
    size_mm : (length, width)
        Length over all along part X, width along Y, mm; a length below the width gives a slot along Y.
    center_mm : (x, y)
    """
    length, width = _size(size_mm[0], "the length"), _size(size_mm[1], "the width")
    radius = min(length, width) / 2.0
    return rectangle((length, width), radius, center_mm)


def polygon(
    points_mm: npt.ArrayLike, holes_mm: Iterable[npt.ArrayLike] = (), center_mm: Sequence[float] = (0.0, 0.0)
) -> Outline:
    """Return an outline from the points of its ring and of its holes.

    Parameters
    ----------
    points_mm : (n, 2)
        At least three, in order round the outline, either way; counted from ``center_mm``. The ring closes by
        itself.
    holes_mm : iterable of (n, 2)
        The same for each hole.
    center_mm : (x, y)
        Where the points' own (0, 0) goes.

    Raises
    ------
    OutlineError
        Too few points, a ring that crosses itself, no area, a hole outside, a number that is not finite.
    """
    centre = _centre(center_mm)
    shell = checked_ring(points_mm, "the outline") + centre
    holes = [checked_ring(hole, f"hole {number}") + centre for number, hole in enumerate(holes_mm, start=1)]
    return Outline(Polygon(shell, holes), 0.0)


def from_file(path: str | Path, center_mm: Sequence[float] = (0.0, 0.0), scale_mm: float = 1.0) -> Outline:
    """Return the outline drawn in a DXF or SVG file.

    The biggest closed loop is the outline, loops inside it are holes. SVG counts Y downwards; it is turned
    round so that the drawing looks the same seen from part +Z.

    Parameters
    ----------
    path : path
        Ends in ``.dxf`` or ``.svg``.
    center_mm : (x, y)
        Where the middle of the drawing's bounding box goes, mm.
    scale_mm : float
        Length of one drawing unit, mm, used where the file does not state a unit itself.

    Raises
    ------
    OutlineError
        The file cannot be read, a package it needs is missing, or it does not hold exactly one closed region.
    """
    from anticlast import outline_files

    shell, holes = outline_files.read_loops(Path(path), scale_mm, OUTLINE_CHORD_MM)
    region = Polygon(checked_ring(shell, "the outline"), [checked_ring(hole, "a hole") for hole in holes])
    check_region(region)
    middle = np.array(region.bounds).reshape(2, 2).mean(axis=0)
    shift = _centre(center_mm) - middle
    return Outline(shapely.transform(region, lambda xy: xy + shift), OUTLINE_CHORD_MM)
