"""Compiled crossing of vertical columns with the triangles of a closed mesh."""

from __future__ import annotations

import math

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def _side(px: float, py: float, qx: float, qy: float, x: float, y: float) -> float:
    """Twice the signed area of (p, q, x), the same to the last bit but for its sign when p and q change places."""
    if px < qx or (px == qx and py < qy):
        return (qx - px) * (y - py) - (qy - py) * (x - px)
    return -((px - qx) * (y - qy) - (py - qy) * (x - qx))


@njit(cache=True, nogil=True)
def cross(
    corners: np.ndarray, place: tuple, crossings: np.ndarray, first: np.ndarray, height: np.ndarray, sense: np.ndarray,
    fill: bool,
) -> None:  # fmt: skip
    """Count, or fill in, where columns cross triangles.

    A column on an edge counts for one of the two triangles that share it, so every column enters and leaves a closed mesh
    equally often.

    Parameters
    ----------
    corners : (n, 3, 3) [mm]
    place : (u0, v0, spacing) [mm]
    crossings : (rows, columns) int64
        Gets the number of crossings.
    first : (rows * columns + 1,) int64
        Where each column's crossings start, for filling.
    height, sense : (n,)
        Get the height of each crossing, and +1 where the triangle faces up, else -1.
    """
    u0, v0, g = place
    rows, columns = crossings.shape
    for t in range(corners.shape[0]):
        a, b, c = corners[t, 0], corners[t, 1], corners[t, 2]
        up = (b[0] - a[0]) * (c[1] - a[1]) - (b[1] - a[1]) * (c[0] - a[0])
        if up == 0.0:
            continue
        if up < 0.0:
            b, c = c, b
        i0 = max(0, math.ceil((min(a[0], b[0], c[0]) - u0) / g))
        i1 = min(columns - 1, math.floor((max(a[0], b[0], c[0]) - u0) / g))
        j0 = max(0, math.ceil((min(a[1], b[1], c[1]) - v0) / g))
        j1 = min(rows - 1, math.floor((max(a[1], b[1], c[1]) - v0) / g))
        for j in range(j0, j1 + 1):
            y = v0 + j * g
            for i in range(i0, i1 + 1):
                x = u0 + i * g
                wc = _side(a[0], a[1], b[0], b[1], x, y)
                wa = _side(b[0], b[1], c[0], c[1], x, y)
                wb = _side(c[0], c[1], a[0], a[1], x, y)
                if wa < 0.0 or wb < 0.0 or wc < 0.0:
                    continue
                if wc == 0.0 and not (b[1] > a[1] or (b[1] == a[1] and b[0] < a[0])):
                    continue
                if wa == 0.0 and not (c[1] > b[1] or (c[1] == b[1] and c[0] < b[0])):
                    continue
                if wb == 0.0 and not (a[1] > c[1] or (a[1] == c[1] and a[0] < c[0])):
                    continue
                if fill:
                    at = first[j * columns + i] + crossings[j, i]
                    height[at] = (wa * a[2] + wb * b[2] + wc * c[2]) / (wa + wb + wc)
                    sense[at] = 1.0 if up > 0.0 else -1.0
                crossings[j, i] += 1


@njit(cache=True, nogil=True)
def stack(
    first: np.ndarray, height: np.ndarray, sense: np.ndarray, high: np.ndarray, low: np.ndarray, count: np.ndarray,
    filled: np.ndarray,
) -> None:  # fmt: skip
    """Make pieces of material from each column's crossings, from the top down; gaps too many are filled, narrowest first."""
    most, rows, columns = high.shape
    for column in range(rows * columns):
        begin, end = first[column], first[column + 1]
        if end - begin < 2:
            continue
        j, i = column // columns, column % columns
        order = np.argsort(-height[begin:end])
        tops, bottoms = np.empty(end - begin), np.empty(end - begin)
        kept, depth = 0, 0.0
        for at in order:
            before = depth
            depth += sense[begin + at]
            if before <= 0.0 and depth > 0.0:
                tops[kept] = height[begin + at]
            elif before > 0.0 and depth <= 0.0:
                bottoms[kept] = height[begin + at]
                kept += 1
        while kept > most:
            narrow = 0
            for k in range(1, kept - 1):
                if bottoms[k] - tops[k + 1] < bottoms[narrow] - tops[narrow + 1]:
                    narrow = k
            filled[j, i] += bottoms[narrow] - tops[narrow + 1]
            bottoms[narrow] = bottoms[narrow + 1]
            for k in range(narrow + 1, kept - 1):
                tops[k], bottoms[k] = tops[k + 1], bottoms[k + 1]
            kept -= 1
        for k in range(kept):
            high[k, j, i], low[k, j, i] = tops[k], bottoms[k]
        count[j, i] = kept
