"""popsim draw: the same pictures from a folder alone, in three formats, and what it refuses."""

import json
import shutil
from pathlib import Path

import pytest
from matplotlib.image import imread

from popsim.cli import run as popsim_run
from popsim.errors import DONE, USER_CAN_MEND
from popsim.finished import read_run
from popsim.output import _is_picture

STUDY = '''title = "NA"
question = "Is it right?"
seed = 3
[population]
source = "survey"
count = 1200
[[group]]
name = "NA"
where = "age < 65"
[[group]]
name = "1"
where = "age >= 65"
[drug]
model = "remifentanil_minto_1997"
[[protocol]]
name = "1.0"
[[protocol.dose]]
rate = "9 ug/kg/h"
until = "60 min"
[[protocol]]
name = "nan"
[[protocol.dose]]
rate = "12 ug/kg/h"
until = "60 min"
[target]
quantity = "effect_site"
low = "3 ng/mL"
during = "15 min to 60 min"
attained_when = "80 % of the time"
[run]
until = "60 min"
every = "3 min"
'''
NAMES = {"attainment_by_group", "attainment_over_time", "below_in_above", "concentration_bands", "attainment_map",
         "body_size"}


@pytest.fixture(scope="module")
def judged(tmp_path_factory):
    folder = tmp_path_factory.mktemp("draw")
    (folder / "study.toml").write_text(STUDY)
    arguments = ["judge", str(folder / "study.toml"), "--out", str(folder / "run"), "--quiet", "--keep-courses"]
    assert popsim_run(arguments) == DONE
    return folder / "run"


@pytest.fixture
def copy(judged, tmp_path):
    return Path(shutil.copytree(judged, tmp_path / "run"))


def pictures(folder: Path, kind: str) -> dict[str, bytes]:
    return {path.name: path.read_bytes() for path in folder.glob(f"*.{kind}")}


def test_the_same_bytes_without_study_or_simulation(copy, monkeypatch):
    before = pictures(copy, "svg")
    assert {name.removesuffix(".svg") for name in before} == NAMES
    for path in copy.glob("*.svg"):
        path.unlink()
    monkeypatch.setattr("popsim.run.simulate", lambda *_: pytest.fail("simulated"))
    monkeypatch.setattr("popsim.study.read_study", lambda *_: pytest.fail("read a study"))
    (copy / "notes.txt").write_text("mine")
    assert popsim_run(["draw", str(copy)]) == DONE
    assert pictures(copy, "svg") == before
    assert (copy / "notes.txt").read_text() == "mine" and (copy / "report.html").exists()
    assert not [path for path in copy.iterdir() if path.name.startswith(".")]


@pytest.mark.parametrize("kind", ["png", "pdf"])
def test_other_formats_are_whole_signed_and_the_same_on_repeat(copy, kind, capsys):
    assert popsim_run(["draw", str(copy), "--format", kind]) == DONE
    said, first = capsys.readouterr().out, pictures(copy, kind)
    assert {Path(name).stem for name in first} == NAMES
    for name, data in first.items():
        assert data.startswith({"png": b"\x89PNG\r\n", "pdf": b"%PDF-"}[kind]) and len(data) > 5000
        assert _is_picture(copy / name) and name in said
        assert b"CreationDate" not in data
    if kind == "png":
        height, width, _ = imread(copy / "body_size.png").shape
        assert width == 9 * 200 and 0.2 < height / width < 1.5
        return  # that PNG repeats is for the rasteriser to promise; a PDF could hold a date
    assert popsim_run(["draw", str(copy), "--format", kind, "--quiet"]) == DONE
    assert pictures(copy, kind) == first and capsys.readouterr().out == ""


def test_a_new_run_removes_pictures_of_the_old_one_in_every_format(copy):
    (copy / "attainment_map.png").write_bytes(b"\x89PNG\r\nSoftware\0popsim")
    (copy / "mine.png").write_bytes(b"\x89PNG my own")
    study = copy.parent / "study.toml"
    study.write_text(STUDY)
    assert popsim_run(["judge", str(study), "--out", str(copy), "--overwrite", "--tables-only", "--quiet"]) == DONE
    assert not pictures(copy, "svg") and list(pictures(copy, "png")) == ["mine.png"]


def test_names_and_open_limits_come_back_as_they_were(judged):
    run = read_run(judged)
    assert run.group_names == ("all", "NA", "1") and run.protocols == ("1.0", "nan")
    assert run.targets[0].high == float("inf") and run.targets[0].low == pytest.approx(0.003)
    assert set(run.tables["attainment"]["group"]) == {"all", "NA", "1"}
    assert set(run.tables["attainment"]["protocol"]) == {"1.0", "nan"}
    assert (run.tables["comparison"]["verdict"] == "").all()
    assert run.courses["patient"].unique().tolist() == [1, 2, 3, 4, 5]


def test_parquet_draws_the_same(judged, tmp_path):
    pytest.importorskip("pyarrow")
    (tmp_path / "study.toml").write_text(STUDY)
    assert popsim_run(["judge", str(tmp_path / "study.toml"), "--out", str(tmp_path / "run"), "--quiet", "--format",
                       "parquet"]) == DONE
    ours, theirs = pictures(tmp_path / "run", "svg"), pictures(judged, "svg")
    assert ours.keys() == theirs.keys()
    assert all(ours[name] == theirs[name] for name in ours if name != "concentration_bands.svg")  # has the courses


def test_a_folder_without_a_run_is_refused(copy, tmp_path, capsys):
    assert popsim_run(["draw", str(tmp_path)]) == USER_CAN_MEND
    assert "no record.json" in capsys.readouterr().err
    (copy / "over_time.csv").unlink()
    assert popsim_run(["draw", str(copy)]) == USER_CAN_MEND
    assert "no over_time.csv" in capsys.readouterr().err


@pytest.mark.parametrize("spoilt", ["{", json.dumps({"study": {}}), json.dumps([1])])
def test_a_record_that_cannot_be_used_is_refused(copy, spoilt, capsys):
    (copy / "record.json").write_text(spoilt)
    assert popsim_run(["draw", str(copy)]) == USER_CAN_MEND
    assert "judge the study again" in capsys.readouterr().err
