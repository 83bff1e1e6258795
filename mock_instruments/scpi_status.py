"""Registers and error queue of one instrument (IEEE 488.2 chapter 11, SCPI-1999 vol. 1 chapter 9, vol. 2 21.8)."""

from collections import deque
from dataclasses import dataclass, field

from mock_instruments.scpi_errors import ERRORS, error_text, event_bit

QUEUE_LENGTH = 20  # the last place is kept for -350
POWER_ON, OPERATION_COMPLETE = 128, 1


@dataclass(slots=True)
class Register:
    """A SCPI status structure: condition, transition filters, latched event, enable; 15 bits each."""

    condition: int = 0
    event: int = 0
    enable: int = 0
    positive: int = 0x7FFF
    negative: int = 0

    def set_condition(self, value: int) -> None:
        rose, fell = value & ~self.condition, self.condition & ~value
        self.event |= (rose & self.positive) | (fell & self.negative)
        self.condition = value

    def take_event(self) -> int:
        event, self.event = self.event, 0
        return event

    @property
    def summary(self) -> bool:
        return bool(self.event & self.enable)

    def preset(self) -> None:
        self.enable, self.positive, self.negative = 0, 0x7FFF, 0


@dataclass(slots=True)
class Status:
    """All status of one instrument. A fresh one has just been switched on: bit 7 of the event register is set."""

    event: int = POWER_ON
    event_enable: int = 0
    service_enable: int = 0
    operation: Register = field(default_factory=Register)
    questionable: Register = field(default_factory=Register)
    errors: deque[str] = field(default_factory=deque)

    def report(self, number: int, detail: str = "") -> None:
        """Queue an error and set its event bit. Full: -350 takes the newest place, older entries stay."""
        self.event |= event_bit(number)
        if len(self.errors) < QUEUE_LENGTH - 1:
            self.errors.append(error_text(number, detail))
        elif len(self.errors) == QUEUE_LENGTH - 1:
            self.errors.append(error_text(-350))
            self.event |= event_bit(-350)

    def next_error(self) -> str:
        return self.errors.popleft() if self.errors else f'0,"{ERRORS[0]}"'

    def all_errors(self) -> str:
        every = ",".join(self.errors) or f'0,"{ERRORS[0]}"'
        self.errors.clear()
        return every

    def take_event(self) -> int:
        event, self.event = self.event, 0
        return event

    def clear(self) -> None:
        """``*CLS``: events and queue, not the enables."""
        self.event = self.operation.event = self.questionable.event = 0
        self.errors.clear()

    def byte(self, *, message_available: bool = False) -> int:
        """The status byte as ``*STB?`` gives it, bit 6 being the master summary."""
        value = (
            4 * bool(self.errors)
            | 8 * self.questionable.summary
            | 16 * message_available
            | 32 * bool(self.event & self.event_enable)
            | 128 * self.operation.summary
        )
        return value | (64 if value & self.service_enable else 0)
