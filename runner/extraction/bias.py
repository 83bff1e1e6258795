"""The bias method: readings of a meter with direct current through the part, corrected, and a curve through them.

What it gives is the incremental (reversible) inductance, which is not the pulse method's differential inductance in a
core with hysteresis: the two are never merged. Readings on the way up and on the way down are separate branches.
"""

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace

import numpy as np

from runner.arrays import FloatArray
from runner.extraction.calibration import Calibration
from runner.extraction.common_effects import CommonEffects, no_effects
from runner.extraction.curve import LegCurve, Scale, leg_curve
from runner.extraction.curve_data import Noise
from runner.extraction.curve_fit import fit_again, fit_curve
from runner.extraction.curve_model import CurveModel, Shape
from runner.extraction.fitted import Fit

FEWEST_READINGS = 5
ROWS = slice(None)


@dataclass(frozen=True, slots=True)
class Readings:
    """Corrected readings, in the order they were taken: ``current`` [n] A, ``inductance`` [n] H, the part's temperature
    [n] degC and what of it is uncertain from heating alone [n] K (see `bias_heat.py`)."""

    current: FloatArray
    inductance: FloatArray
    temperature_degC: FloatArray
    heat_uncertainty: FloatArray

    def part(self, rows: slice) -> "Readings":
        return Readings(
            self.current[rows],
            self.inductance[rows],
            self.temperature_degC[rows],
            self.heat_uncertainty[rows],
        )


def correct(columns: Mapping[str, FloatArray], calibration: Calibration) -> tuple[FloatArray, FloatArray]:
    """Open, short and load correction of meter readings, and the gain of the bias source.

    Args:
        columns: as read, under the record's names: ``bias_current`` [n] A, ``inductance`` [n] H and ``ac_resistance``
            [n] ohm (series values), ``test_frequency`` [n] Hz.
        calibration: ``meter_gain`` (load), ``fixture_inductance`` and ``fixture_resistance`` (short),
            ``open_capacitance`` (open).

    Returns:
        Current through the part [n] A and its inductance [n] H.

    The fixture is a series impedance with a capacitance across the part behind it: Z = 1/(1/(Z_m − Z_short) − jωC).
    """
    omega = 2 * np.pi * columns["test_frequency"]
    inductance, resistance = columns["inductance"], columns["ac_resistance"]
    lossy = np.where(np.isfinite(resistance), resistance, 0.0)
    gain = calibration.meter_gain.value
    impedance = lossy + 1j * omega * inductance / gain
    short = calibration.fixture_resistance.value + 1j * omega * calibration.fixture_inductance.value
    part = 1.0 / (1.0 / (impedance - short) - 1j * omega * calibration.open_capacitance.value)
    return np.abs(columns["bias_current"]) / calibration.bias_gain.value, np.asarray(part.imag / omega)


@dataclass(frozen=True, slots=True)
class ReadingData:
    """Readings for the fit, scaled by the largest current and the first inductance;
    ``heat_uncertainty`` as in `Readings`."""

    current: FloatArray
    inductance: FloatArray
    temperatures: FloatArray
    heat_uncertainty: FloatArray
    current_scale: float
    inductance_scale: float

    @property
    def rows(self) -> int:
        return len(self.current)

    @property
    def noise_known(self) -> bool:
        return False

    @property
    def common(self) -> CommonEffects:
        """A meter's readings share no delay; what they do share is told in `_shifts`."""
        return no_effects(self.rows)

    def pilot(self) -> tuple[FloatArray, FloatArray]:
        fine = np.linspace(0.0, 1.0, 200)
        curve = np.interp(fine, self.current, self.inductance)
        return fine, np.concatenate([[0.0], np.cumsum(0.5 * (curve[1:] + curve[:-1]) * fine[1])])

    def pilot_slack(self, inductance: Callable[[FloatArray], FloatArray]) -> FloatArray:
        return np.zeros(200)

    def linearise(
        self, model: CurveModel, shape: Shape, z: FloatArray
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Residual inductances [n], their slopes [n, p], and L at the readings [n]."""
        step = float(model.current[1])
        cell = np.clip((self.current / step).astype(np.int64), 0, len(model.current) - 2)
        f = self.current / step - cell
        value = shape.inductance[cell] * (1 - f) + shape.inductance[cell + 1] * f
        slopes = (
            shape.inductance_slopes[cell] * (1 - f)[:, None] + shape.inductance_slopes[cell + 1] * f[:, None]
        )
        return self.inductance - value, slopes, value

    def approach(
        self, model: CurveModel, shape: Shape, z: FloatArray, *, held: FloatArray
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Readings are linear in the inductance from the start."""
        return self.linearise(model, shape, z)

    def inductance_at_rows(self, model: CurveModel, shape: Shape, z: FloatArray) -> FloatArray:
        return self.linearise(model, shape, z)[2]

    def moved(self, by: FloatArray) -> "ReadingData":
        """The same readings with their inductances smaller by ``by`` [n] (scaled)."""
        return replace(self, inductance=self.inductance - by)

    def noise(self, inductance: FloatArray) -> Noise:
        """Independent noise in proportion to the reading; its size is for the fit to find (starting at 1e-4)."""
        return Noise((np.diag(1e-4 * np.maximum(inductance, 0.01)),), (ROWS,))


def bias_leg(
    readings: Readings, calibration: Calibration, *, temperature_degC: float, like: LegCurve | None = None
) -> LegCurve | None:
    """The curve through one branch; None with fewer than five different currents or without a span of current."""
    order = np.argsort(readings.current, kind="stable")
    current, inductance = readings.current[order], readings.inductance[order]
    if len(np.unique(np.round(current, 6))) < FEWEST_READINGS or current[0] > 0.25 * current[-1]:
        return None
    top, first = float(current[-1]), float(inductance[0])
    if not first > 0:
        return None
    data = ReadingData(
        current / top,
        inductance / first,
        readings.temperature_degC[order],
        readings.heat_uncertainty[order],
        top,
        first,
    )
    scale = Scale(top, first * top)

    def curve(fit: Fit, rows: ReadingData) -> LegCurve:
        shifts = _shifts(fit, rows, calibration)
        return leg_curve(fit, scale, temperature_degC=temperature_degC, shifts=shifts, again=again)

    def again(rows: ReadingData, fit: Fit | None) -> LegCurve:
        return curve(fit_curve(rows) if fit is None else fit_again(rows, fit), rows)

    return curve(fit_curve(data, like=None if like is None else like.fit), data)


def _shifts(fit: Fit, data: ReadingData, calibration: Calibration) -> Mapping[str, FloatArray]:
    """Change of the parameters for plus one standard uncertainty of the meter's and the source's constants."""
    meter = calibration.meter_gain.uncertainty / calibration.meter_gain.value
    source = calibration.bias_gain.uncertainty / calibration.bias_gain.value
    fall = np.gradient(fit.shape.inductance, fit.model.current)
    steep = np.interp(data.current, fit.model.current, fall)
    moves = {
        "meter gain": -meter * data.inductance,
        # A source that gives less than it reads by u: each reading belongs to a smaller current.
        "bias current": source * data.current * steep,
        "fixture inductance": -calibration.fixture_inductance.uncertainty
        / data.inductance_scale
        * np.ones(data.rows),
    }
    return {name: (fit.gain @ move)[: fit.model.parameters] for name, move in moves.items() if np.any(move)}
