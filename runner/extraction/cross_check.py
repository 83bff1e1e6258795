"""The two methods against each other: do they differ by more than their uncertainties?

They measure different things (differential and incremental inductance), which in a core without memory agree. A
disagreement is therefore a fact about the core or a fault of the bench, and it is said which faults would look so.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from runner.extraction.curve import LegCurve, Quantity
from runner.extraction.part_result import Knees, Settings

NEAR = 2.0  # K between two legs that count as the same temperature
LARGE = 0.02  # a difference beyond uncertainty but below this share is reported and not flagged
OWN_TRUTH = 0.002  # two methods are not expected to agree better than this share


@dataclass(frozen=True, slots=True)
class Comparison:
    """One quantity by both methods: relative difference pulse over bias, its expanded uncertainty, and the verdict."""

    temperature_degC: float
    what: str
    difference: float
    expanded: float

    @property
    def agrees(self) -> bool:
        return abs(self.difference) <= max(self.expanded, OWN_TRUTH)

    def as_row(self) -> dict[str, Any]:
        verdict = "agree" if self.agrees else "differ by more than their uncertainties explain"
        return {
            "temperature_degC": self.temperature_degC,
            "text": f"{self.what}: pulse {100 * self.difference:+.2f} % against bias, "
            f"expanded uncertainty of the difference {100 * self.expanded:.2f} %: they {verdict}.",
            "agrees": self.agrees,
        }


def compare(
    pulse: tuple[Sequence[LegCurve], Knees], bias: tuple[Sequence[LegCurve], Knees], settings: Settings
) -> list[Comparison]:
    """L_0 and the largest drop that both reached, at each temperature both have."""
    found = []
    for j, leg in enumerate(pulse[0]):
        at = leg.temperature_degC
        near = [k for k, other in enumerate(bias[0]) if abs(other.temperature_degC - at) <= NEAR]
        if not near:
            continue
        k = min(near, key=lambda k: abs(bias[0][k].temperature_degC - at))
        initial = _brought(bias[0], bias[1].initial, k, at)
        assert initial is not None
        pairs = [("L_0", pulse[1].initial[j], initial)]
        for drop in sorted(settings.drops, reverse=True):
            mine, other = pulse[1].found[drop][j], _brought(bias[0], bias[1].found[drop], k, at)
            # A knee at zero current (the part lies below a reference that is not its own) has no quotient.
            if mine is not None and other is not None and mine.value > 0 and other.value > 0:
                pairs.append((f"Isat at {100 * drop:g} % drop", mine, other))
                break
        found += [_difference(at, what, a, b, settings) for what, a, b in pairs]
    return found


def _brought(
    legs: Sequence[LegCurve], quantities: Sequence[Quantity | None], k: int, temperature_degC: float
) -> Quantity | None:
    """The quantity of leg ``k`` at a temperature near its own, by its slope along the legs; as it is where there is but
    one. A fraction of a kelvin matters: a ferrite's knee moves by some 0.3 %/K."""
    mine = quantities[k]
    known = [n for n, q in enumerate(quantities) if q is not None]
    if mine is None or len(known) < 2 or mine.value <= 0:
        return mine
    at = np.array([legs[n].temperature_degC for n in known])
    slopes = np.gradient(np.array([q.value for q in quantities if q is not None]), at)
    away = temperature_degC - legs[k].temperature_degC
    return mine.scaled(1.0 + float(slopes[known.index(k)]) * away / mine.value)


def verdict(comparisons: Sequence[Comparison]) -> str | None:
    """A sentence for the flags when the methods disagree enough to matter, None when they do not."""
    wide = [c for c in comparisons if not c.agrees and abs(c.difference) > LARGE]
    if not wide:
        return None
    worst = max(wide, key=lambda c: abs(c.difference))
    initial = [c for c in comparisons if c.what == "L_0"]
    shares = [c.difference for c in initial]
    same = (
        len(initial) > 1
        and not any(c.agrees for c in initial)
        and np.ptp(shares) < 0.3 * abs(float(np.mean(shares)))
    )
    cause = (
        "the same share at every temperature points to a scale: check the shunt's value and the channels' gains"
        if same
        else "a core with memory does that, and so does a scale that is wrong"
    )
    return (
        f"pulse and bias methods disagree beyond uncertainty: {worst.what} at {worst.temperature_degC:.0f} °C differs by "
        f"{100 * worst.difference:+.1f} % (expected within {100 * worst.expanded:.1f} %); {cause}."
    )


def _difference(at: float, what: str, a: Quantity, b: Quantity, settings: Settings) -> Comparison:
    ratio = a.value / b.value - 1
    # Temperature is common to both; everything else is another instrument.
    u2 = 0.0
    for quantity in (a, b):
        u = {**quantity.own, **{n: v for n, v in quantity.shared.items() if n != "temperature"}}
        u2 += sum(v * v for v in u.values()) / quantity.value**2
    return Comparison(at, what, ratio, settings.factor * float(np.sqrt(u2)))
