"""From pieces in cutting order to legs: straight plan moves on the surface; and where the cutter lifts.

docs/theory-passes.md#links.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from anticlast.outline import Outline
from anticlast.passes.cover import Pieces
from anticlast.passes.frame import PassFrame
from anticlast.passes.order import Cut
from anticlast.records import Bools, Bytes, Floats, Ints, Purpose, frozen_array
from anticlast.tolerances import SAME_POINT_MM


@dataclass(frozen=True, slots=True)
class Legs:
    """Straight plan moves in cutting order. Leg i of a stretch starts where leg i - 1 ends.

    Attributes
    ----------
    start_mm, end_mm : (n, 2)
        Plan (x, y) in part coordinates.
    purpose : (n,) uint8
        CUT, OVERRUN or LINK.
    pass_index : (n,) int64
    stretch : (n,) int64
        Stretch that the leg belongs to, ascending from 0.
    """

    start_mm: Floats
    end_mm: Floats
    purpose: Bytes
    pass_index: Ints
    stretch: Ints


def linked(
    frame: PassFrame, pieces: Pieces, order: list[Cut], ground: Outline, longest_mm: float, one_way: bool
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
    v = pieces.v_mm[piece]
    start, end = frame.xy(last[:-1], v[:-1]), frame.xy(first[1:], v[1:])
    short = np.linalg.norm(end - start, axis=1) <= longest_mm
    stays = np.zeros(short.size, dtype=bool)
    stays[short] = ground.contains_segment(start[short], end[short])
    return stays


def legs_of(frame: PassFrame, pieces: Pieces, order: list[Cut], stays: Bools) -> Legs:
    """Return the legs of all pieces, split exactly where a pass crosses the outline, with links between."""
    corners: list[tuple[float, float]] = []
    ends: list[tuple[float, float]] = []
    purposes: list[int] = []
    owners: list[int] = []
    stretches: list[int] = []
    stretch = 0
    for number, cut in enumerate(order):
        v = float(pieces.v_mm[cut.piece])
        runs = _runs(float(pieces.u0_mm[cut.piece]), float(pieces.u1_mm[cut.piece]), pieces.inside[cut.piece])
        if cut.sign < 0:
            runs = [(b, a, purpose) for a, b, purpose in reversed(runs)]
        if number and stays[number - 1]:
            corners.append(ends[-1])
            ends.append((runs[0][0], v))
            purposes.append(Purpose.LINK)
            owners.append(number)
            stretches.append(stretch)
        elif number:
            stretch += 1
        for a, b, purpose in runs:
            corners.append((a, v))
            ends.append((b, v))
            purposes.append(purpose)
            owners.append(number)
            stretches.append(stretch)
    start, end = np.array(corners), np.array(ends)
    return Legs(
        frozen_array(frame.xy(start[:, 0], start[:, 1])),
        frozen_array(frame.xy(end[:, 0], end[:, 1])),
        frozen_array(purposes, np.uint8),
        frozen_array(owners, np.int64),
        frozen_array(stretches, np.int64),
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
