"""What must hold of every study, through the whole pipeline."""

from __future__ import annotations

import runpy
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest

cases = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("judge_cases.py"))))
TYPICAL = "between_subject = false"
ALIKE = ["male,40,80,180"] * 7
KEYS = ["model", "protocol", "group", "target"]
PER_KG = {"a": 'amount = "1 mg/kg"\nover = "30 s"\n---\nrate = "8 mg/kg/h"\nuntil = "40 min"'}
PROPOFOL = "propofol_schnider_1998"
PLASMA = 'quantity = "plasma"\nrange = "2 to 4 ug/mL"\nduring = "10 min to 60 min"\nattained_when = "{}"'


@pytest.mark.parametrize("rule", ["50 % of the time", "always", "at any time", "at the end"])
def test_people_who_are_alike_attain_all_or_not_at_all(tmp_path, rule):
    for low in ("1", "2", "3"):
        target = f'quantity = "effect_site"\nrange = "{low} to 4.5 ng/mL"\nduring = "2 min to 60 min"'
        target += f'\nattained_when = "{rule}"'
        asked = cases.study(tmp_path, population=cases.people(tmp_path, ALIKE), variability=TYPICAL, targets=(target,))
        _, tables = cases.judged(asked)
        rows = tables["attainment"].query("patients > 0")
        assert set(rows["attained"]) <= {0.0, 1.0}
        over = tables["over_time"].query("group == 'all'")
        assert set(over[["below", "in_range", "above"]].to_numpy().ravel()) <= {0.0, 1.0}
        assert np.abs(over["p05"] / over["p95"] - 1)[1:].max() < 1 / 64  # within their bins


def test_a_dose_that_comes_to_nothing_gives_nothing(tmp_path):
    """20 mg rounded to whole 50 mg is no dose: said, and counted as failed."""
    asked = cases.study(
        tmp_path,
        model=PROPOFOL,
        population=cases.people(tmp_path, ALIKE),
        variability=TYPICAL,
        protocols={"a": 'amount = "20 mg"\nround_to = "50 mg"'},
        targets=(PLASMA.format("at any time"),),
    )
    findings, tables = cases.judged(asked)
    row = tables["attainment"].iloc[0]
    assert (row["failed"], row["attained"]) == (7, 0.0) and np.isnan(row["time_below"])
    assert tables["doses"].iloc[0][["total_mg_p50", "share_impossible", "share_undosed"]].tolist() == [0, 1, 1]


def test_a_negligible_dose_gives_a_negligible_concentration(tmp_path):
    asked = cases.study(
        tmp_path,
        model=PROPOFOL,
        variability=TYPICAL,
        protocols={"a": 'amount = "1 ng"'},
        targets=(PLASMA.format("at any time"),),
    )
    over = cases.judged(asked)[1]["over_time"].query("group == 'all'")
    assert (over["below"] == 1).all() and over["p95"].max() < 1e-6


def test_twice_the_dose_twice_the_concentration(tmp_path):
    doses = {"once": 'rate = "300 ug/h"\nuntil = "60 min"', "twice": 'rate = "600 ug/h"\nuntil = "60 min"'}
    over = cases.judged(cases.study(tmp_path, protocols=doses))[1]["over_time"]
    names = ["p05", "p25", "p50", "p75", "p95"]
    once, twice = (over[over["protocol"] == name][names].to_numpy()[1:] for name in doses)
    shown = once > 0  # at time 0 there is nothing yet
    np.testing.assert_allclose(twice[shown], 2 * once[shown], rtol=1e-12)  # bins of an octave repeat exactly


def test_more_dose_is_never_less_above(tmp_path):
    doses = {str(rate): f'rate = "{rate} ug/h"\nuntil = "60 min"' for rate in (200, 400, 600, 800, 1200)}
    tables = cases.judged(cases.study(tmp_path, protocols=doses))[1]
    rows = tables["attainment"].query("group == 'all'")
    assert (np.diff(rows["time_above"]) >= 0).all() and (np.diff(rows["time_below"]) <= 0).all()
    assert (np.diff(rows["ever_far_above"]) >= 0).all()
    assert rows["time_above"].iloc[-1] > rows["time_above"].iloc[0]


@pytest.mark.parametrize("threads", [2, 3])
def test_threads_change_no_digit(tmp_path, threads):
    asked = cases.study(tmp_path, count=17_000, every="20 min", compare='matters = "5 %"')
    one, many = (cases.judged(asked, n)[1] for n in (1, threads))
    for name, table in one.items():
        assert table.to_csv(index=False) == many[name].to_csv(index=False), name


def same_rows(small, large):
    """Every row of the smaller run stands unchanged in the larger."""
    for name, keys in {
        "attainment": KEYS,
        "over_time": [*KEYS, "time_min"],
        "doses": ["protocol", "group"],
        "comparison": ["model", "group", "target", "protocol_a", "protocol_b"],
    }.items():
        both = large[name].set_index(keys).loc[small[name].set_index(keys).index].reset_index()
        assert both[small[name].columns].to_csv(index=False) == small[name].to_csv(index=False), name


def test_adding_changes_nothing_else(tmp_path):
    base = cases.judged(cases.study(tmp_path))[1]
    third = {**cases.REMIFENTANIL, "third": 'amount = "1 ug/kg"'}
    same_rows(base, cases.judged(cases.study(tmp_path, protocols=third))[1])
    first = {"third": 'amount = "1 ug/kg"', **cases.REMIFENTANIL}
    same_rows(base, cases.judged(cases.study(tmp_path, protocols=first))[1])
    more = {"women": 'sex == "female"', **cases.GROUPS}
    same_rows(base, cases.judged(cases.study(tmp_path, groups=more))[1])
    plasma = 'name = "other"\nquantity = "plasma"\nrange = "1 to 2 ng/mL"\nduring = "1 min"'
    same_rows(base, cases.judged(cases.study(tmp_path, targets=(plasma, cases.EFFECT_SITE)))[1])


def test_another_model_changes_nothing_of_the_first(tmp_path):
    doses, target = PER_KG, PLASMA.format("50 % of the time")
    kwargs = {"protocols": doses, "targets": (target,), "variability": 'from = "propofol_eleveld_2018"'}
    alone = cases.judged(cases.study(tmp_path, model=PROPOFOL, **kwargs))[1]
    with_other = cases.judged(cases.study(tmp_path, model=PROPOFOL, repeat_with=("propofol_marsh_1991",), **kwargs))[1]
    same_rows(alone, with_other)


def test_a_finer_grid_changes_no_share_of_the_window(tmp_path):
    """Time in range is exact whatever [run] every is."""
    coarse, fine = (cases.judged(cases.study(tmp_path, every=every))[1]["attainment"] for every in ("30 min", "1 min"))
    assert coarse.to_csv() == fine.to_csv()


def test_more_patients_begin_with_the_same_patients(tmp_path):
    def first(count):
        rows = []
        cases.simulate(cases.study(tmp_path, count=count), sink=rows.append, keep_courses=True)
        return rows[0]

    small, large = first(40), first(90)
    for name, values in small.patients.attributes.items():
        assert (large.patients.attributes[name][:40] == values).all()
    for (*_, plasma, site, _), (*_, more_plasma, more_site, _) in zip(small.courses, large.courses, strict=True):
        assert (more_plasma[:40] == plasma).all() and (more_site[:40] == site).all()


def test_kept_courses_show_only_what_the_model_has(tmp_path):
    """No effect site in a model without ke0: empty, not zero. The effect is there whatever the target asks."""

    def courses(model, population):
        rows = []
        asked = cases.study(
            tmp_path,
            model=model,
            population=population,
            variability=TYPICAL,
            protocols={"a": 'amount = "100 mg"'},
            targets=(PLASMA.format("at any time"),),
        )
        cases.simulate(asked, sink=rows.append, keep_courses=True)
        return rows[0].courses[0][2:]

    population = cases.people(tmp_path, ALIKE)
    plasma, site, effect = courses(cases.sheet(tmp_path), population)
    assert np.isfinite(plasma).all() and np.isnan(site).all() and np.isnan(effect).all()
    switches = population + "\n[population.set]\nopioid = true\nvenous_sampling = false"
    plasma, site, effect = courses("propofol_eleveld_2018", switches)
    assert (site[:, 0] == 0).all() and (effect[:, 0] == 93).all() and (effect[:, 2] < 93).all()


def test_an_error_in_one_thread_is_raised_and_stops_the_others(tmp_path):
    def broken(rows):
        raise OSError("disk full")

    with pytest.raises(OSError, match="disk full"):
        cases.simulate(cases.study(tmp_path, count=17_000, every="60 min"), 3, sink=broken)


def test_the_sink_receives_every_block_in_order(tmp_path):
    firsts, done = [], []
    cases.simulate(
        cases.study(tmp_path, count=20_000, every="60 min"),
        3,
        sink=lambda rows: firsts.append((rows.patients.first, len(rows.patients))),
        progress=done.append,
    )
    assert firsts[0][0] == 1 and all(b[0] == a[0] + a[1] for a, b in zip(firsts, firsts[1:], strict=False))
    assert done[-1] == sum(n for _, n in firsts) == 20_000 and done == sorted(done)


def test_counts_that_no_machine_could_hold_are_refused(tmp_path):
    many = {f"group {k}": f"age > {k}" for k in range(60)}
    asked = cases.study(tmp_path, groups=many, until="300 min", every="1 s")
    with pytest.raises(cases.ProblemsError, match="a longer step, or fewer groups"):
        cases.simulate(asked)
