"""Small unknowns that all ramps of a leg share: delays, and where between two samples a pulse begins.

Each is one parameter of the fit with a normal prior, and a pair of columns that say what it does to the flux and to
the current of every row:

- *skew*: λ is read too early by it, so dλ = λ' per second.
- *shunt time*: one second more of the shunt's L/R takes e off the current, with e + τ e' = i' (from i + τ i' = reading,
  exact), and what that adds to ∫R i dt is too much. i' is (v − R i)/L of the curve itself: made from the reading, e
  would carry the very noise it is fitted to, and a longer time constant would seem better because it smooths more. So
  this effect depends on the curve; `ShuntLag` makes it, and its columns here are empty.
- *start* and *step*, one of each per sampling interval h: the voltage's jump and the shunt's inductive jump fall
  somewhere between two samples, at the same place in every capture that the trigger starts. The trapezoid rule gives
  half of the jump to either side; what that leaves is uniform within ±h/2, a constant in λ and a transient exp(−t/τ)
  in i.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from runner.arrays import FloatArray
from runner.extraction.ramp import Ramp

SHUNT = 1  # place of the shunt's parameter among the common ones
EXACT, UNKNOWN = 1e-6, 1e3  # priors' widths that the algebra can bear, in units of the delay scale


@dataclass(frozen=True, slots=True)
class CommonEffects:
    """c effects on n rows: ``names`` [c], priors' ``sigmas`` [c], ``flux`` and ``current`` [n, c], all scaled.

    With parameters z the flux of the rows is larger by flux·z and their current by current·z than what was read.
    """

    names: tuple[str, ...]
    sigmas: FloatArray
    flux: FloatArray
    current: FloatArray


@dataclass(frozen=True, slots=True)
class Scales:
    """Units of the fit: ``current`` [A], ``flux`` [Wb], ``delay`` [s]; ``resistance`` of the winding [ohm]."""

    current: float
    flux: float
    delay: float
    resistance: float

    @property
    def inductance(self) -> float:
        return self.flux / self.current


@dataclass(frozen=True, slots=True)
class ShuntLag:
    """Makes the shunt's effect for any curve: ``lags`` [m, m] of each ramp and its rows, ``induced`` v − R i [n] V,
    ``current`` [n] A and ``time`` [n] s (the τ that was undone).
    """

    lags: tuple[FloatArray, ...]
    members: tuple[slice, ...]
    induced: FloatArray
    current: FloatArray
    time: FloatArray
    scales: Scales

    def effect(self, inductance: FloatArray) -> tuple[FloatArray, FloatArray]:
        """What one more (scaled) second takes off the current, and what it adds to the flux: [n] each, scaled.

        ``inductance`` [n]: L_d of the curve at the rows, scaled.
        """
        rate = self.induced / (inductance * self.scales.inductance)
        lead = np.empty_like(rate)
        for lag, rows in zip(self.lags, self.members, strict=True):
            lead[rows] = lag @ rate[rows]
        # The charge is too large by ∫e dt = i − τ e, and with it ∫R i dt, which was taken off the flux.
        missing = self.scales.resistance * (self.current - self.time * lead)
        return lead * (self.scales.delay / self.scales.current), missing * (
            self.scales.delay / self.scales.flux
        )


def shunt_lag(ramps: Sequence[Ramp], members: tuple[slice, ...], scales: Scales) -> ShuntLag:
    """Of the ramps of a leg."""
    current = np.concatenate([ramp.current for ramp in ramps])
    voltage = np.concatenate([ramp.voltage for ramp in ramps])
    return ShuntLag(
        tuple(lag_matrix(ramp.edges, ramp.time, ramp.shunt_time) for ramp in ramps),
        members,
        voltage - scales.resistance * current,
        current,
        np.concatenate([np.full(len(ramp.current), ramp.shunt_time) for ramp in ramps]),
        scales,
    )


def no_effects(rows: int) -> CommonEffects:
    """Of rows that share nothing."""
    return CommonEffects((), np.empty(0), np.empty((rows, 0)), np.empty((rows, 0)))


def effects_of(ramps: Sequence[Ramp], scales: Scales, *, skew: float, shunt_time: float) -> CommonEffects:
    """All effects on the rows of ``ramps``, laid end to end; the shunt's columns are left empty.

    ``skew``, ``shunt_time``: standard uncertainties [s], infinite to have the skew found.
    """
    intervals = sorted({ramp.interval for ramp in ramps})
    names, sigmas = ["skew", "shunt time"], [skew, shunt_time]
    for interval in intervals:
        names += ["start", "step"]
        sigmas += [interval / np.sqrt(12.0)] * 2
    rows = sum(len(ramp.current) for ramp in ramps)
    flux, current = np.zeros((rows, len(names))), np.zeros((rows, len(names)))
    first = 0
    for ramp in ramps:
        here = slice(first, first + len(ramp.current))
        first = here.stop
        induced = ramp.voltage - scales.resistance * ramp.current
        flux[here, 0] = induced
        k = 2 + 2 * intervals.index(ramp.interval)
        flux[here, k] = ramp.start_voltage
        if ramp.shunt_time > 0:
            current[here, k + 1] = ramp.start_rate * np.exp(-ramp.time / ramp.shunt_time)
    bounded = np.clip(np.array(sigmas) / scales.delay, EXACT, UNKNOWN)
    return CommonEffects(
        tuple(names), bounded, flux * (scales.delay / scales.flux), current * (scales.delay / scales.current)
    )


def lag_matrix(edges: FloatArray, time: FloatArray, time_constant: float) -> FloatArray:
    """Weights [m, m] by which values of the bins become what a first-order lag makes of them at the bins' middles.

    The values hold over their bins, the first one from the start of the pulse (t = 0) on, nothing before.
    """
    m = len(time)
    if time_constant < 1e-3 * float(np.diff(edges).min()):
        return np.eye(m)
    begin, end = edges[:-1].copy(), edges[1:]
    begin[0] = min(0.0, begin[0])
    upper = np.minimum(end[None, :], time[:, None])
    lower = np.minimum(begin[None, :], time[:, None])
    weights = np.exp((upper - time[:, None]) / time_constant) - np.exp(
        (lower - time[:, None]) / time_constant
    )
    return np.asarray(np.tril(weights))
