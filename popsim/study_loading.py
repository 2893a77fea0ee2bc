"""Loading doses that a study file computes from a concentration and a typical volume; collects every problem."""

from __future__ import annotations

from collections.abc import Callable

from covariates.catalogue import attributes_needed
from covariates.problems import ProblemsError
from covariates.sheet import read_sheet
from covariates.units import Quantity
from popsim.study_records import Loading
from popsim.study_sections import DoseSection

VOLUME_KEYS = ("volume", "volume_of", "volume_is")
EXAMPLE = 'volume = "0.7 L/kg", or volume_of = "vancomycin_goti_2018" with volume_is = "Vss" or "V1"'


def is_given(section: DoseSection) -> bool:
    return section.amount_for is not None


def resolve_loading(section: DoseSection, attributes: dict[str, str],
                    say: Callable) -> Callable[[Quantity | None], Loading | None]:
    """How a concentration becomes a dose in this step: a function that gives None for no concentration.

    The volume is a stated one per kg, or the typical one that a sheet computes from covariates, never a drawn one.
    """
    asked = is_given(section) or any(band.amount_for is not None for band in section.band)
    given = [key for key in VOLUME_KEYS if getattr(section, key) is not None]
    if not asked:
        for key in given:
            say(key, "given", "only beside amount_for", 'amount_for = "25 mg/L"')
        return lambda concentration: None
    if given not in (["volume"], ["volume_of", "volume_is"]):
        say("volume", " and ".join(given) or "missing", EXAMPLE)
        return lambda concentration: None
    if section.volume is not None:
        if section.volume.value == 0:
            say("volume", f'"{section.volume.text}"', "above zero")
        return lambda concentration: concentration and Loading(
            concentration, section.volume.value, None, "", f"to {concentration.text} in {section.volume.text}")
    try:
        model = read_sheet(section.volume_of)
    except ProblemsError as error:
        say("volume_of", error.problems[0].found, error.problems[0].allowed, error.problems[0].advice)
        return lambda concentration: None
    lacking = set().union(*(attributes_needed(name, attributes) for name in model.needs))
    lacking |= {name for name in (*model.switches, *model.numbers) if name not in attributes}
    if lacking:
        say("volume_of", f"{model.name} needs {', '.join(sorted(lacking))}", "patients who have it",
            "give it under [population.set] or in the list, or state a volume")
    words = f"typical {section.volume_is} of {model.name}"
    return lambda concentration: concentration and Loading(
        concentration, None, model, section.volume_is, f"to {concentration.text} in the {words}")
