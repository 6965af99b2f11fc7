"""What can be varied for one finishing operation: cutter, pattern, direction, tilt, way; each choice a `Case`."""

from __future__ import annotations

import contextlib
import math
from collections.abc import Iterable
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from anticlast.cutter import Cutter
from anticlast.errors import BadInput, CannotPlan, Fault
from anticlast.job_schema import FINISH_PATTERNS
from anticlast.machine.kinematics import Kinematics
from anticlast.passes.direction import Spacing, best_direction, convex_axis_rad, most_convex_direction_rad
from anticlast.passes.plan import require_pattern
from anticlast.passes.tilt import angle_between, wished_axis
from anticlast.records import Floats, Job, Operation
from anticlast.saddle import Saddle

Way = Literal["both", "one-way"]

# Leads and leans tried on balls, degrees: 15 keeps a ball off its dead middle (common practice).
_TILT = math.radians(15.0)
# A fixed axis is tilted this much more than the steepest slope, so that the middle of a ball cuts nowhere; at most so far.
_CLEAR = math.radians(8.0)
_MOST_FIXED = math.radians(45.0)
# Directions or cutter axes nearer than this are not told apart.
_SAME = math.radians(1.0)
# Places at which reachable axes are compared, across the longer side.
_PLACES = 8


@dataclass(frozen=True, slots=True)
class Tilt:
    """How the cutter stands: ``name`` says it in words and is the same for every direction.

    ``lead_rad`` and ``lean_rad`` are from the surface normal; ``fixed_axis`` is a unit vector in part coordinates, if given.
    """

    name: str
    lead_rad: float = 0.0
    lean_rad: float = 0.0
    fixed_axis: tuple[float, float, float] | None = None


_BY_PATTERN = Tilt("by the pattern")


@dataclass(frozen=True, slots=True)
class Case:
    """One way to finish the surface. ``cutter`` is its number; ``direction_rad`` from part X."""

    cutter: int
    pattern: str
    direction_rad: float
    tilt: Tilt
    way: Way
    scallop_mm: float

    @property
    def family(self) -> tuple[int, str]:
        """Cutter and pattern."""
        return self.cutter, self.pattern

    @property
    def words(self) -> str:
        """The case in a few words."""
        return f"T{self.cutter} {self.pattern}, feed {math.degrees(self.direction_rad):.4g}°, {self.tilt.name}, {self.way}"


def finishing(job: Job, index: int | None = None) -> tuple[Operation, ...]:
    """Return the job's finishing operations, or the one asked for.

    Raises
    ------
    BadInput
        There is none, or the one asked for does not finish.
    """
    found = tuple(operation for operation in job.operations if operation.does == "finish")
    if index is None:
        if not found:
            raise BadInput(
                Fault(str(job.source), 0, "operation", 'no operation that does "finish"; nothing to compare')
            )
        return found
    chosen = tuple(operation for operation in found if operation.index == index)
    if not chosen:
        numbers = ", ".join(str(operation.index) for operation in found) or "none"
        raise BadInput(
            Fault(
                "command line", 0, "--operation", f"found {index}; the operations that finish are: {numbers}"
            )
        )
    return chosen


def scallop_of(job: Job, operation: Operation) -> float:
    """Return the scallop limit [mm] that all cases keep: the operation's, or the most that its stepover leaves."""
    if operation.scallop_mm is not None:
        return operation.scallop_mm
    from anticlast.passes.scallop import scallop_answer

    answer = scallop_answer(
        Saddle.of(job.part), job.part.outline, operation.cutter, operation.direction_rad,
        stepover_mm=operation.stepover_mm, scallop_mm=None, allowance_mm=operation.allowance_mm,
    )  # fmt: skip
    return float(answer.scallop_mm[2])


def own_case(operation: Operation, scallop_mm: float) -> Case:
    """Return the operation as the job has it."""
    return Case(
        operation.cutter.number, operation.pattern, operation.direction_rad, own_tilt(operation), operation.way,
        scallop_mm,
    )  # fmt: skip


def own_tilt(operation: Operation) -> Tilt:
    """Return the operation's tilt as the job has it."""
    if operation.fixed_axis is not None:
        return Tilt(_fixed_name(operation.fixed_axis), 0.0, 0.0, operation.fixed_axis)
    if operation.cutter.shape != "ball" and operation.lead_rad == operation.lean_rad == 0.0:
        return _BY_PATTERN
    return _leaned(operation.lead_rad, operation.lean_rad)


def families(job: Job, operation: Operation, scallop_mm: float) -> list[tuple[Cutter, str]]:
    """Return every cutter of the job with every finishing pattern that is available and may take it.

    A planner that turns the cutter away later says so under the check ``cutter shape``.
    """
    found = []
    for cutter in job.cutters:
        for pattern in FINISH_PATTERNS:
            tried = replace(
                operation, cutter=cutter, pattern=pattern, scallop_mm=scallop_mm, stepover_mm=None
            )
            if _suits(tried):
                found.append((cutter, pattern))
    return found


def _suits(operation: Operation) -> bool:
    try:
        require_pattern(operation)
    except CannotPlan:
        return False
    return True


def operation_for(job: Job, operation: Operation, case: Case) -> Operation:
    """Return the operation changed into a case; speeds of another cutter as `speeds` has them."""
    cutter = next(cutter for cutter in job.cutters if cutter.number == case.cutter)
    rpm, feed = speeds(job, operation, cutter)
    return replace(
        operation, cutter=cutter, pattern=case.pattern, direction_rad=case.direction_rad, scallop_mm=case.scallop_mm,
        stepover_mm=None, lead_rad=case.tilt.lead_rad, lean_rad=case.tilt.lean_rad, fixed_axis=case.tilt.fixed_axis,
        way=case.way, spindle_rpm=rpm, feed_mm_min=feed,
    )  # fmt: skip


def job_for(job: Job, operation: Operation, case: Case) -> Job:
    """Return the job with nothing but the operation, changed into a case.

    The blank is taken to be within the allowance that earlier operations leave, as it is when the operation starts.
    """
    before = [
        other.allowance_mm
        for other in job.operations
        if other.index < operation.index and other.does != "outline"
    ]
    stock = job.stock
    if before:
        stock = replace(stock, allowance_mm=before[-1], mesh=None, heights=None)
    return replace(job, operations=(operation_for(job, operation, case),), stock=stock)


def speeds(job: Job, operation: Operation, cutter: Cutter) -> tuple[float, float]:
    """Return spindle speed [rev/min] and feed [mm/min] for a cutter.

    Those of the operation for its own cutter; of another finishing operation that uses the cutter, if there is one; else
    the same speed at the full diameter, within the spindle's range, and the same feed per tooth (common practice).
    """
    if cutter.number == operation.cutter.number:
        return operation.spindle_rpm, operation.feed_mm_min
    for other in job.operations:
        if other.does == "finish" and other.cutter.number == cutter.number:
            return other.spindle_rpm, other.feed_mm_min
    own, spindle = operation.cutter, job.machine.spindle
    rpm = operation.spindle_rpm * own.radius_mm / cutter.radius_mm
    rpm = min(max(rpm, spindle.min_rpm), spindle.max_rpm)
    per_tooth = operation.feed_mm_min / (operation.spindle_rpm * own.flutes)
    return rpm, per_tooth * cutter.flutes * rpm


# ---------------------------------------------------------------------------------------- directions


def directions(job: Job, operation: Operation, cutter: Cutter, scallop_mm: float) -> list[float]:
    """Return the feed directions worth a try, radians in [0, pi), best guess first.

    The best for the cutter with either kind of spacing, the saddle's convex axis, 0, 45 and 90 degrees, the job's own,
    and along the outline's longest side; those that all but coincide once.
    """
    saddle, outline = Saddle.of(job.part), job.part.outline
    spacings: tuple[Spacing, ...] = ("pass by pass", "one step")
    wished: list[float] = []
    if cutter.shape == "ball":
        # Where the ball does not fit, each case says so itself.
        with contextlib.suppress(CannotPlan):
            for spacing in spacings:
                found = best_direction(
                    saddle, outline, cutter.radius_mm, scallop_mm, spacing, operation.allowance_mm
                )
                wished.append(found.direction_rad)
    else:
        wished.append(most_convex_direction_rad(saddle, outline))
    wished += [convex_axis_rad(saddle), operation.direction_rad, 0.0, 0.25 * math.pi, 0.5 * math.pi]
    wished.append(_long_side_rad(job))
    return _apart(wished)


def _apart(wished: Iterable[float]) -> list[float]:
    """Return directions [rad] of straight lines without those that all but repeat an earlier one."""
    kept: list[float] = []
    for direction in wished:
        gaps = [abs((direction - other + 0.5 * math.pi) % math.pi - 0.5 * math.pi) for other in kept]
        if all(gap > _SAME for gap in gaps):
            kept.append(direction % math.pi)
    return kept


def _long_side_rad(job: Job) -> float:
    """Return the direction of the longer side of the smallest rectangle round the outline."""
    import shapely

    ring = shapely.get_coordinates(shapely.oriented_envelope(job.part.outline.polygon))
    sides = np.diff(ring, axis=0)[:2]
    longest = sides[int(np.argmax(np.linalg.norm(sides, axis=1)))]
    return math.atan2(longest[1], longest[0])


# ---------------------------------------------------------------------------------------- tilts


def tilts(job: Job, operation: Operation, cutter: Cutter, direction_rad: float) -> dict[str, Tilt]:
    """Return the tilts worth a try on the job's machine in one feed direction, by name.

    Bull and flat end mills get their lean from the pattern. For a ball: along the normal, leads and leans, fixed axes (3+2
    axis work), and the job's own. A name whose cutter axes the machine turns into those of an earlier one leads to that.
    """
    own = own_tilt(operation)
    own_ball = operation.cutter.shape == "ball"
    if cutter.shape != "ball":
        tilt = _BY_PATTERN if own_ball or own.fixed_axis is not None else own
        return {tilt.name: tilt}
    kinematics = Kinematics(job.machine, job.part_origin_mm, cutter.gauge_length_mm)
    wished = [_leaned(0.0, 0.0), _leaned(_TILT, 0.0), _leaned(0.0, _TILT), _leaned(0.0, -_TILT)]
    wished += _fixed(job, direction_rad, kinematics)
    if own_ball:
        wished.append(own)
    kept: list[tuple[Tilt, Floats]] = []
    found: dict[str, Tilt] = {}
    for tilt in wished:
        axis = _reached(job, tilt, direction_rad, kinematics)
        same = [other for other, stood in kept if angle_between(axis, stood).max() <= _SAME]
        if not same:
            kept.append((tilt, axis))
        found[tilt.name] = same[0] if same else tilt
    return found


def _leaned(lead_rad: float, lean_rad: float) -> Tilt:
    parts = [
        f"{name} {math.degrees(angle):.4g}°"
        for name, angle in (("lead", lead_rad), ("lean", lean_rad))
        if angle != 0.0
    ]
    return Tilt(" ".join(parts) or "normal", lead_rad, lean_rad)


def _fixed(job: Job, direction_rad: float, kinematics: Kinematics) -> list[Tilt]:
    """Return fixed axes: upright, and tilted past the steepest slope toward the feed, to its left and to its right."""
    saddle, outline = Saddle.of(job.part), job.part.outline
    steepest = float(saddle.slope_rad(outline.boundary_points(1.0)).max())
    tilt = min(max(_TILT, steepest + _CLEAR), _MOST_FIXED)
    found = [Tilt("fixed upright", fixed_axis=(0.0, 0.0, 1.0))]
    for name, turn in (
        ("toward the feed", 0.0),
        ("to the left", 0.5 * math.pi),
        ("to the right", -0.5 * math.pi),
    ):
        toward = direction_rad + turn
        wish = np.array(
            [[math.sin(tilt) * math.cos(toward), math.sin(tilt) * math.sin(toward), math.cos(tilt)]]
        )
        i, j, k = kinematics.nearest_axis(wish)[0].tolist()
        found.append(Tilt(f"fixed {math.degrees(math.acos(min(k, 1.0))):.3g}° {name}", fixed_axis=(i, j, k)))
    return found


def _fixed_name(axis: tuple[float, float, float]) -> str:
    tilt = math.degrees(math.acos(min(axis[2], 1.0)))
    if tilt < math.degrees(_SAME):
        return "fixed upright"
    return f"fixed {tilt:.3g}° toward {math.degrees(math.atan2(axis[1], axis[0])):.3g}°"


def _reached(job: Job, tilt: Tilt, direction_rad: float, kinematics: Kinematics) -> Floats:
    """Return the cutter axes (n, 3) that the machine makes of a tilt at places of the outline."""
    saddle, outline = Saddle.of(job.part), job.part.outline
    x0, y0, x1, y1 = outline.bounds
    xy = outline.boundary_points(max(x1 - x0, y1 - y0) / _PLACES)
    if tilt.fixed_axis is not None:
        wish = np.tile(np.asarray(tilt.fixed_axis), (len(xy), 1))
    else:
        wish = wished_axis(saddle.normal(xy), saddle.tangent(xy, direction_rad), tilt.lead_rad, tilt.lean_rad)
    return kinematics.nearest_axis(wish)
