"""Where a program's time goes, and stopwatch readings that tell a machine's values: made-up machines are found again."""

from __future__ import annotations

import json
import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from typer.testing import CliRunner

from anticlast import pipeline
from anticlast.cli import app
from anticlast.errors import BadInput, NotConverged
from anticlast.machine import calibrate as module
from anticlast.machine.calibrate import NAMES, Reading, calibrate, scaled
from anticlast.machine.definition import load_machine
from anticlast.machine.measured import read_measured, seconds_of
from anticlast.machine.motion import estimate
from anticlast.machine.timing import hold_backs, marks_of, program_time
from anticlast.records import MotionTimes, Shape, Times, Wait
from anticlast.report.picture_time import part_cells, shares
from conftest import job_text
from test_kinematics import SHIPPED
from test_motion import motions, plain

MILL = SHIPPED["trunnion-ac"]


def zigzag(count, side):
    """Long sides at feed: runs up and down, so acceleration."""
    step = np.arange(count)
    return motions(np.column_stack([side * (step % 2), 2.0 * step, 0.0 * step]), 3000.0)


def dense(count):
    """A straight line in blocks of a hundredth of a millimetre: the block rate."""
    x = 0.01 * np.arange(count + 1)
    return motions(np.column_stack([x, 0 * x, 0 * x]), 1500.0)


def hops(count):
    """To and fro by 0.3 mm: the acceleration is not reached, so jerk."""
    x = 0.3 * (np.arange(count + 1) % 2)
    return motions(np.column_stack([x, 0 * x, 0 * x]), 1500.0)


PROGRAMS = {
    "sides": zigzag(60, 20.0),
    "dense": dense(3000),
    "hops": hops(250),
    "short sides": zigzag(100, 5.0),
}


def readings(truth, *names, noise=None):
    taken = []
    for place, name in enumerate(names):
        seconds = estimate(PROGRAMS[name], truth).total_s
        taken.append(
            Reading(name, PROGRAMS[name], (), seconds + (noise[place] if noise is not None else 0.0))
        )
    return taken


def made_up(accel, jerk, rate):
    return scaled(MILL, np.log(np.array([accel, jerk, rate])))


class TestFit:
    def test_all_three_are_found_from_four_programs(self):
        truth = made_up(0.6, 0.4, 180.0)
        found = calibrate(readings(truth, *PROGRAMS), MILL, 0.05)
        assert found.explained
        values = {item.name: item for item in found.told}
        for name, value in zip(NAMES, (0.6, 0.4, 180.0), strict=True):
            assert values[name].fitted
            assert values[name].value == pytest.approx(value, rel=0.01)
            assert values[name].low < value < values[name].high
        assert np.array(found.estimated_s) == pytest.approx(np.array(found.measured_s), abs=0.05)
        for axis, ours in zip(found.machine.axes, truth.axes, strict=True):
            assert axis.acceleration == pytest.approx(ours.acceleration, rel=0.01)
            assert axis.jerk == pytest.approx(ours.jerk, rel=0.01)

    def test_stated_ranges_hold_what_is_true(self):
        """Machines within half and double of the file, stopwatch errors of 0.2 s: at least 9 in 10 ranges hold the truth."""
        rng = np.random.default_rng(5)
        inside, told = 0, 0
        for _ in range(8):
            logs = rng.uniform(-math.log(2), math.log(2), 3) + [0.0, 0.0, math.log(500.0)]
            truth = scaled(MILL, logs)
            noise = rng.normal(0.0, 0.2, len(PROGRAMS))
            found = calibrate(readings(truth, *PROGRAMS, noise=noise), MILL, 0.2)
            for item, log in zip(found.told, logs, strict=True):
                if item.fitted:
                    told += 1
                    inside += item.low <= math.exp(log) <= item.high
        assert told >= 14
        assert inside >= 0.9 * told

    def test_one_reading_tells_one_number_and_says_so(self):
        truth = made_up(0.7, 1.0, 500.0)
        found = calibrate(readings(truth, "sides"), MILL, 0.2)
        assert [item.name for item in found.told if item.fitted] == ["acceleration"]
        told = found.told[0]
        assert told.low < 0.7 < told.high
        # Jerk is not known either, so the range is far wider than the stopwatch alone would give.
        assert told.high / told.low > 1.1
        text = "\n".join(found.lines())
        assert "One reading tells one number" in text
        assert "jerk, times the file's: not told by these readings" in text
        assert "# [[axis]] X\n  acceleration = " in text
        assert "jerk = " not in text

    def test_the_number_told_is_the_one_that_has_to_move_least(self):
        assert [
            t.name for t in calibrate(readings(made_up(1, 0.5, 500), "hops"), MILL, 0.2).told if t.fitted
        ] == ["jerk"]
        found = calibrate(readings(made_up(1, 1, 100.0), "dense"), MILL, 0.2)
        assert [item.name for item in found.told if item.fitted] == ["block rate"]
        assert found.told[2].value == pytest.approx(100.0, rel=0.01)
        assert "block_rate = 1" in "\n".join(found.file_lines())

    def test_a_machine_without_block_rate_can_be_told_one(self):
        free = replace(MILL, control=replace(MILL.control, block_rate=0.0))
        found = calibrate(readings(made_up(1, 1, 100.0), "dense"), free, 0.2)
        assert found.told[2].before == math.inf
        assert found.told[2].value == pytest.approx(100.0, rel=0.01)
        left = calibrate(readings(replace(made_up(0.7, 1, 1), control=free.control), "sides"), free, 0.2)
        assert left.machine.control.block_rate == 0.0
        assert left.as_json()["parameters"][2]["value"] is None

    def test_readings_that_nothing_explains(self):
        """Half of what F alone asks for: no acceleration makes a machine that fast."""
        asked = float(estimate(PROGRAMS["sides"], MILL).feed_only_s.sum())
        found = calibrate([Reading("sides", PROGRAMS["sides"], (), 0.5 * asked)], MILL, 0.5)
        assert not found.explained
        assert "faster than F and rapid rates ask" in "\n".join(found.lines())
        assert found.as_json()["machine_file"] == []

    def test_against_scipy(self):
        """The same least squares by scipy's trust-region solver."""
        scipy_optimize = pytest.importorskip("scipy.optimize")
        truth = made_up(0.6, 0.4, 180.0)
        noise = np.array([0.06, -0.08, 0.04, -0.02])
        taken = readings(truth, *PROGRAMS, noise=noise)
        found = calibrate(taken, MILL, 0.05)
        assert all(item.fitted for item in found.told)
        measured, errors = np.array(found.measured_s), np.array(found.error_s)

        def off(logs):
            made = scaled(MILL, logs)
            return (np.array([estimate(r.motions, made).total_s for r in taken]) - measured) / errors

        best = scipy_optimize.least_squares(off, [0.0, 0.0, math.log(500.0)], diff_step=0.01, x_scale=0.3)
        ours = np.log([item.value for item in found.told])
        assert (off(ours) ** 2).sum() <= 2 * best.cost * 1.01 + 1e-6
        assert ours == pytest.approx(best.x, abs=0.01)

    def test_inch_files_get_inch_values(self):
        inch = replace(MILL, units="inch")
        lines = calibrate(readings(made_up(0.5, 1, 500), "sides"), inch, 0.2).file_lines()
        x, a = float(lines[1].split("=")[1]), float(lines[7].split("=")[1])
        assert lines[0].endswith("X")
        assert lines[6].endswith("A")
        # Three digits are printed, so both scales agree to 1 %; the rotary value is in degrees whatever the units.
        assert x * 25.4 / 400.0 == pytest.approx(a / 1500.0, rel=0.01)

    def test_not_settling_is_said(self, monkeypatch):
        monkeypatch.setattr(module, "_ROUNDS", 1)
        monkeypatch.setattr(module, "CALIBRATION_STEP", 1e-9)
        with pytest.raises(NotConverged, match="the fit to the readings did not converge"):
            calibrate(readings(made_up(0.7, 1, 500), "sides"), MILL, 0.2)


class TestMeasured:
    @pytest.mark.parametrize(
        ("text", "seconds"),
        [("754.5", 754.5), ("12:34", 754.0), ("12:34.5", 754.5), ("1:02:03", 3723.0), (" 60 ", 60.0)],
    )
    def test_times(self, text, seconds):
        assert seconds_of(text) == seconds

    @pytest.mark.parametrize("text", ["", "0", "-5", "nan", "inf", "12 min", "1:2:3:4", "1e30", "0:00"])
    def test_no_times(self, text):
        assert seconds_of(text) is None

    def test_csv(self, tmp_path):
        path = tmp_path / "readings.csv"
        path.write_text(
            "\ufeffseconds, program ,note\n 61.5,a.ngc,\n\n2:03,sub/b.ngc,late\n", encoding="utf-8"
        )
        found = read_measured(path)
        assert [(item.program, item.seconds, item.line) for item in found] == [
            (tmp_path / "a.ngc", 61.5, 2), (tmp_path / "sub" / "b.ngc", 123.0, 4),
        ]  # fmt: skip

    @pytest.mark.parametrize(
        ("text", "faults"),
        [
            ("", ["1: program: missing; needs one column each named program and seconds",
                  "1: seconds: missing; needs one column each named program and seconds"]),
            ("program,seconds,program\n", ["1: program: found twice; needs one column each named program and seconds"]),
            ("program,seconds\n", ["1: : no readings; needs one line each with a program and its seconds"]),
            ("program,seconds\n,5\na.ngc,fast\na.ngc\n", [
                "2: program: missing; needs the path of a program",
                "3: seconds: found 'fast'; needs a time above 0 such as 754.5 or 12:34.5",
                "4: seconds: found ''; needs a time above 0 such as 754.5 or 12:34.5"]),
        ],
    )  # fmt: skip
    def test_faults_of_a_csv(self, tmp_path, text, faults):
        path = tmp_path / "readings.csv"
        path.write_text(text, encoding="utf-8")
        with pytest.raises(BadInput) as caught:
            read_measured(path)
        assert [f"{fault.line}: {fault.key}: {fault.message}" for fault in caught.value.faults] == faults

    def test_no_such_file(self, tmp_path):
        with pytest.raises(BadInput, match="no such file"):
            read_measured(tmp_path / "none.csv")


class TestTiming:
    def times(self, seconds, feed_s, held, axis):
        return MotionTimes(
            np.array(seconds), np.array(feed_s), np.array(held, np.uint8), np.array(axis, np.int8),
            (Wait(1, "tool change", 30.0, 0), Wait(9, "dwell", 2.0, 3)),
        )  # fmt: skip

    def program(self, tool=(1, 1, 1, 2, 2)):
        shape = np.array([Shape.RAPID, Shape.FEED, Shape.FEED, Shape.RAPID, Shape.FEED], np.uint8)
        points = np.cumsum(np.ones((6, 3)), axis=0)
        return motions(points, 60.0, shape=shape, line=np.array([3, 5, 6, 10, 12]), tool=np.array(tool))

    def test_hold_backs_add_up(self):
        times = self.times(
            [1.0, 4.0, 5.0, 2.0, 3.0], [0.5, 4.0, 2.0, 1.0, 1.0], [2, 0, 1, 2, 1], [0, -1, 4, 0, 4]
        )
        found = hold_backs(self.program(), times, MILL)
        assert [(item.cause, item.axis, item.seconds, item.lost_s, item.line) for item in found] == [
            ("speed", "C", 8.0, 5.0, 6)
        ]
        assert found[0].sentence() == "the C axis (speed) holds the feed back for 8.0 s and costs 5.0 s"
        every = hold_backs(self.program(), times, MILL, np.ones(5, bool))
        assert [(item.cause, item.axis, item.lost_s) for item in every] == [
            ("speed", "C", 5.0),
            ("acceleration", "X", 1.5),
        ]

    def test_operations_and_passes_by_marks(self):
        text = b"%\n(OPERATION 1: FINISH RASTER, T1)\n\n(PASS 1)\n\n\nN7 (PASS 2)\r\n(OPERATION 2: FINISH)\n\n\n(PASS 1)\n"
        marks = marks_of(text)
        assert [(mark.line, mark.kind, mark.number, mark.text) for mark in marks] == [
            (2, "OPERATION", 1, "FINISH RASTER, T1"), (4, "PASS", 1, ""), (7, "PASS", 2, ""), (8, "OPERATION", 2, "FINISH"),
            (11, "PASS", 1, ""),
        ]  # fmt: skip
        times = self.times([1.0, 4.0, 5.0, 2.0, 3.0], [0.5, 4.0, 2.0, 1.0, 1.0], [0] * 5, [-1] * 5)
        found = program_time("p", 9, self.program(), times, MILL, marks)
        one, two = found.operations
        assert (one.whole.name, one.whole.seconds, one.whole.waiting_s) == (
            "operation 1: FINISH RASTER, T1",
            10.0,
            0.0,
        )
        assert (two.whole.name, two.whole.seconds, two.whole.waiting_s) == ("operation 2: FINISH", 5.0, 2.0)
        assert [(item.name, item.seconds) for item in one.passes] == [("approach", 1.0), ("pass 1", 9.0)]
        assert [(item.name, item.seconds) for item in two.passes] == [("approach", 2.0), ("pass 1", 3.0)]
        assert found.total_s == 47.0
        assert found.rapid_s == 3.0
        assert found.waits == {"tool change": 30.0, "dwell": 2.0}
        assert found.lines()[-1] == "  nothing holds the feed back"

    def test_without_marks_cutters_and_rapids_part_them(self):
        times = self.times([1.0, 4.0, 5.0, 2.0, 3.0], [0.5, 4.0, 2.0, 1.0, 1.0], [0] * 5, [-1] * 5)
        one, two = program_time("p", 9, self.program(), times, MILL).operations
        assert (one.whole.name, one.whole.seconds, one.whole.waiting_s) == ("cutter T1", 10.0, 32.0)
        assert (two.whole.name, two.whole.seconds) == ("cutter T2", 5.0)
        assert [(item.name, item.seconds) for item in one.passes] == [("approach", 1.0), ("pass 1", 9.0)]

    def test_shares_along_the_program(self):
        """Bins take their part of a motion's time; rapids count to none."""
        times = self.times(
            [1.0, 4.0, 5.0, 2.0, 3.0], [0.5, 4.0, 2.5, 1.0, 1.0], [2, 0, 1, 2, 3], [0, -1, 4, 0, -1]
        )
        reached, by_cause = shares(self.program(), times, np.array([0.0, 1.0, 7.0, 10.0, 12.0, 15.0]))
        assert reached[[1, 2, 4]] == pytest.approx([(4 + 2.5 * 2 / 5) / 6, 0.5, 1 / 3])
        assert np.isnan(reached[[0, 3]]).all()
        assert by_cause[1] == pytest.approx([4 / 6, 2 / 6, 0, 0])
        assert by_cause[4] == pytest.approx([0, 0, 0, 1])


@pytest.fixture(scope="module")
def made(tmp_path_factory):
    """A small released program with its job: folder, job file, program."""
    folder = tmp_path_factory.mktemp("time")
    job = folder / "job.toml"
    job.write_text(
        job_text(
            machine="mill-3",
            outline='shape = "circle"\ndiameter = 14.0',
            limit="scallop = 0.02",
            tolerance=0.01,
        ),
        encoding="utf-8",
    )
    pipeline.make(job, folder)
    return folder, job, folder / "test-tile.ngc"


def run(*words):
    return CliRunner().invoke(app, [str(word) for word in words])


class TestCommand:
    def test_help_has_an_example(self):
        assert "Example: anticlast time" in run("time", "--help").output

    def test_agrees_with_make(self, made):
        folder, job, program = made
        summary = json.loads((folder / "summary.json").read_text())
        answer = json.loads(run("time", program, "--job", job, "--json").output)
        assert answer["total_s"] == pytest.approx(summary["time"]["total_s"])
        assert answer["waiting_s"] == pytest.approx(summary["time"]["waiting_s"]) == 33.0
        assert answer["operations"][0]["whole"]["seconds"] + 33.0 == pytest.approx(
            summary["operations"][0]["time_s"]
        )
        passes = [item for item in answer["operations"][0]["passes"] if item["number"]]
        assert len(passes) == summary["operations"][0]["passes"]
        spent = sum(item["seconds"] for item in answer["operations"][0]["passes"])
        assert spent == pytest.approx(answer["moving_s"], rel=1e-9)
        assert answer["calibration"] is None

    def test_says_what_holds_back(self, made):
        _, job, program = made
        done = run("time", program, "--job", job)
        assert done.exit_code == 0
        assert "tool change: 30.0 s" in done.output
        assert "axis (acceleration) holds the feed back for" in done.output

    def test_measured_readings(self, made):
        folder, job, program = made
        slow = scaled(load_machine("mill-3"), np.log(np.array([0.3, 1.0, 500.0])))
        answer, read, _ = pipeline.time(program, pipeline.load_job(job))
        seconds = estimate(read.motions, slow, read.events).total_s
        done = run("time", program, "--job", job, "--measured", f"{seconds:.2f}", "--error", "0.05")
        assert done.exit_code == 0
        assert "One reading tells one number" in done.output
        (folder / "readings.csv").write_text(f"program,seconds\n{program.name},{seconds}\n", encoding="utf-8")
        before = load_machine("mill-3").source.read_bytes()
        told = json.loads(
            run("time", program, "--job", job, "--measured", folder / "readings.csv", "--json").output
        )["calibration"]
        assert told["readings"][0]["before_s"] == pytest.approx(answer.total_s)
        assert told["readings"][0]["estimated_s"] == pytest.approx(seconds, abs=0.1)
        assert load_machine("mill-3").source.read_bytes() == before

    def test_what_nothing_explains_exits_1(self, made):
        _, job, program = made
        done = run("time", program, "--job", job, "--measured", "35")
        assert done.exit_code == 1
        assert "No acceleration, jerk and block rate explain these readings" in done.output

    @pytest.mark.parametrize("value", ["soon", "-3", "0"])
    def test_bad_readings_exit_2(self, made, value):
        _, job, program = made
        done = run("time", program, "--job", job, f"--measured={value}")
        assert done.exit_code == 2
        assert "--measured" in done.output

    def test_bad_programs_exit_2(self, made, tmp_path):
        _, job, program = made
        assert run("time", tmp_path / "none.ngc", "--job", job).exit_code == 2
        broken = tmp_path / "broken.ngc"
        broken.write_text("G21\nG1 X1 Y\nM2\n")
        done = run("time", broken, "--job", job)
        assert done.exit_code == 2
        assert "broken.ngc:2" in done.output
        (tmp_path / "readings.csv").write_text("program,seconds\nnone.ngc,5\n")
        assert run("time", program, "--job", job, "--measured", tmp_path / "readings.csv").exit_code == 2

    @pytest.mark.parametrize("ending", ["png", "svg"])
    def test_picture(self, made, ending, tmp_path):
        _, job, program = made
        first, again = tmp_path / f"a.{ending}", tmp_path / f"b.{ending}"
        for path in (first, again):
            assert run("time", program, "--job", job, "--picture", path).exit_code == 0
        assert first.read_bytes() == again.read_bytes()
        assert first.read_bytes()[:5] in (b"\x89PNG\r", b"<?xml")
        if ending == "svg":
            assert "acceleration" in first.read_text(encoding="utf-8")

    def test_picture_of_another_kind_exits_2(self, made):
        _, job, program = made
        assert run("time", program, "--job", job, "--picture", "a.pdf").exit_code == 2

    def test_map_holds_all_feed_time(self, made):
        """In one cell as big as the part: time that F asks for over time taken, of all feed motions."""
        _, job, program = made
        loaded = pipeline.load_job(job)
        _, read, times = pipeline.time(program, loaded)
        part = pipeline.in_part(read, loaded)
        wide = np.array([-1e3, 1e3])
        feed = read.motions.shape != Shape.RAPID
        share = part_cells(read.motions, times, part, wide, wide)
        assert share[0, 0] == pytest.approx(
            times.feed_only_s[feed].sum() / times.seconds[feed].sum(), rel=1e-9
        )
        assert 0.3 < share[0, 0] < 1.0


def test_times_of_the_machine_file_are_read():
    assert load_machine("mill-3").times == Times(30.0, 3.0, 1.0)
    assert plain().times == Times()
    assert isinstance(load_machine("mill-3").source, Path)
