"""Compiled kernels of the machine stage: poses of two rotary axes, branch choice, subdivision.

Every function sees arrays and floats only. The machine comes as two arrays:

``chain`` (m, 8), one row per rotary axis, from the machine frame outwards
    direction (3), a point the axis passes through (3, mm), sense (+1 or -1), carries the work (1) or the cutter (0).
``base`` (4,)
    part origin in the machine frame (3, mm) and the length L from pivot to tip (mm).

With m <= 2 and words in degrees, the cutter axis in part coordinates is u = Rot(first) Rot(second) z, "first" being the
rotary axis next to the part. Derivations: docs/theory-machine.md.
"""

from __future__ import annotations

import math

import numba
import numpy as np

_DEG = math.pi / 180.0


@numba.njit(cache=True, nogil=True)
def _spin(k0, k1, k2, angle, x, y, z):
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
def _spindle(chain, rot):
    """Spindle direction in the machine frame at rotary words ``rot`` (degrees)."""
    a0, a1, a2 = 0.0, 0.0, 1.0
    for j in range(chain.shape[0] - 1, -1, -1):
        if chain[j, 7] == 0.0:
            angle = chain[j, 6] * rot[j] * _DEG
            a0, a1, a2 = _spin(chain[j, 0], chain[j, 1], chain[j, 2], angle, a0, a1, a2)
    return a0, a1, a2


@numba.njit(cache=True, nogil=True)
def _axis_at(chain, rot):
    """Cutter axis in part coordinates at rotary words ``rot`` (degrees)."""
    a0, a1, a2 = _spindle(chain, rot)
    for j in range(chain.shape[0]):
        if chain[j, 7] == 1.0:
            angle = -chain[j, 6] * rot[j] * _DEG
            a0, a1, a2 = _spin(chain[j, 0], chain[j, 1], chain[j, 2], angle, a0, a1, a2)
    return a0, a1, a2


@numba.njit(cache=True, nogil=True)
def _to_part(chain, base, rot, height, x, y, z):
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
def _to_words(chain, base, rot, height, p0, p1, p2):
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
def _fold(word):
    """Fold a word in degrees into (-180, 180]."""
    word = word - 360.0 * math.floor((word + 180.0) / 360.0)
    return 180.0 if word == -180.0 else word


@numba.njit(cache=True, nogil=True)
def _about(k0, k1, k2, p0, p1, p2, q0, q1, q2):
    """Angle (radians) about k that turns p as near as possible to q, and the size of what decides it (0: any angle)."""
    kp = k0 * p0 + k1 * p1 + k2 * p2
    kq = k0 * q0 + k1 * q1 + k2 * q2
    up = k0 * (p1 * q2 - p2 * q1) + k1 * (p2 * q0 - p0 * q2) + k2 * (p0 * q1 - p1 * q0)
    along = p0 * q0 + p1 * q1 + p2 * q2 - kp * kq
    return math.atan2(up, along), math.hypot(up, along)


@numba.njit(cache=True, nogil=True)
def _solve(chain, pole_rad, u0, u1, u2, rot, free):
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
def forward(chain, base, words):
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
def spindle(chain, rot):
    """Spindle direction (n, 3) in the machine frame at rotary words (n, m)."""
    axis = np.zeros((rot.shape[0], 3))
    for i in range(rot.shape[0]):
        axis[i, 0], axis[i, 1], axis[i, 2] = _spindle(chain, rot[i])
    return axis


@numba.njit(cache=True, nogil=True)
def solve_rotary(chain, pole_rad, axis):
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
def place(chain, base, rot, height, point):
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
def _into(word, low, high):
    """Move a word by whole turns into [low, high] if possible, else to the nearer end (measured round the circle)."""
    if low == -math.inf:
        return word
    turned = word + 360.0 * math.ceil((low - word) / 360.0 - 1e-12)
    if turned <= high:
        return turned
    # turned is past high; the gap from high up to low + 360 holds it
    return high if turned - high <= low + 360.0 - turned else low


@numba.njit(cache=True, nogil=True)
def _aim(chain, low, high, which, rot, u0, u1, u2):
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
def nearest_axis(chain, low, high, pole_rad, wished):
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
