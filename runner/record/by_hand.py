"""A run made of captures that somebody took by hand: the same journal and record, a captures file for its plan.

The record keeps what the files hold: volts across the part, and amperes as shunt volts over the shunt's
stated resistance (its inductance and temperature coefficient are undone by extraction, as for any run).
"""

import os
import uuid
from collections.abc import Mapping, Sequence
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from runner.errors import Fault, InputError
from runner.record.consolidation import consolidate
from runner.record.folder import new_run_folder
from runner.record.hand_waveforms import Waveform, read_waveform
from runner.record.journal import Journal
from runner.record.rows import (
    CalibrationRow,
    CaptureRow,
    InstrumentRow,
    PartRow,
    PointRow,
    RunHeader,
    SettingRow,
)

if TYPE_CHECKING:
    # Only names for the reader: whoever records a night must not wait for the reader of plans, nor depend on it.
    from runner.plan import CapturesFile, LoadedCaptures

# Captures whose temperatures lie within this of each other form one leg [K].
LEG_SPAN = 2.0
# The driven part of a pulse, for its width: from where the current leaves this share of its peak to where it comes
# this near to it. Only a label for the eye; extraction finds the start of a pulse by itself.
_START, _END = 0.02, 0.98


def write_captures_run(
    loaded: "LoadedCaptures", *, into: Path, software: str, versions: Mapping[str, str]
) -> Path:
    """Read the waveforms a captures file names and write them as a run below ``into``; its folder comes back.

    Nothing is written before every waveform has been read.

    Raises:
        InputError: all faults of all waveforms at once.
    """
    captures = loaded.captures
    waveforms = _read_all(captures, loaded.captures_path.parent)
    legs = group_legs([capture.temperature_degC for capture in captures.captures])
    start = datetime.now(UTC)
    folder = new_run_folder(into, title=captures.title, start=start)
    header = RunHeader(
        run_id=str(uuid.uuid4()),
        title=captures.title,
        kind="captures",
        start=start.timestamp(),
        plan_name=loaded.captures_path.name,
        plan_bytes=loaded.captures_bytes,
        bench_name="",
        bench_bytes=b"",
        parts=(PartRow(captures.part.label),),
        leg_setpoints=tuple(setpoint for setpoint, _ in legs),
    )
    with Journal.create(folder, header) as journal:
        journal.session(software, versions, header.start)
        if captures.shunt is not None:
            journal.instrument(_shunt_row(captures))
        index = 0
        for leg, (setpoint, members) in enumerate(legs):
            journal.leg_begin(leg, setpoint, header.start)
            for member in members:
                _add(
                    journal, captures, waveforms[member], index=index, leg=leg, member=member, t=header.start
                )
                index += 1
            journal.leg_end(leg, header.start)
        journal.state("finished")
    consolidate(folder)
    return folder


def group_legs(temperatures_degC: Sequence[float]) -> list[tuple[float, list[int]]]:
    """Captures in legs: mean temperature [degC] and the places of its captures, from cold to hot.

    Captures form one leg when all of them lie within 2 K of each other; a chain of near neighbours that spans
    more is cut where it passes 2 K from its coldest.
    """
    order = sorted(range(len(temperatures_degC)), key=lambda place: temperatures_degC[place])
    groups: list[list[int]] = []
    for place in order:
        if groups and temperatures_degC[place] - temperatures_degC[groups[-1][0]] <= LEG_SPAN:
            groups[-1].append(place)
        else:
            groups.append([place])
    return [
        (float(np.mean([temperatures_degC[place] for place in group])), sorted(group)) for group in groups
    ]


def _read_all(captures: "CapturesFile", beside: Path) -> list[Waveform]:
    columns = captures.columns
    current = columns.shunt_voltage or columns.current or ""
    names = {"time": columns.time, "voltage": columns.voltage, "current": current}
    waveforms: list[Waveform] = []
    faults: list[Fault] = []
    for capture in captures.captures:
        try:
            waveforms.append(read_waveform(beside / capture.file, **names))
        except InputError as error:
            faults += error.faults
    if faults:
        raise InputError(faults)
    return waveforms


def _add(
    journal: Journal, captures: "CapturesFile", wave: Waveform, *, index: int, leg: int, member: int, t: float
) -> None:
    capture = captures.captures[member]
    by_shunt = captures.columns.shunt_voltage is not None and captures.shunt is not None
    to_ampere = 1.0 / captures.shunt.resistance.value if by_shunt and captures.shunt else 1.0
    current = wave.current * to_ampere
    setting = journal.setting(
        SettingRow(
            samples=len(current),
            interval=wave.interval,
            first=wave.first,
            dtype="float64",
            i_scale=to_ampere,
            detail={"file": os.fspath(capture.file)},
        )
    )
    peak = float(current.max())
    end = int(np.argmax(current >= _END * peak))
    low = np.flatnonzero(current[:end] <= _START * peak)
    width = (end - (int(low[-1]) if len(low) else 0)) * wave.interval
    journal.add_point(
        PointRow(
            plan_index=index,
            leg=leg,
            part=0,
            method="pulse",
            start_time=t,
            end_time=t,
            temperature_setpoint=capture.temperature_degC,
            body_temperature=capture.temperature_degC,
            pulse_width_setpoint=width,
            peak_current=peak,
        ),
        [CaptureRow(repeat=0, setting=setting, t=t, voltage=wave.voltage, current=wave.current)],
    )


def _shunt_row(captures: "CapturesFile") -> InstrumentRow:
    shunt = captures.shunt
    assert shunt is not None
    constants = {"resistance": (shunt.resistance, "ohm"), "series_inductance": (shunt.series_inductance, "H")}
    return InstrumentRow(
        role="shunt",
        nx_class="NXsensor",
        name="shunt",
        calibration={
            name: CalibrationRow(constant.value, units, constant.uncertainty)
            for name, (constant, units) in constants.items()
            if constant is not None
        },
    )
