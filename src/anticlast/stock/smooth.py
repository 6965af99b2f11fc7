"""Spreading what single segments took over a little path to either side, and carrying station values along."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from anticlast.stock import _smooth_kernels as kernels

if TYPE_CHECKING:
    from anticlast.records import Floats, Ints
    from anticlast.stock.sweep import Segments


def along_path(segments: Segments) -> Floats:
    """Return where each segment's middle lies along the feed path, (k,) [mm]; stretches between rapids lie far apart."""
    length = np.where(segments.rapid, 0.0, segments.length_mm)
    new = np.concatenate(([False], np.diff(segments.shape) != 0)) | segments.rapid
    apart = 1e3 * np.cumsum(new)
    return np.asarray(np.cumsum(length) - 0.5 * length + apart)


def windowed(path: Floats, amount: Floats, length: Floats, reach_mm: float) -> Floats:
    """Return what was taken per mm over the path within ``reach_mm`` of each segment's middle, (k,)."""
    low, high = np.searchsorted(path, path - reach_mm), np.searchsorted(path, path + reach_mm, side="right")
    total, way = (np.concatenate(([0.0], np.cumsum(values))) for values in (amount, length))
    sums, ways = total[high] - total[low], way[high] - way[low]
    # Differences of running sums leave round-off where nothing was taken.
    sums = np.where(sums > 1e-9 * max(1.0, float(total[-1])) * 1e-3, sums, 0.0)
    return np.divide(sums, ways, out=np.zeros(len(path)), where=ways > 0.0)


def windowed_extremes(path: Floats, low: Floats, high: Floats, reach_mm: float) -> tuple[Floats, Floats]:
    """Return the least of ``low`` and the greatest of ``high`` within ``reach_mm`` along the path, each (k,)."""
    first = np.searchsorted(path, path - reach_mm)
    after = np.searchsorted(path, path + reach_mm, side="right")
    least, greatest = np.empty(len(path)), np.empty(len(path))
    kernels.sliding_least(low, first, after, least)
    kernels.sliding_least(-high, first, after, greatest)
    return least, -greatest


def carried(table: Floats, first: Ints, rapid: np.ndarray) -> Floats:
    """Return station values (n, c) for each segment, (k, c): its own, or those of the last station before it."""
    out = np.zeros((len(first) - 1, table.shape[1]))
    kernels.carry(table, first, rapid, out)
    return out
