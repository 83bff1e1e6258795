"""Tables: units in the head, digits by the interval, extras of the result without a change to the report."""

import math

import pytest

from runner.report.extras import extra_tables, extra_texts
from runner.report.facts import AtTemperature, Estimate, Facts, Knee, MethodFacts, PartFacts
from runner.report.tables import budget_table, knee_tables, temperature_table

FACTS = Facts("title", 0.95, True, ())
NAN = math.nan


def _part(rated, *knees):
    method = MethodFacts("pulse", None, (), knees, (), {})
    return PartFacts(0, "part_00", "P", rated, (method,), (), {}), method


def _knee(drop, value=8.24, low=8.20, high=8.28, status="measured", temperature=25.1):
    return Knee(temperature, drop, "same temperature", status, Estimate(value, low, high))


def test_the_saturation_table_has_a_group_of_columns_for_each_drop():
    part, method = _part(6.0, _knee(0.1, 6.9, 6.87, 6.93), _knee(0.3))
    (table,) = knee_tables(FACTS, part, method)
    assert table.title == "Saturation current of P (A), pulse method"
    assert table.groups == (("", 1), ("10 % drop", 3), ("30 % drop", 3))
    assert table.head == (
        "Temperature (°C)",
        "Isat",
        "95 % interval",
        "margin",
        "Isat",
        "95 % interval",
        "margin",
    )
    assert table.rows == (
        ("25.1", "6.900", "6.870 to 6.930", "+15.0 %", "8.240", "8.200 to 8.280", "+37.3 %"),
    )


def test_what_was_not_reached_is_written_so_with_the_bound():
    part, method = _part(6.0, _knee(0.3, NAN, 10.0, NAN, "not reached"))
    (table,) = knee_tables(FACTS, part, method)
    assert table.rows == (("25.1", "not reached", "> 10.0", "> +67 %"),)


def test_without_a_rating_there_is_no_margin():
    part, method = _part(NAN, _knee(0.3))
    (table,) = knee_tables(FACTS, part, method)
    assert table.head == ("Temperature (°C)", "Isat", "95 % interval")
    assert "Margin" not in table.note


def test_a_drop_missing_at_one_temperature_leaves_a_dash():
    part, method = _part(NAN, _knee(0.1), _knee(0.3, temperature=85.0))
    (table,) = knee_tables(FACTS, part, method)
    assert table.rows[0] == ("25.1", "8.240", "8.200 to 8.280", "–", "–")
    assert table.rows[1] == ("85.0", "–", "–", "8.240", "8.200 to 8.280")


def test_more_than_three_drops_go_into_further_tables():
    part, method = _part(NAN, *(_knee(d / 10) for d in range(1, 6)))
    tables = knee_tables(FACTS, part, method)
    assert [[text for text, _ in t.groups[1:]] for t in tables] == [
        ["10 % drop", "20 % drop", "30 % drop"],
        ["40 % drop", "50 % drop"],
    ]


def test_one_prefix_serves_a_column():
    entries = [
        AtTemperature(-40.0, Estimate(0.9e-3, 0.89e-3, 0.91e-3)),
        AtTemperature(25.0, Estimate(0.018, 0.0179, 0.0181)),
    ]
    table = temperature_table(FACTS, "Winding resistance", entries, "ohm", title="")
    assert table.head == ("Temperature (°C)", "Winding resistance (mΩ)", "95 % interval (mΩ)")
    assert table.rows == (("−40.0", "0.900", "0.890 to 0.910"), ("25.0", "18.00", "17.90 to 18.10"))


def _with_budget(*entries):
    return MethodFacts("pulse", None, (), (), (), {"budget": list(entries)})


def _budget(temperature, drop=0.3, **contributions):
    listed = [{"name": n.replace("_", " "), "standard_uncertainty": u} for n, u in contributions.items()]
    return {"temperature_degC": temperature, "drop": drop, "ampere": 8.2, "contributions": listed}


def test_a_budget_lists_its_contributions_by_size_and_combines_them():
    """Two independent contributions of 3 mA and 4 mA combine to 5 mA (GUM 5.1.2)."""
    method = _with_budget(
        _budget(85.0, noise=0.006, shunt=0.008),
        _budget(25.1, noise=0.003, shunt=0.004, nothing=0.0, skew=0.000012),
        _budget(25.1, drop=0.1, noise=1.0),
    )
    table = budget_table(method, 0.3)
    assert table.title == "Where the uncertainty of the saturation current at 30 % drop comes from"
    assert table.head == ("Standard uncertainty (mA)", "25 °C", "85 °C")
    assert table.rows == (
        ("shunt", "4.0", "8.0"),
        ("noise", "3.0", "6.0"),
        ("the rest (skew)", "0.012", "–"),
        ("all together", "5.0", "10"),
    )


def test_a_budget_of_many_temperatures_keeps_the_ends():
    table = budget_table(_with_budget(*(_budget(float(t), noise=0.001) for t in range(0, 200, 10))), 0.3)
    assert len(table.head) == 9
    assert (table.head[1], table.head[-1]) == ("0 °C", "190 °C")
    assert "temperatures" in table.note


@pytest.mark.parametrize("drop", [0.3, None])
def test_a_budget_without_contributions_is_no_table(drop):
    assert budget_table(_with_budget(_budget(25.0)), drop) is None


@pytest.mark.parametrize(
    ("extras", "title", "head", "row"),
    [
        (
            {
                "temperature_coefficient": [
                    {"drop": 0.3, "fraction_per_kelvin": -0.0025, "low": -0.0028, "high": -0.0022}
                ]
            },
            "Temperature coefficient of the saturation current",
            ("Drop (%)", "Change (%/K)", "95 % interval (%/K)"),
            ("30", "−0.250", "−0.280 to −0.220"),
        ),
        (
            {"a_new_study": {"shots": 12, "remembers": True, "note": "first shot lower", "ampere": None}},
            "A new study",
            ("Shots", "Remembers", "Note", "Current (A)"),
            ("12", "yes", "first shot lower", "–"),
        ),
        (
            {"change": [{"drop": 0.3, "fraction": 0.15, "low": 0.14, "high": 0.16}]},
            "Change",
            ("Drop (%)", "Fraction (%)", "95 % interval (%)"),
            ("30", "15.0", "14.0 to 16.0"),
        ),
        (
            {"left_out_error": {"fraction": 0.000901, "largest": 0.00216}},
            "Check: inductance at each temperature, predicted from the other temperatures (rms and largest error)",
            ("Fraction (%)", "Largest (%)"),
            ("0.090", "0.22"),
        ),
        (
            {"shift": [{"temperature_degC": 25.0, "millennium_units": 2.0, "low": 1.9, "high": 2.1}]},
            "Shift",
            ("Temperature (°C)", "Millennium units", "95 % interval"),
            ("25.0", "2.00", "1.90 to 2.10"),
        ),
        (
            {"field": [{"ampere_per_metre": 2386.08, "relative_permeability": 61.91298}]},
            "Field",
            ("H (kA/m)", "µr"),
            ("2.386", "61.91"),
        ),
        (
            {
                "remanence": [
                    {
                        "polarity": "forward",
                        "first_shot_ampere": 5.5732,
                        "shift_ampere": 0.6,
                        "low": 0.57,
                        "high": 0.63,
                        "verdict": "remembers",
                    }
                ]
            },
            "Remanence study: first shot against conditioned shots",
            ("Polarity", "First shot (A)", "Shift (mA)", "95 % interval (mA)", "Verdict"),
            ("forward", "5.573", "600", "570 to 630", "remembers"),
        ),
    ],
    ids=["coefficient", "unknown", "fraction", "left out", "unknown unit", "field", "words before a unit"],
)
def test_an_extra_becomes_a_table_by_its_keys(extras, title, head, row):
    (table,) = extra_tables(extras, 0.95)
    assert (table.title, table.head, table.rows[0]) == (title, head, row)


def test_records_at_temperature_and_drop_are_laid_out_like_the_saturation_current():
    records = [
        {"temperature_degC": t, "drop": d, "ampere": 10 * d + t / 100, "guard_band": 0.2}
        for d in (0.1, 0.3)
        for t in (125.0, 25.0)
    ]
    (table,) = extra_tables({"derating": records[:-1]}, 0.95)
    assert table.title == "Derating: largest current advised"
    assert table.groups == (("", 1), ("10 % drop", 1), ("30 % drop", 1))
    assert table.head == ("Temperature (°C)", "Current (A)", "Current (A)")
    assert table.rows == (("25.0", "1.250", "–"), ("125.0", "2.250", "4.250"))
    assert table.note == "Guard band: 20 %."


def test_records_that_would_fall_on_each_other_stay_lines():
    records = [{"temperature_degC": 25.0, "drop": 0.3, "ampere": 1.0 + k, "shot": k} for k in range(2)]
    (table,) = extra_tables({"study": records}, 0.95)
    assert len(table.rows) == 2
    assert table.groups == ()


@pytest.mark.parametrize("value", [[], [1, 2], "text", 3.0, None, [{}], [{"nested": {"a": 1}}]])
def test_what_is_no_list_of_records_makes_no_table(value):
    assert list(extra_tables({"extra": value, "saturation_current": [{"ampere": 1.0}]}, 0.95)) == []


def test_sentences_and_single_numbers_are_told():
    extras = {
        "remark": "It remembers.",
        "left_out_error": 0.0123456,
        "is_monotone": True,
        "sentences": "shown elsewhere",
    }
    assert list(extra_texts(extras)) == ["It remembers.", "Left out error: 0.01235.", "Is monotone: yes."]
