"""The order in which pieces of straight passes are cut: cells, zigzag inside a cell, then the nearest cell.

Boustrophedon decomposition (H. Choset, Coverage of known spaces: the boustrophedon cellular decomposition,
Autonomous Robots 9 (2000) 247-253, from memory): sweeping the passes, a cell goes on while each piece has
exactly one neighbour on the next line and is that one's only neighbour; where the outline splits or joins,
cells end. docs/theory-passes.md#order.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np

from anticlast.passes.cover import Pieces


@dataclass(frozen=True, slots=True)
class Cut:
    """One piece in cutting order; ``sign`` is +1 if it is cut towards +u."""

    piece: int
    sign: int


def cells_of(pieces: Pieces) -> list[list[int]]:
    """Return the cells, each a list of pieces on consecutive lines, ascending in v."""
    line = pieces.line
    lines = int(line.max()) + 1
    bounds = np.searchsorted(line, np.arange(lines + 1))
    after: dict[int, int] = {}
    for lower in range(lines - 1):
        here = np.arange(bounds[lower], bounds[lower + 1])
        there = np.arange(bounds[lower + 1], bounds[lower + 2])
        meets = (pieces.u0_mm[here, None] < pieces.u1_mm[there]) & (
            pieces.u0_mm[there] < pieces.u1_mm[here, None]
        )
        alone = meets & (meets.sum(axis=0) == 1) & (meets.sum(axis=1) == 1)[:, None]
        for row, column in zip(*np.nonzero(alone), strict=True):
            after[int(here[row])] = int(there[column])
    led_to = set(after.values())
    cells = []
    for head in range(line.size):
        if head in led_to:
            continue
        cell = [head]
        while cell[-1] in after:
            cell.append(after[cell[-1]])
        cells.append(cell)
    return cells


def cutting_order(pieces: Pieces, way: Literal["both", "one-way"]) -> list[Cut]:
    """Return every piece once, in the order and the direction it is cut.

    Both ways: zigzag within a cell, started at whichever of its four corners is nearest to where the cutter
    stands; the first cell at its lower line, towards +u. One way: every piece towards +u, lines ascending in
    v, cell by cell, so that the uncut stock always lies on the same side.
    """
    remaining = cells_of(pieces)
    order: list[Cut] = []
    here: tuple[float, float] | None = None
    while remaining:
        choices = [
            (_distance(here, pieces, cell[0] if up else cell[-1], sign), index, not up, -sign)
            for index, cell in enumerate(remaining)
            for up in ((True,) if way == "one-way" else (True, False))
            for sign in ((1,) if way == "one-way" else (1, -1))
        ]
        _, index, down, turned = min(choices)
        cell = remaining.pop(index)
        sign = -turned
        for piece in reversed(cell) if down else cell:
            order.append(Cut(piece, sign))
            if way == "both":
                sign = -sign
        here = _end(pieces, order[-1].piece, order[-1].sign)
    return order


def _start(pieces: Pieces, piece: int, sign: int) -> tuple[float, float]:
    ends = pieces.u0_mm if sign > 0 else pieces.u1_mm
    return float(ends[piece]), float(pieces.v_mm[piece])


def _end(pieces: Pieces, piece: int, sign: int) -> tuple[float, float]:
    return _start(pieces, piece, -sign)


def _distance(here: tuple[float, float] | None, pieces: Pieces, piece: int, sign: int) -> float:
    """Return the way from where the cutter stands to the start of a piece, mm; 0 before the first piece."""
    u, v = _start(pieces, piece, sign)
    return math.hypot(u - here[0], v - here[1]) if here else 0.0
