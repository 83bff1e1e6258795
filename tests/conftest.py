"""What every room's tests may use: the program as a user starts it."""

import subprocess
import sys
from pathlib import Path

import pytest

PLANS = Path(__file__).resolve().parent.parent / "plans"

# Far more than any of these runs needs, so that a hang fails a test and not the whole suite [s of wall time].
PATIENCE = 600


@pytest.fixture(scope="session")
def run_kneemap():
    """`run_kneemap("run", plan)` starts the command as a process of its own and gives the finished process."""

    def call(*words):
        return subprocess.run(
            [sys.executable, "-m", "runner", *map(str, words)],
            capture_output=True,
            text=True,
            timeout=PATIENCE,
            check=False,
            cwd=PLANS.parent,
        )

    return call


@pytest.fixture(scope="session")
def plans():
    """Folder of the shipped plans."""
    return PLANS
