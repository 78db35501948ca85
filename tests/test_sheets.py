"""Calculation sheets: what stands on them is enough to work a discharge out again, by their text alone."""

from __future__ import annotations

import dataclasses
import math
import os
import re
import shutil
import subprocess
from itertools import pairwise

import numpy as np
import pandas as pd
import pypdf
import pytest
import shapely
from _results import CRS, FALLING, HOLLOW, SI, THREE, US, VALLEY, built, folder_of

from terrain2q.columns import CAUTION, COLUMNS, LAYERS
from terrain2q.errors import Finding, OutputError
from terrain2q.flows import Flow
from terrain2q.output import sheets
from terrain2q.output.calculation import area_below, calculate, stretches
from terrain2q.output.pages import write_pages
from terrain2q.output.sheets import write_sheets

FLOWS = [Flow("10-year", 40.0), Flow("50-year", 120.0), Flow("100-year", 260.0)]


def text_of(path) -> str:
    """Return the text as a person reads it, with poppler where it is there."""
    if shutil.which("pdftotext"):
        command = ["pdftotext", "-layout", str(path), "-"]
        return subprocess.run(command, capture_output=True, check=True, text=True).stdout
    if os.environ.get("CI") == "true":
        pytest.fail("pdftotext is missing")
    return "\n".join(page.extract_text() for page in pypdf.PdfReader(path).pages)


def make(tmp_path, source, which="all") -> str:
    return text_of(write_sheets(source, which, tmp_path / "sheets.pdf"))


NUMBER = r"([\d.]+)"
EVENT = re.compile(rf"^(\S.*?): Q = {NUMBER} (?:ft³/s|m³/s), (?:stage found|carried at stage) {NUMBER}", re.M)
ROW = re.compile(r"^\s*(\d+) .*?(\d\.\d{3,})([*†]?)\s+(?:\[\d+\]\s+)?([\d.]+(?:\s+[\d.]+){5})\s*$", re.M)


def worked_out_again(text: str) -> list[tuple[float, float]]:
    """Return the discharge asked for, and the one a calculator gives, of each event on a sheet.

    Only n, A and P of the table, the slope and the constant are used: K = k/n · A · (A/P)^(2/3) in each
    subarea, Q = K · √S; where a remark speaks of a composite n or of a factor, as it says.
    """
    constant = float(re.search(rf"k = {NUMBER}", text)[1])
    found = []
    for sheet in re.split(r"^Section ", text, flags=re.M)[1:]:
        slope = re.search(rf"Friction slope S\s+{NUMBER}", sheet)
        if slope is not None:
            root = float(slope[1]) ** 0.5
        events = list(EVENT.finditer(sheet))
        for event, following in zip(events, [*events[1:], None], strict=True):
            part = sheet[event.end() : following.start() if following else len(sheet)]
            total = 0.0
            for row in ROW.finditer(part):
                area, perimeter = (float(v) for v in row[4].split()[:2])
                if row[3] != "†":
                    total += constant / float(row[2]) * area * (area / perimeter) ** (2 / 3)
            for n, area, perimeter in re.findall(
                rf"composite n \(\w+\): n = {NUMBER},\s+A = {NUMBER},\s+P = {NUMBER}", part
            ):
                n, area, perimeter = float(n), float(area), float(perimeter)
                total += constant / n * area * (area / perimeter) ** (2 / 3)
            shared = re.search(rf"each K is {NUMBER} times", part)
            found.append((float(event[2]), total * root * (float(shared[1]) if shared else 1.0)))
    return found


def assert_followed(text: str, count: int) -> None:
    found = worked_out_again(text)
    assert len(found) == count
    for asked, again in found:
        # to three figures; the constant and n have four, the other numbers five
        assert again == pytest.approx(asked, rel=2e-3)


# --- followed with a calculator -----------------------------------------------------------------------


@pytest.mark.parametrize("units", [SI, US], ids=["m", "ft"])
def test_a_sheet_can_be_worked_out_again_from_its_text(tmp_path, units):
    text = make(tmp_path, folder_of([built("A", VALLEY, THREE)], FLOWS, units))
    assert_followed(text, 3)
    # and it is the right discharge: that of the study
    asked = [q for q, _ in worked_out_again(text)]
    assert asked == pytest.approx([f.discharge * units.per_si("flow") for f in FLOWS[::-1]], rel=1e-3)


def test_another_area_would_not_pass():
    sheet = ["k = 1", "Section A", "Friction slope S 0.01", "x: Q = 10.0 m³/s, stage found 1.0"]
    text = "\n".join([*sheet, " 1 a b 0.100 [1] 5.0 5.0 1.0 50.0 5.0 1.0", ""])
    assert worked_out_again(text) == [(10.0, pytest.approx(5.0))]


TWO_IN_CHANNEL = [
    (0.0, 40.0, 0.08, "left floodplain", "forest"),
    (40.0, 52.0, 0.03, "channel", "gravel"),
    (52.0, 60.0, 0.06, "channel", "reeds"),
    (60.0, 120.0, 0.05, "right floodplain", "pasture"),
]


@pytest.mark.parametrize("rule", ["horton", "pavlovskii"])
def test_a_composite_n_is_worked_out_again(tmp_path, rule):
    section = built("B", VALLEY, TWO_IN_CHANNEL, composite=rule)
    text = make(tmp_path, folder_of([section], FLOWS, US, {"channel": {"composite": rule}}))
    assert f"composite n ({rule})" in text
    assert "0.030†" in text
    assert_followed(text, 3)


def test_an_n_that_falls_with_depth_is_the_one_that_acts(tmp_path):
    parts = [(0.0, 42.0, FALLING, "left floodplain", "forest"), *THREE[1:]]
    text = make(tmp_path, folder_of([built("C", VALLEY, parts)], FLOWS, US))
    assert "n at this depth of water" in text
    assert_followed(text, 3)


@pytest.mark.parametrize(
    "parts",
    [
        [(0.0, 110.0, 0.04, "", "grass")],
        [
            (0.0, 70.0, 0.07, "left floodplain", "brush"),
            (70.0, 90.0, 0.035, "channel", "water"),
            (90.0, 110.0, 0.05, "right floodplain", "grass"),
        ],
    ],
    ids=["one subarea", "three"],
)
def test_water_of_two_levels_is_worked_out_again(tmp_path, parts):
    flows = [Flow(f"q{q}", float(q)) for q in (20, 60, 80, 100, 130, 200)]
    source = folder_of([built("D", HOLLOW, parts)], flows)
    levels = source.layers["subarea_flows"].groupby("event")["stage"].nunique()
    assert (levels > 1).any()
    assert_followed(make(tmp_path, source), 6)


def test_stretches_that_share_a_subarea_are_worked_out_again(tmp_path):
    """Water known to stand behind the bank at the channel's level: one subarea, two stretches, one K."""
    one = built("D", HOLLOW, [(0.0, 110.0, 0.04, "", "grass")])
    one = dataclasses.replace(one, section=one.section.reached([(19.0, 60.0)]))
    flows = [Flow("low", 20.0), Flow("flood", 60.0)]
    text = make(tmp_path, folder_of([one], flows))
    assert "Stretches of water here share a subarea" in text
    assert_followed(text, 2)


@pytest.mark.parametrize("kind", ["plain", "falling", "horton", "reached"])
def test_every_discharge_comes_from_the_numbers_of_its_calculation(kind):
    random = np.random.default_rng(20311)
    checked = 0
    for _ in range(8):
        x = np.arange(0.0, 130.0, 10.0)
        z = random.uniform(0, 4, x.size).round(2)
        z[[0, -1]], z[6] = 9.0, -2.0
        ns = [
            FALLING if kind == "falling" and random.random() < 0.5 else n for n in (0.08, 0.03, 0.045, 0.06)
        ]
        zones = ("left floodplain", "channel", "channel", "right floodplain")
        edges = [0.0, 50.0, 60.0, 80.0, 120.0]
        parts = [(a, b, n, zone, "") for (a, b), n, zone in zip(pairwise(edges), ns, zones, strict=True)]
        one = built("A", np.column_stack([x, z]), parts, composite=kind if kind == "horton" else "divide")
        if kind == "reached":
            one = dataclasses.replace(one, section=one.section.reached([(20.0, 40.0), (80.0, 95.0)]))
        source = folder_of([one], [Flow(f"q{q}", float(q)) for q in (4, 15, 40, 90, 200)])
        layers = source.layers
        for row in layers["design_stages"].to_dict("records"):
            mine = layers["subarea_flows"].query("event == @row['event']").to_dict("records")
            done = calculate(row, layers["subareas"].to_dict("records"), mine, SI, one.section.composite)
            carried = sum(p.area * p.radius ** (2 / 3) / p.n for p in done.parts if not p.together)
            carried += sum(t.area * (t.area / t.perimeter) ** (2 / 3) / t.n for t in done.together)
            assert carried * done.factor * 0.002**0.5 == pytest.approx(row["discharge"], rel=1e-4)
            checked += 1
    assert checked == 40


def test_subareas_add_up_and_areas_are_those_of_the_drawing():
    for points, parts in ((VALLEY, THREE), (HOLLOW, [(0.0, 110.0, 0.04, "", "grass")])):
        flows = [Flow(f"q{q}", float(q)) for q in (5, 40, 80, 100, 300)]
        source = folder_of([built("A", points, parts)], flows, US)
        layers = source.layers
        profile = sheets._profile(layers["sections"]["geometry"].iloc[0])
        for row in layers["design_stages"].to_dict("records"):
            mine = layers["subarea_flows"].query("event == @row['event']").to_dict("records")
            one = calculate(row, layers["subareas"].to_dict("records"), mine, US)
            assert one.total("discharge") == pytest.approx(row["discharge"], rel=1e-9)
            assert area_below(profile, stretches(row, profile, one.levels)) == pytest.approx(
                one.total("area"), rel=1e-6
            )


def test_froude_and_alpha_are_followed_too(tmp_path):
    text = make(tmp_path, folder_of([built("A", VALLEY, THREE)], FLOWS, US))
    for v, alpha, area, width, froude in re.findall(
        rf"= {NUMBER} × √{NUMBER} / √\(32\.17 × {NUMBER} / {NUMBER}\) = {NUMBER}", text
    ):
        v, alpha, area, width = float(v), float(alpha), float(area), float(width)
        assert v * math.sqrt(alpha) / math.sqrt(32.17 * area / width) == pytest.approx(
            float(froude), rel=3e-3
        )
    for area, cubes, power, total, alpha in re.findall(
        rf"= {NUMBER}² × {NUMBER} × 10\^(-?\d+) / {NUMBER}³ = {NUMBER}", text
    ):
        again = float(area) ** 2 * float(cubes) * 10.0 ** int(power) / float(total) ** 3
        assert again == pytest.approx(float(alpha), rel=1e-3)
    assert text.count("Chow 1959, section 2-7") == 3


# --- what a reviewer looks for ------------------------------------------------------------------------


def test_a_sheet_has_what_is_signed(tmp_path):
    finding = Finding("line-oblique", "cut line A is 40° off square", "cut_lines", "A")
    source = folder_of([built("A", VALLEY, THREE, findings=[finding])], FLOWS, US)
    text = make(tmp_path, source)
    for words in (
        "Section A", "Mill Creek", "Made by", "Checked by", "Date", CAUTION, "value in the study",
        "table, forest", "cut line A is 40° off square", "[line-oblique]", finding.remedy,
        "Sum of subareas, design flow", "Ends of the section", "Station [ft]", "EPSG:26915",
    ):  # fmt: skip
        assert words in text, words


def test_checks_say_where_to_look(tmp_path):
    low = [(x, min(z, 4.0)) for x, z in VALLEY]
    low[0] = (0, 3.2)
    text = make(tmp_path, folder_of([built("A", low, THREE)], [Flow("flood", 400.0)]))
    assert re.search(r"Ends of the section\s+water \d+\.\d\d m above the left end", text)
    assert "look here" in text


def test_a_failed_section_keeps_its_sheet(tmp_path):
    failed = dataclasses.replace(
        built("F", VALLEY, THREE), section=None, profile=None, specs=(),
        findings=(Finding("line-off-terrain", "there is no ground under the line", "sections", "F"),),
    )  # fmt: skip
    text = make(tmp_path, folder_of([failed], FLOWS))
    assert "100-year: no answer" in text
    assert "there is no ground under the line" in text


def test_a_study_without_flows_has_sheets(tmp_path):
    assert "No design flow" in make(tmp_path, folder_of([built("A", VALLEY, THREE)], []))


def test_many_subareas_go_on_over_the_page(tmp_path):
    edges = np.linspace(0, 120, 101)
    parts = [
        (float(a), float(b), 0.03 + 0.001 * i, "", f"class {i}") for i, (a, b) in enumerate(pairwise(edges))
    ]
    text = make(tmp_path, folder_of([built("A", VALLEY, parts)], [Flow("flood", 300.0)]))
    assert "Section A (continued)" in text
    assert "more, the same way from the table" in text
    assert_followed(re.sub(r"^Section A \(continued\).*$", "", text, flags=re.M), 1)


# --- which sheets, the index, the file ----------------------------------------------------------------


@pytest.fixture
def mixed():
    note = Finding("line-turned", "the line has been turned", "cut_lines", "B")
    return folder_of(
        [built("A", VALLEY, THREE), built("B", VALLEY, THREE, north=80.0, findings=[note])],
        [Flow("10-year", 40.0)],
    )


def titles(path) -> list:
    def flat(items):
        return [flat(i) if isinstance(i, list) else i.title for i in items]

    return flat(pypdf.PdfReader(path, strict=True).outline)


def test_flagged_is_what_has_findings(tmp_path, mixed):
    assert titles(write_sheets(mixed, "flagged", tmp_path / "a.pdf")) == ["Index", "Sections", ["Section B"]]
    path = write_sheets(mixed, "all", tmp_path / "b.pdf")
    assert titles(path) == ["Index", "Sections", ["Section A", "Section B"]]


def test_no_finding_leaves_the_index_alone(tmp_path):
    source = folder_of([built("A", VALLEY, THREE)], [Flow("10-year", 40.0)])
    path = write_sheets(source, "flagged", tmp_path / "a.pdf")
    assert len(pypdf.PdfReader(path).pages) == 1
    assert "No section has a finding or a crossing" in text_of(path)


def test_index_leads_to_its_pages(tmp_path, mixed):
    reader = pypdf.PdfReader(write_sheets(mixed, "all", tmp_path / "a.pdf"), strict=True)
    index = reader.pages[0]
    assert index.extract_text().startswith("Calculation sheets")
    leads = [note.get_object()["/Dest"] for note in index["/Annots"]]
    pages = [reader.get_page_number(reader.named_destinations[name].page.get_object()) for name in leads]
    for name, page in zip(("A", "B"), pages, strict=True):
        text = reader.pages[page].extract_text()
        assert text.startswith(f"Section {name}")
        assert f"page {page + 1}" in text
        listed = re.search(rf"Section {name} Mill Creek .* (\d+)$", index.extract_text(), re.M)
        assert int(listed[1]) == page + 1


@pytest.mark.parametrize("count", [30, 31, 86, 87])
def test_index_of_many_sheets_has_the_pages_it_reckoned_with(tmp_path, count):
    one = folder_of([built("A", VALLEY, THREE)], [Flow("10-year", 40.0)])
    reader = pypdf.PdfReader(write_sheets(repeated(one, count), "all", tmp_path / "a.pdf"))
    own = 1 if count <= 30 else 2 if count <= 86 else 3
    assert reader.pages[own].extract_text().startswith("Section A0")
    assert f"page {own + 1}" in reader.pages[own].extract_text()


def repeated(source, count):
    """Return the same section many times under other names."""
    layers = {}
    for name, table in source.layers.items():
        if "section_id" in table:
            copies = [table.assign(section_id=f"A{i}") for i in range(count)]
            table = pd.concat(copies, ignore_index=True)
        layers[name] = table
    return dataclasses.replace(source, layers=layers)


def test_same_results_give_the_same_bytes(tmp_path, mixed):
    first = write_sheets(mixed, "all", tmp_path / "a.pdf").read_bytes()
    assert write_sheets(mixed, "all", tmp_path / "b.pdf").read_bytes() == first


def test_names_of_any_alphabet_and_length(tmp_path):
    name = "Überlauf ≥ 3 <&(\\) " + "long " * 60
    text = make(tmp_path, folder_of([built(name, VALLEY, THREE)], [Flow("Jährlich 洪水", 40.0)]))
    assert "Section Überlauf ≥ 3 <&(\\) long" in text
    assert "Jährlich" in text


def test_an_earlier_file_stays_where_writing_fails(tmp_path, mixed, monkeypatch):
    path = write_sheets(mixed, "all", tmp_path / "a.pdf")
    before = path.read_bytes()

    def full(*_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(sheets._Sheets, "_index", full)
    with pytest.raises(OutputError) as refused:
        write_sheets(mixed, "all", path)
    assert refused.value.code == "output-not-writable"
    assert path.read_bytes() == before
    assert [p.name for p in tmp_path.iterdir()] == ["a.pdf"]


# --- crossings ----------------------------------------------------------------------------------------


def crossings(events=("10-year", "100-year")):
    blank = {str: "", float: 1.0, int: 1}
    rows = []
    for event, q, stage in zip(events, (40.0, 260.0), (3.1, 5.2), strict=True):
        row = {c: blank[COLUMNS[c].dtype] for c in LAYERS["crossings"].columns}
        row |= {
            "crossing_id": "C-7", "road": "Mill Road", "stream": "Mill Creek", "event": event, "discharge": q,
            "stage": stage, "crest": 4.5, "freeboard": 4.5 - stage, "crest_discharge": 150.0,
            "verdict": "over the crest" if stage > 4.5 else "crest not reached", "status": "ok",
            "first_event_over": "100-year", "geometry": shapely.Point(500050.0, 4600020.0),
        }  # fmt: skip
        rows.append(row)
    return pd.DataFrame(rows)


def test_a_crossing_has_its_sheet(tmp_path):
    source = folder_of([built("A", VALLEY, THREE)], FLOWS, extra={"crossings": crossings()})
    path = write_sheets(source, "flagged", tmp_path / "a.pdf")
    assert titles(path)[-2:] == ["Crossings", ["Crossing C-7"]]
    text = text_of(path)
    assert "4.500 − 5.200 = −0.700" in text
    assert re.search(r"First event over\s+100-year", text)
    assert re.search(r"Discharge at crest\s+150.0 m³/s", text)
    assert "crossing_sections.gpkg" in text
    assert "over the crest" in text


def test_a_crossing_with_a_section_of_its_name_shows_it(tmp_path):
    source = folder_of([built("C-7", VALLEY, THREE)], FLOWS, extra={"crossings": crossings()})
    path = write_sheets(source, "flagged", tmp_path / "a.pdf")
    text = text_of(path)
    assert "crest of the road" in text
    assert titles(path) == ["Index", "Sections", ["Section C-7"], "Crossings", ["Crossing C-7"]]


def test_what_is_asked_for_is_written(tmp_path, monkeypatch):
    """The report command makes sheets also where the run asked for none."""
    asked = []
    monkeypatch.setattr("terrain2q.output.report.write_report", lambda source: tmp_path / "report.html")
    monkeypatch.setattr("terrain2q.output.sheets.write_sheets", lambda source, which: asked.append(which))
    for of_run in ({"sheets": "none"}, {"sheets": "all"}, {}):
        source = folder_of([built("A", VALLEY, THREE)], FLOWS, settings={"output": of_run})
        monkeypatch.setattr("terrain2q.output.pages.read_folder", lambda folder, source=source: source)
        write_pages(tmp_path)
        write_pages(tmp_path, {"report": False, "sheets": "none"})
    assert asked == ["flagged", "all", "flagged"]
    assert CRS.to_epsg() == 26915
