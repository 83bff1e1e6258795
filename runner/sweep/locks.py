"""One run a bench at a time: an advisory lock for each instrument's resource name, held until the run has ended.

Keyed on resources and not on the bench file, so that two bench files which name the same instrument exclude each other.
A simulated bench starts instruments of its own; nobody else can reach them and nothing is locked.
"""

import hashlib
import tempfile
from collections.abc import Iterable, Iterator
from contextlib import ExitStack, contextmanager
from pathlib import Path

from filelock import FileLock, Timeout

from runner.errors import BenchError


@contextmanager
def bench_locked(resources: Iterable[str], *, wait: float = 0.0) -> Iterator[None]:
    """Hold the instruments named.

    Args:
        resources: VISA resource names.
        wait: how long to wait for each [s].

    Raises:
        BenchError: somebody else holds one of them.
    """
    folder = Path(tempfile.gettempdir()) / "kneemap-locks"
    folder.mkdir(mode=0o1777, exist_ok=True)
    with ExitStack() as held:
        # Sorted, so that two runs that want the same two instruments do not each end up with one.
        for resource in sorted(set(resources)):
            key = hashlib.sha256(resource.strip().upper().encode()).hexdigest()[:24]
            try:
                held.enter_context(FileLock(folder / f"{key}.lock", timeout=wait, mode=0o666))
            except Timeout as error:
                raise BenchError(
                    f"{resource}: in use by another run on this machine; wait for its end, or stop it with Ctrl-C "
                    "in its own window. Nothing was sent to the bench."
                ) from error
        yield
