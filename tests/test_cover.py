"""Land cover and channel polygons under a profile: exact places, gaps, overlaps, edges, zones."""

from __future__ import annotations

import pickle
from itertools import pairwise

import geopandas
import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from shapely.geometry import LineString, MultiPolygon, Polygon, box

from terrain2q.errors import InputError
from terrain2q.ground import cover as cover_module
from terrain2q.ground.cover import (
    ChannelPolygons,
    Cover,
    CoverPiece,
    FallingN,
    Roughness,
    RoughnessTable,
    UniformCover,
    split_by_zone,
)
from terrain2q.ground.terrain import Profile
from terrain2q.hydraulics.roughness import roughness_from_parts

UTM = "EPSG:26915"
X0, Y0 = 500000.0, 4700000.0
ORIGIN = np.array([X0, Y0])
NAN = float("nan")


def plain_profile(stations, x, y, is_vertex):
    return Profile(stations, np.zeros(len(stations)), x, y, is_vertex)


def profile(vertices, spacing=1.0, factor=1.0):
    """Return a profile along vertices given from a round place; `factor` is ground metres in a map metre."""
    line = LineString(np.asarray(vertices, dtype=float))
    corners = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(line.coords, axis=0).T))])
    at = np.unique(np.concatenate([np.arange(0.0, line.length, spacing), corners]))
    xy = shapely.get_coordinates(shapely.line_interpolate_point(line, at)) + ORIGIN
    return plain_profile(at * factor, xy[:, 0], xy[:, 1], np.isin(at, corners))


def layer(shapes, classes=None, ids=None, crs=UTM):
    with np.errstate(invalid="ignore"):
        moved = [None if s is None else shapely.transform(s, lambda xy: xy + ORIGIN) for s in shapes]
    data = {"feature_id": ids or [str(i) for i in range(1, len(shapes) + 1)]}
    if classes is not None:
        data["class"] = classes
    return geopandas.GeoDataFrame(data, geometry=moved, crs=crs)


@pytest.fixture
def table(tmp_path):
    path = tmp_path / "n.csv"
    path.write_text(
        "class,n,n_low,n_high,source\n"
        "pasture,0.035,0.03,0.05,a book\n"
        "lawn,0.035,0.025,0.04,another book\n"
        "wood,0.1,0.08,0.12,\n"
        "water,0.03,,,\n"
        "41,0.12,,,\n"
    )
    return RoughnessTable.from_csv(path)


def assert_spans(pieces, expected, tolerance=1e-8):
    assert [p.land_class for p in pieces] == [e[0] for e in expected]
    assert [(p.start, p.end) for p in pieces] == [pytest.approx(e[1:], abs=tolerance) for e in expected]


def codes(findings):
    return [f.code for f in findings]


# --- the table -----------------------------------------------------------------------------------


def test_table_is_read_with_its_ranges_and_sources(table):
    assert table["pasture"].n == 0.035
    assert (table["pasture"].n_low, table["pasture"].n_high) == (0.03, 0.05)
    assert table["pasture"].source == "a book"
    assert table["wood"].source == "n.csv"
    assert np.isnan(table["water"].n_low)
    assert "41" in table
    assert 41 in table
    assert table[41.0].n == 0.12
    assert table.findings == ()


@pytest.mark.parametrize(
    ("text", "code", "word"),
    [
        ("class,n\nwood,0\n", "number-not-positive", "'0'"),
        ("class,n\nwood,-0.1\n", "number-not-positive", "-0.1"),
        ("class,n\nwood,nan\n", "number-not-positive", "nan"),
        ("class,n\nwood,inf\n", "number-not-positive", "inf"),
        ("class,n\nwood,\n", "number-not-positive", "''"),
        ("class,n\nwood,thick\n", "number-not-positive", "thick"),
        ("class,n,n_low,n_high\nwood,0.1,0.2,0.1\n", "value-not-allowed", "n_low = 0.2"),
        ("class,n,n_shallow\nwood,0.1,0.2\n", "key-conflict", "n and n_shallow"),
        ("class,n,base\nwood,0.1,0.03\n", "key-conflict", "n and base"),
        ("class,n_shallow,depth_shallow,n_deep,depth_deep\nwood,0.2,1,0.1,\n", "key-missing", "depth_deep"),
        (
            "class,n_shallow,depth_shallow,n_deep,depth_deep\nwood,0.1,1,0.2,3\n",
            "value-not-allowed",
            "0.2 at",
        ),
        (
            "class,n_shallow,depth_shallow,n_deep,depth_deep\nwood,0.2,3,0.1,3\n",
            "value-not-allowed",
            "depth 3",
        ),
        ("class,base,vegetation\nwood,,0.05\n", "key-missing", "without base"),
        ("class,base,vegetation\nwood,0.03,-0.05\n", "number-not-positive", "vegetation"),
        ("class,base,vegetation\nwood,0.03,0.5\n", "value-not-allowed", "vegetation is 0.5"),
        ("class,n,n_low\nwood,0.1,x\n", "number-not-positive", "n_low"),
        ("class,n\n,0.1\n", "value-not-allowed", "no class"),
        ("class,n\n41,0.1\n41.0,0.2\nwood,1\nwood,1\n", "class-duplicate", "41, wood"),
        ("class,rough\nwood,0.1\n", "field-missing", "rough"),
    ],
)
def test_table_that_is_wrong(tmp_path, text, code, word):
    path = tmp_path / "n.csv"
    path.write_text(text)
    with pytest.raises(InputError) as caught:
        RoughnessTable.from_csv(path, n_from_parts=roughness_from_parts)
    assert caught.value.code == code
    assert word in caught.value.what
    assert "n.csv, line" in caught.value.where or code in ("class-duplicate", "field-missing")


def test_n_outside_its_own_range_is_kept_for_a_finding(tmp_path):
    path = tmp_path / "n.csv"
    path.write_text("class,n,n_low,n_high\nwood,0.1,0.02,0.05\n")
    row = RoughnessTable.from_csv(path)["wood"]
    assert (row.n, row.n_low, row.n_high) == (0.1, 0.02, 0.05)


@pytest.mark.parametrize(("units", "metre"), [("si", 1.0), ("us", 0.3048)])
def test_n_that_falls_with_depth_is_read_in_the_studys_units(tmp_path, units, metre):
    path = tmp_path / "n.csv"
    path.write_text(
        "class,n,n_shallow,depth_shallow,n_deep,depth_deep,source\n"
        "reed,,0.2,0.5,0.08,2,a survey\n"
        "lawn,0.03,,,,,a book\n"
    )
    found = RoughnessTable.from_csv(path, units)
    assert found["reed"].n == 0.08
    assert found["reed"].falling == FallingN(0.2, 0.5 * metre, 0.08, 2.0 * metre)
    unit = "m" if units == "si" else "ft"
    assert found["reed"].source == f"a survey, n 0.2 to a depth of 0.5 {unit}, 0.08 from 2 {unit} on"
    assert found["lawn"].falling is None
    assert found["lawn"].source == "a book"


def test_n_from_parts_is_the_published_sum(tmp_path):
    path = tmp_path / "n.csv"
    path.write_text(
        "class,base,irregularity,variation,obstructions,vegetation,meandering,source\n"
        "bed,0.025,0.003,0,0,0.007,1.15,seen on site\n"
        "wood,0.025,0.005,,0.01,0.1,,seen on site\n"
    )
    found = RoughnessTable.from_csv(path, n_from_parts=roughness_from_parts)
    # a row with meandering is a channel's, and the factor acts on the sum
    assert found["bed"].n == pytest.approx(1.15 * 0.035, rel=1e-12)
    assert found["wood"].n == pytest.approx(0.14, rel=1e-12)
    assert found["wood"].source == (
        "seen on site, n from parts (floodplain): "
        "base 0.025, irregularity 0.005, obstructions 0.01, vegetation 0.1"
    )
    with pytest.raises(InputError, match="in parts"):
        RoughnessTable.from_csv(path)


def test_misspelled_column_is_named_and_others_are_left_alone(tmp_path):
    path = tmp_path / "n.csv"
    path.write_text("Class,N,n_lo,colour\nwood,0.1,0.08,green\n")
    found = RoughnessTable.from_csv(path)
    assert codes(found.findings) == ["column-ignored"]
    assert "'n_lo'" in found.findings[0].message
    assert "'n_low'" in found.findings[0].message
    assert found["wood"].n == 0.1


# --- pieces --------------------------------------------------------------------------------------


def test_pieces_end_where_the_line_crosses_the_edges(table):
    cover = Cover(
        layer([box(-50, -50, 12.25, 50), box(12.25, -50, 90, 50)], ["pasture", "wood"]), "class", table
    )
    pieces, findings = cover.pieces(profile([(0, 0), (40, 0)]), "A")
    assert findings == []
    assert_spans(pieces, [("pasture", 0, 12.25), ("wood", 12.25, 40)])
    assert pieces[0].start == 0.0
    assert pieces[-1].end == 40.0
    assert pieces[0].end == pieces[1].start
    assert (pieces[1].n, pieces[1].n_low, pieces[1].n_high, pieces[1].n_source) == (0.1, 0.08, 0.12, "n.csv")


def test_stations_are_ground_and_may_stretch_along_the_line(table):
    cover = Cover(
        layer([box(-50, -50, 12.25, 50), box(12.25, -50, 90, 50)], ["pasture", "wood"]), "class", table
    )
    plain = profile([(0, 0), (40, 0)])
    stations = plain.stations + 0.001 * plain.stations**2  # 144.144 at 12, 13.169 at 13
    pieces, _ = cover.pieces(plain_profile(stations, plain.x, plain.y, plain.is_vertex))
    expected = 12.144 + 0.25 * (13.169 - 12.144)
    assert_spans(pieces, [("pasture", 0, expected), ("wood", expected, 41.6)])


def test_slanted_edge_and_bent_line(table):
    # The edge x + y = 20 meets the leg y = 0 at x = 20 and, past the bend at (30, 0), the leg x = 30 nowhere;
    # the leg from (30, 0) to (0, 30) runs along x + y = 30, and (0, 30) to (0, 0) meets it at y = 20.
    below = Polygon([(-90, -90), (110, -90), (-90, 110)])
    above = Polygon([(110, -90), (110, 110), (-90, 110)])
    cover = Cover(layer([below, above], ["lawn", "wood"]), "class", table)
    pieces, findings = cover.pieces(profile([(0, 0), (30, 0), (0, 30), (0, 0)]))
    diagonal = 30 * np.sqrt(2)
    assert findings == []
    assert_spans(
        pieces,
        [("lawn", 0, 20), ("wood", 20, 40 + diagonal), ("lawn", 40 + diagonal, 60 + diagonal)],
    )


def test_hole_and_multipolygon(table):
    ring = Polygon([(-9, -9), (50, -9), (50, 9), (-9, 9)], [[(10, -5), (14, -5), (14, 5), (10, 5)]])
    filling = MultiPolygon([box(10, -5, 14, 5), box(50, -9, 57, 9)])
    cover = Cover(layer([ring, filling], ["pasture", "water"]), "class", table, 0.05)
    pieces, _ = cover.pieces(profile([(0, 0), (60, 0)]))
    expected = [("pasture", 0, 10), ("water", 10, 14), ("pasture", 14, 50), ("water", 50, 57), ("", 57, 60)]
    assert_spans(pieces, expected)


def test_neighbours_of_one_class_are_one_piece(table):
    cover = Cover(layer([box(-9, -9, 7, 9), box(7, -9, 50, 9)], [41, 41]), "class", table)
    pieces, _ = cover.pieces(profile([(0, 0), (20, 0)]))
    assert_spans(pieces, [("41", 0, 20)])


def test_gap_takes_the_default_and_is_a_finding(table):
    cover = Cover(
        layer([box(-9, -9, 10, 9), box(12.5, -9, 15, 9)], ["wood", "wood"]), "class", table, 0.06, "us"
    )
    pieces, findings = cover.pieces(profile([(0, 0), (20, 0)]), "R 7")
    assert_spans(pieces, [("wood", 0, 10), ("", 10, 12.5), ("wood", 12.5, 15), ("", 15, 20)])
    assert (pieces[1].n, pieces[1].n_source) == (0.06, "default_n")
    assert codes(findings) == ["cover-gap"]
    assert findings[0].feature_id == "R 7"
    assert "R 7" in findings[0].message
    assert "24.6 ft" in findings[0].message  # 7.5 m in all
    assert "32.81 to 41.01 ft" in findings[0].message
    assert (findings[0].x - X0, findings[0].y - Y0) == pytest.approx((11.25, 0))


def test_gap_without_default_fails_the_section(table):
    cover = Cover(layer([box(-9, -9, 10, 9)], ["wood"]), "class", table)
    pieces, findings = cover.pieces(profile([(0, 0), (20, 0)]))
    assert_spans(pieces, [("wood", 0, 10), ("", 10, 20)])
    assert np.isnan(pieces[1].n)
    assert codes(findings) == ["cover-gap-no-default"]
    assert findings[0].severity == "failed"


def test_profile_off_the_cover(table):
    cover = Cover(layer([box(500, 500, 510, 510)], ["wood"]), "class", table, 0.05)
    pieces, findings = cover.pieces(profile([(0, 0), (20, 0)]))
    assert_spans(pieces, [("", 0, 20)])
    assert codes(findings) == ["cover-gap"]


def test_in_an_overlap_the_higher_n_counts_in_either_order(table):
    shapes, classes = [box(-9, -9, 15, 9), box(10, -9, 50, 9)], ["wood", "lawn"]
    for order in (slice(None), slice(None, None, -1)):
        cover = Cover(layer(shapes[order], classes[order]), "class", table)
        pieces, findings = cover.pieces(profile([(0, 0), (20, 0)]), "A")
        assert_spans(pieces, [("wood", 0, 15), ("lawn", 15, 20)])
        assert codes(findings) == ["cover-overlap"]
        assert "10.00 to 15.00 m" in findings[0].message
        assert "wood" in findings[0].message
        assert "lawn" in findings[0].message
        assert findings[0].x - X0 == pytest.approx(12.5)


def test_overlap_of_one_class_is_no_finding(table):
    cover = Cover(layer([box(-9, -9, 15, 9), box(10, -9, 50, 9)], ["wood"] * 2), "class", table)
    pieces, findings = cover.pieces(profile([(0, 0), (20, 0)]))
    assert findings == []
    assert_spans(pieces, [("wood", 0, 20)])


@pytest.mark.parametrize("azimuth", [0.0, 17.3, 45.0, 90.0, 211.7])
@pytest.mark.parametrize("backwards", [False, True])
def test_line_along_a_shared_edge_is_neither_lost_nor_doubled(table, azimuth, backwards):
    way = np.array([np.sin(np.radians(azimuth)), np.cos(np.radians(azimuth))])
    side = np.array([way[1], -way[0]])
    # Both polygons have other vertices on the edge, and the line is longer than it on one side.
    marks = [np.outer(np.array(v, dtype=float), way) for v in ([0, 7, 31, 60], [0, 22, 60])]
    left = Polygon([*marks[0], 60 * way - 30 * side, -30 * side])
    right = Polygon([*marks[1], 60 * way + 30 * side, 30 * side])
    beyond = Polygon([60 * way - 30 * side, 60 * way + 30 * side, 90 * way + 30 * side, 90 * way - 30 * side])
    cover = Cover(layer([left, right, beyond], ["pasture", "wood", "water"]), "class", table)
    ends = [5 * way, 80 * way]
    pieces, findings = cover.pieces(profile(ends[::-1] if backwards else ends))
    assert findings == []
    expected = [("wood", 0, 55), ("water", 55, 75)]
    if backwards:
        expected = [("water", 0, 20), ("wood", 20, 75)]
    assert_spans(pieces, expected)


def test_line_along_an_outer_edge_keeps_the_polygon(table):
    cover = Cover(layer([box(0, 0, 40, 30)], ["pasture"]), "class", table)
    pieces, findings = cover.pieces(profile([(5, 0), (25, 0)]))
    assert findings == []
    assert_spans(pieces, [("pasture", 0, 20)])


def test_line_through_a_corner(table):
    quarters = [box(-30, -30, 0, 0), box(0, -30, 30, 0), box(-30, 0, 0, 30), box(0, 0, 30, 30)]
    cover = Cover(layer(quarters, ["pasture", "wood", "water", "lawn"]), "class", table)
    pieces, findings = cover.pieces(profile([(-20, -20), (20, 20)]))
    assert findings == []
    half = 20 * np.sqrt(2)
    assert_spans(pieces, [("pasture", 0, half), ("lawn", half, 2 * half)])


def test_slivers_are_nothing(table):
    shapes = [box(-9, -9, 10, 9), box(10 + 4e-7, -9, 50, 9)]
    cover = Cover(layer(shapes, ["pasture", "wood"]), "class", table)
    pieces, findings = cover.pieces(profile([(0, 0), (20, 0)]))
    assert findings == []
    assert_spans(pieces, [("pasture", 0, 10), ("wood", 10, 20)], 1e-6)


def test_profile_without_points_has_no_pieces(table):
    nothing = plain_profile(*(np.empty(0),) * 3, np.empty(0, dtype=bool))
    cover = Cover(layer([box(-9, -9, 50, 9)], ["wood"]), "class", table)
    (one, two) = cover.pieces_many([nothing, profile([(0, 0), (20, 0)])], ["a", "b"])
    assert one == ([], [])
    assert_spans(two[0], [("wood", 0, 20)])
    assert cover.pieces_many([]) == []
    assert UniformCover(0.05).pieces(nothing) == ([], [])


def test_profile_that_is_not_straight_between_vertices(table):
    # A line drawn in another projection: its points bow out between vertices, over the edge y = 1.
    cover = Cover(layer([box(-9, -9, 50, 1), box(-9, 1, 50, 9)], ["wood", "lawn"]), "class", table)
    xy = np.array([(0, 0), (10, 2), (20, 0)], dtype=float) + ORIGIN
    leg = np.hypot(10, 2)
    bowed = plain_profile(np.array([0, leg, 2 * leg]), xy[:, 0], xy[:, 1], np.array([True, False, True]))
    pieces, _ = cover.pieces(bowed)
    assert_spans(pieces, [("wood", 0, leg / 2), ("lawn", leg / 2, 1.5 * leg), ("wood", 1.5 * leg, 2 * leg)])


def random_cover(rng, table):
    """Return random convex polygons over a background with gaps, and their classes."""
    shapes = [box(-60, -60, -5, 60), box(3, -60, 60, 60)]
    for _ in range(6):
        points = rng.normal(rng.uniform(-30, 30, 2), 12, (6, 2)).round(1)
        shapes.append(shapely.MultiPoint(points).convex_hull)
    classes = rng.choice(["pasture", "wood", "water", "41"], len(shapes)).tolist()
    return shapes, classes


@settings(deadline=None, max_examples=60, derandomize=True)
@given(seed=st.integers(0, 10**6))
def test_random_covers_agree_with_overlays_and_do_not_care_about_direction(seed):
    rng = np.random.default_rng(seed)
    roughness = {"pasture": 0.035, "wood": 0.1, "water": 0.03, "41": 0.12}
    shapes, classes = random_cover(rng, roughness)
    table = table_of(roughness)
    cover = Cover(layer(shapes, classes), "class", table, 0.05)
    vertices = rng.uniform(-50, 50, (3, 2))
    there = profile(vertices)
    pieces, _ = cover.pieces(there)
    assert pieces[0].start == 0.0
    assert pieces[-1].end == there.stations[-1]
    assert all(one.end == two.start and one.land_class != two.land_class for one, two in pairwise(pieces))
    # An independent answer: overlays by falling n, each class taking what is left of the line.
    left = LineString(vertices)
    for name in sorted(roughness, key=roughness.get, reverse=True):
        ground = shapely.union_all([s for s, c in zip(shapes, classes, strict=True) if c == name])
        expected = left.intersection(ground).length
        left = left.difference(ground)
        assert sum(p.end - p.start for p in pieces if p.land_class == name) == pytest.approx(
            expected, abs=1e-6
        )
    back, _ = cover.pieces(profile(vertices[::-1]))
    total = there.stations[-1]
    assert_spans(pieces, [(p.land_class, total - p.end, total - p.start) for p in back[::-1]], 3e-6)


def table_of(roughness):
    return RoughnessTable({name: Roughness(n) for name, n in roughness.items()})


def test_many_profiles_are_as_one_by_one(table):
    rng = np.random.default_rng(5)
    shapes, classes = random_cover(rng, table)
    cover = Cover(layer(shapes, classes), "class", table, 0.05)
    profiles = [profile(rng.uniform(-50, 50, (2, 2))) for _ in range(20)]
    names = [str(i) for i in range(20)]
    assert cover.pieces_many(profiles, names) == [
        cover.pieces(p, name) for p, name in zip(profiles, names, strict=True)
    ]


def test_degrees_give_the_same_pieces(table):
    polygons = layer([box(-50, -50, 12.25, 50), box(12.25, -50, 90, 50)], ["pasture", "wood"]).to_crs(4269)
    plain = profile([(0, 0), (40, 0)])
    lon, lat = (
        geopandas.GeoSeries(geopandas.points_from_xy(plain.x, plain.y), crs=UTM)
        .to_crs(4269)
        .pipe(lambda points: (points.x.to_numpy(), points.y.to_numpy()))
    )
    cover = Cover(polygons, "class", table)
    pieces, _ = cover.pieces(plain_profile(plain.stations, lon, lat, plain.is_vertex))
    # Edges of 100 m that are straight in one projection sag by less than 0.2 mm in the other.
    assert_spans(pieces, [("pasture", 0, 12.25), ("wood", 12.25, 40)], 2e-4)


# --- the layer -----------------------------------------------------------------------------------


def test_classes_missing_from_the_table_are_all_listed(table):
    polygons = layer([box(0, 0, 1, 1)] * 5, ["wood", "marsh", 95, 9, "marsh"])
    polygons.attrs["source"] = "cover.gpkg|layer=land"
    with pytest.raises(InputError) as caught:
        Cover(polygons, "class", table)
    assert caught.value.code == "class-missing"
    assert "9, 95, marsh" in caught.value.what
    assert "n.csv" in caught.value.what
    assert "cover.gpkg|layer=land" in caught.value.where


def test_class_field_missing_and_default_not_positive(table):
    polygons = layer([box(0, 0, 1, 1)], ["wood"])
    with pytest.raises(InputError) as caught:
        Cover(polygons, "klass", table)
    assert caught.value.code == "field-missing"
    assert "class" in caught.value.what
    for bad in (0.0, -1.0, NAN, np.inf):
        with pytest.raises(InputError) as caught:
            Cover(polygons, "class", table, bad)
        assert caught.value.code == "number-not-positive"
        with pytest.raises(InputError):
            UniformCover(bad)


@pytest.mark.parametrize("stored", ["41", 41, 41.0, " 41 "])
def test_class_is_matched_however_it_is_stored(table, stored):
    cover = Cover(layer([box(-9, -9, 50, 9)], [stored]), "class", table)
    assert_spans(cover.pieces(profile([(0, 0), (20, 0)]))[0], [("41", 0, 20)])


def test_polygons_without_class_are_gaps(table):
    polygons = layer([box(-9, -9, 10, 9), box(10, -9, 50, 9)], ["wood", None])
    cover = Cover(polygons, "class", table, 0.05)
    assert codes(cover.findings) == ["class-empty"]
    assert cover.findings[0].feature_id == "2"
    pieces, findings = cover.pieces(profile([(0, 0), (20, 0)]))
    assert_spans(pieces, [("wood", 0, 10), ("", 10, 20)])
    assert codes(findings) == ["cover-gap"]


def test_invalid_polygons_are_mended_or_dropped(table):
    bow_tie = Polygon([(0, -10), (20, 10), (20, -10), (0, 10)])
    flat = Polygon([(0, 0), (9, 0), (4, 0)])
    with np.errstate(invalid="ignore"):
        broken = Polygon([(0, 0), (np.nan, 1), (4, 4)])
    cover = Cover(layer([bow_tie, flat, broken, None], ["wood"] * 4), "class", table, 0.05)
    found = {f.feature_id: f.code for f in cover.findings}
    assert found == {
        "1": "polygon-mended",
        "2": "polygon-dropped",
        "3": "polygon-dropped",
        "4": "polygon-dropped",
    }
    pieces, _ = cover.pieces(profile([(10, -9), (10, 9)]))
    assert_spans(pieces, [("", 0, 18)])  # it only touches the point where the two triangles meet
    pieces, _ = cover.pieces(profile([(-5, 0), (15, 0)]))
    # It passes from one triangle to the other through the point where they meet.
    assert_spans(pieces, [("", 0, 5), ("wood", 5, 20)])
    pieces, _ = cover.pieces(profile([(5, -9), (5, 9)]))
    # The two triangles of the bow tie meet at (10, 0): at x = 5 the left one reaches from y = -5 to 5.
    assert_spans(pieces, [("", 0, 4), ("wood", 4, 14), ("", 14, 18)])


@pytest.mark.parametrize("kind", ["plain", "with holes and parts", "none that can be used"])
def test_a_cover_that_is_sent_elsewhere_is_the_same_there(table, kind):
    holed = Polygon([(0, -9), (9, -9), (9, 9), (0, 9)], [[(2, -3), (4, -3), (4, 3), (2, 3)]])
    parts = shapely.MultiPolygon([box(9, -9, 11, 9), box(13, -9, 14.3, 9)])
    shapes = {
        "plain": [box(0, -9, 1 / 3, 9), box(1 / 3, -9, 11, 9)],
        "with holes and parts": [holed, parts],
        "none that can be used": [None, Polygon([(0, 0), (9, 0), (4, 0)])],
    }[kind]
    cover = Cover(layer(shapes, ["wood", "water"]), "class", table, 0.05)
    there = pickle.loads(pickle.dumps(cover))
    lines = [profile([(-1, 0), (20, 1)]), profile([(3, -5), (10, 5)])]
    assert repr(there.pieces_many(lines, ["a", "b"])) == repr(cover.pieces_many(lines, ["a", "b"]))
    assert repr(there.findings) == repr(cover.findings)


def test_uniform_cover_is_one_piece():
    cover = UniformCover(0.045)
    (one, two) = cover.pieces_many([profile([(0, 0), (20, 0)]), profile([(0, 0), (0, 7)])], ["a", "b"])
    assert one == ([CoverPiece(0.0, 20.0, "", 0.045, n_source="default_n")], [])
    assert (two[0][0].end, two[1]) == (7.0, [])
    assert cover.findings == ()


# --- the channel ---------------------------------------------------------------------------------


def test_channel_interval():
    channel = ChannelPolygons(layer([box(8.5, -50, 11.25, 50)]))
    lines = [profile([(0, 0), (20, 0)]), profile([(20, 5), (0, 5)]), profile([(0, 0), (5, 0)])]
    intervals, findings = channel.interval_many(lines, [10.0, 10.0, NAN], ["a", "b", "c"])
    assert intervals[0] == pytest.approx((8.5, 11.25), abs=1e-8)
    assert intervals[1] == pytest.approx((8.75, 11.5), abs=1e-8)
    assert intervals[2] is None
    assert [(f.code, f.feature_id) for f in findings] == [("channel-by-polygon-missing", "c")]


def test_channel_in_pieces_takes_the_one_at_the_stream():
    channel = ChannelPolygons(layer([box(2, -50, 4, 50), box(8, -50, 11, 50)]))
    line = profile([(0, 0), (20, 0)])
    for crossing, expected, code in [
        (3.0, (2, 4), ["channel-in-pieces"]),
        (8.0, (8, 11), ["channel-in-pieces"]),
        (NAN, (8, 11), ["channel-in-pieces"]),
        (5.5, (2, 4), ["channel-off-stream", "channel-in-pieces"]),
        (15.0, (8, 11), ["channel-off-stream", "channel-in-pieces"]),
    ]:
        (interval,), findings = channel.interval_many([line], [crossing])
        assert interval == pytest.approx(expected, abs=1e-8)
        assert codes(findings) == code
        assert "2.00 to 4.00 m" in findings[-1].message
        assert "8.00 to 11.00 m" in findings[-1].message


def test_channel_polygons_that_touch_are_one_and_islands_belong_to_it():
    island = Polygon(box(5, -20, 12, 20).exterior.coords, [box(6, -3, 7, 3).exterior.coords])
    channel = ChannelPolygons(layer([island, box(12, -20, 15, 20)]))
    (interval,), findings = channel.interval_many([profile([(0, 0), (20, 0)])], [9.0])
    assert interval == pytest.approx((5, 15), abs=1e-8)
    assert findings == []


def test_channel_off_the_stream():
    channel = ChannelPolygons(layer([box(8, -50, 11, 50)]))
    (interval,), findings = channel.interval_many([profile([(0, 0), (20, 0)])], [14.0], ["a"])
    assert interval == pytest.approx((8, 11), abs=1e-8)
    assert codes(findings) == ["channel-off-stream"]
    assert findings[0].x - X0 == pytest.approx(14.0)


# --- zones ---------------------------------------------------------------------------------------

PIECES = [
    CoverPiece(0.0, 6.0, "pasture", 0.035, 0.03, 0.05, "a book"),
    CoverPiece(6.0, 10.0, "lawn", 0.035, 0.025, NAN, "another"),
    CoverPiece(10.0, 20.0, "wood", 0.1, NAN, NAN, "a book"),
]


def rows(subareas):
    return [(s.start, s.end, s.zone, s.n, s.land_class, s.n_source) for s in subareas]


def test_zones_cut_the_cover_and_the_channel_takes_its_own_n():
    subareas = split_by_zone(PIECES, (8.0, 12.0), 0.04)
    assert rows(subareas) == [
        (0.0, 8.0, "left floodplain", 0.035, "pasture; lawn", "a book; another"),
        (8.0, 12.0, "channel", 0.04, "lawn; wood", "study"),
        (12.0, 20.0, "right floodplain", 0.1, "wood", "a book"),
    ]
    assert (subareas[0].n_low, subareas[0].n_high) == (0.025, 0.05)
    assert np.isnan(subareas[1].n_low)
    assert np.isnan(subareas[2].n_high)


def test_without_its_own_n_the_channel_takes_the_covers():
    assert rows(split_by_zone(PIECES, (8.0, 12.0))) == [
        (0.0, 8.0, "left floodplain", 0.035, "pasture; lawn", "a book; another"),
        (8.0, 10.0, "channel", 0.035, "lawn", "another"),
        (10.0, 12.0, "channel", 0.1, "wood", "a book"),
        (12.0, 20.0, "right floodplain", 0.1, "wood", "a book"),
    ]


def test_without_channel_the_whole_line_is_one():
    assert rows(split_by_zone(PIECES, None)) == [
        (0.0, 10.0, "channel", 0.035, "pasture; lawn", "a book; another"),
        (10.0, 20.0, "channel", 0.1, "wood", "a book"),
    ]
    assert rows(split_by_zone(PIECES, None, 0.05)) == [
        (0.0, 20.0, "channel", 0.05, "pasture; lawn; wood", "study")
    ]


@pytest.mark.parametrize("channel", [(-5.0, 6.0), (0.0, 6.0), (1e-7, 6.0 + 1e-7)])
def test_channel_at_the_sections_end_leaves_no_sliver(channel):
    subareas = split_by_zone(PIECES, channel)
    assert [s.zone for s in subareas] == ["channel", "right floodplain", "right floodplain"]
    assert subareas[0].start == 0.0
    assert subareas[0].end == subareas[1].start == pytest.approx(6.0, abs=2e-7)


def test_pieces_without_n_stay_without():
    subareas = split_by_zone([CoverPiece(0.0, 5.0, "", NAN)], (1.0, 2.0), 0.03)
    assert [np.isnan(s.n) for s in subareas] == [True, False, True]


def test_channel_n_must_be_above_zero():
    for bad in (0.0, -1.0, NAN):
        with pytest.raises(InputError) as caught:
            split_by_zone(PIECES, (8.0, 12.0), bad)
        assert caught.value.code == "number-not-positive"
    assert split_by_zone([], None) == []


@given(
    cuts=st.lists(st.integers(1, 99), unique=True, max_size=8),
    kinds=st.lists(st.sampled_from([0.03, 0.05, 0.1]), min_size=9, max_size=9),
    low=st.integers(0, 99),
    width=st.integers(1, 60),
    own=st.sampled_from([None, 0.04]),
)
def test_subareas_cover_the_section_and_mirror(cuts, kinds, low, width, own):
    marks = [0, *sorted(cuts), 100]
    pieces = [
        CoverPiece(float(a), float(b), f"c{n}", n) for (a, b), n in zip(pairwise(marks), kinds, strict=False)
    ]
    channel = (float(low), float(min(low + width, 100)))
    subareas = split_by_zone(pieces, channel, own)
    assert (subareas[0].start, subareas[-1].end) == (0.0, 100.0)
    assert all(one.end == two.start for one, two in pairwise(subareas))
    assert all((one.zone, one.n) != (two.zone, two.n) for one, two in pairwise(subareas))
    in_channel = [s for s in subareas if s.zone == "channel"]
    assert (in_channel[0].start, in_channel[-1].end) == channel
    mirrored = split_by_zone(
        [CoverPiece(100 - p.end, 100 - p.start, p.land_class, p.n) for p in pieces[::-1]],
        (100 - channel[1], 100 - channel[0]),
        own,
    )
    swap = {
        "left floodplain": "right floodplain",
        "right floodplain": "left floodplain",
        "channel": "channel",
    }
    assert [(s.start, s.end, s.zone, s.n) for s in subareas] == [
        (100 - m.end, 100 - m.start, swap[m.zone], m.n) for m in mirrored[::-1]
    ]


def test_pieces_whose_n_falls_alike_become_one_subarea_and_others_do_not():
    falling = FallingN(0.2, 0.5, 0.08, 2.0)
    pieces = [
        CoverPiece(0.0, 4.0, "reed", 0.08, falling=falling),
        CoverPiece(4.0, 6.0, "sedge", 0.08, falling=falling),
        CoverPiece(6.0, 10.0, "lawn", 0.08),
    ]
    subareas = split_by_zone(pieces, (9.0, 10.0), 0.03)
    assert [(s.start, s.end, s.falling) for s in subareas] == [
        (0.0, 6.0, falling), (6.0, 9.0, None), (9.0, 10.0, None),
    ]  # fmt: skip
    assert split_by_zone(pieces, None)[0].falling == falling
    assert split_by_zone(pieces, (0.0, 5.0), 0.03)[0].falling is None


def test_compiled_stations_are_those_of_the_arrays():
    """Many profiles, some with repeated points, cut at edges: one at a time and all at once give the same."""
    random = np.random.default_rng(5)
    profiles = []
    for _ in range(320):
        n = int(random.integers(2, 40))
        x, y = np.cumsum(random.uniform(0, 3, n)), np.cumsum(random.normal(0, 1, n))
        if n > 4:
            x[3], y[3] = x[2], y[2]
        steps = np.hypot(np.diff(x), np.diff(y)) * random.uniform(0.9, 1.1)
        vertices = random.random(n) < 0.3
        profiles.append(Profile(np.concatenate([[0.0], np.cumsum(steps)]), np.zeros(n), x, y, vertices))
    segments = cover_module._Segments(profiles, 1e-6)
    segment = np.sort(random.integers(0, len(segments.length), 4000))
    share = np.where(random.random(4000) < 0.1, random.integers(0, 2, 4000), random.random(4000))
    many = segments._many_stations(segment, share)
    one_by_one = np.concatenate(
        [
            cover_module._Segments([profile], 1e-6)._stations(
                segment[segments.profile[segment] == i] - np.searchsorted(segments.profile, i),
                share[segments.profile[segment] == i],
            )
            for i, profile in enumerate(profiles)
        ]
    )
    np.testing.assert_array_equal(many, one_by_one)
