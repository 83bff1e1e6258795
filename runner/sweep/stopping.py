"""When a climb has seen enough: `stop_at` judged on the last point."""

from dataclasses import dataclass

from runner.sweep.look import Look


@dataclass(frozen=True, slots=True)
class StopAt:
    """The plan's words: largest current wanted [A], largest drop of inductance wanted (fraction); None for either."""

    current: float | None = None
    drop: float | None = None


def judge_stop(look: Look, initial_slope: float, stop: StopAt) -> str | None:
    """Why the climb ends after this point, or None.

    Args:
        look: the point just measured.
        initial_slope: di/dflux of the first pulse of the climb, 1/L_0 [1/H].
        stop: the plan's rule.
    """
    if stop.current is not None and look.peak >= stop.current:
        return f"{look.peak:.3g} A reached, {stop.current:g} A asked for"
    if stop.drop is not None and look.end_slope > 0 and initial_slope > 0:
        drop = 1 - initial_slope / look.end_slope
        if drop >= stop.drop:
            return f"differential inductance down by {drop:.0%}, {stop.drop:.0%} asked for"
    return None
