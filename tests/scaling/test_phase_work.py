"""The work of the phase pass, counted: frames read, bytes kept, modules loaded."""

from __future__ import annotations

import subprocess
import sys
import tracemalloc
from collections.abc import Iterator, Sequence
from pathlib import Path

import numpy as np
import pytest

from rig.captures import Capture, CaptureChannel
from rig.channels import ChannelSetup, wire_channel
from rig.phases.estimate import track_pair
from rig.phases.settings import PairSettings, PhaseSettings

ROOT = Path(__file__).resolve().parents[2]
RATE_HZ = 8000.0
BEATS_HZ = (500.0, 503.0)


class CountedSource:
    """Makes blocks of two noisy cosines on demand; counts calls, frames and passes."""

    def __init__(self, kind: type = np.float32) -> None:
        self.kind = kind
        self.frames = 0
        self.blocks = 0
        self.spans: list[tuple[int, int]] = []

    def __call__(
        self, columns: Sequence[int], block_frames: int, start: int, stop: int
    ) -> Iterator[np.ndarray]:
        self.spans.append((start, stop))
        for first in range(start, stop, block_frames):
            index = np.arange(first, min(first + block_frames, stop))
            self.frames += index.size
            self.blocks += 1
            turns = np.array(BEATS_HZ)[list(columns), None] / RATE_HZ * index
            # A rough sum of squares in place of noise: the same for a frame in any block.
            rough = np.modf(np.abs(np.sin(12.9898 * index) * 43758.5453))[0] - 0.5
            yield (np.cos(2.0 * np.pi * turns) + 0.02 * rough).astype(self.kind)


def channels_of(source: CountedSource, frames: int):
    """Return two wired channels of a capture of some frames."""
    capture = Capture(
        path="made",
        format="made",
        rate_hz=RATE_HZ,
        frame_count=frames,
        channels=(CaptureChannel(name="a"), CaptureChannel(name="b")),
        source=source,
    )
    return [wire_channel(capture, ChannelSetup(channel=name)) for name in ("a", "b")]


def stated() -> PairSettings:
    """Return settings with a method, so that nothing has to be looked at to choose one."""
    one = PhaseSettings(method="analytic")
    return PairSettings(reference=one, driven=one)


@pytest.mark.parametrize("frames", [400_000, 1_600_000])
def test_the_whole_record_is_read_once(frames):
    """Hours at 51.2 kHz are read from the disk once for both channels, not once for each."""
    source = CountedSource()
    track_pair(*channels_of(source, frames), settings=stated())
    assert source.spans.count((0, frames)) == 1


def test_what_is_read_beside_the_pass_does_not_grow_with_the_record():
    """Lines and levels come from places of the record, however long it is."""
    beside = {}
    for frames in (1_600_000, 4_800_000):
        source = CountedSource()
        track_pair(*channels_of(source, frames))
        beside[frames] = source.frames - frames
    assert beside[4_800_000] == beside[1_600_000]
    # two channels x (three places of 65,536 frames and 131,072 samples for the line)
    assert beside[1_600_000] <= 2 * (3 * 65_536 + 131_072)


def test_memory_grows_with_the_grid_alone():
    """What is kept is a few numbers a grid sample: less than a byte a frame of the record."""
    peaks = {}
    for frames in (800_000, 3_200_000):
        channels = channels_of(CountedSource(), frames)
        tracemalloc.start()
        tracks = track_pair(*channels, settings=stated())
        peaks[frames] = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
    added = peaks[3_200_000] - peaks[800_000]
    grid_samples = tracks[0].phase_rad.size * (1.0 - 800_000 / 3_200_000)
    # Both tracks: phase, amplitude, mask, and the vectors they are made from.
    assert added < 2 * 64 * grid_samples


@pytest.mark.parametrize("kind", [np.float32, np.float64])
def test_blocks_leave_no_trace_in_any_sample_type(kind):
    """One block, seven or sixty-four: the phase may not tell (goal 1e-9 rad; it is exact)."""
    frames, found = 240_001, []
    for blocks in (1, 7, 64):
        settings = PairSettings(block_frames=-(-frames // blocks))
        found.append(track_pair(*channels_of(CountedSource(kind), frames), settings=settings))
    for tracks in found[1:]:
        for track, first in zip(tracks, found[0], strict=True):
            assert np.array_equal(track.valid, first.valid)
            away = np.abs(track.phase_rad - first.phase_rad)[track.valid]
            assert away.max() <= 1e-9


def test_blocks_are_counted_not_frames():
    """A source is asked for blocks of the pass's own length: some calls, not one a frame."""
    source = CountedSource()
    track_pair(*channels_of(source, 1_600_000), settings=stated())
    # 1,600,000 / 65,536 blocks for the pass, and a piece a block for the lines.
    assert source.blocks <= 25 + 2 * 8 + 4


def test_capture_to_episodes_loads_numpy_alone():
    """scipy alone takes longer to load than a capture of a minute takes to measure."""
    code = (
        "import sys\n"
        "import numpy as np\n"
        "from fit.difference import Order, form_difference\n"
        "from fit.episodes import EpisodeRules, find_episodes\n"
        "from rig.captures import Capture, CaptureChannel\n"
        "from rig.channels import ChannelSetup, wire_channel\n"
        "from rig.phases.estimate import track_pair\n"
        "x = np.cos(0.4 * np.arange(60_000) + np.array([[0.0], [1.0]])).astype('f4')\n"
        "def source(columns, size, start, stop):\n"
        "    for k in range(start, stop, size):\n"
        "        yield x[list(columns), k:min(k + size, stop)]\n"
        "names = (CaptureChannel(name='a'), CaptureChannel(name='b'))\n"
        "made = Capture(path='m', format='m', rate_hz=8000.0, frame_count=60_000,\n"
        "               channels=names, source=source)\n"
        "a, b = (wire_channel(made, ChannelSetup(channel=n)) for n in 'ab')\n"
        "first, second = track_pair(a, b)\n"
        "order = Order(n=1, m=1, source='given')\n"
        "assert find_episodes(form_difference(second, first, order), EpisodeRules(), 1.0)\n"
        "heavy = {'scipy', 'lmfit', 'matplotlib', 'soundfile', 'h5py'} & set(sys.modules)\n"
        "print(sorted(heavy))\n"
        "sys.exit(3 if heavy else 0)\n"
    )
    found = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, cwd=ROOT, check=False
    )
    assert found.returncode == 0, found.stdout + found.stderr
