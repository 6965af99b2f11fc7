"""Passes: spacing, cover, chords, order, links, entries. Brute force, shapely and scipy as outside truth."""

from __future__ import annotations

import itertools
import math
from pathlib import Path

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import integrate, optimize
from scipy.spatial import cKDTree

from anticlast import outline as outlines
from anticlast.cutter import Cutter
from anticlast.errors import CannotPlan
from anticlast.outline import Outline
from anticlast.passes import cover
from anticlast.passes.cusp import cusp_height
from anticlast.passes.entry import arc_back_and_up
from anticlast.passes.frame import PassFrame
from anticlast.passes.order import cells_of, cutting_order
from anticlast.passes.plan import plan_operation
from anticlast.passes.scallop import length_floor_mm, second_order_step
from anticlast.passes.tilt import angle_between, lead_and_lean
from anticlast.records import Control, CutterPath, Job, Machine, Operation, Part, Purpose, Spindle, Stock
from anticlast.saddle import Saddle
from anticlast.tolerances import CHORD_SHARE_OF_SCALLOP

MICRON = 1e-3
NANOMETRE = 1e-6
UPRIGHT = (0.0, 0.0, 1.0)
# Chords that cut into the part may lower every cusp in sight by the budget at most, docs/theory-passes.md#budget; the places
# looked at by brute force miss the very highest by some tenths of a percent.
LOWERED = 1.0 - CHORD_SHARE_OF_SCALLOP - 0.003
CONTROL = Control("inverse", "G64", 4, 4, 3, 500, False, "M2")
MACHINE = Machine("m", "m", "mm", 0.0, (), Spindle(2000, 24000, 0.35), CONTROL, Path("m.toml"))

SQUARE = outlines.rectangle((24.0, 24.0))
OFFSET = outlines.rectangle((14.0, 20.0), center_mm=(12.0, -9.0))
DISC = outlines.circle(22.0)
SLOT = outlines.slot((26.0, 9.0))
L_SHAPE = outlines.polygon([(-12, -12), (12, -12), (12, -3), (-3, -3), (-3, 12), (-12, 12)])
U_SHAPE = outlines.polygon([(-12, -10), (12, -10), (12, 11), (5, 11), (5, -3), (-5, -3), (-5, 7), (-12, 7)])
PLATE = Outline(
    shapely.box(-12, -12, 12, 12)
    .difference(shapely.Point(2, 1).buffer(5))
    .difference(shapely.box(-9, 6, -8.2, 9))
)
SHAPES = {
    "square": SQUARE,
    "offset": OFFSET,
    "disc": DISC,
    "slot": SLOT,
    "L": L_SHAPE,
    "U": U_SHAPE,
    "plate": PLATE,
}


def job_of(
    outline: Outline,
    a: float = 0.01,
    b: float | None = None,
    rotate: float = 0.0,
    radius: float = 3.0,
    **wish: object,
) -> tuple[Job, Operation]:
    """A job with one ball finishing operation; ``wish`` overrides fields of the operation."""
    cutter = Cutter(1, "ball", radius, radius, 2, 18.0, radius, 30.0)
    fields: dict = {
        "index": 1,
        "does": "finish",
        "cutter": cutter,
        "pattern": "raster",
        "direction_rad": 0.0,
        "scallop_mm": 0.01,
        "stepover_mm": None,
        "allowance_mm": 0.0,
        "spindle_rpm": 18000.0,
        "feed_mm_min": 1500.0,
        "lead_rad": 0.0,
        "lean_rad": 0.0,
        "fixed_axis": None,
        "tolerance_mm": 0.002,
        "way": "both",
    }
    operation = Operation(**{**fields, **wish})
    part = Part(a, b or a, rotate, outline)
    stock = Stock("tooling board", 40.0, -40.0, outline.grown(3.0), 0.3)
    job = Job("j", "j", "mm", Path("j.toml"), part, stock, MACHINE, (0, 0, 0), 5.0, (cutter,), (operation,))
    return job, operation


def plan(outline: Outline, nearest=lambda axis: axis, **wish: object) -> tuple[Job, CutterPath]:
    job, operation = job_of(outline, **wish)
    return job, plan_operation(job, operation, nearest)


def reference(path: CutterPath) -> list[np.ndarray]:
    return [s.tip_mm + path.operation.cutter.reference_height_mm * s.axis for s in path.stretches]


def rows(path: CutterPath, name: str) -> np.ndarray:
    return np.concatenate([getattr(s, name) for s in path.stretches])


class Swept:
    """Brute force: height left by capsules about all straight moves of the ball's centre."""

    def __init__(self, job: Job, path: CutterPath) -> None:
        centres = reference(path)
        self.start = np.concatenate([c[:-1] for c in centres])
        self.end = np.concatenate([c[1:] for c in centres])
        self.radius = path.operation.cutter.radius_mm
        self.allowance = path.operation.allowance_mm
        self.saddle = Saddle.of(job.part)
        self.tree = cKDTree(0.5 * (self.start + self.end))
        self.reach = (
            0.5 * np.linalg.norm(self.end - self.start, axis=1).max() + 1.6 * path.stepover_mm[1] + 0.3
        )

    def height(self, xy: np.ndarray) -> np.ndarray:
        """Where the line along the normal first meets swept space, less the allowance."""
        normal = self.saddle.normal(xy)
        point = self.saddle.point(xy)
        near = self.tree.query_ball_point(point + (self.radius + self.allowance) * normal, self.reach)
        owner = np.repeat(np.arange(len(xy)), [len(n) for n in near])
        segment = np.array([i for n in near for i in n], dtype=np.int64)
        p, n, a, b = point[owner], normal[owner], self.start[segment], self.end[segment]
        best = np.full(len(owner), np.inf)
        length = np.linalg.norm(b - a, axis=1)
        d = (b - a) / np.where(length > 0, length, 1.0)[:, None]
        for ball in (a, b):
            lean = ((ball - p) * n).sum(1)
            left = self.radius**2 - ((ball - p) ** 2).sum(1) + lean**2
            best = np.where(left >= 0, np.minimum(best, lean - np.sqrt(np.maximum(left, 0))), best)
        across_n = n - (n * d).sum(1)[:, None] * d
        across_p = (a - p) - ((a - p) * d).sum(1)[:, None] * d
        aa, bb = (across_n**2).sum(1), (across_n * across_p).sum(1)
        left = bb**2 - aa * ((across_p**2).sum(1) - self.radius**2)
        t = (bb - np.sqrt(np.maximum(left, 0))) / np.where(aa > 0, aa, 1.0)
        s = ((p + t[:, None] * n - a) * d).sum(1)
        best = np.where((left >= 0) & (aa > 0) & (s >= 0) & (s <= length), np.minimum(best, t), best)
        found = np.full(len(xy), np.inf)
        np.minimum.at(found, owner, best)
        return found - self.allowance


def highest_scallop(job: Job, path: CutterPath) -> float:
    """Highest scallop by brute force: the rim, and tops of ridges found by golden section."""
    swept = Swept(job, path)
    d = path.operation.direction_rad
    along, left = np.array([math.cos(d), math.sin(d)]), np.array([-math.sin(d), math.cos(d)])
    cut = [s.contact_mm[s.purpose == Purpose.CUT, :2] @ left for s in path.stretches]
    lines = np.unique(np.round(np.concatenate(cut), 7))
    places = []
    for low, high in itertools.pairwise(lines):
        for u0, u1 in job.part.outline.clip_line(d, 0.5 * (low + high)):
            places += [(u, low, high) for u in np.linspace(u0 + 1e-4, u1 - 1e-4, 9)]
    u, low, high = np.array(places).T
    at = lambda v: u[:, None] * along + v[:, None] * left  # noqa: E731
    ratio = 0.5 * (math.sqrt(5.0) - 1.0)
    for _ in range(16):
        first, last = high - ratio * (high - low), low + ratio * (high - low)
        rising = swept.height(at(first)) < swept.height(at(last))
        low, high = np.where(rising, first, low), np.where(rising, high, last)
    ridge = at(0.5 * (low + high))
    inside = job.part.outline.contains(ridge)
    rim = job.part.outline.boundary_points(0.05)
    return max(swept.height(ridge[inside]).max(), swept.height(rim).max())


# ----------------------------------------------------------------------------------------- geometry of a pass


def test_centre_path_and_its_derivatives_agree_with_finite_differences():
    frame = PassFrame(Saddle(0.012, 0.007, 0.4), 0.8, 3.0, 0.25)
    rng = np.random.default_rng(1)
    u, v, turn = rng.uniform(-20, 20, 40), rng.uniform(-20, 20, 40), rng.uniform(0, 6, 40)
    du, dv = np.cos(turn), np.sin(turn)
    centre, rate, bend = frame.centre(u, v, du, dv)
    xyz = frame.saddle.offset(frame.xy(u, v), 3.25)
    assert np.abs(np.column_stack((*frame.uv(xyz[:, :2]), xyz[:, 2])) - centre).max() < 1e-12
    step = 1e-4
    ahead = frame.centre(u + step * du, v + step * dv, du, dv)[0]
    behind = frame.centre(u - step * du, v - step * dv, du, dv)[0]
    assert np.abs((ahead - behind) / (2 * step) - rate).max() < 1e-9
    assert np.abs((ahead + behind - 2 * centre) / step**2 - bend).max() < 1e-5


@pytest.mark.parametrize(
    ("a", "radius", "degrees", "apart", "micron"),
    # Derived independently with a swept-ball height map: true parabola (0 and 90 degrees), along a ruling (45
    # degrees).
    [
        (0.01, 3.0, 0, 0.5, 11.0645715),
        (0.01, 3.0, 90, 0.5, 9.8058450),
        (0.02, 3.0, 0, 0.5, 11.6951182),
        (0.01, 5.0, 90, 0.6, 8.1053538),
        (0.02, 3.0, 45, 0.5, 10.28381),
        (0.05, 5.0, 45, 0.5, 4.69080),
    ],
)
def test_height_left_by_one_pass_half_a_step_away(a, radius, degrees, apart, micron):
    frame = PassFrame(Saddle(a, a, 0.0), math.radians(degrees), radius)
    left = frame.left_over(np.zeros(1), np.zeros(1), np.array([apart / 2]))
    assert left[0] * 1e3 == pytest.approx(micron, abs=2e-5)


@settings(derandomize=True, max_examples=25, deadline=None)
@given(st.floats(-3, 3), st.floats(-25, 25), st.floats(-25, 25), st.floats(0.0, 0.5), st.floats(0.3, 3.0))
def test_height_left_by_one_pass_against_scipy(direction, u, v, allowance, ratio):
    # Outside truth: scipy's bounded minimiser over the pass, on the bare definition.
    frame = PassFrame(Saddle(0.01, 0.01 * ratio, 0.3), direction, 3.0, allowance)
    line = v + 0.24
    point = frame.saddle.offset(frame.xy(np.array([u]), np.array([v])), allowance)[0]
    normal = frame.saddle.normal(frame.xy(np.array([u]), np.array([v])))[0]

    def meets(at: float) -> float:
        d = frame.saddle.offset(frame.xy(np.array([at]), np.array([line])), frame.reach_mm)[0] - point
        return d @ normal - math.sqrt(9.0 - d @ d + (d @ normal) ** 2)

    found = optimize.minimize_scalar(
        meets, bounds=(u - 1.0, u + 1.0), method="bounded", options={"xatol": 1e-9}
    )
    left = frame.left_over(np.array([u]), np.array([v]), np.array([line]))[0]
    assert left == pytest.approx(found.fun, abs=1e-10)


def test_leading_order_step_is_the_known_one():
    # p = s sqrt(1 + z_u^2) / W with s from the geodesic-torsion formula.
    rng = np.random.default_rng(2)
    for allowance in (0.0, 0.4):
        frame = PassFrame(Saddle(0.015, 0.008, 0.2), 1.1, 3.0, allowance)
        u, v = rng.uniform(-20, 20, (2, 50))
        xy = frame.xy(u, v)
        zx, zy = frame.saddle.gradient(*xy.T)
        along = zx * math.cos(1.1) + zy * math.sin(1.1)
        step = second_order_step(frame.saddle, 3.0, xy, 1.1, 0.01, allowance)
        expected = step * np.sqrt(1 + along**2) / frame.saddle.stretch(xy)
        assert np.sqrt(0.08 / frame.crowding(u, v)) == pytest.approx(expected, rel=1e-12)


# ------------------------------------------------------------------------------------------------ spacing


@pytest.mark.parametrize("pattern", ["raster", "graded"])
@pytest.mark.parametrize(
    ("shape", "wish"),
    [
        ("square", {"a": 0.02, "direction_rad": 0.0}),
        ("square", {"a": 0.02, "b": 0.011, "rotate": 0.5, "direction_rad": 2.3}),
        ("offset", {"a": 0.02, "b": 0.03, "direction_rad": math.radians(37.0), "radius": 4.0}),
        ("disc", {"a": 0.03, "direction_rad": math.radians(45.0), "radius": 5.0}),
        ("slot", {"a": 0.02, "direction_rad": math.radians(-70.0), "scallop_mm": 0.006}),
        ("L", {"a": 0.015, "direction_rad": math.radians(90.0), "scallop_mm": 0.02}),
        ("U", {"a": 0.015, "direction_rad": math.radians(10.0), "allowance_mm": 0.25}),
        ("plate", {"a": 0.015, "direction_rad": 0.0}),
        ("plate", {"a": 0.015, "direction_rad": math.radians(63.0)}),
    ],
)
def test_predicted_scallop_is_what_brute_force_finds_and_keeps_the_limit(pattern, shape, wish):
    # A standing axis: what turning axes add is the machine stage's, and not in these rows.
    job, path = plan(SHAPES[shape], pattern=pattern, fixed_axis=UPRIGHT, **wish)
    found = highest_scallop(job, path)
    assert LOWERED * path.scallop_predicted_mm <= found <= 1.001 * path.scallop_predicted_mm
    assert found <= path.operation.scallop_mm
    assert path.scallop_predicted_mm <= path.operation.scallop_mm


@pytest.mark.parametrize(
    ("a", "radius", "height", "steps", "lengths"),
    # Square |x|, |y| <= 30 in the cusp metric (T. Kim 2007, from memory), recomputed below by scipy.
    # The table's narrowest steps were read on a coarser grid that misses the corners: hence 0.1 %.
    [
        (0.005, 3.0, 0.010, (0.4632, 0.4756), (7887, 7681, 7676, 7459)),
        (0.010, 3.0, 0.010, (0.4125, 0.4285), (9225, 8882, 8419, 8006)),
        (0.020, 3.0, 0.010, (0.3091, 0.3190), (14027, 13591, 11038, 10292)),
        (0.010, 5.0, 0.005, (0.3721, 0.3964), (10228, 9601, 9371, 8620)),
    ],
)
def test_cut_lengths_against_the_leading_order_table(a, radius, height, steps, lengths):
    square = outlines.rectangle((60.0, 60.0))
    for turn in (0, 1):
        frame = PassFrame(Saddle(a, a, 0.0), turn * math.pi / 2, radius)

        def narrowest(v: float, frame: PassFrame = frame) -> float:
            u = np.linspace(-30.0, 30.0, 121)
            return float(np.sqrt(8 * height / frame.crowding(u, np.full_like(u, v))).min())

        def run(v: float, frame: PassFrame = frame) -> float:
            uu, uv, _ = frame.hessian_uv()
            return integrate.quad(lambda u: math.sqrt(1 + (uu * u + uv * v) ** 2), -30.0, 30.0)[0]

        step = min(narrowest(v) for v in np.linspace(-30, 30, 61))
        constant = integrate.quad(run, -30.0, 30.0)[0] / step
        varied = integrate.quad(lambda v: run(v) / narrowest(v), -30.0, 30.0)[0]
        assert step == pytest.approx(steps[turn], abs=4e-4)
        assert constant == pytest.approx(lengths[turn], rel=1.5e-3)
        assert varied == pytest.approx(lengths[2 + turn], rel=1.5e-3)
        for pattern, expected in (("raster", constant), ("graded", varied)):
            _, path = plan(
                square,
                a=a,
                radius=radius,
                scallop_mm=height,
                pattern=pattern,
                direction_rad=turn * math.pi / 2,
            )
            # The chord budget takes height, and so length; whole passes take up to one more.
            assert (
                expected * 0.999
                < path.cut_length_mm
                < expected * (1.002 / math.sqrt(1.0 - CHORD_SHARE_OF_SCALLOP) + 1.0 / path.passes)
            )


# Straight parallel passes alone cost 8.7 % over the floor for a = 0.015 on 100 mm: there the floor is out of
# their reach.
@pytest.mark.parametrize(
    ("a", "size"), [(0.005, 60.0), (0.005, 100.0), (0.01, 60.0), (0.01, 100.0), (0.015, 60.0)]
)
@pytest.mark.parametrize("height", [0.005, 0.01])
def test_graded_across_the_concave_direction_is_within_five_percent_of_the_floor(a, size, height):
    outline = outlines.rectangle((size, size))
    for rotate in (0.0, 0.6):
        turned = Outline(shapely.affinity.rotate(outline.polygon, rotate, use_radians=True))
        _, path = plan(
            turned,
            a=a,
            rotate=rotate,
            scallop_mm=height,
            pattern="graded",
            direction_rad=rotate + math.pi / 2,
        )
        floor = length_floor_mm(Saddle(a, a, rotate), turned, 3.0, height)
        assert floor < path.cut_length_mm < 1.05 * floor


def test_graded_steps_follow_the_tightest_point_between_two_passes():
    job, path = plan(SQUARE, a=0.03, pattern="graded", direction_rad=0.3)
    left = np.array([-math.sin(0.3), math.cos(0.3)])
    lines = np.unique(np.round(rows(path, "contact_mm")[rows(path, "purpose") == Purpose.CUT, :2] @ left, 8))
    design = 0.01 * (1.0 - CHORD_SHARE_OF_SCALLOP)
    cusps = []
    for low, high in itertools.pairwise(lines):
        (span,) = SQUARE.clip_line(0.3, 0.5 * (low + high))
        cusps.append(cusp_height(Saddle.of(job.part), 3.0, np.linspace(*span, 60), low, high, 0.3).max())
    assert max(cusps) <= design * (1 + 1e-6)
    # All steps are shrunk alike so as to come out even: by half a pass in 77 on average. At the two corners a
    # strip's tightest point is looked for a little outside.
    assert np.median(cusps) > 0.98 * design
    assert min(cusps) > 0.95 * design


def test_raster_passes_are_evenly_spaced_and_half_a_step_from_the_edges():
    _, path = plan(SQUARE, a=0.02)
    lines = np.unique(np.round(rows(path, "contact_mm")[rows(path, "purpose") == Purpose.CUT, 1], 8))
    steps = np.diff(lines)
    assert np.ptp(steps) < 1e-7
    assert lines.size == path.passes
    assert abs((lines[0] + 12.0) / steps[0] - 0.5) < 0.1
    assert lines[0] + 12.0 == pytest.approx(12.0 - lines[-1], abs=1e-7)


@pytest.mark.parametrize("shape", ["square", "disc", "U"])
def test_stepover_given_is_the_largest_distance_on_the_surface(shape):
    job, path = plan(
        SHAPES[shape], a=0.03, scallop_mm=None, stepover_mm=0.37, direction_rad=0.9, fixed_axis=UPRIGHT
    )
    assert path.stepover_mm[1] == pytest.approx(0.37, abs=10 * NANOMETRE)
    found = highest_scallop(job, path)
    assert LOWERED * path.scallop_predicted_mm <= found <= 1.001 * path.scallop_predicted_mm
    # Outside truth: distances from surface points of one pass to the nearest pass beside it, shapely-free.
    d = path.operation.direction_rad
    left = np.array([-math.sin(d), math.cos(d)])
    saddle = Saddle.of(job.part)
    lines = np.unique(np.round(rows(path, "contact_mm")[rows(path, "purpose") == Purpose.CUT, :2] @ left, 7))
    widest = 0.0
    for low, high in itertools.pairwise(lines):
        for u0, u1 in job.part.outline.clip_line(d, 0.5 * (low + high)):
            u = np.linspace(u0, u1, 25)
            on = PassFrame(saddle, d, 3.0)
            here = saddle.point(on.xy(u, np.full_like(u, low)))
            there = saddle.point(on.xy(np.linspace(u0 - 1, u1 + 1, 1500), np.full(1500, high)))
            widest = max(widest, cKDTree(there).query(here)[0].max())
    assert widest == pytest.approx(0.37, rel=2e-3)


def test_a_stepover_is_for_raster_only():
    with pytest.raises(CannotPlan, match="'raster' only"):
        plan(SQUARE, pattern="graded", scallop_mm=None, stepover_mm=0.3)


def test_a_strip_narrower_than_a_step_takes_one_pass_in_its_middle():
    _, path = plan(outlines.rectangle((20.0, 0.3)), a=0.01)
    assert path.passes == 1
    cut = rows(path, "purpose") == Purpose.CUT
    assert np.abs(rows(path, "contact_mm")[cut, 1]).max() < 0.02


# ------------------------------------------------------------------------------------------------ cover


@pytest.mark.parametrize("shape", sorted(SHAPES))
@pytest.mark.parametrize("degrees", [0.0, 90.0, 28.0, -61.0])
def test_cut_length_and_rows_agree_with_shapely_clipped_lines(shape, degrees):
    job, path = plan(SHAPES[shape], a=0.02, direction_rad=math.radians(degrees), scallop_mm=0.02)
    saddle, region = Saddle.of(job.part), job.part.outline.polygon
    d = path.operation.direction_rad
    along, left = np.array([math.cos(d), math.sin(d)]), np.array([-math.sin(d), math.cos(d)])
    cut = [s.contact_mm[s.purpose == Purpose.CUT, :2] @ left for s in path.stretches]
    lines = np.unique(np.round(np.concatenate(cut), 7))
    expected = 0.0
    for v in lines:
        line = shapely.LineString([v * left - 60 * along, v * left + 60 * along]).intersection(region)
        for part in shapely.get_parts(line):
            (x0, y0), (x1, y1) = part.coords

            def speed(t: float, x0=x0, y0=y0, x1=x1, y1=y1) -> float:
                zx, zy = saddle.gradient(x0 + t * (x1 - x0), y0 + t * (y1 - y0))
                return math.hypot(x1 - x0, y1 - y0, float(zx) * (x1 - x0) + float(zy) * (y1 - y0))

            expected += integrate.quad(speed, 0.0, 1.0)[0]
    assert path.cut_length_mm == pytest.approx(expected, abs=1e-3)
    # Rows: each CUT move lies inside, each OVERRUN move outside, and chords sum to the same length.
    total = 0.0
    for s in path.stretches:
        middle = 0.5 * (s.contact_mm[1:, :2] + s.contact_mm[:-1, :2])
        run = np.linalg.norm(np.diff(s.contact_mm, axis=0), axis=1)
        inside = shapely.contains_xy(region, middle[:, 0], middle[:, 1])
        sure = shapely.distance(shapely.points(middle), region.boundary) > 1e-6
        purpose = s.purpose[1:]
        assert np.all(inside[(purpose == Purpose.CUT) & sure])
        assert not np.any(inside[(purpose == Purpose.OVERRUN) & sure])
        total += run[purpose == Purpose.CUT].sum()
    assert total == pytest.approx(expected, rel=1e-5)


@pytest.mark.parametrize("shape", sorted(SHAPES))
@pytest.mark.parametrize("pattern", ["raster", "graded"])
def test_every_point_of_the_outline_lies_within_half_a_step_of_a_pass(shape, pattern):
    job, path = plan(SHAPES[shape], a=0.02, direction_rad=0.7, pattern=pattern, scallop_mm=0.02)
    xy = np.vstack((job.part.outline.boundary_points(0.05), job.part.outline.grid(0.31)))
    segments = shapely.linestrings(
        np.concatenate(
            [np.stack((s.contact_mm[:-1, :2], s.contact_mm[1:, :2]), axis=1) for s in path.stretches]
        )
    )
    kind = np.concatenate([s.purpose[1:] for s in path.stretches])
    tree = shapely.STRtree(segments[np.isin(kind, [Purpose.CUT, Purpose.OVERRUN])])
    distance = tree.query_nearest(shapely.points(xy), return_distance=True, all_matches=False)[1]
    frame = PassFrame(Saddle.of(job.part), 0.7, 3.0)
    half = 0.5 * np.sqrt(8 * 0.02 / frame.crowding(*frame.uv(xy)))
    assert (distance / half).max() <= 1.01


def test_strip_shadows_are_exact_against_shapely():
    rng = np.random.default_rng(4)
    for outline in SHAPES.values():
        frame = PassFrame(Saddle(0.01, 0.01, 0.0), rng.uniform(0, 3), 3.0)
        low, high = outline.v_range(frame.direction_rad)
        edges = np.linspace(low, high, 12)
        bounds = np.column_stack((edges[:-1] - 0.1, edges[1:] + 0.1))
        group, u0, u1 = cover.merged(*cover.strip_extents(frame, outline, bounds), bridge_mm=1e-9)
        turned = shapely.transform(outline.polygon, lambda xy, frame=frame: np.column_stack(frame.uv(xy)))
        for strip, (bottom, top) in enumerate(bounds):
            parts = shapely.get_parts(turned.intersection(shapely.box(-99, bottom, 99, top)))
            shadows = shapely.union_all([shapely.box(p.bounds[0], 0, p.bounds[2], 1) for p in parts])
            found = shapely.union_all(
                [shapely.box(a, 0, b, 1) for a, b in zip(u0[group == strip], u1[group == strip], strict=True)]
            )
            assert shadows.symmetric_difference(found).area < 1e-6
            assert len(shapely.get_parts(shadows)) == int((group == strip).sum())


# ------------------------------------------------------------------------------------------------ chords


@pytest.mark.parametrize("degrees", [0.0, 90.0, 33.0])
@pytest.mark.parametrize("way", ["both", "one-way"])
def test_straight_moves_of_the_centre_stay_within_the_chord_error_on_both_sides(degrees, way):
    job, path = plan(
        SHAPES["U"], a=0.03, b=0.02, direction_rad=math.radians(degrees), way=way, allowance_mm=0.1
    )
    saddle = Saddle.of(job.part)
    inward, outward = 0.0, 0.0
    for s, centre in zip(path.stretches, reference(path), strict=True):
        on = np.isin(s.purpose[1:], [Purpose.CUT, Purpose.OVERRUN, Purpose.LINK])
        for share in (0.25, 0.5, 0.75):
            off = saddle.closest(centre[:-1] + share * np.diff(centre, axis=0))[1] - 3.1
            # Nowhere too deep, entries and exits included.
            inward = max(inward, -off.min())
            outward = max(outward, off[on].max())
    assert inward <= 2.0 * path.chord_mm * 1.02 + NANOMETRE
    assert outward <= path.chord_mm * 1.02 + NANOMETRE
    # Not needlessly fine: somewhere one of the two is used up.
    assert max(inward / (2.0 * path.chord_mm), outward / path.chord_mm) > 0.8
    assert path.chord_mm == pytest.approx(0.5 * CHORD_SHARE_OF_SCALLOP * 0.01)


def test_a_tight_tolerance_binds_instead_of_the_share_of_the_scallop():
    _, path = plan(SQUARE, a=0.02, tolerance_mm=0.00006)
    assert path.chord_mm == pytest.approx(0.00003)


def test_contacts_lie_on_the_surface_with_its_normal():
    job, path = plan(PLATE, a=0.02, b=0.03, rotate=0.2, direction_rad=1.0)
    saddle, contact = Saddle.of(job.part), rows(path, "contact_mm")
    assert np.abs(saddle.height(contact[:, 0], contact[:, 1]) - contact[:, 2]).max() < 1e-12
    assert np.abs(saddle.normal(contact[:, :2]) - rows(path, "normal")).max() < 1e-12


# -------------------------------------------------------------------------------------------- order and links


def test_a_square_is_cut_zigzag_without_a_lift():
    _, path = plan(SQUARE, a=0.02)
    (s,) = path.stretches
    cut = s.purpose == Purpose.CUT
    passes = s.pass_index[cut]
    assert np.all(np.diff(s.pass_index) >= 0)
    assert passes[-1] + 1 == path.passes
    ahead = [np.sign(np.diff(s.contact_mm[cut & (s.pass_index == i), 0]).mean()) for i in range(path.passes)]
    assert ahead == [(-1.0) ** i for i in range(path.passes)]


def test_one_way_feeds_one_way_and_lifts_between_passes():
    _, path = plan(SQUARE, a=0.02, way="one-way", direction_rad=0.4)
    assert len(path.stretches) == path.passes
    for s in path.stretches:
        assert np.all(np.diff(s.contact_mm[:, :2] @ [math.cos(0.4), math.sin(0.4)]) >= 0.0)
        assert not np.any(s.purpose == Purpose.LINK)


@pytest.mark.parametrize(
    ("shape", "degrees", "most"),
    [("square", 20, 1), ("disc", 0, 1), ("L", 0, 1), ("U", 0, 2), ("plate", 0, 4), ("plate", 50, 5)],
)
def test_few_stretches(shape, degrees, most):
    _, path = plan(SHAPES[shape], a=0.01, direction_rad=math.radians(degrees), scallop_mm=0.02)
    assert len(path.stretches) <= most
    assert bool(path.notes) == (len(path.stretches) > 1)


def test_cells_of_a_plate_with_a_hole():
    frame = PassFrame(Saddle(0.01, 0.01, 0.0), 0.0, 3.0)
    plate = Outline(shapely.box(-10, -10, 10, 10).difference(shapely.box(-3, -4, 3, 4)))
    pieces = cover.pieces_of(frame, plate, np.arange(-9.75, 10, 0.5), 0.5, 0.1)
    cells = cells_of(pieces)
    # Below the hole, left and right of it, above it.
    assert sorted(len(cell) for cell in cells) == [13, 13, 14, 14]
    order = cutting_order(pieces, "both")
    assert sorted(cut.piece for cut in order) == list(range(pieces.line.size))


@pytest.mark.parametrize("shape", ["L", "U", "plate", "disc"])
@pytest.mark.parametrize("degrees", [0.0, 55.0])
def test_feed_motion_stays_on_ground_near_the_outline(shape, degrees):
    _, path = plan(SHAPES[shape], a=0.01, direction_rad=math.radians(degrees))
    ground = SHAPES[shape].polygon.buffer(4.1 * path.stepover_mm[1])
    for s in path.stretches:
        down = ~np.isin(s.purpose, [Purpose.ENTRY, Purpose.EXIT])
        assert shapely.contains_xy(ground, *s.contact_mm[down, :2].T).all()
        link = np.flatnonzero(s.purpose == Purpose.LINK)
        moves = shapely.linestrings(np.stack((s.contact_mm[link - 1, :2], s.contact_mm[link, :2]), axis=1))
        assert shapely.covers(ground, moves).all()


def test_a_small_hole_is_crossed_and_a_large_one_is_not():
    small = Outline(shapely.box(-10, -10, 10, 10).difference(shapely.Point(0, 0).buffer(0.3)))
    large = Outline(shapely.box(-10, -10, 10, 10).difference(shapely.Point(0, 0).buffer(4.0)))
    crossed, split = plan(small, a=0.01)[1], plan(large, a=0.01)[1]
    assert len(crossed.stretches) == 1
    assert split.passes > crossed.passes
    contact = rows(split, "contact_mm")
    assert np.hypot(contact[:, 0], contact[:, 1]).min() > 2.0
    gap = rows(crossed, "purpose") == Purpose.OVERRUN
    near = np.hypot(*rows(crossed, "contact_mm")[gap, :2].T) < 0.5
    assert near.any()


# ------------------------------------------------------------------------------------------------ axes


@pytest.mark.parametrize("way", ["both", "one-way"])
def test_lead_and_lean_hold_on_every_pass_row(way):
    lead, lean = math.radians(18.0), math.radians(-7.0)
    _, path = plan(DISC, a=0.02, direction_rad=0.6, lead_rad=lead, lean_rad=lean, way=way, scallop_mm=0.03)
    flips = 0
    for s in path.stretches:
        pairs = np.flatnonzero(s.purpose[1:] == Purpose.CUT) + 1
        plan_step = s.contact_mm[pairs, :2] - s.contact_mm[pairs - 1, :2]
        zx, zy = -s.normal[pairs, 0] / s.normal[pairs, 2], -s.normal[pairs, 1] / s.normal[pairs, 2]
        tangent = np.column_stack((plan_step, zx * plan_step[:, 0] + zy * plan_step[:, 1]))
        tangent /= np.linalg.norm(tangent, axis=1, keepdims=True)
        found = lead_and_lean(s.axis[pairs], s.normal[pairs], tangent)
        assert np.degrees(found[0]) == pytest.approx(18.0, abs=1e-6)
        assert np.degrees(found[1]) == pytest.approx(-7.0, abs=1e-6)
        flips += int((s.purpose == Purpose.LINK).any())
        turn = angle_between(s.axis[:-1], s.axis[1:])
        assert np.degrees(turn).max() <= 3.0
    assert flips == (1 if way == "both" else 0)


def test_axis_flips_happen_on_links_outside_the_outline():
    _, path = plan(SQUARE, a=0.02, lead_rad=0.3)
    for s in path.stretches:
        link = s.purpose == Purpose.LINK
        middle = 0.5 * (s.contact_mm[1:] + s.contact_mm[:-1])[link[1:], :2]
        assert not shapely.contains_xy(SQUARE.polygon, *middle.T).any()
        assert angle_between(s.axis[:-1], s.axis[1:])[link[1:]].sum() > 0.55 * (path.passes - 1)


def test_tips_are_computed_from_the_axis_the_machine_reaches():
    def upright(axis: np.ndarray) -> np.ndarray:
        return np.broadcast_to([0.0, 0.0, 1.0], axis.shape)

    job, path = plan(SQUARE, nearest=upright, a=0.02, lead_rad=0.3, allowance_mm=0.1)
    down = np.isin(rows(path, "purpose"), [Purpose.CUT, Purpose.OVERRUN, Purpose.LINK])
    assert np.all(rows(path, "axis") == [0.0, 0.0, 1.0])
    centre = rows(path, "tip_mm") + np.array([0.0, 0.0, 3.0])
    assert Saddle.of(job.part).closest(centre[down])[1] == pytest.approx(3.1, abs=1e-9)


def test_a_fixed_axis_stays():
    fixed = (0.0, math.sin(0.2), math.cos(0.2))
    _, path = plan(SQUARE, a=0.02, fixed_axis=fixed)
    assert np.abs(rows(path, "axis") - fixed).max() == 0.0


# --------------------------------------------------------------------------------------------- entry and exit


@pytest.mark.parametrize("way", ["both", "one-way"])
@pytest.mark.parametrize("degrees", [0.0, 90.0, 40.0])
def test_entries_and_exits_are_tangent_arcs_that_clear_surface_and_stock(way, degrees):
    job, path = plan(SQUARE, a=0.05, way=way, direction_rad=math.radians(degrees), scallop_mm=0.02)
    saddle = Saddle.of(job.part)
    for s, centre in zip(path.stretches, reference(path), strict=True):
        into, off = np.flatnonzero(s.purpose == Purpose.ENTRY), np.flatnonzero(s.purpose == Purpose.EXIT)
        assert into[0] == 0
        assert off[-1] == len(centre) - 1
        height = saddle.closest(centre)[1] - 3.0
        # The blank keeps 0.3 mm on the surface.
        assert min(height[0], height[-1]) >= 0.3
        assert height.min() >= -path.chord_mm
        assert np.all(np.diff(height[into]) < 1e-9)
        assert np.all(np.diff(height[off]) > -1e-9)
        first = np.diff(centre[into], axis=0)
        first /= np.linalg.norm(first, axis=1, keepdims=True)
        feed = centre[into[-1] + 1] - centre[into[-1]]
        bend = angle_between(first[-1:], (feed / np.linalg.norm(feed))[None, :])[0]
        assert np.degrees(bend) < 4.0
        assert not shapely.contains_xy(SQUARE.polygon, *s.contact_mm[into, :2].T).any()
        assert np.all(s.feed_mm_min[into] == 750.0)
        assert np.all(s.feed_mm_min[len(into) :] == 1500.0)


def test_entry_arc_keeps_its_radius_and_height():
    way = arc_back_and_up(3.0, 0.8, 0.002)
    assert np.hypot(way[:, 0], way[:, 1] - 3.0) == pytest.approx(3.0, abs=1e-12)
    assert way[-1, 1] == pytest.approx(0.8)
    steep = arc_back_and_up(0.2, 0.8, 0.002)
    assert steep[-1, 1] == pytest.approx(0.8)
    assert steep[-1, 0] > steep[-2, 0] > 0.0
    middle = 0.5 * (way[1:] + way[:-1])
    assert (3.0 - np.hypot(middle[:, 0], middle[:, 1] - 3.0)).max() <= 0.002


def test_entry_rises_over_what_earlier_operations_left():
    job, operation = job_of(SQUARE, a=0.02)
    rough = job_of(SQUARE, a=0.02, allowance_mm=0.9, does="semi-finish")[1]
    second = Operation(
        **{name: getattr(operation, name) for name in Operation.__slots__ if name != "index"}, index=2
    )
    fields = {name: getattr(job, name) for name in Job.__slots__ if name != "operations"}
    path = plan_operation(Job(**fields, operations=(rough, second)), second, lambda axis: axis)
    assert Saddle.of(job.part).closest(reference(path)[0][:1])[1][0] >= 3.9


# ------------------------------------------------------------------------------------------------ refusals


def test_unknown_patterns_are_named_with_those_there_are():
    with pytest.raises(CannotPlan, match="'spiral' is not available; the patterns are") as raised:
        plan(SQUARE, pattern="spiral")
    assert raised.value.check == "pattern"


def test_only_balls_are_planned():
    job, operation = job_of(SQUARE, cutter=Cutter(4, "flat", 3.0, 0.0, 2, 18.0, 3.0, 30.0))
    with pytest.raises(CannotPlan, match="cutter 4 is a flat end mill") as raised:
        plan_operation(job, operation, lambda axis: axis)
    assert raised.value.check == "cutter shape"


def test_a_ball_too_large_for_the_surface_is_refused():
    with pytest.raises(CannotPlan, match="does not fit"):
        plan(SQUARE, a=0.2, radius=3.0)


def test_records_are_read_only():
    _, path = plan(SQUARE, a=0.02, scallop_mm=0.05)
    for name in ("tip_mm", "axis", "contact_mm", "normal", "purpose", "pass_index", "feed_mm_min"):
        with pytest.raises(ValueError, match="read-only"):
            getattr(path.stretches[0], name)[0] = 0
