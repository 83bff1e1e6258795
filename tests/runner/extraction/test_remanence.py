"""The remanence study, from simulated captures to its verdict, against the closed-form truth of the mock's flux laws.

One night in memory: a gapped drum core that forgets and a pot core that remembers (15 % of its knee), both ways round, with
and without an offset field.
"""

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pytest

from mock_instruments import WorldSpec, truth
from mock_instruments.flux import Branch, saturation_current
from runner.extraction import extract, open_run
from runner.extraction import from_run as reader
from runner.extraction.mean_capture import Setting
from runner.extraction.part_result import Settings
from runner.extraction.remanence import Difference, Series, study
from runner.extraction.remanence_shots import conditioned_of, first_of, turned
from runner.plan import load_plan, simulation_spec
from runner.shipped import shipped_plans
from runner.sweep.carry_out import carry_out_at
from runner.sweep.memory_site import MemorySite

PLAN = """
title: First shots
bench: bench.yaml
parts:
  - {label: DRUM, channel: 1, inductance: 22 uH, rated_current: 6 A, resistance: 18 mohm,
     core: {turns: 15, area: 52 mm^2, path: 46 mm}}
  - {label: POT, channel: 3, inductance: 33 uH, rated_current: 4 A, resistance: 21 mohm,
     core: {turns: 12, area: 63 mm^2, path: 31 mm}}
temperatures: {at: [40 degC], soak: {within: 1 K, drift: 0.3 K/min, hold: 1 min, give_up: 30 min}}
pulse: {rail: 12 V, width: [3 us, 4 us], repeats: 3, rest: 200 ms, conditioning: 1}
remanence: {width: 18 us, shots: 6, demagnetise: alternating pulses, polarities: both, offset: [15 A turns], winding: 10}
limits: {current: 20 A, body: 140 degC, rail: 16 V, pulse_energy: 5 mJ, chamber: [0 degC, 60 degC], duration: 9 h}
extract: {drops: [10 %, 30 %]}
"""
TURNS = {"DRUM": 15, "POT": 12}


@dataclass(frozen=True)
class Night:
    """What a run gave: the result, the series behind it by part, and the truth."""

    parts: dict[str, dict[str, Any]]
    series: dict[str, list[Series]]
    spec: WorldSpec

    def rows(self, label: str, name: str = "remanence", **wanted: object) -> list[dict[str, Any]]:
        rows = self.parts[label][name]
        return [row for row in rows if all(row[key] == value for key, value in wanted.items())]

    def plain(self, label: str) -> Series:
        """The forward series without an offset field."""
        (found,) = (one for one in self.series[label] if one.sign > 0 and not one.ampere_turns)
        return found


class Rebuilt:
    """Stands for a rebuild of the record that has ended; the reading below makes one itself."""

    returncode = 0

    def poll(self) -> int:
        return 0

    def communicate(self) -> tuple[str, str]:
        return "", ""


@pytest.fixture(scope="module")
def seen(tmp_path_factory: pytest.TempPathFactory) -> Night:
    """The plan carried out on the shipped mock bench, with a brisk chamber and light parts, and extracted."""
    folder = tmp_path_factory.mktemp("remanence")
    bench = (shipped_plans() / "benches" / "mock.yaml").read_text().replace("ramp: 3 K/min", "ramp: 30 K/min")
    for law in ("gapped", "powder", "remanent"):
        bench = bench.replace(f"{{law: {law},", f"{{law: {law}, time_constants: [15 s, 60 s],")
    (folder / "bench.yaml").write_text(bench)
    (folder / "plan.yaml").write_text(PLAN)
    loaded = load_plan(folder / "plan.yaml")
    series: dict[str, list[Series]] = {}

    def keeping(label: str, found: list[Series], settings: Settings, *, turns: int | None) -> Any:
        series[label] = found
        return study(label, found, settings, turns=turns)

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("runner.sweep.night.start_consolidation", lambda folder: Rebuilt())
        patch.setattr(reader, "study", keeping)
        assert carry_out_at(MemorySite(loaded), loaded, folder / "run").status == "finished"
        with open_run(folder / "run") as run:
            result = extract(run).result
    spec = WorldSpec.from_mapping(simulation_spec(loaded.bench))
    return Night({part["label"]: part for part in result["parts"]}, series, spec)


def true_knee(branch: Branch, drop: float, reference: float) -> float:
    """Where the slope of a branch has fallen by ``drop`` from a reference inductance [A]: bisection on the closed form."""
    own = float(branch.slope(np.asarray(0.0)))
    return saturation_current(branch, 1.0 - (1.0 - drop) * reference / own)


@pytest.mark.parametrize("polarity", ["forward", "reversed"])
@pytest.mark.parametrize("drop", [0.1, 0.3])
def test_the_shift_of_the_knee_is_that_of_the_flux_law(seen: Night, polarity: str, drop: float) -> None:
    (row,) = seen.rows("POT", polarity=polarity, ampere_turns=0.0, drop=drop)
    told = truth(seen.spec, temperatures_degC=[row["temperature_degC"]], drops=[drop])
    (at,) = told["parts"]["3"]["points"]
    first = at["first_shot"]["saturation_current"][0]["ampere"]
    conditioned = at["saturation_current"][0]["ampere"]
    half = (row["high"] - row["low"]) / 2
    assert row["verdict"] == "remembers"
    # 1.5 half-widths of a 95 % interval are three standard uncertainties.
    assert row["shift_ampere"] == pytest.approx(first - conditioned, abs=1.5 * half)
    assert half < 0.1 * row["shift_ampere"]
    assert row["first_shot_ampere"] == pytest.approx(first, rel=0.02)
    assert row["conditioned_ampere"] == pytest.approx(conditioned, rel=0.02)


def test_a_part_without_memory_is_told_as_such(seen: Night) -> None:
    for row in seen.rows("DRUM", ampere_turns=0.0, drop=0.3):
        half = (row["high"] - row["low"]) / 2
        assert abs(row["shift_ampere"]) < 1.5 * half  # as above; of single rows one in twenty claims a memory
        assert half < 0.005 * row["conditioned_ampere"]
    drum, pot = (seen.parts[label]["sentences"][0] for label in ("DRUM", "POT"))
    assert drum.startswith("DRUM does not remember")
    assert pot.startswith("POT remembers")


@pytest.mark.parametrize(("label", "channel"), [("DRUM", 1), ("POT", 3)])
@pytest.mark.parametrize("polarity", ["forward", "reversed"])
def test_an_offset_field_moves_the_knee_by_its_ampere_turns(
    seen: Night, label: str, channel: int, polarity: str
) -> None:
    """15 A turns on 15 turns are 1 A: the knee of a core without memory comes that much earlier along the field, later
    against it. What a remembering core does is its law, magnetised as far as its pulses went."""
    (row,) = seen.rows(label, "remanence_offset", polarity=polarity, drop=0.3)
    sign = 1 if polarity == "forward" else -1
    field = sign * 15.0 / TURNS[label]
    half = (row["high"] - row["low"]) / 2
    assert row["by_turns_ampere"] == pytest.approx(-field)
    if label == "DRUM":
        assert row["shift_ampere"] == pytest.approx(-field, abs=1.5 * half + 2e-3)  # bias source: 0.1 %
        assert half < 0.03
        return
    curve = seen.spec.parts[channel].law.at(row["temperature_degC"])
    conditioned = curve.conditioned()
    reference = float(conditioned.slope(np.asarray(0.0)))
    moved = true_knee(replace(conditioned, field=field), 0.3, reference)
    expected = moved - true_knee(conditioned, 0.3, reference)
    # Against the field the pulses do not write the whole memory: up to 4 % of it (0.05 A) is missing.
    assert row["shift_ampere"] == pytest.approx(expected, abs=1.5 * half + 0.05)


def test_polarities_of_a_symmetric_part_agree(seen: Night) -> None:
    for label in ("DRUM", "POT"):
        (row,) = seen.rows(label, "remanence_polarity", drop=0.3)
        half = (row["high"] - row["low"]) / 2
        assert abs(row["difference_ampere"]) < 1.5 * half
        assert any("polarities" in sentence for sentence in seen.parts[label]["sentences"])


def test_the_study_is_no_part_of_the_pulse_method(seen: Night) -> None:
    """Its pulses of 3 and 4 us reach 2.2 A at most: had the study's been taken in, the knee would be there."""
    for part in seen.parts.values():
        knees = part["methods"]["pulse"]["saturation_current"]
        assert {knee["status"] for knee in knees} == {"not reached"}
        assert max(knee["low"] for knee in knees) < 2.5


def test_records_are_flat_and_name_their_units(seen: Night) -> None:
    for name in ("remanence", "remanence_offset", "remanence_polarity"):
        for row in seen.rows("POT", name):
            assert all(value is None or isinstance(value, str | float | int) for value in row.values())
            assert {"temperature_degC", "drop", "low", "high"} <= set(row)


def test_the_scatter_is_that_of_single_shots(seen: Night) -> None:
    """Three shots of which two are moved by 20 mA up and down: standard deviation 20 mA, by hand."""
    one = seen.plain("DRUM")
    ramp = one.shots[0]
    shots = tuple(replace(ramp, current=ramp.current + move) for move in (-0.02, 0.0, 0.02))
    assert replace(one, shots=shots).scatter(8.0) == pytest.approx(0.02, rel=1e-6)
    assert replace(one, shots=shots[:1]).scatter(8.0) == 0.0


def test_shots_that_differ_widen_the_interval_until_nothing_is_claimed(seen: Night) -> None:
    one = seen.plain("POT")
    ramp = one.shots[0]
    wild = tuple(replace(ramp, current=ramp.current + move) for move in (-0.5, 0.0, 0.5))
    told = study("POT", [replace(one, shots=wild)], Settings(drops=(0.3,)))
    (row,) = told.records["remanence"]
    assert row["verdict"] == "does not remember"
    # s = 0.5 A of a single shot and of the mean of three: 0.5·√(1 + 1/3) = 0.577 A; t(95 %, 2) = 4.30 (GUM, table G.2).
    assert row["high"] - row["low"] == pytest.approx(2 * 4.30 * 0.577, rel=0.02)
    assert "as far as this study can tell" in told.sentences[0]


def test_a_first_shot_without_a_knee_gives_a_bound(seen: Night) -> None:
    one = seen.plain("POT")
    inside = one.first.current < 5.2  # its knee lies at 5.4 A
    short = replace(one.first, current=one.first.current[inside], inductance=one.first.inductance[inside])
    (row,) = study("POT", [replace(one, first=short)], Settings(drops=(0.3,))).records["remanence"]
    assert (row["first_shot_ampere"], row["shift_ampere"], row["high"]) == (None, None, None)
    assert row["low"] < short.top - row["conditioned_ampere"]


def test_an_unprepared_core_is_not_judged(seen: Night) -> None:
    told = study("DRUM", [replace(seen.plain("DRUM"), is_prepared=False)], Settings(drops=(0.3,)))
    assert {row["verdict"] for row in told.records["remanence"]} == {"cannot tell"}
    assert told.sentences[0].startswith("Whether DRUM remembers cannot be told")


@pytest.mark.parametrize(
    ("degrees", "factor"), [(1, 12.71), (2, 4.30), (5, 2.57), (20, 2.09), (np.inf, 1.960)]
)
def test_half_widths_are_students(degrees: float, factor: float) -> None:
    """GUM, table G.2, for 95 %."""
    difference = Difference(1.0, 0.5, degrees)
    assert difference.half_width(0.95) == pytest.approx(0.5 * factor, rel=2e-3)
    assert difference.is_seen(0.95) == (0.5 * factor < 1.0)


def test_a_reversed_capture_is_turned_round_with_its_limits() -> None:
    codes = np.array([[-32768, 0, 100], [5, -7, 32752]], dtype=np.int16)
    setting = Setting(
        1e-8, 0.0, v_scale=1e-3, v_offset=0.2, i_scale=2e-3, i_offset=-0.1, code_min=-32768, code_max=32752
    )
    voltage, current, after = turned(codes, codes, setting, -1)
    assert voltage * after.v_scale + after.v_offset == pytest.approx(-(codes * 1e-3 + 0.2))
    assert current * after.i_scale + after.i_offset == pytest.approx(-(codes * 2e-3 - 0.1))
    assert (voltage >= after.code_max).tolist() == (codes <= setting.code_min).tolist()
    assert (voltage <= after.code_min).tolist() == (codes >= setting.code_max).tolist()
    assert turned(codes, codes, setting, 1)[0] is codes


@pytest.mark.parametrize(("shots", "conditioned"), [(2, 1), (3, 2), (4, 2), (5, 3), (6, 3)])
def test_the_later_half_counts_as_conditioned(shots: int, conditioned: int) -> None:
    codes = np.arange(shots * 4).reshape(shots, 4)
    everything = (codes, codes, Setting(1e-8, 0.0))
    assert first_of(everything)[0].tolist() == codes[:1].tolist()
    assert conditioned_of(everything)[0].tolist() == codes[-conditioned:].tolist()
