"""What a surface asks of cutter and machine, against brute force and worked poses.

"Derived here" values come from docs/theory-surface.md.
"""

from __future__ import annotations

import json
import math
from dataclasses import replace

import numpy as np
import pytest
import shapely

from anticlast.job import load_job
from anticlast.outline import Outline, circle, rectangle
from anticlast.passes.scallop import length_floor_mm, local_scallop
from anticlast.reach import reach
from anticlast.saddle import Saddle
from anticlast.survey import largest_ball_radius_mm, steepest_slope_deg, survey, tightest_curvatures
from conftest import job_text

GAUGE = 34.0 + 45.0  # stickout and holder of the test job
NANOMETRE = 1e-6


def dense(outline: Outline, spacing_mm: float = 0.25) -> np.ndarray:
    return np.concatenate((outline.boundary_points(spacing_mm), outline.grid(spacing_mm)))


OUTLINES = [
    pytest.param(rectangle([40.0, 30.0]), id="over-the-saddle-point"),
    pytest.param(rectangle([30.0, 20.0], 0.0, (30.0, 4.0)), id="beside-it"),
    pytest.param(circle(24.0, (3.0, -25.0)), id="disc"),
    pytest.param(Outline(shapely.box(-30, -20, 30, 20).difference(shapely.box(-6, -5, 8, 4))), id="holed"),
]


@pytest.mark.parametrize("outline", OUTLINES)
@pytest.mark.parametrize("saddle", [Saddle(0.01, 0.01, 0.0), Saddle(0.02, 0.006, 0.7)])
def test_extremes_of_slope_and_curvature(saddle: Saddle, outline: Outline) -> None:
    """Against a dense sample: never beaten by it, and no more than its spacing allows ahead of it."""
    xy = dense(outline)
    k_max, k_min, _, _ = saddle.principal(xy)
    concave, convex = tightest_curvatures(saddle, outline)
    steepest = steepest_slope_deg(saddle, outline)
    slope = np.degrees(saddle.slope_rad(xy))
    for place, sampled in ((concave, k_max), (convex, -k_min), (steepest, slope)):
        assert sampled.max() * (1 - 1e-12) <= place.value <= sampled.max() * 1.0005
        assert outline.contains([place.at_mm]).all()
    assert saddle.principal([concave.at_mm])[0][0] == pytest.approx(concave.value)
    assert -saddle.principal([convex.at_mm])[1][0] == pytest.approx(convex.value)


def test_largest_ball_over_the_saddle_point() -> None:
    """1/(2a), wherever the outline reaches otherwise (derived here); and such a ball clears every place."""
    s, outline = Saddle(0.01, 0.03, 0.3), rectangle([60.0, 50.0])
    largest = largest_ball_radius_mm(s, outline)
    assert largest == pytest.approx(50.0)
    xy = dense(outline, 2.0)
    _, distance = s.closest(s.offset(xy, largest * (1 - 1e-9)))
    assert distance == pytest.approx(largest, abs=NANOMETRE)


def brute_largest_ball(s: Saddle, outline: Outline, spacing_mm: float) -> float:
    """Least radius of a ball that touches at one sample and reaches another, from points and normals
    alone.
    """
    xy = dense(outline, spacing_mm)
    points, normals = s.point(xy), s.normal(xy)
    least = math.inf
    for q, n in zip(points, normals, strict=True):
        chord = points - q
        up = chord @ n
        hit = up > 1e-12
        if hit.any():
            least = min(least, float((np.einsum("ni,ni->n", chord, chord)[hit] / (2 * up[hit])).min()))
    return least


@pytest.mark.parametrize(
    ("saddle", "outline"),
    [
        pytest.param(
            Saddle(0.01, 0.01, 0.0), rectangle([30.0, 20.0], 0.0, (0.0, 24.0)), id="across-the-valley"
        ),
        pytest.param(Saddle(0.01, 0.01, 0.0), rectangle([20.0, 20.0], 0.0, (30.0, 0.0)), id="on-one-slope"),
        pytest.param(Saddle(0.02, 0.006, 0.7), circle(16.0, (15.0, 12.0)), id="turned"),
        pytest.param(
            Saddle(0.03, 0.01, 0.0),
            Outline(shapely.box(-20, -6, 20, 6).difference(shapely.box(-15, -5, 15, 5.5))),
            id="ring-with-two-slopes",
        ),
        pytest.param(
            Saddle(0.03, 0.01, 0.2),
            Outline(shapely.MultiPolygon([shapely.box(10, -2, 16, 2), shapely.box(-16, -1, -10, 3)])),
            id="two-slopes-apart",
        ),
    ],
)
def test_largest_ball_elsewhere_against_pairs_of_points(saddle: Saddle, outline: Outline) -> None:
    found = largest_ball_radius_mm(saddle, outline)
    xy = dense(outline, 0.5)
    local = 1.0 / float(saddle.principal(xy)[0].max())
    brute = min(brute_largest_ball(saddle, outline, 0.5), local)
    assert brute * 0.999 <= found <= brute * (1 + 1e-9)
    least = float(saddle.stretch(xy).min()) / (2 * saddle.a_per_mm)
    assert least * 0.999 <= found <= local * (1 + 1e-9)


def test_contact_far_away_decides_when_the_valley_floor_is_cut_out() -> None:
    """A ring over both slopes of a valley: the far slope stops a ball that either slope alone would let
    in.
    """
    s = Saddle(0.03, 0.01, 0.0)
    both = Outline(shapely.MultiPolygon([shapely.box(10, -2, 16, 2), shapely.box(-16, -2, -10, 2)]))
    one = Outline(shapely.box(10, -2, 16, 2))
    assert largest_ball_radius_mm(s, both) < 0.95 * largest_ball_radius_mm(s, one)


# ------------------------------------------------------------------------------------------ jobs


def test_survey_of_a_job(make_job) -> None:
    job = make_job(tilt="lead = 15.0")
    found = survey(job)
    data = found.as_json()
    assert json.loads(json.dumps(data)) == data
    s = Saddle.of(job.part)
    assert data["curvature_per_mm"]["concave_max"] == pytest.approx(0.01)
    assert data["curvature_per_mm"]["convex_max"] == pytest.approx(0.01)
    assert data["largest_ball_radius_mm"] == pytest.approx(100.0)
    assert data["slope_deg"]["max"] == pytest.approx(math.degrees(math.atan(0.01 * math.hypot(10, 8))))
    assert data["area_mm2"] == pytest.approx(s.area_mm2(job.part.outline.polygon))
    assert data["length_floor_mm"] == pytest.approx(length_floor_mm(s, job.part.outline, 3.0, 0.01))
    assert set(data["travel"]) == {"X", "Y", "Z", "A", "C"}
    assert data["fits"] is True
    text = "\n".join(found.lines())
    assert "largest ball        radius 100.00 mm" in text
    assert "fits: yes" in text


def test_floor_of_a_job_with_a_stepover(make_job) -> None:
    """The floor is then that of the largest scallop the stepover leaves."""
    job = make_job(limit="stepover = 0.4", tilt="lead = 15.0")
    s = Saddle.of(job.part)
    worst = local_scallop(s, 3.0, job.part.outline.grid(0.5), math.pi / 2, 0.4).max()
    assert survey(job).length_floor_mm == pytest.approx(
        length_floor_mm(s, job.part.outline, 3.0, worst), rel=1e-5
    )


def test_travel_without_rotary_axes(make_job) -> None:
    """Three axes: the gauge point stands over the ball's centre, contact + R n; brute force over the
    outline.
    """
    job = make_job(machine="mill-3", stock_extra="allowance = 0.3")
    travel = survey(job).travel
    s = Saddle.of(job.part)
    gauge = s.offset(dense(job.part.outline), 3.0) + np.array([0.0, 0.0, 30.0 - 3.0 + GAUGE])
    for column, letter in enumerate("XYZ"):
        expected = gauge[:, column].min(), gauge[:, column].max()
        assert travel[letter] == pytest.approx(expected, abs=1e-4), letter


def test_travel_at_the_worked_pose(make_job) -> None:
    """a = 0.01, a speck of surface at (20, 10), cutter along the normal, part origin on the rotary axes
    (derived here).

    The table turns by 24.09484255 about X after -63.43494882 deg about Z and brings the point to
    (17.88854382, -13.47219359, -2.73861279); words of axes that carry the work count the other way (ISO 841).
    The other way to reach it (-24.09484255, 116.56505118) turns farther. The speck's own size is the
    tolerance.
    """
    speck = 'shape = "rectangle"\nsize = [0.002, 0.002]\ncenter = [20.0, 10.0]'
    job = make_job(a=0.01, outline=speck, part_origin=[0.0, 0.0, 0.0])
    travel = survey(job).travel
    expected = {
        "X": 17.88854382,
        "Y": -13.47219359,
        "Z": -2.73861279 + GAUGE,
        "A": -24.09484255,
        "C": 63.43494882,
    }
    for letter, value in expected.items():
        assert travel[letter] == pytest.approx((value, value), abs=0.005), letter
    worked = reach(job, job.operations[0])
    assert worked.axis_from_vertical_deg == pytest.approx((24.09484255,) * 2, abs=0.005)
    assert worked.axis_from_normal_deg == pytest.approx((0.0, 0.0), abs=1e-5)
    # Drawn back along the spindle, Z alone moves, until the highest corner of the blank is cleared.
    assert worked.lift["X"] == pytest.approx(travel["X"], abs=1e-9)
    assert worked.lift["Z"][0] > travel["Z"][1] + job.clearance_mm


def test_both_ways_lean_both_ways(make_job) -> None:
    """On rotary-a, feed along X, a lean of 20 deg leans the axis to either side as the feed turns round."""
    changes = {"machine": "rotary-a", "direction": 0.0, "tilt": "lean = 20.0"}
    both = survey(make_job(way="both", **changes)).travel["A"]
    one = survey(make_job(way="one-way", **changes)).travel["A"]
    assert both[0] == pytest.approx(-both[1], abs=1e-6)
    assert both[1] > 20.0
    assert one[1] - one[0] < 0.6 * (both[1] - both[0])


def test_fixed_axis(make_job) -> None:
    job = make_job(tilt="axis = [0.0, -0.5, 0.8660254037844387]")
    found = reach(job, job.operations[0])
    assert found.axis_from_vertical_deg == pytest.approx((30.0, 30.0))
    assert found.travel["A"][0] == pytest.approx(found.travel["A"][1])
    assert abs(found.travel["A"][0]) == pytest.approx(30.0)


# ------------------------------------------------------------------------------------------ what does not fit


def test_a_ball_too_large(make_job) -> None:
    found = survey(make_job(a=0.2, outline='shape = "circle"\ndiameter = 8.0', tilt="lead = 15.0"))
    assert not found.fits
    assert found.length_floor_mm is None
    assert any(
        "T1, ball diameter 6 mm, would cut into" in text and "below 5 mm" in text for text in found.advice
    )
    assert "fits: NO" in found.lines()[-1 - len(found.advice)]


def test_too_low_is_cured_by_the_advice(make_job) -> None:
    """The gauge point would stand below Z 0; the part origin that is suggested does fit."""
    job = make_job(part_origin=[0.0, 0.0, -90.0], tilt="lead = 15.0")
    found = survey(job)
    assert not found.fits
    assert found.reaches[0].over["Z"] < 0
    assert any("operation 1: Z must go from" in text for text in found.advice)
    (cure,) = [text for text in found.advice if "part_origin = [" in text]
    origin = json.loads(cure[cure.index("[") : cure.index("]") + 1])
    assert survey(replace(job, part_origin_mm=tuple(origin))).fits


def test_too_wide_cannot_be_shifted(make_job) -> None:
    job = make_job(a=0.001, outline='shape = "rectangle"\nsize = [20.0, 170.0]', machine="mill-3", top=12.0)
    found = survey(job)
    assert not found.fits
    assert found.reaches[0].over.keys() == {"Y"}
    assert any("more than there is" in text for text in found.advice)


def test_no_rotary_axis_no_lead(make_job) -> None:
    """A ball on a vertical spindle cuts on its tip where the surface is level, and the survey says so."""
    found = survey(make_job(machine="mill-3"))
    assert any("within 0.0 deg of its tip" in text for text in found.advice)
    assert found.fits


def test_lines_of_an_inch_job(tmp_path) -> None:
    inch = {
        "units": "inch", "a": 0.127, "outline": 'shape = "rectangle"\nsize = [0.8, 0.6]', "top": 0.25,
        "bottom": -0.5, "margin": 0.1, "stock_extra": "", "part_origin": [0.0, 0.0, 1.2], "clearance": 0.2,
        "diameter": 0.25, "limit": "scallop = 0.0004", "feed": 60, "tolerance": 0.0002, "tilt": "lead = 15.0",
    }  # fmt: skip
    text = job_text(**inch)
    for millimetres, inches in (
        ("flute_length = 18.0", "flute_length = 0.7"),
        ("stickout = 34.0", "stickout = 1.3"),
    ):
        text = text.replace(millimetres, inches)
    path = tmp_path / "inch.toml"
    path.write_text(
        text.replace("[[16.0, 20.0], [32.0, 25.0]]", "[[0.6, 0.8], [1.2, 1.0]]"), encoding="utf-8"
    )
    job = load_job(path)
    text = "\n".join(survey(job).lines())
    assert f"radius {0.5 / 0.127:.4f} inch, at X0.0000 Y0.0000" in text
    assert survey(job).largest_ball_radius_mm == pytest.approx(0.5 / 0.127 * 25.4)
