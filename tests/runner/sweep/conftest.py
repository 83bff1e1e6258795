"""Trials without sockets and without sleep: a short plan on a quick simulated bench in memory."""

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import pytest

from runner.plan import LoadedPlan, load_plan
from runner.shipped import shipped_plans
from runner.sweep import Outcome, Progress
from runner.sweep.carry_out import carry_out_at
from runner.sweep.memory_site import MemorySite
from runner.sweep.requests import StopRequests
from runner.sweep.resume import NOTHING, look_behind

SEED = 20261

PLAN = """
title: Trial
bench: bench.yaml
parts:
{parts}
temperatures: {{at: [{at}], soak: {{within: 1 K, drift: 0.3 K/min, hold: 1 min, give_up: 30 min}}}}
{methods}
limits:
  {{current: 18 A, body: 140 degC, rail: 16 V, pulse_energy: 5 mJ, chamber: [-45 degC, 130 degC],
  duration: 14 h}}
"""
PARTS = {
    1: "{label: DRUM, inductance: 22 uH, rated_current: 6 A, resistance: 18 mohm, channel: 1}",
    2: "{label: TOROID, inductance: 47 uH, rated_current: 5 A, resistance: 24 mohm, channel: 2}",
    3: "{label: POT, inductance: 33 uH, rated_current: 5 A, resistance: 21 mohm, channel: 3}",
}
PULSE = "pulse: {rail: 12 V, width: [3 us, 8 us, 12 us], repeats: 3, rest: 200 ms, conditioning: 1}"
BIAS = "bias: {current: {from: 0 A, to: 6 A, count: 3, both_ways: true}, signal: {frequency: 100 kHz, level: 50 mV}}"


def quick_bench(seed: int = SEED) -> str:
    """The shipped mock bench with a brisk chamber and light parts, so that a soak takes a few simulated minutes."""
    text = (shipped_plans() / "benches" / "mock.yaml").read_text()
    text = text.replace("ramp: 3 K/min", "ramp: 30 K/min").replace("seed: 20261", f"seed: {seed}")
    for law in ("gapped", "powder", "remanent"):
        text = text.replace(f"{{law: {law},", f"{{law: {law}, time_constants: [15 s, 60 s],")
    return text


@dataclass
class Trial:
    """One plan on one bench in memory, carried out as often as a test wants."""

    loaded: LoadedPlan
    folder: Path

    def site(self) -> MemorySite:
        return MemorySite(self.loaded)

    def run(
        self,
        site: MemorySite | None = None,
        *,
        resume: bool = False,
        watch: Callable[[Progress], None] = lambda progress: None,
        requests: StopRequests | None = None,
    ) -> Outcome:
        behind = look_behind(self.folder) if resume else NOTHING
        return carry_out_at(
            site or self.site(), self.loaded, self.folder, behind=behind, watch=watch, requests=requests
        )


@pytest.fixture
def make_trial(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Callable[..., Trial]:
    """A factory of trials; `record.h5` is not rebuilt behind their back (a process for each would be slow)."""

    class Rebuilt:
        returncode = 0

        def poll(self) -> int:
            return 0

        def communicate(self) -> tuple[str, str]:
            return "", ""

    monkeypatch.setattr("runner.sweep.night.start_consolidation", lambda folder: Rebuilt())

    def make(
        *,
        at: str = "40 degC",
        parts: tuple[int, ...] = (1,),
        methods: tuple[str, ...] = (PULSE, BIAS),
        name: str = "run",
        bench: Callable[[str], str] = lambda text: text,
        plan: Callable[[str], str] = lambda text: text,
    ) -> Trial:
        (tmp_path / "bench.yaml").write_text(bench(quick_bench()))
        lines = "\n".join(f"  - {PARTS[part]}" for part in parts)
        text = PLAN.format(parts=lines, at=at, methods="\n".join(methods))
        (tmp_path / "plan.yaml").write_text(plan(text))
        return Trial(load_plan(tmp_path / "plan.yaml"), tmp_path / name)

    return make
