"""The search over doses: against closed forms, and against itself."""

from __future__ import annotations

import math
import runpy
from pathlib import Path

import numpy as np
import pytest
from scipy.optimize import brentq
from scipy.stats import norm

from covariates.problems import ProblemsError
from popsim.estimate import paired_difference
from popsim.finding.counting import count, fresh
from popsim.finding.dose import confirm, label, search
from popsim.finding.holding import hold
from popsim.finding.places import read_vary
from popsim.study_sections import DoseSection

find_cases = runpy.run_path(str(Path(__file__).with_name("find_cases.py")))
RATE = {"a": 'rate = "1 mg/min"\nuntil = "600 min"'}
VARY = '[[find.vary]]\nwhat = "dose 1: rate"\nover = "{over}"\nsteps = {steps}\n'
OMEGA, CLEARANCE = 0.3, 0.5


def asked(tmp_path, find, count=4000, limits="1 to 2 mg/L", **more):
    path = find_cases["find_file"](
        tmp_path, find, count=count, model=find_cases["one_compartment"](tmp_path, omega=OMEGA),
        protocols=more.pop("protocols", RATE), targets=(find_cases["STEADY"].format(range=limits),), until="600 min",
        every="60 min", **more)
    return find_cases["asked_of"](path)


def found(tmp_path, find, threads=1, **more):
    question, protocol = asked(tmp_path, find, **more)
    return search(question, protocol, read_vary(question.section.find, protocol, "study.toml"), threads)


def value(result, place):
    return result.points[place][0].value


@pytest.mark.parametrize("seed", [11, 12, 13, 14])
def test_the_best_dose_of_a_linear_model_is_the_closed_form_one(tmp_path, seed):
    """At steady state plasma is rate / CL, lognormal about rate / 0.5: the share between L and H is largest where the
    logarithm of the rate is midway, at 0.5 sqrt(L H), and is then 2 Phi(ln(H / L) / (2 omega)) - 1."""
    result = found(tmp_path, VARY.format(over="0.3 to 1.5 mg/min", steps=25), seed=seed)
    best = CLEARANCE * math.sqrt(1.0 * 2.0)
    first, last = result.as_good
    assert value(result, first) <= best <= value(result, last)
    assert value(result, last) / value(result, first) < 1.3
    share, low, high = (values[result.best_overall, 0] for values in result.counts.attained())
    expected = 2 * norm.cdf(math.log(2) / (2 * OMEGA)) - 1
    at_best = np.argmin([abs(value(result, place) - best) for place in range(len(result.points))])
    low, high = (values[at_best, 0] for values in result.counts.attained()[1:])
    assert low <= expected <= high and share >= expected - 0.02


def test_the_doses_that_meet_a_wish_end_where_the_closed_form_says(tmp_path):
    """At least 60 % attained and at most 10 % above 2.5 mg/L: both ends are roots of normal distribution functions."""
    wishes = '[find]\nwish = ["at least 60 % attained", "at most 10 % ever above 2.5 mg/L"]\n'
    result = found(tmp_path, wishes + VARY.format(over="0.2 to 2 mg/min", steps=19), count=20000)

    def attained(rate):
        centre = math.log(rate / CLEARANCE)
        return norm.cdf((math.log(2) - centre) / OMEGA) - norm.cdf(-centre / OMEGA)

    lowest = brentq(lambda rate: attained(rate) - 0.6, 0.3, 0.7)
    highest = CLEARANCE * 2.5 * math.exp(OMEGA * norm.ppf(0.1))
    stretch, = result.meeting
    # the share at an end is known to 0.7 points (2 SE of 20,000), and moves by about 1.4 points per 1 % of rate
    assert value(result, stretch.first) == pytest.approx(lowest, rel=0.01)
    assert value(result, stretch.last) == pytest.approx(highest, rel=0.01)
    # cut by bisection: the first dose that does not meet the wishes stands within 1/64 of a step of the grid
    step = 1.8 / 18
    assert value(result, stretch.last + 1) - value(result, stretch.last) < step / 60


def test_where_no_dose_does_the_nearest_is_named(tmp_path):
    wish = '[find]\nwish = ["at least 99 % attained"]\n'
    result = found(tmp_path, wish + VARY.format(over="0.3 to 1.5 mg/min", steps=9))
    assert result.chosen is None and not result.meets.any()
    assert result.nearest == result.best_overall
    assert result.held[0].shortfall[result.nearest] == pytest.approx(
        0.99 - result.counts.attained()[0][result.nearest, 0])


def test_a_wish_in_every_group_is_held_against_the_group_that_does_worst(tmp_path):
    result = found(tmp_path, '[find]\nwish = ["at least 70 % attained in every group"]\n'
                   + VARY.format(over="0.3 to 1.5 mg/min", steps=9))
    held, = result.held
    assert held.share == pytest.approx(result.counts.attained()[0].min(axis=1))
    assert (held.met == (held.share >= 0.7)).all() and (held.clearly <= held.met).all()


def test_two_numbers_at_once(tmp_path):
    """Dose and interval matter only as their ratio: the best pairs lie where it is the closed form's."""
    doses = {"a": 'amount = "60 mg"\nevery = "60 min"\nover = "60 min"'}
    find = ('[[find.vary]]\nwhat = "dose 1: amount"\nover = "20 to 100 mg"\nsteps = 5\n'
            '[[find.vary]]\nwhat = "dose 1: every"\nover = "60 to 120 min"\nsteps = 3\n')
    question, protocol = asked(tmp_path, find, count=2000, protocols=doses)
    result = search(question, protocol, read_vary(question.section.find, protocol, "study.toml"))
    assert len(result.points) > 15 and result.as_good == (result.best_overall,) * 2
    assert all(len(point) == 2 for point in result.points)
    shares = result.counts.attained()[0][:, 0]
    assert shares[result.best_overall] == shares.max() > 0.5


def test_all_doses_are_multiplied_together(tmp_path):
    both = {"a": 'amount = "10 mg"\n---\nrate = "1 mg/min"\nuntil = "600 min"'}
    find = '[[find.vary]]\nwhat = "all doses"\nover = "50 % to 150 %"\nsteps = 3'
    question, protocol = asked(tmp_path, find, protocols=both)
    varied, = read_vary(question.section.find, protocol, "study.toml")
    changed = [varied.place.put(protocol, one) for one in varied.values]
    assert [(one.dose[0].amount.value, one.dose[1].rate.value) for one in changed] == [(5, 0.5), (10, 1.0), (15, 1.5)]
    without = protocol.model_copy(update={"dose": [protocol.dose[0], DoseSection()]})
    with pytest.raises(ProblemsError, match="dose 2"):
        varied.place.put(without, varied.values[0])


def test_paired_differences_are_those_of_the_tally(tmp_path):
    question, protocol = asked(tmp_path, VARY.format(over="0.3 to 1.5 mg/min", steps=3), count=9000)
    result = search(question, protocol, read_vary(question.section.find, protocol, "study.toml"))
    names = [label(result.points[place]) for place in (0, 3)]
    sections = [result.varied[0].place.put(protocol, result.points[place][0]).model_copy(update={"name": name})
                for place, name in zip((0, 3), names, strict=True)]
    tally = find_cases["cases"]["simulate"](question.study(sections)).tally
    for group in range(3):
        pair = {name: int(getattr(tally.pairs[0, 0, 0, 1], name)[group])
                for name in ("both", "only_a", "only_b", "neither")}
        assert result.counts.difference(0, 3, group) == paired_difference(
            pair["both"], pair["only_a"], pair["only_b"], pair["neither"])


def test_the_number_of_threads_changes_nothing(tmp_path):
    question, protocol = asked(tmp_path, "", count=20000)
    one, three = (count(question.study([protocol]), threads) for threads in (1, 3))
    for name in one.sums:
        assert (one.sums[name] == three.sums[name]).all()
    assert (one.flags == three.flags).all() and (one.dose_mg == three.dose_mg).all()


def test_the_proposal_goes_to_other_patients(tmp_path):
    result = found(tmp_path, VARY.format(over="0.3 to 1.5 mg/min", steps=9), count=500)
    whys, confirmed = confirm(result)
    counts = confirmed[0][1]
    assert fresh(result.asked.base).seed != result.asked.base.seed
    assert whys[0] == "as written" and len(whys) == len(counts.names)
    again = count(fresh(result.asked.study([result.protocol])))
    assert counts.attained()[0][0] == pytest.approx(again.attained()[0][0])
    assert (counts.flags[0] != count(result.asked.study([result.protocol])).flags[0]).any()


def test_an_effect_site_that_the_model_lacks_is_told(tmp_path):
    with pytest.raises(ProblemsError, match="find: wish 1"):
        asked(tmp_path, '[find]\nwish = ["at most 5 % ever above 8 mg/L at the effect site"]\n')


def test_failed_patients_count_against_every_wish(tmp_path):
    """Two in three patients get no dose: no headline, no wish met, and each of them counts as ever above."""
    doses = {"a": 'rate = "1 mg/min"\nuntil = "600 min"\nwhere = "age < 40"'}
    find = '[find]\nwish = ["at least 1 % attained", "at most 99 % ever above 1e6 mg/L"]\n'
    question, protocol = asked(tmp_path, find, protocols=doses, in_protocol='no_dose = "allowed"')
    counts = count(question.study([protocol]))
    attained, above = hold(question, counts)
    assert counts.total("failed")[0, 0] > 0.5 * counts.n[0]
    assert not attained.met[0] and not above.met[0] and attained.shortfall[0] == 1.0
    assert above.share[0] == pytest.approx(counts.total("failed")[0, 0] / counts.n[0])


def test_a_resampled_lists_intervals_count_people_as_judge_does(tmp_path):
    """50 people drawn 4,000 times: shares and differences with the intervals of attainment.csv and comparison.csv."""
    people = [f"male,{30 + number},{60 + number},175" for number in range(50)]
    population = find_cases["cases"]["people"](tmp_path, people) + "\ncount = 4000"
    doses = {"a": RATE["a"], "b": RATE["a"].replace("1 mg/min", "0.7 mg/min")}
    path = find_cases["find_file"](
        tmp_path, "", population=population, protocols=doses, groups={"old": "age >= 50"},
        model=find_cases["one_compartment"](tmp_path, clearance="0.5 * weight / 80", omega=0.1),
        targets=(find_cases["STEADY"].format(range="1 to 2 mg/L"),), until="600 min", every="60 min")
    question, _ = find_cases["asked_of"](path)
    counts = count(question.base)
    _, tables = find_cases["cases"]["judged"](question.base)
    low, high = counts.attained()[1:]
    assert low.ravel() == pytest.approx(tables["attainment"]["attained_low"])
    assert high.ravel() == pytest.approx(tables["attainment"]["attained_high"])
    rows = tables["comparison"][["difference", "difference_low", "difference_high"]].to_numpy()
    assert np.array([counts.difference(0, 1, group) for group in range(2)]) == pytest.approx(rows)
    assert counts.worth[0, 0, 0] < 0.25
