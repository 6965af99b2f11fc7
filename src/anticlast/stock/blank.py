"""The blank as a stock field: flat prism, even allowance, an earlier operation's mesh, or measured heights."""

from __future__ import annotations

from typing import TYPE_CHECKING, Final

import numpy as np

from anticlast.errors import BadInput, Fault, NotConverged
from anticlast.saddle import Saddle
from anticlast.stock import _mesh_kernels
from anticlast.stock.field import PIECES, StockField
from anticlast.stock.grid import ColumnGrid, choose_spacing_mm, turned_points
from anticlast.stock.measured import read_heights
from anticlast.tolerances import SAME_POINT_MM

if TYPE_CHECKING:
    from anticlast.records import Floats, Job, Stock

MM_PER_INCH: Final = 25.4  # exact
# How far a mesh or measured heights may stand out of the prism that the job gives: dust on the table, not stock.
STAND_OUT_MM: Final = 0.05
_MOST_STEPS = 200


def blank_field(job: Job, spacing_mm: float | None = None) -> StockField:
    """Return the blank before any cutting.

    Parameters
    ----------
    job : Job
    spacing_mm : float, optional
        Spacing of the columns; ``choose_spacing_mm`` if not given.

    Raises
    ------
    BadInput
        The mesh or the measured heights cannot be used.
    NotConverged
        An allowance so large that the surface moved out by it folds over.
    """
    stock = job.stock
    grid = ColumnGrid.over(stock.outline, choose_spacing_mm(job) if spacing_mm is None else spacing_mm)
    area = grid.areas_mm2(stock.outline)
    to_mm = MM_PER_INCH if job.units == "inch" else 1.0
    if stock.mesh is not None:
        return _from_mesh(stock, grid, to_mm)
    x, y = grid.middles_xy()
    if stock.heights is not None:
        measured = read_heights(stock.heights, to_mm)
        _check_heights(stock, measured.z_mm, to_mm)
        top = measured.at(x, y, area > 0.0)
    elif stock.allowance_mm is not None:
        there = area > 0.0
        top = np.zeros(grid.shape)
        top[there] = offset_heights_mm(
            Saddle.of(job.part), np.column_stack((x[there], y[there])), stock.allowance_mm
        )
        top = np.minimum(top, stock.top_mm)
    else:
        top = np.full(grid.shape, stock.top_mm)
    return StockField.of_heights(grid, area, stock.bottom_mm, top)


def offset_heights_mm(saddle: Saddle, xy: Floats, distance_mm: float) -> Floats:
    """Return the height of the surface moved out along its normal, over plan points (n, 2), (n,) [mm].

    The foot q with q + d n_xy(q) = xy is iterated, which closes in by d times the curvature a step (derived here).

    Raises
    ------
    NotConverged
        The moved surface folds over: the distance reaches the radius of curvature.
    """
    foot = xy.copy()
    gap = np.inf
    for _ in range(_MOST_STEPS):
        normal = saddle.normal(foot)
        step = xy - distance_mm * normal[:, :2] - foot
        gap = float(np.abs(step).max(initial=0.0))
        foot = foot + step
        if gap <= SAME_POINT_MM:
            break
    else:
        raise NotConverged("the height of the blank's allowance", gap, SAME_POINT_MM)
    return np.asarray(saddle.height(foot[:, 0], foot[:, 1]) + distance_mm * saddle.normal(foot)[:, 2])


def _check_heights(stock: Stock, z_mm: Floats, to_mm: float) -> None:
    high, low = float(z_mm.max()), float(z_mm.min())
    if high > stock.top_mm + STAND_OUT_MM:
        message = (
            f"found a height of {high / to_mm:.4g}, above the top of the blank in the job file, {stock.top_mm / to_mm:.4g}: "
            "rapid moves trust that top; raise it"
        )
        raise BadInput(Fault(str(stock.heights), 0, "z", message))
    if low <= stock.bottom_mm:
        message = f"found a height of {low / to_mm:.4g}; needs more than the blank's bottom, {stock.bottom_mm / to_mm:.4g}"
        raise BadInput(Fault(str(stock.heights), 0, "z", message))


# ---------------------------------------------------------------------------------------- mesh


def _from_mesh(stock: Stock, grid: ColumnGrid, to_mm: float) -> StockField:
    vertices, faces = _load_mesh(stock, to_mm)
    points = turned_points(vertices)
    corners = np.ascontiguousarray(points[faces])
    place = (grid.u0_mm, grid.v0_mm, grid.spacing_mm)
    crossings = np.zeros(grid.shape, np.int64)
    none = np.empty(0)
    _mesh_kernels.cross(corners, place, crossings, np.zeros(0, np.int64), none, none, False)
    first = np.concatenate(([0], np.cumsum(crossings.ravel())))
    height, sense = np.empty(first[-1]), np.empty(first[-1])
    crossings[:] = 0
    _mesh_kernels.cross(corners, place, crossings, first, height, sense, True)
    high, low = np.zeros((PIECES, *grid.shape)), np.zeros((PIECES, *grid.shape))
    count = np.zeros(grid.shape, np.int64)
    filled = np.zeros(grid.shape)
    _mesh_kernels.stack(first, height, sense, high, low, count, filled)
    high, low = np.minimum(high, stock.top_mm), np.maximum(low, stock.bottom_mm)
    # A column is there when its middle is inside the mesh, and stands for its whole cell: right to a few cells of wall.
    inside = np.where(count > 0, grid.spacing_mm**2, 0.0)
    field = StockField(grid, high, low, count, inside, np.full(grid.shape, -1, np.int64))
    field.left_in_mm3 = float(np.sum(filled * inside))
    return field


def _load_mesh(stock: Stock, to_mm: float) -> tuple[Floats, np.ndarray]:
    """Return vertices (n, 3) [mm] and faces (m, 3) of a closed solid inside the prism of the blank."""
    import trimesh

    file = str(stock.mesh)

    def fault(message: str) -> BadInput:
        return BadInput(Fault(file, 0, "", message))

    try:
        mesh = trimesh.load(file, file_type="stl", force="mesh", process=True)
    except Exception as error:  # the readers of mesh files raise whatever went wrong inside them
        raise fault(f"cannot be read as STL ({type(error).__name__}: {error})") from error
    if not len(mesh.faces):
        raise fault("holds no triangles; needs a closed solid")
    if not (mesh.is_watertight and mesh.is_winding_consistent):
        raise fault(
            "is not a closed solid: it has open edges or triangles facing both ways; needs every edge shared by two"
        )
    vertices = np.asarray(mesh.vertices, dtype=np.float64) * to_mm
    if mesh.volume < 0.0:
        raise fault("is inside out: its triangles face inwards")
    low, high = vertices.min(axis=0), vertices.max(axis=0)
    if low[2] < stock.bottom_mm - STAND_OUT_MM or high[2] > stock.top_mm + STAND_OUT_MM:
        raise fault(
            f"reaches from z {low[2] / to_mm:.4g} to {high[2] / to_mm:.4g}; needs to lie within the blank's bottom and top,"
            f" {stock.bottom_mm / to_mm:.4g} to {stock.top_mm / to_mm:.4g}, which rapid moves trust"
        )
    room = stock.outline.grown(STAND_OUT_MM, corners="mitre")
    outside = np.flatnonzero(~room.contains(vertices[:, :2]))
    if outside.size:
        x, y = vertices[outside[0], :2] / to_mm
        raise fault(
            f"reaches outside the blank's outline, at [{x:.4g}, {y:.4g}]; give it more margin or its own outline"
        )
    return vertices, np.asarray(mesh.faces)
