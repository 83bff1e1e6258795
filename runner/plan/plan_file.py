"""The models of a plan file: what to measure, on which parts, within which limits.

Keys are spelled as users write them (aliases); attributes carry the unit where it is not SI. What a single value may be
is checked here, what values mean to each other and to the bench in `checks.py`.
"""

import math
from itertools import pairwise
from typing import Annotated, Any, Literal, Self

from pydantic import Field, field_validator, model_validator

from runner.plan.grids import (
    CURRENTS,
    WIDTHS,
    Current,
    CurrentSeek,
    Width,
    WidthSeek,
    as_currents,
    as_widths,
    climbing,
)
from runner.plan.quantity import (
    AMPERE_TURNS,
    AREA,
    CURRENT,
    DIFFERENCE,
    DRIFT,
    DURATION,
    ENERGY,
    FRACTION,
    FREQUENCY,
    INDUCTANCE,
    LENGTH,
    POWER,
    RESISTANCE,
    SMALL_VOLTAGE,
    TEMPERATURE,
    TIME,
    VOLTAGE,
    Quantity,
)
from runner.plan.shapes import FileModel, Whole, Words, Written, fault

Time = Annotated[float, Quantity(TIME, least=0)]
Duration = Annotated[float, Quantity(DURATION, above=0)]
Voltage = Annotated[float, Quantity(VOLTAGE, above=0)]
Resistance = Annotated[float, Quantity(RESISTANCE, above=0)]
Inductance = Annotated[float, Quantity(INDUCTANCE, above=0)]
Energy = Annotated[float, Quantity(ENERGY, above=0)]
Power = Annotated[float, Quantity(POWER, above=0)]
Temperature = Annotated[float, Quantity(TEMPERATURE, above=-273.15)]
Share = Annotated[float, Quantity(FRACTION, above=0, below=1)]

COPPER_ALPHA_20 = 3.93e-3  # 1/K at 20 degC, annealed copper (IEC 60028)


class Core(FileModel):
    """What is known of the core; B(H) needs it."""

    turns: Annotated[Whole, Field(ge=1, le=100_000)] = Field(examples=[15])
    area: Annotated[float, Quantity(AREA, above=0, help="Effective cross-section.")]
    path: Annotated[float, Quantity(LENGTH, above=0, help="Effective magnetic path length.")]


class PartLimits(FileModel):
    """Limits of one part that are lower than those of the plan."""

    current: Current | None = None
    body_degC: Temperature | None = Field(default=None, alias="body")
    pulse_energy: Energy | None = None


class Part(FileModel):
    """An inductor under test."""

    label: Words = Field(examples=["DRUM-22-A"])
    channel: Annotated[
        Whole, Field(ge=1, description="Multiplexer channel; 1, 2, ... in order when left out.")
    ] = 1
    inductance: Annotated[float, Quantity(INDUCTANCE, above=0, help="Nominal inductance.")]
    rated_current: Annotated[float, Quantity(CURRENT, above=0, help="Rated saturation current.")]
    resistance: Annotated[float, Quantity(RESISTANCE, above=0, help="Winding resistance at 20 degC.")]
    core: Core | None = None
    limits: PartLimits | None = None

    def resistance_at(self, temperature_degC: float) -> float:
        """Winding resistance by the linear copper law [ohm] (IEC 60028)."""
        return self.resistance * (1 + COPPER_ALPHA_20 * (temperature_degC - 20.0))


def number_parts(written: Any) -> Any:
    """Give parts without a channel the number of their place in the list."""
    if not isinstance(written, list):
        return written
    return [
        {"channel": index, **part} if isinstance(part, dict) else part
        for index, part in enumerate(written, 1)
    ]


class Soak(FileModel):
    """When the part counts as settled at a temperature."""

    within: Annotated[
        float, Quantity(DIFFERENCE, above=0, help="Largest rest of the drift that is still to come.")
    ] = 1.0
    drift: Annotated[float, Quantity(DRIFT, above=0, help="Largest drift of the part.")] = 0.2 / 60
    hold: Annotated[float, Quantity(DURATION, least=0, help="How long both must hold.")] = 300.0
    give_up: Annotated[
        float, Quantity(DURATION, above=0, help="Measure anyway, with a flag, after this time.")
    ] = 7200.0

    @model_validator(mode="after")
    def _leaves_time_to_hold(self) -> Self:
        if self.give_up <= self.hold:
            raise fault(
                f"'give_up' ({self.give_up:g} s) leaves no time for 'hold' ({self.hold:g} s); give more time"
            )
        return self


class Temperatures(FileModel):
    """The legs of a run."""

    at_degC: Annotated[tuple[Temperature, ...], Field(min_length=1)] = Field(
        alias="at", examples=[["25 degC", "85 degC"]], description="Chamber set-points."
    )
    soak: Soak = Field(default_factory=Soak)
    order: Literal["as written", "least travel"] = "as written"


class StopAt(FileModel):
    """Where the climb of the pulse widths ends at a temperature, before the longest width."""

    current: Current | None = None
    drop: Annotated[float | None, Quantity(FRACTION, above=0, below=1, help="Fall of the inductance.")] = None

    @model_validator(mode="after")
    def _says_something(self) -> Self:
        if self.current is None and self.drop is None:
            raise fault("neither 'current' nor 'drop' is given; write one of them or remove 'stop_at'")
        return self


class Pulse(FileModel):
    """The pulse method: differential inductance from voltage pulses."""

    rail: Annotated[float, Quantity(VOLTAGE, above=0, help="Voltage of the capacitor bank.")]
    width: Annotated[tuple[float, ...] | WidthSeek, Written(WIDTHS, as_widths)] = Field(
        examples=[{"from": "2 us", "to": "20 us", "count": 18}]
    )
    repeats: Annotated[Whole, Field(ge=1, le=10_000, description="Captures of each width.")] = 8
    rest: Annotated[float, Quantity(TIME, above=0, help="From one pulse to the next.")] = 0.5
    conditioning: Annotated[
        Whole, Field(ge=0, le=10_000, description="Pulses not recorded, before the captures.")
    ] = 3
    stop_at: StopAt | None = None

    @property
    def longest(self) -> float:
        """Longest width that may be fired [s]."""
        return self.width[-1] if isinstance(self.width, tuple) else self.width.to


class Signal(FileModel):
    """The small signal of the bias method."""

    frequency: Annotated[float, Quantity(FREQUENCY, above=0)]
    level: Annotated[float, Quantity(SMALL_VOLTAGE, above=0, help="Root mean square.")]


class Bias(FileModel):
    """The bias method: incremental inductance on a direct current.

    Attributes:
        current: in the order in which they are visited, climbing and then, when both ways, back down [A].
    """

    current: Annotated[tuple[float, ...] | CurrentSeek, Written(CURRENTS, as_currents)] = Field(
        examples=[{"from": "0 A", "to": "10 A", "count": 21, "both_ways": True}]
    )
    settle: Annotated[float, Quantity(TIME, least=0, help="From the current's arrival to the reading.")] = 0.2
    signal: Signal = Field(examples=[{"frequency": "100 kHz", "level": "50 mV"}])

    @property
    def both_ways(self) -> bool:
        """Whether the currents come back down."""
        return isinstance(self.current, tuple) and any(b < a for a, b in pairwise(self.current))

    @property
    def largest(self) -> float:
        """Largest current that may be set [A]."""
        return max(self.current) if isinstance(self.current, tuple) else self.current.to


class Limits(FileModel):
    """What no value may pass; judged before the run, programmed into the instruments, watched all night."""

    current: Annotated[float, Quantity(CURRENT, above=0, help="Largest current through a part.")]
    body_degC: Annotated[float, Quantity(TEMPERATURE, above=-273.15, help="Hottest body of a part.")] = Field(
        alias="body"
    )
    rail: Annotated[float, Quantity(VOLTAGE, above=0, help="Highest voltage of the bank.")]
    pulse_energy: Annotated[
        float, Quantity(ENERGY, above=0, help="Largest energy that one pulse takes from the bank.")
    ]
    chamber_degC: Annotated[
        tuple[Temperature, Temperature], Field(description="Coldest and hottest set-point.")
    ] = Field(alias="chamber", examples=[["-45 degC", "130 degC"]])
    duration: Annotated[float, Quantity(DURATION, above=0, help="Longest time of the whole run.")]
    bank_energy: Annotated[
        float | None, Quantity(ENERGY, above=0, help="Largest energy stored in the bank.")
    ] = None
    mean_power: Annotated[float | None, Quantity(POWER, above=0, help="Largest mean heating of a part.")] = (
        None
    )

    @field_validator("chamber_degC")
    @classmethod
    def _cold_first(cls, range_degC: tuple[float, float]) -> tuple[float, float]:
        return cold_first(range_degC)


class Extract(FileModel):
    """What is made of the captures."""

    drops: Annotated[
        tuple[Share, ...], Field(min_length=1, description="Falls of the inductance that define Isat.")
    ] = Field(default=(0.1, 0.2, 0.3), examples=[["10 %", "20 %", "30 %"]])
    reference: Literal["same temperature", "25 degC", "nominal"] = "same temperature"
    coverage: Annotated[float, Quantity(FRACTION, above=0, below=1, help="Of the intervals.")] = 0.95
    guard_band: Annotated[
        float, Quantity(FRACTION, least=0, below=1, help="Kept below Isat by the derating.")
    ] = 0.2

    @field_validator("drops")
    @classmethod
    def _each_once(cls, drops: tuple[float, ...]) -> tuple[float, ...]:
        return climbing(drops, "%", 100.0)


class Remanence(FileModel):
    """A study of its own: what the part remembers, and how an offset field moves its knee.

    Its pulses take rail and rest from `pulse`. Every polarity is measured without an offset field and with each offset.

    Attributes:
        width: of the test pulse, long enough to reach the knee [s].
        shots: recorded after each preparation, the first of them on the prepared state.
        demagnetise: how the state is prepared before first shots: by pulses of alternating polarity and falling width, or
            not at all (as the pulses before left it: with both polarities, those of the other one).
        polarities: `forward`, or `both` where the fixture can reverse.
        offset: ampere-turns of an offset winding beside the part's own, applied one after the other [A].
        winding: turns of that winding; the bias source feeds it.
    """

    width: Width
    shots: Annotated[Whole, Field(ge=2, le=1000)] = 5
    demagnetise: Literal["alternating pulses", "none"] = "none"
    polarities: Literal["forward", "both"] = "forward"
    offset: tuple[Annotated[float, Quantity(AMPERE_TURNS)], ...] = ()
    winding: Annotated[Whole, Field(ge=1, le=100_000, description="Turns of the offset winding.")] | None = (
        None
    )

    @model_validator(mode="after")
    def _can_alternate(self) -> Self:
        if self.demagnetise == "alternating pulses" and self.polarities == "forward":
            raise fault(
                "alternating pulses need both polarities; write 'polarities: both' or 'demagnetise: none'"
            )
        return self

    @model_validator(mode="after")
    def _knows_its_winding(self) -> Self:
        if any(self.offset) and self.winding is None:
            raise fault("'offset' is in ampere-turns; add 'winding: 10', the turns of the offset winding")
        return self

    @property
    def signs(self) -> tuple[Literal[1, -1], ...]:
        """The polarities as signs of the current."""
        return (1, -1) if self.polarities == "both" else (1,)

    @property
    def offsets(self) -> tuple[float, ...]:
        """Ampere-turns in the order in which they are applied, none of them first [A]."""
        return (0.0, *dict.fromkeys(offset for offset in self.offset if offset))

    def offset_current(self, ampere_turns: float) -> float:
        """Current of the offset winding [A]; NaN where the study has none."""
        return math.nan if self.winding is None else ampere_turns / self.winding


class Plan(FileModel):
    """A test plan: what to measure on which parts, over which temperatures, within which limits."""

    title: Words = Field(examples=["Night study of a drum-core choke"])
    bench: Words = Field(examples=["benches/mock.yaml"], description="Bench file, relative to the plan.")
    parts: Annotated[tuple[Part, ...], Field(min_length=1)] = Field(
        examples=[
            [{"label": "DRUM-22-A", "inductance": "22 uH", "rated_current": "6 A", "resistance": "18 mohm"}]
        ]
    )
    temperatures: Temperatures = Field(examples=[{"at": ["25 degC"]}])
    pulse: Pulse | None = None
    bias: Bias | None = None
    remanence: Remanence | None = None
    limits: Limits = Field(
        examples=[
            {
                "current": "18 A",
                "body": "140 degC",
                "rail": "16 V",
                "pulse_energy": "5 mJ",
                "chamber": ["-45 degC", "130 degC"],
                "duration": "14 h",
            }
        ]
    )
    extract: Extract = Field(default_factory=Extract)

    @field_validator("parts", mode="before")
    @classmethod
    def _numbered(cls, written: Any) -> Any:
        return number_parts(written)


def cold_first(range_degC: tuple[float, float]) -> tuple[float, float]:
    """A range of temperatures whose cold end comes first [degC]."""
    if range_degC[0] >= range_degC[1]:
        raise fault(f"{range_degC[0]:g} degC is not below {range_degC[1]:g} degC; write the cold end first")
    return range_degC
