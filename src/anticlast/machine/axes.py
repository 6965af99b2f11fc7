"""From a cutter path in part coordinates to program words: straight joint moves that keep to the intended path.

Between two rows of a stretch the reference point is meant to go straight and the axis to turn evenly; the control moves the
axes of the machine straight instead. The words are split until what the control does stays within a budget of what was
meant, checked by forward kinematics. docs/theory-machine.md, "Straight moves of the joints".
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from anticlast.errors import CannotPlan
from anticlast.machine import _kernels
from anticlast.machine.blocks import Blocks, joined, limit_notes, split_long, time_blocks
from anticlast.machine.branches import Chosen, Run, Wish, choose_all
from anticlast.machine.digits import Digits
from anticlast.machine.hops import Hops
from anticlast.machine.kinematics import Kinematics
from anticlast.posting.arcs import fit_arcs
from anticlast.records import AxisPath, CutterPath, Floats, Job, Operation, Purpose, Stretch, frozen_array
from anticlast.tolerances import (
    AXIS_STRAY_RAD,
    CHORD_SHARE_OF_SCALLOP,
    CHORD_SHARE_OF_STRIP,
    LINEAR_FLOOR_MM,
    LINEAR_SIDEWAYS_SHARE,
    POLE_RAD,
    SAME_DIRECTION_RAD,
    SAME_POINT_MM,
    SUBDIVISION_CAP,
)

# Share of the axis's allowance that a change of branch may use; the rest is for what happens between the rows.
CROSS_SHARE = 0.8
# Minutes of rotary travel that would have to be saved before the cutter is drawn off within a stretch: many more than a lift
# takes, since each leaves a mark outside the outline; and where only one side of the row is outside.
PAUSE_MIN = 1.0
PAUSE_AT_EDGE_MIN = 4.0


@dataclass(frozen=True, slots=True)
class Budget:
    """How far straight joint moves may leave the intended path, rounding of the words not counted.

    Attributes
    ----------
    point_mm : float
        For the reference point; with ``lever_mm`` times the angle of the axis for a cutter with a flat bottom.
    axis_rad : float
        For the cutter axis.
    lever_mm : float
        Distance from the cutter axis to the generating corner arc: 0 for a ball.
    sideways_mm : float
        For the reference point across the surface normal, where a shift hardly changes the scallop; >= ``point_mm``.
    link_mm : float
        For the reference point on links, entries and exits, which leave no scallop.
    """

    point_mm: float
    axis_rad: float
    lever_mm: float
    sideways_mm: float
    link_mm: float


def budget_of(operation: Operation) -> Budget:
    """Return what an operation leaves for straight joint moves.

    Half the tolerance, the other half being for chords; and what chords and joint moves together may add to the scallop.
    A pass that shifts sideways by a share e of its stepover raises a cusp by 4 e at most, since the cusp goes with the
    square of the distance between two passes that both shift; the rest is for height. A ball's blocks are held against
    the curve its centre is to follow, so chords are in that figure; for other cutters half is left to chords.
    """
    half = operation.tolerance_mm / 2.0
    point = sideways = half
    if operation.scallop_mm is not None:
        share = CHORD_SHARE_OF_STRIP if operation.pattern == "matched" else CHORD_SHARE_OF_SCALLOP
        step = math.sqrt(8.0 * operation.cutter.radius_mm * operation.scallop_mm)
        share = share if operation.cutter.shape == "ball" else share / 2.0
        point = min(half, (share - 4.0 * LINEAR_SIDEWAYS_SHARE) * operation.scallop_mm)
        sideways = min(half, LINEAR_SIDEWAYS_SHARE * step)
    point = max(point, LINEAR_FLOOR_MM)
    sideways = max(point, sideways)
    lever = operation.cutter.radius_mm - operation.cutter.corner_radius_mm
    # Half of the budget may go into the axis, so that the point keeps the other half.
    axis = AXIS_STRAY_RAD if lever <= 0.0 else min(AXIS_STRAY_RAD, 0.5 * point / lever)
    return Budget(point, axis, max(lever, 0.0), sideways, max(point, half))


def choose_rotary(
    job: Job, cutter_paths: Sequence[CutterPath], start_deg: Floats | None = None
) -> tuple[tuple[Chosen, ...], ...]:
    """Choose the rotary words of a whole program at once, and where the cutter is drawn off for an axis to turn back.

    Parameters
    ----------
    job : Job
    cutter_paths : sequence of CutterPath
        All operations, or some that follow each other, in cutting order.
    start_deg : (m,) or None
        Rotary words before the first of them; None for 0.

    Returns
    -------
    tuple of tuple of Chosen
        For each operation one of each stretch.

    Raises
    ------
    CannotPlan
        A cutter axis is out of reach, or an axis would have to jump in the cut.
    """
    wishes: list[Wish] = []
    for path in cutter_paths:
        kinematics = Kinematics(job.machine, job.part_origin_mm, path.operation.cutter.gauge_length_mm)
        allowed = budget_of(path.operation).axis_rad
        wishes += [
            Wish(kinematics, s.axis, s.tip_mm, CROSS_SHARE * allowed, allowed, _pauses(s))
            for s in path.stretches
        ]
    if not wishes:
        return tuple(() for _ in cutter_paths)
    start = np.zeros(wishes[0].kinematics.rotary_count) if start_deg is None else start_deg
    chosen = iter(choose_all(wishes, start))
    return tuple(tuple(next(chosen) for _ in path.stretches) for path in cutter_paths)


def _pauses(stretch: Stretch) -> Floats:
    """What it costs (n,) to draw the cutter off on each row: never in the cut, rather not on the edge of the outline."""
    outside = (stretch.purpose == Purpose.OVERRUN) | (stretch.purpose == Purpose.LINK)
    after = np.append(outside[1:], False)
    cost = np.where(outside & after, PAUSE_MIN, np.where(outside | after, PAUSE_AT_EDGE_MIN, np.inf))
    cost[[0, -1]] = np.inf
    return cost


def axis_path(
    job: Job,
    cutter_path: CutterPath,
    start_words: Floats | None = None,
    *,
    last: bool = False,
    chosen: Sequence[Chosen] | None = None,
) -> AxisPath:
    """Turn an operation's cutter path into motion of the machine axes.

    Parameters
    ----------
    job : Job
    cutter_path : CutterPath
        Stretches in part coordinates, in cutting order.
    start_words : (k,) or None
        Words where the operation before ended, with that operation's cutter; None for the first operation.
    last : bool
        The program ends with this operation: the rotary axes return to 0 at the end.
    chosen : sequence of Chosen, optional
        Rotary words of each stretch, as `choose_rotary` gives them for a whole program; chosen for this operation alone
        if not given.

    Returns
    -------
    AxisPath
        Words rounded to the digits that are posted. Row 0 is a rapid to a safe height (above where the machine stands,
        or for the first operation above the first approach with the rotary axes at 0), so that all words may be posted.

    Raises
    ------
    CannotPlan
        A cutter axis is out of reach, or the path cannot be kept to within ``SUBDIVISION_CAP`` blocks a move.
    """
    operation = cutter_path.operation
    kinematics = Kinematics(job.machine, job.part_origin_mm, operation.cutter.gauge_length_mm)
    digits = Digits.of(job)
    budget = budget_of(operation)
    hops = Hops(job, operation, kinematics, digits)
    stand = None if start_words is None else _with_this_cutter(job, operation, start_words)
    parts: list[Blocks] = []
    notes: dict[str, None] = {}
    start = stand
    if chosen is None:
        chosen = choose_rotary(job, [cutter_path], None if stand is None else stand[3:])[0]
    for stretch, words in zip(cutter_path.stretches, chosen, strict=True):
        notes.update(dict.fromkeys(words.notes))
        for run in words.runs:
            piece = _rows(stretch, run)
            cut, first = stretch_blocks(job, operation, kinematics, digits, budget, piece, run.rotary_deg)
            if stand is None:
                stand = start = hops.first_stand(first)
            parts += [hops.between(stand, first) if parts else hops.first(stand, first), cut]
            stand = cut.words[-1] if len(cut.words) else first
    rewinds = sum(len(words.runs) - 1 for words in chosen)
    if rewinds:
        notes[
            f"the cutter is lifted {rewinds} times more so that an axis can turn back inside its limits"
        ] = None
    if stand is None or start is None:
        raise CannotPlan("cutter path", f"operation {operation.index} has no motion to post")
    parts.append(hops.leave(stand, home=last))
    notes.update(dict.fromkeys(hops.notes))
    blocks = joined(parts)
    blocks = split_long(time_blocks(blocks, start, job), start, job, digits)
    notes.update(dict.fromkeys(limit_notes(kinematics, blocks.words)))
    return AxisPath(
        operation=operation,
        letters=kinematics.letters,
        words=frozen_array(blocks.words),
        rapid=frozen_array(blocks.rapid, np.bool_),
        minutes=frozen_array(blocks.minutes),
        purpose=frozen_array(blocks.purpose, np.uint8),
        pass_index=frozen_array(blocks.pass_index, np.int64),
        start=frozen_array(start),
        notes=tuple(notes),
        arcs=None if blocks.arcs is None else frozen_array(blocks.arcs),
    )


def _rows(stretch: Stretch, run: Run) -> Stretch:
    """The rows of a stretch that are one run."""
    if run.first == 0 and run.last == len(stretch.purpose) - 1:
        return stretch
    rows = slice(run.first, run.last + 1)
    return Stretch(
        tip_mm=stretch.tip_mm[rows],
        axis=stretch.axis[rows],
        contact_mm=stretch.contact_mm[rows],
        normal=stretch.normal[rows],
        purpose=stretch.purpose[rows],
        pass_index=stretch.pass_index[rows],
        feed_mm_min=stretch.feed_mm_min[rows],
    )


def _with_this_cutter(job: Job, operation: Operation, words: Floats) -> Floats:
    """Words where the machine stands after a cutter change: the axes stay, the tip moves by the difference of lengths.

    XYZ + part origin + (0, 0, L) is the pivot, or the gauge point, which a cutter change does not move.
    """
    at = next(i for i, other in enumerate(job.operations) if other.index == operation.index)
    before = job.operations[at - 1].cutter if at > 0 else operation.cutter
    stand = np.array(words, dtype=np.float64)
    stand[2] += before.gauge_length_mm - operation.cutter.gauge_length_mm
    return stand


def stretch_blocks(
    job: Job,
    operation: Operation,
    kinematics: Kinematics,
    digits: Digits,
    budget: Budget,
    stretch: Stretch,
    rotary_deg: Floats,
) -> tuple[Blocks, Floats]:
    """Blocks of one stretch, and the words (k,) of its first row.

    Raises
    ------
    CannotPlan
        Naming the place that the cap on blocks stopped at.
    """
    height = operation.cutter.reference_height_mm
    axis = np.ascontiguousarray(stretch.axis)
    point = np.ascontiguousarray(stretch.tip_mm + height * axis)
    rot = digits.round_angle(rotary_deg)
    first = digits.round_words(kinematics.place(point[:1], rot[:1], height))[0]
    # Rounding turns the axis by up to half a digit of each word whatever is done.
    slack = math.radians(0.5 * digits.angle_step_deg) * kinematics.rotary_count
    rate = np.array([a.feed for a in job.machine.rotary], dtype=np.float64)
    leaves_scallop = np.asarray(stretch.purpose) <= Purpose.OVERRUN
    budgets = np.where(leaves_scallop, budget.point_mm, budget.link_mm)
    normal = np.ascontiguousarray(stretch.normal)
    if (
        operation.arcs
        and not np.ptp(rot, axis=0).any()
        and float(np.ptp(axis, axis=0).max()) < SAME_DIRECTION_RAD
    ):
        return _arc_blocks(kinematics, digits, budget, stretch, point, rot, budgets), first
    row, share, words, failed, off, turned = _kernels.subdivide(
        kinematics.chain, kinematics.base, height, budget.lever_mm, point, axis, rot, rate, 1.0 / digits.angle_step_deg,
        normal, budget.point_mm / budget.sideways_mm, budget.lever_mm == 0.0, budgets, budget.axis_rad + slack, slack,
        POLE_RAD, SUBDIVISION_CAP,
    )  # fmt: skip
    if failed >= 0:
        raise _too_many(stretch, failed, off, turned, budget)
    minutes = row_minutes(stretch, point)
    part = np.diff(share, prepend=0.0)
    fresh = np.diff(row, prepend=0) != 0
    part[fresh] = share[fresh]
    made = Blocks(
        words=digits.round_words(words),
        rapid=np.zeros(len(row), dtype=np.bool_),
        minutes=minutes[row] * part,
        purpose=np.asarray(stretch.purpose)[row],
        pass_index=np.asarray(stretch.pass_index)[row],
    )
    return made.moving(first), first


def _arc_blocks(
    kinematics: Kinematics,
    digits: Digits,
    budget: Budget,
    stretch: Stretch,
    point: Floats,
    rot: Floats,
    budgets: Floats,
) -> Blocks:
    """Blocks of a stretch on which no rotary axis moves, as arcs where they keep to the path of the reference point."""
    height = float(np.linalg.norm(point[0] - stretch.tip_mm[0]))
    places = kinematics.place(point, rot, height)
    normal = kinematics.place(point + stretch.normal, rot, height)[:, :3] - places[:, :3]
    words = digits.round_words(places)
    row, arcs = fit_arcs(
        places[:, :3], normal, words[:, :3], np.asarray(stretch.purpose), np.asarray(stretch.pass_index),
        budgets + math.sqrt(0.75) * digits.length_step_mm, budget.point_mm / budget.sideways_mm, digits.length_step_mm,
        bowed=budget.lever_mm == 0.0, inch=digits.unit_mm != 1.0,
    )  # fmt: skip
    spent = np.cumsum(row_minutes(stretch, point))
    return Blocks(
        words=words[row],
        rapid=np.zeros(len(row), dtype=np.bool_),
        minutes=np.diff(spent[row], prepend=0.0),
        purpose=np.asarray(stretch.purpose)[row],
        pass_index=np.asarray(stretch.pass_index)[row],
        arcs=arcs,
    ).moving(words[0])


def row_minutes(stretch: Stretch, point: Floats) -> Floats:
    """Minutes that the feed asks for the move to each row (n,); 0 for row 0.

    On a pass the feed is that of the cutter contact. Where the contact stands still it is that of the reference point
    (n, 3), and on links and descents that of whichever goes further.
    """
    contact = np.linalg.norm(np.diff(stretch.contact_mm, axis=0), axis=1)
    reference = np.linalg.norm(np.diff(point, axis=0), axis=1)
    on_pass = (stretch.purpose[1:] == Purpose.CUT) | (stretch.purpose[1:] == Purpose.OVERRUN)
    length = np.where(on_pass & (contact > SAME_POINT_MM), contact, np.maximum(contact, reference))
    return np.append(0.0, length / stretch.feed_mm_min[1:])


def _too_many(stretch: Stretch, row: int, off_mm: float, turned_rad: float, budget: Budget) -> CannotPlan:
    """Say where, and by how much, straight joint moves could not be brought to the path."""
    x, y, z = stretch.contact_mm[row]
    where = f"before the contact ({x:.3f}, {y:.3f}, {z:.3f}), pass {int(stretch.pass_index[row]) + 1}"
    if off_mm > budget.point_mm:
        message = (
            f"straight moves of the axes stay {off_mm * 1e3:.2f} µm off the path {where}, {budget.point_mm * 1e3:.2f} µm"
            f" are allowed; lean the cutter away from the pole, allow a larger tolerance or post more digits"
        )
        return CannotPlan("linearisation", message, off_mm, budget.point_mm, "mm")
    turned, allowed = math.degrees(turned_rad), math.degrees(budget.axis_rad)
    message = (
        f"straight moves of the axes turn the cutter {turned:.4g} degrees off its wish {where}, {allowed:.4g} are"
        f" allowed; lean the cutter away from the pole, allow a larger tolerance or post more digits"
    )
    return CannotPlan("linearisation", message, turned, allowed, "deg")
