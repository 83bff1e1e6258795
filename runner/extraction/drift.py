"""A leg's points were taken at slightly different temperatures; here they are all brought to the leg's own.

The legs themselves say how the curve moves with temperature, so a first pass over all legs gives the correction of
each row: at the row's flux for the pulse method (its current moves), at its current for the bias method (its
inductance moves). Where that is more than the rows' noise the curve is fitted again: rows of different temperatures may
have been taken for another law. Where it is less, the parameters move linearly with the rows.
"""

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from runner.arrays import FloatArray
from runner.extraction.bias import ReadingData
from runner.extraction.curve import LegCurve
from runner.extraction.curve_data import CurveData
from runner.extraction.surface import Surface

WORTH = 0.01  # K: smaller departures are left alone
SEEN = 4.0  # change of the residuals' sum of squares, in units of the noise, that a fit would see
ALIKE = 1.3  # misfit up to which the laws found without a correction are worth a try with it
FAR = 2.0  # K within one leg
SLACK = 0.1  # of the correction: how well a few legs tell how the curve moves with temperature (seen on simulated parts)
HALF_STEP = 3.0  # K for the slope in temperature


def at_one_temperature(legs: Sequence[LegCurve], *, kind: str) -> list[LegCurve]:
    """The legs with every row brought to its leg's temperature; unchanged where there is one leg only."""
    brought = list(legs)
    if len(legs) < 2:
        return brought
    far = max(float(np.ptp(leg.fit.data.temperatures)) for leg in legs)
    # Legs far from one temperature do not quite say how the curve moves with it: those once brought say it better.
    for _ in range(1 if far < FAR else 2):
        surface = Surface(brought, kind=kind)
        brought = [brought_by(surface, leg) for leg in legs]
    return brought


def brought_by(surface: Surface, leg: LegCurve) -> LegCurve:
    """A leg with its rows brought to its temperature, from what ``surface`` says about the part in temperature.

    How the curve moves is known only so well, and so is how warm direct current made the part (`bias_heat.py`); what either
    leaves open becomes a cause of its own.
    """
    away = leg.fit.data.temperatures - leg.temperature_degC
    unsure = getattr(leg.fit.data, "heat_uncertainty", np.zeros(1))
    if not np.any(np.abs(away) > WORTH) and not np.any(unsure > WORTH):
        return leg
    slopes, fit = _row_slopes(leg, surface), leg.fit
    move = slopes * away
    is_seen = float(np.sum(fit.data.noise(fit.inductance_at_rows).whiten(move) ** 2)) > SEEN
    if is_seen and leg.again is not None:
        leg = leg.again(fit.data.moved(move), fit if fit.misfit < ALIKE else None)
    else:
        z = fit.z - fit.gain @ move
        leg = leg.with_fit(replace(fit, z=z, shape=fit.model.shape(z[: fit.model.parameters])))
    if is_seen:
        leg = leg.with_cause("drift", (leg.fit.gain @ (SLACK * move))[: leg.fit.model.parameters])
    if np.any(unsure > WORTH):
        leg = leg.with_cause("self-heating", (leg.fit.gain @ (slopes * unsure))[: leg.fit.model.parameters])
    return leg


def _row_slopes(leg: LegCurve, surface: Surface) -> FloatArray:
    """Change of each row per kelvin [n], in the data's scale."""
    low, high = surface.temperature_degC[0], surface.temperature_degC[-1]
    cold = max(low, leg.temperature_degC - HALF_STEP)
    hot = min(high, leg.temperature_degC + HALF_STEP)
    data = leg.fit.data
    current = data.current * leg.scale.current  # type: ignore[attr-defined]
    ask = surface.flux_linkage if isinstance(data, CurveData) else surface
    top = min(surface.top(cold), surface.top(hot))
    grid = np.linspace(0.0, top, 200)
    slope = (ask(grid, hot) - ask(grid, cold)) / (hot - cold)
    per_kelvin = np.interp(current, grid, slope)
    if isinstance(data, ReadingData):
        return np.asarray(per_kelvin / leg.scale.inductance)
    return np.asarray(-per_kelvin / leg.scale.flux / leg.fit.inductance_at_rows)
