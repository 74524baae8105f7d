"""One channel as the checks see it: what the pass gathered, its lines, its partner's share."""

from __future__ import annotations

import math
from dataclasses import dataclass

from rig.health.channel_lines import ChannelLines
from rig.health.crosstalk import Crosstalk
from rig.health.survey import ChannelSurvey


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Subject:
    """What the checks of one channel look at; ``title`` is how messages call it."""

    title: str
    rate_hz: float
    full_scale: float | None
    survey: ChannelSurvey
    lines: ChannelLines | None
    crosstalk: Crosstalk | None

    @property
    def cycle_frames(self) -> float:
        """Frames a cycle of the own line; infinite when nothing oscillates."""
        return math.inf if self.lines is None else self.rate_hz / self.lines.own.frequency_hz


def channel_title(column: int, name: str) -> str:
    """Return how a channel is called in a message: its number from 1, and its name."""
    return (
        f"channel {column + 1}"
        if name in ("", str(column + 1))
        else f"channel {column + 1} '{name}'"
    )
