"""popsim find: what to write instead. Size, dose, table, map."""

from __future__ import annotations

import os
import sys
import time
from collections.abc import Callable
from pathlib import Path

import click

from covariates.problems import ProblemsError
from popsim.commands.judge import MOST_THREADS, default_threads

LONG_WORK = 2_000_000  # patients x protocols x targets: beyond, a small part is timed first and the cost told


@click.group()
def find() -> None:
    """Find what to write instead: a body size, a dose, a table, a map.

    Every candidate is tried in the same virtual patients with the same luck;
    what is proposed is then put to fresh patients on whom nothing was tuned.
    What to vary and what is wished stands in the study's [find] section.
    """


def _shared(function: Callable) -> Callable:
    """The options of every search."""
    for option in reversed([
        click.argument("study", type=click.Path(path_type=Path, dir_okay=False)),
        click.option("--protocol", metavar="NAME", help="Which protocol of STUDY to work on."),
        click.option("--target", metavar="NAME", help="Which target of STUDY counts."),
        click.option("--out", type=click.Path(path_type=Path, file_okay=False), metavar="DIR",
                     help="Folder for the results; ./<name of the study file>_<command> if not given."),
        click.option("--overwrite", is_flag=True, help="Replace an earlier run's files in DIR."),
        click.option("--tables-only", is_flag=True, help="No pictures, no report."),
        click.option("--threads", type=click.IntRange(1, MOST_THREADS), metavar="N",
                     help="Threads to use; results do not depend on it."),
        click.option("--format", "kind", type=click.Choice(["csv", "parquet"]), default="csv", show_default=True,
                     help="Format of the tables."),
        click.option("--quiet", is_flag=True, help="No summary."),
        click.option("--json", "as_json", is_flag=True, help="The answer as JSON."),
    ]):
        function = option(function)
    return function


_wish = click.option("--wish", multiple=True, metavar="TEXT",
                     help='What is wished, such as "at least 90 % attained in every group".')


@find.command()
@_shared
@_wish
@click.option("--vary", multiple=True, metavar="PLACE", help='What to vary, such as "dose 2: rate"; at most two.')
@click.option("--over", multiple=True, metavar="RANGE", help='Its range, such as "2 to 12 mg/kg/h", for each --vary.')
@click.option("--steps", type=click.IntRange(2, 400), metavar="N", help="How many values of each to begin with.")
def dose(study: Path, vary: tuple[str, ...], over: tuple[str, ...], steps: int | None, **options) -> None:
    """Vary one or two numbers of a protocol of STUDY: doses, rates, caps, times."""
    if len(vary) != len(over):
        raise click.UsageError("--over stands beside every --vary")
    given = [{"what": what, "over": span} | ({"steps": steps} if steps else {})
             for what, span in zip(vary, over, strict=True)]
    _run("dose", study, _dose, ({"vary": given} if given else {}) | {"wish": list(options.pop("wish"))}, options)


@find.command()
@_shared
def size(study: Path, **options) -> None:
    """Dose a protocol of STUDY by every body size, the reference adult's dose unchanged."""
    _run("size", study, _size, {}, options)


@find.command()
@_shared
@_wish
def table(study: Path, **options) -> None:
    """Make one dose of a protocol of STUDY a rounded table for the ward."""
    _run("table", study, _table, {"wish": list(options.pop("wish"))}, options)


@find.command("map")
@_shared
@click.option("--across", metavar="COVARIATE", help="Covariate across the map; weight if not given.")
@click.option("--up", metavar="COVARIATE", help="Covariate up the map; age if not given.")
@click.option("--level", metavar="SHARE", help='Where the protocol stops working; "80 %" if not given.')
def map_(study: Path, **options) -> None:
    """Show over two covariates where a protocol of STUDY stops working."""
    given = {name: value for name in ("across", "up", "level") if (value := options.pop(name)) is not None}
    _run("map", study, _map, {"map": given} if given else {}, options)


def _run(name: str, study: Path, search: Callable, given: dict, options: dict) -> None:
    """Read, search, draw and leave; the same for every search."""
    from popsim.finding.counting import read_asked
    from popsim.finding.places import chosen_protocol

    given |= {key: options[key] for key in ("protocol", "target") if options[key] is not None}
    section = _read(study, {key: value for key, value in given.items() if value})
    asked, protocol = _both(lambda: read_asked(section, study), lambda: chosen_protocol(section, study.name))
    folder = options["out"] or Path(f"{study.stem}_{name}")

    from popsim.output import check_folder, check_format, written_aside

    check_folder(folder, options["overwrite"])
    check_format(options["kind"])
    threads = options["threads"] or default_threads()
    quiet = options["quiet"]

    def told(text: str) -> None:
        if not quiet:
            click.echo(text, err=True)

    started = time.perf_counter()
    answer, draw = search(asked, protocol, threads, told)
    seconds = time.perf_counter() - started

    from popsim.finding.answer import terminal_text
    from popsim.finding.leave import as_json_text, leave

    with written_aside(folder) as aside:
        if not options["tables_only"]:
            answer.pictures.extend(draw(aside))
        leave(answer, aside, f"popsim find {name} {study.name}", options["kind"], seconds, threads,
              not options["tables_only"])
    bold = sys.stdout.isatty() and "NO_COLOR" not in os.environ
    if options["as_json"] or not quiet:
        click.echo(as_json_text(answer) if options["as_json"] else terminal_text(answer, bold))
    told(f"\nResults in {folder}")


def _read(study: Path, given: dict):
    """The study's sections, with what the command line gives in place of its own."""
    from popsim.study_file import read_find, read_study_file

    section, faults = read_study_file(study)
    if faults:
        raise ProblemsError(faults)
    if not given:
        return section
    stated = read_find(given)
    if "map" in given:
        stated = stated.model_copy(update={"map": section.find.map.model_copy(
            update={key: getattr(stated.map, key) for key in given["map"]})})
    return section.model_copy(update={"find": section.find.model_copy(
        update={key: getattr(stated, key) for key in given})})


def _both(*readers: Callable) -> list:
    """What each reader returns, or the problems of all of them at once."""
    found, problems = [], []
    for read in readers:
        try:
            found.append(read())
        except ProblemsError as error:
            problems += error.problems
    if problems:
        raise ProblemsError(problems)
    return found


def _ready(asked, protocols: list, threads: int, told: Callable[[str], None], what: str) -> None:
    """The solver loaded, and the cost told before a long run."""
    from popsim.progress import warmed_up

    warmed_up()
    from popsim.finding.counting import seconds_expected

    patients = asked.base.population.count
    if patients is None or patients * len(protocols) * (1 + len(asked.limits)) < LONG_WORK:
        return
    expected = seconds_expected(asked.study(protocols), threads)
    told(f"{len(protocols)} {what} x {patients:,} patients: about {expected:.0f} s")


def _dose(asked, protocol, threads: int, told: Callable[[str], None]) -> tuple:
    from popsim.finding.dose import confirm, grid, search, with_point
    from popsim.finding.places import read_vary

    varied = read_vary(asked.section.find, protocol, asked.path.name)
    _ready(asked, [with_point(protocol, varied, point) for point in grid(varied)], threads, told,
           "doses to begin with (up to four times as many in all)")
    found = search(asked, protocol, varied, threads, told)
    whys, confirmed = confirm(found, threads)

    from popsim.finding.answer_dose import dose_answer

    def draw(folder: Path) -> list:
        from popsim.finding.pictures import draw_dose

        return draw_dose(found, folder)

    return dose_answer(found, whys, confirmed), draw


def _size(asked, protocol, threads: int, told: Callable[[str], None]) -> tuple:
    from popsim.finding.size import by_measure, confirm_sizes, read_measures, search_sizes, with_classes

    asked = with_classes(asked)
    measures = [by_measure(asked, protocol, name) for name in read_measures(asked)]
    _ready(asked, measures, threads, told, "measures")
    found = search_sizes(asked, protocol, threads)
    confirmed = confirm_sizes(found, threads)

    from popsim.finding.answer_size import size_answer

    def draw(folder: Path) -> list:
        from popsim.finding.pictures import draw_size

        return draw_size(found, folder)

    return size_answer(found, confirmed), draw


def _table(asked, protocol, threads: int, told: Callable[[str], None]) -> tuple:
    from popsim.finding.table import candidates, read_table, search_table

    _ready(asked, candidates(protocol, *read_table(asked, protocol)), threads, told, "doses")
    found = search_table(asked, protocol, threads)

    from popsim.finding.answer_table import table_answer

    def draw(folder: Path) -> list:
        from popsim.finding.pictures import draw_table

        return draw_table(found, folder)

    return table_answer(found), draw


def _map(asked, protocol, threads: int, told: Callable[[str], None]) -> tuple:
    from popsim.finding.map import search_map

    _ready(asked, [protocol], threads, told, "protocol")
    found = search_map(asked, protocol, threads)

    from popsim.finding.answer_map import map_answer

    def draw(folder: Path) -> list:
        from popsim.finding.pictures import draw_map

        return draw_map(found, folder)

    return map_answer(found), draw
