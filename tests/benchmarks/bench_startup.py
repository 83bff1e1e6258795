"""How long `kneemap --help` takes, against the bare import of the library that draws it."""

import statistics
import subprocess
import sys
import time
from pathlib import Path

TRIES = 7


def seconds(*command: str) -> float:
    began = time.perf_counter()
    subprocess.run(command, check=True, capture_output=True)
    return time.perf_counter() - began


def main() -> None:
    kneemap = str(Path(sys.executable).parent / "kneemap")
    seconds(kneemap, "--help"), seconds(sys.executable, "-c", "import typer")  # files into the cache
    pairs = [
        (seconds(kneemap, "--help"), seconds(sys.executable, "-c", "import typer")) for _ in range(TRIES)
    ]
    ratio = statistics.median(ours / bare for ours, bare in pairs)
    print(f"kneemap --help: {statistics.median(o for o, _ in pairs):.3f} s")
    print(f"python -c 'import typer': {statistics.median(b for _, b in pairs):.3f} s")
    print(f"ratio {ratio:.2f} (at most 3)")


if __name__ == "__main__":
    main()
