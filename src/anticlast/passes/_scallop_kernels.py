"""Exact cusp between neighbouring passes of a ball, row by row. Arrays and floats only.

Plan coordinates u along the feed, v to its left; the surface is z = (A u^2 + 2 B u v + C v^2) / 2 and
``form`` is (A, B, C) [1/mm]. The ball centre over (u, v) is the surface point moved along the upward unit
normal by ``reach``, ball radius + allowance. A cusp point is T = surface point + h * normal over plan (u,
v*), at distance ``radius`` from the centre curve of a pass line; the nearest centre is where that curve's
tangent is square to the line from T. Newton on exactly these equations; docs/theory-surface.md#exact-cusp.
"""

import math

import numba
import numpy as np

_ROUNDS = 60
# A residual is settled at this share of the lengths that went into it: some ten roundings.
_SETTLED = 2e-15


@numba.njit(cache=True, nogil=True)
def _surface(form, u, v):
    """Return height, slopes zu, zv and W at (u, v)."""
    a, b, c = form[0], form[1], form[2]
    zu = a * u + b * v
    zv = b * u + c * v
    return 0.5 * (u * zu + v * zv), zu, zv, math.sqrt(1.0 + zu * zu + zv * zv)


@numba.njit(cache=True, nogil=True)
def _lifted(form, u, v, h, out):
    """Fill rows 0 to 2 of out: T over (u, v) at h along the normal, its derivative by v, the normal."""
    z, zu, zv, w = _surface(form, u, v)
    wv = (zu * form[1] + zv * form[2]) / w
    n0, n1, n2 = -zu / w, -zv / w, 1.0 / w
    out[0, 0], out[0, 1], out[0, 2] = u + h * n0, v + h * n1, z + h * n2
    out[1, 0] = h * (-form[1] - n0 * wv) / w
    out[1, 1] = 1.0 + h * (-form[2] - n1 * wv) / w
    out[1, 2] = zv - h * n2 * wv / w
    out[2, 0], out[2, 1], out[2, 2] = n0, n1, n2


@numba.njit(cache=True, nogil=True)
def _centre(form, reach, u, v, out):
    """Fill rows 0 to 4 of out: ball centre over (u, v) and its derivatives by u, v, uu, uv."""
    a, b, c = form[0], form[1], form[2]
    z, zu, zv, w = _surface(form, u, v)
    w1 = 1.0 / w
    wu = (zu * a + zv * b) * w1
    wv = (zu * b + zv * c) * w1
    wuu = (a * a + b * b - wu * wu) * w1
    wuv = (a * b + b * c - wu * wv) * w1
    n = (-zu * w1, -zv * w1, w1)
    mu = (-a, -b, 0.0)
    mv = (-b, -c, 0.0)
    place = (u, v, z)
    along = (1.0, 0.0, zu)
    across = (0.0, 1.0, zv)
    bend = (0.0, 0.0, a)
    twist = (0.0, 0.0, b)
    for i in range(3):
        nu = (mu[i] - n[i] * wu) * w1
        nv = (mv[i] - n[i] * wv) * w1
        out[0, i] = place[i] + reach * n[i]
        out[1, i] = along[i] + reach * nu
        out[2, i] = across[i] + reach * nv
        out[3, i] = bend[i] - reach * (2.0 * nu * wu + n[i] * wuu) * w1
        out[4, i] = twist[i] - reach * (nu * wv + nv * wu + n[i] * wuv) * w1


@numba.njit(cache=True, nogil=True)
def _dot(x, i, y, j):
    return x[i, 0] * y[j, 0] + x[i, 1] * y[j, 1] + x[i, 2] * y[j, 2]


@numba.njit(cache=True, nogil=True)
def _gap_form(form, reach, radius, u, v):
    """Return the plan form (uu, uv, vv) of the gap under the ball, second order: (I - reach II) / radius."""
    _, zu, zv, w = _surface(form, u, v)
    return (
        (1.0 + zu * zu - reach * form[0] / w) / radius,
        (zu * zv - reach * form[1] / w) / radius,
        (1.0 + zv * zv - reach * form[2] / w) / radius,
    )


@numba.njit(cache=True, nogil=True)
def _cusp_from_line(form, reach, radius, u, line, h, side, t, c):
    """Return (v*, residual): where a pass line's groove has height h over abscissa u, on the given side."""
    guu, guv, gvv = _gap_form(form, reach, radius, u, line)
    over = h - (reach - radius)
    half = math.sqrt(2.0 * over / (gvv - guv * guv / guu))
    v, w = line + side * half, u + side * half * guv / guu
    size = radius + abs(u) + abs(v)
    residual = np.inf
    for _ in range(_ROUNDS):
        _lifted(form, u, v, h, t)
        _centre(form, reach, w, line, c)
        for i in range(3):
            c[0, i] = t[0, i] - c[0, i]
        e = (_dot(c, 0, c, 0) - radius * radius) / (2.0 * radius)
        d = _dot(c, 0, c, 1)
        residual = max(abs(e), abs(d)) / size
        if residual <= _SETTLED:
            break
        ev, eu = _dot(c, 0, t, 1) / radius, -d / radius
        dv, du = _dot(t, 1, c, 1), _dot(c, 0, c, 3) - _dot(c, 1, c, 1)
        det = ev * du - eu * dv
        if det == 0.0 or not math.isfinite(det):
            return v, np.inf
        step_v = (eu * d - e * du) / det
        step_w = (e * dv - ev * d) / det
        step_v = max(-half, min(half, step_v))
        v += step_v
        w += step_w
    return v, residual


@numba.njit(cache=True, nogil=True)
def _line_from_cusp(form, reach, radius, u, v, h, side, t, c):
    """Return (line, residual): the pass line on the given side whose groove has height h over plan (u, v)."""
    guu, guv, gvv = _gap_form(form, reach, radius, u, v)
    over = h - (reach - radius)
    half = math.sqrt(2.0 * over / (gvv - guv * guv / guu))
    line, w = v + side * half, u - side * half * guv / guu
    size = radius + abs(u) + abs(v)
    residual = np.inf
    _lifted(form, u, v, h, t)
    for _ in range(_ROUNDS):
        _centre(form, reach, w, line, c)
        for i in range(3):
            c[0, i] = t[0, i] - c[0, i]
        e = (_dot(c, 0, c, 0) - radius * radius) / (2.0 * radius)
        d = _dot(c, 0, c, 1)
        residual = max(abs(e), abs(d)) / size
        if residual <= _SETTLED:
            break
        ev, eu = -_dot(c, 0, c, 2) / radius, -d / radius
        dv, du = _dot(c, 0, c, 4) - _dot(c, 1, c, 2), _dot(c, 0, c, 3) - _dot(c, 1, c, 1)
        det = ev * du - eu * dv
        if det == 0.0 or not math.isfinite(det):
            return line, np.inf
        step_v = (eu * d - e * du) / det
        step_w = (e * dv - ev * d) / det
        step_v = max(-half, min(half, step_v))
        line += step_v
        w += step_w
    return line, residual


@numba.njit(cache=True, nogil=True)
def _cusp_between(form, reach, radius, u, line1, line2, t, c1, c2):
    """Return (v*, h, residual): where the grooves of two pass lines meet over abscissa u, and how high.

    Four equations in v*, h and the two contact abscissae; the abscissae are eliminated from the Newton step.
    """
    gap = line2 - line1
    v = 0.5 * (line1 + line2)
    guu, guv, gvv = _gap_form(form, reach, radius, u, v)
    h = (reach - radius) + 0.125 * (gvv - guv * guv / guu) * gap * gap
    w1, w2 = u + 0.5 * gap * guv / guu, u - 0.5 * gap * guv / guu
    size = radius + abs(u) + abs(v)
    residual = np.inf
    for _ in range(_ROUNDS):
        _lifted(form, u, v, h, t)
        _centre(form, reach, w1, line1, c1)
        _centre(form, reach, w2, line2, c2)
        for i in range(3):
            c1[0, i] = t[0, i] - c1[0, i]
            c2[0, i] = t[0, i] - c2[0, i]
        e1 = (_dot(c1, 0, c1, 0) - radius * radius) / (2.0 * radius)
        e2 = (_dot(c2, 0, c2, 0) - radius * radius) / (2.0 * radius)
        d1, d2 = _dot(c1, 0, c1, 1), _dot(c2, 0, c2, 1)
        residual = max(max(abs(e1), abs(e2)), max(abs(d1), abs(d2))) / size
        if residual <= _SETTLED:
            break
        d1u = _dot(c1, 0, c1, 3) - _dot(c1, 1, c1, 1)
        d2u = _dot(c2, 0, c2, 3) - _dot(c2, 1, c2, 1)
        d1v, d1h = _dot(t, 1, c1, 1), _dot(t, 2, c1, 1)
        d2v, d2h = _dot(t, 1, c2, 1), _dot(t, 2, c2, 1)
        # dE/du = -d / radius; eliminating du = -(d + d_v dv + d_h dh) / d_u
        f1, f2 = d1 / (radius * d1u), d2 / (radius * d2u)
        a11 = _dot(c1, 0, t, 1) / radius + f1 * d1v
        a12 = _dot(c1, 0, t, 2) / radius + f1 * d1h
        a21 = _dot(c2, 0, t, 1) / radius + f2 * d2v
        a22 = _dot(c2, 0, t, 2) / radius + f2 * d2h
        r1, r2 = -e1 - f1 * d1, -e2 - f2 * d2
        det = a11 * a22 - a12 * a21
        if det == 0.0 or not math.isfinite(det):
            return v, h, np.inf
        dv = (r1 * a22 - r2 * a12) / det
        dh = (a11 * r2 - a21 * r1) / det
        dv = max(-0.5 * abs(gap), min(0.5 * abs(gap), dv))
        dh = max(-0.5 * radius, min(0.5 * radius, dh))
        v += dv
        h += dh
        w1 -= (d1 + d1v * dv + d1h * dh) / d1u
        w2 -= (d2 + d2v * dv + d2h * dh) / d2u
    return v, h, residual


@numba.njit(cache=True, nogil=True)
def next_lines(form, radius, allowance, u, v, scallop, step, residual):
    """Fill step (n,) [mm]: plan distance from pass line v to the next, cusp ``scallop`` high over u."""
    t, c = np.empty((3, 3)), np.empty((5, 3))
    reach = radius + allowance
    for k in range(len(u)):
        cusp, bad1 = _cusp_from_line(form, reach, radius, u[k], v[k], scallop[k] + allowance, 1.0, t, c)
        line, bad2 = _line_from_cusp(form, reach, radius, u[k], cusp, scallop[k] + allowance, 1.0, t, c)
        step[k] = line - v[k]
        residual[k] = max(bad1, bad2)


@numba.njit(cache=True, nogil=True)
def lines_beside(form, radius, allowance, u, v, scallop, right, left, residual):
    """Fill right and left (n,) [mm]: the pass lines whose cusp stands ``scallop`` high over plan (u, v)."""
    t, c = np.empty((3, 3)), np.empty((5, 3))
    reach = radius + allowance
    for k in range(len(u)):
        h = scallop[k] + allowance
        right[k], bad1 = _line_from_cusp(form, reach, radius, u[k], v[k], h, -1.0, t, c)
        left[k], bad2 = _line_from_cusp(form, reach, radius, u[k], v[k], h, 1.0, t, c)
        residual[k] = max(bad1, bad2)


@numba.njit(cache=True, nogil=True)
def cusps(form, radius, allowance, u, v1, v2, height, residual):
    """Fill height (n,) [mm]: the cusp between pass lines v1 and v2 over abscissa u, above the allowance."""
    t, c1, c2 = np.empty((3, 3)), np.empty((5, 3)), np.empty((5, 3))
    reach = radius + allowance
    for k in range(len(u)):
        _, h, residual[k] = _cusp_between(form, reach, radius, u[k], v1[k], v2[k], t, c1, c2)
        height[k] = h - allowance
