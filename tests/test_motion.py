"""Cycle time against closed forms, an outside trajectory generator for single moves, and a slow twin of the look-ahead."""

from __future__ import annotations

import math
import time
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from anticlast.machine import _motion_kernels as bends
from anticlast.machine.motion import estimate
from anticlast.records import Motions, Shape
from anticlast.tolerances import CORNER_DEG, CORNER_MM
from test_kinematics import SHIPPED, X, Z, machine, rotary

MICROSECOND = 1e-6


def plain(acceleration=500.0, jerk=math.inf, feed=1e6, rapid=1e6, path_mode="G64", block_rate=0.0, made=None):
    """A machine whose axes are all alike, with no jerk limit unless given."""
    made = made or machine()
    axes = tuple(replace(a, acceleration=acceleration, jerk=jerk, feed=feed, rapid=rapid) for a in made.axes)
    control = replace(made.control, path_mode=path_mode, block_rate=block_rate)
    return replace(made, axes=axes, control=control)


def motions(points, feed=None, shape=None, **changes):
    """Straight motions through points (n + 1, 6) at a feed per minute along X Y Z (NISTIR 6556, section 2.1.2.5)."""
    points = np.asarray(points, dtype=float)
    if points.shape[1] < 6:
        points = np.hstack([points, np.zeros((len(points), 6 - points.shape[1]))])
    count = len(points) - 1
    step = np.diff(points, axis=0)
    along = np.linalg.norm(step[:, :3], axis=1)
    counted = np.where(along > 0, along, np.linalg.norm(step[:, 3:], axis=1))
    shapes = (
        np.full(count, Shape.FEED if feed else Shape.RAPID, dtype=np.uint8)
        if shape is None
        else np.asarray(shape)
    )
    seconds = np.where(shapes == Shape.RAPID, np.nan, 60.0 * counted / (feed or 1.0))
    fields = {
        "line": np.arange(1, count + 1), "shape": shapes, "end": points[1:], "start": points[:-1],
        "centre": np.zeros((count, 3)), "plane": np.full(count, 17, dtype=np.uint8), "turns": np.zeros(count),
        "seconds": seconds, "feed_word": np.full(count, feed or 0.0), "inverse": np.zeros(count, dtype=bool),
        "tool": np.ones(count, dtype=np.int64), "offset_h": np.ones(count, dtype=np.int64),
        "work_offset": np.ones(count, dtype=np.int64), "spindle_rpm": np.full(count, 9000.0),
        "coolant": np.zeros(count, dtype=np.uint8),
    }  # fmt: skip
    return Motions(**{**fields, **changes})


class TestTrapezoid:
    """T = L/v + v/A if L >= v^2/A, else 2 sqrt(L/A): area under a trapezoid of speed."""

    @pytest.mark.parametrize(
        ("length", "feed", "accel", "seconds"),
        [
            (60.0, 1500.0, 500.0, 2.450),
            (60.0, 3000.0, 500.0, 1.300),
            (60.0, 1500.0, 100.0, 2.650),
            (0.5, 1500.0, 500.0, 0.0632455532),
        ],
    )
    def test_one_move(self, length, feed, accel, seconds):
        times = estimate(motions([[0, 0, 0], [length, 0, 0]], feed), plain(accel))
        assert times.seconds[0] == pytest.approx(seconds, abs=MICROSECOND)
        assert times.feed_only_s[0] == pytest.approx(60 * length / feed)
        assert times.held_back_by[0] == 2

    def test_collinear_blocks_are_one_move(self):
        points = np.column_stack([np.linspace(0, 60, 241), np.zeros(241), np.zeros(241)])
        times = estimate(motions(points, 1500.0), plain())
        assert times.seconds.sum() == pytest.approx(2.450, abs=MICROSECOND)

    def test_exact_stop_stops_at_every_block(self):
        points = np.column_stack([np.linspace(0, 60, 121), np.zeros(121), np.zeros(121)])
        times = estimate(motions(points, 1500.0), plain(path_mode="G61.1"))
        assert times.seconds.sum() == pytest.approx(120 * 2 * math.sqrt(0.5 / 500.0), abs=MICROSECOND)

    def test_exact_path_stops_at_corners_only(self):
        straight = motions([[0, 0, 0], [30, 0, 0], [60, 0, 0]], 1500.0)
        corner = motions([[0, 0, 0], [30, 0, 0], [30, 30, 0]], 1500.0)
        made = plain(path_mode="G61")
        assert estimate(straight, made).seconds.sum() == pytest.approx(2.450, abs=MICROSECOND)
        assert estimate(corner, made).seconds.sum() == pytest.approx(
            2 * (30 / 25 + 25 / 500), abs=MICROSECOND
        )

    def test_a_diagonal_move_has_more_acceleration(self):
        """Both axes accelerate at A, so the way along the diagonal has sqrt(2) A."""
        times = estimate(motions([[0, 0, 0], [30, 30, 0]], 6000.0), plain(200.0))
        length, accel = 30 * math.sqrt(2), 200 * math.sqrt(2)
        assert times.seconds[0] == pytest.approx(length / 100 + 100 / accel, abs=MICROSECOND)

    def test_rotary_axis_limits_its_block(self):
        """C turns 90 degrees beside 1 mm of X: its own acceleration and speed decide."""
        made = SHIPPED["trunnion-ac"]
        made = replace(made, axes=tuple(replace(a, jerk=math.inf) for a in made.axes))
        times = estimate(motions([[0, 0, 0, 0, 0, 0], [1, 0, 0, 0, 0, 90]], 60.0), made)
        assert times.feed_only_s[0] == pytest.approx(1.0)
        # 90 degrees at 3600 deg/min = 60 deg/s take 1.5 s, plus 60/1500 for the ramps
        assert times.seconds[0] == pytest.approx(1.5 + 60 / 1500, abs=MICROSECOND)
        assert times.held_back_by[0] == 1


class TestCorner:
    """r = d / (1/cos(th/2) - 1), v = sqrt(A r): an arc tangent to both sides that passes the corner at distance d."""

    @pytest.mark.parametrize(("angle_deg", "speed"), [(1.0, 256.23), (5.0, 51.227), (90.0, 2.4567)])
    def test_corner_speed(self, angle_deg, speed):
        assert CORNER_MM == 0.005
        angle = math.radians(angle_deg)
        way = np.array([[1.0, 0, 0], [math.cos(angle), math.sin(angle), 0]])
        kind, found, _, _ = bends.bends(
            way, np.full(2, 900.0), np.full(2, 300.0), np.array([True, False]), 0, np.ones(3), np.ones(3),
            CORNER_MM, CORNER_DEG, 500.0, np.full(3, math.inf), 1e-3,
        )  # fmt: skip
        radius = 0.005 / (1 / math.cos(angle / 2) - 1)
        assert kind[1] == bends.CORNER
        assert found[1] == pytest.approx(math.sqrt(500 * radius), rel=1e-9)
        assert found[1] == pytest.approx(speed, rel=5e-5)

    def test_time_through_a_square_corner(self):
        """Two sides of 60 mm at 25 mm/s: each is a ramp up, and a ramp down to the corner's speed."""
        times = estimate(motions([[0, 0, 0], [60, 0, 0], [60, 60, 0]], 1500.0), plain())
        corner, v, a = math.sqrt(500 * 0.005 / (math.sqrt(2) - 1)), 25.0, 500.0
        ramps = v * v / (2 * a) + (v * v - corner * corner) / (2 * a)
        side = v / a + (v - corner) / a + (60 - ramps) / v
        assert times.seconds == pytest.approx([side, side], abs=MICROSECOND)

    def test_circle_in_chords_is_held_to_the_centripetal_speed(self):
        """A circle of radius 1 mm cut in 3 degree chords: v = sqrt(A r) in the middle of the run, not the feed."""
        angle = np.radians(np.arange(0, 721, 3))
        points = np.column_stack([np.cos(angle), np.sin(angle), np.zeros_like(angle)])
        times = estimate(motions(points, 6000.0), plain(400.0))
        chord = 2 * math.sin(math.radians(1.5))
        middle = slice(80, 160)
        assert chord / times.seconds[middle] == pytest.approx(np.full(80, 20.0), rel=0.01)

    def test_rounding_of_words_is_no_corner(self):
        """A straight line in 0.05 mm blocks whose ends are off by up to half a last digit keeps its feed."""
        rng = np.random.default_rng(3)
        points = np.column_stack([np.linspace(0, 40, 801), np.zeros(801), np.zeros(801)])
        points[1:-1, 1:] += rng.uniform(-5e-5, 5e-5, (799, 2))
        times = estimate(motions(points, 1500.0), plain(400.0))
        assert times.seconds.sum() == pytest.approx(60 * 40 / 1500 + 25 / 400, rel=0.01)

    def test_arc_word_and_chords_agree(self):
        """A full circle by G3 takes what 1 degree chords take."""
        angle = np.radians(np.arange(0, 361, 1.0))
        points = 5 * np.column_stack([np.cos(angle), np.sin(angle), np.zeros_like(angle)])
        chords = estimate(motions(points, 1200.0), plain(400.0)).seconds.sum()
        arc = motions(
            [[5, 0, 0], [5, 0, 0]], 1200.0, shape=np.array([Shape.ARC_CCW], dtype=np.uint8),
            turns=np.array([2 * math.pi]), seconds=np.array([60 * 10 * math.pi / 1200]),
        )  # fmt: skip
        assert estimate(arc, plain(400.0)).seconds.sum() == pytest.approx(chords, rel=0.01)

    def test_tight_arc_is_slowed_by_its_radius(self):
        arc = motions(
            [[0.5, 0, 0], [0.5, 0, 0]], 6000.0, shape=np.array([Shape.ARC_CW], dtype=np.uint8),
            turns=np.array([20 * math.pi]), seconds=np.array([60 * 10 * math.pi / 6000]),
        )  # fmt: skip
        v = math.sqrt(400.0 * 0.5)
        times = estimate(arc, plain(400.0))
        assert times.seconds[0] == pytest.approx(10 * math.pi / v + v / 400.0, rel=1e-6)
        assert times.held_back_by[0] == 2


class TestAgainstRuckig:
    """Single moves from rest to rest against ruckig, a time-optimal generator of jerk-limited trajectories."""

    @pytest.mark.parametrize("jerk", [8000.0, 500.0, 1e9])
    @pytest.mark.parametrize(
        "move",
        [(60.0, 0, 0), (0.02, 0, 0), (1.5, 1.5, 0), (10.0, 4.0, -3.0), (0.3, 0.0, 0.0), (200.0, 10.0, 0.0)],
    )
    def test_rest_to_rest(self, move, jerk):
        ruckig = pytest.importorskip("ruckig")
        generator, given_, found = ruckig.Ruckig(3), ruckig.InputParameter(3), ruckig.Trajectory(3)
        given_.current_position, given_.target_position = [0.0] * 3, list(move)
        given_.max_velocity, given_.max_acceleration, given_.max_jerk = [25.0] * 3, [400.0] * 3, [jerk] * 3
        given_.synchronization = ruckig.Synchronization.Phase
        generator.calculate(given_, found)
        made = plain(400.0, jerk=jerk, rapid=1500.0)
        times = estimate(motions([[0, 0, 0], list(move)]), made)
        assert times.seconds[0] == pytest.approx(found.duration, rel=1e-6)

    def test_run_of_blocks_with_jerk(self):
        """Cut into blocks, a long move loses the same to jerk at both ends as it does in one piece."""
        made = plain(400.0, jerk=8000.0)
        whole = estimate(motions([[0, 0, 0], [60, 0, 0]], 1500.0), made).seconds.sum()
        points = np.column_stack([np.linspace(0, 60, 13), np.zeros(13), np.zeros(13)])
        parts = estimate(motions(points, 1500.0), made).seconds.sum()
        assert parts == pytest.approx(whole, rel=1e-6)


class TestBounds:
    @settings(max_examples=50, derandomize=True, deadline=None)
    @given(seed=st.integers(0, 10**6), mode=st.sampled_from(["G64", "G61", "G61.1"]))
    def test_never_faster_than_the_feed_nor_than_any_axis(self, seed, mode):
        rng = np.random.default_rng(seed)
        made = SHIPPED["trunnion-ac"]
        made = replace(made, control=replace(made.control, path_mode=mode))
        points = np.cumsum(
            rng.normal(0, 1, (30, 6)) * [1, 1, 1, 5, 0, 5] * (rng.random((30, 1)) < 0.9), axis=0
        )
        shape = np.where(rng.random(29) < 0.2, Shape.RAPID, Shape.FEED).astype(np.uint8)
        program = motions(points, 900.0, shape=shape)
        times = estimate(program, made)
        assert (times.seconds >= times.feed_only_s - 1e-12).all()
        step = np.abs(np.diff(points, axis=0))[:, [0, 1, 2, 3, 5]]
        fastest = np.array([max(a.rapid, a.feed) for a in made.axes])
        assert (times.seconds >= 60 * (step / fastest).max(axis=1) - 1e-12).all()
        slower = estimate(
            program, replace(made, axes=tuple(replace(a, acceleration=a.acceleration / 2) for a in made.axes))
        )
        assert slower.seconds.sum() >= times.seconds.sum() - 1e-9

    def test_block_rate(self):
        points = np.column_stack([np.linspace(0, 10, 1001), np.zeros(1001), np.zeros(1001)])
        times = estimate(motions(points, 1500.0), plain(block_rate=500.0))
        assert times.feed_only_s.sum() == pytest.approx(0.4)
        assert times.seconds.sum() == pytest.approx(1000 / 500, rel=0.02)
        assert (times.held_back_by[100:900] == 3).all()

    def test_axis_speed(self):
        times = estimate(motions([[0, 0, 0], [100, 0, 0]], 6000.0), plain(feed=1200.0, acceleration=1e5))
        assert times.seconds[0] == pytest.approx(5.0, rel=1e-3)
        assert times.held_back_by[0] == 1

    def test_slow_feed_is_not_held_back(self):
        times = estimate(motions([[0, 0, 0], [100, 0, 0]], 60.0), plain())
        assert times.held_back_by[0] == 0

    def test_rapid_goes_by_the_slowest_axis(self):
        """60 mm of X beside 90 degrees of C at 3000 mm/min and 3600 deg/min: C takes 1.5 s."""
        made = SHIPPED["trunnion-ac"]
        times = estimate(motions([[0, 0, 0, 0, 0, 0], [60, 0, 0, 0, 0, 90]]), made)
        assert times.feed_only_s[0] == pytest.approx(1.5)
        # seven phases, X being the slower to run up: v/A + A/J = 40/400 + 400/8000
        assert times.seconds[0] == pytest.approx(1.5 + 0.1 + 0.05, abs=MICROSECOND)

    def test_stops_between_rapid_and_feed(self):
        points = [[0, 0, 0], [60, 0, 0], [120, 0, 0]]
        mixed = motions(points, 1500.0, shape=np.array([Shape.RAPID, Shape.FEED], dtype=np.uint8))
        times = estimate(mixed, plain(rapid=3000.0))
        assert times.seconds == pytest.approx([1.300, 2.450], abs=MICROSECOND)

    def test_nothing_moves(self):
        still = motions([[1, 2, 3], [1, 2, 3]], 100.0)
        assert estimate(still, plain()).seconds.tolist() == [0.0]
        empty = motions(np.zeros((1, 3)), 100.0)
        assert len(estimate(empty, plain()).seconds) == 0

    def test_words_of_missing_axes_take_no_time(self):
        times = estimate(motions([[0, 0, 0, 0, 0, 0], [0, 0, 0, 0, 0, 90]], 100.0), plain())
        assert times.seconds.tolist() == [0.0]

    def test_inverse_time_feed_is_taken_as_given(self):
        """G93 F4 is 15 s whatever moves (NISTIR 6556, section 3.5.19)."""
        made = plain(made=machine(rotary("A", X, "work"), rotary("C", Z, "work")))
        slow = motions([[0, 0, 0, 0, 0, 0], [1, 0, 0, 30, 0, 40]], 1.0, seconds=np.array([15.0]))
        assert estimate(slow, made).seconds[0] == pytest.approx(15.0, rel=1e-3)


def twin_times(length, cap, accel, corner):
    """The look-ahead without jerk, found by small steps: march each block's speed at the highest that braking allows."""
    count, pieces = len(length), 400
    fine = np.repeat(length / pieces, pieces)
    top = np.repeat(cap, pieces)
    gain = np.repeat(accel, pieces)
    node = np.full(count * pieces + 1, np.inf)
    node[:-1] = np.minimum(node[:-1], top)
    node[1:] = np.minimum(node[1:], top)
    node[::pieces][:count] = np.minimum(node[::pieces][:count], corner)
    node[0] = node[-1] = 0.0
    for i in range(len(fine) - 1, -1, -1):
        node[i] = min(node[i], math.sqrt(node[i + 1] ** 2 + 2 * gain[i] * fine[i]))
    for i in range(len(fine)):
        node[i + 1] = min(node[i + 1], math.sqrt(node[i] ** 2 + 2 * gain[i] * fine[i]))
    return (2 * fine / (node[:-1] + node[1:])).reshape(count, pieces).sum(axis=1)


def test_look_ahead_against_its_twin():
    rng = np.random.default_rng(11)
    count = 40
    length, cap = rng.uniform(0.01, 3.0, count), rng.uniform(5.0, 40.0, count)
    accel, corner = rng.uniform(100.0, 900.0, count), rng.uniform(0.0, 40.0, count)
    corner[rng.random(count) < 0.2] = 0.0
    found = kernels.block_times(length, cap, accel, np.full(count, np.inf), corner)
    assert found.sum() == pytest.approx(twin_times(length, cap, accel, corner).sum(), rel=2e-3)
    interpreted = kernels.block_times.py_func(length, cap, accel, np.full(count, np.inf), corner)
    assert found == pytest.approx(interpreted, rel=1e-12)


def test_interpreted_corner_speeds_agree():
    rng = np.random.default_rng(12)
    way = rng.normal(0, 1, (30, 4)) + [3, 0, 0, 0]
    length = np.linalg.norm(way, axis=1)
    unit = way / length[:, None]
    args = (
        unit, unit, way, length, rng.uniform(5, 40, 30), rng.random(30) < 0.1, 0, np.array([1, 1, 1, 0.3]),
        np.array([1.0, 1, 1, 0]), CORNER_MM, CORNER_DEG, 400.0, 1e-3,
    )  # fmt: skip
    assert kernels.corner_speeds(*args) == pytest.approx(kernels.corner_speeds.py_func(*args), rel=1e-12)


def test_speed_of_a_long_program():
    """100,000 blocks in less than a second once compiled; 3 s here, as the suite may share the machine."""
    rng = np.random.default_rng(2)
    points = np.cumsum(rng.normal(0, 0.05, (100_001, 6)), axis=0)
    points[:, 4] = 0.0
    program = motions(points, 1500.0)
    estimate(motions(points[:10], 1500.0), SHIPPED["trunnion-ac"])
    begin = time.perf_counter()
    times = estimate(program, SHIPPED["trunnion-ac"])
    assert time.perf_counter() - begin < 3.0
    assert np.isfinite(times.seconds).all()
