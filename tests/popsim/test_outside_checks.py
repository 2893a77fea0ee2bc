"""The main job against what others say: integrators, closed forms, the trade's rules, published outcomes.

Every test goes from study file to tables or kept courses.
"""

from __future__ import annotations

import math
import runpy
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.linalg import expm
from scipy.stats import norm

from covariates.sheet import parameters_of, read_sheet
from popsim.lookup import Lookup

HERE = Path(__file__)
cases = SimpleNamespace(**runpy.run_path(str(HERE.with_name("judge_cases.py"))))
rate_matrix = runpy.run_path(str(HERE.with_name("solver_cases.py")))["rate_matrix"]
TYPICAL = "between_subject = false"
SWITCHES = "\n[population.set]\nopioid = true\nvenous_sampling = false"
ANY_PLASMA = 'quantity = "plasma"\nrange = ">= 0 mg/L"\nduring = "0 min"'


def man_of(age, weight, height):
    lean = 1.10 * weight - 128 * (weight / height) ** 2  # James, from memory
    return SimpleNamespace(age=age, weight=weight, height=height, lean=lean, row=f"male,{age},{weight},{height}")


def marsh(p):
    """Marsh 1991, Br J Anaesth 67:41-8 (from memory)."""
    v1 = 0.228 * p.weight
    return {
        "V1": v1,
        "CL": 0.119 * v1,
        "Q2": 0.112 * v1,
        "Q3": 0.0419 * v1,
        "V2": 0.112 / 0.055 * v1,
        "V3": 0.0419 / 0.0033 * v1,
        "ke0": 0.26,
    }


def schnider(p):
    """Schnider 1998, Anesthesiology 88:1170-82; ke0 Schnider 1999, 90:1502-16 (from memory)."""
    cl = 1.89 + 0.0456 * (p.weight - 77) - 0.0681 * (p.lean - 59) + 0.0264 * (p.height - 177)
    return {
        "V1": 4.27,
        "V2": 18.9 - 0.391 * (p.age - 53),
        "V3": 238.0,
        "CL": cl,
        "Q2": 1.29 - 0.024 * (p.age - 53),
        "Q3": 0.836,
        "ke0": 0.456,
    }


def minto(p):
    """Minto 1997, Anesthesiology 86:10-23 (from memory)."""
    a, m = p.age - 40, p.lean - 55
    return {
        "V1": 5.1 - 0.0201 * a + 0.072 * m,
        "V2": 9.82 - 0.0811 * a + 0.108 * m,
        "V3": 5.42,
        "CL": 2.6 - 0.0162 * a + 0.0191 * m,
        "Q2": 2.05 - 0.0301 * a,
        "Q3": 0.076 - 0.00113 * a,
        "ke0": 0.595 - 0.007 * a,
    }


def eleveld(p):
    """Eleveld 2018, Br J Anaesth 120:942-59, its reference person: a man of 35 years, 70 kg, 170 cm, with an opioid,
    arterial (from memory)."""
    v3 = 273 * math.exp(-0.0138 * 35)
    weeks = 52.143 * 35 + 40
    return {
        "V1": 6.28,
        "V2": 25.5,
        "V3": v3,
        "CL": 1.79 * math.exp(-0.00286 * 35),
        "Q2": 1.75 * (1 + 1.30 * 68.3 / (weeks + 68.3)),
        "Q3": 1.11 * (v3 / 273) ** 0.75,
        "ke0": 0.146,
    }


MODELS = {
    "propofol_marsh_1991": (marsh, man_of(40, 80, 180), "1 mg/kg", 80.0, "10 mg/kg/h", 800 / 60),
    "propofol_schnider_1998": (schnider, man_of(67, 64, 168), "100 mg", 100.0, "600 mg/h", 10.0),
    "remifentanil_minto_1997": (minto, man_of(67, 64, 168), "100 ug", 0.1, "600 ug/h", 0.01),
    "propofol_eleveld_2018": (eleveld, man_of(35, 70, 170), "2 mg/kg", 140.0, "6 mg/kg/h", 7.0),
}


def courses(folder, model, person, doses, until="60 min", every="1 min"):
    """Times, plasma and effect site of one typical person, mg/L."""
    rows = []
    asked = cases.study(
        folder,
        model=model,
        population=cases.people(folder, [person.row]) + SWITCHES,
        variability=TYPICAL,
        groups={},
        protocols={"a": doses},
        targets=(ANY_PLASMA,),
        until=until,
        every=every,
    )
    cases.simulate(asked, sink=rows.append, keep_courses=True)
    _, _, plasma, site, _ = rows[0].courses[0]
    return asked.grid_min(), plasma[0], site[0]


@pytest.mark.parametrize("model", MODELS)
def test_typical_people_as_scipy_has_them(tmp_path, model):
    """scipy.linalg.expm, and scipy.integrate.solve_ivp at rtol 1e-10, of the equations in print, relative to peak."""
    equations, person, bolus, bolus_mg, rate, rate_mg_per_min = MODELS[model]
    times, plasma, site = courses(
        tmp_path, model, person, f'amount = "{bolus}"\n---\nrate = "{rate}"\nuntil = "60 min"'
    )
    p = equations(person)
    matrix = rate_matrix(p)
    start = np.array([bolus_mg / p["V1"], 0, 0, 0, rate_mg_per_min])
    exact = np.stack([expm(matrix * t) @ start for t in times])
    integrated = solve_ivp(lambda t, y: matrix @ y, (0, 60), start, "LSODA", times, rtol=1e-10, atol=1e-14).y.T
    for ours, column in ((plasma, 0), (site, 3)):
        assert np.abs(ours - exact[:, column]).max() < 1e-9 * exact[:, column].max()
        assert np.abs(ours - integrated[:, column]).max() < 1e-7 * ours.max()


def test_exponential_rules_of_the_trade(tmp_path):
    """95 % of steady state after three time constants, 97 % after five half-lives (common practice).

    Here: 60 and 69.3 min."""
    sheet = cases.sheet(tmp_path, volume="10", clearance="0.5")
    times, plasma, _ = courses(
        tmp_path, sheet, man_of(40, 80, 180), 'rate = "5 mg/min"\nuntil = "400 min"', "400 min", "1 min"
    )
    steady = 5 / 0.5
    assert plasma[60] / steady == pytest.approx(0.95, abs=0.001)
    assert np.interp(5 * math.log(2) * 20, times, plasma) / steady == pytest.approx(0.97, abs=0.002)
    assert plasma[-1] == pytest.approx(steady, rel=1e-8)


@pytest.mark.parametrize("model", ["propofol_marsh_1991", "propofol_schnider_1998", "propofol_eleveld_2018"])
def test_propofol_fills_about_four_litres_per_kilogram(model):
    """V1 + V2 + V3 of a 70 kg adult: about 4 L/kg, 3.3 to 4.5 (common practice)."""
    one = {"sex": "male", "age": 40.0, "weight": 70.0, "height": 170.0, "opioid": False, "venous_sampling": False}
    attributes = {name: np.array([value]) for name, value in one.items()}
    values = parameters_of(read_sheet(model), Lookup(attributes), {}, 1)
    assert 3.3 < sum(values[name][0] for name in ("V1", "V2", "V3")) / 70 < 4.5


ROBERTS = (
    'amount = "1 mg/kg"\nover = "20 s"\n---\nat = "20 s"\nrate = "10 mg/kg/h"\nover = "10 min"\n---\nat = "620 s"\n'
    'rate = "8 mg/kg/h"\nover = "10 min"\n---\nat = "1220 s"\nrate = "6 mg/kg/h"\nuntil = "90 min"'
)


def test_the_manual_scheme_holds_about_three(tmp_path):
    """Roberts 1988, Anaesthesia 43 suppl:14-7 (from memory): 1 mg/kg (here over 20 s), then 10, 8, 6 mg/kg/h holds
    about 3 ug/mL, 3.67 measured within 2 min. An independent calculation with Marsh 1991: 3.67, 3.21, 2.97, 2.61, 2.75,
    2.85 at 2, 10, 20, 30, 60, 90 min; given as a bolus at once the first would be 3.71."""
    times, plasma, _ = courses(tmp_path, "propofol_marsh_1991", man_of(40, 70, 175), ROBERTS, "90 min")
    at = {int(t): c for t, c in zip(times, plasma, strict=True)}
    np.testing.assert_allclose(
        [at[t] for t in (2, 10, 20, 30, 60, 90)], [3.67, 3.21, 2.97, 2.61, 2.75, 2.85], atol=0.0051
    )
    assert np.abs(plasma[2:] - 3).max() < 0.7


@pytest.mark.parametrize(("low", "high"), [(8.0, 12.5), (11.0, 100.0), (0.0, 9.0)])
def test_attainment_in_closed_form(tmp_path, low, high):
    """One compartment, clearance lognormal with SD 0.3, an infusion at steady state: C = rate / CL is lognormal, so the
    share in range is a normal probability (scipy.stats.norm). Within its 99.9 % interval for 20,000 patients."""
    spread = 'printed_as = "sd of ln"\nCL = { value = 0.3, evidence = "from memory" }'
    sheet = cases.sheet(tmp_path, volume="1", clearance="0.5", spread=spread)
    target = f'quantity = "plasma"\nrange = "{low} to {high} mg/L"\nduring = "900 min to 1000 min"'
    target += '\nattained_when = "80 % of the time"'
    asked = cases.study(
        tmp_path,
        count=20_000,
        model=sheet,
        groups={},
        targets=(target,),
        until="1000 min",
        every="500 min",
        protocols={"a": 'rate = "5 mg/min"\nuntil = "1000 min"'},
    )
    row = cases.judged(asked)[1]["attainment"].iloc[0]
    below, upto = (norm.cdf(math.log(limit / 10), scale=0.3) if limit else 0.0 for limit in (low, high))
    share = upto - below
    half = norm.ppf(0.9995) * math.sqrt(share * (1 - share) / 20_000)
    for column, wanted in (
        ("attained", share),
        ("time_in_range", share),
        ("time_below", below),
        ("time_above", 1 - upto),
    ):
        assert abs(row[column] - wanted) <= half + 1e-9, column


def test_percentiles_in_closed_form(tmp_path):
    """The same infusion: percentiles of a lognormal, exp(0.3 z) times 10 (scipy.stats.norm), within 2.5 %."""
    spread = 'printed_as = "sd of ln"\nCL = { value = 0.3, evidence = "from memory" }'
    sheet = cases.sheet(tmp_path, volume="1", clearance="0.5", spread=spread)
    asked = cases.study(
        tmp_path,
        count=20_000,
        model=sheet,
        groups={},
        targets=(ANY_PLASMA,),
        until="1000 min",
        every="500 min",
        protocols={"a": 'rate = "5 mg/min"\nuntil = "1000 min"'},
    )
    row = cases.judged(asked)[1]["over_time"].iloc[1]  # at 500 min; at 1000 min the infusion ends
    wanted = 10 * np.exp(0.3 * norm.ppf([0.05, 0.25, 0.5, 0.75, 0.95]))
    np.testing.assert_allclose(row[["p05", "p25", "p50", "p75", "p95"]].astype(float), wanted, rtol=0.025)


def test_remifentanil_at_one_rate_suits_the_old_worse(tmp_path):
    """Direction known from rough independent runs: 85 and 58 % under 65 and not obese, 84 and 13 % at 65 and over,
    76 and 6 % at 75 and over. Within 8 points, far more than 3,000 patients' luck, far less than what is claimed."""
    groups = {"under 65": "age < 65 and bmi < 30", "65": "age >= 65", "75": "age >= 75"}
    asked = cases.study(tmp_path, count=3000, groups=groups)
    attained = cases.judged(asked)[1]["attainment"].set_index(["group", "protocol"])["attained"]
    for group, (low_rate, high_rate) in {"under 65": (0.85, 0.58), "65": (0.84, 0.13), "75": (0.76, 0.06)}.items():
        assert attained[group, "600 ug/h"] == pytest.approx(low_rate, abs=0.08)
        assert attained[group, "900 ug/h"] == pytest.approx(high_rate, abs=0.08)


def test_propofol_by_adjusted_weight_cures_obesity_not_age(tmp_path):
    """Direction known from rough independent runs: time too deep falls from 46 to 27 % at BMI 35 and over, from 66 to
    58 % at 75 and over. Only the direction, and that obesity gains more than age, is asked."""
    doses = ROBERTS.replace("1 mg/kg", "1.5 mg/kg")
    target = 'quantity = "effect"\nrange = "40 to 60"\nduring = "10 min to 60 min"\nattained_when = "80 % of the time"'
    population = cases.SURVEY.format(count=3000) + '\nbmi = "18.5 to 60 kg/m2"' + SWITCHES
    deep = {}
    for by in ("weight", "adjusted_body_weight"):
        asked = cases.study(
            tmp_path,
            model="propofol_eleveld_2018",
            population=population,
            protocols={"a": doses},
            groups={"obese": "bmi >= 35", "old": "age >= 75"},
            targets=(target,),
            until="90 min",
            in_protocol=f'by = "{by}"',
        )
        deep[by] = cases.judged(asked)[1]["attainment"].set_index("group")["time_below"]
    gained = deep["weight"] - deep["adjusted_body_weight"]
    assert gained["obese"] > 0.12 and 0.02 < gained["old"] < gained["obese"] - 0.05
    assert deep["adjusted_body_weight"]["old"] > deep["adjusted_body_weight"]["obese"] + 0.15


def test_no_regimen_spreads_more_than_a_bolus(tmp_path):
    """Theorem of linear kinetics (a published one; its statement from memory): at time t, SD / mean over patients of
    any regimen given alike to all is at most the largest SD / mean after a bolus at any time up to t. For a finite set
    of patients it holds exactly. Boluses are followed every 2 s."""

    def relative_spread(doses, every):
        rows = []
        asked = cases.study(tmp_path, count=200, groups={}, protocols={"a": doses}, targets=(ANY_PLASMA,), every=every)
        cases.simulate(asked, sink=rows.append, keep_courses=True)
        plasma = rows[0].courses[0][2]
        with np.errstate(invalid="ignore"):
            return asked.grid_min(), np.nanstd(plasma, axis=0) / np.nanmean(plasma, axis=0)

    times, bolus = relative_spread('amount = "100 ug"', "2 s")
    largest = np.maximum.accumulate(bolus)
    for doses in (
        'rate = "600 ug/h"\nuntil = "60 min"',
        'rate = "900 ug/h"\nuntil = "20 min"',
        'amount = "50 ug"\nevery = "7 min"',
        'amount = "50 ug"\n---\nat = "10 min"\nrate = "300 ug/h"\nuntil = "30 min"',
    ):
        at, found = relative_spread(doses, "1 min")
        assert (found[1:] <= np.interp(at, times, largest)[1:] * (1 + 1e-3)).all()
