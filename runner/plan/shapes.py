"""What all models of files share: nothing is changed after loading, and unknown keys are errors.

A value may be written in several shapes (a list, a range, a sought knee), of which the rest of the house sees one.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Annotated, Any, Union

from pydantic import BaseModel, ConfigDict, Discriminator, Field, GetCoreSchemaHandler, Tag
from pydantic_core import CoreSchema, PydanticCustomError, core_schema

Whole = Annotated[int, Field(strict=True)]
Words = Annotated[str, Field(strict=True, min_length=1)]


class FileModel(BaseModel):
    """A mapping in a file that users write."""

    model_config = ConfigDict(frozen=True, extra="forbid", hide_input_in_errors=True, defer_build=True)


@dataclass(frozen=True, slots=True)
class Written:
    """Annotation: the value is written in the shape ``shape`` and kept as what ``finish`` makes of it."""

    shape: Any
    finish: Callable[[Any], Any]

    def __get_pydantic_core_schema__(self, source: Any, handler: GetCoreSchemaHandler) -> CoreSchema:
        return core_schema.no_info_after_validator_function(
            self.finish,
            handler.generate_schema(self.shape),
            # What was made of it is no longer in the shape it was written in.
            serialization=core_schema.plain_serializer_function_ser_schema(lambda kept: kept),
        )


def one_of(choose: Callable[[Any], str], **shapes: Any) -> Any:
    """A union whose member is chosen by ``choose`` from what is written, so that only its faults are shown."""
    # Tags appear in the path of an error; angle brackets keep them apart from keys that users write.
    union: Any = Union[tuple(Annotated[shape, Tag(f"<{name}>")] for name, shape in shapes.items())]  # noqa: UP007
    return Annotated[union, Discriminator(lambda written: f"<{choose(written)}>")]


def fault(what: str) -> PydanticCustomError:
    """A fault found by a validator, in words meant for the user."""
    return PydanticCustomError("said", "{said}", {"said": what})
