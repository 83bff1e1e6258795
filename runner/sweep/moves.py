"""The states of the bench and every legal move between them.

The current of an offset winding is a move of its own: it flows only while the bank is charged, and discharging ends it.
A relay moves only in REST, where nothing is charged and nothing flows. There is no move from a charged bank or a flowing
bias to REST but through the ones that take the energy out; `make_safe` is legal everywhere and walks that way itself.
"""

import enum


class State(enum.Enum):
    """What the bench is doing."""

    REST = "at rest"  # outputs off, bank discharged, relays open
    WIRED = "wired"  # relays closed for one part and one path, nothing flows
    CHARGED = "bank charged"
    BIASED = "bias on"


class Move(enum.Enum):
    """What may be done to it."""

    WIRE = "close relays"
    UNWIRE = "open relays"
    CHARGE = "charge the bank"
    FIRE = "fire a pulse"
    DISCHARGE = "discharge the bank"
    BIAS = "set the bias current"
    UNBIAS = "end the bias current"
    OFFSET = "set the current of the offset winding"
    MAKE_SAFE = "reach the safe state"


LEGAL: dict[tuple[State, Move], State] = {
    (State.REST, Move.WIRE): State.WIRED,
    (State.WIRED, Move.UNWIRE): State.REST,
    (State.WIRED, Move.CHARGE): State.CHARGED,
    (State.CHARGED, Move.FIRE): State.CHARGED,
    (State.CHARGED, Move.OFFSET): State.CHARGED,
    (State.CHARGED, Move.DISCHARGE): State.WIRED,
    (State.WIRED, Move.BIAS): State.BIASED,
    (State.BIASED, Move.BIAS): State.BIASED,
    (State.BIASED, Move.UNBIAS): State.WIRED,
    (State.REST, Move.MAKE_SAFE): State.REST,
    (State.WIRED, Move.MAKE_SAFE): State.REST,
    (State.CHARGED, Move.MAKE_SAFE): State.REST,
    (State.BIASED, Move.MAKE_SAFE): State.REST,
}


class IllegalMove(Exception):
    """A fault of ours: the loop asked for a move that the bench's state forbids. Nothing was sent."""


def after(state: State, move: Move) -> State:
    """State that follows.

    Raises:
        IllegalMove: the table has no such move.
    """
    try:
        return LEGAL[state, move]
    except KeyError:
        raise IllegalMove(f"cannot {move.value} while {state.value}") from None
