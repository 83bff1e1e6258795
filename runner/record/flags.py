"""Quality flags: why a point is doubtful. 0 is good.

A bit, once given, keeps its meaning in every record ever written: a new flag takes the next free bit, and no
bit is used twice. Whether extraction may use a flagged point is said here and nowhere else.
"""

import enum


class Flag(enum.IntFlag):
    """Bits of the column ``quality``."""

    CLIPPED = 1
    NO_TRIGGER = 2
    BANK_SAGGED = 4
    OFFSET_CURRENT = 8
    TEMPERATURE_DRIFTED = 16
    OVERLOAD = 32
    NOT_SETTLED = 64
    RETRIED = 128
    SKIPPED = 256
    INSTRUMENT_RESTARTED = 512
    PART_OPEN = 1024
    PART_SHORT = 2048
    STUCK_READING = 4096


SENTENCES: dict[Flag, str] = {
    Flag.CLIPPED: "A digitizer channel reached the end of its range in at least one capture.",
    Flag.NO_TRIGGER: "The digitizer saw no trigger, so there is no capture of this pulse.",
    Flag.BANK_SAGGED: "The capacitor bank fell noticeably during the pulse.",
    Flag.OFFSET_CURRENT: "The current did not start at zero.",
    Flag.TEMPERATURE_DRIFTED: "The part's temperature left its band while the point was measured.",
    Flag.OVERLOAD: "A meter reported an overload instead of a value.",
    Flag.NOT_SETTLED: "The part had not settled at its temperature when the point was measured.",
    Flag.RETRIED: "The point was measured again after a fault.",
    Flag.SKIPPED: "The point was not measured; the events say why.",
    Flag.INSTRUMENT_RESTARTED: "An instrument restarted shortly before the point and was set up again.",
    Flag.PART_OPEN: "The part carried no current: it is open, or not connected.",
    Flag.PART_SHORT: "The current rose as if the part were a short circuit.",
    Flag.STUCK_READING: "A sensor gave the same reading for so long that it is not believed.",
}

#: With one of these a point carries no usable number.
UNUSABLE = (
    Flag.NO_TRIGGER | Flag.OVERLOAD | Flag.SKIPPED | Flag.PART_OPEN | Flag.PART_SHORT | Flag.STUCK_READING
)

EVERY_FLAG = Flag(sum(Flag))


def is_acceptable(quality: int) -> bool:
    """May extraction use a point with these flags?"""
    return not quality & UNUSABLE


def flag_names(quality: int) -> tuple[str, ...]:
    """Names of the flags that are set, lowest bit first, as they stand in the record ("clipped")."""
    return tuple(spelled(flag) for flag in Flag if quality & flag)


def spelled(flag: Flag) -> str:
    """The flag's name as written in the record and in results."""
    return str(flag.name).lower()
