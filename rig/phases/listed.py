"""Edge lists: captures whose rows are changes of level, phased from the times of the rows.

A counter or logic recorder writes when a level changed, far finer than any rate at which the
level would be sampled. Such a capture is followed by its edges, not by samples of it.
"""

from __future__ import annotations

from typing import Protocol, runtime_checkable

from rig.arrays import FloatArray
from rig.captures import Capture
from rig.channels import Channel
from rig.phases.instants import EventChannel
from rig.phases.settings import PhaseSettings

EDGE_LIST_NOTE = (
    "edge list: phases by pulses are from the times of the rows, not from samples at the rate"
)


@runtime_checkable
class EdgeSource(Protocol):
    """A source of blocks that also knows when its levels changed."""

    def edges_s(self, column: int, *, rising: bool) -> FloatArray:
        """Return the times of the changes to 1 (or to 0) of a column, s after the start."""


def is_edge_list(capture: Capture) -> bool:
    """Tell whether the rows of a capture are changes of level, not samples."""
    return isinstance(capture.source, EdgeSource)


def listed_events(channel: Channel, settings: PhaseSettings) -> EventChannel | None:
    """Return the edges of a channel of an edge list; None where samples are to be followed.

    Parameters
    ----------
    channel : Channel
    settings : PhaseSettings
        Methods "auto" and "pulse" take the edges; the others and a stated band take samples.
        Edge "falling" takes those to 0; any other those to 1.

    Raises
    ------
    PhaseError
        If the edges are fewer than 4.
    """
    source = channel.capture.source
    if settings.method not in ("auto", "pulse") or settings.band_hz is not None:
        return None
    if not isinstance(source, EdgeSource):
        return None
    return EventChannel(
        name=channel.name,
        event_s=source.edges_s(channel.column, rising=settings.edge != "falling"),
        setup=channel.setup,
        unit=channel.unit,
        scale=abs(channel.scale),
        scale_u_rel=channel.scale_u_rel,
        skew_from_file_s=channel.skew_from_file_s,
    )
