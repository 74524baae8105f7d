"""Mean rates and slips of simulated noisy pairs, as measured, against the exact laws (C1 - C5)."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.rates import mean_rate
from fit.slips import find_slips, slip_rate

TURN = 2.0 * math.pi
STEP_S = 0.2


def simulated(truth, rng, dw, noise, records, span_s):
    """psi of many records, K = 1 rad/s, without measurement noise."""
    pair = truth.Pair(detuning=dw, offset=0.0, diffusion=noise, noise=0.0)
    # The first 50 s let each record forget where it began.
    lead = round(50.0 / STEP_S)
    return truth.simulate_psi(pair, (records, round(span_s / STEP_S) + lead), STEP_S, rng)[:, lead:]


@pytest.mark.parametrize(
    ("dw", "noise", "rate", "diffusion"),
    [
        (1.25, 0.1, 0.774091029633, 0.293676169404),
        (1.0, 0.1, 0.368953245762, 0.411129935320),
        (0.9, 0.5, 0.519803667408, 0.762219727422),
        (2.0, 0.1, 1.73338790834, 0.149034153648),
    ],
)
def test_mean_rates_and_their_scatter_are_those_of_the_exact_law(
    psi_tools, truth, rng, dw, noise, rate, diffusion
):
    """Rate by drift and noise together; its u by the long-time diffusion, not by D."""
    # Source: Stratonovich 1967, vol. 2, ch. 9 (rate); Reimann et al. 2001, PRL 87, 010602 (D_eff)
    # Read: recalled; both computed by several roads (fixtures/README.md, noisy_adler)
    # Printed: v/K and D_eff/K as above, 12 digits
    # Converted: rad/s to Hz by 2 pi
    # Tolerance: 4 standard errors of 60 records; their scatter is known to 9 %: 4 of that
    span_s, records = 400.0, 60
    psi = simulated(truth, rng, dw, noise, records, span_s)
    found = [mean_rate(psi_tools.difference(row, 1.0 / STEP_S)) for row in psi]
    values = np.array([one.value for one in found]) * TURN
    scatter = math.sqrt(2.0 * diffusion / span_s)
    assert values.mean() == pytest.approx(rate, abs=4.0 * scatter / math.sqrt(records))
    assert values.std(ddof=1) == pytest.approx(scatter, rel=4.0 / math.sqrt(2.0 * (records - 1)))
    stated = np.mean([one.u for one in found]) * TURN
    assert stated == pytest.approx(scatter, rel=0.25)


def test_slips_below_the_edge_are_counted_as_the_exact_law_has_them(psi_tools, truth, rng):
    """Rare slips decide whether a pair may be called locked: neither more nor fewer."""
    # Source: Ambegaokar and Halperin 1969, PRL 22, 1364; Kramers 1940 (below the edge)
    # Read: recalled; computed (noisy_adler, kramers_slip)
    # Printed: dw = K/2, D = 0.2 K: v/K = 0.0248338899392; the escape law gives 0.0282091899665
    # Converted: net slips a second v/2 pi
    # Tolerance: 4 standard errors of a Poisson count of some 790, backward slips e^(-pi 2.5)
    records, span_s = 200, 1000.0
    psi = simulated(truth, rng, 0.5, 0.2, records, span_s)
    net, forward = 0, 0
    for row in psi:
        slips = find_slips(psi_tools.difference(row, 1.0 / STEP_S))
        net += sum(slip.turns for slip in slips)
        forward += sum(slip.turns for slip in slips if slip.turns > 0)
    expected = 0.0248338899392 / TURN * records * span_s
    assert net == pytest.approx(expected, abs=4.0 * math.sqrt(expected))
    assert net < 0.0282091899665 / TURN * records * span_s
    # Counting crossings of a boundary would find many more forth and back.
    assert forward - net <= 0.02 * forward


def test_slips_of_a_pair_without_detuning_go_both_ways_as_often(psi_tools, truth, rng):
    """A first-order loop in noise: the rate of cycle slips that receivers are specified by."""
    # Source: Viterbi 1963, Proc. IEEE 51, 1737: total slip rate D / (2 pi^2 I0(K/D)^2)
    # Read: recalled; identical with D_eff of a hopping pair
    # Printed: K/D = 4: 0.000396611818296 D
    # Converted: D = 0.25 rad2/s
    # Tolerance: 4 standard errors of a Poisson count of some 60 by slips that are independent
    records, span_s = 300, 2000.0
    psi = simulated(truth, rng, 0.0, 0.25, records, span_s)
    counts = np.zeros(2)
    rates = []
    for row in psi:
        record = psi_tools.difference(row, 1.0 / STEP_S)
        slips = find_slips(record)
        rates.append(slip_rate(record, slips).value)
        for slip in slips:
            counts[int(slip.turns > 0)] += abs(slip.turns)
    expected = 0.000396611818296 * 0.25 * records * span_s
    assert counts.sum() == pytest.approx(expected, abs=4.0 * math.sqrt(expected))
    assert np.mean(rates) * records * span_s == pytest.approx(counts.sum(), rel=1e-9)
    assert abs(counts[0] - counts[1]) <= 4.0 * math.sqrt(expected)
