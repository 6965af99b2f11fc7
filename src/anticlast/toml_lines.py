"""Read a TOML file and remember on which line every key stands.

``tomllib`` decides what the text means; the scanner here only walks a text that ``tomllib`` has accepted.
"""

from __future__ import annotations

import re
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Final

from anticlast.errors import BadInput, Fault

Location = tuple[str | int, ...]

_BLANK: Final = re.compile(r"(?:[ \t]|#[^\n]*)*")
_BLANK_LINES: Final = re.compile(r"(?:[ \t\n]|#[^\n]*)*")
_KEY_PART: Final = re.compile(r'"(?:[^"\\\n]|\\.)*"|\'[^\'\n]*\'|[A-Za-z0-9_-]+')
_STRING: Final = re.compile(
    r'"""(?:[^"\\]|\\.|"(?!""))*"{3,5}'
    r"|'''(?:[^']|'(?!''))*'{3,5}"
    r'|"(?:[^"\\\n]|\\.)*"'
    r"|'[^'\n]*'",
    re.DOTALL,
)
_BARE: Final = re.compile(r"[^,\]}#\n]*")
_PLACE: Final = re.compile(
    r"^(?P<what>.*?)\s*\(at (?:line (?P<line>\d+), column (?P<column>\d+)|end of document)\)$", re.DOTALL
)
_DEEPEST: Final = 40  # lists and tables inside each other; a job file needs 6


class _Scanner:
    """Recursive descent over a valid TOML text, filling ``lines``: path of keys and positions -> line."""

    def __init__(self, text: str) -> None:
        self.text = text
        self.at = 0
        self.counted_to = 0
        self.counted_line = 1
        self.lines: dict[Location, int] = {(): 1}
        self.entries: dict[Location, int] = {}  # arrays of tables: how many entries so far

    def scan(self) -> dict[Location, int]:
        table: Location = ()
        while True:
            self._skip(_BLANK_LINES)
            if self.at >= len(self.text):
                return self.lines
            if self.text.startswith("[", self.at):
                table = self._header()
            else:
                self._pair(table)

    def _line(self) -> int:
        self.counted_line += self.text.count("\n", self.counted_to, self.at)
        self.counted_to = self.at
        return self.counted_line

    def _skip(self, pattern: re.Pattern[str]) -> str:
        match = pattern.match(self.text, self.at)
        assert match is not None, "the text was accepted by tomllib, so every token must match"
        self.at = match.end()
        return match.group()

    def _key(self) -> list[str]:
        parts: list[str] = []
        while True:
            self._skip(_BLANK)
            raw = self._skip(_KEY_PART)
            parts.append(tomllib.loads(f"key = {raw}")["key"] if raw[0] in "\"'" else raw)
            self._skip(_BLANK)
            if not self.text.startswith(".", self.at):
                return parts
            self.at += 1

    def _header(self) -> Location:
        """Walk ``[a.b]`` or ``[[a.b]]``; a part that names an array of tables means its last entry."""
        line = self._line()
        is_entry = self.text.startswith("[[", self.at)
        self.at += 2 if is_entry else 1
        path: Location = ()
        parts = self._key()
        self.at += 2 if is_entry else 1
        for depth, part in enumerate(parts, start=1):
            path = (*path, part)
            self.lines.setdefault(path, line)
            if depth < len(parts) and path in self.entries:
                path = (*path, self.entries[path] - 1)
        if is_entry:
            position = self.entries.get(path, 0)
            self.entries[path] = position + 1
            path = (*path, position)
        self.lines[path] = line
        return path

    def _pair(self, table: Location) -> None:
        line = self._line()
        path = table
        for part in self._key():
            path = (*path, part)
            self.lines.setdefault(path, line)
        self.at += 1  # the equals sign
        self._skip(_BLANK)
        self._value(path)

    def _value(self, path: Location) -> None:
        if len(path) > _DEEPEST:
            raise RecursionError(self._line())
        first = self.text[self.at]
        if first == "[":
            self._array(path)
        elif first == "{":
            self._inline_table(path)
        else:
            self._skip(_STRING if first in "\"'" else _BARE)

    def _array(self, path: Location) -> None:
        self.at += 1
        position = 0
        while True:
            self._skip(_BLANK_LINES)
            if self.text[self.at] == "]":
                self.at += 1
                return
            if self.text[self.at] == ",":
                self.at += 1
                continue
            self.lines[(*path, position)] = self._line()
            self._value((*path, position))
            position += 1

    def _inline_table(self, path: Location) -> None:
        self.at += 1
        while True:
            self._skip(_BLANK_LINES)
            if self.text[self.at] == "}":
                self.at += 1
                return
            if self.text[self.at] == ",":
                self.at += 1
                continue
            self._pair(path)


def line_map(text: str) -> dict[Location, int]:
    """Line of every key, table and list item of a valid TOML text.

    Parameters
    ----------
    text : str
        A text that ``tomllib.loads`` accepts, with plain newlines.

    Returns
    -------
    dict
        Path of keys and list positions (counted from 0) -> line, counted from 1. The empty path is line 1. A
        table that is only implied (``[part.outline]`` alone implies ``part``) stands where it is first named;
        an array of tables stands at its first entry.

    Raises
    ------
    RecursionError
        Lists or tables stand more than 40 deep inside each other.
    """
    return _Scanner(text).scan()


def dotted(location: Location) -> str:
    """Write a path as users know it, list positions counted from 1: ``cutter[1].holder[2][1]``."""
    text = ""
    for part in location:
        if isinstance(part, int):
            text += f"[{part + 1}]"
        else:
            name = part if re.fullmatch(r"[A-Za-z0-9_-]+", part) else '"' + shown(part) + '"'
            text += f".{name}" if text else name
    return text


def shown(text: str) -> str:
    """Text made fit to print inside a message: one line, no control characters, at most 60 characters."""
    clean = "".join(letter if letter.isprintable() else f"\\u{ord(letter):04x}" for letter in text)
    return clean if len(clean) <= 60 else clean[:57] + "..."


@dataclass(slots=True)
class Source:
    """A file of the user's: its data, the line of every key, and the faults found in it so far."""

    file: str
    data: Mapping[str, Any]
    lines: Mapping[Location, int]
    faults: list[Fault] = field(default_factory=list)

    def line(self, location: Location) -> int:
        """Line of a path, or of the nearest table or list around it that stands in the file."""
        for length in range(len(location), -1, -1):
            if location[:length] in self.lines:
                return self.lines[location[:length]]
        return 0

    def add(self, location: Location, message: str) -> None:
        """Note one fault at a path."""
        self.faults.append(Fault(self.file, self.line(location), dotted(location), message))


def parse_source(text: str, file: str) -> Source:
    """Parse a TOML text.

    Raises
    ------
    BadInput
        With the line of the first syntax error.
    """
    text = text.replace("\r\n", "\n")
    try:
        data = tomllib.loads(text)
        lines = line_map(text)
    except RecursionError as error:
        line = error.args[0] if isinstance(error.args[0], int) else 0  # a text, if tomllib itself gave up
        message = f"lists or tables stand inside each other more than {_DEEPEST} deep; needs fewer"
        raise BadInput(Fault(file, line, "", message)) from None
    except ValueError as error:
        raise BadInput(_syntax_fault(text, file, str(error))) from None
    return Source(file, data, lines)


def _syntax_fault(text: str, file: str, reason: str) -> Fault:
    rows = text.split("\n")
    match = _PLACE.match(reason)
    if match is None:  # a number with more digits than Python converts is the one error without a place
        return Fault(file, 0, "", f"not valid TOML: {shown(reason)}")
    last = max((row for row, content in enumerate(rows, start=1) if content.strip()), default=1)
    line = int(match["line"]) if match["line"] else last
    where = f"at column {match['column']}" if match["column"] else "at the end of the file"
    found = shown(rows[line - 1].strip())
    message = (
        f"not valid TOML: {shown(match['what'])} {where}, found: {found}; needs: key = value, text in quotes"
    )
    return Fault(file, line, "", message)


def read_source(path: Path, file: str) -> Source:
    """Read and parse a TOML file.

    Parameters
    ----------
    path : Path
        Where the file is.
    file : str
        How the user named it; messages say this.

    Raises
    ------
    BadInput
        If it cannot be read, is not UTF-8, or is not TOML.
    """
    try:
        raw = path.read_bytes()
    except (OSError, ValueError) as error:  # ValueError: a name with a null character
        raise BadInput(Fault(file, 0, "", why_unreadable(path, error))) from None
    try:
        text = raw.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = raw.count(b"\n", 0, error.start) + 1
        byte = raw[error.start]
        raise BadInput(
            Fault(file, line, "", f"not UTF-8: found byte 0x{byte:02X}; save the file as plain UTF-8 text")
        ) from None
    return parse_source(text, file)


def why_unreadable(path: Path, error: Exception) -> str:
    """Say why a file could not be read, the same way on every system."""
    try:
        if path.is_dir():
            return "is a folder; needs a file"
    except (OSError, ValueError):
        pass
    if isinstance(error, ValueError):
        return "cannot be the name of a file"
    if isinstance(error, FileNotFoundError):
        return "no such file"
    if isinstance(error, PermissionError):
        return "may not be read: permission denied"
    return f"cannot be read ({(getattr(error, 'strerror', None) or str(error)).lower()})"
