"""lmfit models of psi without noise, for notebooks, and a check of what lmfit reports.

The closed form of ``fit.models`` as Model classes with ``guess``, prefixes and units. They
describe quiet records; where noise drives the phase itself, use ``fit.adler``. This is the
only file that imports lmfit.
"""

from __future__ import annotations

import math
from typing import Any

import lmfit
import numpy as np
from scipy.optimize import least_squares

from fit.fit_check import FitCheck, check_fit, correlation_factor
from fit.likelihood_start import relaxation, weak_form
from fit.models import PhaseEquation, trajectory, trajectory_slopes
from fit.records import PsiSeries
from rig.angles import TURN_RAD, hz_from_rad_s, rad_s_from_hz, wrap_angle_rad
from rig.arrays import FloatArray, median
from rig.errors import FitError
from rig.quantities import Quantity, undetermined

__all__ = [
    "DriftingPhaseModel",
    "FitCheck",
    "LockedPhaseModel",
    "PullInPhaseModel",
    "check_fit",
    "correlation_factor",
    "drifting_phase",
    "locked_phase",
    "trajectory_check",
]

GUESS_SAMPLES = 2000


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
        return super().fit(data, params, **self._with_slopes(params, settings))

    def _with_slopes(self, params: Any, settings: dict[str, Any]) -> dict[str, Any]:
        """Return the settings with exact derivatives, where the model has them."""
        return settings


class DriftingPhaseModel(_PhaseModel):
    """psi of a drifting pair.

    Parameters of the model: ``detuning_hz`` (Hz), ``coupling_hz`` (Hz), ``offset_rad`` (rad)
    and ``start_rad`` (rad, psi at time 0). No bounds: a negative coupling is the same curve
    half a turn further. Independent variable ``time_s`` (s). At least 4 samples a beat.
    """

    def __init__(self, prefix: str = "", **settings: Any) -> None:
        super().__init__(drifting_phase, prefix, **settings)

    def guess(self, data: FloatArray, time_s: FloatArray, **values: float) -> Any:
        """Return starting parameters: the best of several fits from regression starts.

        The sum of squares has a narrow curved valley along which detuning and coupling leave
        the beat alone; a search with differences of the function gets stuck in it, so the
        guess goes down it with exact derivatives first.

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
        detuning, coupling, offset, start = _settled(psi, time, self._starts(psi, time))
        return self.make_params(
            **{
                "detuning_hz": _shortened(hz_from_rad_s(detuning)),
                "coupling_hz": _shortened(hz_from_rad_s(coupling)),
                "offset_rad": _shortened(wrap_angle_rad(offset)),
                "start_rad": _shortened(start),
                **values,
            }
        )

    def _with_slopes(self, params: Any, settings: dict[str, Any]) -> dict[str, Any]:
        """Return the settings with exact derivatives for the default method of lmfit.

        Differences of the function are no substitute: near the edge they put the standard
        error of the detuning a hundred times too low.
        """
        tied = params is None or any(par.expr for par in params.values())
        if tied or settings.get("method", "leastsq") != "leastsq":
            return settings
        slopes = {"Dfun": self._slopes, "col_deriv": 0, **(settings.get("fit_kws") or {})}
        return {**settings, "fit_kws": slopes}

    def _slopes(self, params: Any, data: Any, weights: Any, **independent: Any) -> FloatArray:
        """Return the derivatives of the residual by the free parameters, shape (n, free)."""
        names = ("detuning_hz", "coupling_hz", "offset_rad", "start_rad")
        point = np.array([float(params[self.prefix + name].value) for name in names])
        point[:2] *= TURN_RAD
        time_s = np.asarray(independent["time_s"], dtype=float)
        slopes = trajectory_slopes(_equation(point), float(point[3]), time_s)
        # The residual of lmfit since 1.3 is data minus model.
        slopes *= -1.0
        slopes[:, :2] *= TURN_RAD
        slopes[:, 1] *= math.copysign(1.0, point[1])
        if weights is not None:
            slopes *= np.asarray(weights, dtype=float).reshape(-1, 1)
        return np.asarray(slopes[:, [params[self.prefix + name].vary for name in names]])

    def _starts(self, psi: FloatArray, time_s: FloatArray) -> list[FloatArray]:
        """Return starting points (dw, K, psi0, start) of a drifting pair."""
        return [_point(drift, psi) for drift in _drifts(psi, time_s)]


class PullInPhaseModel(DriftingPhaseModel):
    """psi of a pair that pulls in from far off; the same parameters as DriftingPhaseModel.

    Only a start far from rest tells detuning, coupling and offset apart: look at
    ``check_fit``, and use LockedPhaseModel when it names them as not separable.
    """

    def _starts(self, psi: FloatArray, time_s: FloatArray) -> list[FloatArray]:
        """Return starting points around the rest angle beside those of a drifting pair."""
        rest = float(np.mean(psi[-max(psi.size // 8, 1) :]))
        rate = _pull_in_rate(psi, time_s, rest)
        points = super()._starts(psi, time_s)
        for lag in (0.0, 0.6, -0.6):
            coupling = rate / math.cos(lag)
            points.append(np.array([coupling * math.sin(lag), coupling, rest - lag, float(psi[0])]))
        return points


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


def _drifts(psi: FloatArray, time_s: FloatArray) -> list[FloatArray]:
    """Return candidates of (dw, a, b) in rad/s from an evenly spaced version of the record."""
    even = np.linspace(time_s[0], time_s[-1], min(psi.size, GUESS_SAMPLES))
    record = PsiSeries(
        step_s=float(even[1] - even[0]),
        segments=(np.interp(even, time_s, psi),),
        start_s=(float(even[0]),),
    )
    found = [weak_form(record, lag) for lag in (1, 4) if psi.size > lag + 8]
    found.append(_from_speed(record))
    return [drift for drift in found if np.all(np.isfinite(drift))]


def _point(drift: FloatArray, psi: FloatArray) -> FloatArray:
    """Return (dw, K, psi0, start) of (dw, a, b)."""
    coupling, offset = math.hypot(drift[1], drift[2]), math.atan2(drift[1], -drift[2])
    return np.array([float(drift[0]), coupling, offset, float(psi[0])])


def _settled(psi: FloatArray, time_s: FloatArray, starts: list[FloatArray]) -> FloatArray:
    """Return the best point that least squares with exact derivatives reaches."""
    kept = np.unique(np.linspace(0, psi.size - 1, min(psi.size, GUESS_SAMPLES)).astype(int))
    seen, at = psi[kept], time_s[kept] - time_s[0]

    def away(point: FloatArray) -> FloatArray:
        return np.asarray(trajectory(_equation(point), float(point[3]), at) - seen)

    def slopes(point: FloatArray) -> FloatArray:
        found = trajectory_slopes(_equation(point), float(point[3]), at)
        found[:, 1] *= math.copysign(1.0, point[1])
        return np.asarray(found)

    fits = [least_squares(away, start, jac=slopes, method="lm", max_nfev=200) for start in starts]
    best = np.asarray(min(fits, key=lambda fit: float(fit.cost)).x, dtype=np.float64)
    equation = _equation(best)
    return np.array(
        [equation.detuning_rad_s, equation.coupling_rad_s, equation.offset_rad, float(best[3])]
    )


def _shortened(value: float) -> float:
    """Return the value to five digits, all that a start needs."""
    return float(f"{value:.5g}")


def _equation(point: FloatArray) -> PhaseEquation:
    """Return the equation of (dw, K, psi0, start); a negative K turns the offset."""
    return PhaseEquation(
        detuning_rad_s=float(point[0]),
        coupling_rad_s=abs(float(point[1])),
        offset_rad=float(point[2]) + (math.pi if point[1] < 0.0 else 0.0),
    )


def _from_speed(record: PsiSeries) -> FloatArray:
    """Return (dw, a, b) from the fastest and slowest motion and where psi is fastest."""
    psi = record.segments[0]
    speed = np.gradient(psi, record.step_s)
    low, high = (float(value) for value in np.quantile(speed, (0.02, 0.98)))
    detuning, coupling = 0.5 * (low + high), 0.5 * (high - low)
    extreme = np.argmax(speed) if detuning >= 0.0 else np.argmin(speed)
    # Fastest forward where sin(psi - psi0) = -1, fastest backward where it is 1.
    offset = float(psi[extreme]) + math.copysign(0.5 * math.pi, detuning)
    return np.array([detuning, coupling * math.sin(offset), -coupling * math.cos(offset)])


def _pull_in_rate(psi: FloatArray, time_s: FloatArray, rest: float) -> float:
    """Return the rate (1/s) at which psi comes to rest, at least one over the record."""
    away = np.abs(psi - rest)
    least = 1.0 / float(time_s[-1] - time_s[0])
    if away[0] > 6.0 * float(np.std(psi[psi.size // 2 :])):
        below = np.flatnonzero(away < away[0] / math.e)
        if below.size and below[0] > 0:
            return max(1.0 / float(time_s[below[0]] - time_s[0]), least)
    even = median(np.diff(time_s))
    return max(relaxation(psi - rest, even)[0], least)


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
