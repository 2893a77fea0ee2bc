"""From the ward cards of a study file to Protocol records; collects every problem it meets."""

from __future__ import annotations

from collections.abc import Callable

from covariates.catalogue import ATTRIBUTES, EQUATIONS, attributes_needed
from covariates.problems import Problem, ProblemsError
from covariates.units import Quantity
from popsim.study_file import key_path
from popsim.study_loading import is_given, resolve_loading
from popsim.study_records import DoseStep, DoseVariant, Protocol
from popsim.study_sections import DoseSection, ProtocolSection
from popsim.study_values import MOST_ADMINISTRATIONS, MOST_IN_PROTOCOL, WHOLE_VIALS

PER_UNIT = {"mass_per_kg": "kg", "rate_per_kg": "kg", "mass_per_m2": "m2", "rate_per_m2": "m2"}
SIZES = {"kg": 'such as "weight" or "adjusted_body_weight"', "m2": 'such as "body_surface_area_mosteller"'}

Report = Callable[..., None]


def resolve_protocols(sections: list[ProtocolSection], run_until_min: float, attributes: dict[str, str], file: str,
                      problems: list[Problem]) -> tuple[Protocol, ...]:
    """Protocols of a study, whose patients have these attributes (name -> "number", "condition", "text" or "")."""
    protocols = []
    for index, section in enumerate(sections):
        def report(key: tuple, found: str, allowed: str, advice: str = "", index: int = index) -> None:
            problems.append(Problem(f"{file}: {key_path('protocol', index, *key)}", found, allowed, advice))

        if section.by is not None and (fault := covariate_fault(section.by, attributes)):
            report(("by",), *fault)
        for key in ("strength", "vial"):
            if (given := getattr(section, key)) is not None and given.value == 0:
                report((key,), f'"{given.text}"', "above zero")
        if section.vial is not None and section.strength is None:
            report(("vial",), section.vial.text, "a vial only beside strength", 'add strength = "10 mg/mL"')
        steps = tuple(_step(step, number, section, run_until_min, attributes, report)
                      for number, step in enumerate(section.dose))
        _check_many(steps, run_until_min, report)
        protocols.append(Protocol(
            name=section.name,
            by=section.by or "weight",
            strength_mg_per_ml=section.strength.value / 1000 if section.strength else None,
            vial_ml=section.vial.value * 1000 if section.vial else None,
            no_dose_allowed=section.no_dose == "allowed",
            steps=steps,
            strength_text=section.strength.text if section.strength else "",
            pump_mg_per_min=_pump(section, report),
            impossible_refused=section.impossible == "error",
        ))
    return tuple(protocols)


def _pump(section: ProtocolSection, report: Report) -> float | None:
    """The pump's limit in mg/min: as a rate, or as a flow of a stated strength."""
    limit = section.pump_at_most
    if limit is None:
        return None
    if limit.value == 0:
        report(("pump_at_most",), f'"{limit.text}"', "above zero")
    if limit.kind == "rate":
        return limit.value
    if section.strength is None:
        report(("pump_at_most",), f'"{limit.text}" without strength', "a flow beside strength, or a rate",
               'add strength = "10 mg/mL"')
        return None
    return limit.value * section.strength.value


def _check_many(steps: tuple[DoseStep, ...], run_until_min: float, report: Report) -> None:
    """Each administration costs memory in every patient: many steps of many administrations are refused together."""
    counts = [administrations_at_most(step, run_until_min) for step in steps]
    if sum(counts) > MOST_IN_PROTOCOL:
        report(("dose",), f"about {sum(counts):,.0f} administrations in all", f"at most {MOST_IN_PROTOCOL:,}",
               "longer intervals, fewer times, or an infusion (rate)")


def administrations_at_most(step: DoseStep, run_until_min: float) -> float:
    """How many administrations a step has, over all its bands."""
    end = run_until_min if step.until_min is None else min(step.until_min, run_until_min)
    return sum(1 if not variant.every_min else step.times or max((end - variant.at_min) / variant.every_min, 1)
               for variant in step.variants)


def _step(section: DoseSection, number: int, protocol: ProtocolSection, run_until_min: float,
          attributes: dict[str, str], report: Report) -> DoseStep:
    def say(key: str, found: str, allowed: str, advice: str = "") -> None:
        report(("dose", number, key), found, allowed, advice)

    loading = resolve_loading(section, attributes, say)
    variants = _variants(section, number, loading, say, report)
    scaled = {PER_UNIT[dose.kind] for variant in variants for dose in (variant.amount, variant.rate)
              if dose is not None and dose.kind in PER_UNIT}
    if any(variant.loading is not None and variant.loading.litres_per_kg is not None for variant in variants):
        scaled |= {"kg"}
    by = section.by or protocol.by
    _check_scaling(scaled, section.by, by, attributes, say)
    _check_bands(section, variants, say)
    _check_duration(section, variants, say)
    _check_repeats(section, variants, run_until_min, say)
    _check_variants(section, variants, run_until_min, say)
    limits = _limits(section, protocol, variants, say)
    return DoseStep(
        number=number + 1,
        where=section.where,
        variants=variants,
        by=by or "weight",
        over_min=section.over.value if section.over else None,
        until_min=section.until.value if section.until else None,
        times=section.times,
        oral=section.route == "oral",
        maintained=section.times is None and (section.until is None or section.until.value >= run_until_min)
        and all(variant.every_min is not None for variant in variants),
        **limits,
    )


def _check_variants(section: DoseSection, variants: tuple[DoseVariant, ...], run_until_min: float,
                    say: Callable) -> None:
    """Swallowed at once where by mouth, begun within the run, and never a dose of zero."""
    if section.route == "oral" and (section.rate is not None or section.over is not None
                                    or any(variant.rate is not None for variant in variants)):
        say("route", '"oral" with a rate or over', "an amount alone, swallowed at once")
    for variant in variants:
        if variant.at_min > run_until_min:
            say("at", f"{variant.at_min:g} min, after the run's end", f"at most {run_until_min:g} min",
                "move the dose or lengthen [run] until")
        concentration = variant.loading.concentration if variant.loading else None
        for key, dose in (("amount", variant.amount), ("rate", variant.rate), ("amount_for", concentration)):
            if dose is not None and dose.value == 0:
                say(key, f'"{dose.text}"', "above zero", "leave the step out, or let where say who gets it")


def _variants(section: DoseSection, number: int, loading: Callable, say: Callable,
              report: Report) -> tuple[DoseVariant, ...]:
    """The step itself, or its bands: a band's own value wins, the step's stands where the band gives none."""
    if not section.band:
        if section.amount is None and section.rate is None and not is_given(section):
            say("amount", "neither amount nor rate",
                'amount = "1.5 mg/kg" (a dose) or rate = "6 mg/kg/h" (an infusion)')
        if section.amount is not None and section.amount_for is not None:
            say("amount_for", section.amount_for.text, "amount or amount_for, not both")
        return (DoseVariant(None, _minutes(section.at) or 0.0, _minutes(section.every), section.amount, section.rate,
                            loading(section.amount_for)),)
    variants = []
    for index, band in enumerate(section.band):
        amount, rate = band.amount or section.amount, band.rate or section.rate
        concentration = band.amount_for or section.amount_for
        if amount is not None and concentration is not None:
            report(("dose", number, "band", index, "amount_for"), concentration.text, "amount or amount_for, not both")
        if amount is None and rate is None and concentration is None:
            report(("dose", number, "band", index, "amount"), "neither amount nor rate",
                   'amount = "500 mg" or rate = "6 mg/kg/h", here or in the step')
        variants.append(DoseVariant(
            where=band.where,
            at_min=_minutes(band.at) if band.at else (_minutes(section.at) or 0.0),
            every_min=_minutes(band.every) if band.every else _minutes(section.every),
            amount=amount,
            rate=rate,
            loading=loading(concentration),
        ))
    return tuple(variants)


def _minutes(time: Quantity | None) -> float | None:
    return None if time is None else time.value


def covariate_fault(name: str, attributes: dict[str, str]) -> tuple[str, str, str] | None:
    """What keeps a word from being a covariate of these patients: found, allowed, advice; None when nothing does."""
    try:
        lacking = attributes_needed(name, attributes)
    except ProblemsError as error:
        known = "one of the patients' attributes or a covariate equation, such as bmi or adjusted_body_weight"
        return f'"{name}", which no patient has', known, error.problems[0].advice
    if lacking:
        return (f'"{name}" needs {", ".join(sorted(lacking))}, which these patients do not have',
                f"covariates that follow from {', '.join(sorted(attributes))}", "")
    return None


def _check_scaling(scaled: set[str], own_by: str | None, by: str | None, attributes: dict[str, str],
                   say: Callable) -> None:
    if len(scaled) > 1:
        say("amount", "both per kg and per m2", "one of them in one step")
    if "m2" in scaled and by is None:
        say("by", "missing", "mg/m2 needs the surface area it means", 'by = "body_surface_area_mosteller"')
        return
    name = by or "weight"
    if fault := covariate_fault(name, attributes):
        if own_by is not None or (scaled and by is None):  # the protocol's own is reported once, not in each step
            say("by", *fault)
        return
    unit = EQUATIONS[name].unit if name in EQUATIONS else ATTRIBUTES.get(name)
    for per in scaled:
        if attributes.get(name) in ("text", "condition") or unit not in (None, per):
            is_now = f"in {unit}" if unit else "no size"
            say("by", f'"{name}" is {is_now}', f"a covariate in {per}, since the dose is per {per}",
                SIZES[per])


def _check_bands(section: DoseSection, variants: tuple[DoseVariant, ...], say: Callable) -> None:
    kinds = {(not variant.is_rate, variant.rate is not None) for variant in variants}
    if len(kinds) > 1:
        say("band", "amounts in some bands and rates in others", "the same kind of dose in every band",
            "make two steps of it, each with its where")
    if len({variant.every_min is None for variant in variants}) > 1 and (section.times or section.until):
        say("band", "some bands repeat and others do not", "every in all bands or in none, beside times or until",
            "make two steps of it, each with its where")


def _check_repeats(section: DoseSection, variants: tuple[DoseVariant, ...], run_until_min: float,
                   say: Callable) -> None:
    if any(variant.every_min == 0 for variant in variants):
        say("every", "0 min", "an interval above zero")
        return
    end = min(section.until.value, run_until_min) if section.until else run_until_min
    count = sum(1 if variant.every_min is None else section.times or (end - variant.at_min) / variant.every_min
                for variant in variants)
    if count > MOST_ADMINISTRATIONS:
        say("every", f"about {count:,.0f} administrations", f"at most {MOST_ADMINISTRATIONS:,} in one step",
            "a longer interval, fewer times, or an infusion (rate)")


def _check_duration(section: DoseSection, variants: tuple[DoseVariant, ...], say: Callable) -> None:
    has_amount = any(variant.amount is not None or variant.loading is not None for variant in variants)
    has_rate = any(variant.rate is not None for variant in variants)
    repeats = any(variant.every_min is not None for variant in variants)
    if has_amount and has_rate and section.over is not None:
        say("over", section.over.text, "an amount with over, or an amount with rate (the duration follows), not both")
    if has_rate and not has_amount and section.until is None and section.over is None:
        say("rate", "an infusion without an end", 'until = "60 min" or over = "30 min"')
    if has_rate and not has_amount and section.over is None and repeats:
        say("over", "missing", "a repeated infusion says how long each one runs", 'over = "30 min"')
    if has_rate and not has_amount and not repeats and section.over is not None and section.until is not None:
        say("until", section.until.text, "until or over, not both", "two ends of one infusion may disagree")
    if section.times is not None and not repeats:
        say("times", str(section.times), "times only beside every", 'every = "5 min"')
    if section.times is not None and repeats and section.until is not None:
        say("until", section.until.text, "times or until, not both", "two ends of one repetition may disagree")
    if has_amount and not repeats and section.until is not None:
        say("until", section.until.text, "until only for an infusion (rate alone) or a repeated dose (every)",
            "the duration follows from amount and rate" if has_rate else 'a dose given slowly has over = "30 s"')
    if section.over is not None and section.over.value == 0:
        say("over", section.over.text, "a duration above zero", "leave over out for a bolus")
    for variant in variants:
        if section.until is not None and section.until.value <= variant.at_min:
            say("until", section.until.text, f"after the step's start at {variant.at_min:g} min")


def _limits(section: DoseSection, protocol: ProtocolSection, variants: tuple[DoseVariant, ...],
            say: Callable) -> dict[str, float | None]:
    """Caps, floors and rounding in mg, or mg/min when the step has only a rate."""
    wanted = "rate" if all(variant.is_rate for variant in variants) else "mass"
    example = "200 mg" if wanted == "mass" else "100 mg/h"
    values: dict[str, float | None] = {}
    for key in ("at_most", "at_least", "round_to"):
        given: Quantity | None = getattr(section, key)
        if key == "round_to":
            given = _drawn_up(section.round_to, protocol, say)
        values[key] = None if given is None else given.value
        if given is not None and given.kind != wanted:
            say(key, f'"{given.text}"', f'the kind of the dose itself, such as "{example}"')
        elif given is not None and given.value == 0 and key != "at_least":
            say(key, f'"{given.text}"', "above zero")
    at_most, at_least = values["at_most"], values["at_least"]
    if at_most is not None and at_least is not None and at_most < at_least:
        say("at_most", f"a cap ({section.at_most.text}) below the floor ({section.at_least.text})",
            "a cap at or above the floor")
    return values


def _drawn_up(given: Quantity | str | None, protocol: ProtocolSection, say: Callable) -> Quantity | None:
    """Rounding as an amount or a rate of drug: a volume, a flow or a whole vial is turned into it by the strength."""
    if given is None or (isinstance(given, Quantity) and given.kind in ("mass", "rate")):
        return given
    if given == WHOLE_VIALS:
        if protocol.strength is None or protocol.vial is None:
            say("round_to", f'"{WHOLE_VIALS}"', "only beside strength and vial",
                'strength = "10 mg/mL", vial = "50 mL"')
            return None
        vial_mg = protocol.vial.value * protocol.strength.value
        return Quantity(vial_mg, "mass", "mg", WHOLE_VIALS)
    if protocol.strength is None:
        say("round_to", f'"{given.text}" without strength', "a volume or flow beside strength",
            'add strength = "10 mg/mL" to the protocol')
        return None
    kind = "mass" if given.kind == "volume" else "rate"
    return Quantity(given.value * protocol.strength.value, kind, "mg" if kind == "mass" else "mg/min", given.text)
