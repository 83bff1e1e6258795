"""The fit of one leg: i = g(λ) through all repeats and widths at once, with no knob for the user.

For each of the laws that come nearest by themselves, in turns: (1) linearise about the present curve; (2) choose the
deviation's size and length and the noise's factor by the marginal likelihood of the linearised problem
(`evidence.py`); (3) move to the best curve, halving the step until the true misfit falls. The law with the larger
evidence is kept. Covariances are those of the last linearisation.
"""

from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import partial

import numpy as np
from scipy.optimize import least_squares

from runner.arrays import FloatArray
from runner.extraction.curve_data import FitData, Noise
from runner.extraction.curve_model import BEYOND, CurveModel, Shape, running_integral
from runner.extraction.deviation import KNOTS
from runner.extraction.evidence import Problem
from runner.extraction.laws import LAWS, PRIOR_MEAN, PRIOR_SIGMA, Law

Way = Callable[[CurveModel, Shape, FloatArray], tuple[FloatArray, FloatArray, FloatArray]]

CANDIDATES = 2
BAD = 1.5  # misfit at which further laws are tried
START = np.array([-6.0, -1.2, 0.3, -8.0])  # hyperparameters, see evidence.py
SMALL = 5e-3  # a deviation (of log L) that hardly matters
TURNS = 18

# While the residuals are far larger than the noise (log of their ratio) the linearised problem promises too much. Until
# then a turn believes in residuals half of the present ones and no less; and the law and the delays go first, without
# a deviation (log size, log length), so that it does not learn what they explain.
FAR = 0.7
LAW_ALONE = (-7.0, -1.2)  # and as small below the knee
LAW_TURNS, DAMPED_TURNS = 8, 14
HELD = 0.2  # standard deviation about the best parameters of the law alone, once the deviation has joined
REFRESH = (
    0,
    1,
    3,
    6,
)  # turns at which the noise of λ, which reaches the current through 1/L, is worked out anew


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


def fit_curve(data: FitData, *, like: Fit | None = None) -> Fit:
    """Fit one curve through all rows of a leg.

    Args:
        data: ramps or readings of one part at one temperature.
        like: fit of the same part at another temperature; its law is tried first, and alone if it does.
    """
    if like is not None:
        near = _fit_law(like.model.law, data, like.z[: like.model.law.parameters], _hyper(like))
        if near.misfit < max(BAD, 1.5 * like.misfit) and near.inflation < 1.5 * like.inflation:
            return near
    pilots = sorted((_pilot(law, data) for law in LAWS), key=lambda found: found[1] + found[2].parameters)
    fits: list[Fit] = []
    for number, (start, _, law) in enumerate(pilots):
        if number >= CANDIDATES and min(fit.misfit for fit in fits) < BAD:
            break
        fits.append(_fit_law(law, data, start, START))
        if max(fits[-1].size, fits[-1].flat_size) < SMALL and fits[-1].misfit < 1.5:
            break  # a law that fits almost by itself leaves another nothing to do better
    # The evidence of a fit that did not arrive is what its last linearisation promises, not what its curve does.
    return max(fits, key=lambda fit: (fit.misfit < BAD, fit.evidence))


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


def _pilot(law: Law, data: FitData) -> tuple[FloatArray, float, Law]:
    """The law alone through some of the rows: its parameters and its misfit."""
    current, flux = data.pilot()
    grid = np.linspace(0.0, BEYOND, 501)
    mean, sigma = PRIOR_MEAN[: law.parameters], PRIOR_SIGMA[: law.parameters]

    def misfit(whole: FloatArray) -> FloatArray:
        parameters, shunt = whole[:-1], float(whole[-1])
        inductance = np.maximum(law.inductance(grid, parameters), 1e-6)
        integral = running_integral(inductance, float(grid[1]))
        beyond = grid[-1] + (flux - integral[-1]) / inductance[-1]
        found = np.where(flux > integral[-1], np.minimum(beyond, 3.0), np.interp(flux, integral, grid))
        # A floor below nothing leads to an inductance below nothing; the pilot keeps away from it.
        below = 1e3 * min(0.0, float(parameters[1]))
        slack = data.pilot_slack(partial(law.inductance, parameters=parameters))
        rest = (current - shunt * slack - found) * 1e3
        return np.concatenate([rest, (parameters - mean) / sigma, [below, shunt]])

    best: tuple[FloatArray, float, Law] | None = None
    for shape in law.starts or (1.0,):
        start = np.append(np.array([0.0, 0.05, -0.3, np.log(shape)])[: law.parameters], 0.0)
        found = least_squares(misfit, start, x_scale=0.5, max_nfev=40)
        if best is None or found.cost < best[1]:
            best = found.x[:-1], float(found.cost), law
    assert best is not None
    return best


def _fit_law(law: Law, data: FitData, start: FloatArray, hyper: FloatArray) -> Fit:
    model = CurveModel.around(law, start)
    z = np.concatenate([start, np.zeros(KNOTS + len(data.common.sigmas))])
    mean, prior = _priors(law, data)
    value = np.inf
    noise: Noise | None = None
    by_law, near, last, begun = True, False, np.inf, 0
    for turn in range(TURNS):
        inductance = data.inductance_at_rows(model, model.plain_shape(z[: model.parameters]), z)
        if turn in REFRESH:
            noise = data.noise(inductance)
        assert noise is not None
        way: Way = data.linearise if near else partial(data.approach, held=inductance)
        problem, *_ = _problem_at(model, data, z, noise, mean, prior, way=way)
        away = 0.5 * float(np.log(problem.misfit))
        if by_law and (away < FAR or turn >= LAW_TURNS or (turn > 2 and away > last - 0.05)):
            by_law, begun = False, turn
            # From here on the deviation does the work: law and deviation moving far in opposite directions would be a
            # long way round to the same curve.
            mean[: law.parameters] = z[: law.parameters]
            prior[: law.parameters] = np.maximum(prior[: law.parameters], HELD**-2.0)
        last = away
        damped = away > FAR and turn < DAMPED_TURNS
        if by_law:
            hyper = np.array([*LAW_ALONE, max(0.0, away - FAR), LAW_ALONE[0]])
        else:
            least = max(0.0, away - FAR) if damped else -np.inf
            fresh = turn - begun < 2
            hyper = problem.best_hyper(hyper, 1.0 if fresh else 0.3, least=least, most=120 if fresh else 50)
        z, before, after = _move(model, way, noise, z, problem, hyper)
        previous, value = value, problem.evidence(hyper) + noise.log_determinant
        if near and abs(before - after) < 0.1 and abs(previous - value) < 0.3:
            break
        if not near and not by_law and not damped:
            near, begun = True, turn + 1
    assert noise is not None
    problem, shape, residual, inductance = _problem_at(model, data, z, noise, mean, prior, way=data.linearise)
    return _finish(problem, model, data, noise, shape, hyper, inductance, residual)


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
    covariance = problem.covariance(hyper) * excess
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
        effective_parameters=float(np.trace(covariance @ problem.normal) * weight / excess),
        evidence=-0.5 * (problem.evidence(hyper) + noise.log_determinant),
    )
