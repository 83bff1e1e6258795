"""One conversation with one instrument: intents in, values out. Everything that is sent passes here.

What a reader must believe:
- An intent is one line and one round trip where the dialect allows it, its error query and power-on bit
  included (`lines`). So every write group is checked, and a restart in mid-run is seen, at no cost.
- A conversation is out of step from the moment it sends until it has read all that is due. Whatever ends an
  exchange early (no reply, garbage, Ctrl-C) leaves it so, and it reopens the session before it sends anything
  else: a late reply can never be taken for the answer to a later question.
- The power-on bit of the first exchange is that of an instrument switched on before we came. Any later one is
  a restart.
"""

import contextlib
import re
import time
from collections.abc import Sequence

from drivers.blocks import NotABlock, bytes_per_sample, decode_samples, take_block
from drivers.dialect import TERMINATORS, Dialect, Message
from drivers.errors import Garbled, InstrumentError, NoReply, Refused, Restarted
from drivers.lines import Line, Question, plan_lines
from drivers.readings import read_reply
from drivers.replies import Values, parse_number, split_units
from drivers.session import Session
from drivers.templates import Value

# Errors with these numbers tell of a broken exchange (SCPI-1999 vol. 2, 21.8: -3xx device, -4xx query, -500
# power on), which we know of already; the others tell of a message that was not accepted.
_CONSEQUENCE = re.compile(r"-[345]\d\d\b.*", re.DOTALL)

_LONGEST_QUEUE = 50  # an instrument whose queue does not end has another fault


class Conversation:
    """Carries out the intents of a dialect over a session.

    Attributes:
        restarts: how often the instrument was switched on anew since the first exchange.
    """

    def __init__(self, session: Session, dialect: Dialect) -> None:
        self.session = session
        self.dialect = dialect
        self.restarts = 0
        self._end = TERMINATORS[dialect.terminator.send]
        self._in_step = True
        self._unanswered = ""  # the line that got no reply, until its error was asked for
        self._acquainted = False  # the power-on bit was read before
        self._fixed: dict[str, tuple[Line, ...]] = {}  # lines of the intents that take no values

    # ---- what the roles call

    def carry_out(self, intent: str, *, sample_count: int | None = None, **values: Value) -> Values:
        """Sends the messages of an intent and reads what they bring.

        Args:
            sample_count: how many samples a block of indefinite length will have.

        Raises:
            Refused, Restarted, NoReply, Garbled, Disconnected.
            ValueError: a value is not finite; nothing was sent.
        """
        messages = self.dialect.intents[intent]
        if values:
            return self._send(tuple(plan_lines(self.dialect, messages, values)), sample_count)
        lines = self._fixed.get(intent)
        if lines is None:
            lines = self._fixed[intent] = tuple(plan_lines(self.dialect, messages, {}))
        return self._send(lines, sample_count)

    def say(self, messages: Sequence[Message]) -> None:
        """Sends messages that stand outside the intents and take no values."""
        self._send(tuple(plan_lines(self.dialect, messages, {})), None)

    def tell(self, messages: Sequence[Message]) -> None:
        """Sends what is no question and reads no reply: for an instrument that may still listen though it says
        nothing. Whether it obeyed stays unknown. Never raises for an instrument."""
        with contextlib.suppress(InstrumentError):
            self.reopen()
        for message in messages:
            if message.ask is None:
                self._in_step = False
                with contextlib.suppress(InstrumentError):
                    self.session.write(message.text.encode("ascii") + self._end)

    def errors(self) -> tuple[str, ...]:
        """Empties the error queue; oldest first, and none where the dialect has no way to ask."""
        found: list[str] = []
        while self.dialect.errors.ask and len(found) < _LONGEST_QUEUE:
            text = self._ask(self.dialect.errors.ask)
            if not self._is_error(self.dialect.errors.ask, text):
                break
            found.append(self._in_words(text))
        return tuple(found)

    def identity(self) -> str:
        """What the instrument says it is; empty where the dialect has no way to ask."""
        return self._ask(self.dialect.identity) if self.dialect.identity else ""

    def has_restarted(self) -> bool:
        """Whether it was switched on anew since the first exchange, and that was not said before."""
        if self.dialect.power_on is None:
            return False
        asked = self.dialect.power_on.ask
        return self._power_on_seen(asked, self._ask(asked))

    def reopen(self) -> None:
        self._in_step = False
        self._reopen_if_needed()

    def distrust(self) -> None:
        """A reply that could be read was still wrong: gets into step anew before the next exchange."""
        self._in_step = False

    # ---- one round trip

    def _send(self, lines: Sequence[Line], sample_count: int | None) -> Values:
        brought = Values()
        if not self._in_step or self._unanswered:
            self._get_into_step()
        for line in lines:
            self._exchange(line, brought, sample_count)
        return brought

    def _exchange(self, line: Line, brought: Values, sample_count: int | None) -> None:
        self._in_step = False
        try:
            self.session.write(line.text.encode("ascii") + self._end)
            questions = self._take_blocks(line, brought, sample_count)
            units = self._take_texts(line, questions) if line.questions else []
        except NoReply:
            self._unanswered = line.text
            raise
        self._in_step = True
        self._check(line, questions, units)
        for question, text in zip(questions, units, strict=True):
            if question.about == "value":
                self._read(question, text, brought)

    def _take_blocks(self, line: Line, brought: Values, sample_count: int | None) -> tuple[Question, ...]:
        """Reads the blocks, which come first, and returns the questions that are still open."""
        for at, question in enumerate(line.questions):
            message = question.message
            if message.of is None or not message.is_binary:
                return line.questions[at:]
            width = bytes_per_sample(message.of)
            try:
                data = take_block(
                    self.session.read_exactly, sample_count * width if sample_count and width else None
                )
                brought.samples[message.gives[0]] = decode_samples(data, message.of, message.order)
                if at + 1 < len(line.questions):
                    between = self.session.read_exactly(1)
                    if between != self.dialect.separator.encode():
                        raise NotABlock(f"after a block came {between!r}", between)
            except NotABlock as why:
                # An instrument that will not send a block may send only what it thinks of the question.
                self._refuse_if_it_says_so(line, self._units(line, why.began + self.session.read_line()))
                raise self._garbled(line.text, str(why)) from why
            except ValueError as why:
                raise self._garbled(line.text, str(why)) from why
        return ()

    def _take_texts(self, line: Line, questions: tuple[Question, ...]) -> list[str]:
        text = self.session.read_line()
        if not questions:
            if text.strip():
                raise self._garbled(line.text, f"after the last block came {text[:60]!r}")
            return []
        if len(line.questions) == 1:  # the only reply: what looks like a separator is a part of it
            return [self._text(line.text, text)]
        units = self._units(line, text)
        if len(units) != len(questions):
            self._refuse_if_it_says_so(line, units)
            raise self._garbled(line.text, f"{len(questions)} replies were due, {text[:60]!r} came")
        return units

    def _units(self, line: Line, data: bytes) -> list[str]:
        return split_units(self._text(line.text, data), self.dialect.separator)

    def _text(self, sent: str, data: bytes) -> str:
        try:
            return data.decode("ascii").strip()
        except UnicodeDecodeError as why:
            raise self._garbled(sent, f"{data[:60]!r} is no text") from why

    # ---- what the replies say about the line, and what they bring

    def _check(self, line: Line, questions: Sequence[Question], units: Sequence[str]) -> None:
        """Raises what the instrument reports."""
        errors: list[str] = []
        restarted = False
        for question, text in zip(questions, units, strict=True):
            in_reply = self.dialect.errors.in_reply
            if question.about == "errors" and self._is_error(line.text, text):
                errors += [self._in_words(text), *self.errors()]
            elif question.about == "power on":
                restarted = self._power_on_seen(line.text, text)
            elif question.about == "value" and in_reply and re.fullmatch(in_reply, text):
                errors.append(self._in_words(text))
        if restarted:
            what = (
                "it was switched on anew: its settings are lost and must be made again; check its mains plug"
            )
            raise Restarted(self.session.role, self.session.resource, what)
        if errors:
            raise self._refused(line.text, errors)

    def _refuse_if_it_says_so(self, line: Line, units: Sequence[str]) -> None:
        """Fewer replies than were due, but the error queue, asked last, has something to say about it."""
        service = line.service
        if not service or service[0].about != "errors" or len(units) < len(service):
            return
        text, errors = units[-len(service)], self.dialect.errors
        if re.fullmatch(errors.some, text) and not re.fullmatch(errors.none, text):
            self._in_step = True
            raise self._refused(line.text, [self._in_words(text), *self.errors()])

    def _is_error(self, sent: str, text: str) -> bool:
        if re.fullmatch(self.dialect.errors.none, text):
            return False
        if re.fullmatch(self.dialect.errors.some, text):
            return True
        raise self._garbled(sent, f"{text!r} is nothing that an error queue says")

    def _power_on_seen(self, sent: str, text: str) -> bool:
        assert self.dialect.power_on is not None
        try:
            is_on = bool(int(parse_number(text)) & self.dialect.power_on.bit)
        except (ValueError, OverflowError) as why:
            raise self._garbled(sent, f"{text!r} is no register") from why
        has_restarted = is_on and self._acquainted
        self._acquainted = True
        self.restarts += has_restarted
        return has_restarted

    def _read(self, question: Question, text: str, brought: Values) -> None:
        message = question.message
        if message.until is not None:
            text = self._wait_until(question, message.until, text)
        if message.expect is not None and not re.fullmatch(message.expect, text):
            raise self._refused(question.sent, [f"it answered {text!r}"])
        try:
            read_reply(self.dialect, message, text, brought)
        except (ValueError, OverflowError) as why:
            raise self._garbled(question.sent, str(why)) from why

    def _wait_until(self, question: Question, until: str, text: str) -> str:
        deadline = time.monotonic() + self.session.timeout
        while not re.fullmatch(until, text):
            if time.monotonic() > deadline:
                what = (
                    f"{question.sent!r} still answers {text!r} after {self.session.timeout:.3g} s; "
                    "check the instrument and the bench's 'timeout'"
                )
                raise NoReply(self.session.role, self.session.resource, what)
            text = self._ask(question.sent)
        return text

    # ---- getting into step, and plain questions

    def _get_into_step(self) -> None:
        """Reopens after a broken exchange; an error found then belongs to the line that got no reply."""
        self._reopen_if_needed()
        unanswered, self._unanswered = self._unanswered, ""
        if unanswered:
            refusals = [error for error in self.errors() if not _CONSEQUENCE.fullmatch(error)]
            if refusals:
                raise self._refused(unanswered, refusals)

    def _reopen_if_needed(self) -> None:
        if not self._in_step:
            self.session.reopen()
            self._in_step = True

    def _ask(self, text: str) -> str:
        self._reopen_if_needed()
        self._in_step = False
        self.session.write(text.encode("ascii") + self._end)
        reply = self._text(text, self.session.read_line())
        self._in_step = True
        return reply

    # ---- saying what is wrong

    def _in_words(self, error: str) -> str:
        meaning = self.dialect.errors.meaning.get(error)
        return f"{error} ({meaning})" if meaning else error

    def _refused(self, sent: str, errors: Sequence[str]) -> Refused:
        what = (
            f"refused {sent!r}: {', '.join(errors)}; check the value against what it can do, and the dialect"
        )
        return Refused(self.session.role, self.session.resource, what, tuple(errors))

    def _garbled(self, sent: str, what: str) -> Garbled:
        self._in_step = False  # whoever sends nonsense may have more of it on the way
        text = (
            f"the reply to {sent!r} makes no sense: {what}; check the cable, the terminators and the dialect"
        )
        return Garbled(self.session.role, self.session.resource, text)
