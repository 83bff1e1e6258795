"""Look at a bench without switching anything on: who answers, what they complain of, whether they fit the bench file.

Each instrument is asked on its own, so that one which is off does not hide the others. Settings that the bench file
promises (ranges, intervals, maxima) are set and read back where that is harmless: outputs stay off throughout.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

from drivers import DigitizerSetup, InstrumentError, LcrReading
from runner.plan import Bench, LoadedBench
from runner.sweep.locks import bench_locked
from runner.sweep.opening import VisaSite, on_site

_CLOSE = 0.02  # of a value promised, that an instrument may read back differently


@dataclass(frozen=True, slots=True)
class Probed:
    """One instrument of the bench.

    Attributes:
        answers: whether it answers at all.
        identity: who it says it is.
        capabilities: what its dialect can do beyond the least, in words.
        disagreements: what stood in its error queue, and where it does not do what the bench file says; if it does not
            answer, why.
    """

    role: str
    resource: str
    answers: bool
    identity: str = ""
    capabilities: str = ""
    disagreements: tuple[str, ...] = ()


def probe(loaded: LoadedBench) -> tuple[Probed, ...]:
    """Ask every instrument of a bench.

    Returns:
        One entry a role, in the order of the bench file; nothing is left on.

    Raises:
        BenchError: the bench is in use, or a simulated one does not start.
        InputError: a dialect file is wrong.
    """
    resources = [one.resource for one in loaded.bench.instruments.values() if one.resource]
    with (
        bench_locked([] if loaded.bench.simulation is not None else resources),
        on_site(loaded, loaded.bench.instruments) as site,
    ):
        return tuple(_probe(site, role, loaded.bench) for role in site.resources())


def _probe(site: VisaSite, role: str, bench: Bench) -> Probed:
    resource = site.resources()[role]
    try:
        instrument = site.open(role)
    except InstrumentError as error:
        return Probed(role, resource, answers=False, disagreements=(str(error),))
    try:
        identity = instrument.identify()
        complaints = [f"its error queue held {text}" for text in instrument.errors()]
        instrument.safe()
        return Probed(
            role,
            resource,
            answers=True,
            identity=identity.text,
            capabilities=", ".join(instrument.capabilities()),
            disagreements=(*complaints, *disagreements(instrument, bench)),
        )
    except InstrumentError as error:
        return Probed(role, resource, answers=False, disagreements=(str(error),))
    finally:
        instrument.close()


def disagreements(instrument: Any, bench: Bench) -> list[str]:
    """Where an instrument does not do what the bench file says, one sentence each; its output stays off."""
    check = _CHECKS.get(instrument.role)
    return check(instrument, bench) if check is not None else []


def _tried(what: str, action: Callable[[], object]) -> list[str]:
    try:
        action()
    except InstrumentError as error:
        return [f"{what}: {error}"]
    return []


def _supply(supply: Any, bench: Bench) -> list[str]:
    assert bench.supply is not None
    most = bench.supply.maximum
    found = _tried(f"maximum of {most.voltage:g} V", lambda: supply.protect(most.voltage, most.current))
    found += _tried(f"{most.voltage:g} V, {most.current:g} A", lambda: supply.set(most.voltage, most.current))
    return found + _tried("back to 0 V", lambda: supply.set(0.0, most.current))


def _pulser(pulser: Any, bench: Bench) -> list[str]:
    assert bench.pulser is not None
    width = bench.pulser.maximum.width
    return _tried(f"pulse of {width:g} s", lambda: pulser.set(width))


def _digitizer(digitizer: Any, bench: Bench) -> list[str]:
    assert bench.digitizer is not None
    model = bench.digitizer
    pretrigger = max(round(model.pretrigger * model.samples), 1)
    wanted = [
        DigitizerSetup(model.samples, interval, pretrigger, model.ranges.voltage[0], model.ranges.shunt[0])
        for interval in model.intervals
    ]
    wanted += [
        DigitizerSetup(model.samples, model.intervals[0], pretrigger, size, model.ranges.shunt[0])
        for size in model.ranges.voltage
    ]
    wanted += [
        DigitizerSetup(model.samples, model.intervals[0], pretrigger, model.ranges.voltage[0], size)
        for size in model.ranges.shunt
    ]
    found = []
    for setup in dict.fromkeys(wanted):
        try:
            got = digitizer.set(setup)
        except InstrumentError as error:
            found.append(str(error))
            continue
        for name in ("samples", "interval", "voltage_range", "shunt_range"):
            asked, answered = getattr(setup, name), getattr(got, name)
            if abs(answered - asked) > _CLOSE * asked:
                found.append(f"{name} of {asked:g} is answered by {answered:g}")
    return found


def _bias_source(source: Any, bench: Bench) -> list[str]:
    assert bench.bias_source is not None
    most = bench.bias_source.maximum.current
    found = _tried(f"{most:g} A", lambda: source.set(most))
    return found + _tried("back to 0 A", lambda: source.set(0.0))


def _chamber(chamber: Any, bench: Bench) -> list[str]:
    assert bench.chamber is not None
    low, high = bench.chamber.range_degC
    before = chamber.setpoint()
    found = _tried(f"{low:g} degC", lambda: chamber.set(low)) + _tried(
        f"{high:g} degC", lambda: chamber.set(high)
    )
    return found + _tried("back to its set-point", lambda: chamber.set(before))


def _thermometer(thermometer: Any, bench: Bench) -> list[str]:
    channels = sorted(bench.multiplexer.parts) if bench.multiplexer is not None else [1]
    found = []
    for channel in channels:
        try:
            degC = thermometer.read(channel)
        except InstrumentError as error:
            found.append(f"channel {channel}: {error}")
            continue
        if not -100.0 < degC < 300.0:
            found.append(f"channel {channel} reads {degC:g} degC; is its sensor connected?")
    return found


def _lcr(lcr: Any, bench: Bench) -> list[str]:
    reading: LcrReading = lcr.read()  # open terminals: an overload is no disagreement
    return [] if reading.overload or reading.inductance == reading.inductance else ["it reads no number"]


_CHECKS: dict[str, Callable[[Any, Bench], list[str]]] = {
    "supply": _supply,
    "pulser": _pulser,
    "digitizer": _digitizer,
    "lcr": _lcr,
    "bias_source": _bias_source,
    "chamber": _chamber,
    "thermometer": _thermometer,
}
