"""Readers of capture files: one file a family behind one table, ``rig.readers.table``.

``open_capture`` is the way in; ``READERS`` lists the formats; ``ReadOptions`` holds what a
person states about a file. Names are loaded when first asked for.
"""

from __future__ import annotations

import importlib
from typing import Any

_HOMES = {
    "READERS": "rig.readers.table",
    "ReadOptions": "rig.readers.options",
    "Reader": "rig.readers.table",
    "choose_reader": "rig.readers.table",
    "open_capture": "rig.readers.table",
}
__all__ = ["READERS", "ReadOptions", "Reader", "choose_reader", "open_capture"]


def __getattr__(name: str) -> Any:
    """Return a public name from its home module."""
    if name not in _HOMES:
        raise AttributeError(f"module 'rig.readers' has no attribute '{name}'")
    return getattr(importlib.import_module(_HOMES[name]), name)
