"""Cycle time: what the control makes of the posted blocks with the machine's speeds, accelerations and jerks.

The model follows the blocks in joint space (Lavernhe, Tournier, Lartigue, Int. J. Adv. Manuf. Technol. 37 (2008): the
slowest axis limits each block), rounds corners within a tolerance and looks ahead over the whole program.
docs/theory-machine.md, "Time".
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from anticlast.machine import _jerk_kernels, _motion_kernels, _speed_kernels
from anticlast.records import (
    SIX,
    Bools,
    Bytes,
    Event,
    Floats,
    Ints,
    Machine,
    Motions,
    MotionTimes,
    Shape,
    Wait,
    frozen_array,
)
from anticlast.tolerances import (
    ARC_PIECE_RAD,
    CORNER_DEG,
    CORNER_MM,
    CURVE_RESERVE,
    EXACT_PATH_RAD,
    HELD_BACK_SHARE,
)

# First and second axis of each arc plane, in the sense in which G3 turns (NISTIR 6556, section 3.5.3).
_PLANES = {17: (0, 1), 18: (2, 0), 19: (1, 2)}
_EXACT = {"G64": 0, "G61": 1, "G61.1": 2}


def estimate(motions: Motions, machine: Machine, events: Sequence[Event] = ()) -> MotionTimes:
    """Estimate the time of every motion of a program.

    Parameters
    ----------
    motions : Motions
        In order of execution; X Y Z in mm, A B C in degrees, ``seconds`` as F asks for.
    machine : Machine
        Its axes' speeds, accelerations and jerks, path mode and block rate. Words for axes it lacks take no time.
    events : sequence of Event
        What the program does besides moving: cutter changes, spindle starts, coolant and dwells become ``waits``.

    Returns
    -------
    MotionTimes
        ``seconds`` is never less than ``feed_only_s`` allows. The control stops between rapid and feed, where cutter,
        length offset or work offset change, and at every wait.

    Notes
    -----
    Every axis moves by its share of a block at the same time (NISTIR 6556, section 2.1.2.4), so one speed along the block
    decides; it is bounded by F, by each axis's fastest feed (rapid for G0), by the block rate and, on an arc, by v^2/r. A
    corner is passed at sqrt(A r) with r = d / (1/cos(th/2) - 1), d from ``tolerances``; along a curve every axis keeps
    inside its acceleration, the pull of the bend included. Then bounded jerk adds its share.
    """
    waits = waits_of(motions, machine, events)
    count = len(motions.line)
    if count == 0:
        empty = frozen_array(np.zeros(0))
        none = frozen_array(np.zeros(0), np.int8)
        return MotionTimes(empty, empty, frozen_array(np.zeros(0), np.uint8), none, waits)
    path = _joint_path(motions, machine)
    bounds = _bounds(motions, machine, path)
    stop = _stops(motions, path, waits)
    times, loads = _profile_times(machine, path, bounds, stop)
    seconds: Floats = np.bincount(path.row, weights=times, minlength=count).astype(np.float64)
    # What each axis does over a row; rows that stand still take no time.
    row_loads = np.zeros((count, len(machine.axes)))
    np.add.at(row_loads, path.row, loads)
    seconds = np.where(bounds.feed_s > 0.0, np.maximum(seconds, bounds.slowest_s), 0.0)
    held = _held_back(seconds, bounds)
    axis = np.where(held == 1, bounds.slowest_axis, np.where(held == 2, row_loads.argmax(axis=1), -1))
    return MotionTimes(
        seconds=frozen_array(seconds),
        feed_only_s=frozen_array(bounds.feed_s),
        held_back_by=frozen_array(held, np.uint8),
        axis=frozen_array(axis, np.int8),
        waits=waits,
    )


def waits_of(motions: Motions, machine: Machine, events: Sequence[Event]) -> tuple[Wait, ...]:
    """Times in which a program does not move: cutter changes, spindle starts, coolant and dwells.

    The first change is counted, for the cutter it asks for need not be in the spindle. A start is one from rest or into
    the other direction. Stops that wait for the operator (M0, M1) are not counted.
    """
    times = machine.times
    waits: list[Wait] = []
    tool, turning, wet = 0.0, 0.0, 0.0

    def add(event: Event, what: str, seconds: float) -> None:
        if seconds > 0.0:
            before = int(np.searchsorted(motions.line, event.line, side="left"))
            waits.append(Wait(event.line, what, seconds, before))

    for event in events:
        value = event.value if isinstance(event.value, float) else 0.0
        if event.what == "tool":
            add(event, "tool change", times.tool_change_s if value != tool else 0.0)
            tool = value
        elif event.what == "spindle":
            add(event, "spindle start", times.spindle_start_s if value * turning <= 0.0 and value else 0.0)
            turning = value
        elif event.what == "coolant":
            add(event, "coolant", times.coolant_s if value > wet else 0.0)
            wet = value
        elif event.what == "dwell":
            add(event, "dwell", value)
    return tuple(waits)


@dataclass(frozen=True, slots=True)
class _Path:
    """Pieces of the motions that move, arcs cut into short straight ones; (m, k) over the machine's axes.

    ``step`` is travel, mm or degrees; ``unit`` the direction and ``length`` the length in scaled joint space, where each
    axis's coordinate is multiplied by ``scale`` so that ``accel`` holds for all; ``row`` the motion and ``share`` the part
    of its time.
    """

    step: Floats
    unit: Floats
    length: Floats
    row: Ints
    share: Floats
    scale: Floats
    accel: float


def _joint_path(motions: Motions, machine: Machine) -> _Path:
    """Steps, directions and lengths of all pieces, in order."""
    columns = [SIX.index(letter) for letter in machine.letters]
    step = (motions.end - motions.start)[:, columns]
    arcs = motions.turns > 0.0
    parts = np.where(arcs, np.ceil(motions.turns / ARC_PIECE_RAD), 1.0).astype(np.int64)
    row = np.repeat(np.arange(len(step)), parts)
    place = np.arange(len(row)) - np.repeat(np.cumsum(parts) - parts, parts)
    step = step[row] / parts[row, None]
    for plane, pair in _PLANES.items():
        some = np.flatnonzero(arcs[row] & (motions.plane[row] == plane))
        rows = row[some]
        first, second = (columns.index(axis) for axis in pair)
        sense = np.where(motions.shape[rows] == Shape.ARC_CCW, 1.0, -1.0)
        start = motions.start[rows][:, pair] - motions.centre[rows][:, pair]
        turn = motions.turns[rows] / parts[rows]
        way = np.arctan2(start[:, 1], start[:, 0]) + sense * ((place[some] + 0.5) * turn + 0.5 * math.pi)
        size = np.hypot(start[:, 0], start[:, 1]) * turn
        step[some, first], step[some, second] = size * np.cos(way), size * np.sin(way)
    accel = np.array([axis.acceleration for axis in machine.axes])
    reference = float(accel[[axis.kind == "linear" for axis in machine.axes]].min())
    scaled = step * (reference / accel)
    length = np.linalg.norm(scaled, axis=1)
    moving = length > 0.0
    step, length, row = step[moving], length[moving], row[moving]
    unit = np.ascontiguousarray(scaled[moving] / length[:, None])
    return _Path(step, unit, length, row, 1.0 / parts[row], reference / accel, reference)


@dataclass(frozen=True, slots=True)
class _Bounds:
    """Seconds that each motion takes at least: by F (or G0's rate), axis speeds, block rate, and all of them with v^2/r.

    ``slowest_axis`` is the axis that decides ``axis_s``; ``piece_s`` the least time of each piece of the path.
    """

    feed_s: Floats
    axis_s: Floats
    rate_s: Floats
    slowest_s: Floats
    slowest_axis: Ints
    piece_s: Floats


def _bounds(motions: Motions, machine: Machine, path: _Path) -> _Bounds:
    count = len(motions.line)
    rapid = motions.shape == Shape.RAPID
    fastest = np.array([[axis.feed for axis in machine.axes], [axis.rapid for axis in machine.axes]])
    each = 60.0 * np.abs(path.step) / fastest[rapid[path.row].astype(np.int64)]
    by_axis = np.zeros((count, len(machine.axes)))
    np.maximum.at(by_axis, path.row, each / path.share[:, None])
    axis_s = by_axis.max(axis=1)
    moves = np.zeros(count, dtype=np.bool_)
    moves[path.row] = True
    wanted = np.where(np.isfinite(motions.seconds), motions.seconds, axis_s)
    feed_s = np.where(moves, np.where(rapid, axis_s, wanted), 0.0)
    rate = machine.control.block_rate
    rate_s = np.full(count, 1.0 / rate if rate > 0.0 else 0.0)
    slowest = np.maximum(np.maximum(feed_s, rate_s), _arc_seconds(motions, machine))
    piece_s = np.maximum(slowest[path.row] * path.share, each.max(axis=1))
    return _Bounds(
        feed_s, axis_s, rate_s, np.maximum(slowest, np.where(motions.turns > 0.0, 0.0, axis_s)),
        by_axis.argmax(axis=1), piece_s,
    )  # fmt: skip


def _arc_seconds(motions: Motions, machine: Machine) -> Floats:
    """Least time of each arc (n,) by v^2/r: the slower axis of its plane has to give it all round. 0 on straight rows."""
    accel = {axis.letter: axis.acceleration for axis in machine.axes}
    seconds = np.zeros(len(motions.line))
    for plane, pair in _PLANES.items():
        rows = np.flatnonzero((motions.turns > 0.0) & (motions.plane == plane))
        radius = np.linalg.norm(motions.start[rows][:, pair] - motions.centre[rows][:, pair], axis=1)
        seconds[rows] = motions.turns[rows] * np.sqrt(radius / min(accel[SIX[i]] for i in pair))
    return seconds


def _profile_times(machine: Machine, path: _Path, bounds: _Bounds, stop: Bools) -> tuple[Floats, Floats]:
    """Seconds of each piece (m,) by look-ahead over all of them, and seconds times load of each axis (m, k)."""
    if len(path.row) == 0:
        return np.zeros(0), np.zeros((0, len(machine.axes)))
    linear = np.array([1.0 if axis.kind == "linear" else 0.0 for axis in machine.axes])
    jerk = np.array([axis.jerk for axis in machine.axes]) * path.scale
    cap = path.length / bounds.piece_s
    exact = _EXACT[machine.control.path_mode]
    kind, limit, curve, zone = _motion_kernels.bends(
        path.unit, path.length, cap, stop, exact, path.scale, linear, CORNER_MM, CORNER_DEG, path.accel, jerk,
        EXACT_PATH_RAD,
    )  # fmt: skip
    if np.isfinite(jerk).any():
        _motion_kernels.jerk_limits(
            path.unit,
            path.length,
            cap,
            kind,
            limit,
            curve,
            path.scale,
            linear,
            CORNER_MM,
            CORNER_DEG,
            path.accel,
            jerk,
        )
    block, vertex, size, free, top = _speed_kernels.pieces(
        path.unit, path.length, cap, kind, limit, curve, zone, path.accel
    )
    on_curves = path.accel * (1.0 - CURVE_RESERVE)
    squares = _speed_kernels.squares(block, vertex, size, free, top, path.unit, curve, on_curves)
    lines = _speed_kernels.profile(block, vertex, size, free, cap, squares)
    along_jerk = _finite_inverse((np.abs(path.unit) / jerk).max(axis=1))[block]
    lost = _jerk_kernels.jerk_losses(*lines, free, along_jerk)
    seconds: Floats = np.bincount(block[lines[0]], weights=lines[3] + lost, minlength=len(path.row)).astype(
        np.float64
    )
    return seconds, _speed_kernels.loads(*lines, block, vertex, path.unit, curve, path.accel)


def _finite_inverse(values: Floats) -> Floats:
    """1/x, infinite where x is 0."""
    return np.divide(1.0, values, out=np.full(len(values), math.inf), where=values > 0.0)


def _stops(motions: Motions, path: _Path, waits: tuple[Wait, ...]) -> Bools:
    """Pieces before which the control stands still: between rapid and feed, at waits, where an offset or the cutter changes."""
    count = len(motions.line)
    stop = np.ones(count, dtype=np.bool_)
    rapid = motions.shape == Shape.RAPID
    stop[1:] = rapid[1:] != rapid[:-1]
    for modal in (motions.tool, motions.offset_h, motions.work_offset):
        stop[1:] |= modal[1:] != modal[:-1]
    stop[1:] |= np.any(motions.start[1:] != motions.end[:-1], axis=1)
    for wait in waits:
        if wait.before < count:
            stop[wait.before] = True
    # A stop before a motion that does not move is one before the next that does.
    passed = np.cumsum(stop)[path.row]
    pieces = np.ones(len(path.row), dtype=np.bool_)
    pieces[1:] = passed[1:] != passed[:-1]
    return pieces


def _held_back(times: Floats, bounds: _Bounds) -> Bytes:
    """Name what made each motion slower than its feed: 0 nothing, 1 axis speed, 2 acceleration or corner, 3 block rate."""
    steady = np.maximum(np.maximum(bounds.feed_s, bounds.axis_s), bounds.rate_s)
    by_speed = steady - bounds.feed_s
    by_dynamics = times - steady
    cause = np.where(bounds.rate_s > bounds.axis_s, 3, 1)
    cause = np.where(by_dynamics > by_speed, 2, cause)
    held = (bounds.feed_s > 0.0) & (times > bounds.feed_s * (1.0 + HELD_BACK_SHARE))
    return np.where(held, cause, 0).astype(np.uint8)
