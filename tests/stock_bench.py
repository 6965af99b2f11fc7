"""Hand-made blanks, cutters and motions for the tests of the stock."""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from anticlast import outline
from anticlast.cutter import Cutter
from anticlast.outline import Outline
from anticlast.records import Floats, PartMotion
from anticlast.saddle import Saddle
from anticlast.stock.engagement import LONGEST_CELLS, Engagement, follow
from anticlast.stock.field import StockField, runs
from anticlast.stock.grid import ColumnGrid
from anticlast.stock.sweep import Segments, take_segments

FLAT = Cutter(1, "flat", 3.0, 0.0, 2, 25.0, 3.0, 40.0)
BALL = Cutter(1, "ball", 3.0, 3.0, 2, 25.0, 3.0, 40.0)
BULL = Cutter(1, "bull", 3.0, 1.0, 2, 25.0, 3.0, 40.0)
SADDLE = Saddle(0.005, 0.005, 0.0)
BLOCK = outline.rectangle((60.0, 40.0))


def block(
    spacing_mm: float = 0.25, top_mm: float = 10.0, bottom_mm: float = -10.0, shape: Outline = BLOCK
) -> StockField:
    grid = ColumnGrid.over(shape, spacing_mm)
    return StockField.of_heights(grid, grid.areas_mm2(shape), bottom_mm, np.full(grid.shape, top_mm))


def motion(
    tips: npt.ArrayLike, axes: npt.ArrayLike | None = None, rapid: npt.ArrayLike | None = None
) -> PartMotion:
    """Straight moves of T1 between tips; line n + 1 of the program leads to tip n."""
    tip = np.array(tips, dtype=np.float64)
    count = len(tip)
    axis = np.tile([0.0, 0.0, 1.0], (count, 1)) if axes is None else np.array(axes, dtype=np.float64)
    return PartMotion(
        tip_mm=tip,
        axis=axis / np.linalg.norm(axis, axis=1, keepdims=True),
        line=np.arange(1, count + 1),
        rapid=np.zeros(count, bool) if rapid is None else np.array(rapid, dtype=bool),
        tool=np.ones(count, np.int64),
        motion=np.arange(count) - 1,
        fraction=np.concatenate(([0.0], np.ones(count - 1))),
    )


def line(start: tuple[float, float, float], end: tuple[float, float, float], moves: int) -> Floats:
    share = np.linspace(0.0, 1.0, moves + 1)[:, None]
    return np.array(start) * (1.0 - share) + np.array(end) * share


def cut(field: StockField, moves: PartMotion, cutter: Cutter) -> float:
    """Cut, and return the volume taken."""
    segments = take_segments(moves, [cutter])
    return float(
        sum(field.run(segments, [cutter], SADDLE, span).volume_mm3.sum() for span in runs(segments, None))
    )


def engage(
    field: StockField, moves: PartMotion, cutter: Cutter, *, feed_mm_min: float = 600.0, rpm: float = 6000.0,
    laws: npt.ArrayLike = ((0.0, 0.0, 1000.0, 0.0),), along_normal: bool = False,
) -> tuple[Engagement, Segments]:  # fmt: skip
    segments = take_segments(moves, [cutter], longest_mm=LONGEST_CELLS * field.grid.spacing_mm)
    count = len(segments)
    found = follow(
        field, segments, [cutter], SADDLE, seconds=60.0 * segments.length_mm / feed_mm_min, rpm=np.full(count, rpm),
        laws=np.array(laws, dtype=np.float64).reshape(-1, 4), along_normal=np.full(count, along_normal),
    )  # fmt: skip
    return found, segments


def profile_mm(cutter: Cutter, height_mm: Floats) -> Floats:
    """Radius of a cutter at heights over its tip."""
    corner = cutter.corner_radius_mm
    low = np.minimum(height_mm, corner)
    return cutter.radius_mm - corner + np.sqrt(np.maximum(0.0, corner**2 - (corner - low) ** 2))


def slot_volume_mm3(cutter: Cutter, length_mm: float, depth_mm: float) -> float:
    """Volume of a straight slot with the cutter's own ends: at each height, 2 w L + pi w^2 with w the profile (closed form)."""
    height = (np.arange(40000) + 0.5) / 40000 * depth_mm
    width = profile_mm(cutter, height)
    return float(np.mean(2.0 * width * length_mm + math.pi * width**2) * depth_mm)
