"""The study is a program, no package: its tests find it here."""

import importlib
import sys
from pathlib import Path

import pytest

HERE = Path(__file__).resolve().parent


@pytest.fixture(scope="session")
def accuracy():
    """The accuracy study."""
    sys.path.insert(0, str(HERE))
    try:
        return importlib.import_module("accuracy")
    finally:
        sys.path.remove(str(HERE))


@pytest.fixture(scope="session")
def accuracy_report(accuracy):
    """Its page."""
    return importlib.import_module("accuracy_report")
