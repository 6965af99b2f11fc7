"""Ways down into stock for cutters that cannot plunge: along a helix, or to and fro along a line.

The tip falls by the ramp angle: tan(ramp) = fall over length in plan.
"""

from __future__ import annotations

import math

import numpy as np

from anticlast.records import Floats

_CHORDS_A_TURN = 36


def helix(
    centre_mm: tuple[float, float], radius_mm: float, top_mm: float, floor_mm: float, ramp_rad: float
) -> Floats:
    """Return the tip's way (n, 3) down a helix to a floor, counter-clockwise seen from above: climb milling.

    Parameters
    ----------
    centre_mm : (x, y)
    radius_mm : float
        Of the tip's path, > 0.
    top_mm, floor_mm : float
        Z where it starts and ends.
    ramp_rad : float
        Largest angle of the path to the horizontal.
    """
    turn = (top_mm - floor_mm) / (radius_mm * math.tan(ramp_rad))
    # The polygon is shorter than the circle: that much more of a turn keeps its slope below the ramp angle.
    chord = 2.0 * math.pi / _CHORDS_A_TURN
    turn *= 0.5 * chord / math.sin(0.5 * chord)
    angle = np.linspace(0.0, turn, math.ceil(turn / chord) + 1)
    x, y = centre_mm
    return np.column_stack(
        (
            x + radius_mm * np.cos(angle),
            y + radius_mm * np.sin(angle),
            top_mm + (floor_mm - top_mm) * angle / turn,
        )
    )


def circle(centre_mm: tuple[float, float], radius_mm: float, from_rad: float) -> Floats:
    """Return once round a circle (n, 2), counter-clockwise from an angle, the first point repeated."""
    angle = from_rad + np.linspace(0.0, 2.0 * math.pi, _CHORDS_A_TURN + 1)
    return np.array(centre_mm) + radius_mm * np.column_stack((np.cos(angle), np.sin(angle)))


def along(xy: Floats, top_mm: float, floor_mm: float, ramp_rad: float) -> Floats:
    """Return the tip's way (n, 3) down along an open path, to and fro as often as the ramp angle needs.

    It ends on the floor, at whichever point of the path that is; the path is not followed to its end.

    Parameters
    ----------
    xy : (n, 2)
        The path, its length above 0.
    top_mm, floor_mm : float
    ramp_rad : float
    """
    step = np.linalg.norm(np.diff(xy, axis=0), axis=1)
    at = np.concatenate(([0.0], np.cumsum(step)))
    length = float(at[-1])
    needed = (top_mm - floor_mm) / math.tan(ramp_rad)
    laps = math.ceil(needed / length - 1e-9)
    there = np.concatenate(
        [at[:-1] + lap * length if lap % 2 == 0 else (lap + 1) * length - at[:0:-1] for lap in range(laps)]
    )
    there = np.append(there[there < needed], needed)
    place = np.where((there // length) % 2 == 0, there % length, length - there % length)
    # A whole number of laps ends exactly at an end of the path.
    place = np.where(there >= laps * length, length if laps % 2 else 0.0, place)
    z = top_mm - there * math.tan(ramp_rad)
    z[-1] = floor_mm
    return np.column_stack((np.interp(place, at, xy[:, 0]), np.interp(place, at, xy[:, 1]), z))
