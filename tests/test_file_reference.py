"""The reference tables of docs/job-file.md and docs/machine-file.md say what the loaders do."""

from __future__ import annotations

import re
import typing
from pathlib import Path
from typing import Any

import pytest

from anticlast import job_schema, materials
from anticlast.errors import BadInput
from anticlast.file_schema import FileTable, Quantity, key_types
from anticlast.job import load_job, parse_job
from anticlast.machine import file_tables
from anticlast.machine.definition import load_machine

DOCS = Path(__file__).resolve().parents[1] / "docs"

TABLES: list[tuple[str, str, type[FileTable]]] = [
    ("job-file.md", "## `[job]`", job_schema.JobTable),
    ("job-file.md", "## `[part]`", job_schema.PartTable),
    ("job-file.md", "## `[part.outline]`", job_schema.OutlineTable),
    ("job-file.md", "## `[stock]`", job_schema.StockTable),
    ("job-file.md", "## `[machine]`", job_schema.MachineTable),
    ("job-file.md", "## `[[cutter]]`", job_schema.CutterTable),
    ("job-file.md", "## `[[operation]]`", job_schema.OperationTable),
    ("machine-file.md", "## `[machine]`", file_tables.MachineHead),
    ("machine-file.md", " Linear:\n", file_tables.LinearAxis),
    ("machine-file.md", "\nRotary:\n", file_tables.RotaryAxis),
    ("machine-file.md", "## `[spindle]`", file_tables.SpindleTable),
    ("machine-file.md", "## `[control]`", file_tables.ControlTable),
    ("machine-file.md", "### `decimals`", file_tables.DecimalsTable),
    ("machine-file.md", "## `[times]`", file_tables.TimesTable),
]  # fmt: skip


def documented(page: str, heading: str) -> dict[str, tuple[str, str, str]]:
    """First table after a heading: key -> (unit, default, range)."""
    text = (DOCS / page).read_text(encoding="utf-8")
    rest = text[text.index(heading) :]
    rows = re.search(r"\| key \| unit .*\n\|[-|]+\n((?:\|.*\n)+)", rest)
    assert rows is not None
    found = {}
    for row in rows.group(1).splitlines():
        key, unit, default, span, meaning = (cell.strip() for cell in row.strip("|").split("|"))
        assert meaning
        found[key.strip("`")] = (unit, default, span)
    return found


def part_of(annotation: Any, wanted: type) -> Any:
    """First annotation or literal of a kind inside an annotated type."""
    if wanted is Quantity and isinstance(annotation, Quantity):
        return annotation
    if wanted is str and typing.get_origin(annotation) is typing.Literal:
        return typing.get_args(annotation)
    for inner in (*typing.get_args(annotation), *getattr(annotation, "__metadata__", ())):
        if (found := part_of(inner, wanted)) is not None:
            return found
    return None


@pytest.mark.parametrize(
    ("page", "heading", "model"), TABLES, ids=lambda value: getattr(value, "__name__", str(value))
)
def test_tables_hold_every_key_with_unit_default_and_range(
    page: str, heading: str, model: type[FileTable]
) -> None:
    rows = documented(page, heading)
    assert list(rows) == list(model.model_fields)
    for key, (unit, default, span) in rows.items():
        field, annotation = model.model_fields[key], key_types(model)[key]
        assert field.is_required() == (default == "required"), key
        if isinstance(field.default, bool):
            assert default == str(field.default).lower(), key
        elif isinstance(field.default, (int, float)):
            assert float(default) == field.default, key
        elif isinstance(field.default, str):
            assert default == f'`"{field.default}"`', key
        quantity, options = part_of(annotation, Quantity), part_of(annotation, str)
        if quantity is not None:
            assert unit == (quantity.unit_name("mm") or "-"), key
            numbers = re.match(r"(above )?(-?[\d.]+) to (-?[\d.]+)(, whole)?", span)
            assert numbers is not None, key
            above, low, high, whole = numbers.groups()
            ours = (bool(above), float(low), float(high), bool(whole))
            assert ours == (quantity.above, quantity.low, quantity.high, quantity.whole), key
        elif options is not None:
            assert span == ", ".join(f'`"{option}"`' for option in options), key


def test_every_material_is_listed() -> None:
    text = (DOCS / "job-file.md").read_text(encoding="utf-8")
    assert ", ".join(f"`{name}`" for name in materials.names()) in text


def example(page: str) -> str:
    match = re.search(
        r"<!-- file: \S+ -->\n```\w+\n(.*?)```", (DOCS / page).read_text(encoding="utf-8"), re.DOTALL
    )
    assert match is not None
    return match.group(1)


def test_examples_load(tmp_path: Path) -> None:
    job, mill = tmp_path / "job.toml", tmp_path / "our-mill.toml"
    job.write_text(example("job-file.md"), encoding="utf-8")
    mill.write_text(example("machine-file.md"), encoding="utf-8")
    assert load_job(job).slug == "canopy-tile"
    assert load_machine("our-mill.toml", tmp_path).letters == ("X", "Y", "Z", "B")


def test_example_of_a_python_post_loads(tmp_path: Path) -> None:
    post = tmp_path / "careful_mill.py"
    post.write_text(example("writing-a-post.md"), encoding="utf-8")
    slow, full = load_machine("careful_mill.py", tmp_path), load_machine("trunnion-ac")
    assert [axis.rapid for axis in slow.axes] == [axis.rapid / 2 for axis in full.axes]


def test_faults_shown_on_the_page_are_real() -> None:
    text = example("job-file.md").replace("\ndiameter = 6.0", "\ndiametr = 6.0")
    with pytest.raises(BadInput) as caught:
        parse_job(text, "canopy/job.toml")
    shown = (DOCS / "job-file.md").read_text(encoding="utf-8")
    assert f"```text\n{caught.value}\n```" in shown
