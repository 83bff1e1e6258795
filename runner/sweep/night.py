"""A session of a run: what its loops share, what is checked between two points, and how a point gets into the journal.

The loops (soaking, climb, biasing) walk; this file counts, watches and records. A limit met, a stop asked for or the
plan's duration used up is `SafeStop`, which nothing below `carry_out` catches.
"""

import subprocess
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from time import monotonic

from runner.errors import SafeStop
from runner.plan import LoadedPlan, Point, Programme
from runner.record import CaptureRow, EventRow, Flag, Journal, Method, PointRow, start_consolidation
from runner.sweep.bench import Bench
from runner.sweep.clock import Clock
from runner.sweep.faults import GivenUp
from runner.sweep.flags import Judgement
from runner.sweep.limits import PulseLimits
from runner.sweep.logbook import Logbook
from runner.sweep.progress import Pace, Progress, Watch, remaining
from runner.sweep.recovery import Recovery
from runner.sweep.requests import StopRequests
from runner.sweep.resume import Behind
from runner.sweep.retry import Action

_REBUILD_EVERY = 600.0  # s of wall time: the record is never older than this
_HEAT_MARGIN = 2.0  # times the last rise that must fit below the limit on body temperature


@dataclass(frozen=True, slots=True)
class Settled:
    """How a soak ended, by part index: the body then [degC], and whether it had settled."""

    body_degC: dict[int, float] = field(default_factory=dict)
    is_settled: dict[int, bool] = field(default_factory=dict)


@dataclass(slots=True)
class Night:
    """What the loops of a session share.

    Attributes:
        started: UTC time of the session's start [s].
        dead_parts: indices of parts whose points have ended.
        time: the latest that is known [UTC s]; asking a simulated bench's clock is a round trip.
        notes: events that wait for the next point.
        leg, is_soaked, soak_started: which leg is under way, whether its soak is over, when it began.
        leg_points: done and planned in this leg.
        seen_soak, seen_points: seconds spent in this session on soaks that are over, and on points.
    """

    loaded: LoadedPlan
    programme: Programme
    bench: Bench
    clock: Clock
    folder: Path
    journal: Journal
    log: Logbook
    recovery: Recovery
    requests: StopRequests
    behind: Behind
    watch: Watch
    forecast_soak: tuple[float, ...]
    forecast_points: tuple[float, ...]
    beat: Callable[[], None]
    run_started: float
    started: float
    time: float = 0.0
    notes: list[EventRow] = field(default_factory=list)
    dead_parts: set[int] = field(default_factory=set)
    last_index: int = -1
    points: int = 0
    flagged: int = 0
    leg: int = 0
    is_soaked: bool = False
    soak_started: float = 0.0
    leg_points: tuple[int, int] = (0, 0)
    setpoint_degC: float = float("nan")
    air_at_start: float = float("nan")
    body_degC: float = float("nan")
    seen_soak: float = 0.0
    seen_points: float = 0.0
    rebuild: "subprocess.Popen[str] | None" = None
    rebuilt: float = field(default_factory=monotonic)

    # ---- between points

    def check(self, now: float) -> None:
        """Between two points, and at each poll of a soak; `now` is the time it is [UTC s].

        Raises:
            SafeStop: somebody asked for a stop, or the plan's duration is used up.
        """
        self.time = now
        self.beat()
        if self.requests.is_asked:
            raise SafeStop(self.requests.why)
        duration = self.loaded.plan.limits.duration
        if now - self.run_started > duration:
            raise SafeStop(f"the plan's duration of {duration / 3600:.3g} h is used up")
        if monotonic() - self.rebuilt > _REBUILD_EVERY:
            self.start_rebuild()

    def body_limit(self, part: int) -> float:
        """Hottest body that this part may have [degC]."""
        own = self.loaded.plan.parts[part].limits
        whole = self.loaded.plan.limits.body_degC
        return whole if own is None or own.body_degC is None else min(whole, own.body_degC)

    def pulse_limits(self, part: int) -> PulseLimits:
        """What no pulse on this part may pass."""
        limits, own = self.loaded.plan.limits, self.loaded.plan.parts[part].limits
        current, energy = limits.current, limits.pulse_energy
        if own is not None:
            current = current if own.current is None else min(current, own.current)
            energy = energy if own.pulse_energy is None else min(energy, own.pulse_energy)
        return PulseLimits(current, energy, limits.mean_power)

    def watch_body(self, part: int, body_degC: float, before_degC: float) -> str | None:
        """Why this part must not be heated further, or None.

        Raises:
            SafeStop: the body is hotter than its limit.
        """
        self.body_degC = body_degC
        limit = self.body_limit(part)
        if body_degC > limit:
            raise SafeStop(f"{self.label(part)}: body at {body_degC:.1f} degC, limit {limit:g} degC")
        rise = max(body_degC - before_degC, 0.0)
        if body_degC + _HEAT_MARGIN * rise > limit:
            return f"body at {body_degC:.1f} degC and rising; the next point could pass {limit:g} degC"
        return None

    def label(self, part: int) -> str:
        return self.loaded.plan.parts[part].label

    # ---- points

    def to_do(self, leg: int, part: int, method: Method) -> list[Point]:
        """Points of a series that are still to be measured; none where it is complete or its part is dead."""
        if (leg, part, method) in self.behind.complete or part in self.dead_parts:
            return []
        return [
            point
            for point in self.programme.points
            if (point.leg, point.part, point.method) == (leg, part, method)
            and point.plan_index not in self.behind.done
        ]

    def record(
        self,
        row: PointRow,
        judgement: Judgement,
        captures: Sequence[CaptureRow] = (),
        *,
        ends: tuple[str, str] | None = None,
    ) -> int:
        """Put a point on the disk, with a sentence for each flag and, if its series ends here, why.

        Args:
            row: the point; its quality comes from `judgement`.
            ends: kind and text of the event that completes the series ("climb_end" or "part_end").

        Returns:
            Number of the point in the journal.
        """
        events = [
            *self.notes,
            *(self.log.row("flag", text, "warning", t=row.end_time) for text in judgement.texts),
        ]
        if ends is not None:
            events.append(self.log.row(ends[0], ends[1], t=row.end_time))
        number = self.journal.add_point(row, captures, events)
        self.notes.clear()
        self.time = row.end_time
        self.last_index = row.plan_index
        self.points += 1
        self.flagged += bool(row.quality)
        self.seen_points += row.end_time - row.start_time
        self.leg_points = (self.leg_points[0] + 1, self.leg_points[1])
        self.report(row.part, row.method, row.end_time)
        return number

    def note(self, kind: str, text: str) -> None:
        """An event that goes to the disk with the next point, or at the next `write_notes`: most do not need a commit."""
        self.notes.append(self.log.row(kind, text, t=self.time))

    def write_notes(self) -> None:
        """Put the notes on the disk that no point has taken along."""
        for note in self.notes:
            self.journal.event(note)
        self.notes.clear()

    def absorb(self, given_up: GivenUp, points: Sequence[Point]) -> bool:
        """What a fault at the first of `points` means for the others of its series.

        Returns:
            True if the series goes on with the next point.

        Raises:
            GivenUp: the leg or the run ends.
        """
        action = given_up.action
        if action in (Action.SKIP, Action.FLAG):
            self.skip(points[:1], str(given_up), given_up.flags)
            return True
        if action is Action.END_METHOD:
            self.skip(points, str(given_up), Flag.SKIPPED)
            return False
        if action is Action.END_PART:
            self.skip(points[:1], str(given_up), given_up.flags, dead=True)
            self.dead_parts.add(points[0].part)
            return False
        raise given_up

    def skip(
        self, points: Sequence[Point], why: str, flags: Flag = Flag.SKIPPED, *, dead: bool = False
    ) -> None:
        """Note points that are not measured, so that the record says so and a resume knows."""
        for index, point in enumerate(points):
            now = self.clock.now()
            row = PointRow(
                plan_index=point.plan_index,
                leg=point.leg,
                part=point.part,
                method=point.method,
                start_time=now,
                end_time=now,
                quality=int(flags),
                temperature_setpoint=self.setpoint_degC,
                pulse_width_setpoint=point.width,
                bias_current_setpoint=point.bias,
            )
            first = index == 0
            self.record(
                row,
                Judgement(flags, (f"not measured: {why}",) if first else ()),
                ends=("part_end", why) if first and dead else None,
            )

    # ---- the world around

    def report(self, part: int, phase: str, now: float) -> None:
        """Tell whoever watches where the run stands."""
        self.watch(
            Progress(
                done=len(self.behind.done) + self.points,
                total=len(self.programme.points),
                leg=self.leg + 1,
                legs=len(self.programme.legs),
                part=self.label(part) if part >= 0 else "",
                phase=phase,
                elapsed=now - self.started,
                remaining=remaining(self._pace(now)),
                setpoint_degC=self.setpoint_degC,
                body_degC=self.body_degC,
            )
        )

    def _pace(self, now: float) -> Pace:
        done, planned = self.leg_points
        return Pace(
            self.forecast_soak,
            self.forecast_points,
            leg=self.leg,
            is_soaked=self.is_soaked,
            waited=0.0 if self.is_soaked else now - self.soak_started,
            share=done / planned if planned else 0.0,
            seen_soak=self.seen_soak,
            seen_points=self.seen_points,
        )

    def start_rebuild(self) -> None:
        """Have `record.h5` rebuilt by a process of its own; one at a time, and nobody waits for it."""
        self.rebuilt = monotonic()
        if self.rebuild is not None:
            if self.rebuild.poll() is None:
                return
            self.collect_rebuild()
        self.rebuild = start_consolidation(self.folder)

    def collect_rebuild(self) -> None:
        """Wait for the last rebuild and say if it failed; the journal is whole either way."""
        if self.rebuild is None:
            return
        _, complaint = self.rebuild.communicate()
        if self.rebuild.returncode:
            self.log.best_effort("record", f"record.h5 could not be rebuilt: {complaint.strip()}", "warning")
        self.rebuild = None
