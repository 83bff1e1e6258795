"""What a point costs on the disk: the journal against a bare h5py loop that writes the same arrays.

Run by ``make bench``. Two int16 channels of 10 000 samples a point, drawn from a seed. Three numbers matter:

* ms a point through the journal, each point on the disk when the call returns, with a reader that polls the run every
  20 ms from another process (the bar is a median of 10 ms);
* the ratio to a loop that writes the same codes into one chunked, uncompressed HDF5 dataset, flushing and fsyncing the
  file after every point, which is the least a bare script does when it wants to keep its points;
* ms a point of a rebuild of ``record.h5``, checks and compression included.
"""

import argparse
import json
import os
import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import h5py
import numpy as np

from runner.record import CaptureRow, Journal, PartRow, PointRow, RunHeader, SettingRow, consolidate

SAMPLES = 10_000
SEED = 20261201
READER = """
import sys, time
from runner.record import Live
with Live(sys.argv[1]) as live:
    seen = 0
    print("reading", flush=True)
    while live.state() != "finished":
        seen += len(live.points(seen)["point"])
        time.sleep(0.02)
    seen += len(live.points(seen)["point"])
    print(seen)
"""


def pulses(count: int) -> np.ndarray:
    """Codes as a 12-bit digitizer gives them, left-justified: a ramp and a rounded edge with noise, [count, 2, n]."""
    random = np.random.default_rng(SEED)
    t = np.linspace(-0.1, 0.9, SAMPLES)
    current = np.where(t < 0, 0.0, 0.8 * t + 0.15 * t**3)
    voltage = np.where(t < 0, 0.0, 0.9 - 0.05 * t)
    both = np.stack([voltage, current])
    noisy = both + random.normal(scale=1.5e-3, size=(count, *both.shape))
    return (np.clip(np.round(noisy * 2047), -2048, 2047) * 16).astype("<i2")


def journal_times(folder: Path, codes: np.ndarray) -> list[float]:
    header = RunHeader(
        "bench", "Benchmark", "plan", 1.8e9, "p.yaml", b"", "b.yaml", b"", (PartRow("x"),), (25.0,)
    )
    times = []
    with Journal.create(folder, header) as journal:
        journal.session("bench", {}, 1.8e9)
        setting = journal.setting(
            SettingRow(SAMPLES, 1e-8, -1e-5, "int16", 20 / 32768, 0.0, 0.1 / 32768, 0.0)
        )
        reader = subprocess.Popen(
            [sys.executable, "-c", READER, str(folder)], stdout=subprocess.PIPE, text=True, cwd=Path.cwd()
        )
        assert reader.stdout is not None
        reader.stdout.readline()
        for index, (voltage, current) in enumerate(codes):
            row = PointRow(index, 0, 0, "pulse", 1.8e9 + index, 1.8e9 + index + 0.5, peak_current=1.0)
            before = time.perf_counter()
            journal.add_point(row, [CaptureRow(0, setting, 1.8e9 + index, voltage, current)])
            times.append(time.perf_counter() - before)
        journal.state("finished")
        seen = int(reader.communicate(timeout=60)[0])
    assert seen == len(codes), f"the live reader saw {seen} of {len(codes)} points"
    return times


def bare_times(path: Path, codes: np.ndarray) -> list[float]:
    times = []
    with h5py.File(path, "w") as file:
        data = file.create_dataset(
            "codes", (0, 2, SAMPLES), "<i2", maxshape=(None, 2, SAMPLES), chunks=(1, 2, SAMPLES)
        )
        descriptor = file.id.get_vfd_handle()
        for index, both in enumerate(codes):
            before = time.perf_counter()
            data.resize(index + 1, axis=0)
            data[index] = both
            file.flush()
            os.fsync(descriptor)
            times.append(time.perf_counter() - before)
    return times


def main() -> None:
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--points", type=int, default=400)
    parser.add_argument("--json", action="store_true", help="print the figures for machines")
    wishes = parser.parse_args()
    codes = pulses(wishes.points)
    disk = Path(__file__).resolve().parents[2] / "build"  # git passes it over; /tmp may be memory
    disk.mkdir(exist_ok=True)
    with tempfile.TemporaryDirectory(dir=disk) as place:
        bare = bare_times(Path(place, "bare.h5"), codes)
        journal = journal_times(Path(place, "run"), codes)
        before = time.perf_counter()
        record = consolidate(Path(place, "run"))
        rebuild = time.perf_counter() - before
        ratio = wishes.points * SAMPLES * 4 / record.stat().st_size
    figures = {
        "journal_ms_median": 1e3 * statistics.median(journal),
        "journal_ms_p95": 1e3 * float(np.percentile(journal, 95)),
        "bare_ms_median": 1e3 * statistics.median(bare),
        "ratio_to_bare": statistics.median(journal) / statistics.median(bare),
        "rebuild_ms_per_point": 1e3 * rebuild / wishes.points,
        "compression": ratio,
    }
    if wishes.json:
        print(json.dumps(figures))
        return
    print(
        f"record: {figures['journal_ms_median']:.2f} ms a point of 2 x {SAMPLES} (p95 {figures['journal_ms_p95']:.2f}; "
        f"bar 10), with a live reader; bare h5py and fsync {figures['bare_ms_median']:.2f} ms, "
        f"ratio {figures['ratio_to_bare']:.2f}; rebuild {figures['rebuild_ms_per_point']:.2f} ms a point, "
        f"{ratio:.1f}:1 on the disk"
    )


if __name__ == "__main__":
    main()
