"""Axis paths: what the control does with the posted words, checked by forward kinematics between the blocks."""

from __future__ import annotations

import math
import re
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from anticlast.errors import CannotPlan
from anticlast.machine import _kernels, branches
from anticlast.machine.axes import axis_path, budget_of
from anticlast.machine.digits import Digits
from anticlast.machine.kinematics import Kinematics
from anticlast.records import CutterPath, Purpose, Stretch
from anticlast.saddle import Saddle
from test_kinematics import OTHERS, SHIPPED, X, Y, Z, machine, rotary

LAST_DIGIT_MM = 1e-4
ROUNDING_MM = math.sqrt(3.0) / 2.0 * LAST_DIGIT_MM  # three words each off by half a digit
PROBES = np.array([0.05, 0.13, 0.2113, 0.25, 0.37, 0.5, 0.61, 0.75, 0.7887, 0.9])


def stretch_along(job, v, u, lead_deg=0.0, allowed=None, feed=1200.0):
    """A pass along part X at y = v: ball centre over the surface, axis from the surface normal with a lead."""
    saddle = Saddle.of(job.part)
    xy = np.column_stack([u, np.full_like(u, v)])
    normal = saddle.normal(xy)
    lead = math.radians(lead_deg)
    along = np.column_stack([normal[:, 2], np.zeros(len(u)), -normal[:, 0]])
    along /= np.linalg.norm(along, axis=1)[:, None]
    axis = math.cos(lead) * normal + math.sin(lead) * along
    axis /= np.linalg.norm(axis, axis=1)[:, None]
    if allowed is not None:
        axis = allowed(axis)
    cutter = job.operations[0].cutter
    height = cutter.reference_height_mm
    centre = saddle.point(xy) + height * normal
    count = len(u)
    return Stretch(
        tip_mm=centre - height * axis,
        axis=axis,
        contact_mm=saddle.point(xy),
        normal=normal,
        purpose=np.full(count, Purpose.CUT, dtype=np.uint8),
        pass_index=np.zeros(count, dtype=np.int64),
        feed_mm_min=np.full(count, feed),
    )


def path_of(job, *stretches):
    return CutterPath(job.operations[0], stretches, len(stretches), 0.0, (0.0, 0.0), 0.0, 0.0)


def between(words, before):
    """Words at probes along each block (n, probes, k)."""
    starts = np.vstack([before[None, :], words[:-1]])
    return starts[:, None, :] + PROBES[None, :, None] * (words - starts)[:, None, :]


def distance_to_line(points, corners):
    """Distance of points (n, 3) from a polyline (m, 3), by brute force."""
    a, d = corners[:-1], np.diff(corners, axis=0)
    least = np.full(len(points), np.inf)
    for start, step in zip(a, d, strict=True):
        square = max(float(step @ step), 1e-30)
        share = np.clip((points - start) @ step / square, 0.0, 1.0)
        least = np.minimum(least, np.linalg.norm(points - start - share[:, None] * step, axis=1))
    return least


def weighted_distance(points, corners, normals, side):
    """Distance of points (n, 3) from a polyline (m, 3) whose corners have normals, by brute force; across them times side.

    Between corners the line bows as its normals turn: an arc of length L whose normals turn by w bows by L w / 8.
    """
    least = np.full(len(points), np.inf)
    bows = np.einsum("ij,ij->i", np.diff(normals, axis=0), np.diff(corners, axis=0)) / 8.0
    for start, step, up, bow in zip(
        corners[:-1], np.diff(corners, axis=0), normals[:-1] + normals[1:], bows, strict=True
    ):
        square = max(float(step @ step), 1e-30)
        share = np.clip((points - start) @ step / square, 0.0, 1.0)
        up = up / np.linalg.norm(up)
        away = points - start - share[:, None] * step - (4 * bow * share * (1 - share))[:, None] * up
        deep = away @ up
        wide = np.maximum((away**2).sum(axis=1) - deep**2, 0.0)
        least = np.minimum(least, np.sqrt(deep**2 + side**2 * wide))
    return least


def worst_off_path(job, path, stretch):
    """Largest distance of the reference point from the intended line, and of the axis from its wish, between blocks.

    What lies across the surface normal counts by the ratio of the two budgets.
    """
    kin = Kinematics(job.machine, job.part_origin_mm, path.operation.cutter.gauge_length_mm)
    cutting = np.flatnonzero(path.purpose == Purpose.CUT)
    probes = between(path.words, path.start)[cutting].reshape(-1, path.words.shape[1])
    tip, axis = kin.forward(probes)
    height = path.operation.cutter.reference_height_mm
    line = stretch.tip_mm + height * stretch.axis
    budget = budget_of(path.operation)
    off = weighted_distance(
        tip + height * axis, line, stretch.normal, budget.point_mm / budget.sideways_mm
    ).max()
    # The axes that were wished for, densely, along the way
    share = np.linspace(0, 1, 21)
    wish = stretch.axis[:-1, None, :] * (1 - share)[:, None] + stretch.axis[1:, None, :] * share[:, None]
    wish = wish.reshape(-1, 3)
    wish /= np.linalg.norm(wish, axis=1)[:, None]
    turned = np.arccos(np.clip((axis[:: max(1, len(axis) // 3000)] @ wish.T).max(axis=1), -1, 1)).max()
    return off, turned


def with_machine(job, made, origin=None):
    return replace(job, machine=made, part_origin_mm=origin or job.part_origin_mm)


@pytest.mark.parametrize("name", [*SHIPPED, *OTHERS])
@pytest.mark.parametrize("lead", [0.0, 15.0])
def test_joint_moves_keep_to_the_path(make_job, name, lead):
    """Every machine, normal-following and leading, away from program zero: nothing leaves the path by more than promised."""
    job = with_machine(make_job(), {**SHIPPED, **OTHERS}[name], (4.0, -3.0, 30.0))
    kin = Kinematics(job.machine, job.part_origin_mm, job.operations[0].cutter.gauge_length_mm)
    stretch = stretch_along(job, 3.0, np.linspace(-9, 9, 41), lead, kin.nearest_axis)
    path = axis_path(job, path_of(job, stretch), last=True)
    off, turned = worst_off_path(job, path, stretch)
    assert off <= budget_of(job.operations[0]).point_mm + ROUNDING_MM
    assert turned <= math.radians(0.052)


@pytest.mark.parametrize("v", [0.0, 1e-6, 1e-3, 0.02, 0.3, -0.3])
@pytest.mark.parametrize("name", ["trunnion-ac", "trunnion-bc", "head-b-table-c", "nutating table"])
def test_through_the_pole(make_job, name, v):
    """Normal-following passes at and beside the pole, the part 20 mm off the C axis: slow, never off the path."""
    job = with_machine(make_job(), {**SHIPPED, **OTHERS}[name], (20.0, 5.0, 30.0))
    stretch = stretch_along(job, v, np.linspace(-9, 9, 38))
    path = axis_path(job, path_of(job, stretch))
    off, turned = worst_off_path(job, path, stretch)
    assert off <= budget_of(job.operations[0]).point_mm + ROUNDING_MM
    assert turned <= math.radians(0.052)
    step = np.abs(np.diff(path.words, axis=0, prepend=path.start[None, :]))
    feed = np.array([a.feed for a in job.machine.axes])
    feeding = ~path.rapid
    assert (step[feeding] / feed <= path.minutes[feeding, None] * (1 + 1e-9)).all()
    if abs(v) <= 1e-3 and name in ("trunnion-ac", "trunnion-bc"):
        # So near to the pole that the tilt changes sign instead of the table turning round.
        turned_c = np.ptp(path.words[path.purpose == Purpose.CUT][:, -1])
        assert turned_c < 20.0


def test_pass_through_the_pole_costs_half_a_turn_beside_it(make_job):
    """At y0 = 0.3 mm the C axis turns by nearly half a turn: tan(C) = b y / (a x), 2 atan(9/0.3) = 176.2 degrees for a = b."""
    job = with_machine(make_job(), SHIPPED["trunnion-ac"])
    stretch = stretch_along(job, 0.3, np.linspace(-9, 9, 61))
    path = axis_path(job, path_of(job, stretch))
    c = path.words[path.purpose == Purpose.CUT][:, 4]
    assert np.ptp(c) == pytest.approx(2 * math.degrees(math.atan2(9.0, 0.3)), abs=0.2)


def test_flat_bottomed_cutters_get_a_tighter_axis(make_job):
    """With the generating arc 2 mm from the axis, 0.05 degrees would move the cut by 1.7 micrometres."""
    operation = make_job().operations[0]
    bull = replace(operation, cutter=replace(operation.cutter, shape="bull", corner_radius_mm=1.0))
    ball, tight = budget_of(operation), budget_of(bull)
    assert ball.axis_rad == pytest.approx(math.radians(0.05))
    assert tight.lever_mm == pytest.approx(2.0)
    assert tight.axis_rad * tight.lever_mm <= 0.5 * tight.point_mm * (1 + 1e-12)
    # 0.03 of the scallop is for chords and joint moves together, less 4 times the sideways share.
    assert ball.point_mm == pytest.approx((0.03 - 4e-3) * 0.01)
    assert ball.sideways_mm == pytest.approx(1e-3 * math.sqrt(8 * 3.0 * 0.01))


class TestBranches:
    def test_stays_inside_limits_where_the_short_way_does_not(self, make_job):
        """A from -120 to 30: the branch that starts short would end 40 degrees past the limit; the other holds."""
        kin = Kinematics(SHIPPED["trunnion-ac"], (0, 0, 0), 60.0)
        tilt = np.radians(np.linspace(1.0, 70.0, 200))
        axis = np.column_stack([np.zeros(200), np.sin(tilt), np.cos(tilt)])
        chosen = branches.choose(kin, axis, np.zeros(2), 1e-4, 1e-6)
        assert chosen.notes == ()
        assert chosen.rotary_deg[:, 0].min() >= -120.0
        assert chosen.rotary_deg[:, 0].max() <= 30.0
        assert np.abs(np.diff(chosen.rotary_deg, axis=0)).max() < 1.0

    def test_endless_axis_winds_on(self):
        """A cone of axes walked round three times turns C three times, without a jump."""
        kin = Kinematics(SHIPPED["trunnion-ac"], (0, 0, 0), 60.0)
        around = np.linspace(0, 6 * math.pi, 800)
        axis = np.column_stack(
            [0.3 * np.cos(around), 0.3 * np.sin(around), np.full(800, math.sqrt(1 - 0.09))]
        )
        chosen = branches.choose(kin, axis, np.zeros(2), 1e-4, 1e-6)
        assert np.ptp(chosen.rotary_deg[:, 1]) == pytest.approx(1080.0, abs=1e-6)
        assert np.abs(np.diff(chosen.rotary_deg[:, 1])).max() < 2.0

    def test_limited_axis_takes_the_turn_that_lasts(self):
        """C within +-360: one and a half turns fit only if they start at the right end."""
        bounded = machine(
            rotary("A", X, "work", limits=(-120, 30)), rotary("C", Z, "work", limits=(-360, 360))
        )
        kin = Kinematics(bounded, (0, 0, 0), 60.0)
        # The branch with A < 0 has C at -90 degrees plus the direction, so it starts at 120 or, the only one that lasts, -240.
        around = np.radians(np.linspace(-150, 390, 600))
        axis = np.column_stack([0.6 * np.cos(around), 0.6 * np.sin(around), np.full(600, 0.8)])
        chosen = branches.choose(kin, axis, np.zeros(2), 1e-4, 1e-6)
        assert chosen.notes == ()
        assert np.abs(chosen.rotary_deg[:, 1]).max() <= 360.0
        assert np.abs(np.diff(chosen.rotary_deg[:, 1])).max() < 2.0

    def test_many_turns_inside_wide_limits(self):
        """C within +-3600: nine turns one way and back, from wherever they fit."""
        wide = machine(
            rotary("A", X, "work", limits=(-120, 30)), rotary("C", Z, "work", limits=(-3600, 3600))
        )
        kin = Kinematics(wide, (0, 0, 0), 60.0)
        around = np.radians(np.concatenate([np.linspace(0, 3240 * 2, 3000), np.linspace(6480, 0, 3000)]))
        axis = np.column_stack([0.6 * np.cos(around), 0.6 * np.sin(around), np.full(6000, 0.8)])
        chosen = branches.choose(kin, axis, np.zeros(2), 1e-4, 1e-6)
        assert chosen.notes == ()
        assert np.ptp(chosen.rotary_deg[:, 1]) == pytest.approx(6480.0, abs=1e-6)

    def test_a_limit_that_cannot_be_kept_is_named(self):
        bounded = machine(
            rotary("A", X, "work", limits=(-120, 0)), rotary("C", Z, "work", limits=(-180, 180))
        )
        kin = Kinematics(bounded, (0, 0, 0), 60.0)
        around = np.radians(np.linspace(-270, 450, 600))
        axis = np.column_stack([0.6 * np.cos(around), 0.6 * np.sin(around), np.full(600, 0.8)])
        chosen = branches.choose(kin, axis, np.zeros(2), 1e-4, 1e-6)
        assert len(chosen.notes) == 1
        assert chosen.notes[0].startswith("C has to go ")
        # Two turns, -360 to 360, do not fit into one: half a turn is left over at either end.
        assert np.abs(chosen.rotary_deg[:, 1]).max() == pytest.approx(360.0, abs=1.0)

    def test_least_travel_against_brute_force(self):
        """The same sum of travel as trying every branch on every row, on short rows of random axes."""
        kin = Kinematics(SHIPPED["trunnion-ac"], (0, 0, 0), 60.0)
        rng = np.random.default_rng(7)
        for _ in range(20):
            start = np.array([rng.uniform(-100, 0), rng.uniform(-90, 90)])
            walk = start + np.cumsum(rng.uniform(-9, 9, (8, 2)), axis=0)
            walk[:, 0] = np.clip(walk[:, 0], -110, -8)
            _, axis = kin.forward(np.column_stack([np.zeros((8, 3)), walk]))
            chosen = branches.choose(kin, axis, np.zeros(2), 1e-4, 1e-6).rotary_deg
            found = kin.rotary(axis).words
            best = math.inf
            for branch in range(2):  # away from the pole no change of branch is allowed
                rows = found[:, branch]
                if rows[:, 0].min() < -120 or rows[:, 0].max() > 30:
                    continue
                turn = np.diff(rows, axis=0, prepend=np.zeros((1, 2)))
                turn[:, 1] -= 360 * np.round(turn[:, 1] / 360)
                best = min(best, np.abs(turn).sum())
            travel = np.abs(np.diff(chosen, axis=0, prepend=np.zeros((1, 2)))).sum()
            assert travel == pytest.approx(best, abs=1e-6)

    def test_linear_limits_decide_between_branches(self):
        """A part far to one side: the short branch would carry Y past its limit, the long one does not."""
        made = SHIPPED["trunnion-ac"]
        y = replace(made.axes[1], limits=(-30.0, 75.0))
        made = replace(made, axes=(made.axes[0], y, *made.axes[2:]))
        kin = Kinematics(made, (0, 0, 0), 60.0)
        tilt = np.radians(np.linspace(10.0, 20.0, 30))
        axis = np.column_stack([np.zeros(30), np.sin(tilt), np.cos(tilt)])
        tip = np.tile([0.0, -40.0, 0.0], (30, 1))
        start = (
            np.array([-10.0, 0.0])
            if kin.forward([[0, 0, 0, -10.0, 0.0]])[1][0, 1] > 0
            else np.array([10.0, 0.0])
        )
        free = branches.choose(kin, axis, start, 1e-4, 1e-6).rotary_deg
        kept = branches.choose(kin, axis, start, 1e-4, 1e-6, tip).rotary_deg
        assert kin.gauge_point(kin.place(tip, free))[:, 1].min() < -30.0
        assert kin.gauge_point(kin.place(tip, kept))[:, 1].min() >= -30.0

    def test_out_of_reach_is_refused(self, make_job):
        job = with_machine(make_job(), SHIPPED["rotary-a"])
        stretch = stretch_along(job, 0.0, np.linspace(-9, 9, 10), 20.0)
        with pytest.raises(CannotPlan, match="out of the machine's reach"):
            axis_path(job, path_of(job, stretch))

    def test_upright_operation_leaves_c_where_it_stands(self):
        kin = Kinematics(SHIPPED["trunnion-ac"], (0, 0, 0), 60.0)
        chosen = branches.choose(kin, np.tile([0.0, 0.0, 1.0], (5, 1)), np.array([0.0, 512.5]), 1e-4, 1e-6)
        assert chosen.rotary_deg[:, 1] == pytest.approx(np.full(5, 512.5))


class TestTimes:
    def test_contact_feed(self, make_job):
        """Minutes of a pass = contact length / feed where no axis is at its limit (3 axes, slow feed)."""
        job = with_machine(make_job(), SHIPPED["mill-3"])
        stretch = stretch_along(
            job,
            2.0,
            np.linspace(-9, 9, 200),
            0.0,
            lambda a: np.tile([0.0, 0.0, 1.0], (len(a), 1)),
            feed=300.0,
        )
        path = axis_path(job, path_of(job, stretch))
        length = np.linalg.norm(np.diff(stretch.contact_mm, axis=0), axis=1).sum()
        assert path.minutes[path.purpose == Purpose.CUT].sum() == pytest.approx(length / 300.0, rel=1e-9)

    def test_contact_that_stands_still_uses_the_reference_point(self, make_job):
        job = with_machine(make_job(), SHIPPED["mill-3"])
        stretch = stretch_along(
            job, 0.0, np.linspace(0, 1, 3), 0.0, lambda a: np.tile([0.0, 0.0, 1.0], (len(a), 1))
        )
        still = replace(
            stretch,
            contact_mm=np.repeat(stretch.contact_mm[:1], 3, axis=0),
            tip_mm=np.array([[0, 0, 0], [3.0, 0, 0], [3.0, 4.0, 0]]),
            feed_mm_min=np.full(3, 100.0),
        )
        path = axis_path(job, path_of(job, still))
        assert path.minutes[path.purpose == Purpose.CUT] == pytest.approx([0.03, 0.04])

    def test_block_rate_and_axis_feeds_hold(self, make_job):
        job = with_machine(make_job(), SHIPPED["trunnion-ac"])
        path = axis_path(job, path_of(job, stretch_along(job, 0.1, np.linspace(-9, 9, 300), feed=60000.0)))
        feeding = ~path.rapid
        assert path.minutes[feeding].min() >= 1 / (60 * 500.0) - 1e-15
        step = np.abs(np.diff(path.words, axis=0, prepend=path.start[None, :]))
        feed = np.array([a.feed for a in job.machine.axes])
        rapid = np.array([a.rapid for a in job.machine.axes])
        assert (step[feeding] / feed <= path.minutes[feeding, None] * (1 + 1e-12)).all()
        assert (step / rapid).max(axis=1)[~feeding] == pytest.approx(path.minutes[~feeding])

    def test_feed_words_can_be_printed(self, make_job):
        """Per-minute posts with whole-number feeds: no F below 1."""
        made = SHIPPED["trunnion-ac"]
        blunt = replace(made, control=replace(made.control, feed_mode="per-minute", feed_decimals=0))
        job = with_machine(make_job(), blunt, (0.0, 0.0, 30.0))
        path = axis_path(job, path_of(job, stretch_along(job, 0.01, np.linspace(-9, 9, 80), feed=50.0)))
        step = np.diff(path.words, axis=0, prepend=path.start[None, :])
        along, around = np.linalg.norm(step[:, :3], axis=1), np.linalg.norm(step[:, 3:], axis=1)
        feeding = ~path.rapid
        f = np.where(along > 0, along, around)[feeding] / path.minutes[feeding]
        assert f.min() >= 1.0 - 1e-9

    def test_inverse_feed_of_long_blocks_can_be_printed(self, make_job):
        """F = 1/minutes with no decimals: a block of more than a minute is posted in parts, and ends where it should."""
        made = SHIPPED["rotary-b"]
        blunt = replace(made, control=replace(made.control, feed_decimals=0))
        job = with_machine(make_job(), blunt)
        kin = Kinematics(job.machine, job.part_origin_mm, 79.0)
        stretch = stretch_along(job, 2.0, np.linspace(-9, 9, 4), 0.0, kin.nearest_axis, feed=1.0)
        path = axis_path(job, path_of(job, stretch))
        assert path.minutes[~path.rapid].max() <= 1.0
        length = np.linalg.norm(np.diff(stretch.contact_mm, axis=0), axis=1).sum()
        assert path.minutes[path.purpose == Purpose.CUT].sum() == pytest.approx(length / 1.0, rel=1e-6)


class TestWords:
    def test_rounded_and_moving(self, make_job):
        job = with_machine(make_job(), SHIPPED["trunnion-ac"])
        path = axis_path(job, path_of(job, stretch_along(job, 2.0, np.linspace(-9, 9, 3000))), last=True)
        assert np.array_equal(np.round(path.words, 4), path.words)
        assert (np.abs(np.diff(path.words, axis=0)).max(axis=1) > 0).all()
        assert not path.words.flags.writeable
        assert (path.words[-1, 3:] == 0.0).all()

    def test_inch_jobs_round_on_their_own_grid(self, make_job):
        job = replace(with_machine(make_job(), SHIPPED["mill-3"]), units="inch")
        assert Digits.of(job).length_step_mm == pytest.approx(25.4e-5)
        upright = lambda a: np.tile([0.0, 0.0, 1.0], (len(a), 1))  # noqa: E731
        path = axis_path(job, path_of(job, stretch_along(job, 2.0, np.linspace(-9, 9, 30), 0.0, upright)))
        inches = path.words / 25.4
        assert np.abs(inches - np.round(inches, 5)).max() < 1e-12

    def test_next_operation_starts_where_the_last_one_ended(self, make_job):
        """After a cutter change the axes stand still, so Z reads lower by what the new cutter is longer."""
        job = with_machine(make_job(), SHIPPED["trunnion-ac"])
        short = job.operations[0]
        long_ = replace(
            short, index=2, cutter=replace(short.cutter, number=2, stickout_mm=short.cutter.stickout_mm + 7.0)
        )
        job = replace(job, operations=(short, long_))
        stretch = stretch_along(job, 2.0, np.linspace(-9, 9, 30))
        one = axis_path(job, path_of(job, stretch))
        two = axis_path(job, replace(path_of(job, stretch), operation=long_), one.words[-1], last=True)
        assert two.start[:2] == pytest.approx(one.words[-1][:2])
        assert two.start[2] == pytest.approx(one.words[-1][2] - 7.0)
        assert two.rapid[0]
        assert np.delete(two.words[0], 2) == pytest.approx(np.delete(two.start, 2))


def cutter_points(cutter, count=40):
    """Points on the outside of cutter and holder in its own frame: radius and height."""
    rings = []
    corner = cutter.corner_radius_mm
    for angle in np.linspace(0, math.pi / 2, 7):
        rings.append(
            (cutter.radius_mm - corner + corner * math.sin(angle), corner - corner * math.cos(angle))
        )
    rings.append((0.0, 0.0))
    for body in cutter.bodies():
        rings += [(body.radius_mm, h) for h in np.linspace(body.low_mm, body.high_mm, 9)]
    around = np.linspace(0, 2 * math.pi, count, endpoint=False)
    return np.array([[r * math.cos(t), r * math.sin(t), h] for r, h in rings for t in around])


def frame(axis):
    side = np.cross(axis, [1.0, 0.0, 0.0] if abs(axis[0]) < 0.9 else [0.0, 1.0, 0.0])
    side /= np.linalg.norm(side)
    return np.column_stack([side, np.cross(axis, side), axis])


def clearance_to_blank(job, points):
    """Distance of points from the prism of the blank, cut down to the surface plus allowance where the job has one."""
    import shapely

    stock = job.stock
    aside = shapely.distance(stock.outline.polygon, shapely.points(points[:, :2]))
    up = np.maximum(np.maximum(points[:, 2] - stock.top_mm, stock.bottom_mm - points[:, 2]), 0.0)
    prism = np.hypot(aside, up)
    if stock.allowance_mm is None:
        return prism
    _, over = Saddle.of(job.part).closest(points)
    return np.maximum(prism, over - stock.allowance_mm)


@pytest.mark.parametrize("allowance", ["allowance = 0.3", ""])
@pytest.mark.parametrize("name", ["mill-3", "trunnion-ac", "head-b-table-c", "table A, head B"])
def test_rapids_keep_the_clearance(make_job, name, allowance):
    """Every point of cutter and holder, along every rapid, is the clearance away from the blank as it was."""
    job = with_machine(make_job(stock_extra=allowance), {**SHIPPED, **OTHERS}[name], (0.0, 0.0, 30.0))
    kin = Kinematics(job.machine, job.part_origin_mm, job.operations[0].cutter.gauge_length_mm)
    stretches = [
        stretch_along(job, v, np.linspace(-9, 9, 15)[::way], lead, kin.nearest_axis)
        for v, way, lead in ((-6.0, 1, 12.0), (5.0, -1, -10.0), (7.5, 1, 25.0))
    ]
    path = axis_path(job, path_of(job, *stretches), last=True)
    assert not [note for note in path.notes if note.startswith("Z cannot")]
    body = cutter_points(job.operations[0].cutter)
    starts = np.vstack([path.start[None, :], path.words[:-1]])
    least = math.inf
    for i in np.flatnonzero(path.rapid):
        share = np.linspace(0, 1, 41)[:, None]
        tips, axes = kin.forward(starts[i] + share * (path.words[i] - starts[i]))
        for tip, axis in zip(tips, axes, strict=True):
            least = min(least, clearance_to_blank(job, tip + body @ frame(axis).T).min())
    assert least >= job.clearance_mm - 1e-3
    # and not by lifting needlessly high: the closest rapid is near the clearance, not far above it
    # (where neither the cutter axis nor part Z is machine Z, only the top of the blank is measured from)
    assert least <= job.clearance_mm + (10.0 if name == "table A, head B" else 2.0)


def test_each_stretch_is_left_and_entered_along_the_axis(make_job):
    job = with_machine(make_job(), SHIPPED["head-b-table-c"], (0.0, 0.0, 30.0))
    kin = Kinematics(job.machine, job.part_origin_mm, job.operations[0].cutter.gauge_length_mm)
    stretches = [stretch_along(job, v, np.linspace(-9, 9, 15), 12.0) for v in (-6.0, 5.0)]
    path = axis_path(job, path_of(job, *stretches), last=True)
    starts = np.vstack([path.start[None, :], path.words[:-1]])
    for i in np.flatnonzero((path.purpose == Purpose.ENTRY) | (path.purpose == Purpose.EXIT)):
        tips, axes = kin.forward(np.vstack([starts[i], path.words[i]]))
        way = (tips[1] - tips[0]) / np.linalg.norm(tips[1] - tips[0])
        sign = 1.0 if path.purpose[i] == Purpose.EXIT else -1.0
        assert sign * way == pytest.approx(axes[0], abs=1e-4)
        assert path.pass_index[i] == -1
    assert (path.purpose == Purpose.ENTRY).sum() == 2
    assert (path.purpose == Purpose.EXIT).sum() == 2


def test_height_beyond_the_machine_is_noted(make_job):
    low = machine(rotary("A", X, "work", limits=(-120, 30)), rotary("C", Z, "work"))
    z = replace(low.axes[2], limits=(0.0, 112.0))
    low = replace(low, axes=(*low.axes[:2], z, *low.axes[3:]))
    job = with_machine(make_job(), low, (0.0, 0.0, 30.0))
    path = axis_path(job, path_of(job, stretch_along(job, 3.0, np.linspace(-9, 9, 15))), last=True)
    assert any(note.startswith("Z cannot rise high enough") for note in path.notes)
    assert (path.words[:, 2] + 30.0 + 79.0).max() <= 112.0 + 1e-9


def test_travel_past_a_limit_is_noted(make_job):
    job = with_machine(make_job(), SHIPPED["trunnion-ac"], (-300.0, 0.0, 30.0))
    path = axis_path(job, path_of(job, stretch_along(job, 3.0, np.linspace(-9, 9, 15))))
    assert any(re.match("[XY] has to go [0-9.]+ mm past its limit", note) for note in path.notes)


def test_cap_on_blocks_is_not_silent(make_job, monkeypatch):
    import anticlast.machine.axes as axes

    monkeypatch.setattr(axes, "SUBDIVISION_CAP", 3)
    job = with_machine(make_job(), SHIPPED["trunnion-ac"], (20.0, 5.0, 30.0))
    with pytest.raises(CannotPlan, match="lean the cutter away from the pole"):
        axis_path(job, path_of(job, stretch_along(job, 0.3, np.linspace(-9, 9, 20))))


def test_turning_on_the_spot_keeps_the_reference_point(make_job):
    """A link that only swings the axis about the ball's centre: the centre stays where it is."""
    job = with_machine(make_job(), SHIPPED["trunnion-ac"], (12.0, 5.0, 30.0))
    height = job.operations[0].cutter.reference_height_mm
    tilt = np.radians(np.linspace(5, 60, 12))
    axis = np.column_stack([np.sin(tilt), np.zeros(12), np.cos(tilt)])
    axis = np.array([a * [1, 1, 1] for a in axis])
    centre = np.tile([1.0, 2.0, 5.0], (12, 1))
    stretch = Stretch(
        tip_mm=centre - height * axis,
        axis=axis,
        contact_mm=np.tile([1.0, 2.0, 2.0], (12, 1)),
        normal=np.tile([0.0, 0.0, 1.0], (12, 1)),
        purpose=np.full(12, Purpose.CUT, dtype=np.uint8),
        pass_index=np.zeros(12, dtype=np.int64),
        feed_mm_min=np.full(12, 500.0),
    )
    path = axis_path(job, path_of(job, stretch))
    kin = Kinematics(job.machine, job.part_origin_mm, job.operations[0].cutter.gauge_length_mm)
    rows = between(path.words, path.start)[path.purpose == Purpose.CUT].reshape(-1, 5)
    tip, found = kin.forward(rows)
    off = np.linalg.norm(tip + height * found - centre[0], axis=1).max()
    assert off <= budget_of(job.operations[0]).point_mm + ROUNDING_MM


def test_y_axis_is_used(make_job):
    """Guard against a swapped axis: on a B table a pass along X tilts B, on an A table it hardly tilts A."""
    for name, axis, tilt in (("rotary-b", Y, True), ("rotary-a", X, False)):
        job = with_machine(make_job(), SHIPPED[name])
        assert SHIPPED[name].rotary[0].direction == axis
        kin = Kinematics(job.machine, job.part_origin_mm, 79.0)
        path = axis_path(
            job, path_of(job, stretch_along(job, 0.0, np.linspace(-9, 9, 15), 0.0, kin.nearest_axis))
        )
        assert bool(np.ptp(path.words[path.purpose == Purpose.CUT, 3]) > 4.0) is tilt


@settings(max_examples=80, derandomize=True, deadline=None)
@given(
    seed=st.integers(0, 10**6),
    name=st.sampled_from(["trunnion-ac", "head-b-table-c", "nutating head", "nutating table"]),
)
def test_deviation_is_a_bound(seed, name):
    """Sample plus bound is never less than the deviation found at 200 places of the block, by the twin's way."""
    rng = np.random.default_rng(seed)
    kin = Kinematics({**SHIPPED, **OTHERS}[name], rng.uniform(-40, 40, 3), 70.0)
    ends = rng.uniform(-60, 60, (2, 5))
    ends[1] = ends[0] + rng.normal(0, 1, 5) * [2, 2, 2, 8, 8]
    tip, axis = kin.forward(ends)
    height = 3.0
    point = tip + height * axis
    theta = math.acos(min(1.0, float(axis[0] @ axis[1])))
    off, turned, _ = _kernels.deviation(
        kin.chain, kin.base, height, point[0], point[1], axis[0], axis[1], theta, 0.0, ends[0, 3:], ends[0, :3], 1.0,
        ends[1, 3:], ends[1, :3], np.zeros(2), np.zeros(3), 1.0, 0.0,
    )  # fmt: skip
    share = np.linspace(0, 1, 201)[:, None]
    tips, axes = kin.forward(ends[0] + share * (ends[1] - ends[0]))
    found = distance_to_line(tips + height * axes, point).max()
    wish = (np.sin((1 - share) * theta) * axis[0] + np.sin(share * theta) * axis[1]) / math.sin(theta)
    strayed = 2 * np.arcsin(np.clip(np.linalg.norm(axes - wish, axis=1) / 2, 0, 1)).max()
    assert off >= found - 1e-9
    assert turned >= strayed - 1e-9
    # and not far above it, even where turn and travel cancel: these blocks turn by some 10 degrees
    assert off <= 2.0 * found + 0.1


def test_interpreted_kernels_agree(make_job):
    """Branch choice and subdivision, compiled and run by plain Python, give the same blocks."""
    kin = Kinematics(SHIPPED["trunnion-ac"], (20.0, 5.0, 30.0), 79.0)
    job = with_machine(make_job(), SHIPPED["trunnion-ac"], (20.0, 5.0, 30.0))
    stretch = stretch_along(job, 0.5, np.linspace(-3, 3, 7))
    choices = kin.rotary(stretch.axis)
    args = (
        kin.chain, stretch.axis, choices.words, np.zeros((7, 2)), kin.low, kin.high, np.full(2, 3600.0),
        np.zeros(2), np.array([-1, 0]), np.array([3, 1]), np.full(7, 1e-3), 1e-4,
        np.array([1, 0, 0, 0, 1, 0, 0], dtype=np.uint8), np.where(np.arange(7) == 2, 1e-6, np.inf),
    )  # fmt: skip
    fast, plain = _kernels.choose_branches(*args), _kernels.choose_branches.py_func(*args)
    for one, other in zip(fast, plain, strict=True):
        assert one == pytest.approx(other, abs=1e-9)
    assert not fast[3].any()
    point = stretch.tip_mm + 3.0 * stretch.axis
    args = (
        kin.chain, kin.base, 3.0, 0.0, point, stretch.axis, np.round(fast[0], 4), np.full(2, 3600.0), 1e4, stretch.normal, 0.3,
        True, np.full(7, 1e-3), 1e-3, 2e-6, 1e-7, 1000,
    )  # fmt: skip
    fast, plain = _kernels.subdivide(*args), _kernels.subdivide.py_func(*args)
    assert fast[0].tolist() == plain[0].tolist()
    assert fast[2] == pytest.approx(plain[2], abs=1e-9)
    assert fast[3] == plain[3] == -1


@pytest.mark.parametrize("v", [1e-4, 1e-2, 0.05, 0.3])
def test_blocks_past_the_pole_are_bounded(make_job, v):
    """Half a turn of C takes at most 2 pi sqrt(r / (7.2 budget)) blocks, derived in docs/theory-machine.md, "The pole"."""
    job = with_machine(make_job(), SHIPPED["trunnion-ac"], (20.0, 5.0, 30.0))
    rows = np.linspace(-9, 9, 38)
    path = axis_path(job, path_of(job, stretch_along(job, v, rows)))
    blocks = int((path.purpose == Purpose.CUT).sum())
    # Furthest that the ball's centre comes from the C axis: the part's offset and half its length.
    radius = math.hypot(20.0 + 9.0, 5.0)
    bound = 2 * math.pi * math.sqrt(radius / (7.2 * budget_of(job.operations[0]).point_mm)) + 4 * len(rows)
    assert len(rows) - 1 <= blocks <= bound
