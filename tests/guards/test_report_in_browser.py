"""The report in a real browser: quiet, alone, readable on a telephone and on paper, its tables sorted by keyboard.

Screenshots and the printed pages go to the folder named by POPSIM_SCREENSHOTS, if it is set.
"""

import os
import re
import runpy
from pathlib import Path
from types import SimpleNamespace

import pytest

from popsim.cli import run as popsim_run

browser_tools = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("browser.py"))))
pytestmark = pytest.mark.skipif(browser_tools.found() is None, reason="no Chromium on this machine (Debian: chromium)")

CONFIGS = Path(__file__).parents[2] / "configs"
STUDIES = ("remifentanil_fixed_rate", "propofol_body_size")

# Contrast of every text with what stands behind it. Source: WCAG 2.2, 1.4.3 and the definition of contrast ratio.
PALE_TEXTS = """(() => {
  const parts = colour => colour.match(/[\\d.]+/g).map(Number);
  const linear = v => v <= 0.04045 ? v / 12.92 : ((v + 0.055) / 1.055) ** 2.4;
  const luminance = rgb => rgb.slice(0, 3).map(v => linear(v / 255))
    .reduce((sum, v, i) => sum + v * [0.2126, 0.7152, 0.0722][i], 0);
  const behind = element => {
    for (let e = element; e; e = e.parentElement) {
      const rgb = parts(getComputedStyle(e).backgroundColor);
      if (rgb.length === 3 || rgb[3] === 1) return rgb;
    }
    return [255, 255, 255];
  };
  const pale = [];
  let seen = 0;
  for (const element of document.querySelectorAll("main *:not(svg *)")) {
    if (![...element.childNodes].some(node => node.nodeType === 3 && node.textContent.trim())) continue;
    const text = luminance(parts(getComputedStyle(element).color)), ground = luminance(behind(element));
    const ratio = (Math.max(text, ground) + 0.05) / (Math.min(text, ground) + 0.05);
    seen += 1;
    if (ratio < 4.5) pale.push(element.tagName + " " + ratio.toFixed(2) + " " + element.textContent.slice(0, 40));
  }
  return {seen, pale};
})()"""
COLUMN = "[...document.querySelectorAll('table.sortable tbody')[0].rows].map(row => row.cells[2].textContent)"


@pytest.fixture(scope="module")
def reports(tmp_path_factory):
    """The report of each shipped study."""
    folder = tmp_path_factory.mktemp("browser")
    for study in STUDIES:
        arguments = ["judge", str(CONFIGS / f"{study}.toml"), "--out", str(folder / study), "--quiet", "--no-patients"]
        assert popsim_run(arguments) == 0
    return {study: folder / study / "report.html" for study in STUDIES}


@pytest.fixture(params=STUDIES)
def report(request, reports):
    return reports[request.param]


@pytest.fixture
def one_report(reports):
    return reports[STUDIES[0]]


@pytest.fixture(scope="module")
def browser():
    one = browser_tools.Browser()
    yield one
    one.close()


def kept(name: str, report: Path) -> Path:
    folder = Path(os.environ.get("POPSIM_SCREENSHOTS") or report.parent)
    folder.mkdir(exist_ok=True)
    return folder / f"{report.parent.name}_{name}"


@pytest.mark.parametrize("width", [390, 1280])
def test_nothing_overflows_nothing_complains_nothing_is_fetched(browser, report, width):
    browser.requests.clear()
    browser.complaints.clear()
    browser.open(report, width)
    browser.picture(kept(f"{width}.png", report))
    assert browser.value("document.documentElement.clientWidth") == width
    assert browser.value("document.documentElement.scrollWidth") <= width
    beyond = browser.value(
        "[...document.querySelectorAll('body *:not(svg *)')].filter(e => !e.closest('.wide') && "
        f"e.getBoundingClientRect().right > {width} + 0.5).map(e => e.tagName + ' ' + e.textContent.slice(0, 40))")
    assert beyond == []
    assert browser.complaints == []
    assert browser.requests == [report.as_uri()]


def test_a_script_of_someone_else_does_not_run(browser, one_report, tmp_path):
    intruder = "</main><script>document.title = 'taken'</script>"
    html = one_report.read_text(encoding="utf-8").replace("</main>", intruder, 1)
    (tmp_path / "report.html").write_text(html, encoding="utf-8")
    browser.open(tmp_path / "report.html", 1280)
    assert browser.value("document.title") != "taken"
    assert any("Content Security Policy" in line for line in browser.complaints)


def test_every_text_stands_out(browser, one_report):
    browser.open(one_report, 1280)
    found = browser.value(PALE_TEXTS)
    assert found["seen"] > 200 and found["pale"] == []


def test_the_answer_stands_in_the_first_screen(browser, report):
    browser.open(report, 1280, 800)
    browser.picture(kept("first_screen.png", report), whole=False)
    assert browser.value("document.querySelector('.answer').getBoundingClientRect().bottom") <= 800
    assert browser.value("document.querySelector('.answer').textContent.length") > 50


def test_tables_sort_by_keyboard(browser, one_report):
    browser.open(one_report, 1280)
    browser.value("document.querySelectorAll('table.sortable')[0].querySelectorAll('button')[1].focus()")
    browser.press("Tab")
    assert browser.value("document.activeElement.textContent") == "Patients"

    def counts() -> list[int]:
        return [int(text.replace(",", "")) for text in browser.value(COLUMN)]

    before = counts()
    browser.press("Enter")
    assert counts() == sorted(before) and len(set(before)) > 2
    browser.press("Enter")
    assert counts() == sorted(before, reverse=True)
    assert browser.value("document.querySelectorAll('[aria-sort=descending]').length") == 1


def test_all_that_scrolls_and_sorts_is_reached_by_keyboard(browser, one_report):
    browser.open(one_report, 390)
    assert browser.value("[...document.querySelectorAll('.wide')].every(e => e.tabIndex === 0 && "
                         "e.getAttribute('aria-label'))")
    assert browser.value("[...document.querySelectorAll('table.sortable thead th')].every(th => "
                         "th.querySelector('button'))")
    assert browser.value("[...document.querySelectorAll('svg')].every(svg => svg.getAttribute('role') === 'img' && "
                         "svg.querySelector('desc').textContent.length > 60)")


def test_prints_on_at_most_eight_pages_of_a4(browser, report):
    browser.open(report, 1280)
    pdf = browser.printed()
    kept("printed.pdf", report).write_bytes(pdf)
    pages = re.findall(rb"/Type\s*/Page\b(?!s)", pdf)
    assert 3 <= len(pages) <= 8
    width, height = map(float, re.search(rb"/MediaBox\s*\[\s*0\s+0\s+([\d.]+)\s+([\d.]+)", pdf).groups())
    assert (round(width / 72 * 25.4), round(height / 72 * 25.4)) == (210, 297)
