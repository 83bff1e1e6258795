"""Does a part remember? First shots against conditioned shots, one polarity against the other, with an offset field or none.

A series is a core brought into a known state and a number of equal pulses on it. Its first shot and the later half of its
shots, by then all alike, give a curve i = g(λ) each; a core that remembers starts the later ones from a remanent flux and
has less of it left to go, so its knee comes at less current. What is told is the difference of the two knees: constants of
the bench act on both alike and leave it, offsets and noise of single captures do not, and how far the conditioned shots
differ among themselves is what any single shot may differ by.

All drops are counted from the initial inductance of the conditioned part without an offset field, in the same polarity at
the same temperature. Of a first shot on a core that remembers the other polarity the own initial inductance is that of a
core being turned round, and no reference for anything. Pure; currents are in the direction of the pulses.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from runner.extraction.curve import LegCurve, Quantity
from runner.extraction.gum import combine, coverage_factor, effective_degrees_of_freedom
from runner.extraction.part_result import Settings
from runner.extraction.ramp import Ramp

USUAL_DROP = 0.30  # the drop that sentences speak of, where it was asked for and reached
WINDOW = 0.06  # of the flux linkage at the knee, to either side, in which shots are compared
FEWEST_BINS = 3
WAYS = {1: "forward", -1: "reversed"}


@dataclass(frozen=True, slots=True)
class Series:
    """One series at one temperature: ``sign`` of its pulses, ``ampere_turns`` of the offset field [A].

    ``first``, ``conditioned``: their curves; ``shots``: ramps of the single conditioned shots. ``is_prepared`` is False
    where the pulses before the first shot were like it, so that it tells nothing.
    """

    temperature_degC: float
    sign: int
    ampere_turns: float
    first: LegCurve
    conditioned: LegCurve
    shots: tuple[Ramp, ...]
    resistance: float
    is_prepared: bool = True

    @property
    def way(self) -> str:
        return WAYS[self.sign]

    def scatter(self, knee: float) -> float:
        """Standard deviation of one shot's current at the flux linkage of a knee [A]; 0 where there are no two shots."""
        at = float(np.interp(knee, self.conditioned.current, self.conditioned.flux))
        found = []
        for ramp in self.shots:
            flux = ramp.flux(self.resistance)
            near = np.abs(flux - at) <= WINDOW * at
            if int(near.sum()) >= FEWEST_BINS:
                found.append(float(np.polyval(np.polyfit(flux[near] - at, ramp.current[near], 1), 0.0)))
        return float(np.std(found, ddof=1)) if len(found) >= 2 else 0.0


@dataclass(frozen=True, slots=True)
class Knee:
    """A knee of the conditioned or the first shot [A]; ``scatter`` of the mean behind it, with its degrees of freedom."""

    quantity: Quantity
    scatter: float
    degrees: float


@dataclass(frozen=True, slots=True)
class Difference:
    """A difference of two knees [A] with its standard uncertainty and degrees of freedom."""

    value: float
    uncertainty: float
    degrees: float = float("inf")

    def half_width(self, coverage: float) -> float:
        """Half of the interval with this coverage [A]; Student's t for the degrees of freedom."""
        return coverage_factor(coverage, self.degrees) * self.uncertainty

    def is_seen(self, coverage: float) -> bool:
        """Whether it exceeds its expanded uncertainty."""
        return abs(self.value) > self.half_width(coverage)


@dataclass(frozen=True, slots=True)
class Study:
    """What the study of one part says: flat records for `result.json`, and sentences."""

    records: Mapping[str, list[dict[str, Any]]] = field(default_factory=dict)
    sentences: tuple[str, ...] = ()


def study(label: str, series: Sequence[Series], settings: Settings, *, turns: int | None = None) -> Study:
    """All series of one part.

    Args:
        label: of the part.
        series: of all temperatures, in any order.
        settings: drops and coverage.
        turns: of the part's winding, None where the plan does not say.

    Returns:
        Records "remanence" (first against conditioned shots), "remanence_offset" (what an offset field does to the
        conditioned knee) and "remanence_polarity" (forward against reversed), each only where there is something to say.
    """
    ordered = sorted(
        series, key=lambda one: (one.temperature_degC, abs(one.ampere_turns), one.ampere_turns, -one.sign)
    )
    references = {
        (one.temperature_degC, one.sign): one.conditioned.initial_inductance()
        for one in ordered
        if not one.ampere_turns
    }
    memory, offset, polarity = [], [], []
    shifts: dict[float, list[tuple[Series, Difference]]] = {}
    for drop in settings.drops:
        knees = {_place(one): _knees(one, drop, references) for one in ordered}
        for one in ordered:
            row, shift = _memory(one, drop, *knees[_place(one)], settings)
            memory.append(row)
            if shift is not None and not one.ampere_turns and one.is_prepared:
                shifts.setdefault(drop, []).append((one, shift))
            if one.ampere_turns:
                bare = knees.get((one.temperature_degC, one.sign, 0.0), (None, None))[1]
                offset.append(_offset(one, drop, bare, knees[_place(one)][1], settings, turns))
            elif one.sign > 0:
                other = knees.get((one.temperature_degC, -1, 0.0))
                if other is not None:
                    polarity.append(_polarity(one, drop, knees[_place(one)][1], other[1], settings))
    records = {"remanence": memory, "remanence_offset": offset, "remanence_polarity": polarity}
    said = (
        _verdict(label, ordered, shifts, memory, settings),
        *_told_offset(offset, settings),
        *_told_polarity(polarity, settings),
    )
    return Study({name: rows for name, rows in records.items() if rows}, said)


def _place(one: Series) -> tuple[float, int, float]:
    return one.temperature_degC, one.sign, one.ampere_turns


def _knees(
    one: Series, drop: float, references: Mapping[tuple[float, int], Quantity]
) -> tuple[Knee | None, Knee | None]:
    """Knee of the first shot and of the conditioned shots, None where not reached."""
    reference = references.get((one.temperature_degC, one.sign)) or one.conditioned.initial_inductance()
    # Its own reference knows that the errors of the two are related; one from elsewhere is taken as independent.
    conditioned = one.conditioned.knee(drop, reference if one.ampere_turns else None)
    first = one.first.knee(drop, reference)
    if conditioned is None:
        return (None if first is None else Knee(first, 0.0, np.inf)), None
    scatter, count = one.scatter(conditioned.value), len(one.shots)
    degrees = count - 1 if scatter > 0 else np.inf
    return (
        None if first is None else Knee(first, scatter, degrees),
        Knee(conditioned, scatter / np.sqrt(count), degrees),
    )


def _difference(one: Knee, other: Knee, *, same_shots: bool) -> Difference:
    """``one`` minus ``other``: own contributions of both, of common causes what they do not do to both alike, scatter.

    ``same_shots``: both scatters are one estimate, from one set of shots.
    """
    names = {*one.quantity.shared, *other.quantity.shared}
    known = combine(
        (
            *one.quantity.own.values(),
            *other.quantity.own.values(),
            *(one.quantity.shared.get(n, 0.0) - other.quantity.shared.get(n, 0.0) for n in names),
        )
    )
    scatters = [np.hypot(one.scatter, other.scatter)] if same_shots else [one.scatter, other.scatter]
    degrees = [one.degrees] if same_shots else [one.degrees, other.degrees]
    return Difference(
        one.quantity.value - other.quantity.value,
        combine((known, *scatters)),
        effective_degrees_of_freedom((known, *scatters), (np.inf, *degrees)),
    )


def _memory(
    one: Series, drop: float, first: Knee | None, conditioned: Knee | None, settings: Settings
) -> tuple[dict[str, Any], Difference | None]:
    row = {
        "temperature_degC": one.temperature_degC,
        "polarity": one.way,
        "ampere_turns": one.ampere_turns,
        "drop": drop,
        "first_shot_ampere": None if first is None else first.quantity.value,
        "conditioned_ampere": None if conditioned is None else conditioned.quantity.value,
        "shift_ampere": None,
        "low": None,
        "high": None,
        "verdict": "not reached",
    }
    if conditioned is None:
        return row, None
    if first is None:
        # It lies above all that the first shot reached: a bound, which may be enough to tell.
        own = Difference(
            0.0, combine((conditioned.quantity.uncertainty, conditioned.scatter)), conditioned.degrees
        )
        low = one.first.top - conditioned.quantity.value - own.half_width(settings.coverage)
        row["low"] = low
        if low > 0 and one.is_prepared:
            row["verdict"] = "remembers"
        return row, None
    shift = _difference(first, conditioned, same_shots=True)
    verdict = "remembers" if shift.is_seen(settings.coverage) else "does not remember"
    row |= _interval(shift, settings) | {"verdict": verdict if one.is_prepared else "cannot tell"}
    return row, shift


def _offset(
    one: Series, drop: float, bare: Knee | None, moved: Knee | None, settings: Settings, turns: int | None
) -> dict[str, Any]:
    row = {
        "temperature_degC": one.temperature_degC,
        "polarity": one.way,
        "ampere_turns": one.ampere_turns,
        "drop": drop,
        "conditioned_ampere": None if moved is None else moved.quantity.value,
        "shift_ampere": None,
        "low": None,
        "high": None,
    }
    if moved is not None and bare is not None:
        row |= _interval(_difference(moved, bare, same_shots=False), settings)
    if turns is not None:
        row["by_turns_ampere"] = -one.sign * one.ampere_turns / turns
    return row


def _polarity(
    one: Series, drop: float, forward: Knee | None, reversed_: Knee | None, settings: Settings
) -> dict[str, Any]:
    row = {
        "temperature_degC": one.temperature_degC,
        "drop": drop,
        "forward_ampere": None if forward is None else forward.quantity.value,
        "reversed_ampere": None if reversed_ is None else reversed_.quantity.value,
        "difference_ampere": None,
        "low": None,
        "high": None,
    }
    if forward is not None and reversed_ is not None:
        found = _interval(_difference(forward, reversed_, same_shots=False), settings)
        row |= {"difference_ampere": found["shift_ampere"], "low": found["low"], "high": found["high"]}
    return row


def _interval(shift: Difference, settings: Settings) -> dict[str, float]:
    half = shift.half_width(settings.coverage)
    return {"shift_ampere": shift.value, "low": shift.value - half, "high": shift.value + half}


# ---- in words


def _verdict(
    label: str,
    series: Sequence[Series],
    shifts: Mapping[float, list[tuple[Series, Difference]]],
    memory: Sequence[Mapping[str, Any]],
    settings: Settings,
) -> str:
    """Whether the part remembers, from all series without an offset field together."""
    if not any(one.is_prepared for one in series):
        return (
            f"Whether {label} remembers cannot be told: nothing prepared its core, and the pulses before the first shots had"
            " the same polarity; demagnetise it, or reverse the pulses."
        )
    drop = USUAL_DROP if USUAL_DROP in shifts else max(shifts, default=None)
    if drop is None:
        if any(row["verdict"] == "remembers" for row in memory):
            return (
                f"{label} remembers: its first shots pass the conditioned knee without a knee of their own."
            )
        return f"Whether {label} remembers was not seen: its pulses did not reach a knee; widen them if the limits allow."
    found = shifts[drop]
    mean = Difference(
        float(np.mean([shift.value for _, shift in found])),
        combine(shift.uncertainty for _, shift in found) / len(found),
        effective_degrees_of_freedom(
            [shift.uncertainty for _, shift in found], [shift.degrees for _, shift in found]
        ),
    )
    size = f"{_signed(mean.value)} A ± {mean.half_width(settings.coverage):.2g} A ({100 * settings.coverage:g} %)"
    what = f"knee of its first shot ({100 * drop:g} % drop) less that of its conditioned shots"
    over = "" if len(found) == 1 else f", mean of {len(found)} series without an offset field"
    if mean.is_seen(settings.coverage):
        return f"{label} remembers: {what} is {size}{over}."
    return f"{label} does not remember as far as this study can tell: {what} is {size}{over}."


def _told_offset(rows: Sequence[Mapping[str, Any]], settings: Settings) -> list[str]:
    """What each offset does, at the usual drop and the temperature nearest to 25 degC: one sentence for both polarities."""
    told = []
    near = [row for row in _nearest(rows) if row["shift_ampere"] is not None]
    for ampere_turns in dict.fromkeys(row["ampere_turns"] for row in near):
        mine = [row for row in near if row["ampere_turns"] == ampere_turns]
        moves = " and ".join(
            f"{_signed(row['shift_ampere'])} A ± {(row['high'] - row['low']) / 2:.2g} A {row['polarity']}"
            + (
                f" (by the turns alone {_signed(row['by_turns_ampere'])} A)"
                if "by_turns_ampere" in row
                else ""
            )
            for row in mine
        )
        told.append(
            f"An offset field of {_signed(ampere_turns)} A turns moves the conditioned knee"
            f" ({100 * mine[0]['drop']:g} % drop, {mine[0]['temperature_degC']:.0f} °C,"
            f" {100 * settings.coverage:g} % intervals) by {moves}."
        )
    return told


def _told_polarity(rows: Sequence[Mapping[str, Any]], settings: Settings) -> list[str]:
    told = []
    for row in _nearest(rows):
        if row["difference_ampere"] is not None:
            half = (row["high"] - row["low"]) / 2
            verdict = "agree" if row["low"] <= 0 <= row["high"] else "differ"
            told.append(
                f"The two polarities {verdict}: conditioned knee forward less reversed ({100 * row['drop']:g} % drop,"
                f" {row['temperature_degC']:.0f} °C) is {_signed(row['difference_ampere'], 2)} A ± {half:.2g} A"
                f" ({100 * settings.coverage:g} %)."
            )
    return told


def _nearest(rows: Sequence[Mapping[str, Any]]) -> list[Mapping[str, Any]]:
    """The rows of the usual drop (or the largest) at the temperature nearest to 25 degC."""
    drops = {row["drop"] for row in rows}
    drop = USUAL_DROP if USUAL_DROP in drops else max(drops, default=None)
    at = min((row["temperature_degC"] for row in rows), key=lambda t: abs(t - 25.0), default=None)
    return [row for row in rows if row["drop"] == drop and row["temperature_degC"] == at]


def _signed(value: float, digits: int = 3) -> str:
    """With its sign, and a real minus."""
    return f"{value:+.{digits}g}".replace("-", "−")
