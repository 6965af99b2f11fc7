"""Holding tabs: where along a contour material is left between the part and the rest of the blank."""

from __future__ import annotations

import numpy as np
import shapely
from shapely.geometry.base import BaseGeometry

from anticlast.passes.loop import Loop

# Places that the first tab is tried at, within the distance from tab to tab.
_PHASES = 36
# At most this share of a contour is left standing by its tabs.
_MOST_SHARE = 0.5
# How far beyond the groove material has to stand for a tab to hold on to (mm).
_FRAME_MM = 0.5


def lay_tabs(
    loop: Loop, count: int, half_mm: float, groove_mm: float, blank: BaseGeometry
) -> list[tuple[float, float]]:
    """Return where along a contour (start, end) [mm] the cutter's centre has to stay up, in order.

    Evenly spread, turned to where the contour is straightest; a tab with nothing to hold on to is left out.

    Parameters
    ----------
    loop : Loop
        Path of the cutter's centre, the part to its right.
    count : int
    half_mm : float
        Half the length along the path on which it stays up.
    groove_mm : float
        Width of the groove, from the part to its far side.
    blank : polygons
        Plan of the blank.
    """
    length = loop.length_mm
    count = min(count, int(_MOST_SHARE * length / (2.0 * half_mm)))
    if count < 1:
        return []
    pitch = length / count
    starts = np.arange(count) * pitch
    shifts = np.arange(_PHASES) * pitch / _PHASES
    turning = [
        sum(loop.bend_rad(s + shift - half_mm, s + shift + half_mm) for s in starts) for shift in shifts
    ]
    held = [_held(loop, starts + shift, groove_mm, blank) for shift in shifts]
    best = min(range(_PHASES), key=lambda i: (-int(held[i].sum()), round(turning[i], 6), i))
    middle = (starts + shifts[best])[held[best]]
    return [(float(at - half_mm), float(at + half_mm)) for at in middle]


def _held(loop: Loop, place_mm: np.ndarray, groove_mm: float, blank: BaseGeometry) -> np.ndarray:
    """Tell which places have material of the blank beyond the groove, to the left of the path."""
    tangent = loop.tangents(place_mm)
    left = np.column_stack((-tangent[:, 1], tangent[:, 0]))
    beyond = loop.points(place_mm) + (0.5 * groove_mm + _FRAME_MM) * left
    return np.asarray(shapely.intersects_xy(blank, beyond[:, 0], beyond[:, 1]))
