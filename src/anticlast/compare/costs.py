"""What a case costs: passes, length, honest time, cutting speed, rotary travel, and what the rotary limits add."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from anticlast.machine.axes import row_minutes
from anticlast.machine.kinematics import Kinematics
from anticlast.machine.motion import estimate
from anticlast.records import (
    SIX,
    AxisPath,
    CutterPath,
    Floats,
    Job,
    Machine,
    Motions,
    Purpose,
    ReadProgram,
    Shape,
)

# A block's time is an axis's own, not the feed's, when it is within this share of what the axis needs: F is rounded.
_DECIDES = 1e-3
# An axis so much faster never decides.
_FREE = 1e6
# Words read back are the words posted, but for the last bit of an inch; a run of blocks starts on a row of the cutter path
# but for what rounding its words to posted digits moves it (mm).
_SAME_WORD = 1e-6
_SAME_PLACE_MM = 2e-3
# The axis square to the planes of G17, G18 and G19.
_AXIAL = np.array([2, 1, 0])


@dataclass(frozen=True, slots=True)
class HeldBack:
    """How long the axes hold the feed back, seconds of feed motion.

    Attributes
    ----------
    by_all_s : float
        Time it takes, less what the wished feed asks for: all limits of all axes, and the block rate.
    by_rotary_s : float
        Time it takes, less what it would take if rotary axes had no limits of speed, acceleration and jerk. The rest is
        linear axes, which have to follow the part as it turns.
    by_speed_s : dict
        By axis letter: what F had to give up on blocks that the axis's fastest feed decides.
    """

    by_all_s: float
    by_rotary_s: float
    by_speed_s: dict[str, float]


@dataclass(frozen=True, slots=True)
class Costs:
    """What a case costs.

    Attributes
    ----------
    passes, lifts, blocks : int
        ``lifts`` counts how often the cutter leaves the part between passes.
    cut_length_mm : float
        Contact path inside the outline.
    scallop_mm : float
        Highest scallop predicted.
    time_s, feed_only_s, cut_only_s : float
        Estimated from the text that was read back, waits for cutter and spindle included; as F alone asks for; cut length over
        the feed, which nothing beats.
    least_speed_m_min : float
        Smallest cutting speed at a contact on the finished surface.
    rotary_travel_deg : dict
        By axis letter, all motion.
    held_back : HeldBack or None
        None where posted blocks cannot be told from the text (a post of one's own).
    """

    passes: int
    lifts: int
    blocks: int
    cut_length_mm: float
    scallop_mm: float
    time_s: float
    feed_only_s: float
    cut_only_s: float
    least_speed_m_min: float
    rotary_travel_deg: dict[str, float]
    held_back: HeldBack | None


def costs_of(job: Job, path: CutterPath, axes: AxisPath, program: ReadProgram) -> Costs:
    """Return the costs of a job's only operation, from its plan and from the text that was read back."""
    times = estimate(program.motions, job.machine, program.events)
    travel = np.abs(program.motions.end - program.motions.start).sum(axis=0)
    return Costs(
        passes=path.passes,
        lifts=len(path.stretches) - 1,
        blocks=program.blocks,
        cut_length_mm=path.cut_length_mm,
        scallop_mm=path.scallop_predicted_mm,
        time_s=times.total_s,
        feed_only_s=float(times.feed_only_s.sum()),
        cut_only_s=60.0 * path.cut_length_mm / path.operation.feed_mm_min,
        least_speed_m_min=least_speed_m_min(path),
        rotary_travel_deg={axis.letter: float(travel[SIX.index(axis.letter)]) for axis in job.machine.rotary},
        held_back=held_back(job, path, axes, program.motions),
    )


def least_speed_m_min(path: CutterPath) -> float:
    """Return the smallest cutting speed [m/min] at the contact, over the passes inside the outline.

    The contact lies (D/2 - r) + r sin(t) off the cutter's axis, t the angle between axis and surface normal, r the corner
    radius: for a ball D/2 sin(t), nothing where the ball stands along the normal.
    """
    operation, least = path.operation, math.inf
    cutter = operation.cutter
    for stretch in path.stretches:
        cut = stretch.purpose == Purpose.CUT
        if cut.any():
            sine = np.linalg.norm(np.cross(stretch.axis[cut], stretch.normal[cut]), axis=1)
            off_axis = cutter.radius_mm - cutter.corner_radius_mm * (1.0 - sine)
            least = min(least, float(off_axis.min()))
    return 2.0 * math.pi * least * operation.spindle_rpm / 1000.0 if math.isfinite(least) else 0.0


# ---------------------------------------------------------------------------------------- held back


def held_back(job: Job, path: CutterPath, axes: AxisPath, motions: Motions) -> HeldBack | None:
    """Return how long axis limits hold the feed back; None if motions are not the posted blocks.

    F already gives way to slow axes when it is posted, so what the feed asked for is taken from the cutter path.
    """
    asked = asked_seconds(job, path, axes, motions)
    if asked is None:
        return None
    feeding = motions.shape != Shape.RAPID
    posted = np.where(feeding, motions.seconds, 0.0)
    # Both times from the same wish, so that what it leaves out cancels.
    wished = replace(motions, seconds=np.where(feeding, asked, motions.seconds))
    took, freed = (
        float(estimate(wished, machine).seconds[feeding].sum())
        for machine in (job.machine, _free_rotary(job.machine))
    )
    by_speed = {}
    for axis in job.machine.axes:
        column = SIX.index(axis.letter)
        needs = 60.0 * np.abs(motions.end[:, column] - motions.start[:, column]) / axis.feed
        decides = feeding & (needs > 0.0) & (needs >= posted * (1.0 - _DECIDES))
        by_speed[axis.letter] = float(np.maximum(posted - asked, 0.0)[decides].sum())
    return HeldBack(took - float(asked[feeding].sum()), took - freed, by_speed)


def _free_rotary(machine: Machine) -> Machine:
    """Return the machine with rotary axes that nothing slows down."""
    free = tuple(
        axis
        if axis.kind == "linear"
        else replace(
            axis, feed=axis.feed * _FREE, rapid=axis.rapid * _FREE, acceleration=axis.acceleration * _FREE,
            jerk=axis.jerk * _FREE,
        )
        for axis in machine.axes
    )  # fmt: skip
    return replace(machine, axes=free)


def asked_seconds(job: Job, path: CutterPath, axes: AxisPath, motions: Motions) -> Floats | None:
    """Return the seconds (n,) that the wished feed asks for each motion, axis limits aside; None if it cannot be told.

    Blocks run along the reference points of a stretch, over which its rows spread the time asked for: so much time to so
    much length. On descents and lifts it is the time posted.
    """
    columns = [SIX.index(letter) for letter in axes.letters]
    first = len(motions.line) - len(axes.words)
    if first < 0 or not np.allclose(motions.end[first:, columns], axes.words, rtol=0.0, atol=_SAME_WORD):
        return None
    asked = np.array(motions.seconds)
    height = path.operation.cutter.reference_height_mm
    stretches = iter(path.stretches)
    point, planned, minutes = np.zeros((0, 3)), np.zeros(0), np.zeros(0)
    for run in _runs(axes):
        words = (
            axes.words[run.start - 1 : run.stop]
            if run.start
            else np.vstack((axes.start, axes.words[: run.stop]))
        )
        moved = _reference(job, path, words)
        row = _row_at(point, moved[0])
        while row is None:
            stretch = next(stretches, None)
            if stretch is None:
                return None
            point = stretch.tip_mm + height * stretch.axis
            planned, minutes = _run_length(point), np.cumsum(row_minutes(stretch, point))
            row = _row_at(point, moved[0])
        rows = slice(first + run.start, first + run.stop)
        along = planned[row] + _travelled(moved, motions, rows)
        last = _row_at(point, moved[-1], np.abs(planned - along[-1]))
        if last is None or last < row:
            return None
        if along[-1] > along[0]:
            along = planned[row] + (along - along[0]) * (
                (planned[last] - planned[row]) / (along[-1] - along[0])
            )
        asked[rows] = 60.0 * np.diff(np.interp(along, planned, minutes))
        # The cutter may be drawn off within a stretch, for an axis to turn back; what follows starts further on.
        point, planned, minutes = point[last:], planned[last:], minutes[last:]
    return asked


def _row_at(point: Floats, place: Floats, off: Floats | None = None) -> int | None:
    """Return the row that lies at a place, None if none does; of several the first, or the one where ``off`` is least."""
    rows = np.flatnonzero(np.linalg.norm(point - place, axis=1) <= _SAME_PLACE_MM)
    if not rows.size:
        return None
    return int(rows[0]) if off is None else int(rows[np.argmin(off[rows])])


def _travelled(moved: Floats, motions: Motions, rows: slice) -> Floats:
    """Return how far the reference point (n + 1, 3) has gone after each motion [mm]: straight, or round an arc."""
    step = np.linalg.norm(np.diff(moved, axis=0), axis=1)
    turns = motions.turns[rows]
    arcs = np.flatnonzero(turns > 0.0)
    if arcs.size:
        # Arcs are posted only where no rotary axis moves: the reference point goes as X Y Z do.
        axial = _AXIAL[motions.plane[rows][arcs].astype(np.int64) - 17]
        spoke = motions.start[rows][arcs, :3] - motions.centre[rows][arcs]
        climb = (motions.end[rows][arcs, :3] - motions.start[rows][arcs, :3])[np.arange(arcs.size), axial]
        spoke[np.arange(arcs.size), axial] = 0.0
        step[arcs] = np.hypot(np.linalg.norm(spoke, axis=1) * turns[arcs], climb)
    return np.concatenate(([0.0], np.cumsum(step)))


def _runs(axes: AxisPath) -> list[slice]:
    """Return the runs of blocks between moves that belong to no pass, in order."""
    on = np.concatenate(([False], axes.pass_index >= 0, [False]))
    edges = np.flatnonzero(on[1:] != on[:-1])
    return [slice(int(low), int(high)) for low, high in edges.reshape(-1, 2)]


def _run_length(point: Floats) -> Floats:
    """Return the length [mm] from the first point (n,)."""
    return np.concatenate(([0.0], np.cumsum(np.linalg.norm(np.diff(point, axis=0), axis=1))))


def _reference(job: Job, path: CutterPath, words: Floats) -> Floats:
    """Return the reference point (n, 3) of the cutter at words."""
    cutter = path.operation.cutter
    tip, axis = Kinematics(job.machine, job.part_origin_mm, cutter.gauge_length_mm).forward(words)
    return tip + cutter.reference_height_mm * axis
