"""What one stage hands to the next: frozen records of plain arrays.

Arrays are float64, C-contiguous and read-only unless a field says otherwise. Points are ``(n, 3)`` in mm, unit vectors
``(n, 3)``. Part coordinates are right-handed with the origin at the saddle point and Z up out of the part. Angles are
radians, except *program words*: those are what the text says, so a rotary word is in degrees.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from enum import IntEnum
from pathlib import Path
from typing import TYPE_CHECKING, Literal

import numpy as np
import numpy.typing as npt

from anticlast.cutter import Cutter

if TYPE_CHECKING:
    from anticlast.outline import Outline

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]
Bytes = npt.NDArray[np.uint8]
Bools = npt.NDArray[np.bool_]


def frozen_array(values: npt.ArrayLike, dtype: npt.DTypeLike = np.float64) -> npt.NDArray:
    """Return values as a C-contiguous array that nobody can write to, copying only where needed."""
    array = np.ascontiguousarray(values, dtype=dtype)
    if array.flags.writeable:
        array = array.view()
        array.flags.writeable = False
    return array


# ------------------------------------------------------------------------------------------------ machine file


@dataclass(frozen=True, slots=True)
class Axis:
    """One axis of a machine. Lengths mm, angles degrees, per minute or per second as the machine file has them.

    Attributes
    ----------
    letter : str
        One of X Y Z A B C.
    kind : {"linear", "rotary"}
    limits : (float, float) or None
        Travel of the spindle gauge point (linear, machine frame, mm) or of the word (rotary, degrees); None = endless.
    rapid, feed : float
        Fastest under G0 and under G1, per minute.
    acceleration, jerk : float
        Per second squared and cubed.
    carries : {"work", "cutter"} or None
        None for a linear axis.
    direction : (float, float, float)
        Unit vector in the machine frame with all axes at 0.
    through : (float, float, float)
        A point on the rotary axis, machine frame, mm.
    turns : int
        +1 if a positive word turns what the axis carries right-handed about ``direction``, else -1. 0 for linear.
    """

    letter: str
    kind: Literal["linear", "rotary"]
    limits: tuple[float, float] | None
    rapid: float
    feed: float
    acceleration: float
    jerk: float
    carries: Literal["work", "cutter"] | None = None
    direction: tuple[float, float, float] = (0.0, 0.0, 0.0)
    through: tuple[float, float, float] = (0.0, 0.0, 0.0)
    turns: int = 0


@dataclass(frozen=True, slots=True)
class Spindle:
    """Speed range in rev/min, power in kW."""

    min_rpm: float
    max_rpm: float
    power_kw: float


@dataclass(frozen=True, slots=True)
class Control:
    """How the machine's control reads a program (machine file, table ``control``)."""

    feed_mode: Literal["inverse", "per-minute"]
    path_mode: Literal["G61", "G61.1", "G64"]
    length_decimals: int
    angle_decimals: int
    feed_decimals: int
    block_rate: float
    line_numbers: bool
    program_end: Literal["M2", "M30"]


@dataclass(frozen=True, slots=True)
class Times:
    """Seconds in which the machine does not move: for a cutter change, until the spindle turns, until coolant flows."""

    tool_change_s: float = 0.0
    spindle_start_s: float = 0.0
    coolant_s: float = 0.0


@dataclass(frozen=True, slots=True)
class Machine:
    """One machine and the dialect its control reads.

    ``axes`` keeps the file's order: linear X Y Z first as listed, rotary axes from the machine frame outwards.
    ``units`` is the machine file's own; every length in this record is mm already.
    """

    name: str
    title: str
    units: Literal["mm", "inch"]
    pivot_length_mm: float
    axes: tuple[Axis, ...]
    spindle: Spindle
    control: Control
    source: Path
    times: Times = Times()

    @property
    def letters(self) -> tuple[str, ...]:
        """Axis letters in posting order: X Y Z, then the rotary axes as listed."""
        return tuple(axis.letter for axis in self.axes)

    @property
    def linear(self) -> tuple[Axis, ...]:
        """The linear axes."""
        return tuple(axis for axis in self.axes if axis.kind == "linear")

    @property
    def rotary(self) -> tuple[Axis, ...]:
        """The rotary axes, from the machine frame outwards."""
        return tuple(axis for axis in self.axes if axis.kind == "rotary")


# ------------------------------------------------------------------------------------------------ job file


@dataclass(frozen=True, slots=True)
class Part:
    """The finished form: z = a x'^2 - b y'^2 inside an outline, (x', y') being (x, y) turned by -rotate."""

    a_per_mm: float
    b_per_mm: float
    rotate_rad: float
    outline: Outline


@dataclass(frozen=True, slots=True)
class Stock:
    """The blank: a flat prism from ``bottom_mm`` to ``top_mm`` (part Z) inside ``outline``.

    With ``allowance_mm`` given, only what lies below the finished surface moved out along its normal by that much. With
    ``mesh`` or ``heights`` given, what that file holds: an STL solid, or measured heights of the top over the bottom; both in
    the job's units, inside the prism. ``specific_force_n_mm2``, lowest and highest, stands instead of the material's.
    """

    material: str
    top_mm: float
    bottom_mm: float
    outline: Outline
    allowance_mm: float | None
    mesh: Path | None = None
    heights: Path | None = None
    specific_force_n_mm2: tuple[float, float] | None = None


@dataclass(frozen=True, slots=True)
class Operation:
    """One operation of the job, in cutting order; exactly one of ``scallop_mm`` and ``stepover_mm`` for finishing.

    ``feed_mm_min`` is wanted at the cutter contact. ``lead_rad`` leans the cutter axis from the surface normal toward the
    feed direction, ``lean_rad`` sideways, positive to the left of it. ``fixed_axis`` is a unit vector in part coordinates
    when the axis does not follow the surface, else None. ``lead_margin_rad`` is the tilt error of the machine under which a
    *matched* pass must not gouge beyond the tolerance; in that pattern ``lead_rad`` is the least lead.

    To rough and to cut the outline: ``depth_of_cut_mm`` along the axis and ``width_of_cut_mm`` square to the path, None for the
    cutter's defaults; ``slotting`` allows the full width. ``reach_mm`` is how far outside the part's outline is roughed, None
    for the whole blank. ``depth_mm`` is how far under the blank's top the outline is cut, None for the blank's bottom less
    ``skin_mm``; ``tabs`` of a width and of a height over the blank's bottom stay.

    ``arcs``: passes are posted as arcs where no rotary axis moves and an axis plane and the tolerance allow.
    """

    index: int
    does: Literal["rough", "semi-finish", "finish", "outline"]
    cutter: Cutter
    pattern: str
    direction_rad: float
    scallop_mm: float | None
    stepover_mm: float | None
    allowance_mm: float
    spindle_rpm: float
    feed_mm_min: float
    lead_rad: float
    lean_rad: float
    fixed_axis: tuple[float, float, float] | None
    tolerance_mm: float
    way: Literal["both", "one-way"]
    lead_margin_rad: float = math.radians(0.05)
    depth_of_cut_mm: float | None = None
    width_of_cut_mm: float | None = None
    slotting: bool = False
    reach_mm: float | None = None
    depth_mm: float | None = None
    tabs: int = 4
    tab_width_mm: float | None = None
    tab_height_mm: float = 1.0
    skin_mm: float = 0.0
    arcs: bool = False


@dataclass(frozen=True, slots=True)
class Job:
    """A job file, loaded, checked and converted to mm and radians. ``units`` are the file's and the program's.

    ``turn_rad``: how far the part is set turned about Z from how the file describes it; applied to all other fields already.
    """

    name: str
    slug: str
    units: Literal["mm", "inch"]
    source: Path
    part: Part
    stock: Stock
    machine: Machine
    part_origin_mm: tuple[float, float, float]
    clearance_mm: float
    cutters: tuple[Cutter, ...]
    operations: tuple[Operation, ...]
    turn_rad: float = 0.0


# ------------------------------------------------------------------------------------------------ planning half


class Purpose(IntEnum):
    """What a move is for. CUT is counted as cut length; every other feed motion is link length."""

    CUT = 0  # contact inside the outline
    OVERRUN = 1  # same pass, contact outside the outline
    LINK = 2  # from one pass to the next, cutter stays down
    ENTRY = 3  # down to the surface and onto it, at feed
    EXIT = 4  # off the surface, at feed
    RAPID = 5  # G0


@dataclass(frozen=True, slots=True)
class Stretch:
    """One continuous feed motion in part coordinates, between one descent and the next lift.

    Row i describes the move that ends at point i; row 0 is where the stretch starts. Between rows the *reference point*
    (tip + reference height along the axis: a ball's centre) is meant to go straight and the axis to turn evenly.

    Attributes
    ----------
    tip_mm, axis : (n, 3)
        Cutter tip, and unit cutter axis pointing from the tip to the spindle.
    contact_mm, normal : (n, 3)
        Cutter contact on the finished surface (allowance not added) and the surface normal there.
    purpose : (n,) uint8
        A ``Purpose``, never RAPID.
    pass_index : (n,) int64
        Pass that the row belongs to, counted from 0 over the operation; a link counts to the pass it leads to.
    feed_mm_min : (n,)
        Feed wanted along the contact path; where the contact stands still, along the reference point's path.
    """

    tip_mm: Floats
    axis: Floats
    contact_mm: Floats
    normal: Floats
    purpose: Bytes
    pass_index: Ints
    feed_mm_min: Floats


@dataclass(frozen=True, slots=True)
class CutterPath:
    """All stretches of one operation, in cutting order, with what the planner promises of them.

    ``cut_length_mm`` is the contact path inside the outline. ``scallop_predicted_mm`` is the highest scallop that will be
    left inside the outline, chord error included. ``stepover_mm`` is the smallest and largest distance on the surface between
    neighbouring passes, inside the outline.
    """

    operation: Operation
    stretches: tuple[Stretch, ...]
    passes: int
    cut_length_mm: float
    stepover_mm: tuple[float, float]
    scallop_predicted_mm: float
    chord_mm: float
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class AxisPath:
    """Motion of the machine axes for one operation, ready to post. Rounded to the control's digits already.

    Attributes
    ----------
    letters : tuple of str
        Axis letters, in column order.
    words : (n, k)
        Program words at the end of each block: mm, and degrees for rotary axes, continuous and unwrapped.
    rapid : (n,) bool
        G0 block. Row 0 is the first block; where the machine stands before it is ``start``.
    minutes : (n,)
        Time asked for the block, axis feeds and block rate respected; for a rapid, the slowest axis at its rapid rate.
    purpose : (n,) uint8
    pass_index : (n,) int64
        -1 on rapids.
    start : (k,)
        Words where the machine stands before row 0 (end of the operation before; for the first, all rotary words 0).
    arcs : (n, 5) or None
        Plane of an arc (17, 18, 19; 0 = straight move), angle turned (radians, counterclockwise positive), centre from the
        start of the block (mm, X Y Z). None: no arcs.
    """

    operation: Operation
    letters: tuple[str, ...]
    words: Floats
    rapid: Bools
    minutes: Floats
    purpose: Bytes
    pass_index: Ints
    start: Floats
    notes: tuple[str, ...] = ()
    arcs: Floats | None = None


# ------------------------------------------------------------------------------------------------ read-back half

SIX = ("X", "Y", "Z", "A", "B", "C")


class Shape(IntEnum):
    """Geometry of a motion that was read: straight at rapid, straight at feed, or an arc (helix) at feed."""

    RAPID = 0
    FEED = 1
    ARC_CW = 2
    ARC_CCW = 3


@dataclass(frozen=True, slots=True)
class Motions:
    """Every motion of a program as the control would make it, one row each, in order of execution.

    Attributes
    ----------
    line : (n,) int64
        Line of the text, from 1.
    shape : (n,) uint8
        A ``Shape``.
    end : (n, 6)
        X Y Z in mm, A B C in degrees, in the coordinates of the active work offset, at the end of the motion.
    start : (n, 6)
        Same, at its start. For the first motion, zeros unless told.
    centre : (n, 3)
        Arc centre, absolute, mm; zero on straight rows.
    plane : (n,) uint8
        17, 18 or 19.
    turns : (n,)
        Angle swept by an arc, radians, positive; 0 on straight rows.
    seconds : (n,)
        Time that F asks for; nan on rapids.
    feed_word : (n,)
        F as programmed (per minute in the program's units, or inverse minutes under G93).
    inverse : (n,) bool
        G93 active.
    tool, offset_h, work_offset : (n,) int64
        Tool in the spindle (0 none), H of the active G43 (0 none or G49), 1 to 9 for G54 to G59.3.
    spindle_rpm : (n,)
        Positive under M3, negative under M4, 0 when stopped.
    coolant : (n,) uint8
        Bit 0 mist, bit 1 flood.
    """

    line: Ints
    shape: Bytes
    end: Floats
    start: Floats
    centre: Floats
    plane: Bytes
    turns: Floats
    seconds: Floats
    feed_word: Floats
    inverse: Bools
    tool: Ints
    offset_h: Ints
    work_offset: Ints
    spindle_rpm: Floats
    coolant: Bytes


@dataclass(frozen=True, slots=True)
class Event:
    """Something a program does besides moving: ``what`` is "tool", "dwell", "stop", "message", "end", "units", ..."""

    line: int
    what: str
    value: float | str


@dataclass(frozen=True, slots=True)
class Finding:
    """Outcome of one check. ``line`` is the program line of the worst place, 0 if none applies."""

    check: str
    ok: bool
    worst: float
    limit: float
    unit: str
    line: int
    message: str
    warning: bool = False  # not ok, but does not withhold the program


@dataclass(frozen=True, slots=True)
class ReadProgram:
    """A program as read: its motions, its other events, and what was wrong with it (``findings`` that are not ok)."""

    path: str
    blocks: int
    motions: Motions
    events: tuple[Event, ...]
    units: Literal["mm", "inch"]
    findings: tuple[Finding, ...]


@dataclass(frozen=True, slots=True)
class PartMotion:
    """Read-back motion in part coordinates, split so that tip and axis go straight between rows.

    Attributes
    ----------
    tip_mm, axis : (m, 3)
        Pose at the end of each piece; row 0 of the arrays is the pose before the first motion.
    line : (m,) int64
    rapid : (m,) bool
    tool : (m,) int64
    motion : (m,) int64
        Row of ``Motions`` that the piece is part of; -1 in row 0.
    fraction : (m,)
        How far along that motion the piece ends, 0 to 1.
    """

    tip_mm: Floats
    axis: Floats
    line: Ints
    rapid: Bools
    tool: Ints
    motion: Ints
    fraction: Floats


@dataclass(frozen=True, slots=True)
class ScallopMap:
    """What the virtual cut measured, in plan: residual height along the normal over the finished surface.

    ``height_mm[j, i]`` belongs to ``x_mm[i]``, ``y_mm[j]`` (part coordinates); nan outside the outline. Negative = gouge.
    """

    x_mm: Floats
    y_mm: Floats
    height_mm: npt.NDArray[np.float32]


@dataclass(frozen=True, slots=True)
class Proof:
    """Verdict of the read-back half on one program text."""

    grid_mm: float
    scallop_max_mm: float
    scallop_bound_mm: float
    scallop_at_mm: tuple[float, float]
    gouge_max_mm: float
    gouge_bound_mm: float
    uncut_area_mm2: float
    holder_clearance_mm: float
    rapid_clearance_mm: float
    travel: dict[str, tuple[float, float]]
    findings: tuple[Finding, ...]
    scallop_map: ScallopMap | None = None

    @property
    def released(self) -> bool:
        """True if every check passed."""
        return all(finding.ok or finding.warning for finding in self.findings)


@dataclass(frozen=True, slots=True)
class Wait:
    """Time in which a program does not move: ``what`` is "tool change", "spindle start", "coolant" or "dwell".

    ``before`` is the row of ``Motions`` that comes next; their number if none does.
    """

    line: int
    what: str
    seconds: float
    before: int


@dataclass(frozen=True, slots=True)
class MotionTimes:
    """Cycle time of a program's motions under the machine's limits.

    Attributes
    ----------
    seconds : (n,)
        Time of each row of ``Motions``.
    feed_only_s : (n,)
        Time that F alone asks for; for rapids, slowest axis at its rapid rate, no acceleration.
    held_back_by : (n,) uint8
        What kept the motion from its feed: 0 nothing, 1 axis speed, 2 acceleration or corner, 3 block rate.
    axis : (n,) int8, or None
        Place in ``Machine.axes`` of the axis that held it back; -1 where none did. None if not known.
    waits : tuple of Wait
        What comes on top of ``seconds``, in program order.
    """

    seconds: Floats
    feed_only_s: Floats
    held_back_by: Bytes
    axis: npt.NDArray[np.int8] | None = None
    waits: tuple[Wait, ...] = ()

    @property
    def waiting_s(self) -> float:
        """Time of all waits."""
        return sum(wait.seconds for wait in self.waits)

    @property
    def total_s(self) -> float:
        """Time of the whole program."""
        return float(self.seconds.sum()) + self.waiting_s


@dataclass(frozen=True, slots=True)
class OperationResult:
    """One operation's entry of ``summary.json``."""

    index: int
    does: str
    pattern: str
    cutter: int
    passes: int
    cut_length_mm: float
    link_length_mm: float
    length_floor_mm: float
    stepover_mm: tuple[float, float]
    scallop_predicted_mm: float
    time_s: float
    feed_only_time_s: float


@dataclass(frozen=True, slots=True)
class Made:
    """Everything ``make`` found out about a job: what the report page and the summary are written from."""

    job: Job
    released: bool
    cutter_paths: tuple[CutterPath, ...]
    axis_paths: tuple[AxisPath, ...]
    program: ReadProgram | None
    program_text: Path | None
    program_sha256: str
    part_motion: PartMotion | None
    proof: Proof | None
    times: MotionTimes | None
    operations: tuple[OperationResult, ...]
    findings: tuple[Finding, ...]
    cautions: tuple[str, ...] = ()
    advice: tuple[str, ...] = field(default=())
