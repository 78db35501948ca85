"""Cut lines laid out along streams: the laws they hold to, and the file that people edit."""

from __future__ import annotations

import json

import geopandas
import numpy as np
import pandas
import pyproj
import pytest
import rasterio
import shapely
from affine import Affine
from scipy.spatial import cKDTree
from shapely.geometry import LineString

from terrain2q import commands
from terrain2q.errors import InputError
from terrain2q.ground.cut_lines import orient_cut_lines
from terrain2q.ground.layout import HEIGHT, KeptLine, lay_out, lay_out_at
from terrain2q.ground.streams import StreamNetwork
from terrain2q.ground.terrain import Terrain
from terrain2q.laying_out import lay_out_study
from terrain2q.output.cut_line_file import read_cut_line_file
from terrain2q.process import run_study
from terrain2q.study import load_study

UTM = 26915
ORIGIN = np.array([500000.0, 4600000.0])


def write_valley(path, parts, *, floor=100.0, rise=0.1, cell=4.0, room=500.0, more=None, crs=UTM):
    """Write ground that is level at 50 m within `floor` of the streams and rises beyond; channel 2 m deep."""
    dense = np.concatenate([shapely.get_coordinates(LineString(p).segmentize(cell)) for p in parts])
    low, high = dense.min(axis=0) - room, dense.max(axis=0) + room
    width, height = np.ceil((high - low) / cell).astype(int)
    x, y = np.meshgrid(low[0] + (np.arange(width) + 0.5) * cell, high[1] - (np.arange(height) + 0.5) * cell)
    away = cKDTree(dense).query(np.column_stack([x.ravel(), y.ravel()]))[0].reshape(x.shape)
    z = 50.0 + rise * np.maximum(away - floor, 0.0) - 2.0 * (away < 8.0)
    if more is not None:
        z += more(away, x, y)
    with rasterio.open(
        path, "w", driver="GTiff", width=width, height=height, count=1, dtype="float32",
        crs=f"EPSG:{crs}", transform=Affine(cell, 0.0, low[0], 0.0, -cell, high[1]),
    ) as target:  # fmt: skip
        target.write(z.astype("float32"), 1)
        target.units = ["m"]
    return Terrain(path)


def frame_of(parts, ids=None):
    ids = ids or [f"S{n}" for n in range(len(parts))]
    return geopandas.GeoDataFrame({"feature_id": ids}, geometry=[LineString(p) for p in parts], crs=UTM)


def network_of(parts, ids=None):
    return StreamNetwork(frame_of(parts, ids), UTM)


def straight(length=1200.0, azimuth=90.0):
    way = np.array([np.sin(np.radians(azimuth)), np.cos(np.radians(azimuth))])
    return ORIGIN + np.linspace(0.0, length, 25)[:, None] * way


def meander(seed, length=1200.0):
    """Return a stream whose direction swings as a sine of the distance; up to all but touching itself."""
    random = np.random.default_rng(seed)
    while True:
        s = np.linspace(0.0, length, 2400)
        step = s[1] - s[0]

        def noise(count, low, high, s=s, random=random):
            return np.interp(s, np.linspace(0.0, length, count), random.uniform(low, high, count))

        phase = np.cumsum(2.0 * np.pi / (random.uniform(80.0, 400.0) * noise(12, 0.7, 1.3))) * step
        way = random.uniform(0.3, 2.1) * noise(9, 0.5, 1.1) * np.sin(phase) + noise(6, -0.6, 0.6)
        xy = np.cumsum(np.column_stack([np.cos(way), np.sin(way)]) * step, axis=0)
        xy = xy[:: int(random.integers(5, 25))]
        if random.uniform() < 0.4:
            xy = xy + random.normal(scale=random.uniform(0.2, 1.5), size=xy.shape)
        if LineString(xy).is_simple:
            return ORIGIN + xy


def assert_lawful(lines, streams: dict[str, np.ndarray]):
    """Each line crosses its stream once, from left to right, and itself never; no two lines meet."""
    shapes = np.array([line.geometry for line in lines], dtype=object)
    assert shapely.is_simple(shapes).all()
    one, other = shapely.STRtree(shapes).query(shapes, predicate="intersects")
    assert [
        (lines[a].section_id, lines[b].section_id) for a, b in zip(one, other, strict=True) if a < b
    ] == []
    for line, shape in zip(lines, shapes, strict=True):
        stream = LineString(streams[line.stream])
        shared = shapely.intersection(shape, stream)
        assert shared.geom_type == "Point", line.section_id
        assert shape.project(shared) == pytest.approx(line.crossing, abs=0.01)


# --- laws -------------------------------------------------------------------------------------------


@pytest.mark.parametrize("seed", range(12))
def test_lines_of_a_meandering_stream_never_meet_and_cross_it_once(tmp_path, seed):
    stream = meander(seed)
    terrain = write_valley(tmp_path / "dem.tif", [stream], cell=8.0)
    network = network_of([stream], ["A"])
    random = np.random.default_rng(seed)
    length = LineString(stream).length
    for every in (20.0, float(np.exp(random.uniform(np.log(20.0), np.log(500.0)))), 500.0):
        layout = lay_out(network, terrain, every=every, width=float(random.choice([250.0, 450.0, 900.0])))
        assert_lawful(layout.lines, {"A": stream})
        left_out = [f for f in layout.findings if f.code == "line-left-out"]
        asked = int(np.ceil(length / every)) - 1
        assert asked - 2 <= len(layout.lines) + len(left_out) <= max(asked, 1)
        assert len(left_out) <= 0.3 * asked
        # They are turned as they should be, for those who read them from a file.
        drawn = geopandas.GeoDataFrame(
            {"feature_id": [line.section_id for line in layout.lines]},
            geometry=[line.geometry for line in layout.lines], crs=UTM,
        )  # fmt: skip
        lines, findings = orient_cut_lines(drawn, frame_of([stream], ["A"]), UTM)
        assert not any(line.turned for line in lines)
        assert {f.code for f in findings} <= {"line-oblique"}
        for mine, read in zip(layout.lines, lines, strict=True):
            assert read.stream_distance == pytest.approx(mine.stream_distance, abs=0.05)


def test_same_inputs_give_the_same_lines(tmp_path):
    stream = meander(3)
    terrain = write_valley(tmp_path / "dem.tif", [stream], cell=8.0)
    one, other = (lay_out(network_of([stream]), terrain, every=45.0, width=400.0) for _ in range(2))
    assert [line.xy.tobytes() for line in one.lines] == [line.xy.tobytes() for line in other.lines]


@pytest.mark.parametrize("azimuth", [0.0, 31.0, 90.0, 200.0])
def test_a_straight_valley_has_straight_lines_square_to_it(tmp_path, azimuth):
    stream = straight(azimuth=azimuth)
    terrain = write_valley(tmp_path / "dem.tif", [stream])
    layout = lay_out(network_of([stream]), terrain, every=100.0, width=600.0)
    scale = LineString(stream).length / StreamNetwork(frame_of([stream]), UTM).distance_at([0], [1e9])[0]
    assert [line.asked for line in layout.lines] == [100.0 * k for k in range(1, 12)]
    assert layout.findings == []
    way = (stream[-1] - stream[0]) / np.hypot(*(stream[-1] - stream[0]))
    left = np.array([-way[1], way[0]])
    for line in layout.lines:
        chord = line.xy[-1] - line.xy[0]
        # Within a degree, which makes a section 0.015 % too wide.
        assert abs(chord @ way) <= np.sin(np.radians(1.0)) * np.hypot(*chord)
        assert line.geometry.length == pytest.approx(np.hypot(*chord), rel=1e-3)
        assert (line.xy[0] - line.xy[-1]) @ left > 0.0
        crossing = line.geometry.interpolate(line.crossing)
        along = np.array([crossing.x, crossing.y]) - stream[0]
        assert along @ way == pytest.approx(line.stream_distance * scale, abs=0.01)
        # The bed is 2 m under the floor, so 6 m above it is 40 m up a rise of 1 in 10.
        assert line.geometry.length == pytest.approx(2.0 * (100.0 + 10.0 * (HEIGHT - 2.0)), abs=10.0)
        assert min(line.heights) >= HEIGHT - 0.01


def test_lines_end_at_the_height_or_half_the_width_whichever_is_first(tmp_path):
    stream = straight()
    terrain = write_valley(tmp_path / "dem.tif", [stream])
    network = network_of([stream])
    low = lay_out(network, terrain, every=200.0, width=900.0, height=4.0)
    high = lay_out(network, terrain, every=200.0, width=900.0, height=12.0)
    narrow = lay_out(network, terrain, every=200.0, width=180.0, height=4.0)
    # The first sampled place that is high enough: up to a cell of 4 m further to each side.
    assert all(240.0 <= line.geometry.length <= 250.0 for line in low.lines)
    assert all(400.0 <= line.geometry.length <= 410.0 for line in high.lines)
    assert all(line.geometry.length == pytest.approx(180.0, rel=2e-3) for line in narrow.lines)
    assert {(f.code, f.severity) for f in narrow.findings} == {("line-ends-low", "note")}
    assert len(narrow.findings) == len(narrow.lines)
    assert "half the width" in narrow.findings[0].message
    assert not low.findings
    assert not high.findings


def test_a_levee_does_not_end_a_line_but_the_hill_behind_it_does(tmp_path):
    def levee(away, x, y):
        return 6.0 * ((away > 50.0) & (away < 62.0))

    stream = straight()
    terrain = write_valley(tmp_path / "dem.tif", [stream], more=levee)
    layout = lay_out(network_of([stream]), terrain, every=200.0, width=900.0, height=6.0)
    for line in layout.lines:
        assert line.geometry.length == pytest.approx(280.0, abs=10.0)
    # Where nothing higher comes within the width, the levee is the high ground there is.
    layout = lay_out(network_of([stream]), terrain, every=200.0, width=270.0, height=6.0)
    for line in layout.lines:
        assert 100.0 <= line.geometry.length <= 124.0


def test_lines_stop_at_the_terrain_and_say_so(tmp_path):
    stream = straight()
    terrain = write_valley(tmp_path / "dem.tif", [stream], room=60.0)
    layout = lay_out(network_of([stream]), terrain, every=300.0, width=600.0)
    assert layout.lines
    for line in layout.lines:
        assert line.geometry.length <= 121.0
    assert {(f.code, f.severity) for f in layout.findings} == {("line-ends-low", "doubtful")}
    assert all("the terrain ends" in f.message for f in layout.findings)


def test_a_stream_off_the_terrain_gets_no_line(tmp_path):
    stream = straight()
    terrain = write_valley(tmp_path / "dem.tif", [stream])
    away = stream + np.array([0.0, 5000.0])
    layout = lay_out(network_of([stream, away], ["on", "off"]), terrain, every=300.0, width=600.0)
    assert {line.stream for line in layout.lines} == {"on"}
    assert [(f.code, f.severity) for f in layout.findings] == [("line-left-out", "note")]
    assert "1 streams lie off the terrain" in layout.findings[0].message


def test_a_hole_in_the_terrain_at_the_stream_leaves_a_line_out(tmp_path):
    def hole(away, x, y):
        return np.where(np.hypot(x - ORIGIN[0] - 300.0, y - ORIGIN[1]) < 60.0, np.nan, 0.0)

    stream = straight()
    terrain = write_valley(tmp_path / "dem.tif", [stream], more=hole)
    layout = lay_out(network_of([stream]), terrain, every=300.0, width=600.0)
    assert [line.asked for line in layout.lines] == [600.0, 900.0]
    (finding,) = layout.findings
    assert (finding.code, finding.severity, finding.feature_id) == ("line-left-out", "doubtful", "S0-0300")
    assert (finding.x, finding.y) == pytest.approx((ORIGIN[0] + 299.9, ORIGIN[1]), abs=0.5)


# --- tributaries, branches, kept lines --------------------------------------------------------------


def confluence(tmp_path):
    main = straight(2000.0)
    middle = main[12]
    tributary = middle + np.column_stack([np.linspace(-350.0, 0.0, 30), np.linspace(700.0, 0.0, 30)])
    terrain = write_valley(tmp_path / "dem.tif", [main, tributary], floor=60.0)
    return main, tributary, terrain


@pytest.mark.parametrize("every", [25.0, 60.0, 170.0])
def test_lines_of_a_tributary_are_cut_off_at_the_main_stream_and_its_lines(tmp_path, every):
    main, tributary, terrain = confluence(tmp_path)
    # Whatever their order in the layer, the stream that receives the other goes first.
    layout = lay_out(network_of([tributary, main], ["trib", "main"]), terrain, every=every, width=500.0)
    assert_lawful(layout.lines, {"main": main, "trib": tributary})
    by_stream = {name: [line for line in layout.lines if line.stream == name] for name in ("main", "trib")}
    last = LineString(main).length - min(0.5 * every, 25.0)
    assert len(by_stream["main"]) == int(last / every)
    assert len(by_stream["trib"]) >= 0.6 * LineString(tributary).length / every - 1
    for line in by_stream["trib"]:
        assert not line.geometry.intersects(LineString(main))
    alone = lay_out(network_of([main], ["main"]), terrain, every=every, width=500.0)
    far = [n for n, line in enumerate(alone.lines) if abs(line.stream_distance - 1000.0) > 600.0]
    assert far
    for n in far:
        assert np.array_equal(alone.lines[n].xy, by_stream["main"][n].xy)


def test_main_lines_do_not_run_up_a_tributarys_valley(tmp_path):
    main, tributary, terrain = confluence(tmp_path)
    layout = lay_out(network_of([main, tributary], ["main", "trib"]), terrain, every=50.0, width=900.0)
    alone = lay_out(network_of([main], ["main"]), terrain, every=50.0, width=900.0)
    longest = max(line.geometry.length for line in layout.lines if line.stream == "main")
    assert longest <= 0.6 * max(line.geometry.length for line in alone.lines)
    joined = [f for f in layout.findings if "stream trib joins there" in f.message]
    assert joined
    assert all(f.severity == "doubtful" for f in joined)


def test_parts_and_branches_of_one_stream(tmp_path):
    whole = straight(1500.0)
    branch = whole[12] + np.column_stack([np.linspace(-300.0, 0.0, 20), np.linspace(500.0, 0.0, 20)])
    terrain = write_valley(tmp_path / "dem.tif", [whole, branch])
    parts = [whole[12:], branch, whole[:13]]
    layout = lay_out(network_of(parts, ["A"] * 3), terrain, every=120.0, width=400.0)
    together = shapely.union_all([LineString(p) for p in parts])
    shapes = [line.geometry for line in layout.lines]
    assert all(shapely.intersection(s, together).geom_type == "Point" for s in shapes)
    names = [line.section_id for line in layout.lines]
    assert len(set(names)) == len(names)
    assert {"A-0120", "A-0120b", "A-1320"} <= set(names)
    # Along the whole stream as along one that came in one piece.
    main = [line for line in layout.lines if not line.section_id.endswith("b")]
    one = lay_out(network_of([whole], ["A"]), terrain, every=120.0, width=400.0)
    assert [line.section_id for line in main] == [line.section_id for line in one.lines]
    assert np.array_equal(main[-1].xy, one.lines[-1].xy)


def test_kept_lines_are_kept_clear_of(tmp_path):
    stream = straight()
    terrain = write_valley(tmp_path / "dem.tif", [stream])
    # A person's line, slanting so that it would meet the next one.
    x, y = stream[0] + [450.0, 0.0]
    drawn = LineString([(x - 90.0, y + 150.0), (x, y), (x + 120.0, y - 150.0)])
    kept = [KeptLine("mine", "S0", 450.0, drawn)]
    layout = lay_out(network_of([stream]), terrain, every=50.0, width=400.0, kept=kept)
    asked = [line.asked for line in layout.lines]
    assert 450.0 not in asked
    assert {400.0, 500.0} <= set(asked)
    assert not any(line.geometry.intersects(drawn) for line in layout.lines)
    assert any("line mine is there" in f.message for f in layout.findings)


def test_lines_at_given_distances(tmp_path):
    stream = meander(5)
    terrain = write_valley(tmp_path / "dem.tif", [stream], cell=8.0)
    network = network_of([stream], ["A"])
    length = float(network.distance_at([0], [1e9])[0])
    layout = lay_out_at(network, terrain, "A", [400.0, 430.0, length + 50.0], width=400.0)
    assert [line.asked for line in layout.lines] == [400.0, 430.0]
    assert_lawful(layout.lines, {"A": stream})
    for line in layout.lines:
        assert line.stream_distance == pytest.approx(line.asked, abs=20.0)
    assert [f.code for f in layout.findings if f.code == "line-left-out"] == ["line-left-out"]
    with pytest.raises(InputError, match="no stream 'B'"):
        lay_out_at(network, terrain, "B", [400.0], width=400.0)


def test_a_geographic_terrain_gives_the_same_lines_on_the_ground(tmp_path):
    stream = meander(1, 700.0)
    terrain = write_valley(tmp_path / "dem.tif", [stream], floor=1000.0, cell=8.0)
    flat = lay_out(network_of([stream], ["A"]), terrain, every=90.0, width=300.0)
    streams = frame_of([stream], ["A"]).to_crs(4269)
    degrees = shapely.get_coordinates(streams.geometry.to_numpy())
    with rasterio.open(
        tmp_path / "degrees.tif", "w", driver="GTiff", width=400, height=300, count=1, dtype="float32",
        crs="EPSG:4269", transform=Affine(1e-4, 0, degrees[:, 0].mean() - 0.02, 0, -1e-4,
                                          degrees[:, 1].mean() + 0.015),
    ) as target:  # fmt: skip
        target.write(np.full((300, 400), 50.0, dtype="float32"), 1)
        target.units = ["m"]
    layout = lay_out(StreamNetwork(streams, 4269), Terrain(tmp_path / "degrees.tif"), every=90.0, width=300.0)
    assert len(layout.lines) == len(flat.lines)
    assert_lawful(layout.lines, {"A": degrees})
    back = pyproj.Transformer.from_crs(4269, UTM, always_xy=True)
    for line, same in zip(layout.lines, flat.lines, strict=True):
        there = LineString(np.column_stack(back.transform(*line.xy.T)))
        assert there.hausdorff_distance(same.geometry) <= 6.0
        assert there.length == pytest.approx(300.0, rel=5e-3)


def test_a_short_stream_gets_one_line_in_its_middle(tmp_path):
    stream = straight(90.0)
    terrain = write_valley(tmp_path / "dem.tif", [stream])
    (line,) = lay_out(network_of([stream]), terrain, every=500.0, width=300.0).lines
    assert line.stream_distance == pytest.approx(45.0, abs=0.1)


@pytest.mark.parametrize(
    ("more", "code"),
    [
        ({}, "key-missing"),
        ({"every": 10.0, "at": [5.0]}, "key-conflict"),
        ({"every": -1.0}, "number-not-positive"),
        ({"every": 10.0, "height": 0.0}, "number-not-positive"),
    ],
)
def test_what_is_asked_must_make_sense(tmp_path, more, code):
    stream = straight(100.0)
    terrain = write_valley(tmp_path / "dem.tif", [stream])
    with pytest.raises(InputError) as stop:
        lay_out(network_of([stream]), terrain, width=300.0, **more)
    assert stop.value.code == code


# --- the study and its file -------------------------------------------------------------------------


@pytest.fixture
def study_path(tmp_path):
    stream = straight()
    write_valley(tmp_path / "dem.tif", [stream])
    frame_of([stream]).rename(columns={"feature_id": "name"}).to_file(tmp_path / "data.gpkg", layer="streams")
    path = tmp_path / "study.toml"
    path.write_text(
        '[study]\nunits = "us"\n[terrain]\ndem = "dem.tif"\n'
        '[streams]\npath = "data.gpkg|layer=streams"\nid_field = "name"\n'
        "[cut_lines]\nevery = 500.0\nwidth = 1500.0\n"
        "[land_cover]\ndefault_n = 0.05\n[slope]\nvalue = 0.002\n"
        '[flows]\nevents = { "100-year" = 2000 }\n',
        encoding="utf-8",
    )
    return path


def test_edited_and_added_lines_are_kept_with_their_fields(study_path):
    study = load_study(study_path, needs=("terrain", "streams", "cut_lines"))
    first = lay_out_study(study)
    assert first.file == study_path.parent / "cut_lines.gpkg"
    assert list(first.lines["section_id"][:2]) == ["S0-0500", "S0-1000"]
    assert first.kept == ()
    earlier = read_cut_line_file(first.file)
    assert not earlier["edited"].any()

    # A person moves the second line's left end, adds one between, gives all a field, and adds a layer.
    lines = geopandas.read_file(first.file, layer="cut_lines")
    xy = shapely.get_coordinates(lines.geometry[1])
    xy[0] += [3.0, 11.0]
    lines.loc[1, "geometry"] = LineString(xy)
    lines["remark"] = [f"seen {n}" for n in range(len(lines))]
    new = lines.iloc[[3]].copy()
    new.geometry = new.translate(60.0, 0.0)
    new["section_id"], new["laid_out"], new["remark"] = None, None, "drawn"
    lines = pandas.concat([lines, new], ignore_index=True)
    lines.to_file(first.file, layer="cut_lines")
    frame_of([straight()]).to_file(first.file, layer="my_own")

    second = lay_out_study(study)
    assert second.kept == ("S0-1000", "added-1")
    again = geopandas.read_file(first.file, layer="cut_lines").set_index("section_id")
    assert list(again.columns[:3]) == ["stream", "stream_distance", "laid_out"]
    assert shapely.get_coordinates(again.loc["S0-1000", "geometry"]).tolist() == xy.tolist()
    assert again.loc["added-1", "geometry"].equals(new.geometry.iloc[0])
    assert again.loc["added-1", "stream_distance"] == pytest.approx(2000.0 + 60.0 / 0.3048, abs=1.0)
    assert again.loc["S0-1500", "remark"] == "seen 2"
    assert again.loc["added-1", "remark"] == "drawn"
    assert len(again) == len(first.lines) + 1
    assert again.loc["S0-1500", "geometry"].equals(first.lines.geometry[2])
    assert [f.code for f in second.findings].count("lines-kept") == 1
    assert "my_own" in set(geopandas.list_layers(first.file)["name"])
    # A third time nothing changes.
    third = lay_out_study(study)
    assert third.kept == second.kept
    assert third.lines.geometry.geom_equals(second.lines.geometry).all()

    # A run on `every` says that the edits are not used; a run on the file uses them.
    results = run_study(load_study(study_path))
    assert "lines-not-used" in {f.code for f in results.findings_list}
    assert len(results.sections) == len(first.lines)
    results = run_study(
        load_study(
            study_path,
            {
                "cut_lines.path": f"{first.file}|layer=cut_lines",
                "cut_lines.id_field": "section_id",
                "output.overwrite": True,
            },
        )
    )
    assert set(results.sections["section_id"]) == set(again.index)


def test_layout_command(study_path, capsys):
    with pytest.raises(SystemExit) as stop:
        commands.main(["layout", str(study_path), "--to", str(study_path.parent / "lines.gpkg"), "--json"])
    assert stop.value.code == 0
    told = json.loads(capsys.readouterr().out)
    assert (told["lines"], told["kept"], told["streams"]) == (7, [], {"S0": 7})
    assert len(geopandas.read_file(study_path.parent / "lines.gpkg", layer="cut_lines")) == 7
    with pytest.raises(SystemExit) as stop:
        commands.main(["layout", str(study_path)])
    assert stop.value.code == 0
    assert "7 lines laid out along 1 streams" in capsys.readouterr().out


def test_layout_needs_a_spacing_and_a_geopackage(study_path):
    lay_out_study(load_study(study_path))
    study = load_study(study_path, {"cut_lines.path": str(study_path.parent / "cut_lines.gpkg")})
    assert study.cut_lines.every is None
    with pytest.raises(InputError, match="has no every"):
        lay_out_study(study)
    with pytest.raises(InputError, match="not a GeoPackage"):
        lay_out_study(load_study(study_path), study_path.parent / "lines.shp")


def test_a_run_lays_lines_out_by_itself(study_path):
    results = run_study(load_study(study_path))
    assert list(results.sections["section_id"]) == [f"S0-{d:04d}" for d in range(500, 3600, 500)]
    assert results.sections["stream_distance"].tolist() == pytest.approx(range(500, 3600, 500), abs=0.01)
    assert results.failed_sections == 0


def test_a_slope_field_and_laid_out_lines_contradict(study_path):
    with pytest.raises(InputError) as stop:
        run_study(load_study(study_path, {"slope.field": "slope"}))
    assert stop.value.code == "key-conflict"
    study_path.write_text(study_path.read_text(encoding="utf-8").replace("[streams]", "[extent]\n[streams]"))
    text = study_path.read_text(encoding="utf-8")
    text = text.replace('[extent]\n[streams]\npath = "data.gpkg|layer=streams"\nid_field = "name"\n', "")
    study_path.write_text(text, encoding="utf-8")
    with pytest.raises(InputError, match="there are none"):
        run_study(load_study(study_path))


@pytest.mark.parametrize(
    ("keys", "code", "what"),
    [
        ('path = "data.gpkg"\nevery = 500.0\nwidth = 900.0', "key-conflict", "cut_lines.every"),
        ("every = 500.0", "key-missing", "no width"),
        ("width = 500.0", "key-missing", "no every"),
        ("", "key-missing", "no path and no every"),
    ],
)
def test_keys_of_the_layout(study_path, keys, code, what):
    text = study_path.read_text(encoding="utf-8").replace("every = 500.0\nwidth = 1500.0", keys)
    study_path.write_text(text, encoding="utf-8")
    with pytest.raises(InputError) as stop:
        load_study(study_path)
    assert stop.value.code == code
    assert what in str(stop.value)
