"""Measured heights of a blank's top, read from a CSV file of a regular grid."""

from __future__ import annotations

import csv
import math
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Final

import numpy as np

from anticlast.errors import BadInput, Fault

if TYPE_CHECKING:
    from anticlast.records import Bools, Floats

_HEADING: Final = ("x", "y", "z")
_MOST_ROWS: Final = 4_000_000
# Places of a regular grid may be written this far off it, as a share of the spacing: rounding in the file.
_OFF_GRID: Final = 0.02


@dataclass(frozen=True, slots=True)
class Measured:
    """Heights on a regular grid, part coordinates.

    Attributes
    ----------
    file : Path
    x_mm, y_mm : (n,), (m,)
        Ascending.
    z_mm : (m, n)
    to_mm : float
        Length of the file's unit.
    """

    file: Path
    x_mm: Floats
    y_mm: Floats
    z_mm: Floats
    to_mm: float

    def at(self, x: Floats, y: Floats, needed: Bools) -> Floats:
        """Return heights over plan points, bilinear, of any shape; up to half a step outside, those of the nearest edge.

        Raises
        ------
        BadInput
            A needed point lies further outside.
        """
        places = []
        for name, line, value in (("x", self.x_mm, x), ("y", self.y_mm, y)):
            step = line[1] - line[0]
            place = (value - line[0]) / step
            outside = needed & ((place < -0.5) | (place > len(line) - 0.5))
            if np.any(outside):
                low, high = (float(f(value[needed])) / self.to_mm for f in (np.min, np.max))
                message = (
                    f"heights are given from {name} {line[0] / self.to_mm:.4g} to {line[-1] / self.to_mm:.4g}, but the blank"
                    f" reaches from {low:.4g} to {high:.4g}; needs heights over the whole blank"
                )
                raise BadInput(Fault(str(self.file), 0, name, message))
            places.append(np.clip(place, 0.0, len(line) - 1.0))
        i, j = (
            np.minimum(place.astype(int), len(line) - 2)
            for place, line in zip(places, (self.x_mm, self.y_mm), strict=True)
        )
        s, t = places[0] - i, places[1] - j
        z = self.z_mm
        low = (1.0 - s) * z[j, i] + s * z[j, i + 1]
        high = (1.0 - s) * z[j + 1, i] + s * z[j + 1, i + 1]
        return np.asarray((1.0 - t) * low + t * high)


def read_heights(path: Path, to_mm: float) -> Measured:
    """Read a CSV file of heights: the heading ``x,y,z``, then a row for each place of a regular grid, in any order.

    Parameters
    ----------
    path : Path
    to_mm : float
        Length of the file's unit.

    Raises
    ------
    BadInput
        With file, line and column of what is wrong.
    """
    rows = _rows(path)
    lines = np.array([line for line, _ in rows])
    values = np.array([value for _, value in rows])
    x, y = (_grid_line(path, lines, values[:, column], _HEADING[column]) for column in (0, 1))
    i, j = (
        np.rint((values[:, c] - line[0]) / (line[1] - line[0])).astype(int) for c, line in ((0, x), (1, y))
    )
    z = np.full((len(y), len(x)), np.nan)
    flat = j * len(x) + i
    order = np.argsort(flat, kind="stable")
    again = np.flatnonzero(np.diff(flat[order]) == 0)
    if again.size:
        one, two = lines[order[again[0]]], lines[order[again[0] + 1]]
        raise BadInput(
            Fault(
                str(path), int(two), "", f"the same place as on line {one}; needs one height for each place"
            )
        )
    z[j, i] = values[:, 2]
    missing = np.argwhere(np.isnan(z))
    if missing.size:
        at_j, at_i = missing[0]
        message = (
            f"no height is given at x {x[at_i]:.6g}, y {y[at_j]:.6g} ({len(missing)} places are missing);"
            f" needs one for each of {len(x)} by {len(y)} places"
        )
        raise BadInput(Fault(str(path), 0, "", message))
    return Measured(path, x * to_mm, y * to_mm, z * to_mm, to_mm)


def _rows(path: Path) -> list[tuple[int, tuple[float, float, float]]]:
    found: list[tuple[int, tuple[float, float, float]]] = []
    try:
        with path.open(encoding="utf-8-sig", newline="") as stream:
            reader = csv.reader(stream)
            heading = next(reader, [])
            if tuple(name.strip().lower() for name in heading) != _HEADING:
                raise BadInput(
                    Fault(str(path), 1, "", f"found the heading {','.join(heading)[:60]!r}; needs x,y,z")
                )
            for row in reader:
                if not row or all(not cell.strip() for cell in row):
                    continue
                found.append((reader.line_num, _numbers(path, reader.line_num, row)))
                if len(found) > _MOST_ROWS:
                    raise BadInput(
                        Fault(str(path), reader.line_num, "", f"more than {_MOST_ROWS} heights; needs fewer")
                    )
    except (OSError, UnicodeDecodeError, csv.Error) as error:
        raise BadInput(Fault(str(path), 0, "", f"cannot be read ({error})")) from error
    if len(found) < 4:
        raise BadInput(
            Fault(str(path), 0, "", f"found {len(found)} heights; needs at least two by two places")
        )
    return found


def _numbers(path: Path, line: int, row: list[str]) -> tuple[float, float, float]:
    if len(row) != len(_HEADING):
        raise BadInput(Fault(str(path), line, "", f"found {len(row)} columns; needs three: x,y,z"))
    numbers = []
    for name, cell in zip(_HEADING, row, strict=True):
        try:
            value = float(cell)
        except ValueError:
            value = math.nan
        if not (math.isfinite(value) and abs(value) <= 1e5):
            raise BadInput(Fault(str(path), line, name, f"found {cell.strip()[:40]!r}; needs a number"))
        numbers.append(value)
    return numbers[0], numbers[1], numbers[2]


def _grid_line(path: Path, lines: Floats, values: Floats, name: str) -> Floats:
    """Return the evenly spaced places that all values of a column stand on."""
    order = np.argsort(values, kind="stable")
    ordered = values[order]
    low, high = float(ordered[0]), float(ordered[-1])
    gaps = np.diff(ordered)
    apart = gaps[gaps > 1e-3 * max(1e-9, (high - low) / max(1, len(values)))]
    if not apart.size:
        raise BadInput(
            Fault(str(path), int(lines[0]), name, f"all rows have {name} {low:g}; needs at least two places")
        )
    steps = max(1, round((high - low) / float(np.median(apart[apart > 0.5 * apart.max()]))))
    line = np.linspace(low, high, steps + 1)
    place = (values - low) / (line[1] - line[0])
    off = np.abs(place - np.rint(place)) > _OFF_GRID
    if np.any(off):
        row = int(np.flatnonzero(off)[0])
        message = f"found {values[row]:g}; needs places evenly {line[1] - line[0]:.6g} apart, as on most rows"
        raise BadInput(Fault(str(path), int(lines[row]), name, message))
    return line
