"""Outputs appear whole or not at all."""

from __future__ import annotations

import os
from pathlib import Path

import pytest

from anticlast import files
from anticlast.errors import CannotWrite


def leftovers(folder: Path) -> list[str]:
    return sorted(path.name for path in folder.iterdir())


def test_write_text_replaces_whole(tmp_path: Path) -> None:
    target = tmp_path / "summary.json"
    files.write_text(target, "old")
    files.write_text(target, "new")
    assert target.read_text() == "new"
    assert leftovers(tmp_path) == ["summary.json"]


def test_an_error_while_writing_leaves_the_old_file(tmp_path: Path) -> None:
    target = tmp_path / "tile.ngc"
    files.write_text(target, "old")

    def break_off() -> None:
        with files.beside(target) as (stream, _):
            stream.write("half a prog")
            raise ZeroDivisionError

    with pytest.raises(ZeroDivisionError):
        break_off()
    assert target.read_text() == "old"
    assert leftovers(tmp_path) == ["tile.ngc"]


def test_a_full_disk_is_named_and_changes_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    target = tmp_path / "tile.ngc"
    files.write_text(target, "old")

    def full(_: int) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "fsync", full)
    with pytest.raises(CannotWrite, match=r"No space left on device.*nothing under that name was changed"):
        files.write_text(target, "new")
    assert target.read_text() == "old"
    assert leftovers(tmp_path) == ["tile.ngc"]


def test_missing_folder_is_named(tmp_path: Path) -> None:
    with pytest.raises(CannotWrite, match="No such file"):
        files.write_text(tmp_path / "nowhere" / "tile.ngc", "text")


def test_a_file_in_place_of_the_folder_is_named(tmp_path: Path) -> None:
    (tmp_path / "out").write_text("I am a file")
    with pytest.raises(CannotWrite, match="cannot be written"):
        files.folder(tmp_path / "out")


def test_kept_temporary_is_complete_before_the_name_appears(tmp_path: Path) -> None:
    target = tmp_path / "tile.ngc"
    with files.beside(target, keep=True) as (stream, temporary):
        stream.write("G21\n")
    assert not target.exists()
    assert temporary.read_text() == "G21\n"
    files.rename(temporary, target)
    assert leftovers(tmp_path) == ["tile.ngc"]
