"""Lead, lift and strip of a matched end mill all over the outline: chosen at stations, smooth between them.

At each station the exact swept profile is asked for many leads. The cutter is lifted until the profile just does not gouge; what
then stands no higher than the limit beside the line is the strip. The widest strip wins. docs/theory-matched.md#fit.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from anticlast.passes.cusp import plan_of
from anticlast.passes.profile import Sweep, osculating_lead_rad
from anticlast.records import Bools, Floats, Ints
from anticlast.tolerances import SAME_POINT_MM

# Below this lead the rear of a flat bottom stands so low that it rubs on chips: its height over a 6 mm bottom is 26 micrometres.
LEAST_LEAD_RAD = math.radians(0.25)
# Tilt error whose effect is always told.
TOLD_ERROR_RAD = math.radians(0.05)
# Nor is a wide strip to be had beyond: the profile is nearly a half circle of the corner there.
_MOST_LEAD_RAD = math.radians(50.0)
# Share of the limit that the middle of a strip may stand at between its two lowest lines. At 1 the strip is 1.3 % wider
# than at 0.9, but every error of the lead would show twice.
_MIDDLE_SHARE = 0.9
# Leads asked first where the machine reaches every axis, as shares of the one that osculates; then between the best two.
_SHARES = np.array([0.3, 0.45, 0.65, 0.95, 1.4, 2.2, 4.0, 8.0, 16.0])
_LEADS_ASKED = 11
_SECTIONS = 15
# Where the machine's lean swings from front to side, the contact must not travel round the rim faster than this share of the
# feed: else it would run backwards, and a strip looked at here and there would not tell what is left between.
_MOST_SWING = 0.5
_GOLDEN = 0.6180339887498949
# Profile samples to either side of the line, dense beside it: a contact near the rim of the bottom leaves narrow strips.
_SIDE = 18
_CROWDING = 1.6
_FURTHEST = 0.995
_FAR_MM = 1e3
# Where the sample past the limit stands higher than this many limits, a parabola through it says nothing.
_STEEP = 50.0


@dataclass(frozen=True, slots=True)
class Family:
    """One way to lean: by a lead that is sought at a given lean, or by a lean that is sought at a given lead."""

    name: str
    by_lead: bool
    sign: float
    other_rad: float

    def wish(self, angle_rad: Floats) -> tuple[Floats, Floats]:
        """Return lead and lean (n,) for the sought angle (n,) > 0."""
        sought, other = self.sign * angle_rad, np.full_like(angle_rad, self.other_rad)
        return (sought, other) if self.by_lead else (other, sought)


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


@dataclass(frozen=True, slots=True)
class Fit:
    """Chosen leads and their strips on a grid of stations over the outline and some way round it.

    Attributes
    ----------
    u_mm, v_mm : (nu,), (nv,)
        Even grids.
    family : Family
    angle_rad : (ways, nv, nu)
        The sought angle; way 0 is fed along +u, way 1 against it.
    strips : Strips
        Of the same shape.
    reached_rad : (2, ways, nv, nu)
        Lead and lean that the machine gives at the stations.
    """

    u_mm: Floats
    v_mm: Floats
    family: Family
    angle_rad: Floats
    strips: Strips
    reached_rad: Floats

    def wish(self, way: int, u_mm: Floats, v_mm: Floats) -> tuple[Floats, Floats, Floats]:
        """Return wished lead and lean [rad] and the lift [mm] (n,) at contacts (u, v)."""
        lead, lean = self.family.wish(self.at(self.angle_rad[way], u_mm, v_mm))
        return lead, lean, np.maximum(self.at(self.strips.lift_mm[way], u_mm, v_mm), 0.0)

    def reach(self, ways: tuple[int, ...], u_mm: Floats, v_mm: Floats) -> tuple[Floats, Floats]:
        """Return how far strips reach to +v and to -v (n,) [mm], the lesser of some ways (indices)."""
        left = [self.at(self.strips.left_mm[way], u_mm, v_mm) for way in ways]
        right = [self.at(self.strips.right_mm[way], u_mm, v_mm) for way in ways]
        return np.maximum(np.min(left, axis=0), 0.0), np.maximum(np.min(right, axis=0), 0.0)

    def at(self, field: Floats, u_mm: Floats, v_mm: Floats) -> Floats:
        """Return a field (nv, nu) between stations, cubic in either direction."""
        i, wu = _weights(self.u_mm, u_mm)
        j, wv = _weights(self.v_mm, v_mm)
        found = np.zeros(np.broadcast(u_mm, v_mm).shape)
        for b in range(4):
            for a in range(4):
                found = found + wv[b] * wu[a] * field[j + b, i + a]
        return found


def _weights(nodes: Floats, at: Floats) -> tuple[Ints, Floats]:
    """Return the first of four neighbouring nodes, and their Lagrange weights (4, n)."""
    t = (np.clip(at, nodes[0], nodes[-1]) - nodes[0]) / (nodes[1] - nodes[0])
    i = np.clip(np.floor(t).astype(np.int64) - 1, 0, nodes.size - 4)
    a = t - i
    b, c, d = a - 1.0, a - 2.0, a - 3.0
    return i, np.stack((-b * c * d / 6.0, 0.5 * a * c * d, -0.5 * a * b * d, a * b * c / 6.0))


def changes_axis(sweep: Sweep, u_mm: Floats, v_mm: Floats, family: Family) -> bool:
    """Tell whether the sought angle of a family turns the machine's axis at stations (n,)."""
    wishes = [family.wish(np.full(u_mm.size, math.radians(angle))) for angle in (5.0, 15.0)]
    first, second = (sweep.poses(u_mm, v_mm, 1, lead, lean, 0.0)[1] for lead, lean in wishes)
    return bool(np.max(np.abs(first - second)) > math.radians(0.5))


def reaches_all(sweep: Sweep, u_mm: Floats, v_mm: Floats) -> bool:
    """Tell whether the machine reaches small leads and leans all over stations (n,)."""
    ones = np.ones(u_mm.size)
    for lead, lean in ((0.05, 0.0), (-0.05, 0.0), (0.02, 0.05), (0.02, -0.05)):
        _, axis = sweep.poses(u_mm, v_mm, 1, lead * ones, lean * ones, 0.0)
        got_lead, got_lean = sweep.reached(u_mm, v_mm, 1, axis)
        if np.max(np.abs(got_lead - lead)) > 1e-5 or np.max(np.abs(got_lean - lean)) > 1e-5:
            return False
    return True


def fit(
    sweep: Sweep, u_nodes: Floats, v_nodes: Floats, ways: tuple[int, ...], family: Family, demand: Demand,
    counts: Bools, relative: bool,
) -> Fit:  # fmt: skip
    """Return the leads of widest strips at all stations.

    Parameters
    ----------
    u_nodes, v_nodes : (nu,), (nv,)
    ways : tuple of +1, -1
    counts : (nv, nu) bool
        Stations that matter.
    relative : bool
        True: each station has its own angle, looked for about the lead that osculates. False: one angle for every line of
        stations along the feed, of all small and large ones the best at the line's worst station.
    """
    if relative and len(ways) == 2 and _symmetric(u_nodes) and _symmetric(v_nodes):
        return _turned_over(
            fit(sweep, u_nodes, v_nodes, ways[:1], family, demand, counts | counts[::-1, ::-1], relative)
        )
    way = np.repeat(np.array(ways, dtype=np.float64), u_nodes.size * v_nodes.size)
    v, u = (np.tile(grid.ravel(), len(ways)) for grid in np.meshgrid(v_nodes, u_nodes, indexing="ij"))
    xy = plan_of(u, v, sweep.direction_rad)
    tangent = sweep.saddle.tangent(xy, sweep.direction_rad)
    across = sweep.saddle.stretch(xy) * np.linalg.norm(tangent[:, :2], axis=1)
    aside = sides(sweep)
    shape = (len(ways), v_nodes.size, u_nodes.size)
    members = 1 if relative else u_nodes.size
    matter = np.tile(counts.ravel(), len(ways)).reshape(-1, members)
    matter |= ~matter.any(axis=1, keepdims=True)

    none = np.zeros(u.size)
    least = max(demand.least_rad, LEAST_LEAD_RAD)
    start = _start(sweep, u[:, None] + sweep.offsets(), v[:, None], least)
    here = start[:, start.shape[1] // 2]
    # Within reach of the cutter a lead changes as the one that osculates: where it falls, the rear of poses ahead comes near.
    varies = start / here[:, None]

    def ask(angle: Floats, error_rad: float = demand.margin_rad) -> Strips:
        if relative:
            lead, lean = family.wish(np.maximum(angle[:, None] * varies, least))
            return strips_of(
                *sweep.profiles(u, v, way, lead, lean, aside, error_rad), aside, across, none, demand
            )
        lead, lean = family.wish(np.repeat(angle, members))
        swing = _swing(sweep, u, v, way, lead, lean)
        return strips_of(
            *sweep.profiles(u, v, way, lead, lean, aside, error_rad), aside, across, swing, demand
        )

    def worth(angle: Floats) -> Floats:
        return np.where(matter, ask(angle).worth.reshape(-1, members), np.inf).min(axis=1)

    if relative:
        angles = np.clip(here[:, None] * _SHARES, least, max(_MOST_LEAD_RAD, least))
    else:
        asked = np.geomspace(least, max(_MOST_LEAD_RAD, least), _LEADS_ASKED)
        angles = np.broadcast_to(asked, (len(matter), _LEADS_ASKED))
    found = np.stack([worth(np.ascontiguousarray(column)) for column in angles.T], axis=1)
    best = np.argmax(found, axis=1)
    rows = np.arange(len(matter))
    low, high = angles[rows, np.maximum(best - 1, 0)], angles[rows, np.minimum(best + 1, angles.shape[1] - 1)]
    chosen = _sectioned(worth, low, high, angles[rows, best], found[rows, best])
    strips = ask(chosen)
    if demand.margin_rad != TOLD_ERROR_RAD:
        strips = replace(strips, told_gouge_mm=ask(chosen, TOLD_ERROR_RAD).margin_gouge_mm)
    angle = np.repeat(chosen, members)
    _, axis = sweep.poses(u, v, way, *family.wish(angle), 0.0)
    reached = np.stack(sweep.reached(u, v, way, axis)).reshape(2, *shape)
    fields = {name: getattr(strips, name).reshape(shape) for name in Strips.__slots__}
    return Fit(u_nodes, v_nodes, family, angle.reshape(shape), Strips(**fields), reached)


def _start(sweep: Sweep, u_mm: Floats, v_mm: Floats, least_rad: float) -> Floats:
    """Return the lead [rad] that fits the more concave of both curvatures, along and across the feed, of (u, v) of one shape.

    Along the feed it is what keeps the rear of the bottom off a concave surface.
    """
    u_mm, v_mm = np.broadcast_arrays(u_mm, v_mm)
    xy = plan_of(u_mm, v_mm, sweep.direction_rad)
    k_t, k_b, _, _, _ = sweep.saddle.along(xy, sweep.direction_rad)
    lead = osculating_lead_rad(sweep.disc_mm, sweep.cutter.corner_radius_mm, np.maximum(k_b, k_t))
    return np.maximum(lead, least_rad).reshape(u_mm.shape)


def _swing(sweep: Sweep, u: Floats, v: Floats, way: Floats, lead: Floats, lean: Floats) -> Floats:
    """Return how far the contact travels round the rim of the bottom per feed (n,), by differences over a pose step."""
    step = sweep.step_mm
    azimuth = []
    for side in (-0.5 * step, 0.5 * step):
        _, axis = sweep.poses(u + side, v, way, lead, lean, 0.0)
        got_lead, got_lean = sweep.reached(u + side, v, way, axis)
        azimuth.append(np.arctan2(np.tan(got_lean), np.tan(got_lead)))
    turned = (azimuth[1] - azimuth[0] + math.pi) % (2.0 * math.pi) - math.pi
    return sweep.disc_mm * np.abs(turned) / step


def _symmetric(nodes: Floats) -> bool:
    return bool(np.abs(nodes + nodes[::-1]).max() <= SAME_POINT_MM)


def _turned_over(one: Fit) -> Fit:
    """Return a fit for both ways from that for one, on symmetric grids: half a turn about Z swaps the ways.

    A pass at (u, v) fed against +u is the pass at (-u, -v) fed along it; its left is that one's right.
    """

    def both(first: Floats, second: Floats) -> Floats:
        return np.concatenate((first, second[..., ::-1, ::-1]), axis=-3)

    s = one.strips
    fields = {name: both(getattr(s, name), getattr(s, name)) for name in Strips.__slots__}
    fields["left_mm"], fields["right_mm"] = both(s.left_mm, s.right_mm), both(s.right_mm, s.left_mm)
    fields["ahead_mm"], fields["behind_mm"] = both(s.ahead_mm, s.behind_mm), both(s.behind_mm, s.ahead_mm)
    angle, reached = both(one.angle_rad, one.angle_rad), both(one.reached_rad, one.reached_rad)
    return Fit(one.u_mm, one.v_mm, one.family, angle, Strips(**fields), reached)


def _sectioned(
    worth_of: Callable[[Floats], Floats], low: Floats, high: Floats, best: Floats, worth: Floats
) -> Floats:
    """Return the angles (n,) of most worth between low and high, by golden section; the best asked is kept."""
    b, c = high - _GOLDEN * (high - low), low + _GOLDEN * (high - low)
    at_b, at_c = worth_of(b), worth_of(c)
    for _ in range(_SECTIONS):
        for angle, value in ((b, at_b), (c, at_c)):
            better = value > worth
            best, worth = np.where(better, angle, best), np.where(better, value, worth)
        down = at_b >= at_c
        low, high = np.where(down, low, b), np.where(down, c, high)
        fresh = np.where(down, high - _GOLDEN * (high - low), low + _GOLDEN * (high - low))
        b, c = np.where(down, fresh, c), np.where(down, b, fresh)
        value = worth_of(fresh)
        at_b, at_c = np.where(down, value, at_c), np.where(down, at_b, value)
    return best
