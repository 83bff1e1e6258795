"""Where is the part's temperature going, and how far is it still? Two lags behind the chamber's measured air.

The body is modelled as a linear system driven by the air that was measured: offset + w x1 + (1-w) x2, where each x lags
the air by one time constant (that covers two lags in parallel and two in series), plus what is left of the start. For a
given pair of time constants this is linear least squares; the pairs lie on a grid, and on finer ones about its best.
Never one best fit: a fast lag that has died out hides a slow one, and then many pairs fit alike. So every pair that the
readings do not rule out is kept, and the answer is the largest rest among them.

The offset between the two sensors is held near zero by a prior. Without it "3 K short of the air" could be an offset
or a slow tail; with it, the tail is believed until the readings say otherwise, which errs towards waiting.
"""

from dataclasses import dataclass
from functools import cache

import numpy as np

from runner.arrays import FloatArray, IntArray

_COARSE = np.geomspace(30.0, 5400.0, 14)  # s; bodies from a small drum core to a heavy toroid
_SPANS = (
    0.5,
    0.25,
    0.12,
    0.06,
    0.02,
)  # finer and finer about the likeliest pair: the truth lies between grid points
_FINE = 5  # values about each of the likeliest two
_OFFSET_SIGMA = 1.5  # K, between chamber sensor and body sensor (sensor classes and gradients in a chamber)
_START_SIGMA = 60.0  # K, the part may come from anywhere in the chamber's range
_WEIGHT_SIGMA = 2.0  # share of a lag; negative and above one when two lags stand in series
_NOISE_FLOOR = 0.02  # K, no sensor is better, and a simulated one should not make the fit over-sure
_DOUBT = 1.1  # on the rest; of 364 made-up bodies 1 in 30 had it more than 0.1 K too small without
_ACCEPT = (
    6.0  # rise of chi-squared still believed: 95 % for the two time constants (chi-squared table, 2 d.o.f.)
)
_LONGEST = 240  # samples in a fit; a longer trace is thinned, its newest tenth kept whole


@dataclass(frozen=True, slots=True)
class Approach:
    """All that the readings allow about the rest of the approach.

    Attributes:
        final_degC: where the body will end, from the likeliest pair of time constants.
        rest: largest |final - body| among the pairs not ruled out, at the time asked for, a tenth added [K].
        noise: of the body readings, one standard deviation [K].
        time_constants: the likeliest pair [s].
    """

    final_degC: float
    rest: float
    noise: float
    time_constants: tuple[float, float]


def reading_noise(body_degC: FloatArray) -> float:
    """Standard deviation of the noise of evenly spaced readings, from their second differences [K].

    A straight drift cancels; sqrt(6) is the gain of (1, -2, 1) for white noise. Median, so that single jumps do not count.
    """
    if body_degC.size < 5:
        return _NOISE_FLOOR
    second = np.diff(body_degC, 2)
    return max(float(np.median(np.abs(second - np.median(second)))) * 1.4826 / 6**0.5, _NOISE_FLOOR)


def fit_approach(
    time: FloatArray, body_degC: FloatArray, air_degC: FloatArray, *, final_air_degC: float, at: float
) -> Approach:
    """Fit the part's approach and say how much drift is left.

    Args:
        time: of the readings, increasing [n] [s].
        body_degC: part's sensor [n].
        air_degC: chamber air [n].
        final_air_degC: what the air will stay at.
        at: the rest is given as seen from this time [s].

    Returns:
        The approach; its `rest` is the largest of all fits that the readings allow.

    Raises:
        ValueError: fewer than 5 readings.
    """
    if time.size < 5:
        raise ValueError(f"an approach needs at least 5 readings, got {time.size}")
    noise = reading_noise(body_degC)
    leg = (
        time,
        body_degC - final_air_degC,
        air_degC - final_air_degC,
        noise,
        int(np.argmin(np.abs(time - at))),
    )
    rounds = [_fit_pairs(_COARSE, *leg)]
    for span in _SPANS:
        rounds.append(_fit_pairs(_around(min(rounds, key=_least), span), *leg))
    best = min(rounds, key=_least)
    # A model that misses by more than the noise is wrong somewhere; then it may not rule out its neighbours by the noise.
    scale = max(noise**2, _least(best) / max(_kept(time.size).size - 4, 1))
    allowed = _least(best) + _ACCEPT * scale
    likeliest = int(np.argmin(best.misfit))
    return Approach(
        final_degC=float(best.final[likeliest]) + final_air_degC,
        rest=_DOUBT * max(float(np.max(fits.rest[fits.misfit <= allowed], initial=0.0)) for fits in rounds),
        noise=noise,
        time_constants=(float(best.pairs[0, likeliest]), float(best.pairs[1, likeliest])),
    )


@dataclass(frozen=True, slots=True)
class _Fits:
    """A fit for each pair of time constants: [2, pairs] s; misfit [K^2], final body and rest [K], one a pair."""

    pairs: FloatArray
    misfit: FloatArray
    final: FloatArray
    rest: FloatArray


def _fit_pairs(
    time_constants: FloatArray,
    time: FloatArray,
    body: FloatArray,
    air: FloatArray,
    noise: float,
    seen_from: int,
) -> _Fits:
    """Least squares for every pair out of `time_constants`; body and air relative to where the air ends [K]."""
    count = time_constants.size
    first, second = np.triu_indices(count, k=1)
    lagged, decays = _lagged_air(time_constants, time, air)
    # All that a pair needs are quadratic forms in the same few columns, so these are multiplied out once for all pairs.
    columns = np.concatenate([np.ones((1, time.size)), lagged, decays, body[None, :]])
    kept = columns[:, _kept(time.size)]
    products = kept @ kept.T
    combinations = _combinations(count)
    unknown, target = combinations[..., :4], combinations[..., 4]
    weighed = products @ combinations
    normal = unknown.transpose(0, 2, 1) @ weighed[..., :4]
    right = np.sum(unknown * weighed[..., 4:], axis=1)
    prior = noise / np.array([_OFFSET_SIGMA, _WEIGHT_SIGMA, _START_SIGMA, _START_SIGMA])
    expected = np.array([0.0, 0.5, 0.0, 0.0])
    found = np.linalg.solve(normal + np.diag(prior**2), (right + prior**2 * expected)[..., None])[..., 0]
    misfit = np.sum(target * weighed[..., 4], axis=1) - 2 * np.sum(found * right, axis=1)
    misfit += np.sum(found * (normal @ found[..., None])[..., 0], axis=1)
    misfit += np.sum((prior * (found - expected)) ** 2, axis=1)
    then = columns[:, seen_from]
    fast, slow = then[1 + first], then[1 + second]
    left = found[:, 2] * then[1 + count + first] + found[:, 3] * then[1 + count + second]
    body_then = found[:, 0] + found[:, 1] * (fast - slow) + slow + left
    pairs = np.stack([time_constants[first], time_constants[second]])
    return _Fits(pairs, misfit, found[:, 0], np.abs(found[:, 0] - body_then))


def _around(fits: _Fits, span: float) -> FloatArray:
    """Time constants about the likeliest pair, within a factor exp(span) of it."""
    near = fits.pairs[:, int(np.argmin(fits.misfit))]
    return np.unique(np.concatenate([centre * np.exp(np.linspace(-span, span, _FINE)) for centre in near]))


def _least(fits: _Fits) -> float:
    return float(fits.misfit.min())


@cache
def _combinations(count: int) -> FloatArray:
    """For every pair: offset, difference of the lags, two starts, and the target, in terms of the columns."""
    first, second = np.triu_indices(count, k=1)
    pair = np.arange(first.size)
    made = np.zeros((first.size, 2 * count + 2, 5))
    made[:, 0, 0] = 1.0
    made[pair, 1 + first, 1] = 1.0
    made[pair, 1 + second, 1] = -1.0
    made[pair, 1 + count + first, 2] = 1.0
    made[pair, 1 + count + second, 3] = 1.0
    made[:, -1, 4] = 1.0
    made[pair, 1 + second, 4] = -1.0
    return made


def _lagged_air(
    time_constants: FloatArray, time: FloatArray, air: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Air behind each time constant, exact for air that is straight between readings, and exp(-t/tau); [tau, n] each."""
    tau = time_constants[:, None]
    steps = np.diff(time)
    keep = np.exp(-steps / tau)
    # Ramp response of a first-order lag: x+ = x k + a0 (1 - k) + slope (h - tau (1 - k)).
    feed = air[:-1] * (1 - keep) + np.diff(air) * (1 - tau * (1 - keep) / steps)
    lagged = np.empty((time.size, time_constants.size))
    lagged[0] = air[0]
    for index, (kept, fed) in enumerate(zip(keep.T, feed.T, strict=True)):
        lagged[index + 1] = lagged[index] * kept + fed
    return lagged.T, np.exp(-(time - time[0]) / tau)


def _kept(size: int) -> IntArray:
    """Readings that count in a fit: all of a short trace; of a long one some, evenly, and its newest ones.

    The air is followed through every reading before that: between readings far apart its bends would be lost.
    """
    if size <= _LONGEST:
        return np.arange(size)
    tail = _LONGEST // 10
    return np.concatenate(
        [
            np.unique(np.linspace(0, size - tail - 1, _LONGEST - tail).astype(int)),
            np.arange(size - tail, size),
        ]
    )
