"""The virtual cut against closed forms, brute force and a solid modeller. Sources stand beside the values."""

from __future__ import annotations

import math
from types import SimpleNamespace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import optimize

from anticlast.cutter import Cutter
from anticlast.outline import circle, polygon, rectangle
from anticlast.proof import _kernels, _reach_kernels
from anticlast.proof.gouge import deepest_gouge, rim_distances
from anticlast.proof.nodes import lay_nodes, part_depths_mm
from anticlast.proof.pieces import take_pieces
from anticlast.proof.virtual_cut import choose_grid_mm, measure, scallop_map
from anticlast.records import Part, PartMotion, Stock
from anticlast.saddle import Saddle
from anticlast.tolerances import BOUND_SLACK_MM, UNCUT_MM

UM = 1e-3
NM = 1e-6
DEG = math.pi / 180.0


# ------------------------------------------------------------------------------------------------ hand-made motion


def ball(radius_mm: float) -> Cutter:
    return Cutter(1, "ball", radius_mm, radius_mm, 2, 18.0, radius_mm, 30.0)


def mill(radius_mm: float, corner_mm: float) -> Cutter:
    return Cutter(1, "bull" if corner_mm else "flat", radius_mm, corner_mm, 2, 18.0, radius_mm, 30.0)


def motion(tip: np.ndarray, axis: np.ndarray) -> PartMotion:
    count = len(tip)
    index = np.arange(count)
    return PartMotion(
        np.asarray(tip, float), np.asarray(axis, float), index, np.zeros(count, bool), np.ones(count, np.int64),
        index - 1, np.ones(count),
    )  # fmt: skip


def ball_passes(
    saddle: Saddle, radius: float, direction: float, across: np.ndarray, half: float, step: float,
    lift: float = 0.0, axis: tuple[float, float, float] = (0.0, 0.0, 1.0),
) -> PartMotion:  # fmt: skip
    """Parallel passes of a ball in contact with the saddle, back and forth, centres on the offset surface."""
    along = np.linspace(-half, half, math.ceil(2 * half / step) + 1)
    cos, sin = math.cos(direction), math.sin(direction)
    centres = []
    for number, v in enumerate(across):
        u = along if number % 2 == 0 else along[::-1]
        centres.append(saddle.offset(np.column_stack((u * cos - v * sin, u * sin + v * cos)), radius + lift))
    centre = np.concatenate(centres)
    axes = np.tile(np.asarray(axis) / np.linalg.norm(axis), (len(centre), 1))
    return motion(centre - radius * axes, axes)


def job(
    saddle: Saddle,
    outline,
    cutter: Cutter,
    allowance: float | None = 0.3,
    limit: float = 0.01,
    top: float = 20.0,
):
    part = Part(saddle.a_per_mm, saddle.b_per_mm, saddle.rotate_rad, outline)
    stock = Stock("tooling board", top, -30.0, outline, allowance)
    return SimpleNamespace(
        part=part,
        stock=stock,
        cutters=(cutter,),
        operations=(SimpleNamespace(does="finish", scallop_mm=limit),),
    )


def two_passes(a: float, radius: float, step: float, direction: float) -> float:
    """Scallop at the saddle centre between two passes [mm]."""
    saddle = Saddle(a, a, 0.0)
    made = ball_passes(saddle, radius, direction, np.array([-step / 2, step / 2]), 3.0, 0.01)
    cut = measure(job(saddle, rectangle((0.02, 0.02)), ball(radius)), made, 0.01)
    assert cut.highest_mm <= cut.bound_mm <= cut.highest_mm + 1.001 * BOUND_SLACK_MM
    return cut.highest_mm


# ------------------------------------------------------------------------------------------------ known values


@pytest.mark.parametrize(
    ("a", "radius", "step", "along_x_um", "along_y_um"),
    [
        (0.01, 3.0, 0.5, 11.0645715, 9.8058450),
        (0.02, 3.0, 0.5, 11.6951182, 9.1776626),
        (0.01, 5.0, 0.6, 9.9118518, 8.1053538),
        (0.005, 3.0, 0.5, 10.7495943, 10.1202312),
    ],
)
def test_scallop_at_the_saddle_centre(
    a: float, radius: float, step: float, along_x_um: float, along_y_um: float
) -> None:
    """Exact values for the true parabola, derived from a swept-ball height map independent of this code."""
    assert two_passes(a, radius, step, 0.0) / UM == pytest.approx(along_x_um, abs=0.05)
    assert two_passes(a, radius, step, math.pi / 2) / UM == pytest.approx(along_y_um, abs=0.05)


@pytest.mark.parametrize(
    ("a", "radius", "swept_um", "section_um"),
    [(0.02, 3.0, 10.28381, 10.41667), (0.02, 5.0, 6.00337, 6.25), (0.05, 5.0, 4.69080, 6.25)],
)
def test_scallop_along_a_ruling(a: float, radius: float, swept_um: float, section_um: float) -> None:
    """Swept values of the geodesic-torsion case; h = s^2/8 (1/R - k_b - tau^2/(1/R - k_t)), after Kim 2007 (CAD 39:477).

    The formula for the plane section across the feed misses them by up to a third.
    """
    found = two_passes(a, radius, 0.5, math.pi / 4) / UM
    assert found == pytest.approx(swept_um, rel=0.001)
    assert abs(found - section_um) > 0.1


@pytest.mark.parametrize(("radius", "step"), [(3.0, 0.5), (5.0, 2.0), (1.0, 0.2)])
def test_flat_surface_gives_the_handbook_scallop(radius: float, step: float) -> None:
    """h = R - sqrt(R^2 - s^2/4), exact circle geometry, any machining handbook."""
    saddle = Saddle(1e-9, 1e-9, 0.0)
    made = ball_passes(saddle, radius, 0.3, step * np.arange(-3, 4), 6.0, 0.5)
    cut = measure(job(saddle, rectangle((2.0 * step, 1.5 * step)), ball(radius), UNCUT_MM), made, step / 10)
    assert cut.highest_mm == pytest.approx(radius - math.sqrt(radius**2 - step**2 / 4), abs=NM)
    assert cut.gouge.deepest_mm < NM
    assert cut.uncut_area_mm2 == 0.0


@pytest.mark.parametrize(
    ("radius", "corner", "tilt_deg", "step", "expected"),
    [
        (5.0, 0.0, 5.0, 2.0, 8.804518e-3),
        (5.0, 0.0, 10.0, 2.0, 17.542028e-3),
        (5.0, 0.0, 15.0, 2.0, 26.146033e-3),
        (5.0, 1.0, 5.0, 2.0, 10.822983e-3),
        (5.0, 1.0, 10.0, 2.0, 21.097259e-3),
        (5.0, 1.0, 15.0, 2.0, 30.791322e-3),
        (3.0, 0.5, 10.0, 1.0, 8.468168e-3),
        (3.0, 0.5, 20.0, 1.0, 16.140530e-3),
    ],
)
def test_inclined_end_mill_on_a_plane(
    radius: float, corner: float, tilt_deg: float, step: float, expected: float
) -> None:
    """Exact offset-ellipse scallops, derived; their effective radius is that of Vickers & Quan 1989 (J. Eng. Ind. 111:22)."""
    made = leaned_passes(radius, corner, tilt_deg * DEG, np.array([-step / 2, step / 2]))
    cut = measure(job(Saddle(1e-9, 1e-9, 0.0), rectangle((0.4, 0.4)), mill(radius, corner)), made, 0.02)
    assert cut.highest_mm == pytest.approx(expected, abs=2 * NM)
    assert cut.bound_mm <= cut.highest_mm + 1.001 * BOUND_SLACK_MM
    assert abs(cut.gouge.deepest_mm) < NM


def leaned_passes(
    radius: float, corner: float, tilt: float, across: np.ndarray, lift: float = 0.0
) -> PartMotion:
    """Passes along x on the plane z = 0, cutter leaned toward the feed, lowest point of the cutting edge on the plane."""
    axis = np.array([math.sin(tilt), 0.0, math.cos(tilt)])
    down = np.array([math.cos(tilt), 0.0, -math.sin(tilt)])
    tips = []
    for number, v in enumerate(across):
        along = np.linspace(-12.0, 12.0, 41) * (1 if number % 2 == 0 else -1)
        contact = np.column_stack((along, np.full(41, v), np.full(41, lift)))
        tips.append(contact + [0.0, 0.0, corner] - (radius - corner) * down - corner * axis)
    tip = np.concatenate(tips)
    return motion(tip, np.tile(axis, (len(tip), 1)))


# ------------------------------------------------------------------------------------------------ gouge, uncut, tilt


def test_a_path_one_micrometre_down_gouges_one_micrometre() -> None:
    saddle = Saddle(0.01, 0.008, 0.4)
    made = ball_passes(saddle, 3.0, 0.2, 0.3 * np.arange(-8, 9), 4.0, 0.02, lift=-1.0 * UM)
    cut = measure(job(saddle, circle(3.0), ball(3.0)), made, 0.1)
    # Chords add k step^2 / 8 at most: 0.02 * 0.02^2 / 8 = 1e-6 mm.
    assert cut.gouge.deepest_mm == pytest.approx(1.0 * UM, abs=2 * NM)
    assert cut.gouge.deepest_mm <= cut.gouge.bound_mm <= cut.gouge.deepest_mm + 10 * NM
    assert cut.height_mm.min() == pytest.approx(-1.0 * UM, abs=0.1 * UM)


def test_chords_across_a_hollow_gouge_by_their_sagitta() -> None:
    """Straight moves between contacts on the convex line of the saddle: the offset curve's sagitta, kappa L^2 / 8."""
    saddle, radius, length = Saddle(0.01, 0.01, 0.0), 3.0, 0.5
    # Along y the surface is convex: the ball's centres run on radius 50 + 3, and a chord of theirs passes below the arc.
    made = ball_passes(saddle, radius, math.pi / 2, np.array([0.0]), 2.0, length)
    cut = measure(job(saddle, rectangle((0.2, 1.0)), ball(radius), UNCUT_MM), made, 0.05)
    chord = np.linalg.norm(np.diff(made.tip_mm, axis=0), axis=1).max()
    rho = 50.0 + radius
    assert cut.gouge.deepest_mm == pytest.approx(rho - math.sqrt(rho**2 - chord**2 / 4), rel=0.01)


def test_gouge_of_a_leaned_flat_end() -> None:
    made = leaned_passes(5.0, 0.0, 8.0 * DEG, np.array([0.0]), lift=-2.0 * UM)
    cut = measure(job(Saddle(1e-9, 1e-9, 0.0), rectangle((0.4, 0.4)), mill(5.0, 0.0)), made, 0.05)
    assert cut.gouge.deepest_mm == pytest.approx(2.0 * UM, abs=5 * NM)
    assert cut.height_mm.min() == pytest.approx(-2.0 * UM, abs=5 * NM)


def test_heel_of_a_flat_end_digs_in_where_the_surface_is_hollow() -> None:
    """Upright flat end on z = a x^2 touching the tip point: the rim stands a R^2 under the surface, to second order."""
    saddle, radius = Saddle(0.004, 0.004, 0.0), 4.0
    made = motion(np.array([[0.0, -3.0, 0.0], [0.0, 3.0, 0.0]]), np.tile([0.0, 0.0, 1.0], (2, 1)))
    cut = measure(job(saddle, rectangle((12.0, 2.0)), mill(radius, 0.0), UNCUT_MM), made, 0.1)
    foot = optimize.minimize_scalar(
        lambda x: (x - radius) ** 2 + (0.004 * x * x) ** 2, bounds=(3.0, 5.0), method="bounded",
        options={"xatol": 1e-12},
    )  # fmt: skip
    assert cut.gouge.deepest_mm == pytest.approx(math.sqrt(foot.fun), abs=10 * NM)


def test_a_missing_pass_is_uncut_or_a_high_scallop() -> None:
    saddle = Saddle(0.005, 0.005, 0.0)
    across = 0.5 * np.arange(-10, 11)
    whole = ball_passes(saddle, 3.0, 0.0, across, 6.0, 0.25)
    gap = ball_passes(saddle, 3.0, 0.0, np.delete(across, slice(6, 14)), 6.0, 0.25)
    made = job(saddle, rectangle((8.0, 8.0)), ball(3.0), allowance=0.3)
    assert measure(made, whole, 0.1).uncut_area_mm2 == 0.0
    cut = measure(made, gap, 0.1)
    # Contacts 4.5 mm apart, each ball under 0.3 mm for sqrt(2 R h - h^2) = 1.308 mm: 1.88 mm of 8 stay as they were.
    left = 4.5 - 2 * math.sqrt(2 * 3.0 * 0.3 - 0.3**2)
    assert cut.uncut_area_mm2 == pytest.approx(8.0 * left, rel=0.08)
    assert cut.highest_mm == cut.bound_mm == 0.3


def test_flat_topped_blank_counts_from_its_top() -> None:
    """Stock 0.05 mm over the surface at the saddle point and cut away nowhere: the whole outline is uncut."""
    saddle = Saddle(0.005, 0.005, 0.0)
    far = motion(np.array([[50.0, 50.0, 40.0], [60.0, 50.0, 40.0]]), np.tile([0.0, 0.0, 1.0], (2, 1)))
    cut = measure(job(saddle, rectangle((2.0, 2.0)), ball(3.0), None, top=0.05), far, 0.1)
    assert cut.uncut_area_mm2 == pytest.approx(4.0, abs=1e-9)
    expected = (0.05 - saddle.height(cut.nodes.xy[:, 0], cut.nodes.xy[:, 1])) / saddle.normal(cut.nodes.xy)[
        :, 2
    ]
    np.testing.assert_allclose(cut.height_mm, expected, atol=1e-12)


def test_a_ball_cuts_the_same_however_it_is_leaned() -> None:
    saddle = Saddle(0.01, 0.007, 0.3)
    across = 0.4 * np.arange(-5, 6)
    made = job(saddle, rectangle((2.0, 2.0)), ball(2.5))
    upright = measure(made, ball_passes(saddle, 2.5, 0.5, across, 3.0, 0.1), 0.05)
    leaned = measure(made, ball_passes(saddle, 2.5, 0.5, across, 3.0, 0.1, axis=(0.3, -0.5, 0.8)), 0.05)
    np.testing.assert_allclose(leaned.height_mm, upright.height_mm, atol=1e-12)
    assert leaned.highest_mm == pytest.approx(upright.highest_mm, abs=1e-12)


def test_turning_part_and_path_together_changes_nothing() -> None:
    turn = 0.7
    outline = circle(3.0)
    flat, turned = Saddle(0.01, 0.006, 0.0), Saddle(0.01, 0.006, turn)
    across = 0.45 * np.arange(-6, 7)
    first = measure(job(flat, outline, ball(3.0)), ball_passes(flat, 3.0, 0.2, across, 4.0, 0.1), 0.05)
    second = measure(
        job(turned, outline, ball(3.0)), ball_passes(turned, 3.0, 0.2 + turn, across, 4.0, 0.1), 0.05
    )
    assert second.highest_mm == pytest.approx(first.highest_mm, abs=2 * BOUND_SLACK_MM)
    assert second.gouge.deepest_mm == pytest.approx(first.gouge.deepest_mm, abs=NM)


# ------------------------------------------------------------------------------------------------ the peak between nodes


def test_highest_scallop_does_not_depend_on_the_grid() -> None:
    """Plain sampling misses a cusp by up to (D/2) tan(asin(s/2R)), derived; the search between nodes does not."""
    saddle, radius, step = Saddle(0.004, 0.004, 0.0), 3.0, 0.5
    made = ball_passes(saddle, radius, 0.37, step * np.arange(-6, 7), 5.0, 0.1)
    outline = rectangle((2.3, 1.9))
    slope = math.tan(math.asin(step / (2 * radius)))
    peaks = []
    for grid in (0.2, 0.1, 0.05, 0.025):
        cut = measure(job(saddle, outline, ball(radius)), made, grid)
        peaks.append(cut.highest_mm)
        miss = cut.highest_mm - cut.height_mm.max()
        assert -NM <= miss <= 0.5 * grid * math.sqrt(2) * slope + BOUND_SLACK_MM
        assert cut.bound_mm <= cut.highest_mm + 1.001 * BOUND_SLACK_MM
    assert max(peaks) - min(peaks) <= BOUND_SLACK_MM


@settings(derandomize=True, max_examples=12, deadline=None)
@given(
    a=st.floats(0.002, 0.02),
    b=st.floats(0.002, 0.02),
    rotate=st.floats(0.0, 3.0),
    direction=st.floats(0.0, 3.0),
    radius=st.floats(1.0, 5.0),
    step=st.floats(0.2, 0.6),
    piece=st.floats(0.02, 0.7),
)
def test_bound_holds_against_dense_brute_force(
    a: float, b: float, rotate: float, direction: float, radius: float, step: float, piece: float
) -> None:
    """No place of a dense sample over all pieces stands over the bound or under the gouge bound."""
    saddle = Saddle(a, b, rotate)
    made = ball_passes(saddle, radius, direction, step * np.arange(-3, 4), 2.0, piece)
    cut = measure(job(saddle, rectangle((0.7, 0.6)), ball(radius), UNCUT_MM), made, 0.1)
    x, y = np.meshgrid(np.linspace(-0.35, 0.35, 57), np.linspace(-0.3, 0.3, 49))
    xy = np.column_stack((x.ravel(), y.ravel()))
    height = brute_heights(saddle, xy, made.tip_mm + radius * made.axis, radius)
    assert height.max() <= cut.bound_mm + NM
    assert cut.bound_mm <= cut.highest_mm + 1.001 * BOUND_SLACK_MM
    assert -height.min() <= cut.gouge.bound_mm + NM


def brute_heights(saddle: Saddle, xy: np.ndarray, centres: np.ndarray, radius: float) -> np.ndarray:
    """Lowest entry of each normal line into any capsule, all pairs, plain numpy: the twin of `sweep`."""
    q, n = saddle.point(xy), saddle.normal(xy)
    lowest = np.full(len(xy), np.inf)
    for c0, c1 in zip(centres[:-1], centres[1:], strict=True):
        lowest = np.minimum(lowest, capsule_entry(q, n, c0, c1, radius))
    return lowest


def capsule_entry(q: np.ndarray, n: np.ndarray, c0: np.ndarray, c1: np.ndarray, radius: float) -> np.ndarray:
    """Entry of many lines into one capsule: lowest of both spheres and of the cylinder between, plain numpy."""
    found = np.full(len(q), np.inf)
    for c in (c0, c1):
        w = q - c
        b = np.einsum("ni,ni->n", w, n)
        root = b * b - np.einsum("ni,ni->n", w, w) + radius**2
        hit = root >= 0.0
        found[hit] = np.minimum(found[hit], (-b - np.sqrt(np.maximum(root, 0.0)))[hit])
    d = c1 - c0
    length = np.linalg.norm(d)
    if length == 0.0:
        return found
    d = d / length
    w = q - c0
    wp, nq = w - np.outer(w @ d, d), n - np.outer(n @ d, d)
    a, b = np.einsum("ni,ni->n", nq, nq), np.einsum("ni,ni->n", wp, nq)
    root = b * b - a * (np.einsum("ni,ni->n", wp, wp) - radius**2)
    with np.errstate(invalid="ignore", divide="ignore"):
        h = (-b - np.sqrt(root)) / a
        along = (w + h[:, None] * n) @ d
    hit = (root >= 0.0) & (along >= 0.0) & (along <= length)
    found[hit] = np.minimum(found[hit], h[hit])
    return found


def test_field_equals_brute_force_over_all_pieces() -> None:
    """Lists of pieces, two rounds, threads: every node as if each piece had been tried on it."""
    saddle, radius = Saddle(0.012, 0.009, 0.5), 2.0
    rng = np.random.default_rng(5)
    xy = rng.uniform(-2.5, 2.5, (60, 2))
    centres = saddle.offset(xy, radius + 1.0)
    centres += (rng.uniform(-0.01, 0.6, 60) - 1.0)[:, None] * saddle.normal(xy)
    made = motion(centres - [0.0, 0.0, radius], np.tile([0.0, 0.0, 1.0], (60, 1)))
    cut = measure(job(saddle, circle(4.0), ball(radius), UNCUT_MM), made, 0.1)
    expected = np.minimum(brute_heights(saddle, cut.nodes.xy, centres, radius), UNCUT_MM)
    expected = np.maximum(expected, part_depths_mm(cut.nodes.xy, circle(4.0), saddle, -30.0))
    np.testing.assert_allclose(cut.height_mm, expected, atol=1e-9)
    assert np.array_equal(cut.owner < 0, expected >= UNCUT_MM)


def test_removed_material_against_a_solid_modeller() -> None:
    """Normal lines against a block from which hulls of two spheres were taken with manifold3d."""
    import manifold3d

    saddle, radius = Saddle(0.01, 0.01, 0.0), 3.0
    made = ball_passes(saddle, radius, 0.3, np.array([-0.6, 0.6]), 1.0, 2.0)
    centres = made.tip_mm + radius * made.axis
    block = manifold3d.Manifold.cube((4.0, 4.0, 2.0), True)
    segments = 360
    for c0, c1 in zip(centres[:-1:2], centres[1::2], strict=True):
        sphere = manifold3d.Manifold.sphere(radius, segments)
        block = block - manifold3d.Manifold.batch_hull(
            [sphere.translate(tuple(c0)), sphere.translate(tuple(c1))]
        )
    mesh = block.to_mesh()
    triangles = np.asarray(mesh.vert_properties, float)[:, :3][mesh.tri_verts]
    outline = rectangle((0.9, 1.6))
    cut = measure(
        job(saddle, outline, ball(radius), UNCUT_MM), motion(made.tip_mm[[0, 1]], made.axis[[0, 1]]), 0.15
    )
    other = measure(
        job(saddle, outline, ball(radius), UNCUT_MM), motion(made.tip_mm[[2, 3]], made.axis[[2, 3]]), 0.15
    )
    height = np.minimum(cut.height_mm, other.height_mm)
    low = height < 0.9 * UNCUT_MM
    found = (
        first_hits(saddle.offset(cut.nodes.xy, -0.5)[low], saddle.normal(cut.nodes.xy)[low], triangles) - 0.5
    )
    # A sphere of 360 segments lies inside the true one by at most R (1 - cos(pi / 360)), steeper lines miss by more.
    facet = 2.0 * radius * (1.0 - math.cos(math.pi / segments))
    assert low.sum() > 50
    assert np.all(found - height[low] > -5 * NM)
    assert np.all(found - height[low] < facet)


def first_hits(start: np.ndarray, direction: np.ndarray, triangles: np.ndarray) -> np.ndarray:
    """Distance along each ray to the first triangle it meets, all pairs; Möller & Trumbore 1997 (J. Graphics Tools 2:21)."""
    one, two = triangles[:, 1] - triangles[:, 0], triangles[:, 2] - triangles[:, 0]
    found = np.full(len(start), np.inf)
    for i, (p, d) in enumerate(zip(start, direction, strict=True)):
        h = np.cross(d, two)
        det = np.einsum("ni,ni->n", one, h)
        with np.errstate(divide="ignore", invalid="ignore"):
            s = p - triangles[:, 0]
            u = np.einsum("ni,ni->n", s, h) / det
            k = np.cross(s, one)
            v = k @ d / det
            t = np.einsum("ni,ni->n", two, k) / det
        on = (np.abs(det) > 0.0) & (u >= -1e-12) & (v >= -1e-12) & (u + v <= 1.0 + 1e-12) & (t > 0.0)
        found[i] = t[on].min(initial=np.inf)
    return found


# ------------------------------------------------------------------------------------------------ kernels and twins


def random_saddle(rng: np.random.Generator) -> tuple[float, float]:
    return float(rng.uniform(0.001, 0.03)), float(rng.uniform(0.001, 0.03))


def test_foot_agrees_with_the_surface_module() -> None:
    rng = np.random.default_rng(1)
    for _ in range(20):
        a, b = random_saddle(rng)
        points = rng.uniform(-20.0, 20.0, (50, 3))
        distance, plan = np.empty(50), np.empty((50, 2))
        _reach_kernels.feet(a, b, points, distance, plan)
        xy, expected = Saddle(a, b, 0.0).closest(points)
        np.testing.assert_allclose(distance, expected, atol=1e-9)
        np.testing.assert_allclose(plan, xy, atol=1e-6)


def test_ball_entry_against_brute_force() -> None:
    rng = np.random.default_rng(2)
    hits = 0
    for _ in range(300):
        q, c0 = rng.normal(size=3), rng.normal(size=3) * 2.0
        c1 = c0 + rng.normal(size=3) * rng.choice([0.0, 0.01, 3.0])
        n = rng.normal(size=3)
        n /= np.linalg.norm(n)
        if rng.random() < 0.1 and np.any(c1 != c0):
            n = (c1 - c0) / np.linalg.norm(c1 - c0)
        h, share, cosine = _kernels.ball_entry(tuple(q), tuple(n), c0, c1, 1.5)
        expected = capsule_entry(q[None], n[None], c0, c1, 1.5)[0]
        if math.isinf(expected):
            assert math.isinf(h)
            continue
        hits += 1
        assert h == pytest.approx(expected, abs=1e-9)
        centre, entry = c0 + share * (c1 - c0), q + h * n
        assert np.linalg.norm(entry - centre) == pytest.approx(1.5, abs=1e-9)
        assert cosine == pytest.approx((centre - entry) @ n / 1.5, abs=1e-9)
    assert hits > 50


def test_in_ball_against_distance_to_a_segment() -> None:
    rng = np.random.default_rng(3)
    share = np.linspace(0.0, 1.0, 20001)[:, None]
    answers = set()
    for _ in range(200):
        p, c0 = rng.normal(size=3), rng.normal(size=3)
        c1 = c0 + rng.normal(size=3) * rng.choice([0.0, 1.0])
        near = np.linalg.norm(c0 + share * (c1 - c0) - p, axis=1).min()
        if abs(near - 1.2) > 1e-3:
            answers.add(_kernels.in_ball(*p, c0, c1, 1.2))
            assert _kernels.in_ball(*p, c0, c1, 1.2) == (near < 1.2)
    assert answers == {True, False}


def mill_distance(p: np.ndarray, c: np.ndarray, axis: np.ndarray, size: np.ndarray) -> np.ndarray:
    """Signed distance outside an end mill, points (n, 3): distance from its core cylinder less the corner radius."""
    w = p - c
    z = w @ axis
    r = np.linalg.norm(w - z[:, None] * axis, axis=1)
    over = np.maximum(np.maximum(-z, z - size[3]), 0.0)
    return np.hypot(over, np.maximum(r - size[0], 0.0)) - size[1]


def brute_mill_entry(q, n, c0, c1, a0, a1, size) -> float:
    """Lowest entry over many poses, each by bracketing on a fine ladder and bisection: the twin of `mill_entry`."""
    best = math.inf
    ladder = np.linspace(-4.0, 4.0, 801)
    for t in np.linspace(0.0, 1.0, 41):
        axis = a0 + t * (a1 - a0)
        axis /= np.linalg.norm(axis)
        c = c0 + t * (c1 - c0)
        inside = mill_distance(q + ladder[:, None] * n, c, axis, size) <= 1e-9
        if not inside.any():
            continue
        first = int(np.argmax(inside))
        low, high = ladder[max(first - 1, 0)], ladder[first]
        for _ in range(30):
            middle = 0.5 * (low + high)
            if mill_distance((q + middle * n)[None], c, axis, size)[0] <= 1e-9:
                high = middle
            else:
                low = middle
        best = min(best, high)
    return best


@pytest.mark.parametrize("corner", [0.0, 0.7])
@pytest.mark.parametrize("turn", [0.0, 0.02])
def test_mill_entry_against_brute_force(corner: float, turn: float) -> None:
    rng = np.random.default_rng(4)
    size = np.array([2.5, corner, 1.0, 6.0])
    hits = misses = 0
    for _ in range(60):
        a0 = np.array([0.15, 0.0, 1.0]) + 0.05 * rng.normal(size=3)
        a1 = a0 + turn * rng.normal(size=3)
        a0, a1 = a0 / np.linalg.norm(a0), a1 / np.linalg.norm(a1)
        c0 = np.array([0.0, 0.0, corner])
        c1 = c0 + [0.4, 0.1, 0.0]
        q = np.array([*rng.uniform(-3.5, 3.5, 2), 0.0])
        n = np.array([0.0, 0.0, 1.0]) + 0.05 * rng.normal(size=3)
        n /= np.linalg.norm(n)
        h, share, _ = _kernels.mill_entry(tuple(q), tuple(n), c0, c1, a0, a1, size, math.inf)
        expected = brute_mill_entry(q, n, c0, c1, a0, a1, size)
        if math.isinf(expected):
            # The twin steps over 1/40 of a piece: a graze in between is no miss.
            axis = a0 + share * (a1 - a0)
            near = q + (h if math.isfinite(h) else 0.0) * n
            on = mill_distance(near[None], c0 + share * (c1 - c0), axis / np.linalg.norm(axis), size)[0]
            assert math.isinf(h) or on == pytest.approx(0.0, abs=1e-6)
            misses += 1
            continue
        hits += 1
        # A sampled minimum lies above the true one, by the slope of the entry over half a step of the twin's.
        assert h <= expected + 1e-6
        assert h >= expected - 0.02
        axis = a0 + share * (a1 - a0)
        axis /= np.linalg.norm(axis)
        on = mill_distance((q + h * n)[None], c0 + share * (c1 - c0), axis, size)[0]
        assert on == pytest.approx(0.0, abs=1e-8)
    assert hits > 15
    assert misses > 4


def mill_passes(
    saddle: Saddle, cutter: Cutter, lead: float, across: np.ndarray, half: float, step: float
) -> PartMotion:
    """Passes along y of an end mill leaned forward from the turning surface normal, its lowest rim point in contact."""
    along = np.linspace(-half, half, math.ceil(2 * half / step) + 1)
    tips, axes = [], []
    for number, x in enumerate(across):
        y = along if number % 2 == 0 else along[::-1]
        xy = np.column_stack((np.full(len(y), x), y))
        normal, feed = saddle.normal(xy), saddle.tangent(xy, math.pi / 2)
        axis = math.cos(lead) * normal + math.sin(lead) * feed
        inward = math.sin(lead) * normal - math.cos(lead) * feed
        reference = saddle.point(xy) + cutter.corner_radius_mm * normal
        reference += (cutter.radius_mm - cutter.corner_radius_mm) * inward
        tips.append(reference - cutter.corner_radius_mm * axis)
        axes.append(axis)
    return motion(np.concatenate(tips), np.concatenate(axes))


def brute_mill_heights(
    saddle: Saddle, xy: np.ndarray, made: PartMotion, cutter: Cutter, ladder: np.ndarray
) -> np.ndarray:
    """Lowest place on a ladder of heights that any of many poses covers, all pairs, plain numpy."""
    q, n = saddle.point(xy), saddle.normal(xy)
    points = (q[:, None, :] + ladder[None, :, None] * n[:, None, :]).reshape(-1, 3)
    size = np.array([cutter.radius_mm - cutter.corner_radius_mm, cutter.corner_radius_mm, 0.0, 15.0])
    covered = np.zeros(len(points), bool)
    for k in range(1, len(made.tip_mm)):
        for t in np.linspace(0.0, 1.0, 9):
            axis = made.axis[k - 1] + t * (made.axis[k] - made.axis[k - 1])
            c0 = made.tip_mm[k - 1] + cutter.corner_radius_mm * made.axis[k - 1]
            c1 = made.tip_mm[k] + cutter.corner_radius_mm * made.axis[k]
            covered |= mill_distance(points, c0 + t * (c1 - c0), axis / np.linalg.norm(axis), size) <= 0.0
    covered = covered.reshape(len(q), len(ladder))
    return np.where(covered.any(axis=1), ladder[np.argmax(covered, axis=1)], np.inf)


@pytest.mark.parametrize(("corner", "lead_deg"), [(0.8, 7.0), (0.8, 14.0), (0.0, 9.0)])
def test_leaned_mill_on_a_saddle_against_brute_force(corner: float, lead_deg: float) -> None:
    """Turning axis, wide strips, lists thinned by tile: every node as if each pose had been tried on it, and the bound."""
    saddle, cutter = Saddle(0.012, 0.010, 0.0), mill(3.0, corner)
    made = mill_passes(saddle, cutter, lead_deg * DEG, np.array([-1.1, 0.2, 1.3]), 1.2, 0.15)
    cut = measure(job(saddle, rectangle((2.4, 1.2)), cutter, UNCUT_MM, limit=0.004), made, 0.12)
    rows = np.arange(0, len(cut.height_mm), 5)
    ladder = np.linspace(-0.02, 0.08, 501)
    expected = brute_mill_heights(saddle, cut.nodes.xy[rows], made, cutter, ladder)
    # The ladder's rungs are 0.2 um apart and poses 1/8 of a piece: a sampled rim stays 0.15 / 8 mm * sin(lead) / 2 back.
    back = 0.0002 + 0.15 / 8 * math.sin(lead_deg * DEG)
    reached = np.isfinite(expected)
    assert reached.sum() > 0.9 * len(rows)
    assert np.all(cut.height_mm[rows] <= expected + NM)
    assert np.all(cut.height_mm[rows][reached] >= expected[reached] - back)
    x, y = np.meshgrid(np.linspace(-1.2, 1.2, 33), np.linspace(-0.6, 0.6, 7))
    between = brute_mill_heights(saddle, np.column_stack((x.ravel(), y.ravel())), made, cutter, ladder)
    assert between.max() - back <= cut.bound_mm
    assert -between.min() <= cut.gouge.bound_mm + 0.0002
    # On a flat end's rim the search may stop at its last halving, a little short of the slack it aims at.
    assert cut.bound_mm <= cut.highest_mm + (1.001 if corner else 2.0) * BOUND_SLACK_MM


def test_quick_answer_never_hides_an_entry() -> None:
    rng = np.random.default_rng(8)
    size = np.array([2.0, 0.5, 0.3, 8.0])
    quick = slow = 0
    for _ in range(3000):
        a0 = np.array([0.1, 0.0, 1.0]) + 0.1 * rng.normal(size=3)
        a1 = a0 + 0.01 * rng.normal(size=3)
        a0, a1 = a0 / np.linalg.norm(a0), a1 / np.linalg.norm(a1)
        c0 = np.array([0.0, 0.0, 0.5]) + 0.1 * rng.normal(size=3)
        c1 = c0 + 0.2 * rng.normal(size=3)
        q = (*rng.uniform(-3.5, 3.5, 2), 0.0)
        n = np.array([0.0, 0.0, 1.0]) + 0.1 * rng.normal(size=3)
        n = tuple(n / np.linalg.norm(n))
        below = float(rng.uniform(0.0, 0.4))
        h, _, _ = _kernels.mill_entry(q, n, c0, c1, a0, a1, size, math.inf)
        if _kernels.stays_out(q, n, c0, c1, a0, a1, size, below, 0.0, 0.0):
            quick += 1
            assert h >= below - 1e-9
        elif h >= below:
            slow += 1
    assert quick > 3 * slow > 0


def test_rim_distance_against_brute_force() -> None:
    rng = np.random.default_rng(6)
    saddle = Saddle(0.01, 0.015, 0.0)
    centres = np.column_stack((rng.uniform(-15, 15, (40, 2)), rng.uniform(2.0, 8.0, 40)))
    axes = rng.normal(size=(40, 3)) * 0.3 + [0.0, 0.0, 1.0]
    axes /= np.linalg.norm(axes, axis=1, keepdims=True)
    disc = rng.uniform(1.0, 6.0, 40)
    found, plan = rim_distances(saddle, centres, axes, disc)
    angle = np.linspace(0.0, 2.0 * math.pi, 20001)
    for i in range(40):
        one = np.cross(axes[i], [0.3, 0.9, 0.1])
        one *= disc[i] / np.linalg.norm(one)
        two = np.cross(axes[i], one)
        ring = centres[i] + np.outer(np.cos(angle), one) + np.outer(np.sin(angle), two)
        xy, distance = saddle.closest(ring)
        lowest = int(np.argmin(distance))
        assert found[i] == pytest.approx(distance[lowest], abs=1e-6)
        np.testing.assert_allclose(plan[i], xy[lowest], atol=0.02)


@settings(derandomize=True, max_examples=40, deadline=None)
@given(
    first=st.lists(st.floats(-1.0, 1.0), min_size=3, max_size=3),
    second=st.lists(st.floats(-1.0, 1.0), min_size=3, max_size=3),
)
def test_lower_of_two_planes_is_highest_where_linear_programming_says(
    first: list[float], second: list[float]
) -> None:
    weights = np.empty(3)
    found = _kernels.lower_of_two(np.array(first), np.array(second), weights)
    answer = optimize.linprog(
        [0, 0, 0, -1], A_ub=[[-v for v in first] + [1], [-v for v in second] + [1]], b_ub=[0, 0],
        A_eq=[[1, 1, 1, 0]], b_eq=[1], bounds=[(0, 1)] * 3 + [(None, None)],
    )  # fmt: skip
    assert found == pytest.approx(-answer.fun, abs=1e-9)
    assert min(weights @ first, weights @ second) == pytest.approx(found, abs=1e-9)


def test_quarters_fill_their_triangle() -> None:
    corners = np.array([[0.0, 0.0], [2.0, 0.3], [0.4, 1.5]])
    children = np.empty((4, 3, 2))
    _kernels.quarter(corners, children)
    one, two = children[:, 1] - children[:, 0], children[:, 2] - children[:, 0]
    area = 0.5 * np.abs(one[:, 0] * two[:, 1] - one[:, 1] * two[:, 0])
    np.testing.assert_allclose(area, 0.125 * (2.0 * 1.5 - 0.3 * 0.4), rtol=1e-12)
    np.testing.assert_allclose(children.mean(axis=(0, 1)), corners.mean(axis=0), atol=1e-12)


def test_joined_pieces_stay_near_their_chord() -> None:
    angle = np.linspace(0.0, 0.1, 21)
    points = 50.0 * np.column_stack((np.sin(angle), 1 - np.cos(angle), 0 * angle))
    made = motion(points, np.tile([0.0, 0.0, 1.0], (21, 1)))
    pieces = take_pieces(made, (ball(3.0),), Saddle(0.01, 0.01, 0.0))
    arrays = (pieces.c0, pieces.c1, pieces.a0, pieces.a1, pieces.size, np.ones(21, np.uint8))
    ends = np.empty((2, 3))
    sag = _kernels.chain(arrays, 10, 0.6, 1.0, ends)
    chord = np.linalg.norm(ends[1] - ends[0])
    assert chord == pytest.approx(7 * 0.25, rel=1e-3)
    # Vertices of a polygon on radius 50: sagitta of the chord over seven pieces, at the vertices half a piece off the middle.
    assert sag == pytest.approx(chord**2 / 400.0 - 0.25**2 / 400.0, rel=0.02)
    assert _kernels.chain(arrays, 10, 0.6, 1e-6, ends) == 0.0
    np.testing.assert_allclose(ends, [pieces.c0[10], pieces.c1[10]])


@settings(derandomize=True, max_examples=25, deadline=None)
@given(
    a=st.floats(0.001, 0.02), b=st.floats(0.001, 0.02), radius=st.floats(0.5, 6.0), x=st.floats(-20, 20),
    y=st.floats(-20, 20), lift=st.floats(-0.3, 0.6), length=st.floats(0.0, 1.0), heading=st.floats(0.0, 6.3),
    high=st.sampled_from([0.01, 0.3]),
)  # fmt: skip
def test_box_holds_every_node_a_chunk_can_cut(
    a: float,
    b: float,
    radius: float,
    x: float,
    y: float,
    lift: float,
    length: float,
    heading: float,
    high: float,
) -> None:
    saddle = Saddle(a, b, 0.0)
    ends = saddle.offset(
        [[x, y], [x + length * math.cos(heading), y + length * math.sin(heading)]], radius + lift
    )  # fmt: skip
    grid = np.linspace(-2.0 * radius - 1.0, 2.0 * radius + 1.0, 81)
    gx, gy = np.meshgrid(x + grid, y + grid)
    xy = np.column_stack((gx.ravel(), gy.ravel()))
    slope = float(np.sin(saddle.slope_rad(xy)).max())
    box = np.empty(4)
    state = _reach_kernels.chunk_box(a, b, tuple(ends.ravel()), (0.0, radius, 1.0), high, slope, box)
    h = capsule_entry(saddle.point(xy), saddle.normal(xy), ends[0], ends[1], radius)
    cut = xy[h < high - 1e-9]
    if state == 0:
        assert len(cut) == 0
    elif len(cut):
        assert box[0] <= cut[:, 0].min() <= cut[:, 0].max() <= box[1]
        assert box[2] <= cut[:, 1].min() <= cut[:, 1].max() <= box[3]
    if state == 1:
        # Then the point at the residual lies in the ball: what `cut_node` relies on.
        top = saddle.point(xy) + high * saddle.normal(xy)
        inside = [_kernels.in_ball(*p, ends[0], ends[1], radius) for p in top[h < high - 1e-9]]
        assert all(inside)


# ------------------------------------------------------------------------------------------------ nodes, map


@pytest.mark.parametrize(
    "outline",
    [
        rectangle((6.0, 4.0)),
        circle(5.0),
        polygon([[-3, -2], [3, -2], [3, 1], [1, 2.5], [-3, 2]], [[[-1, -1], [1, -1], [1, 0.5], [-1, 0.5]]]),
    ],
    ids=["rectangle", "circle", "polygon with a hole"],
)
def test_triangles_cover_the_outline(outline) -> None:
    nodes = lay_nodes(outline, Saddle(0.01, 0.01, 0.6), 0.17)
    area = nodes.triangle_areas_mm2(np.arange(len(nodes.triangles)))
    assert area.sum() == pytest.approx(outline.area_mm2, rel=1e-9)
    assert outline.contains(nodes.xy).all()
    longest = np.linalg.norm(np.diff(nodes.xy[nodes.triangles][:, [0, 1, 2, 0]], axis=1), axis=2).max()
    assert longest <= 0.17 * math.sqrt(2) + 1e-9
    side, columns = nodes.tiling[2], nodes.tiling[3]
    tile = np.floor((nodes.y - nodes.tiling[1]) / side) * columns + np.floor(
        (nodes.x - nodes.tiling[0]) / side
    )
    assert np.array_equal(np.searchsorted(tile, np.arange(len(nodes.tile_start))), nodes.tile_start)


def test_part_depth_ends_at_the_side_or_the_bottom() -> None:
    saddle, outline = Saddle(0.01, 0.01, 0.0), rectangle((40.0, 40.0))
    # At (20, 0) the normal leans inwards, (-0.4, 0, 1) / w: downwards it leaves the part through the side at once.
    depth = part_depths_mm(
        np.array([[20.0, 0.0], [19.0, 0.0], [0.0, 0.0], [0.0, 20.0]]), outline, saddle, -30.0
    )
    w = math.hypot(1.0, 0.38)
    assert depth[0] == pytest.approx(0.0, abs=1e-4)
    assert depth[1] == pytest.approx(-1.0 * w / 0.38, rel=1e-4)
    assert depth[2] == pytest.approx(-30.0)
    assert depth[3] == pytest.approx((-30.0 + 4.0) * math.hypot(1.0, 0.4))


def test_cutting_beside_the_part_is_no_gouge() -> None:
    """A ball that stands beside the part, below its edge where the surface slopes up to it, touches no part of it."""
    saddle, radius = Saddle(0.01, 0.01, 0.0), 3.0
    beside = motion(np.array([[23.5, -5.0, -3.0], [23.5, 5.0, -3.0]]), np.tile([0.0, 0.0, 1.0], (2, 1)))
    cut = measure(job(saddle, rectangle((40.0, 10.0)), ball(radius), UNCUT_MM), beside, 0.5)
    assert cut.height_mm.min() > -1e-4
    assert cut.gouge.deepest_mm == 0.0


def test_map_shows_heights_in_plan() -> None:
    saddle = Saddle(0.005, 0.004, 0.0)
    made = ball_passes(saddle, 3.0, 0.0, 0.5 * np.arange(-12, 13), 8.0, 0.5)
    cut = measure(job(saddle, circle(8.0), ball(3.0)), made, 0.01 * 8)
    found = scallop_map(cut)
    assert found.height_mm.shape == (len(found.y_mm), len(found.x_mm))
    assert max(found.height_mm.shape) <= 400
    assert np.isnan(found.height_mm[0, 0])
    on_grid = cut.height_mm[cut.nodes.at_grid[cut.nodes.at_grid >= 0]]
    assert float(np.nanmax(found.height_mm)) == pytest.approx(on_grid.max(), abs=NM)
    assert np.count_nonzero(~np.isnan(found.height_mm)) == pytest.approx(
        found.height_mm.size * math.pi / 4, rel=0.05
    )


def test_chosen_grid() -> None:
    def chosen(side: float) -> float:
        return choose_grid_mm(job(Saddle(0.01, 0.01, 0.0), rectangle((side, side / 2)), ball(3.0)))

    assert chosen(100.0) == pytest.approx(0.1)
    assert chosen(60.0) == pytest.approx(0.1)
    assert chosen(10.0) == pytest.approx(0.05)
    assert chosen(400.0) == pytest.approx(0.4)


def test_unknown_cutters_and_standing_rows_cut_nothing() -> None:
    saddle = Saddle(0.01, 0.01, 0.0)
    made = ball_passes(saddle, 3.0, 0.0, np.array([0.0]), 2.0, 0.5)
    foreign = PartMotion(
        made.tip_mm, made.axis, made.line, made.rapid, np.full(len(made.line), 7), made.motion, made.fraction
    )  # fmt: skip
    still = PartMotion(
        made.tip_mm, made.axis, made.line, made.rapid, made.tool, made.motion, np.zeros(len(made.line))
    )  # fmt: skip
    assert not take_pieces(foreign, (ball(3.0),), saddle).active.any()
    assert not take_pieces(still, (ball(3.0),), saddle).active.any()
    assert take_pieces(made, (ball(3.0),), saddle).active.sum() == len(made.line) - 1
    assert deepest_gouge(saddle, circle(2.0), take_pieces(foreign, (ball(3.0),), saddle)).piece == -1
