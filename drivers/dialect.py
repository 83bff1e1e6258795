"""A dialect: the file that spells out, for one role, the messages of one kind of instrument.

Everything that could be wrong with the file is found when it is read, so that nothing above here asks whether
an intent exists or a placeholder can be filled. The grammar is told, with examples, in the shipped files of
`plans/dialects/`.
"""

import difflib
import re
from collections.abc import Iterable, Iterator
from pathlib import Path
from typing import Annotated, Any, Literal, Self

import yaml
from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, ValidationError, model_validator
from pydantic_core import InitErrorDetails, PydanticCustomError

from drivers.blocks import Encoding, Order
from drivers.needs import ROLES, WORDS, Kind, Need, Role
from drivers.templates import placeholders

TERMINATORS = {"LF": b"\n", "CR": b"\r", "CRLF": b"\r\n"}
TerminatorName = Literal["LF", "CR", "CRLF"]


def _regex(text: object) -> object:
    if isinstance(text, str):
        try:
            re.compile(text)
        except re.error as why:
            raise ValueError(f"{text!r} is no regular expression: {why}") from why
    return text


def _as_tuple(value: object) -> object:
    return (value,) if isinstance(value, str) else value


Regex = Annotated[str, BeforeValidator(_regex)]
Names = Annotated[tuple[str, ...], BeforeValidator(_as_tuple)]


class _Part(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid", populate_by_name=True)


class Message(_Part):
    """One message: something sent, or something asked and how its reply is read.

    In the file a bare string is a message without a reply.
    """

    send: str | None = Field(
        default=None, description="what is sent; a reply comes only if 'expect' is there"
    )
    ask: str | None = Field(default=None, description="what is asked")
    gives: Names = Field(
        (), description="name of the value the reply brings, or names with commas between values"
    )
    as_: Kind = Field(default="number", alias="as", description="how the reply is read")
    expect: Regex | None = Field(default=None, description="the whole reply; anything else is a refusal")
    until: Regex | None = Field(default=None, description="asked again until the whole reply is this")
    pattern: Regex | None = Field(
        None, description="the value is what the first group of this finds in the reply"
    )
    units: dict[str, float] | None = Field(
        None, description="units that may stand behind the number, as multipliers"
    )
    times: float = Field(default=1.0, description="what a number is multiplied by to be SI")
    plus: float = Field(default=0.0, description="what is added to it then")
    when: Regex | None = Field(default=None, description="as: flag; replies that mean yes")
    bits: dict[str, int] = Field(
        {}, description="the reply is a register; name and weight of the bits it brings"
    )
    of: Encoding | None = Field(default=None, description="as: samples; how they are coded")
    order: Order = Field(default="big", description="as: samples; byte order")

    @model_validator(mode="before")
    @classmethod
    def _bare_string(cls, value: Any) -> Any:
        return {"send": value} if isinstance(value, str) else value

    @model_validator(mode="after")
    def _makes_sense(self) -> Self:
        if (self.send is None) == (self.ask is None):
            raise ValueError("a message has either 'send' or 'ask'")
        brings = bool(self.gives or self.bits)
        if self.send is not None and (brings or self.until):
            raise ValueError("a message that brings a value is an 'ask', not a 'send'")
        if self.ask is not None and not (brings or self.expect or self.until):
            raise ValueError("say what the reply brings: 'gives', 'bits', 'expect' or 'until'")
        if (self.as_ == "samples") != (self.of is not None):
            raise ValueError("'as: samples' and 'of: int16 | int32 | real32 | ascii' go together")
        if (self.as_ == "flag") != (self.when is not None):
            raise ValueError("'as: flag' and 'when: <replies that mean yes>' go together")
        if self.bits and self.gives:
            raise ValueError("a reply brings either the bits of a register ('bits') or values ('gives')")
        if len(self.gives) > 1 and self.as_ != "number":
            raise ValueError("only numbers can come several in one reply")
        placeholders(self.text)
        return self

    @property
    def text(self) -> str:
        return self.send if self.send is not None else self.ask or ""

    @property
    def is_answered(self) -> bool:
        return self.ask is not None or self.expect is not None

    @property
    def is_binary(self) -> bool:
        return self.of is not None and self.of != "ascii"

    @property
    def kind(self) -> Kind:
        return "flag" if self.bits else self.as_

    @property
    def brings(self) -> tuple[str, ...]:
        return self.gives + tuple(self.bits)


Messages = tuple[Message, ...]


class Terminator(_Part):
    """What ends a line, each way."""

    send: TerminatorName
    reply: TerminatorName

    @model_validator(mode="before")
    @classmethod
    def _both_ways(cls, value: Any) -> Any:
        return {"send": value, "reply": value} if isinstance(value, str) else value


class Errors(_Part):
    """How the instrument says that it refused something."""

    ask: str | None = Field(default=None, description="what brings the oldest error")
    none: Regex = Field(default="", description="the reply that means 'no error'")
    some: Regex = Field(default=".+", description="replies that are errors; anything else is garbage")
    in_reply: Regex | None = Field(default=None, description="any reply that looks like this is a refusal")
    meaning: dict[str, str] = Field(default={}, description="what an error says in words")


class PowerOn(_Part):
    """Where the instrument shows that it was switched on anew."""

    ask: str
    bit: int = Field(gt=0, description="weight of the bit; reading clears it")


class Codes(_Part):
    """What a digitizer's codes mean."""

    full_scale: float | None = Field(
        default=None, gt=0, description="the code that stands for the end of the range"
    )
    clip: tuple[int, int] | None = Field(
        default=None,
        description="codes at or beyond these may have been cut off; left out: the last hundredth",
    )


class Serial(_Part):
    """Settings of a serial line; a network or USB connection has none."""

    baud: int = Field(default=9600, gt=0)
    data_bits: Literal[7, 8] = 8
    parity: Literal["none", "even", "odd"] = "none"
    stop_bits: Literal[1, 2] = 1


class Dialect(_Part):
    """The messages of one kind of instrument for one role."""

    role: Role
    about: str = ""
    terminator: Terminator = Field(default=Terminator(send="LF", reply="LF"), validate_default=True)
    join: str | None = Field(
        None, description="between messages sent in one line; left out: one message a line"
    )
    separator: str = Field(
        default=";", min_length=1, max_length=1, description="between the replies in one line"
    )
    longest_line: int = Field(4000, ge=16, description="bytes the instrument takes in one line")
    overload: Regex | None = Field(
        None, description="replies that mean 'beyond the range', where SCPI's 9.9E37 is not used"
    )
    words: dict[str, dict[str, str]] = {}
    serial: Serial | None = None
    codes: Codes | None = None
    identity: str | None = Field(default=None, description="what brings the identity")
    errors: Errors = Errors()
    power_on: PowerOn | None = None
    reset: Messages = ()
    safe: Messages = Field(description="what makes the instrument harmless, whatever its state")
    intents: dict[str, Messages]

    @model_validator(mode="after")
    def _serves_its_role(self) -> Self:
        if faults := [*_intent_faults(self), *_word_faults(self), *_code_faults(self)]:
            raise ValidationError.from_exception_data("Dialect", faults)
        return self

    @classmethod
    def read(cls, path: Path) -> Self:
        """The dialect in a file, for use without a bench.

        Raises:
            pydantic.ValidationError: with all the faults of the file.
        """
        return cls.model_validate(yaml.safe_load(path.read_bytes()))


def _fault(where: tuple[str | int, ...], what: str) -> InitErrorDetails:
    # The type and context of a plain ValueError, so that whoever shows it needs no case of its own for dialects.
    return InitErrorDetails(
        type=PydanticCustomError("value_error", "{error}", {"error": what}), loc=where, input=None
    )


def _nearest(name: str, known: Iterable[str]) -> str:
    known = list(known)
    close = difflib.get_close_matches(name, known, n=1)
    if close:
        return f"; did you mean {close[0]!r}?"
    return f"; there are {', '.join(known)}" if known else "; nothing can be filled in here"


def _intent_faults(dialect: Dialect) -> Iterator[InitErrorDetails]:
    needs = ROLES[dialect.role]
    for name in dialect.intents:
        if name not in needs:
            yield _fault(("intents", name), f"a {dialect.role} has no intent {name!r}{_nearest(name, needs)}")
    for name, need in needs.items():
        if name in dialect.intents:
            yield from _message_faults(("intents", name), dialect.intents[name], need, dialect)
        elif not need.optional:
            yield _fault(
                ("intents",), f"a {dialect.role} needs the intent {name!r}, and this dialect lacks it"
            )
    for name in ("reset", "safe"):
        yield from _message_faults((name,), getattr(dialect, name), Need(), dialect)


def _message_faults(
    where: tuple[str | int, ...], messages: Messages, need: Need, dialect: Dialect
) -> Iterator[InitErrorDetails]:
    text_came = False
    for at, message in enumerate(messages):
        for name in placeholders(message.text):
            if name not in need.takes:
                yield _fault((*where, at), f"unknown placeholder {{{name}}}{_nearest(name, need.takes)}")
        for name in message.brings:
            if name not in need.known_values:
                yield _fault((*where, at), f"nobody asked for {name!r}{_nearest(name, need.known_values)}")
            elif (kind := need.kind_of(name)) != message.kind:
                yield _fault(
                    (*where, at),
                    f"{name!r} is read 'as: {kind}'{' or as one of some bits' * (kind == 'flag')}",
                )
        if dialect.join and message.is_binary and text_came:
            yield _fault(
                (*where, at),
                "where replies share a line, blocks come first: put this message before the others",
            )
        text_came = text_came or (message.is_answered and not message.is_binary)
    brought = {name for message in messages for name in message.brings}
    if missing := [name for name in need.gives if name not in brought]:
        yield _fault(where, f"no reply gives {', '.join(map(repr, missing))}")
    if need.one_of and not brought & set(need.one_of):
        yield _fault(where, f"no reply gives any of {', '.join(map(repr, need.one_of))}")


def _word_faults(dialect: Dialect) -> Iterator[InitErrorDetails]:
    for name, spelled in dialect.words.items():
        if name not in WORDS:
            yield _fault(("words", name), f"no value {name!r} is a word{_nearest(name, WORDS)}")
        elif set(spelled) != set(WORDS[name]):
            yield _fault(("words", name), f"spell exactly these: {', '.join(WORDS[name])}")
    for intent, messages in dialect.intents.items():
        for at, message in enumerate(messages):
            for name in {*placeholders(message.text), *message.brings} & set(WORDS) - set(dialect.words):
                yield _fault(
                    ("intents", intent, at), f"say under 'words: {name}:' how the instrument spells it"
                )


def _code_faults(dialect: Dialect) -> Iterator[InitErrorDetails]:
    if dialect.role != "digitizer":
        if dialect.codes:
            yield _fault(("codes",), f"a {dialect.role} has no codes")
        return
    kinds = {message.of for message in dialect.intents.get("fetch", ()) if message.of}
    has_scale = dialect.codes is not None and dialect.codes.full_scale is not None
    if kinds & {"int16", "int32"} and not has_scale and "scaling" not in dialect.intents:
        yield _fault(("codes",), "give 'full_scale' (code at the end of the range) or the intent 'scaling'")
