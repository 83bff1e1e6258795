"""The linearised fit as a Bayesian problem: how large, how long and how noisy, by marginal likelihood.

At a curve z the rows obey r = J·(z' − z) + noise. Law and common parameters have fixed normal priors, the deviation a
Gaussian process of sizes and a length that are to be found, the noise a factor by which it may be larger than said.
Everything but a matrix of some 40 rows is done once, so that trying sizes, lengths and factors costs next to nothing.
With flat priors of the law this is restricted maximum likelihood (REML; Patterson & Thompson, Biometrika 58 (1971) 545).
"""

from collections.abc import Callable
from functools import lru_cache
from typing import Any

import numpy as np
from scipy.linalg.lapack import dpotrf, dpotrs, dtrtrs
from scipy.optimize import minimize

from runner.arrays import FloatArray
from runner.extraction.deviation import KNOTS, correlation

SMALLEST_SIZE = 3e-6
LENGTH_STEP = (
    0.05  # lengths are tried on a grid of their logarithm, so that what belongs to one is computed once
)
# What is thought of the deviation before the data speak: mean and standard deviation of log size, log length (in
# units of the arc), log noise factor, log size where the core is not yet saturated. Where the noise is not known
# beforehand its factor is nearly free.
HYPER_MEAN = np.array([-9.0, -1.2, 0.0, -9.0])
HYPER_SIGMA = np.array([4.0, 0.7, 0.3, 2.0])
HYPER_SIGMA_FREE = np.array([4.0, 0.7, 3.0, 2.0])
HYPER_HIGH = np.array([0.7, 1.0, 12.0, 0.0])
SPREAD = np.array([2.0, 0.5, 0.3, 1.0])


@lru_cache(maxsize=256)
def correlation_root(step: int) -> FloatArray:
    """Cholesky factor of the deviation's correlation for the length exp(step·LENGTH_STEP)."""
    return np.asarray(np.linalg.cholesky(correlation(float(np.exp(step * LENGTH_STEP)))))


class Problem:
    """Whitened residuals ``r`` [n] and slopes ``j`` [n, p] at ``z`` [p]; ``split`` parameters of the law come first.

    ``prior`` [p]: inverse variances (those of the deviation's knots are not looked at); ``mean`` [p]; ``fallen``
    [KNOTS]: how far the core is saturated at the knots, 0 to 1.
    """

    def __init__(
        self, r: FloatArray, j: FloatArray, z: FloatArray, *, prior: FloatArray, mean: FloatArray, split: int,
        fallen: FloatArray, noise_known: bool,
    ) -> None:  # fmt: skip
        self.r, self.j, self.z, self.split = r, j, z, split
        self.prior, self.mean, self.fallen, self.noise_known = prior, mean, fallen, noise_known
        self.inside = slice(split, split + KNOTS)
        # y: the residuals as seen from no deviation and no delay, about which the priors of those are centred.
        y = r + j[:, split:] @ z[split:]
        self.square, self.normal, self.right = float(y @ y), j.T @ j, j.T @ y
        self.unit_prior = prior.copy()
        self.unit_prior[self.inside] = 1.0
        self.away = np.zeros(len(z))
        self.away[:split] = (z - mean)[:split]
        self.prior_determinant = float(np.log(self.unit_prior).sum())

    @property
    def misfit(self) -> float:
        """Mean square of the whitened residuals at z."""
        return float(self.r @ self.r) / len(self.r)

    def evidence(self, hyper: FloatArray) -> float:
        """−2 log of marginal likelihood times the hyperparameters' prior, up to a constant."""
        root, gradient, weight = self._normal_equations(hyper)
        half, _ = dtrtrs(root, gradient, lower=1)
        rest = self.square * weight + float(self.away @ (self.unit_prior * self.away))
        determinant = 2 * float(np.log(np.diag(root)).sum()) - self.prior_determinant
        off = (hyper - HYPER_MEAN) / (HYPER_SIGMA if self.noise_known else HYPER_SIGMA_FREE)
        return rest - float(half @ half) + determinant + 2 * len(self.r) * float(hyper[2]) + float(off @ off)

    def best_hyper(
        self, start: FloatArray, spread: float, *, least: float = -np.inf, most: int = 120
    ) -> FloatArray:
        """The hyperparameters of largest evidence, looked for within about ``spread`` times `SPREAD`; the log of
        the noise factor not below ``least``, with ``most`` steps."""

        def value(hyper: FloatArray) -> float:
            inside = self._bounded(hyper, least)
            return self.evidence(inside) + 10 * float(np.abs(hyper - inside).sum())

        simplex = np.vstack([start, start + spread * np.diag(SPREAD)])
        options = {"initial_simplex": simplex, "xatol": 0.04, "fatol": 0.02, "maxiter": most}
        return self._bounded(np.asarray(_minimize(value, start, options)), least)

    def solution(self, hyper: FloatArray) -> FloatArray:
        """The best z [p] of the linearised problem."""
        root, gradient, _ = self._normal_equations(hyper)
        unit, _ = dpotrs(root, gradient, lower=1)
        move = self.way(hyper) @ unit
        move[: self.split] += self.z[: self.split]
        return np.asarray(move)

    def precision(self, hyper: FloatArray) -> FloatArray:
        """Inverse covariance of the prior of z [p, p]."""
        out = np.diag(self.prior)
        inverse = np.linalg.inv(self._root(hyper))
        out[self.inside, self.inside] = inverse.T @ inverse
        return out

    def covariance(self, hyper: FloatArray, *, held: int = 0) -> FloatArray:
        """Covariance of z [p, p]; with the last ``held`` parameters held at their values it is zero for those."""
        keep = len(self.z) - held
        root, _, _ = self._normal_equations(hyper)
        h = (root @ root.T)[:keep, :keep]
        way = self.way(hyper)[:, :keep]
        return np.asarray(way @ np.linalg.solve(h, way.T))

    def way(self, hyper: FloatArray) -> FloatArray:
        """From independent unit normals to the deviation's knots, embedded among the other parameters [p, p]."""
        out = np.eye(len(self.z))
        out[self.inside, self.inside] = self._root(hyper)
        return out

    def _root(self, hyper: FloatArray) -> FloatArray:
        """Square root of the deviation's prior covariance [KNOTS, KNOTS]."""
        step = int(np.rint(hyper[1] / LENGTH_STEP))
        return knot_sizes(hyper, self.fallen)[:, None] * correlation_root(step)

    def _normal_equations(self, hyper: FloatArray) -> tuple[FloatArray, FloatArray, float]:
        """Cholesky factor of the precision of the unit parameters, the gradient, and the weight of a row."""
        shape, inside = self._root(hyper), self.inside
        weight = float(np.exp(-2 * hyper[2]))
        h, right = self.normal * weight, self.right * weight
        h[:, inside] = h[:, inside] @ shape
        h[inside] = shape.T @ h[inside]
        right[inside] = shape.T @ right[inside]
        h[np.diag_indices(len(right))] += self.unit_prior
        # LAPACK by name: a thousand of these are done a fit, and the general routines' checks cost more than the work.
        root, info = dpotrf(h, lower=1, clean=1)
        if info != 0:
            # Rows so quiet that rounding makes it indefinite: a part in 1e10 of each diagonal is no loss.
            h[np.diag_indices(len(right))] *= 1.0 + 1e-10
            h += np.diag(np.full(len(right), 1e-10 * float(np.diag(h).max())))
            root, info = dpotrf(h, lower=1, clean=1)
            if info != 0:
                raise np.linalg.LinAlgError("the linearised fit is singular")
        return np.asarray(root), right - self.unit_prior * self.away, weight

    def _bounded(self, hyper: FloatArray, least: float) -> FloatArray:
        low = [
            np.log(SMALLEST_SIZE),
            -3.0,
            max(least, 0.0 if self.noise_known else -12.0),
            np.log(SMALLEST_SIZE),
        ]
        return np.asarray(np.clip(hyper, low, HYPER_HIGH))


def _minimize(value: Callable[[FloatArray], float], start: FloatArray, options: dict[str, Any]) -> FloatArray:
    # The stubs know the option's names one by one and not as a mapping.
    return np.asarray(minimize(value, start, method="Nelder-Mead", options=options).x)  # type: ignore[call-overload]


def knot_sizes(hyper: FloatArray, fallen: FloatArray) -> FloatArray:
    """Standard deviation of the deviation at the knots [KNOTS].

    Far below the knee the inductance of a core hardly changes, and every law says so; what laws disagree about is how
    it falls. So the size grows with saturation from a small one of its own: a deviation as free at the bottom as at
    the knee would explain there what the channels' delays explain, since every pulse begins in the same way.
    """
    return np.asarray(np.sqrt(np.exp(2 * hyper[3]) + (np.exp(hyper[0]) * fallen) ** 2))
