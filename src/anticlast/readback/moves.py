"""Motions of one line: straight moves, arcs, canned cycles, and the probing motion that a proof refuses."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from anticlast.readback import cycles, offsets
from anticlast.readback.arcs import (
    PLANE_AXES,
    RADIUS_SLACK_INCH_MM,
    RADIUS_SLACK_MM,
    centre_form,
    radius_form,
)
from anticlast.readback.language import ARCS, AXES, CYCLES, ONE_SHOT, LanguageError, label
from anticlast.readback.modes import Six
from anticlast.readback.words import Block
from anticlast.records import Shape

if TYPE_CHECKING:
    from anticlast.readback.interpreter import Interpreter

_PROBE_MM = 0.254  # shortest probing motion, 3.5.9.1 (0.01 inch)


def make_motion(control: Interpreter, code: int, block: Block) -> None:
    """Carry out the motion code of a line.

    Parameters
    ----------
    control : Interpreter
    code : int
        Motion code times ten; G80 only ends a mode.
    block : Block

    Raises
    ------
    LanguageError
        The motion breaks a rule of its section, or cannot be followed.
    """
    if code == 382:
        _probe(control, block)
    if code in CYCLES:
        _cycle(control, code, block)
    elif code in ARCS:
        _arc(control, code, block)
    elif code in (0, 10):
        _straight(control, code, block)
    if code not in CYCLES:
        control.state.depth = control.state.clear = control.state.dwell = None
    control.state.motion = code


def _move(control: Interpreter, shape: Shape, end: Six) -> None:
    control.columns.append(control.line, shape, end, control.state)
    control.state.at = end
    control.state.moved = True


def _straight(control: Interpreter, code: int, block: Block) -> None:
    shape = Shape.RAPID if code == 0 else Shape.FEED
    feed_group = () if code == 0 else ("feed mode",)
    if block.g.get(ONE_SHOT) == 530:
        control.rely_on_axes(block, *feed_group)
        bits = control.name_axes(block)
        end = offsets.from_machine(control, block)
        _move(control, shape, end)
        control.gain(bits)
        return
    control.rely_on_axes(block, *feed_group)
    bits = control.name_axes(block)
    _move(control, shape, control.target(block))
    if control.state.absolute:
        control.gain(bits)


def _arc(control: Interpreter, code: int, block: Block) -> None:
    state, words, name = control.state, block.words, label(code)
    first, second, normal = PLANE_AXES[state.plane]
    control.rely_on_axes(block, "feed mode", "plane")
    bits = control.name_axes(block)
    if AXES[first] not in words and AXES[second] not in words:
        raise LanguageError(
            name, f"needs {AXES[first].upper()} or {AXES[second].upper()} under G{state.plane}", "3.5.3"
        )
    centre_letters = ("ijk"[first], "ijk"[second])
    given = [letter for letter in "ijk" if letter in words]
    strangers = [letter for letter in given if letter not in centre_letters]
    if strangers:
        raise LanguageError(strangers[0].upper(), f"has no meaning in an arc under G{state.plane}", "3.5.3.2")
    if given and "r" in words:
        raise LanguageError("R", f"stands beside {given[0].upper()}: give the radius or the centre", "3.5.3")
    if not given and "r" not in words:
        wanted = " or ".join(letter.upper() for letter in centre_letters)
        raise LanguageError(name, f"needs R, or {wanted} under G{state.plane}", "3.5.3")
    end = control.target(block)
    at, to = (state.at[first], state.at[second]), (end[first], end[second])
    slack = RADIUS_SLACK_INCH_MM if state.inch else RADIUS_SLACK_MM
    if given:
        offset = (
            words.get(centre_letters[0], 0.0) * state.factor,
            words.get(centre_letters[1], 0.0) * state.factor,
        )
        flat, turned = centre_form(name, at, to, offset, code == 20, slack)
    else:
        flat, turned = radius_form(name, at, to, words["r"] * state.factor, code == 20, slack)
    centre = [0.0, 0.0, 0.0]
    centre[first], centre[second], centre[normal] = flat[0], flat[1], state.at[normal]
    shape = Shape.ARC_CW if code == 20 else Shape.ARC_CCW
    control.columns.append(control.line, shape, end, state, (centre[0], centre[1], centre[2]), turned)
    state.at = end
    state.moved = True
    if state.absolute:
        control.gain(bits)


def _probe(control: Interpreter, block: Block) -> None:
    state = control.state
    if not any(letter in block.words for letter in "xyz"):
        raise LanguageError("G38.2", "needs an X, Y or Z word", "3.5.9.1")
    if state.inverse:
        raise LanguageError("G38.2", "is not allowed under G93", "3.5.9.1")
    end = control.target(block)
    if end[3:] != state.at[3:]:
        raise LanguageError("G38.2", "must not move a rotary axis", "3.5.9.1")
    if math.dist(end[:3], state.at[:3]) < _PROBE_MM:
        raise LanguageError("G38.2", f"its target is nearer than {_PROBE_MM} mm (0.01 inch)", "3.5.9.1")
    raise LanguageError("G38.2", "refused: where the probe trips is not available in a proof", "3.5.9")


def _cycle(control: Interpreter, code: int, block: Block) -> None:
    state, words, name = control.state, block.words, label(code)
    cycles.refuse_unknown(code)
    control.rely_on_axes(block, "feed mode", "plane", "retract")
    bits = control.name_axes(block)
    if state.inverse:
        raise LanguageError(name, "is not allowed under G93", "3.5.16")
    if not any(letter in words for letter in "xyz"):
        raise LanguageError(name, "needs an X, Y or Z word", "3.5.16")
    end = control.target(block)
    if end[3:] != state.at[3:]:
        raise LanguageError(name, "must not move a rotary axis", "3.5.16")
    first, second, normal = PLANE_AXES[state.plane]
    running = control.cycle_running(code)
    depth = words.get(AXES[normal], state.depth if running else None)
    clear = words.get("r", state.clear if running else None)
    dwell = words.get("p", state.dwell if running else None)
    if depth is None or clear is None:
        missing = AXES[normal].upper() if depth is None else "R"
        raise LanguageError(name, f"needs {missing}: this cycle is not in force yet", "3.5.16")
    if cycles.needs_dwell(code) and (dwell is None or dwell < 0.0):
        raise LanguageError(name, "needs P, the seconds to wait, not negative", "3.5.16")
    state.depth, state.clear, state.dwell = depth, clear, dwell
    base = state.shift[normal] if state.absolute else state.at[normal]
    clear_mm = clear * state.factor + base
    hole = cycles.Hole(
        code=code,
        axes=(first, second, normal),
        at=state.at[:3],
        target=(end[first], end[second]),
        stride=(0.0, 0.0)
        if state.absolute
        else (end[first] - state.at[first], end[second] - state.at[second]),
        clear_mm=clear_mm,
        depth_mm=depth * state.factor + (state.shift[normal] if state.absolute else clear_mm),
        dwell_s=dwell or 0.0,
        repeats=cycles.repeats_of(words.get("l"), state.repeats),
        retract_to_r=state.retract_to_r,
    )
    state.repeats += hole.repeats - 1
    rotary = state.at[3:]
    for what, point, seconds in cycles.steps_of(hole):
        if what == "dwell":
            control.event("dwell", seconds)
        else:
            _move(control, Shape.RAPID if what == "traverse" else Shape.FEED, (*point, *rotary))
    if state.absolute:
        control.gain(bits | 1 << normal)
