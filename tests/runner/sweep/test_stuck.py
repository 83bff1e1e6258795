"""A sensor that stops, and sensors that only look like it."""

import random
from collections.abc import Iterable

import pytest

from runner.sweep.stuck import Manners

SEED = 3


def seen(readings: Iterable[float]) -> Manners:
    manners = Manners()
    for reading in readings:
        manners = manners.after(reading)
    return manners


def lively(count: int, *, step: float = 1e-3) -> list[float]:
    draws = random.Random(SEED)
    return [
        round(25.0 + draws.gauss(0, 0.02), 3) if step == 1e-3 else round(25.0 / step) * step
        for _ in range(count)
    ]


@pytest.mark.parametrize(
    ("readings", "is_stuck"),
    [
        (lively(200), False),
        (lively(40) + [25.013] * 9, False),
        (lively(40) + [25.013] * 12, True),
        (lively(10) + [25.013] * 12, False),  # too little is known of it
        ([25.0] * 500, False),  # it never moved; nobody can tell
        ([25.0, 25.0, 25.1] * 40 + [25.1] * 12, False),  # coarse: two of three readings are equal anyway
        (lively(40) + [25.013] * 12 + lively(1), False),  # and back again
        ([], False),
    ],
)
def test_manners(readings: list[float], is_stuck: bool) -> None:
    assert seen(readings).is_stuck is is_stuck
