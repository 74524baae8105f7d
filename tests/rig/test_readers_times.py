"""Rate and gaps from a column of times: rounded, jittered, broken, or no clock at all."""

from __future__ import annotations

import numpy as np
import pytest

from rig.errors import CaptureError
from rig.readers.timebase import TimeBase, TimeFit, decimal_quantum


def fitted(times: np.ndarray, piece: int = 1000, **settings: float) -> TimeBase:
    """The time base of a column handed over in pieces."""
    fit = TimeFit(path="f.csv", **settings)
    for first in range(0, len(times), piece):
        fit.add(times[first : first + piece])
    return fit.finish()


@pytest.mark.parametrize("rate_hz", [1.0, 44100.0, 51200.0, 4800.0, 12_500_000.0, 0.01])
@pytest.mark.parametrize("start_s", [0.0, -3.0, 1234.5])
def test_unrounded_times_give_the_rate_to_nine_digits(rate_hz: float, start_s: float) -> None:
    """Times with an offset keep fewer digits below the point; the line averages them out."""
    # float64 keeps 16 digits: at 1234.5 s and 12.5 MHz the step of 8e-8 s has 5 left,
    # and the line through 20,000 rows wins back four more.
    base = fitted(start_s + np.arange(20000) / rate_hz)
    assert base.rate_hz == pytest.approx(rate_hz, rel=3e-9)
    assert base.frame_count == 20000


@pytest.mark.parametrize("decimals", [3, 4, 5, 6, 7, 9])
def test_rounded_times_give_the_rate_within_the_stated_uncertainty(decimals: int) -> None:
    """At 51.2 kHz and three decimals, 50 neighbours share one time."""
    base = fitted(np.round(np.arange(100_000) / 51200, decimals))
    # White rounding is the assumption of the stated value; real rounding is a saw-tooth, whose
    # sums cancel better, so three times the stated value is generous.
    assert abs(base.rate_hz - 51200) <= 3 * base.rate_u_hz + 1e-5
    assert base.frame_count == 100_000


def test_six_significant_digits_lose_a_decimal_on_the_way_without_a_false_gap() -> None:
    """Many exports write six digits: the last decimal goes when the time passes 10 s."""
    times = np.array([float(f"{t:.6g}") for t in np.arange(0, 12, 1 / 5120)])
    base = fitted(times)
    assert base.rate_hz == pytest.approx(5120, rel=1e-6)
    assert base.frame_count == len(times)


@pytest.mark.parametrize("missing", [1, 2, 17, 5000])
@pytest.mark.parametrize("decimals", [6, 12])
def test_missing_rows_become_missing_frames_of_the_same_number(missing: int, decimals: int) -> None:
    """Index and time must never part, or every phase after the gap is wrong."""
    frames = np.concatenate([np.arange(3500), np.arange(3500 + missing, 9000)])
    base = fitted(np.round(7.0 + frames / 2000, decimals))
    assert base.run_rows.tolist() == [0, 3500]
    assert base.run_frames.tolist() == [0, 3500 + missing]
    assert base.frame_count == 9000
    assert any("gap at 1.75-" in note for note in base.notes)


def test_many_gaps_are_all_found_and_summed_in_one_note(rng: np.random.Generator) -> None:
    """A receiver that drops out now and then still has one clock."""
    kept = np.ones(50_000, dtype=bool)
    for start in range(2000, 50_000, 3000):
        kept[start : start + int(rng.integers(1, 900))] = False
    frames = np.flatnonzero(kept)
    base = fitted(frames / 100.0)
    placed = np.repeat(base.run_frames - base.run_rows, np.diff([*base.run_rows, len(frames)]))
    np.testing.assert_array_equal(placed + np.arange(len(frames)), frames)
    assert any("16 gaps in all" in note for note in base.notes)


@pytest.mark.parametrize("piece", [3, 7, 64, 1000, 20000])
def test_the_answer_does_not_depend_on_the_pieces(piece: int) -> None:
    """Piece lengths come from byte counts and must not show in a result."""
    frames = np.concatenate([np.arange(6000), np.arange(6040, 12000)])
    base = fitted(np.round(frames / 250, 9), piece=piece)
    assert base.rate_hz == pytest.approx(250, rel=1e-10)
    assert base.run_frames.tolist() == [0, 6040]


def test_jitter_below_half_a_step_is_noted_and_above_refused(rng: np.random.Generator) -> None:
    """A stamp taken by software trembles; a row half a step off has no certain place."""
    even = np.arange(5000) / 100
    base = fitted(even + rng.uniform(-0.002, 0.002, 5000))
    assert any("jitter by up to 0.2" in note for note in base.notes)
    with pytest.raises(CaptureError, match="not evenly spaced"):
        fitted(np.sort(even + rng.uniform(-0.02, 0.02, 5000)))


def test_a_clock_that_changes_its_rate_is_refused() -> None:
    """Two recordings pasted together at different rates are no capture."""
    times = np.concatenate([np.arange(5000) / 100, 50 + np.arange(5000) / 101])
    with pytest.raises(CaptureError, match="off a straight line"):
        fitted(times)


@pytest.mark.parametrize(
    ("times", "words"),
    [
        (np.array([0.0, 1.0]), "holds 2 rows; 3 are needed"),
        (np.array([0.0, 1.0, np.nan, 3.0]), "row 3: the time is missing"),
        (np.array([0.0, 1.0, 2.0, 1.5]), "row 4: time 1.5 s after 2 s"),
        (np.zeros(50), "stands twice|every time stamp|too coarse"),
        (np.repeat(np.arange(100.0), 2), "every time stamp occurs twice"),
        (np.array([0.0, 1, 2, 3, 4, 5, 4000, 4001, 4002, 4003]), "outweigh the record"),
        (np.cumsum([0.1, 2, 0.3, 5, 0.2, 9, 0.1, 3, 1, 7.7]), "not evenly spaced"),
        (np.array([0.0, np.inf, np.inf, np.inf]), "row 2: the time is missing"),
    ],
)
def test_times_that_are_no_clock_are_refused(times: np.ndarray, words: str) -> None:
    """Each kind of wrong column has its own words."""
    with pytest.raises(CaptureError, match=words):
        fitted(times)


def test_a_given_rate_rescues_times_too_coarse_to_give_one() -> None:
    """A tenth of a second of whole milliseconds cannot give 51.2 kHz; the person can."""
    times = np.round(np.arange(5000) / 51200, 3)
    with pytest.raises(CaptureError, match="too coarse to give the rate"):
        fitted(times)
    assert fitted(times, given_step_s=1 / 51200).frame_count == 5000


@pytest.mark.parametrize(
    ("values", "quantum"),
    [
        ([0.001, 0.003, 0.25], 1e-3),
        ([10.0, 250.0, 30.0], 10.0),
        ([1.5e-6, 2.5e-6, 0.0], 1e-7),
        ([np.pi, np.e, 0.0], 0.0),
        ([86400.123, 86400.124], 1e-3),
    ],
)
def test_the_decimal_step_of_values_is_found(values: list[float], quantum: float) -> None:
    """It tells rounding from jitter."""
    assert decimal_quantum(np.array(values)) == pytest.approx(quantum)
