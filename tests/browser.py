"""A headless Chromium for tests of written pages; tests are skipped where there is none."""

from __future__ import annotations

import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pytest

NAMES = ("chromium", "chromium-browser", "google-chrome", "chrome")
QUIET = (
    "--headless", "--no-sandbox", "--disable-quic", "--no-first-run", "--disable-background-networking",
    "--disable-component-update", "--disable-sync",
)  # fmt: skip
SOFTWARE_GL = ("--use-gl=angle", "--use-angle=swiftshader", "--enable-unsafe-swiftshader")
NO_GL = ("--disable-gpu", "--disable-3d-apis", "--disable-software-rasterizer")


def chromium() -> str | None:
    """Path of an installed Chromium, or None."""
    return next((found for name in NAMES if (found := shutil.which(name))), None)


@dataclass
class Seen:
    """A page that is open, with what it said and asked for."""

    page: Any
    console: list[str] = field(default_factory=list)
    requests: list[str] = field(default_factory=list)


@contextmanager
def opened(path: Path, width: int = 1280, height: int = 900, *, webgl: bool = True) -> Iterator[Seen]:
    """Open a file in a fresh browser and wait until its scripts have run."""
    found = chromium()
    if found is None:
        pytest.skip("no Chromium is installed")
    sync_api = pytest.importorskip("playwright.sync_api")
    with sync_api.sync_playwright() as driver:
        flags = [*QUIET, *(SOFTWARE_GL if webgl else NO_GL)]
        browser = driver.chromium.launch(executable_path=found, args=flags)
        try:
            page = browser.new_page(viewport={"width": width, "height": height})
            seen = Seen(page)
            page.on("console", lambda said: seen.console.append(f"{said.type}: {said.text}"))
            page.on("pageerror", lambda error: seen.console.append(f"error: {error}"))
            page.on("request", lambda request: seen.requests.append(request.url))
            page.goto(path.as_uri())
            page.wait_for_timeout(300)
            yield seen
        finally:
            browser.close()
