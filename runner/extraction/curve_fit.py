"""The fit of one leg: i = g(λ) through all repeats and widths at once, with no knob for the user.

Each law is tried, by itself and with a deviation (`law_fit.py`). The one with the largest evidence gives the curve; by how
much the others differ, each with the weight of its evidence, is part of its uncertainty (Bayesian model averaging; J. A.
Hoeting et al., Statistical Science 14 (1999) 382).
"""

from collections.abc import Iterator, Sequence
from dataclasses import replace

import numpy as np

from runner.arrays import FloatArray
from runner.extraction.curve_data import FitData, Noise
from runner.extraction.curve_model import CurveModel
from runner.extraction.evidence import Problem
from runner.extraction.fitted import Fit, Rival, Way, hyper_of, left_over, priors, problem_at
from runner.extraction.law_fit import deviate, go_on, law_alone, pilots
from runner.extraction.laws import LAWS

BAD = 1.5  # what is left over, as a multiple of the best fit's, that is no fit
MOST = 5  # laws that are given a deviation: those that come nearest by themselves
LITTLE = 12.0  # of evidence: what a law that is right gains by its deviation, ...
OUT = 40.0  # ... and what then puts another one out
WORTH = 1e-3  # weight of a law that is still asked at the next temperature


def fit_curve(data: FitData, *, like: Fit | None = None) -> Fit:
    """Fit one curve through all rows of a leg.

    Args:
        data: ramps or readings of one part at one temperature.
        like: fit of the same part at another temperature; laws that were out of the question there are not tried.
    """
    known = () if like is None else tuple(rival.law for rival in like.rivals if rival.weight > WORTH)
    starts = pilots(data, known or LAWS)
    alone = sorted((law_alone(law, data, start) for law, start in starts), key=lambda fit: -fit.evidence)
    fits: list[Fit] = []
    for fit in alone[:MOST]:
        if fits and _is_right(_best(fits), alone[0]) and _best(fits).evidence - fit.evidence > OUT:
            break  # a law that is right leaves nothing to do better to one that is far from it by itself
        fits.append(_best([fit, deviate(fit)]))
    best = _best(fits)
    if like is not None and known and left_over(best) > BAD * max(1.0, left_over(like)):
        return fit_curve(data)
    return replace(best, rivals=tuple(_rivals(fits, best)))


def fit_again(data: FitData, fit: Fit) -> Fit:
    """The fit of rows that differ little from those of ``fit``: the same law, and what was thought of the others."""
    found = go_on(fit, data)
    if left_over(found) > BAD * max(1.0, left_over(fit)):
        return fit_curve(data)
    return replace(found, rivals=fit.rivals)


def _is_right(best: Fit, alone: Fit) -> bool:
    """A law that describes the rows and gains next to nothing by a deviation."""
    return left_over(best) < BAD and best.evidence - alone.evidence < LITTLE


def _best(fits: Sequence[Fit]) -> Fit:
    """The evidence of a fit that did not arrive is what its last linearisation promises, not what its curve does."""
    least = max(1.0, min(left_over(fit) for fit in fits))
    return max(fits, key=lambda fit: (left_over(fit) < BAD * least, fit.evidence))


def _rivals(fits: Sequence[Fit], best: Fit) -> Iterator[Rival]:
    arrived = [fit for fit in fits if left_over(fit) < BAD * max(1.0, left_over(best))]
    odds = np.exp([fit.evidence - best.evidence for fit in arrived])
    for fit, weight in zip(arrived, odds / odds.sum(), strict=True):
        ratio = fit.shape.inductance / best.shape.inductance
        yield Rival(fit.model.law, float(weight), ratio)


def refit(fit: Fit, data: FitData, turns: int = 3) -> Fit:
    """The same fit to other values of the same rows; what the evidence chose, and the covariances, are kept."""
    hyper = hyper_of(fit)
    mean, prior = priors(fit.model.law, data)
    noise = data.noise(fit.inductance_at_rows)
    z = fit.z
    for _ in range(turns):
        problem, *_ = problem_at(fit.model, data, z, noise, mean, prior, way=data.linearise)
        z, *_ = _move(fit.model, data.linearise, noise, z, problem, hyper)
    problem, shape, residual, inductance = problem_at(
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
