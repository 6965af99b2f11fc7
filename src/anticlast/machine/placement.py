"""Where on the table, and turned how far about Z, a part should sit so that the axes of the machine move least.

The rotary words of a pass hang on the turn alone, and where the linear axes go depends on the part origin to first order. So for
each turn the least motion is that of a convex function of the origin, found by grids that close in. docs/placing.md.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from anticlast.machine.branches import Wish, choose_all
from anticlast.machine.kinematics import Kinematics, limit_arrays
from anticlast.records import Floats, Ints, Machine
from anticlast.tolerances import AXIS_STRAY_RAD, LIMIT_MM

# Turns about Z that are tried: finer than a part is set by eye, coarser than it can be set by an edge.
TURN_STEP_DEG: Final = 5.0
# Places are proposed to this many mm; a part is not set nearer by hand, and nothing changes within it.
PLACE_STEP_MM: Final = 0.5
# Another place is proposed only if the axes then move less by this share, or stand nearer to their wish by so many degrees;
# of places that are alike to a fifth of that share the one turned less is taken.
WORTH_SHARE: Final = 0.05
WORTH_DEG: Final = 1.0
# Proposed places leave this much of the travel where they can.
SPARE_MM: Final = 1.0
# Points across a grid of origins, how much each is finer than the one before, and how many there are.
_GRID, _CLOSER, _GRIDS = 7, 0.4, 6
# Millimetres past a limit count as so many minutes of motion: any travel is cheaper.
_PAST_MIN_PER_MM: Final = 100.0
# Share of the motion that standing off the middle of the limits counts as, to decide between places that are equal.
_MIDDLE_SHARE: Final = 0.01


@dataclass(frozen=True, slots=True)
class Sweep:
    """Sampled passes of one operation, part coordinates, the part not turned.

    Attributes
    ----------
    line : (n,) int64
        Pass of each point; points of one pass stand together, in the order they are cut.
    wished : (n, 3)
        Unit cutter axes that lead and lean, or the fixed axis, ask for.
    tip_of : callable
        From cutter axes (n, 3) to the tips (n, 3) [mm] that touch the surface with them.
    gauge_length_mm : float
    """

    line: Ints
    wished: Floats
    tip_of: Callable[[Floats], Floats]
    gauge_length_mm: float


@dataclass(frozen=True, slots=True)
class Place:
    """A place of the part, and what it asks of the machine.

    Attributes
    ----------
    part_origin_mm : (x, y, z)
    turn_deg : float
        Turn of the part about Z, the job file's ``turn``, counterclockwise from above, in [0, 360).
    motion_min : float
        Sum over the sampled passes of every axis's travel in units of its own fastest feed.
    off_wish_deg : float
        Largest angle between the cutter axis and its wish.
    cut, reach : dict
        Lowest and highest of each axis in the cut, and with the cutter drawn back along its axis clear of the blank as well:
        gauge point in the machine frame, mm; word, degrees.
    margin : dict
        What is left from ``reach`` to the low and the high limit; negative past it, infinite for an endless axis.
    """

    part_origin_mm: tuple[float, float, float]
    turn_deg: float
    motion_min: float
    off_wish_deg: float
    cut: dict[str, tuple[float, float]]
    reach: dict[str, tuple[float, float]]
    margin: dict[str, tuple[float, float]]

    @property
    def fits(self) -> bool:
        """True if no axis passes a limit."""
        return all(min(pair) >= -LIMIT_MM for pair in self.margin.values())

    def as_json(self) -> dict[str, Any]:
        """Return plain data: mm and degrees; a margin that has no end is null."""

        def ends(pair: tuple[float, float]) -> list[float | None]:
            return [value if math.isfinite(value) else None for value in pair]

        return {
            "part_origin": list(self.part_origin_mm),
            "turn_deg": self.turn_deg,
            "axis_motion_min": self.motion_min,
            "off_wish_deg": self.off_wish_deg,
            "travel": {letter: list(pair) for letter, pair in self.reach.items()},
            "margin": {letter: ends(pair) for letter, pair in self.margin.items()},
            "fits": self.fits,
        }


@dataclass(frozen=True, slots=True)
class Placement:
    """The job's own place, and the best one found; the same where nothing better is worth it."""

    now: Place
    best: Place

    @property
    def moves(self) -> bool:
        """True if another place is proposed."""
        return self.best is not self.now

    def as_json(self) -> dict[str, Any]:
        """Return plain data."""
        return {"now": self.now.as_json(), "best": self.best.as_json(), "moves": self.moves}


def propose(
    machine: Machine,
    part_origin_mm: Sequence[float],
    sweeps: Sequence[Sweep],
    corners_mm: Floats,
    clearance_mm: float,
    turns_deg: Sequence[float] | None = None,
    turn_now_deg: float = 0.0,
) -> Placement:
    """Find the place on the table and the turn about Z at which the axes move least.

    The part is moved along X and Y, and turned. Its height stays, for that is the fixture's, unless no other way brings all
    axes inside their limits.

    Parameters
    ----------
    machine : Machine
    part_origin_mm : (3,)
        Where the job has the part origin.
    sweeps : sequence of Sweep
        At least one.
    corners_mm : (k, 3)
        Corners of the blank, part coordinates: what the cutter is drawn back from.
    clearance_mm : float
        How far.
    turns_deg : sequence of float, optional
        Turns to try, from how the part stands now; every 5 degrees if not given. 0 is always tried.
    turn_now_deg : float
        The job's own turn, which the sweeps and corners have already.

    Returns
    -------
    Placement
        First fits, then stands nearest to the wished axes (to a degree), then moves least. ``best`` is ``now`` unless the
        gain is worth moving the part.
    """
    origin = np.asarray(part_origin_mm, dtype=np.float64)
    turns = (
        np.arange(0.0, 360.0, TURN_STEP_DEG) if turns_deg is None else np.asarray(turns_deg, dtype=np.float64)
    )
    stands = [
        _Stand(machine, origin, sweeps, corners_mm, clearance_mm, float(turn), turn_now_deg)
        for turn in (0.0, *turns[turns != 0.0])
    ]
    now = stands[0].at(np.zeros(3))
    places = [stand.at(stand.least_motion(False)) for stand in stands]
    if not any(place.fits for place in places):
        places = [stand.at(stand.least_motion(True)) for stand in stands]
    best = min(places, key=lambda place: _rank(place, WORTH_SHARE / 5.0 * now.motion_min, turn_now_deg))
    worth = (
        best.fits > now.fits
        or best.off_wish_deg < now.off_wish_deg - WORTH_DEG
        or (best.fits == now.fits and best.motion_min < (1.0 - WORTH_SHARE) * now.motion_min)
    )
    return Placement(now, best if worth else now)


def _rank(place: Place, alike_min: float, turn_now_deg: float) -> tuple[float, ...]:
    """Order of places: past the limits, off the wish, motion, and of those alike the smaller turn either way."""
    past = max(0.0, *(-min(pair) for pair in place.margin.values())) if place.margin else 0.0
    turned = abs((place.turn_deg - turn_now_deg + 180.0) % 360.0 - 180.0)
    motion = place.motion_min / alike_min if alike_min > 0.0 else 0.0
    return (round(past, 2), round(place.off_wish_deg / WORTH_DEG), round(motion), turned, place.motion_min)


class _Stand:
    """The sampled passes with the part turned, and how the axes go as the part origin is moved."""

    def __init__(
        self,
        machine: Machine,
        origin: Floats,
        sweeps: Sequence[Sweep],
        corners: Floats,
        clearance_mm: float,
        turn_deg: float,
        turn_now_deg: float,
    ) -> None:
        self.machine = machine
        self.origin = origin
        self.turn_deg = (turn_now_deg + turn_deg) % 360.0
        cos, sin = math.cos(math.radians(turn_deg)), math.sin(math.radians(turn_deg))
        turn = np.array([[cos, -sin, 0.0], [sin, cos, 0.0], [0.0, 0.0, 1.0]])
        wishes, tips, backs, same, off = [], [], [], [], 0.0
        kinematics = [Kinematics(machine, origin.tolist(), sweep.gauge_length_mm) for sweep in sweeps]
        for item, sweep in zip(kinematics, sweeps, strict=True):
            wished = sweep.wished @ turn.T
            axis = item.nearest_axis(wished)
            tip = sweep.tip_of(axis @ turn) @ turn.T
            off = max(off, float(np.degrees(2 * np.arcsin(np.linalg.norm(axis - wished, axis=1) / 2).max())))
            highest = (axis @ turn @ corners.T).max(axis=1)
            back = np.maximum(0.0, highest + clearance_mm - np.einsum("ij,ij->i", tip, axis))
            for rows in np.split(axis, np.flatnonzero(np.diff(sweep.line)) + 1):
                wishes.append(Wish(item, np.ascontiguousarray(rows), None, AXIS_STRAY_RAD, AXIS_STRAY_RAD))
                same.append(np.full(len(rows), len(wishes)))
            tips.append(tip)
            backs.append(tip + back[:, None] * axis)
        self.off_wish_deg = off
        chosen = choose_all(wishes, np.zeros(len(machine.rotary)))
        self.rotary = np.concatenate([words.rotary_deg for words in chosen])
        self.along = np.diff(np.concatenate(same)) == 0
        self.words, self.gauge = self._at_each(kinematics, tips)
        self.drawn = self._at_each(kinematics, backs)[1]
        # The gauge point goes with the part origin as the work turns it; the words besides by what program zero moves.
        self.carried = np.zeros((len(self.gauge), 3, 3))
        for k in range(3):
            moved = origin.copy()
            moved[k] += 1.0
            other = [Kinematics(machine, moved.tolist(), item.gauge_length_mm) for item in kinematics]
            self.carried[:, :, k] = self._at_each(other, tips)[1] - self.gauge

    def _at_each(self, kinematics: Sequence[Kinematics], points: Sequence[Floats]) -> tuple[Floats, Floats]:
        """Words X Y Z (n, 3) and gauge points (n, 3) with the tip at the points of each sweep."""
        words, gauge, low = [], [], 0
        for item, tip in zip(kinematics, points, strict=True):
            placed = item.place(tip, self.rotary[low : low + len(tip)])
            words.append(placed[:, :3])
            gauge.append(item.gauge_point(placed))
            low += len(tip)
        return np.concatenate(words), np.concatenate(gauge)

    def _linear_motion(self, shifts: Floats) -> Floats:
        """Minutes (g,) that X Y Z need for the sampled passes with the origin moved by each shift (g, 3)."""
        feed = np.array([axis.feed for axis in self.machine.linear])
        steps = np.diff(self.words, axis=0)[self.along]
        turned = np.diff(self.carried, axis=0)[self.along]
        moved = steps[None] + np.einsum("nij,gj->gni", turned, shifts)
        total: Floats = (np.abs(moved) / feed).sum(axis=(1, 2))
        return total

    def _past_limits(self, shifts: Floats, spare_mm: float) -> tuple[Floats, Floats]:
        """How far (g,) [mm] the gauge point passes X Y Z limits less a spare, drawn back or not, and how far off their middle."""
        low, high = limit_arrays(self.machine.linear)
        low, high = low + spare_mm, high - spare_mm
        middle = np.zeros(len(shifts))
        moved = np.einsum("nij,gj->gni", self.carried, shifts)
        least = np.minimum((self.gauge[None] + moved).min(axis=1), (self.drawn[None] + moved).min(axis=1))
        most = np.maximum((self.gauge[None] + moved).max(axis=1), (self.drawn[None] + moved).max(axis=1))
        past = np.maximum(np.maximum(low - least, most - high), 0.0).sum(axis=1)
        bounded = np.isfinite(low) & np.isfinite(high)
        if bounded.any():
            span = np.where(bounded, high - low, 1.0)
            away = np.where(bounded, np.abs(least + most - low - high) / span, 0.0)
            middle = away[:, :2].max(axis=1)
        return past, middle

    def least_motion(self, lift: bool) -> Floats:
        """Shift of the origin (3,) with the least motion inside the limits, by grids that close in; Z too with ``lift``."""
        low, high = limit_arrays(self.machine.linear)
        reach = np.where(np.isfinite(high - low), 0.5 * (high - low), 100.0)
        if not lift:
            reach[2] = 0.0
        across = np.linspace(-1.0, 1.0, _GRID)
        unit = np.stack(
            np.meshgrid(across, across, across if lift else [0.0], indexing="ij"), axis=-1
        ).reshape(-1, 3)
        at = np.zeros(3)
        scale = max(float(self._linear_motion(np.zeros((1, 3)))[0]), 1e-6)
        for _ in range(_GRIDS):
            shifts = np.concatenate([at[None], at + unit * reach])
            past, middle = self._past_limits(shifts, SPARE_MM)
            cost = self._linear_motion(shifts) + _PAST_MIN_PER_MM * past + _MIDDLE_SHARE * scale * middle
            at = shifts[int(cost.argmin())]
            reach = reach * _CLOSER
        placed = np.round((self.origin + at) / PLACE_STEP_MM) * PLACE_STEP_MM - self.origin
        if not lift:
            placed[2] = 0.0
        tried = np.array([placed, at, np.zeros(3)])
        past, _ = self._past_limits(tried, 0.0)
        cost = self._linear_motion(tried) + _PAST_MIN_PER_MM * np.round(past, 3)
        # A round place, unless it costs limits; where the part stands now, if that is as good.
        if cost[2] <= cost[0] * (1.0 + 1e-3):
            return tried[2]
        return tried[0] if past[0] <= past[1] + LIMIT_MM else tried[1]

    def at(self, shift: Floats) -> Place:
        """Return what a shift (3,) of the part origin asks of the machine."""
        moved = np.einsum("nij,j->ni", self.carried, shift)
        cut = np.column_stack([self.gauge + moved, self.rotary])
        drawn = np.column_stack([self.drawn + moved, self.rotary])
        every = np.concatenate([cut, drawn])
        low, high = limit_arrays(self.machine.axes)
        letters = self.machine.letters
        rate = np.array([axis.feed for axis in self.machine.rotary])
        turning = np.abs(np.diff(self.rotary, axis=0)[self.along]) / rate if len(rate) else np.zeros((1, 1))
        place = self.origin + shift
        return Place(
            part_origin_mm=(float(place[0]), float(place[1]), float(place[2])),
            turn_deg=self.turn_deg,
            motion_min=float(self._linear_motion(shift[None])[0] + turning.sum()),
            off_wish_deg=self.off_wish_deg,
            cut={k: (float(cut[:, j].min()), float(cut[:, j].max())) for j, k in enumerate(letters)},
            reach={k: (float(every[:, j].min()), float(every[:, j].max())) for j, k in enumerate(letters)},
            margin={
                k: (float(every[:, j].min() - low[j]), float(high[j] - every[:, j].max()))
                for j, k in enumerate(letters)
            },
        )
