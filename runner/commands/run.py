"""`kneemap run` and `kneemap resume`: carry a plan out, then extract and report, so that the morning finds a page.

What is measured is safe in the record before anything here looks at it: when extraction or the report fails, the run
stays as it is and the message says which command goes on from there.
"""

import sys
from collections.abc import Callable
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING

from runner.errors import Fault, InputError, KneemapError

if TYPE_CHECKING:
    from runner.sweep import Outcome


def run_plan(path: Path, *, bench: Path | None, into: Path) -> int:
    """Check a plan, carry it out in a new run folder, extract and report; the exit status comes back."""
    from runner.commands.check import print_forecast, refuse_broken_limits
    from runner.commands.progress import watching
    from runner.plan import forecast, load_plan
    from runner.sweep import carry_out, new_run_folder

    loaded = load_plan(path, bench=bench)
    outlook = forecast(loaded.plan, loaded.bench)
    print_forecast(loaded, outlook)
    refuse_broken_limits(path, outlook)
    print_cautions()
    folder = new_run_folder(into, title=loaded.plan.title, start=datetime.now(UTC))
    print(f"\nRun folder: {folder}\n", flush=True)
    with watching() as watch:
        outcome = carry_out(loaded, folder, watch=watch)
    return _finish(folder, outcome)


def resume_run(path: Path) -> int:
    """Go on with the run in folder ``path``; the exit status comes back."""
    from runner.commands.progress import watching
    from runner.sweep import carry_out, loaded_from_run

    if not path.is_dir():
        raise InputError([Fault(str(path), "not a run folder; name the folder that holds journal.sqlite")])
    loaded = loaded_from_run(path)
    print_cautions()
    with watching() as watch:
        outcome = carry_out(loaded, path, resume=True, watch=watch)
    return _finish(path, outcome)
