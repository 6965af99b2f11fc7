"""Stepover against scallop: worked values, a brute-force sweep of the ball, scipy, and the order of the
approximations.

"Derived here" values come from docs/theory-surface.md.
"""

from __future__ import annotations

import json
import math

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import optimize
from scipy.integrate import quad

from anticlast.cutter import Cutter
from anticlast.errors import BadInput, CannotPlan, NotConverged
from anticlast.outline import Outline, circle, rectangle
from anticlast.passes import _scallop_kernels as kernels
from anticlast.passes.cusp import turned_form
from anticlast.passes.scallop import (
    cusp_height,
    flat_height,
    flat_step,
    length_floor_mm,
    lines_beside,
    local_scallop,
    local_step,
    plan_of,
    plan_step,
    roughness_um,
    scallop_answer,
    scallop_field,
    second_order_height,
    second_order_step,
    surface_step,
)
from anticlast.saddle import Saddle

MICROMETRE = 1e-3
NANOMETRE = 1e-6
PICOMETRE = 1e-9
INCH = 25.4
BALL = Cutter(1, "ball", 3.0, 3.0, 2, 18.0, 3.0, 30.0)


def centred_um(a: float, radius_mm: float, step_mm: float, direction_deg: float) -> float:
    """Cusp at the saddle point of an even saddle, passes half a step either side, um."""
    s = Saddle(a, a, 0.0)
    return (
        cusp_height(s, radius_mm, 0.0, -step_mm / 2, step_mm / 2, math.radians(direction_deg))[0] / MICROMETRE
    )


def swept_height(s, radius_mm, xy, line_mm, direction_rad, allowance_mm=0.0, spacing_mm=0.0005):
    """What one pass leaves along the normals at xy (n, 2), by brute force: balls closely spaced along
    the pass line.
    """
    c, sn = math.cos(direction_rad), math.sin(direction_rad)
    u = xy[:, 0] * c + xy[:, 1] * sn
    along = np.arange(u.min() - 0.6, u.max() + 0.6, spacing_mm)
    on_line = np.column_stack((along * c - line_mm * sn, along * sn + line_mm * c))
    centres = s.offset(on_line, radius_mm + allowance_mm)
    points, normals = s.point(xy), s.normal(xy)
    least = np.full(len(xy), np.inf)
    for k, (q, n) in enumerate(zip(points, normals, strict=True)):
        to = centres - q
        up = to @ n
        room = radius_mm**2 - (np.einsum("ni,ni->n", to, to) - up * up)
        least[k] = (up - np.sqrt(np.where(room >= 0, room, np.nan)))[room >= 0].min()
    return least


# ------------------------------------------------------------------------------------------ flat rule


def test_flat_rule_worked_numbers() -> None:
    """R - sqrt(R^2 - s^2/4): numbers in the handbook style (common practice), digits recomputed."""
    assert flat_height(3.0, 0.5) == pytest.approx(0.010434814, abs=6e-10)
    assert flat_step(3.0, 0.005) == pytest.approx(0.346265794, abs=6e-10)
    assert flat_height(5.0, 0.5) / MICROMETRE == pytest.approx(6.253911, abs=6e-7)
    assert flat_height(6.0, 0.5) / MICROMETRE == pytest.approx(5.210596, abs=6e-7)
    assert flat_height(0.25 * INCH, 0.050 * INCH) / INCH == pytest.approx(0.001253141, abs=6e-10)
    assert flat_height(0.125 * INCH, 0.020 * INCH) / INCH == pytest.approx(0.000400642, abs=6e-10)
    assert flat_height(3.0, flat_step(3.0, 0.7)) == pytest.approx(0.7, abs=PICOMETRE)


def test_flat_rule_refuses_the_impossible() -> None:
    with pytest.raises(CannotPlan, match="do not overlap"):
        flat_height(3.0, 6.1)
    with pytest.raises(CannotPlan, match="is impossible"):
        flat_step(3.0, 3.0)


def test_nearly_flat_saddle_obeys_the_flat_rule_on_slopes_too() -> None:
    """Slope values: R = 3, plan step 0.5 on a plane tilted across the feed (derived here: s = step / cos
    slope).

    A saddle of very small curvature, far out, is such a plane.
    """
    s = Saddle(1e-7, 1e-7, 0.0)
    for slope_deg, height in ((15, 0.01118540), (30, 0.01392119), (45, 0.02090618), (60, 0.04196011)):
        y = -math.tan(math.radians(slope_deg)) / (2 * s.b_per_mm)
        found = cusp_height(s, 3.0, 0.0, y - 0.25, y + 0.25, 0.0)[0]
        assert found == pytest.approx(height, abs=15 * PICOMETRE), slope_deg
    flatter = Saddle(1e-9, 1e-9, 0.0)
    assert cusp_height(flatter, 3.0, 0.0, -0.25, 0.25, 0.3)[0] == pytest.approx(
        flat_height(3.0, 0.5), abs=PICOMETRE
    )


# ------------------------------------------------------------------------------------------ exact cusps


@pytest.mark.parametrize(
    ("a", "radius", "step", "along_x", "along_y"),
    [
        (0.01, 3.0, 0.5, 11.0645715, 9.8058450),
        (0.02, 3.0, 0.5, 11.6951182, 9.1776626),
        (0.01, 5.0, 0.6, 9.9118518, 8.1053538),
        (0.005, 3.0, 0.5, 10.7495943, 10.1202312),
    ],
)
def test_exact_cusp_at_the_saddle_point(a, radius, step, along_x, along_y) -> None:
    """Ball contacts half a step either side on the true parabola (derived here), um; to the digits
    printed.
    """
    assert centred_um(a, radius, step, 0.0) == pytest.approx(along_x, abs=1e-6)
    assert centred_um(a, radius, step, 90.0) == pytest.approx(along_y, abs=1e-6)


@pytest.mark.parametrize(
    ("a", "radius", "swept", "formula"),
    [(0.02, 3.0, 10.28381, 10.26667), (0.02, 5.0, 6.00337, 6.00000), (0.05, 5.0, 4.69080, 4.68750)],
)
def test_feed_along_a_ruling(a, radius, swept, formula) -> None:
    """Swept heights, um, feed along a ruling, s = 0.5: the torsion term counts (cusp metric of Kim 2007,
    derived here).

    Without it the section across the feed alone would say s^2/(8R): 10.41667, 6.25, 6.25.
    """
    assert centred_um(a, radius, 0.5, 45.0) == pytest.approx(swept, abs=6e-6)
    s = Saddle(a, a, 0.0)
    second = second_order_height(s, radius, [[0.0, 0.0]], math.pi / 4, 0.5)[0] / MICROMETRE
    assert second == pytest.approx(formula, abs=6e-6)


ODD = [
    pytest.param(Saddle(0.01, 0.006, 0.3), 3.0, (12.0, -9.0), 0.5, 0.9, 0.0, id="odd-direction"),
    pytest.param(Saddle(0.02, 0.05, -1.2), 4.0, (-6.0, 4.0), 0.8, 2.2, 0.0, id="steep"),
    pytest.param(Saddle(0.03, 0.01, 0.8), 6.0, (3.0, 2.0), 0.6, -0.4, 0.4, id="with-allowance"),
    pytest.param(Saddle(0.05, 0.05, 0.0), 8.0, (0.5, -1.0), 1.0, 0.7, 0.0, id="ball-nearly-too-large"),
]


@pytest.mark.parametrize(("s", "radius", "uv", "step", "direction", "allowance"), ODD)
def test_cusp_against_a_brute_force_sweep(s, radius, uv, step, direction, allowance) -> None:
    """The highest residual stock across the strip at one abscissa, from thousands of balls along each
    pass.
    """
    u, v = uv
    found = cusp_height(s, radius, u, v, v + step, direction, allowance)[0]
    across = np.linspace(v + 0.2 * step, v + 0.8 * step, 601)
    xy = plan_of(u, across, direction)
    left = [swept_height(s, radius, xy, line, direction, allowance) for line in (v, v + step)]
    highest = float(np.minimum(*left).max()) - allowance
    # Samples 0.6 step / 600 apart miss the crest of a cusp with flanks of slope s / 2R by at most this:
    missed = 0.5 * (0.6 * step / 600) * 0.75 * step / radius
    assert highest <= found + 2 * NANOMETRE
    assert found - highest <= missed


@pytest.mark.parametrize(("s", "radius", "uv", "step", "direction", "allowance"), ODD)
def test_cusp_against_scipy(s, radius, uv, step, direction, allowance) -> None:
    """The same definition solved slowly: nearest centre by bounded search, height and crest by bracketing."""
    u, v = uv

    def residual(across: float, line: float) -> float:
        xy = plan_of(u, across, direction)
        q, n = s.point(xy)[0], s.normal(xy)[0]

        def clear(h: float) -> float:
            def far(w: float) -> float:
                centre = s.offset(plan_of(w, line, direction), radius + allowance)[0]
                return float(np.linalg.norm(q + h * n - centre))

            return (
                optimize.minimize_scalar(
                    far, bounds=(u - 1, u + 1), options={"xatol": 1e-10}, method="bounded"
                ).fun
                - radius
            )

        return optimize.brentq(clear, -0.05, 0.5 * radius, xtol=1e-13)

    crest = optimize.brentq(
        lambda x: residual(x, v) - residual(x, v + step), v + 0.2 * step, v + 0.8 * step, xtol=1e-11
    )
    found = cusp_height(s, radius, u, v, v + step, direction, allowance)[0]
    assert found == pytest.approx(residual(crest, v) - allowance, abs=PICOMETRE)


@given(
    st.floats(0.002, 0.03),
    st.floats(0.002, 0.03),
    st.floats(-3.0, 3.0),
    st.floats(-40.0, 40.0),
    st.floats(-40.0, 40.0),
    st.floats(-3.2, 3.2),
    st.floats(1e-5, 0.4),
    st.floats(0.0, 0.5),
)
@settings(max_examples=150, derandomize=True, deadline=None)
def test_plan_step_leaves_its_scallop(a, b, turn, u, v, direction, share, allowance) -> None:
    s, radius = Saddle(a, b, turn), 5.0
    step = plan_step(s, radius, u, v, direction, share * radius, allowance)
    assert step[0] > 0
    height = cusp_height(s, radius, u, v, v + step, direction, allowance)
    assert height[0] == pytest.approx(share * radius, abs=PICOMETRE)
    assert cusp_height(s, radius, u, v + step, v, direction, allowance)[0] == pytest.approx(
        height[0], abs=PICOMETRE
    )


def test_turning_job_and_direction_together_changes_nothing() -> None:
    args = (3.0, 7.0, -11.0)
    plain = plan_step(Saddle(0.01, 0.006, 0.0), *args, 0.5, 0.01)
    turned = plan_step(Saddle(0.01, 0.006, 1.3), *args, 1.8, 0.01)
    assert turned == pytest.approx(plain, abs=PICOMETRE)


def test_lines_beside_put_the_cusp_where_asked() -> None:
    s, direction = Saddle(0.012, 0.007, 0.4), 1.1
    right, left = lines_beside(s, 4.0, 9.0, -13.0, direction, 0.02, 0.1)
    assert right[0] < -13.0 < left[0]
    assert cusp_height(s, 4.0, 9.0, right, left, direction, 0.1)[0] == pytest.approx(0.02, abs=PICOMETRE)
    xy = plan_of(9.0, -13.0, direction)
    for line in (right[0], left[0]):
        residual = swept_height(s, 4.0, xy, line, direction, 0.1, spacing_mm=2e-5)
        assert residual[0] - 0.1 == pytest.approx(0.02, abs=2 * NANOMETRE)


def interpreted(kernel):
    """Return a kernel's own Python source; without compilation it is that already."""
    return getattr(kernel, "py_func", kernel)


def test_kernels_agree_with_their_interpreted_twins() -> None:
    """Compiled and interpreted, row by row, the same numbers (the same source, so round-off apart)."""
    form = turned_form(Saddle(0.01, 0.006, 0.3), 0.7)
    u, v = np.array([3.0, -20.0, 14.0]), np.array([5.0, 11.0, -30.0])
    scallop = np.full(3, 0.01)
    compiled, plain, bad = np.empty(3), np.empty(3), np.empty(3)
    kernels.next_lines(form, 3.0, 0.2, u, v, scallop, compiled, bad)
    interpreted(kernels.next_lines)(form, 3.0, 0.2, u, v, scallop, plain, bad)
    assert plain == pytest.approx(compiled, abs=PICOMETRE)
    step = plain.copy()
    kernels.cusps(form, 3.0, 0.2, u, v, v + step, compiled, bad)
    interpreted(kernels.cusps)(form, 3.0, 0.2, u, v, v + step, plain, bad)
    assert plain == pytest.approx(compiled, abs=PICOMETRE)
    other = np.empty(3)
    kernels.lines_beside(form, 3.0, 0.2, u, v, scallop, compiled, other, bad)
    interpreted(kernels.lines_beside)(form, 3.0, 0.2, u, v, scallop, plain, other, bad)
    assert plain == pytest.approx(compiled, abs=PICOMETRE)


@pytest.mark.parametrize("n", [0, 1, 3])
def test_shapes(n: int) -> None:
    s, u, v = Saddle(0.01, 0.01, 0.0), np.zeros(n), np.zeros(n)
    assert plan_step(s, 3.0, u, v, 0.0, 0.01).shape == (n,)
    assert cusp_height(s, 3.0, u, v, v + 0.5, 0.0).shape == (n,)
    assert surface_step(s, u, v, v + 0.5, 0.0).shape == (n,)
    assert local_scallop(s, 3.0, np.zeros((n, 2)), 0.0, 0.5).shape == (n,)


def test_passes_on_one_another_leave_nothing() -> None:
    assert cusp_height(Saddle(0.01, 0.01, 0.0), 3.0, 5.0, 2.0, 2.0, 0.4) == pytest.approx([0.0])


def test_what_cannot_be_is_refused() -> None:
    s = Saddle(0.1, 0.1, 0.0)
    with pytest.raises(CannotPlan, match="takes less than 5 mm") as caught:
        plan_step(s, 5.0, 0.0, 0.0, 0.0, 0.01)
    assert (caught.value.check, caught.value.limit) == ("cutter fits", pytest.approx(5.0))
    with pytest.raises(CannotPlan, match=r"takes less than 4\.7 mm"):
        cusp_height(s, 4.8, 0.0, 0.0, 0.3, 0.0, allowance_mm=0.3)
    assert plan_step(s, 5.0, 20.0, 0.0, 0.0, 0.01)[0] > 0  # out there it fits
    with pytest.raises(CannotPlan, match="is impossible"):
        plan_step(s, 2.0, 0.0, 0.0, 0.0, 2.5)
    with pytest.raises(CannotPlan, match="ridge between them"):
        cusp_height(s, 2.0, 0.0, 0.0, 4.5, 0.0)
    with pytest.raises(NotConverged, match="scallop at a stepover"):
        local_scallop(s, 2.0, [[0.0, 0.0]], 0.0, 4.5)


# ------------------------------------------------------------------------------------------ steps and second
# order


def test_surface_step_against_scipy() -> None:
    """Square to the feed, the strip of plan width dv is W / sqrt(1 + z_u^2) dv wide: by scipy's
    quadrature.
    """
    s, direction = Saddle(0.02, 0.007, 0.4), 0.9
    side = np.array([-math.sin(direction), math.cos(direction)])
    feed = np.array([math.cos(direction), math.sin(direction)])

    def width(v: float) -> float:
        xy = plan_of(15.0, v, direction)
        zu, zv = (float(np.array(s.gradient(*xy[0])) @ d) for d in (feed, side))
        return math.sqrt((1 + zu * zu + zv * zv) / (1 + zu * zu))

    exact = quad(width, -4.0, 3.0, epsabs=1e-13)[0]
    assert surface_step(s, 15.0, 3.0, -4.0, direction)[0] == pytest.approx(exact, abs=PICOMETRE)


@pytest.mark.parametrize("allowance", [0.0, 0.5])
def test_second_order_form_is_of_second_order(allowance: float) -> None:
    """Halving the stepover divides its error by 16 (h itself by 4): slope 4 between exact and second
    order.
    """
    s, xy, direction = Saddle(0.02, 0.008, 0.3), [[9.0, -14.0]], 0.8
    steps = 0.8 * 0.5 ** np.arange(5)
    error = [
        abs(
            local_scallop(s, 4.0, xy, direction, step, allowance)
            - second_order_height(s, 4.0, xy, direction, step, allowance)
        )[0]
        for step in steps
    ]
    slope = np.polyfit(np.log(steps), np.log(error), 1)[0]
    assert slope == pytest.approx(4.0, abs=0.1)
    assert error[0] < 0.02 * 0.8**2 / (8 * 4.0)


def test_second_order_step_undoes_height() -> None:
    s, xy = Saddle(0.02, 0.008, 0.3), [[9.0, -14.0], [0.0, 0.0]]
    step = second_order_step(s, 4.0, xy, 0.8, 0.01, 0.2)
    assert second_order_height(s, 4.0, xy, 0.8, step, 0.2) == pytest.approx(0.01, abs=PICOMETRE)


def test_local_step_and_local_scallop_undo_each_other() -> None:
    s, xy = Saddle(0.02, 0.008, 0.3), [[9.0, -14.0], [0.0, 0.0], [-20.0, 3.0]]
    for step in (0.05, 0.5, 3.0):
        height = local_scallop(s, 4.0, xy, 0.8, step, 0.2)
        back = [local_step(s, 4.0, [place], 0.8, h, 0.2)[0] for place, h in zip(xy, height, strict=True)]
        assert np.array(back) == pytest.approx(step, abs=PICOMETRE)


# ------------------------------------------------------------------------------------------ lengths of whole
# rasters

# Square |x|, |y| <= 30, lengths in mm, from the cusp metric (derived here, on cells of 0.1 mm: their centres
# stay 0.05 mm clear of the edge, where the step is tightest): a, R, h, least length, then for feed along x
# and along y: constant plan step, length at it, length with the step varied pass by pass.
TABLE = [
    (0.005, 3.0, 0.010, 7457, 0.4632, 7887, 7676, 0.4756, 7681, 7459),
    (0.010, 3.0, 0.010, 7966, 0.4125, 9225, 8419, 0.4285, 8882, 8006),
    (0.015, 3.0, 0.010, 8786, 0.3578, 11288, 9549, 0.3714, 10877, 8961),
    (0.020, 3.0, 0.010, 9825, 0.3091, 14027, 11038, 0.3190, 13591, 10292),
    (0.010, 5.0, 0.005, 8575, 0.3721, 10228, 9371, 0.3964, 9601, 8620),
]


@pytest.mark.parametrize("row", TABLE)
def test_raster_lengths_and_the_floor(row) -> None:
    a, radius, h, floor, *feeds = row
    s = Saddle(a, a, 0.0)
    assert length_floor_mm(s, rectangle([60.0, 60.0]), radius, h) == pytest.approx(floor, abs=0.6)
    u, inner = np.linspace(-30.0, 30.0, 241), np.linspace(-29.95, 29.95, 241)
    for direction, (step, constant, varied) in ((0.0, feeds[:3]), (math.pi / 2, feeds[3:])):
        xy = plan_of(*np.meshgrid(inner, inner), direction)
        tangent = s.tangent(xy, direction)
        # Plan step to leading order: surface stepover times sqrt(1 + z_u^2) / W.
        plan = second_order_step(s, radius, xy, direction, h) / (np.hypot(*tangent[:, :2].T) * s.stretch(xy))
        plan = plan.reshape(241, 241)
        assert plan.min() == pytest.approx(step, abs=6e-5)
        ends = [plan_of(np.full(241, side), u, direction) for side in (-30.0, 30.0)]
        length = s.line_length_mm(*ends)
        assert np.trapezoid(length, u) / plan.min() == pytest.approx(constant, rel=2e-4)
        assert np.trapezoid(length / plan.min(axis=1), u) == pytest.approx(varied, rel=7e-4)
        # The exact step differs by a share of about h / R, and the next pass is one step farther out, where
        # it is steeper.
        exact = plan_step(s, radius, *np.meshgrid(u[::8], u[::8]), direction, h)
        assert exact.min() == pytest.approx(step, rel=0.006)


def test_floor_scales_and_is_not_beaten_by_the_outline() -> None:
    """Length goes with 1/sqrt(h) exactly, and adds up over two halves of an outline."""
    s = Saddle(0.01, 0.006, 0.3)
    whole = length_floor_mm(s, rectangle([40.0, 30.0]), 3.0, 0.01)
    assert length_floor_mm(s, rectangle([40.0, 30.0]), 3.0, 0.0025) == pytest.approx(2 * whole, rel=1e-9)
    halves = [length_floor_mm(s, rectangle([20.0, 30.0], 0.0, (x, 0.0)), 3.0, 0.01) for x in (-10.0, 10.0)]
    assert sum(halves) == pytest.approx(whole, rel=1e-9)
    with pytest.raises(CannotPlan, match="does not fit"):
        length_floor_mm(s, rectangle([40.0, 30.0]), 60.0, 0.01)


def test_roughness_of_a_cusp() -> None:
    """R = 3, s = 0.5: Ra 2.67664 um, Rz 10.43481 um for circular arcs (derived here); the parabola is
    within 0.04 %.
    """
    ra, rz = roughness_um(flat_height(3.0, 0.5))
    assert rz == pytest.approx(10.43481, abs=6e-6)
    assert ra == pytest.approx(2.67664, rel=4e-4)
    x = (np.arange(200001) + 0.5) / 200001 - 0.5
    profile = 4 * x * x  # the parabola of height 1
    assert roughness_um(MICROMETRE)[0] == pytest.approx(np.abs(profile - profile.mean()).mean(), abs=1e-9)


# ------------------------------------------------------------------------------------------ answers


def test_answer_for_a_scallop() -> None:
    s, outline = Saddle(0.004, 0.004, 0.0), rectangle([90.0, 90.0])
    answer = scallop_answer(s, outline, BALL, 0.0, scallop_mm=0.005)
    data = answer.as_json()
    assert json.loads(json.dumps(data)) == data
    assert data["scallop_mm"] == {"smallest": 0.005, "mean": 0.005, "largest": 0.005}
    # Feed along x: convex across, tightest at the saddle point, widest at the corners (curvatures fall
    # outwards).
    assert data["at"]["tightest"] == pytest.approx([0.0, 0.0], abs=0.05)
    assert np.abs(data["at"]["widest"]) == pytest.approx([45.0, 45.0], abs=1e-9)
    steps = data["stepover_mm"]
    assert steps["tightest"] == pytest.approx(local_step(s, 3.0, [[0.0, 0.0]], 0.0, 0.005)[0], rel=1e-9)
    assert steps["widest"] == pytest.approx(local_step(s, 3.0, [[45.0, 45.0]], 0.0, 0.005)[0], rel=1e-9)
    assert steps["tightest"] < steps["mean"] < steps["widest"]
    assert data["flat_rule"]["stepover_mm"] == pytest.approx(0.346265794, abs=6e-10)
    assert data["flat_rule"]["leaves_mm"]["largest"] == pytest.approx(
        local_scallop(s, 3.0, [[0.0, 0.0]], 0.0, flat_step(3.0, 0.005))[0], abs=PICOMETRE
    )
    assert data["flat_rule"]["leaves_mm"]["largest"] > 0.0051  # the flat rule breaks the limit by over 2 %
    assert (data["rz_um"], data["ra_um"]) == (pytest.approx(5.0), pytest.approx(1.2830, abs=1e-4))


def test_answer_for_a_stepover_with_area_mean() -> None:
    s, outline = Saddle(0.01, 0.02, 0.5), circle(40.0, (5.0, 0.0))
    answer = scallop_answer(s, outline, BALL, 1.0, stepover_mm=0.4, allowance_mm=0.1)
    assert answer.stepover_mm == (0.4, 0.4, 0.4)
    low, mean, high = answer.scallop_mm
    assert low < mean < high
    grid = outline.grid(0.5)
    heights = local_scallop(s, 3.0, grid, 1.0, 0.4, 0.1)
    assert (low, high) == (pytest.approx(heights.min(), rel=2e-3), pytest.approx(heights.max(), rel=2e-3))
    assert low <= heights.min()
    assert high >= heights.max()
    assert mean == pytest.approx(np.average(heights, weights=s.stretch(grid)), rel=1e-3)
    at_tight = local_scallop(s, 3.0, [answer.tightest_at_mm], 1.0, 0.4, 0.1)[0]
    assert at_tight == pytest.approx(high, abs=PICOMETRE)
    assert outline.contains([answer.tightest_at_mm, answer.widest_at_mm]).all()
    assert answer.flat_scallop_mm == pytest.approx(flat_height(3.0, 0.4))


def test_answer_reads_well_in_both_units() -> None:
    outline = Outline(shapely.box(-45, -45, 45, 45))
    answer = scallop_answer(Saddle(0.004, 0.004, 0.0), outline, BALL, math.pi / 2, scallop_mm=0.005)
    text = "\n".join(answer.lines())
    assert "T1, ball diameter 6.000 mm, feed at 90 deg from X" in text
    assert "at most 1.9 % under what it says" in text
    assert "-0.00" not in text
    assert "ball diameter 0.2362 inch" in "\n".join(answer.lines("inch"))


def test_answer_wants_a_ball_and_one_wish() -> None:
    s, outline = Saddle(0.004, 0.004, 0.0), rectangle([20.0, 20.0])
    flat = Cutter(3, "flat", 3.0, 0.0, 2, 18.0, 3.0, 30.0)
    with pytest.raises(BadInput, match="cutter 3 is a flat end mill"):
        scallop_answer(s, outline, flat, 0.0, scallop_mm=0.005)
    for wishes in ({}, {"scallop_mm": 0.005, "stepover_mm": 0.3}):
        with pytest.raises(BadInput, match="exactly one"):
            scallop_answer(s, outline, BALL, 0.0, **wishes)
    with pytest.raises(CannotPlan, match="does not fit"):
        scallop_answer(Saddle(0.2, 0.2, 0.0), outline, BALL, 0.0, scallop_mm=0.005)


def test_field_for_pictures() -> None:
    s, outline = Saddle(0.01, 0.01, 0.0), circle(40.0)
    field = scallop_field(s, outline, 3.0, 0.0, scallop_mm=0.005, samples=41)
    assert field.stepover_mm.shape == field.scallop_mm.shape == (len(field.y_mm), len(field.x_mm)) == (41, 41)
    assert np.isnan(field.stepover_mm[0, 0])
    assert field.stepover_mm[20, 20] == pytest.approx(local_step(s, 3.0, [[0.0, 0.0]], 0.0, 0.005)[0])
    other = scallop_field(s, outline, 3.0, 0.0, stepover_mm=0.3, samples=41)
    assert other.scallop_mm[20, 30] == pytest.approx(local_scallop(s, 3.0, [[10.0, 0.0]], 0.0, 0.3)[0])
