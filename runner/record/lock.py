"""Who may write: ``run.lock`` for the one process that acquires, ``record.lock`` for whoever rebuilds the
record.

Both are locks of the operating system on an open file, so that they vanish with the process that held them,
however it ended; the files themselves stay and mean nothing.
"""

from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from filelock import FileLock, Timeout

from runner.errors import Fault, InputError
from runner.record.errors import RecordError
from runner.record.places import RECORD_LOCK, RUN_LOCK

#: A reader that asks `is_being_acquired` holds the lock for an instant; an acquiring process outwaits it.
_PATIENCE = 1.0  # s
_RECORD_PATIENCE = 1800.0  # s: the longest rebuild that somebody else may be busy with


def take_run_lock(folder: Path) -> FileLock:
    """Become the one process that acquires this run.

    Raises:
        InputError: another process is acquiring it.
        RecordError: the disk refused.
    """
    lock = FileLock(folder / RUN_LOCK, timeout=_PATIENCE)
    try:
        lock.acquire()
    except Timeout:
        raise InputError([Fault(str(folder), _REFUSAL)]) from None
    except OSError as error:
        raise RecordError(f"{folder / RUN_LOCK}: cannot be locked: {error}.") from error
    return lock


_REFUSAL = (
    "another process is acquiring this run right now (it holds run.lock). Watch it with 'kneemap status', "
    "or stop it and try again."
)


def is_being_acquired(folder: Path) -> bool:
    """Does a living process hold the run?"""
    path = folder / RUN_LOCK
    if not path.exists():
        return False
    lock = FileLock(path, timeout=0)
    try:
        lock.acquire()
    except Timeout:
        return True
    except OSError:  # a folder that we may only read: nobody can be writing it from here
        return False
    lock.release()
    return False


@contextmanager
def holding_record_lock(folder: Path) -> Iterator[None]:
    """Rebuilds and re-extractions of one run come one after the other, in whichever process they run.

    Raises:
        RecordError: the folder cannot be written, or another rebuild takes longer than anybody would wait.
    """
    lock = FileLock(folder / RECORD_LOCK, timeout=_RECORD_PATIENCE)
    try:
        lock.acquire()
    except OSError as error:
        raise RecordError(f"{folder / RECORD_LOCK}: cannot be locked: {error}.") from error
    try:
        yield
    finally:
        lock.release()
