"""`popsim check`: the ward card says what the timeline gives, and can be read on 80 columns."""

import re

import numpy as np
import pytest

from popsim.check_text import WIDTH, check_text
from popsim.lookup import Lookup
from popsim.study import read_study
from popsim.timeline import build_timeline
from popsim.ward_card import card_lines, example_people, step_as_written

STUDY = '''
title = "A card with everything"
question = "Is it told?"
seed = 1
[population]
source = "survey"
count = 300
[[group]]
name = "{group}"
where = "age >= 65"
[drug]
model = "remifentanil_minto_1997"
{protocols}
[target]
quantity = "plasma"
range = "2 to 4 ng/mL"
during = "5 min to 60 min"
attained_when = "80 % of the time"
[run]
until = "90 min"
every = "30 s"
'''
CARD = '''
[[protocol]]
name = "card"
strength = "50 ug/mL"
[[protocol.dose]]
amount = "0.5 ug/kg"
over = "30 s"
at_least = "26 ug"
at_most = "40 ug"
round_to = "5 ug"
[[protocol.dose]]
at = "10 min"
amount = "20 ug"
every = "5 min"
times = 3
where = "age < 70"
[[protocol.dose]]
at = "2 min"
amount = "1 mg"
rate = "0.2 ug/kg/min"
[[protocol.dose]]
until = "60 min"
at_most = "120 ug/h"
[[protocol.dose.band]]
where = "weight < 60"
rate = "100 ug/h"
[[protocol.dose.band]]
where = "weight >= 60"
rate = "150 ug/h"
at = "1 min"
'''
SECOND = '''
[[protocol]]
name = "second card"
strength = "50 ug/mL"
[[protocol.dose]]
amount = "20 ug"
[[protocol.dose]]
rate = "6 ug/kg/h"
until = "60 min"
'''


@pytest.fixture
def study(tmp_path):
    def read(protocols: str = CARD, group: str = "old"):
        path = tmp_path / "study.toml"
        path.write_text(STUDY.format(protocols=protocols, group=group), encoding="utf-8")
        return read_study(path)

    return read


@pytest.fixture
def card(study):
    """The lines from the ward card's heading to the next empty line."""
    def read(protocols: str = CARD, nth: int = 1) -> list[str]:
        return check_text(study(protocols), 300).split("Ward card ")[nth].split("\n\n")[0].splitlines()

    return read


def test_the_card_says_what_each_example_person_gets(card):
    # 55, 90, 50 and 118 kg; 27.5 ug rounds half up to 30, 25 ug is raised to 26 and then rounds to 25
    assert card() == '''"card" (per kg of total body weight, 50 ug/mL)
========================================================
1  at 0 min, over 30 s: 0.5 ug/kg, at least 26 ug, at most 40 ug, in steps of 5
   ug
     lean young adult  30 ug = 0.6 mL  [x 55 kg, rounded]
     average adult     40 ug = 0.8 mL  [x 90 kg, capped]
     lean adult of 85  25 ug = 0.5 mL  [x 50 kg, raised to the floor, rounded]
     BMI of 45         40 ug = 0.8 mL  [x 118 kg, capped]
2  at 10 min, 3 times, every 5 min: 20 ug, only where age < 70
     lean young adult  20 ug = 0.4 mL
     average adult     20 ug = 0.4 mL
     lean adult of 85  -
     BMI of 45         20 ug = 0.4 mL
3  1 mg at 0.2 ug/kg/min
     lean young adult  2 min to 92.9 min: 1 mg at 11 ug/min = 20 mL at 13.2 mL/h
     average adult     2 min to 57.6 min: 1 mg at 18 ug/min = 20 mL at 21.6 mL/h
     lean adult of 85  2 min to 102 min: 1 mg at 10 ug/min = 20 mL at 12 mL/h
     BMI of 45         2 min to 44.4 min: 1 mg at 23.6 ug/min = 20 mL at 28.32
                       mL/h
4  100 ug/h where weight < 60; 150 ug/h where weight >= 60, at most 120 ug/h
     lean young adult  0 min to 60 min: 100 ug/h = 2 mL/h
     average adult     1 min to 60 min: 120 ug/h = 2.4 mL/h  [capped]
     lean adult of 85  0 min to 60 min: 100 ug/h = 2 mL/h
     BMI of 45         1 min to 60 min: 120 ug/h = 2.4 mL/h  [capped]'''.splitlines()


def test_the_numbers_of_the_card_are_those_of_the_timeline(study):
    """Total of the printed lines (times x amount, or rate x time within the run) against what the timeline gives."""
    one = study()
    _, attributes = example_people(one)
    _, received = build_timeline(one.protocols[0], Lookup(attributes), 4, one.until_min)
    totals = np.zeros(4)
    for of_step in card_lines(one, one.protocols[0], attributes):
        for person, line in enumerate(of_step):
            if line is not None:
                totals[person] += _total_ug(line, one.until_min)
    assert totals / 1000 == pytest.approx(received.total_mg, rel=2e-3)  # the card shows tenths of minutes


def _total_ug(line, until_min: float) -> float:
    rate = re.search(r"([0-9.]+) ug/(min|h)", line.given)
    if rate is not None:
        start, end = (float(time) for time in re.findall(r"([0-9.]+) min", line.when))
        return float(rate[1]) / (60 if rate[2] == "h" else 1) * (min(end, until_min) - start)
    times = re.search(r"([0-9]+) times", line.when)
    return float(line.given.removesuffix(" ug")) * (int(times[1]) if times else 1)


def test_what_is_the_same_for_everyone_or_under_two_cards_is_said_once(card):
    first = card(SECOND)
    assert first[2:4] == ["1  at 0 min: 20 ug", "     everyone: 20 ug = 0.4 mL"]
    both = card(SECOND + SECOND.replace("second card", "third card").replace("6 ug/kg/h", "8 ug/kg/h"), nth=2)
    assert both[2:5] == ["1  at 0 min: 20 ug", '     the same as under "second card"', "2  0 min to 60 min: 8 ug/kg/h"]
    assert both[5] == "     lean young adult  440 ug/h = 8.8 mL/h  [x 55 kg]"


def test_doses_that_nobody_gets_or_that_round_to_nothing_stand_out(card):
    for_nobody = '[[protocol.dose]]\nat = "70 min"\namount = "5 ug"\nwhere = "age > 95"\n'
    assert "     none of these people" in card(SECOND + for_nobody)
    shown = "\n".join(card(SECOND.replace('amount = "20 ug"', 'amount = "20 ug"\nround_to = "50 ug"')))
    assert "0 ug = 0 mL  [ROUNDED TO NOTHING]" in shown


def test_whole_digits_are_never_rounded_away(card):
    assert "     everyone: 12345 ug = 246.9 mL" in card(SECOND.replace("20 ug", "12345 ug"))


@pytest.mark.parametrize("long", ["x" * 80, "many words " * 7])
def test_nothing_is_wider_than_80_columns(study, long):
    text = check_text(study(CARD.replace('"card"', f'"{long.strip()}"') + SECOND, group=long.strip()), 300)
    assert max(len(line) for line in text.splitlines()) <= WIDTH == 80
    assert text.isascii()


def test_a_list_shows_its_own_first_people(tmp_path, study):
    study(SECOND)
    rows = "".join(f"{sex},{age},{70 + age},170,{age // 10}\n"
                   for age in range(20, 90, 10) for sex in ("female", "male"))
    (tmp_path / "people.csv").write_text("sex,age,weight,height,frailty\n" + rows, encoding="utf-8")
    path = tmp_path / "study.toml"
    text = path.read_text(encoding="utf-8")
    text = text.replace('source = "survey"\ncount = 300', 'source = "list"\nfile = "people.csv"')
    path.write_text(text.replace('amount = "20 ug"', 'amount = "20 ug"\nwhere = "frailty > 2"'), encoding="utf-8")
    shown = check_text(read_study(path), 300)
    assert "  patient 1  woman of 20, 90 kg, 170 cm, BMI 31\n" in shown
    assert "     patient 2  -\n     patient 3  20 ug = 0.4 mL\n" in shown
    assert "Among the first 14 patients" in shown


def test_steps_are_told_as_written(study):
    steps = study().protocols[0].steps
    assert step_as_written(steps[0]) == "0.5 ug/kg, at least 26 ug, at most 40 ug, in steps of 5 ug"
    assert step_as_written(steps[2]) == "1 mg at 0.2 ug/kg/min"


def test_who_lies_outside_the_model_and_the_cautions_are_said(study):
    text = check_text(study(SECOND), 300)
    assert re.search(r"people that remifentanil_minto_1997 was built on:\n    all +[0-9.]+ % of 300\n    old ", text)
    assert "not for dosing a person" in text and 'at most 3 dose events under "second card"' in text
