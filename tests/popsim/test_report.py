"""The report: one file that needs nothing else, with every sentence, number and caution of the run."""

import re
import runpy
from base64 import b64encode
from dataclasses import replace
from hashlib import sha256
from html.parser import HTMLParser
from pathlib import Path
from types import SimpleNamespace

import pytest

from popsim.cautions import CAUTIONS
from popsim.finished import finished_run
from popsim.pictures.album import draw_all
from popsim.provenance import record_of
from popsim.report import write_report
from popsim.tables import notes_of
from popsim.ward_card import card_lines, example_people
from popsim.words import finding, percent, points, target_line

HERE = Path(__file__)
cases = SimpleNamespace(**runpy.run_path(str(HERE.with_name("judge_cases.py"))))
contrast = runpy.run_path(str(HERE.with_name("test_pictures.py")))["contrast"]
VOID = {"meta", "br", "link", "img", "hr", "input"}
HOSTILE = {"</style><script>alert(1)</script>": 'rate = "600 ug/h"\nuntil = "60 min"',
           '\\" onload=\\"alert(2)': 'rate = "900 ug/h"\nuntil = "60 min"'}


class Page(HTMLParser):
    """What a browser would make of the file: elements, attributes, text; complains of unbalanced tags."""

    def __init__(self, html: str):
        super().__init__()
        self.elements: list[tuple[str, dict]] = []
        self.open: list[str] = []
        self.cells: list[str] = []
        self.words = ""
        self.feed(html)
        assert not self.open

    def handle_starttag(self, tag, attributes):
        self.elements.append((tag, dict(attributes)))
        if tag not in VOID:
            self.open.append(tag)
        if tag in ("td", "th"):
            self.cells.append("")

    def handle_startendtag(self, tag, attributes):
        self.elements.append((tag, dict(attributes)))

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        if not {"style", "svg"} & set(self.open):
            self.words += data
            if self.cells and {"td", "th"} & set(self.open):
                self.cells[-1] += data

    @property
    def text(self) -> str:
        return " ".join(self.words.split())


def reported(folder: Path, count: int = 500, title: str = "A test", **asked) -> SimpleNamespace:
    study = replace(cases.study(folder, count=count, **asked), title=title)
    findings, tables = cases.judged(study)
    record = record_of(findings, "popsim judge study.toml", notes_of(findings, tables))
    pictures = draw_all(finished_run(record, tables), folder)
    write_report(study, tables, record, pictures, folder / "report.html")
    html = (folder / "report.html").read_text(encoding="utf-8")
    return SimpleNamespace(study=study, tables=tables, record=record, pictures=pictures, html=html, page=Page(html),
                           folder=folder)


@pytest.fixture(scope="module")
def run(tmp_path_factory):
    return reported(tmp_path_factory.mktemp("report"), compare='matters = "5 %"\nreference = "under 65"',
                    in_protocol='strength = "50 ug/mL"', until="90 min", every="1 min")


def test_nothing_is_loaded_from_elsewhere(run):
    assert [attributes for tag, attributes in run.page.elements if tag == "script"] == [{}]  # our own, inline
    for tag, attributes in run.page.elements:
        assert tag not in ("link", "iframe", "img", "object", "embed", "base", "form")
        assert not [name for name in attributes if name.startswith("on") or name in ("src", "srcset", "data")]
        for name in ("href", "xlink:href"):
            target = attributes.get(name, "#")
            assert target.startswith("#") or (tag == "a" and target.startswith("https://doi.org/10."))
    assert "@import" not in run.html and not re.search(r"url\((?!#)", run.html)
    script = re.search(r"<script>(.*?)</script>", run.html, flags=re.DOTALL)[1]
    digest = b64encode(sha256(script.encode()).digest()).decode()
    assert f"default-src 'none'; style-src 'unsafe-inline'; script-src 'sha256-{digest}'" in run.html


def test_every_sentence_target_note_and_caution(run):
    model, target = run.study.models[0].name, run.study.targets[0]
    for group in run.study.group_names:
        assert finding(run.tables["comparison"], run.tables["attainment"], group, target.name, model) \
            in run.page.text
    assert run.record["notes"]
    for line in (run.study.title, run.study.question, target_line(target), *CAUTIONS, *run.record["notes"],
                 *run.study.models[0].cautions, run.study.models[0].spread_note):
        assert line in run.page.text


def test_numbers_are_the_tables(run):
    for row in run.tables["attainment"].itertuples():
        interval = f"{percent(row.attained_low)} to {percent(row.attained_high)}"
        assert f"{percent(row.attained)} ({interval})" in run.page.cells
        for share in (row.time_below, row.time_in_range, row.time_above, row.ever_far_below, row.ever_far_above,
                      row.outside_model):
            assert percent(share) in run.page.cells
    for name in ("comparison", "groups"):
        assert len(run.tables[name])
        for row in run.tables[name].itertuples():
            interval = f"{points(row.difference_low)} to {points(row.difference_high)}"
            assert f"{points(row.difference)} ({interval})" in run.page.cells
    for row in run.tables["comparison"].itertuples():
        assert {percent(row.only_a), percent(row.only_b)} <= set(run.page.cells)
    assert "600 (600 to 600)" in run.page.cells and "12 (12 to 12)" in run.page.cells  # ug and mL of the first card


def test_in_the_order_of_a_committee(run):
    order = ["Who was simulated", "ward cards", "Doses received", "The drug model", "Who attains the target",
             "Protocol against protocol", "Groups against", "Pictures", "Who is left out", "How far the answer leans",
             "Notes", "Cautions", "How to repeat"]
    headings = " ".join(re.findall(r"<h2>(.*?)</h2>", run.html))
    places = [headings.index(words) for words in order]
    assert places == sorted(places)


def test_every_table_of_intervals_says_what_they_leave_out(run):
    for part in re.split(r"<h2>", run.html)[1:]:
        if re.search(r"</strong> \([+\-\d.<>]+ to [+\-\d.<>]+\)", part):
            assert "nothing about the model's error" in part.replace("&#39;", "'")
    assert run.page.text.count("nothing about the model's error") >= 5


def test_ward_cards_doi_and_how_to_repeat(run):
    labels, attributes = example_people(run.study)
    assert all(label in run.page.text for label in labels)
    for protocol in run.study.protocols:
        for lines in card_lines(run.study, protocol, attributes):
            assert all(any(line.given in cell and line.volume in cell for cell in run.page.cells) for line in lines)
    model = run.study.models[0]
    for words in (model.source["citation"], model.built_on.people, model.digest, run.study.digest, str(run.study.seed),
                  "popsim judge study.toml", run.record["versions"]["numpy"]):
        assert words in run.page.text
    assert ("a", {"href": f"https://doi.org/{model.source['doi']}"}) in run.page.elements


def test_pictures_stand_in_the_page_with_names_of_their_own(run):
    svgs = [attributes for tag, attributes in run.page.elements if tag == "svg"]
    assert len(svgs) == len(run.pictures) == 5 and all(one["role"] == "img" for one in svgs)
    ids = re.findall(r'\bid="([^"]+)"', run.html)
    assert len(ids) == len(set(ids)) and len(ids) > 50
    used = set(re.findall(r'(?:xlink:href="#|url\(#)([^")]+)', run.html))
    used |= {name for one in svgs for name in one["aria-labelledby"].split()}
    assert used <= set(ids)
    assert "<?xml" not in run.html and "<!--" not in run.html and "<metadata" not in run.html


def test_same_bytes_on_repeat(run):
    before = run.html
    write_report(run.study, run.tables, run.record, run.pictures, run.folder / "report.html")
    assert (run.folder / "report.html").read_text(encoding="utf-8") == before


def test_text_of_a_study_stays_text(tmp_path):
    title = "</title><script>alert(0)</script>"
    found = reported(tmp_path, count=60, title=title, protocols=HOSTILE,
                     groups={"<img src=x onerror=alert(3)>": "age < 65"})
    assert [tag for tag, _ in found.page.elements if tag in ("script", "img")] == ["script"]  # our own alone
    assert not [name for _, attributes in found.page.elements for name in attributes if name.startswith("on")]
    for name in (title, *found.study.group_names, *(protocol.name for protocol in found.study.protocols)):
        assert name in found.page.text


def test_one_protocol_and_one_group(tmp_path):
    found = reported(tmp_path, count=60, groups={}, protocols={"card": 'rate = "600 ug/h"\nuntil = "60 min"'})
    row = found.tables["attainment"].iloc[0]
    assert f"Among all patients, {percent(row.attained)} % attain the target" in found.page.text
    assert "60under 400 patients" in found.page.cells
    headings = " ".join(re.findall(r"<h2>(.*?)</h2>", found.html))
    assert "Protocol against protocol" not in headings and "Groups against" not in headings


def test_many_failed_are_no_headline(run, tmp_path):
    tables = {name: table.copy() for name, table in run.tables.items()}
    tables["attainment"].loc[0, ["failed", "note"]] = [6, "6 patients failed: no headline"]
    pictures = draw_all(finished_run(run.record, tables), tmp_path)
    write_report(run.study, tables, run.record, pictures, tmp_path / "report.html")
    page = Page((tmp_path / "report.html").read_text(encoding="utf-8"))
    row = tables["attainment"].iloc[0]
    assert "6 patients failed: no headline" in page.cells
    assert f"{percent(row.attained)} ({percent(row.attained_low)} to {percent(row.attained_high)})" not in page.cells


def test_an_effect_names_its_sides_and_a_group_may_be_empty(tmp_path):
    population = ('source = "survey"\ncount = 60\nwhere = "age < 60"\nbmi = ">= 20 kg/m2"\n[population.scale]\n'
                  'serum_creatinine = 1.2\n[population.set]\nopioid = true\nvenous_sampling = false')
    found = reported(tmp_path, population=population, model="propofol_eleveld_2018", groups={"old": "age >= 70"},
                     protocols={"card": 'amount = "2 mg/kg"\nover = "30 s"\nround_to = "10 mg"'},
                     targets=('quantity = "effect"\nrange = "40 to 60"\nduring = "5 min"',))
    for words in ("Below (too deep), %", "Above (too light), %", "Eligible: body mass index from 20 kg/m2; age < 60.",
                  "Every serum creatinine is multiplied by 1.2.", "opioid yes, venous sampling no",
                  'In the group "old": no patients.', "no patients in this group"):
        assert words in found.page.text


def test_colours_reach_level_aa(run):
    """WCAG 2.2, 1.4.3 (level AA): text 4.5 to 1 against its background."""
    colours = dict(re.findall(r"--(\w+): (#[0-9a-f]{6})", run.html))
    for text in ("ink", "faint", "line"):
        for background in ("#ffffff", colours["shade"]):
            assert contrast(colours[text], background) >= 4.5
