"""What is done about a fault, all of it in two tables: what is tried, and what is given up when trying is used up.

The loop asks `decide` with the kind of fault, the instrument's role, the phase of the run and how often this point has
been tried; it gets one action. Every ladder is finite, and a role that keeps failing over a leg uses up `BUDGET`, so no
fault, however regular, keeps a run from its end. Nothing here talks to an instrument. The way to the safe state is not
governed by these tables: it goes on past whatever fails (`safe_state.py`).
"""

import enum
from dataclasses import dataclass


class Kind(enum.Enum):
    """What went wrong."""

    NO_REPLY = "no reply"
    DISCONNECTED = "connection lost"
    GARBLED = "garbled reply"
    REFUSED = "error in its queue"
    RESTARTED = "restarted in mid-run"
    IDENTITY = "another instrument answers"
    NO_TRIGGER = "no trigger"
    CLIPPED = "clipped"
    OVERLOAD = "overload"
    STUCK = "reading does not change"
    OPEN = "part is open"
    SHORT = "part is shorted"


class Phase(enum.Enum):
    """Where in the run it went wrong."""

    START = "start"
    SOAK = "soak"
    CLIMB = "pulse climb"
    BIAS = "bias ramp"


class Action(enum.Enum):
    """What the loop does about it."""

    AGAIN = "measure again"
    RECONNECT = "reconnect with device clear, restore settings, measure again"
    LARGER_RANGE = "take the larger range, measure again"
    FLAG = "keep it with a flag"
    SKIP = "skip this point"
    END_METHOD = "end this method on this part at this temperature"
    END_PART = "end this part's points"
    END_LEG = "end this leg"
    STOP = "stop safely"


# What is tried, in this order, each once for a point.
TRY: dict[Kind, tuple[Action, ...]] = {
    Kind.NO_REPLY: (Action.RECONNECT, Action.RECONNECT),
    Kind.DISCONNECTED: (Action.RECONNECT, Action.RECONNECT, Action.RECONNECT),
    # Half a reply leaves the rest in the line; asking again without a clear would read it as the next answer.
    Kind.GARBLED: (Action.RECONNECT, Action.RECONNECT),
    Kind.REFUSED: (Action.AGAIN, Action.RECONNECT),
    Kind.RESTARTED: (Action.RECONNECT, Action.RECONNECT),
    Kind.IDENTITY: (),
    Kind.NO_TRIGGER: (Action.AGAIN, Action.RECONNECT),
    Kind.CLIPPED: (Action.LARGER_RANGE, Action.LARGER_RANGE),
    Kind.OVERLOAD: (Action.AGAIN, Action.RECONNECT),
    Kind.STUCK: (Action.RECONNECT,),
    Kind.OPEN: (Action.AGAIN,),
    Kind.SHORT: (),  # nobody pulses a shorted part twice
}

# What is given up then. First the readings that a limit is watched by ...
GIVE_UP_READING: dict[tuple[Kind, str], Action] = {
    (Kind.OVERLOAD, "thermometer"): Action.END_LEG,  # the limit on body temperature cannot be watched
    (Kind.STUCK, "thermometer"): Action.END_LEG,
    (Kind.OVERLOAD, "supply"): Action.STOP,  # nobody could tell whether the bank is discharged
    (Kind.STUCK, "supply"): Action.STOP,
    (Kind.OVERLOAD, "chamber"): Action.STOP,
    (Kind.STUCK, "bias_source"): Action.END_METHOD,
}

# ... then the faults of any reading or a part, whatever the instrument ...
GIVE_UP_KIND: dict[Kind, Action] = {
    Kind.IDENTITY: Action.STOP,  # its ratings and calibration are not those of the bench file
    Kind.NO_TRIGGER: Action.SKIP,
    Kind.CLIPPED: Action.FLAG,
    Kind.OVERLOAD: Action.FLAG,
    Kind.STUCK: Action.FLAG,
    Kind.OPEN: Action.END_PART,
    Kind.SHORT: Action.END_PART,
}

# ... then an instrument that is lost or refuses, by its role. Whatever can put energy into the part or the oven and is
# out of reach stops the run; whatever only measures costs its own points.
GIVE_UP_ROLE: dict[str, Action] = {
    "supply": Action.STOP,
    "pulser": Action.STOP,
    "bias_source": Action.STOP,
    "chamber": Action.STOP,
    "multiplexer": Action.STOP,
    "thermometer": Action.STOP,  # the limit on body temperature cannot be watched
    "digitizer": Action.END_METHOD,
    "lcr": Action.END_METHOD,
    "ohmmeter": Action.FLAG,
}

BUDGET = 24  # faults of one role in one leg, after which trying is over


@dataclass(frozen=True, slots=True)
class Decision:
    """What to do and the sentence for the event log."""

    action: Action
    why: str


def decide(kind: Kind, role: str, phase: Phase, *, tried: int, spent: int) -> Decision:
    """What to do about a fault.

    Args:
        kind: what went wrong.
        role: whose fault, a role of the bench or "part".
        phase: where in the run.
        tried: faults at this point (or this set-up) before this one.
        spent: faults of this role in this leg before this one.

    Returns:
        One action. In the start phase what would be given up stops the run: nothing has been measured yet and somebody
        is still near.
    """
    ladder = TRY[kind]
    if tried < len(ladder) and spent < BUDGET:
        return Decision(ladder[tried], f"{role}: {kind.value} ({phase.value}); {ladder[tried].value}")
    action = (
        GIVE_UP_READING.get((kind, role)) or GIVE_UP_KIND.get(kind) or GIVE_UP_ROLE.get(role, Action.STOP)
    )
    if phase is Phase.START and action is not Action.FLAG and kind not in (Kind.OPEN, Kind.SHORT):
        action = Action.STOP
    tries = f"after {tried} tries" if spent < BUDGET else f"after {spent} faults in this leg"
    return Decision(action, f"{role}: {kind.value} ({phase.value}) {tries}; {action.value}")
