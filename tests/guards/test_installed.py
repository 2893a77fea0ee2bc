"""The tests run against what is installed, never against the checkout by accident."""

import json
from importlib import metadata, resources
from pathlib import Path

import popsim

CHECKOUT = Path(__file__).resolve().parents[2]


def test_popsim_is_the_installed_one():
    where = Path(popsim.__file__).resolve()
    if CHECKOUT in where.parents and "site-packages" not in where.parts:
        text = metadata.distribution("popsim").read_text("direct_url.json") or "{}"
        editable = json.loads(text).get("dir_info", {}).get("editable")
        assert editable, "popsim was imported from the checkout, not installed"


def test_data_files_are_installed():
    assert {path.name for path in (resources.files("covariates") / "sheets").iterdir()} >= {
        "propofol_schnider_1998.toml", "propofol_eleveld_2018.toml", "propofol_marsh_1991.toml",
        "remifentanil_minto_1997.toml"}
    assert (resources.files("popsim") / "templates" / "study.toml").is_file()
    assert (resources.files("popsim") / "templates" / "report.html.j2").is_file()
    assert (resources.files("popsim") / "templates" / "score.html.j2").is_file()
    assert (resources.files("popsim.evidence") / "outcomes.csv").is_file()
    assert (resources.files("popsim.patients") / "tables" / "us_adults_2021_2023.csv").is_file()


def test_version_is_the_packages():
    assert metadata.version("popsim") == popsim.__version__
