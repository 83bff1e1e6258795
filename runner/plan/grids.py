"""The pulse widths and bias currents of a plan, in the shapes in which they may be written: a list, a range, a search.

Whatever the shape, widths are kept climbing and currents in the order in which they are visited.
"""

from itertools import pairwise
from typing import Annotated, Any, Literal, Self

from pydantic import Field, field_validator, model_validator

from runner.plan.quantity import CURRENT, FRACTION, WIDTH, Quantity
from runner.plan.shapes import FileModel, Whole, fault, one_of

Width = Annotated[float, Quantity(WIDTH, above=0)]
Current = Annotated[float, Quantity(CURRENT, above=0)]
BiasCurrent = Annotated[float, Quantity(CURRENT, least=0)]
Count = Annotated[Whole, Field(ge=2, le=10_000)]
Budget = Annotated[Whole, Field(ge=4, le=1000)]


class Until(FileModel):
    """The interval at which a search is done."""

    isat: Annotated[float, Quantity(FRACTION, above=0, below=1, help="Interval of Isat, as a share of it.")]


class WidthSeek(FileModel):
    """Pulse widths placed by the runner where they tell most about the knee."""

    seek: Literal["knee"]
    from_: Width = Field(alias="from")
    to: Width
    budget: Budget = Field(default=18, description="Most points at one temperature.")
    until: Until = Until.model_construct(isat=0.005)

    @model_validator(mode="after")
    def _climbs(self) -> Self:
        _refuse_falling(self.from_, self.to)
        return self


class CurrentSeek(FileModel):
    """Bias currents placed by the runner where they tell most about the knee."""

    seek: Literal["knee"]
    from_: BiasCurrent = Field(default=0.0, alias="from")
    to: Current
    budget: Budget = Field(default=18, description="Most points at one temperature.")
    until: Until = Until.model_construct(isat=0.005)

    @model_validator(mode="after")
    def _climbs(self) -> Self:
        _refuse_falling(self.from_, self.to)
        return self


class WidthRange(FileModel):
    """Evenly spaced pulse widths."""

    from_: Width = Field(alias="from")
    to: Width
    count: Count = Field(examples=[18])

    @model_validator(mode="after")
    def _climbs(self) -> Self:
        _refuse_falling(self.from_, self.to)
        return self


class CurrentRange(FileModel):
    """Evenly spaced bias currents."""

    from_: BiasCurrent = Field(default=0.0, alias="from")
    to: Current
    count: Count = Field(examples=[21])
    both_ways: Annotated[bool, Field(strict=True, description="Climb, then come back down.")] = False

    @model_validator(mode="after")
    def _climbs(self) -> Self:
        _refuse_falling(self.from_, self.to)
        return self


class CurrentList(FileModel):
    """Chosen bias currents."""

    at: Annotated[tuple[BiasCurrent, ...], Field(min_length=1)] = Field(examples=[["0 A", "2 A", "4 A"]])
    both_ways: Annotated[bool, Field(strict=True, description="Climb, then come back down.")] = False

    @field_validator("at")
    @classmethod
    def _each_once(cls, values: tuple[float, ...]) -> tuple[float, ...]:
        return climbing(values, "A", 1.0)


def _shape_of_widths(written: Any) -> str:
    if isinstance(written, dict):
        return "seek" if "seek" in written else "range"
    return "list"


def _shape_of_currents(written: Any) -> str:
    if isinstance(written, dict):
        return "seek" if "seek" in written else ("chosen" if "at" in written else "range")
    return "list"


def as_widths(written: "tuple[float, ...] | WidthRange | WidthSeek") -> "tuple[float, ...] | WidthSeek":
    if isinstance(written, WidthRange):
        return evenly(written.from_, written.to, written.count)
    return written if isinstance(written, WidthSeek) else climbing(written, "us", 1e6)


def as_currents(
    written: "tuple[float, ...] | CurrentRange | CurrentList | CurrentSeek",
) -> "tuple[float, ...] | CurrentSeek":
    if isinstance(written, CurrentSeek):
        return written
    if isinstance(written, tuple):
        return climbing(written, "A", 1.0)
    up = written.at if isinstance(written, CurrentList) else evenly(written.from_, written.to, written.count)
    return up + up[-2::-1] if written.both_ways and len(up) > 1 else up


WIDTHS = one_of(
    _shape_of_widths, list=Annotated[tuple[Width, ...], Field(min_length=1)], range=WidthRange, seek=WidthSeek
)
CURRENTS = one_of(
    _shape_of_currents,
    list=Annotated[tuple[BiasCurrent, ...], Field(min_length=1)],
    range=CurrentRange,
    chosen=CurrentList,
    seek=CurrentSeek,
)


def evenly(first: float, last: float, count: int) -> tuple[float, ...]:
    """``count`` values from ``first`` to ``last``, both included, evenly spaced."""
    step = (last - first) / (count - 1)
    # Twelve digits: 2 us + 6 steps of a third of a microsecond is 4 us to the user.
    return (*(float(f"{first + index * step:.12g}") for index in range(count - 1)), last)


def climbing(values: tuple[float, ...], unit: str, scale: float) -> tuple[float, ...]:
    """The same values, climbing.

    Raises:
        PydanticCustomError: a value stands twice, or the values do not climb; shown times ``scale`` in ``unit``.
    """
    for index, (before, after) in enumerate(pairwise(values)):
        if after == before:
            raise fault(f"{after * scale:g} {unit} stands twice; keep one of them")
        if after < before:
            said = f"{after * scale:g} {unit} (value {index + 2}) comes after {before * scale:g} {unit}"
            raise fault(f"{said}, but values must climb; sort the list from the smallest")
    return values


def _refuse_falling(first: float, last: float) -> None:
    if last <= first:
        raise fault("'to' is not above 'from'; values climb, so write the smallest as 'from'")
