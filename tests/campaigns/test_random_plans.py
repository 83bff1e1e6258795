"""Random valid plans on random parts: whatever the part does, the bench's own ledger never passes a limit of the plan.

The part is not the one that the plan describes: its inductance is off by up to 30 %, its knee lies anywhere from far
below to far above the rated current, its law is any of the mock's. Limits are what the plan says; the climb must find out.
"""

import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest
from hypothesis import HealthCheck, assume, given, settings
from hypothesis import strategies as st

from runner.errors import InputError
from runner.plan import load_plan
from runner.shipped import shipped_plans
from runner.sweep.carry_out import carry_out_at
from runner.sweep.memory_site import MemorySite

TEMPLATE = """
title: Random
bench: bench.yaml
part: {{label: PART, inductance: {inductance:.6g} uH, rated_current: {rated:.4g} A, resistance: 20 mohm}}
temperatures: {{at: [{at:.1f} degC], soak: {{within: 2 K, drift: 1 K/min, hold: 30 s, give_up: 10 min}}}}
pulse: {{rail: {rail:.4g} V, width: [{widths}], repeats: 2, rest: {rest:.3g} s, conditioning: {conditioning}}}
bias: {{current: [{currents}], signal: {{frequency: 100 kHz, level: 50 mV}}}}
limits:
  current: {limit:.4g} A
  body: {body:.1f} degC
  rail: {rail_limit:.4g} V
  pulse_energy: {energy:.4g} mJ
  mean_power: {power:.4g} W
  chamber: [-45 degC, 130 degC]
  duration: 14 h
"""


@st.composite
def plans(draw: st.DrawFn) -> tuple[dict[str, object], str]:
    """Figures of a plan, and the line of the simulated part."""

    def number(low: float, high: float) -> float:
        return draw(st.floats(low, high, allow_nan=False, allow_infinity=False))

    inductance = 10 ** number(0.8, 2.2)  # uH
    rated = number(1.0, 10.0)
    rail = number(3.0, 24.0)
    limit = min(rated * number(1.2, 3.0), 19.0)
    longest = inductance * limit * number(0.3, 0.95) / rail  # us: what takes a part without a knee there
    count = draw(st.integers(1, 6))
    widths = [longest * (index + 1) / count for index in range(count)]
    most = rated * number(0.3, 1.0)
    figures = {
        "inductance": inductance,
        "rated": rated,
        "at": number(-30.0, 110.0),
        "rail": rail,
        "widths": ", ".join(f"{width:.5g} us" for width in widths),
        "rest": number(0.1, 1.0),
        "conditioning": draw(st.integers(0, 2)),
        "currents": ", ".join(f"{most * index / 3:.5g} A" for index in range(4)),
        "limit": limit,
        "body": number(112.0, 140.0),
        "rail_limit": rail * number(1.0, 1.3),
        "energy": 10 ** number(-0.5, 1.5),
        "power": 10 ** number(-2.0, 1.0),
    }
    law = draw(st.sampled_from(["gapped", "powder", "remanent", "stepped"]))
    true_inductance = inductance * number(0.7, 1.3)
    knee = rated * number(0.4, 3.0)
    part = f"{{law: {law}, inductance: {true_inductance:.6g} uH, knee: {knee:.5g} A, time_constants: [5 s, 20 s]}}"
    return figures, part


@contextmanager
def trial_folder() -> Iterator[Path]:
    with tempfile.TemporaryDirectory() as folder:
        yield Path(folder)


def check(figures: dict[str, object], part: str) -> None:
    with trial_folder() as folder:
        bench = (
            (shipped_plans() / "benches" / "mock.yaml").read_text().replace("ramp: 3 K/min", "ramp: 60 K/min")
        )
        head, _, _ = bench.partition("  parts:\n    1:")
        (folder / "bench.yaml").write_text(f"{head}  parts:\n    1: {part}\n")
        (folder / "plan.yaml").write_text(TEMPLATE.format(**figures))
        try:
            loaded = load_plan(folder / "plan.yaml")
        except InputError:
            assume(False)
        site = MemorySite(loaded)
        outcome = carry_out_at(site, loaded, folder / "run")
        assert outcome.status in ("finished", "stopped"), outcome.reason
        ledger, limits = site.bench.ledger(), loaded.plan.limits
        largest, on = ledger["largest"], ledger["on"]
        assert largest["current"] <= limits.current
        assert largest["bank_voltage"] <= limits.rail
        assert largest["pulse_energy"] <= limits.pulse_energy
        assert largest["body_degC"]["1"] <= limits.body_degC
        assert limits.mean_power is None or largest["mean_power"] <= limits.mean_power
        assert (on["supply"], on["pulser"], on["bias"]) == (False, False, False)
        assert ledger["relay_moves_under_current"] == ledger["relay_moves_on_charged_bank"] == 0


SETTINGS = {
    "deadline": None,
    "derandomize": True,  # the seed is the test's own name; every run tries the same plans
    "database": None,
    "suppress_health_check": [
        HealthCheck.function_scoped_fixture,
        HealthCheck.too_slow,
        HealthCheck.filter_too_much,
    ],
}


@given(drawn=plans())
@settings(max_examples=15, **SETTINGS)
@pytest.mark.usefixtures("no_rebuild")
def test_no_plan_passes_a_limit(drawn: tuple[dict[str, object], str]) -> None:
    check(*drawn)


@pytest.mark.soak
@given(drawn=plans())
@settings(max_examples=400, **SETTINGS)
@pytest.mark.usefixtures("no_rebuild")
def test_no_plan_out_of_many_passes_a_limit(drawn: tuple[dict[str, object], str]) -> None:
    check(*drawn)
