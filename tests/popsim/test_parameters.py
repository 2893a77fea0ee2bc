"""Individual parameters: the spread that a sheet states comes out of many patients."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from covariates.sheet import read_sheet
from popsim.lookup import Lookup
from popsim.parameters import forms_used, individual_parameters, outside_ranges, random_effects, spread_used
from popsim.records import Patients
from popsim.streams import normals
from popsim.study_records import Variability

BIS, MINTO, MARSH = (
    read_sheet(name) for name in ("propofol_eleveld_2018", "remifentanil_minto_1997", "propofol_marsh_1991")
)
SCHNIDER = read_sheet("propofol_schnider_1998")
N = 8192
OWN, TYPICAL = Variability(True, 1.0, None), Variability(False, 1.0, None)


def alike(n=N, block=0, first=1, **other) -> Patients:
    person = {
        "sex": np.full(n, "male"),
        "age": np.full(n, 40.0),
        "weight": np.full(n, 70.0),
        "height": np.full(n, 170.0),
        "bmi": np.full(n, 70 / 1.7**2),
        "opioid": np.full(n, True),
        "venous_sampling": np.full(n, False),
    }
    return Patients(first, block, np.arange(n), {**person, **other})


def drawn(model, variability, patients=None, seed=5):
    patients = patients or alike()
    return individual_parameters(model, variability, seed, patients, Lookup(patients.attributes))


@pytest.mark.parametrize("scale", [0.7, 1.0, 1.3])
def test_the_sd_of_ln_is_recovered(scale):
    """The SD of n draws has a standard error of sd / sqrt(2 n), the mean one of sd / sqrt(n): within 4.5 of them."""
    typical = drawn(BIS, TYPICAL).values
    found = drawn(BIS, Variability(True, scale, None)).values
    for name in ("V1", "V2", "V3", "CL", "ke0", "C50"):
        omega = BIS.spread[name]
        deviation = np.log(found[name] / typical[name])
        assert deviation.std() == pytest.approx(scale * omega, rel=4.5 / np.sqrt(2 * N)), name
        assert abs(deviation.mean()) < 4.5 * scale * omega / np.sqrt(N)


@pytest.mark.parametrize(("flow", "volume"), [("Q2", "V2"), ("Q3", "V3")])
def test_a_parameter_computed_from_another_carries_its_spread_too(flow, volume):
    """Eleveld 2018: Q2 goes with the individual V2 to the power 0.75 (from memory), so the variances of ln add up."""
    deviation = np.log(drawn(BIS, OWN).values[flow] / drawn(BIS, TYPICAL).values[flow])
    both = np.hypot(BIS.spread[flow], 0.75 * BIS.spread[volume])
    assert deviation.std() == pytest.approx(both, rel=4.5 / np.sqrt(2 * N))


def test_typical_patients_are_all_alike():
    found = drawn(MINTO, TYPICAL).values
    assert all(np.ptp(values) == 0 for values in found.values())
    at_zero = drawn(MINTO, Variability(True, 0.0, None)).values
    assert all((at_zero[name] == found[name]).all() for name in found)


def test_borrowed_variability_acts_on_volumes_and_clearances_alone():
    borrowed = Variability(True, 1.0, BIS)
    assert set(spread_used(MARSH, borrowed)) == {"V1", "V2", "V3", "CL", "Q2", "Q3"}
    assert "C50" in BIS.spread and "ke0" in BIS.spread
    found, typical = drawn(MARSH, borrowed).values, drawn(MARSH, TYPICAL).values
    assert (found["ke0"] == typical["ke0"]).all()
    assert np.log(found["CL"] / typical["CL"]).std() == pytest.approx(BIS.spread["CL"], rel=0.04)
    assert spread_used(BIS, borrowed) == BIS.spread  # its own is used whole


def test_the_same_luck_under_two_models_and_whoever_else_is_there():
    a, b = (random_effects(model, Variability(True, 1.0, BIS), 5, alike()) for model in (MARSH, BIS))
    assert all((a[name] == b[name]).all() for name in a)
    later = Patients(
        101, 0, np.arange(100, 200), {name: values[100:200] for name, values in alike().attributes.items()}
    )
    whole, part = drawn(BIS, OWN).values, drawn(BIS, OWN, later).values
    assert all((part[name] == whole[name][100:200]).all() for name in whole)


def test_other_seed_other_block_other_luck():
    base = random_effects(BIS, OWN, 5, alike())["CL"]
    for other in (random_effects(BIS, OWN, 6, alike()), random_effects(BIS, OWN, 5, alike(block=1))):
        assert abs(np.corrcoef(base, other["CL"])[0, 1]) < 4.5 / np.sqrt(N)


def test_correlations_are_recovered():
    """Standard error of a correlation: (1 - r^2) / sqrt(n)."""
    together = replace(BIS, correlations={("V1", "CL"): 0.6, ("V2", "V1"): -0.4})
    effects = random_effects(together, OWN, 5, alike())
    matrix = np.corrcoef([effects[name] for name in ("V1", "CL", "V2", "Q2")])
    wanted = {(0, 1): 0.6, (0, 2): -0.4, (1, 2): 0.0, (0, 3): 0.0}
    for pair, r in wanted.items():
        assert matrix[pair] == pytest.approx(r, abs=4.5 * (1 - r * r) / np.sqrt(N)), pair
    assert effects["CL"].std() == pytest.approx(BIS.spread["CL"], rel=0.04)


def test_correlations_at_scale_zero_are_typical_patients():
    together = replace(BIS, correlations={("V1", "CL"): 0.6})
    effects = random_effects(together, Variability(True, 0.0, None), 5, alike(n=10))
    assert all((values == 0).all() for values in effects.values())


def test_effects_of_different_parameters_are_not_correlated():
    effects = random_effects(BIS, OWN, 5, alike())
    matrix = np.abs(np.corrcoef(list(effects.values())) - np.eye(len(effects)))
    assert matrix.max() < 4.5 / np.sqrt(N)


def test_who_is_outside():
    low, high = (getattr(MINTO.built_on.ranges["age"], side) for side in ("low", "high"))
    ages = np.array([low, high, low - 0.1, high + 0.1, 40.0])
    patients = alike(n=5, age=ages)
    found = drawn(MINTO, TYPICAL, patients)
    assert found.beyond["age"].tolist() == [False, False, True, True, False]
    assert found.outside.tolist() == [False, False, True, True, False]
    assert (found.outside == np.any(list(found.beyond.values()), axis=0)).all()


def test_a_model_of_one_sex():
    men_only = replace(MINTO, built_on=replace(MINTO.built_on, sex="male"))
    patients = alike(n=2, sex=np.array(["male", "female"]))
    assert outside_ranges(men_only, Lookup(patients.attributes))["sex"].tolist() == [False, True]


def test_nobody_is_outside_of_people_who_are_not_known():
    assert not drawn(MARSH, TYPICAL, alike(n=3, weight=np.array([1.0, 70.0, 300.0]))).outside.any()


def test_typical_values_in_print():
    """Schnider 1998 at 53 years, 77 kg, 177 cm: V1 4.27, V2 18.9, V3 238 L, Q2 1.29, Q3 0.836 L/min; CL 1.89 at a lean
    body mass (James) of 59 kg, less 0.0681 for each kg above, here 60.48 kg (from memory)."""
    values = drawn(
        SCHNIDER, TYPICAL, alike(n=1, age=np.array([53.0]), weight=np.array([77.0]), height=np.array([177.0]))
    ).values
    found = [values[name][0] for name in ("V1", "V2", "V3", "CL", "Q2", "Q3")]
    np.testing.assert_allclose(found, [4.27, 18.9, 238.0, 1.89 - 0.0681 * 1.48, 1.29, 0.836], rtol=2e-3)


def test_a_study_may_set_variability_parameter_by_parameter():
    set_by_study = {"CL": (0.5, "lognormal"), "V3": (0.0, "lognormal"), "V1": (0.2, "normal, relative")}
    own = Variability(True, 1.3, None, set_by_study)
    assert spread_used(MINTO, own)["CL"] == pytest.approx(0.65)
    assert "V3" not in spread_used(MINTO, own) and forms_used(MINTO, own) == {"V1": "normal, relative"}
    found, typical, plain = (drawn(MINTO, variability).values for variability in (own, TYPICAL, OWN))
    assert np.log(found["CL"] / typical["CL"]).std() == pytest.approx(0.65, rel=4.5 / np.sqrt(2 * N))
    assert (found["V3"] == typical["V3"]).all()
    assert (found["V1"] / typical["V1"]).std() == pytest.approx(0.26, rel=4.5 / np.sqrt(2 * N))
    # the same luck as before, only its size has changed
    assert np.log(found["CL"] / typical["CL"]) == pytest.approx(
        np.log(plain["CL"] / typical["CL"]) * 0.65 / MINTO.spread["CL"], abs=1e-12)
    assert np.log(found["V2"] / typical["V2"]) == pytest.approx(1.3 * np.log(plain["V2"] / typical["V2"]), abs=1e-12)


def test_a_normal_parameter_that_falls_below_zero_is_not_clipped():
    wild = drawn(MINTO, Variability(True, 1.0, None, {"CL": (0.6, "normal, relative")})).values["CL"]
    assert (wild < 0).mean() == pytest.approx(0.048, abs=0.01)  # share of a standard normal below -1/0.6


def test_every_luck_of_a_patient_is_independent_of_every_other():
    """All streams that a survey patient under two models uses: every correlation within 4.5 standard errors."""
    names = [f"survey.{name}" for name in ("height", "bmi", "serum_creatinine")]
    names += [f"spread {name}" for name in {*BIS.spread, *MINTO.spread}]
    luck = np.stack([np.concatenate([normals(5, name, block) for block in range(10)]) for name in names])
    ties = np.corrcoef(luck)[np.triu_indices(len(names), 1)]
    assert len(ties) == 55 and np.abs(ties).max() < 4.5 / np.sqrt(10 * N)
    squares = np.corrcoef(luck**2)[np.triu_indices(len(names), 1)]
    assert np.abs(squares).max() < 4.5 / np.sqrt(10 * N)
