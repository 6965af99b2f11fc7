"""Where the columns of the stock field stand: a plan grid turned so that no usual wall runs along it."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Final

import numpy as np
import shapely
from shapely import affinity

if TYPE_CHECKING:
    from anticlast.outline import Outline
    from anticlast.records import Floats, Job
    from anticlast.saddle import Saddle

# The grid's rows make this angle with part X; its tangent is the golden section, the number worst approached by fractions.
# A wall along part X, Y or a diagonal then meets the columns evenly, and what it cuts is counted right to a few cells on
# its whole length; a grid along the wall would be wrong by up to half a cell all along it.
TURN_RAD: Final = math.atan((math.sqrt(5.0) - 1.0) / 2.0)

_FINEST_MM, _COARSEST_MM = 0.25, 0.5
# Cells along the longer side that the spacing aims at between those two.
_CELLS_ALONG = 320
# Columns within the radius of the smallest cutter, at least.
_CELLS_IN_RADIUS = 5
_MOST_COLUMNS = 6_000_000


@dataclass(frozen=True, slots=True)
class ColumnGrid:
    """Columns parallel to part Z, in a frame turned by ``TURN_RAD`` about it.

    Attributes
    ----------
    u0_mm, v0_mm : float
        Middle of the first column, turned frame.
    spacing_mm : float
        Side of a column's square cell.
    rows, columns : int
        Along v and u.
    """

    u0_mm: float
    v0_mm: float
    spacing_mm: float
    rows: int
    columns: int

    @classmethod
    def over(cls, outline: Outline, spacing_mm: float) -> ColumnGrid:
        """Return the grid whose cells take in an outline."""
        u0, v0, u1, v1 = turned_polygon(outline).bounds
        count = [max(1, math.ceil((high - low) / spacing_mm)) for low, high in ((u0, u1), (v0, v1))]
        # What is left over is shared out on both sides.
        start = [
            0.5 * (low + high - (n - 1) * spacing_mm)
            for n, (low, high) in zip(count, ((u0, u1), (v0, v1)), strict=True)
        ]
        return cls(start[0], start[1], spacing_mm, count[1], count[0])

    @property
    def shape(self) -> tuple[int, int]:
        """Rows and columns."""
        return self.rows, self.columns

    def middles_uv(self) -> tuple[Floats, Floats]:
        """Return u and v [mm] of every column's middle, each (rows, columns), turned frame."""
        u = self.u0_mm + self.spacing_mm * np.arange(self.columns)
        v = self.v0_mm + self.spacing_mm * np.arange(self.rows)
        across, along = np.meshgrid(u, v)
        return across, along

    def middles_xy(self) -> tuple[Floats, Floats]:
        """Return x and y [mm] of every column's middle, each (rows, columns), part coordinates."""
        return back(*self.middles_uv())

    def areas_mm2(self, outline: Outline) -> Floats:
        """Return the area of each cell inside an outline, (rows, columns) [mm^2]."""
        polygon = turned_polygon(outline)
        u, v = self.middles_uv()
        half = 0.5 * self.spacing_mm
        shapely.prepare(polygon)
        inside = shapely.intersects_xy(polygon, u.ravel(), v.ravel())
        areas = np.where(inside, self.spacing_mm**2, 0.0)
        edge = self._near(polygon.boundary, u, v)
        boxes = shapely.box(
            u.ravel()[edge] - half, v.ravel()[edge] - half, u.ravel()[edge] + half, v.ravel()[edge] + half
        )
        areas[edge] = shapely.area(shapely.intersection(polygon, boxes))
        return np.asarray(areas.reshape(self.shape))

    def _near(self, lines: shapely.Geometry, u: Floats, v: Floats) -> np.ndarray:
        """Return the cells that lines may cross, flat indices."""
        points = shapely.get_coordinates(shapely.segmentize(lines, 0.5 * self.spacing_mm))
        i = np.round((points[:, 0] - self.u0_mm) / self.spacing_mm).astype(int)
        j = np.round((points[:, 1] - self.v0_mm) / self.spacing_mm).astype(int)
        marked = np.zeros((self.rows + 4, self.columns + 4), bool)
        for dj in (-1, 0, 1):
            for di in (-1, 0, 1):
                marked[np.clip(j + dj + 2, 0, self.rows + 3), np.clip(i + di + 2, 0, self.columns + 3)] = True
        return np.flatnonzero(marked[2:-2, 2:-2])


def turned(x: Floats, y: Floats) -> tuple[Floats, Floats]:
    """Return (u, v) of part (x, y), any shape; also turns vectors."""
    c, s = math.cos(TURN_RAD), math.sin(TURN_RAD)
    return c * x + s * y, c * y - s * x


def back(u: Floats, v: Floats) -> tuple[Floats, Floats]:
    """Return part (x, y) of (u, v), any shape."""
    c, s = math.cos(TURN_RAD), math.sin(TURN_RAD)
    return c * u - s * v, s * u + c * v


def turned_points(points: Floats) -> Floats:
    """Return points or vectors (n, 3) of part coordinates in the turned frame."""
    u, v = turned(points[:, 0], points[:, 1])
    return np.ascontiguousarray(np.column_stack((u, v, points[:, 2])))


def turned_polygon(outline: Outline) -> shapely.Polygon | shapely.MultiPolygon:
    """Return an outline's polygon in the turned frame."""
    return affinity.rotate(outline.polygon, -TURN_RAD, origin=(0.0, 0.0), use_radians=True)


def turned_surface(saddle: Saddle) -> tuple[float, float, float]:
    """Return p, q, m of z = p u^2 + q v^2 + m u v, the saddle in the turned frame."""
    h = saddle.hessian()
    c, s = math.cos(TURN_RAD), math.sin(TURN_RAD)
    turn = np.array([[c, s], [-s, c]])
    own = turn @ h @ turn.T
    return float(0.5 * own[0, 0]), float(0.5 * own[1, 1]), float(own[0, 1])


def choose_spacing_mm(job: Job) -> float:
    """Return the spacing [mm] for a job: 0.25 to 0.5 mm by the blank's size, finer for cutters below 2.5 mm diameter."""
    x0, y0, x1, y1 = job.stock.outline.bounds
    spacing = min(max(_FINEST_MM, max(x1 - x0, y1 - y0) / _CELLS_ALONG), _COARSEST_MM)
    used = [operation.cutter.radius_mm for operation in job.operations]
    spacing = min(spacing, min(used) / _CELLS_IN_RADIUS)
    u0, v0, u1, v1 = turned_polygon(job.stock.outline).bounds
    return max(spacing, math.sqrt((u1 - u0) * (v1 - v0) / _MOST_COLUMNS))
