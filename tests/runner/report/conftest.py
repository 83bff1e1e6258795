"""Runs for the report's tests, written through the record's own door.

The numbers follow closed forms, so that a test can say what has to stand on the page: a part whose
differential inductance is ``L0 (0.12 + 0.88 / (1 + (i/k)^8))`` and whose knee current ``k`` falls with
temperature. They mean nothing physical beyond looking like an inductor.
"""

import json
import math
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from runner.record import (
    CalibrationRow,
    CaptureRow,
    EventRow,
    ExtractionTables,
    Flag,
    InstrumentRow,
    IsatTable,
    Journal,
    PartRow,
    PointRow,
    RunHeader,
    SettingRow,
    SurfaceTable,
    consolidate,
    write_extraction,
)

START = 1_796_077_320.0  # 2026-11-30 22:22 UTC
SEED = 20261
PLAN = """\
title: {title}
bench: benches/mock.yaml
{parts}
temperatures:
  at: [-40 degC, 25 degC, 125 degC]
  soak: {{within: 1 K, drift: 0.2 K/min, hold: 5 min, give_up: 2 h}}
pulse:
  rail: 12 V
  width: {{from: 2 us, to: 20 us, count: 6}}   # climbed from the shortest
  repeats: 2
  rest: 500 ms
  conditioning: 3
  stop_at: {{current: 15 A, drop: 60 %}}
bias:
  current: {{from: 0 A, to: 10 A, count: 11, both_ways: true}}
  signal: {{frequency: 100 kHz, level: 50 mV}}
limits: {{current: 18 A, body: 140 degC, rail: 16 V, pulse_energy: 5 mJ, chamber: [-45 degC, 130 degC],
         duration: 14 h}}
extract: {{drops: [10 %, 20 %, 30 %], reference: same temperature}}
"""
BENCH = "name: Mock bench\n# a comment with ümlauts & <angles>\n"
RATED = 6.0
DROPS = (0.1, 0.2, 0.3)
BIAS_TOP = 10.0
VOLT, AMPERE = 20 / 32768, 40 / 32768  # of one code


def initial_inductance(temperature: float) -> float:
    return 22e-6 * (1 + 4e-4 * (temperature - 25))


def relative(current: Any, temperature: float) -> Any:
    knee = 9.5 * (1 - 2.2e-3 * (temperature - 25))
    return 0.12 + 0.88 / (1 + (current / knee) ** 8)


def saturation_current(drop: float, temperature: float) -> float:
    """Closed form: relative(i) = 1 - drop."""
    knee = 9.5 * (1 - 2.2e-3 * (temperature - 25))
    return float(knee * (0.88 / (1 - drop - 0.12) - 1) ** (1 / 8))


def resistance(temperature: float) -> float:
    return 0.018 * (1 + 3.93e-3 * (temperature - 20))


def interval_of(width: float, samples: int) -> float:
    """So that a capture shows the pulse and half its width again."""
    return 1.67 * width / samples


def _waveform(width: float, temperature: float, samples: int) -> tuple[Any, Any, Any, float]:
    time = (np.arange(samples) - samples // 10) * interval_of(width, samples)
    grid = np.linspace(0, 40, 2000)
    flux = np.concatenate(
        [[0], np.cumsum(np.diff(grid) * initial_inductance(temperature) * relative(grid[1:], temperature))]
    )
    peak = float(np.interp(11.7 * width, flux, grid))
    on, off = (time > 0) & (time < width), time >= width
    current = np.where(on, np.interp(11.7 * np.clip(time, 0, None), flux, grid), 0.0)
    current = np.where(off, peak * np.exp(-(time - width) / (0.5 * width)), current)
    voltage = np.where(on, 11.8 - 0.02 * current, np.where(off, -0.8, 0.0))
    return time, voltage, current, peak


def _codes(signal: Any, scale: float) -> Any:
    return np.clip(signal / scale, -32768, 32752).astype("<i2")


def _result(labels: Sequence[str], temperatures: Sequence[float], methods: Sequence[str]) -> dict[str, Any]:
    def entry(temperature: float, key: str, value: float, width: float) -> dict[str, float]:
        return {
            "temperature_degC": temperature + 0.1,
            key: value,
            "low": value - width,
            "high": value + width,
        }

    def knee(method: str, drop: float, temperature: float, scale: float) -> dict[str, Any]:
        value = scale * saturation_current(drop, temperature) * (1.0 if method == "pulse" else 1.02)
        reached = method == "pulse" or value <= BIAS_TOP
        return {
            "temperature_degC": temperature + 0.1, "drop": drop, "reference": "same temperature",
            "ampere": value if reached else None, "low": 0.996 * value if reached else BIAS_TOP,
            "high": 1.004 * value if reached else None, "status": "measured" if reached else "not reached",
        }  # fmt: skip

    return {
        "coverage": 0.95,
        "parts": [
            {
                "label": label,
                "methods": {
                    method: {
                        "initial_inductance": [
                            entry(t, "henry", (1 if method == "pulse" else 0.95) * initial_inductance(t), 6.6e-8)
                            for t in temperatures
                        ],
                        "saturation_current": [
                            knee(method, d, t, 1 - 0.12 * number) for t in temperatures for d in DROPS
                        ],
                        "winding_resistance": [entry(t, "ohm", resistance(t), 5e-5) for t in temperatures],
                    }
                    for method in methods
                },
                "flags": [
                    {"point": 2, "flag": "clipped", "text": "voltage channel above 11.8 V; raise its range"}
                ] if number == 0 else [],
            }
            for number, label in enumerate(labels)
        ],
    }  # fmt: skip


def _tables(count: int, temperatures: Sequence[float], methods: Sequence[str]) -> ExtractionTables:
    surfaces, isats = [], []
    at = np.asarray(temperatures, dtype=np.float64)
    for part in range(count):
        for method in methods:
            current = np.linspace(0, 15, 76) if method == "pulse" else np.linspace(0, BIAS_TOP, 11)
            inductance = np.array([initial_inductance(t) * relative(current, t) for t in temperatures])
            if method == "pulse":
                for row, t in enumerate(temperatures):
                    inductance[row, current > saturation_current(0.6, t)] = np.nan
            else:
                inductance = 0.95 * inductance
            surfaces.append(
                SurfaceTable(
                    part, method, at + 0.1, current, inductance, inductance * (0.002 + 0.0005 * current),
                    np.ones(inductance.shape, dtype=np.int64), at + 0.1,
                )
            )  # fmt: skip
            amperes = np.array([[saturation_current(d, t) for t in temperatures] for d in DROPS])
            isats.append(IsatTable(part, method, DROPS, at + 0.1, amperes, 0.002 * amperes))
    return ExtractionTables("kneemap", "0.1.0", "2026-12-01T08:00:00Z", {}, tuple(surfaces), tuple(isats))


def write_run(
    folder: Path,
    *,
    labels: Sequence[str] = ("DRUM-22-A",),
    temperatures: Sequence[float] = (-40.0, 25.0, 125.0),
    methods: Sequence[str] = ("pulse", "bias"),
    state: str = "finished",
    kind: str = "plan",
    extracted: bool = True,
    points: bool = True,
    events: bool = True,
    title: str = "Derating study",
    change: Callable[[dict[str, Any]], None] | None = None,
    samples: int = 300,
    widths: int = 6,
) -> Path:
    """A run folder with record and, if ``extracted``, a result, which ``change`` may edit first."""
    rng = np.random.default_rng(SEED)
    described = [
        f"{{label: {json.dumps(label)}, inductance: 22 uH, rated_current: {RATED:g} A, resistance: 18 mohm}}"
        for label in labels
    ]
    if kind == "captures":
        text = f"title: {json.dumps(title)}\npart: {described[0]}\nshunt: {{resistance: 10 mohm, uncertainty: 0.1 %}}\n"
        text += "columns: {time: t, voltage: v, current: i}\ncaptures:\n"
        text += "  - {file: a.csv, temperature: 25.1 degC}\n" * widths
        bench = b""
    else:
        parts = (
            "part: " + described[0]
            if len(labels) == 1
            else "parts:\n" + "".join(f"  - {d}\n" for d in described)
        )
        text, bench = PLAN.format(title=json.dumps(title), parts=parts), BENCH.encode()
    header = RunHeader(
        run_id="1e0e8ac2-0000-4000-8000-000000000001", title=title, kind=kind, start=START,
        plan_name="/somewhere/private/night.yaml" if kind == "plan" else "captures.yaml", plan_bytes=text.encode(),
        bench_name="mock.yaml" if bench else "", bench_bytes=bench,
        parts=tuple(PartRow(label, "", channel=k + 1) for k, label in enumerate(labels)),
        leg_setpoints=tuple(temperatures),
    )  # fmt: skip
    t = START
    with Journal.create(folder, header) as journal:
        journal.session("kneemap 0.1.0", {"numpy": "2.4.6", "python": "3.11"}, t)
        if kind == "plan":
            constants = {
                "voltage_gain": CalibrationRow(1.0, "1", 5e-4, "2026-03-02"),
                "tempco": CalibrationRow(2e-5, "1/K", 1e-5, "2026-03-02"),
                "skew": CalibrationRow(12e-9, "s", 1e-9, "2026-03-02", "C-17"),
            }
            journal.instrument(
                InstrumentRow("digitizer", "NXsensor", vendor="Mock bench", model="Digitizer 2", serial="0007",
                              firmware="1.4", calibration=constants)
            )  # fmt: skip
        index, air = 0, 23.0
        for leg, temperature in enumerate(temperatures if points else ()):
            journal.leg_begin(leg, temperature, t)
            before = temperatures[leg - 1] if leg else 23.0
            for step in range(90):
                t += 60
                air += float(np.clip(temperature - air, -3, 3))
                if kind == "plan":
                    journal.chamber(t, air + float(rng.normal(0, 0.05)))
                    for part in range(len(labels)):
                        journal.body(t, part, temperature + (before - temperature) * math.exp(-step / 18))
            for part in range(len(labels)):
                common: dict[str, Any] = {
                    "leg": leg, "part": part, "temperature_setpoint": temperature,
                    "body_temperature": temperature + 0.1, "air_temperature": temperature,
                    "resistance": resistance(temperature),
                }  # fmt: skip
                for width in np.linspace(2e-6, 20e-6, widths) if "pulse" in methods else ():
                    t += 6
                    _, voltage, current, peak = _waveform(width, temperature, samples)
                    interval = interval_of(width, samples)
                    setting = journal.setting(
                        SettingRow(samples, interval, -(samples // 10) * interval, "int16", VOLT, 0.0, AMPERE, 0.0,
                                   {"code_min": -32768, "code_max": 32752})
                    )  # fmt: skip
                    captures = [
                        CaptureRow(
                            repeat, setting, t,
                            _codes(voltage + rng.normal(0, 0.03, samples), VOLT),
                            _codes(current + rng.normal(0, 0.02, samples), AMPERE),
                        )
                        for repeat in range(2)
                    ]  # fmt: skip
                    quality = int(Flag.CLIPPED) if index == 1 else 0
                    set_width = math.nan if kind == "captures" else width
                    journal.add_point(
                        PointRow(index, method="pulse", start_time=t - 5, end_time=t, quality=quality,
                                 pulse_width_setpoint=set_width, peak_current=peak, **common),
                        captures,
                    )  # fmt: skip
                    index += 1
                for bias in np.linspace(0, BIAS_TOP, 11) if "bias" in methods else ():
                    t += 2
                    value = 0.95 * initial_inductance(temperature) * relative(bias, temperature)
                    journal.add_point(
                        PointRow(index, method="bias", start_time=t - 1, end_time=t, bias_current_setpoint=bias,
                                 bias_current=bias, inductance=value, test_frequency=1e5, **common),
                        [],
                    )  # fmt: skip
                    index += 1
            journal.leg_end(leg, t)
        if events:
            silent = "lcr: no reply to 'READ?' in 2.0 s; the connection was opened again."
            journal.event(EventRow(START + 8000, "warning", "retry", silent, leg=1))
            journal.event(EventRow(START + 8010, "warning", "retry", silent, leg=1))
            journal.event(
                EventRow(
                    START + 12000, "error", "instrument_lost", "digitizer: closed the connection.", leg=2
                )
            )
            journal.event(EventRow(START + 12100, "info", "progress", "Ordinary course of the night.", leg=2))
        journal.state(state)
    consolidate(folder)
    if extracted:
        result = _result(labels, temperatures, methods)
        if change:
            change(result)
        write_extraction(folder, _tables(len(labels), temperatures, methods), result)
    return folder


@pytest.fixture(scope="session")
def make_run(tmp_path_factory: pytest.TempPathFactory) -> Callable[..., Path]:
    """Call it with the arguments of `write_run` (without the folder) for a fresh run folder."""

    def make(**what: Any) -> Path:
        return write_run(tmp_path_factory.mktemp("run") / "night", **what)

    return make


@pytest.fixture(scope="session")
def report(make_run: Callable[..., Path]) -> Path:
    """Folder of the report of the usual run."""
    from runner.report import write_report

    return write_report(make_run()).parent
