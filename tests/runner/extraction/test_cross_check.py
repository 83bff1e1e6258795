"""Pulse against bias: the difference and its uncertainty by hand (GUM 5.1.6 for a quotient), which legs are compared, and
what is said when the methods disagree."""

from types import SimpleNamespace

import numpy as np
import pytest

from runner.extraction.cross_check import compare, verdict
from runner.extraction.curve import Quantity
from runner.extraction.part_result import Knees, Settings

NORMAL_95 = 1.959963985  # two-sided 95 % of a normal distribution (GUM table G.1: 1.960)
INDUCTANCE, ISAT = 22e-6, 8.0


def quantity(value, own=0.002, shared=0.001, temperature=0.0):
    """Relative contributions."""
    return Quantity(
        value, {"noise": own * value}, {"scale": shared * value, "temperature": temperature * value}
    )


def method(*legs):
    """(temperature, L_0, {drop: Isat}) each, as a method's legs and knees."""
    drops = sorted({drop for _, _, found in legs for drop in found})
    return (
        [SimpleNamespace(temperature_degC=at) for at, _, _ in legs],
        Knees(
            tuple(initial for _, initial, _ in legs),
            {drop: tuple(found.get(drop) for _, _, found in legs) for drop in drops},
        ),
    )


def one(initial=1.0, isat=1.0, at=25.0, **more):
    """A leg whose L_0 and Isat are these multiples of 22 uH and 8 A."""
    return at, quantity(initial * INDUCTANCE, **more), {0.3: quantity(isat * ISAT, **more)}


SETTINGS = Settings(drops=(0.3,))


# ------------------------------------------------------------------------------------ the difference


def test_difference_and_its_uncertainty_by_hand():
    """1.01/1 - 1 = 1 %; each side √(0.3² + 0.4²) = 0.5 %, so the difference 0.5·√2 %, expanded 1.386 %."""
    found = compare(
        method(one(1.01, 0.98, own=0.003, shared=0.004)), method(one(own=0.003, shared=0.004)), SETTINGS
    )
    assert [c.what for c in found] == ["L_0", "Isat at 30 % drop"]
    assert [c.difference for c in found] == pytest.approx([0.01, -0.02])
    assert [c.expanded for c in found] == pytest.approx([NORMAL_95 * 0.005 * np.sqrt(2)] * 2, rel=1e-6)
    assert [c.agrees for c in found] == [True, False]
    assert "pulse +1.00 % against bias" in found[0].as_row()["text"]
    assert found[1].as_row()["agrees"] is False


def test_a_temperature_that_both_share_is_no_reason_to_differ():
    """Both methods sit on the same thermometer: 5 % of temperature in each leaves the expanded uncertainty as it was."""
    with_it = compare(method(one(temperature=0.05)), method(one(temperature=0.05)), SETTINGS)
    without = compare(method(one()), method(one()), SETTINGS)
    assert [c.expanded for c in with_it] == [c.expanded for c in without]


def test_two_methods_that_claim_no_uncertainty_may_differ_by_a_fifth_of_a_percent():
    exact = {"own": 0.0, "shared": 0.0}
    near, far = (
        compare(method(one(1 + d, **exact)), method(one(**exact)), SETTINGS)[0] for d in (0.0015, 0.0025)
    )
    assert near.agrees
    assert not far.agrees


# ------------------------------------------------------------------------------------ which legs


def test_legs_of_one_temperature_are_compared_and_others_are_not():
    pulse, bias = method(one(at=-40), one(at=25), one(at=125)), method(one(at=26.9), one(at=110))
    assert [c.temperature_degC for c in compare(pulse, bias, SETTINGS)] == [25, 25]
    assert compare(method(one(at=25)), method(one(at=27.5)), SETTINGS) == []


def test_of_two_near_legs_the_nearest_is_taken():
    """Two legs that disagree for a reason of their own: the one at 25.1 °C is nearer to 25 than the one at 23.5."""
    bias = method(one(1.01, 1.01, at=23.5), one(at=25.1))
    found = compare(method(one(at=25.0)), bias, SETTINGS)
    # A tenth of a kelvin on the slope between the two, 1 % in 1.6 K.
    assert [c.difference for c in found] == pytest.approx([-0.000625, -0.000625], abs=1e-6)


def test_both_are_compared_at_one_temperature():
    """L_0 rises by 0.1 %/K of 25 °C, Isat falls by 0.3 %/K; the bias legs were 1.5 K warmer. A straight line, so exact."""

    def legs(*temperatures):
        return method(*(one(1 + 1e-3 * (t - 25), 1 - 3e-3 * (t - 25), at=t) for t in temperatures))

    found = compare(legs(-40.0, 25.0, 85.0), legs(-38.5, 26.5, 86.5), SETTINGS)
    assert [c.difference for c in found] == pytest.approx([0.0] * 6, abs=1e-12)


def test_one_leg_alone_is_compared_as_it_is():
    (initial, isat) = compare(method(one()), method(one(1.01, 0.97, at=26.0)), SETTINGS)
    assert (initial.difference, isat.difference) == pytest.approx((1 / 1.01 - 1, 1 / 0.97 - 1))


def test_the_largest_drop_that_both_reached_is_compared():
    settings = Settings(drops=(0.1, 0.2, 0.3))
    isat = quantity(ISAT)
    pulse = method((25.0, quantity(INDUCTANCE), {0.1: isat, 0.2: isat, 0.3: isat}))
    bias = method((25.0, quantity(INDUCTANCE), {0.1: isat, 0.2: isat, 0.3: None}))
    assert [c.what for c in compare(pulse, bias, settings)] == ["L_0", "Isat at 20 % drop"]
    none = method((25.0, quantity(INDUCTANCE), {0.1: None, 0.2: None, 0.3: None}))
    assert [c.what for c in compare(pulse, none, settings)] == ["L_0"]


def test_a_knee_at_zero_current_is_compared_with_nothing():
    """With a reference of the data sheet, a part below it at no current has "saturated" at 0 A: no quotient of that."""
    nothing = (25.0, quantity(INDUCTANCE), {0.3: Quantity(0.0, {}, {})})
    for pulse, bias in ((nothing, one()), (one(), nothing), (nothing, nothing)):
        assert [c.what for c in compare(method(pulse), method(bias), SETTINGS)] == ["L_0"]


# ------------------------------------------------------------------------------------ the verdict


def said(pulse, bias):
    return verdict(compare(method(*pulse), method(*bias), SETTINGS))


def test_nothing_is_said_where_the_methods_agree():
    assert said([one(1.003, 0.997)], [one()]) is None


def test_a_difference_beyond_uncertainty_but_small_is_a_row_and_no_flag():
    """1.5 % with an expanded uncertainty of 0.6 %: told in the table, not flagged (common practice, no source)."""
    comparisons = compare(method(one(1.015)), method(one()), SETTINGS)
    assert not comparisons[0].agrees
    assert verdict(comparisons) is None


def test_a_shunt_that_is_ten_percent_off_is_said_to_be_a_scale():
    """Pulse currents 10 % too large: L_0 lower and Isat higher by it at every temperature."""
    at = (-40.0, 25.0, 125.0)
    text = said([one(1 / 1.1, 1.1, at=t) for t in at], [one(at=t) for t in at])
    assert "Isat at 30 % drop" in text
    assert "+10.0 %" in text
    assert "shunt" in text


def test_a_difference_that_grows_with_temperature_is_not_said_to_be_a_scale():
    at = (-40.0, 25.0, 125.0)
    text = said([one(1 + 0.03 * (k + 1), at=t) for k, t in enumerate(at)], [one(at=t) for t in at])
    assert "every temperature" not in text
    assert "memory" in text


def test_one_leg_out_of_three_is_not_every_temperature():
    at = (-40.0, 25.0, 125.0)
    text = said([one(1.06 if t == 25.0 else 1.0, at=t) for t in at], [one(at=t) for t in at])
    assert "L_0 at 25 °C differs by +6.0 %" in text
    assert "every temperature" not in text


def test_one_temperature_is_not_every_temperature():
    text = said([one(1 / 1.1, 1.1)], [one()])
    assert "every temperature" not in text
    assert "scale" in text  # but a wrong scale stays among the causes
