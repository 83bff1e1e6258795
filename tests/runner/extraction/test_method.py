"""What a method says about its legs: references that nobody measured, parts below them, shunts that lag."""

import numpy as np
import pytest

from runner.extraction.calibration import Calibration, Constant
from runner.extraction.method import MethodLegs, PartFacts, finish_method
from runner.extraction.part_result import Settings
from runner.extraction.resistance import Resistance

LAG = 500e-9  # s


@pytest.fixture(scope="module")
def told(leg_of, tanh_part, bench):
    """told(temperatures, ...): the entry and the doubts of a pulse method with the same curve at each temperature."""

    def make(
        temperatures=(25.0,),
        *,
        reference="same temperature",
        nominal=100e-6,
        shunt_time=0.0,
        drops=(0.1, 0.3),
    ):
        calibration = Calibration(
            nominal_shunt=0.01, shunt=Constant(0.01), shunt_inductance=Constant(0.01 * shunt_time)
        )
        method = MethodLegs("pulse")
        for t in temperatures:
            one = bench(shunt_time=shunt_time)
            method.legs.append(leg_of(tanh_part, one, temperature_degC=t, calibration=calibration))
            method.resistances.append(Resistance(0.02, 0.0, t, True))
            method.peaks.append(np.array([14.0]))
        doubts = []
        facts = PartFacts("CORE", nominal, 8.0, 0.02)
        entry = finish_method(method, facts, Settings(drops=drops, reference=reference), calibration, doubts)
        return entry, {doubt.flag: doubt.text for doubt in doubts}

    return make


def test_an_ordinary_part_has_nothing_to_be_said_about_it(told):
    entry, doubts = told()
    assert doubts == {}
    assert all(row["status"] == "measured" for row in entry["saturation_current"])


def test_a_reference_that_was_not_measured_is_not_called_a_fall_that_was_not_reached(told):
    entry, doubts = told((60.0, 125.0), reference="25 degC")
    assert set(doubts) == {"no_reference"}
    assert "leg near 25 °C" in doubts["no_reference"]
    assert all(row["ampere"] is None for row in entry["saturation_current"])


def test_a_part_below_its_reference_is_named(told):
    """150 uH promised, 100 measured: 10 and 30 % below that without any current, 40 % with some."""
    entry, doubts = told(reference="nominal", nominal=150e-6, drops=(0.1, 0.3, 0.4))
    assert [row["ampere"] == 0.0 for row in entry["saturation_current"]] == [True, True, False]
    assert set(doubts) == {"below_reference"}
    assert "10 %, 30 %" in doubts["below_reference"]


def test_a_shunt_that_lags_by_a_large_share_of_the_pulse_is_named(told):
    """A pulse to 14 A lasts L0 Is tanh(1.4)/V = 74 us: L/R of 0.5 us is nothing, 10 us are 14 % of it."""
    assert "shunt_inductance" not in told(shunt_time=LAG)[1]
    assert "14 %" in told(shunt_time=20 * LAG)[1]["shunt_inductance"]
