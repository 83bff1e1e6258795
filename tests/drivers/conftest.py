"""What the tests of this room share: the shipped dialects, by file name."""

from collections.abc import Callable
from pathlib import Path

import pytest

from drivers import Dialect

DIALECTS = Path(__file__).resolve().parents[2] / "plans" / "dialects"


@pytest.fixture(scope="session")
def shipped() -> Callable[[str], Dialect]:
    return lambda name: Dialect.read(DIALECTS / f"{name}.yaml")
