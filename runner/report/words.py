"""Sentences: the headline of each part, and the plan as a person would tell it.

The plan is told from its own text, value by value as its author wrote them, with units spelled the way they
are printed (``10 uH`` becomes ``10 µH``). Nothing is computed here that the result does not hold.
"""

import math
import re
from collections.abc import Iterator, Mapping
from typing import Any

import yaml

from runner.report.digits import (
    NOTHING,
    celsius,
    fixed,
    interval_text,
    percent,
    round_uncertainty,
    scale_for,
    short,
    signed_percent,
)
from runner.report.facts import INDUCTANCE, Facts, Knee, MethodFacts, PartFacts

USUAL_DROP = 0.30  # the drop most data sheets state Isat for (common practice)

_UNIT_SPELLINGS = (
    (re.compile(r"(?<=\d)\s*degC\b"), " °C"),
    (re.compile(r"\bdegC\b"), "°C"),
    (re.compile(r"(?<=\d) ?u(?=[a-zA-Z])"), " µ"),
    (re.compile(r"(?<![a-zA-Z])(µ|m|k|M)?ohm\b"), r"\1Ω"),
    (re.compile(r"\^2\b"), "²"),
    (re.compile(r"\^3\b"), "³"),
    (re.compile(r"(?<![\w.])-(?=\d)"), "−"),
)

_BEFORE_UNIT = re.compile(
    r"(?<=\d) (?=(?:[%°µΩ]|[numkMG]?[AVHFsWJK]\b|[umkM]?ohm|[umk]?m\b|min\b|h\b|[mkM]?Ω|k?Hz))"
)


def headline_drop(method: MethodFacts) -> float | None:
    """The drop the headline speaks of: 30 % if asked for, else the largest reached, else the largest."""
    if USUAL_DROP in method.drops:
        return USUAL_DROP
    reached = [drop for drop in method.drops if any(knee.is_reached for knee in method.knees_at(drop))]
    return max(reached or method.drops, default=None)


def headline(facts: Facts, part: PartFacts) -> str:
    """One sentence with the answer for a part: where its saturation current is lowest, and how far from the
    rating.
    """
    method = next((m for m in part.methods if m.knees), None)
    drop = headline_drop(method) if method else None
    if method is None or drop is None:
        return f"{part.label}: no saturation current was extracted."
    knees = method.knees_at(drop)
    reached = [knee for knee in knees if knee.is_reached]
    where = f"{percent(drop)} drop of the {INDUCTANCE[method.name]}"
    if not reached:
        seen = [knee for knee in knees if math.isfinite(knee.estimate.low)]
        if not seen:
            return f"{part.label}: a {where} was not reached at any temperature."
        lowest = min(seen, key=lambda knee: knee.estimate.low)
        return (
            f"{part.label}: a {where} was not reached at any temperature; the largest current seen was at least "
            f"{short(lowest.estimate.low, 'A')}."
        )
    worst = min(reached, key=lambda knee: knee.estimate.value)
    missed = [knee for knee in knees if not knee.is_reached]
    # Where the current did not get as far as the lowest knee, the knee may lie lower still.
    of_which = (
        " of where it was reached" if any(not m.estimate.low >= worst.estimate.value for m in missed) else ""
    )
    text = (
        f"{part.label}: the saturation current ({where}, {counted_from(worst.reference)}) is lowest{of_which} at "
        f"{celsius(worst.temperature_degC)}: {_with_interval(worst, facts.coverage)}"
    )
    text += _against_rating(worst, part.rated_current)
    if missed:
        text += f" It was not reached at {_listed([celsius(knee.temperature_degC, 0) for knee in missed])}."
    return text


def counted_from(reference: str) -> str:
    """What a drop is counted from, in words."""
    known = {
        "same temperature": "counted from the initial value at the same temperature",
        "nominal": "counted from the nominal value",
    }
    return known.get(reference, f"counted from the initial value at {printed(reference)}")


def short_margin(knee: Knee, rated_current: float) -> str:
    """Isat over rated current, less one, to one digit of its uncertainty; a bound where it was not reached.

    Where the interval holds zero, the sign is not certain, and the half-width stands beside it.
    """
    low, high = knee.estimate.low / rated_current - 1, knee.estimate.high / rated_current - 1
    if not knee.is_reached:
        return f"> {signed_percent(low, 0)}" if math.isfinite(low) else NOTHING
    margin = knee.estimate.value / rated_current - 1
    half_width = 100 * max(high - margin, margin - low)
    places = round_uncertainty(half_width)[1] if half_width > 0 else 2
    if low < 0 < high:
        return f"{signed_percent(margin, places)[:-2]} ± {fixed(half_width, places)} %"
    return signed_percent(margin, places - 1)


def printed(value: object) -> str:
    """A plan's value the way it is printed: ``-40 degC`` as ``−40 °C``, ``52 mm^2`` as ``52 mm²``."""
    text = str(value)
    if isinstance(value, bool):
        return "yes" if value else "no"
    for pattern, spelling in _UNIT_SPELLINGS:
        text = pattern.sub(spelling, text)
    return text


def hold_together(text: str) -> str:
    """Text in which no line ends between a number and its unit."""
    return _BEFORE_UNIT.sub("\N{NO-BREAK SPACE}", text)


def read_plan(data: bytes) -> Mapping[str, Any]:
    """The plan's (or captures file's) text as a mapping; empty where it is not YAML: it is still shown in
    full.
    """
    try:
        loaded = yaml.safe_load(data)
    except yaml.YAMLError:
        return {}
    return loaded if isinstance(loaded, dict) else {}


def plan_in_words(plan: Mapping[str, Any]) -> Iterator[tuple[str, str]]:
    """(what, how) pairs for the section on what was tested."""
    parts = plan.get("parts") or plan.get("part") or []
    for part in parts if isinstance(parts, list) else [parts]:
        if isinstance(part, Mapping):
            yield "Part", _part(part)
    temperatures = plan.get("temperatures")
    if isinstance(temperatures, Mapping):
        at = temperatures.get("at") or temperatures.get("at_degC") or []
        yield "Temperatures", _listed([printed(t) for t in at])
        soak = temperatures.get("soak")
        if isinstance(soak, Mapping):
            yield "Soak at each temperature", _told(soak)
    pulse = plan.get("pulse")
    if isinstance(pulse, Mapping):
        yield "Pulse method", _method(pulse)
    bias = plan.get("bias")
    if isinstance(bias, Mapping):
        yield "Bias method", _method(bias)
    remanence = plan.get("remanence")
    if isinstance(remanence, Mapping):
        yield "Remanence study", _told(remanence)
    if isinstance(plan.get("captures"), list):
        yield "Captures", f"{len(plan['captures'])} taken by hand"
        for key in ("shunt", "skew"):
            if key in plan:
                yield key.capitalize(), _told(plan[key])
    if isinstance(plan.get("limits"), Mapping):
        yield "Limits in software", _told(plan["limits"])
    if isinstance(plan.get("extract"), Mapping):
        yield "Asked for", _told(plan["extract"])


_WORDS = {
    "from": "from", "rated_current": "rated current", "body": "body of the part", "pulse_energy": "energy of a pulse",
    "stop_at": "climb ends at", "give_up": "given up after", "both_ways": "up and down again", "bank_energy": "bank energy",
    "mean_power": "mean power", "within": "within", "guard_band": "guard band", "series_inductance": "series inductance",
}  # fmt: skip


def _part(part: Mapping[str, Any]) -> str:
    text = str(part.get("label", ""))
    told = []
    if "inductance" in part:
        told.append(f"{printed(part['inductance'])} nominal")
    if "rated_current" in part:
        told.append(f"rated {printed(part['rated_current'])}")
    if "resistance" in part:
        told.append(f"{printed(part['resistance'])} at 20 °C")
    core = part.get("core")
    if isinstance(core, Mapping):
        told.append("core: " + _told(core))
    for key in part.keys() - {"label", "inductance", "rated_current", "resistance", "core"}:
        told.append(f"{_WORDS.get(key, key.replace('_', ' '))} {_told(part[key])}")
    return f"{text}: {'; '.join(told)}" if told else text


def _method(section: Mapping[str, Any]) -> str:
    return "; ".join(_setting(key, value) for key, value in section.items())


def _setting(key: str, value: object) -> str:
    name = _WORDS.get(key, key.replace("_", " "))
    if key == "both_ways":
        return "current up and down again" if value else "current upwards only"
    if isinstance(value, Mapping) and "seek" in value:
        return f"{name} sought at the knee: {_told({k: v for k, v in value.items() if k != 'seek'})}"
    if isinstance(value, Mapping) and {"from", "to", "count"} <= value.keys():
        text = f"{name} at {value['count']} values from {printed(value['from'])} to {printed(value['to'])}"
        return text + (", up and down again" if value.get("both_ways") else "")
    if key == "conditioning":
        return f"{value} conditioning pulses before each point, not recorded"
    if key == "repeats":
        return f"{value} repeats"
    return f"{name} {_told(value)}"


def _told(value: object, key: str = "") -> str:
    if isinstance(value, Mapping):
        return ", ".join(
            f"{_WORDS.get(str(k), str(k).replace('_', ' '))} {_told(v, str(k))}" for k, v in value.items()
        )
    if isinstance(value, list):
        if key == "chamber" and len(value) == 2:
            return f"{printed(value[0])} to {printed(value[1])}"
        if len(value) > 12:
            return f"{len(value)} values from {printed(value[0])} to {printed(value[-1])}"
        return ", ".join(printed(v) for v in value)
    return printed(value)


def _with_interval(knee: Knee, coverage: float) -> str:
    scale = scale_for([knee.estimate.value], "A")
    text = interval_text(knee.estimate.value, knee.estimate.low, knee.estimate.high, factor=scale.factor)
    return f"{text.value} {scale.unit} ({percent(coverage)} interval {text.low} {scale.unit} to {text.high} {scale.unit})"


def _against_rating(knee: Knee, rated_current: float) -> str:
    if not (math.isfinite(rated_current) and rated_current > 0):
        return "."
    rated = short(rated_current, "A")
    if knee.estimate.low > rated_current or knee.estimate.high < rated_current:
        side = "above" if knee.estimate.value > rated_current else "below"
        fraction = abs(knee.estimate.value / rated_current - 1)
        away = percent(round(fraction, 2 if fraction >= 0.05 else 3))
        return f", {away} {side} the rated {rated}."
    return f", which cannot be told apart from the rated {rated}."


def _listed(items: list[str]) -> str:
    return items[0] if len(items) == 1 else ", ".join(items[:-1]) + " and " + items[-1] if items else ""
