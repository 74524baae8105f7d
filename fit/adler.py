"""Detuning, coupling, offset and noise of records: the estimator.

Many records go through together: starting points, likelihood fits, interval ends are arrays
over records and lanes. What one record gives does not depend on the others in the call.
How the numbers of one record become quantities, or reasons why there are none, stands in
``fit.adler_record``; the fits in ``fit.adler_fit``, the likelihood in ``fit.likelihood``.
"""

from __future__ import annotations

from collections.abc import Sequence

from fit.adler_fit import AdlerSettings, fit_records
from fit.adler_record import record_estimate, refused_estimate, unusable
from fit.records import AdlerEstimate, Baseline, PsiSeries

__all__ = ["AdlerSettings", "estimate_adler"]


def estimate_adler(
    series: Sequence[PsiSeries],
    *,
    baselines: Sequence[Baseline | None] | None = None,
    settings: AdlerSettings | None = None,
) -> list[AdlerEstimate]:
    """Return the estimate of each record, in order.

    dpsi/dt = 2 pi (detuning_hz - coupling_hz sin(psi - offset_rad)) + noise, fitted by maximum
    likelihood with a Gaussian assumed-density filter; intervals by the likelihood ratio.

    Parameters
    ----------
    series : sequence of PsiSeries
    baselines : sequence of Baseline or None, as many as series, optional
        What free-running captures say of each pair: detuning and D enter as Gaussian priors.
    settings : AdlerSettings, optional

    Returns
    -------
    list of AdlerEstimate
        A quantity that the record cannot determine has value None and a reason. No record,
        however poor, raises.

    Raises
    ------
    ValueError
        If baselines and series differ in number.

    Notes
    -----
    A quantity is given when the standard errors of detuning and coupling are both below a
    fifth of the larger of the two, and, for a pair inside its locking region, when at least
    five slips, a pull-in from far off, or a baseline back it. Coverage of the intervals:
    bench/coverage_adler.md.
    """
    rules = settings or AdlerSettings()
    priors = list(baselines) if baselines is not None else [None] * len(series)
    if len(priors) != len(series):
        raise ValueError(f"estimate_adler: {len(series)} series but {len(priors)} baselines")
    estimates: dict[int, AdlerEstimate] = {}
    kept: list[int] = []
    for index, record in enumerate(series):
        reason = unusable(record, rules.least_samples)
        if reason:
            estimates[index] = refused_estimate(reason, priors[index])
        else:
            kept.append(index)
    if kept:
        fits = fit_records([series[k] for k in kept], [priors[k] for k in kept], rules)
        for index, fit in zip(kept, fits, strict=True):
            estimates[index] = record_estimate(
                series[index], fit, priors[index], trajectory=rules.trajectory
            )
    return [estimates[index] for index in range(len(series))]
