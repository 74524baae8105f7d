"""What speaks against a least-squares result, whatever its own success flag says.

Works on results of lmfit without importing it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np

from rig.arrays import FloatArray

# Two parameters count as told apart by nothing but noise when their correlation is beyond
# this and one of them has an error above half its size. Detuning and coupling of a drifting
# pair are correlated by more than that and yet both well known.
DEGENERATE = 0.999
LARGE_ERROR = 0.5
# Factor by correlated residuals beyond which a least-squares fit describes nothing.
LARGEST_FACTOR = 3.0
# A parameter within this many of its standard errors of a bound counts as at the bound.
NEAR_BOUND = 2.0
# Fall of chi-square, in units of its mean per sample, by which a better point shows itself.
MEANT_FALL = 0.1


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
        if par.init_value is not None and par.value == par.init_value and _stuck(result, par):
            problems.append(f"{par.name} did not move from its start {par.value:g}")
    problems.extend(_degenerate_pairs(free))
    problems.extend(_residual_problems(result))
    if factor > LARGEST_FACTOR:
        problems.append(
            f"residuals follow a pattern (factor {factor:.1f}): noise drives the phase, or the "
            "curve is not that of the record"
        )
    u = tuple((par.name, None if not par.stderr else factor * float(par.stderr)) for par in free)
    return FitCheck(sound=not problems, problems=tuple(problems), factor=factor, u=u)


def _parameter_problems(par: Any) -> list[str]:
    """Return what is wrong with one parameter."""
    found = []
    for side, bound in (("lower", par.min), ("upper", par.max)):
        reach = NEAR_BOUND * (par.stderr or 0.0) + 1e-6 * max(abs(bound), 1e-9)
        if math.isfinite(bound) and abs(par.value - bound) <= reach:
            found.append(f"{par.name} stands at its {side} bound {bound:g}: its error is not valid")
    if not par.stderr or not math.isfinite(par.stderr):
        found.append(f"{par.name} has no standard error: no influence, or data without noise")
    return found


def _stuck(result: Any, par: Any) -> bool:
    """Say whether the sum of squares falls when a parameter that did not move is moved."""
    if not hasattr(result, "eval"):
        return True
    reach = max(par.stderr or 0.0, 1e-4 * abs(par.value), 1e-6)
    data, weights = np.asarray(result.data), getattr(result, "weights", None)
    for side in (-reach, reach):
        moved = result.params.copy()
        moved[par.name].set(value=par.value + side, min=-np.inf, max=np.inf)
        away = (result.eval(params=moved) - data) * (1.0 if weights is None else weights)
        if float(np.sum(away**2)) < float(result.chisqr) - MEANT_FALL * float(result.redchi):
            return True
    return False


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
