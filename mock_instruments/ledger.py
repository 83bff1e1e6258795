"""What really happened on the bench, whatever any client believes: extremes and misuse, added to and never reset."""

from collections import deque
from dataclasses import dataclass, field

MEAN_POWER_WINDOW = 60.0  # s


@dataclass(slots=True)
class Ledger:
    """Extremes so far: A, V, J, W, degC; counts of pulses and of what should never be done to relays."""

    current: float = 0.0
    part_current: dict[int, float] = field(default_factory=dict)
    offset_current: dict[int, float] = field(default_factory=dict)
    bank_voltage: float = 0.0
    bank_energy: float = 0.0
    pulse_energy: float = 0.0
    mean_power: float = 0.0
    body_degC: dict[int, float] = field(default_factory=dict)
    chamber_degC: tuple[float, float] = (25.0, 25.0)
    pulses: int = 0
    relay_moves: int = 0
    relay_moves_under_current: int = 0
    relay_moves_on_charged_bank: int = 0
    paths_joined: int = 0
    parts_joined: int = 0
    _recent: deque[tuple[float, float]] = field(default_factory=deque)
    _recent_energy: float = 0.0

    def saw_current(self, channel: int, ampere: float) -> None:
        ampere = abs(ampere)
        if ampere > self.part_current.get(channel, -1.0):
            self.part_current[channel] = ampere
            self.current = max(self.current, ampere)

    def saw_offset(self, channel: int, ampere: float) -> None:
        """A current in the offset winding of a part, which is not a current through the part."""
        self.offset_current[channel] = max(self.offset_current.get(channel, 0.0), abs(ampere))

    def saw_bank(self, voltage: float, capacitance: float) -> None:
        if voltage > self.bank_voltage:
            self.bank_voltage = voltage
            self.bank_energy = 0.5 * capacitance * voltage * voltage

    def saw_body(self, channel: int, temperature_degC: float) -> None:
        if temperature_degC > self.body_degC.get(channel, -300.0):
            self.body_degC[channel] = temperature_degC

    def saw_air(self, temperature_degC: float) -> None:
        low, high = self.chamber_degC
        if temperature_degC < low or temperature_degC > high:
            self.chamber_degC = (min(low, temperature_degC), max(high, temperature_degC))

    def saw_pulse(self, now: float, energy: float) -> None:
        self.pulses += 1
        self.pulse_energy = max(self.pulse_energy, energy)
        self._recent.append((now, energy))
        self._recent_energy += energy
        while now - self._recent[0][0] > MEAN_POWER_WINDOW:
            self._recent_energy -= self._recent.popleft()[1]
        self.mean_power = max(self.mean_power, self._recent_energy / MEAN_POWER_WINDOW)

    def as_mapping(self) -> dict[str, object]:
        """The ledger as the control socket tells it."""
        return {
            "largest": {
                "current": self.current,
                "part_current": {str(k): v for k, v in sorted(self.part_current.items())},
                "bank_voltage": self.bank_voltage,
                "bank_energy": self.bank_energy,
                "pulse_energy": self.pulse_energy,
                "mean_power": self.mean_power,
                "body_degC": {str(k): v for k, v in sorted(self.body_degC.items())},
                "chamber_degC": list(self.chamber_degC),
            },
            "offset_current": {str(k): v for k, v in sorted(self.offset_current.items())},
            "pulses": self.pulses,
            "relay_moves": self.relay_moves,
            "relay_moves_under_current": self.relay_moves_under_current,
            "relay_moves_on_charged_bank": self.relay_moves_on_charged_bank,
            "paths_joined": self.paths_joined,
            "parts_joined": self.parts_joined,
        }
