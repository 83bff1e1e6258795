"""Textbook saturation laws: what the fit expects of an inductor before it has looked closely.

Each law says how the differential inductance falls with current, L(i) = L0·(φ + (1 − φ)·s(i/knee)), with s(0) = 1. None
is believed: the fit takes the one that explains the data best and puts a smooth deviation on top whose size the data
decide (`curve.py`). A law that happens to be right makes the answer sharper; one that is wrong costs width, not truth.

Of one parameter less: the slopes of arctan (1/(1 + x²)), of Frölich's x/(1 + x) ((1 + x)⁻²), of tanh (sech²) and of
Langevin's function (3(1/x² − 1/sinh² x)). Adjustable: 1/(1 + x^a), the form in which powder cores' permeability against
bias is usually catalogued; (1 + x^a)^(−1−1/a), the slope of a limiter x/(1 + x^a)^(1/a) of any sharpness; and the
logistic fall, a common description of a ground-gap ferrite's knee.
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from runner.arrays import FloatArray

# Parameters of every law: log of the initial inductance, floor as a fraction of it, log of the knee current, and log of
# the shape's exponent where it has one. The floor is no logarithm: it may well be zero, and the fit is nearly linear in it.
Shape = Callable[[FloatArray, float], FloatArray]


def _catalogue(x: FloatArray, a: float) -> FloatArray:
    return np.asarray(1.0 / (1.0 + _power(x, a)))


def _limiter(x: FloatArray, a: float) -> FloatArray:
    return np.asarray(np.exp(-(1.0 + 1.0 / a) * np.log1p(_power(x, a))))


def _arctangent(x: FloatArray, _: float) -> FloatArray:
    return np.asarray(1.0 / (1.0 + x * x))


def _froelich(x: FloatArray, _: float) -> FloatArray:
    return np.asarray((1.0 + x) ** -2.0)


def _hyperbolic(x: FloatArray, _: float) -> FloatArray:
    e = np.exp(-2.0 * np.minimum(x, 300.0))
    return np.asarray(4.0 * e / (1.0 + e) ** 2)


def _langevin(x: FloatArray, _: float) -> FloatArray:
    big = np.clip(x, 0.2, 300.0)
    exact = 3.0 * (1.0 / big**2 - 1.0 / np.sinh(big) ** 2)
    s = x * x
    series = 1.0 - s / 5.0 + 2.0 * s**2 / 63.0 - s**3 / 225.0 + 2.0 * s**4 / 3465.0
    return np.where(x < 0.2, series, exact)


def _logistic(x: FloatArray, a: float) -> FloatArray:
    return np.asarray((1.0 + np.exp(-a)) / (1.0 + np.exp(np.minimum(a * (x - 1.0), 500.0))))


def _power(x: FloatArray, a: float) -> FloatArray:
    return np.asarray(np.exp(np.clip(a * np.log(np.maximum(x, 1e-12)), -600.0, 300.0)))


@dataclass(frozen=True, slots=True)
class Law:
    """One law: its name, its shape s(x, a), and where to start a from (empty: it has no shape parameter)."""

    name: str
    shape: Shape
    starts: tuple[float, ...] = ()

    @property
    def parameters(self) -> int:
        return 3 + bool(self.starts)

    def inductance(self, current: FloatArray, parameters: FloatArray) -> FloatArray:
        """L(i) [same unit as the first parameters] at ``current`` [n] >= 0."""
        p = np.exp(np.clip(parameters, -12.0, 6.0))
        a = float(p[3]) if self.starts else 0.0
        floor = parameters[1]
        return np.asarray(p[0] * (floor + (1.0 - floor) * self.shape(current / p[2], a)))

    def slopes(self, current: FloatArray, parameters: FloatArray) -> FloatArray:
        """dL/d(parameter) [n, parameters], central differences."""
        h = 1e-4
        columns = []
        for j in range(self.parameters):
            up, down = parameters.copy(), parameters.copy()
            up[j] += h
            down[j] -= h
            columns.append((self.inductance(current, up) - self.inductance(current, down)) / (2 * h))
        return np.stack(columns, axis=1)


LAWS = (
    Law("limiter", _limiter, (1.5, 5.0)),
    Law("catalogue", _catalogue, (2.0, 6.0)),
    Law("logistic", _logistic, (3.0, 10.0)),
    Law("arctangent", _arctangent),
    Law("Frölich", _froelich),
    Law("hyperbolic", _hyperbolic),
    Law("langevin", _langevin),
)

# What is known of the parameters before the data speak, as normal distributions (currents relative to
# the largest, inductances to the first slope): wide enough to be forgotten as soon as the data say anything.
PRIOR_MEAN = np.array([0.0, 0.05, -0.3, 1.2])
PRIOR_SIGMA = np.array([3.0, 0.15, 1.5, 1.2])
