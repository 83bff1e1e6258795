"""The accuracy study as a page: tables and a figure out of what the study found. Pure: plain data in, text and figure out.

Nothing is judged here. Bars, and those that are broken, come from the study; the page puts the figures beside them.
"""

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from math import sqrt
from typing import Any

import numpy as np
from matplotlib.figure import Figure

FIGURE = "accuracy.png"  # the page expects its figure under this name beside it
PLACES = ("cold", "room", "hot")
QUANTITIES = {"30": "Isat at 30 %", "20": "Isat at 20 %", "10": "Isat at 10 %", "L0": "L_0"}
JUDGED = "30"
WORST = 10
_SAMPLES = ("12 bit", "8 bit", "harsh")  # in the order in which the study lists their benches
_COLOURS = {"12 bit": "#1f5fa8", "8 bit": "#c2571a", "harsh": "#777777"}
_SMALL_ERROR = 1e-5  # what is smaller is shown so, at the foot of a logarithmic axis


@dataclass(frozen=True, slots=True)
class Bars:
    """What the study asks for.

    Attributes:
        error: of each sample, the largest median and the largest 95th percentile of the relative error of Isat at 30 %.
        coverage: lowest and highest share of intervals that hold the truth, in a sample that is large enough.
        claimed: the share that the intervals claim.
        efficiency: the largest ratio of the error to its bound.
        factor: expanded over standard uncertainty.
    """

    error: Mapping[str, tuple[float, float]]
    coverage: tuple[float, float]
    claimed: float
    efficiency: float
    factor: float


def draw_report(result: Mapping[str, Any], bars: Bars, broken: Sequence[str]) -> tuple[str, Figure]:
    """The page as Markdown, and the figure that it shows.

    Args:
        result: what the study writes as JSON: a summary of each sample, ``efficiency`` and the single ``benches``.
        broken: the bars that are not kept, in words; empty if all are.
    """
    samples = split_samples(result)
    blocks = [
        "# How good the numbers are",
        _opening(result, bars, broken),
        "## Bars",
        _bars_table(result, bars),
        "## Errors",
        "Absolute relative error against the bench's own truth, all temperatures together.",
        _errors_table(result, samples),
        "## Coverage",
        f"Share of intervals that hold the truth; they claim {bars.claimed:.0%}. Behind the sign stands the standard "
        "deviation that chance alone gives at that claim, with so many intervals. The three temperatures of a bench share "
        "its shunt and its gains, so they are no independent trials.",
        _coverage_table(result, samples, bars),
        f"![Errors over expanded uncertainty by temperature, and errors by law]({FIGURE})",
        "## By law",
        "Isat at 30 %. *Foreign* laws (erf, hyperbola, two_parts, stretched) are in nobody's dictionary.",
        _laws_table({name: benches for name, benches in samples.items() if name in bars.error}, bars),
    ]
    if "harsh" in samples:
        blocks += [
            "## Harsh benches",
            "Set up as nobody should: shunts of L/R up to half the longest pulse, few and short pulses, noise, a part that "
            "warms. No bar is set; the question is whether intervals still tell the truth.",
            _laws_table({"harsh": samples["harsh"]}, bars),
        ]
    blocks += [
        f"## The {WORST} benches with the largest errors",
        "Of those with a bar; the place with the largest error of Isat at 30 % stands for the bench. U is the expanded "
        "uncertainty; misfit is the mean square of the residuals over the noise that was seen, 1 where noise is all.",
        _worst_table(samples, bars),
    ]
    if result.get("efficiency"):
        blocks += ["## Efficiency", _EFFICIENCY, _efficiency_table(result["efficiency"], bars)]
    return "\n\n".join(blocks) + "\n", draw_figure(samples, bars)


def split_samples(result: Mapping[str, Any]) -> dict[str, list[dict[str, Any]]]:
    """The single benches of each sample, by the order and the counts in which the study lists them."""
    left, samples = list(result["benches"]), {}
    for name in _SAMPLES:
        if name in result:
            count = result[name]["benches"]
            samples[name], left = left[:count], left[count:]
    if left or any(len(benches) != result[name]["benches"] for name, benches in samples.items()):
        raise ValueError("the benches listed are not as many as the summaries say")
    return samples


# ------------------------------------------------------------------ tables

_EFFICIENCY = """\
Root-mean-square error of Isat at 30 % on ideal captures (white current noise and nothing else) over the Cramér-Rao bound of
the true law with its parameters θ unknown. The bound is sqrt(q'·F⁻¹·q) with F = Σ (∂i/∂θ)(∂i/∂θ)'/σ² over all samples of
all pulses, ∂i/∂θ = −(∂λ/∂θ)/L_d at constant flux linkage, q = ∂Isat/∂θ, and σ the noise of one sample over the root of
the repeats. The fit does not know which law it meets, nor offsets, nor when a pulse began; what that costs is its own
loss. *Claimed* is the mean standard uncertainty that the fit states."""


def _table(head: Sequence[str], rows: Sequence[Sequence[str]]) -> str:
    """A Markdown table; the first column is text, the others are figures."""
    lines = [head, ["---"] + ["---:"] * (len(head) - 1), *rows]
    return "\n".join("| " + " | ".join(line) + " |" for line in lines)


def _opening(result: Mapping[str, Any], bars: Bars, broken: Sequence[str]) -> str:
    words = {"12 bit": "of 12 bit", "8 bit": "of 8 bit", "harsh": "harsh"}
    counts = ", ".join(f"{result[name]['benches']} {words[name]}" for name in _SAMPLES if name in result)
    verdict = "**Every bar is kept.**"
    if broken:
        verdict = "**Not kept:**\n\n" + "\n".join(f"- {one}" for one in broken)
    return f"Benches drawn at random, extracted and compared with their own truth: {counts}.\n\n{verdict}"


def _bars_table(result: Mapping[str, Any], bars: Bars) -> str:
    rows = []
    for name, limits in bars.error.items():
        if name not in result:
            continue
        entry = result[name][JUDGED]
        for figure, key, limit in zip(("median", "95th percentile"), ("median", "p95"), limits, strict=True):
            rows.append((f"{name}: Isat at 30 %, {figure}", f"{entry[key]:.3%}", f"at most {limit:.1%}"))
        low, high = bars.coverage
        for place in PLACES:
            share = f"{entry[f'coverage {place}']:.1%}"
            rows.append((f"{name}: coverage, {place}", share, f"{low:.0%} to {high:.0%}"))
        rows.append((f"{name}: legs without an Isat that was within reach", str(entry["missing"]), "0"))
    for one in result.get("efficiency", ()):
        rows.append((f"efficiency, {one['part']}", f"{one['ratio']:.2f}", f"at most {bars.efficiency:g}"))
    note = "In a sample of less than 200 benches the study allows for chance in the coverage."
    return _table(("figure", "found", "bar"), rows) + "\n\n" + note


def _errors_table(result: Mapping[str, Any], samples: Mapping[str, Any]) -> str:
    rows = []
    for name in samples:
        for quantity, words in QUANTITIES.items():
            entry = result[name][quantity]
            figures = [f"{entry[key]:.3%}" for key in ("median", "p95", "largest")]
            rows.append((name, words, *figures, str(entry["missing"])))
    return _table(("sample", "quantity", "median", "95th percentile", "largest", "not found"), rows)


def _coverage_table(result: Mapping[str, Any], samples: Mapping[str, Any], bars: Bars) -> str:
    rows = []
    for name, benches in samples.items():
        for quantity, words in QUANTITIES.items():
            shares = []
            for place in PLACES:
                count = sum(1 for _ in entries(benches, quantity, place=place))
                share = result[name][quantity][f"coverage {place}"]
                shares.append(f"{share:.1%} ± {binomial_deviation(bars.claimed, count):.1%}")
            rows.append((name, words, *shares))
    return _table(("sample", "quantity", *PLACES), rows)


def _laws_table(samples: Mapping[str, Sequence[dict[str, Any]]], bars: Bars) -> str:
    rows = []
    for name, benches in samples.items():
        for law in sorted({bench["law"] for bench in benches}):
            those = [bench for bench in benches if bench["law"] == law]
            rows.append((f"{name}: {law}", str(len(those)), *_figures(those, bars)))
        rows.append((f"{name}: all", str(len(benches)), *_figures(benches, bars)))
    return _table(
        ("sample: law", "benches", "median", "95th percentile", "largest", "coverage", "median U"), rows
    )


def _figures(benches: Sequence[dict[str, Any]], bars: Bars) -> tuple[str, ...]:
    found = [entry for _, entry in entries(benches, JUDGED)]
    if not found:
        return ("—",) * 5
    error = np.abs([entry["error"] for entry in found])
    expanded = bars.factor * float(np.median([entry["u"] for entry in found]))
    held = float(np.mean([entry["held"] for entry in found]))
    return (
        f"{np.median(error):.3%}",
        f"{np.percentile(error, 95):.3%}",
        f"{error.max():.3%}",
        # The temperatures of a bench hold or miss together, mostly: counted as one trial.
        f"{held:.1%} ± {binomial_deviation(bars.claimed, len(benches)):.1%}",
        f"{expanded:.3%}",
    )


def _worst_table(samples: Mapping[str, Sequence[dict[str, Any]]], bars: Bars) -> str:
    worst = []
    for name, benches in samples.items():
        if name not in bars.error:
            continue
        for bench in benches:
            rows = [row for row in bench["rows"] if row[JUDGED] is not None]
            if rows:
                row = max(rows, key=lambda one: abs(one[JUDGED]["error"]))
                worst.append((abs(row[JUDGED]["error"]), name, bench, row))
    worst.sort(key=lambda one: one[0], reverse=True)
    rows = []
    for _, name, bench, row in worst[:WORST]:
        entry = row[JUDGED]
        rows.append(
            (
                f"{bench['seed']}, {name}",
                bench["law"],
                row["place"],
                f"{entry['error']:+.3%}",
                f"{bars.factor * entry['u']:.3%}",
                f"{entry['error'] / (bars.factor * entry['u']):+.2f}",
                f"{bench['longest'] * 1e6:.1f} us",
                f"{bench['shunt_time'] * 1e6:.2f} us",
                f"{bench['rail']:.1f} V",
                row["fit"],
                f"{row['misfit']:.2f}",
            )
        )
    return _table(
        ("seed", "law", "place", "error", "U", "error/U", "longest pulse", "shunt L/R", "rail", "fit began with", "misfit"),
        rows,
    )  # fmt: skip


def _efficiency_table(found: Sequence[Mapping[str, Any]], bars: Bars) -> str:
    rows = []
    for one in found:
        # The spread of a root mean square of n normal errors is 1/sqrt(2 n) of it.
        chance = one["ratio"] / sqrt(2 * one["trials"])
        figures = [f"{one[key]:.4%}" for key in ("bound", "rms", "claimed", "bias")]
        rows.append((one["part"], str(one["trials"]), *figures, f"{one['ratio']:.2f} ± {chance:.2f}"))
    return _table(("part", "trials", "bound", "error", "claimed", "mean error", "error over bound"), rows)


def entries(
    benches: Sequence[dict[str, Any]], quantity: str, *, place: str | None = None
) -> Iterator[tuple[dict[str, Any], dict[str, Any]]]:
    """Bench and entry of a quantity wherever it was found, at one place or at all of them."""
    for bench in benches:
        for row in bench["rows"]:
            if row[quantity] is not None and place in (None, row["place"]):
                yield bench, row[quantity]


def binomial_deviation(share: float, count: int) -> float:
    """Standard deviation of an observed share of ``count`` independent trials; NaN of none."""
    return sqrt(share * (1 - share) / count) if count else float("nan")


# ------------------------------------------------------------------ the figure


def draw_figure(samples: Mapping[str, Sequence[dict[str, Any]]], bars: Bars) -> Figure:
    """Above: error over expanded uncertainty at each temperature; below: absolute error by law."""
    figure = Figure(figsize=(9.0, 8.5), layout="constrained")
    above, below = figure.subplots(2, 1)
    above.axhspan(-1.0, 1.0, color="#e4efe4", zorder=0)
    above.axhline(0.0, color="black", linewidth=0.5)
    _strips(
        above,
        samples,
        PLACES,
        lambda place, benches: [
            entry["error"] / (bars.factor * entry["u"])
            for _, entry in entries(benches, JUDGED, place=place)
        ],
    )  # fmt: skip
    # A single harsh bench that is off by ten times its interval must be seen, and not squeeze the others together.
    above.set_yscale("symlog", linthresh=2.0)
    above.set_yticks([-20, -10, -5, -2, -1, 0, 1, 2, 5, 10, 20])
    above.yaxis.set_major_formatter("{x:g}")
    above.set_ylabel("error of Isat at 30 % / expanded uncertainty")
    above.set_title(f"Inside the band the interval holds the truth; {bars.claimed:.0%} should")
    laws = sorted({bench["law"] for benches in samples.values() for bench in benches})
    _strips(
        below,
        samples,
        laws,
        lambda law, benches: [
            max(abs(entry["error"]), _SMALL_ERROR) * 100
            for bench, entry in entries(benches, JUDGED)
            if bench["law"] == law
        ],
    )
    below.set_yscale("log")
    below.set_ylabel("absolute error of Isat at 30 % [%]")
    below.set_title("By law; a bar is a median, dashes are what the 95th percentile of a sample may be")
    for name, (_, p95) in bars.error.items():
        if name in samples:
            below.axhline(100 * p95, color=_COLOURS[name], linestyle="--", linewidth=1.0)
    handles, names = above.get_legend_handles_labels()
    figure.legend(handles, names, loc="outside upper right", ncols=len(names), fontsize="small")
    return figure


def _strips(
    axes: Any,
    samples: Mapping[str, Sequence[dict[str, Any]]],
    groups: Sequence[str],
    values: Callable[[str, Sequence[dict[str, Any]]], list[float]],
) -> None:
    """One strip of dots for each group and sample, a bar at its median."""
    rng = np.random.default_rng(0)  # only spreads dots sideways
    width = 0.8 / len(samples)
    for k, (name, benches) in enumerate(samples.items()):
        is_named = False
        for g, group in enumerate(groups):
            found = np.array(values(group, benches))
            if not found.size:
                continue
            middle = g + (k - (len(samples) - 1) / 2) * width
            across = middle + rng.uniform(-0.3, 0.3, found.size) * width
            label = None if is_named else name
            axes.plot(across, found, ".", color=_COLOURS[name], alpha=0.5, markersize=4, label=label)
            axes.plot([middle - 0.4 * width, middle + 0.4 * width], [np.median(found)] * 2, color="black")
            is_named = True
    axes.set_xticks(range(len(groups)), groups)
