"""Where the part should sit: against linear programming, against what the programs then do, and by hand."""

from __future__ import annotations

import json
import math
import re
from dataclasses import replace

import numpy as np
import pytest
from scipy.optimize import linprog
from typer.testing import CliRunner

from anticlast import pipeline
from anticlast.cli import app
from anticlast.errors import BadInput
from anticlast.job_turn import turned_job
from anticlast.machine.kinematics import limit_arrays
from anticlast.machine.placement import PLACE_STEP_MM, _Stand, propose
from anticlast.records import Purpose
from anticlast.report.picture_placement import placement_picture
from anticlast.survey import _sweep, placement
from conftest import job_text

SMALL: dict[str, object] = {
    "outline": 'shape = "rectangle"\nsize = [14.0, 8.0]', "limit": "scallop = 0.03", "tolerance": 0.01, "a": 0.012, "top": 3.0,
    "bottom": -8.0, "margin": 2.0, "stickout": 30.0, "tilt": "lead = 15.0", "way": "one-way", "direction": 0.0,
}  # fmt: skip
LETTERS = "XYZABC"


def blank_corners(job):
    x0, y0, x1, y1 = job.stock.outline.bounds
    heights = (job.stock.top_mm, job.stock.bottom_mm)
    return np.array([[x, y, z] for x in (x0, x1) for y in (y0, y1) for z in heights])


def stand_of(job, turn_deg: float = 0.0) -> _Stand:
    sweeps = [_sweep(job, operation) for operation in job.operations]
    origin = np.array(job.part_origin_mm)
    return _Stand(job.machine, origin, sweeps, blank_corners(job), job.clearance_mm, turn_deg, 0.0)


@pytest.mark.parametrize("machine", ["mill-3", "rotary-a", "trunnion-bc", "head-b-table-c"])
@pytest.mark.parametrize("turn_deg", [0.0, 35.0])
def test_a_shift_is_the_same_as_another_part_origin(make_job, machine, turn_deg) -> None:
    """The motion is carried over to other origins to first order, which is exact: set up anew there, it comes out the same."""
    job = make_job(**{**SMALL, "machine": machine})
    shift = np.array([4.0, -7.0, 2.5])
    there = stand_of(job, turn_deg).at(shift)
    moved = replace(job, part_origin_mm=tuple(np.array(job.part_origin_mm) + shift))
    anew = stand_of(moved, turn_deg).at(np.zeros(3))
    assert there.part_origin_mm == pytest.approx(anew.part_origin_mm)
    assert there.motion_min == pytest.approx(anew.motion_min, rel=1e-9)
    for letter, span in anew.reach.items():
        assert there.reach[letter] == pytest.approx(span, abs=1e-9)
        assert there.margin[letter] == pytest.approx(anew.margin[letter], abs=1e-9)


@pytest.mark.parametrize("turn_deg", [0.0, 35.0])
def test_turning_the_part_is_turning_the_job(make_job, turn_deg) -> None:
    """Turned inside the search or turned on loading the job: the axes go the same way."""
    job = make_job(**{**SMALL, "machine": "rotary-a"})
    inside = stand_of(job, turn_deg).at(np.zeros(3))
    loaded = placement(turned_job(job, math.radians(turn_deg)))
    assert loaded is not None
    assert inside.motion_min == pytest.approx(loaded.now.motion_min, rel=1e-9)
    assert inside.off_wish_deg == pytest.approx(loaded.now.off_wish_deg, abs=1e-9)
    for letter, span in loaded.now.cut.items():
        assert inside.cut[letter] == pytest.approx(span, abs=1e-9)


@pytest.mark.parametrize(
    ("machine", "origin"),
    [
        ("trunnion-ac", [30.0, 25.0, 30.0]),
        ("trunnion-bc", [62.0, -10.0, 30.0]),
        ("head-b-table-c", [40.0, 5.0, 30.0]),
    ],
)
def test_the_place_is_the_best_that_linear_programming_finds(make_job, machine, origin) -> None:
    """Least sum of |travel|/feed over shifts in X and Y, inside limits: a linear program, solved by scipy's HiGHS."""
    job = make_job(**{**SMALL, "machine": machine, "part_origin": origin})
    stand = stand_of(job)
    feed = np.array([axis.feed for axis in job.machine.linear])
    steps = (np.diff(stand.words, axis=0)[stand.along] / feed).ravel()
    slopes = (np.diff(stand.carried, axis=0)[stand.along] / feed[:, None]).reshape(-1, 3)[:, :2]
    count = len(steps)
    eye = np.eye(count)
    upper = np.block([[slopes, -eye], [-slopes, -eye]])
    bounds_at = np.concatenate([-steps, steps])
    low, high = limit_arrays(job.machine.linear)
    rows, sides = [], []
    for gauge in (stand.gauge, stand.drawn):
        for axis in range(3):
            rows += [stand.carried[:, axis, :2], -stand.carried[:, axis, :2]]
            sides += [high[axis] - gauge[:, axis], gauge[:, axis] - low[axis]]
    limits = np.hstack([np.concatenate(rows), np.zeros((len(np.concatenate(rows)), count))])
    solved = linprog(
        np.concatenate([np.zeros(2), np.ones(count)]), A_ub=np.vstack([upper, limits]),
        b_ub=np.concatenate([bounds_at, *sides]), bounds=[(None, None)] * 2 + [(0, None)] * count, method="highs",
    )  # fmt: skip
    assert solved.status == 0
    found = stand.at(stand.least_motion(False))
    assert found.fits
    rotary = stand.at(np.zeros(3)).motion_min - float(np.abs(steps).sum())
    # Rounded to half a millimetre, and a millimetre of every travel kept spare: a few percent of the least.
    assert solved.fun + rotary <= found.motion_min * (1 + 1e-9)
    assert found.motion_min <= 1.03 * (solved.fun + rotary)
    assert np.abs(np.array(found.part_origin_mm) / PLACE_STEP_MM % 1.0).max() < 1e-9


def test_a_part_beyond_the_travel_is_brought_inside_and_cut(tmp_path) -> None:
    """At X 85 the program is withheld by an axis limit; at the proposed place the same job is released."""
    path = tmp_path / "job.toml"
    path.write_text(
        job_text(**{**SMALL, "machine": "trunnion-ac", "part_origin": [85.0, 0.0, 30.0]}), encoding="utf-8"
    )
    job = pipeline.load_job(path)
    found = pipeline.survey(job).placement
    assert not found.now.fits
    assert found.best.fits
    assert found.best.part_origin_mm[2] == 30.0
    withheld = pipeline.make(job, tmp_path / "out", grid_mm=0.2)
    assert {finding.check for finding in withheld.findings if not finding.ok} & {"travel X", "travel Y"}
    moved = turned_job(
        replace(job, part_origin_mm=found.best.part_origin_mm), math.radians(found.best.turn_deg)
    )
    made = pipeline.make(moved, tmp_path / "out", grid_mm=0.2)
    assert made.released, [finding.message for finding in made.findings if not finding.ok]


def test_the_program_moves_as_much_less_as_was_foretold(make_job) -> None:
    """Travel of all axes in units of their feeds over the cutting blocks, before and after."""
    job = make_job(
        **{
            **SMALL,
            "machine": "trunnion-bc",
            "part_origin": [30.0, 20.0, 30.0],
            "tilt": "lead = 12.0\nlean = 8.0",
        }
    )
    found = placement(job)
    assert found.moves
    motion = []
    for origin in (found.now.part_origin_mm, found.best.part_origin_mm):
        _, (axes,) = pipeline.plan(
            replace(turned_job(job, math.radians(found.best.turn_deg)), part_origin_mm=origin)
        )
        steps = np.abs(np.diff(axes.words, axis=0, prepend=axes.start[None, :]))[axes.purpose == Purpose.CUT]
        motion.append(float((steps / [axis.feed for axis in job.machine.axes]).sum()))
    assert found.best.turn_deg == 0.0
    assert motion[1] / motion[0] == pytest.approx(found.best.motion_min / found.now.motion_min, abs=0.06)


def test_one_rotary_axis_wants_the_feed_square_to_it(make_job) -> None:
    """A about X can lead only along Y: fed along X the 15 degrees of lead are missing, with the part turned they are not."""
    job = make_job(**{**SMALL, "machine": "rotary-a"})
    found = placement(job)
    assert found.moves
    assert found.best.turn_deg in (90.0, 270.0)
    assert found.now.off_wish_deg >= 15.0
    # What stays is the slope across the feed, along X: 2 b |y| = 0.096 at the edge, 5.5 degrees.
    assert found.best.off_wish_deg == pytest.approx(math.degrees(math.atan(2 * 0.012 * 4.0)), abs=1.0)


def test_nothing_to_gain_is_said_so(make_job) -> None:
    found = placement(make_job(**{**SMALL, "machine": "mill-3", "tilt": ""}))
    assert not found.moves
    assert found.best is found.now
    # No rotary axis, no carrying: 4 mm of Y travel over the widest chord on either side of the middle.
    assert found.now.margin["Y"][0] == pytest.approx(found.now.margin["Y"][1])


def test_height_is_changed_only_if_it_must_be(make_job) -> None:
    """Z would have to go past its top limit drawn back from a part on a tall block: only then is another height proposed."""
    job = make_job(**{**SMALL, "machine": "trunnion-ac", "part_origin": [0.0, 0.0, 190.0]})
    found = placement(job)
    assert not found.now.fits
    assert found.best.fits
    assert found.best.part_origin_mm[2] < 190.0


def test_turn_of_a_job_file_by_hand(tmp_path) -> None:
    """turn = 30 against the same part written down turned: rotate, direction, outline and fixed axis each by 30 degrees."""
    c, s = math.cos(math.radians(30.0)), math.sin(math.radians(30.0))
    points = [(-6.0, -4.0), (6.0, -4.0), (6.0, 2.0), (3.0, 4.0), (-6.0, 4.0)]
    turned = [[x * c - y * s, x * s + y * c] for x, y in points]
    common = {**SMALL, "machine": "trunnion-ac", "tilt": 'axis = "fixed"\nfixed = [0.2, 0.1, 1.0]'}
    one = job_text(**{**common, "outline": f'shape = "polygon"\npoints = {[list(p) for p in points]}'})
    one = one.replace("clearance = 5.0", "clearance = 5.0\nturn = 30.0")
    axis = [0.2 * c - 0.1 * s, 0.2 * s + 0.1 * c, 1.0]
    other = job_text(
        **{
            **common, "outline": f'shape = "polygon"\npoints = {turned}', "extra_part": "rotate = 30.0", "direction": 30.0,
            "tilt": f'axis = "fixed"\nfixed = {axis}',
        }
    )  # fmt: skip
    programs = []
    for text in (one, other):
        (tmp_path / "job.toml").write_text(text, encoding="utf-8")
        made = pipeline.make(tmp_path / "job.toml", tmp_path / "out", grid_mm=0.3)
        assert made.released
        lines = (tmp_path / "out" / "test-tile.ngc").read_text(encoding="ascii").splitlines()
        programs.append(lines)
    assert "(THE PART IS SET TURNED 30 DEGREES ABOUT Z FROM ITS DRAWING)" in programs[0]
    plain = [[line for line in lines if line[0] not in "(%"] for lines in programs]
    assert len(plain[0]) == len(plain[1])
    numbers = [[float(x) for line in lines for x in re.findall(r"-?[0-9.]+", line)] for lines in plain]
    # Corners of the outline differ in their sixteenth digit, words by no more than a last digit.
    assert numbers[0] == pytest.approx(numbers[1], abs=1.01e-4, rel=1e-3)


def test_turn_does_not_go_with_a_measured_blank(tmp_path) -> None:
    text = job_text(**{**SMALL, "stock_extra": 'mesh = "blank.stl"'}).replace(
        "clearance = 5.0", "clearance = 5.0\nturn = 5.0"
    )
    (tmp_path / "job.toml").write_text(text, encoding="utf-8")
    with pytest.raises(BadInput, match="measure the blank as it is set"):
        pipeline.load_job(tmp_path / "job.toml")


class TestCommand:
    @pytest.fixture
    def job_file(self, tmp_path):
        path = tmp_path / "job.toml"
        path.write_text(
            job_text(**{**SMALL, "machine": "trunnion-ac", "part_origin": [85.0, 0.0, 30.0]}),
            encoding="utf-8",
        )
        return path

    def test_lines(self, job_file) -> None:
        result = CliRunner().invoke(app, ["survey", str(job_file)])
        assert result.exit_code == 0, result.output
        for line in (
            r"placement +part_origin = \[[-0-9., ]+\].*: the axes move \d+ % of what they do now",
            r"  X margin +[0-9.]+ and +[0-9.]+ mm   now -?[0-9.]+ and -?[0-9.]+",
        ):
            assert re.search(f"^{line}$", result.output, re.MULTILINE), line
        assert "  C margin   endless" in result.output

    def test_json(self, job_file) -> None:
        data = json.loads(CliRunner().invoke(app, ["survey", str(job_file), "--json"]).output)["placement"]
        assert data["moves"] is True
        assert data["now"]["fits"] is False
        assert data["best"]["fits"] is True
        assert data["best"]["axis_motion_min"] > 0.0
        assert data["best"]["margin"]["C"] == [None, None]
        assert min(data["best"]["margin"]["X"]) > 0.0

    @pytest.mark.parametrize("ending", ["png", "svg"])
    def test_picture(self, job_file, tmp_path, ending) -> None:
        target = tmp_path / f"margin.{ending}"
        result = CliRunner().invoke(app, ["survey", str(job_file), "--picture", str(target)])
        assert result.exit_code == 0, result.output
        assert target.stat().st_size > 5000
        if ending == "svg":
            text = target.read_text(encoding="utf-8")
            assert "margin left on each axis" in text
            assert "over" in text

    def test_wrong_ending_and_nothing_to_place(self, job_file, make_job, tmp_path) -> None:
        assert CliRunner().invoke(app, ["survey", str(job_file), "--picture", "x.bmp"]).exit_code == 2
        with pytest.raises(BadInput, match="nothing to place"):
            placement_picture(make_job(), None, tmp_path / "x.png")


def test_an_empty_choice_of_turns_still_looks_at_the_one_it_has(make_job) -> None:
    job = make_job(**{**SMALL, "machine": "rotary-b"})
    found = propose(
        job.machine,
        job.part_origin_mm,
        [_sweep(job, job.operations[0])],
        blank_corners(job),
        5.0,
        turns_deg=[],
    )
    assert found.best.turn_deg == 0.0


class TestStandingStill:
    def test_one_axis_for_a_shallow_surface(self, make_job) -> None:
        """Slopes to 9.7 degrees any way: no axis is nearer than 10 to all normals and further off than 10 + twice the slope."""
        job = make_job(**{**SMALL, "machine": "trunnion-ac", "outline": 'shape = "circle"\ndiameter = 14.0'})
        found = pipeline.survey(job).steady
        near, far = found.from_normal_deg
        slope = math.degrees(math.atan(2 * 0.012 * 7.0))
        assert 10.0 <= near < 11.0
        assert far <= 10.0 + 2 * slope + 1.0
        normals = normals_by_hand(job)
        angles = np.degrees(np.arccos(np.clip(normals @ np.array(found.axis), -1, 1)))
        assert angles.min() >= near - 0.2
        assert angles.max() <= far + 0.2

    @pytest.mark.parametrize("machine", ["trunnion-ac", "rotary-a", "head-b-table-c"])
    def test_it_cuts_the_same_surface_with_the_axes_standing(self, machine, tmp_path) -> None:
        """Per-minute feed, no rotary motion in the cut, and no slower than the motion that follows the surface."""
        (tmp_path / "job.toml").write_text(
            job_text(**{**SMALL, "machine": machine, "tilt": "lead = 15.0"}), encoding="utf-8"
        )
        job = pipeline.load_job(tmp_path / "job.toml")
        found = pipeline.survey(job).steady
        following = pipeline.make(job, tmp_path / "a", grid_mm=0.2)
        still = replace(job, operations=(replace(job.operations[0], fixed_axis=found.axis),))
        standing = pipeline.make(still, tmp_path / "b", grid_mm=0.2)
        assert following.released
        assert standing.released, [finding.message for finding in standing.findings if not finding.ok]
        assert not standing.program.motions.inverse.any()
        asked = [
            made.axis_paths[0].minutes[made.axis_paths[0].purpose == Purpose.CUT].sum()
            for made in (standing, following)
        ]
        assert asked[0] <= 1.001 * asked[1]

    def test_none_without_rotary_axes_or_on_a_steep_surface(self, make_job) -> None:
        assert pipeline.survey(make_job(**{**SMALL, "machine": "mill-3"})).steady is None
        steep = make_job(**{**SMALL, "machine": "trunnion-ac", "a": 0.06, "diameter": 4.0})
        assert pipeline.survey(steep).steady is None

    def test_it_is_said(self, tmp_path) -> None:
        path = tmp_path / "job.toml"
        path.write_text(job_text(**{**SMALL, "machine": "trunnion-ac"}), encoding="utf-8")
        result = CliRunner().invoke(app, ["survey", str(path)])
        line = r"^positioning +operation 1: fixed = \[(.*)\] keeps the ball (\d+) to (\d+) deg"
        said = re.search(line, result.output, re.MULTILINE)
        assert said
        data = json.loads(CliRunner().invoke(app, ["survey", str(path), "--json"]).output)["positioning"]
        assert [float(x) for x in said[1].split(",")] == pytest.approx(data["fixed"], abs=6e-4)


def normals_by_hand(job):
    """Normals of z = a x^2 - b y^2 on a grid of the outline, by hand."""
    x, y = np.meshgrid(np.linspace(-7, 7, 57), np.linspace(-7, 7, 57))
    inside = np.hypot(x, y) <= 7.0
    x, y = x[inside], y[inside]
    normal = np.column_stack([-2 * job.part.a_per_mm * x, 2 * job.part.b_per_mm * y, np.ones(len(x))])
    return normal / np.linalg.norm(normal, axis=1)[:, None]
