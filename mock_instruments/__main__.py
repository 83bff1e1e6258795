"""`python -m mock_instruments`: a bench read as JSON from standard input, its ports as one line of JSON on standard output.

It serves until the control socket says `quit`, or until nobody has been connected for a while (`--patience`
or MOCK_INSTRUMENTS_PATIENCE, wall seconds), so that a bench whose clients have all died does not stay
behind.
"""

import argparse
import contextlib
import json
import os
import sys

from mock_instruments.launch import PATIENCE, PATIENCE_VARIABLE
from mock_instruments.server import serve
from mock_instruments.spec import WorldSpec


def main() -> int:
    parser = argparse.ArgumentParser(
        prog="python -m mock_instruments", description="Serve a simulated bench."
    )
    parser.add_argument("--patience", type=float, default=float(os.environ.get(PATIENCE_VARIABLE, PATIENCE)))
    patience = parser.parse_args().patience
    try:
        spec = WorldSpec.from_mapping(json.load(sys.stdin))
    except (ValueError, TypeError) as error:
        print(f"the simulated bench cannot be read: {error}", file=sys.stderr)
        return 2
    with serve(spec) as served:
        print(json.dumps({"ports": served.ports, "control": served.control}), flush=True)
        with contextlib.suppress(KeyboardInterrupt):
            while not served.quit.wait(min(1.0, patience / 4)):
                if served.idle_for() > patience:
                    break
    return 0


if __name__ == "__main__":
    sys.exit(main())
