"""popsim judge: run a study, leave its files, print the summary."""

from __future__ import annotations

import os
import sys
from pathlib import Path

import click

MOST_THREADS = 256


@click.command()
@click.argument("study", type=click.Path(path_type=Path, dir_okay=False))
@click.option("--out", type=click.Path(path_type=Path, file_okay=False), metavar="DIR",
              help="Folder for the results; ./<name of the study file> if not given.")
@click.option("--overwrite", is_flag=True, help="Replace an earlier run's files in DIR.")
@click.option("--tables-only", is_flag=True, help="No pictures, no report.")
@click.option("--no-patients", is_flag=True, help="No patients.csv.")
@click.option("--keep-courses", is_flag=True, help="Keep every patient's course: courses.csv.")
@click.option("--threads", type=click.IntRange(1, MOST_THREADS), metavar="N",
              help="Threads to use; NUMBA_NUM_THREADS, or all there are, if not given. Results do not depend on it.")
@click.option("--format", "kind", type=click.Choice(["csv", "parquet"]), default="csv", show_default=True,
              help="Format of the tables; parquet needs an optional extra.")
@click.option("--quiet", is_flag=True, help="No summary.")
@click.option("--json", "as_json", is_flag=True, help="The summary's numbers as JSON.")
def judge(study: Path, out: Path | None, overwrite: bool, tables_only: bool, no_patients: bool, keep_courses: bool,
          threads: int | None, kind: str, quiet: bool, as_json: bool) -> None:
    """Judge the protocols of STUDY in virtual patients."""
    from popsim.study import read_study

    resolved = read_study(study)
    folder = out or Path(study.stem)

    from popsim.output import PatientRows, check_folder, check_format, write_record, write_tables, written_aside

    check_folder(folder, overwrite)
    check_format(kind)

    from popsim.progress import bar, warmed_up
    from popsim.provenance import record_of
    from popsim.run import simulate
    from popsim.tables import all_tables, notes_of
    from popsim.terminal import as_json_text, summary

    warmed_up()
    with written_aside(folder) as aside:
        sink = PatientRows(resolved, aside, kind, not no_patients, keep_courses)
        with bar(resolved.population.count, "simulating") as progress:
            findings = simulate(resolved, threads or default_threads(), keep_courses, sink, progress)
        sink.close()
        tables = all_tables(resolved, findings.tally)
        notes = notes_of(findings, tables)
        write_tables(aside, tables, kind)
        record = record_of(findings, f"popsim judge {study.name}", notes)
        write_record(aside, record)
        if not tables_only:
            from popsim.finished import read_run
            from popsim.pictures.album import draw_all
            from popsim.report import write_report

            pictures = draw_all(read_run(aside), aside)
            write_report(resolved, tables, record, pictures, aside / "report.html")
        bold = sys.stdout.isatty() and "NO_COLOR" not in os.environ
        said = as_json_text(resolved, tables, notes) if as_json else summary(resolved, tables, notes, bold)
    if as_json or not quiet:
        click.echo(said)
    if not quiet:
        click.echo(f"\nResults in {folder}", err=True)


def default_threads() -> int:
    """NUMBA_NUM_THREADS where it is set, else the processors this process may use."""
    given = os.environ.get("NUMBA_NUM_THREADS", "")
    if given.isdigit() and int(given) > 0:
        return min(int(given), MOST_THREADS)
    try:
        return len(os.sched_getaffinity(0))
    except AttributeError:
        return os.cpu_count() or 1
