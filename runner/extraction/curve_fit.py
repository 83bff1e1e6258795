"""The fit of one leg: i = g(λ) through all repeats and widths at once, with no knob for the user.

For each of the laws that come nearest by themselves, in turns: (1) linearise about the present curve; (2) choose the
deviation's size and length and the noise's inflation by the marginal likelihood of the linearised problem (REML for
the law's parameters, whose priors are flat for practical purposes); (3) move to the best curve, halving the step until
the true misfit falls. The law with the larger evidence is kept. Covariances are those of the last linearisation.
"""

from dataclasses import dataclass

import numpy as np
from scipy.linalg import cho_factor, cho_solve, cholesky, solve_triangular
from scipy.optimize import least_squares, minimize

from runner.arrays import FloatArray
from runner.extraction.curve_data import FitData, Noise
from runner.extraction.curve_model import BEYOND, CurveModel, Shape, running_integral
from runner.extraction.deviation import KNOTS, correlation
from runner.extraction.laws import LAWS, PRIOR_MEAN, PRIOR_SIGMA, Law

CANDIDATES = 2
COMMON = 2  # skew and shunt time constant stand behind law and deviation in z
TURNS = 8
SMALLEST_SIZE = 1e-5
# What is thought of the deviation before the data speak: mean and standard deviation of log size, log length (in
# units of the arc), log noise inflation.
HYPER_MEAN = np.array([-6.0, -1.2, 0.0])
HYPER_SIGMA = np.array([3.0, 0.7, 0.3])
HYPER_SIGMA_FREE = np.array([3.0, 0.7, 3.0])
HYPER_HIGH = np.array([1.0, 1.0, 12.0])


@dataclass(frozen=True, slots=True)
class Fit:
    """A fitted curve in scaled units; p parameters: law, deviation, skew, shunt time.

    ``covariance`` [p, p] of z; ``gain`` [p, n]: how z moves when the rows move; ``size``, ``length``,
    ``inflation``: what the evidence chose; ``misfit``: mean square of the whitened residuals.
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
    size: float
    length: float
    inflation: float
    misfit: float
    effective_parameters: float
    evidence: float


def fit_curve(data: FitData) -> Fit:
    """Fit one curve through all rows of a leg.

    ``data``: ramps or readings of one part at one temperature.
    """
    pilots = sorted((_pilot(law, data) for law in LAWS), key=lambda found: found[1])
    fits = [_fit_law(law, data, start) for start, _, law in pilots[:CANDIDATES]]
    return max(fits, key=lambda fit: fit.evidence)


def _pilot(law: Law, data: FitData) -> tuple[FloatArray, float, Law]:
    """The law alone through a few hundred bins: its parameters and its misfit."""
    current, flux = data.pilot()
    grid = np.linspace(0.0, BEYOND, 601)
    mean, sigma = PRIOR_MEAN[: law.parameters], PRIOR_SIGMA[: law.parameters]

    def misfit(parameters: FloatArray) -> FloatArray:
        inductance = np.maximum(law.inductance(grid, parameters), 1e-6)
        integral = running_integral(inductance, float(grid[1]))
        beyond = grid[-1] + (flux - integral[-1]) / inductance[-1]
        found = np.where(flux > integral[-1], np.minimum(beyond, 3.0), np.interp(flux, integral, grid))
        return np.concatenate([(current - found) * 300.0, (parameters - mean) / sigma])

    best: tuple[FloatArray, float, Law] | None = None
    for knee in (-0.8, -0.2):
        for shape in law.starts or (1.0,):
            start = np.array([0.0, 0.05, knee, np.log(shape)])[: law.parameters]
            found = least_squares(misfit, start, x_scale=0.5, max_nfev=40)
            if best is None or found.cost < best[1]:
                best = found.x, float(found.cost), law
    assert best is not None
    return best


def _fit_law(law: Law, data: FitData, start: FloatArray) -> Fit:
    model = CurveModel.around(law, start)
    p = model.parameters + COMMON
    split = law.parameters
    z = np.concatenate([start, np.zeros(KNOTS + COMMON)])
    prior_mean = np.zeros(p)
    prior_mean[:split] = PRIOR_MEAN[:split]
    prior = np.zeros(p)
    prior[:split] = PRIOR_SIGMA[:split] ** -2.0
    prior[-COMMON:] = np.array(data.delay_sigmas) ** -2.0
    shape = model.shape(z[:-COMMON])
    noise = data.noise(data.linearise(model, shape, z)[2])
    hyper = np.array([-4.0, -1.2, 0.3])
    value = np.inf
    for turn in range(TURNS):
        residual, jacobian, inductance = data.linearise(model, shape, z)
        if turn in (1, 3):
            noise = data.noise(inductance)
        problem = _Problem(
            noise.whiten(residual), noise.whiten(jacobian), z, prior, prior_mean, split, data.noise_known
        )
        hyper = problem.best_hyper(hyper)
        target = problem.solution(hyper)
        precision = problem.precision(hyper)
        before = _objective(model, data, noise, z, hyper, precision, prior_mean)
        step = 1.0
        while True:
            trial = z + step * (target - z)
            after = _objective(model, data, noise, trial, hyper, precision, prior_mean)
            if after <= before + 1e-6 * abs(before) or step < 1e-3:
                break
            step /= 2
        z = trial
        shape = model.shape(z[:-COMMON])
        previous, value = value, problem.evidence(hyper) + noise.log_determinant
        if turn > 3 and step == 1.0 and abs(before - after) < 0.02 and abs(previous - value) < 0.05:
            break
    residual, jacobian, inductance = data.linearise(model, shape, z)
    problem = _Problem(
        noise.whiten(residual), noise.whiten(jacobian), z, prior, prior_mean, split, data.noise_known
    )
    return _finish(problem, model, data, noise, shape, hyper, inductance, residual)


def _objective(
    model: CurveModel,
    data: FitData,
    noise: Noise,
    z: FloatArray,
    hyper: FloatArray,
    precision: FloatArray,
    mean: FloatArray,
) -> float:
    shape = model.shape(z[:-COMMON])
    if not np.all(np.isfinite(shape.flux)) or not np.all(np.diff(shape.flux) > 0):
        return np.inf
    residual, _, _ = data.linearise(model, shape, z)
    r = noise.whiten(residual)
    away = z - mean
    return float(r @ r) / float(np.exp(2 * hyper[2])) + float(away @ precision @ away)


@dataclass(frozen=True, slots=True)
class _Problem:
    """The linearised fit: whitened residuals r [n] and slopes j [n, p] at z, priors."""

    r: FloatArray
    j: FloatArray
    z: FloatArray
    prior: FloatArray
    prior_mean: FloatArray
    split: int
    noise_known: bool

    def _normal(self) -> tuple[FloatArray, FloatArray, float]:
        """J'J, J'y and y'y with y the residuals seen from no deviation and no delay."""
        y = self.r + self.j[:, self.split :] @ self.z[self.split :]
        return self.j.T @ self.j, self.j.T @ y, float(y @ y)

    def _map(self, hyper: FloatArray) -> FloatArray:
        """From independent unit normals to the deviation's knots, embedded among the other parameters."""
        out = np.eye(len(self.z))
        inside = slice(self.split, self.split + KNOTS)
        out[inside, inside] = np.exp(hyper[0]) * cholesky(correlation(float(np.exp(hyper[1]))), lower=True)
        return out

    def _parts(
        self, normal: tuple[FloatArray, FloatArray, float], hyper: FloatArray
    ) -> tuple[tuple[FloatArray, bool], FloatArray, FloatArray, float]:
        weight = float(np.exp(-2 * hyper[2]))
        g, b, square = normal
        way = self._map(hyper)
        prior = self.prior.copy()
        prior[self.split : self.split + KNOTS] = 1.0
        away = np.zeros(len(self.z))
        away[: self.split] = (self.z - self.prior_mean)[: self.split]
        h = way.T @ g @ way * weight + np.diag(prior)
        factor = cho_factor(h, lower=True, check_finite=False)
        gradient = way.T @ b * weight - prior * away
        rest = square * weight + float(away @ (prior * away))
        return factor, gradient, way, rest

    def evidence_of(self, normal: tuple[FloatArray, FloatArray, float], hyper: FloatArray) -> float:
        """−2 log of the marginal likelihood times the hyperparameters' prior, up to a constant."""
        factor, gradient, _, rest = self._parts(normal, hyper)
        q = rest - float(gradient @ cho_solve(factor, gradient, check_finite=False))
        log_det = 2 * float(np.log(np.diag(factor[0])).sum()) - float(np.log(self.prior[self.prior > 0]).sum())
        away = (hyper - HYPER_MEAN) / (HYPER_SIGMA if self.noise_known else HYPER_SIGMA_FREE)
        return q + log_det + 2 * len(self.r) * float(hyper[2]) + float(away @ away)

    def evidence(self, hyper: FloatArray) -> float:
        return self.evidence_of(self._normal(), hyper)

    def best_hyper(self, start: FloatArray) -> FloatArray:
        normal = self._normal()

        def value(hyper: FloatArray) -> float:
            inside = self._inside(hyper)
            return self.evidence_of(normal, inside) + 10 * float(np.abs(hyper - inside).sum())

        found = start
        simplex = np.vstack([found, found + np.diag([2.0, 0.5, 0.3])])
        result = minimize(
            value, found, method="Nelder-Mead",
            options={"initial_simplex": simplex, "xatol": 0.03, "fatol": 0.02, "maxiter": 160},
        )  # fmt: skip
        return self._inside(result.x)

    def _inside(self, hyper: FloatArray) -> FloatArray:
        low = [np.log(SMALLEST_SIZE), -3.0, 0.0 if self.noise_known else -12.0]
        return np.asarray(np.clip(hyper, low, HYPER_HIGH))

    def solution(self, hyper: FloatArray) -> FloatArray:
        """The best z of the linearised problem."""
        factor, gradient, way, _ = self._parts(self._normal(), hyper)
        move = way @ cho_solve(factor, gradient, check_finite=False)
        out = move.copy()
        out[: self.split] += self.z[: self.split]
        return np.asarray(out)

    def precision(self, hyper: FloatArray) -> FloatArray:
        """Inverse covariance of the prior of z [p, p]."""
        out = np.diag(self.prior)
        inside = slice(self.split, self.split + KNOTS)
        root = cholesky(correlation(float(np.exp(hyper[1]))), lower=True) * np.exp(hyper[0])
        inverse = solve_triangular(root, np.eye(KNOTS), lower=True)
        out[inside, inside] = inverse.T @ inverse
        return out


def _finish(
    problem: _Problem,
    model: CurveModel,
    data: FitData,
    noise: Noise,
    shape: Shape,
    hyper: FloatArray,
    inductance: FloatArray,
    residual: FloatArray,
) -> Fit:
    normal = problem._normal()
    factor, _, way, _ = problem._parts(normal, hyper)
    weight = float(np.exp(-2 * hyper[2]))
    p = len(problem.z)
    covariance = way @ cho_solve(factor, np.eye(p)) @ way.T
    # The same with the delays held: what they add is told apart from noise and model.
    held = np.zeros_like(covariance)
    unit_prior = np.where((np.arange(p) >= problem.split) & (np.arange(p) < p - COMMON), 1.0, problem.prior)
    h = (way.T @ normal[0] @ way * weight + np.diag(unit_prior))[:-COMMON, :-COMMON]
    held[:-COMMON, :-COMMON] = way[:-COMMON, :-COMMON] @ np.linalg.inv(h) @ way[:-COMMON, :-COMMON].T
    gain = covariance @ noise.whiten(problem.j, transposed=True).T * weight
    return Fit(
        data=data,
        model=model,
        z=problem.z,
        shape=shape,
        covariance=covariance,
        covariance_without_delay=held,
        noise_covariance=held @ normal[0] @ held * weight,
        gain=gain,
        inductance_at_rows=inductance,
        residuals=residual,
        size=float(np.exp(hyper[0])),
        length=float(np.exp(hyper[1])),
        inflation=float(np.exp(hyper[2])),
        misfit=float(problem.r @ problem.r) / len(problem.r),
        effective_parameters=float(np.trace(covariance @ normal[0]) * weight),
        evidence=-0.5 * (problem.evidence(hyper) + noise.log_determinant),
    )
