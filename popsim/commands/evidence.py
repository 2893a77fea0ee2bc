"""popsim evidence: every outside check recomputed."""

from __future__ import annotations

import click


@click.command()
@click.option("--sources", is_flag=True, help="Show the source of each claim, and why its tolerance.")
@click.option("--json", "as_json", is_flag=True, help="Everything as JSON.")
def evidence(sources: bool, as_json: bool) -> int:
    """Recompute every outside check and print the table.

    Claims come from papers, open data and mathematics. Where popsim does not
    agree and why is known, the reason stands below the table. Exit code 1 if
    anything else disagrees. Some claims need packages that are installed with
    pip install "popsim[test]"; without them they are listed as not run.
    """
    from popsim.errors import DONE, OURS
    from popsim.evidence.check import UNSOUND, check_all
    from popsim.evidence.words import as_json_text, table
    from popsim.progress import warmed_up

    warmed_up()
    answers = list(check_all())
    click.echo(as_json_text(answers) if as_json else table(answers, sources))
    return OURS if any(answer.status in UNSOUND for answer in answers) else DONE
