"""Compiled arithmetic of what a cutter can reach: distance from the surface, and lists of pieces for each tile.

Everything here is in the saddle's own frame: z = a x^2 - b y^2, normal up. A *piece* is a straight motion of the
reference point (a ball's centre, the centre of a bull's corner circle). Derivations: docs/theory-proof.md.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

_STEPS = 80
# Places looked at on a rim before the lowest are made exact, and rounds of that.
_RIM_PLACES = 32
_RIM_ROUNDS = 4
# Cells that a mill's bottom is cut into, to find where it is near the surface.
_RINGS, _SECTORS = 4, 24


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
def rim_distance(
    a: float, b: float, c: tuple, one: tuple, two: tuple, angle: float
) -> tuple[float, float, float]:  # fmt: skip
    """Return `foot` of a point on the circle c + one cos(angle) + two sin(angle)."""
    s, t = math.cos(angle), math.sin(angle)
    return foot(
        a, b, c[0] + s * one[0] + t * two[0], c[1] + s * one[1] + t * two[1], c[2] + s * one[2] + t * two[2]
    )  # fmt: skip


@njit(cache=True, nogil=True)
def rim_least(a: float, b: float, c: tuple, axis: tuple, disc: float) -> tuple[float, float, float]:
    """Return the least signed distance from the surface on a circle about the cutter axis, and its foot in plan [mm].

    On a plane a saddle's distance has no lowest point inside a circle but on it: it curves up one way and down the
    other. All lowest places among evenly spaced ones are made exact by parabolas through three points.
    """
    one, two = _square_to(axis[0], axis[1], axis[2])
    one = (disc * one[0], disc * one[1], disc * one[2])
    two = (disc * two[0], disc * two[1], disc * two[2])
    step = 2.0 * math.pi / _RIM_PLACES
    around = np.empty(_RIM_PLACES)
    least, at_x, at_y = math.inf, 0.0, 0.0
    for i in range(_RIM_PLACES):
        around[i], x, y = rim_distance(a, b, c, one, two, i * step)
        if around[i] < least:
            least, at_x, at_y = around[i], x, y
    for i in range(_RIM_PLACES):
        if around[i] > around[i - 1] or around[i] > around[(i + 1) % _RIM_PLACES]:
            continue
        middle, width, f1 = i * step, step, around[i]
        f0, f2 = around[i - 1], around[(i + 1) % _RIM_PLACES]
        for _ in range(_RIM_ROUNDS):
            bend = f0 - 2.0 * f1 + f2
            if bend <= 0.0:
                break
            middle += min(max(0.5 * width * (f0 - f2) / bend, -width), width)
            width *= 0.125
            f1, x, y = rim_distance(a, b, c, one, two, middle)
            if f1 < least:
                least, at_x, at_y = f1, x, y
            f0, _, _ = rim_distance(a, b, c, one, two, middle - width)
            f2, _, _ = rim_distance(a, b, c, one, two, middle + width)
    return least, at_x, at_y


@njit(cache=True, nogil=True)
def rims(
    a: float,
    b: float,
    centres: np.ndarray,
    axes: np.ndarray,
    disc: np.ndarray,
    distance: np.ndarray,
    plan: np.ndarray,
) -> None:
    """Fill ``distance`` (n,) and ``plan`` (n, 2) [mm] with `rim_least` of circles of radius ``disc`` (n,) [mm]."""
    for i in range(centres.shape[0]):
        c = (centres[i, 0], centres[i, 1], centres[i, 2])
        axis = (axes[i, 0], axes[i, 1], axes[i, 2])
        distance[i], plan[i, 0], plan[i, 1] = rim_least(a, b, c, axis, disc[i])


# ---------------------------------------------------------------------------------------- which pieces reach a tile


@njit(cache=True, nogil=True)
def chunk_box(
    a: float, b: float, ends: tuple, size: tuple, high: float, slope: float, box: np.ndarray
) -> int:
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
    bend = 2.0 * a * (1.1 * radius + high + 2.0 * length)
    rise = 2.0 * max(a, b) * radius
    if bend < 0.9 and rise < 0.9 and low > -0.1 / b:
        bend = 2.0 * a / (1.0 - bend)
        low = min(d0, d1) - bend * length * length / 8.0
        if low - corner - disc * sine - bend * radius * radius / 2.0 > high:
            return 0
        if disc > 0.0 or corner == 0.0:
            # The flutes of a bull or flat end reach up past any residual of interest unless it is far below.
            state = 2 if low < -radius else 1
        elif low <= high + rise * radius / (1.0 - rise) / 2.0:
            state = 2
        else:
            drop = max(0.0, low - high - bend * radius * radius / 2.0)
            reach = (
                math.sqrt(max(0.0, radius * radius - drop * drop)) + drop * max(bend, 2.0 * b) * length / 2.0
            )
    else:
        state = 2
    reach += slope * (max(high, corner + disc * sine - low) + (2.0 * radius if state == 2 else 0.0))
    box[0], box[1], box[2], box[3] = math.inf, -math.inf, math.inf, -math.inf
    for x, y, fx, fy in ((x0, y0, fx0, fy0), (x1, y1, fx1, fy1)):
        w = math.sqrt(1.0 + 4.0 * (a * a * fx * fx + b * b * fy * fy))
        x += drop * 2.0 * a * fx / w
        y -= drop * 2.0 * b * fy / w
        box[0], box[1] = min(box[0], x - reach), max(box[1], x + reach)
        box[2], box[3] = min(box[2], y - reach), max(box[3], y + reach)
    return state


@njit(cache=True, nogil=True)
def mill_box(
    a: float, b: float, ends: tuple, axes: tuple, size: tuple, high: float, slope: float, box: np.ndarray
) -> bool:
    """Shrink the box of a bull or flat end mill's chunk to the part of its bottom that is near enough to the surface.

    The bottom of the core is cut into cells; those further from the surface than the corner radius and ``high``, by more
    than the distance can change over a cell and half the chunk, do not count. The wall above the rim only gets further
    away as it rises if the axis stands steeply enough on the surface: docs/theory-proof.md#reach.

    Parameters
    ----------
    ends, size : as in `chunk_box`, size with the height of the flutes as fourth
    axes : (6,)
        Unit cutter axis at both ends.
    high, slope, box
        As in `chunk_box`.

    Returns
    -------
    bool
        False if nothing is near enough.
    """
    disc, corner, sine, flutes = size
    length = math.sqrt((ends[3] - ends[0]) ** 2 + (ends[4] - ends[1]) ** 2 + (ends[5] - ends[2]) ** 2)
    turn = math.sqrt((axes[3] - axes[0]) ** 2 + (axes[4] - axes[1]) ** 2 + (axes[5] - axes[2]) ** 2)
    bend = 2.0 * max(a, b) / max(0.1, 1.0 - 2.0 * max(a, b) * 2.0 * (disc + corner))
    steep = math.sqrt(max(0.0, 1.0 - sine * sine)) - 0.5 * bend * flutes
    if steep < 0.1:
        return True
    cell = disc * math.hypot(0.5 / _RINGS, math.pi / _SECTORS)
    moved = 0.5 * (length + disc * turn)
    slack = cell * sine + 0.5 * bend * cell * cell + moved
    lows = (math.inf, -math.inf, math.inf, -math.inf)
    least = math.inf
    for end in range(2):
        x, y, z = ends[3 * end], ends[3 * end + 1], ends[3 * end + 2]
        ax, ay, az = axes[3 * end], axes[3 * end + 1], axes[3 * end + 2]
        one, two = _square_to(ax, ay, az)
        for i in range(_RINGS):
            r = disc * (i + 0.5) / _RINGS
            for j in range(_SECTORS):
                s, t = r * math.cos(2.0 * math.pi * j / _SECTORS), r * math.sin(2.0 * math.pi * j / _SECTORS)
                px, py = x + s * one[0] + t * two[0], y + s * one[1] + t * two[1]
                pz = z + s * one[2] + t * two[2]
                distance, _, _ = foot(a, b, px, py, pz)
                if distance - slack > corner + high:
                    continue
                least = min(least, distance)
                lows = (min(lows[0], px), max(lows[1], px), min(lows[2], py), max(lows[3], py))
    if math.isinf(least):
        return False
    wall = (high + max(0.0, corner + slack - least)) / steep
    # As far below the surface as the corner arc may reach, the normal line leads that far sideways.
    depth = max(high, corner + slack - least)
    grow = cell + moved + corner + wall + slope * depth
    box[0], box[1] = max(box[0], lows[0] - grow), min(box[1], lows[1] + grow)
    box[2], box[3] = max(box[2], lows[2] - grow), min(box[3], lows[3] + grow)
    return True


@njit(cache=True, nogil=True)
def _square_to(ax: float, ay: float, az: float) -> tuple[tuple, tuple]:
    """Return two unit vectors square to a unit axis and to each other."""
    ex, ey = (1.0, 0.0) if abs(ax) < 0.7 else (0.0, 1.0)
    on = ex * ax + ey * ay
    ex, ey, ez = ex - on * ax, ey - on * ay, -on * az
    norm = math.sqrt(ex * ex + ey * ey + ez * ez)
    ex, ey, ez = ex / norm, ey / norm, ez / norm
    return (ex, ey, ez), (ay * ez - az * ey, az * ex - ax * ez, ax * ey - ay * ex)


@njit(cache=True, nogil=True)
def reach_boxes(
    surface: tuple, c0: np.ndarray, c1: np.ndarray, a0: np.ndarray, a1: np.ndarray, size: np.ndarray,
    active: np.ndarray, high: float, chunk_start: np.ndarray, run: tuple, boxes: np.ndarray, found: np.ndarray,
) -> None:  # fmt: skip
    """Find the plan boxes of all chunks of a run of pieces.

    Parameters
    ----------
    surface : (a, b, slope)
    c0, c1, a0, a1 : (m, 3) [mm, 1]
    size : (m, 4)
        As in `mill_box`.
    active : (m,) bool
    high : float [mm]
        As in `chunk_box`.
    chunk_start : (m + 1,)
        First chunk of each piece; the chunks of a piece are equally long.
    run : (first, after last)
        Pieces to work on.
    boxes : (chunks, 4) [mm]
        Filled.
    found : (chunks,) uint8
        Answers of `chunk_box`.
    """
    a, b, slope = surface
    for k in range(run[0], run[1]):
        first, chunks = chunk_start[k], chunk_start[k + 1] - chunk_start[k]
        for j in range(chunks):
            found[first + j] = 0
            if not active[k]:
                continue
            s, e = j / chunks, (j + 1) / chunks
            dx, dy, dz = c1[k, 0] - c0[k, 0], c1[k, 1] - c0[k, 1], c1[k, 2] - c0[k, 2]
            ends = (
                c0[k, 0] + s * dx, c0[k, 1] + s * dy, c0[k, 2] + s * dz,
                c0[k, 0] + e * dx, c0[k, 1] + e * dy, c0[k, 2] + e * dz,
            )  # fmt: skip
            box = boxes[first + j]
            state = chunk_box(a, b, ends, (size[k, 0], size[k, 1], size[k, 2]), high, slope, box)
            if state == 1 and size[k, 0] > 0.0:
                tx, ty, tz = a1[k, 0] - a0[k, 0], a1[k, 1] - a0[k, 1], a1[k, 2] - a0[k, 2]
                axes = (
                    a0[k, 0] + s * tx, a0[k, 1] + s * ty, a0[k, 2] + s * tz,
                    a0[k, 0] + e * tx, a0[k, 1] + e * ty, a0[k, 2] + e * tz,
                )  # fmt: skip
                whole = (size[k, 0], size[k, 1], size[k, 2], size[k, 3])
                if not mill_box(a, b, ends, axes, whole, high, slope, box):
                    state = 0
            found[first + j] = state


@njit(cache=True, nogil=True)
def bin_boxes(
    chunk_start: np.ndarray,
    boxes: np.ndarray,
    found: np.ndarray,
    grid: tuple,
    start: np.ndarray,
    pieces: np.ndarray,
) -> None:
    """Count (``pieces`` empty) or list the pieces that reach each tile.

    Parameters
    ----------
    chunk_start, boxes, found
        From `reach_boxes`.
    grid : (x low, y low, tile [mm], tiles in x, tiles in y)
    start : (tiles + 1,)
        Counting: entry t + 1 gets the number for tile t. Listing: running sums of those.
    pieces : (0,) or (total,) int32
        In order of motion within each tile.
    """
    x_low, y_low, tile, nx, ny = grid
    last = np.full(nx * ny, -1, np.int32)
    filled = start[:-1].copy()
    for k in range(chunk_start.size - 1):
        for c in range(chunk_start[k], chunk_start[k + 1]):
            if found[c] == 0:
                continue
            i0 = max(0, math.floor((boxes[c, 0] - x_low) / tile))
            i1 = min(nx - 1, math.floor((boxes[c, 1] - x_low) / tile))
            j0 = max(0, math.floor((boxes[c, 2] - y_low) / tile))
            j1 = min(ny - 1, math.floor((boxes[c, 3] - y_low) / tile))
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
