"""Checks of the keys that say how an operation roughs or cuts the outline: depth, width, reach, tabs."""

from __future__ import annotations

from typing import Final

from anticlast.file_schema import Checked, Units
from anticlast.job_checks import length_text
from anticlast.job_schema import CutterTable, OperationTable, StockTable

# key -> what an operation has to do for the key to mean something
_BELONGS: Final[dict[str, tuple[str, ...]]] = {
    "depth_of_cut": ("rough", "outline"),
    "width_of_cut": ("rough",),
    "slotting": ("rough",),
    "reach": ("rough",),
    "depth": ("outline",),
    "skin": ("outline",),
    "tabs": ("outline",),
    "tab_width": ("outline",),
    "tab_height": ("outline",),
}


def check_cut(
    operation: Checked[OperationTable],
    cutters: list[Checked[CutterTable]],
    stock: Checked[StockTable],
    units: Units,
) -> None:
    """Keys must belong to what the operation does, and depth and width fit cutter and blank."""
    does = operation.get("does")
    if does is None:
        return
    for key, owners in _BELONGS.items():
        if key in operation.given and does not in owners:
            known = " or ".join(f'"{owner}"' for owner in owners)
            operation.fault(
                key, f'has no place in an operation that does "{does}"; only in one that does {known}'
            )
    cutter = next((item for item in cutters if item.get("number") == operation.get("cutter")), None)
    if cutter is not None:
        _check_sizes(operation, cutter, units)
    if does == "outline":
        _check_outline(operation, cutter, stock, units)


def _check_sizes(operation: Checked[OperationTable], cutter: Checked[CutterTable], units: Units) -> None:
    depth, flutes = operation.get("depth_of_cut"), cutter.get("flute_length")
    if depth is not None and flutes is not None and depth > flutes:
        limit = length_text(flutes, units)
        operation.fault(
            "depth_of_cut",
            f"found {length_text(depth, units)}; needs at most the flute length of the cutter, {limit}",
        )
    width, diameter, reach = operation.get("width_of_cut"), cutter.get("diameter"), operation.get("reach")
    if reach is not None and diameter is not None and reach < diameter:
        operation.fault(
            "reach",
            f"found {length_text(reach, units)}; needs at least the diameter of the cutter, {length_text(diameter, units)}, "
            "so that it gets down to the surface at the edge of the outline",
        )
    if width is not None and "stepover" in operation.given:
        operation.fault("width_of_cut", "given besides stepover; needs one of the two, not both")
    if width is None or diameter is None:
        return
    limit = diameter if operation.get("slotting") else 0.5 * diameter
    if width > limit:
        hint = (
            "the diameter of the cutter"
            if operation.get("slotting")
            else "half the diameter without slotting = true"
        )
        operation.fault(
            "width_of_cut",
            f"found {length_text(width, units)}; needs at most {hint}, {length_text(limit, units)}",
        )


def _check_outline(
    operation: Checked[OperationTable],
    cutter: Checked[CutterTable] | None,
    stock: Checked[StockTable],
    units: Units,
) -> None:
    if cutter is not None and cutter.get("shape") in ("ball", "bull"):
        operation.fault(
            "cutter",
            f'found a {cutter.get("shape")} cutter; an operation that does "outline" needs a flat one',
        )
    for key in ("scallop", "stepover"):
        if key in operation.given:
            operation.fault(key, 'has no place in an operation that does "outline"')
    depth, top, bottom = operation.get("depth"), stock.get("top"), stock.get("bottom")
    if "depth" in operation.given and "skin" in operation.given:
        operation.fault("skin", "given besides depth; needs one of the two, not both")
    if top is None or bottom is None or not bottom < top:
        return
    if depth is not None and depth > top - bottom:
        limit = length_text(top - bottom, units)
        operation.fault(
            "depth", f"found {length_text(depth, units)}; needs at most the height of the blank, {limit}"
        )
    skin = operation.get("skin")
    if skin is not None and skin >= top - bottom:
        limit = length_text(top - bottom, units)
        operation.fault(
            "skin", f"found {length_text(skin, units)}; needs less than the height of the blank, {limit}"
        )
