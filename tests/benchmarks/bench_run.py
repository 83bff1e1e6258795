"""What reliability costs a point: the runner against a bare loop that has the same talk and keeps the same arrays.

1. A run on the mock bench goes through a relay that notes every message and reply, in order, and where each point ends.
2. The runner carries the same plan out again, against instruments that give the noted replies at once.
3. A bare loop sends the same messages in the same order to instruments of the same kind.

*Runner*: `carry_out` as a night does it, with nothing switched off: its decisions, limits and retries, the watchdog, the
journal that has every point on the disk before the next one starts, the safe state, the rebuild of ``record.h5``.

*Bare loop*: for every message one write by pyvisa and one read of as many bytes as are known to come; out of the same
blocks the same codes, written point by point with h5py. It decides nothing, checks no error queue (though the question
is asked), flushes nothing, and keeps no log. The messages that move the simulated clock are the same ones as well.

Both talk to a process of its own that looks up the next reply and counts messages and bytes. Both counts are printed; a
difference, a message that was not expected, or a code that differs in the two records ends the benchmark.

*Points* are timed from the end of the first one to the end of the last one, at the same message on either side, so the
opening, the soak and what comes once a run stand outside. *Whole run* is all of it, from the call to its return: opening,
soak, points, closing (bench at rest, safe state, last rebuild of ``record.h5``). Pairs alternate in who goes first, after
one pair that only warms up; the figure is the median of their ratios.

The bar is held by wall time of the points on the mock bench, whose instruments need some time for their answers; how much
is noted in step 1 and added to either side. Without it (*instruments at once*) the ratio says how much more the runner
computes than a loop that computes nothing, which no bench ever sees; both are printed.

Wall time is what a night takes: CPU time does not see the wait for fsync, which is what the journal's promise costs, nor
the wait for an instrument. On a machine that computes other things at the same time the wall time of both sides grows; a
median of pairs taken in turn stands that, a single pair does not. CPU time (of the runner's process; the watchdog and the
rebuilds join it when they end, in the closing) stands beside it and is blurred less: where the two disagree, it is the
disk, or a crowd.

Left out on purpose, each of which makes the ratio larger than a night would see it: no wire between bench and computer,
and rests take no time; the bare loop is told how long each reply is; of a point it keeps nothing but its captures, in one
dataset a channel (one a capture would be slower), and throws single readings away. In the runner's favour there is one
thing: the look-up of the replay is in the wall time of both sides. CPU time is without it.
"""

import contextlib
import gc
import itertools
import json
import multiprocessing
import os
import resource
import socket
import statistics
import sys
import tempfile
import threading
import time
from collections.abc import Sequence
from dataclasses import dataclass, field
from datetime import UTC, datetime
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import h5py
import numpy as np
import pyvisa

import runner.sweep.opening as opening
from runner.plan import load_plan
from runner.record import new_run_folder, open_run
from runner.sweep import carry_out

ROOT = Path(__file__).resolve().parents[2]
PAIRS = 7
BAR = 1.5
COUNTS = ("messages", "bytes sent", "bytes read", "not expected")
PLAN = """\
title: Cost of a point
bench: {bench}
part: {{label: DRUM-22-A, inductance: 22 uH, rated_current: 6 A, resistance: 18 mohm}}
temperatures: {{at: [25 degC], soak: {{within: 1 K, drift: 0.2 K/min, hold: 1 min, give_up: 2 h}}}}
pulse:
  rail: 12 V
  width: {{from: 2 us, to: 14 us, count: 160}}
  repeats: 8
  rest: 500 ms
  conditioning: 3
bias: {{current: {{from: 0 A, to: 8 A, count: 81, both_ways: true}}, signal: {{frequency: 100 kHz, level: 50 mV}}}}
limits: {{current: 18 A, body: 140 degC, rail: 16 V, pulse_energy: 5 mJ, chamber: [-45 degC, 130 degC], duration: 14 h}}
"""


@dataclass
class Talk:
    """One message and what came back, as bytes."""

    role: str
    message: bytes
    reply: bytearray = field(default_factory=bytearray)
    asked: float = 0.0
    answered: float = 0.0


class Relay:
    """Stands between a client and the mock instruments and notes what is said, in order."""

    def __init__(self, ports):
        self.talk = []
        self.ports = {role: self._listen(role, port) for role, port in ports.items()}

    def _listen(self, role, target):
        server = socket.create_server(("127.0.0.1", 0))
        threading.Thread(target=self._accept, args=(server, role, target), daemon=True).start()
        return server.getsockname()[1]

    def _accept(self, server, role, target):
        while True:
            client, _ = server.accept()
            far = socket.create_connection(("127.0.0.1", target))
            for one in (client, far):
                one.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
            said = []
            threading.Thread(target=self._up, args=(client, far, role, said), daemon=True).start()
            threading.Thread(target=self._down, args=(far, client, said), daemon=True).start()

    def _up(self, client, far, role, said):
        with contextlib.suppress(OSError), client.makefile("rb") as lines:
            for line in lines:
                one = Talk(role, line)
                said.append(one)
                self.talk.append(one)
                one.asked = time.perf_counter()
                far.sendall(line)
        with contextlib.suppress(OSError):
            far.shutdown(socket.SHUT_WR)

    def _down(self, far, client, said):
        with contextlib.suppress(OSError):
            while data := far.recv(1 << 16):
                said[-1].reply += data
                said[-1].answered = time.perf_counter()
                client.sendall(data)
        with contextlib.suppress(OSError):
            client.shutdown(socket.SHUT_WR)


@dataclass(frozen=True)
class Noted:
    """What was said, where points end in it, and which replies hold captures that the record keeps."""

    talk: list[tuple[str, bytes, bytes]]
    ends: list[int]
    kept: dict[int, tuple[int, tuple[int, ...]]]
    samples: int
    answering: float  # s of wall time that the simulated instruments took for the points

    def count(self, start: int, stop: int) -> tuple[int, ...]:
        said = self.talk[start:stop]
        return len(said), sum(len(one[1]) for one in said), sum(len(one[2]) for one in said), 0

    def lasts(self) -> float:
        """The bench's own time from the end of the first point to that of the last [s]."""
        said = self.talk[self.ends[0] : self.ends[-1]]
        times = [json.loads(reply)["now"] for role, _, reply in said if role == "control"]
        return float(times[-1] - times[0])


class Replay:
    """Instruments, in a process of their own, that give the next noted reply at once and count what they are told."""

    def __init__(self, talk: Sequence[tuple[str, bytes, bytes]]) -> None:
        self._queues: dict[str, list[tuple[bytes, bytes]]] = {}
        for role, message, reply in talk:
            self._queues.setdefault(role, []).append((message, reply))
        # A row a role, so that no two threads write to the same place. A reply goes out after its message is counted:
        # whoever has read the reply reads a count that holds it.
        self._counts = multiprocessing.RawArray("q", len(self._queues) * len(COUNTS))
        self._ours, self._theirs = multiprocessing.Pipe()
        self._process = multiprocessing.get_context("fork").Process(target=self._serve_all, daemon=True)

    def __enter__(self) -> dict[str, int]:
        self._process.start()
        ports: dict[str, int] = self._ours.recv()
        return ports

    def __exit__(self, *_: object) -> None:
        self._ours.send("end")
        self._process.join()

    def counted(self) -> tuple[int, ...]:
        """Messages, bytes in, bytes out and messages that were not expected, so far."""
        return tuple(sum(self._counts[k :: len(COUNTS)]) for k in range(len(COUNTS)))

    def _serve_all(self) -> None:
        ports = {}
        for place, role in enumerate(self._queues):
            server = socket.create_server(("127.0.0.1", 0))
            ports[role] = server.getsockname()[1]
            threading.Thread(target=self._serve, args=(server, role, place), daemon=True).start()
        self._theirs.send(ports)
        self._theirs.recv()

    def _serve(self, server: socket.socket, role: str, place: int) -> None:
        client, _ = server.accept()
        client.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        row = place * len(COUNTS)
        noted = iter(self._queues[role])
        with contextlib.suppress(OSError), client.makefile("rb") as lines:
            for line in lines:
                message, reply = next(noted, (b"", b""))
                self._counts[row] += 1
                self._counts[row + 1] += len(line)
                self._counts[row + 2] += len(reply)
                self._counts[row + 3] += line != message
                client.sendall(reply)


@dataclass(frozen=True)
class Moment:
    """A place in a run: wall time and the CPU time of this process [s], what had been said by then."""

    wall: float
    cpu: float
    counted: tuple[int, ...]


@dataclass(frozen=True)
class Side:
    """One run of one side: its start, the ends of its first and last points, its end."""

    start: Moment
    first: Moment
    last: Moment
    end: Moment
    path: Path

    @property
    def points(self) -> tuple[float, float]:
        return self.last.wall - self.first.wall, self.last.cpu - self.first.cpu

    @property
    def whole(self) -> tuple[float, float]:
        return self.end.wall - self.start.wall, self.end.cpu - self.start.cpu

    @property
    def opening(self) -> tuple[float, float]:
        """Up to the end of the first point: who is there, the watchdog's start, the soak."""
        return self.first.wall - self.start.wall, self.first.cpu - self.start.cpu

    @property
    def closing(self) -> tuple[float, float]:
        return self.end.wall - self.last.wall, self.end.cpu - self.last.cpu

    @property
    def said(self) -> tuple[int, ...]:
        """Between the ends of the first and the last point."""
        return tuple(b - a for a, b in zip(self.first.counted, self.last.counted, strict=True))


def moment(replay: Replay) -> Moment:
    return Moment(time.perf_counter(), time.process_time(), replay.counted())


def after(replay: Replay, children: float) -> Moment:
    """The end of a run; the CPU time of processes that it started and waited for is its own."""
    now = moment(replay)
    return Moment(now.wall, now.cpu + children_cpu() - children, now.counted)


def children_cpu() -> float:
    used = resource.getrusage(resource.RUSAGE_CHILDREN)
    return used.ru_utime + used.ru_stime


def noted_run(loaded: Any, into: Path) -> Noted:
    """A run on the mock bench, listened to."""
    relays: list[Relay] = []
    ends: list[int] = []
    real_launch = opening.launch

    def relayed(spec: Any) -> Any:
        real = real_launch(spec)
        relays.append(Relay({**real.ports, "control": real.control}))
        return launched(relays[0].ports, real.process)

    def watch(progress: Any) -> None:
        # Every message has an answer, so all that was said before a point's end has been noted by then.
        if progress.done > len(ends):
            ends.append(len(relays[0].talk))

    opening.launch = relayed
    try:
        folder = new_run_folder(into, title=loaded.plan.title, start=datetime.now(UTC))
        outcome = carry_out(loaded, folder, watch=watch)
    finally:
        opening.launch = real_launch
    assert outcome.status == "finished", outcome
    talk = [(one.role, bytes(one.message), bytes(one.reply)) for one in relays[0].talk]
    assert all(reply for _, _, reply in talk)
    kept: dict[int, tuple[int, tuple[int, ...]]] = {}
    samples = 0
    with open_run(folder) as run:
        numbers = [int(number) for number in run.points["point"]]
        for number, (start, stop) in zip(numbers, itertools.pairwise([0, *ends]), strict=True):
            if (captures := run.captures(number)) is None:
                continue
            # Scouting pulses and captures in a range that did not fit are fetched, too, and not kept.
            fetched = iter(
                [k for k in range(start, stop) if talk[k][0] == "digitizer" and b"#" in talk[k][2]]
            )
            for voltage, current in zip(captures.voltage_codes, captures.current_codes, strict=True):
                wanted = [voltage.astype("<i2").tobytes(), current.astype("<i2").tobytes()]
                place = next(k for k in fetched if all(block in talk[k][2] for block in wanted))
                kept[place] = (number, tuple(talk[place][2].index(block) for block in wanted))
                samples = len(voltage)
    answering = sum(one.answered - one.asked for one in relays[0].talk[ends[0] : ends[-1]])
    return Noted(talk, ends, kept, samples, answering)


def launched(ports: dict[str, int], process: Any) -> Any:
    """What the launch of a mock bench gives, with ports of our own."""
    instruments = {role: port for role, port in ports.items() if role != "control"}
    return SimpleNamespace(ports=instruments, control=ports["control"], process=process)


def runner_side(loaded: Any, noted: Noted, into: Path) -> Side:
    """The plan carried out against the replay."""
    replay = Replay(noted.talk)
    seen: list[Moment] = []

    def watch(progress: Any) -> None:
        if progress.done in (1, len(noted.ends)) and progress.done > len(seen):
            seen.append(moment(replay))

    real_launch = opening.launch
    with replay as ports:
        # It counts as ended when it is told to quit, as a bench does that nobody needs any more.
        opening.launch = lambda spec: launched(ports, SimpleNamespace(poll=lambda: 0))
        try:
            children, start = children_cpu(), moment(replay)
            folder = new_run_folder(into, title=loaded.plan.title, start=datetime.now(UTC))
            outcome = carry_out(loaded, folder, watch=watch)
            end = after(replay, children)
        finally:
            opening.launch = real_launch
    assert outcome.status == "finished", outcome
    assert outcome.flagged == 0, outcome
    first, last = seen
    return Side(start, first, last, end, folder)


def bare_side(noted: Noted, path: Path) -> Side:
    """The same messages by pyvisa, the same arrays by h5py."""
    replay = Replay(noted.talk)
    first, last, ends = noted.ends[0], noted.ends[-1], set(noted.ends)
    seen = []
    with replay as ports:
        children, start = children_cpu(), moment(replay)
        manager = pyvisa.ResourceManager("@py")
        sessions = {role: opened(manager, port) for role, port in ports.items() if role != "control"}
        control = socket.create_connection(("127.0.0.1", ports["control"]))
        control.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        control_lines = control.makefile("rb")
        voltages, currents = [], []
        with h5py.File(path, "w") as file:
            for place, (role, message, reply) in enumerate(noted.talk):
                if place in (first, last):
                    seen.append(moment(replay))
                if role == "control":
                    control.sendall(message)
                    control_lines.readline()
                    continue
                sessions[role].write_raw(message)
                answer = sessions[role].read_bytes(len(reply))
                if place in noted.kept:
                    number, (at_voltage, at_current) = noted.kept[place]
                    voltages.append(np.frombuffer(answer, "<i2", noted.samples, at_voltage))
                    currents.append(np.frombuffer(answer, "<i2", noted.samples, at_current))
                if place + 1 in ends and voltages:
                    file.create_dataset(f"{number}/voltage", data=np.stack(voltages))
                    file.create_dataset(f"{number}/current", data=np.stack(currents))
                    voltages, currents = [], []
        for session in sessions.values():
            session.close()
        control_lines.close()
        control.close()
        end = after(replay, children)
    return Side(start, seen[0], seen[1], end, path)


def opened(manager: Any, port: int) -> Any:
    """A session as quick as pyvisa-py can be made: small messages go out at once, a block comes in one read."""
    session = manager.open_resource(f"TCPIP::127.0.0.1::{port}::SOCKET", timeout=5000, chunk_size=1 << 20)
    below = session.visalib.sessions[session.session]
    below.interface.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
    below.max_recv_size = 1 << 20
    return session


def compare_work(noted: Noted, ours: Side, bare: Side) -> None:
    """Both sides did the same measurements, or the benchmark says what they did and ends."""
    for name, expected, left, right in (
        ("points", noted.count(noted.ends[0], noted.ends[-1]), ours.said, bare.said),
        ("whole run", noted.count(0, len(noted.talk)), ours.end.counted, bare.end.counted),
    ):
        if not expected == left == right:
            sys.exit(f"{name}: noted {expected}, runner {left}, bare loop {right} ({', '.join(COUNTS)})")


def compare_arrays(noted: Noted, ours: Side, bare: Side) -> int:
    """Bytes of captures in either file; the codes are the same one by one, or the benchmark ends."""
    size = 0
    with open_run(ours.path) as run, h5py.File(bare.path) as file:
        for number in run.points["point"]:
            if (captures := run.captures(int(number))) is None:
                continue
            for name, codes in (("voltage", captures.voltage_codes), ("current", captures.current_codes)):
                if not np.array_equal(codes, file[f"{number}/{name}"][()]):
                    sys.exit(f"point {number}: {name} differs in the two records")
                size += codes.nbytes
        if len(file) != len({number for number, _ in noted.kept.values()}):
            sys.exit("the bare loop kept points that the runner did not")
    return size


def ratios(name: str, pairs: Sequence[tuple[tuple[float, float], tuple[float, float]]]) -> dict[str, float]:
    """Prints one line each for wall time and CPU time; gives the medians of the ratios."""
    medians = {}
    for k, clock in enumerate(("wall", "cpu")):
        each = [ours[k] / bare[k] for ours, bare in pairs]
        left, right = (median_of(sides)[k] for sides in zip(*pairs, strict=True))
        medians[clock] = statistics.median(each)
        print(
            f"{name:<10} {clock:<5} runner {left:6.3f} s  bare {right:6.3f} s  "
            f"ratio {medians[clock]:.2f} ({min(each):.2f} to {max(each):.2f})"
        )
    return medians


def main() -> int:
    disk = ROOT / "build"  # git passes it over; /tmp may be memory, where fsync costs nothing
    disk.mkdir(exist_ok=True)
    with tempfile.TemporaryDirectory(dir=disk) as scratch:
        into = Path(scratch)
        plan = into / "plan.yaml"
        plan.write_text(PLAN.format(bench=ROOT / "plans" / "benches" / "mock.yaml"))
        loaded = load_plan(plan)
        noted = noted_run(loaded, into)
        pairs = []
        for index in range(1 + PAIRS):
            path = into / f"bare{index}.h5"
            os.sync()
            gc.collect()
            if index % 2:
                bare = bare_side(noted, path)
                ours = runner_side(loaded, noted, into)
            else:
                ours = runner_side(loaded, noted, into)
                bare = bare_side(noted, path)
            compare_work(noted, ours, bare)
            if index:
                pairs.append((ours, bare))
        size = compare_arrays(noted, ours, bare)
    ours, bare = pairs[-1]
    print(f"{len(noted.ends)} points, {len(noted.kept)} captures, {len(pairs)} pairs")
    for name, side in (("runner", ours), ("bare loop", bare)):
        points = ", ".join(f"{count} {what}" for count, what in zip(side.said, COUNTS, strict=True))
        whole = ", ".join(f"{count} {what}" for count, what in zip(side.end.counted, COUNTS, strict=True))
        print(f"{name:<9} points: {points}; whole run: {whole}; captures kept: {size} bytes")
    points = ratios("points", [(a.points, b.points) for a, b in pairs])
    whole = ratios("whole run", [(a.whole, b.whole) for a, b in pairs])
    for name, part in (("opening and soak", "opening"), ("closing", "closing")):
        left, right = (median_of([getattr(one, part) for one in sides]) for sides in zip(*pairs, strict=True))
        print(
            f"once a run, {name}: runner {left[0]:.2f} s wall, {left[1]:.2f} s CPU; "
            f"bare {right[0]:.2f} s wall, {right[1]:.2f} s CPU"
        )
    between = len(noted.ends) - 1
    cost = statistics.median((a.points[0] - b.points[0]) / between for a, b in pairs)
    lasts = noted.lasts() / between
    print(
        f"cost of safety a point {cost * 1e3:.2f} ms of wall time; on a bench it takes {lasts:.1f} s with its rests"
    )
    took = noted.answering
    on_bench = statistics.median((a.points[0] + took) / (b.points[0] + took) for a, b in pairs)
    print(f"the simulated instruments took {took / between * 1e3:.2f} ms a point to answer")
    verdict = "kept" if on_bench <= BAR else "NOT kept"
    print(f"points on the mock bench, wall time: {on_bench:.2f}, at most {BAR}: {verdict}")
    figures = {
        "points_on_mock_bench": on_bench,
        "points_instruments_at_once": points,
        "whole_run": whole,
        "closing_s": median_of([one.closing for one, _ in pairs])[0],
    }
    print(json.dumps({"runner_over_bare": figures}))
    return 0 if on_bench <= BAR else 1


def median_of(times: Sequence[tuple[float, float]]) -> tuple[float, float]:
    """Of wall times and of CPU times [s]."""
    wall, cpu = zip(*times, strict=True)
    return statistics.median(wall), statistics.median(cpu)


if __name__ == "__main__":
    sys.exit(main())
