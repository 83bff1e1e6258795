"""`kneemap mock`: the simulated bench by itself, for any client, and the truth about its parts for accuracy studies."""

import json
import threading
from pathlib import Path
from typing import Any

from runner.errors import Fault, InputError


def serve_bench(path: Path) -> None:
    """Serve the instruments of a simulated bench on free loopback ports until Ctrl-C."""
    import mock_instruments
    from mock_instruments import WorldSpec

    with mock_instruments.serve(WorldSpec.from_mapping(_simulation(path))) as served:
        for role, port in sorted(served.ports.items()):
            print(f"{role:<12} TCPIP::127.0.0.1::{port}::SOCKET")
        print(f"{'control':<12} 127.0.0.1:{served.control}  (JSON lines: now, advance, ledger, fault, quit)")
        print("Serving; leave with Ctrl-C.", flush=True)
        try:
            threading.Event().wait()
        except KeyboardInterrupt:
            print()


def print_truth(path: Path) -> None:
    """Print the true initial inductance, saturation current and resistance of the simulated parts as JSON."""
    import mock_instruments
    from mock_instruments import WorldSpec

    print(json.dumps(mock_instruments.truth(WorldSpec.from_mapping(_simulation(path))), indent=2))


def _simulation(path: Path) -> dict[str, Any]:
    from runner.plan import load_bench, simulation_spec

    bench = load_bench(path).bench
    if bench.simulation is None:
        raise InputError(
            [
                Fault(
                    str(path),
                    "this bench has no 'simulation:' section; give a mock bench, such as benches/mock.yaml",
                )
            ]
        )
    return simulation_spec(bench)
