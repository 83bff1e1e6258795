"""The files a user copies from: each one loads, keeps its own limits, and is accepted by its own schema."""

import json
import re
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

import pytest
import yaml

from runner.plan import expand, forecast, load_bench, load_plan, schemas
from runner.plan.quantity import JSON_PATTERN
from runner.shipped import shipped_plans

PLANS = sorted(path.name for path in shipped_plans().glob("*.yaml"))
BENCHES = sorted(path.name for path in (shipped_plans() / "benches").glob("*.yaml"))


def test_the_plans_and_benches_of_the_design_are_there() -> None:
    assert {"demo_night.yaml", "ten_minute_check.yaml", "derating_study.yaml", "bias_only.yaml"} <= set(PLANS)
    assert {"mock.yaml", "mock_odd.yaml", "template.yaml"} <= set(BENCHES)


@pytest.mark.parametrize("name", PLANS)
def test_a_shipped_plan_loads_and_keeps_its_limits(name: str) -> None:
    loaded = load_plan(shipped_plans() / name)
    found = forecast(loaded.plan, loaded.bench)
    assert not found.broken
    assert found.points == len(expand(loaded.plan).points) > 0


@pytest.mark.parametrize("name", BENCHES)
def test_a_shipped_bench_loads(name: str) -> None:
    assert len(load_bench(shipped_plans() / "benches" / name).bench.instruments) == 9


@pytest.mark.parametrize("name", PLANS)
def test_the_odd_bench_serves_the_same_plans(name: str) -> None:
    load_plan(shipped_plans() / name, bench=shipped_plans() / "benches" / "mock_odd.yaml")


def test_the_demo_is_a_night_of_seven_temperatures_and_both_methods() -> None:
    loaded = load_plan(shipped_plans() / "demo_night.yaml")
    found = forecast(loaded.plan, loaded.bench)
    assert 8 * 3600 <= found.times.total <= 14 * 3600
    assert found.legs == 7
    assert min(loaded.plan.temperatures.at_degC) == -40.0
    assert max(loaded.plan.temperatures.at_degC) == 125.0
    assert {point.method for point in expand(loaded.plan).points} == {"pulse", "bias"}


def test_the_ten_minute_check_takes_about_ten_minutes() -> None:
    loaded = load_plan(shipped_plans() / "ten_minute_check.yaml")
    assert 6 * 60 <= forecast(loaded.plan, loaded.bench).times.total <= 14 * 60


@pytest.mark.parametrize(
    ("kind", "path"),
    [("plan", name) for name in PLANS] + [("bench", f"benches/{name}") for name in BENCHES],
)
def test_a_shipped_file_is_accepted_by_the_schema(kind: str, path: str) -> None:
    schema = schemas()[kind]
    document = json.loads(
        json.dumps(yaml.safe_load((shipped_plans() / path).read_text("utf-8")), default=str)
    )
    assert list(_violations(document, schema, schema, "")) == []


@pytest.mark.parametrize(
    ("change", "found"),
    [
        (lambda d: d["pulse"].update(rail=12), "/pulse/rail: 12 is no string"),
        (lambda d: d["pulse"].update(repeets=8), "/pulse: unknown 'repeets'"),
        (lambda d: d["pulse"].pop("rail"), "/pulse: 'rail' is missing"),
        (lambda d: d.pop("part"), ": fits 0 of the alternatives"),
        (lambda d: d["limits"].update(current="18"), "/limits/current: '18' does not match"),
        (lambda d: d["temperatures"].update(order="random"), "/temperatures/order: 'random' is not among"),
    ],
)
def test_the_schema_refuses_what_the_loader_refuses(change: Any, found: str) -> None:
    schema = schemas()["plan"]
    document = yaml.safe_load((shipped_plans() / "demo_night.yaml").read_text("utf-8"))
    change(document)
    assert any(violation.startswith(found) for violation in _violations(document, schema, schema, ""))


def test_every_quantity_tells_an_editor_what_to_write() -> None:
    for schema in schemas().values():
        quantities = [node for node in _nodes(schema) if node.get("pattern") == JSON_PATTERN]
        assert len(quantities) > 10
        for node in quantities:
            assert node["description"]
            assert all(re.fullmatch(JSON_PATTERN, example) for example in node["examples"])


def _nodes(node: object) -> Iterator[Mapping[str, Any]]:
    if isinstance(node, dict):
        yield node
    for child in node.values() if isinstance(node, dict) else node if isinstance(node, list) else ():
        yield from _nodes(child)


def _violations(value: Any, schema: Mapping[str, Any], root: Mapping[str, Any], at: str) -> Iterator[str]:
    """What of ``value`` the schema does not allow: the keywords that our schemas use (JSON Schema 2020-12, core)."""
    known = {
        "$ref", "$defs", "$schema", "title", "description", "default", "examples", "type", "properties", "required",
        "additionalProperties", "propertyNames", "items", "prefixItems", "minItems", "maxItems", "minLength", "minimum",
        "maximum", "pattern", "enum", "const", "anyOf", "oneOf", "format", "minProperties", "exclusiveMinimum",
    }  # fmt: skip
    assert set(schema) <= known, f"this check does not know {set(schema) - known}"
    if "$ref" in schema:
        yield from _violations(value, root["$defs"][schema["$ref"].removeprefix("#/$defs/")], root, at)
    for word in ("anyOf", "oneOf"):
        if word in schema:
            fits = sum(not list(_violations(value, option, root, at)) for option in schema[word])
            options = [option for option in schema[word] if option != {"type": "null"}]
            if fits == 0 and len(options) == 1:
                yield from _violations(value, options[0], root, at)
            elif fits == 0 or (word == "oneOf" and fits != 1):
                yield f"{at}: fits {fits} of the alternatives"
    names = {"string": str, "integer": int, "number": (int, float), "boolean": bool, "array": list, "object": dict,
             "null": type(None)}  # fmt: skip
    wanted = [schema["type"]] if isinstance(schema.get("type"), str) else schema.get("type", [])
    if wanted and not any(
        isinstance(value, names[w]) and (w == "boolean" or not isinstance(value, bool)) for w in wanted
    ):
        yield f"{at}: {value!r} is no {' or '.join(wanted)}"
        return
    if "enum" in schema and value not in schema["enum"]:
        yield f"{at}: {value!r} is not among {schema['enum']}"
    if "const" in schema and value != schema["const"]:
        yield f"{at}: {value!r} is not {schema['const']!r}"
    if isinstance(value, str) and not re.search(schema.get("pattern", ""), value):
        yield f"{at}: {value!r} does not match {schema['pattern']!r}"
    if isinstance(value, int | float) and not schema.get("minimum", value) <= value <= schema.get(
        "maximum", value
    ):
        yield f"{at}: {value!r} is out of bounds"
    if isinstance(value, list):
        if not schema.get("minItems", 0) <= len(value) <= schema.get("maxItems", len(value)):
            yield f"{at}: {len(value)} items"
        for index, item in enumerate(value):
            prefix = schema.get("prefixItems", [])
            inner = prefix[index] if index < len(prefix) else schema.get("items", {})
            yield from _violations(item, inner if isinstance(inner, dict) else {}, root, f"{at}/{index}")
    if isinstance(value, dict):
        yield from _of_mapping(value, schema, root, at)


def _of_mapping(
    value: Mapping[str, Any], schema: Mapping[str, Any], root: Mapping[str, Any], at: str
) -> Iterator[str]:
    for name in schema.get("required", []):
        if name not in value:
            yield f"{at}: '{name}' is missing"
    extra = schema.get("additionalProperties", True)
    for name, item in value.items():
        if name in schema.get("properties", {}):
            yield from _violations(item, schema["properties"][name], root, f"{at}/{name}")
        elif extra is False:
            yield f"{at}: unknown '{name}'"
        elif isinstance(extra, dict):
            yield from _violations(item, extra, root, f"{at}/{name}")


def test_nothing_shipped_is_left_unread() -> None:
    """Every YAML file under plans/ is a plan, a bench or a dialect."""
    folders = {path.parent.name for path in Path(shipped_plans()).rglob("*.yaml")}
    assert folders <= {shipped_plans().name, "benches", "dialects"}
