"""What all pictures share: their look, their units, and files that come out the same byte for byte."""

from __future__ import annotations

import io
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import shapely

from anticlast.errors import BadInput, Fault
from anticlast.files import beside

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from anticlast.outline import Outline

INK = "#1b2430"
QUIET = "#566273"
FAINT = "#c3cad2"
PAPER = "#ffffff"
BLANK = "#e9e4d8"
STEEL = "#9aa7b5"
HOLDER = "#6d7a89"
# Told apart by lightness and by line style as well: tightest, widest, flat rule.
TIGHT = "#b3400a"
WIDE = "#0b5c8a"
DOTS_PER_INCH = 150

_LOOK: dict[str, Any] = {
    "font.family": ["DejaVu Sans"],
    "font.size": 9.0,
    "axes.edgecolor": QUIET,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.7,
    "axes.titlesize": 9.5,
    "axes.titlelocation": "left",
    "axes.titlecolor": INK,
    "axes.unicode_minus": True,
    "text.color": INK,
    "xtick.color": QUIET,
    "ytick.color": QUIET,
    "xtick.labelsize": 8.0,
    "ytick.labelsize": 8.0,
    "figure.facecolor": PAPER,
    "savefig.facecolor": PAPER,
    "hatch.linewidth": 0.5,
    # Text stays text in SVG: smaller, and it can be searched and read out. A fixed salt keeps its ids the
    # same.
    "svg.fonttype": "none",
    "svg.hashsalt": "anticlast",
}


@contextmanager
def look() -> Iterator[None]:
    """Draw and write in the project's own look, whatever the user's matplotlib settings say."""
    import matplotlib

    with matplotlib.rc_context():
        matplotlib.rcdefaults()
        matplotlib.rcParams.update(_LOOK)
        yield


def check_suffix(path: Path) -> str:
    """Return ``"png"`` or ``"svg"``, or raise ``BadInput``."""
    suffix = path.suffix.lower().lstrip(".")
    if suffix not in {"png", "svg"}:
        raise BadInput(
            Fault(str(path), 0, "", f"found the ending {path.suffix!r}; a picture is .png or .svg")
        )
    return suffix


def save(figure: Figure, path: Path) -> None:
    """Write a figure whole or not at all, without date or version, so that the same picture is the same file.

    Raises
    ------
    BadInput
        The path ends in neither ``.png`` nor ``.svg``.
    CannotWrite
        The file cannot be written.
    """
    suffix = check_suffix(path)
    metadata = {"Software": None} if suffix == "png" else {"Date": None, "Creator": None}
    held = io.BytesIO()
    figure.savefig(held, format=suffix, dpi=DOTS_PER_INCH, metadata=metadata)
    with beside(path, text=False) as (stream, _):
        stream.write(held.getbuffer())  # type: ignore[arg-type]


def axes_at(figure: Figure, left_in: float, top_in: float, width_in: float, height_in: float) -> Any:
    """Return axes at a place on the sheet, inches from its top left corner."""
    wide, tall = figure.get_size_inches()
    bottom = 1.0 - (top_in + height_in) / tall
    return figure.add_axes((left_in / wide, bottom, width_in / wide, height_in / tall))


def outline_path(outline: Outline, scale: float) -> Any:
    """Return a matplotlib path of an outline, holes included, lengths times ``scale``."""
    from matplotlib.path import Path as Shape

    shapes = []
    for part in shapely.get_parts(shapely.orient_polygons(outline.polygon)):
        for ring in (part.exterior, *part.interiors):
            shapes.append(Shape(np.asarray(ring.coords)[:, :2] * scale, closed=True))
    return Shape.make_compound_path(*shapes)


def round_length(about: float) -> float:
    """Return the largest of 1, 2, 5 times a power of ten that is not above a length."""
    power = 10.0 ** np.floor(np.log10(about))
    return float(next(power * step for step in (5.0, 2.0, 1.0) if power * step <= about * (1.0 + 1e-9)))


def scale_bar(axes: Any, left: float, base: float, length: float, unit: str, thick: float) -> None:
    """Draw a bar of a length in two halves, dark and light, with the length in words at its end."""
    from matplotlib.patches import Rectangle

    for half, colour in ((0, INK), (1, PAPER)):
        axes.add_patch(
            Rectangle(
                (left + half * length / 2, base), length / 2, thick, facecolor=colour, edgecolor=INK, lw=0.7
            )
        )
    axes.text(left + length * 1.06, base + thick / 2, f"{length:g} {unit}", va="center", ha="left", size=8.5)
