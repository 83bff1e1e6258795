"""What a bench holds after loading, and what is handed to the simulated world."""

import json
from collections.abc import Callable
from datetime import date
from pathlib import Path

import pytest

from mock_instruments import WorldSpec
from runner.errors import InputError
from runner.plan import load_bench, load_plan, simulation_spec

Written = Callable[..., Path]

SHUNT = "shunt: {resistance: {value: 10 mohm, uncertainty: 0.1 %}}"


def test_instruments_are_found_by_role_with_their_own_fields(written: Written) -> None:
    bench = load_plan(written()).bench
    assert set(bench.instruments) == {
        "supply", "pulser", "digitizer", "lcr", "bias_source", "chamber", "thermometer", "ohmmeter", "multiplexer",
    }  # fmt: skip
    assert bench.supply is not None
    assert bench.supply.maximum.voltage == 30.0
    assert bench.chamber is not None
    assert (bench.chamber.range_degC, bench.chamber.ramp, bench.chamber.safe_degC) == (
        (-60.0, 150.0),
        0.05,
        25.0,
    )
    assert bench.multiplexer is not None
    assert (bench.multiplexer.parts, bench.multiplexer.paths.bias) == ({1: 101, 2: 102}, 202)
    assert bench.digitizer is not None
    assert bench.digitizer.intervals == (10e-9, 20e-9, 50e-9)


def test_uncertainties_are_absolute_and_what_is_not_known_is_absent(written: Written) -> None:
    bench = load_plan(written()).bench
    assert bench.digitizer is not None
    skew = bench.digitizer.calibration["skew"]
    assert (skew.value, skew.uncertainty, skew.date) == (12e-9, 1e-9, date(2026, 3, 2))
    assert "voltage_gain" not in bench.digitizer.calibration
    assert bench.fixture.shunt is not None
    assert bench.fixture.shunt.resistance.uncertainty == pytest.approx(1e-5)  # 0.1 % of 10 mohm
    assert bench.fixture.shunt.tempco is None


@pytest.mark.parametrize(
    ("constant", "says"),
    [
        ("{value: 0 nH, uncertainty: 1 %}", "'1 %' of a value of zero says nothing"),
        ("{value: 3 nH, uncertainty: -1 nH}", "'-1 nH' is negative"),
        ("{value: 3 nH, uncertainty: 1 ns}", "'1 ns' is a time, not an inductance"),
        ("3 nH", "stands where 'key: value' lines are expected"),
    ],
)
def test_a_constant_needs_a_value_and_a_sensible_uncertainty(
    written: Written, constant: str, says: str
) -> None:
    bench = {SHUNT: f"{SHUNT[:-1]}, series_inductance: {constant}}}"}
    with pytest.raises(InputError) as caught:
        load_plan(written(bench=bench))
    assert says in str(caught.value)


def test_a_plan_without_pulses_needs_no_pulse_fixture(written: Written, base: dict[str, str]) -> None:
    pulse = base["plan.yaml"][base["plan.yaml"].index("pulse:") : base["plan.yaml"].index("bias:")]
    fixture = base["bench.yaml"][
        base["bench.yaml"].index("fixture:") : base["bench.yaml"].index("simulation:")
    ]
    assert load_plan(written(plan={pulse: ""}, bench={fixture: ""})).bench.fixture.bank is None
    with pytest.raises(
        InputError, match=r"the bench has no 'fixture\.bank' and 'fixture\.shunt', which pulses need"
    ):
        load_plan(written(bench={fixture: ""}))


def test_two_parts_need_a_multiplexer(written: Written, base: dict[str, str]) -> None:
    part = "part: {label: A-22, inductance: 22 uH, rated_current: 6 A, resistance: 18 mohm}"
    two = "parts:\n" + "".join(f"- {{label: {n}, {part[20:]}\n" for n in "AB")
    multiplexer = next(line for line in base["bench.yaml"].splitlines() if "multiplexer:" in line)
    with pytest.raises(InputError, match=r"parts: 2 parts need a 'multiplexer' in the bench, which has none"):
        load_plan(written(plan={part: two}, bench={f"{multiplexer}\n": ""}))


def test_a_real_bench_has_an_address_for_each_role(written: Written) -> None:
    plan = written(
        bench={"lcr: {": "lcr: {resource: 'GPIB::1', ", "pulser: {": "pulser: {resource: 'GPIB::1', "}
    )
    with pytest.raises(InputError, match=r"'GPIB::1' is the address of 'pulser' too; give each role its own"):
        load_plan(plan)


def test_dialects_are_found_beside_the_bench_first(written: Written, tmp_path: Path) -> None:
    loaded = load_bench(written().parent / "bench.yaml")
    assert loaded.dialect_path("lcr").parent.name == "dialects"
    (tmp_path / "scpi_lcr.yaml").write_text("own: dialect")
    assert loaded.dialect_path("lcr") == tmp_path / "scpi_lcr.yaml"


def test_the_world_reads_what_the_bench_says(written: Written) -> None:
    spec = simulation_spec(load_plan(written()).bench)
    world = WorldSpec.from_mapping(json.loads(json.dumps(spec)))
    assert (world.seed, world.spelling, world.ambient_degC) == (7, "plain", 23.0)
    assert world.bank_capacitance == 7e-3
    assert world.parts[1].law.inductance == 22e-6
    assert world.relays.parts == {1: 101, 2: 102}
    assert world.chamber_range_degC == (-60.0, 150.0)
    assert world.chamber_ramp == pytest.approx(0.05)
    assert world.digitizer.intervals == (10e-9, 20e-9, 50e-9)
    assert world.shunt == pytest.approx(10e-3, rel=1e-3)


def test_every_key_of_the_simulation_is_one_that_the_world_knows(written: Written) -> None:
    part = (
        "1: {law: stepped, label: x, inductance: 22 uH, knee: 9 A, sharpness: 5, floor: 6 %, inductance_drift: 200 ppm/K,"
        " inductance_curvature: -1.5 ppm/K^2, knee_drift: -0.26 %/K, first_knee: 40 %, first_share: 45 %, memory: 10 %,"
        " resistance: 18 mohm, time_constants: [4 min, 15 min], weight: 60 %, thermal_resistance: 15 K/W}\n"
        "  ambient: 21 degC\n"
        "  departures: {spread: 0.5, shunt_resistance: 0.04 %, shunt_tempco: 1 ppm/K, shunt_inductance: 1 nH, skew: 2 ns,"
        " voltage_gain: 0.01 %, shunt_gain: 0.01 %, inductance_gain: 0.1 %, fixture_inductance: 1 nH,"
        " fixture_resistance: 1 uohm, current_gain: 0.1 %, body_offset: 0.1 K, ohmmeter_gain: 0.01 %,"
        " lead_resistance: 1 uohm, chamber_offset: 0.3 K, overshoot: 2 K, trigger_delay: 10 ns,"
        " digitizer: {bits: 8, noise: 0.5, voltage_offset: 1 mV, shunt_offset: 1 mV, hum: 1 mV, ringing: 2 mV}}"
    )
    spec = simulation_spec(load_plan(written(bench={"1: {law: gapped, inductance: 22 uH}": part})).bench)
    world = WorldSpec.from_mapping(spec)
    assert (world.ambient_degC, world.overshoot, world.digitizer.bits) == (21.0, 2.0, 8)
    assert world.parts[1].law.knee_drift == pytest.approx(-2.6e-3)
    assert world.parts[1].law.inductance_curvature == pytest.approx(-1.5e-6)
    assert world.parts[1].time_constants == (240.0, 900.0)


def test_a_real_bench_has_no_world(written: Written) -> None:
    simulation = "simulation:\n  seed: 7\n  parts:\n    1: {law: gapped, inductance: 22 uH}\n"
    with pytest.raises(InputError):
        load_plan(written(bench={simulation: ""}))
    bench = load_plan(written()).bench.model_copy(update={"simulation": None})
    with pytest.raises(ValueError, match="has no 'simulation:' section"):
        simulation_spec(bench)
