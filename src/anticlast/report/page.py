"""One self-contained page for the machinist: everything in one file, nothing from elsewhere.

The same result always gives the same bytes: the page holds no date, no path and nothing random. A content
policy inside the page forbids it every request.
"""

from __future__ import annotations

import json
import re
from importlib import resources
from pathlib import Path

from anticlast import files
from anticlast.records import Made
from anticlast.report import sections
from anticlast.report.along import along
from anticlast.report.data import page_data
from anticlast.report.drawing import front_drawing, plan_drawing
from anticlast.report.numbers import Units, text
from anticlast.report.threejs import ThreeJsNotFound, three_script

SCRIPTS = ("page.js", "viewer.js", "map.js", "charts.js")
PLACE = re.compile(r"\{\{([a-z_]+)\}\}")


def template(name: str) -> str:
    """Return a file of the package's ``templates`` folder as text."""
    return resources.files("anticlast.report").joinpath("templates", name).read_text(encoding="utf-8")


def filled(form: str, values: dict[str, str]) -> str:
    """Put values into ``{{name}}`` places, all in one go, so that no value is searched for places itself.

    Raises
    ------
    KeyError
        When the form names a place that has no value.
    """
    return PLACE.sub(lambda match: values[match.group(1)], form)


def as_json(data: object) -> str:
    """JSON that may stand inside a script element: without ``<`` no element can be closed from inside."""
    return json.dumps(data, separators=(",", ":"), allow_nan=False).replace("<", "\\u003c")


def page_text(made: Made) -> str:
    """Return the whole page.

    Parameters
    ----------
    made : Made
        Also of a withheld job; whatever is missing is left out and said.

    Returns
    -------
    str
        HTML, the same for the same input. Without three.js in the installed trimesh the page shows plan views
        only and says so.
    """
    units = Units(made.job.units == "inch")
    rows = along(made)
    try:
        three, missing = three_script(), ""
    except ThreeJsNotFound as moved:
        three, missing = "", str(moved)
    values = {
        "title": text(f"{made.job.name}: {'released' if made.released else 'withheld'}"),
        "state": "released" if made.released else "withheld",
        "style": template("style.css"),
        "head": sections.head(made, units),
        "cutters": sections.cutters(made, units),
        "operations": sections.operations(made, units),
        "checks": sections.checks(made, units),
        "plan": plan_drawing(made.job, rows, units),
        "front": front_drawing(made.job, units),
        "setup": sections.setup(made, units),
        "travel": sections.travel(made, units),
        "bounds": text(sections.bounds_note(made, units)),
        "missing": text(missing),
        "data": as_json(page_data(made, units, rows)),
        "three": three,
        "scripts": "\n".join(template(name) for name in SCRIPTS),
    }
    return filled(template("report.html"), values)


def write_page(made: Made, path: str | Path) -> None:
    """Write the page, whole or not at all.

    Parameters
    ----------
    made : Made
    path : path
        Usually ``report.html`` in the job's output folder.

    Raises
    ------
    CannotWrite
        When the file cannot be written; what stood under the name before stands still.
    """
    files.write_text(Path(path), page_text(made))
