"""Rapids, shank and holder against the stock as it stands at each moment, where the blank before any cut is too strict.

The blank before any cut holds all that ever stands, so what is clear of it is clear for good and is not looked at here.
Distances come of a sampled field; what it may have missed is taken off before anything is compared: docs/theory-stock.md,
"Clearance through time".
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from anticlast.proof.collisions import lifts
from anticlast.records import Finding
from anticlast.tolerances import CLEARANCE_MM, STOCK_REACH_MM

if TYPE_CHECKING:
    from collections.abc import Sequence

    from anticlast.records import Bools, Job, PartMotion
    from anticlast.stock.clearance import BodyClearance

_END = "cutting end"


def standing_clearances(job: Job, motion: PartMotion, moving: Bools) -> tuple[BodyClearance, ...]:
    """Return how near each body of each cutter comes to the stock as it stands, one entry a body.

    Parameters
    ----------
    job : Job
    motion : PartMotion
        Part coordinates, in order of time.
    moving : (m,) bool
        Pieces that are motion. Rapids that draw the cutter back along its own axis are left out: they pass through nothing
        that was not clear of the cutter before.

    Raises
    ------
    BadInput
        The mesh or the measured heights of the blank cannot be used.
    NotConverged
        The blank's allowance folds over.
    """
    from anticlast.saddle import Saddle
    from anticlast.stock.blank import blank_field
    from anticlast.stock.clearance import clearance_through_time

    watched = moving & ~(motion.rapid & lifts(motion))
    saddle = Saddle.of(job.part)
    return clearance_through_time(blank_field(job), motion, job.cutters, saddle, moving=watched)[0]


def sure_mm(found: BodyClearance) -> float:
    """Return what the true distance [mm] is not below: sampling and joined pieces taken off."""
    return found.distance_mm - found.slack_mm - STOCK_REACH_MM


def rapids_in_standing(
    job: Job, found: Sequence[BodyClearance], motion: PartMotion, *, rigid_clear: bool
) -> Finding:
    """Compare rapids with the stock as it stands: the cutting end keeps the job's clearance, shank and holder stay off it.

    ``rigid_clear``: shank and holder are known to be clear of the blank at rapid. If they are not, a body that is near at
    feed counts too: only its least distance is known, and a rapid may hide behind that.
    """
    limit = job.clearance_mm
    rigid = [one for one in found if one.body != _END and one.row >= 0 and not rigid_clear]
    ends = [one for one in found if one.body == _END and one.row >= 0]
    for one in sorted(rigid, key=sure_mm)[:1]:
        if sure_mm(one) <= 0.0:
            start = "at rapid the" if motion.rapid[one.row] else "rapids are not shown to be clear, for the"
            message = f"{start} {_told(one)}; lift the cutter higher before it moves across"
            return Finding("rapids", False, one.distance_mm, 0.0, "mm", _line(one), message)
    if not ends:
        message = "no rapid move comes near the stock as it stands by then"
        return Finding(
            "rapids", True, min((one.distance_mm for one in rigid), default=limit), limit, "mm", 0, message
        )
    worst = min(ends, key=sure_mm)
    message = f"at rapid the {_told(worst)}; the job asks for {limit:g} mm"
    if sure_mm(worst) >= limit - CLEARANCE_MM:
        return Finding("rapids", True, worst.distance_mm, limit, "mm", worst.line, message)
    message += ": lift higher, start the feed move earlier, or cut that stock first"
    return Finding("rapids", False, worst.distance_mm, limit, "mm", _line(worst), message)


def holder_in_standing(found: Sequence[BodyClearance], motion: PartMotion) -> list[Finding]:
    """Shank and holder stay off the stock that feed moves leave; nothing is said where they never come near."""
    feeding = [one for one in found if one.body != _END and one.row >= 0 and not motion.rapid[one.row]]
    if not feeding:
        return []
    worst = min(feeding, key=sure_mm)
    if sure_mm(worst) > 0.0:
        return [
            Finding("holder in stock", True, worst.distance_mm, 0.0, "mm", worst.line, f"the {_told(worst)}")
        ]
    message = (
        f"the {_told(worst)}; use more stickout, longer flutes or a slimmer holder, or cut that stock first"
    )
    return [Finding("holder in stock", False, worst.distance_mm, 0.0, "mm", _line(worst), message)]


def _line(found: BodyClearance) -> int:
    """Return the line where a body first reached in, or the one where it came nearest."""
    return found.first_line or found.line


def _told(found: BodyClearance) -> str:
    x, y = found.at_mm
    name, where = f"{found.body} of cutter {found.cutter}", f"at x = {x:.2f}, y = {y:.2f}"
    if found.distance_mm < 0.0:
        first = f", first in line {found.first_line}" if found.first_line else ""
        return f"{name} reaches {-found.distance_mm:.2f} mm into the stock as it stands in line {found.line}{first}, {where}"
    sure = max(0.0, sure_mm(found))
    return (
        f"{name} comes within {found.distance_mm:.2f} mm of the stock as it stands in line {found.line}, {where} "
        f"(surely no nearer than {sure:.2f} mm)"
    )
