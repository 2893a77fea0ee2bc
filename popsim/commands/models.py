"""popsim models: the drug models there are, or one of them whole."""

from __future__ import annotations

import click


@click.command()
@click.argument("name", required=False)
@click.option("--drug", help="Only models of this drug.")
def models(name: str | None, drug: str | None) -> None:
    """List the shipped drug models, or show NAME whole.

    NAME is a shipped model or the path of a sheet of your own (ends in .toml).
    Shown are its equations, variability, the people it was built on, cautions,
    and what follows from it: half-lives, volume, time to peak, times to half.
    """
    from covariates.problems import Problem, ProblemsError, nearest
    from covariates.sheet import read_sheet, shipped_sheets
    from popsim.model_text import list_text, sheet_text

    if name is not None:
        if drug is not None:
            raise ProblemsError(Problem("--drug", "given beside a model's name", "one of the two"))
        click.echo(sheet_text(read_sheet(name)))
        return
    sheets = [read_sheet(sheet) for sheet in shipped_sheets()]
    drugs = sorted({sheet.drug for sheet in sheets})
    if drug is not None and drug not in drugs:
        raise ProblemsError(Problem("--drug", f'"{drug}"', ", ".join(drugs), nearest(drug, drugs)))
    click.echo(list_text(sheet for sheet in sheets if drug in (None, sheet.drug)))
