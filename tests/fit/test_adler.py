"""The estimator: what it gives, what it refuses and why, and that company does not matter."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.adler import AdlerSettings, estimate_adler
from fit.records import AdlerEstimate, Baseline, PsiSeries
from rig.quantities import Quantity

FIELDS = (
    "detuning_hz",
    "coupling_hz",
    "offset_rad",
    "noise_rad2_s",
    "measurement_noise_rad",
    "relaxation_rate_hz",
    "detuning_mean_hz",
)


def series(psi: np.ndarray, step: float = 0.2) -> list[PsiSeries]:
    """One record a row."""
    return [PsiSeries(step_s=step, segments=(row,), start_s=(0.0,)) for row in np.atleast_2d(psi)]


def baseline(detuning: float, u: float, noise: float = 0.03) -> Baseline:
    """A free-running capture of the pair, rates in rad/s."""
    return Baseline(
        detuning_hz=Quantity(value=detuning / math.tau, u=u / math.tau, unit="Hz"),
        noise_rad2_s=Quantity(value=noise, u=0.1 * noise, unit="rad^2/s"),
        source="test",
    )


def test_a_drifting_record_gives_all_four_numbers(truth, rng):
    """The number the user came for, with its sign and unit."""
    pair = truth.Pair(detuning=-1.5)
    found = estimate_adler(series(truth.simulate_psi(pair, (1, 1500), 0.2, rng)))[0]
    truths = (-1.5 / math.tau, 1.0 / math.tau, 0.7, 0.03)
    for name, value in zip(FIELDS, truths, strict=False):
        quantity = getattr(found, name)
        # Four standard errors of a seeded run.
        assert quantity.value == pytest.approx(value, abs=4.0 * quantity.u), name
        assert quantity.low < quantity.value < quantity.high
    assert found.relaxation_rate_hz.value is None


def test_results_are_the_same_bytes_alone_and_in_company(truth, rng):
    """A sweep point must not change because another point was measured with it."""
    kinds = [truth.Pair(detuning=dw) for dw in (1.5, 0.5, 1.05, 4.0)]
    records = [series(truth.simulate_psi(pair, (1, 300), 0.15, rng), 0.15)[0] for pair in kinds]
    together = estimate_adler(records)
    for record, expected in zip(records, together, strict=True):
        assert repr(estimate_adler([record])[0]) == repr(expected)


def test_swapping_the_oscillators_changes_signs_alone(truth, rng):
    """psi, detuning and offset change sign with the roles; coupling and noise do not."""
    psi = truth.simulate_psi(truth.Pair(detuning=1.4), (1, 600), 0.2, rng)
    one, other = estimate_adler([*series(psi), *series(-psi)])
    # The search stops within a hundredth of a standard error.
    assert other.detuning_hz.value == pytest.approx(-one.detuning_hz.value, rel=1e-3)
    assert other.coupling_hz.value == pytest.approx(one.coupling_hz.value, rel=1e-3)
    assert other.offset_rad.value == pytest.approx(-one.offset_rad.value, abs=1e-3)


def test_whole_turns_added_to_psi_change_nothing(truth, rng):
    """Where the count of turns begins is arbitrary."""
    psi = truth.simulate_psi(truth.Pair(detuning=1.4), (1, 400), 0.2, rng)
    one, other = estimate_adler([*series(psi), *series(psi + 20.0 * math.pi)])
    assert other.offset_rad.value == pytest.approx(one.offset_rad.value, abs=1e-4)
    assert other.coupling_hz.value == pytest.approx(one.coupling_hz.value, rel=1e-4)


def test_a_steady_lock_gives_relaxation_but_not_coupling(truth, rng):
    """Textbook fits print a coupling here that is wrong by up to twice its size."""
    pair = truth.Pair(detuning=0.5, diffusion=0.03, noise=0.05)
    found = estimate_adler(series(truth.simulate_psi(pair, (1, 1500), 0.2, rng)))[0]
    for name in ("detuning_hz", "coupling_hz", "offset_rad"):
        assert getattr(found, name).value is None
        assert "free-running" in getattr(found, name).reason
    rate = math.sqrt(0.75) / math.tau
    assert found.relaxation_rate_hz.value == pytest.approx(rate, abs=4 * found.relaxation_rate_hz.u)
    rest = dict(found.checks)["rest angle"]
    assert rest.value == pytest.approx(0.7 + math.asin(0.5), abs=4.0 * rest.u)


def test_a_baseline_makes_the_same_lock_determined(truth, rng):
    """Free-running captures are worth taking: with them a locked record gives everything."""
    pair = truth.Pair(detuning=0.5)
    records = series(truth.simulate_psi(pair, (1, 1500), 0.2, rng))
    found = estimate_adler(records, baselines=[baseline(0.5, 0.02)])[0]
    assert found.coupling_hz.value == pytest.approx(1.0 / math.tau, abs=4.0 * found.coupling_hz.u)
    assert found.detuning_hz.value == pytest.approx(0.5 / math.tau, abs=4.0 * found.detuning_hz.u)
    assert "baseline" in found.method


def test_a_pull_in_from_far_off_determines_a_quiet_lock(truth, rng):
    """One transient does what hours of steady lock cannot."""
    pair = truth.Pair(detuning=0.5, diffusion=0.001, noise=0.02)
    start = np.array([0.7 + math.asin(0.5) + 2.0])
    psi = truth.simulate_from(pair, start, 150, 0.1, rng)
    found = estimate_adler(series(psi, 0.1))[0]
    assert found.coupling_hz.value == pytest.approx(1.0 / math.tau, rel=0.15)


def test_a_quiet_steady_lock_bounds_the_coupling_by_the_free_detuning(rng):
    """Of a constant phase only the angle is known; but a lock needs K above the detuning."""
    psi = 0.4 + 1e-12 * rng.standard_normal(500)
    found = estimate_adler(series(psi), baselines=[baseline(0.5, 0.02)])[0]
    assert found.coupling_hz.value is None
    assert found.coupling_hz.low == pytest.approx(0.5 / math.tau)


def test_two_free_oscillators_have_a_coupling_that_may_be_zero(truth, rng):
    """Without coupling the interval must reach zero, and the offset has no meaning."""
    pair = truth.Pair(detuning=1.5, coupling=0.0)
    found = estimate_adler(series(truth.simulate_psi(pair, (1, 800), 0.2, rng)))[0]
    assert found.coupling_hz.low == 0.0
    assert found.offset_rad.value is None
    assert any("zero" in note for note in found.notes)


def test_other_estimators_agree_with_the_likelihood(truth, rng):
    """Mean rate and resultant length use none of the timing the likelihood uses."""
    pair = truth.Pair(detuning=1.4)
    found = estimate_adler(series(truth.simulate_psi(pair, (1, 3000), 0.2, rng)))[0]
    checks = dict(found.checks)
    for name in ("detuning", "coupling"):
        other, own = checks[f"{name} by rate and resultant"], getattr(found, f"{name}_hz")
        assert other.value == pytest.approx(own.value, abs=4.0 * math.hypot(other.u, own.u))


def test_the_trajectory_check_is_added_when_asked_for(truth, rng):
    """Quiet drifting records can be fitted by the noise-free curve as well."""
    pair = truth.Pair(detuning=1.5, diffusion=1e-6, noise=0.02)
    records = series(truth.simulate_psi(pair, (1, 300), 0.2, rng))
    checks = dict(estimate_adler(records, settings=AdlerSettings(trajectory=True))[0].checks)
    assert checks["coupling by trajectory"].value == pytest.approx(1.0 / math.tau, rel=0.02)
    assert checks["correlation factor of the trajectory"].value >= 1.0


def test_wander_of_the_detuning_widens_its_error_and_is_told(truth, rng):
    """White-noise errors of the nominal detuning cover 23-81 % when the frequency wanders."""
    psi = truth.simulate_psi(truth.Pair(detuning=3.0, diffusion=0.003), (1, 3000), 0.1, rng)[0]
    time_s = 0.1 * np.arange(psi.size)
    wandering = psi + 0.3 / 0.04 * (1.0 - np.cos(0.04 * time_s))
    calm, wild = estimate_adler([*series(psi, 0.1), *series(wandering, 0.1)])
    assert not any("wanders" in note for note in calm.notes)
    assert any("wanders" in note for note in wild.notes)
    assert wild.detuning_hz.u > 3.0 * calm.detuning_hz.u
    assert wild.detuning_hz.u > wild.detuning_mean_hz.u


@pytest.mark.parametrize(
    ("psi", "text"),
    [
        (np.zeros(0), "too short"),
        (np.linspace(0.0, 9.0, 10), "too short"),
        (np.full(200, 1.3), "does not move"),
        (np.cumsum(np.full(300, 2.5)) + 0.3 * np.sin(np.arange(300.0)), "samples a beat"),
    ],
)
def test_records_that_determine_nothing_say_why(psi, text):
    """A null without its reason sends the user to the wrong repair."""
    found = estimate_adler(series(psi))[0]
    assert isinstance(found, AdlerEstimate)
    assert found.detuning_hz.value is None
    assert text in found.detuning_hz.reason
    assert found.coupling_hz.value is None


@pytest.mark.parametrize(
    "psi",
    [
        np.where(np.arange(300) == 150, 1e9, 0.0),
        np.cumsum(np.random.default_rng(1).standard_cauchy(300)),
        np.linspace(0.0, 1e12, 300),
        np.repeat(np.arange(30.0), 10),
        np.tile([0.0, 3.0], 150),
        1e-9 * np.arange(300.0),
        np.linspace(0.0, 5.0, 300) ** 9,
    ],
    ids=["spike", "cauchy", "huge slope", "stairs", "flip-flop", "creep", "runaway"],
)
def test_nasty_records_never_raise(psi):
    """Whatever a file holds, the answer is a record of quantities."""
    with np.errstate(all="raise", under="ignore"):
        found = estimate_adler(series(psi))[0]
    for name in FIELDS:
        quantity = getattr(found, name)
        assert quantity.value is None or math.isfinite(quantity.value)


def test_gaps_are_never_bridged(truth, rng):
    """Segments are separate lanes: a jump between them must not look like motion."""
    psi = truth.simulate_psi(truth.Pair(detuning=1.5), (1, 1200), 0.2, rng)[0]
    parts = (psi[:500], psi[520:900] + 3.0 * math.tau, psi[950:])
    record = PsiSeries(step_s=0.2, segments=parts, start_s=(0.0, 104.0, 190.0))
    found = estimate_adler([record])[0]
    assert found.detuning_hz.value == pytest.approx(1.5 / math.tau, abs=4.0 * found.detuning_hz.u)


def test_unequal_numbers_of_baselines_are_refused():
    """A shifted list would give each record the prior of its neighbour."""
    with pytest.raises(ValueError, match="2 series but 1 baselines"):
        estimate_adler([*series(np.zeros(20)), *series(np.zeros(20))], baselines=[None])


def test_no_records_give_no_estimates():
    """An empty sweep is not an error here."""
    assert estimate_adler([]) == []
