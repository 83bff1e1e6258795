"""The linearised fit as a Bayesian problem: how large, how long and how noisy, by marginal likelihood.

At a curve z the rows obey r = J·(z' − z) + noise. Law and common parameters have fixed normal priors, the deviation a
Gaussian process of a size and length that are to be found, the noise a factor by which it may be larger than said.
For a given length everything but a 40 × 40 matrix is done once, so that trying sizes and factors costs next to
nothing. With flat priors of the law this is restricted maximum likelihood (REML; Patterson & Thompson, Biometrika 58
(1971) 545).
"""

from functools import lru_cache

import numpy as np
from scipy.optimize import minimize

from runner.arrays import FloatArray
from runner.extraction.deviation import KNOTS, correlation

SMALLEST_SIZE = 1e-5
LENGTH_STEP = 0.05  # lengths are tried on a grid of their logarithm, so that what belongs to one is computed once
# What is thought of the deviation before the data speak: mean and standard deviation of log size, log length (in
# units of the arc), log noise factor. Where the noise is not known beforehand its factor is nearly free.
HYPER_MEAN = np.array([-6.0, -1.2, 0.0])
HYPER_SIGMA = np.array([3.0, 0.7, 0.3])
HYPER_SIGMA_FREE = np.array([3.0, 0.7, 3.0])
HYPER_HIGH = np.array([1.0, 1.0, 12.0])


@lru_cache(maxsize=256)
def correlation_root(step: int) -> FloatArray:
    """Cholesky factor of the deviation's correlation for the length exp(step·LENGTH_STEP)."""
    return np.asarray(np.linalg.cholesky(correlation(float(np.exp(step * LENGTH_STEP)))))


class Problem:
    """Whitened residuals ``r`` [n] and slopes ``j`` [n, p] at ``z`` [p]; ``split`` parameters of the law come first.

    ``prior`` [p]: inverse variances (those of the deviation's knots are not looked at); ``mean`` [p].
    """

    def __init__(
        self, r: FloatArray, j: FloatArray, z: FloatArray, *, prior: FloatArray, mean: FloatArray, split: int,
        noise_known: bool,
    ) -> None:  # fmt: skip
        self.r, self.j, self.z, self.split = r, j, z, split
        self.prior, self.mean, self.noise_known = prior, mean, noise_known
        self.inside = slice(split, split + KNOTS)
        # y: the residuals as seen from no deviation and no delay, about which the priors of those are centred.
        y = r + j[:, split:] @ z[split:]
        self.square, self.normal, self.right = float(y @ y), j.T @ j, j.T @ y
        self.unit_prior = prior.copy()
        self.unit_prior[self.inside] = 1.0
        self.away = np.zeros(len(z))
        self.away[:split] = (z - mean)[:split]
        self.prior_determinant = float(np.log(self.unit_prior).sum())
        self._by_length: dict[int, tuple[FloatArray, FloatArray]] = {}

    @property
    def misfit(self) -> float:
        """Mean square of the whitened residuals at z."""
        return float(self.r @ self.r) / len(self.r)

    def evidence(self, hyper: FloatArray) -> float:
        """−2 log of marginal likelihood times the hyperparameters' prior, up to a constant."""
        root, gradient, weight = self._normal_equations(hyper)
        half = np.linalg.solve(root, gradient)
        rest = self.square * weight + float(self.away @ (self.unit_prior * self.away))
        determinant = 2 * float(np.log(np.diag(root)).sum()) - self.prior_determinant
        off = (hyper - HYPER_MEAN) / (HYPER_SIGMA if self.noise_known else HYPER_SIGMA_FREE)
        return rest - float(half @ half) + determinant + 2 * len(self.r) * float(hyper[2]) + float(off @ off)

    def best_hyper(self, start: FloatArray, spread: float) -> FloatArray:
        """The hyperparameters of largest evidence, looked for within about ``spread`` times (2, 0.5, 0.3)."""

        def value(hyper: FloatArray) -> float:
            inside = self._bounded(hyper)
            return self.evidence(inside) + 10 * float(np.abs(hyper - inside).sum())

        simplex = np.vstack([start, start + spread * np.diag([2.0, 0.5, 0.3])])
        options = {"initial_simplex": simplex, "xatol": 0.04, "fatol": 0.02, "maxiter": 120}
        return self._bounded(np.asarray(minimize(value, start, method="Nelder-Mead", options=options).x))

    def solution(self, hyper: FloatArray) -> FloatArray:
        """The best z [p] of the linearised problem."""
        root, gradient, _ = self._normal_equations(hyper)
        move = self.way(hyper) @ np.linalg.solve(root.T, np.linalg.solve(root, gradient))
        move[: self.split] += self.z[: self.split]
        return np.asarray(move)

    def precision(self, hyper: FloatArray) -> FloatArray:
        """Inverse covariance of the prior of z [p, p]."""
        out = np.diag(self.prior)
        inverse = np.linalg.inv(np.exp(hyper[0]) * correlation_root(_step(hyper)))
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
        out[self.inside, self.inside] = np.exp(hyper[0]) * correlation_root(_step(hyper))
        return out

    def _normal_equations(self, hyper: FloatArray) -> tuple[FloatArray, FloatArray, float]:
        """Cholesky factor of the precision of the unit parameters, the gradient, and the weight of a row."""
        matrix, right = self._at_length(_step(hyper))
        size = np.ones(len(self.z))
        size[self.inside] = np.exp(hyper[0])
        weight = float(np.exp(-2 * hyper[2]))
        h = matrix * np.outer(size, size * weight)
        h[np.diag_indices(len(size))] += self.unit_prior
        return np.linalg.cholesky(h), size * right * weight - self.unit_prior * self.away, weight

    def _at_length(self, step: int) -> tuple[FloatArray, FloatArray]:
        if step not in self._by_length:
            root = correlation_root(step)
            matrix, right = self.normal.copy(), self.right.copy()
            matrix[:, self.inside] = matrix[:, self.inside] @ root
            matrix[self.inside] = root.T @ matrix[self.inside]
            right[self.inside] = root.T @ right[self.inside]
            self._by_length[step] = matrix, right
        return self._by_length[step]

    def _bounded(self, hyper: FloatArray) -> FloatArray:
        low = [np.log(SMALLEST_SIZE), -3.0, 0.0 if self.noise_known else -12.0]
        return np.asarray(np.clip(hyper, low, HYPER_HIGH))


def _step(hyper: FloatArray) -> int:
    return int(np.rint(hyper[1] / LENGTH_STEP))
