"""What a surface asks of cutter and machine, before anything is planned.

Part coordinates for places on the surface. Travel is that of the spindle gauge point in the machine frame for
linear axes and of the program words (degrees) for rotary ones, as the limits in a machine file are.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import shapely

from anticlast.errors import CannotPlan
from anticlast.extremes import Place, extremes, inside, sample
from anticlast.passes.scallop import length_floor_mm, scallop_answer
from anticlast.passes.tilt import tip_from_contact, wished_axis
from anticlast.reach import Reach, reach
from anticlast.saddle import Saddle

if TYPE_CHECKING:
    from anticlast.machine.placement import Placement, Sweep
    from anticlast.machine.positioning import SteadyAxis
    from anticlast.outline import Outline
    from anticlast.records import Floats, Job, Operation

# Pairs of places are compared at this many samples across the outline, then narrowed down.
_PAIR_SAMPLES = 24
_PAIR_ZOOMS = 40
_PAIR_ZOOM = 0.7
_MM_PER_INCH = 25.4
# Passes and points a pass at which the machine's motion is sampled to compare places on the table.
_SWEEP_LINES = 8
_SWEEP_POINTS = 9


@dataclass(frozen=True, slots=True)
class Survey:
    """What the surface asks. Lengths mm, angles degrees, curvatures 1/mm; places are part (x, y).

    Attributes
    ----------
    units : str
        The job's, for `lines` only.
    area_mm2 : float
        Area of the finished surface.
    slope_deg : Place
        Steepest slope.
    concave, convex : Place
        Largest concave and largest convex curvature, both positive.
    largest_ball_radius_mm : float
        Largest ball that touches every point of the surface without cutting into it elsewhere.
    length_floor_mm : float or None
        For the first finishing ball; None without one, or if it does not fit.
    reaches : tuple of Reach
        What each operation that follows the surface asks of the machine.
    travel : dict
        Lowest and highest of each axis over all of them.
    fits : bool
        Cutters fit the surface and the travel fits the machine.
    advice : tuple of str
        What is wrong or tight, and what to change.
    placement : Placement or None
        Where on the table the axes would move least; None if it was not asked for.
    steady : SteadyAxis or None
        An axis that serves the first finishing ball that follows the surface; None if none does, or none was asked for.
    """

    units: str
    area_mm2: float
    slope_deg: Place
    concave: Place
    convex: Place
    largest_ball_radius_mm: float
    length_floor_mm: float | None
    reaches: tuple[Reach, ...]
    travel: dict[str, tuple[float, float]]
    fits: bool
    advice: tuple[str, ...]
    placement: Placement | None = None
    steady: SteadyAxis | None = None

    def as_json(self) -> dict[str, Any]:
        """Return the survey as plain data, lengths in mm."""
        return {
            "area_mm2": self.area_mm2,
            "slope_deg": {"max": self.slope_deg.value, "at": list(self.slope_deg.at_mm)},
            "curvature_per_mm": {
                "concave_max": self.concave.value,
                "concave_at": list(self.concave.at_mm),
                "convex_max": self.convex.value,
                "convex_at": list(self.convex.at_mm),
            },
            "largest_ball_radius_mm": self.largest_ball_radius_mm,
            "length_floor_mm": self.length_floor_mm,
            "travel": {letter: list(span) for letter, span in self.travel.items()},
            "operations": [found.as_json() for found in self.reaches],
            "fits": self.fits,
            "advice": list(self.advice),
            "placement": None if self.placement is None else self.placement.as_json(),
            "positioning": None if self.steady is None else self.steady.as_json(),
        }

    def lines(self) -> list[str]:
        """Return the survey as lines to read, lengths in the job's units."""
        scale, digits = (1.0, 2) if self.units == "mm" else (1.0 / _MM_PER_INCH, 4)

        def at(place: Place) -> str:
            x, y = (round(c * scale, digits) + 0.0 for c in place.at_mm)  # + 0.0: no negative zero
            return f"at X{x:.{digits}f} Y{y:.{digits}f}"

        def radius(place: Place) -> str:
            return f"radius {scale / place.value:.{digits}f} {self.units}, {at(place)}"

        floor = self.length_floor_mm
        out = [
            f"surface area        {self.area_mm2 * scale**2:.{digits}f} {self.units}^2",
            f"steepest slope      {self.slope_deg.value:.2f} deg, {at(self.slope_deg)}",
            f"tightest concave    {radius(self.concave)}",
            f"tightest convex     {radius(self.convex)}",
            f"largest ball        radius {self.largest_ball_radius_mm * scale:.{digits}f} {self.units}",
            "length floor        "
            + ("none: no finishing ball fits" if floor is None else f"{floor * scale:.0f} {self.units}"),
        ]
        for found in self.reaches:
            out += found.lines(scale, self.units)
        if self.placement is not None:
            out += _placement_lines(self.placement, scale, self.units)
        if self.steady is not None:
            out.append(self.steady.line())
        out.append("fits: yes" if self.fits else "fits: NO")
        return out + [f"- {text}" for text in self.advice]


def survey(job: Job) -> Survey:
    """Say what the job's surface asks of its cutters and its machine.

    Travel is found on a grid over the outline and along its edge, in each operation's feed direction (both
    senses where it cuts both ways), for contacts inside the outline; run-outs and links are not in it.

    Parameters
    ----------
    job : Job

    Returns
    -------
    Survey
    """
    saddle, outline = Saddle.of(job.part), job.part.outline
    largest = largest_ball_radius_mm(saddle, outline)
    concave, convex = tightest_curvatures(saddle, outline)
    too_large = _too_large(job, largest, concave)
    reaches = tuple(reach(job, operation) for operation in job.operations if operation.does != "rough")
    travel: dict[str, tuple[float, float]] = {}
    for found in reaches:
        for letter, (low, high) in found.travel.items():
            before = travel.get(letter, (low, high))
            travel[letter] = (min(low, before[0]), max(high, before[1]))
    advice = [*too_large, *(text for found in reaches for text in found.advice)]
    return Survey(
        units=job.units,
        area_mm2=saddle.area_mm2(outline.polygon),
        slope_deg=steepest_slope_deg(saddle, outline),
        concave=concave,
        convex=convex,
        largest_ball_radius_mm=largest,
        length_floor_mm=_length_floor(saddle, job),
        reaches=reaches,
        travel=travel,
        fits=not too_large and all(found.fits for found in reaches),
        advice=tuple(dict.fromkeys(advice)),
    )


def placement(job: Job) -> Placement | None:
    """Propose where on the table, and turned how far about Z, the part moves the machine's axes least.

    Returns
    -------
    Placement or None
        None for a job without an operation that follows the surface.
    """
    from anticlast.machine.placement import propose

    sweeps = [
        _sweep(job, operation) for operation in job.operations if operation.does in ("semi-finish", "finish")
    ]
    if not sweeps:
        return None
    hull = shapely.get_coordinates(job.stock.outline.polygon.convex_hull)
    heights = (job.stock.top_mm, job.stock.bottom_mm)
    corners = np.concatenate([np.column_stack((hull, np.full(len(hull), z))) for z in heights])
    return propose(
        job.machine,
        job.part_origin_mm,
        sweeps,
        corners,
        job.clearance_mm,
        turn_now_deg=math.degrees(job.turn_rad),
    )


def steady(job: Job) -> SteadyAxis | None:
    """Find one cutter axis for the first finishing ball that follows the surface on a machine with rotary axes."""
    from anticlast.machine.kinematics import Kinematics
    from anticlast.machine.positioning import steady_axis

    for operation in job.operations:
        if operation.does == "finish" and operation.cutter.shape == "ball" and operation.fixed_axis is None:
            kinematics = Kinematics(job.machine, job.part_origin_mm, operation.cutter.gauge_length_mm)
            if kinematics.rotary_count == 0:
                return None
            return steady_axis(
                kinematics, Saddle.of(job.part).normal(sample(job.part.outline)[0]), operation.index
            )
    return None


def _sweep(job: Job, operation: Operation) -> Sweep:
    """Return some passes of an operation, evenly across the outline, in its feed direction."""
    from anticlast.machine.placement import Sweep

    saddle, outline, along = Saddle.of(job.part), job.part.outline, operation.direction_rad
    corners = shapely.get_coordinates(outline.polygon)
    across = corners @ np.array([-math.sin(along), math.cos(along)])
    lines = across.min() + (np.arange(_SWEEP_LINES) + 0.5) / _SWEEP_LINES * np.ptp(across)
    number, first, last = outline.clip_lines(along, lines)
    back = (np.arange(len(number)) % 2 == 1) & (operation.way == "both")
    first, last = np.where(back, last, first), np.where(back, first, last)
    share = np.linspace(0.0, 1.0, _SWEEP_POINTS)
    u = (first[:, None] + share * (last - first)[:, None]).ravel()
    v = np.repeat(lines[number], _SWEEP_POINTS)
    xy = np.column_stack(
        (u * math.cos(along) - v * math.sin(along), u * math.sin(along) + v * math.cos(along))
    )
    heading = along + np.repeat(np.where(back, math.pi, 0.0), _SWEEP_POINTS)
    normal, contact = saddle.normal(xy), saddle.point(xy)
    if operation.fixed_axis is None:
        wished = wished_axis(normal, saddle.tangent(xy, heading), operation.lead_rad, operation.lean_rad)
    else:
        wished = np.tile(np.asarray(operation.fixed_axis, dtype=np.float64), (len(xy), 1))

    def tip_of(axis: Floats) -> Floats:
        return tip_from_contact(contact, normal, axis, operation.cutter, operation.allowance_mm)

    line = np.repeat(np.arange(len(number)), _SWEEP_POINTS)
    return Sweep(line, wished, tip_of, operation.cutter.gauge_length_mm)


def _placement_lines(found: Placement, scale: float, units: str) -> list[str]:
    """Return what to read about a placement: the proposal, and the margin left on each axis."""
    now, best = found.now, found.best
    if found.moves:
        place = ", ".join(f"{value * scale:.4g}" for value in best.part_origin_mm)
        turned = f", turn = {best.turn_deg:g}" if best.turn_deg != now.turn_deg else ""
        share = best.motion_min / now.motion_min if now.motion_min > 0.0 else 1.0
        out = [
            f"placement           part_origin = [{place}]{turned}: the axes move {100 * share:.0f} % of what they do now"
        ]
        if best.off_wish_deg < now.off_wish_deg - 0.5:
            off = f"{best.off_wish_deg:.1f} deg at most, now {now.off_wish_deg:.1f}"
            out.append(f"  for that the cutter axis is off its wish by {off}")
    else:
        out = ["placement           no other place on the table would move the axes notably less"]
    for letter, (low, high) in best.margin.items():
        factor, unit = (scale, units) if letter in "XYZ" else (1.0, "deg")
        if not math.isfinite(low) and not math.isfinite(high):
            out.append(f"  {letter} margin   endless")
            continue
        was = (
            f"   now {now.margin[letter][0] * factor:.1f} and {now.margin[letter][1] * factor:.1f}"
            if found.moves
            else ""
        )
        out.append(f"  {letter} margin{low * factor:>10.1f} and{high * factor:>8.1f} {unit}{was}")
    return out


def steepest_slope_deg(saddle: Saddle, outline: Outline) -> Place:
    """Return the steepest slope [deg] over the outline and where.

    The squared slope is a convex function of (x, y), so it is largest at a corner of the polygon.
    """
    corners = shapely.get_coordinates(outline.polygon)
    slopes = saddle.slope_rad(corners)
    k = int(slopes.argmax())
    return Place(math.degrees(float(slopes[k])), (float(corners[k, 0]), float(corners[k, 1])))


def tightest_curvatures(saddle: Saddle, outline: Outline) -> tuple[Place, Place]:
    """Return the largest concave and largest convex curvature [1/mm], both positive, and where.

    Both fall along every ray from the saddle point, so they are taken there or on the edge;
    docs/theory-surface.md#curvature.
    """
    if outline.contains(np.zeros((1, 2)))[0]:
        origin = (0.0, 0.0)
        return Place(2.0 * saddle.a_per_mm, origin), Place(2.0 * saddle.b_per_mm, origin)
    concave = extremes(outline, lambda xy: saddle.principal(xy)[0])[1]
    convex = extremes(outline, lambda xy: -saddle.principal(xy)[1])[1]
    return concave, convex


def largest_ball_radius_mm(saddle: Saddle, outline: Outline) -> float:
    """Return the radius [mm] of the largest ball that can touch the surface anywhere and cut into it nowhere.

    A ball that touches at q and reaches the surface at s has radius W(q) |s - q|^2 / (d . Hess z . d), d the
    plan part of s - q. Over the whole saddle the least of these at q is W(q) / (2a), at the mirror image of q
    across x' = 0, and 1/(2a) at the saddle point; so an outline with the saddle point in it takes 1/(2a),
    which is also the tightest local curvature. Otherwise the answer lies between the least W / (2a) and the
    least 1 / k_max over the outline, and pairs of its points decide. docs/theory-surface.md#largest-ball.
    """
    if outline.contains(np.zeros((1, 2)))[0]:
        return 0.5 / saddle.a_per_mm
    local = 1.0 / extremes(outline, lambda xy: saddle.principal(xy)[0])[1].value
    xy, span = sample(outline, _PAIR_SAMPLES)
    best, pair = np.inf, (0, 0)
    for i in range(len(xy)):
        radii = _touching_radius(saddle, np.broadcast_to(xy[i], xy.shape), xy)
        j = int(radii.argmin())
        if radii[j] < best:
            best, pair = float(radii[j]), (i, j)
    offsets = np.stack(np.meshgrid(*[np.linspace(-1.0, 1.0, 3)] * 4), axis=-1).reshape(-1, 2, 2)
    ends = xy[list(pair)]
    for _ in range(_PAIR_ZOOMS):
        tried = ends + span * offsets
        first, second = inside(outline, tried[:, 0]), inside(outline, tried[:, 1])
        radii = _touching_radius(saddle, first, second)
        k = int(radii.argmin())
        if radii[k] < best:
            best, ends = float(radii[k]), np.stack((first[k], second[k]))
        else:
            span *= _PAIR_ZOOM
    return min(local, best)


def _touching_radius(saddle: Saddle, q: Floats, s: Floats) -> Floats:
    """Return the radius (n,) [mm] of the ball that touches at q (n, 2) from above and reaches s (n, 2)."""
    step = s - q
    rise = np.einsum("ni,ij,nj->n", step, saddle.hessian(), step)
    # Height of s over q from q's slope, since the difference of the two heights cancels where they are near.
    zx, zy = saddle.gradient(q[:, 0], q[:, 1])
    climb = zx * step[:, 0] + zy * step[:, 1] + 0.5 * rise
    chord2 = np.einsum("ni,ni->n", step, step) + climb * climb
    curved = rise > np.finfo(np.float64).eps * chord2
    return np.where(curved, saddle.stretch(q) * chord2 / np.where(curved, rise, 1.0), np.inf)


def _too_large(job: Job, largest_mm: float, tightest: Place) -> list[str]:
    """Return a sentence for each ball that does not fit the surface it is to finish."""
    found = {}
    for operation in job.operations:
        cutter = operation.cutter
        room = largest_mm - operation.allowance_mm
        if cutter.shape != "ball" or operation.does == "rough" or cutter.radius_mm < room:
            continue
        scale = 1.0 if job.units == "mm" else 1.0 / _MM_PER_INCH
        x, y = (c * scale for c in tightest.at_mm)
        found[cutter.number] = (
            f"T{cutter.number}, ball diameter {2 * cutter.radius_mm * scale:.4g} {job.units}, would cut into "
            f"the finished form: near X{x:.4g} Y{y:.4g} only below {2 * room * scale:.4g} {job.units} fits"
        )
    return list(found.values())


def _length_floor(saddle: Saddle, job: Job) -> float | None:
    """Return the length floor [mm] of the first finishing ball, None without one that fits."""
    outline = job.part.outline
    for operation in job.operations:
        if operation.does == "finish" and operation.cutter.shape == "ball":
            try:
                height = _scallop_of(saddle, outline, operation)
                return length_floor_mm(saddle, outline, operation.cutter.radius_mm, height)
            except CannotPlan:
                return None
    return None


def _scallop_of(saddle: Saddle, outline: Outline, operation: Operation) -> float:
    """Return the scallop height [mm] an operation leaves: its limit, or the largest at its stepover."""
    if operation.scallop_mm is not None:
        return operation.scallop_mm
    stepover = operation.stepover_mm
    answer = scallop_answer(saddle, outline, operation.cutter, operation.direction_rad, stepover_mm=stepover)
    return answer.scallop_mm[2]
