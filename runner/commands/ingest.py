"""`kneemap ingest`: captures taken by hand become a run folder like any other."""

from pathlib import Path


def ingest_captures(path: Path, *, into: Path) -> None:
    """Read a captures file and the waveforms it names; write a run folder and say where it is."""
    from runner.plan import load_captures_file
    from runner.record import write_captures_run
    from runner.versions import library_versions, software

    folder = write_captures_run(
        load_captures_file(path), into=into, software=software(), versions=library_versions()
    )
    print(f"Run folder: {folder}\nNext: kneemap extract {folder}; kneemap report {folder}")
