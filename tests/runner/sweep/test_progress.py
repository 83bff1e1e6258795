"""What is left of a run."""

from dataclasses import replace

import pytest

from runner.sweep.progress import Pace, remaining

START = Pace(
    soak=(3000.0, 2000.0),
    points=(500.0, 500.0),
    leg=0,
    is_soaked=False,
    waited=0.0,
    share=0.0,
    seen_soak=0.0,
    seen_points=0.0,
)


def test_before_anything_is_seen_the_forecast_stands() -> None:
    assert remaining(START) == pytest.approx(6000.0)


def test_time_in_a_soak_is_taken_off() -> None:
    assert remaining(replace(START, waited=1000.0)) == pytest.approx(5000.0)


def test_a_soak_that_goes_on_beyond_its_forecast_is_never_over() -> None:
    assert remaining(replace(START, waited=9000.0)) > 3000.0


def test_what_was_slower_than_forecast_goes_on_being_slower() -> None:
    slow = replace(START, leg=1, is_soaked=False, seen_soak=6000.0, seen_points=500.0)
    quick = replace(slow, seen_soak=1500.0)
    assert remaining(slow) > 2500.0 > remaining(quick)


def test_at_the_end_nothing_is_left() -> None:
    end = replace(START, leg=1, is_soaked=True, share=1.0, seen_soak=5000.0, seen_points=1000.0)
    assert remaining(end) == pytest.approx(0.0)
