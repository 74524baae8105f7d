"""How a locked pair shares the way to its common frequency: what lock still tells of coupling."""

from __future__ import annotations

from fit.difference import Order


def pull_ratio(
    reference_hz: float, driven_hz: float, locked_reference_hz: float, order: Order
) -> float | None:
    """Return how far the reference gave way for each hertz that the driven gave, in lock.

    All that a locked pair and its free frequencies tell of the direction: K_r sin(.) over
    K_d sin(.).

    Parameters
    ----------
    reference_hz, driven_hz : float, Hz, free-running
    locked_reference_hz : float, Hz, of the reference in lock
    order : Order

    Returns
    -------
    float, or None where the driven did not move
    """
    moved_driven_hz = order.m * locked_reference_hz / order.n - driven_hz
    if moved_driven_hz == 0.0:
        return None
    return -(locked_reference_hz - reference_hz) / moved_driven_hz
