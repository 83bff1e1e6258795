"""What a night costs in bench time: soak on evidence and widths near the knee against a fixed plan, and the floor.

Three figures for the same question (Isat at 30 % drop, 7 temperatures, an interval of 1 %), on the same mock bench:

- *sought*: a run of this program, widths placed by the search, soak ended on evidence;
- *fixed*: 18 widths after a dwell of 45 minutes at each temperature, from when the chamber's air has arrived;
- *floor*: the chamber's ramp at its own limit plus the time in which the part's lag enters the band, read off the world
  itself, which no program can know; not a single point is measured in it.

How much can be won depends on the part: where its own lag takes most of the 45 minutes, the floor is near the fixed
plan. So the figures come twice, for a small part on a board and for the slow one of the shipped mock bench.
"""

import tempfile
from datetime import UTC, datetime
from pathlib import Path

import numpy as np

from mock_instruments import World, WorldSpec
from runner.extraction import extract
from runner.plan import load_plan, simulation_spec
from runner.record import new_run_folder, open_run
from runner.sweep import carry_out

PLANS = Path(__file__).resolve().parents[2] / "plans"
TEMPERATURES = (-40.0, -10.0, 25.0, 50.0, 75.0, 100.0, 125.0)
WITHIN = 1.0  # K
DWELL = 45 * 60.0
STEP = 5.0  # s, resolution of floor and dwell
PLAN = """\
title: {title}
bench: {bench}
part: {{label: DRUM-22-A, inductance: 22 uH, rated_current: 6 A, resistance: 18 mohm}}
temperatures:
  at: [{temperatures}]
  soak: {{within: {within} K, drift: 0.2 K/min, hold: 1 min, give_up: 2 h}}
pulse:
  rail: 12 V
  width: {width}
  repeats: 8
  rest: 500 ms
  conditioning: 3
  stop_at: {{current: 15 A, drop: 60 %}}
limits: {{current: 20 A, body: 140 degC, rail: 16 V, pulse_energy: 5 mJ, chamber: [-45 degC, 130 degC], duration: 20 h}}
extract: {{drops: [30 %]}}
"""
# Lags of a part in moving air (time constants as the bench file spells them): common practice, no source.
LAGS = {
    "small part (lags of 1 and 5 min)": ("1 min", "5 min"),
    "slow part (lags of 4 and 15 min)": ("4 min", "15 min"),
}
SOUGHT = "{seek: knee, from: 2 us, to: 24 us, budget: 18, until: {isat: 1 %}}"
FIXED = "{from: 2 us, to: 24 us, count: 18}"


def bench_with(lags, into):
    """The shipped mock bench with a part that lags so; the guess in the bench file is as good as the truth."""
    text = (PLANS / "benches" / "mock.yaml").read_text(encoding="utf-8")
    part = "1: {law: gapped, "
    guess = "part_time_constants: [4 min, 15 min]"
    assert text.count(part) == 1
    assert text.count(guess) == 1
    written = f"[{lags[0]}, {lags[1]}]"
    text = text.replace(part, f"{part}time_constants: {written}, ").replace(
        guess, f"part_time_constants: {written}"
    )
    path = into / "bench.yaml"
    path.write_text(text, encoding="utf-8")
    return path


def carried_out(into, bench, title, width):
    """The run of such a plan: bench time of its legs [s], of its points alone [s], and its result."""
    path = into / "plan.yaml"
    temperatures = ", ".join(f"{value:g} degC" for value in TEMPERATURES)
    path.write_text(
        PLAN.format(title=title, bench=bench, temperatures=temperatures, within=WITHIN, width=width)
    )
    loaded = load_plan(path)
    folder = new_run_folder(into, title=title, start=datetime.now(UTC))
    outcome = carry_out(loaded, folder)
    assert outcome.status == "finished", outcome
    run = open_run(folder)
    legs = run.legs[-1].end - run.legs[0].start
    points = float(np.sum(run.points["end_time"] - run.points["start_time"]))
    return legs, points, extract(run).result, WorldSpec.from_mapping(simulation_spec(loaded.bench))


def waited(spec, is_there):
    """Bench time [s] until ``is_there(world, setpoint)`` at one temperature after the other."""
    world = World(spec)
    for setpoint in TEMPERATURES:
        world.set_chamber(on=True, setpoint_degC=setpoint)
        while not is_there(world, setpoint):
            world.advance(STEP)
    return world.now


def half_widths(result):
    rows = result["parts"][0]["methods"]["pulse"]["saturation_current"]
    return [(row["high"] - row["low"]) / 2 / row["ampere"] for row in rows if row["status"] == "measured"]


def measure(name, lags):
    with tempfile.TemporaryDirectory() as scratch:
        bench = bench_with(lags, Path(scratch))
        sought, _, sought_result, spec = carried_out(Path(scratch), bench, "sought", SOUGHT)
        _, points, fixed_result, _ = carried_out(Path(scratch), bench, "fixed", FIXED)
    # The chamber regulates its own sensor; where air and body end is off by that sensor's error, for all three alike.
    arrived = waited(spec, lambda world, setpoint: abs(world.air_degC() - setpoint) < WITHIN)
    fixed = arrived + DWELL * len(TEMPERATURES) + points
    floor = waited(spec, lambda world, setpoint: abs(world.body_degC(1) - setpoint) < WITHIN)
    print(name)
    for kind, result in (("sought", sought_result), ("fixed", fixed_result)):
        widths = half_widths(result)
        print(
            f"  {kind:<7} Isat at 30 %: {len(widths)} of 7 temperatures, widest interval ±{max(widths):.2%}"
        )
    print(f"  sought {sought / 3600:.2f} h, fixed {fixed / 3600:.2f} h, floor {floor / 3600:.2f} h")
    print(
        f"  sought/fixed {sought / fixed:.2f} (at most 0.6), sought/floor {sought / floor:.2f} (at most 1.25)"
    )
    print(f"  floor/fixed {floor / fixed:.2f}", flush=True)


def main():
    for name, lags in LAGS.items():
        measure(name, lags)


if __name__ == "__main__":
    main()
