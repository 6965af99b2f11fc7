"""Nothing partial ever: stop the process at any moment and no program, or the whole old one, stands under the name."""

from __future__ import annotations

import hashlib
import subprocess
import sys
import time
from pathlib import Path

import pytest

from conftest import job_text

CIRCLE = 'shape = "circle"\ndiameter = 12.0'
MOMENTS = 24


def start(job_file: Path, out: Path) -> subprocess.Popen[bytes]:
    return subprocess.Popen(
        [sys.executable, "-m", "anticlast.cli", "make", str(job_file), "--out", str(out)],
        stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL,
    )  # fmt: skip


@pytest.mark.parametrize("old", [False, True], ids=["no program before", "an old program stands"])
def test_killed_at_many_moments(tmp_path: Path, old: bool) -> None:
    job_file, out = tmp_path / "job.toml", tmp_path / "out"
    job_file.write_text(job_text(machine="mill-3", outline=CIRCLE, limit="scallop = 0.02", tolerance=0.01))
    program = out / "test-tile.ngc"
    began = time.perf_counter()
    assert start(job_file, tmp_path / "whole").wait() == 0
    took = time.perf_counter() - began
    whole = hashlib.sha256((tmp_path / "whole" / "test-tile.ngc").read_bytes()).hexdigest()
    out.mkdir()
    before = b"%\nM2\n%\n"
    killed = 0
    for moment in range(MOMENTS):
        if old:
            program.write_bytes(before)
        else:
            program.unlink(missing_ok=True)
        process = start(job_file, out)
        try:
            process.wait(timeout=took * (moment + 1) / MOMENTS)
        except subprocess.TimeoutExpired:
            process.kill()
            process.wait()
            killed += 1
        if program.exists():
            found = program.read_bytes()
            assert hashlib.sha256(found).hexdigest() == whole or (old and found == before)
        else:
            assert not old, "the old program vanished although nothing was decided"
        for name in ("summary.json", "report.html"):
            if (out / name).exists():
                assert (out / name).stat().st_size > 500, f"{name} is half written"
    assert killed >= MOMENTS // 2, "too few runs were stopped on the way for this test to mean anything"
