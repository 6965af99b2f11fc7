"""Exact swept profile of a bull or flat end mill along a pass. Arrays and floats only.

Plan coordinates u along the feed, v to its left; the surface is z = (A u^2 + 2 B u v + C v^2) / 2 and ``form``
is (A, B, C) [1/mm]. A pass is a table of poses at even steps: reference point (centre of the corner circle) and
unit cutter axis, cubic between rows. The cutting end is a disc of radius ``disc`` about the reference point,
square to the axis, grown by the corner radius, with the flutes above it. What a pass leaves over a surface point is the lowest
height along the upward normal at which the cutter is entered, over all poses; docs/theory-matched.md#profile.
"""

import math

import numba
import numpy as np

_ROUNDS = 40
# An entry is settled when the cutter is this near (mm): far below any height that is looked at.
_SETTLED_MM = 1e-11
_GOLDEN = 0.6180339887498949


@numba.njit(cache=True, nogil=True)
def _ground(form, u, v, out):
    """Fill out (6,) with the surface point over (u, v) and the upward unit normal there."""
    zu, zv = form[0] * u + form[1] * v, form[1] * u + form[2] * v
    w = math.sqrt(1.0 + zu * zu + zv * zv)
    out[0], out[1], out[2] = u, v, 0.5 * (u * zu + v * zv)
    out[3], out[4], out[5] = -zu / w, -zv / w, 1.0 / w


@numba.njit(cache=True, nogil=True)
def _entry(line, pose, disc, corner, below):
    """Return the height h at which a line q + h n, coming from below, enters the cutter; inf if it misses.

    The cutter lies above the plane of its bottom: what meets that plane no lower than ``below`` counts as a miss.

    line (6,) is q and n, pose (6,) reference point and axis. Under the bottom disc the plane decides; beyond it
    the distance to disc and side is convex along the line, and Newton's method from outside never oversteps.
    """
    wx, wy, wz = line[0] - pose[0], line[1] - pose[1], line[2] - pose[2]
    nx, ny, nz = line[3], line[4], line[5]
    z0 = wx * pose[3] + wy * pose[4] + wz * pose[5]
    rise = nx * pose[3] + ny * pose[4] + nz * pose[5]
    if rise < 1e-3:
        return np.inf
    flat = max(0.0, 1.0 - rise * rise)
    drift = wx * nx + wy * ny + wz * nz - z0 * rise
    away = wx * wx + wy * wy + wz * wz - z0 * z0
    h = (-corner - z0) / rise
    if h >= below:
        return np.inf
    reach2 = (flat * h + 2.0 * drift) * h + away
    if reach2 <= disc * disc:
        return h
    for _ in range(_ROUNDS):
        z = z0 + h * rise
        reach = math.sqrt(max(0.0, (flat * h + 2.0 * drift) * h + away))
        side = max(reach - disc, 0.0)
        under = max(-z, 0.0)
        far = math.sqrt(side * side + under * under)
        if far - corner <= _SETTLED_MM:
            return h
        slope = (side * (flat * h + drift) / max(reach, 1e-300) - under * rise) / far
        if slope > -1e-9:
            return np.inf
        h -= (far - corner) / slope
        if h > 1e3:
            return np.inf
    return h


@numba.njit(cache=True, nogil=True)
def _pose(table, at, pose):
    """Fill pose (6,) with row ``at`` (a float) of a table (n, 6): cubic through the four rows about it."""
    i = min(max(math.floor(at) - 1, 0), table.shape[0] - 4)
    t = at - i
    a, b, c, d = t, t - 1.0, t - 2.0, t - 3.0
    w0, w1, w2, w3 = -b * c * d / 6.0, 0.5 * a * c * d, -0.5 * a * b * d, a * b * c / 6.0
    for k in range(6):
        pose[k] = w0 * table[i, k] + w1 * table[i + 1, k] + w2 * table[i + 2, k] + w3 * table[i + 3, k]
    size = math.sqrt(pose[3] * pose[3] + pose[4] * pose[4] + pose[5] * pose[5])
    pose[3], pose[4], pose[5] = pose[3] / size, pose[4] / size, pose[5] / size


@numba.njit(cache=True, nogil=True)
def _lowered(line, pose, tool, below, at, tilt):
    """Return the entry of one pose, less what a tilt error about its contact may lower the cutter there.

    tilt (4,) is the error [rad], the row whose contact is abreast of the line, and the distances along the surface per row, and
    across it. An error about the contact lowers a place by error times distance, in its worst direction.
    """
    if tilt[0] == 0.0:
        return _entry(line, pose, tool[0], tool[1], below)
    ahead = (at - tilt[1]) * tilt[2]
    down = tilt[0] * math.sqrt(ahead * ahead + tilt[3] * tilt[3])
    return _entry(line, pose, tool[0], tool[1], below + down) - down


@numba.njit(cache=True, nogil=True)
def _refined(line, table, best, row, low, high, tool, pose, tilt):
    """Return (height, row) of the lowest entry within a row of the one given, by golden section.

    A flat end mill's sharp edge makes the lowest place a kink, which does not disturb it.
    """
    first, last = float(max(row - 1, low)), float(min(row + 1, high))
    b, c = last - _GOLDEN * (last - first), first + _GOLDEN * (last - first)
    _pose(table, b, pose)
    hb = _lowered(line, pose, tool, np.inf, b, tilt)
    _pose(table, c, pose)
    hc = _lowered(line, pose, tool, np.inf, c, tilt)
    at = float(row)
    for _ in range(int(tool[2])):
        if hb <= hc:
            if hb < best:
                best, at = hb, b
            last, c, hc = c, b, hb
            b = last - _GOLDEN * (last - first)
            _pose(table, b, pose)
            hb = _lowered(line, pose, tool, np.inf, b, tilt)
        else:
            if hc < best:
                best, at = hc, c
            first, b, hb = b, c, hc
            c = first + _GOLDEN * (last - first)
            _pose(table, c, pose)
            hc = _lowered(line, pose, tool, np.inf, c, tilt)
    return best, at


@numba.njit(cache=True, nogil=True)
def _left(line, table, abreast, step, reach, tool, pose, tilt):
    """Return (height, row) that a pass leaves on a line: the lowest entry over poses within reach of it.

    Front, rear and sides of the bottom may come near, each with a lowest place of its own. All whole rows are asked; every row
    that is no higher than both its neighbours, and within ``tool[3]`` of the lowest, is refined: that is how far an entry may dip
    between rows.

    Parameters
    ----------
    abreast : float
        Row whose contact is abreast of the line.
    """
    last = table.shape[0] - 1
    low = min(max(math.floor(abreast - reach / step), 0), last - 3)
    high = max(min(math.ceil(abreast + reach / step), last), low + 3)
    heights = np.empty(high - low + 3)
    heights[0] = heights[-1] = np.inf
    first = min(max(math.floor(abreast), low), high)
    for k in range(6):
        pose[k] = table[first, k]
    lowest = _lowered(line, pose, tool, np.inf, float(first), tilt)
    for i in range(low, high + 1):
        for k in range(6):
            pose[k] = table[i, k]
        h = _lowered(line, pose, tool, lowest + tool[3], float(i), tilt)
        heights[i - low + 1] = h
        lowest = min(lowest, h)
    best, at = np.inf, float(low)
    for n in range(1, high - low + 2):
        if heights[n] <= heights[n - 1] and heights[n] < heights[n + 1] and heights[n] <= lowest + tool[3]:
            h, place = _refined(line, table, heights[n], low + n - 1, low, high, tool, pose, tilt)
            if h < best:
                best, at = h, place
    return best, at


@numba.njit(cache=True, nogil=True)
def profiles(form, tool, u, v, aside, tables, step, reach, error, scale, height, shift, lowered):
    """Fill height, shift and lowered (n, m) [mm]: what each pass leaves beside its line, and how far ahead it is cut.

    ``lowered`` is what it leaves under a tilt error about the contact, in the worst direction for each place.

    Parameters
    ----------
    form : (3,)
    tool : (disc, corner, rounds, dip)
    u, v : (n,)
        Stations. Table k is about station k: its middle row has its contact there.
    aside : (m,)
        Distances on the surface across the feed at which to look.
    tables : (n, p, 6)
    step : float
        Plan distance between contacts of neighbouring rows.
    reach : float
        How far before and behind a place rows are looked at.
    error : float
        Tilt error [rad].
    scale : (n, 2)
        Surface distance per plan distance, along the feed and across it.
    """
    line, pose = np.empty(6), np.empty(6)
    tilt, upright = np.empty(4), np.zeros(4)
    middle = 0.5 * (tables.shape[1] - 1)
    for k in range(len(u)):
        tilt[0], tilt[1], tilt[2] = error, middle, step * scale[k, 0]
        for j in range(len(aside)):
            _ground(form, u[k], v[k] + aside[j] / scale[k, 1], line)
            h, at = _left(line, tables[k], middle, step, reach, tool, pose, upright)
            height[k, j] = h
            shift[k, j] = (at - middle) * step
            tilt[3] = aside[j]
            lowered[k, j] = h
            if error > 0.0:
                lowered[k, j], _ = _left(line, tables[k], middle, step, reach, tool, pose, tilt)


@numba.njit(cache=True, nogil=True)
def heights(form, tool, u, v, table, start, step, reach, height):
    """Fill height (n,) [mm]: what one whole pass leaves over plan points.

    Parameters
    ----------
    table : (p, 6)
        Row i has its contact at u = start + i step.
    reach : float
        How far before and behind a point rows are looked at.
    """
    line, pose, upright = np.empty(6), np.empty(6), np.zeros(4)
    for k in range(len(u)):
        _ground(form, u[k], v[k], line)
        height[k], _ = _left(line, table, (u[k] - start) / step, step, reach, tool, pose, upright)


@numba.njit(cache=True, nogil=True)
def ridges(form, tool, u, lower, upper, first, second, start, step, reach, rounds, place, height):
    """Fill place and height (n,) [mm]: where, over abscissa u, two passes leave as much as each other, and how much.

    Bisection over v between ``lower`` and ``upper`` (n,): towards the upper line the first pass leaves more.

    Parameters
    ----------
    first, second : (p, 6), (q, 6)
        Tables of the pass at the lower and at the upper line.
    start : (2,)
        Where their contacts start.
    """
    line, pose, upright = np.empty(6), np.empty(6), np.zeros(4)
    for k in range(len(u)):
        low, high = lower[k], upper[k]
        below, above = np.inf, np.inf
        for _ in range(rounds):
            v = 0.5 * (low + high)
            _ground(form, u[k], v, line)
            below, _ = _left(line, first, (u[k] - start[0]) / step, step, reach, tool, pose, upright)
            above, _ = _left(line, second, (u[k] - start[1]) / step, step, reach, tool, pose, upright)
            if below < above:
                low = v
            else:
                high = v
        place[k] = 0.5 * (low + high)
        height[k] = min(below, above)
