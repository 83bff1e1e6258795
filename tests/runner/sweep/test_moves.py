"""The bench's states: what is legal stands in the table, and what must never be legal is tried here."""

import pytest

from runner.sweep.moves import LEGAL, IllegalMove, Move, State, after


def test_relays_move_only_where_nothing_flows_and_nothing_is_charged() -> None:
    allowed = {state for (state, move) in LEGAL if move in (Move.WIRE, Move.UNWIRE)}
    assert allowed == {State.REST, State.WIRED}


@pytest.mark.parametrize("state", State)
def test_the_safe_state_is_reached_from_everywhere(state: State) -> None:
    assert after(state, Move.MAKE_SAFE) is State.REST


@pytest.mark.parametrize(
    ("state", "move"),
    [
        (State.REST, Move.FIRE),
        (State.WIRED, Move.FIRE),
        (State.BIASED, Move.FIRE),
        (State.CHARGED, Move.BIAS),
        (State.BIASED, Move.CHARGE),
        (State.CHARGED, Move.UNWIRE),
        (State.BIASED, Move.UNWIRE),
        (State.CHARGED, Move.WIRE),
        (State.REST, Move.CHARGE),
        (State.REST, Move.BIAS),
    ],
)
def test_an_illegal_move_names_state_and_move(state: State, move: Move) -> None:
    with pytest.raises(IllegalMove, match=f"cannot {move.value} while {state.value}"):
        after(state, move)


def test_energy_never_reaches_rest_in_one_step() -> None:
    # But by the walk to the safe state, which takes it out on the way.
    for (state, move), end in LEGAL.items():
        if end is State.REST and move is not Move.MAKE_SAFE:
            assert state not in (State.CHARGED, State.BIASED)
