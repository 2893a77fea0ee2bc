"""What a few example people would actually be given: the protocol as a ward card, after caps and rounding."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from covariates.units import show, to_unit
from popsim.lookup import Lookup
from popsim.patients.draw import blocks
from popsim.study_records import DoseStep, DoseVariant, Protocol, Study
from popsim.timeline import Administration, administrations_of, loading_mg
from popsim.words import clock

# People of our own choosing, to show a card on; serum creatinine is the survey's median for their sex and age.
EXAMPLE_PEOPLE = {
    "lean young adult": {"sex": "female", "age": 25.0, "weight": 55.0, "height": 165.0, "serum_creatinine": 0.70},
    "average adult": {"sex": "male", "age": 50.0, "weight": 90.0, "height": 175.0, "serum_creatinine": 0.98},
    "lean adult of 85": {"sex": "female", "age": 85.0, "weight": 50.0, "height": 157.0, "serum_creatinine": 0.91},
    "BMI of 45": {"sex": "female", "age": 45.0, "weight": 118.0, "height": 162.0, "serum_creatinine": 0.71},
}
FROM_A_LIST = 4  # people of our choosing lack what a list, a description or a lattice gives: its own first are shown


@dataclass(frozen=True)
class CardLine:
    """One dose step for one person: what is given, when, and what became of it on the way."""

    step: int
    when: str
    given: str
    volume: str
    remark: str


def example_people(study: Study) -> tuple[tuple[str, ...], dict[str, np.ndarray]]:
    """The labels and attributes of the people that a study's card is shown on, with what it sets for everyone."""
    if study.population.source != "survey":
        patients = next(iter(blocks(study.population, study.seed)))
        few = {name: values[:FROM_A_LIST] for name, values in patients.attributes.items()}
        return tuple(f"patient {number + 1}" for number in range(_count(few))), few
    people = list(EXAMPLE_PEOPLE.values())
    attributes = {name: np.array([person[name] for person in people]) for name in people[0]}
    for name, factor in study.population.scale.items():
        attributes[name] = attributes[name] * factor
    for name, value in study.population.set.items():
        attributes[name] = np.full(len(people), value)
    return tuple(EXAMPLE_PEOPLE), attributes


def describe(attributes: dict[str, np.ndarray], i: int) -> str:
    """"woman of 45, 118 kg, 162 cm, BMI 45": as much of it as is known."""
    known = {name: attributes[name][i] for name in ("sex", "age", "weight", "height") if name in attributes}
    words = [{"female": "woman", "male": "man"}.get(known.get("sex"), "person")]
    words[0] += f" of {known['age']:.3g}" if "age" in known else ""
    words += [f"{known[name]:.4g} {unit}" for name, unit in (("weight", "kg"), ("height", "cm")) if name in known]
    if {"weight", "height"} <= known.keys():
        words.append(f"BMI {known['weight'] / (known['height'] / 100) ** 2:.0f}")
    return ", ".join(words)


def step_as_written(step: DoseStep) -> str:
    """The dose step as the study file writes it, without its times: "1.5 mg/kg, at most 200 mg, to 10 mg"."""
    if step.banded:
        doses = "; ".join(f"{_dose(variant)} where {variant.where.text}" for variant in step.variants)
    else:
        doses = _dose(step.variants[0])
    per_min = step.variants[0].is_rate
    unit = _plain_unit(step.variants[0])
    limits = [f"{word} {show(limit, unit, 'rate' if per_min else 'mass')}"
              for word, limit in (("at least", step.at_least), ("at most", step.at_most),
                                  ("in steps of", step.round_to))
              if limit is not None]
    return ", ".join([doses, *limits, *([f"only where {step.where.text}"] if step.where else [])])


def _dose(variant: DoseVariant) -> str:
    return " at ".join(dose.text for dose in (variant.loading, variant.amount, variant.rate) if dose is not None)


def _plain_unit(variant: DoseVariant) -> str:
    """The unit of what is given: mg for "mg/kg", mg/h for "mg/kg/h"; a loading dose is in mg."""
    if variant.loading is not None:
        return "mg"
    return (variant.amount or variant.rate).unit.replace("/kg", "").replace("/m2", "")


def card_lines(study: Study, protocol: Protocol, attributes: dict[str, np.ndarray]) -> list[list[CardLine | None]]:
    """For each dose step the line of each example person, None for whom it does not reach."""
    people = [{name: values[i:i + 1] for name, values in attributes.items()} for i in range(_count(attributes))]
    lines: list[list[CardLine | None]] = [[] for _ in protocol.steps]
    for person in people:
        administrations, _ = administrations_of(protocol, Lookup(person), 1, study.until_min)
        for step, of_step in zip(protocol.steps, lines, strict=True):
            given = [one for one in administrations if one.step == step.number and one.gets_it[0]]
            of_step.append(_line(protocol, step, given, person) if given else None)
    return lines


def _count(attributes: dict[str, np.ndarray]) -> int:
    return len(next(iter(attributes.values())))


def _line(protocol: Protocol, step: DoseStep, given: list[Administration], person: dict) -> CardLine:
    first = given[0]
    amount, duration = float(first.amount_mg[0]), float(first.duration_min[0])
    variant = _variant(step, person)
    unit = _plain_unit(variant)
    text, volume = _rate(amount / duration, unit, protocol) if variant.is_rate else _amount(amount, unit, protocol)
    if not variant.is_rate and variant.rate and duration > 0:
        rate, per_hour = _rate(amount / duration, variant.rate.unit.replace("/kg", "").replace("/m2", ""), protocol)
        text, volume = f"{text} at {rate}", " at ".join(part for part in (volume, per_hour) if part)
    when = f"at {clock(first.start_min)}"
    if variant.rate and duration > 0:
        end = _tidy(first.start_min + duration) if variant.is_rate else round(first.start_min + duration, 1)
        when = f"{clock(first.start_min)} to {clock(end)}"
    elif duration > 0:
        when += f", over {clock(duration)}"
    if len(given) > 1:
        when += f", {len(given)} times, every {clock(_tidy(given[1].start_min - first.start_min))}"
    return CardLine(step.number, when, text, volume,
                    _remark(protocol, step, variant, person, amount, duration))


def _variant(step: DoseStep, person: dict) -> DoseVariant:
    """The step itself, or the band that reaches this person."""
    lookup = Lookup(person)
    return next(variant for variant in step.variants
                if variant.where is None or bool(np.all(variant.where.evaluate(lookup))))


def _amount(amount_mg: float, unit: str, protocol: Protocol) -> tuple[str, str]:
    return f"{_number(to_unit(amount_mg, unit, 'mass'))} {unit}", _volume(protocol, amount_mg, "mL")


def _rate(rate_mg_per_min: float, unit: str, protocol: Protocol) -> tuple[str, str]:
    return f"{_number(to_unit(rate_mg_per_min, unit, 'rate'))} {unit}", _volume(protocol, rate_mg_per_min * 60, "mL/h")


def _volume(protocol: Protocol, mg: float, unit: str) -> str:
    return "" if protocol.strength_mg_per_ml is None else f"{_number(mg / protocol.strength_mg_per_ml)} {unit}"


def _remark(protocol: Protocol, step: DoseStep, variant: DoseVariant, person: dict, amount_mg: float,
            duration_min: float) -> str:
    """How the dose came about: "x 74 kg, capped"."""
    given, words = amount_mg / duration_min if variant.is_rate else amount_mg, []
    written = variant.amount or variant.rate
    if variant.loading is not None:
        wanted = float(loading_mg(variant.loading, step, Lookup(person), np.ones(1, dtype=bool))[0])
        words.append(f"into {_number(wanted / variant.loading.concentration.value)} L")
    elif "_per_" in written.kind:
        size = float(Lookup(person)(step.by)[0])
        wanted = written.value * size
        words.append(f"x {_number(size)} {'m2' if 'm2' in written.kind else 'kg'}")
    else:
        wanted = written.value
    if step.at_least is not None and wanted < step.at_least:
        words.append("raised to the floor")
        wanted = step.at_least
    if step.at_most is not None and wanted > step.at_most:
        words.append("capped")
        wanted = step.at_most
    if given == 0:
        words.append("ROUNDED TO NOTHING")
    elif abs(given - wanted) > 1e-9 * max(wanted, given):
        words.append("rounded")
    if protocol.pump_mg_per_min is not None and duration_min > 0 and (
            amount_mg > protocol.pump_mg_per_min * duration_min * (1 + 1e-9)):
        words.append("TOO FAST FOR THE PUMP")
    return ", ".join(words)


def _tidy(minutes: float) -> float:
    """Without the noise of the last digits: 0.1 + 0.2 min is 0.3 min."""
    return round(minutes, 6)


def _number(value: float) -> str:
    """Four significant digits, whole digits always kept, no exponent: 82.5, 12345, 0.05."""
    if abs(value) >= 1000:
        return f"{value:.0f}"
    return f"{float(f'{value:.4g}'):.12f}".rstrip("0").rstrip(".")
