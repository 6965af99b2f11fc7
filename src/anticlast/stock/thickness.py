"""How thick the stock stands over the finished surface, along its normal."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from anticlast.stock.grid import turned

if TYPE_CHECKING:
    from anticlast.outline import Outline
    from anticlast.records import Floats
    from anticlast.saddle import Saddle
    from anticlast.stock.field import StockField

# Points of a map along the longer side of the part.
_MAP_SIDE = 240
# Neighbouring columns that differ by more than this slope stand on two sides of a wall.
_STEEPEST = 3.0
# Steps to where the normal leaves the material; a smooth top needs three, at a wall the last step stands.
_STEPS = 6


@dataclass(frozen=True, slots=True)
class ThicknessMap:
    """Stock over the finished surface, in plan, along the surface normal.

    ``thickness_mm[j, i]`` belongs to ``x_mm[i]``, ``y_mm[j]`` (part coordinates); nan outside the outline. Negative where the
    stock stands lower than the finished surface.
    """

    x_mm: Floats
    y_mm: Floats
    thickness_mm: npt.NDArray[np.float32]


def tops_at_mm(field: StockField, x: Floats, y: Floats, empty_mm: float) -> Floats:
    """Return the stock's top over plan points, bilinear between columns that hold material; ``empty_mm`` where none is near."""
    grid = field.grid
    u, v = turned(x, y)
    s, t = (u - grid.u0_mm) / grid.spacing_mm, (v - grid.v0_mm) / grid.spacing_mm
    i, j = np.floor(s).astype(int), np.floor(t).astype(int)
    tops, shares = np.zeros((4, *np.shape(x))), np.zeros((4, *np.shape(x)))
    for corner, (dj, di) in enumerate(((0, 0), (0, 1), (1, 0), (1, 1))):
        ii, jj = i + di, j + dj
        inside = (ii >= 0) & (ii < grid.columns) & (jj >= 0) & (jj < grid.rows)
        ii, jj = np.clip(ii, 0, grid.columns - 1), np.clip(jj, 0, grid.rows - 1)
        share = np.abs(1 - di - (s - i)) * np.abs(1 - dj - (t - j))
        shares[corner] = np.where(inside & (field.count[jj, ii] > 0), share, 0.0)
        tops[corner] = field.high_mm[0, jj, ii]
    # Across a wall nothing is read: the nearest column decides which side the point is on.
    nearest = np.take_along_axis(tops, np.argmax(shares, axis=0)[None], axis=0)
    shares = np.where(np.abs(tops - nearest) <= _STEEPEST * grid.spacing_mm, shares, 0.0)
    weight = shares.sum(axis=0)
    return np.where(weight > 1e-9, np.sum(shares * tops, axis=0) / np.maximum(weight, 1e-9), empty_mm)


def thickness_mm(field: StockField, saddle: Saddle, xy: Floats, bottom_mm: float) -> Floats:
    """Return the thickness over surface points xy (n, 2), (n,) [mm].

    Solves z(q) + t n_z = top(q + t n_xy) for t. Exact for a flat top, t = (top - z) / n_z, and for a top that follows the
    surface.

    Parameters
    ----------
    bottom_mm : float
        Counts as the top where there is no material.
    """
    z, normal = saddle.height(xy[:, 0], xy[:, 1]), saddle.normal(xy)
    above = tops_at_mm(field, xy[:, 0], xy[:, 1], bottom_mm)
    t = (above - z) / normal[:, 2]
    for _ in range(_STEPS):
        top = tops_at_mm(field, xy[:, 0] + t * normal[:, 0], xy[:, 1] + t * normal[:, 1], np.nan)
        # Where the normal leaves the blank through its side, the top right above counts.
        t = (np.where(np.isnan(top), above, top) - z) / normal[:, 2]
    return np.asarray(t)


def thickness_map(field: StockField, saddle: Saddle, outline: Outline, bottom_mm: float) -> ThicknessMap:
    """Return the thickness over a grid parallel to part X and Y, at most 240 points along the longer side."""
    x0, y0, x1, y1 = outline.bounds
    step = max(max(x1 - x0, y1 - y0) / _MAP_SIDE, field.grid.spacing_mm)
    # Points lie half a step inside, so that none stands on the outline's own edges.
    x = x0 + step * (np.arange(max(1, int((x1 - x0) / step)), dtype=np.float64) + 0.5)
    y = y0 + step * (np.arange(max(1, int((y1 - y0) / step)), dtype=np.float64) + 0.5)
    px, py = np.meshgrid(x, y)
    xy = np.column_stack((px.ravel(), py.ravel()))
    inside = outline.contains(xy)
    values = np.full(len(xy), np.nan)
    values[inside] = thickness_mm(field, saddle, xy[inside], bottom_mm)
    return ThicknessMap(x, y, values.reshape(px.shape).astype(np.float32))


def thickness_range(
    field: StockField, saddle: Saddle, outline: Outline, bottom_mm: float
) -> tuple[float, float, float]:
    """Return the smallest, the mean (by plan area) and the largest thickness inside an outline, at every column there."""
    area = field.grid.areas_mm2(outline)
    x, y = field.grid.middles_xy()
    # Columns whose middle is on the very edge may belong to the wall beside it.
    there = area > 0.6 * field.grid.spacing_mm**2
    if not np.any(there):
        return 0.0, 0.0, 0.0
    values = thickness_mm(field, saddle, np.column_stack((x[there], y[there])), bottom_mm)
    return float(values.min()), float(np.average(values, weights=area[there])), float(values.max())
