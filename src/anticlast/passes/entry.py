"""How the cutter comes onto the surface and off it: an arc tangent to the pass, square to the surface.

docs/theory-passes.md#entry.
"""

from __future__ import annotations

import math

import numpy as np

from anticlast.errors import CannotPlan
from anticlast.records import Floats
from anticlast.saddle import Saddle
from anticlast.tolerances import SAME_POINT_MM

# An entry starts this much above the stock that is left on the surface (mm): clear of it by more than any
# cusp or chord.
ABOVE_STOCK_MM = 0.5
# Entries at half the feed: the cutter meets the full stock allowance while it still moves into the part.
# Common practice.
ENTRY_FEED_SHARE = 0.5
# The arc turns at most this far before it goes on straight, so that an entry always moves forward as well as
# down.
_STEEPEST_RAD = math.radians(70.0)
# Nor do its chords meet at more than this: what the axes feel as a corner stays small on small arcs too.
_CORNER_RAD = math.radians(5.0)


def arc_back_and_up(radius_mm: float, height_mm: float, chord_mm: float) -> Floats:
    """Return the way off a pass as (back, up) pairs (m, 2) [mm], from the first row off it to the highest.

    Along a circle of ``radius_mm`` tangent to the pass, back = r sin t, up = r (1 - cos t), to ``height_mm``,
    or to the steepest turn and straight on from there. The circle curves off the part, so its chords lie on
    the far side.

    Parameters
    ----------
    chord_mm : float
        Largest sag of a straight move between neighbouring rows.
    """
    turn = math.acos(max(1.0 - height_mm / radius_mm, math.cos(_STEEPEST_RAD)))
    step = min(2.0 * math.acos(max(1.0 - chord_mm / radius_mm, 0.0)), _CORNER_RAD)
    angle = np.linspace(0.0, turn, max(2, math.ceil(turn / step)) + 1)[1:]
    arc = np.column_stack((radius_mm * np.sin(angle), radius_mm * (1.0 - np.cos(angle))))
    rest = (height_mm - arc[-1, 1]) / math.sin(turn)
    if rest > SAME_POINT_MM:
        arc = np.vstack((arc, arc[-1] + rest * np.array([math.cos(turn), math.sin(turn)])))
    return arc


def way_off(
    saddle: Saddle,
    centre_mm: Floats,
    normal: Floats,
    backward: Floats,
    bend_per_mm: float,
    reach_mm: float,
    height_mm: float,
    chord_mm: float,
) -> Floats:
    """Return where the ball's centre goes when it leaves a pass, nearest to the pass first (m, 3) [mm].

    Never nearer to the saddle than on the pass. The arc's radius is the ball's distance ``reach_mm``, or less
    where the surface bends up so much along the feed that such an arc would meet it.

    Parameters
    ----------
    centre_mm, normal, backward : (3,)
        Centre at the end of the pass, surface normal there, unit tangent pointing away from the pass.
    bend_per_mm : float
        Normal curvature along the feed, concave positive.
    reach_mm : float
        Distance of the centre from the surface on the pass.
    height_mm, chord_mm : float
        How far to rise, and the largest sag between rows.

    Raises
    ------
    CannotPlan
        Check ``"entry clear of the surface"``.
    """
    radius = reach_mm
    if bend_per_mm > 0.0:
        radius = min(radius, 0.5 * (1.0 / bend_per_mm - reach_mm))
    worst = -math.inf
    while radius > SAME_POINT_MM:
        back_up = arc_back_and_up(radius, height_mm, chord_mm)
        path = centre_mm + back_up[:, :1] * backward + back_up[:, 1:] * normal
        worst = float(saddle.closest(path)[1].min())
        if worst >= reach_mm - SAME_POINT_MM:
            return path
        radius *= 0.5
    raise CannotPlan(
        "entry clear of the surface",
        f"no way onto the surface near ({centre_mm[0]:.3f}, {centre_mm[1]:.3f}) keeps the ball off it; "
        "use a smaller cutter",
        reach_mm - worst,
        0.0,
    )
