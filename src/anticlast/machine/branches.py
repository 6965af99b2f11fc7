"""Which of the possible rotary words a machine takes along a path: continuous, inside limits, with least travel.

Two rotary axes reach almost every cutter axis in two ways, each repeated every full turn. Taken row by row the nearest of
them is not good enough: a choice that is short now can run into a limit later. So all rows of a stretch are decided at
once, by dynamic programming. docs/theory-machine.md, "Choosing branches".
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from anticlast.errors import CannotPlan
from anticlast.machine import _kernels
from anticlast.machine.kinematics import Kinematics, RotaryChoices, limit_arrays
from anticlast.records import Bytes, Floats
from anticlast.tolerances import LIMIT_DEG, LIMIT_MM


@dataclass(frozen=True, slots=True)
class Chosen:
    """Rotary words of one stretch.

    Attributes
    ----------
    rotary_deg : (n, m)
        Continuous words, degrees.
    notes : tuple of str
        One sentence for each axis that no choice could keep inside its limits.
    """

    rotary_deg: Floats
    notes: tuple[str, ...]


def choose(
    kinematics: Kinematics,
    axis: Floats,
    start_deg: Floats,
    cross_rad: float,
    reach_rad: float,
    tip_mm: Floats | None = None,
) -> Chosen:
    """Choose rotary words for a row of cutter axes.

    Parameters
    ----------
    kinematics : Kinematics
    axis : (n, 3)
        Unit cutter axes in part coordinates, n >= 1.
    start_deg : (m,)
        Where the rotary axes stand before; the way from there counts as travel.
    cross_rad : float
        The axis may be off its wish by this much while the machine changes from one branch to the other.
    reach_rad : float
        The words may miss a row's axis by this much.
    tip_mm : (n, 3), optional
        Cutter tips in part coordinates: if given, branches that keep X Y Z inside their limits are preferred.

    Returns
    -------
    Chosen
        Least travel (each axis's in units of its own fastest feed). Where no continuous choice is inside the limits, the
        one that breaks them least, with a note.

    Raises
    ------
    CannotPlan
        An axis is out of reach whatever the limits.
    """
    rotary = kinematics.machine.rotary
    choices = kinematics.rotary(axis)
    miss = choices.miss_rad.min(axis=1)
    worst = int(np.argmax(miss))
    if miss[worst] > reach_rad:
        i, j, k = axis[worst]
        message = (
            f"the cutter axis ({i:.4f}, {j:.4f}, {k:.4f}) is {math.degrees(miss[worst]):.4g} degrees out of the"
            f" machine's reach"
        )
        raise CannotPlan("axis reach", message, math.degrees(miss[worst]), math.degrees(reach_rad), "deg")
    if not rotary:
        return Chosen(np.zeros((len(axis), 0)), ())
    low, high = kinematics.low, kinematics.high
    first, count = _turns(low, high)
    found, free = _settle_start(choices)
    rate = np.array([a.feed for a in rotary], dtype=np.float64)
    outside = _linear_cost(kinematics, found, free, tip_mm)
    rot, _ = _kernels.choose_branches(
        kinematics.chain,
        axis,
        found,
        free,
        outside,
        low,
        high,
        rate,
        start_deg,
        first,
        count,
        cross_rad,
        LIMIT_DEG,
    )
    return Chosen(rot, _limit_notes(kinematics, rot))


def _turns(low: Floats, high: Floats) -> tuple[Floats, Floats]:
    """For each axis, the first whole turn to try and how many: those inside the limits and one more at either end."""
    bounded = np.isfinite(low)
    first = np.where(bounded, np.ceil((np.where(bounded, low, 0.0) - 180.0) / 360.0) - 1.0, 0.0)
    last = np.where(bounded, np.floor((np.where(bounded, high, 0.0) + 180.0) / 360.0) + 1.0, 0.0)
    return first.astype(np.int64), (last - first + 1.0).astype(np.int64)


def _settle_start(choices: RotaryChoices) -> tuple[Floats, Bytes]:
    """Give a word that is free from the first row on the value it has where it first is decided.

    The stretch then starts with the word it will need, and does not turn while the cutter is down. A word that is free on
    every row stays where it was.
    """
    found, free = choices.words.copy(), choices.free.copy()
    for branch in range(found.shape[1]):
        for j in range(found.shape[2]):
            decided = np.flatnonzero(free[:, branch, j] == 0)
            if decided.size and decided[0] > 0:
                found[: decided[0], branch, j] = found[decided[0], branch, j]
                free[: decided[0], branch, j] = 0
    return found, free


def _linear_cost(kinematics: Kinematics, found: Floats, free: Bytes, tip_mm: Floats | None) -> Floats:
    """Cost (n, branches) of words that put the spindle gauge point outside X Y Z limits; whole turns do not matter.

    In the unit of the kernel: minutes of travel at the fastest feed, a thousandfold. A row whose words are free has none,
    for its X Y Z are decided by the rows around it.
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
        cost[:, branch] = np.where(free[:, branch].any(axis=1), 0.0, 1000.0 * (past / rate).sum(axis=1))
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
