"""The sweep file: what a person states once about a campaign, and its table of points."""

from rig.sweepfile.keys import ITEM_KEYS, LAB_KEYS, NOT_STATED
from rig.sweepfile.read import read_sweep_file
from rig.sweepfile.records import (
    FreeRunEntry,
    LevelAxis,
    LevelKind,
    MeasureTable,
    PointEntry,
    SweepPlan,
    VariableAxis,
)
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
    "SweepPlan",
    "VariableAxis",
    "read_points_table",
    "read_sweep_file",
    "render_points_csv",
    "render_sweep_toml",
]
