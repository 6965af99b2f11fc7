"""A plain height raster that an upright cutter cuts, move by move: brute force against which roughing is held."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from anticlast.outline import Outline
from anticlast.records import CutterPath, Purpose

NOTHING = -1000.0
_FRONT = np.linspace(-math.pi / 2, math.pi / 2, 121)


@dataclass
class Cuts:
    """What single short moves met: how wide and over what angle the cutter's front was in stock, and its place."""

    width_mm: np.ndarray
    angle_deg: np.ndarray
    tip_mm: np.ndarray


class RasterStock:
    """Heights over the plan of a blank; cut by a cylinder of a radius, which for a ball or bull is its widest disc."""

    def __init__(self, blank: Outline, top_mm: float, cell_mm: float = 0.25) -> None:
        x0, y0, x1, y1 = blank.bounds
        self.cell = cell_mm
        self.x = np.arange(x0 - 2.0 + 0.5 * cell_mm, x1 + 2.0, cell_mm)
        self.y = np.arange(y0 - 2.0 + 0.5 * cell_mm, y1 + 2.0, cell_mm)
        self.xy = np.stack(np.meshgrid(self.x, self.y), axis=-1)
        inside = blank.contains(self.xy.reshape(-1, 2)).reshape(self.xy.shape[:2])
        self.height = np.where(inside, top_mm, NOTHING)

    def at(self, xy: np.ndarray) -> np.ndarray:
        """Height at the nodes nearest to points; nothing outside."""
        i = np.round((xy[:, 0] - self.x[0]) / self.cell).astype(int)
        j = np.round((xy[:, 1] - self.y[0]) / self.cell).astype(int)
        inside = (i >= 0) & (i < self.x.size) & (j >= 0) & (j < self.y.size)
        return np.where(inside, self.height[np.where(inside, j, 0), np.where(inside, i, 0)], NOTHING)

    def cut(self, tip: np.ndarray, radius_mm: float) -> float:
        """Lower everything under a disc to the tip; return the volume taken."""
        i0, i1 = np.searchsorted(self.x, (tip[0] - radius_mm, tip[0] + radius_mm))
        j0, j1 = np.searchsorted(self.y, (tip[1] - radius_mm, tip[1] + radius_mm))
        window = self.height[j0:j1, i0:i1]
        away = (self.x[None, i0:i1] - tip[0]) ** 2 + (self.y[j0:j1, None] - tip[1]) ** 2
        met = (away <= radius_mm**2) & (window > tip[2])
        taken = float((np.minimum(window[met] - tip[2], 1e3)).sum()) * self.cell**2
        window[met] = tip[2]
        return taken

    def run(
        self, path: CutterPath, radius_mm: float, step_mm: float = 0.3
    ) -> tuple[Cuts, dict[Purpose, float]]:
        """Make all moves of a path; return what its cutting moves met, and the volume each kind of move took."""
        width, angle, places = [], [], []
        volume = dict.fromkeys(Purpose, 0.0)
        for stretch in path.stretches:
            tips = stretch.tip_mm
            for k in range(1, len(tips)):
                step = tips[k] - tips[k - 1]
                count = max(1, math.ceil(float(np.linalg.norm(step)) / step_mm))
                level = step[2] == 0.0 and stretch.purpose[k] == Purpose.CUT
                heading = math.atan2(step[1], step[0]) + _FRONT
                front = (radius_mm - 0.75 * self.cell) * np.column_stack((np.cos(heading), np.sin(heading)))
                for share in np.arange(1, count + 1) / count:
                    tip = tips[k - 1] + share * step
                    if level:
                        met = self.at(tip[:2] + front) > tip[2] + 1e-6
                        if met.any():
                            width.append(np.ptp(np.sin(_FRONT[met])) * radius_mm)
                            angle.append(180.0 * met.mean())
                            places.append(tip)
                    volume[Purpose(int(stretch.purpose[k]))] += self.cut(tip, radius_mm)
        return Cuts(np.array(width), np.array(angle), np.array(places).reshape(-1, 3)), volume
