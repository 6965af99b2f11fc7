"""One cutter axis for a whole surface: rotary axes set once and left standing, where following the surface gains nothing.

A ball leaves the same surface however it is tilted; what its tilt has to do is keep its middle, where nothing moves, off the
surface. On a shallow surface one axis does that everywhere. docs/placing.md, "Standing still".
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from anticlast.machine.kinematics import Kinematics
from anticlast.records import Floats
from anticlast.tolerances import REACH_RAD

# Nearer than this to the surface normal a ball cuts with too little speed; further off its flutes come near the surface. Both
# common practice.
LEAST_DEG: Final = 10.0
MOST_DEG: Final = 50.0
_TILTS_DEG: Final = np.arange(0.0, 61.0, 1.0)
_AZIMUTHS_DEG: Final = np.arange(0.0, 360.0, 5.0)


@dataclass(frozen=True, slots=True)
class SteadyAxis:
    """A cutter axis that serves a whole operation.

    Attributes
    ----------
    operation : int
    axis : (i, j, k)
        Unit vector in part coordinates, from the tip to the spindle: the operation's ``fixed``.
    from_normal_deg : (nearest, furthest)
        Angle between it and the surface normal over the outline.
    """

    operation: int
    axis: tuple[float, float, float]
    from_normal_deg: tuple[float, float]

    def as_json(self) -> dict[str, Any]:
        """Return plain data."""
        return {
            "operation": self.operation,
            "fixed": list(self.axis),
            "from_normal_deg": list(self.from_normal_deg),
        }

    def line(self) -> str:
        """Return a line to read."""
        i, j, k = (round(value, 3) + 0.0 for value in self.axis)
        near, far = self.from_normal_deg
        return (
            f"positioning         operation {self.operation}: fixed = [{i:g}, {j:g}, {k:g}] keeps the ball"
            f" {near:.0f} to {far:.0f} deg off its tip with the rotary axes standing still"
        )


def steady_axis(kinematics: Kinematics, normals: Floats, operation: int) -> SteadyAxis | None:
    """Find the reachable axis that stays at least 10 degrees off every normal, and of those the one nearest to all of them.

    Parameters
    ----------
    kinematics : Kinematics
    normals : (n, 3)
        Unit surface normals all over the outline, part coordinates.
    operation : int
        Which operation they are for.

    Returns
    -------
    SteadyAxis or None
        None if no axis within 60 degrees of part Z stays between 10 and 50 degrees off all normals.
    """
    tilt, around = (
        angle.ravel()
        for angle in np.meshgrid(np.radians(_TILTS_DEG), np.radians(_AZIMUTHS_DEG), indexing="ij")
    )
    tried = np.column_stack([np.sin(tilt) * np.cos(around), np.sin(tilt) * np.sin(around), np.cos(tilt)])
    reached = kinematics.nearest_axis(tried)
    tried = tried[np.linalg.norm(reached - tried, axis=1) <= REACH_RAD]
    if not len(tried):
        return None
    cosines = np.clip(tried @ normals.T, -1.0, 1.0)
    near, far = np.degrees(np.arccos(cosines.max(axis=1))), np.degrees(np.arccos(cosines.min(axis=1)))
    # Directions that are equal but for round-off: the first, which has the smallest azimuth.
    far_enough = np.where(near >= LEAST_DEG, np.round(far, 6), math.inf)
    best = int(far_enough.argmin())
    if far_enough[best] > MOST_DEG:
        return None
    i, j, k = (float(value) for value in tried[best])
    return SteadyAxis(operation, (i, j, k), (float(near[best]), float(far[best])))
