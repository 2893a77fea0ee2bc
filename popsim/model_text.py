"""What `popsim models` prints: the list of sheets, and one sheet whole with what follows from it."""

from __future__ import annotations

import textwrap
from collections.abc import Iterable, Mapping

import numpy as np

from covariates.catalogue import compute
from covariates.sheet import DrugModel, example_people, parameters_of
from covariates.variability import cv_from_omega
from popsim.derived import Disposition, half_lives, steady_state_volume, time_to_half, time_to_peak
from popsim.screen import WIDTH

INFUSED_MIN = (10, 30, 60, 120, 240, 480)
INTERNAL_UNITS = {"V1": "L", "V2": "L", "V3": "L", "CL": "L/min", "Q2": "L/min", "Q3": "L/min", "ke0": "1/min",
                  "ka": "1/min", "F": "", "lag": "min"}


def list_text(models: Iterable[DrugModel]) -> str:
    """Every model under its drug: source, people, variability, what it has, evidence."""
    lines: list[str] = []
    drug = None
    for model in models:
        if model.drug != drug:
            drug = model.drug
            lines += ["", drug.upper()]
        lines += [f"  {model.name}", *wrapped(model.title, "    "),
                  *wrapped(model.source["citation"], "    source    ")]
        lines += wrapped(model.built_on.people, "    built on  ")
        lines += wrapped(f"{variability(model)}; {parts(model)}", "    has       ")
        lines += wrapped(evidence(model), "    evidence  ")
    return "\n".join(lines[1:])


def variability(model: DrugModel) -> str:
    """"between-subject variability", or "typical only"."""
    return "between-subject variability" if model.spread else "typical only: no variability published or known"


def parts(model: DrugModel) -> str:
    """The structure in words: "3 compartments, effect site, BIS"."""
    words = [f"{model.compartments} compartment{'s' if model.compartments > 1 else ''}"]
    words += ["absorption"] if model.has_absorption else []
    words += ["effect site"] if model.has_effect_site else []
    return ", ".join(words + ([model.effect.name] if model.effect else []))


def evidence(model: DrugModel) -> str:
    """How many of a sheet's equations and spreads were read in print, how many are from memory."""
    counts: dict[str, int] = {}
    for equation in model.equations:
        counts[equation.evidence] = counts.get(equation.evidence, 0) + 1
    for printed in model.printed_spread.values():
        grade = f"variability {printed.evidence}"
        counts[grade] = counts.get(grade, 0) + 1
    return "; ".join(f"{grade}: {count}" for grade, count in counts.items())


def sheet_text(model: DrugModel) -> str:
    """One sheet whole, then what follows from it in one example person."""
    lines = [model.name, "=" * len(model.name), *wrapped(model.title), ""]
    lines += _source(model) + _people(model) + _measured(model)
    for heading, body in (("Needs", _needs(model)), ("Equations", _equations(model)), ("Effect", _effect(model)),
                          ("Between-subject variability", _spread(model)), ("Measurement error", _error(model)),
                          ("Cautions", [line for text in model.cautions for line in wrapped(text, "  - ")]),
                          ("What follows from it", _follows(model))):
        if body:
            lines += ["", heading, *body]
    return "\n".join(line.rstrip() for line in lines)


def wrapped(text: str, lead: str = "") -> list[str]:
    """Lines of the terminal's width, those after the first indented as far as the lead."""
    return textwrap.wrap(text, WIDTH, initial_indent=lead, subsequent_indent=" " * len(lead),
                         break_long_words=False, break_on_hyphens=False)


def _source(model: DrugModel) -> list[str]:
    lines = wrapped(str(model.source["citation"]), "Source      ")
    if "doi" in model.source:
        lines += wrapped(f"doi {model.source['doi']} ({model.source.get('doi_evidence', 'evidence not said')})",
                          "            ")
    for further in model.source["further"]:
        lines += wrapped(further, "            ")
    return lines + wrapped(f"{model.evidence} (the weakest grade of its equations). {evidence(model)}",
                            "Evidence    ")


def _people(model: DrugModel) -> list[str]:
    built = model.built_on
    lines = wrapped(built.people, "Built on    ")
    known = [f"{name.replace('_', ' ')} {limits.text}" for name, limits in built.ranges.items()]
    known += [f"{built.sex} only"] if built.sex else []
    known += [f"{built.sampling} samples"] if built.sampling else []
    known += [f"infusions of up to {built.longest_infusion_min:g} min"] if built.longest_infusion_min else []
    known += [f"up to {built.largest_total.text} in all"] if built.largest_total else []
    if known:
        lines += wrapped("; ".join(known), "            ")
    for remark in (built.doses and f"doses: {built.doses}", built.note, built.evidence and f"({built.evidence})"):
        lines += wrapped(remark, "            ") if remark else []
    return lines


def _measured(model: DrugModel) -> list[str]:
    found = model.measured_in
    unbound = f", fraction unbound {found['fraction_unbound']:g}" if "fraction_unbound" in found else ""
    lines = wrapped(f"{found['fluid']}{unbound} ({found.get('evidence', 'evidence not said')})", "Measured in ")
    return lines + (wrapped(str(found["note"]), "            ") if "note" in found else [])


def _needs(model: DrugModel) -> list[str]:
    lines = wrapped(", ".join(sorted(model.needs)) or "nothing of a patient", "  ")
    for name, meaning in model.switches.items():
        lines += wrapped(f"{name}: {meaning}", "  ")
    for name, number in model.numbers.items():
        lines += wrapped(f"{name}: a number, {number.means}", "  ")
    return lines


def _equations(model: DrugModel) -> list[str]:
    lines = []
    for equation in model.equations:
        unit = f" {equation.unit}" if equation.unit else ""
        lines += wrapped(f"{equation.name} = {equation.formula.text}{unit}  [{equation.evidence}]", "  ")
        lines += wrapped(equation.note, "      ") if equation.note else []
    return lines


def _effect(model: DrugModel) -> list[str]:
    effect = model.effect
    if effect is None:
        return []
    g, half = effect.steepness, effect.half
    above = f", g = {effect.steepness_above} above {half}" if effect.steepness_above else ""
    text = (f"{effect.name}{f' ({effect.unit})' if effect.unit else ''} = {effect.baseline} + ({effect.at_infinity} - "
            f"{effect.baseline}) Ce^g / ({half}^g + Ce^g), g = {g}{above}; below a range is {effect.low_means}, above "
            f"it {effect.high_means}")
    return wrapped(text, "  ")


def _spread(model: DrugModel) -> list[str]:
    lines = [] if model.spread else ["  typical only: a study borrows variability by name, or runs typical patients"]
    for name, printed in model.printed_spread.items():
        means = (f"SD of ln {printed.omega:.3g}, CV {100 * float(cv_from_omega(printed.omega)):.3g} %"
                 if printed.form == "lognormal" else f"{printed.form}, SD of the random effect {printed.omega:.3g}")
        text = f"{name:<4} {printed.value:g} read as {printed.printed_as}: {means}  [{printed.evidence}]"
        lines += wrapped(text, "  ")
    for (first, second), value in model.correlations.items():
        lines.append(f"  correlation of {first} and {second}: {value:g}")
    if len(model.spread) > 1:
        lines += wrapped("Correlations that are not listed are taken to be 0.", "  ")
    return lines + (wrapped(model.spread_note, "  ") if model.spread_note else [])


def _error(model: DrugModel) -> list[str]:
    found = model.measurement_error
    words = [f"proportional {100 * found['proportional']:g} %"] if "proportional" in found else []
    words += [f"additive {found['additive']:g} mg/L"] if "additive" in found else []
    text = " and ".join(words) + (f"  [{found['evidence']}]" if "evidence" in found else "")
    return (wrapped(text, "  ") if words else []) + (wrapped(str(found["note"]), "  ") if "note" in found else [])


def _example(model: DrugModel) -> tuple[str, dict[str, np.ndarray]]:
    """The sheet's reference person where it has one, else its example man; in words, and as attributes."""
    person = {name: values[-1:] for name, values in example_people(model).items()} | model.reference_person
    sex, age, weight, height = (person[name][0] for name in ("sex", "age", "weight", "height"))
    words = f"a {sex} of {age:g} years, {weight:g} kg, {height:g} cm"
    if any("creatinine" in name for name in model.needs):
        words += f", creatinine {person['serum_creatinine'][0]:g} mg/dL"
    words += "".join(f", {name} {number.example:g}" for name, number in model.numbers.items())
    return words + "".join(f", not {name}" for name in model.switches), person


def _follows(model: DrugModel) -> list[str]:
    words, person = _example(model)
    found = parameters_of(model, lambda name: person[name] if name in person else compute(name, person), {}, 1)
    values = {name: float(value[0]) for name, value in found.items()}
    lines = wrapped(f"In {words}, typical values:", "  ")
    lines += wrapped(", ".join(parameter_words(values)), "  ")
    disposition = Disposition(values)
    lines += wrapped(f"half-lives {', '.join(map(minutes_text, half_lives(disposition)))}; volume at steady state "
                      f"{steady_state_volume(disposition):.4g} L", "  ")
    if "ke0" in values:
        peak = minutes_text(time_to_peak(disposition, values["ke0"]))
        lines += wrapped(f"peak of the effect site {peak} after an instantaneous bolus; half-time of ke0 "
                          f"{minutes_text(np.log(2) / values['ke0'])}", "  ")
    if "ka" in values:
        peak = time_to_peak(disposition, values["ka"]) + values.get("lag", 0.0)
        lines += wrapped(f"peak in plasma {minutes_text(peak)} after a dose by mouth", "  ")
    if model.compartments > 1:
        lines += _half_time_table(disposition)
    return lines


def parameter_words(values: Mapping[str, float]) -> list[str]:
    """"V1 4.27 L" and so on; volumes, flows and rate constants in L and min, the rest as the sheet's effect has it."""
    return [f"{name} {value:.4g} {INTERNAL_UNITS.get(name, '')}".strip() for name, value in values.items()]


def minutes_text(minutes: float) -> str:
    """0.72 is "0.72 min", 287 is "287 min", 2600 is "43.3 h"."""
    return f"{minutes / 60:.3g} h" if minutes >= 1000 else f"{minutes:.3g} min"


def _half_time_table(disposition: Disposition) -> list[str]:
    """Context-sensitive half-times by both conventions, which give different numbers."""
    lines = ["  minutes until plasma is half of what it was at the stop of an infusion of",
             f"  {'(minutes)':>36}" + "".join(f"{minutes:>7}" for minutes in INFUSED_MIN)]
    for words, held in (("plasma held constant before the stop", True), ("constant rate before the stop", False)):
        times = "".join(f"{time_to_half(disposition, minutes, held):>7.3g}" for minutes in INFUSED_MIN)
        lines.append(f"  {words:<36}{times}")
    return lines
