"""The tables of ``journal.sqlite``.

Measured things are append-only, and the database itself says so: a trigger aborts any UPDATE or DELETE,
whichever program tries. Only the state of the run, the times of a leg and the identity of an instrument may
be written again.
"""

from typing import Final

from runner.record.columns import SCALARS

APPEND_ONLY: Final = ("session", "part", "setting", "point", "capture", "chamber", "body", "event")

_TABLES: Final = f"""
CREATE TABLE run(key TEXT PRIMARY KEY, value) WITHOUT ROWID;
CREATE TABLE session(id INTEGER PRIMARY KEY, t REAL NOT NULL, software TEXT NOT NULL, versions TEXT NOT NULL);
CREATE TABLE instrument(role TEXT PRIMARY KEY, nx_class TEXT NOT NULL, name TEXT NOT NULL,
  vendor TEXT NOT NULL, model TEXT NOT NULL, serial TEXT NOT NULL, firmware TEXT NOT NULL, idn TEXT NOT NULL,
  address TEXT NOT NULL, calibration TEXT NOT NULL);
CREATE TABLE part(id INTEGER PRIMARY KEY, name TEXT NOT NULL, description TEXT NOT NULL,
  mux_channel INTEGER NOT NULL);
CREATE TABLE leg(id INTEGER PRIMARY KEY, temperature_setpoint REAL, t_start REAL, t_end REAL);
CREATE TABLE setting(id INTEGER PRIMARY KEY, samples INTEGER NOT NULL, interval REAL NOT NULL,
  first REAL NOT NULL, dtype TEXT NOT NULL, v_scale REAL NOT NULL, v_offset REAL NOT NULL,
  i_scale REAL NOT NULL, i_offset REAL NOT NULL, detail TEXT NOT NULL,
  UNIQUE(samples, interval, first, dtype, v_scale, v_offset, i_scale, i_offset, detail));
CREATE TABLE point(seq INTEGER PRIMARY KEY, plan_index INTEGER NOT NULL, attempt INTEGER NOT NULL,
  session INTEGER NOT NULL REFERENCES session(id), leg INTEGER NOT NULL REFERENCES leg(id),
  part INTEGER NOT NULL REFERENCES part(id), method INTEGER NOT NULL,
  t_start REAL NOT NULL, t_end REAL NOT NULL, flags INTEGER NOT NULL,
  {", ".join(f"{name} REAL" for name in SCALARS)},
  UNIQUE(plan_index, attempt));
CREATE TABLE capture(id INTEGER PRIMARY KEY, point INTEGER NOT NULL REFERENCES point(seq),
  repeat INTEGER NOT NULL, setting INTEGER NOT NULL REFERENCES setting(id), t REAL NOT NULL,
  v_crc INTEGER NOT NULL, i_crc INTEGER NOT NULL, v BLOB NOT NULL, i BLOB NOT NULL, UNIQUE(point, repeat));
CREATE TABLE chamber(t REAL NOT NULL, air REAL);
CREATE TABLE body(t REAL NOT NULL, part INTEGER NOT NULL REFERENCES part(id), temperature REAL);
CREATE TABLE event(t REAL NOT NULL, level TEXT NOT NULL, kind TEXT NOT NULL, point INTEGER NOT NULL,
  leg INTEGER NOT NULL, text TEXT NOT NULL);
"""

_TRIGGERS: Final = "".join(
    f"CREATE TRIGGER {table}_no_{act.lower()} BEFORE {act} ON {table} "
    f"BEGIN SELECT RAISE(ABORT, '{table} is append-only'); END;\n"
    for table in APPEND_ONLY
    for act in ("UPDATE", "DELETE")
)

SCHEMA: Final = _TABLES + _TRIGGERS


def statements() -> list[str]:
    """The schema as single statements, to be run inside the transaction that also writes the header."""
    tables = [text.strip() for text in _TABLES.split(";") if text.strip()]
    return tables + [text for text in _TRIGGERS.splitlines() if text]
