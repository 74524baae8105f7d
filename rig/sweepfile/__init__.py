"""The sweep file: what a person states once about a campaign, and its table of points.

Reading and writing are loaded when first asked for: one capture needs the records only.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

from rig.sweepfile.records import (
    FreeRunEntry,
    LevelAxis,
    LevelKind,
    MeasureTable,
    PointEntry,
    SecondRecorder,
    SweepPlan,
    VariableAxis,
)

if TYPE_CHECKING:
    from rig.sweepfile.keys import ITEM_KEYS, LAB_KEYS, NOT_STATED
    from rig.sweepfile.read import read_sweep_file
    from rig.sweepfile.table import read_points_table
    from rig.sweepfile.write import render_points_csv, render_sweep_toml

__all__ = [
    "ITEM_KEYS",
    "LAB_KEYS",
    "NOT_STATED",
    "FreeRunEntry",
    "LevelAxis",
    "LevelKind",
    "MeasureTable",
    "PointEntry",
    "SecondRecorder",
    "SweepPlan",
    "VariableAxis",
    "read_points_table",
    "read_sweep_file",
    "render_points_csv",
    "render_sweep_toml",
]
_HOMES = {
    "ITEM_KEYS": "keys",
    "LAB_KEYS": "keys",
    "NOT_STATED": "keys",
    "read_points_table": "table",
    "read_sweep_file": "read",
    "render_points_csv": "write",
    "render_sweep_toml": "write",
}


def __getattr__(name: str) -> Any:
    """Return a public name from its home module."""
    if name not in _HOMES:
        raise AttributeError(f"module 'rig.sweepfile' has no attribute '{name}'")
    return getattr(importlib.import_module(f"rig.sweepfile.{_HOMES[name]}"), name)
