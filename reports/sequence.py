"""The direction of a sweep from the order in which its captures were taken."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import groupby, pairwise
from typing import Literal

from reports.filenames import NameHints

Direction = Literal["up", "down", "none"]
LEAST_SPAN_NS = 2_000_000_000  # files written within 2 s were copied, not recorded one by one
LARGEST_TURNS = 0.3  # of steps that turn round: above, the points were taken in no order
FEWEST_STEPS = 2


def guess_directions(
    levels: Sequence[float],
    drives_hz: Sequence[float],
    hints: Sequence[NameHints],
    times: Sequence[tuple[str, int]],
) -> tuple[list[Direction], str]:
    """Return the direction of each capture, and what the guess rests on.

    Parameters
    ----------
    levels : sequence of float, level of each capture
    drives_hz : sequence of float, Hz
    hints : what the names say
    times : start as text ("" if unknown) and time of writing in ns, of each capture
    """
    if any(hint.direction != "none" for hint in hints):
        return [hint.direction for hint in hints], "from the file name"
    order, source = _order(hints, times)
    if order is None:
        return ["none"] * len(levels), "unknown"
    directions: list[Direction] = ["none"] * len(levels)
    for _, group in groupby(sorted(order, key=lambda i: levels[i]), key=lambda i: levels[i]):
        # The sort keeps the order in time within a level.
        members = list(group)
        for member, direction in zip(
            members, _directions([drives_hz[i] for i in members]), strict=True
        ):
            directions[member] = direction
    return directions, source


def _order(
    hints: Sequence[NameHints], times: Sequence[tuple[str, int]]
) -> tuple[list[int] | None, str]:
    """Return the captures in the order they were taken, and how that is known."""
    places = range(len(times))
    starts = [start for start, _ in times]
    if all(starts) and len(set(starts)) == len(starts):
        return sorted(places, key=lambda i: starts[i]), "from the start times"
    runs = [hint.run for hint in hints]
    if None not in runs and len(set(runs)) == len(runs):
        return sorted(places, key=lambda i: runs[i] or 0), "from the running numbers"
    written = [stamp for _, stamp in times]
    if len(set(written)) == len(written) and max(written) - min(written) > LEAST_SPAN_NS:
        return sorted(places, key=lambda i: written[i]), "from the times of writing"
    return None, "unknown"


def _directions(drives_hz: Sequence[float]) -> list[Direction]:
    """Return the direction of each point of one level, taken one after the other."""
    steps = [b - a for a, b in pairwise(drives_hz)]
    moves = [step for step in steps if step != 0.0]
    turns = sum(a * b < 0 for a, b in pairwise(moves))
    if len(moves) < FEWEST_STEPS or turns > LARGEST_TURNS * len(moves):
        return ["none"] * len(drives_hz)
    found: list[Direction] = []
    for step in [moves[0], *steps]:
        found.append("up" if step > 0 else "down" if step < 0 else found[-1])
    return found
