"""Checks of a bench by itself."""

from collections.abc import Iterator, Mapping
from pathlib import Path

from runner.plan.bench_file import Instrument, Multiplexer
from runner.plan.finding import Check, Finding, in_bench
from runner.plan.simulation_file import Simulation


def something_is_there(instruments: Mapping[str, Instrument]) -> Iterator[Finding]:
    if not instruments:
        yield in_bench("instruments", what="no instrument is there; add at least 'chamber' and 'thermometer'")


def instruments_can_be_reached(
    instruments: Mapping[str, Instrument], simulation: Simulation | None
) -> Iterator[Finding]:
    if simulation is not None:
        return
    for role, instrument in instruments.items():
        if instrument.resource is None:
            what = "the key 'resource' is missing; add 'resource: \"TCPIP::192.0.2.10::5025::SOCKET\"'"
            yield in_bench("instruments", role, what=what)


def resources_differ(instruments: Mapping[str, Instrument]) -> Iterator[Finding]:
    taken: dict[str, str] = {}
    for role, instrument in instruments.items():
        if instrument.resource is None:
            continue
        if instrument.resource in taken:
            what = f"{instrument.resource!r} is the address of '{taken[instrument.resource]}' too; give each role its own"
            yield in_bench("instruments", role, "resource", what=what)
        taken.setdefault(instrument.resource, role)


def dialects_are_there(instruments: Mapping[str, Instrument], bench_path: Path | None) -> Iterator[Finding]:
    from runner.plan.load import dialect_path

    if bench_path is None:
        return
    for role, instrument in instruments.items():
        if not dialect_path(bench_path, instrument.dialect).is_file():
            what = f"no dialect file {instrument.dialect!r} beside the bench or among the shipped ones; correct the name"
            yield in_bench("instruments", role, "dialect", what=what)


def simulated_parts_have_relays(
    simulation: Simulation | None, multiplexer: Multiplexer | None
) -> Iterator[Finding]:
    if simulation is None:
        return
    for channel in simulation.parts:
        if multiplexer is not None and channel not in multiplexer.parts:
            what = f"channel {channel} has no relay; add it to 'instruments.multiplexer.parts'"
            yield in_bench("simulation", "parts", channel, what=what)


BENCH_CHECKS: tuple[Check, ...] = (
    something_is_there,
    instruments_can_be_reached,
    resources_differ,
    dialects_are_there,
    simulated_parts_have_relays,
)
