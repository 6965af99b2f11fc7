"""Geodesic parallels in the cusp metric: curves at equal metric distances, which leave the same cusp everywhere.

From a straight plan line geodesics of the metric set out square to it (in the metric); v is the metric length run,
u the place on the line where they set out. Lines of constant v are passes: by Gauss's lemma they stay square to the
geodesics, so equal steps of v leave equal cusps, to leading order. T. Kim, Constant cusp height tool paths as geodesic
parallels on an abstract Riemannian manifold, CAD 39 (2007) 477-489 (from memory). docs/theory-passes.md#even.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from anticlast.errors import CannotPlan, NotConverged
from anticlast.outline import Outline
from anticlast.passes.frame import PassFrame
from anticlast.records import Floats, Ints
from anticlast.tolerances import SAME_POINT_MM

# Spacing of the table of geodesics, across and along them: at most so much, and this share of the tightest radius of
# curvature 1/(2a) or 1/(2b), over which the metric changes. Six-point interpolation and Runge-Kutta then err by less than
# 1e-6 mm.
_WIDEST_MM = 1.0
_SHARE_OF_RADIUS = 0.03
# Every so many nodes one is a start for Newton: some millimetres off, far less than the radius of any geodesic.
_ROUGH = 6
# Central differences of the metric at this distance (mm) err by 1e-9 of it, from round-off and curvature alike.
_PROBE_MM = 1e-3
# Six nodes -2 .. 3 about the cell [0, 1]: row k holds the coefficients of node k's polynomial, constant term first.
_NODES = np.arange(-2.0, 4.0)
_BASIS = np.linalg.inv(np.vander(_NODES, increasing=True)).T
_POWERS = np.arange(6)
_ROUNDS = 30
_MARGINS = (0.3, 0.8, 2.0)


def _weights(at: Floats, order: int) -> Floats:
    """Return the six-point Lagrange weights (n, 6) at places in cells (n,), or those of a derivative."""
    factor = np.ones(6)
    for k in range(order):
        factor = factor * np.maximum(_POWERS - k, 0)
    powers = np.vander(at, 6, increasing=True)[:, np.maximum(_POWERS - order, 0)]
    return powers @ (_BASIS * factor).T


@dataclass(frozen=True, slots=True)
class Bundle:
    """Passes out of a `Parallels` chart, each a table of plan points over u; a course."""

    table: Floats  # (lines, nodes, 2)
    first_mm: float
    step_mm: float

    def at(self, line: Ints, u_mm: Floats) -> tuple[Floats, Floats, Floats]:
        """Return plan points (n, 2) [mm] in part coordinates, and their first two derivatives by u."""
        place = (np.asarray(u_mm) - self.first_mm) / self.step_mm
        cell = np.clip(np.floor(place).astype(np.int64), 2, self.table.shape[1] - 4)
        points = self.table[np.asarray(line)[:, None], cell[:, None] + np.arange(-2, 4)]
        found = [np.einsum("nk,nkc->nc", _weights(place - cell, order), points) for order in range(3)]
        return found[0], found[1] / self.step_mm, found[2] / self.step_mm**2


@dataclass(frozen=True, slots=True)
class Parallels:
    """The chart (u, v) to part (x, y).

    Attributes
    ----------
    table : (rows, nodes, 2)
        Plan points at v = low_mm + i * step_mm, u = first_mm + j * step_mm.
    first_mm, low_mm, step_mm : float
    crowding : float
        1/mm; passes a step p of v apart leave h = p^2 / 8 of it, to leading order, everywhere.
    """

    table: Floats
    first_mm: float
    low_mm: float
    step_mm: float
    crowding: float

    def place(self, u_mm: Floats, v_mm: Floats) -> tuple[Floats, Floats, Floats]:
        """Return plan points (n, 2) [mm] in part coordinates, and their derivatives by u and by v."""
        i, s = self._cell(v_mm, self.low_mm, 0)
        j, t = self._cell(u_mm, self.first_mm, 1)
        near = np.arange(-2, 4)
        points = self.table[i[:, None, None] + near[:, None], j[:, None, None] + near]
        across, along = _weights(t, 0), _weights(s, 0)
        on_row = np.einsum("nl,nklc->nkc", across, points)
        xy = np.einsum("nk,nkc->nc", along, on_row)
        by_u = np.einsum("nk,nl,nklc->nc", along, _weights(t, 1), points) / self.step_mm
        by_v = np.einsum("nk,nkc->nc", _weights(s, 1), on_row) / self.step_mm
        return xy, by_u, by_v

    def _cell(self, at: Floats, first_mm: float, axis: int) -> tuple[Ints, Floats]:
        place = (np.asarray(at, dtype=np.float64) - first_mm) / self.step_mm
        cell = np.clip(np.floor(place).astype(np.int64), 2, self.table.shape[axis] - 4)
        return cell, place - cell

    def bundle(self, lines_mm: Floats) -> Bundle:
        """Return the passes v = ``lines_mm`` (n,) as a course."""
        i, s = self._cell(lines_mm, self.low_mm, 0)
        rows = self.table[i[:, None] + np.arange(-2, 4)]
        return Bundle(np.einsum("nk,nkjc->njc", _weights(s, 0), rows), self.first_mm, self.step_mm)

    def coordinates(self, xy_mm: Floats) -> tuple[Floats, Floats]:
        """Return (u, v) (n,) of plan points (n, 2): nearest node, then Newton.

        Raises
        ------
        NotConverged
            If a point lies outside the table.
        """
        rough = self.table[::_ROUGH, ::_ROUGH]
        nodes = rough.reshape(-1, 2)
        size = (nodes**2).sum(axis=1)
        nearest = np.concatenate(
            [
                np.argmin(size - 2.0 * part @ nodes.T, axis=1)
                for part in np.array_split(xy_mm, max(1, len(xy_mm) // 1000))
            ]
        )
        v = self.low_mm + _ROUGH * self.step_mm * (nearest // rough.shape[1])
        u = self.first_mm + _ROUGH * self.step_mm * (nearest % rough.shape[1])
        miss = np.inf
        for _ in range(_ROUNDS):
            xy, by_u, by_v = self.place(u, v)
            off = xy_mm - xy
            det = by_u[:, 0] * by_v[:, 1] - by_u[:, 1] * by_v[:, 0]
            u = u + (off[:, 0] * by_v[:, 1] - off[:, 1] * by_v[:, 0]) / det
            v = v + (by_u[:, 0] * off[:, 1] - by_u[:, 1] * off[:, 0]) / det
            u = np.clip(u, self.first_mm, self.first_mm + self.step_mm * (self.table.shape[1] - 1))
            v = np.clip(v, self.low_mm, self.low_mm + self.step_mm * (self.table.shape[0] - 1))
            miss = float(np.abs(off).max(initial=0.0))
            if miss <= 1e-3 * SAME_POINT_MM:
                return u, v
        raise NotConverged("place among parallel passes", miss, 1e-3 * SAME_POINT_MM)


def parallels(frame: PassFrame, outline: Outline) -> tuple[Parallels, Floats, Floats]:
    """Return the chart of parallels to the line through the saddle point along the feed, and the outline's rim in it.

    If the outline does not reach that line, the line is laid through the middle of the outline.

    Returns
    -------
    chart : Parallels
    u, v : (n,)
        Of the vertices of ``outline.polygon``, in the order of ``shapely.get_coordinates``.

    Raises
    ------
    CannotPlan
        Check ``"passes cross"`` if geodesics meet over the outline.
    """
    import shapely

    vertices = shapely.get_coordinates(outline.polygon)
    rim = frame.uv(vertices)
    low, high = outline.v_range(frame.direction_rad)
    start_v = 0.0 if low < 0.0 < high else 0.5 * (low + high)
    width = float(np.ptp(rim[0]))
    for margin in _MARGINS:
        reach = margin * max(width, high - low)
        chart = _chart(frame, (float(rim[0].min()) - reach, float(rim[0].max()) + reach), start_v, rim)
        if _folds(chart, outline):
            break
        try:
            u, v = chart.coordinates(vertices)
        except NotConverged:
            continue
        _, by_u, by_v = chart.place(u, v)
        turned = by_u[:, 0] * by_v[:, 1] - by_u[:, 1] * by_v[:, 0]
        if turned.min() > 0.0:
            return chart, u, v
    raise CannotPlan(
        "passes cross",
        "passes that leave the same scallop everywhere, started along "
        f"{math.degrees(frame.direction_rad):g} degrees, do not cover this outline without crossing each other; "
        "choose another direction or pattern 'graded'",
    )


def _folds(chart: Parallels, outline: Outline) -> bool:
    """Tell whether geodesics meet at a node inside the outline: cells turned over, or fronts that blew up."""
    across, along = np.diff(chart.table, axis=1)[:-1], np.diff(chart.table, axis=0)[:, :-1]
    turned = across[..., 0] * along[..., 1] - across[..., 1] * along[..., 0]
    suspect = chart.table[:-1, :-1][~(turned > 0.0)]
    return bool(outline.contains(suspect[np.isfinite(suspect).all(axis=1)]).any())


def _chart(
    frame: PassFrame, ends: tuple[float, float], start_v: float, rim: tuple[Floats, Floats]
) -> Parallels:
    """Return the table of geodesics from the line v = ``start_v``, u within ``ends``, far enough to pass the rim."""
    saddle = frame.saddle
    step = min(_WIDEST_MM, _SHARE_OF_RADIUS / (2.0 * max(saddle.a_per_mm, saddle.b_per_mm)))
    nodes = math.ceil((ends[1] - ends[0]) / step) + 6
    u = ends[0] + step * np.arange(nodes, dtype=np.float64)
    scale = float(frame.crowding(np.array([0.5 * (ends[0] + ends[1])]), np.array([start_v]))[0])
    sides = []
    for side in (-1.0, 1.0):
        # No path is shorter than the geodesic: the straight one along v bounds how far it is to the rim.
        share = (np.arange(16) + 0.5)[:, None] / 16.0
        q_vv = frame.cusp_form(rim[0], start_v + share * (rim[1] - start_v))[2]
        length = np.sqrt(q_vv / scale).mean(axis=0) * np.abs(rim[1] - start_v)
        far = float(length[side * (rim[1] - start_v) >= 0.0].max(initial=0.0))
        sides.append(_geodesics(frame, u, start_v, scale, side, step, math.ceil(far / step) + 4))
    rows = np.concatenate((sides[0][:0:-1], sides[1]))
    table = np.stack([frame.xy(row[0], row[1]) for row in rows])
    return Parallels(table, float(u[0]), -step * (len(sides[0]) - 1), step, scale)


def _geodesics(
    frame: PassFrame, u: Floats, start_v: float, scale: float, side: float, step_mm: float, steps: int
) -> Floats:
    """Return (steps + 1, 2, n) plan (u, v) every ``step_mm`` of metric length, by the classical Runge-Kutta method.

    Hamilton's equations of g^ij p_i p_j / 2: x' = g^-1 p, p'_k = (dg_ij/dx_k) x'_i x'_j / 2.
    """
    form = np.array(frame.cusp_form(u, np.full_like(u, start_v))) / scale
    # Covectors square to the line have no part along it; unit metric length fixes the other.
    lift = side * np.sqrt((form[0] * form[2] - form[1] ** 2) / form[0])
    state = np.array([u, np.full_like(u, start_v), np.zeros_like(u), lift])
    found = [state[:2]]
    h = step_mm
    for _ in range(steps):
        k1 = _flow(frame, state, scale)
        k2 = _flow(frame, state + 0.5 * h * k1, scale)
        k3 = _flow(frame, state + 0.5 * h * k2, scale)
        k4 = _flow(frame, state + h * k3, scale)
        state = state + h / 6.0 * (k1 + 2.0 * k2 + 2.0 * k3 + k4)
        found.append(state[:2])
    return np.array(found)


def _flow(frame: PassFrame, state: Floats, scale: float) -> Floats:
    x, y, p, q = state
    a, b, c = np.array(frame.cusp_form(x, y)) / scale
    det = a * c - b * b
    dx, dy = (c * p - b * q) / det, (a * q - b * p) / det
    e = _PROBE_MM
    slopes = []
    for ahead, behind in (((x + e, y), (x - e, y)), ((x, y + e), (x, y - e))):
        da, db, dc = (np.array(frame.cusp_form(*ahead)) - np.array(frame.cusp_form(*behind))) / (
            2.0 * e * scale
        )
        slopes.append(0.5 * (da * dx * dx + 2.0 * db * dx * dy + dc * dy * dy))
    return np.array([dx, dy, *slopes])
