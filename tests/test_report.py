"""The report page: read back as a browser would, and compared with the records it was written from."""

from __future__ import annotations

import base64
import itertools
import json
import math
import os
import re
import subprocess
import sys
import zipfile
from dataclasses import replace
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import report_fixture as fixture
from anticlast import files
from anticlast.cutter import Cutter
from anticlast.errors import CannotWrite
from anticlast.records import Finding, Made, PartMotion, Purpose
from anticlast.report import page as page_module
from anticlast.report import sections
from anticlast.report.along import UNKNOWN, along, contact, fewer_pieces, match_blocks
from anticlast.report.cutting_values import cutting_values, depth_of_cut_mm
from anticlast.report.data import FEW_ROWS, HEIGHT_STEP_MM, MOST_KNOTS, cutter_profile
from anticlast.report.drawing import round_length
from anticlast.report.numbers import Units, clock, plain
from anticlast.report.page import filled, page_text, write_page
from anticlast.report.spacing import distance_to_line, pooled
from anticlast.report.thinning import thin, thin_to
from anticlast.report.threejs import ThreeJsNotFound, three_script
from anticlast.saddle import Saddle
from anticlast.tolerances import PIECE_MM
from browser import opened

MICROMETRE = 1e-3  # mm
VOID = {"meta", "link", "input", "br", "hr", "img"}


class Reader(HTMLParser):
    """Parses a page strictly enough to notice an element left open, and keeps what the tests ask for."""

    def __init__(self) -> None:
        super().__init__(convert_charrefs=True)
        self.open: list[str] = []
        self.elements: list[tuple[str, dict[str, str | None]]] = []
        self.scripts: list[tuple[dict[str, str | None], str]] = []
        self.text: list[str] = []
        self.heading = ""

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.elements.append((tag, dict(attrs)))
        if tag == "script":
            self.scripts.append((dict(attrs), ""))
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.elements.append((tag, dict(attrs)))

    def handle_endtag(self, tag: str) -> None:
        assert self.open, f"</{tag}> closes nothing"
        assert self.open.pop() == tag, f"</{tag}> does not close what is open"

    def handle_data(self, data: str) -> None:
        if self.open and self.open[-1] == "script":
            attrs, text = self.scripts[-1]
            self.scripts[-1] = (attrs, text + data)
        elif self.open and self.open[-1] != "style":
            self.text.append(data)
            if self.open[-1] == "h1":
                self.heading += data


def read(text: str) -> Reader:
    reader = Reader()
    reader.feed(text)
    reader.close()
    assert reader.open == []
    return reader


def data_of(reader: Reader) -> dict:
    found = [text for attrs, text in reader.scripts if attrs.get("id") == "data"]
    assert len(found) == 1
    return json.loads(found[0])


def unpacked(entry: dict[str, str]) -> np.ndarray:
    return np.frombuffer(base64.b64decode(entry["b"]), dtype="<" + entry["t"])


def quantity(data: dict, key: str) -> np.ndarray:
    return unpacked(next(entry for entry in data["path"]["quantities"] if entry["key"] == key)["values"])


@pytest.fixture(scope="module")
def made() -> Made:
    return fixture.made()


@pytest.fixture(scope="module")
def reader(made: Made) -> Reader:
    return read(page_text(made))


@pytest.fixture(scope="module")
def data(reader: Reader) -> dict:
    return data_of(reader)


# ---------------------------------------------------------------------- the page as text


def test_head_says_what_the_record_says(made: Made, reader: Reader) -> None:
    said = " ".join(reader.text)
    assert reader.heading == "press mould"
    assert "RELEASED" in said
    assert "WITHHELD" not in said
    assert "every check passed, 1 warning" in said
    assert "press-mould.ngc" in said
    assert made.program_sha256[:12] in said
    assert made.job.machine.title in said


def test_page_asks_for_nothing(reader: Reader) -> None:
    policy = [a["content"] for tag, a in reader.elements if a.get("http-equiv") == "Content-Security-Policy"]
    assert len(policy) == 1
    assert policy[0].startswith("default-src 'none';")
    for tag, attrs in reader.elements:
        for name in ("src", "href", "action", "data", "poster"):
            value = attrs.get(name)
            assert value is None or value.startswith(("#", "data:")), f"<{tag} {name}={value}>"


@pytest.mark.parametrize(
    "name", ["<script>alert(1)</script>\"'&", "{{data}} {{three}}", "</title><h1>x", "\u2028<!--"]
)
def test_hostile_job_names_stay_text(name: str) -> None:
    page = read(page_text(fixture.made(20, 5, name)))
    assert page.heading == name
    assert len(page.scripts) == 3
    assert sum(tag == "h1" for tag, _ in page.elements) == 1
    assert data_of(page)["path"]["rows"] == 5 * 22 + 1


def test_hostile_findings_stay_text(made: Made) -> None:
    bad = Finding("<b>", False, 1.0, 2.0, "<i>", 0, "</table><script>")
    page = read(
        page_text(replace(made, findings=(bad,), advice=("<script>",), cautions=("</li>",), released=False))
    )
    assert len(page.scripts) == 3
    assert not [tag for tag, _ in page.elements if tag in ("b", "i") and "class" not in _]


def test_same_input_same_bytes(made: Made, tmp_path: Path) -> None:
    write_page(made, tmp_path / "one.html")
    first = (tmp_path / "one.html").read_bytes()
    here = Path(__file__).resolve().parent
    code = (
        "import sys; sys.path.insert(0, sys.argv[1]); import report_fixture; from anticlast.report.page "
        "import write_page;"
        "write_page(report_fixture.made(), sys.argv[2])"
    )
    source = str(Path(page_module.__file__).parents[2])
    environment = {**os.environ, "PYTHONHASHSEED": "7", "PYTHONPATH": source}
    subprocess.run(
        [sys.executable, "-c", code, str(here), str(tmp_path / "two.html")], check=True, env=environment
    )
    assert (tmp_path / "two.html").read_bytes() == first


def test_failed_checks_come_first(made: Made) -> None:
    found = sections.findings_of(fixture.withheld(made))
    assert [f.check for f in found] == ["scallop", "cutting speed", "gouge", "holder", "travel X"]
    text = sections.checks(fixture.withheld(made), Units(False))
    assert text.index("✗ failed") < text.index("! warning") < text.index("✓ passed")
    assert 'data-line="340"' in text


def test_withheld_says_why_and_names_no_program(made: Made) -> None:
    said = " ".join(read(page_text(fixture.withheld(made))).text)
    assert "WITHHELD" in said
    assert "RELEASED" not in said
    assert "Ask for a scallop of 10 µm" in said
    assert "A scallop of 14.8 µm is left" in said
    assert ".ngc" not in said


def test_page_of_a_job_that_could_not_be_planned(made: Made) -> None:
    page = read(page_text(fixture.not_planned(made)))
    said = " ".join(page.text)
    assert data_of(page)["path"] is None
    assert data_of(page)["map"] is None
    assert "WITHHELD" in said
    assert "Choose a ball below 62.5 mm diameter." in said
    assert "1 check failed" in said


def test_plan_is_shown_when_there_is_no_program(made: Made) -> None:
    planned = replace(
        made, released=False, program=None, program_text=None, part_motion=None, proof=None, times=None
    )
    page = read(page_text(planned))
    path = data_of(page)["path"]
    assert path["letters"] == []
    assert path["rows"] == sum(len(stretch.purpose) for stretch in made.cutter_paths[0].stretches)
    tips = np.concatenate([stretch.tip_mm for stretch in made.cutter_paths[0].stretches])
    assert np.abs(unpacked(path["tip"]).reshape(-1, 3) - tips).max() < 0.01 * MICROMETRE


def test_release_is_told_without_colour(made: Made) -> None:
    for job, sign, word in ((made, "✓", "RELEASED"), (fixture.withheld(made), "✗", "WITHHELD")):
        head = sections.head(job, Units(False))
        assert f"{sign}</span><strong>{word}</strong>" in head


def luminance(colour: str) -> float:
    """Relative luminance of #rrggbb, WCAG 2.1."""
    parts = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    linear = [part / 12.92 if part <= 0.03928 else ((part + 0.055) / 1.055) ** 2.4 for part in parts]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


@pytest.mark.parametrize("ink", ["ink", "quiet", "accent", "good", "bad", "warn"])
def test_lettering_stands_out_from_the_ground(ink: str) -> None:
    """Contrast of at least 4.5 : 1 for body text, WCAG 2.1 success criterion 1.4.3."""
    colours = dict(re.findall(r"--(\w+): (#[0-9a-f]{6});", page_module.template("style.css")))
    for ground in (colours["ground"], colours["panel"], "#fdf0ed", "#f1f3f5", "#fff7e6"):
        assert (luminance(ground) + 0.05) / (luminance(colours[ink]) + 0.05) >= 4.5


def test_written_whole_or_not_at_all(made: Made, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    target = tmp_path / "report.html"
    target.write_text("old", encoding="utf-8")

    def full(*_: object) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(files.os, "replace", full)
    with pytest.raises(CannotWrite, match="nothing under that name was changed"):
        write_page(made, target)
    assert target.read_text(encoding="utf-8") == "old"
    assert [entry.name for entry in tmp_path.iterdir()] == ["report.html"]


def test_values_are_not_searched_for_places() -> None:
    assert filled("{{a}}-{{b}}", {"a": "{{b}}", "b": "x"}) == "{{b}}-x"
    with pytest.raises(KeyError, match="c"):
        filled("{{c}}", {})


# ---------------------------------------------------------------------- data against the record


def test_path_is_the_motion_read_back(made: Made, data: dict) -> None:
    path, motion = data["path"], made.part_motion
    assert path["rows"] == path["of_rows"] == len(motion.line)
    assert path["tolerance"] == 0.0
    assert np.array_equal(unpacked(path["line"]), motion.line)
    assert np.array_equal(unpacked(path["tool"]), motion.tool)
    assert np.abs(unpacked(path["tip"]).reshape(-1, 3) - motion.tip_mm).max() < 0.01 * MICROMETRE
    assert np.abs(unpacked(path["axis"]).reshape(-1, 3) / 32767 - motion.axis).max() < 2e-5


def test_words_are_those_of_the_block(made: Made, data: dict) -> None:
    path = data["path"]
    assert path["letters"] == ["X", "Y", "Z", "A", "C"]
    words = unpacked(path["words"]).reshape(-1, 5) / 10.0 ** np.array(path["decimals"])
    assert np.abs(words[1:] - made.program.motions.end[:, [0, 1, 2, 3, 5]]).max() < 1e-9
    assert words[0].tolist() == [0.0, 0.0, 60.0, 0.0, 0.0]


def test_purpose_and_pass_come_from_the_plan(made: Made, data: dict) -> None:
    rapid = np.concatenate(([True], made.axis_paths[0].rapid))
    planned = np.concatenate(([0], made.axis_paths[0].purpose))
    expected = np.where(rapid, Purpose.RAPID, planned)
    assert np.array_equal(unpacked(data["path"]["purpose"]), expected)
    passes = quantity(data, "pass")[1:]
    numbers = made.axis_paths[0].pass_index
    assert np.array_equal(passes[numbers >= 0], numbers[numbers >= 0] + 1)
    assert np.isnan(passes[numbers < 0]).all()


def test_feed_reached_is_contact_length_over_time(made: Made, data: dict) -> None:
    """Contact of the fixture is known in closed form: the points of the pass on the surface."""
    touch = np.concatenate([stretch.contact_mm for stretch in made.cutter_paths[0].stretches])
    steps = np.linalg.norm(np.diff(touch, axis=0), axis=1)
    reached, purpose = quantity(data, "reached")[2:], unpacked(data["path"]["purpose"])[2:]
    cut = (purpose == Purpose.CUT) & (steps > 0)
    expected = 60.0 * steps / made.times.seconds[1:]
    assert cut.sum() > 4000
    assert np.abs(reached[cut] - expected[cut]).max() < 0.01  # mm/min
    slow = np.abs(made.part_motion.tip_mm[2:, 0]) > 25
    asked = quantity(data, "asked")[2:]
    assert np.allclose(asked[cut & slow] / reached[cut & slow], 2.0, rtol=1e-5)
    assert np.allclose(asked[cut & ~slow] / reached[cut & ~slow], 1 / 0.9, rtol=1e-5)
    assert np.isnan(reached[purpose == Purpose.RAPID]).all()


def test_tilt_is_the_lead_of_the_fixture(data: dict) -> None:
    tilt = quantity(data, "tilt")
    cut = unpacked(data["path"]["purpose"]) == Purpose.CUT
    assert np.abs(tilt[cut] - 15.0).max() < 1e-3  # degrees
    assert np.isnan(tilt[~cut]).all()


def test_rotary_speed_is_the_fastest_rotary_axis(made: Made, data: dict) -> None:
    turned = np.abs(made.program.motions.end - made.program.motions.start)[:, 3:].max(axis=1)
    expected = turned / made.times.seconds * 60 / 360
    assert np.allclose(quantity(data, "rotary")[1:], expected, rtol=1e-5, atol=1e-6)


def test_local_stepover_against_the_closed_form(made: Made, data: dict) -> None:
    """From (x, y) to the curve y + s on z = a x^2 - b y^2: s and its rise, less what lies along the curve.

    Derived here: the curve bends by k s^2 / 2 off its tangent over the little that the foot is shifted, far
    below 0.1 um.
    """
    touch = np.concatenate([stretch.contact_mm for stretch in made.cutter_paths[0].stretches])
    x, y = touch[1:, 0], touch[1:, 1]
    s, a, b = fixture.STEPOVER_MM, made.job.part.a_per_mm, made.job.part.b_per_mm
    rise = -b * (2 * y * s + s * s)
    slope = 2 * a * x
    expected = np.sqrt(s * s + rise**2 - (rise * slope) ** 2 / (1 + slope**2))
    found = quantity(data, "stepover")[2:]
    purpose = unpacked(data["path"]["purpose"])[2:]
    seen = np.isfinite(found) & (np.abs(x) < 28)
    assert seen.sum() > 3500
    assert (
        np.abs(found[seen] - expected[seen]).max() < 2 * MICROMETRE
    )  # the next pass is a polyline of 1 mm chords
    assert np.isnan(found[purpose != Purpose.CUT]).all()
    last = quantity(data, "pass")[2:] == 81
    assert np.isnan(found[last]).all()


def test_local_scallop_is_the_crest_beside_the_pass(made: Made, data: dict) -> None:
    """At least the highest cell within a stepover, at most the highest within three, by brute force."""
    field = made.proof.scallop_map
    crest = quantity(data, "scallop") / 1000  # mm
    tip = unpacked(data["path"]["tip"]).reshape(-1, 3)
    rows = np.flatnonzero(np.isfinite(crest))[::97]
    touch = np.concatenate([stretch.contact_mm for stretch in made.cutter_paths[0].stretches])
    grid_x, grid_y = np.meshgrid(field.x_mm, field.y_mm)
    assert len(rows) > 40
    for row in rows:
        away = np.hypot(grid_x - touch[row - 1, 0], grid_y - touch[row - 1, 1])
        assert (
            np.nanmax(field.height_mm[away <= 0.5]) - 1e-7
            <= crest[row]
            <= np.nanmax(field.height_mm[away <= 1.6]) + 1e-7
        )
    assert np.abs(tip[rows] - made.part_motion.tip_mm[rows]).max() < MICROMETRE


def test_map_keeps_the_worst_of_every_block(made: Made, data: dict) -> None:
    packed, field = data["map"], made.proof.scallop_map
    high = unpacked(packed["high"]).reshape(packed["ny"], packed["nx"])
    low = unpacked(packed["low"]).reshape(packed["ny"], packed["nx"])
    block = -(-max(field.height_mm.shape) // 460)
    assert block == 2
    assert packed["step"] == HEIGHT_STEP_MM
    for j in (0, 3, 100, packed["ny"] - 1):
        for i in (0, 5, 120, packed["nx"] - 1):
            cells = field.height_mm[j * block : (j + 1) * block, i * block : (i + 1) * block]
            if np.isnan(cells).all():
                assert high[j, i] == low[j, i] == -32768
            else:
                assert abs(high[j, i] * packed["step"] - np.nanmax(cells)) <= 0.51 * packed["step"]
                assert abs(low[j, i] * packed["step"] - np.nanmin(cells)) <= 0.51 * packed["step"]
    assert high.max() * packed["step"] == pytest.approx(np.nanmax(field.height_mm), abs=packed["step"])
    assert low[low > -32768].min() * packed["step"] == pytest.approx(-0.004, abs=packed["step"])
    assert packed["gouge"] == 0.002
    assert packed["limit"] == 0.012
    gouged = np.argwhere((low * packed["step"] < -packed["gouge"]) & (low > -32768))
    x, y = packed["x0"] + gouged[:, 1] * packed["dx"], packed["y0"] + gouged[:, 0] * packed["dy"]
    assert np.hypot(x + 20, y + 12).max() < 1.5 + packed["dx"]
    assert len(gouged) * packed["dx"] * packed["dy"] == pytest.approx(math.pi * 1.5**2, rel=0.25)


def test_surface_mesh_covers_the_outline(made: Made, data: dict) -> None:
    xy = unpacked(data["surface"]["xy"]).reshape(-1, 2).astype(float)
    corners = xy[unpacked(data["surface"]["index"]).reshape(-1, 3)]
    one, two = corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0]
    area = (one[:, 0] * two[:, 1] - one[:, 1] * two[:, 0]) / 2
    assert (area > 0).all()
    assert area.sum() == pytest.approx(made.job.part.outline.area_mm2, rel=1e-6)


def test_inch_job_is_shown_in_inch() -> None:
    made = fixture.made(20, 5, units="inch")
    page = read(page_text(made))
    packed = data_of(page)
    words = unpacked(packed["path"]["words"]).reshape(-1, 5) / 10.0 ** np.array(packed["path"]["decimals"])
    expected = made.program.motions.end[:, [0, 1, 2, 3, 5]] * np.array([1 / 25.4] * 3 + [1, 1])
    assert np.abs(words[1:] - expected).max() <= 0.5001e-5  # the fifth digit of an inch
    said = " ".join(page.text)
    assert "0.2362 in" in said
    assert "59.1 in/min" in said
    assert " mm/min" not in said
    assert packed["units"]["small_scale"] == pytest.approx(1e4 / 25.4)


def test_large_program_stays_small_and_close(tmp_path: Path) -> None:
    made = fixture.made(1320, 81)
    assert made.program.blocks > 107_000
    write_page(made, tmp_path / "report.html")
    assert (tmp_path / "report.html").stat().st_size < 10_000_000
    path = data_of(read((tmp_path / "report.html").read_text(encoding="utf-8")))["path"]
    assert FEW_ROWS < path["rows"] <= MOST_KNOTS
    assert path["of_rows"] == len(made.part_motion.line)
    assert path["tolerance"] <= 0.05
    kept = np.searchsorted(made.part_motion.line, unpacked(path["line"]))
    true = made.part_motion.tip_mm
    steps = np.linalg.norm(np.diff(true, axis=0), axis=1) + np.linalg.norm(
        np.diff(made.part_motion.axis, axis=0), axis=1
    )
    along_path = np.concatenate(([0.0], np.cumsum(steps)))
    drawn = [np.interp(along_path, along_path[kept], true[kept, k]) for k in range(3)]
    assert np.abs(np.stack(drawn, axis=1) - true).max() <= path["tolerance"] * 1.001
    assert {finding.line for finding in made.findings if finding.line} <= set(unpacked(path["line"]).tolist())


# ---------------------------------------------------------------------- parts


@settings(max_examples=40, derandomize=True, deadline=None)
@given(st.integers(0, 2**31), st.integers(2, 300), st.floats(0.01, 1.0))
def test_thinning_keeps_its_bound(seed: int, count: int, tolerance: float) -> None:
    random = np.random.default_rng(seed)
    values = np.cumsum(random.normal(0, 0.05, (count, 3)), axis=0)
    place = np.cumsum(random.choice([0.0, 0.3, 1.0], count))
    keep = random.random(count) < 0.05
    rows = thin(values, place, keep, tolerance)
    assert rows[0] == 0
    assert rows[-1] == count - 1
    assert np.isin(np.flatnonzero(keep), rows).all()
    for low, high in itertools.pairwise(rows):
        span = place[high] - place[low]
        inner = np.arange(low, high + 1)
        # Rows on which the place stands still have no share of their own: they are left out.
        if span > 0:
            share = ((place[inner] - place[low]) / span)[:, None]
            off = np.abs(values[low] + share * (values[high] - values[low]) - values[inner]).max(axis=1)
            still = np.concatenate(([False], np.diff(place[inner]) == 0)) | np.concatenate(
                (np.diff(place[inner]) == 0, [False])
            )
            assert (off[~still] <= tolerance * (1 + 1e-9)).all()


def test_thinning_a_straight_line_leaves_its_ends() -> None:
    line = np.linspace(0, 1, 1000)
    rows = thin(np.column_stack((line, 2 * line)), line, np.zeros(1000, bool), 1e-9)
    assert rows.tolist() == [0, 999]


def test_thinning_to_a_number_grows_the_tolerance() -> None:
    turn = np.linspace(0, 20, 5000)
    values = np.column_stack((np.cos(turn), np.sin(turn)))
    rows, used = thin_to(values, turn, np.zeros(5000, bool), 1e-9, 200)
    assert len(rows) <= 200
    assert used > 1e-9
    assert np.abs(np.interp(turn, turn[rows], values[rows, 0]) - values[:, 0]).max() <= used


def test_blocks_are_matched_past_extra_rows_on_either_side() -> None:
    words = np.arange(20.0)[:, None] * np.ones((1, 3))
    assert match_blocks(words, words).tolist() == list(range(20))
    ends = np.concatenate(([[-5.0] * 3], words[:8], [[99.0] * 3], words[11:]))
    assert match_blocks(ends, words).tolist() == [-1, *range(8), -1, *range(11, 20)]


def test_pieces_of_a_motion_are_joined_within_the_slack(made: Made) -> None:
    """A quarter turn at 40 mm split as finely as the read-back does: sagitta r phi^2 / 8 <= PIECE_MM."""
    radius = 40.0
    count = math.ceil((math.pi / 2) / math.sqrt(8 * PIECE_MM / radius))
    turn = np.linspace(0, math.pi / 2, count + 1)
    tip = np.column_stack((radius * np.cos(turn), radius * np.sin(turn), np.zeros(count + 1)))
    of = np.zeros(count + 1, np.int64)
    of[0] = -1
    fine = PartMotion(
        tip,
        np.tile([0.0, 0.0, 1.0], (count + 1, 1)),
        of + 1,
        of < 0,
        of + 2,
        of,
        np.linspace(0, 1, count + 1),
    )
    coarse, slack = fewer_pieces(fine)
    assert len(coarse.motion) < len(fine.motion) / 12
    assert coarse.fraction[-1] == 1.0
    x = np.interp(fine.fraction, coarse.fraction, coarse.tip_mm[:, 0])
    y = np.interp(fine.fraction, coarse.fraction, coarse.tip_mm[:, 1])
    off = np.hypot(x - tip[:, 0], y - tip[:, 1]).max()
    assert 0.3 * slack < off <= slack < 0.012
    assert fewer_pieces(made.part_motion) == (made.part_motion, 0.0)


def test_moves_outside_the_plan_are_told_so(made: Made) -> None:
    short = replace(made.axis_paths[0], words=made.axis_paths[0].words + 500.0)
    rows = along(replace(made, axis_paths=(short,)))
    feeds = ~made.part_motion.rapid
    assert (rows.purpose[feeds] == UNKNOWN).all()
    assert np.isnan(rows.tilt_rad).all()


@pytest.mark.parametrize("corner", [0.0, 0.5, 2.0])
def test_contact_of_a_bull_touches_the_surface(made: Made, corner: float) -> None:
    """Round trip: set a bull cutter on known points of the saddle, and find the points again."""
    cutter = Cutter(2, "bull" if corner else "flat", 3.0, corner, 2, 15.0, 3.0, 30.0)
    saddle = Saddle.of(made.job.part)
    xy = np.random.default_rng(3).uniform(-15, 15, (200, 2))
    touch, normal = saddle.point(xy), saddle.normal(xy)
    side = np.cross(normal, [0.3, 1.0, 0.2])
    side /= np.linalg.norm(side, axis=1, keepdims=True)
    axis = math.cos(0.35) * normal + math.sin(0.35) * side
    low = axis * np.sum(axis * normal, axis=1, keepdims=True) - normal
    low /= np.linalg.norm(low, axis=1, keepdims=True)
    tip = touch + corner * normal - (3.0 - corner) * low - corner * axis
    found, _ = contact(made.job, cutter, tip, axis)
    assert np.linalg.norm(found - touch, axis=1).max() < 1.5 * MICROMETRE


def test_contact_of_a_ball_touches_the_surface(made: Made) -> None:
    stretch = made.cutter_paths[0].stretches[30]
    found, normal = contact(made.job, fixture.BALL, stretch.tip_mm[1:-1], stretch.axis[1:-1])
    assert np.abs(found - stretch.contact_mm[1:-1]).max() < 1e-9
    assert np.abs(normal - stretch.normal[1:-1]).max() < 1e-9


def test_distance_to_a_polyline_and_its_loose_ends() -> None:
    line = np.array([[0.0, 0.0], [4.0, 0.0], [4.0, 3.0]])
    points = np.array([[1.0, 2.0], [-1.0, 1.0], [5.0, 2.0], [4.5, 4.0], [5.0, -1.0]])
    found = distance_to_line(points, line)
    assert found[[0, 2, 4]] == pytest.approx([2.0, 1.0, math.sqrt(2.0)])
    assert np.isnan(found[[1, 3]]).all()


def test_pooling_takes_the_extremes(made: Made) -> None:
    field = made.proof.scallop_map
    x, y, high, low = pooled(field, 50)
    assert max(high.shape) <= 50
    assert np.nanmax(high) == np.nanmax(field.height_mm)
    assert np.nanmin(low) == np.nanmin(field.height_mm)
    assert x[0] == pytest.approx(field.x_mm[:13].mean())
    assert y[1] == pytest.approx(field.y_mm[13:26].mean())


def test_chip_against_a_makers_feed_table(made: Made) -> None:
    """Multipliers for diameter/depth in inch: Dapra, Ball nose feed/speed compensation, table 2."""
    for diameter, depth, factor in ((0.5, 0.010, 3.6), (0.5, 0.050, 1.7), (1.0, 0.100, 1.7)):
        ball = Cutter(1, "ball", 12.7 * diameter, 12.7 * diameter, 2, 30.0, 6.0, 60.0)
        operation = replace(made.job.operations[0], cutter=ball, lead_rad=0.0)
        job = replace(
            made.job, stock=replace(made.job.stock, allowance_mm=25.4 * depth), operations=(operation,)
        )
        values = cutting_values(job, operation, None)
        assert values.feed_per_tooth_mm / values.chip_mm[0] == pytest.approx(factor, abs=0.06)


def test_cutting_speed_at_a_tilt(made: Made) -> None:
    """D = 10, ap = 0.3, 15 degrees: D sin(tilt + acos(1 - 2 ap / D)) = 5.728391, derived; speed = pi D n."""
    ball = Cutter(1, "ball", 5.0, 5.0, 2, 30.0, 5.0, 60.0)
    operation = replace(made.job.operations[0], cutter=ball, lead_rad=math.radians(15.0), spindle_rpm=10000.0)
    values = cutting_values(made.job, operation, None)
    assert values.effective_diameter_mm == pytest.approx((5.728391, 5.728391), abs=1e-6)
    assert values.speed_mm_min[1] == pytest.approx(179962.7, rel=1e-5)


def test_depth_is_what_the_operation_before_left(made: Made) -> None:
    finish = replace(made.job.operations[0], index=2)
    rough = replace(made.job.operations[0], index=1, does="rough", allowance_mm=0.4)
    job = replace(made.job, operations=(rough, finish))
    assert depth_of_cut_mm(job, finish) == pytest.approx(0.4)
    assert depth_of_cut_mm(made.job, made.job.operations[0]) == pytest.approx(0.3)
    solid = replace(made.job, stock=replace(made.job.stock, allowance_mm=None))
    assert math.isnan(depth_of_cut_mm(solid, solid.operations[0]))
    assert cutting_values(solid, solid.operations[0], None).effective_diameter_mm == (6.0, 6.0)


def test_cutter_profile_is_to_scale() -> None:
    bodies = cutter_profile(fixture.BALL)
    assert [body["name"] for body in bodies] == ["cutting end", "shank", "holder 1", "holder 2"]
    end = np.array(bodies[0]["points"])
    ball = end[1:-1]
    assert np.abs(np.hypot(ball[:, 0], ball[:, 1] - 3.0) - 3.0).max() < 1e-12
    assert end[-1].tolist() == [3.0, 18.0]
    assert max(z for body in bodies for _, z in body["points"]) == fixture.BALL.gauge_length_mm
    assert max(r for body in bodies for r, _ in body["points"]) == 16.0


def test_numbers_read_as_a_person_writes_them() -> None:
    mm, inch = Units(False), Units(True)
    assert plain(-0.00001, 3) == "0"
    assert plain(math.nan, 3) == "not measured"
    assert [clock(value) for value in (6.64, 59.6, 301.2, 7509.0)] == [
        "6.6 s",
        "1 min 00 s",
        "5 min 01 s",
        "2 h 05 min 09 s",
    ]
    assert mm.length(12.3456) == "12.346 mm"
    assert inch.length(25.4) == "1 in"
    assert mm.small(0.01137) == "11.37 µm"
    assert inch.small(0.00254) == "1 tenths"
    assert mm.feed(1500.4) == "1500 mm/min"
    assert mm.cutting_speed(120000.0) == "120 m/min"
    assert inch.cutting_speed(304800.0) == "1000 ft/min"
    assert mm.long(5126.0) == "5126 mm"
    assert mm.long(51260.0) == "51.26 m"
    assert mm.checked(0.0148, "mm", 0.012) == "14.8 µm"
    assert mm.checked(0.05, "mm", 4.2) == "0.05 mm"
    assert mm.checked(math.inf, "mm", 0.5) == "no limit"
    assert mm.checked(31.0, "deg", 30.0) == "31 deg"
    assert [round_length(value) for value in (1.0, 9.9, 23.0, 0.3)] == [1.0, 5.0, 20.0, pytest.approx(0.2)]


# ---------------------------------------------------------------------- three.js


def test_three_is_where_trimesh_keeps_it() -> None:
    script = three_script()
    assert script.startswith("/**\n * @license\n * Copyright")
    assert "Three.js Authors" in script[:200]
    assert "SPDX-License-Identifier: MIT" in script[:300]
    assert 'const e="140"' in script[:600]
    assert script.count("THREE.TrackballControls=TrackballControls") == 1
    assert "B64GLTF" not in script
    assert 550_000 < len(script) < 700_000


@pytest.mark.parametrize(
    ("content", "said"),
    [
        (None, "cannot be read"),
        ({"other.html": "x"}, "holds no viewer.html.template"),
        ({"viewer.html.template": "<script>new bundle</script>"}, "no script with a licence line"),
    ],
)
def test_three_moved_is_said(tmp_path: Path, content: dict[str, str] | None, said: str) -> None:
    if content is not None:
        (tmp_path / "resources" / "templates").mkdir(parents=True)
        with zipfile.ZipFile(tmp_path / "resources" / "templates" / "viewer.zip", "w") as archive:
            for name, text in content.items():
                archive.writestr(name, text)
    with pytest.raises(ThreeJsNotFound, match=said):
        three_script(tmp_path)


# ---------------------------------------------------------------------- in a browser


@pytest.fixture(scope="module")
def written(made: Made, tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("report") / "report.html"
    write_page(made, path)
    return path


def test_page_works_in_a_browser(written: Path, made: Made) -> None:
    with opened(written) as seen:
        page = seen.page
        page.wait_for_selector("#viewer:not([hidden])")
        # Slider: the read-out follows, with the words of that block.
        page.evaluate(
            "const s = document.getElementById('at'); s.value = 1000; s.dispatchEvent(new Event('input'))"
        )
        words = page.inner_text("#words")
        end = made.program.motions.end[999]
        assert f"line {fixture.FIRST_LINE + 999}" in words
        assert f"A {end[3]:.4f}" in words
        # A picture stands there, and it changes with the drop-down; so does the scale.
        before = page.locator("#solid").screenshot()
        assert "contact feed reached, mm/min" in page.inner_text("#legend")
        page.select_option("#colour", "tilt")
        page.wait_for_timeout(300)
        assert "tilt of the axis from the surface normal, °" in page.inner_text("#legend")
        assert page.locator("#solid").screenshot() != before
        page.select_option("#colour", "purpose")
        assert "overrun past the outline" in page.inner_text("#legend")
        # Drawn on demand: no new frame while nothing happens, new ones for a view and while dragging.
        page.wait_for_timeout(300)
        frames = int(page.get_attribute("#solid", "data-frames"))
        page.wait_for_timeout(500)
        assert int(page.get_attribute("#solid", "data-frames")) == frames
        page.click("[data-view=above]")
        page.wait_for_timeout(300)
        assert int(page.get_attribute("#solid", "data-frames")) > frames
        frames = int(page.get_attribute("#solid", "data-frames"))
        box = page.locator("#solid").bounding_box()
        page.mouse.move(box["x"] + 600, box["y"] + 300)
        page.mouse.down()
        page.mouse.move(box["x"] + 700, box["y"] + 350, steps=4)
        page.mouse.up()
        page.wait_for_timeout(300)
        assert int(page.get_attribute("#solid", "data-frames")) > frames
        # From a check to its line.
        page.click(".to-line >> nth=0")
        assert f"line {sections.findings_of(made)[1].line} " in page.inner_text("#words") + " "
        assert seen.console == []
        assert seen.requests == [written.as_uri()]


def test_map_and_strips_answer_to_pointer_and_keys(written: Path) -> None:
    with opened(written) as seen:
        page = seen.page
        page.locator("#heights").scroll_into_view_if_needed()
        box = page.locator("#heights").bounding_box()
        inside = page.evaluate("document.getElementById('heights').clientWidth")
        scale = (inside - 54) / 61.2  # 306 cells of 0.2 mm, margins of 46 and 8 pixels
        x0 = -30.55 + 0.05 - 0.05  # first cell's centre less half a cell
        px = 46 + (-20 - x0) * scale
        py = 20 + (20.55 + 0.15 + 12) * scale
        page.mouse.move(box["x"] + px, box["y"] + py)
        said = page.inner_text("#spot")
        assert "GOUGE" in said
        assert "lowest −4.00 µm" in said
        page.focus("#heights")
        for _ in range(3):
            page.keyboard.press("Shift+ArrowRight")
        assert "GOUGE" not in page.inner_text("#spot")
        assert "highest" in page.inner_text("#spot")
        page.locator("#chart").scroll_into_view_if_needed()
        chart = page.locator("#chart").bounding_box()
        page.mouse.click(chart["x"] + 500, chart["y"] + 60)
        told = page.inner_text("#chart-words")
        assert all(
            word in told
            for word in (
                "feed job 1500",
                "feed program",
                "feed reached",
                "A ",
                "C ",
                "local stepover",
                "local scallop",
            )
        )
        line = told.split()[1]
        assert page.inner_text("#words").startswith(f"line {line} ")
        before = page.evaluate("document.getElementById('chart').toDataURL()")
        page.click("[data-zoom='1']")
        assert page.evaluate("document.getElementById('chart').toDataURL()") != before
        assert seen.console == []


@pytest.mark.parametrize("kind", ["released", "withheld", "none", "inch"])
def test_phone_needs_no_sideways_scrolling(made: Made, tmp_path: Path, kind: str) -> None:
    job = {
        "released": made, "withheld": fixture.withheld(made), "none": fixture.not_planned(made),
        "inch": fixture.made(30, 21, "a-long-name-without-any-break-in-it-anywhere-at-all", "inch"),
    }[kind]  # fmt: skip
    write_page(job, tmp_path / "report.html")
    with opened(tmp_path / "report.html", 390, 844) as seen:
        assert seen.page.evaluate("document.documentElement.scrollWidth") <= 390
        assert seen.console == []


def test_print_keeps_the_still_pictures(written: Path) -> None:
    with opened(written) as seen:
        assert not seen.page.is_visible("#plan")
        seen.page.emulate_media(media="print")
        assert not seen.page.is_visible("#viewer")
        assert not seen.page.is_visible("#scrubber")
        assert seen.page.is_visible("#plan")
        assert seen.page.is_visible("#heights")
        pdf = seen.page.pdf(format="A4")
        assert pdf.count(b"/Type /Page\n") <= 6


def test_without_webgl_the_plan_view_stands_in(written: Path) -> None:
    with opened(written, webgl=False) as seen:
        assert "no WebGL" in seen.page.inner_text("#viewer-note")
        assert seen.page.is_visible("#plan")
        assert not seen.page.is_visible("#viewer")
        assert seen.page.is_visible("#scrubber")
        assert [said for said in seen.console if said.startswith("error")] == []


def test_without_three_the_plan_view_stands_in(
    made: Made, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def moved() -> str:
        raise ThreeJsNotFound("three.js was not found in the trimesh package: moved")

    monkeypatch.setattr(page_module, "three_script", moved)
    write_page(made, tmp_path / "report.html")
    assert (tmp_path / "report.html").stat().st_size < 1_500_000
    with opened(tmp_path / "report.html") as seen:
        assert "three.js was not found in the trimesh package" in seen.page.inner_text("#viewer-note")
        assert seen.page.is_visible("#plan")
        assert seen.page.is_visible("#heights")
        assert seen.console == []
