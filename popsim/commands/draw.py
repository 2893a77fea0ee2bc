"""popsim draw: the pictures of a finished run, drawn again from its tables."""

from __future__ import annotations

from pathlib import Path

import click


@click.command()
@click.argument("folder", metavar="DIR", type=click.Path(path_type=Path, file_okay=False))
@click.option("--format", "kind", type=click.Choice(["svg", "png", "pdf"]), default="svg", show_default=True,
              help="SVG for the web, PNG for slides, PDF for print.")
@click.option("--quiet", is_flag=True, help="No list of what was drawn.")
def draw(folder: Path, kind: str, quiet: bool) -> None:
    """Draw the pictures of the run in DIR again, from its tables alone.

    DIR is a folder that popsim judge left, with or without --tables-only.
    Nothing is simulated; pictures of the same name and format are replaced.
    """
    from popsim.finished import read_run
    from popsim.output import replaced_whole

    run = read_run(folder)

    from popsim.pictures.album import draw_all

    with replaced_whole(folder) as aside:
        pictures = draw_all(run, aside, kind)
    for picture in () if quiet else pictures:
        click.echo(f"{folder / picture.file_name}\n  {picture.title}")
