"""The sections of a study file and the keys of each. What they mean together is checked in study.py."""

from __future__ import annotations

from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field, StrictBool

from popsim.finding.wishes import Wish, parse_wishes
from popsim.study_values import (
    LONGEST_TEXT, MOST_ADMINISTRATIONS, AgeMix, Amount, Condition, Correlation, Isolates, Limit, Mics, Name, PlainDose,
    Rate, Rounding, SwitchOrNumber, Time, a_number, a_quantity, a_range, a_text, a_whole_number, parsed,
)  # fmt: skip


class Section(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True, arbitrary_types_allowed=True)


class PopulationSection(Section):
    source: Literal["survey", "list", "described", "lattice"]
    count: a_whole_number(1, 100_000_000, 10000) | None = None
    age: a_range("age") | None = None
    weight: a_range("body_weight") | None = None
    height: a_range("height") | None = None
    bmi: a_range("body_mass_index") | None = None
    sex: Literal["female", "male"] | None = None
    where: Condition | None = None
    file: Name | None = None
    on_bad_row: Literal["stop", "skip"] | None = None
    units: dict[str, Name] = {}
    age_mix: AgeMix | None = None
    female_share: a_quantity("percent") | None = None
    described: dict[str, Any] = {}
    together: dict[str, Correlation] = {}
    lattice: dict[str, Any] = {}
    each: a_whole_number(1, 1_000_000, 100) | None = None
    set: dict[str, SwitchOrNumber] = {}
    scale: dict[str, a_number(0.1, 10, 1.2)] = {}


class VariabilitySection(Section):
    between_subject: StrictBool = True
    scale: a_number(0, 10, 1.3) = 1.0
    from_: Name | None = Field(default=None, alias="from")
    parameters: dict[str, Any] = {}


class GroupSection(Section):
    name: Name
    where: Condition


class DrugSection(Section):
    model: Name
    repeat_with: Annotated[list[Name], Field(max_length=20)] = []
    fraction_unbound: a_number(0, 1, 0.2) | None = None
    fraction_unbound_source: a_text(LONGEST_TEXT) | None = None


class BandSection(Section):
    where: Condition
    at: Time | None = None
    amount: Amount | None = None
    amount_for: a_quantity("concentration") | None = None
    rate: Rate | None = None
    every: Time | None = None


class DoseSection(Section):
    at: Time | None = None
    amount: Amount | None = None
    amount_for: a_quantity("concentration") | None = None
    volume: a_quantity("volume_per_kg") | None = None
    volume_of: Name | None = None
    volume_is: Literal["V1", "Vss"] | None = None
    rate: Rate | None = None
    over: Time | None = None
    until: Time | None = None
    every: Time | None = None
    times: a_whole_number(1, MOST_ADMINISTRATIONS, 3) | None = None
    by: Name | None = None
    at_most: PlainDose | None = None
    at_least: PlainDose | None = None
    round_to: Rounding | None = None
    where: Condition | None = None
    route: Literal["iv", "oral"] = "iv"
    band: Annotated[list[BandSection], Field(max_length=100)] = []


class ProtocolSection(Section):
    name: Name
    by: Name | None = None
    strength: a_quantity("concentration") | None = None
    vial: a_quantity("volume") | None = None
    pump_at_most: a_quantity("flow", "rate") | None = None
    impossible: Literal["warn", "error"] = "warn"
    no_dose: Literal["error", "allowed"] = "error"
    dose: Annotated[list[DoseSection], Field(min_length=1, max_length=100)]


class TargetSection(Section):
    name: Name | None = None
    quantity: Literal["plasma", "unbound_plasma", "effect_site", "effect", "response", "area_under_curve",
                      "unbound_area_under_curve", "peak", "unbound_peak", "trough", "unbound_trough", "average",
                      "unbound_average"]
    range: Name | None = None
    low: Limit | None = None
    high: Limit | None = None
    over_mic: Name | None = None
    mic: Mics | None = None
    isolates: Isolates | None = None
    isolates_source: a_text(LONGEST_TEXT) | None = None
    per: Literal["24 h"] | None = None
    half: a_quantity("concentration") | None = None
    steepness: a_number(0.01, 100, 4) | None = None
    follows: Literal["plasma", "unbound_plasma", "effect_site"] | None = None
    levels: Literal["true", "measured"] = "true"
    recovers_at: Limit | None = None
    during: Name
    attained_when: Name | None = None


class CompareSection(Section):
    matters: a_quantity("percent") | None = None
    reference: Name | None = None
    robustness: StrictBool = True


class RunSection(Section):
    until: Time
    every: Time


class VarySection(Section):
    what: a_text(LONGEST_TEXT)
    over: Name
    steps: a_whole_number(2, 400, 21) | None = None


class ReferenceSection(Section):
    sex: Literal["female", "male"]
    age: a_quantity("age")
    weight: a_quantity("body_weight")
    height: a_quantity("height")


class FindTableSection(Section):
    what: a_text(LONGEST_TEXT)
    by: Name
    bands: a_whole_number(1, 12, 4)
    edges_to: a_number(1e-3, 1e4, 5)
    doses: Name
    round_to: PlainDose


class FindMapSection(Section):
    across: Name = "weight"
    up: Name = "age"
    across_every: a_number(1e-3, 1e4, 10) | None = None
    up_every: a_number(1e-3, 1e4, 10) | None = None
    level: a_quantity("percent") | None = None


class FindSection(Section):
    protocol: Name | None = None
    target: Name | None = None
    wish: Annotated[list[parsed(parse_wishes, tuple[Wish, ...])], Field(max_length=20)] = []
    vary: Annotated[list[VarySection], Field(max_length=2)] = []
    reference: ReferenceSection | None = None
    sizes: Annotated[list[Name], Field(max_length=60)] = []
    table: FindTableSection | None = None
    map: FindMapSection = FindMapSection()


class StudyFile(Section):
    title: Name
    question: a_text(LONGEST_TEXT)
    seed: a_whole_number(0, 2**63 - 1, 20261201)
    population: PopulationSection
    variability: VariabilitySection = VariabilitySection()
    group: Annotated[list[GroupSection], Field(max_length=60)] = []
    drug: DrugSection
    protocol: Annotated[list[ProtocolSection], Field(min_length=1, max_length=100)]
    target: Annotated[list[TargetSection], Field(min_length=1, max_length=20)]
    compare: CompareSection = CompareSection()
    run: RunSection
    find: FindSection = FindSection()


_SECTIONS = {"population": PopulationSection, "variability": VariabilitySection, "group": GroupSection,
             "drug": DrugSection, "protocol": ProtocolSection, "dose": DoseSection, "band": BandSection,
             "target": TargetSection, "compare": CompareSection, "run": RunSection, "find": FindSection,
             "vary": VarySection, "reference": ReferenceSection, "table": FindTableSection, "map": FindMapSection}


def known_keys(location: list[str | int]) -> list[str]:
    """The keys of the section at this place, such as ["protocol", 0, "dose", 1]."""
    model: Any = StudyFile
    for part in location:
        if isinstance(part, str):
            model = _SECTIONS.get(part, model)
    return [info.alias or key for key, info in model.model_fields.items()]
