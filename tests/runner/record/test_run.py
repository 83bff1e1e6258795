"""Reading a run: what extraction and the report see."""

import pickle
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from runner.errors import InputError
from runner.record import EventRow, Flag, Journal, PointRow, RecordError, SettingRow, consolidate, open_run


def test_a_run_says_what_it_was(make_run: Callable[..., Any]) -> None:
    sample = make_run()
    header = sample.header
    with open_run(sample.folder) as run:
        assert (run.title, run.kind, run.run_id, run.state) == (
            header.title,
            "plan",
            header.run_id,
            "finished",
        )
        assert (run.plan_name, run.plan_bytes) == (header.plan_name, header.plan_bytes)
        assert (run.bench_name, run.bench_bytes) == (header.bench_name, header.bench_bytes)
        assert run.start == header.start
        assert run.end == pytest.approx(header.start + 60.1 * 8 + 0.7, abs=1e-3)
        assert run.parts == header.parts
        assert [(leg.setpoint, leg.start) for leg in run.legs] == [(-40.0, 0.0), (25.0, 4.0)]
        assert [session.software for session in run.sessions] == ["kneemap 0"]
        assert run.events[0] == EventRow(0.0, "info", "note", "event 0, 25 °C")
        roles = {row.role: row for row in run.instruments}
        assert set(roles) == {"chamber", "digitizer", "pulser"}
        assert roles["digitizer"].calibration["voltage_gain"].uncertainty == 5e-4
        assert roles["chamber"].model == "C1"
        t, air = run.chamber_log
        np.testing.assert_allclose(t, 60.1 * np.arange(8), atol=1e-6)
        np.testing.assert_allclose(air, 24.5 + 0.1 * np.arange(8))
        np.testing.assert_allclose(run.body_logs[1][1], 23.5 + 0.1 * np.arange(1, 8, 2))


def test_points_are_the_last_acceptable_attempts_in_the_order_of_the_plan(
    open_journal: Journal, make_point: Callable[..., PointRow]
) -> None:
    attempts = [(2, 0), (0, Flag.CLIPPED), (1, Flag.NO_TRIGGER), (0, Flag.RETRIED), (1, Flag.SKIPPED), (3, 0),
                (3, Flag.OVERLOAD)]  # fmt: skip
    for index, quality in attempts:
        open_journal.add_point(make_point(index, quality=int(quality)), [])
    open_journal.close()
    with open_run(open_journal.folder) as run:
        assert run.points["plan_index"].tolist() == [0, 2, 3]
        assert run.points["point"].tolist() == [4, 1, 6]
        assert run.points["quality"].tolist() == [128, 0, 0]
        assert run.all_points["plan_index"].tolist() == [2, 0, 1, 0, 1, 3, 3]
        assert run.points["quality"].dtype == np.int64
        assert run.points["start_time"][0] == pytest.approx(60.1, abs=1e-6)


def test_captures_are_volts_amperes_and_seconds(
    make_run: Callable[..., Any], make_captures: Callable[..., Any], setting: SettingRow
) -> None:
    with open_run(make_run().folder) as run:
        found = run.captures(5)
        assert found is not None
        written = make_captures(4, 1)
        for row in range(2):
            volts = written[row].voltage * setting.v_scale + setting.v_offset
            np.testing.assert_array_equal(found.voltage[row], volts)
            np.testing.assert_array_equal(
                found.current[row], written[row].current * setting.i_scale + setting.i_offset
            )
        assert found.time[0] == setting.first
        np.testing.assert_allclose(np.diff(found.time), setting.interval, rtol=1e-6)
        assert found.repeat.tolist() == [0, 1]
        assert (found.setting["code_min"], found.setting["code_max"]) == (-32768, 32752)
        assert run.captures(7) is None, "a bias point has none"
        assert run.captures(1000) is None


def test_captures_taken_by_hand_keep_all_their_digits(
    make_run: Callable[..., Any], make_captures: Callable[..., Any], setting: SettingRow
) -> None:
    row = replace(setting, dtype="float64", v_scale=1.0, v_offset=0.0, detail={})
    with open_run(make_run(points=1, bias=0, setting=row).folder) as run:
        found = run.captures(1)
        assert found is not None
        np.testing.assert_array_equal(found.voltage[0], make_captures(0, 1, row)[0].voltage)
        assert found.setting["code_max"] == np.inf


def test_a_record_older_than_its_journal_is_rebuilt_first(
    make_run: Callable[..., Any], make_point: Callable[..., PointRow]
) -> None:
    sample = make_run()
    consolidate(sample.folder)
    with Journal.reopen(
        sample.folder, plan=sample.header.plan_bytes, bench=sample.header.bench_bytes
    ) as journal:
        journal.session("later", {}, journal.last_time())
        journal.add_point(make_point(8), [])
        with open_run(sample.folder) as run:  # acquired by a living process: as it is
            assert len(run.points["point"]) == 8
    with open_run(sample.folder) as run:
        assert len(run.points["point"]) == 9
    before = (sample.folder / "record.h5").stat().st_mtime_ns
    open_run(sample.folder).close()
    assert (sample.folder / "record.h5").stat().st_mtime_ns == before, "a current record is left alone"


@pytest.mark.parametrize(
    "act",
    [
        lambda journal: journal.state("stopped"),
        lambda journal: journal.event(EventRow(1.8e9, "info", "note", "later")),
        lambda journal: journal.chamber(1.8e9, 20.0),
        lambda journal: journal.body(1.8e9, 0, 20.0),
        lambda journal: journal.leg_end(0, 1.8e9),
        lambda journal: journal.session("later", {}, 1.8e9),
    ],
)
def test_whatever_is_new_in_the_journal_makes_the_record_old(
    make_run: Callable[..., Any], act: Callable[[Journal], None]
) -> None:
    sample = make_run()
    old = consolidate(sample.folder).read_bytes()
    with Journal.reopen(
        sample.folder, plan=sample.header.plan_bytes, bench=sample.header.bench_bytes
    ) as journal:
        act(journal)
    open_run(sample.folder).close()
    assert (sample.folder / "record.h5").read_bytes() != old


def test_a_run_in_its_first_leg_can_be_opened(
    open_journal: Journal, make_point: Callable[..., PointRow]
) -> None:
    open_journal.add_point(make_point(0), [])
    with open_run(open_journal.folder) as run:
        assert run.points["plan_index"].tolist() == [0]
    open_journal.add_point(make_point(1), [])
    assert open_journal.recorded() == {0, 1}


def test_an_open_run_stays_as_it_was_while_the_record_is_replaced(
    make_run: Callable[..., Any], make_point: Callable[..., PointRow]
) -> None:
    sample = make_run()
    with open_run(sample.folder) as run:
        with Journal.reopen(
            sample.folder, plan=sample.header.plan_bytes, bench=sample.header.bench_bytes
        ) as journal:
            journal.session("later", {}, journal.last_time())
            journal.add_point(make_point(8), [])
        consolidate(sample.folder)
        assert len(run.all_points["point"]) == 8
        assert run.captures(6) is not None


def test_a_run_can_be_sent_to_another_process(make_run: Callable[..., Any]) -> None:
    with open_run(make_run().folder) as run, pickle.loads(pickle.dumps(run)) as copy:
        assert copy.raw_sha256 == run.raw_sha256


def test_what_is_no_run_is_refused(tmp_path: Path) -> None:
    import h5py

    (tmp_path / "empty").mkdir()
    (tmp_path / "text.h5").write_text("not HDF5")
    with h5py.File(tmp_path / "other.h5", "w") as file:
        file["x"] = 1
    (tmp_path / "begun").mkdir()
    (tmp_path / "begun/journal.sqlite").touch()
    cases = [
        ("missing", "no such run"),
        ("empty", "is not a run folder"),
        ("text.h5", "not a record that can be read"),
        ("other.h5", "not a record of kneemap"),
        ("begun", "is not a run folder"),
    ]
    for name, words in cases:
        with pytest.raises(InputError, match=words):
            open_run(tmp_path / name)


def test_records_and_journals_of_a_later_layout_are_refused(
    make_run: Callable[..., Any], tmp_path: Path
) -> None:
    import sqlite3
    from contextlib import closing

    import h5py

    folder = make_run().folder
    record = consolidate(folder)
    with h5py.File(record, "r+") as file:
        file["entry/run_state"].attrs["layout_version"] = 99
    with pytest.raises(InputError, match="newer kneemap"):
        open_run(record)
    with closing(sqlite3.connect(folder / "journal.sqlite")) as journal, journal:
        journal.execute("UPDATE run SET value=99 WHERE key='layout_version'")
    with pytest.raises(InputError, match="newer kneemap"):
        consolidate(folder)


def test_damage_is_said_in_our_words(make_run: Callable[..., Any]) -> None:
    folder = make_run().folder
    record = consolidate(folder)
    data = bytearray(record.read_bytes())
    import h5py

    with h5py.File(record) as file:
        chunk = file["entry/captures_00/voltage"].id.get_chunk_info(2)
    data[chunk.byte_offset + chunk.size // 2] ^= 0xFF
    record.write_bytes(data)
    with open_run(record) as run:
        assert run.captures(1) is not None
        with pytest.raises(RecordError, match="captures of point 2 cannot be read"):
            run.captures(2)


def test_memory_does_not_grow_with_the_night(
    open_journal: Journal,
    make_point: Callable[..., PointRow],
    make_captures: Callable[..., Any],
    setting: SettingRow,
) -> None:
    """Rebuilding and walking through 4 MB of captures takes far less than their size."""
    import tracemalloc

    setting = replace(setting, samples=20_000)
    number = open_journal.setting(setting)
    for index in range(25):
        open_journal.add_point(make_point(index), make_captures(index, number, setting))
    open_journal.close()
    tracemalloc.start()
    try:
        with open_run(open_journal.folder) as run:
            for point in run.points["point"]:
                assert run.captures(int(point)) is not None
        _, peak = tracemalloc.get_traced_memory()
    finally:
        tracemalloc.stop()
    assert peak < 1.5e6
