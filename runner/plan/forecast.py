"""What a run will take and which limits it keeps, before anything is touched. Pure: a plan and a bench in, figures out."""

from collections.abc import Iterator
from dataclasses import asdict, dataclass
from typing import Any

from runner.plan.bench_file import Bench
from runner.plan.currents import SATURATED_SHARE, WidthForecast, study_pulse, width_forecasts
from runner.plan.durations import Times, forecast_times
from runner.plan.plan_file import Part, Plan
from runner.plan.points import expand

CODE_BYTES = 2  # int16 codes, two channels
CAPTURE_OVERHEAD = 150  # byte, a row of the journal and its place in the record
POINT_OVERHEAD = 400  # byte, scalars, index and events
RUN_OVERHEAD = 180_000  # byte, empty tables, groups of the record, plan and bench
RECORD_SHARE = 0.32  # of the codes that is left in record.h5 after compression (12-bit codes, left-justified)
LOG_PERIOD = 9.0  # s, between two entries of the temperature log
LOG_BYTES = 60


@dataclass(frozen=True, slots=True)
class LimitForecast:
    """One limit of the plan against what is forecast.

    Attributes:
        name: as in the plan, `limits.current` or `parts[1].limits.current`.
        limit, expected: in `unit`.
        is_kept: whether `expected` keeps it.
        text: the comparison for a person.
    """

    name: str
    limit: float
    expected: float
    unit: str
    is_kept: bool
    text: str


@dataclass(frozen=True, slots=True)
class Forecast:
    """What a run will take.

    Attributes:
        legs, points, captures: how many at most.
        times: by kind and by leg [s].
        widths: each pulse width on each part.
        saturated_share: of the nominal inductance, assumed for `saturated_current`.
        bank_energy: stored in the charged bank [J]; part_energy: in a part at its largest current [J].
        pulse_energy: largest taken from the bank by one pulse [J].
        mean_power: largest mean heating of a part [W].
        disk_bytes: of journal and record, for the widths that are likely to be fired.
        limits: each one kept or broken.
        notes: what the figures do not cover.
    """

    legs: int
    points: int
    captures: int
    times: Times
    widths: tuple[WidthForecast, ...]
    saturated_share: float
    bank_energy: float
    part_energy: float
    pulse_energy: float
    mean_power: float
    disk_bytes: int
    limits: tuple[LimitForecast, ...]
    notes: tuple[str, ...]

    @property
    def broken(self) -> tuple[LimitForecast, ...]:
        """The limits that the plan would break."""
        return tuple(limit for limit in self.limits if not limit.is_kept)

    @property
    def is_kept(self) -> bool:
        """Whether every limit is kept."""
        return not self.broken

    def as_mapping(self) -> dict[str, Any]:
        """The same facts as JSON types, SI."""
        facts = asdict(self)
        facts["times"]["total"] = self.times.total
        facts["limits_kept"] = self.is_kept
        return facts


def forecast(plan: Plan, bench: Bench) -> Forecast:
    """Forecast a run of a plan on a bench.

    Currents are judged as `currents.py` says: on the widths that the climb is expected to fire with the part's nominal
    inductance. What a saturated part would do stands beside it as a caution; the climb's own prediction guards the run.
    """
    programme = expand(plan)
    times = forecast_times(plan, bench)
    widths = tuple(row for part in plan.parts for row in width_forecasts(plan, bench.fixture, part))
    pulses = sum(point.method == "pulse" for point in programme.points)
    captures = pulses * plan.pulse.repeats if plan.pulse else 0
    captures += _series(plan) * plan.remanence.shots if plan.remanence else 0
    bank = bench.fixture.bank
    rail = plan.pulse.rail if plan.pulse else 0.0
    loads = [_Load.of(plan, bench, part) for part in plan.parts]
    bank_energy = 0.5 * bank.capacitance * rail**2 if bank else 0.0
    return Forecast(
        legs=len(programme.legs),
        points=len(programme.points),
        captures=captures,
        times=times,
        widths=widths,
        saturated_share=SATURATED_SHARE,
        bank_energy=bank_energy,
        part_energy=max(
            0.5 * part.inductance * load.current**2 for part, load in zip(plan.parts, loads, strict=True)
        ),
        pulse_energy=max(load.pulse_energy for load in loads),
        mean_power=max(load.mean_power for load in loads),
        disk_bytes=_disk_bytes(plan, bench, widths, legs=len(programme.legs), seconds=times.total),
        limits=tuple(_limits(plan, loads, bank_energy=bank_energy, duration=times.total)),
        notes=tuple(_notes(plan)),
    )


@dataclass(frozen=True, slots=True)
class _Load:
    """What one part is expected to carry: current [A] with what it comes from, energy of a pulse [J], heating [W]."""

    current: float
    cause: str
    saturated: float
    pulse_energy: float
    mean_power: float

    @staticmethod
    def of(plan: Plan, bench: Bench, part: Part) -> "_Load":
        fired = [row for row in width_forecasts(plan, bench.fixture, part) if row.is_fired]
        fired += study_pulse(plan, bench.fixture, part)
        pulse = max((row.linear_current for row in fired), default=0.0)
        bias = plan.bias.largest if plan.bias else 0.0
        energy = max((row.energy for row in fired), default=0.0)
        heating = energy / plan.pulse.rest if plan.pulse else 0.0
        copper = bias**2 * part.resistance_at(max(plan.temperatures.at_degC))
        cause = "in a pulse on an unsaturated part" if pulse > bias else "of bias"
        saturated = max((row.saturated_current for row in fired), default=0.0)
        return _Load(max(pulse, bias), cause, saturated, energy, max(heating, copper))


def _limits(
    plan: Plan, loads: list[_Load], *, bank_energy: float, duration: float
) -> Iterator[LimitForecast]:
    limits, at = plan.limits, plan.temperatures.at_degC
    worst = max(loads, key=lambda load: load.current)
    yield _limit("limits.current", limits.current, worst.current, "A", _current_text(worst))
    for index, (part, load) in enumerate(zip(plan.parts, loads, strict=True)):
        if part.limits and part.limits.current is not None:
            name = f"parts[{index}].limits.current"
            yield _limit(name, part.limits.current, load.current, "A", _current_text(load))
        if part.limits and part.limits.pulse_energy is not None:
            name = f"parts[{index}].limits.pulse_energy"
            yield _limit(
                name, part.limits.pulse_energy, load.pulse_energy, "J", "taken from the bank by one pulse"
            )
    yield _limit("limits.body", limits.body_degC, max(at), "degC", "hottest leg; heating comes on top")
    if plan.pulse:
        energy = max(load.pulse_energy for load in loads)
        yield _limit("limits.rail", limits.rail, plan.pulse.rail, "V", "on the bank")
        yield _limit(
            "limits.pulse_energy", limits.pulse_energy, energy, "J", "taken from the bank by one pulse"
        )
    low, high = limits.chamber_degC
    yield _limit("limits.chamber[1]", high, max(at), "degC", "hottest leg")
    yield LimitForecast("limits.chamber[0]", low, min(at), "degC", min(at) >= low, "coldest leg")
    yield _limit("limits.duration", limits.duration, duration, "s", "forecast of the whole run")
    if limits.bank_energy is not None:
        yield _limit("limits.bank_energy", limits.bank_energy, bank_energy, "J", "stored in the charged bank")
    if limits.mean_power is not None:
        power = max(load.mean_power for load in loads)
        yield _limit("limits.mean_power", limits.mean_power, power, "W", "mean heating of a part")


def _current_text(load: _Load) -> str:
    if load.saturated <= load.current:
        return load.cause
    return (
        f"{load.cause}; {load.saturated:.3g} A if it kept only {SATURATED_SHARE * 100:g} % of its inductance above the"
        " rated current, which the climb does not let happen"
    )


def _limit(name: str, limit: float, expected: float, unit: str, text: str) -> LimitForecast:
    return LimitForecast(name, limit, expected, unit, expected <= limit, text)


def _disk_bytes(
    plan: Plan, bench: Bench, widths: tuple[WidthForecast, ...], *, legs: int, seconds: float
) -> int:
    samples = bench.digitizer.samples if bench.digitizer else 0
    pulses = legs * sum(row.is_likely for row in widths)
    captures = pulses * plan.pulse.repeats if plan.pulse else 0
    captures += _series(plan) * plan.remanence.shots if plan.remanence else 0
    pulses += _series(plan)
    biases = sum(point.method == "bias" for point in expand(plan).points)
    codes = captures * samples * 2 * CODE_BYTES
    overhead = captures * CAPTURE_OVERHEAD + (pulses + biases) * POINT_OVERHEAD + RUN_OVERHEAD
    return round(codes * (1 + RECORD_SHARE) + overhead + seconds / LOG_PERIOD * LOG_BYTES)


def _notes(plan: Plan) -> Iterator[str]:
    if any(point.sought for point in expand(plan).points):
        yield "a search may end before its budget is used; points and times are the most it may take"
    if plan.pulse and plan.pulse.stop_at:
        yield "the climb may stop before the longest width, at each temperature by itself"


def _series(plan: Plan) -> int:
    return sum(point.method == "remanence" for point in expand(plan).points)
