"""`kneemap run` and `kneemap resume`: carry a plan out, then extract and report, so that the morning finds a page.

What is measured is safe in the record before anything here looks at it: when extraction or the report fails, the
run stays as it is and the message says which command goes on from there.
"""

import sys
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING

from runner.errors import KneemapError

if TYPE_CHECKING:
    from runner.plan import LoadedPlan
    from runner.sweep import Outcome


def run_plan(path: Path, *, bench: Path | None, into: Path) -> int:
    """Check a plan, carry it out in a new run folder, extract and report; the exit status comes back."""
    from runner.commands.check import print_forecast, refuse_broken_limits
    from runner.plan import forecast, load_plan
    from runner.record import new_run_folder

    loaded = load_plan(path, bench=bench)
    outlook = forecast(loaded.plan, loaded.bench)
    print_forecast(loaded, outlook)
    refuse_broken_limits(path, outlook)
    folder = new_run_folder(into, title=loaded.plan.title, start=datetime.now(UTC))
    return _carry_out(loaded, folder, resume=False)


def resume_run(folder: Path) -> int:
    """Go on with the run in ``folder``; the exit status comes back."""
    from runner.sweep import loaded_from_run

    return _carry_out(loaded_from_run(folder), folder, resume=True)


def _carry_out(loaded: "LoadedPlan", folder: Path, *, resume: bool) -> int:
    from runner.commands.cautions import print_cautions
    from runner.commands.progress import watching
    from runner.sweep import carry_out

    print_cautions(loaded)
    print(f"\nRun folder: {folder}\n", flush=True)
    with watching() as watch:
        outcome = carry_out(loaded, folder, resume=resume, watch=watch)
    return _finish(folder, outcome)


def _finish(folder: Path, outcome: "Outcome") -> int:
    """Say how the run ended and make result and report of what it holds."""
    from runner.commands.extract import extract_and_keep, print_result
    from runner.report import write_report

    flagged = f", {outcome.flagged} flagged" if outcome.flagged else ""
    reason = f": {outcome.reason}" if outcome.reason else ""
    print(f"\nThe run {outcome.status}{reason} ({outcome.points} points{flagged}).", flush=True)
    if outcome.status != "finished":
        print(f"Nothing recorded is lost; 'kneemap resume {folder}' goes on from here.", file=sys.stderr)
    if outcome.points == 0:
        return 0 if outcome.status == "finished" else 1
    try:
        print("Extracting …", flush=True)
        print_result(extract_and_keep(folder))
        print(f"Result: {folder / 'result.json'}\nReport: {write_report(folder)}")
        _tell_result(folder)
    except KneemapError as error:
        print(
            f"kneemap: the record is complete, but: {error}\nMend that and run 'kneemap report {folder}'.",
            file=sys.stderr,
        )
        return 1
    return 0 if outcome.status == "finished" else 1


def _tell_result(folder: Path) -> None:
    """Send the answer and its picture to whoever asked to be told; what fails is said here and harms nothing."""
    from runner.report import headlines
    from runner.sweep import Notifier

    notifier = Notifier(lambda text: print(f"kneemap: {text}", file=sys.stderr))
    pictures = sorted((folder / "report").glob("*_saturation.png"))
    notifier.tell("kneemap: result", "\n".join(headlines(folder)), pictures[0] if pictures else None)
    notifier.close()
