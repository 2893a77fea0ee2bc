"""Study files: a good one resolves as it says, and whatever else stands in one is told in words a user can act on."""

import re
import runpy
import tomllib
from pathlib import Path
from types import SimpleNamespace

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from covariates.problems import ProblemsError
from popsim.study import read_study
from popsim.study_records import Study

cases = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("bad_studies.py"))))
GOOD, BAD = cases.GOOD, cases.BAD
AMOUNT, OVER, RATE, UNTIL, MODEL = cases.AMOUNT, cases.OVER, cases.RATE, cases.UNTIL, cases.MODEL
RANGE, DURING, WHERE, RULE, SEED, COUNT = (cases.RANGE, cases.DURING, cases.WHERE, cases.RULE, cases.SEED, cases.COUNT)


@pytest.fixture
def study(tmp_path):
    """Writes GOOD with each old text replaced by its new one, and reads it."""
    def read(*changes: tuple[str, str], text: str | bytes = GOOD) -> Study:
        for old, new in changes:
            assert old in text
            text = text.replace(old, new, 1)
        path = tmp_path / "study.toml"
        path.write_bytes(text if isinstance(text, bytes) else text.encode())
        return read_study(path)

    return read


def problems_of(study, *changes, **kinds) -> list[str]:
    with pytest.raises(ProblemsError) as caught:
        study(*changes, **kinds)
    return [str(problem) for problem in caught.value.problems]


def test_a_good_study_resolves_into_mg_litres_and_minutes(study):
    good = study()
    card, (target,) = good.protocols[0], good.targets
    bolus, infusion = card.steps
    assert (good.seed, good.until_min, good.every_min, good.matters) == (7, 90, 0.5, 0.05)
    assert good.population.limits == {"age": (20, 90)} and good.population.count == 1000
    assert good.population.set == {"opioid": True, "venous_sampling": False}
    assert (card.strength_mg_per_ml, card.by, bolus.by, infusion.by) == (10, *["adjusted_body_weight"] * 3)
    assert (bolus.variants[0].amount.value, bolus.over_min, bolus.at_most) == (1.5, 0.5, 200)
    assert (infusion.variants[0].rate.value, infusion.variants[0].at_min, infusion.until_min) == (0.1, 1, 60)
    assert (target.low, target.high, target.start, target.end) == (2, 4, 5, 60)
    assert (target.rule, target.share_needed, target.name) == ("share", 0.8, "effect site 2 to 4 ug/mL")
    assert good.group_names == ("all", "old") and good.reference == "old"
    assert good.grid_min()[:3].tolist() == [0, 0.5, 1] and good.grid_min()[-1] == 90


@pytest.mark.parametrize("changes", [
    [("[target]", "[[target]]")],
    [(WHERE, 'where = "opioid"')],                                   # a switch alone is a condition
    [(WHERE, 'where = "not opioid and bmi < 30"')],
    [(RANGE, 'low = "2 ug/mL"')],
    [("[run]", "[variability]\nscale = 1\n[run]")],                  # whole numbers are numbers
    [("[population.set]", "[population.set]\nclosure_min = 50"), (DURING, 'during = "5 min to closure_min"')],
    [("[population.set]", "[population.set]\ndosing_weight = 70"), ("adjusted_body_weight", "dosing_weight")],
    [(AMOUNT, 'amount = "1 g"\nby = "weight"')],
    [(RATE, 'rate = "200 mg/m2/h"\nby = "body_surface_area_mosteller"')],
    [(DURING, 'during = "60 min"'), (RULE, "")],                     # an instant needs no rule
    [(OVER, 'every = "0.001 min"\ntimes = 2\n')],
    [(OVER, 'every = "5.4 s"\n')],                                   # just 1,000 administrations
])
def test_what_is_allowed(study, changes):
    assert isinstance(study(*changes), Study)


def test_a_mark_before_the_first_letter_is_read_over(study):
    assert study(text=b"\xef\xbb\xbf" + GOOD.encode()).title == "A card"


@pytest.mark.parametrize(("changes", "where", "found", "advice"), BAD)
def test_a_bad_study_is_told_where_what_and_what_to_do(study, changes, where, found, advice):
    told = [problem for problem in problems_of(study, *changes) if where in problem.splitlines()[0]]
    lines = [problem.splitlines() for problem in told]
    assert any(found in told_found and advice in "".join(rest) for _, told_found, *rest in lines), told


# what a validation library says in its own English
FOREIGN = re.compile(r"[Ii]nput should|valid (dictionary|string|list|integer|number|boolean)|instance of|pydantic|"
                     r"type=|value_error|Traceback|\bNone\b|\bTrue\b|\bFalse\b|datetime|Errno")


@pytest.mark.parametrize("changes", [case[0] for case in BAD])
def test_messages_are_in_our_words(study, changes):
    for problem in problems_of(study, *changes):
        assert not FOREIGN.search(problem), problem


def test_an_effect_needs_an_effect_site(study, tmp_path):
    from importlib import resources

    sheet = (resources.files("covariates") / "sheets" / "propofol_marsh_1991.toml").read_text(encoding="utf-8")
    mine = re.sub(r"(?m)^ke0 = .*\n", "", sheet).replace('name = "propofol_marsh_1991"', 'name = "mine"')
    (tmp_path / "mine.toml").write_text(mine, encoding="utf-8")
    typical = ("[run]", "[variability]\nbetween_subject = false\n[run]")
    (told,) = problems_of(study, (MODEL, 'model = "mine.toml"'), typical)
    assert "mine has no ke0" in told and "propofol_eleveld_2018" in told and "propofol_schnider_1998" in told
    (told,) = problems_of(study, (MODEL, MODEL + '\nrepeat_with = ["mine.toml"]'), typical)
    assert "mine has no ke0" in told


def test_a_list_must_carry_what_the_study_uses(study, tmp_path):
    (tmp_path / "people.csv").write_text("sex,age,weight,frailty\nfemale,70,60,3\nmale,80,75,5\n", encoding="utf-8")
    listed = [('source = "survey"', 'source = "list"\nfile = "people.csv"'), (COUNT + "\n", "")]
    told = problems_of(study, *listed)
    assert any("protocol 1: by" in problem and "needs height" in problem for problem in told)
    assert any("no height, and propofol_eleveld_2018 needs it" in problem for problem in told)
    marsh = [("adjusted_body_weight", "weight"), (MODEL, 'model = "propofol_marsh_1991"'),
             (WHERE, 'where = "frailty >= 4"'),
             ("[run]", "[variability]\nbetween_subject = false\n[run]")]
    assert study(*listed, *marsh).population.source == "list"


def test_many_problems_are_reported_at_once(study):
    told = problems_of(study, (AMOUNT, "amount = 1.5"), (COUNT, "count = true"), (DURING, "during = 3"),
                       (SEED, "sede = 7"))
    assert [problem.splitlines()[0] for problem in told] == [
        "study.toml: seed", "study.toml: population: count", "study.toml: protocol 1, dose 1: amount",
        "study.toml: target: during", "study.toml: sede"]
    told = problems_of(study, (MODEL, 'model = "x"'), (WHERE, 'where = "aeg > 3"'), (UNTIL, ""), (RULE, ""))
    assert {problem.splitlines()[0] for problem in told} == {
        "study.toml: drug: model", "study.toml: group 1: where", "study.toml: protocol 1, dose 2: rate",
        "study.toml: target: attained_when"}


def test_faults_of_shape_and_of_meaning_are_told_together_and_none_is_an_echo(study):
    told = problems_of(study, (AMOUNT, "amount = 1.5"), (MODEL, 'model = "propofol_eleveld2018"'),
                       ('by = "adjusted_body_weight"', 'by = "adjusted_body_wieght"'),
                       (RANGE, 'ragne = "2 to 4 ug/mL"'),
                       ('every = "30 s"', "every = 30"), (WHERE, "where = 3"), ('name = "old"', 'name = "all"'))
    assert [problem.splitlines()[0] for problem in told] == [
        "study.toml: group 1: where", "study.toml: protocol 1, dose 1: amount", "study.toml: target: ragne",
        "study.toml: run: every", "study.toml: drug: model", "study.toml: protocol 1: by"]


@pytest.mark.parametrize(("text", "said"), [
    (b"", "title"), (b"a = ", "not valid TOML"), (b"\xff\xfea\x00", "not UTF-8"),
    (b"a=" + b"[" * 5000, "nested too deeply"),
    (b"title = 'a'\ntitle = 'b'", "not valid TOML"),
    (GOOD.replace('"1.5 mg/kg"', "1.5 mg/kg").encode(), "double quotes"),
])
def test_files_that_are_no_study(study, text, said):
    assert any(said in problem for problem in problems_of(study, text=text))


def test_no_file_and_a_folder(tmp_path):
    with pytest.raises(ProblemsError, match="no such file"):
        read_study(tmp_path / "none.toml")
    with pytest.raises(ProblemsError, match="cannot be read"):
        read_study(tmp_path)


# --- whatever a file holds, the answer is a Study or a list of problems -----------------------------------

odd_values = st.one_of(
    st.booleans(), st.integers(), st.floats(), st.text(max_size=12), st.just([]), st.just({}),
    st.lists(st.integers(), max_size=2), st.dictionaries(st.text(max_size=3), st.booleans(), max_size=2),
    st.sampled_from(["5 mg", "5 mg/kg", "5 min", "0 min", "1e-300 mg", "1e308 h", "2 to 4 ug/mL", "age", "sex",
                     "age > 3", "opioid", "5 min to x_min", "steady state", "\x00.toml", ">= 5", "all", "1/0 > 1",
                     "x.toml", "weight", "propofol_schnider_1998", "list", "effect", "plasma", "allowed", "oral",
                     "50 %", "nan mg", "\u0661 mg"]))


def places(node, path=()):
    """The path of every key and list item of a parsed file."""
    for key, value in node.items() if isinstance(node, dict) else enumerate(node):
        yield (*path, key)
        if isinstance(value, dict | list):
            yield from places(value, (*path, key))


def toml(value) -> str:
    """A value as inline TOML."""
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, str):
        return '"' + "".join(f"\\U{ord(sign):08x}" for sign in value) + '"'
    if isinstance(value, list):
        return "[" + ", ".join(map(toml, value)) + "]"
    if isinstance(value, dict):
        return "{" + ", ".join(f"{toml(key)} = {toml(item)}" for key, item in value.items()) + "}"
    return repr(value)


text_without_surrogates = st.text(st.characters(exclude_categories=["Cs"]), max_size=8)


@settings(max_examples=300, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(data=st.data())
def test_whatever_stands_in_a_file_the_answer_is_a_study_or_problems(tmp_path, data):
    raw = tomllib.loads(GOOD)
    for _ in range(data.draw(st.integers(1, 3))):
        place = data.draw(st.sampled_from(sorted(places(raw), key=str)))
        node = raw
        for key in place[:-1]:
            node = node[key]
        value = data.draw(odd_values)
        change = data.draw(st.sampled_from(["value", "key", "drop"]))
        if change == "value" or isinstance(node, list):
            node[place[-1]] = value
        elif change == "drop":
            del node[place[-1]]
        else:
            known = ["at", "by", "every", "times", "band", "where", "at_least", "low", "set", "from", "name"]
            node[data.draw(st.sampled_from(known) | text_without_surrogates)] = value
    path = tmp_path / "odd.toml"
    path.write_text("\n".join(f"{toml(key)} = {toml(item)}" for key, item in raw.items()), encoding="utf-8",
                    errors="replace")
    try:
        assert isinstance(read_study(path), Study)
    except ProblemsError as error:
        assert error.problems and all(problem.where and problem.found for problem in error.problems)
