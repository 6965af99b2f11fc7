"""Machine files: faults located and worded as pinned, shipped machines as promised, posts found."""

from __future__ import annotations

import json
import math
import os
import shutil
import subprocess
import sys
import tomllib
from pathlib import Path
from typing import Any

import pytest

from anticlast.errors import BadInput
from anticlast.machine.definition import (
    list_machines,
    load_machine,
    machine_json,
    machine_lines,
    shipped_names,
)
from anticlast.machine.file_tables import machine_from
from anticlast.records import Machine
from anticlast.toml_lines import parse_source

ROOT = Path(__file__).resolve().parents[1]
BAD = Path(__file__).parent / "bad_files"
GOOD = (BAD / "good_machine.toml").read_text(encoding="utf-8")
CASES = tomllib.loads((BAD / "machine_cases.toml").read_text(encoding="utf-8"))["case"]


def parse(text: str) -> Machine:
    return machine_from(parse_source(text, "machine.toml"), "machine", Path("machine.toml"))


def changed(text: str, *changes: tuple[str, str]) -> str:
    for old, new in changes:
        assert old in text, f"the good file does not hold {old!r}"
        text = text.replace(old, new)
    return text


def faults_of(call: Any) -> list[str]:
    with pytest.raises(BadInput) as caught:
        call()
    return [f"{fault.line}: {fault.key}: {fault.message}" for fault in caught.value.faults]


# ------------------------------------------------------------------------------------------ bad files


@pytest.mark.parametrize("case", CASES, ids=lambda case: case["name"])
def test_every_fault_is_told_at_once_with_its_place(case: dict[str, Any]) -> None:
    text = GOOD
    for old, new in case["change"]:
        assert old in text, f"the good file does not hold {old!r}"
        text = text.replace(old, new, 4 if case["name"] == "no axes" else 1)
    assert faults_of(lambda: parse(text)) == case["faults"]


def test_names_that_mean_nothing(tmp_path: Path) -> None:
    names = "head-b-table-c, mill-3, rotary-a, rotary-b, trunnion-ac, trunnion-bc"
    assert faults_of(lambda: load_machine("rotery-a")) == [
        f"0: : no machine of that name; needs one of {names}, or the path of a machine file; "
        'nearest is "rotary-a"'
    ]
    assert faults_of(lambda: load_machine("a b")) == [
        f"0: : needs a machine name ({names}) or the path of a .toml or .py file"
    ]
    assert faults_of(lambda: load_machine("none.toml", tmp_path)) == ["0: : no such file"]
    assert faults_of(lambda: load_machine("none.py", tmp_path)) == ["0: : no such file"]
    (tmp_path / "folder.toml").mkdir()
    assert faults_of(lambda: load_machine("folder.toml", tmp_path)) == ["0: : is a folder; needs a file"]


# ------------------------------------------------------------------------------------------ good files

# What each shipped file must say: (linear limits of X, Y, Z), rotary (letter, carries, limits), pivot length.
SHIPPED: dict[str, tuple[Any, Any, float]] = {
    "mill-3": (((-100, 100), (-75, 75), (0, 260)), (), 0),
    "rotary-a": (((-100, 100), (-75, 75), (0, 260)), (("A", "work", (-110, 110)),), 0),
    "rotary-b": (((-100, 100), (-75, 75), (0, 260)), (("B", "work", (-110, 110)),), 0),
    "trunnion-ac": (((-75, 75), (-75, 75), (0, 260)), (("A", "work", (-120, 30)), ("C", "work", None)), 0),
    "trunnion-bc": (((-75, 75), (-75, 75), (0, 260)), (("B", "work", (-30, 120)), ("C", "work", None)), 0),
    "head-b-table-c": (
        ((-150, 150), (-75, 75), (0, 300)),
        (("B", "cutter", (-95, 95)), ("C", "work", None)),
        40,
    ),
}
DIRECTION = {"A": (1, 0, 0), "B": (0, 1, 0), "C": (0, 0, 1)}


@pytest.mark.parametrize("name", SHIPPED)
def test_shipped_machines(name: str) -> None:
    linear, rotary, pivot = SHIPPED[name]
    machine = load_machine(name)
    assert machine.name == name
    assert machine.letters == ("X", "Y", "Z", *(letter for letter, _, _ in rotary))
    assert tuple(axis.limits for axis in machine.linear) == linear
    assert tuple((axis.letter, axis.carries, axis.limits) for axis in machine.rotary) == rotary
    assert machine.pivot_length_mm == pivot
    for axis in machine.rotary:
        assert axis.direction == DIRECTION[axis.letter]
        assert (
            axis.turns == {"work": -1, "cutter": 1}[axis.carries or ""]
        )  # ISO 841: the word tells the cutter's motion
    text = machine.source.read_text(encoding="utf-8")
    assert "Check every one of them against\n# the manual of your own machine" in text


def test_there_are_no_other_shipped_machines() -> None:
    assert set(shipped_names()) == set(SHIPPED)
    assert [machine.name for machine in list_machines()] == sorted(SHIPPED)


def test_good_file_and_defaults() -> None:
    short = changed(
        GOOD[: GOOD.index("[control]")], ("turns = -1\n", ""), ("through = [0.0, 0.0, 0.0]\n", "")
    )
    short = changed(short, ('units = "mm"\npivot_length = 0.0\n', ""), ("limits = [-120.0, 30.0]\n", ""))
    machine = parse(changed(short, ("direction = [1.0, 0.0, 0.0]", "direction = [3, 0, 4]")))
    axis = machine.rotary[0]
    assert (axis.turns, axis.through, axis.limits) == (-1, (0.0, 0.0, 0.0), None)
    assert axis.direction == pytest.approx((0.6, 0.0, 0.8))
    assert (machine.units, machine.pivot_length_mm) == ("mm", 0.0)
    control = machine.control
    assert (control.feed_mode, control.path_mode, control.program_end) == ("inverse", "G64", "M2")
    assert (control.length_decimals, control.angle_decimals, control.feed_decimals) == (4, 4, 3)
    assert (control.block_rate, control.line_numbers) == (0.0, False)
    cutter = parse(changed(short, ('carries = "work"', 'carries = "cutter"')))
    assert cutter.rotary[0].turns == 1


def test_linear_axes_come_first_and_rotary_axes_keep_their_order() -> None:
    blocks = GOOD.split("[[axis]]")
    c_axis = (
        blocks[4].split("[spindle]")[0].replace('"A"', '"C"').replace("[1.0, 0.0, 0.0]", "[0.0, 0.0, 1.0]")
    )
    tail = "\n[spindle]" + blocks[4].split("[spindle]")[1]
    a_axis = blocks[4].split("[spindle]")[0]
    text = "[[axis]]".join([blocks[0], c_axis, blocks[3], blocks[1], a_axis, blocks[2]]) + tail
    assert parse(text).letters == ("X", "Y", "Z", "C", "A")


def test_inch_file_is_the_same_machine() -> None:
    text = changed(
        GOOD,
        ('units = "mm"', 'units = "inch"'),
        ("pivot_length = 0.0", "pivot_length = 2.0"),
        ("limits = [-75.0, 75.0]", "limits = [-3, 3]"),
        ("limits = [0.0, 260.0]", "limits = [0, 10]"),
        ("rapid = 3000.0", "rapid = 100"),
        ("feed = 2000.0", "feed = 50"),
        ("acceleration = 400.0", "acceleration = 20"),
        ("jerk = 8000.0", "jerk = 400"),
        ("through = [0.0, 0.0, 0.0]", "through = [0, 1, 2]"),
    )
    machine = parse(text)
    x, z, a = machine.axes[0], machine.axes[2], machine.axes[3]
    assert machine.pivot_length_mm == pytest.approx(50.8)
    assert x.limits == pytest.approx((-76.2, 76.2))
    assert z.limits == pytest.approx((0.0, 254.0))
    assert (x.rapid, x.feed, x.acceleration, x.jerk) == pytest.approx((2540.0, 1270.0, 508.0, 10160.0))
    assert a.through == pytest.approx((0.0, 25.4, 50.8))
    assert (a.rapid, a.feed, a.acceleration, a.jerk, a.limits) == (
        3600.0,
        3600.0,
        1500.0,
        30000.0,
        (-120.0, 30.0),
    )


def test_path_starts_from_the_folder_given(tmp_path: Path) -> None:
    (tmp_path / "mills").mkdir()
    (tmp_path / "mills" / "Mine.toml").write_text(GOOD, encoding="utf-8")
    machine = load_machine("mills/Mine.toml", tmp_path)
    assert (machine.name, machine.source) == ("Mine", tmp_path / "mills" / "Mine.toml")
    assert load_machine(str(tmp_path / "mills" / "Mine.toml"), Path("elsewhere")) == machine


def test_listing() -> None:
    for machine in list_machines():
        again = json.loads(json.dumps(machine_json(machine), allow_nan=False))
        assert again["name"] == machine.name
        assert [axis["letter"] for axis in again["axes"]] == list(machine.letters)
        lines = machine_lines(machine)
        assert lines[0] == f"{machine.name}: {machine.title}"
        assert all(len(line) <= 300 and line.isprintable() for line in lines)
    assert machine_lines(load_machine("head-b-table-c"))[1:4] == [
        "  linear axes (gauge point): X -150 to 150 mm, Y -75 to 75 mm, Z 0 to 300 mm",
        "  rotary axes: B -95 to 95 deg (carries the cutter), C endless (carries the work)",
        "  spindle: 2000 to 24000 rev/min, 0.35 kW",
    ]


# ------------------------------------------------------------------------------------------ where posts are


def test_post_folder_of_a_wheel(tmp_path: Path) -> None:
    """A wheel holds post/ as pyproject.toml says; nothing else of the checkout is near."""
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
    target = project["tool"]["hatch"]["build"]["targets"]["wheel"]["force-include"]["post"]
    ignore = shutil.ignore_patterns("__pycache__")
    shutil.copytree(ROOT / "src" / "anticlast", tmp_path / "site" / "anticlast", ignore=ignore)
    shutil.copytree(ROOT / "post", tmp_path / "site" / target)
    code = "from anticlast.machine.definition import *; print(post_folder()); print(*shipped_names())"
    found = subprocess.run(
        [sys.executable, "-c", code],
        cwd=tmp_path,
        env={**os.environ, "PYTHONPATH": str(tmp_path / "site"), "PYTHONDONTWRITEBYTECODE": "1"},
        capture_output=True,
        text=True,
        check=True,
    ).stdout.splitlines()
    assert Path(found[0]).resolve() == (tmp_path / "site" / target).resolve()
    assert found[1].split() == sorted(SHIPPED)


# ------------------------------------------------------------------------------------------ Python posts

POST = """\
import tomllib

TABLES = tomllib.loads('''{text}''')


def machine():
    {change}
    return TABLES


def write(*_):
    return "ours"
"""


def write_post(folder: Path, change: str = "pass") -> Path:
    path = folder / "shop_post.py"
    path.write_text(POST.format(text=GOOD, change=change), encoding="utf-8")
    return path


def test_python_post_by_path(tmp_path: Path) -> None:
    path = write_post(tmp_path)
    machine = load_machine("shop_post.py", tmp_path)
    assert (machine.name, machine.source) == ("shop_post", path)
    assert machine.axes == parse(GOOD).axes


def test_python_post_may_return_the_record(tmp_path: Path) -> None:
    path = tmp_path / "copied.py"
    path.write_text(
        "from dataclasses import replace\nfrom anticlast.machine.definition import load_machine\n"
        "def machine():\n    return replace(load_machine('mill-3'), name='twin')\n",
        encoding="utf-8",
    )
    machine = load_machine(str(path))
    assert (machine.name, machine.source, machine.axes) == ("twin", path, load_machine("mill-3").axes)


NO_MODULE = "the post raised ModuleNotFoundError: No module named 'no_such_module'"
NO_FUNCTION = "1: machine: missing; needs a function machine() that returns the machine's tables"
BAD_POSTS = {
    "x = 1\n": NO_FUNCTION,
    "machine = 3\n": NO_FUNCTION,
    "\ndef machine():\n    return 7\n": (
        "2: machine: found 7; machine() needs to return the machine's tables or a records.Machine"
    ),
    "def machine():\n\n    return 1 / 0\n": "3: : the post raised ZeroDivisionError: division by zero",
    "\n\nimport no_such_module\n": f"3: : {NO_MODULE}",
    "def helper():\n    raise OSError('disk')\n\ndef machine():\n    return helper()\n": (
        "2: : the post raised OSError: disk"
    ),
    "raise SystemExit('stop')\n": "1: : the post raised SystemExit: stop",
    "def machine(:\n": "1: : not valid Python: invalid syntax",
    "def machine(units):\n    return {}\n": (
        "0: : the post raised TypeError: machine() missing 1 required positional argument: 'units'"
    ),
}


@pytest.mark.parametrize("code", BAD_POSTS)
def test_what_goes_wrong_in_a_python_post_is_a_fault(code: str, tmp_path: Path) -> None:
    (tmp_path / "bad.py").write_text(code, encoding="utf-8")
    assert faults_of(lambda: load_machine("bad.py", tmp_path)) == [BAD_POSTS[code]]


def test_bad_tables_of_a_python_post_stand_at_its_function(tmp_path: Path) -> None:
    path = write_post(tmp_path, "TABLES['axis'][2]['rapid'] = float('nan'); del TABLES['spindle']['max']")
    line = path.read_text(encoding="utf-8").split("\n").index("def machine():") + 1
    assert faults_of(lambda: load_machine(str(path))) == [
        f"{line}: axis[3].rapid: found nan; needs a number above 0 and at most 200000 mm/min",
        f"{line}: spindle.max: missing; needs a number from 1 to 200000 rev/min",
    ]


def test_installed_post(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    write_post(tmp_path)
    info = tmp_path / "shop_post-1.0.dist-info"
    info.mkdir()
    (info / "METADATA").write_text("Metadata-Version: 2.1\nName: shop-post\nVersion: 1.0\n", encoding="utf-8")
    (info / "entry_points.txt").write_text(
        "[anticlast.posts]\nshop-mill = shop_post\nbroken = no_such_module\n", encoding="utf-8"
    )
    monkeypatch.syspath_prepend(tmp_path)
    machine = load_machine("shop-mill")
    assert (machine.name, machine.source) == ("shop-mill", tmp_path / "shop_post.py")
    assert faults_of(lambda: load_machine("broken")) == [f"0: : {NO_MODULE}"]
    assert 'nearest is "shop-mill"' in faults_of(lambda: load_machine("shop-mil"))[0]
    assert faults_of(list_machines) == [f"0: : {NO_MODULE}"]


def test_directions_are_unit_vectors() -> None:
    for machine in list_machines():
        for axis in machine.axes:
            assert math.hypot(*axis.direction) == pytest.approx(1.0)
