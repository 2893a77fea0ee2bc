"""The compiled mathematics, piece by piece, against mpmath, exact fractions, numpy and textbook closed forms."""

from __future__ import annotations

import ast
import math
import runpy
from fractions import Fraction
from pathlib import Path
from types import SimpleNamespace

import mpmath as mp
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from popsim import kernels, solve

cases = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("solver_cases.py"))))
few = settings(max_examples=cases.EXAMPLES, deadline=None, database=None)
decades = st.floats(-12, 3).map(lambda power: 10.0**power) | st.just(0.0)
factor = st.floats(-6, 6).map(lambda power: 10.0**power)


def difference(*points: float) -> mp.mpf:
    """Divided difference of exp at these points, from its integral over the simplex as a matrix exponential of a
    bidiagonal matrix (Opitz 1964), at 60 digits."""
    with mp.workdps(60):
        n = len(points)
        matrix = mp.matrix(n, n)
        for i, point in enumerate(points):
            matrix[i, i] = mp.mpf(point)
            if i:
                matrix[i - 1, i] = 1
        return mp.expm(matrix)[0, n - 1]


@few
@given(decades)
def test_mean_exponential_is_mpmaths(z):
    assert kernels._mean_exponential(z) == pytest.approx(float(difference(0.0, -z)), rel=1e-15, abs=0)


@few
@given(decades, decades)
def test_second_difference_is_mpmaths(a, b):
    assert kernels._second_difference(a, b) == pytest.approx(float(difference(0.0, -a, -b)), rel=2e-15, abs=0)


@few
@given(decades, st.sampled_from([0.0, 1e-16, 1e-12, 1e-8, 1e-4, 1e-2]))
def test_second_difference_where_both_meet(a, aside):
    b = a * (1 + aside)
    assert kernels._second_difference(a, b) == pytest.approx(float(difference(0.0, -a, -b)), rel=2e-15, abs=0)


@few
@given(decades, decades, decades)
def test_third_difference_is_mpmaths(a, b, c):
    assert kernels._third_difference(a, b, c) == pytest.approx(float(difference(0.0, -a, -b, -c)), rel=1e-14, abs=0)


@few
@given(factor, factor, st.floats(-1e-9, 1e-9))
def test_excess_keeps_what_the_product_rounds_away(b, c, aside):
    """Exact rational arithmetic (fractions, the standard library)."""
    a = b * c * (1 + aside)
    exact = Fraction(a) - Fraction(b) * Fraction(c)
    assert kernels._excess(a, b, c) == pytest.approx(float(exact), rel=1e-15, abs=0.0)


def test_one_compartment_is_clearance_over_volume():
    """Textbook: rate CL/V, weight 1/V."""
    d = solve.disposition({"V1": np.array([10.0]), "CL": np.array([1.0])})
    np.testing.assert_allclose(d.rates[0], [0.1, 1.0, 1.0], rtol=1e-15)
    np.testing.assert_allclose(d.weights[0], [0.1, 0.0, 0.0], rtol=1e-15)
    assert d.ke0[0] == 0.0


def test_two_compartments_are_the_textbook_quadratic():
    """alpha, beta = ((k10 + k12 + k21) +- sqrt((..)^2 - 4 k10 k21))/2, A = (alpha - k21)/(alpha - beta)/V1
    (Gibaldi and Perrier, Pharmacokinetics, 1982, from memory)."""
    v1, cl, v2, q2 = 10.0, 2.0, 30.0, 3.0
    k10, k12, k21 = cl / v1, q2 / v1, q2 / v2
    total = k10 + k12 + k21
    root = math.sqrt(total**2 - 4 * k10 * k21)
    alpha, beta = (total + root) / 2, (total - root) / 2
    d = solve.disposition({k: np.array([v]) for k, v in {"V1": v1, "CL": cl, "V2": v2, "Q2": q2}.items()})
    np.testing.assert_allclose(d.rates[0, :2], [beta, alpha], rtol=1e-14)
    wanted = [(k21 - beta) / (alpha - beta) / v1, (alpha - k21) / (alpha - beta) / v1]
    np.testing.assert_allclose(d.weights[0, :2], wanted, rtol=1e-14)
    assert d.weights[0, 2] == 0.0


def test_rates_are_numpys_eigenvalues():
    n = 3 if cases.SLOW else 200
    values = cases.varied(n)
    d = solve.disposition(values)
    for i in range(n):
        matrix = cases.rate_matrix({name: values[name][i] for name in values})[:3, :3]
        wanted = np.sort(np.linalg.eigvals(-matrix).real)
        np.testing.assert_allclose(d.rates[i], wanted, rtol=1e-11)


@few
@given(*[factor] * 6)
def test_rates_ascend_and_weights_add_up_to_one_over_v1(v1, cl, v2, q2, v3, q3):
    """Over any decades: nonnegative weights, sum 1/V1 (all drug starts in plasma), and sum weight/rate = 1/CL (what
    is given is eliminated): both exact laws of the mammillary model."""
    d = cases.people({"V1": v1, "CL": cl, "V2": v2, "Q2": q2, "V3": v3, "Q3": q3})
    used = d.weights[0] > 0
    assert d.status[0] == 0
    assert (d.weights[0] >= 0).all()
    assert (np.diff(d.rates[0][used]) >= 0).all()
    assert d.weights[0].sum() == pytest.approx(1 / v1, rel=1e-13)
    assert (d.weights[0] / d.rates[0]).sum() == pytest.approx(1 / cl, rel=1e-13)


def test_compartments_of_one_rate_act_as_one():
    """Two compartments with k21 = k31 are one of volume V2 + V3 and flow Q2 + Q3 (linear algebra)."""
    both = cases.people({"V1": 5.0, "CL": 1.0, "V2": 8.0, "Q2": 2.0, "V3": 16.0, "Q3": 4.0})
    merged = cases.people({"V1": 5.0, "CL": 1.0, "V2": 24.0, "Q2": 6.0})
    np.testing.assert_array_equal(both.rates, merged.rates)
    np.testing.assert_array_equal(both.weights, merged.weights)


def test_order_of_compartments_does_not_matter():
    one = cases.people({"V1": 5.0, "CL": 1.0, "V2": 8.0, "Q2": 2.0, "V3": 160.0, "Q3": 4.0})
    other = cases.people({"V1": 5.0, "CL": 1.0, "V2": 160.0, "Q2": 4.0, "V3": 8.0, "Q3": 2.0})
    np.testing.assert_array_equal(one.rates, other.rates)
    np.testing.assert_array_equal(one.weights, other.weights)


@pytest.mark.parametrize(("name", "value", "code"), [
    ("V1", 0.0, kernels.NOT_POSITIVE), ("V1", -1.0, kernels.NOT_POSITIVE), ("CL", 0.0, kernels.NOT_POSITIVE),
    ("V2", 0.0, kernels.NOT_POSITIVE), ("Q3", -1e-9, kernels.NOT_POSITIVE), ("ke0", -0.1, kernels.NOT_POSITIVE),
    ("CL", math.nan, kernels.NOT_FINITE), ("V3", math.inf, kernels.NOT_FINITE), ("ke0", math.nan, kernels.NOT_FINITE),
])  # fmt: skip
def test_a_patient_that_cannot_be_computed_says_why(name, value, code):
    d = cases.people(cases.PROPOFOL, {**cases.PROPOFOL, name: value}, cases.PROPOFOL)
    alone = cases.people(cases.PROPOFOL)
    assert d.status.tolist() == [0, code, 0]
    for i in (0, 2):
        np.testing.assert_array_equal(d.rates[i], alone.rates[0])
        np.testing.assert_array_equal(d.weights[i], alone.weights[0])


@pytest.mark.filterwarnings("ignore::RuntimeWarning")  # numpy scalars speak of overflow when not compiled
def test_extremes_end_and_say_so():
    """The widest and narrowest doubles: right (weights add up to 1/V1) or with a status; never a silent nan."""
    sizes = (1e-300, 1e-200, 1e-12, 1.0, 1e12, 1e200, 1e300)
    d = cases.people(*({"V1": size, "CL": flow, "V2": 1.0, "Q2": flow, "V3": size, "Q3": 1.0}
                       for size in sizes for flow in sizes))  # fmt: skip
    volume = np.repeat(sizes, len(sizes))
    fine = d.status == 0
    assert 15 < fine.sum() < fine.size
    assert (d.status[~fine] == kernels.OUT_OF_REACH).all()
    np.testing.assert_allclose(d.weights[fine].sum(axis=1) * volume[fine], 1.0, rtol=1e-12)


def test_kernels_import_nothing_of_ours_and_ask_for_no_shortcuts():
    source = Path(kernels.__file__).read_text(encoding="utf-8")
    tree = ast.parse(source)
    imported = {alias.name for node in ast.walk(tree) if isinstance(node, ast.Import) for alias in node.names}
    assert imported == {"math", "numba", "numpy"}
    assert not [node for node in ast.walk(tree) if isinstance(node, (ast.ImportFrom, ast.Raise))]
    keywords = {k.arg for node in ast.walk(tree) if isinstance(node, ast.Call) for k in node.keywords}
    assert keywords == {"cache", "nogil", "error_model"}


def test_every_status_of_the_kernels_is_worded():
    codes = {value for name, value in vars(kernels).items()
             if name in {"FINE", "NOT_POSITIVE", "NOT_FINITE", "OUT_OF_REACH", "BAD_EVENT", "BAD_WINDOW", "BAD_LIMITS",
                         "NO_EFFECT_SITE", "NO_ABSORPTION"}}  # fmt: skip
    assert codes == set(solve.STATUS)


def test_without_a_place_for_a_cache_code_is_compiled_all_the_same(monkeypatch):
    """numba raises RuntimeError at decoration when no cache locator is available."""

    def refusing(cache=False, **options):
        def decorate(function):
            if cache:
                raise RuntimeError("cannot cache function: no locator available")
            return function
        return decorate

    monkeypatch.setattr(kernels.numba, "njit", refusing)
    monkeypatch.setattr(kernels, "CACHED", True)
    assert kernels._compiled(math.sin) is math.sin
    assert not solve.code_is_kept()
