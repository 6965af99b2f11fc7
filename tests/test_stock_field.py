"""The stock field against closed forms, manifold3d solids, and plain twins of its kernels."""

from __future__ import annotations

import math
from pathlib import Path

import manifold3d
import numpy as np
import pytest
import trimesh
from hypothesis import given, settings
from hypothesis import strategies as st

from anticlast import outline
from anticlast.cutter import Cutter
from anticlast.errors import BadInput, NotConverged
from anticlast.job import load_job, parse_job
from anticlast.records import Floats, PartMotion
from anticlast.saddle import Saddle
from anticlast.stock import _field_kernels as kernels
from anticlast.stock import _mesh_kernels, _smooth_kernels, _sweep_kernels
from anticlast.stock import field as fields
from anticlast.stock.blank import blank_field, offset_heights_mm
from anticlast.stock.grid import TURN_RAD, ColumnGrid, back, turned, turned_surface
from anticlast.stock.sweep import lay_stations, seconds_of, shape_table, take_segments
from anticlast.stock.thickness import thickness_map, thickness_mm, thickness_range
from conftest import JobMaker, job_text
from stock_bench import BALL, BLOCK, BULL, FLAT, SADDLE, block, cut, motion, profile_mm, slot_volume_mm3

MICROMETRE = 1e-3
CUTTERS = {"flat": FLAT, "ball": BALL, "bull": BULL}
HALF_PERCENT = 0.005  # what the stock promises for volumes at its default spacing


# ---------------------------------------------------------------------------------------- blanks


def test_block_and_round_have_the_volume_of_their_outline() -> None:
    """Cells on the edge count with their area inside, so the volume is that of the polygon to round-off."""
    assert block().volume_mm3() == pytest.approx(60.0 * 40.0 * 20.0, rel=1e-12)
    disc = outline.circle(50.0)
    assert block(shape=disc).volume_mm3() == pytest.approx(disc.area_mm2 * 20.0, rel=1e-12)
    holed = outline.polygon(
        [[-20, -20], [20, -20], [20, 20], [-20, 20]], [[[-5, -5], [5, -5], [5, 5], [-5, 5]]]
    )
    assert block(shape=holed).volume_mm3() == pytest.approx(1500.0 * 20.0, rel=1e-12)


@pytest.mark.parametrize("spacing", [0.25, 0.5])
def test_stock_over_the_saddle_is_4_a_s4(spacing: float) -> None:
    """Flat top z = a S^2 over the square |x|, |y| <= S: exactly 4 a S^4 (integral of a S^2 - a (x^2 - y^2), derived here)."""
    a, side = 0.01, 30.0
    square = outline.rectangle((2 * side, 2 * side))
    field = block(spacing, top_mm=a * side**2, bottom_mm=-20.0, shape=square.grown(3.0, corners="mitre"))
    assert field.volume_above_mm3(Saddle(a, a, 0.0), square) == pytest.approx(4.0 * a * side**4, rel=1e-4)


def test_even_allowance_is_that_thick(make_job: JobMaker) -> None:
    job = make_job(stock_extra="allowance = 0.3", a=0.01, top=20.0)
    field, saddle = blank_field(job), Saddle.of(job.part)
    low, mean, high = thickness_range(field, saddle, job.part.outline, job.stock.bottom_mm)
    assert low == pytest.approx(0.3, abs=0.5 * MICROMETRE)
    assert mean == pytest.approx(0.3, abs=0.5 * MICROMETRE)
    assert high == pytest.approx(0.3, abs=0.5 * MICROMETRE)
    # Volume of a layer t along the normal: integral of t + H t^2 + K t^3 / 3 over the surface (Steiner's formula); H
    # averages out over the square part, K is -4 a^2 / W^4: below 1e-4 of the whole here.
    wide = outline.rectangle((20.0, 16.0))
    area = saddle.area_mm2(wide.polygon)
    assert field.volume_above_mm3(saddle, wide) == pytest.approx(0.3 * area, rel=0.01)


def test_allowance_stops_at_the_flat_top(make_job: JobMaker) -> None:
    job = make_job(stock_extra="allowance = 3.0", top=1.0)
    assert blank_field(job).tops_mm()[blank_field(job).count > 0].max() == 1.0


def test_offset_heights_meet_the_offset_points() -> None:
    saddle = Saddle(0.01, 0.02, 0.7)
    xy = np.random.default_rng(5).uniform(-20, 20, (200, 2))
    moved = saddle.offset(xy, 1.5)
    np.testing.assert_allclose(
        offset_heights_mm(saddle, moved[:, :2], 1.5), moved[:, 2], atol=0.01 * MICROMETRE
    )
    with pytest.raises(NotConverged, match="allowance"):
        offset_heights_mm(Saddle(1.0, 1.0, 0.0), np.array([[0.0, 0.5]]), 5.0)


def _mesh_job(tmp_path: Path, mesh: trimesh.Trimesh, **changes: object) -> Path:
    mesh.export(tmp_path / "left.stl")
    path = tmp_path / "job.toml"
    fields = {"stock_extra": 'mesh = "left.stl"', "top": 6.0, "bottom": -12.0, **changes}
    path.write_text(job_text(**fields), encoding="utf-8")
    return path


def test_mesh_blank_has_the_volume_of_the_mesh(tmp_path: Path) -> None:
    """A ring with a cross hole: columns of up to two pieces. Volume by trimesh's signed tetrahedra."""
    ring = trimesh.creation.annulus(3.0, 9.0, 10.0, sections=64)
    field = blank_field(load_job(_mesh_job(tmp_path, ring)))
    assert field.volume_mm3() == pytest.approx(ring.volume, rel=HALF_PERCENT)
    torus = trimesh.creation.torus(7.0, 2.0)
    torus.apply_transform(trimesh.transformations.rotation_matrix(math.pi / 2, [0, 1, 0]))
    torus.apply_translation([0.0, 0.0, -3.0])
    field = blank_field(load_job(_mesh_job(tmp_path, torus)))
    assert field.volume_mm3() == pytest.approx(torus.volume, rel=HALF_PERCENT)
    assert field.count.max() == 2


def test_mesh_that_cannot_be_a_blank_is_refused(tmp_path: Path) -> None:
    box = trimesh.creation.box((10.0, 10.0, 10.0))
    opened = trimesh.Trimesh(box.vertices, box.faces[:-1], process=False)
    cases = [
        (opened, "not a closed solid"),
        (box.copy().apply_translation([20, 0, 0]), "outside the blank's outline"),
    ]
    cases.append((box.copy().apply_translation([0, 0, 4.0]), "bottom and top"))
    for mesh, message in cases:
        with pytest.raises(BadInput, match=message):
            blank_field(load_job(_mesh_job(tmp_path, mesh)))
    (tmp_path / "left.stl").write_bytes(b"solid nothing\nendsolid\n")
    with pytest.raises(BadInput, match=r"left\.stl"):
        blank_field(load_job(tmp_path / "job.toml"))


def test_stock_keys_are_checked_with_the_job(tmp_path: Path) -> None:
    both = job_text(stock_extra='allowance = 0.3\nmesh = "gone.stl"')
    with pytest.raises(BadInput, match=r"stock\.mesh: .*given besides allowance") as caught:
        parse_job(both, tmp_path / "job.toml")
    assert "there is no such file" in str(caught.value)
    with pytest.raises(BadInput, match=r"stock\.specific_force: .*lower value first"):
        parse_job(job_text(stock_extra="specific_force = [900.0, 300.0]"), tmp_path / "job.toml")


def _heights(tmp_path: Path, rows: list[str]) -> Path:
    (tmp_path / "heights.csv").write_text("x,y,z\n" + "\n".join(rows) + "\n", encoding="utf-8")
    path = tmp_path / "job.toml"
    path.write_text(job_text(stock_extra='heights = "heights.csv"'), encoding="utf-8")
    return path


def _plane_rows() -> list[str]:
    return [f"{x},{y},{2.0 + 0.05 * x - 0.1 * y}" for y in range(-12, 13, 2) for x in range(-14, 15, 2)]


def test_measured_heights_are_read_between_their_places(tmp_path: Path) -> None:
    """A plane is read exactly by bilinear interpolation: volume = area times the mean height over the bottom."""
    job = load_job(_heights(tmp_path, _plane_rows()))
    assert blank_field(job).volume_mm3() == pytest.approx(26.0 * 22.0 * 14.0, rel=1e-6)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (lambda rows: [*rows[:5], "1,2", *rows[6:]], r"heights\.csv:7: found 2 columns"),
        (lambda rows: [*rows[:5], "1,two,3", *rows[6:]], r"heights\.csv:7: y: found 'two'"),
        (lambda rows: [*rows[:5], *rows[6:]], r"no height is given at x -4, y -12 \(1 places"),
        (lambda rows: [*rows, rows[0]], r"heights\.csv:197: the same place as on line 2"),
        (
            lambda rows: [*rows[:5], rows[5].replace("-4,", "-4.5,"), *rows[6:]],
            r"heights\.csv:7: x: found -4\.5",
        ),
        (
            lambda rows: [row for row in rows if not row.startswith(("12,", "14,"))],
            "needs heights over the whole blank",
        ),
        (lambda rows: [*rows[:-1], rows[-1].rsplit(",", 1)[0] + ",9"], "above the top of the blank"),
        (lambda rows: [*rows[:-1], rows[-1].rsplit(",", 1)[0] + ",-12"], "more than the blank's bottom"),
    ],
)
def test_measured_heights_faults_are_located(tmp_path: Path, change: object, message: str) -> None:
    job = load_job(_heights(tmp_path, change(_plane_rows())))  # type: ignore[operator]
    with pytest.raises(BadInput, match=message):
        blank_field(job)


# ---------------------------------------------------------------------------------------- volumes


@pytest.mark.parametrize("spacing", [0.25, 0.5])
@pytest.mark.parametrize("name", CUTTERS)
def test_slot_volume_is_the_closed_form(name: str, spacing: float) -> None:
    """Slots along X, Y and a diagonal, the directions in which a grid along the part would be wrong by half a cell."""
    cutter = CUTTERS[name]
    exact = slot_volume_mm3(cutter, 26.0, 5.0)
    for direction in (0.0, 0.5 * math.pi, 0.25 * math.pi):
        c, s = 13.0 * math.cos(direction), 13.0 * math.sin(direction)
        field = block(spacing)
        before = field.volume_mm3()
        taken = cut(field, motion([[-c, 0.1 - s, 5.0], [c, 0.1 + s, 5.0]]), cutter)
        assert taken == pytest.approx(exact, rel=HALF_PERCENT)
        assert before - field.volume_mm3() == pytest.approx(taken, rel=1e-9)


def test_plunge_is_the_closed_form() -> None:
    """Straight down 6 mm: cylinder pi R^2 h for the flat, less the ball's missing third of its own cylinder (R^3 pi / 3)."""
    for cutter, exact in ((FLAT, math.pi * 9.0 * 6.0), (BALL, math.pi * 9.0 * 6.0 - math.pi * 27.0 / 3.0)):
        assert cut(block(), motion([[1.0, 2.0, 12.0], [1.0, 2.0, 4.0]]), cutter) == pytest.approx(
            exact, rel=HALF_PERCENT
        )


def _points(cutter: Cutter, tip: Floats, axis: Floats) -> Floats:
    """Points on a cutter whose hull has its volume: rings a little outside, so that their polygon has the circle's area."""
    turn = np.linspace(0.0, 0.5 * math.pi, 24)
    corner = cutter.corner_radius_mm
    height = np.append(corner * (1.0 - np.cos(turn)), cutter.flute_length_mm)
    radius = np.append(cutter.radius_mm - corner + corner * np.sin(turn), cutter.radius_mm)
    sides = 96
    radius = radius / math.sqrt(math.sin(2.0 * math.pi / sides) / (2.0 * math.pi / sides))
    across = np.cross(axis, [0.3, 0.9, 0.1])
    across /= np.linalg.norm(across)
    other = np.cross(axis, across)
    angle = np.arange(sides) * 2.0 * math.pi / sides
    circle = np.cos(angle)[:, None] * across + np.sin(angle)[:, None] * other
    return np.concatenate([tip + h * axis + r * circle for h, r in zip(height, radius, strict=True)])


def _manifold_mm3(cutter: Cutter, moves: PartMotion) -> float:
    """Volume taken from the block: hulls of the cutter at both ends of each move (exact for a fixed axis), united."""
    blank = manifold3d.Manifold.cube((60.0, 40.0, 20.0)).translate((-30.0, -20.0, -10.0))
    poses = [_points(cutter, tip, axis) for tip, axis in zip(moves.tip_mm, moves.axis, strict=True)]
    hulls = [
        manifold3d.Manifold.hull_points(np.concatenate(pair))
        for pair in zip(poses[:-1], poses[1:], strict=True)
    ]
    tool = manifold3d.Manifold.batch_boolean(hulls, manifold3d.OpType.Add)
    return float(blank.volume() - (blank - tool).volume())


@pytest.mark.parametrize("degrees", [0.0, 12.0, 35.0])
@pytest.mark.parametrize("name", CUTTERS)
def test_removed_volume_agrees_with_manifold3d(name: str, degrees: float) -> None:
    """Sloping moves at three tilts, roofs left hanging included; a tenth of a percent is far above the hulls' own error."""
    sine = math.sin(math.radians(degrees))
    axis = np.tile([sine, 0.3 * sine, math.sqrt(1.0 - 1.09 * sine**2)], (4, 1))
    moves = motion([[-15.0, 2.1, 5.0], [0.0, 6.0, 4.0], [10.0, -5.0, 6.0], [12.0, -5.0, 3.0]], axis)
    field = block()
    assert cut(field, moves, CUTTERS[name]) == pytest.approx(_manifold_mm3(CUTTERS[name], moves), rel=0.001)
    assert field.left_in_mm3 == 0.0
    assert (field.count.max() > 1) == (degrees > 0.0)


def test_turning_axis_agrees_with_fine_steps() -> None:
    """The axis turns 20 degrees along a pass; cut in one motion of 20 pieces, and in 400 pieces of a twentieth of them."""
    for cutter in CUTTERS.values():
        taken = []
        for pieces in (40, 800):
            share = np.linspace(0.0, 1.0, pieces + 1)
            angle = np.radians(10.0 + 20.0 * share)
            tips = np.column_stack((-12.0 + 24.0 * share, 1.0 + 2.0 * share, 6.0 + 0.0 * share))
            axes = np.column_stack((np.sin(angle), 0.1 * np.sin(angle), np.cos(angle)))
            taken.append(cut(block(), motion(tips, axes), cutter))
        assert taken[0] == pytest.approx(taken[1], rel=0.001)


def test_error_falls_with_the_spacing() -> None:
    """Mean error over eight slots, one of them within 3 degrees of the grid's own rows, the worst there is."""
    errors = []
    for spacing in (1.0, 0.5, 0.25):
        found = []
        for direction in np.linspace(0.1, 3.0, 8):
            c, s = 12.0 * math.cos(direction), 12.0 * math.sin(direction)
            taken = cut(block(spacing), motion([[-c, -s, 5.0], [c, s, 5.0]]), BULL)
            found.append(abs(taken / slot_volume_mm3(BULL, 24.0, 5.0) - 1.0))
        errors.append(float(np.mean(found)))
    assert errors[2] < errors[1] < errors[0]
    assert errors[2] < 0.002


def test_wall_along_the_grid_is_off_by_half_a_cell_at_most() -> None:
    """The one bad case: a slot along the grid's own rows. Each wall may be off by half a cell, no more."""
    c, s = 13.0 * math.cos(TURN_RAD), 13.0 * math.sin(TURN_RAD)
    exact = slot_volume_mm3(FLAT, 26.0, 5.0)
    for shift in (0.0, 0.06, 0.12):
        taken = cut(block(), motion([[-c, shift - s, 5.0], [c, shift + s, 5.0]]), FLAT)
        assert taken == pytest.approx(exact, abs=2 * 0.125 * 5.0 * (26.0 + 3.0 * math.pi))


def test_operations_add_up_to_blank_less_what_is_left() -> None:
    field = block(0.5)
    before = field.volume_mm3()
    total = 0.0
    for step, cutter in enumerate((FLAT, BULL, BALL)):
        rows = [[sign * 35.0, y, 7.0 - step] for y in np.arange(-20.0, 20.0, 3.0) for sign in (-1.0, 1.0)]
        total += cut(field, motion(rows), cutter)
    assert total == pytest.approx(before - field.volume_mm3(), rel=1e-9)


def test_result_does_not_depend_on_the_number_of_threads(monkeypatch: pytest.MonkeyPatch) -> None:
    rng = np.random.default_rng(3)
    moves = motion(np.column_stack((rng.uniform(-30, 30, (60, 2)), rng.uniform(4, 9, 60))))
    high = []
    for workers in (1, 2, 5):
        monkeypatch.setattr(fields, "_workers", lambda count=workers: count)
        field = block(0.5)
        cut(field, moves, BULL)
        high.append(field.high_mm)
    assert np.array_equal(high[0], high[1])
    assert np.array_equal(high[0], high[2])


def test_tilted_cutter_leaves_a_roof() -> None:
    """A flat cutter lying at 60 degrees drives in from the side below the top: material stays above it."""
    axis = [-math.sin(math.radians(60.0)), 0.0, math.cos(math.radians(60.0))]
    field = block()
    cut(field, motion([[-40.0, 0.0, 2.0], [-20.0, 0.0, 2.0]], [axis, axis]), FLAT)
    roofed = field.count == 2
    assert roofed.sum() > 200
    assert np.all(field.high_mm[0][roofed] == 10.0)
    assert field.volume_mm3() < 48000.0


def test_overflow_keeps_material_and_says_how_much() -> None:
    """Five cuts through a column that can hold four pieces: the narrowest gap is filled again, and counted."""
    high, low = np.zeros((4, 1, 1)), np.zeros((4, 1, 1))
    count = np.ones((1, 1), np.int64)
    high[0], low[0] = 10.0, 0.0
    out = np.empty(3)
    left = taken = 0.0
    for a, b in ((1.0, 1.5), (3.0, 3.4), (5.0, 5.7), (7.0, 7.2)):
        taken += kernels.take_out(high, low, count, 0, 0, a, b, out)
        left += out[2]
    assert count[0, 0] == 4
    assert left == pytest.approx(0.2, abs=1e-12)
    held = sum(high[k, 0, 0] - low[k, 0, 0] for k in range(4))
    assert held == pytest.approx(10.0 - taken, abs=1e-12)
    assert held == pytest.approx(10.0 - 0.5 - 0.4 - 0.7, abs=1e-12)


@settings(max_examples=60, derandomize=True, deadline=None)
@given(st.lists(st.tuples(st.floats(-1, 11), st.floats(0.01, 3)), min_size=1, max_size=8))
def test_taking_out_agrees_with_its_twin(cuts: list[tuple[float, float]]) -> None:
    """Twin: a fine comb of points that are taken away one by one. Cuts that would overflow are left to the test above."""
    high, low = np.zeros((12, 1, 1)), np.zeros((12, 1, 1))
    count = np.ones((1, 1), np.int64)
    high[0], low[0] = 10.0, 0.0
    comb = (np.arange(20000) + 0.5) / 2000.0
    there = np.ones(len(comb), bool)
    out, taken = np.empty(3), 0.0
    for start, length in cuts:
        taken += kernels.take_out(high, low, count, 0, 0, start, start + length, out)
        there &= ~((comb > start) & (comb < start + length))
    kept = np.zeros(len(comb), bool)
    for k in range(count[0, 0]):
        kept |= (comb > low[k, 0, 0]) & (comb < high[k, 0, 0])
    assert np.mean(kept != there) < 1e-3
    assert taken == pytest.approx(10.0 - there.mean() * 10.0, abs=0.01)
    tops = high[: count[0, 0], 0, 0]
    assert np.all(np.diff(tops) < 0.0)


# ---------------------------------------------------------------------------------------- kernels and their twins


def _inside(cutter: Cutter, points: Floats, tip: Floats, axis: Floats) -> np.ndarray:
    """Twin: points inside the cutting part of a cutter, from its profile."""
    offset = points - tip
    height = offset @ axis
    out = np.sqrt(np.maximum(0.0, np.sum(offset**2, axis=1) - height**2))
    inside = (height >= 0.0) & (height <= cutter.flute_length_mm)
    return inside & (out <= profile_mm(cutter, np.clip(height, 0.0, cutter.flute_length_mm)))


def _scratch(cutter: Cutter, c0: Floats, a0: Floats, c1: Floats, a1: Floats) -> Floats:
    ends = np.concatenate((c0, a0, c1, a1))[None, :]
    scratch = np.empty(kernels.SCRATCH)
    kernels.load_segment(0, ends, shape_table([cutter]), np.zeros(1, np.int64), 1e-4, scratch)
    return scratch


@pytest.mark.parametrize("name", CUTTERS)
def test_pose_interval_agrees_with_its_twin(name: str) -> None:
    cutter = CUTTERS[name]
    rng = np.random.default_rng(11)
    z = np.linspace(-30.0, 30.0, 30001)
    checked = 0
    for _ in range(60):
        axis = rng.normal(size=3)
        axis[2] = abs(axis[2]) + 0.2
        axis /= np.linalg.norm(axis)
        tip = rng.uniform(-2.0, 2.0, 3)
        reference = tip + cutter.corner_radius_mm * axis
        u, v = tip[:2] + rng.uniform(-4.0, 4.0, 2)
        low, high, _ = kernels.pose_interval(u, v, 0.0, _scratch(cutter, reference, axis, reference, axis))
        inside = z[_inside(cutter, np.column_stack((np.full(len(z), u), np.full(len(z), v), z)), tip, axis)]
        if inside.size < 5:
            assert high - low < 0.012 or low > high
            continue
        checked += 1
        assert low == pytest.approx(inside.min(), abs=2.1 * MICROMETRE)
        assert high == pytest.approx(inside.max(), abs=2.1 * MICROMETRE)
    assert checked > 20


@pytest.mark.parametrize("upright", [True, False], ids=["upright", "tilted"])
@pytest.mark.parametrize("name", CUTTERS)
def test_swept_interval_agrees_with_its_twin(name: str, upright: bool) -> None:
    """Twin: the union over 2000 poses of where the line is inside. The low end is what is left standing; it has to be right."""
    cutter = CUTTERS[name]
    rng = np.random.default_rng(17)
    checked = 0
    for _ in range(80):
        axis = np.array([0.0, 0.0, 1.0]) if upright else np.array([*rng.uniform(-0.4, 0.4, 2), 1.0])
        axis /= np.linalg.norm(axis)
        c0 = np.zeros(3)
        c1 = rng.uniform(-2.5, 2.5, 3) * np.array([1.0, 1.0, 0.4])
        u, v = 0.5 * c1[:2] + rng.uniform(-3.0, 3.0, 2)
        scratch = _scratch(cutter, c0, axis, c1, axis)
        low, high = kernels.swept(u, v, 100.0, scratch)
        poses = [kernels.pose_interval(u, v, t, scratch)[:2] for t in np.linspace(0.0, 1.0, 2001)]
        hits = np.array([pose for pose in poses if pose[0] < pose[1]])
        if len(hits) < 40:
            continue
        checked += 1
        assert low == pytest.approx(hits[:, 0].min(), abs=5 * MICROMETRE)
        assert high >= hits[:, 1].max() - (0.5 if not upright else 5 * MICROMETRE)
    assert checked > 40


def test_ball_sweep_is_the_tangent_of_its_circles() -> None:
    """A ball of radius 3 along a slope of 1:1 under its own line: lowest z is that of the line less R sqrt 2 (closed form)."""
    scratch = _scratch(
        BALL, np.zeros(3), np.array([0, 0, 1.0]), np.array([10.0, 0, 10.0]), np.array([0, 0, 1.0])
    )
    low, high = kernels.ball_sweep(5.0, 0.0, scratch)
    assert low == pytest.approx(5.0 - 3.0 * math.sqrt(2.0), abs=1e-12)
    assert high == pytest.approx(5.0 + 3.0 * math.sqrt(2.0), abs=1e-12)
    assert kernels.ball_sweep(5.0, 3.1, scratch) == (kernels.FAR, -kernels.FAR)


def test_upright_sweep_of_a_bull_down_a_slope() -> None:
    """Twin: least over a fine comb of places along the path."""
    scratch = _scratch(
        BULL, np.zeros(3), np.array([0, 0, 1.0]), np.array([8.0, 0.0, -4.0]), np.array([0, 0, 1.0])
    )
    for u, v in ((4.0, 0.5), (8.5, 1.0), (-2.0, 1.5), (3.0, 2.9)):
        t = np.linspace(0.0, 1.0, 200001)
        out = np.hypot(u - 8.0 * t, v)
        over = np.maximum(0.0, out - 2.0)
        under = np.where(out <= 3.0, -4.0 * t - np.sqrt(np.maximum(0.0, 1.0 - over**2)), np.inf)
        assert kernels.upright_sweep(u, v, scratch)[0] == pytest.approx(under.min(), abs=0.01 * MICROMETRE)


def test_body_distances_agree_with_their_twins() -> None:
    """Twin: the nearest of many points of the cylinder's surface, and of many places on the line."""
    rng = np.random.default_rng(2)
    body = np.array([2.0, 3.0, 9.0, 0.0])
    angle, height = (
        grid.ravel() for grid in np.meshgrid(np.linspace(0, 2 * math.pi, 400), np.linspace(3, 9, 120))
    )
    side = np.column_stack((2.0 * np.cos(angle), 2.0 * np.sin(angle), height))
    disc = rng.uniform(-2.0, 2.0, (40000, 2))
    disc = disc[np.hypot(*disc.T) <= 2.0]
    skin = np.concatenate((side, *(np.column_stack((disc, np.full(len(disc), z))) for z in (3.0, 9.0))))
    for point in rng.uniform(-6.0, 12.0, (50, 3)):
        found = kernels.body_distance(*point, (0.0, 0.0, 1.0), body)
        assert abs(found) == pytest.approx(np.min(np.linalg.norm(skin - point, axis=1)), abs=0.06)
    axis = np.array([0.3, -0.2, 0.9])
    axis /= np.linalg.norm(axis)
    for x, y in rng.uniform(-6.0, 6.0, (20, 2)):
        z = np.linspace(-20.0, 4.0, 4001)
        twin = min(kernels.body_distance(x, y, value, tuple(axis), body) for value in z)
        assert kernels.line_distance(x, y, -20.0, 4.0, tuple(axis), body) == pytest.approx(
            twin, abs=2 * MICROMETRE
        )


def test_tile_tops_and_boxes() -> None:
    high = np.random.default_rng(1).uniform(0, 5, (1, 20, 30))
    count = (high[0] > 1.0).astype(np.int64)
    tops = np.empty((3, 4))
    highest = kernels.tile_tops(high, count, 20, 8, tops)
    assert highest == high[0].max()
    assert tops[0, 0] == high[0, :8, :8].max()
    assert tops[2, 3] == high[0, 16:, 24:].max()
    box = np.empty(5)
    up = np.array([0.0, 0.0, 1.0])
    kernels.plan_box(_scratch(BALL, np.zeros(3), up, np.array([4.0, 1.0, 2.0]), up), 50.0, box)
    np.testing.assert_allclose(box, [-3.0, -3.0, 7.0, 4.0, -3.0])


def test_reading_between_columns_is_bilinear_and_nearest_at_walls() -> None:
    high, low = np.zeros((1, 2, 3)), np.full((1, 2, 3), -5.0)
    high[0] = [[1.0, 2.0, 0.0], [3.0, 4.0, 0.0]]
    count = np.array([[1, 1, 0], [1, 1, 0]])
    grid = (0.0, 0.0, 1.0, 0)
    middle = 0.25 * (1.0 + 2.0 + 3.0 + 4.0)
    assert kernels.in_material(0.5, 0.5, middle - 1e-9, grid, 0, high, low, count)
    assert not kernels.in_material(0.5, 0.5, middle + 1e-9, grid, 0, high, low, count)
    assert kernels.in_material(1.4, 0.2, 1.9, grid, 0, high, low, count)
    assert not kernels.in_material(1.6, 0.2, 1.9, grid, 0, high, low, count)
    assert not kernels.in_material(0.5, 0.5, -6.0, grid, 0, high, low, count)


def test_columns_cross_a_mesh_as_often_in_as_out() -> None:
    """Rays through vertices and edges of a box whose corners stand on columns: each counts once (twin: the box itself)."""
    box = trimesh.creation.box((4.0, 4.0, 2.0))
    corners = np.ascontiguousarray(box.vertices[box.faces])
    crossings = np.zeros((9, 9), np.int64)
    none = np.empty(0)
    _mesh_kernels.cross(corners, (-4.0, -4.0, 1.0), crossings, np.zeros(0, np.int64), none, none, False)
    assert set(np.unique(crossings)) == {0, 2}
    assert crossings[3:6, 3:6].sum() == 18
    first = np.concatenate(([0], np.cumsum(crossings.ravel())))
    height, sense = np.empty(first[-1]), np.empty(first[-1])
    crossings[:] = 0
    _mesh_kernels.cross(corners, (-4.0, -4.0, 1.0), crossings, first, height, sense, True)
    assert sorted(set(height.tolist())) == [-1.0, 1.0]
    assert np.all(sense == np.sign(height))
    high, low = np.zeros((2, 9, 9)), np.zeros((2, 9, 9))
    count, filled = np.zeros((9, 9), np.int64), np.zeros((9, 9))
    _mesh_kernels.stack(first, height, sense, high, low, count, filled)
    assert np.array_equal(count > 0, crossings > 0)
    assert np.all(high[0][count > 0] == 1.0)
    assert np.all(low[0][count > 0] == -1.0)
    assert filled.sum() == 0.0


def test_too_many_pieces_of_a_mesh_fill_the_narrowest_gap() -> None:
    height = np.array([9.0, 8.0, 7.5, 6.0, 5.0, 4.0])
    sense = np.array([1.0, -1.0, 1.0, -1.0, 1.0, -1.0])
    high, low, count, filled = (
        np.zeros((2, 1, 1)),
        np.zeros((2, 1, 1)),
        np.zeros((1, 1), np.int64),
        np.zeros((1, 1)),
    )
    _mesh_kernels.stack(np.array([0, 6]), height, sense, high, low, count, filled)
    assert count[0, 0] == 2
    assert (high[0, 0, 0], low[0, 0, 0], filled[0, 0]) == (9.0, 6.0, 0.5)


def test_sliding_least_agrees_with_its_twin() -> None:
    rng = np.random.default_rng(8)
    values = rng.normal(size=300)
    first = np.maximum(0, np.arange(300) - rng.integers(0, 3) - 7)
    after = np.minimum(300, np.arange(300) + 5)
    out = np.empty(300)
    _smooth_kernels.sliding_least(values, first, after, out)
    assert out.tolist() == [values[a:b].min() for a, b in zip(first, after, strict=True)]


def test_station_values_are_carried_to_the_next_station_or_rapid() -> None:
    first = np.array([0, 1, 1, 1, 1, 2])
    rapid = np.array([False, False, True, False, False])
    out = np.zeros((5, 2))
    _smooth_kernels.carry(np.array([[1.0, 2.0], [3.0, 4.0]]), first, rapid, out)
    assert out[:, 0].tolist() == [1.0, 1.0, 0.0, 0.0, 3.0]


# ---------------------------------------------------------------------------------------- segments


def _arc_motion(rows: int, motions: int) -> PartMotion:
    turn = np.linspace(0.0, 0.5 * math.pi, rows + 1)
    base = motion(np.column_stack((20.0 * np.cos(turn), 20.0 * np.sin(turn), np.full(rows + 1, 3.0))))
    per = rows // motions
    number = np.concatenate(([-1], np.repeat(np.arange(motions), per)))
    share = np.concatenate(([0.0], np.tile(np.arange(1, per + 1) / per, motions)))
    return PartMotion(base.tip_mm, base.axis, base.line, base.rapid, base.tool, number, share)


def test_pieces_are_joined_within_the_chord() -> None:
    """An arc of radius 20 read as 2000 pieces: joined chords may be sqrt(8 R e) long (sagitta), at most 64 pieces."""
    arc = _arc_motion(2000, 4)
    segments = take_segments(arc, [BALL], chord_mm=0.003)
    longest = math.sqrt(8.0 * 20.0 * 0.003)
    assert segments.length_mm.max() <= longest * 1.001
    assert segments.length_mm.max() > 0.9 * longest
    assert segments.length_mm.sum() == pytest.approx(10.0 * math.pi, rel=1e-3)
    assert np.array_equal(segments.ends[1:, :3], segments.ends[:-1, 6:9])
    assert set(arc.motion[segments.row]) == {0, 1, 2, 3}


def test_join_rows_agrees_with_its_twin() -> None:
    """Twin: numpy check that every row within a segment lies near it, and that one row more would not."""
    arc = _arc_motion(600, 2)
    count = len(arc.line)
    pairs = np.empty(2 * count, np.int64)
    live = np.arange(count) > 0
    found = _sweep_kernels.join_rows(
        arc.tip_mm, arc.axis, np.zeros(count), arc.motion, arc.fraction, live, 0.002, 1.0, 60.0, 1000, pairs
    )

    def off(start: int, end: int) -> float:
        begun = arc.fraction[start] if arc.motion[start] == arc.motion[end] else 0.0
        inner = np.arange(start + 1, end)
        share = ((arc.fraction[inner] - begun) / (arc.fraction[end] - begun))[:, None]
        chord = arc.tip_mm[start] + share * (arc.tip_mm[end] - arc.tip_mm[start])
        return float(np.linalg.norm(arc.tip_mm[inner] - chord, axis=1).max(initial=0.0))

    chosen = pairs[: 2 * found].reshape(-1, 2)
    assert chosen[0, 0] == 0
    assert chosen[-1, 1] == count - 1
    assert np.array_equal(chosen[1:, 0], chosen[:-1, 1])
    for start, end in chosen:
        assert off(start, end) <= 0.002
        if end + 1 < count and arc.motion[end + 1] == arc.motion[end]:
            assert off(start, end + 1) > 0.002


def test_long_moves_are_split_and_times_shared() -> None:
    moves = motion([[0, 0, 5.0], [10.0, 0, 5.0], [10.0, 3.0, 5.0]], rapid=[0, 0, 1])
    segments = take_segments(moves, [FLAT], longest_mm=1.5)
    assert len(segments) == 7 + 1
    assert segments.length_mm[:7] == pytest.approx(10.0 / 7.0)
    seconds = seconds_of(segments, moves, np.array([14.0, np.nan]))
    assert seconds[:7] == pytest.approx(2.0)
    assert np.isnan(seconds[7])


def test_stations_come_with_travel_and_at_corners() -> None:
    """0.1 mm moves and a corner: a station each 0.5 mm, and one at the corner; twin: a plain walk."""
    tips = np.concatenate([np.column_stack((np.arange(0.0, 3.3, 0.1), np.zeros(33), np.full(33, 5.0)))])
    tips = np.concatenate((tips, [[3.2, 0.1, 5.0], [3.2, 0.2, 5.0]]))
    segments = take_segments(motion(tips), [FLAT])
    stations = lay_stations(segments, 0.5)
    expected, travelled = [], 0.5
    for k, length in enumerate(segments.length_mm):
        if travelled >= 0.5 or k == 32:
            expected.append(k)
            travelled = 0.0
        travelled += length
    assert stations.segment.tolist() == expected
    across, feed = stations.frame[:, 6:9], stations.frame[:, 9:12]
    assert np.abs(np.sum(across * feed, axis=1)).max() < 1e-12


def test_turned_frame_turns_back() -> None:
    x, y = np.array([1.0, -3.0]), np.array([2.0, 5.0])
    np.testing.assert_allclose(back(*turned(x, y)), [x, y], atol=1e-12)
    p, q, m = turned_surface(Saddle(0.01, 0.02, 0.4))
    u, v = turned(x, y)
    np.testing.assert_allclose(
        p * u**2 + q * v**2 + m * u * v, Saddle(0.01, 0.02, 0.4).height(x, y), atol=1e-14
    )


def test_cell_areas_add_up_to_the_outline() -> None:
    for shape in (BLOCK, outline.circle(31.0), outline.slot((50.0, 12.0))):
        areas = ColumnGrid.over(shape, 0.37).areas_mm2(shape)
        assert areas.sum() == pytest.approx(shape.area_mm2, rel=1e-12)
        assert areas.max() <= 0.37**2 * (1.0 + 1e-12)


# ---------------------------------------------------------------------------------------- thickness


def test_thickness_under_a_flat_top_is_exact() -> None:
    """Along the normal to a flat top: (top - z) / n_z (closed form)."""
    field = block(0.5)
    xy = np.random.default_rng(4).uniform(-15.0, 15.0, (100, 2))
    expected = (10.0 - SADDLE.height(xy[:, 0], xy[:, 1])) / SADDLE.normal(xy)[:, 2]
    np.testing.assert_allclose(thickness_mm(field, SADDLE, xy, -10.0), expected, rtol=1e-9)


def test_thickness_map_is_blank_outside_and_negative_where_too_much_is_gone() -> None:
    field = block(0.5)
    part = outline.circle(24.0)
    cut(field, motion([[-3.0, 0.0, -2.0], [3.0, 0.0, -2.0]]), FLAT)
    found = thickness_map(field, SADDLE, part, -10.0)
    x, y = np.meshgrid(found.x_mm, found.y_mm)
    inside = np.hypot(x, y) < 12.0
    assert np.array_equal(np.isfinite(found.thickness_mm), inside)
    gone = (np.abs(y) < 2.0) & (np.abs(x) < 3.0)
    assert np.all(found.thickness_mm[gone] < -1.9)
    assert thickness_range(field, SADDLE, part, -10.0)[0] < -1.9
