"""The model of a captures file: waveforms taken by hand, and what must be known to make numbers of them."""

from typing import Annotated, Any, Self

from pydantic import Field, model_validator

from runner.plan.bench_file import Shunt, Temperature
from runner.plan.constants import Constant, Uncertainty, constant
from runner.plan.plan_file import Extract, Part
from runner.plan.quantity import INDUCTANCE, RESISTANCE, SKEW, TEMPCO, TEMPERATURE, Kind, Quantity
from runner.plan.shapes import FileModel, Words, Written, fault, one_of


def _perhaps_exact(kind: Kind) -> Written:
    """Annotation of a constant that may be written as its value alone; it then counts as exact."""
    alone, full = Annotated[float, Quantity(kind)], Annotated[Constant, constant(kind)]
    return Written(one_of(_shape_of_constant, alone=alone, full=full), _as_exact)


def _shape_of_constant(written: Any) -> str:
    return "full" if isinstance(written, dict) else "alone"


def _as_exact(written: float | Constant) -> Constant:
    return (
        written if isinstance(written, Constant) else Constant.model_construct(value=written, uncertainty=0.0)
    )


class CapturesShunt(FileModel):
    """The shunt of captures taken by hand."""

    resistance: Annotated[float, Quantity(RESISTANCE, above=0)]
    # Named so that the reader of an uncertainty finds the value it is a share of.
    uncertainty: Annotated[float, Uncertainty(RESISTANCE, of="resistance")] = 0.0
    series_inductance: Annotated[Constant, _perhaps_exact(INDUCTANCE)] | None = None
    tempco: Annotated[Constant, _perhaps_exact(TEMPCO)] | None = None
    temperature_degC: Annotated[float, Quantity(TEMPERATURE, above=-273.15)] = Field(
        default=25.0, alias="temperature"
    )


def _as_shunt(written: CapturesShunt) -> Shunt:
    return Shunt.model_construct(
        resistance=Constant.model_construct(value=written.resistance, uncertainty=written.uncertainty),
        tempco=written.tempco,
        series_inductance=written.series_inductance,
        temperature_degC=written.temperature_degC,
    )


class Columns(FileModel):
    """Names of the columns (CSV) or arrays (NPZ); values in s, V and A."""

    time: Words = Field(examples=["t"])
    voltage: Words = Field(examples=["v_part"], description="Across the part.")
    shunt_voltage: Words | None = None
    current: Words | None = None

    @model_validator(mode="after")
    def _one_current(self) -> Self:
        if (self.shunt_voltage is None) == (self.current is None):
            raise fault("write either 'shunt_voltage' (with a 'shunt' section) or 'current', and not both")
        return self


class CaptureFile(FileModel):
    """One waveform on disk."""

    file: Words = Field(examples=["t25_w10us.csv"], description="Relative to the captures file.")
    temperature_degC: Temperature = Field(alias="temperature")


class CapturesFile(FileModel):
    """Captures taken by hand."""

    title: Words = Field(examples=["Captures taken by hand"])
    part: Part = Field(
        examples=[
            {"label": "DRUM-22-A", "inductance": "22 uH", "rated_current": "6 A", "resistance": "18 mohm"}
        ]
    )
    shunt: Annotated[Shunt, Written(CapturesShunt, _as_shunt)] | None = Field(
        default=None, examples=[{"resistance": "10 mohm", "uncertainty": "0.1 %"}]
    )
    skew: Annotated[Constant, _perhaps_exact(SKEW)] | None = Field(
        default=None, description="Voltage channel later than current channel; estimated when left out."
    )
    columns: Columns = Field(examples=[{"time": "t", "voltage": "v_part", "shunt_voltage": "v_shunt"}])
    captures: Annotated[tuple[CaptureFile, ...], Field(min_length=1)] = Field(
        examples=[[{"file": "t25_w10us.csv", "temperature": "25 degC"}]]
    )
    extract: Extract = Field(default_factory=Extract)

    @model_validator(mode="after")
    def _shunt_is_known(self) -> Self:
        if self.columns.shunt_voltage is not None and self.shunt is None:
            raise fault(
                "'columns.shunt_voltage' needs the shunt; add 'shunt: {resistance: 10 mohm, uncertainty: 0.1 %}'"
            )
        return self
