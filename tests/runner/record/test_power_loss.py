"""Power cuts: any prefix of the system calls, with any subset of what was not synced lost or torn.

`strace` writes down what a real acquiring process asks of the file system. The replay keeps for every file and every
folder what is on the disk for certain (synced) and what may or may not be (not synced yet). At a cut, each unsynced
write survives whole, in some of its 512-byte sectors, or not at all; file sizes and names (create, remove, rename)
survive or not by themselves, in any combination. That is harsher than most file systems are. The image is then put
on a real disk and opened.

A replay that finds nothing proves nothing unless it can find something: the same replay of a writer without
``synchronous=FULL``, of one that renames files it has not synced, and of one that never syncs a folder must find losses.
"""

import hashlib
import json
import os
import random
import re
import runpy
import shutil
import sqlite3
import subprocess
import sys
from collections.abc import Iterator
from contextlib import closing
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import h5py
import pytest

from runner.errors import KneemapError
from runner.record import open_run, verify_record

WRITER = Path(__file__).with_name("writer.py")
POINTS, SAMPLES, PAGES = 12, 300, 12
SECTOR = 512
CALLS = (
    "open,openat,creat,close,lseek,write,pwrite64,pwritev,writev,ftruncate,truncate,fallocate,fsync,fdatasync,rename,"
    "renameat,renameat2,unlink,unlinkat,mkdir,mkdirat,link,linkat,symlink,sendfile,copy_file_range,dup,dup2,dup3"
)

needs_strace = pytest.mark.skipif(
    shutil.which("strace") is None,
    reason="NO POWER-LOSS REPLAY: strace is not installed (on Debian: apt-get install strace)",
)

# ------------------------------------------------------------------- the disk


@dataclass(eq=False)
class File:
    safe: bytearray = field(default_factory=bytearray)
    now: bytearray = field(default_factory=bytearray)
    pending: list[tuple[int, bytes | None]] = field(default_factory=list)  # (offset, data), or (size, None)

    def do(self, offset: int, data: bytes | None) -> None:
        apply(self.now, offset, data)
        self.pending.append((offset, data))

    def sync(self) -> None:
        self.safe = bytearray(self.now)
        self.pending.clear()

    def after_cut(self, chance: random.Random) -> bytes:
        left = bytearray(self.safe)
        luck = chance.choice([0.0, 0.5, 0.5, 0.9, 1.0])
        for offset, data in self.pending:
            if chance.random() >= luck:
                if data and chance.random() < 0.3:  # torn: some sectors of it
                    for start in range(0, len(data), SECTOR):
                        if chance.random() < 0.5:
                            apply(left, offset + start, data[start : start + SECTOR])
                continue
            apply(left, offset, data)
        if len(left) < len(self.now) and chance.random() < 0.3:  # the size made it, the data did not
            left.extend(bytes(len(self.now) - len(left)))
        return bytes(left)


@dataclass(eq=False)
class Folder:
    safe: dict[str, "File | Folder"] = field(default_factory=dict)
    now: dict[str, "File | Folder"] = field(default_factory=dict)
    pending: list[tuple[str | None, str | None, "File | Folder"]] = field(
        default_factory=list
    )  # (old, new, node)

    def do(self, old: str | None, new: str | None, node: "File | Folder") -> None:
        rename(self.now, old, new, node)
        self.pending.append((old, new, node))

    def sync(self) -> None:
        self.safe = dict(self.now)
        self.pending.clear()

    def after_cut(self, chance: random.Random, place: Path) -> None:
        left = dict(self.safe)
        luck = chance.choice([0.0, 0.5, 1.0])
        for old, new, node in self.pending:
            if chance.random() < luck:
                rename(left, old, new, node)
        place.mkdir()
        for name, node in left.items():
            if isinstance(node, Folder):
                node.after_cut(chance, place / name)
            elif not name.endswith("-shm"):  # shared memory; SQLite makes it anew
                (place / name).write_bytes(node.after_cut(chance))


def apply(content: bytearray, offset: int, data: bytes | None) -> None:
    if data is None:
        content[:] = content[:offset].ljust(offset, b"\0")
        return
    if len(content) < offset:
        content.extend(bytes(offset - len(content)))
    content[offset : offset + len(data)] = data


def rename(names: dict[str, Any], old: str | None, new: str | None, node: Any) -> None:
    if old is not None and names.get(old) is node:
        del names[old]
    if new is not None:
        names[new] = node


# ------------------------------------------------------------------ the replay


class Replay:
    """Follows a trace, call by call."""

    def __init__(self, root: Path) -> None:
        self.root = root
        self.disk = Folder()
        self.open: dict[int, tuple[File | Folder, int]] = {}  # descriptor to node and offset
        self.said: list[str] = []
        self._saying = ""
        self.whole: set[bytes] = set()  # digests of all the records that were put in place

    def step(self, call: str, arguments: str, result: int) -> None:
        if result < 0:
            return
        parts = split(arguments)
        if call in ("open", "openat", "creat"):
            self._open(parts if call != "openat" else parts[1:], result)
        elif call in ("mkdir", "mkdirat", "unlink", "unlinkat"):
            self._name(call, text(parts[1 if call.endswith("at") else 0]))
        elif call in ("rename", "renameat", "renameat2"):
            old, new = (text(parts[i]) for i in ((0, 1) if call == "rename" else (1, 3)))
            self._rename(old, new)
        elif call == "write" and parts[0] == "1":
            self._saying += raw(parts[1])[:result].decode()
            *lines, self._saying = self._saying.split("\n")
            self.said += lines
        elif call in ("sendfile", "copy_file_range"):
            self._copy(call, parts, result)
        elif int(parts[0]) in self.open:
            self._on_descriptor(call, int(parts[0]), parts, result)

    def _open(self, parts: list[str], descriptor: int) -> None:
        self.open.pop(descriptor, None)
        found = self._find(text(parts[0]))
        if found is None or "O_TMPFILE" in parts[1]:
            return
        folder, name = found
        node = folder.now.get(name) if name else folder
        if node is None:
            assert "O_CREAT" in parts[1]
            node = File()
            folder.do(None, name, node)
        elif "O_TRUNC" in parts[1]:
            assert isinstance(node, File)
            node.do(0, None)
        assert "O_APPEND" not in parts[1]
        self.open[descriptor] = (node, 0)

    def _on_descriptor(self, call: str, descriptor: int, parts: list[str], result: int) -> None:
        node, offset = self.open[descriptor]
        if call == "close":
            del self.open[descriptor]
        elif call in ("fsync", "fdatasync"):
            node.sync()
        elif call == "lseek":
            self.open[descriptor] = (node, result)
        elif call == "ftruncate":
            assert isinstance(node, File)
            node.do(int(parts[1]), None)
        elif call == "fallocate":
            assert isinstance(node, File)
            node.do(max(len(node.now), int(parts[2]) + int(parts[3])), None)
        elif call == "pwrite64":
            assert isinstance(node, File)
            node.do(int(parts[3]), raw(parts[1])[:result])
        elif call == "write":
            assert isinstance(node, File)
            node.do(offset, raw(parts[1])[:result])
            self.open[descriptor] = (node, offset + result)
        else:
            raise AssertionError(f"the replay does not know {call} on a file of the run")

    def _name(self, call: str, path: str) -> None:
        found = self._find(path)
        if found is None or not found[1]:
            return
        folder, name = found
        if call.startswith("mkdir"):
            folder.do(None, name, Folder())
        else:
            folder.do(name, None, folder.now[name])

    def _rename(self, old: str, new: str) -> None:
        source, target = self._find(old), self._find(new)
        if source is None or target is None:
            assert source is target, "the replay does not know moves into or out of the place it watches"
            return
        assert source[0] is target[0], "the replay does not know moves between folders"
        node = source[0].now[source[1]]
        source[0].do(source[1], target[1], node)
        if isinstance(node, File):
            self.whole.add(hashlib.sha256(node.now).digest())

    def _copy(self, call: str, parts: list[str], count: int) -> None:
        into, out_of = (int(parts[i]) for i in ((0, 1) if call == "sendfile" else (2, 0)))
        if into not in self.open:
            return
        (target, offset), (source, start) = self.open[into], self.open[out_of]
        assert isinstance(target, File)
        assert isinstance(source, File)
        explicit = parts[2] if call == "sendfile" else "NULL"
        if explicit != "NULL":
            start = int(re.findall(r"\d+", explicit)[0])  # "[0] => [97628]": before and after
        target.do(offset, bytes(source.now[start : start + count]))
        self.open[into] = (target, offset + count)
        if explicit == "NULL":
            self.open[out_of] = (source, start + count)

    def _find(self, path: str) -> tuple[Folder, str] | None:
        """Folder and name of a path below the root; None for any other path."""
        where = Path(path)
        if where == self.root:
            return self.disk, ""
        if self.root not in where.parents:
            return None
        folder = self.disk
        for part in where.relative_to(self.root).parts[:-1]:
            inner = folder.now[part]
            assert isinstance(inner, Folder)
            folder = inner
        node = folder.now.get(where.name)
        return (node, "") if isinstance(node, Folder) else (folder, where.name)


def split(arguments: str) -> list[str]:
    """Strings are all hexadecimal, so that no comma stands inside one."""
    return arguments.split(", ")


def raw(hexadecimal: str) -> bytes:
    assert hexadecimal.endswith('"'), "a string that strace cut short"
    return bytes.fromhex(hexadecimal.strip('"').replace("\\x", ""))


def text(hexadecimal: str) -> str:
    return raw(hexadecimal).decode()


def calls(trace: Path) -> Iterator[tuple[str, str, int]]:
    """Name, arguments and result of each call of the acquiring thread."""
    with trace.open() as lines:
        for line in lines:
            call, equals, result = line.rpartition(" = ")
            name, opened, arguments = call.partition("(")
            if opened and equals and name.isidentifier():
                yield name, arguments.rstrip().removesuffix(")"), int(result.split()[0])


# ------------------------------------------------------------------ the trials


def record_calls(place: Path, weaken: str | None) -> list[tuple[str, str, int]]:
    """What one whole run asks of the file system, from the first folder to the extraction.

    The log is turned over every few points, where most can go wrong; in the weakened writers it is not, because a turn
    syncs what they left unsynced.
    """
    (place / "disk").mkdir(parents=True)
    trace = place / "trace.txt"
    command = [
        "strace", "-qq", "-xx", "-s", "10000000", "-e", f"trace={CALLS}", "-o", str(trace), sys.executable,
        str(WRITER), str(place / "disk/runs/run"), f"--points={POINTS}", f"--samples={SAMPLES}",
        f"--checkpoint-pages={1000 if weaken else PAGES}", *([f"--weaken={weaken}"] if weaken else []),
    ]  # fmt: skip
    done = subprocess.run(
        command, env=os.environ | {"OPENBLAS_NUM_THREADS": "1"}, capture_output=True, text=True
    )
    if "ptrace" in done.stderr or "PTRACE" in done.stderr:
        pytest.skip(f"NO POWER-LOSS REPLAY: strace may not trace here: {done.stderr.strip()}")
    assert done.returncode == 0, done.stderr
    kept = list(calls(trace))
    assert kept[-1][0] == "write", "the last thing is to say that all is done"
    assert sum(call[0] in ("fsync", "fdatasync") for call in kept) > POINTS
    return kept


def cuts(kept: list[tuple[str, str, int]], count: int, chance: random.Random) -> list[int]:
    """Where the power goes: anywhere, and often right around a rename, a removal or an acknowledgement."""
    hot = [
        number + near
        for number, (name, arguments, _) in enumerate(kept)
        if name.startswith(("rename", "unlink")) or (name == "write" and arguments.startswith("1, "))
        for near in (0, 1, 2)
    ]
    first = next(number for number, call in enumerate(kept) if call[0].startswith("mkdir"))
    anywhere = [chance.randrange(first, len(kept) + 1) for _ in range(count // 2)]
    return sorted(anywhere + [chance.choice(hot) for _ in range(count - len(anywhere))])


def bad_images(
    place: Path,
    knowledge: dict[str, Any],
    *,
    count: int,
    seed: int,
    weaken: str | None = None,
    resume_each: int = 0,
) -> list[str]:
    """Replay a run, cut it `count` times, and say what was wrong with the images."""
    kept = record_calls(place, weaken)
    chance = random.Random(seed)
    replay = Replay(place / "disk")
    bad: list[str] = []
    step = 0
    for number, cut in enumerate(cuts(kept, count, chance)):
        while step < min(cut, len(kept)):
            replay.step(*kept[step])
            step += 1
        image = place / f"image{number}"
        replay.disk.after_cut(chance, image)
        try:
            check_image(image / "runs/run", replay, knowledge)
            if resume_each and number % resume_each == 0:
                check_resume(image / "runs/run", knowledge)
        except (AssertionError, KneemapError, sqlite3.Error, OSError, ValueError, KeyError) as error:
            bad.append(f"cut {cut} of {len(kept)}: {type(error).__name__}: {error}")
        shutil.rmtree(image)
    for call in kept[step:]:
        replay.step(*call)
    assert replay.said[-1] == "extracted", "the replay did not hear what the writer said"
    return bad


def check_image(folder: Path, replay: Replay, knowledge: dict[str, Any]) -> None:
    said = replay.said
    done = {int(line.split()[1]) for line in said if line.startswith("done")}
    rebuilt = [int(line.split()[1]) for line in said if line.startswith("consolidated")]
    found: list[tuple[int, int, str]] = []
    if (folder / "journal.sqlite").exists():
        with closing(sqlite3.connect(folder / "journal.sqlite")) as connection:
            assert connection.execute("PRAGMA integrity_check").fetchone() == ("ok",)
            if connection.execute("SELECT 1 FROM sqlite_master WHERE name='point'").fetchone():
                found = knowledge["fingerprints"](connection)
            else:
                assert "created" not in said, "the run is gone"
    else:
        assert "created" not in said, "the journal is gone"
    assert [index for index, _, _ in found] == list(range(len(found)))
    assert done <= {index for index, _, _ in found}, "an acknowledged point is lost"
    for index, attempt, print_ in found:
        assert (attempt, print_) == (1, knowledge["expected"](index, SAMPLES)), (
            f"point {index} is not what was written"
        )
    record = folder / "record.h5"
    assert record.exists() or not rebuilt, "the record is gone"
    if record.exists():
        # First by its bytes, because HDF5 may hang or crash on half a file.
        assert hashlib.sha256(record.read_bytes()).digest() in replay.whole, "the record is not whole"
        verify_record(record)
        with h5py.File(record) as file:
            indices = file["entry/points/plan_index"][:].tolist()
            assert "extracted" not in said or "extraction_00" in file["entry"], "the extraction is gone"
        assert indices == [index for index, _, _ in found[: len(indices)]]
        assert len(indices) >= max(rebuilt, default=0), "the record is older than a finished rebuild"
    result = folder / "result.json"
    assert result.exists() or "extracted" not in said, "the result is gone"
    if result.exists():
        assert json.loads(result.read_bytes()) == {"points": POINTS}


def check_resume(folder: Path, knowledge: dict[str, Any]) -> None:
    knowledge["acquire"](
        folder, lambda text: None, points=POINTS, samples=SAMPLES, checkpoint_pages=1000, weaken=None
    )
    with open_run(folder) as run:
        assert run.points["plan_index"].tolist() == list(range(POINTS))
        assert run.result == {"points": POINTS}


@pytest.fixture(scope="module")
def knowledge() -> dict[str, Any]:
    return runpy.run_path(str(WRITER))


@needs_strace
def test_power_cuts_lose_nothing(tmp_path: Path, knowledge: dict[str, Any]) -> None:
    assert bad_images(tmp_path, knowledge, count=100, seed=1, resume_each=25) == []


@needs_strace
@pytest.mark.parametrize("weaken", ["commit", "file", "folder"])
def test_the_replay_bites_where_a_sync_is_left_out(
    tmp_path: Path, knowledge: dict[str, Any], weaken: str
) -> None:
    bad = bad_images(tmp_path, knowledge, count=40, seed=2, weaken=weaken)
    assert len(bad) >= 5, bad


@needs_strace
@pytest.mark.soak
def test_many_power_cuts_lose_nothing(tmp_path: Path, knowledge: dict[str, Any]) -> None:
    for seed in range(5):
        assert bad_images(tmp_path / str(seed), knowledge, count=1000, seed=100 + seed, resume_each=20) == []


def test_the_model_disk_keeps_what_was_synced_and_nothing_else_for_certain() -> None:
    file = File()
    file.do(0, b"a" * 1024)
    file.sync()
    file.do(0, b"b" * 1024)
    kept = {file.after_cut(random.Random(seed)) for seed in range(200)}
    assert b"a" * 1024 in kept
    assert b"b" * 1024 in kept
    assert b"a" * 512 + b"b" * 512 in kept, "torn by sector"
    assert all(set(image[:512]) <= {97} or set(image[:512]) <= {98} for image in kept), "a sector is whole"
