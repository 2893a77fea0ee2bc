"""How long the solver takes to compile: python tests/benchmarks/compiling.py. A script, not a test.

A process with an empty cache calls every kernel once; then a second one, which finds them compiled.
"""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile

EVERY_KERNEL = """
import time
import numpy as np
from popsim import solve
from popsim.records import Timeline
one, started = np.ones(1), time.process_time()
disposition = solve.disposition({"V1": one, "CL": one, "ke0": one, "ka": one})
column, grid = np.ones((1, 1)), np.array([0.0, 1.0])
timeline = Timeline(0 * column, column, column, column, 9 * one)
solve.courses_on_grid(disposition, timeline, grid)
solve.window_course(disposition, timeline, "plasma", 0 * one, one, 0 * one, one)
solve.area_under_curve(disposition, timeline, "plasma", 0 * one, one)
solve.count_over_time(disposition, timeline, grid, "plasma", 0 * one, one, np.ones((1, 1), dtype=bool),
                      np.zeros((1, 2, 3), dtype=np.int64), np.zeros((1, 2, solve.BIN_COUNT), dtype=np.int32))
print(f"{time.process_time() - started:6.2f} s of processor")
"""


def main() -> None:
    with tempfile.TemporaryDirectory() as folder:
        for label in ("compiling every kernel", "loading them"):
            print(f"{label:24}", end="", flush=True)
            environment = {**os.environ, "NUMBA_CACHE_DIR": folder}
            subprocess.run([sys.executable, "-c", EVERY_KERNEL], check=True, env=environment)


if __name__ == "__main__":
    main()
