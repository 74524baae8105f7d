"""lmfit models: guesses that arrive, composites, refusals, and no success on a bad fit."""

from __future__ import annotations

import math

import lmfit
import numpy as np
import pytest

from fit.lmfit_models import (
    DriftingPhaseModel,
    LockedPhaseModel,
    PullInPhaseModel,
    check_fit,
    correlation_factor,
    drifting_phase,
    locked_phase,
    trajectory_check,
)
from fit.records import PsiSeries
from rig.errors import FitError


def drifting(rng, dw=1.5, k=1.0, psi0=0.3, start=1.0, span=60.0, noise=0.02):
    """Samples of a clean curve with a little white noise; rates in rad/s."""
    time_s = np.linspace(0.0, span, 600)
    psi = drifting_phase(time_s, dw / math.tau, k / math.tau, psi0, start)
    return time_s, psi + noise * rng.standard_normal(time_s.size)


@pytest.mark.parametrize(
    ("dw", "start", "span"),
    [(1.5, 1.0, 60.0), (-1.5, 1.0, 60.0), (1.02, 1.0, 200.0), (5.0, 0.0, 20.0)],
)
def test_guess_and_fit_find_a_drifting_pair(rng, dw, start, span):
    """A guess off the beat ends in a false optimum that lmfit calls a success."""
    time_s, psi = drifting(rng, dw=dw, start=start, span=span)
    model = DriftingPhaseModel(prefix="pair_")
    result = model.fit(psi, model.guess(psi, time_s), time_s=time_s)
    check = check_fit(result)
    assert check.sound, check.problems
    found = result.params["pair_detuning_hz"].value * math.tau
    # Four standard errors, which include the factor for correlated residuals.
    assert found == pytest.approx(dw, abs=4.0 * dict(check.u)["pair_detuning_hz"] * math.tau)


def test_standard_errors_near_the_edge_match_the_scatter(rng):
    """Differences of the function put the error of the detuning a hundred times too low here."""
    values, errors = [], []
    for _ in range(20):
        time_s, psi = drifting(rng, dw=1.02, span=200.0)
        model = DriftingPhaseModel()
        result = model.fit(psi, model.guess(psi, time_s), time_s=time_s)
        values.append(result.params["detuning_hz"].value)
        errors.append(result.params["detuning_hz"].stderr)
    # The scatter of 20 values is known to 16 %: three times that.
    assert np.std(values) / np.mean(errors) == pytest.approx(1.0, abs=0.5)


def test_pull_in_from_far_off_is_found(rng):
    """Only such a record tells detuning, coupling and offset of a lock apart."""
    time_s, psi = drifting(rng, dw=0.6, psi0=0.2, start=2.9, span=14.0)
    model = PullInPhaseModel()
    result = model.fit(psi, model.guess(psi, time_s), time_s=time_s)
    assert check_fit(result).sound
    assert result.params["coupling_hz"].value * math.tau == pytest.approx(1.0, abs=0.02)


def test_steady_lock_gives_rest_and_relaxation(rng):
    """The locked model asks only for what a locked record holds."""
    time_s = np.linspace(0.0, 12.0, 300)
    psi = locked_phase(time_s, 0.64, 0.8 / math.tau, 0.0, 1.4) + 0.01 * rng.standard_normal(300)
    model = LockedPhaseModel()
    result = model.fit(psi, model.guess(psi, time_s), time_s=time_s)
    assert check_fit(result).sound
    assert result.params["relaxation_rate_hz"].value * math.tau == pytest.approx(0.8, abs=0.02)
    assert not result.params["detuning_hz"].vary


def test_a_small_excursion_does_not_pass_as_full_knowledge(rng):
    """Detuning and coupling slide along a ridge; a success flag alone would print them."""
    time_s = np.linspace(0.0, 8.0, 200)
    psi = drifting_phase(time_s, 0.5 / math.tau, 1.0 / math.tau, 0.0, 0.6)
    psi = psi + 0.01 * rng.standard_normal(200)
    model = PullInPhaseModel()
    result = model.fit(psi, model.guess(psi, time_s), time_s=time_s)
    check = check_fit(result)
    relative = dict(check.u)["detuning_hz"] or math.inf
    assert not check.sound or relative > 0.2 * abs(result.params["coupling_hz"].value)


def test_models_add_up_with_prefixes():
    """Users put a slow trend beside the phase; names must not collide."""
    trend = lmfit.Model(lambda time_s, c: c * time_s, independent_vars=["time_s"], prefix="base_")
    model = DriftingPhaseModel(prefix="pair_") + trend
    names = set(model.param_names)
    assert names == {
        "pair_detuning_hz",
        "pair_coupling_hz",
        "pair_offset_rad",
        "pair_start_rad",
        "base_c",
    }
    assert model.independent_vars == ["time_s"]


def test_a_fit_at_its_bound_is_not_sound(rng):
    """lmfit reports errors eight times too small there and says it succeeded."""
    time_s, psi = drifting(rng)
    model = DriftingPhaseModel()
    params = model.guess(psi, time_s)
    params["coupling_hz"].set(value=0.1, max=0.12)
    check = check_fit(model.fit(psi, params, time_s=time_s))
    assert any("upper bound" in problem for problem in check.problems)


def test_a_start_on_the_bound_is_not_sound(rng):
    """Such a parameter never moves, and comes back with an error of 1e-13."""
    time_s, psi = drifting(rng)
    model = DriftingPhaseModel()
    params = model.guess(psi, time_s)
    params["coupling_hz"].set(value=0.0, min=0.0)
    check = check_fit(model.fit(psi, params, time_s=time_s))
    assert any("coupling_hz" in problem for problem in check.problems)


def test_a_product_of_parameters_is_named_as_not_separable(rng):
    """y = a b x is degenerate, yet lmfit alone calls it a success with an error of 1e12."""
    x = np.linspace(0.0, 1.0, 50)
    model = lmfit.Model(lambda x, a, b: a * b * x, independent_vars=["x"])
    result = model.fit(2.0 * x + 0.01 * rng.standard_normal(50), x=x, a=1.0, b=1.5)
    assert not check_fit(result).sound


def test_a_parameter_without_influence_has_no_error(rng):
    """A missing error must stay missing, never become zero."""
    x = np.linspace(0.0, 1.0, 50)
    model = lmfit.Model(lambda x, a, b: a * x + 0.0 * b, independent_vars=["x"])
    with np.errstate(all="ignore"):
        check = check_fit(model.fit(2.0 * x + 0.01 * rng.standard_normal(50), x=x, a=1.0, b=1.5))
    assert not check.sound
    assert dict(check.u)["b"] is None


def test_a_wrong_optimum_is_not_sound(rng):
    """A beat guessed 2 % off leaves most of the variance, with success reported."""
    time_s, psi = drifting(rng, dw=5.0, span=100.0)
    model = DriftingPhaseModel()
    wrong = model.make_params(detuning_hz=-0.8, coupling_hz=0.1, offset_rad=0.0, start_rad=0.0)
    for name in ("detuning_hz", "start_rad"):
        wrong[name].vary = False
    assert not check_fit(model.fit(psi, wrong, time_s=time_s)).sound


@pytest.mark.parametrize("rho", [0.5, 0.9])
def test_correlated_residuals_raise_the_error_by_the_known_factor(rng, rho):
    """Errors of lmfit are too small by sqrt((1 + rho)/(1 - rho)) for such residuals."""
    noise = rng.standard_normal(20000)
    residual = np.zeros_like(noise)
    for index in range(1, noise.size):
        residual[index] = rho * residual[index - 1] + noise[index]
    # The sum is cut at two errors of zero, which loses a few per cent.
    assert correlation_factor(residual) == pytest.approx(math.sqrt((1 + rho) / (1 - rho)), rel=0.06)


@pytest.mark.parametrize(
    ("change", "text"),
    [
        (lambda t, y: (t, np.where(t == t[5], np.nan, y)), "psi: every sample must be finite"),
        (lambda t, y: (np.where(t == t[5], np.inf, t), y), "time_s: every sample must be finite"),
        (lambda t, y: (t[::-1], y), "times must rise"),
        (lambda t, y: (t[:5], y[:5]), "at least 8"),
        (lambda t, y: (t[:-1], y), "same length"),
    ],
)
def test_bad_data_is_refused_in_plain_words(rng, change, text):
    """lmfit's own text about NaN is the same when a starting value was forgotten."""
    time_s, psi = change(*drifting(rng))
    with pytest.raises(FitError, match=text):
        DriftingPhaseModel().guess(psi, time_s)


def test_a_forgotten_starting_value_is_named(rng):
    """Parameters made without values are minus infinity in lmfit."""
    time_s, psi = drifting(rng)
    model = DriftingPhaseModel()
    with pytest.raises(FitError, match="starting value"):
        model.fit(psi, model.make_params(), time_s=time_s)


def test_the_trajectory_check_agrees_on_quiet_records_and_refuses_noisy_ones(rng):
    """A curve without noise describes quiet records only."""
    time_s, psi = drifting(rng)
    record = PsiSeries(step_s=float(time_s[1]), segments=(psi,), start_s=(0.0,))
    found = dict(trajectory_check(record))
    assert found["detuning by trajectory"].value * math.tau == pytest.approx(1.5, abs=0.01)
    noisy = psi + np.cumsum(0.15 * rng.standard_normal(psi.size))
    rough = PsiSeries(step_s=float(time_s[1]), segments=(noisy,), start_s=(0.0,))
    assert dict(trajectory_check(rough))["detuning by trajectory"].value is None
