"""popsim patients: write a study's patients and show who they are, before any drug is given."""

from __future__ import annotations

from pathlib import Path

import click


@click.command()
@click.argument("study", type=click.Path(path_type=Path, dir_okay=False))
@click.option(
    "--out",
    type=click.Path(path_type=Path, dir_okay=False),
    default=Path("people.csv"),
    show_default=True,
    metavar="FILE",
    help="The patients, a .csv or .parquet file; the picture stands beside it as .svg.",
)
@click.option("--overwrite", is_flag=True, help="Replace FILE and its picture.")
@click.option("--no-picture", is_flag=True, help="No picture.")
@click.option("--quiet", is_flag=True, help="No summary.")
def patients(study: Path, out: Path, overwrite: bool, no_picture: bool, quiet: bool) -> None:
    """Write the patients of STUDY and show who they are.

    By group: quantiles of age, weight, height, body mass index, lean mass
    and creatinine clearance.
    """
    import os
    import tempfile

    from popsim.study import read_study

    resolved = read_study(study)
    picture = None if no_picture else out.with_suffix(".svg")
    _check(out, picture, overwrite, resolved.population.file)

    from popsim.groups import members
    from popsim.lookup import Lookup
    from popsim.output import PatientRows, check_format
    from popsim.patients.draw import blocks
    from popsim.people import People, summary
    from popsim.records import BlockRows

    kind = out.suffix[1:]
    check_format(kind)
    people, drawn = People(resolved), blocks(resolved.population, resolved.seed)
    with tempfile.TemporaryDirectory(prefix=f".{out.stem}-unfinished-", dir=out.parent) as aside:
        sink = PatientRows(resolved, Path(aside), kind, True, False)
        for block in drawn:
            lookup = Lookup(block.attributes)
            people.add(block, members(resolved.groups, lookup, len(block)))
            sink(BlockRows(block, lookup, []))
        sink.close()
        if picture is not None:
            from popsim.patient_pictures import draw_people

            draw_people(resolved, people, Path(aside) / "people.svg")
            os.replace(Path(aside) / "people.svg", picture)
        os.replace(Path(aside) / f"patients.{kind}", out)
    if not quiet:
        eligible = f"{drawn.eligible:,} of {drawn.seen:,} candidates were eligible"
        if resolved.population.source == "survey":
            eligible += f": {100 * drawn.share_eligible:.3g} % of the adults within the limits of age and sex"
        click.echo(summary(resolved, people, f"{eligible}."))
        click.echo(f"\nPatients in {out}" + (f", picture in {picture}" if picture else ""), err=True)


def _check(out: Path, picture: Path | None, overwrite: bool, own_list: Path | None) -> None:
    from covariates.problems import Problem, ProblemsError

    if out.suffix not in (".csv", ".parquet"):
        raise ProblemsError(
            Problem("--out", f'"{out}"', "a file that ends in .csv or .parquet", f"--out {out.stem}.csv")
        )
    if not out.parent.is_dir():
        raise ProblemsError(Problem("--out", f'"{out.parent}", no such folder', "a folder that is there"))
    if own_list is not None and out.exists() and out.samefile(own_list):
        raise ProblemsError(Problem("--out", f'"{out}", the study\'s own list', "another file"))
    there = [path for path in (out, picture) if path is not None and path.exists()]
    if there and not overwrite:
        raise ProblemsError(Problem(str(there[0]), "a file that is there already", "a new name", "or --overwrite"))
