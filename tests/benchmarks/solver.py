"""Times the solver against scipy, one thread. A script, not a test: python tests/benchmarks/solver.py [patients]

Processor time, best of several runs. Absolute figures drift from machine to machine; ratios hold.
"""

from __future__ import annotations

import runpy
import sys
import time
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from types import SimpleNamespace

import numpy as np
from scipy.integrate import solve_ivp
from scipy.linalg import expm

from popsim import solve
from popsim.records import Timeline

CASES = Path(__file__).parents[1] / "popsim" / "solver_cases.py"
cases = SimpleNamespace(**runpy.run_path(str(CASES)))
GROUPS = 4


def seconds(work: Callable[[], object], repeats: int = 5) -> float:
    work()
    best = float("inf")
    for _ in range(repeats):
        started = time.process_time()
        work()
        best = min(best, time.process_time() - started)
    return best


def by_expm(p: dict[str, float], times: int, every: float) -> None:
    """The usual loop: one matrix exponential a patient, then a product per step."""
    step = expm(cases.rate_matrix(p) * every)
    state = np.array([100.0 / p["V1"], 0.0, 0.0, 0.0, 10.0])
    for _ in range(times - 1):
        state = step @ state


def by_lsoda(p: dict[str, float], grid: np.ndarray) -> None:
    matrix = cases.rate_matrix(p)
    start = np.array([100.0 / p["V1"], 0.0, 0.0, 0.0, 10.0])
    solve_ivp(lambda t, y: matrix @ y, (grid[0], grid[-1]), start, "LSODA", grid, rtol=1e-8, atol=1e-10)


def main() -> None:
    n = int(sys.argv[1]) if len(sys.argv) > 1 else 8192
    values = cases.varied(n)
    d = solve.disposition(values)
    on_grid = cases.timeline((0.0, 100.0, 10.0), (10.0, 0.0, 8.0), (30.0, 20.0, 6.0), (60.0, 0.0, 0.0), n=n)
    later = on_grid.time_min.copy()
    later[:, 1:4] += np.linspace(0.01, 0.09, n)[:, None]
    between = Timeline(later, on_grid.bolus_mg, on_grid.rate_mg_per_min)
    limits = np.full(n, 2.0), np.full(n, 4.0)
    members = np.ones((n, GROUPS), dtype=bool)
    ends = np.full(n, 5.0), np.full(n, 60.0)
    curve = tuple(np.full(n, x) for x in (93.0, 0.0, 3.0, 1.5, 1.9))

    print(f"{n} patients, one thread")
    print(f"rates and weights     {seconds(lambda: solve.disposition(values)) / n * 1e9:9.0f} ns per patient")
    for which in ("plasma", "effect_site"):
        spent = seconds(lambda w=which: solve.window_course(d, on_grid, w, *limits, *ends))
        print(f"window, {which:13} {spent / n * 1e9:9.0f} ns per patient")
    for times, every in ((181, 0.5), (1081, 0.1)):
        grid = every * np.arange(times)
        points = n * times

        def counted(line, groups, bins=None, course="effect_site", grid=grid, times=times):
            counts = np.zeros((groups, times, 3), dtype=np.int64)
            solve.count_over_time(d, line, grid, course, *limits, members[:, :groups], counts, bins)

        bins = np.zeros((GROUPS, times, solve.BIN_COUNT), dtype=np.int32)
        ours = seconds(lambda c=counted: c(on_grid, 1)) / points
        rows = {
            "steps, range test, counts": ours,
            "the same, doses inside steps": seconds(lambda c=counted: c(between, 1)) / points,
            f"the same, {GROUPS} groups": seconds(lambda c=counted: c(on_grid, GROUPS)) / points,
            f"{GROUPS} groups and percentile bins": seconds(lambda c=counted, b=bins: c(on_grid, GROUPS, b)) / points,
            "the same, of an effect": seconds(lambda c=counted, b=bins: c(on_grid, GROUPS, b, curve)) / points,
            "both courses kept": seconds(lambda g=grid: solve.courses_on_grid(d, on_grid, g)) / points,
            "scipy expm and products": seconds(lambda t=times, e=every: by_expm(cases.PROPOFOL, t, e)) / times,
            "scipy LSODA, rtol 1e-8": seconds(lambda g=grid: by_lsoda(cases.PROPOFOL, g)) / times,
        }
        print(f"{times} times, ns per patient and time; times as long as the first")
        for label, spent in rows.items():
            print(f"  {label:32} {spent * 1e9:9.2f} {spent / ours:9.1f}")
    started = time.perf_counter()
    with ThreadPoolExecutor(2) as pool:
        list(pool.map(lambda _: counted(on_grid, 1), range(8)))
    print(f"two threads, wall time per point {(time.perf_counter() - started) / 8 / points * 1e9:9.2f} ns")


if __name__ == "__main__":
    main()
