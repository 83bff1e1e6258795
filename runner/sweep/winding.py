"""Winding resistance of a part at its temperature, before anything else is done to it: the coldest look at the winding.

It serves the extraction, and it tells an open or a shorted part before the first pulse does.
"""

import math

from runner.record import Flag
from runner.sweep.faults import BadReading, GivenUp
from runner.sweep.flags import judge_winding
from runner.sweep.night import Night
from runner.sweep.retry import Action, Kind, Phase


def measure_winding(night: Night, part: int) -> float:
    """Winding resistance by the ohmmeter [ohm]; NaN where there is none or it gave up. The bench is at rest afterwards.

    Raises:
        GivenUp: the part is open or shorted (end its points), or the leg or the run must end.
    """
    bench, spec = night.bench, night.loaded.plan.parts[part]
    ohmmeter = bench.ohmmeter
    if ohmmeter is None:
        return math.nan

    def read() -> float:
        bench.rest()
        bench.wire(spec.channel, "resistance")
        resistance = ohmmeter.read()
        judgement = judge_winding(resistance, spec.resistance_at(night.setpoint_degC))
        for flag, kind in ((Flag.PART_OPEN, Kind.OPEN), (Flag.PART_SHORT, Kind.SHORT)):
            if judgement.flags & flag:
                raise BadReading(kind, "part", "; ".join(judgement.texts))
        if not math.isfinite(resistance):
            raise BadReading(Kind.OVERLOAD, "ohmmeter", f"reads {resistance!r}")
        return resistance

    try:
        resistance = night.recovery.carry_out(Phase.CLIMB, read)
    except GivenUp as given_up:
        if given_up.action is not Action.FLAG:
            raise
        resistance = math.nan
    night.recovery.carry_out(Phase.CLIMB, bench.rest)
    return resistance
