"""What is wrong with the two channels of a pair, to be carried into the result of a capture."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from rig.channels import Channel
from rig.health.channel_lines import is_mains
from rig.health.crosstalk import second_line
from rig.health.examine import SignalHealth, examine_signals
from rig.health.faults import Fault
from rig.health.survey import ChannelSurvey

# Faults that let no state be told from the phases, however clean these look.
DECIDING = ("crosstalk",)
SAME_MAINS_HZ = 0.01  # two channels that follow the mains follow one frequency
COPY_SHARE = 1e-3  # of the rms: sensors of two oscillators never agree to that, a split one does


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PairHealth:
    """Health of reference and driven of one capture."""

    reference: SignalHealth
    driven: SignalHealth

    @property
    def faults(self) -> tuple[Fault, ...]:
        """Faults and warnings of both, each once."""
        both = (*self.reference.faults, *self.driven.faults)
        return tuple({fault.text: fault for fault in both}.values())

    @property
    def notes(self) -> tuple[str, ...]:
        """One line a fault, for the notes of a result."""
        return tuple(f"{fault.severity}: {fault.text}" for fault in self.faults) + _copy_notes(
            self.reference, self.driven
        )

    @property
    def no_state_reason(self) -> str | None:
        """Why no state may be told from this capture, None when nothing forbids it."""
        reasons = (
            fault.text
            for fault in self.faults
            if fault.name in DECIDING and fault.severity == "fault"
        )
        return next(reasons, None)

    def mains_reason(self, reference_hz: float | None, driven_hz: float | None) -> str | None:
        """Return why a lock may be the mains in both channels; None when nothing says so.

        Only where each channel shows a further line that may be its own oscillation: a pair
        that really runs at mains frequency shows none.

        Parameters
        ----------
        reference_hz, driven_hz : float or None, Hz, the frequencies that were followed
        """
        if reference_hz is None or driven_hz is None:
            return None
        if abs(reference_hz - driven_hz) > SAME_MAINS_HZ or not is_mains(reference_hz, 0.0):
            return None
        found = [part.lines for part in (self.reference, self.driven)]
        others = [second_line(part) for part in found if part is not None and not part.is_spiky]
        if len(others) < 2 or others[0] is None or others[1] is None:
            return None
        return (
            f"both channels follow the mains at {reference_hz:.6g} Hz beside lines at "
            f"{others[0].frequency_hz:.6g} and {others[1].frequency_hz:.6g} Hz; state the bands "
            "of the oscillators"
        )


def _copy_notes(reference: SignalHealth, driven: SignalHealth) -> tuple[str, ...]:
    """Say that both channels carry one signal, as when one sensor feeds two inputs."""
    if reference.column == driven.column:
        return ()
    share = _apart_share(reference.survey, driven.survey)
    if share is None or share > COPY_SHARE:
        return ()
    return (
        f"warning: {driven.channel} is {reference.channel} times a constant to {share:.1g} of its "
        "rms value: one signal in both channels always reads as locked. Check the wiring.",
    )


def _apart_share(first: ChannelSurvey, second: ChannelSurvey) -> float | None:
    """Return what of the second channel is no multiple of the first, over its rms value."""
    pairs = [(a, b) for a, b in zip(first.pieces, second.pieces, strict=False) if a.size == b.size]
    if not pairs:
        return None
    x, y = (np.concatenate(side) for side in zip(*pairs, strict=True))
    there = np.isfinite(x) & np.isfinite(y)
    x, y = x[there], y[there]
    if x.size == 0:
        return None
    x, y = x - x.mean(), y - y.mean()
    power = float(x @ x)
    if not power > 0 or not float(y @ y) > 0:
        return None
    rest = y - float(x @ y) / power * x
    return float(np.sqrt((rest @ rest) / (y @ y)))


def examine_pair(reference: Channel, driven: Channel) -> PairHealth:
    """Return the health of the two channels of a pair, from one pass over their capture.

    Parameters
    ----------
    reference, driven : Channel of one capture; one column may serve both roles

    Raises
    ------
    CaptureError
        If the file turns out to be damaged while it is read.
    """
    columns = list(dict.fromkeys((reference.column, driven.column)))
    found = {health.column: health for health in examine_signals(reference.capture, columns)}
    return PairHealth(reference=found[reference.column], driven=found[driven.column])
