"""Executes one line after another in the order that Table 8 (NISTIR 6556 section 3.8) gives.

A line that breaks the language changes nothing: no state, no motion, no event is kept of it.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from anticlast.readback import offsets
from anticlast.readback.columns import Columns
from anticlast.readback.language import (
    ARCS,
    AXES,
    CYCLES,
    G_SECTION,
    MOTION,
    ONE_SHOT,
    PATH_MODE,
    SYSTEM,
    TAKEN_BY,
    USES_AXES_ONCE,
    LanguageError,
    label,
    whole,
)
from anticlast.readback.modes import UNKNOWN, ZERO, Six, State
from anticlast.readback.moves import make_motion
from anticlast.readback.words import Block, parse_line
from anticlast.records import Event, Finding

_TIMED = ARCS | {10}  # motions that need F under G93, 3.5.19


class Interpreter:
    """A control's state, and the motions and events it has made so far.

    Parameters
    ----------
    columns : Columns
        Where motions go.
    length_offsets : Mapping[int, float] or None
        Length of each H number, mm; None if not known.
    start : six floats or None
        Where the machine stands before the first line, mm and degrees in G54.
    slots : int
        Carousel slots, the largest T, H and D number.
    work_origin : sequence of 3 or 6 floats, or None
        Machine coordinates of G54, mm and degrees; None if not known.
    reference_points : Mapping[int, sequence of six floats] or None
        Machine coordinates that G28 and G30 go to, under keys 28 and 30.
    parameters : Mapping[int, float] or None
        Numbered parameters as the control has them before the program.
    """

    def __init__(
        self,
        columns: Columns,
        *,
        length_offsets: Mapping[int, float] | None = None,
        start: Six | None = None,
        slots: int = 99,
        work_origin: Sequence[float] | None = None,
        reference_points: Mapping[int, Sequence[float]] | None = None,
        parameters: Mapping[int, float] | None = None,
    ) -> None:
        self.columns = columns
        self.lengths = length_offsets
        self.slots = slots
        self.reference_points = dict(reference_points or {})
        self.parameters = dict(parameters or {})
        self.events: list[Event] = []
        self.notes: list[Finding] = []
        self.blocks = 0
        self.line = 0
        self.state = State(at=start or ZERO)
        if start is not None:
            self.gain(0b111111)
        if work_origin is not None:
            first = (*map(float, work_origin), 0.0, 0.0, 0.0)[:6]
            self.state.origins = (first, *(UNKNOWN,) * 8)

    # ------------------------------------------------------------------------------------------ bookkeeping

    def event(self, what: str, value: float | str) -> None:
        """Note something that the line does."""
        self.events.append(Event(self.line, what, value))

    def note(self, check: str, message: str) -> None:
        """Note something legal that withholds the program all the same."""
        self.notes.append(Finding(check, False, 1.0, 0.0, "", self.line, message))

    def rely(self, *groups: str) -> None:
        """Report, once each, modal groups that a motion relies on and the program has not stated."""
        state = self.state
        missing = [group for group in groups if group not in state.stated and group not in state.told]
        for group in missing:
            self.note(
                "modes stated",
                f"the {group} is relied on here but never stated; no default can be counted on",
            )
        if missing:
            state.told = state.told.union(missing)

    def gain(self, bits: int) -> None:
        """Axes whose place the program has now stated."""
        for axis in range(6):
            if bits >> axis & 1 and not self.state.known >> axis & 1:
                self.event("position known", AXES[axis].upper())
        self.state.known |= bits

    def lose(self, bits: int) -> None:
        """Axes whose reading has changed by an unknown amount."""
        for axis in range(6):
            if bits >> axis & 1 and self.state.known >> axis & 1:
                self.event("position unknown", AXES[axis].upper())
        self.state.known &= ~bits

    def name_axes(self, block: Block) -> int:
        """Return the bits of the axis words on a line, noting each letter's first use."""
        bits = 0
        for axis, letter in enumerate(AXES):
            if letter in block.words:
                bits |= 1 << axis
                if not self.state.named >> axis & 1:
                    self.event("axis word", letter.upper())
        self.state.named |= bits
        return bits

    # ------------------------------------------------------------------------------------------ one line

    def execute(self, line: int, text: str, block_delete: bool = False) -> None:
        """Read and execute one line.

        Parameters
        ----------
        line : int
            Its number in the file, from 1.
        text : str
            The line without its end.
        block_delete : bool
            Whether the switch that skips lines with "/" is on (2.2.2).

        Raises
        ------
        LanguageError
            The line is not legal, or asks for what cannot be followed. Nothing of it is kept.
        """
        self.line = line
        block = parse_line(text, self.parameters)
        if block.deleted and block_delete:
            return
        saved = self.state.snapshot()
        kept = (self.columns.rows, len(self.events), len(self.notes))
        try:
            self._run(block)
        except LanguageError:
            self.state = saved
            self.columns.rows = kept[0]
            del self.events[kept[1] :], self.notes[kept[2] :]
            raise
        self.parameters.update(block.settings)
        self.blocks += not block.blank

    def _run(self, block: Block) -> None:
        if block.message is not None:
            self.event("message", block.message)
        if block.blank:
            return
        motion = self._motion_of(block)
        self._check_words(block, motion)
        self._feed(block, motion)
        self._tool_and_spindle(block)
        if block.g.get(ONE_SHOT) == 40:
            self._dwell(block)
        self._settings(block)
        once = block.g.get(ONE_SHOT)
        if once is not None:
            offsets.one_shot(self, once, block)
        if motion is not None:
            make_motion(self, motion, block)
        self._stop(block)

    def _motion_of(self, block: Block) -> int | None:
        """Return the motion code to carry out on this line, None for none (3.4, 3.5.15)."""
        once, asked = block.g.get(ONE_SHOT), block.g.get(MOTION)
        has_axes = any(letter in block.words for letter in AXES)
        takes = once in USES_AXES_ONCE
        if takes and asked not in (None, 800):
            raise LanguageError(
                f"{label(once or 0)} {label(asked or 0)}", "two codes that use axis words on one line", "3.4"
            )
        motion = self.state.motion if asked is None else asked
        if asked is None and (not has_axes or takes):
            motion = None
        elif motion is None:
            raise LanguageError("axis word", "no motion mode is stated (G0, G1, ...)", "3.4")
        elif motion == 800:
            if has_axes and not takes:
                raise LanguageError("G80", "axis words under G80 need a code that uses them", "3.5.15")
        elif not has_axes:
            raise LanguageError(label(motion), "needs at least one axis word", G_SECTION[motion])
        if once == 530 and (motion not in (0, 10) or not has_axes):
            raise LanguageError("G53", "works only with a G0 or G1 motion", "3.5.12")
        return motion

    def _check_words(self, block: Block, motion: int | None) -> None:
        codes = set(block.g.values())
        if motion is not None:
            codes.add(motion)
        for letter in block.words:
            takers = TAKEN_BY.get(letter)
            if takers is not None and not takers & codes:
                raise LanguageError(letter.upper(), "nothing on this line uses this word", "3.3")

    def _feed(self, block: Block, motion: int | None) -> None:
        state = self.state
        mode = block.g.get("feed mode")
        if mode is not None:
            if state.inverse != (mode == 930):
                state.feed = 0.0  # which F survives a change of feed mode is not stated (3.5.19)
            state.inverse = mode == 930
            self._state_mode("feed mode", label(mode))
        feed = block.words.get("f")
        if feed is not None and feed < 0.0:
            raise LanguageError(f"F{feed:g}", "a feed is not negative", "3.7.1")
        if state.inverse and motion in _TIMED:
            if feed is None:
                raise LanguageError(
                    label(motion or 0), "under G93 every feed motion needs its own F", "3.5.19"
                )
            state.feed = feed
        elif feed is not None and not state.inverse:
            state.feed = feed
        if feed is not None and motion is None:
            self.event("feed", feed)

    def _state_mode(self, group: str, value: str) -> None:
        self.state.stated |= {group}
        self.event("mode", value)

    def _tool_and_spindle(self, block: Block) -> None:
        state, words = self.state, block.words
        if "s" in words:
            if words["s"] < 0.0:
                raise LanguageError(f"S{words['s']:g}", "a speed is not negative", "3.7.2")
            state.speed = words["s"]
            self.event("speed", state.speed)
        if "t" in words:
            state.selected = whole("T", words["t"], 0, self.slots, "3.7.3")
            self.event("select", float(state.selected))
        if "tool change" in block.m:
            if state.selected is None:
                self.note("tool in spindle", "M6 without a T before it: which cutter comes is unknown")
            state.tool = state.selected or 0
            state.turning = 0
            self.event("tool", float(state.tool))
        if "spindle" in block.m:
            state.turning = {3: 1, 4: -1, 5: 0}[block.m["spindle"]]
            self.event("spindle", state.spindle_rpm)
        if "coolant" in block.m:
            state.coolant = {7: state.coolant | 1, 8: state.coolant | 2, 9: 0}[block.m["coolant"]]
            self.event("coolant", float(state.coolant))
        if "overrides" in block.m:
            self.event("overrides", "on" if block.m["overrides"] == 48 else "off")

    def _dwell(self, block: Block) -> None:
        seconds = block.words.get("p")
        if seconds is None or seconds < 0.0:
            raise LanguageError("G4", "needs P, the seconds to wait, not negative", "3.5.4")
        self.event("dwell", seconds)

    def _settings(self, block: Block) -> None:
        """Modes of steps 11 to 18 of Table 8."""
        state, g = self.state, block.g
        if "plane" in g:
            state.plane = g["plane"] // 10
            self._state_mode("plane", label(g["plane"]))
        if "units" in g:
            inch = g["units"] == 200
            if state.moved and inch != state.inch:
                self.note("units", f"{label(g['units'])} changes the units after the first motion")
            state.inch = inch
            state.stated |= {"units"}
            self.event("units", "inch" if inch else "mm")
        compensation = g.get("cutter compensation")
        if compensation in (410, 420):
            raise LanguageError(
                label(compensation),
                "refused in a proof: cutter radius compensation is not followed",
                "3.5.10",
            )
        if compensation == 400:
            self._state_mode("cutter compensation", "G40")
        if "length offset" in g:
            offsets.length_offset(self, g["length offset"], block)
        if "work offset" in g:
            offsets.select_system(self, SYSTEM[g["work offset"]])
            self.state.stated |= {"work offset"}
            self.event("work offset", label(g["work offset"]))
        if "path" in g:
            self._state_mode("path", PATH_MODE[g["path"]])
        if "distance" in g:
            state.absolute = g["distance"] == 900
            self._state_mode("distance", label(g["distance"]))
        if "retract" in g:
            state.retract_to_r = g["retract"] == 990
            self._state_mode("retract", label(g["retract"]))

    def _stop(self, block: Block) -> None:
        code = block.m.get("stopping")
        if code is None:
            return
        if code not in (2, 30):
            self.event("stop", f"M{code}")
            return
        state = self.state  # 3.6.1: what M2 and M30 reset; units, length offset, F, S and tool stay
        state.shift = ZERO
        offsets.select_system(self, 1)
        state.plane, state.absolute, state.inverse = 17, True, False
        state.turning, state.coolant, state.motion = 0, 0, 10
        state.ended = True
        self.event("end", f"M{code}")

    # ------------------------------------------------------------------------------------------ for motions

    def target(self, block: Block) -> Six:
        """Return where the axis words of a line lead, mm and degrees in the active work offset."""
        state, factor = self.state, self.state.factor
        end = list(state.at)
        for axis, letter in enumerate(AXES):
            if letter in block.words:
                value = block.words[letter] * factor if axis < 3 else block.words[letter]
                end[axis] = value + state.shift[axis] if state.absolute else state.at[axis] + value
        return (end[0], end[1], end[2], end[3], end[4], end[5])

    def rely_on_axes(self, block: Block, *groups: str) -> None:
        """Report the unstated groups that every motion with these words relies on, and those named."""
        if any(letter in block.words for letter in "xyzijkr"):
            self.rely("units")
        self.rely("distance", "work offset", *groups)

    def cycle_running(self, code: int) -> bool:
        """Return whether a canned cycle is already in force from a line before."""
        return code in CYCLES and self.state.motion == code
