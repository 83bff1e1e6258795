"""What the fit sees of a leg: bins of ramps, or readings of a meter, scaled, with the covariance of their noise.

White noise of the current is independent from bin to bin, or nearly so where the undoing of the shunt's inductance has
smoothed it. Noise of the voltage is not once it is integrated: per ramp, λ carries a random walk, a straight line
from the uncertain voltage offset and a constant from a jittering start; the current's own offset is one more constant.
All are common to the bins of a ramp and independent between ramps, and reach the current through dg/dλ = 1/L.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from itertools import pairwise
from typing import Protocol

import numpy as np
from scipy.linalg import cholesky
from scipy.linalg.lapack import dtrtri

from runner.arrays import FloatArray, IntArray
from runner.extraction.common_effects import SHUNT, CommonEffects, Scales, ShuntLag, effects_of, shunt_lag
from runner.extraction.curve_model import CurveModel, Shape
from runner.extraction.ramp import Ramp


class FitData(Protocol):
    """What `curve_fit` needs: n rows, their residuals about a curve, and their noise.

    ``moved``: the same rows, what is compared with the curve being smaller by so much [n].
    ``noise_known``: False lets the fit find the noise's size freely, True only lets it grow a little.
    ``common``: what the rows share. ``temperatures`` [n] degC of the part at each row.
    """

    @property
    def rows(self) -> int: ...
    @property
    def noise_known(self) -> bool: ...
    @property
    def common(self) -> CommonEffects: ...
    @property
    def temperatures(self) -> FloatArray: ...
    def pilot(self) -> tuple[FloatArray, FloatArray]: ...
    def pilot_slack(self, inductance: Callable[[FloatArray], FloatArray]) -> FloatArray: ...
    def linearise(
        self, model: CurveModel, shape: Shape, z: FloatArray
    ) -> tuple[FloatArray, FloatArray, FloatArray]: ...
    def approach(
        self, model: CurveModel, shape: Shape, z: FloatArray, *, held: FloatArray
    ) -> tuple[FloatArray, FloatArray, FloatArray]: ...
    def inductance_at_rows(self, model: CurveModel, shape: Shape, z: FloatArray) -> FloatArray: ...
    def noise(self, inductance: FloatArray) -> "Noise": ...
    def moved(self, by: FloatArray) -> "FitData": ...


@dataclass(frozen=True, slots=True)
class Noise:
    """Covariance of the rows as Cholesky factors of blocks; ``members`` say which rows."""

    factors: tuple[FloatArray, ...]
    members: tuple[slice, ...]
    # Of the factors, made once: solving with a factor of this size wakes the threads of the algebra library, which takes
    # ten times longer than the work, multiplying does not.
    _inverses: tuple[FloatArray, ...] = field(init=False, repr=False)

    def __post_init__(self) -> None:
        inverses = tuple(np.asarray(dtrtri(factor, lower=1)[0]) for factor in self.factors)
        object.__setattr__(self, "_inverses", inverses)

    @property
    def log_determinant(self) -> float:
        return 2 * sum(float(np.log(np.diag(factor)).sum()) for factor in self.factors)

    def whiten(self, rows: FloatArray, *, transposed: bool = False) -> FloatArray:
        """``rows`` [n, ...] divided by the square root of their covariance, or by its transpose."""
        out = np.empty_like(rows)
        for inverse, member in zip(self._inverses, self.members, strict=True):
            out[member] = (inverse.T if transposed else inverse) @ rows[member]
        return out

    def color(self, white: FloatArray) -> FloatArray:
        """The opposite of `whiten`: noise of this covariance from independent unit normals [n]."""
        out = np.empty_like(white)
        for factor, member in zip(self.factors, self.members, strict=True):
            out[member] = factor @ white[member]
        return out


@dataclass(frozen=True, slots=True)
class CurveData:
    """n bins of all ramps: scaled ``current``, ``flux``, ``spread`` (variance of λ in the bin); ``charge`` [A s] and
    ``volt_seconds`` [V s] as they are; ``members``: which rows belong to which ramp.
    """

    ramps: tuple[Ramp, ...]
    members: tuple[slice, ...]
    current: FloatArray
    flux: FloatArray
    charge: FloatArray
    volt_seconds: FloatArray
    spread: FloatArray
    scales: Scales
    common: CommonEffects
    shunt: ShuntLag

    @property
    def rows(self) -> int:
        return len(self.current)

    @property
    def noise_known(self) -> bool:
        return True

    @property
    def temperatures(self) -> FloatArray:
        return np.concatenate([np.full(len(ramp.current), ramp.temperature_degC) for ramp in self.ramps])

    def with_rows(self, current: FloatArray, flux: FloatArray) -> "CurveData":
        """The same bins with other values (scaled)."""
        return replace(self, current=current, flux=flux)

    def moved(self, by: FloatArray) -> "CurveData":
        """The same bins with their currents smaller by ``by`` [n] (scaled)."""
        return replace(self, current=self.current - by)

    def pilot(self) -> tuple[FloatArray, FloatArray]:
        """A few of the rows, evenly along the flux, for the first look at the laws: current and flux [k]."""
        some = self._some
        return self.current[some], self.flux[some]

    def pilot_slack(self, inductance: Callable[[FloatArray], FloatArray]) -> FloatArray:
        """By how much the pilot's currents are too large [k] for one standard uncertainty of the shunt's time."""
        lead, _ = self.shunt.effect(np.maximum(inductance(self.current), 0.02))
        return lead[self._some] * float(self.common.sigmas[SHUNT])

    @property
    def _some(self) -> IntArray:
        order = np.argsort(self.flux)
        return order[np.unique(np.linspace(0, len(order) - 1, 160).astype(np.int64))]

    def linearise(
        self, model: CurveModel, shape: Shape, z: FloatArray
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Residual currents [n], slopes of the curve's current with respect to z [n, p], and L at the bins [n]."""
        shared = z[model.parameters :]
        shunt = float(shared[SHUNT])
        current, inductance, bend, slopes = model.invert(shape, self.flux + self.common.flux @ shared)
        lead, missing = self.shunt.effect(inductance)
        # The mean current of a bin is not the current at its mean flux: half of g'' times the variance of λ inside.
        curved = -0.5 * bend / inductance**3 * self.spread
        measured = self.current + self.common.current @ shared - shunt * lead
        residual = measured - (current + shunt * missing / inductance + curved)
        effects = self.common.flux / inductance[:, None] - self.common.current
        effects[:, SHUNT] = lead + missing / inductance
        if slopes.shape[1]:  # a larger L makes the shunt's effect smaller in proportion
            slopes = slopes - (shunt * lead)[:, None] * model.log_slopes(shape, current)
        return residual, np.hstack([slopes, effects]), inductance

    def approach(
        self, model: CurveModel, shape: Shape, z: FloatArray, *, held: FloatArray
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """`linearise` for a curve that is still far off: λ compared at the measured current, then divided by the L
        that is ``held`` [n] (the present one, or a misfit could be made small by making L large).

        To first order the same residuals; but they are nearly linear in the parameters, however far away these are,
        where i at a given λ runs away as soon as a guessed curve saturates too early. The noise of the current stands
        on the abscissa here, so the last turns are not made this way.
        """
        shared = z[model.parameters :]
        shunt = float(shared[SHUNT])
        lead, missing = self.shunt.effect(held)
        flux = self.flux + self.common.flux @ shared + shunt * missing
        current = self.current + self.common.current @ shared - shunt * lead
        found, inductance, slopes = model.at_current(shape, current)
        here = inductance / held
        effects = self.common.flux / held[:, None] - self.common.current * here[:, None]
        effects[:, SHUNT] = lead * here + missing / held
        return (found - flux) / held, np.hstack([-slopes / held[:, None], effects]), inductance

    def inductance_at_rows(self, model: CurveModel, shape: Shape, z: FloatArray) -> FloatArray:
        """L_d of a curve at the measured currents [n], wherever their flux would put them."""
        return model.at_current(shape, self.current + self.common.current @ z[model.parameters :])[1]

    def noise(self, inductance: FloatArray) -> Noise:
        return Noise(tuple(_factors(self, inductance)), self.members)


def lay_out(
    ramps: Sequence[Ramp], resistance: float, *, skew: float = 0.0, shunt_time: float = 0.0
) -> CurveData:
    """Scale the bins of ``ramps``.

    ``resistance`` [ohm] of the winding; ``skew``, ``shunt_time``: standard uncertainties of the channels' skew
    (infinite: to be found) and of the shunt's time constant [s].
    """
    sizes = np.cumsum([0] + [len(ramp.current) for ramp in ramps])
    members = tuple(slice(int(a), int(b)) for a, b in pairwise(sizes))
    current = np.concatenate([ramp.current for ramp in ramps])
    flux = np.concatenate([ramp.flux(resistance) for ramp in ramps])
    top = float(current.max())
    low = current < 0.3 * top
    slope = float(flux[low] @ current[low] / (current[low] @ current[low]))
    scales = Scales(top, slope * top, 1e-3 * max(ramp.width for ramp in ramps), resistance)
    return CurveData(
        ramps=tuple(ramps),
        members=members,
        current=current / top,
        flux=flux / scales.flux,
        charge=np.concatenate([ramp.charge for ramp in ramps]),
        volt_seconds=np.concatenate([ramp.volt_seconds for ramp in ramps]),
        spread=np.concatenate([ramp.spread for ramp in ramps]) / scales.flux**2,
        scales=scales,
        common=effects_of(ramps, scales, skew=skew, shunt_time=shunt_time),
        shunt=shunt_lag(ramps, members, scales),
    )


def _factors(data: CurveData, inductance: FloatArray) -> list[FloatArray]:
    """Cholesky factor of each ramp's covariance (scaled current), ``inductance`` [n] scaled at the bins."""
    found = []
    scale = data.scales.current
    for ramp, rows in zip(data.ramps, data.members, strict=True):
        slope = 1.0 / inductance[rows] / data.scales.flux  # scaled current per Wb
        t = np.maximum(ramp.time, 0.0)
        flux_part = ramp.walk**2 * np.minimum(t[:, None], t[None, :])
        flux_part += ramp.slope_uncertainty**2 * np.outer(t, t) + (ramp.start_voltage * ramp.jitter) ** 2
        covariance = flux_part * np.outer(slope, slope)
        covariance += (ramp.level_uncertainty / scale) ** 2
        if ramp.shunt_time > 0:
            fading = np.exp(-t / ramp.shunt_time) * ramp.start_rate * ramp.jitter / scale
            covariance += np.outer(fading, fading)
        covariance += ramp.noise_density / scale**2 * smoothed_noise(ramp.edges, ramp.shunt_time)
        found.append(cholesky(covariance, lower=True, check_finite=False))
    return found


def smoothed_noise(edges: FloatArray, time_constant: float) -> FloatArray:
    """Covariance of the bin means [m, m], 1/s, of white noise of unit density behind a first-order low-pass.

    Correlation exp(−|t|/τ)/(2τ), integrated over both bins in closed form; without a low-pass 1/length on the diagonal.
    """
    lengths = np.diff(edges)
    if time_constant < 1e-3 * float(lengths.min()):
        return np.diag(1.0 / lengths)
    fall = -np.expm1(-lengths / time_constant)
    gap = np.maximum(edges[None, :-1] - edges[1:, None], 0.0)
    half = np.triu(np.outer(fall, fall) * np.exp(-gap / time_constant) * time_constant / 2, 1)
    covariance = half + half.T + np.diag(lengths - time_constant * fall)
    return np.asarray(covariance / np.outer(lengths, lengths))
