"""Stored runs that once ended in a fault of the program; each names the symptom."""

from __future__ import annotations

from pathlib import Path

import pytest

from reports.runs import report_again
from rig.errors import LockspanError


def test_a_stored_run_nested_beyond_reading_is_refused(tmp_path: Path) -> None:
    """Used to end in RecursionError, out of the reader of JSON."""
    (tmp_path / "run.json").write_text("[" * 100_000)
    with pytest.raises(LockspanError, match=r"run\.json: cannot be read"):
        report_again(tmp_path, sweep_file=None, date="2026-01-01")
