"""What a user gets wrong: one clear message each, exit 2, no traceback, and nothing is sent to an instrument."""

from pathlib import Path

import pytest
import yaml

import drivers
import runner.sweep.opening

PLANS = Path(__file__).resolve().parents[3] / "plans"
BROKEN = Path(__file__).resolve().parents[1] / "plan" / "broken"
CASES = yaml.safe_load((BROKEN / "cases.yaml").read_text(encoding="utf-8"))


@pytest.fixture(autouse=True)
def _untouched(monkeypatch):
    """Whoever opens an instrument or starts a mock bench in these tests has gone too far."""

    def too_far(*words, **more):
        raise AssertionError("wrong input reached the instruments")

    monkeypatch.setattr(runner.sweep.opening, "launch", too_far)
    monkeypatch.setattr(runner.sweep.opening, "open_session", too_far)
    monkeypatch.setattr(drivers, "open_session", too_far)


def write_broken(case, folder):
    for name in ("plan.yaml", "bench.yaml"):
        text = (BROKEN / name).read_text(encoding="utf-8")
        if name == case["change"]:
            for old, new in case["edits"]:
                assert text.count(old) == 1
                text = text.replace(old, new)
        (folder / name).write_text(text, encoding="utf-8")
    return folder / "plan.yaml"


@pytest.mark.parametrize("case", CASES, ids=lambda case: case["name"])
def test_a_broken_plan_or_bench_does_not_run(case, kneemap, tmp_path):
    plan = write_broken(case, tmp_path)
    status, out, err = kneemap("run", plan, "--into", tmp_path / "runs")
    assert status == 2
    assert case["says"] in err
    assert "Traceback" not in out + err
    assert not (tmp_path / "runs").exists()


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["check", "{}/absent.yaml"], ("absent.yaml", "no such")),
        (["run", "{}/absent.yaml"], ("absent.yaml", "no such")),
        (["check", "{}"], ("{}",)),
        (["probe", "{}/absent.yaml"], ("absent.yaml",)),
        (["mock", "{}/absent.yaml"], ("absent.yaml",)),
        (["mock", str(PLANS / "benches" / "template.yaml")], ("simulation", "mock bench")),
        (["resume", "{}"], ("{}", "run")),
        (["resume", "{}/absent"], ("absent", "run")),
        (["status", "{}"], ("{}", "run")),
        (["status", "{}/absent"], ("absent", "run folder")),
        (["extract", "{}"], ("{}", "run")),
        (["extract", "{}/absent"], ("absent",)),
        (["report", "{}"], ("{}", "run")),
        (["report", str(PLANS / "demo_night.yaml")], ("demo_night.yaml", "run")),
        (["ingest", "{}/absent.yaml"], ("absent.yaml",)),
        (["ingest", str(PLANS / "demo_night.yaml")], ("captures",)),
        (["check"], ("name a plan",)),
        (["measure"], ("measure",)),
    ],
    ids=lambda value: " ".join(value).replace(str(PLANS), "plans") if isinstance(value, list) else "",
)
def test_a_wrong_name_is_told_and_nothing_breaks(words, said, kneemap, tmp_path):
    status, out, err = kneemap(*[word.format(tmp_path) for word in words])
    assert status == 2, err
    for word in said:
        assert word.format(tmp_path) in err
    assert "Traceback" not in out + err


def test_a_plan_that_breaks_a_limit_does_not_run(kneemap, tmp_path):
    text = (
        (PLANS / "demo_night.yaml").read_text(encoding="utf-8").replace("mean_power: 5 W", "mean_power: 1 W")
    )
    (tmp_path / "plan.yaml").write_text(text, encoding="utf-8")
    for command in (["check"], ["run", "--into", str(tmp_path / "runs")]):
        status, out, err = kneemap(command[0], tmp_path / "plan.yaml", *command[1:])
        assert status == 2
        assert "limits.mean_power" in err
        assert "BROKEN" in out
    assert not (tmp_path / "runs").exists()
