"""Reading a simulated bench from a plain mapping, and the truth about it."""

import json

import numpy as np
import pytest

from mock_instruments import WorldSpec, truth
from mock_instruments.spec import LAW_DEFAULTS

STATED = {
    "shunt": {
        "resistance": {"value": 10e-3, "uncertainty": 1e-5},
        "tempco": {"value": 0.0, "uncertainty": 0.0},
    },
    "digitizer": {"calibration": {"skew": {"value": 12e-9, "uncertainty": 1e-9}}},
    "lcr": {"calibration": {"inductance_gain": {"value": 1.0, "uncertainty": 1e-3}}},
}


def spec(**changes):
    return WorldSpec.from_mapping({"seed": 7, "bench": STATED, **changes})


def test_an_empty_mapping_is_a_bench_with_a_gapped_choke():
    made = WorldSpec.from_mapping({})
    assert made.parts[1].law.law == "gapped"
    assert made.spelling == "plain"
    assert not made.relays.present


@pytest.mark.parametrize(
    ("changes", "text"),
    [
        ({"sede": 1}, "'sede'"),
        ({"spelling": "weird"}, "'weird'"),
        ({"parts": {"1": {"law": "glass"}}}, "'glass'"),
        ({"parts": {"1": {"law": "gapped", "colour": 5}}}, "'colour'"),
        ({"departures": {"shunt": 1}}, "'shunt'"),
        ({"departures": {"digitizer": {"bit": 8}}}, "'bit'"),
        ({"departures": {"digitizer": {"bits": 24}}}, "24"),
    ],
)
def test_what_cannot_be_meant_is_named(changes, text):
    with pytest.raises(ValueError, match=text):
        WorldSpec.from_mapping(changes)


def test_departures_given_are_taken_and_leave_the_other_draws_alone():
    drawn = spec()
    given = spec(departures={"skew": 0.4e-9, "shunt_resistance": 3e-4})
    assert given.digitizer.skew == pytest.approx(12.4e-9)
    assert given.shunt == pytest.approx(10e-3 * 1.0003)
    assert given.inductance_gain == drawn.inductance_gain


def test_by_default_the_truth_is_close_to_what_is_stated():
    """Shunt within 0.03 %, skew within 0.5 ns for every seed: what accuracy bars on the demo bench rest on."""
    for seed in range(200):
        made = spec(seed=seed)
        assert made.shunt == pytest.approx(10e-3, rel=3.01e-4)
        assert made.digitizer.skew == pytest.approx(12e-9, abs=0.5e-9)


def test_with_spread_one_the_truth_scatters_as_stated():
    """2000 seeds: a normal of one standard uncertainty has 68.3 % inside one (GUM, G.1); 3 sigma of counting is 3.1 %."""
    errors = (
        np.array([spec(seed=s, departures={"spread": 1.0}).digitizer.skew - 12e-9 for s in range(2000)])
        / 1e-9
    )
    assert np.mean(np.abs(errors) < 1.0) == pytest.approx(0.683, abs=0.032)
    assert np.mean(errors) == pytest.approx(0.0, abs=0.07)
    assert np.max(np.abs(errors)) > 2.5


def test_a_bare_number_is_exact():
    made = WorldSpec.from_mapping(
        {"ambient_degC": 25.0, "bench": {"shunt": {"resistance": 0.02, "tempco": 0.0}}}
    )
    assert made.shunt == 0.02


def test_the_shunts_tempco_counts_from_its_certificate():
    stated = {"shunt": {"resistance": 10e-3, "tempco": 20e-6, "temperature_degC": 23.0}}
    made = WorldSpec.from_mapping({"ambient_degC": 33.0, "bench": stated})
    assert made.shunt == pytest.approx(10e-3 * (1 + 20e-6 * 10), rel=1e-12)


def test_the_truth_is_json_and_falls_with_temperature():
    parts = {str(n): {"law": law} for n, law in enumerate(LAW_DEFAULTS, start=1)}
    told = json.loads(json.dumps(truth(WorldSpec.from_mapping({"parts": parts}))))
    assert told["reference"] == "same temperature"
    for number, law in enumerate(LAW_DEFAULTS, start=1):
        points = told["parts"][str(number)]["points"]
        assert [point["temperature_degC"] for point in points] == [-40, 0, 25, 60, 85, 105, 125]
        assert [point["resistance"] for point in points] == sorted(point["resistance"] for point in points)
        amperes = [[each["ampere"] for each in point["saturation_current"]] for point in points]
        if law == "linear":
            assert amperes[0] == [None] * 3
        else:
            assert all(row == sorted(row) for row in amperes)
        assert ("first_shot" in points[0]) == (law == "remanent")


def test_truth_of_a_powder_part_is_the_arctan_law():
    """x = sqrt(d/(1-d)); the slope of arctan, here with what the floor leaves: d' = d/(1-floor)."""
    made = WorldSpec.from_mapping(
        {"parts": {"1": {"law": "powder", "inductance": 47e-6, "knee": 7.5, "floor": 0.03}}}
    )
    (point,) = truth(made, temperatures_degC=[25.0], drops=[0.3])["parts"]["1"]["points"]
    inside = 0.3 / 0.97
    assert point["saturation_current"][0]["ampere"] == pytest.approx(
        7.5 * (inside / (1 - inside)) ** 0.5, rel=1e-10
    )
    assert point["initial_inductance"] == pytest.approx(47e-6, rel=1e-12)
