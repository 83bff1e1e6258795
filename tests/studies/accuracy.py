"""How good the numbers are: a few hundred drawn benches against their own truth, and against the physical limit.

    make accuracy                                   the whole study, into build/accuracy/
    python tests/studies/accuracy.py --benches 12   a short form (test_accuracy.py runs one in the suite)

What it finds is written as a page to read (report.md, with its figure) and as data (accuracy.json).

Each bench is drawn at random: part (laws that the fit knows, and laws that it does not), rail, bits, noise, offsets,
gains, shunt, skew, sag of the bank, drift of the part during a leg, thermometer. Its captures come from the simulated
circuit and digitizer; extraction is told only what a bench file would state. Captures go straight from the simulation to
the extraction's pure core, without sockets and files, which other tests cover: what counts here is numbers.

What is drawn is what somebody who knows the trade would set up: a rail of 5 to 40 V at which the longest pulse lasts 8 to
80 us (less, down to 2 us, where 5 V are too much for that), and a shunt whose L/R is at most a tenth of it (common
practice, no source). A second family, *harsh*, is not: shunts of L/R up to half the longest pulse, known to 20 %, few and
short pulses, noise, a part that warms. No bar is set for it; what is asked there is whether the intervals and flags still
tell the truth.

Efficiency is the root-mean-square error of Isat over the Cramér-Rao bound of the true law with its parameters unknown,
white current noise only: bound = sqrt(q'·F⁻¹·q), F = Σ (∂i/∂θ)(∂i/∂θ)'/σ², q = ∂Isat/∂θ, with ∂i/∂θ = −(∂λ/∂θ)/L at
constant λ and σ the noise of one sample over the root of the repeats. The captures of that part have that noise and no
other; that offsets and the pulse's start are unknown to the extraction is its own loss.
"""

import argparse
import json
import os
import sys
import time
from collections.abc import Callable, Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

os.environ.setdefault("OMP_NUM_THREADS", "1")  # two processes, one thread each

import numpy as np
from scipy.optimize import brentq

ROOT = Path(__file__).resolve().parents[2]
sys.path[:0] = [str(ROOT), str(Path(__file__).resolve().parent)]

from accuracy_report import FIGURE, Bars, draw_report

from mock_instruments.circuit import Bank, Loop, Switch, fire
from mock_instruments.flux import FluxCurve, FluxLaw, copper_resistance
from mock_instruments.sampling import Settings as Sampling
from mock_instruments.sampling import capture
from mock_instruments.spec import DigitizerSpec
from mock_instruments.world import Pulse
from runner.extraction.calibration import Calibration, Constant
from runner.extraction.drift import at_one_temperature
from runner.extraction.mean_capture import Setting, average
from runner.extraction.part_result import Settings, find_knees
from runner.extraction.pulse_leg import pulse_leg
from runner.extraction.ramp import make_ramp

TEMPERATURES = (-40.0, 25.0, 125.0)
PLACES = ("cold", "room", "hot")
DROPS = (0.1, 0.2, 0.3)
RANGES = {"voltage": (5.0, 10.0, 20.0, 50.0), "shunt": (0.02, 0.05, 0.1, 0.2, 0.5, 1.0)}
INTERVALS = (5e-9, 1e-8, 2e-8, 5e-8, 1e-7, 2e-7, 5e-7, 1e-6)
BARS = Bars(
    error={"12 bit": (0.002, 0.006), "8 bit": (0.005, 0.015)},
    coverage=(0.92, 0.98),
    claimed=Settings(drops=DROPS).coverage,
    efficiency=2.0,
    factor=Settings(drops=DROPS).factor,
)


# ------------------------------------------------------------------ laws the fit has never heard of


@dataclass(frozen=True)
class Foreign:
    """A branch like those of the simulated bench, from any L(i), its integral tabulated once."""

    inductance: Callable[[np.ndarray], np.ndarray]

    memory = None

    @property
    def curve(self) -> "Foreign":
        return self

    def slope(self, i: np.ndarray) -> np.ndarray:
        return np.asarray(self.inductance(np.abs(np.asarray(i, dtype=float))))

    def plain_slope(self) -> Callable[[float], float]:
        grid = np.linspace(0.0, 80.0, 8001)
        table = self.slope(grid).tolist()

        def slope(i: float) -> float:
            place = min(abs(i) * 100.0, 7999.0)
            k = int(place)
            return table[k] + (place - k) * (table[k + 1] - table[k])

        return slope


def foreign_law(kind: str, inductance: float, knee: float) -> Callable[[float], Foreign]:
    """L(i) at a temperature for four shapes that are in nobody's dictionary."""
    from scipy.special import erf

    shapes: dict[str, Callable[[np.ndarray], np.ndarray]] = {
        "erf": lambda x: 0.06 + 0.47 * (1 - erf((x - 1.0) / 0.14)) / (1 + erf(1 / 0.14)) * 2,
        "hyperbola": lambda x: 0.05 + 0.475 * (1 - (x - 1.0) / np.hypot(x - 1.0, 0.09)),
        "two_parts": lambda x: 0.55 / (1 + x**2) + 0.42 / (1 + (x / 1.25) ** 8) + 0.03,
        "stretched": lambda x: 0.04 + 0.96 * np.exp(-((x / 1.2) ** 3.2)),
    }
    shape = shapes[kind]

    def at(temperature: float) -> Foreign:
        rise = temperature - 25.0
        level, place = inductance * (1 + 2e-4 * rise), knee * (1 - 2.2e-3 * rise)
        return Foreign(lambda i: level * shape(i / place))

    return at


# ------------------------------------------------------------------ a bench drawn at random


@dataclass(frozen=True)
class Drawn:
    """One bench: the truth, and what its file would state."""

    seed: int
    law_name: str
    law: Callable[[float], Any]
    resistance: float
    bits: int
    repeats: int
    rail: float
    bank: Bank
    switch: float
    shunt: float
    shunt_inductance: float
    digitizer: DigitizerSpec
    delay: float
    reach: float
    longest: float
    widths: int
    samples: int
    body_offset: float
    drift: float
    ohmmeter_gain: float
    lead: float
    stated: Calibration


def draw_bench(seed: int, *, bits: int | None = None, harsh: bool = False) -> Drawn:
    """Everything about bench number ``seed``."""
    rng = np.random.default_rng([20261, seed, int(harsh)])

    def log_uniform(low: float, high: float) -> float:
        return float(np.exp(rng.uniform(np.log(low), np.log(high))))

    inductance, knee = log_uniform(4.7e-6, 220e-6), log_uniform(2.0, 20.0)
    name, law = draw_law(rng, inductance, knee)
    bits = bits or int(rng.choice([8, 10, 12, 12, 12]))
    reach = float(rng.uniform(1.2, 1.7))
    longest = log_uniform(3e-6, 8e-6) if harsh else log_uniform(8e-6, 80e-6)
    top = reach * true_knee(law(25.0), 0.3)
    flux = float(np.trapezoid(law(25.0).slope(grid := np.linspace(0.0, top, 400)), grid))
    rail = float(np.clip(flux / longest, 5.0, 40.0))
    longest = flux / rail
    slack = 0.2 if harsh else 0.1
    low, high = (longest / 10, longest / 2) if harsh else (0.0, longest / 10)
    while True:
        nominal = float(rng.choice([2e-3, 5e-3, 10e-3, 20e-3]))
        inductive = log_uniform(0.5e-9, 20e-9 if harsh else 5e-9)
        if low <= inductive / nominal <= high:
            break
    stated = Calibration(
        nominal_shunt=nominal,
        shunt=Constant(nominal, 1e-3 * nominal),
        ambient_degC=Constant(23.0, 2.0),
        tempco=Constant(2e-5, 1e-5),
        shunt_inductance=Constant(inductive, slack * inductive),
        voltage_gain=Constant(1.0, 5e-4),
        shunt_gain=Constant(1.0, 5e-4),
        skew=Constant(float(rng.uniform(-20e-9, 20e-9)), 1.5e-9),
        body_offset=Constant(0.0, 0.15),
        ohmmeter_gain=Constant(1.0, 5e-4),
        lead_resistance=Constant(0.0, 2e-5),
    )
    n = rng.standard_normal
    true_shunt = nominal * (1 + 1e-3 * n()) * (1 + (2e-5 + 1e-5 * n()) * (23.0 + 2 * n() - 25.0))
    return Drawn(
        seed=seed,
        law_name=name,
        law=law,
        resistance=log_uniform(3e-3, 50e-3),
        bits=bits,
        repeats=8,
        rail=rail,
        bank=Bank(log_uniform(0.5e-3, 10e-3), 5e-3, 2000.0),
        switch=float(rng.uniform(3e-3, 15e-3)),
        shunt=float(true_shunt),
        shunt_inductance=stated.shunt_inductance.value * (1 + slack * float(n())),
        digitizer=DigitizerSpec(
            bits=bits,
            noise=float(rng.uniform(1.0, 3.0) if harsh else rng.uniform(0.35, 1.2)),
            voltage_offset=float(rng.uniform(-0.03, 0.03)),
            shunt_offset=float(rng.uniform(-1e-4, 1e-4)),
            voltage_gain=1 + 5e-4 * float(n()),
            shunt_gain=1 + 5e-4 * float(n()),
            skew=stated.skew.value + 1.5e-9 * float(n()),
        ),
        delay=float(rng.uniform(5e-9, 60e-9)),
        reach=reach,
        longest=longest,
        widths=6 if harsh else 18,
        samples=500 if harsh else 2000,
        body_offset=0.15 * float(n()),
        drift=float(rng.uniform(-2.0, 2.0) if harsh else rng.uniform(-0.5, 0.5)),
        ohmmeter_gain=1 + 5e-4 * float(n()),
        lead=2e-5 * float(n()),
        stated=stated,
    )


def draw_law(rng: np.random.Generator, inductance: float, knee: float) -> tuple[str, Callable[[float], Any]]:
    """A law's name, and its branch at a temperature."""
    name = str(rng.choice(["gapped", "gapped", "powder", "powder", "tanh", "stepped", "foreign", "foreign"]))
    if name == "foreign":
        name = str(rng.choice(["erf", "hyperbola", "two_parts", "stretched"]))
        return name, foreign_law(name, inductance, knee)
    figures = {
        "gapped": {"sharpness": rng.uniform(3.0, 9.0), "floor": rng.uniform(0.03, 0.1), "knee_drift": -2.6e-3},
        "powder": {"floor": rng.uniform(0.01, 0.06), "knee_drift": -3e-4},
        "tanh": {"floor": rng.uniform(0.0, 0.05), "knee_drift": -2e-3},
        "stepped": {"sharpness": rng.uniform(4.0, 7.0), "first_share": 0.45, "first_knee": 0.4, "knee_drift": -2.6e-3},
    }[name]  # fmt: skip
    whole = FluxLaw(law=name, inductance=inductance, knee=knee, inductance_drift=2e-4, **figures)  # type: ignore[arg-type]
    return name, lambda temperature: whole.at(temperature).conditioned()


def true_knee(branch: Any, drop: float) -> float:
    """Current at which the true differential inductance has fallen by ``drop`` from its value at zero."""
    wanted = (1 - drop) * float(branch.slope(np.asarray(0.0)))
    high = 0.1
    while float(branch.slope(np.asarray(high))) > wanted:
        high *= 1.1
    return float(brentq(lambda i: float(branch.slope(np.asarray(i))) - wanted, high / 1.2, high, xtol=1e-12))


def leg_ramps(bench: Drawn, temperature: float, rng: np.random.Generator) -> list[Any]:
    """The ramps of one leg as extraction would see them, climbed from short to long, the part drifting meanwhile."""
    branch, widths = bench.law(temperature), bench.widths
    grid = np.linspace(0.0, bench.reach * true_knee(branch, 0.3), 400)
    longest = float(np.trapezoid(branch.slope(grid), grid)) / bench.rail * 1.02
    ramps = []
    for k in range(widths):
        width = longest * (0.12 + 0.88 * k / (widths - 1))
        now = temperature + bench.drift * (k / (widths - 1) - 0.5)
        winding = copper_resistance(bench.resistance, now)
        loop = Loop(bench.shunt, bench.shunt_inductance, winding)
        shot = fire(
            bench.bank, Switch(bench.switch), loop, voltage=bench.rail, width=width, rising=bench.law(now)
        )
        ramp = digitize(bench, shot, width, rng)
        if ramp is not None:
            ramps.append(replace(ramp, temperature_degC=now + bench.body_offset))
    return ramps


def digitize(bench: Drawn, shot: Any, width: float, rng: np.random.Generator) -> Any:
    """Captures of one pulse, averaged and made a ramp."""
    samples = bench.samples
    interval = next((h for h in INTERVALS if h * samples * 0.85 > 1.1 * width), INTERVALS[-1])
    before = samples // 10
    v_range = next(r for r in RANGES["voltage"] if r > 1.05 * bench.rail)
    top = float(np.max(shot.shunt_voltage(np.linspace(0.0, width, 200))))
    i_range = next((r for r in RANGES["shunt"] if r > 1.1 * top), RANGES["shunt"][-1])
    settings = Sampling(samples, interval, before, v_range, i_range)
    seen = Pulse(shot, 1, 0.0, width, bench.rail)
    records = [capture(seen, settings, bench.digitizer, bench.delay, rng) for _ in range(bench.repeats)]
    half = 1 << (bench.bits - 1)
    setting = Setting(
        interval,
        -before * interval,
        v_range / half,
        0.0,
        i_range / half / bench.stated.nominal_shunt,
        0.0,
        -half * 0.99,
        half * 0.99,
    )
    mean = average(
        np.stack([r.voltage for r in records]), np.stack([r.shunt for r in records]), setting,
        guard=max(0.0, -bench.stated.skew.value),
    )  # fmt: skip
    return make_ramp(mean, bench.stated)


def study_bench(seed: int, bits: int | None = None, harsh: bool = False) -> dict[str, Any]:
    """Errors of one bench: relative error and relative standard uncertainty of each Isat and L_0, and whether the
    interval held the truth."""
    bench = draw_bench(seed, bits=bits, harsh=harsh)
    rng = np.random.default_rng([77, seed])
    legs, truths = [], []
    settings = Settings(drops=DROPS)
    for temperature in TEMPERATURES:
        ramps = leg_ramps(bench, temperature, rng)
        measured = float(np.mean([ramp.temperature_degC for ramp in ramps]))
        winding = copper_resistance(bench.resistance, temperature)
        reading = bench.ohmmeter_gain * (winding + bench.lead)
        u = float(np.hypot(5e-4 * reading, 2e-5))
        legs.append(
            pulse_leg(
                ramps,
                bench.stated,
                temperature_degC=measured,
                resistance=reading,
                resistance_uncertainty=u,
                like=legs[-1] if legs else None,
            )
        )
        # The interval is about the part at the temperature that is stated: the measured one.
        branch = bench.law(measured)
        truths.append((float(branch.slope(np.asarray(0.0))), [true_knee(branch, drop) for drop in DROPS]))
    corrected = at_one_temperature(legs, kind="differential")
    knees = find_knees(corrected, settings, nominal=1.0, temperature_uncertainty=0.15)
    rows = []
    for k, place in enumerate(PLACES):
        row: dict[str, Any] = {"place": place, "fit": corrected[k].fit.model.law.name}
        fit = corrected[k].fit
        row |= {"size": fit.size, "inflation": fit.inflation, "misfit": fit.misfit}
        for name, quantity, true in [("L0", knees.initial[k], truths[k][0])] + [
            (f"{100 * drop:.0f}", knees.found[drop][k], truths[k][1][j]) for j, drop in enumerate(DROPS)
        ]:
            if quantity is None:
                row[name] = None
                continue
            own = float(np.sqrt(sum(v * v for v in quantity.own.values())))
            row[name] = {
                "error": quantity.value / true - 1,
                "u": quantity.uncertainty / true,
                "own": own / true,
                "held": abs(quantity.value - true) <= settings.factor * quantity.uncertainty,
            }
        rows.append(row)
    facts = {
        "longest": bench.longest,
        "shunt_time": bench.shunt_inductance / bench.shunt,
        "rail": bench.rail,
        "reach": bench.reach,
        "resistance": bench.resistance,
    }
    return {"seed": seed, "law": bench.law_name, "bits": bench.bits, **facts, "rows": rows}


# ------------------------------------------------------------------ efficiency


def efficiency(
    name: str, trials: int, *, widths: int = 18, samples: int = 2000, noise: float = 5e-3
) -> dict[str, Any]:
    """Root-mean-square error of Isat at 30 % over the Cramér-Rao bound, on ideal captures with white current noise.

    ``noise`` [A] of one sample of one repeat; eight repeats. Voltage exact, 12 V, no resistance.
    """
    if name == "gapped":
        theta = np.array([22e-6, 10.0, 6.0, 0.06])

        def curve(p: np.ndarray) -> FluxCurve:
            return FluxLaw(law="gapped", inductance=p[0], knee=p[1], sharpness=p[2], floor=p[3]).at(25.0)
    else:
        theta = np.array([47e-6, 7.5, 0.03])

        def curve(p: np.ndarray) -> FluxCurve:
            return FluxLaw(law="powder", inductance=p[0], knee=p[1], floor=p[2]).at(25.0)

    def knee(p: np.ndarray) -> float:
        return true_knee(curve(p).still(), 0.3)

    branch, truth, rail, repeats = curve(theta).still(), knee(theta), 12.0, 8
    grid = np.linspace(0.0, 1.6 * truth, 40001)
    table = branch.flux(grid)
    longest = float(branch.flux(np.asarray(1.45 * truth))) / rail
    information = np.zeros((len(theta), len(theta)))
    steps = 1e-5 * theta
    pulses = []
    for k in range(widths):
        width = longest * (0.12 + 0.88 * k / (widths - 1))
        interval = next(h for h in INTERVALS if h * samples * 0.7 > 1.05 * width)
        time_axis = (np.arange(samples) - samples // 4 + 0.5) * interval
        on = (time_axis > 0) & (time_axis < width)
        current = np.where(on, np.interp(np.clip(time_axis, 0, width) * rail, table, grid), 0.0)
        pulses.append((interval, time_axis, np.where(on, rail, 0.0), current))
        i = current[on]
        slopes = (
            np.stack(
                [
                    -(curve(theta + e).still().flux(i) - curve(theta - e).still().flux(i))
                    / (2 * h)
                    / branch.slope(i)
                    for h, e in zip(steps, np.diag(steps), strict=True)
                ],
                axis=1,
            )
            * theta
        )
        information += slopes.T @ slopes * repeats / noise**2
    q = np.array(
        [(knee(theta + e) - knee(theta - e)) / (2 * h) for h, e in zip(steps, np.diag(steps), strict=True)]
    )
    q = q * theta
    bound = float(np.sqrt(q @ np.linalg.solve(information, q)))
    rng = np.random.default_rng([5, len(name)])
    errors, claimed = [], []
    for _ in range(trials):
        ramps = []
        for interval, time_axis, voltage, current in pulses:
            noisy = current + noise * rng.standard_normal((repeats, len(current)))
            mean = average(np.tile(voltage, (repeats, 1)), noisy, Setting(interval, float(time_axis[0])))
            ramps.append(make_ramp(mean, Calibration()))
        leg = pulse_leg(
            ramps, Calibration(), temperature_degC=25.0, resistance=0.0, resistance_uncertainty=0.0
        )  # type: ignore[arg-type]
        found = leg.knee(0.3)
        assert found is not None
        errors.append(found.value - truth)
        claimed.append(found.uncertainty)
    rms = float(np.sqrt(np.mean(np.square(errors))))
    return {
        "part": name, "trials": trials, "bound": bound / truth, "rms": rms / truth, "ratio": rms / bound,
        "claimed": float(np.mean(claimed)) / truth, "bias": float(np.mean(errors)) / truth,
    }  # fmt: skip


# ------------------------------------------------------------------ the whole


def summarise(benches: Sequence[dict[str, Any]]) -> dict[str, Any]:
    """Median and 95th percentile of the absolute error of Isat at 30 %, coverage at each place."""
    out: dict[str, Any] = {"benches": len(benches)}
    for name in ("30", "20", "10", "L0"):
        every = [row[name] for b in benches for row in b["rows"] if row[name] is not None]
        error = np.abs([e["error"] for e in every])
        entry = {
            "median": float(np.median(error)),
            "p95": float(np.percentile(error, 95)),
            "largest": float(error.max()),
        }
        for place in PLACES:
            here = [
                row[name]
                for b in benches
                for row in b["rows"]
                if row["place"] == place and row[name] is not None
            ]
            entry[f"coverage {place}"] = float(np.mean([e["held"] for e in here]))
        entry["missing"] = sum(row[name] is None for b in benches for row in b["rows"])
        out[name] = entry
    return out


def run(
    benches: int, bits: int | None, workers: int, *, start: int = 0, harsh: bool = False
) -> list[dict[str, Any]]:
    """Study ``benches`` benches, showing how it goes."""
    begin, done = time.monotonic(), []
    with ProcessPoolExecutor(workers) as pool:
        for result in pool.map(
            study_bench, range(start, start + benches), [bits] * benches, [harsh] * benches
        ):
            done.append(result)
            spent = time.monotonic() - begin
            left = spent / len(done) * (benches - len(done))
            print(f"\r{len(done)}/{benches} benches, {left:.0f} s left ", end="", file=sys.stderr, flush=True)
    print(file=sys.stderr)
    return done


def main() -> int:
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--benches", type=int, default=200)
    parser.add_argument("--eight", type=int, help="benches with 8 bits; as many as --benches when left out")
    parser.add_argument("--harsh", type=int, help="harsh benches; a quarter of --benches when left out")
    parser.add_argument("--trials", type=int, default=60, help="trials of each efficiency")
    parser.add_argument("--workers", type=int, default=os.cpu_count() or 1)
    parser.add_argument("--into", type=Path, default=ROOT / "build" / "accuracy")
    given = parser.parse_args()
    eight = given.eight if given.eight is not None else given.benches
    twelve = run(given.benches, 12, given.workers)
    result: dict[str, Any] = {"12 bit": summarise(twelve)}
    coarse = run(eight, 8, given.workers, start=10_000) if eight else []
    if coarse:
        result["8 bit"] = summarise(coarse)
    hard = given.harsh if given.harsh is not None else given.benches // 4
    harsh = run(hard, None, given.workers, start=20_000, harsh=True) if hard else []
    if harsh:
        result["harsh"] = summarise(harsh)
    if given.trials:
        with ProcessPoolExecutor(given.workers) as pool:
            result["efficiency"] = list(pool.map(efficiency, ("gapped", "powder"), [given.trials] * 2))
    bad = judge(result)
    write(given.into, {**result, "benches": twelve + coarse + harsh}, bad)
    print("\n".join(bad) if bad else "every bar is kept")
    print(f"the figures: {given.into / 'report.md'}")
    return 1 if bad else 0


def write(into: Path, result: dict[str, Any], bad: Sequence[str]) -> None:
    """What was found, as data and as a page."""
    into.mkdir(parents=True, exist_ok=True)
    (into / "accuracy.json").write_text(json.dumps(result, indent=1), encoding="utf-8")
    page, figure = draw_report(result, BARS, bad)
    (into / "report.md").write_text(page, encoding="utf-8")
    figure.savefig(into / FIGURE, dpi=120)


def judge(result: dict[str, Any]) -> list[str]:
    """Bars that are not kept, in words."""
    bad = []
    low, high = BARS.coverage
    for kind, (median, p95) in BARS.error.items():
        if kind not in result:
            continue
        entry, count = result[kind]["30"], result[kind]["benches"]
        if entry["median"] > median or entry["p95"] > p95:
            bad.append(f"{kind}: median {entry['median']:.3%}, 95th percentile {entry['p95']:.3%}")
        if entry["missing"]:
            bad.append(f"{kind}: {entry['missing']} legs without an Isat that was within reach")
        # With few benches chance alone moves the coverage: two binomial standard deviations on either side.
        slack = 2 * np.sqrt(0.95 * 0.05 / count) if count < 200 else 0.0
        for place in PLACES:
            if not low - slack <= entry[f"coverage {place}"] <= high + slack:
                bad.append(f"{kind}: coverage {entry[f'coverage {place}']:.1%} {place}")
    bad += [
        f"efficiency {e['part']}: {e['ratio']:.2f}"
        for e in result.get("efficiency", [])
        if e["ratio"] > BARS.efficiency
    ]
    return bad


if __name__ == "__main__":
    sys.exit(main())
