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
from anticlast.passes.strip import Demand, Strips, sides, strips_of
from anticlast.records import Bools, Floats, Ints
from anticlast.tolerances import REACH_RAD, SAME_POINT_MM

# Below this lead the rear of a flat bottom stands so low that it rubs on chips: its height over a 6 mm bottom is 26 micrometres.
LEAST_LEAD_RAD = math.radians(0.25)
# Tilt error whose effect is always told.
TOLD_ERROR_RAD = math.radians(0.05)
# Nor is a wide strip to be had beyond: the profile is nearly a half circle of the corner there.
_MOST_LEAD_RAD = math.radians(50.0)
# Leads asked first where the machine reaches every axis, as shares of the one that osculates; then between the best two.
_SHARES = np.array([0.3, 0.45, 0.65, 0.95, 1.4, 2.2, 4.0, 8.0, 16.0])
_LEADS_ASKED = 11
_SECTIONS, _SECTIONS_OF_LINES = 15, 9
_GOLDEN = 0.6180339887498949


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
    smooth : bool
        What was chosen changes smoothly across the feed too, not from line to line by itself.
    """

    u_mm: Floats
    v_mm: Floats
    family: Family
    angle_rad: Floats
    strips: Strips
    reached_rad: Floats
    smooth: bool

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
        """Return a field (nv, nu) between stations: cubic, straight across the feed where it is not smooth."""
        i, wu = _weights(self.u_mm, u_mm, True)
        j, wv = _weights(self.v_mm, v_mm, self.smooth)
        found = np.zeros(np.broadcast(u_mm, v_mm).shape)
        for b in range(4):
            for a in range(4):
                found = found + wv[b] * wu[a] * field[j + b, i + a]
        return found


def _weights(nodes: Floats, at: Floats, cubic: bool) -> tuple[Ints, Floats]:
    """Return the first of four neighbouring nodes, and their weights (4, n): Lagrange's, or those of the nearest two."""
    t = (np.clip(at, nodes[0], nodes[-1]) - nodes[0]) / (nodes[1] - nodes[0])
    i = np.clip(np.floor(t).astype(np.int64) - 1, 0, nodes.size - 4)
    a = t - i
    if not cubic:
        return i, np.stack([np.maximum(1.0 - np.abs(a - k), 0.0) for k in range(4)])
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


@dataclass(frozen=True, slots=True)
class _Search:
    """Stations (n,) of one fit, and what is asked there: one angle for every ``members`` stations."""

    sweep: Sweep
    u_mm: Floats
    v_mm: Floats
    way: Floats
    family: Family
    demand: Demand
    matter: Bools
    relative: bool

    @property
    def members(self) -> int:
        """How many stations share an angle."""
        return int(self.matter.shape[1])

    @property
    def least_rad(self) -> float:
        """The least lead."""
        return max(self.demand.least_rad, LEAST_LEAD_RAD)

    def around(self) -> Floats:
        """Return the leads (n, p) to start from at the poses that may cut abreast of the stations."""
        u = self.u_mm[:, None] + self.sweep.offsets()
        return _start(self.sweep, u, self.v_mm[:, None], self.least_rad)

    def strips(self, angle: Floats, error_rad: float) -> Strips:
        """Return the strips of angles (n / members,)."""
        sweep, u, v, way = self.sweep, self.u_mm, self.v_mm, self.way
        swing = np.zeros(u.size)
        if self.relative:
            # Within the cutter's reach a lead changes as the one that osculates: where it falls, the rear of poses ahead is low.
            around = self.around()
            varies = angle[:, None] * around / around[:, around.shape[1] // 2, None]
            lead, lean = self.family.wish(np.maximum(varies, self.least_rad))
        else:
            lead, lean = self.family.wish(np.repeat(angle, self.members))
            swing = _swing(sweep, u, v, way, lead, lean)
        tangent = sweep.saddle.tangent(plan_of(u, v, sweep.direction_rad), sweep.direction_rad)
        stretch = sweep.saddle.stretch(plan_of(u, v, sweep.direction_rad))
        aside = sides(sweep)
        profiles = sweep.profiles(u, v, way, lead, lean, aside, error_rad)
        return strips_of(
            *profiles, aside, stretch * np.linalg.norm(tangent[:, :2], axis=1), swing, self.demand
        )

    def worth(self, angle: Floats, error_rad: float) -> Floats:
        """Return what angles are worth at the worst of their stations."""
        found = self.strips(angle, error_rad).worth.reshape(-1, self.members)
        return np.where(self.matter, found, np.inf).min(axis=1)

    def best(self) -> Floats:
        """Return the angles of most worth (n / members,)."""
        least, margin = self.least_rad, self.demand.margin_rad
        if self.relative:
            around = self.around()
            angles = np.clip(
                around[:, around.shape[1] // 2, None] * _SHARES, least, max(_MOST_LEAD_RAD, least)
            )
        else:
            # Whether the first of many survives an error is asked of the better ones only.
            asked = np.geomspace(least, max(_MOST_LEAD_RAD, least), _LEADS_ASKED)
            angles, margin = np.broadcast_to(asked, (len(self.matter), _LEADS_ASKED)), 0.0
        found = np.stack([self.worth(np.ascontiguousarray(column), margin) for column in angles.T], axis=1)
        rows, best = np.arange(len(angles)), np.argmax(found, axis=1)
        last = angles.shape[1] - 1
        low, high = angles[rows, np.maximum(best - 1, 0)], angles[rows, np.minimum(best + 1, last)]
        start = angles[rows, best]
        worth = found[rows, best] if self.relative else self.worth(start, self.demand.margin_rad)
        sections = _SECTIONS if self.relative else _SECTIONS_OF_LINES
        return _sectioned(
            lambda angle: self.worth(angle, self.demand.margin_rad), low, high, start, worth, sections
        )


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
    if (
        len(ways) == 2
        and _symmetric(u_nodes)
        and _symmetric(v_nodes)
        and _turns_over(sweep, u_nodes, v_nodes)
    ):
        one = fit(sweep, u_nodes, v_nodes, ways[:1], family, demand, counts | counts[::-1, ::-1], relative)
        return _turned_over(one)
    shape = (len(ways), v_nodes.size, u_nodes.size)
    v, u = (np.tile(grid.ravel(), len(ways)) for grid in np.meshgrid(v_nodes, u_nodes, indexing="ij"))
    way = np.repeat(np.array(ways, dtype=np.float64), u_nodes.size * v_nodes.size)
    matter = np.tile(counts.ravel(), len(ways)).reshape(-1, 1 if relative else u_nodes.size)
    matter |= ~matter.any(axis=1, keepdims=True)
    search = _Search(sweep, u, v, way, family, demand, matter, relative)
    chosen = search.best()
    strips = search.strips(chosen, demand.margin_rad)
    if demand.margin_rad != TOLD_ERROR_RAD:
        strips = replace(strips, told_gouge_mm=search.strips(chosen, TOLD_ERROR_RAD).margin_gouge_mm)
    angle = np.repeat(chosen, search.members)
    _, axis = sweep.poses(u, v, way, *family.wish(angle), 0.0)
    reached = np.stack(sweep.reached(u, v, way, axis)).reshape(2, *shape)
    fields = {name: getattr(strips, name).reshape(shape) for name in Strips.__slots__}
    return Fit(u_nodes, v_nodes, family, angle.reshape(shape), Strips(**fields), reached, relative)


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


def _turns_over(sweep: Sweep, u_nodes: Floats, v_nodes: Floats) -> bool:
    """Tell whether the machine leans as well to one side as to the other: half a turn about Z takes what it reaches to itself."""
    v, u = (grid.ravel() for grid in np.meshgrid(v_nodes, u_nodes, indexing="ij"))
    normal = sweep.saddle.normal(plan_of(u, v, sweep.direction_rad))
    half_turn = np.array([-1.0, -1.0, 1.0])
    difference = sweep.nearest(np.ascontiguousarray(half_turn * normal)) - half_turn * sweep.nearest(normal)
    return bool(np.abs(difference).max() < REACH_RAD)


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
    return Fit(one.u_mm, one.v_mm, one.family, angle, Strips(**fields), reached, one.smooth)


def _sectioned(
    worth_of: Callable[[Floats], Floats],
    low: Floats,
    high: Floats,
    best: Floats,
    worth: Floats,
    sections: int,
) -> Floats:
    """Return the angles (n,) of most worth between low and high, by golden section; the best asked is kept."""
    b, c = high - _GOLDEN * (high - low), low + _GOLDEN * (high - low)
    at_b, at_c = worth_of(b), worth_of(c)
    for _ in range(sections):
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
