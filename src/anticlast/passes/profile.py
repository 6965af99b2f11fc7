"""What a leaned bull or flat end mill leaves along a straight pass, with the true cutter on the true surface.

Plan coordinates of a feed direction: u along it, v to its left. Heights are measured along the upward normal of the
finished surface, from the surface moved out by the allowance; negative is a gouge. docs/theory-matched.md.
"""

from __future__ import annotations

import math
import os
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from anticlast.cutter import Cutter
from anticlast.passes import _profile_kernels as kernels
from anticlast.passes.cusp import plan_of, turned_form
from anticlast.passes.tilt import lead_and_lean, reference_from_contact, wished_axis
from anticlast.records import Floats
from anticlast.saddle import Saddle

Nearest = Callable[[Floats], Floats]

# Poses of a table per radius of the bottom disc: fine enough that every contact of bottom and surface has a row near it.
_POSES_PER_DISC = 6.0
# Golden sections about the lowest pose: a corner arc makes a smooth minimum, a sharp edge a kink that needs more.
_ROUNDS_ROUND, _ROUNDS_SHARP = 15, 24
# Rows are looked at this far past the rear of the bottom, shares of the cutter radius.
_PAST_REAR = 0.25
_RIDGE_ROUNDS = 12
# Slope of a bottom that still makes strips, for how far an edge may dip between rows.
_STEEPEST_BOTTOM = 0.3


@dataclass(frozen=True, slots=True)
class Sweep:
    """A bull or flat end mill on the saddle, fed along straight plan lines.

    Attributes
    ----------
    saddle : Saddle
    direction_rad : float
        Of +u, from part X.
    cutter : Cutter
    allowance_mm : float
        Stock left along the normal.
    nearest : callable
        From wished cutter axes (n, 3) in part coordinates to the reachable ones nearest to them.
    """

    saddle: Saddle
    direction_rad: float
    cutter: Cutter
    allowance_mm: float
    nearest: Nearest

    @property
    def disc_mm(self) -> float:
        """Radius of the flat bottom: distance of the corner arc's centre from the cutter axis."""
        return self.cutter.radius_mm - self.cutter.corner_radius_mm

    @property
    def step_mm(self) -> float:
        """Plan distance between the poses of a table."""
        return max(self.disc_mm, 0.5 * self.cutter.corner_radius_mm) / _POSES_PER_DISC

    @property
    def reach_mm(self) -> float:
        """How far along the feed, before or behind its contact, the cutter's bottom can meet the surface."""
        return 2.0 * self.disc_mm + (1.0 + _PAST_REAR) * max(
            self.cutter.corner_radius_mm, _PAST_REAR * self.cutter.radius_mm
        )

    def poses(
        self,
        u_mm: Floats,
        v_mm: Floats,
        way: npt.ArrayLike,
        lead_rad: Floats,
        lean_rad: npt.ArrayLike,
        lift_mm: npt.ArrayLike,
    ) -> tuple[Floats, Floats]:
        """Return reference point [mm] and unit axis (n, 3) in part coordinates at contacts (u, v).

        Parameters
        ----------
        u_mm, v_mm : (n,)
        way : int or (n,)
            +1 fed along +u, -1 against it.
        lead_rad, lean_rad : (n,)
            Wished; the machine's nearest axis is taken.
        lift_mm : (n,)
            The cutter stands this much off the contact along the normal, besides the allowance.
        """
        xy = plan_of(u_mm, v_mm, self.direction_rad)
        normal = self.saddle.normal(xy)
        sign = np.broadcast_to(np.asarray(way, dtype=np.float64), (len(xy),))
        tangent = self.saddle.tangent(xy, self.direction_rad) * sign[:, None]
        axis = self.nearest(np.ascontiguousarray(wished_axis(normal, tangent, lead_rad, lean_rad)))
        point = reference_from_contact(self.saddle.point(xy), normal, axis, self.cutter, self.allowance_mm)
        return point + np.broadcast_to(np.asarray(lift_mm), (len(xy),))[:, None] * normal, axis

    def reached(self, u_mm: Floats, v_mm: Floats, way: npt.ArrayLike, axis: Floats) -> tuple[Floats, Floats]:
        """Return the lead and lean (n,) [rad] at which axes (n, 3) stand at contacts (u, v)."""
        xy = plan_of(u_mm, v_mm, self.direction_rad)
        sign = np.broadcast_to(np.asarray(way, dtype=np.float64), (len(xy),))
        tangent = self.saddle.tangent(xy, self.direction_rad) * sign[:, None]
        return lead_and_lean(axis, self.saddle.normal(xy), tangent)

    def table(self, point: Floats, axis: Floats) -> Floats:
        """Return poses (n, 6) in (u, v, z) from reference points and axes (n, 3) in part coordinates."""
        c, s = math.cos(self.direction_rad), math.sin(self.direction_rad)
        turn = np.array([[c, -s, 0.0], [s, c, 0.0], [0.0, 0.0, 1.0]])
        poses = np.empty((len(point), 6))
        poses[:, :3], poses[:, 3:] = point @ turn, axis @ turn
        return poses

    def offsets(self) -> Floats:
        """Return plan distances (p,) along +u from a station to the poses that may cut abreast of it."""
        half = math.ceil(self.reach_mm / self.step_mm)
        return np.asarray(np.arange(-half, half + 1) * self.step_mm, np.float64)

    def _tool(self) -> Floats:
        rounds = _ROUNDS_ROUND if self.cutter.corner_radius_mm > 0.0 else _ROUNDS_SHARP
        # Between rows a corner arc dips by half a step squared over its diameter, a sharp edge by what its slope lets it.
        corner = self.cutter.corner_radius_mm
        dip = self.step_mm * min(_STEEPEST_BOTTOM, self.step_mm / (8.0 * corner) if corner > 0.0 else np.inf)
        return np.array([self.disc_mm, corner, float(rounds), 1.5 * dip])

    def profiles(
        self,
        u_mm: Floats,
        v_mm: Floats,
        way: npt.ArrayLike,
        lead_rad: Floats,
        lean_rad: Floats,
        aside_mm: Floats,
        error_rad: float = 0.0,
    ) -> tuple[Floats, Floats, Floats]:
        """Return what passes leave beside their lines, how far ahead of the place it is cut, and what a tilt error leaves.

        Above the line of the pass the height is 0, or negative where the rear of the bottom gouges. A tilt error about the
        contact moves each place of the
        bottom along the normal by the error times its distance from the contact, to first order; the worst direction of the
        error is taken place by place. docs/theory-matched.md#guard.

        Parameters
        ----------
        u_mm, v_mm, way : (n,)
            Stations.
        lead_rad, lean_rad : (n,) or (n, p)
            The same all within the cutter's reach of a station, or at each of `offsets` from it.
        aside_mm : (m,)
            Distances on the surface to the left of the line.
        error_rad : float
            The tilt error.

        Returns
        -------
        height, shift, lowered : (n, m) [mm]
            ``shift`` is along +u.
        """
        offsets = self.offsets()
        many = offsets.size
        sign = np.broadcast_to(np.asarray(way, dtype=np.float64), u_mm.shape)
        point, axis = self.poses(
            (u_mm[:, None] + offsets).ravel(),
            np.repeat(v_mm, many),
            np.repeat(sign, many),
            np.broadcast_to(np.reshape(lead_rad, (u_mm.size, -1)), (u_mm.size, many)).ravel(),
            np.broadcast_to(np.reshape(lean_rad, (u_mm.size, -1)), (u_mm.size, many)).ravel(),
            0.0,
        )
        tables = self.table(point, axis).reshape(u_mm.size, many, 6)
        height, shift, lowered = np.empty((3, u_mm.size, aside_mm.size))
        xy = plan_of(u_mm, v_mm, self.direction_rad)
        tangent = self.saddle.tangent(xy, self.direction_rad)
        along = 1.0 / np.linalg.norm(tangent[:, :2], axis=1)
        scale = np.column_stack((along, self.saddle.stretch(xy) / along))
        form, tool = turned_form(self.saddle, self.direction_rad), self._tool()

        def run(part: slice) -> None:
            kernels.profiles(
                form,
                tool,
                u_mm[part],
                v_mm[part],
                aside_mm,
                tables[part],
                self.step_mm,
                self.reach_mm,
                error_rad,
                scale[part],
                height[part],
                shift[part],
                lowered[part],
            )

        _in_bands(run, u_mm.size)
        return height - self.allowance_mm, shift, lowered - self.allowance_mm

    def heights(self, u_mm: Floats, v_mm: Floats, track: Track) -> Floats:
        """Return what one whole pass leaves over plan points (n,) [mm]; inf where it does not reach."""
        height = np.empty(u_mm.size)
        form, tool = turned_form(self.saddle, self.direction_rad), self._tool()

        def run(part: slice) -> None:
            kernels.heights(
                form,
                tool,
                u_mm[part],
                v_mm[part],
                track.table,
                track.start_mm,
                self.step_mm,
                self.reach_mm,
                height[part],
            )

        _in_bands(run, u_mm.size)
        return height - self.allowance_mm

    def ridges(self, u_mm: Floats, first: Track, second: Track) -> tuple[Floats, Floats]:
        """Return v and height (n,) [mm] of the ridge between two neighbouring passes, first below second in v."""
        place, height = np.empty(u_mm.size), np.empty(u_mm.size)
        low, high = np.full(u_mm.size, first.v_mm), np.full(u_mm.size, second.v_mm)
        form, tool = turned_form(self.saddle, self.direction_rad), self._tool()
        start = np.array([first.start_mm, second.start_mm])

        def run(part: slice) -> None:
            kernels.ridges(
                form, tool, u_mm[part], low[part], high[part], first.table, second.table, start,
                self.step_mm, self.reach_mm, _RIDGE_ROUNDS, place[part], height[part],
            )  # fmt: skip

        _in_bands(run, u_mm.size)
        return place, height - self.allowance_mm


@dataclass(frozen=True, slots=True)
class Track:
    """Poses of one pass at even steps of its contact: row i at u = start + i step, in (u, v, z)."""

    v_mm: float
    start_mm: float
    table: Floats


def _in_bands(run: Callable[[slice], None], count: int) -> None:
    """Run over slices of ``count`` in as many threads as there are processors."""
    threads = min(os.cpu_count() or 1, max(1, count // 8))
    if threads == 1:
        run(slice(0, count))
        return
    bounds = np.linspace(0, count, 4 * threads + 1).astype(int)
    with ThreadPoolExecutor(threads) as pool:
        list(pool.map(run, [slice(int(a), int(b)) for a, b in zip(bounds[:-1], bounds[1:], strict=True)]))


def osculating_lead_rad(disc_mm: float, corner_radius_mm: float, curvature_per_mm: npt.ArrayLike) -> Floats:
    """Return the lead [rad] at which the swept profile has the surface's curvature across the feed.

    r_eff = r + (R - r) / sin(lead) equals 1 / k at sin(lead) = (R - r) k / (1 - r k): the r-offset of the ellipse that a disc
    of radius R - r sweeps (docs/theory-matched.md#start; R / sin(lead) for r = 0 is that of G. W. Vickers and K. W. Quan,
    Ball-mills versus end-mills for curved surface machining, J. Eng. Ind. 111 (1989) 22-26, from memory). Zero where
    the surface is not concave across the feed, a quarter turn where no lead does it.
    """
    k = np.maximum(np.asarray(curvature_per_mm, dtype=np.float64), 0.0)
    return np.arcsin(np.minimum(disc_mm * k / np.maximum(1.0 - corner_radius_mm * k, 1e-9), 1.0))
