"""The remanence section: its series in order, what it needs of the bench, what it adds to the forecast."""

import itertools
from collections.abc import Callable
from pathlib import Path

import pytest

from runner.errors import InputError
from runner.plan import demagnetising_widths, expand, forecast, load_plan

Written = Callable[..., Path]
STUDY = (
    "remanence: {width: 10 us, shots: 5, demagnetise: alternating pulses, polarities: both,"
    " offset: [-20 A turns, 0 A, 20 A turns], winding: 10}\nlimits:"
)
BENCH = {
    "maximum: {width: 1 ms}": "maximum: {width: 1 ms}, polarities: both",
    "paths: {pulse: 201, bias: 202}": "paths: {pulse: 201, bias: 202, offset: 204}",
}


def test_every_polarity_is_measured_without_an_offset_and_with_each(written: Written) -> None:
    plan = load_plan(written(plan={"limits:": STUDY}, bench=BENCH)).plan
    assert plan.remanence is not None
    assert plan.remanence.offset == (-20.0, 0.0, 20.0)
    points = [point for point in expand(plan).points if point.leg == 0]
    series = [point for point in points if point.method == "remanence"]
    # 20 A turns in 10 turns are 2 A.
    assert [(p.direction, p.ampere_turns, p.bias) for p in series] == [
        (1, 0.0, 0.0), (-1, 0.0, 0.0), (1, -20.0, -2.0), (-1, -20.0, -2.0), (1, 20.0, 2.0), (-1, 20.0, 2.0),
    ]  # fmt: skip
    assert {p.width for p in series} == {10e-6}
    methods = [point.method for point in points]
    assert methods == sorted(methods, key=["pulse", "remanence", "bias"].index)


def test_the_forecast_counts_the_study(written: Written) -> None:
    without = load_plan(written(bench=BENCH))
    plain = forecast(without.plan, without.bench)
    loaded = load_plan(written(plan={"limits:": STUDY}, bench=BENCH))
    found = forecast(loaded.plan, loaded.bench)
    assert found.points - plain.points == 3 * 6
    assert found.captures - plain.captures == 3 * 6 * 5
    # Each of the 18 series rests half a second after every pulse of its train and its shots.
    pulses = len(demagnetising_widths(10e-6)) + 5
    assert found.times.points - plain.times.points >= 18 * pulses * 0.5
    assert found.disk_bytes > plain.disk_bytes


def test_a_test_pulse_that_passes_a_limit_is_seen_before_the_run(written: Written) -> None:
    loaded = load_plan(written(plan={"limits:": STUDY.replace("10 us", "40 us")}, bench=BENCH))
    broken = {limit.name for limit in forecast(loaded.plan, loaded.bench).broken}
    assert "limits.current" in broken  # 12 V, 22 uH, 40 us: more than 18 A even without saturation


@pytest.mark.parametrize(
    ("study", "bench", "says"),
    [
        (STUDY, {}, r"remanence\.polarities: the bench's fixture cannot reverse the pulse"),
        (
            STUDY,
            dict(list(BENCH.items())[:1]),
            r"remanence\.offset: the bench's multiplexer does not connect",
        ),
        (
            STUDY.replace(", winding: 10", ""),
            BENCH,
            "remanence: 'offset' is in ampere-turns; add 'winding: 10'",
        ),
        (
            STUDY.replace("winding: 10", "winding: 1"),
            BENCH,
            r"-20 A turns are 20 A in 1 turns, above 'limits.current'",
        ),
        (STUDY.replace("10 us", "2 ms"), BENCH, "2 ms is longer than the pulser's maximum"),
        (STUDY.replace("both", "forward"), BENCH, "alternating pulses need both polarities"),
        (STUDY.replace("winding: 10", "winding: 0"), BENCH, "winding"),
        (STUDY.replace("shots: 5", "shots: 1"), BENCH, "shots"),
    ],
)
def test_what_cannot_be_done_is_said(written: Written, study: str, bench: dict[str, str], says: str) -> None:
    with pytest.raises(InputError, match=says):
        load_plan(written(plan={"limits:": study}, bench=bench))


def test_the_study_needs_the_pulse_section(written: Written, base: dict[str, str]) -> None:
    pulse = base["plan.yaml"][base["plan.yaml"].index("pulse:\n") : base["plan.yaml"].index("bias:\n")]
    with pytest.raises(InputError, match="takes rail and rest of its pulses from 'pulse'"):
        load_plan(written(plan={pulse: "", "limits:": STUDY}, bench=BENCH))


def test_the_train_begins_with_the_whole_pulse_and_ends_with_next_to_nothing() -> None:
    widths = demagnetising_widths(20e-6)
    assert widths[0] == 20e-6
    assert all(b < a for a, b in itertools.pairwise(widths))
    assert 0.02 < widths[-1] / widths[0] < 0.04
