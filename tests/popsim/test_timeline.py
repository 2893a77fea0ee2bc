"""Dose steps against doses worked out by hand from the rules of the study file, and what must always hold."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from covariates.formula import compile_formula
from covariates.problems import ProblemsError
from covariates.units import parse_quantity
from popsim.study_records import DoseStep, DoseVariant, Protocol
from popsim.timeline import administrations_of, as_given, build_timeline

KINDS = ["mass", "mass_per_kg", "mass_per_m2", "rate", "rate_per_kg", "rate_per_m2"]
PEOPLE = {"weight": np.array([50.0, 90.0, 120.0]), "age": np.array([30.0, 60.0, 80.0]),
          "body_surface_area_mosteller": np.array([1.5, 2.0, 2.5])}


def dose(text: str | None):
    return None if text is None else parse_quantity(text, KINDS)


def variant(amount=None, rate=None, at=0.0, every=None, where=None) -> DoseVariant:
    condition = None if where is None else compile_formula(where, "", "condition")
    return DoseVariant(condition, at, every, dose(amount), dose(rate))


def step(*variants: DoseVariant, number=1, where=None, by="weight", over=None, until=None, times=None, at_most=None,
         at_least=None, round_to=None) -> DoseStep:
    condition = None if where is None else compile_formula(where, "", "condition")
    return DoseStep(number, condition, variants, by, over, until, times, at_most, at_least, round_to)


def protocol(*steps: DoseStep, no_dose_allowed=False) -> Protocol:
    return Protocol("card", "weight", None, None, no_dose_allowed, steps)


def given_to(person: int, *steps: DoseStep, until=90.0, no_dose_allowed=False) -> list[tuple[float, float, float]]:
    """(time, bolus, rate) of every event of one of PEOPLE."""
    timeline, _ = build_timeline(protocol(*steps, no_dose_allowed=no_dose_allowed), PEOPLE.__getitem__, 3, until)
    events = zip(timeline.time_min[person], timeline.bolus_mg[person], timeline.rate_mg_per_min[person], strict=True)
    return [(float(t), float(bolus), float(rate)) for t, bolus, rate in events if np.isfinite(t)]


def received(*steps: DoseStep, until=90.0, no_dose_allowed=False):
    return build_timeline(protocol(*steps, no_dose_allowed=no_dose_allowed), PEOPLE.__getitem__, 3, until)[1]


@pytest.mark.parametrize(("wanted", "floor", "cap", "steps", "given_mg", "changes"), [
    (82.5, None, None, 10, 80, "rounded"),
    (85, None, None, 10, 90, "rounded"),            # half up
    (75, None, None, 10, 80, "rounded"),            # half up, not half to even
    (0.15, None, None, 0.1, 0.2, "rounded"),        # half up although 0.15 / 0.1 is below 1.5 in binary
    (80, None, None, 10, 80, ""),
    (0.3, None, None, 0.1, 0.3, ""),                # 0.3 / 0.1 is 2.9999999999999996 steps: nothing was rounded
    (250, None, 200, None, 200, "capped"),
    (200, None, 200, None, 200, ""),
    (30, 50, 200, None, 50, "floored"),
    (105, None, 100, 15, 90, "capped rounded"),     # 100 would round up to 105, above the cap
    (98, None, 100, 15, 90, "rounded"),             # 98 would round up to 105, above the cap
    (44, 44, 200, 10, 40, "rounded"),               # only the cap is kept to after rounding
    (3, None, None, 10, 0, "rounded"),
])
def test_scaled_doses_are_floored_capped_and_rounded_in_that_order(wanted, floor, cap, steps, given_mg, changes):
    result, floored, capped, rounded = as_given(np.array([float(wanted)]), floor, cap, steps)
    assert result[0] == pytest.approx(given_mg, rel=1e-12, abs=1e-12)
    assert {"floored": floored[0], "capped": capped[0], "rounded": rounded[0]} == {
        word: word in changes for word in ("floored", "capped", "rounded")}


def test_a_bolus_per_kg_is_scaled_by_the_covariate_that_by_names():
    assert given_to(1, step(variant("1.5 mg/kg"))) == [(0, 135, 0)]
    assert given_to(1, step(variant("50 mg/m2"), by="body_surface_area_mosteller")) == [(0, 100, 0)]
    assert given_to(1, step(variant("2 g"))) == [(0, 2000, 0)]


def test_a_dose_over_a_time_is_a_rate_for_that_time():
    assert given_to(0, step(variant("2 mg/kg"), over=0.5)) == [(0, 0, 200), (0.5, 0, 0)]


def test_an_infusion_ends_at_until_or_after_over():
    assert given_to(0, step(variant(rate="6 mg/kg/h", at=10), until=60)) == [(10, 0, pytest.approx(5)), (60, 0, 0)]
    assert given_to(0, step(variant(rate="6 mg/kg/h", at=10), over=20)) == [(10, 0, pytest.approx(5)), (30, 0, 0)]


def test_an_amount_with_a_rate_lasts_as_long_as_that_takes():
    assert given_to(2, step(variant("10 mg/kg", "20 mg/min"))) == [(0, 0, 20), (60, 0, 0)]
    # a cap on the amount shortens the infusion, the rate stays
    assert given_to(2, step(variant("10 mg/kg", "20 mg/min"), at_most=600)) == [(0, 0, 20), (30, 0, 0)]


def test_limits_of_a_rate_are_rates():
    capped = step(variant(rate="6 mg/kg/h"), until=60, at_most=10, round_to=1)
    assert [given_to(person, capped)[0][2] for person in range(3)] == pytest.approx([5, 9, 10])
    assert received(capped).capped.tolist() == [False, False, True]
    assert received(capped).rounded.tolist() == [False, False, False]


@pytest.mark.parametrize(("repeats", "until", "times"), [
    ({"times": 3}, 90, [10, 15, 20]),                # all administrations counted
    ({"times": 3}, 15, [10, 15]),                    # the run ends
    ({"until": 25.0}, 90, [10, 15, 20]),             # none at until itself
    ({"until": 25.1}, 90, [10, 15, 20, 25]),
    ({}, 30, [10, 15, 20, 25]),                      # to the run's end
    ({"until": 500.0}, 20, [10, 15]),                # until past the run's end
    ({"times": 1}, 90, [10]),
])
def test_repeats(repeats, until, times):
    events = given_to(0, step(variant("20 mg", at=10, every=5), **repeats), until=float(until))
    assert [time for time, _, _ in events] == pytest.approx(times)
    assert [bolus for _, bolus, _ in events] == [20] * len(times)


def test_repeated_times_are_multiplied_not_added_up():
    events = given_to(0, step(variant("1 mg", every=0.1), times=800))
    assert [time for time, _, _ in events] == [k * 0.1 for k in range(800)]


def test_steps_add_up_and_overlapping_infusions_add():
    loading = step(variant("100 mg"), number=1)
    first = step(variant(rate="5 mg/min"), number=2, until=30)
    second = step(variant(rate="2 mg/min", at=10), number=3, until=60)
    assert given_to(0, loading, first, second) == [(0, 100, 0), (0, 0, 5), (10, 0, 7), (30, 0, 2), (60, 0, 0)]
    assert received(loading, first, second).total_mg == pytest.approx([100 + 150 + 100] * 3)


def test_what_lies_beyond_the_runs_end_is_not_received():
    assert received(step(variant(rate="2 mg/min"), until=60), until=45.0).total_mg == pytest.approx([90] * 3)
    assert received(step(variant("60 mg", at=40), over=10), until=45.0).total_mg == pytest.approx([30] * 3)


def test_where_reaches_only_its_patients():
    everyone = step(variant("10 mg"))
    some = step(variant("5 mg", at=10), number=2, where="age < 70")
    assert received(everyone, some).total_mg.tolist() == [15, 15, 10]
    with pytest.raises(ProblemsError, match="no dose step covers 1 of 3 patients"):
        received(step(variant("5 mg"), where="age < 70"))
    allowed = received(step(variant("5 mg"), where="age < 70"), no_dose_allowed=True)
    assert allowed.undosed.tolist() == [False, False, True]


def test_bands_give_each_patient_its_own_dose_and_time():
    banded = step(variant("500 mg", where="age < 50", every=60.0), variant("250 mg", at=5, where="age >= 50"))
    assert given_to(0, banded) == [(0, 500, 0), (60, 500, 0)]
    assert given_to(2, banded) == [(5, 250, 0)]


def test_two_bands_for_one_patient_are_refused_always_and_no_band_unless_allowed():
    twice = step(variant("1 mg", where="age <= 60"), variant("2 mg", where="age >= 60"))
    for allowed in (True, False):
        with pytest.raises(ProblemsError, match="two bands cover 1 of 3 patients"):
            received(twice, no_dose_allowed=allowed)
    gap = step(variant("1 mg", where="age < 60"), variant("2 mg", where="age > 60"))
    with pytest.raises(ProblemsError, match="no band of dose 1 covers 1 of 3 patients"):
        received(step(variant("1 mg")), gap)
    assert received(gap, no_dose_allowed=True).total_mg.tolist() == [1, 0, 2]


def test_a_dose_rounded_to_nothing_is_marked():
    small = received(step(variant("0.1 mg/kg"), round_to=20))
    assert small.impossible.tolist() == [True, True, False]
    assert small.undosed.tolist() == [True, True, False]


@pytest.mark.parametrize("size", [0.0, -3.0, np.nan, np.inf])
@pytest.mark.parametrize("doses", [{"amount": "1 mg/kg"}, {"amount": "5 mg", "rate": "1 mg/kg/h"}])
def test_a_size_that_nobody_can_be_dosed_by_is_refused(size, doses):
    people = {"dosing_weight": np.array([70.0, size])}
    with pytest.raises(ProblemsError, match="dosing_weight is zero, negative or unknown in 1 patients"):
        administrations_of(protocol(step(variant(**doses), by="dosing_weight")), people.__getitem__, 2, 60.0)


@pytest.mark.parametrize("column", [np.array([True, False]), np.array(["female", "male"])])
def test_a_switch_or_a_text_is_no_size(column):
    with pytest.raises(ProblemsError, match="frail is no number"):
        administrations_of(protocol(step(variant("1 mg/kg"), by="frail")), {"frail": column}.__getitem__, 2, 60.0)


def test_longest_infusion_joins_what_follows_without_a_pause():
    first, second = step(variant(rate="5 mg/min"), until=20), step(variant(rate="3 mg/min", at=20), number=2, until=50)
    third = step(variant(rate="3 mg/min", at=60), number=3, until=300)
    assert received(first, second, third).longest_infusion_min.tolist() == [50] * 3
    assert received(second, first).longest_infusion_min.tolist() == [50] * 3
    assert received(third).longest_infusion_min.tolist() == [30] * 3   # the run ends at 90
    # 0.2 + (0.9 - 0.2) is 0.8999999999999999: the next infusion starts one rounding later, which is no pause
    assert 0.2 + (0.9 - 0.2) < 0.9
    joined = received(step(variant(rate="5 mg/min", at=0.2), until=0.9),
                      step(variant(rate="3 mg/min", at=0.9), number=2, until=2.2))
    assert joined.longest_infusion_min == pytest.approx([2.0] * 3)


minutes = st.floats(0, 80).map(lambda x: round(x, 2))
amounts = st.floats(0.01, 500).map(lambda x: f"{x:.3f} mg") | st.floats(0.01, 5).map(lambda x: f"{x:.3f} mg/kg")
rates = st.floats(0.01, 50).map(lambda x: f"{x:.3f} mg/min") | st.floats(0.01, 20).map(lambda x: f"{x:.3f} mg/kg/h")


@st.composite
def steps(draw, number=1):
    limits = {"at_most": draw(st.none() | st.floats(5, 200)), "round_to": draw(st.sampled_from([None, 0.1, 5.0, 15.0]))}
    at, every = draw(minutes), draw(st.none() | st.floats(1, 40))
    repeats = {} if every is None else draw(st.sampled_from([{}, {"times": 4}, {"until": at + 30}]))
    shape = draw(st.sampled_from(["bolus", "over", "with rate", "rate"]))
    if shape == "rate":
        return step(variant(rate=draw(rates), at=at, every=every), number=number, over=draw(st.floats(0.5, 60)),
                    **limits, **repeats)
    rate = draw(rates) if shape == "with rate" else None
    over = draw(st.floats(0.5, 60)) if shape == "over" else None
    return step(variant(draw(amounts), rate, at, every), number=number, over=over, **limits, **repeats)


@settings(max_examples=150, deadline=None)
@given(st.lists(st.integers(1, 3), min_size=1, max_size=4).flatmap(
    lambda numbers: st.tuples(*(steps(number=k + 1) for k, _ in enumerate(numbers)))))
def test_timelines_are_in_order_never_negative_and_add_up_to_what_is_received(several):
    until = 90.0
    timeline, got = build_timeline(protocol(*several), PEOPLE.__getitem__, 3, until)
    finite = np.isfinite(timeline.time_min)
    assert (timeline.time_min[:, 1:] >= timeline.time_min[:, :-1]).all()
    assert (timeline.rate_mg_per_min >= 0).all() and (timeline.bolus_mg >= 0).all()
    last = finite.sum(axis=1) - 1
    assert (timeline.rate_mg_per_min[np.arange(3), last] == 0).all()
    ends = np.minimum(timeline.time_min, until)
    spans = np.diff(ends, axis=1, append=np.full((3, 1), until))
    total = (timeline.bolus_mg + timeline.rate_mg_per_min * spans).sum(axis=1)
    assert total == pytest.approx(got.total_mg, rel=1e-9, abs=1e-9)
    assert (got.longest_infusion_min <= until + 1e-9).all()


@settings(max_examples=150, deadline=None)
@given(steps())
def test_no_administration_is_above_the_cap(one):
    administrations, _ = administrations_of(protocol(one), PEOPLE.__getitem__, 3, 90.0)
    for administration in administrations:
        given_mg = administration.amount_mg
        if one.variants[0].amount is None:
            given_mg = given_mg / administration.duration_min
        if one.at_most is not None:
            assert (given_mg <= one.at_most * (1 + 1e-12)).all()
