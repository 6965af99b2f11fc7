"""What stands before each operation and what each pass will meet: the stock preview, before anything is cut."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from anticlast.readback.checks import known_places
from anticlast.records import SIX
from anticlast.saddle import Saddle
from anticlast.stock.blank import blank_field
from anticlast.stock.clearance import BodyClearance, RapidContact, clearances, rapid_contacts
from anticlast.stock.engagement import LONGEST_CELLS, Engagement, follow
from anticlast.stock.field import StockField
from anticlast.stock.grid import back
from anticlast.stock.limits import load_findings
from anticlast.stock.loads import Loads, laws_of, loads_of
from anticlast.stock.pass_loads import PassLoad, pass_loads
from anticlast.stock.program_passes import passes_of
from anticlast.stock.sweep import Segments, seconds_of, take_segments
from anticlast.stock.thickness import ThicknessMap, thickness_map, thickness_range
from anticlast.stock.watch import Watch

if TYPE_CHECKING:
    from anticlast.records import Bools, Finding, Floats, Ints, Job, PartMotion, ReadProgram

Progress = Callable[[str], None]
# Clearances above this are not told apart: looking closer takes time and helps nobody.
_FARTHEST_MM = 10.0


@dataclass(frozen=True, slots=True)
class StockState:
    """The stock at one moment: before an operation, or after the last.

    Attributes
    ----------
    before : int
        Operation that comes next, counted from 1; one more than the last for the end.
    volume_mm3 : float
        Of all material.
    above_part_mm3 : float
        Of what stands over the finished surface inside the part's outline.
    thickness_mm : (float, float, float)
        Smallest, mean and largest thickness over the finished surface, along its normal.
    map : ThicknessMap
    field : StockField
        The field itself, for sections and for pictures in three dimensions.
    """

    before: int
    volume_mm3: float
    above_part_mm3: float
    thickness_mm: tuple[float, float, float]
    map: ThicknessMap
    field: StockField


@dataclass(frozen=True, slots=True)
class StockPreview:
    """Everything the preview found; ``states`` holds one entry an operation, and the end.

    Attributes
    ----------
    job : Job
    before : int
        Operation whose stock is asked for.
    spacing_mm : float
        Of the columns.
    states : tuple of StockState
    passes : tuple of PassLoad
        Of all operations, in order of time.
    findings : tuple of Finding
        Loads and clearances against the stock as it stands.
    clearances : tuple of BodyClearance
    contacts : tuple of RapidContact
    material_known : bool
        False if no cutting force of the material is known: forces, power and bending are nan.
    left_in_mm3 : float
        Material that the columns could not let go of; see ``StockField``.
    segments, engagement, loads
        Row by row along the motion, for pages and pictures.
    operation, number : (k,) int64
        Operation and pass of each segment, 0 where there is none.
    motion : PartMotion
    """

    job: Job
    before: int
    spacing_mm: float
    states: tuple[StockState, ...]
    passes: tuple[PassLoad, ...]
    findings: tuple[Finding, ...]
    clearances: tuple[BodyClearance, ...]
    contacts: tuple[RapidContact, ...]
    material_known: bool
    left_in_mm3: float
    segments: Segments
    engagement: Engagement
    loads: Loads
    operation: Ints
    number: Ints
    motion: PartMotion

    @property
    def state(self) -> StockState:
        """The stock before the operation asked for."""
        return self.states[min(self.before, len(self.states)) - 1]

    def as_json(self, *, only: int | None = None) -> dict[str, Any]:
        """Return plain data: lengths mm, times min, whatever the job's units; passes of one operation only if asked."""
        from anticlast.stock.preview_text import preview_json

        return preview_json(self, only)

    def lines(self, *, only: int | None = None) -> list[str]:
        """Return the preview as a machinist reads it."""
        from anticlast.stock.preview_text import preview_lines

        return preview_lines(self, only)


def stock_preview(
    job: Job, program: ReadProgram, motion: PartMotion, before: int | None = None, *, spacing_mm: float | None = None,
    progress: Progress = lambda _: None,
) -> StockPreview:  # fmt: skip
    """Cut the blank with a program as it was read, and say what stands and what every pass meets.

    Parameters
    ----------
    job : Job
    program : ReadProgram
    motion : PartMotion
        The program's motion in part coordinates.
    before : int, optional
        Operation whose stock is asked for, from 1; the first if not given, which is the blank.
    spacing_mm : float, optional
        Spacing of the columns.

    Raises
    ------
    BadInput
        The blank's mesh or measured heights cannot be used.
    """
    progress("the blank")
    field = blank_field(job, spacing_mm)
    saddle = Saddle.of(job.part)
    passes = passes_of(job, program)
    segments = take_segments(
        motion, job.cutters, _known(job, program, motion), longest_mm=LONGEST_CELLS * field.grid.spacing_mm
    )
    row = motion.motion[segments.row]
    operation, number = passes.operation[row], passes.number[row]
    watch = Watch.over(job.cutters, len(field.bands), _FARTHEST_MM)
    states: list[StockState] = []

    def keep(number: int) -> None:
        progress(f"stock before operation {number}" if number <= len(job.operations) else "stock at the end")
        states.append(_state(job, saddle, field, number))

    starts = _starts(operation, len(job.operations))

    def keep_from(segment: int) -> None:
        for number in range(2, len(job.operations) + 1):
            if starts[number - 1] == segment:
                keep(number)

    keep(1)
    keep_from(0)
    laws = laws_of(job)
    found = follow(
        field, segments, job.cutters, saddle, seconds=seconds_of(segments, motion, program.motions.seconds),
        rpm=np.abs(program.motions.spindle_rpm[row]), laws=laws, along_normal=_follows_surface(job)[operation],
        breaks=sorted({int(place) for place in starts} - {0, len(segments)}), at_break=keep_from, watch=watch,
    )  # fmt: skip
    if len(segments):
        keep_from(len(segments))
    keep(len(job.operations) + 1)
    known = bool(len(laws))
    loads = loads_of(found, job.cutters, segments.shape, _tilt_rad(job, saddle, segments, operation), known)
    every = pass_loads(job, segments, found, loads, operation, number, motion, known)
    near = clearances(watch, segments, motion, field)
    contacts = rapid_contacts(segments, motion, found.volume_mm3, field.grid.spacing_mm)
    return StockPreview(
        job=job, before=1 if before is None else before, spacing_mm=field.grid.spacing_mm, states=tuple(states),
        passes=every, findings=load_findings(job, every, near, contacts, field.left_in_mm3), clearances=near,
        contacts=contacts, material_known=known, left_in_mm3=field.left_in_mm3, segments=segments, engagement=found,
        loads=loads, operation=operation, number=number, motion=motion,
    )  # fmt: skip


def _known(job: Job, program: ReadProgram, motion: PartMotion) -> Bools:
    """Tell which rows are motion between places that the program states, (m,)."""
    at_start, at_end = known_places(program)
    columns = [SIX.index(letter) for letter in job.machine.letters]
    moving: Bools = np.asarray(motion.fraction > 0.0)
    if len(at_start):
        known: Bools = np.asarray((at_start & at_end)[:, columns].all(axis=1))
        moving = moving & known[np.maximum(motion.motion, 0)]
    return moving


def _starts(operation: Ints, count: int) -> Ints:
    """Return the first segment of each operation; that of the next one where an operation has none."""
    first = np.full(count, len(operation), np.int64)
    for number in range(1, count + 1):
        rows = np.flatnonzero(operation == number)
        if rows.size:
            first[number - 1] = rows[0]
    first[:1] = 0
    return np.minimum.accumulate(first[::-1])[::-1]


def _follows_surface(job: Job) -> Bools:
    """Tell for each operation, from 1, whether its depth counts along the surface normal; entry 0 stands for none."""
    follows = np.zeros(len(job.operations) + 1, bool)
    for operation in job.operations:
        follows[operation.index] = operation.does in ("finish", "semi-finish")
    return follows


def _tilt_rad(job: Job, saddle: Saddle, segments: Segments, operation: Ints) -> Floats:
    """Return the angle between cutter axis and surface normal where the surface is followed, else a right angle, (k,)."""
    tilt = np.full(len(segments), 0.5 * math.pi)
    rows = np.flatnonzero(_follows_surface(job)[operation])
    if rows.size:
        x, y = back(segments.ends[rows, 6], segments.ends[rows, 7])
        ax, ay = back(segments.ends[rows, 9], segments.ends[rows, 10])
        axis = np.column_stack((ax, ay, segments.ends[rows, 11]))
        cosine = np.sum(axis * saddle.normal(np.column_stack((x, y))), axis=1)
        tilt[rows] = np.arccos(np.clip(cosine, -1.0, 1.0))
    return tilt


def _state(job: Job, saddle: Saddle, field: StockField, before: int) -> StockState:
    outline, bottom = job.part.outline, job.stock.bottom_mm
    return StockState(
        before=before,
        volume_mm3=field.volume_mm3(),
        above_part_mm3=field.volume_above_mm3(saddle, outline),
        thickness_mm=thickness_range(field, saddle, outline, bottom),
        map=thickness_map(field, saddle, outline, bottom),
        field=field.copy(),
    )
