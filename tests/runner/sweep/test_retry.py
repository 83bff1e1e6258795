"""The policy tables: complete, bounded, and safe."""

import pytest

from drivers import Disconnected, Garbled, InstrumentError, NoReply, Refused, Restarted
from runner.sweep.faults import BadReading, kind_of
from runner.sweep.retry import BUDGET, GIVE_UP_KIND, GIVE_UP_ROLE, TRY, Action, Kind, Phase, decide

TRYING = {Action.AGAIN, Action.RECONNECT, Action.LARGER_RANGE}
ROLES = (*GIVE_UP_ROLE, "part")


@pytest.mark.parametrize("kind", Kind)
@pytest.mark.parametrize("role", ROLES)
@pytest.mark.parametrize("phase", Phase)
def test_every_fault_comes_to_an_end(kind: Kind, role: str, phase: Phase) -> None:
    actions = [decide(kind, role, phase, tried=tried, spent=tried).action for tried in range(10)]
    end = next(index for index, action in enumerate(actions) if action not in TRYING)
    assert end <= 3
    assert all(action is actions[end] for action in actions[end:])


@pytest.mark.parametrize("kind", Kind)
@pytest.mark.parametrize("role", ROLES)
def test_a_role_that_fails_all_leg_long_is_given_up_at_once(kind: Kind, role: str) -> None:
    assert decide(kind, role, Phase.CLIMB, tried=0, spent=BUDGET).action not in TRYING


@pytest.mark.parametrize("role", ["supply", "pulser", "bias_source", "chamber", "multiplexer"])
@pytest.mark.parametrize(
    "kind", [Kind.NO_REPLY, Kind.DISCONNECTED, Kind.GARBLED, Kind.REFUSED, Kind.RESTARTED]
)
def test_whatever_can_put_energy_out_and_is_lost_stops_the_run(role: str, kind: Kind) -> None:
    assert decide(kind, role, Phase.CLIMB, tried=9, spent=9).action is Action.STOP


@pytest.mark.parametrize(
    ("kind", "role", "phase", "action"),
    [
        (Kind.NO_REPLY, "lcr", Phase.BIAS, Action.END_METHOD),
        (Kind.NO_REPLY, "digitizer", Phase.CLIMB, Action.END_METHOD),
        (Kind.NO_REPLY, "ohmmeter", Phase.CLIMB, Action.FLAG),
        (Kind.NO_REPLY, "ohmmeter", Phase.START, Action.FLAG),
        (Kind.NO_REPLY, "lcr", Phase.START, Action.STOP),
        (Kind.OVERLOAD, "thermometer", Phase.CLIMB, Action.END_LEG),
        (Kind.OVERLOAD, "lcr", Phase.BIAS, Action.FLAG),
        (Kind.NO_TRIGGER, "digitizer", Phase.CLIMB, Action.SKIP),
        (Kind.IDENTITY, "lcr", Phase.SOAK, Action.STOP),
        (Kind.OPEN, "part", Phase.CLIMB, Action.END_PART),
        (Kind.SHORT, "part", Phase.CLIMB, Action.END_PART),
        (Kind.STUCK, "thermometer", Phase.SOAK, Action.END_LEG),
    ],
)
def test_what_is_given_up(kind: Kind, role: str, phase: Phase, action: Action) -> None:
    assert decide(kind, role, phase, tried=9, spent=9).action is action


def test_a_shorted_part_is_never_pulsed_again() -> None:
    assert decide(Kind.SHORT, "part", Phase.CLIMB, tried=0, spent=0).action is Action.END_PART


def test_the_tables_leave_no_kind_out() -> None:
    assert set(TRY) == set(Kind)
    assert set(GIVE_UP_KIND) <= set(Kind)


def test_the_reason_says_who_what_where_and_what_is_done() -> None:
    why = decide(Kind.NO_REPLY, "lcr", Phase.BIAS, tried=0, spent=0).why
    assert why == "lcr: no reply (bias ramp); reconnect with device clear, restore settings, measure again"


@pytest.mark.parametrize(
    ("failure", "kind"),
    [
        (NoReply("lcr", "R", "x"), Kind.NO_REPLY),
        (Garbled("lcr", "R", "x"), Kind.GARBLED),
        (Disconnected("lcr", "R", "x"), Kind.DISCONNECTED),
        (Restarted("lcr", "R", "x"), Kind.RESTARTED),
        (Refused("lcr", "R", "x"), Kind.REFUSED),
        (InstrumentError("lcr", "R", "x"), Kind.GARBLED),
        (BadReading(Kind.STUCK, "lcr", "x"), Kind.STUCK),
    ],
)
def test_what_the_drivers_raise_has_a_kind(failure: InstrumentError | BadReading, kind: Kind) -> None:
    assert kind_of(failure) is kind
