"""A fitted curve, and the linearised problem that its covariances come from."""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from runner.arrays import FloatArray
from runner.extraction.curve_data import FitData, Noise
from runner.extraction.curve_model import CurveModel, Shape
from runner.extraction.deviation import KNOTS
from runner.extraction.evidence import Problem
from runner.extraction.laws import PRIOR_MEAN, PRIOR_SIGMA, Law

# Residuals, their slopes and L at the rows, of a curve at z: `FitData.linearise` or `FitData.approach`.
Way = Callable[[CurveModel, Shape, FloatArray], tuple[FloatArray, FloatArray, FloatArray]]

LEAST_FLOOR = 1e-6  # of L_0: even air has inductance, and a curve that turns down is none
NEAR_END = 1e-2
FIXED = 1e10  # inverse variance of a parameter that stands at its end


@dataclass(frozen=True, slots=True)
class Rival:
    """A law that was tried: its ``weight`` among all, and the ``ratio`` [GRID] of its L(i) to the best law's."""

    law: Law
    weight: float
    ratio: FloatArray


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


def left_over(fit: Fit) -> float:
    """Mean square of the residuals in units of the noise that the fit believes in."""
    return fit.misfit / fit.inflation**2


def hyper_of(fit: Fit) -> FloatArray:
    """Its hyperparameters, see `evidence.py`."""
    return np.asarray(np.log([fit.size, fit.length, fit.inflation, fit.flat_size]))


def priors(law: Law, data: FitData) -> tuple[FloatArray, FloatArray]:
    """Mean and inverse variance of the parameters' priors; the deviation's knots hold ones, which nobody reads."""
    split = law.parameters
    size = split + KNOTS + len(data.common.sigmas)
    mean, prior = np.zeros(size), np.ones(size)
    mean[:split] = PRIOR_MEAN[:split]
    prior[:split] = PRIOR_SIGMA[:split] ** -2.0
    prior[split + KNOTS :] = data.common.sigmas**-2.0
    return mean, prior


def problem_at(
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


def problem_inside(
    model: CurveModel,
    data: FitData,
    z: FloatArray,
    noise: Noise,
    mean: FloatArray,
    prior: FloatArray,
    hyper: FloatArray,
) -> tuple[Problem, Shape, FloatArray, FloatArray]:
    """`problem_at` the best z, with the law's floor held where it would go beyond its end.

    Else evidence and covariance would be those of a curve that nobody may choose.
    """
    made = problem_at(model, data, z, noise, mean, prior, way=data.linearise)
    if z[1] > NEAR_END or made[0].solution(hyper)[1] >= LEAST_FLOOR:
        return made
    mean, prior = mean.copy(), prior.copy()
    mean[1], prior[1] = z[1], FIXED
    return problem_at(model, data, z, noise, mean, prior, way=data.linearise)


def finish_at(
    model: CurveModel,
    data: FitData,
    z: FloatArray,
    hyper: FloatArray,
    mean: FloatArray,
    prior: FloatArray,
    noise: Noise | None = None,
) -> Fit:
    """The fit at z, where somebody has found the best; ``noise`` is worked out there when None."""
    if noise is None:
        noise = data.noise(data.inductance_at_rows(model, model.plain_shape(z[: model.parameters]), z))
    problem, shape, residual, inductance = problem_inside(model, data, z, noise, mean, prior, hyper)
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
