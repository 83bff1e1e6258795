"""Checks of a plan by itself."""

from collections.abc import Iterator

from runner.plan.finding import Check, Finding, in_plan
from runner.plan.plan_file import Bias, Extract, Limits, Part, Pulse, Remanence, Temperatures
from runner.plan.quantity import shown

NEAR_ROOM = 10.0  # K: a leg this near 25 degC can be brought to it


def temperatures_stand_once(temperatures: Temperatures) -> Iterator[Finding]:
    at = temperatures.at_degC
    for index, value in enumerate(at):
        if value in at[:index]:
            what = f"{value:g} degC stands twice; keep one of them"
            yield in_plan("temperatures", "at", index, what=what)


def temperatures_keep_the_limit(temperatures: Temperatures, limits: Limits) -> Iterator[Finding]:
    low, high = limits.chamber_degC
    for index, value in enumerate(temperatures.at_degC):
        if not low <= value <= high:
            what = (
                f"{value:g} degC is outside 'limits.chamber' ({low:g} to {high:g} degC);"
                " leave it out, or widen the limit if chamber and part stand it"
            )
            yield in_plan("temperatures", "at", index, what=what)


def body_limit_is_above_the_legs(temperatures: Temperatures, limits: Limits) -> Iterator[Finding]:
    hottest = max(temperatures.at_degC)
    if limits.body_degC <= hottest:
        what = f"{limits.body_degC:g} degC is not above the hottest leg ({hottest:g} degC); raise it or leave that leg out"
        yield in_plan("limits", "body", what=what)


def part_limits_are_above_the_legs(temperatures: Temperatures, parts: tuple[Part, ...]) -> Iterator[Finding]:
    hottest = max(temperatures.at_degC)
    for index, part in enumerate(parts):
        if part.limits and part.limits.body_degC is not None and part.limits.body_degC <= hottest:
            what = (
                f"{part.limits.body_degC:g} degC is not above the hottest leg ({hottest:g} degC);"
                " raise the limit or leave that leg out"
            )
            yield in_plan("parts", index, "limits", "body", what=what)


def soak_fits_the_night(temperatures: Temperatures, limits: Limits) -> Iterator[Finding]:
    least = temperatures.soak.hold * len(temperatures.at_degC)
    if least > limits.duration:
        what = (
            f"{limits.duration / 3600:g} h is less than {len(temperatures.at_degC)} legs need to hold alone"
            f" ({least / 3600:.3g} h); raise it, or shorten 'temperatures.soak.hold'"
        )
        yield in_plan("limits", "duration", what=what)


def something_is_measured(pulse: Pulse | None, bias: Bias | None) -> Iterator[Finding]:
    if pulse is None and bias is None:
        yield in_plan(
            what="neither 'pulse' nor 'bias' is there, so nothing would be measured; add one of them"
        )


def rail_keeps_the_limit(pulse: Pulse | None, limits: Limits) -> Iterator[Finding]:
    if pulse and pulse.rail > limits.rail:
        what = (
            f"{pulse.rail:g} V is above 'limits.rail' ({limits.rail:g} V); lower the rail or raise the limit"
        )
        yield in_plan("pulse", "rail", what=what)


def stop_at_keeps_the_limit(pulse: Pulse | None, limits: Limits) -> Iterator[Finding]:
    stop = pulse.stop_at.current if pulse and pulse.stop_at else None
    if stop is not None and stop > limits.current:
        what = f"{stop:g} A is above 'limits.current' ({limits.current:g} A); stop below the limit"
        yield in_plan("pulse", "stop_at", "current", what=what)


def stop_at_reaches_the_drops(pulse: Pulse | None, extract: Extract) -> Iterator[Finding]:
    drop = pulse.stop_at.drop if pulse and pulse.stop_at else None
    if drop is not None and drop <= max(extract.drops):
        what = (
            f"the climb would stop at a drop of {drop * 100:g} %, but 'extract.drops' asks for"
            f" {max(extract.drops) * 100:g} %; stop at a larger drop"
        )
        yield in_plan("pulse", "stop_at", "drop", what=what)


def repeats_have_time(pulse: Pulse | None) -> Iterator[Finding]:
    if pulse is None:
        return
    if pulse.rest < 10 * pulse.longest:
        what = (
            f"{shown(pulse.rest, 's')} is less than ten times the longest pulse ({shown(pulse.longest, 's')});"
            " the part needs longer to rest, so write a longer time"
        )
        yield in_plan("pulse", "rest", what=what)


def bias_keeps_the_limit(bias: Bias | None, limits: Limits) -> Iterator[Finding]:
    if bias and bias.largest > limits.current:
        what = f"a bias of {bias.largest:g} A is above 'limits.current' ({limits.current:g} A); lower the largest current"
        yield in_plan("bias", "current", "to", what=what)


def bias_keeps_the_parts_limits(
    bias: Bias | None, parts: tuple[Part, ...], limits: Limits
) -> Iterator[Finding]:
    for index, part in enumerate(parts):
        limit = part.limits.current if part.limits else None
        if bias and limit is not None and bias.largest > limit <= limits.current:
            what = f"{limit:g} A is below the largest bias current ({bias.largest:g} A); lower 'bias.current' or raise it"
            yield in_plan("parts", index, "limits", "current", what=what)


def part_limits_are_lower(parts: tuple[Part, ...], limits: Limits) -> Iterator[Finding]:
    for index, part in enumerate(parts):
        if part.limits is None:
            continue
        pairs = (
            ("current", part.limits.current, limits.current, "A"),
            ("body", part.limits.body_degC, limits.body_degC, "degC"),
            ("pulse_energy", part.limits.pulse_energy, limits.pulse_energy, "J"),
        )
        for key, own, common, unit in pairs:
            if own is not None and own > common:
                what = f"{own:g} {unit} is above 'limits.{key}' ({common:g} {unit}), which holds for all parts; lower it"
                yield in_plan("parts", index, "limits", key, what=what)


def parts_differ(parts: tuple[Part, ...]) -> Iterator[Finding]:
    for index, part in enumerate(parts):
        before = parts[:index]
        if part.label in [other.label for other in before]:
            yield in_plan(
                "parts", index, "label", what=f"the label {part.label!r} stands twice; give each part its own"
            )
        if part.channel in [other.channel for other in before]:
            owner = next(other.label for other in before if other.channel == part.channel)
            what = f"channel {part.channel} is taken by {owner!r} already"
            yield in_plan("parts", index, "channel", what=f"{what}; give each part a channel of its own")


def room_leg_is_there(extract: Extract, temperatures: Temperatures) -> Iterator[Finding]:
    if extract.reference != "25 degC":
        return
    nearest = min(temperatures.at_degC, key=lambda value: abs(value - 25.0))
    if abs(nearest - 25.0) > NEAR_ROOM:
        what = (
            f"'25 degC' needs a leg near 25 degC, but the nearest is {nearest:g} degC;"
            " add '25 degC' to 'temperatures.at', or write 'same temperature'"
        )
        yield in_plan("extract", "reference", what=what)


def remanence_has_its_pulses(remanence: Remanence | None, pulse: Pulse | None) -> Iterator[Finding]:
    if remanence and pulse is None:
        what = "the study takes rail and rest of its pulses from 'pulse', which is missing; add that section"
        yield in_plan("remanence", what=what)


def remanence_has_time(remanence: Remanence | None, pulse: Pulse | None) -> Iterator[Finding]:
    if remanence and pulse and remanence.width >= pulse.rest:
        what = (
            f"a pulse of {shown(remanence.width, 's')} leaves no rest of {shown(pulse.rest, 's')}; shorten it"
        )
        yield in_plan("remanence", "width", what=what)


def offset_keeps_the_limit(remanence: Remanence | None, limits: Limits) -> Iterator[Finding]:
    # The bias source carries limits.current as its protection, whichever winding it feeds.
    if remanence is None or remanence.winding is None:
        return
    for index, ampere_turns in enumerate(remanence.offset):
        current = abs(remanence.offset_current(ampere_turns))
        if current > limits.current:
            what = (
                f"{ampere_turns:g} A turns are {current:.3g} A in {remanence.winding} turns, above 'limits.current'"
                f" ({limits.current:g} A), which holds for the offset winding too; ask for less"
            )
            yield in_plan("remanence", "offset", index, what=what)


PLAN_CHECKS: tuple[Check, ...] = (
    temperatures_stand_once,
    temperatures_keep_the_limit,
    body_limit_is_above_the_legs,
    part_limits_are_above_the_legs,
    soak_fits_the_night,
    something_is_measured,
    rail_keeps_the_limit,
    stop_at_keeps_the_limit,
    stop_at_reaches_the_drops,
    repeats_have_time,
    bias_keeps_the_limit,
    bias_keeps_the_parts_limits,
    remanence_has_its_pulses,
    remanence_has_time,
    offset_keeps_the_limit,
    part_limits_are_lower,
    parts_differ,
    room_leg_is_there,
)
