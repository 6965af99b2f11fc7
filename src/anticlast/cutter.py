"""The cutter with its shank and holder, as a solid of revolution about its axis.

Heights are measured along the cutter axis from the tip (height 0) towards the spindle, in mm.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

Shape = Literal["ball", "bull", "flat"]


@dataclass(frozen=True, slots=True)
class Cylinder:
    """A right cylinder about the cutter axis, part of shank or holder.

    Attributes
    ----------
    name : str
        ``"flutes"``, ``"shank"`` or ``"holder 1"``, ``"holder 2"``, ... counted from the holder face.
    radius_mm, low_mm, high_mm : float
        Radius, and the heights above the tip between which it reaches.
    """

    name: str
    radius_mm: float
    low_mm: float
    high_mm: float


@dataclass(frozen=True, slots=True)
class Cutter:
    """An end mill in its holder.

    Attributes
    ----------
    number : int
        Carousel slot, and the H number of its length offset.
    shape : {"ball", "bull", "flat"}
    radius_mm : float
        Cutting radius.
    corner_radius_mm : float
        Radius of the generating corner arc: the ball's radius, the bull's corner radius, 0 for a flat end mill.
    flutes : int
    flute_length_mm : float
        Height above the tip up to which the cutter can cut.
    shank_radius_mm : float
    stickout_mm : float
        Tip to holder face.
    holder : tuple of (radius_mm, length_mm)
        Steps of the holder from its face upwards.
    plunge : bool or None
        Cuts to its centre, so that it can go down into stock where there is little room; None: a ball does, bull and flat do not.
    ramp_angle_rad : float
        Steepest way down into stock on a ramp or helix, > 0.
    max_force_n, max_deflection_mm : float or None
        Limits of the job: peak cutting force, and how far the tip may bend aside under it.
    """

    number: int
    shape: Shape
    radius_mm: float
    corner_radius_mm: float
    flutes: int
    flute_length_mm: float
    shank_radius_mm: float
    stickout_mm: float
    holder: tuple[tuple[float, float], ...] = ()
    plunge: bool | None = None
    ramp_angle_rad: float = math.radians(3.0)
    max_force_n: float | None = None
    max_deflection_mm: float | None = None

    @property
    def gauge_length_mm(self) -> float:
        """Tip to spindle gauge point: stickout plus all holder steps."""
        return self.stickout_mm + sum(length for _, length in self.holder)

    @property
    def can_plunge(self) -> bool:
        """Whether it cuts to its centre."""
        return self.shape == "ball" if self.plunge is None else self.plunge

    @property
    def reference_height_mm(self) -> float:
        """Height above the tip of the point whose path decides the cut: the centre of the corner arc."""
        return self.corner_radius_mm

    def bodies(self) -> tuple[Cylinder, ...]:
        """Cylinders above the cutting end, in order from the tip: flutes, shank, holder steps."""
        found = [Cylinder("flutes", self.radius_mm, self.corner_radius_mm, self.flute_length_mm)]
        found.append(Cylinder("shank", self.shank_radius_mm, self.flute_length_mm, self.stickout_mm))
        low = self.stickout_mm
        for step, (radius, length) in enumerate(self.holder, start=1):
            found.append(Cylinder(f"holder {step}", radius, low, low + length))
            low += length
        return tuple(body for body in found if body.high_mm > body.low_mm)

    def effective_diameter_mm(self, depth_mm: float, tilt_rad: float = 0.0) -> float:
        """Largest diameter that cuts, for a ball end at a depth of cut and a tilt from the surface normal.

        D_e = D sin(tilt + acos(1 - 2 ap/D)), the full diameter once that angle passes 90 degrees; methods section 7.1,
        which for zero tilt is the makers' handbook form 2 sqrt(ap (D - ap)). Bull and flat cutters cut on their full
        diameter.

        Parameters
        ----------
        depth_mm : float
            Depth of cut normal to the surface, >= 0.
        tilt_rad : float
            Angle between cutter axis and surface normal, >= 0.
        """
        if self.shape != "ball":
            return 2.0 * self.radius_mm
        diameter = 2.0 * self.radius_mm
        angle = tilt_rad + math.acos(max(-1.0, 1.0 - 2.0 * min(depth_mm, diameter) / diameter))
        return diameter * math.sin(min(angle, math.pi / 2))
