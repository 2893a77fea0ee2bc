"""Whether a study's models, protocols and targets fit each other and its patients; collects every problem."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

from covariates.problems import Problem, ProblemsError
from covariates.sheet import DrugModel
from popsim.patients.listed import read_list
from popsim.study_records import Protocol, Target
from popsim.study_sections import StudyFile


def with_fraction_unbound(section: StudyFile, models: tuple[DrugModel, ...], path: Path,
                           problems: list[Problem]) -> tuple[DrugModel, ...]:
    """The models, with the study's own fraction unbound; refused where a sheet has one, or has no use for it."""
    share, source = section.drug.fraction_unbound, section.drug.fraction_unbound_source
    if (share is None) != (source is None):
        missing = "fraction_unbound" if share is None else "fraction_unbound_source"
        problems.append(Problem(f"{path.name}: drug: {missing}", "missing", "both, or neither",
                                'fraction_unbound = 0.2 with fraction_unbound_source = "where the number comes from"'))
    if share is None or source is None:
        return models
    where = f"{path.name}: drug: fraction_unbound"
    if share == 0:
        problems.append(Problem(where, "0", "above 0 and up to 1"))
    for model in models:
        if "fraction_unbound" in model.measured_in:
            problems.append(Problem(where, f"given, but {model.name} has its own "
                                           f"({model.measured_in['fraction_unbound']:g})", "no fraction_unbound"))
        elif model.measured_in["fluid"] != "total plasma":
            problems.append(Problem(where, f"given, but {model.name} was built on {model.measured_in['fluid']}",
                                    "a model built on total plasma"))
    return tuple(replace(model, measured_in=model.measured_in | {"fraction_unbound": share}) for model in models)


def check_routes(protocols: tuple[Protocol, ...], models: tuple[DrugModel, ...], path: Path,
                  problems: list[Problem]) -> None:
    for protocol in protocols:
        if any(step.oral for step in protocol.steps):
            for model in models:
                if not model.has_absorption:
                    problems.append(Problem(f'{path.name}: protocol "{protocol.name}": route',
                                            f'"oral", but {model.name} has no absorption', "a model with ka, or iv"))


def check_steady(protocols: tuple[Protocol, ...], targets: tuple[Target, ...], path: Path,
                  problems: list[Problem]) -> None:
    for protocol in protocols if any(target.steady for target in targets) else ():
        if not any(step.maintained for step in protocol.steps):
            problems.append(Problem(f"{path.name}: target: during", f'"steady state", but nothing in "{protocol.name}" '
                                    "repeats to the run's end", "a step with every, and without times",
                                    'every = "12 h"'))


def check_listed_windows(section: StudyFile, targets: tuple[Target, ...], path: Path,
                          problems: list[Problem]) -> None:
    """A column of the list that bounds a window must count minutes or hours."""
    named = {edge for target in targets for edge in (target.start, target.end) if isinstance(edge, str)}
    named -= section.population.set.keys()
    if not named or section.population.source != "list" or section.population.file is None:
        return
    try:
        people = read_list(path.parent / section.population.file, section.population.on_bad_row or "stop")
    except ProblemsError:
        return  # told when the population is read
    for name in sorted(named & people.attributes.keys()):
        if people.attributes[name].dtype.kind == "b":
            problems.append(Problem(f"{path.name}: target: during", f'"{name}", which is true or false in the list',
                                    "a column that counts minutes or hours"))


def check_set_windows(section: StudyFile, targets: tuple[Target, ...], until_min: float, path: Path,
                       problems: list[Problem]) -> None:
    """A window whose end is set for everyone can be checked now; one from a list's column only with the patients."""
    values = {name: value * (60.0 if name.endswith("_h") else 1.0) for name, value in section.population.set.items()}
    for target in (target for target in targets if not target.steady):
        start, end = (values.get(edge, edge) for edge in (target.start, target.end))
        known = not isinstance(start, str) and not isinstance(end, str)
        if known and not 0 <= start <= end <= until_min:
            problems.append(Problem(f"{path.name}: target: during", f"{start:g} min to {end:g} min",
                                    f"a window from start to end, within the run ({until_min:g} min)"))
