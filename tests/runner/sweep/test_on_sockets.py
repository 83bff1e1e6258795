"""The same loop over real sockets: both spellings, and a bench where nobody answers."""

import socket
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from drivers import Refused
from runner.errors import BenchError
from runner.plan import load_bench, load_plan
from runner.record import open_run
from runner.shipped import shipped_plans
from runner.sweep import carry_out, probe
from runner.sweep.locks import bench_locked
from runner.sweep.probe import disagreements

MakeTrial = Callable[..., Any]


def odd(text: str) -> str:
    """The bench of other spellings, with the same quick chamber and parts."""
    bench = (shipped_plans() / "benches" / "mock_odd.yaml").read_text()
    bench = bench.replace("ramp: 3 K/min", "ramp: 30 K/min")
    for law in ("gapped", "powder", "remanent"):
        bench = bench.replace(f"{{law: {law},", f"{{law: {law}, time_constants: [15 s, 60 s],")
    return bench


@pytest.mark.parametrize("bench", [lambda text: text, odd], ids=["plain", "odd"])
def test_a_whole_run_over_sockets(make_trial: MakeTrial, bench: Callable[[str], str]) -> None:
    trial = make_trial(bench=bench)
    outcome = carry_out(trial.loaded, trial.folder)
    assert (outcome.status, outcome.points, outcome.flagged) == ("finished", 8, 0)
    with open_run(trial.folder) as run:
        assert run.state == "finished"
        roles = {row.role for row in run.instruments}
        assert {"digitizer", "lcr_meter", "body_thermometer", "chamber", "shunt"} <= roles
        assert all(row.idn for row in run.instruments if row.role != "shunt")


def real_bench(text: str, ports: dict[str, int]) -> str:
    """The bench file without its simulation, at these ports of the loopback interface."""
    head, _, _ = text.partition("\nsimulation:")
    for role, port in ports.items():
        resource = f'resource: "TCPIP::127.0.0.1::{port}::SOCKET"'
        head = head.replace(f"  {role}: {{dialect", f"  {role}: {{{resource}, dialect")
        head = head.replace(f"  {role}:\n    dialect", f"  {role}:\n    {resource}\n    dialect")
    return head


ROLES = (
    "supply",
    "pulser",
    "digitizer",
    "lcr",
    "bias_source",
    "chamber",
    "thermometer",
    "ohmmeter",
    "multiplexer",
)


@pytest.fixture
def closed_ports() -> dict[str, int]:
    """A port for each role at which nobody listens."""
    ports = {}
    for role in ROLES:
        with socket.create_server(("127.0.0.1", 0)) as server:
            ports[role] = server.getsockname()[1]
    return ports


def test_a_bench_that_does_not_answer_is_one_message_and_nothing_is_left_on(
    make_trial: MakeTrial, closed_ports: dict[str, int]
) -> None:
    trial = make_trial(bench=lambda text: real_bench(text, closed_ports))
    with pytest.raises(BenchError) as refused:
        carry_out(trial.loaded, trial.folder)
    for role in ROLES:
        assert f"{role} (TCPIP::127.0.0.1::{closed_ports[role]}::SOCKET)" in str(refused.value)


def test_a_bench_in_use_is_not_touched(make_trial: MakeTrial, closed_ports: dict[str, int]) -> None:
    trial = make_trial(bench=lambda text: real_bench(text, closed_ports))
    taken = trial.loaded.bench.instruments["supply"].resource
    with bench_locked([taken]), pytest.raises(BenchError, match="in use by another run"):
        carry_out(trial.loaded, trial.folder)
    assert not trial.folder.exists()


def test_probing_names_who_answers_and_who_does_not(
    make_trial: MakeTrial, closed_ports: dict[str, int], tmp_path: Path
) -> None:
    make_trial(bench=lambda text: real_bench(text, closed_ports))
    found = probe(load_bench(tmp_path / "bench.yaml"))
    assert [one.role for one in found] == list(ROLES)
    assert not any(one.answers for one in found)
    assert all(one.disagreements for one in found)


@pytest.mark.parametrize("name", ["mock.yaml", "mock_odd.yaml"])
def test_probing_a_bench_that_is_well(name: str) -> None:
    found = probe(load_bench(shipped_plans() / "benches" / name))
    assert all(one.answers for one in found)
    assert [one.disagreements for one in found if one.disagreements] == []
    assert all(one.identity for one in found)


def test_probing_tells_where_an_instrument_does_less_than_the_bench_file_says() -> None:
    class Narrow:
        """A chamber that goes no higher than 120 degC."""

        role = "chamber"

        def setpoint(self) -> float:
            return 25.0

        def set(self, temperature_degC: float) -> float:
            if temperature_degC > 120.0:
                raise Refused("chamber", "FAKE", "refused: -222, out of range")
            return temperature_degC

    bench = load_bench(shipped_plans() / "benches" / "mock.yaml").bench
    assert disagreements(Narrow(), bench) == ["150 degC: chamber (FAKE): refused: -222, out of range"]


def test_a_plan_on_another_bench(make_trial: MakeTrial, tmp_path: Path) -> None:
    make_trial()
    other = tmp_path / "other.yaml"
    other.write_text((tmp_path / "bench.yaml").read_text().replace("name: Mock bench", "name: Other bench"))
    assert load_plan(tmp_path / "plan.yaml", bench=other).bench.name == "Other bench"
