"""What semi-finishing passes say of the stock they leave: an allowance, and how even it is."""

from __future__ import annotations

from anticlast.records import Operation


def notes_of(operation: Operation, scallop_mm: float) -> tuple[str, ...]:
    """Return the note on an operation's remaining stock; empty unless it semi-finishes.

    Between the passes' lowest points, at the allowance, stand cusps of the scallop height: the next cutter meets at least the
    allowance and at most that much more.

    Parameters
    ----------
    operation : Operation
    scallop_mm : float
        Highest scallop to expect over the allowance.
    """
    if operation.does != "semi-finish":
        return ()
    least, most = operation.allowance_mm, operation.allowance_mm + scallop_mm
    return (
        f"leaves {least:.3f} to {most:.3f} mm on the surface: even to {1000.0 * scallop_mm:.0f} micrometres",
    )
