"""Every shipped study reads, checks and is named in the README."""

from pathlib import Path

import pytest

from popsim.check_text import check_text
from popsim.study import read_study

CHECKOUT = Path(__file__).resolve().parents[2]
CONFIGS = sorted((CHECKOUT / "configs").glob("*.toml"))


@pytest.mark.parametrize("path", CONFIGS, ids=lambda path: path.stem)
def test_config_reads_and_checks(path):
    text = check_text(read_study(path), 1000)
    assert "Ward card" in text
    assert max(map(len, text.splitlines())) <= 80


@pytest.mark.parametrize("path", CONFIGS, ids=lambda path: path.stem)
def test_config_is_in_the_readme(path):
    assert f"configs/{path.name}" in (CHECKOUT / "README.md").read_text(encoding="utf-8")
