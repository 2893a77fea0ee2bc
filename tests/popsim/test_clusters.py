"""Intervals of people drawn again and again: the cluster formula against statsmodels and by coverage."""

import doctest
import runpy
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
import statsmodels.api as sm
from scipy.stats import chi2
from scipy.stats import t as student

from popsim import clusters
from popsim.clusters import worth_of
from popsim.estimate import Z95, wilson
from popsim.robustness import robustness
from popsim.run import simulate
from popsim.tables import all_tables, notes_of

cases = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("judge_cases.py"))))


def test_examples_in_the_docstrings():
    assert doctest.testmod(clusters).failed == 0


def draws(rng, people, n, shape=(2, 1)):
    drawn = rng.multinomial(n, np.full(people, 1 / people))
    return rng.binomial(drawn, rng.beta(*shape, people)), drawn


@pytest.mark.parametrize("people, n", [(12, 300), (60, 3000), (400, 1000)])
def test_variance_is_that_of_statsmodels(people, n):
    """statsmodels: least squares with an intercept alone, covariance of clusters."""
    attained, drawn = draws(np.random.default_rng(people), people, n)
    rows = np.concatenate([[1.0] * a + [0.0] * (d - a) for a, d in zip(attained, drawn)])
    of = np.repeat(np.arange(people), drawn)
    fit = sm.OLS(rows, np.ones(n)).fit(cov_type="cluster", cov_kwds={"groups": of})
    share, seen = attained.sum() / n, np.count_nonzero(drawn)
    correction = (Z95 / student.ppf(0.975, seen - 1)) ** 2
    worth = worth_of(attained, drawn)
    variance = share * (1 - share) / n / (worth / correction)
    assert variance == pytest.approx(fit.bse[0] ** 2, rel=1e-9)


def test_intervals_cover_the_ward_that_the_list_comes_from():
    """95 % intervals hold the ward's own share in 93 to 97 % of 1,500 lists of 40 people."""
    rng, held, tries = np.random.default_rng(3), 0, 1500
    for _ in range(tries):
        attained, drawn = draws(rng, 40, 2000)
        worth = worth_of(attained, drawn)
        low, high = wilson(attained.sum() * worth, 2000 * worth)
        held += low <= 2 / 3 <= high
    assert 0.93 <= held / tries <= 0.97


def test_where_nothing_varies_draws_are_worth_what_the_people_are():
    drawn = np.full(50, 20)
    for attained in (drawn, 0 * drawn):
        assert 1000 * worth_of(attained, drawn) == pytest.approx(50 * (Z95 / student.ppf(0.975, 49)) ** 2)
    assert worth_of(np.zeros(3, dtype=int), np.zeros(3, dtype=int)) == 1.0
    assert worth_of(np.array([5]), np.array([10])) * 10 < 0.01  # one person: nothing is known


def test_people_alike_are_worth_their_draws():
    rng = np.random.default_rng(1)
    drawn = rng.multinomial(100_000, np.full(500, 1 / 500))
    assert worth_of(rng.binomial(drawn, 0.4), drawn) == pytest.approx(1.0, abs=0.15)


@pytest.fixture(scope="module")
def ward(tmp_path_factory):
    folder = tmp_path_factory.mktemp("ward")
    rng = np.random.default_rng(2)
    rows = [
        f"{rng.choice(['female', 'male'])},{rng.integers(30, 90)},{rng.integers(50, 130)},{rng.integers(150, 190)}"
        for _ in range(60)
    ]
    (folder / "people.csv").write_text("sex,age,weight,height\n" + "\n".join(rows), encoding="utf-8")
    return cases.study(
        folder,
        population='source = "list"\nfile = "people.csv"\ncount = 20000',
        groups={"under 65": "age < 65", "65 and over": "age >= 65"},
    )


def test_a_resampled_list_is_as_sure_as_its_people(ward):
    findings = simulate(ward, 1)
    tables = all_tables(ward, findings.tally)
    everyone = tables["attainment"].query('group == "all"').iloc[0]
    plain = np.subtract(*wilson(round(everyone.attained * 20_000), 20_000)[::-1])
    assert everyone.attained_high - everyone.attained_low > 3 * plain
    pair = tables["comparison"].query('group == "all"').iloc[0]
    assert pair.difference == pytest.approx(pair.attained_b - pair.attained_a, abs=1e-12)
    assert pair.difference_low < pair.difference < pair.difference_high
    assert pair.difference_high - pair.difference_low > 0.05
    between = tables["groups"].iloc[0]
    assert between.difference_high - between.difference_low > 0.05
    assert findings.tally.clusters.drawn.sum() == 20_000
    assert (findings.tally.clusters.drawn > 250).all()


def test_counts_per_person_do_not_depend_on_threads(ward):
    one, two = simulate(ward, 1).tally.clusters, simulate(ward, 2).tally.clusters
    for mine, theirs in zip(one.arrays(), two.arrays(), strict=True):
        assert np.array_equal(mine, theirs)



ISOLATES = (
    'name = "isolates"\nquantity = "plasma"\nover_mic = ">= 1"\nduring = "0 min to 8 h"\n'
    'attained_when = "50 % of the time"\nisolates = { "4 mg/L" = 50, "8 mg/L" = 30, "16 mg/L" = 20 }\n'
    'isolates_source = "invented for a test"'
)
TIME = (
    'name = "time"\nquantity = "plasma"\nrange = "10 to 60 mg/L"\nduring = "0 min to 8 h"\n'
    'attained_when = "50 % of the time"'
)
PEAK = 'name = "level"\nquantity = "plasma"\nrange = ">= 12 mg/L"\nduring = "4 h"\nattained_when = "always"'


def resampled(folder, seed, rows, count):
    """A drug whose clearance hangs on age, so that one person's draws are much alike."""
    luck = np.random.default_rng(seed)
    sheet = folder / cases.sheet(
        folder,
        volume="20",
        clearance="0.16 * exp(-0.02 * (age - 60))",
        spread='printed_as = "sd of ln"\nCL = { value = 0.2, evidence = "seen" }',
    )
    sheet.write_text(sheet.read_text().replace('"nobody"', '"nobody"\nage = "30 to 75 years"'), encoding="utf-8")
    ages, weights = luck.integers(30, 90, rows), luck.integers(50, 99, rows)
    people = [f"female,{age},{weight},165" for age, weight in zip(ages, weights, strict=True)]
    return cases.study(
        folder,
        model=sheet.name,
        population=cases.people(folder, people) + f"\ncount = {count}",
        groups={},
        protocols={"1 g": 'amount = "1000 mg"', "1.3 g": 'amount = "1300 mg"'},
        targets=(ISOLATES, TIME, PEAK),
        until="8 h",
        every="4 h",
        seed=seed,
    )


def widths(asked):
    """Of every table the value and the half width of its 95 % interval, as one number of standard errors each."""
    tally = simulate(asked, 1).tally
    tables = all_tables(asked, tally)
    response, joint = tables["responses"].iloc[0], tables["together"].iloc[1]
    time = tables["attainment"].query('target == "time"').iloc[0]
    quarter = tables["quartiles"].query('target == "level" and covariate == "age" and quarter == 3').iloc[0]
    whole = robustness(asked, 1)
    inside = whole[whole["asked"].str.startswith("without") & (whole["target"] == "level")].iloc[0]
    z = 2 * Z95
    return {
        "response": (response.response, (response.response_high - response.response_low) / z),
        "together": (joint.attained, (joint.attained_high - joint.attained_low) / z),
        "together, pair": (joint.difference, (joint.difference_high - joint.difference_low) / z),
        "time": (time.time_in_range, time.time_in_range_error),
        "quarter": (quarter.difference, (quarter.difference_high - quarter.difference_low) / z),
        "inside the model": (inside.difference, (inside.difference_high - inside.difference_low) / z),
    }


def test_errors_are_those_between_lists(tmp_path):
    """20 wards of 40 people each, drawn 1,000 times in all: the SD between wards is the error that each ward says."""
    found = [widths(resampled(tmp_path, seed, 40, 1000)) for seed in range(20)]
    low, high = np.sqrt(chi2.ppf([0.0005, 0.9995], 19) / 19)
    for name in found[0]:
        values, errors = np.array([one[name] for one in found]).T
        assert low < values.std(ddof=1) / np.sqrt((errors**2).mean()) < high, name


def test_what_counts_of_draws_cannot_tell_is_left_empty_and_said(tmp_path):
    findings, tables = cases.judged(resampled(tmp_path, 1, 40, 1000))
    assert tables["comparison"][["median_gain_low", "median_gain_high"]].isna().all(axis=None)
    assert tables["comparison"]["median_gain"].notna().all()
    numbers = tables["values"]
    assert numbers[["mean_error", "p50_low", "p95_high"]].isna().all(axis=None) and numbers["p50"].notna().all()
    for name in ("over_time", "doses", "people"):
        errors = [column for column in tables[name] if "error" in column]
        assert errors and tables[name][errors].isna().all(axis=None)
    assert any("cannot tell how far people differ" in note for note in notes_of(findings, tables))
