"""The stored full run: our own output, which must not change except on purpose."""

import runpy
from pathlib import Path

import pandas as pd
import pytest

FOLDER = Path(__file__).parents[1] / "pinned" / "full_run"
ADVICE = (
    "the numbers of a full run changed. If on purpose: python tests/pinned/full_run/refresh.py, and a line marked "
    "**(numbers)** in the change log of DEVELOPERS.md"
)


@pytest.fixture(scope="module")
def now():
    return runpy.run_path(str(FOLDER / "refresh.py"))["tables"]()


@pytest.mark.parametrize("name", ["attainment", "over_time", "comparison", "groups", "doses"])
def test_full_run_is_as_stored(now, name):
    """Every stored column, numbers to 1e-9; a column that is new is no change of numbers."""
    stored = pd.read_csv(FOLDER / f"{name}.csv", keep_default_na=True)
    assert set(stored.columns) <= set(now[name].columns), ADVICE
    found = now[name][list(stored.columns)].reset_index(drop=True)
    for column in stored.columns:
        if stored[column].dtype.kind in "fi":
            found[column] = found[column].astype(stored[column].dtype)
        else:
            found[column] = found[column].fillna("").astype(str)
            stored[column] = stored[column].fillna("").astype(str)
    try:
        pd.testing.assert_frame_equal(found, stored, rtol=1e-9, atol=1e-12, check_dtype=False)
    except AssertionError as error:
        raise AssertionError(f"{name}.csv: {ADVICE}\n{error}") from None
