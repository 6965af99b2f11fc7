"""The saddle's closed forms against finite differences, scipy, brute force and worked values.

"Derived here" values come from docs/theory-surface.md.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import integrate as quadrature
from scipy import optimize

from anticlast import quadrature as own_quadrature
from anticlast import saddle as module
from anticlast.errors import NotConverged
from anticlast.quadrature import integrate, nodes_and_weights, triangulated
from anticlast.saddle import Saddle

NANOMETRE = 1e-6
ROUND_OFF = 1e-12
SADDLES = [
    pytest.param(Saddle(0.01, 0.01, 0.0), id="even"),
    pytest.param(Saddle(0.02, 0.007, 0.4), id="turned"),
    pytest.param(Saddle(0.003, 0.015, -2.1), id="narrow"),
]
PLACES = np.array([[0.0, 0.0], [20.0, 0.0], [0.0, 20.0], [20.0, 10.0], [-13.0, 27.0], [31.0, -8.0]])


def derivative(function, xy, direction, step=1e-4):
    """Central difference of a function of xy along a plan direction, fourth order."""
    d = step * np.asarray(direction)
    return (8.0 * (function(xy + d) - function(xy - d)) - function(xy + 2 * d) + function(xy - 2 * d)) / (
        12.0 * step
    )


# ------------------------------------------------------------------------------------------ shape


def test_height_and_turn() -> None:
    """z = a x'^2 - b y'^2; rotate = 90 deg puts the concave direction along part Y (the job file's
    definition).
    """
    s = Saddle(0.01, 0.004, math.pi / 2)
    assert s.height(0.0, 10.0) == pytest.approx(1.0, abs=ROUND_OFF)
    assert s.height(10.0, 0.0) == pytest.approx(-0.4, abs=ROUND_OFF)
    assert Saddle(0.01, 0.004, 0.0).hessian() == pytest.approx(np.diag([0.02, -0.008]))


def test_quarter_turn_flips_an_even_saddle() -> None:
    x, y = PLACES.T
    turned = Saddle(0.01, 0.01, math.pi / 2).height(x, y)
    assert turned == pytest.approx(-Saddle(0.01, 0.01, 0.0).height(x, y), abs=ROUND_OFF)


@pytest.mark.parametrize("s", SADDLES)
def test_gradient_normal_and_tangents(s: Saddle) -> None:
    zx = derivative(lambda xy: s.height(*xy.T), PLACES, (1.0, 0.0))
    zy = derivative(lambda xy: s.height(*xy.T), PLACES, (0.0, 1.0))
    assert np.array(s.gradient(*PLACES.T)) == pytest.approx(np.array([zx, zy]), abs=1e-10)
    normal = s.normal(PLACES)
    assert np.linalg.norm(normal, axis=1) == pytest.approx(1.0, abs=ROUND_OFF)
    assert (normal[:, 2] > 0).all()
    # The normal is square to finite-difference tangents of the surface itself.
    for direction in ((1.0, 0.0), (0.0, 1.0)):
        along = derivative(s.point, PLACES, direction)
        assert np.einsum("ni,ni->n", along, normal) == pytest.approx(0.0, abs=1e-9)
    assert s.slope_rad(PLACES) == pytest.approx(np.arccos(normal[:, 2]), abs=1e-9)
    _, _, _, tangent, binormal = s.along(PLACES, 0.7)
    assert np.cross(tangent, binormal) == pytest.approx(normal, abs=ROUND_OFF)
    assert np.arctan2(tangent[:, 1], tangent[:, 0]) == pytest.approx(0.7)
    assert s.offset(PLACES, 3.0) == pytest.approx(s.point(PLACES) + 3.0 * normal)


def test_bad_saddles_and_bad_shapes_are_refused() -> None:
    with pytest.raises(ValueError, match="a > 0 and b > 0"):
        Saddle(0.0, 0.01, 0.0)
    with pytest.raises(ValueError, match=r"shape \(n, 2\)"):
        Saddle(0.01, 0.01, 0.0).point(np.zeros((3, 3)))


@pytest.mark.parametrize("n", [0, 1])
def test_no_points_and_one_point(n: int) -> None:
    s = Saddle(0.01, 0.008, 0.3)
    xy = np.ones((n, 2))
    assert s.point(xy).shape == s.normal(xy).shape == s.offset(xy, 1.0).shape == (n, 3)
    assert [part.shape for part in s.principal(xy)] == [(n,), (n,), (n, 3), (n, 3)]
    assert [part.shape for part in s.along(xy, 0.1)] == [(n,), (n,), (n,), (n, 3), (n, 3)]
    assert [part.shape for part in s.closest(np.ones((n, 3)))] == [(n, 2), (n,)]
    assert s.line_length_mm(xy, xy + 1.0).shape == (n,)


def test_lists_and_float32_are_taken() -> None:
    s = Saddle(0.01, 0.01, 0.0)
    assert s.point([[20, 10]])[0] == pytest.approx([20.0, 10.0, 3.0])
    assert s.normal(np.asfortranarray(PLACES.astype(np.float32))).flags.c_contiguous


# ------------------------------------------------------------------------------------------ curvature


@pytest.mark.parametrize(
    ("place", "gauss", "k1", "k2"),
    [
        ((0.0, 0.0), -4.0e-4, 0.02, -0.02),
        ((20.0, 0.0), -2.972652e-4, 0.01600822, -0.01856953),
        ((0.0, 20.0), -2.972652e-4, 0.01856953, -0.01600822),
        ((20.0, 10.0), -2.777778e-4, 0.01577878, -0.01760452),
    ],
)
def test_curvatures_at_worked_places(place, gauss, k1, k2) -> None:
    """a = b = 0.01; derived here: K = -4a^2/W^4, H = 4a^3 (y^2 - x^2)/W^3, digits to the last one printed."""
    k_max, k_min, _, _ = Saddle(0.01, 0.01, 0.0).principal([place])
    assert k_max[0] * k_min[0] == pytest.approx(gauss, abs=6e-11)
    assert k_max[0] == pytest.approx(k1, abs=6e-9)
    assert k_min[0] == pytest.approx(k2, abs=6e-9)


def test_normal_of_the_worked_point() -> None:
    """a = 0.01 at (20, 10): (-0.36514837, 0.18257419, 0.91287093), derived here."""
    found = Saddle(0.01, 0.01, 0.0).normal([[20.0, 10.0]])[0]
    assert found == pytest.approx([-0.36514837, 0.18257419, 0.91287093], abs=6e-9)


@pytest.mark.parametrize("s", SADDLES)
def test_principal_against_a_numerical_shape_operator(s: Saddle) -> None:
    """The shape operator is -dn along the surface; its eigenvalues from finite differences of the normal."""
    k_max, k_min, dir_max, dir_min = s.principal(PLACES)
    for k, direction in ((k_max, dir_max), (k_min, dir_min)):
        change = np.array(
            [derivative(s.normal, xy[None], d[:2])[0] for xy, d in zip(PLACES, direction, strict=True)]
        )
        assert -change == pytest.approx(k[:, None] * direction, abs=1e-10)
    assert np.cross(dir_max, dir_min) == pytest.approx(s.normal(PLACES), abs=ROUND_OFF)
    assert (k_max > 0).all()
    assert (k_min < 0).all()


@pytest.mark.parametrize("s", SADDLES)
def test_normal_curvature_and_torsion_along_a_direction(s: Saddle) -> None:
    """k_t = -dn . t and tau = -dn . b by finite differences; Euler's formula ties them to the principal
    values.
    """
    k_t, k_b, tau, tangent, binormal = s.along(PLACES, 0.7)
    change = np.array(
        [derivative(s.normal, xy[None], t[:2])[0] for xy, t in zip(PLACES, tangent, strict=True)]
    )
    assert -np.einsum("ni,ni->n", change, tangent) == pytest.approx(k_t, abs=1e-10)
    assert -np.einsum("ni,ni->n", change, binormal) == pytest.approx(tau, abs=1e-10)
    k_max, k_min, dir_max, _ = s.principal(PLACES)
    cosine = np.einsum("ni,ni->n", tangent, dir_max)
    assert k_max * cosine**2 + k_min * (1 - cosine**2) == pytest.approx(k_t, abs=ROUND_OFF)
    assert k_t + k_b == pytest.approx(k_max + k_min, abs=ROUND_OFF)
    assert s.normal_curvature(PLACES, tangent) == pytest.approx(k_t, abs=ROUND_OFF)
    assert s.torsion(PLACES, tangent) == pytest.approx(tau, abs=ROUND_OFF)


@pytest.mark.parametrize("s", SADDLES)
def test_rulings_are_straight_and_lie_on_the_surface(s: Saddle) -> None:
    for ruling in s.rulings(PLACES):
        for far in (-50.0, 7.0, 80.0):
            there = s.point(PLACES) + far * ruling
            assert s.height(there[:, 0], there[:, 1]) == pytest.approx(there[:, 2], abs=1e-10)
        assert s.normal_curvature(PLACES, ruling) == pytest.approx(0.0, abs=ROUND_OFF)
    # At the saddle point of an even saddle the geodesic torsion of a ruling is 2a in size (derived here).
    even = Saddle(0.01, 0.01, 0.0)
    assert abs(even.torsion([[0.0, 0.0]], even.rulings([[0.0, 0.0]])[0])[0]) == pytest.approx(0.02)


@given(st.floats(0.001, 0.05), st.floats(0.001, 0.05), st.floats(-3.0, 3.0), st.floats(1.01, 3.0))
@settings(max_examples=40, derandomize=True, deadline=None)
def test_curvatures_fall_along_rays(a: float, b: float, angle: float, farther: float) -> None:
    """So the extremes over an outline are at the saddle point or on the edge
    (docs/theory-surface.md#curvature).
    """
    ray = 10.0 * np.array([[math.cos(angle), math.sin(angle)]])
    near, far = Saddle(a, b, 0.2).principal(ray), Saddle(a, b, 0.2).principal(farther * ray)
    assert far[0][0] < near[0][0]
    assert far[1][0] > near[1][0]


# ------------------------------------------------------------------------------------------ nearest point


@pytest.mark.parametrize("s", SADDLES)
def test_closest_finds_its_own_offsets(s: Saddle) -> None:
    """Up to the least reach W/(2a) above and W/(2b) below, the foot of an offset point is where it came
    from.
    """
    rng = np.random.default_rng(7)
    xy = rng.uniform(-40.0, 40.0, (4000, 2))
    distance = rng.uniform(-0.99, 0.99, 4000)
    distance *= s.stretch(xy) * np.where(distance > 0, 0.5 / s.a_per_mm, 0.5 / s.b_per_mm)
    foot, found = s.closest(s.offset(xy, distance))
    assert np.abs(found - distance).max() < ROUND_OFF * 100.0
    assert np.abs(foot - xy).max() < NANOMETRE


@pytest.mark.parametrize("s", SADDLES)
def test_closest_against_a_global_search(s: Saddle) -> None:
    """Any distance away, far beyond the focal distance too: never farther than the best of many scipy
    searches.
    """
    rng = np.random.default_rng(3)
    points = rng.uniform(-120.0, 120.0, (10, 3))
    foot, distance = s.closest(points)
    across = np.cross(points - s.point(foot), s.normal(foot))
    assert np.abs(across).max() < 1e-9
    above = points[:, 2] > s.height(points[:, 0], points[:, 1])
    assert ((distance > 0) == above).all()
    for point, far in zip(points, np.abs(distance), strict=True):

        def square(xy, point=point):
            return float(((s.point(xy) - point) ** 2).sum())

        best = min(
            optimize.minimize(square, start, tol=1e-12).fun for start in rng.uniform(-100.0, 100.0, (12, 2))
        )
        assert far == pytest.approx(math.sqrt(best), abs=1e-5)


def test_closest_beyond_the_focal_line() -> None:
    """On x' = 0 above the focal height 1/(2a) two feet are equally near: x' = +-sqrt((z - 1/(2a))/a)
    (derived here).
    """
    s = Saddle(0.01, 0.01, 0.0)
    foot, distance = s.closest([[0.0, 0.0, 60.0], [1e-13, 0.0, 60.0], [0.0, 0.0, 50.0], [0.0, 0.0, -60.0]])
    assert np.abs(foot[0, 0]) == pytest.approx(math.sqrt(10.0 / 0.01))
    assert foot[1, 0] == pytest.approx(math.sqrt(10.0 / 0.01))
    assert distance[:2] == pytest.approx(math.hypot(math.sqrt(1000.0), 50.0))
    assert (foot[2], distance[2]) == (pytest.approx(0.0, abs=NANOMETRE), pytest.approx(50.0))
    assert np.abs(foot[3, 1]) == pytest.approx(math.sqrt(1000.0))


def test_closest_says_when_it_does_not_converge(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(module, "_MAX_NEWTON", 1)
    with pytest.raises(NotConverged, match="nearest point on the saddle"):
        Saddle(0.01, 0.01, 0.0).closest([[30.0, 10.0, 40.0]])


# ------------------------------------------------------------------------------------------ lengths and areas


def test_area_of_a_square_and_a_disc() -> None:
    """a = 0.01: square |x|, |y| <= 30 4001.40626 mm^2; disc of r0 = 30 pi/(6a^2) ((1 + 4a^2 r0^2)^1.5 -
    1) (derived).
    """
    s = Saddle(0.01, 0.01, 0.0)
    assert s.area_mm2(shapely.box(-30, -30, 30, 30)) == pytest.approx(4001.40626, abs=6e-6)
    exact = math.pi / (6 * 0.01**2) * ((1 + 4 * 0.01**2 * 30**2) ** 1.5 - 1)
    assert exact == pytest.approx(3068.38787, abs=6e-6)
    angle = 2 * math.pi * np.arange(2000) / 2000
    grown = 30.0 * math.sqrt(2 * math.pi / 2000 / math.sin(2 * math.pi / 2000))  # equal plan area
    disc = shapely.Polygon(grown * np.column_stack((np.cos(angle), np.sin(angle))))
    assert s.area_mm2(disc) == pytest.approx(exact, rel=1e-9)


def test_area_against_scipy_with_hole_and_turn() -> None:
    s = Saddle(0.02, 0.007, 0.4)
    ring = shapely.box(-30, -20, 40, 25).difference(shapely.box(-5, -6, 11, 9))

    def density(y, x):
        return float(s.stretch([[x, y]])[0])

    outer = quadrature.dblquad(density, -30, 40, -20, 25, epsabs=1e-8)[0]
    inner = quadrature.dblquad(density, -5, 11, -6, 9, epsabs=1e-8)[0]
    assert s.area_mm2(ring) == pytest.approx(outer - inner, rel=1e-10)
    assert s.area_mm2(shapely.Polygon()) == 0.0


def test_stock_over_the_saddle() -> None:
    """Between a flat top z = a S^2 and the surface over |x|, |y| <= S lie exactly 4 a S^4: 32400 mm^3
    (derived here).
    """
    s = Saddle(0.01, 0.01, 0.0)
    volume = integrate(shapely.box(-30, -30, 30, 30), lambda xy: 9.0 - s.height(*xy.T))
    assert volume == pytest.approx(32400.0, rel=ROUND_OFF)


def test_quadrature_rule_is_exact_to_degree_eight_and_owns_up() -> None:
    triangles = triangulated(shapely.Polygon([(0, 0), (1, 0), (0, 1)]))
    xy, weights = nodes_and_weights(triangles)
    for i in range(9):
        for j in range(9 - i):  # integral of x^i y^j over the unit triangle: i! j! / (i + j + 2)!
            exact = math.factorial(i) * math.factorial(j) / math.factorial(i + j + 2)
            assert xy[:, 0] ** i * xy[:, 1] ** j @ weights == pytest.approx(exact, rel=1e-13)
    with pytest.raises(NotConverged, match="integral over the outline"):
        integrate(shapely.box(0, 0, 1, 1), lambda xy: (xy[:, 0] > 1 / 3).astype(float))
    assert own_quadrature.QUADRATURE < 1e-9


@pytest.mark.parametrize("s", SADDLES)
@pytest.mark.parametrize("end", [(30.0, 0.0), (0.01, 0.02), (-25.0, 40.0), (0.0, 0.0)])
def test_line_length_against_scipy(s: Saddle, end) -> None:
    start = np.array([-12.0, 5.0])
    step = np.array(end)

    def speed(f):
        return math.hypot(np.hypot(*step), float(np.array(s.gradient(*(start + f * step))) @ step))

    exact = quadrature.quad(speed, 0.0, 1.0, epsabs=1e-13, epsrel=1e-13)[0]
    assert s.line_length_mm(start, start + step)[0] == pytest.approx(exact, rel=1e-13, abs=1e-13)


def test_line_length_forms_agree_where_they_meet() -> None:
    """Across the switch from quadrature to the closed form the length does not jump."""
    s = Saddle(0.01, 0.01, 0.0)
    switch = module._SMALL_SLOPE_CHANGE / 0.02
    ends = switch * np.array([[1 - 1e-9, 0.0], [1 + 1e-9, 0.0]])
    near, far = s.line_length_mm(np.zeros((2, 2)), ends)
    assert far - near == pytest.approx(2e-9 * switch, rel=0.1)
