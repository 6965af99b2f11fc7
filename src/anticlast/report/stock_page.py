"""The stock preview as one self-contained page: stock in 3D and plan, cutter at work, load along the program.

What the page shows between two moments comes from snapshots of the same columns, cut again, and from the program line
that lowered each column last before a snapshot. No date, no path and nothing random: the same preview gives the same bytes.
"""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

from anticlast import files
from anticlast.report.numbers import Units, text
from anticlast.report.page import as_json, filled, template
from anticlast.report.stock_data import stock_data
from anticlast.report.threejs import ThreeJsNotFound, three_script

if TYPE_CHECKING:
    from anticlast.stock.preview import StockPreview

SCRIPTS = ("page.js", "stock.js")


def stock_page_text(preview: StockPreview) -> str:
    """Return the whole page as HTML; without three.js in the installed trimesh it shows the plan only and says so."""
    units = Units(preview.job.units == "inch")
    try:
        three, missing = three_script(), ""
    except ThreeJsNotFound as moved:
        three, missing = "", str(moved)
    data = stock_data(preview, units)
    values = {
        "title": text(f"{preview.job.name}: stock and load"),
        "style": template("style.css"),
        "name": text(preview.job.name),
        "material": text(preview.job.stock.material),
        "states": _states(preview, units),
        "findings": _findings(preview),
        "honest": text(_honest(preview, data["stock"], units)),
        "missing": text(missing),
        "data": as_json(data),
        "three": three,
        "scripts": "\n".join(template(name) for name in SCRIPTS),
    }
    return filled(template("stock.html"), values)


def write_stock_page(preview: StockPreview, path: str | Path) -> None:
    """Write the page, whole or not at all.

    Parameters
    ----------
    preview : StockPreview
    path : path
        Name of the HTML file.

    Raises
    ------
    CannotWrite
        When the file cannot be written; what stood under the name before stands still.
    """
    files.write_text(Path(path), stock_page_text(preview))


def _states(preview: StockPreview, units: Units) -> str:
    """Table: what stands over the finished surface before each operation, and at the end."""
    rows = []
    for state in preview.states:
        last = state.before > len(preview.job.operations)
        when = (
            "at the end"
            if last
            else f"before {state.before}, {preview.job.operations[state.before - 1].does}"
        )
        low, mean, high = (units.length(value, bare=True) for value in state.thickness_mm)
        volume = f"{state.above_part_mm3 * units.scale**3:.5g}"
        cells = "".join(f"<td>{text(value)}</td>" for value in (volume, low, mean, high))
        rows.append(f"<tr><th scope='row'>{text(when)}</th>{cells}</tr>")
    name = units.name
    heads = (
        "moment",
        f"over the surface, {name}³",
        f"thinnest, {name}",
        f"mean, {name}",
        f"thickest, {name}",
    )
    head = "".join(f"<th scope='col'>{text(word)}</th>" for word in heads)
    return f"<table><thead><tr>{head}</tr></thead><tbody>{''.join(rows)}</tbody></table>"


def _findings(preview: StockPreview) -> str:
    """List of checks that failed and of notes; a sentence if there are none."""
    bad = [finding for finding in preview.findings if not finding.ok or finding.warning]
    if not bad:
        return "<p>No load or clearance is over its limit.</p>"
    items = "".join(
        f"<li><strong>{'note' if one.ok or one.warning else 'failed'}</strong> {text(one.check)}: {text(one.message)}</li>"
        for one in bad
    )
    return f"<ul>{items}</ul>"


def _honest(preview: StockPreview, stock: dict[str, Any], units: Units) -> str:
    """Say what the pictures leave out and what lies between snapshots."""
    said = (
        f"Drawn with a column every {units.length(stock['grid']['step'])}; the stock was cut with columns every "
        f"{units.length(preview.spacing_mm)}. {stock['snapshots']} snapshots of the stock are kept, the exact ones at the end of "
        "each operation among them. Between two snapshots each column drops at the line that lowered it last, to its height at "
        "the later one; if several lines lowered it in between, the earlier ones do not show. Only the highest material of a "
        "column is drawn, so undercuts do not show. Thickness is the height over the surface times the cosine of its slope; "
        "the table has it along the normal. Time counts motion at feed; rapids are shown but take none. "
    )
    if stock["of_places"] > stock["places"]:
        said += (
            f"The cutter is shown at {stock['places']} of {stock['of_places']} places, none of them interpolated; each load is "
            "the largest since the place before. "
        )
    if not preview.material_known:
        said += "No cutting force of this material is known: force, power and bending are not shown. "
    return said.strip()
