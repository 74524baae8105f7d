"""Beat note of an unlocked pair as a spectrum, a locked pair as a low pass (A6, B5, C6, E9, G8)."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.adler import estimate_adler
from fit.difference import Order, form_difference
from fit.episodes import EpisodeRules, find_episodes
from fit.lmfit_models import DriftingPhaseModel
from fit.models import PhaseEquation, beat_rate_rad_s, trajectory
from fit.noise_physics import resultant_length
from fit.records import PsiSeries
from fit.slips import find_slips
from rig.phases.estimate import track_one
from rig.phases.settings import PhaseSettings

TURN = 2.0 * math.pi
PER_BEAT, BEATS = 2048, 4


def ladder(ratio, start_rad=0.3):
    """Lines of exp(i psi) at n times the beat, over whole beats; n from -8 to 40."""
    equation = PhaseEquation(detuning_rad_s=ratio, coupling_rad_s=1.0)
    period_s = TURN / beat_rate_rad_s(equation)
    psi_rad = trajectory(equation, start_rad, np.arange(PER_BEAT * BEATS) * period_s / PER_BEAT)
    lines = np.fft.fft(np.exp(1j * psi_rad)) / psi_rad.size
    return lines, {n: abs(lines[n * BEATS]) for n in range(-8, 41)}


@pytest.mark.parametrize(
    ("ratio", "rho", "step_db"),
    [(1.25, 0.5, -6.0206), (1.05, 0.7298437881, -2.7354), (2.0, 0.2679491924, -11.439)],
)
def test_side_lines_stand_on_one_side_and_fall_by_a_constant_ratio(ratio, rho, step_db):
    """What a spectrum analyser shows of an unlocked pair: its witness against our trajectory."""
    # Source: Stover 1966, Proc. IEEE 54, 310; Armand 1969, Proc. IEEE 57, 798
    # Read: recalled; derived again: |c_0| = rho, |c_n| = 2 Om/K rho^n, rho = (dw - Om)/K
    # Printed: 1.25 K: rho .5, lines .5, .75, .375, .1875, -6.0206 dB a line; -2.7354 dB at
    #   1.05 K; -11.439 dB at 2 K; none on the other side; squares add up to 1
    # Converted: no
    # Tolerance: 1e-9 for lines (rounding of 8,192 values), printed digits for decibels
    lines, by_number = ladder(ratio)
    beat = math.sqrt(ratio**2 - 1.0)
    assert by_number[0] == pytest.approx(rho, abs=1e-9)
    for number in range(1, 12):
        assert by_number[number] == pytest.approx(2.0 * beat * rho**number, abs=1e-9)
    assert max(by_number[number] for number in range(-8, 0)) < 1e-10
    assert 20.0 * math.log10(by_number[3] / by_number[2]) == pytest.approx(step_db, abs=5e-4)
    assert np.sum(np.abs(lines) ** 2) == pytest.approx(1.0, abs=1e-12)


def test_the_first_lines_at_a_quarter_above_the_edge():
    """The 3-4-5 pair has lines that a person can check by heart."""
    # Source: as above
    # Read: as above
    # Printed: 0.5, 0.75, 0.375, 0.1875
    # Converted: no
    # Tolerance: 1e-9
    _, by_number = ladder(1.25)
    assert [by_number[n] for n in range(4)] == pytest.approx([0.5, 0.75, 0.375, 0.1875], abs=1e-9)


@pytest.mark.parametrize(("asymmetry", "factor"), [(1.0, 1.414214), (3.0, 3.162278)])
def test_coupling_of_amplitude_and_phase_goes_into_coupling_and_offset(asymmetry, factor):
    """A laser or a varactor oscillator looks like a plain pair with a turned offset."""
    # Source: Lang 1982, IEEE J. Quantum Electron. 18, 976: kap (sin psi + a cos psi)
    # Read: recalled; algebra: kap sqrt(1 + a^2) sin(psi + atan a)
    # Printed: sqrt(1 + a^2) = 1.414214 (a = 1), 3.162278 (a = 3); offset -atan a
    # Converted: rad/s to Hz by 2 pi
    # Tolerance: 1e-5 of the coupling; fourth-order integration at a thousandth of the beat
    detuning = 1.3 * factor
    step_s = TURN / math.sqrt(detuning**2 - factor**2) / 1000.0

    def rate(angle):
        return detuning - math.sin(angle) - asymmetry * math.cos(angle)

    psi_rad = np.empty(6001)
    psi_rad[0] = 0.4
    for k in range(psi_rad.size - 1):
        first = rate(psi_rad[k])
        second = rate(psi_rad[k] + step_s * first / 2)
        third = rate(psi_rad[k] + step_s * second / 2)
        fourth = rate(psi_rad[k] + step_s * third)
        psi_rad[k + 1] = psi_rad[k] + step_s * (first + 2 * second + 2 * third + fourth) / 6
    time_s = np.arange(psi_rad.size)[::10] * step_s
    model = DriftingPhaseModel()
    found = model.fit(psi_rad[::10], model.guess(psi_rad[::10], time_s), time_s=time_s).params
    assert found["coupling_hz"].value * TURN == pytest.approx(factor, rel=1e-5)
    assert found["detuning_hz"].value * TURN == pytest.approx(detuning, rel=1e-5)
    assert found["offset_rad"].value == pytest.approx(-math.atan(asymmetry), abs=1e-5)


def test_the_resultant_of_a_quiet_lock_is_that_of_its_small_swing():
    """In lock and weak noise psi is a low-passed noise of variance D/Gamma."""
    # Source: Ornstein-Uhlenbeck process (textbook)
    # Read: recalled
    # Printed: Var psi = D/Gamma, R -> exp(-D/(2 Gamma))
    # Converted: no
    # Tolerance: the next term is of the order of the variance squared
    for noise in (1e-3, 1e-4):
        variance = noise / 0.8
        found = resultant_length(0.6, 1.0, noise)
        assert found == pytest.approx(math.exp(-variance / 2.0), abs=2.0 * variance**2)


def test_a_low_passed_noise_gives_back_its_corner_and_its_strength(rng):
    """What a quiet locked record can tell: relaxation rate and noise, not detuning."""
    # Source: Ornstein-Uhlenbeck process (textbook)
    # Read: recalled
    # Printed: correlation time 1/Gamma, corner Gamma/(2 pi) Hz, Var psi = D/Gamma
    # Converted: rad/s to Hz by 2 pi
    # Tolerance: four standard uncertainties as the estimator states them
    relaxation, noise, step_s, count = 0.8, 2e-3, 0.1, 6000
    decay = math.exp(-relaxation * step_s)
    kicks = math.sqrt(noise / relaxation * (1.0 - decay**2)) * rng.standard_normal(count)
    away = np.zeros(count)
    for k in range(1, count):
        away[k] = decay * away[k - 1] + kicks[k]
    record = PsiSeries(step_s=step_s, segments=(0.6435 + away,), start_s=(0.0,))
    (found,) = estimate_adler([record])
    corner = found.relaxation_rate_hz
    assert corner.value == pytest.approx(relaxation / TURN, abs=4.0 * corner.u)
    assert corner.u < 0.15 * corner.value
    strength = found.noise_rad2_s
    assert strength.value == pytest.approx(noise, abs=4.0 * strength.u)
    assert found.detuning_hz.value is None


@pytest.mark.parametrize(
    ("order", "driven_turns", "reference_turns", "turns"),
    [((1, 3), 1, 0, 1), ((1, 3), 0, 1, -3), ((2, 3), 1, 0, 2), ((2, 3), 1, 1, -1)],
)
def test_a_turn_too_many_is_one_slip_of_its_weight(
    psi_tools, order, driven_turns, reference_turns, turns
):
    """One lost turn of the reference of a 1:3 pair is one event, not three."""
    # Source: derived
    # Read: derived
    # Printed: n phi_1 - m phi_2 is defined to whole turns; a turn of phi_1 moves it by n, one
    #   of phi_2 by -m turns
    # Converted: no
    # Tolerance: none, counts; a turn lost within a sample, as by a missed cycle
    rate_hz, count = 20.0, 2400
    time_s = np.arange(count) / rate_hz
    late = time_s > 60.0
    reference = TURN * 0.9 * time_s
    driven = (0.5 + order[1] * reference) / order[0] + driven_turns * TURN * late
    tracks = [
        psi_tools.track(phase_rad, rate_hz)
        for phase_rad in (driven, reference + reference_turns * TURN * late)
    ]
    record = form_difference(tracks[0], tracks[1], Order(n=order[0], m=order[1]))
    (slip,) = find_slips(record, centre_rad=0.5)
    assert slip.turns == turns
    assert slip.time_s == pytest.approx(60.0, abs=1.0 / rate_hz)
    episodes = find_episodes(record, EpisodeRules(), 10.0)
    assert len(episodes) == 2
    assert [episode.offset_rad for episode in episodes] == pytest.approx([0.5, 0.5], abs=1e-6)


def test_the_power_frequency_counts_whole_cycles(slow):
    """Five hundred cycles over their duration: what a mains instrument of class A does."""
    # Source: IEC 61000-4-30, class A, frequency from the whole cycles of 10 s
    # Read: 10 s of zero crossings in a secondary source, wording recalled
    # Printed: 50.005 Hz over 10 s: 500 whole cycles, exact to 1e-9 without noise
    # Converted: no
    # Tolerance: bias of linear interpolation at 200 samples a cycle, 5e-7 rad over 10 s
    rate_hz = 10_000.0
    time_s = np.arange(round(10.05 * rate_hz)) / rate_hz
    wave = np.sin(TURN * 50.005 * time_s - 0.001)
    (channel,) = slow.memory_channels(wave, rate_hz)
    track = track_one(channel, settings=PhaseSettings(method="marker"))
    assert track.frequency_hz.value == pytest.approx(50.005, abs=2e-8)
    event_s = track.event_s
    cycles = np.searchsorted(event_s, event_s[0] + 10.0, side="right") - 1
    assert cycles == 500
    counted_hz = cycles / (event_s[cycles] - event_s[0])
    assert counted_hz == pytest.approx(50.005, abs=2e-8)
