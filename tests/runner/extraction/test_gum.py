"""The worked examples of the GUM through the functions that combine our own uncertainties.

Sources: JCGM 100:2008 Annex H (inputs and published results, from memory and recomputed), its table
G.2, ISO 16269-6 for the tolerance factors.
"""

import numpy as np
import pytest

from runner.extraction.gum import (
    combine,
    correlation,
    coverage_factor,
    effective_degrees_of_freedom,
    mean_and_covariance,
    propagate,
    second_order,
    sensitivities,
    straight_line,
    tolerance_factor,
)

# H.1, end gauge: standard uncertainties [nm] and degrees of freedom. d is itself combined of three.
D = ((5.8, 24), (3.9, 5), (6.7, 8))
STANDARD, DIFFERENCE_ALPHA, DIFFERENCE_THETA = (25.0, 18), (2.9, 50), (16.6, 2)


def test_end_gauge_combined_uncertainty_and_effective_degrees_of_freedom():
    d = combine(u for u, _ in D)
    assert d == pytest.approx(9.7, abs=0.05)
    # Published as 25.6 from the rounded 9.7 nm; unrounded it is 25.45.
    assert effective_degrees_of_freedom([u for u, _ in D], [nu for _, nu in D]) == pytest.approx(
        25.6, abs=0.2
    )
    parts = [STANDARD, (d, 25.6), DIFFERENCE_ALPHA, DIFFERENCE_THETA]
    u = combine(u for u, _ in parts)
    nu = effective_degrees_of_freedom([u for u, _ in parts], [nu for _, nu in parts])
    assert u == pytest.approx(32, abs=1)
    assert int(nu) == 16
    assert coverage_factor(0.99, 16) == pytest.approx(2.92, abs=0.005)
    assert coverage_factor(0.99, 16) * u == pytest.approx(93, abs=1)


def test_end_gauge_second_order_terms():
    """l = l_s(1 − δα·θ − α_s·δθ), second derivatives −l_s: 11.7 nm from δα·θ, 1.7 nm from α_s·δθ; u becomes 34 nm.

    GUM H.1.7: l_s u(δα) u(θ) with u(δα) = 0.58e-6/K, u(θ) = 0.41 K and u(α_s) = 1.2e-6/K, u(δθ) = 0.029 K; here on a
    length of 50.000623 mm.
    """
    length = 50.000623e6  # nm
    u = np.array([0.58e-6, 0.41, 1.2e-6, 0.029])
    hessian = np.zeros((4, 4))
    hessian[0, 1] = hessian[1, 0] = hessian[2, 3] = hessian[3, 2] = -length
    extra = second_order(hessian, np.zeros((4, 4)), np.zeros(4), u)
    assert np.sqrt(extra) == pytest.approx(np.hypot(11.7, 1.7), abs=0.3)
    assert combine([31.67, np.sqrt(extra)]) == pytest.approx(34, abs=1)


def test_simultaneous_resistance_and_reactance():
    volts = [5.007, 4.994, 5.005, 4.990, 4.999]
    amperes = [19.663e-3, 19.639e-3, 19.640e-3, 19.685e-3, 19.678e-3]
    radians = [1.0456, 1.0438, 1.0468, 1.0428, 1.0433]
    mean, covariance = mean_and_covariance(np.column_stack([volts, amperes, radians]))
    r = correlation(covariance)
    assert (r[0, 1], r[0, 2], r[1, 2]) == pytest.approx((-0.36, 0.86, -0.65), abs=0.006)

    def impedance(x):
        v, i, phi = x
        return np.array([v / i * np.cos(phi), v / i * np.sin(phi), v / i])

    slopes = sensitivities(impedance, mean, np.sqrt(np.diag(covariance)))
    out = propagate(slopes, covariance)
    assert impedance(mean) == pytest.approx([127.732, 219.847, 254.260], abs=0.001)
    assert np.sqrt(np.diag(out)) == pytest.approx([0.071, 0.295, 0.236], abs=0.001)
    r = correlation(out)
    assert (r[0, 1], r[0, 2], r[1, 2]) == pytest.approx((-0.588, -0.485, 0.993), abs=0.001)


def test_thermometer_calibration_line():
    t = np.array([21.521, 22.012, 22.512, 23.003, 23.507, 23.999, 24.513, 25.002, 25.503, 26.010, 26.511])
    b = -np.array([0.171, 0.169, 0.166, 0.159, 0.164, 0.165, 0.156, 0.157, 0.159, 0.161, 0.160])
    line, covariance, scatter = straight_line(t, b, origin=20.0)
    assert line == pytest.approx([-0.1712, 0.00218], abs=5e-5)
    assert np.sqrt(np.diag(covariance)) == pytest.approx([0.0029, 0.00067], abs=5e-5)
    assert correlation(covariance)[0, 1] == pytest.approx(-0.930, abs=0.001)
    assert scatter == pytest.approx(0.0035, abs=5e-5)
    at_30 = np.array([[1.0, 10.0]])
    assert (at_30 @ line)[0] == pytest.approx(-0.1494, abs=5e-5)
    assert np.sqrt(propagate(at_30, covariance)[0, 0]) == pytest.approx(0.0041, abs=5e-5)


@pytest.mark.parametrize(
    ("coverage", "degrees", "expected"),
    [
        (0.6827, 1, 1.84), (0.6827, 10, 1.05), (0.6827, np.inf, 1.000),
        (0.95, 1, 12.71), (0.95, 2, 4.30), (0.95, 5, 2.57), (0.95, 16, 2.12), (0.95, 50, 2.01), (0.95, np.inf, 1.960),
        (0.9545, 8, 2.37), (0.9545, np.inf, 2.000),
        (0.99, 4, 4.60), (0.99, 30, 2.75), (0.99, np.inf, 2.576),
    ],
)  # fmt: skip
def test_coverage_factors_of_table_g2(coverage, degrees, expected):
    assert coverage_factor(coverage, degrees) == pytest.approx(expected, abs=0.0051)


@pytest.mark.parametrize(
    ("count", "content", "expected"),
    [
        (5, 0.95, 4.203),
        (10, 0.95, 2.911),
        (20, 0.95, 2.396),
        (30, 0.95, 2.220),
        (5, 0.90, 3.4066),
        (100, 0.99, 2.6840),
    ],
)
def test_one_sided_tolerance_factors(count, content, expected):
    """95 % confidence; first four as printed in ISO 16269-6, the others recomputed from the non-central t."""
    assert tolerance_factor(count, content, 0.95) == pytest.approx(expected, abs=0.001)
