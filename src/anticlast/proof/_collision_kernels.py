"""Compiled search for the least distance between a moving body of revolution and a surface cut into flat patches.

A body is a finite cylinder about the cutter axis, rounded all round by a ball (radius 0 for shank and holder). Its signed
distance is a convex function of the point, hence over a flat patch it is no less than its value at the middle minus its
gradient's share along the two sides. Derivation: docs/theory-proof.md#collisions.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

_DEEPEST = 30


@njit(cache=True, nogil=True)
def body_distance(p: np.ndarray, pose: np.ndarray, body: tuple, gradient: np.ndarray) -> float:
    """Return the signed distance of a point from a body, and its gradient.

    Parameters
    ----------
    p : (3,) [mm]
    pose : (6,) [mm, 1]
        Cutter tip, and unit axis.
    body : (radius, low, high, round) [mm]
        Cylinder between two heights above the tip, grown by ``round``.
    gradient : (3,)
        Gets a subgradient with respect to the point.

    Returns
    -------
    float [mm]
        Negative inside.
    """
    radius, low, high, rounding = body
    wx, wy, wz = p[0] - pose[0], p[1] - pose[1], p[2] - pose[2]
    z = wx * pose[3] + wy * pose[4] + wz * pose[5]
    rx, ry, rz = wx - z * pose[3], wy - z * pose[4], wz - z * pose[5]
    r = math.sqrt(rx * rx + ry * ry + rz * rz)
    over = max(low - z, z - high)
    up = 1.0 if z - high >= low - z else -1.0
    out = r - radius
    if r > 0.0:
        rx, ry, rz = rx / r, ry / r, rz / r
    along, across = 0.0, 0.0
    if over > 0.0 and out > 0.0:
        distance = math.sqrt(over * over + out * out)
        along, across = up * over / distance, out / distance
    elif over >= out:
        distance = over
        along = up
    else:
        distance = out
        across = 1.0
    gradient[0] = along * pose[3] + across * rx
    gradient[1] = along * pose[4] + across * ry
    gradient[2] = along * pose[5] + across * rz
    return distance - rounding


@njit(cache=True, nogil=True)
def patch_least(
    patch: np.ndarray, pose: np.ndarray, shift: np.ndarray, body: tuple, limits: tuple, place: np.ndarray
) -> tuple[float, float]:  # fmt: skip
    """Return the least distance found on one flat patch, and a bound below it.

    With a ``shift``, what is returned holds for the body moved by anything from -shift to +shift: distance is convex in
    that too, so it drops by no more than the gradient along the shift.

    Parameters
    ----------
    patch : (10,) [mm]
        Middle, two half sides, and how far the true surface may stand off the patch.
    pose, body
        As in `body_distance`.
    shift : (3,) [mm]
    limits : (below, tolerance, enough) [mm]
        What is no less than ``below``, or within ``tolerance`` of what was found, is not looked into; the search ends
        once something less than ``enough`` is found.
    place : (3,) [mm]
        Gets the place of the least distance found.
    """
    below, tolerance, enough = limits
    stack = np.empty((3 * _DEEPEST + 4, 3))
    p, gradient = np.empty(3), np.empty(3)
    best, bound = math.inf, math.inf
    stack[0, 0], stack[0, 1], stack[0, 2] = 0.0, 0.0, 1.0
    top = 0
    while top >= 0:
        s, t, half = stack[top, 0], stack[top, 1], stack[top, 2]
        top -= 1
        for i in range(3):
            p[i] = patch[i] + s * patch[3 + i] + t * patch[6 + i]
        distance = body_distance(p, pose, body, gradient) - patch[9]
        distance -= abs(gradient[0] * shift[0] + gradient[1] * shift[1] + gradient[2] * shift[2])
        if distance < best:
            best = distance
            for i in range(3):
                place[i] = p[i]
            if best < enough:
                return best, -math.inf
        g1 = abs(gradient[0] * patch[3] + gradient[1] * patch[4] + gradient[2] * patch[5])
        g2 = abs(gradient[0] * patch[6] + gradient[1] * patch[7] + gradient[2] * patch[8])
        low = distance - half * (g1 + g2)
        if low >= below or low >= best - tolerance or half < 1e-9 or top + 4 >= stack.shape[0]:
            bound = min(bound, low)
            continue
        for child in range(4):
            top += 1
            stack[top, 0] = s + (half * 0.5 if child % 2 == 0 else -half * 0.5)
            stack[top, 1] = t + (half * 0.5 if child < 2 else -half * 0.5)
            stack[top, 2] = half * 0.5
    return best, min(bound, best)


@njit(cache=True, nogil=True)
def pose_least(
    tree: tuple, pose: np.ndarray, shift: np.ndarray, body: tuple, limits: tuple, place: np.ndarray, hint: np.ndarray
) -> tuple[float, float]:  # fmt: skip
    """Return the least distance of a body from all patches, found and bounded; arguments as in `patch_least`.

    Parameters
    ----------
    tree : (spheres (k, 4), child (k, 2), patches (n, 10))
        Bounding spheres; ``child`` holds two nodes, or -1 - first and -1 - (last + 1) of a run of patches in a leaf.
    hint : (1,) int64
        Patch to try first; gets the patch of the least distance.
    """
    spheres, child, patches = tree
    below, tolerance, enough = limits
    stack = np.empty(200, np.int64)
    gradient, there = np.empty(3), np.empty(3)
    best, bound = patch_least(patches[hint[0]], pose, shift, body, limits, place)
    stack[0] = 0
    top = 0
    while top >= 0:
        if best < enough:
            return best, -math.inf
        node = stack[top]
        top -= 1
        low = body_distance(spheres[node, :3], pose, body, gradient) - spheres[node, 3]
        low -= abs(gradient[0] * shift[0] + gradient[1] * shift[1] + gradient[2] * shift[2])
        if low >= min(below, best - tolerance):
            bound = min(bound, low)
            continue
        first, second = child[node]
        if first >= 0:
            stack[top + 1], stack[top + 2] = first, second
            top += 2
            continue
        for i in range(-1 - first, -1 - second):
            found, under = patch_least(
                patches[i], pose, shift, body, (min(below, best), tolerance, enough), there
            )
            bound = min(bound, under)
            if found < best:
                best = found
                for j in range(3):
                    place[j] = there[j]
                hint[0] = i
    return best, min(bound, best)


@njit(cache=True, nogil=True)
def pose_on(poses: np.ndarray, cumulative: np.ndarray, s: float, starts: bool, pose: np.ndarray) -> int:
    """Fill ``pose`` (6,) with the pose at path length s [mm] and return its piece.

    Where one piece ends and the next begins, it is the next one's start if ``starts``, else the end of the one before:
    the two differ where a new run begins.
    """
    side = np.searchsorted(cumulative, s, "right") if starts else np.searchsorted(cumulative, s, "left")
    k = min(max(side - 1, 0), poses.shape[0] - 1)
    length = cumulative[k + 1] - cumulative[k]
    f = min(max((s - cumulative[k]) / length, 0.0), 1.0) if length > 0.0 else 0.0
    for i in range(6):
        pose[i] = poses[k, i] + f * (poses[k, 6 + i] - poses[k, i])
    norm = math.sqrt(pose[3] ** 2 + pose[4] ** 2 + pose[5] ** 2)
    for i in range(3, 6):
        pose[i] /= norm
    return k


@njit(cache=True, nogil=True)
def wander(
    poses: np.ndarray, cumulative: np.ndarray, span: tuple, pose: np.ndarray, arm: float, shift: np.ndarray
) -> float:
    """Return how far points of a body stray from a straight shift of its middle pose over a span of the motion [mm].

    Parameters
    ----------
    poses, cumulative
        As in `motion_least`.
    span : (s0, s1) [mm]
    pose : (6,) [mm, 1]
        Pose at the middle of the span.
    arm : float [mm]
        Furthest point of the body from the tip along the axis plus across it.
    shift : (3,) [mm]
        Gets half of the straight way from one end of the span to the other.
    """
    one, two = np.empty(6), np.empty(6)
    k0 = pose_on(poses, cumulative, span[0], True, one)
    k1 = max(pose_on(poses, cumulative, span[1], False, two), k0)
    vv = 0.0
    for i in range(3):
        shift[i] = 0.5 * (two[i] - one[i])
        vv += shift[i] * shift[i]
    furthest = 0.0
    for j in range(k0, k1 + 2):
        # The ends of the span, and the ends of the pieces between.
        turned, along, ww = 0.0, 0.0, 0.0
        for i in range(3):
            tip = one[i] if j == k0 else (two[i] if j == k1 + 1 else poses[j, i])
            axis = one[3 + i] if j == k0 else (two[3 + i] if j == k1 + 1 else poses[j, 3 + i])
            turned += (axis - pose[3 + i]) ** 2
            along += (tip - pose[i]) * shift[i]
            ww += (tip - pose[i]) ** 2
        t = min(max(along / vv, -1.0), 1.0) if vv > 0.0 else 0.0
        off = math.sqrt(max(0.0, ww - 2.0 * t * along + t * t * vv))
        furthest = max(furthest, off + arm * math.sqrt(turned))
    return furthest


@njit(cache=True, nogil=True)
def motion_least(
    tree: tuple, poses: np.ndarray, cumulative: np.ndarray, spans: np.ndarray, body: tuple, tolerance: float,
    share: float, shared: np.ndarray, result: np.ndarray,
) -> None:  # fmt: skip
    """Search runs of motion for the least distance between a body and the patches.

    A span of motion is done when no distance over it can be ``tolerance`` (or ``share``) less than the least one known:
    the middle pose, shifted straight to both sides, with room for how far the body strays from that. Else it is halved.

    Parameters
    ----------
    tree
        As in `pose_least`.
    poses : (m, 12)
        Tip and axis at the start and at the end of each piece.
    cumulative : (m + 1,) [mm]
        Path length up to the start of each piece, of the body's furthest point.
    spans : (k, 2) [mm]
        Runs to search, as values of ``cumulative``; motion must be continuous within each.
    body : (radius, low, high, round) [mm]
    tolerance, share : float [mm, 1]
        Distances nearer than that, or that share, to the least one found are not told apart.
    shared : (1,) [mm]
        Least distance that any thread has found; larger ones are of no interest. Changed in place: a thread that reads
        an old value only looks further than it needs to.
    result : (6,)
        Least distance found here (inf if none under ``shared``), bound below all, place (3) [mm], piece.
    """
    stack = np.empty((200, 2))
    pose, place, hint = np.empty(6), np.empty(3), np.zeros(1, np.int64)
    shift, still = np.empty(3), np.zeros(3)
    arm = body[0] + body[2] + 2.0 * body[3]
    best, bound = math.inf, shared[0]
    result[2:5] = 0.0
    result[5] = -1.0
    for run in range(spans.shape[0]):
        stack[0, 0], stack[0, 1] = spans[run, 0], spans[run, 1]
        top = 0
        while top >= 0:
            s0, s1 = stack[top, 0], stack[top, 1]
            top -= 1
            s = 0.5 * (s0 + s1)
            k = pose_on(poses, cumulative, s, False, pose)
            known = min(best, shared[0])
            slack = max(tolerance, share * abs(known)) if known < math.inf else tolerance
            found, _ = pose_least(tree, pose, still, body, (known, 0.1 * slack, -math.inf), place, hint)
            if found < known:
                best, known = found, found
                shared[0] = found
                result[2:5] = place
                result[5] = k
            slack = max(tolerance, share * abs(known))
            stray = wander(poses, cumulative, (s0, s1), pose, arm, shift)
            need = known - slack + stray
            under = found
            if found >= need:
                _, under = pose_least(tree, pose, shift, body, (need, 0.0, need), place, hint)
            if under >= need or top + 3 >= stack.shape[0] or s1 - s0 <= 1e-6:
                bound = min(bound, min(under, need) - stray)
                continue
            stack[top + 1, 0], stack[top + 1, 1] = s0, s
            stack[top + 2, 0], stack[top + 2, 1] = s, s1
            top += 2
    result[0], result[1] = best, min(bound, best)
