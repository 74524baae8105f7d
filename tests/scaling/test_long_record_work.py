"""What a long record costs, counted: bytes kept a frame, samples read, batches filtered."""

from __future__ import annotations

import tracemalloc
from collections.abc import Iterator, Sequence

import numpy as np
import pytest

from fit.difference import Order, form_difference
from fit.episodes import EpisodeRules, find_episodes
from fit.slips import find_slips
from fit.surrogates import shuffle_cycles
from rig.captures import Capture, CaptureChannel
from rig.channels import ChannelSetup, wire_channel
from rig.longarrays import LongArray
from rig.phases.demodulate import BATCH_SAMPLES, StageTwo
from rig.phases.estimate import track_pair
from rig.phases.settings import PairSettings, PhaseSettings

RATE_HZ, LINE_HZ = 51_200.0, 1000.0


def stepped(
    columns: Sequence[int], block_frames: int, start: int, stop: int
) -> Iterator[np.ndarray]:
    """Make two cosines: the second locks for 1.5 s and drifts by two turns in 0.5 s, in turn."""
    for first in range(start, stop, block_frames):
        time = np.arange(first, min(first + block_frames, stop)) / RATE_HZ
        rounds, rest = np.divmod(time, 2.0)
        slipped = 2.0 * rounds + np.clip(4.0 * (rest - 1.5), 0.0, None)
        turns = np.stack([LINE_HZ * time, LINE_HZ * time + slipped])
        yield np.cos(2.0 * np.pi * turns[list(columns)]).astype(np.float32)


def tracks_of(frames: int):
    """Return the phases of a capture of some frames."""
    made = Capture(
        path="made",
        format="made",
        rate_hz=RATE_HZ,
        frame_count=frames,
        channels=(CaptureChannel(name="a"), CaptureChannel(name="b")),
        source=stepped,
    )
    one = PhaseSettings(method="analytic")
    channels = [wire_channel(made, ChannelSetup(channel=name)) for name in ("a", "b")]
    return track_pair(*channels, settings=PairSettings(reference=one, driven=one))


def searched(frames: int):
    """Return the phase difference of such a capture and its episodes."""
    reference, driven = tracks_of(frames)
    difference = form_difference(driven, reference, Order())
    return difference, find_episodes(difference, EpisodeRules(), 1.0)


@pytest.fixture
def short_memory(monkeypatch):
    """Let rows of more than 4,000 numbers be long ones, read in small blocks."""
    monkeypatch.setattr("rig.longarrays.LONG_SAMPLES", 4000)
    monkeypatch.setattr("rig.longarrays.LONG_BLOCK", 1024)


def test_a_long_record_keeps_less_than_a_tenth_of_a_byte_a_frame(short_memory):
    """Five hours at 51.2 kHz, 1e9 frames, must fit beside the program in 128 MiB."""
    searched(500_000)  # what is made once (windows, modules) is there from here on
    kept, peaks = {}, {}
    for frames in (1_000_000, 4_000_000):
        tracemalloc.start()
        difference, episodes = searched(frames)
        kept[frames], peaks[frames] = tracemalloc.get_traced_memory()
        tracemalloc.stop()
        assert len(episodes) == pytest.approx(frames / RATE_HZ / 2.0, abs=1.0)
        assert isinstance(difference.psi_rad, LongArray)
    # Three masks of a byte a grid sample, 80 frames apart: 0.04; the episodes found are the rest.
    for found in (kept, peaks):
        assert found[4_000_000] - found[1_000_000] < 0.1 * 3_000_000
    # At these lengths the buffers of the pass are the peak: as large for any.
    assert peaks[4_000_000] < 1.1 * peaks[1_000_000]


def test_each_sample_of_psi_is_read_a_few_times(short_memory, monkeypatch):
    """Once for the windows, once for the levels, once for the angles, whatever the length."""
    touched = {}
    for frames in (1_000_000, 3_000_000):
        difference, _ = searched(frames)
        row, count = difference.psi_rad, 0

        def counted(start, stop, row=row):
            nonlocal count
            count += stop - start
            return row[start:stop]

        watched = LongArray(row.size, row.dtype, counted)
        object.__setattr__(difference, "psi_rad", watched)
        find_episodes(difference, EpisodeRules(), 1.0)
        find_slips(difference)
        touched[frames] = count / row.size
    # Windows 1 and their overlap, levels, two rounds of trimming, angles, slips and their mean.
    assert touched[3_000_000] < 10.0
    assert touched[3_000_000] == pytest.approx(touched[1_000_000], rel=0.1)


def test_every_batch_is_filtered_once(monkeypatch):
    """The sharp filter is most of the work after the first: no sample may pass it twice."""
    outputs = []
    feed = StageTwo.feed

    def counted(self, samples, count):
        outputs.append(count)
        return feed(self, samples, count)

    monkeypatch.setattr(StageTwo, "feed", counted)
    reference, _ = tracks_of(2_000_000)
    assert sum(outputs) == 2 * reference.phase_rad.size
    assert len(outputs) == 2 * -(-reference.phase_rad.size // (BATCH_SAMPLES // 2))


def test_a_surrogate_of_many_cycles_costs_no_more_than_one_of_few():
    """A record of hours has a million cycles; what is looked at of it are 512 samples."""
    peaks = {}
    for cycles in (50_000, 1_000_000):
        phase_rad = 2.0 * np.pi * np.linspace(0.0, cycles, 512) ** 1.001
        rng = np.random.default_rng(1)
        tracemalloc.start()
        shuffle_cycles(phase_rad, rng)
        peaks[cycles] = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
    assert peaks[1_000_000] < 1.1 * peaks[50_000]
