"""Reads a program in the language of NISTIR 6556: what a control would do, or where the text is wrong.

Written from that report alone; it shares nothing with the half of the project that plans and posts programs.
"""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Final

import numpy as np

from anticlast.errors import BadInput, Fault
from anticlast.readback import checks, fast
from anticlast.readback.columns import Columns
from anticlast.readback.interpreter import Interpreter
from anticlast.readback.language import AXES, MAX_LINE, LanguageError
from anticlast.readback.modes import Six
from anticlast.records import Finding, ReadProgram

MOST_ERRORS: Final = 20
MOST_BYTES: Final = 2**30
_LINE_END: Final = re.compile(rb"\r\n|\n|\r")
_PERCENT_LINE: Final = re.compile(rb"(?:^|(?<=[\r\n]))[ \t]*%[ \t]*(?=[\r\n]|$)")
_COMMENT_ONLY: Final = re.compile(r"\([^()]*\)")


def read_program(
    path: str | Path,
    *,
    length_offsets: Mapping[int, float] | None = None,
    start_words: Mapping[str, float] | Sequence[float] | None = None,
    slots: int = 99,
    block_delete: bool = False,
    work_origin: Sequence[float] | None = None,
    reference_points: Mapping[int, Sequence[float]] | None = None,
    parameters: Mapping[int, float] | None = None,
    plain_lines: bool = True,
) -> ReadProgram:
    """Read a program file.

    Parameters
    ----------
    path : path
        The program text.
    length_offsets : Mapping[int, float], optional
        Tool length of each H number, mm. Without it, where Z stands is unknown after G43 until the program
        says so.
    start_words : mapping of axis letter to value, or six values X Y Z A B C, optional
        Where the machine stands before the first line: mm and degrees in G54, length offset off. Letters left
        out are 0. Without it, no axis has a known place until the program gives it one.
    slots : int
        Carousel slots: the largest T and H.
    block_delete : bool
        Skip lines that start with "/" (the operator's switch, 2.2.2).
    work_origin : 3 or 6 values, optional
        Machine coordinates of G54, mm and degrees. Without it G53 is refused.
    reference_points : mapping of 28 and 30 to six values, optional
        Machine coordinates that G28 and G30 go to; they need ``work_origin`` too.
    parameters : Mapping[int, float], optional
        Numbered parameters as the control holds them before the program.
    plain_lines : bool
        Read plain lines with the compiled reader. False sends every line through the interpreter; the result
        is the same.

    Returns
    -------
    ReadProgram
        Motions up to the first line that breaks the language, and all findings that are not ok. ``blocks``
        counts executed lines that hold more than blanks and comments.

    Raises
    ------
    BadInput
        The file cannot be read as text.
    """
    return read_bytes(
        _load(Path(path)),
        str(path),
        length_offsets=length_offsets,
        start_words=start_words,
        slots=slots,
        block_delete=block_delete,
        work_origin=work_origin,
        reference_points=reference_points,
        parameters=parameters,
        plain_lines=plain_lines,
    )


def _load(path: Path) -> bytes:
    try:
        if path.is_dir():
            raise BadInput(Fault(str(path), 0, "", "is a folder; a program file was expected"))
        with path.open("rb") as stream:
            data = stream.read(MOST_BYTES + 1)  # bounded: a device may have no end
        if len(data) > MOST_BYTES:
            raise BadInput(Fault(str(path), 0, "", f"is longer than the {MOST_BYTES} bytes that are read"))
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise BadInput(Fault(str(path), 0, "", f"cannot be read: {reason}")) from None
    return data


def read_bytes(
    data: bytes,
    name: str,
    *,
    length_offsets: Mapping[int, float] | None = None,
    start_words: Mapping[str, float] | Sequence[float] | None = None,
    slots: int = 99,
    block_delete: bool = False,
    work_origin: Sequence[float] | None = None,
    reference_points: Mapping[int, Sequence[float]] | None = None,
    parameters: Mapping[int, float] | None = None,
    plain_lines: bool = True,
) -> ReadProgram:
    """Read a program from memory; everything else as ``read_program``.

    Parameters
    ----------
    data : bytes
        The program text.
    name : str
        What to call it.

    Returns
    -------
    ReadProgram

    Raises
    ------
    BadInput
        The bytes are no text.
    """
    zero = data.find(b"\0")
    if zero >= 0:
        line = len(_LINE_END.findall(data, 0, zero)) + 1
        raise BadInput(Fault(name, line, "", "holds a zero byte, so this is no program text"))
    lines = data.count(b"\n") + (data.count(b"\r") if b"\r" in data else 0)
    control = Interpreter(
        Columns(lines + 1),
        length_offsets=length_offsets,
        start=_six(start_words),
        slots=slots,
        work_origin=work_origin,
        reference_points=reference_points,
        parameters=parameters,
    )
    return _Reading(data, control, block_delete, plain_lines).read(name)


def _six(words: Mapping[str, float] | Sequence[float] | None) -> Six | None:
    if words is None:
        return None
    if isinstance(words, Mapping):
        held = {letter.lower(): float(value) for letter, value in words.items()}
        values = [held.get(letter, 0.0) for letter in AXES]
    else:
        values = [float(value) for value in words]
        values += [0.0] * (6 - len(values))
    return (values[0], values[1], values[2], values[3], values[4], values[5])


class _Reading:
    """One pass over a program text: lines, the two % lines, the end, and the errors on the way."""

    def __init__(self, data: bytes, control: Interpreter, block_delete: bool, plain_lines: bool) -> None:
        self.data = data
        self.bytes = np.frombuffer(data, dtype=np.uint8)
        self.control = control
        self.block_delete = block_delete
        self.plain_lines = plain_lines
        self.at = 0
        self.line = 0
        self.errors: list[Finding] = []
        self.kept: tuple[int, int, int] | None = None  # motions, events, notes before the first error
        self.percent = 0  # "%" lines seen
        self.content = False  # a line that is not blank was seen
        self.gave_up = False

    def read(self, name: str) -> ReadProgram:
        """Read to the end of the program and gather what was found."""
        control = self.control
        while self.at < len(self.data) and not control.state.ended and self.percent < 2 and not self.gave_up:
            if self.plain_lines and fast.ready(control):
                self.at, self.line = fast.run_plain(
                    self.bytes, self.at, self.line, control, self.block_delete
                )
                if self.at >= len(self.data):
                    break
            self._one_line(self._next_line())
        after = self._after_end()
        rows, events, notes = self.kept or (control.columns.rows, len(control.events), len(control.notes))
        happened = tuple(control.events[:events])
        motions = control.columns.motions(rows)
        findings = (*self.errors, *control.notes[:notes], *after, *checks.motion_findings(motions))
        return ReadProgram(
            path=name,
            blocks=control.blocks,
            motions=motions,
            events=happened,
            units=checks.units_of(motions, happened),
            findings=tuple(sorted(findings, key=lambda finding: finding.line)),
        )

    def _next_line(self) -> str:
        """Return the next line; of one that is far too long only enough to see that."""
        found = _LINE_END.search(self.data, self.at)
        stop = found.start() if found else len(self.data)
        text = self.data[self.at : min(stop, self.at + MAX_LINE + 1)].decode("latin-1")
        self.at = found.end() if found else stop
        self.line += 1
        return text

    def _one_line(self, text: str) -> None:
        bare = text.strip(" \t")
        first = not self.content
        self.content = self.content or bool(bare)
        if bare == "%" and (first or self.percent == 1):
            self.percent += 1
            if self.percent == 2:
                self.control.line = self.line
                self.control.event("end", "%")
            return
        try:
            self.control.execute(self.line, text, self.block_delete)
        except LanguageError as error:
            self._error(str(error))

    def _error(self, message: str) -> None:
        control = self.control
        if self.kept is None:
            self.kept = (control.columns.rows, len(control.events), len(control.notes))
        if len(self.errors) == MOST_ERRORS:
            message = f"more than {MOST_ERRORS} errors; nothing was read from this line on"
            self.gave_up = True
        self.errors.append(Finding("language", False, 1.0, 0.0, "", self.line, message))

    def _after_end(self) -> list[Finding]:
        """Judge how the program ends and what stands after it (3.1, 3.6.1)."""
        if self.gave_up:
            return []
        if not self.control.state.ended and self.percent < 2:
            second = " and without the second % line" if self.percent == 1 else ""
            return [self._end_finding(f"the file ends without M2 or M30{second}: it may be cut off")]
        found = []
        if self.percent == 1 and not _PERCENT_LINE.search(self.data, self.at):
            message = "%: the first line is %, but there is no second % line [NISTIR 6556 section 3.1]"
            found.append(Finding("language", False, 1.0, 0.0, "", self.line, message))
        last = self.line
        while self.at < len(self.data):
            bare = self._next_line().strip(" \t")
            if bare == "%" and self.percent == 1:
                self.percent += 1
            elif not bare or (self.percent < 2 and _COMMENT_ONLY.fullmatch(bare)):
                continue
            elif self.percent == 2:
                found.append(self._end_finding("text after the second % line is ignored", warning=True))
                break
            else:
                found.append(
                    self._end_finding(f"text after the end of the program on line {last} is never executed")
                )
                break
        return found

    def _end_finding(self, message: str, warning: bool = False) -> Finding:
        cited = f"{message} [NISTIR 6556 section 3.1]"
        return Finding("program end", False, 1.0, 0.0, "", self.line, cited, warning)
