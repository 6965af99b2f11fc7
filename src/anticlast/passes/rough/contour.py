"""Plan regions where a height over the plan stays below a level: marching triangles, then exact vertices."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import shapely
from shapely.geometry import LineString, MultiLineString, MultiPolygon, Polygon
from shapely.geometry.base import BaseGeometry

from anticlast.errors import NotConverged
from anticlast.records import Floats

HeightAndSlope = Callable[[Floats], tuple[Floats, Floats]]

# Contours are simplified by this much; what that may add to the height is taken off the level again (mm).
_SIMPLER_MM = 0.004
# A region's rim may stand this much over the level (mm): far below any allowance that can be set.
LEVEL_MM = 1e-4
_ROUNDS = 6
_NEWTON = 4


@dataclass(frozen=True, slots=True)
class Grid:
    """Heights ``z_mm[j, i]`` at ``x_mm[i]``, ``y_mm[j]``, and the function that gives height and slope anywhere."""

    x_mm: Floats
    y_mm: Floats
    z_mm: Floats
    exact: HeightAndSlope

    @classmethod
    def over(
        cls, bounds: tuple[float, float, float, float], spacing_mm: float, exact: HeightAndSlope
    ) -> Grid:
        """Ask the function at the nodes of a grid over (x0, y0, x1, y1)."""
        x0, y0, x1, y1 = bounds
        x = np.linspace(x0, x1, max(2, int(np.ceil((x1 - x0) / spacing_mm)) + 1))
        y = np.linspace(y0, y1, max(2, int(np.ceil((y1 - y0) / spacing_mm)) + 1))
        nodes = np.stack(np.meshgrid(x, y), axis=-1).reshape(-1, 2)
        return cls(x, y, exact(nodes)[0].reshape(y.size, x.size), exact)

    @property
    def box(self) -> Polygon:
        """The rectangle that the grid covers."""
        return shapely.box(self.x_mm[0], self.y_mm[0], self.x_mm[-1], self.y_mm[-1])

    @property
    def inner(self) -> Polygon:
        """The rectangle without its outermost cells, in which contours end inexactly."""
        step = self.x_mm[1] - self.x_mm[0]
        return shapely.box(
            self.x_mm[0] + step, self.y_mm[0] + step, self.x_mm[-1] - step, self.y_mm[-1] - step
        )

    def below(self, level_mm: float) -> BaseGeometry:
        """Return the region of the grid's inner rectangle where the height is at most the level.

        Its rim is looked at four times a cell; where a chord stands over the level by more than `LEVEL_MM`, the level
        is lowered by that much and the region taken anew. A height that has no summit of its own, as those over a
        saddle, is then nowhere above the level inside.

        Raises
        ------
        NotConverged
            The rim stays over the level.
        """
        wanted, over = level_mm, 0.0
        for _ in range(_ROUNDS):
            region = self._below(wanted)
            over = self._over(region, level_mm)
            if over <= LEVEL_MM:
                return shapely.intersection(region, self.inner)
            wanted -= 1.1 * over
        raise NotConverged(f"rim of the layer at z = {level_mm:.3f}", over, LEVEL_MM)

    def _over(self, region: BaseGeometry, level_mm: float) -> float:
        if region.is_empty:
            return 0.0
        spacing = self.x_mm[1] - self.x_mm[0]
        rim = shapely.get_coordinates(shapely.segmentize(shapely.boundary(region), 0.25 * spacing))
        on_box = shapely.distance(shapely.boundary(self.box), shapely.points(rim)) < 0.5 * spacing
        rim = rim[~on_box]
        return float((self.exact(rim)[0] - level_mm).max(initial=0.0)) if len(rim) else 0.0

    def _below(self, level_mm: float) -> BaseGeometry:
        lines = self._lines(level_mm)
        frame = shapely.boundary(self.box)
        cells = shapely.get_parts(shapely.polygonize([shapely.union_all([frame, *lines])]))
        if not len(cells):
            return Polygon()
        inner = shapely.get_coordinates(shapely.point_on_surface(cells))
        kept = shapely.union_all(cells[self.exact(inner)[0] <= level_mm])
        kept = shapely.simplify(kept, _SIMPLER_MM)
        return kept if isinstance(kept, (Polygon, MultiPolygon)) else Polygon()

    def _lines(self, level_mm: float) -> list[BaseGeometry]:
        """Return contour lines with their vertices moved onto the exact contour, ends on the rectangle's rim kept."""
        segments = self._segments(level_mm)
        if not len(segments):
            return []
        merged = shapely.line_merge(MultiLineString(list(segments)))
        found: list[BaseGeometry] = []
        for line in shapely.get_parts(merged):
            xy = shapely.get_coordinates(line)
            closed = bool(np.all(xy[0] == xy[-1]))
            # Crossings of cell diagonals lie close to others: every second vertex is enough.
            keep = np.append(np.arange(0, len(xy) - 1, 2), len(xy) - 1)
            xy = xy[keep] if len(keep) >= 4 else xy
            moved = self._onto(xy, level_mm)
            ends = (moved[:1], moved[:1]) if closed else (xy[:1], xy[-1:])
            found.append(LineString(np.concatenate((ends[0], moved[1:-1], ends[1]))))
        return found

    def _onto(self, xy: Floats, level_mm: float) -> Floats:
        """Return points moved along the slope onto the contour, none by more than half a cell."""
        limit = 0.5 * (self.x_mm[1] - self.x_mm[0])
        at = xy.copy()
        for _ in range(_NEWTON):
            height, slope = self.exact(at)
            steep = np.einsum("ni,ni->n", slope, slope)
            step = np.where(steep > 1e-12, (height - level_mm) / np.where(steep > 1e-12, steep, 1.0), 0.0)
            at = at - step[:, None] * slope
            moved = at - xy
            size = np.linalg.norm(moved, axis=1)
            at = xy + moved * np.minimum(1.0, limit / np.where(size > 0.0, size, 1.0))[:, None]
        return at

    def _segments(self, level_mm: float) -> Floats:
        """Return the contour's segments (n, 2, 2), one in each half cell that it crosses.

        Half cells are triangles, so that there is no doubt which corners a segment parts.
        """
        d = self.z_mm - level_mm
        d = np.where(d == 0.0, -1e-12, d)
        x, y = np.meshgrid(self.x_mm, self.y_mm)
        corner = np.stack((x, y, d), axis=-1)
        a, b, c, e = corner[:-1, :-1], corner[:-1, 1:], corner[1:, 1:], corner[1:, :-1]
        triangles = np.concatenate(
            (np.stack((a, b, c), axis=-2).reshape(-1, 3, 3), np.stack((a, c, e), axis=-2).reshape(-1, 3, 3))
        )
        sign = triangles[:, :, 2] > 0.0
        count = sign.sum(axis=1)
        mixed = (count == 1) | (count == 2)
        triangles, sign = triangles[mixed], sign[mixed]
        # The corner that stands alone on its side; the segment joins crossings on its two edges.
        alone = np.where(sign.sum(axis=1) == 1, np.argmax(sign, axis=1), np.argmin(sign, axis=1))
        row = np.arange(len(triangles))
        apex = triangles[row, alone]
        ends = [_crossing(apex, triangles[row, (alone + turn) % 3]) for turn in (1, 2)]
        segments = np.stack(ends, axis=1)
        return segments[np.any(segments[:, 0] != segments[:, 1], axis=1)]


def _crossing(first: Floats, last: Floats) -> Floats:
    """Return where the height is zero on edges given as (x, y, height); the same bits from either side of an edge."""
    swap = (first[:, 0] > last[:, 0]) | ((first[:, 0] == last[:, 0]) & (first[:, 1] > last[:, 1]))
    low = np.where(swap[:, None], last, first)
    high = np.where(swap[:, None], first, last)
    share = low[:, 2] / (low[:, 2] - high[:, 2])
    return low[:, :2] + share[:, None] * (high[:, :2] - low[:, :2])
