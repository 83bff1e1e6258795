"""What the report says in sentences."""

import math

import pytest

from runner.report.facts import Estimate, Facts, Knee, MethodFacts, PartFacts
from runner.report.words import (
    headline,
    headline_drop,
    hold_together,
    plan_in_words,
    printed,
    read_plan,
    short_margin,
)

NAN = math.nan


def knee(temperature, value, low, high, *, drop=0.3, status="measured"):
    return Knee(temperature, drop, "same temperature", status, Estimate(value, low, high))


def part(*knees, rated=6.0, method="pulse"):
    made = MethodFacts(method, None, (), tuple(knees), (), {})
    return PartFacts(0, "part_00", "DRUM-22-A", rated, (made,), (), {})


FACTS = Facts("title", 0.95, True, ())


def test_the_headline_gives_the_lowest_current_with_interval_and_margin():
    text = headline(FACTS, part(knee(25.1, 8.24, 8.20, 8.28), knee(124.9, 6.9, 6.87, 6.93)))
    assert text == (
        "DRUM-22-A: the saturation current (30 % drop of the differential inductance, counted from the initial value at "
        "the same temperature) is lowest at 124.9 °C: 6.900 A (95 % interval 6.870 A to 6.930 A), 15 % above the rated "
        "6 A."
    )


@pytest.mark.parametrize(
    ("made", "words"),
    [
        (part(knee(25, 5.0, 4.9, 5.1)), "17 % below the rated 6 A."),
        (part(knee(25, 6.04, 6.02, 6.06)), "0.7 % above the rated 6 A."),
        (part(knee(25, 6.02, 5.9, 6.1)), "which cannot be told apart from the rated 6 A."),
        (part(knee(25, 5.0, 4.9, 5.1), rated=NAN), "(95 % interval 4.90 A to 5.10 A)."),
        (
            part(knee(-40, NAN, 10.0, NAN, status="not reached"), knee(25, 8.0, 7.9, 8.1)),
            "It was not reached at −40 °C.",
        ),
        (
            part(
                knee(-40, NAN, 10.0, NAN, status="not reached"), knee(25, NAN, 9.5, NAN, status="not reached")
            ),
            "was not reached at any temperature; the largest current seen was at least 9.5 A.",
        ),
        (
            part(knee(-40, NAN, 7.0, NAN, status="not reached"), knee(25, 8.0, 7.9, 8.1)),
            "is lowest of where it was reached at 25.0 °C",
        ),
        (part(), "no saturation current was extracted."),
        (part(knee(25, 5.0, 4.9, 5.1), method="bias"), "drop of the incremental inductance"),
    ],
)
def test_the_headline_says_what_is_not_known(made, words):
    assert words in headline(FACTS, made)


@pytest.mark.parametrize(
    ("drops", "reached", "expected"),
    [
        ((0.1, 0.2, 0.3), (0.1,), 0.3),
        ((0.1, 0.2), (0.1, 0.2), 0.2),
        ((0.1, 0.4), (0.1,), 0.1),
        ((0.1, 0.4), (), 0.4),
    ],
)
def test_the_headline_speaks_of_the_usual_drop_or_of_the_largest_reached(drops, reached, expected):
    knees = [
        knee(25, 5.0, 4.9, 5.1, drop=d)
        if d in reached
        else knee(25, NAN, 9.0, NAN, drop=d, status="not reached")
        for d in drops
    ]
    assert headline_drop(part(*knees).methods[0]) == expected


@pytest.mark.parametrize(
    ("made", "expected"),
    [
        (knee(25, 8.4, 8.366, 8.434), "+40.0 %"),  # 8.4/6 - 1; half-width 0.57 %: one digit is a tenth
        (knee(25, 5.7, 5.4, 6.0), "−5 %"),
        (knee(25, 6.05, 5.97, 6.13), "+0.8 ± 1.3 %"),  # the sign is not certain
        (knee(25, NAN, 9.0, NAN, status="not reached"), "> +50 %"),
        (knee(25, NAN, NAN, NAN, status="not reached"), "–"),
    ],
)
def test_a_margin_shows_the_digits_it_has(made, expected):
    assert short_margin(made, 6.0) == expected


@pytest.mark.parametrize(
    ("written", "expected"),
    [
        ("-40 degC", "−40 °C"),
        ("22 uH", "22 µH"),
        ("18 mohm", "18 mΩ"),
        ("0.5 ohm", "0.5 Ω"),
        ("52 mm^2", "52 mm²"),
        ("2 K/min", "2 K/min"),
        ("30 %", "30 %"),
        ("10 us", "10 µs"),
        ("supply", "supply"),
        (True, "yes"),
        (8, "8"),
    ],
)
def test_values_of_a_plan_are_printed_as_in_a_book(written, expected):
    assert printed(written) == expected


def test_a_plan_is_told_part_by_part():
    told = dict(
        plan_in_words(
            read_plan(
                b"part: {label: P, inductance: 22 uH, rated_current: 6 A, resistance: 18 mohm, "
                b"core: {turns: 15, area: 52 mm^2}}\n"
                b"temperatures: {at: [-40 degC, 25 degC], soak: {within: 1 K, give_up: 2 h}}\n"
                b"pulse: {rail: 12 V, width: {seek: knee, from: 2 us, to: 20 us, budget: 18, "
                b"until: {isat: 0.5 %}}, repeats: 8}\n"
                b"bias: {current: {from: 0 A, to: 10 A, count: 21, both_ways: true}}\n"
                b"limits: {chamber: [-45 degC, 130 degC]}\n"
            )
        )
    )
    assert told["Part"] == "P: 22 µH nominal; rated 6 A; 18 mΩ at 20 °C; core: turns 15, area 52 mm²"
    assert told["Temperatures"] == "−40 °C and 25 °C"
    assert told["Soak at each temperature"] == "within 1 K, given up after 2 h"
    assert told["Pulse method"].startswith("rail 12 V; width sought at the knee: from 2 µs, to 20 µs")
    assert "8 repeats" in told["Pulse method"]
    assert told["Bias method"] == "current at 21 values from 0 A to 10 A, up and down again"
    assert told["Limits in software"] == "chamber −45 °C to 130 °C"


@pytest.mark.parametrize("data", [b"a: [", b"\xff\xfe\x00", b"- 1\n- 2\n", b""])
def test_a_plan_that_cannot_be_read_is_told_as_nothing(data):
    assert list(plan_in_words(read_plan(data))) == []


def test_no_line_ends_between_a_number_and_its_unit():
    assert hold_together("from −45 °C to 130 °C in 2 h at 12 V, 30 % and 8 repeats") == (
        "from −45\N{NO-BREAK SPACE}°C to 130\N{NO-BREAK SPACE}°C in 2\N{NO-BREAK SPACE}h at 12\N{NO-BREAK SPACE}V, "
        "30\N{NO-BREAK SPACE}% and 8 repeats"
    )
