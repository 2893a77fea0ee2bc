"""Attainment against a closed form, and against outcomes that others published."""

from __future__ import annotations

import math
import runpy
from pathlib import Path
from types import SimpleNamespace

import pytest
from scipy import stats

from popsim.study import read_study

cases = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("judge_cases.py"))))
SETTINGS = [(omega, dose, low) for omega in (0.1, 0.25, 0.4, 0.6, 0.9) for dose, low in ((400, 180), (500, 300),
                                                                                         (900, 400), (1200, 700))]


@pytest.mark.parametrize("omega", sorted({omega for omega, _, _ in SETTINGS}))
def test_attainment_at_steady_state_is_a_normal_probability(tmp_path, omega):
    """One compartment, clearance lognormal (CL = 2 L/h): the area of an interval at steady state is dose / CL, so
    P(low <= area <= 1.5 low) = Phi((ln(dose/low) - ln CL)/omega) - Phi((ln(dose/(1.5 low)) - ln CL)/omega). Twenty
    settings, each within the 99.9 % interval of so many draws. Source: the normal distribution function of scipy."""
    spread = f'printed_as = "sd of ln"\nCL = {{ value = {omega}, evidence = "seen" }}'
    name = cases.sheet(tmp_path, clearance=str(2 / 60), spread=spread)
    of = [(dose, low) for some, dose, low in SETTINGS if some == omega]
    for dose, low in of:
        target = f'quantity = "area_under_curve"\nrange = "{low} to {1.5 * low} mg.h/L"\nduring = "steady state"'
        asked = cases.study(tmp_path, count=8000, model=name, groups={}, targets=(target,), until="24 h", every="12 h",
                            protocols={"dose": f'amount = "{dose} mg"\nevery = "12 h"'}, compare="robustness = false")
        attained = cases.judged(asked)[1]["attainment"]["attained"].iloc[0]
        ends = [(math.log(dose / limit) - math.log(2)) / omega for limit in (low, 1.5 * low)]
        wanted = stats.norm.cdf(ends[0]) - stats.norm.cdf(ends[1])
        least, most = stats.binom.ppf([0.0005, 0.9995], 8000, wanted) / 8000
        assert least <= attained <= most, (dose, low, attained, wanted)


def test_vancomycin_4_g_a_day_in_extreme_obesity(tmp_path):
    """Adane 2015 (Pharmacotherapy 35:127-39): on 4 g a day a median area over 24 h of 582.9 mg.h/L (quartiles 513.8 and
    726.2), at least 93 % above 400. One compartment, 0.51 L/kg, clearance 6.54 L/h (seen): the typical area is 612. Its
    spread (CV 26.7 % and 23.9 %) is recalled, low, and stands in this test alone: no shipped sheet has it, and with the
    spread of vancomycin_goti_2018 (38 %) only 87 % lie above 400, which the paper does not bear out. Median within
    10 %, ratio of the quartiles within 10 %."""
    spread = ('printed_as = "cv"\nCL = { value = 0.267, evidence = "recalled, low" }\n'
              'V1 = { value = 0.239, evidence = "recalled, low" }')
    name = cases.sheet(tmp_path, volume="0.51 * weight", clearance=str(6.54 / 60), spread=spread)
    target = 'quantity = "area_under_curve"\nlow = "400 mg.h/L"\nduring = "steady state"\nper = "24 h"'
    population = cases.SURVEY.format(count=4000) + '\nbmi = "40 to 70 kg/m2"'
    asked = cases.study(tmp_path, model=name, groups={}, targets=(target,), until="48 h", every="12 h",
                        population=population,
                        protocols={"4 g a day": 'amount = "2 g"\nover = "2 h"\nevery = "12 h"'})
    tables = cases.judged(asked)[1]
    area = tables["values"].query("measure == 'value'").iloc[0]
    assert area.p50 / 60 == pytest.approx(582.9, rel=0.1)
    assert area.p75 / area.p25 == pytest.approx(726.2 / 513.8, rel=0.1)
    assert tables["attainment"]["attained"].iloc[0] >= 0.93


HALVES = [("alfentanil_scott_1987", "1 mg/min", 47.3, 12.0), ("remifentanil_minto_1997_simple", "20 ug/min", 3.2, 0.9)]


@pytest.mark.parametrize(("model", "rate", "mean", "sd"), HALVES)
def test_recovery_to_half_after_three_hours(tmp_path, model, rate, mean, sd):
    """Kapila 1995 (author from memory): 3 h of infusion, then the time to half the level was 47.3 +- 12 min for
    alfentanil and 3.2 +- 0.9 min for remifentanil (seen). The typical patient must lie within two of
    their SDs; remifentanil comes out a minute too short (2.2 min), as the source notes expect of this model."""
    def ask(target):
        return cases.judged(cases.study(
            tmp_path, count=3, model=model, groups={}, targets=(target,), until="360 min", every="60 min",
            variability="between_subject = false",
            protocols={"3 h": f'rate = "{rate}"\nuntil = "180 min"'}))[1]["values"].set_index("measure")

    level = ask('quantity = "plasma"\nlow = "0 mg/L"\nduring = "180 min"').loc["value", "p50"]
    waited = ask(f'quantity = "plasma"\nlow = "0 mg/L"\nduring = "180 min"\nrecovers_at = "{level / 2} mg/L"')
    assert abs(waited.loc["recovery_min", "p50"] - mean) <= 2 * sd


def test_propofol_need_falls_with_age(tmp_path):
    """Maintenance need by age up to 30, 31 to 50, 51 to 70, over 70: 5.9, 5.4, 4.5, 3.5 mg/kg/h (seen). Under
    propofol_eleveld_2018 with an opioid, the least rate among rates 0.5 mg/kg/h apart at which the typical BIS of both
    sexes is at most 50 after 2 h: within 0.75 of each (the step, and half a step for the ages within a band)."""
    rates = [round(2.5 + 0.5 * k, 1) for k in range(12)]
    cards = {f"{rate}": f'amount = "1.5 mg/kg"\n---\nrate = "{rate} mg/kg/h"\nuntil = "120 min"' for rate in rates}
    target = 'quantity = "effect"\nrange = "0 to 50"\nduring = "120 min"'
    people = cases.people(tmp_path, [f"{sex},{age},70,170" for age in (25, 40, 60, 76) for sex in ("male", "female")])
    groups = {f"{age}": f"age == {age}" for age in (25, 40, 60, 76)}
    asked = cases.study(tmp_path, model="propofol_eleveld_2018", groups=groups, targets=(target,), until="120 min",
                        every="60 min",
                        population=people + "\n[population.set]\nopioid = true\nvenous_sampling = false",
                        variability="between_subject = false", protocols=cards)
    found = cases.judged(asked)[1]["attainment"]
    need = {age: min(float(row.protocol) for row in found.itertuples() if row.group == age and row.attained == 1)
            for age in groups}
    assert list(need.values()) == pytest.approx([5.9, 5.4, 4.5, 3.5], abs=0.75)


def test_cefazolin_2_g_in_obesity(tmp_path):
    """2 g gives an area of 402 (obese) and 450 (not) mg.h/L (2021, seen); dose / CL is 389 and 432 in the sheets made
    of the same study, so 5 %."""
    for model, published in (("cefazolin_obese_2021", 402), ("cefazolin_not_obese_2021", 450)):
        target = (f'quantity = "area_under_curve"\nrange = "{0.95 * published} to {1.05 * published} mg.h/L"\n'
                  'during = "0 h to 24 h"')
        asked = cases.study(tmp_path, count=5, model=model, groups={}, targets=(target,), until="24 h", every="1 h",
                            variability="between_subject = false", protocols={"2 g": 'amount = "2 g"'})
        assert cases.judged(asked)[1]["attainment"]["attained"].tolist() == [1.0]


def test_meropenem_1_g_every_8_h(tmp_path):
    """Wittau 2015: 1 g every 8 h over 15 min reaches 40 % of the interval above 2 mg/L in over 90 %, at 53 kg fat-free
    mass (CL 18.7 L/h, Vss 27.6 L, seen). The typical patient of those two numbers, one compartment, is above 2 mg/L for
    53 % of the interval (computed in the source notes)."""
    name = cases.sheet(tmp_path, volume="27.6", clearance=str(18.7 / 60))
    target = ('quantity = "plasma"\nover_mic = ">= 1"\nmic = "2 mg/L"\nduring = "steady state"\n'
              'attained_when = "40 % of the time"')
    asked = cases.study(tmp_path, count=5, model=name, groups={}, targets=(target,), until="24 h", every="1 h",
                        variability="between_subject = false",
                        protocols={"1 g": 'amount = "1 g"\nover = "15 min"\nevery = "8 h"'})
    row = cases.judged(asked)[1]["attainment"].iloc[0]
    assert row.attained == 1 and row.time_in_range == pytest.approx(0.53, abs=0.02)


def test_cefazolin_above_two_mg_per_l_until_closure_within_4_h():
    """The bariatric study of 2022 (14 patients, BMI 36 to 69): 2 g keep unbound cefazolin above 2 mg/L for 4 h in over
    95 % (seen). The shipped study's patients whose wound is closed within 4 h must do so too."""
    study = read_study(Path(__file__).resolve().parents[2] / "configs" / "cefazolin_second_dose.toml")
    found = cases.judged(study)[1]["attainment"]
    row = found.query("group == 'closed within 4 h' and protocol == '2 g' and mic == 2").iloc[0]
    assert row.attained > 0.95
