"""Phase differences for tests: plain records, and psi simulated step by step.

The simulations share no formula with what they test: free pairs are sums of normal steps,
pulled pairs are integrated by Euler's rule with substeps.
"""

from __future__ import annotations

import math

import numpy as np

from fit.difference import Order, PhaseDifference
from fit.episodes import EpisodeRules, find_episodes
from fit.holdtime import choose_hold
from fit.records import Baseline
from fit.slips import find_slips
from fit.state import decide_state
from rig.phases.track import PhaseTrack
from rig.quantities import Quantity


def difference(psi_rad, rate_hz, *, order=(1, 1), hz=(37.0, 37.0), u_rad=1e-3, smear_s=0.0):
    """Return psi as a record; NaN marks samples that are not valid."""
    psi_rad = np.asarray(psi_rad, dtype=float)
    return PhaseDifference(
        order=Order(n=order[0], m=order[1]),
        start_s=0.0,
        rate_hz=rate_hz,
        psi_rad=psi_rad,
        valid=np.isfinite(psi_rad),
        u_rad=np.full(psi_rad.shape, u_rad),
        cycle_rate_hz=min(hz),
        driven_frequency_hz=hz[0],
        reference_frequency_hz=hz[1],
        smear_s=smear_s,
    )


def track(phase_rad, rate_hz, name="a", **changes):
    """Return an unwrapped phase as a track; NaN marks samples that are not valid."""
    phase_rad = np.asarray(phase_rad, dtype=float)
    valid = np.isfinite(phase_rad)
    at = np.flatnonzero(valid)
    hz = (phase_rad[at[-1]] - phase_rad[at[0]]) / (at[-1] - at[0]) * rate_hz / (2 * math.pi)
    fields = {
        "channel": name,
        "unit": "V",
        "method": "marker",
        "start_s": 0.0,
        "rate_hz": rate_hz,
        "phase_rad": phase_rad,
        "amplitude": np.ones(phase_rad.size),
        "valid": valid,
        "u_rad": np.full(phase_rad.size, 1e-3),
        "frequency_hz": Quantity(value=float(hz), u=1e-4, unit="Hz"),
        "amplitude_mean": Quantity(value=1.0, u=0.0, unit="V"),
        "snr_db": None,
        "band_hz": None,
        "smear_s": 0.0,
        "samples_per_cycle": rate_hz / abs(hz),
    }
    return PhaseTrack(**(fields | changes))


def free_psi(rng, *, drift_rad_s, noise_rad2_s, step_s, count, sigma_rad=0.0):
    """Return psi of two free oscillators: drift, diffusion, measurement noise."""
    steps = drift_rad_s * step_s + math.sqrt(2 * noise_rad2_s * step_s) * rng.standard_normal(count)
    return rng.uniform(0, 2 * math.pi) + np.cumsum(steps) + sigma_rad * rng.standard_normal(count)


def pulled_psi(rng, *, drift_rad_s, coupling_rad_s, noise_rad2_s, step_s, count, start_rad=None):
    """Return psi of a pulled pair by Euler's rule, substeps below a twentieth of 1/K."""
    parts = max(4, math.ceil(20 * (coupling_rad_s + abs(drift_rad_s)) * step_s))
    step = step_s / parts
    kicks = math.sqrt(2 * noise_rad2_s * step) * rng.standard_normal((count, parts))
    if start_rad is None:
        start_rad = math.asin(max(-1.0, min(1.0, drift_rad_s / coupling_rad_s)))
    psi, out = start_rad, np.empty(count)
    for k in range(count):
        out[k] = psi
        for kick in kicks[k]:
            psi += (drift_rad_s - coupling_rad_s * math.sin(psi)) * step + kick
    return out


def measured_baseline(rng, *, drift_rad_s, noise_rad2_s, sigma_rad, duration_s, freedom=20):
    """Return a baseline as captures of the free pair of that length would give it."""
    scale = math.sqrt(2 / duration_s)
    true_u = math.hypot(math.sqrt(noise_rad2_s) * scale, math.sqrt(2) * sigma_rad / duration_s)
    noise = noise_rad2_s * rng.chisquare(freedom) / freedom
    u = math.hypot(math.sqrt(noise) * scale, math.sqrt(2) * sigma_rad / duration_s)
    detuning = drift_rad_s + true_u * rng.standard_normal()
    return Baseline(
        detuning_hz=Quantity(value=detuning / 2 / math.pi, u=u / 2 / math.pi, unit="Hz"),
        noise_rad2_s=Quantity(value=noise, u=noise * math.sqrt(2 / freedom), unit="rad2/s"),
        source="simulated captures",
    )


def judge(record, *, rules=None, baseline=None, orders_tried=1):
    """Return (decision, episodes, slips, hold) as the analysis of a record goes."""
    rules = rules or EpisodeRules()
    slips = find_slips(record)
    hold = choose_hold(record, slips, rules, baseline=baseline, orders_tried=orders_tried)
    episodes = find_episodes(record, rules, hold.hold_s)
    decision = decide_state(
        record,
        episodes,
        slips,
        rules=rules,
        hold=hold,
        baseline=baseline,
        orders_tried=orders_tried,
    )
    return decision, episodes, slips, hold


def exact_unions(psi_rad, band_rad, window):
    """Return the unions of all maximal windows, by trying every window (slow, obvious)."""
    spans = []
    for a in range(psi_rad.size):
        b = a + 1
        while b <= psi_rad.size and np.ptp(psi_rad[a:b]) < band_rad:
            b += 1
        if b - 1 - a >= window:
            spans.append((a, b - 1))
    unions = []
    for a, b in spans:
        if unions and a < unions[-1][1]:
            unions[-1] = (unions[-1][0], max(b, unions[-1][1]))
        else:
            unions.append((a, b))
    return unions
