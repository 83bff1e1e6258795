"""A small acquiring process, to be killed, cut off and resumed by the tests; also what they know about its points.

Run as a program it writes a run (or goes on with one) and says on standard output what it was promised:

    created                     the run exists
    will N                      about to record plan index N
    done N                      `add_point` returned
    consolidated N              a rebuild returned; N points were recorded before it began
    extracted                   an extraction was added and result.json written

Everything a point holds follows from its plan index, so that whoever reads the run can tell what should be there. The
tests load this file with `runpy` for `fingerprints`.
"""

import argparse
import hashlib
import sqlite3
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np

from runner.errors import InputError
from runner.record import (
    CaptureRow,
    EventRow,
    ExtractionTables,
    Journal,
    PartRow,
    PointRow,
    RunHeader,
    SettingRow,
    consolidate,
    write_extraction,
)
from runner.record import durable as durable_room
from runner.record import journal as journal_room
from runner.record.columns import SCALARS

START = 1.8e9
PLAN, BENCH = b"title: kill me\r\n", b"name: Mock bench\n"
REPEATS = 2
LEG = 5  # points a leg


def header(points: int) -> RunHeader:
    legs = tuple(float(leg) for leg in range(-(-points // LEG)))
    return RunHeader("id", "kill me", "plan", START, "p.yaml", PLAN, "b.yaml", BENCH, (PartRow("x"),), legs)


def point(index: int) -> PointRow:
    return PointRow(index, index // LEG, 0, "pulse", START + index, START + index + 0.5, index % 2,
                    peak_current=1.5 * index, resistance=1 / (index + 3))  # fmt: skip


def codes(index: int, samples: int) -> Any:
    """[repeats, channels, samples]"""
    return np.random.default_rng(index).integers(-32768, 32767, (REPEATS, 2, samples), dtype="int16")


def fingerprint(integers: list[int], scalars: list[float], blobs: list[bytes]) -> str:
    text = repr((integers, [repr(x) for x in scalars])).encode()
    return hashlib.sha256(text + b"".join(blobs)).hexdigest()


def expected(index: int, samples: int) -> str:
    row = point(index)
    return fingerprint(
        [index, index // LEG, index % 2], [getattr(row, name) for name in SCALARS],
        [channel.tobytes() for repeat in codes(index, samples) for channel in repeat],
    )  # fmt: skip


def fingerprints(connection: sqlite3.Connection) -> list[tuple[int, int, str]]:
    """Plan index, attempt and fingerprint of every point in a journal, in order, read without our own code."""
    found = []
    for seq, index, attempt, leg, flags, *scalars in connection.execute(
        f"SELECT seq, plan_index, attempt, leg, flags, {', '.join(SCALARS)} FROM point ORDER BY seq"
    ):
        blobs = connection.execute(
            "SELECT v, i FROM capture WHERE point=? ORDER BY repeat", (seq,)
        ).fetchall()
        values = [float("nan") if x is None else x for x in scalars]
        found.append(
            (index, attempt, fingerprint([index, leg, flags], values, [b for row in blobs for b in row]))
        )
    return found


def acquire(
    folder: Path,
    say: Callable[[str], None],
    *,
    points: int,
    samples: int,
    checkpoint_pages: int,
    weaken: str | None,
) -> None:
    """Record the points that are missing, rebuild after each leg, extract at the end."""
    with _opened(folder, points) as journal:
        say("created")
        connection = (
            journal._connection
        )  # to make the log turn over often, and to weaken what the room has set
        connection.execute(f"PRAGMA wal_autocheckpoint={checkpoint_pages}")
        if weaken == "commit":
            connection.execute("PRAGMA synchronous=NORMAL")
        journal.session("writer", {}, START)
        setting = journal.setting(SettingRow(samples, 1e-8, 0.0, "int16"))
        for index in sorted(set(range(points)) - journal.recorded()):
            if index % LEG == 0:
                journal.leg_begin(index // LEG, float(index // LEG), START + index)
            say(f"will {index}")
            taken = [
                CaptureRow(r, setting, START + index, *both) for r, both in enumerate(codes(index, samples))
            ]
            journal.add_point(
                point(index), taken, [EventRow(START + index, "info", "note", f"point {index}")]
            )
            say(f"done {index}")
            journal.chamber(START + index, 20.0)
            if index % LEG == LEG - 1:
                _rebuild(folder, len(journal.recorded()), say)
        journal.state("finished")
    _rebuild(folder, points, say)
    write_extraction(
        folder, ExtractionTables("writer", "0", "2026-12-01T00:00:00Z", {}, (), ()), {"points": points}
    )
    say("extracted")


def _opened(folder: Path, points: int) -> Journal:
    """The run as it stands, or a new one where a kill or a power cut came before there was one."""
    try:
        return Journal.reopen(folder, plan=PLAN, bench=BENCH)
    except InputError:
        return Journal.create(folder, header(points))


def _rebuild(folder: Path, recorded: int, say: Callable[[str], None]) -> None:
    consolidate(folder)
    say(f"consolidated {recorded}")


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("folder", type=Path)
    parser.add_argument("--points", type=int, default=15)
    parser.add_argument("--samples", type=int, default=300)
    parser.add_argument("--checkpoint-pages", type=int, default=1000)
    parser.add_argument("--weaken", choices=["commit", "file", "folder"])
    wishes = parser.parse_args()
    if wishes.weaken == "file":
        durable_room.fsync_file = lambda path: None
    if wishes.weaken == "folder":
        durable_room.fsync_folder = journal_room.fsync_folder = lambda folder: None
    acquire(wishes.folder, lambda text: print(text, flush=True), points=wishes.points, samples=wishes.samples,
            checkpoint_pages=wishes.checkpoint_pages, weaken=wishes.weaken)  # fmt: skip


if __name__ == "__main__":
    main()
