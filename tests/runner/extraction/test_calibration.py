"""Copper, shunt and the winding thermometer against published figures."""

import pytest

from runner.extraction.calibration import (
    Calibration,
    Constant,
    copper_ratio,
    winding_temperature,
    winding_temperature_rise,
)


@pytest.mark.parametrize(
    ("temperature", "ratio"),
    [(-40, 0.764200), (25, 1.019650), (85, 1.255450), (100, 1.314400), (125, 1.412650)],
)
def test_copper_law(temperature, ratio):
    """R(T)/R(20) with 0.00393/K at 20 °C (IEC 60028)."""
    assert copper_ratio(temperature) == pytest.approx(ratio, abs=1e-9)


@pytest.mark.parametrize(("temperature", "milliohm"), [(100.0, 64.4509), (125.0, 69.2678)])
def test_copper_law_from_25_degrees(temperature, milliohm):
    """50 mΩ at 25 °C by the 234.5 rule, which differs from the linear coefficient by at most 8e-5."""
    assert 50 * copper_ratio(temperature, 25.0) == pytest.approx(milliohm, rel=1e-4)


def test_winding_temperature_rise_by_resistance():
    """50 mΩ at 23 °C becomes 60 mΩ at 25 °C ambient: 49.5 K (resistance method of IEC 60335-1 clause 11)."""
    rise = winding_temperature_rise(0.050, 0.060, cold_degC=23.0, ambient_degC=25.0)
    assert rise == pytest.approx(49.5, abs=1e-9)


def test_winding_temperature_undoes_the_copper_law():
    assert winding_temperature(18e-3 * copper_ratio(97.0, 23.0), 18e-3, 23.0) == pytest.approx(97.0, abs=1e-9)


def test_shunt_time_constant_and_temperature():
    """10 nH on 0.1 Ω is 100 ns, 1 nH on 1 mΩ is 1 µs: L/R."""
    assert Calibration(
        shunt=Constant(0.1), shunt_inductance=Constant(10e-9)
    ).shunt_time_constant == pytest.approx(100e-9)
    slow = Calibration(shunt=Constant(1e-3), shunt_inductance=Constant(1e-9))
    assert slow.shunt_time_constant == pytest.approx(1e-6)
    warm = Calibration(shunt=Constant(0.1), tempco=Constant(100e-6), ambient_degC=Constant(35.0))
    assert warm.shunt_now == pytest.approx(0.1 * 1.001)


def test_trade_figure_of_a_shunt():
    """0.1 Ω reads 722 mV at 7.22 A (common practice, no source)."""
    assert 7.22 * Calibration(shunt=Constant(0.1)).shunt_now == pytest.approx(0.722, rel=1e-12)
