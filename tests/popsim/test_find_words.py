"""Wishes and places as a study writes them: what is understood, and what is said of the rest."""

from __future__ import annotations

import runpy
from pathlib import Path

import pytest

from covariates.problems import ProblemsError
from popsim.finding.counting import read_asked
from popsim.finding.places import read_place, read_vary
from popsim.finding.wishes import EVERY, parse_wishes
from popsim.study_file import read_find, read_study_file

find_cases = runpy.run_path(str(Path(__file__).with_name("find_cases.py")))
VARY = '[[find.vary]]\nwhat = "{what}"\nover = "{over}"\n'
RATE = VARY.format(what="dose 1: rate", over="1 to 9 ug/h")
BANDED = """at = "0 min"
over = "30 min"
[[protocol.dose.band]]
where = "age < 65"
amount = "500 mg"
[[protocol.dose.band]]
where = "age >= 65"
amount = "400 mg"
"""


def test_a_wish_is_understood_in_all_its_parts():
    wish, limit, time = parse_wishes('at least 90 % attained in every group and at most 5 % ever above 8 ug/mL '
                                     'in "over 75", at most 10.5 % of the time above among all')
    assert (wish.at_least, wish.share, wish.group, wish.ever, wish.time) == (True, 0.9, EVERY, "", "")
    assert (limit.at_least, limit.share, limit.group) == (False, 0.05, "over 75")
    assert (limit.ever, limit.limit) == ("above", "8 ug/mL")
    assert (time.at_least, time.share, time.group, time.time) == (False, 0.105, "all", "above")


def test_a_course_may_be_named():
    wish, = parse_wishes("at most 5 % ever below 1 ng/mL at the effect site in every group")
    assert (wish.course, wish.limit, wish.group) == ("effect_site", "1 ng/mL", EVERY)


@pytest.mark.parametrize("text", ["90 % attained", "at least 90 attained", "at least 190 % attained", "", 90,
                                  "at most 5 % above 8 ug/mL", "at least 90 % attained in some groups"])
def test_what_is_no_wish_is_refused(text):
    with pytest.raises(ProblemsError) as error:
        parse_wishes(text)
    assert "at least 90 % attained in every group" in str(error.value)


def problems(tmp_path, find, **study):
    path = find_cases["find_file"](tmp_path, find, **study)
    with pytest.raises(ProblemsError) as error:
        section, faults = read_study_file(path)
        if faults:
            raise ProblemsError(faults)
        read_vary(section.find, section.protocol[0], path.name)
        read_asked(section, path)
    return str(error.value)


@pytest.mark.parametrize(("find", "said"), [
    ('[find]\nwish = ["at least 90 percent"]', "find: wish 1"),
    ('[find]\nwhish = []', 'did you mean "wish"?'),
    ('[find]\nwish = ["at least 90 % attained in \'over 80\'"]\n' + RATE, 'no group of this study'),
    ('[find]\nwish = ["at most 5 % ever above 8 mg"]\n' + RATE, "an amount"),
    (VARY.format(what="dose 2: rate", over="1 to 9 ug/h"), "1 to 1"),
    (VARY.format(what="dose 1: speed", over="1 to 9 ug/h"), "amount, rate"),
    (VARY.format(what="dose 1: amount", over="1 to 9 ug"), "does not have"),
    (VARY.format(what="dose 1: rate", over="1 to 9 ug/kg/h"), "a rate per kg"),
    (VARY.format(what="dose 1: rate", over=">= 9 ug/h"), "two ends"),
    (VARY.format(what="dose 1: rate", over="0 to 9 ug/h"), "above zero"),
    (VARY.format(what="all dose", over="50 % to 150 %"), 'did you mean "all doses"?'),
    ("[[find.vary]]\nwhat = 'dose 1: rate'", "missing"),
    (VARY.format(what="dose 1: rate", over="1 to 9 ug/h") * 2, "twice"),
    ("[find.map]\nacross = 3", "text in double quotes"),
])  # fmt: skip
def test_every_fault_of_find_is_told_with_its_place(tmp_path, find, said):
    text = problems(tmp_path, find)
    assert "study.toml: find" in text and said in text


def test_the_command_line_is_told_in_the_same_form():
    with pytest.raises(ProblemsError) as error:
        read_find({"vary": [{"what": "dose 1: rate", "over": "2 to 3 mg/h", "steps": 1}], "wish": ["x"]})
    assert "command line: find, vary 1: steps" in str(error.value) and len(error.value.problems) == 2


def test_a_band_is_a_place(tmp_path):
    path = find_cases["find_file"](tmp_path, "", protocols={"a": BANDED})
    _, protocol = find_cases["asked_of"](path)
    place = read_place("dose 1, band 2: amount", protocol, "x")
    assert place.put(protocol, "new").dose[0].band[1].amount == "new"
    assert protocol.dose[0].band[1].amount.text == "400 mg"
    with pytest.raises(ProblemsError, match="there are 2 bands in dose 1"):
        read_place("dose 1, band 3: amount", protocol, "x")


def test_what_is_tried_is_what_is_said(tmp_path):
    path = find_cases["find_file"](tmp_path, VARY.format(what="dose 1: rate", over="1 to 2 ug/h") + "steps = 8")
    asked, protocol = find_cases["asked_of"](path)
    varied, = read_vary(asked.section.find, protocol, "study.toml")
    assert [value.text for value in varied.values][:3] == ["1 ug/h", "1.143 ug/h", "1.286 ug/h"]
    assert varied.values[1].value == pytest.approx(1.143e-3 / 60, rel=1e-15)
