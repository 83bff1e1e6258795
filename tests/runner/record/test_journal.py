"""The journal's own promises: what it is set to, what it refuses, what stays after something went wrong."""

import resource
import signal
import sqlite3
import subprocess
import sys
import textwrap
from collections.abc import Callable
from contextlib import closing
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from runner.errors import InputError
from runner.record import (
    EventRow,
    InstrumentRow,
    Journal,
    Live,
    PointRow,
    RecordError,
    RunHeader,
    SettingRow,
    append_event,
    is_being_acquired,
    live_points,
)
from runner.record.schema import APPEND_ONLY


def test_a_journal_commits_to_the_disk(open_journal: Journal) -> None:
    connection = open_journal._connection
    assert connection.execute("PRAGMA journal_mode").fetchone() == ("wal",)
    assert connection.execute("PRAGMA synchronous").fetchone() == (2,)  # FULL, sqlite.org/pragma.html


@pytest.mark.parametrize("refused", ["journal_mode=WAL", "synchronous=FULL"])
def test_a_disk_that_does_not_is_refused(
    tmp_path: Path, header: RunHeader, monkeypatch: pytest.MonkeyPatch, refused: str
) -> None:
    class Deaf(sqlite3.Connection):
        def execute(self, sql: str, *more: Any) -> sqlite3.Cursor:
            return super().execute("PRAGMA synchronous=NORMAL" if "synchronous=FULL" in sql else
                                   "PRAGMA journal_mode" if refused in sql else sql, *more)  # fmt: skip

    connect = sqlite3.connect
    monkeypatch.setattr("sqlite3.connect", lambda *a, **k: connect(*a, factory=Deaf, **k))
    with pytest.raises(RecordError, match="local disk"):
        Journal.create(tmp_path / "run", header)
    assert not is_being_acquired(tmp_path / "run")


def test_measured_rows_can_be_neither_changed_nor_removed(make_run: Callable[..., Any]) -> None:
    folder = make_run().folder
    with closing(sqlite3.connect(folder / "journal.sqlite")) as anybody:
        for table in APPEND_ONLY:
            column = anybody.execute(
                f"SELECT name FROM pragma_table_info('{table}') LIMIT 1 OFFSET 1"
            ).fetchone()[0]
            for statement in (f"UPDATE {table} SET {column}=0", f"DELETE FROM {table}"):
                with pytest.raises(sqlite3.IntegrityError, match=f"{table} is append-only"):
                    anybody.execute(statement)
            assert anybody.execute(f"SELECT count(*) FROM {table}").fetchone()[0] > 0
    assert set(APPEND_ONLY) >= {"point", "capture", "chamber", "event"}  # what was measured is never changed


def test_a_point_comes_back_bit_for_bit(
    open_journal: Journal,
    make_point: Callable[..., PointRow],
    make_captures: Callable[..., Any],
    setting: SettingRow,
) -> None:
    captures = make_captures(3, open_journal.setting(setting))
    row = replace(make_point(3), inductance=float.fromhex("0x1.921fb54442d18p-16"))
    assert open_journal.add_point(row, captures) == 1
    with Live(open_journal.folder) as live:
        points = live.points()
        stored = live._connection.execute("SELECT v, i FROM capture ORDER BY repeat").fetchall()
    assert points["inductance"][0].hex() == "0x1.921fb54442d18p-16"
    assert points["start_time"][0] == row.start_time
    assert points["bias_current"][0] != points["bias_current"][0]  # NaN: does not apply
    assert stored == [(c.voltage.tobytes(), c.current.tobytes()) for c in captures]


def test_codes_are_kept_little_endian(
    open_journal: Journal,
    make_point: Callable[..., PointRow],
    make_captures: Callable[..., Any],
    setting: SettingRow,
) -> None:
    good = make_captures(0, open_journal.setting(setting))
    swapped = [replace(c, voltage=c.voltage.astype(">i2"), current=c.current.astype(">i2")) for c in good]
    open_journal.add_point(make_point(0), swapped)
    with Live(open_journal.folder) as live:
        stored = live._connection.execute("SELECT v FROM capture ORDER BY repeat").fetchall()
    assert stored == [(c.voltage.astype("<i2").tobytes(),) for c in good]


def test_a_point_measured_again_is_a_new_attempt(
    open_journal: Journal, make_point: Callable[..., PointRow]
) -> None:
    for index in (0, 1, 0, 0):
        open_journal.add_point(make_point(index), [])
    points = live_points(open_journal.folder)
    assert points["plan_index"].tolist() == [0, 1, 0, 0]
    assert points["attempt"].tolist() == [1, 1, 2, 3]
    assert open_journal.recorded() == {0, 1}


def test_events_of_a_point_belong_to_it(open_journal: Journal, make_point: Callable[..., PointRow]) -> None:
    open_journal.event(EventRow(1.0, "warning", "fault", "nobody's"))
    open_journal.add_point(make_point(0, leg=1), [], [EventRow(2.0, "info", "note", "of the point")])
    with Live(open_journal.folder) as live:
        assert [(e.point, e.leg, e.text) for e in live.events()] == [
            (-1, -1, "nobody's"),
            (1, 1, "of the point"),
        ]
        assert [e.text for e in live.events(after=1)] == ["of the point"]


def test_the_same_setting_has_one_number(open_journal: Journal, setting: SettingRow) -> None:
    first = open_journal.setting(setting)
    assert open_journal.setting(replace(setting)) == first
    assert open_journal.setting(replace(setting, first=0.0)) == first + 1
    assert open_journal.setting(replace(setting, detail=dict(reversed(setting.detail.items())))) == first


def test_a_point_needs_a_session(
    tmp_path: Path, header: RunHeader, make_point: Callable[..., PointRow]
) -> None:
    with Journal.create(tmp_path / "run", header) as journal, pytest.raises(ValueError, match="session"):
        journal.add_point(make_point(0), [])


def test_an_instrument_noted_again_counts_as_it_is_now(open_journal: Journal) -> None:
    for serial in ("1", "2"):
        open_journal.instrument(InstrumentRow("lcr", "NXsensor", serial=serial))
    rows = open_journal._connection.execute("SELECT serial FROM instrument").fetchall()
    assert rows == [("2",)]


# ----------------------------------------------------------------------- resume


def test_a_resumed_run_goes_on_where_it_was(
    make_run: Callable[..., Any], make_captures: Callable[..., Any], make_point: Callable[..., PointRow],
    setting: SettingRow,
) -> None:  # fmt: skip
    sample = make_run()
    header = sample.header
    with Journal.reopen(sample.folder, plan=header.plan_bytes, bench=header.bench_bytes) as journal:
        assert journal.recorded() == set(range(8))
        assert journal.last_time() == pytest.approx(header.start + 60.1 * 8 + 0.7)
        assert journal.session("kneemap 1", {}, journal.last_time()) == 2
        assert journal.setting(setting) == 1
        assert journal.add_point(make_point(8, leg=1), make_captures(8, 1)) == 9
        journal.leg_begin(1, 25.0, journal.last_time())
        assert journal.ended_legs() == frozenset()
        journal.leg_end(1, journal.last_time())
        assert journal.ended_legs() == {1}
    with Live(sample.folder) as live:
        assert live.events()[-1].kind == "resumed"
        assert live.points()["session"].tolist() == [1] * 8 + [2]
        assert live.legs()[1].start == header.start + 4  # its first beginning
        assert [s.software for s in live.sessions()] == ["kneemap 0", "kneemap 1"]


@pytest.mark.parametrize("which", ["plan", "bench"])
def test_a_changed_plan_or_bench_is_refused_and_the_change_is_shown(
    make_run: Callable[..., Any], which: str
) -> None:
    sample = make_run()
    now = {"plan": sample.header.plan_bytes, "bench": sample.header.bench_bytes}
    now[which] = now[which].replace(b"raw", b"rare").replace(b"Nacht", b"Tag")
    with pytest.raises(
        InputError, match=rf"{which} is not the one .* line (1|2) was .*(Nacht|raw).* and is .*(Tag|rare)"
    ):
        Journal.reopen(sample.folder, **now)
    assert not is_being_acquired(sample.folder)
    now[which] = now[which].replace(b"rare", b"raw").replace(b"Tag", b"Nacht").replace(b"\r\n", b"\n")
    now[which] += b"" if which == "plan" else b"\n"
    with pytest.raises(InputError, match="only its line ends"):
        Journal.reopen(sample.folder, **now)


def test_what_is_no_run_cannot_be_resumed(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"journal\.sqlite"):
        Journal.reopen(tmp_path, plan=b"", bench=b"")
    (tmp_path / "journal.sqlite").touch()
    with pytest.raises(InputError, match="never begun"):
        Journal.reopen(tmp_path, plan=b"", bench=b"")
    (tmp_path / "journal.sqlite").write_bytes(b"not a journal at all" * 100)
    with pytest.raises(RecordError, match="damaged"):
        Journal.reopen(tmp_path, plan=b"", bench=b"")


def test_a_folder_that_holds_a_run_gets_no_second_one(
    make_run: Callable[..., Any], header: RunHeader
) -> None:
    folder = make_run().folder
    with pytest.raises(InputError, match="holds a run already"):
        Journal.create(folder, header)
    (folder / "journal.sqlite").rename(folder / "elsewhere")
    (folder / "record.h5").touch()
    with pytest.raises(InputError, match="holds a run already"):
        Journal.create(folder, header)


def test_what_a_power_cut_left_of_a_beginning_is_begun_anew(tmp_path: Path, header: RunHeader) -> None:
    (tmp_path / "journal.sqlite").touch()
    with Journal.create(tmp_path, header) as journal:
        assert journal.recorded() == frozenset()


# ------------------------------------------------------------------------ locks


def test_a_second_acquiring_process_is_refused(open_journal: Journal, header: RunHeader) -> None:
    program = textwrap.dedent(
        """
        import sys
        from runner.errors import InputError
        from runner.record import Journal, is_being_acquired
        print(is_being_acquired(__import__("pathlib").Path(sys.argv[1])))
        try:
            Journal.reopen(sys.argv[1], plan=b"", bench=b"")
        except InputError as error:
            print(error)
        """
    )
    command = [sys.executable, "-c", program, str(open_journal.folder)]
    said = subprocess.run(command, capture_output=True, text=True, check=True).stdout
    assert said.startswith("True")
    assert "another process is acquiring this run" in said
    with pytest.raises(InputError, match="another process is acquiring"):
        Journal.create(open_journal.folder, header)
    open_journal.close()
    open_journal.close()
    assert not is_being_acquired(open_journal.folder)


# --------------------------------------------------------------- other processes


def test_a_watchdog_adds_its_events_beside_a_living_run(
    open_journal: Journal, make_point: Callable[..., PointRow]
) -> None:
    append_event(open_journal.folder, EventRow(5.0, "error", "watchdog", "the runner hangs; bench made safe"))
    open_journal.add_point(make_point(0), [])
    open_journal.close()
    append_event(open_journal.folder, EventRow(6.0, "error", "watchdog", "the runner died"))
    with Live(open_journal.folder) as live:
        assert [event.t for event in live.events()] == [5.0, 6.0]
    with pytest.raises(InputError):
        append_event(open_journal.folder.parent, EventRow(5.0, "info", "x", "no run here"))


def test_a_reader_sees_the_run_as_it_stands(
    open_journal: Journal, make_point: Callable[..., PointRow]
) -> None:
    with Live(open_journal.folder) as live:
        assert live.points()["point"].tolist() == []
        open_journal.add_point(make_point(0), [])
        open_journal.add_point(make_point(1), [])
        assert live.points()["plan_index"].tolist() == [0, 1]
        assert live.points(after=1)["plan_index"].tolist() == [1]
        assert live.points(limit=1)["plan_index"].tolist() == [0]
        open_journal.state("acquiring")
        open_journal.chamber(10.0, -39.5)
        open_journal.body(11.0, 1, -38.0)
        open_journal.leg_begin(0, -40.0, 9.0)
        assert live.state() == "acquiring"
        assert [x.tolist() for x in live.chamber()] == [[10.0], [-39.5]]
        assert [x.tolist() for x in live.body(1)] == [[11.0], [-38.0]]
        assert [x.tolist() for x in live.body(0)] == [[], []]
        assert live.legs()[0].start == 9.0
        assert live.last_time() == open_journal.last_time()


# ------------------------------------------------------------------- bad moments


class FullOnce:
    """Stands for the disk: refuses room for a while, by SQLite's own limit on the size of a file."""

    def __init__(self, connection: sqlite3.Connection) -> None:
        self.connection = connection

    def fill(self) -> None:
        pages = self.connection.execute("PRAGMA page_count").fetchone()[0]
        self.connection.execute(f"PRAGMA max_page_count={pages}")

    def empty(self) -> None:
        self.connection.execute("PRAGMA max_page_count=1000000")


def test_a_full_disk_costs_the_point_and_nothing_else(
    open_journal: Journal,
    make_point: Callable[..., PointRow],
    make_captures: Callable[..., Any],
    setting: SettingRow,
) -> None:
    setting = replace(setting, samples=5000)
    number = open_journal.setting(setting)
    open_journal.add_point(make_point(0), make_captures(0, number, setting))
    disk = FullOnce(open_journal._connection)
    disk.fill()
    with pytest.raises(RecordError, match=r"point 1 .* could not be recorded: .*full"):
        open_journal.add_point(make_point(1), make_captures(1, number, setting))
    assert open_journal.recorded() == {0}
    disk.empty()
    assert open_journal.add_point(make_point(1), make_captures(1, number, setting)) == 2
    assert live_points(open_journal.folder)["attempt"].tolist() == [1, 1]


def test_a_file_that_may_not_grow_is_reported_and_earlier_points_are_intact(
    tmp_path: Path, make_run: Callable[..., Any]
) -> None:
    """The same with the operating system saying no, in a process of its own with a limit on the size of its files."""
    program = textwrap.dedent(
        """
        import sys, numpy
        from runner.record import *
        header = RunHeader("id", "t", "plan", 1.0, "p", b"", "b", b"", (PartRow("x"),), (25.0,))
        with Journal.create(sys.argv[1], header) as journal:
            journal.session("s", {}, 1.0)
            setting = journal.setting(SettingRow(10000, 1e-8, 0.0, "int16"))
            codes = numpy.arange(10000, dtype="int16")
            for index in range(1000):
                try:
                    journal.add_point(PointRow(index, 0, 0, "pulse", 1.0, 2.0), [CaptureRow(0, setting, 1.0, codes, codes)])
                except RecordError as error:
                    print(index, error)
                    break
        """
    )
    limit = 600_000

    def restrict() -> None:
        signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
        resource.setrlimit(resource.RLIMIT_FSIZE, (limit, limit))

    done = subprocess.run(
        [sys.executable, "-c", program, str(tmp_path / "run")],
        preexec_fn=restrict,
        capture_output=True,
        text=True,
    )
    assert done.returncode == 0, done.stderr
    recorded, said = done.stdout.split(" ", 1)
    assert "could not be recorded" in said
    assert int(recorded) >= 5
    with Live(tmp_path / "run") as live:
        assert live.points()["plan_index"].tolist() == list(range(int(recorded)))
        assert live._connection.execute("PRAGMA integrity_check").fetchone() == ("ok",)


def test_an_interrupt_in_the_middle_of_a_point_leaves_none_of_it(
    open_journal: Journal, make_point: Callable[..., PointRow], make_captures: Callable[..., Any], setting: SettingRow,
    monkeypatch: pytest.MonkeyPatch,
) -> None:  # fmt: skip
    captures = make_captures(0, open_journal.setting(setting))
    seen = []

    def interrupted(capture: Any) -> Any:
        seen.append(capture)
        if len(seen) == 2:
            raise KeyboardInterrupt
        return values(capture)

    from runner.record import journal as room

    values = room._capture_values
    monkeypatch.setattr(room, "_capture_values", interrupted)
    with pytest.raises(KeyboardInterrupt):
        open_journal.add_point(make_point(0), captures)
    assert open_journal.recorded() == frozenset()
    assert open_journal.add_point(make_point(0), captures) == 1


def test_a_closed_journal_needs_no_log(make_run: Callable[..., Any]) -> None:
    folder = make_run().folder
    assert not (folder / "journal.sqlite-wal").exists()
    with closing(sqlite3.connect(f"file:{folder / 'journal.sqlite'}?mode=ro&immutable=1", uri=True)) as bare:
        assert bare.execute("SELECT count(*) FROM point").fetchone() == (8,)


def test_the_log_is_folded_in_even_while_somebody_reads(
    open_journal: Journal, make_point: Callable[..., PointRow]
) -> None:
    with Live(open_journal.folder) as live:
        open_journal.add_point(make_point(0), [])
        live.points()
        open_journal.close()
        assert (open_journal.folder / "journal.sqlite-wal").stat().st_size == 0
