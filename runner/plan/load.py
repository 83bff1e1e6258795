"""From files to a checked plan and bench: the only code of this room that touches the disk.

All that is wrong with both files is said at once: what a value may not be, then what values mean to each other.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, TypeVar

from pydantic import BaseModel

from runner.errors import Fault, InputError
from runner.plan.bench_file import Bench
from runner.plan.captures_file import CapturesFile
from runner.plan.faults import validate
from runner.plan.located import Document, read_bytes, read_document
from runner.plan.plan_file import Plan
from runner.shipped import shipped_plans

Model = TypeVar("Model", bound=BaseModel)


@dataclass(frozen=True, slots=True)
class LoadedBench:
    """A bench as read from its file."""

    bench: Bench
    bench_path: Path
    bench_bytes: bytes

    def dialect_path(self, role: str) -> Path:
        """The dialect file of a role: beside the bench file, or among the shipped ones."""
        return dialect_path(self.bench_path, self.bench.instruments[role].dialect)


@dataclass(frozen=True, slots=True)
class LoadedPlan:
    """A plan and its bench, each as read from its file and as it was written, byte by byte."""

    plan: Plan
    bench: Bench
    plan_path: Path
    bench_path: Path
    plan_bytes: bytes
    bench_bytes: bytes

    def dialect_path(self, role: str) -> Path:
        """The dialect file of a role: beside the bench file, or among the shipped ones."""
        return dialect_path(self.bench_path, self.bench.instruments[role].dialect)


@dataclass(frozen=True, slots=True)
class LoadedCaptures:
    """A captures file as read, and as it was written; waveforms stand relative to `captures_path`."""

    captures: CapturesFile
    captures_path: Path
    captures_bytes: bytes


def load_plan(path: Path, bench: Path | None = None) -> LoadedPlan:
    """Read a plan and its bench.

    Args:
        bench: used instead of the bench that the plan names.

    Raises:
        InputError: all the faults of both files and between them.
    """
    from runner.plan.checks import in_order, judge

    plan_bytes = read_bytes(path, kind="test plan")
    document = plan_document(plan_bytes, str(path))
    faults: list[Fault] = []
    bench_path, bench_bytes, bench_document = None, b"", None
    try:
        bench_path = bench if bench is not None else _named_bench(path, document)
        bench_bytes = read_bytes(bench_path, kind="bench")
        bench_document = read_document(bench_bytes, str(bench_path))
    except InputError as error:
        faults += error.faults
    plan_read, bench_read, found = judge(document, bench_document, bench_path)
    faults = in_order([*found, *faults])
    if faults or plan_read is None or bench_read is None or bench_path is None:
        raise InputError(faults)
    return LoadedPlan(plan_read, bench_read, path, bench_path, plan_bytes, bench_bytes)


def load_bench(path: Path) -> LoadedBench:
    """Read a bench file.

    Raises:
        InputError: all its faults.
    """
    from runner.plan.checks import judge

    data = read_bytes(path, kind="bench")
    _, bench, faults = judge(None, read_document(data, str(path)), path)
    if faults or bench is None:
        raise InputError(faults)
    return LoadedBench(bench, path, data)


def parse_plan(data: bytes, name: str) -> Plan:
    """A plan from its bytes, as a record keeps them; no other file is read.

    Raises:
        InputError: all its faults.
    """
    from runner.plan.checks import judge

    plan, _, faults = judge(plan_document(data, name), None, None)
    if faults or plan is None:
        raise InputError(faults)
    return plan


def parse_bench(data: bytes, name: str) -> Bench:
    """A bench from its bytes, as a record keeps them; dialects are not looked for.

    Raises:
        InputError: all its faults.
    """
    from runner.plan.checks import judge

    _, bench, faults = judge(None, read_document(data, name), None)
    if faults or bench is None:
        raise InputError(faults)
    return bench


def load_model(path: Path, model: type[Model]) -> Model:
    """A YAML file as any pydantic model, with located faults.

    Raises:
        InputError: all its faults.
    """
    return validate(read_document(read_bytes(path, kind=_kind_of(model)), str(path)), model)


def load_captures_file(path: Path) -> LoadedCaptures:
    """Read a captures file; the waveforms it names are looked for beside it.

    Raises:
        InputError: all its faults.
    """
    data = read_bytes(path, kind="captures file")
    return LoadedCaptures(_captures(read_document(data, str(path)), path.parent), path, data)


def parse_captures(data: bytes, name: str) -> CapturesFile:
    """A captures file from its bytes, as a record keeps them; the waveforms are not looked for.

    Raises:
        InputError: all its faults.
    """
    return _captures(read_document(data, name), None)


def plan_document(data: bytes, name: str) -> Document:
    """A plan's YAML in which one part under `part:` stands where several would stand under `parts:`."""
    document = read_document(data, name)
    written: dict[Any, Any] = document.value
    if "part" not in written:
        return document
    if "parts" in written:
        what = "'part' and 'parts' are both given; write one part under 'part:' or all of them under 'parts:'"
        raise InputError([document.fault_at_key(("part",), what)])
    rest = {key: value for key, value in written.items() if key != "part"}
    return document.renamed(("part",), ("parts", 0), {**rest, "parts": [written["part"]]})


def dialect_path(bench_path: Path, dialect: str) -> Path:
    """Where a bench's dialect stands: relative to the bench file, else among the shipped dialects."""
    beside = bench_path.parent / dialect
    if beside.is_file():
        return beside
    shipped = shipped_plans() / "dialects" / Path(dialect).name
    return shipped if shipped.is_file() else beside


def _named_bench(plan_path: Path, document: Document) -> Path:
    named = document.value.get("bench")
    if not isinstance(named, str) or not named.strip():
        raise InputError([])  # the model says what is wrong with it
    tried = (plan_path.parent / named, shipped_plans() / named)
    for candidate in tried:
        if candidate.exists():
            return candidate
    what = (
        f"no bench file {named!r} beside the plan or among the shipped ones; correct the name or give --bench"
    )
    raise InputError([document.fault(("bench",), what)])


def _captures(document: Document, folder: Path | None) -> CapturesFile:
    captures = validate(document, CapturesFile)
    missing: Sequence[Fault] = [
        document.fault(
            ("captures", index, "file"),
            f"no such file {capture.file!r} beside this one; correct the name or export it again",
        )
        for index, capture in enumerate(captures.captures)
        if folder is not None and not (folder / capture.file).is_file()
    ]
    if missing:
        raise InputError(missing)
    return captures


def _kind_of(model: type[BaseModel]) -> str:
    return model.__name__.lower()
