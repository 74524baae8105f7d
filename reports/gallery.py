"""Which records a report draws: the worst, a typical one, and the small pictures in their order."""

from __future__ import annotations

from reports.records import SweepRun
from reports.residuals import coupling_of
from reports.rows import Row, longest_episode, usable_rows

# A small picture costs some 15 kB; more would make the page too heavy to mail.
CARDS_MOST = 36
_STATE_RANK = {"undecided": 0, "intermittent": 1, "locked": 2, "drifting": 3}


def card_key(row: Row) -> str:
    """Return the key of the small picture of a row."""
    return f"record-{row.index + 1}"


def gallery_rows(run: SweepRun, most: int = CARDS_MOST) -> list[Row]:
    """Return the rows to draw small: undecided first, then intermittent, then nearest an edge."""
    return sorted(usable_rows(run), key=lambda row: _urgency(run, row))[:most]


def _urgency(run: SweepRun, row: Row) -> tuple[int, float, int]:
    doubtful = row.state in ("undecided", "intermittent") or row.point.status != "ok"
    rank = _STATE_RANK[row.state] if doubtful else 2
    return (rank, _edge_distance(run, row), row.index)


def _edge_distance(run: SweepRun, row: Row) -> float:
    """Return how far a point lies from the nearest edge in units of the coupling."""
    if row.detuning_hz is None:
        return float("inf")
    distance = abs(abs(row.detuning_hz) / coupling_of(run, row) - 1.0)
    return distance if distance == distance else float("inf")  # NaN: no coupling known


def worst_row(run: SweepRun) -> Row | None:
    """Return the record that held lock but worst: most slips, then least steady."""
    held = [row for row in usable_rows(run) if row.state in ("locked", "intermittent")]
    return max(held, key=lambda row: (len(row.measurement.slips), _spread(row)), default=None)


def typical_row(run: SweepRun) -> Row | None:
    """Return the locked record of median spread."""
    locked = [row for row in usable_rows(run) if row.state == "locked"]
    ordered = sorted(locked, key=lambda row: (_spread(row), row.index))
    return ordered[len(ordered) // 2] if ordered else None


def _spread(row: Row) -> float:
    episode = longest_episode(row.measurement)
    return episode.spread_rad if episode is not None else 0.0
