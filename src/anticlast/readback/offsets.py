"""Codes that change what the coordinates mean: G10, G28, G30, G43, G49, G53, G54 to G59.3 and the G92 family.

Positions are kept in the active work offset with G92 shifts taken out, so a shift never moves them.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from anticlast.readback.language import AXES, LanguageError, label, whole
from anticlast.readback.modes import ZERO, Six
from anticlast.readback.words import Block
from anticlast.records import Shape

if TYPE_CHECKING:
    from anticlast.readback.interpreter import Interpreter

_Z = 2


def length_mm(control: Interpreter, number: int) -> float | None:
    """Return the tool length offset of an H number, mm; None if nobody told it."""
    if number == 0:
        return 0.0
    return None if control.lengths is None else control.lengths.get(number)


def length_offset(control: Interpreter, code: int, block: Block) -> None:
    """Carry out G43 or G49: the controlled point moves along Z, the machine does not (2.1.2.3, 3.5.11).

    Parameters
    ----------
    control : Interpreter
    code : int
        430 or 490.
    block : Block

    Raises
    ------
    LanguageError
        G43 without H, or H out of range.
    """
    state = control.state
    number = 0
    if code == 430:
        if "h" not in block.words:
            raise LanguageError("G43", "needs an H word", "3.5.11")
        number = whole("H", block.words["h"], 0, control.slots, "3.5.11")
    if number != state.offset_h:
        old, new = length_mm(control, state.offset_h), length_mm(control, number)
        if control.lengths is not None and new is None:
            control.note("length offset", f"H{number} has no cutter, so its length is unknown")
        if old is None or new is None:
            control.lose(1 << _Z)
        elif state.known >> _Z & 1:
            at = list(state.at)
            at[_Z] += old - new
            state.at = (at[0], at[1], at[2], at[3], at[4], at[5])
        state.offset_h = number
    state.stated |= {"length offset"}
    control.event("length offset", float(number))


def select_system(control: Interpreter, number: int) -> None:
    """Make another work offset active (3.5.13); positions are read anew where both origins are known.

    Parameters
    ----------
    control : Interpreter
    number : int
        1 for G54 to 9 for G59.3.
    """
    state = control.state
    if number == state.system:
        return
    old, new = state.origins[state.system - 1], state.origins[number - 1]
    state.system = number
    _read_anew(control, old, new)


def _read_anew(control: Interpreter, old: tuple[float | None, ...], new: tuple[float | None, ...]) -> None:
    at = list(control.state.at)
    lost = 0
    for axis in range(6):
        before, after = old[axis], new[axis]
        if before is None or after is None:
            lost |= 1 << axis
        elif control.state.known >> axis & 1:
            at[axis] += before - after
    control.state.at = (at[0], at[1], at[2], at[3], at[4], at[5])
    control.lose(lost)


def one_shot(control: Interpreter, code: int, block: Block) -> None:
    """Carry out a non-modal code that changes or uses offsets (step 19 of Table 8).

    Parameters
    ----------
    control : Interpreter
    code : int
        G code times ten; G4 and G53 are no business of this step.
    block : Block

    Raises
    ------
    LanguageError
        The code breaks a rule of its section, or needs numbers that only the control knows.
    """
    state = control.state
    if code == 100:
        _set_origin(control, block)
    elif code in (280, 300):
        _go_home(control, code // 10, block)
    elif code == 920:
        _set_shift(control, block)
    elif code == 921:
        state.shift = state.stored_shift = ZERO
        control.event("axis offset", "none")
    elif code == 922:
        state.shift = ZERO
        control.event("axis offset", "none")
    elif code == 923:
        if state.stored_shift is None:
            raise LanguageError(
                "G92.3", "refused: the offsets it restores are known to the control only", "3.5.18"
            )
        state.shift = state.stored_shift
        control.event("axis offset", _shift_text(state.shift))


def _shift_text(shift: Six) -> str:
    return (
        " ".join(f"{AXES[axis].upper()}{value:.10g}" for axis, value in enumerate(shift) if value != 0.0)
        or "none"
    )


def _set_shift(control: Interpreter, block: Block) -> None:
    state = control.state
    named = [axis for axis in range(6) if AXES[axis] in block.words]
    if not named:
        raise LanguageError("G92", "needs at least one axis word", "3.5.18")
    shift = list(state.shift)
    control.rely_on_axes(block)
    for axis in named:
        if not state.known >> axis & 1:
            raise LanguageError(
                f"G92 {AXES[axis].upper()}", "refused: where this axis stands is not known here", "3.5.18"
            )
        shift[axis] = state.at[axis] - block.words[AXES[axis]] * (state.factor if axis < 3 else 1.0)
    state.shift = (shift[0], shift[1], shift[2], shift[3], shift[4], shift[5])
    state.stored_shift = state.shift
    control.name_axes(block)
    control.event("axis offset", _shift_text(state.shift))


def _set_origin(control: Interpreter, block: Block) -> None:
    """G10 L2: put a work offset somewhere else, in machine coordinates (3.5.5)."""
    state, words = control.state, block.words
    if "l" not in words or "p" not in words:
        raise LanguageError("G10", "needs L2 and P, the work offset to set", "3.5.5")
    whole("L", words["l"], 2, 2, "3.5.5")
    number = whole("P", words["p"], 1, 9, "3.5.5")
    control.rely_on_axes(block)
    old = state.origins[number - 1]
    new = list(old)
    for axis, letter in enumerate(AXES):
        if letter in words:
            new[axis] = words[letter] * (state.factor if axis < 3 else 1.0)
    origins = list(state.origins)
    origins[number - 1] = tuple(new)
    state.origins = tuple(origins)
    control.name_axes(block)
    control.event("work offset set", float(number))
    if number == state.system:
        changed = [AXES[axis] in words for axis in range(6)]
        before = tuple(old[axis] if changed[axis] else 0.0 for axis in range(6))
        after = tuple(new[axis] if changed[axis] else 0.0 for axis in range(6))
        _read_anew(control, before, after)
    if number == 1:
        control.note("work offset", "G10 moves G54, which is where the part is taken to be")


def from_machine(control: Interpreter, block: Block) -> Six:
    """Return the end of a G53 motion in the active work offset (3.5.12).

    Its words are machine coordinates of the spindle gauge point, so that a length offset in force shortens Z;
    the text does not say so, it follows from 2.1.2.3.

    Parameters
    ----------
    control : Interpreter
    block : Block

    Returns
    -------
    six floats
        mm and degrees.

    Raises
    ------
    LanguageError
        G91 is in force, or the machine coordinates of the work offset are not known.
    """
    state = control.state
    if not state.absolute:
        raise LanguageError("G53", "is absolute and not allowed under G91", "3.5.12")
    place: list[float | None] = [None] * 6
    for axis, letter in enumerate(AXES):
        if letter in block.words:
            place[axis] = block.words[letter] * (state.factor if axis < 3 else 1.0)
    return _in_work(control, "G53", place, "3.5.12")


def _in_work(control: Interpreter, name: str, place: list[float | None], section: str) -> Six:
    state = control.state
    origin = state.origins[state.system - 1]
    end = list(state.at)
    for axis, value in enumerate(place):
        if value is None:
            continue
        zero = origin[axis]
        if zero is None:
            raise LanguageError(
                name, "refused: where the work offset lies in the machine is not known", section
            )
        end[axis] = value - zero
        if axis == _Z:
            length = length_mm(control, state.offset_h)
            if length is None:
                raise LanguageError(name, f"refused: the length of H{state.offset_h} is not known", section)
            end[axis] -= length
    return (end[0], end[1], end[2], end[3], end[4], end[5])


def _go_home(control: Interpreter, number: int, block: Block) -> None:
    """G28, G30: traverse by way of the programmed point, if any, to a stored point (3.5.8)."""
    state, name = control.state, label(number * 10)
    point = control.reference_points.get(number)
    if point is None:
        raise LanguageError(name, "refused: the point it goes to is known to the control only", "3.5.8")
    home = _in_work(control, name, list(point), "3.5.8")
    if any(letter in block.words for letter in AXES):
        control.rely_on_axes(block)
        control.name_axes(block)
        by_way = control.target(block)
        control.columns.append(control.line, Shape.RAPID, by_way, state)
        state.at = by_way
    control.columns.append(control.line, Shape.RAPID, home, state)
    state.at = home
    state.moved = True
    control.gain(0b111111)
