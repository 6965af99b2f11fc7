"""The stock preview from job file to table, data and picture: block to finished tile in three operations."""

from __future__ import annotations

import json
import math
from pathlib import Path

import numpy as np
import pytest
from typer.testing import CliRunner

from anticlast import pipeline
from anticlast.cli import app
from anticlast.errors import BadInput
from anticlast.readback.forward import part_motion
from anticlast.readback.reader import read_program
from anticlast.records import Job
from anticlast.report.picture_stock import stock_picture
from anticlast.saddle import Saddle
from anticlast.stock.preview import StockPreview, stock_preview
from anticlast.stock.program_passes import passes_of
from conftest import job_text

TILE = """\
[job]
name = "tile from the block"
units = "mm"
[part]
a = 0.01
[part.outline]
shape = "rectangle"
size = [24.0, 20.0]
[stock]
material = "{material}"
top = 2.5
bottom = -10.0
margin = 0.0
{stock}
[machine]
file = "mill-3"
part_origin = [0.0, 0.0, 40.0]
clearance = 4.0
[[cutter]]
number = 1
shape = "flat"
diameter = 8.0
flutes = 3
flute_length = 20.0
stickout = 30.0
holder = [[20.0, 20.0]]
[[cutter]]
number = 2
shape = "ball"
diameter = 6.0
flutes = 2
flute_length = 16.0
stickout = 28.0
holder = [[16.0, 20.0]]
{limit}
[[operation]]
does = "rough"
cutter = 1
allowance = 0.5
spindle = 9000
feed = 900
depth_of_cut = 1.5
[[operation]]
does = "semi-finish"
cutter = 2
pattern = "raster"
stepover = 1.0
allowance = 0.2
spindle = 16000
feed = 1200
direction = 90.0
[[operation]]
does = "finish"
cutter = 2
pattern = "raster"
scallop = 0.01
spindle = 18000
feed = 1200
direction = 90.0
"""


def tile(folder: Path, material: str = "aluminium 6061", stock: str = "", limit: str = "") -> Path:
    path = folder / "job.toml"
    path.write_text(TILE.format(material=material, stock=stock, limit=limit), encoding="utf-8")
    return path


@pytest.fixture(scope="module")
def preview(tmp_path_factory: pytest.TempPathFactory) -> StockPreview:
    return pipeline.stock(pipeline.load_job(tile(tmp_path_factory.mktemp("tile"))), spacing_mm=0.25)


def run(*words: str | Path):
    return CliRunner().invoke(app, [str(word) for word in words])


# ---------------------------------------------------------------------------------------- states


def test_blank_over_the_part_is_the_closed_form(preview: StockPreview) -> None:
    """top w h - a (w^3 h - w h^3) / 12: integral of top - a (x^2 - y^2) over the rectangle (derived here)."""
    exact = 2.5 * 24.0 * 20.0 - 0.01 * (24.0**3 * 20.0 - 24.0 * 20.0**3) / 12.0
    assert preview.state.before == 1
    assert preview.state.above_part_mm3 == pytest.approx(exact, rel=1e-4)


def test_operations_take_the_blank_down_to_the_part(preview: StockPreview) -> None:
    """What all operations take is blank less finished part within 1 %; nothing is left out of the columns."""
    states = preview.states
    assert [state.before for state in states] == [1, 2, 3, 4]
    removed = states[0].volume_mm3 - states[-1].volume_mm3
    assert removed == pytest.approx(states[0].above_part_mm3, rel=0.01)
    assert preview.engagement.volume_mm3.sum() == pytest.approx(removed, rel=1e-9)
    assert sum(one.removed_mm3 for one in preview.passes) == pytest.approx(removed, rel=1e-6)
    assert preview.left_in_mm3 == 0.0


def test_each_operation_leaves_its_allowance(preview: StockPreview) -> None:
    _, rough, semi, finish = preview.states
    assert rough.thickness_mm[0] > 0.2
    # Allowance 0.2 and the scallops of a stepover of 1 mm, s^2 / (8 R) = 0.042 on a flat.
    assert semi.thickness_mm[0] == pytest.approx(0.2, abs=0.005)
    assert semi.thickness_mm[2] < 0.2 + 1.3 * 1.0 / 24.0 + 0.005
    assert finish.thickness_mm[0] == pytest.approx(0.0, abs=0.002)
    assert finish.thickness_mm[2] < 0.012


def test_maps_agree_with_the_ranges(preview: StockPreview) -> None:
    for state in preview.states:
        values = state.map.thickness_mm
        inside = values[np.isfinite(values)]
        assert inside.mean() == pytest.approx(state.thickness_mm[1], rel=0.02, abs=2e-4)
        assert inside.max() <= state.thickness_mm[2] + 0.05


# ---------------------------------------------------------------------------------------- passes


def test_passes_are_those_of_the_program(preview: StockPreview) -> None:
    job = preview.job
    paths, _ = pipeline.plan(job)
    for operation, path in zip(job.operations, paths, strict=True):
        numbers = [one.number for one in preview.passes if one.operation == operation.index]
        assert numbers == list(range(1, path.passes + 1))
    firsts = [one.line_first for one in preview.passes]
    assert firsts == sorted(firsts)


def test_finish_passes_meet_the_semi_finish_allowance(preview: StockPreview) -> None:
    """Depth 0.2 mm and the scallop before; width (section over the largest depth) the stepover, less what scallops lack."""
    paths, _ = pipeline.plan(preview.job)
    finish = [one for one in preview.passes if one.operation == 3][3:-3]
    assert np.median([one.depth_mean_mm for one in finish]) == pytest.approx(0.22, abs=0.03)
    share = np.median([one.width_mean_mm for one in finish]) / np.mean(paths[2].stepover_mm)
    assert 0.75 < share < 1.0
    # Passes step to +x. At -x the surface leans the cut across the ball's axis, at +x (12 degrees) away from it.
    assert all("axis" in one.flags for one in finish[:5])
    assert not any("axis" in one.flags for one in finish[-3:])


def test_forces_rise_with_the_section(preview: StockPreview) -> None:
    """Roughing and finishing by the same laws: power over removal rate is the specific force of chips that thin."""
    rough = [one for one in preview.passes if one.operation == 1 and one.removal_mm3_min > 500.0]
    finish = [one for one in preview.passes if one.operation == 3][3:-3]
    assert min(one.force_n[1] for one in rough) > max(one.force_n[1] for one in finish[:5]) * 0.5
    for one in (*rough, *finish):
        assert 0.0 < one.force_n[0] < one.force_n[1]
        assert 0.0 < one.power_w[0] < one.power_w[1] < 350.0
        # Power is specific force times removal rate; aluminium's laws give 240 to 4000 N/mm^2 at these chips.
        assert (
            200.0
            < one.power_w[0] * 60e3 / one.removal_mm3_min
            < one.power_w[1] * 60e3 / one.removal_mm3_min
            < 6000.0
        )


def test_passes_without_comments_are_told_by_rapids(preview: StockPreview, tmp_path: Path) -> None:
    job = preview.job
    _, axis_paths = pipeline.plan(job)
    temporary, _ = pipeline.post(job, axis_paths, tmp_path / "tile.ngc")
    told = passes_of(job, pipeline.read_back(job, temporary))
    bare = tmp_path / "bare.ngc"
    bare.write_text(
        "\n".join(row for row in temporary.read_text().splitlines() if not row.startswith("(")),
        encoding="utf-8",
    )
    program = read_program(
        bare, length_offsets={cutter.number: cutter.gauge_length_mm for cutter in job.cutters}
    )
    passes = passes_of(job, program)
    assert told.told
    assert not passes.told
    assert set(told.operation) - {0} == {1, 2, 3}
    assert set(passes.operation) == {1, 2}  # the ball's first operation stands for both of its
    rapid = program.motions.shape == 0
    assert np.array_equal(passes.number == 0, rapid)
    assert passes.number.max() == np.sum(~rapid[1:] & rapid[:-1])


def test_empty_program_leaves_the_blank(tmp_path: Path) -> None:
    job = pipeline.load_job(tile(tmp_path))
    path = tmp_path / "empty.ngc"
    path.write_text("%\nG21\nG17 G40 G49\nG90 G94 G54\nM2\n%\n", encoding="utf-8")
    program = read_program(path, length_offsets={1: 50.0, 2: 48.0})
    motion = part_motion(program, job.machine, job.part_origin_mm, {1: 50.0, 2: 48.0, 0: 0.0})
    found = stock_preview(job, program, motion, spacing_mm=0.5)
    assert found.passes == ()
    assert len(found.states) == 4
    assert found.states[-1].volume_mm3 == found.states[0].volume_mm3


# ---------------------------------------------------------------------------------------- command line


def test_json_of_the_command(tmp_path: Path) -> None:
    result = run("stock", tile(tmp_path), "--json", "--grid", "0.4")
    assert result.exit_code == 0, result.output
    data = json.loads(result.output)
    assert data["volume_above_part_mm3"] == pytest.approx(
        1200.0 - 0.01 * 24 * 20 * (24**2 - 20**2) / 12, rel=1e-3
    )
    assert set(data["thickness_mm"]) == {"min", "mean", "max"}
    assert {entry["operation"] for entry in data["passes"]} == {1, 2, 3}
    needed = {
        "depth_mm",
        "width_mm",
        "engaged_deg",
        "removal_rate_mm3_min",
        "force_n",
        "power_w",
        "deflection_mm",
        "flags",
    }
    assert all(needed <= set(entry) for entry in data["passes"])
    assert data["operations"][2]["thickness_after_mm"]["max"] < 0.012


def test_before_an_operation(tmp_path: Path) -> None:
    job = tile(tmp_path)
    result = run("stock", job, "--before", "3", "--json", "--grid", "0.4")
    data = json.loads(result.output)
    assert data["before"] == 3
    assert {entry["operation"] for entry in data["passes"]} == {3}
    assert data["thickness_mm"] == data["operations"][1]["thickness_after_mm"]
    text = run("stock", job, "--before", "3", "--grid", "0.4").output
    assert "stock before operation 3" in text
    assert "checks:" in text


def test_no_such_operation_exits_2(tmp_path: Path) -> None:
    result = run("stock", tile(tmp_path), "--before", "4")
    assert result.exit_code == 2
    assert "--before: found 4; needs the number of an operation, 1 to 3" in result.output


def test_bad_picture_name_exits_2_before_any_work(tmp_path: Path) -> None:
    result = run("stock", tile(tmp_path), "--picture", tmp_path / "stock.gif")
    assert result.exit_code == 2
    assert "a picture is .png or .svg" in result.output


@pytest.mark.parametrize("suffix", [".png", ".svg"])
def test_picture_is_drawn_and_repeats(preview: StockPreview, tmp_path: Path, suffix: str) -> None:
    paths = [tmp_path / f"{name}{suffix}" for name in "ab"]
    for path in paths:
        stock_picture(preview, path)
    assert paths[0].read_bytes() == paths[1].read_bytes()
    if suffix == ".svg":
        text = paths[0].read_text(encoding="utf-8")
        assert "stock before operation 1" in text
        assert "thickness along the surface normal, mm" in text
    else:
        assert paths[0].read_bytes().startswith(b"\x89PNG")


def test_unknown_material_gives_no_force(tmp_path: Path) -> None:
    result = run("stock", tile(tmp_path, material="acetal"), "--grid", "0.5", "--json")
    data = json.loads(result.output)
    assert not data["forces_known"]
    assert all(entry["force_n"] == {"low": None, "high": None} for entry in data["passes"])
    assert all(entry["removal_rate_mm3_min"] >= 0.0 for entry in data["passes"])
    assert "not known" in run("stock", tile(tmp_path, material="acetal"), "--grid", "0.5").output
    known = tile(tmp_path, material="acetal", stock="specific_force = [60.0, 120.0]")
    data = json.loads(run("stock", known, "--grid", "0.5", "--json").output)
    heavy = max(data["passes"], key=lambda entry: entry["force_n"]["high"])
    share = [math.sqrt(1.0 + part**2) for part in (0.157, 0.598)]
    assert heavy["force_n"]["high"] / heavy["force_n"]["low"] == pytest.approx(
        2.0 * share[1] / share[0], rel=0.01
    )


def test_limit_of_the_job_withholds_the_program(tmp_path: Path) -> None:
    """A limit far below the cut: stock exits 1, and make releases nothing; a limit far above changes nothing."""
    low = tile(tmp_path, limit="max_force = 2.0")
    assert run("stock", low, "--grid", "0.5").exit_code == 1
    job: Job = pipeline.load_job(low)
    made = pipeline.make(job, tmp_path / "out", grid_mm=0.5)
    assert not made.released
    failed = [finding for finding in made.findings if not finding.ok and not finding.warning]
    assert {finding.check.split(",")[0] for finding in failed} == {"force"}
    assert all(finding.line > 0 for finding in failed)
    assert not (tmp_path / "out" / f"{job.slug}.ngc").exists()


def test_inch_job_tells_inch_and_the_same_data(tmp_path: Path) -> None:
    mm, inch = tmp_path / "mm.toml", tmp_path / "inch.toml"
    changes = {
        "machine": "mill-3",
        "outline": 'shape = "circle"\ndiameter = 12.7',
        "limit": "scallop = 0.0254",
    }
    mm.write_text(
        job_text(**changes, top=6.35, bottom=-12.7, margin=2.54, stock_extra="", diameter=6.35),
        encoding="utf-8",
    )
    inch.write_text(
        job_text(
            machine="mill-3", units="inch", a=0.127, outline='shape = "circle"\ndiameter = 0.5', limit="scallop = 0.001",
            top=0.25, bottom=-0.5, margin=0.1, stock_extra="", diameter=0.25, stickout=34 / 25.4, feed=1500 / 25.4,
            tolerance=0.0002, clearance=0.2,
        ).replace("flute_length = 18.0", "flute_length = 0.7").replace("[[16.0, 20.0], [32.0, 25.0]]", "[[0.6, 0.8]]"),
        encoding="utf-8",
    )  # fmt: skip
    one = json.loads(run("stock", mm, "--json", "--grid", "0.5").output)
    two = json.loads(run("stock", inch, "--json", "--grid", "0.5").output)
    assert two["volume_above_part_mm3"] == pytest.approx(one["volume_above_part_mm3"], rel=1e-4)
    assert two["thickness_mm"]["mean"] == pytest.approx(one["thickness_mm"]["mean"], rel=1e-4)
    assert "inch" in run("stock", inch, "--grid", "0.5").output


def test_cannot_read_what_is_not_there(tmp_path: Path) -> None:
    path = tile(tmp_path, stock='heights = "gone.csv"')
    with pytest.raises(BadInput, match=r"there is no such file"):
        pipeline.load_job(path)


def test_saddle_of_the_tile(preview: StockPreview) -> None:
    """The finished field follows the saddle itself: its tops are the heights, to the scallop."""
    field, saddle = preview.states[-1].field, Saddle.of(preview.job.part)
    x, y = field.grid.middles_xy()
    inside = (np.abs(x) < 11.5) & (np.abs(y) < 9.5)
    over = (field.tops_mm() - saddle.height(x, y))[inside]
    assert over.min() > -0.003
    assert over.max() < 0.0125
