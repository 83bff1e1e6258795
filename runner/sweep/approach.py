"""Where is the part's temperature going, and how far is it still? Two lags behind the chamber's measured air.

The body is modelled as a linear system driven by the air that was measured: offset + w x1 + (1-w) x2, where each x lags
the air by one time constant (that covers two lags in parallel and two in series), plus what is left of the start. For a
given pair of time constants this is linear least squares; the pairs lie on a grid. Never one best fit: a fast lag that
has died out hides a slow one, and then many pairs fit alike. So every pair that the readings do not rule out is kept,
and the answer is the largest rest among them.

The offset between the two sensors is held near zero by a prior. Without it "3 K short of the air" could be an offset
or a slow tail; with it, the tail is believed until the readings say otherwise, which errs towards waiting.
"""

from dataclasses import dataclass

import numpy as np

from runner.arrays import FloatArray

_TIME_CONSTANTS = np.geomspace(30.0, 5400.0, 16)  # s; bodies from a small drum core to a heavy toroid
_OFFSET_SIGMA = 1.5  # K, between chamber sensor and body sensor (sensor classes and gradients in a chamber)
_START_SIGMA = 60.0  # K, the part may come from anywhere in the chamber's range
_WEIGHT_SIGMA = 2.0  # share of a lag; negative and above one when two lags stand in series
_NOISE_FLOOR = 0.01  # K, no sensor is better, and a simulated one should not make the fit over-sure
_ACCEPT = (
    6.0  # rise of chi-squared still believed: 95 % for the two time constants (chi-squared table, 2 d.o.f.)
)
_LONGEST = 240  # samples in a fit; a longer trace is thinned, its newest tenth kept whole


@dataclass(frozen=True, slots=True)
class Approach:
    """All that the readings allow about the rest of the approach.

    Attributes:
        final_degC: where the body will end, from the likeliest pair of time constants.
        rest: largest |final - body| among the pairs not ruled out, at the time asked for [K].
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
    time, body_degC, air_degC = _thinned(time, body_degC, air_degC)
    lagged, decays = _lagged_air(time, air_degC - final_air_degC)
    body = body_degC - final_air_degC
    first, second = _PAIRS
    # Everything a pair needs is a quadratic form in the same few columns, so these are multiplied out once for all pairs.
    columns = np.concatenate([np.ones((1, time.size)), lagged, decays, body[None, :]])
    products = columns @ columns.T
    prior = noise / np.array([_OFFSET_SIGMA, _WEIGHT_SIGMA, _START_SIGMA, _START_SIGMA])
    expected = np.array([0.0, 0.5, 0.0, 0.0])
    unknown_columns, target = _COMBINATIONS[..., :4], _COMBINATIONS[..., 4]
    weighed = products @ _COMBINATIONS
    normal = unknown_columns.transpose(0, 2, 1) @ weighed[..., :4]
    right = (unknown_columns.transpose(0, 2, 1) @ weighed[..., 4:])[..., 0]
    square = np.sum(target * weighed[..., 4], axis=1)
    unknowns = np.linalg.solve(normal + np.diag(prior**2), (right + prior**2 * expected)[..., None])[..., 0]
    misfit = (
        square
        - 2 * np.sum(unknowns * right, axis=1)
        + np.sum(unknowns[:, None, :] @ normal * unknowns[:, None, :], axis=(1, 2))
    )
    misfit += np.sum((prior * (unknowns - expected)) ** 2, axis=1)
    best = int(np.argmin(misfit))
    # A model that misses by more than the noise is wrong somewhere; then it may not rule out its neighbours by the noise.
    scale = max(noise**2, float(misfit[best]) / max(time.size - 4, 1))
    allowed = misfit <= misfit[best] + _ACCEPT * scale
    then = _model(columns[:, int(np.argmin(np.abs(time - at)))], unknowns)
    return Approach(
        final_degC=float(unknowns[best, 0]) + final_air_degC,
        rest=float(np.max(np.abs(unknowns[:, 0] - then)[allowed])),
        noise=noise,
        time_constants=(float(_TIME_CONSTANTS[first[best]]), float(_TIME_CONSTANTS[second[best]])),
    )


def _model(column: FloatArray, unknowns: FloatArray) -> FloatArray:
    """Modelled body, relative to the final air, at one instant for every pair; `column` holds the columns then."""
    first, second = _PAIRS
    count = _TIME_CONSTANTS.size
    fast, slow = column[1 + first], column[1 + second]
    left = unknowns[:, 2] * column[1 + count + first] + unknowns[:, 3] * column[1 + count + second]
    return np.asarray(unknowns[:, 0] + unknowns[:, 1] * (fast - slow) + slow + left)


def _combinations() -> FloatArray:
    """For every pair: offset, difference of the lags, two starts, and the target, in terms of the columns."""
    first, second = _PAIRS
    count, pair = _TIME_CONSTANTS.size, np.arange(first.size)
    made = np.zeros((first.size, 2 * count + 2, 5))
    made[:, 0, 0] = 1.0
    made[pair, 1 + first, 1] = 1.0
    made[pair, 1 + second, 1] = -1.0
    made[pair, 1 + count + first, 2] = 1.0
    made[pair, 1 + count + second, 3] = 1.0
    made[:, -1, 4] = 1.0
    made[pair, 1 + second, 4] = -1.0
    return made


_PAIRS = np.triu_indices(_TIME_CONSTANTS.size, k=1)
_COMBINATIONS = _combinations()


def _lagged_air(time: FloatArray, air_degC: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Air behind each time constant, exact for air that is straight between readings, and exp(-t/tau); [tau, n] each."""
    steps = np.diff(time)
    lagged = np.empty((_TIME_CONSTANTS.size, time.size))
    lagged[:, 0] = air_degC[0]
    keep = np.exp(-steps[None, :] / _TIME_CONSTANTS[:, None])
    # Ramp response of a first-order lag: x+ = x k + a0 (1 - k) + slope (h - tau (1 - k)).
    ramp = 1 - _TIME_CONSTANTS[:, None] * (1 - keep) / steps[None, :]
    feed = air_degC[:-1] * (1 - keep) + np.diff(air_degC) * ramp
    for index in range(steps.size):
        lagged[:, index + 1] = lagged[:, index] * keep[:, index] + feed[:, index]
    return lagged, np.exp(-(time - time[0])[None, :] / _TIME_CONSTANTS[:, None])


def _thinned(*series: FloatArray) -> tuple[FloatArray, ...]:
    size = series[0].size
    if size <= _LONGEST:
        return series
    tail = _LONGEST // 10
    old = np.unique(np.linspace(0, size - tail - 1, _LONGEST - tail).astype(int))
    index = np.concatenate([old, np.arange(size - tail, size)])
    return tuple(one[index] for one in series)
