"""A short form of the accuracy study, with its own bars: a fit that has become worse is seen in the suite.

The seeds are fixed, so nothing here is left to chance but the draw of them, once. What room the bars have is for that: the
study's own for coverage and, for the size of the intervals, a thousandth on either side of chi-square.
"""

import copy

import numpy as np
import pytest
from scipy.stats import chi2

TWELVE = range(10)
EIGHT = range(10_000, 10_004)
TRIALS = 5


@pytest.fixture(scope="module")
def benches(accuracy):
    """Ten of 12 bit and four of 8 bit: the first ones of the whole study."""
    return [accuracy.study_bench(seed, 12) for seed in TWELVE], [
        accuracy.study_bench(seed, 8) for seed in EIGHT
    ]


def test_a_few_benches_keep_the_bars_of_the_study(accuracy, benches):
    twelve, eight = benches
    assert {bench["law"] for bench in twelve + eight} >= {"gapped", "powder", "tanh", "stepped"}
    result = {"12 bit": accuracy.summarise(twelve), "8 bit": accuracy.summarise(eight)}
    assert accuracy.judge(result) == []


@pytest.mark.parametrize("quantity", ["30", "20", "10", "L0"])
def test_errors_are_as_large_as_the_intervals_say(benches, quantity):
    # One place a bench: its three share shunt and gains, and are no independent trials. Coverage alone would not see
    # intervals three times too wide: all of so few hold the truth anyway.
    rows = [bench["rows"][1] for sample in benches for bench in sample]
    over = np.array([row[quantity]["error"] / row[quantity]["u"] for row in rows])
    low, high = chi2.ppf([0.001, 0.999], len(over))
    assert low < float(np.sum(over**2)) < high


@pytest.mark.parametrize("part", ["gapped", "powder"])
def test_errors_stay_near_the_bound_that_no_estimate_can_beat(accuracy, part):
    found = accuracy.efficiency(part, TRIALS)
    assert accuracy.judge({"efficiency": [found]}) == []
    # Five trials scatter by a third; far below the bound somebody has told the fit the truth.
    assert found["ratio"] > chi2.ppf(0.001, TRIALS) ** 0.5 / TRIALS**0.5


@pytest.fixture
def kept(accuracy):
    """Made-up results of the whole study, each figure just inside its bar."""
    coverage = {"coverage cold": 0.921, "coverage room": 0.95, "coverage hot": 0.979, "missing": 0}
    result = {
        "12 bit": {"benches": 200, "30": {"median": 0.00199, "p95": 0.00599, **coverage}},
        "8 bit": {"benches": 200, "30": {"median": 0.00499, "p95": 0.01499, **coverage}},
        "efficiency": [{"part": "gapped", "ratio": 1.99}, {"part": "powder", "ratio": 1.99}],
    }
    assert accuracy.judge(result) == []
    return result


SAMPLE_FAULTS = {
    "median": ({"12 bit": 0.00201, "8 bit": 0.00501}, "median"),
    "p95": ({"12 bit": 0.00601, "8 bit": 0.01501}, "95th percentile"),
    "missing": ({"12 bit": 1, "8 bit": 1}, "1 legs without"),
    "coverage cold": ({"12 bit": 0.919, "8 bit": 0.919}, "cold"),
    "coverage room": ({"12 bit": 0.981, "8 bit": 0.981}, "room"),
    "coverage hot": ({"12 bit": 0.919, "8 bit": 0.981}, "hot"),
}


@pytest.mark.parametrize("sample", ["12 bit", "8 bit"])
@pytest.mark.parametrize("figure", SAMPLE_FAULTS)
def test_each_bar_that_is_broken_is_named_alone(accuracy, kept, sample, figure):
    values, words = SAMPLE_FAULTS[figure]
    kept[sample]["30"][figure] = values[sample]
    (said,) = accuracy.judge(kept)
    assert said.startswith(f"{sample}: ")
    assert words in said


def test_a_poor_efficiency_is_named(accuracy, kept):
    kept["efficiency"][1]["ratio"] = 2.01
    assert accuracy.judge(kept) == ["efficiency powder: 2.01"]


def test_all_that_is_broken_is_named_at_once(accuracy, kept):
    for sample in ("12 bit", "8 bit"):
        for figure, (values, _) in SAMPLE_FAULTS.items():
            kept[sample]["30"][figure] = values[sample]
    for one in kept["efficiency"]:
        one["ratio"] = 5.0
    # Of either sample errors, missing legs and three places; two efficiencies.
    assert len(accuracy.judge(kept)) == 2 * (1 + 1 + 3) + 2


def test_few_benches_give_coverage_room_for_chance_and_no_more(accuracy, kept):
    few = copy.deepcopy(kept)
    few["12 bit"]["benches"] = 10
    # Two standard deviations of 10 trials at 95 % are 13.8 %: eight of ten may hold, seven may not.
    few["12 bit"]["30"] |= {"coverage cold": 0.8, "coverage room": 1.0}
    assert accuracy.judge(few) == []
    few["12 bit"]["30"]["coverage cold"] = 0.7
    assert accuracy.judge(few) == ["12 bit: coverage 70.0% cold"]
