"""Compiled search for the least distance between a moving body of revolution and a surface cut into flat patches.

A body is a finite cylinder about the cutter axis, rounded all round by a ball (radius 0 for shank and holder). Its signed
distance is a convex function of the point, hence over a flat patch it is no less than its value at the middle minus its
gradient's share along the two sides. Derivation: docs/theory-proof.md#collisions.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

_DEEPEST = 40


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
    patch: np.ndarray, pose: np.ndarray, body: tuple, below: float, tolerance: float, place: np.ndarray
) -> tuple[float, float]:
    """Return the least distance found on one flat patch and a bound below it, searched only under ``below``.

    Parameters
    ----------
    patch : (10,) [mm]
        Middle, two half sides, and how far the true surface may stand off the patch.
    pose, body
        As in `body_distance`.
    below, tolerance : float [mm]
        What is no less than ``below``, or within ``tolerance`` of what was found, is not looked into.
    place : (3,) [mm]
        Gets the place of the least distance found.
    """
    stack = np.empty((3 * _DEEPEST + 4, 3))
    p, gradient = np.empty(3), np.empty(3)
    sag = patch[9]
    best, bound = math.inf, math.inf
    stack[0] = (0.0, 0.0, 1.0)
    top = 0
    while top >= 0:
        s, t, half = stack[top, 0], stack[top, 1], stack[top, 2]
        top -= 1
        for i in range(3):
            p[i] = patch[i] + s * patch[3 + i] + t * patch[6 + i]
        distance = body_distance(p, pose, body, gradient) - sag
        if distance < best:
            best = distance
            place[:] = p
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
    tree: tuple, pose: np.ndarray, body: tuple, below: float, tolerance: float, place: np.ndarray, hint: np.ndarray
) -> tuple[float, float]:
    """Return the least distance of a body at one pose from all patches, found and bounded, searched under ``below``.

    Parameters
    ----------
    tree : (spheres (k, 4), child (k, 2), patches (n, 10))
        Bounding spheres; ``child`` holds two nodes, or -1 - first and -1 - (last + 1) of a run of patches in a leaf.
    hint : (1,) int64
        Patch to try first; gets the patch of the least distance.
    """
    spheres, child, patches = tree
    stack = np.empty(200, np.int64)
    gradient, there = np.empty(3), np.empty(3)
    best, bound = patch_least(patches[hint[0]], pose, body, below, tolerance, place)
    stack[0] = 0
    top = 0
    while top >= 0:
        node = stack[top]
        top -= 1
        low = body_distance(spheres[node, :3], pose, body, gradient) - spheres[node, 3]
        if low >= min(below, best - tolerance):
            bound = min(bound, max(low, min(below, best - tolerance)))
            continue
        first, second = child[node]
        if first >= 0:
            stack[top + 1], stack[top + 2] = first, second
            top += 2
            continue
        for i in range(-1 - first, -1 - second):
            found, under = patch_least(patches[i], pose, body, min(below, best), tolerance, there)
            bound = min(bound, under)
            if found < best:
                best = found
                place[:] = there
                hint[0] = i
    return best, min(bound, best)


@njit(cache=True, nogil=True)
def motion_least(
    tree: tuple, poses: np.ndarray, cumulative: np.ndarray, spans: np.ndarray, body: tuple, tolerance: float,
    share: float, start: float, result: np.ndarray,
) -> None:  # fmt: skip
    """Search runs of motion for the least distance between a body and the patches.

    No point of the body moves further than the difference of ``cumulative``, so half a span's worth of it bounds how
    much closer than at the middle the body can come; spans are halved until that is settled.

    Parameters
    ----------
    tree
        As in `pose_least`.
    poses : (m, 12)
        Tip and axis at the start and at the end of each piece.
    cumulative : (m + 1,) [mm]
        Largest path length of any point of the body, up to the start of each piece.
    spans : (k, 2) [mm]
        Runs to search, as values of ``cumulative``; motion must be continuous within each.
    body : (radius, low, high, round) [mm]
    tolerance, share : float [mm, 1]
        Distances nearer than that, or that share, to the least one found are not told apart.
    start : float [mm]
        Larger distances are of no interest.
    result : (6,)
        Least distance found (``start`` if none smaller), bound below it, place (3) [mm], piece.
    """
    stack = np.empty((200, 2))
    pose, place, hint = np.empty(6), np.empty(3), np.zeros(1, np.int64)
    best, bound = start, start
    result[2:5] = 0.0
    result[5] = -1.0
    for run in range(spans.shape[0]):
        stack[0] = spans[run]
        top = 0
        while top >= 0:
            s0, s1 = stack[top]
            top -= 1
            half = 0.5 * (s1 - s0)
            s = s0 + half
            k = min(max(np.searchsorted(cumulative, s) - 1, 0), poses.shape[0] - 1)
            length = cumulative[k + 1] - cumulative[k]
            f = min(max((s - cumulative[k]) / length, 0.0), 1.0) if length > 0.0 else 0.0
            for i in range(6):
                pose[i] = poses[k, i] + f * (poses[k, 6 + i] - poses[k, i])
            norm = math.sqrt(pose[3] ** 2 + pose[4] ** 2 + pose[5] ** 2)
            pose[3], pose[4], pose[5] = pose[3] / norm, pose[4] / norm, pose[5] / norm
            slack = max(tolerance, share * abs(best))
            found, under = pose_least(tree, pose, body, best + half, 0.5 * tolerance, place, hint)
            if found < best:
                best = found
                result[2:5] = place
                result[5] = k
            if under - half >= best - slack or top + 2 >= stack.shape[0]:
                bound = min(bound, under - half)
                continue
            stack[top + 1, 0], stack[top + 1, 1] = s0, s
            stack[top + 2, 0], stack[top + 2, 1] = s, s1
            top += 2
    result[0], result[1] = best, min(bound, best)
