"""Reads plan and bench together: what each may not be by itself, then what values mean to each other.

A check is a function whose argument names are the sections it needs: `limits` is `plan.limits`, `chamber` is the bench's
chamber, and so on. It is asked only when all of them could be read, so that one wrong value hides no fault elsewhere.
A section that may be left out and is, comes as None. The checks stand in `check_plan.py`, `check_bench.py` and
`check_together.py`.
"""

import inspect
import re
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Annotated, Any, TypeVar

from pydantic import BaseModel, TypeAdapter, ValidationError

from runner.errors import Fault
from runner.plan.bench_file import ROLES, Bench, Instruments
from runner.plan.check_bench import BENCH_CHECKS
from runner.plan.check_plan import PLAN_CHECKS
from runner.plan.check_together import JOINT_CHECKS
from runner.plan.faults import faults_of
from runner.plan.finding import Check
from runner.plan.located import Document
from runner.plan.plan_file import Plan, number_parts

Model = TypeVar("Model", bound=BaseModel)
Sections = Mapping[str, Any]


def judge(
    plan: Document | None, bench: Document | None, bench_path: Path | None
) -> tuple[Plan | None, Bench | None, list[Fault]]:
    """Plan and bench as models (None where that failed or none was given), and all that is wrong with them.

    Args:
        bench_path: where the bench stands, to look for its dialects beside it; None to leave dialects alone.
    """
    plan_read, plan_sections, plan_faults = _read(plan, Plan)
    bench_read, bench_sections, bench_faults = _read(bench, Bench)
    sections = plan_sections | bench_sections | {"bench_path": bench_path}
    documents = {"plan": plan, "bench": bench}
    faults = {"plan": plan_faults, "bench": bench_faults}
    checks: list[Check] = []
    checks += PLAN_CHECKS if plan is not None else ()
    checks += BENCH_CHECKS if bench is not None else ()
    checks += JOINT_CHECKS if plan is not None and bench is not None else ()
    for finding in (finding for check in checks for finding in _asked(check, sections)):
        document = documents[finding.file]
        if document is not None:
            faults[finding.file].append(document.fault(finding.keys, finding.what))
    return plan_read, bench_read, [*in_order(faults["plan"]), *in_order(faults["bench"])]


def _asked(check: Check, sections: Sections) -> Iterable[Any]:
    needed = inspect.signature(check).parameters
    if any(name not in sections for name in needed):
        return ()
    return check(**{name: sections[name] for name in needed})


def _read(document: Document | None, model: type[Model]) -> tuple[Model | None, dict[str, Any], list[Fault]]:
    """The model, its sections by name, and its faults; of a faulty file the sections that could be read."""
    if document is None:
        return None, {}, []
    try:
        read = model.model_validate(document.value)
    except ValidationError as error:
        return None, _readable(document, model), faults_of(error, document, model)
    return read, _sections_of({name: getattr(read, name) for name in model.model_fields}), []


def _readable(document: Document, model: type[BaseModel]) -> dict[str, Any]:
    found = {}
    for name, field in model.model_fields.items():
        key = field.alias or name
        if key not in document.value:
            if not field.is_required():
                found[name] = field.get_default(call_default_factory=True, validated_data={})
            continue
        if name == "instruments" and isinstance(document.value[key], dict):
            found |= _readable_roles(document.value[key])
            continue
        annotation: Any = Annotated[field.annotation, *field.metadata, None]  # None: may stand alone
        adapter: TypeAdapter[Any] = TypeAdapter(annotation)
        try:
            found[name] = adapter.validate_python(_numbered(name, document.value[key]))
        except ValidationError:
            continue
    return _sections_of(found)


def _readable_roles(written: Mapping[Any, Any]) -> dict[str, Any]:
    """The instruments that could be read, by role; a role that is not written is None."""
    found: dict[str, Any] = {}
    for role in ROLES:
        try:
            found[role] = (
                getattr(Instruments.model_validate({role: written[role]}), role) if role in written else None
            )
        except ValidationError:
            continue
    return found


def _numbered(name: str, written: Any) -> Any:
    return number_parts(written) if name == "parts" else written


def _sections_of(found: dict[str, Any]) -> dict[str, Any]:
    """With the instruments of a bench spread out by role."""
    if "instruments" in found:
        found |= {role: found["instruments"].get(role) for role in ROLES}
    return found


def in_order(faults: list[Fault]) -> list[Fault]:
    """In the order in which they stand in their files, those of the first file first, each once."""
    files = list(dict.fromkeys(_place(fault)[0] for fault in faults))
    return sorted(
        dict.fromkeys(faults), key=lambda fault: (files.index(_place(fault)[0]), *_place(fault)[1:])
    )


_WHERE = re.compile(r"(?P<file>.*?):(?P<line>\d+):(?P<column>\d+)(: .*)?", re.DOTALL)


def _place(fault: Fault) -> tuple[str, int, int]:
    match = _WHERE.fullmatch(fault.where)
    return (match["file"], int(match["line"]), int(match["column"])) if match else (fault.where, 0, 0)
