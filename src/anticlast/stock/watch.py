"""Bodies of the cutters whose distance from the stock is followed while it is cut."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Final

import numpy as np

if TYPE_CHECKING:
    from anticlast.cutter import Cutter
    from anticlast.records import Bools, Floats, Ints

# Poses are looked at no oftener than this share of the grid spacing along a body's travel.
STEP_SHARE: Final = 0.5
# Distances are told apart up to this much above the least one found so far; further off they only save looking.
_HORIZON_MM = 4.0


@dataclass(frozen=True, slots=True)
class Watch:
    """Bodies that are followed, and per band of the field what was found so far.

    Attributes
    ----------
    names : tuple of str
    cutters : tuple of int
        Cutter number of each body.
    bodies : (b, 4) [mm]
        Radius, low and high (heights over the tip), and how much it is grown all round.
    shape : (b,) int64
        Position of its cutter among the cutters.
    only_rapid : (b,) bool
    offset_mm : (b,)
        Height of the cutter's reference point over its tip.
    near : (bands, b), found : (bands, b, 7)
        Carried from run to run; see ``_field_kernels.watch_body``.
    """

    names: tuple[str, ...]
    cutters: tuple[int, ...]
    bodies: Floats
    shape: Ints
    only_rapid: Bools
    offset_mm: Floats
    near: Floats
    found: Floats

    @classmethod
    def over(cls, cutters: Sequence[Cutter], bands: int, farthest_mm: float) -> Watch:
        """Return the bodies of all cutters: shank and holder always, the cutting end at rapid.

        Distances above ``farthest_mm`` are not told apart from it.
        """
        names: list[str] = []
        numbers, rows, shape, rapid, offset = [], [], [], [], []
        for position, cutter in enumerate(cutters):
            corner = cutter.corner_radius_mm
            end = (
                "cutting end",
                cutter.radius_mm - corner,
                corner,
                max(corner, cutter.flute_length_mm - corner),
                corner,
                True,
            )
            rigid = [
                (body.name, body.radius_mm, body.low_mm, body.high_mm, 0.0, False)
                for body in cutter.bodies()
                if body.name != "flutes"
            ]
            for name, radius, low, high, grown, at_rapid in (end, *rigid):
                names.append(name)
                numbers.append(cutter.number)
                rows.append((radius, low, high, grown))
                shape.append(position)
                rapid.append(at_rapid)
                offset.append(corner)
        found = np.zeros((bands, len(rows), 7))
        found[:, :, 0], found[:, :, 1], found[:, :, 5] = farthest_mm, -1.0, -1.0
        return cls(
            tuple(names), tuple(numbers), np.array(rows, dtype=np.float64).reshape(-1, 4), np.array(shape, np.int64),
            np.array(rapid, np.bool_), np.array(offset, dtype=np.float64), np.full((bands, len(rows)), -1e30), found,
        )  # fmt: skip

    @classmethod
    def nothing(cls, bands: int) -> Watch:
        """Return a watch over no body at all."""
        return cls.over((), bands, 0.0)

    def of_band(self, band: int) -> tuple[Floats, Floats]:
        """Return the arrays that one band writes to."""
        return self.near[band], self.found[band]

    def arguments(self, rapid: Bools, spacing_mm: float) -> tuple:
        """Return what the kernel takes."""
        return (
            self.bodies, self.shape, self.only_rapid, rapid, self.offset_mm, STEP_SHARE * spacing_mm, _HORIZON_MM,
            self.found[:, :, 0].min(axis=0, initial=np.inf),
        )  # fmt: skip
