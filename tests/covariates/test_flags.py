"""Where equations mislead: who is flagged, that nobody is clipped, and what is behind a covariate."""

import doctest

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from covariates import flags as module
from covariates.catalogue import EQUATIONS, compute
from covariates.flags import FLAGS, equations_behind, flags_of

weights, heights = st.floats(40, 250), st.floats(140, 210)
sexes = st.sampled_from(["female", "male"])
JAMES = ("lean_body_mass_james", "so heavy that this lean body mass falls as weight rises")
NORMAL = ("predicted_normal_weight", "so heavy that this normal weight falls as weight rises")


def flags(name, **person):
    person = {key: np.array([value]) for key, value in person.items()}
    return {flag: bool(mark[0]) for flag, mark in flags_of(name, lambda used: compute(used, person), person).items()}


# Thresholds computed independently from the printed equation: 42.97 (men), 36.15 kg/m2 (women).
@pytest.mark.parametrize(("sex", "threshold"), [("male", 42.97), ("female", 36.15)])
def test_james_turns_over_at_the_stated_mass_index(sex, threshold):
    lower, upper = (
        flags(JAMES[0], sex=sex, height=170.0, weight=(threshold + step) * 1.7**2)[JAMES] for step in (-0.006, 0.006)
    )
    assert not lower and upper


@given(weights, heights, sexes)
def test_what_turns_over_falls_past_the_flag_and_rises_before(weight, height, sex):
    for flag in (JAMES, NORMAL):
        before = flags(flag[0], sex=sex, height=height, weight=weight)[flag]
        after = flags(flag[0], sex=sex, height=height, weight=weight + 1e-3)[flag]
        lighter, heavier = (
            compute(flag[0], {"sex": sex, "height": height, "weight": w}) for w in (weight, weight + 1e-3)
        )
        if before == after:  # both on one side of the peak
            assert heavier < lighter if before else heavier > lighter


def test_flags_are_those_of_every_equation_behind():
    person = {"sex": "female", "age": 40.0, "weight": 45.0, "height": 150.0, "serum_creatinine": 1.0}
    found = flags("creatinine_clearance_cockcroft_gault_adjusted", **person)
    short = ("ideal_body_weight_devine", "shorter than 60 inches (152.4 cm), where the line is only continued")
    assert found[short]
    assert not flags("creatinine_clearance_cockcroft_gault_adjusted", **person | {"height": 152.5})[short]
    assert not any(flags("creatinine_clearance_cockcroft_gault_total", **person).values())
    thin = ("adjusted_body_weight", "lighter than their ideal weight, so that it lies above total weight")
    assert found[thin] == (person["weight"] < float(compute("ideal_body_weight_devine", person)))
    assert equations_behind("creatinine_clearance_cockcroft_gault_adjusted") == [
        "ideal_body_weight_devine", "adjusted_body_weight", "creatinine_clearance_cockcroft_gault_adjusted"
    ]  # fmt: skip
    assert equations_behind("weight") == equations_behind("days_after_burn") == []


def test_children_are_flagged_for_equations_of_adults():
    child = {"sex": "male", "age": 10.0, "weight": 30.0, "height": 140.0}
    young = ("lean_body_mass_boer", "under 18 years, while the equation is for adults")
    assert young in flags("lean_body_mass_boer", **child)
    assert not any(flags("fat_free_mass_al_sallami", **child).values())
    assert any(flags("fat_free_mass_al_sallami", **child | {"age": 2.0}).values())


def test_a_flag_that_needs_what_nobody_brought_is_left_out_and_own_values_are_not_flagged():
    assert list(flags("lean_body_mass_james", sex="male", weight=70.0, height=170.0)) == [JAMES]
    assert flags("lean_body_mass_james", lean_body_mass_james=50.0, sex="male", weight=200.0, height=170.0) == {}


def test_every_flag_belongs_to_an_equation_and_needs_what_its_equation_could_have():
    assert set(FLAGS) <= set(EQUATIONS)
    everything = {"sex": "male", "age": 50.0, "weight": 80.0, "height": 175.0, "serum_creatinine": 1.0}
    for name, of_equation in FLAGS.items():
        assert {(name, flag.words) for flag in of_equation} <= set(flags(name, **everything))


def test_the_example_is_true():
    result = doctest.testmod(module)
    assert result.attempted == 1 and result.failed == 0
