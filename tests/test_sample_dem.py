"""The demonstration study holds what it promises, and its script makes the same data again."""

from __future__ import annotations

import importlib.util
import time
import tomllib
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pyproj
import pytest
import rasterio
import shapely

FOLDER = Path(__file__).resolve().parents[1] / "sample_dem"
LAYERS = ("streams", "cut_lines", "land_cover", "channel", "roads", "crossings")
FILES = ("valley.tif", "valley.gpkg", "flows.csv", "roughness.csv", "observed.csv", "study.toml")
SOUND = [f"M-{k}00" for k in range(1, 9)] + ["T-100", "T-200"]
WRONG = ["M-050", "M-350", "M-550"]


def read(layer, folder=FOLDER):
    return gpd.read_file(folder / "valley.gpkg", layer=layer)


@pytest.fixture(scope="module")
def layers():
    return {name: read(name) for name in LAYERS}


@pytest.fixture(scope="module")
def ground():
    with rasterio.open(FOLDER / "valley.tif") as source:
        return source.read(1, masked=True).filled(np.nan), source.transform


@pytest.fixture(scope="module")
def lines(layers):
    return layers["cut_lines"].set_index("line_id")


def height_at(ground, points):
    """Return the elevation of the cells that hold the points."""
    values, transform = ground
    east, north = shapely.get_coordinates(points).T
    columns, rows = (east - transform.c) / transform.a, (north - transform.f) / transform.e
    return values[np.floor(rows).astype(int), np.floor(columns).astype(int)]


def every_metre(line):
    return shapely.line_interpolate_point(line, np.arange(0.0, line.length, 1.0))


def stream_of(layers, name):
    return layers["streams"].set_index("stream_id").geometry[name]


# --- the files -------------------------------------------------------------------------------------------


def test_files_stay_small():
    sizes = [path.stat().st_size for path in FOLDER.iterdir() if path.is_file()]
    assert all((FOLDER / name).is_file() for name in FILES)
    assert sum(sizes) < 8_000_000


# rasterio 1.4 multiplies transforms in a way that affine 3.1 will some day retire
@pytest.mark.filterwarnings("ignore:Use `@` matmul:PendingDeprecationWarning")
def test_script_makes_the_same_data_again(tmp_path):
    spec = importlib.util.spec_from_file_location("make_sample", FOLDER / "make_sample.py")
    script = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(script)
    start = time.process_time()
    script.make_sample(tmp_path)
    assert time.process_time() - start < 15.0
    with rasterio.open(FOLDER / "valley.tif") as kept, rasterio.open(tmp_path / "valley.tif") as made:
        np.testing.assert_array_equal(kept.read(1), made.read(1))
        assert kept.profile == made.profile
    for name in LAYERS:
        kept, made = read(name), read(name, tmp_path)
        pd.testing.assert_frame_equal(
            pd.DataFrame(kept.drop(columns="geometry")), pd.DataFrame(made.drop(columns="geometry"))
        )
        assert kept.crs == made.crs
        assert shapely.equals_identical(
            kept.geometry.normalize().values, made.geometry.normalize().values
        ).all(), name
    for name in ("flows.csv", "roughness.csv", "observed.csv", "study.toml"):
        assert (FOLDER / name).read_bytes() == (tmp_path / name).read_bytes()


def test_study_names_files_layers_and_fields_that_exist(layers):
    study = tomllib.loads((FOLDER / "study.toml").read_text(encoding="utf-8"))
    assert study["study"]["units"] == "us"
    assert (FOLDER / study["terrain"]["dem"]).is_file()
    for table, key in [("streams", "id_field"), ("cut_lines", "id_field"), ("land_cover", "class_field")]:
        path, layer = study[table]["path"].split("|layer=")
        assert (FOLDER / path).is_file()
        assert study[table][key] in layers[layer].columns
    assert study["slope"]["field"] in layers["cut_lines"].columns
    classes = pd.read_csv(FOLDER / study["land_cover"]["table"])
    assert set(layers["land_cover"][study["land_cover"]["class_field"]]) == set(classes["class"])
    assert (FOLDER / study["flows"]["path"]).is_file()


# --- the ground ------------------------------------------------------------------------------------------


def test_ground_has_a_projected_crs_and_states_its_unit():
    with rasterio.open(FOLDER / "valley.tif") as source:
        assert pyproj.CRS(source.crs).is_projected
        assert source.crs.to_epsg() == 26915
        assert source.units == ("metre",)
        assert source.res == (1.0, 1.0)


def test_water_is_flat_from_bank_to_bank_and_falls_downstream(layers, ground):
    line = stream_of(layers, "Ambersole")
    at = np.arange(5.0, line.length - 5.0, 2.0)
    here, ahead = (shapely.get_coordinates(shapely.line_interpolate_point(line, at + d)) for d in (0.0, 0.5))
    square = (ahead - here)[:, ::-1] * (-1.0, 1.0) / 0.5
    road = shapely.union_all(layers["roads"].geometry).buffer(25.0)
    clear = ~shapely.intersects(shapely.points(here), road)
    middle, left, right = (height_at(ground, shapely.points(here + k * square)) for k in (0.0, 2.0, -2.0))
    # two metres aside may be a cell upstream or downstream: a few steps of 1/128 m on the steepest riffle
    assert np.abs(left - right)[clear].max() < 0.05
    assert (np.diff(middle[clear]) <= 0.0).all()
    assert 0.0020 < (middle[clear][0] - middle[clear][-1]) / line.length < 0.0026


def test_one_good_line_crosses_a_perched_channel(layers, lines, ground):
    line = lines.geometry["M-400"]
    heights = height_at(ground, every_metre(line))
    crossing = int(line.project(line.intersection(stream_of(layers, "Ambersole"))))
    right_bank = heights[crossing : crossing + 20].max()
    left_bank = heights[crossing - 20 : crossing].max()
    behind = heights[crossing + 20 : crossing + 130]
    assert behind.min() < min(left_bank, right_bank) - 1.0
    assert behind.min() > heights[crossing]


def test_roads_are_fill_bridge_and_low_road(layers, ground):
    roads = layers["roads"].set_index("name")
    crossings = layers["crossings"].set_index("road")
    assert len(roads) == 3
    assert roads["bridge"].sum() == 1
    assert set(crossings.index) == set(roads.index)
    above = {}
    for name, road in roads.iterrows():
        place = crossings.geometry[name]
        assert road.geometry.distance(place) < 0.02
        at = road.geometry.project(place)
        top = height_at(ground, shapely.line_interpolate_point(road.geometry, at + np.arange(-60.0, 61.0)))
        beside = [place.x + 45.0 * k for k in (-1, 1)]
        aside = [shapely.points(x, place.y + k) for x in beside for k in (-40.0, 40.0)]
        above[name] = top - np.median(height_at(ground, aside))
    assert above["Orrinfell Road"].min() > 3.0  # a fill without a gap, channel included
    assert 0.0 < np.median(above["Low Sedge Lane"]) < 0.8
    bridge = above[roads.index[roads["bridge"]][0]]
    assert bridge[60] < -1.5  # the deck is gone: the water is seen
    assert min(bridge[30], bridge[90]) > 2.5
    assert crossings["crest"].notna().sum() == 1
    assert (crossings["opening_width"] > 0.0).all()


# --- what is drawn ---------------------------------------------------------------------------------------


def test_layers_share_the_crs_and_are_valid(layers):
    for name, layer in layers.items():
        assert layer.crs.to_epsg() == 26915, name
        assert layer.is_valid.all(), name
        assert not layer.geometry.is_empty.any(), name


def test_land_cover_tiles_the_ground_without_gap_or_overlap(layers):
    cover = layers["land_cover"]
    assert cover["land_class"].nunique() >= 6
    with rasterio.open(FOLDER / "valley.tif") as source:
        frame = shapely.box(*source.bounds)
    assert cover.area.sum() == pytest.approx(frame.area, abs=1e-4)
    assert shapely.union_all(cover.geometry.values).symmetric_difference(frame).area < 1e-4
    assert cover.area.min() > 100.0


def test_streams_run_downstream_and_the_tributary_joins(layers, ground):
    main, side = (stream_of(layers, name) for name in ("Ambersole", "Tansy"))
    assert shapely.Point(side.coords[-1]).distance(main) < 1e-9
    for line in (main, side):
        first, last = height_at(ground, [shapely.Point(line.coords[k]) for k in (4, -1)])
        assert first > last
    assert 1500.0 < main.length < 2100.0


def test_sound_lines_cross_once_from_high_ground_to_high_ground(layers, lines, ground):
    assert sorted(lines.index) == sorted(SOUND + WRONG)
    assert lines["slope"].between(0.001, 0.01).all()
    for name in SOUND:
        line, stream = lines.geometry[name], stream_of(layers, lines["stream"][name])
        assert line.intersection(stream).geom_type == "Point", name
        others = layers["streams"].geometry[layers["streams"]["stream_id"] != lines["stream"][name]]
        assert not others.intersects(line).any(), name
        heights = height_at(ground, every_metre(line))
        assert np.isfinite(heights).all(), name
        assert min(heights[0], heights[-1]) > np.min(heights) + 8.0, name
    sound = lines.geometry[SOUND].to_numpy()
    meeting = shapely.intersects(sound[:, None], sound[None, :])
    assert (meeting == np.eye(len(SOUND), dtype=bool)).all()


def test_two_sound_lines_are_drawn_from_right_to_left(layers, lines):
    reverse = []
    for name in SOUND:
        line, stream = lines.geometry[name], stream_of(layers, lines["stream"][name])
        at = stream.project(line.intersection(stream))
        back, ahead = (shapely.get_coordinates(stream.interpolate(at + k))[0] for k in (-1.0, 1.0))
        start, end = np.array(line.coords[0]), np.array(line.coords[-1])
        flow, across = ahead - back, end - start
        if flow[0] * across[1] - flow[1] * across[0] > 0.0:
            reverse.append(name)
    assert reverse == ["M-300", "T-200"]


def test_one_line_crosses_the_stream_twice(layers, lines):
    meeting = lines.geometry["M-050"].intersection(stream_of(layers, "Ambersole"))
    assert len(shapely.get_parts(meeting)) == 2


def test_one_line_lies_over_the_gap_in_the_ground(lines, ground):
    missing = {
        name: np.isnan(height_at(ground, every_metre(line))).sum() for name, line in lines.geometry.items()
    }
    assert missing.pop("M-550") > 8
    assert not any(missing.values())
    assert np.isnan(ground[0]).sum() < 1000


def test_one_line_ends_on_the_floodplain(layers, lines, ground):
    line = lines.geometry["M-350"]
    heights = height_at(ground, every_metre(line))
    crossing = int(line.project(line.intersection(stream_of(layers, "Ambersole"))))
    banks = heights[crossing - 20 : crossing].max(), heights[crossing : crossing + 20].max()
    assert max(heights[0], heights[-1]) < min(banks)


def test_flows_and_roughness_are_complete(layers):
    flows = pd.read_csv(FOLDER / "flows.csv")
    assert list(flows.columns) == ["event", "discharge", "probability", "stream"]
    assert set(flows["stream"]) == set(layers["streams"]["stream_id"])
    for _, stream in flows.groupby("stream"):
        assert len(stream) == 3
        assert stream.sort_values("probability", ascending=False)["discharge"].is_monotonic_increasing
    roughness = pd.read_csv(FOLDER / "roughness.csv")
    assert list(roughness.columns) == ["class", "n", "n_low", "n_high", "source"]
    # Chow 1959, Table 5-6: every row names the row of the table it is taken from
    assert roughness["source"].str.startswith("Chow (1959), Table 5-6").all()
    assert (roughness["n_low"] <= roughness["n"]).all()
    assert (roughness["n"] <= roughness["n_high"]).all()
