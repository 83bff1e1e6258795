"""Files found and read: benches and dialects beside the plan or shipped, bytes kept, any model located."""

from collections.abc import Callable
from pathlib import Path

import pytest
from pydantic import BaseModel, ConfigDict, Field

from runner.errors import InputError
from runner.plan import load_bench, load_model, load_plan, parse_bench, parse_plan
from runner.shipped import shipped_plans

Written = Callable[..., Path]


class Inner(BaseModel):
    model_config = ConfigDict(extra="forbid")
    send: str
    count: int = Field(default=1, ge=1)


class Outer(BaseModel):
    """Some model of another room: unions and nested lists, nothing of ours in it."""

    model_config = ConfigDict(extra="forbid")
    name: str
    messages: dict[str, Inner | str] = {}
    steps: list[Inner] = []


def test_any_model_is_located(tmp_path: Path) -> None:
    path = tmp_path / "dialect.yaml"
    path.write_text("nmae: x\nsteps:\n- send: a\n- {sned: b, count: 0}\n")
    with pytest.raises(InputError) as caught:
        load_model(path, Outer)
    assert [str(fault).removeprefix(f"{path}:") for fault in caught.value.faults] == [
        "1:1: the key 'name' is missing; add 'name: ...'",
        "1:1: nmae: unknown key 'nmae'; did you mean 'name'? (known here: name, messages, steps)",
        "4:3: steps[1]: the key 'send' is missing; add 'send: ...'",
        "4:4: steps[1].sned: unknown key 'sned'; did you mean 'send'? (known here: send, count)",
        "4:20: steps[1].count: 0 is too small; write at least 1",
    ]


def test_a_faulty_member_of_a_union_is_shown_at_its_place(tmp_path: Path) -> None:
    path = tmp_path / "dialect.yaml"
    path.write_text("name: x\nmessages:\n  ask: {send: a, cuont: 2}\n")
    with pytest.raises(InputError, match=r"dialect\.yaml:3:18: messages\.ask\.cuont: unknown key 'cuont'"):
        load_model(path, Outer)


def test_another_bench_may_stand_in(written: Written, tmp_path: Path) -> None:
    plan = written(plan={"bench: bench.yaml": "bench: nowhere.yaml"})
    other = tmp_path / "other.yaml"
    other.write_text((tmp_path / "bench.yaml").read_text().replace("A bench to break", "Another"))
    assert load_plan(plan, bench=other).bench.name == "Another"
    with pytest.raises(InputError, match="no such file; name the YAML file of a bench"):
        load_plan(plan, bench=tmp_path / "gone.yaml")


def test_a_plan_anywhere_finds_the_shipped_benches(written: Written) -> None:
    loaded = load_plan(written(plan={"bench: bench.yaml": "bench: benches/mock.yaml"}))
    assert loaded.bench_path == shipped_plans() / "benches" / "mock.yaml"


def test_bytes_are_kept_as_they_were_written(written: Written) -> None:
    plan = written()
    text = plan.read_bytes().replace(b"\n", b"\r\n") + "# \u00b5\n".encode()
    plan.write_bytes(text)
    loaded = load_plan(plan)
    assert loaded.plan_bytes == text
    assert parse_plan(loaded.plan_bytes, "record") == loaded.plan
    assert parse_bench(loaded.bench_bytes, "record") == loaded.bench


def test_a_recorded_bench_needs_no_dialects(base: dict[str, str]) -> None:
    text = base["bench.yaml"].replace("scpi_lcr.yaml", "gone.yaml")
    assert parse_bench(text.encode(), "record").instruments["lcr"].dialect == "gone.yaml"


@pytest.mark.parametrize("load", [load_plan, load_bench])
def test_a_file_that_is_not_there_is_said_so(load: Callable[[Path], object], tmp_path: Path) -> None:
    with pytest.raises(InputError, match="no such file"):
        load(tmp_path / "gone.yaml")


def test_faults_of_a_bench_that_is_no_yaml_come_with_those_of_the_plan(
    written: Written, tmp_path: Path
) -> None:
    plan = written(plan={"rail: 12 V": "rail: 12"})
    (tmp_path / "bench.yaml").write_text("name: [")
    with pytest.raises(InputError) as caught:
        load_plan(plan)
    assert len(caught.value.faults) == 2
    assert "12 has no unit" in caught.value.faults[0].what
    assert caught.value.faults[1].where == f"{tmp_path / 'bench.yaml'}:1:8"
