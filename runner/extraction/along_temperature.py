"""A smooth function of temperature through a handful of legs: a straight line with a Gaussian process about it.

Correlation Matérn 5/2 over a length in kelvin; size and length by restricted maximum likelihood from the legs
themselves, several quantities sharing one length. With two legs it is the line through them, with one that leg.
Source of the method: Rasmussen & Williams, Gaussian Processes for Machine Learning (2006), 2.7 (explicit basis).
"""

from dataclasses import dataclass

import numpy as np

from runner.arrays import FloatArray
from runner.extraction.gum import variances

LENGTHS = np.geomspace(30.0, 600.0, 10)  # K that are tried
SIZES = np.geomspace(1e-5, 3.0, 19)


@dataclass(frozen=True, slots=True)
class Smoother:
    """Weights of the legs' values for a value at any temperature between them.

    ``at`` [m] degC; ``length`` [K]. All quantities share the weights' length; each has its own size.
    """

    at: FloatArray
    length: float

    def size_and_likelihood(self, values: FloatArray, uncertainties: FloatArray) -> tuple[float, float]:
        """Best size of the process about the line for ``values`` [m], and its −2 log restricted likelihood."""
        m = len(self.at)
        if m < 3:
            return 0.0, 0.0
        basis = self._basis(self.at)
        k = SIZES[:, None, None] ** 2 * self._correlation(self.at, self.at) + np.diag(
            uncertainties**2 + 1e-14
        )
        inverse = np.linalg.inv(k)  # all sizes at once
        normal = basis.T @ inverse @ basis
        line = np.linalg.solve(normal, basis.T @ inverse @ values[:, None])
        rest = values[:, None] - basis @ line
        scores = (np.swapaxes(rest, 1, 2) @ inverse @ rest)[:, 0, 0]
        scores = scores + np.linalg.slogdet(k)[1] + np.linalg.slogdet(normal)[1]
        best = int(np.argmin(scores))
        return float(SIZES[best]), float(scores[best])

    def weights(self, x: FloatArray, size: float, uncertainties: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Weights [k, m] of the legs at temperatures ``x`` [k], and the standard deviation [k] of what they leave open."""
        m = len(self.at)
        if m == 1:
            return np.ones((len(x), 1)), np.zeros(len(x))
        basis, there = self._basis(self.at), self._basis(x)
        if m == 2 or size == 0.0:
            return np.asarray(there @ np.linalg.pinv(basis)), np.zeros(len(x))
        # Own uncertainties, however small, say how closely the curve must pass each leg.
        noise = np.maximum(uncertainties, 1e-3 * size) ** 2
        k = size**2 * self._correlation(self.at, self.at) + np.diag(noise)
        cross = size**2 * self._correlation(x, self.at)
        inverse: FloatArray = np.asarray(np.linalg.inv(k))
        normal: FloatArray = np.asarray(np.linalg.inv(basis.T @ inverse @ basis))
        line = normal @ basis.T @ inverse
        weights = there @ line + cross @ inverse @ (np.eye(m) - basis @ line)
        gap = there - cross @ inverse @ basis
        # What the legs' own noise contributes is counted with the legs, not here.
        variance = size**2 - variances(cross, inverse) + variances(gap, normal) - weights**2 @ noise
        return np.asarray(weights), np.sqrt(np.maximum(variance, 0.0))

    def _basis(self, x: FloatArray) -> FloatArray:
        middle, span = float(self.at.mean()), max(1.0, float(np.ptp(self.at)))
        return np.column_stack([np.ones_like(x), (x - middle) / span])

    def _correlation(self, x: FloatArray, y: FloatArray) -> FloatArray:
        r = np.sqrt(5.0) * np.abs(x[:, None] - y[None, :]) / self.length
        return np.asarray((1 + r + r * r / 3) * np.exp(-r))


def best_smoother(at: FloatArray, rows: list[tuple[FloatArray, FloatArray]]) -> Smoother:
    """The length that several quantities (values [m], uncertainties [m]) together find most likely."""
    if len(at) < 4:
        return Smoother(at, float(LENGTHS[-1]) if len(at) < 3 else 200.0)
    scores = [
        sum(Smoother(at, float(length)).size_and_likelihood(v, u)[1] for v, u in rows) for length in LENGTHS
    ]
    return Smoother(at, float(LENGTHS[int(np.argmin(scores))]))
