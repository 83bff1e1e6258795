"""The simulated bench as a process of its own, so that it outlives whoever runs a measurement on it."""

import json
import os
import subprocess
import sys
import tempfile
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

PATIENCE = 30.0  # s of wall time without any client before the process ends by itself
PATIENCE_VARIABLE = "MOCK_INSTRUMENTS_PATIENCE"


@dataclass(frozen=True, slots=True)
class Launched:
    """A bench served by another process."""

    process: "subprocess.Popen[bytes]"
    ports: Mapping[str, int]
    control: int


def launch(mapping: Mapping[str, Any], *, patience: float = PATIENCE) -> Launched:
    """Start `python -m mock_instruments` in a session of its own and wait until it listens.

    Args:
        mapping: the simulated bench, as `WorldSpec.from_mapping` reads it.
        patience: wall seconds without any client after which the process ends by itself.

    Raises:
        RuntimeError: the process ended instead of listening; the text is what it said.
    """
    root = Path(__file__).resolve().parent.parent
    path = os.pathsep.join([str(root), *filter(None, [os.environ.get("PYTHONPATH")])])
    # A file, not a pipe: the process must be able to complain after we have stopped listening to it.
    with tempfile.TemporaryFile() as complaints:
        process = subprocess.Popen(
            [sys.executable, "-m", "mock_instruments"],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=complaints,
            start_new_session=True,
            env=os.environ | {"PYTHONPATH": path, PATIENCE_VARIABLE: str(patience)},
        )
        assert process.stdin is not None
        assert process.stdout is not None
        with process.stdin as given, process.stdout as told:
            given.write(json.dumps(mapping).encode())
            given.close()
            line = told.readline()
        if not line:
            process.wait()
            complaints.seek(0)
            said = complaints.read().decode(errors="replace").strip()
            raise RuntimeError(f"the simulated bench did not start: {said or 'it said nothing'}")
    ports = json.loads(line)
    return Launched(process, ports["ports"], ports["control"])
