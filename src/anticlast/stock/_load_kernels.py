"""Compiled loops over the marked points of a cutter's front: engaged arc, chip, speed, force, torque."""

from __future__ import annotations

import math

import numpy as np
from numba import njit

# Columns of what is found at a station.
(ENTRY, EXIT, ARC, AREA, CHIP_MEAN, CHIP_MAX, SLOW_MM, FAST_MM, MEAN_LOW, MEAN_HIGH, PEAK_LOW, PEAK_HIGH, TORQUE_LOW,
 TORQUE_HIGH, TORQUE_PEAK_LOW, TORQUE_PEAK_HIGH) = range(16)  # fmt: skip
COLUMNS = 16
# An angle belongs to the engaged arc when what a tooth takes there turns the spindle by more than this share of the most: the
# few hundredths of a mm round a ball's axis, where a tooth never leaves the material, do not count.
_ARC_SHARE = 0.02


@njit(cache=True, nogil=True)
def specific(h: float, laws: np.ndarray, found: np.ndarray) -> None:
    """Lowest and highest specific force [N/mm^2] over laws (kc11, mc, ktc, kte) at a chip thickness h [mm]."""
    found[0], found[1] = 1e30, 0.0
    for k in range(laws.shape[0]):
        value = laws[k, 0] * h ** -laws[k, 1] + laws[k, 2] + laws[k, 3] / h
        found[0], found[1] = min(found[0], value), max(found[1], value)


@njit(cache=True, nogil=True)
def station_loads(
    first: int, after: int, hits: np.ndarray, frames: np.ndarray, shape_of: np.ndarray, places: np.ndarray, edges: np.ndarray,
    inner: np.ndarray, outer: np.ndarray, rims: np.ndarray, flutes: np.ndarray, tooth_mm: np.ndarray, laws: np.ndarray,
    least: float, out: np.ndarray,
) -> None:  # fmt: skip
    """Work out each station's row of ``out`` from the marked points.

    Parameters
    ----------
    hits : (n, rings, angles) uint8
    frames : (n, 15)
        See ``_field_kernels.sample_front``.
    shape_of : (n,) int64
    places, edges, inner, outer, rims : (shapes, rings, ...)
        See ``rings.Rings``.
    flutes : (shapes,) int64
    tooth_mm : (n,)
        Feed per tooth; nan where feed or spindle is not known: then nothing but the geometry is worked out.
    laws : (m, 4)
        Laws of the specific force; m = 0 if none is known.
    least : float
        Points count where the feed's share along the normal is more.
    out : (n, 16)
    """
    angles, rings = hits.shape[2], hits.shape[1]
    step = 2.0 * math.pi / angles
    low, high = np.empty(angles), np.empty(angles)
    turn_low, turn_high = np.empty(angles), np.empty(angles)
    seen, lever = np.empty(angles, np.uint8), np.empty(angles)
    kc, sums = np.empty(2), np.empty(4)
    circle = np.empty((angles, 2))
    for m in range(angles):
        circle[m, 0], circle[m, 1] = math.cos(step * (m + 0.5)), math.sin(step * (m + 0.5))
    for n in range(first, after):
        shape, row, f = shape_of[n], out[n], frames[n]
        row[:] = 0.0
        row[SLOW_MM] = 1e30
        low[:], high[:], turn_low[:], turn_high[:], lever[:] = 0.0, 0.0, 0.0, 0.0, 0.0
        ax, ay, az, ex, ey, ez = f[3], f[4], f[5], f[6], f[7], f[8]
        gx, gy, gz = ey * az - ez * ay, ez * ax - ex * az, ex * ay - ey * ax
        weight = chips = 0.0
        for ring in range(rings):
            h, radius, radial, axial = places[shape, ring]
            for m in range(angles):
                if hits[n, ring, m] == 0:
                    continue
                c, d = circle[m, 0], circle[m, 1]
                rx, ry, rz = c * ex + d * gx, c * ey + d * gy, c * ez + d * gz
                turned = radius * (rx * f[12] + ry * f[13] + rz * f[14])
                vx, vy, vz = (
                    f[9] + h * f[12] - turned * ax,
                    f[10] + h * f[13] - turned * ay,
                    f[11] + h * f[14] - turned * az,
                )
                out_speed, up_speed = vx * rx + vy * ry + vz * rz, vx * ax + vy * ay + vz * az
                ahead = radial * out_speed + axial * up_speed
                if ahead <= least:
                    continue
                lever[m] += ahead * edges[shape, ring] * radius
                row[AREA] += ahead * radius * step * edges[shape, ring]
                row[SLOW_MM] = min(row[SLOW_MM], inner[shape, ring])
                row[FAST_MM] = max(row[FAST_MM], outer[shape, ring])
                chip = tooth_mm[n] * ahead
                if not chip > 0.0:
                    continue
                weight += edges[shape, ring]
                chips += chip * edges[shape, ring]
                thickest = rims[shape, ring, 0] * out_speed + rims[shape, ring, 1] * up_speed
                row[CHIP_MAX] = max(row[CHIP_MAX], chip, tooth_mm[n] * thickest)
                if laws.shape[0] > 0:
                    specific(chip, laws, kc)
                    width = chip * edges[shape, ring]
                    low[m] += kc[0] * width
                    high[m] += kc[1] * width
                    turn_low[m] += kc[0] * width * radius
                    turn_high[m] += kc[1] * width * radius
        if row[FAST_MM] == 0.0:
            row[SLOW_MM] = 0.0
        if weight > 0.0:
            row[CHIP_MEAN] = chips / weight
        most = lever.max()
        for m in range(angles):
            seen[m] = 1 if most > 0.0 and lever[m] > _ARC_SHARE * most else 0
        _arc(seen, step, row)
        teeth = flutes[shape]
        if row[CHIP_MAX] <= 0.0 or laws.shape[0] == 0:
            continue
        for m in range(angles):
            row[MEAN_LOW] += low[m] * teeth / angles
            row[MEAN_HIGH] += high[m] * teeth / angles
            row[TORQUE_LOW] += turn_low[m] * teeth / angles
            row[TORQUE_HIGH] += turn_high[m] * teeth / angles
            sums[:] = 0.0
            for tooth in range(teeth):
                at = (m + round(tooth * angles / teeth)) % angles
                sums[0] += low[at]
                sums[1] += high[at]
                sums[2] += turn_low[at]
                sums[3] += turn_high[at]
            for k in range(2):
                row[PEAK_LOW + k] = max(row[PEAK_LOW + k], sums[k])
                row[TORQUE_PEAK_LOW + k] = max(row[TORQUE_PEAK_LOW + k], sums[2 + k])


@njit(cache=True, nogil=True)
def _arc(seen: np.ndarray, step: float, row: np.ndarray) -> None:
    """Engaged arc [rad], and the angles where it begins and ends: the widest gap in it is what is left out."""
    angles = len(seen)
    marked = 0
    for m in range(angles):
        marked += seen[m]
    if marked == 0:
        return
    row[ARC] = marked * step
    if marked == angles:
        row[ENTRY], row[EXIT] = 0.0, 2.0 * math.pi
        return
    gap, widest, after = 0, -1, 0
    for m in range(2 * angles):
        if seen[m % angles]:
            if gap > widest:
                widest, after = gap, m % angles
            gap = 0
        else:
            gap += 1
            if gap >= angles:
                break
    row[ENTRY] = after * step
    row[EXIT] = row[ENTRY] + (angles - widest) * step
    if row[EXIT] > 2.0 * math.pi + 1e-9 and row[ENTRY] > math.pi:
        row[ENTRY] -= 2.0 * math.pi
        row[EXIT] -= 2.0 * math.pi
