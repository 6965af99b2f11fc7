"""The tables of a job file: every key with its type, unit, range and default.

``docs/job-file.md`` lists the same. Ranges are sanity limits of bench-top work, generous on purpose: what is
outside is a slip of the pen (common practice).
"""

from __future__ import annotations

from typing import Annotated, Any, Final, Literal

from anticlast.file_schema import FileTable, Quantity, Says

Size = Annotated[float, Quantity("length", 0, 1000, above=True)]
Place = Annotated[float, Quantity("length", -1000, 1000)]
Degrees = Annotated[float, Quantity("degrees", -360, 360)]
Tilt = Annotated[float, Quantity("degrees", -60, 60)]
Curvature = Annotated[float, Quantity("curvature", 1e-6, 1)]
SpecificForce = Annotated[float, Quantity("N/mm^2", 0, 20000, above=True)]
HolderStep = Annotated[
    tuple[
        Annotated[float, Quantity("length", 0, 300, above=True)],
        Annotated[float, Quantity("length", 0, 500, above=True)],
    ],
    Says("[diameter, length], two numbers above 0"),
]
Point = Annotated[tuple[Place, Place], Says("[x, y], two numbers")]
Direction = Annotated[
    tuple[
        Annotated[float, Quantity("", -1e6, 1e6)],
        Annotated[float, Quantity("", -1e6, 1e6)],
        Annotated[float, Quantity("", -1e6, 1e6)],
    ],
    Says("[i, j, k], three numbers"),
]

JOB_TABLES: Final = ("job", "part", "stock", "machine", "cutter", "operation")
FINISH_PATTERNS: Final = ("raster", "graded", "even", "matched")
ROUGH_PATTERNS: Final = ("layers",)
OUTLINE_PATTERNS: Final = ("profile",)


class JobTable(FileTable):
    """``[job]``."""

    name: Annotated[str, Says("text in quotes with at least one letter or digit of A to Z, 0 to 9")]
    units: Literal["mm", "inch"] = "mm"


class PartTable(FileTable):
    """``[part]``; the outline is checked by itself."""

    a: Curvature
    b: Curvature | None = None
    rotate: Degrees = 0.0
    outline: Annotated[Any, Says("a table [part.outline] with the key shape")]


class OutlineTable(FileTable):
    """``[part.outline]`` or ``[stock.outline]``; which keys belong to a shape is checked apart."""

    shape: Literal["rectangle", "circle", "slot", "polygon", "file"]
    size: Annotated[tuple[Size, Size], Says("[width, height], two numbers above 0")] | None = None
    corner_radius: Annotated[float, Quantity("length", 0, 500)] | None = None
    diameter: Size | None = None
    points: (
        Annotated[tuple[Point, ...], Says("[[x, y], [x, y], [x, y], ...], at least three points")] | None
    ) = None
    holes: Annotated[tuple[tuple[Point, ...], ...], Says("a list of holes, each [[x, y], ...]")] | None = None
    path: Annotated[str, Says("the path of a .dxf or .svg file, in quotes")] | None = None
    center: Point = (0.0, 0.0)


# shape -> (keys it needs, keys it may have besides)
OUTLINE_KEYS: Final[dict[str, tuple[tuple[str, ...], tuple[str, ...]]]] = {
    "rectangle": (("size",), ("corner_radius", "center")),
    "circle": (("diameter",), ("center",)),
    "slot": (("size",), ("center",)),
    "polygon": (("points",), ("holes", "center")),
    "file": (("path",), ("center",)),
}


class StockTable(FileTable):
    """``[stock]``; its own outline, if any, is checked by itself."""

    material: Annotated[str, Says("the name of a material, in quotes")]
    top: Annotated[float, Quantity("length", -500, 500)]
    bottom: Annotated[float, Quantity("length", -500, 500)]
    margin: Annotated[float, Quantity("length", 0, 200)] = 0.0
    outline: Annotated[Any, Says("a table [stock.outline] with the key shape")] = None
    allowance: Annotated[float, Quantity("length", 0, 10)] | None = None
    mesh: Annotated[str, Says("the path of an .stl file, in quotes")] | None = None
    heights: Annotated[str, Says("the path of a .csv file, in quotes")] | None = None
    specific_force: (
        Annotated[tuple[SpecificForce, SpecificForce], Says("[lowest, highest], two numbers above 0")] | None
    ) = None


class MachineTable(FileTable):
    """``[machine]`` of a job."""

    file: Annotated[str, Says("the name of a machine or the path of a machine file, in quotes")]
    part_origin: Annotated[tuple[Place, Place, Place], Says("[x, y, z], three numbers")] | None = None
    clearance: Annotated[float, Quantity("length", 0.1, 200)] = 5.0
    turn: Degrees = 0.0


class CutterTable(FileTable):
    """``[[cutter]]``."""

    number: Annotated[int, Quantity("", 1, 9999, whole=True)]
    shape: Literal["ball", "bull", "flat"]
    diameter: Annotated[float, Quantity("length", 0.01, 100)]
    corner_radius: Annotated[float, Quantity("length", 0, 50, above=True)] | None = None
    flutes: Annotated[int, Quantity("", 1, 20, whole=True)] = 2
    flute_length: Annotated[float, Quantity("length", 0, 300, above=True)]
    shank_diameter: Annotated[float, Quantity("length", 0, 100, above=True)] | None = None
    stickout: Annotated[float, Quantity("length", 0, 500, above=True)]
    holder: Annotated[tuple[HolderStep, ...], Says("a list of steps, each [diameter, length]")] = ()
    plunge: bool | None = None
    ramp_angle: Annotated[float, Quantity("degrees", 0.1, 45)] = 3.0
    max_force: Annotated[float, Quantity("N", 0, 100000, above=True)] | None = None
    max_deflection: Annotated[float, Quantity("length", 0, 5, above=True)] | None = None


class OperationTable(FileTable):
    """``[[operation]]``; ``axis`` has three spellings and is checked apart."""

    does: Literal["rough", "semi-finish", "finish", "outline"]
    cutter: Annotated[int, Quantity("", 1, 9999, whole=True)]
    pattern: Literal["raster", "graded", "even", "matched", "layers", "profile"] | None = None
    direction: Degrees = 0.0
    scallop: Annotated[float, Quantity("length", 0.0001, 1)] | None = None
    stepover: Annotated[float, Quantity("length", 0.001, 100)] | None = None
    allowance: Annotated[float, Quantity("length", 0, 10)] = 0.0
    spindle: Annotated[float, Quantity("rev/min", 1, 200000)] | None = None
    cutting_speed: Annotated[float, Quantity("m/min", 1, 3000)] | None = None
    feed: Annotated[float, Quantity("feed", 0.1, 50000)] | None = None
    feed_per_tooth: Annotated[float, Quantity("length", 0.0001, 5)] | None = None
    lead: Tilt = 0.0
    lean: Tilt = 0.0
    axis: Annotated[Any, Says('"surface", "fixed" or a direction [i, j, k]')] = None
    fixed: Direction | None = None
    tolerance: Annotated[float, Quantity("length", 0.0001, 0.1)] = 0.002
    way: Literal["both", "one-way"] = "both"
    lead_margin: Annotated[float, Quantity("degrees", 0, 5)] = 0.05
    depth_of_cut: Annotated[float, Quantity("length", 0.01, 100)] | None = None
    width_of_cut: Annotated[float, Quantity("length", 0.01, 100)] | None = None
    slotting: bool = False
    reach: Annotated[float, Quantity("length", 0, 200)] | None = None
    depth: Annotated[float, Quantity("length", 0, 1000, above=True)] | None = None
    skin: Annotated[float, Quantity("length", 0, 10)] = 0.0
    tabs: Annotated[int, Quantity("", 0, 100, whole=True)] = 4
    tab_width: Annotated[float, Quantity("length", 0, 100, above=True)] | None = None
    tab_height: Annotated[float, Quantity("length", 0, 50, above=True)] = 1.0
    arcs: bool = False
