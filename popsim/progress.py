"""What a person sees while waiting: on a terminal only, on stderr, nothing when piped."""

from __future__ import annotations

import sys
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager

import click

PATIENCE_S = 2.0  # loading compiled code takes less; whoever waits longer is told why


def warmed_up() -> None:
    """Load or compile the solver, saying so when it takes a while."""
    def explain() -> None:
        click.echo("compiling the solver, once on this machine: 10 to 30 s ...", err=True)

    timer = threading.Timer(PATIENCE_S, explain)
    timer.daemon = True
    timer.start()
    try:
        from popsim import solve

        _solve_once(solve)
    finally:
        timer.cancel()
    if not solve.code_is_kept():
        click.echo("no place to keep the compiled solver: it is compiled anew each time", err=True)


def _solve_once(solve) -> None:
    """One small patient through every kernel that a study uses."""
    import numpy as np

    from popsim.records import Timeline

    one = np.ones(1)
    disposition = solve.disposition({"V1": 10 * one, "CL": one, "ke0": one})
    timeline = Timeline(np.zeros((1, 1)), np.ones((1, 1)), np.ones((1, 1)))
    solve.window_course(disposition, timeline, "plasma", 0 * one, one, 0 * one, one)
    solve.count_over_time(disposition, timeline, np.array([0.0, 1.0]), "plasma", 0 * one, one,
                          np.ones((1, 1), dtype=bool), np.zeros((1, 2, 3), dtype=np.int64),
                          np.zeros((1, 2, solve.BIN_COUNT), dtype=np.int32))


@contextmanager
def bar(total: int | None, label: str) -> Iterator[Callable[[int], None] | None]:
    """A progress bar on a terminal; yields the function to call with the number done so far, or None."""
    if total is None or not sys.stderr.isatty():
        yield None
        return
    with click.progressbar(length=total, label=label, file=sys.stderr) as shown:
        done = 0

        def advance(so_far: int) -> None:
            nonlocal done
            shown.update(so_far - done)
            done = so_far

        yield advance
