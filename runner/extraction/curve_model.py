"""The curve of one leg as a function of its parameters: L(i) on a grid, its integral λ(i), and i back from λ.

Parameters z: those of a textbook law, the deviation at its knots, and one common delay between the channels. All is
scaled: current by the largest one seen, inductance by the first slope, so that λ(1) is about one. The curve is built
in current and fitted in current: i_k − g(λ_k), with g the inverse of λ(i) at the *fitted* curve, so noise in the
current never sits on an abscissa.
"""

from dataclasses import dataclass

import numpy as np

from runner.arrays import FloatArray
from runner.extraction.deviation import KNOTS, arc_length, fallen, knot_matrix
from runner.extraction.laws import Law

GRID = 801
BEYOND = 1.05  # the grid reaches a little further than the data, so that noise does not fall off its end


@dataclass(frozen=True, slots=True)
class Shape:
    """L and λ on the grid [GRID], with derivatives with respect to law and deviation [GRID, p]."""

    inductance: FloatArray
    flux: FloatArray
    inductance_slopes: FloatArray
    flux_slopes: FloatArray


@dataclass(frozen=True, slots=True)
class CurveModel:
    """A law with room for a deviation; ``current`` [GRID] is the scaled grid, ``fallen`` [KNOTS]
    how far the law is saturated at the deviation's knots."""

    law: Law
    current: FloatArray
    basis: FloatArray
    fallen: FloatArray

    @staticmethod
    def around(law: Law, parameters: FloatArray) -> "CurveModel":
        """The model whose deviation is laid out along the law at ``parameters``."""
        current = np.linspace(0.0, BEYOND, GRID)
        inductance = law.inductance(current, parameters)
        basis = knot_matrix(arc_length(current, inductance))
        return CurveModel(law, current, basis, fallen(current, inductance))

    @property
    def parameters(self) -> int:
        """Of law and deviation together."""
        return self.law.parameters + KNOTS

    def shape(self, z: FloatArray) -> Shape:
        """The curve at z (law, then deviation)."""
        split = self.law.parameters
        factor = np.exp(np.clip(self.basis @ z[split:], -8.0, 8.0))
        inductance = self.law.inductance(self.current, z[:split]) * factor
        slopes = np.hstack(
            [self.law.slopes(self.current, z[:split]) * factor[:, None], self.basis * inductance[:, None]]
        )
        step = float(self.current[1])
        return Shape(inductance, running_integral(inductance, step), slopes, running_integral(slopes, step))

    def plain_shape(self, z: FloatArray) -> Shape:
        """The same without derivatives ([GRID, 0]), a tenth of the work."""
        split = self.law.parameters
        factor = np.exp(np.clip(self.basis @ z[split:], -8.0, 8.0))
        inductance = self.law.inductance(self.current, z[:split]) * factor
        none = np.empty((len(inductance), 0))
        return Shape(inductance, running_integral(inductance, float(self.current[1])), none, none)

    def at_current(self, shape: Shape, current: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """λ and L_d at ``current`` [n], and dλ/dz [n, p]; straight on beyond the grid."""
        step = float(self.current[1])
        cell = np.clip((current / step).astype(np.int64), 0, GRID - 2)
        f = current / step - cell
        low, high = shape.inductance[cell], shape.inductance[cell + 1]
        flux = shape.flux[cell] + step * f * (low + 0.5 * f * (high - low))
        slopes = shape.flux_slopes[cell] * (1 - f)[:, None] + shape.flux_slopes[cell + 1] * f[:, None]
        return flux, np.maximum(low + f * (high - low), 0.1 * low), slopes

    def log_slopes(self, shape: Shape, current: FloatArray) -> FloatArray:
        """d(log L_d)/dz [n, p] at ``current`` [n]."""
        place = np.clip(current, 0.0, self.current[-1]) / float(self.current[1])
        cell = np.minimum(place.astype(np.int64), GRID - 2)
        f = (place - cell)[:, None]
        slopes = shape.inductance_slopes / shape.inductance[:, None]
        return np.asarray(slopes[cell] * (1 - f) + slopes[cell + 1] * f)

    def invert(self, shape: Shape, flux: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
        """Current g, differential inductance, dL/di at ``flux`` [n], and dg/dz [n, p]; straight on beyond the grid."""
        step = float(self.current[1])
        cell = np.clip(np.searchsorted(shape.flux, flux) - 1, 0, GRID - 2)
        low, high = shape.inductance[cell], shape.inductance[cell + 1]
        bottom, top = shape.flux[cell], shape.flux[cell + 1]
        f = np.clip((flux - bottom) / (top - bottom), 0.0, 1.0)
        for _ in range(3):  # Newton on the cubic through λ and its slopes
            value = bottom + f * (f - 1) ** 2 * step * low + f * f * (f - 1) * step * high
            value = value + f * f * (3 - 2 * f) * (top - bottom)
            f = np.clip(f - (value - flux) / (step * (low + f * (high - low))), 0.0, 1.0)
        inductance = low + f * (high - low)
        slopes = shape.flux_slopes[cell] * (1 - f)[:, None] + shape.flux_slopes[cell + 1] * f[:, None]
        current, bend = self.current[cell] + f * step, (high - low) / step
        # Beyond either end of the grid the curve goes straight on, and so do its derivatives.
        for out, end in ((flux > shape.flux[-1], -1), (flux < 0.0, 0)):
            if out.any():
                past = (flux[out] - shape.flux[end]) / shape.inductance[end]
                current[out], bend[out] = self.current[end] + past, 0.0
                inductance[out] = shape.inductance[end]
                slopes[out] = shape.flux_slopes[end] + past[:, None] * shape.inductance_slopes[end]
        return current, inductance, bend, -slopes / inductance[:, None]


def running_integral(values: FloatArray, step: float) -> FloatArray:
    """Integral from the first grid point along axis 0, trapezoid rule with its end-slope correction (error h⁴)."""
    slope = np.empty_like(values)  # times 2·step
    slope[1:-1] = values[2:] - values[:-2]
    slope[0] = -3 * values[0] + 4 * values[1] - values[2]
    slope[-1] = 3 * values[-1] - 4 * values[-2] + values[-3]
    out = np.zeros_like(values)
    cells = 0.5 * step * (values[1:] + values[:-1]) - step / 24.0 * (slope[1:] - slope[:-1])
    np.cumsum(cells, axis=0, out=out[1:])
    return out
