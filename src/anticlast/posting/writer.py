"""RS-274 text from axis paths: plain, legal under NISTIR 6556, the same bytes for the same input.

The text is written block by block from the axis paths, so memory does not grow with the length of the program.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator, Sequence
from typing import IO

import numpy as np

from anticlast.cutter import Cutter
from anticlast.machine.digits import MM_PER_INCH, Digits
from anticlast.posting.arcs import arc_length_mm
from anticlast.records import AxisPath, Floats, Job, Purpose

CHUNK = 4096  # blocks formatted at a time; bounds the memory
LONGEST_COMMENT = 110  # characters; far below the 256 that NISTIR 6556 section 3.3 allows a line
OPERATION_MARK = "(OPERATION "
LAST_N = 99999  # largest legal line number, NISTIR 6556 section 3.3.1


def plain(value: float, decimals: int) -> str:
    """Return a number as RS-274 text: no exponent, no trailing zeros, no negative zero.

    Parameters
    ----------
    value : float
        Any finite value.
    decimals : int
        Digits after the point, >= 0.
    """
    text = f"{value:.{decimals}f}"
    if "." in text:
        text = text.rstrip("0").rstrip(".")
    return "0" if text == "-0" else text


def comment(text: str) -> str:
    """Return text as one comment line that every reader takes: ASCII, no inner parentheses, not too long.

    ``(MSG, ...)`` has a meaning of its own (section 3.3.4), so no comment starts with MSG.
    """
    clean = text.replace("(", "[").replace(")", "]")
    clean = "".join(letter if 32 <= ord(letter) < 127 else "?" for letter in clean)[:LONGEST_COMMENT]
    return f"({clean})"


class _Dialect:
    """Digits and units of one program, fixed once."""

    def __init__(self, job: Job) -> None:
        control = job.machine.control
        self.inch = job.units == "inch"
        digits = Digits.of(job)
        self.length = digits.length_decimals
        self.angle = digits.angle_decimals
        self.feed = control.feed_decimals
        self.scale = 1.0 / digits.unit_mm
        self.inverse = control.feed_mode == "inverse"
        self.path_mode = control.path_mode
        self.program_end = control.program_end
        self.numbered = control.line_numbers

    def units_word(self) -> str:
        return "G20" if self.inch else "G21"


def _header(job: Job, paths: Sequence[AxisPath], dialect: _Dialect) -> Iterator[str]:
    unit = job.units
    machine = job.machine
    k = dialect.scale
    digits = 4 if dialect.inch else 3

    def length(value_mm: float) -> str:
        return plain(value_mm * k, digits)

    yield comment(f"JOB: {job.name}")
    yield comment(f"MACHINE: {machine.title}")
    yield comment(
        f"UNITS: {unit}. ROTARY WORDS: DEGREES, POSITIVE AS THE WORKPIECE SEES IT, NISTIR 6556 SECTION 2.1.2.2"
    )
    yield comment("PROGRAM ZERO G54: SADDLE POINT OF THE PART, ALL ROTARY AXES AT 0")
    if machine.rotary:
        origin = " ".join(
            f"{axis}{length(value)}" for axis, value in zip("XYZ", job.part_origin_mm, strict=True)
        )
        yield comment(
            f"SADDLE POINT AT ROTARY 0, FROM WHERE THE ROTARY AXES MEET: {origin}. THE PROGRAM IS WRONG FOR ANY OTHER"
        )
    if job.turn_rad:
        yield comment(
            f"THE PART IS SET TURNED {plain(math.degrees(job.turn_rad), 3)} DEGREES ABOUT Z FROM ITS DRAWING"
        )
    if machine.rotary and dialect.inverse:
        yield comment("F UNDER G93 IS ONE OVER THE MINUTES OF ITS BLOCK, NISTIR 6556 SECTION 3.5.19")
    yield comment(f"F UNDER G94 IS {unit} PER MINUTE OF THE CUTTER TIP")
    yield comment("CUTTERS:")
    used = {path.operation.cutter.number: path.operation.cutter for path in paths}
    for cutter in used.values():
        corner = f" CORNER {length(cutter.corner_radius_mm)}" if cutter.shape == "bull" else ""
        yield comment(
            f"T{cutter.number} {cutter.shape.upper()} D{length(2 * cutter.radius_mm)}{corner} FLUTES {cutter.flutes}"
            f" STICKOUT {length(cutter.stickout_mm)} GAUGE LENGTH {length(cutter.gauge_length_mm)} OFFSET H{cutter.number}"
        )
    if any(axis.carries == "cutter" for axis in machine.rotary):
        yield comment(
            "THE CUTTER TILTS: XYZ HOLD THE GAUGE LENGTHS ABOVE. ANOTHER LENGTH NEEDS ANOTHER PROGRAM"
        )
    stock = job.stock
    yield comment(f"BLANK: {stock.material}, TOP Z{length(stock.top_mm)}, BOTTOM Z{length(stock.bottom_mm)}")
    for line in (
        "BEFORE CUTTING: FOLLOW THE MACHINE'S MANUAL AND THE RULES OF YOUR SHOP. TRAINED PEOPLE ONLY",
        "CHECK WORK OFFSET, EVERY LENGTH OFFSET, CUTTER, STICKOUT, BLANK AND CLAMPS AGAINST THE SET-UP SHEET",
        "PROVE OUT ABOVE THE PART FIRST: RAISE G54 Z, SINGLE BLOCK, RAPID OVERRIDE LOW, HAND ON FEED HOLD",
        "EYE AND HEARING PROTECTION. STAY CLEAR OF CHIPS, DUST AND TURNING PARTS",
    ):
        yield comment(line)


def _preamble(dialect: _Dialect) -> Iterator[str]:
    # Units alone and first (section 3.5.7); every modal group stated, since the report gives no power-on defaults.
    yield dialect.units_word()
    yield "G17 G40 G49"
    yield "G80 G90 G94"
    yield f"G54 {dialect.path_mode}"


def _columns(path: AxisPath, rows: slice, dialect: _Dialect) -> list[list[str]]:
    """Words of each axis as text, one list a column, for a slice of blocks."""
    columns = []
    for column, letter in enumerate(path.letters):
        linear = letter in "XYZ"
        scale, decimals = (dialect.scale, dialect.length) if linear else (1.0, dialect.angle)
        values = path.words[rows, column] * scale
        form = f"%.{decimals}f"
        texts = [form % value for value in values.tolist()]
        if decimals:
            texts = [text.rstrip("0").rstrip(".") for text in texts]
        columns.append([letter + ("0" if text == "-0" else text) for text in texts])
    return columns


def _steps(path: AxisPath, rows: slice) -> Floats:
    """How far each axis goes in each block of a slice, (n, k), mm and degrees."""
    before = path.start if rows.start == 0 else path.words[rows.start - 1]
    return np.diff(path.words[rows], axis=0, prepend=before[None, :])


def _per_minute(path: AxisPath, rows: slice, dialect: _Dialect) -> list[float]:
    """F of each block under G94: XYZ length a minute, or degrees a minute when only rotary axes move (section 3.5.19)."""
    steps = _steps(path, rows)
    linear = np.array([letter in "XYZ" for letter in path.letters])
    along = np.sqrt((steps[:, linear] ** 2).sum(axis=1)) * dialect.scale
    if path.arcs is not None:  # along the helix itself (section 2.1.2.6)
        along = arc_length_mm(path.arcs[rows], steps[:, :3]) * dialect.scale
    around = np.sqrt((steps[:, ~linear] ** 2).sum(axis=1))
    with np.errstate(invalid="ignore", divide="ignore"):
        asked: list[float] = (np.where(along > 0, along, around) / path.minutes[rows]).tolist()
    return asked


def _arc_words(path: AxisPath, rows: slice, dialect: _Dialect) -> list[tuple[str, str, list[str]]]:
    """For each block of a slice the plane code, G2 or G3, and the two centre words; empty texts on straight moves."""
    if path.arcs is None:
        return [("", "", [])] * len(path.rapid[rows])
    found: list[tuple[str, str, list[str]]] = []
    for plane, turned, *centre in path.arcs[rows].tolist():
        if plane == 0.0:
            found.append(("", "", []))
            continue
        pair = {17: (0, 1), 18: (0, 2), 19: (1, 2)}[int(plane)]
        words = ["IJK"[axis] + plain(centre[axis] * dialect.scale, dialect.length) for axis in pair]
        found.append((f"G{int(plane)}", "G3" if turned > 0.0 else "G2", words))
    return found


def _chunks(path: AxisPath) -> Iterator[slice]:
    for low in range(0, len(path.rapid), CHUNK):
        yield slice(low, min(low + CHUNK, len(path.rapid)))


def _moves(path: AxisPath, dialect: _Dialect, standing: list[str], inverse: bool) -> Iterator[str]:
    """Blocks of one operation. ``standing`` holds each axis word the control stands at and is kept up to date."""
    mode = ""
    feed_text = ""
    last_feed = math.inf
    last_pass = -1
    height = path.letters.index("Z")
    plane = "G17"
    for rows in _chunks(path):
        arcs = _arc_words(path, rows, dialect)
        per_minute = [] if inverse else _per_minute(path, rows, dialect)
        columns = _columns(path, rows, dialect)
        rapids = path.rapid[rows].tolist()
        minutes = path.minutes[rows].tolist()
        passes = path.pass_index[rows].tolist()
        cutting = (path.purpose[rows] <= Purpose.OVERRUN).tolist()
        for i, rapid in enumerate(rapids):
            if cutting[i] and passes[i] != last_pass:
                last_pass = passes[i]
                yield comment(f"PASS {last_pass + 1}")
            words = [column[i] for column in columns]
            changed = [word for word, old in zip(words, standing, strict=True) if word != old]
            if not changed:
                continue
            if rapid and "" in standing and len(changed) > 1:
                # Where the machine stands is not known: Z goes alone first, to the height that clears the blank.
                yield "G0 " + words[height]
                changed = [word for word in changed if word is not words[height]]
                mode = "G0"
            standing[:] = words
            plane_asked, code, centre = arcs[i]
            code = code or ("G0" if rapid else "G1")
            if plane_asked and plane_asked != plane:
                plane = plane_asked
                yield plane
            if code != mode:
                changed.insert(0, code)
                mode = code
            changed += centre
            if not rapid and inverse:
                changed.append("F" + plain(1.0 / minutes[i], dialect.feed))
            elif not rapid:
                # A feed word stands while it is no faster than asked and at most 2 % slower: fewer words, same time.
                asked = per_minute[i]
                if not (0.98 * asked <= last_feed <= 1.0005 * asked):
                    last_feed = asked
                    text = plain(asked, dialect.feed)
                    if text != feed_text:
                        feed_text = text
                        changed.append("F" + text)
            yield " ".join(changed)
    if plane != "G17":
        yield "G17"


def _turns_at_feed(path: AxisPath) -> bool:
    """Whether any rotary axis moves in a feed block."""
    rotary = np.array([letter in "ABC" for letter in path.letters])
    if not rotary.any():
        return False
    return any(bool(np.any(_steps(path, rows)[~path.rapid[rows]][:, rotary] != 0)) for rows in _chunks(path))


def _length_message(job: Job, cutter: Cutter) -> str:
    """Message (section 3.3.4) with the length that X Y Z hold: shown to the operator, and compared when it is read back."""
    inch = job.units == "inch"
    length = plain(cutter.gauge_length_mm / MM_PER_INCH, 4) if inch else plain(cutter.gauge_length_mm, 3)
    return f"(MSG, T{cutter.number} GAUGE LENGTH {length} {job.units.upper()})"


def _operation(
    job: Job, path: AxisPath, dialect: _Dialect, loaded: int, standing: list[str]
) -> Iterator[str]:
    operation = path.operation
    cutter = operation.cutter
    yield comment(
        f"{OPERATION_MARK[1:]}{operation.index}: {operation.does.upper()} {operation.pattern.upper()}, T{cutter.number},"
        f" DIRECTION {plain(math.degrees(operation.direction_rad), 3)} DEGREES FROM PART X"
    )
    if cutter.number != loaded:
        yield f"T{cutter.number} M6"
        if any(axis.carries == "cutter" for axis in job.machine.rotary):
            yield _length_message(job, cutter)
    yield f"S{plain(operation.spindle_rpm, 0)} M3"
    yield f"G43 H{cutter.number}"
    inverse = dialect.inverse and _turns_at_feed(path)
    blocks = _moves(path, dialect, standing, inverse)
    if not inverse:
        yield from blocks
        return
    yield "G93"
    yield from blocks
    yield "G94"


def program_lines(job: Job, paths: Iterable[AxisPath]) -> Iterator[str]:
    """Lines of the program, without line ends.

    Parameters
    ----------
    job : Job
    paths : iterable of AxisPath
        In cutting order; words in mm and degrees, rounded to the control's digits.

    Yields
    ------
    str
        Legal lines under NISTIR 6556, in the job's units. Every mode relied upon is stated; the spindle is stopped and the
        length offset cancelled before each cutter change and before the end, which M2 does not do by itself.
    """
    dialect = _Dialect(job)
    paths = tuple(paths)
    lines = _body(job, paths, dialect)
    yield "%"
    if not dialect.numbered:
        yield from lines
    else:
        number = 0
        for line in lines:
            # Numbers wrap: five digits are the most a line number may have, and they may repeat (section 3.3.1).
            if line.startswith("("):
                yield line
                continue
            number = number % LAST_N + 1
            yield f"N{number} {line}"
    yield "%"


def _body(job: Job, paths: tuple[AxisPath, ...], dialect: _Dialect) -> Iterator[str]:
    yield from _header(job, paths, dialect)
    yield from _preamble(dialect)
    loaded = 0
    standing = [""] * len(job.machine.letters)
    for path in paths:
        if loaded:
            yield "M5"
            if path.operation.cutter.number != loaded:
                yield "G49"
                standing = [""] * len(job.machine.letters)
        yield from _operation(job, path, dialect, loaded, standing)
        loaded = path.operation.cutter.number
    yield "M5"
    yield "M9"
    yield "G49"
    yield dialect.program_end


def write_program(job: Job, paths: Iterable[AxisPath], stream: IO[str]) -> tuple[int, ...]:
    """Write the program to an open text stream, a chunk at a time.

    Returns
    -------
    tuple of int
        Line, counted from 1, on which each operation starts.
    """
    held: list[str] = []
    starts: list[int] = []
    for number, line in enumerate(program_lines(job, paths), start=1):
        if line.startswith(OPERATION_MARK):
            starts.append(number)
        held.append(line)
        if len(held) >= CHUNK:
            stream.write("\n".join(held) + "\n")
            held.clear()
    stream.write("\n".join(held) + "\n")
    return tuple(starts)
