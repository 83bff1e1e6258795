"""Rows taken at drifting temperatures against the truth at one: λ = L_0(T) I_k(T) tanh(I/I_k(T)) at every instant.

Three legs; while a leg was measured the part warmed by some kelvin, from the first width to the last (or from the first
reading of the meter to the last). The knee falls by 2.6e-3/K (a power ferrite's; common practice, no source): having
warmed by 6 K it is 0.8 % lower at the end of a leg than in its middle, and left alone that draws Isat down.
"""

import dataclasses

import numpy as np
import pytest

from runner.extraction.bias import Readings, bias_leg
from runner.extraction.calibration import Calibration
from runner.extraction.drift import at_one_temperature
from runner.extraction.pulse_leg import pulse_leg

TEMPERATURES = (-10.0, 40.0, 100.0)
WIDTHS = 6
X_30 = 0.6151220  # acosh(1/√0.7)


def initial(t):
    return 22e-6 * (1 + 5e-4 * (t - 25.0))


def knee(t):
    return 10.0 * (1 - 2.6e-3 * (t - 25.0))


class Part:
    """The law at one temperature, as the captures of these tests want it."""

    def __init__(self, t):
        self.t = t

    def flux(self, i):
        return initial(self.t) * knee(self.t) * np.tanh(np.asarray(i) / knee(self.t))

    def slope(self, i):
        return initial(self.t) / np.cosh(np.asarray(i) / knee(self.t)) ** 2


@pytest.fixture(scope="module")
def pulsed(ramps_of, bench):
    """pulsed(warming, calibration): three legs whose widths, from short to long, were taken while the part warmed by
    ``warming`` [K] about the leg's temperature."""

    def make(warming, *, count=3, calibration=None):
        calibration = calibration or Calibration()
        legs = []
        for number, t in enumerate(TEMPERATURES[:count]):
            ramps = []
            for k, share in enumerate(np.linspace(0.0, 1.0, WIDTHS)):
                now = t + warming * (share - 0.5)
                # Widths from 0.3 to 1.15 knees of current.
                one = bench(widths=1, seed=1000 + 100 * number + k)
                (ramp,) = ramps_of(Part(now), one, (0.3 + 0.85 * share) * knee(now), calibration)
                ramps.append(dataclasses.replace(ramp, temperature_degC=now, point=k))
            at = float(np.mean([ramp.temperature_degC for ramp in ramps]))
            legs.append(
                pulse_leg(
                    ramps,
                    calibration,
                    temperature_degC=at,
                    resistance=bench().resistance,
                    resistance_uncertainty=0.0,
                )
            )
        return legs

    return make


@pytest.fixture(scope="module")
def drifting(pulsed):
    return pulsed(6.0)


def isat_errors(legs):
    return np.array([leg.knee(0.3).value / (X_30 * knee(leg.temperature_degC)) - 1 for leg in legs])


def test_isat_of_a_part_that_warmed_is_that_of_its_mean_temperature(drifting):
    """Without drift these captures give Isat to some 0.04 %; what the correction's own linearisation adds goes with the
    square of the drift, (6 K·2.6e-3/2)² = 6e-5."""
    assert np.all(np.abs(isat_errors(drifting)) > 0.002)  # what there is to correct
    brought = at_one_temperature(drifting, kind="differential")
    assert np.all(np.abs(isat_errors(brought)) < 0.0008)


def test_the_truth_lies_within_the_interval_once_brought(drifting):
    for leg in at_one_temperature(drifting, kind="differential"):
        found = leg.knee(0.3)
        assert abs(found.value - X_30 * knee(leg.temperature_degC)) < 3 * found.uncertainty
        first = leg.initial_inductance()
        assert abs(first.value - initial(leg.temperature_degC)) < 3 * first.uncertainty


def test_warming_and_cooling_are_undone_alike(drifting, pulsed):
    cooled = pulsed(-6.0)
    before = isat_errors(cooled) - isat_errors(drifting)
    after = isat_errors(at_one_temperature(cooled, kind="differential")) - isat_errors(
        at_one_temperature(drifting, kind="differential")
    )
    assert np.all(np.abs(before) > 0.003)
    assert np.all(np.abs(after) < 0.25 * np.abs(before))


def test_a_part_that_kept_its_temperature_is_left_alone(pulsed):
    legs = pulsed(0.0, count=2)
    assert all(a is b for a, b in zip(legs, at_one_temperature(legs, kind="differential"), strict=True))


def test_one_leg_says_nothing_about_temperature(drifting):
    assert at_one_temperature(drifting[:1], kind="differential") == drifting[:1]


def test_the_temperature_stays_the_legs_own_and_rows_brought_together_agree(drifting):
    """Rows of different temperatures disagree and widen everything; once brought together they no longer do, and how well
    that was done is a cause with a name."""
    for before, after in zip(drifting, at_one_temperature(drifting, kind="differential"), strict=True):
        assert after.temperature_degC == before.temperature_degC
        assert after.fit.misfit < 1.2 < before.fit.misfit
        assert after.knee(0.3).own["noise"] < before.knee(0.3).own["noise"]
        assert "drift" not in before.knee(0.3).shared
        assert abs(after.knee(0.3).shared["drift"]) > 0


# ------------------------------------------------------------------------------------ readings of a meter


def read(warming):
    """Legs by the bias method, twelve readings each, with 0.01 % of noise; the part warmed with every step of current."""
    generator = np.random.default_rng(65)
    legs = []
    for t in TEMPERATURES:
        now = t + warming * (np.linspace(0.0, 1.0, 12) - 0.5)
        current = np.linspace(0.0, 1.15, 12) * knee(t)
        value = np.array([float(Part(a).slope(i)) for a, i in zip(now, current, strict=True)])
        value = value * (1 + 1e-4 * generator.standard_normal(12))
        more = {f.name: np.zeros(12) for f in dataclasses.fields(Readings)}  # nothing else was uncertain
        more |= {"current": current, "inductance": value, "temperature_degC": now}
        legs.append(bias_leg(Readings(**more), Calibration(), temperature_degC=float(now.mean())))
    return legs


@pytest.mark.parametrize("warming", [5.0, -5.0])
def test_readings_are_brought_to_the_legs_temperature(warming):
    """At the current of the reading it is the inductance that moves, by 2 x tanh x of what the knee does. Isat lies near
    the middle of the readings, where the temperature is the mean one; at the last reading, 2.5 K away, 0.65 % of the knee
    are 1.2 % of L_d."""
    legs = read(warming)
    brought = at_one_temperature(legs, kind="incremental")
    for before, after in zip(legs, brought, strict=True):
        t = before.temperature_degC
        at = 1.1 * knee(t)
        truth = float(Part(t).slope(at))
        wrong, right = (
            float(np.interp(at, leg.current, leg.inductance)) / truth - 1 for leg in (before, after)
        )
        assert abs(wrong) > 0.006
        assert abs(right) < 0.0025
        assert after.knee(0.3).value == pytest.approx(X_30 * knee(t), rel=1e-3)
