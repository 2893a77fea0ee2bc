"""What `popsim check` prints. Loads numpy at most, so that a look at a study costs no wait."""

from __future__ import annotations

import numpy as np

from popsim.cautions import CAUTIONS
from popsim.flagged import flag_counts, flag_notes
from popsim.groups import members
from popsim.lookup import Lookup
from popsim.parameters import individual_parameters
from popsim.patients.draw import blocks
from popsim.screen import WIDTH, wrapped
from popsim.study_records import DoseStep, Protocol, Study, Variability
from popsim.timeline import build_timeline
from popsim.ward_card import CardLine, card_lines, describe, example_people, step_as_written
from popsim.words import clock, per_kg_line, percent, target_line


def check_text(study: Study, looked_at: int) -> str:
    """The study in words, the ward cards, and who lies outside the model among the first patients."""
    lines = [*wrapped(study.title), *wrapped(study.question), ""]
    count = study.population.count
    again = ", drawn again and again" if study.population.resampled else ""
    lines += [f"Patients  {f'{count:,}' if count else 'all'} ({study.population.source}{again}), seed {study.seed}"]
    lines += [f"Run       {clock(study.until_min)}, a table row every {clock(study.every_min)}"]
    for target in study.targets:
        lines += wrapped(target_line(target), "Target    ")
    for model in study.models:
        lines += wrapped(f"{model.name}: {model.source['citation']} (evidence: {model.evidence})", "Model     ")
        lines += wrapped(f"built on {model.built_on.people}", "          ")
    lines += ["", *_cards(study)]
    lines += ["", *_who(study, looked_at)]
    if study.warnings:
        lines += ["", "Note", *(line for warning in study.warnings for line in wrapped(warning, "- "))]
    lines += ["", "Caution", *(line for caution in CAUTIONS for line in wrapped(caution, "- "))]
    return "\n".join(line.rstrip() for line in lines)


def _cut(text: str, width: int) -> str:
    return text if len(text) <= width else text[:width - 2] + ".."


def _cards(study: Study) -> list[str]:
    """Every protocol as its ward card, each step with what the example people get of it."""
    labels, attributes = example_people(study)
    width = max(len(label) for label in labels)
    lines = ["Example people"]
    lines += [f"  {label:<{width}}  {describe(attributes, i)}" for i, label in enumerate(labels)]
    seen: dict[tuple, str] = {}
    for protocol in study.protocols:
        strength = f", {protocol.strength_text}" if protocol.strength_text else ""
        title = f'Ward card "{protocol.name}" ({per_kg_line(protocol)}{strength})'
        lines += ["", *wrapped(title), "=" * min(len(title), WIDTH)]
        for step, of_step in zip(protocol.steps, card_lines(study, protocol, attributes), strict=True):
            lines += _step_lines(protocol, step, of_step, labels, seen)
    return lines


def _step_lines(protocol: Protocol, step: DoseStep, of_step: list[CardLine | None], labels: tuple[str, ...],
                seen: dict[tuple, str]) -> list[str]:
    """The step as written, then person by person; once for all when everyone gets the same, or got it before."""
    times = {line.when for line in of_step if line is not None}
    together = f"{times.pop()}: " if len(times) == 1 else ""
    heading = wrapped(together + step_as_written(step), f"{step.number}  ")
    what = [_given(line, together) for line in of_step]
    key = (step.number, *heading, *what)
    if key in seen:
        return [*heading, *wrapped(f'the same as under "{seen[key]}"', "     ")]
    seen[key] = protocol.name
    if not any(of_step):
        return [*heading, "     none of these people"]
    if len(set(what)) == 1:
        return [*heading, *wrapped(what[0], "     everyone: ")]
    width = max(len(label) for label in labels)
    return heading + [line for label, given in zip(labels, what, strict=True)
                      for line in wrapped(given, f"     {label:<{width}}  ")]


def _given(line: CardLine | None, together: str) -> str:
    if line is None:
        return "-"
    given = " = ".join(part for part in (line.given, line.volume) if part)
    return (("" if together else f"{line.when}: ") + given + (f"  [{line.remark}]" if line.remark else ""))


def _who(study: Study, looked_at: int) -> list[str]:
    """Groups, events and the share outside each model among the first patients."""
    names = study.group_names
    counts = np.zeros(len(names), dtype=np.int64)
    outside = {model.name: np.zeros(len(names), dtype=np.int64) for model in study.models}
    events: dict[str, int] = {}
    flags: dict[tuple[str, str], int] = {}
    typical = Variability(False, 1.0, None)
    for patients in blocks(study.population, study.seed):
        lookup = Lookup(patients.attributes)
        belongs = members(study.groups, lookup, len(patients)).astype(np.int64)
        counts += belongs.sum(axis=0)
        for flag, count in flag_counts(study, lookup, patients.attributes).items():
            flags[flag] = flags.get(flag, 0) + count
        for protocol in study.protocols:
            timeline, _ = build_timeline(protocol, lookup, len(patients), study.until_min)
            most = int(np.isfinite(timeline.time_min).sum(axis=1).max())
            events[protocol.name] = max(events.get(protocol.name, 0), most)
        for model in study.models:
            marked = individual_parameters(model, typical, study.seed, patients, lookup).outside
            outside[model.name] += belongs.T @ marked
        if counts[0] >= looked_at:
            break
    lines = [f"Among the first {counts[0]:,} patients"]
    for name, most in events.items():
        lines += wrapped(f'at most {most} dose events under "{name}"', "  ")
    width = min(max(len(name) for name in names), WIDTH - 34)
    for model in study.models:
        lines += wrapped(f"outside the people that {model.name} was built on:", "  ")
        lines += [f"    {_cut(name, width):<{width}}  {percent(marked / n if n else float('nan')):>5} % of {n:,}"
                  for name, marked, n in zip(names, outside[model.name], counts, strict=True)]
    for note in flag_notes(study, flags, int(counts[0])):
        lines += wrapped(note, "  ")
    return lines
