"""Compiled loops that join pieces of motion into segments and mark stations along them."""

from __future__ import annotations

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def join_rows(
    tip: np.ndarray, axis: np.ndarray, height: np.ndarray, motion: np.ndarray, fraction: np.ndarray, live: np.ndarray,
    chord_mm: float, reach_mm: float, arm_mm: float, most: int, pairs: np.ndarray,
) -> int:  # fmt: skip
    """Choose rows where segments start and end; pairs of rows go to ``pairs``, (2 n,). Returns n.

    A segment from row i to j is taken as long as every row between keeps, at its share of the way, within ``chord_mm`` at
    the reference point and ``reach_mm`` at ``arm_mm`` up the axis, and belongs to the same motion.
    """
    count, found = len(tip), 0
    row = 1
    while row < count:
        if not live[row]:
            row += 1
            continue
        start, last = row - 1, row
        begun = fraction[start] if motion[start] == motion[row] else 0.0
        while (
            last + 1 < count
            and live[last + 1]
            and motion[last + 1] == motion[row]
            and last + 1 - start <= most
        ):
            trial = last + 1
            good = True
            for k in range(start + 1, trial):
                share = (fraction[k] - begun) / (fraction[trial] - begun)
                low = high = 0.0
                for i in range(3):
                    a = axis[start, i] + share * (axis[trial, i] - axis[start, i]) - axis[k, i]
                    t = tip[start, i] + share * (tip[trial, i] - tip[start, i]) - tip[k, i]
                    low += (t + height[row] * a) ** 2
                    high += (t + arm_mm * a) ** 2
                if low > chord_mm * chord_mm or high > reach_mm * reach_mm:
                    good = False
                    break
            if not good:
                break
            last = trial
        if 2 * found + 1 < len(pairs):
            pairs[2 * found], pairs[2 * found + 1] = start, last
        found += 1
        row = last + 1
    return found


@njit(cache=True, nogil=True)
def mark_stations(
    ends: np.ndarray, shape: np.ndarray, rapid: np.ndarray, length_mm: np.ndarray, spacing_mm: float, least_cosine: float,
    number: np.ndarray,
) -> None:  # fmt: skip
    """Set 1 for segments that get a station; see ``sweep.lay_stations``."""
    travelled = spacing_mm
    for k in range(len(shape)):
        if rapid[k]:
            travelled = spacing_mm
        if rapid[k] or length_mm[k] <= 0.0:
            continue
        fresh = travelled >= spacing_mm or k == 0 or shape[k] != shape[k - 1]
        if not fresh and length_mm[k - 1] > 0.0:
            dot = 0.0
            for i in range(3):
                dot += (ends[k, 6 + i] - ends[k, i]) * (ends[k - 1, 6 + i] - ends[k - 1, i])
            fresh = dot < least_cosine * length_mm[k] * length_mm[k - 1]
        if fresh:
            number[k] = 1
            travelled = 0.0
        travelled += length_mm[k]
