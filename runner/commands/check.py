"""`kneemap check`: what a plan would do, before anything is touched."""

import json as json_module
import sys
from pathlib import Path
from typing import TYPE_CHECKING

from runner.errors import Fault, InputError

if TYPE_CHECKING:
    from rich.table import Table

    from runner.plan import Forecast, LimitForecast, LoadedPlan

# Of a long list of widths, the first and last few tell the story; --json has them all.
_SHOWN_WIDTHS = 8


def print_schema() -> None:
    """Print the JSON Schema of plan and bench files."""
    from runner.plan import schemas

    print(json_module.dumps(schemas(), indent=2))


def check_plan(path: Path, *, bench: Path | None, json: bool) -> int:
    """Print the forecast of the plan at ``path``; 0 when every limit is kept, else 2."""
    from runner.plan import forecast, load_plan

    loaded = load_plan(path, bench=bench)
    outlook = forecast(loaded.plan, loaded.bench)
    if json:
        print(json_module.dumps(outlook.as_mapping(), indent=2))
    else:
        print_forecast(loaded, outlook)
    refuse_broken_limits(path, outlook)
    return 0


def refuse_broken_limits(path: Path, outlook: "Forecast") -> None:
    """Raise `InputError` with every limit that the plan would break."""
    sys.stdout.flush()
    if outlook.broken:
        raise InputError([Fault(f"{path}: {limit.name}", _broken_text(limit)) for limit in outlook.broken])


def print_forecast(loaded: "LoadedPlan", outlook: "Forecast") -> None:
    """The forecast as a person reads it: what, how long, how much current and energy, which limits."""
    from runner.commands.progress import span
    from runner.commands.tables import console_for

    console = console_for(sys.stdout)
    times = outlook.times
    parts = ", ".join(part.label for part in loaded.plan.parts)
    console.print(f"{loaded.plan.title}: {parts}", markup=False, style="bold")
    console.print(f"bench     {loaded.bench.name} ({loaded.bench_path})", markup=False)
    console.print(f"points    {outlook.points} in {outlook.legs} legs, {outlook.captures} captures")
    console.print(
        f"time      {span(times.total)}: ramps {span(times.ramp)}, soaks {span(times.soak)}, points {span(times.points)}"
    )
    console.print(f"disk      {outlook.disk_bytes / 1e6:.3g} MB")
    console.print(
        f"energy    {outlook.bank_energy:.3g} J in the charged bank, {outlook.pulse_energy * 1e3:.3g} mJ by the "
        f"largest pulse, {outlook.part_energy * 1e3:.3g} mJ in the part; mean heating at most {outlook.mean_power:.3g} W"
    )
    if outlook.widths:
        console.print(_width_table(outlook))
    console.print(_limit_table(outlook))
    for note in outlook.notes:
        console.print(f"note      {note}", markup=False)


def _width_table(outlook: "Forecast") -> "Table":
    from runner.commands.tables import plain_table

    table = plain_table("Worst-case current of each width")
    for heading in (
        "part",
        "width / µs",
        "unsaturated / A",
        f"saturated to {outlook.saturated_share:.0%} of L / A",
        "energy / mJ",
        "",
    ):
        table.add_column(heading, justify="left" if heading in ("part", "") else "right")
    rows = outlook.widths
    for place, row in enumerate(rows):
        if len(rows) > 2 * _SHOWN_WIDTHS and _SHOWN_WIDTHS <= place < len(rows) - _SHOWN_WIDTHS:
            if place == _SHOWN_WIDTHS:
                table.add_row("…")
            continue
        table.add_row(
            row.part,
            f"{row.width * 1e6:.4g}",
            f"{row.linear_current:.3g}",
            f"{row.saturated_current:.3g}",
            f"{row.energy * 1e3:.3g}",
            "" if row.is_fired else "climb stops before",
        )
    return table


def _limit_table(outlook: "Forecast") -> "Table":
    from runner.commands.tables import plain_table

    table = plain_table("Limits")
    for heading in ("limit", "set to", "forecast", "", "what the forecast is"):
        table.add_column(heading, justify="right" if heading in ("set to", "forecast") else "left")
    for limit in outlook.limits:
        kept = "kept" if limit.is_kept else "[bold]BROKEN[/bold]"
        table.add_row(
            limit.name,
            _figure(limit.limit, limit.unit),
            _figure(limit.expected, limit.unit),
            kept,
            limit.text,
        )
    return table


def _figure(value: float, unit: str) -> str:
    from runner.commands.progress import span

    if unit == "s":
        return span(value)
    if unit == "degC":
        return f"{value:g} °C"
    if unit == "J" and value < 1:
        return f"{value * 1e3:.3g} mJ"
    return f"{value:.3g} {unit}"


def _broken_text(limit: "LimitForecast") -> str:
    return (
        f"the forecast is {_figure(limit.expected, limit.unit)} ({limit.text}) and the limit "
        f"{_figure(limit.limit, limit.unit)}; change the plan, or the limit if the part and the bench allow it"
    )
