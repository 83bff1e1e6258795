"""The winding as a thermometer of its own, against a copper winding whose temperatures are known."""

import numpy as np
import pytest

from runner.extraction.bias_heat import follow_heat

SEED = 81
CURRENT = np.concatenate([np.linspace(0.0, 8.0, 17), np.linspace(7.5, 0.0, 16)])
RATED = 5.0


def winding(theta, *, sensor=25.0, noise=1e-5, ohm_20=0.02):
    """Readings of a winding that stands θ·I²R above its sensor; alpha of copper 0.00393 1/K at 20 degC (IEC 60028)."""
    rng = np.random.default_rng(SEED)
    degC = np.full(len(CURRENT), sensor)
    for _ in range(50):  # its resistance makes the heat, the heat makes its resistance
        ohm = ohm_20 * (1 + 0.00393 * (degC - 20.0))
        degC = sensor + theta * CURRENT**2 * ohm
    with np.errstate(divide="ignore", invalid="ignore"):
        read = ohm + noise * rng.standard_normal(len(CURRENT)) / CURRENT
    return np.where(CURRENT > 0, read, np.nan), degC


def follow(read, sensor=25.0):
    return follow_heat(CURRENT, read, np.full(len(CURRENT), sensor), rated=RATED)


@pytest.mark.parametrize("sensor", [-40.0, 25.0, 125.0])
@pytest.mark.parametrize("theta", [2.0, 8.0])
def test_the_thermal_resistance_is_found_within_its_uncertainty(theta, sensor):
    read, _ = winding(theta, sensor=sensor)
    heat = follow(read, sensor)
    assert heat.kelvin_per_watt == pytest.approx(theta, abs=3 * heat.uncertainty)
    assert heat.uncertainty < 0.05 * theta


def test_the_part_lies_between_sensor_and_winding_and_says_how_unsure_that_is():
    read, degC = winding(8.0)
    heat = follow(read)
    above = degC - 25.0  # of the winding
    np.testing.assert_allclose(heat.rise, above / 2, atol=0.02 * above.max())
    # Anywhere between them, equally likely: half the width over the root of three (GUM 4.3.7).
    np.testing.assert_allclose(heat.rise_uncertainty[above > 1], above[above > 1] / np.sqrt(12), rtol=0.05)


def test_a_winding_as_warm_as_its_sensor_gets_nothing_added():
    read, _ = winding(0.0)
    heat = follow(read)
    assert not heat.rise.any()
    assert abs(heat.kelvin_per_watt) < 3 * heat.uncertainty


def test_a_body_that_warms_with_its_winding_is_no_difference():
    """Sensor and winding both climb by 6 K during the series: the sensor tells it, and nothing is added twice."""
    sensor = 25.0 + np.linspace(0.0, 6.0, len(CURRENT))
    rng = np.random.default_rng(SEED)
    read = 0.02 * (1 + 0.00393 * (sensor - 20.0)) + 1e-5 * rng.standard_normal(len(CURRENT))
    heat = follow_heat(CURRENT, read, sensor, rated=RATED)
    assert not heat.rise.any()


def test_small_currents_and_missing_readings_are_not_asked():
    read, _ = winding(8.0)
    wild = np.where(CURRENT <= 0.2 * RATED, 5.0, read)
    assert follow(wild).kelvin_per_watt == follow(read).kelvin_per_watt
    few = np.where(CURRENT > 7.4, read, np.nan)
    heat = follow(few)
    assert np.isnan(heat.kelvin_per_watt)
    assert not heat.rise.any()
