"""Canned cycles that drill and bore in one stroke: G81, G82, G85, G89 (NISTIR 6556 section 3.5.16).

G83 backs off "a bit" without saying how much, G84 and G86 to G88 act on the spindle or wait for a person in
mid-cycle: those are refused, since their motion cannot be known from the text alone.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final, Literal

from anticlast.readback.language import LanguageError, label, whole

PROVABLE: Final = frozenset((810, 820, 850, 890))
_DWELLS: Final = frozenset((820, 890))
_FEEDS_OUT: Final = frozenset((850, 890))
# Ours, for all lines of a program together: bounds the memory that short lines can ask for.
MOST_REPEATS: Final = 10_000
_REFUSED: Final = {
    830: "how far it backs off between pecks is not stated",
    840: "its feed is tied to the spindle's turning",
    860: "it stops the spindle inside the cycle",
    870: "it turns and moves a hooked cutter inside the cycle",
    880: "a person retracts the spindle by hand",
}

Three = tuple[float, float, float]
Step = tuple[Literal["traverse", "feed", "dwell"], Three, float]


@dataclass(frozen=True, slots=True)
class Hole:
    """What a line asks of a canned cycle, in work coordinates and mm.

    ``target`` and ``stride`` are coordinates of the plane's first and second axis: with absolute words every
    repeat is made at ``target``; with incremental words each is ``stride`` further on.
    """

    code: int
    axes: tuple[int, int, int]
    at: Three
    target: tuple[float, float]
    stride: tuple[float, float]
    clear_mm: float
    depth_mm: float
    dwell_s: float
    repeats: int
    retract_to_r: bool


def repeats_of(value: float | None, before: int) -> int:
    """Return the L word of a canned cycle: 1 if absent, else a positive integer (3.5.16).

    Parameters
    ----------
    value : float or None
    before : int
        Repeats beyond the first that earlier lines asked for.
    """
    repeats = 1 if value is None else whole("L", value, 1, MOST_REPEATS, "3.5.16")
    if before + repeats - 1 > MOST_REPEATS:
        raise LanguageError(
            f"L{repeats}", f"refused: more than {MOST_REPEATS} repeats in one program", "3.5.16"
        )
    return repeats


def refuse_unknown(code: int) -> None:
    """Raise a LanguageError for a canned cycle that a proof cannot follow."""
    if code not in PROVABLE:
        raise LanguageError(label(code), f"refused in a proof: {_REFUSED[code]}", "3.5.16")


def needs_dwell(code: int) -> bool:
    """Return whether a cycle takes P, the seconds it waits at the bottom."""
    return code in _DWELLS


def steps_of(hole: Hole) -> list[Step]:
    """Return the moves of a canned cycle in order; moves of no length are left out.

    The order is that of 3.5.16 (preliminary motion) and 3.5.16.1 onwards: up to the R level first if below
    it; then for each repeat across, to the R level, down at feed, wait, out to the level before the cycle or
    to R, whichever G98 or G99 and the higher of the two ask for (3.5.20).

    Parameters
    ----------
    hole : Hole

    Returns
    -------
    list of (what, point, seconds)
        ``what`` is "traverse", "feed" or "dwell"; ``point`` X Y Z in mm; seconds for dwells only.

    Raises
    ------
    LanguageError
        R level below the bottom.
    """
    first, second, normal = hole.axes
    if hole.clear_mm < hole.depth_mm:
        raise LanguageError(label(hole.code), "the R level is below the bottom of the hole", "3.5.16")
    steps: list[Step] = []
    point = list(hole.at)

    def go(what: Literal["traverse", "feed"], changes: dict[int, float]) -> None:
        before = tuple(point)
        for axis, value in changes.items():
            point[axis] = value
        if tuple(point) != before:
            steps.append((what, (point[0], point[1], point[2]), 0.0))

    if point[normal] < hole.clear_mm:
        go("traverse", {normal: hole.clear_mm})
    out = hole.clear_mm if hole.retract_to_r else max(hole.at[normal], hole.clear_mm)
    across = hole.target
    for repeat in range(hole.repeats):
        if repeat:
            across = (across[0] + hole.stride[0], across[1] + hole.stride[1])
        go("traverse", {first: across[0], second: across[1]})
        go("traverse", {normal: hole.clear_mm})
        go("feed", {normal: hole.depth_mm})
        if hole.code in _DWELLS:
            steps.append(("dwell", (point[0], point[1], point[2]), hole.dwell_s))
        go("feed" if hole.code in _FEEDS_OUT else "traverse", {normal: out})
    return steps
