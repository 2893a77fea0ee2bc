"""popsim person: every covariate of one person, or of each person of a list."""

from __future__ import annotations

from pathlib import Path

import click


@click.command()
@click.option("--sex", type=click.Choice(["female", "male"]))
@click.option("--age", metavar="AGE", help='Years, or with a unit: "6 months".')
@click.option("--weight", metavar="WEIGHT", help='kg, or with a unit: "3500 g".')
@click.option("--height", metavar="HEIGHT", help='cm, or with a unit: "1.7 m".')
@click.option("--creatinine", metavar="SCR", help='Serum creatinine, always with its unit: "80 umol/L", "0.9 mg/dL".')
@click.option("--file", type=click.Path(path_type=Path, dir_okay=False),
              help="A list of people (CSV) instead of one; prints a CSV.")
@click.option("--model", "names", multiple=True, metavar="NAME",
              help="Typical parameters of this model too; repeatable.")
@click.option("--set", "settings", multiple=True, metavar="NAME=VALUE",
              help="What a model needs besides, such as opioid=true; repeatable.")
def person(sex: str | None, age: str | None, weight: str | None, height: str | None, creatinine: str | None,
           file: Path | None, names: tuple[str, ...], settings: tuple[str, ...]) -> None:
    """Every covariate of a person side by side, with what misleads among them.

    \b
    popsim person --sex female --age 70 --weight 110 --height 160
    popsim person --file people.csv --model propofol_eleveld_2018 --set opioid=true
    """
    import numpy as np

    from covariates.problems import Problem, ProblemsError
    from covariates.sheet import read_sheet
    from popsim.person_text import people_csv, person_text

    given = {"age": age, "weight": weight, "height": height, "serum_creatinine": creatinine}
    brought = [name for name, value in {"sex": sex, **given}.items() if value is not None]
    models = [read_sheet(name) for name in names]
    if file is not None:
        if brought:
            raise ProblemsError(Problem("--file", f"given beside {', '.join(brought)}", "a list, or one person"))
        from popsim.patients.listed import read_list

        listed = read_list(file)
        labels = listed.rows + 1 if listed.labels is None else listed.labels
        people = {name: np.full(len(listed.rows), value) for name, value in _settings(settings).items()}
        if twice := sorted(people.keys() & listed.attributes.keys()):
            raise ProblemsError(Problem("--set", f"{', '.join(twice)}, which the list has too", "one of the two"))
        click.echo(people_csv(people | listed.attributes, labels.tolist(), models))
        return
    if not brought:
        raise ProblemsError(Problem("popsim person", "nobody",
                                    "--sex, --age, --weight, --height, --creatinine, or --file"))
    one = ({} if sex is None else {"sex": sex}) | _numbers(given) | _settings(settings)
    click.echo(person_text({name: np.array([value]) for name, value in one.items()}, models))


def _numbers(given: dict[str, str | None]) -> dict[str, float]:
    """Attribute -> value in its own unit; a creatinine without a unit is refused, since both units are in use."""
    from covariates.problems import ProblemsError
    from covariates.units import parse_quantity

    kinds = {"age": ("age", "number"), "weight": ("body_weight", "number"), "height": ("height", "number"),
             "serum_creatinine": ("creatinine",)}
    values, problems = {}, []
    for name, text in given.items():
        if text is not None:
            try:
                values[name] = parse_quantity(text, kinds[name], f"--{name.removeprefix('serum_')}").value
            except ProblemsError as error:
                problems += error.problems
    if problems:
        raise ProblemsError(problems)
    return values


def _settings(settings: tuple[str, ...]) -> dict[str, bool | float]:
    """"opioid=true" -> {"opioid": True}."""
    from covariates.catalogue import ATTRIBUTES, EQUATIONS
    from covariates.problems import Problem, ProblemsError
    from popsim.patients.listed import NUMBER

    values: dict[str, bool | float] = {}
    for setting in settings:
        name, _, text = setting.partition("=")
        if not name.isidentifier() or name in ATTRIBUTES or name in EQUATIONS:
            raise ProblemsError(Problem("--set", f'"{setting}"', "a name of a model's own: opioid=true"))
        if text not in ("true", "false") and not NUMBER.fullmatch(text):
            raise ProblemsError(Problem("--set", f'"{setting}"', "NAME=true, NAME=false or NAME=number"))
        values[name] = float(text) if NUMBER.fullmatch(text) else text == "true"
    return values
