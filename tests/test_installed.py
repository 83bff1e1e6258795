"""The wheel, installed into an environment of its own, works from outside the checkout."""

import json
import os
import subprocess
import sys
import zipfile
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent


@pytest.fixture(scope="module")
def wheel(tmp_path_factory):
    out = tmp_path_factory.mktemp("wheel")
    subprocess.run(
        [
            sys.executable,
            "-m",
            "pip",
            "wheel",
            "--no-deps",
            "--quiet",
            "--disable-pip-version-check",
            "-w",
            out,
            ROOT,
        ],
        check=True,
        capture_output=True,
        text=True,
    )
    (built,) = out.glob("kneemap-*.whl")
    return built


@pytest.fixture(scope="module")
def installed(wheel, tmp_path_factory):
    """A fresh environment that holds the wheel alone; its dependencies are those of this environment, read only."""
    home = tmp_path_factory.mktemp("installed")
    subprocess.run([sys.executable, "-m", "venv", home / "env"], check=True, capture_output=True)
    (site,) = (home / "env").glob("lib/python*/site-packages")
    subprocess.run(
        [
            home / "env/bin/python",
            "-m",
            "pip",
            "install",
            "--no-deps",
            "--quiet",
            "--disable-pip-version-check",
            wheel,
        ],
        check=True,
        capture_output=True,
        text=True,
    )
    # Downloading numpy and scipy again would only test the network. The checkout must not come along, so the path file
    # names the folder of third-party packages, and the editable install's own path file in it is not followed.
    third_party = next(path for path in sys.path if path.endswith("site-packages"))
    (site / "third_party.pth").write_text(third_party + "\n")
    return home / "env/bin/kneemap"


def test_the_wheel_carries_the_plans_and_templates(wheel):
    names = set(zipfile.ZipFile(wheel).namelist())
    assert "runner/shipped_plans/demo_night.yaml" in names
    assert any(name.startswith("runner/shipped_plans/dialects/") for name in names)
    assert any(name.endswith((".html.j2", ".html")) for name in names if name.startswith("runner/report/"))
    assert not any(name.startswith("tests/") for name in names)


def test_the_installed_command_checks_a_shipped_plan_from_outside(installed, tmp_path):
    environment = {k: v for k, v in os.environ.items() if k != "PYTHONPATH"}
    where = subprocess.run(
        [installed.parent / "python", "-c", "import runner; print(runner.__file__)"],
        cwd=tmp_path,
        env=environment,
        capture_output=True,
        text=True,
        check=True,
    )
    assert str(ROOT) not in where.stdout, "the checkout shadows the wheel: this test would test nothing"
    shipped = Path(where.stdout.strip()).parent / "shipped_plans"
    done = subprocess.run(
        [installed, "check", shipped / "demo_night.yaml", "--json"],
        cwd=tmp_path,
        env=environment,
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    assert json.loads(done.stdout)["points"] > 0
