"""Flux laws λ(i, T) of the simulated parts, all in closed form.

A law is nominal figures and how they drift; `FluxLaw.at` freezes it at one temperature into a `FluxCurve`,
and a curve hands out a `Branch` for one direction of travel. Without memory every branch is the same
function of the current. A part that remembers carries an *offset* h [A] that its core keeps at zero
current: the core sees i + h. Driving the current away from zero pulls h towards what that current can
magnetise; bringing it back leaves h where it is. On the way up h is itself a closed form of i, so a pulse
through such a part needs no further state variable.

Shapes (x = i/knee; L0 is the slope at x = 0 for each):
    sharp   x / (1 + |x|^p)^(1/p)       slope (1 + |x|^p)^(-1 - 1/p)    gapped ferrite
    soft    atan x                      slope 1 / (1 + x²)              powder
    tanh    tanh x                      slope sech² x                   textbook core, for checks
"""

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
Law = Literal["gapped", "powder", "remanent", "stepped", "tanh", "linear"]
Shape = Literal["sharp", "soft", "tanh"]

REFERENCE_DEGC = 25.0
COPPER_ALPHA_20 = 3.93e-3  # 1/K at 20 degC, annealed copper (IEC 60028)

_SHAPES: dict[Law, Shape] = {"gapped": "sharp", "remanent": "sharp", "powder": "soft", "tanh": "tanh"}

# h follows what the current magnetises with this much lag, as fractions of the knee.
MEMORY_REACH = 0.5  # beyond this current the whole of the memory can be written
MEMORY_LENGTH = 0.2  # how much further the current must go to write 63 % of what is left


def copper_resistance(resistance_20: float, temperature_degC: float) -> float:
    """Winding resistance [ohm] at a mean winding temperature [degC] from its value at 20 degC [ohm] (IEC 60028)."""
    return resistance_20 * (1.0 + COPPER_ALPHA_20 * (temperature_degC - 20.0))


@dataclass(frozen=True, slots=True)
class Term:
    """One core section: its share of the initial inductance [H], its knee [A] and its shape."""

    inductance: float
    knee: float
    shape: Shape
    sharpness: float = 2.0

    def flux(self, current: FloatArray) -> FloatArray:
        x = current / self.knee
        scale = self.inductance * self.knee
        if self.shape == "sharp":
            return np.asarray(scale * x * (1.0 + np.abs(x) ** self.sharpness) ** (-1.0 / self.sharpness))
        return scale * (np.arctan(x) if self.shape == "soft" else np.tanh(x))

    def slope(self, current: FloatArray) -> FloatArray:
        x = current / self.knee
        if self.shape == "sharp":
            power = -1.0 - 1.0 / self.sharpness
            return np.asarray(self.inductance * (1.0 + np.abs(x) ** self.sharpness) ** power)
        if self.shape == "soft":
            return np.asarray(self.inductance / (1.0 + x * x))
        return np.asarray(self.inductance * (1.0 - np.tanh(x) ** 2))

    def plain_slope(self, floor: float = 0.0) -> Callable[[float], float]:
        """`slope` plus ``floor`` [H] for plain floats, as fast as the integrator wants it."""
        inductance, per_knee, p = self.inductance, 1.0 / self.knee, self.sharpness
        power = -1.0 - 1.0 / p
        tanh = math.tanh

        def sharp(i: float) -> float:
            slope: float = floor + inductance * (1.0 + abs(i * per_knee) ** p) ** power
            return slope

        def soft(i: float) -> float:
            x = i * per_knee
            return floor + inductance / (1.0 + x * x)

        def hyperbolic(i: float) -> float:
            return floor + inductance * (1.0 - tanh(i * per_knee) ** 2)

        return {"sharp": sharp, "soft": soft, "tanh": hyperbolic}[self.shape]


@dataclass(frozen=True, slots=True)
class Memory:
    """How the offset h [A] of a remembering core follows the current; all in amperes, for currents of one sign.

    dh/di = (target(i) - h)/length while the current grows and target(i) > h, else 0; target(i) =
    limit·min(1, i/reach).
    """

    limit: float
    reach: float
    length: float

    def path(self, current: FloatArray, offset: float, start: float = 0.0) -> tuple[FloatArray, FloatArray]:
        """h and dh/di where the current has grown from ``start`` to ``current`` (both >= 0) with h = ``offset`` before."""
        i = np.asarray(current, dtype=float)
        if offset >= self.limit:
            return np.full_like(i, offset), np.zeros_like(i)
        k = self.limit / self.reach
        begin = max(start, offset / k if offset > 0 else 0.0)
        begin_steep = min(begin, self.reach)

        def rising(x: FloatArray) -> FloatArray:  # the target still grows with the current
            return k * (x - self.length) + (offset - k * (begin - self.length)) * np.exp(
                -(x - begin) / self.length
            )

        if begin < self.reach:
            at_reach, flat_from = float(rising(np.asarray(self.reach))), self.reach
        else:
            at_reach, flat_from = offset, begin
        below = rising(np.clip(i, begin_steep, self.reach)) if begin < self.reach else np.full_like(i, offset)
        above = self.limit - (self.limit - at_reach) * np.exp(
            -(np.maximum(i, flat_from) - flat_from) / self.length
        )
        h = np.where(i <= begin, offset, np.where(i <= flat_from, below, above))
        target = self.limit * np.minimum(1.0, i / self.reach)
        return h, np.where(i < begin, 0.0, (target - h) / self.length)


@dataclass(frozen=True, slots=True)
class Branch:
    """One way through the flux law at one temperature, for a current that moves in one direction.

    ``moving`` branches write the memory on the way (from ``start`` on, with ``offset`` before); others keep
    it. ``field`` [A] is what a second winding adds to the current in magnetising the core (its ampere-turns over the
    turns of this one); `flux`, `slope` and `offset_at` take the current of this winding.
    """

    curve: "FluxCurve"
    offset: float = 0.0
    start: float = 0.0
    moving: bool = False
    field: float = 0.0

    def flux(self, current: FloatArray) -> FloatArray:
        """Flux linkage [Wb], shape of ``current`` [A]; zero for a fresh part at zero current."""
        i = np.asarray(current, dtype=float) + self.field
        h, _ = self._offset(i)
        out = self.curve.floor * i
        for term in self.curve.terms:
            out = out + term.flux(i + h)
        return out

    def slope(self, current: FloatArray) -> FloatArray:
        """Differential inductance dλ/di [H] along this branch, shape of ``current`` [A]."""
        i = np.asarray(current, dtype=float) + self.field
        h, growth = self._offset(i)
        core = np.zeros_like(i)
        for term in self.curve.terms:
            core = core + term.slope(i + h)
        return np.asarray(self.curve.floor + core * (1.0 + growth))

    def plain_slope(self) -> Callable[[float], float]:
        """`slope` for plain floats."""
        if self.field:
            there, field = replace(self, field=0.0).plain_slope(), self.field
            return lambda i: there(i + field)
        floor = self.curve.floor
        slopes = [term.plain_slope() for term in self.curve.terms]
        memory, offset = self.curve.memory, self.offset
        if memory is None or (not self.moving and offset == 0.0):
            if len(self.curve.terms) == 1:
                return self.curve.terms[0].plain_slope(floor)
            return lambda i: floor + sum([slope(i) for slope in slopes])
        if not self.moving or offset >= memory.limit:
            return lambda i: floor + sum([slope(i + offset) for slope in slopes])
        return _moving_slope(self, memory, slopes)

    def offset_at(self, current: float) -> float:
        """What the core remembers [A] once the current has travelled to ``current`` [A] on this branch."""
        return float(self._offset(np.asarray(current, dtype=float) + self.field)[0])

    def _offset(self, i: FloatArray) -> tuple[FloatArray, FloatArray]:
        memory = self.curve.memory
        if memory is None or not self.moving:
            return np.full_like(i, self.offset), np.zeros_like(i)
        return memory.path(i, self.offset, self.start)


def _moving_slope(
    branch: Branch, memory: Memory, slopes: list[Callable[[float], float]]
) -> Callable[[float], float]:
    """The plain-float twin of `Memory.path` inside `Branch.slope`; a test holds the two together."""
    floor, offset, exp = branch.curve.floor, branch.offset, math.exp
    limit, reach, length = memory.limit, memory.reach, memory.length
    k = limit / reach
    begin = max(branch.start, offset / k if offset > 0 else 0.0)
    swing = offset - k * (begin - length)
    flat_from = max(begin, reach)
    at_flat = k * (reach - length) + swing * exp(-(reach - begin) / length) if begin < reach else offset

    def slope(i: float) -> float:
        if i < begin:
            h, growth = offset, 0.0
        elif i < flat_from:
            h = k * (i - length) + swing * exp(-(i - begin) / length)
            growth = (k * i - h) / length
        else:
            missing = (limit - at_flat) * exp(-(i - flat_from) / length)
            h, growth = limit - missing, missing / length
        return floor + sum([each(i + h) for each in slopes]) * (1.0 + growth)

    return slope


@dataclass(frozen=True, slots=True)
class FluxCurve:
    """A flux law at one temperature: core sections, what is left in full saturation [H], and the memory if any."""

    terms: tuple[Term, ...]
    floor: float
    memory: Memory | None = None

    def kept(self, offset: float) -> float:
        """What a core at this temperature still remembers of ``offset`` [A]; a hotter core holds less."""
        if self.memory is None:
            return 0.0
        return max(-self.memory.limit, min(self.memory.limit, offset))

    def still(self, offset: float = 0.0) -> Branch:
        """Small moves and falling currents: the memory stays as it is (the reversible, incremental inductance)."""
        return Branch(self, self.kept(offset))

    def growing(self, offset: float = 0.0, start: float = 0.0) -> Branch:
        """A current growing from ``start`` [A] >= 0 in a core that remembers ``offset`` [A]."""
        return Branch(self, self.kept(offset), start, moving=self.memory is not None)

    def conditioned(self) -> Branch:
        """What repeated large pulses of one polarity make of the part."""
        return Branch(self, self.memory.limit if self.memory else 0.0)


@dataclass(frozen=True, slots=True)
class FluxLaw:
    """λ(i, T) of one part: figures at 25 degC and how they drift.

    ``inductance`` [H] initial inductance, ``knee`` [A], ``sharpness`` exponent of the sharp shape,
    ``floor`` fraction of the inductance left in full saturation, drifts per kelvin from 25 degC (of the
    knee, and linear and quadratic of the inductance), ``memory`` as a fraction of the knee, ``first_knee``
    and ``first_share`` of a stepped gap.
    """

    law: Law
    inductance: float
    knee: float
    sharpness: float = 6.0
    floor: float = 0.05
    knee_drift: float = 0.0
    inductance_drift: float = 0.0
    inductance_curvature: float = 0.0
    memory: float = 0.0
    first_knee: float = 0.4
    first_share: float = 0.45

    def __post_init__(self) -> None:
        if self.inductance <= 0 or self.knee <= 0:
            raise ValueError(
                f"inductance and knee must be positive, got {self.inductance!r} H and {self.knee!r} A"
            )
        if not 0 <= self.floor < 1:
            raise ValueError(f"floor is a fraction below 1, got {self.floor!r}")

    def at(self, temperature_degC: float) -> FluxCurve:
        """The law at one temperature [degC]."""
        rise = temperature_degC - REFERENCE_DEGC
        initial = self.inductance * (
            1.0 + self.inductance_drift * rise + self.inductance_curvature * rise * rise
        )
        knee = self.knee * (1.0 + self.knee_drift * rise)
        if initial <= 0 or knee <= 0:
            raise ValueError(f"the flux law has no meaning at {temperature_degC!r} degC: check its drifts")
        floor = self.floor * initial
        core = initial - floor
        if self.law == "linear":
            return FluxCurve((), initial)
        if self.law == "stepped":
            first, second = core * self.first_share, core * (1.0 - self.first_share)
            return FluxCurve(
                (
                    Term(first, knee * self.first_knee, "sharp", self.sharpness),
                    Term(second, knee, "sharp", self.sharpness),
                ),
                floor,
            )
        memory = None
        if self.law == "remanent":
            memory = Memory(self.memory * knee, MEMORY_REACH * knee, MEMORY_LENGTH * knee)
        return FluxCurve((Term(core, knee, _SHAPES[self.law], self.sharpness),), floor, memory)

    def shorted(self) -> "FluxLaw":
        """The same winding with turns shorted: what its leakage leaves, and no core to saturate."""
        return replace(self, law="linear", inductance=0.05 * self.inductance)


def saturation_current(branch: Branch, drop: float) -> float:
    """Current [A] at which the differential inductance has fallen by ``drop`` (0..1) from its value at zero current.

    NaN where the law never falls that far. By bisection on the closed-form slope, to 1e-13 relative.
    """
    wanted = (1.0 - drop) * float(branch.slope(np.asarray(0.0)))
    slope = branch.plain_slope()
    high = 1e-3
    while slope(high) > wanted:
        high *= 2.0
        if high > 1e6:
            return math.nan
    low = 0.0
    for _ in range(200):
        middle = 0.5 * (low + high)
        if middle in (low, high):
            break
        low, high = (middle, high) if slope(middle) > wanted else (low, middle)
    return 0.5 * (low + high)
