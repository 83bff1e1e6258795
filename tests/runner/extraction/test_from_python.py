"""The README's example, as it stands there, on a run of its own."""

import re
from pathlib import Path

import numpy as np
import pytest

from runner.extraction import extract, open_run
from runner.plan import load_plan
from runner.shipped import shipped_plans
from runner.sweep.carry_out import carry_out_at
from runner.sweep.memory_site import MemorySite

README = Path(__file__).resolve().parents[3] / "README.md"
PLAN = """
title: Night
bench: bench.yaml
part: {label: DRUM-22-A, channel: 1, inductance: 22 uH, rated_current: 6 A, resistance: 18 mohm}
temperatures: {at: [30 degC, 50 degC], soak: {within: 1 K, drift: 0.3 K/min, hold: 1 min, give_up: 20 min}}
pulse: {rail: 12 V, width: [5 us, 10 us, 15 us, 19 us], repeats: 4, rest: 200 ms}
limits: {current: 18 A, body: 140 degC, rail: 16 V, pulse_energy: 5 mJ, chamber: [-45 degC, 130 degC], duration: 14 h}
"""


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    into = tmp_path_factory.mktemp("night")
    bench = (shipped_plans() / "benches" / "mock.yaml").read_text().replace("ramp: 3 K/min", "ramp: 30 K/min")
    (into / "bench.yaml").write_text(
        bench.replace("{law: gapped,", "{law: gapped, time_constants: [15 s, 60 s],")
    )
    (into / "plan.yaml").write_text(PLAN)
    loaded = load_plan(into / "plan.yaml")
    carry_out_at(MemorySite(loaded), loaded, into / "run")
    return into / "run"


def test_the_example_runs_as_it_is_printed(folder):
    (block,) = (
        b for b in re.findall(r"```python\n(.*?)```", README.read_text(), re.S) if "runner.extraction" in b
    )
    printed = re.sub(r'open_run\(".*?"\)', f"open_run({str(folder)!r})", block)
    assert printed != block
    names = {}
    exec(printed, names)
    # Shapes and units; the numbers have their own tests. 22 uH at no current, a knee near 9 A.
    assert np.all(np.diff(names["inductance"]) < 0)
    assert names["inductance"][0] == pytest.approx(22e-6, rel=0.05)
    assert np.all(names["uncertainty"] < 0.01 * names["inductance"])
    assert names["table"]["differential_inductance"].dims == ("temperature_degC", "current")
    assert {row["status"] for row in names["knees"]} <= {"measured", "not reached"}


def test_a_part_that_is_not_there_is_answered_with_those_that_are(folder):
    with open_run(folder) as run:
        extraction = extract(run)
    for part, method in (("DRUM-22-B", "pulse"), ("DRUM-22-A", "bias"), (1, "pulse")):
        with pytest.raises(KeyError, match="there are: DRUM-22-A by pulse"):
            extraction.surface(part, method)
    assert extraction.surface() is extraction.surface("DRUM-22-A")
