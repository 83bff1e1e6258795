"""Reading a journal from outside the acquiring process: rows in, arrays and data classes out.

Two ways in. `snapshot` holds one read transaction, so that a rebuild sees one instant of the run. `Live`
makes one short read a call, for a status screen: a reader that kept its transaction would make the
write-ahead log grow. Neither ever writes. A journal whose log was lost, or that another program damaged, is
reported, never repaired.
"""

import json
import math
import sqlite3
from collections.abc import Callable, Iterator
from contextlib import closing, contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Self, TypeVar

import numpy as np

from runner.arrays import FloatArray, IntArray
from runner.record.columns import EVERY_COLUMN, INTEGERS, LAYOUT_VERSION, SCALARS, TIMES
from runner.record.errors import RecordError, not_a_run
from runner.record.places import JOURNAL
from runner.record.rows import CalibrationRow, EventRow, InstrumentRow, PartRow, RunHeader, SettingRow

Columns = dict[str, FloatArray | IntArray]

_SQL_NAME = {"point": "seq", "quality": "flags", "start_time": "t_start", "end_time": "t_end"}
_POINT_SELECT = (
    f"SELECT {', '.join(_SQL_NAME.get(name, name) for name in EVERY_COLUMN)}"
    " FROM point WHERE seq > ? ORDER BY seq LIMIT ?"
)
_TIMES = (
    "SELECT max(t_end) FROM point",
    "SELECT max(t) FROM event",
    "SELECT max(t) FROM chamber",
    "SELECT max(t) FROM body",
    "SELECT max(t) FROM session",
    "SELECT max(t_start) FROM leg",
    "SELECT max(t_end) FROM leg",
    "SELECT value FROM run WHERE key='start'",
)
_EVERYTHING = -1  # LIMIT -1 is SQLite's spelling of no limit


@dataclass(frozen=True, slots=True)
class LegTimes:
    """One leg: set-point [degC], beginning and end (NaN when it has not begun or ended)."""

    index: int
    setpoint: float
    start: float
    end: float


@dataclass(frozen=True, slots=True)
class Session:
    """One (re)start of the program."""

    number: int
    start: float
    software: str
    versions: dict[str, str]


@dataclass(frozen=True, slots=True)
class StoredCapture:
    """A capture as it lies in the journal; ``voltage`` and ``current`` are little-endian codes."""

    number: int
    point: int
    repeat: int
    setting: int
    v_crc: int
    i_crc: int
    voltage: bytes
    current: bytes


def has_run(folder: Path) -> bool:
    """Is there a journal with a run in it? What a power cut left at the very start is not one."""
    if not (folder / JOURNAL).is_file():
        return False
    with closing(connect(folder)) as connection:
        found = connection.execute("SELECT 1 FROM sqlite_master WHERE name='run'").fetchone()
    return found is not None


def connect(folder: Path) -> sqlite3.Connection:
    """A connection that can only read.

    Raises:
        InputError: the folder has no journal.
        RecordError: the journal cannot be read.
    """
    path = folder / JOURNAL
    if not path.is_file():
        raise not_a_run(folder, f"is not a run: it has no {JOURNAL}.")
    name = path.absolute().as_uri() + "?mode=ro"
    try:
        connection = _tried(name)
    except sqlite3.OperationalError as error:
        # A closed journal in a folder that may only be read: SQLite cannot make its shared memory there.
        # Without a log beside it nothing can change it, and it may be read as it lies. With one, points would
        # be missing.
        log = path.with_name(path.name + "-wal")
        if log.exists() and log.stat().st_size:
            raise _unreadable(path, error) from error
        try:
            connection = _tried(name + "&immutable=1")
        except sqlite3.DatabaseError as error_again:
            raise _unreadable(path, error_again) from error_again
    except sqlite3.DatabaseError as error:
        raise _unreadable(path, error) from error
    return connection


def _unreadable(path: Path, error: sqlite3.Error) -> RecordError:
    return RecordError(
        f"{path}: cannot be read: {error}. If the run lies where it may only be read, copy the whole folder (the -wal "
        "file too) to a disk of this computer first; otherwise it is damaged."
    )


def _tried(name: str) -> sqlite3.Connection:
    connection = sqlite3.connect(name, uri=True, isolation_level=None, timeout=10.0)
    try:
        connection.execute("SELECT count(*) FROM sqlite_master").fetchone()
    except BaseException:
        connection.close()
        raise
    return connection


@contextmanager
def snapshot(folder: Path) -> Iterator[sqlite3.Connection]:
    """One instant of the run, for as long as the block lasts."""
    with closing(connect(folder)) as connection:
        connection.execute("BEGIN")
        try:
            read_header(connection, folder)  # the first read fixes the instant
            yield connection
        except sqlite3.DatabaseError as error:
            raise _unreadable(folder / JOURNAL, error) from error


# ------------------------------------------------------------------------ rows


def read_facts(connection: sqlite3.Connection, where: object) -> dict[str, Any]:
    """Key and value of the table ``run``."""
    try:
        facts: dict[str, Any] = dict(connection.execute("SELECT key, value FROM run"))
    except sqlite3.OperationalError as error:
        if "no such table" in str(error):
            raise not_a_run(where, "is not a run: its journal was never begun.") from None
        raise
    version = facts.get("layout_version")
    if not isinstance(version, int) or version > LAYOUT_VERSION:
        raise not_a_run(
            where, f"was written by a newer kneemap (layout {version!r}, this one knows {LAYOUT_VERSION})."
        )
    return facts


def read_header(connection: sqlite3.Connection, where: object) -> RunHeader:
    """What the run was started with."""
    facts = read_facts(connection, where)
    parts = connection.execute("SELECT name, description, mux_channel FROM part ORDER BY id")
    return RunHeader(
        run_id=facts["run_id"],
        title=facts["title"],
        kind=facts["kind"],
        start=facts["start"],
        plan_name=facts["plan_name"],
        plan_bytes=facts["plan"],
        bench_name=facts["bench_name"],
        bench_bytes=facts["bench"],
        parts=tuple(PartRow(*row) for row in parts),
        leg_setpoints=tuple(leg.setpoint for leg in read_legs(connection)),
    )


def read_settings(connection: sqlite3.Connection) -> dict[int, SettingRow]:
    """Digitizer settings by number."""
    rows = connection.execute(
        "SELECT id, samples, interval, first, dtype, v_scale, v_offset, i_scale, i_offset, detail"
        " FROM setting ORDER BY id"
    )
    settings: dict[int, list[Any]] = {row[0]: [*row[1:9], json.loads(row[9])] for row in rows}
    return {number: SettingRow(*values) for number, values in settings.items()}


def read_points(connection: sqlite3.Connection, after: int = 0, limit: int = _EVERYTHING) -> Columns:
    """Columns of the points numbered above ``after``, at most ``limit`` of them; times in UTC s."""
    rows = connection.execute(_POINT_SELECT, (after, limit)).fetchall()
    table = zip(*rows, strict=True) if rows else iter([()] * len(EVERY_COLUMN))
    kinds: dict[str, Any] = dict.fromkeys(INTEGERS, np.int64) | dict.fromkeys((*TIMES, *SCALARS), np.float64)
    return {
        name: np.array(values, dtype=kinds[name]) for name, values in zip(EVERY_COLUMN, table, strict=True)
    }


def read_captures(connection: sqlite3.Connection) -> Iterator[StoredCapture]:
    """All captures, by point and repeat, one at a time."""
    rows = connection.execute(
        "SELECT id, point, repeat, setting, v_crc, i_crc, v, i FROM capture ORDER BY point, repeat"
    )
    return (StoredCapture(*row) for row in rows)


def count_captures(connection: sqlite3.Connection) -> dict[int, int]:
    """How many captures each setting has; a setting without captures is left out."""
    return dict(connection.execute("SELECT setting, count(*) FROM capture GROUP BY setting ORDER BY setting"))


def read_legs(connection: sqlite3.Connection) -> tuple[LegTimes, ...]:
    """Every leg of the plan, begun or not; times in UTC s."""
    rows = connection.execute("SELECT id, temperature_setpoint, t_start, t_end FROM leg ORDER BY id")
    return tuple(LegTimes(index, *(math.nan if x is None else x for x in rest)) for index, *rest in rows)


def read_sessions(connection: sqlite3.Connection) -> tuple[Session, ...]:
    rows = connection.execute("SELECT id, t, software, versions FROM session ORDER BY id")
    return tuple(Session(number, t, software, json.loads(versions)) for number, t, software, versions in rows)


def read_instruments(connection: sqlite3.Connection) -> tuple[InstrumentRow, ...]:
    """Instruments by role."""
    rows = connection.execute("SELECT * FROM instrument ORDER BY role")
    return tuple(_instrument(row) for row in rows)


def _instrument(row: tuple[Any, ...]) -> InstrumentRow:
    constants = json.loads(row[-1])
    calibration = {name: CalibrationRow(**constant) for name, constant in constants.items()}
    values = [*row[:9], calibration]
    return InstrumentRow(*values)


def read_events(
    connection: sqlite3.Connection, after: int = 0, limit: int = _EVERYTHING
) -> tuple[EventRow, ...]:
    """Events in the order in which they were written; ``after`` counts events from the start of the run."""
    rows = connection.execute(
        "SELECT t, level, kind, text, point, leg FROM event WHERE rowid > ? ORDER BY rowid LIMIT ?",
        (after, limit),
    )
    return tuple(EventRow(*row) for row in rows)


def read_chamber(connection: sqlite3.Connection, after: int = 0) -> tuple[FloatArray, FloatArray]:
    """Time [UTC s] and air temperature [degC], both [n]."""
    return _pair(connection.execute("SELECT t, air FROM chamber WHERE rowid > ? ORDER BY rowid", (after,)))


def read_body(connection: sqlite3.Connection, part: int, after: int = 0) -> tuple[FloatArray, FloatArray]:
    """Time [UTC s] and body temperature [degC] of one part, both [n]."""
    return _pair(
        connection.execute(
            "SELECT t, temperature FROM body WHERE part = ? AND rowid > ? ORDER BY rowid", (part, after)
        )
    )


def _pair(rows: sqlite3.Cursor) -> tuple[FloatArray, FloatArray]:
    table = np.array(rows.fetchall(), dtype=np.float64).reshape(-1, 2)
    return table[:, 0].copy(), table[:, 1].copy()


def last_time(connection: sqlite3.Connection) -> float:
    """The latest time anywhere in the journal [UTC s]; the start of the run when nothing has happened yet."""
    times = (connection.execute(question).fetchone()[0] for question in _TIMES)
    return float(max(t for t in times if t is not None))


def largest_record(connection: sqlite3.Connection) -> int:
    """Bytes that a record of this journal has at most, if nothing in it can be compressed."""
    codes, captures = connection.execute(
        "SELECT total(length(v) + length(i)), count(*) FROM capture"
    ).fetchone()
    points, texts = connection.execute(
        "SELECT (SELECT count(*) FROM point), total(length(text)) FROM event"
    ).fetchone()
    logged = connection.execute(
        "SELECT (SELECT count(*) FROM chamber) + (SELECT count(*) FROM body)"
    ).fetchone()[0]
    events = connection.execute("SELECT count(*) FROM event").fetchone()[0]
    files = connection.execute("SELECT total(length(value)) FROM run").fetchone()[0]
    # 500 bytes a capture for its chunks' place in the index; 200 an event for its columns and the heap of its texts.
    return (
        int(1.01 * codes + 500 * captures + 250 * points + 200 * events + 4 * texts + 32 * logged + files)
        + 1_000_000
    )


def mark(connection: sqlite3.Connection) -> str:
    """A short text that changes whenever the record would: how far the journal has come."""
    counts = {
        table: connection.execute(f"SELECT count(*) FROM {table}").fetchone()[0]
        for table in ("session", "instrument", "leg", "point", "chamber", "body", "event")
    }
    begun, ended = connection.execute("SELECT total(t_start), total(t_end) FROM leg").fetchone()
    state = connection.execute("SELECT value FROM run WHERE key='state'").fetchone()[0]
    return json.dumps(counts | {"legs_begun": begun, "legs_ended": ended, "state": state}, sort_keys=True)


# ------------------------------------------------------------------------ live


_T = TypeVar("_T")


class Live:
    """A run as it stands now, also while another process acquires it. Every call is one short read."""

    def __init__(self, folder: Path | str) -> None:
        self.folder = Path(folder)
        self._connection = connect(self.folder)

    def header(self) -> RunHeader:
        """What the run was started with."""
        return self._ask(lambda connection: read_header(connection, self.folder))

    def state(self) -> str:
        """Where the run stands, in the words of whoever acquires it."""
        return self._ask(lambda connection: str(read_facts(connection, self.folder)["state"]))

    def points(self, after: int = 0, limit: int = 1000) -> Columns:
        """Points numbered above ``after``; times in UTC s."""
        return self._ask(lambda connection: read_points(connection, after, limit))

    def events(self, after: int = 0, limit: int = 1000) -> tuple[EventRow, ...]:
        """Events after the first ``after``; times in UTC s."""
        return self._ask(lambda connection: read_events(connection, after, limit))

    def legs(self) -> tuple[LegTimes, ...]:
        """Every leg of the plan; times in UTC s."""
        return self._ask(read_legs)

    def sessions(self) -> tuple[Session, ...]:
        """Every (re)start; times in UTC s."""
        return self._ask(read_sessions)

    def chamber(self, after: int = 0) -> tuple[FloatArray, FloatArray]:
        """Time [UTC s] and air temperature [degC] of the readings after the first ``after``."""
        return self._ask(lambda connection: read_chamber(connection, after))

    def body(self, part: int) -> tuple[FloatArray, FloatArray]:
        """Time [UTC s] and body temperature [degC] of a part."""
        return self._ask(lambda connection: read_body(connection, part))

    def last_time(self) -> float:
        """The latest time anywhere in the journal [UTC s]."""
        return self._ask(last_time)

    def close(self) -> None:
        self._connection.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def _ask(self, question: Callable[[sqlite3.Connection], _T]) -> _T:
        try:
            return question(self._connection)
        except sqlite3.DatabaseError as error:
            raise _unreadable(self.folder / JOURNAL, error) from error


def live_points(folder: Path | str, after_seq: int = 0) -> Columns:
    """Columns of the points recorded after point number ``after_seq``; times in UTC s. See also `Live`."""
    with Live(folder) as live:
        return live.points(after_seq, _EVERYTHING)
