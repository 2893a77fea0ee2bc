"""Study file -> Study: every name looked up, every quantity in mg, L, min, every problem reported at once."""

from __future__ import annotations

import hashlib
from collections.abc import Iterable
from pathlib import Path

from covariates.catalogue import ATTRIBUTES, attributes_needed
from covariates.formula import Formula
from covariates.problems import Problem, ProblemsError, nearest
from covariates.sheet import DrugModel, read_sheet, shipped_sheets
from covariates.sheet_reading import read_one_spread
from covariates.sheet_section import Section
from popsim.study_file import key_path, read_study_file
from popsim.study_fit import (
    check_listed_windows, check_routes, check_set_windows, check_steady, with_fraction_unbound,
)  # fmt: skip
from popsim.study_population import resolve_population
from popsim.study_protocols import covariate_fault, resolve_protocols
from popsim.study_records import Study, Target, Variability, needs_effect_site
from popsim.study_salvage import beside
from popsim.study_sections import StudyFile, VariabilitySection
from popsim.study_targets import resolve_targets
from popsim.study_values import shown

MOST_GRID_TIMES = 20_001
WORDS = {"number": "a number", "condition": "true or false", "text": "text"}


def read_study(path: Path) -> Study:
    """Read and check a study file; ProblemsError lists all that the user can mend."""
    return resolve_study(*read_study_file(path), path)


def resolve_study(section: StudyFile, faults: list[Problem], path: Path) -> Study:
    """The study that these sections mean; `faults` of shape are told together with those of meaning."""
    problems: list[Problem] = []
    models = with_fraction_unbound(section, _models(section, path, problems), path, problems)
    population, brought = resolve_population(section.population, path, problems)
    attributes = brought | {name: "condition" if isinstance(value, bool) else "number"
                            for name, value in section.population.set.items()}
    until_min, every_min = section.run.until.value, section.run.every.value
    _check_grid(until_min, every_min, path, problems)

    groups = _groups(section, path, problems)
    protocols = resolve_protocols(section.protocol, until_min, attributes, path.name, problems)
    _check_unique("protocol", [protocol.name for protocol in protocols], path, problems)
    check_routes(protocols, models, path, problems)
    targets = resolve_targets(section.target, models, until_min, attributes, path.name, problems)
    check_steady(protocols, targets, path, problems)
    check_set_windows(section, targets, until_min, path, problems)
    check_listed_windows(section, targets, path, problems)
    _check_formulas(section, attributes, path, problems)
    _check_model_needs(models, attributes, path, problems)
    variability = _variability(section.variability, models, path, problems)
    _check_compare(section, [name for name, _ in groups], path, problems)
    if faults or problems:
        raise ProblemsError([*faults, *beside(problems, faults)])
    return Study(
        path=path,
        digest=hashlib.sha256(path.read_bytes()).hexdigest(),
        title=section.title,
        question=section.question,
        seed=section.seed,
        population=population,
        variability=variability,
        groups=groups,
        models=models,
        protocols=protocols,
        targets=targets,
        matters=section.compare.matters.value / 100 if section.compare.matters else None,
        reference=section.compare.reference or (groups[0][0] if groups else None),
        robustness=section.compare.robustness,
        until_min=until_min,
        every_min=every_min,
        warnings=(*population.notes(), *_warnings(section, models, targets, variability)),
    )


def _models(section: StudyFile, path: Path, problems: list[Problem]) -> tuple[DrugModel, ...]:
    models: list[DrugModel] = []
    named = [("model", section.drug.model), *(("repeat_with", name) for name in section.drug.repeat_with)]
    for key, name in named:
        model = _sheet(name, f"drug: {key}", path, problems)
        if model is not None:
            models.append(model)
    if models and len(models) == len(named):
        for other in models[1:]:
            if other.drug != models[0].drug:
                problems.append(Problem(f"{path.name}: drug: repeat_with", f"{other.name}, a model of {other.drug}",
                                        f"other models of {models[0].drug}"))
        _check_unique("drug: model", [model.name for model in models], path, problems)
    return tuple(models)


def _sheet(name: str, where: str, path: Path, problems: list[Problem]) -> DrugModel | None:
    if name.endswith(".toml") or name in shipped_sheets():
        try:
            return read_sheet(name, base=path.parent)
        except ProblemsError as error:
            problems.extend(error.problems)
            return None
    problems.append(Problem(f"{path.name}: {where}", f'"{name}", no such sheet', ", ".join(shipped_sheets()),
                            nearest(name, shipped_sheets()) or "name your own sheet by its path, which ends in .toml"))
    return None


def _groups(section: StudyFile, path: Path, problems: list[Problem]) -> tuple[tuple[str, Formula], ...]:
    names = [group.name for group in section.group]
    _check_unique("group", names, path, problems)
    for index, name in enumerate(names):
        if name == "all":
            problems.append(Problem(f"{path.name}: {key_path('group', index, 'name')}", '"all"', "any other name",
                                    'the group "all" is always there'))
    return tuple((group.name, group.where) for group in section.group)


def _check_unique(what: str, names: Iterable[str], path: Path, problems: list[Problem]) -> None:
    names = list(names)
    for name in sorted({name for name in names if names.count(name) > 1}):
        problems.append(Problem(f"{path.name}: {what}", f'"{name}" twice', "each name once"))


def _check_grid(until_min: float, every_min: float, path: Path, problems: list[Problem]) -> None:
    if until_min <= 0:
        problems.append(Problem(f"{path.name}: run: until", f"{until_min:g} min", "a time above zero"))
    if every_min <= 0:
        problems.append(Problem(f"{path.name}: run: every", f"{every_min:g} min", "a time above zero"))
    elif until_min / every_min > MOST_GRID_TIMES - 1:
        problems.append(Problem(f"{path.name}: run: every", f"{until_min / every_min:.0f} times in the tables",
                                f"at most {MOST_GRID_TIMES - 1}",
                                "a longer step; time in range is exact whatever it is"))


def _formulas(section: StudyFile) -> Iterable[tuple[tuple, Formula]]:
    if section.population.where is not None:
        yield ("population", "where"), section.population.where
    for index, group in enumerate(section.group):
        yield ("group", index, "where"), group.where
    for index, protocol in enumerate(section.protocol):
        for number, dose in enumerate(protocol.dose):
            if dose.where is not None:
                yield ("protocol", index, "dose", number, "where"), dose.where
            for place, band in enumerate(dose.band):
                yield ("protocol", index, "dose", number, "band", place, "where"), band.where


def _check_formulas(section: StudyFile, attributes: dict[str, str], path: Path, problems: list[Problem]) -> None:
    for key, formula in _formulas(section):
        where = f"{path.name}: {key_path(*key)}"
        for name, use in sorted(formula.uses):
            fault = covariate_fault(name, attributes)
            is_now = attributes.get(name, "number")
            if fault is not None:
                problems.append(Problem(where, *fault))
            elif is_now not in ("", use):
                allowed = f'a comparison, such as "{name} > 0"' if is_now == "number" else f'"{name}" or "not {name}"'
                problems.append(Problem(where, f'"{name}" is {WORDS[is_now]} but is used as {WORDS[use]}', allowed))


def _check_model_needs(models: tuple[DrugModel, ...], attributes: dict[str, str], path: Path,
                       problems: list[Problem]) -> None:
    for model in models:
        for name, meaning in model.switches.items():
            if name not in attributes:
                problems.append(Problem(f"{path.name}: population: set",
                                        f"{name} is missing, and {model.name} needs it",
                                        f"true or false ({meaning})", f"under [population.set]: {name} = true"))
            elif attributes[name] not in ("", "condition"):
                problems.append(Problem(f"{path.name}: population: set", f"{name} is {WORDS[attributes[name]]}",
                                        f"true or false ({meaning})", f"under [population.set]: {name} = true"))
        for name, number in model.numbers.items():
            if attributes.get(name) not in ("", "number"):
                problems.append(Problem(f"{path.name}: population", f"no number {name}, and {model.name} needs it",
                                        number.means, f"under [population.set], or a column of the list: {name}"))
        asked = model.needs | set(model.built_on.ranges) | ({"sex"} if model.built_on.sex else set())
        lacking = set().union(*(attributes_needed(name, attributes) for name in asked))
        for name in sorted(lacking):
            problems.append(Problem(f"{path.name}: population", f"no {name}, and {model.name} needs it",
                                    f"a population with {name} ({ATTRIBUTES[name] or 'female, male'})"))


def _variability(section: VariabilitySection, models: tuple[DrugModel, ...], path: Path,
                 problems: list[Problem]) -> Variability:
    def say(key: str, found: str, allowed: str, advice: str = "") -> None:
        problems.append(Problem(f"{path.name}: {key}", found, allowed, advice))

    borrowed = None
    if section.from_ is not None:
        borrowed = _sheet(section.from_, "variability: from", path, problems)
        if not section.between_subject:
            say("variability: from", "given with between_subject = false", "one of the two",
                "typical patients have no variability to borrow")
        if borrowed is not None and not borrowed.spread:
            say("variability: from", f"{borrowed.name}, which publishes none itself",
                "a sheet with between-subject variability")
        if borrowed is not None and models and borrowed.drug != models[0].drug:
            say("variability: from", f"{borrowed.name}, a model of {borrowed.drug}", f"a model of {models[0].drug}")
    own = _own_variability(section, models, f"{path.name}: variability: parameters", problems)
    if borrowed is None and section.from_ is None and section.between_subject:
        for model in models:
            if not model.spread and not own.keys() & {equation.name for equation in model.equations}:
                lenders = [name for name in shipped_sheets()
                           if (other := read_sheet(name)).drug == model.drug and other.spread]
                say("variability", f"{model.name} publishes no between-subject variability",
                    "between_subject = false (typical patients), or from = another sheet",
                    f"sheets of {model.drug} with variability: {', '.join(lenders)}" if lenders else "")
    return Variability(section.between_subject, section.scale, borrowed, own)


def _own_variability(section: VariabilitySection, models: tuple[DrugModel, ...], where: str,
                     problems: list[Problem]) -> dict[str, tuple[float, str]]:
    """The variability that a study gives itself, parameter by parameter; "none" takes it away."""
    example = '{ value = 0.3, printed_as = "cv" }, or "none"'
    known = {equation.name for model in models for equation in model.equations}
    own = {}
    for name, value in section.parameters.items():
        if not section.between_subject:
            problems.append(Problem(where, f"{name}, given with between_subject = false", "one of the two"))
        elif models and name not in known:
            problems.append(Problem(where, f'"{name}"', ", ".join(sorted(known)), nearest(name, known)))
        elif value == "none":
            own[name] = 0.0, "lognormal"
        elif not isinstance(value, dict):
            problems.append(Problem(f"{where}: {name}", shown(value), example))
        else:
            entry = Section(value, f"{where}: {name}", problems)
            found = read_one_spread(entry)
            entry.close()
            if found is not None:
                own[name] = found.omega, found.form
    return own


def _check_compare(section: StudyFile, groups: list[str], path: Path, problems: list[Problem]) -> None:
    matters, reference = section.compare.matters, section.compare.reference
    if matters is not None and not 0 < matters.value <= 100:
        problems.append(Problem(f"{path.name}: compare: matters", f'"{matters.text}"', "above 0 % and up to 100 %"))
    if reference is not None and reference not in groups:
        problems.append(Problem(f"{path.name}: compare: reference", f'"{reference}"', "the name of a [[group]]",
                                nearest(reference, groups)))


def _warnings(section: StudyFile, models: tuple[DrugModel, ...], targets: tuple[Target, ...],
              variability: Variability) -> Iterable[str]:
    if section.drug.fraction_unbound is not None:
        yield (f"Fraction unbound {section.drug.fraction_unbound:g}, the same in everyone: "
               f"{section.drug.fraction_unbound_source}.")
    for model in models:
        if model.measured_in["fluid"] == "whole blood" and any(not needs_effect_site(target) for target in targets):
            yield f"{model.name} was built on whole blood: its concentrations are not those of plasma."
    if any(target.measured for target in targets):
        yield ("Levels are judged as an assay would measure them, the model's residual error included; "
               "they are not the true concentrations.")
    for target in section.target:
        if target.isolates_source is not None:
            yield f"Isolates: {target.isolates_source}."
    if len(models) > 1 and any(needs_effect_site(target) for target in targets):
        yield ("Each ke0 defines an effect site of its own: an effect-site range does not mean the same under "
               "another model, so these results are not to be compared between models.")
    if variability.from_model is not None and variability.between_subject:
        yield (f"Between-subject variability is borrowed from {variability.from_model.name} (volumes and clearances; "
               "correlations that it does not give are taken to be 0).")
    if variability.own:
        said = ", ".join(f"{name} {f'{omega:.4g} ({form})' if omega else 'none'}"
                         for name, (omega, form) in variability.own.items())
        yield f"The study sets between-subject variability itself (SD of the random effect): {said}."
    if not variability.between_subject:
        yield "Typical patients: no between-subject variability, so these shares say nothing about single patients."
    elif variability.scale != 1:
        yield f"Between-subject variability is scaled by {variability.scale:g}."
