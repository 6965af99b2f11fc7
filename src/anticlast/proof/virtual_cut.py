"""The virtual cut: how high material is left over the finished surface, and how deep the cutter went below it.

Heights are measured along the surface normal, at nodes on the finished surface and, where it matters, between them:
`measure` returns the highest residual it found *and* a bound that no place inside the outline exceeds. Derivations:
docs/theory-proof.md.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from anticlast.proof import _kernels, _reach_kernels
from anticlast.proof.gouge import Gouge, deepest_gouge
from anticlast.proof.nodes import Nodes, lay_nodes, part_depths_mm
from anticlast.proof.pieces import Pieces, take_pieces
from anticlast.proof.threads import in_threads, spans
from anticlast.saddle import Saddle
from anticlast.tolerances import BOUND_SLACK_MM, MEASURE_MM, SAME_POINT_MM, UNCUT_MM

if TYPE_CHECKING:
    from anticlast.records import Bools, Bytes, Floats, Job, PartMotion, ScallopMap

# Grid chosen without being asked: this fine up to the most steps along the longer side, and at least so many steps.
_GRID_MM, _MOST_STEPS, _LEAST_STEPS = 0.1, 1000, 200
# Most quarterings of triangles in one run of the search for the peak: about a minute's work; the bound stays honest.
_QUARTERINGS = 300_000
# Most trials of nodes with pieces, some seconds' work, and how many a piece deep in the part counts for.
_MOST_TRIALS, _DEEP_TRIALS = 3e8, 6.0
_MAP_SIDE = 400
# Crests that one point of the map should hold, and points along the longer side that it should have all the same.
_MAP_CRESTS, _MAP_LEAST = 4.0, 40


@dataclass(frozen=True, slots=True)
class Cut:
    """What the virtual cut found.

    Attributes
    ----------
    grid_mm : float
    nodes : Nodes
    height_mm : (n,)
        Residual along the normal at each node; negative = gouge. Where no cutter came below the start, the start.
    owner : (n,) int32
        Row of the part motion whose piece left the residual, -1 where none did.
    highest_mm, bound_mm : float
        Highest residual found over the outline, and what no residual exceeds.
    highest_at_mm : (float, float)
        Where, part coordinates.
    highest_piece : int
        Row of the part motion, -1 if no cutter came there.
    gouge : Gouge
    uncut_area_mm2 : float
        Plan area that no cutter reached below the starting stock, or below ``UNCUT_MM`` over the wanted surface.
    """

    grid_mm: float
    nodes: Nodes
    height_mm: Floats
    owner: npt.NDArray[np.int32]
    highest_mm: float
    bound_mm: float
    highest_at_mm: tuple[float, float]
    highest_piece: int
    gouge: Gouge
    uncut_area_mm2: float


def choose_grid_mm(job: Job) -> float:
    """Return the grid spacing [mm] for a job: 0.1 mm, but 200 to 1000 steps along the outline's longer side.

    The spacing does not limit the accuracy of the highest residual, which is searched for between nodes; it sets how
    much of that search there is.
    """
    x0, y0, x1, y1 = job.part.outline.bounds
    side = max(x1 - x0, y1 - y0)
    return float(min(max(_GRID_MM, side / _MOST_STEPS), side / _LEAST_STEPS))


def measure(
    job: Job,
    motion: PartMotion,
    grid_mm: float | None = None,
    *,
    wanted_mm: float = 0.0,
    moving: Bools | None = None,
) -> Cut:
    """Cut the stock with read-back motion and measure what stands over the finished surface.

    Parameters
    ----------
    job : Job
        Part, stock and cutters are used; operations are not.
    motion : PartMotion
        Part coordinates. Rapids cut like feed moves.
    grid_mm : float, optional
        Spacing of the nodes [mm]; `choose_grid_mm` if not given.
    wanted_mm : float
        Height over the finished surface that the last operation is to leave [mm], >= 0.
    moving : (m,) bool, optional
        Rows of the part motion to cut with; all that move if not given.

    Returns
    -------
    Cut

    Raises
    ------
    NotConverged
        From the geometry, if an iteration stalls.
    """
    grid = choose_grid_mm(job) if grid_mm is None else grid_mm
    saddle = Saddle.of(job.part)
    pieces = take_pieces(motion, job.cutters, saddle, moving)
    field = _Field(job, saddle, lay_nodes(job.part.outline, saddle, grid), pieces, wanted_mm)
    trials = field.trials()
    if trials > _MOST_TRIALS:
        # A cutter deep in the part all along, by a wrong offset say, is no less wrong on a coarser grid; and the highest
        # scallop is searched for between nodes whatever the grid.
        grid *= float(np.sqrt(trials / _MOST_TRIALS))
        field = _Field(job, saddle, lay_nodes(job.part.outline, saddle, grid), pieces, wanted_mm)
    nodes = field.nodes
    field.cut()
    gouge = _deeper(deepest_gouge(saddle, job.part.outline, pieces), field)
    highest, bound = field.search()
    untouched = np.mean(field.owner[nodes.triangles] < 0, axis=1)
    some = np.flatnonzero(untouched)
    x, y = saddle.plan(highest[1], highest[2])
    return Cut(
        grid_mm=grid,
        nodes=nodes,
        height_mm=field.height,
        owner=field.owner,
        highest_mm=float(highest[0]),
        bound_mm=bound,
        highest_at_mm=(float(x), float(y)),
        highest_piece=int(highest[3]),
        gouge=gouge,
        uncut_area_mm2=float(np.sum(untouched[some] * nodes.triangle_areas_mm2(some))),
    )


class _Field:
    """Residual heights at the nodes while the pieces cut them."""

    def __init__(self, job: Job, saddle: Saddle, nodes: Nodes, pieces: Pieces, wanted_mm: float) -> None:
        self.job, self.saddle, self.nodes, self.pieces = job, saddle, nodes, pieces
        gradient = np.hypot(*saddle.gradient(nodes.xy[:, 0], nodes.xy[:, 1]))
        steepest = float(gradient.max())
        self.stretch = float(np.hypot(1.0, steepest))
        self.slope = steepest / self.stretch
        self.surface = (saddle.a_per_mm, saddle.b_per_mm, self.slope)
        self.start = _starting_stock_mm(job, saddle, nodes, wanted_mm + UNCUT_MM)
        self.cap = float(self.start.max())
        self.low = min(self.cap, wanted_mm + _first_reach_mm(job))
        self.height = np.minimum(self.start, self.low)
        self.owner = np.full(len(nodes.x), -1, np.int32)
        self.floor = np.full(len(nodes.x), -np.inf)
        self.state = np.zeros(len(pieces.c0), np.uint8)
        # A chunk is at most two tiles long, so that its box is not much bigger than what it cuts.
        length = np.linalg.norm(pieces.c1 - pieces.c0, axis=1)
        chunks = np.where(pieces.active, np.ceil(length / (2.0 * nodes.tiling[2]) + 1e-9), 1.0)
        self.chunks = np.concatenate(([0], np.cumsum(np.maximum(chunks, 1.0)))).astype(np.int64)
        self.lists: tuple[npt.NDArray[np.int64], npt.NDArray[np.int32]] | None = None

    def _bin(self, high_mm: float) -> None:
        """List the pieces that can cut each tile below a height."""
        boxes, found, start = self._count(high_mm)
        listing = np.empty(int(start[-1]), np.int32)
        if listing.size:
            _reach_kernels.bin_boxes(self.chunks, boxes, found, self.nodes.tiling, start, listing)
        self.lists = (start, listing)
        if np.any(self.pieces.size[:, 0] > 0.0):
            self._thin(high_mm, start, listing)
        if np.any(self.state == 2) and np.isinf(self.floor[0]):
            self.floor = self._depths(np.arange(len(self.height)))

    def _thin(self, high_mm: float, start: npt.NDArray[np.int64], listing: npt.NDArray[np.int32]) -> None:
        """Drop bull and flat ends from lists of tiles over which they stay above a height."""
        keep = np.empty(len(listing), np.bool_)
        surface = (*self.surface[:2], self.stretch)

        def run(span: tuple[int, int]) -> None:
            lists, pieces = (start, listing), self._kernel_pieces()
            _kernels.keep_near(surface, self.nodes.tiling, span, lists, pieces, high_mm, keep)

        in_threads(run, spans(len(start) - 1))
        kept = np.concatenate(([0], np.cumsum(keep)))
        self.lists = (kept[start], listing[keep])

    def _count(self, high_mm: float) -> tuple[Floats, Bytes, npt.NDArray[np.int64]]:
        """Find what each chunk of motion can reach and where each tile's list begins; sets the state of each piece."""
        own, count = self.pieces, int(self.chunks[-1])
        boxes, found = np.empty((count, 4)), np.empty(count, np.uint8)
        motion = (own.c0, own.c1, own.a0, own.a1, own.size, own.active)

        def run(span: tuple[int, int]) -> None:
            _reach_kernels.reach_boxes(self.surface, *motion, high_mm, self.chunks, span, boxes, found)

        in_threads(run, spans(len(own.c0)))
        self.state = np.maximum.reduceat(found, self.chunks[:-1])
        start, none = np.zeros(len(self.nodes.tile_start), np.int64), np.empty(0, np.int32)
        _reach_kernels.bin_boxes(self.chunks, boxes, found, self.nodes.tiling, start, none)
        return boxes, found, np.cumsum(start)

    def trials(self) -> float:
        """Return how often nodes would be tried with pieces, those deep in the part counted more: they cost more."""
        _, _, start = self._count(self.low)
        reached, deep = int(np.sum(self.state > 0)), int(np.sum(self.state == 2))
        trials = float(np.sum(np.diff(start) * np.diff(self.nodes.tile_start)))
        return trials * (1.0 + (_DEEP_TRIALS - 1.0) * deep / max(reached, 1))

    def _depths(self, rows: npt.NDArray[np.int64]) -> Floats:
        return part_depths_mm(
            self.nodes.xy[rows], self.job.part.outline, self.saddle, self.job.stock.bottom_mm
        )

    def _kernel_pieces(self) -> tuple[npt.NDArray, ...]:
        own = self.pieces
        return own.c0, own.c1, own.a0, own.a1, own.size, self.state

    def _sweep(self, above_mm: float) -> None:
        nodes = self.nodes
        lists = self.lists
        arrays = (nodes.x, nodes.y, self.floor, nodes.tile_start)

        def run(span: tuple[int, int]) -> None:
            _kernels.sweep(
                self.surface, arrays, span, lists, self._kernel_pieces(), above_mm, self.height, self.owner
            )  # fmt: skip

        in_threads(run, spans(len(nodes.tile_start) - 1))

    def cut(self) -> None:
        """Cut all nodes: first with the pieces that come near the surface, then what stands higher with all."""
        self._bin(self.low)
        self._sweep(-np.inf)
        missed = self.owner < 0
        self.height[missed] = self.start[missed]
        if np.any(missed) and self.low < self.cap:
            self._bin(self.cap)
            self._sweep(self.low)
        low = np.flatnonzero(self.height < -MEASURE_MM)
        if np.isinf(self.floor[0]) and low.size:
            self.height[low] = np.maximum(self.height[low], self._depths(low))

    def search(self) -> tuple[Floats, float]:
        """Return the highest residual with its place and piece, (4,), and a bound over the whole outline."""
        nodes = self.nodes
        top = int(np.argmax(self.height))
        best = np.array([self.height[top], nodes.x[top], nodes.y[top], self.owner[top]])
        highest = float(best[0])
        if highest >= self.cap:
            return best, self.cap
        # What is looked at stands no higher than the highest node and what a coarse cell may hide above it.
        reach = min(self.cap, 2.0 * highest + nodes.tiling[2] ** 2 / 100.0)
        self._bin(reach)
        lists, arrays = self.lists, (nodes.x, nodes.y)
        surface = (*self.surface[:2], self.stretch)

        def run(span: tuple[int, int]) -> tuple[Floats, float]:
            own = best.copy()
            bound = _kernels.refine(
                surface, arrays, nodes.triangles[span[0] : span[1]], nodes.tiling, lists, self._kernel_pieces(),
                self.cap, BOUND_SLACK_MM, self.owner, own, _QUARTERINGS,
            )  # fmt: skip
            return own, bound

        found = in_threads(run, spans(len(nodes.triangles)))
        best = max((own for own, _ in found), key=lambda own: own[0])
        return best, max(float(best[0]), *(bound for _, bound in found))


def _deeper(gouge: Gouge, field: _Field) -> Gouge:
    """Return the gouge, or the lowest node where that lies deeper: the wall of a bull or flat end mill above its rim."""
    lowest = int(np.argmin(field.height))
    depth = -float(field.height[lowest])
    if depth <= gouge.deepest_mm + SAME_POINT_MM:
        return gouge
    x, y = field.nodes.xy[lowest]
    return Gouge(depth, max(depth, gouge.bound_mm), (float(x), float(y)), int(field.owner[lowest]))


def _first_reach_mm(job: Job) -> float:
    """Return a height [mm] that finishing passes are likely to come below everywhere: short lists for the first cut."""
    every = [operation for operation in job.operations if operation.scallop_mm]
    last = [operation for operation in every if operation.does == "finish"] or every
    limits = [operation.scallop_mm for operation in last if operation.scallop_mm]
    return 3.0 * max(limits) if limits else UNCUT_MM / 10.0


def _starting_stock_mm(job: Job, saddle: Saddle, nodes: Nodes, cap_mm: float) -> Floats:
    """Return how high the blank stands over each node along the normal, (n,) [mm], no more than a cap."""
    if job.stock.allowance_mm is not None:
        return np.full(len(nodes.x), min(cap_mm, job.stock.allowance_mm))
    z = saddle.height(nodes.xy[:, 0], nodes.xy[:, 1])
    return np.minimum(cap_mm, (job.stock.top_mm - z) / saddle.normal(nodes.xy)[:, 2])


def scallop_map(cut: Cut, stepover_mm: float = 0.0, allowed_mm: float = 0.0) -> ScallopMap:
    """Return the measured heights in plan, thinned to at most 400 by 400 points.

    Each point stands for a block of grid points: their highest residual, or the deepest gouge if there is one deeper
    than is allowed and the measuring uncertainty. Grid points meet crests at varying distances from the top, so blocks
    hold several stepovers where the part is large enough: single crests would show the grid, not the scallop.
    """
    from anticlast.records import ScallopMap

    at = cut.nodes.at_grid
    height = np.where(at >= 0, cut.height_mm[np.maximum(at, 0)], np.nan)
    crests = min(_MAP_CRESTS * stepover_mm / cut.grid_mm, max(height.shape) / _MAP_LEAST)
    step = max(1, -(-max(height.shape) // _MAP_SIDE), int(crests))
    rows, columns = (-(-size // step) for size in height.shape)
    padded = np.full((rows * step, columns * step), np.nan)
    padded[: height.shape[0], : height.shape[1]] = height
    blocks = padded.reshape(rows, step, columns, step).transpose(0, 2, 1, 3).reshape(rows, columns, -1)
    empty = np.all(np.isnan(blocks), axis=2)
    blocks[empty] = 0.0
    high, low = np.nanmax(blocks, axis=2), np.nanmin(blocks, axis=2)
    picked = np.where(low < -(allowed_mm + MEASURE_MM), low, high)
    picked[empty] = np.nan
    middle = step // 2
    return ScallopMap(
        x_mm=cut.nodes.grid_x_mm[np.minimum(np.arange(columns) * step + middle, height.shape[1] - 1)],
        y_mm=cut.nodes.grid_y_mm[np.minimum(np.arange(rows) * step + middle, height.shape[0] - 1)],
        height_mm=picked.astype(np.float32),
    )
