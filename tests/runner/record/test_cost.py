"""What a point may cost. The exact figures are in `make bench`."""

import json
import subprocess
import sys
from pathlib import Path

BENCH = Path(__file__).parents[2] / "benchmarks/bench_record.py"


def test_a_point_of_two_channels_takes_at_most_ten_milliseconds_with_a_live_reader() -> None:
    done = subprocess.run(
        [sys.executable, str(BENCH), "--points=60", "--json"], capture_output=True, text=True
    )
    assert done.returncode == 0, done.stderr
    assert json.loads(done.stdout)["journal_ms_median"] <= 10
