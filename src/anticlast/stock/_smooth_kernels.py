"""Compiled loops for sliding extremes and for carrying station values along the path."""

from __future__ import annotations

import numpy as np
from numba import njit


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
    """Fill each segment's row from its station, or from the last station before it since the last rapid."""
    last = -1
    for k in range(len(first) - 1):
        if rapid[k]:
            last = -1
        if first[k + 1] > first[k]:
            last = first[k]
        if last >= 0:
            for c in range(table.shape[1]):
                out[k, c] = table[last, c]
