"""`stop_at`: after which point a climb has seen enough."""

from dataclasses import replace

import pytest

from runner.sweep.look import Look
from runner.sweep.stopping import StopAt, judge_stop

LOOK = Look(
    width=1e-5,
    on_time=1e-5,
    peak=10.0,
    end_current=10.0,
    start_current=0.0,
    flux_linkage=1e-4,
    charge=5e-5,
    energy=6e-4,
    drive=12.0,
    end_drive=11.9,
    start_slope=1 / 22e-6,
    end_slope=1 / 11e-6,
    slope_error=0.0,
    growth=2.0,
)


@pytest.mark.parametrize(
    ("stop", "ends"),
    [
        (StopAt(), False),
        (StopAt(current=15.0), False),
        (StopAt(current=10.0), True),
        (StopAt(drop=0.6), False),
        (StopAt(drop=0.5), True),  # 22 uH have become 11 uH
        (StopAt(current=15.0, drop=0.4), True),
    ],
)
def test_stop_at(stop: StopAt, ends: bool) -> None:
    assert (judge_stop(LOOK, 1 / 22e-6, stop) is not None) is ends


def test_a_capture_without_slopes_ends_nothing() -> None:
    assert judge_stop(replace(LOOK, end_slope=0.0), 1 / 22e-6, StopAt(drop=0.1)) is None
