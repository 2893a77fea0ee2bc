"""popsim new: a commented study that runs as it is."""

from __future__ import annotations

from pathlib import Path

import click

from covariates.problems import Problem, ProblemsError


@click.command()
@click.argument("file", type=click.Path(path_type=Path, dir_okay=False))
@click.option("--overwrite", is_flag=True, help="Replace FILE if it is there.")
def new(file: Path, overwrite: bool) -> None:
    """Write a commented study to FILE, ready to run and to change."""
    from importlib import resources

    if file.suffix != ".toml":
        raise ProblemsError(Problem(str(file), f'a name that ends in "{file.suffix}"', "a name that ends in .toml",
                                    f"popsim new {file.with_suffix('.toml')}"))
    if file.exists() and not overwrite:
        raise ProblemsError(Problem(str(file), "a file that is there already", "a new name", "or --overwrite"))
    text = (resources.files("popsim") / "templates" / "study.toml").read_text(encoding="utf-8")
    file.write_text(text, encoding="utf-8")
    click.echo(f"{file} written. Next:\n  popsim check {file}\n  popsim judge {file}")
