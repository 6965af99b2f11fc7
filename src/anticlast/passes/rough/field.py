"""The lowest tip height at which an upright cutter keeps off the surface: exact, from closed forms and Newton.

docs/theory-roughing.md, "Where the cutter may stand".
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from anticlast.cutter import Cutter
from anticlast.records import Floats
from anticlast.saddle import Saddle

# Directions from the cutter's axis that are asked before the best one is settled. The height over the direction has
# two hills at most, each about a third of a turn wide.
_DIRECTIONS = 40
_NEWTON = 6
# Steps of the settling: a parabola through three directions, each time a tenth as far apart.
_SETTLING = 3
_CHUNK = 20_000


@dataclass(frozen=True, slots=True)
class TipField:
    """Lowest tip heights of a bull-shaped body over a saddle: a disc of ``rim_mm`` rolled round by ``corner_mm``.

    Attributes
    ----------
    saddle : Saddle
    rim_mm, corner_mm : float
        Radius of the flat bottom and of the corner arc; a ball has no flat, a flat end mill no corner.
    lift_mm : float
        Added to every height.
    """

    saddle: Saddle
    rim_mm: float
    corner_mm: float
    lift_mm: float = 0.0

    @classmethod
    def of_cutter(cls, saddle: Saddle, cutter: Cutter, allowance_mm: float) -> TipField:
        """Return the field of a cutter that keeps an allowance to the surface.

        Its distance from the surface is at least the allowance m where the same cutter grown by m all round does
        not enter the surface: corner r + m, tip lower by m.
        """
        rim = cutter.radius_mm - cutter.corner_radius_mm
        return cls(saddle, rim, cutter.corner_radius_mm + allowance_mm, allowance_mm)

    def height(self, xy: Floats) -> Floats:
        """Return the lowest tip heights (n,) [mm] over axis positions xy (n, 2), part coordinates."""
        return self._settled(xy)[0]

    def height_and_slope(self, xy: Floats) -> tuple[Floats, Floats]:
        """Return lowest tip heights (n,) and their gradient (n, 2) over the plan.

        The height is a maximum over contacts, so its gradient is that of the surface under the contact (envelope
        theorem).
        """
        height, contact = self._settled(xy)
        return height, np.column_stack(self.saddle.gradient(contact[:, 0], contact[:, 1]))

    def _settled(self, xy: Floats) -> tuple[Floats, Floats]:
        parts = [self._settled_part(xy[i : i + _CHUNK]) for i in range(0, max(len(xy), 1), _CHUNK)]
        return np.concatenate([p[0] for p in parts]), np.concatenate([p[1] for p in parts])

    def _settled_part(self, xy: Floats) -> tuple[Floats, Floats]:
        p, q = self.saddle.local(xy[:, 0], xy[:, 1])
        turn = np.linspace(0.0, 2.0 * math.pi, _DIRECTIONS, endpoint=False)
        height, _ = self._in_direction(p[:, None], q[:, None], turn[None, :])
        best = turn[np.argmax(height, axis=1)]
        step = 2.0 * math.pi / _DIRECTIONS
        top = height.max(axis=1)
        for _ in range(_SETTLING):
            sides = best[:, None] + step * np.array([-1.0, 0.0, 1.0])
            low, middle, high = self._in_direction(p[:, None], q[:, None], sides)[0].T
            bend = low - 2.0 * middle + high
            shift = np.divide(0.5 * (low - high), bend, out=np.zeros_like(bend), where=bend < 0.0)
            best = best + step * np.clip(shift, -1.0, 1.0)
            step *= 0.1
        settled, reach = self._in_direction(p, q, best)
        contact = np.column_stack(self.saddle.plan(p + reach * np.cos(best), q + reach * np.sin(best)))
        return np.maximum(settled, top) + self.lift_mm, contact

    def _in_direction(self, p: Floats, q: Floats, turn: Floats) -> tuple[Floats, Floats]:
        """Return the height that a contact in a direction asks for, and how far off the axis that contact is.

        In the direction the surface is s0 + s1 t + k t^2. The corner arc at angle psi from its bottom is at
        t = e + r sin psi, r (1 - cos psi) above the tip. It touches where tan psi = s1 + 2 k t; of the roots the
        largest is the highest contact, and Newton from above comes down on it, for tan psi - 2 k r sin psi is convex.
        """
        a, b, e, r = self.saddle.a_per_mm, self.saddle.b_per_mm, self.rim_mm, self.corner_mm
        c, s = np.cos(turn), np.sin(turn)
        s0 = a * p * p - b * q * q
        s1 = 2.0 * (a * p * c - b * q * s)
        k = a * c * c - b * s * s
        bottom = s0 + (s1 + k * e) * e
        if r <= 0.0:
            return bottom, np.broadcast_to(np.float64(e), bottom.shape)
        psi = np.arctan(np.maximum(s1 + 2.0 * k * e + np.maximum(2.0 * k * r, 0.0), 0.0))
        for _ in range(_NEWTON):
            sine, cosine = np.sin(psi), np.cos(psi)
            off = sine / cosine - s1 - 2.0 * k * (e + r * sine)
            rate = 1.0 / (cosine * cosine) - 2.0 * k * r * cosine
            psi = np.clip(psi - np.where(rate > 1e-3, off / np.where(rate > 1e-3, rate, 1.0), 0.0), 0.0, 1.55)
        reach = e + r * np.sin(psi)
        touched = s0 + (s1 + k * reach) * reach - r * (1.0 - np.cos(psi))
        return np.maximum(touched, bottom), np.where(touched >= bottom, reach, e)
