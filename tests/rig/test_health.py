"""Health of a signal: each fault is found where it was put, and nowhere else."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from rig.captures import Capture, CaptureChannel
from rig.channels import ChannelSetup, wire_channel
from rig.health import (
    THRESHOLDS,
    PairHealth,
    SignalHealth,
    examine_pair,
    examine_signals,
    named_lines,
)
from rig.health.examine import CLARITY_CHECKS, LEVEL_CHECKS, LINE_CHECKS

RATE_HZ = 1000.0
TIME_S = np.arange(60_000) / RATE_HZ


def capture_of(
    *rows: np.ndarray, rate_hz: float = RATE_HZ, full_scale: float | None = None
) -> Capture:
    """Return a capture that hands out rows of samples in blocks."""
    table = np.array(rows)

    def source(
        columns: Sequence[int], block_frames: int, start: int, stop: int
    ) -> Iterator[np.ndarray]:
        for first in range(start, stop, block_frames):
            yield table[list(columns), first : min(first + block_frames, stop)]

    return Capture(
        path="made.wav",
        format="made",
        rate_hz=rate_hz,
        frame_count=table.shape[1],
        channels=tuple(
            CaptureChannel(name=name, full_scale=full_scale, unit="V")
            for name, _ in zip(("left", "right", "third"), rows, strict=False)
        ),
        source=source,
    )


def sine(frequency_hz: float, amplitude: float = 1.0, phase_rad: float = 0.3) -> np.ndarray:
    """Return a sine on the common time axis."""
    return amplitude * np.sin(2 * np.pi * frequency_hz * TIME_S + phase_rad)


def noise(size: float = 0.01, seed: int = 5) -> np.ndarray:
    """Return white noise of a standard deviation."""
    return size * np.random.default_rng(seed).standard_normal(TIME_S.size)


def one(samples: np.ndarray, **options: float | None) -> SignalHealth:
    """Return the health of one channel alone."""
    return examine_signals(capture_of(samples, **options))[0]


def fault_names(health: SignalHealth) -> list[str]:
    """Return the names of the faults found."""
    return [fault.name for fault in health.faults]


def test_a_clean_pair_has_no_fault() -> None:
    """A tool that cries at every record is not listened to."""
    left, right = examine_signals(
        capture_of(sine(21.3) + noise(), 0.2 + sine(23.1) + noise(seed=6))
    )
    assert fault_names(left) == fault_names(right) == []
    assert left.frequency_hz == pytest.approx(21.3, abs=1e-3)
    assert right.amplitude == pytest.approx(1.0, rel=0.01)
    assert right.survey.mean == pytest.approx(0.2, abs=1e-3)
    assert left.peak == pytest.approx(1.03, abs=0.02)


def with_gap() -> np.ndarray:
    """Return a sine with 0.3 s of missing samples."""
    samples = sine(25.0) + noise()
    samples[12_400:12_700] = np.nan
    return samples


def with_zero_fill() -> np.ndarray:
    """Return a sine with 0.3 s of zeros where samples were lost."""
    samples = sine(25.0) + noise()
    samples[12_400:12_700] = 0.0
    return samples


def with_level_step() -> np.ndarray:
    """Return a sine whose gain is halved at 20 s."""
    return (sine(25.0) + noise()) * np.where(TIME_S < 20.0, 1.0, 0.5)


MADE = {
    "silent": (np.zeros(60_000), "fault", "channel 1 'left' has no oscillation (all samples 0)"),
    "no line": (noise(1.0), "fault", "has no line above its noise"),
    "clipped": (
        np.clip(1.25 * sine(25.3), -1.0, 1.0),
        "fault",
        "41 % of samples at the same extreme value (1 and -1); limit 0.1 %. Lower the gain",
    ),
    "flat tops": (
        np.clip(4.0 * sine(25.3), -1.0, 1.0),
        "warning",
        "flat tops at 1 and -1 (84 % of samples): clipped, or a square, pulsed or half-wave signal",
    ),
    "missing": (
        with_gap(),
        "warning",
        "gap at 12.4 to 12.7 s, 0.5 % of samples missing; split in 2",
    ),
    "standstill": (with_zero_fill(), "warning", "standstill at 12.4 to 12.7 s"),
    "offset": (3.1 + sine(25.0) + noise(), "warning", "offset 3.1x amplitude"),
    "harmonic": (
        sine(5.0) + sine(10.0, 0.4) + noise(),
        "warning",
        "harmonic 2 is 0.4x the line at 5 Hz",
    ),
    "mains": (sine(21.3) + sine(50.02, 0.2) + noise(), "warning", "pick-up at 50.02 Hz is 0.2x"),
    "at mains": (sine(50.02) + noise(), "warning", "cannot be told from mains"),
    "samples per cycle": (
        sine(454.5) + noise(),
        "fault",
        "rate 1000 Hz gives 2.2 samples per cycle of 454.5 Hz; at least 4 needed (10 advised)",
    ),
    "cycles": (sine(0.05) + noise(), "fault", "holds 3.0 cycles; at least 20 needed (50 advised)"),
    "noise": (sine(25.0) + noise(1.0, 7) * 4, "warning", "above what surrounds it"),
    "spikes": (
        np.exp(-0.5 * ((TIME_S * 1.3 % 1.0 - 0.5) / 0.012) ** 2) + noise(),
        "warning",
        "is a train of spikes, about 1.3 a second. Use the estimator spike or pulse.",
    ),
    "level step": (with_level_step(), "warning", "level changes 2-fold at 20"),
    "offset step": (
        sine(25.0) + noise() + np.where(TIME_S < 40.0, 0.0, 2.0),
        "warning",
        "offset jumps by 2x amplitude at 40",
    ),
}


@pytest.mark.parametrize("name", MADE)
def test_a_fault_is_found_where_it_was_put(name: str) -> None:
    """Each line names channel, evidence and remedy, and the threshold it was held against."""
    samples, severity, words = MADE[name]
    (fault,) = [fault for fault in one(samples).faults if fault.name == name]
    assert fault.severity == severity
    assert words in fault.text
    assert fault.text.startswith("channel 1 'left'")
    assert "\n" not in fault.text
    assert fault.threshold in (THRESHOLDS[name].fault, THRESHOLDS[name].warning)
    assert fault.reason == THRESHOLDS[name].reason


ALONE = ["missing", "standstill", "offset", "mains", "at mains", "level step", "harmonic", "spikes"]


@pytest.mark.parametrize("name", ALONE)
def test_a_fault_does_not_drag_others_along(name: str) -> None:
    """One cause, one line: a second would send the user looking for a second cause."""
    assert fault_names(one(MADE[name][0])) == [name]


def test_every_check_has_a_threshold_with_a_reason_and_a_test() -> None:
    """A check without a stated threshold is an opinion."""
    assert set(THRESHOLDS) == set(LEVEL_CHECKS) | set(CLARITY_CHECKS) | set(LINE_CHECKS)
    assert set(MADE) | {"crosstalk", "too short"} == set(THRESHOLDS)
    assert all(len(threshold.reason) > 20 for threshold in THRESHOLDS.values())


def test_full_scale_of_the_file_decides_where_the_rail_is() -> None:
    """A 16-bit file reaches 32767/32768 only, on one side."""
    samples = np.clip(1.2 * sine(25.0), -1.0, 32767 / 32768)
    (fault,) = one(samples, full_scale=1.0).faults
    assert fault.name == "clipped"
    share = np.mean(np.abs(samples) >= 32767 / 32768)
    assert fault.value == pytest.approx(share, rel=0.02)
    assert "at full scale" in fault.text


def test_a_coarse_but_whole_sine_is_not_clipped() -> None:
    """A sine of 20 steps stands at its top more often than below, without any rail."""
    assert "clipped" not in fault_names(one(np.round(20 * sine(21.3) + 0.2)))


def test_a_logic_signal_is_neither_clipped_nor_standing_still() -> None:
    """A tacho of 0 and 5 V is at its two values by design."""
    samples = np.where(sine(7.0) > 0.9, 5.0, 0.0)
    assert not {"clipped", "standstill"} & set(fault_names(one(samples)))


def test_a_wave_with_flat_stretches_each_cycle_has_no_standstill() -> None:
    """A pulse on an exact zero line rests most of each cycle."""
    samples = np.maximum(0.0, sine(2.0) - 0.8)
    assert "standstill" not in fault_names(one(samples))


def test_a_harmonic_above_its_fundamental_is_a_fault() -> None:
    """The phase would count two cycles for one."""
    health = one(sine(5.0, 0.6) + sine(10.0, 1.0) + noise())
    (fault,) = health.faults
    assert (fault.name, fault.severity) == ("harmonic", "fault")
    assert "1.7x that at 5 Hz" in fault.text


@pytest.mark.parametrize(
    ("leak", "severity"), [(0.02, None), (0.2, "warning"), (0.6, "warning"), (1.1, "fault")]
)
def test_a_leak_between_sensors_is_found(leak: float, severity: str | None) -> None:
    """With 1.1 of the partner in it, the channel's mean frequency is the partner's."""
    left = sine(5.5) + noise()
    right = sine(5.0) + leak * sine(5.5) + noise(seed=6)
    healthy, leaky = examine_signals(capture_of(left, right))
    assert "crosstalk" not in fault_names(healthy)
    found = [fault for fault in leaky.faults if fault.name == "crosstalk"]
    assert [fault.severity for fault in found] == ([severity] if severity else [])
    assert leaky.crosstalk is not None
    assert leaky.crosstalk.ratio == pytest.approx(leak, rel=0.02)
    if severity == "fault":
        words = "contains 1.1x more of the partner's line at 5.5 Hz than of its own at 5 Hz; "
        assert words + "locking cannot be judged" in found[0].text


PULLS = [(detuning, kick) for detuning in (1.6, 1.25, 1.05) for kick in (0.0, 0.05, 0.5)]


@pytest.fixture(scope="module")
def pulled_phases_rad() -> np.ndarray:
    """Return phases of oscillators pulled by a steady one (coupling 1 Hz), one row a case."""
    rng = np.random.default_rng(3)
    step_s = 1.0 / RATE_HZ
    detuning_hz, noise_rad2_s = np.array(PULLS).T
    kicks = np.sqrt(2 * noise_rad2_s * step_s) * rng.standard_normal((TIME_S.size, len(PULLS)))
    path = np.zeros((TIME_S.size, len(PULLS)))
    for index in range(TIME_S.size - 1):
        rate_hz = detuning_hz - np.sin(path[index])
        path[index + 1] = path[index] + 2 * np.pi * step_s * rate_hz + kicks[index]
    return path.T


@pytest.mark.parametrize("case", range(len(PULLS)))
def test_real_pulling_is_not_taken_for_a_leak(case: int, pulled_phases_rad: np.ndarray) -> None:
    """A pulled oscillator shows its partner's line: that is the coupling, not the wiring."""
    left = sine(20.0) + noise()
    right = np.sin(2 * np.pi * 20.0 * TIME_S + 0.3 + pulled_phases_rad[case]) + noise(seed=6)
    _, pulled = examine_signals(capture_of(left, right))
    assert "crosstalk" not in fault_names(pulled)
    assert pulled.crosstalk is not None


def test_lines_are_called_by_what_they_are(pulled_phases_rad: np.ndarray) -> None:
    """The partner's line and the beat beside it are no unknown lines."""
    psi = pulled_phases_rad[PULLS.index((1.25, 0.0))]
    right = np.sin(2 * np.pi * 20.0 * TIME_S + 0.3 + psi) + noise(seed=6)
    _, pulled = examine_signals(capture_of(sine(20.0) + noise(), right))
    assert pulled.lines is not None
    kinds = {
        round(part.line.frequency_hz, 1): part.kind
        for part in named_lines(pulled.lines, pulled.crosstalk)
    }
    assert (kinds[20.0], kinds[20.8], kinds[21.5]) == ("partner", "own", "beat")


def test_a_locked_pair_leaves_crosstalk_open() -> None:
    """At one frequency a leak and a lock look alike; a verdict here would be a guess."""
    left, right = examine_signals(capture_of(sine(20.0) + noise(), sine(20.0) + noise(seed=6)))
    for health in (left, right):
        assert health.crosstalk is not None
        assert health.crosstalk.ratio is None
        assert "one frequency" in str(health.crosstalk.reason)


LOCKED_WITH_COMPANY = {
    "a structure that rings elsewhere": sine(33.0, 0.4),
    "a modulated amplitude": 0.6 * np.sin(2 * np.pi * 0.8 * TIME_S) * sine(20.0),
    "mains": sine(50.0, 0.5),
    "a subharmonic": sine(10.0, 0.5),
}


@pytest.mark.parametrize("name", LOCKED_WITH_COMPANY)
def test_other_lines_of_a_locked_pair_are_not_taken_for_a_leak(name: str) -> None:
    """A machine has many lines; only one beside the partner's may be its own oscillation."""
    right = sine(20.0) + LOCKED_WITH_COMPANY[name] + noise(seed=6)
    health = examine_signals(capture_of(sine(20.0) + noise(), right))
    assert all("crosstalk" not in fault_names(one) for one in health)


def test_more_than_two_columns_have_no_partner_unless_told() -> None:
    """Which of three channels are a pair only the user knows."""
    capture = capture_of(sine(20.0), sine(23.0) + 0.5 * sine(20.0), sine(31.0))
    assert all(health.crosstalk is None for health in examine_signals(capture))
    told = examine_signals(capture, partners={1: 0})
    assert [fault.name for fault in told[1].faults] == ["crosstalk"]


def test_a_record_too_short_for_a_spectrum_says_so() -> None:
    """Neither silent nor clipped, and still nothing can be said."""
    (fault,) = one(sine(200.0)[:9]).faults
    assert (fault.name, fault.severity) == ("too short", "fault")
    assert "9 finite samples, at least 16 in one piece needed" in fault.text


def test_a_record_with_a_third_missing_is_still_examined() -> None:
    """A loose plug must not hide the line that is there."""
    samples = sine(25.0) + noise()
    samples[(TIME_S % 3.0) < 1.0] = np.nan
    health = one(samples)
    assert health.frequency_hz == pytest.approx(25.0, abs=0.02)
    assert fault_names(health)[0] == "missing"
    assert "20 gaps, first at 0 to 1 s, 33 %" in health.faults[0].text


def test_slow_drift_does_not_hide_the_oscillation() -> None:
    """A drifting baseline has more power than the breath it carries."""
    health = one(sine(0.37, 0.2) + sine(0.02, 3.0) + noise())
    assert health.frequency_hz == pytest.approx(0.37, abs=0.005)


def test_a_channel_without_any_finite_sample_is_reported() -> None:
    """All missing is the worst gap, not a crash."""
    health = one(np.full(60_000, np.nan))
    assert health.lines is None
    assert [fault.severity for fault in health.faults] == ["fault"]
    assert health.faults[0].name == "missing"


@pytest.mark.parametrize("frames", [1, 2, 5, 15, 16, 17, 33])
def test_tiny_records_are_examined_without_a_crash(frames: int) -> None:
    """A capture stopped at once still gets its line."""
    health = one(sine(200.0)[:frames])
    assert health.faults


def pair_health(left: np.ndarray, right: np.ndarray, driven: int = 2) -> PairHealth:
    """Return the health of the pair in a capture."""
    capture = capture_of(left, right)
    setups = [ChannelSetup(channel=number) for number in (1, driven)]
    return examine_pair(*(wire_channel(capture, setup) for setup in setups))


def test_a_pair_carries_its_faults_as_notes() -> None:
    """What is wrong with a signal must stand in the result drawn from it."""
    health = pair_health(np.clip(1.2 * sine(21.3), -1, 1), sine(23.1) + sine(50.0, 0.3))
    assert [note.split(":")[0] for note in health.notes] == ["fault", "warning"]
    assert "at the same extreme value" in health.notes[0]
    assert health.no_state_reason is None


def test_a_leak_larger_than_the_own_line_forbids_a_state() -> None:
    """Two unlocked machines would read as locked."""
    health = pair_health(sine(5.5) + noise(), sine(5.0) + 1.1 * sine(5.5) + noise(seed=6))
    assert "locking cannot be judged" in str(health.no_state_reason)


def test_one_column_in_both_roles_is_examined_once() -> None:
    """A microphone hears both clocks."""
    health = pair_health(3.0 + sine(5.5), sine(5.0), driven=1)
    assert health.reference is health.driven
    assert len(health.notes) == 1


ANY_FLOAT = st.floats(width=64, allow_nan=True, allow_infinity=True)


@settings(max_examples=60, deadline=None)
@given(st.lists(ANY_FLOAT, min_size=1, max_size=80), st.sampled_from([None, 1.0]))
def test_any_samples_are_examined_without_a_crash(
    values: list[float], full_scale: float | None
) -> None:
    """A damaged file may hold any bit pattern, the largest and the smallest numbers too."""
    rows = np.array([values, values[::-1]])
    for health in examine_signals(capture_of(*rows, full_scale=full_scale)):
        assert all(np.isfinite(fault.threshold) for fault in health.faults)


def test_a_transient_that_dies_away_is_no_train_of_spikes() -> None:
    """Its first swings lift the kurtosis; the crossings of the noise after it are no spikes."""
    swing = np.exp(-TIME_S / 0.6) * np.sin(2 * np.pi * 3.0 * TIME_S)
    assert not {"spikes", "too short"} & {*fault_names(one(swing + noise(0.002)))}
