"""Command lines that once did harm or ended in a fault; each names the symptom."""

from __future__ import annotations

import os
import stat
import threading
from pathlib import Path

import numpy as np
import pytest

from fit.analysis import MeasureSettings
from reports import cli
from reports.store import write_atomic
from rig.errors import CaptureError, FitError, LockspanError
from rig.readers import ReadOptions, open_capture


def test_a_pipe_or_device_is_written_to_and_not_replaced(tmp_path: Path) -> None:
    """Used to rename a plain file over it: --json /dev/null took the device from the machine."""
    pipe = tmp_path / "pipe"
    os.mkfifo(pipe)
    got: list[bytes] = []
    reader = threading.Thread(target=lambda: got.append(pipe.read_bytes()))
    reader.start()
    write_atomic(pipe, b"{}")
    reader.join(timeout=10)
    assert got == [b"{}"]
    assert stat.S_ISFIFO(pipe.stat().st_mode)


def test_a_failed_write_names_the_file_that_was_asked_for(tmp_path: Path) -> None:
    """Used to name a temporary file, or no file at all."""
    target = tmp_path / "not there" / "x.json"
    with pytest.raises(OSError, match=r"x\.json") as caught:
        write_atomic(target, b"{}")
    assert caught.value.filename == str(target)


@pytest.mark.parametrize("rate_hz", [1e-300, 1e300])
def test_a_rate_of_no_recorder_is_refused(tmp_path: Path, rate_hz: float) -> None:
    """Used to end in ZeroDivisionError or OverflowError."""
    file = tmp_path / "a.npy"
    np.save(file, np.zeros((2, 100), dtype=np.float32))
    with pytest.raises(CaptureError, match=r"a\.npy: a rate of .* lies outside"):
        open_capture(file, options=ReadOptions(rate_hz=rate_hz))


@pytest.mark.parametrize("settle_s", [-1.0, float("nan"), float("inf")])
def test_a_settling_time_that_cannot_be_meant_is_refused(settle_s: float) -> None:
    """Used to be taken as none, without a word."""
    with pytest.raises(FitError, match="settling time must be 0 s or more"):
        MeasureSettings(settle_s=settle_s)


def test_an_error_is_one_line_whatever_the_name(capsys: pytest.CaptureFixture[str]) -> None:
    """Used to break in two at a line break in a file's name; a log is searched by line."""
    assert cli._exit_code(LockspanError("a\nb.wav: is damaged")) == 3
    assert capsys.readouterr().err == "error: a\\nb.wav: is damaged\n"
