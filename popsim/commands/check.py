"""popsim check: the study read, and what a few example people would be given, before anything is simulated."""

from __future__ import annotations

from pathlib import Path

import click

LOOKED_AT = 20_000  # patients drawn to see who lies outside the model and whom no dose reaches


@click.command()
@click.argument("study", type=click.Path(path_type=Path, dir_okay=False))
def check(study: Path) -> None:
    """Show the ward cards of STUDY before anything is simulated.

    Shows what example people would be given: amounts and rates after caps and
    rounding, in mg and in mL where a strength is given; the number of patients,
    the model with its source, and the share of patients outside the people the
    model was built on.
    """
    from popsim.check_text import check_text
    from popsim.study import read_study

    click.echo(check_text(read_study(study), LOOKED_AT))
