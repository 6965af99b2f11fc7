"""Distances between cutter bodies and surfaces, against trimesh and dense sampling."""

from __future__ import annotations

import math

import numpy as np
import pytest
import trimesh
from hypothesis import given, settings
from hypothesis import strategies as st

from anticlast.cutter import Cutter
from anticlast.outline import circle, polygon, rectangle
from anticlast.proof import _collision_kernels as kernels
from anticlast.proof.beside import pieces_beside
from anticlast.proof.collisions import (
    Body,
    Clearance,
    cutting_body,
    flute_clearance,
    least_clearance,
    lifts,
    nearer,
    rigid_bodies,
    rigid_clearance,
)
from anticlast.proof.patches import (
    COARSE_MM,
    FINE_MM,
    blank_patches,
    cells,
    finished_patches,
    plant,
    surface_patches,
)
from anticlast.records import PartMotion
from anticlast.saddle import Saddle
from conftest import JobMaker

CUTTER = Cutter(1, "ball", 3.0, 3.0, 2, 12.0, 2.5, 20.0, ((8.0, 10.0), (12.0, 6.0)))


def motion(tip, axis, rapid: bool = False) -> PartMotion:
    tip, axis = np.asarray(tip, float), np.asarray(axis, float)
    axis = axis / np.linalg.norm(axis, axis=1, keepdims=True)
    count, index = len(tip), np.arange(len(tip))
    return PartMotion(
        tip, axis, index, np.full(count, rapid), np.ones(count, np.int64), index - 1, np.ones(count)
    )


def turned_to(axis: np.ndarray) -> np.ndarray:
    """Return a 4 x 4 rotation that takes Z to an axis."""
    return trimesh.geometry.align_vectors([0.0, 0.0, 1.0], axis)


def body_mesh(body: Body, pose: np.ndarray, sections: int = 256) -> trimesh.Trimesh:
    mesh = trimesh.creation.cylinder(body.radius_mm, body.high_mm - body.low_mm, sections=sections)
    mesh.apply_translation([0.0, 0.0, 0.5 * (body.high_mm + body.low_mm)])
    mesh.apply_transform(turned_to(pose[3:]))
    mesh.apply_translation(pose[:3])
    return mesh


def distance(points: np.ndarray, pose: np.ndarray, body: Body) -> np.ndarray:
    """Signed distance of points from an upright-in-its-own-frame cylinder, plain numpy: the twin of the kernel."""
    w = points - pose[:3]
    z = w @ pose[3:]
    r = np.linalg.norm(w - z[:, None] * pose[3:], axis=1)
    over, out = np.maximum(body.low_mm - z, z - body.high_mm), r - body.radius_mm
    outside = np.hypot(np.maximum(over, 0.0), np.maximum(out, 0.0))
    return np.where((over > 0) | (out > 0), outside, np.maximum(over, out)) - body.round_mm


def random_pose(rng: np.random.Generator) -> np.ndarray:
    axis = rng.normal(size=3)
    return np.concatenate((rng.normal(size=3), axis / np.linalg.norm(axis)))


def test_body_distance_against_a_mesh_and_its_twin() -> None:
    rng = np.random.default_rng(1)
    body = Body("holder", 2.0, 1.0, 6.0)
    pose = random_pose(rng)
    points = pose[:3] + 3.0 * pose[3:] + rng.normal(size=(60, 3)) * 3.0
    mesh = body_mesh(body, pose)
    corners = mesh.triangles
    nearest = np.array(
        [
            np.linalg.norm(
                trimesh.triangles.closest_point(corners, np.repeat(p[None], len(corners), axis=0)) - p, axis=1
            ).min()
            for p in points
        ]
    )
    gradient = np.empty(3)
    shape = (body.radius_mm, body.low_mm, body.high_mm, 0.0)
    found = np.array([kernels.body_distance(p, pose, shape, gradient) for p in points])
    np.testing.assert_allclose(found, distance(points, pose, body), atol=1e-12)
    # 256 facets lie inside the round wall by at most r (1 - cos(pi / 256)) = 1.5e-4 mm.
    np.testing.assert_allclose(np.abs(found), nearest, atol=2e-4)
    assert (found < 0).any()
    assert (found > 0).any()


def test_body_distance_grows_as_its_gradient_says() -> None:
    rng = np.random.default_rng(2)
    gradient, other = np.empty(3), np.empty(3)
    for _ in range(200):
        pose, p = random_pose(rng), rng.normal(size=3) * 4.0
        shape = (float(rng.uniform(0, 3)), 1.0, 5.0, float(rng.uniform(0, 1)))
        here = kernels.body_distance(p, pose, shape, gradient)
        assert np.linalg.norm(gradient) == pytest.approx(1.0)
        # Convex: no point lies below the tangent plane.
        for q in rng.normal(size=(5, 3)) * 4.0:
            assert kernels.body_distance(q, pose, shape, other) >= here + gradient @ (q - p) - 1e-12


def test_patch_search_against_sampling() -> None:
    rng = np.random.default_rng(3)
    body = Body("shank", 1.5, 2.0, 9.0)
    shape = (1.5, 2.0, 9.0, 0.0)
    s, t = (v.ravel() for v in np.meshgrid(np.linspace(-1, 1, 201), np.linspace(-1, 1, 201)))
    place = np.empty(3)
    for _ in range(40):
        pose = random_pose(rng)
        patch = np.concatenate((rng.normal(size=3) * 5.0, rng.normal(size=6), [0.01]))
        points = patch[:3] + np.outer(s, patch[3:6]) + np.outer(t, patch[6:9])
        lowest = distance(points, pose, body).min() - 0.01
        found, bound = kernels.patch_least(
            patch, pose, np.zeros(3), shape, (math.inf, 1e-4, -math.inf), place
        )
        assert found - 1e-4 <= bound + 1e-12
        assert bound <= lowest + 1e-9
        assert found <= lowest + 1.1e-4
        assert distance(place[None], pose, body)[0] - 0.01 == pytest.approx(found)


@pytest.fixture(scope="module")
def saddle_tree():
    saddle = Saddle(0.01, 0.008, 0.3)
    return saddle, circle(30.0), plant(surface_patches(saddle, circle(30.0), 0.0))


def dense_surface(saddle: Saddle, outline, spacing: float) -> np.ndarray:
    return saddle.point(np.concatenate((outline.grid(spacing), outline.boundary_points(spacing))))


def test_pose_search_against_sampling(saddle_tree) -> None:
    saddle, outline, tree = saddle_tree
    cloud = dense_surface(saddle, outline, 0.1)
    rng = np.random.default_rng(4)
    place, hint = np.empty(3), np.zeros(1, np.int64)
    body = Body("holder", 4.0, 3.0, 10.0)
    for _ in range(30):
        axis = np.array([0.0, 0.0, 1.0]) + 0.5 * rng.normal(size=3)
        pose = np.concatenate(
            (rng.uniform(-14, 14, 2), rng.uniform(-1.0, 8.0, 1), axis / np.linalg.norm(axis))
        )
        expected = distance(cloud, pose, body).min()
        found, bound = kernels.pose_least(
            (tree.spheres, tree.child, tree.patches), pose, np.zeros(3), (4.0, 3.0, 10.0, 0.0),
            (math.inf, 0.001, -math.inf), place, hint,
        )  # fmt: skip
        assert bound <= found <= expected + 0.01
        # Patches stand off by FINE_MM and reach over the rim by a quarter of a cell, here 0.16 mm.
        assert found >= expected - 2 * FINE_MM - 0.2


def brute_motion(cloud: np.ndarray, made: PartMotion, body: Body, steps: int) -> float:
    least = math.inf
    for k in range(1, len(made.tip_mm)):
        for f in np.linspace(0.0, 1.0, steps):
            axis = made.axis[k - 1] + f * (made.axis[k] - made.axis[k - 1])
            tip = made.tip_mm[k - 1] + f * (made.tip_mm[k] - made.tip_mm[k - 1])
            least = min(
                least, distance(cloud, np.concatenate((tip, axis / np.linalg.norm(axis))), body).min()
            )
    return least


@pytest.mark.parametrize("lean", [0.0, 0.6])
def test_least_clearance_over_a_motion(saddle_tree, lean: float) -> None:
    saddle, outline, tree = saddle_tree
    x = np.linspace(-12.0, 12.0, 9)
    made = motion(
        np.column_stack((x, 4.0 * np.sin(x / 5.0), saddle.height(x, 0 * x) + 0.5)),
        np.column_stack((0.3 * np.cos(x / 4.0), np.full(9, lean), np.ones(9))),
    )
    cloud = dense_surface(saddle, outline, 0.25)
    every = np.ones(len(x), bool)
    for body in rigid_bodies(CUTTER):
        expected = brute_motion(cloud, made, body, 9)
        found = least_clearance(tree, made, every, CUTTER, [body])
        assert found.bound_mm <= found.distance_mm
        assert found.bound_mm <= expected
        assert expected == pytest.approx(found.distance_mm, abs=0.1 + 0.05 * abs(expected))
        assert found.body == body.name
        assert found.piece in range(1, 9)
    whole = least_clearance(tree, made, every, CUTTER, rigid_bodies(CUTTER))
    single = min(
        least_clearance(tree, made, every, CUTTER, [body]).distance_mm for body in rigid_bodies(CUTTER)
    )
    assert whole.distance_mm == pytest.approx(single, rel=0.05)
    coarse = plant(surface_patches(saddle, outline, 0.0, COARSE_MM))
    both = rigid_clearance(coarse, tree, made, every, CUTTER)
    assert both.distance_mm == pytest.approx(whole.distance_mm, abs=0.3 + 0.05 * abs(whole.distance_mm))
    assert both.bound_mm <= single


def test_only_chosen_pieces_and_the_cutter_count(saddle_tree) -> None:
    _, _, tree = saddle_tree
    made = motion([[0, 0, 9], [0, 0, 0.5], [0, 0, 9], [5, 0, 9]], [[0, 0, 1]] * 4)
    bodies = [Body("shank", 2.5, 3.0, 20.0)]
    near = least_clearance(tree, made, np.array([False, True, True, True]), CUTTER, bodies)
    far = least_clearance(tree, made, np.array([False, False, False, True]), CUTTER, bodies)
    assert near.distance_mm == pytest.approx(3.5, abs=0.1)
    assert far.distance_mm > 11.0
    assert far.piece == 3
    other = Cutter(2, "ball", 3.0, 3.0, 2, 12.0, 2.5, 20.0)
    assert least_clearance(tree, made, np.ones(4, bool), other, bodies) == Clearance(math.inf, math.inf)


def test_far_motion_is_reported_as_the_interest(saddle_tree) -> None:
    _, _, tree = saddle_tree
    made = motion([[0, 0, 30], [5, 0, 30]], [[0, 0, 1]] * 2)
    found = least_clearance(tree, made, np.ones(2, bool), CUTTER, [Body("shank", 2.5, 3.0, 20.0)], 1.0)
    assert found.distance_mm == 1.0
    assert found.bound_mm == pytest.approx(1.0, abs=0.011)
    assert found.piece == -1


def test_leaned_flutes_enter_a_steep_flank() -> None:
    saddle = Saddle(0.03, 0.02, 0.0)
    tree = plant(surface_patches(saddle, rectangle((40.0, 20.0)), 0.0))
    # The ball touches the bottom; leaned 75 degrees along the hollow its side lies in the rising flank.
    centre = np.array([0.0, 0.0, 3.0])
    for lean, enters in ((0.0, False), (75.0, True)):
        axis = np.array([math.sin(math.radians(lean)), 0.0, math.cos(math.radians(lean))])
        made = motion([centre - 3.0 * axis, centre - 3.0 * axis + [0, 1e-3, 0]], [axis, axis])
        found = flute_clearance(tree, made, np.ones(2, bool), CUTTER, 0.0)
        flutes = Body("flutes", 3.0, 3.0, 12.0)
        expected = distance(
            dense_surface(saddle, rectangle((40.0, 20.0)), 0.1), np.r_[centre - 3 * axis, axis], flutes
        )
        assert bool(expected.min() < 0.0) == bool(found.distance_mm < -0.1) == enters
        if enters:
            assert found.distance_mm == pytest.approx(expected.min(), abs=0.05)


def test_bodies_of_a_cutter() -> None:
    assert [body.name for body in rigid_bodies(CUTTER)] == ["shank", "holder 1", "holder 2"]
    assert cutting_body(CUTTER) == Body("cutting end", 0.0, 3.0, 9.0, 3.0)
    bull = Cutter(1, "bull", 5.0, 1.0, 2, 10.0, 5.0, 30.0)
    assert cutting_body(bull) == Body("cutting end", 4.0, 1.0, 9.0, 1.0)


def test_nearer_keeps_the_lower_bound() -> None:
    one, two = Clearance(2.0, 1.0, 5, body="shank"), Clearance(1.5, 1.4, 7, body="holder 1")
    assert nearer(one, two) == nearer(two, one) == Clearance(1.5, 1.0, 7, body="holder 1")


def test_lifts_are_drawn_along_the_axis() -> None:
    axis = np.array([0.6, 0.0, 0.8])
    tips = np.cumsum([[0, 0, 0], 5 * axis, -2 * axis, [0, 0, 3.0], 4 * axis], axis=0)
    axes = np.array([axis, axis, axis, axis, [0.0, 0.0, 1.0]])
    assert lifts(motion(tips, axes)).tolist() == [False, True, False, False, False]


# ------------------------------------------------------------------------------------------------ patches


@settings(derandomize=True, max_examples=15, deadline=None)
@given(size=st.floats(0.7, 4.0), turn=st.floats(0.0, 1.5))
def test_cells_cover_the_outline(size: float, turn: float) -> None:
    corners = np.array([[-9, -6], [9, -6], [9, 2], [2, 7], [-9, 7]])
    cos, sin = math.cos(turn), math.sin(turn)
    outline = polygon(corners @ [[cos, sin], [-sin, cos]])
    middle, half = cells(outline, size)
    points = outline.grid(0.4)
    inside = (np.abs(points[:, None, :] - middle) <= half + 1e-9).all(axis=2).any(axis=1)
    assert inside.all()
    assert half.max() <= 0.5 * size + 1e-9
    # What reaches over the edge is at most a strip of a quarter of a cell, corner to corner.
    assert outline.grown(size / 4 * math.sqrt(2) + 1e-6).contains(middle + half).all()


def test_patches_stay_within_their_sag(saddle_tree) -> None:
    saddle, _, tree = saddle_tree
    rng = np.random.default_rng(5)
    s, t = rng.uniform(-1, 1, (2, len(tree.patches)))
    points = tree.patches[:, :3] + s[:, None] * tree.patches[:, 3:6] + t[:, None] * tree.patches[:, 6:9]
    _, off = saddle.closest(points)
    assert np.all(np.abs(off) <= tree.patches[:, 9] + 1e-12)
    assert tree.patches[:, 9].max() <= 1.01 * FINE_MM
    offset = surface_patches(saddle, circle(30.0), 0.4)
    points = offset[:, :3] + 0.9 * offset[:, 3:6] - 0.8 * offset[:, 6:9]
    assert np.all(np.abs(saddle.closest(points)[1] - 0.4) <= offset[:, 9] + 1e-12)


def test_every_sphere_holds_what_lies_under_it(saddle_tree) -> None:
    _, _, tree = saddle_tree
    corners = np.stack(
        [
            tree.patches[:, :3] + s * tree.patches[:, 3:6] + t * tree.patches[:, 6:9]
            for s in (-1, 1)
            for t in (-1, 1)
        ]
    )
    seen = np.zeros(len(tree.patches), int)

    def under(node: int) -> np.ndarray:
        first, second = tree.child[node]
        if first < 0:
            rows = np.arange(-1 - first, -1 - second)
            seen[rows] += 1
        else:
            rows = np.concatenate((under(first), under(second)))
        away = np.linalg.norm(corners[:, rows] - tree.spheres[node, :3], axis=2).max()
        assert away <= tree.spheres[node, 3] + 1e-9
        return rows

    under(0)
    assert np.all(seen == 1)


def test_blank_with_a_flat_top(make_job: JobMaker) -> None:
    job = make_job(machine="mill-3", stock_extra="")
    tree = blank_patches(job)
    made = motion([[-30, 0, 11.0], [30, 0, 11.0], [30, 0, 2.0], [20, 0, 2.0]], [[0, 0, 1]] * 4, rapid=True)
    body = [cutting_body(CUTTER)]
    over = least_clearance(tree, made, np.array([False, True, False, False]), CUTTER, body)
    assert over.distance_mm == pytest.approx(5.0, abs=0.02)
    # The blank reaches 10 + 3 mm to the side, the ball 3 mm: at x = 20 there are 4 mm between them.
    beside = least_clearance(tree, made, np.array([False, False, False, True]), CUTTER, body, share=0.0)
    assert beside.distance_mm == pytest.approx(4.0, abs=0.02)


def test_blank_near_the_finished_form(make_job: JobMaker) -> None:
    job = make_job(machine="mill-3")
    saddle = Saddle.of(job.part)
    cloud = saddle.offset(job.stock.outline.grid(0.1), 0.3)
    made = motion([[-20, -9, 6.0], [20, 9, 7.0]], [[0, 0, 1]] * 2, rapid=True)
    found = least_clearance(
        blank_patches(job), made, np.ones(2, bool), CUTTER, [cutting_body(CUTTER)], share=0.0
    )
    assert found.distance_mm == pytest.approx(brute_motion(cloud, made, cutting_body(CUTTER), 200), abs=0.03)


def test_upright_motion_beside_the_part(make_job: JobMaker) -> None:
    job = make_job(machine="mill-3")
    upright, leaned = [0, 0, 1], [0.1, 0, 1]
    made = motion([[14, -9, -5], [14, 9, -5], [12, 9, -5], [14, 9, -5]], [upright, upright, upright, leaned])
    # The outline ends at x = 10 and the ball is 3 mm: 14 stays off, 12 does not, a leaned cutter is not judged.
    assert pieces_beside(job, made).tolist() == [False, True, False, False]


def test_finished_patches_follow_the_job(make_job: JobMaker) -> None:
    job = make_job(machine="mill-3")
    tree = finished_patches(job)
    area = 4.0 * np.linalg.norm(np.cross(tree.patches[:, 3:6], tree.patches[:, 6:9]), axis=1).sum()
    assert area == pytest.approx(Saddle.of(job.part).area_mm2(job.part.outline.polygon), rel=1e-3)
    assert len(finished_patches(job, COARSE_MM).patches) < len(tree.patches) / 4
