"""Pattern even: parallels in the cusp metric, against closed-form identities, scipy, shapely and brute force."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
import shapely
from scipy import integrate, optimize

from anticlast import outline as outlines
from anticlast.errors import CannotPlan
from anticlast.outline import Outline
from anticlast.passes.courses import Straight, left_over
from anticlast.passes.even import even_layout
from anticlast.passes.frame import PassFrame
from anticlast.passes.parallels import parallels
from anticlast.passes.scallop import length_floor_mm
from anticlast.passes.tilt import angle_between, lead_and_lean
from anticlast.records import CutterPath, Job, Purpose
from anticlast.saddle import Saddle
from anticlast.tolerances import CHORD_SHARE_OF_SCALLOP
from test_passes import DISC, LOWERED, OFFSET, SQUARE, U_SHAPE, Swept, job_of, plan, reference, rows

NANOMETRE = 1e-6
PLATE = Outline(shapely.box(-12, -12, 12, 12).difference(shapely.Point(2, 1).buffer(4)))
CASES = {
    "square": (SQUARE, {"a": 0.03, "b": 0.02, "direction_rad": 1.9, "rotate": 0.2}),
    "disc": (DISC, {"a": 0.02, "direction_rad": math.pi / 2, "allowance_mm": 0.2}),
    "offset": (OFFSET, {"a": 0.02, "direction_rad": 1.2}),
    "U": (U_SHAPE, {"a": 0.02, "direction_rad": 1.4, "scallop_mm": 0.02}),
    "plate": (PLATE, {"a": 0.02, "direction_rad": 1.6, "scallop_mm": 0.02}),
}


def metric(ball: PassFrame, xy: np.ndarray, s: np.ndarray, t: np.ndarray) -> np.ndarray:
    """Return q(s, t) at part points."""
    uu, uv, vv = ball.cusp_form(xy[:, 0], xy[:, 1])
    return uu * s[:, 0] * t[:, 0] + uv * (s[:, 0] * t[:, 1] + s[:, 1] * t[:, 0]) + vv * s[:, 1] * t[:, 1]


def even(name: str, **more: object) -> tuple[Job, CutterPath]:
    outline, wish = CASES[name]
    return plan(outline, pattern="even", **{**wish, **more})


@pytest.mark.parametrize("name", sorted(CASES))
def test_geodesics_run_at_unit_speed_and_square_to_the_passes(name):
    # Gauss's lemma: both hold exactly for geodesic parallels, and only for them.
    outline, wish = CASES[name]
    saddle = Saddle(wish["a"], wish.get("b", wish["a"]), wish.get("rotate", 0.0))
    chart, u, v = parallels(PassFrame(saddle, wish["direction_rad"], 3.0, 0.1), outline)
    rng = np.random.default_rng(1)
    xy, by_u, by_v = chart.place(rng.uniform(u.min(), u.max(), 300), rng.uniform(v.min(), v.max(), 300))
    ball = PassFrame(saddle, 0.0, 3.0, 0.1)
    assert metric(ball, xy, by_v, by_v) == pytest.approx(chart.crowding, rel=1e-5)
    size = np.sqrt(metric(ball, xy, by_u, by_u) * metric(ball, xy, by_v, by_v))
    assert np.abs(metric(ball, xy, by_u, by_v) / size).max() < 1e-5


def test_geodesics_against_scipy():
    # Outside truth: scipy integrates the geodesic equation with Christoffel symbols from differences of the metric.
    frame = PassFrame(Saddle(0.02, 0.03, 0.3), 1.0, 3.0)
    chart, _, _ = parallels(frame, SQUARE)

    def form(x: np.ndarray) -> np.ndarray:
        uu, uv, vv = (float(q[0]) for q in frame.cusp_form(x[:1], x[1:2]))
        return np.array([[uu, uv], [uv, vv]]) / chart.crowding

    def rate(_: float, state: np.ndarray) -> np.ndarray:
        x, speed = state[:2], state[2:]
        g = form(x)
        d = np.stack([(form(x + e) - form(x - e)) / 2e-4 for e in 1e-4 * np.eye(2)])
        force = np.einsum("kij,k,j->i", d, speed, speed) - 0.5 * np.einsum("ijk,j,k->i", d, speed, speed)
        return np.concatenate((speed, -np.linalg.solve(g, force)))

    for u0 in (-9.0, 4.3):
        g = form(np.array([u0, 0.0]))
        square = np.array([-g[0, 1] / g[0, 0], 1.0])
        square /= math.sqrt(square @ g @ square)
        run = integrate.solve_ivp(rate, (0.0, 11.0), np.array([u0, 0.0, *square]), rtol=1e-10, atol=1e-11)
        expected = frame.xy(run.y[:1, -1], run.y[1:2, -1])
        assert chart.place(np.array([u0]), np.array([11.0]))[0] == pytest.approx(expected, abs=1e-6)


def test_chart_coordinates_come_back():
    chart, u, v = parallels(PassFrame(Saddle(0.03, 0.03, 0.0), 1.5, 3.0), DISC)
    xy, _, _ = chart.place(u, v)
    assert np.abs(xy - shapely.get_coordinates(DISC.polygon)).max() < 1e-7
    course = chart.bundle(np.array([-3.3, 2.0]))
    line = np.array([0, 1, 1])
    at, rate, turn = course.at(line, np.array([1.0, -4.4, 6.7]))
    assert at == pytest.approx(
        chart.place(np.array([1.0, -4.4, 6.7]), np.array([-3.3, 2.0, 2.0]))[0], abs=1e-9
    )
    ahead = course.at(line, np.array([1.0, -4.4, 6.7]) + 1e-3)[0]
    behind = course.at(line, np.array([1.0, -4.4, 6.7]) - 1e-3)[0]
    assert np.abs((ahead - behind) / 2e-3 - rate).max() < 1e-7
    assert np.abs((ahead + behind - 2 * at) / 1e-6 - turn).max() < 1e-5


def test_height_left_by_a_curved_pass_against_scipy():
    chart, _, _ = parallels(PassFrame(Saddle(0.03, 0.02, 0.0), 1.2, 3.0, 0.2), SQUARE)
    ball = PassFrame(Saddle(0.03, 0.02, 0.0), 0.0, 3.0, 0.2)
    course = chart.bundle(np.array([7.0]))
    xy, _, _ = chart.place(np.array([2.0, -6.0]), np.array([7.2, 6.8]))
    left = left_over(ball, course, np.zeros(2, dtype=int), np.array([2.0, -6.0]), xy)
    for i in range(2):
        point = ball.saddle.offset(xy[i : i + 1], 0.2)[0]
        normal = ball.saddle.normal(xy[i : i + 1])[0]

        def meets(at: float, point=point, normal=normal) -> float:
            d = ball.saddle.offset(course.at(np.zeros(1, dtype=int), np.array([at]))[0], 3.2)[0] - point
            return d @ normal - math.sqrt(9.0 - d @ d + (d @ normal) ** 2)

        start = (2.0, -6.0)[i]
        bounds, options = (start - 1, start + 1), {"xatol": 1e-9}
        found = optimize.minimize_scalar(meets, bounds=bounds, method="bounded", options=options)
        assert left[i] == pytest.approx(found.fun, abs=1e-10)


def test_height_left_is_the_same_for_a_straight_course():
    frame = PassFrame(Saddle(0.02, 0.03, 0.1), 0.7, 3.0)
    ball = PassFrame(frame.saddle, 0.0, 3.0)
    u, v = np.array([3.0, -8.0, 11.0]), np.array([1.0, 2.0, -5.0])
    course = Straight(frame, v + 0.2)
    straight = frame.left_over(u, v, v + 0.2)
    assert left_over(ball, course, np.arange(3), u, frame.xy(u, v)) == pytest.approx(straight, abs=1e-10)


@pytest.mark.parametrize("name", sorted(CASES))
def test_scallop_is_even_and_as_predicted_by_brute_force(name):
    # A standing axis: what turning axes add is the machine stage's, and not in these rows.
    job, path = even(name, fixed_axis=(0.0, 0.0, 1.0))
    outline = job.part.outline
    swept = Swept(job, path)
    layout = even_layout(Saddle.of(job.part), outline, path.operation)
    chart, _, _ = parallels(
        PassFrame(Saddle.of(job.part), path.operation.direction_rad, 3.0, path.operation.allowance_mm),
        outline,
    )
    tops = []
    for low, high in itertools.pairwise(layout.lines_mm):
        for u0, u1 in layout.outline.clip_line(0.0, 0.5 * (low + high)):
            u = np.linspace(u0 + 0.05, u1 - 0.05, 5)
            across = low + (high - low) * np.linspace(0.4, 0.6, 41)
            xy, _, _ = chart.place(np.repeat(u, 41), np.tile(across, 5))
            tops.append(swept.height(xy).reshape(5, 41).max(axis=1))
    tops = np.concatenate(tops)
    rim = swept.height(outline.boundary_points(0.05))
    assert LOWERED * path.scallop_predicted_mm <= max(tops.max(), rim.max())
    assert max(tops.max(), rim.max()) <= min(1.001 * path.scallop_predicted_mm, path.operation.scallop_mm)
    # Even: 95 of 100 ridges stand within 4 % of the highest, chords and the third order of the step included.
    assert np.quantile(tops, 0.05) > 0.96 * tops.max()


@pytest.mark.parametrize(("a", "size"), [(0.005, 60.0), (0.01, 60.0), (0.01, 100.0), (0.015, 100.0)])
def test_cut_length_is_the_floor_but_for_budget_and_whole_passes(a, size):
    outline = outlines.rectangle((size, size))
    _, path = plan(outline, a=a, pattern="even", direction_rad=math.pi / 2)
    floor = length_floor_mm(Saddle(a, a, 0.0), outline, 3.0, 0.01)
    budget = 1.0 / math.sqrt(1.0 - CHORD_SHARE_OF_SCALLOP)
    assert floor < path.cut_length_mm < floor * (1.003 * budget + 1.0 / path.passes)


@pytest.mark.parametrize("name", sorted(CASES))
def test_cut_rows_lie_inside_and_sum_to_the_cut_length(name):
    job, path = even(name)
    region, total = job.part.outline.polygon, 0.0
    for s in path.stretches:
        middle = 0.5 * (s.contact_mm[1:, :2] + s.contact_mm[:-1, :2])
        inside = shapely.contains_xy(region, middle[:, 0], middle[:, 1])
        sure = shapely.distance(shapely.points(middle), region.boundary) > 1e-4
        purpose = s.purpose[1:]
        assert np.all(inside[(purpose == Purpose.CUT) & sure])
        assert not np.any(inside[(purpose == Purpose.OVERRUN) & sure])
        total += np.linalg.norm(np.diff(s.contact_mm, axis=0), axis=1)[purpose == Purpose.CUT].sum()
    assert path.cut_length_mm == pytest.approx(total, rel=2e-5)
    ends = [
        s.contact_mm[i, :2]
        for s in path.stretches
        for i in np.flatnonzero((s.purpose[1:] == Purpose.CUT) != (s.purpose[:-1] == Purpose.CUT))
        if s.purpose[i] in (Purpose.CUT, Purpose.OVERRUN)
        and s.purpose[i + 1] in (Purpose.CUT, Purpose.OVERRUN)
    ]
    assert shapely.distance(shapely.points(ends), region.boundary).max() < 2e-5


@pytest.mark.parametrize("name", ["square", "U"])
def test_chords_stay_within_their_error_on_both_sides(name):
    job, path = even(name, lead_rad=0.2)
    saddle, reach = Saddle.of(job.part), 3.0 + path.operation.allowance_mm
    for s, centre in zip(path.stretches, reference(path), strict=True):
        on = np.isin(s.purpose[1:], [Purpose.CUT, Purpose.OVERRUN, Purpose.LINK])
        off = saddle.closest(0.5 * (centre[1:] + centre[:-1]))[1] - reach
        assert -off.min() <= 2.0 * path.chord_mm * 1.02 + NANOMETRE
        assert off[on].max() <= path.chord_mm * 1.02 + NANOMETRE


def test_lead_and_lean_hold_along_curved_passes():
    _, path = even("disc", lead_rad=math.radians(15.0), lean_rad=math.radians(5.0), way="one-way")
    for s in path.stretches:
        cut = np.flatnonzero((s.purpose[1:-1] == Purpose.CUT) & (s.purpose[2:] == Purpose.CUT)) + 1
        if cut.size == 0:
            continue
        # Central differences of the contact path over uneven rows: good to the product of the two runs.
        tangent = s.contact_mm[cut + 1] - s.contact_mm[cut - 1]
        tangent -= (tangent * s.normal[cut]).sum(axis=1)[:, None] * s.normal[cut]
        tangent /= np.linalg.norm(tangent, axis=1, keepdims=True)
        lead, lean = lead_and_lean(s.axis[cut], s.normal[cut], tangent)
        assert np.degrees(lead) == pytest.approx(15.0, abs=0.02)
        assert np.degrees(lean) == pytest.approx(5.0, abs=0.05)
        assert np.degrees(angle_between(s.axis[:-1], s.axis[1:])).max() <= 3.0


def test_feed_starts_along_the_direction_asked_for():
    _, path = even("square")
    cut = rows(path, "purpose") == Purpose.CUT
    contact = rows(path, "contact_mm")
    step = np.diff(contact[:, :2], axis=0)
    near = np.abs(contact[1:, :2] @ [-math.sin(1.9), math.cos(1.9)]) < 0.3
    heading = step[cut[1:] & near & (np.linalg.norm(step, axis=1) > 1e-3)]
    heading /= np.linalg.norm(heading, axis=1, keepdims=True)
    assert np.abs(heading @ [math.cos(1.9), math.sin(1.9)]).min() > 0.999


def test_a_start_from_which_passes_cross_is_refused():
    job, operation = job_of(outlines.circle(30.0), a=0.1, radius=4.5, direction_rad=0.4)
    with pytest.raises(CannotPlan, match="crossing each other") as raised:
        even_layout(Saddle.of(job.part), job.part.outline, operation)
    assert raised.value.check == "passes cross"


def test_a_stepover_is_refused():
    with pytest.raises(CannotPlan, match="'raster' only"):
        even("disc", scallop_mm=None, stepover_mm=0.3)
