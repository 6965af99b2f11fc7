"""Compiled loops for sliding extremes and for carrying station values along the path."""

from __future__ import annotations

import numpy as np
from numba import njit

# Columns of a station's row, see `_load_kernels.station_loads`.
_AREA, _SLOW, _FAST, _MEAN, _TORQUE = 3, 6, 7, 8, 12


@njit(cache=True, nogil=True)
def _is_mean(c: int) -> bool:
    """Tell whether a column holds a mean over the cutter's turn, or its section, rather than an extreme."""
    return c == _AREA or _MEAN <= c < _MEAN + 2 or _TORQUE <= c < _TORQUE + 2


@njit(cache=True, nogil=True)
def sliding_least(values: np.ndarray, first: np.ndarray, after: np.ndarray, out: np.ndarray) -> None:
    """Fill the least of values[first[k]:after[k]]; both ends never go back."""
    queue = np.empty(len(values), np.int64)
    head, tail, taken = 0, 0, 0
    for k in range(len(values)):
        while taken < after[k]:
            while tail > head and values[queue[tail - 1]] >= values[taken]:
                tail -= 1
            queue[tail] = taken
            tail += 1
            taken += 1
        while queue[head] < first[k]:
            head += 1
        out[k] = values[queue[head]]


@njit(cache=True, nogil=True)
def carry(table: np.ndarray, first: np.ndarray, rapid: np.ndarray, out: np.ndarray) -> None:
    """Fill each segment's row from its stations, or from the last station before it since the last rapid."""
    last = -1
    for k in range(len(first) - 1):
        if rapid[k]:
            last = -1
            continue
        number = first[k + 1] - first[k]
        if number > 0:
            last = first[k + 1] - 1
            best = first[k]
            for n in range(first[k], first[k + 1]):
                # The widest arc tells where it begins and ends.
                if table[n, 2] > table[best, 2]:
                    best = n
            slow = 1e30
            for c in range(table.shape[1]):
                out[k, c] = table[best, c]
                if c < 3 or c == _SLOW:
                    continue
                mean = _is_mean(c)
                value = 0.0
                for n in range(first[k], first[k + 1]):
                    value = value + table[n, c] / number if mean else max(value, table[n, c])
                out[k, c] = value
            for n in range(first[k], first[k + 1]):
                if table[n, _FAST] > 0.0:
                    slow = min(slow, table[n, _SLOW])
            out[k, _SLOW] = slow if slow < 1e30 else 0.0
        elif last >= 0:
            for c in range(table.shape[1]):
                out[k, c] = table[last, c]
