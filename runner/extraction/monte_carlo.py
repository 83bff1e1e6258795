"""Propagation of distributions by drawing (JCGM 101:2008): the check on every interval that the GUM gives.

Draws come from a generator that is handed in; nothing here has a seed of its own.
"""

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np

from runner.arrays import FloatArray

Sampler = Callable[[np.random.Generator, int], FloatArray]


@dataclass(frozen=True, slots=True)
class Summary:
    """Mean, standard uncertainty, and the ends of two coverage intervals: symmetric in probability, and shortest."""

    mean: float
    uncertainty: float
    symmetric: tuple[float, float]
    shortest: tuple[float, float]


def normal(mean: float, uncertainty: float) -> Sampler:
    """Draws from a normal distribution (JCGM 101, 6.4.7)."""
    return lambda generator, count: generator.normal(mean, uncertainty, count)


def rectangular(low: float, high: float) -> Sampler:
    """Draws from a rectangular distribution (JCGM 101, 6.4.2)."""
    return lambda generator, count: generator.uniform(low, high, count)


def simulate(
    function: Callable[..., FloatArray],
    inputs: Mapping[str, Sampler],
    generator: np.random.Generator,
    trials: int,
) -> FloatArray:
    """Values [trials] of ``function`` called once with arrays of independent draws by name."""
    return np.asarray(function(**{name: draw(generator, trials) for name, draw in inputs.items()}))


def summarise(values: FloatArray, coverage: float = 0.95) -> Summary:
    """Summary of draws [trials] (JCGM 101, 7.6 and 7.7)."""
    ordered = np.sort(values)
    count = len(ordered)
    inside = round(coverage * count)
    tail = (count - inside) // 2
    widths = ordered[inside:] - ordered[: count - inside]
    best = int(np.argmin(widths))
    return Summary(
        float(np.mean(ordered)),
        float(np.std(ordered, ddof=1)),
        (float(ordered[tail]), float(ordered[tail + inside])),
        (float(ordered[best]), float(ordered[best + inside])),
    )
