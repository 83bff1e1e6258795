"""From a run to its result: the one file of this room that reads a record and a plan.

Captures are read point by point and averaged at once, so memory holds one point and the ramps of a leg.
"""

from collections import deque
from collections.abc import Iterator, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from typing import Any

import numpy as np
from threadpoolctl import threadpool_limits  # type: ignore[import-untyped]  # it ships no types

from runner.arrays import FloatArray, IntArray
from runner.extraction.bench_constants import from_bench, from_captures_file
from runner.extraction.bias import Readings, bias_leg, correct
from runner.extraction.bias_branches import split
from runner.extraction.bias_heat import Heat, follow_heat
from runner.extraction.calibration import Calibration
from runner.extraction.cross_check import compare, verdict
from runner.extraction.flags import Doubt, capture_doubts
from runner.extraction.mean_capture import Setting, average
from runner.extraction.method import MethodLegs, PartFacts, finish_method
from runner.extraction.part_result import Settings
from runner.extraction.pulse_leg import pulse_leg
from runner.extraction.ramp import Ramp, make_ramp
from runner.extraction.remanence import Series, Study, study
from runner.extraction.remanence_shots import conditioned_of, first_of, turned
from runner.extraction.resistance import Resistance, winding_resistance
from runner.extraction.surface import Surface
from runner.plan import Point, expand, parse_bench, parse_captures, parse_plan
from runner.record import (
    SENTENCES,
    ExtractionTables,
    Flag,
    IsatTable,
    PointCaptures,
    Run,
    SurfaceTable,
    is_acceptable,
)
from runner.versions import software

PULSE, BIAS, REMANENCE = 1, 2, 3
METHODS = {"pulse": PULSE, "bias": BIAS}
AHEAD = 2  # points that are read before they are needed
GRID = 161  # currents of a surface table


@dataclass(frozen=True, slots=True)
class Extraction:
    """What extraction made of a run: ``result`` as in result.json, ``tables`` for the record, curves for Python."""

    result: dict[str, Any]
    tables: ExtractionTables
    methods: dict[tuple[int, str], MethodLegs]

    def surface(self, part: int | str = 0, method: str = "pulse") -> Surface:
        """L(I,T) of one part, by its label or its place in the plan, by one method.

        Raises:
            KeyError: the run has no curves of that part and method; says which there are.
        """
        labels = [row["label"] for row in self.result["parts"]]
        index = labels.index(part) if part in labels else part
        found = self.methods.get((index, method)) if isinstance(index, int) else None
        if found is None or found.surface is None:
            known = ", ".join(f"{labels[k]} by {name}" for k, name in self.methods)
            raise KeyError(f"no curves of {part} by {method}; there are: {known or 'none'}")
        return found.surface


def extract(run: Run) -> Extraction:
    """All parts and methods of a run.

    Raises:
        InputError: the run's own plan or bench cannot be read.
    """
    # The fits are many small matrices, for which a second thread of the algebra library costs more than it gives.
    with threadpool_limits(1, "blas"):
        return _extract(run)


def _extract(run: Run) -> Extraction:
    parts, calibration, settings = _read_plan(run)
    points = run.points
    surfaces: list[SurfaceTable] = []
    isats: list[IsatTable] = []
    rows: list[dict[str, Any]] = []
    every: dict[tuple[int, str], MethodLegs] = {}
    for index, facts in enumerate(parts):
        doubts = list(_record_doubts(run, index))
        methods: dict[str, Any] = {}
        for name, number in METHODS.items():
            mine = np.flatnonzero((points["part"] == index) & (points["method"] == number))
            if mine.size == 0:
                continue
            read = _pulse_legs if number == PULSE else _bias_legs
            method = read(run, mine, facts, calibration, doubts)
            if not method.legs:
                doubts.append(Doubt(-1, "no_curve", f"the {name} method gave no curve at any temperature."))
                continue
            methods[name] = finish_method(method, facts, settings, calibration, doubts)
            every[index, name] = method
            surfaces.append(_surface_table(index, name, method))
            isats.append(_isat_table(index, name, method, settings))
        row: dict[str, Any] = {
            "label": facts.label,
            "inductance": facts.inductance,
            "rated_current": facts.rated_current,
            "methods": methods,
        }
        if (index, "pulse") in every and (index, "bias") in every:
            row["cross_check"] = _cross_check(every[index, "pulse"], every[index, "bias"], settings, doubts)
        remembered = _remanence(run, index, facts, calibration, settings, doubts)
        if remembered is not None:
            row |= remembered.records
            row["sentences"] = [*row.get("sentences", ()), *remembered.sentences]
        rows.append({**row, "flags": [doubt.as_row() for doubt in doubts]})
    program, _, version = software().partition(" ")
    tables = ExtractionTables(
        program=program,
        version=version,
        date=datetime.now(UTC).isoformat(timespec="seconds").replace("+00:00", "Z"),
        settings={
            "coverage": settings.coverage,
            "reference": settings.reference,
            "drops": list(settings.drops),
        },
        surfaces=tuple(surfaces),
        isats=tuple(isats),
    )
    return Extraction({"coverage": settings.coverage, "parts": rows}, tables, every)


def _read_plan(run: Run) -> tuple[list[PartFacts], Calibration, Settings]:
    if run.kind == "captures":
        captures = parse_captures(run.plan_bytes, run.plan_name)
        parts, asked = [captures.part], captures.extract
        calibration = from_captures_file(captures)
    else:
        plan = parse_plan(run.plan_bytes, run.plan_name)
        parts, asked = list(plan.parts), plan.extract
        calibration = from_bench(parse_bench(run.bench_bytes, run.bench_name))
    facts = [PartFacts(p.label, p.inductance, p.rated_current, p.resistance, p.core) for p in parts]
    return facts, calibration, Settings(asked.drops, asked.reference, asked.coverage, asked.guard_band)


def _record_doubts(run: Run, part: int) -> Iterator[Doubt]:
    """The record's own flags, in its words; attempts that a later one replaced are left out."""
    used = set(run.points["plan_index"].tolist())
    points = run.all_points
    for row in np.flatnonzero((points["part"] == part) & (points["quality"] != 0)):
        quality = int(points["quality"][row])
        if not is_acceptable(quality) and int(points["plan_index"][row]) in used:
            continue
        for flag in Flag:
            if quality & flag:
                yield Doubt(int(points["point"][row]), str(flag.name).lower(), SENTENCES[flag])


def _by_leg(points: dict[str, Any], mine: IntArray, calibration: Calibration) -> list[tuple[float, IntArray]]:
    """Rows of each leg with the part's mean temperature there, from cold to hot."""
    groups = []
    for leg in np.unique(points["leg"][mine]):
        rows = mine[points["leg"][mine] == leg]
        groups.append((float(np.mean(_body(points, rows, calibration))), rows))
    return sorted(groups, key=lambda group: group[0])


def _body(points: dict[str, Any], rows: IntArray, calibration: Calibration) -> FloatArray:
    """The part's temperature at each row [degC]: its sensor's, or the set-point where that gave nothing."""
    body = points["body_temperature"][rows] - calibration.body_offset.value
    return np.asarray(np.where(np.isfinite(body), body, points["temperature_setpoint"][rows]))


def _pulse_legs(
    run: Run, mine: IntArray, facts: PartFacts, calibration: Calibration, doubts: list[Doubt]
) -> MethodLegs:
    points = run.points
    method = MethodLegs("pulse")
    legs = _by_leg(points, mine, calibration)
    stream = _ahead(run, [int(points["point"][row]) for _, rows in legs for row in rows.tolist()])
    for at, rows in legs:
        resistance = _resistance(points, rows, calibration, facts, at)
        body = dict(zip(rows.tolist(), _body(points, rows, calibration), strict=True))
        ramps = []
        for row in rows.tolist():
            ramp = _ramp(next(stream), int(points["point"][row]), calibration, doubts)
            if ramp is not None:
                ramps.append(replace(ramp, temperature_degC=float(body[row])))
        if not ramps:
            continue
        method.legs.append(
            pulse_leg(
                ramps,
                calibration,
                temperature_degC=at,
                resistance=resistance.ohm,
                resistance_uncertainty=resistance.uncertainty,
                like=method.legs[-1] if method.legs else None,
            )
        )
        method.resistances.append(resistance)
        method.peaks.append(np.array([ramp.peak for ramp in ramps]))
    return method


def _setting(captures: PointCaptures) -> Setting:
    detail = captures.setting
    return Setting(
        interval=float(detail["interval"]),
        first=float(captures.time[0]),
        v_scale=float(detail["v_scale"]),
        v_offset=float(detail["v_offset"]),
        i_scale=float(detail["i_scale"]),
        i_offset=float(detail["i_offset"]),
        code_min=float(detail["code_min"]),
        code_max=float(detail["code_max"]),
    )


def _ahead(run: Run, points: Sequence[int]) -> Iterator[PointCaptures | None]:
    """Captures of the points in order, read a few points ahead by a thread of its own: HDF5 reads and unpacks without
    holding up the fits."""
    with ThreadPoolExecutor(1) as reader:
        waiting = deque(reader.submit(run.captures, point) for point in points[:AHEAD])
        for later in points[AHEAD:]:
            ready = waiting.popleft().result()
            waiting.append(reader.submit(run.captures, later))
            yield ready
        while waiting:
            yield waiting.popleft().result()


def _ramp(
    captures: PointCaptures | None, point: int, calibration: Calibration, doubts: list[Doubt]
) -> Ramp | None:
    if captures is None:
        return None
    setting = _setting(captures)
    mean = average(captures.voltage_codes, captures.current_codes, setting, guard=_guard(calibration))
    ramp = make_ramp(mean, calibration, point=point)
    doubts += capture_doubts(point, mean, ramp)
    return ramp


def _remanence(
    run: Run, part: int, facts: PartFacts, calibration: Calibration, settings: Settings, doubts: list[Doubt]
) -> Study | None:
    """The remanence study of one part; None where the run has none. Its captures are no business of the pulse method."""
    points = run.points
    mine = np.flatnonzero((points["part"] == part) & (points["method"] == REMANENCE))
    if mine.size == 0:
        return None
    plan = parse_plan(run.plan_bytes, run.plan_name)
    planned = expand(plan).points
    is_prepared = plan.remanence is not None and (
        plan.remanence.demagnetise != "none" or plan.remanence.polarities == "both"
    )
    found = []
    for at, rows in _by_leg(points, mine, calibration):
        resistance = _resistance(points, rows, calibration, facts, at)
        for row in rows.tolist():
            point = planned[int(points["plan_index"][row])]
            series = _series(run, int(points["point"][row]), point, resistance, calibration, doubts)
            if series is not None:
                found.append(replace(series, is_prepared=is_prepared))
    turns = None if facts.core is None else int(facts.core.turns)
    return study(facts.label, found, settings, turns=turns) if found else None


def _series(
    run: Run,
    number: int,
    point: Point,
    resistance: Resistance,
    calibration: Calibration,
    doubts: list[Doubt],
) -> Series | None:
    captures = run.captures(number)
    if captures is None:
        return None
    shots = turned(captures.voltage_codes, captures.current_codes, _setting(captures), point.direction)
    later = conditioned_of(shots)
    guard, at = _guard(calibration), resistance.temperature_degC
    ramps = []
    for chosen in (first_of(shots), later):
        mean = average(*chosen, guard=guard)
        ramp = make_ramp(mean, calibration, point=number, temperature_degC=at)
        doubts += capture_doubts(number, mean, ramp)
        ramps.append(ramp)
    curves = [
        pulse_leg(
            [ramp],
            calibration,
            temperature_degC=at,
            resistance=resistance.ohm,
            resistance_uncertainty=resistance.uncertainty,
        )
        for ramp in ramps
        if ramp is not None
    ]
    if len(curves) < len(ramps):
        return None
    voltage, current, setting = later
    singles = (
        make_ramp(average(voltage[k : k + 1], current[k : k + 1], setting, guard=guard), calibration)
        for k in range(len(voltage))
    )
    return Series(
        temperature_degC=at,
        sign=point.direction,
        ampere_turns=point.ampere_turns,
        first=curves[0],
        conditioned=curves[1],
        shots=tuple(ramp for ramp in singles if ramp is not None),
        resistance=resistance.ohm,
    )


def _guard(calibration: Calibration) -> float:
    """Before the trigger, how much may already belong to the pulse [s]: a voltage channel that is early."""
    return max(0.0, -calibration.skew.value)


def _resistance(
    points: dict[str, Any], rows: IntArray, calibration: Calibration, facts: PartFacts, at: float
) -> Resistance:
    body = _body(points, rows, calibration)
    return winding_resistance(
        points["resistance"][rows], body, calibration, at_degC=at, nominal_20=facts.resistance_20
    )


def _bias_legs(
    run: Run, mine: IntArray, facts: PartFacts, calibration: Calibration, doubts: list[Doubt]
) -> MethodLegs:
    points = run.points
    method = MethodLegs("bias")
    for at, rows in _by_leg(points, mine, calibration):
        readings, heat = _readings(points, rows, calibration, facts)
        up, down = split(readings)
        leg = bias_leg(up, calibration, temperature_degC=at, like=method.legs[-1] if method.legs else None)
        if leg is None:
            doubts.append(
                Doubt(-1, "too_few_readings", f"bias at {at:.1f} °C: too few readings for a curve.")
            )
            continue
        method.down.append(
            None if down is None else bias_leg(down, calibration, temperature_degC=at, like=leg)
        )
        method.heats.append(heat)
        method.legs.append(leg)
        cold = rows[np.abs(points["bias_current_setpoint"][rows]) <= 0.05 * leg.top]
        method.resistances.append(_resistance(points, cold if cold.size else rows, calibration, facts, at))
        method.peaks.append(readings.current)
    return method


def _readings(
    points: dict[str, Any], rows: IntArray, calibration: Calibration, facts: PartFacts
) -> tuple[Readings, Heat]:
    """The readings of one leg that are numbers, corrected, and how warm the current made the part."""
    columns = {
        name: np.asarray(points[name][rows], dtype=np.float64)
        for name in ("bias_current", "inductance", "ac_resistance", "test_frequency", "resistance")
    }
    current, inductance = correct(columns, calibration)
    good = np.isfinite(current) & np.isfinite(inductance)
    sensor = _body(points, rows, calibration)[good]
    heat = follow_heat(current[good], columns["resistance"][good], sensor, rated=facts.rated_current)
    return Readings(current[good], inductance[good], sensor + heat.rise, heat.rise_uncertainty), heat


def _surface_table(part: int, name: str, method: MethodLegs) -> SurfaceTable:
    top = max(leg.top for leg in method.legs)
    current = np.linspace(0.0, top, GRID)
    shape = (len(method.legs), GRID)
    inductance, errors = np.full(shape, np.nan), np.full(shape, np.nan)
    count = np.zeros(shape, dtype=np.int64)
    for k, (leg, peaks) in enumerate(zip(method.legs, method.peaks, strict=True)):
        inside = current <= leg.top * (1 + 1e-9)
        inductance[k, inside] = np.interp(current[inside], leg.current, leg.inductance)
        errors[k, inside] = np.interp(current[inside], leg.current, leg.inductance_uncertainty())
        if name == "pulse":
            count[k] = (peaks[:, None] >= current[None, :]).sum(axis=0)
        else:
            spacing = top / max(1, len(np.unique(np.round(peaks, 3))) - 1)
            count[k] = (np.abs(peaks[:, None] - current[None, :]) <= spacing / 2).sum(axis=0)
        count[k, ~inside] = 0
    at = np.array([leg.temperature_degC for leg in method.legs])
    return SurfaceTable(part, name, at, current, inductance, errors, count, at)  # type: ignore[arg-type]


def _isat_table(part: int, name: str, method: MethodLegs, settings: Settings) -> IsatTable:
    assert method.knees is not None
    found = [method.knees.found[drop] for drop in settings.drops]
    return IsatTable(
        part,
        name,  # type: ignore[arg-type]
        settings.drops,
        np.array([leg.temperature_degC for leg in method.legs]),
        np.array([[np.nan if q is None else q.value for q in row] for row in found]),
        np.array([[np.nan if q is None else q.uncertainty for q in row] for row in found]),
    )


def _cross_check(
    pulse: MethodLegs, bias: MethodLegs, settings: Settings, doubts: list[Doubt]
) -> list[dict[str, Any]]:
    assert pulse.knees is not None
    assert bias.knees is not None
    comparisons = compare((pulse.legs, pulse.knees), (bias.legs, bias.knees), settings)
    if (said := verdict(comparisons)) is not None:
        doubts.append(Doubt(-1, "methods_disagree", said))
    return [comparison.as_row() for comparison in comparisons]
