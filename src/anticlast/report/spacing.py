"""Local stepover and local scallop beside each point of a pass."""

from __future__ import annotations

import numpy as np

from anticlast.records import Bools, Floats, Ints, ScallopMap

MOST_POINTS = 140  # a pass; spacing changes slowly along it


def _sampled(rows: Ints) -> Ints:
    if len(rows) <= MOST_POINTS:
        return rows
    return rows[np.unique(np.linspace(0, len(rows) - 1, MOST_POINTS).round().astype(int))]


def distance_to_line(points: Floats, line: Floats) -> Floats:
    """Distance from each point to a polyline, nan where the foot is one of its two loose ends.

    Parameters
    ----------
    points : (n, d)
    line : (m, d), m >= 2

    Returns
    -------
    (n,)
        In the unit of the points.
    """
    start, step = line[:-1], np.diff(line, axis=0)
    size = np.sum(step**2, axis=1)
    reach = points[:, None, :] - start[None, :, :]
    share = np.einsum("nmd,md->nm", reach, step) / np.where(size > 0, size, 1.0)
    held = np.clip(share, 0.0, 1.0)
    gap = np.sum((reach - held[:, :, None] * step) ** 2, axis=2)
    best = np.argmin(gap, axis=1)
    every = np.arange(len(points))
    chosen = share[every, best]
    loose = ((best == 0) & (chosen < 0)) | ((best == len(step) - 1) & (chosen > 1))
    return np.where(loose, np.nan, np.sqrt(gap[every, best]))


def local_stepover(contact_mm: Floats, cutting: Bools, operation: Ints, pass_index: Ints) -> Floats:
    """Distance on the surface from each contact to the next pass, (n,) mm; nan where none lies beside it.

    The straight distance stands for the one along the surface: over a stepover s they differ by s^3 k^2 / 24,
    k the curvature, which is below 1e-5 of s for any scallop worth the name. Derived here.
    """
    found = np.full(len(contact_mm), np.nan)
    usable = cutting & np.isfinite(contact_mm[:, 0]) & (pass_index >= 0)
    for place in np.unique(operation[usable]):
        rows = np.flatnonzero(usable & (operation == place))
        order = rows[np.argsort(pass_index[rows], kind="stable")]
        names, starts = np.unique(pass_index[order], return_index=True)
        groups = dict(zip(names.tolist(), np.split(order, starts[1:]), strict=True))
        for name, group in groups.items():
            beside = groups.get(name + 1)
            if beside is None or len(beside) < 2:
                continue
            line = contact_mm[_sampled(beside)]
            some = _sampled(group)
            gaps = distance_to_line(contact_mm[some], line)
            found[some] = gaps
            if len(some) < len(group):  # the points between the sampled ones, in order along the pass
                good = np.isfinite(gaps)
                if good.any():
                    found[group] = np.interp(group, some[good], gaps[good])
    return found


def pooled(scallop: ScallopMap, most_cells: int) -> tuple[Floats, Floats, Floats, Floats]:
    """Make a map coarse without losing its worst places: highest and lowest height of each block of cells.

    Parameters
    ----------
    most_cells : int
        Largest number of cells along either side.

    Returns
    -------
    x_mm, y_mm : (nx,), (ny,)
        Centres of the blocks.
    high_mm, low_mm : (ny, nx)
        nan where a block lies wholly outside the outline.
    """
    ny, nx = scallop.height_mm.shape
    block = max(1, -(-max(nx, ny) // most_cells))
    columns, rows = np.arange(0, nx, block), np.arange(0, ny, block)

    def fold(pick: np.ufunc) -> Floats:
        return pick.reduceat(pick.reduceat(scallop.height_mm, rows, axis=0), columns, axis=1).astype(
            np.float64
        )

    def centres(values: Floats, starts: Ints) -> Floats:
        spacing = values[1] - values[0] if len(values) > 1 else 0.0
        return values[0] + spacing * (starts + (block - 1) / 2)

    return centres(scallop.x_mm, columns), centres(scallop.y_mm, rows), fold(np.fmax), fold(np.fmin)


def highest_near(scallop: ScallopMap, contact_mm: Floats, reach_mm: float) -> Floats:
    """Highest residual height within about ``reach_mm`` of each contact in plan, (n,) mm; nan off the map.

    Parameters
    ----------
    contact_mm : (n, 3)
        nan where there is none.
    reach_mm : float
        The wider stepover, so that the crest on either side is seen.
    """
    spacing = abs(float(scallop.x_mm[1] - scallop.x_mm[0])) if len(scallop.x_mm) > 1 else 1.0
    cells = max(len(scallop.x_mm), len(scallop.y_mm)) * spacing / max(reach_mm, spacing)
    x, y, high, _ = pooled(scallop, max(2, int(np.ceil(cells))))
    wide = np.pad(high, 1, constant_values=np.nan)
    near = wide[1:-1, 1:-1].copy()
    for dy in (0, 1, 2):
        for dx in (0, 1, 2):
            near = np.fmax(near, wide[dy : dy + high.shape[0], dx : dx + high.shape[1]])
    found = np.full(len(contact_mm), np.nan)
    good = np.flatnonzero(np.isfinite(contact_mm[:, 0]))
    step_x = x[1] - x[0] if len(x) > 1 else 1.0
    step_y = y[1] - y[0] if len(y) > 1 else 1.0
    i = np.rint((contact_mm[good, 0] - x[0]) / step_x).astype(int)
    j = np.rint((contact_mm[good, 1] - y[0]) / step_y).astype(int)
    inside = (i >= 0) & (i < len(x)) & (j >= 0) & (j < len(y))
    found[good[inside]] = near[j[inside], i[inside]]
    return found


def coded(values: Floats, unit: float) -> tuple[np.ndarray, float]:
    """Turn heights into int16 steps; nan becomes -32768. The step grows from ``unit`` if the range needs it.

    Returns
    -------
    codes : int16, same shape
    step : float
        Height of one step; every finite value is within half of it.
    """
    finite = np.abs(values[np.isfinite(values)])
    top = float(finite.max()) if finite.size else 0.0
    step = max(unit, top / 32767.0)
    codes = np.where(np.isfinite(values), np.rint(np.nan_to_num(values) / step), -32768)
    return codes.astype(np.int16), step
