"""Points on a cutter's cutting surface: rings about its axis, each standing for a piece of cutting edge."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Final

import numpy as np

if TYPE_CHECKING:
    from anticlast.cutter import Cutter
    from anticlast.records import Floats

ANGLES: Final = 72  # points round a ring: 5 degrees
_BOTTOM, _CORNER, _SIDE = 4, 18, 10
RINGS: Final = _BOTTOM + _CORNER + _SIDE


@dataclass(frozen=True, slots=True)
class Rings:
    """Rings of one cutter, from the axis outwards and up; rows of no edge pad the table.

    Attributes
    ----------
    place : (rings, 4) [mm, mm, 1, 1]
        Height over the reference point, radius, radial and axial part of the outward normal (axial negative: downwards).
    edge_mm : (rings,)
        Length of cutting edge that the ring stands for, along the profile.
    inner_mm : (rings,)
        Radius at the end of that edge nearest to the axis: 0 where it reaches the axis.
    outer_mm : (rings,)
        Radius at its other end.
    rim : (rings, 2)
        Radial and axial part of the normal at that end: the chip is thickest there.
    """

    place: Floats
    edge_mm: Floats
    inner_mm: Floats
    outer_mm: Floats
    rim: Floats


def rings_of(cutter: Cutter) -> Rings:
    """Return the rings of a cutter: flat bottom, corner arc, straight flutes.

    The side's rings grow closer towards the corner, so that a shallow cut is seen as well as a deep one.
    """
    corner = cutter.corner_radius_mm
    disc = 0.0 if cutter.shape == "ball" else cutter.radius_mm - corner
    place, edge = np.zeros((RINGS, 4)), np.zeros(RINGS)
    inner, outer, rim = np.zeros(RINGS), np.zeros(RINGS), np.zeros((RINGS, 2))
    row = 0
    if disc > 0.0:
        step = disc / _BOTTOM
        for k in range(_BOTTOM):
            place[row] = -corner, (k + 0.5) * step, 0.0, -1.0
            edge[row], inner[row], outer[row], rim[row] = step, k * step, (k + 1) * step, (0.0, -1.0)
            row += 1
    if corner > 0.0:
        step = 0.5 * math.pi / _CORNER
        for k in range(_CORNER):
            turn = (k + 0.5) * step
            place[row] = (
                -corner * math.cos(turn),
                disc + corner * math.sin(turn),
                math.sin(turn),
                -math.cos(turn),
            )
            edge[row] = corner * step
            inner[row], outer[row] = (disc + corner * math.sin(turn + s * step / 2) for s in (-1.0, 1.0))
            rim[row] = math.sin(turn + step / 2), -math.cos(turn + step / 2)
            row += 1
    up = max(0.0, cutter.flute_length_mm - corner)
    for k in range(_SIDE):
        low, high = (up * ((k + s) / _SIDE) ** 2 for s in (0.0, 1.0))
        place[row] = 0.5 * (low + high), cutter.radius_mm, 1.0, 0.0
        edge[row], inner[row], outer[row], rim[row] = (
            high - low,
            cutter.radius_mm,
            cutter.radius_mm,
            (1.0, 0.0),
        )
        row += 1
    return Rings(place, edge, np.where(inner < 1e-9, 0.0, inner), outer, rim)


def ring_table(cutters: Sequence[Cutter]) -> Floats:
    """Return the places of all cutters' rings, (cutters, rings, 4)."""
    return np.array([rings_of(cutter).place for cutter in cutters]).reshape(-1, RINGS, 4)
