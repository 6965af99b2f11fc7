"""Compiled loops of the stock field: what a moving cutter removes from columns, what it meets, what it comes near.

The cutter is a convex solid of revolution: a flat disc of radius ``d`` grown by a ball of radius ``r`` (the cutting end),
and a cylinder of radius ``d + r`` above it (the flutes). Every line therefore meets it, and what it sweeps while it only
travels, in one interval. Derivations: docs/theory-stock.md.

A *segment* is one straight piece of motion: reference point (middle of the disc) from c0 to c1, axis from a0 to a1.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

FAR = 1e30
# Places in a segment's scratch array.
CX, CY, CZ, DX, DY, DZ = 0, 1, 2, 3, 4, 5
AX, AY, AZ, BX, BY, BZ = 6, 7, 8, 9, 10, 11
DISC, CORNER, UP, STEPS, CLOSE, UPRIGHT = 12, 13, 14, 15, 16, 17
SCRATCH = 18
# Sub-poses of a tilted cutter are this share of its radius apart; the slivers missed at the sides are (1/6)^2 / 8 of it.
_STEP_SHARE = 1.0 / 6.0
_UPRIGHT_SINE = 1e-9
# Steps of the searches between sub-poses; each closes the gap between found and bound several times.
_REFINES = 8
_NEWTON = 16
_NEWTON_MM = 1e-7
_BISECTIONS = 24
_EDGE_BISECTIONS = 10
# Distances are told apart to this share of the least one.
_TOLD = 0.01


@njit(cache=True, nogil=True)
def ball_sweep(u: float, v: float, s: np.ndarray) -> tuple:
    """Return where a vertical line is inside the ball of the cutting end as it travels: (low, high), or (FAR, -FAR).

    Exact: across the plan direction of travel the ball shows a circle of radius w, and a circle that travels along a
    sloping line has the two tangents parallel to it as its hull.
    """
    radius = s[CORNER]
    x, y = u - s[CX], v - s[CY]
    length = math.sqrt(s[DX] * s[DX] + s[DY] * s[DY])
    square = x * x + y * y
    if length < 1e-9:
        left = radius * radius - square
        if left <= 0.0:
            return FAR, -FAR
        half = math.sqrt(left)
        return s[CZ] + min(0.0, s[DZ]) - half, s[CZ] + max(0.0, s[DZ]) + half
    along = (x * s[DX] + y * s[DY]) / length
    left = radius * radius - square + along * along
    if left <= 0.0:
        return FAR, -FAR
    w = math.sqrt(left)
    first, last = max(0.0, along - w), min(length, along + w)
    if first >= last:
        return FAR, -FAR
    slope = s[DZ] / length
    shift = w * slope / math.sqrt(1.0 + slope * slope)
    low_at = min(max(along - shift, first), last)
    high_at = min(max(along + shift, first), last)
    low = s[CZ] + slope * low_at - math.sqrt(max(0.0, left - (along - low_at) ** 2))
    high = s[CZ] + slope * high_at + math.sqrt(max(0.0, left - (along - high_at) ** 2))
    return low, high


@njit(cache=True, nogil=True)
def upright_sweep(u: float, v: float, s: np.ndarray) -> tuple:
    """Return where a vertical line is inside what an upright cutter sweeps, (low, high), or (FAR, -FAR). Exact."""
    disc, corner = s[DISC], s[CORNER]
    radius = disc + corner
    x, y = u - s[CX], v - s[CY]
    length = math.sqrt(s[DX] * s[DX] + s[DY] * s[DY])
    square = x * x + y * y
    if length < 1e-9:
        if square >= radius * radius:
            return FAR, -FAR
        over = max(0.0, math.sqrt(square) - disc)
        low = s[CZ] + min(0.0, s[DZ]) - math.sqrt(max(0.0, corner * corner - over * over))
        return low, s[CZ] + max(0.0, s[DZ]) + s[UP]
    along = (x * s[DX] + y * s[DY]) / length
    aside = square - along * along
    left = radius * radius - aside
    if left <= 0.0:
        return FAR, -FAR
    w = math.sqrt(left)
    first, last = max(0.0, along - w), min(length, along + w)
    if first >= last:
        return FAR, -FAR
    slope = s[DZ] / length
    high = s[CZ] + max(slope * first, slope * last) + s[UP]
    if corner <= 0.0:
        return s[CZ] + min(slope * first, slope * last), high
    if disc <= 0.0:
        at = min(max(along - w * slope / math.sqrt(1.0 + slope * slope), first), last)
        return s[CZ] + slope * at - math.sqrt(max(0.0, left - (along - at) ** 2)), high
    # Height of the underside over the place along the path is convex: halve on its slope.
    low_at, high_at = first, last
    at = min(max(along, first), last)
    if slope != 0.0:
        for _ in range(_BISECTIONS):
            out = math.sqrt(max(0.0, aside + (along - at) ** 2))
            rise = slope
            over = out - disc
            if over > 0.0:
                rise -= over / math.sqrt(max(1e-30, corner * corner - over * over)) * (along - at) / out
            if rise > 0.0:
                high_at = at
            else:
                low_at = at
            if high_at - low_at < 1e-6:
                break
            at = 0.5 * (low_at + high_at)
    over = max(0.0, math.sqrt(max(0.0, aside + (along - at) ** 2)) - disc)
    return s[CZ] + slope * at - math.sqrt(max(0.0, corner * corner - over * over)), high


@njit(cache=True, nogil=True)
def _end_entry(x: float, y: float, h0: float, square: float, ax: float, ay: float, az: float,
               disc: float, corner: float, sense: float) -> tuple:  # fmt: skip
    """Return where a vertical line enters the disc grown by a ball (sense 1) or leaves it (-1), with the normal there.

    Distance from a disc is convex along the line: Newton's method from outside closes in from one side. (FAR, ...) if missed.
    """
    radius = disc + corner
    left = radius * radius - square
    if left <= 0.0:
        return FAR, 0.0, 0.0, 1.0
    z = -sense * math.sqrt(left)
    if abs(az) > 1e-9:
        plane = (-sense * math.copysign(corner, az) - h0) / az
        z = max(z, plane) if sense > 0.0 else min(z, plane)
    for _ in range(_NEWTON):
        h = h0 + z * az
        px, py, pz = x - h * ax, y - h * ay, z - h * az
        out = math.sqrt(px * px + py * py + pz * pz)
        over = max(0.0, out - disc)
        far = math.sqrt(over * over + h * h)
        if far < 1e-12:
            return FAR, 0.0, 0.0, 1.0
        k = over / (out * far) if out > 0.0 else 0.0
        nx, ny, nz = k * px + h / far * ax, k * py + h / far * ay, k * pz + h / far * az
        gap = far - corner
        if gap <= _NEWTON_MM:
            return z, nx, ny, nz
        if sense * nz >= -1e-9:
            return FAR, 0.0, 0.0, 1.0
        z -= gap / nz
    return z, nx, ny, nz


@njit(cache=True, nogil=True)
def pose_interval(u: float, v: float, t: float, s: np.ndarray) -> tuple:
    """Return where a vertical line is inside the cutter at share t of the segment, and how its low end changes with t.

    Returns
    -------
    low, high : float [mm]
        (FAR, -FAR) if it misses.
    slope : float [mm]
        d low / d t = (velocity . normal) / normal_z at the point of entry.
    """
    ax, ay, az = s[AX] + t * s[BX], s[AY] + t * s[BY], s[AZ] + t * s[BZ]
    size = 1.0 / math.sqrt(ax * ax + ay * ay + az * az)
    ax, ay, az = ax * size, ay * size, az * size
    x, y = u - s[CX] - t * s[DX], v - s[CY] - t * s[DY]
    cz = s[CZ] + t * s[DZ]
    disc, corner, up = s[DISC], s[CORNER], s[UP]
    radius = disc + corner
    h0, square = x * ax + y * ay, x * x + y * y
    low, high = FAR, -FAR
    nx, ny, nz = 0.0, 0.0, -1.0
    whole = False
    # Flutes: |p|^2 - (p.a)^2 <= R^2 and 0 <= p.a <= up.
    a2, b, c = 1.0 - az * az, h0 * az, square - h0 * h0 - radius * radius
    inside = b * b - a2 * c
    if (a2 > 1e-14 and inside > 0.0) or (a2 <= 1e-14 and c < 0.0):
        if a2 > 1e-14:
            root = math.sqrt(inside)
            side_low, side_high = (b - root) / a2, (b + root) / a2
        else:
            side_low, side_high = -FAR, FAR
        if abs(az) > 1e-9:
            one, two = -h0 / az, (up - h0) / az
            cap_low, cap_high = min(one, two), max(one, two)
        elif 0.0 <= h0 <= up:
            cap_low, cap_high = -FAR, FAR
        else:
            cap_low, cap_high = FAR, -FAR
        if max(side_low, cap_low) < min(side_high, cap_high):
            low, high = max(side_low, cap_low), min(side_high, cap_high)
            if side_low >= cap_low:
                whole = True
                h = h0 + low * az
                nx, ny, nz = (x - h * ax) / radius, (y - h * ay) / radius, (low - h * az) / radius
            else:
                nx, ny, nz = -ax, -ay, -az
    if corner > 0.0 and not whole:
        z, ex, ey, ez = _end_entry(x, y, h0, square, ax, ay, az, disc, corner, 1.0)
        if z < low:
            if high < low:
                top, _, _, _ = _end_entry(x, y, h0, square, ax, ay, az, disc, corner, -1.0)
                high = top if top < FAR else z
            low, nx, ny, nz = z, ex, ey, ez
    if low >= high:
        return FAR, -FAR, 0.0
    h = h0 + low * az
    turned = (x - h * ax) * s[BX] + (y - h * ay) * s[BY] + (low - h * az) * s[BZ]
    vx, vy, vz = (
        s[DX] + h * s[BX] - turned * ax,
        s[DY] + h * s[BY] - turned * ay,
        s[DZ] + h * s[BZ] - turned * az,
    )
    slope = (vx * nx + vy * ny + vz * nz) / min(nz, -1e-9)
    return cz + low, cz + high, slope


@njit(cache=True, nogil=True)
def tilted_sweep(u: float, v: float, s: np.ndarray) -> tuple:
    """Return where a vertical line is inside what a tilted cutter sweeps, (low, high), or (FAR, -FAR).

    Sub-poses, and between two of them a search for the least low end where the slopes tell that it lies between: the low
    end is convex in the travel, so two tangents bound it from below and the search stops when nothing is to be gained.
    """
    steps = int(s[STEPS])
    low, high = FAR, -FAR
    before, before_low, before_slope = -1.0, FAR, 0.0
    for k in range(steps + 1):
        t = k / steps
        here, top, slope = pose_interval(u, v, t, s)
        low, high = min(low, here), max(high, top)
        if k > 0 and here < FAR and before_low < FAR:
            ta, va, ma, tb, vb, mb = before, before_low, before_slope, t, here, slope
            for turn in range(_REFINES):
                if ma >= 0.0 or mb <= 0.0:
                    break
                middle = (vb - va + ma * ta - mb * tb) / (ma - mb)
                if va + ma * (middle - ta) > low - s[CLOSE]:
                    break
                if turn % 2 == 1:
                    middle = ta + (tb - ta) * ma / (ma - mb)
                middle = min(max(middle, ta + 0.02 * (tb - ta)), tb - 0.02 * (tb - ta))
                value, top, rise = pose_interval(u, v, middle, s)
                if value >= FAR:
                    break
                low, high = min(low, value), max(high, top)
                if rise < 0.0:
                    ta, va, ma = middle, value, rise
                else:
                    tb, vb, mb = middle, value, rise
        elif k > 0 and (here < FAR) != (before_low < FAR):
            # The line comes into or goes out of the shadow: halve on the slope, what lies outside counting as too high.
            out, within, rise = (before, t, -slope) if here < FAR else (t, before, before_slope)
            sense = 1.0 if out > within else -1.0
            if rise >= 0.0:
                before, before_low, before_slope = t, here, slope
                continue
            for _ in range(_EDGE_BISECTIONS):
                middle = 0.5 * (out + within)
                value, top, rise = pose_interval(u, v, middle, s)
                if value < FAR:
                    low, high = min(low, value), max(high, top)
                if value < FAR and rise * sense < 0.0:
                    within = middle
                else:
                    out = middle
        before, before_low, before_slope = t, here, slope
    return low, high


@njit(cache=True, nogil=True)
def load_segment(
    k: int, ends: np.ndarray, shapes: np.ndarray, shape_of: np.ndarray, close_mm: float, s: np.ndarray
) -> None:
    """Fill the scratch array of segment k from its ends (c0, a0, c1, a1)."""
    shape = shape_of[k]
    for i in range(3):
        s[CX + i], s[DX + i] = ends[k, i], ends[k, 6 + i] - ends[k, i]
        s[AX + i], s[BX + i] = ends[k, 3 + i], ends[k, 9 + i] - ends[k, 3 + i]
    s[DISC], s[CORNER], s[UP] = shapes[shape, 0], shapes[shape, 1], shapes[shape, 2]
    sine = max(math.hypot(ends[k, 3], ends[k, 4]), math.hypot(ends[k, 9], ends[k, 10]))
    s[UPRIGHT] = 1.0 if sine < _UPRIGHT_SINE and ends[k, 5] > 0.0 else 0.0
    travel = math.sqrt(s[DX] ** 2 + s[DY] ** 2 + s[DZ] ** 2)
    travel += (s[UP] + s[DISC] + s[CORNER]) * math.sqrt(s[BX] ** 2 + s[BY] ** 2 + s[BZ] ** 2)
    s[STEPS] = max(1.0, math.ceil(travel / (_STEP_SHARE * (s[DISC] + s[CORNER]))))
    s[CLOSE] = close_mm


@njit(cache=True, nogil=True)
def swept(u: float, v: float, top: float, s: np.ndarray) -> tuple:
    """Return what the segment sweeps of a vertical line whose material ends at ``top``: (low, high), or (FAR, -FAR)."""
    if s[UPRIGHT] > 0.0:
        return upright_sweep(u, v, s)
    corner = s[CORNER]
    x, y = u - s[CX], v - s[CY]
    one = two = -FAR
    if s[AZ] > 1e-3 and s[AZ] + s[BZ] > 1e-3:
        one = s[CZ] - (x * s[AX] + y * s[AY]) / s[AZ]
        x, y = x - s[DX], y - s[DY]
        two = s[CZ] + s[DZ] - (x * (s[AX] + s[BX]) + y * (s[AY] + s[BY])) / (s[AZ] + s[BZ])
    if s[DISC] > 0.0 or corner <= 0.0:
        if one > -FAR and top <= min(one - corner / s[AZ], two - corner / (s[AZ] + s[BZ])):
            return FAR, -FAR
        return tilted_sweep(u, v, s)
    low, high = ball_sweep(u, v, s)
    if top > min(one, two):
        # The ball is exact already: only the flutes are added, which lie above the plane through its middle.
        side_low, side_high = flutes_sweep(u, v, s)
        low, high = min(low, side_low), max(high, side_high)
    return low, high


@njit(cache=True, nogil=True)
def flutes_sweep(u: float, v: float, s: np.ndarray) -> tuple:
    """Return where a vertical line is inside the cylinder of a ball end mill's flutes at the sub-poses."""
    steps = int(s[STEPS])
    low, high = FAR, -FAR
    corner, disc = s[CORNER], s[DISC]
    s[CORNER], s[DISC] = 0.0, corner + disc
    for k in range(steps + 1):
        here, top, _ = pose_interval(u, v, k / steps, s)
        low, high = min(low, here), max(high, top)
    s[CORNER], s[DISC] = corner, disc
    return low, high


@njit(cache=True, nogil=True)
def plan_box(s: np.ndarray, highest: float, box: np.ndarray) -> None:
    """Fill box with (u0, v0, u1, v1, lowest z) that hold all of the segment below a height [mm]."""
    radius = s[DISC] + s[CORNER]
    box[0] = box[1] = box[4] = FAR
    box[2] = box[3] = -FAR
    for end in range(2):
        ax, ay, az = s[AX] + end * s[BX], s[AY] + end * s[BY], s[AZ] + end * s[BZ]
        cx, cy, cz = s[CX] + end * s[DX], s[CY] + end * s[DY], s[CZ] + end * s[DZ]
        sine = math.sqrt(max(0.0, 1.0 - az * az))
        up = s[UP]
        if az > 1e-3:
            up = min(up, max(0.0, (highest - cz + radius * sine) / az + 1e-6))
        for h in (0.0, up):
            box[0], box[2] = min(box[0], cx + h * ax - radius), max(box[2], cx + h * ax + radius)
            box[1], box[3] = min(box[1], cy + h * ay - radius), max(box[3], cy + h * ay + radius)
            lowest = cz + h * az - (s[CORNER] + s[DISC] * sine if h == 0.0 else radius * sine)
            box[4] = min(box[4], lowest)


@njit(cache=True, nogil=True)
def take_out(
    high: np.ndarray, low: np.ndarray, count: np.ndarray, j: int, i: int, a: float, b: float, out: np.ndarray
) -> float:
    """Take the interval (a, b) out of column (j, i); return the length taken.

    ``out`` gets the lowest and highest z taken, and the length that had to be left in (a gap between two pieces of material
    filled again) because the column already held as many pieces as it can.
    """
    n = count[j, i]
    out[0], out[1], out[2] = FAR, -FAR, 0.0
    if n == 0 or a >= high[0, j, i] or b <= low[n - 1, j, i]:
        return 0.0
    if n == 1 and b >= high[0, j, i] and a > low[0, j, i]:
        taken = high[0, j, i] - a
        out[0], out[1] = a, high[0, j, i]
        high[0, j, i] = a
        return taken
    most = high.shape[0]
    tops, bottoms = np.empty(most + 1), np.empty(most + 1)
    kept, taken = 0, 0.0
    for k in range(n):
        top, bottom = high[k, j, i], low[k, j, i]
        if a >= top or b <= bottom:
            tops[kept], bottoms[kept] = top, bottom
            kept += 1
            continue
        upper, lower = min(b, top), max(a, bottom)
        taken += upper - lower
        out[0], out[1] = min(out[0], lower), max(out[1], upper)
        if upper < top:
            tops[kept], bottoms[kept] = top, upper
            kept += 1
        if lower > bottom:
            tops[kept], bottoms[kept] = lower, bottom
            kept += 1
    if kept > most:
        narrow = 0
        for k in range(1, most):
            if bottoms[k] - tops[k + 1] < bottoms[narrow] - tops[narrow + 1]:
                narrow = k
        out[2] = bottoms[narrow] - tops[narrow + 1]
        taken -= out[2]
        bottoms[narrow] = bottoms[narrow + 1]
        for k in range(narrow + 1, most):
            tops[k], bottoms[k] = tops[k + 1], bottoms[k + 1]
        kept = most
    for k in range(kept):
        high[k, j, i], low[k, j, i] = tops[k], bottoms[k]
    count[j, i] = kept
    return taken


@njit(cache=True, nogil=True)
def in_material(
    u: float, v: float, z: float, grid: tuple, row: int, high: np.ndarray, low: np.ndarray, count: np.ndarray
) -> bool:
    """Tell whether a point is in material; ``row`` is the grid row below or at v, counted in the band.

    Between four columns of one piece each the top is read bilinearly; elsewhere the nearest column decides.
    """
    u0, v0, g, first = grid
    x, y = (u - u0) / g, (v - v0) / g - first
    i = math.floor(x)
    if i < -1 or i >= count.shape[1]:
        return False
    fx, fy = x - i, y - row
    between = 0 <= i < count.shape[1] - 1 and 0 <= row < count.shape[0] - 1
    if between and count[row, i] == count[row, i + 1] == count[row + 1, i] == count[row + 1, i + 1] == 1:
        top = (1.0 - fy) * ((1.0 - fx) * high[0, row, i] + fx * high[0, row, i + 1])
        top += fy * ((1.0 - fx) * high[0, row + 1, i] + fx * high[0, row + 1, i + 1])
        base = max(low[0, row, i], low[0, row, i + 1], low[0, row + 1, i], low[0, row + 1, i + 1])
        if z >= base:
            return z < top
    ni, nj = i + (1 if fx >= 0.5 else 0), row + (1 if fy >= 0.5 else 0)
    if ni < 0 or ni >= count.shape[1] or nj < 0 or nj >= count.shape[0]:
        return False
    found = False
    for k in range(count[nj, ni]):
        found = found or low[k, nj, ni] < z < high[k, nj, ni]
    return found


@njit(cache=True, nogil=True)
def sample_front(k: int, stations: np.ndarray, rings: np.ndarray, circle: np.ndarray, grid: tuple, rows: tuple,
                 highest: float, ahead_mm: float, least: float, high: np.ndarray, low: np.ndarray, count: np.ndarray,
                 hits: np.ndarray) -> None:  # fmt: skip
    """Mark the points of a cutter's surface that stand before material, at station k.

    Parameters
    ----------
    stations : (n, 15)
        Reference point, axis, across (unit, 90 degrees left of the feed about the axis), feed direction (unit), and
        how the axis changes along the feed [1/mm].
    rings : (rings, 4) [mm, mm, 1, 1]
        Height over the reference point, radius, radial and axial part of the outward normal.
    circle : (angles, 2)
        Cosine and sine of each angle.
    rows : (int, int)
        Grid rows (first, after last) that this band answers for.
    hits : (rings, angles) uint8
        Angle m is (m + 1/2) / angles of a turn from ``across`` towards the feed.
    ahead_mm : float
        How far ahead along the feed level ground is looked for; walls three times as far.
    """
    cx, cy, cz = stations[k, 0], stations[k, 1], stations[k, 2]
    ax, ay, az = stations[k, 3], stations[k, 4], stations[k, 5]
    ex, ey, ez = stations[k, 6], stations[k, 7], stations[k, 8]
    fx, fy, fz = stations[k, 9], stations[k, 10], stations[k, 11]
    bx, by, bz = stations[k, 12], stations[k, 13], stations[k, 14]
    # Third direction, square to axis and across: along the feed.
    gx, gy, gz = ey * az - ez * ay, ez * ax - ex * az, ex * ay - ey * ax
    fg, fa = fx * gx + fy * gy + fz * gz, fx * ax + fy * ay + fz * az
    turns = bx != 0.0 or by != 0.0 or bz != 0.0
    _, v0, g, first = grid
    sine = math.sqrt(max(0.0, 1.0 - az * az))
    v_low, v_high = v0 + rows[0] * g - 3.0 * ahead_mm, v0 + rows[1] * g + 3.0 * ahead_mm
    angles = hits.shape[1]
    for ring in range(rings.shape[0]):
        h, radius, radial, axial = rings[ring, 0], rings[ring, 1], rings[ring, 2], rings[ring, 3]
        if cz + h * az - radius * sine + min(0.0, 3.0 * ahead_mm * fz) > highest:
            continue
        middle = cy + h * ay
        if middle + radius < v_low or middle - radius > v_high or (radial == 0.0 and axial == 0.0):
            continue
        for m in range(angles):
            c, d = circle[m, 0], circle[m, 1]
            along = radial * d * fg + axial * fa
            if not turns and along < least:
                continue
            rx, ry, rz = c * ex + d * gx, c * ey + d * gy, c * ez + d * gz
            v = middle + radius * ry
            if v < v_low or v > v_high:
                continue
            if turns:
                turned = radius * (rx * bx + ry * by + rz * bz)
                along += (h * bx - turned * ax) * (radial * rx + axial * ax)
                along += (h * by - turned * ay) * (radial * ry + axial * ay)
                along += (h * bz - turned * az) * (radial * rz + axial * az)
                if along < least:
                    continue
            # Flat ground is read between columns to far less than a cell, a wall only to the nearest column.
            nz = radial * rz + axial * az
            steep = 1.0 - nz * nz
            ahead = ahead_mm * (1.0 + 2.0 * steep * steep)
            v += ahead * fy
            row = math.floor((v - v0) / g)
            if row < rows[0] or row >= rows[1]:
                continue
            u, z = cx + h * ax + radius * rx + ahead * fx, cz + h * az + radius * rz + ahead * fz
            if in_material(u, v, z, grid, row - first, high, low, count):
                hits[ring, m] = 1


@njit(cache=True, nogil=True)
def body_distance(x: float, y: float, z: float, axis: tuple, body: np.ndarray) -> float:
    """Return the signed distance of a point (from the tip) from a cylinder between two heights, grown all round."""
    h = x * axis[0] + y * axis[1] + z * axis[2]
    out = math.sqrt(max(0.0, x * x + y * y + z * z - h * h)) - body[0]
    end = abs(h - 0.5 * (body[1] + body[2])) - 0.5 * (body[2] - body[1])
    over, past = max(out, 0.0), max(end, 0.0)
    return math.sqrt(over * over + past * past) + min(max(out, end), 0.0) - body[3]


@njit(cache=True, nogil=True)
def line_distance(x: float, y: float, low: float, high: float, axis: tuple, body: np.ndarray) -> float:
    """Return the least signed distance of a body from a vertical line between two heights (all from the tip), convex in z."""
    best = body_distance(x, y, high, axis, body)
    # Nothing of the body lies further down than this, so nothing nearer does.
    low = max(low, -(abs(body[1]) + abs(body[2]) + body[0] + body[3]))
    if high - low < 1e-6 or body_distance(x, y, high - 1e-4, axis, body) >= best:
        return best
    for _ in range(40):
        one, two = low + (high - low) / 3.0, high - (high - low) / 3.0
        if body_distance(x, y, one, axis, body) < body_distance(x, y, two, axis, body):
            high = two
        else:
            low = one
        if high - low < 1e-5:
            break
    return min(best, body_distance(x, y, 0.5 * (low + high), axis, body))


@njit(cache=True, nogil=True)
def band_distance(tip: tuple, axis: tuple, body: np.ndarray, limit: float, grid: tuple, rows: int, tile: int,
                  tops: np.ndarray, bounds: np.ndarray, columns: tuple, at: np.ndarray) -> float:  # fmt: skip
    """Return the least distance of a posed body from the material of a band, or the limit; ``at`` gets the column (j, i)."""
    u0, v0, g, first = grid
    high, low, count = columns
    best, best_tile, nearest = limit, -1, FAR
    half = 0.5 * g * math.sqrt(2.0) * (tile - 1)
    across = tops.shape[1]
    # Only tiles within the limit of the body's plan shadow can matter.
    wide = body[0] + body[3] + limit
    left = tip[0] + min(body[1] * axis[0], body[2] * axis[0]) - wide - u0
    right = tip[0] + max(body[1] * axis[0], body[2] * axis[0]) + wide - u0
    near = tip[1] + min(body[1] * axis[1], body[2] * axis[1]) - wide - v0
    far = tip[1] + max(body[1] * axis[1], body[2] * axis[1]) + wide - v0
    i0, i1 = max(0, math.floor(left / g) // tile), min(across - 1, math.ceil(right / g) // tile)
    j0 = max(0, (math.floor(near / g) - first) // tile)
    j1 = min(tops.shape[0] - 1, (math.ceil(far / g) - first) // tile)
    for tj in range(j0, j1 + 1):
        for ti in range(i0, i1 + 1):
            q = tj * across + ti
            bounds[q] = FAR
            if tops[tj, ti] <= -FAR:
                continue
            x = u0 + (ti * tile + 0.5 * (tile - 1)) * g - tip[0]
            y = v0 + (first + tj * tile + 0.5 * (tile - 1)) * g - tip[1]
            bounds[q] = line_distance(x, y, -FAR, tops[tj, ti] - tip[2], axis, body) - half
            if bounds[q] < nearest:
                best_tile, nearest = q, bounds[q]
    if best_tile < 0 or nearest >= limit:
        return limit
    width = i1 - i0 + 1
    for turn in range(-1, width * (j1 - j0 + 1)):
        q = best_tile if turn < 0 else (j0 + turn // width) * across + i0 + turn % width
        if bounds[q] >= best:
            continue
        bounds[q] = FAR
        tj, ti = q // across, q % across
        for j in range(tj * tile, min(rows, (tj + 1) * tile)):
            y = v0 + (first + j) * g - tip[1]
            for i in range(ti * tile, min(count.shape[1], (ti + 1) * tile)):
                x = u0 + i * g - tip[0]
                for k in range(count[j, i]):
                    d = line_distance(x, y, low[k, j, i] - tip[2], high[k, j, i] - tip[2], axis, body)
                    if d < best:
                        best = d
                        at[0], at[1] = first + j, i
    return best


@njit(cache=True, nogil=True)
def tile_tops(high: np.ndarray, count: np.ndarray, rows: int, tile: int, tops: np.ndarray) -> float:
    """Fill the highest material of each tile of columns; return the highest of all, -FAR if there is none."""
    tops[:, :] = -FAR
    highest = -FAR
    for j in range(rows):
        for i in range(count.shape[1]):
            if count[j, i] > 0:
                top = high[0, j, i]
                highest = max(highest, top)
                if top > tops[j // tile, i // tile]:
                    tops[j // tile, i // tile] = top
    return highest


@njit(cache=True, nogil=True)
def watch_body(k: int, ends: np.ndarray, offset: float, body: np.ndarray, step_mm: float, horizon_mm: float, cap: float,
               near: np.ndarray, place: tuple, columns: tuple, found: np.ndarray) -> None:  # fmt: skip
    """Carry one body along segment k and note its least distance from a band's material.

    A body at distance d cannot come nearer than d - x within x of its own travel, and material only goes: the pose is
    looked at again when that bound falls below the least distance found, but no oftener than every ``step_mm``.

    Parameters
    ----------
    cap : float
        Least distance known from elsewhere [mm]: what is not nearer by a hundredth need not be told apart.
    near : (1,)
        Distance known to be kept at the start of the segment; gets that at its end.
    found : (7,)
        Least distance, segment, share of it, column (j, i); then the first segment that reaches in by more than a tenth
        of ``step_mm``, -1 if none, and how many poses were looked at.
    """
    grid, rows, tile, tops, bounds = place
    reach = max(abs(body[1] - offset), abs(body[2] - offset)) + body[0] + body[3]
    travel = turn = 0.0
    for i in range(3):
        travel += (ends[k, 6 + i] - ends[k, i]) ** 2
        turn += (ends[k, 9 + i] - ends[k, 3 + i]) ** 2
    length = math.sqrt(travel) + reach * math.sqrt(turn) * 1.001
    at = np.empty(2)
    done = 0.0
    while True:
        least = min(found[0], cap)
        least -= _TOLD * max(0.0, least)
        room = max(0.0, near[0] - least)
        if done + room >= length and not (room == 0.0 and length == 0.0):
            near[0] -= length - done
            return
        done += room
        near[0] -= room
        t = done / length if length > 0.0 else 1.0
        ax, ay = ends[k, 3] + t * (ends[k, 9] - ends[k, 3]), ends[k, 4] + t * (ends[k, 10] - ends[k, 4])
        az = ends[k, 5] + t * (ends[k, 11] - ends[k, 5])
        size = 1.0 / math.sqrt(ax * ax + ay * ay + az * az)
        axis = (ax * size, ay * size, az * size)
        tip = (
            ends[k, 0] + t * (ends[k, 6] - ends[k, 0]) - offset * axis[0],
            ends[k, 1] + t * (ends[k, 7] - ends[k, 1]) - offset * axis[1],
            ends[k, 2] + t * (ends[k, 8] - ends[k, 2]) - offset * axis[2],
        )
        d = band_distance(tip, axis, body, least + horizon_mm, grid, rows, tile, tops, bounds, columns, at)
        found[6] += 1.0
        if d < found[0]:
            found[0], found[1], found[2], found[3], found[4] = d, k, t, at[0], at[1]
        if found[5] < 0.0 and d < -0.1 * step_mm:
            found[5] = k
        near[0] = max(d, min(found[0], cap) + step_mm)


@njit(cache=True, nogil=True)
def run_band(
    grid: tuple, rows: tuple, surface: tuple, columns: tuple, weight: np.ndarray, owner: np.ndarray, segments: tuple,
    span: tuple, sampling: tuple, watching: tuple, taken: np.ndarray, hits: np.ndarray, near: np.ndarray, found: np.ndarray,
) -> None:  # fmt: skip
    """Cut one band of columns with a run of segments in time order, sampling and watching on the way.

    Parameters
    ----------
    grid : (u0, v0, g, first)
        Middle of column (0, 0) [mm], spacing [mm], grid row of the band's local row 0.
    rows : (own, first, after)
        Local rows that count as the band's own (the rest is read for interpolation only), and the grid rows it answers for.
    surface : (p, q, m)
        Finished surface z = p u^2 + q v^2 + m u v [1/mm].
    columns : (high, low, count)
        Material of the band, pieces sorted from the top: (pieces, rows, columns) and (rows, columns).
    weight, owner : (rows, columns)
        Area of each cell inside the blank [mm^2]; row of the part motion that last lowered the column's top.
    segments : (ends, shape_of, shapes, motion_row, cuts, along_normal)
        Segment k goes between ``ends[k]`` with cutter shape ``shape_of[k]``; it removes material if ``cuts[k]``, and depth
        is measured along the surface normal if ``along_normal[k]``, else along the cutter axis.
    span : (first, after)
        Segments of this run.
    sampling : (first_station, stations, rings, ahead_mm, least, close_mm)
        Stations of segment k are ``first_station[k]`` to ``first_station[k + 1]``, less those of the run's first.
    watching : (bodies, of_shape, only_rapid, rapid, offsets, step_mm, horizon_mm, caps)
        Bodies (b, 4) that belong to shape ``of_shape``; ``only_rapid`` ones are watched at rapid only.
    taken : (run, 4)
        Gets volume [mm^3], lowest and highest measure of what was taken [mm], volume that had to be left in.
    hits : (stations of the run, rings, angles) uint8
    near, found : (b,), (b, 7)
        See `watch_body`.
    """
    u0, v0, g, first = grid
    own, row_first, row_after = rows
    high, low, count = columns
    ends, shape_of, shapes, motion_row, cuts, along_normal = segments
    first_station, stations, rings, ahead_mm, least, close_mm = sampling
    bodies, of_shape, only_rapid, rapid, offsets, step_mm, horizon_mm, caps = watching
    tile = 8
    tops = np.empty(((own + tile - 1) // tile, (count.shape[1] + tile - 1) // tile))
    bounds = np.empty(tops.size)
    highest = tile_tops(high, count, own, tile, tops)
    highest = max(highest, _row_top(high, count, own))
    place = (grid, own, tile, tops, bounds)
    s, box, out = np.empty(SCRATCH), np.empty(5), np.empty(3)
    station_base = first_station[span[0]]
    circle = np.empty((hits.shape[2], 2))
    for m in range(hits.shape[2]):
        angle = 2.0 * math.pi * (m + 0.5) / hits.shape[2]
        circle[m, 0], circle[m, 1] = math.cos(angle), math.sin(angle)
    local, nx = count.shape[0], count.shape[1]
    one = np.empty(1)
    for k in range(span[0], span[1]):
        if highest > -FAR:
            for station in range(first_station[k], first_station[k + 1]):
                sample_front(
                    station, stations, rings[shape_of[k]], circle, grid, (row_first, row_after), highest, ahead_mm, least,
                    high, low, count, hits[station - station_base],
                )  # fmt: skip
        if rapid[k]:
            _watch(k, ends, shape_of, bodies, of_shape, only_rapid, True, offsets, step_mm, horizon_mm, caps, near, one, place,
                   columns, found)  # fmt: skip
        if cuts[k] and highest > -FAR:
            load_segment(k, ends, shapes, shape_of, close_mm, s)
            plan_box(s, highest, box)
            j0, j1 = (
                max(0, math.ceil((box[1] - v0) / g) - first),
                min(local - 1, math.floor((box[3] - v0) / g) - first),
            )
            i0, i1 = max(0, math.ceil((box[0] - u0) / g)), min(nx - 1, math.floor((box[2] - u0) / g))
            if box[4] < highest:
                for j in range(j0, j1 + 1):
                    v = v0 + (first + j) * g
                    for i in range(i0, i1 + 1):
                        if count[j, i] == 0 or high[0, j, i] <= box[4]:
                            continue
                        u = u0 + i * g
                        top = high[0, j, i]
                        a, b = swept(u, v, top, s)
                        if a >= b or a >= top:
                            continue
                        length = take_out(high, low, count, j, i, a, b, out)
                        if j >= own or length <= 0.0:
                            continue
                        if count[j, i] == 0 or high[0, j, i] < top:
                            owner[j, i] = motion_row[k]
                        row = taken[k - span[0]]
                        row[0] += weight[j, i] * length
                        row[3] += weight[j, i] * out[2]
                        one_end, other = _measure(u, v, out[0], out[1], s, surface, along_normal[k])
                        row[1], row[2] = min(row[1], one_end), max(row[2], other)
        if not rapid[k]:
            _watch(k, ends, shape_of, bodies, of_shape, only_rapid, False, offsets, step_mm, horizon_mm, caps, near, one, place,
                   columns, found)  # fmt: skip


@njit(cache=True, nogil=True)
def _row_top(high: np.ndarray, count: np.ndarray, first: int) -> float:
    highest = -FAR
    for j in range(first, count.shape[0]):
        for i in range(count.shape[1]):
            if count[j, i] > 0:
                highest = max(highest, high[0, j, i])
    return highest


@njit(cache=True, nogil=True)
def _watch(k: int, ends: np.ndarray, shape_of: np.ndarray, bodies: np.ndarray, of_shape: np.ndarray, only_rapid: np.ndarray,
           at_rapid: bool, offsets: np.ndarray, step_mm: float, horizon_mm: float, caps: np.ndarray, near: np.ndarray,
           one: np.ndarray, place: tuple, columns: tuple, found: np.ndarray) -> None:  # fmt: skip
    for body in range(bodies.shape[0]):
        if of_shape[body] != shape_of[k] or (only_rapid[body] and not at_rapid):
            near[body] = -FAR
            continue
        if k > 0 and not _joined(k, ends):
            near[body] = -FAR
        one[0] = near[body]
        watch_body(
            k, ends, offsets[body], bodies[body], step_mm, horizon_mm, caps[body], one, place, columns, found[body]
        )  # fmt: skip
        near[body] = one[0]


@njit(cache=True, nogil=True)
def _joined(k: int, ends: np.ndarray) -> bool:
    """Tell whether segment k starts where the one before ended."""
    off = 0.0
    for i in range(6):
        off = max(off, abs(ends[k, i] - ends[k - 1, 6 + i]))
    return off < 1e-6


@njit(cache=True, nogil=True)
def _measure(
    u: float, v: float, bottom: float, top: float, s: np.ndarray, surface: tuple, along_normal: bool
) -> tuple:
    """Return where what was taken begins and ends: heights over the tip along the axis, or over the finished surface."""
    if along_normal:
        p, q, m = surface
        z = p * u * u + q * v * v + m * u * v
        du, dv = 2.0 * p * u + m * v, 2.0 * q * v + m * u
        size = 1.0 / math.sqrt(1.0 + du * du + dv * dv)
        return (bottom - z) * size, (top - z) * size
    ax, ay, az = s[AX] + 0.5 * s[BX], s[AY] + 0.5 * s[BY], s[AZ] + 0.5 * s[BZ]
    flat = (u - s[CX] - 0.5 * s[DX]) * ax + (v - s[CY] - 0.5 * s[DY]) * ay
    cz = s[CZ] + 0.5 * s[DZ]
    one, two = flat + (bottom - cz) * az + s[CORNER], flat + (top - cz) * az + s[CORNER]
    return min(one, two), max(one, two)
