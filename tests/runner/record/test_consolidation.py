"""The rebuild: a pure function of journal and extractions, checked against the journal, never in place."""

import hashlib
import os
import resource
import signal
import sqlite3
import subprocess
import sys
import time
from collections.abc import Callable
from contextlib import closing
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest

from runner.errors import InputError
from runner.record import (
    ExtractionTables,
    Journal,
    PointRow,
    RecordError,
    consolidate,
    open_run,
    start_consolidation,
    verify_record,
    write_extraction,
)

# The definition of the layout, written out a second time.
INTEGERS = ("seq", "plan_index", "attempt", "session", "leg", "part", "method", "flags")
FLOATS = (
    "temperature_setpoint", "body_temperature", "air_temperature", "pulse_width_setpoint", "rail_voltage_setpoint",
    "rail_voltage", "rail_voltage_after", "bias_current_setpoint", "bias_current", "peak_current", "inductance",
    "resistance", "ac_resistance", "test_frequency",
)  # fmt: skip


def raw_sha256_by_hand(folder: Path) -> str:
    digest = hashlib.sha256()
    with closing(sqlite3.connect(folder / "journal.sqlite")) as journal:
        start = journal.execute("SELECT value FROM run WHERE key='start'").fetchone()[0]
        for row in journal.execute(
            f"SELECT {', '.join((*INTEGERS, 't_start', 't_end', *FLOATS))} FROM point ORDER BY seq"
        ):
            captures = journal.execute(
                "SELECT v, i FROM capture WHERE point=? ORDER BY repeat", row[:1]
            ).fetchall()
            digest.update(np.array([*row[:8], len(captures)], "<i8").tobytes())
            times = [row[8] - start, row[9] - start]
            digest.update(
                np.array([*times, *(np.nan if x is None else x for x in row[10:])], "<f8").tobytes()
            )
            for voltage, current in captures:
                digest.update(voltage + current)
    return digest.hexdigest()


def test_the_digest_is_the_one_of_the_layout(make_run: Callable[..., Any]) -> None:
    folder = make_run().folder
    record = consolidate(folder)
    with open_run(record) as run:
        assert run.raw_sha256 == raw_sha256_by_hand(folder) == verify_record(record)


def test_a_rebuild_gives_the_same_bytes_at_another_time_and_in_another_process(
    make_run: Callable[..., Any],
) -> None:
    folder = make_run().folder
    before = int(time.time())
    first = consolidate(folder).read_bytes()
    while int(time.time()) == before:  # HDF5 keeps times in whole seconds, where it keeps any
        open_run(folder).close()
    process = start_consolidation(folder)
    assert process.communicate(timeout=60) == (None, "")
    assert process.returncode == 0
    assert (folder / "record.h5").read_bytes() == first


def test_a_rebuild_keeps_the_extractions_byte_for_byte(
    make_run: Callable[..., Any], tables: ExtractionTables, later_tables: ExtractionTables
) -> None:
    folder = make_run().folder
    consolidate(folder)
    write_extraction(folder, tables, {"n": 1})
    write_extraction(folder, later_tables, {"n": 2})
    extracted = (folder / "record.h5").read_bytes()
    consolidate(folder)
    assert (folder / "record.h5").read_bytes() == extracted


def test_what_a_cut_short_rebuild_left_is_written_over(make_run: Callable[..., Any]) -> None:
    folder = make_run().folder
    (folder / "record.h5.part").write_bytes(b"half of something")
    assert consolidate(folder) == folder / "record.h5"
    assert not (folder / "record.h5.part").exists()


def test_a_damaged_capture_stops_the_rebuild_and_the_old_record_stays(make_run: Callable[..., Any]) -> None:
    folder = make_run().folder
    old = consolidate(folder).read_bytes()
    data = bytearray((folder / "journal.sqlite").read_bytes())
    with closing(sqlite3.connect(folder / "journal.sqlite")) as journal:
        codes = journal.execute("SELECT v FROM capture WHERE point=3 AND repeat=1").fetchone()[0]
    place = data.index(codes[:100])
    data[place + 50] ^= 1
    (folder / "journal.sqlite").write_bytes(data)
    with pytest.raises(RecordError, match="voltage codes of point 3, repeat 1"):
        consolidate(folder)
    assert (folder / "record.h5").read_bytes() == old
    assert not (folder / "record.h5.part").exists()


def test_a_damaged_record_is_found_out(make_run: Callable[..., Any]) -> None:
    record = consolidate(make_run().folder)
    with h5py.File(record, "r+") as file:
        file["entry/points/peak_current"][2] = 1.0000001
    with pytest.raises(RecordError, match="raw_sha256"):
        verify_record(record)
    with h5py.File(record, "r+") as file:
        file["entry/captures_00/current"][4, 7] += 1
    with pytest.raises(RecordError, match="do not match their checksum"):
        verify_record(record)
    record.write_bytes(record.read_bytes()[:20000])
    with pytest.raises(RecordError, match="damaged"):
        verify_record(record)


def test_a_full_disk_stops_the_rebuild_and_the_old_record_stays(
    make_run: Callable[..., Any], make_point: Callable[..., PointRow]
) -> None:
    sample = make_run()
    old = consolidate(sample.folder).read_bytes()
    with Journal.reopen(
        sample.folder, plan=sample.header.plan_bytes, bench=sample.header.bench_bytes
    ) as journal:
        journal.session("later", {}, journal.last_time())
        journal.add_point(make_point(8), [])

    def restrict() -> None:
        signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
        resource.setrlimit(resource.RLIMIT_FSIZE, (40_000, 40_000))

    command = [sys.executable, "-m", "runner.record", str(sample.folder)]
    done = subprocess.run(command, preexec_fn=restrict, capture_output=True, text=True)
    assert done.returncode == 1
    assert "could not be rebuilt" in done.stderr
    assert "Traceback" not in done.stderr
    assert (sample.folder / "record.h5").read_bytes() == old
    assert not (sample.folder / "record.h5.part").exists()


def test_the_rebuilding_process_says_what_is_wrong(tmp_path: Path) -> None:
    process = start_consolidation(tmp_path)
    _, said = process.communicate(timeout=60)
    assert process.returncode == 2
    assert "is not a run" in said
    assert list(tmp_path.iterdir()) == []
    with pytest.raises(InputError, match="is not a run"):
        consolidate(tmp_path)


def test_the_rebuilding_process_lets_others_go_first() -> None:
    program = "import os; from runner.record.consolidation import be_patient; be_patient(); print(os.nice(0))"
    said = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True, check=True).stdout
    assert int(said) == min(19, os.nice(0) + 10)


def test_an_open_file_that_may_not_be_replaced_costs_nothing(
    make_run: Callable[..., Any], monkeypatch: pytest.MonkeyPatch
) -> None:
    """As Windows does it while a viewer has the record open; the waits between the tries are left out."""
    folder = make_run().folder
    old = consolidate(folder).read_bytes()
    tries = []

    def refuse(part: Path, final: Path) -> None:
        tries.append((part, final))
        raise PermissionError(13, "in use")

    monkeypatch.setattr("runner.record.durable._IS_WINDOWS", True)
    monkeypatch.setattr("runner.record.durable._REPLACE_PAUSE", 0.0)
    monkeypatch.setattr("pathlib.PosixPath.replace", refuse)
    assert consolidate(folder) == folder / "record.h5.part"
    assert len(tries) == 20
    monkeypatch.undo()
    assert (folder / "record.h5").read_bytes() == old
    assert verify_record(folder / "record.h5.part") == verify_record(folder / "record.h5")
