"""What the campaigns share: a short plan on a quick simulated bench, written where a test wants it."""

from collections.abc import Callable
from pathlib import Path

import pytest

from runner.shipped import shipped_plans

SEED = 20261

PLAN = """
title: Campaign
bench: bench.yaml
parts:
  - {{label: DRUM, inductance: 22 uH, rated_current: 6 A, resistance: 18 mohm, channel: 1}}
{parts}
temperatures: {{at: [{at}], soak: {{within: 1 K, drift: 0.3 K/min, hold: 1 min, give_up: 20 min}}}}
pulse: {{rail: 12 V, width: [3 us, 8 us, 12 us], repeats: 3, rest: 200 ms, conditioning: 1}}
bias: {{current: {{from: 0 A, to: 6 A, count: 3, both_ways: true}}, signal: {{frequency: 100 kHz, level: 50 mV}}}}
limits:
  current: 18 A
  body: 140 degC
  rail: 16 V
  pulse_energy: 5 mJ
  chamber: [-45 degC, 130 degC]
  duration: 14 h
"""
SECOND = "  - {label: TOROID, inductance: 47 uH, rated_current: 5 A, resistance: 24 mohm, channel: 2}"


@pytest.fixture
def write_plan(tmp_path: Path) -> Callable[..., Path]:
    """Write plan and bench; gives the plan's path."""

    def write(
        *, at: str = "40 degC", two_parts: bool = False, timeout: str = "", spelling: str = "plain"
    ) -> Path:
        name = "mock.yaml" if spelling == "plain" else "mock_odd.yaml"
        bench = (shipped_plans() / "benches" / name).read_text()
        bench = bench.replace("ramp: 3 K/min", "ramp: 30 K/min")
        for law in ("gapped", "powder", "remanent"):
            bench = bench.replace(f"{{law: {law},", f"{{law: {law}, time_constants: [15 s, 60 s],")
        if timeout:
            for given in ("2 s", "5 s"):
                bench = bench.replace(f"timeout: {given}", f"timeout: {timeout}")
        (tmp_path / "bench.yaml").write_text(bench)
        plan = tmp_path / "plan.yaml"
        plan.write_text(PLAN.format(parts=SECOND if two_parts else "", at=at))
        return plan

    return write


@pytest.fixture
def no_rebuild(monkeypatch: pytest.MonkeyPatch) -> None:
    """Campaigns in memory do without a process of its own for each rebuild of the record."""

    class Rebuilt:
        returncode = 0

        def poll(self) -> int:
            return 0

        def communicate(self) -> tuple[str, str]:
            return "", ""

    monkeypatch.setattr("runner.sweep.night.start_consolidation", lambda folder: Rebuilt())
