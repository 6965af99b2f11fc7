"""Growing columns of motions, shared by the compiled reader and the interpreter, and their times."""

from __future__ import annotations

import numpy as np

from anticlast.readback.modes import MM_PER_INCH, Six, State
from anticlast.records import Motions, Shape, frozen_array

_NO_CENTRE = (0.0, 0.0, 0.0)
_FLOATS = ("turns", "feed_word", "spindle_rpm")
_INTS = ("line", "tool", "offset_h", "work_offset")
_BYTES = ("shape", "plane", "coolant", "inverse", "inch")


class Columns:
    """Arrays with spare room: the first ``rows`` rows are motions, in order of execution.

    Parameters
    ----------
    capacity : int
        Rows to make room for at once.
    """

    def __init__(self, capacity: int) -> None:
        room = max(capacity, 16)
        self.rows = 0
        self.start = np.zeros((room, 6))
        self.end = np.zeros((room, 6))
        self.centre = np.zeros((room, 3))
        self.held = {name: np.zeros(room) for name in _FLOATS}
        self.held |= {name: np.zeros(room, dtype=np.int64) for name in _INTS}
        self.held |= {name: np.zeros(room, dtype=np.uint8) for name in _BYTES}

    @property
    def room(self) -> int:
        """Rows that fit."""
        return len(self.start)

    def make_room(self) -> None:
        """Double the columns if they are full."""
        if self.rows < self.room:
            return
        for name in ("start", "end", "centre"):
            old = getattr(self, name)
            setattr(self, name, np.concatenate([old, np.zeros_like(old)]))
        self.held = {name: np.concatenate([old, np.zeros_like(old)]) for name, old in self.held.items()}

    def append(
        self,
        line: int,
        shape: Shape,
        end: Six,
        state: State,
        centre: tuple[float, float, float] = _NO_CENTRE,
        turned_rad: float = 0.0,
    ) -> None:
        """Add the motion from where the state stands to ``end`` (mm and degrees)."""
        self.make_room()
        row = self.rows
        self.start[row] = state.at
        self.end[row] = end
        self.centre[row] = centre
        self.held["line"][row] = line
        self.held["shape"][row] = shape
        self.held["turns"][row] = turned_rad
        self.held["feed_word"][row] = 0.0 if shape == Shape.RAPID else state.feed
        self.constants(row, row + 1, state)
        self.rows = row + 1

    def constants(self, low: int, high: int, state: State) -> None:
        """Fill what a state fixes for a run of motions, rows ``low`` to ``high``."""
        held = self.held
        held["plane"][low:high] = state.plane
        held["inverse"][low:high] = state.inverse
        held["inch"][low:high] = state.inch
        held["tool"][low:high] = state.tool
        held["offset_h"][low:high] = state.offset_h
        held["work_offset"][low:high] = state.system
        held["spindle_rpm"][low:high] = state.spindle_rpm
        held["coolant"][low:high] = state.coolant

    def motions(self, rows: int) -> Motions:
        """Return the first ``rows`` motions as a record; the columns must not grow any more."""

        def cut(values: np.ndarray) -> np.ndarray:
            return values[:rows] if 2 * rows >= len(values) else values[:rows].copy()

        take = {name: cut(values) for name, values in self.held.items()}
        start, end, centre = cut(self.start), cut(self.end), cut(self.centre)
        seconds = seconds_asked(
            start, end, centre, take["shape"], take["plane"], take["turns"],
            take["feed_word"], take["inverse"] != 0, take["inch"] != 0,
        )  # fmt: skip
        return Motions(
            line=frozen_array(take["line"], np.int64),
            shape=frozen_array(take["shape"], np.uint8),
            end=frozen_array(end),
            start=frozen_array(start),
            centre=frozen_array(centre),
            plane=frozen_array(take["plane"], np.uint8),
            turns=frozen_array(take["turns"]),
            seconds=frozen_array(seconds),
            feed_word=frozen_array(take["feed_word"]),
            inverse=frozen_array(take["inverse"] != 0, np.bool_),
            tool=frozen_array(take["tool"], np.int64),
            offset_h=frozen_array(take["offset_h"], np.int64),
            work_offset=frozen_array(take["work_offset"], np.int64),
            spindle_rpm=frozen_array(take["spindle_rpm"]),
            coolant=frozen_array(take["coolant"], np.uint8),
        )


def seconds_asked(
    start: np.ndarray,
    end: np.ndarray,
    centre: np.ndarray,
    shape: np.ndarray,
    plane: np.ndarray,
    turns_rad: np.ndarray,
    feed_word: np.ndarray,
    inverse: np.ndarray,
    inch: np.ndarray,
) -> np.ndarray:
    """Return the time that F asks for on each motion, seconds; nan on rapids and where no F is in force.

    Under G94 F is length per minute along the XYZ path when X, Y or Z moves, whatever the rotary axes do;
    else degrees per minute over the root of the summed squares of the turns (NISTIR 6556 sections 2.1.2.5 A,
    B, C and 3.5.19). An arc's path is the arc or helix itself (2.1.2.6). Under G93 the motion takes 1/F
    minutes (3.5.19).

    Parameters
    ----------
    start, end : (n, 6)
        mm and degrees.
    centre : (n, 3)
        mm.
    shape, plane : (n,)
        ``Shape`` and 17 to 19.
    turns_rad : (n,)
    feed_word : (n,)
        As programmed.
    inverse, inch : (n,) bool
        G93, G20 in force.
    """
    step = end - start
    length = np.sqrt(step[:, 0] ** 2 + step[:, 1] ** 2 + step[:, 2] ** 2)
    turn_deg = np.sqrt(step[:, 3] ** 2 + step[:, 4] ** 2 + step[:, 5] ** 2)
    arcs = np.flatnonzero(shape >= Shape.ARC_CW)
    if len(arcs):
        normal = np.array([2, 1, 0])[plane[arcs].astype(np.int64) - 17]
        spoke = start[arcs, :3] - centre[arcs]
        rise = step[arcs, normal]
        spoke[np.arange(len(arcs)), normal] = 0.0
        length[arcs] = np.hypot(np.sqrt((spoke**2).sum(axis=1)) * turns_rad[arcs], rise)
    seconds = np.full(len(step), np.nan)
    feeding = (shape != Shape.RAPID) & (feed_word > 0.0)
    timed = feeding & inverse
    seconds[timed] = 60.0 / feed_word[timed]
    along = feeding & ~inverse & (length > 0.0)
    seconds[along] = 60.0 * length[along] / (feed_word[along] * np.where(inch[along], MM_PER_INCH, 1.0))
    around = feeding & ~inverse & ~(length > 0.0)
    seconds[around] = 60.0 * turn_deg[around] / feed_word[around]
    return seconds
