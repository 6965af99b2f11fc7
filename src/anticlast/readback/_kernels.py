"""Compiled reader for plain lines: G0 or G1, axis words and F as plain numbers. Arrays and numbers only.

It stops in front of the first line that holds anything else, or that might break a rule, and leaves that line
to the full interpreter. What it does accept it must read exactly as the interpreter does; tests hold the two
against each other.
"""

from __future__ import annotations

import numba
import numpy as np

# Indices into the two arrays that carry the modal state in and out.
MOTION = 0  # 0 or 1 for G0 and G1; -1 for anything else
ABSOLUTE = 1
INVERSE = 2
MAY_FEED = 3  # 0: leave feed motions to the interpreter (feed mode not stated yet)
MAY_DELETE = 4  # 1: a leading "/" means nothing
AXES_READY = 5  # bits of the axes whose words need no bookkeeping any more
INTS = 6
FEED = 0
FACTOR = 1
POSITION = 2  # six values
SHIFT = 8  # six values
FLOATS = 14

_LONGEST = 256
_MOST_DIGITS = 900_000_000_000_000  # below this ten times a mantissa plus a digit is exact in a double
_POWERS = np.array(
    [10.0**power for power in range(23)]
)  # exact doubles, so mantissa / power is correctly rounded
_LARGEST = 1e9

_TAB = 9
_LF = 10
_CR = 13
_SPACE = 32
_PLUS = 43
_MINUS = 45
_POINT = 46
_SLASH = 47
_ZERO = 48
_NINE = 57


@numba.njit(cache=True, nogil=True)
def _number(text: np.ndarray, at: int) -> tuple[float, int]:
    """Read a plain number: (value, where it ends); an end of -1 means it is not plain."""
    size = text.size
    sign = 1.0
    mantissa = np.int64(0)
    decimals = 0
    digits = 0
    started = False
    point = 0
    while at < size:
        mark = text[at]
        if mark in (_SPACE, _TAB):
            at += 1
            continue
        if _ZERO <= mark <= _NINE:
            while _ZERO <= mark <= _NINE:
                if mantissa >= _MOST_DIGITS:
                    return 0.0, -1
                mantissa = mantissa * 10 + (mark - _ZERO)
                digits += 1
                decimals += point
                at += 1
                if at == size:
                    break
                mark = text[at]
            started = True
            continue
        elif mark == _POINT:
            if point == 1:
                return 0.0, -1
            point = 1
        elif mark in (_MINUS, _PLUS) and not started:
            if mark == _MINUS:
                sign = -1.0
        else:
            break
        started = True
        at += 1
    if digits == 0 or decimals > 22:
        return 0.0, -1
    return sign * (float(mantissa) / _POWERS[decimals]), at


@numba.njit(cache=True, nogil=True)
def _line(
    text: np.ndarray, at: int, may_delete: int, values: np.ndarray, found: np.ndarray
) -> tuple[int, int]:
    """Read one plain line into values and found: X Y Z A B C, F, G.

    Returns (where its line end is, words) or (-1, 0) if it is not plain. ``found`` has a 1 for each word.
    """
    size = text.size
    begin = at
    words = 0
    first = True
    for k in range(8):
        found[k] = 0
    while at < size:
        mark = text[at]
        if mark in (_LF, _CR):
            break
        if mark in (_SPACE, _TAB):
            at += 1
            continue
        if mark == _SLASH:
            if not first or may_delete == 0 or words > 0:
                return -1, 0
            may_delete = 0  # a second one is not plain
            words = 0
            at += 1
            continue
        letter = mark & 0xDF  # upper case
        if letter == 78 and mark > 64:  # N, first on its line
            if not first:
                return -1, 0
            first = False
            digits = 0
            at += 1
            while at < size and (text[at] in (_SPACE, _TAB) or _ZERO <= text[at] <= _NINE):
                if text[at] >= _ZERO:
                    digits += 1
                at += 1
            if digits < 1 or digits > 5:
                return -1, 0
            words = 1
            continue
        slot = -1
        if mark > 64:
            if 88 <= letter <= 90:
                slot = letter - 88
            elif 65 <= letter <= 67:
                slot = letter - 62
            elif letter == 70:
                slot = 6
            elif letter == 71:
                slot = 7
        if slot < 0 or found[slot] == 1:
            return -1, 0
        value, at = _number(text, at + 1)
        if at < 0 or abs(value) > _LARGEST:
            return -1, 0
        values[slot] = value
        found[slot] = 1
        first = False
        words += 1
    if at - begin > _LONGEST or (words == 0 and may_delete == 0 and at > begin):
        return -1, 0
    return at, words


@numba.njit(cache=True, nogil=True)
def read_plain(
    text: np.ndarray,
    at: int,
    line: int,
    ints: np.ndarray,
    floats: np.ndarray,
    row: int,
    lines: np.ndarray,
    shapes: np.ndarray,
    starts: np.ndarray,
    ends: np.ndarray,
    feeds: np.ndarray,
) -> tuple[int, int, int, int]:
    """Read plain lines from ``at`` on until one is not plain, the text ends or the columns are full.

    Parameters
    ----------
    text : (n,) uint8
        The whole program.
    at : int
        Where the next line starts.
    line : int
        Lines before it.
    ints, floats : (INTS,) int64, (FLOATS,) float64
        Modal state, updated in place; lengths in mm.
    row : int
        Next free row of the columns.
    lines, shapes, starts, ends, feeds : columns
        Filled from ``row`` on.

    Returns
    -------
    (at, line, row, blocks) : ints
        Where reading stopped, and how many blocks were read.
    """
    size = text.size
    room = lines.size
    values = np.zeros(8)
    found = np.zeros(8, dtype=np.int64)
    blocks = 0
    while at < size and row < room:
        stop, words = _line(text, at, ints[MAY_DELETE], values, found)
        if stop < 0:
            break
        if words > 0:
            motion = ints[MOTION]
            if found[7] == 1:
                if values[7] != 0.0 and values[7] != 1.0:
                    break
                motion = np.int64(values[7])
            axes = 0
            for k in range(6):
                axes |= found[k] << k
            if motion < 0 or axes == 0 or (axes & ~ints[AXES_READY]) != 0:
                break
            if motion == 1 and (ints[MAY_FEED] == 0 or (ints[INVERSE] == 1 and found[6] == 0)):
                break
            if found[6] == 1:
                if values[6] < 0.0:
                    break
                if ints[INVERSE] == 0 or motion == 1:
                    floats[FEED] = values[6]
            ints[MOTION] = motion
            for k in range(6):
                here = floats[POSITION + k]
                starts[row, k] = here
                if found[k] == 1:
                    there = values[k] * floats[FACTOR] if k < 3 else values[k]
                    there = there + floats[SHIFT + k] if ints[ABSOLUTE] == 1 else here + there
                    floats[POSITION + k] = there
                ends[row, k] = floats[POSITION + k]
            lines[row] = line + 1
            shapes[row] = motion
            feeds[row] = floats[FEED] if motion == 1 else 0.0
            row += 1
            blocks += 1
        line += 1
        at = stop
        if at < size:
            at += 2 if text[at] == _CR and at + 1 < size and text[at + 1] == _LF else 1
    return at, line, row, blocks
