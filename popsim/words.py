"""Numbers and findings in words, the same for terminal, pictures and report. Nothing is computed that a table lacks."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from covariates.catalogue import ATTRIBUTES, EQUATIONS
from covariates.sheet import DrugModel
from popsim.estimate import MOST_FAILED_PERCENT, no_headline
from popsim.study_records import Protocol, Target, quantity_words

if TYPE_CHECKING:  # a third of a second that `popsim check` does without
    import pandas as pd


def percent(share: float, digits: int = 1) -> str:
    """0.8413 is "84.1"; a share that exists but rounds to nothing is "<0.1", one short of all ">99.9"."""
    if math.isnan(share):
        return "-"
    shown, least = f"{100 * share:.{digits}f}", 10.0**-digits
    if share > 0 and float(shown) == 0:
        return f"<{least:.{digits}f}"
    if share < 1 and float(shown) == 100:
        return f">{100 - least:.{digits}f}"
    return shown


def points(difference: float) -> str:
    """A difference of shares in percentage points, signed: -0.271 is "-27.1"; what rounds to nothing is "0.0"."""
    if math.isnan(difference):
        return "-"
    shown = f"{100 * difference:+.1f}"
    return "0.0" if float(shown) == 0 else shown


def clock(minutes: float) -> str:
    """0.5 is "30 s", 90 is "90 min", 1440 is "24 h"."""
    if 0 < minutes < 1:
        return f"{minutes * 60:g} s"
    if minutes >= 240 and minutes % 60 == 0:
        return f"{minutes / 60:g} h"
    return f"{minutes:g} min"


def window(target: Target) -> str:
    """The window of a target: "15 min to 60 min", or an instant."""
    if target.steady:
        return "at steady state, one interval"
    start, end = (edge if isinstance(edge, str) else clock(edge) for edge in (target.start, target.end))
    if target.summary == "trough":
        return f"just before {end}"
    return f"at {start}" if target.instant else f"{start} to {end}"


def target_line(target: Target) -> str:
    quantity = "measured " * target.measured + quantity_words(target.quantity) + " per 24 h" * target.per_day
    if target.response is not None:
        quantity += (f" to {quantity_words(target.response.follows)} (50 % at "
                     f"{target.response.half_mg_per_l:g} mg/L, steepness {target.response.steepness:g})")
    described = f"{quantity} {target.range_text}"
    # a target that the study does not name is called by its range already
    name = target.name if target.name.endswith(target.range_text) else f"{target.name}: {described}"
    if target.per_day and name == target.name:
        name += ", per 24 h"
    when = "always in range" if target.rule_text == "always" else f"in range {target.rule_text}".rstrip()
    return f"{name}, {window(target)}, attained when {when}"


def shares_of(target: Target) -> str:
    """What the shares below, in and above the range are shares of: one number of the window has no time in range."""
    return "share of patients" if target.summary else "mean share of the window"


def sides_line(target: Target, model: DrugModel) -> str:
    """What lies below and above an effect's range, where the sheet says: "below is too deep, above is too light"."""
    if target.quantity != "effect" or model.effect is None:
        return ""
    meanings = (("below", model.effect.low_means), ("above", model.effect.high_means))
    return ", ".join(f"{side} is {meaning}" for side, meaning in meanings if meaning)


AUTHORS = ("James", "Janmahasatian", "Boer", "Hume", "Al-Sallami", "Devine", "Robinson", "Mosteller", "Du Bois",
           "Shibutani")


def size_words(name: str) -> str:
    """A body size in words: "lean_body_mass_james" is "lean body mass (James)", "weight" is "total body weight"."""
    plain = "total body weight" if name == "weight" else name.replace("_", " ")
    for author in AUTHORS:
        end = author.lower().replace("-", " ")
        if plain.endswith(f" {end}"):
            return f"{plain.removesuffix(end)}({author})"
    return plain


def unit_of(covariate: str) -> str:
    """The unit of an attribute or equation; empty for numbers of a study's own."""
    return EQUATIONS[covariate].unit if covariate in EQUATIONS else ATTRIBUTES.get(covariate, "")


def per_kg_line(protocol: Protocol) -> str:
    """What a "/kg" or "/m2" of a protocol means: "per kg of total body weight"; a fixed dose is not scaled."""
    scaled = {("m2" if "m2" in dose.kind else "kg", step.by)
              for step in protocol.steps for variant in step.variants for dose in (variant.amount, variant.rate)
              if dose is not None and "_per_" in dose.kind}
    scaled |= {("kg", step.by) for step in protocol.steps for variant in step.variants
               if variant.loading is not None and variant.loading.litres_per_kg is not None}
    if not scaled:
        return "not scaled by body size"
    return " and ".join(f"per {unit} of {size_words(by)}" for unit, by in sorted(scaled))


def finding(comparison: pd.DataFrame, attainment: pd.DataFrame, group: str, target: str, model: str) -> str:
    """What the numbers say of one group, in one sentence."""
    where = "Among all patients" if group == "all" else f'In the group "{group}"'
    rows = _of(attainment, group, target, model)
    if not (rows["patients"] > 0).all():
        return f"{where}: no patients."
    failed = rows[no_headline(rows["failed"], rows["patients"])]
    if len(failed):
        protocols = " and ".join(f'"{name}"' for name in failed["protocol"])
        return (f"{where}: no headline, since more than {MOST_FAILED_PERCENT} % could not be simulated or went "
                f"without a dose with {protocols}.")
    if len(rows) == 1:
        row = rows.iloc[0]
        return (f"{where}, {percent(row.attained)} % attain the target "
                f"({percent(row.attained_low)} to {percent(row.attained_high)} %).")
    pairs = _of(comparison, group, target, model)
    if len(pairs) == 1:
        pair = pairs.iloc[0]
        return (f'{where}, {percent(pair.attained_a)} % attain the target with "{pair.protocol_a}", '
                f'{percent(pair.attained_b)} % with "{pair.protocol_b}": {_difference(pair)}.')
    best, following = rows.sort_values("attained", ascending=False, kind="stable")["protocol"].iloc[:2]
    pair = _pair_ending_in(best, following, pairs)
    return (f'{where}, "{best}" has the most patients on target, {percent(pair.attained_b)} %, before "{following}", '
            f"{percent(pair.attained_a)} %: {_difference(pair)}.")


def _of(table: pd.DataFrame, group: str, target: str, model: str) -> pd.DataFrame:
    return table[(table["group"] == group) & (table["target"] == target) & (table["model"] == model)]


def _pair_ending_in(second: str, first: str, pairs: pd.DataFrame) -> pd.Series:
    """The row that compares two protocols, as `second` minus `first`."""
    pair = pairs[pairs["protocol_a"].isin((first, second)) & pairs["protocol_b"].isin((first, second))].iloc[0].copy()
    if pair.protocol_a == second:
        pair[["protocol_a", "protocol_b", "attained_a", "attained_b"]] = [
            pair.protocol_b, pair.protocol_a, pair.attained_b, pair.attained_a]
        pair[["difference", "difference_low", "difference_high"]] = [
            -pair.difference, -pair.difference_high, -pair.difference_low]
    return pair


def _difference(pair: pd.Series) -> str:
    limits = f"{points(pair.difference_low)} to {points(pair.difference_high)}"
    said = f"{points(pair.difference)} points ({limits})"
    if pair.verdict == "too small to matter":
        return f"{said}, too small to matter"
    if pair.difference_low <= 0 <= pair.difference_high:
        return f"no clear difference ({limits} points)"
    return f"{said}, not clear whether it matters" if pair.verdict == "not clear" else said
