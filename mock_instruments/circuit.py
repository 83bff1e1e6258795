"""One pulse through the fixture: bank → switch → part → shunt, then part → diode → shunt until the current has gone.

While the switch is on the state is (part current, bank voltage) and classical Runge-Kutta integrates it in
plain floats; the steps shorten as the part saturates, in proportion to its differential inductance. While
the current freewheels the bank no longer matters and the equation has no time in it, so time is a
quadrature over current: t(i) = ∫ L/(V_f + R i) di, done at once in arrays. Both are then read at any
instants by cubic Hermite interpolation.

Everything here is in the frame of the pulse's own polarity: currents and voltages come out positive.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from mock_instruments.flux import Branch, FloatArray

STEPS = 60  # over the width of an unsaturating pulse; agrees with scipy to 4e-8 (see tests)
SHORTEST_STEP = 0.12  # of the unsaturated step
FREEWHEEL_CELLS = 200
COMPARATOR_DELAY = 100e-9  # s from a current above the comparator's level to an open switch

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(4)


@dataclass(frozen=True, slots=True)
class Bank:
    """What feeds the pulse: capacitor with series resistance, supply (0 A when off) and bleeder."""

    capacitance: float
    resistance: float
    bleeder: float
    supply_voltage: float = 0.0
    supply_current: float = 0.0
    supply_resistance: float = 0.05

    def supplied(self, voltage: float) -> float:
        """Current [A] the supply pushes into the bank when that stands at ``voltage`` [V]; it never sinks any."""
        return min(self.supply_current, max(0.0, (self.supply_voltage - voltage) / self.supply_resistance))


@dataclass(frozen=True, slots=True)
class Switch:
    """On-resistance [ohm], rising as the gate drive sags: R ∝ 1/(V_gs - V_th), V_gs = drive·exp(-t/sag)."""

    on_resistance: float
    drive: float = 10.0
    threshold: float = 3.0
    sag: float = 1e-3
    most: float = 20.0  # the gate clamp keeps R below this many times on_resistance

    def resistance(self, time: float) -> float:
        headroom = self.drive * math.exp(-time / self.sag) - self.threshold
        full = self.drive - self.threshold
        return self.on_resistance * (full / headroom if headroom * self.most > full else self.most)


@dataclass(frozen=True, slots=True)
class Loop:
    """The rest of the loop. ``shunt`` and ``winding`` at their own temperatures."""

    shunt: float
    shunt_inductance: float
    winding: float
    stray_inductance: float = 30e-9
    diode_drop: float = 0.7
    freewheel_resistance: float = 0.02


@dataclass(frozen=True, slots=True)
class Shot:
    """One pulse as it happened: nodes of the current over the on time and the freewheeling, and its energies.

    ``on_time``, ``on_current``, ``on_slope`` [n] and ``off_…`` [m]: s from the switch closing, A, A/s.
    ``end``: when the current is back where it started. ``delivered``: energy that entered the loop from the
    bank's terminals [J]; ``part_heat``: what of it stayed in the part's winding and core [J].
    """

    loop: Loop
    rising: Branch
    falling: Branch
    initial_current: float
    on_time: FloatArray
    on_current: FloatArray
    on_slope: FloatArray
    off_time: FloatArray
    off_current: FloatArray
    off_slope: FloatArray
    bank_before: float
    bank_after: float
    delivered: float
    part_heat: float
    tripped: bool

    @property
    def width(self) -> float:
        return float(self.on_time[-1])

    @property
    def end(self) -> float:
        return float(self.off_time[-1])

    @property
    def peak(self) -> float:
        return float(np.max(self.on_current))

    def motion(self, time: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Current [A] and its slope [A/s] at ``time`` [n] (ascending, s from the switch closing)."""
        current = np.full(time.shape, self.initial_current)
        slope = np.zeros(time.shape)
        first, last, done = self._phases(time)
        current[first:last], slope[first:last] = _hermite(
            time[first:last], self.on_time, self.on_current, self.on_slope
        )
        current[last:done], slope[last:done] = _hermite(
            time[last:done], self.off_time, self.off_current, self.off_slope
        )
        return current, slope

    def part_voltage(self, time: FloatArray) -> FloatArray:
        """Voltage [V] across the part's own terminals: winding resistance included, switch and leads excluded."""
        current, slope = self.motion(time)
        first, last, done = self._phases(time)
        voltage = self.loop.winding * current
        voltage[first:last] += self.rising.slope(current[first:last]) * slope[first:last]
        voltage[last:done] += self.falling.slope(current[last:done]) * slope[last:done]
        return voltage

    def shunt_voltage(self, time: FloatArray) -> FloatArray:
        """Voltage [V] of the shunt, its series inductance included."""
        current, slope = self.motion(time)
        return self.loop.shunt * current + self.loop.shunt_inductance * slope

    def _phases(self, time: FloatArray) -> tuple[int, int, int]:
        """Where in ``time`` the switch closes, opens, and the current is back where it was."""
        first, last, done = np.searchsorted(time, [0.0, self.width, self.end])
        return int(first), int(last), int(done)


def fire(
    bank: Bank,
    switch: Switch,
    loop: Loop,
    *,
    voltage: float,
    width: float,
    rising: Branch,
    initial_current: float = 0.0,
    trip_current: float = math.inf,
) -> Shot:
    """Close the switch for ``width`` [s] on a bank at ``voltage`` [V] and follow the current until it has gone.

    ``trip_current`` [A]: a comparator on the shunt that opens the switch early.
    """
    time, current, bank_voltage, slope = _on(bank, switch, loop, voltage, width, rising, initial_current)
    above = np.nonzero(np.asarray(current) >= trip_current)[0]
    tripped = bool(len(above))
    if (
        tripped
        and (cut := _crossing(time, current, slope, int(above[0]), trip_current) + COMPARATOR_DELAY) < width
    ):
        time, current, bank_voltage, slope = _on(bank, switch, loop, voltage, cut, rising, initial_current)
    t, i, v, didt = (np.asarray(each) for each in (time, current, bank_voltage, slope))
    peak = float(i[-1])
    falling = rising
    if rising.curve.memory:
        falling = replace(rising.curve.still(rising.offset_at(peak)), field=rising.field)
    rest = max(0.0, min(initial_current, peak))
    off_t, off_i, off_slope = _freewheel(loop, falling, peak, rest, start=float(t[-1]))
    supplied = np.clip((bank.supply_voltage - v) / bank.supply_resistance, 0.0, bank.supply_current)
    terminal = v - bank.resistance * (i - supplied)
    heat = loop.winding * (_integral(t, i * i) + _integral(off_t, off_i * off_i))
    heat += _core_loss(rising, falling, initial_current, peak)
    return Shot(
        loop,
        rising,
        falling,
        initial_current,
        t,
        i,
        didt,
        off_t,
        off_i,
        off_slope,
        bank_before=voltage,
        bank_after=float(v[-1]),
        delivered=_integral(t, terminal * i),
        part_heat=heat,
        tripped=tripped,
    )


def _on(
    bank: Bank,
    switch: Switch,
    loop: Loop,
    voltage: float,
    width: float,
    rising: Branch,
    initial_current: float,
) -> tuple[list[float], list[float], list[float], list[float]]:
    """Times, currents, bank voltages and di/dt at the Runge-Kutta nodes from 0 to ``width``."""
    inductance: Callable[[float], float] = rising.plain_slope()
    resistance = switch.resistance
    series = loop.shunt + loop.winding
    stray = loop.shunt_inductance + loop.stray_inductance
    esr, per_farad, per_bleeder = bank.resistance, 1.0 / bank.capacitance, 1.0 / bank.bleeder
    supply_voltage, supply_current = bank.supply_voltage, bank.supply_current
    per_supply = 1.0 / bank.supply_resistance

    def rates(r: float, i: float, v: float) -> tuple[float, float]:
        feed = (supply_voltage - v) * per_supply
        if feed < 0.0:
            feed = 0.0
        elif feed > supply_current:
            feed = supply_current
        net = i - feed
        return (v - esr * net - r * i) / (inductance(i) + stray), (-net - v * per_bleeder) * per_farad

    t, i, v = 0.0, initial_current, voltage
    r0 = resistance(0.0) + series
    unsaturated = inductance(0.0)
    longest = width / STEPS
    times, currents, voltages, slopes = [t], [i], [v], []
    while True:
        a1, b1 = rates(r0, i, v)
        slopes.append(a1)
        left = width - t
        if left <= 1e-9 * width:
            return times, currents, voltages, slopes
        h = longest * max(SHORTEST_STEP, min(1.0, inductance(i) / unsaturated))
        if h > left * 0.999:
            h = left
        half = 0.5 * h
        r1, r2 = resistance(t + half) + series, resistance(t + h) + series
        a2, b2 = rates(r1, i + half * a1, v + half * b1)
        a3, b3 = rates(r1, i + half * a2, v + half * b2)
        a4, b4 = rates(r2, i + h * a3, v + h * b3)
        i += h * (a1 + 2.0 * (a2 + a3) + a4) / 6.0
        v += h * (b1 + 2.0 * (b2 + b3) + b4) / 6.0
        t += h
        r0 = r2
        times.append(t)
        currents.append(i)
        voltages.append(v)


def _freewheel(
    loop: Loop, falling: Branch, peak: float, rest: float, *, start: float
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Time, current and di/dt from ``peak`` down to ``rest`` [A], by Gauss quadrature of t(i) between even currents."""
    stray = loop.shunt_inductance + loop.stray_inductance
    resistance = loop.freewheel_resistance + loop.shunt + loop.winding
    if peak <= rest:
        return np.array([start]), np.array([peak]), np.array([0.0])

    def slope(i: FloatArray) -> FloatArray:
        return np.asarray(-(loop.diode_drop + resistance * i) / (falling.slope(i) + stray))

    i = np.linspace(peak, rest, FREEWHEEL_CELLS + 1)
    half = 0.5 * (i[1] - i[0])
    inner = (i[:-1] + half)[:, None] + half * _NODES
    t = start + np.concatenate([[0.0], np.cumsum(half * (1.0 / slope(inner)) @ _WEIGHTS)])
    return t, i, slope(i)


def _hermite(at: FloatArray, t: FloatArray, y: FloatArray, dy: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Value and derivative of the cubic through (t, y) with slopes dy, at ascending instants inside [t0, t_end]."""
    if len(t) < 2 or not len(at):
        return np.full(at.shape, y[0]), np.zeros(at.shape)
    cell = np.clip(np.searchsorted(t, at, side="right") - 1, 0, len(t) - 2)
    h = np.diff(t)
    rise = np.diff(y) / h
    c2 = (3.0 * rise - 2.0 * dy[:-1] - dy[1:]) / h
    c3 = (dy[:-1] + dy[1:] - 2.0 * rise) / (h * h)
    s = at - t[cell]
    c2, c3, c1 = c2[cell], c3[cell], dy[cell]
    return y[cell] + s * (c1 + s * (c2 + s * c3)), c1 + s * (2.0 * c2 + 3.0 * s * c3)


def _crossing(time: list[float], current: list[float], slope: list[float], node: int, level: float) -> float:
    """When the current passes ``level`` between the nodes before and at ``node``."""
    if node == 0:
        return 0.0
    low, high = time[node - 1], time[node]
    arrays = tuple(np.asarray(each[node - 1 : node + 1]) for each in (time, current, slope))
    for _ in range(60):
        middle = 0.5 * (low + high)
        value, _ = _hermite(np.asarray([middle]), *arrays)
        low, high = (middle, high) if value[0] < level else (low, middle)
    return high


def _integral(t: FloatArray, y: FloatArray) -> float:
    """Trapezoid with its end-slope correction h²/12 (y0' - y1') in every cell, slopes by differences."""
    if len(t) < 3:
        return 0.0
    h = np.diff(t)
    slope = np.gradient(y, t, edge_order=2)
    return float(np.sum(h * (0.5 * (y[1:] + y[:-1]) + h / 12.0 * (slope[:-1] - slope[1:]))))


def _core_loss(rising: Branch, falling: Branch, low: float, high: float) -> float:
    """Energy [J] left in the core by going up one branch and back down the other; zero without memory."""
    if rising.curve.memory is None or high <= low:
        return 0.0
    i = np.linspace(max(0.0, low), high, 201)
    return max(0.0, _integral(i, i * (rising.slope(i) - falling.slope(i))))
