"""What a run has behind it, from its record: which points need no measuring, which series and legs are complete.

A point is done when it was recorded, unless every attempt was skipped for a fault that somebody may have mended since. A
series (one method on one part in one leg) is complete when its event says so: a climb that met its stop rule leaves
planned points unmeasured on purpose.
"""

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path

from runner.errors import Fault, InputError
from runner.plan import LoadedPlan, load_plan, parse_bench, parse_plan
from runner.record import METHODS, Flag, Method, open_run

_NAMES: dict[int, Method] = {number: name for name, number in METHODS.items()}


@dataclass(frozen=True, slots=True)
class Recorded:
    """One recorded point, as far as a decision goes by it [s, A, H]; `x` is the width or the bias current set."""

    plan_index: int
    x: float
    current: float
    inductance: float


@dataclass(frozen=True, slots=True)
class Behind:
    """What lies behind a run when a session begins.

    Attributes:
        done: plan indices not to be measured again.
        complete: (leg, part, method) whose points are all that will be.
        dead_parts: that opened or shorted.
        ended_legs: all done at this temperature.
        history: acceptable points by (leg, part, method), in the order of recording.
        points, flagged: how many points there are, and how many of them carry a flag.
        identities: what each instrument called itself, by its name in the record.
        run_started, last_time: first and latest time in the journal [UTC s], 0 for a new run.
    """

    done: frozenset[int] = frozenset()
    complete: frozenset[tuple[int, int, Method]] = frozenset()
    dead_parts: frozenset[int] = frozenset()
    ended_legs: frozenset[int] = frozenset()
    history: Mapping[tuple[int, int, Method], tuple[Recorded, ...]] = field(default_factory=dict)
    points: int = 0
    flagged: int = 0
    identities: Mapping[str, str] = field(default_factory=dict)
    run_started: float = 0.0
    last_time: float = 0.0


NOTHING = Behind()


def look_behind(folder: Path) -> Behind:
    """Read what a run has behind it; rebuilds its record where that is older than the journal.

    Raises:
        InputError: it is no run.
        RecordError: it is damaged.
    """
    with open_run(folder) as run:
        columns = {name: values.tolist() for name, values in run.all_points.items()}
        events = run.events
        run_started, last_time = run.start, run.end
        identities = {row.role: row.idn for row in run.instruments if row.idn}
        ended = frozenset(leg.index for leg in run.legs if leg.end == leg.end)
    rows = range(len(columns["point"]))
    places: dict[int, tuple[int, int, Method]] = {
        columns["point"][row]: (columns["leg"][row], columns["part"][row], _NAMES[columns["method"][row]])
        for row in rows
    }
    part_flags = Flag.PART_OPEN | Flag.PART_SHORT
    history: dict[tuple[int, int, Method], list[Recorded]] = {}
    done, pending = set(), set()
    for row in rows:
        index, quality = columns["plan_index"][row], Flag(columns["quality"][row])
        if quality & Flag.SKIPPED and not quality & part_flags:
            pending.add(index)
            continue
        done.add(index)
        place = places[columns["point"][row]]
        is_pulse = place[2] != "bias"
        history.setdefault(place, []).append(
            Recorded(
                index,
                columns["pulse_width_setpoint" if is_pulse else "bias_current_setpoint"][row],
                columns["peak_current" if is_pulse else "bias_current"][row],
                columns["inductance"][row],
            )
        )
    pending -= done
    return Behind(
        done=frozenset(done),
        complete=frozenset(
            places[one.point] for one in events if one.kind == "climb_end" and one.point in places
        ),
        dead_parts=frozenset(
            places[one.point][1] for one in events if one.kind == "part_end" and one.point in places
        ),
        # A leg with skipped points is taken up again: what kept them from being measured may be mended.
        ended_legs=ended - {columns["leg"][row] for row in rows if columns["plan_index"][row] in pending},
        history={place: tuple(points) for place, points in history.items()},
        points=len(done),
        flagged=len({columns["plan_index"][row] for row in rows if columns["quality"][row]}),
        identities=identities,
        run_started=run_started,
        last_time=last_time,
    )


def loaded_from_run(folder: Path) -> LoadedPlan:
    """Plan and bench of a run, as it was started with them.

    The files they came from are read again where they still exist. A change that says something else is refused, with
    what changed; a change of comments or layout is not, and the bytes of the start remain those of the run.

    Raises:
        InputError: it is no run, or plan or bench have changed in meaning.
    """
    with open_run(folder) as run:
        plan_path, bench_path = Path(run.plan_name), Path(run.bench_name)
        plan_bytes, bench_bytes = run.plan_bytes, run.bench_bytes
        kind = run.kind
    if kind != "plan":
        raise InputError([Fault(str(folder), "holds captures taken by hand; there is nothing to resume")])
    started = LoadedPlan(
        plan=parse_plan(plan_bytes, str(plan_path)),
        bench=parse_bench(bench_bytes, str(bench_path)),
        plan_path=plan_path,
        bench_path=bench_path,
        plan_bytes=plan_bytes,
        bench_bytes=bench_bytes,
    )
    if plan_path.is_file() and bench_path.is_file():
        _refuse_changes(started, load_plan(plan_path, bench=bench_path))
    return started


def _refuse_changes(started: LoadedPlan, now: LoadedPlan) -> None:
    faults = []
    for path, was, became in (
        (
            now.plan_path,
            started.plan.model_dump(mode="json", serialize_as_any=True),
            now.plan.model_dump(mode="json", serialize_as_any=True),
        ),
        (
            now.bench_path,
            started.bench.model_dump(mode="json", serialize_as_any=True),
            now.bench.model_dump(mode="json", serialize_as_any=True),
        ),
    ):
        faults += [
            Fault(str(path), f"{what}; put it back to resume, or start a new run")
            for what in _differences(was, became)
        ]
    if faults:
        raise InputError(faults)


def _differences(was: object, became: object, where: str = "") -> list[str]:
    """Every value that differs, with its path."""
    if isinstance(was, dict) and isinstance(became, dict):
        return [
            one
            for key in sorted({*was, *became}, key=str)
            for one in _differences(was.get(key), became.get(key), f"{where}.{key}" if where else str(key))
        ]
    if isinstance(was, list) and isinstance(became, list) and len(was) == len(became):
        return [
            one
            for at, (a, b) in enumerate(zip(was, became, strict=True))
            for one in _differences(a, b, f"{where}[{at}]")
        ]
    return [] if was == became else [f"{where} was {was!r} when the run was started and is {became!r} now"]
