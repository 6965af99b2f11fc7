"""The finished part as a closed triangle mesh: saddle on top, upright walls along the outline, flat bottom.

The top is the outline cut into triangles, lifted onto the saddle. Over a plan triangle a quadratic height
leaves the flat facet by at most k L^2 / 8, with L its longest edge and k the greatest second derivative of
the height in any direction, here 2 max(a, b) (standard bound of linear interpolation, for a right or obtuse
triangle or a surface with no extremum inside). The distance to the surface is no more than that vertical
one.
"""

from __future__ import annotations

import math
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from anticlast.errors import CannotPlan
from anticlast.files import beside
from anticlast.saddle import Saddle
from anticlast.tolerances import WELD_MM

if TYPE_CHECKING:
    import trimesh

    from anticlast.records import Floats, Ints, Part


def surface_mesh(part: Part, spacing_mm: float) -> tuple[Floats, Ints]:
    """Return the top surface as shared vertices and triangles.

    Parameters
    ----------
    part : Part
    spacing_mm : float
        Side of the square plan cells that are halved, mm; cells on the outline are clipped to it.

    Returns
    -------
    vertices : (n, 3)
        On the saddle, part coordinates, mm.
    faces : (m, 3) int64
        Rows of ``vertices``, counter-clockwise seen from +Z.
    """
    xy, faces = _welded(part.outline.triangles(spacing_mm * math.sqrt(2.0)))
    return Saddle.of(part).point(xy), faces


def finished_part(part: Part, bottom_mm: float, chord_mm: float) -> trimesh.Trimesh:
    """Return the finished part as a watertight mesh, faces counter-clockwise seen from outside.

    Parameters
    ----------
    part : Part
    bottom_mm : float
        Part Z of the flat bottom; has to lie below the surface everywhere.
    chord_mm : float
        Furthest that the saddle may lie from the facets, mm.

    Raises
    ------
    CannotPlan
        The bottom is not below the surface, or two rings of the outline touch, so that walls meet in a line.
    """
    import trimesh

    top, faces = surface_mesh(part, _cell_mm(part, chord_mm))
    lowest = float(top[:, 2].min())
    if bottom_mm >= lowest:
        raise CannotPlan(
            "solid",
            f"the bottom at {bottom_mm:g} mm is not below the surface, which reaches down to {lowest:.4g} mm",
            worst=bottom_mm,
            limit=lowest,
        )
    # The bottom is the top seen from below, so that walls need nothing but the boundary edges.
    under = len(top)
    vertices = np.concatenate((top, np.column_stack((top[:, :2], np.full(under, bottom_mm)))))
    start, end = _rim(faces).T
    walls = np.concatenate(
        (np.column_stack((end, start, start + under)), np.column_stack((end, start + under, end + under)))
    )
    bottom = faces[:, ::-1] + under
    solid = trimesh.Trimesh(vertices, np.concatenate((faces, walls, bottom)), process=False, validate=False)
    if not solid.is_watertight:
        raise CannotPlan("solid", "the mesh of the part does not close; holes have to keep clear of the edge")
    return solid


def write_stl(part: Part, bottom_mm: float, chord_mm: float, path: Path) -> None:
    """Write the finished part as a binary STL file, mm, part coordinates; the whole file or none.

    Parameters are those of ``finished_part``.

    Raises
    ------
    CannotWrite
        The file cannot be written; what stood under its name stays.
    """
    data = finished_part(part, bottom_mm, chord_mm).export(file_type="stl")
    with beside(path, text=False) as (stream, _):
        stream.write(data)


def _cell_mm(part: Part, chord_mm: float) -> float:
    """Return the side of a square cell whose halves keep to the saddle within a chord error."""
    bend_per_mm = 2.0 * max(part.a_per_mm, part.b_per_mm)
    return math.sqrt(8.0 * chord_mm / bend_per_mm) / math.sqrt(2.0)


def _welded(triangles: Floats) -> tuple[Floats, Ints]:
    """Return shared corners (n, 2) and faces (m, 3) of triangles (m, 3, 2); any that shrink to a line go."""
    corners = triangles.reshape(-1, 2)
    # The odd shift keeps round numbers, which drawings are full of, away from where rounding turns over.
    keys = np.floor(corners / WELD_MM + 0.2718).astype(np.int64)
    order = np.lexsort((keys[:, 1], keys[:, 0]))
    fresh = np.ones(len(order), dtype=bool)
    fresh[1:] = (np.diff(keys[order], axis=0) != 0).any(axis=1)
    label = np.empty(len(order), dtype=np.int64)
    label[order] = np.cumsum(fresh) - 1
    faces = label.reshape(-1, 3)
    whole = (faces != np.roll(faces, 1, axis=1)).all(axis=1)
    return corners[order[fresh]], faces[whole]


def _rim(faces: Ints) -> Ints:
    """Return the directed edges (k, 2) that no neighbour runs back along: the boundary, region left."""
    edges = np.concatenate((faces[:, [0, 1]], faces[:, [1, 2]], faces[:, [2, 0]]))
    count = int(faces.max()) + 1
    forth, back = edges[:, 0] * count + edges[:, 1], edges[:, 1] * count + edges[:, 0]
    return edges[~np.isin(forth, back)]
