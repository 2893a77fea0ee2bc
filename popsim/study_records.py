"""A study as it was understood: protocols, targets, groups. Every name looked up, every quantity in mg, L, min."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from covariates.formula import Formula
from covariates.sheet import DrugModel
from covariates.units import Quantity
from popsim.patients.population import Population


@dataclass(frozen=True)
class Loading:
    """A dose that brings a volume to a concentration: never a patient's drawn volume, but a stated or a typical one.

    concentration   as written
    litres_per_kg   a stated volume by size; None where a sheet says it
    model, volume   the sheet, and which of its typical volumes: V1, or Vss (V1 + V2 + V3)
    text            the whole in words
    """

    concentration: Quantity
    litres_per_kg: float | None
    model: DrugModel | None
    volume: str
    text: str


@dataclass(frozen=True)
class DoseVariant:
    """One way in which a dose step is given: the step itself, or one band of it.

    where    which patients (None: all whom the step reaches)
    at_min   time of the first administration
    every    minutes between administrations, None for a single one
    amount   dose as written, None when a rate or a loading concentration says it
    rate     rate as written; with an amount the duration follows
    loading  a dose that fills a typical volume to a concentration, None when the dose is written out
    """

    where: Formula | None
    at_min: float
    every_min: float | None
    amount: Quantity | None
    rate: Quantity | None
    loading: Loading | None = None

    @property
    def is_rate(self) -> bool:
        return self.amount is None and self.loading is None


@dataclass(frozen=True)
class DoseStep:
    """One line of the ward card. Caps, floors and rounding are in mg, or mg/min when the step has only a rate.

    maintained   whether it repeats to the run's end: what a steady state is made of
    """

    number: int
    where: Formula | None
    variants: tuple[DoseVariant, ...]
    by: str
    over_min: float | None
    until_min: float | None
    times: int | None
    at_most: float | None
    at_least: float | None
    round_to: float | None
    oral: bool = False
    maintained: bool = False

    @property
    def banded(self) -> bool:
        return len(self.variants) > 1 or self.variants[0].where is not None


@dataclass(frozen=True)
class Protocol:
    """A regimen as written on the ward card; it sees covariates only.

    by                    the covariate that a "/kg" or "/m2" means where a step does not say
    strength_mg_per_ml    preparation, None when not given
    vial_ml               volume of one container, None when not given
    no_dose_allowed       whether a patient may be reached by no step
    strength_text         the preparation as written
    pump_mg_per_min       the fastest that the pump can give, None when not given
    impossible_refused    whether a dose that comes out as zero or is too fast for the pump ends the study
    """

    name: str
    by: str
    strength_mg_per_ml: float | None
    vial_ml: float | None
    no_dose_allowed: bool
    steps: tuple[DoseStep, ...]
    strength_text: str = ""
    pump_mg_per_min: float | None = None
    impossible_refused: bool = False


SUMMARIES = ("area_under_curve", "peak", "trough", "average")
MINUTES_A_DAY = 1440.0  # an area "per 24 h"


@dataclass(frozen=True)
class Mic:
    """The minimum inhibitory concentration that a target is judged against.

    family      what the targets of all MICs of one section are called together
    weight      share of the isolates with this MIC, None where the study gives no distribution
    first       whether it is the section's first: what does not depend on the MIC is tabled there alone
    """

    mg_per_l: float
    family: str
    weight: float | None
    first: bool


@dataclass(frozen=True)
class ResponseCurve:
    """Probability of response: logistic in the logarithm of a concentration, `half` (mg/L) gives 50 %."""

    half_mg_per_l: float
    steepness: float
    follows: str


@dataclass(frozen=True)
class Target:
    """What counts as success.

    quantity      a course (plasma, unbound_plasma, effect_site, effect, response), or one of SUMMARIES of a window,
                  these also as unbound_...
    low, high     limits in mg/L, mg.min/L (areas), the effect's own unit, or as a probability; -inf or inf where
                  one-sided
    unit          the unit that the study wrote
    start, end    the window: minutes, or the name of a numeric attribute in minutes or hours
    rule          share, any, always, end; `share_needed` goes with share
    per_day       whether an area is brought to 24 h
    measured      whether levels as an assay would measure them are judged, its error included
    steady        whether the window is one interval of the repeated regimen at steady state (end is then inf)
    recovers_at   level by which a course has recovered after the last dose; None where not asked
    """

    name: str
    quantity: str
    low: float
    high: float
    unit: str
    range_text: str
    start: float | str
    end: float | str
    rule: str
    share_needed: float
    rule_text: str
    per_day: bool = False
    mic: Mic | None = None
    response: ResponseCurve | None = None
    measured: bool = False
    recovers_at: float | None = None
    steady: bool = False

    @property
    def instant(self) -> bool:
        return self.start == self.end

    @property
    def summary(self) -> str:
        """Which summary of the window is judged; empty for a course."""
        word = self.quantity.removeprefix("unbound_")
        return word if word in SUMMARIES else ""

    @property
    def unbound(self) -> bool:
        return self.quantity.startswith("unbound_")

    @property
    def over_time(self) -> bool:
        """Whether it has rows in the over-time tables: once for all MICs of a section."""
        return self.mic is None or self.mic.first


def quantity_words(quantity: str) -> str:
    """"unbound_area_under_curve" is "unbound area under the curve"."""
    return quantity.replace("_", " ").replace("under curve", "under the curve")


def needs_effect_site(target: Target) -> bool:
    """Whether a target follows the effect site; else it follows plasma."""
    follows = target.response.follows if target.response else target.quantity
    return follows in ("effect_site", "effect")


@dataclass(frozen=True)
class Variability:
    """between_subject False: typical patients. `from_model`: the sheet whose variability is borrowed, or None.
    `own`: parameter -> SD of its random effect (0: none) and the effect's form, in place of what the sheets say."""

    between_subject: bool
    scale: float
    from_model: DrugModel | None
    own: dict[str, tuple[float, str]] = field(default_factory=dict)


@dataclass(frozen=True)
class Study:
    """A study file, resolved: every name looked up, every quantity in mg, L, min."""

    path: Path
    digest: str
    title: str
    question: str
    seed: int
    population: Population
    variability: Variability
    groups: tuple[tuple[str, Formula], ...]
    models: tuple[DrugModel, ...]
    protocols: tuple[Protocol, ...]
    targets: tuple[Target, ...]
    matters: float | None
    reference: str | None
    robustness: bool
    until_min: float
    every_min: float
    warnings: tuple[str, ...]

    @property
    def families(self) -> tuple[str, ...]:
        """The target sections that are judged against a distribution of MICs."""
        return tuple(dict.fromkeys(target.mic.family for target in self.targets
                                   if target.mic is not None and target.mic.weight is not None))

    @property
    def joint_targets(self) -> tuple[int, ...]:
        """Places of the targets that a patient may be asked to attain together: all but lists of MICs; none for one."""
        families = [target.mic.family for target in self.targets if target.mic is not None]
        places = tuple(t for t, target in enumerate(self.targets)
                       if target.mic is None or families.count(target.mic.family) == 1)
        return places if len(places) > 1 else ()

    @property
    def group_names(self) -> tuple[str, ...]:
        return ("all", *(name for name, _ in self.groups))

    def grid_min(self) -> np.ndarray:
        """Times of the over-time tables: 0, k x every, and until."""
        count = int(np.floor(self.until_min / self.every_min * (1 + 1e-12)))
        grid = np.arange(count + 1) * self.every_min
        if grid[-1] >= self.until_min * (1 - 1e-12):
            grid[-1] = self.until_min
            return grid
        return np.append(grid, self.until_min)
