"""Checks of a plan against its bench."""

from collections.abc import Iterator, Mapping

from runner.plan.bench_file import (
    BiasSource,
    Chamber,
    Digitizer,
    Fixture,
    Instrument,
    Multiplexer,
    Pulser,
    Supply,
)
from runner.plan.finding import Check, Finding, in_plan
from runner.plan.plan_file import Bias, Part, Pulse, Remanence, Temperatures
from runner.plan.quantity import shown

PULSE_ROLES = ("supply", "pulser", "digitizer")
BIAS_ROLES = ("lcr", "bias_source")
ALWAYS = ("chamber", "thermometer")


def roles_are_there(
    instruments: Mapping[str, Instrument], pulse: Pulse | None, bias: Bias | None
) -> Iterator[Finding]:
    for keys, roles, wanted in (
        (("temperatures",), ALWAYS, True),
        (("pulse",), PULSE_ROLES, pulse is not None),
        (("bias",), BIAS_ROLES, bias is not None),
    ):
        missing = [role for role in roles if role not in instruments]
        if wanted and missing:
            named = " and ".join(f"'{role}'" for role in missing)
            what = f"the bench has no {named}, which this needs; add it to the bench or take '{keys[0]}' out"
            yield in_plan(*keys, what=what)


def pulse_fixture_is_described(fixture: Fixture, pulse: Pulse | None) -> Iterator[Finding]:
    missing = [name for name in ("bank", "shunt") if getattr(fixture, name) is None]
    if pulse is not None and missing:
        named = " and ".join(f"'fixture.{name}'" for name in missing)
        yield in_plan(
            "pulse",
            what=f"the bench has no {named}, which pulses need; add it to the bench or take 'pulse' out",
        )


def chamber_reaches_the_legs(temperatures: Temperatures, chamber: Chamber | None) -> Iterator[Finding]:
    if chamber is None:
        return
    low, high = chamber.range_degC
    for index, value in enumerate(temperatures.at_degC):
        if not low <= value <= high:
            what = f"{value:g} degC is outside the range of the bench's chamber ({low:g} to {high:g} degC); leave it out"
            yield in_plan("temperatures", "at", index, what=what)


def supply_reaches_the_rail(pulse: Pulse | None, supply: Supply | None) -> Iterator[Finding]:
    if pulse and supply and pulse.rail > supply.maximum.voltage:
        what = (
            f"{pulse.rail:g} V is above the supply's maximum ({supply.maximum.voltage:g} V); lower the rail"
        )
        yield in_plan("pulse", "rail", what=what)


def pulser_reaches_the_widths(pulse: Pulse | None, pulser: Pulser | None) -> Iterator[Finding]:
    if pulse is None or pulser is None:
        return
    if pulse.longest > pulser.maximum.width:
        most = shown(pulser.maximum.width, "s")
        what = (
            f"a pulse of {shown(pulse.longest, 's')} is longer than the pulser's maximum ({most}); shorten it"
        )
        yield in_plan("pulse", "width", "to", what=what)


def digitizer_holds_the_widths(pulse: Pulse | None, digitizer: Digitizer | None) -> Iterator[Finding]:
    if pulse is None or digitizer is None:
        return
    window = digitizer.samples * (1 - digitizer.pretrigger) * digitizer.intervals[-1]
    if pulse.longest > window:
        what = (
            f"a pulse of {shown(pulse.longest, 's')} does not fit into the digitizer's longest capture"
            f" ({shown(window, 's')} after the trigger); shorten it, or give the bench more samples or longer intervals"
        )
        yield in_plan("pulse", "width", "to", what=what)


def digitizer_sees_the_rail(pulse: Pulse | None, digitizer: Digitizer | None) -> Iterator[Finding]:
    if pulse is None or digitizer is None:
        return
    largest = digitizer.ranges.voltage[-1]
    if pulse.rail > largest:
        what = (
            f"{pulse.rail:g} V is above the digitizer's largest voltage range ({largest:g} V); lower the rail"
        )
        yield in_plan("pulse", "rail", what=what)


def shunt_range_sees_the_current(
    pulse: Pulse | None, digitizer: Digitizer | None, fixture: Fixture
) -> Iterator[Finding]:
    if pulse is None or digitizer is None or fixture.shunt is None:
        return
    seen = digitizer.ranges.shunt[-1] / fixture.shunt.resistance.value
    wanted = pulse.stop_at.current if pulse.stop_at and pulse.stop_at.current else None
    if wanted is not None and wanted > seen:
        what = f"{wanted:g} A is above what shunt and digitizer can show ({seen:.3g} A); stop earlier"
        yield in_plan("pulse", "stop_at", "current", what=what)


def source_reaches_the_bias(bias: Bias | None, bias_source: BiasSource | None) -> Iterator[Finding]:
    if bias and bias_source and bias.largest > bias_source.maximum.current:
        most = bias_source.maximum.current
        what = f"a bias of {bias.largest:g} A is above the bias source's maximum ({most:g} A); lower it"
        yield in_plan("bias", "current", "to", what=what)


def parts_have_relays(parts: tuple[Part, ...], multiplexer: Multiplexer | None) -> Iterator[Finding]:
    if multiplexer is None:
        if len(parts) > 1:
            what = f"{len(parts)} parts need a 'multiplexer' in the bench, which has none; keep one part or add it"
            yield in_plan("parts", what=what)
        return
    known = ", ".join(str(channel) for channel in sorted(multiplexer.parts))
    for index, part in enumerate(parts):
        if part.channel not in multiplexer.parts:
            what = f"channel {part.channel} is not among the multiplexer's parts ({known}); use one of these"
            yield in_plan("parts", index, "channel", what=what)


def fixture_can_reverse(remanence: Remanence | None, pulser: Pulser | None) -> Iterator[Finding]:
    if remanence and pulser and remanence.polarities == "both" and pulser.polarities != "both":
        what = "the bench's fixture cannot reverse the pulse; write 'forward', or 'polarities: both' at the bench's pulser"
        yield in_plan("remanence", "polarities", what=what)


def pulser_reaches_the_test_pulse(
    remanence: Remanence | None, pulser: Pulser | None, digitizer: Digitizer | None
) -> Iterator[Finding]:
    if remanence is None:
        return
    if pulser and remanence.width > pulser.maximum.width:
        most = shown(pulser.maximum.width, "s")
        what = f"a pulse of {shown(remanence.width, 's')} is longer than the pulser's maximum ({most}); shorten it"
        yield in_plan("remanence", "width", what=what)
    if digitizer:
        window = digitizer.samples * (1 - digitizer.pretrigger) * digitizer.intervals[-1]
        if remanence.width > window:
            what = (
                f"a pulse of {shown(remanence.width, 's')} does not fit into the digitizer's longest capture"
                f" ({shown(window, 's')} after the trigger); shorten it"
            )
            yield in_plan("remanence", "width", what=what)


def offset_can_be_fed(
    remanence: Remanence | None, bias_source: BiasSource | None, multiplexer: Multiplexer | None
) -> Iterator[Finding]:
    if remanence is None or not any(remanence.offset):
        return
    if bias_source is None:
        what = "the bench has no 'bias_source' to feed the offset winding; add it to the bench or take 'offset' out"
        yield in_plan("remanence", "offset", what=what)
    elif multiplexer is None or multiplexer.paths.offset is None or multiplexer.paths.pulse is None:
        what = (
            "the bench's multiplexer does not connect an offset winding; write the relays of both paths,"
            " 'paths: {pulse: ..., offset: ...}', or take 'offset' out"
        )
        yield in_plan("remanence", "offset", what=what)
    if bias_source is None or remanence.winding is None:
        return
    most = bias_source.maximum.current
    for index, ampere_turns in enumerate(remanence.offset):
        current = abs(remanence.offset_current(ampere_turns))
        if current > most:
            what = (
                f"{ampere_turns:g} A turns are {current:.3g} A in {remanence.winding} turns, above the bias source's"
                f" maximum ({most:g} A); ask for less, or wind more turns"
            )
            yield in_plan("remanence", "offset", index, what=what)


JOINT_CHECKS: tuple[Check, ...] = (
    roles_are_there,
    pulse_fixture_is_described,
    chamber_reaches_the_legs,
    supply_reaches_the_rail,
    pulser_reaches_the_widths,
    digitizer_holds_the_widths,
    digitizer_sees_the_rail,
    shunt_range_sees_the_current,
    source_reaches_the_bias,
    parts_have_relays,
    fixture_can_reverse,
    pulser_reaches_the_test_pulse,
    offset_can_be_fed,
)
