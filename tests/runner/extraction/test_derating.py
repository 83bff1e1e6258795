"""What a designer takes from Isat(T): margins and derating by hand, the temperature coefficient against a regression that
others wrote (SciPy's), and a drop that was not reached."""

from types import SimpleNamespace

import numpy as np
import pytest
from scipy.stats import linregress

from runner.extraction.curve import Quantity
from runner.extraction.derating import derating, margins, temperature_coefficients
from runner.extraction.part_result import Knees, Settings

NORMAL_95 = 1.959963985  # two-sided 95 % of a normal distribution (GUM table G.1: 1.960)


def knee(value, own=0.0, shared=0.0):
    """A saturation current with one contribution of its own and one that all legs share [A]."""
    return Quantity(value, {"noise": own}, {"shunt": shared})


def legs_at(*temperatures, top=9.0):
    return [SimpleNamespace(temperature_degC=float(at), top=top) for at in temperatures]


def found(*quantities, drop=0.3):
    return Knees((), {drop: tuple(quantities)})


def settings(**more):
    return Settings(drops=(0.3,), **more)


# ------------------------------------------------------------------------------------ margin


def test_margin_is_isat_over_rated_less_one():
    """8 A ± 1.96·√(0.03² + 0.04²) on a rated current of 6 A: +33.3 % from 31.7 to 35.0 %."""
    (row,) = margins(legs_at(25), found(knee(8.0, 0.03, 0.04)), settings(), rated=6.0)
    assert row["fraction"] == pytest.approx(1 / 3)
    assert row["low"] == pytest.approx((8.0 - NORMAL_95 * 0.05) / 6 - 1, rel=1e-6)
    assert row["high"] == pytest.approx((8.0 + NORMAL_95 * 0.05) / 6 - 1, rel=1e-6)
    assert (row["temperature_degC"], row["drop"]) == (25.0, 0.3)


def test_a_part_that_saturates_early_has_a_negative_margin():
    (row,) = margins(legs_at(125), found(knee(4.5, 0.01)), settings(), rated=6.0)
    assert row["fraction"] == pytest.approx(-0.25)
    assert row["low"] < -0.25 < row["high"]


def test_no_margin_is_invented_where_the_drop_was_not_reached():
    rows = margins(legs_at(-40, 25), found(None, knee(8.0)), settings(), rated=6.0)
    assert [row["temperature_degC"] for row in rows] == [25.0]


# ------------------------------------------------------------------------------------ derating


@pytest.mark.parametrize("guard_band", [0.0, 0.2, 0.35])
def test_advisable_current_is_the_lower_end_less_the_guard_band(guard_band):
    (row,) = derating(legs_at(25), found(knee(8.0, 0.03, 0.04)), settings(guard_band=guard_band))
    assert row["ampere"] == pytest.approx((1 - guard_band) * (8.0 - NORMAL_95 * 0.05), rel=1e-6)
    assert row["guard_band"] == guard_band


def test_coverage_widens_the_derating():
    """99 %: k = 2.576 (GUM table G.1)."""
    (row,) = derating(legs_at(25), found(knee(8.0, 0.1)), settings(coverage=0.99, guard_band=0.0))
    assert row["ampere"] == pytest.approx(8.0 - 0.2576, abs=1e-4)


def test_where_the_drop_was_not_reached_the_largest_current_stands_for_it():
    """The part was good up to 9 A at least; nothing beyond is promised."""
    rows = derating(legs_at(-40, 25), found(None, knee(8.0)), settings())
    assert [row["ampere"] for row in rows] == pytest.approx([0.8 * 9.0, 0.8 * 8.0])


def test_nobody_is_advised_a_negative_current():
    (row,) = derating(legs_at(25), found(knee(0.1, 0.2)), settings())
    assert row["ampere"] == 0.0


# ------------------------------------------------------------------------------------ temperature coefficient

TEMPERATURES = (-40.0, 0.0, 25.0, 60.0, 125.0)


def test_an_exponential_fall_gives_its_exponent():
    """Isat = 10 A·exp(-2.6e-3 (T - 25)): d(log Isat)/dT = -2.6e-3/K, and nothing is left over."""
    values = [knee(10 * np.exp(-2.6e-3 * (t - 25))) for t in TEMPERATURES]
    (row,) = temperature_coefficients(legs_at(*TEMPERATURES), found(*values), settings())
    assert row["fraction_per_kelvin"] == pytest.approx(-2.6e-3, rel=1e-9)
    assert row["high"] - row["low"] < 1e-9


def test_scatter_about_the_line_is_that_of_a_regression():
    """Slope and its standard error by SciPy's linregress; knees without uncertainty of their own."""
    scatter = np.random.default_rng(31).standard_normal(5) * 0.004
    logs = np.log(10.0) - 2.6e-3 * np.array(TEMPERATURES) + scatter
    (row,) = temperature_coefficients(
        legs_at(*TEMPERATURES), found(*(knee(float(v)) for v in np.exp(logs))), settings()
    )
    line = linregress(TEMPERATURES, logs)
    assert row["fraction_per_kelvin"] == pytest.approx(line.slope, rel=1e-9)
    assert row["high"] - line.slope == pytest.approx(NORMAL_95 * line.stderr, rel=1e-6)
    assert line.slope - row["low"] == pytest.approx(NORMAL_95 * line.stderr, rel=1e-6)


def test_own_uncertainties_of_the_legs_reach_the_slope():
    """Two legs 100 K apart, 0.3 % and 0.4 % each: √(0.3² + 0.4²) % over 100 K = 5e-5/K."""
    rows = temperature_coefficients(legs_at(25, 125), found(knee(10.0, 0.03), knee(8.0, 0.032)), settings())
    assert rows[0]["fraction_per_kelvin"] == pytest.approx(np.log(0.8) / 100)
    half = (rows[0]["high"] - rows[0]["low"]) / 2
    assert half == pytest.approx(NORMAL_95 * 5e-5, rel=1e-6)


def test_what_all_legs_share_drops_out():
    """A shunt that is 1 % wrong makes every Isat 1 % wrong, and the slope of its logarithm none."""
    shared = [knee(10 * np.exp(-2e-3 * t), 0.0, 0.1 * np.exp(-2e-3 * t)) for t in TEMPERATURES]
    (row,) = temperature_coefficients(legs_at(*TEMPERATURES), found(*shared), settings())
    assert row["high"] - row["low"] < 1e-9


def test_one_leg_has_no_slope_and_a_leg_that_was_not_reached_is_passed_over():
    assert temperature_coefficients(legs_at(25), found(knee(8.0)), settings()) == []
    assert temperature_coefficients(legs_at(-40, 25), found(None, knee(8.0)), settings()) == []
    (row,) = temperature_coefficients(legs_at(-40, 25, 125), found(None, knee(10.0), knee(8.0)), settings())
    assert row["fraction_per_kelvin"] == pytest.approx(np.log(0.8) / 100)


def test_a_knee_at_zero_current_has_no_logarithm():
    """With a reference of the data sheet, a part below it at no current has "saturated" at 0 A."""
    legs, knees = legs_at(25, 75, 125), found(knee(8.0), knee(7.0), Quantity(0.0, {}, {}))
    (row,) = temperature_coefficients(legs, knees, settings())
    assert row["fraction_per_kelvin"] == pytest.approx(np.log(7 / 8) / 50)
    assert margins(legs, knees, settings(), rated=6.0)[2]["fraction"] == -1.0
    assert derating(legs, knees, settings())[2]["ampere"] == 0.0
