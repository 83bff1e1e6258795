"""Whole runs on a simulated bench in memory: what is recorded, how they end, and what the bench's own ledger says."""

import math
from collections.abc import Callable
from typing import Any

import pytest

from runner.errors import InputError
from runner.record import Flag, Journal, RecordError, open_run
from runner.sweep import Progress
from runner.sweep.memory_site import MemorySite
from runner.sweep.requests import StopAtOnce, StopRequests

MakeTrial = Callable[..., Any]


def assert_safe(site: MemorySite) -> None:
    ledger = site.bench.ledger()
    on = ledger["on"]
    assert (on["supply"], on["pulser"], on["bias"]) == (False, False, False)
    assert abs(on["bias_current"]) < 1e-3
    assert on["bank_voltage"] < 1.0
    assert on["relays"] == []
    assert on["chamber_setpoint"] == pytest.approx(25.0)
    assert ledger["relay_moves_under_current"] == 0
    assert ledger["relay_moves_on_charged_bank"] == 0
    assert ledger["paths_joined"] == 0
    assert ledger["parts_joined"] == 0


def assert_limits_kept(site: MemorySite, *, current: float = 18.0) -> None:
    largest = site.bench.ledger()["largest"]
    assert largest["current"] <= current
    assert largest["bank_voltage"] <= 16.0
    assert largest["pulse_energy"] <= 5e-3
    assert max(largest["body_degC"].values()) <= 140.0


def indices(trial: Any) -> list[int]:
    with open_run(trial.folder) as run:
        return [int(index) for index in run.points["plan_index"]]


def events(trial: Any, kind: str) -> list[str]:
    with open_run(trial.folder) as run:
        return [event.text for event in run.events if event.kind == kind]


def stop_after(points: int) -> tuple[StopRequests, Callable[[Progress], None]]:
    """Ctrl-C as soon as so many points are recorded."""
    requests = StopRequests()

    def watch(progress: Progress) -> None:
        if progress.done >= points and not requests.is_asked:
            requests.why = "stopped by Ctrl-C"

    return requests, watch


def test_a_whole_run_records_every_point_and_leaves_the_bench_safe(make_trial: MakeTrial) -> None:
    trial = make_trial(at="40 degC, 0 degC")
    site = trial.site()
    seen: list[Progress] = []
    outcome = trial.run(site, watch=seen.append)
    assert (outcome.status, outcome.points, outcome.flagged) == ("finished", 16, 0)
    assert indices(trial) == list(range(16))
    assert_safe(site)
    assert_limits_kept(site)
    assert seen[-1].done == seen[-1].total == 16
    assert seen[-1].remaining == pytest.approx(0.0, abs=1.0)
    with open_run(trial.folder) as run:
        assert run.state == "finished"
        # Copper law, IEC 60028: 18 mohm at 20 degC is 18 * (1 + 3.93e-3 * 20) = 19.41 mohm at 40 degC; meter 0.05 %,
        # body within 1 K of 40 degC.
        assert run.points["resistance"][0] == pytest.approx(19.41e-3, rel=0.006)
        assert len(run.chamber_log[0]) > 20


def test_a_stopped_run_resumed_has_the_points_of_an_unbroken_one(make_trial: MakeTrial) -> None:
    unbroken = make_trial(at="40 degC, 0 degC", name="unbroken")
    unbroken.run()
    trial = make_trial(at="40 degC, 0 degC", name="broken")
    for points in (2, 5, 9, 12):
        requests, watch = stop_after(points)
        site = trial.site()
        outcome = trial.run(site, resume=points > 2, watch=watch, requests=requests)
        assert outcome.status == "stopped"
        assert "Ctrl-C" in outcome.reason
        assert_safe(site)
    assert trial.run(resume=True).status == "finished"
    assert indices(trial) == indices(unbroken)
    with open_run(trial.folder) as run:
        everything = run.all_points
        assert len(everything["plan_index"]) == len(set(everything["plan_index"].tolist()))
        assert (everything["attempt"] == 1).all()
        assert len(run.sessions) == 5
        times = everything["start_time"]
        assert (times[1:] > times[:-1]).all()


def test_resuming_a_finished_run_does_nothing_and_is_finished(make_trial: MakeTrial) -> None:
    trial = make_trial()
    first = trial.run()
    site = trial.site()
    again = trial.run(site, resume=True)
    assert (again.status, again.points) == ("finished", first.points)
    assert site.bench.ledger()["pulses"] == 0


def test_a_resume_says_when_another_instrument_answers(make_trial: MakeTrial) -> None:
    trial = make_trial()
    requests, watch = stop_after(4)
    trial.run(watch=watch, requests=requests)
    site = trial.site()
    site.bench.control({"do": "fault", "role": "lcr", "kind": "identity", "count": 0})
    trial.run(site, resume=True)
    assert any("lcr" in text and "did before" in text for text in events(trial, "start"))


def test_stop_at_is_not_forgotten_by_a_resume(make_trial: MakeTrial) -> None:
    def with_stop(text: str) -> str:
        return text.replace("conditioning: 1", "conditioning: 1, stop_at: {current: 4 A}")

    trial = make_trial(plan=with_stop)
    requests, watch = stop_after(4)
    trial.run(watch=watch, requests=requests)
    assert trial.run(resume=True).status == "finished"
    # 3 us gives 1.6 A, 8 us 4.4 A: the third width is left out, before and after.
    assert indices(trial) == [0, 1, 3, 4, 5, 6, 7]


def test_a_second_stop_breaks_off_and_the_point_in_flight_is_measured_again(make_trial: MakeTrial) -> None:
    trial = make_trial()
    site = trial.site()
    pulses = {"left": 12}
    world = site.bench.world
    fire = world.fire

    def breaking(*arguments: Any, **named: Any) -> Any:
        pulses["left"] -= 1
        if pulses["left"] == 0:
            raise StopAtOnce("stopped at once by Ctrl-C")
        return fire(*arguments, **named)

    world.fire = breaking  # type: ignore[method-assign]
    outcome = trial.run(site)
    assert outcome.status == "stopped"
    assert "at once" in outcome.reason
    assert_safe(site)
    assert trial.run(resume=True).status == "finished"
    assert indices(trial) == list(range(8))


def test_a_fault_of_ours_crashes_only_after_the_bench_is_safe(make_trial: MakeTrial) -> None:
    trial = make_trial()
    site = trial.site()

    def watch(progress: Progress) -> None:
        if progress.phase == "pulse":
            raise ZeroDivisionError("a bug")

    with pytest.raises(ZeroDivisionError):
        trial.run(site, watch=watch)
    assert_safe(site)
    assert "ZeroDivisionError: a bug" in events(trial, "stop")[0]


def test_a_full_disk_stops_the_run_safely_and_loses_nothing(
    make_trial: MakeTrial, monkeypatch: pytest.MonkeyPatch
) -> None:
    trial = make_trial()
    site = trial.site()
    real, full = Journal.add_point, {"after": 4}

    def add_point(self: Journal, *arguments: Any, **named: Any) -> int:
        full["after"] -= 1
        if full["after"] < 0:
            raise RecordError("database or disk is full")
        return real(self, *arguments, **named)

    monkeypatch.setattr(Journal, "add_point", add_point)
    outcome = trial.run(site)
    assert (outcome.status, outcome.points) == ("stopped", 4)
    assert "full" in outcome.reason
    assert_safe(site)
    monkeypatch.undo()
    monkeypatch.setattr("runner.sweep.night.start_consolidation", lambda folder: _Rebuilt())
    assert trial.run(resume=True).status == "finished"
    assert indices(trial) == list(range(8))


class _Rebuilt:
    returncode = 0

    def poll(self) -> int:
        return 0

    def communicate(self) -> tuple[str, str]:
        return "", ""


def test_the_plans_duration_ends_a_run(make_trial: MakeTrial) -> None:
    trial = make_trial(
        at="40 degC, 0 degC", plan=lambda text: text.replace("duration: 14 h", "duration: 40 min")
    )
    # The forecast refuses a plan that needs longer; what is tried here is a chamber slower than its bench file says.
    site = MemorySite(trial.loaded)
    site.bench.world.chamber.ramp /= 20
    outcome = trial.run(site)
    assert outcome.status == "stopped"
    assert "duration" in outcome.reason
    assert_safe(site)


@pytest.mark.parametrize("kind", ["open", "short"])
@pytest.mark.parametrize("after", [0, 1, 3, 8, 12])
def test_a_part_that_fails_ends_its_own_points_only(make_trial: MakeTrial, kind: str, after: int) -> None:
    trial = make_trial(parts=(1, 2), at="40 degC, 0 degC")
    site = trial.site()
    site.bench.control({"do": "fault", "role": "part", "kind": kind, "channel": 1, "after": after})
    outcome = trial.run(site)
    assert outcome.status == "finished"
    assert_safe(site)
    assert_limits_kept(site)
    with open_run(trial.folder) as run:
        points = run.all_points
        flags = Flag.PART_OPEN if kind == "open" else Flag.PART_SHORT
        failed = points["part"][(points["quality"] & int(flags)) != 0]
        assert set(failed.tolist()) == {0}
        well = points["quality"][points["part"] == 1]
        assert len(well) == 16
        assert not well.any()


def test_several_parts_share_one_soak(make_trial: MakeTrial) -> None:
    trial = make_trial(parts=(1, 2, 3))
    site = trial.site()
    assert trial.run(site).points == 24
    assert_safe(site)
    assert len(events(trial, "soak")) == 3
    with open_run(trial.folder) as run:
        assert len([leg for leg in run.legs if not math.isnan(leg.end)]) == 1


def test_a_sought_knee_takes_places_of_its_budget_and_says_why(make_trial: MakeTrial) -> None:
    pulse = (
        "pulse: {rail: 12 V, width: {seek: knee, from: 3 us, to: 22 us, budget: 14, until: {isat: 2 %}}, "
        "repeats: 3, rest: 200 ms, conditioning: 1}"
    )
    bias = (
        "bias: {current: {seek: knee, from: 0 A, to: 12 A, budget: 14, until: {isat: 2 %}}, "
        "signal: {frequency: 100 kHz, level: 50 mV}}"
    )
    trial = make_trial(methods=(pulse, bias))
    site = trial.site()
    outcome = trial.run(site)
    assert outcome.status == "finished"
    assert_limits_kept(site)
    with open_run(trial.folder) as run:
        points = run.points
        for method, first in ((1, 0), (2, 14)):
            mine = points["plan_index"][points["method"] == method]
            assert mine.tolist() == list(range(first, first + len(mine)))
            assert 5 <= len(mine) <= 14
    assert len(events(trial, "seek")) == outcome.points
    # Resumed, it proposes nothing more.
    assert trial.run(resume=True).points == outcome.points


def test_a_seek_that_was_broken_off_goes_on_as_if_it_had_not_been(make_trial: MakeTrial) -> None:
    bias = (
        "bias: {current: {seek: knee, from: 0 A, to: 12 A, budget: 14, until: {isat: 2 %}}, "
        "signal: {frequency: 100 kHz, level: 50 mV}}"
    )
    trial = make_trial(methods=(bias,))
    requests, watch = stop_after(4)
    trial.run(watch=watch, requests=requests)
    assert trial.run(resume=True).status == "finished"
    found = indices(trial)
    assert found == list(range(len(found)))


def test_a_plan_that_breaks_a_limit_touches_nothing(
    make_trial: MakeTrial, monkeypatch: pytest.MonkeyPatch
) -> None:
    from runner.sweep import carry_out

    trial = make_trial(plan=lambda text: text.replace("duration: 14 h", "duration: 10 min"))

    def launched(mapping: object) -> object:
        raise AssertionError("the bench was started")

    monkeypatch.setattr("runner.sweep.opening.launch", launched)
    with pytest.raises(InputError, match="duration"):
        carry_out(trial.loaded, trial.folder)
    assert not trial.folder.exists()


def test_a_run_folder_that_holds_a_run_is_not_written_to_again(make_trial: MakeTrial) -> None:
    trial = make_trial()
    trial.run()
    with pytest.raises(InputError, match="holds a run already"):
        trial.run()


def test_a_soak_that_gives_up_flags_its_points(make_trial: MakeTrial) -> None:
    # An offset of 8 K between the sensors: no fit makes the body end near the set-point.
    trial = make_trial(bench=lambda text: text + "  departures: {body_offset: 8 K}\n")
    outcome = trial.run()
    assert outcome.status == "finished"
    assert outcome.flagged == outcome.points == 8
    with open_run(trial.folder) as run:
        assert (run.points["quality"] & int(Flag.NOT_SETTLED)).all()
    assert "give up" in events(trial, "soak")[0]


def test_the_current_is_predicted_before_a_width_is_fired(make_trial: MakeTrial) -> None:
    # 10 us would take the part past 5 A (12 V * 10 us / 22 uH = 5.5 A); the climb ends before it.
    trial = make_trial(
        methods=(
            "pulse: {rail: 12 V, width: [3 us, 6 us, 10 us], repeats: 3, rest: 200 ms, conditioning: 1}",
        ),
        plan=lambda text: text.replace("channel: 1}", "channel: 1, limits: {current: 5 A}}"),
    )
    site = trial.site()
    outcome = trial.run(site)
    assert outcome.status == "finished"
    assert site.bench.ledger()["largest"]["current"] <= 5.0
    assert indices(trial) == [0, 1]
    assert "5 A" in events(trial, "climb_end")[0]


WARM = """
bias:
  current: {at: [0 A, 2 A, 8 A, 9 A], both_ways: true}
  settle: 20 s
  signal: {frequency: 100 kHz, level: 50 mV}
"""


def test_a_part_that_its_bias_has_warmed_rests_before_more_but_not_on_the_way_down(
    make_trial: MakeTrial,
) -> None:
    """8 A in 18 mohm are over 1 W, at 10 K/W and time constants of 15 and 60 s a few kelvin in the 20 s of a point."""

    def hot(text: str) -> str:
        return text.replace("{law: gapped,", "{law: gapped, thermal_resistance: 10 K/W,")

    def patient(text: str) -> str:
        return text.replace("duration: 14 h", "duration: 14 h, mean_power: 5 W")

    trial = make_trial(methods=(WARM,), bench=hot, plan=patient)
    site = trial.site()
    assert trial.run(site).status == "finished"
    assert_safe(site)
    rests = events(trial, "rest")
    assert len(rests) == 1  # after 8 A on the way up; after 9 A and 8 A the way leads down
    assert "K warmer than its soak left it" in rests[0]
    with open_run(trial.folder) as run:
        points = run.points
        began, ended, body = (points[name] for name in ("start_time", "end_time", "body_temperature"))
        assert points["bias_current_setpoint"].tolist() == [0, 2, 8, 9, 8, 2, 0]
        assert body[2] - body[1] > 1.0  # it warmed out of its band of 1 K
        assert began[3] - ended[2] > 20.0
        assert body[3] - body[2] < 4.0  # 9 A alone warm it by 8 K: it began cooler than 8 A had left it
        assert began[4] - ended[3] < 10.0
