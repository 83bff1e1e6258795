"""The way up and the way down of the bias method: kept apart, and by how much they differ.

In a core with memory the incremental inductance depends on where the current comes from. Curves and saturation currents
are those of the way up; the way down is a curve of its own, and the difference says whether the core remembers.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from runner.arrays import FloatArray
from runner.extraction.bias import Readings
from runner.extraction.curve import LegCurve
from runner.extraction.gum import variances

POINTS = 41  # currents at which the branches are compared
SURE = 4.0  # standard uncertainties: the largest of many differences is looked at
MATTERS = 0.002  # of L_0: a smaller difference is nobody's concern


def split(readings: Readings) -> tuple[Readings, Readings | None]:
    """The way up to the largest current, and the way down from it; None where the series ended at the top.

    The reading at the top belongs to both.
    """
    if not readings.current.size:
        return readings, None
    top = int(np.argmax(readings.current))
    up = readings.part(slice(0, top + 1))
    return up, readings.part(slice(top, None)) if top < len(readings.current) - 1 else None


@dataclass(frozen=True, slots=True)
class Branches:
    """Both branches at one temperature: ``current`` [n] A, ``up`` and ``down`` [n] H, standard ``uncertainty`` [n] of the
    difference, which is the noise of both: constants of the bench act on either alike."""

    temperature_degC: float
    current: FloatArray
    up: FloatArray
    down: FloatArray
    uncertainty: FloatArray

    @property
    def _worst(self) -> int:
        return int(np.argmax(np.abs(self.down - self.up)))

    @property
    def difference(self) -> float:
        """The largest, down less up, as a share of L_0."""
        return float((self.down - self.up)[self._worst] / self.up[0])

    @property
    def difference_uncertainty(self) -> float:
        return float(self.uncertainty[self._worst] / self.up[0])

    @property
    def at(self) -> float:
        """The current of the largest difference [A]."""
        return float(self.current[self._worst])

    @property
    def differ(self) -> bool:
        return abs(self.difference) > max(SURE * self.difference_uncertainty, MATTERS)

    def as_row(self, factor: float) -> dict[str, Any]:
        """For `result.json`; ``factor``: coverage factor."""
        half = factor * self.difference_uncertainty
        return {
            "temperature_degC": self.temperature_degC,
            "largest_difference_share": self.difference,
            "low": self.difference - half,
            "high": self.difference + half,
            "ampere": self.at,
            "branches_differ": self.differ,
            "curves": {
                "ampere": self.current.tolist(),
                "up_henry": self.up.tolist(),
                "down_henry": self.down.tolist(),
            },
        }


def compare_branches(up: LegCurve, down: LegCurve) -> Branches:
    """Over the currents from zero to the largest that both have."""
    current = np.linspace(0.0, min(up.top, down.top), POINTS)
    values, variance = [], np.zeros(POINTS)
    for leg in (up, down):
        values.append(np.interp(current, leg.current, leg.inductance))
        variance += np.interp(current, leg.current, variances(leg.inductance_slopes, leg.covariance))
    return Branches(up.temperature_degC, current, values[0], values[1], np.sqrt(variance))


def say_difference(branches: Sequence[Branches]) -> str | None:
    """A sentence for the flags where the branches differ, None where they do not."""
    apart = [b for b in branches if b.differ]
    if not apart:
        return None
    worst = max(apart, key=lambda b: abs(b.difference))
    side = "above" if worst.difference > 0 else "below"
    return (
        f"bias at {worst.temperature_degC:.0f} °C: on the way down the inductance lies "
        f"{100 * abs(worst.difference):.2g} % of L_0 {side} the way up, near {worst.at:.3g} A: the core remembers where "
        "it comes from. Curves and numbers are those of the way up."
    )
