"""Nasty signals in real files: each is named in the words that the user can act on."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import soundfile

from reports.inspection import Inspection, inspect_capture
from rig.readers import open_capture


def sine(frequency_hz: float, rate_hz: float, duration_s: float) -> np.ndarray:
    """Return a sine of amplitude 0.5 with a little noise."""
    time_s = np.arange(round(rate_hz * duration_s)) / rate_hz
    rng = np.random.default_rng(2)
    return 0.5 * np.sin(2 * np.pi * frequency_hz * time_s) + 1e-3 * rng.standard_normal(time_s.size)


def inspected(path: Path, *columns: np.ndarray, rate_hz: int, subtype: str) -> Inspection:
    """Write columns as a WAV file, read it back and inspect it."""
    soundfile.write(path, np.stack(columns, axis=1), rate_hz, subtype=subtype)
    return inspect_capture(open_capture(path))


def lossy() -> np.ndarray:
    """Return a sine with 0.3 s of missing samples at 12.4 s."""
    samples = sine(25, 1000, 30)
    samples[12_400:12_700] = np.nan
    return samples


GOOD = sine(23.0, 1000, 30)
LEAKY = 0.3 * sine(24.0, 1000, 30) + 0.33 * GOOD
# columns, rate in Hz, sample type, words that the line begins with
ROWS = {
    "clipped": (
        (GOOD, np.clip(8 * sine(25.3, 1000, 30), -1, 1)),
        1000,
        "PCM_16",
        "fault: channel 2: 84 % of samples at full scale; limit 0.1 %. Lower the gain and repeat.",
    ),
    "silent": (
        (np.zeros(30_000), GOOD),
        1000,
        "PCM_16",
        "fault: channel 1 has no oscillation (all samples 0). Check cable or channel order.",
    ),
    "gap": (
        (lossy(), GOOD),
        1000,
        "FLOAT",
        "warning: channel 1: gap at 12.4 to 12.7 s, 1 % of samples missing; split in 2 segments.",
    ),
    "offset": (
        (1.55 + sine(25, 1000, 30), GOOD),
        1000,
        "FLOAT",
        "warning: channel 1: offset 3.1x amplitude; taken off. Check coupling.",
    ),
    "crosstalk": (
        (GOOD, LEAKY),
        1000,
        "PCM_24",
        "fault: channel 2 contains 1.1x more of the partner's line at 23 Hz than of its own at "
        "24 Hz; locking cannot be judged.",
    ),
    "coarse": (
        (sine(25.0, 55, 200), sine(3.0, 55, 200)),
        55,
        "PCM_16",
        "fault: channel 1: rate 55 Hz gives 2.2 samples per cycle of 25 Hz; at least 4 needed "
        "(10 advised).",
    ),
    "short": (
        (sine(1.0, 1000, 3), GOOD[:3000]),
        1000,
        "PCM_16",
        "fault: channel 1: record holds 3.0 cycles; at least 20 needed (50 advised).",
    ),
}


@pytest.mark.parametrize("name", ROWS)
def test_a_nasty_signal_in_a_file_is_named_with_evidence_and_remedy(
    name: str, tmp_path: Path
) -> None:
    """What the bench sends is never clean; each kind has its own line."""
    columns, rate_hz, subtype, words = ROWS[name]
    inspection = inspected(tmp_path / "a.wav", *columns, rate_hz=rate_hz, subtype=subtype)
    lines = [f"{fault.severity}: {fault.text}" for fault in inspection.faults]
    assert any(line.startswith(words) for line in lines), lines
