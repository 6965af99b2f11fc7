"""The main job end to end, over varied jobs: what is promised is what the posted text cuts."""

from __future__ import annotations

import hashlib
import json
import os
import shutil
from pathlib import Path

import numpy as np
import pytest

from anticlast import pipeline
from anticlast.errors import CannotWrite
from conftest import job_text

ROOT = Path(__file__).resolve().parents[1]
MICROMETRE = 1e-3

SLOT = 'shape = "slot"\nsize = [26.0, 12.0]'
CIRCLE = 'shape = "circle"\ndiameter = 20.0'
HOLED = (
    'shape = "polygon"\npoints = [[-12.0, -9.0], [12.0, -9.0], [12.0, 4.0], [5.0, 9.0], [-12.0, 9.0]]\n'
    "holes = [[[-3.0, -3.0], [3.0, -3.0], [3.0, 3.0], [-3.0, 3.0]]]"
)
ELL = 'shape = "polygon"\npoints = [[-12.0, -9.0], [12.0, -9.0], [12.0, -1.0], [0.0, -1.0], [0.0, 9.0], [-12.0, 9.0]]'
ROUNDED = 'shape = "rectangle"\nsize = [18.0, 14.0]\ncorner_radius = 4.0'
OFF_CENTRE = 'shape = "rectangle"\nsize = [14.0, 10.0]\ncenter = [20.0, 12.0]'

# Curvatures, unequal and rotated saddles, outlines, cutters, directions, tilts, machines, patterns, units, limits.
VARIED = {
    "3-axis raster along the crown": {"machine": "mill-3"},
    "3-axis raster along the hollow": {"machine": "mill-3", "direction": 0.0},
    "3-axis raster along a ruling": {"machine": "mill-3", "direction": 45.0, "a": 0.01},
    "3-axis graded": {"machine": "mill-3", "pattern": "graded", "a": 0.012},
    "3-axis graded along the hollow": {"machine": "mill-3", "pattern": "graded", "direction": 0.0, "a": 0.012},
    "3-axis odd direction": {"machine": "mill-3", "direction": 23.0, "pattern": "graded", "outline": CIRCLE},
    "3-axis fine scallop": {"machine": "mill-3", "limit": "scallop = 0.003", "outline": CIRCLE},
    "3-axis coarse scallop": {"machine": "mill-3", "limit": "scallop = 0.04", "tolerance": 0.02},
    "3-axis hole": {"machine": "mill-3", "outline": HOLED},
    "3-axis concave outline": {"machine": "mill-3", "outline": ELL, "direction": 60.0},
    "3-axis slot one way": {"machine": "mill-3", "outline": SLOT, "way": "one-way", "pattern": "graded"},
    "3-axis given stepover": {"machine": "mill-3", "limit": "stepover = 0.35"},
    "3-axis far from the saddle point": {"machine": "mill-3", "outline": OFF_CENTRE, "top": 12.0, "a": 0.008},
    "3-axis steep": {"machine": "mill-3", "a": 0.03, "extra_part": "b = 0.02", "top": 9.0},
    "3-axis small ball": {"machine": "mill-3", "diameter": 3.0, "outline": ROUNDED},
    "3-axis rotated unequal": {"machine": "mill-3", "extra_part": "b = 0.009\nrotate = 30.0", "direction": 10.0},
    "4-axis straight": {"machine": "rotary-a", "direction": 0.0},
    "4-axis leaned": {"machine": "rotary-a", "direction": 0.0, "tilt": "lean = 20.0"},
    "4-axis leaned graded": {"machine": "rotary-a", "direction": 0.0, "tilt": "lean = -25.0", "pattern": "graded"},
    "4-axis along Y": {"machine": "rotary-a", "direction": 90.0, "tilt": "lead = 15.0", "way": "one-way"},
    "4-axis hole": {"machine": "rotary-a", "outline": HOLED, "direction": 0.0, "tilt": "lean = 10.0"},
    "5-axis normal through the pole": {"pattern": "graded"},
    "5-axis lead": {"tilt": "lead = 15.0", "way": "one-way"},
    "5-axis lead both ways": {"tilt": "lead = 15.0", "outline": CIRCLE},
    "5-axis lead and lean": {"tilt": "lead = 10.0\nlean = -12.0", "direction": 30.0, "way": "one-way"},
    "5-axis fixed axis": {"tilt": 'axis = "fixed"\nfixed = [0.2, 0.1, 1.0]', "outline": ROUNDED},
    "5-axis graded lean": {"tilt": "lean = 20.0", "pattern": "graded", "outline": SLOT, "direction": 0.0},
    "5-axis curved": {"a": 0.02, "tilt": "lead = 12.0", "way": "one-way", "outline": CIRCLE, "top": 8.0},
    "5-axis hole": {"outline": HOLED, "tilt": "lead = 15.0", "way": "one-way"},
    "5-axis big ball": {"diameter": 10.0, "tilt": "lead = 20.0", "way": "one-way", "limit": "scallop = 0.005"},
    "5-axis unequal rotated": {
        "a": 0.004, "extra_part": "b = 0.010\nrotate = -20.0", "tilt": "lead = 15.0", "way": "one-way", "direction": 70.0,
    },
    "3-axis inch": {
        "machine": "mill-3", "units": "inch", "a": 0.127, "outline": 'shape = "rectangle"\nsize = [0.8, 0.6]', "top": 0.25,
        "bottom": -0.5, "margin": 0.12, "stock_extra": "allowance = 0.012", "part_origin": [0.0, 0.0, 1.2], "clearance": 0.2,
        "diameter": 0.25, "stickout": 1.4, "limit": "scallop = 0.0004", "feed": 50, "tolerance": 0.00015,
    },
}  # fmt: skip
INCH_CUTTER = (
    ("flute_length = 18.0", "flute_length = 0.75"),
    ("[[16.0, 20.0], [32.0, 25.0]]", "[[0.6, 0.8], [1.25, 1.0]]"),
)


def text_of(changes: dict[str, object]) -> str:
    text = job_text(**changes)
    if changes.get("units") == "inch":
        for old, new in INCH_CUTTER:
            text = text.replace(old, new)
    return text


def test_there_are_thirty_varied_jobs() -> None:
    assert len(VARIED) >= 30


@pytest.mark.parametrize("name", VARIED)
def test_proven_equals_predicted_and_nothing_gouges(name: str, tmp_path: Path) -> None:
    job_file = tmp_path / "job.toml"
    job_file.write_text(text_of(VARIED[name]), encoding="utf-8")
    made = pipeline.make(job_file, tmp_path / "out", grid_mm=0.1)
    assert made.released, [finding.message for finding in made.findings if not finding.ok]
    entry, proof, operation = made.operations[0], made.proof, made.job.operations[0]
    predicted, proven = entry.scallop_predicted_mm, proof.scallop_max_mm
    assert abs(proven - predicted) <= max(0.02 * predicted, 0.2 * MICROMETRE), (predicted, proven)
    assert proof.gouge_max_mm <= operation.tolerance_mm + 0.2 * MICROMETRE
    assert proof.uncut_area_mm2 == 0.0
    if operation.scallop_mm is not None:
        assert proven <= operation.scallop_mm + 0.2 * MICROMETRE
        assert entry.cut_length_mm >= 0.99 * entry.length_floor_mm
    limits = {axis.letter: axis.limits for axis in made.job.machine.axes if axis.limits}
    for letter, (low, high) in proof.travel.items():
        if letter in limits:
            assert limits[letter][0] <= low <= high <= limits[letter][1]


def test_outputs_are_as_contracted(tmp_path: Path) -> None:
    job_file = tmp_path / "job.toml"
    job_file.write_text(job_text(machine="mill-3", outline=CIRCLE), encoding="utf-8")
    out = tmp_path / "deep" / "out"
    made = pipeline.make(job_file, out)
    assert sorted(path.name for path in out.iterdir()) == [
        "report.html",
        "summary.json",
        "surface.stl",
        "test-tile.ngc",
    ]
    summary = json.loads((out / "summary.json").read_text())
    program = (out / "test-tile.ngc").read_bytes()
    assert summary["schema"] == 1
    assert summary["job"] == "test tile"
    assert summary["released"] is True
    assert summary["program"]["file"] == "test-tile.ngc"
    assert summary["program"]["sha256"] == hashlib.sha256(program).hexdigest()
    assert set(summary["operations"][0]) >= {
        "index", "does", "pattern", "cutter", "passes", "cut_length_mm", "link_length_mm", "length_floor_mm",
        "stepover_mm", "scallop_predicted_mm", "time_s", "feed_only_time_s",
    }  # fmt: skip
    assert set(summary["proof"]) >= {
        "grid_mm", "scallop_max_mm", "scallop_bound_mm", "gouge_max_mm", "gouge_bound_mm", "uncut_area_mm2",
        "holder_clearance_mm", "rapid_clearance_mm", "travel", "findings",
    }  # fmt: skip
    assert set(summary["time"]) >= {"total_s", "cutting_s", "rapid_s", "feed_only_s"}
    for finding in summary["proof"]["findings"]:
        assert set(finding) >= {"check", "ok", "worst", "limit", "unit", "line"}
    assert summary["proof"]["scallop_bound_mm"] >= summary["proof"]["scallop_max_mm"]
    assert summary["proof"]["gouge_bound_mm"] >= summary["proof"]["gouge_max_mm"]
    assert summary["time"]["total_s"] >= summary["time"]["feed_only_s"] * 0.999
    assert sum(entry["time_s"] for entry in summary["operations"]) == pytest.approx(made.times.total_s)


def test_same_job_same_bytes(tmp_path: Path) -> None:
    job_file = tmp_path / "job.toml"
    job_file.write_text(job_text(outline=CIRCLE, limit="scallop = 0.02", tolerance=0.01), encoding="utf-8")
    for folder in ("one", "two"):
        pipeline.make(job_file, tmp_path / folder)
    for name in ("test-tile.ngc", "summary.json", "report.html", "surface.stl"):
        assert (tmp_path / "one" / name).read_bytes() == (tmp_path / "two" / name).read_bytes(), name


def test_a_ball_too_large_is_refused_with_the_one_that_fits(tmp_path: Path) -> None:
    made = pipeline.make(ROOT / "samples" / "refused-ball" / "job.toml", tmp_path)
    assert not made.released
    assert not list(tmp_path.glob("*.ngc"))
    summary = json.loads((tmp_path / "summary.json").read_text())
    assert summary["released"] is False
    failed = [finding for finding in summary["proof"]["findings"] if not finding["ok"]]
    assert len(failed) == 1
    assert failed[0]["limit"] == pytest.approx(
        12.5, rel=1e-6
    )  # 1 / (2 a), a = 0.04: methods of any geometry text
    assert (tmp_path / "report.html").exists()


def test_an_axis_over_its_limit_is_withheld_naming_axis_and_line(tmp_path: Path) -> None:
    made = pipeline.make(ROOT / "samples" / "refused-tilt" / "job.toml", tmp_path)
    assert not made.released
    assert not list(tmp_path.glob("*.ngc"))
    failed = [finding for finding in made.findings if not finding.ok and "travel" in finding.check]
    assert failed
    assert all(finding.line > 0 for finding in failed)
    limits = {axis.letter: axis.limits for axis in made.job.machine.axes if axis.limits}
    over = [
        letter
        for letter, (low, high) in made.proof.travel.items()
        if letter in limits and (low < limits[letter][0] or high > limits[letter][1])
    ]
    assert over


def test_a_withheld_program_removes_the_old_one(tmp_path: Path) -> None:
    job_file = tmp_path / "job.toml"
    out = tmp_path / "out"
    job_file.write_text(job_text(machine="mill-3", outline=CIRCLE), encoding="utf-8")
    assert pipeline.make(job_file, out).released
    job_file.write_text(
        job_text(machine="mill-3", outline=CIRCLE, a=0.2, top=20.0, bottom=-24.0), encoding="utf-8"
    )
    assert not pipeline.make(job_file, out).released
    assert not list(out.glob("*.ngc"))
    assert not list(out.glob(".*"))


@pytest.mark.skipif(
    os.name == "nt" or getattr(os, "geteuid", lambda: 0)() == 0, reason="needs a folder that refuses writing"
)
def test_unwritable_folder_changes_nothing(tmp_path: Path) -> None:
    out = tmp_path / "out"
    out.mkdir(mode=0o500)
    with pytest.raises(CannotWrite, match="cannot be written"):
        pipeline.make(ROOT / "samples" / "press-pad" / "job.toml", out)


@pytest.mark.parametrize("sample", ["press-pad", "formwork-tile", "mirror-seat"])
def test_samples_are_released(sample: str, tmp_path: Path) -> None:
    shutil.copytree(ROOT / "samples" / sample, tmp_path / sample)
    made = pipeline.make(tmp_path / sample / "job.toml", tmp_path / "out")
    assert made.released, [finding.message for finding in made.findings if not finding.ok]


@pytest.mark.parametrize(
    ("a", "radius", "height"), [(0.005, 3.0, 0.005), (0.01, 3.0, 0.01), (0.01, 5.0, 0.005)]
)
def test_graded_is_within_five_percent_of_the_floor_along_the_crown(make_job, a, radius, height) -> None:
    job = make_job(
        machine="mill-3", pattern="graded", a=a, diameter=2 * radius, limit=f"scallop = {height}", tolerance=0.002,
        outline='shape = "rectangle"\nsize = [60.0, 60.0]', top=15.0, bottom=-20.0, part_origin=[0.0, 0.0, 40.0],
    )  # fmt: skip
    (path,), _ = pipeline.plan(job)
    floor = pipeline.floor_mm(job, path)
    assert floor <= path.cut_length_mm <= 1.05 * floor


def test_speed_of_contact_is_the_feed_asked(make_job, tmp_path: Path) -> None:
    """Cut length over feed equals the time of the cutting blocks as the control reads F."""
    job = make_job(machine="mill-3", outline=CIRCLE)
    made = pipeline.make(job, tmp_path)
    (path,), (axes,) = made.cutter_paths, made.axis_paths
    cutting = axes.purpose == 0
    minutes = float(axes.minutes[cutting].sum())
    assert minutes >= path.cut_length_mm / job.operations[0].feed_mm_min * 0.999
    read = made.program.motions
    assert float(np.nansum(read.seconds)) / 60 == pytest.approx(
        float(axes.minutes[~axes.rapid].sum()), rel=0.03
    )
