"""A small campaign on disk for tests: WAV files of a driven pair, a sweep file, a table.

The pair's psi is integrated step by step from its equation of motion with noise; enough for
tests of running, storing and resuming, which do not judge the numbers. Tests of the numbers
use the simulated rigs.
"""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np

FREE_HZ, RATE_HZ, COUPLING_HZ = 50.0, 1000, 0.5
DRIVES_HZ = (49.1, 49.5, 49.8, 50.0, 50.2, 50.5, 50.9)

SWEEP = """
points = {{ table = "points.csv" }}

[pair]
order = "1:1"
coupling = "one-way"

[item]
description = "pair of test oscillators"

[lab]
report_id = "T-1"

[reference]
channel = 1
unit = "V"

[driven]
channel = 2
unit = "V"

[level]
name = "drive amplitude"
unit = "V"

[measure]
settle_s = 0.5

[[free_running]]
file = "alone.wav"
role = "driven"

[[limit]]
name = "Width"
quantity = "locking_width_hz"
lower = {lower}
"""


def drifting_psi(detuning_hz: float, coupling_hz: float, seconds: float, seed: int) -> np.ndarray:
    """psi at the capture's rate, stepped with noise (D = 0.02 rad2/s)."""
    rng = np.random.default_rng(seed)
    step_s = 1.0 / RATE_HZ
    kicks = math.sqrt(2 * 0.02 * step_s) * rng.standard_normal(int(seconds * RATE_HZ))
    psi, out = 0.3, np.empty(kicks.size)
    for k, kick in enumerate(kicks):
        psi += 2 * math.pi * (detuning_hz - coupling_hz * math.sin(psi)) * step_s + kick
        out[k] = psi
    return out


def pair_samples(drive_hz: float, *, coupling_hz: float, seconds: float, seed: int) -> np.ndarray:
    """Two channels (frames, 2): the drive and the driven oscillator, with recorder noise."""
    psi = drifting_psi(FREE_HZ - drive_hz, coupling_hz, seconds, seed)
    drive = 2 * math.pi * drive_hz * np.arange(psi.size) / RATE_HZ
    noise = 2e-3 * np.random.default_rng(seed + 1).standard_normal((psi.size, 2))
    return 0.5 * np.column_stack([np.cos(drive), np.cos(drive + psi)]) + noise


def write_wav(path: Path, samples: np.ndarray, rate_hz: int = RATE_HZ) -> None:
    """Write a 24-bit WAV file."""
    import soundfile

    soundfile.write(path, samples, rate_hz, subtype="PCM_24")


def write_campaign(
    folder: Path, *, lower: float = 0.5, seconds: float = 8.0, drives: tuple = DRIVES_HZ
) -> Path:
    """Write the captures, the table and the sweep file; return the path of the sweep file."""
    folder.mkdir(parents=True, exist_ok=True)
    rows = ["file,drive_hz,level,direction"]
    for number, drive_hz in enumerate(drives):
        name = f"p{number}.wav"
        samples = pair_samples(drive_hz, coupling_hz=COUPLING_HZ, seconds=seconds, seed=10 * number)
        write_wav(folder / name, samples)
        rows.append(f"{name},{drive_hz},1.0,up")
    write_wav(folder / "alone.wav", pair_samples(49.1, coupling_hz=0.0, seconds=seconds, seed=999))
    (folder / "points.csv").write_text("\n".join(rows) + "\n", encoding="utf-8")
    path = folder / "SWEEP.toml"
    path.write_text(SWEEP.format(lower=lower), encoding="utf-8")
    return path
