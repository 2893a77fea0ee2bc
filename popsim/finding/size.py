"""Which body size to dose by: the same protocol by every measure, each scaled to give one reference adult the same."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace

import numpy as np

from covariates.catalogue import EQUATIONS, attributes_needed
from covariates.formula import compile_formula
from covariates.problems import Problem, ProblemsError, nearest
from covariates.units import Quantity, show
from popsim.finding.counting import Asked, Counts, count, fresh, read_asked
from popsim.finding.places import with_doses
from popsim.groups import members
from popsim.lookup import Lookup
from popsim.patients.draw import blocks
from popsim.study_records import Study
from popsim.study_sections import GroupSection, ProtocolSection

FIXED = "fixed"
REFERENCE_ATTRIBUTES = ("sex", "age", "weight", "height")
# What a ward can work out at the bedside, from a scale and a tape or a printed table.
PRACTICAL = (FIXED, "weight", "ideal_body_weight_devine", "ideal_body_weight_robinson", "adjusted_body_weight",
             "lean_body_mass_janmahasatian")
# Source of the limits of body mass index: WHO 2000, Technical Report Series 894; of the ages: our own.
BMI_CLASSES = {"BMI under 25": "bmi < 25", "BMI 25 to 30": "bmi >= 25 and bmi < 30",
               "BMI 30 to 35": "bmi >= 30 and bmi < 35", "BMI 35 to 40": "bmi >= 35 and bmi < 40",
               "BMI 40 and over": "bmi >= 40"}
AGE_CLASSES = {"age under 50": "age < 50", "age 50 to 65": "age >= 50 and age < 65",
               "age 65 to 75": "age >= 65 and age < 75", "age 75 and over": "age >= 75"}
FEWEST = 100  # a class of fewer patients has no say in the ranking
HEAVIER = 1.001


@dataclass(frozen=True)
class SizeFound:
    """The measures in order of rank; every array has one row a measure.

    flatness     largest minus smallest attainment over the classes of body mass index and age
    worst        attainment of the class or group that attains least, `worst_group` its place
    turned_over  share of each group in whom the measure falls while weight rises
    doses        the doses by each measure, as text
    left_out     measures by which some patients cannot be dosed (zero, negative or unknown): how many, and the shares
                 of each group in whom it falls while weight rises
    """

    asked: Asked
    protocol: ProtocolSection
    measures: list[str]
    doses: list[str]
    counts: Counts
    flatness: np.ndarray
    worst: np.ndarray
    worst_group: np.ndarray
    turned_over: np.ndarray
    left_out: dict[str, tuple[int, np.ndarray]]

    @property
    def practical(self) -> list[int]:
        return [place for place, name in enumerate(self.measures) if name in PRACTICAL]


def with_classes(asked: Asked) -> Asked:
    """The study with the classes of body mass index and age as further groups."""
    known = {(group.name, group.where.text) for group in asked.section.group}
    classes = {name: where for name, where in (BMI_CLASSES | AGE_CLASSES).items()
               if (name, where) not in known}
    groups = [GroupSection.model_construct(name=name, where=compile_formula(where, name, "condition"))
              for name, where in classes.items()]
    return read_asked(asked.section.model_copy(update={"group": [*asked.section.group, *groups]}), asked.path)


def read_measures(asked: Asked) -> list[str]:
    """The measures to try: those that [find] names, else every one in the catalogue, and fixed doses."""
    known = [FIXED, "weight", *(name for name, equation in EQUATIONS.items() if equation.unit in ("kg", "m2")
                                and attributes_needed(name) <= set(REFERENCE_ATTRIBUTES))]
    problems = [Problem(f"{asked.path.name}: find: sizes", f'"{name}"', ", ".join(known), nearest(name, known))
                for name in asked.section.find.sizes if name not in known]
    if asked.section.find.reference is None:
        problems.append(Problem(
            f"{asked.path.name}: find: reference", "missing", "the adult who gets the same dose by every measure",
            '[find.reference] with sex = "male", age = "40 years", weight = "70 kg", height = "176 cm"'))
    if problems:
        raise ProblemsError(problems)
    return list(asked.section.find.sizes) or known


def reference_size(asked: Asked, measure: str) -> float:
    """The measure of the study's reference adult."""
    person = asked.section.find.reference
    attributes = {"sex": np.array([person.sex]), **{name: np.array([getattr(person, name).value])
                                                    for name in ("age", "weight", "height")}}
    return float(np.asarray(Lookup(attributes)(measure)).ravel()[0])


def by_measure(asked: Asked, protocol: ProtocolSection, measure: str) -> ProtocolSection:
    """The protocol dosed by another measure, the reference adult's doses unchanged; caps and rounding stay."""
    steps = []
    for step in protocol.dose:
        old = step.by or protocol.by or "weight"
        changed = with_doses(protocol.model_copy(update={"dose": [step]}),
                             lambda dose, old=old: _rescaled(asked, dose, old, measure)).dose[0]
        steps.append(changed.model_copy(update={"by": None}))
    return protocol.model_copy(update={"name": measure, "by": None if measure == FIXED else measure, "dose": steps})


def _rescaled(asked: Asked, dose: Quantity, old: str, measure: str) -> Quantity:
    plain = "rate" if dose.kind.startswith("rate") else "mass"
    value = dose.value * (reference_size(asked, old) if "_per_" in dose.kind else 1.0)
    unit = dose.unit.replace("/kg", "").replace("/m2", "")
    if measure == FIXED:
        return Quantity(value, plain, unit, show(value, unit, plain))
    per = "kg" if measure == "weight" else EQUATIONS[measure].unit
    amount, _, time = unit.partition("/")
    unit = f"{amount}/{per}" + (f"/{time}" if time else "")
    value /= reference_size(asked, measure)
    return Quantity(value, f"{plain}_per_{per}", unit, show(value, unit, f"{plain}_per_{per}"))


def first_doses(protocol: ProtocolSection) -> str:
    """The doses of a protocol in a few words: "1.5 mg/kg, 6 mg/kg/h"."""
    texts = [dose.text for step in protocol.dose for section in (step, *step.band)
             for dose in (section.amount, section.rate) if dose is not None]
    return ", ".join(texts)


def search_sizes(asked: Asked, protocol: ProtocolSection, threads: int = 1) -> SizeFound:
    """Count the protocol by every measure and rank them; `asked` holds the classes already."""
    measures = read_measures(asked)
    over, unfit = look_at(asked.study([protocol]), measures)
    fit = [place for place, many in enumerate(unfit) if not many]
    if not fit:
        raise ProblemsError(Problem(f"{asked.path.name}: find: sizes", ", ".join(measures),
                                    "a measure above zero in every patient", "narrow the population, or add others"))
    measures, left_out = [measures[place] for place in fit], {
        measures[place]: (many, over[place]) for place, many in enumerate(unfit) if many}
    counts = count(asked.study([by_measure(asked, protocol, name) for name in measures]), threads)
    return _ranked(asked, protocol, measures, counts, over[fit], left_out)


def _ranked(asked: Asked, protocol: ProtocolSection, measures: list[str], counts: Counts,
            over: np.ndarray, left_out: dict[str, tuple[int, np.ndarray]]) -> SizeFound:
    attained = counts.attained()[0]
    classes = [place for place in _places(counts, (*BMI_CLASSES, *AGE_CLASSES)) if counts.n[place] >= FEWEST]
    everyone = [place for place in range(len(counts.groups)) if counts.n[place] >= FEWEST] or [0]
    flatness = np.ptp(attained[:, classes], axis=1) if classes else np.zeros(len(measures))
    worst_group = np.array(everyone)[np.argmin(attained[:, everyone], axis=1)]
    worst = attained[np.arange(len(measures)), worst_group]
    ranks = _rank(flatness) + _rank(-worst)
    order = sorted(range(len(measures)), key=lambda place: (ranks[place], -worst[place], place))
    doses = [first_doses(by_measure(asked, protocol, name)) for name in measures]
    return SizeFound(asked, protocol, [measures[p] for p in order], [doses[p] for p in order], counts.taken(order),
                     flatness[order], worst[order], worst_group[order], over[order], left_out)


def _places(counts: Counts, names: Iterable[str]) -> list[int]:
    return [counts.groups.index(name) for name in names if name in counts.groups]


def _rank(values: np.ndarray) -> np.ndarray:
    """1 for the smallest; equal values share the better rank."""
    return 1 + np.array([(values < value - 1e-12).sum() for value in values])


def look_at(study: Study, measures: list[str]) -> tuple[np.ndarray, list[int]]:
    """How measures behave in a study's patients.

    Returns (measures, groups) share of patients in whom a measure falls while weight rises, as lean body mass by James
    does above a body mass index of 43 (men) or 36 kg/m2 (women), and how many patients each measure cannot dose.
    """
    falls, n = np.zeros((len(measures), len(study.group_names))), np.zeros(len(study.group_names))
    unfit = [0] * len(measures)
    for patients in blocks(study.population, study.seed):
        lookup = Lookup(patients.attributes)
        who = members(study.groups, lookup, len(patients)).astype(np.float64)
        n += who.sum(axis=0)
        attributes = {name: values for name, values in patients.attributes.items() if name != "bmi"}
        heavier = Lookup(attributes | {"weight": attributes["weight"] * HEAVIER})
        for place, measure in enumerate(measures):
            if measure != FIXED:
                falls[place] += who.T @ (heavier(measure) < lookup(measure))
                unfit[place] += int((~(lookup(measure) > 0)).sum())
    return falls / np.maximum(n, 1.0), unfit


def confirm_sizes(found: SizeFound, threads: int = 1) -> Counts:
    """The first three measures, the best that a ward can use, and the protocol as written, in fresh patients."""
    wanted = list(dict.fromkeys([0, 1, 2, *found.practical[:1]]))[:4]
    wanted = [place for place in wanted if place < len(found.measures)]
    protocols = [by_measure(found.asked, found.protocol, found.measures[place]) for place in wanted]
    written = found.protocol.model_copy(update={"name": f'as written: "{found.protocol.name}"'})
    study = fresh(found.asked.study([written, *protocols]))
    return count(replace(study, models=study.models[:1]), threads)
