"""Reads and validates a model sheet -> DrugModel; evaluates its equations in people.

A sheet is one published drug model as data (TOML). DEVELOPERS.md and the shipped sheets show its layout.
"""

from __future__ import annotations

import hashlib
import tomllib
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from importlib import resources
from pathlib import Path

import numpy as np

from covariates.catalogue import compute
from covariates.problems import Problem, ProblemsError, nearest
from covariates.sheet_equations import (
    PARAMETERS, REFERENCE, TYPICAL, SheetEquation, check_names, check_structure, in_order, read_equations,
)  # fmt: skip
from covariates.sheet_reading import (
    BuiltOn, EffectModel, NeededNumber, PrintedSpread, read_built_on, read_effect, read_error, read_measured_in,
    read_needs, read_numbers, read_person, read_source, read_spread,
)  # fmt: skip
from covariates.sheet_section import Section
from covariates.variability import with_effect


@dataclass(frozen=True)
class DrugModel:
    """One published drug model.

    name, drug, title    as in the sheet
    evidence             "seen" or "recalled", the weakest grade among its structural numbers
    source               citation, doi, doi_evidence, further
    built_on             the people it was built on, with their ranges
    measured_in          fluid ("total plasma", "unbound plasma", "whole blood"), fraction_unbound where published,
                         evidence, note
    compartments         1, 2 or 3
    effect               the effect model, or None
    equations            in the order of evaluation
    reference            "NAME_reference" -> number, of the reference person
    reference_person     attribute -> array of one; empty where the sheet names none
    example_person       likewise: whom to show and try the model on, where a usual adult will not do
    printed_spread       equation name -> between-subject variability as printed; empty where none was published
    spread_note          doubts about the spread, and why there is none
    correlations         (name, name) -> correlation of the random effects
    needs                attributes and covariates that the equations use
    switches             name -> what it means when true; the study must set each of them
    numbers              name -> what it means; the patients must bring each of them
    measurement_error    proportional (number), additive (mg/L), evidence, note; what the sheet gives of these
    digest, text         SHA-256 of the file's bytes, and the file
    """

    name: str
    drug: str
    title: str
    evidence: str
    source: dict[str, object]
    built_on: BuiltOn
    measured_in: dict[str, object]
    compartments: int
    effect: EffectModel | None
    equations: tuple[SheetEquation, ...]
    reference: dict[str, float]
    reference_person: dict[str, np.ndarray]
    example_person: dict[str, np.ndarray]
    printed_spread: dict[str, PrintedSpread]
    spread_note: str
    correlations: dict[tuple[str, str], float]
    needs: frozenset[str]
    switches: dict[str, str]
    numbers: dict[str, NeededNumber]
    measurement_error: dict[str, object]
    cautions: tuple[str, ...]
    digest: str
    text: str

    @property
    def has_effect_site(self) -> bool:
        """Whether the sheet gives ke0."""
        return any(equation.name == "ke0" for equation in self.equations)

    @property
    def has_absorption(self) -> bool:
        """Whether the sheet gives ka."""
        return any(equation.name == "ka" for equation in self.equations)

    @property
    def spread(self) -> dict[str, float]:
        """Equation name -> omega, the SD of its random effect: of ln where that is lognormal."""
        return {name: printed.omega for name, printed in self.printed_spread.items()}

    @property
    def spread_forms(self) -> dict[str, str]:
        """Equation name -> form of its random effect (`variability.FORMS`), where it is not lognormal."""
        return {name: printed.form for name, printed in self.printed_spread.items() if printed.form != "lognormal"}

    @property
    def outputs(self) -> tuple[str, ...]:
        """The names that `parameters_of` gives: the solver's parameters, then the effect's."""
        given = {equation.name for equation in self.equations}
        effect = self.effect.names if self.effect else ()
        return tuple(name for name in PARAMETERS if name in given) + effect


def shipped_sheets() -> list[str]:
    """Names of the sheets that come with the package, sorted."""
    folder = resources.files("covariates").joinpath("sheets")
    return sorted(entry.name.removesuffix(".toml") for entry in folder.iterdir() if entry.name.endswith(".toml"))


def read_sheet(name_or_path: str, base: Path | None = None) -> DrugModel:
    """Read a shipped sheet by name, or any sheet by a path that ends in .toml (relative to `base`).

    Raises ProblemsError with all the problems of the sheet at once.
    """
    if name_or_path.endswith(".toml"):
        place = (base or Path()) / name_or_path
        where, stem = place.name, place.stem
    elif name_or_path in shipped_sheets():
        place = resources.files("covariates").joinpath("sheets", f"{name_or_path}.toml")
        where, stem = f"{name_or_path}.toml", name_or_path
    else:
        known = shipped_sheets()
        advice = nearest(name_or_path, known) or "a sheet of your own is named by its path, which ends in .toml"
        raise ProblemsError(Problem(name_or_path, "no such model sheet", ", ".join(known), advice))
    try:
        data = place.read_bytes()
        text = data.decode("utf-8")
        table = tomllib.loads(text)
    except OSError as error:
        raise ProblemsError(Problem(str(place), f"cannot be opened: {error.strerror}", "a model sheet")) from None
    except UnicodeDecodeError:
        raise ProblemsError(Problem(where, "not UTF-8 text", "a TOML file in UTF-8")) from None
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        raise ProblemsError(Problem(where, f"not TOML: {error}", "a TOML file")) from None
    return _model(table, where, stem, text, hashlib.sha256(data).hexdigest())


def _model(table: dict, where: str, stem: str, text: str, digest: str) -> DrugModel:
    """The validated model of one parsed file."""
    problems: list[Problem] = []
    top = Section(table, where, problems)
    name = top.text("name", needed=True)
    if name is not None and name != stem:
        top.problem("name", f'"{name}"', f'"{stem}", as the file is called')
    drug, title = top.text("drug", needed=True), top.text("title", needed=True)
    evidence = top.text("evidence", needed=True, among=("seen", "recalled"))
    source, built_on, measured_in = read_source(top), read_built_on(top), read_measured_in(top)
    person, example = read_person(top, "reference_person"), read_person(top, "example_person")
    switches = read_needs(top)
    numbers = read_numbers(top, switches)
    needed = {*switches, *numbers}
    effect = read_effect(top)
    section = top.section("equations", needed=True)
    units = PARAMETERS | (effect.units if effect else {})
    equations = read_equations(section, evidence or "recalled", units, needed)
    needs, references = check_names(section, equations, needed, person)
    check_structure(section, equations, effect.names if effect else ())
    _check_effect(top, effect, section)
    _check_evidence(top, evidence, equations)
    spread, spread_note, correlations = read_spread(top, section.table)
    measurement_error = read_error(top)
    cautions_section = top.section("cautions")
    cautions = cautions_section.texts("list")
    cautions_section.close()
    top.close()
    ordered = in_order(section, equations)
    if problems:
        raise ProblemsError(problems)
    reference = _reference_values(references, person, f"{where}: reference_person")
    compartments = 1 + ("V2" in equations) + ("V3" in equations)
    model = DrugModel(
        name, drug, title, evidence, source, built_on, measured_in, compartments, effect, ordered, reference, person,
        example, spread, spread_note, correlations, needs, switches, numbers, measurement_error, cautions, digest, text,
    )  # fmt: skip
    _try_out(model, f"{where}: equations")
    return model


def _reference_values(names: frozenset[str], person: Mapping[str, np.ndarray], where: str) -> dict[str, float]:
    """The attributes and covariates of the reference person."""
    try:
        return {name + REFERENCE: float(compute(name, person)[0]) for name in sorted(names)}
    except ProblemsError as error:
        raise ProblemsError(replace(problem, where=f"{where}: {problem.where}") for problem in error.problems) from None


def _check_effect(top: Section, effect: EffectModel | None, section: Section) -> None:
    """An effect model needs an effect site and the equations it names."""
    if effect is None:
        return
    if "ke0" not in section.table:
        top.problem("effect", "an effect model without an effect site", "ke0 among the equations")
    for name in effect.names:
        if name not in section.table:
            advice = nearest(name, section.table)
            top.problem("effect.uses", f'"{name}", which is no equation', "names of equations", advice)


def _check_evidence(top: Section, evidence: str | None, equations: Mapping[str, SheetEquation]) -> None:
    """The sheet's grade is the weakest of its equations'."""
    recalled = [name for name, equation in equations.items() if equation.evidence.startswith("recalled")]
    if evidence == "seen" and recalled:
        found = f'"seen", yet {", ".join(recalled)} recalled'
        top.problem("evidence", found, '"recalled": the weakest grade of its equations')


def parameters_of(
    model: DrugModel,
    lookup: Callable[[str], np.ndarray],
    effects: Mapping[str, np.ndarray],
    count: int | None = None,
    forms: Mapping[str, str] | None = None,
) -> dict[str, np.ndarray]:
    """Individual parameters, each random effect applied before its parameter is used by another equation.

    lookup   name of an attribute, covariate or switch -> array (n,)
    effects  equation name -> (n,) random effect on its logarithm; empty for typical patients
    count    n, needed only where the equations use nothing of the patients
    forms    equation name -> form of its effect, where it is not lognormal; the sheet's own if not given

    Returns `model.outputs` -> (n,) float64 in L, L/min, 1/min; a concentration of the effect model in mg/L, its other
    parameters as they are. In equations, NAME is the individual value and NAME_typical the value that the same person
    would have without any random effect. Nothing is checked or clipped here: the solver marks patients whose volumes or
    flows are not positive.

    Raises ProblemsError as Formula.evaluate does; ValueError for an effect on an unknown equation.
    """
    unknown = set(effects) - {equation.name for equation in model.equations}
    if unknown:
        raise ValueError(f"random effects on what is no equation of {model.name}: {sorted(unknown)}")
    outside = {name: np.asarray(lookup(name)) for name in sorted({*model.needs, *model.switches, *model.numbers})}
    outside |= {name: np.asarray(number) for name, number in model.reference.items()}
    typical = _evaluated(model, outside, {}, {}, {})
    forms = model.spread_forms if forms is None else forms
    individual = _evaluated(model, outside, effects, forms, typical) if effects else typical
    factors = {equation.name: equation.factor for equation in model.equations}
    shapes = {np.shape(value) for value in (*outside.values(), *individual.values())}
    everyone = (count,) if count is not None else np.broadcast_shapes((1,), *shapes)
    return {name: np.array(np.broadcast_to(individual[name] * factors[name], everyone)) for name in model.outputs}


def _evaluated(
    model: DrugModel,
    outside: Mapping[str, np.ndarray],
    effects: Mapping[str, np.ndarray],
    forms: Mapping[str, str],
    typical: Mapping[str, np.ndarray],
) -> dict[str, np.ndarray]:
    """Every equation once, in order; without `typical` the values found are the typical ones themselves."""
    values = dict(outside) | {name + TYPICAL: value for name, value in typical.items()}
    found = {}
    for equation in model.equations:
        value = equation.formula.evaluate(values)
        if equation.name in effects:
            value = with_effect(value, effects[equation.name], forms.get(equation.name, "lognormal"))
        found[equation.name] = values[equation.name] = value
        values.setdefault(equation.name + TYPICAL, value)
    return found


def example_people(model: DrugModel) -> dict[str, np.ndarray]:
    """A woman and a man to show the model on: 40 years, 70 kg, 170 cm, the middle of the ranges that the sheet gives,
    or as its example person. Switches are off, and numbers of the sheet's own are its examples.
    """
    usual = {"age": 40.0, "weight": 70.0, "height": 170.0, "serum_creatinine": 1.0}
    for name in usual:
        limits = model.built_on.ranges.get(name)
        if limits is not None and np.isfinite(limits.low) and np.isfinite(limits.high):
            usual[name] = (limits.low + limits.high) / 2
    usual |= {name: float(value[0]) for name, value in model.example_person.items() if name != "sex"}
    people = {"sex": np.array(["female", "male"])} | {name: np.full(2, value) for name, value in usual.items()}
    people |= {name: np.full(2, number.example) for name, number in model.numbers.items()}
    return people | {name: np.array([False, False]) for name in model.switches}


def _try_out(model: DrugModel, where: str) -> None:
    """In the example people every parameter must come out above zero, and F as no more than 1."""
    people = example_people(model)
    values = parameters_of(model, lambda name: people[name] if name in people else compute(name, people), {})
    problems = []
    for name in PARAMETERS:
        most = 1.0 if name == "F" else np.finfo(float).max
        for i, value in enumerate(values.get(name, ())):
            if not 0 < value <= most:
                found = f"{value:g} (in L and min) in a {people['sex'][i]} of {_described(people, i)}"
                allowed = "above 0, at most 1" if name == "F" else "a finite number above zero"
                problems.append(Problem(f"{where}.{name}.is", found, allowed))
    if problems:
        raise ProblemsError(problems)


def _described(people: Mapping[str, np.ndarray], i: int) -> str:
    return f"{people['age'][i]:g} years, {people['weight'][i]:g} kg, {people['height'][i]:g} cm"
