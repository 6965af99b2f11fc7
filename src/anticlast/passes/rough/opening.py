"""The first cut into stock that is closed all round: down a helix, or to and fro along a ramp."""

from __future__ import annotations

import math

import numpy as np
import shapely
from shapely.geometry import Polygon
from shapely.geometry.base import BaseGeometry

from anticlast.cutter import Cutter
from anticlast.passes import ramp
from anticlast.passes.rough.peel import Piece, grown
from anticlast.records import Floats

# Radius of a helix as a share of the cutter's. Below the smallest, the middle of a bottom that does not cut to its
# centre would ride on stock; a cutter that cuts to its centre needs but a little room. Above the largest, a core would
# stand in the middle.
SMALLEST, SMALLEST_PLUNGING, WANTED = 0.35, 0.1, 0.75
# A straight ramp at least this many radii long lets the bottom's middle clear what stands under it.
_RAMP_RADII = 1.0
# Descents start this much above the floor of the layer before (mm).
ABOVE_MM = 0.2


def opening(
    room: Polygon, cutter: Cutter, radius_mm: float, top_mm: float, floor_mm: float, number: int
) -> Piece | None:
    """Return the piece that opens a closed region, or None if this cutter cannot get into it.

    Parameters
    ----------
    room : Polygon
        Where the cutter's centre may stand.
    cutter : Cutter
    radius_mm : float
        Its radius at the top of the layer.
    top_mm, floor_mm : float
        Z down to which there is air above the region, and the floor of the layer.
    number : int
        Round of the piece.
    """
    middle, radius = _widest(room)
    start = top_mm + ABOVE_MM
    if radius >= (SMALLEST_PLUNGING if cutter.can_plunge else SMALLEST) * cutter.radius_mm:
        radius = min(radius, WANTED * cutter.radius_mm)
        down = ramp.helix(middle, radius, start, floor_mm, cutter.ramp_angle_rad)
        last = math.atan2(down[-1, 1] - middle[1], down[-1, 0] - middle[0])
        round_ = ramp.circle(middle, radius, last)
        return Piece(round_, True, number, grown(Polygon(round_), radius_mm), down)
    line = _longest(room, middle)
    if line is None or line.length < _RAMP_RADII * cutter.radius_mm:
        return None
    xy = shapely.get_coordinates(line)
    down = ramp.along(xy, start, floor_mm, cutter.ramp_angle_rad)
    back = _to_and_fro(xy, down[-1, :2])
    return Piece(back, False, number, grown(line, radius_mm), down)


def _widest(room: Polygon) -> tuple[tuple[float, float], float]:
    """Return centre and radius of the largest circle inside, less what its search is off by."""
    spoke = shapely.maximum_inscribed_circle(room, tolerance=0.01)
    (x, y), _ = shapely.get_coordinates(spoke)
    return (float(x), float(y)), float(shapely.distance(shapely.boundary(room), shapely.points(x, y))) - 0.01


def _longest(room: Polygon, middle: tuple[float, float]) -> BaseGeometry | None:
    """Return the longest straight line inside that goes through a point, of 36 directions."""
    x0, y0, x1, y1 = room.bounds
    size = math.hypot(x1 - x0, y1 - y0)
    angle = np.linspace(0.0, math.pi, 36, endpoint=False)
    way = size * np.column_stack((np.cos(angle), np.sin(angle)))
    lines = shapely.linestrings(np.stack((np.array(middle) - way, np.array(middle) + way), axis=1))
    inside = shapely.get_parts(shapely.intersection(lines, shapely.buffer(room, -0.01)))
    inside = inside[shapely.length(inside) > 0.0] if len(inside) else inside
    return inside[int(np.argmax(shapely.length(inside)))] if len(inside) else None


def _to_and_fro(xy: Floats, at: Floats) -> Floats:
    """Return from a point of a straight line to its nearer end, and along all of it: what the ramp left is cut."""
    first, last = xy[0], xy[-1]
    if np.linalg.norm(at - first) > np.linalg.norm(at - last):
        first, last = last, first
    return np.array([at, first, last])
