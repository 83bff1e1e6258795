"""Textbook saturation laws against their closed forms."""

import numpy as np
import pytest
from scipy.optimize import brentq

from runner.extraction.laws import LAWS, PRIOR_MEAN

BY_NAME = {law.name: law for law in LAWS}


def drop_at(law, shape, drop):
    parameters = np.array([0.0, 0.0, 0.0, np.log(shape)])[: law.parameters]
    return brentq(
        lambda x: float(law.inductance(np.array([x]), parameters)[0]) - (1 - drop), 1e-4, 20.0, xtol=1e-12
    )


@pytest.mark.parametrize(
    ("name", "shape", "x"),
    [
        ("hyperbolic", 1.0, (0.3274502, 0.4812118, 0.6151220)),
        ("Frölich", 1.0, (0.0540926, 0.1180340, 0.1952286)),
        ("limiter", 1.0, (0.0540926, 0.1180340, 0.1952286)),  # sharpness 1 is Frölich's law
        ("arctangent", 1.0, (0.3333333, 0.5000000, 0.6546537)),
        ("catalogue", 2.0, (0.3333333, 0.5000000, 0.6546537)),  # exponent 2 is the arctangent law
        ("langevin", 1.0, (0.7372694, 1.0924232, 1.4105035)),
    ],
)
def test_where_the_differential_inductance_has_fallen(name, shape, x):
    found = [drop_at(BY_NAME[name], shape, drop) for drop in (0.1, 0.2, 0.3)]
    assert found == pytest.approx(x, abs=1e-6)


def test_langevin_slope_is_a_third_at_zero():
    """L'(0) = 1/3, L'(1) = 0.2759383390, L'(3) = 0.1011467653; ours is three times that."""
    x = np.array([0.0, 0.1, 1.0, 3.0])
    parameters = np.zeros(3)
    expected = 3 * np.array([1 / 3, 0.3326677234, 0.2759383390, 0.1011467653])
    assert BY_NAME["langevin"].inductance(x, parameters) == pytest.approx(expected, rel=1e-8)


@pytest.mark.parametrize("law", LAWS, ids=lambda law: law.name)
def test_every_law_starts_at_its_initial_inductance_and_falls(law):
    x = np.linspace(0.0, 5.0, 400)
    parameters = PRIOR_MEAN[: law.parameters].copy()
    inductance = law.inductance(x, parameters)
    assert inductance[0] == pytest.approx(1.0, abs=1e-9)
    assert np.all(np.diff(inductance) <= 1e-12)
    assert inductance[-1] >= 0.05 - 1e-9  # the floor


@pytest.mark.parametrize("law", LAWS, ids=lambda law: law.name)
def test_slopes_are_derivatives(law):
    """Against a complex-free five-point formula of another step."""
    x = np.linspace(0.0, 2.0, 50)
    parameters = PRIOR_MEAN[: law.parameters].copy()
    slopes = law.slopes(x, parameters)
    for j in range(law.parameters):
        e = np.zeros(law.parameters)
        e[j] = 1e-3
        five = (
            law.inductance(x, parameters - 2 * e)
            - 8 * law.inductance(x, parameters - e)
            + 8 * law.inductance(x, parameters + e)
            - law.inductance(x, parameters + 2 * e)
        ) / 12e-3
        assert slopes[:, j] == pytest.approx(five, abs=1e-6)
