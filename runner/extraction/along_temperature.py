"""A smooth function of temperature through a handful of legs: a straight line with a Gaussian process about it.

Correlation Matérn 5/2 over a length in kelvin; size and length by restricted maximum likelihood from the legs
themselves, several quantities sharing one length. With two legs it is the line through them, with one that leg.
Source of the method: Rasmussen & Williams, Gaussian Processes for Machine Learning (2006), 2.7 (explicit basis).
"""

from dataclasses import dataclass

import numpy as np

from runner.arrays import FloatArray

LENGTHS = np.geomspace(30.0, 600.0, 16)  # K that are tried
SIZES = np.geomspace(1e-5, 3.0, 23)


@dataclass(frozen=True, slots=True)
class Smoother:
    """Weights of the legs' values for a value at any temperature between them.

    ``at`` [m] degC; ``length`` [K]. All quantities share the weights' length; each has its own size.
    """

    at: FloatArray
    length: float

    def size_and_likelihood(self, values: FloatArray, uncertainties: FloatArray) -> tuple[float, float]:
        """Best size of the process about the line for ``values`` [m], and its −2 log restricted likelihood."""
        best = (0.0, np.inf)
        if len(self.at) < 3:
            return best[0], 0.0
        basis = self._basis(self.at)
        shape = self._correlation(self.at, self.at)
        for size in SIZES:
            k = size**2 * shape + np.diag(uncertainties**2 + 1e-14)
            root = np.linalg.cholesky(k)
            y, b = np.linalg.solve(root, values), np.linalg.solve(root, basis)
            normal = b.T @ b
            rest = y - b @ np.linalg.solve(normal, b.T @ y)
            value = (
                float(rest @ rest)
                + 2 * float(np.log(np.diag(root)).sum())
                + float(np.linalg.slogdet(normal)[1])
            )
            if value < best[1]:
                best = float(size), value
        return best

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
        inverse = np.linalg.inv(k)
        normal = np.linalg.inv(basis.T @ inverse @ basis)
        line = normal @ basis.T @ inverse
        weights = there @ line + cross @ inverse @ (np.eye(m) - basis @ line)
        gap = there - cross @ inverse @ basis
        variance = size**2 - np.einsum("ij,jk,ik->i", cross, inverse, cross)
        variance = variance + np.einsum("ij,jk,ik->i", gap, normal, gap)
        # What the legs' own noise contributes is counted with the legs, not here.
        variance = variance - np.einsum("ij,j->i", weights**2, noise)
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
