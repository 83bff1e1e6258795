"""L(I,T) and what follows from it, over all legs of one part and method, callable anywhere inside what was measured.

Legs are laid over each other before anything is interpolated in temperature: current over the leg's knee, inductance
over the leg's L_0. What is left, F(x, T) = L/L_0 at x = I/I_knee, hardly changes with temperature, while L at a fixed
current near the knee changes a lot; so L = L_0(T)·F(I/I_knee(T), T), each factor smooth in T by a criterion of the
data (`along_temperature.py`). Outside the measured region the answer is NaN: below zero, above the largest current
(between two legs the smaller of theirs, in units of the knee), and beyond the coldest and hottest leg.
"""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike
from scipy.interpolate import CubicHermiteSpline

from runner.arrays import FloatArray
from runner.extraction.along_temperature import Smoother, best_smoother
from runner.extraction.curve import LegCurve
from runner.extraction.curve_model import running_integral
from runner.extraction.gum import combine, variances

ANSWERS = ("inductance", "flux", "energy")
POINTS = 400  # of the scaled current
EDGE = 0.75  # K beyond the outermost legs that still count as there: a set-point is not met to the last tenth
DROPS = (0.5, 0.4, 0.3, 0.2, 0.1, 0.05)


@dataclass(frozen=True, slots=True)
class Slice:
    """The curve at one temperature: ``current`` [n] A, L_d, λ, energy [n]."""

    current: FloatArray
    inductance: FloatArray
    flux: FloatArray
    energy: FloatArray

    def answer(self, what: str, current: FloatArray) -> FloatArray:
        """One of `ANSWERS` at currents [k] inside: integrals by the cubic through values and slopes, since near zero
        current a straight line between two points would be a large share too high."""
        if what == "inductance":
            return np.interp(current, self.current, self.inductance)
        slope = self.inductance if what == "flux" else self.inductance * self.current
        return np.asarray(CubicHermiteSpline(self.current, getattr(self, what), slope)(current))


@dataclass(frozen=True, slots=True)
class _Place:
    """Where a slice lies: scaled currents, weights of the legs, what temperature leaves open there (relative)."""

    scaled: FloatArray
    weights: FloatArray
    between: FloatArray


class Surface:
    """The surface of one part by one method; call it with currents [A] and temperatures [degC] of any shapes."""

    def __init__(self, legs: Sequence[LegCurve], *, kind: str = "differential") -> None:
        """``legs``: at least one, from cold to hot; ``kind``: which inductance their ``inductance`` is."""
        self.legs = tuple(legs)
        self.kind = kind
        self.temperature_degC = np.array([leg.temperature_degC for leg in legs])
        self._initial = np.array([leg.inductance[0] for leg in legs])
        self._knee = _knee_scales(legs)
        self._reach = np.array([leg.top for leg in legs]) / self._knee
        self._x = np.linspace(0.0, float(self._reach.max()), POINTS)
        self._shape = np.array(
            [
                np.interp(self._x, leg.current / knee, leg.inductance / leg.inductance[0], right=np.nan)
                for leg, knee in zip(legs, self._knee, strict=True)
            ]
        )
        own = np.array([combine(leg.initial_inductance().own.values()) for leg in legs]) / self._initial
        self._own = own
        rows = [(np.log(self._initial), own), (np.log(self._knee), own)]
        self._smoother: Smoother = best_smoother(self.temperature_degC, rows)
        self._sizes = tuple(self._smoother.size_and_likelihood(values, u)[0] for values, u in rows)
        common = self._shape[:, np.all(np.isfinite(self._shape), axis=0)]
        spread = [self._smoother.size_and_likelihood(column, own)[0] for column in common[:, ::20].T]
        self._shape_size = float(np.median(spread)) if spread else 0.0

    def __call__(self, current: ArrayLike, temperature_degC: ArrayLike) -> FloatArray:
        """L_d [H] at ``current`` [A] and ``temperature_degC``, broadcast against each other; NaN outside."""
        return self._ask(current, temperature_degC, "inductance")

    def uncertainty(self, current: ArrayLike, temperature_degC: ArrayLike) -> FloatArray:
        """Standard uncertainty [H] of L_d, shape as called; NaN outside."""
        return self._ask(current, temperature_degC, "inductance", share=self._relative)

    def flux_uncertainty(self, current: ArrayLike, temperature_degC: ArrayLike) -> FloatArray:
        """Standard uncertainty [Wb] of λ, shape as called; NaN outside."""
        return self._ask(current, temperature_degC, "flux", share=self._relative)

    def energy_uncertainty(self, current: ArrayLike, temperature_degC: ArrayLike) -> FloatArray:
        """Standard uncertainty [J] of the energy, shape as called; NaN outside."""
        return self._ask(current, temperature_degC, "energy", share=self._relative)

    def flux_linkage(self, current: ArrayLike, temperature_degC: ArrayLike) -> FloatArray:
        """λ [Wb], shape as called; NaN outside."""
        return self._ask(current, temperature_degC, "flux")

    def secant_inductance(self, current: ArrayLike, temperature_degC: ArrayLike) -> FloatArray:
        """L_s = λ/I [H], L_0 at zero current; NaN outside."""
        i, _ = np.broadcast_arrays(np.asarray(current, dtype=np.float64), np.asarray(temperature_degC))
        flux = self.flux_linkage(current, temperature_degC)
        return np.where(i > 0, flux / np.where(i > 0, i, 1.0), self(current, temperature_degC))

    def energy(self, current: ArrayLike, temperature_degC: ArrayLike) -> FloatArray:
        """∫ I dλ [J], shape as called; NaN outside."""
        return self._ask(current, temperature_degC, "energy")

    def top(self, temperature_degC: float) -> float:
        """The largest current [A] the surface answers at this temperature; NaN outside the legs' temperatures."""
        found = self.at(temperature_degC)
        return float("nan") if found is None else float(found.current[-1])

    def at(self, temperature_degC: float) -> Slice | None:
        """The curve at one temperature, None outside."""
        found = self._locate(temperature_degC)
        return None if found is None else found[0]

    def _locate(self, temperature_degC: float) -> tuple[Slice, _Place] | None:
        low, high = self.temperature_degC[0] - EDGE, self.temperature_degC[-1] + EDGE
        if not low <= temperature_degC <= high:
            return None
        t = np.array([np.clip(temperature_degC, self.temperature_degC[0], self.temperature_degC[-1])])
        (w_initial, open_initial), (w_knee, open_knee) = (
            self._smoother.weights(t, size, self._own) for size in self._sizes
        )
        initial = float(np.exp(w_initial[0] @ np.log(self._initial)))
        knee = float(np.exp(w_knee[0] @ np.log(self._knee)))
        reach = self._reach_at(float(t[0]))
        x = self._x[self._x < reach]
        x = np.append(x, reach)
        shape, open_shape = self._shape_at(x, t)
        current, inductance = x * knee, initial * shape
        steep = np.gradient(np.log(np.maximum(shape, 1e-12)), x) * x if len(x) > 2 else np.zeros_like(x)
        between = np.sqrt(
            open_initial[0] ** 2 + (steep * open_knee[0]) ** 2 + (open_shape / np.maximum(shape, 1e-3)) ** 2
        )
        fine = np.linspace(0.0, current[-1], 2 * POINTS)
        curve = np.interp(fine, current, inductance)
        flux = _integral(fine, curve, current)
        energy = _integral(fine, curve * fine, current)
        return Slice(current, inductance, flux, energy), _Place(x, w_initial[0], between)

    def _reach_at(self, t: float) -> float:
        """The largest scaled current: a leg's own at its temperature, the smaller of both neighbours' between legs."""
        nearest = int(np.argmin(np.abs(self.temperature_degC - t)))
        if abs(self.temperature_degC[nearest] - t) <= EDGE or len(self.legs) == 1:
            return float(self._reach[nearest])
        right = int(np.searchsorted(self.temperature_degC, t))
        return float(min(self._reach[right - 1], self._reach[right]))

    def _shape_at(self, x: FloatArray, t: FloatArray) -> tuple[FloatArray, FloatArray]:
        """F [n] at scaled currents, and what temperature leaves open of it, from the legs that reach each of them."""
        shape, left_open = np.empty(len(x)), np.empty(len(x))
        reached = self._reach[None, :] * (1 + 1e-9) >= x[:, None]
        for legs in np.unique(reached, axis=0):
            here = np.all(reached == legs, axis=1)
            some = Smoother(self.temperature_degC[legs], self._smoother.length)
            weights, rest = some.weights(t, self._shape_size, self._own[legs])
            rows = np.array(
                [
                    np.interp(x[here], leg.current / knee, leg.inductance / leg.inductance[0])
                    for leg, knee, is_in in zip(self.legs, self._knee, legs, strict=True)
                    if is_in
                ]
            )
            shape[here], left_open[here] = weights[0] @ rows, rest[0]
        return shape, left_open

    def to_dataset(self, current: ArrayLike, temperature_degC: ArrayLike | None = None) -> xr.Dataset:
        """L_d, its uncertainty, L_s, λ and energy on a grid of currents and temperatures (the legs' when None)."""
        i = np.asarray(current, dtype=np.float64)
        t = (
            self.temperature_degC
            if temperature_degC is None
            else np.asarray(temperature_degC, dtype=np.float64)
        )
        grid = (i[None, :], t[:, None])
        dims = ("temperature_degC", "current")
        return xr.Dataset(
            {
                f"{self.kind}_inductance": (dims, self(*grid), {"units": "H"}),
                f"{self.kind}_inductance_errors": (dims, self.uncertainty(*grid), {"units": "H"}),
                "secant_inductance": (dims, self.secant_inductance(*grid), {"units": "H"}),
                "flux_linkage": (dims, self.flux_linkage(*grid), {"units": "Wb"}),
                "energy": (dims, self.energy(*grid), {"units": "J"}),
            },
            coords={
                "current": ("current", i, {"units": "A"}),
                "temperature_degC": ("temperature_degC", t, {"units": "degC"}),
            },
        )

    def _relative(self, place: _Place, which: int) -> FloatArray:
        """Relative standard uncertainty [n] of L_d (0), λ (1) or energy (2): that of each leg at the same scaled
        current, weighted (own ones independent, shared ones with their signs), and what temperature leaves open."""
        x = place.scaled
        own = np.zeros(len(x))
        shared: dict[str, FloatArray] = {}
        for leg, knee, weight in zip(self.legs, self._knee, place.weights, strict=True):
            if abs(weight) < 1e-9:
                continue
            at = np.clip(x * knee, 0.0, leg.top)
            value, slopes = _answer(leg, which)
            there = np.maximum(np.abs(np.interp(at, leg.current, value)), 1e-30)
            u = np.sqrt(variances(slopes, leg.covariance))
            own += (weight * np.interp(at, leg.current, u) / there) ** 2
            for name, shift in leg.shifts.items():
                move = weight * np.interp(at, leg.current, slopes @ shift) / there
                shared[name] = shared.get(name, 0.0) + move
        relative = np.sqrt(own + place.between**2 + sum(move**2 for move in shared.values()))
        if which:  # flux and energy are zero at zero current, where nothing can be said in proportion
            relative[0] = relative[1]
        return np.asarray(relative)

    def _ask(
        self,
        current: ArrayLike,
        temperature_degC: ArrayLike,
        what: str,
        *,
        share: Callable[[_Place, int], FloatArray] | None = None,
    ) -> FloatArray:
        i, t = np.broadcast_arrays(
            np.asarray(current, dtype=np.float64), np.asarray(temperature_degC, dtype=np.float64)
        )
        out = np.full(i.shape, np.nan)
        for value in np.unique(t[np.isfinite(t)]):
            found = self._locate(float(value))
            if found is None:
                continue
            curve, place = found
            here = (t == value) & (i >= 0) & (i <= curve.current[-1] * (1 + 1e-12))
            values = curve.answer(what, i[here])
            if share is not None:
                values = values * np.interp(i[here], curve.current, share(place, ANSWERS.index(what)))
            out[here] = values
        return out


def left_out_error(surface: Surface) -> Mapping[str, float] | None:
    """What the surface would have said at each inner leg without it: root-mean-square relative error of L_d over the
    leg's currents, and the largest (fractions). None with fewer than four legs."""
    legs = surface.legs
    if len(legs) < 4:
        return None
    errors = []
    for k in range(1, len(legs) - 1):
        rest = Surface((*legs[:k], *legs[k + 1 :]), kind=surface.kind)
        guessed = rest(legs[k].current, legs[k].temperature_degC)
        errors.append(guessed / legs[k].inductance - 1)
    every = np.concatenate(errors)
    every = every[np.isfinite(every)]
    return {"rms": float(np.sqrt(np.mean(every**2))), "largest": float(np.abs(every).max())}


def _integral(grid: FloatArray, values: FloatArray, at: FloatArray) -> FloatArray:
    """∫ values from zero on a uniform grid [n], at any places [k] inside it."""
    return np.asarray(CubicHermiteSpline(grid, running_integral(values, float(grid[1])), values)(at))


def _answer(leg: LegCurve, which: int) -> tuple[FloatArray, FloatArray]:
    """L_d, λ or energy on the leg's grid with its slopes."""
    if which == 0:
        return leg.inductance, leg.inductance_slopes
    if which == 1:
        return leg.flux, leg.flux_slopes
    step = float(leg.current[1])
    return (
        running_integral(leg.current * leg.inductance, step),
        running_integral(leg.current[:, None] * leg.inductance_slopes, step),
    )


def _knee_scales(legs: Sequence[LegCurve]) -> FloatArray:
    """A current of each leg by which they are laid over each other: the knee of the largest drop that all reached."""
    for drop in DROPS:
        knees = [leg.knee(drop) for leg in legs]
        found = [knee.value for knee in knees if knee is not None]
        if len(found) == len(legs):
            return np.array(found)
    return np.full(len(legs), max(leg.top for leg in legs))
