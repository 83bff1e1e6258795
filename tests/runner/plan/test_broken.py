"""Broken plans and benches, one a line of broken/cases.yaml: each shown where it stands, in words that say what to do."""

from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

import pytest
import yaml

from runner.errors import InputError
from runner.plan import load_bench, load_plan

CASES = yaml.safe_load((Path(__file__).parent / "broken" / "cases.yaml").read_text(encoding="utf-8"))


def test_there_are_at_least_thirty_kinds() -> None:
    assert len({case["name"] for case in CASES}) >= 30


def test_the_unbroken_files_are_whole(written: Callable[..., Path]) -> None:
    loaded = load_plan(written())
    assert (loaded.plan.title, loaded.bench.name) == ("A plan to break", "A bench to break")


@pytest.mark.parametrize("case", CASES, ids=lambda case: case["name"])
def test_a_broken_file_is_refused_with_the_place_and_what_to_do(
    case: Mapping[str, Any], written: Callable[..., Path]
) -> None:
    edits = dict(case["edits"])
    plan = written(**{case["change"].removesuffix(".yaml"): edits})
    with pytest.raises(InputError) as caught:
        load_plan(plan)
    first = caught.value.faults[0]
    shown_in = plan.parent / case["shown_in"]
    where, _, called = first.where.removeprefix(f"{shown_in}:").partition(": ")
    line, column = (int(number) for number in where.split(":"))
    text = shown_in.read_text(encoding="utf-8").splitlines()[line - 1]
    assert text[column - 1 :].startswith(case["at"])
    assert called == case.get("key", "")
    assert first.what == case["says"]
    assert len(caught.value.faults) == case["faults"]
    assert str(caught.value).count("\n") == case["faults"] - 1, "one line a fault"


@pytest.mark.parametrize(("words", "count"), [("; ", 1)], ids=["what is wrong; what to do"])
def test_every_message_says_what_to_do(words: str, count: int) -> None:
    assert all(case["says"].count(words) >= count for case in CASES)


def test_all_faults_of_both_files_come_at_once_in_the_order_in_which_they_stand(
    written: Callable[..., Path],
) -> None:
    plan = written(
        plan={
            "rest: 500 ms": "rest: 500",  # wrong by itself
            "rail: 12 V": "rial: 12 V",  # unknown, and therefore missing
            "to: 10 A, count: 11": "to: 16 A, count: 11",  # wrong only against limits.current
            "25 degC, 125 degC]": "25 degC, 149 degC]",  # against limits.chamber and limits.body
        },
        bench={"timeout: 5 s": "timeout: 5", "[-60 degC, 150 degC]": "[-20 degC, 150 degC]"},
    )
    with pytest.raises(InputError) as caught:
        load_plan(plan)
    called = [fault.where.rsplit(": ", 1)[-1] for fault in caught.value.faults]
    assert called == [
        "temperatures.at[0]",  # -40 degC, below the chamber of the bench
        "temperatures.at[2]",
        "pulse",
        "pulse.rial",
        "pulse.rest",
        "bias.current.to",
        "limits.body",
        "instruments.lcr.timeout",
    ]


def test_a_broken_section_hides_no_fault_of_the_others(written: Callable[..., Path]) -> None:
    plan = written(plan={"repeats: 8": "repeats: none", "body: 140 degC": "body: 100 degC"})
    with pytest.raises(
        InputError, match=r"pulse\.repeats: 'none' is no whole number(.|\n)*limits\.body: 100 degC"
    ):
        load_plan(plan)


def test_a_bench_alone_is_checked_too(written: Callable[..., Path]) -> None:
    bench = written(bench={"ramp: 5 A/s": "ramp: 5 A"}).parent / "bench.yaml"
    with pytest.raises(
        InputError, match=r"'5 A' is a current, not a rate of current; write for example '5 A/s'"
    ):
        load_bench(bench)
