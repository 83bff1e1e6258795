"""The journal: what the acquiring process writes, one transaction a point.

A point is recorded when COMMIT returns and never earlier; a call that raised has recorded nothing. Everything
else in this file serves that sentence: WAL with ``synchronous=FULL`` (read back, not believed), the directory
fsynced, the lock that keeps a second writer out, and the checks that keep out what a rebuild could not write.

While a journal is open here, never open ``journal.sqlite`` with `open()` or by any library but sqlite3:
closing that second descriptor would drop the POSIX locks that SQLite holds for this process.
"""

import difflib
import hashlib
import json
import sqlite3
import zlib
from collections.abc import Iterator, Mapping, Sequence
from contextlib import closing, contextmanager
from dataclasses import replace
from pathlib import Path
from typing import Any, Self

import numpy as np
from filelock import FileLock

from runner.errors import Fault, InputError
from runner.record import checks, reading
from runner.record.columns import LAYOUT_VERSION, SCALARS
from runner.record.durable import fsync_folder, make_folder
from runner.record.errors import RecordError, not_a_run
from runner.record.lock import take_run_lock
from runner.record.places import JOURNAL, RECORD
from runner.record.rows import METHODS, CaptureRow, EventRow, InstrumentRow, PointRow, RunHeader, SettingRow
from runner.record.schema import statements

_POINT_COLUMNS = (
    "plan_index",
    "attempt",
    "session",
    "leg",
    "part",
    "method",
    "t_start",
    "t_end",
    "flags",
    *SCALARS,
)
_INSERT_POINT = (
    f"INSERT INTO point({', '.join(_POINT_COLUMNS)}) VALUES ({', '.join('?' * len(_POINT_COLUMNS))})"
)
_INSERT_CAPTURE = (
    "INSERT INTO capture(point, repeat, setting, t, v_crc, i_crc, v, i) VALUES (?,?,?,?,?,?,?,?)"
)
_INSERT_EVENT = "INSERT INTO event(t, level, kind, point, leg, text) VALUES (?,?,?,?,?,?)"
_INSERT_SETTING = (
    "INSERT OR IGNORE INTO setting"
    "(samples, interval, first, dtype, v_scale, v_offset, i_scale, i_offset, detail)"
    " VALUES (?,?,?,?,?,?,?,?,?)"
)
_FOLD_PATIENCE_MS = 2000
_BUSY = 10.0  # s to wait for another writer of the journal (only `append_event` of another process is one)


class Journal:
    """An open journal. Make one with `create` or `reopen`; close it, or use it in a ``with`` statement."""

    def __init__(self, folder: Path, lock: FileLock, connection: sqlite3.Connection) -> None:
        self.folder = folder
        self._lock = lock
        self._connection = connection
        self._session = 0
        self._settings: dict[int, SettingRow] = {}
        self._parts = 0
        self._legs = 0

    @classmethod
    def create(cls, folder: Path | str, header: RunHeader) -> Self:
        """Start a run in a folder that has none; the folder is made where it is missing.

        The start is rounded to a millisecond, so that it is the same number in the journal and as text in the
        record.

        Raises:
            InputError: the folder holds a run already, or another process is acquiring there.
            RecordError: the disk does not do what a journal needs (a network share, for one).
            ValueError: something in the header could not be written to the record.
        """
        checks.check_header(header)
        folder = Path(folder)
        try:
            make_folder(folder)
        except OSError as error:
            raise RecordError(f"{folder}: cannot be made: {error}.") from error
        lock = take_run_lock(folder)
        try:
            if (folder / RECORD).exists() or reading.has_run(folder):
                raise not_a_run(folder, "holds a run already; resume it, or choose another folder.")
            connection = _open(folder / JOURNAL)
            journal = cls(folder, lock, connection)
            try:
                journal._write_header(replace(header, start=round(header.start, 3)))
                # SQLite syncs the bytes; the names of the new file and of its folder are ours to sync.
                fsync_folder(folder)
                fsync_folder(folder.parent)
            except BaseException:
                connection.close()
                raise
        except BaseException:
            lock.release()
            raise
        return journal

    @classmethod
    def reopen(cls, folder: Path | str, *, plan: bytes, bench: bytes) -> Self:
        """Go on with a run that was stopped or killed. Call `session` next.

        Args:
            folder: of the run.
            plan: the plan as it is now, byte for byte.
            bench: the bench as it is now.

        Raises:
            InputError: there is no run; plan or bench are not those of the run; another process is acquiring
            it.
        """
        folder = Path(folder)
        if not (folder / JOURNAL).is_file():
            raise not_a_run(folder, f"is not a run that can be resumed: it has no {JOURNAL}.")
        lock = take_run_lock(folder)
        try:
            with closing(reading.connect(folder)) as reader:
                header = reading.read_header(reader, folder)
            _refuse_changes(folder, header, plan, bench)
            journal = cls(folder, lock, _open(folder / JOURNAL))
        except BaseException:
            lock.release()
            raise
        journal._learn()
        return journal

    # ------------------------------------------------------------------ rows

    def session(self, software: str, versions: Mapping[str, str], t: float) -> int:
        """Note a (re)start of the program, to which later points belong. Returns its number, from 1."""
        checks.check_text("session.software", software)
        text = _json("session.versions", versions)
        checks.check_finite("session.t", t)
        with self._transaction("a session") as cursor:
            cursor.execute("INSERT INTO session(t, software, versions) VALUES (?,?,?)", (t, software, text))
            number = int(cursor.lastrowid or 0)
            if number > 1:
                event = EventRow(t, "info", "resumed", f"Resumed: session {number} begins.")
                cursor.execute(_INSERT_EVENT, _event_values(event))
        self._session = number
        return number

    def instrument(self, row: InstrumentRow) -> None:
        """Note who answered for a role, and with which calibration; the last note of a role counts."""
        checks.check_instrument(row)
        calibration = {
            name: {
                "value": c.value,
                "units": c.units,
                "uncertainty": c.uncertainty,
                "date": c.date,
                "certificate": c.certificate,
            }
            for name, c in row.calibration.items()
        }
        values = (
            row.role,
            row.nx_class,
            row.name,
            row.vendor,
            row.model,
            row.serial,
            row.firmware,
            row.idn,
            row.address,
            _json("calibration", calibration),
        )
        with self._transaction("an instrument") as cursor:
            cursor.execute(
                f"INSERT OR REPLACE INTO instrument VALUES ({', '.join('?' * len(values))})", values
            )

    def leg_begin(self, leg: int, setpoint: float, t: float) -> None:
        """A leg begins. One taken up again keeps its first beginning, and has no end until `leg_end`."""
        self._check_leg(leg)
        checks.check_finite("leg_begin.t", t)
        with self._transaction("a leg") as cursor:
            cursor.execute(
                "UPDATE leg SET temperature_setpoint=?, t_start=coalesce(t_start, ?), t_end=NULL WHERE id=?",
                (setpoint, t, leg),
            )

    def leg_end(self, leg: int, t: float) -> None:
        """All that is done at this temperature is done."""
        self._check_leg(leg)
        checks.check_finite("leg_end.t", t)
        with self._transaction("a leg") as cursor:
            cursor.execute("UPDATE leg SET t_end=? WHERE id=?", (t, leg))

    def setting(self, row: SettingRow) -> int:
        """Number of a digitizer setting; the same setting gives the same number."""
        checks.check_setting(row)
        detail = _json("setting.detail", row.detail)
        values = (
            row.samples,
            float(row.interval),
            float(row.first),
            row.dtype,
            float(row.v_scale),
            float(row.v_offset),
            float(row.i_scale),
            float(row.i_offset),
            detail,
        )
        found = [number for number, known in self._settings.items() if known == row]
        if found:
            return found[0]
        with self._transaction("a digitizer setting") as cursor:
            cursor.execute(_INSERT_SETTING, values)
            cursor.execute(
                "SELECT id FROM setting WHERE samples=? AND interval=? AND first=? AND dtype=? AND v_scale=?"
                " AND v_offset=? AND i_scale=? AND i_offset=? AND detail=?",
                values,
            )
            number = int(cursor.fetchone()[0])
        self._settings[number] = row
        return number

    def add_point(
        self, row: PointRow, captures: Sequence[CaptureRow], events: Sequence[EventRow] = ()
    ) -> int:
        """Record one point with all its captures and events, in one transaction.

        Returns:
            The number of the point, from 1 in the order of recording. When this returns, the point is on the
            disk.

        Raises:
            RecordError: the disk refused; the point is not recorded, earlier points are safe.
            ValueError: a row that could not be written to the record.
        """
        if not self._session:
            raise ValueError("add_point: call session() first, a point belongs to one")
        checks.check_point(row, parts=self._parts, legs=self._legs)
        checks.check_captures(captures, self._settings.get(captures[0].setting) if captures else None)
        for event in events:
            checks.check_event(event)
        with self._transaction(f"point {row.plan_index} of the plan") as cursor:
            cursor.execute(
                "SELECT coalesce(max(attempt), 0) + 1 FROM point WHERE plan_index=?", (row.plan_index,)
            )
            attempt = int(cursor.fetchone()[0])
            scalars = (getattr(row, name) for name in SCALARS)
            cursor.execute(
                _INSERT_POINT,
                (
                    row.plan_index,
                    attempt,
                    self._session,
                    row.leg,
                    row.part,
                    METHODS[row.method],
                    float(row.start_time),
                    float(row.end_time),
                    int(row.quality),
                    *map(float, scalars),
                ),
            )
            number = int(cursor.lastrowid or 0)
            for capture in sorted(captures, key=lambda capture: capture.repeat):
                cursor.execute(_INSERT_CAPTURE, (number, *_capture_values(capture)))
            for event in events:
                cursor.execute(_INSERT_EVENT, _event_values(replace(event, point=number, leg=row.leg)))
        return number

    def chamber(self, t: float, air: float) -> None:
        """One reading of the chamber's air [degC]."""
        checks.check_finite("chamber.t", t)
        with self._transaction("a chamber reading") as cursor:
            cursor.execute("INSERT INTO chamber(t, air) VALUES (?,?)", (t, float(air)))

    def body(self, t: float, part: int, temperature: float) -> None:
        """One reading of a part's body [degC]: the trace on which a soak was judged."""
        checks.check_finite("body.t", t)
        if not 0 <= part < self._parts:
            raise ValueError(f"body.part: 0 to {self._parts - 1}, got {part!r}")
        with self._transaction("a body reading") as cursor:
            cursor.execute(
                "INSERT INTO body(t, part, temperature) VALUES (?,?,?)", (t, part, float(temperature))
            )

    def event(self, row: EventRow) -> None:
        """Something happened."""
        checks.check_event(row)
        with self._transaction("an event") as cursor:
            cursor.execute(_INSERT_EVENT, _event_values(row))

    def state(self, text: str) -> None:
        """Where the run stands, in a word or two ("acquiring", "finished", "stopped")."""
        checks.check_text("state", text)
        with self._transaction("the state of the run") as cursor:
            cursor.execute("UPDATE run SET value=? WHERE key='state'", (text,))

    # --------------------------------------------------------------- answers

    def recorded(self) -> frozenset[int]:
        """Plan indices that have at least one recorded point; what is left to do is all the others."""
        return frozenset(
            index for (index,) in self._connection.execute("SELECT DISTINCT plan_index FROM point")
        )

    def ended_legs(self) -> frozenset[int]:
        """Legs at which all was done."""
        return frozenset(
            leg for (leg,) in self._connection.execute("SELECT id FROM leg WHERE t_end IS NOT NULL")
        )

    def last_time(self) -> float:
        """The latest time in the journal [UTC s]: a clock that starts again must not start before it."""
        return reading.last_time(self._connection)

    def close(self) -> None:
        """Fold the write-ahead log into the journal and let go of the run. A second call does nothing."""
        try:
            self._fold_log_in()
            self._connection.close()
        finally:
            self._lock.release()

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    # --------------------------------------------------------------- private

    @contextmanager
    def _transaction(self, what: str) -> Iterator[sqlite3.Cursor]:
        """All or nothing, and on the disk when the block is left; whatever ends it early undoes it."""
        cursor = self._connection.cursor()
        try:
            cursor.execute("BEGIN IMMEDIATE")
            yield cursor
            cursor.execute("COMMIT")
        except BaseException as error:
            self._roll_back()
            if isinstance(error, sqlite3.DatabaseError) and not isinstance(error, sqlite3.IntegrityError):
                raise RecordError(
                    f"{self.folder / JOURNAL}: {what} could not be recorded: {error}. "
                    "What was recorded before is "
                    f"safe; make room on the disk, then 'kneemap resume {self.folder}'."
                ) from error
            raise
        finally:
            cursor.close()

    def _fold_log_in(self) -> None:
        """Bring all of the write-ahead log into the journal, even while somebody reads."""
        try:
            self._connection.execute(f"PRAGMA busy_timeout={_FOLD_PATIENCE_MS}")
            self._connection.execute("PRAGMA wal_checkpoint(TRUNCATE)")
        except sqlite3.Error:
            # A full disk, or a second call of `close`. The log holds everything and stays; nothing is lost by
            # leaving it for the next time, and a run must not fail at its last step.
            pass

    def _roll_back(self) -> None:
        if self._connection.in_transaction:
            self._connection.execute("ROLLBACK")

    def _write_header(self, header: RunHeader) -> None:
        facts: dict[str, Any] = {
            "layout_version": LAYOUT_VERSION,
            "run_id": header.run_id,
            "title": header.title,
            "kind": header.kind,
            "start": header.start,
            "state": "started",
            "plan_name": header.plan_name,
            "plan": header.plan_bytes,
            "plan_sha256": hashlib.sha256(header.plan_bytes).hexdigest(),
            "bench_name": header.bench_name,
            "bench": header.bench_bytes,
            "bench_sha256": hashlib.sha256(header.bench_bytes).hexdigest(),
        }
        with self._transaction("the beginning of the run") as cursor:
            for statement in statements():
                cursor.execute(statement)
            cursor.executemany("INSERT INTO run(key, value) VALUES (?,?)", facts.items())
            cursor.executemany(
                "INSERT INTO part(id, name, description, mux_channel) VALUES (?,?,?,?)",
                ((n, part.name, part.description, part.channel) for n, part in enumerate(header.parts)),
            )
            cursor.executemany(
                "INSERT INTO leg(id, temperature_setpoint) VALUES (?,?)", enumerate(header.leg_setpoints)
            )
        self._learn()

    def _learn(self) -> None:
        """Take from the journal what is needed to check new rows."""
        self._parts = self._connection.execute("SELECT count(*) FROM part").fetchone()[0]
        self._legs = self._connection.execute("SELECT count(*) FROM leg").fetchone()[0]
        self._settings = reading.read_settings(self._connection)

    def _check_leg(self, leg: int) -> None:
        if not 0 <= leg < self._legs:
            raise ValueError(f"leg: 0 to {self._legs - 1}, got {leg!r}")


def append_event(folder: Path | str, row: EventRow) -> None:
    """Add one event to a run's log from another process than the one that acquires (a watchdog, for one).

    Works beside a living or a hanging acquiring process, and after a dead one.

    Raises:
        InputError: the folder holds no run.
        RecordError: the disk refused, or the acquiring process hangs in the middle of a transaction.
    """
    checks.check_event(row)
    folder = Path(folder)
    if not reading.has_run(folder):
        raise not_a_run(folder, f"is not a run: it has no {JOURNAL}.")
    with closing(_open(folder / JOURNAL)) as connection:
        try:
            connection.execute(_INSERT_EVENT, _event_values(row))
        except sqlite3.OperationalError as error:
            raise RecordError(f"{folder / JOURNAL}: the event could not be added: {error}.") from error


def _open(path: Path) -> sqlite3.Connection:
    """A connection that commits to the disk, or none: what was asked for is read back."""
    try:
        connection = sqlite3.connect(path, isolation_level=None, timeout=_BUSY)
    except sqlite3.Error as error:
        raise RecordError(f"{path}: cannot be opened: {error}.") from error
    try:
        mode = connection.execute("PRAGMA journal_mode=WAL").fetchone()[0]
        connection.execute("PRAGMA synchronous=FULL")
        connection.execute("PRAGMA fullfsync=ON")  # macOS: flush the drive's cache too
        connection.execute("PRAGMA checkpoint_fullfsync=ON")
        connection.execute("PRAGMA foreign_keys=ON")
        synchronous = connection.execute("PRAGMA synchronous").fetchone()[0]
        if mode != "wal" or synchronous != 2:
            raise RecordError(
                f"{path}: the disk does not allow a safe journal (journal_mode {mode!r}, synchronous "
                f"{synchronous!r}). Keep runs on a local disk; a network share will not do."
            )
    except sqlite3.Error as error:
        connection.close()
        raise RecordError(f"{path}: cannot be used as a journal: {error}.") from error
    except BaseException:
        connection.close()
        raise
    return connection


def _refuse_changes(folder: Path, header: RunHeader, plan: bytes, bench: bytes) -> None:
    faults = [
        Fault(str(folder), f"the {what} is not the one this run was started with: {_difference(was, now)}")
        for what, was, now in (("plan", header.plan_bytes, plan), ("bench", header.bench_bytes, bench))
        if hashlib.sha256(was).digest() != hashlib.sha256(now).digest()
    ]
    if faults:
        raise InputError(faults)


def _difference(was: bytes, now: bytes) -> str:
    """The first place where the lines differ, and what to do about it."""
    before, after = (text.decode(errors="replace").splitlines() for text in (was, now))
    changes = difflib.SequenceMatcher(None, before, after, autojunk=False).get_opcodes()
    differing = [change for change in changes if change[0] != "equal"]
    shown = "only its line ends or its encoding differ"
    if differing:
        _, first, last, now_first, now_last = differing[0]
        more = f" ({len(differing) - 1} more places differ)" if len(differing) > 1 else ""
        shown = f"line {first + 1} was {_quoted(before[first:last])} and is {_quoted(after[now_first:now_last])}{more}"
    return f"{shown}. Put the old one back to resume, or start a new run."


def _quoted(lines: list[str]) -> str:
    return repr("\n".join(lines[:3])) if lines else "not there"


def _json(where: str, value: Any) -> str:
    try:
        text = json.dumps(value, sort_keys=True, ensure_ascii=False, allow_nan=False)
    except (TypeError, ValueError) as error:
        raise ValueError(f"{where}: cannot be kept as JSON: {error}") from None
    checks.check_text(where, text)
    return text


def _capture_values(capture: CaptureRow) -> tuple[Any, ...]:
    voltage, current = (_little_endian(codes) for codes in (capture.voltage, capture.current))
    return (
        capture.repeat,
        capture.setting,
        float(capture.t),
        zlib.crc32(voltage),
        zlib.crc32(current),
        voltage,
        current,
    )


def _little_endian(codes: np.ndarray[Any, Any]) -> bytes:
    return np.ascontiguousarray(codes, dtype=codes.dtype.newbyteorder("<")).tobytes()


def _event_values(row: EventRow) -> tuple[Any, ...]:
    return (float(row.t), row.level, row.kind, int(row.point), int(row.leg), row.text)
