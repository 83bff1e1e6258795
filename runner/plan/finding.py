"""What a check finds: the file, the key and what to do."""

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Literal

from runner.plan.located import Keys


@dataclass(frozen=True, slots=True)
class Finding:
    """A fault before it is located."""

    file: Literal["plan", "bench"]
    keys: Keys
    what: str


Check = Callable[..., Iterator[Finding]]


def in_plan(*keys: str | int, what: str) -> Finding:
    return Finding("plan", keys, what)


def in_bench(*keys: str | int, what: str) -> Finding:
    return Finding("bench", keys, what)
