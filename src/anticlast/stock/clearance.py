"""Clearance to the stock as it stands at each moment: rapids, shank and holder, and what a rapid would cut.

Distances are taken to the middles of columns at poses no further apart than half a cell, so no true distance is smaller than
the one found by more than ``slack_mm``: half a cell's diagonal, half the way between poses, and the hundredth of the distance
that is not told apart. docs/theory-stock.md, "Clearance through time".
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Final

import numpy as np

from anticlast.stock.field import StockField, runs
from anticlast.stock.grid import back
from anticlast.stock.sweep import Segments, take_segments
from anticlast.stock.watch import STEP_SHARE, Watch

if TYPE_CHECKING:
    from anticlast.cutter import Cutter
    from anticlast.records import Bools, Floats, PartMotion
    from anticlast.saddle import Saddle

# A rapid that takes less than this share of a cell's area for each cell of its path, one cell deep, only brushed a column.
_BRUSH_SHARE = 0.02
FARTHEST_MM: Final = 200.0
# Bodies are watched against what stands before a segment, or after it cut: segments no longer than so many cells.
_LONGEST_CELLS = 8.0


@dataclass(frozen=True, slots=True)
class BodyClearance:
    """Least distance of one body from the stock as it stood.

    Attributes
    ----------
    cutter : int
    body : str
        ``"cutting end"`` (at rapid only), ``"shank"``, ``"holder 1"``, ...
    distance_mm : float
        Negative where it reaches in; with ``row`` -1 the body stayed this far off or further.
    slack_mm : float
        No true distance is smaller than ``distance_mm - slack_mm``.
    row : int
        Row of the part motion at the least distance, -1 if the body never came near.
    line : int
        Its program line, 0 if none.
    at_mm : (float, float)
        Plan place of the nearest material, part coordinates.
    first_row, first_line : int
        Where the body first reached in; -1 and 0 if it never did.
    """

    cutter: int
    body: str
    distance_mm: float
    slack_mm: float
    row: int
    line: int
    at_mm: tuple[float, float]
    first_row: int
    first_line: int


@dataclass(frozen=True, slots=True)
class RapidContact:
    """A rapid that runs into stock: row of the part motion, program line, and how much it would take."""

    row: int
    line: int
    volume_mm3: float


def clearance_through_time(
    field: StockField, motion: PartMotion, cutters: Sequence[Cutter], saddle: Saddle, *, moving: Bools | None = None,
    farthest_mm: float = FARTHEST_MM,
) -> tuple[tuple[BodyClearance, ...], tuple[RapidContact, ...]]:  # fmt: skip
    """Cut the field in time order and follow how near shank, holder and, at rapid, the cutting end come to what stands.

    Rapids are held against the stock before they move, feed moves against the stock they leave: a shank may stand in the slot
    that its own flutes have just cut.

    Parameters
    ----------
    field : StockField
        Is cut; give a copy to keep it.
    motion : PartMotion
        Part coordinates.
    cutters : sequence of Cutter
    saddle : Saddle
    moving : (m,) bool, optional
        Rows to use; all that move if not given.
    farthest_mm : float
        Larger distances are not told apart from this one.

    Returns
    -------
    clearances : tuple of BodyClearance
        One for each body of each cutter.
    contacts : tuple of RapidContact
        Every rapid that would take material, in order of time.
    """
    spacing = field.grid.spacing_mm
    segments = take_segments(motion, cutters, moving, longest_mm=_LONGEST_CELLS * spacing)
    watch = Watch.over(cutters, len(field.bands), farthest_mm)
    volume = np.zeros(len(segments))
    for first, after in runs(segments, None):
        volume[first:after] = field.run(segments, cutters, saddle, (first, after), watch=watch).volume_mm3
    return clearances(watch, segments, motion, field), rapid_contacts(segments, motion, volume, spacing)


def slack_mm(spacing_mm: float, distance_mm: float) -> float:
    """Return how much smaller than found a true distance to the stock may be."""
    return spacing_mm * (math.sqrt(0.5) + 0.5 * STEP_SHARE) + 0.01 * max(0.0, distance_mm)


def clearances(
    watch: Watch, segments: Segments, motion: PartMotion, field: StockField
) -> tuple[BodyClearance, ...]:
    """Return what a watch found, one entry a body."""
    grid, answers = field.grid, []
    for body, name in enumerate(watch.names):
        found = watch.found[:, body]
        best = found[int(np.argmin(found[:, 0]))]
        touched = found[found[:, 5] >= 0.0, 5]
        row = int(segments.row[int(best[1])]) if best[1] >= 0.0 else -1
        first = int(segments.row[int(touched.min())]) if touched.size else -1
        x, y = back(
            np.array(grid.u0_mm + grid.spacing_mm * best[4]), np.array(grid.v0_mm + grid.spacing_mm * best[3])
        )
        answers.append(
            BodyClearance(
                cutter=watch.cutters[body],
                body=name,
                distance_mm=float(best[0]),
                slack_mm=slack_mm(grid.spacing_mm, float(best[0])),
                row=row,
                line=int(motion.line[row]) if row >= 0 else 0,
                at_mm=(float(x), float(y)),
                first_row=first,
                first_line=int(motion.line[first]) if first >= 0 else 0,
            )
        )
    return tuple(answers)


def rapid_contacts(
    segments: Segments, motion: PartMotion, volume_mm3: Floats, spacing_mm: float
) -> tuple[RapidContact, ...]:
    """Return the rapids that took material, by row of the part motion, in order of time."""
    least = _BRUSH_SHARE * spacing_mm**3 * np.maximum(1.0, segments.length_mm / spacing_mm)
    rows = np.flatnonzero(segments.rapid & (volume_mm3 > least))
    return tuple(
        RapidContact(int(segments.row[k]), int(motion.line[segments.row[k]]), float(volume_mm3[k]))
        for k in rows
    )


def first_contact(
    field: StockField,
    motion: PartMotion,
    cutters: Sequence[Cutter],
    saddle: Saddle,
    moving: Bools | None = None,
) -> RapidContact | None:
    """Return the first rapid that runs into the stock as it stands at that moment, None if none does. Cuts the field."""
    segments = take_segments(motion, cutters, moving)
    for first, after in runs(segments, None):
        volume = np.zeros(len(segments))
        volume[first:after] = field.run(segments, cutters, saddle, (first, after)).volume_mm3
        found = rapid_contacts(segments, motion, volume, field.grid.spacing_mm)
        if found:
            return found[0]
    return None
