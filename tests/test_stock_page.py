"""The stock page: read back from its own text, compared with the preview, and worked in a browser."""

from __future__ import annotations

import base64
import json
import re
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from typer.testing import CliRunner

from anticlast import pipeline
from anticlast.cli import app
from anticlast.report.stock_page import stock_page_text, write_stock_page
from anticlast.stock.preview import StockPreview
from browser import opened
from test_stock_preview import tile


@pytest.fixture(scope="module")
def preview(tmp_path_factory: pytest.TempPathFactory) -> StockPreview:
    return pipeline.stock(pipeline.load_job(tile(tmp_path_factory.mktemp("page"))), spacing_mm=0.4)


@pytest.fixture(scope="module")
def written(preview: StockPreview, tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("written") / "stock.html"
    write_stock_page(preview, path)
    return path


def data_of(page: str) -> dict:
    found = re.search(r'<script type="application/json" id="data">(.*?)</script>', page, re.DOTALL)
    assert found is not None
    return json.loads(found.group(1))


def array(entry: dict[str, str]) -> np.ndarray:
    return np.frombuffer(base64.b64decode(entry["b"]), "<" + entry["t"])


def test_drops_lead_from_the_blank_to_every_state(preview: StockPreview, written: Path) -> None:
    """After the last drop of an operation, the drawn columns are those that the preview itself kept."""
    stock = data_of(written.read_text(encoding="utf-8"))["stock"]
    drops = {key: array(value) for key, value in stock["drops"].items()}
    assert np.all(np.diff(drops["place"].astype(np.int64)) >= 0)
    operation = array(stock["operation"])
    for state in preview.states:
        top = array(stock["top"]).copy()
        ends = np.flatnonzero((operation > 0) & (operation < state.before))
        end = ends[-1] if len(ends) else -1
        for k in np.flatnonzero(drops["place"].astype(np.int64) <= end):
            top[drops["cell"][k]] = drops["top"][k]
        assert state.field.count.size == len(top)
        wanted = np.where(state.field.count > 0, state.field.high_mm[0], preview.job.stock.bottom_mm)
        assert np.abs(top - wanted.ravel()).max() < 1e-3


def test_lines_and_loads_are_the_previews(preview: StockPreview, written: Path) -> None:
    stock = data_of(written.read_text(encoding="utf-8"))["stock"]
    last = preview.states[-1].field
    cell, line = array(stock["drops"]["cell"]), array(stock["drops"]["line"])
    latest = dict(zip(cell.tolist(), line.tolist(), strict=True))
    owners = last.owner.ravel()
    same = [preview.motion.line[owners[one]] == at for one, at in latest.items()]
    assert np.mean(same) > 0.99  # a column that lost less than 0.1 um since is not drawn anew
    loads = {one["key"]: one for one in stock["loads"]}
    assert array(loads["removal"]["values"]).max() == pytest.approx(
        np.nanmax(preview.engagement.removal_mm3_min) / 1e3, rel=1e-5
    )
    assert array(loads["force"]["values"]).max() == pytest.approx(np.nanmax(preview.loads.force_n), rel=1e-5)
    assert np.all(array(loads["force"]["low"]) <= array(loads["force"]["values"]) + 1e-6)


def test_page_is_one_small_file_and_always_the_same(preview: StockPreview, written: Path) -> None:
    page = written.read_text(encoding="utf-8")
    assert written.stat().st_size < 15e6
    assert stock_page_text(preview) == page
    assert "default-src 'none'" in page
    assert not re.search(r"<(script|link|img)[^>]+(src|href)=[\"'](?!data:)", page)


def test_hostile_job_name_stays_text(preview: StockPreview) -> None:
    name = "</title><script>alert(1)</script>{{data}}"
    page = stock_page_text(replace(preview, job=replace(preview.job, name=name)))
    assert "<script>alert" not in page
    assert "&lt;script&gt;alert(1)" in page
    assert data_of(page)["stock"]["places"] > 0


def test_command_writes_the_page(tmp_path: Path) -> None:
    path = tmp_path / "out.html"
    done = CliRunner().invoke(app, ["stock", str(tile(tmp_path)), "--grid", "0.5", "--page", str(path)])
    assert done.exit_code in (0, 1)
    assert f"page: {path}" in done.output
    assert data_of(path.read_text(encoding="utf-8"))["stock"]["operations"] == [
        "rough",
        "semi-finish",
        "finish",
    ]


@pytest.mark.parametrize("width", [1280, 390])
def test_browser_works_the_page(written: Path, width: int) -> None:
    with opened(written, width) as seen:
        page = seen.page
        assert page.evaluate("document.documentElement.scrollWidth") <= width
        page.get_by_role("button", name="after 1, rough").click()
        page.locator("#heights").focus()
        page.keyboard.press("ArrowRight")
        page.wait_for_timeout(300)
        assert "last cut by line" in page.inner_text("#spot")
        assert "operation 1, rough" in page.inner_text("#words")
        before = int(page.input_value("#at"))
        page.locator("#at").focus()
        page.keyboard.press("ArrowRight")
        page.wait_for_timeout(300)
        assert int(page.input_value("#at")) == before + 1
        page.select_option("#quantity", "depth")
        assert "depth of cut" in page.inner_text("#chart-words")
        assert seen.console == []
        assert [url for url in seen.requests if not url.startswith(("file:", "data:"))] == []
