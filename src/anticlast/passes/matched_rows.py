"""Rows of matched passes: poses along them, the way from one to the next, onto the surface and off it.

A flat bottom has no point that is safe to turn about: where the lead flips, and on entries, the cutter is raised so far that no
place of its bottom is nearer to the surface than on a pass. docs/theory-matched.md#links.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from anticlast.errors import CannotPlan
from anticlast.passes import entry
from anticlast.passes.cusp import plan_of
from anticlast.passes.legs import Legs
from anticlast.passes.matched_lines import Laid
from anticlast.passes.matched_task import Task
from anticlast.passes.profile import Sweep
from anticlast.passes.tilt import angle_between, turned_between
from anticlast.records import Bytes, Floats, Ints, Purpose, Stretch, frozen_array
from anticlast.saddle import Saddle
from anticlast.tolerances import AXIS_TURN_RAD, MEASURE_MM

# Places along a pass where its bend is asked (mm), and the least rows on a link.
_PROBE_MM = 1.0
_LINK_ROWS = 16
# A link is raised by these heights (mm) in turn until the bottom is clear; beyond the last the cutter lifts instead.
_RAISES_MM = (0.02, 0.05, 0.1, 0.2, 0.4, 0.8, 1.6)
# Entries slope at these angles in turn until the bottom is clear. Common practice is to ramp a bull or flat end mill in.
_SLOPES_DEG = (12.0, 25.0, 50.0, 90.0)
# The bottom is looked at on this many rings and directions.
_RINGS, _DIRECTIONS = 4, 48


@dataclass(frozen=True, slots=True)
class Chords:
    """How far straight moves may take the bottom off the part and into it, mm."""

    outward_mm: float
    inward_mm: float


@dataclass(frozen=True, slots=True)
class _Run:
    """Rows of one stretch on their way: reference points, axes and what goes with them."""

    point: Floats
    axis: Floats
    contact: Floats
    normal: Floats
    purpose: Bytes
    pass_index: Ints


def clearance_mm(saddle: Saddle, sweep: Sweep, point: Floats, axis: Floats) -> Floats:
    """Return how far the nearest place of the bottom stands off the surface with its allowance, (n,) [mm]; below 0 inside it.

    From each place of the disc the corner radius and the allowance are taken off along the normal at the foot, found in three
    rounds; what is left is height over the surface divided by its stretch, exact at contact.

    Parameters
    ----------
    point, axis : (n, 3)
        Reference points [mm] and unit axes, part coordinates.
    """
    first = np.cross(axis, np.array([1.0, 0.0, 0.0]))
    first /= np.linalg.norm(first, axis=1, keepdims=True)
    second = np.cross(axis, first)
    turn = 2.0 * math.pi * np.arange(_DIRECTIONS) / _DIRECTIONS
    rings = sweep.disc_mm * np.arange(_RINGS + 1) / _RINGS
    round_ = np.cos(turn)[:, None, None] * first + np.sin(turn)[:, None, None] * second
    places = (point + rings[:, None, None, None] * round_).reshape(-1, 3)
    reach = sweep.cutter.corner_radius_mm + sweep.allowance_mm
    under = places
    for _ in range(3 if reach > 0.0 else 1):
        under = places - reach * saddle.normal(under[:, :2])
    gap = (under[:, 2] - saddle.height(under[:, 0], under[:, 1])) / saddle.stretch(under[:, :2])
    return gap.reshape(-1, len(point)).min(axis=0)


def stretches_of(
    task: Task, laid: Laid, legs: Legs, chords: Chords, rise_mm: float
) -> tuple[tuple[Stretch, ...], float]:
    """Return the stretches, and what chords add to the highest scallop at most [mm]; below 0 where they lower it."""
    parts: list[_Run] = []
    made: list[Stretch] = []
    sags: list[float] = []
    for number, purpose in enumerate(legs.purpose):
        if number and legs.stretch[number] != legs.stretch[number - 1]:
            made.append(_stretch(task, parts, rise_mm))
            parts = []
        if purpose == Purpose.LINK:
            continue
        run, sag = _leg(task, laid, legs, number, chords)
        sags.append(sag)
        if parts and legs.purpose[number - 1] == Purpose.LINK:
            link = _link(task.frame.saddle, task.sweep, parts[-1], run)
            if link is None:
                made.append(_stretch(task, parts, rise_mm))
                parts = [run]
            else:
                parts += [link, _without_first(run)]
        else:
            parts.append(_without_first(run) if parts else run)
    made.append(_stretch(task, parts, rise_mm))
    return tuple(made), max(sags)


def _leg(task: Task, laid: Laid, legs: Legs, number: int, chords: Chords) -> tuple[_Run, float]:
    """Return the rows of one straight leg, both ends among them, and what its chords do to the scallop."""
    frame, sweep = task.frame, task.sweep
    start, end = (frame.uv(ends[number : number + 1]) for ends in (legs.start_mm, legs.end_mm))
    u0, u1, v = float(start[0][0]), float(end[0][0]), float(start[1][0])
    sign = int(laid.order[int(legs.pass_index[number])].sign)
    length = abs(u1 - u0)

    def at(count: int) -> tuple[Floats, Floats, Floats]:
        u = np.linspace(u0, u1, count + 1)
        line = np.full(count + 1, v)
        lead, lean, lift = laid.fit.wish(0 if sign > 0 else 1, u, line)
        return u, *sweep.poses(u, line, sign, lead, lean, lift)

    probes = max(4, math.ceil(length / _PROBE_MM))
    u, point, axis = at(probes)
    step = length / probes
    normal = frame.saddle.normal(plan_of(u, np.full(u.size, v), frame.direction_rad))
    bend, turn = (np.diff(values, n=2, axis=0) / (step * step) for values in (point, axis))
    up = np.einsum("ni,ni->n", bend, normal[1:-1])
    swing = sweep.disc_mm * np.linalg.norm(turn, axis=1)
    need = np.sqrt(np.maximum((up + swing) / chords.outward_mm, (swing - up) / chords.inward_mm) / 8.0)
    turned = float(np.max(angle_between(axis[:-1], axis[1:]))) / step
    rows = max(1, math.ceil(length * max(float(need.max()), turned / AXIS_TURN_RAD)))
    u, point, axis = at(rows)
    contact_xy = plan_of(u, np.full(u.size, v), frame.direction_rad)
    sag = up * (length / rows) ** 2 / 8.0
    added = float(np.where(sag > 0.0, 2.0 / 3.0, 1.0 / 3.0)[np.argmax(sag)] * sag.max())
    count = u.size
    run = _Run(
        point, axis, frame.saddle.point(contact_xy), frame.saddle.normal(contact_xy),
        np.full(count, legs.purpose[number], np.uint8), np.full(count, legs.pass_index[number], np.int64),
    )  # fmt: skip
    return run, added


def _without_first(run: _Run) -> _Run:
    return _Run(*(getattr(run, name)[1:] for name in _Run.__slots__))


def _link(saddle: Saddle, sweep: Sweep, before: _Run, after: _Run) -> _Run | None:
    """Return the way from the last row of a pass to the first of the next, that row included; None if none is clear.

    Reference point on a straight line, raised by an arch, while the axis turns evenly.
    """
    share = np.linspace(0.0, 1.0, _LINK_ROWS + 1)[1:]
    start = np.repeat(before.axis[-1:], share.size, axis=0)
    end = np.repeat(after.axis[:1], share.size, axis=0)
    axis = sweep.nearest(np.ascontiguousarray(turned_between(start, end, share)))
    axis[-1] = after.axis[0]
    straight = before.point[-1] + share[:, None] * (after.point[0] - before.point[-1])
    up = before.normal[-1] + after.normal[0]
    up /= np.linalg.norm(up)
    contact = before.contact[-1] + share[:, None] * (after.contact[0] - before.contact[-1])
    contact = saddle.point(contact[:, :2])
    for raise_mm in _RAISES_MM:
        point = straight + (4.0 * raise_mm * share * (1.0 - share))[:, None] * up
        middle_point = 0.5 * (np.vstack((before.point[-1:], point[:-1])) + point)
        middle_axis = np.vstack((before.axis[-1:], axis[:-1])) + axis
        middle_axis /= np.linalg.norm(middle_axis, axis=1, keepdims=True)
        clear = clearance_mm(saddle, sweep, np.vstack((point, middle_point)), np.vstack((axis, middle_axis)))
        if clear.min() >= -MEASURE_MM:
            return _Run(
                point, axis, contact, saddle.normal(contact[:, :2]),
                np.full(share.size, Purpose.LINK, np.uint8), np.full(share.size, after.pass_index[0], np.int64),
            )  # fmt: skip
    return None


def _stretch(task: Task, parts: list[_Run], rise_mm: float) -> Stretch:
    """Return a stretch of runs with its entry and exit; the contact stands still on both."""
    saddle, sweep, operation = task.frame.saddle, task.sweep, task.operation
    point, axis, contact, normal, purpose, owner = (
        np.concatenate([getattr(part, name) for part in parts]) for name in _Run.__slots__
    )
    into = _ramp(saddle, sweep, point[0], axis[0], normal[0], point[1] - point[0], rise_mm)[::-1]
    off = _ramp(saddle, sweep, point[-1], axis[-1], normal[-1], point[-2] - point[-1], rise_mm)
    # The row on which an entry ends is the first of the pass.
    purpose = np.concatenate(
        (np.full(len(into) + 1, Purpose.ENTRY), purpose[1:], np.full(len(off), Purpose.EXIT))
    )

    def held(values: np.ndarray) -> np.ndarray:
        """Return rows with the pass's end values standing still on entry and exit."""
        return np.concatenate((values[[0] * len(into)], values, values[[-1] * len(off)]))

    axes = held(axis)
    points = np.concatenate((into, point, off))
    share = np.where(purpose == Purpose.ENTRY, entry.ENTRY_FEED_SHARE, 1.0)
    return Stretch(
        tip_mm=frozen_array(points - operation.cutter.reference_height_mm * axes),
        axis=frozen_array(axes),
        contact_mm=frozen_array(held(contact)),
        normal=frozen_array(held(normal)),
        purpose=frozen_array(purpose, np.uint8),
        pass_index=frozen_array(held(owner), np.int64),
        feed_mm_min=frozen_array(operation.feed_mm_min * share),
    )


def _ramp(
    saddle: Saddle, sweep: Sweep, point: Floats, axis: Floats, normal: Floats, inward: Floats, rise_mm: float
) -> Floats:
    """Return the way off a pass (m, 3), nearest first: a straight slope, away from the pass for the exit, back from its start.

    Parameters
    ----------
    inward : (3,)
        From the end of the pass into it.

    Raises
    ------
    CannotPlan
        Check ``"entry clear of the surface"``.
    """
    back = -inward + np.dot(inward, normal) * normal
    back /= np.linalg.norm(back)
    worst = 0.0
    for slope in np.radians(_SLOPES_DEG):
        rows = max(2, math.ceil(rise_mm / math.tan(slope) / _PROBE_MM))
        up = rise_mm * np.arange(1, rows + 1) / rows
        path = point + up[:, None] * (normal + back / math.tan(slope))
        dense = point + np.linspace(0.0, 1.0, 8 * rows + 1)[1:, None] * (path[-1] - point)
        worst = float(clearance_mm(saddle, sweep, dense, np.repeat(axis[None, :], len(dense), axis=0)).min())
        if worst >= -MEASURE_MM:
            return path
    raise CannotPlan(
        "entry clear of the surface",
        f"no way onto the surface near ({point[0]:.3f}, {point[1]:.3f}) keeps the cutter off it; use a smaller one",
        -worst,
        0.0,
    )
