"""Compiled arithmetic of the virtual cut: a cutter's swept volume against lines along the surface normal.

Everything here is in the saddle's own frame: z = a x^2 - b y^2, normal up. A *piece* is a straight motion of the
reference point (a ball's centre, the centre of a bull's corner circle) from ``c0`` to ``c1``. Derivations and bounds:
docs/theory-proof.md.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

_STEPS = 80


@njit(cache=True, nogil=True)
def foot(a: float, b: float, x: float, y: float, z: float) -> tuple[float, float, float]:
    """Return the signed distance of a point from the surface and the plan of its foot.

    With t the height over the foot, the foot is (x/(1-2at), y/(1+2bt)) and t solves one increasing equation on
    (-1/(2b), 1/(2a)); docs/theory-proof.md#distance.

    Parameters
    ----------
    a, b : float [1/mm]
    x, y, z : float [mm]

    Returns
    -------
    distance, foot_x, foot_y : float [mm]
        Distance positive above the surface.
    """
    low, high = -0.5 / b, 0.5 / a
    t = (z - a * x * x + b * y * y) / (1.0 + 4.0 * a * a * x * x + 4.0 * b * b * y * y)
    t = min(max(t, 0.98 * low), 0.98 * high)
    fx, fy = x, y
    for _ in range(_STEPS):
        u, v = 1.0 / (1.0 - 2.0 * a * t), 1.0 / (1.0 + 2.0 * b * t)
        fx, fy = x * u, y * v
        miss = t + a * fx * fx - b * fy * fy - z
        if miss > 0.0:
            high = t
        else:
            low = t
        step = miss / (1.0 + 4.0 * a * a * fx * fx * u + 4.0 * b * b * fy * fy * v)
        if abs(step) <= 1e-15 * (1.0 + abs(t)):
            break
        t -= step
        if t <= low or t >= high:
            t = 0.5 * (low + high)
    return t * math.sqrt(1.0 + 4.0 * (a * a * fx * fx + b * b * fy * fy)), fx, fy


@njit(cache=True, nogil=True)
def feet(a: float, b: float, points: np.ndarray, distance: np.ndarray, plan: np.ndarray) -> None:
    """Fill ``distance`` (n,) and ``plan`` (n, 2) [mm] with `foot` of ``points`` (n, 3) [mm]."""
    for i in range(points.shape[0]):
        distance[i], plan[i, 0], plan[i, 1] = foot(a, b, points[i, 0], points[i, 1], points[i, 2])


@njit(cache=True, nogil=True)
def ball_entry(q: tuple, n: tuple, c0: np.ndarray, c1: np.ndarray, radius: float) -> tuple[float, float, float]:
    """Return where the line q + h n, coming from below, enters a ball of ``radius`` swept from c0 to c1.

    The infinite cylinder about the segment first; where it is entered beyond an end, the sphere at that end;
    docs/theory-proof.md#ball-end.

    Returns
    -------
    height : float [mm]
        h of the entry; inf if the line misses.
    share : float
        Where along the segment the nearest centre is, 0 to 1.
    cosine : float
        Between n and the inward normal of the swept volume at the entry.
    """
    wx, wy, wz = q[0] - c0[0], q[1] - c0[1], q[2] - c0[2]
    dx, dy, dz = c1[0] - c0[0], c1[1] - c0[1], c1[2] - c0[2]
    length = math.sqrt(dx * dx + dy * dy + dz * dz)
    end = 0.0
    if length > 1e-12:
        dx, dy, dz = dx / length, dy / length, dz / length
        nd = n[0] * dx + n[1] * dy + n[2] * dz
        wd = wx * dx + wy * dy + wz * dz
        ex, ey, ez = wx - wd * dx, wy - wd * dy, wz - wd * dz
        fx, fy, fz = n[0] - nd * dx, n[1] - nd * dy, n[2] - nd * dz
        aa = fx * fx + fy * fy + fz * fz
        bb = ex * fx + ey * fy + ez * fz
        cc = ex * ex + ey * ey + ez * ez - radius * radius
        if aa > 1e-18:
            root = bb * bb - aa * cc
            if root < 0.0:
                return math.inf, 0.0, 0.0
            h = -(bb + math.sqrt(root)) / aa
            along = wd + h * nd
            if 0.0 <= along <= length:
                return h, along / length, -(bb + h * aa) / radius
            end = 0.0 if along < 0.0 else length
        elif cc > 0.0:
            return math.inf, 0.0, 0.0
        else:
            end = 0.0 if nd > 0.0 else length
        wx, wy, wz = wx - end * dx, wy - end * dy, wz - end * dz
        end = end / length
    bb = wx * n[0] + wy * n[1] + wz * n[2]
    root = bb * bb - (wx * wx + wy * wy + wz * wz - radius * radius)
    if root < 0.0:
        return math.inf, 0.0, 0.0
    h = -bb - math.sqrt(root)
    return h, end, -(bb + h) / radius


@njit(cache=True, nogil=True)
def in_ball(px: float, py: float, pz: float, c0: np.ndarray, c1: np.ndarray, radius: float) -> bool:
    """Tell whether a point lies inside a ball of ``radius`` swept from c0 to c1 [mm]."""
    wx, wy, wz = px - c0[0], py - c0[1], pz - c0[2]
    dx, dy, dz = c1[0] - c0[0], c1[1] - c0[1], c1[2] - c0[2]
    dd = dx * dx + dy * dy + dz * dz
    wd = wx * dx + wy * dy + wz * dz
    ww = wx * wx + wy * wy + wz * wz
    if wd <= 0.0:
        far = ww
    elif wd >= dd:
        far = ww - 2.0 * wd + dd
    else:
        far = ww - wd * wd / dd
    return far < radius * radius


# ---------------------------------------------------------------------------------------- which pieces reach a tile


@njit(cache=True, nogil=True)
def chunk_box(a: float, b: float, ends: tuple, size: tuple, high: float, slope: float, box: np.ndarray) -> int:
    """Find the plan box of the nodes that a short chunk of a piece can cut below a residual height.

    Parameters
    ----------
    a, b : float [1/mm]
    ends : (x0, y0, z0, x1, y1, z1) [mm]
        Ends of the reference point's path.
    size : (disc, corner, sine) [mm, mm, 1]
        Radius of the corner circle (0 for a ball), corner radius, largest sine between cutter axis and surface normal.
    high : float [mm]
        Residual height above which nothing is of interest.
    slope : float
        Largest sine between surface normal and Z over the nodes.
    box : (4,) [mm]
        Gets x low, x high, y low, y high.

    Returns
    -------
    int
        0 out of reach, 1 in reach, 2 in reach and so low that the cutter's upper half may lie below ``high``.
    """
    x0, y0, z0, x1, y1, z1 = ends
    disc, corner, sine = size
    radius = disc + corner
    length = math.sqrt((x1 - x0) ** 2 + (y1 - y0) ** 2 + (z1 - z0) ** 2)
    # Distance to the surface is at least the vertical gap over sqrt(1 + G^2), G the steepest slope within that gap.
    near = math.inf
    for x, y, z in ((x0, y0, z0), (x1, y1, z1)):
        gap = z - a * x * x + b * y * y
        steep = 2.0 * math.sqrt(a * a * x * x + b * b * y * y) + 2.0 * max(a, b) * abs(gap)
        near = min(near, gap / math.sqrt(1.0 + steep * steep))
    if near - length > radius + high:
        return 0
    d0, fx0, fy0 = foot(a, b, x0, y0, z0)
    d1, fx1, fy1 = foot(a, b, x1, y1, z1)
    low = min(d0, d1) - 0.5 * length
    if low - radius > high:
        return 0
    reach = radius
    drop = 0.0
    state = 1
    bend = 2.0 * a * (radius + high + length)
    if bend < 0.9 and low > -0.4 / b:
        bend = 2.0 * a / (1.0 - bend)
        low = min(d0, d1) - bend * length * length / 8.0
        if low - corner - disc * sine - bend * radius * radius / 2.0 > high:
            return 0
        if low <= high + max(a, b) * radius * radius / (1.0 - 2.0 * max(a, b) * radius):
            state = 2
        elif disc == 0.0:
            drop = max(0.0, low - high - bend * radius * radius / 2.0)
            reach = math.sqrt(max(0.0, radius * radius - drop * drop)) + drop * bend * length / 2.0
    else:
        state = 2
    reach += slope * (high if state == 1 else high + 2.0 * radius)
    box[0], box[1], box[2], box[3] = math.inf, -math.inf, math.inf, -math.inf
    for x, y, fx, fy in ((x0, y0, fx0, fy0), (x1, y1, fx1, fy1)):
        w = math.sqrt(1.0 + 4.0 * (a * a * fx * fx + b * b * fy * fy))
        x += drop * 2.0 * a * fx / w
        y -= drop * 2.0 * b * fy / w
        box[0], box[1] = min(box[0], x - reach), max(box[1], x + reach)
        box[2], box[3] = min(box[2], y - reach), max(box[3], y + reach)
    return state


@njit(cache=True, nogil=True)
def bin_pieces(
    surface: tuple, c0: np.ndarray, c1: np.ndarray, size: np.ndarray, active: np.ndarray, high: float, grid: tuple,
    start: np.ndarray, pieces: np.ndarray, state: np.ndarray,
) -> None:  # fmt: skip
    """Count (``pieces`` empty) or list the pieces that reach each tile below a residual height ``high``.

    Parameters
    ----------
    surface : (a, b, slope)
    c0, c1 : (m, 3) [mm]
    size : (m, 3)
        As in `chunk_box`.
    active : (m,) bool
    grid : (x low, y low, tile [mm], tiles in x, tiles in y)
    start : (tiles + 1,)
        Counting: entry t + 1 gets the number for tile t. Listing: running sums of those.
    pieces : (0,) or (total,) int32
        In order of motion within each tile.
    state : (m,) uint8
        Gets the largest answer of `chunk_box` over the piece.
    """
    a, b, slope = surface
    x_low, y_low, tile, nx, ny = grid
    last = np.full(nx * ny, -1, np.int32)
    filled = start[:-1].copy()
    box = np.empty(4)
    for k in range(c0.shape[0]):
        if not active[k]:
            continue
        dx, dy, dz = c1[k, 0] - c0[k, 0], c1[k, 1] - c0[k, 1], c1[k, 2] - c0[k, 2]
        chunks = int(math.ceil(math.sqrt(dx * dx + dy * dy + dz * dz) / (2.0 * tile) + 1e-9))
        chunks = max(chunks, 1)
        for j in range(chunks):
            s, e = j / chunks, (j + 1) / chunks
            ends = (
                c0[k, 0] + s * dx, c0[k, 1] + s * dy, c0[k, 2] + s * dz,
                c0[k, 0] + e * dx, c0[k, 1] + e * dy, c0[k, 2] + e * dz,
            )  # fmt: skip
            found = chunk_box(a, b, ends, (size[k, 0], size[k, 1], size[k, 2]), high, slope, box)
            if found == 0:
                continue
            state[k] = max(state[k], found)
            i0, i1 = max(0, math.floor((box[0] - x_low) / tile)), min(nx - 1, math.floor((box[1] - x_low) / tile))
            j0, j1 = max(0, math.floor((box[2] - y_low) / tile)), min(ny - 1, math.floor((box[3] - y_low) / tile))
            for v in range(j0, j1 + 1):
                for u in range(i0, i1 + 1):
                    t = v * nx + u
                    if last[t] == k:
                        continue
                    last[t] = k
                    if pieces.size == 0:
                        start[t + 1] += 1
                    else:
                        pieces[filled[t]] = k
                        filled[t] += 1
