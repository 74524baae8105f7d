"""Wiring: every correction undoes what a simulated sensor chain did to a known phase."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence

import numpy as np
import pytest
from scipy import signal

from rig.angles import wrap_angle_rad
from rig.captures import Capture, CaptureChannel
from rig.channels import (
    ChannelSetup,
    check_recorders,
    component_notes,
    mixed_phase_rad,
    mixer_frequency_hz,
    phase_components,
    phase_sense,
    wire_channel,
    wiring_notes,
)
from rig.errors import CaptureError, ChannelError

RATE_HZ = 10_000.0
FREQUENCY_HZ = 20.0
PHASE_RAD = 0.7
TIME_S = np.arange(40_000) / RATE_HZ


def phase_of(samples: np.ndarray, frequency_hz: float = FREQUENCY_HZ) -> float:
    """Return the phase at t = 0 of the cosine in the last half of some samples.

    The witness: projection on a complex wave over whole cycles, after all transients.
    """
    half = samples.size // 2
    wave = np.exp(-2j * np.pi * frequency_hz * TIME_S[half : samples.size])
    return float(np.angle(np.sum(samples[half:] * wave)))


def displacement(time_s: np.ndarray) -> np.ndarray:
    """Return the motion at the sensor, amplitude 1."""
    return np.cos(2 * np.pi * FREQUENCY_HZ * time_s + PHASE_RAD)


def corrected(samples: np.ndarray, setup: ChannelSetup, skew_from_file_s: float = 0.0) -> float:
    """Return the phase after the corrections that a setup asks for."""
    parts = phase_components(setup, FREQUENCY_HZ, skew_from_file_s)
    return phase_of(samples) + sum(part.correction_rad for part in parts)


def high_pass(samples: np.ndarray, corner_hz: float) -> np.ndarray:
    """Pass samples through a resistor and a capacitor, integrated exactly between samples."""
    system = ([1.0, 0.0], [1.0, 2 * np.pi * corner_hz])
    return np.asarray(signal.lsim(system, samples, TIME_S)[1])


CHAINS = {
    "polarity": (-displacement(TIME_S), {"polarity": -1}),
    "velocity": (np.gradient(displacement(TIME_S), TIME_S), {"quantity": "velocity"}),
    "acceleration": (
        np.gradient(np.gradient(displacement(TIME_S), TIME_S), TIME_S),
        {"quantity": "acceleration"},
    ),
    "voltage": (displacement(TIME_S), {"quantity": "voltage"}),
    "skew": (displacement(TIME_S + 0.0013), {"skew_s": 0.0013}),
    "delay": (displacement(TIME_S - 0.0021), {"delay_s": 0.0021}),
    "ac corner": (high_pass(displacement(TIME_S), 3.0), {"ac_corner_hz": 3.0}),
    "all": (
        high_pass(-np.gradient(displacement(TIME_S + 0.0013 - 0.0021), TIME_S), 3.0),
        {
            "polarity": -1,
            "quantity": "velocity",
            "skew_s": 0.0013,
            "delay_s": 0.0021,
            "ac_corner_hz": 3.0,
        },
    ),
}


@pytest.mark.parametrize("name", CHAINS)
def test_a_correction_gives_back_the_phase_before_the_sensor_chain(name: str) -> None:
    """A wrong sign here turns in-phase into anti-phase or doubles a lag."""
    samples, fields = CHAINS[name]
    error = wrap_angle_rad(corrected(samples, ChannelSetup(channel=1, **fields)) - PHASE_RAD)
    # the linear interpolation of lsim and the end points of gradient cost some 1e-5 rad
    assert error == pytest.approx(0.0, abs=1e-4)


@pytest.mark.parametrize("name", [name for name in CHAINS if name != "voltage"])
def test_without_its_correction_the_phase_is_wrong(name: str) -> None:
    """The row above must not pass because the chain did nothing."""
    samples, _ = CHAINS[name]
    error = wrap_angle_rad(corrected(samples, ChannelSetup(channel=1)) - PHASE_RAD)
    assert abs(error) > 0.05


def test_the_ac_corner_uncertainty_is_what_a_changed_corner_does() -> None:
    """10 % of a 3 Hz corner at 20 Hz leaves 0.84 degrees, larger than most noise."""
    setup = ChannelSetup(channel=1, ac_corner_hz=3.0, ac_corner_u_hz=0.3)
    (part,) = phase_components(setup, FREQUENCY_HZ)
    near = phase_of(high_pass(displacement(TIME_S), 3.01))
    far = phase_of(high_pass(displacement(TIME_S), 2.99))
    # central difference over 0.02 Hz, scaled to 0.3 Hz; third-order remainder below 1e-3
    assert part.u_rad == pytest.approx((near - far) / 0.02 * 0.3, rel=2e-3)


def test_skew_of_the_file_is_corrected_unless_the_setup_states_its_own() -> None:
    """Both must not be taken off together."""
    samples = displacement(TIME_S + 0.0013)
    alone = corrected(samples, ChannelSetup(channel=1), skew_from_file_s=0.0013)
    stated = corrected(samples, ChannelSetup(channel=1, skew_s=0.0013), skew_from_file_s=0.5)
    assert [alone, stated] == pytest.approx([PHASE_RAD, PHASE_RAD], abs=1e-6)


def test_the_mark_angle_brings_the_index_pulse_to_the_mass() -> None:
    """A tacho phase is not an unbalance phase: the mass stands ahead of the mark."""
    mark_rad = 0.4  # the mass is ahead by this angle
    mass = np.cos(2 * np.pi * FREQUENCY_HZ * TIME_S + PHASE_RAD)
    mark = np.cos(2 * np.pi * FREQUENCY_HZ * TIME_S + PHASE_RAD - mark_rad)
    setup = ChannelSetup(channel=1, mark_angle_rad=mark_rad, mark_angle_u_rad=0.02)
    assert corrected(mark, setup) == pytest.approx(phase_of(mass), abs=1e-9)
    assert phase_components(setup, FREQUENCY_HZ)[0].u_rad == 0.02


def test_uncertainties_grow_with_frequency_for_times_and_stay_for_angles() -> None:
    """One microsecond is nothing at 1 Hz and a third of a degree at 1 kHz."""
    setup = ChannelSetup(channel=1, skew_u_s=1e-6, delay_u_s=2e-6, phase_u_rad=0.01)
    parts = {part.name: part.u_rad for part in phase_components(setup, 1000.0)}
    assert parts == pytest.approx(
        {"skew": 2e-3 * math.pi, "sensor delay": 4e-3 * math.pi, "sensor phase": 0.01}
    )


@pytest.mark.parametrize(("sideband", "lo_hz"), [("upper", 980.0), ("lower", 1020.0)])
def test_a_mixed_signal_gets_back_its_frequency_and_phase(sideband: str, lo_hz: float) -> None:
    """An image runs backwards: uncorrected, every slip would have the wrong sign."""
    true = 2 * np.pi * 1000.0 * TIME_S + PHASE_RAD + 0.5 * np.sin(2 * np.pi * 1.5 * TIME_S)
    product = np.cos(true) * np.exp(-2j * np.pi * lo_hz * TIME_S)
    low = signal.sosfiltfilt(signal.butter(4, 200, fs=RATE_HZ, output="sos"), product.real)
    recorded = np.unwrap(np.angle(signal.hilbert(low)))
    setup = ChannelSetup(channel=1, mixer_lo_hz=lo_hz, mixer_sideband=sideband)
    middle = slice(10_000, 30_000)
    error = mixed_phase_rad(setup, recorded, TIME_S)[middle] - true[middle]
    # the ends of the analytic signal and the filter leave some 1e-3 rad in the middle
    assert np.ptp(error) < 5e-3
    assert wrap_angle_rad(float(error.mean())) == pytest.approx(0.0, abs=5e-3)
    assert mixer_frequency_hz(setup, 20.0) == 1000.0
    assert phase_sense(setup) == (1 if sideband == "upper" else -1)


def test_a_phase_without_a_mixer_is_left_alone() -> None:
    """No local oscillator: recorded frequency and phase are the true ones."""
    setup = ChannelSetup(channel=1)
    assert mixer_frequency_hz(setup, 20.0) == 20.0
    assert mixed_phase_rad(setup, TIME_S, TIME_S) is TIME_S


def empty_capture(path: str = "a.wav", rate_hz: float = 100.0, **channel: object) -> Capture:
    """Return a capture of two channels that holds no real samples."""

    def source(columns: Sequence[int], frames: int, start: int, stop: int) -> Iterator[np.ndarray]:
        yield np.zeros((len(columns), stop - start))

    return Capture(
        path=path,
        format="made",
        rate_hz=rate_hz,
        frame_count=10,
        channels=(CaptureChannel(name="left"), CaptureChannel(name="right", **channel)),
        source=source,
    )


def test_samples_scale_through_volts_and_sensitivity() -> None:
    """Full scale 10 V and 0.1 V per m/s2: half scale is 50 m/s2."""
    setup = ChannelSetup(
        channel="right",
        unit="m/s2",
        sensitivity=0.1,
        sensitivity_u=0.002,
        volts_per_full_scale=10.0,
        polarity=-1,
    )
    channel = wire_channel(empty_capture(), setup)
    assert (channel.column, channel.name, channel.unit) == (1, "right", "m/s2")
    assert 0.5 * channel.scale == pytest.approx(50.0)
    assert channel.scale_u_rel == pytest.approx(0.02)


def test_full_scale_of_the_file_counts_as_one() -> None:
    """Raw counts of a 16-bit file reach 32768 at full scale."""
    setup = ChannelSetup(channel=2, volts_per_full_scale=5.0)
    channel = wire_channel(empty_capture(full_scale=32768.0, unit="V"), setup)
    assert 16384 * channel.scale == pytest.approx(2.5)
    assert channel.unit == "V"


BAD_SETUPS = [
    ({"sensitivity": 0.0}, "sensitivity must be above 0, got 0.0"),
    ({"sensitivity": float("nan")}, "sensitivity must be above 0, got nan"),
    ({"ac_corner_hz": -1.0}, "ac_corner_hz must be above 0"),
    ({"mixer_lo_hz": float("inf")}, "mixer_lo_hz must be above 0"),
    ({"skew_s": float("inf")}, "skew_s must be a finite number"),
    ({"phase_u_rad": -0.1}, "phase_u_rad must be 0 or more"),
    ({"polarity": 0}, "polarity must be 1 or -1, got 0"),
    ({"pulses_per_turn": 2, "missing_pulses": 2}, "pulses_per_turn must be above missing_pulses"),
]


@pytest.mark.parametrize(("fields", "words"), BAD_SETUPS)
def test_a_setup_out_of_range_is_refused(fields: dict[str, float], words: str) -> None:
    """A zero sensitivity would turn every amplitude into infinity."""
    with pytest.raises(ChannelError) as caught:
        ChannelSetup(channel=1, **fields)
    assert words in str(caught.value)


def test_an_image_below_zero_is_refused() -> None:
    """A local oscillator of 5 Hz cannot have an image 20 Hz below it."""
    setup = ChannelSetup(channel=1, mixer_lo_hz=5.0, mixer_sideband="lower")
    with pytest.raises(ChannelError, match="mixer_lo_hz must be above the recorded 20 Hz"):
        mixer_frequency_hz(setup, 20.0)


def test_a_frequency_of_zero_is_refused() -> None:
    """The AC coupling has no phase at 0 Hz."""
    with pytest.raises(ChannelError, match="frequency must be above 0 Hz"):
        phase_components(ChannelSetup(channel=1), 0.0)


def test_two_recorders_are_refused_without_a_tie() -> None:
    """50 ppm between clocks makes a locked pair seem to drift."""
    first, second = empty_capture("a.wav", 51200.0), empty_capture("b.wav", 51202.6)
    with pytest.raises(CaptureError) as caught:
        check_recorders(first, second)
    assert str(caught.value).startswith(
        "b.wav: channels come from separate recordings (51200 Hz, 51202.6 Hz) "
        "without a shared reference; relative phase is undefined."
    )


def test_two_recorders_pass_with_a_tie_and_say_so() -> None:
    """The tie is part of the result and must stand in its notes."""
    first, second = empty_capture("a.wav"), empty_capture("b.wav")
    assert check_recorders(first, first) == ()
    assert "reference channel" in check_recorders(first, second, shared_reference=True)[0]
    assert "5e-05" in check_recorders(first, second, clock_error_rel=5e-5)[0]


def test_every_correction_is_named_in_a_note() -> None:
    """Nothing silent: what was added to a phase stands in the report."""
    setup = ChannelSetup(channel="x", polarity=-1, ac_corner_hz=3.0, ac_corner_u_hz=0.3)
    notes = component_notes(setup, phase_components(setup, 20.0))
    assert notes == (
        "channel 'x': polarity corrected by -180 deg, standard uncertainty 0 deg",
        "channel 'x': AC coupling corrected by -8.53 deg, standard uncertainty 0.84 deg",
    )


def test_weak_wiring_is_noted() -> None:
    """An unchecked polarity, two skews and a near corner each cost trust in the angle."""
    capture = empty_capture(skew_s=2e-6)
    setup = ChannelSetup(channel=2, skew_s=1e-6, ac_corner_hz=3.0)
    notes = " ".join(wiring_notes(wire_channel(capture, setup), 20.0))
    assert "polarity was checked is not stated" in notes
    assert "1e-06 s used instead of 2e-06 s" in notes
    assert "below 10 times the AC corner" in notes
    checked = ChannelSetup(channel=2, polarity_checked="tap test")
    assert wiring_notes(wire_channel(capture, checked), 20.0) == ()
