"""Compiled kernels of the machine stage: poses of two rotary axes, branch choice, subdivision.

Every function sees arrays and floats only. The machine comes as two arrays:

``chain`` (m, 8), one row per rotary axis, from the machine frame outwards
    direction (3), a point the axis passes through (3, mm), sense (+1 or -1), carries the work (1) or the cutter (0).
``base`` (4,)
    part origin in the machine frame (3, mm) and the length L from pivot to tip (mm).

With m <= 2 and words in degrees, the cutter axis in part coordinates is u = Rot(first) Rot(second) z, "first" being the
rotary axis next to the part. Derivations: docs/theory-machine.md.

One long file, and two long functions, because compiled code is cached by the text of its own file only: a helper in another
file could change without its callers noticing.
"""

from __future__ import annotations

import math

import numba
import numpy as np

_DEG = math.pi / 180.0


@numba.njit(cache=True, nogil=True)
def _spin(
    k0: float, k1: float, k2: float, angle: float, x: float, y: float, z: float
) -> tuple[float, float, float]:
    """Turn (x, y, z) right-handed about the unit vector k by an angle in radians (Rodrigues' rotation formula)."""
    c = math.cos(angle)
    s = math.sin(angle)
    d = (1.0 - c) * (k0 * x + k1 * y + k2 * z)
    return (
        x * c + (k1 * z - k2 * y) * s + k0 * d,
        y * c + (k2 * x - k0 * z) * s + k1 * d,
        z * c + (k0 * y - k1 * x) * s + k2 * d,
    )


@numba.njit(cache=True, nogil=True)
def _spindle(chain: np.ndarray, rot: np.ndarray) -> tuple[float, float, float]:
    """Spindle direction in the machine frame at rotary words ``rot`` (degrees)."""
    a0, a1, a2 = 0.0, 0.0, 1.0
    for j in range(chain.shape[0] - 1, -1, -1):
        if chain[j, 7] == 0.0:
            angle = chain[j, 6] * rot[j] * _DEG
            a0, a1, a2 = _spin(chain[j, 0], chain[j, 1], chain[j, 2], angle, a0, a1, a2)
    return a0, a1, a2


@numba.njit(cache=True, nogil=True)
def _axis_at(chain: np.ndarray, rot: np.ndarray) -> tuple[float, float, float]:
    """Cutter axis in part coordinates at rotary words ``rot`` (degrees)."""
    a0, a1, a2 = _spindle(chain, rot)
    for j in range(chain.shape[0]):
        if chain[j, 7] == 1.0:
            angle = -chain[j, 6] * rot[j] * _DEG
            a0, a1, a2 = _spin(chain[j, 0], chain[j, 1], chain[j, 2], angle, a0, a1, a2)
    return a0, a1, a2


@numba.njit(cache=True, nogil=True)
def _to_part(
    chain: np.ndarray, base: np.ndarray, rot: np.ndarray, height: float, x: float, y: float, z: float
) -> tuple[float, float, float, float, float, float]:
    """Part coordinates of the point ``height`` above the tip, and the cutter axis, at the words (x, y, z, rot)."""
    a0, a1, a2 = _spindle(chain, rot)
    arm = base[3] - height
    p0 = x + base[0] - arm * a0
    p1 = y + base[1] - arm * a1
    p2 = z + base[2] + base[3] - arm * a2
    for j in range(chain.shape[0]):
        if chain[j, 7] == 1.0:
            k0, k1, k2 = chain[j, 0], chain[j, 1], chain[j, 2]
            t0, t1, t2 = chain[j, 3], chain[j, 4], chain[j, 5]
            angle = -chain[j, 6] * rot[j] * _DEG
            p0, p1, p2 = _spin(k0, k1, k2, angle, p0 - t0, p1 - t1, p2 - t2)
            p0, p1, p2 = p0 + t0, p1 + t1, p2 + t2
            a0, a1, a2 = _spin(k0, k1, k2, angle, a0, a1, a2)
    return p0 - base[0], p1 - base[1], p2 - base[2], a0, a1, a2


@numba.njit(cache=True, nogil=True)
def _to_words(
    chain: np.ndarray, base: np.ndarray, rot: np.ndarray, height: float, p0: float, p1: float, p2: float
) -> tuple[float, float, float]:
    """Words X Y Z that bring the point ``height`` above the tip to the part point p, at rotary words ``rot``."""
    p0, p1, p2 = p0 + base[0], p1 + base[1], p2 + base[2]
    for j in range(chain.shape[0] - 1, -1, -1):
        if chain[j, 7] == 1.0:
            t0, t1, t2 = chain[j, 3], chain[j, 4], chain[j, 5]
            angle = chain[j, 6] * rot[j] * _DEG
            p0, p1, p2 = _spin(chain[j, 0], chain[j, 1], chain[j, 2], angle, p0 - t0, p1 - t1, p2 - t2)
            p0, p1, p2 = p0 + t0, p1 + t1, p2 + t2
    a0, a1, a2 = _spindle(chain, rot)
    arm = base[3] - height
    return p0 - base[0] + arm * a0, p1 - base[1] + arm * a1, p2 - base[2] - base[3] + arm * a2


@numba.njit(cache=True, nogil=True)
def _fold(word: float) -> float:
    """Fold a word in degrees into (-180, 180]."""
    word = word - 360.0 * math.floor((word + 180.0) / 360.0)
    return 180.0 if word == -180.0 else word


@numba.njit(cache=True, nogil=True)
def _about(
    k0: float, k1: float, k2: float, p0: float, p1: float, p2: float, q0: float, q1: float, q2: float
) -> tuple[float, float]:
    """Angle (radians) about k that turns p as near as possible to q, and the size of what decides it (0: any angle)."""
    kp = k0 * p0 + k1 * p1 + k2 * p2
    kq = k0 * q0 + k1 * q1 + k2 * q2
    up = k0 * (p1 * q2 - p2 * q1) + k1 * (p2 * q0 - p0 * q2) + k2 * (p0 * q1 - p1 * q0)
    along = p0 * q0 + p1 * q1 + p2 * q2 - kp * kq
    return math.atan2(up, along), math.hypot(up, along)


@numba.njit(cache=True, nogil=True)
def _solve(
    chain: np.ndarray, pole_rad: float, u0: float, u1: float, u2: float, rot: np.ndarray, free: np.ndarray
) -> int:
    """Rotary words (2, m) that point the cutter along u on both branches; marks words that u leaves ``free``.

    Two rotations (Paden-Kahan subproblem 2): the vector w = Rot(second) z = Rot(first)^-1 u lies on two cones. Returns
    the number of branches.
    """
    m = chain.shape[0]
    for branch in range(2):
        for j in range(m):
            rot[branch, j] = 0.0
            free[branch, j] = 0
    if m == 0:
        return 1
    first = 1 if m == 2 and chain[1, 7] == 1.0 else 0
    k0, k1, k2 = chain[first, 0], chain[first, 1], chain[first, 2]
    sign = -chain[first, 6] if chain[first, 7] == 1.0 else chain[first, 6]
    if m == 1:
        angle, size = _about(k0, k1, k2, 0.0, 0.0, 1.0, u0, u1, u2)
        if size < pole_rad:
            free[0, 0] = 1
        else:
            rot[0, 0] = _fold(sign * angle / _DEG)
        return 1
    second = 1 - first
    l0, l1, l2 = chain[second, 0], chain[second, 1], chain[second, 2]
    turn = -chain[second, 6] if chain[second, 7] == 1.0 else chain[second, 6]
    # x = k x l; c = k.l; m_ = l.z; n = k.u; gram = (k, l, w)^2, written so that it keeps its digits at the pole.
    x0, x1, x2 = k1 * l2 - k2 * l1, k2 * l0 - k0 * l2, k0 * l1 - k1 * l0
    x_sq = x0 * x0 + x1 * x1 + x2 * x2
    c = k0 * l0 + k1 * l1 + k2 * l2
    n = k0 * u0 + k1 * u1 + k2 * u2
    s0, s1, s2 = k1 * u2 - k2 * u1, k2 * u0 - k0 * u2, k0 * u1 - k1 * u0
    s_sq = s0 * s0 + s1 * s1 + s2 * s2
    if n >= 0.0:
        gram = s_sq * (1.0 - 2.0 * c * l2 / (1.0 + n)) - (l0 * k0 + l1 * k1 + l2 * (k2 - 1.0)) ** 2
    else:
        gram = s_sq * (1.0 + 2.0 * c * l2 / (1.0 - n)) - (l0 * k0 + l1 * k1 + l2 * (k2 + 1.0)) ** 2
    gamma = math.sqrt(max(gram, 0.0)) / x_sq
    along_k, along_l = (n - c * l2) / x_sq, (l2 - c * n) / x_sq
    for branch in range(2):
        g = gamma if branch == 0 else -gamma
        w0 = along_k * k0 + along_l * l0 + g * x0
        w1 = along_k * k1 + along_l * l1 + g * x1
        w2 = along_k * k2 + along_l * l2 + g * x2
        if math.sqrt(s_sq) < pole_rad:
            free[branch, first] = 1
            w0, w1, w2 = u0, u1, u2
        else:
            angle, _ = _about(k0, k1, k2, w0, w1, w2, u0, u1, u2)
            rot[branch, first] = _fold(sign * angle / _DEG)
        angle, size = _about(l0, l1, l2, 0.0, 0.0, 1.0, w0, w1, w2)
        if size < pole_rad * pole_rad:
            free[branch, second] = 1
        else:
            rot[branch, second] = _fold(turn * angle / _DEG)
    return 2


@numba.njit(cache=True, nogil=True)
def forward(chain: np.ndarray, base: np.ndarray, words: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Tip (n, 3) and cutter axis (n, 3) in part coordinates of program words (n, 3 + m)."""
    count = words.shape[0]
    tip = np.zeros((count, 3))
    axis = np.zeros((count, 3))
    for i in range(count):
        found = _to_part(chain, base, words[i, 3:], 0.0, words[i, 0], words[i, 1], words[i, 2])
        tip[i, 0], tip[i, 1], tip[i, 2] = found[0], found[1], found[2]
        axis[i, 0], axis[i, 1], axis[i, 2] = found[3], found[4], found[5]
    return tip, axis


@numba.njit(cache=True, nogil=True)
def spindle(chain: np.ndarray, rot: np.ndarray) -> np.ndarray:
    """Spindle direction (n, 3) in the machine frame at rotary words (n, m)."""
    axis = np.zeros((rot.shape[0], 3))
    for i in range(rot.shape[0]):
        axis[i, 0], axis[i, 1], axis[i, 2] = _spindle(chain, rot[i])
    return axis


@numba.njit(cache=True, nogil=True)
def solve_rotary(
    chain: np.ndarray, pole_rad: float, axis: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Rotary words (n, branches, m), words left free (same shape, 0 or 1), and the angle by which each misses (n, branches)."""
    count, m = axis.shape[0], chain.shape[0]
    branches = 2 if m == 2 else 1
    found = np.zeros((count, branches, m))
    free = np.zeros((count, branches, m), dtype=np.uint8)
    miss_rad = np.zeros((count, branches))
    rot = np.zeros((2, m))
    loose = np.zeros((2, m), dtype=np.uint8)
    for i in range(count):
        _solve(chain, pole_rad, axis[i, 0], axis[i, 1], axis[i, 2], rot, loose)
        for b in range(branches):
            for j in range(m):
                found[i, b, j] = rot[b, j]
                free[i, b, j] = loose[b, j]
            a0, a1, a2 = _axis_at(chain, rot[b])
            chord = math.sqrt((a0 - axis[i, 0]) ** 2 + (a1 - axis[i, 1]) ** 2 + (a2 - axis[i, 2]) ** 2)
            miss_rad[i, b] = 2.0 * math.asin(min(1.0, 0.5 * chord))
    return found, free, miss_rad


@numba.njit(cache=True, nogil=True)
def place(
    chain: np.ndarray, base: np.ndarray, rot: np.ndarray, height: float, point: np.ndarray
) -> np.ndarray:
    """Words (n, 3 + m) that bring the point ``height`` above the tip to ``point`` (n, 3) at rotary words (n, m)."""
    count, m = rot.shape
    words = np.zeros((count, 3 + m))
    for i in range(count):
        x, y, z = _to_words(chain, base, rot[i], height, point[i, 0], point[i, 1], point[i, 2])
        words[i, 0], words[i, 1], words[i, 2] = x, y, z
        for j in range(m):
            words[i, 3 + j] = rot[i, j]
    return words


@numba.njit(cache=True, nogil=True)
def _into(word: float, low: float, high: float) -> float:
    """Move a word by whole turns into [low, high] if possible, else to the nearer end (measured round the circle)."""
    if low == -math.inf:
        return word
    turned = word + 360.0 * math.ceil((low - word) / 360.0 - 1e-12)
    if turned <= high:
        return turned
    # turned is past high; the gap from high up to low + 360 holds it
    return high if turned - high <= low + 360.0 - turned else low


@numba.njit(cache=True, nogil=True)
def _aim(
    chain: np.ndarray,
    low: np.ndarray,
    high: np.ndarray,
    which: int,
    rot: np.ndarray,
    u0: float,
    u1: float,
    u2: float,
) -> None:
    """Set word ``which`` of ``rot`` so that, the others standing, the axis comes nearest to u inside the limits."""
    first = 1 if chain.shape[0] == 2 and chain[1, 7] == 1.0 else 0
    k0, k1, k2 = chain[which, 0], chain[which, 1], chain[which, 2]
    sign = -chain[which, 6] if chain[which, 7] == 1.0 else chain[which, 6]
    p0, p1, p2 = 0.0, 0.0, 1.0
    q0, q1, q2 = u0, u1, u2
    if chain.shape[0] == 2:
        other = 1 - which
        turn = -chain[other, 6] if chain[other, 7] == 1.0 else chain[other, 6]
        angle = turn * rot[other] * _DEG
        if which == first:
            p0, p1, p2 = _spin(chain[other, 0], chain[other, 1], chain[other, 2], angle, p0, p1, p2)
        else:
            q0, q1, q2 = _spin(chain[other, 0], chain[other, 1], chain[other, 2], -angle, q0, q1, q2)
    angle, _ = _about(k0, k1, k2, p0, p1, p2, q0, q1, q2)
    rot[which] = _into(sign * angle / _DEG, low[which], high[which])


@numba.njit(cache=True, nogil=True)
def nearest_axis(
    chain: np.ndarray, low: np.ndarray, high: np.ndarray, pole_rad: float, wished: np.ndarray
) -> np.ndarray:
    """Reachable cutter axis (n, 3) nearest to the wished one (n, 3), rotary limits (m,) in degrees respected.

    Every stationary point of the angle between axis and wish is tried: both exact branches, the second word where its cone
    ends, and each word at each of its limits; with the other word then at its best.
    """
    count, m = wished.shape[0], chain.shape[0]
    best = np.zeros((count, 3))
    rot = np.zeros((2, m))
    free = np.zeros((2, m), dtype=np.uint8)
    trial = np.zeros(m)
    for i in range(count):
        u0, u1, u2 = wished[i, 0], wished[i, 1], wished[i, 2]
        top = -2.0
        branches = _solve(chain, pole_rad, u0, u1, u2, rot, free)
        tries = 1 if m == 0 else branches + (4 if m == 2 else 0)
        for t in range(tries):
            if t < branches:
                # An exact branch pulled into the limits; the word next to the part is then aimed once more.
                for j in range(m):
                    trial[j] = _into(rot[t, j], low[j], high[j])
            if m == 1:
                _aim(chain, low, high, 0, trial, u0, u1, u2)
            elif m == 2 and t < branches:
                _aim(chain, low, high, 1 if chain[1, 7] == 1.0 else 0, trial, u0, u1, u2)
            elif m == 2:
                j = (t - branches) // 2
                if low[j] == -math.inf:
                    continue
                trial[j] = low[j] if (t - branches) % 2 == 0 else high[j]
                _aim(chain, low, high, 1 - j, trial, u0, u1, u2)
            a0, a1, a2 = _axis_at(chain, trial)
            dot = a0 * u0 + a1 * u1 + a2 * u2
            if dot > top:
                top = dot
                best[i, 0], best[i, 1], best[i, 2] = a0, a1, a2
    return best


# ------------------------------------------------------------------------------------------- branches


@numba.njit(cache=True, nogil=True)
def _slerp(
    a0: float, a1: float, a2: float, b0: float, b1: float, b2: float, angle: float, t: float
) -> tuple[float, float, float]:
    """Unit vector on the great circle from a to b, ``angle`` radians apart, at share t of the way."""
    if angle < 1e-9:
        return a0 + t * (b0 - a0), a1 + t * (b1 - a1), a2 + t * (b2 - a2)
    s = 1.0 / math.sin(angle)
    p, q = math.sin((1.0 - t) * angle) * s, math.sin(t * angle) * s
    return p * a0 + q * b0, p * a1 + q * b1, p * a2 + q * b2


@numba.njit(cache=True, nogil=True)
def _angle(a0: float, a1: float, a2: float, b0: float, b1: float, b2: float) -> float:
    """Angle between two unit vectors, radians, exact for small ones too."""
    chord = math.sqrt((a0 - b0) ** 2 + (a1 - b1) ** 2 + (a2 - b2) ** 2)
    return 2.0 * math.asin(min(1.0, 0.5 * chord))


@numba.njit(cache=True, nogil=True)
def _stray(
    chain: np.ndarray,
    axis_a: np.ndarray,
    axis_b: np.ndarray,
    rot: np.ndarray,
    turn: np.ndarray,
    work: np.ndarray,
) -> float:
    """Largest angle (radians) of three between the axis on an even joint move and the even turn from axis a to axis b."""
    theta = _angle(axis_a[0], axis_a[1], axis_a[2], axis_b[0], axis_b[1], axis_b[2])
    worst = 0.0
    for quarter in (2, 1, 3):
        share = 0.25 * quarter
        for j in range(rot.size):
            work[j] = rot[j] + share * turn[j]
        a0, a1, a2 = _axis_at(chain, work)
        w0, w1, w2 = _slerp(axis_a[0], axis_a[1], axis_a[2], axis_b[0], axis_b[1], axis_b[2], theta, share)
        worst = max(worst, _angle(a0, a1, a2, w0, w1, w2))
    return worst


@numba.njit(cache=True, nogil=True)
def _turn_into(
    found: np.ndarray,
    low: np.ndarray,
    turns: np.ndarray,
    old: np.ndarray,
    hop: bool,
    slack_deg: float,
    turn: np.ndarray,
) -> bool:
    """Set ``turn`` (m,) from the words ``old`` to a state's words; True if an axis would have to jump in the cut.

    An axis without limits takes the short way. With the cutter off the part (``hop``) any turn will do.
    """
    blocked = False
    for j in range(turn.size):
        if low[j] == -math.inf:
            turn[j] = _fold(found[j] - old[j])
        else:
            turn[j] = found[j] + 360.0 * turns[j] - old[j]
            if not hop and abs(turn[j]) > 180.0 + slack_deg:
                blocked = True
    return blocked


@numba.njit(cache=True, nogil=True)
def _turn_cost(
    old: np.ndarray, turn: np.ndarray, low: np.ndarray, high: np.ndarray, rate: np.ndarray, slack_deg: float
) -> float:
    """Cost of a turn: minutes at the fastest feed; words past a limit a thousandfold, and ten minutes each."""
    total = 0.0
    for j in range(turn.size):
        total += abs(turn[j]) / rate[j]
        if low[j] != -math.inf:
            now = old[j] + turn[j]
            past = max(low[j] - now, now - high[j]) - slack_deg
            if past > 0.0:
                total += 10.0 + 1000.0 * past / rate[j]
    return total


@numba.njit(cache=True, nogil=True)
def choose_branches(
    chain: np.ndarray,
    axis: np.ndarray,
    found: np.ndarray,
    outside: np.ndarray,
    low: np.ndarray,
    high: np.ndarray,
    rate: np.ndarray,
    start: np.ndarray,
    wrap_low: np.ndarray,
    wraps: np.ndarray,
    cross_rad: np.ndarray,
    slack_deg: float,
    hop: np.ndarray,
    pause: np.ndarray,
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Branch and whole turns for each row so that the rotary axes travel least and stay inside their limits.

    Shortest path by dynamic programming (Bellman) over all rows of a program. A state is a branch together with whole
    turns for each axis that has limits; an axis without limits always takes the short way. From a row to the next an axis
    turns by half a turn at most, and the branch changes only where the even joint move keeps the axis within ``cross_rad``
    (n,) of its wish: at the pole, or where both branches meet. Where ``hop`` (n,) is 1 the cutter is off the part on its
    way to the row, and any state may follow any other. On a row with a finite ``pause`` (n,) it may be drawn off at that
    cost and put back in another state. Words past the limits cost a thousandfold, so they are a last resort; ``outside``
    (n, branches) is what each choice costs for the linear axes' limits.

    Returns
    -------
    arrive, leave : (n, m) words, degrees: with which the row is reached and left; they differ where the cutter is drawn off.
    split : (n,) uint8, 1 there.
    forced : (n,) uint8, 1 where no allowed change led to the row.
    """
    count, branches, m = found.shape
    lanes = 1
    for j in range(m):
        lanes *= wraps[j]
    states = branches * lanes
    wall = 1e9
    cost, cost_new = np.zeros(states), np.zeros(states)
    word, word_new = np.zeros((states, m)), np.zeros((states, m))
    cost_split, word_split = np.zeros(states), np.zeros((states, m))
    back = np.zeros((count, states), dtype=np.int32)
    apart = np.zeros((count, states), dtype=np.int32)
    turn, work = np.zeros(m), np.zeros(m)
    turns = np.zeros((lanes, m))
    for lane in range(lanes):
        rest = lane
        for j in range(m):
            turns[lane, j] = wrap_low[j] + rest % wraps[j]
            rest //= wraps[j]
    # No step in the cut is longer than half a turn, so there whole turns change by one at most.
    beside = np.zeros(lanes, dtype=np.int64)
    neighbour = np.zeros((lanes, 9), dtype=np.int64)
    for lane in range(lanes):
        for other in range(lanes):
            far = 0.0
            for j in range(m):
                far = max(far, abs(turns[lane, j] - turns[other, j]))
            if far <= 1.0:
                neighbour[lane, beside[lane]] = other
                beside[lane] += 1
    for i in range(count):
        off = i == 0 or hop[i] == 1
        for s in range(states):
            branch, lane = s // lanes, s % lanes
            best, best_from = math.inf, 0
            steps = 1 if i == 0 else states if off else branches * beside[lane]
            for step in range(steps):
                before = step
                if not off:
                    before = (step // beside[lane]) * lanes + neighbour[lane, step % beside[lane]]
                total = (cost[before] if i > 0 else 0.0) + outside[i, branch]
                if total >= best:
                    continue
                old = word[before] if i > 0 else start
                blocked = _turn_into(found[i, branch], low, turns[lane], old, off, slack_deg, turn)
                total += _turn_cost(old, turn, low, high, rate, slack_deg)
                if total >= best:
                    continue
                if not off and not blocked and before // lanes != branch:
                    blocked = _stray(chain, axis[i - 1], axis[i], old, turn, work) > cross_rad[i]
                if blocked:
                    total += wall
                if total < best:
                    best, best_from = total, before
                    for j in range(m):
                        word_new[s, j] = old[j] + turn[j]
            cost_new[s] = best
            back[i, s] = best_from
            apart[i, s] = s
        if pause[i] < math.inf:
            for s in range(states):
                branch, lane = s // lanes, s % lanes
                cost_split[s] = cost_new[s]
                for j in range(m):
                    word_split[s, j] = word_new[s, j]
                for other in range(states):
                    total = cost_new[other] + pause[i] + outside[i, branch]
                    if total >= cost_split[s]:
                        continue
                    _turn_into(found[i, branch], low, turns[lane], word_new[other], True, slack_deg, turn)
                    total += _turn_cost(word_new[other], turn, low, high, rate, slack_deg)
                    if total < cost_split[s]:
                        cost_split[s] = total
                        apart[i, s] = other
                        for j in range(m):
                            word_split[s, j] = word_new[other, j] + turn[j]
            cost_new, cost_split = cost_split, cost_new
            word_new, word_split = word_split, word_new
        cost, cost_new = cost_new, cost
        word, word_new = word_new, word
    picked = np.zeros((count, 2), dtype=np.int32)
    state = np.argmin(cost)
    for i in range(count - 1, -1, -1):
        picked[i, 1] = state
        picked[i, 0] = apart[i, state]
        state = back[i, picked[i, 0]]
    return _unwrap(chain, axis, found, low, start, turns, picked, cross_rad, slack_deg, hop)


@numba.njit(cache=True, nogil=True)
def _unwrap(
    chain: np.ndarray,
    axis: np.ndarray,
    found: np.ndarray,
    low: np.ndarray,
    start: np.ndarray,
    turns: np.ndarray,
    picked: np.ndarray,
    cross_rad: np.ndarray,
    slack_deg: float,
    hop: np.ndarray,
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Words along a chain of states, where the cutter is drawn off, and where a change was not an allowed one."""
    count, _, m = found.shape
    lanes = turns.shape[0]
    arrive, leave = np.zeros((count, m)), np.zeros((count, m))
    split = np.zeros(count, dtype=np.uint8)
    forced = np.zeros(count, dtype=np.uint8)
    turn, work = np.zeros(m), np.zeros(m)
    for i in range(count):
        branch, lane = picked[i, 0] // lanes, picked[i, 0] % lanes
        off = i == 0 or hop[i] == 1
        old = leave[i - 1] if i > 0 else start
        blocked = _turn_into(found[i, branch], low, turns[lane], old, off, slack_deg, turn)
        if not off and picked[i - 1, 1] // lanes != branch:
            blocked = blocked or _stray(chain, axis[i - 1], axis[i], old, turn, work) > cross_rad[i]
        forced[i] = 1 if blocked and not off else 0
        for j in range(m):
            arrive[i, j] = old[j] + turn[j]
            leave[i, j] = arrive[i, j]
        if picked[i, 1] != picked[i, 0]:
            split[i] = 1
            branch, lane = picked[i, 1] // lanes, picked[i, 1] % lanes
            _turn_into(found[i, branch], low, turns[lane], arrive[i], True, slack_deg, turn)
            for j in range(m):
                leave[i, j] = arrive[i, j] + turn[j]
    return arrive, leave, split, forced


# ---------------------------------------------------------------------------------------- subdivision


@numba.njit(cache=True, nogil=True)
def _radii(
    chain: np.ndarray, base: np.ndarray, rot: np.ndarray, height: float, x: float, y: float, z: float
) -> tuple[float, float]:
    """Distances of the point ``height`` above the tip from the work-carrying axes: from the outermost, and from the other."""
    a0, a1, a2 = _spindle(chain, rot)
    arm = base[3] - height
    p0, p1, p2 = x + base[0] - arm * a0, y + base[1] - arm * a1, z + base[2] + base[3] - arm * a2
    outer, inner = 0.0, 0.0
    for j in range(chain.shape[0]):
        if chain[j, 7] == 1.0:
            k0, k1, k2 = chain[j, 0], chain[j, 1], chain[j, 2]
            d0, d1, d2 = p0 - chain[j, 3], p1 - chain[j, 4], p2 - chain[j, 5]
            along = k0 * d0 + k1 * d1 + k2 * d2
            inner = math.sqrt(max(0.0, d0 * d0 + d1 * d1 + d2 * d2 - along * along))
            if outer == 0.0:
                outer = inner
            angle = -chain[j, 6] * rot[j] * _DEG
            p0, p1, p2 = _spin(k0, k1, k2, angle, d0, d1, d2)
            p0, p1, p2 = p0 + chain[j, 3], p1 + chain[j, 4], p2 + chain[j, 5]
    return outer, inner


@numba.njit(cache=True, nogil=True)
def deviation(
    chain: np.ndarray,
    base: np.ndarray,
    height: float,
    p: np.ndarray,
    q: np.ndarray,
    axis_p: np.ndarray,
    axis_q: np.ndarray,
    theta: float,
    t_a: float,
    rot_a: np.ndarray,
    xyz_a: np.ndarray,
    t_b: float,
    rot_b: np.ndarray,
    xyz_b: np.ndarray,
    work: np.ndarray,
    normal: np.ndarray,
    side: float,
    sag: float,
) -> tuple[float, float, float]:
    """How far a straight joint move from a to b strays from the intended path from row p to row q.

    The intended path is the line p q, bowed along ``normal`` by ``sag`` in its middle.

    Sampled at the quarters of the block, plus what the samples can miss: between samples a quarter apart a curve with
    second derivative M leaves its chord by no more than M/128 (docs/theory-machine.md, "Straight moves of the joints").

    Returns
    -------
    off_mm : float
        Bound on the distance of the point ``height`` above the tip from the path, what lies across the unit
        vector ``normal`` counted ``side`` times: across the surface normal a pass may shift further than along it.
    turned_rad : float
        Bound on the angle between the axis and the even turn from axis_p to axis_q.
    sampled_rad : float
        The same angle, as sampled.
    """
    m = chain.shape[0]
    table, head = 0.0, 0.0
    for j in range(m):
        if chain[j, 7] == 1.0:
            table += abs(rot_b[j] - rot_a[j]) * _DEG
        else:
            head += abs(rot_b[j] - rot_a[j]) * _DEG
    if table + head == 0.0 and theta == 0.0:
        return 0.0, 0.0, 0.0
    d0, d1, d2 = q[0] - p[0], q[1] - p[1], q[2] - p[2]
    square = d0 * d0 + d1 * d1 + d2 * d2
    off, sampled = 0.0, 0.0
    for quarter in (1, 2, 3):
        share = 0.25 * quarter
        for j in range(m):
            work[j] = rot_a[j] + share * (rot_b[j] - rot_a[j])
        x = xyz_a[0] + share * (xyz_b[0] - xyz_a[0])
        y = xyz_a[1] + share * (xyz_b[1] - xyz_a[1])
        z = xyz_a[2] + share * (xyz_b[2] - xyz_a[2])
        g0, g1, g2, a0, a1, a2 = _to_part(chain, base, work, height, x, y, z)
        g0, g1, g2 = g0 - p[0], g1 - p[1], g2 - p[2]
        along = 0.0
        if square > 0.0:
            along = min(1.0, max(0.0, (g0 * d0 + g1 * d1 + g2 * d2) / square))
        g0, g1, g2 = g0 - along * d0, g1 - along * d1, g2 - along * d2
        bow = 4.0 * sag * along * (1.0 - along)
        g0, g1, g2 = g0 - bow * normal[0], g1 - bow * normal[1], g2 - bow * normal[2]
        deep = normal[0] * g0 + normal[1] * g1 + normal[2] * g2
        wide = max(0.0, g0 * g0 + g1 * g1 + g2 * g2 - deep * deep)
        off = max(off, math.sqrt(deep * deep + side * side * wide))
        t = t_a + share * (t_b - t_a)
        w0, w1, w2 = _slerp(axis_p[0], axis_p[1], axis_p[2], axis_q[0], axis_q[1], axis_q[2], theta, t)
        sampled = max(sampled, _angle(a0, a1, a2, w0, w1, w2))
    speed = math.sqrt((xyz_b[0] - xyz_a[0]) ** 2 + (xyz_b[1] - xyz_a[1]) ** 2 + (xyz_b[2] - xyz_a[2]) ** 2)
    arm = abs(base[3] - height)
    speed += arm * head
    outer, inner = _radii(chain, base, rot_a, height, xyz_a[0], xyz_a[1], xyz_a[2])
    outer += speed
    inner += speed + table * outer
    bend = arm * head * head + 2.0 * table * speed + table * table * max(outer, inner)
    bend += 8.0 * abs(sag) * (t_b - t_a) * (t_b - t_a)
    turn = table + head
    arc = theta * (t_b - t_a)
    return off + bend / 128.0, sampled + (turn * turn + arc * arc) / 128.0, sampled


@numba.njit(cache=True, nogil=True)
def _middle(
    chain: np.ndarray,
    pole_rad: float,
    rate: np.ndarray,
    u0: float,
    u1: float,
    u2: float,
    rot_a: np.ndarray,
    rot_b: np.ndarray,
    solved: np.ndarray,
    loose: np.ndarray,
    out: np.ndarray,
) -> None:
    """Exact rotary words for the axis u, on the branch and turn nearest to halfway between a and b."""
    m = chain.shape[0]
    branches = _solve(chain, pole_rad, u0, u1, u2, solved, loose)
    best, pick = math.inf, 0
    for b in range(branches):
        total = 0.0
        for j in range(m):
            half = 0.5 * (rot_a[j] + rot_b[j])
            solved[b, j] = half if loose[b, j] == 1 else half + _fold(solved[b, j] - half)
            total += abs(solved[b, j] - half) / rate[j]
        if total < best:
            best, pick = total, b
    for j in range(m):
        out[j] = solved[pick, j]


@numba.njit(cache=True, nogil=True)
def _twice(table: np.ndarray) -> np.ndarray:
    """A table with the same rows and as many more of zeros."""
    larger = np.zeros((2 * table.shape[0], table.shape[1]))
    for i in range(table.shape[0]):
        for j in range(table.shape[1]):
            larger[i, j] = table[i, j]
    return larger


@numba.njit(cache=True, nogil=True)
def subdivide(
    chain: np.ndarray,
    base: np.ndarray,
    height: float,
    lever: float,
    point: np.ndarray,
    axis: np.ndarray,
    rot: np.ndarray,
    rate: np.ndarray,
    angle_digits: float,
    normal: np.ndarray,
    side: float,
    bowed: bool,
    budgets: np.ndarray,
    axis_tol: float,
    axis_slack: float,
    pole_rad: float,
    cap: int,
) -> tuple[np.ndarray, np.ndarray, np.ndarray, int, float, float]:
    """Split the moves between rows until straight joint moves keep to the intended path.

    Parameters
    ----------
    height : float
        Height above the tip (mm) of the point that goes straight between rows.
    lever : float
        Distance (mm) from the cutter axis at which a turned axis moves the cut; its share counts against ``budgets``.
    point, axis : (n, 3)
        That point, and the cutter axis, at each row.
    rot : (n, m)
        Rotary words at each row, rounded.
    angle_digits : float
        10 to the number of digits of a rotary word.
    normal : (n, 3)
        Surface normal at each row.
    side : float
        Weight of what a block strays across the normal.
    bowed : bool
        The point keeps a fixed distance from the surface (a ball's centre), so that its path is normal to ``normal`` and bows
        between rows as the normals turn; else it is to go straight.
    budgets : (n,)
        Allowed distance (mm) on the move to each row.
    axis_tol, axis_slack : float
        Allowed angle (radians), and what of the angle is rounding and not counted by ``lever``.
    cap : int
        Most blocks that one move may be split into.

    Returns
    -------
    row : (b,) int64
        The row each block leads to (1 to n - 1).
    share : (b,)
        How far along the move to that row the block ends, (0, 1].
    words : (b, 3 + m)
        X Y Z not rounded, rotary words rounded.
    failed : int
        First row that the cap stopped; -1 if none.
    worst_mm, worst_rad : float
        Largest bounds met: distance of the point, angle of the axis.
    """
    count, m = rot.shape
    row = np.zeros(count + 64, dtype=np.int64)
    share = np.zeros(count + 64)
    words = np.zeros((count + 64, 3 + m))
    made = 0
    deep = 48
    t_stack = np.zeros(deep + 1)
    rot_stack = np.zeros((deep + 1, m))
    xyz_stack = np.zeros((deep + 1, 3))
    rot_a, xyz_a, work, upright = np.zeros(m), np.zeros(3), np.zeros(m), np.zeros(3)
    solved, loose = np.zeros((2, m)), np.zeros((2, m), dtype=np.uint8)
    worst_mm, worst_rad = 0.0, 0.0
    for i in range(1, count):
        p, q, e, f = point[i - 1], point[i], axis[i - 1], axis[i]
        budget = budgets[i]
        up0, up1, up2 = (
            normal[i - 1, 0] + normal[i, 0],
            normal[i - 1, 1] + normal[i, 1],
            normal[i - 1, 2] + normal[i, 2],
        )
        size = math.sqrt(up0 * up0 + up1 * up1 + up2 * up2)
        upright[0], upright[1], upright[2] = up0 / size, up1 / size, up2 / size
        sag = 0.0
        if bowed:
            # An arc of length L whose normals turn by w bows by L w / 8; w = (n_q - n_p) . d / |d|.
            for j in range(3):
                sag += 0.125 * (normal[i, j] - normal[i - 1, j]) * (q[j] - p[j])
        theta = _angle(e[0], e[1], e[2], f[0], f[1], f[2])
        t_a = 0.0
        for j in range(m):
            rot_a[j] = rot[i - 1, j]
            rot_stack[0, j] = rot[i, j]
        xyz_a[0], xyz_a[1], xyz_a[2] = _to_words(chain, base, rot_a, height, p[0], p[1], p[2])
        top = 0
        t_stack[0] = 1.0
        x, y, z = _to_words(chain, base, rot[i], height, q[0], q[1], q[2])
        xyz_stack[0, 0], xyz_stack[0, 1], xyz_stack[0, 2] = x, y, z
        first = made
        while top >= 0:
            t_b = t_stack[top]
            rot_b, xyz_b = rot_stack[top], xyz_stack[top]
            off, turned, sampled = deviation(
                chain,
                base,
                height,
                p,
                q,
                e,
                f,
                theta,
                t_a,
                rot_a,
                xyz_a,
                t_b,
                rot_b,
                xyz_b,
                work,
                upright,
                side,
                sag,
            )
            if turned <= axis_tol and off + lever * max(0.0, turned - axis_slack) <= budget:
                worst_mm, worst_rad = max(worst_mm, off), max(worst_rad, turned)
                if made == row.size:
                    row, share, words = np.append(row, row), np.append(share, share), _twice(words)
                row[made], share[made] = i, t_b
                for j in range(m):
                    words[made, 3 + j] = rot_a[j] = rot_b[j]
                for j in range(3):
                    words[made, j] = xyz_a[j] = xyz_b[j]
                made += 1
                t_a = t_b
                top -= 1
                continue
            if top == deep or made - first >= cap:
                return row[:made], share[:made], words[:made], i, off, turned
            t = 0.5 * (t_a + t_b)
            if sampled <= 0.9 * axis_tol and lever * max(0.0, sampled - axis_slack) <= 0.5 * budget:
                # The axis may go evenly; only the point has to be put back on its line.
                for j in range(m):
                    work[j] = 0.5 * (rot_a[j] + rot_b[j])
            else:
                u0, u1, u2 = _slerp(e[0], e[1], e[2], f[0], f[1], f[2], theta, t)
                _middle(chain, pole_rad, rate, u0, u1, u2, rot_a, rot_b, solved, loose, work)
            top += 1
            t_stack[top] = t
            for j in range(m):
                rot_stack[top, j] = math.floor(work[j] * angle_digits + 0.5) / angle_digits
            bow = 4.0 * sag * t * (1.0 - t)
            x = p[0] + t * (q[0] - p[0]) + bow * upright[0]
            y = p[1] + t * (q[1] - p[1]) + bow * upright[1]
            z = p[2] + t * (q[2] - p[2]) + bow * upright[2]
            x, y, z = _to_words(chain, base, rot_stack[top], height, x, y, z)
            xyz_stack[top, 0], xyz_stack[top, 1], xyz_stack[top, 2] = x, y, z
    return row[:made], share[:made], words[:made], -1, worst_mm, worst_rad
