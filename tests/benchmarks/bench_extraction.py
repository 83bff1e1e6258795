"""Extraction of a run of a gibibyte against the least a script could do with it, and the memory it takes.

Run by ``make bench``. A synthetic run of 7 temperatures, 20 widths and 10 repeats of 200 000 samples, and one of 14
temperatures. Bars:

* time of ``extract(open_run(...))`` at most 3 times a bare pass over the same file: h5py reads each capture, scales both
  channels and integrates v - R i;
* peak memory of that process at most 500 MiB, and no more for twice the captures;
* twice the captures take twice the time, within 15 %: of the processors, which says how the work grows; the clock on the
  wall, printed beside it, also says what else the computer was doing.

Each measurement is a process of its own, in turns, so that none warms or fills the next one's memory, and the files are
in the system's cache for all of them; the quickest of the turns counts. The captures of one leg are made and compressed
once and put under every leg as they lie on the disk: to a reader that is the same work, and the run is there in seconds.
"""

import argparse
import json
import os
import resource
import subprocess
import sys
import tempfile
import time
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
SEED = 20261201
LEGS, WIDTHS, REPEATS, SAMPLES, BEFORE = 7, 20, 10, 200_000, 20_000
MIB = 1 << 20

# The part, and what plans/benches/mock.yaml says about the bench.
INITIAL, KNEE, COPPER, RAIL, TOP = 22e-6, 10.0, 18e-3, 12.0, 14.0  # H, A, ohm, V, A
SHUNT, SHUNT_INDUCTANCE, SKEW = 10e-3, 3e-9, 12e-9  # ohm, H, s
V_RANGE, I_RANGE, STEP = 20.0, 0.2, 16  # 12 bits, left-justified: codes in steps of 16


# The heavy libraries are imported where they are used: a process starts with its parent's peak memory on its account,
# and the parent of those that are measured must stay slim.


def inductance(current):
    """True L_d [H]: 1/(1 + x^6) of the initial one; 30 % of it are lost at x = (3/7)^(1/6)."""
    return INITIAL / (1 + (current / KNEE) ** 6)


def pulse_codes(width, interval, generator):
    """Codes [2, repeats, n] of voltage and shunt of one width."""
    import numpy as np

    grid = np.linspace(0.0, 1.2 * TOP, 20_001)
    rate = inductance(grid) / (RAIL - COPPER * grid)
    at = np.concatenate([[0.0], np.cumsum(0.5 * np.diff(grid) * (rate[1:] + rate[:-1]))])
    t = (np.arange(SAMPLES) - BEFORE) * interval
    on = (t > 0) & (t < width)
    current = np.where(on, np.interp(t, at, grid), 0.0)
    shunt = np.where(
        on, SHUNT * current + SHUNT_INDUCTANCE * (RAIL - COPPER * current) / inductance(current), 0
    )
    voltage = np.where((t - SKEW > 0) & (t - SKEW < width), RAIL, 0.0)
    clean = np.stack([voltage / V_RANGE, shunt / I_RANGE])[:, None] * 2048
    codes = clean + generator.normal(0.0, 0.6, (2, REPEATS, SAMPLES))
    return (np.clip(np.round(codes), -2048, 2047) * STEP).astype("<i2")


def pulse_widths():
    """Widths [s] up to the one whose current is TOP."""
    import numpy as np

    grid = np.linspace(0.0, TOP, 20_001)
    longest = float(np.trapezoid(inductance(grid) / (RAIL - COPPER * grid), grid))
    return np.linspace(0.12, 1.0, WIDTHS) * longest


def make_run(folder: Path, legs: int) -> None:
    """A record of ``legs`` legs: points by the journal and the rebuild, captures put into the finished file."""
    import h5py
    import numpy as np

    from runner.record import Journal, PartRow, PointRow, RunHeader, SettingRow, consolidate
    from runner.record.layout import setting_text

    plans = ROOT / "plans"
    plan, bench = (plans / "demo_night.yaml").read_bytes(), (plans / "benches" / "mock.yaml").read_bytes()
    temperatures = np.linspace(-40.0, 125.0, legs)
    header = RunHeader(
        "bench", "Benchmark", "plan", 1.8e9, "plan.yaml", plan, "bench.yaml", bench, (PartRow("x"),), tuple(temperatures)
    )  # fmt: skip
    where: dict[int, list[int]] = {}
    with Journal.create(folder, header) as journal:
        journal.session("bench", {}, 1.8e9)
        for leg, temperature in enumerate(temperatures):
            for place, width in enumerate(pulse_widths()):
                index = leg * WIDTHS + place
                row = PointRow(
                    index, leg, 0, "pulse", 1.8e9 + index, 1.8e9 + index + 0.5, temperature_setpoint=temperature,
                    body_temperature=temperature, pulse_width_setpoint=width, rail_voltage_setpoint=RAIL,
                    resistance=COPPER,
                )  # fmt: skip
                where.setdefault(place, []).append(journal.add_point(row, []))
        journal.state("finished")
    record = consolidate(folder)
    generator = np.random.default_rng(SEED)
    with h5py.File(record, "r+", libver=("v108", "v110")) as file:
        for place, width in enumerate(pulse_widths()):
            interval = 1.12 * width / (SAMPLES - BEFORE)
            setting = SettingRow(
                SAMPLES, interval, -BEFORE * interval, "int16", V_RANGE / 32768, 0.0, I_RANGE / 32768 / SHUNT, 0.0,
                {"code_min": -32768 * 0.99, "code_max": 32767 * 0.99},
            )  # fmt: skip
            made = file["entry"].create_group(f"captures_{place:02d}")
            made["setting"] = setting_text(setting)
            made["time"] = setting.first + interval * np.arange(SAMPLES)
            made["point"] = np.repeat(np.array(where[place], "<i8"), REPEATS)
            made["repeat"] = np.tile(np.arange(REPEATS, dtype="<i4"), legs)
            for name, codes in zip(
                ("voltage", "current"), pulse_codes(width, interval, generator), strict=True
            ):
                data = made.create_dataset(
                    name, (legs * REPEATS, SAMPLES), "<i2", chunks=(1, SAMPLES),
                    compression="gzip", compression_opts=1, shuffle=True, fletcher32=True,
                )  # fmt: skip
                for repeat in range(REPEATS):
                    data[repeat] = codes[repeat]
                data.flush()
                for repeat in range(REPEATS):
                    mask, packed = data.id.read_direct_chunk((repeat, 0))
                    for leg in range(1, legs):
                        data.id.write_direct_chunk((leg * REPEATS + repeat, 0), packed, mask)


def bare_pass(record: Path) -> dict[str, float]:
    """Read, scale and integrate every capture, and nothing else."""
    import h5py
    from scipy.integrate import cumulative_trapezoid

    began, worked, size, last = time.perf_counter(), time.process_time(), 0, 0.0
    with h5py.File(record) as file:
        for name, made in file["entry"].items():
            if not name.startswith("captures_"):
                continue
            facts = json.loads(made["setting"].asstr()[()])
            voltage, current = made["voltage"], made["current"]
            for row in range(len(voltage)):
                v = voltage[row] * facts["v_scale"] + facts["v_offset"]
                i = current[row] * facts["i_scale"] + facts["i_offset"]
                last += cumulative_trapezoid(v - COPPER * i, dx=facts["interval"])[-1]
                size += 4 * len(v)
    return {
        "wall": time.perf_counter() - began,
        "cpu": time.process_time() - worked,
        "bytes": size,
        "flux": last,
    }


def extraction(record: Path) -> dict[str, float]:
    """Extract; with the peak memory of this process, and of workers if it had any (as if every core had one)."""
    from runner.extraction import extract, open_run

    # Importing may start a process too, which inherits our peak on paper.
    before = resource.getrusage(resource.RUSAGE_CHILDREN)
    began, worked = time.perf_counter(), time.process_time()
    with open_run(record) as run:
        found = extract(run)
    wall, cpu = time.perf_counter() - began, time.process_time() - worked
    own = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    after = resource.getrusage(resource.RUSAGE_CHILDREN)
    workers = (os.cpu_count() or 1) * after.ru_maxrss if after.ru_maxrss > before.ru_maxrss else 0
    cpu += after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime
    isat = next(table for table in found.tables.isats if table.method == "pulse")
    truth = KNEE * (3 / 7) ** (1 / 6)
    worst = max(abs(float(value) / truth - 1) for value in isat.ampere[list(isat.drops).index(0.3)])
    if not worst < 0.005:
        raise SystemExit(f"Isat(30 %) is {worst:.2%} wrong: what was timed is no extraction")
    return {"wall": wall, "cpu": cpu, "mib": (own + workers) / 1024}


def apart(what: str, place: Path, *more: str) -> dict[str, float]:
    """One of the jobs in a process of its own."""
    command = [sys.executable, str(Path(__file__).resolve()), "--job", what, "--place", str(place), *more]
    done = subprocess.run(command, check=True, stdout=subprocess.PIPE, text=True, cwd=ROOT)
    return json.loads(done.stdout)


def job(wishes: argparse.Namespace) -> None:
    sys.path.insert(0, str(ROOT))
    if wishes.job == "make":
        make_run(wishes.place, wishes.legs)
        print("{}")
        return
    print(json.dumps({"bare": bare_pass, "extract": extraction}[wishes.job](wishes.place / "record.h5")))


def main() -> int:
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--job", choices=("make", "bare", "extract"), help=argparse.SUPPRESS)
    parser.add_argument("--place", type=Path, help=argparse.SUPPRESS)
    parser.add_argument("--legs", type=int, default=LEGS)
    parser.add_argument("--tries", type=int, default=3, help="the quickest of so many passes counts")
    wishes = parser.parse_args()
    if wishes.job:
        job(wishes)
        return 0
    jobs = (("bare", "bare", "one"), ("once", "extract", "one"), ("twice", "extract", "two"))
    wall, cpu, peak = ({name: [] for name, *_ in jobs} for _ in range(3))
    disk = ROOT / "build"  # git passes it over; /tmp may be memory
    disk.mkdir(exist_ok=True)
    with tempfile.TemporaryDirectory(dir=disk) as place:
        apart("make", Path(place, "one"), "--legs", str(wishes.legs))
        apart("make", Path(place, "two"), "--legs", str(2 * wishes.legs))
        size = 0.0
        for _ in range(wishes.tries):
            for name, what, run in jobs:
                found = apart(what, Path(place, run))
                size = found.get("bytes", size)
                wall[name].append(found["wall"])
                cpu[name].append(found["cpu"])
                peak[name].append(found.get("mib", 0.0))
    best, work = ({name: min(all_) for name, all_ in times.items()} for times in (wall, cpu))
    highest = max(max(peak["once"]), max(peak["twice"]))
    ratio, growth = best["once"] / best["bare"], work["twice"] / work["once"]
    print(f"{size / 2**30:.2f} GiB of captures")
    print(f"bare read and integrate {best['bare']:.1f} s ({work['bare']:.1f} s of processors)")
    print(
        f"extraction {best['once']:.1f} s ({work['once']:.1f} s of processors), ratio {ratio:.2f} (at most 3)"
    )
    print(
        f"peak memory {max(peak['once']):.0f} MiB, {max(peak['twice']):.0f} MiB with twice the captures (at most 500)"
    )
    print(
        f"twice the captures take {best['twice']:.1f} s ({work['twice']:.1f} s of processors), "
        f"{growth:.2f} times the processors' time (1.70 to 2.30)"
    )
    figures = {
        "extraction_over_bare": ratio,
        "extraction_mib": highest,
        "extraction_growth": growth,
    }
    print(json.dumps(figures))
    kept = ratio <= 3 and highest <= 500 and 1.7 <= growth <= 2.3 and size >= 2**30
    return 0 if kept or wishes.legs < LEGS else 1


if __name__ == "__main__":
    sys.exit(main())
