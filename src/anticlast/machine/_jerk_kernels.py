"""Compiled kernels of the time model: what bounded jerk adds to a speed profile that is bounded in acceleration.

docs/theory-machine.md, "Time", Jerk.
"""

from __future__ import annotations

import math

import numba
import numpy as np

_EVEN = 0.02  # share of a speed by which it may change and still count as even: costs nothing to smooth
_HALVINGS = 60  # of an interval of speeds: down to the last bit


@numba.njit(cache=True, nogil=True)
def _ramp_time(change: float, accel: float, jerk: float) -> float:
    """Time of a change of speed that starts and ends without acceleration (trapezoid or triangle of acceleration)."""
    if change <= 0.0:
        return 0.0
    if jerk == math.inf:
        return change / accel
    if change * jerk >= accel * accel:
        return change / accel + accel / jerk
    return 2.0 * math.sqrt(change / jerk)


@numba.njit(cache=True, nogil=True)
def _ramp_size(low: float, high: float, accel: float, jerk: float) -> float:
    """Way on which speed goes from low to high: by symmetry at the mean of both."""
    return 0.5 * (low + high) * _ramp_time(high - low, accel, jerk)


@numba.njit(cache=True, nogil=True)
def _reached(low: float, high: float, size: float, accel: float, jerk: float) -> float:
    """Highest speed up to ``high`` that a run up from ``low`` comes to within ``size``."""
    if high <= low or _ramp_size(low, high, accel, jerk) <= size * (1.0 + 1e-12):
        return high
    bottom, top = low, high
    for _ in range(_HALVINGS):
        middle = 0.5 * (bottom + top)
        if _ramp_size(low, middle, accel, jerk) <= size:
            bottom = middle
        else:
            top = middle
    return bottom


@numba.njit(cache=True, nogil=True)
def _hump_time(
    begin: float, peak: float, end: float, size: float, up: float, down: float, jerk: float
) -> float:
    """Time of a run up from ``begin``, a run at no more than ``peak``, and a run down to ``end``, over ``size``."""
    least = max(begin, end)
    top = max(peak, least)
    need = _ramp_size(begin, top, up, jerk) + _ramp_size(end, top, down, jerk)
    if need > size:
        bottom = least
        for _ in range(_HALVINGS):
            middle = 0.5 * (bottom + top)
            need = _ramp_size(begin, middle, up, jerk) + _ramp_size(end, middle, down, jerk)
            if need <= size:
                bottom = middle
            else:
                top = middle
        top = bottom
        need = _ramp_size(begin, top, up, jerk) + _ramp_size(end, top, down, jerk)
    rest = max(0.0, size - need)
    even = rest / top if top > 0.0 else 0.0
    return _ramp_time(top - begin, up, jerk) + _ramp_time(top - end, down, jerk) + even


@numba.njit(cache=True, nogil=True)
def _runs(v0: np.ndarray, v1: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Split a chain of lines where speed starts to rise, fall or keep even: first line of each (r + 1,), way (r,) 1, -1, 0.

    Small changes count as even.
    """
    count = v0.size
    first, way = np.zeros(count + 1, np.int64), np.zeros(count, np.int64)
    n, i = 0, 0
    while i < count:
        begin = i
        sign = 1 if v1[i] > v0[i] else (-1 if v1[i] < v0[i] else 0)
        i += 1
        while i < count and sign == (1 if v1[i] > v0[i] else (-1 if v1[i] < v0[i] else 0)):
            i += 1
        if abs(v1[i - 1] - v0[begin]) <= _EVEN * max(v1[i - 1], v0[begin]):
            sign = 0
        if n > 0 and sign == 0 and way[n - 1] == 0:
            continue
        first[n], way[n] = begin, sign
        n += 1
    first[n] = count
    return first[: n + 1].copy(), way[:n].copy()


@numba.njit(cache=True, nogil=True)
def _joined(
    first: np.ndarray,
    way: np.ndarray,
    piece: np.ndarray,
    seconds: np.ndarray,
    free: np.ndarray,
    jerk: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:
    """Join runs up (or down) with an even run between them that is shorter than jerk takes to build the acceleration."""
    out, ways = np.zeros(first.size, np.int64), np.zeros(way.size, np.int64)
    n, r = 0, 0
    while r < way.size:
        out[n], ways[n] = first[r], way[r]
        r += 1
        while ways[n] != 0 and r + 1 < way.size and way[r] == 0 and way[r + 1] == ways[n]:
            at = piece[first[r]]
            if seconds[first[r] : first[r + 1]].sum() * jerk[at] >= free[at]:
                break
            r += 2
        n += 1
    out[n] = first[way.size]
    return out[: n + 1].copy(), ways[:n].copy()


@numba.njit(cache=True, nogil=True)
def humps(
    piece: np.ndarray, v0: np.ndarray, v1: np.ndarray, seconds: np.ndarray, free: np.ndarray, jerk: np.ndarray
) -> np.ndarray:
    """Split a speed profile into humps: a run up, an even run, a run down, each of which may be missing.

    Parameters
    ----------
    piece, v0, v1, seconds : (q,)
        Chain of lines of speed over time, as from ``profile``.
    free, jerk : (p,)
        Acceleration and jerk along each piece if it is straight.

    Returns
    -------
    (h, 13)
        First line, first after the run up, first of the run down, first after it; speeds at the begin, peak and end; way;
        mean acceleration up and down; mean jerk over both (harmonic, by time); accelerations to be had at begin and end.
    """
    first, ways = _runs(v0, v1)
    first, ways = _joined(first, ways, piece, seconds, free, jerk)
    out = np.zeros((ways.size, 13))
    n, r = 0, 0
    while r < ways.size:
        start = first[r]
        r += 1 if ways[r] == 1 else 0
        level = first[r]
        r += 1 if r < ways.size and ways[r] == 0 else 0
        fall = first[r]
        r += 1 if r < ways.size and ways[r] == -1 else 0
        after = first[r]
        if level == start and fall == after:
            continue  # an even run alone: the bottom between two humps
        out[n, 0], out[n, 1], out[n, 2], out[n, 3] = start, level, fall, after
        _measure(out[n], piece, v0, v1, seconds, free, jerk)
        n += 1
    return out[:n].copy()


@numba.njit(cache=True, nogil=True)
def _measure(
    hump: np.ndarray,
    piece: np.ndarray,
    v0: np.ndarray,
    v1: np.ndarray,
    seconds: np.ndarray,
    free: np.ndarray,
    jerk: np.ndarray,
) -> None:
    """Fill in a hump's row from column 4 on, given its lines."""
    start, level, fall, after = int(hump[0]), int(hump[1]), int(hump[2]), int(hump[3])
    up, down, slow = 0.0, 0.0, 0.0
    for i in range(start, after):
        if i < level:
            up += seconds[i]
        elif i >= fall:
            down += seconds[i]
        if i < level or i >= fall:
            slow += seconds[i] / jerk[piece[i]]
    peak = max(v1[level - 1] if level > start else v0[start], v0[fall] if fall < after else v1[after - 1])
    begin = v0[start] if level > start else peak
    end = v1[after - 1] if fall < after else peak
    hump[4], hump[5], hump[6] = begin, peak, end
    hump[7] = 0.5 * (begin + peak) * up + 0.5 * (peak + end) * down + peak * seconds[level:fall].sum()
    hump[11], hump[12] = free[piece[start]], free[piece[after - 1]]
    hump[8] = (peak - begin) / up if up > 0.0 else hump[11]
    hump[9] = (peak - end) / down if down > 0.0 else hump[12]
    hump[10] = (up + down) / slow if slow > 0.0 else math.inf


@numba.njit(cache=True, nogil=True)
def _settle(table: np.ndarray) -> None:
    """Lower the speeds between humps until each is reached with bounded jerk: forwards, then backwards.

    From a speed that was lowered a run up or down uses the acceleration that is to be had there, not the mean of a run that
    is no longer the one.
    """
    count = len(table)
    for h in range(count):
        begin, end, size, rate = table[h, 4], table[h, 6], table[h, 7], table[h, 10]
        if end > begin:
            table[h, 6] = _reached(begin, end, size, max(table[h, 8], table[h, 11]), rate)
        if h + 1 < count and table[h, 6] < table[h + 1, 4]:
            table[h + 1, 4] = table[h, 6]
            table[h + 1, 8] = max(table[h + 1, 8], table[h + 1, 11])
    for h in range(count - 1, -1, -1):
        begin, end, size, rate = table[h, 4], table[h, 6], table[h, 7], table[h, 10]
        if begin > end:
            table[h, 4] = _reached(end, begin, size, max(table[h, 9], table[h, 12]), rate)
        if h > 0 and table[h, 4] < table[h - 1, 6]:
            table[h - 1, 6] = table[h, 4]
            table[h - 1, 9] = max(table[h - 1, 9], table[h - 1, 12])


@numba.njit(cache=True, nogil=True)
def jerk_losses(
    piece: np.ndarray, v0: np.ndarray, v1: np.ndarray, seconds: np.ndarray, free: np.ndarray, jerk: np.ndarray
) -> np.ndarray:
    """Seconds that bounded jerk adds to each line of a speed profile (q,); arguments as in ``humps``.

    Every change of speed starts and ends without acceleration. Where a hump has no room for that, its peak comes down, and
    where a run up or down has none, the speed it should end in.
    """
    out = np.zeros(piece.size)
    table = humps(piece, v0, v1, seconds, free, jerk)
    _settle(table)
    for h in range(len(table)):
        begin, peak, end, size, up, down, rate = (
            table[h, 4], table[h, 5], table[h, 6], table[h, 7], table[h, 8], table[h, 9], table[h, 10],
        )  # fmt: skip
        first, level, fall, after = int(table[h, 0]), int(table[h, 1]), int(table[h, 2]), int(table[h, 3])
        whole, ramps = 0.0, 0.0
        for i in range(first, after):
            whole += seconds[i]
            ramps += seconds[i] if i < level or i >= fall else 0.0
        lost = max(0.0, _hump_time(begin, peak, end, size, up, down, rate) - whole)
        for i in range(first, after):
            if i < level or i >= fall:
                out[i] = lost * seconds[i] / ramps
    return out
