"""The digitizer's front end: true waveforms in, codes out. Pure but for the generator it is given."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mock_instruments.flux import FloatArray
from mock_instruments.spec import DigitizerSpec
from mock_instruments.world import Pulse

CodeArray = NDArray[np.int64]
RING_FREQUENCY, RING_DECAY = 12e6, 150e-9  # Hz, s
HUM_FREQUENCY = 50.0


@dataclass(frozen=True, slots=True)
class Settings:
    """Samples, interval [s], samples before the trigger, full scale of either channel [V] (the range is ± that)."""

    samples: int
    interval: float
    pretrigger: int
    voltage_range: float
    shunt_range: float


@dataclass(frozen=True, slots=True)
class Record:
    """Codes of one capture [n], right-justified, signed, ``bits`` wide; volts = code · 2·range/2^bits."""

    settings: Settings
    bits: int
    voltage: CodeArray
    shunt: CodeArray


def capture(
    pulse: Pulse,
    settings: Settings,
    spec: DigitizerSpec,
    delay: float,
    noise: np.random.Generator,
    *,
    overloaded: bool = False,
) -> Record:
    """What the digitizer makes of a pulse whose switch closes ``delay`` [s] after the trigger.

    The voltage channel sees everything ``spec.skew`` later than the shunt channel.
    """
    ticks = np.arange(settings.samples, dtype=np.float64) - settings.pretrigger
    time: FloatArray = ticks * settings.interval - delay
    voltage, shunt = pulse.voltage(time - spec.skew), pulse.shunt(time)
    if spec.ringing:
        voltage = voltage + spec.ringing * (_ring(time - spec.skew) - _ring(time - spec.skew - pulse.width))
    if spec.hum:
        shunt = shunt + spec.hum * np.sin(2.0 * np.pi * HUM_FREQUENCY * (time + pulse.start))
    draw = noise.standard_normal((2, settings.samples))
    if overloaded:
        voltage = shunt = np.full(settings.samples, np.inf)
    return Record(
        settings,
        spec.bits,
        quantise(
            voltage * spec.voltage_gain + spec.voltage_offset,
            settings.voltage_range,
            spec.bits,
            spec.noise * draw[0],
        ),
        quantise(
            shunt * spec.shunt_gain + spec.shunt_offset, settings.shunt_range, spec.bits, spec.noise * draw[1]
        ),
    )


def quantise(volts: FloatArray, full_scale: float, bits: int, noise: FloatArray | float = 0.0) -> CodeArray:
    """Signed codes of ``volts`` with ``noise`` in steps added, clipped at both ends of the range."""
    half = 1 << (bits - 1)
    steps = np.rint(volts * (half / full_scale) + noise)
    return np.clip(steps, -half, half - 1).astype(np.int64)


def _ring(time: FloatArray) -> FloatArray:
    after = np.maximum(time, 0.0)
    return np.asarray(np.exp(-after / RING_DECAY) * np.sin(2.0 * np.pi * RING_FREQUENCY * after))
