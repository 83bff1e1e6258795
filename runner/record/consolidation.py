"""From the journal to ``record.h5``: a rebuild, always complete, never in place.

Snapshot of the journal, ``record.h5.part``, every capture against its checksum, close, reopen, ``raw_sha256``
from the file against that from the journal, earlier extractions, fsync, replace, fsync of the folder.
Whatever goes wrong before the replace leaves the old record as it was. Meant to run in a process of its own
(`start_consolidation`), so that a night's acquisition never waits for compression.
"""

import os
import subprocess
import sys
from pathlib import Path

from runner.record import hdf, reading
from runner.record.durable import removed_unless_finished, replace, reserve
from runner.record.errors import RecordError
from runner.record.extractions import ROOM_FOR_EXTRACTION, add_extraction, read_everything
from runner.record.layout import store_digest, write_record
from runner.record.lock import holding_record_lock
from runner.record.places import PART, RECORD
from runner.record.tables import ExtractionTables
from runner.record.verify import raw_sha256_of

_NICE = 10


def consolidate(folder: Path | str) -> Path:
    """Rebuild the record of a run, in this process.

    Returns:
        Where it lies: ``record.h5``, or ``record.h5.part`` where the system would not replace an open file.

    Raises:
        InputError: the folder holds no run.
        RecordError: the journal is damaged, or the disk refused; an older record is still there.
    """
    folder = Path(folder)
    reading.connect(folder).close()  # says so when this is no run, before anything is made in the folder
    with holding_record_lock(folder):
        part, record = folder / PART, folder / RECORD
        earlier = _earlier_extractions(record)
        try:
            with removed_unless_finished(part):
                _build(folder, part, extractions=len(earlier))
                for tables, text, made_from in earlier:
                    with hdf.open_to_change(part) as file:
                        add_extraction(file, tables, text, made_from)
                return record if replace(part, record) else part
        except (OSError, RuntimeError) as error:
            raise RecordError(
                f"{record}: could not be rebuilt: {error}. "
                "The journal is untouched; try again when the disk allows."
            ) from error


def start_consolidation(folder: Path | str) -> "subprocess.Popen[str]":
    """Rebuild the record in a process of low priority and do not wait for it.

    Its exit status is 0 when the record is there; otherwise it says why on ``stderr`` (a pipe).
    """
    command = [sys.executable, "-m", "runner.record", str(folder)]
    # A session of its own: Ctrl-C at the terminal is for the sweep, which ends the run in good order.
    return subprocess.Popen(
        command,
        stdin=subprocess.DEVNULL,
        stdout=subprocess.DEVNULL,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
    )


def be_patient() -> None:
    """Let everything else on this computer go first."""
    if hasattr(os, "nice"):
        os.nice(_NICE)


def is_current(folder: Path) -> bool:
    """Does the record show all that the journal holds?"""
    record = folder / RECORD
    if not record.is_file():
        return False
    try:
        with hdf.open_to_read(record) as file:
            shown = hdf.read_text(file["entry/run_state"], "journal_mark")
    except hdf.DAMAGE:
        return False
    with reading.snapshot(folder) as journal:
        return shown == reading.mark(journal)


def _build(folder: Path, part: Path, *, extractions: int) -> None:
    with reading.snapshot(folder) as journal:
        reserve(part, reading.largest_record(journal) + ROOM_FOR_EXTRACTION * (1 + extractions))
        with hdf.create(part) as file:
            raw_sha256 = write_record(file, journal)
    with hdf.open_to_read(part) as file:
        found = raw_sha256_of(file)
    if found != raw_sha256:
        raise RecordError(
            f"{part}: what was written differs from the journal; the disk or the memory is faulty."
        )
    with hdf.open_to_change(part) as file:
        store_digest(file, raw_sha256)


def _earlier_extractions(record: Path) -> list[tuple[ExtractionTables, str, str]]:
    """Extractions live only in the record, so a rebuild takes over all that can still be read."""
    if not record.is_file():
        return []
    try:
        with hdf.open_to_read(record) as file:
            return read_everything(file)
    except hdf.DAMAGE:
        return []
