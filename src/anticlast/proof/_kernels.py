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
# How near to a flat end's rim an entry counts as on it [mm]: the search over a piece stops at about that.
_RIM_MM = 1e-3


@njit(cache=True, nogil=True)
def ball_entry(
    q: tuple, n: tuple, c0: np.ndarray, c1: np.ndarray, radius: float
) -> tuple[float, float, float]:
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


# ---------------------------------------------------------------------------------------- residual at nodes


@njit(cache=True, nogil=True)
def pose_entry(
    q: tuple, n: tuple, c: tuple, axis: tuple, size: np.ndarray, out: np.ndarray
) -> tuple[float, float]:
    """Return where a line q + h n, coming from below, enters a bull or flat end mill in one pose.

    The cutter is a cylinder (radius ``disc``, from the reference point up to ``flutes``) grown by the corner radius.
    Its distance is convex along the line, so Newton's method from outside never oversteps the entry;
    docs/theory-proof.md#bull-and-flat-ends.

    Parameters
    ----------
    q, n, c, axis : (x, y, z) [mm, 1]
        Point and direction of the line, reference point, unit cutter axis.
    size : (disc, corner, sine, flutes) [mm]
    out : (3,)
        Gets the outward unit normal of the cutter at the entry, or at the nearest approach of a line that misses.

    Returns
    -------
    height, nearest : float [mm]
        h of the entry, inf if the line misses; h of the nearest point then.
    """
    disc, corner, flutes = size[0], size[1], size[3]
    wx, wy, wz = q[0] - c[0], q[1] - c[1], q[2] - c[2]
    z0 = wx * axis[0] + wy * axis[1] + wz * axis[2]
    nz = n[0] * axis[0] + n[1] * axis[1] + n[2] * axis[2]
    aa = max(0.0, 1.0 - nz * nz)
    bb = wx * n[0] + wy * n[1] + wz * n[2] - z0 * nz
    ww = wx * wx + wy * wy + wz * wz
    cc = ww - z0 * z0
    h = (-corner - z0) / nz if nz > 0.1 else -(math.sqrt(ww) + disc + corner + flutes + 1.0)
    gap, along, across = 0.0, 0.0, 0.0
    hit, low, high = False, h, math.inf
    for _ in range(_STEPS):
        z = z0 + h * nz
        r = math.sqrt(max(0.0, (aa * h + 2.0 * bb) * h + cc))
        over = max(-z, z - flutes)
        side = r - disc
        up = -1.0 if -z >= z - flutes else 1.0
        if over > 0.0 and side > 0.0:
            far = math.sqrt(over * over + side * side)
            along, across = up * over / far, side / far
        elif over >= side:
            far = over
            along, across = up, 0.0
        else:
            far = side
            along, across = 0.0, 1.0
        gap = far - corner
        slope = along * nz + (across * (aa * h + bb) / r if r > 0.0 else 0.0)
        if gap <= 1e-10:
            hit = True
            break
        if slope < -1e-9:
            low = h
            step = h - gap / slope
            h = step if step < high else 0.5 * (low + high)
        else:
            # No crossing up to here; the nearest point lies between, where the distance is least.
            high = h
            h = 0.5 * (low + high)
        if high - low <= 1e-6:
            break
    # Radial direction at the place reached.
    px, py, pz = wx + h * n[0], wy + h * n[1], wz + h * n[2]
    z = px * axis[0] + py * axis[1] + pz * axis[2]
    px, py, pz = px - z * axis[0], py - z * axis[1], pz - z * axis[2]
    r = math.sqrt(px * px + py * py + pz * pz)
    scale = across / r if r > 0.0 else 0.0
    out[0] = along * axis[0] + scale * px
    out[1] = along * axis[1] + scale * py
    out[2] = along * axis[2] + scale * pz
    return (h if hit else math.inf), h


@njit(cache=True, nogil=True)
def pose_at(
    t: float, c0: np.ndarray, c1: np.ndarray, a0: np.ndarray, a1: np.ndarray
) -> tuple[tuple, tuple, float]:  # fmt: skip
    """Return reference point, unit axis and the length of the mean axis at a share t of a piece."""
    x, y, z = a0[0] + t * (a1[0] - a0[0]), a0[1] + t * (a1[1] - a0[1]), a0[2] + t * (a1[2] - a0[2])
    length = math.sqrt(x * x + y * y + z * z)
    c = (c0[0] + t * (c1[0] - c0[0]), c0[1] + t * (c1[1] - c0[1]), c0[2] + t * (c1[2] - c0[2]))
    return c, (x / length, y / length, z / length), length


@njit(cache=True, nogil=True)
def entry_and_slope(
    t: float, q: tuple, n: tuple, c0: np.ndarray, c1: np.ndarray, a0: np.ndarray, a1: np.ndarray, size: np.ndarray,
    out: np.ndarray,
) -> tuple[float, float]:  # fmt: skip
    """Return the entry height at a share t of a piece and how it changes with t; for a miss inf and which way it nears."""
    c, axis, length = pose_at(t, c0, c1, a0, a1)
    h, near = pose_entry(q, n, c, axis, size, out)
    px, py, pz = q[0] + near * n[0] - c[0], q[1] + near * n[1] - c[1], q[2] + near * n[2] - c[2]
    dx, dy, dz = (a1[0] - a0[0]) / length, (a1[1] - a0[1]) / length, (a1[2] - a0[2]) / length
    on = dx * axis[0] + dy * axis[1] + dz * axis[2]
    dx, dy, dz = dx - on * axis[0], dy - on * axis[1], dz - on * axis[2]
    ap = axis[0] * px + axis[1] * py + axis[2] * pz
    dp = dx * px + dy * py + dz * pz
    vx = c1[0] - c0[0] + dx * ap - axis[0] * dp
    vy = c1[1] - c0[1] + dy * ap - axis[1] * dp
    vz = c1[2] - c0[2] + dz * ap - axis[2] * dp
    toward = out[0] * vx + out[1] * vy + out[2] * vz
    if math.isinf(h):
        return h, -toward
    rate = out[0] * n[0] + out[1] * n[1] + out[2] * n[2]
    return h, toward / min(rate, -1e-9)


@njit(cache=True, nogil=True)
def off_mill(
    p: tuple, n: tuple, c: np.ndarray, axis: np.ndarray, v: tuple, size: np.ndarray
) -> tuple[float, float, float]:
    """Return a point's distance from a bull or flat end mill [mm], and its rates along n and along a motion -v of the mill."""
    wx, wy, wz = p[0] - c[0], p[1] - c[1], p[2] - c[2]
    z = wx * axis[0] + wy * axis[1] + wz * axis[2]
    over, up = (-z, -1.0) if z < 0.5 * size[3] else (z - size[3], 1.0)
    wx, wy, wz = wx - z * axis[0], wy - z * axis[1], wz - z * axis[2]
    r2 = wx * wx + wy * wy + wz * wz
    if r2 <= size[0] * size[0]:
        # Over or under the disc: the distance is along the axis.
        along = up * (n[0] * axis[0] + n[1] * axis[1] + n[2] * axis[2])
        return over - size[1], along, up * (v[0] * axis[0] + v[1] * axis[1] + v[2] * axis[2])
    r = math.sqrt(r2)
    over, side = max(over, 0.0), r - size[0]
    far = math.sqrt(over * over + side * side)
    if far == 0.0:
        return -size[1], 0.0, 0.0
    along, across = up * over / far, side / (far * r)
    ox, oy, oz = along * axis[0] + across * wx, along * axis[1] + across * wy, along * axis[2] + across * wz
    return far - size[1], ox * n[0] + oy * n[1] + oz * n[2], ox * v[0] + oy * v[1] + oz * v[2]


@njit(cache=True, nogil=True)
def stays_out(
    q: tuple,
    n: tuple,
    c0: np.ndarray,
    c1: np.ndarray,
    a0: np.ndarray,
    a1: np.ndarray,
    size: np.ndarray,
    below: float,
    spread: float,
    bend: float,
) -> bool:
    """Tell quickly whether a bull or flat end mill surely does not meet a line lower than ``below`` along one piece.

    Distance is convex in height, share and place together, but for the turn of the axis and the surface's curvature.
    Where it falls with the height at both ends of the piece, it is no lower further down; the tangents over the share
    then bound it from below: docs/theory-proof.md#bull-and-flat-ends.

    Parameters
    ----------
    q, n, c0, c1, a0, a1, size
        As in `mill_entry`.
    below : float [mm]
    spread : float [mm]
        The answer holds for all lines whose surface points lie within this of q; 0 for the one line.
    bend : float [1/mm]
        Largest curvature of the surface.
    """
    p = (q[0] + below * n[0], q[1] + below * n[1], q[2] + below * n[2])
    v = (c1[0] - c0[0], c1[1] - c0[1], c1[2] - c0[2])
    flattest = -bend * spread
    far0, rise0, slope0 = off_mill(p, n, c0, a0, v, size)
    if far0 <= 0.0 or rise0 > flattest:
        return False
    far1, rise1, slope1 = off_mill(p, n, c1, a1, v, size)
    if far1 <= 0.0 or rise1 > flattest:
        return False
    if spread > 0.0:
        far0 -= spread * math.sqrt(max(0.0, 1.0 - rise0 * rise0))
        far1 -= spread * math.sqrt(max(0.0, 1.0 - rise1 * rise1))
    # The mill moves by v: distances change against it.
    if slope0 <= 0.0:
        least = far0
    elif slope1 >= 0.0:
        least = far1
    else:
        meet = (far0 - far1 - slope1) / (slope0 - slope1)
        least = far0 - slope0 * min(max(meet, 0.0), 1.0)
    turned = math.sqrt((a1[0] - a0[0]) ** 2 + (a1[1] - a0[1]) ** 2 + (a1[2] - a0[2]) ** 2)
    arm = size[0] + size[1] + math.sqrt((p[0] - c0[0]) ** 2 + (p[1] - c0[1]) ** 2 + (p[2] - c0[2]) ** 2)
    return least > 1.1 * turned * arm + bend * spread * (0.5 * spread + abs(below))


@njit(cache=True, nogil=True)
def keep_near(
    surface: tuple, grid: tuple, tiles: tuple, lists: tuple, pieces: tuple, high: float, keep: np.ndarray
) -> None:
    """Mark the entries of tiles' lists that are needed; bull and flat ends that stay above ``high`` all over are not.

    Parameters
    ----------
    surface : (a, b, w)
        w the largest 1 / cos(slope) over the nodes.
    grid : (x low, y low, tile [mm], tiles in x, tiles in y)
    tiles : (first, after last)
    lists, pieces
        As in `sweep`.
    high : float [mm]
    keep : (total,) bool
        Set for the entries of these tiles.
    """
    a, b, w = surface
    x_low, y_low, tile, nx, _ = grid
    start, listing = lists
    c0, c1, a0, a1, size, state = pieces
    spread = tile * math.sqrt(0.5) * w
    for t in range(tiles[0], tiles[1]):
        q, n = surface_at(a, b, x_low + (t % nx + 0.5) * tile, y_low + (t // nx + 0.5) * tile)
        for e in range(start[t], start[t + 1]):
            k = listing[e]
            keep[e] = (
                size[k, 0] == 0.0
                or state[k] == 2
                or not stays_out(q, n, c0[k], c1[k], a0[k], a1[k], size[k], high, spread, 2.0 * max(a, b))
            )


@njit(cache=True, nogil=True)
def mill_entry(
    q: tuple,
    n: tuple,
    c0: np.ndarray,
    c1: np.ndarray,
    a0: np.ndarray,
    a1: np.ndarray,
    size: np.ndarray,
    below: float,
) -> tuple[float, float, float]:
    """Return where a line enters a bull or flat end mill along one piece; what is no lower than ``below`` is a miss.

    Over the share t of the piece the entry height is convex to first order in the turn of the axis; its tangents at
    two ends that slope towards each other meet at a lower bound, which ends the search.

    Returns
    -------
    height, share, cosine
        As `ball_entry`.
    """
    if below < math.inf and stays_out(q, n, c0, c1, a0, a1, size, below, 0.0, 0.0):
        return math.inf, 0.0, 0.0
    out = np.empty(3)
    s0, s1 = 0.0, 1.0
    h0, g0 = entry_and_slope(s0, q, n, c0, c1, a0, a1, size, out)
    best, share = h0, s0
    cosine = -(out[0] * n[0] + out[1] * n[1] + out[2] * n[2])
    if g0 < 0.0:
        h1, g1 = entry_and_slope(s1, q, n, c0, c1, a0, a1, size, out)
        if h1 < best:
            best, share = h1, s1
            cosine = -(out[0] * n[0] + out[1] * n[1] + out[2] * n[2])
        if g1 > 0.0:
            for step in range(_STEPS):
                both = not (math.isinf(h0) or math.isinf(h1))
                t = 0.5 * (s0 + s1)
                if both:
                    meet = min(max((h0 - h1 + g1 * s1 - g0 * s0) / (g1 - g0), s0), s1)
                    bound = h0 + g0 * (meet - s0)
                    if bound >= below or best - bound <= 1e-7:
                        break
                    t = meet if step % 2 == 0 else s0 - g0 * (s1 - s0) / (g1 - g0)
                if s1 - s0 <= 1e-9 or t <= s0 or t >= s1:
                    break
                h, g = entry_and_slope(t, q, n, c0, c1, a0, a1, size, out)
                if h < best:
                    best, share = h, t
                    cosine = -(out[0] * n[0] + out[1] * n[1] + out[2] * n[2])
                if g < 0.0:
                    s0, h0, g0 = t, h, g
                else:
                    s1, h1, g1 = t, h, g
    if best >= below:
        return math.inf, 0.0, 0.0
    if size[1] == 0.0:
        cosine = max(cosine, _rim_cosine(q, n, best, pose_at(share, c0, c1, a0, a1), size[0]))
    return best, share, cosine


@njit(cache=True, nogil=True)
def _rim_cosine(q: tuple, n: tuple, h: float, pose: tuple, disc: float) -> float:
    """Return the cosine between n and the nearest inward normal of a flat end at its rim; -1 away from the rim.

    On the rim every direction between the axis and the inward radius is a normal.
    """
    c, axis, _ = pose
    px, py, pz = q[0] + h * n[0] - c[0], q[1] + h * n[1] - c[1], q[2] + h * n[2] - c[2]
    z = px * axis[0] + py * axis[1] + pz * axis[2]
    px, py, pz = px - z * axis[0], py - z * axis[1], pz - z * axis[2]
    r = math.sqrt(px * px + py * py + pz * pz)
    if abs(z) > _RIM_MM or abs(r - disc) > _RIM_MM or r == 0.0:
        return -1.0
    along = n[0] * axis[0] + n[1] * axis[1] + n[2] * axis[2]
    inward = -(n[0] * px + n[1] * py + n[2] * pz) / r
    return math.sqrt(along * along + max(0.0, inward) ** 2)


@njit(cache=True, nogil=True)
def entry(q: tuple, n: tuple, pieces: tuple, k: int, below: float) -> tuple[float, float, float]:
    """Return height, share and cosine where a line enters the swept volume of piece k; see `ball_entry`."""
    c0, c1, a0, a1, size, _ = pieces
    if size[k, 0] == 0.0 and size[k, 1] > 0.0:
        return ball_entry(q, n, c0[k], c1[k], size[k, 1])
    return mill_entry(q, n, c0[k], c1[k], a0[k], a1[k], size[k], below)


@njit(cache=True, nogil=True)
def surface_at(a: float, b: float, x: float, y: float) -> tuple[tuple, tuple]:
    """Return the surface point [mm] over (x, y) [mm] and the unit normal there."""
    gx, gy = 2.0 * a * x, -2.0 * b * y
    w = math.sqrt(1.0 + gx * gx + gy * gy)
    return (x, y, a * x * x - b * y * y), (-gx / w, -gy / w, 1.0 / w)


@njit(cache=True, nogil=True)
def cut_node(
    q: tuple, n: tuple, height: float, owner: int, listed: np.ndarray, pieces: tuple, floor: float
) -> tuple[float, int]:
    """Return the residual height [mm] and the piece that left it, after the listed pieces cut one normal line.

    A piece in state 1 lowers the residual if and only if the point at the present residual lies inside its swept ball:
    its upper half is higher than any residual of interest. A piece in state 2 may lie below altogether; it counts
    as far as it meets the line above ``floor``, where the line leaves the part.
    """
    c0, c1, _, _, size, state = pieces
    px, py, pz = q[0] + height * n[0], q[1] + height * n[1], q[2] + height * n[2]
    for e in range(listed.size):
        k = listed[e]
        ball = size[k, 0] == 0.0 and size[k, 1] > 0.0
        if ball and state[k] == 1 and not in_ball(px, py, pz, c0[k], c1[k], size[k, 1]):
            continue
        h, _, _ = entry(q, n, pieces, k, height)
        if h >= height:
            continue
        if h < floor:
            if state[k] == 2:
                # The same line downwards: where it enters from above is where it leaves.
                up, _, _ = entry(q, (-n[0], -n[1], -n[2]), pieces, k, math.inf)
                if -up <= floor:
                    continue
            h = floor
            if h >= height:
                continue
        height, owner = h, k
        px, py, pz = q[0] + h * n[0], q[1] + h * n[1], q[2] + h * n[2]
    return height, owner


@njit(cache=True, nogil=True)
def sweep(
    surface: tuple, nodes: tuple, tiles: tuple, lists: tuple, pieces: tuple, above: float,
    height: np.ndarray, owner: np.ndarray,
) -> None:  # fmt: skip
    """Lower the residual heights of the nodes of a run of tiles.

    Parameters
    ----------
    surface : (a, b, slope)
    nodes : (x, y, floor, node_start)
        Plan of the nodes (n,) [mm], where their normal lines leave the part (n,) [mm], first node of each tile.
    tiles : (first, after last)
    lists : (start, pieces)
        From `_reach_kernels.reach_boxes`.
    pieces : (c0, c1, a0, a1, size, state)
        Reference points and axes at both ends [mm, 1], size and state as in `_reach_kernels.reach_boxes`.
    above : float [mm]
        Only nodes that stand at least this high are worked on.
    height : (n,) [mm]
        Changed in place.
    owner : (n,) int32
        Changed in place.
    """
    a, b, _ = surface
    x, y, floor, node_start = nodes
    start, listing = lists
    for t in range(tiles[0], tiles[1]):
        listed = listing[start[t] : start[t + 1]]
        if listed.size == 0:
            continue
        for i in range(node_start[t], node_start[t + 1]):
            if height[i] < above:
                continue
            q, n = surface_at(a, b, x[i], y[i])
            height[i], owner[i] = cut_node(q, n, height[i], owner[i], listed, pieces, floor[i])


# ---------------------------------------------------------------------------------------- upper bound between nodes

_OWNERS = 8
_DEEPEST = 12
_STEEP = 2.0 / 3.0
# Most pieces joined to each side, and the sag allowed as a share of edge^2 / radius: below what the chord plane is off by.
_LINKS = 8
_SAG_SHARE = 0.05


@njit(cache=True, nogil=True)
def sag(
    surface: tuple, edge2: float, high: float, cosine: float, radii: tuple, spread: float, turn: float
) -> float:
    """Return how far one piece's residual can stand above its chord plane over a triangle [mm]; inf if too steep.

    h'' >= -(2a + 2k sin(T) |h'| + 3 k^2 |h| + 2 turn (W + 1) + turn^2 R) / cos(T), k = 2 max(a, b), T the angle
    between normal line and swept volume; the chord plane is off by at most half of that times
    edge^2 / 3 + spread^2 / 4: docs/theory-proof.md#bound.

    Parameters
    ----------
    surface : (a, b, w)
        w the largest 1 / cos(slope) over the nodes.
    edge2 : float [mm^2]
        Longest edge of the triangle in plan, squared.
    high : float [mm]
        Largest residual at the corners, in size.
    cosine : float
        Smallest cosine of T at the corners.
    radii : (smallest, cutter) [mm]
        Smallest radius of curvature of the swept volume, and the cutter's radius.
    spread : float [mm]
        How far apart along the piece the corners' entries lie; 0 for a ball, whose swept volume is convex.
    turn : float [1/mm]
        Turn of the axis per length of the piece.
    """
    a, b, w = surface
    k = 2.0 * max(a, b)
    reach = math.sqrt(edge2 / 3.0)
    change = 1.5 * (w * reach + spread) / radii[0] + k * reach + turn * spread
    # cos(T + d) >= cos(T) (1 - d^2 / 2) - d sin(T), sin(T + d) <= sin(T) + d cos(T).
    sine = math.sqrt(max(0.0, 1.0 - cosine * cosine))
    sine, cosine = sine + change * cosine, cosine * (1.0 - 0.5 * change * change) - change * sine
    if cosine < _STEEP:
        return math.inf
    slope = ((w + 1.0) * sine + k * high) / cosine
    bend = 2.0 * a + 2.0 * k * sine * slope + 3.0 * k * k * high
    bend += 2.0 * turn * (w + 1.0) + turn * turn * radii[1]
    return bend / cosine * (edge2 / 6.0 + spread * spread / 8.0)


@njit(cache=True, nogil=True)
def lower_of_two(first: np.ndarray, second: np.ndarray, weights: np.ndarray) -> float:
    """Return the maximum over a triangle of the lower of two linear functions given at its corners.

    The lower of two linear functions is concave and made of two planes: its maximum is at a corner, or where the two
    cross on an edge. ``weights`` (3,) gets the barycentric place of it.
    """
    best = -math.inf
    for i in range(3):
        low = min(first[i], second[i])
        if low > best:
            best = low
            weights[:] = 0.0
            weights[i] = 1.0
    for i in range(3):
        j = (i + 1) % 3
        gap_i, gap_j = first[i] - second[i], first[j] - second[j]
        if gap_i * gap_j < 0.0:
            s = gap_i / (gap_i - gap_j)
            low = first[i] + s * (first[j] - first[i])
            if low > best:
                best = low
                weights[:] = 0.0
                weights[i], weights[j] = 1.0 - s, s
    return best


@njit(cache=True, nogil=True)
def _chord_sag(c0: np.ndarray, c1: np.ndarray, first: int, last: int) -> float:
    """Return how far the ends of pieces between lie from the chord over pieces first to last [mm], squared."""
    dx, dy, dz = c1[last, 0] - c0[first, 0], c1[last, 1] - c0[first, 1], c1[last, 2] - c0[first, 2]
    dd = dx * dx + dy * dy + dz * dz
    furthest = 0.0
    for j in range(first, last):
        wx, wy, wz = c1[j, 0] - c0[first, 0], c1[j, 1] - c0[first, 1], c1[j, 2] - c0[first, 2]
        s = min(max((wx * dx + wy * dy + wz * dz) / dd, 0.0), 1.0) if dd > 0.0 else 0.0
        furthest = max(furthest, (wx - s * dx) ** 2 + (wy - s * dy) ** 2 + (wz - s * dz) ** 2)
    return furthest


@njit(cache=True, nogil=True)
def chain(pieces: tuple, k: int, length: float, most: float, ends: np.ndarray) -> float:
    """Join a ball's piece with its neighbours to a nearly straight stretch about a length to each side.

    A ball about any point of the chord has its centre within the sag of some centre on the pieces, so what the chord
    leaves is at most the sag over the cosine higher than what the pieces leave: docs/theory-proof.md#bound.

    Parameters
    ----------
    pieces, k
        As in `entry`.
    length, most : float [mm]
        How far to reach, and the largest sag allowed.
    ends : (2, 3) [mm]
        Gets the ends of the chord.

    Returns
    -------
    float [mm]
        Sag: furthest that an end of a piece between lies from the chord.
    """
    c0, c1, _, _, size, state = pieces
    first, last, sag2 = k, k, 0.0
    for side in range(2):
        gone = 0.0
        for _ in range(_LINKS):
            j = first - 1 if side == 0 else last + 1
            if gone >= length or j < 0 or j >= c0.shape[0]:
                break
            if state[j] == 0 or size[j, 0] != 0.0 or size[j, 1] != size[k, 1]:
                break
            a, b = (j, first) if side == 0 else (last, j)
            if c1[a, 0] != c0[b, 0] or c1[a, 1] != c0[b, 1] or c1[a, 2] != c0[b, 2]:
                break
            now = _chord_sag(c0, c1, min(first, j), max(last, j))
            if now > most * most:
                break
            sag2 = now
            gone += math.sqrt(
                (c1[j, 0] - c0[j, 0]) ** 2 + (c1[j, 1] - c0[j, 1]) ** 2 + (c1[j, 2] - c0[j, 2]) ** 2
            )
            first, last = min(first, j), max(last, j)
    for i in range(3):
        ends[0, i], ends[1, i] = c0[first, i], c1[last, i]
    return math.sqrt(sag2)


@njit(cache=True, nogil=True)
def triangle_bound(
    surface: tuple, corners: np.ndarray, owners: np.ndarray, count: int, pieces: tuple, cap: float,
    value: np.ndarray, place: np.ndarray,
) -> tuple[float, int]:  # fmt: skip
    """Return an upper bound [mm] of the residual over one triangle from a few pieces, and how many of those matter.

    Parameters
    ----------
    surface : (a, b, w)
    corners : (3, 2) [mm]
    owners : (>= count,) int32
        Pieces to use; any choice gives a bound, good ones a tight one. Those that matter are moved to the front.
    pieces
        As in `entry`.
    cap : float [mm]
        No residual is higher: the stock that was there before.
    value : (>= count, 3)
        Scratch: each piece's linear majorant at the corners.
    place : (4, 3)
        Row 0 gets the barycentric place where the bound is reached; the rest is scratch.
    """
    edge2 = 0.0
    for i in range(3):
        j = (i + 1) % 3
        edge2 = max(edge2, (corners[i, 0] - corners[j, 0]) ** 2 + (corners[i, 1] - corners[j, 1]) ** 2)
    usable = majorants(surface, corners, owners, count, pieces, edge2, value, place[2:])
    least_top = math.inf
    for o in range(usable):
        least_top = min(least_top, max(value[o, 0], value[o, 1], value[o, 2]))
    bound, kept = cap, 0
    place[0] = 1.0 / 3.0
    for o in range(usable):
        # A piece that is nowhere lower than another's highest place tells nothing here.
        if min(value[o, 0], value[o, 1], value[o, 2]) > least_top:
            continue
        owners[kept] = owners[o]
        for i in range(3):
            value[kept, i] = value[o, i]
        for p in range(kept + 1):
            found = lower_of_two(value[p], value[kept], place[1])
            if found < bound:
                bound = found
                place[0] = place[1]
        kept += 1
    return bound, kept


@njit(cache=True, nogil=True)
def majorants(
    surface: tuple, corners: np.ndarray, owners: np.ndarray, count: int, pieces: tuple, edge2: float,
    value: np.ndarray, ends: np.ndarray,
) -> int:  # fmt: skip
    """Fill ``value`` with linear functions no lower than what each piece leaves over a triangle, at its corners.

    Pieces that miss a corner or cut too steeply are dropped from ``owners``. Returns how many are left; the other
    arguments are those of `triangle_bound`.
    """
    a, b, _ = surface
    size = pieces[4]
    lines = (
        surface_at(a, b, corners[0, 0], corners[0, 1]),
        surface_at(a, b, corners[1, 0], corners[1, 1]),
        surface_at(a, b, corners[2, 0], corners[2, 1]),
    )
    usable = 0
    for o in range(count):
        k = owners[o]
        ball = size[k, 0] == 0.0 and size[k, 1] > 0.0
        over = 0.0
        if ball:
            over = chain(pieces, k, math.sqrt(edge2), _SAG_SHARE * edge2 / size[k, 1], ends) / _STEEP
        least_cosine, least, most = 1.0, 1.0, 0.0
        for i in range(3):
            q, n = lines[i]
            if ball:
                h, share, cosine = ball_entry(q, n, ends[0], ends[1], size[k, 1])
            else:
                h, share, cosine = entry(q, n, pieces, k, math.inf)
            value[usable, i] = h
            least_cosine = min(least_cosine, cosine)
            least, most = min(least, share), max(most, share)
        over += _over(surface, edge2, value[usable], least_cosine, most - least, pieces, k)
        if math.isinf(over):
            continue
        for i in range(3):
            value[usable, i] += over
        owners[usable] = k
        usable += 1
    return usable


@njit(cache=True, nogil=True)
def _over(
    surface: tuple, edge2: float, heights: np.ndarray, cosine: float, spread: float, pieces: tuple, k: int
) -> float:  # fmt: skip
    """Return `sag` for piece k with its heights at the corners; inf if it misses one of them."""
    if math.isinf(heights[0]) or math.isinf(heights[1]) or math.isinf(heights[2]):
        return math.inf
    c0, c1, a0, a1, size, _ = pieces
    high = max(abs(heights[0]), abs(heights[1]), abs(heights[2]))
    if size[k, 0] == 0.0 and size[k, 1] > 0.0:
        return sag(surface, edge2, high, cosine, (size[k, 1], size[k, 1]), 0.0, 0.0)
    length, turned = 0.0, 0.0
    for i in range(3):
        length += (c1[k, i] - c0[k, i]) ** 2
        turned += (a1[k, i] - a0[k, i]) ** 2
    length = math.sqrt(length)
    # A flat end has no corner arc: along its rim the normal turns with the rim itself.
    radii = (size[k, 1] if size[k, 1] > 0.0 else size[k, 0], size[k, 0] + size[k, 1])
    turn = 1.1 * math.sqrt(turned) / max(length, 1e-9)
    return sag(surface, edge2, high, cosine, radii, spread * length, turn)


@njit(cache=True, nogil=True)
def add_owner(owners: np.ndarray, count: int, new: int) -> int:
    """Put a piece into a short list unless it is there; the oldest but three goes when the list is full."""
    for o in range(count):
        if owners[o] == new:
            return count
    if count < _OWNERS:
        owners[count] = new
        return count + 1
    for o in range(3, _OWNERS - 1):
        owners[o] = owners[o + 1]
    owners[_OWNERS - 1] = new
    return count


@njit(cache=True, nogil=True)
def refine(
    surface: tuple, nodes: tuple, triangles: np.ndarray, grid: tuple, lists: tuple, pieces: tuple,
    cap: float, slack: float, owner: np.ndarray, best: np.ndarray, budget: int,
) -> float:  # fmt: skip
    """Search a run of triangles for the highest residual, and return a bound that none of them exceeds [mm].

    A triangle whose bound is no more than ``slack`` above the highest residual seen is done; else the residual is
    measured where the bound is reached, the piece found there joins the list, and the triangle is quartered.

    Parameters
    ----------
    surface : (a, b, w)
    nodes : (x, y)
    triangles : (m, 3) int32
        Nodes at the corners.
    grid : (x low, y low, tile [mm], tiles in x, tiles in y)
    lists : (start, pieces)
    pieces : (c0, c1, a0, a1, size, state)
    cap, slack : float [mm]
    owner : (n,) int32
    best : (4,)
        Highest residual so far [mm], its x, y [mm] and its piece; changed in place.
    budget : int
        Most quarterings; once spent, bounds stand as they are.
    """
    x, y = nodes
    stack = np.empty((3 * _DEEPEST + 4, 3, 2))
    depth = np.empty(3 * _DEEPEST + 4, np.int32)
    known = np.empty((3 * _DEEPEST + 4, _OWNERS), np.int32)
    counts = np.empty(3 * _DEEPEST + 4, np.int32)
    value, place = np.empty((_OWNERS, 3)), np.empty((4, 3))
    corners, owners = np.empty((3, 2)), np.empty(_OWNERS, np.int32)
    bound = -math.inf
    for m in range(triangles.shape[0]):
        counts[0] = 0
        for i in range(3):
            v = triangles[m, i]
            stack[0, i, 0], stack[0, i, 1] = x[v], y[v]
            if owner[v] >= 0:
                counts[0] = add_owner(known[0], counts[0], owner[v])
        depth[0] = 0
        top = 0
        while top >= 0:
            for i in range(3):
                corners[i, 0], corners[i, 1] = stack[top, i, 0], stack[top, i, 1]
            count, level = counts[top], depth[top]
            for o in range(count):
                owners[o] = known[top, o]
            top -= 1
            found, kept = triangle_bound(surface, corners, owners, count, pieces, cap, value, place)
            if found <= best[0] + slack or level >= _DEEPEST or budget <= 0:
                bound = max(bound, found)
                continue
            budget -= 1
            k = probe(surface, corners, place[0], found, grid, lists, pieces, best)
            if k >= 0:
                kept = add_owner(owners, kept, k)
            quarter(corners, stack[top + 1 : top + 5])
            for _ in range(4):
                top += 1
                depth[top], counts[top] = level + 1, kept
                for o in range(kept):
                    known[top, o] = owners[o]
    return bound


@njit(cache=True, nogil=True)
def probe(
    surface: tuple, corners: np.ndarray, weights: np.ndarray, below: float, grid: tuple, lists: tuple, pieces: tuple,
    best: np.ndarray,
) -> int:  # fmt: skip
    """Measure the residual at one place of a triangle, where it is known to be no more than ``below``.

    Keeps it in ``best`` if it is the highest so far; returns the piece that left it, -1 if none did.
    """
    a, b, _ = surface
    x_low, y_low, tile, nx, ny = grid
    start, listing = lists
    x = weights[0] * corners[0, 0] + weights[1] * corners[1, 0] + weights[2] * corners[2, 0]
    y = weights[0] * corners[0, 1] + weights[1] * corners[1, 1] + weights[2] * corners[2, 1]
    u = min(max(math.floor((x - x_low) / tile), 0), nx - 1)
    v = min(max(math.floor((y - y_low) / tile), 0), ny - 1)
    listed = listing[start[v * nx + u] : start[v * nx + u + 1]]
    q, n = surface_at(a, b, x, y)
    height, owner = cut_node(q, n, below, -1, listed, pieces, -math.inf)
    if height > best[0]:
        best[0], best[1], best[2], best[3] = height, x, y, owner
    return owner


@njit(cache=True, nogil=True)
def quarter(corners: np.ndarray, children: np.ndarray) -> None:
    """Fill ``children`` (4, 3, 2) with the quarters of a triangle (3, 2), cut at the middles of its edges."""
    for i in range(3):
        j, k = (i + 1) % 3, (i + 2) % 3
        for d in range(2):
            children[i, 0, d] = corners[i, d]
            children[i, 1, d] = 0.5 * (corners[i, d] + corners[j, d])
            children[i, 2, d] = 0.5 * (corners[i, d] + corners[k, d])
            children[3, i, d] = children[i, 1, d]
