"""The plan and bench that broken cases start from, and a way to write variants of them."""

from collections.abc import Callable, Mapping
from pathlib import Path

import pytest

BROKEN = Path(__file__).parent / "broken"


@pytest.fixture
def base() -> Mapping[str, str]:
    """Text of plan.yaml and bench.yaml, both whole."""
    return {name: (BROKEN / name).read_text(encoding="utf-8") for name in ("plan.yaml", "bench.yaml")}


@pytest.fixture
def written(tmp_path: Path, base: Mapping[str, str]) -> Callable[..., Path]:
    """Write plan and bench, each with some text replaced; the path of the plan comes back."""

    def write(plan: Mapping[str, str] | None = None, bench: Mapping[str, str] | None = None) -> Path:
        for name, edits in (("plan.yaml", plan), ("bench.yaml", bench)):
            text = base[name]
            for old, new in (edits or {}).items():
                assert text.count(old) == 1, f"{old!r} stands {text.count(old)} times in {name}"
                text = text.replace(old, new)
            (tmp_path / name).write_text(text, encoding="utf-8")
        return tmp_path / "plan.yaml"

    return write
