"""Cut lines brought together with their streams: direction, crossing, stream distance and every finding."""

from __future__ import annotations

import geopandas
import numpy as np
import pyproj
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from shapely.geometry import LineString, MultiLineString

from terrain2q.ground.cut_lines import orient_cut_lines
from terrain2q.ground.streams import StreamNetwork

UTM = "EPSG:26915"
X0, Y0 = 500000.0, 4700000.0  # on the central meridian, where the scale is 0.9996
ORIGIN = np.array([X0, Y0])
GEOD = pyproj.CRS(UTM).get_geod()
TO_DEGREES = pyproj.Transformer.from_crs(UTM, 4269, always_xy=True)


def layer(shapes, ids=None, crs=UTM, **fields):
    """Return a layer whose coordinates are metres from a round place."""
    with np.errstate(invalid="ignore"):  # some tests need coordinates that are not numbers
        moved = [None if s is None else shapely.transform(s, lambda xy: xy + ORIGIN) for s in shapes]
    ids = ids or [str(i) for i in range(1, len(shapes) + 1)]
    return geopandas.GeoDataFrame({"feature_id": ids, **fields}, geometry=moved, crs=crs)


def line_of(points):
    with np.errstate(invalid="ignore"):
        return LineString(points)


def ground_length(points):
    lon, lat = TO_DEGREES.transform(*(np.asarray(points, dtype=float) + ORIGIN).T)
    return GEOD.line_length(lon, lat)


def codes(findings):
    return sorted(f.code for f in findings)


def only(findings, code):
    (finding,) = [f for f in findings if f.code == code]
    return finding


NORTHWARD = LineString([(0, -500), (0, 500)])  # water runs north: the left bank is west
ACROSS = LineString([(-100, 0), (100, 0)])


def test_line_from_the_left_bank_is_kept():
    (line,), findings = orient_cut_lines(layer([ACROSS]), layer([NORTHWARD], ["creek"]), UTM)
    assert findings == []
    assert not line.turned
    assert line.usable
    assert line.stream == "creek"
    assert line.x - X0 == pytest.approx([-100, 100])
    assert line.crossing == pytest.approx(100.0)
    # At the crossing 500 map metres of the stream lie upstream; on the ground they are 1/0.9996 longer.
    assert line.stream_distance == pytest.approx(ground_length([(0, -500), (0, 0)]), rel=1e-9)
    assert line.stream_distance == pytest.approx(500 / 0.9996, rel=1e-6)


def test_line_from_the_right_bank_is_turned_and_says_so():
    bent = LineString([(120, 10), (40, 0), (-100, 0)])
    (line,), findings = orient_cut_lines(layer([bent], ["A"]), layer([NORTHWARD]), UTM)
    assert codes(findings) == ["line-turned"]
    assert findings[0].feature_id == "A"
    assert findings[0].severity == "note"
    assert line.turned
    assert line.x - X0 == pytest.approx([-100, 40, 120])
    assert line.crossing == pytest.approx(100.0)


@settings(deadline=None, max_examples=60)
@given(
    stream=st.floats(0, 360),
    skew=st.floats(-50, 50),
    backwards=st.booleans(),
    where=st.floats(0.1, 0.9),
)
def test_line_runs_from_the_left_bank_at_any_azimuth(stream, skew, backwards, where):
    down = np.array([np.sin(np.radians(stream)), np.cos(np.radians(stream))])
    way = np.radians(stream + 90 + skew)
    across = np.array([np.sin(way), np.cos(way)])
    points = [-200 * where * across, 200 * (1 - where) * across]
    drawn = points[::-1] if backwards else points
    (line,), _ = orient_cut_lines(
        layer([LineString(drawn)]), layer([LineString([-300 * down, 300 * down])]), UTM
    )
    assert line.turned is backwards
    assert np.column_stack([line.x - X0, line.y - Y0]) == pytest.approx(np.array(points), abs=1e-6)
    assert line.crossing == pytest.approx(200 * where, abs=1e-6)
    assert line.stream_distance == pytest.approx(300 / 0.9996, rel=1e-5)


def test_the_same_line_in_degrees_and_in_web_maps_metres():
    streams, lines = layer([NORTHWARD]), layer([LineString([(80, 5), (-120, 5)])])
    (plain,), _ = orient_cut_lines(lines, streams, UTM)
    for crs in (4269, 3857):
        (other,), findings = orient_cut_lines(lines.to_crs(crs), streams.to_crs(crs), crs)
        assert codes(findings) == ["line-turned"]
        # A chord of 200 m that is straight in one projection sags 0.7 mm, L² tan(latitude) / 8R, in another.
        assert other.stream_distance == pytest.approx(plain.stream_distance, abs=8e-4)
        total = np.hypot(np.diff(other.x), np.diff(other.y)).sum()
        assert other.crossing / total == pytest.approx(120 / 200, rel=1e-5)


def test_without_streams_the_drawn_direction_stands():
    lines, findings = orient_cut_lines(layer([ACROSS, LineString([(9, 50), (0, 50)])]), None, UTM)
    assert codes(findings) == ["direction-unknown"] * 2
    assert {f.severity for f in findings} == {"note"}
    assert [line.stream for line in lines] == ["", ""]
    assert np.isnan([line.crossing for line in lines]).all()
    assert np.isnan([line.stream_distance for line in lines]).all()
    assert lines[1].x - X0 == pytest.approx([9, 0])
    assert findings[0].x == pytest.approx(X0)


def test_lines_that_cannot_be_used():
    shapes = [
        None,
        LineString(),
        LineString([(5, 5), (5, 5)]),
        line_of([(0, 0), (np.nan, 1)]),
        line_of([(0, 0), (np.inf, 1)]),
        MultiLineString([[(-50, 3), (-1, 3)], [(1, 3), (50, 3)]]),
    ]
    lines, findings = orient_cut_lines(layer(shapes, list("abcdef")), layer([NORTHWARD]), UTM)
    assert [(f.feature_id, f.code) for f in findings] == [
        ("a", "line-empty"),
        ("b", "line-empty"),
        ("c", "line-empty"),
        ("d", "line-not-finite"),
        ("e", "line-not-finite"),
        ("f", "line-multipart"),
    ]
    assert {f.severity for f in findings} == {"failed"}
    assert [line.section_id for line in lines] == list("abcdef")
    assert not any(line.usable for line in lines)
    assert all(len(line.x) == len(line.y) == 0 for line in lines)


def test_parts_that_join_become_one_line():
    joined = MultiLineString([[(-50, 3), (0, 4)], [(0, 4), (50, 3)]])
    opposed = MultiLineString([[(-50, 23), (0, 24)], [(50, 23), (0, 24)]])
    single = MultiLineString([[(-50, 43), (50, 43)]])
    lines, findings = orient_cut_lines(layer([joined, opposed, single]), layer([NORTHWARD]), UTM)
    assert [(f.feature_id, f.code) for f in findings] == [
        ("1", "line-parts-joined"),
        ("2", "line-parts-joined"),
    ]
    for line, y in zip(lines[:2], (3, 23), strict=True):
        assert line.x - X0 == pytest.approx([-50, 0, 50])
        assert line.y - Y0 == pytest.approx([y, y + 1, y])


def test_joined_parts_keep_the_first_parts_direction():
    opposed = MultiLineString([[(50, 3), (0, 4)], [(-50, 3), (0, 4)]])
    (line,), _ = orient_cut_lines(layer([opposed]), None, UTM)
    assert line.x - X0 == pytest.approx([50, 0, -50])


def test_repeated_points_are_dropped():
    (line,), _ = orient_cut_lines(layer([LineString([(-9, 0), (-9, 0), (9, 0)])]), None, UTM)
    assert line.x - X0 == pytest.approx([-9, 9])


def test_line_that_crosses_itself():
    loop = LineString([(-50, 0), (60, 0), (60, 30), (50, 30), (50, -10)])
    _, findings = orient_cut_lines(layer([loop]), layer([NORTHWARD]), UTM)
    assert codes(findings) == ["line-crosses-itself"]


def test_line_that_misses_its_stream_is_turned_by_the_nearest():
    near_side = LineString([(100, 0), (20, 0)])
    (line,), findings = orient_cut_lines(layer([near_side]), layer([NORTHWARD], ["Mill Creek"]), UTM, "us")
    missed = only(findings, "line-misses-stream")
    assert codes(findings) == ["line-misses-stream", "line-turned"]
    assert "Mill Creek" in missed.message
    assert "65.6 ft" in missed.message  # 20 map metres are 20.008 m on the ground
    assert (missed.x - X0, missed.y - Y0) == pytest.approx((60, 0))
    assert line.turned
    assert line.stream == "Mill Creek"
    assert np.isnan(line.crossing)
    assert line.stream_distance == pytest.approx(500 / 0.9996, rel=1e-6)


def test_line_far_from_every_stream_is_taken_as_drawn():
    (line,), findings = orient_cut_lines(layer([LineString([(900, 0), (700, 0)])]), layer([NORTHWARD]), UTM)
    assert codes(findings) == ["line-misses-stream"]
    assert "taken as drawn" in findings[0].message
    assert not line.turned
    assert line.stream == ""
    assert np.isnan(line.stream_distance)


# The bend crosses the line y = 0 at x = -40 (north), 0 (south) and 40 (north): water goes north in all.
BEND = LineString([(-40, -300), (-40, 60), (0, 60), (0, -60), (40, -60), (40, 300)])


@pytest.mark.parametrize("backwards", [False, True])
def test_bend_crossed_three_times_is_turned_by_the_sum(backwards):
    drawn = LineString([(-100, 0), (110, 0)])
    drawn = drawn.reverse() if backwards else drawn
    (line,), findings = orient_cut_lines(layer([drawn]), layer([BEND], ["creek"]), UTM)
    assert line.turned is backwards
    again = only(findings, "line-crosses-stream-again")
    assert "3 times" in again.message
    assert "creek" in again.message
    # The middle of the line is x = 5: x = 0 is nearest to it, but of the northward passages x = 40 is.
    assert line.crossing == pytest.approx(140.0)
    assert line.stream_distance == pytest.approx(
        ground_length([(-40, -300), (-40, 60), (0, 60), (0, -60), (40, -60), (40, 0)]), rel=1e-9
    )


@pytest.mark.parametrize("backwards", [False, True])
def test_two_passages_that_cancel_out_are_turned_by_the_course(backwards):
    # West to east with a loop south over y = 0: looking downstream (east) the left bank is north.
    stream = LineString([(-300, 40), (-10, 40), (-10, -20), (10, -20), (10, 40), (300, 40)])
    drawn = LineString([(-60, 12), (60, -12)])
    drawn = drawn.reverse() if backwards else drawn
    (line,), findings = orient_cut_lines(layer([drawn]), layer([stream]), UTM)
    assert "line-crosses-stream-again" in codes(findings)
    assert line.y[0] > line.y[-1]
    assert line.turned is backwards


def test_line_along_its_stream_does_not_tell():
    lines = layer([LineString([(0, -100), (0, 100)])])
    (line,), findings = orient_cut_lines(lines, layer([NORTHWARD]), UTM)
    assert "direction-unknown" in codes(findings)
    assert "line-oblique" in codes(findings)
    assert not line.turned
    assert line.crossing == pytest.approx(100)


def test_stream_that_touches_and_turns_away_is_a_crossing_without_passage():
    stream = LineString([(-200, -60), (0, 0), (200, -60)])  # water runs east and touches y = 0 from the south
    (line,), findings = orient_cut_lines(layer([LineString([(0, -40), (0, 0.0)])]), layer([stream]), UTM)
    assert codes(findings) == ["line-turned"]  # it ended at the stream, coming from the right bank
    assert line.crossing == pytest.approx(0.0)


def test_line_ending_on_the_stream_by_rounding_crosses_it():
    (line,), findings = orient_cut_lines(layer([LineString([(-80, 0), (-1e-9, 0)])]), layer([NORTHWARD]), UTM)
    assert findings == []
    assert line.crossing == pytest.approx(80)


def test_line_over_two_streams_takes_the_one_at_its_middle():
    streams = layer([NORTHWARD, LineString([(60, -500), (60, 500)])], ["main", "branch"])
    (line,), findings = orient_cut_lines(layer([LineString([(-100, 0), (90, 0)])]), streams, UTM)
    assert codes(findings) == ["line-crosses-streams"]
    assert "main" in findings[0].message
    assert "branch" in findings[0].message
    assert findings[0].x - X0 == pytest.approx(60)
    assert line.stream == "main"
    assert line.crossing == pytest.approx(100)


def test_line_may_name_its_stream():
    streams = layer([NORTHWARD, LineString([(60, -500), (60, 500)])], ["1", "2"])
    lines = layer([ACROSS, ACROSS], stream=[2.0, 7.0])
    found, findings = orient_cut_lines(lines, streams, UTM)
    assert [line.stream for line in found] == ["2", "1"]
    assert found[0].crossing == pytest.approx(160)
    assert found[0].attributes == {"stream": 2.0}
    assert codes(findings) == ["line-crosses-streams"] * 2


def test_line_that_misses_the_stream_it_names():
    streams = layer([NORTHWARD, LineString([(160, -500), (160, 500)])], ["1", "2"])
    (line,), findings = orient_cut_lines(layer([ACROSS], stream=["2"]), streams, UTM)
    assert codes(findings) == ["line-misses-stream"]
    assert "stream 2" in findings[0].message
    assert line.stream == "2"
    assert np.isnan(line.crossing)


def test_parts_of_one_stream_are_one():
    parts = [
        LineString([(0, 0), (0, 500)]),
        LineString([(0, -500), (0, -100)]),
        LineString([(0, -100), (0, 0)]),
    ]
    streams = layer(parts, ["creek"] * 3)
    lines, findings = orient_cut_lines(layer([ACROSS, LineString([(-9, 250), (9, 250)])]), streams, UTM)
    assert findings == []  # the crossing at the shared end counts once
    assert lines[0].stream_distance == pytest.approx(ground_length([(0, -500), (0, 0)]), rel=1e-9)
    assert lines[1].stream_distance == pytest.approx(ground_length([(0, -500), (0, 250)]), rel=1e-9)


@pytest.mark.parametrize("order", [(0, 1, 2), (0, 2, 1), (2, 1, 0), (1, 2, 0)])
def test_branches_of_one_stream_are_measured_along_the_longest(order):
    parts = [
        LineString([(0, 0), (0, 500)]),
        LineString([(0, -500), (0, 0)]),
        LineString([(-30, -40), (0, 0)]),
    ]
    streams = layer([parts[number] for number in order], ["creek"] * 3)
    lines, findings = orient_cut_lines(layer([ACROSS, LineString([(-50, 70), (50, 70)])]), streams, UTM)
    assert findings == []
    assert lines[0].stream_distance == pytest.approx(ground_length([(0, -500), (0, 0)]), rel=1e-9)
    assert lines[1].stream_distance == pytest.approx(ground_length([(0, -500), (0, 70)]), rel=1e-9)


def test_at_a_confluence_the_stream_that_goes_on_counts():
    tributary = LineString([(-300, -300), (0, 0)])
    (line,), findings = orient_cut_lines(
        layer([ACROSS]), layer([tributary, NORTHWARD], ["branch", "main"]), UTM
    )
    assert findings == []
    assert line.stream == "main"
    reaches = [LineString([(0, -500), (0, 0)]), tributary, LineString([(0, 0), (0, 500)])]
    (line,), findings = orient_cut_lines(layer([ACROSS]), layer(reaches, ["upper", "branch", "lower"]), UTM)
    assert findings == []
    assert line.stream == "lower"
    assert line.stream_distance == pytest.approx(0.0, abs=1e-6)


def test_lines_of_one_stream_that_meet_are_named_once():
    lines = layer(
        [ACROSS, LineString([(-100, -20), (100, 30)]), LineString([(-100, 90), (100, 90)])], list("abc")
    )
    _, findings = orient_cut_lines(lines, layer([NORTHWARD], ["creek"]), UTM)
    assert codes(findings) == ["lines-meet"]
    assert "a and b" in findings[0].message
    assert "creek" in findings[0].message
    assert (findings[0].x - X0, findings[0].y - Y0) == pytest.approx((-20, 0))
    _, findings = orient_cut_lines(lines, None, UTM)
    assert codes(findings) == ["direction-unknown"] * 3 + ["lines-meet"]


def test_lines_of_two_streams_may_meet():
    streams = layer([NORTHWARD, LineString([(300, -500), (300, 500)])])
    lines = layer([LineString([(-100, 0), (160, 0)]), LineString([(140, -10), (400, 60)])])
    _, findings = orient_cut_lines(lines, streams, UTM)
    assert findings == []


@pytest.mark.parametrize(("degrees", "found"), [(29.0, False), (31.0, True), (-31.0, True), (-29.0, False)])
@pytest.mark.parametrize("backwards", [False, True])
def test_line_off_square(degrees, found, backwards):
    way = np.array([np.cos(np.radians(degrees)), np.sin(np.radians(degrees))])
    drawn = LineString([-100 * way, 100 * way] if not backwards else [100 * way, -100 * way])
    _, findings = orient_cut_lines(layer([drawn]), layer([NORTHWARD]), UTM)
    assert ("line-oblique" in codes(findings)) is found
    if found:
        assert "31°" in only(findings, "line-oblique").message


def test_a_wiggle_does_not_make_a_line_oblique():
    wiggle = LineString([(0, -500), (0, -8), (-4, -2), (4, 2), (0, 8), (0, 500)])
    _, findings = orient_cut_lines(layer([ACROSS]), layer([wiggle]), UTM)
    assert findings == []


def test_off_square_is_judged_on_the_ground_in_degrees():
    # At 42 degrees north a degree of longitude is only 0.74 of one of latitude.
    way = np.array([np.cos(np.radians(25.0)), np.sin(np.radians(25.0))])
    drawn = layer([LineString([-100 * way, 100 * way])]).to_crs(4269)
    _, findings = orient_cut_lines(drawn, layer([NORTHWARD]).to_crs(4269), 4269)
    assert findings == []


def test_gap_between_parts_of_a_stream():
    parts = [LineString([(0, -500), (0, -200)]), LineString([(0, -190), (0, 500)])]
    (line,), findings = orient_cut_lines(layer([ACROSS]), layer(parts, ["creek"] * 2), UTM)
    assert codes(findings) == ["stream-gap"]
    assert "10.0 m" in findings[0].message
    assert (findings[0].x - X0, findings[0].y - Y0) == pytest.approx((0, -200))
    assert line.stream_distance == pytest.approx(ground_length([(0, -500), (0, 0)]), rel=1e-9)


def test_a_stream_in_very_many_parts_apart_is_not_bridged():
    parts = [LineString([(0, y), (0, y + 1)]) for y in range(0, 600, 2)]
    (line,), findings = orient_cut_lines(
        layer([LineString([(-9, 400.5), (9, 400.5)])]), layer(parts, ["x"] * 300), UTM
    )
    assert codes(findings) == ["stream-gap"]
    assert "300 parts" in findings[0].message
    assert line.stream_distance == pytest.approx(0.5 / 0.9996, rel=1e-5)


def test_parts_drawn_against_each_other():
    parts = [LineString([(0, -500), (0, -200)]), LineString([(0, 500), (0, -200)])]
    _, findings = orient_cut_lines(
        layer([LineString([(-9, -300), (9, -300)])]), layer(parts, ["creek"] * 2), UTM
    )
    assert codes(findings) == ["stream-parts-oppose"]
    assert findings[0].y - Y0 == pytest.approx(-200)


def test_streams_that_cannot_be_used():
    streams = layer([None, line_of([(0, 0), (np.nan, 1)]), LineString([(5, 5), (5, 5)])])
    (line,), findings = orient_cut_lines(layer([ACROSS]), streams, UTM)
    assert codes(findings) == ["direction-unknown"] + ["stream-unusable"] * 3
    assert line.usable


def test_a_stream_in_a_circle_has_distances():
    ring = LineString([(0, 0), (100, 0), (100, 100), (0, 100), (0, 0)])
    network = StreamNetwork(layer([ring], ["moat"]), UTM)
    assert network.chain_start.tolist() == [0.0]
    assert network.distance_at([0], [100.0]) == pytest.approx(ground_length([(0, 0), (100, 0)]), rel=1e-9)
    halves = [LineString([(0, 0), (100, 0)]), LineString([(100, 0), (100, 100), (0, 0)])]
    assert len(StreamNetwork(layer(halves, ["moat"] * 2), UTM)) == 1


def test_long_streams_are_searched_in_pieces_without_a_seam():
    y = np.arange(-300.0, 301.0, 2.0)
    stream = LineString(np.column_stack([np.zeros_like(y), y]))
    # Every line passes through a vertex, among them the ends of the pieces.
    lines = layer([LineString([(-50, v), (50, v)]) for v in y[1:-1]])
    found, findings = orient_cut_lines(lines, layer([stream]), UTM)
    assert findings == []
    assert [line.stream_distance for line in found] == pytest.approx((y[1:-1] + 300) / 0.9996, rel=1e-6)


def test_attributes_leave_out_what_was_added():
    (line,), _ = orient_cut_lines(layer([ACROSS], slope=[0.002]), None, UTM)
    assert line.attributes == {"slope": 0.002}


def test_layer_without_lines():
    assert orient_cut_lines(layer([]), layer([NORTHWARD]), UTM) == ([], [])


def test_groups_of_pairs_are_those_of_a_library():
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    from terrain2q.ground.streams import _components

    random = np.random.default_rng(7)
    for count, pairs in ((1, 0), (30, 12), (200, 150), (500, 499)):
        some = random.integers(0, count, (pairs, 2))
        if pairs == 499:
            some = np.stack([np.arange(499), np.arange(1, 500)], 1)[random.permutation(499)]  # one long chain
        graph = coo_array((np.ones(pairs), (some[:, 0], some[:, 1])), shape=(count, count))
        assert _components(count, some).tolist() == connected_components(graph, directed=False)[1].tolist()


def test_many_lines_are_placed_as_each_alone():
    """Lines that cross once, never or more often, drawn either way: none minds the others."""
    random = np.random.default_rng(11)
    course = np.stack([np.linspace(0.0, 2000.0, 400), random.normal(0.0, 3.0, 400).cumsum()], axis=1)
    streams = layer([LineString(course)])
    lines, own = [], []
    for number in range(40):
        middle = course[random.integers(20, 380)] + [0.0, (0.0, 30.0, 400.0)[number % 3]]
        way = random.normal(0.0, 1.0, 2) * 120.0
        lines.append(LineString([middle - way, middle + way]))
        own.append((None, "1", "other")[number % 4 % 3])
    whole, _ = orient_cut_lines(layer(lines, stream=own), streams, UTM)
    assert {line.turned for line in whole} == {True, False}
    for number, line in enumerate(whole):
        (alone,), _ = orient_cut_lines(layer([lines[number]], stream=own[number : number + 1]), streams, UTM)
        assert (line.stream, line.turned) == (alone.stream, alone.turned)
        np.testing.assert_array_equal(line.stream_distance, alone.stream_distance)
        np.testing.assert_array_equal(line.crossing, alone.crossing)
        np.testing.assert_array_equal(line.x, alone.x)
        ends = (np.array(lines[number].coords) + ORIGIN)[:: -1 if line.turned else 1]
        np.testing.assert_array_equal(np.stack([line.x, line.y], axis=1), ends)
