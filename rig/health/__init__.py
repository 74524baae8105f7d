"""What is wrong with a signal, found in one pass: each fault with its threshold and reason.

A fault of severity "fault" means that a phase or a state drawn from the channel is not to be
trusted; a "warning" means that it is, with what the text says in mind. Every threshold stands
in one table with its reason, every check is one function in one table. Which states follow
from a fault is not judged here. Names are loaded when first asked for.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from rig.health.crosstalk import Crosstalk
    from rig.health.examine import SignalHealth, examine_signals
    from rig.health.faults import THRESHOLDS, Fault, Threshold
    from rig.health.naming import NamedLine, named_lines
    from rig.health.pair import PairHealth, examine_pair

__all__ = [
    "THRESHOLDS",
    "Crosstalk",
    "Fault",
    "NamedLine",
    "PairHealth",
    "SignalHealth",
    "Threshold",
    "examine_pair",
    "examine_signals",
    "named_lines",
]
_HOMES = {
    "THRESHOLDS": "faults",
    "Crosstalk": "crosstalk",
    "Fault": "faults",
    "NamedLine": "naming",
    "PairHealth": "pair",
    "SignalHealth": "examine",
    "Threshold": "faults",
    "examine_pair": "pair",
    "examine_signals": "examine",
    "named_lines": "naming",
}


def __getattr__(name: str) -> Any:
    """Return a public name from its home module."""
    if name not in _HOMES:
        raise AttributeError(f"module 'rig.health' has no attribute '{name}'")
    return getattr(importlib.import_module(f"rig.health.{_HOMES[name]}"), name)
