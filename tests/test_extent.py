"""The flood on the map: extent, low ground not joined, boundary audit and depth grids."""

import hashlib
import json
import re
from itertools import pairwise
from pathlib import Path

import geopandas
import numpy as np
import pytest
import rasterio
import shapely
from matplotlib.cbook import get_sample_data
from rasterio.transform import from_origin
from scipy import ndimage
from scipy.optimize import brentq
from scipy.sparse import coo_array
from scipy.sparse.csgraph import breadth_first_order, minimum_spanning_tree
from shapely import LineString, Point

from terrain2q import run
from terrain2q.errors import InputError, OutputError
from terrain2q.ground import water_edge
from terrain2q.ground.water_edge import GridFile, Joins, edge_field, outlines, strips, tidy
from terrain2q.ground.water_surface import Polyline, Reach, divide
from terrain2q.output.pages import write_pages
from terrain2q.output.rasters import file_words

# rasterio 1.4 multiplies transforms in a way that affine 3.1 will some day retire
pytestmark = pytest.mark.filterwarnings("ignore:Use `@` matmul:PendingDeprecationWarning")

CRS = "EPSG:26915"
EAST, NORTH = 500_000.0, 4_500_000.0
SCALE = 0.9996  # of UTM on its central meridian (exact by definition): ground is longer than the map


class Valley:
    """Ground given along (s, downstream) and across (t, to the right) a line through the origin."""

    def __init__(self, folder, ground, azimuth=90.0, size=360, cell=1.0):
        self.folder, self.size, self.cell = folder, size, cell
        self.east, self.north = np.sin(np.radians(azimuth)), np.cos(np.radians(azimuth))
        count = int(size / cell)
        middle = (np.arange(count) + 0.5) * cell
        x, y = np.meshgrid(middle - size / 2, size / 2 - middle)
        self.s, self.t = x * self.east + y * self.north, x * self.north - y * self.east
        self.z = ground(self.s, self.t)
        self.transform = from_origin(EAST - size / 2, NORTH + size / 2, cell, cell)
        self.streams, self.lines, self.fields = {}, {}, {}

    def place(self, s, t):
        return EAST + s * self.east + t * self.north, NORTH + s * self.north - t * self.east

    def aside(self, x, y):
        """s and t of places on the map."""
        x, y = x - EAST, y - NORTH
        return x * self.east + y * self.north, x * self.north - y * self.east

    def stream(self, points, name="river"):
        self.streams[name] = LineString([self.place(*p) for p in points])

    def line(self, name, points, stream="river"):
        self.lines[name] = LineString([self.place(*p) for p in points])
        self.fields[name] = stream

    def across(self, places, left=-90.0, right=90.0):
        for s in places:
            self.line(f"at{s:g}", [(s, left), (s, right)])

    def run(self, flows, slope=0.004, n=0.05, extra="", units="si", options=None, channel='banks = "auto"'):
        path = self.folder / "dem.tif"
        with rasterio.open(
            path, "w", driver="GTiff", height=len(self.z), width=self.z.shape[1], count=1, dtype="float64",
            crs=CRS, transform=self.transform, nodata=-9999.0,
        ) as out:  # fmt: skip
            out.write(np.where(np.isnan(self.z), -9999.0, self.z), 1)
            out.units = ("m",)
        data = self.folder / "lines.gpkg"
        geopandas.GeoDataFrame(
            {"id": list(self.streams)}, geometry=list(self.streams.values()), crs=CRS
        ).to_file(data, layer="streams")
        geopandas.GeoDataFrame(
            {"id": list(self.lines), "stream": list(self.fields.values())},
            geometry=list(self.lines.values()), crs=CRS,
        ).to_file(data, layer="cut_lines")  # fmt: skip
        if isinstance(flows, dict):
            events = ", ".join(f'"{name}" = {value!r}' for name, value in flows.items())
            given = f"events = {{ {events} }}"
        else:
            (self.folder / "flows.csv").write_text(flows)
            given = 'path = "flows.csv"'
        (self.folder / "study.toml").write_text(
            f"""
            [study]
            units = "{units}"
            [terrain]
            dem = "dem.tif"
            [streams]
            path = "lines.gpkg|layer=streams"
            [cut_lines]
            path = "lines.gpkg|layer=cut_lines"
            [land_cover]
            default_n = {n}
            [channel]
            {channel}
            [slope]
            value = {slope}
            [flows]
            {given}
            [extent]
            {extra}
            [output]
            overwrite = true
            report = false
            sheets = "none"
            """
        )
        return run(self.folder / "study.toml", options)

    def depth(self, results, event):
        """Depths in the study's unit on the terrain's cells, NaN where dry."""
        with rasterio.open(results.folder / f"depth_{event}.tif") as source:
            part = source.read(1, masked=True).filled(np.nan)
            row = round((self.transform.f - source.transform.f) / self.cell)
            column = round((source.transform.c - self.transform.c) / self.cell)
        whole = np.full(self.z.shape, np.nan)
        whole[row : row + part.shape[0], column : column + part.shape[1]] = part
        return whole


def extent(results, event):
    row = results.flood_extent.set_index("event").loc[event]
    return row.geometry, row


def codes(results, code):
    return [f for f in results.findings_list if f.code == code]


def vertices(shape):
    return shapely.get_coordinates(shape)


# --- a valley of closed form -----------------------------------------------------------------------------

SLOPE, N = 0.004, 0.05
HALF_BED, BANK_HEIGHT, PLAIN, RISE = 8.0, 2.0, 30.0, 0.25
TOP = HALF_BED + 1.5 * BANK_HEIGHT


def trapezoid(s, t):
    """Bed 16 m, sides 1.5:1 for 2 m, floodplains of 30 m, then 1 in 4."""
    across = np.abs(t)
    height = np.clip((across - HALF_BED) / 1.5, 0, BANK_HEIGHT)
    return 100.0 - SLOPE * s + height + RISE * np.maximum(across - TOP - PLAIN, 0)


def carried(depth):
    """Discharge by the parts a hand would take: the channel, and one floodplain twice."""

    def manning(area, perimeter):
        return area * (area / perimeter) ** (2 / 3) / N * SLOPE**0.5

    y = min(depth, BANK_HEIGHT)
    over = max(depth - BANK_HEIGHT, 0.0)
    area = (2 * HALF_BED + 1.5 * y) * y + over * 2 * TOP
    total = manning(area, 2 * HALF_BED + 2 * y * (1 + 1.5**2) ** 0.5)
    if over > 0:
        out = over / RISE
        total += 2 * manning(PLAIN * over + 0.5 * over * out, PLAIN + np.hypot(over, out))
    return total


def half_width(depth):
    if depth <= BANK_HEIGHT:
        return HALF_BED + 1.5 * depth
    return TOP + PLAIN + (depth - BANK_HEIGHT) / RISE


@pytest.mark.parametrize("azimuth", [0, 17, 45, 133, 271.5])
def test_straight_valley_of_closed_form(tmp_path, azimuth):
    valley = Valley(tmp_path, trapezoid, azimuth)
    valley.stream([(-140, 0), (140, 0)])
    valley.across([-60, 5, 60])
    flows = {"low": 35.0, "high": 160.0}
    strip = shapely.Polygon(
        [valley.place(s, t) for s, t in ((-150, -TOP), (150, -TOP), (150, TOP), (-150, TOP))]
    )
    geopandas.GeoDataFrame({"id": [1]}, geometry=[strip], crs=CRS).to_file(
        tmp_path / "channel.gpkg", layer="c"
    )
    results = valley.run(flows, SLOPE, N, channel='path = "channel.gpkg|layer=c"')
    for event, discharge in flows.items():
        depth = brentq(lambda y, q=discharge: carried(y) - q, 0.01, 9)
        half = half_width(depth)
        shape, row = extent(results, event)
        assert shape.is_valid
        assert len(shape.geoms) == 1
        assert not shape.geoms[0].interiors
        assert row.area == pytest.approx(120 * 2 * half / SCALE**2, rel=0.01)
        s, t = valley.aside(*vertices(shape).T)
        assert np.abs(s).max() <= 60 + 1e-6
        side = np.abs(s) < 59.99
        assert np.abs(np.abs(t[side]) - half).max() < 1.0
        wet = valley.depth(results, event)
        stage = wet + valley.z
        assert np.nanmax(np.abs(stage - (100 - SLOPE * valley.s + depth))) < 0.02
        inside = (np.abs(valley.s) < 59) & (np.abs(valley.t) < half - 1)
        assert np.isfinite(wet[inside]).all()
        outside = (np.abs(valley.s) > 61) | (np.abs(valley.t) > half + 1)
        assert np.isnan(wet[outside]).all()
        assert row.boundary_points > 200
        assert row.boundary_within_tolerance > 0.995
        assert row.largest_depth == pytest.approx(depth, abs=0.02)
    assert not codes(results, "extent-cut-off")
    assert not codes(results, "hollow-reached")
    assert not codes(results, "water-rises-downstream")
    assert results.low_not_joined.geometry.is_empty.all()


def test_boundary_is_finer_than_a_cell(tmp_path):
    """At 5 m cells the edge of the water still lies within a quarter of a cell: no stairs."""
    valley = Valley(tmp_path, lambda s, t: 100 - 0.004 * s + 0.1 * np.abs(t), 17, size=600, cell=5.0)
    valley.stream([(-250, 0), (250, 0)])
    valley.across([-100, 100], -150, 150)
    results = valley.run({"flood": 150.0}, channel='banks = "none"')
    shape, _ = extent(results, "flood")
    s, t = valley.aside(*vertices(shape).T)
    side = np.abs(s) < 99.9
    stage = np.interp(s, [-100, 100], results.design_stages["stage"])
    assert np.abs(np.abs(t) - (stage - 100 + 0.004 * s) / 0.1)[side].max() < 1.25


def test_depth_velocity_has_the_subareas_velocity(tmp_path):
    valley = Valley(tmp_path, trapezoid, 90)
    valley.stream([(-140, 0), (140, 0)])
    valley.across([-60, 60])
    corners = ((-150, -TOP), (150, -TOP), (150, TOP), (-150, TOP))
    strip = shapely.Polygon([valley.place(s, t) for s, t in corners])
    geopandas.GeoDataFrame({"id": [1]}, geometry=[strip], crs=CRS).to_file(
        tmp_path / "channel.gpkg", layer="c"
    )
    results = valley.run({"high": 160.0}, SLOPE, N, channel='path = "channel.gpkg|layer=c"')
    with rasterio.open(results.folder / "depth_velocity_high.tif") as product:
        both = product.read(1, masked=True)
        assert product.units == ("m2/s",)
    with rasterio.open(results.folder / "depth_high.tif") as source:
        depth = source.read(1, masked=True)
        column, row = int(EAST - source.transform.c), int(source.transform.f - NORTH)
    speed = both / depth
    flows = results.subarea_flows[results.subarea_flows["section_id"] == "at-60"].set_index("subarea")
    # rows count southward, which is to the right of a stream that flows east
    for aside, subarea in ((0, 2), (25, 3), (-25, 1)):
        assert speed[row + aside, column] == pytest.approx(flows["mean_velocity"][subarea], rel=0.01)


# --- ridges and hollows --------------------------------------------------------------------------------


def lower_behind(s, t):
    """A channel in a plain whose right side lies lower beyond 40 m."""
    z = 100 - 0.002 * s + np.clip((np.abs(t) - 5) / 2, 0, 1.5)
    z += np.where(t > 40, -0.5 * np.clip((t - 40) / 10, 0, 1), 0)
    return z + 0.4 * np.maximum(np.abs(t) - 70, 0)


def with_levee(valley, gap):
    """Draw a levee as the cells of a thin line, joined by corners only where it runs at a slant."""
    levee = LineString([valley.place(-300, 30.2), valley.place(300, 30.2)])
    cells = rasterio.features.rasterize([levee], valley.z.shape, transform=valley.transform) > 0
    valley.z = np.where(cells, valley.z + 5, valley.z)
    if gap is not None:
        nearest = np.argmin(np.where(cells, np.abs(valley.s - gap), np.inf))
        valley.z.flat[nearest] -= 5


@pytest.mark.parametrize("azimuth", [90, 62])
def test_unbroken_levee_holds_and_a_gap_one_cell_wide_does_not(tmp_path, azimuth):
    answers = {}
    for gap in (None, -20.0):
        folder = tmp_path / str(gap)
        folder.mkdir()
        valley = Valley(folder, lower_behind, azimuth, size=400)
        with_levee(valley, gap)
        valley.stream([(-170, 0), (170, 0)])
        valley.across([-80, 30, 80])
        answers[gap] = valley, valley.run({"flood": 60.0}, 0.002)
    valley, held = answers[None]
    behind = (valley.t > 33) & (valley.t < 70) & (np.abs(valley.s) < 75)
    before = held.design_stages.set_index("section_id")["stage"]
    assert np.isnan(valley.depth(held, "flood")[behind]).all()
    assert held.low_not_joined["area"].iloc[0] > 0.9 * 150 * 37
    assert held.low_not_joined["largest_depth"].iloc[0] > 0.5
    assert not codes(held, "hollow-reached")
    valley, broken = answers[-20.0]
    now = broken.design_stages.set_index("section_id")["stage"]
    assert np.isfinite(valley.depth(broken, "flood")[behind]).mean() > 0.99
    assert broken.low_not_joined["area"].iloc[0] == 0
    # the next section downstream counts it, and the finding has both answers
    assert now["at30"] < before["at30"] - 0.1
    found = {f.feature_id: f.message for f in codes(broken, "hollow-reached")}
    assert "at30" in found
    assert f"{now['at30']:.2f} m" in found["at30"]
    assert f"{before['at30']:.2f} m" in found["at30"]
    # map and section agree: the section's wetted part has the hollow
    wetted = broken.design_stages.set_index("section_id").geometry["at30"]
    assert len(wetted.geoms) == 2


def perched(s, t):
    """Banks 1.5 m above the bed and, to the right, a hollow whose floor lies 0.3 m above the bed."""
    z = 100 - 0.002 * s + np.clip((np.abs(t) - 5) / 2, 0, 1.5)
    z += np.where(t > 10, -1.2 * np.clip((t - 10) / 12, 0, 1), 0)
    return z + 0.3 * np.maximum(t - 60, 0) + 0.3 * np.maximum(-t - 10, 0)


def test_perched_channel_spills_and_the_hollow_stands_at_its_own_stage(tmp_path):
    valley = Valley(tmp_path, perched, 75, size=400)
    valley.stream([(-170, 0), (170, 0)])
    valley.across([-80, 0, 80], -60, 90)
    results = valley.run({"flood": 40.0}, 0.002, 0.035)
    flows = results.subarea_flows
    stages = flows.groupby("section_id")["stage"].agg(["min", "max"])
    assert (stages["max"] - stages["min"] > 0.3).all()
    level = valley.depth(results, "flood") + valley.z
    for s, name in ((-80, "at-80"), (0, "at0"), (80, "at80")):
        near = (np.abs(valley.s - s) < 1) & np.isfinite(level)
        hollow, channel = near & (valley.t > 25), near & (np.abs(valley.t) < 5)
        assert hollow.sum() > 20
        assert np.abs(level[hollow] - stages["min"][name]).max() < 0.01
        assert np.abs(level[channel] - stages["max"][name]).max() < 0.01
    between = (np.abs(valley.s - 40) < 1) & np.isfinite(level)
    fall = level + 0.002 * valley.s
    assert np.ptp(fall[between & (valley.t > 25)]) < 0.01
    assert np.ptp(fall[between & (np.abs(valley.t) < 5)]) < 0.01
    assert extent(results, "flood")[1].boundary_within_tolerance > 0.9


def test_waters_part_along_the_ridge_between_them():
    """A ridge that bends: each side belongs to its own seed, whatever the distance."""
    y, x = np.mgrid[0:60, 0:80]
    ridge = 30 + 12 * np.sin(x / 9.0)
    ground = 5.0 - np.abs(y - ridge)
    seeds = {0: np.array([[0, 0]]), 1: np.array([[59, 79]])}
    labels = divide(ground, seeds, np.ones(ground.shape, dtype=bool))
    clear = np.abs(y - ridge) > 1.5
    np.testing.assert_array_equal(labels[clear], (y > ridge)[clear])


def test_waters_part_alike_in_blocks(monkeypatch):
    y, x = np.mgrid[0:120, 0:160]
    ridge = 60 + 20 * np.sin(x / 19.0)
    ground = 9.0 - 0.3 * np.abs(y - ridge)
    seeds = {0: np.array([[0, 0]]), -1: np.array([[119, 159]])}
    monkeypatch.setattr("terrain2q.ground.water_surface.DIVIDE_CELLS", 2_000)
    labels = divide(ground, seeds, np.ones(ground.shape, dtype=bool))
    clear = np.abs(y - ridge) > 8
    np.testing.assert_array_equal(labels[clear], -(y > ridge)[clear].astype(int))


# --- where the map ends --------------------------------------------------------------------------------


def test_nothing_lies_beyond_the_ends_of_the_sections(tmp_path):
    """Short lines on a wide plain: the extent ends where they end, and a finding says so."""
    valley = Valley(tmp_path, trapezoid, 30)
    valley.stream([(-140, 0), (140, 0)])
    valley.line("a", [(-60, -20), (-55, 0), (-60, 25)])
    valley.line("b", [(0, -25), (0, 15)])
    valley.line("c", [(60, -60), (60, 60)])
    results = valley.run({"flood": 160.0}, SLOPE, N)
    shape, row = extent(results, "flood")
    ring = [(-60, -20), (-55, 0), (-60, 25), (0, 15), (60, 60), (60, -60), (0, -25)]
    allowed = shapely.Polygon([valley.place(*p) for p in ring])
    assert allowed.buffer(1e-6).covers(shape)
    rows, columns = np.nonzero(np.isfinite(valley.depth(results, "flood")))
    x = EAST - valley.size / 2 + columns + 0.5
    y = NORTH + valley.size / 2 - rows - 0.5
    assert shapely.contains_xy(allowed.buffer(1e-6), x, y).all()
    found = codes(results, "extent-cut-off")
    assert {f.feature_id for f in found} == {"a", "b"}
    assert all(f.severity == "doubtful" for f in found)
    # cut-off boundaries are not in the audit
    assert row.boundary_within_tolerance == 1.0
    assert row.boundary_points < 0.5 * shapely.length(shape)


def test_gap_in_the_terrain_is_no_water_and_not_in_the_audit(tmp_path):
    valley = Valley(tmp_path, trapezoid, 0)
    valley.z[np.hypot(valley.s - 10, valley.t - 25) < 6] = np.nan
    valley.stream([(-140, 0), (140, 0)])
    valley.across([-60, 60])
    results = valley.run({"flood": 160.0}, SLOPE, N)
    shape, row = extent(results, "flood")
    (polygon,) = shape.geoms
    (hole,) = polygon.interiors
    cells = np.isnan(valley.z).sum()
    assert shapely.Polygon(hole).area == pytest.approx(cells, rel=0.05)
    assert row.boundary_within_tolerance > 0.99
    assert np.isnan(valley.depth(results, "flood")[np.isnan(valley.z)]).all()


def test_specks_and_pinholes_are_dropped(tmp_path):
    random = np.random.default_rng(3)

    def noisy(s, t):
        return trapezoid(s, t) + ndimage.gaussian_filter(random.normal(0, 1.0, s.shape), 1.5)

    valley = Valley(tmp_path, noisy, 60)
    valley.stream([(-140, 0), (140, 0)])
    valley.across([-60, 0, 60])
    counts = {}
    for smallest in (1.0, 40.0):
        results = valley.run({"flood": 90.0}, SLOPE, N, extra=f"smallest = {smallest}")
        shape, _ = extent(results, "flood")
        assert shape.is_valid
        parts = [shapely.Polygon(r).area for p in shape.geoms for r in (p.exterior, *p.interiors)]
        low = [p.area for p in results.low_not_joined.geometry.iloc[0].geoms]
        assert min(parts) >= smallest * SCALE**2 * 0.999
        assert min(low, default=np.inf) >= smallest * SCALE**2 * 0.999
        counts[smallest] = len(parts) + len(low)
    assert counts[40.0] < 0.5 * counts[1.0]


def test_meandering_stream_is_followed(tmp_path):
    """Water in a winding channel: the stream is under water all along, also between far sections."""
    bend = 25.0

    def ground(s, t):
        off = np.abs(t - bend * np.sin(s / 30.0)) * np.cos(np.arctan(bend / 30.0 * np.cos(s / 30.0)))
        return 100 - 0.003 * s + np.clip((off - 4) / 2, 0, 2) + 0.01 * np.abs(t)

    valley = Valley(tmp_path, ground, 110, size=500)
    s = np.arange(-220, 221, 4.0)
    valley.stream(np.column_stack([s, bend * np.sin(s / 30.0)]))
    valley.line("a", [(-150, -80), (-145, 0), (-160, 80)])
    valley.line("b", [(-20, -80), (-5, 0), (-20, 80)])
    valley.line("c", [(130, -80), (140, 80)])
    results = valley.run({"banks": 12.0}, 0.002, 0.035)
    shape, row = extent(results, "banks")
    inside = LineString([valley.place(x, bend * np.sin(x / 30.0)) for x in np.arange(-140, 125, 1.0)])
    assert inside.within(shape)
    assert row.boundary_within_tolerance > 0.99
    level = valley.depth(results, "banks") + valley.z
    y, x = np.nonzero(np.isfinite(level))
    places = shapely.points(EAST - 250 + x + 0.5, NORTH + 250 - y - 0.5)
    for name in ("a", "b", "c"):
        stage = results.design_stages.set_index("section_id")["stage"][name]
        on = shapely.distance(valley.lines[name], places) < 0.75
        # exactly its stage on the line: half a cell off it, the fall over half a cell
        assert on.sum() > 5
        assert np.abs(level[y[on], x[on]] - stage).max() < 0.01


def test_confluence_is_one_water_and_the_higher_surface_holds(tmp_path):
    def ground(s, t):
        main = np.clip((np.abs(t) - 6) / 2, 0, 2.0) - 0.002 * s + 0.02 * np.maximum(np.abs(t) - 20, 0)
        side = np.clip((np.abs(s) - 3) / 2, 0, 1.0) + 0.002 * np.maximum(-t, 0) + 0.3
        side += 0.05 * np.maximum(np.abs(s) - 20, 0)
        return 100 + np.where(t < -5, np.minimum(main, side), main)

    valley = Valley(tmp_path, ground, 90, size=500)
    valley.stream([(-200, 0), (200, 0)])
    valley.stream([(0, -220), (0, 0)], "creek")
    valley.across([-80, 80], -110, 110)
    for t in (-200, -140):
        valley.line(f"creek{-t}", [(60, t), (-60, t)], "creek")
    flows = "event,discharge,stream\nflood,60,river\nflood,4,creek\n"
    results = valley.run(flows, 0.002, 0.04)
    shape, _ = extent(results, "flood")
    mouth = LineString([valley.place(0, t) for t in (-195, 0)])
    assert mouth.within(shape)
    assert len(shape.geoms) == 1
    level = valley.depth(results, "flood") + valley.z
    # towards the main stream the creek's water falls to the main stream's and never below it
    column = np.flatnonzero(np.abs(valley.s[0]) < 0.6)[0]
    along = level[:, column][valley.t[:, column] > -195]
    along = along[np.isfinite(along)][:190]
    assert (np.diff(along) < 0.02).all()
    main = results.design_stages.set_index("section_id")["stage"]
    assert along.min() > min(main["at-80"], main["at80"]) - 0.01


def test_water_that_rises_downstream_is_a_finding(tmp_path):
    valley = Valley(tmp_path, lambda s, t: trapezoid(s, t) + np.where(s > 0, 0.3 + 0.004 * s, 0), 90)
    valley.stream([(-140, 0), (140, 0)])
    valley.across([-60, 60])
    results = valley.run({"flood": 60.0}, SLOPE, N)
    (found,) = codes(results, "water-rises-downstream")
    assert found.feature_id == "at-60"
    assert re.fullmatch(r"flood: water rises by 0\.\d\d m from at-60 to at60", found.message)


def test_a_rise_of_less_than_a_tenth_of_a_foot_is_no_finding(tmp_path):
    valley = Valley(tmp_path, lambda s, t: trapezoid(s, t) + np.where(s > 0, 0.02 + SLOPE * s, 0), 90)
    valley.stream([(-140, 0), (140, 0)])
    valley.across([-1, 1])
    results = valley.run({"flood": 60.0}, SLOPE, N)
    stages = results.design_stages.set_index("section_id")["stage"]
    assert 0.001 < stages["at1"] - stages["at-1"] < 0.03
    assert not codes(results, "water-rises-downstream")


def test_a_place_has_one_finding_for_all_events(tmp_path):
    valley = Valley(tmp_path, lambda s, t: trapezoid(s, t) + np.where(s > 0, 0.3 + 0.004 * s, 0), 90)
    valley.stream([(-140, 0), (140, 0)])
    valley.across([-60, 60], -12, 12)
    results = valley.run({"small": 60.0, "middle": 90.0, "large": 120.0}, SLOPE, N)
    (rise,) = codes(results, "water-rises-downstream")
    assert rise.message.startswith("small, middle, large: water rises by 0.")
    assert rise.message.endswith(" m from at-60 to at60")
    left, right = codes(results, "extent-cut-off")
    assert (left.feature_id, right.feature_id) == ("at-60", "at-60")
    for found, side in ((left, "left"), (right, "right")):
        assert re.fullmatch(
            rf"small, middle, large: water reaches the line from the {side} end of at-60 to that of at60 "
            r"over (\d+, \d+ and )?\d+ m; beyond it nothing is mapped",
            found.message,
        )


def test_failed_section_is_left_out_and_told(tmp_path):
    valley = Valley(tmp_path, trapezoid, 90)
    valley.stream([(-140, 0), (140, 0)])
    valley.across([-60, 60])
    valley.line("off", [(900, -50), (900, 50)])
    results = valley.run({"flood": 60.0}, SLOPE, N)
    assert [f.feature_id for f in codes(results, "extent-without-section")] == ["off"]
    assert extent(results, "flood")[1].area > 120 * 2 * HALF_BED


def test_stream_with_one_section_has_no_extent(tmp_path):
    valley = Valley(tmp_path, trapezoid, 90)
    valley.stream([(-140, 0), (140, 0)])
    valley.across([0])
    results = valley.run({"flood": 60.0}, SLOPE, N)
    assert len(codes(results, "extent-one-section")) == 1
    assert results.flood_extent["area"].iloc[0] == 0
    assert results.flood_extent.geometry.is_empty.all()
    assert not list(results.folder.glob("*.tif"))


# --- files ------------------------------------------------------------------------------------------------


def test_grids_are_cloud_optimized_and_described(tmp_path):
    valley = Valley(tmp_path, trapezoid, 90, size=1300)
    valley.stream([(-600, 0), (600, 0)])
    valley.across([-560, 0, 560])
    results = valley.run({"1 % chance": 60.0 / 0.3048**3}, SLOPE, N, units="us")
    names = sorted(p.name for p in results.folder.glob("depth*"))
    assert names == ["depth_1_chance.tif", "depth_velocity_1_chance.tif"]
    record = json.loads((results.folder / "run.json").read_text())
    assert len(record["outputs"]) == 3
    for name, unit in (("depth_1_chance.tif", "ft"), ("depth_velocity_1_chance.tif", "ft2/s")):
        with rasterio.open(results.folder / name) as source:
            assert source.tags(ns="IMAGE_STRUCTURE")["LAYOUT"] == "COG"
            assert source.profile["tiled"]
            assert source.overviews(1)
            assert source.nodata == -9999.0
            assert source.units == (unit,)
            assert source.crs == rasterio.crs.CRS.from_user_input(CRS)
            values = source.read(1, masked=True)
            tags = source.tags(1)
            # the cells are the terrain's own
            off = (source.transform.c - valley.transform.c, source.transform.f - valley.transform.f)
            assert off == (round(off[0]), round(off[1]))
        assert float(tags["STATISTICS_MAXIMUM"]) == pytest.approx(values.max(), rel=1e-6)
        assert float(tags["STATISTICS_MINIMUM"]) == pytest.approx(values.min(), rel=1e-6)
        assert float(tags["STATISTICS_MEAN"]) == pytest.approx(values.mean(dtype=float), rel=1e-6)
        assert float(tags["STATISTICS_STDDEV"]) == pytest.approx(values.std(dtype=float), rel=1e-6)


def test_feet_and_metres_agree(tmp_path):
    both = {}
    for units, flow in (("si", 60.0), ("us", 60.0 / 0.3048**3)):
        folder = tmp_path / units
        folder.mkdir()
        valley = Valley(folder, trapezoid, 20)
        valley.stream([(-140, 0), (140, 0)])
        valley.across([-60, 60])
        smallest = 30.0 if units == "si" else 30.0 / 0.3048**2
        results = valley.run({"flood": flow}, SLOPE, N, units=units, extra=f"smallest = {smallest}")
        both[units] = results, valley.depth(results, "flood")
    si, us = both["si"][0].flood_extent.iloc[0], both["us"][0].flood_extent.iloc[0]
    assert us["area"] * 0.3048**2 == pytest.approx(si["area"], rel=1e-9)
    assert us["largest_depth"] * 0.3048 == pytest.approx(si["largest_depth"], rel=1e-6)
    assert us["boundary_points"] == si["boundary_points"]
    np.testing.assert_allclose(both["us"][1] * 0.3048, both["si"][1], atol=0.001)


def test_unknown_events_and_missing_streams_are_errors(tmp_path):
    valley = Valley(tmp_path, trapezoid, 0)
    valley.stream([(-140, 0), (140, 0)])
    valley.across([-60, 60])
    with pytest.raises(InputError, match="no flow has the event '10-yaer'") as wrong:
        valley.run({"10-year": 60.0}, extra='events = ["10-yaer"]')
    assert wrong.value.code == "value-not-allowed"
    text = (tmp_path / "study.toml").read_text().replace('events = ["10-yaer"]', "")
    lines = text.splitlines()
    start = next(i for i, line in enumerate(lines) if "[streams]" in line)
    (tmp_path / "study.toml").write_text("\n".join(lines[:start] + lines[start + 2 :]))
    with pytest.raises(InputError, match="stream lines") as wrong:
        run(tmp_path / "study.toml")
    assert wrong.value.code == "key-missing"
    assert not (tmp_path / "output").exists()


def test_only_the_events_asked_for_are_mapped(tmp_path):
    valley = Valley(tmp_path, trapezoid, 0)
    valley.stream([(-140, 0), (140, 0)])
    valley.across([-60, 60])
    results = valley.run({"a": 20.0, "b": 60.0, "c": 90.0}, extra='events = ["c", "a"]')
    assert list(results.flood_extent["event"]) == ["a", "c"]
    assert not (results.folder / "depth_b.tif").exists()


def test_no_grid_stays_where_the_layers_fail(tmp_path, monkeypatch):
    valley = Valley(tmp_path, trapezoid, 0)
    valley.stream([(-140, 0), (140, 0)])
    valley.across([-60, 60])

    def fail(*_args, **_more):
        raise OutputError("output-not-writable", "no room", where="here")

    monkeypatch.setattr("terrain2q.process.write_geopackage", fail)
    with pytest.raises(OutputError):
        valley.run({"flood": 60.0})
    assert not (tmp_path / "output").exists()


def small_valley(folder):
    valley = Valley(folder, trapezoid, 0)
    valley.stream([(-140, 0), (140, 0)])
    valley.across([-60, 60])
    return valley


def contents(folder):
    return {path.name: path.read_bytes() for path in folder.iterdir()}


def test_files_of_an_earlier_run_do_not_stay_to_be_mistaken(tmp_path):
    valley = small_valley(tmp_path)
    first = valley.run(
        {"flood": 60.0, "larger": 90.0}, options={"output.tables": "csv", "output.report": True}
    )
    mine = tmp_path / "output" / "depth_mine.tif"
    mine.write_bytes((tmp_path / "output" / "depth_flood.tif").read_bytes())
    noted = tmp_path / "output" / "depth_velocity_larger.tif"
    with noted.open("ab") as file:
        file.write(b"changed by hand")
    assert {"depth_larger.tif", "results_sections.csv", "report.html"} <= {f.name for f in first.files}
    second = valley.run({"flood": 50.0})
    there = set(contents(second.folder))
    assert there == {f.name for f in second.files} | {mine.name, noted.name}
    assert second.left_files == (noted,)
    assert "not removed: depth_velocity_larger.tif" in second.summary_text()
    assert second.summary()["left_files"] == [str(noted)]
    # what a person changed is not taken for a file of ours ever after
    third = valley.run({"flood": 50.0})
    assert noted.exists()
    assert third.left_files == ()


def test_the_record_holds_every_file_with_its_hash(tmp_path):
    results = small_valley(tmp_path).run(
        {"flood": 60.0}, options={"output.tables": "csv", "output.report": True}
    )

    def holds_all():
        record = json.loads((results.folder / "run.json").read_text())
        listed = {Path(e["path"]).name: e["sha256"] for e in record["outputs"] + record["pages"]}
        return listed == {
            name: hashlib.sha256(data).hexdigest()
            for name, data in contents(results.folder).items()
            if name != "run.json"
        }

    assert holds_all()
    (results.folder / "report.html").write_text("spoilt")
    assert not holds_all()
    write_pages(results.folder)
    assert holds_all()


@pytest.mark.parametrize("where", ["make_layers", "write_geopackage"])
def test_earlier_files_stay_whole_where_a_run_fails(tmp_path, monkeypatch, where):
    valley = small_valley(tmp_path)
    valley.run({"flood": 60.0, "larger": 90.0})
    before = contents(tmp_path / "output")

    def fail(*_args, **_more):
        raise KeyboardInterrupt

    monkeypatch.setattr(f"terrain2q.process.{where}", fail)
    with pytest.raises(KeyboardInterrupt):
        valley.run({"flood": 50.0})
    assert contents(tmp_path / "output") == before


def test_a_run_that_fails_at_its_end_loses_sight_of_nothing(tmp_path, monkeypatch):
    valley = small_valley(tmp_path)
    valley.run({"flood": 60.0, "larger": 90.0})

    def fail(*_args, **_more):
        raise KeyboardInterrupt

    with monkeypatch.context() as patch:
        patch.setattr("terrain2q.process.write_pages", fail)
        with pytest.raises(KeyboardInterrupt):
            valley.run({"flood": 50.0})
    assert (tmp_path / "output" / "depth_larger.tif").exists()
    results = valley.run({"flood": 50.0})
    assert set(contents(results.folder)) == {f.name for f in results.files}


def test_file_names_are_safe_and_apart():
    long = ["x" * 300, "x" * 300 + "y"]
    words = file_words(["a/b", "a b", "A_B", "..", "10-year", "Hundertjähriges", *long])
    assert len({w.lower() for w in words.values()}) == 8
    assert words["Hundertjähriges"] == "Hundertjahriges"
    assert max(map(len, words.values())) < 80  # of the 255 that names have, twice and with more around
    assert all(
        set(w) <= set("abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ0123456789._-")
        for w in words.values()
    )
    assert words["10-year"] == "10-year"


# --- parts ------------------------------------------------------------------------------------------------


def test_share_is_exact_on_the_lines_and_straight_between_parallel_ones():
    upper = np.array([(0.0, 100.0), (0.0, 0.0)])
    lower = np.array([(400.0, 100.0), (400.0, 0.0)])
    reach = Reach.between(upper, lower, [np.array([(0.0, 50.0), (400.0, 50.0)])], (1.0, 1.0), 1.0)
    share = reach.spread(reach.share, 0, reach.rows)
    x = reach.column + np.arange(reach.columns) + 0.5
    inside = reach.cells(0, reach.rows, None) == 2
    np.testing.assert_allclose(share[inside], np.broadcast_to(x / 400, share.shape)[inside], atol=1e-5)
    aside = reach.spread(reach.aside, 0, reach.rows)
    y = reach.row + np.arange(reach.rows) + 0.5
    # x runs downstream and y to the left, as rows count northward here; the stream ends on the lines
    inside &= (x > 10) & (x < 390)
    np.testing.assert_allclose(
        aside[inside], np.broadcast_to(50 - y[:, None], aside.shape)[inside], atol=1e-3
    )


def test_share_on_bent_lines():
    upper = np.array([(0.0, 0.0), (30.0, 50.0), (0.0, 100.0)])
    lower = np.array([(260.0, 0.0), (200.0, 60.0), (260.0, 110.0)])
    reach = Reach.between(upper, lower, [np.array([(30.0, 50.0), (200.0, 60.0)])], (1.0, 1.0), -1.0)
    rng = np.random.default_rng(1)
    for line, wanted in ((upper, 0.0), (lower, 1.0)):
        places = shapely.get_coordinates(
            shapely.line_interpolate_point(LineString(line), rng.uniform(0, 110, 50))
        )
        np.testing.assert_allclose(reach.shares_at(places), wanted, atol=1e-12)
        share = reach.spread(reach.share, 0, reach.rows)
        row, column = (places[:, 1] - reach.row).astype(int), (places[:, 0] - reach.column).astype(int)
        assert np.abs(share[row, column] - wanted).max() < 0.02


def test_line_side_and_station():
    line = Polyline([np.array([(0.0, 0.0), (10.0, 0.0), (10.0, 10.0)])], (2.0, 1.0))
    away, side, station = line.nearest(np.array([(5.0, 3.0), (12.0, 5.0), (-1.0, 0.0)]))
    np.testing.assert_allclose(away, [3.0, 4.0, 2.0])
    np.testing.assert_allclose(station, [10.0, 25.0, 0.0])
    assert side[0] > 0 > side[1]


@pytest.mark.parametrize("seed", range(4))
def test_patches_are_the_same_in_strips_and_at_once(seed):
    wet = np.random.default_rng(seed).random((97, 60)) < 0.58
    whole, count = ndimage.label(wet)
    joins, parts, firsts = Joins(), [], []
    for row, end in [(0, 10), (10, 11), (11, 50), (50, 97)]:
        labels, first = joins.add(wet[row:end])
        parts.append(labels)
        firsts.append(first)
    joins.settle()
    assert joins.sizes.size == count
    again = np.concatenate([
        joins.table(i, np.arange(1, count + 1))[part] for i, part in enumerate(parts)
    ])  # fmt: skip
    pairs = np.unique(np.column_stack([whole.ravel(), again.ravel()]), axis=0)
    assert len(pairs) == count + 1
    np.testing.assert_array_equal(np.sort(joins.sizes), np.sort(np.bincount(whole.ravel())[1:]))


def test_strips_cover_the_rows_once_and_end_with_blocks(monkeypatch):
    monkeypatch.setattr(water_edge, "STRIP_CELLS", 2000)
    made = strips(1000, 50, first=13, block=16)
    assert made[0][0] == 0
    assert made[-1][1] == 1000
    assert all(a[1] == b[0] for a, b in pairwise(made))
    assert all((13 + end) % 16 == 0 for _, end in made[:-1])


def test_outline_of_a_cone_is_a_circle():
    y, x = np.mgrid[0:61, 0:61]
    depth = (20.3 - np.hypot(x - 30, y - 30)).astype(np.float32)
    state = np.where(depth > 0, 3, 2).astype(np.uint8)
    (shape,) = outlines(edge_field(depth, state, 3, 1), 100, 200)
    away = np.hypot(*(vertices(shape) - (230.5, 130.5)).T)
    assert np.abs(away - 20.3).max() < 0.02
    assert shape.area == pytest.approx(np.pi * 20.3**2, rel=2e-3)


def test_small_holes_are_filled_and_large_ones_kept():
    shell = shapely.box(0, 0, 20, 20)
    holes = [shapely.box(1, 1, 2, 2), shapely.box(5, 5, 10, 10), shapely.box(12, 12, 13, 14)]
    made = tidy([shell.difference(shapely.union_all(holes)), shapely.box(30, 0, 31, 1)], 4.0)
    assert len(made) == 1
    assert made[0].equals(shell.difference(holes[1]))


def test_grid_file_gives_back_what_it_was_given(tmp_path):
    grid = GridFile(7, 5, np.float32, tmp_path)
    values = np.arange(35, dtype=np.float32).reshape(7, 5)
    grid.write(0, values[:3])
    grid.write(3, values[3:])
    np.testing.assert_array_equal(grid.read(2, 5), values[2:5])
    around = grid.read_around(0, 2, 2, -1)
    np.testing.assert_array_equal(around[2:], values[:4])
    assert (around[:2] == -1).all()
    np.testing.assert_array_equal(grid.pick(np.array([6, 0]), np.array([4, 1])), [34, 1])
    grid.close()
    assert list(tmp_path.iterdir()) == []


# --- real ground ------------------------------------------------------------------------------------------


def test_real_ground(tmp_path, capsys):
    """The DEM that matplotlib ships (about 90 m cells in degrees): traced, cut, mapped, audited."""
    data = get_sample_data("jacksboro_fault_dem.npz")
    z = data["elevation"].astype(float)
    dx, dy = float(data["dx"]), float(data["dy"])
    west, north = float(data["xmin"]), float(data["ymax"])
    transform = from_origin(west, north, dx, dy)
    path = tmp_path / "dem.tif"
    with rasterio.open(
        path, "w", driver="GTiff", width=z.shape[1], height=z.shape[0], count=1, dtype="float32",
        crs="EPSG:4269", transform=transform,
    ) as out:  # fmt: skip
        out.write(z.astype("float32"), 1)
        out.units = ("m",)
    # a valley that leaves the DEM over its western edge
    around = z[200:270, 100:160]
    row, column = np.unravel_index(np.argmin(around), around.shape)
    course = _lowest_way(z, (row + 200, column + 100), (slice(90, 170), 0))
    x, y = west + (course[:, 1] + 0.5) * dx, north - (course[:, 0] + 0.5) * dy
    smooth = [ndimage.gaussian_filter1d(v, 2.0, mode="nearest") for v in (x, y)]
    stream = LineString(np.column_stack(smooth))
    lines, count = [], 9
    for at in np.linspace(0.2, 0.8, count):
        middle = stream.interpolate(at, normalized=True)
        before, after = (stream.interpolate(at + d, normalized=True) for d in (-0.03, 0.03))
        way = np.array([after.x - before.x, after.y - before.y])
        way /= np.hypot(*way)
        square = np.array([-way[1], way[0]]) * 12 * dx
        lines.append(LineString([(middle.x + k * square[0], middle.y + k * square[1]) for k in (1, 0, -1)]))
    geopandas.GeoDataFrame({"id": ["creek"]}, geometry=[stream], crs="EPSG:4269").to_file(
        tmp_path / "d.gpkg", layer="streams"
    )
    geopandas.GeoDataFrame({"id": [f"{i}" for i in range(count)]}, geometry=lines, crs="EPSG:4269").to_file(
        tmp_path / "d.gpkg", layer="cut_lines"
    )
    (tmp_path / "study.toml").write_text(
        """
        [study]
        units = "si"
        [terrain]
        dem = "dem.tif"
        [streams]
        path = "d.gpkg|layer=streams"
        [cut_lines]
        path = "d.gpkg|layer=cut_lines"
        [land_cover]
        default_n = 0.06
        [channel]
        banks = "none"
        [slope]
        value = 0.003
        [flows]
        events = { flood = 800.0 }
        [extent]
        [output]
        report = false
        sheets = "none"
        """
    )
    results = run(tmp_path / "study.toml")
    shape, row = extent(results, "flood")
    with capsys.disabled():
        print(f"\nreal ground: {row.area / 1e6:.2f} km², {row.boundary_points} boundary points, "
              f"{100 * row.boundary_within_tolerance:.1f} % within a foot")  # fmt: skip
    assert shape.is_valid
    assert row.area == pytest.approx(
        shapely.area(shape) * 111_200 * 111_200 * np.cos(np.radians(shape.centroid.y)), rel=0.01
    )
    assert row.boundary_points > 50
    assert 0.3 < row.boundary_within_tolerance <= 1
    for line, stage in zip(lines, results.design_stages["stage"], strict=True):
        assert np.isfinite(stage)
        assert shape.distance(line.interpolate(0.5, normalized=True)) < 3 * dx
    assert Point(stream.interpolate(0.1, normalized=True)).distance(shape) > 0


def _lowest_way(z, start, edge):
    """Path along a valley, in the tree of lowest passes, from a cell to the lowest of some on the edge."""
    number = np.arange(z.size).reshape(z.shape)
    pairs = [(number[:, :-1], number[:, 1:]), (number[:-1], number[1:])]
    pairs += [(number[:-1, :-1], number[1:, 1:]), (number[:-1, 1:], number[1:, :-1])]
    one, other = (np.concatenate([pair[k].ravel() for pair in pairs]) for k in (0, 1))
    weight = np.maximum(z.ravel()[one], z.ravel()[other]) - z.min() + 1.0
    tree = minimum_spanning_tree(coo_array((weight, (one, other)), shape=(z.size, z.size)).tocsr())
    outlet = number[edge][np.argmin(z[edge])]
    _, before = breadth_first_order(tree, outlet, directed=False)
    way = [number[start]]
    while before[way[-1]] >= 0:
        way.append(before[way[-1]])
    return np.column_stack(np.unravel_index(way, z.shape))
