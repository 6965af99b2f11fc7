"""Every command and snippet of the README and the docs is run.

Conventions of the pages: a ``sh`` block holds commands, one a line; a line starting with ``anticlast`` is run in a folder that
holds a copy of ``samples``, and must end in status 0 unless the line above the block says ``<!-- exits 1 -->``. A ``toml`` or
``python`` block under ``<!-- file: NAME -->`` is written there first; any other ``python`` block is run.
"""

from __future__ import annotations

import re
import shlex
import shutil
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path

import pytest
from typer.testing import CliRunner

from anticlast.cli import app

ROOT = Path(__file__).resolve().parents[1]
PAGES = [ROOT / "README.md", ROOT / "DEVELOPERS.md", *sorted((ROOT / "docs").glob("*.md"))]


@dataclass(frozen=True)
class Block:
    line: int
    language: str
    note: str
    text: str


def blocks(page: Path) -> list[Block]:
    """Fenced blocks of a page with the HTML comment, if any, right above each."""
    found: list[Block] = []
    lines = page.read_text(encoding="utf-8").splitlines()
    start, language, note = 0, "", ""
    for number, line in enumerate(lines, start=1):
        fence = re.match(r"^```(\w*)\s*$", line)
        if fence and not start:
            start, language = number, fence.group(1)
            above = next((text for text in reversed(lines[: number - 1]) if text.strip()), "")
            comment = re.match(r"^<!-- (.*) -->$", above.strip())
            note = comment.group(1) if comment else ""
        elif fence and start:
            found.append(Block(start, language, note, "\n".join(lines[start : number - 1]) + "\n"))
            start = 0
    assert not start, f"{page.name}:{start}: block is not closed"
    return found


def run_commands(page: Path, block: Block) -> None:
    expected = 1 if block.note == "exits 1" else 0
    for offset, line in enumerate(block.text.splitlines(), start=1):
        words = shlex.split(line, comments=True)
        if not words or words[0] != "anticlast":
            continue
        result = CliRunner().invoke(app, words[1:])
        assert result.exit_code == expected, f"{page.name}:{block.line + offset}: {line}\n{result.output}"


@pytest.mark.parametrize("page", PAGES, ids=lambda page: page.name)
def test_page_runs(page: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    shutil.copytree(ROOT / "samples", tmp_path / "samples")
    monkeypatch.chdir(tmp_path)
    for block in blocks(page):
        if block.note.startswith("file: "):
            target = tmp_path / block.note.removeprefix("file: ")
            target.parent.mkdir(parents=True, exist_ok=True)
            target.write_text(block.text, encoding="utf-8")
        elif block.language == "sh":
            run_commands(page, block)
        elif block.language == "python":
            done = subprocess.run(
                [sys.executable, "-c", block.text], capture_output=True, text=True, check=False, cwd=tmp_path
            )
            assert done.returncode == 0, f"{page.name}:{block.line}\n{done.stderr}"


@pytest.mark.parametrize("page", PAGES, ids=lambda page: page.name)
def test_links_lead_somewhere(page: Path) -> None:
    for target in re.findall(r"\]\(([^)#\s]+)", page.read_text(encoding="utf-8")):
        if not target.startswith(("http:", "https:")):
            assert (page.parent / target).exists(), f"{page.name} links to {target}, which does not exist"


def test_readme_opens_with_two_single_line_commands() -> None:
    commands = [block for block in blocks(ROOT / "README.md") if block.language == "sh"]
    assert len(commands) >= 2
    assert all(len(block.text.strip().splitlines()) == 1 for block in commands[:2])
    assert "anticlast make samples/" in commands[0].text
    assert "pytest" in commands[1].text
