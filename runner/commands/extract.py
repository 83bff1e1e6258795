"""`kneemap extract` and `kneemap report`: from a record to numbers, and from numbers to a page."""

import json as json_module
import sys
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from runner.errors import Fault, InputError


def extract_run(path: Path, *, json: bool) -> None:
    """Extract a run, keep the result beside its record, and print it."""
    result = extract_and_keep(path)
    if json:
        print(json_module.dumps(result, indent=2, ensure_ascii=False))
    else:
        print_result(result)
        print(f"\nResult: {record_folder(path) / 'result.json'}")


def report_run(path: Path) -> None:
    """Write the report of a run; extract first where that has not been done."""
    from runner.record import open_run
    from runner.report import write_report

    if open_run(path).result is None:
        extract_and_keep(path)
    print(f"Report: {write_report(record_folder(path))}")


def extract_and_keep(path: Path) -> dict[str, Any]:
    """Extract the run at ``path``, write the tables into its record and the result beside it; the result comes back."""
    from runner.extraction import extract
    from runner.record import open_run, write_extraction

    run = open_run(path)
    if len(run.points["point"]) == 0:
        raise InputError([Fault(str(path), "the run holds no points yet; 'kneemap resume' goes on with it")])
    extraction = extract(run)
    write_extraction(record_folder(path), extraction.tables, extraction.result, made_from=run.raw_sha256)
    return extraction.result


def record_folder(path: Path) -> Path:
    """The folder that holds a record, named by itself or by its record.h5."""
    return path if path.is_dir() else path.parent


def print_result(result: Mapping[str, Any]) -> None:
    """The result in a few lines: one table a part and method, then what is doubtful."""
    from runner.commands.tables import console_for, isat_table

    console = console_for(sys.stdout)
    for part in result["parts"]:
        for method, numbers in part["methods"].items():
            console.print(isat_table(part["label"], method, numbers, coverage=result["coverage"]))
            console.print()
        for sentence in part.get("sentences", []):
            console.print(f"  {sentence}", markup=False)
        for line in flag_lines(part.get("flags", [])):
            console.print(f"  {line}", markup=False)


def flag_lines(flags: Sequence[Mapping[str, Any]]) -> list[str]:
    """Flags of a part, points with the same flag and sentence told in one line."""
    points: dict[tuple[str, str], list[int]] = {}
    for flag in flags:
        points.setdefault((flag["flag"], flag["text"]), [])
        if flag.get("point", -1) not in (None, -1):  # a flag may belong to a leg and to no point of it
            points[flag["flag"], flag["text"]].append(int(flag["point"]))
    return [
        f"{name}: {text}" + (f" (points {_ranges(numbers)})" if numbers else "")
        for (name, text), numbers in points.items()
    ]


def _ranges(numbers: Sequence[int]) -> str:
    """Numbers with runs drawn together: ``3, 7–9``."""
    runs: list[list[int]] = []
    for number in sorted(set(numbers)):
        if runs and number == runs[-1][1] + 1:
            runs[-1][1] = number
        else:
            runs.append([number, number])
    return ", ".join(str(first) if first == last else f"{first}–{last}" for first, last in runs)
