"""From legs to numbers with intervals, against closed forms: λ = L_0 I_k tanh(I/I_k), whose two parameters, the logarithms
of L_0 and of I_k, are known to a hundredth or so by themselves and moved by causes that all legs share.

At its own reference Isat = I_k x_d, x_d = acosh(1/√(1 - d)): known as well as I_k. Counted from a fixed inductance L_r,
tanh² x = 1 - (1 - d) L_r/L_0, and d(log L_0) moves x by 1/(2 tanh x). Linear propagation, GUM 5.1.2.
"""

import numpy as np
import pytest

from runner.extraction.curve import LegCurve, Scale
from runner.extraction.part_result import Settings, find_knees, interval, method_result
from runner.extraction.resistance import Resistance

DROP = 0.3
X_30 = 0.6151220  # acosh(1/√0.7)
TEMPERATURES = (-40.0, 25.0, 125.0)


def initial(t):
    return 22e-6 * (1 + 1e-3 * (t - 25.0))


def knee(t):
    return 10.0 * (1 - 2.6e-3 * (t - 25.0))


def leg(t, *, own=(0.0, 0.0), shared=None, reach=1.2, henry=None):
    """``own``: relative standard uncertainties of L_0 and I_k; ``shared``: what causes do to (L_0, I_k), relative."""
    l_0 = initial(t) if henry is None else henry
    current = np.linspace(0.0, reach * knee(t), 4001)
    x = current / knee(t)
    value = l_0 / np.cosh(x) ** 2
    covariance = np.diag(np.square(own))
    return LegCurve(
        temperature_degC=t,
        current=current,
        inductance=value,
        flux=l_0 * knee(t) * np.tanh(x),
        inductance_slopes=np.column_stack([value, 2 * x * np.tanh(x) * value]),
        flux_slopes=np.zeros((4001, 2)),
        covariance=covariance,
        noise=covariance,
        delay=np.zeros((2, 2)),
        shifts={name: np.array(shift) for name, shift in (shared or {}).items()},
        fit=None,
        scale=Scale(1.0, 1.0),
    )


def knees_of(legs, reference="same temperature", *, nominal=22e-6, temperature=0.0, **more):
    return find_knees(
        legs,
        Settings(drops=(DROP,), reference=reference, **more),
        nominal=nominal,
        temperature_uncertainty=temperature,
    )


def x_at(share):
    """Where sech² x has this value."""
    return float(np.arccosh(1 / np.sqrt(share)))


# ------------------------------------------------------------------------------------ references


@pytest.mark.parametrize(("drop", "x"), [(0.1, 0.3274502), (0.2, 0.4812118), (0.3, X_30), (0.5, 0.8813736)])
def test_each_leg_counts_from_its_own_initial_inductance(drop, x):
    legs = [leg(t) for t in TEMPERATURES]
    found = find_knees(legs, Settings(drops=(drop,)), nominal=1.0, temperature_uncertainty=0.0)
    # Linear interpolation between 4001 points errs by h²/8 of the second derivative: below 1e-6.
    assert [q.value for q in found.found[drop]] == pytest.approx(
        [x * knee(t) for t in TEMPERATURES], rel=1e-6
    )
    assert [q.value for q in found.initial] == pytest.approx([initial(t) for t in TEMPERATURES])


def test_counted_from_25_degrees_a_part_that_rises_with_heat_saturates_later():
    """L_0 is 6.5 % lower at -40 °C and 10 % higher at 125 °C than at 25 °C, and all three count from 22 uH."""
    found = knees_of([leg(t) for t in TEMPERATURES], "25 degC").found[DROP]
    expected = [knee(t) * x_at(0.7 * 22e-6 / initial(t)) for t in TEMPERATURES]
    assert [q.value for q in found] == pytest.approx(expected, rel=1e-6)
    assert found[1].value == pytest.approx(X_30 * 10.0, rel=1e-6)


def test_25_degrees_is_found_between_two_legs():
    """Legs at 5 and 85 °C: a straight line gives 22 uH, exactly here."""
    found = knees_of([leg(5.0), leg(85.0)], "25 degC").found[DROP]
    assert found[0].value == pytest.approx(knee(5.0) * x_at(0.7 * 22e-6 / initial(5.0)), rel=1e-6)


@pytest.mark.parametrize(
    ("temperatures", "is_known"),
    [((27.5,), True), ((28.5,), False), ((27.5, 85.0), True), ((60.0, 125.0), False), ((-40.0, 21.0), False)],
)
def test_25_degrees_is_not_extrapolated(temperatures, is_known):
    found = knees_of([leg(t) for t in temperatures], "25 degC").found[DROP]
    assert [q is not None for q in found] == [is_known] * len(temperatures)


def test_counted_from_the_data_sheet():
    """20 uH nominal of a part that has 22: 30 % below nominal is 36.4 % below its own."""
    found = knees_of([leg(25.0)], "nominal", nominal=20e-6).found[DROP]
    assert found[0].value == pytest.approx(10.0 * x_at(0.7 * 20 / 22), rel=1e-6)


def test_a_part_below_the_reference_has_no_current_left():
    """15 uH where 22 are promised lies 32 % below already; at 30 % drop it saturates at no current."""
    (found,) = knees_of([leg(25.0, henry=15e-6)], "nominal", nominal=22e-6).found[DROP]
    assert found.value == 0.0


# ------------------------------------------------------------------------------------ uncertainty


def test_at_its_own_reference_isat_is_known_as_well_as_the_knee():
    """L_0's own 2 % drop out, I_k's 1 % stay."""
    (found,) = knees_of([leg(25.0, own=(0.02, 0.01))]).found[DROP]
    assert found.uncertainty == pytest.approx(0.01 * X_30 * 10, rel=1e-3)
    assert knees_of([leg(25.0, own=(0.02, 0.01))]).initial[0].uncertainty == pytest.approx(0.02 * 22e-6)


def test_from_a_data_sheet_both_count():
    (found,) = knees_of([leg(25.0, own=(0.02, 0.01))], "nominal").found[DROP]
    expected = 10 * np.hypot(0.01 * X_30, 0.02 / (2 * np.tanh(X_30)))
    assert found.uncertainty == pytest.approx(expected, rel=1e-3)


def test_a_gain_that_all_legs_share_drops_out_of_a_reference_at_25_degrees():
    """The voltage gain moves L_0 of every leg by the same 1 %: each drop counts from a reference that moved with it. The
    shunt moves the current's scale as well, and that stays."""
    shared = {"voltage gain": (0.01, 0.0), "shunt": (-0.01, 0.01)}
    legs = [leg(t, shared=shared) for t in TEMPERATURES]
    hot = knees_of(legs, "25 degC").found[DROP][2]
    assert hot.shared["voltage gain"] == pytest.approx(0.0, abs=1e-6)
    assert hot.shared["shunt"] == pytest.approx(0.01 * hot.value, rel=1e-3)
    # From a data sheet the gain has nothing to be weighed against.
    x = x_at(0.7 * 22e-6 / initial(125.0))
    fixed = knees_of(legs, "nominal").found[DROP][2]
    assert fixed.shared["voltage gain"] == pytest.approx(knee(125.0) * 0.01 / (2 * np.tanh(x)), rel=1e-3)


def test_own_uncertainty_of_the_leg_at_25_degrees_reaches_the_others():
    """Hot leg exact, reference known to 2 %: u = I_k 0.02/(2 tanh x)."""
    legs = [leg(25.0, own=(0.02, 0.0)), leg(125.0)]
    hot = knees_of(legs, "25 degC").found[DROP][1]
    x = x_at(0.7 * 22e-6 / initial(125.0))
    assert hot.uncertainty == pytest.approx(knee(125.0) * 0.02 / (2 * np.tanh(x)), rel=1e-3)


@pytest.mark.parametrize("temperatures", [(25.0,), (25.0, 125.0), (-40.0, 25.0)])
def test_the_leg_that_is_the_reference_counts_its_initial_inductance_once(temperatures):
    """L_0's 2 % drop out where the reference is the leg's own, as they do at the same temperature."""
    legs = [leg(t, own=(0.02, 0.01)) for t in temperatures]
    found = knees_of(legs, "25 degC").found[DROP][temperatures.index(25.0)]
    assert found.uncertainty == pytest.approx(0.01 * X_30 * 10, rel=1e-3)


def test_temperature_enters_by_the_slope_along_the_legs():
    """Isat falls by 2.6e-3·10 A·x a kelvin; 0.15 K of the thermometer move it by 0.15 of that, every leg alike."""
    found = knees_of([leg(t) for t in TEMPERATURES], temperature=0.15)
    slope = -2.6e-2 * X_30
    assert [q.shared["temperature"] for q in found.found[DROP]] == pytest.approx([0.15 * slope] * 3, rel=1e-4)
    assert [q.shared["temperature"] for q in found.initial] == pytest.approx([0.15 * 22e-9] * 3, rel=1e-6)


def test_one_leg_has_no_slope_in_temperature():
    assert "temperature" not in knees_of([leg(25.0)], temperature=0.15).found[DROP][0].shared


# ------------------------------------------------------------------------------------ intervals and rows


@pytest.mark.parametrize(
    ("coverage", "k"), [(0.6827, 1.0000), (0.90, 1.6449), (0.95, 1.9600), (0.99, 2.5758)]
)
def test_an_interval_is_k_standard_uncertainties_either_way(coverage, k):
    """Two-sided quantiles of the normal distribution (GUM table G.1)."""
    legs, settings = [leg(25.0, own=(0.0, 0.01))], Settings(drops=(DROP,), coverage=coverage)
    assert settings.factor == pytest.approx(k, abs=1e-4)
    (found,) = knees_of(legs, coverage=coverage).found[DROP]
    ends = interval(found, settings.factor)
    assert (ends["high"] - found.value) / found.uncertainty == pytest.approx(k, abs=1e-4)
    assert (found.value - ends["low"]) / found.uncertainty == pytest.approx(k, abs=1e-4)


def entry(legs, **more):
    settings = Settings(drops=(0.1, DROP), **more)
    found = find_knees(legs, settings, nominal=22e-6, temperature_uncertainty=0.15)
    windings = [Resistance(18e-3, 1e-4, leg.temperature_degC, True) for leg in legs]
    return method_result(legs, found, windings, settings, "differential")


def test_a_result_has_a_row_for_each_drop_and_leg():
    made = entry([leg(t, own=(0.002, 0.003)) for t in TEMPERATURES])
    assert made["inductance_kind"] == "differential"
    assert [(row["drop"], row["temperature_degC"]) for row in made["saturation_current"]] == [
        (drop, t) for drop in (0.1, DROP) for t in TEMPERATURES
    ]
    for row in made["saturation_current"]:
        assert row["status"] == "measured"
        assert row["low"] < row["ampere"] < row["high"]
    for row, t in zip(made["initial_inductance"], TEMPERATURES, strict=True):
        assert row["henry"] == pytest.approx(initial(t))
        u = initial(t) * np.hypot(0.002, 0.15e-3 * 22e-6 / initial(t))
        assert row["high"] - row["henry"] == pytest.approx(1.95996 * u, rel=1e-4)
    assert made["winding_resistance"][0]["high"] == pytest.approx(18e-3 + 1.95996e-4)
    assert made["winding_resistance"][0]["low"] == pytest.approx(18e-3 - 1.95996e-4)


def test_a_drop_that_was_not_reached_is_never_a_number():
    """The cold leg was driven to 0.5 knees, where 21 % of L_0 are gone: 10 % is measured, 30 % is not reached."""
    made = entry([leg(-40.0, reach=0.5), leg(25.0)])
    cold = [row for row in made["saturation_current"] if row["temperature_degC"] == -40.0]
    assert cold[0]["status"] == "measured"
    assert (cold[1]["status"], cold[1]["ampere"], cold[1]["high"]) == ("not reached", None, None)
    assert cold[1]["low"] == pytest.approx(0.5 * knee(-40.0))  # good up to here at least
    assert [(row["drop"], row["temperature_degC"]) for row in made["budget"]] == [
        (0.1, -40.0),
        (0.1, 25.0),
        (DROP, 25.0),
    ]


def test_the_budget_is_in_order_of_size_and_makes_up_the_whole():
    shared = {"shunt": (-0.001, 0.001), "voltage gain": (0.0005, 0.0), "current gain": (-0.004, 0.004)}
    made = entry([leg(t, own=(0.0, 0.002), shared=shared) for t in TEMPERATURES])
    for row in made["budget"]:
        sizes = [line["standard_uncertainty"] for line in row["contributions"]]
        assert sizes == sorted(sizes, reverse=True)
        assert min(sizes) > 0
        match = next(
            r
            for r in made["saturation_current"]
            if (r["drop"], r["temperature_degC"]) == (row["drop"], row["temperature_degC"])
        )
        whole = (match["high"] - match["low"]) / 2 / 1.959964
        # Lines below a thousandth of the whole are left out, so squares may lack a few in a million.
        assert np.sqrt(np.sum(np.square(sizes))) == pytest.approx(whole, rel=1e-5)
    # Relative to Isat: 0.4 % of current gain, 0.2 % of noise, 0.1 % of shunt; the voltage's gain drops out.
    hot = made["budget"][-1]["contributions"]
    assert [line["name"] for line in hot] == ["current gain", "noise", "shunt", "temperature"]
    assert hot[0]["standard_uncertainty"] == pytest.approx(0.004 * X_30 * knee(125.0), rel=1e-3)
