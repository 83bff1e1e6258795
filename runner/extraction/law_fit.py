"""One law through the rows of a leg: near them, by itself as well as it can, and with a deviation.

With a deviation, in turns: (1) choose its sizes and length and the noise's factor by the marginal likelihood of the
problem linearised about the present curve (`evidence.py`), looking in many places, since it may have a top for each way
to explain what is left over; (2) descend to the best curve for these.
"""

from collections.abc import Iterator, Sequence
from functools import partial

import numpy as np
from scipy.optimize import least_squares

from runner.arrays import FloatArray
from runner.extraction.curve_data import FitData, Noise
from runner.extraction.curve_model import BEYOND, CurveModel, running_integral
from runner.extraction.descent import descend
from runner.extraction.deviation import KNOTS
from runner.extraction.evidence import Problem
from runner.extraction.fitted import (
    LEAST_FLOOR,
    Fit,
    Way,
    finish_at,
    hyper_of,
    priors,
    problem_at,
    problem_inside,
)
from runner.extraction.laws import PRIOR_MEAN, PRIOR_SIGMA, Law

ALONE = np.array([-9.0, -1.2, 0.0, -9.0])  # hyperparameters of a law without a deviation
# Where the evidence is looked for first.
PLACES = np.array(
    [
        ALONE,
        *([a, b, 0.0, c] for a in (-5.0, -3.0, -1.5, -0.3) for b in (-2.2, -1.2, -0.6) for c in (-9.0, -5.0)),
        *([-9.0, b, 0.0, c] for b in (-1.2, -0.6) for c in (-4.0, -2.0)),
    ]
)
GENERIC = np.array([-1.5, -1.2, 0.0, -5.0])  # where a deviation starts from
LEAST_NOISE = 0.0  # log of the noise's factor: rows are not quieter than they are said to be
NEAR = 300.0  # of what the nearest law leaves over: laws beyond that are not tried
LAW_TURNS, LAW_STEPS = 3, 30
FAR = 4.0  # residuals this many times the noise: the law alone does not describe the part
TURNS, STEPS = 8, 40
REFRESHED = 2  # turns at which the noise of λ, which reaches the current through 1/L, is worked out anew
HELD = 0.2  # standard deviation about the best parameters of the law alone, once the deviation has joined


def pilots(data: FitData, laws: Sequence[Law]) -> list[tuple[Law, FloatArray]]:
    """Those of the laws that come near some of the rows by themselves, and with which parameters."""
    looks = [(law, *_pilot(law, data)) for law in laws]
    nearest = min(cost for _, _, cost in looks)
    return [(law, parameters) for law, parameters, cost in looks if cost < NEAR * nearest]


def _pilot(law: Law, data: FitData) -> tuple[FloatArray, float]:
    """Parameters of the law alone through some of the rows, and half the sum of squares left over."""
    current, flux = data.pilot()
    grid = np.linspace(0.0, BEYOND, 501)
    mean, sigma = PRIOR_MEAN[: law.parameters], PRIOR_SIGMA[: law.parameters]

    def misfit(whole: FloatArray) -> FloatArray:
        parameters, shunt = whole[:-1], float(whole[-1])
        inductance = np.maximum(law.inductance(grid, parameters), 1e-6)
        integral = running_integral(inductance, float(grid[1]))
        beyond = grid[-1] + (flux - integral[-1]) / inductance[-1]
        found = np.where(flux > integral[-1], np.minimum(beyond, 3.0), np.interp(flux, integral, grid))
        slack = data.pilot_slack(partial(law.inductance, parameters=parameters))
        rest = (current - shunt * slack - found) * 1e3
        return np.concatenate([rest, (parameters - mean) / sigma, [shunt]])

    low = np.full(law.parameters + 1, -np.inf)
    low[1] = LEAST_FLOOR
    tries = []
    for shape in law.starts or (1.0,):
        start = np.append(np.array([0.0, 0.05, -0.3, np.log(shape)])[: law.parameters], 0.0)
        tries.append(least_squares(misfit, start, bounds=(low, np.inf), x_scale=0.5, max_nfev=40))
    best = min(tries, key=lambda found: found.cost)
    return np.asarray(best.x[:-1]), float(best.cost)


def law_alone(law: Law, data: FitData, start: FloatArray) -> Fit:
    """The law and the common effects, without a deviation.

    While the law is far from the rows they are weighted down, so that the common effects' priors are not run over; the
    last turn compares currents at the measured flux, as the fit does (see `FitData.approach` for the others).
    """
    model, split = CurveModel.around(law, start), law.parameters
    mean, prior = priors(law, data)
    z = np.concatenate([start, np.zeros(len(mean) - split)])
    own = np.r_[:split, split + KNOTS : len(mean)]
    to_z = np.eye(len(z))[:, own]
    away = 1.0
    for turn in range(LAW_TURNS):
        is_last = turn == LAW_TURNS - 1
        if is_last and away > FAR:
            break  # far away for good: what is left is the deviation's to explain
        inductance = data.inductance_at_rows(model, model.plain_shape(z[: model.parameters]), z)
        noise = data.noise(inductance)
        way: Way = data.linearise if is_last else partial(data.approach, held=inductance)
        residual = noise.whiten(way(model, model.plain_shape(z[: model.parameters]), z)[0])
        away = max(1.0, 0.5 * float(np.sqrt(np.mean(residual**2))))
        z = to_z @ _settle(model, way, noise, z[own], to_z, mean[own], prior[own], away, LAW_STEPS)
    fit = finish_at(CurveModel.around(law, z[:split]), data, z, ALONE, mean, prior)
    if data.noise_known:
        return fit
    # Noise that nobody stated is what the law leaves over.
    spare = max(1, data.rows - len(own))
    factor = 0.5 * float(np.log(max(fit.misfit * data.rows / spare, 1e-20)))
    hyper = np.array([*ALONE[:2], factor, ALONE[3]])
    return finish_at(fit.model, data, z, hyper, mean, prior)


def deviate(alone: Fit) -> Fit:
    """From the law alone on to the best curve with a deviation."""
    data = alone.data
    noise = 0.0 if data.noise_known else float(np.log(alone.inflation))
    return _evolve(alone, data, np.array([*GENERIC[:2], noise, GENERIC[3]]))


def go_on(fit: Fit, data: FitData) -> Fit:
    """From a fit to that of rows that differ little from its own."""
    return _evolve(fit, data, hyper_of(fit))


def _evolve(fit: Fit, data: FitData, hyper: FloatArray) -> Fit:
    law, model, z = fit.model.law, fit.model, fit.z
    split = law.parameters
    mean, prior = priors(law, data)
    # Law and deviation moving far in opposite directions would be a long way round to the same curve.
    mean[:split] = z[:split]
    prior[:split] = np.maximum(prior[:split], HELD**-2.0)
    for turn in range(TURNS):
        if turn < REFRESHED:
            noise = data.noise(data.inductance_at_rows(model, model.plain_shape(z[: model.parameters]), z))
        problem, *_ = problem_at(model, data, z, noise, mean, prior, way=data.linearise)
        unit = prior.copy()
        unit[problem.inside] = 1.0
        to_z, inflation = problem.way(hyper), float(np.exp(hyper[2]))
        x = min(
            _starts(problem, hyper, z, to_z),
            key=partial(_cost, model, data, noise, to_z, mean, unit, inflation),
        )
        x = _settle(model, data.linearise, noise, x, to_z, mean, unit, inflation, STEPS)
        z = to_z @ x
        problem, *_ = problem_inside(model, data, z, noise, mean, prior, hyper)
        other = _anywhere(problem, hyper)
        if problem.evidence(other) > problem.evidence(hyper) - 0.5 and turn >= REFRESHED - 1:
            break
        hyper = other
    return finish_at(model, data, z, hyper, mean, prior, noise)


def _starts(problem: Problem, hyper: FloatArray, z: FloatArray, to_z: FloatArray) -> Iterator[FloatArray]:
    """Where the way to the best curve may begin: what the linearised problem promises, or without a deviation."""
    for there in (problem.solution(hyper), z):
        x = np.asarray(np.linalg.solve(to_z, there), dtype=np.float64)
        x[1] = max(x[1], 2 * LEAST_FLOOR)
        yield x
    x[problem.inside] = 0.0
    yield x


def _cost(
    model: CurveModel, data: FitData, noise: Noise, to_z: FloatArray, mean: FloatArray, unit: FloatArray,
    inflation: float, x: FloatArray,
) -> float:  # fmt: skip
    """Twice what `_settle` makes small."""
    z = to_z @ x
    residual, *_ = data.linearise(model, model.plain_shape(z[: model.parameters]), z)
    cost = float(np.sum((noise.whiten(residual) / inflation) ** 2) + np.sum(unit * (x - mean) ** 2))
    return cost if np.isfinite(cost) else np.inf


def _settle(
    model: CurveModel,
    way: Way,
    noise: Noise,
    x: FloatArray,
    to_z: FloatArray,
    mean: FloatArray,
    prior: FloatArray,
    inflation: float,
    steps: int,
) -> FloatArray:
    """The best of the independent parameters x [q], z = ``to_z``·x, with priors about ``mean`` [q] of inverse variances
    ``prior`` [q] and the noise ``inflation`` times what it is said to be; the second parameter is the law's floor."""
    root = np.sqrt(prior)

    def rows(x: FloatArray) -> FloatArray:
        z = to_z @ x
        residual = way(model, model.plain_shape(z[: model.parameters]), z)[0]
        return np.concatenate([noise.whiten(residual) / inflation, root * (x - mean)])

    def slopes(x: FloatArray) -> FloatArray:
        z = to_z @ x
        jacobian = way(model, model.shape(z[: model.parameters]), z)[1]
        return np.vstack([-noise.whiten(jacobian @ to_z) / inflation, np.diag(root)])

    low = np.full(len(x), -np.inf)
    low[1] = LEAST_FLOOR
    return descend(rows, slopes, x, low=low, steps=steps)


def _anywhere(problem: Problem, hyper: FloatArray) -> FloatArray:
    """The hyperparameters of largest evidence, looked for from the best of `PLACES` and the present ones."""
    places = np.vstack([hyper, PLACES])
    places[:, 2] = np.maximum(hyper[2], LEAST_NOISE)
    if not problem.noise_known:
        places = np.vstack([places + factor * np.eye(4)[2] for factor in (0.0, -2.0, -4.0, 2.0)])
    best = min(places, key=problem.evidence)
    return problem.best_hyper(best, 0.5, least=LEAST_NOISE, most=80)
