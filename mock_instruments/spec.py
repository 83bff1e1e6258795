"""What a simulated bench is: read from a plain mapping of SI numbers, with a default for everything left out.

The mapping says what the bench file *states* (`bench`), which parts stand on the bench (`parts`) and how
far the truth departs from what is stated (`departures`). A departure that is not given is drawn from the
seed: normal, ``spread`` times the stated standard uncertainty, and while ``spread`` is below 1 clipped at
twice that. Each draw has a stream of its own, named after the constant, so that giving one explicitly
leaves the others as they were.
"""

import zlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, fields
from typing import Any, cast, get_args

import numpy as np

from mock_instruments.flux import FluxLaw, Law

DEFAULT_SPREAD = 0.15
DEFAULT_TIME_CONSTANTS = (240.0, 900.0)  # s: winding and core, then bobbin and board

# Per law: figures a part gets when the mapping is silent. Common trade magnitudes, not any product's.
LAW_DEFAULTS: dict[str, dict[str, float]] = {
    # MnZn ferrite with a ground gap: B_s falls by about a quarter from 25 to 125 degC.
    "gapped": {
        "inductance": 22e-6,
        "knee": 10.0,
        "sharpness": 6.0,
        "floor": 0.06,
        "knee_drift": -2.6e-3,
        "inductance_drift": 2e-4,
        "inductance_curvature": -1.5e-6,
        "resistance": 18e-3,
    },
    # Iron powder: soft, hardly any temperature in it.
    "powder": {
        "inductance": 47e-6,
        "knee": 7.5,
        "floor": 0.03,
        "knee_drift": -3e-4,
        "inductance_drift": 1.2e-4,
        "resistance": 24e-3,
    },
    "remanent": {
        "inductance": 33e-6,
        "knee": 8.0,
        "sharpness": 4.0,
        "floor": 0.05,
        "knee_drift": -1.5e-3,
        "inductance_drift": 3e-4,
        "memory": 0.15,
        "resistance": 21e-3,
    },
    "stepped": {
        "inductance": 39e-6,
        "knee": 12.0,
        "sharpness": 6.0,
        "floor": 0.05,
        "knee_drift": -2.6e-3,
        "inductance_drift": 2e-4,
        "first_knee": 0.35,
        "first_share": 0.45,
        "resistance": 20e-3,
    },
    "tanh": {"inductance": 100e-6, "knee": 10.0, "floor": 0.0, "resistance": 20e-3},
    "linear": {"inductance": 100e-6, "knee": 1.0, "floor": 0.0, "resistance": 20e-3},
}


@dataclass(frozen=True, slots=True)
class PartSpec:
    """One simulated part: its law, its winding at 20 degC [ohm] and how it warms.

    ``offset_turns``: of a second winding for an offset field, beside the ``turns`` of the part's own; 0: none.
    """

    law: FluxLaw
    label: str = "part"
    resistance: float = 20e-3
    time_constants: tuple[float, float] = DEFAULT_TIME_CONSTANTS
    weight: float = 0.6
    thermal_resistance: float = 8.0  # K/W in moving air
    turns: float = 12.0
    offset_turns: float = 0.0


@dataclass(frozen=True, slots=True)
class DigitizerSpec:
    """True front end of the digitizer: bits, noise [LSB rms], offsets [V], gains, skew [s], disturbances [V]."""

    bits: int = 12
    noise: float = 0.8
    voltage_offset: float = 0.0
    shunt_offset: float = 0.0
    voltage_gain: float = 1.0
    shunt_gain: float = 1.0
    skew: float = 0.0
    hum: float = 0.0
    ringing: float = 0.0
    samples: int = 1_000_000
    intervals: tuple[float, ...] = (5e-9, 1e-8, 2e-8, 5e-8, 1e-7, 2e-7, 5e-7, 1e-6)
    voltage_ranges: tuple[float, ...] = (10.0, 20.0, 50.0)
    shunt_ranges: tuple[float, ...] = (0.05, 0.1, 0.2, 0.5)


@dataclass(frozen=True, slots=True)
class Relays:
    """Relay number by part channel, and by path; ``present`` False wires everything to the first part."""

    present: bool = True
    parts: Mapping[int, int] = field(default_factory=lambda: {1: 101})
    paths: Mapping[str, int] = field(default_factory=lambda: {"pulse": 201, "bias": 202, "resistance": 203})


@dataclass(frozen=True, slots=True)
class WorldSpec:
    """The true bench, every number resolved; see the module's text for where they come from."""

    seed: int = 1
    spelling: str = "plain"
    ambient_degC: float = 23.0
    parts: Mapping[int, PartSpec] = field(default_factory=dict)
    bank_capacitance: float = 7e-3
    bank_resistance: float = 5e-3
    bleeder: float = 20.0 / 7e-3
    switch_resistance: float = 5e-3
    shunt: float = 10e-3
    shunt_inductance: float = 3e-9
    supply_voltage: float = 30.0
    supply_current: float = 2.0
    longest_width: float = 1e-3
    trigger_delay: float = 0.0
    digitizer: DigitizerSpec = field(default_factory=DigitizerSpec)
    inductance_gain: float = 1.0
    fixture_inductance: float = 0.0
    fixture_resistance: float = 0.0
    bias_maximum: float = 20.0
    bias_slew: float = 20.0
    bias_gain: float = 1.0
    body_offsets: Mapping[int, float] = field(default_factory=dict)
    ohmmeter_gain: float = 1.0
    lead_resistance: float = 0.0
    chamber_range_degC: tuple[float, float] = (-60.0, 150.0)
    chamber_ramp: float = 3.0 / 60.0
    chamber_safe_degC: float = 25.0
    chamber_offset: float = 0.0
    overshoot: float = 1.0
    relays: Relays = field(default_factory=Relays)

    @staticmethod
    def from_mapping(mapping: Mapping[str, Any]) -> "WorldSpec":
        """Read a simulated bench from plain values (JSON types).

        Raises:
            ValueError: an unknown key, law or spelling; the text names it and the ones there are.
        """
        return _read(mapping)


def stream(seed: int, name: str) -> np.random.Generator:
    """The random stream called ``name``: the same for the same seed, independent of every other name."""
    return np.random.default_rng([seed, zlib.crc32(name.encode())])


_TOP = ("seed", "spelling", "ambient_degC", "parts", "departures", "bench")
_DEPARTURES = (
    "spread",
    "shunt_resistance",
    "shunt_tempco",
    "shunt_inductance",
    "skew",
    "voltage_gain",
    "shunt_gain",
    "inductance_gain",
    "fixture_inductance",
    "fixture_resistance",
    "current_gain",
    "body_offset",
    "ohmmeter_gain",
    "lead_resistance",
    "chamber_offset",
    "overshoot",
    "trigger_delay",
    "digitizer",
)
_DIGITIZER = ("bits", "noise", "voltage_offset", "shunt_offset", "hum", "ringing")


def _read(mapping: Mapping[str, Any]) -> WorldSpec:
    _only("simulation", mapping, _TOP)
    seed = int(mapping.get("seed", 1))
    spelling = str(mapping.get("spelling", "plain"))
    if spelling not in ("plain", "odd"):
        raise ValueError(f"simulation.spelling is 'plain' or 'odd', got {spelling!r}")
    departures: Mapping[str, Any] = mapping.get("departures") or {}
    _only("simulation.departures", departures, _DEPARTURES)
    bench: Mapping[str, Any] = mapping.get("bench") or {}
    draw = _Draws(seed, departures)
    parts = {
        int(channel): _part(f"simulation.parts.{channel}", given)
        for channel, given in (mapping.get("parts") or {1: {"law": "gapped"}}).items()
    }
    ambient = float(mapping.get("ambient_degC", 23.0))
    bank, shunt = _section(bench, "bank"), _section(bench, "shunt")
    supply, pulser, chamber = _section(bench, "supply"), _section(bench, "pulser"), _section(bench, "chamber")
    bias = _section(bench, "bias_source")
    lcr, meter = _section(bench, "lcr", "calibration"), _section(bench, "ohmmeter", "calibration")
    capacitance = float(bank.get("capacitance", 7e-3))
    shunt_stated = _constant(shunt.get("resistance"), 10e-3, 1e-5)
    tempco = draw.absolute("shunt_tempco", _constant(shunt.get("tempco"), 20e-6, 10e-6))
    warm = ambient - float(shunt.get("temperature_degC", shunt.get("temperature", 25.0)))
    low, high = chamber.get("range_degC", chamber.get("range", (-60.0, 150.0)))
    offsets = _constant(_section(bench, "thermometer", "calibration").get("offset"), 0.0, 0.15)
    return WorldSpec(
        seed=seed,
        spelling=spelling,
        ambient_degC=ambient,
        parts=parts,
        bank_capacitance=capacitance,
        bank_resistance=float(bank.get("resistance", 5e-3)),
        bleeder=float(bank.get("bleed", 20.0)) / capacitance,
        switch_resistance=float(_section(bench, "switch").get("on_resistance", 5e-3)),
        shunt=draw.relative("shunt_resistance", shunt_stated) * (1.0 + tempco * warm),
        shunt_inductance=max(
            0.0, draw.absolute("shunt_inductance", _constant(shunt.get("series_inductance"), 3e-9, 5e-10))
        ),
        supply_voltage=float(_section(supply, "maximum").get("voltage", 30.0)),
        supply_current=float(_section(supply, "maximum").get("current", 2.0)),
        longest_width=float(_section(pulser, "maximum").get("width", 1e-3)),
        trigger_delay=float(
            departures.get("trigger_delay", stream(seed, "trigger_delay").uniform(5e-9, 25e-9))
        ),
        digitizer=_digitizer(seed, departures, draw, _section(bench, "digitizer")),
        inductance_gain=draw.relative("inductance_gain", _constant(lcr.get("inductance_gain"), 1.0, 1e-3)),
        fixture_inductance=draw.absolute(
            "fixture_inductance", _constant(lcr.get("fixture_inductance"), 20e-9, 3e-9)
        ),
        fixture_resistance=draw.absolute(
            "fixture_resistance", _constant(lcr.get("fixture_resistance"), 0.0, 0.0)
        ),
        bias_maximum=float(_section(bias, "maximum").get("current", 20.0)),
        # Four times what the bench file promises: an instrument is at least as quick as its data sheet.
        bias_slew=4.0 * float(bias.get("ramp", 5.0)),
        bias_gain=draw.relative(
            "current_gain", _constant(_section(bias, "calibration").get("current_gain"), 1.0, 1e-3)
        ),
        body_offsets={
            channel: draw.absolute("body_offset", offsets, stream_name=f"body_offset.{channel}")
            for channel in parts
        },
        ohmmeter_gain=draw.relative("ohmmeter_gain", _constant(meter.get("gain"), 1.0, 5e-4)),
        lead_resistance=draw.absolute("lead_resistance", _constant(meter.get("lead_resistance"), 0.0, 2e-5)),
        chamber_range_degC=(float(low), float(high)),
        chamber_ramp=float(chamber.get("ramp", 3.0 / 60.0)),
        chamber_safe_degC=float(chamber.get("safe_degC", chamber.get("safe", 25.0))),
        chamber_offset=float(
            departures.get("chamber_offset", stream(seed, "chamber_offset").uniform(-0.5, 0.5))
        ),
        overshoot=float(departures.get("overshoot", 1.0)),
        relays=_relays(bench, parts),
    )


@dataclass(frozen=True, slots=True)
class _Draws:
    seed: int
    departures: Mapping[str, Any]

    def relative(self, name: str, stated: tuple[float, float]) -> float:
        value, uncertainty = stated
        return value * (1.0 + self._departure(name, uncertainty / abs(value) if value else 0.0, name))

    def absolute(self, name: str, stated: tuple[float, float], *, stream_name: str = "") -> float:
        return stated[0] + self._departure(name, stated[1], stream_name or name)

    def _departure(self, name: str, uncertainty: float, stream_name: str) -> float:
        if name in self.departures:
            return float(self.departures[name])
        spread = float(self.departures.get("spread", DEFAULT_SPREAD))
        drawn = float(stream(self.seed, stream_name).standard_normal())
        return spread * uncertainty * (max(-2.0, min(2.0, drawn)) if spread < 1.0 else drawn)


def _digitizer(
    seed: int, departures: Mapping[str, Any], draw: _Draws, stated: Mapping[str, Any]
) -> DigitizerSpec:
    given: Mapping[str, Any] = departures.get("digitizer") or {}
    _only("simulation.departures.digitizer", given, _DIGITIZER)
    calibration, ranges = _section(stated, "calibration"), _section(stated, "ranges")
    default = DigitizerSpec()
    voltage_ranges = _ascending(ranges.get("voltage"), default.voltage_ranges)
    shunt_ranges = _ascending(ranges.get("shunt"), default.shunt_ranges)
    bits = int(given.get("bits", default.bits))
    if not 4 <= bits <= 16:
        raise ValueError(f"simulation.departures.digitizer.bits lies between 4 and 16, got {bits!r}")
    offsets = stream(seed, "digitizer_offset").uniform(-3e-3, 3e-3, 2)
    return DigitizerSpec(
        bits=bits,
        noise=float(given.get("noise", default.noise)),
        voltage_offset=float(given.get("voltage_offset", offsets[0] * voltage_ranges[0])),
        shunt_offset=float(given.get("shunt_offset", offsets[1] * shunt_ranges[0])),
        voltage_gain=draw.relative("voltage_gain", _constant(calibration.get("voltage_gain"), 1.0, 5e-4)),
        shunt_gain=draw.relative("shunt_gain", _constant(calibration.get("shunt_gain"), 1.0, 5e-4)),
        skew=draw.absolute("skew", _constant(calibration.get("skew"), 0.0, 1e-9)),
        hum=float(given.get("hum", 0.0)),
        ringing=float(given.get("ringing", 0.0)),
        samples=max(16, int(stated.get("samples", 0)), default.samples),
        intervals=_ascending(stated.get("intervals"), default.intervals),
        voltage_ranges=voltage_ranges,
        shunt_ranges=shunt_ranges,
    )


def _part(where: str, given: Mapping[str, Any]) -> PartSpec:
    law = str(given.get("law", "gapped"))
    if law not in get_args(Law):
        raise ValueError(f"{where}.law: no law {law!r}; there are {', '.join(get_args(Law))}")
    law_keys = {f.name for f in fields(FluxLaw)}
    part_keys = {f.name for f in fields(PartSpec)} - {"law"}
    _only(where, given, sorted(law_keys | part_keys))
    figures = LAW_DEFAULTS[law] | {
        k: float(v) for k, v in given.items() if k not in ("law", "label", "time_constants")
    }
    first, second = given.get("time_constants", DEFAULT_TIME_CONSTANTS)
    return PartSpec(
        law=FluxLaw(law=cast(Law, law), **{k: v for k, v in figures.items() if k in law_keys}),
        label=str(given.get("label", f"part {law}")),
        time_constants=(float(first), float(second)),
        **{k: v for k, v in figures.items() if k in part_keys},
    )


def _relays(bench: Mapping[str, Any], parts: Mapping[int, PartSpec]) -> Relays:
    if "multiplexer" not in bench:
        return Relays(present=False, parts={channel: 100 + channel for channel in parts})
    stated = _section(bench, "multiplexer")
    numbers = {int(k): int(v) for k, v in (stated.get("parts") or {}).items()} or {c: 100 + c for c in parts}
    paths = {str(k): int(v) for k, v in (stated.get("paths") or {}).items()} or dict(Relays().paths)
    return Relays(True, numbers, paths)


def _section(of: Mapping[str, Any], *names: str) -> Mapping[str, Any]:
    for name in names:
        of = of.get(name) or {}
    return of


def _constant(given: Any, value: float, uncertainty: float) -> tuple[float, float]:
    """Value and standard uncertainty of a stated constant; a bare number is taken as exact."""
    if given is None:
        return value, uncertainty
    if isinstance(given, Mapping):
        return float(given["value"]), float(given.get("uncertainty") or 0.0)
    return float(given), 0.0


def _ascending(given: Sequence[float] | None, default: tuple[float, ...]) -> tuple[float, ...]:
    return tuple(sorted(float(each) for each in given)) if given else default


def _only(where: str, given: Mapping[str, Any], known: Sequence[str]) -> None:
    unknown = [str(key) for key in given if key not in known]
    if unknown:
        raise ValueError(f"{where}: no key {unknown[0]!r}; there are {', '.join(known)}")
