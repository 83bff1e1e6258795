"""The fit of one leg: i = g(λ) through all repeats and widths at once, with no knob for the user.

For each law: first by itself, then with a deviation. In turns: (1) linearise about the present curve; (2) choose the
deviation's sizes and length and the noise's factor by the marginal likelihood of the linearised problem (`evidence.py`);
(3) move to the best curve, halving the step until the true misfit falls. The law with the largest evidence gives the
curve; by how much the others differ, each with the weight of its evidence, is part of its uncertainty (Bayesian model
averaging; J. A. Hoeting et al., Statistical Science 14 (1999) 382). Covariances are those of the last linearisation.
"""

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from functools import partial

import numpy as np
from scipy.optimize import least_squares

from runner.arrays import FloatArray
from runner.extraction.curve_data import FitData, Noise
from runner.extraction.curve_model import BEYOND, CurveModel, Shape, running_integral
from runner.extraction.descent import descend
from runner.extraction.deviation import KNOTS
from runner.extraction.evidence import Problem
from runner.extraction.laws import LAWS, PRIOR_MEAN, PRIOR_SIGMA, Law

Way = Callable[[CurveModel, Shape, FloatArray], tuple[FloatArray, FloatArray, FloatArray]]

BAD = 1.5  # a misfit this many times the best one's is no fit
ALONE = np.array(
    [-9.0, -1.2, 0.0, -9.0]
)  # hyperparameters (see evidence.py) of a law that needs no deviation
# Where the evidence is looked for first: it may have a top for each way to explain what is left over.
PLACES = np.array(
    [
        ALONE,
        *([a, b, 0.0, c] for a in (-5.0, -3.0, -1.5, -0.3) for b in (-2.2, -1.2, -0.6) for c in (-9.0, -5.0)),
        *([-9.0, b, 0.0, c] for b in (-1.2, -0.6) for c in (-4.0, -2.0)),
    ]
)
GENERIC = np.array([-1.5, -1.2, 0.0, -5.0])  # where a deviation starts from
LAW_TURNS, LAW_STEPS = 3, 30
TURNS, STEPS = 8, 40
REFRESHED = 2  # turns at which the noise of λ, which reaches the current through 1/L, is worked out anew
FAR = 4.0  # residuals this many times the noise: the law alone does not describe the part
HELD = 0.2  # standard deviation about the best parameters of the law alone, once the deviation has joined
LEAST_FLOOR = 1e-6  # of L_0: even air has inductance, and a curve that turns down is none
NEAR = 300.0  # of what the nearest law leaves over: laws beyond that are not tried
MOST = 5  # laws that are given a deviation: those that come nearest by themselves
LITTLE, OUT = (
    12.0,
    40.0,
)  # of evidence: what a law that is right gains by its deviation, and what puts another out
WORTH = 1e-3  # weight of a law that is still asked at the next temperature


@dataclass(frozen=True, slots=True)
class Rival:
    """A law that was tried: its ``weight`` among all, ``ratio`` [GRID] of its L(i) to the best law's, and its parameters."""

    law: Law
    weight: float
    ratio: FloatArray
    parameters: FloatArray


@dataclass(frozen=True, slots=True)
class Fit:
    """A fitted curve in scaled units; p parameters: law, deviation, common effects.

    ``covariance`` [p, p] of z, ``covariance_without_delay`` the same with the common ones held, and what of that is noise
    and not model; ``gain`` [p, n]: how z moves when the rows move; ``size``, ``flat_size``, ``length``, ``inflation``: what
    the evidence chose; ``misfit``: mean square of the whitened residuals.
    """

    data: FitData
    model: CurveModel
    z: FloatArray
    shape: Shape
    covariance: FloatArray
    covariance_without_delay: FloatArray
    noise_covariance: FloatArray
    gain: FloatArray
    inductance_at_rows: FloatArray
    residuals: FloatArray
    whitened: FloatArray
    size: float
    flat_size: float
    length: float
    inflation: float
    misfit: float
    effective_parameters: float
    evidence: float
    rivals: tuple[Rival, ...] = ()


def fit_curve(data: FitData, *, like: Fit | None = None) -> Fit:
    """Fit one curve through all rows of a leg.

    Args:
        data: ramps or readings of one part at one temperature.
        like: fit of the same part at another temperature; laws that were out of the question there are not tried.
    """
    known = [] if like is None else [rival for rival in like.rivals if rival.weight > WORTH]
    starts = [(rival.law, rival.parameters) for rival in known] or _pilots(data)
    alone = sorted((_law_alone(law, data, start) for law, start in starts), key=lambda fit: -fit.evidence)
    fits: list[Fit] = []
    for fit in alone[:MOST]:
        if fits and _best(fits).evidence - fit.evidence > OUT and _needs_little(_best(fits), alone[0]):
            break  # a law that is right leaves nothing to do better to one that is far from it by itself
        fits.append(_best([fit, _deviate(fit)]))
    best = _best(fits)
    if like is not None and known and _left_over(best) > BAD * max(1.0, _left_over(like)):
        return fit_curve(data)
    return replace(best, rivals=tuple(_rivals(fits, best)))


def _needs_little(best: Fit, alone: Fit) -> bool:
    return best.evidence - alone.evidence < LITTLE


def _best(fits: Sequence[Fit]) -> Fit:
    """The evidence of a fit that did not arrive is what its last linearisation promises, not what its curve does."""
    least = max(1.0, min(_left_over(fit) for fit in fits))
    return max(fits, key=lambda fit: (_left_over(fit) < BAD * least, fit.evidence))


def _left_over(fit: Fit) -> float:
    """Mean square of the residuals in units of the noise that the fit believes in."""
    return fit.misfit / fit.inflation**2


def _rivals(fits: Sequence[Fit], best: Fit) -> Iterator[Rival]:
    arrived = [fit for fit in fits if _left_over(fit) < BAD * max(1.0, _left_over(best))]
    odds = np.exp([fit.evidence - best.evidence for fit in arrived])
    for fit, weight in zip(arrived, odds / odds.sum(), strict=True):
        ratio = fit.shape.inductance / best.shape.inductance
        yield Rival(fit.model.law, float(weight), ratio, fit.z[: fit.model.law.parameters])


def _hyper(fit: Fit) -> FloatArray:
    return np.asarray(np.log([fit.size, fit.length, fit.inflation, fit.flat_size]))


def refit(fit: Fit, data: FitData, turns: int = 3) -> Fit:
    """The same fit to other values of the same rows; what the evidence chose, and the covariances, are kept."""
    hyper = _hyper(fit)
    mean, prior = _priors(fit.model.law, data)
    noise = data.noise(fit.inductance_at_rows)
    z = fit.z
    for _ in range(turns):
        problem, *_ = _problem_at(fit.model, data, z, noise, mean, prior, way=data.linearise)
        z, *_ = _move(fit.model, data.linearise, noise, z, problem, hyper)
    problem, shape, residual, inductance = _problem_at(
        fit.model, data, z, noise, mean, prior, way=data.linearise
    )
    return replace(
        fit,
        data=data,
        z=z,
        shape=shape,
        residuals=residual,
        inductance_at_rows=inductance,
        misfit=problem.misfit,
    )


def _priors(law: Law, data: FitData) -> tuple[FloatArray, FloatArray]:
    """Mean and inverse variance of the parameters' priors; the deviation's knots hold ones, which nobody reads."""
    split = law.parameters
    size = split + KNOTS + len(data.common.sigmas)
    mean, prior = np.zeros(size), np.ones(size)
    mean[:split] = PRIOR_MEAN[:split]
    prior[:split] = PRIOR_SIGMA[:split] ** -2.0
    prior[split + KNOTS :] = data.common.sigmas**-2.0
    return mean, prior


def _problem_at(
    model: CurveModel,
    data: FitData,
    z: FloatArray,
    noise: Noise,
    mean: FloatArray,
    prior: FloatArray,
    *,
    way: Way,
) -> tuple[Problem, Shape, FloatArray, FloatArray]:
    """The problem linearised at z, with the curve, residuals and L at the rows."""
    shape = model.shape(z[: model.parameters])
    residual, jacobian, inductance = way(model, shape, z)
    r, j = noise.whiten(residual), noise.whiten(jacobian)
    split = model.law.parameters
    made = Problem(
        r, j, z, prior=prior, mean=mean, split=split, fallen=model.fallen, noise_known=data.noise_known
    )
    return made, shape, residual, inductance


def _pilots(data: FitData) -> list[tuple[Law, FloatArray]]:
    """Laws that come near some of the rows by themselves, and with which parameters."""
    looks = [(law, *_pilot(law, data)) for law in LAWS]
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


def _law_alone(law: Law, data: FitData, start: FloatArray) -> Fit:
    """The law and the common effects, without a deviation.

    While the law is far from the rows they are weighted down, so that the common effects' priors are not run over; the
    last turn compares currents at the measured flux, as the fit does (see `FitData.approach` for the others).
    """
    model, split = CurveModel.around(law, start), law.parameters
    mean, prior = _priors(law, data)
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
    fit = _finish_at(CurveModel.around(law, z[:split]), data, z, ALONE, mean, prior)
    if data.noise_known:
        return fit
    # Noise that nobody stated is what the law leaves over.
    spare = max(1, data.rows - len(own))
    factor = 0.5 * float(np.log(max(fit.misfit * data.rows / spare, 1e-20)))
    hyper = np.array([*ALONE[:2], factor, ALONE[3]])
    return _finish_at(fit.model, data, z, hyper, mean, prior)


def _deviate(alone: Fit) -> Fit:
    """From the law alone on to the best curve with a deviation."""
    law, data, model, z = alone.model.law, alone.data, alone.model, alone.z
    split = law.parameters
    mean, prior = _priors(law, data)
    # Law and deviation moving far in opposite directions would be a long way round to the same curve.
    mean[:split] = z[:split]
    prior[:split] = np.maximum(prior[:split], HELD**-2.0)
    hyper = GENERIC if data.noise_known else np.array([*GENERIC[:2], np.log(alone.inflation), GENERIC[3]])
    for turn in range(TURNS):
        if turn < REFRESHED:
            noise = data.noise(data.inductance_at_rows(model, model.plain_shape(z[: model.parameters]), z))
        problem, *_ = _problem_at(model, data, z, noise, mean, prior, way=data.linearise)
        unit = prior.copy()
        unit[problem.inside] = 1.0
        to_z, inflation = problem.way(hyper), float(np.exp(hyper[2]))
        x = min(
            _starts(problem, hyper, z, to_z),
            key=partial(_cost, model, data, noise, to_z, mean, unit, inflation),
        )
        x = _settle(model, data.linearise, noise, x, to_z, mean, unit, inflation, STEPS)
        z = to_z @ x
        problem, *_ = _problem_at(model, data, z, noise, mean, prior, way=data.linearise)
        other = _anywhere(problem, hyper, 0.0)
        if problem.evidence(other) > problem.evidence(hyper) - 0.5 and turn >= REFRESHED - 1:
            break
        hyper = other
    return _finish_at(model, data, z, hyper, mean, prior, noise)


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


def _anywhere(problem: Problem, hyper: FloatArray, least: float) -> FloatArray:
    """The hyperparameters of largest evidence, looked for from the best of `PLACES` and the present ones."""
    places = np.vstack([hyper, PLACES])
    places[:, 2] = np.maximum(hyper[2], least)
    if not problem.noise_known:
        places = np.vstack([places + factor * np.eye(4)[2] for factor in (0.0, -2.0, -4.0, 2.0)])
    best = min(places, key=problem.evidence)
    return problem.best_hyper(best, 0.5, least=least, most=80)


def _move(
    model: CurveModel, way: Way, noise: Noise, z: FloatArray, problem: Problem, hyper: FloatArray
) -> tuple[FloatArray, float, float]:
    """The way to the linearised best, as far as the true misfit falls: z, misfit before and after."""
    target, precision = problem.solution(hyper), problem.precision(hyper)
    weight = float(np.exp(-2 * hyper[2]))

    def misfit(z: FloatArray, r: FloatArray) -> float:
        away = z - problem.mean
        return float(r @ r) * weight + float(away @ precision @ away)

    before = misfit(z, problem.r)
    step = 1.0
    while True:
        trial = z + step * (target - z)
        shape = model.plain_shape(trial[: model.parameters])
        after = np.inf
        if np.all(np.isfinite(shape.flux)) and np.all(np.diff(shape.flux) > 0):
            after = misfit(trial, noise.whiten(way(model, shape, trial)[0]))
        if after <= before + 1e-6 * abs(before) or step < 1e-3:
            return trial, before, after
        step /= 2


def _finish_at(
    model: CurveModel,
    data: FitData,
    z: FloatArray,
    hyper: FloatArray,
    mean: FloatArray,
    prior: FloatArray,
    noise: Noise | None = None,
) -> Fit:
    if noise is None:
        noise = data.noise(data.inductance_at_rows(model, model.plain_shape(z[: model.parameters]), z))
    problem, shape, residual, inductance = _problem_at(model, data, z, noise, mean, prior, way=data.linearise)
    return _finish(problem, model, data, noise, shape, hyper, inductance, residual)


def _finish(
    problem: Problem,
    model: CurveModel,
    data: FitData,
    noise: Noise,
    shape: Shape,
    hyper: FloatArray,
    inductance: FloatArray,
    residual: FloatArray,
) -> Fit:
    weight = float(np.exp(-2 * hyper[2]))
    # What the rows still disagree by beyond their noise, for whatever reason, widens everything (R. T. Birge, 1932).
    excess = max(1.0, problem.misfit * weight)
    covariance = problem.covariance(hyper)
    used = float(np.trace(covariance @ problem.normal)) * weight
    if not data.noise_known:
        # A noise that is found in the rows themselves is known the less, the more of them the curve has used up.
        excess *= data.rows / max(1.0, data.rows - used)
    covariance = covariance * excess
    # The same with the delays held: what they add is told apart from noise and model.
    held = problem.covariance(hyper, held=len(data.common.sigmas)) * excess
    return Fit(
        data=data,
        model=model,
        z=problem.z,
        shape=shape,
        covariance=covariance,
        covariance_without_delay=held,
        noise_covariance=held @ problem.normal @ held * (weight / excess),
        gain=covariance @ noise.whiten(problem.j, transposed=True).T * (weight / excess),
        inductance_at_rows=inductance,
        residuals=residual,
        whitened=problem.r,
        size=float(np.exp(hyper[0])),
        flat_size=float(np.exp(hyper[3])),
        length=float(np.exp(hyper[1])),
        inflation=float(np.exp(hyper[2])),
        misfit=problem.misfit,
        effective_parameters=used,
        evidence=-0.5 * (problem.evidence(hyper) + noise.log_determinant),
    )
