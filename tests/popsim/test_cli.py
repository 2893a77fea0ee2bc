"""The command line: exit codes, what it loads, and that results appear whole or not at all."""

import hashlib
import json
import os
import signal
import subprocess
import sys
import threading
import tomllib
from pathlib import Path

import pandas as pd
import pytest

from popsim import __version__
from popsim.cli import INTERRUPTED, run
from popsim.errors import DONE, OURS, USER_CAN_MEND

STUDY = '''
title = "Two rates"
question = "Which keeps more people in range?"
seed = 3
[population]
source = "survey"
count = 9000
age = "20 to 85 years"
[[group]]
name = "65 and over"
where = "age >= 65"
[[group]]
name = "under 65"
where = "age < 65"
[drug]
model = "remifentanil_minto_1997"
[[protocol]]
name = "600 ug/h"
strength = "50 ug/mL"
[[protocol.dose]]
rate = "600 ug/h"
until = "30 min"
[[protocol]]
name = "per kg"
[[protocol.dose]]
rate = "8 ug/kg/h"
until = "30 min"
[target]
quantity = "effect_site"
range = "3 to 6 ng/mL"
during = "15 min to 30 min"
attained_when = "80 % of the time"
[compare]
matters = "5 %"
[run]
until = "40 min"
every = "5 min"
'''
TABLES = {"attainment.csv", "over_time.csv", "comparison.csv", "groups.csv", "doses.csv", "values.csv", "quartiles.csv",
          "robustness.csv", "people.csv", "attainment_map.csv", "body_size.csv", "patients.csv", "record.json"}


@pytest.fixture
def folder(tmp_path, monkeypatch) -> Path:
    """A working folder with study.toml (9,000 patients, two blocks) and small.toml (50 patients)."""
    monkeypatch.chdir(tmp_path)
    (tmp_path / "study.toml").write_text(STUDY, encoding="utf-8")
    (tmp_path / "small.toml").write_text(STUDY.replace("9000", "50"), encoding="utf-8")
    return tmp_path


def judge(*arguments: str) -> int:
    return run(["judge", "small.toml", "--tables-only", *arguments])


def digests(folder: Path) -> dict[str, str]:
    return {path.name: hashlib.sha256(path.read_bytes()).hexdigest() for path in sorted(folder.iterdir())}


def nothing_unfinished(folder: Path) -> bool:
    return not [path.name for path in folder.iterdir() if "unfinished" in path.name]


def loaded(*arguments: str, cwd: Path) -> set[str]:
    """Top-level modules in memory after a command, in a fresh interpreter."""
    code = ("import sys; from popsim.cli import run; code = run(sys.argv[1:]); "
            "print('\\nLOADED', *sorted({name.split('.')[0] for name in sys.modules})); sys.exit(code)")
    found = subprocess.run([sys.executable, "-c", code, *arguments], capture_output=True, text=True, cwd=cwd,
                           env={**os.environ, "PYTHONPATH": os.pathsep.join(path for path in sys.path if path)},
                           timeout=120, check=True)
    return set(found.stdout.partition("\nLOADED ")[2].split())


HEAVY = {"pandas", "numba", "scipy", "matplotlib", "jinja2"}


@pytest.mark.parametrize("arguments", [
    ["--help"], ["--version"], ["new", "--help"], ["check", "--help"], ["judge", "--help"],
    ["patients", "--help"],
])
def test_help_loads_nothing_heavy(arguments, tmp_path):
    modules = loaded(*arguments, cwd=tmp_path)
    assert "click" in modules
    assert not modules & (HEAVY | {"numpy", "pydantic"})


def test_check_loads_no_solver_tables_or_pictures(folder):
    modules = loaded("check", "small.toml", cwd=folder)
    assert "numpy" in modules
    assert not modules & HEAVY


def test_version_and_help(capsys):
    assert run(["--version"]) == DONE
    assert capsys.readouterr().out == f"popsim {__version__}\n"
    for command in ([], ["new"], ["check"], ["patients"], ["judge"]):
        assert run([*command, "--help"]) == DONE
        assert max(len(line) for line in capsys.readouterr().out.splitlines()) <= 80


@pytest.mark.parametrize(("arguments", "said"), [
    ([], "Usage: popsim"),
    (["judg", "small.toml"], "No such command"),
    (["judge"], "Missing argument"),
    (["judge", "none.toml"], "no such file"),
    (["check", "none.toml"], "popsim new study.toml"),
    (["check", "."], "is a directory"),
    (["judge", "small.toml", "--threads", "0"], "--threads"),
    (["judge", "small.toml", "--format", "excel"], "--format"),
    (["judge", "small.toml", "--out", "small.toml"], "small.toml"),
    (["new", "study.txt"], "ends in .toml"),
    (["new", "small.toml"], "there already"),
])
def test_what_the_user_can_mend_is_2_and_said_on_stderr(folder, capsys, arguments, said):
    before = digests(folder)
    assert run(arguments) == USER_CAN_MEND
    out, err = capsys.readouterr()
    assert out == "" and said in err and "Traceback" not in err
    assert digests(folder) == before


def test_problems_are_counted_and_told(folder, capsys):
    bad = STUDY.replace('"600 ug/h"\nuntil', "600\nuntil").replace("seed", "sede")
    (folder / "bad.toml").write_text(bad, encoding="utf-8")
    for command in ("check", "judge"):
        assert run([command, "bad.toml"]) == USER_CAN_MEND
        out, err = capsys.readouterr()
        assert out == "" and err.startswith("3 things to mend:\n\nbad.toml: ") and 'did you mean "seed"?' in err
    assert not (folder / "bad").exists()


def test_new_writes_a_study_that_checks_and_judges(folder, capsys):
    assert run(["new", "mine.toml"]) == DONE
    tomllib.loads((folder / "mine.toml").read_text(encoding="utf-8"))
    assert run(["check", "mine.toml"]) == DONE
    assert "Ward card" in capsys.readouterr().out
    assert run(["judge", "mine.toml", "--tables-only", "--quiet"]) == DONE
    (folder / "mine.toml").write_text("mine", encoding="utf-8")
    assert run(["new", "mine.toml"]) == USER_CAN_MEND
    assert (folder / "mine.toml").read_text(encoding="utf-8") == "mine"
    assert run(["new", "mine.toml", "--overwrite"]) == DONE
    assert len((folder / "mine.toml").read_text(encoding="utf-8")) > 1000


def test_a_run_leaves_its_files_and_the_summary(folder, capsys):
    assert run(["judge", "small.toml", "--tables-only"]) == DONE
    out, err = capsys.readouterr()
    assert {path.name for path in (folder / "small").iterdir()} == TABLES
    assert out.startswith("Two rates\n") and "not for dosing a person" in out and "Results in small" in err
    assert len(pd.read_csv(folder / "small" / "patients.csv")) == 50
    assert nothing_unfinished(folder)


def test_quiet_says_nothing(folder, capsys):
    assert judge("--quiet") == DONE
    assert capsys.readouterr() == ("", "")


def test_json_agrees_with_attainment_csv(folder, capsys):
    assert judge("--json", "--quiet") == DONE
    said = json.loads(capsys.readouterr().out)
    table = pd.read_csv(folder / "small" / "attainment.csv", keep_default_na=False, na_values=[""])
    assert len(said["attainment"]) == len(table) == 6
    for row, (_, written) in zip(said["attainment"], table.iterrows(), strict=True):
        assert row.keys() == set(table.columns)
        for name, value in row.items():
            assert value == written[name] or (value in (None, "") and pd.isna(written[name])), name


def test_the_number_of_threads_changes_no_byte_of_any_table(folder):
    for threads in ("1", "2", "5"):
        assert run(["judge", "study.toml", "--tables-only", "--quiet", "--keep-courses", "--threads", threads,
                    "--out", threads]) == DONE
    one, two, five = ({name: digest for name, digest in digests(folder / threads).items() if name != "record.json"}
                      for threads in ("1", "2", "5"))
    assert one == two == five and len(one) == len(TABLES)  # with courses.csv, without record.json


def test_no_patients_and_keep_courses(folder):
    assert judge("--quiet", "--no-patients", "--keep-courses") == DONE
    assert {path.name for path in (folder / "small").iterdir()} == TABLES - {"patients.csv"} | {"courses.csv"}
    courses = pd.read_csv(folder / "small" / "courses.csv")
    assert len(courses) == 50 * 2 * 9 and list(courses.columns[:4]) == ["patient", "model", "protocol", "time_min"]
    assert courses["patient"].is_monotonic_increasing


def test_a_folder_with_files_is_refused_and_overwrite_keeps_what_is_not_ours(folder, capsys):
    assert judge("--quiet", "--keep-courses") == DONE
    (folder / "small" / "notes.txt").write_text("mine", encoding="utf-8")
    (folder / "small" / "drawing.svg").write_text("<svg>mine</svg>", encoding="utf-8")
    (folder / "small" / "figures").mkdir()
    (folder / "small" / "earlier.svg").write_text("<svg><title>popsim</title>", encoding="utf-8")
    before = {path.name for path in (folder / "small").iterdir()}
    assert judge("--quiet") == USER_CAN_MEND
    assert "already holds files" in capsys.readouterr().err
    assert {path.name for path in (folder / "small").iterdir()} == before
    assert judge("--quiet", "--overwrite") == DONE
    # courses.csv and earlier.svg (signed by popsim) are of the earlier run, and this run has none
    assert {path.name for path in (folder / "small").iterdir()} == TABLES | {"notes.txt", "drawing.svg", "figures"}
    assert (folder / "small" / "notes.txt").read_text(encoding="utf-8") == "mine"


@pytest.mark.parametrize(("fault", "code", "said"), [
    (KeyboardInterrupt, INTERRUPTED, "earlier results are as they were"),
    (RuntimeError, OURS, "Please report it"),
    (MemoryError, USER_CAN_MEND, "not enough memory"),
])
@pytest.mark.parametrize("place", ["popsim.run.simulate", "popsim.output.write_record", "popsim.terminal.summary"])
def test_a_run_that_fails_leaves_earlier_results_as_they_were(folder, monkeypatch, capsys, fault, code, said, place):
    assert judge("--quiet") == DONE
    before = digests(folder / "small")

    def fail(*_, **__):
        raise fault

    monkeypatch.setattr(place, fail)
    assert judge("--overwrite") == code
    out, err = capsys.readouterr()
    assert out == "" and said in err
    assert ("Traceback" in err) == (code == OURS)
    assert digests(folder / "small") == before and nothing_unfinished(folder)
    assert judge("--overwrite", "--out", "elsewhere") == code
    assert not (folder / "elsewhere").exists() and nothing_unfinished(folder)


def test_a_problem_that_shows_while_running_is_the_users_to_mend(folder, capsys):
    rare = STUDY.replace('rate = "8 ug/kg/h"', 'where = "age < 80"\nrate = "8 ug/kg/h"')
    (folder / "rare.toml").write_text(rare, encoding="utf-8")
    for command in (["check", "rare.toml"], ["judge", "rare.toml"], ["judge", "rare.toml", "--threads", "2"]):
        assert run(command) == USER_CAN_MEND
        out, err = capsys.readouterr()
        assert out == "" and "no dose step covers" in err and 'no_dose = "allowed"' in err
    assert not (folder / "rare").exists() and nothing_unfinished(folder)


def test_parquet_needs_its_extra_and_says_so(folder, monkeypatch, capsys):
    monkeypatch.setitem(sys.modules, "pyarrow", None)
    assert judge("--format", "parquet") == USER_CAN_MEND
    assert 'pip install "popsim[parquet]"' in capsys.readouterr().err
    assert not (folder / "small").exists()


@pytest.mark.skipif(os.name != "posix", reason="signals of POSIX")
@pytest.mark.parametrize("threads", [1, 2])
def test_an_interrupted_run_stops_at_once_not_when_all_patients_are_done(folder, threads):
    """Ctrl-C reaches the main thread only, whatever the others do."""
    from popsim.run import simulate
    from popsim.study import read_study

    (folder / "large.toml").write_text(STUDY.replace("9000", "400000"), encoding="utf-8")  # 49 blocks and more
    seen = []

    def sink(rows) -> None:
        if not seen:
            signal.pthread_kill(threading.main_thread().ident, signal.SIGINT)
        seen.append(rows.patients.first)

    before = signal.signal(signal.SIGINT, signal.default_int_handler)  # a shell's background job ignores it
    try:
        with pytest.raises(KeyboardInterrupt):
            simulate(read_study(Path("large.toml")), threads, sink=sink)
    finally:
        signal.signal(signal.SIGINT, before)
    assert len(seen) < 20


@pytest.mark.skipif(os.name != "posix", reason="signals of POSIX")
def test_a_run_that_is_ended_from_outside_tidies_up(folder):
    """SIGTERM, as a batch system sends it, in the middle of the writing."""
    code = ("import os, signal, popsim.output as output\n"
            "output.write_record = lambda *_: os.kill(os.getpid(), signal.SIGTERM)\n"
            "import popsim.cli, sys; sys.argv[1:] = ['judge', 'small.toml', '--tables-only']; popsim.cli.main()")
    ended = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, cwd=folder, timeout=120,
                           env={**os.environ, "PYTHONPATH": os.pathsep.join(path for path in sys.path if path)})
    assert ended.returncode == INTERRUPTED and "earlier results are as they were" in ended.stderr
    assert not (folder / "small").exists() and nothing_unfinished(folder)


@pytest.mark.skipif(os.name != "posix", reason="terminals of POSIX")
def test_signs_that_a_terminal_cannot_show_stop_nothing(folder):
    (folder / "small.toml").write_text(STUDY.replace("Two rates", "Zwei f\u00fcr \u2265 65"), encoding="utf-8")
    code = "import popsim.cli, sys; sys.argv[1:] = ['check', 'small.toml']; popsim.cli.main()"
    shown = subprocess.run([sys.executable, "-c", code], capture_output=True, cwd=folder, timeout=120,
                           env={**os.environ, "PYTHONPATH": os.pathsep.join(path for path in sys.path if path),
                                "PYTHONIOENCODING": "latin-1"})
    assert shown.returncode == DONE and shown.stdout.startswith("Zwei f\u00fcr ? 65".encode("latin-1"))
