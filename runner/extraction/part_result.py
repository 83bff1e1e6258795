"""From the legs of one part and method to numbers with intervals, in the shape that `result.json` has.

The temperature of a leg is the measured one; its uncertainty enters through how much the quantity changes from leg to
leg. An interval is value ± k·u with k of the stated coverage for a normal distribution: the budget's large
contributions come from calibration constants, whose standard uncertainties are taken as known (GUM G.6.6).
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.special import ndtri

from runner.arrays import FloatArray
from runner.extraction.curve import LegCurve, Quantity
from runner.extraction.gum import combine
from runner.extraction.resistance import Resistance

REFERENCE_DEGC = 25.0
NEAR_REFERENCE = 3.0  # K that 25 degC may lie outside the legs' temperatures


@dataclass(frozen=True, slots=True)
class Settings:
    """What extraction was asked: drops, which inductance a drop is counted from, coverage, guard band."""

    drops: tuple[float, ...] = (0.1, 0.2, 0.3)
    reference: str = "same temperature"
    coverage: float = 0.95
    guard_band: float = 0.2

    @property
    def factor(self) -> float:
        """Coverage factor of a normal distribution."""
        return float(ndtri(0.5 + self.coverage / 2))


@dataclass(frozen=True, slots=True)
class Knees:
    """Saturation currents of all legs: ``found[drop][leg]``, None where not reached; and L_0 of each leg."""

    initial: tuple[Quantity, ...]
    found: Mapping[float, tuple[Quantity | None, ...]]


def find_knees(
    legs: Sequence[LegCurve], settings: Settings, *, nominal: float, temperature_uncertainty: float
) -> Knees:
    """L_0 and Isat of every leg, temperature included in their uncertainty.

    Args:
        legs: from cold to hot.
        nominal: inductance of the data sheet [H], for that reference.
        temperature_uncertainty: of the measured temperature, common to all legs [K].
    """
    bare = tuple(leg.initial_inductance() for leg in legs)
    weights = reference_weights(legs, settings.reference)
    found: dict[float, tuple[Quantity | None, ...]] = {}
    for drop in settings.drops:
        knees = [
            _knee(leg, k, drop, settings.reference, nominal, bare, weights) for k, leg in enumerate(legs)
        ]
        found[drop] = _with_temperature(knees, legs, temperature_uncertainty)
    initial = tuple(q for q in _with_temperature(bare, legs, temperature_uncertainty) if q is not None)
    return Knees(initial, found)


def _knee(
    leg: LegCurve,
    k: int,
    drop: float,
    reference: str,
    nominal: float,
    initial: Sequence[Quantity],
    weights: FloatArray | None,
) -> Quantity | None:
    if reference == "same temperature":
        return leg.knee(drop)
    if reference == "nominal":
        return leg.knee(drop, Quantity(nominal, {}, {}))
    if weights is None:
        return None
    others = np.where(np.arange(len(initial)) == k, 0.0, weights)
    value = float(sum(w * q.value for w, q in zip(weights, initial, strict=True)))
    own = [w * u for w, q in zip(others, initial, strict=True) for u in q.own.values()]
    names = {name for q in initial for name in q.shared}
    shared = {
        n: float(sum(w * q.shared.get(n, 0.0) for w, q in zip(others, initial, strict=True))) for n in names
    }
    rest = Quantity(value, {"reference inductance": combine(own)}, shared)
    return leg.knee(drop, rest, share=float(weights[k]))


def reference_weights(legs: Sequence[LegCurve], reference: str) -> FloatArray | None:
    """Of each leg's L_0 [m] in the inductance at 25 degC; None where that is not asked for or was not measured."""
    at = np.array([leg.temperature_degC for leg in legs])
    if reference != "25 degC" or not (at[0] - NEAR_REFERENCE <= REFERENCE_DEGC <= at[-1] + NEAR_REFERENCE):
        return None
    return np.ones(1) if len(legs) == 1 else _line_weights(at, REFERENCE_DEGC)


def _line_weights(at: FloatArray, x: float) -> FloatArray:
    """Weights of the values at ``at`` in the straight line between the two neighbours of ``x``."""
    k = int(np.clip(np.searchsorted(at, x), 1, len(at) - 1))
    f = (x - at[k - 1]) / (at[k] - at[k - 1])
    weights = np.zeros(len(at))
    weights[k - 1], weights[k] = 1 - f, f
    return weights


def _with_temperature(
    quantities: Sequence[Quantity | None], legs: Sequence[LegCurve], uncertainty: float
) -> tuple[Quantity | None, ...]:
    """Adds what the uncertain temperature does, from the slope along the legs."""
    known = [k for k, q in enumerate(quantities) if q is not None]
    if len(known) < 2 or uncertainty == 0.0:
        return tuple(quantities)
    at = np.array([legs[k].temperature_degC for k in known])
    values = np.array([q.value for q in quantities if q is not None])
    slopes = dict(zip(known, np.gradient(values, at), strict=True))
    return tuple(
        None
        if q is None
        else Quantity(q.value, q.own, {**q.shared, "temperature": float(slopes[k]) * uncertainty})
        for k, q in enumerate(quantities)
    )


def interval(quantity: Quantity, factor: float) -> dict[str, float]:
    """Ends of the coverage interval."""
    half = factor * quantity.uncertainty
    return {"low": quantity.value - half, "high": quantity.value + half}


def method_result(
    legs: Sequence[LegCurve], knees: Knees, resistances: Sequence[Resistance], settings: Settings, kind: str
) -> dict[str, Any]:
    """The entry of one method in `result.json`."""
    factor = settings.factor
    rows = []
    for drop in settings.drops:
        for leg, knee in zip(legs, knees.found[drop], strict=True):
            row: dict[str, Any] = {
                "temperature_degC": leg.temperature_degC,
                "drop": drop,
                "reference": settings.reference,
            }
            if knee is None:
                row |= {"ampere": None, "low": leg.top, "high": None, "status": "not reached"}
            else:
                row |= {"ampere": knee.value, **interval(knee, factor), "status": "measured"}
            rows.append(row)
    return {
        "inductance_kind": kind,
        "initial_inductance": [
            {"temperature_degC": leg.temperature_degC, "henry": q.value, **interval(q, factor)}
            for leg, q in zip(legs, knees.initial, strict=True)
        ],
        "saturation_current": rows,
        "winding_resistance": [
            {
                "temperature_degC": r.temperature_degC,
                "ohm": r.ohm,
                "low": r.ohm - factor * r.uncertainty,
                "high": r.ohm + factor * r.uncertainty,
            }
            for r in resistances
        ],
        "budget": [
            {
                "temperature_degC": leg.temperature_degC,
                "drop": drop,
                "ampere": knee.value,
                "contributions": [
                    {"name": name, "standard_uncertainty": u} for name, u in knee.contributions()
                ],
            }
            for drop in settings.drops
            for leg, knee in zip(legs, knees.found[drop], strict=True)
            if knee is not None
        ],
    }
