"""The way to the safe state, on instruments that note what they are told and fail on demand."""

import math
from typing import Any

import pytest

from drivers import NoReply
from runner.sweep.safe_state import DISCHARGED, SafeRule, discharge_time, reach_safe_state

RULE = SafeRule(bleed=20.0, highest_rail=16.0, ramp=5.0, chamber_degC=25.0)


class Clock:
    is_simulated = True

    def __init__(self) -> None:
        self.time = 0.0

    def now(self) -> float:
        return self.time

    def sleep(self, seconds: float) -> float:
        self.time += seconds
        return self.time


class Role:
    """One instrument of a bench whose bank discharges through its bleeder once the rail is off."""

    def __init__(self, bench: "FakeBench", role: str) -> None:
        self.bench, self.role = bench, role
        self.failing = 0  # calls that fail before it works again; infinite if it never does
        self.safe_works = True

    def __getattr__(self, name: str) -> Any:
        def call(*arguments: Any) -> Any:
            if name == "reconnect":
                return None
            if self.failing > 0 and not (name == "safe" and self.safe_works):
                self.failing -= 1
                raise NoReply(self.role, "FAKE", "no reply")
            return self.bench.told(self.role, name, *arguments)

        return call


class FakeBench:
    def __init__(self, *, bank: float = 12.0, bias: float = 8.0, bleeds: bool = True) -> None:
        self.clock = Clock()
        self.log: list[tuple[str, ...]] = []
        self.bias = bias
        self.bank = bank
        self.bleeds = bleeds
        self.rail_off_at = math.inf
        self.roles = {
            role: Role(self, role) for role in ("supply", "pulser", "bias_source", "chamber", "multiplexer")
        }

    def voltage(self) -> float:
        if not self.bleeds:
            return self.bank
        return self.bank * math.exp(-max(self.clock.time - self.rail_off_at, 0.0) / RULE.bleed)

    def told(self, role: str, name: str, *arguments: Any) -> Any:
        if role == "supply" and name in ("off", "safe"):
            self.rail_off_at = min(self.rail_off_at, self.clock.time)
        if role == "bias_source" and name == "set":
            self.bias = arguments[0]
        if name == "measure":
            return (self.voltage(), 0.0) if role == "supply" else (self.bias, 0.0)
        self.log.append((role, name, *map(str, arguments)))
        return None

    def walk(self, bank: float | None = 0.0) -> Any:
        return reach_safe_state(self.roles, RULE, self.clock, bank=bank)

    def order(self) -> list[str]:
        return [f"{role}.{name}" for role, name, *_ in self.log]


def test_the_steps_come_in_the_order_of_danger() -> None:
    bench = FakeBench()
    report = bench.walk()
    assert report.is_confirmed
    steps = [step for step in bench.order() if not step.endswith(".set") or step.startswith("chamber")]
    assert steps == ["pulser.off", "bias_source.off", "supply.off", "multiplexer.open_all", "chamber.set"]


def test_the_bias_is_ramped_and_not_cut() -> None:
    bench = FakeBench(bias=8.0)
    bench.walk()
    currents = [
        float(arguments[0]) for role, name, *arguments in bench.log if (role, name) == ("bias_source", "set")
    ]
    assert currents[-1] == 0.0
    assert all(later < earlier for earlier, later in zip([8.0, *currents], currents, strict=False))
    assert (
        max(earlier - later for earlier, later in zip([8.0, *currents], currents, strict=False)) <= 1.0 + 1e-9
    )


def test_the_relays_wait_for_the_bleeder() -> None:
    bench = FakeBench(bank=12.0)
    bench.walk()
    assert bench.voltage() <= 1.1 * DISCHARGED
    # 12 V to 0.5 V at a time constant of 20 s: 20 s * ln 24.
    assert discharge_time(12.0, 20.0) == pytest.approx(63.56, abs=0.01)
    assert bench.clock.time == pytest.approx(63.56, abs=5.0)


def test_a_bank_that_does_not_bleed_keeps_the_relays_closed_and_is_reported() -> None:
    bench = FakeBench(bleeds=False)
    report = bench.walk()
    assert "multiplexer.open_all" not in bench.order()
    assert not report.is_confirmed
    assert "bleeder" in str(report)
    assert bench.order()[-1] == "chamber.set"


@pytest.mark.parametrize("role", ["pulser", "bias_source", "supply", "multiplexer", "chamber"])
@pytest.mark.parametrize("failures", [1, math.inf])
def test_an_instrument_that_fails_holds_up_nobody_else(role: str, failures: float) -> None:
    bench = FakeBench()
    bench.roles[role].failing = failures  # type: ignore[assignment]  # infinite is for ever
    bench.roles[role].safe_works = failures == 1
    report = bench.walk()
    done = set(bench.order())
    others = {
        "pulser": "pulser.off",
        "bias_source": "bias_source.off",
        "supply": "supply.off",
        "multiplexer": "multiplexer.open_all",
        "chamber": "chamber.set",
    }
    stays_on = failures != 1 and role in ("supply", "bias_source")
    if stays_on:  # nobody knows that it is off: a relay would be moved on a charged bank or under current
        assert others.pop("multiplexer") not in done
        assert "relays not opened" in str(report)
    assert {step for name, step in others.items() if name != role} <= done
    assert report.is_confirmed is (failures == 1)


def test_the_dialects_own_safe_state_is_the_last_resort() -> None:
    bench = FakeBench()
    bench.roles["pulser"].failing = math.inf  # type: ignore[assignment]
    report = bench.walk()
    assert report.is_confirmed
    assert "pulser.safe" in bench.order()


def test_a_bank_whose_voltmeter_is_lost_gets_the_longest_time_it_could_need() -> None:
    bench = FakeBench()
    bench.roles["supply"].failing = math.inf  # type: ignore[assignment]
    report = bench.walk()  # it still takes its safe-state messages, so that the rail is off
    assert bench.clock.time >= discharge_time(RULE.highest_rail, RULE.bleed)
    assert "multiplexer.open_all" in bench.order()
    assert not report.is_confirmed


@pytest.mark.parametrize("reads", [0.2, math.inf, math.nan])
def test_a_voltmeter_is_not_believed_when_it_says_that_the_bank_is_empty(reads: float) -> None:
    bench = FakeBench(bank=12.0)
    bench.voltage = lambda: reads  # type: ignore[method-assign]
    bench.walk(bank=12.0)
    assert bench.clock.time >= discharge_time(12.0, RULE.bleed)
    bench = FakeBench(bank=12.0)
    bench.voltage = lambda: reads  # type: ignore[method-assign]
    bench.walk(bank=None)
    assert bench.clock.time >= discharge_time(RULE.highest_rail, RULE.bleed)


def test_even_a_fault_of_ours_in_one_step_does_not_stop_the_walk() -> None:
    class Broken:
        def __getattr__(self, name: str) -> Any:
            raise TypeError("a bug")

    bench = FakeBench()
    report = reach_safe_state({**bench.roles, "pulser": Broken()}, RULE, bench.clock)
    assert "supply.off" in bench.order()
    assert not report.is_confirmed


def test_a_bench_without_a_bank_has_nothing_to_wait_for() -> None:
    bench = FakeBench(bias=0.0)
    del bench.roles["supply"], bench.roles["pulser"]
    assert bench.walk().is_confirmed
    assert bench.clock.time == 0.0
