"""Indices of phase synchronisation, each with what a free pair would show.

An index alone says nothing: an unlocked pair just outside lock has a resultant length of 0.87,
and a short quiet record of two free oscillators one near 1. So each index stands beside its
mean over free pairs simulated for this record, and the probability that a free pair reaches
it. The state of a record is decided in ``fit.state`` and never by an index.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from fit.circular import bin_count, conditional_index, shannon_index
from fit.difference import PhaseDifference, valid_runs
from fit.episodes import EpisodeRules
from fit.freenull import ThinRecord, assumed_baseline, draw_free_paths, thin_record
from fit.records import Baseline, SyncIndex
from fit.surrogates import FALSE_ALARMS, SURROGATES, surrogate_p
from rig.arrays import FloatArray
from rig.phases.track import PhaseTrack

#: Free pairs simulated for the expectation and the p-value.
FREE_PAIRS = 199

#: Points of the record that the indices use.
INDEX_POINTS = 512

#: Surrogates of each kind: the fewest with which 5 % can be reached in a one-sided test.
SURROGATE_COUNT = 19

#: Fewest samples of the longest stretch for surrogates.
SURROGATE_SAMPLES = 32


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class IndexData:
    """Phase difference of record or simulated pairs with the reference phase beside it."""

    psi_rad: FloatArray
    reference_rad: FloatArray


def sync_indices(
    difference: PhaseDifference,
    driven: PhaseTrack,
    reference: PhaseTrack,
    *,
    baseline: Baseline | None,
    rng: np.random.Generator,
) -> tuple[SyncIndex, ...]:
    """Return the indices of a record with their no-coupling expectation and p-value.

    Parameters
    ----------
    difference : PhaseDifference
    driven, reference : PhaseTrack
        The tracks it was formed from.
    baseline : Baseline or None
        Free detuning and diffusion; without it the default spread of free frequencies and
        the diffusion seen in the record stand in, and the notes say so.
    rng : numpy Generator

    Returns
    -------
    tuple of SyncIndex
        Resultant length, entropy index, conditional-probability index; then the resultant
        length against each kind of surrogate. Empty with fewer than 8 valid samples.
    """
    record = thin_record(difference, INDEX_POINTS)
    if record.psi_rad.size < 8:
        return ()
    known = baseline is not None and baseline.detuning_hz.value is not None
    null = baseline if baseline is not None and known else _assumed(difference)
    free = draw_free_paths(record, null, FREE_PAIRS, rng)
    phase_rad = _reference_at(difference, reference, record)
    seen = IndexData(psi_rad=record.psi_rad[None, :], reference_rad=phase_rad)
    alone = IndexData(psi_rad=free, reference_rad=phase_rad)
    note = f"against {FREE_PAIRS} simulated free pairs" + ("" if known else "; assumes free spread")
    named = tuple(_index(name, make, seen, alone, note) for name, make in INDICES.items())
    return named + _against_surrogates(difference, driven, reference, rng)


def _resultant(data: IndexData) -> FloatArray:
    return np.asarray(np.abs(np.mean(np.exp(1j * data.psi_rad), axis=-1)))


def _entropy(data: IndexData) -> FloatArray:
    return shannon_index(data.psi_rad, bin_count(data.psi_rad.shape[-1]))


def _conditional(data: IndexData) -> FloatArray:
    bins = bin_count(data.psi_rad.shape[-1])
    return conditional_index(data.reference_rad, data.psi_rad + data.reference_rad, bins)


INDICES: dict[str, Callable[[IndexData], FloatArray]] = {
    "resultant length": _resultant,
    "entropy index": _entropy,
    "conditional-probability index": _conditional,
}


def _index(
    name: str,
    make: Callable[[IndexData], FloatArray],
    seen: IndexData,
    alone: IndexData,
    note: str,
) -> SyncIndex:
    """Return one index of the record beside the same index of free pairs."""
    value, free = float(make(seen)[0]), make(alone)
    # Rounding must not make a perfect index rarer than the same perfect one of a free pair.
    reached = int(np.count_nonzero(free >= value - 1e-12))
    return SyncIndex(
        name=name,
        value=value,
        expected_free=float(free.mean()),
        p_value=(1 + reached) / (1 + free.size),
        note=note,
    )


def _assumed(difference: PhaseDifference) -> Baseline:
    """Return the stand-in for free-running captures."""
    return assumed_baseline(difference, EpisodeRules().free_spread)


def _reference_at(
    difference: PhaseDifference, reference: PhaseTrack, record: ThinRecord
) -> FloatArray:
    """Return m times the reference phase at the kept samples, rad."""
    at = np.rint(record.time_s * difference.rate_hz).astype(np.int64)
    return np.asarray(difference.order.m * reference.phase_rad[at])


def _against_surrogates(
    difference: PhaseDifference,
    driven: PhaseTrack,
    reference: PhaseTrack,
    rng: np.random.Generator,
) -> tuple[SyncIndex, ...]:
    """Return the resultant length of the longest stretch against each kind of surrogate."""
    runs = valid_runs(difference.valid)
    start, stop = max(runs, key=lambda run: run[1] - run[0])
    stride = max(1, (stop - start) // INDEX_POINTS)
    if (stop - start) // stride < SURROGATE_SAMPLES:
        return ()
    pair = (driven.phase_rad[start:stop:stride], reference.phase_rad[start:stop:stride])
    weights = (difference.order.n, difference.order.m)
    psi_rad = weights[0] * pair[0] - weights[1] * pair[1]
    length = float(abs(np.mean(np.exp(1j * psi_rad))))
    found = []
    for name in SURROGATES:
        p_value, mean = surrogate_p(pair, weights, name, count=SURROGATE_COUNT, rng=rng)
        found.append(
            SyncIndex(
                name=f"resultant length, {name}",
                value=length,
                expected_free=mean,
                p_value=p_value,
                note=_surrogate_note(name),
            )
        )
    return tuple(found)


def _surrogate_note(name: str) -> str:
    """Say how far a surrogate p-value can be trusted."""
    low, high = FALSE_ALARMS[name]
    return (
        f"{SURROGATE_COUNT} {name} surrogates, seeded; these reject {100 * low:.0f} to "
        f"{100 * high:.0f} % of uncoupled pairs at a nominal 5 %"
    )
