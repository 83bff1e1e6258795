"""Names of run folders: when the run began, and what it is about."""

import re
import unicodedata
from datetime import UTC, datetime
from itertools import count
from pathlib import Path


def new_run_folder(into: Path, *, title: str, start: datetime) -> Path:
    """A folder below ``into`` that no run has yet: ``<UTC start>_<slug of title>``; it is not made here.

    Args:
        into: where run folders are kept.
        title: of the plan; what cannot stand in a file name is left out.
        start: of the run, with its time zone.
    """
    name = f"{start.astimezone(UTC):%Y%m%dT%H%M%SZ}_{_slug(title)}"
    names = (name if n == 1 else f"{name}_{n}" for n in count(1))  # two runs may begin within one second
    return next(into / candidate for candidate in names if not (into / candidate).exists())


def _slug(title: str) -> str:
    plain = unicodedata.normalize("NFKD", title).encode("ascii", "ignore").decode().lower()
    return re.sub(r"[^a-z0-9]+", "-", plain).strip("-")[:60].rstrip("-") or "run"
