"""Job files: every fault located and worded as pinned, good files loaded right, whatever their units."""

from __future__ import annotations

import dataclasses
import math
import time
import tomllib
from pathlib import Path
from typing import Any

import ezdxf
import numpy as np
import pytest
import shapely
import toml_rs
from hypothesis import given, settings
from hypothesis import strategies as st

from anticlast import job_schema, materials
from anticlast.errors import BadInput
from anticlast.file_schema import FileTable
from anticlast.job import load_job, parse_job
from anticlast.job_checks import slug_of, surface_range
from anticlast.job_schema import OUTLINE_KEYS
from anticlast.outline import polygon, rectangle
from anticlast.records import Job
from anticlast.toml_lines import dotted, line_map, parse_source

ROOT = Path(__file__).resolve().parents[1]
BAD = Path(__file__).parent / "bad_files"
GOOD = (BAD / "good_job.toml").read_text(encoding="utf-8")
CASES = tomllib.loads((BAD / "job_cases.toml").read_text(encoding="utf-8"))["case"]

MICROMETRE = 1e-3
ROUND_OFF = 1e-9  # of converting a value from inch to mm and back, relative


def changed(text: str, *changes: tuple[str, str]) -> str:
    for old, new in changes:
        assert old in text, f"the good file does not hold {old!r}"
        text = text.replace(old, new, 1)
    return text


def faults_of(text: str, path: str | Path = "job.toml") -> list[str]:
    with pytest.raises(BadInput) as caught:
        parse_job(text, path)
    return [f"{fault.line}: {fault.key}: {fault.message}" for fault in caught.value.faults]


# ------------------------------------------------------------------------------------------ bad files


@pytest.mark.parametrize("case", CASES, ids=lambda case: case["name"])
def test_every_fault_is_told_at_once_with_its_place(case: dict[str, Any]) -> None:
    assert faults_of(changed(GOOD, *case["change"])) == case["faults"]


def test_there_are_many_cases_and_some_with_many_faults() -> None:
    assert len(CASES) >= 60
    assert sum(len(case["faults"]) > 1 for case in CASES) >= 10
    assert len({case["name"] for case in CASES}) == len(CASES)


def test_a_fault_reads_file_line_key_message() -> None:
    with pytest.raises(BadInput) as caught:
        parse_job(changed(GOOD, ("diameter = 6.0\nflutes", "diametr = 6.0\nflutes")), "shop/job.toml")
    assert str(caught.value).splitlines() == [
        "shop/job.toml:28: cutter[1].diameter: missing; needs a number from 0.01 to 100 mm",
        'shop/job.toml:31: cutter[1].diametr: unknown key; nearest valid key is "diameter"',
    ]


def test_faults_of_the_machine_file_come_with_those_of_the_job(tmp_path: Path) -> None:
    (tmp_path / "mill.toml").write_text(
        (BAD / "good_machine.toml").read_text(encoding="utf-8").replace('"G64"', '"G0"'), encoding="utf-8"
    )
    text = changed(GOOD, ('"trunnion-ac"', '"mill.toml"'), ("a = 0.004", "a = -1"))
    with pytest.raises(BadInput) as caught:
        parse_job(text, tmp_path / "job.toml")
    assert [(Path(fault.file).name, fault.line, fault.key) for fault in caught.value.faults] == [
        ("job.toml", 6, "part.a"),
        ("mill.toml", 53, "control.path_mode"),
    ]


# ------------------------------------------------------------------------------------------ reading


def test_files_that_cannot_be_read(tmp_path: Path) -> None:
    missing, latin = tmp_path / "none.toml", tmp_path / "latin.toml"
    latin.write_bytes(b"[job]\nname = 'Stra\xdfe'\n")
    expected = {
        missing: (0, "no such file"),
        tmp_path: (0, "is a folder; needs a file"),
        latin: (2, "not UTF-8: found byte 0xDF; save the file as plain UTF-8 text"),
        Path("a\0b.toml"): (0, "cannot be the name of a file"),
    }
    for path, (line, message) in expected.items():
        with pytest.raises(BadInput) as caught:
            load_job(path)
        (fault,) = caught.value.faults
        assert (fault.file, fault.line, fault.key, fault.message) == (str(path), line, "", message)


def test_windows_line_ends_and_byte_order_mark_change_nothing(tmp_path: Path) -> None:
    path = tmp_path / "job.toml"
    path.write_bytes(b"\xef\xbb\xbf" + GOOD.replace("\n", "\r\n").encode())
    assert load_job(path) == parse_job(GOOD, path)


# ------------------------------------------------------------------------------------------ lines of keys

NASTY = '''\
top = 1 # [not.a.table]
"quoted key".'and literal'.bare-1 = "a # in text ] } ,"
text = """
[not] = "a table"
escaped \\""" quote "" done""""
literal = \'\'\'
'x' = 1
\'\'\'
[ "a.b" . c ]
list = [ # comment ]
  1, [2,
  3], { deep = [
    4 ], "x" = "]" },
]
[[tool]]
name = 'one'
[tool.part.sub]
x.y.z = { a = 1, b.c = 2 }
[[tool]]
[[tool.step]]
n = 1
[[tool.step]]

n = 1979-05-27 07:32:00
[late]
empty = []
[late.er]
e = 1
'''


def oracle_lines(node: Any, path: tuple[str | int, ...]) -> dict[tuple[str | int, ...], int]:
    """Key and item lines by toml-rs, another parser: leaves and items of lists."""
    found: dict[tuple[str | int, ...], int] = {}

    def first(line: int | tuple[int, int]) -> int:
        return line if isinstance(line, int) else line[0]

    def walk(item: Any, at: tuple[str | int, ...]) -> None:
        if not isinstance(item, dict):
            return
        value = item.get("value") if "value_raw" in item or "key_raw" in item else item
        if "key_line" in item:
            found[at] = first(item["key_line"])
        elif "value_line" in item:
            found[at] = first(item["value_line"])
        if isinstance(value, list):
            for position, part in enumerate(value):
                walk(part, (*at, position))
        elif isinstance(value, dict):
            for key, part in value.items():
                walk(part, (*at, key))

    walk(node, path)
    return found


GOOD_TEXTS = [
    BAD / "good_job.toml",
    BAD / "good_machine.toml",
    *sorted((ROOT / "post").glob("*.toml")),
    *sorted((ROOT / "samples").glob("*/job.toml")),
]


@pytest.mark.parametrize("text", [NASTY, *(path.read_text(encoding="utf-8") for path in GOOD_TEXTS)])
def test_lines_agree_with_another_parser(text: str, tmp_path: Path) -> None:
    path = tmp_path / "x.toml"
    path.write_text(text, encoding="utf-8", newline="\n")
    with path.open("rb") as stream:
        oracle = oracle_lines(toml_rs.load_with_metadata(stream).meta["nodes"], ())
    ours = line_map(text)
    assert len(oracle) >= 20
    assert {key: ours.get(key) for key in oracle} == oracle


def test_every_place_of_the_data_has_a_line() -> None:
    lines = line_map(NASTY)

    def walk(value: Any, at: tuple[str | int, ...]) -> None:
        assert at in lines
        items = (
            value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else ()
        )
        for key, part in items:
            walk(part, (*at, key))

    walk(tomllib.loads(NASTY), ())
    assert lines["late", "er"] == 27
    assert lines["tool", 1, "step", 1] == 22


def test_dotted_keys_count_from_one() -> None:
    assert dotted(("cutter", 0, "holder", 1, 0)) == "cutter[1].holder[2][1]"
    assert dotted(("a b", "")) == '"a b".""'


# ------------------------------------------------------------------------------------------ good files


def test_good_file_in_mm_and_radians() -> None:
    job = parse_job(GOOD, "shop/job.toml")
    assert (job.name, job.slug, job.units, job.source) == (
        "canopy tile",
        "canopy-tile",
        "mm",
        Path("shop/job.toml"),
    )
    assert (job.part.a_per_mm, job.part.b_per_mm, job.part.rotate_rad) == (0.004, 0.005, 0.0)
    assert job.part.outline.bounds == pytest.approx((-45, -45, 45, 45), abs=MICROMETRE)
    assert job.part.outline.area_mm2 == pytest.approx(8100 - (4 - math.pi) * 16, abs=0.1)
    assert job.stock.outline.bounds == pytest.approx((-48, -48, 48, 48), abs=MICROMETRE)
    assert (job.stock.material, job.stock.top_mm, job.stock.bottom_mm) == ("tooling board", 16.0, -30.0)
    assert (job.stock.allowance_mm, job.clearance_mm, job.part_origin_mm) == (0.3, 5.0, (0.0, 0.0, 55.0))
    assert job.machine.name == "trunnion-ac"
    ball, bull = job.cutters
    assert (ball.number, ball.shape, ball.radius_mm, ball.corner_radius_mm, ball.flutes) == (
        1,
        "ball",
        3.0,
        3.0,
        2,
    )
    assert (ball.flute_length_mm, ball.shank_radius_mm, ball.stickout_mm) == (18.0, 3.0, 30.0)
    assert ball.holder == ((8.0, 20.0), (16.0, 25.0))
    assert (bull.radius_mm, bull.corner_radius_mm, bull.flutes, bull.shank_radius_mm) == (5.0, 2.0, 2, 5.0)
    assert bull.holder == ()
    (operation,) = job.operations
    assert dataclasses.asdict(operation) == {
        "index": 1,
        "does": "finish",
        "cutter": dataclasses.asdict(ball),
        "pattern": "raster",
        "direction_rad": pytest.approx(math.pi / 2),
        "scallop_mm": 0.005,
        "stepover_mm": None,
        "allowance_mm": 0.0,
        "spindle_rpm": 18000.0,
        "feed_mm_min": 1500.0,
        "lead_rad": pytest.approx(math.pi / 12),
        "lean_rad": 0.0,
        "fixed_axis": None,
        "tolerance_mm": 0.002,
        "way": "both",
        "lead_margin_rad": pytest.approx(math.radians(0.05)),
        "depth_of_cut_mm": None,
        "width_of_cut_mm": None,
        "slotting": False,
        "reach_mm": None,
        "depth_mm": None,
        "tabs": 4,
        "tab_width_mm": None,
        "tab_height_mm": 1.0,
        "skin_mm": 0.0,
        "arcs": False,
    }


SPARSE = """\
[job]
name = "Sparse: über 2"
[part]
a = 0.01
outline = { shape = "circle", diameter = 20 }
[stock]
material = "Tooling_Board"
top = 3
bottom = -5
[machine]
file = "mill-3"
[[cutter]]
number = 7
shape = "ball"
diameter = 4
flute_length = 10
stickout = 20
[[operation]]
does = "finish"
cutter = 7
scallop = 0.01
spindle = 9000
feed = 600
"""


def test_defaults() -> None:
    job = parse_job(SPARSE, "job.toml")
    assert (job.slug, job.units) == ("sparse-uber-2", "mm")
    assert (job.part.b_per_mm, job.part.rotate_rad) == (0.01, 0.0)
    assert job.stock.outline.area_mm2 == job.part.outline.area_mm2
    assert (job.stock.material, job.stock.allowance_mm) == ("tooling board", None)
    assert (job.part_origin_mm, job.clearance_mm) == ((0.0, 0.0, 0.0), 5.0)
    (cutter,) = job.cutters
    assert (cutter.flutes, cutter.shank_radius_mm, cutter.holder) == (2, 2.0, ())
    (operation,) = job.operations
    assert (operation.pattern, operation.direction_rad, operation.allowance_mm) == ("raster", 0.0, 0.0)
    assert (operation.lead_rad, operation.lean_rad, operation.fixed_axis) == (0.0, 0.0, None)
    assert (operation.tolerance_mm, operation.way) == (0.002, "both")


SPEEDS = "spindle = 9000\nfeed = 600\n"
STEP = f"{SPEEDS}scallop = 0.02\n"


def test_every_operation_of_the_contract_is_taken() -> None:
    more = SPARSE + '[[cutter]]\nnumber = 8\nshape = "flat"\ndiameter = 6\nflute_length = 10\nstickout = 20\n'
    for does, cutter, pattern in (
        ("rough", 8, "layers"),
        ("semi-finish", 7, "even"),
        ("finish", 7, "graded"),
        ("finish", 8, "matched"),
    ):
        more += f'[[operation]]\ndoes = "{does}"\ncutter = {cutter}\npattern = "{pattern}"\n{STEP}'
    more += f'[[operation]]\ndoes = "rough"\ncutter = 8\n{SPEEDS}'
    operations = parse_job(more, "job.toml").operations
    assert [operation.index for operation in operations] == [1, 2, 3, 4, 5, 6]
    assert [operation.pattern for operation in operations] == [
        "raster",
        "layers",
        "even",
        "graded",
        "matched",
        "layers",
    ]


HOLE = "holes = [[[6, 2], [8, 2], [8, 4]]]"
OUTLINES = {
    'shape = "circle"\ndiameter = 20\ncenter = [1, 2]': (math.pi * 100, (-9, -8, 11, 12)),
    'shape = "slot"\nsize = [30, 10]': (200 + math.pi * 25, (-15, -5, 15, 5)),
    'shape = "slot"\nsize = [8, 12]': (32 + math.pi * 16, (-4, -6, 4, 6)),
    f'shape = "polygon"\npoints = [[0, 0], [10, 0], [10, 10]]\n{HOLE}\ncenter = [1, 0]': (
        48.0,
        (1, 0, 11, 10),
    ),
    'shape = "file"\npath = "drawn/tile.svg"': (200.0, (-10, -5, 10, 5)),
}


@pytest.mark.parametrize("keys", OUTLINES)
def test_outline_shapes(keys: str, tmp_path: Path) -> None:
    (tmp_path / "drawn").mkdir()
    (tmp_path / "drawn" / "tile.svg").write_text(
        '<svg xmlns="http://www.w3.org/2000/svg" width="40mm" height="40mm" viewBox="0 0 40 40">'
        '<rect x="3" y="4" width="20" height="10"/></svg>',
        encoding="utf-8",
    )
    text = changed(SPARSE, ('outline = { shape = "circle", diameter = 20 }', f"[part.outline]\n{keys}"))
    outline = parse_job(text, tmp_path / "job.toml").part.outline
    area, bounds = OUTLINES[keys]
    assert outline.area_mm2 == pytest.approx(area, rel=1e-3)
    assert outline.bounds == pytest.approx(bounds, abs=2 * MICROMETRE)


def test_every_outline_key_belongs_to_a_shape() -> None:
    used = {key for needed, optional in OUTLINE_KEYS.values() for key in (*needed, *optional)}
    assert used == set(job_schema.OutlineTable.model_fields) - {"shape"}


def test_blank_with_its_own_outline() -> None:
    own = '[stock.outline]\nshape = "rectangle"\nsize = [30, 24]\ncenter = [2, 0]\n[machine]\n'
    job = parse_job(changed(SPARSE, ("[machine]\n", own)), "job.toml")
    assert job.stock.outline.bounds == (-13.0, -12.0, 17.0, 12.0)


def test_margin_keeps_corners_sharp() -> None:
    outline = (
        'outline = { shape = "circle", diameter = 20 }',
        'outline = { shape = "rectangle", size = [20, 10] }',
    )
    job = parse_job(changed(SPARSE, outline, ("top = 3", "top = 3\nmargin = 2.5")), "job.toml")
    assert shapely.equals(job.stock.outline.polygon, shapely.box(-12.5, -7.5, 12.5, 7.5))


AXES = {
    'axis = "surface"': None,
    'axis = "fixed"': (0.0, 0.0, 1.0),
    'axis = "fixed"\nfixed = [0, 3, 4]': (0.0, 0.6, 0.8),
    "fixed = [3, 0, 4]": (0.6, 0.0, 0.8),
    "axis = [0, 0.3, 0.4]": (0.0, 0.6, 0.8),
}


@pytest.mark.parametrize("keys", AXES)
def test_axis_has_three_spellings(keys: str) -> None:
    assert parse_job(SPARSE + keys, "job.toml").operations[0].fixed_axis == pytest.approx(AXES[keys])


# ------------------------------------------------------------------------------------------ inch

IN_MM = """\
[job]
name = "tile"
units = "mm"
[part]
a = 0.005
b = 0.004
rotate = 30
[part.outline]
shape = "rectangle"
size = [50.8, 38.1]
corner_radius = 2.54
center = [1.27, 0]
[stock]
material = "acetal"
top = 7.62
bottom = -12.7
margin = 2.54
allowance = 0.254
[machine]
file = "trunnion-bc"
part_origin = [0, 0, 25.4]
clearance = 5.08
[[cutter]]
number = 1
shape = "bull"
diameter = 6.35
corner_radius = 1.27
flutes = 3
flute_length = 19.05
shank_diameter = 6.35
stickout = 38.1
holder = [[15.24, 20.32], [30.48, 25.4]]
[[operation]]
does = "finish"
cutter = 1
direction = 45
scallop = 0.00508
allowance = 0.0254
cutting_speed = 150
feed_per_tooth = 0.0254
tolerance = 0.00254
[[operation]]
does = "finish"
cutter = 1
stepover = 0.254
spindle = 9000
feed = 1270
"""

IN_INCH = """\
[job]
name = "tile"
units = "inch"
[part]
a = 0.127
b = 0.1016
rotate = 30
[part.outline]
shape = "rectangle"
size = [2, 1.5]
corner_radius = 0.1
center = [0.05, 0]
[stock]
material = "acetal"
top = 0.3
bottom = -0.5
margin = 0.1
allowance = 0.01
[machine]
file = "trunnion-bc"
part_origin = [0, 0, 1]
clearance = 0.2
[[cutter]]
number = 1
shape = "bull"
diameter = 0.25
corner_radius = 0.05
flutes = 3
flute_length = 0.75
shank_diameter = 0.25
stickout = 1.5
holder = [[0.6, 0.8], [1.2, 1]]
[[operation]]
does = "finish"
cutter = 1
direction = 45
scallop = 0.0002
allowance = 0.001
cutting_speed = 150
feed_per_tooth = 0.001
tolerance = 0.0001
[[operation]]
does = "finish"
cutter = 1
stepover = 0.01
spindle = 9000
feed = 50
"""


def numbers_of(job: Job) -> list[float]:
    """Every number of a job, in the order of its records."""
    found: list[float] = []

    def walk(value: Any) -> None:
        if isinstance(value, bool) or value is None:
            return
        if isinstance(value, (int, float)):
            found.append(float(value))
        elif isinstance(value, (tuple, list)):
            for item in value:
                walk(item)
        elif hasattr(value, "polygon"):
            found.extend(shapely.get_coordinates(value.polygon).ravel().tolist())
        elif dataclasses.is_dataclass(value):
            for item in dataclasses.fields(value):
                walk(getattr(value, item.name))

    walk(job)
    return found


def test_inch_job_is_the_same_job() -> None:
    metric, imperial = parse_job(IN_MM, "job.toml"), parse_job(IN_INCH, "job.toml")
    assert (metric.units, imperial.units) == ("mm", "inch")
    assert metric.part.rotate_rad == pytest.approx(math.pi / 6)
    ours, theirs = numbers_of(metric), numbers_of(imperial)
    assert len(ours) > 100
    assert theirs == pytest.approx(ours, rel=ROUND_OFF, abs=ROUND_OFF)


def test_range_typed_as_printed_is_taken_in_inch() -> None:
    for printed, tolerance_mm in (
        ("0.00000393701", 1e-4),
        ("0.00393701", 0.1),
    ):  # the latter is 5e-8 over 0.1 mm
        text = changed(IN_INCH, ("tolerance = 0.0001", f"tolerance = {printed}"))
        assert parse_job(text, "job.toml").operations[0].tolerance_mm == pytest.approx(tolerance_mm, rel=1e-5)
    over = changed(IN_INCH, ("tolerance = 0.0001", "tolerance = 0.0039372"))
    assert faults_of(over) == [
        "41: operation[1].tolerance: found 0.0039372; needs a number from 0.00000393701 to 0.00393701 inch"
    ]


def test_drawing_without_units_is_in_those_of_the_job(tmp_path: Path) -> None:
    drawing = ezdxf.new(units=0)
    drawing.modelspace().add_lwpolyline([(0, 0), (2, 0), (2, 1.5), (0, 1.5)], close=True)
    drawing.saveas(tmp_path / "tile.dxf")
    keys = 'shape = "rectangle"\nsize = [2, 1.5]\ncorner_radius = 0.1\n'
    text = changed(IN_INCH, (keys, 'shape = "file"\npath = "tile.dxf"\n'))
    outline = parse_job(text, tmp_path / "job.toml").part.outline
    assert outline.bounds == pytest.approx((-24.13, -19.05, 26.67, 19.05), abs=MICROMETRE)


# ------------------------------------------------------------------------------------------ checks


@pytest.mark.parametrize("rotate_deg", [0.0, 17.0, 45.0, 90.0, -120.0])
def test_surface_range_is_that_of_a_dense_grid(rotate_deg: float) -> None:
    outlines = [
        rectangle((40.0, 26.0), 3.0, (5.0, -2.0)),
        polygon([[-10, -20], [30, -5], [12, 4], [25, 30]], [[[8, -4], [12, -4], [10, 0]]]),
    ]
    a, b, rotate = 0.006, 0.009, math.radians(rotate_deg)
    for outline in outlines:
        low, high = surface_range(a, b, rotate, outline)
        x0, y0, x1, y1 = outline.bounds
        x, y = np.meshgrid(np.linspace(x0, x1, 801), np.linspace(y0, y1, 801))
        inside = outline.contains(np.column_stack([x.ravel(), y.ravel()]))
        across = x.ravel()[inside] * math.cos(rotate) + y.ravel()[inside] * math.sin(rotate)
        along = -x.ravel()[inside] * math.sin(rotate) + y.ravel()[inside] * math.cos(rotate)
        z = a * across**2 - b * along**2
        assert low[2] <= z.min() + MICROMETRE
        assert high[2] >= z.max() - MICROMETRE
        assert low[2] == pytest.approx(
            z.min(), abs=0.05
        )  # the grid misses the edge by up to half its spacing
        assert high[2] == pytest.approx(z.max(), abs=0.05)


def test_surface_range_of_a_square_in_closed_form() -> None:
    low, high = surface_range(0.004, 0.004, 0.0, rectangle((90.0, 90.0)))
    assert low[2] == pytest.approx(-0.004 * 45**2)  # middle of the sides along x, where x = 0
    assert high[2] == pytest.approx(0.004 * 45**2)


def test_cutting_speed_at_the_effective_diameter() -> None:
    """D = 10, ap = 0.3, 120 m/min: 11 196 rev/min by the makers' handbook form D_e = 2 sqrt(ap (D - ap))."""
    text = changed(
        SPARSE,
        ("diameter = 4\n", "diameter = 10\n"),
        ("spindle = 9000", "cutting_speed = 120"),
        ("feed = 600", "feed_per_tooth = 0.05"),
        ("top = 3", "top = 3\nallowance = 0.3"),
    )
    (operation,) = parse_job(text, "job.toml").operations
    assert operation.spindle_rpm == pytest.approx(11195.8, abs=0.1)
    assert operation.feed_mm_min == pytest.approx(0.05 * 2 * 11195.8, abs=0.1)


def test_cutting_speed_knows_tilt_and_what_the_operation_before_leaves() -> None:
    """D = 6, ap = 0.2: at 15 degrees D_e = 3.530055, at 30 degrees 4.665476.

    Derived: D_e = D sin(tilt + acos(1 - 2 ap / D)).
    """
    first = changed(
        SPARSE,
        ("diameter = 4\n", "diameter = 6\n"),
        ('"mill-3"', '"trunnion-ac"\npart_origin = [0, 0, 40]'),
        ("top = 3", "top = 3\nallowance = 0.4"),
        ("spindle = 9000", "cutting_speed = 150\nlead = 15\nallowance = 0.2"),
    )
    second = changed(first[first.index("[[operation]]") :], ("lead = 15\nallowance = 0.2", "lean = -30"))
    for operation, diameter_mm in zip(
        parse_job(first + second, "job.toml").operations, (3.530055, 4.665476), strict=True
    ):
        assert operation.spindle_rpm == pytest.approx(150e3 / (math.pi * diameter_mm), rel=1e-6)


def test_cutting_speed_is_held_against_the_machine_at_the_depth_of_each_operation() -> None:
    """D = 4, mill-3 to 24000 rev/min: ap 0.4 allows 181 m/min, ap 0.1 only 94; D_e = 2 sqrt(ap (D - ap))."""
    first = changed(
        SPARSE,
        ("top = 3", "top = 3\nallowance = 0.5"),
        ("spindle = 9000", "cutting_speed = 150\nallowance = 0.1"),
    )
    second = changed(first[first.index("[[operation]]") :], ("allowance = 0.1", "allowance = 0"))
    assert faults_of(first + second) == [
        "30: operation[2].cutting_speed: found 150; on the effective diameter of 1.249 mm that is 38228 "
        "rev/min, but mill-3 turns from 2000 to 24000; needs from 7.848 to 94.17 m/min, or spindle"
    ]


def test_cutting_speed_without_known_depth_uses_the_scallop() -> None:
    base = changed(SPARSE, ("spindle = 9000", "cutting_speed = 20"))
    with_scallop = parse_job(base, "job.toml").operations[0].spindle_rpm
    assert with_scallop == pytest.approx(20e3 / (math.pi * 2 * math.sqrt(0.01 * 3.99)), rel=1e-9)
    same = changed(base, ("scallop = 0.01", f"stepover = {math.sqrt(8 * 2 * 0.01)}"))
    assert parse_job(same, "job.toml").operations[0].spindle_rpm == pytest.approx(with_scallop, rel=1e-9)


@pytest.mark.parametrize(
    ("name", "slug"),
    [
        ("canopy tile", "canopy-tile"),
        ("  Größe 3/B: v2.1 ", "groe-3-b-v2-1"),
        ("ÉCRAN", "ecran"),
        ("---", ""),
        ("x" * 99, "x" * 80),
    ],
)
def test_slug(name: str, slug: str) -> None:
    assert slug_of(name) == slug


# ------------------------------------------------------------------------------------------ materials


def test_cutting_forces_meet_the_published_tables() -> None:
    """Mitsubishi Materials, cutting power for face milling: brass 950 at 0.2, mild steel 1820 at 0.3 mm."""
    for name, index, feed_mm, published in (("brass", 0, 0.2, 950.0), ("mild steel", 0, 0.3, 1820.0)):
        force = materials.material(name).forces[index]
        assert force.source.startswith("Mitsubishi")
        assert force.at(feed_mm) == pytest.approx(published, rel=0.04)
    tungaloy = materials.material("brass").forces[1]
    assert tungaloy.at(0.2) == pytest.approx(877.0, rel=0.015)
    review = materials.material("6061").forces[0]
    assert review.at(0.1) == pytest.approx(243.77 + 75.3)


def test_materials_table_is_whole() -> None:
    rows = materials.table()
    names = [name.lower() for row in rows for name in (row.name, *row.aliases)]
    assert len(set(names)) == len(names)
    wanted = "aluminium 6061, brass, mild steel, stainless steel, acetal, tooling board, hard wax, beech"
    assert set(wanted.split(", ")) <= set(materials.names())
    for row in rows:
        spans = [
            row.cutting_speed_m_min,
            row.feed_per_tooth_share,
            *([row.modulus_gpa] if row.modulus_gpa else []),
        ]
        assert all(0.0 < span.low < span.high and span.source for span in spans), row.name
        assert row.cautions, row.name
        for force in row.forces:
            assert (force.kc11_n_mm2 > 0) != (force.ktc_n_mm2 > 0), row.name
            assert force.source
        assert materials.find(row.name.upper().replace(" ", "-")) is row
    assert materials.material("acetal").specific_force_n_mm2(0.1) is None
    low, high = materials.material("beech").specific_force_n_mm2(0.1) or (0.0, 0.0)
    assert (low, high) == (32.0, 37.6)
    assert materials.find("cheese") is None


# ------------------------------------------------------------------------------------------ fuzz

PIECES = [
    *"[]=\"'#\n,-{}\\\té.\u2028",
    *("", "nan", "inf", "1e999", "true", "[[cutter]]", "[part]", "9" * 30, "1979-05-27"),
    *('"""', "'''", "0x1f", "[[1,2],[3]]", "x = 1\n"),
]


def outcome(text: str) -> Job | BadInput:
    """Load a job that may be bad; anything but a job or ``BadInput`` fails the test."""
    try:
        return parse_job(text, "job.toml")
    except BadInput as error:
        return error


@settings(derandomize=True, max_examples=400, deadline=None)
@given(st.data())
def test_no_damage_to_a_file_gets_past_bad_input(data: st.DataObject) -> None:
    text = GOOD
    for _ in range(data.draw(st.integers(1, 4))):
        start = data.draw(st.integers(0, len(text)))
        end = min(len(text), start + data.draw(st.integers(0, 12)))
        piece = data.draw(st.one_of(st.sampled_from(PIECES), st.text(max_size=6)))
        text = text[:start] + piece + text[end:]
    found = outcome(text)
    if isinstance(found, Job):
        assert found.operations
        return
    rows = text.count("\n") + 1
    assert found.faults
    assert all(fault.message and 0 <= fault.line <= rows for fault in found.faults)
    assert all(letter.isprintable() for fault in found.faults for letter in fault.key + fault.message)


VALUES = st.recursive(
    st.one_of(
        st.sampled_from(
            ["nan", "-inf", "true", '""', '"ball"', "1979-05-27", "07:32:00", "-0.0", "{}", "[]", "9" * 400]
        ),
        st.integers(-(10**6), 10**6).map(str),
        st.floats(allow_nan=False, allow_infinity=False).map(repr),
    ),
    lambda inner: st.one_of(
        st.lists(inner, max_size=3).map(lambda items: f"[{', '.join(items)}]"),
        inner.map(lambda item: f"{{ x = {item} }}"),
    ),
    max_leaves=5,
)
KEY_ROWS = [index for index, row in enumerate(GOOD.split("\n")) if " = " in row and not row.endswith("[")]


@settings(derandomize=True, max_examples=400, deadline=None)
@given(st.dictionaries(st.sampled_from(KEY_ROWS), VALUES, min_size=1, max_size=4))
def test_no_value_gets_past_bad_input(values: dict[int, str]) -> None:
    rows = GOOD.split("\n")
    for index, value in values.items():
        rows[index] = f"{rows[index].split(' = ')[0]} = {value}"
    found = outcome("\n".join(rows))
    if isinstance(found, Job):
        assert all(math.isfinite(number) for number in numbers_of(found))
    else:
        assert {fault.line for fault in found.faults} <= {*range(1, len(rows) + 1)}


# ------------------------------------------------------------------------------------------ the rest


def test_loading_is_quick(tmp_path: Path) -> None:
    path = tmp_path / "job.toml"
    path.write_text(GOOD, encoding="utf-8")
    load_job(path)
    best = math.inf
    for _ in range(5):
        start = time.perf_counter()
        load_job(path)
        best = min(best, time.perf_counter() - start)
    assert best < 0.3


def test_records_are_frozen() -> None:
    job = parse_job(GOOD, "job.toml")
    with pytest.raises(dataclasses.FrozenInstanceError):
        job.cutters[0].radius_mm = 1.0  # type: ignore[misc]
    table = job_schema.JobTable(name="x")
    with pytest.raises(ValueError, match="frozen"):
        table.name = "y"
    assert issubclass(job_schema.JobTable, FileTable)


def test_source_without_faults_is_empty() -> None:
    assert parse_source(GOOD, "job.toml").faults == []
