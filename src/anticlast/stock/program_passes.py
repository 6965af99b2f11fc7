"""Which operation and which pass each motion of a program belongs to, as its own comments tell."""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from anticlast.records import Shape

if TYPE_CHECKING:
    from anticlast.records import Ints, Job, ReadProgram

_OPERATION = re.compile(r"^\(OPERATION (\d+):")
_PASS = re.compile(r"^\(PASS (\d+)\)")


@dataclass(frozen=True, slots=True)
class ProgramPasses:
    """Operation and pass of each motion, counted from 1; 0 where there is none.

    ``told`` is true if the program's comments gave them; otherwise a pass is what lies between two rapids, and the
    operation is the job's first with that cutter.
    """

    operation: Ints
    number: Ints
    told: bool


def passes_of(job: Job, program: ReadProgram) -> ProgramPasses:
    """Return operation and pass of each motion.

    Feed motion between a rapid and the first block of a pass (approach, descent, entry) counts to that pass.
    """
    operations, passes = _comments(program.path)
    if operations:
        return _told(program, operations, passes)
    motions = program.motions
    rapid = motions.shape == Shape.RAPID
    begins = ~rapid & np.concatenate(([True], rapid[:-1] | (np.diff(motions.tool) != 0)))[: len(rapid)]
    number = np.where(rapid, 0, np.cumsum(begins))
    operation = np.zeros(len(rapid), np.int64)
    for entry in reversed(job.operations):
        operation[motions.tool == entry.cutter.number] = entry.index
    return ProgramPasses(operation, number.astype(np.int64), False)


def _comments(path: str) -> tuple[list[tuple[int, int]], list[tuple[int, int]]]:
    """Return (line, number) of every operation and every pass that comments name."""
    operations, passes = [], []
    try:
        with open(path, encoding="utf-8", errors="replace") as stream:
            for line, text in enumerate(stream, start=1):
                if not text.startswith("("):
                    continue
                if found := _PASS.match(text):
                    passes.append((line, int(found.group(1))))
                elif found := _OPERATION.match(text):
                    operations.append((line, int(found.group(1))))
    except OSError:
        return [], []
    return operations, passes


def _told(
    program: ReadProgram, operations: list[tuple[int, int]], passes: list[tuple[int, int]]
) -> ProgramPasses:
    motions = program.motions
    count = len(motions.line)
    operation = _at(motions.line, operations)
    number = np.zeros(count, np.int64)
    rapid = motions.shape == Shape.RAPID
    # Last rapid at or before each motion, and where the operation of each motion begins.
    last_rapid = (
        np.maximum.accumulate(np.where(rapid, np.arange(count), -1)) if count else np.zeros(0, np.int64)
    )
    starts = np.searchsorted(motions.line, [line for line, _ in passes])
    before = 0
    for place, (start, (_, value)) in enumerate(zip(starts.tolist(), passes, strict=True)):
        after = int(starts[place + 1]) if place + 1 < len(passes) else count
        if start >= count:
            break
        begin = max(before, int(last_rapid[start]) + 1) if start > 0 else 0
        number[begin:after] = value
        before = start
    number[rapid] = 0
    return ProgramPasses(operation, number, True)


def _at(line: Ints, marks: list[tuple[int, int]]) -> Ints:
    """Return the number of the last mark at or before each line; 0 before the first."""
    values = np.array([0, *(number for _, number in marks)], np.int64)
    return np.asarray(values[np.searchsorted([mark for mark, _ in marks], line, side="right")])
