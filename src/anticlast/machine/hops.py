"""Moves between stretches: off the part along the cutter axis, across at a safe height, down again.

The cutter leaves at feed until all of it is the job's clearance away from the blank as it was before the program. Then it
rises at rapid until nothing that turns can reach it, turns and crosses in one rapid move, comes down at rapid on the axis of
the next stretch and goes the rest at feed. docs/theory-machine.md, "Between stretches".
"""

from __future__ import annotations

import math

import numpy as np
import shapely

from anticlast.machine.blocks import Blocks
from anticlast.machine.digits import Digits
from anticlast.machine.kinematics import Kinematics
from anticlast.records import Floats, Job, Operation, Purpose
from anticlast.saddle import Saddle
from anticlast.tolerances import SAME_DIRECTION_RAD

# The blank's outline is taken with corners cut to this many mm and grown by as much: fewer edges to measure from.
_OUTLINE_MM = 0.05
# Steps along the cutter axis at which its distance from the blank is measured; a lift is a whole number of them.
_LIFT_STEP_MM = 0.5
# Steps in which rotary motion is followed when the height is looked for that the blank's corners stay below.
_TURN_STEP_DEG = 2.0
# Added to every clearance, so that rounding of the words does not eat into it: a hundred times the last posted digit.
_SPARE_MM = 0.01
# Below this height gained per length of lift (the axis within 12 degrees of level) the cutter is drawn clear sideways.
_LEVEL = 0.2


class Hops:
    """The moves between the stretches of one operation.

    Attributes
    ----------
    notes : list of str
        What could not be kept, one sentence each.
    """

    def __init__(self, job: Job, operation: Operation, kinematics: Kinematics, digits: Digits) -> None:
        self.notes: list[str] = []
        self._job = job
        self._operation = operation
        self._kinematics = kinematics
        self._digits = digits
        self._saddle = Saddle.of(job.part)
        outline = job.stock.outline.polygon
        self._plan = shapely.simplify(outline, _OUTLINE_MM).buffer(_OUTLINE_MM, join_style="mitre")
        shapely.prepare(self._plan)
        edge = shapely.get_coordinates(shapely.convex_hull(self._plan))[:-1]
        heights = (job.stock.top_mm, job.stock.bottom_mm)
        self._corners = np.concatenate([np.column_stack([edge, np.full(len(edge), z)]) for z in heights])
        self._girth_from_mm, self._girth = _girth(operation)
        self._far_mm = float(self._girth.max()) + job.clearance_mm + 1.0

    # ------------------------------------------------------------------------------------------ hops

    def first_stand(self, first: Floats) -> Floats:
        """Words (k,) above the first approach: its X Y, rotary words 0, at a height where they may turn."""
        stand = self._above(first)
        rot = np.zeros(self._kinematics.rotary_count)
        stand[2] = max(stand[2], self._height(rot, first[3:]))
        stand[3:] = 0.0
        return self._digits.round_words(stand[None, :])[0]

    def first(self, stand: Floats, first: Floats) -> Blocks:
        """From where the machine stands, clear of the part, to the first row of the operation.

        The first block is there even if it does not move: it names every axis.
        """
        above = self._above(first)
        height = max(stand[2], above[2], self._height(stand[3:], first[3:]))
        raised = stand.copy()
        raised[2] = height
        return self._blocks([(raised, True, 0.0), *self._across_and_down(above, height, first)])

    def between(self, stand: Floats, first: Floats) -> Blocks:
        """From the last row of a stretch to the first row of the next."""
        off, above = self._above(stand), self._above(first)
        height = max(off[2], above[2], self._height(stand[3:], first[3:]))
        return self._blocks([*self._off(stand, off, height), *self._across_and_down(above, height, first)])

    def leave(self, stand: Floats, home: bool) -> Blocks:
        """From the last row of the operation to a safe height, and with ``home`` the rotary axes back to 0."""
        target = np.zeros_like(stand[3:]) if home else stand[3:]
        off = self._above(stand)
        height = max(off[2], self._height(stand[3:], target))
        moves = self._off(stand, off, height)
        end = moves[-1][0].copy()
        end[3:] = target
        return self._blocks([*moves, (end, True, 0.0)])

    def _off(self, stand: Floats, off: Floats, height: float) -> list[tuple[Floats, bool, float]]:
        raised = off.copy()
        raised[2] = height
        lift_mm = float(np.linalg.norm(off[:3] - stand[:3]))
        return [(off, False, lift_mm), (raised, True, 0.0)]

    def _across_and_down(
        self, above: Floats, height: float, first: Floats
    ) -> list[tuple[Floats, bool, float]]:
        across = above.copy()
        across[2] = height
        drop_mm = -float(np.linalg.norm(above[:3] - first[:3]))
        return [(across, True, 0.0), (above, True, 0.0), (first, False, drop_mm)]

    def _blocks(self, moves: list[tuple[Floats, bool, float]]) -> Blocks:
        """Blocks from (words, rapid, length at feed: positive off the part, negative onto it)."""
        length = np.array([move[2] for move in moves])
        rapid = np.array([move[1] for move in moves])
        purpose = np.where(rapid, Purpose.RAPID, np.where(length >= 0.0, Purpose.EXIT, Purpose.ENTRY))
        return Blocks(
            words=self._digits.round_words(np.array([move[0] for move in moves])),
            rapid=rapid,
            minutes=np.abs(length) / self._operation.feed_mm_min,
            purpose=purpose.astype(np.uint8),
            pass_index=np.full(len(moves), -1, dtype=np.int64),
        )

    # ------------------------------------------------------------------------- off along the cutter axis

    def _above(self, words: Floats) -> Floats:
        """Words (k,) after drawing the cutter back along its axis until all of it is clear of the blank."""
        tip, axis = self._kinematics.forward(words[None, :])
        spindle = self._kinematics.spindle(words[None, :])[0]
        # The spindle goes up along machine Z afterwards; in the part that is this direction.
        up = self._up_in_part(words)
        lift = self._inside_limits(words, spindle, self._lift_mm(tip[0], axis[0], up))
        above = words.copy()
        above[:3] += lift * spindle
        return self._digits.round_words(above[None, :])[0]

    def _inside_limits(self, words: Floats, spindle: Floats, lift_mm: float) -> float:
        """The lift, or as much of it as the travel of X Y Z allows, with a note of what is missing."""
        gauge = self._kinematics.gauge_point(words[None, :])[0]
        possible = lift_mm
        for place, way, axis in zip(gauge, spindle, self._kinematics.machine.linear, strict=True):
            if axis.limits is not None and abs(way) > SAME_DIRECTION_RAD:
                room = (axis.limits[1] - place) / way if way > 0.0 else (axis.limits[0] - place) / way
                possible = min(possible, max(0.0, room - self._digits.length_step_mm))
        if possible < lift_mm:
            self._note(
                f"the cutter cannot be drawn back clear of the blank by {self._job.clearance_mm:g} mm:"
                f" {lift_mm - possible:.2f} mm of travel are missing"
            )
        return possible

    def _note(self, text: str) -> None:
        if text not in self.notes:
            self.notes.append(text)

    def _up_in_part(self, words: Floats) -> Floats:
        """Machine Z as a direction in part coordinates."""
        raised = words.copy()
        raised[2] += 1.0
        low, _ = self._kinematics.forward(words[None, :])
        high, _ = self._kinematics.forward(raised[None, :])
        return high[0] - low[0]

    def _lift_mm(self, tip: Floats, axis: Floats, up: Floats) -> float:
        """How far along its axis the cutter is drawn back: clear there, and on any way further out or up from there.

        All of the cutter lies within a girth g(h) around its axis, so it is clear where the blank is further than g(h) plus
        the clearance from each point of the axis. Distances along the axis are taken once, in steps; between two steps d
        apart the distance is at least (D1 + D2 - d)/2, for it changes no faster than the place it is measured from.
        """
        need = self._girth + self._job.clearance_mm + _SPARE_MM
        top = self._over_the_top_mm(tip, axis, need)
        along = np.linalg.norm(up - axis) < 1e-6
        upright = np.linalg.norm(up - (0.0, 0.0, 1.0)) < 1e-6
        if not (along or upright) and axis[2] > _LEVEL:
            return top
        step = _LIFT_STEP_MM
        lifts = math.ceil(top / step) + 1
        places = self._girth_from_mm + step * np.arange(lifts + len(need) + 1)
        distance = self._from_blank_mm(tip + places[:, None] * axis)
        least = 0.5 * (distance[:-1] + distance[1:] - step)
        windows = np.lib.stride_tricks.sliding_window_view(least, len(need))[:lifts]
        blocked = np.flatnonzero((windows < need).any(axis=1))
        return min(top, step * (int(blocked[-1]) + 1)) if blocked.size else 0.0

    def _over_the_top_mm(self, tip: Floats, axis: Floats, need: Floats) -> float:
        """Lift after which every part of the cutter is clear above the blank's top, or if it lies level, beyond the blank."""
        stock = self._job.stock
        if axis[2] > _LEVEL:
            places = self._girth_from_mm + _LIFT_STEP_MM * np.arange(len(need))
            low = tip[2] + places * axis[2] - need
            return max(0.0, float((stock.top_mm - low).max()) / axis[2])
        west, south, east, north = self._plan.bounds
        across = math.hypot(east - west, north - south)
        return across + stock.top_mm - stock.bottom_mm + float(need.max())

    def _from_blank_mm(self, points: Floats) -> Floats:
        """Distance (n,) of points (n, 3) from the blank, or less; 0 inside. What lies under the blank counts as blank."""
        stock = self._job.stock
        distance = np.maximum(points[:, 2] - stock.top_mm, 0.0)
        # Far above the top, the height over it is bound enough.
        near = distance < self._far_mm
        points = points[near]
        aside = shapely.distance(self._plan, shapely.points(points[:, :2]))
        close = np.hypot(aside, distance[near])
        if stock.allowance_mm is not None:
            _, over = self._saddle.closest(points)
            close = np.maximum(close, over - stock.allowance_mm)
        distance[near] = close
        return distance

    # --------------------------------------------------------------------------------- height to turn at

    def _height(self, rot_from: Floats, rot_to: Floats) -> float:
        """Word Z at which the rotary axes may go from one place to the other with the whole blank below the cutter."""
        kinematics = self._kinematics
        turn = rot_to - rot_from
        steps = max(1, math.ceil(float(np.abs(turn).max(initial=0.0)) / _TURN_STEP_DEG)) if turn.any() else 0
        share = np.linspace(0.0, 1.0, steps + 1)
        rot = rot_from + share[:, None] * turn
        blank = self._blank_top_mm(rot)
        words = np.column_stack([np.zeros((len(rot), 3)), rot])
        spindle = kinematics.spindle(words)
        low = self._below_pivot_mm(spindle[:, 2])
        # Between samples a corner, or the tip, swings above (below) its chord by at most its radius times turn^2 / 8.
        swing = math.radians(float(np.abs(turn).sum()) / max(steps, 1))
        slack = self._radius_mm() * swing * swing / 8.0
        clearance = self._job.clearance_mm + _SPARE_MM
        height = float((blank + low).max()) + slack + clearance - kinematics.base[2] - kinematics.base[3]
        limits = kinematics.machine.linear[2].limits
        if limits is None:
            return height
        highest = limits[1] - float(kinematics.gauge_offset(words)[:, 2].max())
        if height > highest:
            self._note(
                f"Z cannot rise high enough to turn over the blank with {self._job.clearance_mm:g} mm clearance:"
                f" {height - highest:.2f} mm of travel are missing"
            )
            return highest - self._digits.length_step_mm
        return height

    def _blank_top_mm(self, rot: Floats) -> Floats:
        """Machine Z (n,) of the blank's highest corner at rotary words (n, m)."""
        kinematics = self._kinematics
        points = np.tile(self._corners, (len(rot), 1))
        words = kinematics.place(points, np.repeat(rot, len(self._corners), axis=0))
        return kinematics.machine_tip(words)[:, 2].reshape(len(rot), -1).max(axis=1)

    def _below_pivot_mm(self, upright: Floats) -> Floats:
        """How far (n,) the cutter reaches below the pivot when its axis has these Z components (n,)."""
        level = np.sqrt(np.maximum(0.0, 1.0 - upright**2))
        length = self._kinematics.base[3]
        cutter = self._operation.cutter
        corner = cutter.corner_radius_mm
        reach = (length - corner) * upright + (cutter.radius_mm - corner) * level + corner
        for body in cutter.bodies():
            reach = np.maximum(reach, (length - body.low_mm) * upright + body.radius_mm * level)
        return reach

    def _radius_mm(self) -> float:
        """Furthest that anything which turns is from a rotary axis: blank corners, and the tip from its pivot."""
        chain = self._kinematics.chain
        far = (
            self._kinematics.base[3] + self._operation.cutter.radius_mm
            if self._kinematics.carries_cutter
            else 0.0
        )
        stand = self._corners + self._kinematics.part_origin_mm
        for row in chain[chain[:, 7] == 1.0]:
            # Turning about another axis before may carry a corner away from this one, by no more than the two lie apart.
            apart = max((float(np.linalg.norm(row[3:6] - other[3:6])) for other in chain), default=0.0)
            far = max(far, float(np.linalg.norm(stand - row[3:6], axis=1).max()) + 2.0 * apart)
        return far


def _girth(operation: Operation) -> tuple[float, Floats]:
    """Return where on the axis the cutter's girth starts (height over the tip), and the girth on each step from there.

    From the height of one radius up, every part of the cutter is within its girth of the axis: cylinders by their radius.
    The cutting end below lies in a ball around that first point, which for a ball end mill is the ball itself.
    """
    cutter = operation.cutter
    start, rim = cutter.radius_mm, cutter.radius_mm - cutter.corner_radius_mm
    bodies = cutter.bodies()
    high = max((body.high_mm for body in bodies), default=start)
    count = max(1, math.ceil((high - start) / _LIFT_STEP_MM))
    low = start + _LIFT_STEP_MM * np.arange(count)
    girth = np.full(count, cutter.radius_mm)
    for body in bodies:
        touched = (low + _LIFT_STEP_MM > body.low_mm) & (low < body.high_mm)
        girth[touched] = np.maximum(girth[touched], body.radius_mm)
    girth[0] = max(girth[0], math.sqrt(2.0) * rim + cutter.corner_radius_mm)
    return start, girth
