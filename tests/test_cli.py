"""The command line as a user meets it: words, exit statuses, no traceback, nothing half-written."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import pytest
from typer.testing import CliRunner

from anticlast.cli import app
from conftest import job_text

ROOT = Path(__file__).resolve().parents[1]
COMMANDS = ("make", "survey", "scallop", "machines", "prove", "stock", "compare", "time")


def run(*words: str | Path):
    return CliRunner().invoke(app, [str(word) for word in words])


@pytest.fixture
def job_file(tmp_path: Path) -> Path:
    path = tmp_path / "job.toml"
    path.write_text(
        job_text(
            machine="mill-3",
            outline='shape = "circle"\ndiameter = 14.0',
            limit="scallop = 0.02",
            tolerance=0.01,
        ),
        encoding="utf-8",
    )
    return path


@pytest.mark.parametrize("command", COMMANDS)
def test_help_has_an_example(command: str) -> None:
    result = run(command, "--help")
    assert result.exit_code == 0
    assert f"Example: anticlast {command}" in result.output


def test_no_command_shows_help_and_unknown_command_exits_2() -> None:
    assert "make" in run().output
    result = run("mill")
    assert result.exit_code == 2
    assert "No such command" in result.output


def test_help_answers_without_loading_the_heavy_libraries() -> None:
    """The figure itself (under 0.4 s) is for the benchmark; what keeps it is that nothing heavy is imported."""
    code = (
        "import sys; from typer.testing import CliRunner; from anticlast.cli import app;"
        "CliRunner().invoke(app, ['--help']);"
        "print(sorted({'numpy', 'numba', 'shapely', 'trimesh', 'matplotlib', 'pydantic'} & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def test_make_releases_and_says_where_to_look(job_file: Path, tmp_path: Path) -> None:
    result = run("make", job_file, "--out", tmp_path / "out")
    assert result.exit_code == 0, result.output
    assert "RELEASED" in result.output
    assert str(tmp_path / "out" / "report.html") in result.output
    assert "Prove out above the part" in result.output


def test_make_json_is_data_only(job_file: Path, tmp_path: Path) -> None:
    result = run("make", job_file, "--out", tmp_path / "out", "--json")
    assert json.loads(result.output) == json.loads((tmp_path / "out" / "summary.json").read_text())


def test_bad_job_exits_2_with_every_fault_and_writes_nothing(job_file: Path, tmp_path: Path) -> None:
    text = (
        job_file.read_text().replace("diameter = 6.0", "diametre = 6.0").replace("feed = 1500", "feed = -3")
    )
    job_file.write_text(text)
    result = run("make", job_file, "--out", tmp_path / "out")
    assert result.exit_code == 2
    assert "diametre" in result.output
    assert "feed" in result.output
    assert "Traceback" not in result.output
    assert not (tmp_path / "out").exists()


def test_missing_job_exits_2(tmp_path: Path) -> None:
    result = run("survey", tmp_path / "nowhere.toml")
    assert result.exit_code == 2
    assert "nowhere.toml" in result.output
    assert "Traceback" not in result.output


def test_survey_json_has_the_contracted_keys(job_file: Path) -> None:
    data = json.loads(run("survey", job_file, "--json").output)
    assert set(data) >= {
        "area_mm2", "slope_deg", "curvature_per_mm", "largest_ball_radius_mm", "length_floor_mm", "travel", "fits",
    }  # fmt: skip
    assert data["curvature_per_mm"]["concave_max"] == pytest.approx(0.01, rel=1e-9)  # 2 a at the saddle point
    assert data["largest_ball_radius_mm"] == pytest.approx(100.0, rel=1e-9)
    assert data["fits"] is True


def test_scallop_json_has_the_contracted_keys(job_file: Path) -> None:
    data = json.loads(run("scallop", job_file, "--stepover", "0.5", "--json").output)
    assert set(data) >= {
        "cutter",
        "direction_deg",
        "stepover_mm",
        "scallop_mm",
        "at",
        "flat_rule",
        "ra_um",
        "rz_um",
    }
    assert set(data["stepover_mm"]) == {"tightest", "mean", "widest"}
    assert set(data["scallop_mm"]) == {"smallest", "mean", "largest"}
    # Flat rule, any handbook: R = 3, s = 0.5 -> h = 0.010434814.
    assert data["flat_rule"]["scallop_mm"] == pytest.approx(0.010434814, abs=1e-9)


@pytest.mark.parametrize(
    ("options", "message"),
    [
        (("--stepover", "0.3", "--scallop", "0.01"), "give one of them"),
        (("--stepover", "-1"), "give a length above 0"),
        (("--picture", "map.bmp"), ".png or .svg"),
    ],
)
def test_scallop_refuses_bad_options(job_file: Path, options: tuple[str, ...], message: str) -> None:
    result = run("scallop", job_file, *options)
    assert result.exit_code == 2
    assert message in result.output


@pytest.mark.parametrize("suffix", [".png", ".svg"])
def test_scallop_draws(job_file: Path, tmp_path: Path, suffix: str) -> None:
    picture = tmp_path / f"map{suffix}"
    result = run("scallop", job_file, "--picture", picture)
    assert result.exit_code == 0, result.output
    head = picture.read_bytes()[:200]
    assert head.startswith(b"\x89PNG") or b"<svg" in head or b"<?xml" in head


def test_machines_lists_the_shipped_ones() -> None:
    names = {entry["name"] for entry in json.loads(run("machines", "--json").output)}
    assert names >= {"mill-3", "rotary-a", "rotary-b", "trunnion-ac", "trunnion-bc", "head-b-table-c"}


def test_prove_passes_our_own_program_and_refuses_a_spoilt_one(job_file: Path, tmp_path: Path) -> None:
    assert run("make", job_file, "--out", tmp_path / "out").exit_code == 0
    program = tmp_path / "out" / "test-tile.ngc"
    good = run("prove", program, "--job", job_file)
    assert good.exit_code == 0, good.output
    lines = program.read_text().splitlines()
    row = next(i for i, line in enumerate(lines) if line.startswith("(PASS 6"))
    victim = next(i for i in range(row + 40, len(lines)) if "Z" in lines[i] and lines[i][0] not in "(G")
    words = lines[victim].split()
    words = [f"Z{float(word[1:]) - 0.05:.4f}" if word[0] == "Z" else word for word in words]
    lines[victim] = " ".join(words)
    spoilt = tmp_path / "spoilt.ngc"
    spoilt.write_text("\n".join(lines) + "\n")
    bad = run("prove", spoilt, "--job", job_file)
    assert bad.exit_code == 1
    assert f"line {victim + 1}" in bad.output or f"line {victim + 2}" in bad.output


def test_prove_exits_2_when_the_file_cannot_be_used(job_file: Path, tmp_path: Path) -> None:
    assert run("prove", tmp_path / "none.ngc", "--job", job_file).exit_code == 2


def test_runs_from_another_folder(job_file: Path, tmp_path: Path) -> None:
    elsewhere = tmp_path / "elsewhere"
    elsewhere.mkdir()
    done = subprocess.run(
        [sys.executable, "-m", "anticlast.cli", "survey", str(job_file)],
        cwd=elsewhere, capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    assert "ball" in done.stdout
