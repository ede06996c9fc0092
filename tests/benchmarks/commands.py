"""How long the commands take: python tests/benchmarks/commands.py [RUNS]

Each is a whole process, timed from outside; the median of the runs is printed. Beside them stands what the machine
needs at least: a Python that does nothing, and one that loads NumPy, SciPy and ONNX Runtime.
"""

from __future__ import annotations

import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
PLAN = ROOT / "examples/pump_alarm/plan.toml"
TOOL = [sys.executable, "-m", "export.commands"]


def seconds(command: list[str], runs: int) -> float:
    """The median time of a command, after one run that does not count."""
    times = []
    for _ in range(runs + 1):
        start = time.perf_counter()
        subprocess.run(command, cwd=ROOT, stdout=subprocess.DEVNULL, check=True)
        times.append(time.perf_counter() - start)
    return statistics.median(times[1:])


def main() -> None:
    """Print the table."""
    runs = int(sys.argv[1]) if len(sys.argv) > 1 else 5
    with tempfile.TemporaryDirectory() as folder:
        rows = [
            ("Python alone", "", [sys.executable, "-c", "pass"]),
            ("Python with NumPy, SciPy, ONNX Runtime", "", [sys.executable, "-c", "import numpy, scipy, onnxruntime"]),
            ("firmlogit --help", "0.2", [*TOOL, "--help"]),
            ("firmlogit ship, the pump example", "10", [*TOOL, "ship", str(PLAN), "--into", f"{folder}/release"]),
            ("firmlogit check, that release", "", [*TOOL, "check", f"{folder}/release"]),
        ]
        print("| command | aim, s | median of " + str(runs) + ", s |\n|---|---|---|")
        for what, aim, command in rows:
            print(f"| {what} | {aim} | {seconds(command, runs):.2f} |", flush=True)


if __name__ == "__main__":
    main()
