"""How long the demo takes: python tests/benchmarks/demo.py. A script, not collected as a test.

Prints the wall time of `popsim judge configs/remifentanil_fixed_rate.toml --tables-only` in a new process, the share of
it that is imports, and the simulation's nanoseconds per patient and protocol on one thread. Each figure is the best of
three, after a first run that loads or compiles the solver.
"""

from __future__ import annotations

import subprocess
import sys
import tempfile
import time
from pathlib import Path

from popsim.progress import warmed_up
from popsim.run import simulate
from popsim.study import read_study

STUDY = Path(__file__).parents[2] / "configs" / "remifentanil_fixed_rate.toml"
IMPORTS = (
    "import popsim.study, popsim.output, popsim.provenance, popsim.run, popsim.tables, popsim.terminal, popsim.progress"
)
JUDGE = "import sys; from popsim.cli import main; sys.argv[0] = 'popsim'; main()"


def seconds(*arguments: str) -> float:
    """Best of three new processes, after a first one."""
    taken = []
    for _ in range(4):
        started = time.perf_counter()
        subprocess.run([sys.executable, "-c", *arguments], check=True, capture_output=True)
        taken.append(time.perf_counter() - started)
    return min(taken[1:])


def main() -> None:
    with tempfile.TemporaryDirectory() as folder:
        judged = seconds(
            JUDGE, "judge", str(STUDY), "--tables-only", "--overwrite", "--out", str(Path(folder) / "demo")
        )
    imports = seconds(IMPORTS)
    warmed_up()
    study = read_study(STUDY)
    simulated = min(simulate(study).seconds for _ in range(3))
    runs = study.population.count * len(study.protocols)
    print(
        f"popsim judge {STUDY.name}: {judged:.2f} s, of which imports {imports:.2f} s ({100 * imports / judged:.0f} %)"
    )
    print(f"simulation on one thread: {simulated:.2f} s, {1e9 * simulated / runs:.0f} ns per patient and protocol")


if __name__ == "__main__":
    main()
