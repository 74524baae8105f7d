"""Couplings of a mutual pair used to run for minutes on phases that jump by hundreds of turns."""

from __future__ import annotations

import numpy as np

from fit.difference import Order
from fit.mutual import estimate_mutual
from fit.records import PsiSeries
from rig.phases.track import PhaseTrack
from rig.quantities import Quantity


def wild_track(name: str, seed: int) -> PhaseTrack:
    """A track whose phase jumps by up to 1000 rad a sample."""
    phase = np.cumsum(np.random.default_rng(seed).uniform(-1000, 1000, 400))
    return PhaseTrack(
        channel=name,
        unit="V",
        method="analytic",
        start_s=0.0,
        rate_hz=10.0,
        phase_rad=phase,
        amplitude=np.ones(400),
        valid=np.ones(400, dtype=bool),
        u_rad=np.full(400, 0.01),
        frequency_hz=Quantity(value=1.0, u=0.1, unit="Hz"),
        amplitude_mean=Quantity(value=1.0, u=0.1, unit="V"),
        snr_db=40.0,
        band_hz=None,
        smear_s=0.1,
        samples_per_cycle=10.0,
    )


def test_wild_phases_are_refused_at_once_with_the_step_that_cannot_be_followed() -> None:
    """The reason names the step, so that a person looks at the channel and not at the model."""
    reference, driven = wild_track("1", 1), wild_track("2", 2)
    psi = driven.phase_rad - reference.phase_rad
    series = PsiSeries(step_s=0.1, segments=(psi,), start_s=(0.0,))
    found = estimate_mutual(reference, driven, Order(), series)
    reasons = [part.reason or "" for part in (found.on_driven_hz, found.on_reference_hz)]
    assert all("rad a sample" in reason for reason in reasons)
