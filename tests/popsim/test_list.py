"""A ward's own list: used as it is, or refused with every fault named."""

import numpy as np
import pytest

from covariates.formula import compile_formula
from covariates.problems import ProblemsError
from popsim.patients.draw import blocks
from popsim.patients.listed import list_columns, read_list
from popsim.patients.population import Population

GOOD = """patient,sex,age,weight,height,serum_creatinine,opioid,closure_min
A-1,female,71,62.5,160,0.8,true,45
A-2,Male,54,110,182,1.1,false,30.5
A-3,female,38,95,170,0.7,TRUE,60
"""


@pytest.fixture
def write(tmp_path):
    def write(text):
        path = tmp_path / "people.csv"
        path.write_text(text, encoding="utf-8")
        return path

    return write


def faults(path):
    with pytest.raises(ProblemsError) as caught:
        read_list(path)
    return caught.value.problems


def test_people_are_used_as_they_are(write):
    drawn = blocks(Population("list", None, file=write(GOOD), set={"venous_sampling": False}), 1)
    (people,) = drawn
    assert (people.first, people.block, people.slots.tolist()) == (1, 0, [0, 1, 2])
    assert people.attributes["sex"].tolist() == ["female", "male", "female"]
    assert people.attributes["weight"].tolist() == [62.5, 110.0, 95.0]
    assert people.attributes["opioid"].tolist() == [True, False, True] and people.attributes["opioid"].dtype == bool
    assert people.attributes["closure_min"].tolist() == [45.0, 30.5, 60.0]
    assert people.attributes["bmi"] == pytest.approx([24.4141, 33.2085, 32.8720], abs=1e-4)
    assert not people.attributes["venous_sampling"].any()
    assert people.labels.tolist() == ["A-1", "A-2", "A-3"]
    assert (drawn.seen, drawn.eligible, drawn.skipped) == (3, 3, 0)


def test_columns(write):
    names = {"sex", "age", "weight", "height", "serum_creatinine", "opioid", "closure_min"}
    assert list_columns(write(GOOD)) == names
    assert list_columns(write("\ufeff" + GOOD)) == names


def test_limits_and_condition_choose_among_the_list_and_luck_stays_with_the_row(write):
    where = compile_formula("closure_min < 60 and creatinine_clearance_cockcroft_gault_ideal > 20", "where")
    drawn = blocks(Population("list", None, limits={"bmi": (30.0, np.inf)}, where=where, file=write(GOOD)), 1)
    (people,) = drawn
    assert people.slots.tolist() == [1] and people.first == 1 and people.labels.tolist() == ["A-2"]
    assert (drawn.seen, drawn.eligible) == (3, 1)


def test_long_lists_come_in_blocks(write):
    rows = "\n".join(f"female,{20 + row % 60},70,165" for row in range(20_000))
    path = write("sex,age,weight,height\n" + rows)
    parts = list(blocks(Population("list", None, limits={"age": (50.0, 79.0)}, file=path), 1))
    assert [part.block for part in parts] == [0, 1, 2]
    assert [part.first for part in parts] == [1, 1 + len(parts[0]), 1 + len(parts[0]) + len(parts[1])]
    rows = np.concatenate([part.block * 8192 + part.slots for part in parts])
    ages = np.concatenate([part.attributes["age"] for part in parts])
    assert np.array_equal(ages, 20 + rows % 60) and len(rows) == 9_990


def test_nobody_eligible(write):
    with pytest.raises(ProblemsError, match="none of its 3 people is eligible"):
        blocks(Population("list", None, limits={"age": (90.0, 100.0)}, file=write(GOOD)), 1)


def test_a_limit_needs_its_column(write):
    with pytest.raises(ProblemsError, match="height"):
        path = write("sex,age,weight\nmale,50,70\n")
        blocks(Population("list", None, limits={"height": (90.0, 200.0)}, file=path), 1)


def test_what_is_set_must_not_be_a_column(write):
    with pytest.raises(ProblemsError, match="opioid"):
        blocks(Population("list", None, file=write(GOOD), set={"opioid": True}), 1)


@pytest.mark.parametrize(
    "row, column, found, advice",
    [
        ("B,female,40,70,1.65,0.8", "height", "1.65", "metres"),
        ("B,female,40,70,1650,0.8", "height", "1650", "millimetres"),
        ("B,female,40,452,165,0.8", "weight", "452", "pounds"),
        ("B,female,40,0,165,0.8", "weight", "0", "give kg"),
        ("B,female,-40,70,165,0.8", "age", "-40", ""),
        ("B,female,1962,70,165,0.8", "age", "1962", ""),
        ("B,female,40,70,165,71", "serum_creatinine", "71", "umol/L"),
        ("B,F,40,70,165,0.8", "sex", '"F"', ""),
        ("B,,40,70,165,0.8", "sex", "nothing", "skip"),
        ("B,female,40,,165,0.8", "weight", "nothing", "skip"),
        ("B,female,40,NA,165,0.8", "weight", '"NA"', ""),
        ("B,female,40,nan,165,0.8", "weight", '"nan"', ""),
        ("B,female,40,1e999,165,0.8", "weight", "1e999", ""),
        ('B,female,40,"70,5",165,0.8', "weight", '"70,5"', "write 72.5"),
        ("A,female,40,70,165,0.8", "patient", '"A"', ""),
        (",female,40,70,165,0.8", "patient", "nothing", ""),
        ("B,male,40,180,70,0.8", "weight and height", "weight 180, height 70", "units"),  # pounds and inches
    ],
)
def test_each_fault_is_named_with_line_and_column(write, row, column, found, advice):
    path = write(f"patient,sex,age,weight,height,serum_creatinine\nA,male,50,80,180,1\n\n{row}\n")
    (problem,) = faults(path)
    assert problem.where == f"people.csv: line 4, column {column}"
    assert found in problem.found and advice in problem.advice
    kept = read_list(path, "skip")
    assert kept.rows.tolist() == [0] and kept.skipped == 1 and kept.labels.tolist() == ["A"]


def test_all_faults_at_once_and_skipping_changes_nobody_else(write):
    rows = ["male,50,80,180,true", "man,-1,900,1.8,yes", "female,60,70,160,false", "female,60,70"]
    path = write("\n".join(["sex,age,weight,height,opioid", *rows]))
    found = [(problem.where.split("line ")[1], problem.found) for problem in faults(path)]
    assert [where for where, _ in found] == [
        "3, column sex", "3, column age", "3, column weight", "3, column height", "3, column opioid",
        "5", "5, column height", "5, column opioid",
    ]  # fmt: skip
    drawn = blocks(Population("list", None, file=path, on_bad_row="skip"), 1)
    (people,) = drawn
    assert people.slots.tolist() == [0, 2] and drawn.skipped == 2 and people.labels is None


def test_no_usable_row_is_refused_even_when_skipping(write):
    with pytest.raises(ProblemsError):
        read_list(write("sex,age\nman,50\n"), "skip")


@pytest.mark.parametrize(
    "text, message",
    [
        ("sex;age;weight\nmale;50;80\n", "separated by ';'"),
        ("sex,age,age\nmale,50,50\n", "twice"),
        ("sex,age,weight (kg)\nmale,50,80\n", "letters, digits"),
        ("sex,age,wieght\nmale,50,80\n", 'did you mean "weight"?'),
        ("Sex,age\nmale,50\n", 'did you mean "sex"?'),
        ("sex,age,weight\n", "no people"),
        ("", "fewer than two columns"),
    ],
)
def test_headers_that_cannot_be_used(write, text, message):
    path = write(text)
    with pytest.raises(ProblemsError) as caught:
        list_columns(path)
    assert message in str(caught.value)
    with pytest.raises(ProblemsError):
        read_list(path, "skip")


def test_a_missing_file_and_one_that_is_no_text(tmp_path):
    with pytest.raises(ProblemsError, match="No such file"):
        read_list(tmp_path / "none.csv")
    (tmp_path / "people.csv").write_bytes(b"sex,age\nm\xe4nnlich,50\n")
    with pytest.raises(ProblemsError, match="UTF-8"):
        read_list(tmp_path / "people.csv")


def test_a_column_bmi_must_agree_with_weight_and_height(write):
    (problem,) = faults(write("sex,weight,height,bmi\nmale,80,180,24.7\nmale,80,180,27\n"))
    assert problem.where.endswith("line 3, column bmi") and "24.7" in problem.found + problem.allowed


HEADER = "sex,age,weight,height,serum_creatinine,postmenstrual_age_weeks\n"


@pytest.mark.parametrize(
    "row, columns",
    [
        ("female,0.5,40,65,0.3,66", "weight and age"),  # 40 kg at six months: months taken for years, or pounds
        ("female,45,15,120,0.8,2387", "weight and age"),
        ("female,0.02,1.5,40,0.5,90", "postmenstrual_age_weeks and age"),
        ("female,0.02,1.5,40,0.5,15", "postmenstrual_age_weeks"),
    ],
)
def test_what_cannot_be_true_together(write, row, columns):
    (problem,) = faults(write(HEADER + row + "\n"))
    assert problem.where == f"people.csv: line 2, column {columns}"


def test_children_from_birth(write):
    rows = ["female,0.02,1.5,40,0.5,32", "male,0,3.4,50,0.7,40", "male,5,18,110,0.4,300.7"]
    people = read_list(write(HEADER + "\n".join(rows)))
    assert people.attributes["postmenstrual_age_weeks"].tolist() == [32.0, 40.0, 300.7]
    born = read_list(write("sex,age,weight,gestational_age_weeks\nmale,0.1,3,30\n"))
    assert born.attributes["postmenstrual_age_weeks"] == pytest.approx([30 + 5.2143])


def test_units_that_are_said(write):
    """88.42 umol/L are 1 mg/dL of creatinine (molar mass 113.12 g/mol)."""
    path = write("sex,age,weight,height,serum_creatinine\nmale,600,70000,1.75,88.42\n")
    units = {"age": "months", "weight": "g", "height": "m", "serum_creatinine": "umol/L"}
    people = read_list(path, units=units).attributes
    found = [people[name][0] for name in ("age", "weight", "height", "serum_creatinine")]
    assert found == pytest.approx([50, 70, 175, 1])
    with pytest.raises(ProblemsError) as caught:
        read_list(path, units={**units, "serum_creatinine": "mg/dL"})
    assert "88.42 mg/dL" in str(caught.value)
    with pytest.raises(ProblemsError, match="which is no column"):
        read_list(write(GOOD), units={"bmi": "kg/m2"})


def test_a_list_in_pounds_is_noticed_unless_kilograms_are_said(write):
    text = "sex,age,weight,height\n" + "".join(f"male,50,{weight},170\n" for weight in (180, 190, 200, 150, 160))
    found = faults(write(text))
    assert len(found) == 3 and all("pounds" in problem.advice for problem in found)
    assert len(read_list(write(text), units={"weight": "kg"}).rows) == 5


def test_parquet_is_read_and_checked_alike(write, tmp_path):
    pandas = pytest.importorskip("pandas")
    pytest.importorskip("pyarrow")
    table = pandas.read_csv(write(GOOD))
    table.to_parquet(tmp_path / "people.parquet")
    ours, theirs = read_list(tmp_path / "people.parquet"), read_list(write(GOOD))
    for name, values in theirs.attributes.items():
        assert np.array_equal(ours.attributes[name], values), name
    assert ours.labels.tolist() == theirs.labels.tolist()
    table.loc[1, "height"] = None
    table.loc[2, "weight"] = 1.8
    table.to_parquet(tmp_path / "people.parquet")
    told = [problem.where for problem in faults(tmp_path / "people.parquet")]
    assert told[:2] == ["people.parquet: row 2, column height", "people.parquet: row 3, column weight and height"]
    with pytest.raises(ProblemsError, match="No such file"):
        read_list(tmp_path / "none.parquet")
    (tmp_path / "people.parquet").write_text("no parquet")
    with pytest.raises(ProblemsError, match="not readable"):
        read_list(tmp_path / "people.parquet")


def test_resampled_people_have_a_luck_of_their_own(write):
    population = Population("list", 20_000, limits={"age": (40.0, 100.0)}, file=write(GOOD))
    drawn = blocks(population, 1)
    parts = list(drawn)
    assert [part.block for part in parts] == [0, 1, 2] and sum(map(len, parts)) == 20_000
    assert (drawn.seen, drawn.eligible, drawn.origins) == (3, 2, 3)
    origins = np.concatenate([part.origins for part in parts])
    assert set(origins.tolist()) == {0, 1}  # the third is too young
    assert (origins == 0).mean() == pytest.approx(0.5, abs=4.5 * 0.5 / np.sqrt(20_000))
    for part in parts:
        assert np.array_equal(part.attributes["age"], np.array([71.0, 54.0])[part.origins])
        assert np.array_equal(part.labels, np.array(["A-1", "A-2"])[part.origins])
        assert np.array_equal(part.slots, np.arange(len(part)))
    few = next(blocks(Population("list", 100, limits={"age": (40.0, 100.0)}, file=write(GOOD)), 1))
    assert np.array_equal(few.origins, parts[0].origins[:100])
