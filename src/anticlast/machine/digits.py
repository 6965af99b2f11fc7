"""The digits of one program: where words are rounded and where they are written, the same rule.

The machine stage measures how far straight joint moves stray with words rounded as they will be posted, so the poster
must not have a rule of its own.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from anticlast.records import Floats, Job

MM_PER_INCH = 25.4


@dataclass(frozen=True, slots=True)
class Digits:
    """What the posted digits of one program can tell apart.

    Attributes
    ----------
    length_decimals, angle_decimals : int
        Digits after the point, lengths in the job's units, angles in degrees.
    unit_mm : float
        One length unit of the program: 1 or 25.4.
    """

    length_decimals: int
    angle_decimals: int
    unit_mm: float

    @classmethod
    def of(cls, job: Job) -> Digits:
        """Digits of the program for a job.

        A length in inch carries one digit more than one in mm, so that both round alike: 1e-4 mm against 1e-5 in = 2.5e-4 mm.
        """
        control = job.machine.control
        shift = {("mm", "inch"): 1, ("inch", "mm"): -1}.get((job.machine.units, job.units), 0)
        unit = MM_PER_INCH if job.units == "inch" else 1.0
        return cls(max(control.length_decimals + shift, 1), control.angle_decimals, unit)

    @property
    def length_step_mm(self) -> float:
        """Last digit of a length, mm."""
        return self.unit_mm * 10.0**-self.length_decimals

    @property
    def angle_step_deg(self) -> float:
        """Last digit of an angle, degrees."""
        return 10.0**-self.angle_decimals

    def round_length(self, values: Floats) -> Floats:
        """Lengths [mm] rounded to the posted digits."""
        if self.unit_mm == 1.0:
            return np.round(values, self.length_decimals) + 0.0
        return np.round(values / self.unit_mm, self.length_decimals) * self.unit_mm + 0.0

    def round_angle(self, values_deg: Floats) -> Floats:
        """Angles [degrees] rounded to the posted digits."""
        return np.round(values_deg, self.angle_decimals) + 0.0

    def round_words(self, words: Floats) -> Floats:
        """Words (n, k), X Y Z first, rounded to the posted digits."""
        return np.column_stack([self.round_length(words[:, :3]), self.round_angle(words[:, 3:])])
