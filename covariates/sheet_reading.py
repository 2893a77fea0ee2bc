"""The sections of a model sheet other than [equations]: each function reads one, noting its problems."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass

import numpy as np

from covariates.catalogue import ATTRIBUTES, EQUATIONS
from covariates.problems import nearest
from covariates.sheet_section import Section
from covariates.units import Quantity, Range
from covariates.variability import covariance_from, omega_from_cv, omega_from_variance

FLUIDS = ("total plasma", "unbound plasma", "whole blood")
SAMPLING = ("arterial", "venous", "arterial and venous")
_SEXES = ("female", "male")
_RANGES = {
    "age": "age", "weight": "body_weight", "height": "height", "bmi": "body_mass_index",
    "serum_creatinine": "creatinine", "postmenstrual_age_weeks": "postmenstrual_age",
}  # fmt: skip
# distribution and how its spread is printed -> the SD of the random effect, and the form in which the effect acts
_TO_SD = {
    "lognormal": {"sd of ln": (float, "lognormal"), "variance of ln": (omega_from_variance, "lognormal"),
                  "cv": (omega_from_cv, "lognormal")},
    "normal": {"sd": (float, "normal"), "variance": (omega_from_variance, "normal"), "cv": (float, "normal, relative")},
    "logit-normal": {"sd of logit": (float, "logit-normal"),
                     "variance of logit": (omega_from_variance, "logit-normal")},
}  # fmt: skip
_LARGEST_SPREAD, _LARGEST_IN_OWN_UNIT = 3.0, 1e6


@dataclass(frozen=True)
class BuiltOn:
    """The people a model was built on.

    people                a sentence
    count                 how many, or None where not known
    ranges                attribute or bmi -> Range (years, kg, cm, kg/m2, mg/dL, wk); only what is known
    sex                   "female" or "male" where only they were studied, else None
    doses                 the doses that were studied, in words, or empty
    longest_infusion_min  or None where not known
    largest_total         most that anyone was given in all, mg or mg/kg, or None where not known
    sampling              "arterial", "venous", "arterial and venous", or empty
    evidence, note        how far this is known
    """

    people: str
    count: int | None
    ranges: dict[str, Range]
    sex: str | None
    doses: str
    longest_infusion_min: float | None
    largest_total: Quantity | None
    sampling: str
    evidence: str
    note: str


@dataclass(frozen=True)
class NeededNumber:
    """A number that the patients must bring: what it means, and an example to show the model with."""

    means: str
    example: float


@dataclass(frozen=True)
class PrintedSpread:
    """Between-subject variability of one equation as it was printed; `printed_as` says which number that is.

    omega  SD of the random effect; `form` (`variability.FORMS`) says how the effect acts
    """

    value: float
    printed_as: str
    evidence: str
    omega: float
    form: str = "lognormal"


@dataclass(frozen=True)
class EffectModel:
    """The sigmoid effect: baseline + (at_infinity - baseline) Ce^g / (half^g + Ce^g), each part an equation's name.

    g is `steepness`, and above `half` it is `steepness_above` where that is given. `half` is a concentration.
    `low_means` and `high_means` say in words what an effect below and above a range means ("too deep").
    """

    name: str
    unit: str
    baseline: str
    at_infinity: str
    half: str
    steepness: str
    steepness_above: str | None
    low_means: str
    high_means: str

    @property
    def names(self) -> tuple[str, ...]:
        """The equations it uses."""
        parts = (self.baseline, self.at_infinity, self.half, self.steepness, self.steepness_above)
        return tuple(dict.fromkeys(part for part in parts if part))

    @property
    def units(self) -> dict[str, str]:
        """Equation -> kind of its unit."""
        return {name: "concentration" if name == self.half else "number" for name in self.names}


def read_source(top: Section) -> dict[str, object]:
    """[source]: citation, doi, doi_evidence, further."""
    section = top.section("source", needed=True)
    if section.table:
        section.text("citation", needed=True)
    found = {key: section.text(key) for key in ("citation", "doi", "doi_evidence")} if section.table else {}
    further = section.texts("further")
    section.close()
    return {key: value for key, value in found.items() if value} | {"further": further}


def read_built_on(top: Section) -> BuiltOn:
    """[built_on]: the people, their ranges, the longest infusion, the sampling."""
    section = top.section("built_on", needed=True)
    people = section.text("people", needed=bool(section.table)) or ""
    count = section.whole_number("count")
    ranges = {name: found for name, kind in _RANGES.items() if (found := section.range(name, kind)) is not None}
    sex = section.text("sex", among=_SEXES)
    doses, longest = section.text("doses") or "", section.quantity("longest_infusion", "time")
    largest = section.measure("largest_total", ("mass", "mass_per_kg"))
    sampling = section.text("sampling", among=SAMPLING) or ""
    evidence, note = section.text("evidence") or "", section.text("note") or ""
    section.close()
    return BuiltOn(people, count, ranges, sex, doses, longest, largest, sampling, evidence, note)


def read_measured_in(top: Section) -> dict[str, object]:
    """[measured_in]: the fluid, the fraction unbound where published."""
    section = top.section("measured_in", needed=True)
    found = {
        "fluid": section.text("fluid", needed=bool(section.table), among=FLUIDS),
        "fraction_unbound": section.number("fraction_unbound", 0, 1),
        "evidence": section.text("evidence"),
        "note": section.text("note"),
    }
    if found["fluid"] == "unbound plasma" and found["fraction_unbound"] is not None:
        allowed = "none: the concentrations are unbound already, and the fraction is never applied twice"
        section.problem("fraction_unbound", f"{found['fraction_unbound']:g}", allowed)
    section.close()
    return {key: value for key, value in found.items() if value is not None}


def read_person(top: Section, key: str) -> dict[str, np.ndarray]:
    """[reference_person] or [example_person]: attribute -> array of one, empty where the sheet has none."""
    section = top.section(key)
    sex = section.text("sex", among=_SEXES)
    person = {} if sex is None else {"sex": np.array([sex])}
    for name, kind in _RANGES.items():
        value = section.quantity(name, kind) if name in ATTRIBUTES else None
        if value is not None:
            person[name] = np.array([value])
    section.close()
    return person


def read_needs(top: Section) -> dict[str, str]:
    """[needs]: switch -> what it means when true."""
    section = top.section("needs")
    switches = {}
    for name, meaning in section.pairs():
        if not isinstance(meaning, str) or not meaning.strip():
            section.problem(name, f"{meaning!r:.100}", 'what it means: "true when ..."')
        elif name in ATTRIBUTES or name in EQUATIONS or not name.isidentifier():
            section.problem(name, "no name for a switch", "a name of its own, such as venous_sampling")
        else:
            switches[name] = meaning
    return switches


def read_numbers(top: Section, switches: Collection[str]) -> dict[str, NeededNumber]:
    """[needs_numbers]: attribute of the sheet's own -> what it means, and an example."""
    section = top.section("needs_numbers")
    numbers = {}
    for name, entry in section.entries('{ means = "days since the burn", example = 10 }'):
        means, example = entry.text("means", needed=True), entry.number("example", -np.inf, np.inf, needed=True)
        entry.close()
        if name in ATTRIBUTES or name in EQUATIONS or name in switches or not name.isidentifier():
            section.problem(name, "no name for an attribute of its own", "a name of its own, such as days_after_burn")
        elif means is not None and example is not None:
            numbers[name] = NeededNumber(means, example)
    return numbers


def read_effect(top: Section) -> EffectModel | None:
    """[effect]: what the effect is called and which equations it uses."""
    section = top.section("effect")
    if "effect" not in top.table:
        return None
    texts = {key: section.text(key, needed=True) for key in ("name", "low_means", "high_means")}
    unit = section.table.get("unit", "")
    section.take("unit", False, "")
    uses = section.section("uses", needed=True)
    parts = {key: uses.text(key, needed=True) for key in ("baseline", "at_infinity", "half", "steepness")}
    above = uses.text("steepness_above")
    uses.close()
    section.close()
    if not isinstance(unit, str):
        section.problem("unit", f"{unit!r:.100}", "text in quotes")
    if None in texts.values() or None in parts.values():
        return None
    return EffectModel(unit=str(unit), steepness_above=above, **texts, **parts)


def read_spread(
    top: Section, equations: Collection[str]
) -> tuple[dict[str, PrintedSpread], str, dict[tuple[str, str], float]]:
    """[spread] and [spread_together]: what was printed, the note, correlations.

    equations  names of all equations, also of those that cannot be read, which is told already
    """
    section = top.section("spread", needed=True)
    published = section.flag("published", True)
    note = section.text("note") or ""
    usual = section.text("printed_as", among=_TO_SD["lognormal"])
    printed, told = {}, False
    for name, entry in section.entries('{ value = 0.26, evidence = "seen" }'):
        spread = read_one_spread(entry, usual)
        told = told or spread is None
        if name not in equations:
            section.problem(name, "spread on a name that is no equation", " ".join(equations), nearest(name, equations))
        elif spread is not None:
            printed[name] = spread
        entry.close()
    if "spread" in top.table and published and not printed and not told:
        section.problem("published", "no spread given", "values, or published = false")
    if not published and printed:
        section.problem("published", "false, yet values are given", "published = true")
    return printed, note, _read_together(top, {name: spread.omega for name, spread in printed.items()})


def read_one_spread(entry: Section, usual: str | None = None) -> PrintedSpread | None:
    """One spread, whatever way it was printed.

    usual  how a lognormal spread was printed where the entry does not say
    """
    distribution = entry.text("distribution", among=_TO_SD) or "lognormal"
    ways = _TO_SD[distribution]
    printed_as = entry.text("printed_as", among=ways) or (usual if distribution == "lognormal" else None)
    own_unit = printed_as in ("sd", "variance")
    advice = "" if own_unit else "write 0.26 for 26 %"
    value = entry.number("value", 0, _LARGEST_IN_OWN_UNIT if own_unit else _LARGEST_SPREAD, needed=True, advice=advice)
    evidence = entry.text("evidence") or ""
    entry.text("note")
    if printed_as is None:
        entry.problem("printed_as", "missing", ", ".join(ways))
        return None
    to_sd, form = ways[printed_as]
    return None if value is None else PrintedSpread(value, printed_as, evidence, float(to_sd(value)), form)


def _read_together(top: Section, omegas: dict[str, float]) -> dict[tuple[str, str], float]:
    """[spread_together]: "V1, CL" = 0.3."""
    section = top.section("spread_together")
    correlations = {}
    for key, value in section.pairs():
        pair = tuple(part.strip() for part in key.split(","))
        if len(pair) != 2 or pair[0] == pair[1] or not set(pair) <= set(omegas):
            section.problem(f'"{key}"', "not two names with spread", '"V1, CL" = 0.3')
        elif isinstance(value, bool) or not isinstance(value, (int, float)) or not -1 < value < 1:
            section.problem(f'"{key}"', f"{value!r:.100}", "a correlation between -1 and 1")
        else:
            correlations[pair] = float(value)
    try:
        covariance_from(omegas, correlations)
    except ValueError as error:
        top.problem("spread_together", str(error), "correlations that can hold together")
    return correlations


def read_error(top: Section) -> dict[str, object]:
    """[measurement_error]: proportional (a fraction), additive (a concentration, in mg/L)."""
    section = top.section("measurement_error")
    found = {
        "proportional": section.number("proportional", 0, _LARGEST_SPREAD, advice="write 0.2 for 20 %"),
        "additive": section.quantity("additive", "concentration"),
        "evidence": section.text("evidence"),
        "note": section.text("note"),
    }
    section.close()
    return {key: value for key, value in found.items() if value is not None}
