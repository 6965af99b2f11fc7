"""What the cut does to cutter and spindle, and what is too much: forces, power, bending, and findings that say what to change."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Final

import numpy as np

from anticlast import materials

if TYPE_CHECKING:
    from anticlast.cutter import Cutter
    from anticlast.records import Floats, Job
    from anticlast.stock.engagement import Engagement

# Young's modulus of cemented carbide, N/mm^2, and the diameter of a fluted cutter that bends like a plain rod, as a share of its
# own: both from memory, common practice; check with your supplier.
CARBIDE_N_MM2: Final = 600e3
FLUTED_SHARE: Final = 0.8
# Bending stress at the root of the flutes that a carbide cutter should not see, N/mm^2: about a third of the rupture strength
# of fine-grained carbide, for it breaks without warning and the load comes in blows. From memory; check with your supplier.
CARBIDE_STRESS_N_MM2: Final = 1000.0
# Radial over tangential force, smallest and largest of the carbide rows in: Milling Force Model for Aviation Aluminum Alloy,
# Chin. J. Mech. Eng. 2021, doi 10.1186/s10033-021-00536-9, Table 5 (99 / 631 and 788.83 / 1319.41).
RADIAL_SHARE: Final = (0.157, 0.598)


def laws_of(job: Job) -> Floats:
    """Return the laws of the specific cutting force for the job's material, (m, 4): kc11, mc, ktc, kte; m = 0 if none is known.

    The job's own ``specific_force`` stands instead of the materials table.
    """
    own = job.stock.specific_force_n_mm2
    if own is not None:
        return np.array([[0.0, 0.0, value, 0.0] for value in own])
    forces = materials.material(job.stock.material).forces
    return np.array(
        [[f.kc11_n_mm2, f.mc, f.ktc_n_mm2, f.kte_n_mm] for f in forces], dtype=np.float64
    ).reshape(-1, 4)


def bending_mm_per_n(cutter: Cutter) -> float:
    """Return how far the tip bends aside under 1 N across it, as a cantilever from the holder face.

    F / (3 E) [l^3 / I_f + (L^3 - l^3) / I_s], with l the flutes' length (at 0.8 of their diameter), L the stickout and
    I = pi d^4 / 64: the bending moment of a stepped rod, integrated (derived in docs/theory-stock.md).
    """
    fluted, whole = cutter.flute_length_mm, cutter.stickout_mm
    stiff = [
        math.pi * (2.0 * radius) ** 4 / 64.0
        for radius in (FLUTED_SHARE * cutter.radius_mm, cutter.shank_radius_mm)
    ]
    return (fluted**3 / stiff[0] + (whole**3 - fluted**3) / stiff[1]) / (3.0 * CARBIDE_N_MM2)


def breaking_force_n(cutter: Cutter) -> float:
    """Return the force across the tip that bends the root of the flutes, or the shank at the holder, to the stress allowed."""
    rods = (
        (FLUTED_SHARE * cutter.radius_mm, cutter.flute_length_mm),
        (cutter.shank_radius_mm, cutter.stickout_mm),
    )
    return min(CARBIDE_STRESS_N_MM2 * math.pi * (2.0 * radius) ** 3 / (32.0 * arm) for radius, arm in rods)


@dataclass(frozen=True, slots=True)
class Loads:
    """Load of each segment of motion; low and high by the material's range. nan where no force is known.

    Attributes
    ----------
    force_n : (k, 2)
        Peak force across the cutter: tangential and radial together.
    deflection_mm : (k, 2)
        How far the tip bends aside under it.
    mark_mm : (k, 2)
        The part of that square to the surface: how much deeper or shallower it may leave the surface there.
    """

    force_n: Floats
    deflection_mm: Floats
    mark_mm: Floats


def loads_of(
    found: Engagement, cutters: tuple[Cutter, ...], shape: np.ndarray, tilt_rad: Floats, known: bool
) -> Loads:
    """Work out forces across the cutter and bending from the tangential peak force.

    Parameters
    ----------
    found : Engagement
    cutters : tuple of Cutter
    shape : (k,) int64
        Position of each segment's cutter.
    tilt_rad : (k,)
        Angle between cutter axis and the normal of the surface that is left; pi / 2 where a wall is left.
    known : bool
        False if the material's forces are not known: everything becomes nan.
    """
    share = np.sqrt(1.0 + np.square(RADIAL_SHARE))
    force = found.force_peak_n * share if known else np.full(found.force_peak_n.shape, np.nan)
    bend = np.array([bending_mm_per_n(cutter) for cutter in cutters])[shape]
    deflection = force * bend[:, None]
    return Loads(force, deflection, deflection * np.abs(np.sin(tilt_rad))[:, None])
