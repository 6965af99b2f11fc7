"""What a legal program can still get wrong before it cuts: cutter, spindle, feed, length offset, axes.

Each check looks at the columns of motions, so it costs the same however the motions were read. Only what
fails is reported; ``worst`` counts the motions at fault and ``line`` is the first of them.
"""

from __future__ import annotations

from collections.abc import Collection
from typing import Literal

import numpy as np

from anticlast.records import SIX, Bools, Event, Finding, Machine, Motions, ReadProgram, Shape


def _failed(check: str, motions: Motions, wrong: np.ndarray, message: str) -> list[Finding]:
    rows = np.flatnonzero(wrong)
    if not len(rows):
        return []
    return [Finding(check, False, float(len(rows)), 0.0, "motions", int(motions.line[rows[0]]), message)]


def motion_findings(motions: Motions) -> list[Finding]:
    """Return what is wrong with motions that the language itself allows.

    Parameters
    ----------
    motions : Motions

    Returns
    -------
    list of Finding
        Checks "spindle running", "tool in spindle", "feed stated", "length offset", "work offset"; empty if
        all is well.
    """
    feeding = motions.shape != Shape.RAPID
    lifts = motions.end[:, 2] != motions.start[:, 2]
    found = _failed(
        "spindle running",
        motions,
        feeding & (motions.spindle_rpm == 0.0),
        "feed motion with the spindle stopped",
    )
    found += _failed(
        "tool in spindle", motions, feeding & (motions.tool == 0), "feed motion with no cutter loaded"
    )
    found += _failed(
        "feed stated",
        motions,
        feeding & (motions.feed_word == 0.0),
        "feed motion with F 0, or with no F since the program began or the feed mode (G93, G94) changed",
    )
    # A rapid across with the old offset is harmless; one that moves Z stops at the wrong height.
    judged = feeding | (lifts & (motions.tool != 0))
    found += _failed(
        "length offset",
        motions,
        judged & (motions.offset_h == 0),
        "no tool length offset (G43 H) is in force: the controlled point is not the cutter tip",
    )
    found += _failed(
        "length offset",
        motions,
        judged & (motions.offset_h != 0) & (motions.offset_h != motions.tool),
        "the H of the length offset is not the number of the cutter in the spindle",
    )
    found += _failed(
        "work offset",
        motions,
        motions.work_offset != 1,
        "motion outside G54, which is where the part is taken to be",
    )
    return found


def units_of(motions: Motions, events: tuple[Event, ...]) -> Literal["mm", "inch"]:
    """Return the units stated last before the first motion ends, else the first ones stated, else mm."""
    stated = [event for event in events if event.what == "units"]
    first = int(motions.line[0]) if len(motions.line) else 0
    before = [event for event in stated if event.line <= first] or stated[:1]
    return "inch" if before and before[-1].value == "inch" else "mm"


def check_axes(program: ReadProgram, machine: Machine) -> tuple[Finding, ...]:
    """Return a finding for each axis word that the machine has no axis for.

    The report leaves it to the builder of a control whether such words are ignored or an error (5.2), so no
    program should hold one.

    Parameters
    ----------
    program : ReadProgram
    machine : Machine

    Returns
    -------
    tuple of Finding
        Check "axis on machine", one for each letter, with the line that uses it first.
    """
    used = [event for event in program.events if event.what == "axis word"]
    return tuple(
        Finding(
            "axis on machine",
            False,
            1.0,
            0.0,
            "",
            event.line,
            f"{event.value}: the machine has only {' '.join(machine.letters)} [NISTIR 6556 section 5.2]",
        )
        for event in used
        if event.value not in machine.letters
    )


def check_cutters(program: ReadProgram, numbers: Collection[int]) -> tuple[Finding, ...]:
    """Return a finding for each T or H in force on a motion that is not among the known cutters.

    Parameters
    ----------
    program : ReadProgram
    numbers : collection of int
        Numbers of the cutters that exist. 0, no cutter and no offset, is always known.

    Returns
    -------
    tuple of Finding
        Check "cutter known".
    """
    motions = program.motions
    found: list[Finding] = []
    for name, column in (("T", motions.tool), ("H", motions.offset_h)):
        for number in np.unique(column).tolist():
            if number and number not in numbers:
                message = f"{name}{number}: no cutter has this number"
                found += _failed("cutter known", motions, column == number, message)
    return tuple(found)


def known_places(program: ReadProgram) -> tuple[Bools, Bools]:
    """Return for each motion and axis whether the program itself says where the axis stands.

    Until the first G90 word for it, an axis stands wherever the machine was left; after a length offset whose
    length is not known, so does Z. Its entries in ``Motions`` are placeholders there. Within one line
    everything counts as known at its end only.

    Parameters
    ----------
    program : ReadProgram

    Returns
    -------
    (at_start, at_end) : (n, 6) bool, (n, 6) bool
        Columns X Y Z A B C.
    """
    lines = program.motions.line
    starts = np.zeros((len(lines), 6), dtype=np.bool_)
    ends = np.zeros((len(lines), 6), dtype=np.bool_)
    changes = [event for event in program.events if event.what in ("position known", "position unknown")]
    for axis, letter in enumerate(SIX):
        mine = [event for event in changes if event.value == letter]
        at = np.array([event.line for event in mine])
        known = np.array([False] + [event.what == "position known" for event in mine])
        starts[:, axis] = known[np.searchsorted(at, lines, side="left")]
        ends[:, axis] = known[np.searchsorted(at, lines, side="right")]
        lost = [event.line for event in mine if event.what == "position unknown"]
        starts[np.isin(lines, lost), axis] = False
    return starts, ends


def check_places(program: ReadProgram, machine: Machine) -> tuple[Finding, ...]:
    """Return a finding for each axis of the machine that a feed motion starts at an unknown place of.

    Such a motion cuts from wherever the machine was left, so nothing can be proved of it.

    Parameters
    ----------
    program : ReadProgram
    machine : Machine

    Returns
    -------
    tuple of Finding
        Check "position stated".
    """
    motions = program.motions
    starts, _ = known_places(program)
    feeding = motions.shape != Shape.RAPID
    found: list[Finding] = []
    for letter in machine.letters:
        message = f"feed motion while the program has not said where {letter} stands"
        found += _failed("position stated", motions, feeding & ~starts[:, SIX.index(letter)], message)
    return tuple(found)
