"""From pydantic's errors to faults that stand where the user wrote them, in words that say what to do.

Works for any pydantic model: the path of an error is followed through the file (what does not stand there, such as the
name of a union's member, is skipped) and through the model (to find the keys that would have been right).
"""

import difflib
import types
import typing
from collections.abc import Iterable, Iterator, Mapping, Sequence
from typing import Any, TypeVar

import yaml
from pydantic import BaseModel, ValidationError

from runner.errors import Fault, InputError
from runner.plan.located import Document, Keys, Place
from runner.plan.shapes import Written

Model = TypeVar("Model", bound=BaseModel)


def validate(document: Document, model: type[Model]) -> Model:
    """The file as a ``model``.

    Raises:
        InputError: all that is wrong, each located.
    """
    try:
        return model.model_validate(document.value)
    except ValidationError as error:
        raise InputError(faults_of(error, document, model)) from None


def faults_of(error: ValidationError, document: Document, model: type[BaseModel]) -> list[Fault]:
    """The faults in ``error``, in the order in which they stand in the file, each place told once."""
    details = [(_followed(detail["loc"], document), detail) for detail in error.errors(include_url=False)]
    found: dict[Fault, Place] = {}
    for keys, detail in details:
        # A list whose items are all wrong counts as too short as well; only the items are worth a word.
        if detail["type"] == "too_short" and any(_is_below(other, keys) for other, _ in details):
            continue
        found.setdefault(_fault(detail["type"], keys, detail, document, model), document.nearest(keys))
    return sorted(found, key=lambda fault: (found[fault].line, found[fault].column))


def _is_below(keys: Keys, above: Keys) -> bool:
    return len(keys) > len(above) and keys[: len(above)] == above


def near(word: str, known: Iterable[str]) -> str | None:
    """The known word that ``word`` was probably meant to be."""
    by_lower = {name.lower(): name for name in known}
    if word.lower() in by_lower:
        return by_lower[word.lower()]
    found = difflib.get_close_matches(word.lower(), by_lower, n=1, cutoff=0.5)
    return by_lower[found[0]] if found else None


def _fault(kind: str, keys: Keys, detail: Any, document: Document, model: type[BaseModel]) -> Fault:
    context: Mapping[str, Any] = detail.get("ctx") or {}
    written = detail.get("input")
    if kind == "missing":
        # What stands at the place of the missing key is the mapping that lacks it.
        name = detail["loc"][-1]
        if isinstance(name, int):
            return document.fault(
                keys, f"a value is missing; write for example {_example(model, detail['loc'][:-1])}"
            )
        example = _example(model, detail["loc"])
        what = f"the key '{name}' is missing; add '{name}: {example}'"
        return document.fault(keys, what)
    if kind == "extra_forbidden":
        return document.fault_at_key(keys, _unknown(str(keys[-1]), _keys_at(model, keys[:-1], document)))
    if kind in ("said", "quantity"):
        return document.fault(keys, str(context["said"]))
    return document.fault(keys, _standard(kind, written, context, detail["msg"]))


def _standard(kind: str, written: object, context: Mapping[str, Any], message: str) -> str:
    shown = _shown(written)
    if kind in ("model_type", "model_attributes_type", "dict_type", "dataclass_type"):
        return f"{shown} stands where 'key: value' lines are expected; write a mapping, in braces or indented below"
    if kind in ("tuple_type", "list_type"):
        return f"{shown} stands where a list is expected; write it in brackets: [{_plain(written)}]"
    if kind in ("string_type", "string_too_short"):
        return f"{shown} is no text; write a word, in quotes if it looks like a number"
    if kind in ("int_type", "int_parsing", "int_from_float"):
        return f"{shown} is no whole number; write for example 8"
    if kind in ("float_type", "float_parsing", "finite_number"):
        return f"{shown} is no number; write for example 1.0"
    if kind in ("bool_type", "bool_parsing"):
        return f"{shown} is neither true nor false; write one of them"
    if kind in ("literal_error", "enum"):
        return _choice(shown, written, str(context.get("expected", "")))
    if kind in ("greater_than", "greater_than_equal"):
        return f"{shown} is too small; write at least {context.get('ge', context.get('gt'))}"
    if kind in ("less_than", "less_than_equal"):
        return f"{shown} is too large; write at most {context.get('le', context.get('lt'))}"
    if kind == "too_short":
        return f"{_count(context)} too few; write at least {context.get('min_length')}"
    if kind == "too_long":
        return f"{_count(context)} too many; write at most {context.get('max_length')}"
    if kind in ("date_type", "date_parsing", "date_from_datetime_parsing", "date_from_datetime_inexact"):
        return f"{shown} is no date; write it as 2026-03-02"
    if kind in ("union_tag_invalid", "union_tag_not_found"):
        return f"{shown} is none of the shapes known here; copy one from the shipped examples"
    if kind in ("value_error", "assertion_error"):
        return str(context.get("error", message)).removeprefix("Value error, ")
    return f"{shown}: {message[:1].lower()}{message[1:]}; copy this value from a shipped example"


def _count(context: Mapping[str, Any]) -> str:
    count = int(context.get("actual_length") or 0)
    return {0: "no value is", 1: "1 value is"}.get(count, f"{count} values are")


def _choice(shown: str, written: object, expected: str) -> str:
    choices = [
        choice.strip().strip("'\"") for choice in expected.replace(" or ", ", ").split(",") if choice.strip()
    ]
    meant = near(str(written), choices)
    hint = f"; did you mean '{meant}'?" if meant else ";"
    return f"{shown} is not known here{hint} write one of: {', '.join(choices)}"


def _unknown(key: str, known: Sequence[str]) -> str:
    meant = near(key, known)
    if meant:
        return f"unknown key '{key}'; did you mean '{meant}'? (known here: {', '.join(known)})"
    if known:
        return f"unknown key '{key}'; remove it (known here: {', '.join(known)})"
    return f"unknown key '{key}'; remove it"


def _followed(loc: Sequence[str | int], document: Document) -> Keys:
    """The keys of the file along an error's path; what does not stand in the file is left out."""
    keys: Keys = ()
    for step in loc:
        for candidate in (step, _as_int(step)):
            if candidate is not None and document.has((*keys, candidate)):
                keys = (*keys, candidate)
                break
    return keys


def _as_int(step: str | int) -> int | None:
    return int(step) if isinstance(step, str) and step.isdigit() else None


def _keys_at(model: type[BaseModel], keys: Keys, document: Document) -> list[str]:
    """The keys that a mapping at ``keys`` may have, by the models that could stand there."""
    written: Any = document.value
    types_here: list[Any] = [model]
    for key in keys:
        types_here = list(_below(types_here, key))
        written = written[key]
    models = [t for t in types_here if isinstance(t, type) and issubclass(t, BaseModel)]
    if len(models) > 1 and isinstance(written, dict):
        # Among several shapes the one with most of its keys written is the one that was meant.
        models = [max(models, key=lambda m: len(set(_names(m)) & set(written)))]
    return [name for m in models for name in _names(m)]


def _names(model: type[BaseModel]) -> list[str]:
    return [field.alias or name for name, field in model.model_fields.items()]


def _below(candidates: Iterable[Any], key: str | int) -> Iterator[Any]:
    for candidate in candidates:
        if isinstance(candidate, type) and issubclass(candidate, BaseModel):
            for name, field in candidate.model_fields.items():
                if (field.alias or name) == key:
                    written = [m.shape for m in field.metadata if isinstance(m, Written)]
                    yield from _spread(written[0] if written else field.annotation)
        else:
            origin, arguments = typing.get_origin(candidate), typing.get_args(candidate)
            if origin in (tuple, list):
                yield from _spread(arguments[0]) if isinstance(key, int) else ()
            elif isinstance(origin, type) and issubclass(origin, Mapping):
                yield from _spread(arguments[1])


def _spread(annotation: Any) -> Iterator[Any]:
    """The types that an annotation may stand for, without unions and annotations around them."""
    origin = typing.get_origin(annotation)
    if origin is typing.Annotated:
        written = [m.shape for m in annotation.__metadata__ if isinstance(m, Written)]
        yield from _spread(written[0] if written else annotation.__origin__)
    elif origin in (typing.Union, types.UnionType):
        for member in typing.get_args(annotation):
            yield from _spread(member)
    else:
        yield annotation


def _example(model: type[BaseModel], loc: Sequence[str | int]) -> str:
    """How the missing value at ``loc`` might be written."""
    candidates: list[Any] = [model]
    for step in loc[:-1]:
        candidates = list(_below(candidates, step)) or candidates
    for candidate in candidates:
        if isinstance(candidate, type) and issubclass(candidate, BaseModel):
            for name, field in candidate.model_fields.items():
                if (field.alias or name) != loc[-1]:
                    continue
                if field.examples:
                    return _flow(field.examples[0])
                kinds = [m.kind for m in field.metadata if hasattr(m, "kind")]
                if kinds:
                    return str(kinds[0].example)
    return "..."


def _flow(value: object) -> str:
    text = yaml.safe_dump(value, default_flow_style=True, sort_keys=False, width=1000, allow_unicode=True)
    return text.strip().removesuffix("...").strip()


def _shown(written: object) -> str:
    if isinstance(written, bool):
        return "'true'" if written else "'false'"
    if written is None:
        return "nothing"
    if isinstance(written, Mapping):
        return "a mapping"
    if isinstance(written, (list, tuple)):
        return "a list"
    return repr(written)


def _plain(written: object) -> str:
    return str(written) if isinstance(written, (str, int, float)) and not isinstance(written, bool) else "..."
