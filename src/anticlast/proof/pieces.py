"""The straight pieces of read-back motion, as the virtual cut's kernels take them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    from anticlast.cutter import Cutter
    from anticlast.records import Bools, Floats, PartMotion
    from anticlast.saddle import Saddle


@dataclass(frozen=True, slots=True)
class Pieces:
    """Pieces of motion in the saddle's own frame; piece k leads to row k of the part motion.

    Attributes
    ----------
    c0, c1 : (m, 3) [mm]
        Reference point (tip + reference height along the axis) at the start and end of the piece.
    a0, a1 : (m, 3)
        Unit cutter axis, likewise.
    size : (m, 4) [mm]
        Radius of the corner circle (0 for a ball), corner radius, largest sine between the cutter axis and surface
        normals below the cutter, height of the straight flutes above the reference point.
    active : (m,) bool
        Pieces made with a cutter the job knows. Row 0 is no piece.
    """

    c0: Floats
    c1: Floats
    a0: Floats
    a1: Floats
    size: Floats
    active: Bools


def _own_frame(saddle: Saddle, vectors: Floats) -> Floats:
    x, y = saddle.local(vectors[:, 0], vectors[:, 1])
    return np.ascontiguousarray(np.column_stack((x, y, vectors[:, 2])))


def take_pieces(
    motion: PartMotion, cutters: Sequence[Cutter], saddle: Saddle, moving: Bools | None = None
) -> Pieces:
    """Turn part motion into the kernels' arrays.

    Parameters
    ----------
    motion : PartMotion
        Part coordinates.
    cutters : sequence of Cutter
        Pieces made with any other tool stay inactive.
    saddle : Saddle
    moving : (m,) bool, optional
        Rows to use; all that move if not given.
    """
    count = len(motion.tip_mm)
    height = np.zeros(count)
    size = np.zeros((count, 4))
    active = np.zeros(count, bool)
    for cutter in cutters:
        rows = motion.tool == cutter.number
        active |= rows
        height[rows] = cutter.reference_height_mm
        disc = 0.0 if cutter.shape == "ball" else cutter.radius_mm - cutter.corner_radius_mm
        flutes = max(0.0, cutter.flute_length_mm - cutter.corner_radius_mm)
        size[rows] = disc, cutter.corner_radius_mm, 0.0, flutes
    # Rows of fraction 0 put the tip elsewhere without motion.
    active &= motion.fraction > 0.0
    active[:1] = False
    if moving is not None:
        active &= moving
    tip, axis = _own_frame(saddle, motion.tip_mm), _own_frame(saddle, motion.axis)
    before = np.maximum(np.arange(count) - 1, 0)
    c0, c1 = tip[before] + height[:, None] * axis[before], tip + height[:, None] * axis
    size[:, 2] = np.maximum(
        _sines(saddle, c0, axis[before], size), _sines(saddle, c1, axis, size)
    )  # fmt: skip
    return Pieces(
        c0=c0,
        c1=c1,
        a0=axis[before].copy(),
        a1=axis,
        size=size,
        active=active,
    )


def _sines(saddle: Saddle, centre: Floats, axis: Floats, size: Floats) -> Floats:
    """Return a bound on the sine between cutter axes and the surface normals within two cutter radii, (n,)."""
    gx, gy = 2.0 * saddle.a_per_mm * centre[:, 0], -2.0 * saddle.b_per_mm * centre[:, 1]
    normal = np.column_stack((-gx, -gy, np.ones(len(gx)))) / np.sqrt(1.0 + gx * gx + gy * gy)[:, None]
    sine = np.linalg.norm(np.cross(axis, normal), axis=1)
    # Normals turn by at most the largest curvature times the way.
    sine += 4.0 * max(saddle.a_per_mm, saddle.b_per_mm) * (size[:, 0] + size[:, 1])
    return np.where(np.einsum("ni,ni->n", axis, normal) > 0.0, np.minimum(sine, 1.0), 1.0)


def sub_points(c0: Floats, c1: Floats, step_mm: float) -> tuple[npt.NDArray[np.int64], Floats, Floats]:
    """Return points no further than a step apart along each of a few segments, ends included.

    Parameters
    ----------
    c0, c1 : (m, 3) [mm]
    step_mm : float

    Returns
    -------
    segment : (n,) int64
        Row of the segment each point lies on, ascending.
    share : (n,)
        How far along it, 0 to 1.
    points : (n, 3) [mm]
    """
    steps = np.maximum(1, np.ceil(np.linalg.norm(c1 - c0, axis=1) / step_mm).astype(np.int64))
    segment = np.repeat(np.arange(len(c0)), steps + 1)
    first = np.cumsum(steps + 1) - (steps + 1)
    share = (np.arange(len(segment)) - first[segment]) / steps[segment]
    return segment, share, c0[segment] + share[:, None] * (c1 - c0)[segment]
