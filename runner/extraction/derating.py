"""What a designer takes from Isat(T): margin to the rated current, derating with a guard band, drift per kelvin."""

from collections.abc import Sequence
from typing import Any

import numpy as np

from runner.extraction.curve import LegCurve, Quantity
from runner.extraction.part_result import Knees, Settings, interval


def margins(
    legs: Sequence[LegCurve], knees: Knees, settings: Settings, *, rated: float
) -> list[dict[str, Any]]:
    """Isat over the rated current, less one, with its interval; ``rated`` [A]."""
    rows = []
    for drop in settings.drops:
        for leg, knee in zip(legs, knees.found[drop], strict=True):
            if knee is None:
                continue
            share = knee.scaled(1.0 / rated)
            ends = {name: end - 1 for name, end in interval(share, settings.factor).items()}
            rows.append(
                {"temperature_degC": leg.temperature_degC, "drop": drop, "fraction": share.value - 1, **ends}
            )
    return rows


def derating(legs: Sequence[LegCurve], knees: Knees, settings: Settings) -> list[dict[str, Any]]:
    """Largest advisable current at each temperature: the lower end of Isat's interval, less the guard band.

    Where a drop was not reached, the largest current seen stands for Isat: the part was good at least that far.
    """
    keep = 1.0 - settings.guard_band
    rows = []
    for drop in settings.drops:
        for leg, knee in zip(legs, knees.found[drop], strict=True):
            low = leg.top if knee is None else interval(knee, settings.factor)["low"]
            rows.append(
                {
                    "temperature_degC": leg.temperature_degC,
                    "drop": drop,
                    "ampere": keep * max(0.0, low),
                    "guard_band": settings.guard_band,
                }
            )
    return rows


def temperature_coefficients(
    legs: Sequence[LegCurve], knees: Knees, settings: Settings
) -> list[dict[str, float]]:
    """Relative change of Isat per kelvin: slope of log Isat on a straight line through the legs, at their mean.

    Calibration constants common to all legs move every leg by the same factor and drop out; the legs' own
    uncertainties stay, and so does what a straight line leaves over.
    """
    rows = []
    for drop in settings.drops:
        # A knee at zero current (the part lies below a reference that is not its own) has no logarithm.
        found = [
            (leg.temperature_degC, knee)
            for leg, knee in zip(legs, knees.found[drop], strict=True)
            if knee is not None and knee.value > 0
        ]
        if len(found) < 2:
            continue
        at = np.array([t for t, _ in found])
        values = np.log([knee.value for _, knee in found])
        own = np.array([_own(knee) / knee.value for _, knee in found])
        away = at - at.mean()
        weights = away / float(away @ away)
        slope = float(weights @ values)
        rest = values - values.mean() - slope * away
        scatter = float(rest @ rest) / (len(found) - 2) if len(found) > 2 else 0.0
        u = float(np.sqrt(np.sum((weights * own) ** 2) + scatter * float(weights @ weights)))
        half = settings.factor * u
        rows.append({"drop": drop, "fraction_per_kelvin": slope, "low": slope - half, "high": slope + half})
    return rows


def _own(quantity: Quantity) -> float:
    return float(np.sqrt(sum(u * u for u in quantity.own.values())))
