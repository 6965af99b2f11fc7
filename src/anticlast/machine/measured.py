"""Stopwatch readings as a user gives them: seconds or minutes and seconds, alone or in a CSV of programs."""

from __future__ import annotations

import csv
import io
import math
import re
from dataclasses import dataclass
from pathlib import Path

from anticlast.errors import BadInput, Fault
from anticlast.toml_lines import shown, why_unreadable

COLUMNS = ("program", "seconds")
_CLOCK = re.compile(r"(?:(\d{1,3}):)?(\d{1,4}):(\d{1,2}(?:\.\d+)?)")
LONGEST_S = 30 * 86400.0


@dataclass(frozen=True, slots=True)
class Measured:
    """One line of a CSV: the program, the seconds it took, and the line."""

    program: Path
    seconds: float
    line: int


def seconds_of(text: str) -> float | None:
    """Seconds of ``754.5``, ``12:34`` or ``1:02:03``; None if it is none of these, or not above 0."""
    match = _CLOCK.fullmatch(text.strip())
    if match:
        hours, minutes, seconds = (float(part or 0.0) for part in match.groups())
        value = 3600.0 * hours + 60.0 * minutes + seconds
    else:
        try:
            value = float(text)
        except ValueError:
            return None
    return value if math.isfinite(value) and 0.0 < value <= LONGEST_S else None


def read_measured(path: Path) -> tuple[Measured, ...]:
    """Read a CSV with the columns ``program`` and ``seconds``; relative programs start from its folder.

    Raises
    ------
    BadInput
        With every fault of the file: no such file, no such column, a value that is no time, no readings at all.
    """
    file = str(path)
    try:
        text = path.read_bytes().decode("utf-8-sig")
    except (OSError, ValueError) as error:
        raise BadInput(Fault(file, 0, "", why_unreadable(path, error))) from None
    rows = csv.reader(io.StringIO(text, newline=""))
    faults: list[Fault] = []
    found: list[Measured] = []
    try:
        header = [name.strip().lower() for name in next(rows, [])]
        for name in COLUMNS:
            if header.count(name) != 1:
                what = "missing" if name not in header else "found twice"
                faults.append(
                    Fault(file, 1, name, f"{what}; needs one column each named program and seconds")
                )
        if faults:
            raise BadInput(faults)
        places = [header.index(name) for name in COLUMNS]
        for row in rows:
            if any(cell.strip() for cell in row):
                _take(row, places, path, rows.line_num, found, faults)
    except csv.Error as error:
        faults.append(Fault(file, rows.line_num, "", f"no CSV: {shown(str(error))}"))
    if not found and not faults:
        faults.append(Fault(file, 1, "", "no readings; needs one line each with a program and its seconds"))
    if faults:
        raise BadInput(faults)
    return tuple(found)


def _take(
    row: list[str], places: list[int], path: Path, line: int, found: list[Measured], faults: list[Fault]
) -> None:
    """Check one line and add it to the readings or the faults."""
    cells = [row[place].strip() if place < len(row) else "" for place in places]
    seconds = seconds_of(cells[1])
    if not cells[0]:
        faults.append(Fault(str(path), line, "program", "missing; needs the path of a program"))
    if seconds is None:
        faults.append(
            Fault(
                str(path), line, "seconds",
                f"found {shown(repr(cells[1]))}; needs a time above 0 such as 754.5 or 12:34.5",
            )
        )  # fmt: skip
    if cells[0] and seconds is not None:
        found.append(Measured(path.parent / cells[0], seconds, line))
