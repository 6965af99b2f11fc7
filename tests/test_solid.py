"""The finished part's mesh against closed forms, trimesh's own measures and manifold3d."""

from __future__ import annotations

import io
import math
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from anticlast import outline
from anticlast.errors import CannotPlan, CannotWrite
from anticlast.outline import Outline
from anticlast.records import Part
from anticlast.saddle import Saddle
from anticlast.solid import finished_part, surface_mesh, write_stl

trimesh = pytest.importorskip("trimesh")

MICROMETRE = 1e-3


def part(shape: Outline, a: float = 0.01, b: float | None = None, rotate_deg: float = 0.0) -> Part:
    return Part(a, a if b is None else b, math.radians(rotate_deg), shape)


def plate_with_holes() -> Outline:
    round_hole = np.column_stack((np.cos(np.arange(40) * math.pi / 20), np.sin(np.arange(40) * math.pi / 20)))
    return outline.polygon(
        [(-30, -20), (30, -20), (30, 20), (0, 32), (-30, 20)],
        [round_hole * 6 + (12, 3), round_hole * 4 - (15, 5)],
    )


def top_area(vertices: np.ndarray, faces: np.ndarray) -> float:
    corners = vertices[faces]
    return float(
        np.linalg.norm(np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0]), axis=1).sum()
        / 2
    )


# -------------------------------------------------------------------------------- closed forms


def test_stock_over_the_saddle_in_a_square_is_4_a_s_to_the_fourth() -> None:
    # Between the flat z = a S^2 and the saddle over |x|, |y| <= S: exactly 4 a S^4 (derived here: the
    # saddle's own integral over a centred square is 0). a = 0.01, S = 30 -> 32400 mm^3.
    a, half, bottom = 0.01, 30.0, -20.0
    solid = finished_part(part(outline.rectangle((2 * half, 2 * half)), a), bottom, 0.002)
    blank = (2 * half) ** 2 * (a * half**2 - bottom)
    assert blank - solid.volume == pytest.approx(32400.0, rel=2e-5)


def test_area_over_a_disc() -> None:
    # pi / (6 a^2) ((1 + 4 a^2 r^2)^1.5 - 1), derived here by integrating W r dr; a = 0.01, r = 30 ->
    # 3068.38787.
    vertices, faces = surface_mesh(part(outline.circle(60.0)), 0.5)
    assert top_area(vertices, faces) == pytest.approx(3068.38787, rel=1e-4)
    assert vertices[:, 2] == pytest.approx(0.01 * (vertices[:, 0] ** 2 - vertices[:, 1] ** 2), abs=1e-12)


def test_area_over_a_square() -> None:
    # 4001.40626 mm^2 over |x|, |y| <= 30 with a = 0.01 (derived, quadrature of W).
    vertices, faces = surface_mesh(part(outline.rectangle((60.0, 60.0))), 0.5)
    assert top_area(vertices, faces) == pytest.approx(4001.40626, rel=1e-5)


def test_volume_over_a_disc_with_unequal_curvatures_and_a_turn() -> None:
    # Integral of a x'^2 - b y'^2 over a centred disc is (a - b) pi r^4 / 4, whatever the turn (derived here).
    for degrees in (0.0, 37.0):
        shape = outline.circle(50.0)
        solid = finished_part(part(shape, 0.012, 0.004, degrees), -15.0, 0.002)
        exact = (0.012 - 0.004) * math.pi * 25.0**4 / 4 + math.pi * 625 * 15
        # The disc's own polygon is short by up to two thirds of its chord error along the rim, some 20 mm
        # high.
        assert solid.volume == pytest.approx(exact, abs=2 / 3 * 0.001 * math.pi * 50 * 23 + 1.0)


def test_halving_the_chord_error_halves_the_volume_error() -> None:
    # With a != b facets are wrong on one side more than on the other; the error goes with the chord error.
    shape = part(outline.rectangle((50.0, 50.0)), 0.012, 0.004)
    exact = (0.012 - 0.004) * 50.0 * 50.0**3 / 12 + 2500 * 15
    errors = [finished_part(shape, -15.0, chord).volume - exact for chord in (0.08, 0.04, 0.02, 0.01)]
    slope = np.polyfit(np.log([0.08, 0.04, 0.02, 0.01]), np.log(np.abs(errors)), 1)[0]
    assert slope == pytest.approx(1.0, abs=0.15)


# -------------------------------------------------------------------------------- closed, whole, right way
# out


@pytest.mark.parametrize(
    ("shape", "holes"),
    [
        (outline.circle(60.0), 0),
        (outline.slot((80.0, 20.0)), 0),
        (outline.rectangle((60.0, 40.0), 5.0), 0),
        (outline.polygon([(10, 0), (0, 10), (-10, 0), (0, -10)]), 0),
        (plate_with_holes(), 2),
    ],
    ids=["circle", "slot", "rectangle", "diamond", "holes"],
)
@pytest.mark.parametrize("chord", [0.05, 0.005])
def test_solid_is_closed_and_right_way_out(shape: Outline, holes: int, chord: float) -> None:
    solid = finished_part(part(shape, 0.01, 0.007, 20.0), -25.0, chord)
    assert solid.is_watertight
    assert solid.is_winding_consistent
    assert solid.is_volume
    assert solid.volume > 0.0
    # A body with g holes through it has Euler number 2 - 2 g.
    assert solid.euler_number == 2 - 2 * holes
    assert solid.body_count == 1
    low, high = solid.bounds
    assert (low[0], low[1], high[0], high[1]) == pytest.approx(shape.bounds, abs=1e-9)
    assert low[2] == -25.0


def test_manifold3d_agrees() -> None:
    manifold3d = pytest.importorskip("manifold3d")
    solid = finished_part(part(plate_with_holes(), 0.01, 0.007, 20.0), -25.0, 0.01)
    body = manifold3d.Manifold(
        manifold3d.Mesh64(
            np.ascontiguousarray(solid.vertices), np.ascontiguousarray(solid.faces.astype(np.uint64))
        )
    )
    assert body.status() == manifold3d.Error.NoError
    assert body.genus() == 2
    assert body.volume() == pytest.approx(solid.volume, rel=1e-9)
    assert body.surface_area() == pytest.approx(solid.area, rel=1e-9)


@st.composite
def stars(draw: st.DrawFn) -> Outline:
    count = draw(st.integers(3, 11))
    reach = draw(st.lists(st.floats(6.0, 35.0), min_size=count, max_size=count))
    angle = 2 * np.pi * np.arange(count) / count + draw(st.floats(0, 1))
    shell = np.column_stack((reach * np.cos(angle), reach * np.sin(angle)))
    return outline.polygon(shell, [shell * 0.5] if draw(st.booleans()) else [])


@settings(derandomize=True, max_examples=30, deadline=None)
@given(stars(), st.floats(0.0, math.pi), st.floats(0.002, 0.1))
def test_any_outline_gives_a_closed_solid(shape: Outline, turn: float, chord: float) -> None:
    solid = finished_part(Part(0.008, 0.011, turn, shape), -40.0, chord)
    assert solid.is_watertight
    assert solid.is_winding_consistent
    assert solid.euler_number == 2 - 2 * len(shape.polygon.interiors)


@settings(derandomize=True, max_examples=20, deadline=None)
@given(stars(), st.floats(0.0, math.pi), st.sampled_from([0.1, 0.02, 0.004]))
def test_chord_error_is_within_the_promise(shape: Outline, turn: float, chord: float) -> None:
    body = Part(0.008, 0.011, turn, shape)
    solid = finished_part(body, -40.0, chord)
    saddle = Saddle.of(body)
    top = solid.triangles[solid.face_normals[:, 2] > 0.1]
    weights = np.array([(i, j, 6 - i - j) for i in range(7) for j in range(7 - i)]) / 6.0
    inside = np.einsum("wk,mkd->mwd", weights, top).reshape(-1, 3)
    _, off = saddle.closest(inside)
    assert np.abs(off).max() <= chord * (1 + 1e-9)


def test_a_facet_uses_the_chord_error_it_was_given() -> None:
    # Not finer than needed: with the longest facet edge across the steepest bend the bound is met within 1 %.
    body = part(outline.rectangle((40.0, 40.0)), 0.01, 0.01, 45.0)
    solid = finished_part(body, -40.0, 0.05)
    top = solid.triangles[solid.face_normals[:, 2] > 0.1]
    middles = ((top + np.roll(top, 1, axis=1)) / 2).reshape(-1, 3)
    off = np.abs(Saddle.of(body).height(middles[:, 0], middles[:, 1]) - middles[:, 2])
    assert 0.99 * 0.05 < off.max() <= 0.05 * (1 + 1e-9)


# -------------------------------------------------------------------------------- curvature of the mesh


def test_gauss_curvature_of_the_mesh_by_angle_defects() -> None:
    # Angle defects add up to the integral of K. Over the disc r < r0 with a = b that is
    # -2 pi (1 - (1 + 4 a^2 r0^2)^-1/2), derived here from K = -4 a^2 / W^4 and dA = W r dr dphi.
    a = 0.01
    vertices, faces = surface_mesh(part(outline.circle(60.0), a), 0.4)
    mesh = trimesh.Trimesh(vertices, faces, process=False)
    for reach in (10.0, 20.0, 25.0):
        near = np.hypot(vertices[:, 0], vertices[:, 1]) < reach
        exact = -2 * math.pi * (1 - 1 / math.sqrt(1 + 4 * a**2 * reach**2))
        assert mesh.vertex_defects[near].sum() == pytest.approx(exact, rel=0.02)


def test_mean_curvature_of_the_mesh_by_edge_angles() -> None:
    # Half the edge angles times edge lengths add up to the integral of H (Steiner's formula of a
    # polyhedron; Cohen-Steiner and Morvan 2003). Concave edges count positive here. Against a (1 + 4 b^2
    # y^2) - b (1 + 4 a^2 x^2) over W^3 on the half discs |x| > |y| and |x| < |y|, where it has one sign
    # each, with a = 0.01.
    a = 0.01
    vertices, faces = surface_mesh(part(outline.circle(60.0), a), 0.4)
    mesh = trimesh.Trimesh(vertices, faces, process=False)
    ends = mesh.vertices[mesh.face_adjacency_edges]
    length = np.linalg.norm(ends[:, 0] - ends[:, 1], axis=1)
    middle = ends.mean(axis=1)
    bend = np.where(mesh.face_adjacency_convex, -1.0, 1.0) * mesh.face_adjacency_angles * length / 2
    radius, angle = np.meshgrid((np.arange(400) + 0.5) / 16, (np.arange(720) + 0.5) / 720 * 2 * math.pi)
    x, y = radius * np.cos(angle), radius * np.sin(angle)
    w = np.sqrt(1 + 4 * a * a * radius**2)
    density = 4 * a**3 * (y**2 - x**2) / w**3 * w * radius * (1 / 16) * (2 * math.pi / 720)
    for side in (1.0, -1.0):
        picked = (side * (np.abs(middle[:, 0]) - np.abs(middle[:, 1])) > 0) & (
            np.hypot(*middle[:, :2].T) < 25.0
        )
        exact = density[side * (np.abs(x) - np.abs(y)) > 0].sum()
        assert bend[picked].sum() == pytest.approx(exact, rel=0.05)


# -------------------------------------------------------------------------------- files and faults


def test_stl_reads_back_as_the_same_body(tmp_path: Path) -> None:
    body = part(plate_with_holes(), 0.01, 0.007, 20.0)
    path = tmp_path / "surface.stl"
    write_stl(body, -25.0, 0.02, path)
    again = trimesh.load(io.BytesIO(path.read_bytes()), file_type="stl")
    solid = finished_part(body, -25.0, 0.02)
    assert len(again.faces) == len(solid.faces)
    assert again.is_watertight
    assert again.volume == pytest.approx(solid.volume, rel=1e-6)
    first = path.read_bytes()
    write_stl(body, -25.0, 0.02, path)
    assert path.read_bytes() == first
    assert [each.name for each in tmp_path.iterdir()] == ["surface.stl"]


def test_failed_writing_leaves_the_old_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    body = part(outline.circle(20.0))
    with pytest.raises(CannotWrite, match=r"surface\.stl: cannot be written"):
        write_stl(body, -25.0, 0.02, tmp_path / "absent" / "surface.stl")
    path = tmp_path / "surface.stl"
    path.write_text("old", encoding="utf-8")

    def full(*_: object) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("os.replace", full)
    with pytest.raises(CannotWrite, match=r"No space left"):
        write_stl(body, -25.0, 0.02, path)
    assert path.read_text(encoding="utf-8") == "old"
    assert [each.name for each in tmp_path.iterdir()] == ["surface.stl"]


def test_bottom_above_the_surface_is_refused() -> None:
    with pytest.raises(CannotPlan, match=r"bottom at -5 mm .* which reaches down to -9 mm"):
        finished_part(part(outline.circle(60.0)), -5.0, 0.01)


def test_hole_touching_the_edge_is_refused() -> None:
    touching = outline.polygon([(-10, -10), (10, -10), (10, 10), (-10, 10)], [[(10, 0), (5, 3), (5, -3)]])
    with pytest.raises(CannotPlan, match=r"holes have to keep clear of the edge"):
        finished_part(part(touching), -25.0, 0.01)


@pytest.mark.parametrize("build", [lambda: outline.rectangle((100.0, 100.0)), lambda: outline.circle(100.0)])
def test_speed(build: Callable[[], Outline]) -> None:
    body = part(build())
    finished_part(body, -40.0, 0.05)
    start = time.perf_counter()
    solid = finished_part(body, -40.0, 0.005)
    assert time.perf_counter() - start < 1.0
    assert len(solid.faces) > 10_000
