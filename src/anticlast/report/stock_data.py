"""What the stock page is drawn from: columns, when each drops, poses of the cutter, loads along the program."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from anticlast.report.data import cutter_profile, packed, rings
from anticlast.report.numbers import Units
from anticlast.saddle import Saddle
from anticlast.stock.grid import back

if TYPE_CHECKING:
    from anticlast.outline import Outline
    from anticlast.records import Bools, Floats, Ints
    from anticlast.stock.field import StockField
    from anticlast.stock.preview import StockPreview

MOST_SIDE = 170  # drawn columns along the longer side
MOST_PLACES = 20_000  # of the cutter
MOST_EVENTS = 400_000  # drops of columns; about 21 bytes each in the page
MOST_SNAPSHOTS = 30
DROP_MM = 1e-4  # a column that lost less is not drawn anew


def stock_data(preview: StockPreview, units: Units) -> dict[str, Any]:
    """Return everything that the page's script reads, lengths in mm; loads in the units they are shown in."""
    job, grid = preview.job, preview.states[0].field.grid
    stride = max(1, -(-max(grid.shape) // MOST_SIDE))
    rows, first_segment = _places(preview)
    drops, snapshots = _drops(preview, stride)
    first = preview.states[0].field
    x, y = (values[::stride, ::stride] for values in grid.middles_xy())
    saddle = Saddle.of(job.part)
    xy = np.column_stack((x.ravel(), y.ravel()))
    inside = job.part.outline.contains(xy)
    surface = np.where(inside, saddle.height(xy[:, 0], xy[:, 1]), np.nan)
    there = (first.area_mm2 > 0.0)[::stride, ::stride]
    step = grid.spacing_mm * stride
    zero, along_u, along_v = (_plan(u, v) for u, v in ((grid.u0_mm, grid.v0_mm), (step, 0.0), (0.0, step)))
    motion, operation = preview.motion, preview.operation[first_segment]
    knot = np.minimum(np.searchsorted(rows, drops["row"]), len(rows) - 1) if len(rows) else drops["row"]
    stock = {
        "grid": {
            "step": step,
            "rows": there.shape[0],
            "columns": there.shape[1],
            "zero": zero,
            "u": along_u,
            "v": along_v,
        },
        "places_xy": packed(_drawn_xy(xy, there, job.stock.outline).astype(np.float32)),
        "rings": {"blank": rings(job.stock.outline), "part": rings(job.part.outline)},
        "there": packed(there.ravel().astype(np.uint8)),
        "top": packed(_tops(first, job.stock.bottom_mm)[::stride, ::stride].ravel().astype(np.float32)),
        "surface": packed(surface.astype(np.float32)),
        "cosine": packed(saddle.normal(xy)[:, 2].astype(np.float32)),
        "bottom": job.stock.bottom_mm,
        "drops": {
            "cell": packed(drops["cell"].astype(np.uint32)),
            "top": packed(drops["top"].astype(np.float32)),
            "place": packed(knot.astype(np.uint32)),
            "line": packed(motion.line[drops["row"]].astype(np.int32)),
        },
        "snapshots": snapshots,
        "places": len(rows),
        "of_places": len(np.unique(preview.segments.row)),
        "tip": packed(motion.tip_mm[rows].astype(np.float32)),
        "axis": packed(motion.axis[rows].astype(np.float32)),
        "line": packed(motion.line[rows].astype(np.int32)),
        "tool": packed(motion.tool[rows].astype(np.int32)),
        "rapid": packed(motion.rapid[rows].astype(np.uint8)),
        "operation": packed(operation.astype(np.int32)),
        "pass": packed(preview.number[first_segment].astype(np.int32)),
        "clock": packed(_clock(preview, rows).astype(np.float32)),
        "loads": _loads(preview, rows, units),
        "operations": [operation.does for operation in job.operations],
        "thickest": [state.thickness_mm[2] for state in preview.states],
        "start": max(0, int(np.argmax(operation >= preview.before)) - 1)
        if preview.before > 1 and len(rows)
        else 0,
    }
    return {
        "units": {"scale": units.scale, "digits": 4 if units.inch else 3, "length": units.name},
        "cutters": {str(cutter.number): cutter_profile(cutter) for cutter in job.cutters},
        "stock": stock,
    }


def _plan(u_mm: float, v_mm: float) -> list[float]:
    x, y = back(np.array([u_mm]), np.array([v_mm]))
    return [float(x[0]), float(y[0])]


def _drawn_xy(xy: Floats, there: Bools, outline: Outline) -> Floats:
    """Return where columns are drawn, (n, 2): those along the edge of the blank are moved onto it, by a cell at most."""
    import shapely

    padded = np.pad(there, 1)
    whole = there.copy()
    for down in range(3):
        for right in range(3):
            whole &= padded[down : down + there.shape[0], right : right + there.shape[1]]
    edge = np.flatnonzero((there & ~whole).ravel())
    line = outline.polygon.boundary
    moved = xy.copy()
    nearest = shapely.line_interpolate_point(line, shapely.line_locate_point(line, shapely.points(xy[edge])))
    moved[edge] = shapely.get_coordinates(nearest)
    return moved


def _tops(field: StockField, bottom_mm: float) -> Floats:
    return np.where(field.count > 0, field.high_mm[0], bottom_mm)


def _places(preview: StockPreview) -> tuple[Ints, Ints]:
    """Choose rows of the part motion where the cutter is shown, and the last segment that ends at each.

    Every change between rapid and feed, of the pass and of the operation is kept; the rest evenly.
    """
    segments = preview.segments
    last = np.flatnonzero(np.diff(segments.row, append=-1) != 0)
    kinds = np.stack((segments.rapid[last].astype(np.int64), preview.operation[last], preview.number[last]))
    keep = np.any(np.diff(kinds, axis=1, append=-1) != 0, axis=0)
    if keep.sum() > MOST_PLACES // 2:
        keep[:] = False
    keep[:: max(1, -(-len(last) // (MOST_PLACES - int(keep.sum()))))] = True
    keep[-1:] = True
    chosen = last[keep]
    return segments.row[chosen], chosen


def _shares(preview: StockPreview, first: int, after: int, count: int) -> Ints:
    """Return segments that split an operation into parts of equal removal."""
    volume = np.cumsum(preview.engagement.volume_mm3[first:after])
    if not len(volume) or volume[-1] <= 0.0:
        return np.empty(0, np.int64)
    wanted = volume[-1] * np.arange(1, count) / count
    return np.unique(first + 1 + np.searchsorted(volume, wanted))


def _drops(preview: StockPreview, stride: int) -> tuple[dict[str, np.ndarray], int]:
    """Cut again from state to state with stops between, and list when each drawn column drops, in order of time.

    Returns
    -------
    drops : dict
        ``row`` of the part motion, ``cell`` drawn, ``top`` [mm] from then on.
    snapshots : int
        Moments at which the drawn stock is exact, the blank and the end among them.
    """
    count = len(preview.job.operations)
    bounds = [0, *(int(np.argmax(preview.operation >= n)) if np.any(preview.operation >= n) else len(preview.segments)
                   for n in range(2, count + 1)), len(preview.segments)]  # fmt: skip
    columns = preview.states[0].field.count[::stride, ::stride].size
    share = max(1, min(MOST_SNAPSHOTS, MOST_EVENTS // max(columns, 1)) // max(count, 1))
    found: list[tuple[np.ndarray, np.ndarray, np.ndarray]] = []
    saddle, bottom, snapshots = Saddle.of(preview.job.part), preview.job.stock.bottom_mm, 1
    for number in range(count):
        first, after = bounds[number], bounds[number + 1]
        field = preview.states[number].field.copy()
        before, at = _tops(field, bottom)[::stride, ::stride], first
        for stop in (*_shares(preview, first, after, share).tolist(), after):
            if stop <= at:
                continue
            if stop < after:
                field.run(preview.segments, preview.job.cutters, saddle, (at, stop))
            now = field if stop < after else preview.states[number + 1].field
            tops, owner = _tops(now, bottom)[::stride, ::stride], now.owner[::stride, ::stride]
            cell = np.flatnonzero((before - tops > DROP_MM).ravel())
            span = preview.segments.row[[at, stop - 1]]
            found.append((np.clip(owner.ravel()[cell], *span), cell, tops.ravel()[cell]))
            before, at, snapshots = tops, stop, snapshots + 1
    row, cell, top = (np.concatenate([np.empty(0), *(one[k] for one in found)]) for k in range(3))
    order = np.argsort(row, kind="stable")
    return {"row": row[order].astype(np.int64), "cell": cell[order], "top": top[order]}, snapshots


def _bins(preview: StockPreview, rows: Ints) -> Ints:
    """Return the segment that begins each stretch between kept places."""
    return np.concatenate(([0], np.searchsorted(preview.segments.row, rows[:-1], side="right"))).astype(
        np.int64
    )


def _clock(preview: StockPreview, rows: Ints) -> Floats:
    """Return the time at feed up to each place, s."""
    if not len(rows):
        return np.empty(0)
    feed = preview.engagement.feed_mm_min
    moving = np.isfinite(feed) & (feed > 0.0)
    seconds = np.divide(60.0 * preview.segments.length_mm, feed, out=np.zeros(len(feed)), where=moving)
    return np.cumsum(np.add.reduceat(seconds, _bins(preview, rows)))


def _loads(preview: StockPreview, rows: Ints, units: Units) -> list[dict[str, Any]]:
    """Return the loads that can be chosen; where a range is known ``low`` and ``values`` bound it."""
    found, loads = preview.engagement, preview.loads
    volume = (units.scale**3, "in³/min") if units.inch else (1e-3, "cm³/min")
    entries: list[tuple[str, str, str, int, float, Floats]] = [
        ("removal", "removal rate", volume[1], 2, volume[0], found.removal_mm3_min),
        ("depth", "depth of cut", units.name, 4 if units.inch else 3, units.scale, found.depth_mm),
        ("width", "width of cut", units.name, 4 if units.inch else 3, units.scale, found.width_mm),
        ("arc", "engaged arc", "°", 0, float(np.degrees(1.0)), found.arc_rad),
        ("force", "force across the cutter", "N", 1, 1.0, loads.force_n),
        ("power", "power", "W", 1, 1.0, found.power_w),
        ("bending", "bending of the tip", units.small_name, 1, units.small_scale, loads.deflection_mm),
    ]
    listed = []
    for key, title, unit, digits, scale, values in entries:
        if not len(rows) or not np.any(np.isfinite(values)):
            continue
        highest = np.fmax.reduceat(values * scale, _bins(preview, rows), axis=0)
        highest = np.where(np.isfinite(highest), highest, 0.0).astype(np.float32)
        entry = {"key": key, "title": title, "unit": unit, "digits": digits}
        if highest.ndim == 2:
            entry |= {"low": packed(highest[:, 0]), "values": packed(highest[:, 1])}
        else:
            entry |= {"values": packed(highest)}
        listed.append(entry)
    return listed
