"""Where the plans, benches and dialects that come with the program stand.

In a checkout that is the folder `plans/` beside `runner/`; in an installed wheel the same files stand inside `runner`.
"""

from pathlib import Path

_HERE = Path(__file__).resolve().parent


def shipped_plans() -> Path:
    """Folder of the shipped plans, with `benches/` and `dialects/` below it."""
    installed = _HERE / "shipped_plans"
    return installed if installed.is_dir() else _HERE.parent / "plans"
