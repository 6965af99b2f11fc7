"""Cycle time against closed forms, an outside trajectory generator for single moves, and a slow twin of the look-ahead."""

from __future__ import annotations

import math
import time
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from anticlast.machine import _jerk_kernels as jerks
from anticlast.machine import _motion_kernels as bends
from anticlast.machine import _speed_kernels as speeds
from anticlast.machine.motion import estimate
from anticlast.records import Event, Motions, Shape, Times
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

    def test_circle_in_chords_is_held_to_what_its_axes_give(self):
        """Radius 1 mm in 3 degree chords: v = sqrt(A r) where one axis gives all the pull, 2^(1/4) times where both share."""
        angle = np.radians(np.arange(0, 721, 3))
        points = np.column_stack([np.cos(angle), np.sin(angle), np.zeros_like(angle)])
        times = estimate(motions(points, 6000.0), plain(400.0))
        speed = 2 * math.sin(math.radians(1.5)) / times.seconds[80:160]
        assert speed.min() >= 20.0 * 0.995
        assert speed.max() <= 20.0 * 2**0.25 * 1.005
        assert (times.held_back_by[80:160] == 2).all()
        assert set(times.axis[80:160].tolist()) == {0, 1}

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
        assert times.seconds[0] == pytest.approx(10 * math.pi / v + v / 400.0, rel=1e-3)
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


class TestCornersWithJerk:
    """A corner in a run with bounded jerk, against ruckig from state to state: it is passed without acceleration."""

    @pytest.mark.parametrize("jerk", [8000.0, 800.0])
    def test_two_sides(self, jerk):
        ruckig = pytest.importorskip("ruckig")
        feed, accel, side = 25.0, 400.0, 60.0
        radius = CORNER_MM / (math.sqrt(2) - 1)
        # Speed through the corner: acceleration, and the change of direction within the time that d leaves.
        corner = min(math.sqrt(accel * radius), (36 * jerk * CORNER_MM**2 / 2) ** (1 / 3))
        generator, asked, found = ruckig.Ruckig(1), ruckig.InputParameter(1), ruckig.Trajectory(1)
        asked.current_position, asked.target_position, asked.target_velocity = [0.0], [side], [corner]
        asked.max_velocity, asked.max_acceleration, asked.max_jerk = [feed], [accel], [jerk]
        generator.calculate(asked, found)
        made = plain(accel, jerk=jerk)
        times = estimate(motions([[0, 0, 0], [side, 0, 0], [side, side, 0]], feed * 60), made)
        assert times.seconds.sum() == pytest.approx(2 * found.duration, rel=1e-6)

    def test_corner_blend_with_jerk(self):
        """Cross-check of v^3 = 36 J d^2 / (w W^2): integrate the blend, a triangle of acceleration over time T."""
        jerk, turn = 8000.0, math.sqrt(2.0)  # a square corner: each axis changes by v
        v = (36 * jerk * CORNER_MM**2 / turn**2) ** (1 / 3)
        time_s = 2 * math.sqrt(v / jerk)
        t = np.linspace(0.0, time_s, 20001)
        accel = jerk * np.minimum(t, time_s - t)
        speed = np.concatenate([[0.0], np.cumsum(0.5 * (accel[1:] + accel[:-1]) * np.diff(t))])
        place = np.concatenate([[0.0], np.cumsum(0.5 * (speed[1:] + speed[:-1]) * np.diff(t))])
        assert speed[-1] == pytest.approx(v, rel=1e-6)
        # The corner itself is where both straight sides would meet, v T/2 before the end of the blend.
        middle = np.array([v * time_s / 2 - (place[-1] - place[10000]), place[10000]])
        assert math.hypot(middle[1], middle[1]) == pytest.approx(CORNER_MM, rel=1e-6)

    @settings(max_examples=25, derandomize=True, deadline=None)
    @given(seed=st.integers(0, 10**6))
    def test_jerk_only_adds(self, seed):
        rng = np.random.default_rng(seed)
        points = np.cumsum(rng.normal(0, 1, (60, 3)) * rng.choice([0.02, 0.5, 5.0], (60, 1)), axis=0)
        program = motions(points, 1500.0)
        free, some, more = (
            estimate(program, plain(400.0, jerk=jerk)).seconds for jerk in (math.inf, 8000.0, 2000.0)
        )
        assert (some >= free - 1e-12).all()
        assert more.sum() >= some.sum() - 1e-9


def smooth_paths(count):
    """Smooth joint paths in short blocks: (name, words (count + 1, 6))."""
    u = np.linspace(0, 1, count + 1)
    turn, zero = 2 * np.pi * u, np.zeros(count + 1)
    x = -20 + 40 * u
    yield "circle", np.column_stack([np.cos(3 * turn), np.sin(3 * turn), zero, zero, zero, zero])
    yield "ellipse", np.column_stack([20 * np.cos(turn), 6 * np.sin(turn), zero, zero, zero, zero])
    yield "wave", np.column_stack([60 * u, 3 * np.sin(5 * turn), zero, zero, zero, zero])
    yield (
        "five axes",
        np.column_stack(
            [
                60 * u,
                3 * np.sin(3 * turn),
                2 * np.cos(2 * turn),
                15 * np.sin(2 * turn),
                zero,
                60 * np.sin(turn),
            ]
        ),
    )
    pole = np.degrees(np.unwrap(np.arctan2(1.0, x)))
    yield "beside the pole", np.column_stack([x, zero, 0.005 * x * x, zero, zero, pole])
    yield "saddle", np.column_stack([x, zero + 8, 0.01 * (x * x - 64), -0.5 * x, zero, 2 * x])


@pytest.mark.parametrize("feed", [2000.0, 1e5])
@pytest.mark.parametrize(
    ("name", "path"), list(smooth_paths(1000)), ids=[name for name, _ in smooth_paths(1)]
)
def test_smooth_paths_against_time_optimal_parameterisation(name, path, feed):
    """Axis speeds and accelerations, no jerk: toppra on a spline through the same words. Within 2 %, and never faster."""
    ta = pytest.importorskip("toppra")
    made = SHIPPED["trunnion-ac"]
    axes = tuple(
        replace(axis, jerk=math.inf, feed=feed if axis.kind == "linear" else 3600.0 * feed / 2000.0)
        for axis in made.axes
    )
    made = replace(made, axes=axes, control=replace(made.control, block_rate=0.0))
    words = path[:, [0, 1, 2, 3, 5]]
    along = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(words[:, :3], axis=0), axis=1))])
    speed = np.array([axis.feed / 60 for axis in axes])
    accel = np.array([axis.acceleration for axis in axes])
    constraints = [
        ta.constraint.JointVelocityConstraint(np.column_stack([-speed, speed])),
        ta.constraint.JointAccelerationConstraint(
            np.column_stack([-accel, accel]),
            discretization_scheme=ta.constraint.DiscretizationType.Interpolation,
        ),
    ]
    grid = np.linspace(0.0, along[-1], 4001)
    solver = ta.algorithm.TOPPRA(constraints, ta.SplineInterpolator(along, words), gridpoints=grid)
    rate = solver.compute_parameterization(0.0, 0.0)[1]
    bound = float((2 * np.diff(grid) / (rate[1:] + rate[:-1])).sum())
    seconds = estimate(motions(path, 1e7), made).seconds.sum()
    assert bound <= seconds <= 1.02 * bound, name
    rounded = estimate(motions(np.round(path, 4), 1e7), made).seconds.sum()
    assert bound <= rounded <= 1.02 * bound, name


class TestWaits:
    """Times that are not moves come from the machine file, and dwells from the program."""

    def program(self):
        return motions([[0, 0, 0], [60, 0, 0], [120, 0, 0]], 1500.0, line=np.array([10, 20]))

    def made(self):
        return replace(plain(500.0), times=Times(tool_change_s=30.0, spindle_start_s=3.0, coolant_s=1.0))

    def test_each_is_counted_when_it_happens(self):
        events = [
            Event(1, "tool", 1.0), Event(2, "spindle", 9000.0), Event(3, "coolant", 2.0), Event(4, "spindle", 9500.0),
            Event(15, "dwell", 2.5), Event(16, "spindle", 0.0), Event(17, "spindle", 9000.0), Event(18, "tool", 1.0),
            Event(30, "spindle", -9000.0), Event(31, "coolant", 0.0), Event(32, "tool", 2.0),
        ]  # fmt: skip
        times = estimate(self.program(), self.made(), events)
        found = [(wait.line, wait.what, wait.seconds, wait.before) for wait in times.waits]
        assert found == [
            (1, "tool change", 30.0, 0), (2, "spindle start", 3.0, 0), (3, "coolant", 1.0, 0), (15, "dwell", 2.5, 1),
            (17, "spindle start", 3.0, 1), (30, "spindle start", 3.0, 2), (32, "tool change", 30.0, 2),
        ]  # fmt: skip
        # With a stop between, two moves from rest to rest.
        assert times.seconds == pytest.approx([2.45, 2.45], abs=MICROSECOND)
        assert times.total_s == pytest.approx(4.9 + 72.5, abs=MICROSECOND)

    def test_without_times_only_dwells_count(self):
        events = [Event(1, "tool", 1.0), Event(15, "dwell", 2.5)]
        times = estimate(self.program(), plain(500.0), events)
        assert [wait.what for wait in times.waits] == ["dwell"]
        assert estimate(self.program(), plain(500.0)).total_s == pytest.approx(4.85, abs=MICROSECOND)


def test_which_axis_holds_back():
    """Axis speed: the one that is slowest for its share. Acceleration: the one that has to speed up most."""
    made = SHIPPED["trunnion-ac"]
    turning = estimate(motions([[0, 0, 0, 0, 0, 0], [1, 0, 0, 10, 0, 90]], 60.0), made)
    assert (turning.held_back_by[0], made.letters[turning.axis[0]]) == (1, "C")
    short = estimate(motions([[0, 0, 0], [0.1, 0.4, 0.2]], 2000.0), plain(400.0))
    assert (short.held_back_by[0], short.axis[0]) == (2, 1)
    points = np.column_stack([np.linspace(0, 10, 1001), np.zeros(1001), np.zeros(1001)])
    dense = estimate(motions(points, 1500.0), plain(block_rate=500.0))
    assert (dense.axis[100:900] == -1).all()


def chain(seed, count=14):
    """A bent path in scaled space cut into pieces as the kernels take them."""
    rng = np.random.default_rng(seed)
    way = rng.normal(0, 1, (count, 3)) + [2, 0, 0]
    length = rng.uniform(0.05, 0.6, count)
    unit = way / np.linalg.norm(way, axis=1)[:, None]
    cap = rng.uniform(5, 40, count)
    stop = np.zeros(count, dtype=bool)
    stop[[0, 9]] = True
    bent = bends.bends(
        unit, length, cap, stop, 0, np.ones(3), np.ones(3), 0.05, 0.05, 400.0, np.full(3, math.inf), 1e-3
    )
    return unit, length, cap, bent


@pytest.mark.parametrize("seed", range(6))
def test_speeds_against_linear_programs(seed):
    """Backwards and forwards over the pieces, each step solved by scipy's linprog instead of the kernel."""
    scipy_optimize = pytest.importorskip("scipy.optimize")
    unit, length, cap, (kind, limit, curve, zone) = chain(seed)
    accel = 400.0
    block, vertex, size, free, top = speeds.pieces(unit, length, cap, kind, limit, curve, zone, accel)
    assert (vertex >= 0).sum() >= 5
    found = speeds.squares(block, vertex, size, free, top, unit, curve, accel)

    def rows(i):
        """Inequalities on the squares at both ends of a piece (derived here: u = (x1 - x0) / (2 s))."""
        if vertex[i] < 0:
            g = np.array([1.0 / (2 * size[i] * free[i]) * accel])
            c = np.zeros(1)
        else:
            g, c = 0.5 * unit[block[i]] / size[i], curve[vertex[i]]
        at_start, at_end = np.column_stack([c - g, g]), np.column_stack([-g, c + g])
        return np.vstack([at_start, -at_start, at_end, -at_end])

    def solve(goal, i, bounds):
        table = rows(i)
        done = scipy_optimize.linprog(goal, table, np.full(len(table), accel), bounds=bounds)
        assert done.status == 0
        return done.x

    x = top.copy()
    for i in range(len(size) - 1, -1, -1):
        x[i] = solve([-1.0, 0.0], i, [(0, x[i]), (0, x[i + 1])])[0]
    for i in range(len(size)):
        x[i + 1] = solve([0.0, -1.0], i, [(x[i] - 1e-9, x[i]), (0, x[i + 1])])[1]
    assert found == pytest.approx(x, rel=1e-5, abs=1e-5)


def naive_seconds(x, size, free, cap, block, vertex):
    """Time of each piece, its peak found by bisection on the way that a run up and down takes."""
    out = []
    for i in range(len(size)):
        v0, v1 = math.sqrt(x[i]), math.sqrt(x[i + 1])
        if vertex[i] >= 0:
            out.append(size[i] / (0.5 * (v0 + v1)))
            continue
        low, high = max(v0, v1), cap[block[i]]
        for _ in range(100):
            v = 0.5 * (low + high)
            low, high = (v, high) if (2 * v * v - v0 * v0 - v1 * v1) / (2 * free[i]) <= size[i] else (low, v)
        rest = size[i] - (2 * low * low - v0 * v0 - v1 * v1) / (2 * free[i])
        out.append((2 * low - v0 - v1) / free[i] + rest / low)
    return np.array(out)


@pytest.mark.parametrize("seed", range(6))
def test_profile_against_its_twin(seed):
    unit, length, cap, (kind, limit, curve, zone) = chain(seed)
    block, vertex, size, free, top = speeds.pieces(unit, length, cap, kind, limit, curve, zone, 400.0)
    assert np.bincount(block, weights=size) == pytest.approx(length)
    x = speeds.squares(block, vertex, size, free, top, unit, curve, 400.0)
    piece, v0, v1, seconds = speeds.profile(block, vertex, size, free, cap, x)
    assert np.bincount(piece, weights=0.5 * (v0 + v1) * seconds) == pytest.approx(size, rel=1e-9)
    found = np.bincount(piece, weights=seconds)
    assert found == pytest.approx(naive_seconds(x, size, free, cap, block, vertex), rel=1e-6)


@pytest.mark.parametrize("seed", range(4))
def test_interpreted_kernels_agree(seed):
    unit, length, cap, bent = chain(seed)
    stop = np.zeros(len(length), dtype=bool)
    stop[[0, 9]] = True
    args = (unit, length, cap, stop, 0, np.ones(3), np.ones(3), 0.05, 0.05, 400.0, np.full(3, math.inf), 1e-3)
    for one, two in zip(bent, bends.bends.py_func(*args), strict=True):
        assert one == pytest.approx(two, rel=1e-12)
    kind, limit, curve, zone = bent
    limits = [limit.copy(), limit.copy()]
    for function, values in zip((bends.jerk_limits, bends.jerk_limits.py_func), limits, strict=True):
        function(
            unit,
            length,
            cap,
            kind,
            values,
            curve,
            np.ones(3),
            np.ones(3),
            0.05,
            0.05,
            400.0,
            np.full(3, 500.0),
        )
    assert limits[0] == pytest.approx(limits[1], rel=1e-12)
    cut = (unit, length, cap, kind, limit, curve, zone, 400.0)
    pieces = speeds.pieces(*cut)
    for one, two in zip(pieces, speeds.pieces.py_func(*cut), strict=True):
        assert one == pytest.approx(two, rel=1e-12)
    x = speeds.squares(*pieces, unit, curve, 400.0)
    assert x == pytest.approx(speeds.squares.py_func(*pieces, unit, curve, 400.0), rel=1e-9)
    block, vertex, size, free, _ = pieces
    lines = speeds.profile(block, vertex, size, free, cap, x)
    for one, two in zip(lines, speeds.profile.py_func(block, vertex, size, free, cap, x), strict=True):
        assert one == pytest.approx(two, rel=1e-9)
    rest = (*lines, block, vertex, unit, curve, 400.0)
    assert speeds.loads(*rest) == pytest.approx(speeds.loads.py_func(*rest), rel=1e-9)
    lost = (*lines, free, np.full(len(size), 8000.0))
    assert jerks.jerk_losses(*lost) == pytest.approx(jerks.jerk_losses.py_func(*lost), rel=1e-9, abs=1e-12)
    assert jerks.jerk_losses(*lost).sum() > 0.0


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
