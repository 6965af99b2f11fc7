"""Compiled kernels of the time model: corner speeds, look-ahead, and the time of each block.

All vectors here are in scaled joint space: each axis's coordinate is multiplied by (reference acceleration / its own), so
that one acceleration holds for every axis and mm and degrees can stand in one vector. docs/theory-machine.md, "Time".
"""

from __future__ import annotations

import math

import numba
import numpy as np

# A window of path looked at on either side of a corner holds at most this many blocks.
_WINDOW_BLOCKS = 64


@numba.njit(cache=True, nogil=True)
def _corner_angle(a: np.ndarray, b: np.ndarray) -> float:
    """Angle (radians) between two vectors, exact for small angles; 0 if one has no length."""
    aa, bb, ab = 0.0, 0.0, 0.0
    for j in range(a.size):
        aa += a[j] * a[j]
        bb += b[j] * b[j]
        ab += a[j] * b[j]
    if aa == 0.0 or bb == 0.0:
        return 0.0
    aa, bb = math.sqrt(aa), math.sqrt(bb)
    minus, plus = 0.0, 0.0
    for j in range(a.size):
        minus += (a[j] / aa - b[j] / bb) ** 2
        plus += (a[j] / aa + b[j] / bb) ** 2
    return 2.0 * math.atan2(math.sqrt(minus), math.sqrt(plus))


@numba.njit(cache=True, nogil=True)
def _blend_radius(length: float, angle: float) -> float:
    """Radius of the arc that a corner takes when it may use half of ``length`` on either side."""
    half = math.tan(0.5 * angle)
    return length / (2.0 * half) if half > 0.0 else math.inf


@numba.njit(cache=True, nogil=True)
def _chord(
    steps: np.ndarray, length: np.ndarray, i: int, way: int, reach: float, stop: np.ndarray, out: np.ndarray
) -> float:
    """Sum of blocks from i on in direction ``way`` until ``reach`` is spanned or a full stop comes; returns their length."""
    total = 0.0
    for j in range(out.size):
        out[j] = 0.0
    for _ in range(_WINDOW_BLOCKS):
        for j in range(out.size):
            out[j] += steps[i, j]
        total += length[i]
        # stop[i] belongs to the start of block i
        ahead = i + 1 if way > 0 else i
        i += way
        if total >= reach or i < 0 or i >= length.size or stop[ahead]:
            break
    return total


@numba.njit(cache=True, nogil=True)
def corner_speeds(
    leaving: np.ndarray,
    entering: np.ndarray,
    steps: np.ndarray,
    length: np.ndarray,
    cap: np.ndarray,
    stop: np.ndarray,
    exact: int,
    scale: np.ndarray,
    lin: np.ndarray,
    dev_lin: float,
    dev_rot: float,
    accel: float,
    exact_rad: float,
) -> np.ndarray:
    """Highest speed at the start of each block (n,), and 0 where the control stops there.

    A corner of angle th is rounded by an arc that passes it at distance d: r = d / (1/cos(th/2) - 1), and v = sqrt(A r).
    A smooth line in many short blocks is bounded by the arc that fits a stretch of it instead: as long a stretch as an arc
    run at full speed needs to move aside by d, so that rounding of the posted digits does not count as corners.

    Parameters
    ----------
    leaving, entering : (n, k)
        Unit directions at the end and at the start of each block.
    steps : (n, k)
        Chord of each block.
    length, cap : (n,)
        Path length and highest speed of each block.
    stop : (n,) bool
        The control stops before this block.
    exact : int
        0: continuous (G64). 1: exact path (G61), a stop at every corner. 2: exact stop (G61.1).
    scale, lin : (k,)
        Factors of the scaling; 1 for linear axes, 0 for rotary.
    dev_lin, dev_rot : float
        Allowed deviation at a corner, mm and degrees.
    accel : float
        Reference acceleration.
    exact_rad : float
        Corners below this angle are none under exact path.
    """
    count, k = leaving.shape
    speed = np.zeros(count)
    behind, before = np.zeros(k), np.zeros(k)
    for i in range(1, count):
        if stop[i] or exact == 2:
            continue
        angle = _corner_angle(leaving[i - 1], entering[i])
        if exact == 1:
            speed[i] = 0.0 if angle > exact_rad else math.inf
            continue
        fastest = min(cap[i - 1], cap[i])
        allowed = math.inf
        if angle > 0.0:
            # d in scaled space: what the arc leaves of the corner points along the bisector.
            straight, part = 0.0, 0.0
            norm = 0.0
            for j in range(k):
                norm += (entering[i, j] - leaving[i - 1, j]) ** 2
            norm = math.sqrt(norm)
            for j in range(k):
                share = abs(entering[i, j] - leaving[i - 1, j]) / (norm * scale[j])
                if lin[j] == 1.0:
                    straight += share * share
                else:
                    part = max(part, share)
            aside = math.inf
            if straight > 0.0:
                aside = dev_lin / math.sqrt(straight)
            if part > 0.0:
                aside = min(aside, dev_rot / part)
            secant = 1.0 / max(math.cos(0.5 * angle), 1e-12) - 1.0
            if secant > 0.0:
                allowed = math.sqrt(accel * aside / secant)
            reach = math.sqrt(2.0 * aside * fastest * fastest / accel)
            back = _chord(steps, length, i - 1, -1, reach, stop, behind)
            ahead = _chord(steps, length, i, 1, reach, stop, before)
            bend = _corner_angle(behind, before)
            allowed = min(allowed, math.sqrt(accel * _blend_radius(min(back, ahead), bend)))
        speed[i] = allowed
    return speed


@numba.njit(cache=True, nogil=True)
def _s_curve(length: float, cap: float, accel: float, jerk: float) -> float:
    """Time of one move from rest to rest with speed, acceleration and jerk bounded (the symmetric seven-phase profile)."""
    if length <= 0.0:
        return 0.0
    if jerk == math.inf:
        return length / cap + cap / accel if length >= cap * cap / accel else 2.0 * math.sqrt(length / accel)
    if cap * jerk >= accel * accel:
        if length >= cap * cap / accel + cap * accel / jerk:
            return length / cap + cap / accel + accel / jerk
    elif length >= 2.0 * cap * math.sqrt(cap / jerk):
        return length / cap + 2.0 * math.sqrt(cap / jerk)
    if length >= 2.0 * accel**3 / jerk**2:
        return accel / jerk + math.sqrt((accel / jerk) ** 2 + 4.0 * length / accel)
    return 4.0 * (length / (2.0 * jerk)) ** (1.0 / 3.0)


@numba.njit(cache=True, nogil=True)
def _jerk_loss(speed: float, accel: float, jerk: float) -> float:
    """What bounded jerk adds to the time of a run up to (or down from) ``speed``, against bounded acceleration alone."""
    if jerk == math.inf:
        return 0.0
    if speed * jerk >= accel * accel:
        return 0.5 * accel / jerk
    return math.sqrt(speed / jerk) - 0.5 * speed / accel


@numba.njit(cache=True, nogil=True)
def block_times(
    length: np.ndarray, cap: np.ndarray, accel: np.ndarray, jerk: np.ndarray, corner: np.ndarray
) -> np.ndarray:
    """Time of each block (n,), with look-ahead over all of them: from rest, through the corners, to rest.

    Backwards, no block may be entered faster than it can be braked from; forwards, none left faster than it can be run up
    to. In between each block has a trapezoid (or triangle) of speed. Jerk is exact for a block from rest to rest, and where
    a run of blocks starts or ends at rest it adds the loss of that ramp.
    """
    count = length.size
    speed = np.zeros(count + 1)
    for i in range(1, count):
        speed[i] = min(corner[i], cap[i - 1], cap[i])
    for i in range(count - 1, -1, -1):
        speed[i] = min(speed[i], math.sqrt(speed[i + 1] ** 2 + 2.0 * accel[i] * length[i]))
    times = np.zeros(count)
    for i in range(count):
        speed[i + 1] = min(speed[i + 1], math.sqrt(speed[i] ** 2 + 2.0 * accel[i] * length[i]))
        low, high = speed[i], speed[i + 1]
        if length[i] <= 0.0:
            continue
        if low == 0.0 and high == 0.0:
            times[i] = _s_curve(length[i], cap[i], accel[i], jerk[i])
            continue
        peak = math.sqrt(0.5 * (low * low + high * high) + accel[i] * length[i])
        if peak <= cap[i]:
            times[i] = (2.0 * peak - low - high) / accel[i]
        else:
            top = cap[i]
            ramps = (2.0 * top * top - low * low - high * high) / (2.0 * accel[i])
            times[i] = (2.0 * top - low - high) / accel[i] + max(0.0, length[i] - ramps) / top
        if low == 0.0 or high == 0.0:
            times[i] += _jerk_loss(min(peak, cap[i]), accel[i], jerk[i])
    return times
