"""Whom equations mislead in, and who gets more than anyone studied: counted over the patients of a run, and said."""

import runpy
from pathlib import Path
from types import SimpleNamespace

import pytest

from covariates.problems import ProblemsError
from covariates.sheet import example_people, read_sheet, shipped_sheets
from popsim.flagged import flag_notes
from popsim.tables import notes_of

cases = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("judge_cases.py"))))
# body mass index 50.8, 33.2, 43.0 (just above 42.97), 42.9 (just below): James turns over at 36.15 in women,
# 42.97 in men
PEOPLE = ["female,40,130,160", "female,40,85,160", "male,40,131.7,175", "male,40,131.4,175"]
JAMES = ("lean_body_mass_james", "so heavy that this lean body mass falls as weight rises")


def test_the_turn_over_of_james_is_counted_and_named_with_the_model(tmp_path):
    study = cases.study(tmp_path, population=cases.people(tmp_path, PEOPLE))
    findings, tables = cases.judged(study)
    assert findings.tally.flags[JAMES] == 2
    note = (f"{JAMES[0]} (used by remifentanil_minto_1997): 2 of 4 patients are {JAMES[1]}.")
    assert note in notes_of(findings, tables)


def test_flags_reach_through_protocols_and_groups_and_are_silent_where_nothing_is_wrong(tmp_path):
    constant = cases.sheet(tmp_path)
    rows = cases.people(tmp_path, PEOPLE)
    plain = {"a": 'amount = "1 mg"'}
    typical = "between_subject = false"
    target = ('quantity = "plasma"\nlow = "1 ng/mL"\nduring = "1 min to 9 min"\nattained_when = "always"',)
    more = {"model": constant, "population": rows, "protocols": plain, "variability": typical, "targets": target}
    silent, _ = cases.judged(cases.study(tmp_path, **more, groups={}))
    assert silent.tally.flags == {}
    grouped, tables = cases.judged(cases.study(tmp_path, **more, groups={"lean": "lean_body_mass_james > 50"}))
    assert grouped.tally.flags[JAMES] == 2
    assert any(note.startswith("lean_body_mass_james: 2 of 4") for note in notes_of(grouped, tables))
    by_lean = more | {"protocols": {"a": 'amount = "1 mg/kg"\nby = "lean_body_mass_james"'}}
    dosed, _ = cases.judged(cases.study(tmp_path, **by_lean, groups={}))
    assert dosed.tally.flags[JAMES] == 2
    assert flag_notes(dosed.study, {JAMES: 0}, 4) == []


def test_counts_do_not_depend_on_threads(tmp_path):
    study = cases.study(tmp_path, count=20_000)
    one, two = (cases.judged(study, threads)[0].tally for threads in (1, 2))
    assert one.flags == two.flags and one.flags[JAMES] > 0
    for key, counts in one.large_total.items():
        assert counts.tolist() == two.large_total[key].tolist()


def test_who_gets_more_in_all_than_anyone_studied(tmp_path):
    """Minto 1997: 160 ug/kg at most. 12 mg over an hour is more in whoever weighs less than 75 kg."""
    rows = cases.people(tmp_path, ["male,40,74.9,175", "male,40,75.1,175", "male,40,60,175"])
    protocols = {"much": 'rate = "12 mg/h"\nuntil = "60 min"', "little": 'rate = "1 mg/h"\nuntil = "60 min"'}
    _, tables = cases.judged(cases.study(tmp_path, population=rows, protocols=protocols, groups={}))
    shares = tables["attainment"].set_index("protocol")["total_beyond_model"]
    assert shares["much"] == pytest.approx(2 / 3) and shares["little"] == 0


def test_a_model_with_a_number_of_its_own(tmp_path):
    """Jeon 2014 needs the days since the burn: set for everyone, or a column of the list; without it the study is
    refused."""
    target = ('quantity = "plasma"\nlow = "16 mg/L"\nduring = "1 h to 4 h"\nattained_when = "always"',)
    more = {"model": "piperacillin_jeon_2014", "variability": "between_subject = false", "targets": target,
            "groups": {},
            "protocols": {"4 g": 'amount = "4 g"\nover = "30 min"'}, "until": "6 h", "every": "30 min"}
    header = "sex,age,weight,height,serum_creatinine"
    rows = [f"{row},1.0" for row in PEOPLE]
    with pytest.raises(ProblemsError) as refused:
        people = cases.people(tmp_path, rows, header)
        cases.study(tmp_path, **more, population=people + "\n[population.set]\nsepsis = false")
    assert "no number days_after_burn" in str(refused.value)
    shares = []
    for days in (1, 90):
        listed = cases.people(tmp_path, [f"{row},{days}" for row in rows], header + ",days_after_burn")
        asked = cases.study(tmp_path, **more, population=listed + "\n[population.set]\nsepsis = false")
        shares.append(cases.judged(asked)[1]["attainment"]["time_in_range"].item())
    assert shares[1] > shares[0]  # clearance falls with the days, so concentrations stay up longer


@pytest.mark.parametrize("name", shipped_sheets())
def test_every_shipped_sheet_can_be_judged(tmp_path, name):
    """Its example people, 100 mg once, with variability where the sheet has it: nobody fails, all are above nothing."""
    model = read_sheet(name)
    people = example_people(model)
    rows = [",".join(str(value).lower() for value in row) for row in zip(*(column.tolist() for column in (
        people[key] if len(people[key]) == 2 else people[key].repeat(2) for key in people)), strict=True)]
    target = ('quantity = "plasma"\nlow = "0.001 ng/mL"\nduring = "1 min to 30 min"\nattained_when = "always"',)
    study = cases.study(tmp_path, model=name, population=cases.people(tmp_path, rows, ",".join(people)), groups={},
                        variability="" if model.spread else "between_subject = false", targets=target,
                        protocols={"once": 'amount = "100 mg"'})
    row = cases.judged(study)[1]["attainment"].iloc[0]
    assert (row["patients"], row["failed"], row["attained"]) == (2, 0, 1.0)
