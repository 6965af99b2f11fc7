"""Arcs of G2 and G3 in their two forms (NISTIR 6556 section 3.5.3), in the two coordinates of the plane.

The first and second coordinate are X Y under G17, Z X under G18 and Y Z under G19, so that a counterclockwise
arc seen from the positive end of the third axis always turns the first towards the second.
"""

from __future__ import annotations

import math
from typing import Final

from anticlast.readback.language import LanguageError

PLANE_AXES: Final = {17: (0, 1, 2), 18: (2, 0, 1), 19: (1, 2, 0)}
RADIUS_SLACK_MM: Final = 0.002  # 3.5.3.2
RADIUS_SLACK_INCH_MM: Final = 0.0002 * 25.4  # 3.5.3.2

Pair = tuple[float, float]


def sweep_rad(start: Pair, end: Pair, centre: Pair, clockwise: bool) -> float:
    """Return the angle turned from start to end about centre, radians, above 0 and at most one full turn.

    Parameters
    ----------
    start, end, centre : (float, float)
        Plane coordinates, mm. End equal to start is one full turn.
    clockwise : bool
        As seen from the positive end of the plane's normal.
    """
    first = math.atan2(start[1] - centre[1], start[0] - centre[0])
    last = math.atan2(end[1] - centre[1], end[0] - centre[0])
    turned = first - last if clockwise else last - first
    return turned if turned > 0.0 else turned + 2.0 * math.pi


def centre_form(
    code: str, start: Pair, end: Pair, offset: Pair, clockwise: bool, slack_mm: float
) -> tuple[Pair, float]:
    """Return centre and turned angle of an arc whose centre is given from its start (3.5.3.2).

    Parameters
    ----------
    code : str
        ``"G2"`` or ``"G3"``, for messages.
    start, end, offset : (float, float)
        Plane coordinates and the words I J K of the plane, mm.
    clockwise : bool
    slack_mm : float
        How far the radii at start and end may differ.

    Returns
    -------
    (centre, turned) : ((float, float), float)
        mm and radians.

    Raises
    ------
    LanguageError
        The radius is zero, or differs at start and end.
    """
    centre = (start[0] + offset[0], start[1] + offset[1])
    at_start = math.hypot(*offset)
    at_end = math.hypot(end[0] - centre[0], end[1] - centre[1])
    if at_start == 0.0:
        raise LanguageError(code, "the centre is the start point, so there is no radius", "3.5.3.2")
    if abs(at_start - at_end) > slack_mm:
        raise LanguageError(
            code,
            f"the radius is {at_start:.5g} mm at the start and {at_end:.5g} mm at the end;"
            f" they may differ by {slack_mm:.4g} mm",
            "3.5.3.2",
        )
    return centre, sweep_rad(start, end, centre, clockwise)


def radius_form(
    code: str, start: Pair, end: Pair, radius_mm: float, clockwise: bool, slack_mm: float
) -> tuple[Pair, float]:
    """Return centre and turned angle of an arc given by its radius (3.5.3.1).

    Parameters
    ----------
    code : str
        ``"G2"`` or ``"G3"``, for messages.
    start, end : (float, float)
        Plane coordinates, mm.
    radius_mm : float
        Positive: at most half a turn; negative: more.
    clockwise : bool
    slack_mm : float
        By how much half the chord may be longer than the radius; a half circle over the chord is then meant.

    Returns
    -------
    (centre, turned) : ((float, float), float)
        mm and radians.

    Raises
    ------
    LanguageError
        End equals start, the radius is zero, or it is shorter than half the chord.
    """
    if start == end:
        raise LanguageError(code, "the R form needs an end other than the start", "3.5.3.1")
    radius = abs(radius_mm)
    across = (end[0] - start[0], end[1] - start[1])
    half = math.hypot(*across) / 2.0
    if radius == 0.0 or half > radius + slack_mm:
        raise LanguageError(
            code, f"R {radius:.6g} mm is shorter than half the way to the end, {half:.6g} mm", "3.5.3.1"
        )
    aside = math.sqrt(max(radius * radius - half * half, 0.0))
    # Up to half a turn counterclockwise keeps the centre on the left of the way from start to end.
    side = 1.0 if (radius_mm > 0.0) != clockwise else -1.0
    centre = (
        (start[0] + end[0]) / 2.0 - side * aside * across[1] / (2.0 * half),
        (start[1] + end[1]) / 2.0 + side * aside * across[0] / (2.0 * half),
    )
    short = 2.0 * math.asin(min(half / radius, 1.0))
    return centre, short if radius_mm > 0.0 else 2.0 * math.pi - short
