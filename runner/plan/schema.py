"""JSON Schema of the files users write, for editors that complete and check while one types."""

from typing import Any

from runner.plan.bench_file import Bench
from runner.plan.captures_file import CapturesFile
from runner.plan.plan_file import Part, Plan

DIALECT = "https://json-schema.org/draft/2020-12/schema"


def schemas() -> dict[str, dict[str, Any]]:
    """A JSON Schema (draft 2020-12) each of `plan`, `bench` and `captures`."""
    plan = _schema(Plan, "Test plan")
    # One part may stand under 'part:' instead of a list under 'parts:'.
    part = Part.model_json_schema(ref_template="#/$defs/{model}")
    plan["$defs"]["Part"] = {key: value for key, value in part.items() if key != "$defs"}
    plan["properties"]["part"] = {"$ref": "#/$defs/Part", "description": "The one part, instead of 'parts'."}
    plan["required"] = [key for key in plan["required"] if key != "parts"]
    plan["oneOf"] = [{"required": ["part"]}, {"required": ["parts"]}]
    return {
        "plan": plan,
        "bench": _schema(Bench, "Bench"),
        "captures": _schema(CapturesFile, "Captures file"),
    }


def _schema(model: Any, title: str) -> dict[str, Any]:
    schema: dict[str, Any] = model.model_json_schema(mode="validation")
    return {"$schema": DIALECT, **schema, "title": title}
