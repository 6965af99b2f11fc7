"""From pieces in cutting order to legs: runs of a pass and straight links; and where the cutter lifts.

docs/theory-passes.md#links.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from anticlast.outline import Outline
from anticlast.passes.courses import Course, Straight
from anticlast.passes.cover import Pieces
from anticlast.passes.frame import PassFrame
from anticlast.passes.order import Cut
from anticlast.records import Bools, Bytes, Floats, Ints, Purpose, frozen_array
from anticlast.tolerances import SAME_POINT_MM


@dataclass(frozen=True, slots=True)
class Legs:
    """Moves with the contact on the surface, in cutting order. Leg i of a stretch starts where leg i - 1 ends.

    Attributes
    ----------
    start_mm, end_mm : (n, 2)
        Plan (x, y) in part coordinates.
    line : (n,) int64
        Line of the course that the leg runs along, -1 on a link: that is straight in plan.
    u0_mm, u1_mm : (n,)
        The line's parameter at both ends; 0 on a link.
    purpose : (n,) uint8
        CUT, OVERRUN or LINK.
    pass_index : (n,) int64
    stretch : (n,) int64
        Stretch that the leg belongs to, ascending from 0.
    """

    start_mm: Floats
    end_mm: Floats
    line: Ints
    u0_mm: Floats
    u1_mm: Floats
    purpose: Bytes
    pass_index: Ints
    stretch: Ints


def walk(course: Course, legs: Legs, leg: Ints, share: Floats) -> tuple[Floats, Floats, Floats]:
    """Return plan places on legs, the unit direction of motion there, and how the plan path bends.

    Parameters
    ----------
    leg : (n,) int64
    share : (n,)
        0 at the start of the leg, 1 at its end.

    Returns
    -------
    xy, along : (n, 2)
    bend_per_mm : (n,)
        Plan curvature, positive to the left.
    """
    chord = legs.end_mm[leg] - legs.start_mm[leg]
    xy = legs.start_mm[leg] + share[:, None] * chord
    along, bend = chord, np.zeros(len(leg))
    on = np.flatnonzero(legs.line[leg] >= 0)
    if on.size:
        own = leg[on]
        run = legs.u1_mm[own] - legs.u0_mm[own]
        at, rate, turn = course.at(legs.line[own], legs.u0_mm[own] + share[on] * run)
        rate = rate * np.sign(run)[:, None]
        speed = np.linalg.norm(rate, axis=1)
        along = along.copy()
        xy[on], along[on] = at, rate
        bend[on] = (rate[:, 0] * turn[:, 1] - rate[:, 1] * turn[:, 0]) / speed**3
    return xy, along / np.linalg.norm(along, axis=1, keepdims=True), bend


def course_of(course: Course | PassFrame, pieces: Pieces) -> Course:
    """Return the course itself, or for a frame alone that of the straight passes its pieces lie on."""
    if not isinstance(course, PassFrame):
        return course
    lines = np.zeros(int(pieces.line.max()) + 1)
    lines[pieces.line] = pieces.v_mm
    return Straight(course, lines)


def linked(
    course: Course | PassFrame,
    pieces: Pieces,
    order: list[Cut],
    ground: Outline,
    longest_mm: float,
    one_way: bool,
) -> Bools:
    """Tell after which piece in cutting order the cutter stays down on its way to the next, (n - 1,).

    It does where the straight plan path between them is short and stays on ground that the passes may cover
    anyway. Cutting one way it never does: it would drag back over the surface.

    Parameters
    ----------
    ground : Outline
        The outline, grown to that ground.
    longest_mm : float
    """
    if one_way or len(order) < 2:
        return np.zeros(max(len(order) - 1, 0), dtype=bool)
    piece = np.array([cut.piece for cut in order])
    up = np.array([cut.sign for cut in order]) > 0
    first = np.where(up, pieces.u0_mm[piece], pieces.u1_mm[piece])
    last = np.where(up, pieces.u1_mm[piece], pieces.u0_mm[piece])
    line = pieces.line[piece]
    course = course_of(course, pieces)
    start, end = course.at(line[:-1], last[:-1])[0], course.at(line[1:], first[1:])[0]
    short = np.linalg.norm(end - start, axis=1) <= longest_mm
    stays = np.zeros(short.size, dtype=bool)
    stays[short] = ground.contains_segment(start[short], end[short])
    return stays


def legs_of(course: Course | PassFrame, pieces: Pieces, order: list[Cut], stays: Bools) -> Legs:
    """Return the legs of all pieces, split exactly where a pass crosses the outline, with links between."""
    course = course_of(course, pieces)
    found: list[tuple[int, float, float, int, int, int]] = []
    stretch = 0
    for number, cut in enumerate(order):
        line = int(pieces.line[cut.piece])
        runs = _runs(float(pieces.u0_mm[cut.piece]), float(pieces.u1_mm[cut.piece]), pieces.inside[cut.piece])
        if cut.sign < 0:
            runs = [(b, a, purpose) for a, b, purpose in reversed(runs)]
        if number and stays[number - 1]:
            found.append((-1, 0.0, 0.0, Purpose.LINK, number, stretch))
        elif number:
            stretch += 1
        found += [(line, a, b, purpose, number, stretch) for a, b, purpose in runs]
    lines, first, last, purposes, owners, stretches = (
        np.array(column) for column in zip(*found, strict=True)
    )
    on, link = np.flatnonzero(lines >= 0), np.flatnonzero(lines < 0)
    start, end = np.empty((2, lines.size, 2))
    start[on], end[on] = course.at(lines[on], first[on])[0], course.at(lines[on], last[on])[0]
    start[link], end[link] = end[link - 1], start[link + 1]
    return Legs(
        start_mm=frozen_array(start),
        end_mm=frozen_array(end),
        line=frozen_array(lines, np.int64),
        u0_mm=frozen_array(first),
        u1_mm=frozen_array(last),
        purpose=frozen_array(purposes, np.uint8),
        pass_index=frozen_array(owners, np.int64),
        stretch=frozen_array(stretches, np.int64),
    )


def _runs(first: float, last: float, inside: Floats) -> list[tuple[float, float, int]]:
    """Return one piece as (from, to, purpose) runs of growing u: CUT inside the outline, OVERRUN outside."""
    runs: list[tuple[float, float, int]] = []
    at = first
    for a, b in inside.tolist():
        a, b = max(a, first), min(b, last)
        if b - a <= SAME_POINT_MM:
            continue
        if a - at > SAME_POINT_MM:
            runs.append((at, a, Purpose.OVERRUN))
        elif runs:
            a = at
        runs.append((a, b, Purpose.CUT))
        at = b
    if last - at > SAME_POINT_MM or not runs:
        runs.append((at, last, Purpose.OVERRUN))
    return runs
