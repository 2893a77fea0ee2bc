"""popsim score: which published model predicts measured patients."""

from __future__ import annotations

from pathlib import Path

import click

FILE = click.Path(path_type=Path, dir_okay=False)


@click.command()
@click.option("--people", type=FILE, required=True, help="CSV, one row a person: patient, sex, age, weight, height ...")
@click.option("--given", type=FILE, required=True,
              help="CSV, one row a dose: patient, at, amount or rate, over or until, with units.")
@click.option("--measured", type=FILE, required=True,
              help="CSV, one row a measurement: patient, at, quantity (plasma), value with its unit.")
@click.option("--drug", metavar="NAME", help="Score every model sheet of this drug.")
@click.option("--model", "models", multiple=True, metavar="SHEET",
              help="Score this sheet, by name or path; may be repeated.")
@click.option("--group", "groups", multiple=True, metavar="NAME:CONDITION",
              help='A group of patients, such as "old: age >= 75"; obese and elderly if none is given.')
@click.option("--replicates", type=click.IntRange(100, 8192), default=1000, show_default=True,
              help="Simulated copies of each patient for the prediction intervals.")
@click.option("--seed", type=click.IntRange(0, 2**63 - 1), default=20261201, show_default=True)
@click.option("--out", type=click.Path(path_type=Path, file_okay=False), metavar="DIR",
              help="Folder for the results; ./score_DRUG if not given.")
@click.option("--overwrite", is_flag=True, help="Replace an earlier run's files in DIR.")
@click.option("--tables-only", is_flag=True, help="No pictures, no report.")
@click.option("--quiet", is_flag=True, help="No summary.")
@click.option("--json", "as_json", is_flag=True, help="The summary's numbers as JSON.")
def score(people: Path, given: Path, measured: Path, drug: str | None, models: tuple[str, ...],
          groups: tuple[str, ...], replicates: int, seed: int, out: Path | None, overwrite: bool, tables_only: bool,
          quiet: bool, as_json: bool) -> None:
    """Score published models on measured patients.

    Three files say who the patients are, what they were given and what was
    measured. Per model: bias, inaccuracy, wobble and divergence, how many
    measurements its prediction interval holds, and which model is closest in
    the same patients.
    """
    from popsim.output import check_folder, write_record, write_tables, written_aside
    from popsim.progress import warmed_up
    from popsim.scoring.predict import at_a_bolus
    from popsim.scoring.run import score_models
    from popsim.scoring.tables import all_tables, notes_of
    from popsim.scoring.words import as_json_text, summary

    scored = score_models((people, given, measured), drug, models, groups, replicates, seed, warmed_up)
    folder = out or Path(f"score_{scored.models[0].drug}")
    check_folder(folder, overwrite)
    tables = all_tables(scored)
    notes = notes_of(scored, tables, at_a_bolus(scored.measured))
    with written_aside(folder) as aside:
        from popsim.scoring.report import score_record, write_score_report

        write_tables(aside, tables, "csv")
        record = score_record(scored, (people, given, measured), replicates, notes)
        write_record(aside, record)
        if not tables_only:
            from popsim.scoring.pictures import draw_scores

            write_score_report(scored, tables, record, draw_scores(scored, tables, aside), aside / "report.html")
    if as_json or not quiet:
        click.echo(as_json_text(scored, tables, notes) if as_json else summary(scored, tables, notes))
    if not quiet:
        click.echo(f"\nResults in {folder}", err=True)
