"""The remanence study in memory: the first shot really is one, limits hold in both polarities, nothing is left on."""

import itertools
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from mock_instruments.world import World
from runner.arrays import FloatArray
from runner.record import Flag, open_run
from runner.sweep.memory_site import MemorySite
from runner.sweep.requests import StopRequests

MakeTrial = Callable[..., Any]
PULSE = "pulse: {rail: 12 V, width: [3 us], repeats: 2, rest: 200 ms, conditioning: 1}"
STUDY = "remanence: {width: 19 us, shots: 4, demagnetise: alternating pulses, polarities: both}"
WITH_OFFSET = STUDY.replace("both}", "both, offset: [-12 A turns], winding: 10}")
UNPREPARED = "remanence: {width: 19 us, shots: 4, polarities: both}"


def series(trial: Any) -> list[FloatArray]:
    """Peak of each shot [A], in the direction of its pulse, for each series in order; and its row must say that polarity."""
    found = []
    with open_run(trial.folder) as run:
        for row in np.flatnonzero(run.points["method"] == 3):
            sign = np.sign(run.points["peak_current"][row])
            captures = run.captures(int(run.points["point"][row]))
            assert captures is not None
            found.append(np.asarray(sign * (sign * captures.current).max(axis=1)))
    return found


def assert_safe(site: MemorySite) -> None:
    ledger = site.bench.ledger()
    on = ledger["on"]
    assert (on["supply"], on["pulser"], on["bias"], on["relays"]) == (False, False, False, [])
    assert abs(on["bias_current"]) < 1e-3
    assert (ledger["relay_moves_under_current"], ledger["relay_moves_on_charged_bank"]) == (0, 0)
    assert (ledger["paths_joined"], ledger["parts_joined"]) == (0, 0)


def watched(monkeypatch: pytest.MonkeyPatch) -> list[tuple[float, int, float]]:
    """Width, polarity and what the core remembered [A] before each pulse that the world sees."""
    seen: list[tuple[float, int, float]] = []
    fire = World.fire

    def watching(world: World, width: float, *, polarity: int = 1, trip_current: float) -> Any:
        part = world.connected("pulse")
        seen.append((width, polarity, part.offset if part is not None else 0.0))
        return fire(world, width, polarity=polarity, trip_current=trip_current)

    monkeypatch.setattr(World, "fire", watching)
    return seen


def test_a_remembering_part_shows_it_and_a_gapped_one_does_not(make_trial: MakeTrial) -> None:
    trial = make_trial(parts=(1, 3), methods=(PULSE, STUDY))
    site = trial.site()
    outcome = trial.run(site)
    assert (outcome.status, outcome.points, outcome.flagged) == ("finished", 2 + 4, 0)
    drum_forward, drum_reversed, pot_forward, pot_reversed = series(trial)
    assert np.all(drum_forward > 0)
    assert np.all(drum_reversed < 0)
    for drum in (drum_forward, drum_reversed):
        assert np.ptp(drum) < 0.01 * abs(drum[0])  # noise of single samples
    for pot in (pot_forward, pot_reversed):
        assert abs(pot[0]) < 0.8 * abs(
            pot[-1]
        )  # virgin core: more flux to go, less current at the same width
    assert_safe(site)
    assert site.bench.ledger()["largest"]["current"] <= 18.0


def test_the_first_shot_is_the_first_pulse_on_a_demagnetised_core(
    make_trial: MakeTrial, monkeypatch: pytest.MonkeyPatch
) -> None:
    pulses = watched(monkeypatch)
    trial = make_trial(parts=(3,), methods=(PULSE, STUDY))
    trial.run()
    with open_run(trial.folder) as run:
        widths = run.points["pulse_width_setpoint"][run.points["method"] == 3]
    memory = 0.15 * 8.0  # A: the mock's POT, 15 % of a knee of 8 A
    # The last four pulses are the shots of the reversed series; the sixteen before them alternate and shrink.
    shots, train = pulses[-4:], pulses[-20:-4]
    assert [width for width, _, _ in shots] == pytest.approx([widths[-1]] * 4)
    assert [sign for _, sign, _ in shots] == [-1] * 4
    assert [sign for _, sign, _ in train] == [1, -1] * 8
    assert all(b < a for (a, _, _), (b, _, _) in itertools.pairwise(train))
    assert abs(shots[0][2]) < 0.01 * memory
    assert shots[1][2] < -0.9 * memory


def test_an_offset_field_is_on_for_its_shots_and_off_for_the_rest(make_trial: MakeTrial) -> None:
    trial = make_trial(parts=(3,), methods=(PULSE, WITH_OFFSET))
    site = trial.site()
    assert trial.run(site).status == "finished"
    plain_forward, plain_reversed, against, along = series(trial)
    # Negative ampere-turns work against a forward pulse and with a reversed one.
    assert against[0] < plain_forward[0]
    assert abs(along[0]) > abs(plain_reversed[0])
    with open_run(trial.folder) as run:
        rows = run.points["method"] == 3
        assert run.points["bias_current_setpoint"][rows] == pytest.approx([0.0, 0.0, -1.2, -1.2])
        # Read back by the source: 0.1 % gain, and not read where it is off.
        assert run.points["bias_current"][rows] == pytest.approx(
            [np.nan, np.nan, -1.2, -1.2], rel=3e-3, nan_ok=True
        )
    ledger = site.bench.ledger()
    assert ledger["offset_current"]["3"] == pytest.approx(1.2, rel=3e-3)
    assert ledger["largest"]["current"] <= 18.0
    assert_safe(site)


def test_without_demagnetising_the_shots_come_after_pulses_of_the_other_polarity(
    make_trial: MakeTrial, monkeypatch: pytest.MonkeyPatch
) -> None:
    pulses = watched(monkeypatch)
    trial = make_trial(parts=(3,), methods=(PULSE, UNPREPARED))
    assert trial.run().status == "finished"
    shots, before = pulses[-4:], pulses[-5]
    assert {sign for _, sign, _ in shots} == {-1}
    assert before[1] == 1
    assert shots[0][2] > 0.9 * 0.15 * 8.0
    forward, backward = series(trial)
    assert forward[0] < forward[-1]
    assert abs(backward[0]) < abs(backward[-1])


def test_a_series_with_a_fault_is_prepared_again(make_trial: MakeTrial) -> None:
    """The digitizer keeps a reply to itself among the shots: what is recorded still begins with a first shot."""
    trial = make_trial(parts=(3,), methods=(PULSE, STUDY))
    site = trial.site()

    struck: list[object] = []

    def watch(progress: Any) -> None:
        if (
            progress.done == 2 and not struck
        ):  # the forward series is recorded: strike among the shots of the other
            struck.append(
                site.bench.control({"do": "fault", "role": "digitizer", "kind": "silent", "after": 5})
            )

    outcome = trial.run(site, watch=watch)
    assert outcome.status == "finished"
    with open_run(trial.folder) as run:
        flags = [int(quality) for quality in run.points["quality"][run.points["method"] == 3]]
        said = [event.text for event in run.events if event.kind == "fault"]
    assert len(said) >= 1
    assert flags[0] == 0
    assert flags[1] & Flag.RETRIED
    _, backward = series(trial)
    assert abs(backward[0]) < 0.8 * abs(backward[-1])
    assert_safe(site)


def test_a_study_that_was_stopped_goes_on_with_its_next_series(make_trial: MakeTrial) -> None:
    trial = make_trial(parts=(3,), methods=(PULSE, STUDY))
    requests = StopRequests()

    def watch(progress: Any) -> None:
        if progress.done >= 2 and not requests.is_asked:
            requests.why = "stopped by Ctrl-C"

    first = trial.run(requests=requests, watch=watch)
    assert (first.status, first.points) == ("stopped", 2)
    second = trial.run(resume=True)
    assert (second.status, second.points) == ("finished", 3)
    forward, backward = series(trial)
    assert forward[0] > 0 > backward[0]
    assert abs(backward[0]) < 0.8 * abs(backward[-1])


def test_a_limit_cuts_the_test_pulse_and_never_breaks(make_trial: MakeTrial) -> None:
    def low(text: str) -> str:
        return text.replace("current: 18 A", "current: 8 A")

    trial = make_trial(parts=(3,), methods=(PULSE, STUDY), plan=low)
    site = trial.site()
    assert trial.run(site).status == "finished"
    assert site.bench.ledger()["largest"]["current"] <= 8.0
    with open_run(trial.folder) as run:
        widths = run.points["pulse_width_setpoint"][run.points["method"] == 3]
    assert np.all(widths < 19e-6)
    assert np.all(widths > 10e-6)


@pytest.mark.parametrize("kind", ["silent", "restart", "close"])
def test_a_source_that_fails_under_the_offset_field_leaves_nothing_on(
    make_trial: MakeTrial, kind: str
) -> None:
    trial = make_trial(parts=(3,), methods=(PULSE, WITH_OFFSET))
    site = trial.site()
    struck: list[object] = []

    def watch(progress: Any) -> None:
        if (
            progress.done == 4 and not struck
        ):  # the series against the field is recorded; the field is still on
            struck.append(
                site.bench.control({"do": "fault", "role": "bias_source", "kind": kind, "after": 3})
            )

    assert trial.run(site, watch=watch).status == "finished"
    with open_run(trial.folder) as run:
        assert any(event.kind == "fault" and "bias_source" in event.text for event in run.events)
    _, _, against, along = series(trial)
    assert abs(along[0]) > abs(against[0])
    assert site.bench.ledger()["largest"]["current"] <= 18.0
    assert_safe(site)
