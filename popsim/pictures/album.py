"""Every picture that a finished run's tables allow, in the order of a report."""

from __future__ import annotations

import re
from collections.abc import Iterator
from pathlib import Path

from popsim.drawing import house_style
from popsim.finished import FinishedRun, own_site
from popsim.pictures.age_weight import age_weight
from popsim.pictures.bands import bands
from popsim.pictures.body_size import body_size, shown_rows
from popsim.pictures.by_group import by_group
from popsim.pictures.mic import mic
from popsim.pictures.models import models
from popsim.pictures.over_time import over_time
from popsim.pictures.shown import Picture, Shown
from popsim.pictures.sides import sides


def draw_all(run: FinishedRun, folder: Path, kind: str = "svg") -> list[Picture]:
    """Draw every picture of a run into `folder` as svg, png or pdf, and tell what was drawn."""
    with house_style():
        return [*_each_target(run, folder, kind), *_over_mic(run, folder, kind), *_whole_run(run, folder, kind)]


def _each_target(run: FinishedRun, folder: Path, kind: str) -> Iterator[Picture]:
    """By group, over time, on which side, percentiles, by age and weight. A target of one MIC among many is left to
    the picture over all of them."""
    endings = _endings(run)
    for model in run.models:
        for target in run.targets:
            if _family(target):
                continue
            shown = Shown(run, model, target)
            drawn = [("attainment_by_group", by_group)]
            if len(shown.over_time):
                if shown.over_time["in_range"].notna().any():
                    drawn += [("attainment_over_time", over_time), ("below_in_above", sides)]
                drawn.append(("concentration_bands", bands))
            if len(shown.rows("attainment_map")):
                drawn.append(("attainment_map", age_weight))
            for name, draw in drawn:
                yield draw(shown, folder / f"{name}{endings[model.name, target.name]}.{kind}")


def _over_mic(run: FinishedRun, folder: Path, kind: str) -> Iterator[Picture]:
    families = dict.fromkeys(filter(None, map(_family, run.targets)))
    table = run.tables["attainment"]
    for model in run.models:
        for number, family in enumerate(families, 1):
            names = [target.name for target in run.targets if _family(target) == family]
            rows = table[(table["model"] == model.name) & table["target"].isin(names)]
            ending = f"_{_safe(model.name)}" * (len(run.models) > 1) + f"_{number}" * (len(families) > 1)
            yield mic(run, model, family, rows, folder / f"attainment_by_mic{ending}.{kind}")


def _whole_run(run: FinishedRun, folder: Path, kind: str) -> Iterator[Picture]:
    """Models against each other, except in the effect site; body size, where doses depend on it."""
    comparable = [target for target in run.targets if not own_site(target) and not _family(target)]
    for number, target in enumerate(comparable if len(run.models) > 1 else (), 1):
        ending = f"_{number}" * (len(comparable) > 1)
        yield models(run, target, folder / f"models_compared{ending}.{kind}")
    if len(shown_rows(run)):
        yield body_size(run, folder / f"body_size.{kind}")


def _family(target) -> str:
    """What the targets of all MICs of one section are called together; empty for a target without MIC."""
    return getattr(getattr(target, "mic", None), "family", "")


def _endings(run: FinishedRun) -> dict[tuple[str, str], str]:
    """What tells the file names apart: nothing where there is one model and target, else their names made safe."""
    endings: dict[tuple[str, str], str] = {}
    for model in run.models:
        for target in run.targets:
            parts = [model.name] * (len(run.models) > 1) + [target.name] * (len(run.targets) > 1)
            words = "".join(f"_{_safe(part)}" for part in parts)
            same = sum(re.sub(r"__\d+$", "", ending) == words for ending in endings.values())
            endings[model.name, target.name] = f"{words}__{same + 1}" if same else words
    return endings


def _safe(name: str) -> str:
    return re.sub(r"[^a-z0-9]+", "_", name.lower()).strip("_")[:60]
