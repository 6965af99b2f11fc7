"""Fewer points for the same picture: drop knots of a polyline, each within a known distance of the rest."""

from __future__ import annotations

import numpy as np

from anticlast.records import Bools, Floats, Ints

ROUNDS = 24  # each round halves at best; 2**24 points are more than any program has
GROWTH = 1.6  # step by which the tolerance grows while too many knots are left


def thin(values: Floats, along: Floats, keep: Bools, tolerance: float) -> Ints:
    """Return rows that, joined by straight lines over ``along``, pass near every row in each column.

    Every other knot is dropped where allowed, round by round. The bound adds up: if a knot lies d from the
    line joining its neighbours, and what was dropped on either side lay within e, then everything lies within
    d + e of the new line (the difference of two polylines is largest at a knot). Derived here.

    Parameters
    ----------
    values : (n, d)
        Quantities, each column already divided by what counts as 1 for it. No nan.
    along : (n,)
        Non-decreasing parameter that the straight lines are taken over (length of path, say).
    keep : (n,) bool
        Rows that must stay. The first and last stay in any case.
    tolerance : float
        Largest deviation allowed in any column.

    Returns
    -------
    (m,) int64
        Rows kept, ascending.
    """
    rows = np.arange(len(values))
    if len(rows) < 3:
        return rows
    error = np.zeros(len(rows) - 1)  # deviation already spent within each piece between kept rows
    idle = 0
    for turn in range(ROUNDS):
        if len(rows) < 3:
            break
        middle = np.arange(1 + turn % 2, len(rows) - 1, 2)
        left, here, right = rows[middle - 1], rows[middle], rows[middle + 1]
        span = along[right] - along[left]
        share = np.where(span > 0, (along[here] - along[left]) / np.where(span > 0, span, 1.0), 0.5)
        between = values[left] + share[:, None] * (values[right] - values[left])
        off = np.abs(values[here] - between).max(axis=1)
        spent = off + np.maximum(error[middle - 1], error[middle])
        drop = middle[(spent <= tolerance) & ~keep[here]]
        idle = 0 if len(drop) else idle + 1
        if idle == 2:  # neither the odd nor the even knots gave any
            break
        error[drop - 1] = spent[np.searchsorted(middle, drop)]
        error = np.delete(error, drop)
        rows = np.delete(rows, drop)
    return rows


def thin_to(values: Floats, along: Floats, keep: Bools, tolerance: float, most: int) -> tuple[Ints, float]:
    """Thin with the smallest tolerance of a growing series that leaves at most ``most`` rows.

    Returns
    -------
    rows : (m,) int64
        As ``thin``. More than ``most`` only if the rows that must stay are.
    tolerance : float
        The one used.
    """
    rows = thin(values, along, keep, tolerance)
    allowed = max(most, int(keep.sum()) + 2)
    while len(rows) > allowed and tolerance < 1e6:
        tolerance *= GROWTH
        rows = thin(values, along, keep, tolerance)
    return rows, tolerance
