"""One function for each thing a program can get wrong; every finding says what was found and what would mend it."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import TYPE_CHECKING

import numpy as np

from anticlast.records import SIX, Finding, Shape
from anticlast.tolerances import CLEARANCE_MM, FEED_SHARE, LIMIT_DEG, LIMIT_MM, MEASURE_MM

if TYPE_CHECKING:
    from anticlast.proof.collisions import Clearance
    from anticlast.proof.gouge import Gouge
    from anticlast.proof.virtual_cut import Cut
    from anticlast.records import Axis, Bools, Floats, Job, Motions, PartMotion, ReadProgram


def _um(height_mm: float) -> str:
    return f"{height_mm * 1e3:.2f} µm"


def _place(at_mm: tuple[float, ...]) -> str:
    x, y = at_mm[0], at_mm[1]
    return f"at x = {x:.2f}, y = {y:.2f}" + (f", z = {at_mm[2]:.2f}" if len(at_mm) > 2 else "")


def wanted_height_mm(job: Job) -> float:
    """Return the height over the finished surface [mm] that the job's last operation on it is to leave."""
    sweeping = [operation for operation in job.operations if operation.does != "outline"]
    return sweeping[-1].allowance_mm if sweeping else 0.0


def scallop_limit_mm(job: Job) -> float | None:
    """Return the lowest scallop limit of the finishing operations [mm], None if none sets one."""
    limits = [op.scallop_mm for op in job.operations if op.does == "finish" and op.scallop_mm is not None]
    return min(limits) if limits else None


def gouge_limit_mm(job: Job) -> float:
    """Return how far the cutter may go below the finished surface [mm]: the tightest finishing tolerance."""
    finishing = [op.tolerance_mm for op in job.operations if op.does == "finish"]
    every = [op.tolerance_mm for op in job.operations]
    return min(finishing or every or [0.0])


def check_scallop(job: Job, cut: Cut, motion: PartMotion) -> Finding:
    """Compare the highest scallop, and its bound, with the limit; both count from the height that is wanted."""
    wanted = wanted_height_mm(job)
    highest, bound = cut.highest_mm - wanted, cut.bound_mm - wanted
    limit = scallop_limit_mm(job)
    line = _line(motion, cut.highest_piece)
    found = f"the highest scallop is {_um(highest)} {_place(cut.highest_at_mm)}"
    if limit is None:
        message = f"{found}; the job sets no scallop limit"
        return Finding("scallop", True, highest, math.nan, "mm", line, message)
    if bound <= limit + MEASURE_MM:
        return Finding("scallop", True, highest, limit, "mm", line, f"{found}; the limit is {_um(limit)}")
    if highest > limit + MEASURE_MM:
        message = (
            f"{found}, {_um(highest - limit)} over the limit of {_um(limit)}; reduce the stepover there, or the "
            f"lengths of the moves if passes lie close enough, or allow a higher scallop"
        )
        return Finding("scallop", False, highest, limit, "mm", line, message)
    message = (
        f"{found}, but it could only be shown that none is over {_um(bound)}, and the limit is {_um(limit)}; "
        f"prove with a finer grid"
    )
    return Finding("scallop", False, bound, limit, "mm", line, message)


def check_gouge(job: Job, gouge: Gouge, motion: PartMotion) -> Finding:
    """Compare the deepest place below the finished surface, and its bound, with the tolerance."""
    limit = gouge_limit_mm(job)
    line = _line(motion, gouge.piece)
    ok = gouge.bound_mm <= limit + MEASURE_MM
    if gouge.deepest_mm <= 0.0:
        found = "the cutter never goes below the finished surface"
    else:
        found = f"the cutter goes {_um(gouge.deepest_mm)} below the finished surface {_place(gouge.at_mm)}"
    if ok:
        return Finding(
            "gouge", True, gouge.deepest_mm, limit, "mm", line, f"{found}; {_um(limit)} is allowed"
        )
    message = (
        f"{found}; {_um(limit)} is allowed. Shorten the moves there, take a smaller cutter where the surface is "
        f"hollow, or check the length offset and the part origin"
    )
    return Finding("gouge", False, gouge.deepest_mm, limit, "mm", line, message)


def check_uncut(job: Job, cut: Cut) -> Finding:
    """No part of the outline may stand as it was before."""
    area = cut.uncut_area_mm2
    finishing = any(op.does == "finish" for op in job.operations)
    if area <= 0.0:
        return Finding("uncut area", True, 0.0, 0.0, "mm2", 0, "the cutter reached every part of the outline")
    message = f"{area:.2f} mm² of the outline were not cut down to the surface"
    if not finishing:
        return Finding(
            "uncut area", True, area, math.nan, "mm2", 0, f"{message}; the job has no finishing operation"
        )
    message += "; let the passes reach over the edge of the outline, and check the direction and the pattern"
    return Finding("uncut area", False, area, 0.0, "mm2", 0, message)


def check_stock(job: Job) -> list[Finding]:
    """The blank has to reach up to the finished surface everywhere."""
    from anticlast.saddle import Saddle

    stock = job.stock
    points = job.part.outline.boundary_points(1.0)
    z = Saddle.of(job.part).height(points[:, 0], points[:, 1])
    # Along any line a saddle's height is highest at an end or has no highest point inside: the boundary decides.
    worst = int(np.argmax(z))
    low = float(z[worst]) - stock.top_mm
    if stock.allowance_mm is not None or low <= 0.0:
        return []
    message = (
        f"the blank's top, z = {stock.top_mm:g}, lies {low:.3f} mm below the finished surface "
        f"{_place((float(points[worst, 0]), float(points[worst, 1])))}; use a thicker blank"
    )
    return [Finding("stock", False, low, 0.0, "mm", 0, message)]


def check_flutes(job: Job, found: Clearance, motion: PartMotion) -> Finding:
    """Flutes may touch the finished surface but not enter it further than the tolerance."""
    limit = gouge_limit_mm(job)
    depth = max(0.0, -found.distance_mm)
    line = _line(motion, found.piece)
    if depth <= limit + MEASURE_MM:
        message = "the flutes above the cutting end stay out of the finished surface"
        return Finding("flutes", True, depth, limit, "mm", line, message)
    message = (
        f"the flutes of cutter {found.cutter} enter the finished surface by {depth:.3f} mm {_place(found.at_mm)}; "
        f"lean the cutter less there or take a smaller one"
    )
    return Finding("flutes", False, depth, limit, "mm", line, message)


def check_holder(found: Clearance, motion: PartMotion) -> Finding:
    """Shank and holder must stay clear of the finished surface."""
    line = _line(motion, found.piece)
    if found.piece < 0:
        return Finding(
            "holder", True, math.inf, 0.0, "mm", 0, "no shank or holder comes near the finished surface"
        )
    where = f"{found.body} of cutter {found.cutter}"
    if found.bound_mm > 0.0:
        message = f"the nearest is the {where}, {found.distance_mm:.2f} mm from the finished surface"
        return Finding("holder", True, found.distance_mm, 0.0, "mm", line, message)
    message = (
        f"the {where} {_touches(found)} the finished surface {_place(found.at_mm)}; use more stickout, a slimmer "
        f"holder or less lean"
    )
    return Finding("holder", False, found.distance_mm, 0.0, "mm", line, message)


def check_rapids(job: Job, cutting: Clearance, rigid: Clearance, motion: PartMotion) -> Finding:
    """At rapid the cutting end keeps the job's clearance to the blank as it was, shank and holder do not touch it."""
    limit = job.clearance_mm
    if cutting.piece < 0 and rigid.piece < 0:
        return Finding("rapids", True, math.inf, limit, "mm", 0, "no rapid move comes near the blank")
    if rigid.bound_mm <= 0.0:
        message = (
            f"at rapid the {rigid.body} of cutter {rigid.cutter} {_touches(rigid)} the blank {_place(rigid.at_mm)}; "
            f"lift the cutter higher before it moves across"
        )
        return Finding("rapids", False, rigid.distance_mm, 0.0, "mm", _line(motion, rigid.piece), message)
    line = _line(motion, cutting.piece)
    where = (
        f"the cutter comes within {cutting.distance_mm:.3f} mm of the blank {_place(cutting.at_mm)} at rapid"
    )
    if cutting.bound_mm >= limit - CLEARANCE_MM:
        return Finding(
            "rapids", True, cutting.distance_mm, limit, "mm", line, f"{where}; {limit:g} mm are asked for"
        )
    message = (
        f"{where}; the job asks for a clearance of {limit:g} mm: lift higher or start the feed move earlier"
    )
    return Finding("rapids", False, cutting.distance_mm, limit, "mm", line, message)


def check_holder_in_stock(found: Clearance, motion: PartMotion) -> list[Finding]:
    """Warn where shank or holder would touch the stock as it was before the program, which earlier moves may have cut."""
    if found.piece < 0 or found.bound_mm > 0.0:
        return []
    message = (
        f"the {found.body} of cutter {found.cutter} {_touches(found)} the stock as it was before {_place(found.at_mm)}; "
        f"make sure earlier moves cleared it, or use more stickout"
    )
    line = _line(motion, found.piece)
    return [Finding("holder in stock", False, found.distance_mm, 0.0, "mm", line, message, warning=True)]


def _touches(found: Clearance) -> str:
    if found.distance_mm < 0.0:
        return f"reaches {-found.distance_mm:.2f} mm into"
    return f"comes within {found.distance_mm:.3f} mm of, and could not be shown to clear,"


def _line(motion: PartMotion, piece: int) -> int:
    return int(motion.line[piece]) if piece >= 0 else 0


# ---------------------------------------------------------------------------------------- the machine


def check_travel(job: Job, travel: Mapping[str, tuple[float, float, int, int]]) -> list[Finding]:
    """Compare how far each axis goes with its limits; an axis without limits is always ok."""
    found = []
    for axis in job.machine.axes:
        if axis.letter in travel and axis.limits is not None:
            found.append(_axis_travel(axis, axis.limits, travel[axis.letter]))
    return found


def _axis_travel(axis: Axis, limits: tuple[float, float], went: tuple[float, float, int, int]) -> Finding:
    low, high, line_low, line_high = went
    slack, unit, sign = (LIMIT_MM, "mm", " mm") if axis.kind == "linear" else (LIMIT_DEG, "deg", "°")
    check = f"travel {axis.letter}"
    over_low, over_high = limits[0] - low, high - limits[1]
    if over_low <= slack and over_high <= slack:
        near_low = limits[0] - low >= high - limits[1]
        worst, limit, line = (low, limits[0], line_low) if near_low else (high, limits[1], line_high)
        message = f"{axis.letter} goes from {low:.3f} to {high:.3f}{sign}; {limits[0]:g} to {limits[1]:g} can be reached"
        return Finding(check, True, worst, limit, unit, line, message)
    worst, limit, line, over = (
        (low, limits[0], line_low, over_low)
        if over_low > over_high
        else (high, limits[1], line_high, over_high)
    )
    advice = (
        "move part_origin"
        if axis.kind == "linear"
        else "choose another lead, lean or direction, or another machine"
    )
    message = f"{axis.letter} would have to go to {worst:.3f}{sign}, {over:.3f}{sign} past its limit of {limit:g}{sign}; {advice}"
    return Finding(check, False, worst, limit, unit, line, message)


def axis_speeds(motions: Motions) -> Floats:
    """Return the fastest each axis moves in each feed motion, (n, 6) [mm/min, deg/min]; nan where no time is known.

    The axes of an arc's plane reach at most the speed along the arc.
    """
    change = np.abs(motions.end - motions.start)
    for plane, axes in ((17, (0, 1)), (18, (0, 2)), (19, (1, 2))):
        rows = (motions.turns > 0.0) & (motions.plane == plane)
        radius = np.hypot(*(motions.start[rows][:, i] - motions.centre[rows][:, i] for i in axes))
        for axis in axes:
            change[rows, axis] = radius * motions.turns[rows]
    with np.errstate(divide="ignore", invalid="ignore"):
        return 60.0 * change / motions.seconds[:, None]


def check_feeds(job: Job, motions: Motions) -> list[Finding]:
    """Compare the speed that F asks of each axis with the axis's fastest feed."""
    feeding = (motions.shape != Shape.RAPID) & np.isfinite(motions.seconds)
    speed = np.where(feeding[:, None], axis_speeds(motions), 0.0)
    speed = np.where(np.isnan(speed), 0.0, speed)
    # F itself is rounded to its last digit: that share of speed is not the program's choice.
    half_digit = 0.5 * 10.0**-job.machine.control.feed_decimals
    with np.errstate(divide="ignore", invalid="ignore"):
        share = FEED_SHARE + np.where(motions.feed_word > 0.0, half_digit / motions.feed_word, 0.0)
    found = []
    for axis in job.machine.axes:
        column = SIX.index(axis.letter)
        if not len(speed) or not np.any(motions.end[:, column] != motions.start[:, column]):
            continue
        excess = speed[:, column] / (axis.feed * (1.0 + share))
        worst = int(np.argmax(excess))
        unit, sign = ("mm/min", " mm/min") if axis.kind == "linear" else ("deg/min", "°/min")
        fastest, line = float(speed[worst, column]), int(motions.line[worst])
        message = (
            f"{axis.letter} moves at {fastest:.0f}{sign} at most; its fastest feed is {axis.feed:g}{sign}"
        )
        if excess[worst] > 1.0:
            message = (
                f"F asks {axis.letter} for {fastest:.0f}{sign}, and its fastest feed is {axis.feed:g}{sign}; reduce the "
                f"feed there"
            )
        found.append(
            Finding(
                f"feed {axis.letter}", bool(excess[worst] <= 1.0), fastest, axis.feed, unit, line, message
            )
        )
    return found


def check_spindle(job: Job, motions: Motions) -> list[Finding]:
    """Spindle speed within the machine's range, turning clockwise (M3), in every feed motion."""
    rows = np.flatnonzero((motions.shape != Shape.RAPID) & (motions.spindle_rpm != 0.0))
    if not rows.size:
        return []
    spindle = job.machine.spindle
    speed = motions.spindle_rpm[rows]
    found = []
    backwards = rows[speed < 0.0]
    if backwards.size:
        message = "the cutter turns backwards (M4) while it cuts; use M3"
        first = backwards[0]
        worst = float(motions.spindle_rpm[first])
        found.append(
            Finding("spindle direction", False, worst, 0.0, "rev/min", int(motions.line[first]), message)
        )
    size = np.abs(speed)
    over = np.maximum(spindle.min_rpm - size, size - spindle.max_rpm)
    worst_row = int(np.argmax(over))
    worst = float(size[worst_row])
    limit = spindle.max_rpm if worst > spindle.max_rpm or over[worst_row] <= 0.0 else spindle.min_rpm
    ok = bool(over[worst_row] <= 0.0)
    message = f"the spindle turns at {size.min():g} to {size.max():g} rev/min; {spindle.min_rpm:g} to {spindle.max_rpm:g}"
    message += " are possible" if ok else " are possible: change the spindle speed or the cutting speed"
    line = int(motions.line[rows[worst_row]])
    found.append(Finding("spindle speed", ok, worst, limit, "rev/min", line, message))
    return found


def check_units(job: Job, program: ReadProgram) -> Finding:
    """The program has to be in the job's units."""
    ok = program.units == job.units
    code = {"mm": "G21", "inch": "G20"}[job.units]
    line = next((event.line for event in program.events if event.what == "units"), 0)
    message = f"the program is in {program.units}" + (
        "" if ok else f", the job in {job.units}; post it with {code}"
    )
    return Finding("units", ok, 0.0 if ok else 1.0, 0.0, "", line, message)


def check_cuts_at_all(program: ReadProgram) -> list[Finding]:
    """A program without feed motion proves nothing."""
    if np.any(program.motions.shape != Shape.RAPID):
        return []
    return [
        Finding(
            "feed motion", False, 0.0, 1.0, "motions", 0, "the program has no feed motion: nothing is cut"
        )
    ]


def check_start_known(program: ReadProgram, motion: PartMotion, moving: Bools) -> list[Finding]:
    """Every feed move has to start where the program itself put the axes, not where the machine was left."""
    unknown = ~moving & ~motion.rapid & (motion.fraction > 0.0)
    if not unknown.any():
        return []
    line = int(motion.line[np.argmax(unknown)])
    message = "a feed move starts where the machine was left: put every axis somewhere with G0 before"
    count = float(len(np.unique(motion.motion[unknown])))
    return [Finding("start known", False, count, 0.0, "motions", line, message)]
