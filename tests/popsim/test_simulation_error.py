"""Monte Carlo errors of means and quantiles: against simulations with other seeds, and in closed form."""

from __future__ import annotations

import runpy
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
from scipy.stats import chi2, norm

from popsim.estimate import quantile_error

cases = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("judge_cases.py"))))
SEEDS = 30
PERCENTILES = ("p05", "p25", "p50", "p75", "p95")
PREPARED = 'strength = "10 mg/mL"\nvial = "2 mL"'
PROTOCOL = {"2 mg/kg": 'amount = "2 mg/kg"\nat_most = "250 mg"\nround_to = "1 mg"'}
TARGET = 'quantity = "plasma"\nrange = "1 to 4 mg/L"\nduring = "0 min to 20 min"\nattained_when = "50 % of the time"'


@pytest.fixture(scope="module")
def runs(tmp_path_factory):
    """The same study with other seeds: tables of 500 patients each."""
    folder = tmp_path_factory.mktemp("seeds")
    asked = [
        cases.study(folder, 500, "propofol_schnider_1998", protocols=PROTOCOL, targets=(TARGET,), groups={},
                    variability='from = "propofol_eleveld_2018"', until="20 min", every="10 min",
                    in_protocol=PREPARED, seed=seed)
        for seed in range(SEEDS)
    ]  # fmt: skip
    return [cases.judged(one)[1] for one in asked]


WHERE = [("over_time", 1, name) for name in PERCENTILES]
WHERE += [("attainment", 0, name) for name in ("time_below", "time_in_range", "time_above")]
WHERE += [("doses", 0, f"total_mg_{name}") for name in PERCENTILES[:4]]  # the cap is the 95 % quantile of all
WHERE += [("doses", 0, name) for name in ("mg_per_kg_lean_p25", "volume_ml_p50", "waste_ml_mean", "vials_each_mean")]
WHERE += [("people", 0, f"{measure}_{name}") for measure in ("age", "weight", "bmi") for name in PERCENTILES]


@pytest.mark.parametrize(("table", "row", "column"), WHERE)
def test_errors_are_the_sd_between_seeds(runs, table, row, column):
    """The SD of 30 runs is known to within chi-squared (99.99 %); an error from one run's own density varies by another
    tenth or so, which its mean over the runs does not."""
    rows = [tables[table].iloc[row] for tables in runs]
    sd = np.std([one[column] for one in rows], ddof=1)
    said = np.sqrt(np.mean([one[f"{column}_error"] ** 2 for one in rows]))
    low, high = np.sqrt(chi2.ppf([0.00005, 0.99995], SEEDS - 1) / (SEEDS - 1))
    assert low < sd / said < high


def test_what_does_not_vary_has_no_error(runs):
    assert (runs[0]["doses"]["total_mg_p95"] == 250).all() and (runs[0]["doses"]["total_mg_p95_error"] == 0).all()


@pytest.mark.parametrize("share", [0.05, 0.5, 0.9])
def test_error_of_a_normal_quantile(share):
    """Textbook standard error: root(q (1 - q) / n) over the density there; n so large that the density is even."""
    n = 10**6
    at = norm.ppf(share)
    expected = np.sqrt(share * (1 - share) / n) / norm.pdf(at)
    assert quantile_error(norm.ppf, share, n) == pytest.approx(expected, rel=1e-4)


def test_too_few_patients_for_a_quantile_have_no_error():
    assert np.isnan(quantile_error(lambda share: share, 0.05, 18))
    assert quantile_error(lambda share: share, 0.05, 19) == pytest.approx(0.05, abs=1e-3)
    assert np.isnan(quantile_error(lambda share: share, 0.5, 0))
