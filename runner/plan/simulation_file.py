"""The `simulation:` section of a mock bench, and what is handed to the simulated world.

The world gets a plain mapping of SI numbers: what the bench file says, which parts stand on it, and how far the truth
departs from the file. What is left out here is left to the world's own defaults.
"""

from typing import TYPE_CHECKING, Annotated, Any, Literal

from pydantic import Field

from runner.plan.quantity import (
    CURRENT,
    DIFFERENCE,
    DURATION,
    FACTOR,
    FRACTION,
    INDUCTANCE,
    RESISTANCE,
    TEMPCO,
    TEMPCO_SQUARED,
    TEMPERATURE,
    THERMAL_RESISTANCE,
    TIME,
    VOLTAGE,
    Quantity,
)
from runner.plan.shapes import FileModel, Whole, Words

if TYPE_CHECKING:
    from runner.plan.bench_file import Bench

Factor = Annotated[float | None, Quantity(FACTOR)]
Fraction = Annotated[float | None, Quantity(FRACTION)]
Drift = Annotated[float | None, Quantity(TEMPCO)]


class SimulatedPart(FileModel):
    """A part of the mock bench: its flux law, its winding, how it warms. Figures left out follow from the law."""

    law: Literal["gapped", "powder", "remanent", "stepped", "tanh", "linear"] = "gapped"
    label: Words | None = None
    inductance: Annotated[float | None, Quantity(INDUCTANCE, above=0, help="Initial, at 25 degC.")] = None
    knee: Annotated[float | None, Quantity(CURRENT, above=0, help="At 25 degC.")] = None
    sharpness: Annotated[float | None, Quantity(FACTOR, above=0)] = None
    floor: Annotated[
        float | None, Quantity(FRACTION, least=0, below=1, help="Inductance left far above the knee.")
    ] = None
    inductance_drift: Drift = None
    inductance_curvature: Annotated[float | None, Quantity(TEMPCO_SQUARED)] = None
    knee_drift: Drift = None
    first_knee: Annotated[
        float | None, Quantity(FRACTION, above=0, below=1, help="Of a stepped gap, of the knee.")
    ] = None
    first_share: Annotated[float | None, Quantity(FRACTION, above=0, below=1, help="Of a stepped gap.")] = (
        None
    )
    memory: Annotated[
        float | None, Quantity(FRACTION, least=0, below=1, help="Of a core with remanence.")
    ] = None
    resistance: Annotated[float | None, Quantity(RESISTANCE, above=0, help="At 20 degC.")] = None
    time_constants: (
        tuple[Annotated[float, Quantity(DURATION, above=0)], Annotated[float, Quantity(DURATION, above=0)]]
        | None
    ) = Field(default=None, examples=[["4 min", "15 min"]])
    weight: Annotated[
        float | None, Quantity(FRACTION, least=0, most=1, help="Of the first time constant.")
    ] = None
    thermal_resistance: Annotated[float | None, Quantity(THERMAL_RESISTANCE, least=0, help="To the air.")] = (
        None
    )
    turns: Annotated[Whole, Field(ge=1)] | None = None
    offset_turns: Annotated[Whole, Field(ge=0, description="Of an offset winding; 0 for none.")] | None = None


class DigitizerDepartures(FileModel):
    """The true front end of the digitizer."""

    bits: Annotated[Whole, Field(ge=4, le=16)] | None = None
    noise: Annotated[float | None, Quantity(FACTOR, least=0, help="Steps of the converter, rms.")] = None
    voltage_offset: Annotated[float | None, Quantity(VOLTAGE)] = None
    shunt_offset: Annotated[float | None, Quantity(VOLTAGE)] = None
    hum: Annotated[float | None, Quantity(VOLTAGE, least=0)] = None
    ringing: Annotated[float | None, Quantity(VOLTAGE, least=0)] = None


class Departures(FileModel):
    """True values minus what the bench file says; what is left out is drawn from the seed."""

    spread: Annotated[
        float | None, Quantity(FACTOR, least=0, help="Of what is drawn, in standard uncertainties.")
    ] = None
    shunt_resistance: Fraction = None
    shunt_tempco: Drift = None
    shunt_inductance: Annotated[float | None, Quantity(INDUCTANCE)] = None
    skew: Annotated[float | None, Quantity(TIME)] = None
    voltage_gain: Fraction = None
    shunt_gain: Fraction = None
    inductance_gain: Fraction = None
    fixture_inductance: Annotated[float | None, Quantity(INDUCTANCE)] = None
    fixture_resistance: Annotated[float | None, Quantity(RESISTANCE)] = None
    current_gain: Fraction = None
    body_offset: Annotated[float | None, Quantity(DIFFERENCE)] = None
    ohmmeter_gain: Fraction = None
    lead_resistance: Annotated[float | None, Quantity(RESISTANCE)] = None
    chamber_offset: Annotated[float | None, Quantity(DIFFERENCE)] = None
    overshoot: Annotated[float | None, Quantity(DIFFERENCE, least=0)] = None
    trigger_delay: Annotated[float | None, Quantity(TIME)] = None
    digitizer: DigitizerDepartures | None = None


class Simulation(FileModel):
    """A mock bench: the parts on it and its seed; such a bench starts its own instruments on free loopback ports."""

    seed: Annotated[Whole, Field(ge=0, le=2**63 - 1)] = 1
    spelling: Literal["plain", "odd"] = "plain"
    ambient_degC: Annotated[float, Quantity(TEMPERATURE, above=-273.15, help="Of the room.")] = Field(
        default=23.0, alias="ambient"
    )
    parts: Annotated[dict[Annotated[Whole, Field(ge=1)], SimulatedPart], Field(min_length=1)] = Field(
        examples=[{1: {"law": "gapped", "inductance": "22 uH", "knee": "9.5 A"}}],
        description="By multiplexer channel.",
    )
    departures: Departures = Field(default_factory=Departures)


def simulation_spec(bench: "Bench") -> dict[str, Any]:
    """What the simulated world is made from: JSON types, SI (temperatures degC), only what was written.

    Raises:
        ValueError: the bench has no `simulation:` section.
    """
    if bench.simulation is None:
        raise ValueError(f"{bench.name!r} has no 'simulation:' section")
    simulation = bench.simulation
    return {
        "seed": simulation.seed,
        "spelling": simulation.spelling,
        "ambient_degC": simulation.ambient_degC,
        "parts": {str(channel): _plain(part) for channel, part in simulation.parts.items()},
        "departures": _plain(simulation.departures),
        "bench": _stated(bench),
    }


def _stated(bench: "Bench") -> dict[str, Any]:
    """What the bench file says that the world must physically have."""
    fixture = _plain(bench.fixture)
    stated: dict[str, Any] = {name: fixture[name] for name in ("bank", "shunt", "switch") if name in fixture}
    for role, instrument in bench.instruments.items():
        kept = _plain(instrument)
        for name in ("resource", "dialect", "timeout"):
            kept.pop(name, None)
        stated[role] = kept
    return stated


def _plain(model: FileModel) -> dict[str, Any]:
    plain: dict[str, Any] = model.model_dump(mode="json", exclude_none=True)
    return plain
