"""Calibration constants: a value with its unit, one standard uncertainty (k = 1), a date and a certificate.

How a constant is written depends on what it is: each kind has a model of its own, and all are kept as `Constant`.
"""

import datetime
from typing import Annotated, Any

from pydantic import Field, GetCoreSchemaHandler, ValidationInfo, create_model
from pydantic_core import CoreSchema, PydanticCustomError, core_schema

from runner.plan.quantity import FACTOR, FRACTION, Kind, Quantity, read_quantity
from runner.plan.shapes import FileModel, Written


class Constant(FileModel):
    """A calibration constant; `uncertainty` is one standard uncertainty (k = 1), in the unit of the value."""

    value: float
    uncertainty: float
    date: datetime.date | None = None
    certificate: str | None = None


class Uncertainty:
    """Annotation: a standard uncertainty, written in the unit of its value or as a share of it."""

    def __init__(self, kind: Kind, of: str = "value") -> None:
        self.kind = kind
        self.of = of

    def read(self, written: Any, info: ValidationInfo) -> float:
        value = info.data.get(self.of)
        try:
            if isinstance(written, str) and written.strip().endswith("%"):
                share = read_quantity(written, FRACTION)
                if value == 0:
                    raise ValueError(
                        f"{written!r} of a value of zero says nothing; write it as '{self.kind.example}'"
                    )
                result = share * abs(value) if value is not None else share
            else:
                result = read_quantity(written, self.kind)
            if result < 0:
                raise ValueError(f"{written!r} is negative; a standard uncertainty is zero or more")
        except ValueError as error:
            raise PydanticCustomError("quantity", "{said}", {"said": str(error)}) from error
        return result

    def __get_pydantic_core_schema__(self, source: Any, handler: GetCoreSchemaHandler) -> CoreSchema:
        return core_schema.with_info_plain_validator_function(self.read)

    def __get_pydantic_json_schema__(self, schema: CoreSchema, handler: Any) -> dict[str, Any]:
        said = f"One standard uncertainty (k = 1), as a share of the value or such as {self.kind.example}."
        return {"type": ["string", "number"], "description": said, "examples": ["0.1 %"]}


def constant(kind: Kind, least: float | None = None, above: float | None = None) -> Written:
    """Annotation of a `Constant` of a kind, written with its unit."""
    shape = create_model(
        f"ConstantOf_{kind.name.replace(' ', '_')}",
        __base__=FileModel,
        __doc__=f"A calibration constant: {kind.name} with its standard uncertainty (k = 1) and date.",
        value=(Annotated[float, Quantity(kind, least=least, above=above)], Field()),
        uncertainty=(Annotated[float, Uncertainty(kind)], Field(examples=["0.1 %"])),
        date=(datetime.date | None, None),
        certificate=(str | None, None),
    )
    return Written(shape, _as_constant)


def _as_constant(written: Any) -> Constant:
    return Constant.model_construct(
        value=written.value,
        uncertainty=written.uncertainty,
        date=written.date,
        certificate=written.certificate,
    )


def _given(written: FileModel) -> dict[str, Constant]:
    """The constants that were written, by name."""
    return {
        name: getattr(written, name)
        for name in type(written).model_fields
        if getattr(written, name) is not None
    }


def calibrated(name: str, **constants: Written) -> Written:
    """Annotation of a mapping of constants; those that are not written are absent."""
    fields: dict[str, Any] = {
        key: (Annotated[Constant, kept] | None, None) for key, kept in constants.items()
    }
    return Written(create_model(f"{name}Calibration", __base__=FileModel, **fields), _given)


GAIN = constant(FACTOR, above=0)
