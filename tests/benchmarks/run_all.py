"""All benchmarks, one after the other, each in a process of its own so that none warms or fills the next one's memory."""

import subprocess
import sys
from pathlib import Path

HERE = Path(__file__).resolve().parent


def main() -> int:
    failed = []
    for script in sorted(HERE.glob("bench_*.py")):
        print(f"\n== {script.stem}", flush=True)
        if subprocess.run([sys.executable, str(script)], cwd=HERE.parent.parent, check=False).returncode != 0:
            failed.append(script.stem)
    if failed:
        print(f"\nfailed: {', '.join(failed)}")
    return 1 if failed else 0


if __name__ == "__main__":
    sys.exit(main())
