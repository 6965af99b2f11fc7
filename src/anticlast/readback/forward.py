"""Where the cutter goes in the part when a program that was read back runs on a machine: forward kinematics.

Written from the machine record and the definition of its fields alone; the half of the project that plans has
its own.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Final

import numpy as np

from anticlast import tolerances
from anticlast.errors import BadInput, Fault
from anticlast.readback import _forward_kernels as kernels
from anticlast.readback.checks import known_places
from anticlast.records import SIX, Machine, PartMotion, ReadProgram, Shape, frozen_array

MOST_PIECES: Final = 50_000_000
Extremes = tuple[float, float, int, int]


def part_motion(
    program: ReadProgram,
    machine: Machine,
    part_origin_mm: Sequence[float],
    gauge_length_by_tool: Mapping[int, float],
) -> PartMotion:
    """Return the motion of cutter tip and axis in part coordinates.

    The axes move linearly and together within a block, rapids too (NISTIR 6556 section 3.5.1). A motion is
    split so finely that the tip leaves straight by less than ``tolerances.PIECE_MM`` within a piece (arcs: by
    ``ARC_CHORD_MM`` more) and the rotary axes together turn by no more than ``PIECE_TURN_RAD``.

    Parameters
    ----------
    program : ReadProgram
        Its coordinates are taken to be those of G54, whose zero is the part origin with all rotary axes at 0.
    machine : Machine
    part_origin_mm : (3,)
        Where the part origin stands in the machine frame with all rotary axes at 0, mm.
    gauge_length_by_tool : Mapping[int, float]
        Spindle gauge point to tip of each cutter, mm; also the length offset of the H of the same number. 0
        is length 0.

    Returns
    -------
    PartMotion
        With one row more wherever a motion does not start where the one before ended (a new cutter or length
        offset was put in between): ``fraction`` is 0 there, and nothing moves from the row before to it. Row
        0 is such a row. Where the program does not say where an axis stands, its place is that in
        ``Motions.start``; ``known_places`` tells.

    Raises
    ------
    BadInput
        A cutter or H has no length, or the motion has more pieces than memory is given for.
    """
    motions = program.motions
    axes, origin, pivot, lengths, turned = _setting(program, machine, part_origin_mm, gauge_length_by_tool)
    count = len(motions.line)
    if count == 0:
        return _standing_still(axes, origin, pivot)
    counts, jumps = _counts(program, axes, origin, pivot, lengths, turned)
    rows = int(counts.sum()) + int(jumps.sum()) + 1
    tips, directions = np.empty((rows, 3)), np.empty((rows, 3))
    motion, fraction = np.empty(rows, dtype=np.int64), np.empty(rows)
    kernels.walk(
        motions.start, motions.end, turned, motions.centre, motions.plane, lengths,
        pivot, origin, axes, counts, jumps, tips, directions, motion, fraction,
    )  # fmt: skip
    row = np.maximum(motion, 0)
    line = motions.line[row].copy()
    line[0] = 0
    rapid = motions.shape[row] == Shape.RAPID
    rapid[0] = True
    return PartMotion(
        tip_mm=frozen_array(tips),
        axis=frozen_array(directions),
        line=frozen_array(line, np.int64),
        rapid=frozen_array(rapid, np.bool_),
        tool=frozen_array(motions.tool[row], np.int64),
        motion=frozen_array(motion, np.int64),
        fraction=frozen_array(fraction),
    )


def axis_travel(
    program: ReadProgram,
    machine: Machine,
    part_origin_mm: Sequence[float],
    gauge_length_by_tool: Mapping[int, float],
) -> dict[str, Extremes]:
    """Return how far each axis of the machine travels.

    For a linear axis: extremes of the spindle gauge point in the machine frame. Where the cutter does not
    tilt they are exact (the gauge point moves as the words do, and arcs are taken at their quarter points);
    where it tilts they are sampled at pieces within which the gauge point leaves straight by less than
    ``tolerances.PIECE_MM``. For a rotary axis: extremes of its word, degrees. Places that the program does
    not state (``known_places``) do not count.

    Parameters
    ----------
    program, machine, part_origin_mm, gauge_length_by_tool
        As in ``part_motion``.

    Returns
    -------
    dict of letter to (lowest, highest, line of lowest, line of highest)
        Letters of axes that never have a known place are left out.

    Raises
    ------
    BadInput
        A cutter or H has no length.
    """
    motions = program.motions
    axes, origin, pivot, lengths, turned = _setting(program, machine, part_origin_mm, gauge_length_by_tool)
    at_start, at_end = known_places(program)
    found: dict[str, Extremes] = {}
    if not len(motions.line):
        return found
    tilts = any(axis.carries == "cutter" for axis in machine.rotary)
    counts = np.ones(len(motions.line))
    if tilts:
        counts, _ = _counts(program, axes, origin, pivot, lengths, turned)
        tilting = [SIX.index(axis.letter) for axis in machine.rotary if axis.carries == "cutter"]
        at_start = at_start & at_start[:, tilting].all(axis=1, keepdims=True)
        at_end = at_end & at_end[:, tilting].all(axis=1, keepdims=True)
    known = np.where(at_start & at_end, 1, np.where(at_end, 2, 0)).astype(np.int64)[:, :3].copy()
    low, high, rows = np.full(3, np.inf), np.full(3, -np.inf), np.zeros((2, 3), dtype=np.int64)
    kernels.gauge_extremes(
        motions.start, motions.end, turned, motions.centre, motions.plane, lengths,
        pivot, origin, axes, counts, known, low, high, rows,
    )  # fmt: skip
    for axis in machine.linear:
        i = SIX.index(axis.letter)
        if low[i] <= high[i]:
            lines = motions.line[rows[:, i]]
            found[axis.letter] = (float(low[i]), float(high[i]), int(lines[0]), int(lines[1]))
    _, rotary_end = known_places(program)
    for axis in machine.rotary:
        i = SIX.index(axis.letter)
        stands = np.flatnonzero(rotary_end[:, i])
        if len(stands):
            words = motions.end[stands, i]
            least, most = int(words.argmin()), int(words.argmax())
            found[axis.letter] = (
                float(words[least]), float(words[most]),
                int(motions.line[stands[least]]), int(motions.line[stands[most]]),
            )  # fmt: skip
    return found


def _setting(
    program: ReadProgram,
    machine: Machine,
    part_origin_mm: Sequence[float],
    gauge_length_by_tool: Mapping[int, float],
) -> tuple[np.ndarray, np.ndarray, float, np.ndarray, np.ndarray]:
    """Return axes, part origin, pivot length, lengths (n, 2) and signed arc angles (n,) for the kernels."""
    axes = np.zeros((len(machine.rotary), kernels.AXIS_COLUMNS))
    for k, axis in enumerate(machine.rotary):
        axes[k, kernels.WORD] = SIX.index(axis.letter)
        axes[k, kernels.CARRIES] = 1.0 if axis.carries == "cutter" else 0.0
        axes[k, kernels.TURNS] = math.radians(axis.turns)
        axes[k, kernels.DIRECTION : kernels.DIRECTION + 3] = axis.direction
        axes[k, kernels.THROUGH : kernels.THROUGH + 3] = axis.through
    motions = program.motions
    lengths = np.zeros((len(motions.line), 2))
    for column, (name, numbers) in enumerate((("H", motions.offset_h), ("T", motions.tool))):
        for number in np.unique(numbers).tolist():
            if number and number not in gauge_length_by_tool:
                line = int(motions.line[np.argmax(numbers == number)])
                known = ", ".join(str(key) for key in sorted(gauge_length_by_tool)) or "none"
                message = f"no length is known for {name}{number}; known cutters: {known}"
                raise BadInput(Fault(program.path, line, "", message))
            lengths[numbers == number, column] = gauge_length_by_tool[number] if number else 0.0
    turned = np.where(motions.shape == Shape.ARC_CW, -motions.turns, motions.turns)
    origin = np.array(part_origin_mm, dtype=np.float64)
    return axes, origin, float(machine.pivot_length_mm), lengths, turned


def _counts(
    program: ReadProgram,
    axes: np.ndarray,
    origin: np.ndarray,
    pivot_mm: float,
    lengths: np.ndarray,
    turned: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:
    """Return pieces of each motion, and whether it starts off the end of the one before."""
    motions = program.motions
    counts, jumps = np.empty(len(turned)), np.empty(len(turned), dtype=np.uint8)
    limits = np.array(
        [
            tolerances.PIECE_MM,
            tolerances.PIECE_TURN_RAD,
            tolerances.ARC_CHORD_MM,
            tolerances.SAME_POINT_MM,
            tolerances.SAME_DIRECTION_RAD,
        ]
    )
    kernels.count_pieces(
        motions.start, motions.end, turned, motions.centre, motions.plane, lengths,
        pivot_mm, origin, axes, limits, counts, jumps,
    )  # fmt: skip
    total = counts.sum()
    if total > MOST_PIECES:
        worst = int(counts.argmax())
        message = (
            f"the motion has {total:.3g} straight pieces, {counts[worst]:.3g} of them on this line;"
            f" at most {MOST_PIECES} are taken"
        )
        raise BadInput(Fault(program.path, int(motions.line[worst]), "", message))
    return counts, jumps


def _standing_still(axes: np.ndarray, origin: np.ndarray, pivot_mm: float) -> PartMotion:
    tip, axis = np.empty((1, 3)), np.empty((1, 3))
    kernels.pose(np.zeros(6), 0.0, 0.0, pivot_mm, origin, axes, tip[0], axis[0])
    none = frozen_array([0], np.int64)
    return PartMotion(
        tip_mm=frozen_array(tip),
        axis=frozen_array(axis),
        line=none,
        rapid=frozen_array([True], np.bool_),
        tool=none,
        motion=frozen_array([-1], np.int64),
        fraction=frozen_array([0.0]),
    )
