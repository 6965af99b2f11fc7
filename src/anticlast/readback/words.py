"""One line of text to its items (NISTIR 6556 section 3.3): number, words, settings, comments."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Final

from anticlast.readback.expressions import parameter_index, real_value
from anticlast.readback.language import (
    FIRST_RESERVED,
    G_GROUP,
    INTEGER_SLACK,
    LETTERS,
    M_GROUP,
    MAX_LINE,
    MAX_NUMBER,
    LanguageError,
    label,
)

_COMMENT: Final = "\x01"  # stands for a comment in the squeezed text, so that none can hide inside a word
_LINE_NUMBER: Final = re.compile(r"n([0-9]*)")
_MESSAGE: Final = re.compile(r"[ \t]*m[ \t]*s[ \t]*g[ \t]*,(.*)", re.IGNORECASE)
_MOST_M_WORDS: Final = 4  # 3.3.5


@dataclass(slots=True)
class Block:
    """The items of one line.

    Attributes
    ----------
    deleted : bool
        The line starts with "/".
    blank : bool
        Nothing on it but blanks and comments.
    words : dict
        Lower-case letter to value, for every letter but G, M and N.
    g : dict
        Modal group to G code times ten.
    m : dict
        Modal group to M code.
    settings : list of (int, float)
        Parameter settings, which take effect after the whole line is read (3.3.3).
    message : str or None
        Text of a message comment, if the last comment is one (3.3.4).
    """

    deleted: bool = False
    blank: bool = True
    words: dict[str, float] = field(default_factory=dict)
    g: dict[str, int] = field(default_factory=dict)
    m: dict[str, int] = field(default_factory=dict)
    settings: list[tuple[int, float]] = field(default_factory=list)
    message: str | None = None


def shown(character: str) -> str:
    """Return a character as it can be printed."""
    return character if " " <= character <= "~" else f"CHARACTER {ord(character)}"


def _squeeze(text: str) -> tuple[str, str | None]:
    """Take comments and blanks out of a line; return the rest in lower case, and the last comment."""
    if len(text) > MAX_LINE:
        raise LanguageError("line", f"is longer than {MAX_LINE} characters", "3.3")
    comment = None
    if "(" in text or ")" in text:
        pieces = []
        at = 0
        while (opens := text.find("(", at)) >= 0:
            closes = text.find(")", opens)
            if closes < 0:
                raise LanguageError("(", "comment is not closed on its line", "3.3.4")
            comment = text[opens + 1 : closes]
            if "(" in comment:
                raise LanguageError("(", "comment inside a comment", "3.3.4")
            if not all(" " <= mark <= "~" or mark == "\t" for mark in comment):
                raise LanguageError("(", "comment holds a character that is not printable ASCII", "3.3.4")
            pieces.append(text[at:opens])
            at = closes + 1
        text = _COMMENT.join([*pieces, text[at:]])
        if text.count(_COMMENT) != len(pieces):
            raise LanguageError(shown(_COMMENT), "is no character of the language", "3.3")
    elif _COMMENT in text:
        raise LanguageError(shown(_COMMENT), "is no character of the language", "3.3")
    return text.replace(" ", "").replace("\t", "").lower(), comment


def _skip_comments(text: str, at: int) -> int:
    while text[at : at + 1] == _COMMENT:
        at += 1
    return at


def _start(text: str, block: Block) -> int:
    """Read block delete and line number; return where the rest starts."""
    at = 0
    if text.startswith("/"):
        block.deleted = True
        at = 1
    found = _LINE_NUMBER.match(text, at)
    if found:
        digits = found.group(1)
        if not 1 <= len(digits) <= 5:
            raise LanguageError(f"N{digits}", "a line number has 1 to 5 digits and no sign", "3.3.1")
        block.blank = False
        at = found.end()
    return at


def _setting(text: str, at: int, parameters: Mapping[int, float]) -> tuple[int, float, int]:
    index_value, at = real_value(text, at + 1, parameters)
    index = parameter_index(index_value)
    if text[at : at + 1] != "=":
        raise LanguageError(f"#{index}", "= is missing after a parameter at the start of an item", "3.3.3")
    value, at = real_value(text, at + 1, parameters)
    if index >= FIRST_RESERVED:
        raise LanguageError(
            f"#{index}",
            "refused: the control keeps positions and offsets there, a proof cannot follow",
            "3.2.1",
        )
    return index, value, at


def _code(letter: str, value: float) -> int:
    scale = 10 if letter == "g" else 1
    nearest = round(value * scale)
    known = G_GROUP if letter == "g" else M_GROUP
    if abs(value * scale - nearest) > INTEGER_SLACK or nearest not in known:
        raise LanguageError(
            f"{letter.upper()}{value:g}", "is no code of the language", "3.5" if letter == "g" else "3.6"
        )
    return nearest


def _put(block: Block, letter: str, value: float) -> None:
    """Add one word to the block, keeping the rules of repeats (3.3.5) and of modal groups (3.4)."""
    if abs(value) > MAX_NUMBER:
        raise LanguageError(
            f"{letter.upper()}{value:g}", f"refused: beyond {MAX_NUMBER:g} in size", "3.3.2.1"
        )
    if letter in "gm":
        code = _code(letter, value)
        held, groups = (block.g, G_GROUP) if letter == "g" else (block.m, M_GROUP)
        name = label(code) if letter == "g" else f"M{code}"
        group = groups[code]
        if letter == "m" and len(held) == _MOST_M_WORDS and group not in held:
            raise LanguageError(name, f"more than {_MOST_M_WORDS} M words on one line", "3.3.5")
        if group in held:
            other = label(held[group]) if letter == "g" else f"M{held[group]}"
            raise LanguageError(name, f"{other} of the same modal group ({group}) is on this line", "3.4")
        held[group] = code
    elif letter in block.words:
        raise LanguageError(letter.upper(), "letter is twice on this line", "3.3.5")
    else:
        block.words[letter] = value


def parse_line(text: str, parameters: Mapping[int, float]) -> Block:
    """Read one line of text.

    Parameters
    ----------
    text : str
        The line without its line end.
    parameters : Mapping[int, float]
        Values of the numbered parameters before this line.

    Returns
    -------
    Block

    Raises
    ------
    LanguageError
        The line breaks the grammar.
    """
    squeezed, comment = _squeeze(text)
    block = Block()
    if comment is not None:
        found = _MESSAGE.fullmatch(comment)
        block.message = found.group(1).strip() if found else None
    at = _skip_comments(squeezed, _start(squeezed, block))
    while at < len(squeezed):
        block.blank = False
        letter = squeezed[at]
        if letter == "#":
            index, value, at = _setting(squeezed, at, parameters)
            block.settings.append((index, value))
        elif letter not in LETTERS:
            wrong = "letter" if letter.isalpha() and letter.isascii() else "character"
            raise LanguageError(shown(letter).upper(), f"is no {wrong} of the language", "3.3.2")
        elif letter == "n":
            raise LanguageError("N", "a line number stands first on its line, once", "3.3.1")
        else:
            value, at = _value_of(letter, squeezed, at + 1, parameters)
            _put(block, letter, value)
        at = _skip_comments(squeezed, at)
    return block


def _value_of(letter: str, text: str, at: int, parameters: Mapping[int, float]) -> tuple[float, int]:
    try:
        return real_value(text, at, parameters)
    except LanguageError as error:
        word = f"{letter.upper()} {error.word}"
        raise LanguageError(word, error.message, error.section) from None
