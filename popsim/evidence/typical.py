"""What shipped sheets say of a typical person: half-lives, peaks, recovery times, levels, areas, needs.

Everything goes through the solver that `popsim judge` uses, not through derived.py: evidence of what is judged by.
A person is a man of 40 years, 70 kg, 170 cm, creatinine 1 mg/dL, every switch off, unless a claim says otherwise.
"""

from __future__ import annotations

import numpy as np

from covariates.sheet import DrugModel, parameters_of, read_sheet
from covariates.units import parse_quantity
from popsim import solve
from popsim.lookup import Lookup
from popsim.parameters import individual_parameters
from popsim.records import Disposition, Patients, Timeline
from popsim.scoring.files import dose_step, kinds_of, timeline_of
from popsim.scoring.predict import rows_of
from popsim.streams import BLOCK, normals
from popsim.study_records import Variability

USUAL = {"sex": "male", "age": "40", "weight": "70", "height": "170", "serum_creatinine": "1"}
FINE_MIN = 0.001
SEED = 1
EVERYONE = np.zeros(BLOCK, dtype=np.int64)  # one person's timeline, given to all


def person(model: DrugModel, given: dict[str, str]) -> dict[str, np.ndarray]:
    """Attributes as arrays of one; covariates given by name win over their equations."""
    words = {**USUAL, **dict.fromkeys(model.switches, "false"), **given}
    return {name: np.array([_value(text)]) for name, text in words.items()}


def _value(text: str) -> object:
    if text in ("true", "false"):
        return text == "true"
    try:
        return float(text)
    except ValueError:
        return text


def minutes(text: str) -> float:
    return parse_quantity(text, ["time"]).value


def typical(name: str, given: dict[str, str]) -> tuple[DrugModel, dict[str, np.ndarray], dict[str, np.ndarray]]:
    """The sheet, the person's attributes and typical parameters in mg, L, min."""
    model = read_sheet(name)
    attributes = person(model, given)
    return model, attributes, parameters_of(model, Lookup(attributes), {}, 1)


def parameter(model: str, name: str, scale: str = "1", **given: str) -> float:
    """A typical parameter; `scale` turns L/min into another unit."""
    return float(typical(model, given)[2][name][0]) * float(scale)


def half_life(model: str, phase: str, **given: str) -> float:
    """Half-life of the fast, middle or slow phase, min."""
    sheet, _, values = typical(model, given)
    used = np.sort(np.log(2) / solve.disposition(values).rates[0][:sheet.compartments])
    return float(used[{"fast": 0, "middle": 1, "slow": -1}[phase]])


def time_to_peak(model: str, over: str = "0 min", **given: str) -> float:
    """Minutes from the start of an injection to the peak of the effect site."""
    _, _, values = typical(model, given)
    duration = minutes(over)
    if duration == 0:
        timeline = Timeline(np.zeros((1, 1)), np.ones((1, 1)), np.zeros((1, 1)))
    else:
        timeline = Timeline(np.array([[0.0, duration]]), np.zeros((1, 2)), np.array([[1.0 / duration, 0.0]]))
    grid = np.arange(0.0, 30.0, FINE_MIN)
    return float(grid[solve.courses_on_grid(solve.disposition(values), timeline, grid)[1][0].argmax()])


def time_to_fall(model: str, after: str, hold: str, share: str = "0.5", **given: str) -> float:
    """Minutes that plasma takes to fall to `share` of its level when a drug is stopped.

    hold  "level": plasma was held constant; "rate": the rate was
    """
    _, _, values = typical(model, given)
    timeline = holding(values, minutes(after)) if hold == "level" else Timeline(
        np.array([[0.0, minutes(after)]]), np.zeros((1, 2)), np.array([[1.0, 0.0]]))
    found, stop = solve.disposition(values), minutes(after)
    grid = stop + np.arange(0.0, 900.0, 0.01)
    plasma = solve.courses_on_grid(found, timeline, grid)[0][0]
    below = int(np.argmax(plasma <= float(share) * plasma[0]))
    if below == 0:
        return float("nan")
    return float(np.interp(-float(share) * plasma[0], -plasma[below - 1:below + 1], grid[below - 1:below + 1]) - stop)


def later_to_fall(model: str, other: str, after: str, hold: str) -> float:
    """Minutes by which the first drug takes longer than the other to fall to half."""
    return time_to_fall(model, after, hold) - time_to_fall(other, after, hold)


def holding(values: dict[str, np.ndarray], until_min: float, step_min: float = 0.5) -> Timeline:
    """A bolus and stepwise rates that keep plasma at 1 mg/L: what is eliminated and what passes into tissue.

    Rate at time t: CL + Q2 exp(-k21 t) + Q3 exp(-k31 t), averaged over each step. Source: the mammillary model.
    """
    edges = np.append(np.arange(0.0, until_min, step_min), until_min)
    amount = need(values, edges[:-1], edges[1:])
    time, rate = edges[None, :], np.append(amount / np.diff(edges), 0.0)[None, :]
    bolus = np.zeros_like(time)
    bolus[0, 0] = values["V1"][0]
    return Timeline(time, bolus, rate)


def need(values: dict[str, np.ndarray], start: np.ndarray, end: np.ndarray) -> np.ndarray:
    """mg to give between start and end to hold plasma at 1 mg/L."""
    total = values["CL"][0] * (end - start)
    for volume, flow in (("V2", "Q2"), ("V3", "Q3")):
        if volume in values:
            back = values[flow][0] / values[volume][0]
            total = total + values[volume][0] * (np.exp(-back * start) - np.exp(-back * end))
    return total


def maintenance(model: str, level: str, start: str, end: str, **given: str) -> float:
    """mg/kg/h, on average from start to end, that hold plasma at `level` (a concentration, or the parameter C50)."""
    _, attributes, values = typical(model, given)
    wanted = float(values["C50"][0]) if level == "C50" else parse_quantity(level, ["concentration"]).value
    first, last = minutes(start), minutes(end)
    amount = need(values, np.array([first]), np.array([last]))[0] * wanted
    return float(amount / (last - first) * 60 / attributes["weight"][0])


def doses(text: str, attributes: dict[str, np.ndarray]) -> Timeline:
    """"at: 0 min, amount: 1 mg/kg | at: 20 s, rate: 10 mg/kg/h, until: 10 min" as events."""
    kinds = kinds_of(attributes)
    steps = [dose_step({key.strip(): value.strip() for key, _, value in
                        (word.partition(":") for word in step.split(","))}, "doses", kinds)
             for step in text.split("|")]
    return timeline_of(steps, attributes)


def _given(model: str, text: str, given: dict[str, str]) -> tuple[Disposition, Timeline]:
    _, attributes, values = typical(model, given)
    return solve.disposition(values), doses(text, attributes)


def level(model: str, given_as: str, at: str, course: str = "plasma", scale: str = "1", **given: str) -> float:
    """Concentration at a time, mg/L times `scale`."""
    found, timeline = _given(model, given_as, given)
    plasma, site = solve.courses_on_grid(found, timeline, np.array([minutes(at)]))
    return float({"plasma": plasma, "effect_site": site}[course][0, 0]) * float(scale)


def level_by_mouth(model: str, amount: str, at: str, **given: str) -> float:
    """Concentration at a time after one dose by mouth, mg/L."""
    _, _, values = typical(model, given)
    none, dose = np.zeros((1, 1)), np.full((1, 1), parse_quantity(amount, ["mass"]).value)
    timeline = Timeline(none, none, none, oral_mg=dose)
    return float(solve.courses_on_grid(solve.disposition(values), timeline, np.array([minutes(at)]))[0][0, 0])


def area(model: str, given_as: str, start: str, end: str, **given: str) -> float:
    """Area under the plasma course, mg.h/L."""
    found, timeline = _given(model, given_as, given)
    ends = (np.array([minutes(edge)]) for edge in (start, end))
    return float(solve.area_under_curve(found, timeline, "plasma", *ends)[0][0] / 60)


def share_above(model: str, given_as: str, low: str, start: str, end: str, unbound: str = "1", **given: str) -> float:
    """Share of a window with unbound plasma at or above `low`, in %."""
    found, timeline = _given(model, given_as, given)
    limit = parse_quantity(low, ["concentration"]).value / float(unbound)
    course = solve.window_course(found, timeline, "plasma", np.array([limit]), np.array([np.inf]),
                                 np.array([minutes(start)]), np.array([minutes(end)]))
    return 100.0 * float(course.inside[0])


def _alike(model: str, given: dict[str, str], spread_from: str = "") -> Disposition:
    """8192 people alike but for their luck, by the sheet's own spread or that of another sheet."""
    sheet, attributes, _ = typical(model, given)
    variability = Variability(between_subject=True, scale=1.0,
                              from_model=read_sheet(spread_from) if spread_from else None)
    many = Patients(1, 0, np.arange(BLOCK), {name: np.repeat(array, BLOCK) for name, array in attributes.items()})
    return solve.disposition(individual_parameters(sheet, variability, SEED, many, Lookup(many.attributes)).values)


def _spread_levels(model: str, given_as: str, at: list[float], given: dict[str, str]) -> np.ndarray:
    """Levels (8192, times) of people alike but for their luck, relative to the typical person's."""
    found, timeline = _given(model, given_as, given)
    everyone = solve.courses_on_grid(_alike(model, given), rows_of(timeline, EVERYONE), np.array(at))[0]
    return everyone / solve.courses_on_grid(found, timeline, np.array(at))[0]


def area_attained(model: str, given_as: str, start: str, end: str, low: str, spread_from: str = "",
                  **given: str) -> float:
    """Share of people alike but for their luck whose area from start to end reaches `low`, in %."""
    _, timeline = _given(model, given_as, given)
    ends = (np.full(BLOCK, minutes(edge)) for edge in (start, end))
    areas, _ = solve.area_under_curve(_alike(model, given, spread_from), rows_of(timeline, EVERYONE), "plasma", *ends)
    return float((areas >= parse_quantity(low, ["area"]).value).mean() * 100)


def fold_range(model: str, given_as: str, at: str, **given: str) -> float:
    """97.5th over 2.5th percentile of the level at a time, between people alike but for their luck."""
    low, high = np.percentile(_spread_levels(model, given_as, [minutes(at)], given), [2.5, 97.5])
    return float(high / low)


def expected_inaccuracy(model: str, given_as: str, at: str, error: str, **given: str) -> float:
    """Median over people of the median absolute error that the sheet's own spread makes, in %, with a measurement
    error of `error` (SD of ln), at the times `at` (min, separated by blanks)."""
    times = [float(word) for word in at.split()]
    ratio = _spread_levels(model, given_as, times, given)
    noise = np.stack([normals(SEED, f"error {k}", 0) for k in range(len(times))], axis=1)
    return float(np.median(np.median(np.abs(ratio * np.exp(float(error) * noise) - 1), axis=1)) * 100)
