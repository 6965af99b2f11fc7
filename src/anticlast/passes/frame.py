"""The saddle seen along straight plan-view passes: (u, v) coordinates, leading order, the ball's centre path.

u runs along the feed, v to its left: u = x cos d + y sin d, v = -x sin d + y cos d. z is a quadratic form in
(u, v) as it is in (x, y), so everything here is closed form. Curvature is positive where the surface is
concave seen from above. Derivations: docs/theory-passes.md.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from anticlast.errors import NotConverged
from anticlast.passes.cusp import plan_of, turned_form
from anticlast.records import Floats
from anticlast.saddle import Saddle
from anticlast.tolerances import SAME_POINT_MM

_ROUNDS = 40


@dataclass(frozen=True, slots=True)
class PassFrame:
    """A ball on the saddle, fed along plan direction ``direction_rad``.

    Attributes
    ----------
    saddle : Saddle
    direction_rad : float
        Of +u, from part X, counter-clockwise seen from above.
    radius_mm, allowance_mm : float
        Ball radius, and stock left along the normal. The ball's centre runs at ``reach_mm``, their sum, over
        the surface.
    """

    saddle: Saddle
    direction_rad: float
    radius_mm: float
    allowance_mm: float = 0.0

    @property
    def reach_mm(self) -> float:
        """Distance of the ball's centre from the finished surface."""
        return self.radius_mm + self.allowance_mm

    def xy(self, u_mm: Floats, v_mm: Floats) -> Floats:
        """Return part (x, y) (n, 2) of plan points (u, v) (n,), all mm."""
        return plan_of(u_mm, v_mm, self.direction_rad)

    def uv(self, xy_mm: Floats) -> tuple[Floats, Floats]:
        """Return (u, v) (n,) of part (x, y) (n, 2), all mm."""
        c, s = math.cos(self.direction_rad), math.sin(self.direction_rad)
        return xy_mm[:, 0] * c + xy_mm[:, 1] * s, xy_mm[:, 1] * c - xy_mm[:, 0] * s

    def hessian_uv(self) -> tuple[float, float, float]:
        """Return z_uu, z_uv, z_vv [1/mm], the same everywhere."""
        uu, uv, vv = turned_form(self.saddle, self.direction_rad).tolist()
        return uu, uv, vv

    # -------------------------------------------------------------------------------------- leading order

    def cusp_form(self, u_mm: Floats, v_mm: Floats) -> tuple[Floats, Floats, Floats]:
        """Return 8h times the cusp metric: q_uu, q_uv, q_vv (n,) [1/mm]; a step d leaves h = q(d, d) / 8.

        On the finished surface q = I/R - II (T. Kim 2007, Constant cusp height tool paths as geodesic
        parallels, CAD 39:477-489, from memory). On the surface moved out by the allowance m, with I, II and S
        = II/I of the finished one, q = I (1 - m S) (1 - (R + m) S) / R = (I - (R + 2m) II + m (R + m) II I^-1
        II) / R.
        """
        uu, uv, vv = self.hessian_uv()
        zu, zv = uu * u_mm + uv * v_mm, uv * u_mm + vv * v_mm
        w2 = 1.0 + zu * zu + zv * zv
        w = np.sqrt(w2)
        g_uu, g_uv, g_vv = 1.0 + zu * zu, zu * zv, 1.0 + zv * zv
        first = (self.radius_mm + 2.0 * self.allowance_mm) / w
        second = self.allowance_mm * self.reach_mm / (w2 * w2)
        # II I^-1 II W^4, with I^-1 = (g_vv, -g_uv, g_uu) / W^2.
        t_uu = uu * uu * g_vv - 2.0 * uu * uv * g_uv + uv * uv * g_uu
        t_uv = uu * uv * g_vv - (uu * vv + uv * uv) * g_uv + uv * vv * g_uu
        t_vv = uv * uv * g_vv - 2.0 * uv * vv * g_uv + vv * vv * g_uu
        r = self.radius_mm
        return (
            (g_uu - first * uu + second * t_uu) / r,
            (g_uv - first * uv + second * t_uv) / r,
            (g_vv - first * vv + second * t_vv) / r,
        )

    def crowding(self, u_mm: Floats, v_mm: Floats) -> Floats:
        """Return q_vv - q_uv^2 / q_uu (n,) [1/mm]: passes a plan step p apart leave h = p^2 / 8 of it.

        The same as s^2 = 8h / [1/R - k_b - tau^2 / (1/R - k_t)] with p = s sqrt(1 + z_u^2) / W.
        """
        q_uu, q_uv, q_vv = self.cusp_form(u_mm, v_mm)
        return q_vv - q_uv * q_uv / q_uu

    def shear(self, u_mm: Floats, v_mm: Floats) -> Floats:
        """Return -q_uv / q_uu (n,) [1]: how far along the pass, per v, the ball that cuts deepest is."""
        q_uu, q_uv, _ = self.cusp_form(u_mm, v_mm)
        return -q_uv / q_uu

    # -------------------------------------------------------------------------------------- exact

    def centre(self, u_mm: Floats, v_mm: Floats, du: Floats, dv: Floats) -> tuple[Floats, Floats, Floats]:
        """Return the ball's centre (n, 3) and its first two derivatives along (du, dv), all in (u, v, z).

        C = r + (R + m) n, n = N/W, N = (-z_u, -z_v, 1). Along a straight plan line N' is constant, so
        n'' = -2 N' p/W^3 - N (q/W^3 - 3 p^2/W^5), p = N . N', q = N' . N'.
        """
        uu, uv, vv = self.hessian_uv()
        u, v, du, dv = np.broadcast_arrays(u_mm, v_mm, du, dv)
        zero = np.zeros_like(u)
        zu, zv = uu * u + uv * v, uv * u + vv * v
        normal = np.stack((-zu, -zv, zero + 1.0), axis=-1)
        turn = np.stack((-(uu * du + uv * dv), -(uv * du + vv * dv), zero), axis=-1)
        w2 = np.einsum("...i,...i->...", normal, normal)
        w = np.sqrt(w2)
        p = np.einsum("...i,...i->...", normal, turn)
        q = np.einsum("...i,...i->...", turn, turn)
        at = np.stack((u, v, 0.5 * (zu * u + zv * v)), axis=-1)
        rate = np.stack((du, dv, zu * du + zv * dv), axis=-1)
        bend = np.stack((zero, zero, -(turn[..., 0] * du + turn[..., 1] * dv)), axis=-1)
        w3 = (w2 * w)[..., None]
        unit = normal / w[..., None]
        unit_rate = turn / w[..., None] - normal * (p[..., None] / w3)
        fall = (q - 3.0 * p * p / w2)[..., None] / w3
        unit_bend = -2.0 * turn * (p[..., None] / w3) - normal * fall
        reach = self.reach_mm
        return at + reach * unit, rate + reach * unit_rate, bend + reach * unit_bend

    def heading(self, xy_mm: Floats, along: Floats) -> Floats:
        """Return the unit direction (n, 3), part coordinates, of the ball's centre.

        Where the surface twists it is not that of the contact: C' = r' + (R + m) n', and n' has a part across
        the feed.

        Parameters
        ----------
        xy_mm : (n, 2)
            Plan of the contact.
        along : (n, 2) or (n, 3)
            Feed direction of the contact; only its plan part is read.
        """
        u, v = self.uv(xy_mm)
        du, dv = self.uv(along)
        _, rate, _ = self.centre(u, v, du, dv)
        turned = np.column_stack((self.xy(rate[:, 0], rate[:, 1]), rate[:, 2]))
        return turned / np.linalg.norm(turned, axis=1, keepdims=True)

    def normal_uv(self, u_mm: Floats, v_mm: Floats) -> Floats:
        """Return the upward unit normal (n, 3) in (u, v, z)."""
        uu, uv, vv = self.hessian_uv()
        normal = np.stack((-(uu * u_mm + uv * v_mm), -(uv * u_mm + vv * v_mm), np.ones_like(u_mm)), axis=-1)
        return normal / np.linalg.norm(normal, axis=-1, keepdims=True)

    def left_over(self, u_mm: Floats, v_mm: Floats, pass_v_mm: Floats) -> Floats:
        """Return the height (n,) [mm] that one endless pass leaves over plan points: exact.

        Measured along the normal from the finished surface moved out by the allowance. The line P + t n
        enters the ball with centre C at t = d.n - sqrt(R^2 - |d|^2 + (d.n)^2), d = C - P; the smallest over
        the pass is sought by Newton from the leading-order contact. inf where the pass does not reach the
        line.

        Parameters
        ----------
        u_mm, v_mm : (n,)
            The points.
        pass_v_mm : (n,)
            v of the pass.

        Raises
        ------
        NotConverged
        """
        u, v, line = np.broadcast_arrays(*(np.asarray(a, dtype=np.float64) for a in (u_mm, v_mm, pass_v_mm)))
        n = self.normal_uv(u, v)
        uu, uv, vv = self.hessian_uv()
        z = 0.5 * (uu * u * u + 2.0 * uv * u * v + vv * v * v)
        point = np.stack((u, v, z), axis=-1) + self.allowance_mm * n
        at = u + self.shear(u, 0.5 * (v + line)) * (line - v)
        one, none = np.ones_like(u), np.zeros_like(u)
        step = np.full_like(u, np.inf)
        height = np.full_like(u, np.inf)
        for _ in range(_ROUNDS):
            c, c1, c2 = self.centre(at, line, one, none)
            height, step = deepest_step(c - point, c1, c2, n, self.radius_mm)
            at = at - step
            if not np.any(np.abs(step[np.isfinite(height)]) > SAME_POINT_MM):
                return height
        raise NotConverged("height left by one pass", float(np.nanmax(np.abs(step))), SAME_POINT_MM)


def deepest_step(d: Floats, d1: Floats, d2: Floats, n: Floats, radius_mm: float) -> tuple[Floats, Floats]:
    """Return where a ball cuts the normal, and the Newton step (to subtract) to its lowest along the pass."""
    a, a1, a2 = (np.einsum("...i,...i->...", x, n) for x in (d, d1, d2))
    dd = np.einsum("...i,...i->...", d, d)
    inside = radius_mm * radius_mm - dd + a * a
    met = inside > 0.0
    root = np.sqrt(np.where(met, inside, 1.0))
    r1 = 2.0 * (a * a1 - np.einsum("...i,...i->...", d, d1))
    r2 = 2.0 * (a1 * a1 + a * a2 - np.einsum("...i,...i->...", d1, d1) - np.einsum("...i,...i->...", d, d2))
    slope = a1 - r1 / (2.0 * root)
    bend = a2 - r2 / (2.0 * root) + r1 * r1 / (4.0 * root**3)
    step = np.where(met & (bend > 0.0), slope / np.where(bend > 0.0, bend, 1.0), 0.0)
    limit = 0.5 * radius_mm
    return np.where(met, a - root, np.inf), np.clip(step, -limit, limit)
