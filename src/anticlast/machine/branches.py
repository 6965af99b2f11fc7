"""Which of the possible rotary words a machine takes along a program: continuous, inside limits, with least travel.

Two rotary axes reach almost every cutter axis in two ways, each repeated every full turn. Taken row by row the nearest of
them is not good enough: a choice that is short now can run into a limit later. So all rows of all stretches are decided at
once, by dynamic programming. Where an axis cannot go on inside its limits, the cutter is drawn off outside the outline or
on a link and the axis turns back above the part. docs/theory-machine.md, "Choosing branches".
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from anticlast.errors import CannotPlan
from anticlast.machine import _kernels
from anticlast.machine.kinematics import Kinematics, RotaryChoices, limit_arrays
from anticlast.records import Bytes, Floats
from anticlast.tolerances import LIMIT_DEG, LIMIT_MM


@dataclass(frozen=True, slots=True)
class Wish:
    """Cutter axes of one stretch, and how exactly they are to be met.

    Attributes
    ----------
    kinematics : Kinematics
        The same machine in all wishes of a program; the cutter may differ.
    axis : (n, 3)
        Unit cutter axes in part coordinates, n >= 1.
    tip_mm : (n, 3) or None
        Cutter tips in part coordinates: if given, branches that keep X Y Z inside their limits are preferred.
    cross_rad : float
        The axis may be off its wish by this much while the machine changes from one branch to the other.
    reach_rad : float
        The words may miss a row's axis by this much.
    pause : (n,) or None
        What it costs to draw the cutter off on a row and put it back with other words, in minutes of travel; infinite where
        that must not be. None: nowhere.
    """

    kinematics: Kinematics
    axis: Floats
    tip_mm: Floats | None
    cross_rad: float
    reach_rad: float
    pause: Floats | None = None


@dataclass(frozen=True, slots=True)
class Run:
    """Part of a stretch that is cut without lifting: rows ``first`` to ``last``, both included, and their rotary words.

    ``rotary_deg`` is (last - first + 1, m). A run starts on the row that the one before ended on.
    """

    first: int
    last: int
    rotary_deg: Floats


@dataclass(frozen=True, slots=True)
class Chosen:
    """Rotary words of one stretch.

    Attributes
    ----------
    runs : tuple of Run
        In order; one, unless the cutter is drawn off on the way.
    notes : tuple of str
        One sentence for each axis that no choice could keep inside its limits.
    """

    runs: tuple[Run, ...]
    notes: tuple[str, ...]

    @property
    def rotary_deg(self) -> Floats:
        """Words (n, m) of all rows, degrees; where the cutter is drawn off, those with which the row is left."""
        pieces = [run.rotary_deg[:-1] for run in self.runs[:-1]]
        return np.concatenate([*pieces, self.runs[-1].rotary_deg])


def choose(
    kinematics: Kinematics,
    axis: Floats,
    start_deg: Floats,
    cross_rad: float,
    reach_rad: float,
    tip_mm: Floats | None = None,
    pause: Floats | None = None,
) -> Chosen:
    """Choose rotary words for one stretch; the parameters are those of `Wish` and `choose_all`."""
    return choose_all([Wish(kinematics, axis, tip_mm, cross_rad, reach_rad, pause)], start_deg)[0]


def choose_all(wishes: Sequence[Wish], start_deg: Floats) -> tuple[Chosen, ...]:
    """Choose rotary words for all stretches of a program, between which the cutter is off the part.

    Parameters
    ----------
    wishes : sequence of Wish
        In cutting order.
    start_deg : (m,)
        Where the rotary axes stand before; the way from there counts as travel.

    Returns
    -------
    tuple of Chosen
        Least travel over all rows and all ways between stretches, each axis's in units of its own fastest feed. Where no
        choice is inside the limits, the one that breaks them least, with a note.

    Raises
    ------
    CannotPlan
        An axis is out of reach whatever the limits, or would have to jump in the cut.
    """
    for wish in wishes:
        _require_reach(wish)
    kinematics = wishes[0].kinematics
    rotary = kinematics.machine.rotary
    if not rotary:
        return tuple(Chosen((Run(0, len(w.axis) - 1, np.zeros((len(w.axis), 0))),), ()) for w in wishes)
    length = [len(wish.axis) for wish in wishes]
    heads = np.cumsum([0, *length[:-1]])
    hop = np.zeros(sum(length), dtype=np.uint8)
    hop[heads] = 1
    found = _settled(
        [wish.kinematics.rotary(wish.axis) for wish in wishes], np.asarray(start_deg, dtype=np.float64)
    )
    rows = [slice(head, head + n) for head, n in zip(heads, length, strict=True)]
    outside = [_linear_cost(w.kinematics, found[at], w.tip_mm) for w, at in zip(wishes, rows, strict=True)]
    pauses = [np.full(n, np.inf) if w.pause is None else w.pause for w, n in zip(wishes, length, strict=True)]
    low, high = kinematics.low, kinematics.high
    axis = np.ascontiguousarray(np.concatenate([wish.axis for wish in wishes]))
    arrive, leave, split, forced = _kernels.choose_branches(
        kinematics.chain,
        axis,
        found,
        np.concatenate(outside),
        low,
        high,
        np.array([a.feed for a in rotary], dtype=np.float64),
        np.asarray(start_deg, dtype=np.float64),
        *_turns(low, high),
        np.repeat([wish.cross_rad for wish in wishes], length),
        LIMIT_DEG,
        hop,
        np.concatenate(pauses),
    )
    _require_no_jump(axis, forced)
    return tuple(_chosen(wishes[0].kinematics, arrive[at], leave[at], split[at]) for at in rows)


def _chosen(kinematics: Kinematics, arrive: Floats, leave: Floats, split: Bytes) -> Chosen:
    """Cut one stretch into runs where the cutter is drawn off."""
    bounds = [0, *np.flatnonzero(split).tolist(), len(arrive) - 1]
    runs = []
    for first, last in zip(bounds[:-1], bounds[1:], strict=True):
        words = leave[first : last + 1].copy()
        words[-1] = arrive[last]
        runs.append(Run(first, last, words))
    return Chosen(tuple(runs), _limit_notes(kinematics, np.concatenate([arrive, leave])))


def _require_reach(wish: Wish) -> None:
    """Raise CannotPlan if some axis of the wish is out of the machine's reach."""
    miss = wish.kinematics.rotary(wish.axis).miss_rad.min(axis=1)
    worst = int(np.argmax(miss))
    if miss[worst] <= wish.reach_rad:
        return
    i, j, k = wish.axis[worst]
    message = (
        f"the cutter axis ({i:.4f}, {j:.4f}, {k:.4f}) is {math.degrees(miss[worst]):.4g} degrees out of the"
        f" machine's reach"
    )
    raise CannotPlan("axis reach", message, math.degrees(miss[worst]), math.degrees(wish.reach_rad), "deg")


def _require_no_jump(axis: Floats, forced: Bytes) -> None:
    """Raise CannotPlan where the words would have to jump with the cutter down."""
    if not forced.any():
        return
    i, j, k = axis[int(np.argmax(forced))]
    message = (
        f"at the cutter axis ({i:.4f}, {j:.4f}, {k:.4f}) the rotary axes would have to jump in the cut: their limits"
        f" leave no way on; shorten the passes, or use a machine with more rotary travel"
    )
    raise CannotPlan("axis limits", message, float(forced.sum()), 0.0, "rows")


def _turns(low: Floats, high: Floats) -> tuple[Floats, Floats]:
    """For each axis, the first whole turn to try and how many: those inside the limits and one more at either end."""
    bounded = np.isfinite(low)
    first = np.where(bounded, np.ceil((np.where(bounded, low, 0.0) - 180.0) / 360.0) - 1.0, 0.0)
    last = np.where(bounded, np.floor((np.where(bounded, high, 0.0) + 180.0) / 360.0) + 1.0, 0.0)
    return first.astype(np.int64), (last - first + 1.0).astype(np.int64)


def _settled(choices: Sequence[RotaryChoices], start_deg: Floats) -> Floats:
    """Words (n, branches, m) of all stretches, each free word set to a value of its own branch.

    Rows that are free from the start of a stretch take the first value that is decided, so that the word does not turn while
    the cutter is down; later ones keep the value of the row before, over whole stretches too, and before any is decided the
    word the program starts with.
    """
    found = np.concatenate([choice.words for choice in choices])
    decided = np.concatenate([choice.free for choice in choices]) == 0
    if decided.all():
        return found
    count = np.arange(len(found))
    heads = np.cumsum([0, *(len(choice.words) for choice in choices)])
    for branch in range(found.shape[1]):
        for j in range(found.shape[2]):
            column, known = found[:, branch, j], decided[:, branch, j].copy()
            for head, end in zip(heads[:-1], heads[1:], strict=True):
                first = np.flatnonzero(known[head:end])
                if first.size:
                    column[head : head + first[0]] = column[head + first[0]]
                    known[head : head + first[0]] = True
            last = np.maximum.accumulate(np.where(known, count, -1))
            column[:] = np.where(last >= 0, column[last], start_deg[j])
    return found


def _linear_cost(kinematics: Kinematics, found: Floats, tip_mm: Floats | None) -> Floats:
    """Cost (n, branches) of words that put the spindle gauge point outside X Y Z limits; whole turns do not matter.

    In the unit of the kernel: minutes of travel at the fastest feed, a thousandfold, and ten minutes.
    """
    count, branches = found.shape[:2]
    cost = np.zeros((count, branches))
    if tip_mm is None:
        return cost
    low, high = limit_arrays(kinematics.machine.linear)
    rate = np.array([a.feed for a in kinematics.machine.linear])
    for branch in range(branches):
        gauge = kinematics.gauge_point(kinematics.place(tip_mm, found[:, branch]))
        past = np.maximum(np.maximum(low - gauge, gauge - high) - LIMIT_MM, 0.0)
        cost[:, branch] = 10.0 * (past > 0.0).any(axis=1) + 1000.0 * (past / rate).sum(axis=1)
    return cost


def _limit_notes(kinematics: Kinematics, rot: Floats) -> tuple[str, ...]:
    """One sentence for each rotary axis whose words leave its limits."""
    notes = []
    for j, axis in enumerate(kinematics.machine.rotary):
        if axis.limits is None:
            continue
        under, over = axis.limits[0] - float(rot[:, j].min()), float(rot[:, j].max()) - axis.limits[1]
        past = max(under, over)
        if past > LIMIT_DEG:
            limit = axis.limits[0] if under >= over else axis.limits[1]
            notes.append(f"{axis.letter} has to go {past:.3f} degrees past its limit of {limit:g}")
    return tuple(notes)
