"""The strip that one profile leaves: how far it reaches to either side, lift, guard.

docs/theory-matched.md#strip.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from anticlast.passes.profile import Sweep
from anticlast.records import Floats, Ints

# Share of the limit that the middle of a strip may stand at between its two lowest lines. At 1 the strip is 1.3 % wider
# than at 0.9, but every error of the lead would show twice.
_MIDDLE_SHARE = 0.9
# Where the machine's lean swings from front to side, the contact must not travel round the rim faster than this share of the
# feed: else it would run backwards, and a strip looked at here and there would not tell what is left between.
_MOST_SWING = 0.5
# Profile samples to either side of the line, dense beside it: a contact near the rim of the bottom leaves narrow strips.
_SIDE = 18
_CROWDING = 1.6
_FURTHEST = 0.995
_FAR_MM = 1e3
# Where the sample past the limit stands higher than this many limits, a parabola through it says nothing.
_STEEP = 50.0


@dataclass(frozen=True, slots=True)
class Demand:
    """What a strip has to keep: scallop limit, tilt error to survive and what it may gouge then, least lead, most lift.

    Between stations lead and lift run smoothly only if the machine follows; where it does not, hardly any lift is safe.
    """

    height_mm: float
    margin_rad: float
    gouge_mm: float
    least_rad: float
    lift_mm: float


@dataclass(frozen=True, slots=True)
class Strips:
    """Strips at stations, arrays of one shape; lengths mm.

    Attributes
    ----------
    lift_mm
        How far the contact stands off the surface so that nothing gouges.
    left_mm, right_mm
        Plan distance from the line to where the limit is reached, to +v and to -v; 0 where there is no strip.
    middle_mm
        Highest place between the two lowest lines.
    ahead_mm, behind_mm
        How far along +u, and against it, contacts lie that cut the strip.
    arm_mm
        Largest distance of a place of the strip from the contact: what a tilt error about it moves, per radian.
    margin_gouge_mm, told_gouge_mm
        Gouge under the tilt error that must be survived, and under the one that is always told.
    worth
        Width, or below 0 how far the demand is missed.
    """

    lift_mm: Floats
    left_mm: Floats
    right_mm: Floats
    middle_mm: Floats
    ahead_mm: Floats
    behind_mm: Floats
    arm_mm: Floats
    margin_gouge_mm: Floats
    told_gouge_mm: Floats
    worth: Floats


def strips_of(
    height: Floats,
    shift: Floats,
    lowered: Floats,
    aside_mm: Floats,
    across: Floats,
    swing: Floats,
    demand: Demand,
) -> Strips:
    """Return the strips of profiles (n, m), sampled at the distances (m,) of `sides`.

    Parameters
    ----------
    height, shift, lowered : (n, m)
        As `Sweep.profiles` has them.
    across : (n,)
        Surface distance per plan distance across the feed.
    swing : (n,)
        How far the contact travels round the rim of the bottom, per feed.
    """
    height = np.where(np.isfinite(height), height, _FAR_MM)
    middle = aside_mm.size // 2
    lowest = _parabolic_lowest(height)
    lift = np.maximum(-lowest, 0.0)
    risen = height + lift[:, None]
    left, last = _crossing(risen[:, middle:], aside_mm[-1], demand.height_mm)
    right, first = _crossing(risen[:, middle::-1], aside_mm[-1], demand.height_mm)
    places = np.arange(aside_mm.size)
    inside = (places >= middle - first[:, None]) & (places <= middle + last[:, None])
    low_left = middle + np.argmin(risen[:, middle:], axis=1)
    low_right = np.argmin(risen[:, : middle + 1], axis=1)
    between = (places >= low_right[:, None]) & (places <= low_left[:, None])
    bump = np.max(np.where(between, risen, 0.0), axis=1)
    arm = np.hypot(shift, aside_mm)
    gouge = np.max(-lowered - lift[:, None], axis=1, initial=0.0)
    # Below 0: what is not kept, as a share; above: the width of the strip.
    over = np.maximum(bump / (_MIDDLE_SHARE * demand.height_mm), gouge / demand.gouge_mm)
    over = np.maximum(over, np.maximum(lift / demand.lift_mm, swing / _MOST_SWING))
    worth = np.where(over <= 1.0, left + right, -np.minimum(over, _FAR_MM))
    kept = worth > 0.0
    inside &= kept[:, None]
    shift = np.where(inside, shift, 0.0)
    arm = np.max(np.where(inside, arm, 0.0), axis=1)
    left, right = (np.where(kept, reach / across, 0.0) for reach in (left, right))
    return Strips(lift, left, right, bump, shift.max(axis=1), -shift.min(axis=1), arm, gouge, gouge, worth)


def _parabolic_lowest(height: Floats) -> Floats:
    """Return the lowest value (n,) of each row, by a parabola through the lowest sample and its neighbours."""
    at = np.clip(np.argmin(height, axis=1), 1, height.shape[1] - 2)
    rows = np.arange(len(height))
    a, b, c = height[rows, at - 1], height[rows, at], height[rows, at + 1]
    bend = a - 2.0 * b + c
    dip = np.where(bend > 0.0, (a - c) ** 2 / (8.0 * np.where(bend > 0.0, bend, 1.0)), 0.0)
    return np.minimum(height.min(axis=1), b - np.minimum(dip, 0.25 * np.abs(bend)))


def sides(sweep: Sweep) -> Floats:
    """Return distances on the surface (2 _SIDE + 1,) from the line at which profiles are sampled, to the rim or beyond.

    One of them is the bottom's radius: where the surface twists, the bottom comes nearest with its edge.
    """
    share = np.linspace(-1.0, 1.0, 2 * _SIDE + 1)
    furthest = _FURTHEST * sweep.cutter.radius_mm
    edge = math.floor(_SIDE * (sweep.disc_mm / furthest) ** (1.0 / _CROWDING))
    if edge > 0:
        furthest = sweep.disc_mm * (_SIDE / min(edge, _SIDE - 1)) ** _CROWDING
    return furthest * np.sign(share) * np.abs(share) ** _CROWDING


def _crossing(height: Floats, furthest_mm: float, limit_mm: float) -> tuple[Floats, Ints]:
    """Return where rows (n, _SIDE + 1), from the line outwards, first pass the limit, and the last sample before.

    Between samples by a parabola through the two before and the one after, which is exact enough where the profile turns up.
    """
    over = height > limit_mm
    over[:, -1] = True
    after = np.argmax(over, axis=1)
    rows = np.arange(len(height))
    last = np.maximum(after - 1, 0)
    h0, h1, h2 = (
        height[rows, np.maximum(last - 1, 0)],
        height[rows, last],
        np.minimum(height[rows, after], _FAR_MM),
    )
    straight = np.clip((limit_mm - h1) / np.where(h2 > h1, h2 - h1, np.inf), 0.0, 1.0)
    bend, slope = 0.5 * (h0 + h2) - h1, 0.5 * (h2 - h0)
    root = slope + np.sqrt(np.maximum(slope * slope - 4.0 * bend * (h1 - limit_mm), 0.0))
    curved = (last > 0) & (root > 0.0) & (h2 < _STEEP * limit_mm)
    share = np.where(curved, np.clip(2.0 * (limit_mm - h1) / np.where(curved, root, 1.0), 0.0, 1.0), straight)
    return np.where(after == 0, 0.0, furthest_mm * ((last + share) / _SIDE) ** _CROWDING), last
