"""Phases of a pair on one grid: truth recovered, blocks, gaps, ends, nulls, refusals."""

from __future__ import annotations

import math
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from rig.errors import PhaseError
from rig.phases.estimate import track_one, track_pair
from rig.phases.settings import PairSettings, PhaseSettings
from rig.phases.stretches import runs_of

TWO_PI = 2.0 * math.pi


def both(method: str, **more) -> PairSettings:
    one = PhaseSettings(method=method, **more)
    return PairSettings(reference=one, driven=one)


def tones(rate_hz, duration_s, first_hz, second_hz, *, noise=0.0, rng=None, kind=np.float32):
    """Return samples of two cosines and their true phases."""
    time = np.arange(round(duration_s * rate_hz)) / rate_hz
    phases = np.array([TWO_PI * first_hz * time + 0.4, TWO_PI * second_hz * time - 1.1])
    samples = np.cos(phases)
    if noise:
        samples = samples + noise * rng.standard_normal(samples.shape)
    return samples.astype(kind), phases


TYPICAL = [
    # rate Hz, duration s, reference Hz, driven Hz: what a bench really records
    (51200.0, 4.0, 1000.0, 1003.0),
    (8000.0, 5.0, 500.0, 510.0),
    (8000.0, 5.0, 500.0, 490.3),
    (1000.0, 120.0, 1.0, 1.02),
    (100.0, 60.0, 20.0, 21.0),
    (1.0 / 86400.0, 900.0 * 86400.0, 1.0 / (27.3 * 86400.0), 1.0 / (29.5 * 86400.0)),
    (1.0, 4000.0, 0.1, 0.101),
]


@pytest.mark.parametrize(("rate_hz", "duration_s", "first_hz", "second_hz"), TYPICAL)
@pytest.mark.parametrize("kind", [np.float32, np.float64])
def test_typical_pairs_need_no_settings(slow, rate_hz, duration_s, first_hz, second_hz, kind):
    """An engineer gives a file and two channels, and no filter design."""
    samples, phases = tones(rate_hz, duration_s, first_hz, second_hz, kind=kind)
    tracks = track_pair(*slow.memory_channels(samples, rate_hz))
    assert np.array_equal(tracks[0].time_s, tracks[1].time_s)
    for track, phase_rad, line_hz in zip(tracks, phases, (first_hz, second_hz), strict=True):
        frames = np.rint(track.time_s * rate_hz).astype(int)
        error = slow.true_errors_rad(track, phase_rad[frames])
        # What 80 dB of rejection leave of the image, 60 dB for records below 60 cycles.
        short = duration_s * line_hz < 60.0
        assert np.abs(error).max() < (2e-3 if short else 2e-4)
        assert track.frequency_hz.value == pytest.approx(line_hz, rel=1e-5)
        assert track.valid.mean() > (0.6 if short else 0.75)
        low, high = track.band_hz
        assert low < min(first_hz, second_hz) < max(first_hz, second_hz) < high


@pytest.mark.parametrize("kind", [np.float32, np.float64])
def test_noise_free_phase_is_right_to_a_microradian(slow, kind):
    """The estimator may not add an error of its own to a quiet record."""
    samples, phases = tones(51200.0, 4.0, 1000.0, 1003.0, kind=kind)
    tracks = track_pair(*slow.memory_channels(samples, 51200.0))
    for track, phase_rad in zip(tracks, phases, strict=True):
        frames = np.rint(track.time_s * 51200.0).astype(int)
        error = slow.true_errors_rad(track, phase_rad[frames])
        assert np.sqrt(np.mean(error**2)) < 3e-6


@pytest.mark.parametrize("method", ["analytic", "marker"])
def test_block_boundaries_leave_no_trace(slow, rng, method):
    """One block, seven or sixty-four: the phase may not tell."""
    samples, _ = tones(8000.0, 10.0, 500.0, 506.0, noise=0.05, rng=rng)
    channels = slow.memory_channels(samples, 8000.0)
    rules = both(method)
    tracks = []
    for blocks in (1, 7, 64):
        frames = -(-samples.shape[1] // blocks)
        settings = PairSettings(reference=rules.reference, driven=rules.driven, block_frames=frames)
        tracks.append(track_pair(*channels, settings=settings))
    for first, driven in tracks[1:]:
        assert np.array_equal(first.phase_rad, tracks[0][0].phase_rad)
        assert np.array_equal(driven.phase_rad, tracks[0][1].phase_rad)
        assert np.array_equal(driven.valid, tracks[0][1].valid)


def test_one_column_serves_both_roles_with_two_bands(slow):
    """Two oscillators in one microphone signal are a pair."""
    samples, phases = tones(8000.0, 10.0, 500.0, 700.0)
    (mixed,) = slow.memory_channels(samples.sum(axis=0), 8000.0)
    settings = PairSettings(
        reference=PhaseSettings(band_hz=(460.0, 540.0)),
        driven=PhaseSettings(band_hz=(660.0, 740.0)),
    )
    tracks = track_pair(mixed, mixed, settings=settings)
    for track, phase_rad in zip(tracks, phases, strict=True):
        frames = np.rint(track.time_s * 8000.0).astype(int)
        assert np.abs(slow.true_errors_rad(track, phase_rad[frames])).max() < 3e-4


def test_ends_are_guarded_for_a_part_of_a_cycle(slow):
    """Tidy signals hide what happens at the ends; this one has 2000.37 cycles."""
    samples, phases = tones(8000.0, 2000.37 / 500.0, 500.0, 500.0)
    reference, _ = track_pair(*slow.memory_channels(samples, 8000.0))
    frames = np.rint(reference.time_s * 8000.0).astype(int)
    assert np.abs(slow.true_errors_rad(reference, phases[0][frames])).max() < 1e-5
    assert not reference.valid[0]
    assert not reference.valid[-1]
    assert any("trimmed" in note for note in reference.notes)


@pytest.mark.parametrize("method", ["analytic", "marker"])
def test_a_gap_splits_and_is_guarded(slow, method):
    """Missing samples may cost their neighbourhood, never bend the rest."""
    samples, phases = tones(8000.0, 12.0, 500.0, 503.0)
    samples[0, 40_000:40_400] = np.nan
    samples[0, 70_001] = np.nan
    reference, driven = track_pair(*slow.memory_channels(samples, 8000.0), settings=both(method))
    assert len(runs_of(reference.valid)) == 3
    assert len(runs_of(driven.valid)) == 1
    frames = np.rint(reference.time_s * 8000.0).astype(int)
    error = (reference.phase_rad - phases[0][frames])[reference.valid]
    error -= TWO_PI * np.round(error / TWO_PI)
    # Linear interpolation at 16 samples a cycle: 9.7e-4 rad.
    assert np.abs(error).max() < (2e-4 if method == "analytic" else 1.1e-3)


def test_beat_nodes_of_a_linear_pair_are_masked_and_are_no_slips(slow):
    """Two modes in one sensor turn the phase by pi at each node; no oscillator slipped."""
    time = np.arange(80_000) / 8000.0
    beat = np.cos(TWO_PI * 500.0 * time) + np.cos(TWO_PI * 501.0 * time)
    other = np.cos(TWO_PI * 500.5 * time)
    reference, driven = track_pair(*slow.memory_channels(np.array([other, beat]), 8000.0))
    assert any("amplitude below" in note for note in driven.notes)
    psi = driven.phase_rad - reference.phase_rad
    for first, stop in runs_of(driven.valid & reference.valid):
        assert np.ptp(psi[first:stop]) < 0.01


def crosstalk(share, *, rng):
    """Return two free oscillators, the second with some of the first added."""
    samples, phases = tones(8000.0, 20.0, 500.0, 504.0, noise=0.01, rng=rng)
    samples[1] += share * np.cos(phases[0]).astype(np.float32)
    return samples


def test_more_of_the_partner_than_of_its_own_is_refused(slow, rng):
    """Two unlocked machines would read as locked: the phase counts the partner's turns."""
    channels = slow.memory_channels(crosstalk(1.1, rng=rng), 8000.0)
    with pytest.raises(PhaseError, match=r"'ch2' holds 1\.10 times more of the partner's line"):
        track_pair(*channels)


def test_less_of_the_partner_is_said_with_its_share(slow, rng):
    """Three tenths of the partner bend the phase by 0.3 rad at the beat."""
    channels = slow.memory_channels(crosstalk(0.3, rng=rng), 8000.0)
    reference, driven = track_pair(*channels)
    assert any("0.3 of its own line at 504" in note for note in driven.notes)
    assert not any("of its own line" in note for note in reference.notes)


def test_a_pulled_oscillator_is_not_taken_for_crosstalk(slow):
    """Adler's ladder holds the partner's line too, but its amplitude stays even."""
    time = np.arange(160_000) / 8000.0
    # Adler's solution at 1.25 K, K = 2 pi 4 Hz: tan(psi/2) = 0.8 + 0.6 tan(0.375 K t).
    turn = 0.375 * TWO_PI * 4.0 * time
    truth = TWO_PI * 500.0 * time + np.unwrap(2.0 * np.arctan(0.8 + 0.6 * np.tan(turn)))
    samples = np.array([np.cos(TWO_PI * 500.0 * time), np.cos(truth)])
    _, driven = track_pair(*slow.memory_channels(samples, 8000.0))
    assert not any("of its own line" in note for note in driven.notes)
    frames = np.rint(driven.time_s * 8000.0).astype(int)
    # K = 4 Hz in a half band of 75 Hz: within 0.3 of it, SPEED goal 1e-4 rad.
    assert np.abs(slow.true_errors_rad(driven, truth[frames])).max() < 5e-4


def test_noise_beside_one_line_is_not_a_leak(slow, rng):
    """A short noisy record has many small lines; none of them is an oscillator."""
    for _ in range(8):
        samples, _ = tones(8000.0, 0.4, 300.0, 300.0, noise=1.0, rng=rng)
        tracks = track_pair(*slow.memory_channels(samples, 8000.0), settings=both("analytic"))
        assert not any("of its own line" in note for track in tracks for note in track.notes)


@pytest.mark.parametrize(("first_hz", "second_hz"), [(10.0, 30.1), (5.0, 100.0), (1.0, 0.52)])
def test_pairs_far_from_one_to_one_share_a_grid(slow, rng, first_hz, second_hz):
    """Heart and breath, gear and shaft: two bands, one grid."""
    samples, phases = tones(2000.0, 120.0, first_hz, second_hz, noise=0.02, rng=rng)
    tracks = track_pair(*slow.memory_channels(samples, 2000.0))
    assert np.array_equal(tracks[0].time_s, tracks[1].time_s)
    for track, phase_rad in zip(tracks, phases, strict=True):
        frames = np.rint(track.time_s * 2000.0).astype(int)
        error = slow.true_errors_rad(track, phase_rad[frames])
        assert np.std(error) == pytest.approx(np.mean(track.u_rad[track.valid]), rel=0.5)
        assert np.abs(error).max() < 6.0 * np.max(track.u_rad[track.valid])


@pytest.mark.parametrize("method", ["analytic", "marker"])
def test_turns_are_carried_over_a_hole_of_a_steady_signal(slow, method):
    """Half a second without samples holds 250 turns: the likeliest count is kept."""
    samples, phases = tones(8000.0, 12.0, 500.0, 503.0)
    samples[:, 40_000:44_000] = np.nan
    tracks = track_pair(*slow.memory_channels(samples, 8000.0), settings=both(method))
    for track, phase_rad in zip(tracks, phases, strict=True):
        frames = np.rint(track.time_s * 8000.0).astype(int)
        assert np.abs(slow.true_errors_rad(track, phase_rad[frames])).max() < 2e-3
        assert any("whole turns may be lost" in note for note in track.notes)


def test_corrections_of_the_wiring_are_in_the_phase(slow):
    """A velocity sensor mounted upside down shows minus the quarter-turned displacement."""
    time = np.arange(80_000) / 8000.0
    samples = np.array([np.cos(TWO_PI * 500.0 * time), np.sin(TWO_PI * 500.0 * time)])
    capture = slow.memory_capture(samples, 8000.0)
    from rig.channels import ChannelSetup, wire_channel

    position = wire_channel(capture, ChannelSetup(channel=1, quantity="displacement"))
    velocity = wire_channel(capture, ChannelSetup(channel=2, quantity="velocity", polarity=-1))
    reference, driven = track_pair(position, velocity)
    psi = (driven.phase_rad - reference.phase_rad)[driven.valid & reference.valid]
    # d/dt cos = -sin, reversed: sin.
    assert np.abs(psi - TWO_PI * np.round(psi / TWO_PI)).max() < 1e-5
    assert {part.name for part in driven.systematic} >= {"polarity", "velocity to displacement"}


def test_time_span_is_kept(slow):
    """Settling time is cut off by time, and times stay those of the capture."""
    samples, phases = tones(8000.0, 12.0, 500.0, 503.0)
    channels = slow.memory_channels(samples, 8000.0)
    reference, _ = track_pair(*channels, settings=PairSettings(start_s=3.0, stop_s=9.0))
    assert reference.start_s == 3.0
    assert reference.time_s[-1] < 9.0
    frames = np.rint(reference.time_s * 8000.0).astype(int)
    assert np.abs(slow.true_errors_rad(reference, phases[0][frames])).max() < 2e-4


def test_a_band_too_narrow_is_noticed(slow):
    """Slips faster than the band lets through would vanish without a word."""
    time = np.arange(160_000) / 8000.0
    wander = np.sin(TWO_PI * 9.0 * time)
    samples = np.array([np.cos(TWO_PI * 500.0 * time), np.cos(TWO_PI * 500.0 * time + 2 * wander)])
    channels = slow.memory_channels(samples, 8000.0)
    _, tight = track_pair(*channels, settings=both("analytic", band_hz=(490.0, 510.0)))
    _, wide = track_pair(*channels)
    assert any("too narrow" in note for note in tight.notes)
    assert not any("too narrow" in note for note in wide.notes)


def test_low_ratio_in_the_band_is_said(slow, rng):
    """Below 10 dB in the band noise makes slips of its own."""
    samples, _ = tones(8000.0, 20.0, 500.0, 500.0, noise=4.0, rng=rng)
    channels = slow.memory_channels(samples, 8000.0)
    reference, _ = track_pair(*channels, settings=both("analytic", band_hz=(440.0, 560.0)))
    # A**2 / 2 over 16 / 4000 a hertz x 120 Hz.
    assert reference.snr_db == pytest.approx(10 * math.log10(0.5 / 0.48), abs=0.7)
    assert any("unreliable" in note for note in reference.notes)


def test_track_of_one_equals_its_share_of_a_pair(slow, rng):
    """Free-running captures are judged by the same phase."""
    samples, _ = tones(8000.0, 10.0, 500.0, 500.0, noise=0.01, rng=rng)
    channels = slow.memory_channels(samples, 8000.0)
    alone = track_one(channels[0])
    reference, _ = track_pair(*channels)
    assert np.array_equal(alone.phase_rad, reference.phase_rad)


def test_a_short_record_is_followed_by_markers(slow):
    """Six seconds of two metronomes hold a dozen cycles: a filter would eat them all."""
    samples, phases = tones(1000.0, 6.0, 2.0, 3.33)
    channels = slow.memory_channels(samples, 1000.0)
    tracks = track_pair(*channels)
    for track, phase_rad in zip(tracks, phases, strict=True):
        assert track.method == "marker"
        assert any("cycles: followed by markers" in note for note in track.notes)
        frames = np.rint(track.time_s * 1000.0).astype(int)
        assert np.abs(slow.true_errors_rad(track, phase_rad[frames])).max() < 0.01
    with pytest.raises(PhaseError, match=r"holds 12\.0 cycles of 2"):
        track_pair(*channels, settings=both("analytic"))


def silent(rate_hz):
    return np.zeros(round(20 * rate_hz))


def tone(rate_hz, line_hz, duration_s=20.0):
    return np.cos(TWO_PI * line_hz * np.arange(round(duration_s * rate_hz)) / rate_hz)


REFUSED = [
    (silent(1000.0), 1000.0, "no oscillation"),
    (np.full(20_000, 3.3), 1000.0, "no oscillation"),
    (tone(55.0, 25.0), 55.0, "2.2 samples per cycle of 25 Hz, at least 4 needed"),
    (tone(1000.0, 1.0, 3.0), 1000.0, "3.0 cycles"),
    (np.random.default_rng(5).standard_normal(20_000), 1000.0, "no line"),
    (
        1.01 * tone(1000.0, 100.0) + tone(1000.0, 163.0),
        1000.0,
        "has two lines of equal size, 1",
    ),
]


@pytest.mark.parametrize(("samples", "rate_hz", "words"), REFUSED)
def test_what_has_no_phase_is_refused_in_one_line(slow, samples, rate_hz, words):
    """A wrong cable must give a sentence, not a phase."""
    (channel,) = slow.memory_channels(samples, rate_hz)
    with pytest.raises(PhaseError) as caught:
        track_one(channel)
    text = str(caught.value)
    assert words in text
    assert "channel 'ch1'" in text
    assert "\n" not in text


@pytest.mark.parametrize(
    ("settings", "words"),
    [
        ({"method": "magic"}, "'magic' is not one of auto, analytic"),
        ({"edge": "up"}, "'up' is not one of rising"),
        ({"band_hz": (30.0, 20.0)}, "0 < low < high, got 30 to 20"),
        ({"null_ratio": 0.0}, "between 0 and 1, got 0"),
    ],
)
def test_settings_out_of_range_are_refused(settings, words):
    """A typing error is met where it was made."""
    with pytest.raises(PhaseError, match=words):
        PhaseSettings(**settings)


def test_a_band_beyond_half_the_rate_is_refused(slow):
    """Above half the rate there is nothing."""
    (channel,) = slow.memory_channels(tone(1000.0, 100.0), 1000.0)
    with pytest.raises(PhaseError, match="needs a rate above 1200 Hz, got 1000 Hz"):
        track_one(channel, settings=PhaseSettings(band_hz=(50.0, 600.0)))


def test_the_pass_needs_numpy_alone():
    """Importing scipy costs more than a hundred million samples of phase."""
    code = (
        "import sys; import rig.phases.estimate, rig.phases.instants, rig.phases.protophase; "
        "print([name for name in ('scipy', 'lmfit', 'matplotlib', 'soundfile') "
        "if name in sys.modules])"
    )
    root = Path(__file__).parents[2]
    done = subprocess.run(
        [sys.executable, "-c", code], cwd=root, capture_output=True, text=True, check=True
    )
    assert done.stdout.strip() == "[]"
