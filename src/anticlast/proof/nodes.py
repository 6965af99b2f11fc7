"""Where the virtual cut measures: nodes on the finished surface over the outline, and the triangles between them."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
import shapely

from anticlast.tolerances import SAME_POINT_MM

if TYPE_CHECKING:
    from anticlast.outline import Outline
    from anticlast.records import Floats
    from anticlast.saddle import Saddle

# Grid steps along a tile's side. A tile is what one list of pieces is kept for: big tiles make long lists, small ones many.
_TILE_STEPS = 5
# Steps of bisection for where a normal line leaves the part sideways: 2^-40 of a few mm.
_BISECTIONS = 40


@dataclass(frozen=True, slots=True)
class Nodes:
    """Nodes in the saddle's own frame, sorted by tile, and the triangles that cover the outline between them.

    Attributes
    ----------
    x, y : (n,) [mm]
        Plan in the saddle's frame (x', y').
    xy : (n, 2) [mm]
        The same in part coordinates.
    tile_start : (tiles + 1,) int64
        First node of each tile.
    tiling : (float, float, float, int, int)
        Low corner and side of the tiles [mm] in the saddle's frame, number in x' and in y'.
    triangles : (m, 3) int32
        Nodes at the corners. Together they cover the outline exactly, boundary included.
    at_grid : (rows, columns) int32
        Node at each grid point, -1 outside.
    grid_x_mm, grid_y_mm : (columns,), (rows,)
        Grid lines in part coordinates.
    """

    x: Floats
    y: Floats
    xy: Floats
    tile_start: npt.NDArray[np.int64]
    tiling: tuple[float, float, float, int, int]
    triangles: npt.NDArray[np.int32]
    at_grid: npt.NDArray[np.int32]
    grid_x_mm: Floats
    grid_y_mm: Floats

    def triangle_areas_mm2(self, rows: npt.NDArray[np.int64]) -> Floats:
        """Return the plan area of some triangles, (k,) [mm^2]."""
        p = self.xy[self.triangles[rows]]
        one, two = p[:, 1] - p[:, 0], p[:, 2] - p[:, 0]
        return 0.5 * np.abs(one[:, 0] * two[:, 1] - one[:, 1] * two[:, 0])


def grid_lines(low_mm: float, high_mm: float, grid_mm: float) -> Floats:
    """Return lines from low to high [mm], evenly spaced by at most ``grid_mm``."""
    steps = max(1, math.ceil((high_mm - low_mm) / grid_mm - 1e-9))
    return np.linspace(low_mm, high_mm, steps + 1)


def lay_nodes(outline: Outline, saddle: Saddle, grid_mm: float) -> Nodes:
    """Lay nodes at grid points inside the outline and where the grid's cells meet its boundary.

    Cells inside are halved into triangles; cells that the boundary cuts are clipped and filled by a constrained
    Delaunay triangulation, whose corners become nodes too.

    Parameters
    ----------
    outline : Outline
    saddle : Saddle
    grid_mm : float
        Largest spacing of the grid [mm].
    """
    x0, y0, x1, y1 = outline.bounds
    gx, gy = grid_lines(x0, x1, grid_mm), grid_lines(y0, y1, grid_mm)
    inside = _inside(outline, gx, gy)
    whole, cut = _sort_cells(outline, gx, gy, inside)
    at = np.full(inside.shape, -1, np.int32)
    used = inside.copy()
    for j, i in ((0, 0), (0, 1), (1, 0), (1, 1)):
        used[j : j + whole.shape[0], i : i + whole.shape[1]] |= whole
    at[used] = np.arange(np.count_nonzero(used))
    rows, columns = np.nonzero(used)
    xy = np.column_stack((gx[columns], gy[rows]))
    a, b, c, d = at[:-1, :-1][whole], at[:-1, 1:][whole], at[1:, 1:][whole], at[1:, :-1][whole]
    triangles = np.concatenate((np.column_stack((a, b, c)), np.column_stack((a, c, d))))
    edge_xy, edge_triangles = _clipped(outline, gx, gy, cut)
    triangles = np.concatenate((triangles, (edge_triangles + len(xy)).astype(np.int32)))
    return _tiled(np.concatenate((xy, edge_xy)), triangles, at, gx, gy, saddle)


def _inside(outline: Outline, gx: Floats, gy: Floats) -> npt.NDArray[np.bool_]:
    """Tell which grid points lie inside or on the outline, (rows, columns), row by row from the cuts of each row."""
    row, u0, u1 = outline.clip_lines(0.0, gy)
    first = np.searchsorted(gx, u0 - SAME_POINT_MM, "left")
    last = np.searchsorted(gx, u1 + SAME_POINT_MM, "right")
    change = np.zeros((len(gy), len(gx) + 1), np.int32)
    np.add.at(change, (row, first), 1)
    np.add.at(change, (row, last), -1)
    return np.cumsum(change, axis=1)[:, :-1] > 0


def _sort_cells(
    outline: Outline, gx: Floats, gy: Floats, inside: npt.NDArray[np.bool_]
) -> tuple[npt.NDArray[np.bool_], npt.NDArray[np.bool_]]:
    """Return which cells lie wholly inside and which the boundary may cut, (rows - 1, columns - 1) each."""
    near = np.zeros((len(gy) - 1, len(gx) - 1), bool)
    step = 0.5 * min(gx[1] - gx[0], gy[1] - gy[0])
    points = outline.boundary_points(step)
    i = np.clip(np.searchsorted(gx, points[:, 0], "right") - 1, 0, near.shape[1] - 1)
    j = np.clip(np.searchsorted(gy, points[:, 1], "right") - 1, 0, near.shape[0] - 1)
    for dj in (-1, 0, 1):
        for di in (-1, 0, 1):
            near[np.clip(j + dj, 0, near.shape[0] - 1), np.clip(i + di, 0, near.shape[1] - 1)] = True
    corners = inside[:-1, :-1] & inside[:-1, 1:] & inside[1:, :-1] & inside[1:, 1:]
    whole = corners & ~near
    rows, columns = np.nonzero(near)
    boxes = shapely.box(gx[columns], gy[rows], gx[columns + 1], gy[rows + 1])
    shapely.prepare(outline.polygon)
    covered = np.asarray(shapely.covers(outline.polygon, boxes))
    whole[rows[covered], columns[covered]] = True
    cut = np.zeros_like(near)
    cut[rows[~covered], columns[~covered]] = True
    return whole, cut


def _clipped(
    outline: Outline, gx: Floats, gy: Floats, cut: npt.NDArray[np.bool_]
) -> tuple[Floats, npt.NDArray[np.int64]]:
    """Return the corners (k, 2) and triangles (m, 3) that fill the clipped cells."""
    rows, columns = np.nonzero(cut)
    if rows.size == 0:
        return np.empty((0, 2)), np.empty((0, 3), np.int64)
    boxes = shapely.box(gx[columns], gy[rows], gx[columns + 1], gy[rows + 1])
    clipped = shapely.intersection(outline.polygon, boxes)
    clipped = clipped[shapely.area(clipped) > SAME_POINT_MM**2]
    pieces = shapely.get_parts(shapely.constrained_delaunay_triangles(clipped))
    corners = shapely.get_coordinates(pieces).reshape(-1, 4, 2)[:, :3].reshape(-1, 2)
    xy, index = np.unique(corners, axis=0, return_inverse=True)
    return xy, index.reshape(-1, 3).astype(np.int64)


def _tiled(
    xy: Floats,
    triangles: npt.NDArray[np.int32],
    at: npt.NDArray[np.int32],
    gx: Floats,
    gy: Floats,
    saddle: Saddle,
) -> Nodes:
    """Sort nodes by tile and renumber what refers to them."""
    x, y = saddle.local(xy[:, 0], xy[:, 1])
    side = _TILE_STEPS * max(gx[1] - gx[0], gy[1] - gy[0])
    # Half a thousandth of a side below the lowest node, so that no node falls outside by round-off.
    x_low, y_low = float(x.min()) - 5e-4 * side, float(y.min()) - 5e-4 * side
    nx, ny = int((x.max() - x_low) / side) + 1, int((y.max() - y_low) / side) + 1
    tile = (np.floor((y - y_low) / side) * nx + np.floor((x - x_low) / side)).astype(np.int64)
    order = np.argsort(tile, kind="stable")
    new = np.empty(len(order), np.int32)
    new[order] = np.arange(len(order), dtype=np.int32)
    start = np.searchsorted(tile[order], np.arange(nx * ny + 1))
    at_grid = np.full(at.shape, -1, np.int32)
    at_grid[at >= 0] = new[at[at >= 0]]
    return Nodes(
        x=np.ascontiguousarray(x[order]),
        y=np.ascontiguousarray(y[order]),
        xy=np.ascontiguousarray(xy[order]),
        tile_start=start.astype(np.int64),
        tiling=(x_low, y_low, side, nx, ny),
        triangles=new[triangles],
        at_grid=at_grid,
        grid_x_mm=gx,
        grid_y_mm=gy,
    )


def part_depths_mm(xy: Floats, outline: Outline, saddle: Saddle, bottom_mm: float) -> Floats:
    """Return how far along the normal the part reaches below surface points, (n,) [mm], negative or zero.

    The normal line leaves the part through its bottom or through the side under the outline, whichever comes first.

    Parameters
    ----------
    xy : (n, 2) [mm]
        Plan of the points, inside the outline, part coordinates.
    """
    normal = saddle.normal(xy)
    z = saddle.height(xy[:, 0], xy[:, 1])
    depth = np.minimum((bottom_mm - z) / normal[:, 2], 0.0)
    out = np.flatnonzero(~outline.contains(xy + depth[:, None] * normal[:, :2]))
    near, far = np.zeros(len(out)), depth[out].copy()
    for _ in range(_BISECTIONS):
        middle = 0.5 * (near + far)
        held = outline.contains(xy[out] + middle[:, None] * normal[out, :2])
        near = np.where(held, middle, near)
        far = np.where(held, far, middle)
    depth[out] = near
    return depth
