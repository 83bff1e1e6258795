"""The truth about a bench's parts for accuracy studies. No instrument tells it; it comes from the closed forms alone."""

from collections.abc import Sequence
from typing import Any

import numpy as np

from mock_instruments.flux import Branch, copper_resistance, saturation_current
from mock_instruments.spec import PartSpec, WorldSpec

TEMPERATURES_DEGC = (-40.0, 0.0, 25.0, 60.0, 85.0, 105.0, 125.0)
DROPS = (0.10, 0.20, 0.30)


def truth(
    spec: WorldSpec, temperatures_degC: Sequence[float] = TEMPERATURES_DEGC, drops: Sequence[float] = DROPS
) -> dict[str, Any]:
    """True initial inductance [H], saturation currents [A] and winding resistance [ohm] of every part.

    ``drops``: fractions by which the *differential* inductance has fallen from its value at zero current at
    the same temperature. A part that remembers is described as repeated large pulses leave it;
    ``first_shot`` adds what a fresh one shows on its first pulse and ``reversed`` the first pulse against
    what it remembers. None: the law never falls so far.
    """
    return {
        "reference": "same temperature",
        "inductance_kind": "differential",
        "parts": {
            str(channel): {
                "label": part.label,
                "law": part.law.law,
                "points": [_point(part, temperature, drops) for temperature in temperatures_degC],
            }
            for channel, part in sorted(spec.parts.items())
        },
    }


def _point(part: PartSpec, temperature_degC: float, drops: Sequence[float]) -> dict[str, Any]:
    curve = part.law.at(temperature_degC)
    point = {
        "temperature_degC": temperature_degC,
        "resistance": copper_resistance(part.resistance, temperature_degC),
        **_branch(curve.conditioned(), drops),
    }
    if curve.memory is not None:
        point["first_shot"] = _branch(curve.growing(0.0), drops)
        point["reversed"] = _branch(curve.growing(-curve.memory.limit), drops)
    return point


def _branch(branch: Branch, drops: Sequence[float]) -> dict[str, Any]:
    found = [saturation_current(branch, drop) for drop in drops]
    return {
        "initial_inductance": float(branch.slope(np.asarray(0.0))),
        "saturation_current": [
            {"drop": drop, "ampere": None if np.isnan(ampere) else ampere}
            for drop, ampere in zip(drops, found, strict=True)
        ],
    }
