"""One leg's curve in SI, with everything its uncertainty is made of.

`LegCurve` answers L_d, L_s, λ and energy at currents inside what was measured, and `knee` the saturation current.
The curve is the mean over the laws that were tried, each with the weight of its evidence (`curve_fit.py`); how far a law
lies from the mean counts as one more parameter, whose variance is that weight, so that all that follows from the curve
knows that the law is not. A quantity's uncertainty has two kinds of parts: what this leg's own noise and model leave open
(a covariance of the parameters), and named causes common to all legs (a vector of shifts of the parameters, one for each
standard uncertainty of a calibration constant). Linear propagation, GUM 5.1.2; causes are independent of each other.
"""

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from runner.arrays import FloatArray
from runner.extraction.curve_model import running_integral
from runner.extraction.fitted import Fit
from runner.extraction.gum import combine, variances

NEGLIGIBLE = 1e-3  # of the combined uncertainty


@dataclass(frozen=True, slots=True)
class Quantity:
    """A value with its contributions, each one standard uncertainty with a sign where causes are shared.

    ``own``: independent contributions of this leg alone (noise, model, skew...). ``shared``: change of the value for
    plus one standard uncertainty of a constant that acts on every leg alike.
    """

    value: float
    own: Mapping[str, float]
    shared: Mapping[str, float]

    @property
    def uncertainty(self) -> float:
        """Combined standard uncertainty."""
        return combine((*self.own.values(), *self.shared.values()))

    def contributions(self) -> list[tuple[str, float]]:
        """Name and standard uncertainty of each contribution, the largest first; what is lost in the
        rounding of the whole is left out."""
        every = [(name, abs(u)) for name, u in (*self.own.items(), *self.shared.items())]
        worth = NEGLIGIBLE * self.uncertainty
        return sorted([item for item in every if item[1] > worth], key=lambda item: -item[1])

    def scaled(self, factor: float) -> "Quantity":
        """The quantity times an exact factor."""
        return Quantity(
            self.value * factor,
            {name: u * factor for name, u in self.own.items()},
            {name: u * factor for name, u in self.shared.items()},
        )

    def with_own(self, name: str, uncertainty: float) -> "Quantity":
        return Quantity(self.value, {**self.own, name: uncertainty}, self.shared)


@dataclass(frozen=True, slots=True)
class Scale:
    """What the fit's units are in SI: ``current`` [A] and ``flux`` [Wb]."""

    current: float
    flux: float

    @property
    def inductance(self) -> float:
        return self.flux / self.current


@dataclass(frozen=True, slots=True)
class LegCurve:
    """The curve of one part at one temperature.

    ``current`` [n] A from 0 to the largest measured, ``inductance`` [n] H (differential), ``flux`` [n] Wb; slopes
    [n, p] are derivatives with respect to the fit's parameters, then to each law's share; ``covariance`` (own, total),
    ``noise`` and ``delay`` split it; ``shifts``: parameters' change per cause; ``again``: the same leg from other rows.
    """

    temperature_degC: float
    current: FloatArray
    inductance: FloatArray
    flux: FloatArray
    inductance_slopes: FloatArray
    flux_slopes: FloatArray
    covariance: FloatArray
    noise: FloatArray
    delay: FloatArray
    shifts: Mapping[str, FloatArray]
    fit: Fit
    scale: Scale
    again: Callable[[Any, Fit | None], "LegCurve"] | None = None

    @property
    def top(self) -> float:
        """The largest current behind the curve [A]."""
        return float(self.current[-1])

    def with_fit(self, fit: Fit) -> "LegCurve":
        """The same leg with another fit of the same rows."""
        return leg_curve(
            fit, self.scale, temperature_degC=self.temperature_degC, shifts=self.shifts, again=self.again
        )

    def with_cause(self, name: str, shift: FloatArray) -> "LegCurve":
        """The same leg with one more cause of uncertainty: change of its parameters [p] per standard uncertainty."""
        return replace(self, shifts={**self.shifts, name: _padded(shift, len(self.covariance))})

    def initial_inductance(self) -> Quantity:
        """L_d at zero current [H]."""
        return self._quantity(float(self.inductance[0]), self.inductance_slopes[0])

    def knee(self, drop: float, reference: Quantity | None = None, *, share: float = 0.0) -> Quantity | None:
        """Current [A] at which L_d has fallen by ``drop`` from ``reference`` [H] (this leg's own L_0 when None).

        ``share``: of the reference that is this leg's own L_0, whose uncertainties ``reference`` then leaves out.

        None where that was not reached inside the measured currents: never extrapolated.
        """
        ref = float(self.inductance[0]) if reference is None else reference.value
        share = 1.0 if reference is None else share
        below = self.inductance - (1 - drop) * ref
        if below[0] <= 0:
            return Quantity(0.0, {}, {}) if reference is not None else None
        crossing = np.flatnonzero(below <= 0)
        if crossing.size == 0:
            return None
        k = int(crossing[0])
        f = float(below[k - 1] / (below[k - 1] - below[k]))
        step = self.current[k] - self.current[k - 1]
        steepness = float(self.inductance[k] - self.inductance[k - 1]) / step
        slopes = self.inductance_slopes[k - 1] * (1 - f) + self.inductance_slopes[k] * f
        value = float(self.current[k - 1] + f * step)
        own = self._quantity(value, -(slopes - (1 - drop) * share * self.inductance_slopes[0]) / steepness)
        if reference is None:
            return own
        factor = (1 - drop) / steepness
        shared = {
            name: own.shared.get(name, 0.0) + factor * reference.shared.get(name, 0.0)
            for name in {**own.shared, **reference.shared}
        }
        mine = dict(own.own)
        other = combine(tuple(reference.own.values()))
        if other:
            mine["reference inductance"] = abs(factor) * other
        return Quantity(value, mine, shared)

    def inductance_uncertainty(self) -> FloatArray:
        """Standard uncertainty of L_d on the grid [n], all causes."""
        return self._uncertainty(self.inductance_slopes)

    def flux_uncertainty(self) -> FloatArray:
        """Standard uncertainty of λ on the grid [n], all causes."""
        return self._uncertainty(self.flux_slopes)

    def secant_inductance(self) -> tuple[FloatArray, FloatArray]:
        """L_s = λ/i and its standard uncertainty on the grid [n]; at zero current it is L_0."""
        safe = np.where(self.current > 0, self.current, 1.0)
        value = np.where(self.current > 0, self.flux / safe, self.inductance[0])
        slopes = np.where(self.current[:, None] > 0, self.flux_slopes / safe[:, None], self.inductance_slopes)
        return value, self._uncertainty(slopes)

    def energy(self) -> tuple[FloatArray, FloatArray]:
        """Stored energy ∫ i dλ [J] and its standard uncertainty on the grid [n]."""
        step = float(self.current[1])
        value = running_integral(self.current * self.inductance, step)
        slopes = running_integral(self.current[:, None] * self.inductance_slopes, step)
        return value, self._uncertainty(slopes)

    def at(self, current: float) -> Quantity:
        """L_d [H] at one current inside the measured range."""
        step = float(self.current[1])
        k = min(int(current / step), len(self.current) - 2)
        f = current / step - k
        slopes = self.inductance_slopes[k] * (1 - f) + self.inductance_slopes[k + 1] * f
        return self._quantity(float(np.interp(current, self.current, self.inductance)), slopes)

    def _uncertainty(self, slopes: FloatArray) -> FloatArray:
        variance = variances(slopes, self.covariance)
        for shift in self.shifts.values():
            variance = variance + (slopes @ shift) ** 2
        return np.asarray(np.sqrt(np.maximum(variance, 0.0)))

    def _quantity(self, value: float, slopes: FloatArray) -> Quantity:
        noise = float(slopes @ self.noise @ slopes)
        delay = max(0.0, float(slopes @ self.delay @ slopes))
        model = max(0.0, float(slopes @ self.covariance @ slopes) - noise - delay)
        own = {
            "noise": float(np.sqrt(max(noise, 0.0))),
            "model": float(np.sqrt(model)),
            "skew": float(np.sqrt(delay)),
        }
        return Quantity(value, own, {name: float(slopes @ shift) for name, shift in self.shifts.items()})


def leg_curve(
    fit: Fit,
    scale: Scale,
    *,
    temperature_degC: float,
    shifts: Mapping[str, FloatArray],
    again: Callable[[Any, Fit | None], LegCurve] | None = None,
) -> LegCurve:
    """Bring a fit into SI; ``shifts`` are the parameters' changes for one standard uncertainty of each cause, ``again``
    makes the curve of this leg from other values of its rows."""
    inside = fit.model.current <= 1.0 + 1e-12
    step = float(fit.model.current[1])
    weights = np.array([rival.weight for rival in fit.rivals])
    ratios = np.array([rival.ratio for rival in fit.rivals]).reshape(len(weights), len(inside))
    mean = weights @ ratios if len(weights) else np.ones(len(inside))
    others = ((ratios - mean) * fit.shape.inductance).T
    inductance = fit.shape.inductance * mean
    slopes = np.hstack([fit.shape.inductance_slopes * mean[:, None], others])
    own = fit.model.parameters
    size = own + len(weights)

    def padded(covariance: FloatArray) -> FloatArray:
        out = np.zeros((size, size))
        out[:own, :own] = covariance[:own, :own]
        return out

    covariance, noise = padded(fit.covariance), padded(fit.noise_covariance)
    delay = covariance - padded(fit.covariance_without_delay)
    covariance[range(own, size), range(own, size)] = weights
    return LegCurve(
        temperature_degC=temperature_degC,
        current=fit.model.current[inside] * scale.current,
        inductance=inductance[inside] * scale.inductance,
        flux=running_integral(inductance, step)[inside] * scale.flux,
        inductance_slopes=slopes[inside] * scale.inductance,
        flux_slopes=running_integral(slopes, step)[inside] * scale.flux,
        covariance=covariance,
        noise=noise,
        delay=delay,
        shifts={name: _padded(shift, size) for name, shift in shifts.items()},
        fit=fit,
        scale=scale,
        again=again,
    )


def _padded(shift: FloatArray, size: int) -> FloatArray:
    """Causes of the bench move the parameters, not what is thought of the laws."""
    return np.concatenate([shift, np.zeros(size - len(shift))]) if len(shift) < size else shift
