"""A plan carried out, from taking the bench to giving it back: the whole run in one place.

Whatever happens between `_measure` and its end, the bench reaches its safe state and the journal says why. What may end
a run: nothing left to do, a limit or a request (`SafeStop`), an instrument that is lost (`GivenUp`), the disk
(`RecordError`), a second Ctrl-C or SIGTERM (`StopAtOnce`), or a fault of ours, which crashes only after the bench is safe.
"""

import contextlib
import uuid
from contextlib import ExitStack
from dataclasses import dataclass
from functools import partial
from pathlib import Path
from typing import Literal

from runner.errors import BenchError, Fault, InputError, KneemapError, SafeStop
from runner.plan import Leg, LoadedPlan, Point, Programme, expand, forecast
from runner.record import Journal, PartRow, RunHeader
from runner.sweep.bench import Bench
from runner.sweep.biasing import bias_series
from runner.sweep.climb import climb
from runner.sweep.clock import Clock
from runner.sweep.faults import GivenUp
from runner.sweep.heart import Heart, NoHeart
from runner.sweep.identities import instrument_rows
from runner.sweep.locks import bench_locked
from runner.sweep.logbook import Logbook
from runner.sweep.night import Night, Settled
from runner.sweep.notify import Notifier
from runner.sweep.opening import Site, on_site, ratings, roles_needed, safe_rule
from runner.sweep.progress import Progress, Watch
from runner.sweep.recovery import Recovery
from runner.sweep.remanence_series import remanence_series
from runner.sweep.requests import StopAtOnce, StopRequests
from runner.sweep.resume import NOTHING, Behind, look_behind
from runner.sweep.retry import Action, Phase
from runner.sweep.soaking import soak
from runner.sweep.winding import measure_winding
from runner.versions import library_versions, software

Status = Literal["finished", "stopped", "failed"]
_RESUMED_AFTER = 1.0  # s after the last entry of the journal, at which a resumed simulated night goes on


@dataclass(frozen=True, slots=True)
class Outcome:
    """How a run ended.

    Attributes:
        status: "finished", "stopped" (safely, before its end) or "failed" (the safe state could not be confirmed).
        points: recorded in all sessions; flagged: how many of them carry a flag.
        reason: why it ended, in one sentence.
    """

    status: Status
    points: int
    flagged: int
    reason: str


def _nobody(progress: Progress) -> None:
    pass


def carry_out(loaded: LoadedPlan, folder: Path, *, resume: bool = False, watch: Watch = _nobody) -> Outcome:
    """Carry a plan out into a run folder, or go on with a run that was stopped.

    Args:
        loaded: plan and bench.
        folder: of the run.
        resume: the folder holds a run that goes on.
        watch: called with the progress after each point and each poll of a soak.

    Returns:
        How it ended; the bench is in its safe state unless the status is "failed".

    Raises:
        InputError: the plan breaks a limit, the folder is no run or holds one already; nothing was touched.
        BenchError: the bench is in use, or an instrument does not answer at the start; nothing is left on.
        RecordError: the journal cannot be begun.
    """
    _refuse_broken_limits(loaded)
    requests = StopRequests()
    with ExitStack() as stack:
        stack.enter_context(requests.listening())
        resources = [instrument.resource or "" for instrument in loaded.bench.instruments.values()]
        if loaded.bench.simulation is None:
            stack.enter_context(bench_locked(resources))
        behind = look_behind(folder) if resume else NOTHING
        site = stack.enter_context(on_site(loaded, roles_needed(loaded.plan, loaded.bench)))
        return carry_out_at(site, loaded, folder, behind=behind, requests=requests, watch=watch)


def carry_out_at(
    site: Site,
    loaded: LoadedPlan,
    folder: Path,
    *,
    behind: Behind = NOTHING,
    requests: StopRequests | None = None,
    watch: Watch = _nobody,
) -> Outcome:
    """As `carry_out`, on a bench that is there already and that nobody else uses.

    Args:
        behind: what the run has behind it; `NOTHING` for a new one.
    """
    # The clock is made before the journal that its first entry needs, and the heart after it: it reports there.
    beats: list[Heart] = [NoHeart()]
    not_before = behind.last_time + _RESUMED_AFTER if behind.last_time else 0.0
    clock = site.clock(not_before=not_before, between=lambda: beats[-1].beat())
    programme = expand(loaded.plan)
    with _journal(loaded, programme, folder, clock, resume=behind is not NOTHING) as journal:
        journal.session(software(), library_versions(), clock.now())
        session = _Session(
            loaded, programme, folder, site, clock, journal, requests or StopRequests(), behind, watch, beats
        )
        return session.run()


class _Session:
    """One session of a run: from opening the instruments to the safe state."""

    def __init__(
        self,
        loaded: LoadedPlan,
        programme: Programme,
        folder: Path,
        site: Site,
        clock: Clock,
        journal: Journal,
        requests: StopRequests,
        behind: Behind,
        watch: Watch,
        beats: list[Heart],
    ) -> None:
        self.loaded, self.programme, self.folder = loaded, programme, folder
        self.site, self.clock, self.journal = site, clock, journal
        self.requests, self.behind, self.watch = requests, behind, watch
        self.beats = beats
        self.log = Logbook(journal, clock)
        self.notifier = Notifier(lambda text: self.log.best_effort("notify", text, "warning"))

    def run(self) -> Outcome:
        rule = safe_rule(self.loaded.plan, self.loaded.bench)
        self.beats.append(
            self.site.heart(rule, self.folder, lambda text: self.log.best_effort("watchdog", text, "error"))
        )
        try:
            opened, lost = self.site.open_all()
        except BaseException:
            self.beats[-1].stop()  # nothing was said to any instrument yet
            raise
        bench = Bench(opened, ratings(self.loaded.plan, self.loaded.bench), self.clock)
        night = self._night(bench)
        status: Status = "finished"
        reason = "every point of the plan is done"
        crash: BaseException | None = None
        try:
            if lost:
                raise BenchError("\n".join(str(error) for error in lost))
            self._start(bench, night)
            self._legs(night)
        except SafeStop as stop:
            status, reason = "stopped", str(stop)
        except GivenUp as given_up:
            status, reason = "stopped", str(given_up)
        except StopAtOnce as stop:
            status, reason = "stopped", str(stop)
        except KneemapError as error:
            status, reason, crash = "stopped", str(error), error
        except BaseException as error:
            status, reason, crash = "stopped", f"{type(error).__name__}: {error}", error
        return self._end(bench, night, status, reason, crash)

    def _beat(self) -> None:
        self.beats[-1].beat()

    # ---- beginning

    def _night(self, bench: Bench) -> Night:
        outlook = forecast(self.loaded.plan, self.loaded.bench).times.legs
        ended = self.behind.ended_legs
        now = self.clock.now()
        with_start = self.behind.run_started if self.behind.run_started else now
        return Night(
            loaded=self.loaded,
            programme=self.programme,
            bench=bench,
            clock=self.clock,
            folder=self.folder,
            journal=self.journal,
            log=self.log,
            recovery=Recovery(
                bench, self.log, lambda text: self.notifier.tell("kneemap: fault", text), self._beat
            ),
            requests=self.requests,
            behind=self.behind,
            watch=self.watch,
            forecast_soak=tuple(0.0 if i in ended else leg.ramp + leg.soak for i, leg in enumerate(outlook)),
            forecast_points=tuple(0.0 if i in ended else leg.points for i, leg in enumerate(outlook)),
            beat=self._beat,
            run_started=with_start,
            started=now,
            dead_parts=set(self.behind.dead_parts),
        )

    def _start(self, bench: Bench, night: Night) -> None:
        """Who is there, is anything wrong with them, limits into them; nothing is switched on yet."""
        for role in list(bench.roles):
            try:
                night.recovery.carry_out(Phase.START, partial(bench.meet, role))
            except GivenUp as given_up:
                if given_up.action is not Action.FLAG:
                    raise BenchError(str(given_up)) from given_up
                bench.do_without(role)
        for row in instrument_rows(self.loaded.bench, bench.identities, self.site.resources()):
            was = self.behind.identities.get(row.role, row.idn)
            if was != row.idn:
                text = f"{row.name}: {row.idn!r} answers, {was!r} did before; is the bench file's calibration still its own?"
                self.log.event("start", text, "warning")
            self.journal.instrument(row)
        self.journal.state("acquiring")
        self.log.event("start", f"{len(bench.roles)} instruments answer; limits are set in them")
        self.notifier.tell(
            "kneemap: started", f"{self.loaded.plan.title}: {len(self.programme.points)} points"
        )

    # ---- the night

    def _legs(self, night: Night) -> None:
        for leg in self.programme.legs:
            if leg.index in self.behind.ended_legs or not self._is_left(night, leg):
                continue
            night.leg, night.is_soaked, night.setpoint_degC = leg.index, False, leg.setpoint_degC
            night.soak_started = self.clock.now()
            self.log.leg = leg.index
            self.journal.leg_begin(leg.index, leg.setpoint_degC, night.soak_started)
            night.recovery.fresh_leg()
            try:
                self._leg(night, leg)
            except GivenUp as given_up:
                if given_up.action is not Action.END_LEG:
                    raise
                self.log.event("leg", f"leg {leg.index + 1} ended early: {given_up}", "error")
                self._skip_rest(night, leg, given_up)
            night.recovery.carry_out(Phase.CLIMB, night.bench.rest)
            self.journal.leg_end(leg.index, self.clock.now())
            self.log.leg = -1
            night.start_rebuild()

    def _leg(self, night: Night, leg: Leg) -> None:
        parts = range(len(self.loaded.plan.parts))
        night.leg_points = (0, sum(len(self._left(night, leg.index, part)) for part in parts))
        for role in night.bench.roles:
            try:
                night.recovery.carry_out(Phase.SOAK, partial(night.bench.check_identity, role))
            except GivenUp as given_up:
                # One that only measures may be back by the time it is needed; then is the time to give it up.
                if given_up.action is Action.STOP:
                    raise
        settled = soak(night, leg)
        night.is_soaked = True
        night.seen_soak += self.clock.now() - night.soak_started
        for part in parts:
            if self._left(night, leg.index, part):
                self._part(night, leg, part, settled)

    def _part(self, night: Night, leg: Leg, part: int, settled: Settled) -> None:
        points = self._left(night, leg.index, part)
        try:
            resistance = measure_winding(night, part)
        except GivenUp as given_up:
            night.absorb(given_up, points)
            night.recovery.carry_out(Phase.CLIMB, night.bench.rest)
            return
        climb(night, leg.index, part, settled=settled, resistance=resistance)
        remanence_series(night, leg.index, part, settled=settled, resistance=resistance)
        bias_series(night, leg.index, part, settled=settled, resistance=resistance)

    def _skip_rest(self, night: Night, leg: Leg, given_up: GivenUp) -> None:
        for part in range(len(self.loaded.plan.parts)):
            points = [one for one in self._left(night, leg.index, part) if one.plan_index > night.last_index]
            night.skip(points, str(given_up), given_up.flags)

    def _is_left(self, night: Night, leg: Leg) -> bool:
        return any(self._left(night, leg.index, part) for part in range(len(self.loaded.plan.parts)))

    @staticmethod
    def _left(night: Night, leg: int, part: int) -> list[Point]:
        return [
            *night.to_do(leg, part, "pulse"),
            *night.to_do(leg, part, "remanence"),
            *night.to_do(leg, part, "bias"),
        ]

    # ---- the end

    def _end(
        self, bench: Bench, night: Night, status: Status, reason: str, crash: BaseException | None
    ) -> Outcome:
        # First the bench, then the log: a disk that refuses, or takes its time to, must not keep an output on.
        with self.requests.shielded():
            steps: list[str] = []
            report = bench.make_safe(safe_rule(self.loaded.plan, self.loaded.bench), steps.append)
            for instrument in bench.roles.values():
                instrument.close()
            self.beats[-1].stop()
            self.beats.append(NoHeart())
            with contextlib.suppress(KneemapError, OSError):
                night.write_notes()
            is_finished = status == "finished"
            self.log.best_effort("end" if is_finished else "stop", reason, "info" if is_finished else "error")
            for step in steps:
                self.log.best_effort("safe_state", step)
            self.log.best_effort("safe_state", str(report), "info" if report.is_confirmed else "error")
            if not report.is_confirmed:
                status, reason = "failed", f"{reason}; {report}"
            self._close_record(night, status)
            outcome = Outcome(
                status, self.behind.points + night.points, self.behind.flagged + night.flagged, reason
            )
            self.notifier.tell(
                f"kneemap: {status}",
                f"{self.loaded.plan.title}: {outcome.points} points, {outcome.flagged} flagged. {reason}",
            )
            self.notifier.close()
        if isinstance(crash, BenchError) and night.points == 0:
            raise crash if report.is_confirmed else BenchError(reason) from crash
        if crash is not None and not isinstance(crash, KneemapError):
            raise crash
        return outcome

    def _close_record(self, night: Night, status: Status) -> None:
        try:
            self.journal.state(status)
            self.journal.close()
            night.start_rebuild()
        except (KneemapError, OSError):
            # The journal said so when it first refused; what it holds is safe, and a resume rebuilds the record.
            return
        finally:
            night.collect_rebuild()


def _refuse_broken_limits(loaded: LoadedPlan) -> None:
    broken = [one for one in forecast(loaded.plan, loaded.bench).limits if not one.is_kept]
    if broken:
        raise InputError([Fault(f"{loaded.plan_path}: {one.name}", one.text) for one in broken])


def _journal(
    loaded: LoadedPlan, programme: Programme, folder: Path, clock: Clock, *, resume: bool
) -> Journal:
    if resume:
        return Journal.reopen(folder, plan=loaded.plan_bytes, bench=loaded.bench_bytes)
    header = RunHeader(
        run_id=str(uuid.uuid4()),
        title=loaded.plan.title,
        kind="plan",
        start=clock.now(),
        plan_name=str(loaded.plan_path.absolute()),
        plan_bytes=loaded.plan_bytes,
        bench_name=str(loaded.bench_path.absolute()),
        bench_bytes=loaded.bench_bytes,
        parts=tuple(
            PartRow(part.label, _description(part.inductance, part.rated_current), part.channel)
            for part in loaded.plan.parts
        ),
        leg_setpoints=tuple(leg.setpoint_degC for leg in programme.legs),
    )
    return Journal.create(folder, header)


def _description(inductance: float, rated_current: float) -> str:
    return f"{inductance * 1e6:g} uH, {rated_current:g} A"
