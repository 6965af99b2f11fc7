"""Pictures show things where and as long as the job says, nothing crowded; files repeat byte for byte."""

from __future__ import annotations

import itertools
import math
import re
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from conftest import job_text

pytest.importorskip("matplotlib")

from anticlast.errors import BadInput, CannotWrite
from anticlast.job import load_job
from anticlast.passes.scallop import flat_height, local_scallop, local_step, scallop_answer
from anticlast.records import Job
from anticlast.report import picture_sheet
from anticlast.report.pictures import scallop_picture, setup_picture
from anticlast.saddle import Saddle

SECOND_AND_THIRD = """\
[[cutter]]
number = 4
shape = "flat"
diameter = 12.0
flutes = 2
flute_length = 18.0
shank_diameter = 12.0
stickout = 34.0
holder = [[20.0, 20.0], [32.0, 25.0]]
[[cutter]]
number = 7
shape = "bull"
diameter = 10.0
corner_radius = 1.5
flutes = 2
flute_length = 18.0
shank_diameter = 10.0
stickout = 50.0
holder = [[16.0, 20.0], [32.0, 25.0]]
"""

HOLES = (
    'shape = "polygon"\npoints = [[-40.0, -30.0], [40.0, -30.0], [40.0, 30.0], [-40.0, 30.0]]\n'
    "holes = [[[15.0, 5.0], [25.0, 5.0], [25.0, 15.0], [15.0, 15.0]],"
    " [[-25.0, -15.0], [-10.0, -15.0], [-10.0, -5.0], [-25.0, -5.0]]]"
)


def texts() -> dict[str, str]:
    tall = 'shape = "rectangle"\nsize = [30.0, 90.0]\ncenter = [12.0, 10.0]'
    inch = job_text(
        name="inch die",
        units="inch",
        a=0.1,
        outline='shape = "rectangle"\nsize = [3.5, 2.0]\ncorner_radius = 0.25\ncenter = [0.5, 0.25]',
        top=0.6,
        bottom=-0.8,
        margin=0.125,
        stock_extra="",
        part_origin=[0.0, 0.0, 1.5],
        clearance=0.2,
        diameter=0.25,
        stickout=1.4,
        direction=45.0,
        limit="scallop = 0.0004",
        tolerance=0.0001,
        feed=60.0,
    )
    inch = inch.replace("flute_length = 18.0", "flute_length = 0.75")
    inch = inch.replace("[[16.0, 20.0], [32.0, 25.0]]", "[[0.63, 0.8], [1.25, 1.0]]")
    holes = job_text(
        name="three cutters",
        outline=HOLES,
        a=0.006,
        extra_part="b = 0.009\nrotate = 30.0",
        top=18.0,
        bottom=-25.0,
        stock_extra="",
    )
    return {
        "slot": job_text(
            name="long slot", outline='shape = "slot"\nsize = [120.0, 24.0]', direction=30.0, top=40.0
        ),
        "circle": job_text(name="mirror seat", outline='shape = "circle"\ndiameter = 60.0', direction=0.0),
        "tall": job_text(name="tall plate", outline=tall, a=0.004, top=30.0, bottom=-30.0, direction=200.0),
        "holes": holes.replace("[[operation]]", SECOND_AND_THIRD + "[[operation]]"),
        "inch": inch,
    }


KINDS = ("slot", "circle", "tall", "holes", "inch")


@pytest.fixture
def job_of(tmp_path: Path) -> Callable[[str], Job]:
    def load(kind: str) -> Job:
        path = tmp_path / f"{kind}.toml"
        path.write_text(texts()[kind], encoding="utf-8")
        return load_job(path)

    return load


@pytest.fixture
def figures(monkeypatch: pytest.MonkeyPatch) -> list[Any]:
    """Figures in the order they are saved."""
    kept: list[Any] = []
    real = picture_sheet.save

    def save(figure: Any, path: Path) -> None:
        kept.append(figure)
        real(figure, path)

    monkeypatch.setattr(picture_sheet, "save", save)
    return kept


def answer_for(job: Job, asked: str) -> Any:
    operation = job.operations[0]
    given = {"scallop_mm": operation.scallop_mm} if asked == "scallop" else {"stepover_mm": 0.35}
    saddle = Saddle.of(job.part)
    return scallop_answer(saddle, job.part.outline, operation.cutter, operation.direction_rad, **given)


def lettering(figure: Any) -> list[tuple[str, Any]]:
    """Every text that shows, with its box in dots; labels of ticks beyond the ends of an axis do not show."""
    from matplotlib.axes import Axes
    from matplotlib.text import Text

    beyond = set()
    for axes in figure.findobj(Axes):
        for axis in (axes.xaxis, axes.yaxis):
            low, high = sorted(axis.get_view_interval())
            slack = 1e-9 * (high - low)
            for tick in axis.get_major_ticks():
                if not low - slack <= tick.get_loc() <= high + slack or not axes.axison:
                    beyond |= {tick.label1, tick.label2}
    renderer = figure.canvas.get_renderer()
    return [
        (text.get_text(), text.get_window_extent(renderer))
        for text in figure.findobj(Text)
        if text.get_visible() and text.get_text().strip() and text not in beyond
    ]


def drawn(figure: Any) -> Any:
    """The figure after a draw on the Agg canvas, at the resolution that is written."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg

    with picture_sheet.look():
        figure.set_dpi(picture_sheet.DOTS_PER_INCH)
        FigureCanvasAgg(figure).draw()
    return figure


def clashes(figure: Any) -> list[str]:
    """Texts that leave the sheet or run over one another by more than a couple of dots."""
    wide, tall = figure.canvas.get_width_height()
    boxes = [(words, box) for words, box in lettering(figure) if box.width > 0]
    found = [f"{words!r} leaves the sheet" for words, box in boxes
             if box.x0 < 0 or box.y0 < 0 or box.x1 > wide or box.y1 > tall]  # fmt: skip
    for (one, a), (two, b) in itertools.combinations(boxes, 2):
        if min(a.x1, b.x1) - max(a.x0, b.x0) > 2 and min(a.y1, b.y1) - max(a.y0, b.y0) > 2:
            found.append(f"{one!r} runs over {two!r}")
    return found


# ------------------------------------------------------------------------------ stepover against scallop


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("asked", ["scallop", "stepover"])
def test_scallop_picture_is_not_crowded(
    kind: str, asked: str, job_of: Callable[[str], Job], figures: list[Any], tmp_path: Path
) -> None:
    job = job_of(kind)
    scallop_picture(job, answer_for(job, asked), tmp_path / "map.png")
    assert clashes(drawn(figures[0])) == []


def test_scallop_picture_shows_the_answer(
    job_of: Callable[[str], Job], figures: list[Any], tmp_path: Path
) -> None:
    job = job_of("inch")
    answer = answer_for(job, "scallop")
    scallop_picture(job, answer, tmp_path / "map.png")
    plan, bar, curves, *_ = figures[0].axes
    marks = {
        line.get_marker(): line.get_xydata()[0] for line in plan.lines if line.get_marker() in {"v", "o"}
    }
    assert marks["v"] == pytest.approx(np.array(answer.tightest_at_mm) / 25.4)
    assert marks["o"] == pytest.approx(np.array(answer.widest_at_mm) / 25.4)
    # The rim is the outline, in inch.
    rims = [patch for patch in plan.patches if not patch.get_fill()]
    ring = rims[0].get_path().vertices
    assert (*ring.min(axis=0), *ring.max(axis=0)) == pytest.approx(np.array(job.part.outline.bounds) / 25.4)
    # The colours reach from the tightest to the widest stepover.
    low, high = bar.get_xlim()
    assert low <= answer.stepover_mm[0] / 25.4 * (1 + 1e-9)
    assert high >= answer.stepover_mm[2] / 25.4 * (1 - 1e-9)
    assert high - low < 2.0 * (answer.stepover_mm[2] - answer.stepover_mm[0]) / 25.4
    shown = " ".join(words for words, _ in lettering(drawn(figures[0])))
    for figure in (answer.stepover_mm[0], answer.stepover_mm[2], answer.flat_stepover_mm):
        assert f"{figure / 25.4:.5f}" in shown
    assert "stepover on the surface, in" in shown
    assert curves.get_xlabel() == "stepover on the surface, in"


@pytest.mark.parametrize("asked", ["scallop", "stepover"])
def test_scallop_curves_are_exact(
    asked: str, job_of: Callable[[str], Job], figures: list[Any], tmp_path: Path
) -> None:
    job = job_of("holes")
    answer = answer_for(job, asked)
    scallop_picture(job, answer, tmp_path / "map.png")
    curves = {
        line.get_label(): line.get_xydata() for line in figures[0].axes[2].lines if len(line.get_xydata()) > 2
    }
    assert set(curves) == {"tightest place", "widest place", "flat rule"}
    saddle = Saddle.of(job.part)
    for step in (0.1, 0.35, 0.45):
        for name, at_mm in (("tightest place", answer.tightest_at_mm), ("widest place", answer.widest_at_mm)):
            exact = local_scallop(saddle, answer.radius_mm, [at_mm], answer.direction_rad, step)[0]
            assert np.interp(step, *curves[name].T) == pytest.approx(exact, rel=1e-4)
        assert np.interp(step, *curves["flat rule"].T) == pytest.approx(
            flat_height(answer.radius_mm, step), rel=1e-4
        )


def test_map_colours_are_the_local_stepover(
    job_of: Callable[[str], Job], figures: list[Any], tmp_path: Path
) -> None:
    job = job_of("circle")
    answer = answer_for(job, "scallop")
    scallop_picture(job, answer, tmp_path / "map.png")
    from matplotlib.contour import ContourSet

    figure = drawn(figures[0])
    plan = figure.axes[0]
    bands = next(each for each in plan.get_children() if isinstance(each, ContourSet) and each.filled)
    spots = np.array([(2.0, 3.0), (20.0, 5.0), (-5.0, 26.0), (9.0, -20.0), (-27.0, -2.0)])
    steps = local_step(
        Saddle.of(job.part), answer.radius_mm, spots, answer.direction_rad, answer.flat_scallop_mm
    )
    image = np.asarray(figure.canvas.buffer_rgba())
    seen = set()
    for spot, step in zip(plan.transData.transform(spots), steps, strict=True):
        band = int(np.searchsorted(bands.levels, step)) - 1
        wanted = np.array(bands.cmap(bands.norm(bands.layers[band]))) * 255
        pixel = image[image.shape[0] - 1 - round(spot[1]), round(spot[0])]
        assert np.abs(pixel - wanted).max() <= 1.0
        seen.add(band)
    assert len(seen) >= 3


def test_feed_arrow_points_along_the_feed(
    job_of: Callable[[str], Job], figures: list[Any], tmp_path: Path
) -> None:
    job = job_of("tall")  # 200 degrees
    scallop_picture(job, answer_for(job, "scallop"), tmp_path / "map.png")
    arrow = next(text for text in figures[0].axes[0].texts if getattr(text, "arrow_patch", None) is not None)
    (x1, y1), (x0, y0) = arrow.xy, arrow.get_position()
    assert math.degrees(math.atan2(y1 - y0, x1 - x0)) % 360 == pytest.approx(200.0)


def test_scale_bar_is_as_long_as_it_says(
    job_of: Callable[[str], Job], figures: list[Any], tmp_path: Path
) -> None:
    from matplotlib.patches import Rectangle

    for kind in ("slot", "inch"):
        job = job_of(kind)
        scallop_picture(job, answer_for(job, "scallop"), tmp_path / "map.png")
        setup_picture(job, tmp_path / "setup.png")
        for figure in figures[-2:]:
            axes = next(
                axes
                for axes in figure.axes
                for text in axes.texts
                if re.fullmatch(r"[\d.]+ (mm|in)", text.get_text())
            )
            label = next(t.get_text() for t in axes.texts if re.fullmatch(r"[\d.]+ (mm|in)", t.get_text()))
            halves = [patch for patch in axes.patches if isinstance(patch, Rectangle)]
            length, unit = label.split()
            assert sum(half.get_width() for half in halves) == pytest.approx(float(length))
            assert unit == ("in" if kind == "inch" else "mm")


def test_nothing_varies_is_drawn_in_one_colour(tmp_path: Path, figures: list[Any]) -> None:
    path = tmp_path / "job.toml"
    path.write_text(job_text(a=1e-6, top=6.0, outline='shape = "circle"\ndiameter = 2.0'), encoding="utf-8")
    job = load_job(path)
    scallop_picture(job, answer_for(job, "scallop"), tmp_path / "map.png")
    assert "varies by" in " ".join(words for words, _ in lettering(drawn(figures[0])))
    assert clashes(figures[0]) == []


# ------------------------------------------------------------------------------ set-up


@pytest.mark.parametrize("kind", KINDS)
def test_setup_picture_is_not_crowded(
    kind: str, job_of: Callable[[str], Job], figures: list[Any], tmp_path: Path
) -> None:
    setup_picture(job_of(kind), tmp_path / "setup.png")
    assert clashes(drawn(figures[0])) == []


@pytest.mark.parametrize("kind", KINDS)
def test_setup_views_share_one_scale(
    kind: str, job_of: Callable[[str], Job], figures: list[Any], tmp_path: Path
) -> None:
    job = job_of(kind)
    setup_picture(job, tmp_path / "setup.png")
    figure = figures[0]
    wide, tall = figure.get_size_inches()
    views = [axes for axes in figure.axes if axes.get_ylim() != (0.0, 1.0)]
    assert len(views) == 3
    scales = []
    for axes in views:
        place = axes.get_position()
        scales += [
            place.width * wide / np.ptp(axes.get_xlim()),
            place.height * tall / np.ptp(axes.get_ylim()),
        ]
        assert 0 <= place.x0 <= place.x1 <= 1
        assert 0 <= place.y0 <= place.y1 <= 1
    assert scales == pytest.approx([scales[0]] * 6)
    ratio = scales[0] * 25.4
    words = " ".join(words for words, _ in lettering(drawn(figure)))
    assert (f"1 : {1 / ratio:.2f}" if ratio < 1 else f"{ratio:.2f} : 1") in words


def test_setup_shows_cutters_surface_and_heights(
    job_of: Callable[[str], Job], figures: list[Any], tmp_path: Path
) -> None:
    from matplotlib.patches import Polygon

    job = job_of("holes")
    setup_picture(job, tmp_path / "setup.png")
    views = [axes for axes in figures[0].axes if axes.get_ylim() != (0.0, 1.0)]
    front = views[1]
    rings = [patch.get_xy() for patch in front.patches if isinstance(patch, Polygon)]
    plane = job.stock.top_mm + job.clearance_mm
    assert min(ring[:, 1].min() for ring in rings) == pytest.approx(plane)
    # The tallest cutter: gauge length above the plane; the widest holder: 32 across.
    assert max(ring[:, 1].max() for ring in rings) == pytest.approx(plane + 50 + 20 + 25)
    assert max(float(np.ptp(ring[:, 0])) for ring in rings) == pytest.approx(32.0)
    # The bull's end: flat for radius less corner, then the corner arc.
    tips = [ring for ring in rings if ring[:, 1].min() == pytest.approx(plane) and np.ptp(ring[:, 1]) < 2.0]
    bull = next(ring for ring in tips if np.ptp(ring[:, 0]) == pytest.approx(10.0))
    middle = 0.5 * (bull[:, 0].min() + bull[:, 0].max())
    arc = bull[(bull[:, 0] - middle > 3.5 - 1e-9)]
    assert np.hypot(arc[:, 0] - middle - 3.5, arc[:, 1] - plane - 1.5) == pytest.approx(1.5)
    # The bold line of each section lies on the surface.
    for axes, along in ((views[1], 0), (views[2], 1)):
        surface = next(line.get_xydata() for line in axes.lines if len(line.get_xydata()) > 50)
        xy = np.zeros((len(surface), 2))
        xy[:, along] = surface[:, 0]
        assert surface[:, 1] == pytest.approx(Saddle.of(job.part).height(xy[:, 0], xy[:, 1]), abs=1e-9)
    words = {words for words, _ in lettering(drawn(figures[0]))}
    assert {"rapid 23", "top 18", "origin 0", "bottom -25", "86", "66", "T1", "T4", "T7"} <= words


# ------------------------------------------------------------------------------ files


@pytest.mark.parametrize("suffix", [".png", ".svg"])
def test_the_same_picture_is_the_same_file(suffix: str, job_of: Callable[[str], Job], tmp_path: Path) -> None:
    job = job_of("circle")
    answer = answer_for(job, "scallop")
    for name, draw in (
        ("map", lambda path: scallop_picture(job, answer, path)),
        ("setup", lambda path: setup_picture(job, path)),
    ):
        first, second = tmp_path / f"{name}1{suffix}", tmp_path / f"{name}2{suffix}"
        draw(first)
        draw(second)
        data = first.read_bytes()
        assert data == second.read_bytes()
        assert data.startswith(b"\x89PNG" if suffix == ".png" else b"<?xml")
        assert not re.search(rb"dc:date|matplotlib\.org/|tEXtSoftware", data)


def test_user_settings_do_not_change_the_picture(job_of: Callable[[str], Job], tmp_path: Path) -> None:
    import matplotlib

    job = job_of("circle")
    setup_picture(job, tmp_path / "one.svg")
    with matplotlib.rc_context({"font.size": 20.0, "axes.facecolor": "red", "svg.hashsalt": "other"}):
        setup_picture(job, tmp_path / "two.svg")
        assert matplotlib.rcParams["font.size"] == 20.0
    assert (tmp_path / "one.svg").read_bytes() == (tmp_path / "two.svg").read_bytes()


def test_svg_text_can_be_searched(job_of: Callable[[str], Job], tmp_path: Path) -> None:
    setup_picture(job_of("circle"), tmp_path / "setup.svg")
    text = (tmp_path / "setup.svg").read_text(encoding="utf-8")
    assert ">mirror seat: set-up</text>" in text
    assert ">Program zero (G54)</text>" in text


def test_bad_endings_and_folders(job_of: Callable[[str], Job], tmp_path: Path) -> None:
    job = job_of("circle")
    with pytest.raises(BadInput, match=r"found the ending '\.jpg'; a picture is \.png or \.svg"):
        setup_picture(job, tmp_path / "setup.jpg")
    with pytest.raises(BadInput, match=r"\.pdf"):
        scallop_picture(job, answer_for(job, "scallop"), tmp_path / "map.pdf")
    with pytest.raises(CannotWrite, match=r"absent.setup\.png: cannot be written"):
        setup_picture(job, tmp_path / "absent" / "setup.png")
    assert not [path for path in tmp_path.iterdir() if path.suffix in {".png", ".svg", ".jpg", ".part"}]


def test_no_pyplot_state_is_left(job_of: Callable[[str], Job], tmp_path: Path) -> None:
    import subprocess
    import sys

    job = job_of("circle")
    code = (
        "import sys; from pathlib import Path; from anticlast.job import load_job;"
        "from anticlast.report.pictures import setup_picture;"
        "assert 'matplotlib' not in sys.modules, 'imported too early';"
        f"setup_picture(load_job({str(job.source)!r}), Path({str(tmp_path / 'setup.png')!r}));"
        "assert 'matplotlib.pyplot' not in sys.modules"
    )
    subprocess.run([sys.executable, "-c", code], check=True, timeout=120)
    assert (tmp_path / "setup.png").stat().st_size > 10_000
