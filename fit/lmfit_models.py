"""lmfit models of psi without noise, for notebooks, and a check of what lmfit reports.

The closed form of ``fit.models`` as Model classes with ``guess``, prefixes and units. They
describe quiet records; where noise drives the phase itself, use ``fit.adler``. This is the
only file that imports lmfit.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import lmfit
import numpy as np

from fit.likelihood_start import relaxation, weak_form
from fit.models import PhaseEquation, trajectory
from fit.records import PsiSeries
from rig.angles import hz_from_rad_s, rad_s_from_hz
from rig.arrays import FloatArray
from rig.errors import FitError
from rig.quantities import Quantity, undetermined

GUESS_SAMPLES = 2000
# Two parameters count as told apart by nothing but noise when their correlation is beyond
# this and one of them has an error above half its size. Detuning and coupling of a drifting
# pair are correlated by more than that and yet both well known.
DEGENERATE = 0.999
LARGE_ERROR = 0.5
# A parameter within this many of its standard errors of a bound counts as at the bound.
NEAR_BOUND = 2.0


def drifting_phase(
    time_s: FloatArray,
    detuning_hz: float,
    coupling_hz: float,
    offset_rad: float,
    start_rad: float,
) -> FloatArray:
    """Return psi of a pair from its four numbers, through the critical point.

    A negative coupling is the same curve with the offset turned by half a turn, so no bound is
    needed.

    Parameters
    ----------
    time_s : array, shape (n,), s, from the start
    detuning_hz, coupling_hz : float, Hz
    offset_rad, start_rad : float, rad

    Returns
    -------
    array, shape (n,), rad
    """
    turned = offset_rad + (math.pi if coupling_hz < 0.0 else 0.0)
    equation = PhaseEquation(
        detuning_rad_s=rad_s_from_hz(detuning_hz),
        coupling_rad_s=rad_s_from_hz(abs(coupling_hz)),
        offset_rad=turned,
    )
    return trajectory(equation, start_rad, time_s)


def locked_phase(
    time_s: FloatArray,
    rest_rad: float,
    relaxation_rate_hz: float,
    detuning_hz: float,
    start_rad: float,
) -> FloatArray:
    """Return psi of a locked pair by its rest angle and relaxation rate.

    Coupling = hypot(relaxation_rate, detuning), offset = rest - asin(detuning/coupling).

    Parameters
    ----------
    time_s : array, shape (n,), s, from the start
    rest_rad : float, rad
    relaxation_rate_hz, detuning_hz : float, Hz
    start_rad : float, rad

    Returns
    -------
    array, shape (n,), rad
    """
    rate, detuning = abs(relaxation_rate_hz), detuning_hz
    lag = math.atan2(detuning, rate)
    return drifting_phase(time_s, detuning, math.hypot(rate, detuning), rest_rad - lag, start_rad)


class _PhaseModel(lmfit.Model):  # type: ignore[misc]  # lmfit has no types
    """What the phase models share: time as the one independent variable, own refusals."""

    def __init__(self, function: Any, prefix: str, **settings: Any) -> None:
        settings.setdefault("independent_vars", ["time_s"])
        super().__init__(function, prefix=prefix, **settings)

    def fit(self, data: Any, params: Any = None, **settings: Any) -> Any:
        """Fit as lmfit does, after a check of data, times and starting values.

        Raises
        ------
        FitError
            If a sample, a time or a starting value is missing or not finite.
        """
        _checked(data, settings.get("time_s"))
        for name, value in (params.valuesdict() if params is not None else {}).items():
            if not math.isfinite(value):
                raise FitError(f"parameter '{name}': starting value must be finite, got {value}")
        return super().fit(data, params, **settings)


class DriftingPhaseModel(_PhaseModel):
    """psi of a drifting pair.

    Parameters of the model: ``detuning_hz`` (Hz), ``coupling_hz`` (Hz), ``offset_rad`` (rad)
    and ``start_rad`` (rad, psi at time 0). No bounds: a negative coupling is the same curve
    half a turn further. Independent variable ``time_s`` (s). At least 4 samples a beat.
    """

    def __init__(self, prefix: str = "", **settings: Any) -> None:
        super().__init__(drifting_phase, prefix, **settings)

    def guess(self, data: FloatArray, time_s: FloatArray, **values: float) -> Any:
        """Return starting parameters from the data: weak form, else mean rate and extremes.

        Parameters
        ----------
        data : array, shape (n,), rad, unwrapped psi
        time_s : array, shape (n,), s, rising
        **values : float
            Values that override the guess, by name without prefix.

        Returns
        -------
        lmfit.Parameters

        Raises
        ------
        FitError
            If a value is not finite, the times do not rise, or there are fewer than 8.
        """
        psi, time = _checked(data, time_s)
        detuning, a, b = _drift(psi, time)
        return self.make_params(
            **{
                "detuning_hz": hz_from_rad_s(detuning),
                "coupling_hz": hz_from_rad_s(math.hypot(a, b)),
                "offset_rad": math.atan2(a, -b),
                "start_rad": float(psi[0]),
                **values,
            }
        )


class PullInPhaseModel(DriftingPhaseModel):
    """psi of a pair that pulls in from far off; the same parameters as DriftingPhaseModel.

    Only a start far from rest tells detuning, coupling and offset apart: look at
    ``check_fit``, and use LockedPhaseModel when it names them as not separable.
    """

    def guess(self, data: FloatArray, time_s: FloatArray, **values: float) -> Any:
        """Return starting parameters: rest and relaxation of the second half, detuning 0.

        Parameters
        ----------
        data : array, shape (n,), rad, unwrapped psi
        time_s : array, shape (n,), s, rising
        **values : float
            Values that override the guess, by name without prefix.

        Returns
        -------
        lmfit.Parameters
        """
        psi, time = _checked(data, time_s)
        detuning, a, b = _drift(psi, time)
        coupling, rest = math.hypot(a, b), float(np.mean(psi[-max(psi.size // 8, 1) :]))
        if not coupling > abs(detuning):
            detuning, coupling = 0.0, _pull_in_rate(psi, time, rest)
        offset = rest - math.asin(detuning / coupling)
        return self.make_params(
            **{
                "detuning_hz": hz_from_rad_s(detuning),
                "coupling_hz": hz_from_rad_s(coupling),
                "offset_rad": offset,
                "start_rad": float(psi[0]),
                **values,
            }
        )


class LockedPhaseModel(_PhaseModel):
    """psi of a locked pair around its rest.

    Parameters of the model: ``rest_rad`` (rad), ``relaxation_rate_hz`` (Hz), ``start_rad``
    (rad) and ``detuning_hz`` (Hz). The detuning is held at 0 unless it is set from a
    free-running capture or freed: a locked record does not tell it. Independent variable
    ``time_s`` (s). No bounds; the sign of the relaxation rate means nothing.
    """

    def __init__(self, prefix: str = "", **settings: Any) -> None:
        super().__init__(locked_phase, prefix, **settings)
        self.set_param_hint("detuning_hz", value=0.0, vary=False)

    def guess(self, data: FloatArray, time_s: FloatArray, **values: float) -> Any:
        """Return starting parameters from the last part and the way there.

        Parameters
        ----------
        data : array, shape (n,), rad, unwrapped psi
        time_s : array, shape (n,), s, rising
        **values : float
            Values that override the guess, by name without prefix.

        Returns
        -------
        lmfit.Parameters
        """
        psi, time = _checked(data, time_s)
        rest = float(np.mean(psi[-max(psi.size // 8, 1) :]))
        return self.make_params(
            **{
                "rest_rad": rest,
                "relaxation_rate_hz": hz_from_rad_s(_pull_in_rate(psi, time, rest)),
                "detuning_hz": 0.0,
                "start_rad": float(psi[0]),
                **values,
            }
        )


def _checked(data: Any, time_s: Any) -> tuple[FloatArray, FloatArray]:
    """Return data and times as arrays, or refuse them in words of their own."""
    psi, time = np.asarray(data, dtype=float), np.asarray(time_s, dtype=float)
    if psi.shape != time.shape or psi.ndim != 1 or psi.size < 8:
        raise FitError(
            f"psi and time_s: two rows of the same length, at least 8, needed, "
            f"got shapes {psi.shape} and {time.shape}"
        )
    for name, values in (("psi", psi), ("time_s", time)):
        bad = np.flatnonzero(~np.isfinite(values))
        if bad.size:
            raise FitError(
                f"{name}: every sample must be finite, sample {bad[0]} is {values[bad[0]]}; "
                f"leave the {bad.size} out"
            )
    if not np.all(np.diff(time) > 0.0):
        raise FitError("time_s: times must rise; sort the samples")
    return psi, time


def _drift(psi: FloatArray, time_s: FloatArray) -> tuple[float, float, float]:
    """Return (dw, a, b) in rad/s from an evenly spaced version of the record."""
    even = np.linspace(time_s[0], time_s[-1], min(psi.size, GUESS_SAMPLES))
    record = PsiSeries(
        step_s=float(even[1] - even[0]),
        segments=(np.interp(even, time_s, psi),),
        start_s=(float(even[0]),),
    )
    for lag in (4, 1):
        found = weak_form(record, lag)
        if np.all(np.isfinite(found)) and float(np.sum(np.abs(found))) * record.step_s < 3.0:
            return float(found[0]), float(found[1]), float(found[2])
    return _from_speed(record)


def _from_speed(record: PsiSeries) -> tuple[float, float, float]:
    """Return (dw, a, b) from the fastest and slowest motion and where psi is fastest."""
    psi = record.segments[0]
    speed = np.gradient(psi, record.step_s)
    low, high = (float(value) for value in np.quantile(speed, (0.02, 0.98)))
    detuning, coupling = 0.5 * (low + high), 0.5 * (high - low)
    extreme = np.argmax(speed) if detuning >= 0.0 else np.argmin(speed)
    # Fastest forward where sin(psi - psi0) = -1, fastest backward where it is 1.
    offset = float(psi[extreme]) + math.copysign(0.5 * math.pi, detuning)
    return detuning, coupling * math.sin(offset), -coupling * math.cos(offset)


def _pull_in_rate(psi: FloatArray, time_s: FloatArray, rest: float) -> float:
    """Return the rate (1/s) at which psi comes to rest, at least one over the record."""
    away = np.abs(psi - rest)
    least = 1.0 / float(time_s[-1] - time_s[0])
    if away[0] > 6.0 * float(np.std(psi[psi.size // 2 :])):
        below = np.flatnonzero(away < away[0] / math.e)
        if below.size and below[0] > 0:
            return max(1.0 / float(time_s[below[0]] - time_s[0]), least)
    even = float(np.median(np.diff(time_s)))
    return max(relaxation(psi - rest, even)[0], least)


@dataclass(frozen=True, slots=True, kw_only=True)
class FitCheck:
    """What is wrong with an lmfit result, and standard errors that allow for correlation.

    ``sound`` is true when there is no problem. ``factor`` is how much larger errors are than
    lmfit says because neighbouring residuals agree: sqrt(1 + 2 sum of autocorrelations).
    ``u`` maps each free parameter to its corrected standard error, None where there is none.
    """

    sound: bool
    problems: tuple[str, ...]
    factor: float
    u: tuple[tuple[str, float | None], ...]


def check_fit(result: Any) -> FitCheck:
    """Return what speaks against an lmfit result, whatever its own success flag says.

    Parameters
    ----------
    result : lmfit ModelResult or MinimizerResult

    Returns
    -------
    FitCheck
        Problems name parameters that stand at a bound, did not move, have no standard error,
        or are told apart from another by nothing but noise; and residuals that are not noise.

    Notes
    -----
    Near a bound the standard error of lmfit is far too small (its map of the bound has no
    slope there). The residual test fires when more than half of the variance remains.
    """
    free = [par for par in result.params.values() if par.vary]
    factor = correlation_factor(np.asarray(result.residual, dtype=float))
    problems = [] if result.success else [f"the search ended without success: {result.message}"]
    for par in free:
        problems.extend(_parameter_problems(par))
    problems.extend(_degenerate_pairs(free))
    problems.extend(_residual_problems(result))
    u = tuple((par.name, None if not par.stderr else factor * float(par.stderr)) for par in free)
    return FitCheck(sound=not problems, problems=tuple(problems), factor=factor, u=u)


def _parameter_problems(par: Any) -> list[str]:
    """Return what is wrong with one parameter."""
    found = []
    for side, bound in (("lower", par.min), ("upper", par.max)):
        reach = NEAR_BOUND * (par.stderr or 0.0) + 1e-6 * max(abs(bound), 1e-9)
        if math.isfinite(bound) and abs(par.value - bound) <= reach:
            found.append(f"{par.name} stands at its {side} bound {bound:g}: its error is not valid")
    if par.init_value is not None and par.value == par.init_value:
        found.append(f"{par.name} did not move from its start {par.value:g}")
    if not par.stderr or not math.isfinite(par.stderr):
        found.append(f"{par.name} has no standard error: no influence, or data without noise")
    return found


def _degenerate_pairs(free: list[Any]) -> list[str]:
    """Return the pairs of parameters that only their combination determines."""
    found = []
    unsure = {par.name for par in free if (par.stderr or 0.0) > LARGE_ERROR * abs(par.value)}
    for par in free:
        for other, value in (par.correl or {}).items():
            if par.name < other and abs(value) > DEGENERATE and unsure & {par.name, other}:
                found.append(
                    f"{par.name} cannot be separated from {other} (correlation {value:.5f})"
                )
    return found


def _residual_problems(result: Any) -> list[str]:
    """Return what the residuals say."""
    residual = np.asarray(result.residual, dtype=float)
    if not np.all(np.isfinite(residual)):
        return ["residuals are not finite"]
    data = getattr(result, "data", None)
    if data is None or residual.size < 3:
        return []
    weights = getattr(result, "weights", None)
    around = np.asarray(data, dtype=float) * (1.0 if weights is None else np.asarray(weights))
    spread = float(np.var(around))
    if spread > 0.0 and float(np.var(residual)) > 0.5 * spread:
        return ["the model leaves more than half of the variance: wrong optimum or wrong model"]
    return []


def correlation_factor(residual: FloatArray) -> float:
    """Return sqrt(1 + 2 sum rho_k), the sum ending at the first rho_k below two errors of 0.

    Parameters
    ----------
    residual : array, shape (n,)

    Returns
    -------
    float, at least 1
    """
    away = residual - np.mean(residual)
    power = float(away @ away)
    if not power > 0.0:
        return 1.0
    total, limit = 0.0, 2.0 / math.sqrt(away.size)
    for lag in range(1, away.size // 2):
        rho = float(away[lag:] @ away[:-lag]) / power
        if rho < limit:
            break
        total += rho
    return math.sqrt(1.0 + 2.0 * total)


def trajectory_check(record: PsiSeries) -> tuple[tuple[str, Quantity], ...]:
    """Return detuning and coupling by least squares of the noise-free curve, a cross-check.

    Parameters
    ----------
    record : PsiSeries
        The longest segment is fitted.

    Returns
    -------
    pairs of name and Quantity
        Standard errors are multiplied by the factor for correlated residuals, which is given
        as a third entry. Values are None when ``check_fit`` finds a problem.

    Notes
    -----
    Valid for quiet records only: phase noise accumulates, and a curve that forgets nothing
    then fits nothing. Beyond a factor of 3 the entries are None.
    """
    psi = max(record.segments, key=lambda part: part.size)
    time_s = np.asarray(record.step_s * np.arange(psi.size), dtype=np.float64)
    model = DriftingPhaseModel() if abs(psi[-1] - psi[0]) > math.tau else PullInPhaseModel()
    result = model.fit(psi, model.guess(psi, time_s), time_s=time_s)
    check = check_fit(result)
    reason = "; ".join(check.problems)
    if not reason and check.factor > 3.0:
        reason = f"residuals are correlated (factor {check.factor:.1f}): noise drives the phase"
    found = [
        (f"{label} by trajectory", _trajectory_quantity(result, name, check, reason))
        for label, name in (("detuning", "detuning_hz"), ("coupling", "coupling_hz"))
    ]
    factor = Quantity(value=check.factor, u=None, unit="1")
    return (*found, ("correlation factor of the trajectory", factor))


def _trajectory_quantity(result: Any, name: str, check: FitCheck, reason: str) -> Quantity:
    """Return one fitted parameter with its corrected error."""
    u = dict(check.u)[name]
    if reason or u is None:
        return undetermined("Hz", reason or "no standard error")
    value = float(result.params[name].value)
    return Quantity(value=abs(value) if name == "coupling_hz" else value, u=u, unit="Hz")
