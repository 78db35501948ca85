"""The report page in a browser: what a person sees and does, with no network."""

from __future__ import annotations

import importlib.util
import itertools
import json
import os
import re
import shutil
import subprocess
from pathlib import Path

import numpy as np
import pandas as pd
import pyproj
import pytest
import shapely

from terrain2q import run
from terrain2q.commands import main
from terrain2q.ground.terrain import Terrain
from terrain2q.output import report_map
from terrain2q.output.folder import OutputFolder, read_folder
from terrain2q.output.geopackage import linestring_zm
from terrain2q.output.looks import WATERS, water_tones
from terrain2q.output.report import report_html, write_report
from terrain2q.output.report_data import report_data, settings_text
from terrain2q.output.report_map import block_means, shade
from terrain2q.units import US

SAMPLE = Path(__file__).parents[1] / "sample_dem"
CHROMIUM = shutil.which("chromium") or "/usr/bin/chromium"
QUIET = (
    "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run", "--disable-background-networking",
    "--disable-component-update", "--disable-sync",
)  # fmt: skip
MOST_BYTES = 5_000_000


def _must(there: bool, reason: str) -> None:
    """Skip where something the test needs is not there; never on the machine that judges a change."""
    if not there:
        if os.environ.get("CI") == "true":
            pytest.fail(reason)
        pytest.skip(reason)


@pytest.fixture(scope="module")
def results(tmp_path_factory):
    folder = tmp_path_factory.mktemp("sample")
    return run(SAMPLE / "study.toml", {"output.folder": str(folder), "output.sheets": "none"})


@pytest.fixture(scope="module")
def browser():
    _must(os.path.exists(CHROMIUM), "there is no chromium on this machine")
    from playwright.sync_api import sync_playwright

    with sync_playwright() as playwright:
        browser = playwright.chromium.launch(executable_path=CHROMIUM, args=list(QUIET))
        yield browser
        browser.close()


class Opened:
    """A page in the browser, with what it asked for and what it complained of."""

    def __init__(self, browser, path: Path, width: int, **more) -> None:
        self.asked: list[str] = []
        self.complaints: list[str] = []
        self.context = browser.new_context(viewport={"width": width, "height": 900}, **more)
        self.context.route("**/*", self._only_from_disk)
        self.page = self.context.new_page()
        self.page.on("console", lambda m: self.complaints.append(m.text) if m.type == "error" else None)
        self.page.on("pageerror", lambda error: self.complaints.append(str(error)))
        self.page.goto(path.as_uri())

    def _only_from_disk(self, route) -> None:
        self.asked.append(route.request.url)
        if route.request.url.startswith("file:"):
            route.continue_()
        else:
            route.abort()

    def point_at(self, section: int) -> None:
        """Move the mouse onto the line of a section, where it can be seen."""
        x, y = self.place(section)
        self.page.mouse.move(x, y)

    def place(self, section: int) -> tuple[float, float]:
        line = self.page.locator("#map g.line").nth(section)
        line.scroll_into_view_if_needed()
        return tuple(
            line.evaluate(
                """group => {
                    const hit = group.querySelector('.hit'), to = hit.getScreenCTM();
                    for (const part of [0.1, 0.9, 0.3, 0.7, 0.5]) {
                        const at = hit.getPointAtLength(part * hit.getTotalLength()).matrixTransform(to);
                        if (group.contains(document.elementFromPoint(at.x, at.y))) return [at.x, at.y];
                    }
                    return [NaN, NaN];
                }"""
            )
        )

    def choose_event(self, name: str) -> None:
        self.page.locator("#events label", has_text=re.compile(f"^{re.escape(name)}$")).click()

    def column(self, name: str, table: str = "sections") -> list[str]:
        heads = self.page.locator(f"#{table}-table thead th").all_inner_texts()
        at = next(i for i, head in enumerate(heads) if head.startswith(name)) + 1
        return self.page.locator(f"#{table}-table tbody tr > :nth-child({at})").all_inner_texts()


@pytest.fixture
def open_page(browser):
    opened: list[Opened] = []

    def open_it(path: Path, width: int = 1280, **more) -> Opened:
        opened.append(Opened(browser, path, width, **more))
        return opened[-1]

    yield open_it
    for one in opened:
        one.context.close()


@pytest.fixture
def report(open_page, results):
    return open_page(results.folder / "report.html")


# --------------------------------------------------------------------------------------------------
# The page of the sample study


def test_opens_with_no_network_and_without_complaint(report, results):
    assert report.page.title().startswith(results.name)
    assert [url for url in report.asked if not url.startswith("file:")] == []
    assert len(report.asked) == 1
    assert report.complaints == []
    assert results.folder / "report.html" in results.files


def test_top_says_what_came_out(report, results):
    text = report.page.locator("body").inner_text()
    assert "no substitute for a study by a licensed engineer" in text
    worst = report.page.locator(".worst li").all_inner_texts()
    assert len(worst) == min(10, len(results.findings))
    for line, finding in zip(worst, results.worst_findings(10), strict=True):
        assert finding.message in line
        assert finding.severity in line
        assert finding.code in line


def _numbers_of_panel(opened: Opened, event: str) -> dict[str, str]:
    rows = opened.page.locator("#panel-events tbody tr[data-field]")
    return {
        row.get_attribute("data-field"): row.locator(f'td[data-event="{event}"]').inner_text()
        for row in rows.all()
    }


def _equal_the_layer(shown: dict[str, str], row: pd.Series) -> None:
    assert {"discharge", "stage", "depth", "flow_area", "mean_velocity", "froude"} <= set(shown)
    for name, text in shown.items():
        if not np.isfinite(row[name]):
            assert text == "–", name
            continue
        decimals = len(text.partition(".")[2])
        assert text == f"{round(row[name], decimals):.{decimals}f}", name
        # rounded to what a reader needs, not further
        assert abs(float(text) - row[name]) <= max(0.006 * abs(row[name]), 0.005), name


def test_pointing_at_the_third_section_shows_its_numbers(report, results):
    third = results.sections["section_id"].iloc[2]
    report.point_at(2)
    assert report.page.locator("#panel-title").inner_text() == f"Section {third}"
    stages = results.design_stages[results.design_stages["section_id"] == third]
    for _, row in stages.iterrows():
        _equal_the_layer(_numbers_of_panel(report, row["event"]), row)
    assert third in report.page.locator("#section-caption").inner_text()
    assert report.page.locator("#section-picture .water").count() > 0
    assert report.page.locator("#rating-picture circle").count() == len(stages)


def test_every_section_can_be_pointed_at(report, results):
    for i, name in enumerate(results.sections["section_id"]):
        report.point_at(i)
        assert report.page.locator("#panel-title").inner_text() == f"Section {name}"


def test_keyboard_goes_from_section_to_section(report, results):
    ids = list(results.sections["section_id"])
    report.page.locator('#map [role="radio"][tabindex="0"]').focus()
    for key, expected in (("ArrowRight", 1), ("ArrowDown", 2), ("ArrowLeft", 1), ("End", -1), ("Home", 0)):
        report.page.keyboard.press(key)
        assert report.page.locator("#panel-title").inner_text() == f"Section {ids[expected]}"
        label = report.page.evaluate("document.activeElement.getAttribute('aria-label')")
        assert label.startswith(f"Section {ids[expected]}, 100-year: stage ")
    # one stop of the tabulator for the whole map, whatever the number of lines
    assert report.page.locator('#map [tabindex="0"]').count() == 1


def test_tapping_shows_a_section(open_page, results):
    opened = open_page(results.folder / "report.html", 412, has_touch=True, is_mobile=True)
    opened.page.touchscreen.tap(*opened.place(4))
    assert (
        opened.page.locator("#panel-title").inner_text() == f"Section {results.sections.section_id.iloc[4]}"
    )


def test_section_chosen_by_click_returns_after_pointing_elsewhere(report, results):
    ids = results.sections["section_id"]
    report.page.mouse.click(*report.place(3))
    report.point_at(6)
    assert report.page.locator("#panel-title").inner_text() == f"Section {ids.iloc[6]}"
    report.page.mouse.move(5, 5)
    assert report.page.locator("#panel-title").inner_text() == f"Section {ids.iloc[3]}"


def test_event_switch_changes_table_map_and_pictures(report, results):
    stages = results.design_stages
    seen = set()
    for event in ("10-year", "50-year", "100-year"):
        report.choose_event(event)
        of_event = stages[stages["event"] == event]
        assert report.column("Stage") == [f"{s:.2f}" for s in of_event["stage"]]
        assert [t.strip() for t in report.column("Status")] == list(of_event["status"])
        assert event in report.page.locator("#map-title").inner_text()
        assert event in report.page.locator("#section-caption").inner_text()
        wet = report.page.locator("#map g.line .wet").evaluate_all("all => all.map(p => p.getAttribute('d'))")
        seen.add("".join(wet))
    assert len(seen) == 3


def test_sorting_orders_the_numbers(report, results):
    report.choose_event("100-year")
    of_event = results.design_stages[results.design_stages["event"] == "100-year"]
    expected = [f"{s:.2f}" for s in sorted(of_event["stage"])]
    head = report.page.locator("#sections-table thead th", has_text="Stage [ft]")
    head.get_by_role("button").click()
    assert report.column("Stage") == expected
    assert head.get_attribute("aria-sort") == "ascending"
    head.get_by_role("button").click()
    assert report.column("Stage") == expected[::-1]
    assert head.get_attribute("aria-sort") == "descending"
    report.page.locator("#sections-table thead th", has_text="Section").get_by_role("button").click()
    assert head.get_attribute("aria-sort") is None


def test_filters_narrow_the_table(report, results):
    report.choose_event("100-year")
    of_event = results.design_stages[results.design_stages["event"] == "100-year"]
    report.page.locator("#sections-status").select_option("doubtful")
    doubtful = list(of_event.loc[of_event["status"] == "doubtful", "section_id"])
    assert report.column("Section") == doubtful
    assert 0 < len(doubtful) < len(of_event)
    assert (
        report.page.locator("#sections-count").inner_text().startswith(f"{len(doubtful)} of {len(of_event)}")
    )
    report.page.locator("#sections-status").select_option("")
    report.page.locator("#sections-text").fill("tans")
    assert report.column("Stream") == ["Tansy", "Tansy"]
    report.page.locator("#sections-text").fill("no such thing")
    assert report.column("Section") == []


def test_table_and_findings_lead_to_the_section(report, results):
    report.page.locator("#sections-table tbody button").nth(5).click()
    assert (
        report.page.locator("#panel-title").inner_text() == f"Section {results.sections.section_id.iloc[5]}"
    )
    link = report.page.locator(".worst a[data-section]").first
    link.click()
    assert report.page.locator("#panel-title").inner_text() == f"Section {link.get_attribute('data-section')}"


def test_link_to_a_finding_opens_it(report):
    closed = report.page.locator("#findings details:not([open]) summary").first
    code = closed.get_attribute("id")
    report.page.evaluate("id => { location.hash = id; }", code)
    report.page.wait_for_function("id => document.getElementById(id).closest('details').open", arg=code)


def test_zoom_shows_less_of_the_map_and_back(report):
    whole = report.page.locator("#map").get_attribute("viewBox")
    report.page.get_by_role("button", name="Larger").click()
    closer = report.page.locator("#map").get_attribute("viewBox")
    assert float(closer.split()[2]) < float(whole.split()[2])
    report.page.get_by_role("button", name="whole").click()
    assert report.page.locator("#map").get_attribute("viewBox") == whole


@pytest.mark.parametrize("width", [360, 768, 1280])
def test_nothing_runs_off_the_side(open_page, results, width):
    opened = open_page(results.folder / "report.html", width)
    assert opened.page.evaluate("document.documentElement.scrollWidth") <= width
    cut = opened.page.evaluate(
        """() => [...document.querySelectorAll('p, li, h1, h2, h3, summary, figure, dl')]
            .filter(e => e.getClientRects().length && !e.closest('.scroll') && !e.matches('.skip'))
            .map(e => [e, e.getBoundingClientRect()])
            .filter(([, box]) => box.left < -1 || box.right > innerWidth + 1)
            .map(([e]) => e.outerHTML.slice(0, 80))"""
    )
    assert cut == []


def test_words_in_pictures_stay_within_them(open_page, results, tmp_path):
    many_events = write_report(_made_up(4, events=5), tmp_path / "events.html")
    for width, path in itertools.product((360, 1280), (results.folder / "report.html", many_events)):
        opened = open_page(path, width)
        outside = opened.page.evaluate(
            """() => [...document.querySelectorAll('figure text')].filter(t => {
                    const a = t.getBoundingClientRect(), b = t.ownerSVGElement.getBoundingClientRect();
                    return a.left < b.left - 2 || a.right > b.right + 2 || a.bottom > b.bottom + 2; })
                .map(t => t.textContent)"""
        )
        assert outside == []


def test_print_has_every_section_finding_and_input(report, results, tmp_path):
    _must(shutil.which("pdftotext") is not None, "there is no pdftotext on this machine")
    path = tmp_path / "page.pdf"
    report.page.pdf(path=path, format="A4", prefer_css_page_size=True)
    text = subprocess.run(["pdftotext", "-raw", path, "-"], capture_output=True, text=True, check=True).stdout
    words = re.sub(r"\s+", "", text)
    for finding in results.findings_list:
        assert re.sub(r"\s+", "", finding.message) in words
    for name in results.sections["section_id"]:
        assert name in text
    record = json.loads((results.folder / "run.json").read_text(encoding="utf-8"))
    for entry in record["inputs"]:
        assert entry["sha256"] in words
    for heading in ("Stage [ft]", "To run it again", "Roughness used"):
        assert re.sub(r"\s+", "", heading) in words


def _axe() -> Path:
    path = Path(os.environ.get("AXE_CORE", "node_modules/axe-core/axe.min.js"))
    _must(path.is_file(), "axe-core is not there: set AXE_CORE to the path of its axe.min.js")
    return path


@pytest.mark.parametrize("width", [360, 1280])
def test_no_serious_fault_of_accessibility(open_page, results, width):
    axe = _axe()
    opened = open_page(results.folder / "report.html", width, bypass_csp=True)
    opened.page.add_script_tag(path=axe)
    found = opened.page.evaluate("axe.run(document, {resultTypes: ['violations']})")
    assert len(found["passes"]) > 20
    serious = [
        (v["id"], [n["html"][:120] for n in v["nodes"]][:3])
        for v in found["violations"]
        if v["impact"] in ("serious", "critical")
    ]
    assert serious == []


# --------------------------------------------------------------------------------------------------
# Without a browser


def test_made_anew_from_the_folder_it_is_the_same_page(results, tmp_path, capsys):
    copy = tmp_path / "copy"
    shutil.copytree(results.folder, copy)
    before = (copy / "report.html").read_bytes()
    (copy / "report.html").unlink()
    with pytest.raises(SystemExit) as stop:
        main(["report", str(copy), "--json"])
    assert stop.value.code == 0
    assert str(copy / "report.html") in json.loads(capsys.readouterr().out)["files"]
    assert (copy / "report.html").read_bytes() == before


def test_report_of_a_folder_without_results_says_so(tmp_path, capsys):
    with pytest.raises(SystemExit) as stop:
        main(["report", str(tmp_path)])
    assert stop.value.code == 2
    assert "results.gpkg" in capsys.readouterr().err


def test_report_can_be_left_out(tmp_path):
    only_layers = {"output.folder": str(tmp_path), "output.report": "false", "output.sheets": "none"}
    made = run(SAMPLE / "study.toml", only_layers)
    assert not (tmp_path / "report.html").exists()
    assert all(path.name != "report.html" for path in made.files)


def test_without_the_terrain_the_map_is_plain_and_says_so(results, tmp_path):
    copy = tmp_path / "copy"
    shutil.copytree(results.folder, copy)
    record = json.loads((copy / "run.json").read_text(encoding="utf-8"))
    record["settings"]["terrain"]["dem"] = [str(tmp_path / "gone.tif")]
    record["settings"]["streams"]["path"] = str(tmp_path / "gone.gpkg")
    (copy / "run.json").write_text(json.dumps(record), encoding="utf-8")
    text = write_report(copy).read_text(encoding="utf-8")
    assert "data:image/jpeg" not in text
    assert "The map is plain" in text
    assert "The map has no streams" in text
    assert "data:image/jpeg" in (results.folder / "report.html").read_text(encoding="utf-8")


def test_without_the_record_the_numbers_are_still_there(results, tmp_path):
    shutil.copy(results.folder / "results.gpkg", tmp_path)
    source = read_folder(tmp_path)
    assert source.units is US
    assert source.record == {}
    text = report_html(source)
    assert "run.json is not in the folder" in text
    assert results.sections["section_id"].iloc[0] in text


def test_changed_layers_are_told_of(results, tmp_path):
    copy = tmp_path / "copy"
    shutil.copytree(results.folder, copy)
    with (copy / "results.gpkg").open("ab") as file:
        file.write(b"\0")
    assert "has changed since the run" in report_html(read_folder(copy))
    assert "has changed since the run" not in report_html(read_folder(results.folder))


def test_water_in_the_picture_stands_where_the_layers_say(results):
    """Levels behind a bank are taken from the ground at the water's edge: they are those of the subareas."""
    drawn = report_data(read_folder(results.folder))["embedded"]
    flows = results.subarea_flows
    hollows = 0
    for section in drawn["sections"]:
        for event, answer in zip(drawn["events"], section["events"], strict=True):
            mine = flows[(flows["section_id"] == section["id"]) & (flows["event"] == event["name"])]
            expected = sorted(set(mine["stage"].round(2)))
            assert sorted({w[2] for w in answer["water"]}) == pytest.approx(expected, abs=0.011)
            hollows += len(expected) > 1
    assert hollows > 2


def test_settings_can_be_run_again(results, tmp_path):
    source = read_folder(results.folder)
    (tmp_path / "study.toml").write_text(settings_text(source.settings), encoding="utf-8")
    again = run(tmp_path / "study.toml", {"output.folder": str(tmp_path / "again"), "output.report": "false"})
    pd.testing.assert_frame_equal(
        pd.DataFrame(again.design_stages).drop(columns="geometry"),
        pd.DataFrame(results.design_stages).drop(columns="geometry"),
    )


def test_waters_can_be_told_apart_in_grey():
    def lightness(tone: str) -> float:
        red, green, blue = (int(tone[i : i + 2], 16) / 255 for i in (1, 3, 5))
        return 0.2126 * red + 0.7152 * green + 0.0722 * blue

    for count in range(2, len(WATERS) + 1):
        light = [lightness(tone) for tone in water_tones(count)]
        assert all(a - b > 0.1 for a, b in itertools.pairwise(light))


def test_block_means_leave_gaps_out():
    cells = np.arange(12, dtype=np.float32).reshape(3, 4)
    cells[0, 0] = np.nan
    means = block_means(cells, 2)
    np.testing.assert_allclose(means, [[(1 + 4 + 5) / 3, (2 + 3 + 6 + 7) / 4], [8.5, 10.5]])
    assert np.isnan(block_means(np.full((2, 2), np.nan), 2)).all()


@pytest.mark.parametrize("bounds", [(512100, 4640100, 513300, 4640900), (0, 0, 1e6, 1e7)])
def test_ground_read_in_strips_is_that_read_at_once(monkeypatch, bounds):
    monkeypatch.setattr(report_map, "_PIXELS", 110)
    terrain = Terrain(SAMPLE / "valley.tif")
    whole, place = report_map._coarse(terrain, bounds)
    assert max(whole.shape) < 300
    monkeypatch.setattr(report_map, "_CELLS_AT_ONCE", 20_000)
    strips, again = report_map._coarse(terrain, bounds)
    assert tuple(again) == pytest.approx(tuple(place))
    rows = min(len(whole), len(strips))
    np.testing.assert_allclose(strips[: rows - 1], whole[: rows - 1], rtol=1e-6)


def test_slopes_toward_the_light_are_lighter():
    rows, columns = np.mgrid[0:20, 0:20]
    toward_north_west = shade((rows + columns) * 0.3, 1.0)
    away = shade(-(rows + columns) * 0.3, 1.0)
    assert toward_north_west[10, 10] > away[10, 10] + 40


# --------------------------------------------------------------------------------------------------
# Results of other sizes and kinds


RATING = (
    "stage depth discharge flow_area wetted_perimeter hydraulic_radius top_width mean_velocity froude "
    "conveyance alpha beta"
)
COLUMNS_OF = {
    "sections": "section_id stream stream_distance lowest_ground slope slope_source length points findings "
    "geometry",
    "subareas": "section_id subarea zone land_class n n_source start_station end_station geometry",
    "ratings": f"section_id {RATING}",
    "design_stages": f"section_id event {RATING} slope critical_stage channel_share status geometry",
    "subarea_flows": "section_id event subarea stage flow_area wetted_perimeter conveyance discharge "
    "mean_velocity share",
    "findings": "code severity layer feature_id message remedy geometry",
}


def _made_up(count: int, points: int = 400, events: int = 5, names=None) -> OutputFolder:
    """Results of `count` sections across a straight stream: made up, but of the form of a run's."""
    random = np.random.default_rng(3)
    station = np.linspace(0.0, 900.0, points)
    event_names = [f"{2 ** (i + 1)}-year" for i in range(events)]
    rows = {layer: [] for layer in COLUMNS_OF}
    for i, name in enumerate(names or [f"S-{i:04d}" for i in range(count)]):
        z = 800.0 - 0.5 * i + ((station - 450.0) / 60.0) ** 2 + random.normal(0.0, 0.02, points).cumsum()
        x, y = np.full(points, 512000.0 + 60.0 * i), 4640000.0 + station * 0.3048
        low = float(z.min())
        line = linestring_zm(np.column_stack([x, y, z, station]))
        rows["sections"].append(
            (name, "Long Creek", 200.0 * i, low, 0.002, "field slope", 900.0, points, 1, line)
        )
        for k, (start, end) in enumerate(itertools.pairwise(np.linspace(0.0, 900.0, 7))):
            zone = "channel" if k == 3 else "left floodplain"
            n, source = 0.03 + 0.01 * k, "Chow (1959), Table 5-6"
            rows["subareas"].append((name, k + 1, zone, f"class {k}", n, source, start, end, None))
        for depth in np.linspace(0.2, 12.0, 60):
            rows["ratings"].append((name, low + depth, depth, 40 * depth**1.7, *([1.0] * 9)))
        for e, event in enumerate(event_names):
            depth = 3.0 + 1.5 * e
            wet = 4640000.0 + station[z < low + depth][[0, -1]] * 0.3048
            part = shapely.multilinestrings([shapely.linestrings([[x[0], wet[0]], [x[0], wet[1]]])])
            numbers = (low + depth, depth, 40 * depth**1.7, *([1.0] * 9), 0.002, low + depth / 2, 0.5)
            rows["design_stages"].append((name, event, *numbers, "ok", part))
            rows["subarea_flows"] += [(name, event, k, low + depth, *([7.1] * 5), 1 / 6) for k in range(1, 7)]
        message = f"cut line {name} has been turned"
        rows["findings"].append(("line-turned", "note", "cut_lines", name, message, "Nothing.", None))
    layers = {layer: pd.DataFrame(rows[layer], columns=COLUMNS_OF[layer].split()) for layer in rows}
    terrain = {"dem": [str(SAMPLE / "valley.tif")]}
    record = {"settings": {"study": {"name": "Made up", "units": "us"}, "terrain": terrain}}
    return OutputFolder(layers, US, pyproj.CRS.from_epsg(26915), record)


def test_two_hundred_sections_stay_below_five_megabytes(open_page, tmp_path):
    source = _made_up(200)
    path = write_report(source, tmp_path / "many.html")
    assert path.stat().st_size < MOST_BYTES
    opened = open_page(path)
    assert opened.complaints == []
    assert opened.page.locator("#sections-table tbody tr").count() == 200
    opened.choose_event("2-year")
    assert opened.column("Stage") == [
        f"{s:.2f}" for s in source.layers["design_stages"].query("event == '2-year'").stage
    ]


def test_pictures_are_lighter_where_there_are_more():
    def points(count: int) -> float:
        drawn = report_data(_made_up(count, events=1))["embedded"]["sections"]
        return float(np.mean([len(section["profile"]) for section in drawn]))

    assert points(150) < 0.8 * points(5)


def test_text_of_the_data_is_never_taken_for_markup(open_page, tmp_path):
    names = ["</script><script>document.title='taken'</script>", '"><img src=x onerror=alert(1)>', "a & b"]
    opened = open_page(write_report(_made_up(3, names=names), tmp_path / "hostile.html"))
    assert opened.complaints == []
    assert opened.page.title().startswith("Made up")
    assert opened.page.locator("img").count() == 0
    assert opened.column("Section") == names
    assert any(names[0] in line for line in opened.page.locator(".worst li").all_inner_texts())


def test_section_without_an_answer_keeps_its_place(open_page, tmp_path):
    source = _made_up(3, events=2)
    stages = source.layers["design_stages"]
    numbers = [c for c in stages.columns if stages[c].dtype.kind == "f"]
    stages.loc[stages["section_id"] == "S-0001", numbers] = np.nan
    stages.loc[stages["section_id"] == "S-0001", "status"] = "failed"
    stages.loc[stages["section_id"] == "S-0001", "geometry"] = None
    sections = source.layers["sections"]
    sections.loc[1, ["lowest_ground", "slope", "length", "stream_distance"]] = np.nan
    sections.loc[1, "geometry"] = None
    for name in ("subareas", "ratings", "subarea_flows"):
        table = source.layers[name]
        source.layers[name] = table[table["section_id"] != "S-0001"]
    opened = open_page(write_report(source, tmp_path / "failed.html"))
    assert opened.complaints == []
    assert opened.column("Stage")[1] == "–"
    assert opened.page.locator("#map g.line").count() == 2
    opened.page.locator("#sections-table tbody button").nth(1).click()
    assert opened.page.locator("#panel-title").inner_text() == "Section S-0001"
    assert "no ground that could be sampled" in opened.page.locator("#section-caption").inner_text()
    assert opened.complaints == []
    head = opened.page.locator("#sections-table thead th", has_text="Stage [ft]").get_by_role("button")
    for _ in range(2):  # what has no number comes last, whichever way
        head.click()
        assert opened.column("Stage")[-1] == "–"


def test_study_without_events_shows_ratings(open_page, tmp_path):
    source = _made_up(3)
    for name in ("design_stages", "subarea_flows"):
        source.layers[name] = source.layers[name].iloc[:0]
    opened = open_page(write_report(source, tmp_path / "ratings.html"))
    assert opened.complaints == []
    assert opened.page.locator("#events").is_hidden()
    assert opened.page.locator("#rating-picture path").count() > 0


def test_extents_change_with_the_event(open_page, tmp_path):
    source = _made_up(4, events=2)
    shapes = [
        shapely.MultiPolygon([shapely.box(512000, 4640000 + 20, 512180, 4640000 + top)]) for top in (120, 200)
    ]
    source.layers["flood_extent"] = pd.DataFrame(
        {"event": ["2-year", "4-year"], "area": [2e5, 4e5], "largest_depth": [3.0, 5.0], "geometry": shapes}
    )
    opened = open_page(write_report(source, tmp_path / "extent.html"))
    assert opened.complaints == []
    boxes = []
    for event in source.events:
        opened.choose_event(event)
        boxes.append(opened.page.locator("#map .extent").evaluate("p => p.getBBox().height"))
    assert boxes[1] / boxes[0] == pytest.approx(180 / 100, rel=0.01)


def test_crossings_are_on_the_map_and_in_their_table(open_page, tmp_path):
    source = _made_up(4, events=2)
    verdicts = {
        "C-1": ("crest not reached", "crest not reached"),
        "C-2": ("within freeboard", "over the crest"),
        "C-3": ("crest not reached", "within freeboard"),
    }
    rows = [
        (name, "Mill Road", "Long Creek", event, 100.0 + e, 803.21 + e, 805.0, 1.79 - e, 512.0, "4-year", 2.5,
         verdicts[name][e], i + 1, "ok", shapely.Point(512020 + 40 * i, 4640137))
        for i, name in enumerate(verdicts) for e, event in enumerate(source.events)
    ]  # fmt: skip
    columns = (
        "crossing_id road stream event discharge stage crest freeboard crest_discharge first_event_over "
        "required_opening verdict rank status geometry"
    )
    source.layers["crossings"] = pd.DataFrame(rows, columns=columns.split())
    opened = open_page(write_report(source, tmp_path / "crossings.html"))
    assert opened.complaints == []
    marks = opened.page.locator("#map .crossing")
    fills = {}
    for e, event in enumerate(source.events):
        opened.choose_event(event)
        assert opened.column("Verdict", "crossings") == [both[e] for both in verdicts.values()]
        assert opened.column("Stage", "crossings") == [f"{803.21 + e:.2f}"] * 3
        for both, mark in zip(verdicts.values(), marks.all(), strict=True):
            fills.setdefault(both[e], set()).add(mark.get_attribute("fill"))
    assert len(set().union(*fills.values())) == 3
    assert all(len(fill) == 1 for fill in fills.values())
    opened.page.locator("#crossings-status").select_option("over the crest")
    assert opened.column("Crossing", "crossings") == ["C-2"]
    opened.page.locator("#crossings-table tbody button").click()
    assert float(opened.page.locator("#map").get_attribute("viewBox").split()[2]) < 10_000 / 3
    assert "Crossings at 4-year: 1 crest not reached, 1 over the crest, 1 within freeboard." in re.sub(
        r"\s+", " ", opened.page.locator("main").inner_text()
    )
    assert opened.complaints == []


def test_a_study_of_crossings_alone_shows_them(open_page, tmp_path):
    source = _made_up(0)
    columns = (
        "crossing_id road stream event discharge stage crest freeboard crest_discharge first_event_over "
        "required_opening verdict rank status geometry"
    )
    verdicts = {"2-year": "crest not reached", "4-year": "over the crest"}
    place = shapely.Point(512020, 4640137)
    rows = [
        ("C-1", "Mill Road", "Long Creek", event, 100.0 * (e + 1), 803.21 + e, 805.0, 1.79 - e, 512.0,
         "4-year", 2.5, verdict, 1, "ok", place)
        for e, (event, verdict) in enumerate(verdicts.items())
    ]  # fmt: skip
    source.layers["crossings"] = pd.DataFrame(rows, columns=columns.split())
    opened = open_page(write_report(source, tmp_path / "alone.html"))
    for event, verdict in verdicts.items():
        opened.choose_event(event)
        assert opened.column("Verdict", "crossings") == [verdict]
    text = re.sub(r"\s+", " ", opened.page.locator("main").inner_text())
    assert "Design flows: 2-year (100 ft³/s); 4-year (200 ft³/s)." in text
    assert "ratings only" not in text
    assert "Crossings at 4-year: 1 over the crest." in text
    assert opened.complaints == []


# --------------------------------------------------------------------------------------------------
# In a notebook


def test_explore_shows_the_map_in_a_frame(open_page, results, tmp_path):
    path = tmp_path / "notebook.html"
    html = results.explore(height=600)._repr_html_()
    path.write_text(f"<!doctype html><title>notebook</title><body>{html}", encoding="utf-8")
    opened = open_page(path)
    assert opened.complaints == []
    frame = opened.page.frame_locator("iframe")
    third = results.sections["section_id"].iloc[2]
    frame.locator("#map g.line").nth(2).focus()
    assert frame.locator("#panel-title").inner_text() == f"Section {third}"
    assert frame.locator("#sections-table").count() == 0
    saved = results.explore().save(tmp_path / "map.html")
    assert "Section" in saved.read_text(encoding="utf-8")


def test_results_section_and_rating_show_themselves(results):
    from terrain2q import Section

    html = results._repr_html_()
    assert results.sections["section_id"].iloc[0] in html
    assert f"{results.design_stages['stage'].iloc[0]:.2f}" in html
    assert "licensed engineer" in html
    section = Section([0, 10, 20], [103.0, 100.0, 103.0], n=0.035, section_id="<b>7</b>")
    html = section._repr_html_()
    assert "data:image/svg+xml" in html
    assert "<b>7</b>" not in html
    assert "0.035" in html
    html = section.rating(0.002)._repr_html_()
    assert "data:image/svg+xml" in html
    assert "discharge" in html


# --------------------------------------------------------------------------------------------------
# The gallery


def test_pictures_of_the_gallery_can_be_made_and_are_small(browser, results):
    docs = Path(__file__).parents[1] / "docs"
    page = (docs / "gallery.md").read_text(encoding="utf-8")
    shown = dict(re.findall(r"!\[([^\]]+)\]\(([^)]+\.png)\)", page))
    assert len(shown) == 3
    assert sum((docs / name).stat().st_size for name in shown.values()) < 400_000
    spec = importlib.util.spec_from_file_location("make_pictures", docs / "make_pictures.py")
    pictures = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(pictures)
    made = {"section.png": pictures.section_picture(read_folder(results.folder))}
    made |= pictures.report_pictures(results.folder / "report.html", browser)
    assert set(made) == set(shown.values())
    for name, png in made.items():
        width, height = (int.from_bytes(png[i : i + 4], "big") for i in (16, 20))
        kept = (docs / name).read_bytes()
        assert width == int.from_bytes(kept[16:20], "big")
        assert height > 300
