"""Where a program's time goes: per operation and pass, at feed or held back, by what and where."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from itertools import pairwise
from typing import Any

import numpy as np

from anticlast.records import Bools, Floats, Ints, Machine, Motions, MotionTimes, Shape

CAUSES = ("nothing", "speed", "acceleration", "block rate")  # by the number in ``MotionTimes.held_back_by``
_MARK = re.compile(rb"^[ \tN0-9]*\( *(OPERATION|PASS) +([0-9]{1,9})([^)\r\n]*)\)", re.MULTILINE)


@dataclass(frozen=True, slots=True)
class Mark:
    """A comment that says where an operation or a pass starts: line, "OPERATION" or "PASS", number, and the rest of it."""

    line: int
    kind: str
    number: int
    text: str


@dataclass(frozen=True, slots=True)
class HoldBack:
    """What kept motions from their feed.

    Attributes
    ----------
    cause : str
        "speed" (fastest feed or rapid of an axis), "acceleration" (corners, bends and jerk included) or "block rate".
    axis : str
        Letter of the axis; empty for the block rate.
    seconds : float
        Time of the motions that it holds back.
    lost_s : float
        What they take beyond what F asks for.
    line : int
        Line at which it costs most.
    """

    cause: str
    axis: str
    seconds: float
    lost_s: float
    line: int

    def sentence(self) -> str:
        """Say it, as in ``the C axis (acceleration) holds the feed back for 34 s``."""
        who = f"the {self.axis} axis ({self.cause})" if self.axis else "the control's block rate"
        return f"{who} holds the feed back for {_seconds(self.seconds)} and costs {_seconds(self.lost_s)}"


@dataclass(frozen=True, slots=True)
class Span:
    """A pass, or a whole operation: its lines and its time.

    ``number`` counts from 1, 0 is what comes before the first. ``seconds`` are motions, ``waiting_s`` comes on top.
    """

    number: int
    name: str
    first_line: int
    last_line: int
    seconds: float
    feed_only_s: float
    waiting_s: float


@dataclass(frozen=True, slots=True)
class Operation:
    """One operation with its passes."""

    whole: Span
    passes: tuple[Span, ...]


@dataclass(frozen=True, slots=True)
class ProgramTime:
    """The time of a program and what holds it back, most costly first."""

    program: str
    machine: str
    blocks: int
    total_s: float
    moving_s: float
    rapid_s: float
    waiting_s: float
    feed_only_s: float
    waits: dict[str, float]
    operations: tuple[Operation, ...]
    hold_backs: tuple[HoldBack, ...]

    def as_json(self) -> dict[str, Any]:
        """Return plain data: seconds, lines."""
        return asdict(self)

    def lines(self) -> list[str]:
        """Say it in a few lines."""
        cutting = self.moving_s - self.rapid_s
        said = [
            f"{self.program} on {self.machine}: {_seconds(self.total_s)}, estimated",
            f"  feed moves {_seconds(cutting)}, rapids {_seconds(self.rapid_s)}, waits {_seconds(self.waiting_s)};"
            f" F and rapid rates alone ask for {_seconds(self.feed_only_s)}",
        ]
        for operation in self.operations:
            whole, passes = operation.whole, operation.passes
            numbered = [item.seconds for item in passes if item.number]
            each = f", passes of {min(numbered):.1f} to {max(numbered):.1f} s" if len(numbered) > 1 else ""
            said.append(
                f"  {whole.name} (lines {whole.first_line} to {whole.last_line}):"
                f" {_seconds(whole.seconds + whole.waiting_s)}, {len(numbered)} passes{each}"
            )
        said += [f"  {what}: {_seconds(seconds)}" for what, seconds in self.waits.items()]
        if not self.hold_backs:
            said.append("  nothing holds the feed back")
        return said + [f"  {item.sentence()}, most at line {item.line}" for item in self.hold_backs]


def _seconds(value: float) -> str:
    """Seconds as a person says them."""
    if value < 120.0:
        return f"{value:.1f} s"
    minutes, rest = divmod(round(value), 60)
    return f"{minutes} min {rest:02d} s" if minutes < 60 else f"{minutes // 60} h {minutes % 60:02d} min"


def hold_backs(
    motions: Motions, times: MotionTimes, machine: Machine, rows: Bools | None = None
) -> tuple[HoldBack, ...]:
    """Add up what holds motions back, by cause and axis, most costly first.

    Parameters
    ----------
    motions, times
        Of one program.
    machine : Machine
        Whose axes ``times.axis`` counts.
    rows : (n,) bool, optional
        Motions to look at; all feed motions if not given.
    """
    if rows is None:
        rows = motions.shape != Shape.RAPID
    axis = times.axis if times.axis is not None else np.full(len(motions.line), -1, np.int8)
    lost = np.maximum(times.seconds - times.feed_only_s, 0.0)
    found = []
    for cause in range(1, len(CAUSES)):
        by_cause = rows & (times.held_back_by == cause)
        for which in np.unique(axis[by_cause]):
            chosen = by_cause & (axis == which)
            worst = int(motions.line[np.flatnonzero(chosen)[lost[chosen].argmax()]])
            letter = machine.letters[which] if which >= 0 else ""
            found.append(
                HoldBack(
                    CAUSES[cause],
                    letter,
                    float(times.seconds[chosen].sum()),
                    float(lost[chosen].sum()),
                    worst,
                )
            )
    return tuple(sorted(found, key=lambda item: -item.lost_s))


def marks_of(text: bytes) -> tuple[Mark, ...]:
    """Comments such as ``(OPERATION 1: FINISH)`` and ``(PASS 12)`` of a program text, in order."""
    ends = np.flatnonzero(np.frombuffer(text, np.uint8) == ord("\n"))
    found = []
    for match in _MARK.finditer(text):
        rest = match.group(3).decode("ascii", "replace").strip(" :")
        line = int(np.searchsorted(ends, match.start(), side="left")) + 1
        found.append(Mark(line, match.group(1).decode("ascii"), int(match.group(2)), rest))
    return tuple(found)


def program_time(
    program: str,
    blocks: int,
    motions: Motions,
    times: MotionTimes,
    machine: Machine,
    marks: Sequence[Mark] = (),
) -> ProgramTime:
    """Split a program's time over its operations and passes.

    Parameters
    ----------
    program : str
        Its name, for print.
    blocks : int
        That the text has.
    motions, times, machine
        As estimated.
    marks : sequence of Mark
        Where operations and passes start. Without any for operations these start where the cutter changes; without any
        for passes each run of feed motions between two rapids is one.
    """
    starts = _operation_starts(motions, marks)
    operations = []
    for (line, name, number), (end, _, _) in pairwise((*starts, (np.iinfo(np.int64).max, "", 0))):
        low, high = (int(np.searchsorted(motions.line, at)) for at in (line, end))
        if low == high:
            continue
        waiting = sum(wait.seconds for wait in times.waits if line <= wait.line < end)
        whole = _span(motions, times, low, high, number, name, waiting)
        own = [mark for mark in marks if mark.kind == "PASS" and line <= mark.line < end]
        operations.append(Operation(whole, _passes(motions, times, low, high, own)))
    rapid = motions.shape == Shape.RAPID
    waits: dict[str, float] = {}
    for wait in times.waits:
        waits[wait.what] = waits.get(wait.what, 0.0) + wait.seconds
    return ProgramTime(
        program=program, machine=machine.title, blocks=blocks, total_s=times.total_s,
        moving_s=float(times.seconds.sum()), rapid_s=float(times.seconds[rapid].sum()), waiting_s=times.waiting_s,
        feed_only_s=float(times.feed_only_s.sum()), waits=waits, operations=tuple(operations),
        hold_backs=hold_backs(motions, times, machine),
    )  # fmt: skip


def _operation_starts(motions: Motions, marks: Sequence[Mark]) -> list[tuple[int, str, int]]:
    """Line, name and number of each operation."""
    marked = [mark for mark in marks if mark.kind == "OPERATION"]
    if marked:
        starts = [
            (mark.line, f"operation {mark.number}: {mark.text}".rstrip(": "), mark.number) for mark in marked
        ]
        return starts if starts[0][0] <= 1 else [(1, "before the first operation", 0), *starts]
    if len(motions.line) == 0:
        return []
    changes = np.flatnonzero(np.diff(motions.tool, prepend=motions.tool[0] - 1))
    lines = [1, *(int(motions.line[row]) for row in changes[1:])]
    return [
        (line, f"cutter T{motions.tool[row]}", i + 1)
        for i, (line, row) in enumerate(zip(lines, changes, strict=True))
    ]


def _passes(
    motions: Motions, times: MotionTimes, low: int, high: int, marks: Sequence[Mark]
) -> tuple[Span, ...]:
    """Passes among rows ``low`` to ``high``; what lies before the first has number 0."""
    if marks:
        firsts = np.searchsorted(motions.line[low:high], [mark.line for mark in marks]) + low
        numbers = [mark.number for mark in marks]
    else:
        cuts = motions.shape[low:high] != Shape.RAPID
        firsts = np.flatnonzero(np.diff(cuts.astype(np.int8), prepend=0) == 1) + low
        numbers = list(range(1, len(firsts) + 1))
    bounds: Ints = np.array([low, *firsts, high])
    return tuple(
        _span(motions, times, int(a), int(b), number, f"pass {number}" if number else "approach", 0.0)
        for a, b, number in zip(bounds[:-1], bounds[1:], [0, *numbers], strict=True)
        if b > a
    )


def _span(
    motions: Motions, times: MotionTimes, low: int, high: int, number: int, name: str, waiting_s: float
) -> Span:
    spent: Floats = times.seconds[low:high]
    return Span(
        number, name, int(motions.line[low]), int(motions.line[high - 1]), float(spent.sum()),
        float(times.feed_only_s[low:high].sum()), float(waiting_s),
    )  # fmt: skip
