"""The whole job on the sample study, and on ground of closed form."""

import json
import shutil
import sqlite3
from pathlib import Path

import geopandas
import numpy as np
import pandas as pd
import pytest
import rasterio
from rasterio.transform import from_origin
from scipy.optimize import brentq
from shapely import LineString, Polygon

from terrain2q import Section, Subarea, process, run
from terrain2q.commands import main
from terrain2q.errors import InputError, OutputError
from terrain2q.ground import layers
from terrain2q.study import load_study

SAMPLE = Path(__file__).parents[1] / "sample_dem"


@pytest.fixture(scope="module")
def sample(tmp_path_factory):
    folder = tmp_path_factory.mktemp("sample")
    return run(SAMPLE / "study.toml", {"output.folder": str(folder)})


def test_sample_study_answers_every_section(sample):
    assert sample.failed_sections == 0
    assert set(sample.design_stages["event"]) == {"10-year", "50-year", "100-year"}
    for name, table in sample.layers.items():
        assert len(table), name


def test_land_cover_read_only_where_sections_are_gives_the_same(sample, tmp_path, monkeypatch):
    monkeypatch.setattr(layers, "LARGE_LAYER", 10)
    # a cover that goes on far beyond the study, and has classes there that no line meets
    cover = geopandas.read_file(SAMPLE / "valley.gpkg", layer="land_cover")
    field = load_study(SAMPLE / "study.toml").land_cover.class_field
    far = geopandas.GeoDataFrame(
        {field: ["pasture"] * 50},
        geometry=[Polygon([(x, 0), (x + 90, 0), (x + 90, 90), (x, 90)]) for x in range(0, 5000, 100)],
        crs=cover.crs,
    )
    options = {"output.folder": str(tmp_path / "out"), "output.report": "false", "output.sheets": "none"}
    options["land_cover.path"] = str(tmp_path / "cover.gpkg")
    pd.concat([cover, far]).to_file(tmp_path / "cover.gpkg", layer="cover")
    seen = []
    read = process.read_layer

    def reading(*args, **how):
        seen.append(read(*args, **how))
        return seen[-1]

    monkeypatch.setattr(process, "read_layer", reading)
    results = run(SAMPLE / "study.toml", options)
    (part,) = (frame for frame in seen if frame.attrs["in_part"])
    assert len(part) <= len(cover)
    for name, table in sample.layers.items():
        if name != "findings":
            pd.testing.assert_frame_equal(results.layers[name].drop(columns="geometry", errors="ignore"),
                                          table.drop(columns="geometry", errors="ignore"))  # fmt: skip
    assert [(f.code, f.feature_id) for f in results.findings_list] == [
        (f.code, f.feature_id) for f in sample.findings_list
    ]
    # a class without n is wrong wherever it lies
    far[field] = "salt marsh"
    pd.concat([cover, far]).to_file(tmp_path / "cover.gpkg", layer="cover")
    with pytest.raises(InputError) as raised:
        run(SAMPLE / "study.toml", options | {"output.folder": str(tmp_path / "other")})
    assert "salt marsh" in str(raised.value)


def test_sample_study_finds_the_three_bad_lines(sample):
    found = {(f.code, f.feature_id) for f in sample.findings_list}
    codes = {code for code, _ in found}
    assert {"line-crosses-stream-again", "gap-ends-section", "above-section-ends"} <= codes


def test_layers_of_the_file_are_those_of_the_results(sample):
    with sqlite3.connect(sample.folder / "results.gpkg") as database:
        for name, table in sample.layers.items():
            read = pd.read_sql(f'SELECT * FROM "{name}" ORDER BY fid', database)
            assert [c for c in read.columns if c not in ("fid", "geom")] == [
                c for c in table.columns if c != "geometry"
            ]
            assert len(read) == len(table)
            for column in table.columns:
                if column != "geometry" and table[column].dtype.kind == "f":
                    np.testing.assert_array_equal(read[column].astype(float), table[column])


def test_each_row_can_be_followed_back_to_its_section(sample):
    """A reviewer rebuilds a section from the layers alone and gets the discharge."""
    zm = {}
    with sqlite3.connect(sample.folder / "results.gpkg") as database:
        for name, blob in database.execute("SELECT section_id, geom FROM sections"):
            header = 8 + {0: 0, 1: 32, 2: 48, 3: 48, 4: 64}[(blob[3] >> 1) & 7]
            count = int.from_bytes(blob[header + 5 : header + 9], "little")
            zm[name] = np.frombuffer(blob[header + 9 :], "<f8").reshape(count, 4)
    checked = 0
    for row in sample.design_stages.itertuples():
        mine = sample.subareas[sample.subareas["section_id"] == row.section_id]
        points = zm[row.section_id]
        section = Section(
            points[:, 3],
            points[:, 2],
            [Subarea(s.start_station, s.end_station, s.n, zone=s.zone or "") for s in mine.itertuples()],
            units="us",
        )
        flows = sample.subarea_flows
        parts = flows[(flows["section_id"] == row.section_id) & (flows["event"] == row.event)]
        assert parts["discharge"].sum() == pytest.approx(row.discharge, rel=1e-9)
        assert parts["flow_area"].sum() == pytest.approx(row.flow_area, rel=1e-9)
        # a hollow that the map shows to be reached is a second stretch of water
        single = parts["stage"].nunique() == 1 and len(row.geometry.geoms) == 1
        if row.channel_share == row.channel_share and single:
            assert section.discharge(row.stage, row.slope) == pytest.approx(row.discharge, rel=1e-6)
            checked += 1
    assert checked > 20


def test_run_record_names_its_inputs(sample):
    record = json.loads((sample.folder / "run.json").read_text())
    assert {"terrain.dem", "streams.path", "cut_lines.path"} <= {i["key"] for i in record["inputs"]}
    assert all(len(i["sha256"]) == 64 for i in record["inputs"])
    assert record["counts"]["sections"] == len(sample.sections)
    assert "licensed engineer" in record["caution"]


def test_earlier_results_are_kept_unless_asked(tmp_path):
    first = run(SAMPLE / "study.toml", {"output.folder": str(tmp_path)})
    before = (tmp_path / "results.gpkg").read_bytes()
    with pytest.raises(OutputError) as refused:
        run(SAMPLE / "study.toml", {"output.folder": str(tmp_path), "output.overwrite": "false"})
    assert refused.value.code == "output-exists"
    assert (tmp_path / "results.gpkg").read_bytes() == before
    assert first.folder == tmp_path


# --- ground of closed form ---------------------------------------------------------------------------

BED, SIDE, DEPTH, SLOPE_V, N_CHANNEL, N_PLAIN = 16.0, 4.0, 2.0, 0.004, 0.035, 0.08
WIDE, RISE = 30.0, 0.25
"""A trapezoid of bed 16 m and sides 4:1, 2 m deep; floodplains 30 m wide; valley sides of 1 in 4.

Cells of 1 m round off a kink by up to an eighth of its change of slope: sharper sides would shift the stage
by more than 1 cm.
"""


def closed_form(depth):
    """Discharge of the valley, parts by hand (trapezoids and triangles)."""

    def carried(area, perimeter, n):
        return area * (area / perimeter) ** (2 / 3) / n * SLOPE_V**0.5

    y = min(depth, DEPTH)
    top = BED + 2 * SIDE * DEPTH
    area = (BED + SIDE * y) * y + max(depth - DEPTH, 0) * top
    perimeter = BED + 2 * y * (1 + SIDE**2) ** 0.5
    total = carried(area, perimeter, N_CHANNEL)
    over = depth - DEPTH
    if over > 0:
        out = over / RISE
        total += 2 * carried(WIDE * over + 0.5 * over * out, WIDE + np.hypot(over, out), N_PLAIN)
    return total


def valley(folder, azimuth, size=360.0):
    """A straight valley that falls towards `azimuth`, at 1 m cells, its lines, and a study."""
    count = int(size)
    cell = np.arange(count) + 0.5
    x, y = np.meshgrid(cell - size / 2, size / 2 - cell)
    east, north = np.sin(np.radians(azimuth)), np.cos(np.radians(azimuth))
    along, across = x * east + y * north, np.abs(x * north - y * east)
    toe, bank = BED / 2, BED / 2 + SIDE * DEPTH
    height = np.clip((across - toe) / SIDE, 0, DEPTH)
    height += RISE * np.maximum(across - bank - WIDE, 0)
    ground = 100.0 - SLOPE_V * along + height
    origin = (500_000.0, 4_500_000.0)
    with rasterio.open(
        folder / "dem.tif", "w", driver="GTiff", width=count, height=count, count=1, dtype="float64",
        crs="EPSG:26915", transform=from_origin(origin[0] - size / 2, origin[1] + size / 2, 1, 1),
    ) as out:  # fmt: skip
        out.write(ground, 1)
        out.units = ("m",)

    def place(s, t):
        return origin[0] + s * east + t * north, origin[1] + s * north - t * east

    reach = 0.4 * size
    geopandas.GeoDataFrame(
        {"id": ["river"]}, geometry=[LineString([place(-reach, 0), place(reach, 0)])], crs="EPSG:26915"
    ).to_file(folder / "lines.gpkg", layer="streams")
    cuts = [LineString([place(s, -90.0), place(s, 90.0)]) for s in (-60.0, 0.0, 60.0)]
    cuts[1] = cuts[1].reverse()
    geopandas.GeoDataFrame({"id": ["a", "b", "c"]}, geometry=cuts, crs="EPSG:26915").to_file(
        folder / "lines.gpkg", layer="cut_lines"
    )
    strip = Polygon([place(-200, -bank), place(200, -bank), place(200, bank), place(-200, bank)])
    geopandas.GeoDataFrame({"id": [1]}, geometry=[strip], crs="EPSG:26915").to_file(
        folder / "lines.gpkg", layer="channel"
    )
    (folder / "study.toml").write_text(
        f"""
        [study]
        name = "valley"
        units = "si"
        [terrain]
        dem = "dem.tif"
        [streams]
        path = "lines.gpkg|layer=streams"
        [cut_lines]
        path = "lines.gpkg|layer=cut_lines"
        [land_cover]
        default_n = {N_PLAIN}
        [channel]
        path = "lines.gpkg|layer=channel"
        n = {N_CHANNEL}
        [slope]
        value = {SLOPE_V}
        [flows]
        events = {{ low = 40.0, middle = 120.0, high = 240.0 }}
        """
    )
    return folder / "study.toml", place


@pytest.mark.parametrize("azimuth", [0, 17, 45, 90, 133, 200, 271.5, 333])
def test_straight_valley_at_any_azimuth(tmp_path, azimuth):
    study, _ = valley(tmp_path, azimuth)
    results = run(study)
    assert len(results.design_stages) == 9
    for row in results.design_stages.itertuples():
        depth = brentq(lambda y, q=row.discharge: closed_form(y) - q, 0.01, 10, xtol=1e-12)
        station = {"a": -60.0, "b": 0.0, "c": 60.0}[row.section_id]
        assert row.stage == pytest.approx(100.0 - SLOPE_V * station + depth, abs=0.01), (
            row.section_id,
            row.event,
        )
    # the line drawn from right to left has been turned
    assert {f.feature_id for f in results.findings_list if f.code == "line-turned"} == {"b"}


def test_turned_line_gives_the_same_answers(tmp_path):
    study, _ = valley(tmp_path, 30)
    first = run(study).design_stages
    lines = geopandas.read_file(tmp_path / "lines.gpkg", layer="cut_lines")
    lines["geometry"] = lines.geometry.reverse()
    lines.to_file(tmp_path / "lines.gpkg", layer="cut_lines")
    again = run(study, {"output.overwrite": "true"}).design_stages
    np.testing.assert_allclose(again["stage"], first["stage"], rtol=0, atol=1e-9)
    np.testing.assert_allclose(again["flow_area"], first["flow_area"], rtol=1e-9)


def test_study_in_feet_and_in_metres_agree(tmp_path):
    study, _ = valley(tmp_path, 60)
    metres = run(study).design_stages
    text = study.read_text().replace('units = "si"', 'units = "us"')
    flows = {"low": 40.0, "middle": 120.0, "high": 240.0}
    for value in flows.values():
        text = text.replace(f"= {value}", f"= {value / 0.3048**3!r}")
    study.write_text(text)
    feet = run(study, {"output.overwrite": "true"}).design_stages
    np.testing.assert_allclose(feet["stage"] * 0.3048, metres["stage"], rtol=1e-9)
    np.testing.assert_allclose(feet["discharge"] * 0.3048**3, metres["discharge"], rtol=1e-9)
    np.testing.assert_allclose(feet["froude"], metres["froude"], rtol=1e-9)


def test_one_bad_line_stops_nothing(tmp_path):
    study, place = valley(tmp_path, 80)
    lines = geopandas.read_file(tmp_path / "lines.gpkg", layer="cut_lines")
    far = LineString([(0, 0), (10, 10)])
    here = place(30, -90)
    lines.loc[3] = {"id": "off", "geometry": far}
    lines.loc[4] = {"id": "no-length", "geometry": LineString([here, here])}
    lines.loc[5] = {"id": "none", "geometry": None}
    lines.loc[6] = {"id": "hillside", "geometry": LineString([place(20, 60), place(20, 89)])}
    lines.to_file(tmp_path / "lines.gpkg", layer="cut_lines")
    results = run(study)
    failed = results.design_stages[results.design_stages["status"] == "failed"]
    assert set(failed["section_id"]) == {"off", "no-length", "none", "hillside"}
    assert failed["stage"].isna().all()
    why = {f.feature_id: f.code for f in results.findings_list if f.severity == "failed"}
    assert why == {
        "off": "line-off-terrain",
        "no-length": "line-empty",
        "none": "line-empty",
        "hillside": "no-low-ground",
    }
    assert set(results.design_stages.loc[results.design_stages["status"] != "failed", "section_id"]) == set(
        "abc"
    )


def test_wrong_input_writes_nothing(tmp_path):
    study, _ = valley(tmp_path, 10)
    with pytest.raises(InputError):
        run(study, {"cut_lines.path": "lines.gpkg|layer=no_such_layer"})
    assert not (tmp_path / "output").exists()


def test_command_prints_the_table_and_the_caution(tmp_path, capsys):
    shutil.copytree(SAMPLE, tmp_path / "sample", ignore=shutil.ignore_patterns("output"))
    with pytest.raises(SystemExit) as stop:
        main(["run", str(tmp_path / "sample" / "study.toml")])
    assert stop.value.code == 0
    said = capsys.readouterr()
    assert "Stage (depth) by event" in said.out
    assert "licensed engineer" in said.out
    assert (tmp_path / "sample" / "output" / "results.gpkg").exists()
