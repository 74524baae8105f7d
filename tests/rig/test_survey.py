"""One pass over a capture: every number against the plain computation over the whole array."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

import numpy as np
import pytest

from rig.captures import Capture, CaptureChannel
from rig.health.survey import SLOTS, Span, survey_channels


def capture_of(rows: np.ndarray, full_scale: float | None = None) -> Capture:
    """Return a capture that hands out rows in blocks and counts what it handed out."""

    def source(
        columns: Sequence[int], block_frames: int, start: int, stop: int
    ) -> Iterator[np.ndarray]:
        for first in range(start, stop, block_frames):
            yield rows[list(columns), first : min(first + block_frames, stop)]

    return Capture(
        path="made.wav",
        format="made",
        rate_hz=1000.0,
        frame_count=rows.shape[1],
        channels=tuple(
            CaptureChannel(name=f"ch{i + 1}", full_scale=full_scale) for i in range(rows.shape[0])
        ),
        source=source,
    )


# One frame, less than a block, block edges, slots longer than a block, averaging of the record.
SIZES = [1, 7, 599, 600, 601, 65_535, 65_536, 65_537, 200_001]


@pytest.mark.parametrize("frames", SIZES)
def test_sums_agree_with_the_whole_array_at_any_length(
    frames: int, rng: np.random.Generator
) -> None:
    """Block edges must not show: the last block, slot and mean are all of odd length."""
    rows = 1e6 + rng.standard_normal((2, frames))
    for row, found in zip(rows, survey_channels(capture_of(rows), [0, 1]), strict=True):
        assert found.finite_count == frames
        assert found.mean == pytest.approx(row.mean(), rel=1e-12)
        assert found.rms == pytest.approx(np.sqrt(np.mean(row**2)), rel=1e-12)
        assert (found.top.value, found.bottom.value) == (row.max(), row.min())
        spread = row - row.mean()
        if frames > 1:
            moment = np.mean(spread**4) / np.mean(spread**2) ** 2
            assert found.kurtosis == pytest.approx(moment, rel=1e-6)
        assert found.slots.lowest.min() == row.min()
        # the offset of a million must not eat the spread of one
        first = row[: found.slots.frames]
        assert found.slots.rms[0] == pytest.approx(first.std(), abs=1e-9)
        assert found.slots.mean.size <= SLOTS


def test_a_record_longer_than_the_kept_samples_is_averaged(monkeypatch: pytest.MonkeyPatch) -> None:
    """The memory of a pass must not grow with the record."""
    monkeypatch.setattr("rig.health.survey.SPECTRUM_SAMPLES", 5000)
    monkeypatch.setattr("rig.health.survey.LEAST_SPECTRUM_SAMPLES", 5000)
    monkeypatch.setattr("rig.health.survey.BLOCK_FRAMES", 64)
    row = np.arange(100_007.0)
    (found,) = survey_channels(capture_of(row[None]), [0])
    size = found.mean_frames
    assert found.means.size <= 5000
    whole = row[: row.size // size * size].reshape(-1, size).mean(axis=1)
    assert found.means == pytest.approx(whole)
    assert sum(piece.size for piece in found.pieces) <= 5000
    for piece in (*found.pieces, found.middle):
        assert np.array_equal(np.diff(piece), np.ones(piece.size - 1))
    assert found.slots.mean.size <= SLOTS
    assert found.slots.lowest[1] == found.slots.frames


def test_gaps_and_standstills_are_found_across_block_edges() -> None:
    """A dropout that starts in one block and ends in the next is one dropout."""
    row = np.sin(np.arange(200_000.0))
    row[65_000:66_000] = np.nan
    row[131_000:131_100] = 0.25
    row[199_990:] = np.nan
    row[:20] = 7.0
    (found,) = survey_channels(capture_of(row[None]), [0])
    assert found.gaps == (Span(start=65_000, stop=66_000), Span(start=199_990, stop=200_000))
    assert found.stills == (Span(start=0, stop=20), Span(start=131_000, stop=131_100))
    assert found.finite_count == 200_000 - 1010
    assert (found.gap_count, found.still_count) == (2, 2)


def test_many_gaps_keep_the_longest_and_count_all() -> None:
    """A loose cable makes thousands of gaps; the list stays bounded."""
    row = np.ones(80_000)
    row[::10] = np.nan
    row[40_001:40_006] = np.nan
    (found,) = survey_channels(capture_of(row[None]), [0])
    assert found.gap_count == 8000
    assert len(found.gaps) == 1000
    assert Span(start=40_000, stop=40_006) in found.gaps


def test_the_rail_and_the_repeated_extreme_are_counted(rng: np.random.Generator) -> None:
    """Known full scale and unknown full scale need two ways of seeing a flat top."""
    row = np.clip(1.5 * np.sin(0.01 * np.arange(150_000)), -1.0, 32767 / 32768)
    (found,) = survey_channels(capture_of(row[None], full_scale=1.0), [0])
    assert found.rail_count == np.count_nonzero(np.abs(row) >= 0.9999)
    assert (found.top.value, found.top.count) == (
        32767 / 32768,
        np.count_nonzero(row == 32767 / 32768),
    )
    assert found.bottom.count == np.count_nonzero(row == -1.0)
    assert found.top.next_count <= 2


def test_a_channel_without_a_finite_sample_is_counted_as_such() -> None:
    """An all-missing channel must come out as missing, not as an error of arithmetic."""
    (found,) = survey_channels(capture_of(np.full((1, 1000), np.nan)), [0])
    assert found.finite_count == 0
    assert found.gaps == (Span(start=0, stop=1000),)
    assert np.isnan(found.slots.mean).all()
