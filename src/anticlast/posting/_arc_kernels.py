"""Compiled search for arcs that stand for many straight moves; arrays and floats only. docs/theory-machine.md, "Arcs"."""

from __future__ import annotations

import math

import numba
import numpy as np


@numba.njit(cache=True, nogil=True)
def _probe(
    points: np.ndarray, normals: np.ndarray, sags: np.ndarray, i: int, number: int, out: np.ndarray
) -> None:
    """Set ``out`` (6,) to a place of the wished path and the normal there: odd numbers rows, even ones middles of moves.

    Number 0 is the middle of the move from row i to i + 1, number 1 row i + 1, and so on.
    """
    row = i + 1 + number // 2
    if number % 2 == 1:
        for c in range(3):
            out[c], out[3 + c] = points[row, c], normals[row, c]
        return
    size = 0.0
    for c in range(3):
        out[3 + c] = normals[row - 1, c] + normals[row, c]
        size += out[3 + c] * out[3 + c]
    size = math.sqrt(size)
    for c in range(3):
        out[3 + c] /= size
        out[c] = 0.5 * (points[row - 1, c] + points[row, c]) + sags[row] * out[3 + c]


@numba.njit(cache=True, nogil=True)
def fit_one(
    points: np.ndarray,
    normals: np.ndarray,
    sags: np.ndarray,
    words: np.ndarray,
    i: int,
    j: int,
    plane: int,
    side: float,
    budget: float,
    digit: float,
    mismatch: float,
    largest: float,
    arc: np.ndarray,
) -> bool:
    """Fit the arc from row i to row j in one plane, rounded as it is posted; True if it keeps to the path.

    Parameters
    ----------
    points, normals : (n, 3)
        Wished places of the controlled point in program coordinates, and the surface normals turned with them.
    sags : (n,)
        How far the path to each row bows along the normal in its middle.
    words : (n, 3)
        The places rounded to the posted digits.
    plane : int
        17, 18 or 19: arcs turn X to Y, Z to X, Y to Z.
    side : float
        Weight of what the arc strays across the normal.
    budget : float
        Allowed distance, mm.
    digit : float
        Last posted digit, mm.
    mismatch : float
        Most that the radii at start and end may differ.
    largest : float
        Largest radius.
    arc : (5,)
        Set to the plane, the angle turned (counterclockwise positive) and the centre from the start as X Y Z.
    """
    first = 0 if plane == 17 else 2 if plane == 18 else 1
    second = (first + 1) % 3
    third = (first + 2) % 3
    p0, p1, p2 = words[i, first], words[i, second], words[i, third]
    q0, q1, q2 = words[j, first], words[j, second], words[j, third]
    length = math.hypot(q0 - p0, q1 - p1)
    if length < 10.0 * digit:
        return False
    e0, e1 = (q0 - p0) / length, (q1 - p1) / length
    # A circle through both ends is b = k (a (L - a) - b^2) with a along and b left of the chord: k by least squares.
    place = np.zeros(6)
    over, under = 0.0, 0.0
    count = 2 * (j - i) - 1
    for number in range(count):
        _probe(points, normals, sags, i, number, place)
        d0, d1 = place[first] - p0, place[second] - p1
        a, b = d0 * e0 + d1 * e1, d1 * e0 - d0 * e1
        g = a * (length - a) - b * b
        if g <= 0.0:
            return False
        over += g * b
        under += g * g
    k = over / under
    if abs(k) * 2.0 * largest < 1.0:
        return False
    away = -0.5 / k
    if math.hypot(away, 0.5 * length) > largest or 0.5 * length > 0.99 * math.hypot(away, 0.5 * length):
        return False
    i0 = math.floor((0.5 * (q0 - p0) - away * e1) / digit + 0.5) * digit
    i1 = math.floor((0.5 * (q1 - p1) + away * e0) / digit + 0.5) * digit
    radius, radius_end = math.hypot(i0, i1), math.hypot(q0 - p0 - i0, q1 - p1 - i1)
    if abs(radius - radius_end) > mismatch:
        return False
    sense = 1.0 if away > 0.0 else -1.0
    s0, s1 = -i0, -i1
    f0, f1 = q0 - p0 - i0, q1 - p1 - i1
    turned = sense * math.atan2(s0 * f1 - s1 * f0, s0 * f0 + s1 * f1)
    if turned <= 0.0:
        return False
    for number in range(count):
        _probe(points, normals, sags, i, number, place)
        v0, v1 = place[first] - p0 - i0, place[second] - p1 - i1
        distance = math.hypot(v0, v1)
        share = sense * math.atan2(s0 * v1 - s1 * v0, s0 * v0 + s1 * v1) / turned
        if share < 0.0 or share > 1.0:
            return False
        off = (distance - radius - share * (radius_end - radius)) / distance
        r0, r1, r2 = off * v0, off * v1, place[third] - p2 - share * (q2 - p2)
        deep = r0 * place[3 + first] + r1 * place[3 + second] + r2 * place[3 + third]
        wide = max(0.0, r0 * r0 + r1 * r1 + r2 * r2 - deep * deep)
        if math.sqrt(deep * deep + side * side * wide) > budget:
            return False
    arc[0], arc[1] = plane, sense * turned
    arc[2 + first], arc[2 + second], arc[2 + third] = i0, i1, 0.0
    return True


@numba.njit(cache=True, nogil=True)
def fit_all(
    points: np.ndarray,
    normals: np.ndarray,
    sags: np.ndarray,
    words: np.ndarray,
    group: np.ndarray,
    budgets: np.ndarray,
    side: float,
    digit: float,
    mismatch: float,
    largest: float,
) -> tuple[np.ndarray, np.ndarray]:
    """Take as many rows into each block as an arc in one of the planes allows, else one row by a straight move.

    ``group`` (n,) tells which moves may share a block; the other parameters are those of ``fit_one``, ``budgets`` (n,).

    Returns
    -------
    row : (b,) int64
        Row that each block ends on.
    arcs : (b, 5)
        As ``fit_one`` sets them; plane 0 on a straight move.
    """
    count = points.shape[0]
    row = np.zeros(count, dtype=np.int64)
    arcs = np.zeros((count, 5))
    trial = np.zeros(5)
    made, i = 0, 0
    while i < count - 1:
        last = i + 1
        while last + 1 < count and group[last + 1] == group[i + 1]:
            last += 1
        best = i + 1
        for axis in range(3):
            plane = 17 + axis
            good, step = i + 1, 2
            # Twice as far as long as it holds, then halved back.
            bad = last + 1
            while i + step <= last:
                if not fit_one(
                    points,
                    normals,
                    sags,
                    words,
                    i,
                    i + step,
                    plane,
                    side,
                    budgets[i + 1],
                    digit,
                    mismatch,
                    largest,
                    trial,
                ):
                    bad = i + step
                    break
                good = i + step
                step = last - i if 2 * step > last - i and step < last - i else 2 * step
            while bad - good > 1 and good > i + 1:
                middle = (good + bad) // 2
                if fit_one(
                    points,
                    normals,
                    sags,
                    words,
                    i,
                    middle,
                    plane,
                    side,
                    budgets[i + 1],
                    digit,
                    mismatch,
                    largest,
                    trial,
                ):
                    good = middle
                else:
                    bad = middle
            if good > best and fit_one(
                points,
                normals,
                sags,
                words,
                i,
                good,
                plane,
                side,
                budgets[i + 1],
                digit,
                mismatch,
                largest,
                trial,
            ):
                best = good
                for c in range(5):
                    arcs[made, c] = trial[c]
        row[made] = best
        made += 1
        i = best
    return row[:made], arcs[:made]
