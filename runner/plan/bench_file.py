"""The models of a bench file: which instruments, where, what they can do, and how well they are known.

A calibration constant that is left out is not known: it is absent from `calibration`, never a zero with no uncertainty.
"""

from collections.abc import Mapping
from typing import Annotated, Literal, Self, TypeVar

from pydantic import (
    Field,
    field_validator,
    model_validator,
)

from runner.plan.constants import GAIN, Constant, calibrated, constant
from runner.plan.plan_file import cold_first
from runner.plan.quantity import (
    CAPACITANCE,
    CURRENT,
    CURRENT_RATE,
    DIFFERENCE,
    DRIFT,
    DURATION,
    FRACTION,
    INDUCTANCE,
    RESISTANCE,
    SKEW,
    TEMPCO,
    TEMPERATURE,
    TIME,
    VOLTAGE,
    Quantity,
)
from runner.plan.shapes import FileModel, Whole, Words, Written, fault
from runner.plan.simulation_file import Simulation

ROLES = (
    "supply",
    "pulser",
    "digitizer",
    "lcr",
    "bias_source",
    "chamber",
    "thermometer",
    "ohmmeter",
    "multiplexer",
)

Relay = Annotated[Whole, Field(ge=0, le=99_999)]
Temperature = Annotated[float, Quantity(TEMPERATURE, above=-273.15)]
Timeout = Annotated[float, Quantity(DURATION, above=0, most=600, help="Longest wait for a reply.")]
Range = Annotated[float, Quantity(VOLTAGE, above=0)]


class Instrument(FileModel):
    """One instrument of the bench.

    Attributes:
        resource: VISA resource name; only a simulated bench may leave it out.
        dialect: file with the messages of this kind of instrument.
        timeout: longest wait for a reply [s].
        calibration: constants by name; what was not given is absent.
    """

    resource: Words | None = Field(default=None, examples=["TCPIP::192.0.2.10::5025::SOCKET"])
    dialect: Words = Field(examples=["dialects/scpi_supply.yaml"])
    timeout: Timeout = 5.0
    calibration: Annotated[dict[str, Constant], calibrated("No")] = Field(default_factory=dict)


class SupplyMaximum(FileModel):
    """What the supply can give at most."""

    voltage: Annotated[float, Quantity(VOLTAGE, above=0)]
    current: Annotated[float, Quantity(CURRENT, above=0)]


class Supply(Instrument):
    """The rail: it feeds the capacitor bank."""

    maximum: SupplyMaximum = Field(examples=[{"voltage": "30 V", "current": "2 A"}])


class PulserMaximum(FileModel):
    """The longest pulse the pulser can give."""

    width: Annotated[float, Quantity(TIME, above=0)]


class Pulser(Instrument):
    """Makes the gate pulse; its trigger also arms the digitizer."""

    maximum: PulserMaximum = Field(examples=[{"width": "1 ms"}])
    polarities: Literal["forward", "both"] = Field(
        default="forward", description="'both' where the fixture can reverse the pulse."
    )


class Ranges(FileModel):
    """Full scale of each channel, at the instrument's input; a range of 10 V reaches from -10 V to +10 V."""

    voltage: Annotated[tuple[Range, ...], Field(min_length=1)] = Field(examples=[["10 V", "20 V", "50 V"]])
    shunt: Annotated[tuple[Range, ...], Field(min_length=1)] = Field(
        examples=[["50 mV", "100 mV", "200 mV", "500 mV"]]
    )

    @field_validator("voltage", "shunt")
    @classmethod
    def _smallest_first(cls, ranges: tuple[float, ...]) -> tuple[float, ...]:
        return tuple(sorted(set(ranges)))


class Digitizer(Instrument):
    """Two channels: the voltage across the part, and the voltage across the shunt."""

    samples: Annotated[Whole, Field(ge=16, le=10_000_000, description="Of each channel in a capture.")] = 2000
    pretrigger: Annotated[
        float, Quantity(FRACTION, above=0, below=1, help="Share of the samples before the trigger.")
    ] = 0.1
    intervals: Annotated[
        tuple[Annotated[float, Quantity(TIME, above=0)], ...],
        Field(min_length=1, description="Sampling intervals it can."),
    ] = Field(examples=[["5 ns", "10 ns", "20 ns", "50 ns"]])
    ranges: Ranges = Field(examples=[{"voltage": ["10 V", "20 V"], "shunt": ["100 mV", "200 mV"]}])
    calibration: Annotated[
        dict[str, Constant], calibrated("Digitizer", voltage_gain=GAIN, shunt_gain=GAIN, skew=constant(SKEW))
    ] = Field(default_factory=dict)

    @field_validator("intervals")
    @classmethod
    def _shortest_first(cls, intervals: tuple[float, ...]) -> tuple[float, ...]:
        return tuple(sorted(set(intervals)))


class Lcr(Instrument):
    """Measures the small-signal inductance on top of the bias."""

    calibration: Annotated[
        dict[str, Constant],
        calibrated(
            "Lcr",
            inductance_gain=GAIN,
            fixture_inductance=constant(INDUCTANCE),
            fixture_resistance=constant(RESISTANCE),
            open_capacitance=constant(CAPACITANCE),
        ),
    ] = Field(default_factory=dict)


class BiasMaximum(FileModel):
    """What the bias source can give at most."""

    current: Annotated[float, Quantity(CURRENT, above=0)]
    voltage: Annotated[float | None, Quantity(VOLTAGE, above=0)] = None


class BiasSource(Instrument):
    """Direct current through the part."""

    maximum: BiasMaximum = Field(examples=[{"current": "20 A"}])
    ramp: Annotated[float, Quantity(CURRENT_RATE, above=0, help="How fast the current is changed.")] = 5.0
    calibration: Annotated[dict[str, Constant], calibrated("BiasSource", current_gain=GAIN)] = Field(
        default_factory=dict
    )


class Chamber(Instrument):
    """The temperature chamber."""

    range_degC: tuple[Temperature, Temperature] = Field(alias="range", examples=[["-60 degC", "150 degC"]])
    ramp: Annotated[float, Quantity(DRIFT, above=0, help="How fast the air changes at most.")] = Field(
        examples=["3 K/min"]
    )
    safe_degC: Annotated[float, Quantity(TEMPERATURE, above=-273.15, help="Set-point of the safe state.")] = (
        Field(default=25.0, alias="safe")
    )

    @field_validator("range_degC")
    @classmethod
    def _cold_first(cls, range_degC: tuple[float, float]) -> tuple[float, float]:
        return cold_first(range_degC)

    @model_validator(mode="after")
    def _safe_is_reachable(self) -> Self:
        if not self.range_degC[0] <= self.safe_degC <= self.range_degC[1]:
            raise fault(f"'safe' ({self.safe_degC:g} degC) is outside 'range'; write a temperature inside it")
        return self


class Thermometer(Instrument):
    """Reads the body sensor of each part; its channel is the part's channel."""

    calibration: Annotated[dict[str, Constant], calibrated("Thermometer", offset=constant(DIFFERENCE))] = (
        Field(default_factory=dict)
    )


class Ohmmeter(Instrument):
    """Measures winding resistance with four wires."""

    calibration: Annotated[
        dict[str, Constant], calibrated("Ohmmeter", gain=GAIN, lead_resistance=constant(RESISTANCE))
    ] = Field(default_factory=dict)


class MultiplexerPaths(FileModel):
    """Relay of each path; a bench that switches only parts leaves the others out."""

    pulse: Relay | None = None
    bias: Relay | None = None
    resistance: Relay | None = None
    offset: Annotated[
        Relay | None,
        Field(
            description="Bias source to an offset winding beside the part's own; it may be closed with the pulse path."
        ),
    ] = None


class Multiplexer(Instrument):
    """Selects the part, and what is connected to it."""

    parts: Annotated[dict[Annotated[Whole, Field(ge=1)], Relay], Field(min_length=1)] = Field(
        examples=[{1: 101, 2: 102}], description="Relay of each part, by channel."
    )
    paths: MultiplexerPaths = Field(
        default_factory=MultiplexerPaths, examples=[{"pulse": 201, "bias": 202, "resistance": 203}]
    )
    settle: Annotated[float, Quantity(TIME, least=0, help="After a relay has moved.")] = 0.05

    @model_validator(mode="after")
    def _relays_differ(self) -> Self:
        relays = [*self.parts.values(), *(relay for _, relay in self.paths if relay is not None)]
        twice = sorted({relay for relay in relays if relays.count(relay) > 1})
        if twice:
            raise fault(f"relay {twice[0]} is used twice; give each part and path a relay of its own")
        return self


class Bank(FileModel):
    """The capacitor bank that feeds the pulses."""

    capacitance: Annotated[float, Quantity(CAPACITANCE, above=0)]
    resistance: Annotated[float, Quantity(RESISTANCE, least=0, help="Series resistance.")] = 0.0
    bleed: Annotated[float, Quantity(DURATION, above=0, help="Time constant of the bleeder, R times C.")] = (
        Field(examples=["20 s"])
    )


class Shunt(FileModel):
    """The current shunt, with what is known of it."""

    resistance: Annotated[Constant, constant(RESISTANCE, above=0)]
    tempco: Annotated[Constant, constant(TEMPCO)] | None = None
    series_inductance: Annotated[Constant, constant(INDUCTANCE, least=0)] | None = None
    temperature_degC: Annotated[
        float, Quantity(TEMPERATURE, above=-273.15, help="At which the resistance holds.")
    ] = Field(default=25.0, alias="temperature")


class Switch(FileModel):
    """The switch that connects bank and part."""

    on_resistance: Annotated[float, Quantity(RESISTANCE, least=0)] = 0.0


class Fixture(FileModel):
    """What stands between the instruments and the part."""

    bank: Bank | None = Field(
        default=None, examples=[{"capacitance": "7 mF", "resistance": "5 mohm", "bleed": "20 s"}]
    )
    shunt: Shunt | None = None
    switch: Switch = Field(default_factory=Switch)
    part_time_constants: Annotated[
        tuple[Annotated[float, Quantity(DURATION, above=0)], ...],
        Field(
            min_length=1,
            max_length=2,
            description="A guess of how the part follows the air, for the forecast.",
        ),
    ] = Field(default=(240.0, 900.0), examples=[["4 min", "15 min"]])


class Instruments(FileModel):
    """The instruments by role."""

    supply: Supply | None = None
    pulser: Pulser | None = None
    digitizer: Digitizer | None = None
    lcr: Lcr | None = None
    bias_source: BiasSource | None = None
    chamber: Chamber | None = None
    thermometer: Thermometer | None = None
    ohmmeter: Ohmmeter | None = None
    multiplexer: Multiplexer | None = None


def _by_role(written: Instruments) -> dict[str, Instrument]:
    return {role: getattr(written, role) for role in ROLES if getattr(written, role) is not None}


Role = TypeVar("Role", bound=Instrument)


class Bench(FileModel):
    """A bench: which instruments, where, with which calibration.

    Attributes:
        instruments: those that are there, by role; `supply`, `chamber` and so on give the same with their own types.
        simulation: settings of the mock bench in SI, or None on a real one.
    """

    name: Words = Field(examples=["Bench by the window"])
    instruments: Annotated[Mapping[str, Instrument], Written(Instruments, _by_role)] = Field(examples=[{}])
    fixture: Fixture = Field(default_factory=Fixture)
    simulation: Simulation | None = None

    @property
    def supply(self) -> Supply | None:
        return self._role("supply", Supply)

    @property
    def pulser(self) -> Pulser | None:
        return self._role("pulser", Pulser)

    @property
    def digitizer(self) -> Digitizer | None:
        return self._role("digitizer", Digitizer)

    @property
    def lcr(self) -> Lcr | None:
        return self._role("lcr", Lcr)

    @property
    def bias_source(self) -> BiasSource | None:
        return self._role("bias_source", BiasSource)

    @property
    def chamber(self) -> Chamber | None:
        return self._role("chamber", Chamber)

    @property
    def thermometer(self) -> Thermometer | None:
        return self._role("thermometer", Thermometer)

    @property
    def ohmmeter(self) -> Ohmmeter | None:
        return self._role("ohmmeter", Ohmmeter)

    @property
    def multiplexer(self) -> Multiplexer | None:
        return self._role("multiplexer", Multiplexer)

    def _role(self, name: str, kind: type[Role]) -> Role | None:
        found = self.instruments.get(name)
        return found if isinstance(found, kind) else None
