"""What each role asks of its dialect: the intents, what they are given, what they must bring back.

This table is the whole bargain between the role classes and the dialect files: a name that is not here can
neither be sent nor read. All numbers are SI; temperatures are in degC and say so.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

Role = Literal[
    "supply",
    "pulser",
    "digitizer",
    "lcr",
    "bias_source",
    "chamber",
    "thermometer",
    "ohmmeter",
    "multiplexer",
]


Kind = Literal["number", "numbers", "text", "flag", "word", "samples"]

# Values that are not one number each.
_KINDS: Mapping[str, Kind] = {
    "active": "flag",
    "waiting": "flag",
    "measuring": "flag",
    "done": "flag",
    "polarity": "word",
    "states": "numbers",
    "relays": "numbers",
}


@dataclass(frozen=True, slots=True)
class Need:
    """One intent of a role.

    Attributes:
        takes: placeholders its messages may use.
        gives: values that its replies must bring.
        one_of: values of which its replies must bring at least one.
        may_give: values that its replies may bring, such as the read-back of a setting.
        optional: the role can do without.
        brings_samples: its values are whole records of a digitizer.
    """

    takes: tuple[str, ...] = ()
    gives: tuple[str, ...] = ()
    one_of: tuple[str, ...] = ()
    may_give: tuple[str, ...] = ()
    optional: bool = False
    brings_samples: bool = False

    @property
    def known_values(self) -> tuple[str, ...]:
        return self.gives + self.one_of + self.may_give

    def kind_of(self, value: str) -> Kind:
        """How a value is read, so that the role finds it where it looks."""
        return "samples" if self.brings_samples else _KINDS.get(value, "number")


_SWITCHED = {"output_on": Need(may_give=("active",)), "output_off": Need(may_give=("active",))}
_LEVELS = ("voltage", "current")
_SETUP = ("samples", "interval", "pretrigger_samples", "voltage_range", "shunt_range")

ROLES: Mapping[Role, Mapping[str, Need]] = {
    "supply": {
        "set": Need(takes=_LEVELS, may_give=_LEVELS),
        "protect": Need(takes=_LEVELS, may_give=_LEVELS, optional=True),
        "measure": Need(gives=_LEVELS),
        **_SWITCHED,
    },
    "pulser": {
        "set": Need(takes=("width", "polarity"), may_give=("width", "polarity")),
        "protect": Need(takes=("current",), may_give=("current",), optional=True),
        "fire": Need(),
        **_SWITCHED,
    },
    "digitizer": {
        "set": Need(takes=_SETUP, may_give=_SETUP),
        "scaling": Need(
            gives=("voltage_scale", "voltage_offset", "shunt_scale", "shunt_offset"), optional=True
        ),
        "arm": Need(),
        "state": Need(one_of=("waiting", "measuring", "done")),
        "fetch": Need(gives=("voltage", "shunt"), brings_samples=True),
    },
    "lcr": {
        "set": Need(takes=("frequency", "level"), may_give=("frequency", "level")),
        "read": Need(gives=("inductance", "resistance")),
    },
    "bias_source": {
        "set": Need(takes=("current",), may_give=("current",)),
        "protect": Need(takes=("current", "voltage"), may_give=_LEVELS, optional=True),
        "measure": Need(gives=("current", "voltage")),
        **_SWITCHED,
    },
    "chamber": {
        "set": Need(takes=("temperature_degC",), may_give=("temperature_degC",)),
        "protect": Need(takes=("high_degC",), may_give=("high_degC",), optional=True),
        "setpoint": Need(gives=("temperature_degC",)),
        "air": Need(gives=("temperature_degC",)),
        **_SWITCHED,
    },
    "thermometer": {"read": Need(takes=("channel",), gives=("temperature_degC",))},
    "ohmmeter": {"read": Need(gives=("resistance",))},
    "multiplexer": {
        "open_all": Need(),
        "close": Need(takes=("relays",)),
        "closed": Need(takes=("relays",), one_of=("states", "relays")),
    },
}

# Values that are words, not numbers: a dialect that uses one says how the instrument spells each meaning.
WORDS: Mapping[str, tuple[str, ...]] = {"polarity": ("normal", "inverted")}
