"""What `import rtctl` costs beside `import numpy`, each in processes of its own."""

import subprocess
import sys
from pathlib import Path

import numpy as np

from tests.bench.ratios import Times
from tests.bench.table import Finding, cost

TOP = Path(__file__).resolve().parents[2]
SCRIPT = "import time; began = time.perf_counter_ns(); import {module}; print(time.perf_counter_ns() - began)"


def import_ns(module: str) -> float:
    """Time of one import in a fresh interpreter, without the interpreter's own start."""
    done = subprocess.run(
        [sys.executable, "-c", SCRIPT.format(module=module)], cwd=TOP, capture_output=True, text=True, check=True
    )
    return float(done.stdout)


def measure(quick: bool) -> list[tuple[str, list[Finding]]]:
    """Both imports in turns."""
    rounds = 9 if quick else 25
    times: dict[str, Times] = {"numpy": np.empty(rounds), "rtctl": np.empty(rounds)}
    for module in times:
        import_ns(module)  # files of both are read once before
    for k in range(rounds):
        for module in times:
            times[module][k] = import_ns(module)
    return [
        (
            "start; ratio = import rtctl / import numpy",
            [cost("import_ratio", "import rtctl, against import numpy", times["rtctl"], times["numpy"], "< 2.5")],
        )
    ]
