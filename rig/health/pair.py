"""What is wrong with the two channels of a pair, to be carried into the result of a capture."""

from __future__ import annotations

from dataclasses import dataclass

from rig.channels import Channel
from rig.health.examine import SignalHealth, examine_signals
from rig.health.faults import Fault

# Faults that let no state be told from the phases, however clean these look.
DECIDING = ("crosstalk",)


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
        return tuple(f"{fault.severity}: {fault.text}" for fault in self.faults)

    @property
    def no_state_reason(self) -> str | None:
        """Why no state may be told from this capture, None when nothing forbids it."""
        reasons = (
            fault.text
            for fault in self.faults
            if fault.name in DECIDING and fault.severity == "fault"
        )
        return next(reasons, None)


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
