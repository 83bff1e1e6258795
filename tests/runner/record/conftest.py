"""Sample runs for the tests of the record room. What they hold is drawn from seeds written here."""

from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from runner.record import (
    CalibrationRow,
    CaptureRow,
    EventRow,
    ExtractionTables,
    InstrumentRow,
    IsatTable,
    Journal,
    PartRow,
    PointRow,
    RunHeader,
    SettingRow,
    SurfaceTable,
)

START = 1_796_162_400.25  # 2026-12-01 in UTC seconds; any time will do
PLAN = "title: Nacht\r\nnote: −40 °C, “quoted”\r\n".encode()
BENCH = b"name: Mock bench\nraw: \xff\xfe not UTF-8, and no newline at the end"

HEADER = RunHeader(
    run_id="0f6c1a52-6f0e-4a55-9d7e-2a4f0f9f6a01",
    title="Night with two parts",
    kind="plan",
    start=START,
    plan_name="night.yaml",
    plan_bytes=PLAN,
    bench_name="mock.yaml",
    bench_bytes=BENCH,
    parts=(PartRow("DRUM/22 A", "a part whose name holds a slash", 1), PartRow("Pulver 10µ", "", 2)),
    leg_setpoints=(-40.0, 25.0),
)
SETTING = SettingRow(
    samples=200, interval=1e-8, first=-2e-7, dtype="int16", v_scale=20 / 32768, v_offset=0.013, i_scale=0.1 / 32768,
    i_offset=-0.002, detail={"code_min": -32768, "code_max": 32752, "voltage_range": 20},
)  # fmt: skip
INSTRUMENTS = (
    InstrumentRow("digitizer", "NXsensor", "digitizer", "Mock bench", "D1", "7", "1.2", "Mock bench,D1,7,1.2",
                  "TCPIP::127.0.0.1::5025::SOCKET",
                  {"voltage_gain": CalibrationRow(1.0, "1", 5e-4, "2026-03-02", "K-17")}),
    InstrumentRow("pulser", "NXactuator", vendor="Mock bench", model="P1"),
    InstrumentRow("chamber", "NXenvironment", "chamber", "Mock bench", "C1"),
)  # fmt: skip


@dataclass
class Sample:
    """A run that was written."""

    folder: Path
    header: RunHeader


def point(index: int, *, leg: int = 0, part: int = 0, quality: int = 0, method: str = "pulse") -> PointRow:
    common: dict[str, Any] = {
        "plan_index": index, "leg": leg, "part": part, "method": method, "quality": quality,
        "start_time": START + 60.1 * (index + 1), "end_time": START + 60.1 * (index + 1) + 0.7,
        "temperature_setpoint": 25.0, "body_temperature": 25.07 + index, "air_temperature": 24.9,
    }  # fmt: skip
    if method == "pulse":
        return PointRow(**common, pulse_width_setpoint=1e-6 * (index + 1), rail_voltage_setpoint=12.0,
                        rail_voltage=11.98, rail_voltage_after=11.9, peak_current=0.5 * (index + 1),
                        resistance=0.018)  # fmt: skip
    return PointRow(**common, bias_current_setpoint=0.5 * index, bias_current=0.501 * index, inductance=2.2e-5,
                    resistance=0.0181, ac_resistance=0.4, test_frequency=1e5)  # fmt: skip


def captures(index: int, setting: int, row: SettingRow = SETTING, repeats: int = 2) -> tuple[CaptureRow, ...]:
    """Codes of one point, the same for the same index."""
    random = np.random.default_rng(4711 + index)
    kind = np.dtype(row.dtype)

    def codes() -> Any:
        if kind.kind == "f":
            return random.normal(size=row.samples).astype(kind)
        limits = np.iinfo(kind)
        return random.integers(limits.min, limits.max, row.samples, dtype=kind, endpoint=True)

    return tuple(
        CaptureRow(repeat, setting, START + 60.1 * (index + 1) + 0.1 * repeat, codes(), codes())
        for repeat in range(repeats)
    )


def write_run(
    folder: Path, *, points: int = 6, bias: int = 2, events: int = 3, setting: SettingRow = SETTING,
    state: str = "finished", header: RunHeader = HEADER,
) -> Sample:  # fmt: skip
    """A whole run: `points` pulse points and `bias` bias points over two legs and two parts."""
    sample = Sample(folder, header)
    with Journal.create(folder, header) as journal:
        journal.session("kneemap 0", {"python": "3"}, START)
        for instrument in INSTRUMENTS:
            journal.instrument(instrument)
        noted = [
            EventRow(START + number, "info", "note", f"event {number}, 25 °C") for number in range(events)
        ]
        for event in noted[:3]:
            journal.event(event)
        number = journal.setting(setting)
        total = points + bias
        for index in range(total):
            leg = 0 if index < total // 2 else 1
            if index in (0, total // 2):
                journal.leg_begin(leg, header.leg_setpoints[leg], START + index)
            journal.chamber(START + 60.1 * index, 24.5 + 0.1 * index)
            journal.body(START + 60.1 * index, index % 2, 23.5 + 0.1 * index)
            if index < points:
                row, taken = point(index, leg=leg, part=index % 2), captures(index, number, setting)
            else:
                row, taken = point(index, leg=leg, part=index % 2, method="bias"), ()
            journal.add_point(row, taken, noted[3:] if index == 0 else ())
        journal.state(state)
    return sample


def sample_tables(date: str = "2026-12-01T12:00:00Z") -> ExtractionTables:
    """Surfaces of two methods and their curves, with a value that was not reached."""
    random = np.random.default_rng(99)
    temperature, current = np.array([-39.8, 25.1]), np.linspace(0.0, 9.0, 5)

    def surface(part: int, method: Any) -> SurfaceTable:
        return SurfaceTable(part, method, temperature, current, random.random((2, 5)) * 1e-5,
                            random.random((2, 5)) * 1e-8, np.arange(10).reshape(2, 5), temperature + 0.01)  # fmt: skip

    def isat(part: int, method: Any, drops: tuple[float, ...]) -> IsatTable:
        ampere = random.random((len(drops), 2)) * 9
        ampere[0, 1] = np.nan
        return IsatTable(part, method, drops, temperature, ampere, ampere * 0.01)

    return ExtractionTables(
        "kneemap", "0.1.0", date, {"coverage": 0.95, "drops": [0.1, 0.2, 0.3], "reference": "same temperature"},
        (surface(1, "bias"), surface(0, "bias"), surface(0, "pulse")),
        (isat(0, "pulse", (0.1, 0.2, 0.3)), isat(1, "bias", (0.3,))),
    )  # fmt: skip


@pytest.fixture(scope="session")
def header() -> RunHeader:
    return HEADER


@pytest.fixture(scope="session")
def setting() -> SettingRow:
    return SETTING


@pytest.fixture
def make_point() -> Callable[..., PointRow]:
    return point


@pytest.fixture
def make_captures() -> Callable[..., tuple[CaptureRow, ...]]:
    return captures


@pytest.fixture(scope="session")
def run_writer() -> Callable[..., Sample]:
    """Writes a run into a given folder."""
    return write_run


@pytest.fixture
def make_run(tmp_path: Path) -> Callable[..., Sample]:
    """Writes a run into a folder of its own."""
    made = []

    def make(**wishes: Any) -> Sample:
        made.append(write_run(tmp_path / f"runs/run{len(made)}", **wishes))
        return made[-1]

    return make


@pytest.fixture(scope="session")
def tables() -> ExtractionTables:
    return sample_tables()


@pytest.fixture
def later_tables() -> ExtractionTables:
    return replace(sample_tables(), date="2026-12-02T12:00:00Z")


@pytest.fixture
def open_journal(tmp_path: Path, header: RunHeader) -> Any:
    """A journal with a session, open while the test runs."""
    with Journal.create(tmp_path / "open/run", header) as journal:
        journal.session("kneemap 0", {}, START)
        yield journal
