"""How the cutter gets from pass to pass on one level without cutting: straight, or round the stock that stands."""

from __future__ import annotations

import numpy as np
import shapely
from shapely.geometry import LinearRing, LineString, Point, Polygon
from shapely.geometry.base import BaseGeometry

from anticlast.passes.rough.peel import SLIVER_MM, grown
from anticlast.records import Floats

# A link may come this much nearer to the stock than the cutter's radius: less than a sliver is cut (mm).
GRAZE_MM = 0.5 * SLIVER_MM
# How far ends of passes may lie outside the room by round-off (mm).
_ROUND_OFF_MM = 1e-6


class Walk:
    """Where the cutter can go on one level, while passes take stock away.

    Parameters
    ----------
    room : polygons
        Where its centre may stand.
    stock : polygons
        Stock at that level that its radius must keep off.
    radius_mm : float
    """

    def __init__(self, room: BaseGeometry, stock: BaseGeometry, radius_mm: float) -> None:
        self._exact_room = room
        self.room = shapely.buffer(room, _ROUND_OFF_MM, quad_segs=1)
        shapely.prepare(self.room)
        self.stock = stock
        self.radius_mm = radius_mm
        self._air: BaseGeometry | None = None

    def cut(self, swept: BaseGeometry) -> None:
        """Take away what a pass cleared."""
        self.stock = shapely.difference(self.stock, swept)
        self._air = None

    @property
    def air(self) -> BaseGeometry:
        """Where the centre can stand without cutting."""
        if self._air is None:
            # Chords of the rounding come nearer to the stock than its radius; the graze allows for that.
            self._air = shapely.difference(
                self._exact_room, grown(self.stock, self.radius_mm - 0.25 * GRAZE_MM)
            )
        return self._air

    def is_clear(self, xy: Floats) -> bool:
        """Tell whether the cutter can go along a plan path (n, 2) in air."""
        line = LineString(xy)
        if not shapely.covers(self.room, line):
            return False
        return self.stock.is_empty or float(shapely.distance(self.stock, line)) >= self.radius_mm - GRAZE_MM

    def way(self, start: Floats, end: Floats) -> Floats | None:
        """Return a plan path (n, 2) in air from one point to another, None if none is found.

        Straight if possible; else along the rim of the air, shorter side, with every corner cut that can be.
        """
        if np.linalg.norm(end - start) <= GRAZE_MM or self.is_clear(np.array([start, end])):
            return np.array([start, end])
        ways = [self._shortened(way) for way in self._around(start, end)]
        return min(ways, key=lambda way: float(LineString(way).length), default=None)

    def _around(self, start: Floats, end: Floats) -> list[Floats]:
        """Return ways along the rims of the air that both points lie in."""
        ends = shapely.points(np.array([start, end]))
        for part in shapely.get_parts(self.air):
            if not isinstance(part, Polygon) or float(shapely.distance(part, ends).max()) > 2.0 * GRAZE_MM:
                continue
            ways = [_along_ring(ring, start, end) for ring in (part.exterior, *part.interiors)]
            return [way for way in ways if self.is_clear(way)]
        return []

    def _shortened(self, path: Floats) -> Floats:
        """Return the path with vertices left out wherever the straight way past them is clear."""
        kept = [0]
        while kept[-1] < len(path) - 1:
            low = kept[-1] + 1
            step = len(path) - 1 - kept[-1]
            target = low
            # The furthest vertex seen from here, searched in halving steps: one that is clear is enough.
            while step >= 1:
                reach = min(kept[-1] + step, len(path) - 1)
                if reach > target and self.is_clear(path[[kept[-1], reach]]):
                    target = reach
                    break
                step //= 2
            kept.append(target)
        return path[kept]


def _along_ring(ring: LinearRing, start: Floats, end: Floats) -> Floats:
    """Return the shorter way along a ring between the places on it nearest to two points, the points included."""
    first = float(shapely.line_locate_point(ring, Point(start)))
    last = float(shapely.line_locate_point(ring, Point(end)))
    xy = shapely.get_coordinates(ring)
    at = np.concatenate(([0.0], np.cumsum(np.linalg.norm(np.diff(xy, axis=0), axis=1))))
    length = at[-1]
    ahead = (last - first) % length
    back = ahead > 0.5 * length
    if back:
        first, last = last, first
        ahead = length - ahead
    places = np.concatenate((at[:-1], at[:-1] + length))
    inner = places[(places > first) & (places < first + ahead)]
    places = np.concatenate(([first], inner, [first + ahead])) % length
    path = np.column_stack((np.interp(places, at, xy[:, 0]), np.interp(places, at, xy[:, 1])))
    if back:
        path = path[::-1]
    return np.vstack((start, path, end))
