"""Seeking a knee on laws whose knee is known in closed form.

Incremental inductance L0 / (1 + (i/Is)²) falls by a fraction d at i = Is sqrt(d / (1 - d)).
"""

import math
import random
from collections.abc import Callable

import pytest

from runner.sweep.seek import Done, Next, SeekRule, Sought, find_crossing, next_point

SEED = 5
KNEE, L0 = 7.5, 47e-6


def soft(current: float) -> float:
    return L0 / (1 + (current / KNEE) ** 2)


def flat(current: float) -> float:
    return L0


def sought(
    rule: SeekRule, law: Callable[[float], float] = soft, *, noise: float = 0.0, ceiling: float = math.inf
) -> tuple[list[Sought], Done]:
    draws = random.Random(SEED)
    history: list[Sought] = []
    while True:
        step = next_point(history, rule, ceiling=ceiling)
        if isinstance(step, Done):
            return history, step
        assert isinstance(step, Next)
        assert rule.low <= step.x <= min(rule.high, ceiling) * (1 + 1e-12)
        history.append(Sought(step.x, step.x, law(step.x) * (1 + noise * draws.gauss(0, 1))))
        assert len(history) <= rule.budget


RULE = SeekRule(low=0.0, high=20.0, budget=24, drops=(0.1, 0.2, 0.3), until=0.01)


@pytest.mark.parametrize("noise", [0.0, 1e-3, 3e-3])
def test_the_knee_is_found_within_the_interval_that_is_claimed(noise: float) -> None:
    history, done = sought(RULE, noise=noise)
    points = sorted(history, key=lambda one: one.x)
    for drop in RULE.drops:
        truth = KNEE * math.sqrt(drop / (1 - drop))
        crossing = find_crossing(points, drop)
        assert crossing is not None
        # Three standard uncertainties and the least there is: half of the interval asked for.
        assert abs(crossing.current - truth) <= 3 * crossing.uncertainty + 0.005 * truth
    if noise == 0.0:
        assert done.why == "the intervals at 3 of 3 drops are reached"
        assert len(history) < RULE.budget


def test_points_gather_near_the_knee() -> None:
    history, _ = sought(RULE)
    lowest = KNEE * math.sqrt(0.1 / 0.9)
    highest = KNEE * math.sqrt(0.3 / 0.7)
    near = [one for one in history if 0.7 * lowest < one.x < 1.3 * highest]
    assert len(near) >= len(history) / 2


def test_a_part_without_a_knee_uses_no_more_than_it_must() -> None:
    history, done = sought(RULE, flat)
    assert max(one.x for one in history) == RULE.high
    assert len(history) <= 10
    assert "0 of 3" in done.why


def test_a_ceiling_is_kept() -> None:
    history, _ = sought(RULE, ceiling=4.0)
    assert max(one.x for one in history) <= 4.0


def test_the_budget_ends_it() -> None:
    history, done = sought(SeekRule(0.0, 20.0, 8, (0.1, 0.2, 0.3), 1e-5), noise=3e-3)
    assert len(history) == 8
    assert "budget" in done.why


def test_the_order_of_the_history_does_not_matter() -> None:
    history, _ = sought(RULE, noise=1e-3)
    for count in range(1, len(history)):
        forward = next_point(history[:count], RULE)
        assert next_point(history[:count][::-1], RULE) == forward


def test_widths_climb_by_a_factor_from_the_lowest() -> None:
    rule = SeekRule(low=2e-6, high=20e-6, budget=18, drops=(0.3,), until=0.01)
    first = next_point([], rule)
    assert isinstance(first, Next)
    assert first.x == 2e-6
    second = next_point([Sought(2e-6, 1.0, L0)], rule)
    assert isinstance(second, Next)
    assert 2e-6 < second.x < 4e-6
