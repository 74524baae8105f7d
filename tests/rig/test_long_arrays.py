"""Rows kept in a temporary file: the same numbers as in memory, and a plain refusal."""

from __future__ import annotations

import numpy as np
import pytest

from rig.errors import PhaseError
from rig.longarrays import LongArray, SampleRow, made_row
from rig.phases.estimate import track_pair
from rig.phases.settings import PairSettings, PhaseSettings


@pytest.fixture
def short_memory(monkeypatch):
    """Let rows of more than 1000 numbers count as long, in blocks of 256."""
    monkeypatch.setattr("rig.longarrays.LONG_SAMPLES", 1000)
    monkeypatch.setattr("rig.longarrays.LONG_BLOCK", 256)


def filled(count: int) -> tuple[SampleRow, np.ndarray]:
    """Return a row of some numbers, handed over in uneven parts, and the numbers."""
    values = np.random.default_rng(3).standard_normal(count)
    row = SampleRow(count, np.float64)
    for start in range(0, count, 333):
        row.append(values[start : start + 333])
    row.append(np.ones(5))  # beyond the count: dropped
    return row, values


@pytest.mark.parametrize("count", [700, 5000])
@pytest.mark.parametrize(
    "key",
    [
        slice(None),
        slice(10, 4000),
        slice(3, None, 7),
        slice(None, None, 100),
        slice(-5, None),
        slice(None, None, -1),
        slice(20, 10),
        5,
        -1,
        np.array([6, 2, -3, 690]),
        np.zeros(3, dtype=int),
    ],
)
def test_a_long_row_answers_as_an_array_does(short_memory, count, key):
    """Whoever works with a row may not need to know where it is kept."""
    row, values = filled(count)
    assert isinstance(row.row(), LongArray) == (count == 5000)
    assert np.array_equal(row.row()[key], values[key])


def test_arithmetic_and_masks_make_plain_arrays(short_memory):
    """Functions that take the whole get the whole."""
    row, values = filled(3000)
    long = row.row()
    assert len(long) == long.size == 3000
    assert np.array_equal(2.0 * long - 1.0, 2.0 * values - 1.0)
    assert np.array_equal(np.where(values > 0, long, 0.0), np.where(values > 0, values, 0.0))
    assert np.array_equal(long[values > 1.0], values[values > 1.0])
    assert np.array_equal(long > 0, values > 0)
    assert np.mean(long) == np.mean(values)


def test_made_rows_do_not_depend_on_their_length(short_memory):
    """A row computed when asked for holds what one computed at once holds."""
    for size in (900, 2100):
        made = made_row(size, np.float64, lambda a, b: np.arange(a, b) ** 2.0)
        assert np.array_equal(np.asarray(made), np.arange(size) ** 2.0)


def test_a_file_that_cannot_be_is_refused_in_one_line(short_memory, monkeypatch, tmp_path):
    """A full disk must end with what to do, not with a trace."""

    def full(**_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("tempfile.TemporaryFile", full)
    with pytest.raises(PhaseError, match=r"No space left on device.*TMPDIR"):
        SampleRow(2000, np.float32)


@pytest.mark.parametrize(
    ("method", "depth", "kind"),
    [
        ("analytic", 0.0, np.float32),
        ("analytic", 0.6, np.float32),
        ("analytic", 0.6, np.float64),
        ("marker", 0.0, np.float32),
    ],
)
def test_a_long_record_gives_the_numbers_of_a_short_one(
    slow, rng, monkeypatch, method, depth, kind
):
    """Where the rows of a track are kept may not change a digit of it."""
    time = np.arange(240_001) / 8000.0
    swell = 1.0 + depth * np.sin(2.0 * np.pi * 0.7 * time)
    turns = np.array([500.0 * time, 503.0 * time + 0.1 * np.sin(5.0 * time)])
    samples = (swell * np.cos(2.0 * np.pi * turns)).astype(kind)
    samples = (samples + 0.01 * rng.standard_normal(samples.shape)).astype(kind)
    samples[0, 90_000:90_300] = np.nan
    samples[1, 150_000:157_000] *= 1e-3
    one = PhaseSettings(method=method)
    settings = PairSettings(reference=one, driven=one)
    found = []
    for most in (1_000_000, 1000):
        monkeypatch.setattr("rig.longarrays.LONG_SAMPLES", most)
        channels = slow.memory_channels(samples, 8000.0, sensitivity=0.5)
        found.append(track_pair(*channels, settings=settings))
    for short, long in zip(*found, strict=True):
        assert isinstance(long.phase_rad, LongArray)
        assert not isinstance(short.phase_rad, LongArray)
        for name in ("phase_rad", "amplitude", "u_rad", "valid"):
            assert np.array_equal(getattr(short, name), np.asarray(getattr(long, name))), name
        assert short.frequency_hz == long.frequency_hz
        assert short.amplitude_mean == long.amplitude_mean
        assert (short.notes, short.snr_db) == (long.notes, long.snr_db)
