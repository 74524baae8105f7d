"""Propagation of uncertainty against the worked examples of the GUM."""

from __future__ import annotations

import math

import numpy as np
import pytest

from reports.budget import combined_u

# Source: JCGM 100:2008 (GUM), annex H.2, simultaneous resistance and reactance
# Read: secondary (test suites of two open programs quote data and results)
# Printed: R = 127.732(71), X = 219.847(295), Z = 254.260(236) ohm
# Converted: current in mA to A
# Tolerance: half a unit of the last printed digit
VOLT = np.array([5.007, 4.994, 5.005, 4.990, 4.999])
AMPERE = np.array([19.663, 19.639, 19.640, 19.685, 19.678]) * 1e-3
PHASE = np.array([1.0456, 1.0438, 1.0468, 1.0428, 1.0433])


def combine(sensitivities):
    """Combined uncertainty of a function of the three means, correlations included."""
    data = np.array([VOLT, AMPERE, PHASE])
    u = data.std(axis=1, ddof=1) / math.sqrt(5)
    r = np.corrcoef(data)
    pairs = {(i, j): float(r[i, j]) for i in range(3) for j in range(i + 1, 3)}
    return combined_u([float(c * s) for c, s in zip(sensitivities, u, strict=True)], pairs)


@pytest.mark.parametrize(
    ("name", "value", "value_tol", "u"),
    [
        ("R", 127.732, 0.0005, 0.071),
        ("X", 219.847, 0.0005, 0.295),
        ("Z", 254.260, 0.0005, 0.236),
    ],
)
def test_resistance_reactance_and_impedance_are_met(name, value, value_tol, u):
    """Correlated inputs: leaving the correlation out would give 0.195 ohm for R."""
    v, i, phi = VOLT.mean(), AMPERE.mean(), PHASE.mean()
    z = v / i
    found, sensitivities = {
        "R": (z * math.cos(phi), (math.cos(phi) / i, -z * math.cos(phi) / i, -z * math.sin(phi))),
        "X": (z * math.sin(phi), (math.sin(phi) / i, -z * math.sin(phi) / i, z * math.cos(phi))),
        "Z": (z, (1 / i, -z / i, 0.0)),
    }[name]
    assert found == pytest.approx(value, abs=value_tol)
    # the printed 0.295 is cut, not rounded: recomputed 0.29558
    assert combine(sensitivities) == pytest.approx(u, abs=0.0006)


def test_independent_inputs_would_give_another_uncertainty():
    """The trap of the example: 0.1945 ohm instead of 0.071."""
    v, i, phi = VOLT.mean(), AMPERE.mean(), PHASE.mean()
    z = v / i
    u = np.array([VOLT, AMPERE, PHASE]).std(axis=1, ddof=1) / math.sqrt(5)
    parts = [math.cos(phi) / i * u[0], -z * math.cos(phi) / i * u[1], -z * math.sin(phi) * u[2]]
    assert combined_u([float(part) for part in parts]) == pytest.approx(0.1945, abs=0.00005)


# Source: JCGM 100:2008 (GUM), annex H.3, calibration of a thermometer
# Read: secondary (documentation of an open program quotes data and results)
# Printed: b(30) = -0.1494(41) deg C from y1 = -0.1712(29), y2 = 0.00218(67), r = -0.930
# Converted: nothing
# Tolerance: half a unit of the last printed digit
def test_the_predicted_correction_of_the_thermometer_is_met():
    """Intercept and slope are strongly correlated; the prediction needs it."""
    y1, u1, y2, u2, r = -0.1712, 0.0029, 0.00218, 0.00067, -0.930
    assert y1 + 10 * y2 == pytest.approx(-0.1494, abs=0.0005)
    assert combined_u([u1, 10 * u2], {(0, 1): r}) == pytest.approx(0.0041, abs=0.0001)


def test_the_thermometer_line_fitted_from_its_data_gives_the_same_uncertainty():
    """A second route: the eleven pairs fitted here, no printed intermediate used."""
    t = np.array(
        [21.521, 22.012, 22.512, 23.003, 23.507, 23.999, 24.513, 25.002, 25.503, 26.010, 26.511]
    )
    b = np.array(
        [-0.171, -0.169, -0.166, -0.159, -0.164, -0.165, -0.156, -0.157, -0.159, -0.161, -0.160]
    )
    design = np.column_stack([np.ones_like(t), t - 20.0])
    fitted, squares, *_ = np.linalg.lstsq(design, b, rcond=None)
    covariance = np.linalg.inv(design.T @ design) * float(squares[0]) / (t.size - 2)
    u = np.sqrt(np.diag(covariance))
    r = float(covariance[0, 1] / (u[0] * u[1]))
    assert fitted @ [1.0, 10.0] == pytest.approx(-0.14937681, abs=1e-8)
    assert combined_u([float(u[0]), float(10 * u[1])], {(0, 1): r}) == pytest.approx(
        0.00413860, abs=1e-8
    )
