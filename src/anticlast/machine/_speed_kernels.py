"""Compiled kernels of the time model: speed along the whole program with look-ahead, then what bounded jerk adds.

The speeds are those of time-optimal path parameterisation by reachability (Pham and Pham, IEEE Trans. Robotics 34 (2018)
645-659: backwards the squared speeds from which the rest can still be run, then forwards the highest of them).
docs/theory-machine.md, "Time".
"""

from __future__ import annotations

import math

import numba
import numpy as np

_STRAIGHT = -1
_NOTHING = 1e-9  # share of a block that is no piece of its own: round-off of two halves
# A bend that takes less than this share of the acceleration at full speed makes a long block no curve.
_SLIGHT = 0.1
_INSTANT = 1e-12  # seconds: round-off of a run at cap that is not there
_PIECES = 16  # most pieces that half a long block on a curve is run in


@numba.njit(cache=True, nogil=True)
def _bent(
    i: int, vertex: int, size: float, cap: float, unit: np.ndarray, curve: np.ndarray, accel: float
) -> tuple[int, int, float]:
    """How the part of a block beside a bend is run: in how many pieces, with which curvature, at which straight acceleration."""
    most, along, left = 0.0, 0.0, math.inf
    for j in range(unit.shape[1]):
        most = max(most, abs(curve[vertex, j]))
        along = max(along, abs(unit[i, j]))
    free = accel / along
    if most == 0.0:
        return 1, _STRAIGHT, free
    ramp = min(cap * cap, accel / most) / (2.0 * free)
    if size <= 0.25 * ramp:
        return 1, vertex, free
    if most * cap * cap > _SLIGHT * accel:
        return min(_PIECES, math.ceil(4.0 * size / ramp)), vertex, free
    for j in range(unit.shape[1]):
        if unit[i, j] != 0.0:
            left = min(left, (accel - abs(curve[vertex, j]) * cap * cap) / abs(unit[i, j]))
    return 1, _STRAIGHT, left


@numba.njit(cache=True, nogil=True)
def pieces(
    unit: np.ndarray, length: np.ndarray, cap: np.ndarray, kind: np.ndarray, limit: np.ndarray, curve: np.ndarray,
    zone: np.ndarray, accel: float,
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray, np.ndarray]:  # fmt: skip
    """Cut the blocks into pieces that are straight or evenly bent.

    Parameters
    ----------
    unit, length, cap
        Direction (m, k), length (m,) and highest speed (m,) of each block.
    kind, limit, curve, zone
        Of the vertex at the start of each block, as from ``bends``.
    accel : float
        Of every axis, for the space is scaled.

    Returns
    -------
    block, vertex : (p,) int64
        Block of each piece, and the vertex whose curvature it has; -1 where it is straight.
    size, free : (p,)
        Length, and acceleration along it when it is straight.
    top : (p + 1,)
        Highest square of the speed at the start of each piece and at the end.
    """
    count = length.size
    room = 4 * _PIECES
    block, vertex = np.empty(room, np.int64), np.empty(room, np.int64)
    size, free, top = np.empty(room), np.empty(room), np.empty(room)
    n = 0
    for i in range(count):
        if n + 3 * _PIECES >= room:
            room *= 2
            block, vertex = _grown_ints(block, room), _grown_ints(vertex, room)
            size, free, top = _grown(size, room), _grown(free, room), _grown(top, room)
        square = cap[i] * cap[i]
        start = 0.0
        if kind[i] != 0:
            start = min(square, limit[i] * limit[i])
            start = min(start, cap[i - 1] * cap[i - 1]) if i > 0 else start
        before = min(zone[i], 0.5 * length[i])
        after = min(zone[i + 1], 0.5 * length[i]) if i + 1 < count else 0.0
        middle = length[i] - before - after
        for part in range(3):
            share = before if part == 0 else (middle if part == 1 else after)
            if share <= _NOTHING * length[i]:
                continue
            times, which, gain = 1, _STRAIGHT, accel / np.abs(unit[i]).max()
            if part != 1:
                times, which, gain = _bent(i, i + part // 2, share, cap[i], unit, curve, accel)
            for _ in range(times):
                block[n], vertex[n], size[n], free[n], top[n] = i, which, share / times, gain, start
                start = square
                n += 1
    highest = np.zeros(n + 1)
    highest[:n] = top[:n]
    return block[:n].copy(), vertex[:n].copy(), size[:n].copy(), free[:n].copy(), highest


@numba.njit(cache=True, nogil=True)
def _grown(values: np.ndarray, size: int) -> np.ndarray:
    out = np.empty(size)
    out[: values.size] = values
    return out


@numba.njit(cache=True, nogil=True)
def _grown_ints(values: np.ndarray, size: int) -> np.ndarray:
    out = np.empty(size, np.int64)
    out[: values.size] = values
    return out


@numba.njit(cache=True, nogil=True)
def _window(
    x0: float, most: float, t: np.ndarray, c: np.ndarray, size: float, accel: float
) -> tuple[float, float, float, float]:
    """Squared speeds at the end of a bent piece that its axes allow after x0 at its start: low, high, slopes of both by x0.

    Axis j accelerates by t_j u + c_j x with u = (x1 - x0) / (2 size); that has to keep inside +-accel at both ends.
    """
    low, high, low_slope, high_slope = 0.0, most, 0.0, 0.0
    for j in range(t.size):
        g = 0.5 * t[j] / size
        for end in range(2):
            # p x1 + q x0 within +-accel
            p, q = (g, c[j] - g) if end == 0 else (g + c[j], -g)
            if abs(p) * most <= 1e-9 * accel:
                continue
            room, slope = accel / abs(p), -q / p
            upper, lower = room + slope * x0, -room + slope * x0
            if upper < high:
                high, high_slope = upper, slope
            if lower > low:
                low, low_slope = lower, slope
    return low, high, low_slope, high_slope


@numba.njit(cache=True, nogil=True)
def _entry(top: float, most: float, t: np.ndarray, c: np.ndarray, size: float, accel: float) -> float:
    """Highest squared speed up to ``top`` at the start of a bent piece from which its end can be at ``most`` or below.

    The room (high - low) is concave and piecewise linear in x0 and not negative at 0, so Newton's steps from above come
    down to its zero in finitely many and never pass it.
    """
    for j in range(t.size):
        # Axes that ``_window`` leaves out because the end's speed does not reach them.
        g = 0.5 * t[j] / size
        if abs(g) * most <= 1e-9 * accel and abs(c[j] - g) * top > accel:
            top = accel / abs(c[j] - g)
        if abs(g + c[j]) * most <= 1e-9 * accel and abs(g) * top > accel:
            top = accel / abs(g)
    x0 = top
    for _ in range(100):
        low, high, low_slope, high_slope = _window(x0, most, t, c, size, accel)
        if high - low >= -1e-12 * top or x0 <= 0.0:
            break
        slope = high_slope - low_slope
        if slope >= 0.0:
            return 0.0
        x0 = max(0.0, x0 - (high - low) / slope)
    return x0


@numba.njit(cache=True, nogil=True)
def squares(
    block: np.ndarray, vertex: np.ndarray, size: np.ndarray, free: np.ndarray, top: np.ndarray,
    unit: np.ndarray, curve: np.ndarray, accel: float,
) -> np.ndarray:  # fmt: skip
    """Squares of the highest speeds at the ends of all pieces (p + 1,), from rest to rest; arguments as from ``pieces``."""
    count = size.size
    x = np.minimum(top, np.inf)
    x[count] = 0.0
    for i in range(count - 1, -1, -1):
        if vertex[i] == _STRAIGHT:
            x[i] = min(x[i], x[i + 1] + 2.0 * free[i] * size[i])
        else:
            x[i] = _entry(x[i], x[i + 1], unit[block[i]], curve[vertex[i]], size[i], accel)
    for i in range(count):
        if vertex[i] == _STRAIGHT:
            x[i + 1] = min(x[i + 1], x[i] + 2.0 * free[i] * size[i])
        else:
            low, high, _, _ = _window(x[i], x[i + 1], unit[block[i]], curve[vertex[i]], size[i], accel)
            x[i + 1] = max(0.0, max(low, high) if high < low else high)
    return x


@numba.njit(cache=True, nogil=True)
def profile(
    block: np.ndarray, vertex: np.ndarray, size: np.ndarray, free: np.ndarray, cap: np.ndarray, x: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Speed over time as a chain of straight lines: piece of each (q,), speeds at its ends (q,), seconds (q,).

    A straight piece has up to three: a run up, a run at its cap, a run down; a bent one has one.
    """
    count = size.size
    piece = np.empty(3 * count, np.int64)
    low, high, seconds = np.empty(3 * count), np.empty(3 * count), np.empty(3 * count)
    n = 0
    for i in range(count):
        v0, v1 = math.sqrt(x[i]), math.sqrt(x[i + 1])
        if vertex[i] != _STRAIGHT and v0 + v1 > 0.0:
            piece[n], low[n], high[n], seconds[n] = i, v0, v1, 2.0 * size[i] / (v0 + v1)
            n += 1
            continue
        v = min(cap[block[i]], math.sqrt(0.5 * (x[i] + x[i + 1]) + free[i] * size[i]))
        v = max(v, max(v0, v1))
        ramps = (2.0 * v * v - x[i] - x[i + 1]) / (2.0 * free[i])
        parts = (
            (v0, v, (v - v0) / free[i]),
            (v, v, max(0.0, size[i] - ramps) / v),
            (v, v1, (v - v1) / free[i]),
        )
        for a, b, spent in parts:
            if spent > _INSTANT:
                piece[n], low[n], high[n], seconds[n] = i, a, b, spent
                n += 1
    return piece[:n].copy(), low[:n].copy(), high[:n].copy(), seconds[:n].copy()


@numba.njit(cache=True, nogil=True)
def loads(
    piece: np.ndarray, v0: np.ndarray, v1: np.ndarray, seconds: np.ndarray,
    block: np.ndarray, vertex: np.ndarray, unit: np.ndarray, curve: np.ndarray, accel: float,
) -> np.ndarray:  # fmt: skip
    """Share of its acceleration that each axis needs, times the seconds it does, summed over each block (m, k)."""
    out = np.zeros(unit.shape)
    for n in range(piece.size):
        i = block[piece[n]]
        gain = (v1[n] - v0[n]) / seconds[n]
        fast = max(v0[n], v1[n]) ** 2
        for j in range(unit.shape[1]):
            pull = curve[vertex[piece[n]], j] * fast if vertex[piece[n]] != _STRAIGHT else 0.0
            out[i, j] += seconds[n] * abs(unit[i, j] * gain + pull) / accel
    return out
