"""The table of rigs: one door, seeds, settings, refusals, and what each rig promises."""

from __future__ import annotations

import numpy as np
import pytest

from rig.errors import CaptureError
from rig.synthetic.exciters import ExciterSettings, integrate_exciters
from rig.synthetic.heartbeat import HeartbeatSettings, integrate_beats
from rig.synthetic.rigs import RIGS, setting_names, simulate_rig

SHORT = {
    "circuit": {"duration_s": 0.1, "settle_s": 0.0},
    "ring": {"duration_s": 0.1, "settle_s": 0.0},
    "clocks": {"duration_s": 5.0},
    "exciters": {"duration_s": 0.5},
    "heartbeat": {},
    "pendulums": {"duration_s": 10.0},
}


def test_every_rig_is_covered_here():
    """A new row of the table needs its short settings, else the tests below miss it."""
    assert set(SHORT) == set(RIGS)


@pytest.mark.parametrize("name", RIGS)
def test_a_rig_gives_the_asked_frames_and_states_its_truth(name):
    """Length, channels, units and truth must agree whatever the rig."""
    capture = simulate_rig(name, settings=SHORT[name], seed=3)
    duration_s = SHORT[name].get("duration_s", 180.0)
    assert capture.samples.shape == (len(capture.channels), round(duration_s * capture.rate_hz))
    assert np.all(np.isfinite(capture.samples))
    assert capture.truth
    assert all(np.isfinite(value) for _, value, _ in capture.truth)


@pytest.mark.parametrize("name", RIGS)
def test_the_same_seed_gives_the_same_samples_and_another_seed_others(name):
    """Chance comes from the seed alone."""
    first, again, other = (simulate_rig(name, settings=SHORT[name], seed=s) for s in (1, 1, 2))
    assert np.array_equal(first.samples, again.samples)
    assert not np.array_equal(first.samples, other.samples)


def test_nested_settings_are_reached_by_their_own_names():
    """The component values of the tank are settings of the circuit rig."""
    assert "capacitor_f" in setting_names(RIGS["circuit"].settings)
    capture = simulate_rig(
        "circuit", settings={**SHORT["circuit"], "capacitor_f": 4 * 1.008e-6}, seed=1
    )
    assert capture.fact("free_driven_hz") == pytest.approx(250.0, abs=3.0)


def test_an_unknown_rig_is_refused_with_the_known_ones():
    """No silent fallback."""
    with pytest.raises(CaptureError, match="no simulated rig 'clock'; rigs are circuit, ring"):
        simulate_rig("clock", settings={}, seed=1)


def test_an_unknown_setting_is_refused_with_the_known_ones():
    """A misspelt setting must not leave the default in force."""
    with pytest.raises(CaptureError, match="no setting 'detla'; settings are duration_s"):
        simulate_rig("clocks", settings={"detla": 0.1}, seed=1)


@pytest.mark.parametrize(
    ("name", "settings"),
    [
        ("circuit", {"duration_s": 0.0}),
        ("circuit", {"rate_hz": -1.0}),
        ("circuit", {"duration_s": 1e9}),
        ("clocks", {"duration_s": float("inf")}),
        ("ring", {"gain": 1.5}),
        ("clocks", {"beta": 0.7}),
        ("clocks", {"mu": float("nan")}),
        ("exciters", {"mass_kg": 0.0}),
        ("heartbeat", {"lock_2_s": 10.0}),
        ("pendulums", {"spring_per_mass": -1.0}),
    ],
)
def test_a_value_out_of_range_is_refused_in_one_line_that_names_the_rig(name, settings):
    """Every refusal reaches the user as one line."""
    with pytest.raises(CaptureError, match=f"rig '{name}': ") as caught:
        simulate_rig(name, settings=settings, seed=1)
    assert "\n" not in str(caught.value)


def test_a_fact_that_is_not_known_is_a_key_error():
    """Asking for a wrong fact must not give a number."""
    capture = simulate_rig("pendulums", settings=SHORT["pendulums"], seed=1)
    with pytest.raises(KeyError):
        capture.fact("coupling_hz")


@pytest.mark.parametrize("seed", range(4))
def test_the_heart_follows_three_to_one_in_its_stretches_and_nowhere_else(seed):
    """The stated switching times are when locking begins and ends, to 2 s."""
    settings = HeartbeatSettings()
    beats_s = integrate_beats(settings, np.random.default_rng(seed))
    times = np.arange(0.0, settings.duration_s, 0.05)
    turns = np.interp(times, beats_s, np.arange(beats_s.size)) - 3 * settings.breath_hz * times
    for start_s, stop_s in ((30.0, 75.0), (110.0, 150.0)):
        middle = int(0.5 * (start_s + stop_s) / 0.05)
        outside = np.flatnonzero(np.abs(turns - turns[middle]) > 0.25) * 0.05
        assert outside[outside < times[middle]][-1] == pytest.approx(start_s, abs=2.0)
        assert outside[outside > times[middle]][0] == pytest.approx(stop_s, abs=2.0)


def test_energy_fed_to_the_frame_leaves_through_its_damper():
    """Undriven and undamped, the exciters and their frame keep their energy."""
    settings = ExciterSettings(duration_s=1.0, rate_hz=2000.0, slope_nms=1e-12, mount_damping=0.0)
    motion = integrate_exciters(settings, np.array([1.0]), rng=None)[:, :, 0]
    speed = np.gradient(motion, 1.0 / settings.rate_hz, axis=0, edge_order=2)[50:-50]
    energy = _exciter_energy_j(settings, motion[50:-50], speed)
    # Speeds are differences of samples: (w h)^2 / 6 = 0.1 % of the moving parts.
    assert np.ptp(energy) < 2e-3 * np.mean(energy)


def _exciter_energy_j(settings, motion, speed):
    """Kinetic and spring energy of frame and rotors for small frame motion."""
    mass, unbalance = settings.mass_kg, settings.unbalance_kgm
    inertia = mass * settings.arm_m**2
    stiffness = (2 * np.pi * settings.mount_hz) ** 2
    energy = 0.5 * mass * (speed[:, 0] ** 2 + speed[:, 1] ** 2) + 0.5 * inertia * speed[:, 2] ** 2
    energy = energy + 0.5 * stiffness * (
        mass * (motion[:, 0] ** 2 + motion[:, 1] ** 2) + inertia * motion[:, 2] ** 2
    )
    for rotor, arm in ((3, settings.arm_m), (4, -settings.arm_m)):
        sine, cosine, turning = np.sin(motion[:, rotor]), np.cos(motion[:, rotor]), speed[:, rotor]
        energy = energy + 0.5 * settings.rotor_kgm2 * turning**2
        across = -speed[:, 0] * sine + (speed[:, 1] + arm * speed[:, 2]) * cosine
        energy = energy + unbalance * turning * across
    return energy
