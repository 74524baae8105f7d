"""The curves beside the points: closed forms, and the noisy law against a published equation."""

from __future__ import annotations

import math

import numpy as np
import pytest

from reports.laws import arcsine_law_rad, beat_law_hz, noisy_rate_law_hz
from rig.angles import TURN_RAD


def test_the_beat_law_is_that_of_a_right_triangle() -> None:
    """3-4-5: a detuning of 1.25 and a coupling of 1 beat at exactly 0.75; inside, nothing beats."""
    # Source: closed form of Adler 1946, Proc. IRE 34, 351 (beat frequency)
    # Read: recalled; the triangle is exact arithmetic
    # Printed: 0.75
    # Converted: none
    # Tolerance: rounding of doubles
    found = beat_law_hz(np.array([-1.25, -1.0, 0.3, 1.25]), 1.0)
    assert found == pytest.approx([-0.75, 0.0, 0.0, 0.75], abs=1e-15)


def test_the_locked_phase_turns_by_half_a_turn_over_the_range() -> None:
    """A quarter turn on each side of the offset, and nothing outside."""
    found = arcsine_law_rad(np.array([-1.0, 0.0, 0.6, 1.0, 1.01]), 1.0, 0.2)
    assert found[:4] == pytest.approx(
        [0.2 - math.pi / 2, 0.2, 0.2 + 0.643501108793284, 0.2 + math.pi / 2], abs=1e-12
    )
    assert math.isnan(found[4])


def test_the_noisy_law_agrees_with_the_computed_table(check_tables: dict) -> None:
    """96 rows of the mean rate by imaginary-order Bessel functions, another road altogether."""
    # Source: Stratonovich 1967; Ambegaokar and Halperin 1969, PRL 22, 1364 (mean rate)
    # Read: computed for the project with 160 digits by two methods; formula recalled
    # Printed: 12 significant digits
    # Converted: rad/s to Hz by 2 pi
    # Tolerance: 1e-9 of the coupling; rounding in sums of up to 4000 terms
    for row in check_tables["noisy_adler"]["rows"]:
        law = noisy_rate_law_hz(
            np.array([float(row["dw_over_K"])]) / TURN_RAD, 1.0 / TURN_RAD, float(row["D_over_K"])
        )
        assert law[0] * TURN_RAD == pytest.approx(float(row["v_over_K"]), abs=1e-9)


def test_the_noisy_law_takes_one_noise_a_point() -> None:
    """Residuals of many records are computed in one call."""
    detuning, coupling, noise = np.array([0.4, 0.9]), np.array([0.3, 0.8]), np.array([0.2, 1.5])
    together = noisy_rate_law_hz(detuning, coupling, noise)
    apart = [
        noisy_rate_law_hz(detuning[i : i + 1], float(coupling[i]), float(noise[i]))[0]
        for i in range(2)
    ]
    assert together == pytest.approx(apart, rel=1e-12)
