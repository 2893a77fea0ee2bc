"""The [equations] of a model sheet: reading them, what they need, and the order in which they are evaluated."""

from __future__ import annotations

import re
from collections.abc import Collection, Mapping
from dataclasses import dataclass
from graphlib import CycleError, TopologicalSorter

from covariates.catalogue import ATTRIBUTES, EQUATIONS
from covariates.formula import FUNCTIONS, Formula, compile_formula
from covariates.problems import Problem, ProblemsError, nearest
from covariates.sheet_section import Section
from covariates.units import KINDS, parse_unit

# What the solver takes: name -> kind of unit.
PARAMETERS = {
    "V1": "volume", "V2": "volume", "V3": "volume",
    "CL": "flow", "Q2": "flow", "Q3": "flow",
    "ke0": "per_time",
    "ka": "per_time", "F": "number", "lag": "time",
}  # fmt: skip
_PAIRS = (("V2", "Q2"), ("V3", "Q3"))
TYPICAL, REFERENCE = "_typical", "_reference"
GRADES = ("seen", "recalled", "computed")
_UNITS = {"volume": '"L"', "flow": '"L/h"', "per_time": '"1/h"', "time": '"min"', "concentration": '"mg/L"'}
# how papers write attributes and parameters -> what they may be here: the start of a covariate's name, or a parameter
_IN_PAPERS = {
    ("wt", "bw", "tbw", "bodyweight"): "weight", ("ht",): "height", ("scr", "creat", "creatinine"): "serum_creatinine",
    ("crcl", "clcr", "ccr"): "creatinine_clearance", ("gfr", "egfr"): "egfr", ("pma",): "postmenstrual_age_weeks",
    ("lbm", "lbw", "lean_body_mass"): "lean_body_mass", ("ffm", "fat_free_mass"): "fat_free_mass",
    ("ibw", "ideal_body_weight"): "ideal_body_weight", ("ajbw", "adjbw"): "adjusted_body_weight",
    ("bsa", "body_surface_area"): "body_surface_area",
    ("v", "vd", "vc"): "V1", ("vp",): "V2", ("q",): "Q2", ("k", "ke", "kel", "k10"): "CL",
}  # fmt: skip
_EXAMPLE = '{ is = "4.27", unit = "L", evidence = "seen" }'


@dataclass(frozen=True)
class SheetEquation:
    """One equation of a sheet.

    name      what it gives: V1, CL, ke0, C50, or an intermediate
    formula   in the paper's own units
    unit      of its value, as the sheet says it; empty for a plain number
    factor    value x factor is in L, L/min, 1/min or mg/L (1 for what is no parameter)
    evidence  "seen", "recalled, high", "computed", with what the sheet adds
    note      the sheet's remark, or empty
    """

    name: str
    formula: Formula
    unit: str
    factor: float
    evidence: str
    note: str


def read_equations(
    section: Section, grade: str, units: Mapping[str, str], needed: Collection[str]
) -> dict[str, SheetEquation]:
    """All equations in the order of the file; problems are noted in the section.

    grade   evidence of an equation that says none itself
    units   name -> kind of unit, for the names whose unit matters (PARAMETERS and the effect's)
    needed  names declared in [needs] and [needs_numbers]
    """
    equations = {}
    for name, entry in section.entries(_EXAMPLE):
        _check_name(name, section, needed)
        text = entry.text("is", needed=True, example='"0.5 * weight"')
        unit, factor = _read_unit(entry, units.get(name))
        evidence = entry.text("evidence") or grade
        if evidence.split(",")[0] not in GRADES:
            allowed = " or ".join(GRADES) + ', with more after a comma: "recalled, high"'
            entry.problem("evidence", f'"{evidence}"', allowed)
        note = entry.text("note") or ""
        entry.close()
        if text is None:
            continue
        try:
            formula = compile_formula(text, f"{entry.where}.is", "number")
        except ProblemsError as error:
            section.problems.extend(error.problems)
            continue
        equations[name] = SheetEquation(name, formula, unit, factor, evidence, note)
    return equations


def _check_name(name: str, section: Section, needed: Collection[str]) -> None:
    """An equation may not hide another meaning of its name."""
    if not re.fullmatch(r"[A-Za-z][A-Za-z0-9_]*", name):
        section.problem(name, "no name for an equation", "letters, digits and _")
    elif name in ATTRIBUTES or name in EQUATIONS or name in FUNCTIONS or name in needed or name in ("true", "false"):
        section.problem(name, "a name that means something else already", "another name")
    elif name.endswith((TYPICAL, REFERENCE)):
        allowed = f"a name that does not end in {TYPICAL} or {REFERENCE}"
        section.problem(name, "an ending with a meaning of its own", allowed)


def _read_unit(entry: Section, kind: str | None) -> tuple[str, float]:
    """The unit and the factor to the internal unit; any known unit, and factor 1, for what is no parameter."""
    text = entry.text("unit", needed=kind not in (None, "number"), example=_UNITS.get(kind, ""))
    if text is None:
        return "", 1.0
    if kind == "number":
        entry.problem("unit", f'"{text}"', "no unit: this is a plain number")
        return "", 1.0
    try:
        unit = parse_unit(text, [kind] if kind else KINDS, f"{entry.where}.unit")
    except ProblemsError as error:
        entry.problems.extend(error.problems)
        return text, 1.0
    return unit.name, float(unit.factor) if kind else 1.0


def check_names(
    section: Section,
    equations: Mapping[str, SheetEquation],
    needed: Collection[str],
    reference_person: Collection[str],
) -> tuple[frozenset[str], frozenset[str]]:
    """Names from outside that the equations need: (attributes and covariates, references without their ending)."""
    written = section.table  # also those that cannot be read: that is told already
    known = {*ATTRIBUTES, *EQUATIONS, *written, *needed, *(name + TYPICAL for name in written)}
    needs, references = set(), set()
    for name, equation in equations.items():
        for used in sorted(equation.formula.names):
            base = used.removesuffix(REFERENCE)
            if used in known:
                if used in ATTRIBUTES or used in EQUATIONS:
                    needs.add(used)
            elif base not in (used, "sex") and (base in ATTRIBUTES or base in EQUATIONS):
                references.add(base)
                if not reference_person:
                    found = f'"{used}" without a person to refer to'
                    section.problem(f"{name}.is", found, "a section [reference_person]")
            else:
                allowed = ("attributes, covariates, other equations, names of [needs] and [needs_numbers], "
                           "NAME_typical, NAME_reference")
                advice = _meant(used, {*ATTRIBUTES, *EQUATIONS, *needed}) or nearest(used, known)
                section.problem(f"{name}.is", f'unknown name "{used}"', allowed, advice)
    return frozenset(needs), frozenset(references)


def _meant(word: str, known: Collection[str]) -> str:
    """The advice for a word as papers write it, or an empty string; which equation is never guessed."""
    start = next((start for words, start in _IN_PAPERS.items() if word.lower() in words), "")
    found = sorted(name for name in known if name.startswith(start)) if start else []
    if word.lower() in ("k", "ke", "kel", "k10") and found:
        return "write CL: the rate constant times V1"
    return f"write {' or '.join(found)}" if found else ""


def check_structure(
    section: Section, equations: Mapping[str, SheetEquation], effect_names: Collection[str]
) -> None:
    """Whether the equations make a whole model: no parameter missing, none without its partner, nothing unused."""
    for name in ("V1", "CL"):
        if name not in section.table:
            section.problem(name, "missing", f'{name} = {{ is = "...", unit = "{"L" if name == "V1" else "L/min"}" }}')
    for volume, flow in _PAIRS:
        for here, partner in ((volume, flow), (flow, volume)):
            if here in equations and partner not in section.table:
                section.problem(here, f"{here} without {partner}", f"both {volume} and {flow}, or neither")
    if "V3" in equations and "V2" not in section.table:
        section.problem("V3", "V3 without V2", "compartments in order: V2 and Q2 before V3 and Q3")
    for name in ("F", "lag"):
        if name in equations and "ka" not in section.table:
            section.problem(name, f"{name} without ka", "absorption has a rate constant",
                            'ka = { is = "1.5", unit = "1/h" }')
    used = {name.removesuffix(TYPICAL) for equation in equations.values() for name in equation.formula.names}
    for name in equations:
        if name not in used and name not in PARAMETERS and name not in effect_names:
            advice = _meant(name, PARAMETERS) or nearest(name, PARAMETERS) or "remove it, or use it"
            allowed = " ".join(PARAMETERS) + ", or a name that these use"
            section.problem(name, "an equation that nothing uses", allowed, advice)


def in_order(section: Section, equations: Mapping[str, SheetEquation]) -> tuple[SheetEquation, ...]:
    """The equations, each after those it needs; a circle is a problem that names it."""
    sorter: TopologicalSorter[str] = TopologicalSorter()
    for name, equation in equations.items():
        needed = {used.removesuffix(TYPICAL) for used in equation.formula.names} & set(equations)
        sorter.add(name, *sorted(needed))
    try:
        return tuple(equations[name] for name in sorter.static_order())
    except CycleError as error:
        circle = " -> ".join(reversed(error.args[1]))
        found = f"equations in a circle: {circle}"
        section.problems.append(Problem(section.where, found, "each equation after those it needs"))
        return ()
