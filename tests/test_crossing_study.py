"""Crossings of a whole study: layers and files, without cut lines, in feet and in metres."""

from __future__ import annotations

import re
import sqlite3
from pathlib import Path

import geopandas
import numpy as np
import pandas as pd
import pytest
import shapely
from _county import CRS, N, make_valleys, roads, streams, write_dem
from scipy.integrate import quad
from scipy.stats import norm
from test_sheets import EVENT, ROW, text_of, worked_out_again

from terrain2q import Section, Subarea, run
from terrain2q.batches import crossings as crossing_batches
from terrain2q.batches import engines
from terrain2q.batches import run as run_module
from terrain2q.columns import COLUMNS, LAYERS
from terrain2q.errors import InputError
from terrain2q.hydraulics.widths import opening_parts
from terrain2q.jobs import crossings as crossing_job
from terrain2q.output.sheets import _stages_at_road, write_sheets
from terrain2q.process import check_study
from terrain2q.study import load_study
from terrain2q.units import FOOT

SAMPLE = Path(__file__).parents[1] / "sample_dem"


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    """Three valleys with roads, points, flows and a study without cut lines or slope."""
    folder = tmp_path_factory.mktemp("three")
    valleys = make_valleys(3)
    write_dem(folder / "dem.tif", valleys, noise=0.05)
    streams(valleys).to_file(folder / "data.gpkg", layer="streams")
    table = roads(valleys)
    table["traffic"] = [10, 900, 40]
    table.to_file(folder / "data.gpkg", layer="roads")
    points = geopandas.GeoDataFrame(
        {"crossing_id": ["a", "b", "c", "far"], "opening": [20.0, np.nan, 30.0, 40.0]},
        geometry=[shapely.Point(v.centre + 3.0, v.road.centroid.y) for v in valleys]
        + [shapely.Point(valleys[0].centre + 100.0, valleys[0].road.centroid.y + 200.0)],
        crs=CRS,
    )
    points.to_file(folder / "data.gpkg", layer="crossings")
    rows = ["event,discharge,probability,stream"]
    for v in valleys:
        rows += [f"10-year,{v.crest_discharge * 0.6:.4f},0.1,S{v.number}"]
        rows += [f"100-year,{v.crest_discharge * 1.5:.4f},0.01,S{v.number}"]
    (folder / "flows.csv").write_text("\n".join(rows) + "\n", encoding="utf-8")
    (folder / "study.toml").write_text(
        f"""
[study]
name = "Three valleys"
units = "si"
[terrain]
dem = "dem.tif"
[streams]
path = "data.gpkg|layer=streams"
id_field = "stream_id"
[land_cover]
default_n = {N}
[channel]
banks = "none"
[flows]
path = "flows.csv"
[crossings]
roads = "data.gpkg|layer=roads"
rank = ["traffic", "probability"]
[output]
report = false
sheets = "none"
overwrite = true
""",
        encoding="utf-8",
    )
    return folder, valleys


@pytest.fixture(scope="module")
def results(folder):
    return run(folder[0] / "study.toml", {"output.folder": str(folder[0] / "out")})


def test_a_study_of_roads_alone_needs_no_cut_lines(folder, results):
    table = results.crossings
    assert tuple(table.columns[:-1]) == LAYERS["crossings"].columns
    assert len(table) == 6
    assert len(results.sections) == 0
    assert results.answered_crossings == 3
    assert results.failed_crossings == 0
    valleys = folder[1]
    for row in table.itertuples():
        v = valleys[int(row.stream[1:])]
        assert row.crest == pytest.approx(v.crest_height, abs=0.05)
        assert row.crest_discharge == pytest.approx(v.crest_discharge, rel=0.03)
        assert row.verdict == {"10-year": "crest not reached", "100-year": "over the crest"}[row.event]
        assert row.first_event_over == "100-year"
        assert 0.01 < row.probability < 0.1
        assert row.geometry.distance(shapely.Point(v.centre, v.road.centroid.y)) < 6.0


def rows_of(path: Path) -> dict[str, list]:
    """Return the rows of every layer of a package, in their order."""
    with sqlite3.connect(path) as database:
        names = [n for (n,) in database.execute("SELECT table_name FROM gpkg_contents")]
        names = [n for n in names if n != "layer_styles"]  # these hold the time of writing
        return {name: database.execute(f'SELECT * FROM "{name}"').fetchall() for name in names}


@pytest.mark.parametrize("who", ["processes", "cluster"])
def test_several_processes_and_a_cluster_give_the_same_rows(folder, results, tmp_path, monkeypatch, who):
    # a crossing is a batch, and so are its rows; so far all three were one
    monkeypatch.setattr(crossing_job, "BATCH", 1)
    monkeypatch.setattr(crossing_batches, "ROWS", 1)
    monkeypatch.setattr(crossing_batches, "_WORTH_ANOTHER", 1)
    options = {"output.folder": str(tmp_path)}
    asked = []
    engine = getattr(engines, who)
    monkeypatch.setattr(run_module, who, lambda work, *more: asked.append(type(work)) or engine(work, *more))
    if who == "processes":
        run(folder[0] / "study.toml", options, jobs=2)
    else:
        distributed = pytest.importorskip("distributed")
        with distributed.LocalCluster(2, threads_per_worker=1, dashboard_address=None) as two:
            run(folder[0] / "study.toml", options, scheduler=two.scheduler_address)
    assert crossing_batches.Screening in asked
    assert crossing_batches.SectionRows in asked
    for name in ("results.gpkg", "crossing_sections.gpkg"):
        assert rows_of(tmp_path / name) == rows_of(folder[0] / "out" / name)
    assert (tmp_path / "crossings.csv").read_bytes() == (folder[0] / "out" / "crossings.csv").read_bytes()


def test_rank_goes_by_the_field_named(results):
    by_rank = results.crossings.drop_duplicates("crossing_id").sort_values("rank")
    assert by_rank["road"].tolist() == ["R1", "R2", "R0"]
    assert by_rank["rank"].tolist() == [1, 2, 3]


def test_files_hold_the_same_rows(results):
    names = {f.name for f in results.files}
    files = {"results.gpkg", "crossings.csv", "crossings.pdf", "crossing_sections.gpkg", "run.json"}
    assert files <= names
    layer = geopandas.read_file(results.folder / "results.gpkg", layer="crossings")
    csv = pd.read_csv(results.folder / "crossings.csv")
    assert list(csv.columns) == [*LAYERS["crossings"].columns, "x", "y"]
    for table in (layer, csv):
        assert table["crossing_id"].tolist() == results.crossings["crossing_id"].tolist()
        assert table["verdict"].tolist() == results.crossings["verdict"].tolist()
        assert table["crest"].to_numpy() == pytest.approx(results.crossings["crest"].to_numpy(), abs=1e-3)
    pdf = (results.folder / "crossings.pdf").read_bytes()
    assert pdf.startswith(b"%PDF")
    # the table, the map, and a page for each
    assert pdf.count(b"/Type /Page\n") + pdf.count(b"/Type /Page ") == 5
    assert "3 crossings" in results.summary_text()
    assert len(results.summary()["crossings"]) == 6


def test_sections_can_be_run_again_as_cut_lines(folder, results):
    options = {
        "cut_lines.path": str(results.folder / "crossing_sections.gpkg|layer=cut_lines"),
        "cut_lines.id_field": "section_id",
        "slope.field": "slope",
        "output.folder": str(folder[0] / "again"),
        "crossings.panels": 0,
    }
    again = run(folder[0] / "study.toml", options)
    assert len(again.sections) == 6
    stages = again.design_stages.set_index(["section_id", "event"])["stage"]
    for row in results.crossings.itertuples():
        stage = stages[f"{row.crossing_id} approach", row.event] - row.slope * row.approach_distance
        # the line alone has the noise that the mean of five lines has not
        assert row.stage == pytest.approx(stage, abs=0.05)


@pytest.mark.parametrize("units", ["si", "us"])
def test_each_number_of_a_crossing_follows_from_its_sheet(folder, results, units, tmp_path):
    options = {
        "study.units": units,
        "output.folder": str(tmp_path),
        "output.sheets": "flagged",
        "crossings.panels": 0,
    }
    found = run(folder[0] / "study.toml", options)
    assert len(found.sections) == 0
    text = text_of(tmp_path / "calculation_sheets.pdf")
    _, *parts = re.split(r"^\f?Crossing (.+?)(?: \(continued\))?\s{2,}Three valleys.*$", text, flags=re.M)
    sheets: dict[str, str] = {}
    for name, page in zip(parts[::2], parts[1::2], strict=True):
        sheets[name] = sheets.get(name, "") + page
    table = found.crossings
    assert set(sheets) == set(table["crossing_id"])
    number = r"(−?[\d.]+)"

    def value(text: str) -> float:
        return float(text.replace("−", "-"))

    for name, rows in table.groupby("crossing_id"):
        sheet = sheets[name]
        worked = worked_out_again(sheet)
        # each event at the approach and at the tailwater section
        asked = [*rows["discharge"], *rows["discharge"], rows["crest_discharge"].iloc[0]]
        # table, slope and constant give each discharge, that at the crest among them, to three figures
        assert sorted(q for q, _ in worked) == pytest.approx(sorted(asked), rel=1e-3)
        for printed, again in worked:
            assert again == pytest.approx(printed, rel=2e-3)
        above = sheet[: sheet.index("Tailwater at the road")]
        at_section = dict(
            re.findall(rf"^\s*(.+?): Q = .*(?:stage found|carried at stage) {number}", above, re.M)
        )
        slope, distance = re.search(rf"S × distance = {number} × {number}", sheet).groups()
        fall = value(slope) * value(distance)
        for row in rows.itertuples():
            level, down, stage, crest, same, room = map(value, re.search(
                rf"{row.event}: {number} − {number} = {number};\s+{number} − {number} = {number}", sheet
            ).groups())  # fmt: skip
            assert level == pytest.approx(value(at_section[row.event]), abs=0.006)
            assert down == pytest.approx(fall, abs=2e-3 + 1e-3 * fall)
            assert level - down == pytest.approx(stage, abs=0.0021)
            assert crest - stage == pytest.approx(room, abs=0.0021)
            assert same == stage
            assert (stage, crest, room) == pytest.approx((row.stage, row.crest, row.freeboard), abs=6e-4)
        crest, down, level = map(value, re.search(
            rf"reaches the crest at {number} \+ {number} = {number}", sheet
        ).groups())  # fmt: skip
        assert crest + down == pytest.approx(level, abs=0.0021)
        assert level == pytest.approx(value(at_section["crest reached"]), abs=0.006)


def test_feet_and_metres_agree(folder, results):
    options = {
        "study.units": "us",
        "output.folder": str(folder[0] / "out_us"),
        "crossings.panels": 0,
        "flows.path": str(folder[0] / "flows_us.csv"),
    }
    flows = pd.read_csv(folder[0] / "flows.csv")
    flows["discharge"] /= FOOT**3
    flows.to_csv(folder[0] / "flows_us.csv", index=False)
    us = run(folder[0] / "study.toml", options)
    assert not (us.folder / "crossings.pdf").exists()
    si, other = results.crossings, us.crossings
    assert other["verdict"].tolist() == si["verdict"].tolist()
    assert other["crest"].to_numpy() * FOOT == pytest.approx(si["crest"].to_numpy())
    assert other["crest_discharge"].to_numpy() * FOOT**3 == pytest.approx(si["crest_discharge"].to_numpy())
    assert other["weir_discharge"].to_numpy() * FOOT**3 == pytest.approx(si["weir_discharge"].to_numpy())
    assert other["slope"].to_numpy() == pytest.approx(si["slope"].to_numpy())


def test_points_keep_their_rows_and_fields(folder):
    options = {
        "output.folder": str(folder[0] / "out_points"),
        "crossings.path": str(folder[0] / "data.gpkg|layer=crossings"),
        "crossings.opening_width_field": "opening",
        "crossings.rank": ["probability"],
        "crossings.panels": 1,
    }
    found = run(folder[0] / "study.toml", options)
    table = found.crossings
    assert set(table["crossing_id"]) == {"a", "b", "c", "far"}
    far = table[table["crossing_id"] == "far"]
    assert far["status"].tolist() == ["failed", "failed"]
    assert far["rank"].tolist() == [4, 4]
    assert far["verdict"].tolist() == ["", ""]
    assert far["stage"].isna().all()
    first = table[(table["crossing_id"] == "a") & table["required_opening"].notna()]
    assert (first["opening_share"] * first["required_opening"]).to_numpy() == pytest.approx(20.0)
    assert table.loc[table["crossing_id"] == "b", "opening_share"].isna().all()
    assert found.failed_crossings == 1
    assert any(f.code == "crossing-off-stream" for f in found.findings_list)


def test_wrong_inputs_stop_the_run(folder):
    study = folder[0] / "study.toml"
    with pytest.raises(InputError) as caught:
        check_study(load_study(study, {"crossings.crest_field": "crst"}))
    assert caught.value.code == "field-missing"
    assert "traffic" in caught.value.fix
    text = study.read_text(encoding="utf-8")
    bare = folder[0] / "bare.toml"
    bare.write_text(text.replace('roads = "data.gpkg|layer=roads"\n', ""), encoding="utf-8")
    with pytest.raises(InputError) as caught:
        load_study(bare)
    assert caught.value.code == "key-missing"
    dry = folder[0] / "dry.toml"
    dry.write_text(text[: text.index("[streams]")] + text[text.index("[land_cover]") :], encoding="utf-8")
    with pytest.raises(InputError) as caught:
        check_study(load_study(dry))
    assert (caught.value.code, caught.value.where) == ("key-missing", "[crossings]")


def test_check_tells_of_the_places(folder):
    options = {"crossings.path": str(folder[0] / "data.gpkg|layer=crossings")}
    found = check_study(load_study(folder[0] / "study.toml", options))
    assert [f.feature_id for f in found if f.code == "crossing-off-stream"] == ["far"]


def test_text_in_the_fields_of_crossings_is_told_of(folder):
    points = geopandas.read_file(folder[0] / "data.gpkg", layer="crossings")
    points["opening"] = ["20 m", "", "30", None]
    points["class"] = ["major", "minor", "minor", None]
    points.to_file(folder[0] / "text.gpkg", layer="crossings")
    options = {
        "crossings.path": str(folder[0] / "text.gpkg|layer=crossings"),
        "crossings.opening_width_field": "opening",
        "output.folder": str(folder[0] / "text"),
        "crossings.panels": 0,
    }
    found = run(folder[0] / "study.toml", options)
    assert [f.feature_id for f in found.findings_list if f.code == "field-not-number"] == ["a"]
    assert set(found.crossings.loc[found.crossings["crossing_id"] == "a", "status"]) == {"doubtful"}
    with pytest.raises(InputError) as caught:
        check_study(load_study(folder[0] / "study.toml", {**options, "crossings.rank": ["class"]}))
    assert caught.value.code == "value-not-allowed"
    assert "'major'" in str(caught.value)
    with pytest.raises(InputError) as caught:
        check_study(load_study(folder[0] / "study.toml", {**options, "crossings.rank": ["probabilty"]}))
    assert "'probability'" in caught.value.fix


def test_a_slope_field_that_is_not_there_stops_a_study_without_cut_lines(folder):
    with pytest.raises(InputError) as caught:
        check_study(load_study(folder[0] / "study.toml", {"slope.field": "slop"}))
    assert (caught.value.code, caught.value.where) == ("field-missing", "[slope] field")


def test_roads_that_meet_no_stream_are_a_finding(folder):
    far = roads(folder[1])
    far.geometry = far.geometry.translate(0.0, 2000.0)
    far.to_file(folder[0] / "far.gpkg", layer="roads")
    options = {
        "crossings.roads": str(folder[0] / "far.gpkg|layer=roads"),
        "crossings.rank": ["probability"],
        "output.folder": str(folder[0] / "none"),
    }
    (finding,) = check_study(load_study(folder[0] / "study.toml", options))
    assert (finding.code, finding.severity) == ("crossings-none", "failed")
    assert "apart" in finding.message
    found = run(folder[0] / "study.toml", options)
    assert [f.code for f in found.findings_list] == ["crossings-none"]
    assert "0 crossings, 0 without a full answer\n" in found.summary_text()


def test_flows_and_crossings_that_do_not_meet_are_findings(folder):
    study = folder[0] / "study.toml"
    text = study.read_text(encoding="utf-8").replace('[flows]\npath = "flows.csv"\n', "")
    dry = folder[0] / "no_flows.toml"
    dry.write_text(text, encoding="utf-8")
    (finding,) = check_study(load_study(dry))
    assert (finding.code, finding.severity) == ("flow-missing", "failed")
    assert "[flows]" in finding.message
    rows = "event,discharge,crossing\n10-year,20,\n10-year,25,R0 at S0\n10-year,30,R1 at S11\n"
    (folder[0] / "by_crossing.csv").write_text(rows, encoding="utf-8")
    found = check_study(load_study(study, {"flows.path": str(folder[0] / "by_crossing.csv")}))
    (finding,) = [f for f in found if f.code == "crossing-unknown"]
    assert finding.feature_id == "R1 at S11"
    assert "'R1 at S1'" in finding.message


def test_the_demonstration_has_three_verdicts(tmp_path):
    options = {"output.folder": str(tmp_path), "output.report": "false", "output.sheets": "none"}
    found = run(SAMPLE / "study.toml", options)
    table = found.crossings
    verdicts = {
        name: dict(zip(rows["event"], rows["verdict"], strict=True)) for name, rows in table.groupby("road")
    }
    # A lane on the floodplain: awash at the 10-year flow, deep under water at the 50-year flow.
    assert verdicts["Low Sedge Lane"] == {
        "10-year": "within freeboard", "50-year": "over the crest", "100-year": "over the crest",
    }  # fmt: skip
    # A bridge with its deck missing and a high fill over a culvert: far above the water.
    for name in ("Pellwick Road", "Orrinfell Road"):
        assert set(verdicts[name].values()) == {"crest not reached"}
    codes = {(f.feature_id, f.code): f.severity for f in found.findings_list if f.layer == "crossings"}
    assert codes["C-2", "deck-bridged"] == "note"  # its road line says that it is a bridge
    assert codes["C-3", "culvert-ponds"] == "doubtful"
    assert ("C-1", "deck-bridged") not in codes
    crest = table.drop_duplicates("crossing_id").set_index("crossing_id")["crest"]
    assert crest["C-3"] == 832.63  # surveyed
    assert table.loc[table["crossing_id"] == "C-1", "rank"].tolist() == [1, 1, 1]


# --- by hand, from the sheets alone -------------------------------------------------------------------

NUMBER = r"(−?[\d.]*\d)"


def value(text: str) -> float:
    return float(text.replace("−", "-"))


def numbers_in(pattern: str, text: str) -> list[float]:
    """Return the numbers of a place that a sheet has once."""
    found = re.findall(pattern.replace("#", NUMBER), text)
    assert len(found) == 1, (pattern, found)
    return [value(v) for v in ([found[0]] if isinstance(found[0], str) else found[0])]


def sheets_of(text: str, study: str) -> dict[str, str]:
    _, *parts = re.split(rf"^\f?Crossing (.+?)(?: \(continued\))?\s{{2,}}{study}.*$", text, flags=re.M)
    sheets: dict[str, str] = {}
    for name, page in zip(parts[::2], parts[1::2], strict=True):
        sheets[name] = sheets.get(name, "") + page
    return sheets


def road_of(sheet: str, events: int) -> np.ndarray:
    """Return station, elevation and the flow of each piece by event, from the columns of a sheet."""
    part = sheet[sheet.index("The road where it lies below") : sheet.index("Required opening\n")]
    rows = []
    for line in part.splitlines():
        words = line.split()
        if words and all(re.fullmatch(NUMBER + "|–", w) for w in words):
            assert len(words) % (2 + events) == 0
            cells = np.array([np.nan if w == "–" else value(w) for w in words])
            rows += cells.reshape(-1, 2 + events).tolist()
    return np.array(sorted(rows))


def over_the_road(road: np.ndarray, stage: float, coefficient: float) -> tuple[float, float, float]:
    """Return width, depth and flow over a road by quadrature; each piece is held to what is printed."""
    width = flow = 0.0
    depth = stage - road[:, 1]
    for (x1, x2), (d1, d2), printed in zip(
        np.c_[road[:-1, 0], road[1:, 0]], np.c_[depth[:-1], depth[1:]], road[:-1, 2], strict=True
    ):
        if max(d1, d2) <= 0:
            assert np.isnan(printed)
            continue
        mean = quad(lambda t, a=d1, b=d2: max(a + t * (b - a), 0.0) ** 1.5, 0, 1, limit=200)[0]
        q = coefficient * (x2 - x1) * mean
        # q goes with the depth to 2.5 at the most, and depths are known to a thousandth
        assert q == pytest.approx(printed, rel=2e-3 + 2.5e-3 / max(d1, d2))
        width += (x2 - x1) * (max(d1, d2) / abs(d1 - d2) if min(d1, d2) < 0 else 1.0)
        flow += q
    return width, float(depth.max()), flow


def openings_of(sheet: str, slope: float, constant: float) -> dict[str, dict[str, float]]:
    """Return width, what is carried and what a narrower one carries, of each event that has an opening."""
    part = sheet[sheet.index("Required opening\n") : sheet.index("Tailwater at the road")]
    found: dict[str, dict[str, float]] = {}
    for line in part.splitlines():
        first = re.match(r"^(\S+)\s+#\s+–\s+#\s+#\s+(\d.*)$".replace("#", NUMBER), line)
        cells = (first[5] if first else line).split()
        if not all(re.fullmatch(NUMBER, c) for c in cells) or len(cells) != (8 if first else 6):
            continue
        n, area, around, conveyance, flow = map(value, cells[1:6])
        again = constant / n * area * (area / around) ** (2 / 3)
        assert again == pytest.approx(conveyance, rel=2e-3)
        if first:
            start, end, width = (value(first[i]) for i in (2, 3, 4))
            assert end - start == pytest.approx(width, abs=0.011)
            one = found[first[1]] = {"width": end - start, "carried": 0.0, "narrower": value(cells[7])}
            printed = value(cells[6])
        one["carried"] += again * slope**0.5
        assert again * slope**0.5 == pytest.approx(flow, rel=2e-3)
    if found:
        assert one["carried"] == pytest.approx(printed, rel=2e-3)
    return found


def by_hand(sheet: str) -> dict[str, dict[str, float | str]]:
    """Return every number of a crossing by event, worked out from the text of its sheet."""
    flat = " ".join(sheet.split())
    crest = numbers_in("Crest # ft, where", flat)[0]
    slope, distance = numbers_in("S × distance = # × # =", flat)
    constant = value(re.search(f"k = {NUMBER}", flat)[1])
    fall = slope * distance
    wanted = numbers_in(r"freeboard wanted of # ft", flat)[0]
    side = re.search(r"Crest from stream ([\d.]+) ft to the (left|right)", flat)

    # the flow that n, A and P of each table give at the stage above it: of the approach section down to the
    # crest, then of the tailwater section
    found = [
        (event[1], float(event[3]), again)
        for event, (_, again) in zip(EVENT.finditer(sheet), worked_out_again(sheet), strict=True)
    ]
    last = [event for event, *_ in found].index("crest reached")
    above = {event: (stage, q) for event, stage, q in found[: last + 1]}
    under = {event: (stage, q) for event, stage, q in found[last + 1 :]}
    at_crest = above.pop("crest reached")
    assert at_crest[0] == pytest.approx(crest + fall, abs=0.006)
    out: dict[str, dict] = {}
    asked = {event: value(re.search(rf"^{event}\s+(\S+)\s+\S+\s+\S+ −", sheet, re.M)[1]) for event in above}
    assert set(under) == set(above)
    wet = re.findall(r"(\S+): stage \S+; \d+ pieces", flat)
    road = road_of(sheet, len(wet)) if wet else None
    openings = openings_of(sheet, slope, constant)
    reach = numbers_in("downstream edge, # × # =", flat)[1]
    allowed = numbers_in("freeboard wanted \\+ fall = # − # \\+ # = # ft", flat)
    assert allowed[0] - allowed[1] + fall == pytest.approx(allowed[3], abs=2e-3)
    assert allowed[1] == pytest.approx(wanted, abs=1e-3)
    for event, flow in asked.items():
        level = numbers_in(rf"{event}: # − # = #; ", flat)[0]
        assert level == pytest.approx(above[event][0], abs=0.006)
        stage = level - fall
        row = {
            "discharge": above[event][1], "stage": stage, "crest": crest, "freeboard": crest - stage,
            "crest_discharge": at_crest[1], "slope": slope, "approach_distance": distance,
            "overflow_station": value(side[1]) * (1 if side[2] == "right" else -1),
            "road_width_under_water": 0.0, "largest_depth_on_road": 0.0, "weir_discharge": 0.0,
            "required_opening": np.nan, "opening_share": np.nan, "probability": np.nan,
        }  # fmt: skip
        assert above[event][1] == pytest.approx(flow, rel=2e-3)
        assert under[event][1] == pytest.approx(flow, rel=2e-3)
        row["verdict"] = (
            "over the crest" if crest - stage <= 0
            else "within freeboard" if crest - stage < wanted else "crest not reached"
        )  # fmt: skip
        if stage > crest:
            coefficient = numbers_in("mean, C = # ft", flat)[0]
            mine = road[:, [0, 1, 2 + wet.index(event)]]
            row["road_width_under_water"], row["largest_depth_on_road"], row["weir_discharge"] = (
                over_the_road(mine, stage, coefficient)
            )
        if event in openings:
            one = openings[event]
            # the least: it passes the flow, and with a little less width it does not
            assert one["narrower"] < flow <= one["carried"] * (1 + 2e-3)
            row["required_opening"] = one["width"]
            there = re.search(rf"{event} ([\d.]+) / [\d.]+ = [\d.]+[;.]", flat)
            row["opening_share"] = value(there[1]) / one["width"]
        else:
            said = rf"{event}: no opening passes # ft³/s at this stage; the most that one passes is #\.(?!\d)"
            assert numbers_in(said, flat)[1] < flow
        below_road = numbers_in(rf"{event}: # \+ # = # ft, # (?:above|below) the crest", flat)[0]
        assert below_road == pytest.approx(under[event][0], abs=0.006)
        row["tailwater_stage"] = below_road + slope * reach
        out[event] = row
    over = [e for e in asked if out[e]["freeboard"] <= 0]
    first = min(over, key=asked.get, default="")
    if "share = ln(" in flat:
        q1, p1, q2, p2 = numbers_in(r"Between \S+ \(# ft³/s, #\) and \S+ \(# ft³/s, #\)", flat)
        share = np.log(at_crest[1] / q1) / np.log(q2 / q1)
        assert 0 <= share <= 1
        probability = norm.sf(norm.isf(p1) + share * (norm.isf(p2) - norm.isf(p1)))
    else:
        low, high = numbers_in("lies beyond the events, # to # ft³/s", flat)
        assert not low <= at_crest[1] <= high
        probability = np.nan
    for row in out.values():
        row["first_event_over"], row["probability"] = first, probability
    return out


LAST_DIGIT = {
    "stage": 2e-3, "crest": 1e-3, "freeboard": 2e-3, "tailwater_stage": 2e-3, "overflow_station": 0.051,
    "approach_distance": 0.051, "required_opening": 0.011, "opening_share": 1e-3,
    "largest_depth_on_road": 2e-3,
}  # fmt: skip
"""One unit of what is printed; elsewhere 0.2 %."""


def assert_by_hand(rows: pd.DataFrame, worked: dict[str, dict]) -> None:
    """Hold the rows of a crossing to what was worked out: numbers of every column but rank, and verdicts."""
    assert set(rows["event"]) == set(worked)
    for row in rows.to_dict("records"):
        mine = worked[row["event"]]
        for name in LAYERS["crossings"].columns:
            if name in ("crossing_id", "road", "stream", "event", "rank", "status"):
                continue
            if isinstance(row[name], str):
                assert row[name] == mine[name], name
            else:
                near = {"abs": LAST_DIGIT[name]} if name in LAST_DIGIT else {"rel": 2e-3}
                assert row[name] == pytest.approx(mine[name], nan_ok=True, **near), name


@pytest.fixture(scope="module")
def demonstration(tmp_path_factory):
    """The crossings of the sample study, and the text of each sheet, made from the output folder alone."""
    folder = tmp_path_factory.mktemp("demonstration")
    options = {"output.folder": str(folder), "output.report": "false", "output.sheets": "none"}
    table = run(SAMPLE / "study.toml", options).crossings
    write_sheets(folder)
    return table, sheets_of(text_of(folder / "calculation_sheets.pdf"), "Ambersole")


def test_every_number_of_the_demonstration_can_be_worked_out_from_the_sheets(demonstration):
    table, sheets = demonstration
    assert set(sheets) == {"C-1", "C-2", "C-3"}
    worked = {name: by_hand(sheet) for name, sheet in sheets.items()}
    for name, rows in table.groupby("crossing_id"):
        assert_by_hand(rows, worked[name])
    # the sample has a case of each
    known = table[["weir_discharge", "required_opening", "opening_share", "probability"]]
    assert (known.notna() & (known != 0)).sum().tolist() == [2, 6, 6, 3]

    def order(name: str):
        """Likelier passed first; beyond the events by the room, and all of these lie above them."""
        largest = max(worked[name].values(), key=lambda r: r["discharge"])
        chance = largest["probability"]
        room = largest["crest_discharge"] / largest["discharge"]
        return (-chance if np.isfinite(chance) else 0.0, room, largest["freeboard"])

    ranks = table.drop_duplicates("crossing_id").set_index("crossing_id")["rank"]
    assert [ranks[n] for n in sorted(worked, key=order)] == [1, 2, 3]


@pytest.mark.parametrize(
    "column",
    [n for n in LAYERS["crossings"].columns if COLUMNS[n].dtype is float] + ["verdict", "first_event_over"],
)
def test_a_wrong_number_would_not_pass(demonstration, column):
    table, sheets = demonstration
    mine = table[table["crossing_id"] == ("C-2" if column.startswith(("required", "opening")) else "C-1")]
    worked = by_hand(sheets[mine["crossing_id"].iloc[0]])
    assert_by_hand(mine, worked)
    wrong = mine.copy()
    if COLUMNS[column].dtype is float:
        wrong[column] += np.maximum(4e-3 * wrong[column].abs(), 3 * LAST_DIGIT.get(column, 0.0))
    else:
        wrong[column] = wrong[column].iloc[::-1].to_numpy() + "x"
    with pytest.raises(AssertionError, match=column):
        assert_by_hand(wrong, worked)


def largest_area(sheet: str) -> str:
    """Return the largest area in the tables of a sheet by subarea."""
    return max((numbers.split()[0] for *_, numbers in ROW.findall(sheet)), key=float)


MISPRINTS = {
    "a point of the road": ("C-1", lambda sheet: f"{road_of(sheet, 2)[60, 1]:.3f}"),
    "an area of the approach section": ("C-1", largest_area),
    "an area of the tailwater section": (
        "C-1", lambda sheet: largest_area(sheet[sheet.index("C-1 tailwater") :]),
    ),
    "an area of the opening": (
        "C-2", lambda sheet: re.search(r"\n10-year +\S+ – \S+ +\S+ +\d+ +0\.\d+ +([\d.]+) ", sheet)[1],
    ),
}  # fmt: skip
"""By what is misprinted, the crossing and the number as its sheet has it."""


@pytest.mark.parametrize("what", MISPRINTS)
def test_a_number_misprinted_would_not_pass(demonstration, what):
    table, sheets = demonstration
    crossing, find = MISPRINTS[what]
    sheet = sheets[crossing]
    printed = find(sheet)
    wrong = re.sub(
        rf"(?<=\s){re.escape(printed)}(?=\s)", lambda found: f"{1.005 * float(found[0]):.3f}", sheet, count=1
    )
    assert wrong != sheet
    with pytest.raises(AssertionError):
        assert_by_hand(table[table["crossing_id"] == crossing], by_hand(wrong))


def test_the_index_has_the_stage_of_each_event(demonstration, tmp_path):
    table, _ = demonstration
    rows = table[table["crossing_id"] == "C-1"].to_dict("records")
    assert _stages_at_road(rows) == "830.92, 832.57, 833.42"
    rows[1]["stage"] = np.nan
    assert _stages_at_road(rows) == "830.92, –, 833.42"
    rows = rows * 4  # more than there is room for
    assert _stages_at_road(rows) == "830.92 to 833.42"
    for row in rows:
        row["stage"] = np.nan
    assert _stages_at_road(rows) == "–"


def test_a_composite_n_acts_in_the_parts_of_an_opening():
    x, z = [0.0, 10.0, 14.0, 18.0, 22.0, 30.0], [6.0, 5.0, 0.0, 0.0, 5.0, 6.0]
    edges, ns = [0.0, 10.0, 16.0, 22.0, 30.0], [0.08, 0.03, 0.06, 0.08]
    zones = ["left floodplain", "channel", "channel", "right floodplain"]
    parts = [
        Subarea(a, b, n, "", zone) for a, b, n, zone in zip(edges[:-1], edges[1:], ns, zones, strict=True)
    ]
    for rule in ("divide", "horton", "pavlovskii"):
        section = Section(x, z, parts, composite=rule)
        width = section.required_opening(30.0, 4.0, 0.002)
        found = opening_parts(section, width, 4.0)
        assert found.end - found.start == pytest.approx(width)
        assert found.conveyance.sum() * 0.002**0.5 == pytest.approx(30.0, rel=1e-6)
