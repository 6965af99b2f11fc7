"""Shared jobs for the tests, written as the job files a user would write."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest

from anticlast.records import Job

ROOT = Path(__file__).resolve().parents[1]

BASE = {
    "name": "test tile",
    "units": "mm",
    "a": 0.005,
    "extra_part": "",
    "outline": 'shape = "rectangle"\nsize = [20.0, 16.0]',
    "material": "acetal",
    "top": 6.0,
    "bottom": -12.0,
    "margin": 3.0,
    "stock_extra": "allowance = 0.3",
    "machine": "trunnion-ac",
    "part_origin": [0.0, 0.0, 30.0],
    "clearance": 5.0,
    "cutter_shape": "ball",
    "diameter": 6.0,
    "stickout": 34.0,
    "pattern": "raster",
    "direction": 90.0,
    "limit": "scallop = 0.01",
    "spindle": 16000,
    "feed": 1500,
    "tilt": "",
    "tolerance": 0.004,
    "way": "both",
}

TEMPLATE = """\
[job]
name = "{name}"
units = "{units}"
[part]
a = {a}
{extra_part}
[part.outline]
{outline}
[stock]
material = "{material}"
top = {top}
bottom = {bottom}
margin = {margin}
{stock_extra}
[machine]
file = "{machine}"
part_origin = {part_origin}
clearance = {clearance}
[[cutter]]
number = 1
shape = "{cutter_shape}"
diameter = {diameter}
flutes = 2
flute_length = 18.0
shank_diameter = {diameter}
stickout = {stickout}
holder = [[16.0, 20.0], [32.0, 25.0]]
[[operation]]
does = "finish"
cutter = 1
pattern = "{pattern}"
direction = {direction}
{limit}
spindle = {spindle}
feed = {feed}
{tilt}
tolerance = {tolerance}
way = "{way}"
"""

JobMaker = Callable[..., Job]


def job_text(**changes: object) -> str:
    """Return the text of a small job, with the given fields of ``BASE`` changed."""
    unknown = set(changes) - set(BASE)
    assert not unknown, f"no such field: {unknown}"
    return TEMPLATE.format(**{**BASE, **changes})


@pytest.fixture
def make_job(tmp_path: Path) -> JobMaker:
    """Load a small job with some fields changed."""
    from anticlast.job import load_job

    def build(**changes: object) -> Job:
        path = tmp_path / "job.toml"
        path.write_text(job_text(**changes), encoding="utf-8")
        return load_job(path)

    return build
