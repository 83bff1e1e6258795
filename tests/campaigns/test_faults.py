"""Every instrument, every fault, every phase: each run ends finished with flags or stopped safely, and says so.

On a simulated bench in memory, on its own time. The judge is the bench's own ledger, which no client can talk into
anything: outputs off, limits kept, no relay moved under current or on a charged bank. Only an instrument that is deaf for
ever can stay on, and then the outcome must say that the safe state was not confirmed.
"""

import itertools
from collections.abc import Callable
from pathlib import Path

import pytest

from runner.errors import BenchError
from runner.plan import load_plan
from runner.sweep import Outcome, Progress
from runner.sweep.carry_out import carry_out_at
from runner.sweep.memory_site import MemorySite

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
KINDS = (
    "deaf",
    "silent",
    "slow",
    "close",
    "garbage",
    "half",
    "error",
    "overload",
    "stuck",
    "restart",
    "identity",
)
PHASES = ("start", "soak", "pulse", "bias", "shutdown")
COUNTS = (1, 3, 0)  # one message, a few, and from then on for ever
CASES = list(itertools.product(ROLES, KINDS, PHASES, COUNTS))
SHORT = CASES[::43]  # every role, kind, phase and count is among them; a test says so

Write = Callable[..., Path]


def carry_out_with_fault(
    plan: Path, folder: Path, *, role: str, kind: str, phase: str, count: int
) -> tuple[Outcome | BenchError, MemorySite]:
    """One run with one fault, planted when the run enters the phase."""
    loaded = load_plan(plan)
    site = MemorySite(loaded)
    planted = False

    def plant() -> None:
        nonlocal planted
        planted = True
        seconds = 60.0  # beyond every timeout; in memory nobody waits for it
        reply = site.bench.control(
            {"do": "fault", "role": role, "kind": kind, "count": count, "seconds": seconds}
        )
        assert "error" not in reply

    def watch(progress: Progress) -> None:
        entered = progress.phase == phase or (phase == "shutdown" and progress.done == progress.total)
        if entered and not planted:
            plant()

    if phase == "start":
        plant()
    try:
        outcome: Outcome | BenchError = carry_out_at(site, loaded, folder, watch=watch)
    except BenchError as error:
        outcome = error
    assert planted
    return outcome, site


def judge(outcome: Outcome | BenchError, site: MemorySite, *, role: str, kind: str, count: int) -> None:
    ledger = site.bench.ledger()
    on, largest = ledger["on"], ledger["largest"]
    assert largest["current"] <= 18.0
    assert largest["bank_voltage"] <= 16.0
    assert largest["pulse_energy"] <= 5e-3
    assert max(largest["body_degC"].values()) <= 140.0
    assert largest["chamber_degC"][0] >= -45.0
    assert largest["chamber_degC"][1] <= 130.0
    assert ledger["relay_moves_under_current"] == 0
    assert ledger["relay_moves_on_charged_bank"] == 0
    assert ledger["paths_joined"] == 0
    failed = isinstance(outcome, BenchError) or outcome.status == "failed"
    lost_for_ever = count == 0 and kind in ("deaf", "close", "restart", "error", "identity")
    for source in ("supply", "pulser", "bias_source"):
        is_on = on["bias" if source == "bias_source" else source]
        if is_on:
            # Nobody can switch off what does not listen; whoever comes in the morning must be told.
            assert source == role
            assert lost_for_ever
            assert failed
    if not (role == "supply" and count == 0):
        assert on["bank_voltage"] < 1.0
    if on["relays"]:
        # Relays stay closed where nobody could confirm that they carry nothing; again, that must be said.
        assert role in ("supply", "bias_source", "multiplexer")
        assert count == 0
        assert failed


@pytest.mark.parametrize(("role", "kind", "phase", "count"), SHORT)
@pytest.mark.usefixtures("no_rebuild")
def test_a_fault_ends_in_flags_or_a_safe_stop(
    write_plan: Write, tmp_path: Path, role: str, kind: str, phase: str, count: int
) -> None:
    outcome, site = carry_out_with_fault(
        write_plan(), tmp_path / "run", role=role, kind=kind, phase=phase, count=count
    )
    judge(outcome, site, role=role, kind=kind, count=count)


@pytest.mark.soak
@pytest.mark.parametrize(("role", "kind", "phase", "count"), CASES)
@pytest.mark.parametrize("spelling", ["plain", "odd"])
@pytest.mark.usefixtures("no_rebuild")
def test_every_fault_ends_in_flags_or_a_safe_stop(
    write_plan: Write, tmp_path: Path, spelling: str, role: str, kind: str, phase: str, count: int
) -> None:
    outcome, site = carry_out_with_fault(
        write_plan(spelling=spelling), tmp_path / "run", role=role, kind=kind, phase=phase, count=count
    )
    judge(outcome, site, role=role, kind=kind, count=count)


def test_the_short_form_leaves_nothing_out() -> None:
    for position, everything in enumerate((ROLES, KINDS, PHASES, COUNTS)):
        assert {case[position] for case in SHORT} == set(everything)


@pytest.mark.parametrize("kind", ["open", "short"])
@pytest.mark.parametrize("after", [0, 2, 5, 9, 13, 17, 25])
@pytest.mark.usefixtures("no_rebuild")
def test_a_part_that_fails_at_any_use_ends_its_own_points(
    write_plan: Write, tmp_path: Path, kind: str, after: int
) -> None:
    loaded = load_plan(write_plan(two_parts=True))
    site = MemorySite(loaded)
    site.bench.control({"do": "fault", "role": "part", "kind": kind, "channel": 1, "after": after})
    outcome = carry_out_at(site, loaded, tmp_path / "run")
    assert outcome.status == "finished"
    judge(outcome, site, role="part", kind=kind, count=0)
