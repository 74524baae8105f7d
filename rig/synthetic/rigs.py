"""The table of simulated rigs, and one door to all of them."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from rig.errors import CaptureError
from rig.synthetic.clocks import ClockSettings, simulate_clocks
from rig.synthetic.exciters import ExciterSettings, simulate_exciters
from rig.synthetic.heartbeat import HeartbeatSettings, simulate_heartbeat
from rig.synthetic.injected import CircuitSettings, simulate_circuit
from rig.synthetic.pendulums import PendulumSettings, simulate_pendulums
from rig.synthetic.records import SimulatedCapture
from rig.synthetic.ring import RingSettings, simulate_ring

MOST_FRAMES = 2e7  # of one capture: half a gigabyte of state and samples


@dataclass(frozen=True, slots=True, kw_only=True)
class Rig:
    """A rig that can be simulated: its settings record, its function, one line about it."""

    settings: type[Any]
    simulate: Callable[[Any, np.random.Generator], SimulatedCapture]
    summary: str


RIGS: dict[str, Rig] = {
    "circuit": Rig(
        settings=CircuitSettings,
        simulate=simulate_circuit,
        summary="electronic oscillator under injection, about 500 Hz, one-way",
    ),
    "ring": Rig(
        settings=RingSettings,
        simulate=simulate_ring,
        summary="ring of three inverting stages under injection, far from a sine",
    ),
    "clocks": Rig(
        settings=ClockSettings,
        simulate=simulate_clocks,
        summary="two metronomes on a beam that can move, mutual",
    ),
    "exciters": Rig(
        settings=ExciterSettings,
        simulate=simulate_exciters,
        summary="two unbalanced exciters on a softly mounted frame, mutual",
    ),
    "heartbeat": Rig(
        settings=HeartbeatSettings,
        simulate=simulate_heartbeat,
        summary="spikes against paced breathing, locked 1:3 in two stretches",
    ),
    "pendulums": Rig(
        settings=PendulumSettings,
        simulate=simulate_pendulums,
        summary="two free pendulums on a spring: linear modes that beat, never locked",
    ),
}


def simulate_rig(name: str, *, settings: Mapping[str, float], seed: int) -> SimulatedCapture:
    """Return one capture of a simulated rig with its truth.

    Parameters
    ----------
    name : str, a key of ``RIGS``
    settings : mapping of setting names of that rig to values; what is left out keeps its
        default
    seed : int, seed of every chance in it

    Raises
    ------
    CaptureError
        If the rig or a setting is not known, or a value breaks a rule of the rig.
    """
    rig = RIGS.get(name)
    if rig is None:
        raise CaptureError(f"no simulated rig '{name}'; rigs are {', '.join(RIGS)}")
    unknown = [key for key in settings if key not in setting_names(rig.settings)]
    if unknown:
        known = ", ".join(setting_names(rig.settings))
        raise CaptureError(f"rig '{name}' has no setting '{unknown[0]}'; settings are {known}")
    try:
        record = _build(rig.settings, settings)
        _refuse_size(record)
        return rig.simulate(record, np.random.default_rng(seed))
    except CaptureError:
        raise
    except ValueError as error:
        raise CaptureError(f"rig '{name}': {error}") from error


def _refuse_size(record: Any) -> None:
    """Refuse a capture of no frame, or of more frames than memory should be asked for."""
    frames = record.duration_s * record.rate_hz
    if not 1 <= frames <= MOST_FRAMES:
        raise ValueError(
            f"duration_s {record.duration_s:g} at rate_hz {record.rate_hz:g} makes {frames:.3g} "
            f"frames; 1 to {MOST_FRAMES:.0e} can be simulated"
        )


def setting_names(record: type[Any]) -> list[str]:
    """Return the names of the numbers of a settings record, those of nested records too."""
    names: list[str] = []
    for field in dataclasses.fields(record):
        nested = _nested_record(field)
        names += [field.name] if nested is None else setting_names(nested)
    return names


def _nested_record(field: dataclasses.Field[Any]) -> type[Any] | None:
    factory = field.default_factory
    return factory if isinstance(factory, type) and dataclasses.is_dataclass(factory) else None


def _build(record: type[Any], values: Mapping[str, float]) -> Any:
    """Return a settings record with some numbers replaced, in nested records too."""
    arguments: dict[str, Any] = {}
    for field in dataclasses.fields(record):
        nested = _nested_record(field)
        if nested is not None:
            arguments[field.name] = _build(nested, values)
        elif field.name in values:
            arguments[field.name] = values[field.name]
    return record(**arguments)
