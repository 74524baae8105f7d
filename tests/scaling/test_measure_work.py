"""The work of measuring one capture, counted: modules loaded, passes over the record."""

from __future__ import annotations

import math
import subprocess
import sys
import wave
from collections.abc import Iterator, Sequence
from pathlib import Path

import numpy as np
import pytest

from fit.analysis import MeasureSettings, measure_pair
from rig.captures import Capture, CaptureChannel
from rig.channels import ChannelSetup, wire_channel

ROOT = Path(__file__).resolve().parents[2]
RATE_HZ = 4000
LINE_HZ = 200.0
# Each of these takes longer to load than a short record takes to measure.
HEAVY = (
    "scipy",
    "lmfit",
    "matplotlib",
    "soundfile",
    "h5py",
    "numpy.ma",
    "multiprocessing",
    "rig.sweepfile.read",
    "reports.page",
    "reports.limits",
)


def _samples(psi: np.ndarray, first: int) -> np.ndarray:
    """Return frames of a pair from its phase difference, with something like noise."""
    index = np.arange(first, first + psi.size)
    carrier = 2.0 * np.pi * LINE_HZ / RATE_HZ * index
    rough = np.modf(np.abs(np.sin(12.9898 * index) * 43758.5453))[0] - 0.5
    return np.stack([np.cos(carrier), np.cos(carrier + psi)]) + 0.02 * rough


def _pulled(frames: int) -> np.ndarray:
    """Return psi' = 6 - 4 sin psi (rad/s) with a diffusion of 0.5 rad2/s."""
    kicks = np.sqrt(1.0 / RATE_HZ) * np.random.default_rng(5).standard_normal(frames)
    psi = [0.3]
    for kick in kicks[1:].tolist():
        psi.append(psi[-1] + (6.0 - 4.0 * math.sin(psi[-1])) / RATE_HZ + kick)
    return np.array(psi)


@pytest.fixture(scope="module")
def capture_file(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A WAV file of 20 s."""
    path = tmp_path_factory.mktemp("work") / "pair.wav"
    with wave.open(str(path), "wb") as file:
        file.setnchannels(2)
        file.setsampwidth(2)
        file.setframerate(RATE_HZ)
        file.writeframes((20_000 * _samples(_pulled(20 * RATE_HZ), 0)).T.astype("<i2").tobytes())
    return path


@pytest.mark.parametrize("command", ["measure", "inspect"])
def test_one_capture_is_looked_at_without_heavy_packages(command: str, capture_file: Path) -> None:
    """An engineer at the rig waits for every import (goal: numpy and the standard library)."""
    code = (
        "import sys\n"
        "from reports.cli import main\n"
        f"sys.argv = ['lockspan', {command!r}, {str(capture_file)!r}]\n"
        "try:\n    main()\n"
        "except SystemExit as end:\n    assert end.code in (0, 4), end.code\n"
        f"heavy = [name for name in {HEAVY!r} if name in sys.modules]\n"
        "assert not heavy, heavy\n"
    )
    done = subprocess.run([sys.executable, "-c", code], cwd=ROOT, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    if command == "measure":
        # The estimate was made, and with it every test and interval that could load something.
        coupling = next(line for line in done.stdout.splitlines() if line.startswith("coupling"))
        assert "±" in coupling
        assert "not tested" not in done.stdout


def test_a_capture_is_read_twice_and_no_more() -> None:
    """Once for the phases, once for the health of the signals, however many checks there are."""
    frames = 1_200_000
    spans: list[tuple[int, int]] = []

    def source(
        columns: Sequence[int], block_frames: int, start: int, stop: int
    ) -> Iterator[np.ndarray]:
        spans.append((start, stop))
        for first in range(start, stop, block_frames):
            psi = 1.5 * np.arange(first, min(first + block_frames, stop)) / RATE_HZ
            yield _samples(psi, first)[list(columns)]

    capture = Capture(
        path="made",
        format="made",
        rate_hz=float(RATE_HZ),
        frame_count=frames,
        channels=(CaptureChannel(name="a"), CaptureChannel(name="b")),
        source=source,
    )
    reference, driven = (wire_channel(capture, ChannelSetup(channel=name)) for name in "ab")
    measured = measure_pair(reference, driven, settings=MeasureSettings())
    assert measured.slips
    assert spans.count((0, frames)) == 2
    beside = sum(stop - start for start, stop in spans) - 2 * frames
    # two channels x (three places of 65,536 frames and 131,072 samples for the line)
    assert beside <= 2 * (3 * 65_536 + 131_072)
