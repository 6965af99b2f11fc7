"""Arcs in the planes of G17, G18 and G19 in place of many short straight moves. docs/theory-machine.md, "Arcs".

Between rows of a path the controlled point bows as the surface normals turn. A circle in an axis plane, with the third axis
going along evenly, follows that far longer than a straight move within the same budget.
"""

from __future__ import annotations

from typing import Final

import numpy as np

from anticlast.posting import _arc_kernels
from anticlast.records import Bytes, Floats, Ints

# Half of what NISTIR 6556 section 3.5.3.2 lets the radii at start and end differ: 0.002 mm, 0.0002 inch.
MISMATCH_MM: Final = 0.001
MISMATCH_INCH_MM: Final = 0.0001 * 25.4
# Flatter arcs are nearly straight, and their centre far outside any travel: some controls refuse it (common practice).
LARGEST_RADIUS_MM: Final = 1000.0


def fit_arcs(
    points_mm: Floats,
    normal: Floats,
    words_mm: Floats,
    purpose: Bytes,
    pass_index: Ints,
    budgets_mm: Floats,
    side: float,
    digit_mm: float,
    *,
    bowed: bool,
    inch: bool,
) -> tuple[Ints, Floats]:
    """Replace runs of straight moves by arcs that keep to the same path.

    Parameters
    ----------
    points_mm : (n, 3)
        Wished places of the controlled point at each row, program coordinates, not rounded.
    normal : (n, 3)
        Surface normals at the rows, in the directions of the program's axes.
    words_mm : (n, 3)
        The places rounded to the posted digits.
    purpose, pass_index : (n,)
        Of the move to each row; a block never holds moves of two purposes or passes.
    budgets_mm : (n,)
        Allowed distance from the path on the move to each row; what lies across the normal counts ``side`` times.
    digit_mm : float
        Last posted digit of a length.
    bowed : bool
        The point keeps its distance from the surface, so that its path bows as the normals turn; else it goes straight.
    inch : bool
        The program is in inches: decides by how much an arc's radii may differ.

    Returns
    -------
    row : (b,) int64
        Row that each block ends on.
    arcs : (b, 5)
        Plane (17, 18, 19; 0 = straight move), angle turned [rad, counterclockwise positive], centre from the start of the
        block [mm, X Y Z], rounded to the posted digits.
    """
    sags = np.zeros(len(points_mm))
    if bowed:
        # An arc of length L whose normals turn by w bows by L w / 8; w = (n_q - n_p) . d / |d|.
        sags[1:] = 0.125 * np.einsum("ij,ij->i", np.diff(normal, axis=0), np.diff(points_mm, axis=0))
    kind = pass_index * 16 + purpose
    group = np.cumsum(np.concatenate(([0], np.diff(kind) != 0)))
    return _arc_kernels.fit_all(
        np.ascontiguousarray(points_mm),
        np.ascontiguousarray(normal),
        sags,
        np.ascontiguousarray(words_mm),
        group,
        np.ascontiguousarray(budgets_mm, dtype=np.float64),
        side,
        digit_mm,
        MISMATCH_INCH_MM if inch else MISMATCH_MM,
        LARGEST_RADIUS_MM,
    )


def arc_length_mm(arcs: Floats, steps_mm: Floats) -> Floats:
    """Length (n,) of blocks along their helix: in-plane arc and third axis; for straight moves their own length.

    Parameters
    ----------
    arcs : (n, 5)
        As `fit_arcs` returns them.
    steps_mm : (n, 3)
        X Y Z from start to end of each block.
    """
    along = np.linalg.norm(steps_mm, axis=1)
    turned = np.abs(arcs[:, 1]) * np.linalg.norm(arcs[:, 2:], axis=1)
    third = np.choose(
        np.clip(arcs[:, 0] - 17, 0, 2).astype(np.int64), [steps_mm[:, 2], steps_mm[:, 1], steps_mm[:, 0]]
    )
    return np.where(arcs[:, 0] > 0.0, np.hypot(turned, third), along)
