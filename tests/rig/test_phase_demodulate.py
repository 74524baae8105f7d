"""The fast two-stage filter against plain convolutions."""

from __future__ import annotations

import numpy as np
import pytest

from rig.phases.demodulate import DemodulationPlan, Demodulator, carrier_steps, rows_for
from rig.phases.grid import Grid, even_chunks
from rig.phases.taps import low_pass_taps, noise_correlation, noise_width


def make_plan(rows: int, transition: float = 0.15) -> DemodulationPlan:
    rate_hz = 1000.0 * rows
    return DemodulationPlan(
        rate_hz=rate_hz,
        rows=rows,
        carrier_steps=carrier_steps(rate_hz, rows, 230.0 if rows < 3 else 700.0),
        half_hz=100.0,
        transition=transition,
        stop_db=80.0,
    )


def vector_of(demodulator: Demodulator) -> np.ndarray:
    """Return the base band that turns and lengths stand for."""
    turns, modulus = demodulator.finish()
    return modulus.row() * np.exp(2j * np.pi * turns.row())


@pytest.mark.parametrize("rows", [1, 2, 5, 8, 40])
@pytest.mark.parametrize(("kind", "tolerance"), [(np.float32, 3e-6), (np.float64, 1e-12)])
@pytest.mark.parametrize("transition", [0.15, 0.6])
def test_matrix_products_equal_plain_convolutions(slow, rng, rows, kind, tolerance, transition):
    """A fast arrangement of sums is trusted only beside the sums themselves."""
    plan = make_plan(rows, transition)
    samples = rng.standard_normal(rows * 1777 - rows // 2).astype(kind)
    count = -(-samples.size // plan.step_frames)
    demodulator = Demodulator(plan, kind, count)
    padded = np.pad(samples, (0, -samples.size % rows))
    for chunk in np.split(padded, range(rows * 64, padded.size, rows * 64)):
        demodulator.feed(chunk)
    expected = slow.base_band(samples, plan)
    found = vector_of(demodulator)
    # Rounding of 32-bit sums of unit noise; expected values have a deviation of 0.9.
    assert np.abs(found - expected[:count]).max() < tolerance


def test_no_tap_is_subnormal():
    """Subnormal taps once made the matrix product three times slower."""
    for rows in (8, 64):
        plan = make_plan(rows)
        matrix = Demodulator(plan, np.float32, 1)._first._matrix
        small = np.abs(matrix[matrix != 0])
        assert small.min() > np.finfo(np.float32).tiny * 1e6


@pytest.mark.parametrize(("line_hz", "tolerance"), [(700.0, 1e-5), (1010.0, 1e-12)])
def test_an_offset_leaves_nothing_behind(line_hz, tolerance):
    """Ten times the amplitude of offset is common on a shaker amplifier.

    Near the band the second stage rejects it by 80 dB; further off it is nulled exactly.
    """
    plan = DemodulationPlan(
        rate_hz=8000.0,
        rows=8,
        carrier_steps=carrier_steps(8000.0, 8, line_hz),
        half_hz=100.0,
        transition=0.15,
        stop_db=80.0,
    )
    demodulator = Demodulator(plan, np.float64, 2000)
    demodulator.feed(np.full(8 * 4000, 10.0))
    found = vector_of(demodulator)
    assert np.abs(found[300:-300]).max() < tolerance


def test_chunks_are_the_same_for_any_blocks(rng):
    """Results may not depend on how a source cuts its samples."""
    table = rng.standard_normal((2, 10_000)).astype(np.float32)

    def cut(length):
        blocks = (table[:, s : s + length] for s in range(0, 10_000, length))
        return list(even_chunks(blocks, 1024, 8))

    first = cut(1024)
    for length in (1, 333, 4096, 10_000):
        other = cut(length)
        assert [part.shape for part in other] == [part.shape for part in first]
        assert all(np.array_equal(a, b) for a, b in zip(first, other, strict=True))


def test_rate_after_the_first_stage_holds_eight_half_bands():
    """The first stage may not fold anything into the band."""
    for rate_hz, half_hz in [(51200.0, 100.0), (8000.0, 75.0), (1000.0, 0.15), (100.0, 40.0)]:
        rows = rows_for(rate_hz, half_hz)
        assert rows == 1 or rate_hz / rows >= 8.0 * half_hz


def test_noise_through_the_filter_is_what_its_taps_say(rng):
    """Uncertainties rest on the width for noise and on the correlation of its samples."""
    taps = low_pass_taps(0.1, 150, 80.0)
    noise = np.convolve(rng.standard_normal(400_000), taps, mode="valid")[::2]
    # Variance of 0.2 x 2e5 independent values scatters by 0.7 %.
    assert noise.var() == pytest.approx(noise_width(taps), rel=0.03)
    means = noise[: noise.size // 1000 * 1000].reshape(-1, 1000).mean(axis=1)
    expected = noise.var() * noise_correlation(taps, 2) / 1000
    # 200 means: the variance scatters by 10 %.
    assert means.var() == pytest.approx(expected, rel=0.4)


def test_grid_counts_every_frame_once():
    """The last grid sample may not lie beyond the record."""
    grid = Grid(rate_hz=100.0, first_frame=7, frame_count=1001, rows=5)
    assert (grid.count - 1) * grid.step_frames < 1001 <= grid.count * grid.step_frames
    assert grid.start_s == pytest.approx(0.07, abs=1e-15)
