"""What the report knows: a run and its result, sorted by part and method, as plain frozen values.

This is the file that reads a `Run`'s result; pictures, tables and sentences start from what stands here.
Whatever is missing (no extraction, one method only, a value the extraction could not give) becomes an empty
tuple or NaN, never an error: a report of a night that went wrong is needed more than one of a night that went
well.
"""

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from runner.arrays import FloatArray
from runner.record import Run

METHODS = ("pulse", "bias")
INDUCTANCE = {"pulse": "differential inductance", "bias": "incremental inductance"}
METHOD_TITLES = {"pulse": "Pulse method", "bias": "Bias method"}
REACHED = "measured"


@dataclass(frozen=True, slots=True)
class Estimate:
    """A value with its coverage interval, SI; NaN where not known."""

    value: float
    low: float
    high: float


@dataclass(frozen=True, slots=True)
class AtTemperature:
    """Something measured at a temperature of the part."""

    temperature_degC: float
    estimate: Estimate


@dataclass(frozen=True, slots=True)
class Knee:
    """A saturation current. Not reached: the value and the upper end are NaN, ``low`` is the largest current
    seen.
    """

    temperature_degC: float
    drop: float
    reference: str
    status: str
    estimate: Estimate

    @property
    def is_reached(self) -> bool:
        return self.status == REACHED and math.isfinite(self.estimate.value)


@dataclass(frozen=True, slots=True)
class Family:
    """L(I) at each temperature: ``inductance`` and its standard uncertainty ``errors`` are [m, n], NaN
    outside what was measured; ``temperature_degC`` is [m], ascending, and ``current`` [n]."""

    temperature_degC: FloatArray
    current: FloatArray
    inductance: FloatArray
    errors: FloatArray


@dataclass(frozen=True, slots=True)
class MethodFacts:
    """All that one method says about one part; ``extras`` is what else the extraction wrote."""

    name: str
    family: Family | None
    initial: tuple[AtTemperature, ...]
    knees: tuple[Knee, ...]
    resistance: tuple[AtTemperature, ...]
    extras: Mapping[str, Any]

    @property
    def drops(self) -> tuple[float, ...]:
        return tuple(sorted({knee.drop for knee in self.knees}))

    def knees_at(self, drop: float) -> tuple[Knee, ...]:
        """The knees of one drop, by temperature."""
        chosen = [knee for knee in self.knees if knee.drop == drop]
        return tuple(sorted(chosen, key=lambda knee: knee.temperature_degC))


@dataclass(frozen=True, slots=True)
class Flag:
    """Why a point is doubtful, in words."""

    point: int
    flag: str
    text: str


@dataclass(frozen=True, slots=True)
class PartFacts:
    """One inductor of the run. ``slug`` names its files and is independent of the label."""

    index: int
    slug: str
    label: str
    rated_current: float
    methods: tuple[MethodFacts, ...]
    flags: tuple[Flag, ...]
    extras: Mapping[str, Any]

    def method(self, name: str) -> MethodFacts | None:
        return next((method for method in self.methods if method.name == name), None)


@dataclass(frozen=True, slots=True)
class Facts:
    """The whole run as the report sees it."""

    title: str
    coverage: float
    is_extracted: bool
    parts: tuple[PartFacts, ...]

    @property
    def coverage_factor(self) -> float:
        """What one standard uncertainty is multiplied by for a band of the stated coverage (normal
        distribution).
        """
        from scipy.special import ndtri  # scipy.stats would cost half a second of importing

        return float(ndtri((1 + self.coverage) / 2))


def gather(run: Run, rated_currents: Mapping[int, float]) -> Facts:
    """Sort a run's result by part and method.

    Args:
        run: with or without extraction.
        rated_currents: of the parts as the plan gives them [A], by part index; those of the result go before.
    """
    result: Mapping[str, Any] = run.result or {}
    by_label = {str(part.get("label")): part for part in result.get("parts", [])}
    parts = []
    for index, part in enumerate(run.parts):
        label = str(part.name)
        written: Mapping[str, Any] = by_label.get(label, {})
        rated = number(written.get("rated_current"))
        parts.append(
            PartFacts(
                index=index,
                slug=f"part_{index:02d}",
                label=label,
                rated_current=rated if math.isfinite(rated) else rated_currents.get(index, math.nan),
                methods=_methods(run, index, written.get("methods") or {}),
                flags=tuple(
                    Flag(int(f.get("point", -1)), str(f.get("flag", "")), str(f.get("text", "")))
                    for f in written.get("flags") or []
                ),
                extras={k: v for k, v in written.items() if k not in ("label", "methods", "flags")},
            )
        )
    return Facts(
        title=run.title,
        coverage=float(result.get("coverage", 0.95)),
        is_extracted=run.result is not None,
        parts=tuple(parts),
    )


def number(value: object) -> float:
    """A number of ``result.json``: null and what is absent are NaN."""
    return float(value) if isinstance(value, int | float) and not isinstance(value, bool) else math.nan


def _methods(run: Run, part: int, written: Mapping[str, Any]) -> tuple[MethodFacts, ...]:
    families = _families(run, part)
    found = []
    for name in METHODS:
        values: Mapping[str, Any] = written.get(name) or {}
        if not values and name not in families:
            continue
        found.append(
            MethodFacts(
                name=name,
                family=families.get(name),
                initial=_by_temperature(values.get("initial_inductance") or [], "henry"),
                knees=tuple(_knee(row) for row in values.get("saturation_current") or []),
                resistance=_by_temperature(values.get("winding_resistance") or [], "ohm"),
                extras=values,
            )
        )
    return tuple(found)


def _families(run: Run, part: int) -> dict[str, Family]:
    if run.extraction is None:
        return {}
    families: dict[str, Family] = {}
    for table in run.extraction.surfaces:
        if table.part != part:
            continue
        order = np.argsort(table.temperature_degC, kind="stable")
        families[table.method] = Family(
            temperature_degC=table.temperature_degC[order],
            current=table.current,
            inductance=table.inductance[order],
            errors=table.errors[order],
        )
    return families


def _by_temperature(rows: Iterable[Mapping[str, Any]], key: str) -> tuple[AtTemperature, ...]:
    found = [AtTemperature(number(row.get("temperature_degC")), _estimate(row, key)) for row in rows]
    return tuple(sorted(found, key=lambda entry: entry.temperature_degC))


def _estimate(row: Mapping[str, Any], key: str) -> Estimate:
    return Estimate(number(row.get(key)), number(row.get("low")), number(row.get("high")))


def _knee(row: Mapping[str, Any]) -> Knee:
    return Knee(
        temperature_degC=number(row.get("temperature_degC")),
        drop=number(row.get("drop")),
        reference=str(row.get("reference", "same temperature")),
        status=str(row.get("status", REACHED)),
        estimate=_estimate(row, "ampere"),
    )
