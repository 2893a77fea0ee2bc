"""popsim models and popsim person: what they print, what they refuse."""

import csv
import io
import os
import subprocess
import sys

import numpy as np
import pytest

from covariates.catalogue import EQUATIONS, compute
from covariates.sheet import read_sheet, shipped_sheets
from popsim.cli import run
from popsim.errors import DONE, USER_CAN_MEND
from popsim.model_text import WIDTH, list_text, sheet_text

WOMAN = ["--sex", "female", "--age", "70", "--weight", "110", "--height", "160"]


def said(capsys, *arguments):
    code = run(list(arguments))
    streams = capsys.readouterr()
    return code, streams.out, streams.err


def test_the_list_names_every_sheet_with_source_people_and_variability(capsys):
    code, out, _ = said(capsys, "models")
    assert code == DONE
    for name in shipped_sheets():
        model = read_sheet(name)
        part = out.split(f"  {name}\n", 1)[1].split("    evidence  ", 1)[0]
        words = " ".join(part.split())
        assert str(model.source["citation"]) in words and model.built_on.people in words
        assert ("typical only" in words) == (not model.spread)


def test_one_drug(capsys):
    code, out, _ = said(capsys, "models", "--drug", "vancomycin")
    assert code == DONE and "vancomycin_goti_2018" in out and "propofol" not in out
    code, out, err = said(capsys, "models", "--drug", "vancomicin")
    assert code == USER_CAN_MEND and out == "" and 'did you mean "vancomycin"?' in err
    assert said(capsys, "models", "propofol_marsh_1991", "--drug", "propofol")[0] == USER_CAN_MEND
    code, _, err = said(capsys, "models", "propofol_marsh_1992")
    assert code == USER_CAN_MEND and 'did you mean "propofol_marsh_1991"?' in err


@pytest.mark.parametrize("name", shipped_sheets())
def test_a_sheet_is_shown_whole(name):
    model, text = read_sheet(name), sheet_text(read_sheet(name))
    words = " ".join(text.split())
    for equation in model.equations:
        assert " ".join(f"{equation.name} = {equation.formula.text}".split()) in words
        assert equation.evidence in words and " ".join(equation.note.split()) in words
    for told in (*model.cautions, model.built_on.note, model.spread_note, model.built_on.doses):
        assert " ".join(told.split()) in words
    assert "half-life" in words or "half-lives" in words
    assert ("peak of the effect site" in words) == model.has_effect_site
    assert ("after a dose by mouth" in words) == model.has_absorption
    assert ("plasma held constant before the stop" in words) == (model.compartments > 1)
    assert ("Correlations that are not listed are taken to be 0." in words) == (len(model.spread) > 1)
    assert max(map(len, text.splitlines())) <= WIDTH


def test_the_list_fits_the_terminal():
    assert max(map(len, list_text(map(read_sheet, shipped_sheets())).splitlines())) <= WIDTH


def test_a_sheet_of_your_own(capsys, tmp_path):
    own = tmp_path / "mine_2024.toml"
    own.write_text(read_sheet("cefazolin_obese_2021").text.replace("cefazolin_obese_2021", "mine_2024"))
    code, out, _ = said(capsys, "models", str(own))
    assert code == DONE and out.startswith("mine_2024\n=========\n")


def test_person_shows_every_covariate_with_its_flags(capsys):
    code, out, _ = said(capsys, "person", *WOMAN, "--creatinine", "106.104 umol/L")
    assert code == DONE
    person = {"sex": "female", "age": 70.0, "weight": 110.0, "height": 160.0, "serum_creatinine": 1.2}
    table = [line for line in out.splitlines() if line.strip() and "misleads" not in line]
    rows = {words[0]: words for line in table if len(words := line.removeprefix("!").split()) > 1}
    for name in EQUATIONS:
        if name != "bmi_class_who":
            assert float(rows[name][1]) == pytest.approx(float(compute(name, person)), rel=6e-4)
    assert rows["bmi_class_who"][1:] == ["obesity", "III"]
    flagged = {line.split()[1] for line in table if line.startswith("! ")}
    assert flagged == {"lean_body_mass_james", "predicted_normal_weight", "glomerular_filtration_rhodin_2009"}
    assert "so heavy that this lean body mass" in " ".join(out.split()) and "Not shown" not in out


def test_person_with_models(capsys):
    models = ["--model", "propofol_schnider_1998", "--model", "remifentanil_minto_1997"]
    code, out, _ = said(capsys, "person", *WOMAN, *models)
    assert code == DONE and "V1 4.27 L, V2 12.25 L, V3 238 L" in out  # 18.9 - 0.391 x 17 (Schnider 1998)
    assert "outside the people that it was built on by weight, bmi" in out
    assert "Not shown for want of serum_creatinine" in out
    code, out, _ = said(capsys, "person", "--sex", "female", "--age", "105", "--weight", "60", "--height", "160",
                        "--model", "propofol_schnider_1998")
    assert code == DONE and "V2 not above 0: the model cannot be used in this person." in out
    code, _, err = said(capsys, "person", *WOMAN, "--model", "propofol_eleveld_2018",
                        "--model", "piperacillin_jeon_2014")
    assert code == USER_CAN_MEND
    assert all(f"no {name}" in err for name in ("opioid", "venous_sampling", "sepsis"))
    code, out, _ = said(capsys, "person", *WOMAN, "--creatinine", "1 mg/dL", "--model", "piperacillin_jeon_2014",
                        "--set", "sepsis=true", "--set", "days_after_burn=20")
    assert code == DONE and "V1 40.1 L" in out


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ([], "nobody"),
        ([*WOMAN[:-1], "1.6"], "give cm"),
        ([*WOMAN, "--creatinine", "106"], "has no unit"),
        ([*WOMAN[:-3], "110 lb", *WOMAN[-2:]], "unknown unit"),
        ([*WOMAN, "--set", "bmi=40"], "opioid=true"),
        ([*WOMAN, "--set", "opioid=perhaps"], "NAME=true"),
        ([*WOMAN, "--set", "days_after_burn=nan"], "NAME=number"),
        (["--file", "absent.csv", "--sex", "female"], "a list, or one person"),
        (["--file", "absent.csv"], "absent.csv"),
    ],
)
def test_person_refuses_what_cannot_be(capsys, arguments, message):
    code, out, err = said(capsys, "person", *arguments)
    assert code == USER_CAN_MEND and out == "" and message in err


def test_a_list_of_people(capsys, tmp_path):
    people = tmp_path / "people.csv"
    people.write_text("patient,sex,age,weight,height,opioid\nA,female,70,110,160,true\nB,male,30,70,180,false\n")
    code, out, _ = said(capsys, "person", "--file", str(people), "--model", "propofol_eleveld_2018",
                        "--set", "venous_sampling=false")
    assert code == DONE
    assert "which the list has too" in said(capsys, "person", "--file", str(people), "--set", "opioid=true")[2]
    first, second = csv.DictReader(io.StringIO(out))
    assert (first["patient"], first["opioid"]) == ("A", "true")
    assert (second["opioid"], second["venous_sampling"]) == ("false", "false")
    expected = compute("lean_body_mass_james", {"sex": "female", "weight": 110.0, "height": 160.0})
    assert float(first["lean_body_mass_james"]) == expected
    assert "lean_body_mass_james: so heavy" in first["flags"] and "so heavy" not in second["flags"]
    assert float(second["propofol_eleveld_2018 V2"]) == pytest.approx(25.5 * np.exp(0.0156 * 5), rel=1e-12)
    assert "creatinine_clearance_salazar_corcoran" not in first and first["propofol_eleveld_2018 outside"] == ""


def test_neither_command_loads_the_solver_or_pictures():
    script = ("import sys; from popsim.cli import run\n"
              "run(['models', 'propofol_eleveld_2018'])\n"
              "run(['person', '--sex', 'male', '--weight', '70', '--height', '170'])\n"
              "print(sorted({'numba', 'scipy', 'matplotlib', 'pydantic'} & set(sys.modules)))")
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, env=os.environ, check=True)
    assert done.stdout.splitlines()[-1] == "[]"
