"""The edge of a soak: send the chamber, read air and bodies, ask `judge_soak`, until every part is settled or given up.

One soak serves all parts. Every reading goes into the journal, and so does the decision with what it stands on.
"""

from functools import partial

from runner.errors import SafeStop
from runner.plan import Leg
from runner.sweep.faults import GivenUp
from runner.sweep.gentle import approach_setpoints
from runner.sweep.night import Night, Settled
from runner.sweep.requests import doze
from runner.sweep.retry import Action, Kind, Phase
from runner.sweep.soak import Soak, SoakRule, Trace, Verdict, judge_soak

_POLL = (5.0, 30.0)  # s between readings, at least and at most ...
_POLLS_IN_HOLD = 20  # ... and so many of them while a part must hold
_ARRIVED = 0.5  # K from a first set-point, after which the chamber is sent on
_RUNAWAY = 3.0  # K outside the plan's chamber limits; sensors and overshoot explain less


def soak(night: Night, leg: Leg) -> Settled:
    """Bring every part that is still measured to the leg's temperature.

    Returns:
        For each part where its body will end, and whether it settled.

    Raises:
        SafeStop: a limit was met or a stop asked for.
        GivenUp: an instrument failed, or a body sensor is not to be believed.
    """
    plan, bench, log = night.loaded.plan, night.bench, night.log
    rule = _rule(night)
    alive = [part for part in range(len(plan.parts)) if part not in night.dead_parts]
    air = night.recovery.carry_out(Phase.SOAK, bench.air)
    setpoints = list(approach_setpoints(air, leg.setpoint_degC, plan.limits.chamber_degC))
    chamber = night.loaded.bench.chamber
    ramp = abs(leg.setpoint_degC - air) / chamber.ramp if chamber is not None else 0.0
    night.air_at_start = air
    heading = setpoints.pop(0)
    night.recovery.carry_out(Phase.SOAK, partial(bench.heat_to, heading))
    log.event("leg", f"leg {leg.index + 1}: chamber from {air:.1f} degC to {leg.setpoint_degC:g} degC")
    traces = {part: Trace(leg.setpoint_degC, ramp) for part in alive}
    verdicts: dict[int, Verdict] = {}
    poll = min(max(rule.hold / _POLLS_IN_HOLD, _POLL[0]), _POLL[1])
    while True:
        now = doze(night.clock, poll, night.requests)
        night.check(now)
        air = night.recovery.carry_out(Phase.SOAK, bench.air)
        night.journal.chamber(now, air)
        _watch_air(night, air)
        if setpoints and abs(air - heading) < _ARRIVED:
            heading = setpoints.pop(0)
            night.recovery.carry_out(Phase.SOAK, partial(bench.heat_to, heading))
        for part in alive:
            body = night.recovery.carry_out(Phase.SOAK, partial(bench.body, plan.parts[part].channel))
            night.journal.body(now, part, body)
            night.watch_body(part, body, body)
            traces[part] = traces[part].with_sample(now, body, air)
            verdicts[part] = judge_soak(rule, traces[part])
        night.report(-1, "soak", now)
        if not setpoints and all(one.soak is not Soak.WAIT for one in verdicts.values()):
            return _decided(night, leg, traces, verdicts)


def _decided(night: Night, leg: Leg, traces: dict[int, Trace], verdicts: dict[int, Verdict]) -> Settled:
    settled = Settled()
    for part, verdict in verdicts.items():
        minutes = (traces[part].time[-1] - traces[part].time[0]) / 60
        where = f"{night.label(part)} at {leg.setpoint_degC:g} degC"
        text = f"{where}: {verdict.soak.value} after {minutes:.1f} min; {verdict.why}"
        night.log.event("soak", text, "info" if verdict.soak is Soak.SETTLED else "warning")
        if verdict.is_stuck:
            # Without a body sensor the limit on body temperature cannot be watched.
            raise GivenUp(Action.END_LEG, Kind.STUCK, f"{night.label(part)}: {verdict.why}")
        settled.is_settled[part] = verdict.soak is Soak.SETTLED
        settled.body_degC[part] = traces[part].body_degC[-1]
    return settled


def _rule(night: Night) -> SoakRule:
    soak = night.loaded.plan.temperatures.soak
    return SoakRule(soak.within, soak.drift, soak.hold, soak.give_up)


def _watch_air(night: Night, air: float) -> None:
    low, high = night.loaded.plan.limits.chamber_degC
    # On its way in from a room outside the limits the air may be there, as long as it does not go farther out.
    farther = abs(air - night.setpoint_degC) > abs(night.air_at_start - night.setpoint_degC) + _RUNAWAY
    if farther and not low - _RUNAWAY <= air <= high + _RUNAWAY:
        raise SafeStop(f"chamber air at {air:.1f} degC, limits {low:g} to {high:g} degC")
