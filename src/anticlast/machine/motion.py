"""Cycle time: what the control makes of the posted blocks with the machine's speeds, accelerations and jerks.

The model follows the blocks in joint space (Lavernhe, Tournier, Lartigue, Int. J. Adv. Manuf. Technol. 37 (2008): the
slowest axis limits each block), rounds corners within a tolerance and looks ahead over the whole program.
docs/theory-machine.md, "Time".
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from anticlast.machine import _motion_kernels
from anticlast.records import (
    SIX,
    Bools,
    Bytes,
    Floats,
    Ints,
    Machine,
    Motions,
    MotionTimes,
    Shape,
    frozen_array,
)
from anticlast.tolerances import CORNER_DEG, CORNER_MM, EXACT_PATH_RAD, HELD_BACK_SHARE

# First and second axis of each arc plane, in the sense in which G3 turns (NISTIR 6556, section 3.5.3).
_PLANES = {17: (0, 1), 18: (2, 0), 19: (1, 2)}
_EXACT = {"G64": 0, "G61": 1, "G61.1": 2}


def estimate(motions: Motions, machine: Machine) -> MotionTimes:
    """Estimate the time of every motion of a program.

    Parameters
    ----------
    motions : Motions
        In order of execution; X Y Z in mm, A B C in degrees, ``seconds`` as F asks for.
    machine : Machine
        Its axes' speeds, accelerations and jerks, path mode and block rate. Words for axes it lacks take no time.

    Returns
    -------
    MotionTimes
        ``seconds`` is never less than ``feed_only_s`` allows. The control stops between rapid and feed, and where cutter,
        length offset or work offset change.

    Notes
    -----
    Every axis moves by its share of a block at the same time (NISTIR 6556, section 2.1.2.4), so one speed along the block
    decides; it is bounded by F, by each axis's fastest feed (rapid for G0), by the block rate and, on an arc, by v^2/r. A
    corner is passed at sqrt(A r) with r = d / (1/cos(th/2) - 1), d from ``tolerances``.
    """
    count = len(motions.line)
    if count == 0:
        empty = frozen_array(np.zeros(0))
        return MotionTimes(empty, empty, frozen_array(np.zeros(0), np.uint8))
    paths = _joint_paths(motions, machine)
    bounds = _bounds(motions, machine, paths)
    moving = np.flatnonzero(paths.length > 0.0)
    times = np.zeros(count)
    if moving.size:
        times[moving] = _moving_times(motions, machine, paths, bounds, moving)
        times = np.maximum(times, np.where(paths.length > 0.0, bounds.slowest_s, 0.0))
    return MotionTimes(
        seconds=frozen_array(times),
        feed_only_s=frozen_array(bounds.feed_s),
        held_back_by=frozen_array(_held_back(times, bounds), np.uint8),
    )


@dataclass(frozen=True, slots=True)
class _Paths:
    """Motions in joint space, one row each, one column for each axis of the machine.

    ``entering`` and ``leaving`` are travel per block in the directions at start and end (equal on straight rows), mm or
    degrees; ``most`` the most that each axis's speed can come to, times the block's time. ``length`` is the path's length
    in scaled joint space, ``scale`` (n, k) the factors.
    """

    entering: Floats
    leaving: Floats
    chord: Floats
    most: Floats
    length: Floats
    scale: Floats
    accel: float
    radius_mm: Floats
    arc_mm: Floats


def _joint_paths(motions: Motions, machine: Machine) -> _Paths:
    """Directions and lengths of all motions."""
    columns = [SIX.index(letter) for letter in machine.letters]
    chord = (motions.end - motions.start)[:, columns]
    accel = np.array([axis.acceleration for axis in machine.axes])
    linear = np.array([axis.kind == "linear" for axis in machine.axes])
    reference = float(accel[linear].min())
    scale = np.tile(reference / accel, (len(chord), 1))
    entering, leaving, most = chord.copy(), chord.copy(), np.abs(chord)
    radius, arc_mm = np.zeros(len(chord)), np.zeros(len(chord))
    arcs = (motions.shape == Shape.ARC_CW) | (motions.shape == Shape.ARC_CCW)
    for plane, pair in _PLANES.items():
        rows = np.flatnonzero(arcs & (motions.plane == plane))
        at = [columns.index(axis) for axis in pair]
        sense = np.where(motions.shape[rows] == Shape.ARC_CCW, 1.0, -1.0)
        centre = motions.centre[rows][:, pair]
        start, end = motions.start[rows][:, pair] - centre, motions.end[rows][:, pair] - centre
        radius[rows] = np.linalg.norm(start, axis=1)
        arc_mm[rows] = radius[rows] * motions.turns[rows]
        for vectors, place in ((start, entering), (end, leaving)):
            across = np.maximum(np.linalg.norm(vectors, axis=1), 1e-12)
            unit = sense * arc_mm[rows] / across
            place[rows, at[0]] = -vectors[:, 1] * unit
            place[rows, at[1]] = vectors[:, 0] * unit
        for axis in at:
            most[rows, axis] = arc_mm[rows]
            # Both axes of the plane share the slower one's acceleration, for the direction turns from one to the other.
            scale[rows, axis] = reference / min(accel[at[0]], accel[at[1]])
    length = np.linalg.norm(entering * scale, axis=1)
    return _Paths(entering, leaving, chord, most, length, scale, reference, radius, arc_mm)


@dataclass(frozen=True, slots=True)
class _Bounds:
    """Seconds that each motion takes at least: by F (or G0's rate), by axis speeds, by the block rate, and all together."""

    feed_s: Floats
    axis_s: Floats
    rate_s: Floats
    slowest_s: Floats


def _bounds(motions: Motions, machine: Machine, paths: _Paths) -> _Bounds:
    rapid = motions.shape == Shape.RAPID
    fastest = np.array([[axis.feed for axis in machine.axes], [axis.rapid for axis in machine.axes]])
    axis_s = 60.0 * (paths.most / fastest[rapid.astype(np.int64)]).max(axis=1)
    wanted = np.where(np.isfinite(motions.seconds), motions.seconds, axis_s)
    feed_s = np.where(rapid, axis_s, wanted)
    feed_s = np.where(paths.length > 0.0, feed_s, 0.0)
    rate = machine.control.block_rate
    rate_s = np.full(len(feed_s), 1.0 / rate if rate > 0.0 else 0.0)
    # v^2/r on an arc: the plane's slower axis has to give it.
    with np.errstate(divide="ignore", invalid="ignore"):
        pull_s = np.where(
            paths.arc_mm > 0.0, paths.arc_mm / np.sqrt(_arc_accel(motions, machine) * paths.radius_mm), 0.0
        )
    slowest = np.maximum(np.maximum(feed_s, axis_s), np.maximum(rate_s, pull_s))
    return _Bounds(feed_s, axis_s, rate_s, slowest)


def _arc_accel(motions: Motions, machine: Machine) -> Floats:
    """The smaller acceleration of the two axes of each motion's plane (n,), mm/s^2."""
    accel = {axis.letter: axis.acceleration for axis in machine.axes}
    least = {plane: min(accel[SIX[i]] for i in pair) for plane, pair in _PLANES.items()}
    return np.select(
        [motions.plane == plane for plane in least], list(least.values()), default=min(least.values())
    )


def _moving_times(motions: Motions, machine: Machine, paths: _Paths, bounds: _Bounds, moving: Ints) -> Floats:
    """Seconds of the rows that move, by look-ahead over all of them."""
    scale, length = paths.scale[moving], paths.length[moving]
    entering = paths.entering[moving] * scale / length[:, None]
    leaving = paths.leaving[moving] * scale
    leaving /= np.linalg.norm(leaving, axis=1)[:, None]
    # Along the block every axis keeps inside its own acceleration and jerk.
    per_length = paths.most[moving] / length[:, None]
    accel = np.array([axis.acceleration for axis in machine.axes])
    jerk = np.array([axis.jerk for axis in machine.axes])
    along_accel = 1.0 / (per_length / accel).max(axis=1)
    along_jerk = _finite_inverse((per_length / jerk).max(axis=1))
    cap = length / bounds.slowest_s[moving]
    corner = _motion_kernels.corner_speeds(
        leaving, entering, paths.chord[moving] * scale, length, cap, _stops(motions, moving),
        _EXACT[machine.control.path_mode], paths.accel / accel, _linear_flags(machine), CORNER_MM, CORNER_DEG,
        paths.accel, EXACT_PATH_RAD,
    )  # fmt: skip
    return _motion_kernels.block_times(length, cap, along_accel, along_jerk, corner)


def _finite_inverse(values: Floats) -> Floats:
    """1/x, infinite where x is 0."""
    return np.divide(1.0, values, out=np.full(len(values), math.inf), where=values > 0.0)


def _linear_flags(machine: Machine) -> Floats:
    return np.array([1.0 if axis.kind == "linear" else 0.0 for axis in machine.axes])


def _stops(motions: Motions, rows: Ints) -> Bools:
    """Rows before which the control stands still: between rapid and feed, and where an offset or the cutter changes."""
    stop = np.ones(len(rows), dtype=np.bool_)
    if len(rows) > 1:
        now, before = rows[1:], rows[:-1]
        rapid = motions.shape == Shape.RAPID
        stop[1:] = rapid[now] != rapid[before]
        for modal in (motions.tool, motions.offset_h, motions.work_offset):
            stop[1:] |= modal[now] != modal[before]
        stop[1:] |= np.any(motions.start[now] != motions.end[before], axis=1)
    return stop


def _held_back(times: Floats, bounds: _Bounds) -> Bytes:
    """Name what made each motion slower than its feed: 0 nothing, 1 axis speed, 2 acceleration or corner, 3 block rate."""
    steady = np.maximum(np.maximum(bounds.feed_s, bounds.axis_s), bounds.rate_s)
    by_speed = steady - bounds.feed_s
    by_dynamics = times - steady
    cause = np.where(bounds.rate_s > bounds.axis_s, 3, 1)
    cause = np.where(by_dynamics > by_speed, 2, cause)
    held = (bounds.feed_s > 0.0) & (times > bounds.feed_s * (1.0 + HELD_BACK_SHARE))
    return np.where(held, cause, 0).astype(np.uint8)
