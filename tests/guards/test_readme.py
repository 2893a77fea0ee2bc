"""What the README shows is what a reader gets: commands, samples, numbers of shipped things."""

import re
from pathlib import Path

import pytest

from covariates.sheet import shipped_sheets
from popsim.check_text import check_text
from popsim.cli import popsim
from popsim.cli import run as popsim_run
from popsim.study import read_study

CHECKOUT = Path(__file__).resolve().parents[2]
README = (CHECKOUT / "README.md").read_text(encoding="utf-8")
SAMPLES = re.findall(r"^```\n(.*?)^```$", README, re.DOTALL | re.MULTILINE)


def sample(start: str) -> str:
    (found,) = [text for text in SAMPLES if text.startswith(start)]
    return found.rstrip()


@pytest.fixture
def said(monkeypatch):
    """What a command prints on stdout."""
    lines: list[str] = []
    monkeypatch.setattr("click.echo", lambda text="", err=False, **_: None if err else lines.append(str(text)))
    return lines


def test_the_summary_is_what_the_first_command_prints(tmp_path, said):
    """All of it, up to the notes."""
    assert popsim_run(["judge", str(CHECKOUT / "configs" / "remifentanil_fixed_rate.toml"), "--out",
                       str(tmp_path / "run"), "--tables-only", "--no-patients"]) == 0
    assert sample("One remifentanil rate") == "\n".join(said).partition("\n\nNote\n")[0]


def test_the_ward_card_is_what_check_prints():
    study = read_study(CHECKOUT / "configs" / "propofol_body_size.toml")
    assert sample('Ward card "adjusted') in check_text(study, 100)


def test_the_table_is_what_find_prints(tmp_path, said):
    assert popsim_run(["find", "table", str(CHECKOUT / "configs" / "find_remifentanil_rate.toml"), "--out",
                       str(tmp_path / "run"), "--tables-only"]) == 0
    assert sample("Ward card: table of 3 bands") in "\n".join(said)


def test_every_command_has_its_line_and_its_word_in_the_help(said):
    lines = set(re.findall(r"^\| `popsim (\w+).*` \| .+ \|$", README, re.MULTILINE))
    assert lines == set(popsim.commands)
    assert set(re.findall(r"popsim (\w+)", popsim.help)) == lines


def test_every_shipped_study_named_is_there():
    assert all((CHECKOUT / path).exists() for path in re.findall(r"configs/[\w/]+(?:\.\w+)?", README))
    assert "configs/score_demo/" in README and "configs/sheets/" in README


def test_the_number_of_models_is_right():
    assert f"the {len(shipped_sheets())} shipped models" in README
