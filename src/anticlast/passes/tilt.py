"""The cutter axis that lead and lean ask for, and the tip that belongs to a contact.

Part coordinates. At a contact, ``normal`` n points up out of the part, ``tangent`` t along the feed, and the
side vector b = n x t to the left of the feed as seen from above. All three are unit vectors, square to each
other.
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from anticlast.cutter import Cutter
from anticlast.records import Floats
from anticlast.tolerances import SAME_DIRECTION_RAD


def wished_axis(normal: Floats, tangent: Floats, lead_rad: npt.ArrayLike, lean_rad: npt.ArrayLike) -> Floats:
    """Return the cutter axis leaned from the normal by lead toward the feed and by lean to its left.

    axis = (n + tan(lead) t + tan(lean) b) / |...|, b = n x t. Seen from the side (along b) the axis stands at
    ``lead`` to the normal, seen along the feed (along t) at ``lean``. Two turns one after the other would
    depend on their order; this form does not, gives each angle alone exactly, and keeps 1/cos^2 of the whole
    tilt = 1 + tan^2(lead) + tan^2(lean). Derivation: docs/theory-passes.md#tilt.

    Parameters
    ----------
    normal, tangent : (n, 3)
        Unit surface normal and unit feed tangent, square to each other.
    lead_rad, lean_rad : float or (n,)
        Radians, each within (-pi/2, pi/2). Lead is positive toward the feed, lean positive to its left.

    Returns
    -------
    (n, 3)
        Unit axis, from the tip to the spindle.

    Raises
    ------
    ValueError
        If an angle reaches a quarter turn: the axis would lie in the surface.
    """
    lead, lean = np.asarray(lead_rad, dtype=np.float64), np.asarray(lean_rad, dtype=np.float64)
    if np.any(np.abs(lead) >= math.pi / 2) or np.any(np.abs(lean) >= math.pi / 2):
        raise ValueError("lead and lean must stay below 90 degrees either way")
    left = np.cross(normal, tangent)
    axis = normal + np.tan(lead)[..., None] * tangent + np.tan(lean)[..., None] * left
    return axis / np.linalg.norm(axis, axis=1, keepdims=True)


def lead_and_lean(axis: Floats, normal: Floats, tangent: Floats) -> tuple[Floats, Floats]:
    """Return the lead and lean [rad] (n,) at which an axis stands: the reverse of `wished_axis`.

    Parameters
    ----------
    axis, normal, tangent : (n, 3)
        Unit vectors; the axis less than 90 degrees from the normal.
    """
    left = np.cross(normal, tangent)
    up = np.einsum("ni,ni->n", axis, normal)
    return (
        np.arctan2(np.einsum("ni,ni->n", axis, tangent), up),
        np.arctan2(np.einsum("ni,ni->n", axis, left), up),
    )


def turned_between(start: Floats, end: Floats, fraction: npt.ArrayLike) -> Floats:
    """Return the axis part-way on the even turn from ``start`` to ``end`` in their common plane.

    Spherical interpolation: sin((1-f) w) start + sin(f w) end over sin w, w the angle between them (K.
    Shoemake, Animating rotation with quaternion curves, SIGGRAPH 1985, from memory).

    Parameters
    ----------
    start, end : (n, 3)
        Unit vectors, not opposite.
    fraction : (n,)
        0 at start, 1 at end.
    """
    f = np.asarray(fraction, dtype=np.float64)
    angle = angle_between(start, end)
    sine = np.sin(angle)
    straight = angle < SAME_DIRECTION_RAD
    safe = np.where(straight, 1.0, sine)
    first = np.where(straight, 1.0 - f, np.sin((1.0 - f) * angle) / safe)
    last = np.where(straight, f, np.sin(f * angle) / safe)
    axis = first[:, None] * start + last[:, None] * end
    return axis / np.linalg.norm(axis, axis=1, keepdims=True)


def angle_between(first: Floats, second: Floats) -> Floats:
    """Return the angle [rad] (n,) between unit vectors (n, 3), exact also where it is small."""
    return 2.0 * np.arctan2(
        np.linalg.norm(first - second, axis=1),
        np.linalg.norm(first + second, axis=1),
    )


def reference_from_contact(
    contact_mm: Floats, normal: Floats, axis: Floats, cutter: Cutter, allowance_mm: float
) -> Floats:
    """Return the reference point (n, 3) [mm]: on the axis, at the height of the corner arc's centre.

    The corner arc's centre circle has radius D/2 - r about the reference point, square to the axis. The
    cutter touches the surface moved out by the allowance where the corner arc's normal is the surface normal:
    the circle's point lies at contact + (allowance + r) n, on the side of the axis that faces the surface, so
    the reference point lies from there by D/2 - r along the part of n that is square to the axis. A ball (D/2
    = r) has it at contact + (allowance + R) n whatever the axis. A flat or bull end mill standing along n
    touches with its whole bottom: its centre is put over the contact. docs/theory-passes.md#tip.
    """
    point = contact_mm + (cutter.corner_radius_mm + allowance_mm) * normal
    out_mm = cutter.radius_mm - cutter.corner_radius_mm
    if out_mm <= 0.0:
        return point
    up = np.einsum("ni,ni->n", axis, normal)
    side = normal - up[:, None] * axis
    size = np.linalg.norm(side, axis=1, keepdims=True)
    flat = size < SAME_DIRECTION_RAD
    return point + out_mm * np.where(flat, 0.0, side / np.where(flat, 1.0, size))


def tip_from_contact(
    contact_mm: Floats, normal: Floats, axis: Floats, cutter: Cutter, allowance_mm: float = 0.0
) -> Floats:
    """Return the cutter tip (n, 3) [mm] that touches the surface, moved out by the allowance, at the contact.

    Parameters
    ----------
    contact_mm : (n, 3)
        Points on the finished surface, part coordinates.
    normal, axis : (n, 3)
        Unit surface normal there (up), and unit cutter axis from tip to spindle, less than 90 degrees from
        it.
    cutter : Cutter
        Ball, bull or flat.
    allowance_mm : float
        Stock left on the surface, along the normal.
    """
    reference = reference_from_contact(contact_mm, normal, axis, cutter, allowance_mm)
    return reference - cutter.reference_height_mm * axis
