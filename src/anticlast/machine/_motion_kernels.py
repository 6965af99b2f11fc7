"""Compiled kernels of the time model: how sharply the path bends where blocks meet, and what that allows.

All vectors here are in scaled joint space: each axis's coordinate is multiplied by (reference acceleration / its own), so
that one acceleration holds for every axis and mm and degrees can stand in one vector. docs/theory-machine.md, "Time".
"""

from __future__ import annotations

import math

import numba
import numpy as np

STOP = 0  # the control stands still here
CORNER = 1  # passed at one speed, or no corner at all
SMOOTH = 2  # part of a curve in short blocks, bent all along

# Cosine of half the angle below which a corner turns straight back.
_BACK = 1e-6
_SAME = 1e-12  # radians: one direction
# Rounding arcs that take less than this share of a block are passed as points, between straight blocks.
_POINT_SHARE = 0.125
# A window of path looked at on either side of a corner holds at most this many blocks.
_WINDOW_BLOCKS = 64
# Rounds in which the window and the radius found in it are brought together; each changes the window less.
_WINDOW_ROUNDS = 4


@numba.njit(cache=True, nogil=True)
def _corner_angle(a: np.ndarray, b: np.ndarray) -> float:
    """Angle (radians) between two vectors, exact for small angles; 0 if one has no length."""
    aa, bb = 0.0, 0.0
    for j in range(a.size):
        aa += a[j] * a[j]
        bb += b[j] * b[j]
    if aa == 0.0 or bb == 0.0:
        return 0.0
    aa, bb = math.sqrt(aa), math.sqrt(bb)
    minus, plus = 0.0, 0.0
    for j in range(a.size):
        minus += (a[j] / aa - b[j] / bb) ** 2
        plus += (a[j] / aa + b[j] / bb) ** 2
    return 2.0 * math.atan2(math.sqrt(minus), math.sqrt(plus))


@numba.njit(cache=True, nogil=True)
def _chord(
    unit: np.ndarray, length: np.ndarray, i: int, way: int, reach: float, stop: np.ndarray, out: np.ndarray
) -> float:
    """Sum of blocks from i on in direction ``way`` until ``reach`` is spanned or a full stop comes; returns their length."""
    total = 0.0
    for j in range(out.size):
        out[j] = 0.0
    for _ in range(_WINDOW_BLOCKS):
        for j in range(out.size):
            out[j] += unit[i, j] * length[i]
        total += length[i]
        # stop[i] belongs to the start of block i
        ahead = i + 1 if way > 0 else i
        i += way
        if total >= reach or i < 0 or i >= length.size or stop[ahead]:
            break
    return total


@numba.njit(cache=True, nogil=True)
def _aside(
    unit: np.ndarray, i: int, scale: np.ndarray, lin: np.ndarray, dev_lin: float, dev_rot: float
) -> float:
    """How far the path may leave corner i along its bisector, in scaled length, until X Y Z or a rotary axis is off by d."""
    norm, straight, part = 0.0, 0.0, 0.0
    for j in range(scale.size):
        norm += (unit[i, j] - unit[i - 1, j]) ** 2
    if norm == 0.0:
        return math.inf
    norm = math.sqrt(norm)
    for j in range(scale.size):
        share = abs(unit[i, j] - unit[i - 1, j]) / (norm * scale[j])
        if lin[j] == 1.0:
            straight += share * share
        else:
            part = max(part, share)
    aside = math.inf
    if straight > 0.0:
        aside = dev_lin / math.sqrt(straight)
    if part > 0.0:
        aside = min(aside, dev_rot / part)
    return aside


@numba.njit(cache=True, nogil=True)
def _pull(unit: np.ndarray, i: int, angle: float) -> float:
    """Largest share that one axis has in the pull towards the centre, anywhere on the arc that rounds corner i."""
    most = 0.0
    sine, cosine = math.sin(0.5 * angle), math.cos(0.5 * angle)
    for j in range(unit.shape[1]):
        before, after = unit[i - 1, j], unit[i, j]
        across = (after - before) / (2.0 * sine)
        along = (after + before) / (2.0 * cosine) if cosine > 0.0 else 0.0
        # Half way round the normal is `across`; turned by phi its part is across cos(phi) - along sin(phi).
        if abs(along) * cosine <= abs(across) * sine:
            share = math.hypot(across, along)
        else:
            share = abs(across) * cosine + abs(along) * sine
        most = max(most, share)
    return most


@numba.njit(cache=True, nogil=True)
def _corner_speed(
    unit: np.ndarray, i: int, angle: float, aside: float, accel: float, jerk: np.ndarray
) -> float:
    """Speed through the arc that passes the corner at distance ``aside``, each axis inside its acceleration and jerk."""
    secant = 1.0 / math.cos(0.5 * angle) - 1.0
    if secant <= 0.0:
        return math.inf
    speed = math.sqrt(accel * aside / secant / _pull(unit, i, angle))
    turn = 2.0 * math.sin(0.5 * angle)
    for j in range(jerk.size):
        change = abs(unit[i, j] - unit[i - 1, j])
        if change > 0.0 and jerk[j] < math.inf:
            speed = min(speed, (36.0 * jerk[j] * aside * aside / (change * turn * turn)) ** (1.0 / 3.0))
    return speed


@numba.njit(cache=True, nogil=True)
def bends(
    unit: np.ndarray,
    length: np.ndarray,
    cap: np.ndarray,
    stop: np.ndarray,
    exact: int,
    scale: np.ndarray,
    lin: np.ndarray,
    dev_lin: float,
    dev_rot: float,
    accel: float,
    jerk: np.ndarray,
    exact_rad: float,
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """What happens at the start of each block: kind, highest speed, curvature and reach of the bend there.

    A corner of angle th is rounded by an arc that passes it at distance d: r = d / (1/cos(th/2) - 1), and v = sqrt(A r).
    Where a stretch of the path bends more than that, the corner is part of a curve: its curvature is the change of
    direction between the chords of two windows over the distance of their middles. The windows are as long as an
    arc of the radius found needs to move aside by d, so that rounding of the posted digits does not count as bending.

    Parameters
    ----------
    unit : (m, k)
        Directions of the blocks.
    length, cap : (m,)
        Path length and highest speed of each block.
    stop : (m,) bool
        The control stops before this block.
    exact : int
        0: continuous (G64). 1: exact path (G61), a stop at every corner. 2: exact stop (G61.1).
    scale, lin : (k,)
        Factors of the scaling; 1 for linear axes, 0 for rotary.
    dev_lin, dev_rot : float
        Allowed deviation at a corner, mm and degrees.
    accel : float
        Reference acceleration.
    jerk : (k,)
        Jerk of each axis, scaled.
    exact_rad : float
        Corners below this angle are none under exact path.

    Returns
    -------
    kind : (m,) int64
        ``STOP``, ``CORNER`` or ``SMOOTH``.
    limit : (m,)
        Highest speed through it, infinite where nothing but the bend itself limits.
    curve : (m, k)
        Curvature of the path: change of its direction over its length.
    zone : (m,)
        How far to either side that holds; infinite: to the middle of the blocks.
    """
    count, k = unit.shape
    zone = np.zeros(count)
    kind = np.zeros(count, dtype=np.int64)
    limit = np.zeros(count)
    curve = np.zeros((count, k))
    behind, before = np.zeros(k), np.zeros(k)
    aside = dev_lin if exact == 0 else 0.0
    for i in range(1, count):
        if stop[i] or exact == 2:
            continue
        angle = _corner_angle(unit[i - 1], unit[i])
        if exact == 1 and angle > exact_rad:
            continue
        kind[i], limit[i] = CORNER, math.inf
        if exact == 0 and math.cos(0.5 * angle) < _BACK:
            limit[i] = 0.0
            continue
        # Rounded words may go straight on in the middle of a curve: the deviation allowed is then the last one's.
        if exact == 0 and angle > _SAME:
            aside = _aside(unit, i, scale, lin, dev_lin, dev_rot)
        fastest = min(cap[i - 1], cap[i])
        gentle = fastest * fastest / accel  # radius that the path may have at full speed
        reach = math.sqrt(2.0 * aside * gentle)
        bend, turned, back, ahead = 0.0, 0.0, 0.0, 0.0
        for _ in range(_WINDOW_ROUNDS):
            back = _chord(unit, length, i - 1, -1, reach, stop, behind)
            ahead = _chord(unit, length, i, 1, reach, stop, before)
            turned = _corner_angle(behind, before)
            bend = 4.0 * math.sin(0.5 * turned) / (back + ahead)
            if bend * gentle <= 1.0:
                break
            shorter = math.sqrt(2.0 * aside / bend)
            if abs(shorter - reach) <= 0.05 * reach:
                break
            reach = shorter
        if angle <= _SAME and turned <= _SAME:
            continue
        secant = 1.0 / math.cos(0.5 * angle) - 1.0
        if exact == 0 and secant >= aside * bend:
            limit[i] = _corner_speed(unit, i, angle, aside, accel, jerk)
            tangent = math.tan(0.5 * angle) * aside / secant
            if tangent > _POINT_SHARE * min(length[i - 1], length[i]):
                zone[i] = tangent
                for j in range(k):
                    curve[i, j] = (
                        (unit[i, j] - unit[i - 1, j]) * secant / (2.0 * math.sin(0.5 * angle) * aside)
                    )
            continue
        kind[i], zone[i] = SMOOTH, math.inf
        nb, na = math.sqrt((behind * behind).sum()), math.sqrt((before * before).sum())
        if nb > 0.0 and na > 0.0:
            for j in range(k):
                curve[i, j] = (before[j] / na - behind[j] / nb) * 2.0 / (back + ahead)
    return kind, limit, curve, zone


@numba.njit(cache=True, nogil=True)
def jerk_limits(
    unit: np.ndarray,
    length: np.ndarray,
    cap: np.ndarray,
    kind: np.ndarray,
    limit: np.ndarray,
    curve: np.ndarray,
    scale: np.ndarray,
    lin: np.ndarray,
    dev_lin: float,
    dev_rot: float,
    accel: float,
    jerk: np.ndarray,
) -> None:
    """Lower ``limit`` (m,) on curves until the pull of no axis changes faster than its jerk allows.

    On a curve run at v the pull changes by (change of curvature) v^2 in the time (distance) / v, so v^3 <= J s / |dc|. What
    changes faster than the allowed deviation can be felt does not count: smoothing over a time tau moves an accelerated
    path by a tau^2 / 24, hence s >= v sqrt(24 d / A). Arguments as in ``bends``; ``kind``, ``limit``, ``curve`` its results.
    """
    count, k = curve.shape
    for i in range(1, count):
        if kind[i] != SMOOTH:
            continue
        fastest = min(cap[i - 1], cap[i])
        aside = _aside(unit, i, scale, lin, dev_lin, dev_rot)
        if aside == math.inf:
            aside = dev_lin
        wanted = fastest * math.sqrt(24.0 * aside / accel)
        low, high, span = i, i, 0.0
        for _ in range(_WINDOW_BLOCKS):
            more_below, more_above = kind[low - 1] == SMOOTH, high + 1 < count and kind[high + 1] == SMOOTH
            if span >= wanted or not (more_below or more_above):
                break
            if more_below:
                low -= 1
                span += length[low]
            if more_above:
                span += length[high]
                high += 1
        if span <= 0.0:
            continue
        for j in range(k):
            change = abs(curve[high, j] - curve[low, j])
            if change > 0.0 and jerk[j] < math.inf:
                limit[i] = min(limit[i], (jerk[j] * span / change) ** (1.0 / 3.0))
