"""What one operation asks of the machine: travel of every axis over the outline, and whether it is there.

Linear travel is that of the spindle gauge point in the machine frame, rotary travel that of the program words
in degrees, as the limits of a machine file are.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import shapely

from anticlast.extremes import sample
from anticlast.machine.kinematics import Kinematics
from anticlast.passes.tilt import angle_between, reference_from_contact, wished_axis
from anticlast.saddle import Saddle
from anticlast.tolerances import LIMIT_DEG, LIMIT_MM, REACH_RAD

if TYPE_CHECKING:
    from anticlast.records import Axis, Floats, Job, Operation

# Nearer than this to the surface normal, a ball cuts on its tip, where nothing moves (common practice).
_TIP_RAD = math.radians(5.0)
# A suggested part origin leaves this much of the travel spare, and is found in at most so many trials.
_SPARE_MM = 1.0
_SHIFTS = 6
_MM_PER_INCH = 25.4


@dataclass(frozen=True, slots=True)
class Reach:
    """What one operation asks of the machine.

    Attributes
    ----------
    index : int
        The operation.
    travel : dict
        Lowest and highest of each axis while the contact is inside the outline; mm, degrees for rotary axes.
    lift : dict
        The same with the cutter drawn back along its axis, clear of the blank, from every such place.
    over : dict
        How far the travel passes an axis limit, where it does; negative below the low limit.
    axis_from_vertical_deg, axis_from_normal_deg : (lowest, highest)
        Cutter axis against part Z and against the surface normal.
    off_wish_deg : float
        Largest angle between the axis that lead and lean ask for and the one the machine gives.
    advice : tuple of str
    """

    index: int
    travel: dict[str, tuple[float, float]]
    lift: dict[str, tuple[float, float]]
    over: dict[str, float]
    axis_from_vertical_deg: tuple[float, float]
    axis_from_normal_deg: tuple[float, float]
    off_wish_deg: float
    advice: tuple[str, ...]

    @property
    def fits(self) -> bool:
        """True if the travel lies inside the limits and the cutter never lies down on the surface."""
        return not self.over and self.axis_from_normal_deg[1] < 90.0

    def as_json(self) -> dict[str, Any]:
        """Return plain data: mm and degrees."""
        return {
            "index": self.index,
            "travel": {letter: list(span) for letter, span in self.travel.items()},
            "lift": {letter: list(span) for letter, span in self.lift.items()},
            "axis_from_vertical_deg": list(self.axis_from_vertical_deg),
            "axis_from_normal_deg": list(self.axis_from_normal_deg),
            "off_wish_deg": self.off_wish_deg,
            "fits": self.fits,
        }

    def lines(self, scale: float, units: str) -> list[str]:
        """Return lines to read; ``scale`` turns mm into ``units``."""
        low, high = self.axis_from_vertical_deg
        near, far = self.axis_from_normal_deg
        out = [
            f"operation {self.index}: cutter axis {low:.1f} to {high:.1f} deg from vertical, "
            f"{near:.1f} to {far:.1f} deg from the surface normal"
        ]
        for letter, (low, high) in self.travel.items():
            factor, unit = (scale, units) if letter in "XYZ" else (1.0, "deg")
            over = self.over.get(letter)
            note = "" if over is None else f"   {abs(over) * factor:.3g} {unit} past the limit"
            out.append(f"  {letter}{low * factor:>12.3f} to{high * factor:>12.3f} {unit}{note}")
        return out


def reach(job: Job, operation: Operation) -> Reach:
    """Return what an operation that follows the surface asks of the job's machine.

    Every sampled place is taken in the feed direction, and against it too if the operation cuts both ways,
    with the cutter axis nearest to what lead and lean (or the fixed axis) ask for; of the ways the rotary
    axes can reach it, the one inside all limits that turns least from zero.

    Parameters
    ----------
    job : Job
    operation : Operation
        Its cutter, direction, lead, lean, allowance and way matter.
    """
    kinematics = Kinematics(job.machine, job.part_origin_mm, operation.cutter.gauge_length_mm)
    wished, normal, axis, tip = _poses(job, operation, kinematics)
    words, gauge = _least_turning(kinematics, tip, axis)
    travel = _spans(kinematics, words, gauge)
    over = _over(job.machine.axes, travel)
    drawn_back = _drawn_back(job, kinematics, words, tip, axis)
    lift = _spans(kinematics, drawn_back, kinematics.gauge_point(drawn_back))
    vertical = np.degrees(np.arctan2(np.hypot(axis[:, 0], axis[:, 1]), axis[:, 2]))
    contact = np.degrees(angle_between(axis, normal))
    found = Reach(
        index=operation.index,
        travel=travel,
        lift=lift,
        over=over,
        axis_from_vertical_deg=(float(vertical.min()), float(vertical.max())),
        axis_from_normal_deg=(float(contact.min()), float(contact.max())),
        off_wish_deg=math.degrees(float(angle_between(axis, wished).max())),
        advice=(),
    )
    advice = (
        *_travel_advice(job, operation, found),
        *_tilt_advice(operation, found, kinematics.rotary_count > 0),
    )
    return Reach(
        **{name: getattr(found, name) for name in Reach.__slots__ if name != "advice"}, advice=advice
    )


def _poses(job: Job, operation: Operation, kinematics: Kinematics) -> tuple[Floats, Floats, Floats, Floats]:
    """Return wished axis, surface normal, cutter axis (unit) and tip [mm] (n, 3) of the sampled places."""
    saddle = Saddle.of(job.part)
    xy, _ = sample(job.part.outline)
    senses = (0.0, math.pi) if operation.way == "both" and operation.fixed_axis is None else (0.0,)
    direction = operation.direction_rad + np.repeat(senses, len(xy))
    xy = np.tile(xy, (len(senses), 1))
    normal = saddle.normal(xy)
    if operation.fixed_axis is None:
        wished = wished_axis(normal, saddle.tangent(xy, direction), operation.lead_rad, operation.lean_rad)
    else:
        wished = np.tile(np.asarray(operation.fixed_axis, dtype=np.float64), (len(xy), 1))
    axis = kinematics.nearest_axis(wished)
    reference = reference_from_contact(
        saddle.point(xy), normal, axis, operation.cutter, operation.allowance_mm
    )
    return wished, normal, axis, reference - operation.cutter.reference_height_mm * axis


def _least_turning(kinematics: Kinematics, tip: Floats, axis: Floats) -> tuple[Floats, Floats]:
    """Return words (n, k) and gauge points (n, 3) of the branch least past the limits, then least turned."""
    if kinematics.rotary_count == 0:  # one way only, nothing to choose
        words = kinematics.place(tip, np.empty((len(tip), 0)))
        return words, kinematics.gauge_point(words)
    words, valid = kinematics.inverse(tip, axis)
    count, branches, width = words.shape
    gauge = kinematics.gauge_point(words.reshape(-1, width)).reshape(count, branches, 3)
    place = np.concatenate((gauge, words[:, :, 3:]), axis=2)
    past = np.zeros((count, branches))
    for column, limited in enumerate(kinematics.machine.axes):
        if limited.limits is not None:
            low, high = limited.limits
            slack = LIMIT_MM if limited.kind == "linear" else LIMIT_DEG
            past += np.maximum(0.0, np.maximum(low - place[:, :, column], place[:, :, column] - high) - slack)
    turned = np.abs(words[:, :, 3:]).sum(axis=2)
    # Least past the limits first; the turning only decides between equals.
    past = np.where(valid, past, np.inf)
    tied = past <= past.min(axis=1, keepdims=True)
    best = np.where(tied, turned, np.inf).argmin(axis=1)
    rows = np.arange(count)
    return words[rows, best], gauge[rows, best]


def _spans(kinematics: Kinematics, words: Floats, gauge: Floats) -> dict[str, tuple[float, float]]:
    """Return lowest and highest of each axis: gauge point for linear axes, words for rotary ones."""
    places = np.concatenate((gauge, words[:, 3:]), axis=1)
    return {
        letter: (float(places[:, k].min()), float(places[:, k].max()))
        for k, letter in enumerate(kinematics.letters)
    }


def _over(axes: Sequence[Axis], travel: dict[str, tuple[float, float]]) -> dict[str, float]:
    """Return how far travel passes each limit: the worse side, negative below the low limit."""
    over = {}
    for axis in axes:
        if axis.limits is None:
            continue
        below, above = axis.limits[0] - travel[axis.letter][0], travel[axis.letter][1] - axis.limits[1]
        if max(below, above) > (LIMIT_MM if axis.kind == "linear" else LIMIT_DEG):
            over[axis.letter] = above if above >= below else -below
    return over


def _drawn_back(job: Job, kinematics: Kinematics, words: Floats, tip: Floats, axis: Floats) -> Floats:
    """Return words (n, k) with the tip drawn back along the axis until it clears the whole blank."""
    hull = shapely.get_coordinates(job.stock.outline.polygon.convex_hull)
    top, bottom = (
        np.column_stack((hull, np.full(len(hull), z))) for z in (job.stock.top_mm, job.stock.bottom_mm)
    )
    highest = (axis @ np.concatenate((top, bottom)).T).max(axis=1)
    back = np.maximum(0.0, highest + job.clearance_mm - np.einsum("ni,ni->n", tip, axis))
    return kinematics.place(tip + back[:, None] * axis, words[:, 3:])


def _travel_advice(job: Job, operation: Operation, found: Reach) -> list[str]:
    """Return what to change where travel passes a limit."""
    scale, units = (1.0, "mm") if job.units == "mm" else (1.0 / _MM_PER_INCH, "inch")
    name = f"operation {operation.index}"
    out = []
    limits = {axis.letter: axis.limits for axis in job.machine.axes if axis.limits is not None}
    for letter, past in found.over.items():
        factor, unit = (scale, units) if letter in "XYZ" else (1.0, "deg")
        low, high = found.travel[letter]
        out.append(
            f"{name}: {letter} must go from {low * factor:.4g} to {high * factor:.4g} {unit}, it has "
            f"{limits[letter][0] * factor:.4g} to {limits[letter][1] * factor:.4g}: "
            f"{abs(past) * factor:.3g} {unit} short"
        )
    if found.over:
        out.append(f"{name}: {_shift_advice(job, operation, found, scale, units)}")
    elif _over(job.machine.axes, found.lift):
        letters = ", ".join(_over(job.machine.axes, found.lift))
        out.append(
            f"{name}: drawn back along its axis clear of the blank, the cutter would pass the limit of "
            f"{letters} in places; lifts must be made elsewhere or the part set lower"
        )
    return out


def _shift_advice(job: Job, operation: Operation, found: Reach, scale: float, units: str) -> str:
    """Return a part origin that would fit, if a shift can do it, else what else to try."""
    origin = np.array(job.part_origin_mm, dtype=np.float64)
    travel, over = found.travel, found.over
    # The rotary axes turn the part origin too, so a shift is tried out and mended.
    for _ in range(_SHIFTS):
        for column, axis in enumerate(job.machine.linear):
            low, high = travel[axis.letter]
            if axis.letter not in over or axis.limits is None:
                continue
            room = axis.limits[1] - axis.limits[0] - (high - low)
            if room < 0.0:
                return (
                    f"{axis.letter} would have to go {(high - low) * scale:.4g} {units}, more than there is; "
                    "try another feed direction, another lead and lean, or a larger machine"
                )
            past = over[axis.letter]
            origin[column] -= past + math.copysign(min(_SPARE_MM, 0.5 * room), past)
        kinematics = Kinematics(job.machine, tuple(origin), operation.cutter.gauge_length_mm)
        _, _, axis_xyz, tip = _poses(job, operation, kinematics)
        travel = _spans(kinematics, *_least_turning(kinematics, tip, axis_xyz))
        over = _over(job.machine.axes, travel)
        if not over:
            place = ", ".join(f"{value * scale:.4g}" for value in origin)
            return f"part_origin = [{place}] would bring it inside the limits"
    return "moving the part does not help; try another lead and lean, another stickout, or another machine"


def _tilt_advice(operation: Operation, found: Reach, tilts: bool) -> list[str]:
    """Return what to know about the tilt: out of reach, cutting on the tip, lying down."""
    name, out = f"operation {operation.index}", []
    # Without rotary axes the spindle stands as it stands, and nobody expects otherwise.
    if tilts and found.off_wish_deg > math.degrees(REACH_RAD):
        out.append(
            f"{name}: the machine cannot give the lead and lean asked for everywhere; the cutter axis stands "
            f"up to {found.off_wish_deg:.1f} deg off them"
        )
    near, far = found.axis_from_normal_deg
    if operation.cutter.shape == "ball" and near < math.degrees(_TIP_RAD):
        out.append(
            f"{name}: the ball cuts within {near:.1f} deg of its tip in places, without cutting speed; "
            + ("a lead or lean of 10 to 20 deg avoids it" if tilts else "only a rotary axis could avoid it")
        )
    if far >= 90.0:
        out.append(
            f"{name}: the surface stands up to {far:.1f} deg from square to the cutter axis: out of reach"
        )
    return out
