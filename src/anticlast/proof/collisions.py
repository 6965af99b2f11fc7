"""What must not touch: flutes, shank and holder against the finished surface, everything against the blank at rapid.

Distances are searched for over the whole motion, pieces included, and come with a bound: docs/theory-proof.md#collisions.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from anticlast.proof import _collision_kernels as kernels
from anticlast.proof.patches import PatchTree
from anticlast.proof.threads import in_threads, spans
from anticlast.tolerances import SAME_DIRECTION_RAD, SAME_POINT_MM

if TYPE_CHECKING:
    from collections.abc import Sequence

    from anticlast.cutter import Cutter
    from anticlast.records import Bools, Floats, Ints, PartMotion

# Distances this near [mm], or this share of the least one, are not told apart.
_TOLERANCE_MM = 0.01
_SHARE = 0.01
# Path length of the spans that the search starts with.
_SPAN_MM = 8.0
_STRIDE = 16
# What is shown to be further away than this on coarse patches is not looked at on fine ones.
_FAR_MM = 1.0
# Height above the corner arc of a bull or flat end up to which the virtual cut looks after the flutes.
_RIM_MM = 0.5


@dataclass(frozen=True, slots=True)
class Body:
    """A solid of revolution about the cutter axis: a cylinder, grown all round.

    Attributes
    ----------
    name : str
    radius_mm, low_mm, high_mm : float
        Cylinder before growing; heights above the tip.
    round_mm : float
        How much it is grown.
    """

    name: str
    radius_mm: float
    low_mm: float
    high_mm: float
    round_mm: float = 0.0


@dataclass(frozen=True, slots=True)
class Clearance:
    """Least distance of some bodies from something, over a motion.

    Attributes
    ----------
    distance_mm, bound_mm : float
        Found, and what no distance is below; inf if nothing moved. Negative = overlap.
    piece : int
        Row of the part motion, -1 if none.
    at_mm : (float, float, float)
        Point of the surface or blank, part coordinates.
    body : str
    cutter : int
    """

    distance_mm: float
    bound_mm: float
    piece: int = -1
    at_mm: tuple[float, float, float] = (0.0, 0.0, 0.0)
    body: str = ""
    cutter: int = 0


def cutting_body(cutter: Cutter) -> Body:
    """Return the cutting end with its flutes: a cylinder grown by the corner radius."""
    low = cutter.corner_radius_mm
    high = max(low, cutter.flute_length_mm - low)
    return Body("cutting end", cutter.radius_mm - low, low, high, low)


def rigid_bodies(cutter: Cutter) -> list[Body]:
    """Return shank and holder steps."""
    return [
        Body(found.name, found.radius_mm, found.low_mm, found.high_mm)
        for found in cutter.bodies()
        if found.name != "flutes"
    ]


def nearer(one: Clearance, two: Clearance) -> Clearance:
    """Return the smaller of two clearances, with the lower of their bounds."""
    least = one if one.distance_mm <= two.distance_mm else two
    return replace(least, bound_mm=min(one.bound_mm, two.bound_mm))


def rigid_clearance(
    coarse: PatchTree, fine: PatchTree, motion: PartMotion, pieces: Bools, cutter: Cutter
) -> Clearance:
    """Return the least distance of shank and holder from patches; fine ones are used only if coarse ones are near."""
    bodies = rigid_bodies(cutter)
    found = least_clearance(coarse, motion, pieces, cutter, bodies)
    return found if found.bound_mm > _FAR_MM else least_clearance(fine, motion, pieces, cutter, bodies)


def flute_clearance(
    tree: PatchTree, motion: PartMotion, pieces: Bools, cutter: Cutter, interest_mm: float
) -> Clearance:
    """Return the least distance of the flutes above the cutting end from patches; see `least_clearance`.

    On a bull or flat end mill the first stretch above the rim belongs to the cutting end: the virtual cut has it.
    """
    rim = 0.0 if cutter.shape == "ball" else _RIM_MM
    flutes = [
        Body(found.name, found.radius_mm, found.low_mm + rim, found.high_mm)
        for found in cutter.bodies()
        if found.name == "flutes" and found.high_mm > found.low_mm + rim
    ]
    return least_clearance(tree, motion, pieces, cutter, flutes, interest_mm)


def lifts(motion: PartMotion) -> Bools:
    """Tell which pieces draw the cutter back along its own axis without turning it, (m,) bool.

    Everything on the cutter is as wide or wider further up, so such a piece passes through nothing that was not clear of
    the cutter already.
    """
    step = np.diff(motion.tip_mm, axis=0, prepend=motion.tip_mm[:1])
    before = np.concatenate((motion.axis[:1], motion.axis[:-1]))
    turned = np.linalg.norm(motion.axis - before, axis=1)
    along = np.einsum("ni,ni->n", step, motion.axis)
    across = np.linalg.norm(step - along[:, None] * motion.axis, axis=1)
    return (along > 0.0) & (turned <= SAME_DIRECTION_RAD) & (across <= SAME_POINT_MM)


def least_clearance(
    tree: PatchTree, motion: PartMotion, pieces: Bools, cutter: Cutter, bodies: Sequence[Body],
    interest_mm: float = math.inf,
    share: float = _SHARE,
) -> Clearance:  # fmt: skip
    """Return the least distance of some bodies of a cutter from patches, over some pieces of the motion.

    Parameters
    ----------
    tree : PatchTree
    motion : PartMotion
    pieces : (m,) bool
        Pieces to look at; only those made with ``cutter`` count.
    cutter : Cutter
    bodies : sequence of Body
    interest_mm : float
        Larger distances need not be told apart from this one.
    share : float
        Distances this share of the least one apart need not be told apart.
    """
    rows = np.flatnonzero(pieces & (motion.tool == cutter.number))
    rows = rows[rows > 0]
    worst = Clearance(math.inf, math.inf)
    for body in bodies if rows.size else ():
        worst = nearer(
            worst, _one_body(tree, motion, rows, cutter, body, min(interest_mm, worst.distance_mm), share)
        )
    return worst


def _one_body(
    tree: PatchTree,
    motion: PartMotion,
    rows: Ints,
    cutter: Cutter,
    body: Body,
    interest_mm: float,
    share: float = _SHARE,
) -> Clearance:
    """Return the least distance of one body; ``rows`` are the pieces, ascending."""
    poses = np.ascontiguousarray(
        np.hstack((motion.tip_mm[rows - 1], motion.axis[rows - 1], motion.tip_mm[rows], motion.axis[rows]))
    )
    turned = np.linalg.norm(poses[:, 9:12] - poses[:, 3:6], axis=1)
    # The axis between two ends is their mean made unit again: fastest halfway, by 1 over the length of the mean there.
    turned /= np.maximum(0.1, 0.5 * np.linalg.norm(poses[:, 9:12] + poses[:, 3:6], axis=1))
    length = np.linalg.norm(poses[:, 6:9] - poses[:, :3], axis=1) + (body.high_mm + body.round_mm) * turned
    # A body also turns about itself off the axis: its rim moves by the radius times the angle.
    length += (body.radius_mm + body.round_mm) * turned
    cumulative = np.concatenate(([0.0], np.cumsum(length)))
    runs = _runs(rows, cumulative)
    arguments = ((tree.spheres, tree.child, tree.patches), poses, cumulative)
    shape = (body.radius_mm, body.low_mm, body.high_mm, body.round_mm)

    shared = np.array([interest_mm])
    # Neighbouring spans go to different runs, so that all threads soon know a small distance.
    order = np.argsort(np.arange(len(runs)) % _STRIDE, kind="stable")
    runs = np.ascontiguousarray(runs[order])

    def search(span: tuple[int, int]) -> Floats:
        result = np.empty(6)
        some = runs[span[0] : span[1]]
        kernels.motion_least(*arguments, some, shape, _TOLERANCE_MM, share, shared, result)
        return result

    found = in_threads(search, spans(len(runs)))
    best = min(found, key=lambda result: result[0])
    bound = float(min(result[1] for result in found))
    if best[5] < 0.0:
        return Clearance(interest_mm, min(bound, interest_mm))
    at = (float(best[2]), float(best[3]), float(best[4]))
    return Clearance(float(best[0]), bound, int(rows[int(best[5])]), at, body.name, cutter.number)


def _runs(rows: Ints, cumulative: Floats) -> Floats:
    """Return spans (k, 2) of path length in which the motion is continuous, none much longer than a set length."""
    breaks = np.flatnonzero(np.diff(rows) > 1) + 1
    edges = np.concatenate(([0], breaks, [len(rows)]))
    found = []
    for first, last in zip(edges[:-1], edges[1:], strict=True):
        low, high = cumulative[first], cumulative[last]
        steps = max(1, int(np.ceil((high - low) / _SPAN_MM)))
        cuts = np.linspace(low, high, steps + 1)
        found.append(np.column_stack((cuts[:-1], cuts[1:])))
    return np.ascontiguousarray(np.concatenate(found))
