"""The machine files are found from a wheel, an editable install and a checkout alike."""

from __future__ import annotations

import os
import subprocess
import sys
import zipfile
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
SHIPPED = {"mill-3", "rotary-a", "rotary-b", "trunnion-ac", "trunnion-bc", "head-b-table-c"}
LIST = (
    "from anticlast.machine.definition import list_machines, post_folder;"
    "print(' '.join(sorted(m.name for m in list_machines())) + '|' + str(post_folder()))"
)


def listed(python_path: Path, cwd: Path) -> tuple[set[str], Path]:
    env = {**os.environ, "PYTHONPATH": str(python_path)}
    done = subprocess.run(
        [sys.executable, "-c", LIST], capture_output=True, text=True, check=True, cwd=cwd, env=env
    )
    names, _, folder = done.stdout.strip().rpartition("\n")[2].partition("|")
    return set(names.split()), Path(folder)


@pytest.fixture(scope="module")
def wheel(tmp_path_factory: pytest.TempPathFactory) -> Path:
    out = tmp_path_factory.mktemp("wheel")
    done = subprocess.run(
        [sys.executable, "-m", "pip", "wheel", "--quiet", "--no-deps", "--wheel-dir", str(out), str(ROOT)],
        capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    return next(out.glob("*.whl"))


def test_from_a_wheel(wheel: Path, tmp_path: Path) -> None:
    unpacked = tmp_path / "site"
    with zipfile.ZipFile(wheel) as archive:
        archive.extractall(unpacked)
    names, folder = listed(unpacked, tmp_path)
    assert names >= SHIPPED
    assert folder.is_relative_to(unpacked)


def test_from_a_checkout_or_editable_install(tmp_path: Path) -> None:
    """An editable install puts ``src`` on the path, as this does."""
    names, folder = listed(ROOT / "src", tmp_path)
    assert names >= SHIPPED
    assert folder.resolve() == (ROOT / "post").resolve()


def test_the_wheel_carries_all_it_needs(wheel: Path) -> None:
    names = set(zipfile.ZipFile(wheel).namelist())
    for path in (ROOT / "src" / "anticlast").rglob("*"):
        if (
            path.is_file()
            and "__pycache__" not in path.parts
            and path.suffix != ".nbi"
            and path.suffix != ".nbc"
        ):
            assert "anticlast/" + path.relative_to(ROOT / "src" / "anticlast").as_posix() in names
