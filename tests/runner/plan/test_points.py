"""Points in order: temperature outermost, then part, then widths climbing, then bias."""

import math
from collections.abc import Callable, Sequence
from itertools import groupby, pairwise
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from runner.plan import Plan, expand, load_plan, parse_plan
from runner.plan.points import ROOM_DEGC

PART = "{{label: P{n}, inductance: 22 uH, rated_current: 6 A, resistance: 18 mohm}}"


def a_plan(
    *,
    at: Sequence[float] = (25.0,),
    parts: int = 1,
    order: str = "as written",
    pulse: str | None = "[2 us, 4 us]",
    bias: str | None = None,
) -> Plan:
    lines = [
        "title: t",
        "bench: b.yaml",
        "parts: [" + ", ".join(PART.format(n=n) for n in range(parts)) + "]",
        f"temperatures: {{at: [{', '.join(f'{t!r} degC' for t in at)}], order: {order}}}",
        "limits: {current: 90 A, body: 300 degC, rail: 16 V, pulse_energy: 5 mJ, chamber: [-80 degC, 200 degC],"
        " duration: 99 h}",
    ]
    if pulse:
        lines.append(f"pulse: {{rail: 12 V, width: {pulse}}}")
    if bias:
        lines.append(f"bias: {{current: {bias}, signal: {{frequency: 100 kHz, level: 50 mV}}}}")
    return parse_plan("\n".join(lines).encode(), "plan")


def test_the_order_of_the_design_by_hand() -> None:
    plan = a_plan(at=[85.0, 25.0], parts=2, bias="{at: [0 A, 5 A], both_ways: true}")
    programme = expand(plan)
    assert [leg.setpoint_degC for leg in programme.legs] == [85.0, 25.0]
    nan = "-"
    rows = [
        (p.plan_index, p.leg, p.part, p.method, nan if math.isnan(p.width) else p.width * 1e6,
         nan if math.isnan(p.bias) else p.bias, p.direction)
        for p in programme.points[:10]
    ]  # fmt: skip
    assert rows == [
        (0, 0, 0, "pulse", 2.0, nan, 0),
        (1, 0, 0, "pulse", 4.0, nan, 0),
        (2, 0, 0, "bias", nan, 0.0, 1),
        (3, 0, 0, "bias", nan, 5.0, 1),
        (4, 0, 0, "bias", nan, 0.0, -1),
        (5, 0, 1, "pulse", 2.0, nan, 0),
        (6, 0, 1, "pulse", 4.0, nan, 0),
        (7, 0, 1, "bias", nan, 0.0, 1),
        (8, 0, 1, "bias", nan, 5.0, 1),
        (9, 0, 1, "bias", nan, 0.0, -1),
    ]
    assert len(programme.points) == 20


def test_a_search_has_as_many_points_as_its_budget_and_no_values_yet() -> None:
    points = expand(a_plan(pulse="{seek: knee, from: 2 us, to: 9 us, budget: 5}")).points
    assert len(points) == 5
    assert all(p.sought and math.isnan(p.width) and math.isnan(p.bias) for p in points)


@pytest.mark.parametrize(
    ("at", "visited"),
    [
        ((125.0, -40.0, 25.0), (-40.0, 25.0, 125.0)),  # 63 K down, 102 K up: cold end first
        ((85.0, 0.0, -50.0), (85.0, 0.0, -50.0)),  # 62 K up, 73 K down: hot end first
        ((60.0, 85.0), (60.0, 85.0)),
        ((0.0, -40.0), (0.0, -40.0)),
    ],
)
def test_least_travel_by_hand(at: tuple[float, ...], visited: tuple[float, ...]) -> None:
    assert tuple(leg.setpoint_degC for leg in expand(a_plan(at=at, order="least travel")).legs) == visited


temperatures = st.lists(st.integers(-60, 150).map(float), min_size=1, max_size=6, unique=True)


@given(temperatures, st.integers(0, 1000))
def test_no_order_moves_the_chamber_less(at: list[float], seed: int) -> None:
    def travel(order: Sequence[float]) -> float:
        return sum(abs(b - a) for a, b in pairwise([ROOM_DEGC, *order]))

    best = travel([leg.setpoint_degC for leg in expand(a_plan(at=at, order="least travel")).legs])
    other = sorted(at, key=lambda t: hash((t, seed)))
    assert best <= travel(other) + 1e-9


@given(
    temperatures,
    st.integers(1, 3),
    st.lists(st.integers(1, 500), min_size=1, max_size=5, unique=True).map(sorted),
    st.lists(st.integers(0, 80), min_size=1, max_size=5, unique=True).map(sorted),
    st.booleans(),
)
def test_every_point_once_and_always_climbing(
    at: list[float], parts: int, widths: list[int], currents: list[int], both_ways: bool
) -> None:
    plan = a_plan(
        at=at,
        parts=parts,
        pulse=f"[{', '.join(f'{w} us' for w in widths)}]",
        bias=f"{{at: [{', '.join(f'{c} A' for c in currents)}], both_ways: {str(both_ways).lower()}}}",
    )
    programme = expand(plan)
    points = programme.points
    down = len(currents) - 1 if both_ways else 0
    assert len(points) == len(at) * parts * (len(widths) + len(currents) + down)
    assert [p.plan_index for p in points] == list(range(len(points)))
    assert [(p.leg, p.part) for p in points] == sorted((p.leg, p.part) for p in points)
    for _, group in groupby(points, key=lambda p: (p.leg, p.part)):
        group_points = list(group)
        fired = [p.width for p in group_points if p.method == "pulse"]
        biased = [p.bias for p in group_points if p.method == "bias"]
        assert fired == sorted(fired)
        assert [p.method for p in group_points] == ["pulse"] * len(fired) + ["bias"] * len(biased)
        up, back = biased[: len(currents)], biased[len(currents) :]
        assert up == sorted(up)
        assert back == up[-2::-1][: len(back)]
        directions = [p.direction for p in group_points if p.method == "bias"]
        assert directions == [1] * len(up) + [-1] * len(back)


def test_the_same_plan_gives_the_same_points(written: Callable[..., Path]) -> None:
    plan = load_plan(written()).plan
    assert repr(expand(plan)) == repr(expand(plan))
