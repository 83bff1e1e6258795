"""Words and exit statuses of every command, in the order in which a user meets them.

Whatever a user can cause ends here as one message on standard error. What is left is a fault of ours: its traceback
goes to a file, so that a screen at three in the morning shows where to look and not a page of code.
"""

import sys
import tempfile
import traceback
from pathlib import Path
from typing import Annotated, NoReturn

import typer

from runner.errors import KneemapError

app = typer.Typer(
    name="kneemap",
    help="From a YAML test plan to L(I,T) and Isat(T) of an inductor, measured by instruments that nobody watches.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,  # plain help: half the start-up time, and it reads the same in a log
    context_settings={"help_option_names": ["-h", "--help"]},
)

PlanArgument = Annotated[Path, typer.Argument(metavar="PLAN", help="A test plan (YAML).")]
BenchArgument = Annotated[Path, typer.Argument(metavar="BENCH", help="A bench file (YAML).")]
RunArgument = Annotated[Path, typer.Argument(metavar="RUN", help="A run folder, or a record.h5.")]
BenchOption = Annotated[
    Path | None,
    typer.Option("--bench", metavar="BENCH", help="Use this bench instead of the one the plan names."),
]
IntoOption = Annotated[
    Path, typer.Option("--into", metavar="DIR", help="Where run folders are made.", show_default=True)
]
JsonOption = Annotated[bool, typer.Option("--json", help="Print the same facts for machines.")]


@app.command()
def check(
    plan: Annotated[Path | None, typer.Argument(metavar="PLAN", help="A test plan (YAML).")] = None,
    bench: BenchOption = None,
    json: JsonOption = False,
    schema: Annotated[
        bool, typer.Option("--schema", help="Print the JSON Schema of plan and bench files, for editors.")
    ] = False,
) -> None:
    """Read a plan and its bench and forecast the run; nothing is touched."""
    from runner.commands.check import check_plan, print_schema

    if schema:
        print_schema()
    elif plan is None:
        raise typer.BadParameter("name a plan, or ask for --schema", param_hint="PLAN")
    else:
        raise typer.Exit(check_plan(plan, bench=bench, json=json))


@app.command()
def probe(bench: BenchArgument) -> None:
    """Open each instrument of a bench: who it is, what it can do, whether it agrees with the bench file."""
    from runner.commands.probe import probe_bench

    raise typer.Exit(probe_bench(bench))


@app.command()
def run(plan: PlanArgument, bench: BenchOption = None, into: IntoOption = Path("runs")) -> None:
    """Carry a plan out, then extract and report."""
    from runner.commands.run import run_plan

    raise typer.Exit(run_plan(plan, bench=bench, into=into))


@app.command()
def resume(run: RunArgument) -> None:
    """Go on with a run that was stopped or cut off; no point is repeated or lost."""
    from runner.commands.run import resume_run

    raise typer.Exit(resume_run(run))


@app.command()
def status(
    run: RunArgument,
    events: Annotated[bool, typer.Option("--events", help="Print the log of the night as well.")] = False,
) -> None:
    """Where a run stands and what it waits for, also while it runs."""
    from runner.commands.status import print_status

    print_status(run, events=events)


@app.command()
def extract(run: RunArgument, json: JsonOption = False) -> None:
    """Compute L(I,T) and Isat(T) from a record, with uncertainty."""
    from runner.commands.extract import extract_run

    extract_run(run, json=json)


@app.command()
def report(run: RunArgument) -> None:
    """Write the report of a run: one page, with its figures as PNG and CSV beside it."""
    from runner.commands.extract import report_run

    report_run(run)


@app.command()
def ingest(
    captures: Annotated[Path, typer.Argument(metavar="CAPTURES", help="A captures file (YAML).")],
    into: IntoOption = Path("runs"),
) -> None:
    """Bring captures taken by hand into a run folder that extract and report read like any other."""
    from runner.commands.ingest import ingest_captures

    ingest_captures(captures, into=into)


@app.command()
def mock(
    bench: BenchArgument,
    truth: Annotated[
        bool, typer.Option("--truth", help="Print the true values of the simulated parts and leave.")
    ] = False,
) -> None:
    """Serve the simulated instruments of a bench until Ctrl-C, for any client."""
    from runner.commands.mock import print_truth, serve_bench

    if truth:
        print_truth(bench)
    else:
        serve_bench(bench)


def main() -> NoReturn:
    """Run the program and leave with its exit status."""
    try:
        app()
    except KneemapError as error:
        print(f"kneemap: {error}", file=sys.stderr)
        sys.exit(error.exit_status)
    except BrokenPipeError:  # the reader of our output has gone (`| head`): nothing is left to say
        sys.stderr.close()
        sys.exit(1)
    except KeyboardInterrupt:
        print("kneemap: interrupted", file=sys.stderr)
        sys.exit(1)
    except Exception as error:
        # A fault of ours. Every way out of a run has passed the safe state before it reaches this line.
        log = Path(tempfile.mkstemp(prefix="kneemap-fault-", suffix=".txt")[1])
        log.write_text(traceback.format_exc(), encoding="utf-8")
        print(f"kneemap: a fault in the program ({type(error).__name__}); details in {log}", file=sys.stderr)
        sys.exit(1)
    sys.exit(0)
