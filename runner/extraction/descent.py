"""Least squares with bounds from below, by Levenberg and Marquardt's method on the normal equations.

Source: K. Madsen, H. B. Nielsen, O. Tingleff, Methods for Non-Linear Least Squares Problems (2nd ed., 2004), algorithm
3.16. Written here because the general routines decompose all rows at every step, rejected ones included; with some
thousand rows and forty parameters that is most of a fit's time. The sum of squares is a chi-square here, so that a
promise of less than `PROMISE` is worth nobody's while, however large the sum.
"""

from collections.abc import Callable

import numpy as np
from scipy.linalg import cho_factor, cho_solve

from runner.arrays import FloatArray

PROMISE = 0.01
FIRST, LARGEST = 1e-3, 1e9  # damping, relative to the diagonal of the normal equations


def descend(
    rows: Callable[[FloatArray], FloatArray],
    slopes: Callable[[FloatArray], FloatArray],
    x: FloatArray,
    *,
    low: FloatArray,
    steps: int,
) -> FloatArray:
    """Parameters [q] that make the sum of squares of ``rows`` [n] small, none below ``low`` [q].

    Args:
        rows: as a function of the parameters; may give what is not finite, where it is never gone to.
        slopes: its derivatives [n, q].
        x: where to start; what is below ``low`` starts there.
        steps: that are tried at most.
    """
    x = np.maximum(x, low)
    here = rows(x)
    cost, damping, growth = float(here @ here), FIRST, 2.0
    normal, gradient = _normal(slopes(x), here)
    for _ in range(steps):
        free = (x > low) | (gradient < 0)
        damped = normal[np.ix_(free, free)].copy()
        damped[np.diag_indices(len(damped))] *= 1.0 + damping
        step = np.zeros(len(x))
        step[free] = -cho_solve(cho_factor(damped, lower=True), gradient[free])
        there = np.maximum(x + step, low)
        step = there - x
        promised = -float(2 * gradient @ step + step @ normal @ step)
        if promised < PROMISE and damping < 1.0:
            break
        ahead = rows(there)
        ahead_cost = float(ahead @ ahead)
        if np.isfinite(ahead_cost) and ahead_cost < cost:
            kept = (cost - ahead_cost) / max(promised, 1e-300)
            damping = max(damping * max(1 / 3, 1 - (2 * kept - 1) ** 3), 1e-12)
            growth, x, cost = 2.0, there, ahead_cost
            normal, gradient = _normal(slopes(x), ahead)
        else:
            damping, growth = damping * growth, 2 * growth
            if damping > LARGEST:
                break
    return x


def _normal(slopes: FloatArray, rows: FloatArray) -> tuple[FloatArray, FloatArray]:
    return np.asarray(slopes.T @ slopes), np.asarray(slopes.T @ rows)
