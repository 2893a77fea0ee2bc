"""Reads a study file into its sections, and says every fault of its keys and values in words."""

from __future__ import annotations

import tomllib
from dataclasses import replace
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from covariates.problems import Problem, ProblemsError, nearest
from popsim.study_salvage import without_faults
from popsim.study_sections import DoseSection, FindSection, StudyFile, known_keys
from popsim.study_values import shown


def read_study_file(path: Path) -> tuple[StudyFile, list[Problem]]:
    """The study file as written, each value parsed, and every key that does not fit.

    Where keys do not fit, the file comes back without them if the rest still makes a study, so that its meaning can be
    checked too; else ProblemsError.
    """
    raw = _toml(path)
    if isinstance(raw.get("target"), dict):
        raw["target"] = [raw["target"]]
    try:
        return StudyFile.model_validate(raw), []
    except ValidationError as error:
        entries = error.errors()
    faults = [_problem(path.name, raw, entry) for entry in entries]
    mended = without_faults(raw, [entry["loc"] for entry in entries])
    try:
        if mended is not None:
            return StudyFile.model_validate(mended), faults
    except ValidationError:
        pass
    raise ProblemsError(faults)


def read_find(raw: dict[str, Any]) -> FindSection:
    """What the command line gives in place of a study's [find]; ProblemsError lists what does not fit."""
    try:
        return FindSection.model_validate(raw)
    except ValidationError as error:
        raise ProblemsError([_problem("command line", {"find": raw}, {**entry, "loc": ("find", *entry["loc"])})
                             for entry in error.errors()]) from None


def _toml(path: Path) -> dict[str, Any]:
    try:
        text = path.read_text(encoding="utf-8-sig")  # some editors put a mark before the first letter
    except FileNotFoundError:
        raise ProblemsError(Problem(str(path), "no such file", "the path of a study file",
                                    "popsim new study.toml writes one to start from")) from None
    except OSError as error:
        raise ProblemsError(Problem(str(path), f"cannot be read: {error.strerror}", "a study file")) from None
    except UnicodeDecodeError:
        raise ProblemsError(Problem(str(path), "not UTF-8 text", "a text file",
                                    "save it as UTF-8 in the editor")) from None
    try:
        return tomllib.loads(text)
    except (ValueError, RecursionError) as error:  # also numbers of thousands of digits, and endless nesting
        reason = "nested too deeply" if isinstance(error, RecursionError) else str(error).partition(";")[0]
        raise ProblemsError(Problem(path.name, f"not valid TOML: {reason}", 'lines such as key = "value"',
                                    "text and quantities stand in double quotes")) from None


def key_path(*parts: str | int) -> str:
    """The way to a key in words: key_path("protocol", 0, "dose", 1, "amount") is "protocol 1, dose 2: amount"."""
    words: list[str] = []
    for part in parts:
        if isinstance(part, int):
            words[-1] = f"{words[-1]} {part + 1}"
        else:
            words.append(part)
    return words[0] if len(words) == 1 else ", ".join(words[:-1]) + ": " + words[-1]


def _problem(file: str, raw: dict, entry: dict) -> Problem:
    """One fault in our words; a target that stands alone is not numbered."""
    location = list(entry["loc"])
    if location[0] == "target" and len(location) > 1 and len(raw["target"]) == 1:
        del location[1]
    where = f"{file}: {key_path(*location)}"
    key, kind, given = location[-1], entry["type"], entry["input"]
    if kind == "extra_forbidden":
        known = known_keys(location[:-1])
        return Problem(where, f'unknown key "{key}"', ", ".join(known), nearest(key, known))
    if kind == "missing":
        return Problem(where, "missing", _EXAMPLES.get(key, "this key is required"))
    if kind == "value_error":
        inner = entry["ctx"]["error"].problems[0]
        return Problem(where, inner.found, inner.allowed, inner.advice)
    if kind == "literal_error":
        allowed = entry["ctx"]["expected"].replace("'", '"')
        words = [word.strip(' "') for word in allowed.replace(" or ", ",").split(",")]
        return Problem(where, shown(given), allowed, nearest(str(given), words))
    if kind in ("too_short", "too_long"):
        bound = "at least 1" if kind == "too_short" else f"at most {entry['ctx']['max_length']}"
        return Problem(where, f"{len(given)} of them", bound, _EXAMPLES.get(key, ""))
    return Problem(where, shown(given), _FORMS.get(kind) or _section_form(location))


_FORMS = {"bool_type": "true or false, without quotes"}


def _section_form(location: list[str | int]) -> str:
    """How the section is written that stands here as something else."""
    words = [part for part in location if isinstance(part, str)]
    if words[-1] == "repeat_with":
        return 'a list of names: ["propofol_schnider_1998"]'
    if words[-1] in ("group", "protocol", "dose", "band", "target", "vary"):
        return f"a section that begins with [[{'.'.join(words)}]]"
    return f"a section that begins with [{'.'.join(words)}]"


_EXAMPLES = {
    "title": 'title = "..."', "question": 'question = "Which protocol ...?"', "seed": "seed = 20261201",
    "until": 'until = "90 min"', "every": 'every = "30 s"', "during": 'during = "5 min to 60 min"',
    "model": 'model = "propofol_eleveld_2018"', "source": 'source = "survey", "list", "described" or "lattice"',
    "population": "a [population] section", "drug": "a [drug] section", "run": "a [run] section",
    "what": 'what = "dose 1: rate"', "over": 'over = "2 to 12 mg/kg/h"', "bands": "bands = 4",
    "edges_to": "edges_to = 5",
    "doses": 'doses = "100 to 900 mg/h"', "round_to": 'round_to = "50 mg/h"', "by": 'by = "weight"',
    "protocol": "at least one [[protocol]]", "target": "a [target] section", "dose": "at least one [[protocol.dose]]",
}


def read_dose(words: dict[str, Any], where: str) -> DoseSection:
    """One dose step from its words, such as {"at": "0 min", "amount": "200 mg"}; `where` says where they stand.

    Raises ProblemsError with all its faults, each at "where, column KEY".
    """
    try:
        return DoseSection.model_validate(words)
    except ValidationError as error:
        raise ProblemsError(replace(_problem("", words, entry), where=f"{where}, column {entry['loc'][-1]}")
                            for entry in error.errors()) from None
