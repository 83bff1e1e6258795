"""The law of propagation of uncertainty, and what stands around it in the GUM (JCGM 100:2008).

Everything that combines uncertainties in this room does it here, so that the worked examples of the GUM, which the
tests carry through these functions, say something about our results.
"""

from collections.abc import Callable, Iterable, Sequence

import numpy as np
from scipy.special import ndtri
from scipy.stats import nct, norm
from scipy.stats import t as student

from runner.arrays import FloatArray


def combine(contributions: Iterable[float]) -> float:
    """Combined standard uncertainty of independent contributions, each sensitivity times uncertainty (GUM 5.1.2)."""
    return float(np.sqrt(sum(u * u for u in contributions)))


def propagate(sensitivities: FloatArray, covariance: FloatArray) -> FloatArray:
    """Covariance of outputs [k, k] from sensitivities [k, n] and the inputs' covariance [n, n] (GUM 5.2.2, in matrices)."""
    return np.asarray(sensitivities @ covariance @ sensitivities.T)


def variances(sensitivities: FloatArray, covariance: FloatArray) -> FloatArray:
    """Variances [k] of outputs alone, without their covariances; never below zero."""
    return np.asarray(np.maximum(np.sum((sensitivities @ covariance) * sensitivities, axis=1), 0.0))


def sensitivities(
    function: Callable[[FloatArray], FloatArray], values: FloatArray, uncertainties: FloatArray
) -> FloatArray:
    """Derivatives [k, n] of ``function`` by differences over plus and minus half an uncertainty (GUM 5.1.3, note 2)."""
    columns = []
    for j, u in enumerate(uncertainties):
        half = 0.5 * u if u > 0 else 1e-6 * max(1.0, abs(values[j]))
        up, down = values.copy(), values.copy()
        up[j] += half
        down[j] -= half
        columns.append((np.atleast_1d(function(up)) - np.atleast_1d(function(down))) / (2 * half))
    return np.stack(columns, axis=1)


def second_order(
    hessian: FloatArray, third: FloatArray, slopes: FloatArray, uncertainties: FloatArray
) -> float:
    """What the next terms add to the variance of one output (GUM 5.1.2, note): Σ [½ f_ij² + f_i f_ijj] u_i² u_j².

    ``hessian`` [n, n]: f_ij; ``third`` [n, n]: f_ijj; ``slopes`` [n]: f_i; ``uncertainties`` [n].
    """
    squares = np.outer(uncertainties**2, uncertainties**2)
    return float(np.sum((0.5 * hessian**2 + slopes[:, None] * third) * squares))


def mean_and_covariance(observations: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Means [n] of simultaneous observations [m, n] and the covariance of those means [n, n] (GUM 4.2, 5.2.3)."""
    count = len(observations)
    return observations.mean(axis=0), np.atleast_2d(np.cov(observations, rowvar=False)) / count


def correlation(covariance: FloatArray) -> FloatArray:
    """Correlation matrix of a covariance matrix."""
    sigma = np.sqrt(np.diag(covariance))
    return np.asarray(covariance / np.outer(sigma, sigma))


def straight_line(
    x: FloatArray, y: FloatArray, *, origin: float = 0.0
) -> tuple[FloatArray, FloatArray, float]:
    """Least-squares line y = a + b (x − origin): (a, b), their covariance [2, 2], and the
    standard deviation of y about it."""
    design = np.column_stack([np.ones_like(x), x - origin])
    normal = design.T @ design
    solution = np.linalg.solve(normal, design.T @ y)
    scatter = float(np.sum((y - design @ solution) ** 2) / (len(x) - 2))
    return np.asarray(solution), np.asarray(scatter * np.linalg.inv(normal)), float(np.sqrt(scatter))


def effective_degrees_of_freedom(contributions: Sequence[float], degrees: Sequence[float]) -> float:
    """Welch–Satterthwaite (GUM G.4.1); infinite where every contribution is taken as known."""
    total = combine(contributions) ** 4
    parts = sum(u**4 / nu for u, nu in zip(contributions, degrees, strict=True) if np.isfinite(nu))
    return total / parts if parts > 0 else float("inf")


def coverage_factor(coverage: float, degrees: float = float("inf")) -> float:
    """k for a two-sided interval of this coverage: Student's t, normal for infinite degrees (GUM G.3)."""
    if not np.isfinite(degrees):
        return float(ndtri(0.5 + coverage / 2))
    return float(student.ppf(0.5 + coverage / 2, degrees))


def tolerance_factor(count: int, content: float, confidence: float) -> float:
    """k of the one-sided limit mean + k·s that holds ``content`` of a normal population with ``confidence``.

    From the non-central t distribution (ISO 16269-6).
    """
    root = np.sqrt(count)
    return float(nct.ppf(confidence, count - 1, norm.ppf(content) * root) / root)
