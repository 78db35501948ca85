"""Crossings: where they are, the road that is found, stages and verdicts of closed form, ranks and pages."""

from __future__ import annotations

import math
from dataclasses import replace

import geopandas
import numpy as np
import pandas
import pytest
import rasterio
import shapely
import shapely.affinity
from _county import CRS, HALF_TOP, LONG, NORTH, ROAD_AT, WEST, N, make_valleys, roads, streams, write_dem
from affine import Affine
from hypothesis import given, settings
from hypothesis import strategies as st
from shapely.geometry import LineString, Point

from terrain2q.columns import CAUTION
from terrain2q.flows import Flow
from terrain2q.ground.cover import UniformCover
from terrain2q.ground.local_ground import LocalGround
from terrain2q.ground.road_surface import _outline, find_crest, find_road_surface
from terrain2q.ground.roads import RoadNetwork, crossings_from_points, crossings_from_roads, structure_of
from terrain2q.ground.streams import StreamNetwork
from terrain2q.ground.terrain import Terrain
from terrain2q.hydraulics.weir import greatest_coefficient, road_overflow, weir_discharge, wetted_road
from terrain2q.jobs import crossings as crossing_job
from terrain2q.jobs.crossings import CrossingInputs, _probability, field_findings, ranked, screen_crossings
from terrain2q.jobs.sections import SectionInputs
from terrain2q.jobs.slopes import OneSlope
from terrain2q.output.crossing_panels import draw_map, draw_panel, draw_table
from terrain2q.units import SI, US

EVENTS = {"10-year": 0.1, "50-year": 0.02, "100-year": 0.01}


# --- weirs -------------------------------------------------------------------------------------------


def test_broad_crested_weir_with_velocity_of_approach_metric():
    # Massey and Ward-Smith, Mechanics of Fluids, Example 2 p. 447 (as reproduced by the Python Textbook
    # Companions): b 0.4 m, crest 0.04 m, depth upstream 0.07 m; printed 0.0037 m³/s
    flow = weir_discharge(0.03, 0.4, 1.705, approach_area=0.4 * 0.07, corrections=1)
    assert flow == pytest.approx(0.003689, abs=1e-6)
    assert round(flow, 4) == 0.0037


def test_broad_crested_weir_with_velocity_of_approach_in_feet():
    # Lal, Hydraulics, Example 6.20 p. 229 (as reproduced by the Python Textbook Companions): C 3.09, L 24 ft,
    # H 7 ft, approach channel 32 ft x 8 ft; printed 1507 ft³/s
    flow = weir_discharge(7.0, 24.0, 3.09, approach_area=32.0 * 8.0, corrections=1, units="us")
    assert flow == pytest.approx(1507.0, abs=0.5)


def test_greatest_coefficient_is_that_of_critical_flow():
    # the same two books take 1.705 and 3.09 for (2/3)^1.5 sqrt(g)
    assert greatest_coefficient() == pytest.approx(1.705, abs=5e-4)
    assert greatest_coefficient(US) == pytest.approx(3.09, abs=5e-3)
    # FHWA HDS-5 (from memory): US coefficients times 0.552 are metric ones
    assert greatest_coefficient() / greatest_coefficient("us") == pytest.approx(0.552, abs=1e-4)


@settings(max_examples=60, deadline=None)
@given(
    st.lists(st.tuples(st.floats(0.5, 20), st.floats(-2, 2)), min_size=2, max_size=12), st.floats(-1.5, 2.5)
)
def test_flow_over_a_road_is_the_integral_along_it(pieces, stage):
    x = np.cumsum([p[0] for p in pieces])
    z = np.round([p[1] for p in pieces], 3)
    fine = np.linspace(x[0], x[-1], 40_001)
    head = np.maximum(stage - np.interp(fine, x, z), 0.0)
    expected = 1.6 * np.trapezoid(head**1.5, fine)
    assert road_overflow(x, z, stage, 1.6) == pytest.approx(expected, rel=1e-3, abs=1e-3)
    width, depth = wetted_road(x, z, stage)
    assert width == pytest.approx(np.mean(head > 0) * (x[-1] - x[0]), abs=2e-3 * (x[-1] - x[0]) + 1e-3)
    assert depth == pytest.approx(max(stage - z.min(), 0.0))


# --- where roads meet streams ------------------------------------------------------------------------


def lines(crs=CRS, **named):
    rows = {name.replace("_", " "): value for name, value in named.items()}
    table = geopandas.GeoDataFrame(
        {"name": list(rows), "feature_id": list(rows)},
        geometry=[LineString(np.add(v, (WEST, NORTH))) for v in rows.values()],
        crs=crs,
    )
    return table


def network(**named):
    return StreamNetwork(lines(**named), CRS)


STRAIGHT = [(0, 0), (1000, 0)]


def cross(road_lines, **flags):
    table = lines(**road_lines)
    for name, values in flags.items():
        table[name] = values
    return crossings_from_roads(RoadNetwork(table), network(Mill=STRAIGHT), 30.0)


def test_a_road_over_a_stream_is_one_crossing():
    found, findings = cross({"A": [(200, -100), (200, 100)], "B": [(600, -100), (600, 100)]})
    assert [(c.crossing_id, c.road, c.stream) for c in found] == [
        ("A at Mill", "A", "Mill"), ("B at Mill", "B", "Mill"),
    ]  # fmt: skip
    # EPSG:26915 is 0.9996 on its axis, so ground is longer than map
    assert [c.stream_distance for c in found] == pytest.approx([200.08, 600.24], abs=0.01)
    assert findings == []


def test_two_carriageways_are_one_crossing_and_say_so():
    found, _ = cross({"East": [(200, -100), (200, 100)], "West": [(218, -100), (218, 100)]})
    assert len(found) == 1
    assert [f.code for f in found[0].findings] == ["crossings-merged"]
    assert len(found[0].others) == 1
    apart, _ = cross({"East": [(200, -100), (200, 100)], "West": [(240, -100), (240, 100)]})
    assert len(apart) == 2


@pytest.mark.parametrize("crs", [CRS, "EPSG:4269", "EPSG:3857", "EPSG:5070"])
def test_the_same_one_of_two_carriageways_stays_in_any_crs(crs):
    pair = {"East": [(200, -100), (200, 100)], "West": [(218, -100), (218, 100)]}
    stream = StreamNetwork(lines(Mill=STRAIGHT).to_crs(crs), crs)
    found, _ = crossings_from_roads(RoadNetwork(lines(**pair).to_crs(crs)), stream, 30.0)
    assert [c.crossing_id for c in found] == ["East at Mill"]


def test_a_road_split_at_its_bridge_is_one_road():
    table = lines(a=[(200, -100), (200, -8)], b=[(200, -8), (200, 8)], c=[(200, 8), (200, 100)])
    table["bridge"] = ["no", "yes", "no"]
    found, _ = crossings_from_roads(RoadNetwork(table), network(Mill=STRAIGHT), 30.0)
    assert len(found) == 1
    assert found[0].structure == "bridge"
    assert found[0].line.length == pytest.approx(200.0)


def weaving(start, end, count, height):
    x = np.linspace(start, end, 2 * count + 1)
    return [(float(v), height * math.sin(math.pi * k / 2)) for k, v in enumerate(x)]


def test_a_road_that_weaves_about_the_stream_is_a_finding_and_no_crossing():
    road = [(50, 200), *[(x, y or 0.01) for x, y in weaving(150, 750, 10, 6.0)][1:-1], (900, 200)]
    found, findings = cross({"Valley_Road": road})
    assert found == []
    assert [f.code for f in findings] == ["road-grazes-stream"]
    assert "meets it" in findings[0].message


def test_a_road_that_weaves_and_ends_up_on_the_other_side_crosses_once():
    road = [(50, 200), *weaving(150, 750, 10, 6.0)[1:-1], (900, -200)]
    found, findings = cross({"Valley_Road": road})
    assert len(found) == 1
    assert [f.code for f in findings] == ["road-grazes-stream"]


def test_a_road_that_touches_a_bend_does_not_cross():
    found, findings = cross({"Touch": [(200, 100), (300, 0), (400, 100)]})
    assert found == []
    assert [f.code for f in findings] == ["road-grazes-stream"]


def test_a_road_that_crosses_crosses_back_far_away_is_two_crossings():
    found, findings = cross({"Loop": [(200, 100), (200, -100), (400, -100), (400, 100)]})
    assert len(found) == 2
    assert [c.crossing_id for c in found] == ["Loop at Mill", "Loop at Mill 2"]
    assert findings == []


def test_a_crossing_at_a_very_small_angle_is_doubtful():
    found, _ = cross({"Slant": [(100, -60), (600, 60)]})
    assert [[(f.code, f.severity) for f in c.findings] for c in found] == [
        [("road-grazes-stream", "doubtful")]
    ]


def test_a_tunnel_is_a_finding_and_a_bridge_a_flag():
    found, findings = cross(
        {"A": [(200, -100), (200, 100)], "B": [(600, -100), (600, 100)]},
        tunnel=["yes", "no"],
        bridge=["", "viaduct"],
    )
    assert [(c.road, c.structure) for c in found] == [("B", "bridge")]
    assert [f.code for f in findings] == ["road-in-tunnel"]
    assert structure_of({"TUNNEL": 1}) == "tunnel"
    assert structure_of({"tunnel": 0, "bridge": None, "structure": "pipes"}) == ""


@pytest.mark.parametrize(
    ("fields", "expected"),
    [
        ({"IsBridge": True}, "bridge"),
        ({"BRIDGE_FLAG": "Y"}, "bridge"),
        ({"bridge": -1}, "bridge"),
        ({"bridge": "Bridge No. 12"}, "bridge"),
        ({"STRUCT_TYPE": "Bridge, steel"}, "bridge"),
        ({"structure": "RAIL-BRIDGE"}, "bridge"),
        ({"structure": "Viaduct"}, "bridge"),
        ({"structure_type": "Tunnel;box"}, "tunnel"),
        ({"brunnel": "tunnel"}, "tunnel"),
        ({"tunnel": "unknown"}, ""),
        ({"tunnel": "N/A"}, ""),
        ({"tunnel": "-"}, ""),
        ({"tunnel": "culvert"}, ""),
        ({"bridge": "no bridge"}, ""),
        ({"bridge": float("nan")}, ""),
        ({"structure": "not a bridge"}, ""),
        ({"structure": "bridge/culvert"}, ""),
        ({"type": "residential"}, ""),
    ],
)
def test_flags_are_read_as_they_are_spelled(fields, expected):
    assert structure_of(fields) == expected


def points(places, **columns):
    shapes = [None if p is None else Point(np.add(p, (WEST, NORTH))) for p in places]
    ids = [f"C{k}" for k in range(1, len(places) + 1)]
    return geopandas.GeoDataFrame({"feature_id": ids, **columns}, geometry=shapes, crs=CRS)


def test_a_point_on_a_road_in_a_tunnel_keeps_its_row_without_an_answer():
    table = lines(A=[(204, -100), (204, 100)], B=[(604, -100), (604, 100)])
    table["tunnel"] = ["yes", "no"]
    found = crossings_from_points(
        points([(200, 2), (600, 2)]), network(Mill=STRAIGHT), RoadNetwork(table), 30.0, 30.0
    )
    assert [[(f.code, f.severity) for f in c.findings] for c in found] == [
        [("road-in-tunnel", "failed")],
        [],
    ]


def test_points_are_brought_to_stream_and_road_and_keep_their_places():
    table = lines(A=[(204, -100), (204, 100)])
    found = crossings_from_points(
        points([(200, 9), (500, 200), None, (700, 0)], tunnel=["", "", "", "yes"]),
        network(Mill=STRAIGHT), RoadNetwork(table), 30.0, 30.0,
    )  # fmt: skip
    assert [c.crossing_id for c in found] == ["C1", "C2", "C3", "C4"]
    assert (found[0].x - WEST, found[0].y - NORTH) == pytest.approx((204.0, 0.0))
    assert found[0].road == "A"
    codes = [[(f.code, f.severity) for f in c.findings] for c in found]
    assert codes == [
        [],
        [("crossing-off-stream", "failed")],
        [("crossing-off-stream", "failed")],
        [("road-in-tunnel", "failed")],
    ]  # fmt: skip


# --- the county --------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def county(tmp_path_factory):
    """Screen forty valleys in two tiles; return valleys by number, inputs and answers by number."""
    folder = tmp_path_factory.mktemp("county")
    valleys = make_valleys(40)
    whole = 40 * 260
    for k, columns in enumerate((slice(0, whole // 2 + 37), slice(whole // 2 + 37, whole))):
        write_dem(folder / f"{k}.tif", valleys, noise=0.1, seed=k, columns=columns)
    terrain = Terrain([folder / "0.tif", folder / "1.tif"])
    table = streams(valleys)
    table["feature_id"] = table["stream_id"]
    net = StreamNetwork(table, CRS)
    found, findings = crossings_from_roads(RoadNetwork(roads(valleys)), net, 30.0)
    assert findings == []
    flows = []
    for v in valleys:
        # stages below, about and above the crest, in turn with some freeboard and some depth over it
        depth = v.crest_height - v.bed - v.slope * v.upper_edge
        for event, height in zip(EVENTS, (-0.8, (-0.45, -0.18, 0.2)[v.number % 3], 0.5), strict=True):
            flows.append(Flow(event, v.discharge(depth + height), EVENTS[event], stream=f"S{v.number}"))
    sections = SectionInputs(terrain, UniformCover(N), None, "none", None, OneSlope(1.0), None, SI)
    inputs = CrossingInputs(found, net, sections, flows, 1.6)
    answers = screen_crossings(inputs)
    by_number = {int(a.crossing.stream[1:]): a for a in answers}
    return {v.number: v for v in valleys}, inputs, by_number


def test_county_crests_are_found(county):
    valleys, _, answers = county
    assert len(answers) == 40
    off = {k: answers[k].crest - v.crest_height for k, v in valleys.items()}
    assert max(map(abs, off.values())) < 0.05, off


def test_county_decks_are_bridged_and_marked(county):
    valleys, _, answers = county
    missing = {k for k, v in valleys.items() if v.opening}
    assert len(missing) == 10
    marked = {k for k, a in answers.items() if any(f.code == "deck-bridged" for f in a.findings)}
    assert marked == missing
    severity = {k: next(f.severity for f in answers[k].findings if f.code == "deck-bridged") for k in missing}
    assert {k for k, s in severity.items() if s == "note"} == {k for k in missing if k % 8 == 1}


def test_county_slopes_and_crest_discharges(county):
    valleys, _, answers = county
    slope = {k: answers[k].slope / v.slope - 1 for k, v in valleys.items()}
    assert max(map(abs, slope.values())) < 0.02, slope
    flow = {k: answers[k].crest_discharge / v.crest_discharge - 1 for k, v in valleys.items()}
    assert max(map(abs, flow.values())) < 0.03, flow


def test_county_verdicts(county):
    valleys, inputs, answers = county
    seen = set()
    for k, v in valleys.items():
        for event in answers[k].events:
            true = v.crest_height - v.stage(event.values["discharge"])
            if min(abs(true), abs(true - inputs.freeboard)) <= 0.10:
                continue
            expected = (
                "over the crest"
                if true <= 0
                else "within freeboard"
                if true < inputs.freeboard
                else "crest not reached"
            )
            assert event.verdict == expected, (k, event.event, true)
            assert event.values["freeboard"] == pytest.approx(true, abs=0.10)
            seen.add(expected)
    assert seen == {"over the crest", "within freeboard", "crest not reached"}


def test_county_sections_are_clear_of_the_fill(county):
    valleys, _, answers = county
    for k, v in valleys.items():
        for built in (answers[k].approach, answers[k].tailwater):
            profile = built.profile
            _, across = v.along_and_across(profile.x, profile.y)
            down = NORTH - profile.y
            natural = v.bed + v.slope * (ROAD_AT - down)
            natural = natural + np.maximum(np.abs(profile.x - v.centre) - v.half_bed, 0.0) / v.side
            assert np.abs(v.ground(profile.x, profile.y) - natural).max() < 0.01, k
            assert np.abs(across).min() > HALF_TOP
            assert not any(f.code == "section-cut-by-road" for f in answers[k].findings)


def test_county_overflow_lies_at_the_sag(county):
    valleys, _, answers = county
    aside = {k: v for k, v in valleys.items() if v.sag and not v.opening}
    assert len(aside) > 4
    for k, v in aside.items():
        # the parabola is so flat that 8 m aside it is hardly 2 cm higher
        assert answers[k].crest_station == pytest.approx(v.sag, abs=8.0)


def test_county_overflow_and_depth_on_the_road(county):
    valleys, inputs, answers = county
    for k, v in valleys.items():
        largest = answers[k].events[-1].values
        stage = v.stage(largest["discharge"])
        head = stage - v.crest_height
        assert largest["largest_depth_on_road"] == pytest.approx(head, abs=0.08)
        # the road as it was built, with the valley's sides where they are higher
        s = np.linspace(-100.0, 100.0, 20_001)
        top = v.top(s)
        if v.opening:
            top = np.maximum(top, v.crest_height)
        angle = math.radians(v.slant)
        top = np.maximum(top, v.ground(v.centre - s * math.cos(angle), NORTH - ROAD_AT + s * math.sin(angle)))
        wet = np.maximum(stage - top, 0.0)
        assert largest["road_width_under_water"] == pytest.approx(np.mean(wet > 0) * 200.0, rel=0.12)
        flow = inputs.weir_coefficient * np.trapezoid(wet**1.5, s)
        assert largest["weir_discharge"] == pytest.approx(flow, rel=0.35)


def test_county_ranks_go_by_probability(county):
    _, _, answers = county
    ordered = sorted(answers.values(), key=lambda a: a.rank)
    assert [a.rank for a in ordered] == list(range(1, 41))
    known = [a.crest_probability for a in ordered if np.isfinite(a.crest_probability)]
    assert known == sorted(known, reverse=True)
    assert all(a.first_event_over in EVENTS for a in ordered)


def test_numbers_can_be_worked_out_by_hand(county):
    _, inputs, answers = county
    answer = answers[0]
    section = answer.approach.section
    lift = answer.slope * answer.to_road
    for event in answer.events:
        v = event.values
        assert v["stage"] == pytest.approx(section.normal_stage(v["discharge"], answer.slope) - lift)
        assert v["freeboard"] == pytest.approx(answer.crest - v["stage"])
    assert answer.crest_discharge == pytest.approx(section.discharge(answer.crest + lift, answer.slope))
    last = answer.events[0].values
    allowed = answer.crest - inputs.freeboard + lift
    assert last["required_opening"] == pytest.approx(
        section.required_opening(last["discharge"], allowed, answer.slope)
    )


@pytest.mark.parametrize("radius", [200.0, 30.0, 4.0])
def test_the_ground_under_a_fill_is_that_of_its_pieces(radius):
    # a road round half a circle, its fill up to 20 m wide: about a bend of 4 m its outline crosses itself
    angle = np.linspace(0.0, np.pi, 60)
    normals = np.column_stack([np.cos(angle), np.sin(angle)])
    points = radius * normals
    up = 6.0 + 2.0 * np.sin(5 * angle)
    down = 12.0 + 8.0 * np.cos(3 * angle)
    fill = _outline(points, normals, up, down)
    a, b = points + normals * up[:, None], points - normals * down[:, None]
    pieces = [
        shapely.convex_hull(shapely.MultiPoint([a[i], a[i + 1], b[i + 1], b[i]])) for i in range(len(a) - 1)
    ]
    whole = shapely.union_all(pieces)
    assert fill.is_valid
    assert fill.symmetric_difference(whole).area < 1e-3 * whole.area
    assert (shapely.Polygon(np.vstack([a, b[::-1]])).is_valid) == (radius > 20.0)


def test_a_short_fill_between_steep_hillsides_has_its_crest(tmp_path):
    """The drawn line runs on up hillsides of 1 in 2.5 to 1 in 4.5, on which there is no road to see."""
    valleys = [
        replace(v, side=2.5 + 0.1 * v.number, sag=0.0, crest=v.crest + 1.0, drawn_off=0.5 * v.drawn_off)
        for v in make_valleys(20)
    ]
    write_dem(tmp_path / "dem.tif", valleys, noise=0.1, seed=4)
    terrain = Terrain(tmp_path / "dem.tif")
    off, middle = {}, {}
    for v in valleys:
        ground = LocalGround(terrain, v.centre, NORTH - ROAD_AT, 200.0)
        line = LineString(ground.to_local(shapely.get_coordinates(v.road)))
        at = line.project(Point(0.0, 0.0))
        surface = find_road_surface(
            ground, line, at, np.array([0.0, -1.0]), reach=110.0, width=6.0, search=12.0
        )
        assert (surface.deck is not None) == bool(v.opening), v
        off[v.number] = find_crest(surface, ground, 100.0).height - v.crest_height
        x, y = surface.place(0.0)
        middle[v.number] = v.along_and_across(v.centre + x, NORTH - ROAD_AT + y)[1]
    assert max(map(abs, off.values())) < 0.05, off
    assert max(map(abs, middle.values())) < 1.0, middle


@pytest.mark.parametrize("slant", [0.0, -40.0])
@pytest.mark.parametrize("side", [1.2, 2.5])
def test_a_wide_opening_in_a_low_fill_is_bridged(slant, side, tmp_path):
    """The ground goes down over 20 m no more steeply than a road may, from abutments 0.8 m high."""
    angle = np.radians(slant)

    def ground(x, y):
        bank = np.minimum(np.maximum(np.abs(x) - 4.4, 0.0) / side, 1.3)
        natural = 200.0 + bank + np.maximum(np.abs(x) - 45.0, 0.0) / 3.0
        s, t = -x * np.cos(angle) - y * np.sin(angle), y * np.cos(angle) - x * np.sin(angle)
        fill = 202.1 - np.maximum(np.abs(t) - 5.6, 0.0) / 2.0
        return np.maximum(natural, np.minimum(fill, natural + 3.0 * np.maximum(np.abs(s) - 9.5, 0.0)))

    at = np.arange(240) + 0.5 - 120.0
    z = ground(at[None, :], -at[:, None]) + np.random.default_rng(6).normal(0.0, 0.1, (240, 240))
    with rasterio.open(
        tmp_path / "dem.tif", "w", driver="GTiff", height=240, width=240, count=1, dtype="float32", crs=CRS,
        transform=Affine(1.0, 0.0, WEST - 120.0, 0.0, -1.0, NORTH + 120.0),
    ) as target:  # fmt: skip
        target.write(z.astype(np.float32), 1)
        target.units = ["m"]
    local = LocalGround(Terrain(tmp_path / "dem.tif"), WEST, NORTH, 110.0)
    way = np.array([-np.cos(angle), -np.sin(angle)])
    line = LineString([way * -100.0, way * 100.0])
    surface = find_road_surface(local, line, 100.0, np.array([0.0, -1.0]), reach=90.0, width=6.0, search=12.0)
    assert surface.deck == pytest.approx((-11.0, 11.0), abs=3.0)
    assert find_crest(surface, local, 60.0).height == pytest.approx(202.1, abs=0.05)


def test_a_line_drawn_aside_gives_the_same_crest(county):
    valleys, inputs, _ = county
    v = valleys[12]
    ground = LocalGround(inputs.sections.terrain, v.centre, NORTH - ROAD_AT, 200.0)
    line = LineString(ground.to_local(shapely.get_coordinates(v.road)))
    crests = []
    for aside in (-4.0, -2.0, 0.0, 2.0, 4.0):
        moved = shapely.affinity.translate(line, 0.0, aside + v.drawn_off)
        surface = find_road_surface(
            ground, moved, moved.length / 2, np.array([0.0, -1.0]), reach=110.0, width=6.0, search=12.0
        )
        crests.append(find_crest(surface, ground, 100.0).height)
    assert np.ptp(crests) < 0.03
    assert np.mean(crests) == pytest.approx(v.crest_height, abs=0.05)


def test_one_bad_crossing_stops_nothing(county):
    valleys, inputs, answers = county
    good = [answers[k].crossing for k in (0, 1)]
    away = len(valleys) + 100
    outside = [*valleys.values(), replace(valleys[0], number=away)]
    table = streams(outside)
    table["feature_id"] = table["stream_id"]
    net = StreamNetwork(table, CRS)
    every, _ = crossings_from_roads(RoadNetwork(roads(outside)), net, 30.0)
    off = replace(next(c for c in every if c.stream == f"S{away}"), crossing_id="off")
    nowhere = replace(good[1], crossing_id="nowhere", line=LineString([(WEST, NORTH), (WEST + 1e-9, NORTH)]))
    broken = replace(good[0], crossing_id="broken", chain=99_999)
    five = [off, good[0], nowhere, broken, good[1]]
    found = screen_crossings(replace(inputs, network=net, crossings=five))
    assert [a.crossing.crossing_id for a in found] == [
        "off", good[0].crossing_id, "nowhere", "broken", good[1].crossing_id,
    ]  # fmt: skip
    assert [a.status == "failed" for a in found] == [True, False, True, True, False]
    for answer in (found[0], found[2], found[3]):
        assert any(f.code == "crossing-failed" for f in answer.findings)
        assert [e.event for e in answer.events] == list(EVENTS)
        assert answer.rank > 2
    assert found[1].crest == answers[0].crest


def test_a_section_that_breaks_takes_no_other_with_it(county, monkeypatch):
    _, inputs, answers = county
    plain = crossing_job.build_sections

    def build(lines, *more):
        if any(line.section_id.startswith(answers[1].crossing.crossing_id) for line in lines):
            raise ValueError("no section")
        return plain(lines, *more)

    monkeypatch.setattr(crossing_job, "build_sections", build)
    found = screen_crossings(replace(inputs, crossings=[answers[k].crossing for k in (0, 1, 2)]))
    assert [a.status == "failed" for a in found] == [False, True, False]
    assert any(f.code == "crossing-failed" and "no section" in f.message for f in found[1].findings)


def test_streets_all_around_leave_a_doubtful_section(tmp_path):
    valley, inputs = one_valley(tmp_path, crest=2.0)
    x = valley.centre - WEST
    rows = {f"Street_{k}": [(x - 90.0, -20.0 - 22.0 * k), (x + 90.0, -20.0 - 22.0 * k)] for k in range(16)}
    (answer,) = screen_crossings(replace(inputs, roads=RoadNetwork(lines(**rows))))
    assert answer.status == "doubtful"
    assert any(f.code == "section-cut-by-road" and "other roads" in f.message for f in answer.findings)


def test_rank_rule_can_be_changed(county):
    _, _, answers = county
    some = [answers[k] for k in range(6)]
    given = [
        replace(a, crossing=replace(a.crossing, attributes={"traffic": t}))
        for a, t in zip(some, ("120", "9000", "", "40", "9000", "700"), strict=True)
    ]
    by_traffic = sorted(ranked(given, ["traffic", "freeboard"]), key=lambda a: a.rank)
    assert [a.crossing.attributes["traffic"] for a in by_traffic] == ["9000", "9000", "700", "120", "40", ""]
    first = [a.events[-1].values["freeboard"] for a in by_traffic[:2]]
    assert first == sorted(first)
    least = sorted(ranked(given, ["-traffic"]), key=lambda a: a.rank)
    assert [a.crossing.attributes["traffic"] for a in least] == ["40", "120", "700", "9000", "9000", ""]


def test_probability_between_events():
    flows = [Flow("a", 10.0, 0.1), Flow("b", 100.0, 0.01)]
    # log-normal: halfway between the variates 1.2816 and 2.3263 of 0.1 and 0.01 is 1.8040, of 0.0356
    # (any table of the normal distribution)
    assert _probability(math.sqrt(1000.0), flows) == pytest.approx(0.0356, abs=1e-4)
    assert _probability(10.0, flows) == pytest.approx(0.1)
    assert math.isnan(_probability(9.0, flows))
    assert math.isnan(_probability(50.0, [Flow("a", 10.0), Flow("b", 100.0)]))


def test_a_point_without_a_road_line_finds_its_road(county):
    valleys, inputs, _ = county
    table = points([(v.centre - WEST, -ROAD_AT) for v in (valleys[0], valleys[2])])
    found = screen_crossings(
        replace(inputs, crossings=crossings_from_points(table, inputs.network, None, 30.0, 30.0))
    )
    for answer, v in zip(found, (valleys[0], valleys[2]), strict=True):
        assert "road-line-missing" in {f.code for f in answer.findings}
        assert answer.crest == pytest.approx(v.crest_height, abs=0.08)


# --- where normal depth is the wrong question --------------------------------------------------------


def one_valley(tmp_path, change=None, **values):
    """Screen a single, noiseless valley whose ground may be changed: ``change(z, x, y)``."""
    import rasterio

    valley = replace(make_valleys(1)[0], slant=0.0, opening=0.0, sag=0.0, drawn_off=0.0, **values)
    path = tmp_path / "one.tif"
    write_dem(path, [valley], noise=0.0)
    if change is not None:
        with rasterio.open(path, "r+") as target:
            z = target.read(1)
            x, y = np.meshgrid(WEST + 0.5 + np.arange(z.shape[1]), NORTH - 0.5 - np.arange(LONG))
            target.write(change(z, x, y).astype("float32"), 1)
    table = streams([valley])
    table["feature_id"] = table["stream_id"]
    net = StreamNetwork(table, CRS)
    found, _ = crossings_from_roads(RoadNetwork(roads([valley])), net, 30.0)
    flows = [Flow("flood", valley.discharge(valley.crest - 0.6), 0.01, volume=1e9)]
    sections = SectionInputs(Terrain(path), UniformCover(N), None, "none", None, OneSlope(1.0), None, SI)
    return valley, CrossingInputs(found, net, sections, flows, 1.6)


def codes(answer):
    return {f.code for f in answer.findings}


def test_a_plain_valley_has_no_doubts(tmp_path):
    valley, inputs = one_valley(tmp_path, crest=2.0)
    (answer,) = screen_crossings(inputs)
    assert [f for f in answer.findings if f.severity == "doubtful"] == []
    assert answer.crest == pytest.approx(valley.crest_height, abs=0.01)
    assert answer.crest_discharge == pytest.approx(valley.crest_discharge, rel=0.01)


def test_a_lake_downstream_is_backwater(tmp_path):
    def lake(z, x, y):
        level = z[int(ROAD_AT) + 60].min() + 0.3
        return np.where(y < NORTH - ROAD_AT - 40.0, np.maximum(z, level), z)

    _, inputs = one_valley(tmp_path, lake, crest=2.0)
    (answer,) = screen_crossings(inputs)
    assert "backwater" in codes(answer)


def test_a_larger_stream_downstream_is_backwater(tmp_path):
    valley, inputs = one_valley(tmp_path, crest=2.0)
    end = NORTH - ROAD_AT - 200.0
    table = geopandas.GeoDataFrame(
        {"feature_id": ["S0", "River"]},
        geometry=[
            LineString([(valley.centre, NORTH - 2.0), (valley.centre, end)]),
            LineString([(valley.centre - 900.0, end), (valley.centre + 100.0, end)]),
        ],
        crs=CRS,
    )
    net = StreamNetwork(table, CRS)
    found, _ = crossings_from_roads(RoadNetwork(roads([valley])), net, 30.0)
    flows = [replace(inputs.flows[0], stream="S0")]
    (answer,) = screen_crossings(replace(inputs, network=net, crossings=found, flows=flows))
    assert any(f.code == "backwater" and "River" in f.message for f in answer.findings)


def test_water_ponds_behind_a_high_fill(tmp_path):
    _, inputs = one_valley(tmp_path, crest=4.0, slope=0.004)
    (answer,) = screen_crossings(inputs)
    pond = next(f for f in answer.findings if f.code == "culvert-ponds")
    assert pond.severity == "note"  # the event brings far more water than there is room
    small = [replace(f, volume=20_000.0) for f in inputs.flows]
    (answer,) = screen_crossings(replace(inputs, flows=small))
    pond = next(f for f in answer.findings if f.code == "culvert-ponds")
    assert pond.severity == "doubtful"


def test_storage_is_that_of_the_valley(tmp_path):
    from terrain2q.ground.approach import storage_below

    valley, inputs = one_valley(tmp_path, crest=3.0, slope=0.01)
    ground = LocalGround(inputs.sections.terrain, valley.centre, NORTH - ROAD_AT, (-130, -300, 130, 370))
    fill = shapely.box(-200.0, -15.0, 200.0, 11.0)
    level = valley.crest_height
    volume, _, whole = storage_below(ground, level, np.array([0.0, 15.0]), fill, np.array([0.0, -30.0]))
    assert whole
    # upstream the depth falls with the slope until the bed is at the level
    s = np.arange(11.5, 320.0)
    depth = np.maximum(level - (valley.bed + valley.slope * s), 0.0)
    area = (2 * valley.half_bed + valley.side * depth) * depth
    assert volume == pytest.approx(area.sum(), rel=0.02)


def test_a_fast_stream_is_supercritical(tmp_path):
    _, inputs = one_valley(tmp_path, crest=2.0, slope=0.06)
    (answer,) = screen_crossings(inputs)
    assert "supercritical" in codes(answer)


def test_tide_and_surveyed_crest_and_opening(tmp_path):
    valley, inputs = one_valley(tmp_path, crest=2.0)
    crossing = replace(
        inputs.crossings[0],
        attributes={"crest": valley.crest_height + 0.5, "span": 12.0, "tidal": "yes"},
    )
    inputs = replace(
        inputs, crossings=[crossing], crest_field="crest", opening_field="span", tide_field="tidal"
    )
    (answer,) = screen_crossings(inputs)
    assert {"tidal", "crest-survey-differs"} <= codes(answer)
    assert answer.crest == valley.crest_height + 0.5
    values = answer.events[0].values
    assert values["opening_share"] == pytest.approx(12.0 / values["required_opening"])


@pytest.mark.parametrize(("off", "side"), [(25.0, "downstream"), (-25.0, "upstream")])
def test_a_fill_beside_a_line_drawn_far_off_is_told_of(tmp_path, off, side):
    valley, inputs = one_valley(tmp_path, crest=2.5)
    table = roads([valley])
    table.geometry = table.geometry.translate(0.0, off)
    found, _ = crossings_from_roads(RoadNetwork(table), inputs.network, 30.0)
    (answer,) = screen_crossings(replace(inputs, crossings=found))
    (finding,) = [f for f in answer.findings if "where no road is drawn" in f.message]
    assert finding.code == "crest-doubtful"
    assert f"{side}, where" in finding.message
    assert finding.y == pytest.approx(NORTH - ROAD_AT, abs=HALF_TOP + 1.0)
    # the valley falls less than the height that is told
    told = float(finding.message.split(" m higher")[0].split()[-1])
    assert answer.crest + told == pytest.approx(valley.crest_height, abs=0.1)
    # where that road is drawn too, nothing is to be told
    both = RoadNetwork(pandas.concat([table, roads([valley]).assign(name="the fill's own")]))
    (answer,) = screen_crossings(replace(inputs, crossings=found, roads=both))
    assert not any("where no road is drawn" in f.message for f in answer.findings)


def test_a_steep_stream_is_no_fill(tmp_path):
    _, inputs = one_valley(tmp_path, crest=1.0, slope=0.05)
    (answer,) = screen_crossings(inputs)
    assert "crest-doubtful" not in codes(answer)


def test_a_crossing_without_a_place_for_its_section_says_why(tmp_path):
    valley, inputs = one_valley(tmp_path, crest=2.0)
    short = streams([valley])
    top = NORTH - ROAD_AT + HALF_TOP + 4.0
    short.geometry = [LineString([(valley.centre, top), (valley.centre, NORTH - LONG + 2.0)])]
    net = StreamNetwork(short.assign(feature_id=short["stream_id"]), CRS)
    found, _ = crossings_from_roads(RoadNetwork(roads([valley])), net, 30.0)
    (answer,) = screen_crossings(replace(inputs, network=net, crossings=found))
    (finding,) = [f for f in answer.findings if f.code == "crossing-failed"]
    assert "the stream line begins" in finding.message

    def gap(z, x, y):
        return np.where((np.abs(x - valley.centre) < 3.0) & (y > NORTH - ROAD_AT + 5.0), np.nan, z)

    _, inputs = one_valley(tmp_path, change=gap, crest=2.0)
    (answer,) = screen_crossings(inputs)
    (finding,) = [f for f in answer.findings if f.code == "crossing-failed"]
    assert "the terrain has a gap along the stream there" in finding.message


def test_a_filler_is_no_surveyed_crest(tmp_path):
    valley, inputs = one_valley(tmp_path, crest=2.0)
    (plain,) = screen_crossings(inputs)
    for filler in (-9999.0, 0.0, valley.bed - 1.0):
        one = replace(inputs.crossings[0], attributes={"crest": filler})
        (answer,) = screen_crossings(replace(inputs, crossings=[one], crest_field="crest"))
        assert answer.crest == plain.crest
        (finding,) = [f for f in answer.findings if f.code == "crest-survey-differs"]
        assert finding.severity == "doubtful"
        assert "the one in the ground was used" in finding.message


@pytest.mark.parametrize(
    ("surveys", "added"),
    [
        ((None, 0.25), 0.25),
        ((0.1, 0.25), 0.25),
        ((0.25, 0.1), 0.25),
        ((0.2, None), 0.2),
        ((-9999.0, 0.1), 0.1),
    ],
)
def test_of_two_surveyed_carriageways_the_higher_one_counts(tmp_path, surveys, added):
    valley, inputs = one_valley(tmp_path, crest=2.0)
    pair = pandas.concat([roads([valley]).assign(name=name) for name in ("East", "West")])
    # two lines along one fill, so that their surveys alone tell them apart
    pair.geometry = [valley.road, shapely.affinity.translate(valley.road, 0.0, -2.0)]
    pair["crest"] = [np.nan if s is None else valley.crest_height + s for s in surveys]
    found, _ = crossings_from_roads(RoadNetwork(pair), inputs.network, 30.0)
    (answer,) = screen_crossings(replace(inputs, crossings=found, crest_field="crest"))
    assert answer.crest == pytest.approx(valley.crest_height + added, abs=1e-6)


def test_fields_that_hold_no_number_are_findings(tmp_path):
    _, inputs = one_valley(tmp_path, crest=2.0)
    fields = {
        "crest": "498.2 ft",
        "traffic": "1,200",
        "width": 0.0,
        "gap": -3,
        "full": " 12.5 ",
        "empty": None,
    }
    one = replace(inputs.crossings[0], attributes=fields)
    opening = [(name, "the opening", True) for name in ("width", "gap", "full", "empty")]
    wanted = [("crest", "the surveyed crest", False), ("traffic", "the rank", False), *opening]
    found = [(f.message.split()[0], f.severity) for f in field_findings(one, wanted)]
    assert found == [("crest", "doubtful"), ("traffic", "note"), ("width", "note"), ("gap", "doubtful")]


def test_an_empty_field_of_a_point_leaves_room_for_the_roads(tmp_path):
    table = lines(A=[(204, -100), (204, 100)])
    table["crest"], table["traffic"] = [101.5], [900]
    found = crossings_from_points(
        points([(200, 2)], crest=[None], traffic=[40]),
        network(Mill=STRAIGHT), RoadNetwork(table), 30.0, 30.0,
    )  # fmt: skip
    assert (found[0].attributes["crest"], found[0].attributes["traffic"]) == (101.5, 40)


def test_a_section_cut_by_a_road_is_a_finding(tmp_path):
    valley, inputs = one_valley(tmp_path, crest=2.0)
    # the road turns and runs up the valley beside the stream
    x = valley.centre
    road = LineString([(x - 120, NORTH - ROAD_AT), (x + 25, NORTH - ROAD_AT), (x + 30, NORTH - 20.0)])
    crossing = replace(inputs.crossings[0], line=road)
    (answer,) = screen_crossings(replace(inputs, crossings=[crossing]))
    assert "section-cut-by-road" in codes(answer)
    assert answer.approach.profile.x.max() < x + 30.0


def test_no_section_runs_over_another_road(tmp_path):
    valley, inputs = one_valley(tmp_path, crest=2.0)
    x = valley.centre
    (plain,) = screen_crossings(inputs)
    beside = lines(Lane=[(x - WEST + 14.0, -200.0), (x - WEST + 14.0, -360.0)])
    (answer,) = screen_crossings(replace(inputs, roads=RoadNetwork(beside)))
    assert plain.approach.profile.x.max() > x + 14.0
    assert (
        LineString(np.column_stack([answer.approach.profile.x, answer.approach.profile.y])).distance(
            beside.geometry[0]
        )
        > 3.0
    )


def test_a_crossing_without_a_flow_keeps_its_place(tmp_path):
    _, inputs = one_valley(tmp_path, crest=2.0)
    flows = [replace(inputs.flows[0], stream="another")]
    (answer,) = screen_crossings(replace(inputs, flows=flows))
    assert [(e.event, e.status, e.verdict) for e in answer.events] == [("flood", "failed", "")]
    assert "flow-missing" in codes(answer)
    assert np.isfinite(answer.crest_discharge)
    own = [Flow("flood", 5.0, crossing=inputs.crossings[0].crossing_id), *flows]
    (answer,) = screen_crossings(replace(inputs, flows=own))
    assert answer.events[0].values["discharge"] == 5.0


# --- pages for people --------------------------------------------------------------------------------


def words(figure):
    return "\n".join(text.get_text() for text in figure.texts)


def test_every_page_says_that_it_is_a_screening_estimate(tmp_path):
    _, inputs = one_valley(tmp_path, crest=2.0)
    answers = screen_crossings(inputs)
    lost = replace(answers[0], road=None, approach=None, events=())
    pages = [draw_table(answers, SI), draw_map(answers, inputs), draw_panel(answers[0], inputs)]
    for page in (*pages, draw_panel(lost, inputs)):
        assert CAUTION in words(page)


def test_a_page_has_the_largest_events_however_many_there_are(tmp_path):
    _, inputs = one_valley(tmp_path, crest=2.0)
    flows = [Flow(f"event {k}", 4.0 * k) for k in range(1, 16)]
    (answer,) = screen_crossings(replace(inputs, flows=flows))
    text = words(draw_panel(answer, inputs))
    assert "event 15: 60.0 m³/s" in text
    assert "event 14: 56.0 m³/s" in text
    assert "event 1: " not in text
    assert "smaller events in crossings.csv" in text
    assert f"first event over: {answer.first_event_over}" in text


def test_a_page_without_an_answer_says_why(tmp_path):
    _, inputs = one_valley(tmp_path, crest=2.0)
    why = "the ground ends here, " * 30
    one = replace(inputs.crossings[0], findings=(inputs.crossings[0].finding("crossing-failed", why),))
    (answer,) = screen_crossings(replace(inputs, crossings=[one]))
    text = words(draw_panel(answer, inputs))
    assert "No answer" in text
    assert " ".join(why.split()) in " ".join(text.split())


def test_labels_of_a_map_do_not_lie_over_each_other(tmp_path):
    _, inputs = one_valley(tmp_path, crest=2.0)
    (answer,) = screen_crossings(inputs)
    one = answer.crossing
    places = [(0.0, 0.0), (25.0, 0.0), (0.0, 20.0), (600.0, 5.0)]
    moved = [
        replace(one, crossing_id=f"crossing {k}", x=one.x + x, y=one.y + y)
        for k, (x, y) in enumerate(places, 1)
    ]
    many = [replace(answer, rank=k, crossing=at) for k, at in enumerate(moved, 1)]
    figure = draw_map(many, inputs)
    figure.draw_without_rendering()
    ax = figure.axes[0]
    boxes = [t.get_window_extent() for t in ax.texts if "crossing" in t.get_text()]
    assert len(boxes) == 4
    assert not any(a.overlaps(b) for k, a in enumerate(boxes) for b in boxes[:k])
    frame = ax.get_window_extent()
    assert all(b.x0 >= frame.x0 and b.x1 <= frame.x1 for b in boxes)
    lengths = [t.get_text() for t in ax.texts if t.get_text().endswith(" m")]
    (bar,) = [line for line in ax.lines if line.get_zorder() == 9]
    assert lengths == [f"{np.ptp(bar.get_xdata()):.0f} m"]
