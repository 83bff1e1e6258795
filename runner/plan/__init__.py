"""Test plans, benches and captures files: YAML with units in, checked plain values in SI out.

Gives plans in points (`expand`), what a run will take (`forecast`) and what a simulated bench is made from
(`simulation_spec`). Never knows instruments, HDF5, or how a point is measured. All faults of a file come at once, as
one `InputError`, each located.
"""

from runner.plan.bench_file import Bench
from runner.plan.captures_file import CapturesFile
from runner.plan.demagnetise import demagnetising_widths
from runner.plan.forecast import Forecast, LimitForecast, forecast
from runner.plan.load import (
    LoadedBench,
    LoadedCaptures,
    LoadedPlan,
    load_bench,
    load_captures_file,
    load_model,
    load_plan,
    parse_bench,
    parse_captures,
    parse_plan,
)
from runner.plan.plan_file import Plan
from runner.plan.points import Leg, Point, Programme, expand
from runner.plan.schema import schemas
from runner.plan.simulation_file import simulation_spec

__all__ = [
    "Bench",
    "CapturesFile",
    "Forecast",
    "Leg",
    "LimitForecast",
    "LoadedBench",
    "LoadedCaptures",
    "LoadedPlan",
    "Plan",
    "Point",
    "Programme",
    "demagnetising_widths",
    "expand",
    "forecast",
    "load_bench",
    "load_captures_file",
    "load_model",
    "load_plan",
    "parse_bench",
    "parse_captures",
    "parse_plan",
    "schemas",
    "simulation_spec",
]
