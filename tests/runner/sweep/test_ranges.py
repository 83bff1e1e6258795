"""Digitizer settings for a pulse."""

import pytest

from runner.sweep.pulse_point import trip_level
from runner.sweep.ranges import choose_interval, choose_range, next_larger

INTERVALS = (5e-9, 1e-8, 2e-8, 5e-8, 1e-7)


@pytest.mark.parametrize(
    ("width", "interval"),
    [
        (1e-6, 5e-9),
        (7e-6, 5e-9),  # 8.75 us in 1800 samples of 5 ns = 9 us
        (8e-6, 1e-8),
        (20e-6, 2e-8),
        (1e-3, 1e-7),  # nothing is long enough: the longest there is
    ],
)
def test_the_shortest_interval_that_shows_the_whole_pulse(width: float, interval: float) -> None:
    assert choose_interval(width, intervals=INTERVALS, samples=2000, pretrigger_samples=200) == interval


@pytest.mark.parametrize(
    ("largest", "size"), [(0.04, 0.05), (0.05, 0.1), (0.17, 0.2), (0.18, 0.5), (9.0, 0.5)]
)
def test_the_smallest_range_with_headroom(largest: float, size: float) -> None:
    assert choose_range(largest, (0.05, 0.1, 0.2, 0.5)) == size


@pytest.mark.parametrize(("size", "larger"), [(0.05, 0.1), (0.2, 0.5), (0.5, None)])
def test_the_next_larger_range(size: float, larger: float | None) -> None:
    assert next_larger(size, (0.05, 0.1, 0.2, 0.5)) == larger


def test_the_comparator_stands_below_the_limit_by_what_a_short_adds_until_it_acts() -> None:
    # 12 V over a twentieth of 22 uH for 100 ns: 12 * 100e-9 / 1.1e-6 = 1.09 A.
    assert trip_level(18.0, rail=12.0, inductance=22e-6) == pytest.approx(0.98 * 18.0 - 1.09, abs=0.01)
    assert trip_level(18.0, rail=12.0, inductance=1e-6) == 0.85 * 18.0
