"""The low line of a stream: snapped, freed of fills and pits, and turned downhill."""

import geopandas
import numpy as np
import pytest
from _stream_ground import CRS, DEPTH, EAST, NORTH, Valley, correlated
from hypothesis import given, settings
from hypothesis import strategies as st
from shapely import LineString, MultiLineString

from terrain2q import run
from terrain2q.ground.cut_lines import orient_cut_lines
from terrain2q.ground.low_line import (
    AGREEING,
    CLEAR_FALL,
    LEAST_FALL,
    LONGEST_FILL,
    LowLines,
    _low_lines,
    find_humps,
    free_of_humps,
    low_line,
    lowest_path,
    opening,
    snap_distance,
    streams_near,
    turn_streams,
)
from terrain2q.ground.stream_slope import robust_slope
from terrain2q.ground.streams import StreamNetwork
from terrain2q.ground.terrain import Terrain

# --- arrays ------------------------------------------------------------------------------------------


@given(
    st.lists(st.floats(0.0, 3.0), min_size=1, max_size=60),
    st.integers(1, 30),
    st.booleans(),
)
@settings(max_examples=80, deadline=None)
def test_opening_leaves_ground_that_falls_all_the_way(falls, window, rises):
    z = 100.0 - np.cumsum(falls)
    z = z[::-1] if rises else z
    np.testing.assert_array_equal(opening(z, window), z)


@given(st.integers(8, 60), st.integers(0, 200), st.floats(0.0, 0.05), st.floats(0.5, 9.0))
@settings(max_examples=80, deadline=None)
def test_opening_cuts_a_hump_to_the_ground_upstream_of_it(width, at, slope, height):
    place = np.arange(300.0)
    z = 50.0 - slope * place
    inside = (place >= at + 20) & (place < at + 20 + width)
    z[inside] += height
    cut = opening(z, 81)
    assert (cut <= z + 1e-12).all()
    upstream = 50.0 - slope * (at + 19)
    assert (cut[inside] <= upstream + 1e-9).all()
    np.testing.assert_array_equal(cut[~inside], z[~inside])


def test_noise_alone_has_no_humps_and_no_pits():
    random = np.random.default_rng(1)
    for slope in (0.0, 0.002, 0.03):
        for _ in range(20):
            z = 30.0 - slope * np.arange(600.0) + random.normal(0.0, 0.1, 600)
            assert find_humps(z, 1.0, LONGEST_FILL) == []
            bed, usable, stretches = free_of_humps(z, 1.0)
            assert usable.all()
            assert stretches == []
            np.testing.assert_array_equal(bed, z)


@pytest.mark.parametrize("width", [5, 12, 25, 40])
@pytest.mark.parametrize("spacing", [1.0, 2.0])
def test_a_fill_goes_with_its_toes_and_leaves_a_straight_bridge(width, spacing):
    random = np.random.default_rng(width)
    distance = np.arange(0.0, 400.0, spacing)
    line = 30.0 - 0.004 * distance
    noise = random.normal(0.0, 0.05, distance.size)
    crest = 29.0 + 3.0 - np.maximum(np.abs(distance - 200.0) - width / 2, 0.0) / 1.5
    z = np.maximum(line, crest) + noise
    bed, usable, stretches = free_of_humps(z, spacing)
    assert len(stretches) == 1
    assert not usable[crest > line].any(), "every bit of the fill is gone"
    assert usable.mean() > 1.0 - (2.5 * width + 40.0) / 400.0, "and not much more"
    np.testing.assert_allclose(bed[~usable], line[~usable], atol=0.12)
    np.testing.assert_array_equal(bed[usable], z[usable])


def test_two_fills_close_to_each_other_and_a_pit():
    distance = np.arange(0.0, 400.0)
    z = 30.0 - 0.004 * distance
    for at in (150.0, 185.0):
        z = np.where(np.abs(distance - at) < 8.0, z + 4.0, z)
    z = np.where(np.abs(distance - 300.0) < 3.0, z - 2.0, z)
    bed, usable, stretches = free_of_humps(z, 1.0)
    np.testing.assert_allclose(bed, 30.0 - 0.004 * distance, atol=0.02)
    assert not usable[np.abs(distance - 300.0) < 3.0].any()
    assert len(stretches) in (2, 3)


def test_a_hill_that_a_stream_cannot_run_over_goes_whole():
    distance = np.arange(0.0, 1200.0, 5.0)
    line = 80.0 - 0.01 * distance
    hill = np.maximum(6.0 * (1.0 - ((distance - 600.0) / 150.0) ** 2), 0.0)
    bed, usable, stretches = free_of_humps(line + hill, 5.0)
    assert len(stretches) == 1
    # its feet, and what lies lower than the ground upstream of it, fall as a stream may
    assert not usable[(distance > 480.0) & (distance < 710.0)].any()
    # at 735 m the hill is 6 (1 - 0.9²) = 1.14 m high and its ground already below that at its upper foot
    assert np.abs(bed - line).max() < 1.15
    assert robust_slope(distance[usable], bed[usable]).slope == pytest.approx(0.01, rel=0.02)


def test_a_waterfall_is_no_hump_and_no_pit():
    distance = np.arange(0.0, 400.0)
    z = 80.0 - 0.01 * distance - np.where(distance > 200.0, 10.0, 0.0)
    _, usable, stretches = free_of_humps(z, 1.0)
    assert usable.all()
    assert stretches == []


def test_gaps_are_bridged_inside_and_left_at_the_ends():
    z = 30.0 - 0.01 * np.arange(100.0)
    z[:5] = z[40:60] = z[97:] = np.nan
    bed, usable, stretches = free_of_humps(z, 1.0)
    assert stretches == []
    assert np.isnan(bed[[0, 4, 97, 99]]).all()
    np.testing.assert_allclose(bed[40:60], 30.0 - 0.01 * np.arange(40, 60), atol=0.03)
    assert not usable[40:60].any()
    assert np.isnan(free_of_humps(np.full(9, np.nan), 1.0)[0]).all()


def test_lowest_path_follows_a_channel_and_stays_on_level_ground():
    offsets = np.arange(-10, 11)
    channel = np.round(6.0 * np.sin(np.arange(200) / 25.0)).astype(int)
    rows = np.minimum(np.abs(offsets[None, :] - channel[:, None]) * 0.5, 2.0)
    path = lowest_path(rows) - 10
    np.testing.assert_array_equal(path, channel)
    np.testing.assert_array_equal(lowest_path(np.zeros((50, 21))), np.full(50, 10))
    noisy = np.random.default_rng(2).normal(0.0, 0.1, (500, 11))
    # with usual noise it does not run after single low cells: it moves in few of its steps
    assert np.mean(np.diff(lowest_path(noisy)) != 0) < 0.1
    rows[60:70] = np.nan
    assert lowest_path(rows).size == 200


# --- on a terrain ------------------------------------------------------------------------------------


def test_a_stream_beside_the_channel_is_snapped_for_elevations_only(tmp_path):
    valley = Valley(60.0, size=400.0)
    terrain = Terrain(valley.write(tmp_path / "v.tif"))
    streams = valley.streams(valley.line((-150.0, 12.0), (150.0, 12.0)))
    network = StreamNetwork(streams, CRS)
    low_lines = LowLines(network, terrain)
    line = low_lines.of(0)
    truth = 100.0 - 0.005 * (line.distance - 150.0)
    # away from the ends, where the path needs some cells to get over
    np.testing.assert_allclose(line.low[20:-20], truth[20:-20], atol=0.01)
    assert np.abs(line.shift[20:-20] - 12.0).max() < 4.5, "within the bed, to the left"
    assert line.distance[-1] == pytest.approx(300.0, abs=0.2), "the drawn line's own distances"
    assert [f.code for f in low_lines.findings] == ["stream-shifted"]
    assert "creek" in low_lines.findings[0].message
    near = LowLines(network, terrain, snap=2.0)
    assert near.of(0).low[50] > truth[50] + 0.5
    straight = LowLines(StreamNetwork(valley.streams(), CRS), terrain)
    straight.of(0)
    assert straight.findings == []


def test_coarse_cells_with_streams_tens_of_metres_off(tmp_path):
    valley = Valley(40.0, size=2400.0, cell=10.0, noise=0.05)
    terrain = Terrain(valley.write(tmp_path / "v.tif"))
    assert snap_distance(terrain, None) == pytest.approx(50.0, rel=0.01)
    for beside in (-45.0, 25.0):
        line = low_line(valley.line((-900.0, beside), (900.0, beside)), terrain, 50.0)
        off = line.low[10:-10] - (100.0 - 0.005 * (line.distance[10:-10] - 900.0))
        # cells of 10 m do not show a bed of 8 m everywhere, but the path never leaves the channel
        assert np.abs(off).max() < DEPTH
        assert np.median(np.abs(line.shift)) == pytest.approx(abs(beside), abs=10.0)


def test_upstream_lines_are_turned_and_sections_and_distances_with_them(tmp_path):
    valley = Valley(250.0, size=400.0, noise=0.05)
    terrain = Terrain(valley.write(tmp_path / "v.tif"))
    down = valley.streams(valley.line((-150.0,), (0.0, 3.0), (150.0,)))
    up = down.set_geometry(down.geometry.reverse())
    kept, none = turn_streams(down, terrain)
    assert none == []
    assert kept is down
    turned, findings = turn_streams(up, terrain)
    assert [(f.code, f.feature_id) for f in findings] == [("stream-turned", "creek")]
    assert turned.geometry.iloc[0].equals_exact(down.geometry.iloc[0])
    cut_lines = valley.cut_lines((-100.0, 20.0))
    right, _ = orient_cut_lines(cut_lines, down, CRS)
    wrong, _ = orient_cut_lines(cut_lines, up, CRS)
    mended, _ = orient_cut_lines(cut_lines, turned, CRS)
    assert [line.turned for line in right] == [line.turned for line in mended]
    assert [line.turned for line in right] != [line.turned for line in wrong]
    assert [line.stream_distance for line in right] == [line.stream_distance for line in mended]


def test_parts_drawn_against_each_other_are_joined_and_turned_as_one(tmp_path):
    valley = Valley(90.0, size=400.0)
    terrain = Terrain(valley.write(tmp_path / "v.tif"))
    parts = [valley.line((-150.0,), (-60.0,)), valley.line((40.0,), (-60.0,)), valley.line((40.0,), (150.0,))]
    streams = valley.streams(*parts)
    assert "stream-parts-oppose" in [f.code for f in StreamNetwork(streams, CRS).findings]
    turned, findings = turn_streams(streams, terrain)
    assert [f.code for f in findings] == ["stream-turned"]
    assert "1 of 3 parts" in findings[0].message
    network = StreamNetwork(turned, CRS)
    assert (len(network), network.findings) == (1, [])
    assert network.lengths[0] == pytest.approx(300.0)
    # the same as one multipart row
    whole = valley.streams(MultiLineString(parts))
    turned, _ = turn_streams(whole, terrain)
    assert len(StreamNetwork(turned, CRS)) == 1


def test_a_short_flat_stream_keeps_its_direction_with_a_finding(tmp_path):
    valley = Valley(90.0, size=300.0, slope=0.0, noise=0.1, seed=4)
    terrain = Terrain(valley.write(tmp_path / "v.tif"))
    streams = valley.streams()
    kept, findings = turn_streams(streams, terrain)
    assert kept is streams
    assert [(f.code, f.severity) for f in findings] == [("stream-direction-uncertain", "note")]


def test_noise_turns_hardly_any_stream_that_is_flat():
    random = np.random.default_rng(5)
    distance = np.arange(0.0, 300.0)
    sure = 0
    for _ in range(200):
        z = correlated(random, 300, 1.0, 15.0, 0.2) + random.normal(0.0, 0.1, 300)
        found = robust_slope(distance, z, confidence=0.98)
        fall = abs(found.slope) * found.length
        sure += (fall >= LEAST_FALL and not found.low <= 0.0 <= found.high) or (
            fall >= CLEAR_FALL and found.agreeing >= AGREEING
        )
    # one in fifty would be sure of either way; half of these are wrong
    assert sure <= 10


def test_a_bent_profile_still_tells_its_direction(tmp_path):
    # concave, as valleys are: most of the fall in the upper third
    valley = Valley(0.0, size=400.0, bed=lambda s: 12.0 * np.exp(-(s + 180.0) / 60.0))
    terrain = Terrain(valley.write(tmp_path / "v.tif"))
    streams = valley.streams()
    assert turn_streams(streams, terrain)[1] == []
    up = streams.set_geometry(streams.geometry.reverse())
    assert [f.code for f in turn_streams(up, terrain)[1]] == ["stream-turned"]


def test_only_streams_near_cut_lines_are_looked_at(tmp_path):
    valley = Valley(90.0, size=400.0)
    terrain = Terrain(valley.write(tmp_path / "v.tif"))
    lines = [valley.line((150.0, off), (-150.0, off)) for off in (0.0, 100.0, -150.0)]
    streams = geopandas.GeoDataFrame({"feature_id": ["a", "b", "c"]}, geometry=[*lines[:2], None], crs=CRS)
    near = streams_near(valley.cut_lines((0.0,), half=20.0), streams)
    assert near == {"a"}
    turned, findings = turn_streams(streams, terrain, names=near)
    assert [f.feature_id for f in findings] == ["a"]
    assert turned.geometry.iloc[1].equals(lines[1])
    assert turned.geometry.iloc[2] is None
    # a line that touches none takes the nearest
    aside = geopandas.GeoDataFrame(
        {"feature_id": ["s"]}, geometry=[valley.line((0.0, 120.0), (0.0, 180.0))], crs=CRS
    )
    assert streams_near(aside, streams) == {"b"}
    assert streams_near(aside, streams.iloc[2:]) == set()


def test_windows_run_on_over_the_joins_of_a_branching_stream(tmp_path):
    valley = Valley(90.0, size=600.0)
    terrain = Terrain(valley.write(tmp_path / "v.tif"))
    side = LineString([valley.place(-120.0, 150.0), valley.place(-20.0, 0.0)])
    streams = valley.streams(
        valley.line((-250.0,), (-20.0,)), side, valley.line((-20.0,), (250.0,)),
    )  # fmt: skip
    network = StreamNetwork(streams, CRS)
    assert len(network) == 3
    low_lines = LowLines(network, terrain)
    chains = {round(float(start)): n for n, start in enumerate(network.chain_start) if start > 0}
    below = chains[230]
    distance, bed, length = low_lines.about(below, 230.0, 200.0)
    assert length == pytest.approx(200.0)
    assert (distance[0], distance[-1]) == (pytest.approx(130.0, abs=1.0), pytest.approx(330.0, abs=1.0))
    assert (np.diff(distance) >= -1e-9).all()
    # along the main stem, not up the side stream
    np.testing.assert_allclose(bed, 100.0 - 0.005 * (distance - 250.0), atol=0.01)
    everything = low_lines.about(below, 230.0, 5000.0)
    assert everything[2] == pytest.approx(500.0, abs=1.0)


def test_distances_are_true_in_degrees_too(tmp_path):
    """The same valley in geographic coordinates: the same low line, length for length."""
    import pyproj
    import rasterio
    from rasterio.warp import Resampling, calculate_default_transform, reproject

    valley = Valley(70.0, size=400.0)
    path = valley.write(tmp_path / "v.tif")
    with rasterio.open(path) as source:
        transform, width, height = calculate_default_transform(
            source.crs, "EPSG:4326", source.width, source.height, *source.bounds
        )
        profile = {**source.profile, "crs": "EPSG:4326", "transform": transform, "width": width,
                   "height": height, "nodata": -9999.0}  # fmt: skip
        with rasterio.open(tmp_path / "g.tif", "w", **profile) as out:
            reproject(
                rasterio.band(source, 1), rasterio.band(out, 1), resampling=Resampling.bilinear,
                dst_nodata=-9999.0,
            )  # fmt: skip
            out.units = ("m",)
    drawn = valley.line((-120.0, 10.0), (120.0, 10.0))
    move = pyproj.Transformer.from_crs(CRS, "EPSG:4326", always_xy=True).transform
    degrees = LineString(np.column_stack(move(*np.array(drawn.coords).T)))
    flat = low_line(drawn, Terrain(path), 15.0)
    globe = low_line(degrees, Terrain(tmp_path / "g.tif"), 15.0)
    assert globe.distance[-1] == pytest.approx(flat.distance[-1], rel=1e-3)
    assert np.median(globe.shift) == pytest.approx(np.median(flat.shift), abs=1.5)
    middle = np.interp(120.0, globe.distance, globe.low)
    assert middle == pytest.approx(np.interp(120.0, flat.distance, flat.low), abs=0.03)


def test_a_line_off_the_terrain_has_no_ground(tmp_path):
    valley = Valley(90.0, size=100.0)
    terrain = Terrain(valley.write(tmp_path / "v.tif"))
    far = LineString([(EAST + 9000.0, NORTH), (EAST + 9100.0, NORTH)])
    line = low_line(far, terrain, 15.0)
    assert not line.usable.any()
    streams = geopandas.GeoDataFrame({"feature_id": ["far"]}, geometry=[far], crs=CRS)
    assert turn_streams(streams, terrain)[1] == []
    assert LowLines(StreamNetwork(streams, CRS), terrain).about(0, 50.0, 100.0)[2] == 0.0


def test_a_study_turns_its_streams(tmp_path):
    valley = Valley(120.0, size=300.0)
    valley.write(tmp_path / "dem.tif")
    down = valley.streams()
    down.set_geometry(down.geometry.reverse()).to_file(tmp_path / "up.gpkg", layer="streams")
    down.to_file(tmp_path / "down.gpkg", layer="streams")
    valley.cut_lines((0.0, 60.0)).to_file(tmp_path / "lines.gpkg", layer="cut_lines")
    (tmp_path / "study.toml").write_text(
        '[study]\nunits = "si"\n[terrain]\ndem = "dem.tif"\n[streams]\npath = "up.gpkg|layer=streams"\n'
        '[cut_lines]\npath = "lines.gpkg|layer=cut_lines"\n[land_cover]\ndefault_n = 0.04\n'
        '[slope]\nvalue = 0.005\n[flows]\nevents = { "10-year" = 20.0 }\n',
        encoding="utf-8",
    )
    up = run(tmp_path / "study.toml")
    right = run(
        tmp_path / "study.toml",
        {"streams.path": f"{tmp_path}/down.gpkg|layer=streams", "output.folder": str(tmp_path / "other")},
    )
    assert "stream-turned" in set(up.findings["code"])
    assert "stream-turned" not in set(right.findings["code"])
    np.testing.assert_array_equal(up.sections["stream_distance"], right.sections["stream_distance"])
    for one, other in zip(up.sections.geometry, right.sections.geometry, strict=True):
        assert one.equals_exact(other)


def test_compiled_path_is_that_of_the_arrays():
    random = np.random.default_rng(8)
    for digits in (1, 6):  # many equal costs, and none
        rows = random.normal(0.0, 0.3, (6000, 21)).cumsum(axis=0).round(digits) / 10
        rows[random.random(rows.shape) < 0.01] = np.nan
        np.testing.assert_array_equal(lowest_path(rows), lowest_path(rows, compiled=False))


def test_low_lines_of_many_streams_are_those_of_each_alone(tmp_path, monkeypatch):
    valley = Valley(70.0, size=500.0, noise=0.1, fill=(20.0, 10.0, 3.0))
    terrain = Terrain(valley.write(tmp_path / "v.tif"))
    far = LineString([(EAST + 9000.0, NORTH), (EAST + 9100.0, NORTH)])
    lines = [valley.line((-200.0, off), (0.0, -off), (100.0 + 10 * off, off)) for off in range(-8, 9, 2)]
    lines = [*lines[:4], far, LineString([far.coords[0], far.coords[0]]), *lines[4:]]
    alone = [low_line(line, terrain, 15.0) for line in lines]
    for most in (2_000_000, 100_000):  # all of them together, and some at a time
        monkeypatch.setattr("terrain2q.ground.low_line.POINTS_AT_ONCE", most)
        together = list(_low_lines(lines, terrain, 15.0))
        assert [line is None for line in together] == [n == 5 for n in range(len(lines))]
        for one, other in zip(together, alone, strict=True):
            if one is not None:
                for name in ("distance", "x", "y", "drawn", "low", "bed", "usable", "shift"):
                    np.testing.assert_array_equal(getattr(one, name), getattr(other, name))
                assert one.humps == other.humps
    assert list(_low_lines([], terrain, 15.0)) == []
