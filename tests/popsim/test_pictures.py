"""The pictures: sound SVG, the same bytes on repeat, the numbers of the tables, and every odd study drawn."""

import re
import runpy
import xml.etree.ElementTree as ElementTree
from dataclasses import replace
from pathlib import Path
from types import SimpleNamespace

import matplotlib
import numpy as np
import pandas as pd
import pytest
from matplotlib.colors import to_hex, to_rgb

from popsim.drawing import COLOURS, FAINT, INK, SHADE, label_spots, plain, strokes, text_width, wrapped
from popsim.finished import FinishedRun
from popsim.headlines import NO_HEADLINE, attainment_headline, has_headline, range_headline, rows_where
from popsim.output import _is_picture
from popsim.pictures.age_weight import DARK, SHADES
from popsim.pictures.album import draw_all
from popsim.pictures.shown import Picture
from popsim.pictures.sides import SIDES
from popsim.words import percent, points

cases = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("judge_cases.py"))))
FIVE = ["attainment_by_group.svg", "attainment_over_time.svg", "below_in_above.svg", "concentration_bands.svg",
        "attainment_map.svg"]
SVG = "{http://www.w3.org/2000/svg}"


def written_in(svg: str) -> str:
    """The words drawn in one of our pictures: letters are drawn as paths, each text told in a comment before them."""
    return "\n".join(re.findall(r"<!-- (.*?) -->", svg, flags=re.DOTALL)).replace("&gt;", ">").replace("&lt;", "<")


@pytest.fixture(scope="module")
def two(tmp_path_factory):
    """Two protocols, two groups, drawn once."""
    folder = tmp_path_factory.mktemp("two")
    study = cases.study(folder, count=500, compare='matters = "5 %"', until="90 min", every="1 min")
    findings, tables = cases.judged(study)
    run = cases.finished(study, findings, tables)
    return SimpleNamespace(study=study, run=run, tables=tables, folder=folder, pictures=draw_all(run, folder))


def drawn(folder, **asked):
    study = cases.study(folder, count=asked.pop("count", 120), **asked)
    findings, tables = cases.judged(study)
    pictures = draw_all(cases.finished(study, findings, tables), folder)
    drawings = {one.file_name: (one, (folder / one.file_name).read_text(encoding="utf-8")) for one in pictures}
    return study, tables, drawings


def test_each_picture_is_sound_xml_with_title_and_description(two):
    assert [picture.file_name for picture in two.pictures] == FIVE
    for picture in two.pictures:
        root = ElementTree.parse(two.folder / picture.file_name).getroot()
        assert root.tag == f"{SVG}svg" and root.get("role") == "img"
        assert root.find(f"{SVG}title").text == picture.title
        assert root.find(f"{SVG}desc").text == picture.alternative_text
        assert root.get("aria-labelledby").split() == [root[0].get("id"), root[1].get("id")]


def test_same_bytes_on_repeat_whatever_the_users_own_settings(two, tmp_path):
    with matplotlib.rc_context({"font.size": 30, "lines.linewidth": 9, "svg.hashsalt": "other", "axes.grid": True}):
        draw_all(two.run, tmp_path)
    for picture in two.pictures:
        first, second = ((folder / picture.file_name).read_bytes() for folder in (two.folder, tmp_path))
        assert first == second
        assert b"<dc:date>" not in first


def test_output_knows_our_pictures(two):
    assert all(_is_picture(two.folder / picture.file_name) for picture in two.pictures)


def test_axes_have_units_and_intervals_say_what_they_leave_out(two):
    by_group, over_time = (written_in((two.folder / picture.file_name).read_text()) for picture in two.pictures[:2])
    assert "Patients who attain the target (%)" in by_group
    assert "Patients in range (%)" in over_time and "Time (min)" in over_time and "100 %" in over_time
    assert "window 15 min to 60 min" in over_time
    for text, picture in zip((by_group, over_time), two.pictures, strict=False):
        assert "nothing about the model's error" in text and "nothing about the model's error" in picture.caption


def test_numbers_drawn_are_those_of_the_tables(two):
    text = written_in((two.folder / "attainment_by_group.svg").read_text())
    for row in two.tables["attainment"].itertuples():
        assert f"{percent(row.attained)} %" in text
        assert f"{percent(row.attained)} % ({percent(row.attained_low)} to" in two.pictures[0].alternative_text
        assert f"{row.protocol} {percent(row.time_in_range)} %" in two.pictures[1].alternative_text
    for pair in two.tables["comparison"].itertuples():
        assert f"{points(pair.difference)}  ({points(pair.difference_low)} to {points(pair.difference_high)})" in text
    for group in two.study.group_names[1:]:
        assert group in text
    for protocol in two.study.protocols:
        assert protocol.name in text


def test_titles_state_the_finding(two):
    whole = two.tables["comparison"].iloc[0]
    better, other = (("600 ug/h", "900 ug/h") if whole.difference < 0 else ("900 ug/h", "600 ug/h"))
    assert two.pictures[0].title.startswith(
        f'{abs(100 * whole.difference):.1f} points more on target with "{better}" than with "{other}"')
    assert two.pictures[1].title.startswith("Mean time in range, 15 min to 60 min: ")


def test_a_difference_whose_interval_spans_zero_is_called_unclear(tmp_path):
    protocols = {"600": 'rate = "600 ug/h"\nuntil = "60 min"', "601": 'rate = "601 ug/h"\nuntil = "60 min"'}
    study, tables, pictures = drawn(tmp_path, protocols=protocols)
    assert ((tables["comparison"]["difference_low"] <= 0) & (tables["comparison"]["difference_high"] >= 0)).all()
    assert pictures["attainment_by_group.svg"][0].title == 'No clear difference between "600" and "601" in any group'
    assert pictures["attainment_over_time.svg"][0].title.endswith("no clear difference in attainment")
    assert "no clear difference" in written_in(pictures["attainment_by_group.svg"][1])


def test_headlines_name_the_groups_that_do_not_follow(two):
    rows, pairs = two.tables["attainment"], two.tables["comparison"].copy()
    pairs[["difference", "difference_low", "difference_high"]] = [[0.1, 0.05, 0.15], [0.02, -0.01, 0.05],
                                                                 [-0.2, -0.3, -0.1]]
    assert attainment_headline(two.run, pairs, rows) == (
        '10.0 points more on target with "900 ug/h" than with "600 ug/h"; no clear difference in "under 65"; '
        'fewer in "65 and over"')
    pairs.loc[0, ["difference", "difference_low", "difference_high"]] = [0.0, -0.1, 0.1]
    assert attainment_headline(two.run, pairs, rows) == (
        'No clear difference between "600 ug/h" and "900 ug/h" among all patients; 20.0 points more with "600 ug/h" '
        'in "65 and over"')


def test_no_headline_and_no_dot_above_one_percent_failed(two, tmp_path):
    tables = {name: table.copy() for name, table in two.tables.items()}
    rows = tables["attainment"]
    rows["failed"] = [6 if group == "all" and protocol == "600 ug/h" else 0
                      for group, protocol in zip(rows["group"], rows["protocol"], strict=True)]
    assert not has_headline(rows.iloc[0]) and rows.iloc[0].patients == 500
    by_group, over_time, *_ = draw_all(replace(two.run, tables=tables), tmp_path)
    assert by_group.title == over_time.title == NO_HEADLINE
    text = written_in((tmp_path / by_group.file_name).read_text())
    assert "no headline: 6 patients failed or undosed" in text and "none given" in text
    assert f"{percent(rows.iloc[0].attained)} %" not in text
    assert "no headline" in written_in((tmp_path / over_time.file_name).read_text())


def test_one_protocol_one_group(tmp_path):
    protocols = {"the card": 'rate = "600 ug/h"\nuntil = "60 min"'}
    _, tables, pictures = drawn(tmp_path, protocols=protocols, groups={})
    row = tables["attainment"].iloc[0]
    title = f"{percent(row.attained)} % of all patients attain the target"
    assert pictures["attainment_by_group.svg"][0].title == title
    assert pictures["attainment_over_time.svg"][0].title.endswith(f": {percent(row.time_in_range)} %")


def test_many_protocols_many_groups_an_empty_one_and_long_names(tmp_path):
    protocols = {f"{rate} ug/h" + " as the anaesthetists of the north wing have always given it" * (rate == 700):
                 f'rate = "{rate} ug/h"\nuntil = "60 min"' for rate in range(500, 1000, 100)}
    groups = {f"people from {age} to {age + 6} years with a very long name": f"age >= {age} and age < {age + 6}"
              for age in range(20, 80, 15)} | {"nobody": "age > 100"}
    _, tables, pictures = drawn(tmp_path, protocols=protocols, groups=groups)
    everyone = rows_where(tables["attainment"], group="all")
    best = everyone.loc[everyone["attained"].idxmax()]
    assert f'"{best.protocol}": {percent(best.attained)} %' in pictures["attainment_by_group.svg"][0].title
    for picture, svg in pictures.values():
        ElementTree.fromstring(svg)
        assert "no patients" in written_in(svg)
        assert "nan" not in re.sub(r"<!--.*?-->", "", svg, flags=re.DOTALL).lower()
    assert "0 patients (under 400)" in written_in(pictures["attainment_by_group.svg"][1])


def test_names_of_files_are_safe_and_unique(tmp_path, monkeypatch):
    for name in ("by_group", "over_time", "sides", "bands", "age_weight"):  # what they draw is another matter
        monkeypatch.setattr(f"popsim.pictures.album.{name}",
                            lambda _, path: path.write_text("") or Picture(path.name, "", "", ""))
    targets = tuple(f'name = "{name}"\n{cases.EFFECT_SITE}' for name in ("3/6 ng/mL", "3-6 NG mL", "../up"))
    _, _, pictures = drawn(tmp_path, targets=targets)
    assert list(pictures) == [name.replace(".svg", f"{end}.svg") for end in ("_3_6_ng_ml", "_3_6_ng_ml__2", "_up")
                              for name in FIVE]


def test_hostile_names_stay_text(tmp_path):
    protocols = {"--><script>x</script>": 'rate = "600 ug/h"\nuntil = "60 min"',
                 "$a_1$ & \\\\": 'rate = "900 ug/h"\nuntil = "60 min"'}
    study, _, pictures = drawn(tmp_path, protocols=protocols)
    for picture, svg in pictures.values():
        root = ElementTree.fromstring(svg)
        assert not [element for element in root.iter() if str(element.tag).endswith("script")]
        assert study.protocols[0].name in picture.title + picture.alternative_text or "map" in picture.file_name


def test_an_instant_and_a_long_run(tmp_path):
    instant = 'quantity = "effect_site"\nrange = "3 to 6 ng/mL"\nduring = "30 min"'
    _, _, pictures = drawn(tmp_path, targets=(instant,), until="6 h", every="2 min")
    picture, svg = pictures["attainment_over_time.svg"]
    assert picture.title.startswith("In range at 30 min: ")
    assert "judged at 30 min" in written_in(svg) and "Time (h)" in written_in(svg)


def test_strokes_differ_in_colour_and_in_grey():
    looks = [strokes(index) for index in range(35)]
    assert len({(look.colour, str(look.dash), look.marker) for look in looks}) == 35
    for one, other in zip(looks, looks[1:], strict=False):
        assert one.colour != other.colour and one.dash != other.dash and one.marker != other.marker


def contrast(one: str, other: str) -> float:
    """Contrast ratio of two colours. Source: WCAG 2.2, definitions of relative luminance and contrast ratio."""
    def luminance(colour: str) -> float:
        parts = [int(colour[i:i + 2], 16) / 255 for i in (1, 3, 5)]
        linear = [part / 12.92 if part <= 0.04045 else ((part + 0.055) / 1.055) ** 2.4 for part in parts]
        return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]

    light, dark = sorted((luminance(one), luminance(other)), reverse=True)
    return (light + 0.05) / (dark + 0.05)


def test_text_and_the_first_lines_stand_out():
    """WCAG 2.2, 1.4.3 and 1.4.11: text 4.5 to 1, graphics 3 to 1; paler lines come only from the fourth protocol on."""
    for background in ("#ffffff", SHADE):
        assert contrast(INK, background) >= 4.5 and contrast(FAINT, background) >= 4.5
        assert min(contrast(colour, background) for colour in COLOURS[:3]) >= 3


def test_wrapped_lines_fit():
    for text in ("a group of people with a very long name", "x" * 200, ""):
        lines = wrapped(text, 1.5, 9)
        assert all(text_width(line, 9) <= 1.5 for line in lines)
        assert "".join("".join(lines).split()) == "".join(text.split())
    assert wrapped("one two three four five six seven", 0.6, 9, most_lines=2)[-1].endswith("...")
    assert plain("a\x07\nb") == "a  b"


def test_labels_stand_on_their_own_line_or_nowhere():
    x = np.linspace(0, 90, 91)
    spots = label_spots({"low": (x, np.full(91, 0.2)), "high": (x, np.full(91, 0.8))}, 8.5, 3.5, 1.75)
    assert spots["low"][1] == 0.2 and spots["high"][1] == 0.8
    assert label_spots({"one": (x, np.full(91, 0.5)), "other": (x, np.full(91, 0.52))}, 8.5, 3.5, 1.75) is None


def test_range_headline_names_the_extremes_of_many(tmp_path):
    protocols = {f"{rate} ug/h": f'rate = "{rate} ug/h"\nuntil = "60 min"' for rate in (100, 300, 600, 900)}
    study = cases.study(tmp_path, count=120, protocols=protocols)
    findings, tables = cases.judged(study)
    run = cases.finished(study, findings, tables)
    title = range_headline(run, tables["comparison"], tables["attainment"], study.targets[0])
    shares = rows_where(tables["attainment"], group="all")["time_in_range"]
    assert f'{percent(shares.min())} % with' in title and f'{percent(shares.max())} % with' in title


def test_below_in_and_above_fill_the_panel(two):
    picture = next(one for one in two.pictures if one.file_name == "below_in_above.svg")
    text = written_in((two.folder / picture.file_name).read_text())
    for row in rows_where(two.tables["attainment"], group="all").itertuples():
        shares = f"{percent(row.time_below)} % below and {percent(row.time_above)} % above with \"{row.protocol}\""
        assert shares in picture.title
    for row in two.tables["attainment"].itertuples():
        assert f"{percent(row.time_below)}, {percent(row.time_in_range)} and {percent(row.time_above)} %" in \
            picture.alternative_text
    assert {"below", "in range", "above"} <= set(text.splitlines()) and "Patients (%)" in text and "Time (min)" in text
    greys = sorted(grey(colour) for colour, _ in SIDES.values())
    assert min(high - low for low, high in zip(greys, greys[1:], strict=False)) > 0.1
    assert min(contrast(colour, to_hex(ink)) for colour, ink in SIDES.values()) >= 4.5


def grey(colour: str) -> float:
    """What a grey print makes of a colour, 0 to 1: luma. Source: ITU-R BT.601."""
    return sum(part * weight for part, weight in zip(to_rgb(colour), (0.299, 0.587, 0.114), strict=True))


def test_bands_are_the_percentiles_in_the_studys_unit(two):
    picture = next(one for one in two.pictures if one.file_name == "concentration_bands.svg")
    assert "Effect site (ng/mL)" in written_in((two.folder / picture.file_name).read_text())
    course = two.tables["over_time"]
    for protocol in two.study.protocols:
        row = rows_where(course, group="all", protocol=protocol.name).set_index("time_min").loc[60.0]
        low, median, high = (f"{1000 * row[name]:.3g}" for name in ("p05", "p50", "p95"))  # mg/L to ng/mL
        assert f'{median} ({low} to {high}) with "{protocol.name}"' in picture.title
    assert "Dashed box: the target's range in its window" in picture.caption and "Thin lines" not in picture.caption


def test_the_first_patients_own_courses_on_request(two, tmp_path):
    grid = two.study.grid_min()
    courses = pd.concat([pd.DataFrame({"patient": patient, "model": two.study.models[0].name, "protocol": protocol.name,
                                       "time_min": grid, "plasma": 0.004, "effect_site": 0.003, "effect": np.nan})
                         for patient in (1, 2) for protocol in two.study.protocols])
    draw_all(replace(two.run, courses=courses), tmp_path)
    assert "the first 2 patients themselves" in written_in((tmp_path / "concentration_bands.svg").read_text()).replace(
        "\n", " ")


def test_the_map_shows_each_cells_share_fades_few_and_hatches_strangers(two, tmp_path):
    cells = two.tables["attainment_map"].iloc[:0].copy()
    name = two.study.targets[0].name
    for protocol in two.run.protocols:
        for age, weight, patients, attained, outside in ((20.0, 60.0, 200, 0.91, 0.0), (30.0, 60.0, 30, 0.42, 0.0),
                                                         (30.0, 200.0, 80, 0.07, 0.6)):
            cells.loc[len(cells)] = [two.study.models[0].name, protocol, name, age, age + 10, weight,
                                     np.inf if weight == 200 else weight + 10, patients, 0, attained, 0.0, 1.0, outside]
    tables = two.tables | {"attainment_map": cells}
    picture = draw_all(replace(two.run, tables=tables), tmp_path)[4]
    svg = (tmp_path / "attainment_map.svg").read_text()
    text = written_in(svg).splitlines()
    assert [text.count(number) for number in ("91", "42", "7")] == [2, 2, 2]
    assert {"20-30", "30-40", "60-70", "200+", "Age (years)", "Total body weight (kg)"} <= set(text)
    assert svg.count("fill: url(#") == 2  # the hatched cell of each map
    assert picture.title == ('Attained by age and weight: from 7 % (30 to 40 years, 200 and more kg, "600 ug/h") to '
                             '91 % (20 to 30 years, 60 to 70 kg, "600 ug/h")')
    shades = [grey(to_hex(SHADES(share))) for share in np.linspace(0, 1, 11)]
    assert shades == sorted(shades, reverse=True)
    for share in np.linspace(0, 1, 101):
        assert contrast(to_hex(SHADES(share)), "#ffffff" if share > DARK else "#000000") >= 4.5


def test_body_size_is_drawn_where_doses_depend_on_it(tmp_path):
    protocols = {"lean": 'rate = "9 ug/kg/h"\nuntil = "60 min"'}
    _, tables, pictures = drawn(tmp_path, count=900, protocols=protocols, groups={},
                                in_protocol='by = "lean_body_mass_janmahasatian"')
    picture, svg = pictures["body_size.svg"]
    rows = tables["body_size"].query("patients >= 50 and sex == 'female'")
    heaviest = rows[rows["measure"] == "weight"].iloc[-1]
    lean = rows.query("measure == 'lean_body_mass_janmahasatian'").set_index("weight_from").loc[heaviest.weight_from]
    assert f"In women of {heaviest.p50:.0f} kg" in picture.title and f"lean body mass {lean.p50:.0f}" in picture.title
    text = written_in(svg)
    assert {"Women", "Men", "Total body weight (kg)", "Measure (kg)"} <= set(text.splitlines())
    assert "lean body mass" in text.replace("\n", " ")


def test_models_side_by_side_with_their_spread_but_never_in_the_effect_site(tmp_path):
    effect_site = cases.EFFECT_SITE.replace("3 to 6 ng/mL", "2 to 4 ug/mL")
    plasma = effect_site.replace("effect_site", "plasma")
    population = cases.SURVEY.format(count=200) + "\n[population.set]\nopioid = false\nvenous_sampling = false"
    _, tables, pictures = drawn(
        tmp_path, population=population, model="propofol_eleveld_2018", repeat_with=("propofol_schnider_1998",),
        protocols={"card": 'amount = "2 mg/kg"\n---\nrate = "8 mg/kg/h"\nuntil = "60 min"'},
        targets=(plasma, effect_site))
    assert [name for name in pictures if "models" in name] == ["models_compared.svg"]
    picture, svg = pictures["models_compared.svg"]
    everyone = tables["attainment"].query("group == 'all' and target.str.startswith('plasma')")
    spread = f"{100 * (everyone['attained'].max() - everyone['attained'].min()):.1f}"
    assert picture.title == f"2 published models lie apart by {spread} points, of all patients"
    assert spread in written_in(svg).splitlines()
    for row in everyone.itertuples():
        assert f"{row.model} {percent(row.attained)} %" in picture.alternative_text


def over_mic(two, isolates: bool) -> FinishedRun:
    """The run as if it had been judged against four MICs, with numbers of our own."""
    mics, rows = (0.5, 1.0, 2.0, 4.0), []
    for place, mic in enumerate(mics):
        for group in two.run.group_names:
            for shift, protocol in enumerate(two.run.protocols):
                share = (0.99, 0.95, 0.6, 0.1)[place] - 0.1 * shift
                rows.append({"model": two.run.models[0].name, "protocol": protocol, "group": group, "mic": mic,
                             "target": f"above MIC, MIC {mic:g} mg/L", "patients": 500, "failed": 0, "attained": share,
                             "attained_low": share - 0.02, "attained_high": min(share + 0.02, 1), "note": ""})
    targets = tuple(SimpleNamespace(name=f"above MIC, MIC {mic:g} mg/L", quantity="plasma",
                                    mic=SimpleNamespace(family="above MIC", weight=share if isolates else None))
                    for mic, share in zip(mics, (0.1, 0.5, 0.3, 0.1), strict=True))
    tables = {"attainment": pd.DataFrame(rows), "over_time": two.tables["over_time"],
              "comparison": two.tables["comparison"]}
    return replace(two.run, targets=targets, tables=tables)


def test_attainment_over_mic(two, tmp_path):
    [picture] = draw_all(over_mic(two, isolates=True), tmp_path)
    assert picture.file_name == "attainment_by_mic.svg" and "Grey bars: share of the isolates" in picture.caption
    assert picture.title == ('90 % or more of all patients attain the target up to 1 mg/L with "600 ug/h", at no MIC '
                             'with "900 ug/h"')
    text = written_in((tmp_path / picture.file_name).read_text()).splitlines()
    assert "MIC (mg/L)" in text and [text.count(mic) for mic in ("0.5", "1", "2", "4")] == [3] * 4
    [plain_one] = draw_all(over_mic(two, isolates=False), tmp_path)
    assert "isolates" not in plain_one.caption
