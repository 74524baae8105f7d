"""The work of measuring one capture, counted: modules loaded, passes over the record."""

from __future__ import annotations

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


def _samples(first: int, stop: int) -> np.ndarray:
    """Return a pair of which one is pulled round: psi' = 6 - 4 sin psi (rad/s), with noise."""
    time_s = np.arange(first, stop) / RATE_HZ
    # The closed form of that equation: tan(psi/2) = (4 + root tan(root t / 2)) / 6.
    root = np.sqrt(20.0)
    half = 0.5 * root * time_s
    psi = 2.0 * (np.arctan((4.0 + root * np.tan(half)) / 6.0) + np.pi * np.round(half / np.pi))
    carrier = 2.0 * np.pi * LINE_HZ * time_s
    rough = np.modf(np.abs(np.sin(12.9898 * np.arange(first, stop)) * 43758.5453))[0] - 0.5
    return np.stack([np.cos(carrier), np.cos(carrier + psi)]) + 0.02 * rough


@pytest.fixture(scope="module")
def capture_file(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A WAV file of 20 s."""
    path = tmp_path_factory.mktemp("work") / "pair.wav"
    with wave.open(str(path), "wb") as file:
        file.setnchannels(2)
        file.setsampwidth(2)
        file.setframerate(RATE_HZ)
        file.writeframes((20_000 * _samples(0, 20 * RATE_HZ)).T.astype("<i2").tobytes())
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
            yield _samples(first, min(first + block_frames, stop))[list(columns)]

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
    assert measured.adler.coupling_hz.value is not None
    assert spans.count((0, frames)) == 2
    beside = sum(stop - start for start, stop in spans) - 2 * frames
    # two channels x (three places of 65,536 frames and 131,072 samples for the line)
    assert beside <= 2 * (3 * 65_536 + 131_072)
