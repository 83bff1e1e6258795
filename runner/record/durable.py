"""Making the disk keep what it was told: the only file of the room that calls fsync and replace.

A name is safe only when its directory has been fsynced, and the bytes behind a name only when the file was
fsynced before it got that name. Leave one of them out and a power cut takes the run (the tests show that it
does).
"""

import errno
import os
import shutil
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

_IS_WINDOWS = os.name == "nt"
_REPLACE_TRIES = 20
_REPLACE_PAUSE = 0.25  # s


def make_folder(folder: Path) -> None:
    """Create a folder and what is missing above it, each name fsynced."""
    if folder.is_dir():
        return
    make_folder(folder.parent)
    folder.mkdir(exist_ok=True)
    fsync_folder(folder.parent)


def fsync_file(path: Path) -> None:
    """Wait until the bytes of a file are on the disk."""
    with path.open("rb+") as file:
        os.fsync(file.fileno())


def fsync_folder(folder: Path) -> None:
    """Wait until the names in a folder are on the disk. Windows has no such call and needs none."""
    if _IS_WINDOWS:
        return
    descriptor = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def reserve(part: Path, size: int) -> None:
    """See that a file of this many bytes could be written now, and leave it empty.

    HDF5 does not survive a full disk: it keeps what it could not write, fails again at every close and takes the
    process with it at the end. So the question is asked before it opens the file; and a rebuild that might fill the
    disk does not start, because the next point needs that room more.

    Raises:
        OSError: there is no room, or a quota or limit forbids it.
    """
    with part.open("wb") as file:
        if hasattr(os, "posix_fallocate"):
            os.posix_fallocate(file.fileno(), 0, size)
            file.truncate(0)
        elif (free := shutil.disk_usage(part.parent).free) < size:
            raise OSError(errno.ENOSPC, f"{size} bytes are needed, {free} are free")


@contextmanager
def removed_unless_finished(part: Path) -> Iterator[None]:
    """Whatever ends the block early leaves no half file behind; a full disk gets its room back."""
    try:
        yield
    except BaseException:
        part.unlink(missing_ok=True)
        raise


def replace(part: Path, final: Path) -> bool:
    """Put a finished file in place of an older one, all or nothing.

    Returns:
        False when somebody keeps the old file open on a system that refuses to replace it then (Windows);
        ``part`` is left behind.
    """
    fsync_file(part)
    for tries_left in reversed(range(_REPLACE_TRIES)):
        try:
            part.replace(final)
        except PermissionError:
            if not _IS_WINDOWS:
                raise
            if tries_left:
                time.sleep(_REPLACE_PAUSE)
        else:
            fsync_folder(final.parent)
            return True
    return False


def write_file(path: Path, data: bytes) -> None:
    """Write a small file so that at any instant the old or the new one is there, whole."""
    part = path.with_name(path.name + ".part")
    part.write_bytes(data)
    replace(part, path)


def copy_file(source: Path, target: Path) -> None:
    """A plain copy; `replace` makes it durable."""
    shutil.copyfile(source, target)
