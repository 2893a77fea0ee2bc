"""Loading doses, pumps, vials and rounding to what can be drawn up; quarters, models and whether the answer holds."""

from __future__ import annotations

import math
import runpy
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest

from covariates.problems import ProblemsError
from covariates.sheet import parameters_of, read_sheet
from popsim.holds import further
from popsim.lookup import Lookup
from popsim.robustness import robustness
from popsim.terminal import summary
from popsim.timeline import build_timeline, steady_timeline

cases = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("judge_cases.py"))))
PEOPLE = {"sex": np.array(["female", "male"]), "age": np.array([40.0, 80.0]), "weight": np.array([60.0, 100.0]),
          "height": np.array([165.0, 180.0]), "serum_creatinine": np.array([0.7, 1.2]),
          "haemodialysis": np.array([False, False])}
PLASMA = 'quantity = "plasma"\nrange = "5 to 9 mg/L"\nduring = "0 min to 20 min"\nattained_when = "50 % of the time"'


def received(folder, dose: str, in_protocol: str = "", model: str = "vancomycin_goti_2018"):
    asked = cases.study(folder, count=50, model=model, groups={}, protocols={"card": dose}, in_protocol=in_protocol,
                        targets=(PLASMA,), until="24 h", every="1 h", population=cases.SURVEY.format(count=50)
                        + "\n[population.set]\nhaemodialysis = false")
    return build_timeline(asked.protocols[0], Lookup(PEOPLE), 2, asked.until_min)[1]


def test_loading_dose_from_a_stated_volume(tmp_path):
    """25 mg/L in 0.7 L/kg: 1050 mg at 60 kg, 1750 mg at 100 kg, in steps of 250 mg capped at 1.5 g."""
    dose = 'amount_for = "25 mg/L"\nvolume = "0.7 L/kg"\nover = "1 h"'
    assert received(tmp_path, dose).total_mg.tolist() == pytest.approx([1050, 1750])
    rounded = received(tmp_path, dose + '\nround_to = "250 mg"\nat_most = "1.5 g"')
    assert rounded.total_mg.tolist() == pytest.approx([1000, 1500]) and rounded.capped.tolist() == [False, True]


@pytest.mark.parametrize(("which", "volumes"), [("V1", ("V1",)), ("Vss", ("V1", "V2"))])
def test_loading_dose_from_a_sheets_typical_volume(tmp_path, which, volumes):
    typical = parameters_of(read_sheet("vancomycin_goti_2018"), Lookup(PEOPLE), {}, 2)
    dose = f'amount_for = "25 mg/L"\nvolume_of = "vancomycin_goti_2018"\nvolume_is = "{which}"\nover = "1 h"'
    assert received(tmp_path, dose).total_mg == pytest.approx(25 * sum(typical[name] for name in volumes))


@pytest.mark.parametrize(("dose", "told"), [
    ('amount_for = "25 mg/L"', "volume_of"),
    ('amount_for = "25 mg/L"\nvolume_of = "vancomycin_goti_2018"', "volume_is"),
    ('amount = "1 g"\nvolume = "0.7 L/kg"', "only beside amount_for"),
    ('amount_for = "0 mg/L"\nvolume = "0.7 L/kg"', "above zero"),
    ('amount = "1 g"\nround_to = "1 mL"', "a volume or flow beside strength"),
    ('amount = "1 g"\nround_to = "whole vials"', "only beside strength and vial"),
])
def test_what_a_card_may_not_say(tmp_path, dose, told):
    with pytest.raises(ProblemsError, match=told):
        received(tmp_path, dose)


def test_rounding_to_what_can_be_drawn_up_and_vials(tmp_path):
    """15 mg/kg: 900 and 1500 mg, of 50 mg/mL 18 and 30 mL: to 4 mL half up 20 and 32 (30 lies between), to 10 mL vials
    of 500 mg 2 and 3."""
    card = 'strength = "50 mg/mL"\nvial = "10 mL"'
    assert received(tmp_path, 'amount = "15 mg/kg"\nround_to = "4 mL"', card).total_mg.tolist() == [1000, 1600]
    whole = received(tmp_path, 'amount = "15 mg/kg"\nround_to = "whole vials"\nevery = "12 h"', card)
    assert whole.total_mg.tolist() == [2000, 3000] and whole.vials.tolist() == [4, 6]
    odd = received(tmp_path, 'amount = "600 mg"\nevery = "12 h"', card)
    assert odd.vials.tolist() == [4, 4]  # 12 mL opens two, twice; shared they would be three


def test_an_infusion_too_fast_for_the_pump_is_counted_or_refused(tmp_path):
    """1500 mg in an hour at 5 mg/mL is 300 mL/h."""
    dose, card = 'amount = "15 mg/kg"\nover = "1 h"', 'strength = "5 mg/mL"\npump_at_most = "200 mL/h"\n'
    assert received(tmp_path, dose, card).too_fast.tolist() == [False, True]
    with pytest.raises(ProblemsError, match="faster than the pump can give in 1 of 2"):
        received(tmp_path, dose, card + 'impossible = "error"')
    with pytest.raises(ProblemsError, match="a flow beside strength"):
        received(tmp_path, dose, 'pump_at_most = "200 mL/h"')


def test_many_steps_of_many_administrations_are_refused_together(tmp_path):
    dose = "\n---\n".join(['amount = "1 mg"\nevery = "2 min"'] * 3)
    with pytest.raises(ProblemsError, match="administrations in all"):
        received(tmp_path, dose)


def test_one_interval_of_what_goes_on(tmp_path):
    """A loading dose and a step with times are left out; bands give each patient an interval of their own."""
    card = ('amount = "9 mg"\n---\namount = "2 mg"\nevery = "1 h"\ntimes = 3\n---\n'
            'at = "2 h"\nover = "1 h"\namount = "1 mg"\n[[protocol.dose.band]]\nwhere = "age < 65"\nevery = "6 h"\n'
            '[[protocol.dose.band]]\nwhere = "age >= 65"\nevery = "8 h"')
    asked = cases.study(tmp_path, model="remifentanil_minto_1997", groups={}, targets=(PLASMA,), until="24 h",
                        every="1 h", protocols={"card": card})
    steady = steady_timeline(asked.protocols[0], Lookup(PEOPLE), 2)
    assert steady.interval_min.tolist() == [360, 480]
    assert steady.time_min[:, 0].tolist() == [0, 0] and steady.rate_mg_per_min[:, 0] == pytest.approx(1 / 60)


@pytest.fixture(scope="module")
def repeated(tmp_path_factory):
    folder = tmp_path_factory.mktemp("robust")
    spread = 'printed_as = "sd of ln"\nV1 = { value = 0.2, evidence = "seen" }'
    for name, volume in (("one", "10"), ("two", "8")):
        cases.sheet(folder, name, volume=volume, spread=spread)
    doses = {"100 mg": 'amount = "100 mg"', "140 mg": 'amount = "140 mg"'}
    asked = cases.study(folder, count=1500, model="one.toml", repeat_with=("two.toml",), protocols=doses,
                        targets=(PLASMA,), compare='matters = "5 %"', until="30 min", every="5 min")
    return asked, *cases.judged(asked)


def test_spread_between_models_beside_the_simulation_interval(repeated):
    _, _, tables = repeated
    for row in tables["models"].itertuples():
        of = tables["attainment"].query("protocol == @row.protocol and group == @row.group")
        assert row.spread_between_models == pytest.approx(of["attained"].max() - of["attained"].min())
        assert row.simulation_interval == pytest.approx((of["attained_high"] - of["attained_low"]).iloc[0])


def test_quarters_hold_everyone_once(repeated):
    _, _, tables = repeated
    for (model, covariate), rows in tables["quartiles"].groupby(["model", "covariate"]):
        whole = tables["comparison"].query("model == @model and group == 'all'").iloc[0]
        assert rows["patients"].sum() == whole.patients
        assert (rows["only_a"] * rows["patients"]).sum() == pytest.approx(whole.only_a * whole.patients)
        assert rows["patients"].between(300, 450).all(), covariate


def test_does_the_answer_hold(repeated):
    """As written the table repeats comparison.csv; the variants differ, and the summary says so."""
    asked, _, tables = repeated
    table = robustness(asked, 1)
    written = table.query("asked == 'as written'").reset_index(drop=True)
    same = tables["comparison"].query("model == 'one'").reset_index(drop=True)
    for column in ("attained_a", "attained_b", "difference", "verdict"):
        assert written[column].tolist() == same[column].tolist()
    assert set(table["asked"]) == {"as written", "variability x 0.7", "variability x 1.3"}  # nobody's ranges are known
    assert (table["difference"] != table.groupby("asked")["difference"].transform("first")).any()
    said = dict(further(asked, tables | {"robustness": table}))
    assert len(said["Does the answer hold?"]) == 2
    text = summary(asked, tables | {"robustness": table}, [])
    assert "Does the answer hold?" in text and max(map(len, text.splitlines())) <= 80


def test_more_dose_never_lowers_above(tmp_path):
    """Identical patients attain all or none; a larger dose is never less above."""
    cases.sheet(tmp_path)
    doses = {f"{mg} mg": f'amount = "{mg} mg"' for mg in (20, 60, 120, 400)}
    asked = cases.study(tmp_path, count=40, model="one.toml", groups={}, protocols=doses, targets=(PLASMA,),
                        variability="between_subject = false")
    found = cases.judged(asked)[1]["attainment"]
    assert set(found["attained"]) <= {0.0, 1.0} and found["time_above"].is_monotonic_increasing
    assert math.isclose(found["time_above"].iloc[-1], 1.0) and found["time_below"].iloc[0] == 1.0


def test_all_targets_at_once(tmp_path):
    """Efficacy at a peak of 8 to 12 mg/L, safety at a trough of at most 1 mg/L: both are met with 100 mg alone."""
    cases.sheet(tmp_path)
    doses = {f"{mg} mg": f'amount = "{mg} mg"' for mg in (50, 100, 300)}
    targets = ('name = "works"\nquantity = "peak"\nlow = "8 mg/L"\nduring = "0 min to 60 min"',
               'name = "safe"\nquantity = "trough"\nhigh = "1 mg/L"\nduring = "60 min"')
    asked = cases.study(tmp_path, count=40, model="one.toml", groups={}, protocols=doses, targets=targets,
                        variability="between_subject = false", compare='matters = "5 %"')
    table = cases.judged(asked)[1]["together"]
    assert table["attained"].tolist() == [0.0, 1.0, 0.0]
    assert table["difference"].tolist()[1:] == [1.0, 0.0] and table["better"].tolist() == ["", "100 mg", ""]
