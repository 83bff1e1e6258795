"""From the messages of an intent to the lines that are sent, and the questions each line asks. Pure.

Where the dialect lets messages share a line, an intent is one line, and the error queue and the power-on bit
are asked for at its end. Otherwise every message is a line of its own, and the error queue is asked for only
behind messages that get no answer, since an answer already says whether the message was accepted.
"""

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Literal

from drivers.dialect import Dialect, Message
from drivers.templates import Value, fill

# A question whose reply is looked at by the conversation and not by the dialect.
PLAIN = Message.model_validate({"ask": "?", "expect": ".*"})


@dataclass(frozen=True, slots=True)
class Question:
    """One reply that is due: to what, and who reads it."""

    sent: str
    about: Literal["value", "errors", "power on"]
    message: Message = PLAIN


@dataclass(frozen=True, slots=True)
class Line:
    """What is sent in one go, and the replies due to it, in order."""

    text: str
    questions: tuple[Question, ...]

    @property
    def service(self) -> tuple[Question, ...]:
        """The questions behind those of the intent."""
        return tuple(question for question in self.questions if question.about != "value")


def plan_lines(dialect: Dialect, messages: Sequence[Message], values: Mapping[str, Value]) -> Iterator[Line]:
    """The lines that carry out some messages.

    Raises:
        ValueError: a value is not finite.
    """
    units = [(fill(message.text, values, dialect.words), message) for message in messages]
    service = _service(dialect)
    if dialect.join is None:
        for text, message in units:
            yield Line(text, (Question(text, "value", message),) if message.is_answered else ())
        if any(not message.is_answered for message in messages):
            for question in service[:1]:
                if question.about == "errors":
                    yield Line(question.sent, (question,))
        return
    if not units:
        return
    texts: list[str] = []
    questions: list[Question] = []
    length = 0
    for text, message in units:
        if texts and length + len(text) > dialect.longest_line:
            yield Line(_joined(texts, dialect.join), tuple(questions))
            texts, questions, length = [], [], 0
        texts.append(text)
        length += len(text) + len(dialect.join)
        if message.is_answered:
            questions.append(Question(text, "value", message))
    texts += [question.sent for question in service]
    yield Line(_joined(texts, dialect.join), (*questions, *service))


def _service(dialect: Dialect) -> tuple[Question, ...]:
    found: list[Question] = []
    if dialect.errors.ask:
        found.append(Question(dialect.errors.ask, "errors"))
    if dialect.power_on:
        found.append(Question(dialect.power_on.ask, "power on"))
    return tuple(found)


def _joined(texts: Sequence[str], join: str) -> str:
    # A colon brings the parser back to the root; a common command has no path and takes none (IEEE 488.2,
    # 7.6.1; SCPI-1999 vol. 1, 6.2.4).
    line = texts[0]
    for text in texts[1:]:
        line += (join.removesuffix(":") if text.startswith((":", "*")) else join) + text
    return line
