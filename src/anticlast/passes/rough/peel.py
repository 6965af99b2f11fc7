"""Peel one layer of stock from its open side inwards, so that no pass bites deeper than the width of cut.

The cutter's centre stays in a region ``room``. Each round lets it advance until it would bite the width of cut into the
stock that is left, with inner corners rounded, so that passes turn into the wall and out of it instead of running square
into it. docs/theory-roughing.md, "Peeling".
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import shapely
from shapely.geometry import LineString, MultiPolygon, Polygon
from shapely.geometry.base import BaseGeometry

from anticlast.errors import NotConverged
from anticlast.records import Bools, Floats

# Edges of a quarter circle in buffers: at 10 mm radius chords are 0.012 mm off, and always inside the circle.
_QUARTER = 16
# Vertices closer to a straight line than this are left out of stock and of passes (mm).
SIMPLER_MM = 0.005
# Stock thinner than this is round-off of the buffers (mm); passes that bite no deeper are left out.
SLIVER_MM = 0.04
# Rows of a pass on which it is asked whether it cuts are at most this share of the radius apart.
_SPACING_SHARE = 0.15
_MOST_ROUNDS = 2000


@dataclass(frozen=True, slots=True)
class Bite:
    """How one layer is cut, mm.

    Attributes
    ----------
    radius_mm : float
        Of the cutter at the top of the layer.
    width_mm : float
        Width of cut: how deep a pass bites into the stock, square to its path.
    corner_mm : float
        Radius to which the passes' inner corners are rounded.
    """

    radius_mm: float
    width_mm: float
    corner_mm: float


@dataclass(frozen=True, slots=True)
class Piece:
    """One pass, in plan, air at both ends unless closed; the stock that it cuts lies to its right.

    Attributes
    ----------
    xy : (n, 2)
        Path of the cutter's centre. A closed piece repeats its first point at the end.
    closed : bool
    round : int
        Pieces of earlier rounds nearby have to be cut before.
    swept : polygon
        What the pass clears at the top of the layer.
    descent : (k, 3) or None
        Way of the tip down into closed stock; it ends where the piece starts.
    """

    xy: Floats
    closed: bool
    round: int
    swept: BaseGeometry
    descent: Floats | None = None


def grown(shape: BaseGeometry, distance_mm: float) -> BaseGeometry:
    """Return a region or line grown (or shrunk) with round corners; chords of the rounding lie inside."""
    return shapely.buffer(shape, distance_mm, quad_segs=_QUARTER)


def thick_parts(stock: BaseGeometry) -> BaseGeometry:
    """Return the stock simplified, without slivers that are no more than round-off."""
    stock = shapely.simplify(stock, SIMPLER_MM)
    parts = [part for part in shapely.get_parts(stock) if isinstance(part, Polygon) and _is_thick(part)]
    return MultiPolygon(parts) if parts else Polygon()


def _is_thick(part: Polygon) -> bool:
    return bool(
        part.area > 0.5 * SLIVER_MM * part.length and not shapely.buffer(part, -0.5 * SLIVER_MM).is_empty
    )


def peel(
    room: BaseGeometry, stock: BaseGeometry, bite: Bite, first_round: int = 0, rounds: int | None = None
) -> tuple[list[Piece], BaseGeometry]:
    """Return the passes that clear stock from where there is air, and the stock that they cannot reach.

    Parameters
    ----------
    room : polygons
        Where the cutter's centre may stand.
    stock : polygons
        What the layer is to lose; ``room`` grown by the radius at most.
    bite : Bite
    first_round : int
        Number of the first round.
    rounds : int or None
        Most rounds to make; None for as many as it takes.
    """
    pieces: list[Piece] = []
    number = first_round
    # Rounded corners first; narrow places, which the rounding shuts out, afterwards with smaller bites.
    for share, width in ((1.0, bite.width_mm), (0.3, bite.width_mm), (0.0, 0.5 * bite.width_mm)):
        corner = share * bite.corner_mm
        while not stock.is_empty and (rounds is None or number - first_round < rounds):
            found = list(_round(room, stock, bite, corner, width, number))
            if not found:
                break
            swept = shapely.union_all([piece.swept for piece in found])
            rest = thick_parts(shapely.difference(stock, swept))
            if stock.area - rest.area < SLIVER_MM * bite.radius_mm:
                break
            pieces += found
            stock = rest
            number += 1
            if number - first_round > _MOST_ROUNDS:
                raise NotConverged("peeling of a layer, stock left [mm2]", float(stock.area), 0.0)
    return pieces, stock


def _round(
    room: BaseGeometry, stock: BaseGeometry, bite: Bite, corner_mm: float, width_mm: float, number: int
) -> Iterator[Piece]:
    """Yield the passes of one round."""
    near = shapely.intersection(
        room, shapely.box(*_widened(stock.bounds, 2.0 * bite.radius_mm + 2.0 * corner_mm))
    )
    reach = shapely.difference(near, grown(stock, bite.radius_mm - width_mm))
    if corner_mm > 0.0:
        reach = grown(shapely.buffer(reach, -corner_mm, quad_segs=_QUARTER), corner_mm)
        reach = shapely.intersection(reach, near)
    reach = shapely.simplify(reach, SIMPLER_MM)
    reach = shapely.intersection(reach, near)
    air = shapely.difference(near, grown(stock, bite.radius_mm))
    for part in shapely.get_parts(reach):
        if not isinstance(part, Polygon) or part.area < SLIVER_MM**2 or not shapely.intersects(part, air):
            continue
        part = shapely.orient_polygons(part)
        for ring in (part.exterior, *part.interiors):
            yield from _engaged(shapely.get_coordinates(ring), stock, bite, number)


def _widened(bounds: tuple[float, float, float, float], by_mm: float) -> tuple[float, float, float, float]:
    x0, y0, x1, y1 = bounds
    return x0 - by_mm, y0 - by_mm, x1 + by_mm, y1 + by_mm


def _engaged(ring: Floats, stock: BaseGeometry, bite: Bite, number: int) -> Iterator[Piece]:
    """Yield the runs of a closed ring on which the cutter is in the stock, each with a point in air at its ends."""
    xy = shapely.get_coordinates(
        shapely.segmentize(shapely.linestrings(ring), _SPACING_SHARE * bite.radius_mm)
    )[:-1]
    depth = bite.radius_mm - np.asarray(shapely.distance(stock, shapely.points(xy)))
    cuts = depth > 0.0
    if not cuts.any():
        return
    if cuts.all():
        yield _piece(np.vstack((xy, xy[:1])), True, number, bite)
        return
    for first, last in _runs(cuts):
        rows = np.arange(first - 1, last + 2) % len(xy)
        if depth[rows].max() > 0.5 * SLIVER_MM:
            yield _piece(xy[rows], False, number, bite)


def _runs(cuts: Bools) -> list[tuple[int, int]]:
    """Return first and last row of every run of True on a ring; last may pass the end of the array."""
    starts = np.flatnonzero(cuts & ~np.roll(cuts, 1))
    found = []
    for start in starts.tolist():
        after = np.flatnonzero(~np.roll(cuts, -start))
        found.append((start, start + int(after[0]) - 1))
    return found


def _piece(xy: Floats, closed: bool, number: int, bite: Bite) -> Piece:
    line = LineString(xy).simplify(SIMPLER_MM)
    xy = shapely.get_coordinates(line)
    return Piece(xy, closed, number, grown(line, bite.radius_mm))
