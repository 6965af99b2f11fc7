"""Compiled forward kinematics of motions that were read back. Arrays and numbers only.

A rotary axis is a row of ``axes``: column of its word (3 to 5), 0 if it carries the work and 1 if the cutter,
signed radians per degree, unit direction (3), point on it (3), in the order of the machine file (from the
machine frame outwards).

A row of ``poses``-input words is X Y Z in mm and A B C in degrees. ``lengths`` are those of the length offset
in force and of the cutter in the spindle, spindle gauge point to tip.
"""

from __future__ import annotations

import math

import numba
import numpy as np

WORD = 0
CARRIES = 1
TURNS = 2
DIRECTION = 3
THROUGH = 6
AXIS_COLUMNS = 9


@numba.njit(cache=True, nogil=True)
def _turn(
    vector: np.ndarray,
    axes: np.ndarray,
    k: int,
    angle: float,
) -> None:
    """Turn a vector in place by an angle about the direction of rotary axis k (Rodrigues' formula)."""
    dx, dy, dz = axes[k, DIRECTION], axes[k, DIRECTION + 1], axes[k, DIRECTION + 2]
    cosine, sine = math.cos(angle), math.sin(angle)
    x, y, z = vector[0], vector[1], vector[2]
    along = (dx * x + dy * y + dz * z) * (1.0 - cosine)
    vector[0] = x * cosine + (dy * z - dz * y) * sine + dx * along
    vector[1] = y * cosine + (dz * x - dx * z) * sine + dy * along
    vector[2] = z * cosine + (dx * y - dy * x) * sine + dz * along


@numba.njit(cache=True, nogil=True)
def _away(
    point: np.ndarray,
    axes: np.ndarray,
    k: int,
) -> float:
    """Distance of a point from rotary axis k."""
    x = point[0] - axes[k, THROUGH]
    y = point[1] - axes[k, THROUGH + 1]
    z = point[2] - axes[k, THROUGH + 2]
    dx, dy, dz = axes[k, DIRECTION], axes[k, DIRECTION + 1], axes[k, DIRECTION + 2]
    return math.sqrt((dy * z - dz * y) ** 2 + (dz * x - dx * z) ** 2 + (dx * y - dy * x) ** 2)


@numba.njit(cache=True, nogil=True)
def _machine(
    words: np.ndarray,
    offset_mm: float,
    gauge_mm: float,
    pivot_mm: float,
    origin: np.ndarray,
    axes: np.ndarray,
    tip: np.ndarray,
    axis: np.ndarray,
) -> None:
    """Tip and cutter axis in the machine frame."""
    axis[0], axis[1], axis[2] = 0.0, 0.0, 1.0
    for k in range(axes.shape[0] - 1, -1, -1):
        if axes[k, CARRIES] == 1.0:
            _turn(axis, axes, k, axes[k, TURNS] * words[int(axes[k, WORD])])
    # The control takes the tip to be where the offset in force says; the cutter hangs by its own length (and
    # the pivot).
    for i in range(3):
        tip[i] = words[i] + origin[i] - (pivot_mm + gauge_mm) * axis[i]
    tip[2] += pivot_mm + offset_mm


@numba.njit(cache=True, nogil=True)
def _into_work(
    words: np.ndarray,
    axes: np.ndarray,
    k: int,
    tip: np.ndarray,
    axis: np.ndarray,
) -> None:
    """Undo rotary axis k, which carries the work, on a machine-frame point and direction."""
    angle = -axes[k, TURNS] * words[int(axes[k, WORD])]
    for i in range(3):
        tip[i] -= axes[k, THROUGH + i]
    _turn(tip, axes, k, angle)
    for i in range(3):
        tip[i] += axes[k, THROUGH + i]
    _turn(axis, axes, k, angle)


@numba.njit(cache=True, nogil=True)
def pose(
    words: np.ndarray,
    offset_mm: float,
    gauge_mm: float,
    pivot_mm: float,
    origin: np.ndarray,
    axes: np.ndarray,
    tip: np.ndarray,
    axis: np.ndarray,
) -> None:
    """Tip and cutter axis in part coordinates, written into tip and axis (3,).

    The inverse of p -> R1 (R2 (p + origin - t2) + t2 - t1) + t1 for the axes that carry the work, applied to
    the tip X + origin + (0, 0, pivot + offset) - (pivot + gauge) axis, which for offset = gauge is the
    machine file's definition.
    """
    _machine(words, offset_mm, gauge_mm, pivot_mm, origin, axes, tip, axis)
    for k in range(axes.shape[0]):
        if axes[k, CARRIES] == 0.0:
            _into_work(words, axes, k, tip, axis)
    for i in range(3):
        tip[i] -= origin[i]


@numba.njit(cache=True, nogil=True)
def between(
    start: np.ndarray,
    end: np.ndarray,
    fraction: float,
    turned: float,
    centre: np.ndarray,
    plane: int,
    words: np.ndarray,
) -> None:
    """Words part of the way along a motion; ``turned`` is the signed angle of an arc, 0 on a straight one."""
    for i in range(6):
        words[i] = start[i] + fraction * (end[i] - start[i])
    if turned != 0.0 and 0.0 < fraction < 1.0:
        first, second = 0, 1
        if plane == 18:
            first, second = 2, 0
        elif plane == 19:
            first, second = 1, 2
        x, y = start[first] - centre[first], start[second] - centre[second]
        radius = math.hypot(x, y)
        radius += fraction * (math.hypot(end[first] - centre[first], end[second] - centre[second]) - radius)
        angle = math.atan2(y, x) + fraction * turned
        words[first] = centre[first] + radius * math.cos(angle)
        words[second] = centre[second] + radius * math.sin(angle)
    elif fraction >= 1.0:
        for i in range(6):
            words[i] = end[i]


@numba.njit(cache=True, nogil=True)
def _pieces(
    start: np.ndarray,
    end: np.ndarray,
    turned: float,
    centre: np.ndarray,
    plane: int,
    lengths: np.ndarray,
    pivot_mm: float,
    origin: np.ndarray,
    axes: np.ndarray,
    limits: np.ndarray,
) -> float:
    """Pieces that one motion needs. ``limits``: tip off straight (mm), turn (rad), chord of an arc (mm).

    A smooth curve over a unit of time leaves its chord by at most an eighth of its greatest second
    derivative. Through one rotary axis at turning rate w, a point moving at rate v with second derivative s,
    nowhere further than r from the axis, gets second derivative of at most s + 2 w v + w^2 r and rate of at
    most v + w r; this is carried through the axes in turn. n pieces divide it by n^2.
    """
    speed, tilt, turn = 0.0, 0.0, 0.0
    for i in range(3):
        speed += (end[i] - start[i]) ** 2
    speed = math.sqrt(speed)
    arc = 0.0
    if turned != 0.0:
        radius = 0.0
        for i in range(3):
            if (plane == 17 and i != 2) or (plane == 18 and i != 1) or (plane == 19 and i != 0):
                radius += (start[i] - centre[i]) ** 2
        arc = math.sqrt(radius) * turned * turned
        speed += math.sqrt(radius) * abs(turned)
    for k in range(axes.shape[0]):
        rate = abs(axes[k, TURNS] * (end[int(axes[k, WORD])] - start[int(axes[k, WORD])]))
        turn += rate
        if axes[k, CARRIES] == 1.0:
            tilt += rate
    # The tip hangs from a point that moves as the words do, at a length that tilts.
    bend = tilt * tilt * (pivot_mm + lengths[1])
    speed += tilt * (pivot_mm + lengths[1])
    if turn > 0.0:
        first, last = np.empty(3), np.empty(3)
        axis = np.empty(3)
        _machine(start, lengths[0], lengths[1], pivot_mm, origin, axes, first, axis)
        _machine(end, lengths[0], lengths[1], pivot_mm, origin, axes, last, axis)
        for k in range(axes.shape[0]):
            if axes[k, CARRIES] == 0.0:
                rate = abs(axes[k, TURNS] * (end[int(axes[k, WORD])] - start[int(axes[k, WORD])]))
                # Greatest at an end if the point goes straight; it leaves straight by at most an eighth of
                # its bend.
                reach = max(_away(first, axes, k), _away(last, axes, k)) + (bend + arc) / 8.0
                bend += 2.0 * rate * speed + rate * rate * reach
                speed += rate * reach
                _into_work(start, axes, k, first, axis)
                _into_work(end, axes, k, last, axis)
    needed = max(math.sqrt(bend / (8.0 * limits[0])), math.sqrt(arc / (8.0 * limits[2])))
    return max(1.0, math.ceil(max(needed, turn / limits[1])))


@numba.njit(cache=True, nogil=True)
def count_pieces(
    starts: np.ndarray,
    ends: np.ndarray,
    turned: np.ndarray,
    centres: np.ndarray,
    planes: np.ndarray,
    lengths: np.ndarray,
    pivot_mm: float,
    origin: np.ndarray,
    axes: np.ndarray,
    limits: np.ndarray,
    counts: np.ndarray,
    jumps: np.ndarray,
) -> None:
    """Fill counts (n,) with pieces of each motion, jumps (n,) with 1 where it starts off the end before."""
    tip, axis = np.empty(3), np.empty(3)
    before, axis_before = np.empty(3), np.empty(3)
    for row in range(starts.shape[0]):
        counts[row] = _pieces(
            starts[row], ends[row], turned[row], centres[row], planes[row], lengths[row],
            pivot_mm, origin, axes, limits,
        )  # fmt: skip
        same = row == 0
        if row > 0:
            same = lengths[row, 0] == lengths[row - 1, 0] and lengths[row, 1] == lengths[row - 1, 1]
            for i in range(6):
                same = same and starts[row, i] == ends[row - 1, i]
        jumps[row] = 0
        if not same:
            pose(starts[row], lengths[row, 0], lengths[row, 1], pivot_mm, origin, axes, tip, axis)
            pose(
                ends[row - 1],
                lengths[row - 1, 0],
                lengths[row - 1, 1],
                pivot_mm,
                origin,
                axes,
                before,
                axis_before,
            )
            for i in range(3):
                if abs(tip[i] - before[i]) > limits[3] or abs(axis[i] - axis_before[i]) > limits[4]:
                    jumps[row] = 1


@numba.njit(cache=True, nogil=True)
def walk(
    starts: np.ndarray,
    ends: np.ndarray,
    turned: np.ndarray,
    centres: np.ndarray,
    planes: np.ndarray,
    lengths: np.ndarray,
    pivot_mm: float,
    origin: np.ndarray,
    axes: np.ndarray,
    counts: np.ndarray,
    jumps: np.ndarray,
    tips: np.ndarray,
    directions: np.ndarray,
    motion: np.ndarray,
    fraction: np.ndarray,
) -> int:
    """Fill the pieces: pose at the end of each, with a row of fraction 0 where a motion starts elsewhere."""
    words = np.empty(6)
    row = 0
    for m in range(starts.shape[0]):
        if m == 0 or jumps[m] == 1:
            pose(starts[m], lengths[m, 0], lengths[m, 1], pivot_mm, origin, axes, tips[row], directions[row])
            motion[row] = m if m > 0 else -1
            fraction[row] = 0.0
            row += 1
        for piece in range(1, int(counts[m]) + 1):
            part = piece / counts[m]
            between(starts[m], ends[m], part, turned[m], centres[m], planes[m], words)
            pose(words, lengths[m, 0], lengths[m, 1], pivot_mm, origin, axes, tips[row], directions[row])
            motion[row] = m
            fraction[row] = part
            row += 1
    return row


@numba.njit(cache=True, nogil=True)
def gauge_extremes(
    starts: np.ndarray,
    ends: np.ndarray,
    turned: np.ndarray,
    centres: np.ndarray,
    planes: np.ndarray,
    lengths: np.ndarray,
    pivot_mm: float,
    origin: np.ndarray,
    axes: np.ndarray,
    counts: np.ndarray,
    known: np.ndarray,
    lowest: np.ndarray,
    highest: np.ndarray,
    at: np.ndarray,
) -> None:
    """Extremes of the spindle gauge point (machine frame) over the motions, and the row each is met in.

    ``known`` (n, 3): 1 where the whole motion has a known place along that axis, 2 where only its end has, 0
    where none. ``lowest``, ``highest`` (3,) start at inf and -inf, ``at`` (2, 3) is filled with rows.
    """
    words, tip, axis = np.empty(6), np.empty(3), np.empty(3)
    for m in range(starts.shape[0]):
        pieces = int(counts[m])
        extra = 0
        begin = 0.0
        first, second = 0, 1
        if planes[m] == 18:
            first, second = 2, 0
        elif planes[m] == 19:
            first, second = 1, 2
        if turned[m] != 0.0:
            begin = math.atan2(starts[m, second] - centres[m, second], starts[m, first] - centres[m, first])
            extra = 4  # the quarter points, where an arc reaches furthest along its two axes
        for sample in range(-extra, pieces + 1):
            if sample >= 0:
                part = sample / pieces
            else:
                quarter = (-sample) * 0.5 * math.pi
                ahead = (quarter - begin) if turned[m] > 0.0 else (begin - quarter)
                ahead -= 2.0 * math.pi * math.floor(ahead / (2.0 * math.pi))
                part = ahead / abs(turned[m])
                if part > 1.0:
                    continue
            between(starts[m], ends[m], part, turned[m], centres[m], planes[m], words)
            _machine(words, lengths[m, 0], lengths[m, 1], pivot_mm, origin, axes, tip, axis)
            for i in range(3):
                if known[m, i] == 1 or (known[m, i] == 2 and sample == pieces):
                    place = tip[i] + lengths[m, 1] * axis[i]
                    if place < lowest[i]:
                        lowest[i] = place
                        at[0, i] = m
                    if place > highest[i]:
                        highest[i] = place
                        at[1, i] = m
