"""The same curve as the core sees it: B(H), permeability against bias, B at the knee."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from runner.arrays import FloatArray
from runner.extraction.curve import LegCurve, Quantity

MU_0 = 4e-7 * np.pi  # H/m; the measured value differs by less than 1e-9


@dataclass(frozen=True, slots=True)
class CoreCurve:
    """``field`` H [n] A/m, ``flux_density`` B [n] T, ``permeability`` [n]: relative, effective, differential."""

    field: FloatArray
    flux_density: FloatArray
    permeability: FloatArray


def core_curve(leg: LegCurve, *, turns: int, area: float, path: float) -> CoreCurve:
    """B(H) of a core with ``turns``, effective ``area`` [m²] and ``path`` [m].

    H = N·I/l, B = λ/(N·A), μ_eff = L_d·l/(μ0·N²·A): mean values over the core, its gap smeared along the path
    (effective parameters in the sense of IEC 60205). λ counts from the state in which the pulse starts: B is the
    change from remanence.
    """
    return CoreCurve(
        turns * leg.current / path,
        leg.flux / (turns * area),
        leg.inductance * path / (MU_0 * turns**2 * area),
    )


def at_knees(
    legs: Sequence[LegCurve],
    found: Mapping[float, Sequence[Quantity | None]],
    *,
    turns: int,
    area: float,
    path: float,
) -> list[dict[str, Any]]:
    """B, H and permeability at each saturation current that was reached."""
    rows = []
    for drop, knees in found.items():
        for leg, knee in zip(legs, knees, strict=True):
            if knee is None:
                continue
            curve = core_curve(leg, turns=turns, area=area, path=path)
            rows.append(
                {
                    "temperature_degC": leg.temperature_degC,
                    "drop": drop,
                    "tesla": float(np.interp(knee.value, leg.current, curve.flux_density)),
                    "ampere_per_metre": turns * knee.value / path,
                    "relative_permeability": float(np.interp(knee.value, leg.current, curve.permeability)),
                }
            )
    return rows
