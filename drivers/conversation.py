"""One conversation with one instrument: intents in, values out. Everything that is sent passes here.

What a reader must believe:
- Where the dialect lets messages share a line, an intent is one line and one round trip: its settings, its
  questions, the error queue and the power-on bit. So every write group is checked, and a restart in mid-run
  is seen, at no cost.
- A conversation that got no reply, or garbage, does not know what comes next on its wire. It says so once, by
  the error it raises, and gets into step by reopening the session before it sends anything else: a late reply
  can never be taken for the answer to a later question.
- The power-on bit of the first exchange is that of an instrument switched on before we came. Any later one is
  a restart.
"""

import re
import time
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Literal

from drivers.blocks import NotABlock, bytes_per_sample, decode_samples, take_block
from drivers.dialect import TERMINATORS, Dialect, Message
from drivers.errors import Disconnected, Garbled, InstrumentError, NoReply, Refused, Restarted
from drivers.replies import Values, parse_number, parse_numbers, split_units
from drivers.session import Session
from drivers.templates import Value, fill

# Errors with these numbers tell of a broken exchange (SCPI-1999 vol. 2, 21.8: -3xx device, -4xx query, -500
# power on), which we know of already; the others tell of a message that was not accepted.
_CONSEQUENCE = re.compile(r"-[345]\d\d\b.*", re.DOTALL)
_LONGEST_QUEUE = 50


_PLAIN = Message.model_validate(
    {"ask": "?", "expect": ".*"}
)  # a question whose reply is looked at here and not by the dialect


@dataclass(frozen=True, slots=True)
class _Question:
    sent: str
    about: Literal["value", "errors", "power on"]
    message: Message


@dataclass(frozen=True, slots=True)
class _Line:
    text: str
    questions: tuple[_Question, ...]


class Conversation:
    """Carries out the intents of a dialect over a session."""

    def __init__(self, session: Session, dialect: Dialect) -> None:
        self.session = session
        self.dialect = dialect
        self._end = TERMINATORS[dialect.terminator.send]
        self._unanswered = ""
        self._in_step = True
        self._acquainted = False
        self._fixed: dict[str, tuple[_Line, ...]] = {}  # lines of the intents that take no values, by name
        errors, power_on = dialect.errors.ask, dialect.power_on
        self._service: tuple[_Question, ...] = ()
        if errors:
            self._service += (_Question(errors, "errors", _PLAIN),)
        if power_on:
            self._service += (_Question(power_on.ask, "power on", _PLAIN),)

    # ---- what the roles call

    def carry_out(self, intent: str, *, sample_count: int | None = None, **values: Value) -> Values:
        """Sends the messages of an intent and reads what they bring.

        Raises:
            Refused, Restarted, NoReply, Garbled, Disconnected.
        """
        messages = self.dialect.intents[intent]
        if values:
            return self.say(messages, values, sample_count=sample_count)
        lines = self._fixed.get(intent)
        if lines is None:
            lines = self._fixed[intent] = tuple(self._lines(messages, {}))
        return self._send(lines, sample_count)

    def say(
        self,
        messages: Sequence[Message],
        values: dict[str, Value] | None = None,
        *,
        sample_count: int | None = None,
    ) -> Values:
        """As `carry_out`, for messages that stand outside the intents."""
        return self._send(tuple(self._lines(messages, values or {})), sample_count)

    def _send(self, lines: Sequence[_Line], sample_count: int | None) -> Values:
        brought = Values()
        if not self._in_step or self._unanswered:
            self._get_into_step()
        for line in lines:
            self._exchange(line, brought, sample_count)
        return brought

    def errors(self) -> tuple[str, ...]:
        """Empties the error queue; oldest first, and none where the dialect has no way to ask."""
        self._reopen_if_needed()
        found: list[str] = []
        while self.dialect.errors.ask and len(found) < _LONGEST_QUEUE:
            text = self._ask(self.dialect.errors.ask)
            if not self._is_error(self.dialect.errors.ask, text):
                break
            found.append(self._in_words(text))
        return tuple(found)

    def identity(self) -> str:
        """What the instrument says it is; empty where the dialect has no way to ask."""
        self._get_into_step()
        return self._ask(self.dialect.identity) if self.dialect.identity else ""

    def has_restarted(self) -> bool:
        """Whether it was switched on anew since the first exchange, or since this was last said."""
        if self.dialect.power_on is None:
            return False
        self._reopen_if_needed()
        text = self._ask(self.dialect.power_on.ask)
        return self._power_on_seen(_Question(self.dialect.power_on.ask, "power on", _PLAIN), text)

    def reopen(self) -> None:
        self._in_step = False
        self._reopen_if_needed()

    def distrust(self) -> None:
        """A reply that could be read was still wrong: gets into step anew before the next exchange."""
        self._in_step = False

    # ---- what is sent

    def _lines(self, messages: Sequence[Message], values: dict[str, Value]) -> Iterator[_Line]:
        units = [(fill(message.text, values, self.dialect.words), message) for message in messages]
        if self.dialect.join is None:
            for text, message in units:
                yield _Line(text, (_Question(text, "value", message),) if message.is_answered else ())
            # An answered message was accepted or refused by its own answer; only silent ones leave a doubt.
            if self.dialect.errors.ask and any(not message.is_answered for message in messages):
                yield _Line(self.dialect.errors.ask, self._service[:1])
            return
        if not units:
            return
        texts: list[str] = []
        questions: list[_Question] = []
        length = 0
        for text, message in units:
            if texts and length + len(text) > self.dialect.longest_line:
                yield _Line(_joined(texts, self.dialect.join), tuple(questions))
                texts, questions, length = [], [], 0
            texts.append(text)
            length += len(text) + len(self.dialect.join)
            if message.is_answered:
                questions.append(_Question(text, "value", message))
        texts += [question.sent for question in self._service]
        yield _Line(_joined(texts, self.dialect.join), (*questions, *self._service))

    # ---- one round trip

    def _exchange(self, line: _Line, brought: Values, sample_count: int | None) -> None:
        try:
            self.session.write(line.text.encode("ascii") + self._end)
            if not line.questions:
                return
            rest = self._take_blocks(line, brought, sample_count)
            units = self._take_texts(line, rest)
        except (NoReply, Garbled, Disconnected) as why:
            self._in_step = False
            self._unanswered = line.text if isinstance(why, NoReply) else ""
            raise
        self._check(line, rest, units)
        for question, text in zip(rest, units, strict=True):
            if question.about == "value":
                self._read(question, text, brought)

    def _take_blocks(self, line: _Line, brought: Values, sample_count: int | None) -> tuple[_Question, ...]:
        """Reads the blocks, which come first, and returns the questions that are still open."""
        for at, question in enumerate(line.questions):
            message = question.message
            if not message.is_binary:
                return line.questions[at:]
            assert message.of is not None
            width = bytes_per_sample(message.of)
            expected = sample_count * width if sample_count is not None and width else None
            try:
                data = take_block(self.session.read_exactly, expected)
                brought.samples[message.gives[0]] = decode_samples(data, message.of, message.order)
                if at + 1 < len(line.questions):
                    between = self.session.read_exactly(1)
                    if between != self.dialect.separator.encode():
                        raise NotABlock(f"after a block came {between!r}", between)
            except NotABlock as why:
                # An instrument that will not send a block may send only what it thinks of the question.
                units = split_units(
                    self._text(line, why.began + self.session.read_line()), self.dialect.separator
                )
                self._refuse_if_it_says_so(line, units)
                raise self._garbled(line.text, str(why)) from why
            except ValueError as why:
                raise self._garbled(line.text, str(why)) from why
        return ()

    def _take_texts(self, line: _Line, questions: tuple[_Question, ...]) -> list[str]:
        text = self._text(line, self.session.read_line())
        if not questions:
            if text.strip():
                raise self._garbled(line.text, f"after the last block came {text!r}")
            return []
        if len(questions) == 1 and len(line.questions) == 1:
            return [text.strip()]
        units = split_units(text, self.dialect.separator)
        if len(units) != len(questions):
            self._refuse_if_it_says_so(line, units)
            raise self._garbled(line.text, f"{len(questions)} replies were due, {text!r} came")
        return units

    def _text(self, line: _Line, data: bytes) -> str:
        try:
            return data.decode("ascii")
        except UnicodeDecodeError as why:
            raise self._garbled(line.text, f"{data[:60]!r} is no text") from why

    # ---- what the replies mean

    def _check(self, line: _Line, questions: Sequence[_Question], units: Sequence[str]) -> None:
        """Raises what the instrument reports about the whole line."""
        errors: list[str] = []
        restarted = False
        for question, text in zip(questions, units, strict=True):
            in_reply = self.dialect.errors.in_reply
            if question.about == "errors" and self._is_error(line.text, text):
                errors += [self._in_words(text), *self.errors()]
            elif question.about == "power on":
                restarted = self._power_on_seen(question, text)
            elif question.about == "value" and in_reply and re.fullmatch(in_reply, text):
                errors.append(self._in_words(text))
        if restarted:
            raise Restarted(
                self.session.role,
                self.session.resource,
                "it was switched on anew: its settings are lost and must be made again; check its mains plug",
            )
        if errors:
            raise self._refused(line.text, errors)

    def _refuse_if_it_says_so(self, line: _Line, units: Sequence[str]) -> None:
        """Fewer replies than were due, but the error queue, asked last, has something to say about it."""
        service = [question.about for question in line.questions if question.about != "value"]
        if not service or len(units) < len(service) or service[0] != "errors":
            return
        text = units[-len(service)]
        if re.fullmatch(self.dialect.errors.some, text) and not re.fullmatch(self.dialect.errors.none, text):
            raise self._refused(line.text, [self._in_words(text), *self.errors()])

    def _is_error(self, sent: str, text: str) -> bool:
        if re.fullmatch(self.dialect.errors.none, text):
            return False
        if re.fullmatch(self.dialect.errors.some, text):
            return True
        self._in_step = False
        raise self._garbled(sent, f"{text!r} is nothing that an error queue says")

    def _power_on_seen(self, question: _Question, text: str) -> bool:
        assert self.dialect.power_on is not None
        try:
            is_on = bool(int(parse_number(text)) & self.dialect.power_on.bit)
        except (ValueError, OverflowError) as why:
            self._in_step = False
            raise self._garbled(question.sent, f"{text!r} is no register") from why
        was_acquainted, self._acquainted = self._acquainted, True
        return is_on and was_acquainted

    def _read(self, question: _Question, text: str, brought: Values) -> None:
        message = question.message
        if message.until is not None:
            text = self._wait_until(question, message.until, text)
        if message.expect is not None and not re.fullmatch(message.expect, text):
            raise self._refused(question.sent, [f"it answered {text!r}"])
        try:
            self._interpret(message, text, brought)
        except (ValueError, OverflowError) as why:
            self._in_step = False
            raise self._garbled(question.sent, str(why)) from why

    def _interpret(self, message: Message, text: str, brought: Values) -> None:
        if message.pattern is not None:
            found = re.search(message.pattern, text)
            if found is None:
                raise ValueError(f"{text!r} does not look like {message.pattern!r}")
            text = found[found.re.groups and 1]
        for name, weight in message.bits.items():
            brought.flags[name] = bool(int(parse_number(text)) & weight)
        if not message.gives:
            return
        name = message.gives[0]
        match message.as_:
            case "text":
                brought.texts[name] = text
            case "flag":
                brought.flags[name] = re.fullmatch(message.when or "", text) is not None
            case "word":
                spelled = {spelling: meaning for meaning, spelling in self.dialect.words[name].items()}
                if text not in spelled:
                    raise ValueError(f"{text!r} is none of {', '.join(spelled)}")
                brought.texts[name] = spelled[text]
            case "samples":
                brought.samples[name] = decode_samples(text.encode("ascii"), "ascii", "big")
            case "numbers":
                brought.lists[name] = tuple(
                    self._scaled(message, item) for item in parse_numbers(text, message.units)
                )
            case _:
                items = [text] if len(message.gives) == 1 else text.split(",")
                if len(items) != len(message.gives):
                    raise ValueError(
                        f"{text!r} should be {len(message.gives)} numbers: {', '.join(message.gives)}"
                    )
                for each, item in zip(message.gives, items, strict=True):
                    brought.numbers[each] = self._scaled(message, self._number(message, item))

    def _number(self, message: Message, text: str) -> float:
        if self.dialect.overload and re.fullmatch(self.dialect.overload, text.strip()):
            return float("inf")
        return parse_number(text, message.units)

    @staticmethod
    def _scaled(message: Message, value: float) -> float:
        return value * message.times + message.plus

    def _wait_until(self, question: _Question, until: str, text: str) -> str:
        deadline = time.monotonic() + self.session.timeout
        while not re.fullmatch(until, text):
            if time.monotonic() > deadline:
                raise NoReply(
                    self.session.role,
                    self.session.resource,
                    f"{question.sent!r} still answers {text!r} after {self.session.timeout:.3g} s; "
                    "check the instrument and the bench's 'timeout'",
                )
            text = self._ask(question.sent)
        return text

    # ---- getting into step, and plain questions

    def _get_into_step(self) -> None:
        """Reopens after a broken exchange; an error found then belongs to the line that got no reply."""
        unanswered = self._unanswered
        self._reopen_if_needed()
        self._unanswered = ""
        if unanswered and self.dialect.errors.ask:
            refusals = [error for error in self.errors() if not _CONSEQUENCE.fullmatch(error)]
            if refusals:
                raise self._refused(unanswered, refusals)

    def _reopen_if_needed(self) -> None:
        if not self._in_step:
            self.session.reopen()
            self._in_step = True

    def _ask(self, text: str) -> str:
        line = _Line(text, (_Question(text, "value", _PLAIN),))
        try:
            self.session.write(text.encode("ascii") + self._end)
            return self._text(line, self.session.read_line()).strip()
        except InstrumentError:
            self._in_step = False
            raise

    def _in_words(self, error: str) -> str:
        meaning = self.dialect.errors.meaning.get(error)
        return f"{error} ({meaning})" if meaning else error

    def _refused(self, sent: str, errors: Sequence[str]) -> Refused:
        return Refused(
            self.session.role,
            self.session.resource,
            f"refused {sent!r}: {', '.join(errors)}; check the value against what it can do, and the dialect",
            tuple(errors),
        )

    def _garbled(self, sent: str, what: str) -> Garbled:
        return Garbled(
            self.session.role,
            self.session.resource,
            f"the reply to {sent!r} makes no sense: {what}; check the cable, the terminators and the dialect",
        )


def _joined(texts: Sequence[str], join: str) -> str:
    # A colon brings the parser back to the root; a common command has no path and takes none (488.2, 7.6.1;
    # SCPI 6.2.4).
    line = texts[0]
    for text in texts[1:]:
        line += (join.removesuffix(":") if text.startswith((":", "*")) else join) + text
    return line
