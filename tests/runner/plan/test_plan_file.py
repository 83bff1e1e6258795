"""What a plan holds after loading: plain values in SI, in the order in which they are used."""

from collections.abc import Callable
from itertools import pairwise
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st
from pydantic import ValidationError

from runner.errors import InputError
from runner.plan import load_plan, parse_plan
from runner.plan.grids import CurrentSeek, WidthSeek, evenly
from runner.plan.plan_file import Plan

Written = Callable[..., Path]

RANGE = "width: {from: 2 us, to: 20 us, count: 10}"
BIAS = "current: {from: 0 A, to: 10 A, count: 11, both_ways: true}"


def test_every_value_is_in_si(written: Written) -> None:
    plan = load_plan(written()).plan
    assert plan.parts[0].inductance == 22e-6
    assert plan.parts[0].channel == 1
    assert plan.temperatures.at_degC == (-40.0, 25.0, 125.0)
    assert plan.temperatures.soak.drift == pytest.approx(0.2 / 60)
    assert plan.temperatures.soak.give_up == 7200.0
    assert plan.pulse is not None
    assert plan.pulse.width == pytest.approx([2e-6 * n for n in range(1, 11)], rel=1e-12)
    assert plan.pulse.stop_at is not None
    assert (plan.pulse.stop_at.current, plan.pulse.stop_at.drop) == (12.0, 0.6)
    assert plan.limits.chamber_degC == (-45.0, 130.0)
    assert plan.limits.duration == 14 * 3600.0
    assert plan.extract.drops == (0.1, 0.3)
    assert (plan.extract.coverage, plan.extract.guard_band) == (0.95, 0.2)


def test_both_ways_climbs_and_comes_back_without_repeating_the_top(written: Written) -> None:
    bias = load_plan(written()).plan.bias
    assert bias is not None
    assert bias.current == tuple(float(n) for n in [*range(11), *range(9, -1, -1)])
    assert bias.both_ways
    assert bias.largest == 10.0


@pytest.mark.parametrize(
    ("current", "visited", "both_ways"),
    [
        ("[0 A, 2 A, 5 A]", (0.0, 2.0, 5.0), False),
        ("{at: [1 A, 3 A], both_ways: true}", (1.0, 3.0, 1.0), True),
        ("{at: [3 A], both_ways: true}", (3.0,), False),
        ("{to: 4 A, count: 3}", (0.0, 2.0, 4.0), False),
    ],
)
def test_bias_currents_may_be_written_in_several_shapes(
    written: Written, current: str, visited: tuple[float, ...], both_ways: bool
) -> None:
    bias = load_plan(written(plan={BIAS: f"current: {current}"})).plan.bias
    assert bias is not None
    assert bias.current == visited
    assert bias.both_ways is both_ways


def test_a_knee_may_be_sought_in_width_and_in_current(written: Written) -> None:
    plan = load_plan(
        written(
            plan={
                RANGE: "width: {seek: knee, from: 2 us, to: 20 us, budget: 12, until: {isat: 0.5 %}}",
                BIAS: "current: {seek: knee, from: 0 A, to: 10 A}",
            }
        )
    ).plan
    assert plan.pulse is not None
    assert plan.bias is not None
    assert isinstance(plan.pulse.width, WidthSeek)
    assert (plan.pulse.width.from_, plan.pulse.width.to, plan.pulse.width.budget) == (2e-6, 20e-6, 12)
    assert plan.pulse.width.until.isat == 0.005
    assert plan.pulse.longest == 20e-6
    assert isinstance(plan.bias.current, CurrentSeek)
    assert (plan.bias.current.budget, plan.bias.current.until.isat) == (18, 0.005)
    assert plan.bias.largest == 10.0


@pytest.mark.parametrize(
    ("seek", "says"),
    [
        ("{seek: knee, from: 2 us, to: 1 us}", "'to' is not above 'from'"),
        ("{seek: nee, from: 2 us, to: 9 us}", "did you mean 'knee'?"),
        ("{seek: knee, from: 2 us, to: 9 us, bugdet: 9}", "did you mean 'budget'?"),
        ("{seek: knee, from: 2 us, to: 9 us, budget: 2}", "2 is too small; write at least 4"),
        ("{seek: knee, from: 2 us, to: 9 us, until: {isat: 0.5}}", "0.5 has no unit; write '50 %'"),
    ],
)
def test_a_search_that_is_written_wrongly_is_shown(written: Written, seek: str, says: str) -> None:
    with pytest.raises(InputError) as caught:
        load_plan(written(plan={RANGE: f"width: {seek}"}))
    assert says in str(caught.value)


def test_alternating_pulses_need_both_polarities(written: Written) -> None:
    study = "remanence: {width: 10 us, demagnetise: alternating pulses}\nlimits:"
    with pytest.raises(InputError, match="alternating pulses need both polarities"):
        load_plan(written(plan={"limits:": study}))


def test_parts_are_numbered_in_order_unless_they_say_their_channel(base: dict[str, str]) -> None:
    part = "part: {label: A-22, inductance: 22 uH, rated_current: 6 A, resistance: 18 mohm}"
    parts = (
        "parts:\n"
        "- {label: a, inductance: 22 uH, rated_current: 6 A, resistance: 18 mohm}\n"
        "- {label: b, channel: 7, inductance: 22 uH, rated_current: 6 A, resistance: 18 mohm}\n"
        "- {label: c, inductance: 22 uH, rated_current: 6 A, resistance: 18 mohm, limits: {body: 130 degC}}\n"
    )
    plan = parse_plan(base["plan.yaml"].replace(part, parts).encode(), "p")
    assert [p.channel for p in plan.parts] == [1, 7, 3]
    assert plan.parts[2].limits is not None
    assert plan.parts[2].limits.body_degC == 130.0


def test_nothing_can_be_changed_after_loading(base: dict[str, str]) -> None:
    plan = parse_plan(base["plan.yaml"].encode(), "p")
    with pytest.raises(ValidationError, match="frozen"):
        plan.title = "another"  # type: ignore[misc]  # that is the point
    assert isinstance(plan, Plan)


def test_winding_resistance_follows_the_copper_law(base: dict[str, str]) -> None:
    # IEC 60028: 3.93e-3 1/K at 20 degC; 18 mohm * (1 + 3.93e-3 * 80) = 23.6592 mohm at 100 degC, by hand.
    part = parse_plan(base["plan.yaml"].encode(), "p").parts[0]
    assert part.resistance_at(20.0) == 0.018
    assert part.resistance_at(100.0) == pytest.approx(23.6592e-3, rel=1e-9)


@given(st.floats(1e-7, 1e-3), st.floats(1.1, 100.0), st.integers(2, 200))
def test_even_steps_climb_from_the_first_to_the_last(first: float, ratio: float, count: int) -> None:
    values = evenly(first, first * ratio, count)
    assert len(values) == count
    assert values[-1] == first * ratio
    assert values[0] == pytest.approx(first, rel=1e-11)
    assert all(b > a for a, b in pairwise(values))
