"""What the runner costs: its wall time against a bare loop that does the same talking and writes the same arrays.

1. A run on the mock bench goes through a relay that notes every message and reply, in order.
2. The runner carries the same plan out again, against instruments that give the noted replies at once.
3. A bare loop sends the same messages by pyvisa to instruments of the same kind and writes the same captures with h5py.

Both talk to a process of its own that only looks up the next reply, so what differs is the runner: its decisions, its
journal that has every point on disk before the next one, its record. Ratios of the same run, medians of a few pairs.
"""

import contextlib
import json
import multiprocessing
import os
import socket
import statistics
import tempfile
import threading
import time
from dataclasses import dataclass, field
from datetime import UTC, datetime
from pathlib import Path
from types import SimpleNamespace

import h5py
import pyvisa

import runner.sweep.opening as opening
from runner.plan import load_plan
from runner.record import new_run_folder, open_run
from runner.sweep import carry_out

PAIRS = 3
PLAN = """\
title: Cost of a point
bench: {bench}
part: {{label: DRUM-22-A, inductance: 22 uH, rated_current: 6 A, resistance: 18 mohm}}
temperatures: {{at: [25 degC], soak: {{within: 1 K, drift: 0.2 K/min, hold: 1 min, give_up: 2 h}}}}
pulse:
  rail: 12 V
  width: {{from: 2 us, to: 14 us, count: 40}}
  repeats: 8
  rest: 500 ms
  conditioning: 3
bias: {{current: {{from: 0 A, to: 8 A, count: 21, both_ways: true}}, signal: {{frequency: 100 kHz, level: 50 mV}}}}
limits: {{current: 18 A, body: 140 degC, rail: 16 V, pulse_energy: 5 mJ, chamber: [-45 degC, 130 degC], duration: 14 h}}
"""


@dataclass
class Talk:
    """One message and what came back, as bytes."""

    role: str
    message: bytes
    reply: bytearray = field(default_factory=bytearray)


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
                far.sendall(line)
        with contextlib.suppress(OSError):
            far.shutdown(socket.SHUT_WR)

    def _down(self, far, client, said):
        with contextlib.suppress(OSError):
            while data := far.recv(1 << 16):
                said[-1].reply += data
                client.sendall(data)
        with contextlib.suppress(OSError):
            client.shutdown(socket.SHUT_WR)


def replay(talk, pipe):
    """A process of instruments that give the next noted reply at once."""
    queues = {}
    for role, message, reply in talk:
        queues.setdefault(role, []).append((message, reply))
    ports = {}

    def serve(server, noted):
        client, _ = server.accept()
        client.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        with contextlib.suppress(OSError), client.makefile("rb") as lines:
            for line, (message, reply) in zip(lines, noted, strict=False):
                if line != message:
                    print(f"the replay expected {message!r} and was sent {line!r}", flush=True)
                if reply:
                    client.sendall(reply)
            # The watchdog may not need its connections; a client that goes on after the end of the notes hangs up.

    for role, noted in queues.items():
        server = socket.create_server(("127.0.0.1", 0))
        ports[role] = server.getsockname()[1]
        threading.Thread(target=serve, args=(server, noted), daemon=True).start()
    pipe.send(ports)
    pipe.recv()


@contextlib.contextmanager
def replaying(talk):
    ours, theirs = multiprocessing.Pipe()
    process = multiprocessing.get_context("fork").Process(target=replay, args=(talk, theirs), daemon=True)
    process.start()
    yield ours.recv()
    ours.send("end")
    process.join()


def launched(ports):
    """What the launch of a mock bench gives, with ports of our own."""
    instruments = {role: port for role, port in ports.items() if role != "control"}
    return lambda spec: SimpleNamespace(
        ports=instruments, control=ports["control"], process=SimpleNamespace(poll=lambda: None)
    )


def timed_run(loaded, into):
    """Wall time of the points of a run and of what comes after the last one [s], and its folder.

    The soak before the points is not counted, nor is what comes once a run: the safe state and the last rebuild of
    the record, by a process of its own.
    """
    folder = new_run_folder(into, title=loaded.plan.title, start=datetime.now(UTC))
    seen = []

    def watch(progress):
        if progress.phase in ("pulse", "bias"):
            seen.append(time.perf_counter())

    outcome = carry_out(loaded, folder, watch=watch)
    ended = time.perf_counter()
    assert outcome.status == "finished", outcome
    return seen[-1] - seen[0], ended - seen[-1], folder


def first_point(talk):
    """Where the talk of the points begins: after the winding's resistance has been read, as `timed_run` counts."""
    return max(place for place, (role, _, _) in enumerate(talk) if role == "ohmmeter") + 1


def bare_loop(talk, ports, captures, path):
    """The same messages by pyvisa, the same arrays by h5py; wall time [s] from the first message of the points."""
    manager = pyvisa.ResourceManager("@py")
    control = socket.create_connection(("127.0.0.1", ports["control"]))
    control.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
    control_lines = control.makefile("rb")
    sessions = {
        role: manager.open_resource(f"TCPIP::127.0.0.1::{port}::SOCKET", timeout=5000, chunk_size=1 << 20)
        for role, port in ports.items()
        if role != "control"
    }
    start = first_point(talk)
    blocks = iter(captures)
    began = time.perf_counter()
    with h5py.File(path, "w") as file:
        for place, (role, message, reply) in enumerate(talk):
            if place == start:
                began = time.perf_counter()
            if role == "control":
                control.sendall(message)
                control_lines.readline()
                continue
            sessions[role].write_raw(message)
            if reply:
                sessions[role].read_bytes(len(reply))
            # The runner fetches a few captures that it does not keep (it found a better range); nor does this loop.
            if len(reply) > 4000 and (block := next(blocks, None)) is not None:
                number, voltage, current = block
                file.create_dataset(f"{number}/voltage", data=voltage)
                file.create_dataset(f"{number}/current", data=current)
    ended = time.perf_counter()
    for session in sessions.values():
        session.close()
    control.close()
    return ended - began


def main():
    bench = Path(opening.__file__).resolve().parents[2] / "plans" / "benches" / "mock.yaml"
    real_launch = opening.launch
    with tempfile.TemporaryDirectory() as scratch:
        into = Path(scratch)
        plan = into / "plan.yaml"
        plan.write_text(PLAN.format(bench=bench))
        loaded = load_plan(plan)

        def relayed(spec):
            real = real_launch(spec)
            relay = Relay({**real.ports, "control": real.control})
            noted.append(relay)
            return SimpleNamespace(
                ports={r: p for r, p in relay.ports.items() if r != "control"},
                control=relay.ports["control"],
                process=real.process,
            )

        noted = []
        opening.launch = relayed
        _, _, folder = timed_run(loaded, into)
        talk = [(one.role, bytes(one.message), bytes(one.reply)) for one in noted[0].talk]
        run = open_run(folder)
        captures = []
        for number in run.points["point"]:
            block = run.captures(int(number))
            if block is not None:
                captures += [
                    (len(captures) + k, v, i)
                    for k, (v, i) in enumerate(zip(block.voltage_codes, block.current_codes, strict=True))
                ]
        points = len(run.points["point"])
        pairs: list[tuple[float, float]] = []
        closings = []
        for _ in range(PAIRS):
            with replaying(talk) as ports:
                opening.launch = launched(ports)
                ours, closing, _ = timed_run(loaded, into)
            with replaying(talk) as ports:
                bare = bare_loop(talk, ports, captures, into / f"bare{len(pairs)}.h5")
            pairs.append((ours, bare))
            closings.append(closing)
            os.sync()
        opening.launch = real_launch
    ours = statistics.median(pair[0] for pair in pairs)
    bare = statistics.median(pair[1] for pair in pairs)
    ratio = statistics.median(ours / bare for ours, bare in pairs)
    messages = len(talk) - first_point(talk)
    print(f"{points} points, {len(captures)} captures, {messages} messages")
    print(f"runner    {ours:.3f} s, {ours / points * 1e3:.2f} ms a point")
    print(f"bare loop {bare:.3f} s, {bare / points * 1e3:.2f} ms a point")
    print(f"cost of safety a point {(ours - bare) / points * 1e3:.2f} ms")
    print(f"once a run: safe state and last rebuild of the record {statistics.median(closings):.2f} s")
    print(f"ratio {ratio:.2f} (at most 1.5)")
    print(json.dumps({"runner_over_bare": ratio}))


if __name__ == "__main__":
    main()
