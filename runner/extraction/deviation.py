"""The smooth deviation from a law: a Gaussian process on the logarithm of the inductance.

log L = log(law) + d(u), with d of some standard deviation and Matérn 5/2 correlation over ``length``; u is the
arc length along the law's own L(i) drawn in a unit square, so that a knee, where things change quickly, gets more
room than the flat before it. Sizes and length are found by marginal likelihood (`evidence.py`): a law that fits gets a
deviation of nothing. Source of the covariance: M. L. Stein, Interpolation of Spatial Data (1999).
"""

import numpy as np
from scipy.interpolate import make_interp_spline

from runner.arrays import FloatArray

KNOTS = 32


def arc_length(current: FloatArray, inductance: FloatArray) -> FloatArray:
    """u [n] from 0 to 1 along L(i), both axes scaled to one."""
    dx = np.diff(current) / current[-1]
    dy = np.diff(inductance) / inductance.max()
    u = np.concatenate([[0.0], np.cumsum(np.hypot(dx, dy))])
    return np.asarray(u / u[-1])


def knot_matrix(u: FloatArray) -> FloatArray:
    """Values at u [n] from values at the knots: cubic spline interpolation, [n, KNOTS]."""
    return np.asarray(make_interp_spline(knots(), np.eye(KNOTS), k=3)(u))


def fallen(current: FloatArray, inductance: FloatArray) -> FloatArray:
    """How far L(i) has fallen at the knots, as a fraction of its first value [KNOTS], 0 to 1."""
    u = arc_length(current, inductance)
    share = np.interp(knots(), u, 1.0 - inductance / inductance[0])
    return np.asarray(np.clip(share, 0.0, 1.0))


def knots() -> FloatArray:
    return np.linspace(0.0, 1.0, KNOTS)


def correlation(length: float) -> FloatArray:
    """Matérn 5/2 correlation between the knots, [KNOTS, KNOTS]; a little on the diagonal keeps it invertible."""
    u = knots()
    r = np.sqrt(5.0) * np.abs(u[:, None] - u[None, :]) / length
    return np.asarray((1 + r + r * r / 3) * np.exp(-r) + 1e-7 * np.eye(KNOTS))
