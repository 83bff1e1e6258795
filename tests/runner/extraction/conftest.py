"""Captures made here from closed forms alone, so that nothing of the simulated bench stands behind these tests."""

from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
import pytest

from runner.extraction.calibration import Calibration
from runner.extraction.curve import LegCurve
from runner.extraction.mean_capture import Setting, average
from runner.extraction.pulse_leg import pulse_leg
from runner.extraction.ramp import Ramp, make_ramp


@dataclass(frozen=True)
class TanhPart:
    """λ = L0·Is·tanh(i/Is): slope and saturation current are closed forms."""

    inductance: float = 100e-6
    knee: float = 10.0

    def flux(self, i):
        return self.inductance * self.knee * np.tanh(np.asarray(i) / self.knee)

    def slope(self, i):
        return self.inductance / np.cosh(np.asarray(i) / self.knee) ** 2

    def saturation_current(self, drop):
        """acosh(1/sqrt(1 − drop)) knees."""
        return self.knee * np.arccosh(1 / np.sqrt(1 - drop))


@dataclass(frozen=True)
class TabulatedPart:
    """Any L(i), its integral by dense trapezoids."""

    shape: Callable
    grid: np.ndarray = field(default_factory=lambda: np.linspace(0.0, 60.0, 240_001))

    def slope(self, i):
        return self.shape(np.asarray(i, dtype=float))

    def flux(self, i):
        values = self.shape(self.grid)
        step = self.grid[1]
        table = np.concatenate([[0.0], np.cumsum(0.5 * step * (values[1:] + values[:-1]))])
        return np.interp(i, self.grid, table)

    def saturation_current(self, drop):
        values = self.shape(self.grid)
        return float(self.grid[np.flatnonzero(values <= (1 - drop) * values[0])[0]])


@dataclass(frozen=True)
class Bench:
    """What captures are made with: eight repeats, 12 V, winding resistance, white noise of each channel."""

    rail: float = 12.0
    resistance: float = 0.02
    current_noise: float = 5e-3
    voltage_noise: float = 8e-3
    repeats: int = 8
    samples: int = 600
    widths: int = 12
    skew: float = 0.0
    shunt_time: float = 0.0
    seed: int = 1


def waveforms(part, bench: Bench, top: float, number: int):
    """Time, voltage and current [n] of pulse ``number``: exact, with skew and the shunt's inductance."""
    longest = float(part.flux(top)) / bench.rail
    width = longest * (0.12 + 0.88 * number / (bench.widths - 1)) if bench.widths > 1 else longest
    interval = width / bench.samples
    time = (np.arange(bench.samples * 4 // 3) - bench.samples // 4 + 0.37) * interval
    grid = np.linspace(0.0, 1.05 * top, 60_001)
    table = part.flux(grid)

    def current_at(t):
        return np.where((t > 0) & (t < width), np.interp(np.clip(t, 0, width) * bench.rail, table, grid), 0.0)

    current = current_at(time)
    on = (time > 0) & (time < width)
    rate = np.where(on, bench.rail / part.slope(current), 0.0)
    late = time - bench.skew
    voltage = np.where((late > 0) & (late < width), bench.rail, 0.0) + bench.resistance * current_at(late)
    return interval, time, voltage, current + bench.shunt_time * rate


def make_ramps(part, bench: Bench, top: float, calibration: Calibration) -> list[Ramp]:
    """Noisy captures of all widths, averaged and made ramps."""
    generator = np.random.default_rng(bench.seed)
    ramps = []
    for number in range(bench.widths):
        interval, time, voltage, current = waveforms(part, bench, top, number)
        shape = (bench.repeats, len(time))
        mean = average(
            voltage + bench.voltage_noise * generator.standard_normal(shape),
            current + bench.current_noise * generator.standard_normal(shape),
            Setting(interval, float(time[0])),
        )
        ramp = make_ramp(mean, calibration, point=number)
        assert ramp is not None
        ramps.append(ramp)
    return ramps


@pytest.fixture(scope="session")
def tanh_part() -> TanhPart:
    return TanhPart()


@pytest.fixture(scope="session")
def tabulated() -> Callable[..., TabulatedPart]:
    return TabulatedPart


@pytest.fixture(scope="session")
def bench() -> Callable[..., Bench]:
    return Bench


@pytest.fixture(scope="session")
def ramps_of() -> Callable[..., list[Ramp]]:
    return make_ramps


@pytest.fixture(scope="session")
def leg_of() -> Callable[..., LegCurve]:
    """leg_of(part, bench, top=..., temperature_degC=..., calibration=...): captures, and the curve through them."""

    def make(
        part,
        bench: Bench | None = None,
        *,
        top=14.0,
        temperature_degC=25.0,
        calibration=None,
        uncertainty=0.0,
    ):
        bench = bench or Bench()
        calibration = calibration or Calibration()
        return pulse_leg(
            make_ramps(part, bench, top, calibration),
            calibration,
            temperature_degC=temperature_degC,
            resistance=bench.resistance,
            resistance_uncertainty=uncertainty,
        )

    return make


@pytest.fixture(scope="session")
def tanh_leg(leg_of, tanh_part) -> LegCurve:
    return leg_of(tanh_part)
