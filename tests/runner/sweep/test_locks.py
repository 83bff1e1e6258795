"""One run a bench at a time."""

import uuid

import pytest

from runner.errors import BenchError
from runner.sweep.locks import bench_locked


def test_a_second_run_on_one_instrument_is_refused_and_told_why() -> None:
    mine, other = f"TCPIP::{uuid.uuid4()}", f"TCPIP::{uuid.uuid4()}"
    with (
        bench_locked([mine, other]),
        pytest.raises(BenchError, match="in use by another run"),
        bench_locked([f"TCPIP::{uuid.uuid4()}", mine]),
    ):
        pytest.fail("two runs hold one instrument")


def test_a_lock_is_free_again_afterwards_and_after_an_exception() -> None:
    name = f"TCPIP::{uuid.uuid4()}"
    with pytest.raises(RuntimeError, match="ours"), bench_locked([name]):
        raise RuntimeError("ours")
    with bench_locked([name]):
        pass


def test_spelling_does_not_make_two_benches_of_one() -> None:
    name = f"tcpip::{uuid.uuid4()}"
    with bench_locked([name]), pytest.raises(BenchError), bench_locked([f" {name.upper()}"]):
        pytest.fail("the same instrument, spelled differently")


def test_a_bench_that_names_one_instrument_twice_does_not_lock_itself_out() -> None:
    name = f"TCPIP::{uuid.uuid4()}"
    with bench_locked([name, name]):
        pass
