"""When a range is first reached, read off the window's course, against looking through the whole time from 0."""

from types import SimpleNamespace

import numpy as np
import pytest

from popsim import solve
from popsim.judging import _first_reached
from popsim.records import Timeline

N = 300


def people(rng):
    """Three compartments with an effect site, spread widely, and what they are given: a bolus, an infusion, a bolus."""
    typical = {"V1": 5.0, "CL": 2.0, "V2": 10.0, "Q2": 1.5, "V3": 50.0, "Q3": 0.5, "ke0": 0.3}
    disposition = solve.disposition(
        {name: value * np.exp(0.5 * rng.standard_normal(N)) for name, value in typical.items()})
    times = np.tile([0.0, 5.0, 20.0, 30.0], (N, 1))
    bolus = np.column_stack([rng.choice([0.0, 20.0, 60.0], N), np.zeros(N), np.zeros(N), rng.choice([0.0, 80.0], N)])
    rate = np.column_stack([np.zeros(N), rng.choice([0.0, 6.0], N), np.zeros(N), np.zeros(N)])
    return disposition, Timeline(times, bolus, rate)


@pytest.mark.parametrize("quantity", ["plasma", "effect_site"])
@pytest.mark.parametrize("start", [0.0, 10.0, 30.0, 45.0])
def test_first_reached_is_what_the_whole_time_gives(quantity, start):
    """Boluses jump over the range; some had reached it before the window and left it again, some never do."""
    disposition, timeline = people(np.random.default_rng(7))
    low, high, start, end = (np.full(N, value) for value in (2.0, 3.0, start, 45.0))
    course = solve.window_course(disposition, timeline, quantity, low, high, start, end)
    target = SimpleNamespace(quantity=quantity, response=None)
    found = _first_reached(target, disposition, timeline, low, start, end, course)
    whole = solve.window_course(
        disposition, timeline, quantity, low, np.full(N, np.inf), np.zeros(N), end).first_inside_min
    assert np.isinf(whole).sum() > 10 and (np.isfinite(whole) & (whole < 5)).sum() > 10 and (whole > 30).sum() > 10
    np.testing.assert_allclose(found, whole, rtol=0, atol=1e-9)
