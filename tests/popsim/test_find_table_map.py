"""Ward tables and maps: against brute force, against the protocol that the card stands for, against a known border."""

from __future__ import annotations

import itertools
import runpy
from pathlib import Path

import numpy as np
import pytest

from covariates.problems import ProblemsError
from popsim.finding.answer_table import band_text, card_frame, card_text
from popsim.finding.counting import count
from popsim.finding.map import neighbours, search_map
from popsim.finding.table import Slices, candidates, read_table, search_table, slices, with_table

find_cases = runpy.run_path(str(Path(__file__).with_name("find_cases.py")))
TABLE = """[find]
wish = {wish}
[find.table]
what = "dose 1: rate"
by = "{by}"
bands = {bands}
edges_to = {edges}
doses = "{doses}"
round_to = "10 mg/h"
"""
RATE = {"a": 'rate = "0.5 mg/kg/h"\nuntil = "600 min"'}


def asked(tmp_path, find, clearance="0.5 * weight / 70", limits="1 to 2 mg/L", **more):
    path = find_cases["find_file"](
        tmp_path, find, count=more.pop("count", 3000),
        model=find_cases["one_compartment"](tmp_path, clearance=clearance, omega=0.2), protocols=RATE,
        targets=(find_cases["STEADY"].format(range=limits),), until="600 min", every="60 min", **more)
    return find_cases["asked_of"](path)


def table_file(wish="[]", by="weight", bands=3, edges=20, doses="10 to 120 mg/h"):
    return TABLE.format(wish=wish, by=by, bands=bands, edges=edges, doses=doses)


def test_without_wishes_no_table_of_so_many_bands_attains_more(tmp_path):
    """Brute force over every cut and every dose."""
    question, protocol = asked(tmp_path, table_file(edges=30, doses="20 to 90 mg/h"), groups={})
    section, place, doses = read_table(question, protocol)
    counts = count(question.study(candidates(protocol, section, place, doses)),
                   cells_of=lambda rows: slices(rows, "weight", 30))
    hits, n = counts.sums["attained"][:, 0, 0], counts.patients[0]
    least, best = 0.01 * n.sum(), 0.0
    for cuts in itertools.combinations(range(1, len(n)), 2):
        pieces = list(zip((0, *cuts), (*cuts, len(n)), strict=True))
        if all(n[first:end].sum() >= least for first, end in pieces):
            best = max(best, sum(hits[:, first:end].sum(axis=1).max() for first, end in pieces))
    slicing = Slices(question, counts)
    assert slicing.attained(slicing.best(3))[0] == pytest.approx(best / n.sum(), abs=1e-12)


def test_a_table_attains_what_its_protocol_attains(tmp_path):
    """The sum over slices is the run of the card itself, with its bands, in the same patients."""
    question, protocol = asked(tmp_path, table_file(wish='["at least 80 % attained in every group"]'))
    result = search_table(question, protocol)
    assert [len(table.doses) for table in result.tables] == [3, 2, 1]
    cards = [with_table(protocol, result.place, result.by, table) for table in result.tables]
    assert count(question.study(cards)).attained()[0] == pytest.approx(result.tuned, abs=1e-12)


def test_a_wish_moves_the_table_towards_the_group_that_lacks(tmp_path):
    """Clearance falls with age; a table by weight knows nothing of it. Old patients are few, so that without a wish
    the table serves the young; the wish in every group moves doses until both are served alike."""
    clearance = "0.5 * weight / 70 * (1.6 if age < 65 else 1)"
    free, wished = (search_table(*asked(tmp_path, table_file(wish=wish), clearance=clearance))
                    for wish in ("[]", '["at least 75 % attained in every group"]'))
    assert wished.tuned[0].min() > free.tuned[0].min() + 0.02
    assert wished.tuned[0][0] <= free.tuned[0][0] + 1e-12


def test_the_card_says_bands_doses_and_volumes(tmp_path):
    question, protocol = asked(tmp_path, table_file(bands=2), in_protocol='strength = "10 mg/mL"')
    result = search_table(question, protocol)
    text, frame = card_text(result, result.tables[0]), card_frame(result)
    first = frame.iloc[0]
    assert first["volume"] == pytest.approx(first["dose"] / 10) and first["volume_unit"] == "mL/h"
    assert f"under {first['below']:g} kg" in text and "not for dosing a person" in text
    assert frame["from"].isna().sum() == len(result.tables)  # the lowest band of each is open
    assert set(np.asarray(frame["dose"]) % 10) == {0.0} and (frame["below"].dropna() % 20 == 0).all()


def test_bands_in_words():
    bands = ((-np.inf, 40.0), (40.0, 65.0), (65.0, np.inf), (-np.inf, np.inf))
    assert [band_text("age", *limits) for limits in bands] == [
        "under 40 years", "40 to under 65 years", "65 years and over", "everyone"]


@pytest.mark.parametrize(("find", "said"), [
    ("", "find: table"),
    (table_file().replace("dose 1: rate", "dose 1: every"), "does not have"),
    (table_file().replace("10 mg/h", "10 mg", 2), "round_to"),
    (table_file(doses="1 to 9 mg/h"), "2 to 150 doses"),
    (table_file(doses="10 to 120 mg/kg/h"), "a rate per kg"),
    (table_file(by="sex"), "no number"),
    (table_file(by="wieght"), 'did you mean "weight"?'),
    (table_file(edges=0.01), "at most 150"),
])  # fmt: skip
def test_a_table_that_cannot_be_made_is_told(tmp_path, find, said):
    with pytest.raises(ProblemsError) as error:
        read_table(*asked(tmp_path, find))
    assert said in str(error.value)


MAP = '[find.map]\nacross = "weight"\nup = "age"\nacross_every = 10\nup_every = 10\nlevel = "50 %"\n'


def test_the_map_finds_a_border_that_is_known(tmp_path):
    """Women of 60 and over and 90 kg and over have another clearance, and nobody of them attains."""
    clearance = "0.5 * weight / 70 * (8 if sex == 'female' and age >= 60 and weight >= 90 else 1)"
    result = search_map(*asked(tmp_path, MAP, clearance=clearance, count=8000, limits="0.7 to 3 mg/L"))
    region, = result.regions
    assert (region.sex, region.across, region.up) == ("female", (90.0, np.inf), (60.0, np.inf))
    assert region.fresh_attained < 0.05 and region.fresh_patients > 50


def test_a_map_without_a_region_says_none_and_counts_everyone(tmp_path):
    result = search_map(*asked(tmp_path, MAP, limits="0.1 to 30 mg/L"))
    assert result.regions == [] and result.cells[:, 3].sum() == 3000
    assert (result.cells[:, 3] == result.cells[:, 4]).all()
    assert (result.cells[:, 2] >= 2).all() and (result.cells[:, 2] <= 9).all()  # 20 to 90 years in tens


def test_a_lattice_maps_its_points(tmp_path):
    lattice = ('source = "lattice"\neach = 20\n[population.lattice]\nsex = ["female", "male"]\nheight = "170 cm"\n'
               'age = { range = "30 to 80 years", step = "10 years" }\n'
               'weight = { range = "50 to 120 kg", step = "10 kg" }')
    clearance = "0.5 * weight / 70 * (8 if age >= 60 and weight >= 90 else 1)"
    result = search_map(*asked(tmp_path, MAP, clearance=clearance, population=lattice, limits="0.7 to 3 mg/L"))
    assert len(result.cells) == 2 * 6 * 8 and (result.cells[:, 3] == 20).all()
    # between two points of the lattice any border is as good as another
    assert [one.sex for one in result.regions] == ["female", "male"]
    assert all(80 < one.across[0] <= 90 and 50 < one.up[0] <= 60 for one in result.regions)
    assert all(one.fresh_attained < 0.05 for one in result.regions)


def test_neighbours_are_sums_over_a_box():
    values = np.arange(20.0).reshape(4, 5)
    assert neighbours(values, 1)[1, 1] == values[:3, :3].sum() and neighbours(values, 1)[0, 0] == values[:2, :2].sum()
    assert neighbours(values, 9).ravel() == pytest.approx(values.sum())


@pytest.mark.parametrize(("find", "said"), [
    (MAP.replace('"age"', '"weight"'), "twice"),
    (MAP.replace('"age"', '"sex"'), "no number"),
    (MAP.replace('"age"', '"aeg"'), 'did you mean "age"?'),
    (MAP.replace("across_every = 10", "across_every = 0.01"), "wider cells"),
])
def test_a_map_that_cannot_be_made_is_told(tmp_path, find, said):
    with pytest.raises(ProblemsError) as error:
        search_map(*asked(tmp_path, find))
    assert said in str(error.value)
