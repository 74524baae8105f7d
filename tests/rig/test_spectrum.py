"""Lines in a spectrum: frequency, amplitude and floor against signals of known content."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

import numpy as np
import pytest

from rig.captures import Capture, CaptureChannel
from rig.errors import PhaseError
from rig.spectrum import (
    capture_spectrum,
    dominant_line,
    find_lines,
    smooth_length,
    whole_spectrum,
)


def capture_of(samples: np.ndarray, rate_hz: float) -> Capture:
    """Return a capture that hands out the rows of an array in blocks."""
    rows = np.atleast_2d(samples)

    def source(
        columns: Sequence[int], block_frames: int, start: int, stop: int
    ) -> Iterator[np.ndarray]:
        for first in range(start, stop, block_frames):
            yield rows[list(columns), first : min(first + block_frames, stop)]

    return Capture(
        path="made.wav",
        format="made",
        rate_hz=rate_hz,
        frame_count=rows.shape[1],
        channels=tuple(CaptureChannel(name=f"ch{i + 1}") for i in range(rows.shape[0])),
        source=source,
    )


def test_frequency_and_amplitude_of_a_sine_in_noise_are_found(rng: np.random.Generator) -> None:
    """Bands of every estimator start from this line."""
    time = np.arange(200_000) / 8000.0
    samples = 0.7 * np.sin(2 * np.pi * 25.137 * time) + 0.05 * rng.standard_normal(time.size) + 3.0
    line = dominant_line(capture_of(samples, 8000.0), 0)
    # a hundredth of the 0.18 Hz bin: the interpolation is exact but for noise
    assert line.frequency_hz == pytest.approx(25.137, abs=0.002)
    assert line.amplitude == pytest.approx(0.7, rel=0.01)
    # white noise of variance s2 has one-sided density 2 s2 / rate; median of a few bins: 30 %
    assert line.noise_density == pytest.approx(2 * 0.05**2 / 8000, rel=0.3)


def test_a_line_slower_than_the_pieces_is_found_in_the_whole_record(
    rng: np.random.Generator,
) -> None:
    """A 0.4 Hz pendulum sampled at 50 kHz has less than one cycle in each piece."""
    time = np.arange(2_500_000) / 50_000.0
    samples = np.sin(2 * np.pi * 0.41 * time) + 0.2 * rng.standard_normal(time.size)
    line = dominant_line(capture_of(samples, 50_000.0), 0)
    assert line.frequency_hz == pytest.approx(0.41, abs=0.002)
    assert line.amplitude == pytest.approx(1.0, rel=0.02)


def test_a_band_picks_the_weaker_line(rng: np.random.Generator) -> None:
    """One column may serve both roles with two bands."""
    time = np.arange(60_000) / 1000.0
    samples = np.sin(2 * np.pi * 40 * time) + 0.1 * np.sin(2 * np.pi * 7.3 * time)
    line = dominant_line(
        capture_of(samples + 0.01 * rng.standard_normal(time.size), 1000.0),
        0,
        low_hz=5,
        high_hz=10,
    )
    assert line.frequency_hz == pytest.approx(7.3, abs=0.005)
    assert line.amplitude == pytest.approx(0.1, rel=0.03)


def test_two_close_lines_are_told_apart_over_the_whole_record(rng: np.random.Generator) -> None:
    """Crosstalk is only seen when the partner's line is resolved from the own one."""
    time = np.arange(120_000) / 1000.0
    samples = np.sin(2 * np.pi * 5.0 * time) + 0.3 * np.sin(2 * np.pi * 5.1 * time)
    spectrum = whole_spectrum(
        capture_of(samples + 0.01 * rng.standard_normal(time.size), 1000.0), 0
    )
    lines = find_lines(spectrum, count=2)
    assert [line.frequency_hz for line in lines] == pytest.approx([5.0, 5.1], abs=0.003)
    assert [line.amplitude for line in lines] == pytest.approx([1.0, 0.3], rel=0.05)


def test_a_wandering_line_keeps_its_power(rng: np.random.Generator) -> None:
    """A noisy oscillator spreads over many bins; its amplitude must not shrink with them."""
    phase = np.cumsum(2 * np.pi * 20 / 2000 + 0.03 * rng.standard_normal(400_000))
    line = dominant_line(capture_of(np.cos(phase), 2000.0), 0)
    # linewidth 0.03**2 * 2000 / (2 pi) = 0.29 Hz, some bins wide; the far tails are floor
    assert line.frequency_hz == pytest.approx(20.0, abs=0.2)
    assert line.amplitude == pytest.approx(1.0, rel=0.1)


def test_a_gap_of_missing_samples_does_not_spoil_the_spectrum(rng: np.random.Generator) -> None:
    """Missing samples stand as NaN and would turn a transform into NaN."""
    time = np.arange(100_000) / 1000.0
    samples = np.sin(2 * np.pi * 30 * time) + 0.01 * rng.standard_normal(time.size)
    samples[40_000:40_300] = np.nan
    line = dominant_line(capture_of(samples, 1000.0), 0)
    assert line.frequency_hz == pytest.approx(30.0, abs=0.005)


def test_the_density_sums_to_the_variance(rng: np.random.Generator) -> None:
    """The scale of the density is what every fault threshold stands on."""
    samples = rng.standard_normal(100_000)
    spectrum = capture_spectrum(capture_of(samples, 500.0), 0)
    # 100 000 samples give the variance to 0.5 %
    assert np.sum(spectrum.density) * spectrum.resolution_hz == pytest.approx(1.0, rel=0.03)


@pytest.mark.parametrize("level", [0.0, 0.1, -3.7])
def test_a_constant_channel_is_refused(level: float) -> None:
    """A dead cable is no oscillator."""
    with pytest.raises(PhaseError, match="no oscillation"):
        dominant_line(capture_of(np.full(5000, level), 100.0), 0)


def test_an_empty_band_is_refused(rng: np.random.Generator) -> None:
    """A band above half the rate holds no bin."""
    with pytest.raises(PhaseError, match="no line between 900 Hz and 950 Hz"):
        dominant_line(capture_of(rng.standard_normal(5000), 1000.0), 0, low_hz=900, high_hz=950)


@pytest.mark.parametrize("frames", [16, 17, 40, 301])
def test_short_records_give_a_line(frames: int) -> None:
    """The pieces of a short record shrink and overlap but never vanish."""
    samples = np.sin(2 * np.pi * 0.2 * np.arange(frames))
    line = dominant_line(capture_of(samples, 1.0), 0)
    assert line.frequency_hz == pytest.approx(0.2, abs=1.0 / frames)


@pytest.mark.parametrize(
    ("most", "length"),
    [(1, 1), (7, 6), (16, 16), (17, 16), (999_983, 995_328), (1_041_666, 1_036_800)],
)
def test_transforms_have_a_length_without_large_primes(most: int, length: int) -> None:
    """A prime length costs ten times the time and four times the memory."""
    rest = length
    for factor in (2, 3, 5):
        while rest % factor == 0:
            rest //= factor
    assert rest == 1
    assert smooth_length(most) == length
