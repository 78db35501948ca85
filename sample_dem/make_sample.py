"""Make the demonstration study: an invented valley, as airborne laser scanning would have seen it.

**Everything here is invented**: the ground, the streams, the roads, the flows and every name. The
coordinates lie in a real zone (EPSG:26915) so that maps and distances behave as they do in practice,
but no place, person or survey is meant.

What is made, and why it is there:

``valley.tif``
    Ground elevations in metres at 1 m cells (1500 m x 1000 m), in steps of 1/128 m. The main stream winds
    eastward on a floodplain between terraces and valley sides; a tributary joins from the north and a side
    drain from the south. Where the scanner met water the ground is the flat water surface. Between about
    480 and 780 m from the western edge the stream is perched: its banks stand higher than the hollow
    behind the right bank. One small patch has no data.
``valley.gpkg``
    ``streams`` (digitised downstream), ``cut_lines``, ``land_cover`` (touching polygons without gaps
    or overlaps), ``channel`` (between the tops of bank), ``roads`` and ``crossings``.
``flows.csv``, ``roughness.csv``, ``observed.csv``
    Design flows in ft³/s by stream; Manning's n by land class; high-water marks with their discharge.

The cut lines ``M-100`` to ``M-800`` and ``T-100``, ``T-200`` are sound; ``M-300`` and ``T-200`` are drawn
right to left and have to be turned. Three lines are wrong on purpose: ``M-050`` crosses the stream twice,
``M-350`` ends on the floodplain below the flood, ``M-550`` runs over the patch without data.

Roads: ``Orrinfell Road`` lies on a fill across the whole valley over a culvert; ``Pellwick Road`` has a
bridge whose deck was taken out of the ground, so its embankments stop at the abutments; ``Low Sedge Lane``
lies low and is flooded early. ``crossings`` has the opening widths, and for one the surveyed crest, in feet,
as the study's units ask.

Run ``python make_sample.py [FOLDER]``: the files are written there, or beside the script. The random numbers
are seeded and the dates fixed, so that each run gives the same data.
"""

from __future__ import annotations

import sys
from pathlib import Path
from typing import NamedTuple

import geopandas as gpd
import numpy as np
import pandas as pd
import pyogrio
import rasterio
import shapely
from rasterio.features import rasterize
from scipy.interpolate import PchipInterpolator
from scipy.ndimage import gaussian_filter, gaussian_filter1d, map_coordinates
from scipy.spatial import cKDTree
from shapely import LineString, Point, Polygon

SEED = 20_260_101
CRS = "EPSG:26915"
WEST, NORTH = 512_000.0, 4_641_000.0
WIDTH, HEIGHT = 1500, 1000  # cells of 1 m
STEP = (
    1.0 / 128.0
)  # m; a binary fraction, so that the deflated file is a third of the size of a decimal step's
NODATA = -9999.0
FOOT = 0.3048
SMALLEST_PATCH = 150.0  # m² of land cover
MADE_ON = "2026-01-01T00:00:00.000Z"

# Heights along the main stream (m): a constant fall of the water; the floodplain at the western edge.
WATER_START, WATER_FALL = 252.0, 0.0023
WATER_BELOW_FLOODPLAIN = 1.95
HALF_WATER = 4.5
BANKS = (6.5, 2.4)  # run of the bank (m) inside and outside a bend
TRIBUTARY_FALL, TRIBUTARY_HALF_WATER, TRIBUTARY_BANK = 0.0065, 1.5, 1.15
TRIBUTARY_BANKS = (3.4, 1.6)
PERCHED = (470.0, 790.0)  # x of the reach with levees and a hollow behind the right bank
GAP_CENTRE, GAP_SIZE = (941.0, 447.0), (17.0, 9.0)  # no data: centre and half axes (m)

FLOWS = """\
event,discharge,probability,stream
10-year,2600,0.1,Ambersole
50-year,6800,0.02,Ambersole
100-year,9800,0.01,Ambersole
10-year,320,0.1,Tansy
50-year,800,0.02,Tansy
100-year,1150,0.01,Tansy
"""

ROUGHNESS = """\
class,n,n_low,n_high,source
open water,0.03,0.025,0.033,"Chow (1959), Table 5-6, minor streams on plain: clean, straight, full stage, no rifts or deep pools"
pasture,0.035,0.03,0.05,"Chow (1959), Table 5-6, flood plains: pasture, no brush, high grass"
row crops,0.035,0.025,0.045,"Chow (1959), Table 5-6, flood plains: cultivated areas, mature row crops"
brush,0.07,0.045,0.11,"Chow (1959), Table 5-6, flood plains: medium to dense brush, in winter"
forest,0.1,0.08,0.12,"Chow (1959), Table 5-6, flood plains: heavy stand of timber, a few down trees, little undergrowth, flood stage below branches"
farmstead,0.05,0.035,0.07,"Chow (1959), Table 5-6, flood plains: scattered brush, heavy weeds; taken for yards and gardens, for which the table has no row"
road,0.016,0.016,0.016,"Chow (1959), Table 5-6, lined channels: asphalt, rough"
"""  # noqa: E501

OBSERVED = """\
section,stage,discharge,note
M-100,833.3,5200,invented high-water mark on a fence post
M-200,832.5,5200,invented high-water mark on a tree
M-300,830.3,5200,invented high-water mark on a barn
M-600,825.4,5200,invented high-water mark on a tree
M-700,823.8,5200,invented high-water mark on a bridge rail
M-800,821.3,5200,invented high-water mark on a shed
T-100,829.5,610,invented high-water mark on a tree
T-200,827.2,610,invented high-water mark on a culvert
"""

STUDY = """\
# The demonstration study of terrain2q. Everything in it is invented: ground, streams, roads, flows and names.
# All data beside this file are made by make_sample.py. Paths are relative to this file.

[study]
name = "Ambersole valley (invented, for demonstration)"
units = "us"                    # feet and ft³/s come in and go out; the terrain keeps its own unit

[terrain]
dem = "valley.tif"              # metres, as the raster's band says

[streams]
path = "valley.gpkg|layer=streams"
id_field = "stream_id"

[cut_lines]
path = "valley.gpkg|layer=cut_lines"
id_field = "line_id"            # M-050, M-350 and M-550 are wrong on purpose, to show what is found

[land_cover]
path = "valley.gpkg|layer=land_cover"
class_field = "land_class"
table = "roughness.csv"         # class,n,n_low,n_high,source
default_n = 0.05                # where the cover has a gap; this cover has none

[channel]
banks = "auto"                  # the tops of bank are found in each profile
n = 0.04                        # Chow (1959), Table 5-6, minor streams: clean, winding, some pools and shoals

[slope]
field = "slope"                 # on the cut lines: fall of the water over the reach, ft/ft

[flows]
path = "flows.csv"              # event,discharge,probability,stream; discharge in ft³/s

[rating]
stages = 60

[bench]                         # `terrain2q size` finds the widths that pass each flow within the stage
base = 1.5                      # feet above the lowest ground
n = 0.035                       # as for pasture
side_slope = 3.0                # 3 along, 1 up
stage = 8.5                     # feet above the lowest ground that the water may reach

[observed]                      # `terrain2q fit` finds the roughness that reproduces the marks
path = "observed.csv"           # section,stage,discharge; invented high-water marks

[extent]                        # flood extent and depth grids between the sections, every event
smallest = 270                  # ft²; smaller patches and holes are dropped

[crossings]                     # roads against the floods: layer crossings, crossings.csv, crossings.pdf
path = "valley.gpkg|layer=crossings"
id_field = "crossing_id"
roads = "valley.gpkg|layer=roads"
freeboard = 1.0                 # ft between stage and crest
opening_width_field = "opening_width"
crest_field = "crest"           # surveyed at C-3; found in the ground elsewhere

[output]
folder = "output"
overwrite = true
"""


def smoothstep(value):
    """Return 0 below 0, 1 above 1 and a smooth rise between, with no slope at both ends."""
    t = np.clip(value, 0.0, 1.0)
    return t * t * (3.0 - 2.0 * t)


def along(knots, where):
    """Return a smooth curve through `knots` (pairs) at `where`, level beyond the first and last."""
    x, y = np.array(knots, float).T
    return PchipInterpolator(x, y)(np.clip(where, x[0], x[-1]))


def smooth_line(points, spacing=1.0):
    """Return points `spacing` apart on a smooth curve through `points`, shape (n, 2)."""
    points = np.array(points, float)
    for _ in range(5):  # corner cutting (Chaikin 1974) keeps both ends
        a, b = points[:-1], points[1:]
        middle = np.column_stack([0.75 * a + 0.25 * b, 0.25 * a + 0.75 * b]).reshape(-1, 2)
        points = np.vstack([points[:1], middle, points[-1:]])
    distance = np.r_[0.0, np.cumsum(np.hypot(*np.diff(points, axis=0).T))]
    at = np.linspace(0.0, distance[-1], round(distance[-1] / spacing) + 1)
    return np.column_stack([np.interp(at, distance, points[:, k]) for k in (0, 1)])


class Path2D:
    """A line with its tangents, and where any point lies beside it.

    Attributes
    ----------
    points, tangents : ndarray, shape (n, 2)
        In local metres: east of the western edge, north of the southern edge.
    distance : ndarray, shape (n,)
        From the first point.
    """

    def __init__(self, points):
        self.points = np.asarray(points, float)
        step = np.gradient(self.points, axis=0)
        self.tangents = step / np.hypot(*step.T)[:, None]
        self.distance = np.r_[0.0, np.cumsum(np.hypot(*np.diff(self.points, axis=0).T))]
        self._tree = cKDTree(self.points)

    def beside(self, x, y, within):
        """Return distance along and signed distance beside (left positive); inf beyond `within`."""
        shape = x.shape
        query = np.column_stack([x.ravel(), y.ravel()])
        low, high = self.points.min(axis=0) - within, self.points.max(axis=0) + within
        near = np.flatnonzero(np.all((query >= low) & (query <= high), axis=1))
        gap, index = self._tree.query(query[near], distance_upper_bound=within)
        near, index = near[np.isfinite(gap)], index[np.isfinite(gap)]
        away, tangent = query[near] - self.points[index], self.tangents[index]
        s, side = np.zeros(x.size), np.full(x.size, np.inf)
        s[near] = self.distance[index] + np.sum(away * tangent, axis=1)
        across = tangent[:, 0] * away[:, 1] - tangent[:, 1] * away[:, 0]
        ends = (index == 0) | (index == len(self.points) - 1)  # round the ends: the straight distance
        side[near] = np.where(ends, np.copysign(gap[np.isfinite(gap)], across), across)
        return s.reshape(shape), side.reshape(shape)

    def offset(self, left):
        """Return the points moved to the left by `left` (a number or one a point)."""
        normal = np.column_stack([-self.tangents[:, 1], self.tangents[:, 0]])
        return self.points + normal * np.broadcast_to(left, len(self.points))[:, None]


# --- the plan: lines in local metres -------------------------------------------------------------------


def valley_axis(x):
    """Return the northing of the middle of the valley at easting `x`."""
    return 495.0 + 30.0 * np.sin(2.0 * np.pi * (x - 200.0) / 1700.0)


def main_stream():
    """Return the main stream as a sine-generated curve (Langbein and Leopold 1966) of varying swing."""
    s = np.arange(0.0, 2400.0, 0.5)
    swing = [(0, 50), (200, 88), (330, 80), (480, 25), (620, 55), (800, 70), (1000, 50), (1150, 62),
             (1330, 40), (1480, 22), (1650, 55), (1800, 20), (2000, 55)]  # fmt: skip
    wave = [(0, 190), (250, 215), (480, 180), (800, 200), (1100, 180), (1500, 190), (1800, 170), (2300, 190)]
    phase = 0.4 + np.cumsum(2.0 * np.pi / along(wave, s)) * 0.5
    heading = np.radians(along(swing, s)) * np.sin(phase)
    x = np.cumsum(np.cos(heading)) * 0.5 - 25.0
    y = np.cumsum(np.sin(heading)) * 0.5 - 16.0 + valley_axis(x)
    keep = x < WIDTH + 25.0
    return Path2D(np.column_stack([x, y])[keep])


class Road(NamedTuple):
    """A road's plan and long section.

    Attributes
    ----------
    points : list
        Local points from south to north, rounded off when it is built.
    half_width : float
        Half the width of the top (m).
    opening : float or None
        Half the width (m) of a bridge's opening, square to the stream; None for a fill over a culvert.
    above : float
        Least height above the floodplain (m).
    rise, rise_at, rise_length : float
        A hump (or sag, negative) on that height (m), where (m north of the valley's axis) and how long (m).
    """

    points: list
    half_width: float
    opening: float | None
    above: float
    rise: float
    rise_at: float
    rise_length: float


ROADS = {
    "Low Sedge Lane": Road(
        [(352, -20), (350, 150), (338, 330), (331, 480), (333, 600), (352, 760), (340, 1020)],
        3.2, None, 0.42, -0.12, -45.0, 22.0,
    ),
    "Pellwick Road": Road(
        [(1030, -20), (1060, 180), (1072, 340), (1078, 490), (1080, 620), (1100, 800), (1150, 1020)],
        4.5, 12.0, 3.3, 0.7, 5.0, 55.0,
    ),
    "Orrinfell Road": Road(
        [(1300, -20), (1296, 200), (1312, 360), (1316, 480), (1314, 600), (1326, 800), (1310, 1020)],
        4.5, None, 4.1, -0.35, -50.0, 30.0,
    ),
}  # fmt: skip

# Widths (m) from the valley's axis to the floodplain's edge, and of the terrace beyond, by easting.
WIDTHS = np.array([
    # easting, floodplain left, right, terrace left, right
    (0, 92, 100, 25, 65),
    (200, 104, 80, 0, 90),
    (400, 92, 92, 55, 60),
    (600, 72, 122, 85, 5),
    (750, 78, 124, 70, 15),
    (900, 104, 96, 35, 60),
    (1080, 76, 82, 60, 30),
    (1200, 86, 80, 25, 75),
    (1320, 78, 84, 0, 50),
    (1500, 95, 92, 55, 15),
], dtype=float)  # fmt: skip


def floodplain_edge(side, x):
    """Return the distance (m) from the valley's axis to the floodplain's ``left`` or ``right`` edge."""
    return along(WIDTHS[:, [0, 1 if side == "left" else 2]], x)


def terrace_width(side, x):
    """Return the width (m) of the terrace on the ``left`` or ``right``."""
    return along(WIDTHS[:, [0, 3 if side == "left" else 4]], x)


# --- the ground --------------------------------------------------------------------------------------


def correlated_noise(random, scale, shape=(HEIGHT, WIDTH)):
    """Return noise of unit standard deviation that is alike over about `scale` cells."""
    field = gaussian_filter(random.standard_normal(shape), scale, mode="reflect", truncate=3.0)
    return field / field.std()


def floodplain_height(x, main):
    """Return the floodplain's height (m): the same fall as the water, but straight down the valley."""
    begin, end = np.interp([0.0, WIDTH], main.points[:, 0], main.distance)
    start = WATER_START - WATER_FALL * begin + WATER_BELOW_FLOODPLAIN
    return start - WATER_FALL * (end - begin) / WIDTH * x


def water_height(s):
    """Return the main stream's water surface (m) at distance `s`: flatter in the pools than on riffles."""
    riffle = 140.0
    phase = s / riffle - np.floor(s / riffle)
    return WATER_START - WATER_FALL * riffle * (
        np.floor(s / riffle) + 0.55 * smoothstep((phase - 0.8) / 0.2) + 0.45 * phase
    )


def bank_runs(path, banks):
    """Return the run of the left and right bank (m) at each point: steep outside a bend, gentle inside."""
    heading = np.unwrap(np.arctan2(path.tangents[:, 1], path.tangents[:, 0]))
    turn = gaussian_filter1d(np.gradient(heading, path.distance), 20.0)
    lean = np.clip(turn / 0.03, -1.0, 1.0)  # positive bends to the left: the left bank is inside
    gentle, steep = banks
    middle, swing = (gentle + steep) / 2.0, (gentle - steep) / 2.0
    return middle + swing * lean, middle - swing * lean


def valley_ground(x, y, main, random):
    """Return the ground without channels, the floodplain's plane, and the distance beyond its edge (m)."""
    offset = y - valley_axis(x)
    warped = offset + 4.0 * correlated_noise(random, 50.0) + 4.0 * correlated_noise(random, 20.0)
    warped += 0.8 * correlated_noise(random, 6.0)
    base = floodplain_height(x, main)
    left = offset > 0.0
    edge = np.where(left, floodplain_edge("left", x), floodplain_edge("right", x))
    terrace = np.where(left, terrace_width("left", x), terrace_width("right", x))
    beyond = np.abs(warped) - edge
    side = beyond - terrace
    rise = 2.6 * smoothstep((beyond + 6.0) / 17.0)
    rise += 0.012 * np.clip(beyond, 0.0, None)
    rise += 13.5 * smoothstep((side - 5.0) / 115.0) + 0.02 * np.clip(side - 60.0, 0.0, None)
    relief = 1.6 * correlated_noise(random, 45.0) + 0.35 * correlated_noise(random, 14.0)
    rise += relief * smoothstep((side - 10.0) / 90.0)
    swales = 0.10 * correlated_noise(random, 16.0) + 0.05 * correlated_noise(random, 7.0)
    return base + rise + swales, base, beyond


def add_levees_and_hollow(ground, x, y, main, side, s, beyond):
    """Raise the ground beside the channel, and lower it behind the right bank of the perched reach."""
    station = np.interp(PERCHED, main.points[:, 0], main.distance)
    near = np.abs(side)
    perched = smoothstep((s - station[0]) / 80.0) * smoothstep((station[1] - s) / 80.0)
    height = 0.12 + 0.33 * perched + np.where(side < 0.0, 0.12 * perched, 0.0)
    fade = np.exp(-np.clip(near - 9.0, 0.0, None) / 16.0) * smoothstep((75.0 - near) / 30.0)
    ground = ground + np.where(np.isfinite(side), height * fade, 0.0)
    in_reach = smoothstep((x - PERCHED[0] - 20.0) / 70.0) * smoothstep((PERCHED[1] + 5.0 - x) / 60.0)
    behind = (side < 0.0) | (~np.isfinite(side) & (y < valley_axis(x)))
    lateral = smoothstep((np.minimum(near, 200.0) - 13.0) / 24.0) * smoothstep((-6.0 - beyond) / 26.0)
    return ground - np.where(behind, 0.75 * in_reach * lateral, 0.0)


def side_valley(ground, base, path, x, y, floor, half_floor, rise):
    """Cut the valley of a side stream whose floor is `floor` (m, one a point of `path`) into the ground."""
    s, side = path.beside(x, y, 260.0)
    beyond = np.clip(np.abs(np.where(np.isfinite(side), side, 1e6)) - half_floor, 0.0, None)
    surface = np.interp(s, path.distance, floor) + rise * beyond**2 / (beyond + 12.0)
    soft = np.clip(0.4 * (ground - base), 0.05, 3.0)  # round the shoulder, keep the main floodplain as it is
    blend = np.clip(0.5 + 0.5 * (surface - ground) / soft, 0.0, 1.0)
    merged = surface * (1.0 - blend) + ground * blend - soft * blend * (1.0 - blend)
    return np.where(np.isfinite(side), merged, ground)


def cut_channel(ground, s, side, path, half_water, runs, water):
    """Cut a channel: the water flat from bank to bank, and banks up to the ground beside it."""
    near = np.abs(np.where(np.isfinite(side), side, 1e6))
    left, right = (np.interp(s, path.distance, run) for run in runs)
    up = np.clip((near - half_water) / np.where(side > 0.0, left, right), 0.0, 1.0)
    shape = 0.55 * up + 0.45 * smoothstep(up)
    wet = near <= half_water
    surface = np.where(wet, water, water + np.clip(ground - water, 0.0, None) * shape)
    return np.where(near < half_water + 12.0, np.minimum(ground, surface), ground), wet


def cut_ditch(ground, path, x, y, bottom, half_bottom, side_slope):
    """Cut a ditch with a bottom (m, one a point of `path`) and even sides (rise over run)."""
    s, side = path.beside(x, y, 40.0)
    near = np.clip(np.abs(np.where(np.isfinite(side), side, 1e6)) - half_bottom, 0.0, None)
    return np.minimum(ground, np.interp(s, path.distance, bottom) + side_slope * near)


def drain_bottom(ground, drain, outlet):
    """Return the bottom of the side drain (m): down the gully, through the hollow and the bank."""
    natural = gaussian_filter1d(along_path(ground, drain), 12.0, mode="nearest")
    depth = along([(0, 0.2), (80, 2.0), (170, 1.3), (230, 0.6), (500, 0.5)], drain.distance)
    bottom = np.minimum.accumulate(natural - depth)
    # over the last 90 m an even grade, so that the hollow can drain
    last = drain.distance[-1] - drain.distance
    through_bank = outlet + 0.05 + (bottom[last >= 90.0][-1] - outlet - 0.05) * last / 90.0
    return np.minimum.accumulate(np.where(last < 90.0, through_bank, bottom))


def along_path(ground, path):
    """Return the ground at the points of a path (m), bilinear."""
    rows, columns = HEIGHT - 0.5 - path.points[:, 1], path.points[:, 0] - 0.5
    return map_coordinates(ground, [rows, columns], order=1, mode="nearest")


def road_profile(road, path, ground, main):
    """Return the road's height (m) at each point of its line: the ground's, or its fill's in the valley."""
    plane = floodplain_height(path.points[:, 0], main)
    northing = path.points[:, 1] - valley_axis(path.points[:, 0])
    natural = gaussian_filter1d(along_path(ground, path), 22.0, mode="nearest")
    above = road.above + road.rise * np.exp(-(((northing - road.rise_at) / road.rise_length) ** 2))
    return gaussian_filter1d(np.maximum(natural, plane + above), 6.0, mode="nearest")


def build_road(ground, road, path, x, y, height, main_side):
    """Build a road: fill at 2:1 where it is above the ground, cut at 1.5:1 where it is below."""
    s, side = path.beside(x, y, 40.0)
    near = np.clip(np.abs(np.where(np.isfinite(side), side, 1e6)) - road.half_width, 0.0, None)
    top = np.interp(s, path.distance, height)
    fill = top - near / 2.0 - 0.02 * np.minimum(near, road.half_width)
    cut = top + near / 1.5
    if road.opening is not None:  # the abutments' faces rise steeply from the edge of the opening
        stream = np.abs(np.where(np.isfinite(main_side), main_side, 1e6))
        fill = np.where(
            stream <= road.opening, -np.inf, np.minimum(fill, ground + 2.0 * (stream - road.opening))
        )
        cut = np.where(stream <= road.opening + 6.0, np.inf, cut)
    built = np.minimum(np.maximum(ground, fill), np.maximum(cut, fill))
    return np.where(np.isfinite(side), built, ground)


def make_ground(plan, grain):
    """Return the elevations (m), shape (HEIGHT, WIDTH), row 0 in the north, NaN where there are no data.

    `grain` is the standard deviation of the scanned surface (m) in each cell.
    """
    random = np.random.default_rng(SEED)
    x, y = np.meshgrid(np.arange(WIDTH) + 0.5, HEIGHT - np.arange(HEIGHT) - 0.5)
    main, side_stream = plan["main"], plan["tributary"]
    ground, base, beyond = valley_ground(x, y, main, random)
    s, side = main.beside(x, y, 100.0)
    ground = add_levees_and_hollow(ground, x, y, main, side, s, beyond)

    joins = np.interp(side_stream.points[-1, 0], main.points[:, 0], main.distance)
    upstream = side_stream.distance[-1] - side_stream.distance
    low_water = water_height(joins) + 0.02 + TRIBUTARY_FALL * np.clip(upstream - 6.0, 0.0, None)
    upper = upstream > 14.0  # its valley ends where the main stream's bank begins
    floor = low_water[upper] + TRIBUTARY_BANK + 0.3 * np.exp(-upstream[upper] / 60.0)
    calm = Path2D(gaussian_filter1d(side_stream.points[upper], 110.0, axis=0, mode="nearest"))
    wander = 3.0 * correlated_noise(random, 20.0)
    ground = side_valley(
        ground, base, calm, x, y, floor, 24.0 + wander, 0.2 + 0.02 * correlated_noise(random, 30.0)
    )
    uncut = ground

    drain = plan["drain"]
    outlet = water_height(np.interp(drain.points[-1, 0], main.points[:, 0], main.distance))
    ground = cut_ditch(ground, drain, x, y, drain_bottom(uncut, drain, outlet), 0.8, 0.45)

    s_side, side_of_side = side_stream.beside(x, y, 40.0)
    water = np.interp(s_side, side_stream.distance, low_water)
    runs = bank_runs(side_stream, TRIBUTARY_BANKS)
    ground, wet_side = cut_channel(
        ground, s_side, side_of_side, side_stream, TRIBUTARY_HALF_WATER, runs, water
    )
    ground, wet = cut_channel(ground, s, side, main, HALF_WATER, bank_runs(main, BANKS), water_height(s))

    ground = ground + np.where(wet | wet_side, 0.0, correlated_noise(random, 1.1) * grain)
    for name, road in ROADS.items():
        path = plan["roads"][name]
        ground = build_road(ground, road, path, x, y, road_profile(road, path, uncut, main), side)
    gap = ((x - GAP_CENTRE[0]) / GAP_SIZE[0]) ** 2 + ((y - GAP_CENTRE[1]) / GAP_SIZE[1]) ** 2
    return np.where(gap + 0.25 * correlated_noise(random, 3.0) <= 1.0, np.nan, np.round(ground / STEP) * STEP)


# --- what is drawn on it ---------------------------------------------------------------------------------


def to_map(points):
    """Return local points in map coordinates, rounded to the centimetre."""
    return np.round(np.asarray(points, float) + np.array([WEST, NORTH - HEIGHT]), 2)


def strip(left, right):
    """Return the polygon between two edges that run the same way (local points)."""
    return Polygon(to_map(np.vstack([left, right[::-1]])))


def thinned(path, every, start=None, end=None):
    """Return every `every`-th point of a path between two eastings, with the last."""
    keep = slice(None)
    if start is not None:
        keep = (path.points[:, 0] >= start) & (path.points[:, 0] <= end)
    points = path.points[keep]
    return np.vstack([points[:-1:every], points[-1:]])


def make_plan():
    """Return the streams, the drain and the roads as paths in local metres."""
    main = main_stream()
    digitised = thinned(main, 12, 1.0, WIDTH - 1.0)
    join = digitised[np.argmin(np.abs(digitised[:, 0] - 866.0))]
    outlet = digitised[np.argmin(np.abs(digitised[:, 0] - 812.0))]
    side_points = [(838, 1025), (850, 975), (826, 925), (868, 880), (836, 828), (876, 782), (846, 735),
                   (880, 690), (858, 640), (872, 600), (join[0] - 10, join[1] + 30), tuple(join)]  # fmt: skip
    drain_points = [(592, 150), (600, 200), (585, 250), (612, 300), (606, 350), (650, 400), (700, 418),
                    (755, 426), (798, 442), (outlet[0] + 2.0, outlet[1] - 30.0), tuple(outlet)]  # fmt: skip
    return {
        "main": main,
        "digitised": digitised,
        "tributary": Path2D(smooth_line(side_points, 0.5)),
        "drain": Path2D(smooth_line(drain_points)),
        "roads": {name: Path2D(smooth_line(road.points)) for name, road in ROADS.items()},
    }


def make_streams(plan):
    """Return the stream lines, digitised downstream."""
    side = plan["tributary"]
    points = thinned(Path2D(side.points[side.points[:, 1] < HEIGHT - 1.0]), 10)
    return pd.DataFrame({"stream_id": ["Ambersole", "Tansy"], "name": ["Ambersole Creek", "Tansy Fork"]}), [
        LineString(to_map(plan["digitised"])),
        LineString(to_map(points)),
    ]


def cut_line(path, at, left, right):
    """Return a line square to a path at distance `at`, bending towards `left` and `right` (local)."""
    index = np.argmin(np.abs(path.distance - at))
    centre, (east, north) = path.points[index], path.tangents[index]
    square = np.array([-north, east])
    return np.array([left, centre + 24.0 * square, centre - 24.0 * square, right])


def make_cut_lines(plan):
    """Return the drawn cut lines: ten sound ones and three that are wrong on purpose."""
    main, side = plan["main"], plan["tributary"]
    rows = []
    for name, x, lean, reach in [
        ("M-100", 206.0, 6.0, 62.0),
        ("M-200", 291.0, -8.0, 62.0),
        ("M-300", 448.0, 0.0, 60.0),
        ("M-350", 516.0, 0.0, None),  # ends on the floodplain
        ("M-400", 582.0, 4.0, 60.0),
        ("M-500", 731.0, -10.0, 62.0),
        ("M-550", 941.0, 12.0, 55.0),  # over the patch without data
        ("M-600", 1031.0, 0.0, 60.0),
        ("M-700", 1204.0, 0.0, 62.0),
        ("M-800", 1437.0, 0.0, 62.0),
    ]:
        at = np.interp(x, main.points[:, 0], main.distance)
        ends = []
        for word, sign in (("left", 1), ("right", -1)):
            away = floodplain_edge(word, x) + (-26.0 if reach is None else terrace_width(word, x) + reach)
            ends.append((x + sign * lean, valley_axis(x) + sign * away))
        fall = (water_height(at - 150.0) - water_height(at + 150.0)) / 300.0
        rows.append((name, cut_line(main, at, *ends), "Ambersole", fall))
    rows.append(
        ("M-050", [(18, 372), (38, 470), (62, 492), (128, 493), (150, 462), (172, 335)], "Ambersole", 0.0023)
    )
    for name, at, left, right in [
        ("T-100", 165.0, (960, 862), (745, 872)),
        ("T-200", 272.0, (962, 752), (768, 772)),
    ]:
        rows.append((name, cut_line(side, at, left, right), "Tansy", TRIBUTARY_FALL))
    rows.sort(key=lambda row: row[0])
    lines = [LineString(to_map(points)) for _, points, _, _ in rows]
    lines = [
        line.reverse() if row[0] in ("M-300", "T-200") else line
        for row, line in zip(rows, lines, strict=True)
    ]
    table = pd.DataFrame(
        {
            "line_id": [row[0] for row in rows],
            "stream": [row[2] for row in rows],
            "slope": [round(float(row[3]), 4) for row in rows],
            "drawn_by": ["I. Quillfeather" if "M" in row[0] else "O. Tarnbrook" for row in rows],
        }
    )
    return table, lines


def make_channel(plan):
    """Return the channels between the tops of bank as polygons."""
    polygons = []
    for path, half, banks in [
        (plan["main"], HALF_WATER, BANKS),
        (plan["tributary"], TRIBUTARY_HALF_WATER, TRIBUTARY_BANKS),
    ]:
        left, right = bank_runs(path, banks)
        keep = slice(None, None, 8)
        if path is plan["tributary"]:  # up to the main stream's bank
            keep = np.flatnonzero(path.distance < path.distance[-1] - 12.0)[::8]
        polygons.append(strip(path.offset(half + left)[keep], path.offset(-half - right)[keep]))
    frame = shapely.box(*frame_bounds())
    clipped = [shapely.set_precision(polygon.intersection(frame), 0.01) for polygon in polygons]
    return pd.DataFrame({"stream_id": ["Ambersole", "Tansy"]}), clipped


def frame_bounds():
    """Return the bounds of the ground in map coordinates."""
    return WEST, NORTH - HEIGHT, WEST + WIDTH, NORTH


def make_roads(plan):
    """Return the road lines."""
    lines = []
    for path in plan["roads"].values():
        inside = (path.points[:, 1] > 1.0) & (path.points[:, 1] < HEIGHT - 1.0)
        lines.append(LineString(to_map(thinned(Path2D(path.points[inside]), 10))))
    return pd.DataFrame(
        {"name": list(ROADS), "bridge": [road.opening is not None for road in ROADS.values()]}
    ), lines


def make_crossings(plan, ground):
    """Return where the roads meet the main stream, with opening widths and one surveyed crest in feet."""
    stream = make_streams(plan)[1][0]
    places = [line.intersection(stream) for line in make_roads(plan)[1]]
    path = plan["roads"]["Orrinfell Road"]
    valley = np.abs(path.points[:, 1] - valley_axis(path.points[:, 0])) < 120.0
    crest = along_path(np.nan_to_num(ground), path)[valley].min() / FOOT
    table = pd.DataFrame(
        {
            "crossing_id": ["C-1", "C-2", "C-3"],
            "road": list(ROADS),
            "stream": "Ambersole",
            "structure": ["pipes", "bridge", "box culvert"],
            "opening_width": [14.0, 79.0, 16.0],
            "crest": [np.nan, np.nan, round(float(crest) + 0.04, 2)],
        }
    )
    return table, [Point(np.round(shapely.get_coordinates(place)[0], 2)) for place in places]


# --- land cover ----------------------------------------------------------------------------------------

# Classes of the fields between fences, from west to east: (eastings of the fences, classes).
FENCES = {
    "left floodplain": (
        [240, 520, 690, 960, 1200, 1390],
        ["pasture", "row crops", "pasture", "brush", "row crops", "pasture", "row crops"],
    ),
    "right floodplain": (
        [180, 430, 620, 860, 1150, 1400],
        ["row crops", "pasture", "row crops", "pasture", "row crops", "pasture", "row crops"],
    ),
    "left terrace": (
        [280, 560, 760, 1010, 1240],
        ["pasture", "row crops", "row crops", "forest", "pasture", "row crops"],
    ),
    "right terrace": (
        [260, 470, 720, 1000, 1210],
        ["row crops", "pasture", "forest", "row crops", "row crops", "pasture"],
    ),
    "left side": ([210, 470, 700, 1150], ["forest", "pasture", "forest", "forest", "brush"]),
    "right side": (
        [310, 530, 800, 1090, 1330],
        ["pasture", "forest", "forest", "brush", "forest", "pasture"],
    ),
    "left upland": ([390, 720, 1060, 1300], ["row crops", "pasture", "row crops", "forest", "row crops"]),
    "right upland": ([250, 640, 900, 1200], ["forest", "row crops", "pasture", "row crops", "forest"]),
}
RIPARIAN = (
    [170, 400, 560, 790, 960, 1470],
    ["brush", "forest", "pasture", "brush", "forest", "pasture", "brush"],
)
FARMSTEADS = [
    [(412, 618), (470, 622), (474, 668), (408, 664)],
    [(1118, 372), (1165, 366), (1172, 404), (1124, 408)],
    [(1120, 640), (1182, 632), (1190, 682), (1126, 690)],
    [(690, 905), (742, 900), (748, 950), (696, 958)],
]


def make_land_cover(plan):
    """Return the land cover as a tiling of the frame from one network of lines: no gap, no overlap."""
    main, side = plan["main"], plan["tributary"]
    frame = shapely.box(*frame_bounds())
    x = np.arange(-20.0, WIDTH + 21.0, 10.0)

    def valley_line(sign, away):
        return np.column_stack([x, valley_axis(x) + sign * away])

    limits = {}  # (side, zone): the outer edge, as distance from the valley's axis
    for word, sign in (("left", 1), ("right", -1)):
        edge = floodplain_edge(word, x) + 3.0 + 3.0 * np.sin(x / 37.0 + sign)
        outer = edge + np.maximum(terrace_width(word, x), 4.0) + 14.0 + 4.0 * np.sin(x / 51.0)
        limits[word] = (sign, [edge, outer, outer + 85.0 + 12.0 * np.sin(x / 83.0 + 2.0 * sign)])
    lines = [frame.exterior]
    for sign, edges in limits.values():
        lines += [LineString(to_map(valley_line(sign, edge))) for edge in edges]
    for place, (fences, _) in FENCES.items():
        sign = 1 if place.startswith("left") else -1
        for k, fence in enumerate(fences):
            lean = 14.0 * np.sin(3.0 * k + sign)
            far = valley_axis(fence) + sign * 620.0
            lines.append(LineString(to_map([(fence - lean, valley_axis(fence)), (fence + lean, far)])))

    calm = Path2D(gaussian_filter1d(main.points, 80.0, axis=0, mode="nearest"))
    calm_side = Path2D(gaussian_filter1d(side.points, 30.0, axis=0, mode="nearest"))
    water = [
        strip(p.offset(h)[::6], p.offset(-h)[::6])
        for p, h in ((main, HALF_WATER), (side, TRIBUTARY_HALF_WATER))
    ]
    wander = 5.0 * np.sin(calm.distance / 61.0)
    bank_strip = strip(calm.offset(30.0 + wander)[::12], calm.offset(-29.0 + wander)[::12])
    side_strip = strip(calm_side.offset(24.0)[::12], calm_side.offset(-26.0)[::12])
    calm_valley = Path2D(gaussian_filter1d(side.points, 110.0, axis=0, mode="nearest"))
    side_slopes = strip(calm_valley.offset(62.0)[::20], calm_valley.offset(-70.0)[::20])
    roads = {
        name: strip(path.offset(road.half_width + 3.0)[::10], path.offset(-road.half_width - 3.0)[::10])
        for (name, road), path in zip(ROADS.items(), plan["roads"].values(), strict=True)
    }
    yards = [Polygon(to_map(points)) for points in FARMSTEADS]
    polygons = [*water, bank_strip, side_strip, side_slopes, *roads.values(), *yards]
    for k, easting in enumerate(RIPARIAN[0]):
        lines.append(LineString(to_map([(easting - 20 + 9 * (k % 3), 350.0), (easting + 10, 650.0)])))
    network = shapely.union_all([*lines, *(polygon.boundary for polygon in polygons)], grid_size=0.01)
    faces = [
        face
        for face in shapely.get_parts(shapely.polygonize([network]))
        if frame.contains(face.representative_point())
    ]

    def class_of(face):
        point = face.representative_point()
        east, north = point.x - WEST, point.y - (NORTH - HEIGHT)
        fills = [roads[name].contains(point) for name, road in ROADS.items() if road.opening is None]
        if any(fills):
            return "road"
        if any(polygon.contains(point) for polygon in water):
            return "open water"
        if roads["Pellwick Road"].contains(point):
            return "road"
        if any(yard.contains(point) for yard in yards):
            return "farmstead"
        away = north - valley_axis(east)
        sign, edges = limits["left" if away > 0.0 else "right"]
        zone = int(sum(sign * away > np.interp(east, x, edge) for edge in edges))
        if bank_strip.contains(point):
            return RIPARIAN[1][int(np.searchsorted(RIPARIAN[0], east))]
        if side_strip.contains(point):
            return "pasture"
        if zone > 0 and side_slopes.contains(point):
            return "forest"
        place = f"{'left' if sign > 0 else 'right'} {('floodplain', 'terrace', 'side', 'upland')[zone]}"
        fences, classes = FENCES[place]
        lean = [14.0 * np.sin(3.0 * k + sign) * (2.0 * abs(away) / 620.0 - 1.0) for k in range(len(fences))]
        return classes[int(np.searchsorted(np.array(fences) + lean, east))]

    patches = dissolve([(class_of(face), face) for face in faces])
    slivers = [(name, patch) for name, patch in patches if patch.area < SMALLEST_PATCH]
    kept = [item for item in patches if item[1].area >= SMALLEST_PATCH]
    for _, sliver in slivers:  # give it to the neighbour with the longest common edge
        shared = [patch.boundary.intersection(sliver.boundary).length for _, patch in kept]
        kept.append((kept[int(np.argmax(shared))][0], sliver))
    patches = dissolve(kept)
    return pd.DataFrame({"land_class": [name for name, _ in patches]}), [patch for _, patch in patches]


def dissolve(items):
    """Join touching polygons of one class; `items` and the result are pairs of class and polygon."""
    by_class: dict[str, list] = {}
    for name, polygon in items:
        by_class.setdefault(name, []).append(polygon)
    joined = [
        (name, patch)
        for name, members in by_class.items()
        for patch in shapely.get_parts(shapely.normalize(shapely.coverage_union_all(members)))
    ]
    return sorted(joined, key=lambda item: (item[0], *np.round(item[1].bounds, 2), round(item[1].area, 2)))


def surface_grain(table, polygons):
    """Return the roughness of the scanned surface (m, one standard deviation) of each cell, by land class."""
    grain = {"forest": 0.045, "brush": 0.035, "row crops": 0.025, "road": 0.01}
    shapes = [
        (polygon, grain.get(name, 0.018)) for name, polygon in zip(table["land_class"], polygons, strict=True)
    ]
    transform = rasterio.transform.from_origin(WEST, NORTH, 1.0, 1.0)
    return rasterize(shapes, out_shape=(HEIGHT, WIDTH), transform=transform, fill=0.018, dtype="float64")


# --- writing --------------------------------------------------------------------------------------------


def write_ground(path, ground):
    """Write the ground as a tiled GeoTIFF whose band says its unit."""
    with rasterio.open(
        path,
        "w",
        driver="GTiff",
        width=WIDTH,
        height=HEIGHT,
        count=1,
        dtype="float32",
        crs=CRS,
        nodata=NODATA,
        transform=rasterio.transform.from_origin(WEST, NORTH, 1.0, 1.0),
        tiled=True,
        blockxsize=256,
        blockysize=256,
        compress="deflate",
        predictor=3,
        zlevel=9,
    ) as target:
        target.write(np.where(np.isnan(ground), NODATA, ground).astype("float32"), 1)
        target.units = ("metre",)
        target.set_band_description(1, "Ground elevation (invented, for demonstration)")


def make_sample(folder):
    """Write all files of the demonstration study into `folder`, replacing those of an earlier run."""
    folder = Path(folder)
    folder.mkdir(parents=True, exist_ok=True)
    plan = make_plan()
    cover = make_land_cover(plan)
    ground = make_ground(plan, surface_grain(*cover))
    write_ground(folder / "valley.tif", ground)
    layers = {
        "streams": make_streams(plan),
        "cut_lines": make_cut_lines(plan),
        "land_cover": cover,
        "channel": make_channel(plan),
        "roads": make_roads(plan),
        "crossings": make_crossings(plan, ground),
    }
    package = folder / "valley.gpkg"
    package.unlink(missing_ok=True)
    pyogrio.set_gdal_config_options({"OGR_CURRENT_DATE": MADE_ON})
    try:
        for name, (table, geometry) in layers.items():
            frame = gpd.GeoDataFrame(table, geometry=list(geometry), crs=CRS)
            description = {"DESCRIPTION": "Invented, for demonstration"}
            pyogrio.write_dataframe(
                frame,
                package,
                layer=name,
                driver="GPKG",
                dataset_options={"VERSION": "1.3"},
                layer_options=description,
            )
    finally:
        pyogrio.set_gdal_config_options({"OGR_CURRENT_DATE": None})
    texts = {"flows.csv": FLOWS, "roughness.csv": ROUGHNESS, "observed.csv": OBSERVED, "study.toml": STUDY}
    for name, text in texts.items():
        (folder / name).write_text(text, encoding="utf-8", newline="\n")


if __name__ == "__main__":
    make_sample(sys.argv[1] if len(sys.argv) > 1 else Path(__file__).parent)
