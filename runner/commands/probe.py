"""`kneemap probe`: open every instrument of a bench, one line each, then what does not agree with the bench file."""

import sys
from pathlib import Path


def probe_bench(path: Path) -> int:
    """Open the instruments of the bench at ``path`` and print who they are; 0 when all answer and agree, else 1."""
    from runner.commands.tables import console_for, plain_table
    from runner.plan import load_bench
    from runner.sweep import probe

    findings = probe(load_bench(path))
    console = console_for(sys.stdout)
    table = plain_table(f"Bench {path}")
    for heading in ("role", "answers", "identity", "can do"):
        table.add_column(heading)
    for finding in findings:
        table.add_row(
            finding.role, "yes" if finding.answers else "NO", finding.identity, finding.capabilities
        )
    console.print(table)
    disagreements = [f"{finding.role}: {text}" for finding in findings for text in finding.disagreements]
    for text in disagreements:
        console.print(f"  {text}", markup=False, highlight=False)
    if not disagreements:
        console.print("Every instrument answers and agrees with the bench file.")
    return 1 if disagreements else 0
