"""Crossings of a whole study: layers and files, without cut lines, in feet and in metres."""

from __future__ import annotations

import re
from pathlib import Path

import geopandas
import numpy as np
import pandas as pd
import pytest
import shapely
from _county import CRS, N, make_valleys, roads, streams, write_dem
from test_sheets import text_of, worked_out_again

from terrain2q import run
from terrain2q.columns import LAYERS
from terrain2q.errors import InputError
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
        asked = [*rows["discharge"], rows["crest_discharge"].iloc[0]]
        # table, slope and constant give each discharge, that at the crest among them, to three figures
        assert sorted(q for q, _ in worked) == pytest.approx(sorted(asked), rel=1e-3)
        for printed, again in worked:
            assert again == pytest.approx(printed, rel=2e-3)
        at_section = dict(re.findall(rf"^\s*(.+?): Q = .*stage found {number}", sheet, re.M))
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


def test_every_number_of_the_demonstration_can_be_worked_out_from_the_sheets(tmp_path):
    """Weir, opening, tailwater and probability again from what is printed, by formulas written out here."""
    from scipy.integrate import quad
    from scipy.stats import norm

    options = {"output.folder": str(tmp_path), "output.report": "false", "output.sheets": "flagged"}
    table = run(SAMPLE / "study.toml", options).crossings
    text = text_of(tmp_path / "calculation_sheets.pdf")
    _, *parts = re.split(r"^\f?Crossing (.+?)(?: \(continued\))?\s{2,}Ambersole.*$", text, flags=re.M)
    sheets: dict[str, str] = {}
    for name, page in zip(parts[::2], parts[1::2], strict=True):
        sheets[name] = sheets.get(name, "") + page
    assert set(sheets) == {"C-1", "C-2", "C-3"}

    def value(text: str) -> float:
        return float(text.replace("−", "-"))

    checked = {"weir": 0, "opening": 0, "tailwater": 0, "probability": 0, "jump": 0}
    for name, rows in table.groupby("crossing_id"):
        sheet, flat = sheets[name], " ".join(sheets[name].split())
        slope, distance = map(value, re.search(r"S × distance = (\S+) × (\S+) =", flat).groups())
        fall, crest = slope * distance, rows["crest"].iloc[0]

        listed = sheet[sheet.find("Water over the road") : sheet.find("Tailwater at the road")]
        profile = np.array(
            [(value(a), value(b)) for a, b in re.findall(r"(−?\d+\.\d\d) (\d+\.\d{3})(?=;?\s)", listed)]
        )
        for row in rows.itertuples():
            if not row.weir_discharge > 0:
                assert row.stage <= crest
                assert row.road_width_under_water == row.largest_depth_on_road == 0
                continue
            stage = value(re.search(rf"{row.event}: stage (\S+);", flat)[1])
            coefficient = value(re.search(r"C = (\S+) ft", flat)[1])
            assert stage == pytest.approx(row.stage, abs=6e-4)
            depth = stage - profile[:, 1]
            assert depth.max() == pytest.approx(row.largest_depth_on_road, abs=2e-3)
            flow = width = 0.0
            for (x1, d1), (x2, d2) in zip(
                np.c_[profile[:, 0], depth][:-1], np.c_[profile[:, 0], depth][1:], strict=True
            ):
                if max(d1, d2) <= 0:
                    continue
                wet = (x2 - x1) * (max(d1, d2) / abs(d1 - d2) if min(d1, d2) < 0 else 1.0)
                low, high = max(min(d1, d2), 0.0), max(d1, d2)
                mean = quad(lambda t, low=low, high=high: (low + t * (high - low)) ** 1.5, 0, 1)[0]
                width += wet
                flow += coefficient * wet * mean
            assert width == pytest.approx(row.road_width_under_water, rel=2e-3)
            assert flow == pytest.approx(row.weir_discharge, rel=2e-3)
            checked["weir"] += 1

        wanted = re.search(r"freeboard wanted \+ fall = (\S+) − (\S+) \+ (\S+) = (\S+) ft", flat)
        if wanted:
            assert value(wanted[1]) - value(wanted[2]) + fall == pytest.approx(value(wanted[4]), abs=2e-3)
            assert value(wanted[2]) == 1.0  # as the study file asks
        answered = rows[rows["required_opening"].notna()]
        assert bool(wanted) == bool(len(answered))
        for row in answered.itertuples():
            start, end, width = map(value, re.search(
                rf"{row.event}\s+(\S+) – (\S+)\s+(\S+)\s+\d+\s+0\.", sheet
            ).groups())  # fmt: skip
            assert width == pytest.approx(row.required_opening, abs=6e-3)
            assert end - start == pytest.approx(width, abs=0.011)
            block = sheet[sheet.index(f"{row.event}", sheet.index("walls at")) :]
            carried = 0.0
            for number, line in enumerate(block.splitlines()):
                found = re.search(r"(\d+)\s+(0\.\d+)\s+(\S+)\s+(\S+)\s+(\S+)\s+(\S+)$", line.strip())
                if not found or (number and "–" in line):
                    break
                n, area, around, conveyance, flow = map(value, found.groups()[1:])
                if area > 0.01:
                    again = 1.48592 / n * area * (area / around) ** (2 / 3)
                    assert again == pytest.approx(conveyance, rel=2e-3)
                assert conveyance * slope**0.5 == pytest.approx(flow, rel=2e-3, abs=1e-3)
                carried += flow
            assert carried >= row.discharge * (1 - 1e-3)
            checked["jump"] += carried > row.discharge * (1 + 1e-3)
            checked["opening"] += 1
            share = re.search(rf"{row.event} (\S+) / (\S+) = (\d\.\d+)", flat)
            assert value(share[1]) / value(share[2]) == pytest.approx(row.opening_share, rel=2e-3)

        for row in rows.itertuples():
            below, rise, there = map(value, re.search(
                rf"{row.event} (\S+) \+ (\S+) = (\S+) ft[;.]", flat[flat.index("Tailwater at the road") :]
            ).groups())  # fmt: skip
            reach = value(re.search(r"S × distance, (\S+) ft", flat)[1])
            assert rise == pytest.approx(slope * reach, abs=1.1e-3)
            assert below + rise == pytest.approx(there, abs=2e-3)
            assert there == pytest.approx(row.tailwater_stage, abs=1e-3)
            checked["tailwater"] += 1

        over = [r.event for r in rows.itertuples() if r.freeboard <= 0]
        assert rows["first_event_over"].iloc[0] == (over[0] if over else "")
        if rows["probability"].notna().any():
            q1, p1, q2, p2 = map(value, re.search(
                r"Between \S+ \((\S+) ft³/s, (\S+)\) and \S+ \((\S+) ft³/s, (\S+)\)", flat
            ).groups())  # fmt: skip
            share = np.log(rows["crest_discharge"].iloc[0] / q1) / np.log(q2 / q1)
            z = norm.isf(p1) + share * (norm.isf(p2) - norm.isf(p1))
            assert norm.sf(z) == pytest.approx(rows["probability"].iloc[0], rel=1e-3)
            assert value(re.search(r"probability (0\.\d+) a year", flat)[1]) == pytest.approx(
                norm.sf(z), abs=1e-4
            )
            checked["probability"] += 1
    assert checked == {"weir": 2, "opening": 6, "tailwater": 9, "probability": 1, "jump": 1}
