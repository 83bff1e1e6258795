"""One part by one method, all legs: what follows from its curves, and what is doubtful about them."""

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from runner.arrays import FloatArray
from runner.extraction.bias_branches import Branches, compare_branches, say_difference
from runner.extraction.bias_heat import Heat
from runner.extraction.calibration import Calibration
from runner.extraction.core_view import at_knees
from runner.extraction.curve import LegCurve
from runner.extraction.derating import derating, margins, temperature_coefficients
from runner.extraction.drift import at_one_temperature, brought_by
from runner.extraction.flags import Doubt
from runner.extraction.part_result import Knees, Settings, find_knees, method_result, reference_weights
from runner.extraction.resistance import Resistance
from runner.extraction.shape_test import judge_shape
from runner.extraction.surface import Surface, left_out_error

KINDS = {"pulse": "differential", "bias": "incremental"}
LONG_LAG = 0.1  # of the longest pulse, that the shunt's L/R may be (common practice, no source)
MUCH_NOISE = 1.5  # residuals this many times the noise that the captures themselves show


@dataclass(frozen=True, slots=True)
class PartFacts:
    """What the plan says about a part; ``core`` has ``turns``, ``area`` and ``path``, or is None."""

    label: str
    inductance: float
    rated_current: float
    resistance_20: float
    core: Any = None


@dataclass(slots=True)
class MethodLegs:
    """Curves from cold to hot, and what belongs to each: resistance, the currents of its points [A]; by the bias method
    also the way down, and what the winding tells of its heat.

    ``surface`` and ``knees`` are there once `finish_method` has been through it.
    """

    name: str
    legs: list[LegCurve] = field(default_factory=list)
    resistances: list[Resistance] = field(default_factory=list)
    peaks: list[FloatArray] = field(default_factory=list)
    down: list[LegCurve | None] = field(default_factory=list)
    heats: list[Heat] = field(default_factory=list)
    knees: Knees | None = None
    surface: Surface | None = None


def finish_method(
    method: MethodLegs, facts: PartFacts, settings: Settings, calibration: Calibration, doubts: list[Doubt]
) -> dict[str, Any]:
    """Brings the legs to their temperatures, finds knees and surface, adds doubts, and gives the method's entry."""
    kind = KINDS[method.name]
    method.legs = at_one_temperature(method.legs, kind=kind)
    method.surface = Surface(method.legs, kind=kind)
    method.knees = find_knees(
        method.legs,
        settings,
        nominal=facts.inductance,
        temperature_uncertainty=calibration.body_offset.uncertainty,
    )
    branches = _branches(method)
    doubts += _doubts(method.name, method.legs, method.knees, method.resistances, settings)
    entry = method_result(method.legs, method.knees, method.resistances, settings, kind)
    entry["margin"] = margins(method.legs, method.knees, settings, rated=facts.rated_current)
    entry["derating"] = derating(method.legs, method.knees, settings)
    entry["temperature_coefficient"] = temperature_coefficients(method.legs, method.knees, settings)
    if (left_out := left_out_error(method.surface)) is not None:
        entry["left_out_error"] = [{"fraction": left_out["rms"], "largest": left_out["largest"]}]
    if branches:
        entry["branches"] = [b.as_row(settings.factor) for b in branches]
        if (said := say_difference(branches)) is not None:
            doubts.append(Doubt(-1, "branches_differ", said))
    if any(np.any(heat.rise > 0) for heat in method.heats):
        entry["self_heating"] = [
            _heat_row(leg, heat, settings.factor) for leg, heat in zip(method.legs, method.heats, strict=True)
        ]
    if facts.core is not None and method.name == "pulse":
        entry["core_view"] = at_knees(
            method.legs,
            method.knees.found,
            turns=facts.core.turns,
            area=facts.core.area,
            path=facts.core.path,
        )
    return entry


def _lag_doubts(at: str, leg: LegCurve) -> list[Doubt]:
    """A shunt whose inductance shapes the whole reading."""
    ramps = getattr(leg.fit.data, "ramps", ())
    if not ramps:
        return []
    time, longest = max(ramp.shunt_time for ramp in ramps), max(ramp.width for ramp in ramps)
    if time <= LONG_LAG * longest:
        return []
    return [
        Doubt(-1, "shunt_inductance", f"{at}: the shunt's L/R of {1e6 * time:.2g} µs is {100 * time / longest:.0f} % of the "
              "longest pulse, and the current hangs on how well it is known; take a shunt of less inductance or a "
              "lower rail.")
    ]  # fmt: skip


def _branches(method: MethodLegs) -> list[Branches]:
    """The way down against the way up, both brought to the leg's temperature, where there is a way down."""
    assert method.surface is not None
    found = []
    for up, down in zip(method.legs, method.down, strict=False):
        if down is not None:
            there = down if len(method.legs) < 2 else brought_by(method.surface, down)
            found.append(compare_branches(up, there))
    return found


def _heat_row(leg: LegCurve, heat: Heat, factor: float) -> dict[str, Any]:
    half = factor * heat.uncertainty
    return {
        "temperature_degC": leg.temperature_degC,
        "winding_over_sensor_kelvin_per_watt": heat.kelvin_per_watt,
        "low": heat.kelvin_per_watt - half,
        "high": heat.kelvin_per_watt + half,
        "largest_rise_of_the_part_kelvin": float(heat.rise.max()),
    }


def _doubts(
    name: str, legs: Sequence[LegCurve], knees: Knees, resistances: Sequence[Resistance], settings: Settings
) -> list[Doubt]:
    found = []
    is_unknown = settings.reference == "25 degC" and reference_weights(legs, settings.reference) is None
    if is_unknown:
        found.append(
            Doubt(-1, "no_reference", f"{name}: 25 °C lies outside the temperatures that were measured; no drop from "
                  "the inductance there can be told; add a leg near 25 °C or ask for another reference.")
        )  # fmt: skip
    for k, (leg, resistance) in enumerate(zip(legs, resistances, strict=True)):
        at = f"{name} at {leg.temperature_degC:.0f} °C"
        missed = [drop for drop in settings.drops if knees.found[drop][k] is None]
        if missed and not is_unknown:
            drops = ", ".join(f"{100 * drop:g} %" for drop in missed)
            found.append(
                Doubt(-1, "not_reached", f"{at}: the inductance did not fall by {drops} up to {leg.top:.3g} A; "
                      f"{'widen the pulses' if name == 'pulse' else 'raise the bias'} if the limits allow.")
            )  # fmt: skip
        below = [d for d in settings.drops if (q := knees.found[d][k]) is not None and q.value == 0.0]
        if below:
            drops = ", ".join(f"{100 * drop:g} %" for drop in below)
            found.append(
                Doubt(-1, "below_reference", f"{at}: even without current the inductance lies {drops} below its reference "
                      f"({settings.reference}); the saturation current is 0 A by that count.")
            )  # fmt: skip
        found += _lag_doubts(at, leg)
        shape = judge_shape(leg)
        if not shape.has_one_knee:
            places = " and ".join(f"{knee:.3g} A" for knee in shape.knees)
            found.append(
                Doubt(-1, "two_plateaus", f"{at}: the inductance falls in steps, near {places} (a stepped gap does that); "
                      "one saturation current does not describe it.")
            )  # fmt: skip
        if not shape.is_falling:
            found.append(
                Doubt(-1, "inductance_rises", f"{at}: the inductance rises by {100 * shape.rise:.1f} % up to "
                      f"{shape.rise_at:.3g} A before it falls; a core with memory does that. Drops count from zero current.")
            )  # fmt: skip
        if name == "pulse" and not resistance.is_measured:
            found.append(
                Doubt(-1, "resistance_assumed", f"{at}: winding resistance from the plan and the copper law.")
            )
        disagreement = float(np.sqrt(leg.fit.misfit))
        if name == "pulse" and disagreement > MUCH_NOISE:
            found.append(
                Doubt(-1, "misfit", f"{at}: widths disagree {disagreement:.1f} times more than their noise; the "
                      "intervals were widened. Ringing, pickup or a part that warms between pulses would do that.")
            )  # fmt: skip
        away = leg.fit.data.temperatures - leg.temperature_degC
        if float(np.ptp(away)) > 1.0:
            found.append(
                Doubt(-1, "part_warmed", f"{at}: the part's temperature moved by {float(np.ptp(away)):.1f} K while it was "
                      "measured; each point was brought to the mean.")
            )  # fmt: skip
    return found
