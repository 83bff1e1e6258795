"""What a reply means, by the words of its message in the dialect. Pure: text in, values out.

A reply of another shape is a ValueError; the conversation adds who answered what and makes it `Garbled`.
"""

import math
import re

from drivers.blocks import decode_samples
from drivers.dialect import Dialect, Message
from drivers.replies import Values, parse_number, parse_numbers


def read_reply(dialect: Dialect, message: Message, text: str, brought: Values) -> None:
    """Puts what a reply brings into `brought`.

    Args:
        text: the reply, without terminator and surrounding blanks.

    Raises:
        ValueError, OverflowError: the reply is not of the shape that the message says.
    """
    if message.pattern is not None:
        found = re.search(message.pattern, text)
        if found is None:
            raise ValueError(f"{text!r} does not look like {message.pattern!r}")
        text = found[1] if found.re.groups else found[0]
    for name, weight in message.bits.items():
        brought.flags[name] = bool(int(parse_number(text)) & weight)
    if not message.gives:
        return
    name = message.gives[0]
    match message.as_:
        case "number":
            items = [text] if len(message.gives) == 1 else text.split(",")
            if len(items) != len(message.gives):
                raise ValueError(
                    f"{text!r} should be {len(message.gives)} numbers: {', '.join(message.gives)}"
                )
            for each, item in zip(message.gives, items, strict=True):
                brought.numbers[each] = _in_si(message, _number(dialect, message, item))
        case "numbers":
            brought.lists[name] = tuple(_in_si(message, item) for item in parse_numbers(text, message.units))
        case "flag":
            brought.flags[name] = re.fullmatch(message.when or "", text) is not None
        case "word":
            meanings = {spelling: meaning for meaning, spelling in dialect.words[name].items()}
            if text not in meanings:
                raise ValueError(f"{text!r} is none of {', '.join(meanings)}")
            brought.texts[name] = meanings[text]
        case "text":
            brought.texts[name] = text
        case "samples":
            brought.samples[name] = decode_samples(text.encode("ascii"), "ascii", message.order)


def _number(dialect: Dialect, message: Message, text: str) -> float:
    if dialect.overload and re.fullmatch(dialect.overload, text.strip()):
        return math.inf
    return parse_number(text, message.units)


def _in_si(message: Message, value: float) -> float:
    return value * message.times + message.plus
