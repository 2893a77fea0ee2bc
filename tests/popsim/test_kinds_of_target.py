"""Every kind of target against what one compartment gives by hand, in patients who are all alike."""

from __future__ import annotations

import math
import runpy
from pathlib import Path
from types import SimpleNamespace

import pytest

from covariates.problems import ProblemsError

cases = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("judge_cases.py"))))
V, CL = 10.0, 0.5  # L, L/min
K = CL / V
BOLUS = {"100 mg": 'amount = "100 mg"'}
REPEATED = {"100 mg": 'amount = "100 mg"\nevery = "20 min"'}


def run(folder, target: str, protocols=BOLUS, more="", until="60 min", drug="", **named):
    """Tables of a study of three like people; `more` goes into the sheet's equations."""
    (folder / "one.toml").write_text(cases.SHEET.format(
        name="one", volume=str(V), clearance=str(CL), more=more, spread='published = false\nnote = "none"'))
    people = cases.people(folder, ["female,40,60,165", "male,60,80,175", "male,80,100,180"])
    asked = cases.study(folder, model=f'one.toml"\n{drug}\n#"', groups={}, population=people, targets=(target,),
                        protocols=protocols, variability="between_subject = false", until=until, **named)
    return cases.judged(asked)[1]


def value(tables, measure="value", column="p50") -> float:
    rows = tables["values"].query("measure == @measure")
    return rows[column].iloc[0]


def area(quantity: str, during: str, more: str = "") -> str:
    return f'quantity = "{quantity}"\nlow = "0 mg.h/L"\nduring = "{during}"\n{more}'


def test_area_over_a_window(tmp_path):
    tables = run(tmp_path, area("area_under_curve", "0 min to 30 min"))
    assert value(tables) == pytest.approx(100 / CL * (1 - math.exp(-K * 30)), rel=5e-3)
    assert tables["over_time"]["in_range"].isna().all() and tables["over_time"]["p50"].notna().all()


def test_area_per_day_and_at_steady_state(tmp_path):
    """At steady state an interval's area is dose / CL, whatever came before: 100/0.5 = 200, 72 of them a day."""
    per_day = 'per = "24 h"'
    tables = run(tmp_path, area("area_under_curve", "steady state", per_day), REPEATED)
    assert value(tables) == pytest.approx(200 * 72, rel=5e-3)
    early = run(tmp_path, area("area_under_curve", "0 min to 20 min", per_day), REPEATED)
    share = 1 - math.exp(-K * 20)
    assert value(early) == pytest.approx(200 * 72 * share, rel=5e-3)
    assert value(early, "of_steady_state") == pytest.approx(share, rel=5e-3)


@pytest.mark.parametrize(("quantity", "during", "wanted"), [
    ("peak", "steady state", 10 / (1 - math.exp(-1))),
    ("trough", "steady state", 10 * math.exp(-1) / (1 - math.exp(-1))),
    ("average", "steady state", 100 / CL / 20),
    ("peak", "20 min to 40 min", 10 * (1 + math.exp(-1))),
    ("trough", "40 min", 10 * (math.exp(-1) + math.exp(-2))),
    ("trough", "20 min to 40 min", 10 * (math.exp(-1) + math.exp(-2))),
])
def test_peaks_and_troughs(tmp_path, quantity, during, wanted):
    """Bolus of 10 mg/L every 20 min, k x 20 min = 1: geometric sums. A trough is the value just before the dose."""
    tables = run(tmp_path, f'quantity = "{quantity}"\nlow = "{wanted * 0.999} mg/L"\nhigh = "{wanted * 1.001} mg/L"\n'
                           f'during = "{during}"', REPEATED)
    assert tables["attainment"]["attained"].tolist() == [1.0]
    assert value(tables) == pytest.approx(wanted, rel=5e-3)


def test_unbound_drug_counts_once(tmp_path):
    unbound = 'fraction_unbound = 0.2\nfraction_unbound_source = "a test"'
    target = 'quantity = "unbound_peak"\nlow = "1.999 mg/L"\nhigh = "2.001 mg/L"\nduring = "0 min to 30 min"'
    assert run(tmp_path, target, drug=unbound)["attainment"]["attained"].tolist() == [1.0]
    with pytest.raises(ProblemsError, match="gives no fraction unbound"):
        run(tmp_path, target)
    text = cases.SHEET.replace("total plasma", "unbound plasma")
    sheet = text.format(name="free", volume="10", clearance="0.5", more="", spread='published = false\nnote = "none"')
    (tmp_path / "free.toml").write_text(sheet)
    people = cases.people(tmp_path, ["female,40,60,165"])
    free = dict(model="free.toml", groups={}, population=people, protocols=BOLUS, variability="between_subject = false")
    ten = target.replace("1.999", "9.999").replace("2.001", "10.001")
    assert cases.judged(cases.study(tmp_path, targets=(ten,), **free))[1]["attainment"]["attained"].tolist() == [1.0]
    with pytest.raises(ProblemsError, match="unbound_peak"):
        cases.study(tmp_path, targets=(ten.replace("unbound_peak", "peak"),), **free)


def test_targets_against_mics(tmp_path):
    """Above the MIC for ln(10/MIC)/k minutes: 46 min for 1 mg/L, 32 for 2, 4.5 for 8; over 40 % of an hour: two."""
    target = ('name = "above"\nquantity = "plasma"\nover_mic = ">= 1"\nduring = "0 min to 60 min"\n'
              'attained_when = "40 % of the time"\nisolates = { "1 mg/L" = 50, "2 mg/L" = 30, "8 mg/L" = 20 }\n'
              'isolates_source = "a test"')
    tables = run(tmp_path, target)
    found = tables["attainment"]
    assert found["mic"].tolist() == [1.0, 2.0, 8.0] and found["attained"].tolist() == [1.0, 1.0, 0.0]
    expected = [math.log(10 / mic) / K / 60 for mic in (1, 2, 8)]
    assert found["time_in_range"].tolist() == pytest.approx(expected, abs=1e-9)
    assert tables["responses"]["response"].tolist() == pytest.approx([0.8])
    peak = 'quantity = "peak"\nover_mic = ">= 8"\nmic = ["1 mg/L", "2 mg/L"]\nduring = "0 min to 60 min"'
    assert run(tmp_path, peak)["attainment"]["attained"].tolist() == [1.0, 0.0]
    # 190 mg.min/L = 3.17 mg.h/L in the hour
    over = 'quantity = "area_under_curve"\nover_mic = ">= 3"\nmic = ["1 mg/L", "2 mg/L"]\nduring = "0 min to 60 min"'
    assert run(tmp_path, over)["attainment"]["attained"].tolist() == [1.0, 0.0]


def test_probability_of_response(tmp_path):
    """3.679 mg/L after 20 min, half at 5, steepness 4: 1/(1 + (5/3.679)^4) = 0.2266."""
    wanted = 1 / (1 + (5 / (10 * math.exp(-1))) ** 4)
    target = ('quantity = "response"\nfollows = "plasma"\nhalf = "5 mg/L"\nsteepness = 4\nduring = "20 min"\n'
              'range = "22 to 23 %"')
    tables = run(tmp_path, target)
    assert tables["attainment"]["attained"].tolist() == [1.0]
    assert value(tables, column="mean") == pytest.approx(wanted, rel=5e-3)
    at_20 = tables["over_time"].query("time_min == 20").iloc[0]
    assert at_20["p50"] == pytest.approx(wanted, rel=0.02) and at_20["in_range"] == 1


def test_first_reached_and_recovered(tmp_path):
    """1 mg/min: 2 (1 - exp(-k t)) mg/L reaches 1 after 13.86 min; from 1.9 mg/L at 60 min to 0.5 takes ln(3.8)/k."""
    infusion = {"slow": 'rate = "1 mg/min"\nuntil = "60 min"'}
    target = ('quantity = "plasma"\nlow = "1 mg/L"\nduring = "30 min to 60 min"\nattained_when = "always"\n'
              'recovers_at = "0.5 mg/L"')
    tables = run(tmp_path, target, infusion, until="120 min")
    assert value(tables, "first_reached_min") == pytest.approx(math.log(2) / K, rel=5e-3)
    assert value(tables, "recovery_min") == pytest.approx(math.log(2 * (1 - math.exp(-3)) / 0.5) / K, rel=5e-3)
    early = run(tmp_path, target, infusion, until="80 min")
    assert value(early, "recovery_min") == math.inf and value(early, "recovery_min", "never") == 1
    assert math.isnan(value(early, "recovery_min", "mean"))


def test_measured_levels_carry_the_assays_error(tmp_path):
    """A level of 10 mg/L at 20 % proportional error lies from 8 to 12 mg/L in 68.3 % of people."""
    (tmp_path / "one.toml").write_text(cases.SHEET.format(
        name="one", volume="10", clearance="0.5", more="", spread='published = false\nnote = "none"')
        + "[measurement_error]\nproportional = 0.2\n")
    target = 'quantity = "plasma"\nrange = "8 to 12 mg/L"\nduring = "0 min"\nlevels = "measured"'
    asked = cases.study(tmp_path, count=4000, model="one.toml", protocols=BOLUS, targets=(target,), groups={},
                        variability="between_subject = false")
    row = cases.judged(asked)[1]["attainment"].iloc[0]
    assert row.attained == pytest.approx(0.6827, abs=0.03)
    assert any("assay" in warning for warning in asked.warnings)
    true = cases.study(tmp_path, count=100, model="one.toml", protocols=BOLUS, groups={},
                       targets=(target.replace("measured", "true"),), variability="between_subject = false")
    assert cases.judged(true)[1]["attainment"]["attained"].tolist() == [1.0]


def test_oral_doses_need_absorption_and_follow_bateman(tmp_path):
    oral = {"by mouth": 'amount = "100 mg"\nroute = "oral"'}
    with pytest.raises(ProblemsError, match="no absorption"):
        run(tmp_path, area("area_under_curve", "0 min to 60 min"), oral)
    ka = 'ka = { is = "0.1", unit = "1/min", evidence = "seen" }'
    tables = run(tmp_path, area("area_under_curve", "0 min to 60 min"), oral, more=ka)
    wanted = 100 / V * 0.1 / (0.1 - K) * ((1 - math.exp(-K * 60)) / K - (1 - math.exp(-0.1 * 60)) / 0.1)
    assert value(tables) == pytest.approx(wanted, rel=5e-3)


@pytest.mark.parametrize(("target", "told"), [
    ('quantity = "peak"\nlow = "1 mg/L"\nduring = "5 min"', "a window, such as"),
    ('quantity = "trough"\nlow = "1 mg/L"\nduring = "0 min"', "a time after 0"),
    ('quantity = "peak"\nlow = "1 mg/L"\nduring = "0 min to 5 min"\nattained_when = "always"', "one value in range"),
    ('quantity = "plasma"\nover_mic = ">= 1"\nduring = "5 min"', "over_mic without a MIC"),
    ('quantity = "plasma"\nmic = "1 mg/L"\nlow = "2 mg/L"\nduring = "5 min"', "as multiples of the MIC"),
    ('quantity = "plasma"\nover_mic = ">= 1"\nisolates = { "1 mg/L" = 2 }\nduring = "5 min"', "without their source"),
    ('quantity = "response"\nlow = "50 %"\nduring = "5 min"', 'half = "3 ug/mL"'),
    ('quantity = "plasma"\nlow = "1 mg/L"\nper = "24 h"\nduring = "5 min"', "only with an area"),
    ('quantity = "plasma"\nlow = "1 mg/L"\nlevels = "measured"\nduring = "5 min"', "gives no measurement error"),
    ('quantity = "trough"\nlow = "1 mg/L"\nduring = "steady state"', "repeats to the run's end"),
])
def test_what_cannot_be_asked(tmp_path, target, told):
    with pytest.raises(ProblemsError, match=told):
        run(tmp_path, target)


def test_a_true_or_false_column_bounds_no_window(tmp_path):
    cases.sheet(tmp_path)
    people = cases.people(tmp_path, ["female,40,60,165,true"], "sex,age,weight,height,late_min")
    with pytest.raises(ProblemsError, match="true or false in the list"):
        cases.study(tmp_path, model="one.toml", population=people, groups={}, protocols=BOLUS,
                    variability="between_subject = false",
                    targets=('quantity = "plasma"\nlow = "1 mg/L"\nduring = "0 min to late_min"\n'
                             'attained_when = "always"',))
