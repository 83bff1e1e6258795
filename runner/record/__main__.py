"""``python -m runner.record FOLDER``: rebuild ``record.h5``, quietly and with low priority."""

import os
import sys

from runner.errors import KneemapError
from runner.record.consolidation import be_patient, consolidate
from runner.record.places import RECORD


def main(arguments: list[str]) -> int:
    """Exit status 0 when the record is there, 2 when the folder is no run, 1 when the disk refused."""
    if len(arguments) != 1:
        print("usage: python -m runner.record FOLDER", file=sys.stderr)
        return 2
    be_patient()
    try:
        written = consolidate(arguments[0])
    except KneemapError as error:
        print(error, file=sys.stderr)
        return error.exit_status
    if written.name != RECORD:
        print(f"warning: {RECORD} is open somewhere; the new one was left as {written}", file=sys.stderr)
    return 0


if __name__ == "__main__":
    status = main(sys.argv[1:])
    sys.stderr.flush()
    os._exit(status)  # not sys.exit: should HDF5 have failed to write after all, taking it down would crash
