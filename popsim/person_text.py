"""What `popsim person` prints: every covariate of one person, or of each person of a list, with its flags."""

from __future__ import annotations

import csv
import io
from collections.abc import Iterable, Mapping

import numpy as np

from covariates.body_size import BMI_CLASSES_WHO
from covariates.catalogue import ATTRIBUTES, EQUATIONS, attributes_needed
from covariates.flags import flags_of
from covariates.problems import Problem, ProblemsError
from covariates.sheet import DrugModel, parameters_of
from popsim.lookup import Lookup
from popsim.model_text import parameter_words, wrapped
from popsim.parameters import outside_ranges
from popsim.ward_card import describe


def person_text(person: Mapping[str, np.ndarray], models: Iterable[DrugModel]) -> str:
    """One person's covariates (attributes are arrays of one), what misleads among them, and typical parameters."""
    models = list(models)
    _check_needs(models, person)
    lookup, names = Lookup(person), covariates_known(person)
    width = max(map(len, names), default=0)
    marks = [flag for flag, mark in flags_in(person, lookup, names).items() if mark[0]]
    flagged = {equation for equation, _ in marks}
    lines = [f"Covariates of a {describe(person, 0)}", ""]
    for name in names:
        value = float(lookup(name)[0])
        shown = BMI_CLASSES_WHO[int(value)] if name == "bmi_class_who" else f"{value:.4g} {EQUATIONS[name].unit}"
        lines.append(f"{'!' if name in flagged else ' '} {name:<{width}}  {shown}")
    lines += [""] if marks else []
    for equation, words in marks:
        lines += wrapped(f"{equation} misleads in people who are {words}.", "! ")
    unknown = [name for name in EQUATIONS if name not in names]
    if unknown:
        lacking = sorted({attribute for name in unknown for attribute in attributes_needed(name, person)})
        lines += ["", *wrapped(f"Not shown for want of {', '.join(lacking)}: {', '.join(unknown)}.", "")]
    for model in models:
        lines += ["", *_model_lines(model, lookup)]
    return "\n".join(line.rstrip() for line in lines)


def people_csv(people: Mapping[str, np.ndarray], labels: Iterable[object], models: Iterable[DrugModel]) -> str:
    """A CSV with a row per person: patient, attributes, covariates, flags, each model's typical parameters."""
    models = list(models)
    _check_needs(models, people)
    lookup, names = Lookup(people), covariates_known(people)
    columns: dict[str, Iterable] = {"patient": list(labels)}
    columns |= people | {name: lookup(name) for name in names}
    flags = flags_in(people, lookup, names)
    count = len(columns["patient"])
    columns["flags"] = ["; ".join(f"{equation}: {words}" for (equation, words), mark in flags.items() if mark[i])
                        for i in range(count)]
    for model in models:
        typical = parameters_of(model, lookup, {}, count)
        columns |= {f"{model.name} {name}": value for name, value in typical.items()}
        beyond = outside_ranges(model, lookup)
        columns[f"{model.name} outside"] = [" ".join(name for name, mark in beyond.items() if mark[i])
                                            for i in range(count)]
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(columns)
    writer.writerows(zip(*(_cells(column) for column in columns.values()), strict=True))
    return out.getvalue().rstrip("\n")


def covariates_known(given: Iterable[str]) -> list[str]:
    """The equations that follow from these attributes, in the catalogue's order, less those that were brought."""
    given = set(given)
    return [name for name in EQUATIONS if name not in given and not attributes_needed(name, given)]


def flags_in(people: Mapping[str, np.ndarray], lookup: Lookup,
             names: Iterable[str]) -> dict[tuple[str, str], np.ndarray]:
    """(equation, words) -> whom it is true of, over all these covariates."""
    found: dict[tuple[str, str], np.ndarray] = {}
    for name in names:
        found |= flags_of(name, lookup, people)
    return found


def _model_lines(model: DrugModel, lookup: Lookup) -> list[str]:
    values = {name: float(value[0]) for name, value in parameters_of(model, lookup, {}, 1).items()}
    lines = [f"{model.name}, typical values", *wrapped(", ".join(parameter_words(values)), "  ")]
    wrong = [name for name in ("V1", "V2", "V3", "CL") if name in values and not 0 < values[name] < np.inf]
    if wrong:
        lines += wrapped(f"{', '.join(wrong)} not above 0: the model cannot be used in this person.", "  ! ")
    beyond = [name for name, mark in outside_ranges(model, lookup).items() if mark[0]]
    if beyond:
        lines += wrapped(f"outside the people that it was built on by {', '.join(beyond)}", "  ! ")
    return lines


def _check_needs(models: Iterable[DrugModel], people: Mapping[str, np.ndarray]) -> None:
    """ProblemsError names all that the models need and these people do not have."""
    problems = []
    for model in models:
        problems += [Problem(model.name, f"no {name}", f"true or false ({means})", f"--set {name}=false")
                     for name, means in model.switches.items() if name not in people]
        problems += [Problem(model.name, f"no {name}", number.means, f"--set {name}={number.example:g}")
                     for name, number in model.numbers.items() if name not in people]
        wanted = {*model.needs, *model.built_on.ranges, *(["sex"] if model.built_on.sex else [])}
        lacking = set().union(*(attributes_needed(name, people) for name in wanted))
        problems += [Problem(model.name, f"no {name}", f"{name} in {ATTRIBUTES[name] or 'words'}")
                     for name in sorted(lacking)]
    if problems:
        raise ProblemsError(problems)


def _cells(column: Iterable) -> list[object]:
    """As written to a file: switches as true and false, floats so that they come back the same."""
    values = column.tolist() if isinstance(column, np.ndarray) else column
    return [str(value).lower() if isinstance(value, bool) else value for value in values]
