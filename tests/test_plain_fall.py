"""Streams that are told to fall from a few stretches: never otherwise than by their whole low line."""

import matplotlib.cbook
import numpy as np
import pytest
import rasterio
import shapely
from _stream_ground import CRS, EAST, NORTH, Valley
from rasterio.transform import from_bounds, from_origin
from shapely import LineString

from terrain2q.ground import low_line, tiles
from terrain2q.ground.low_line import (
    AGREEING,
    CLEAR_FALL,
    LEAST_FALL,
    free_of_humps,
    snap_distance,
    turn_streams,
)
from terrain2q.ground.plain_fall import FIRST, LEAST_LENGTH, ROWS, SHARE, STRETCHES, plain_ways, verdicts
from terrain2q.ground.stream_slope import robust_slope
from terrain2q.ground.terrain import Terrain

SIZE = 2600.0
"""Metres across the valleys, so that streams in them are long enough to be told."""


def valley(tmp_path, azimuth=60.0, cell=4.0, **more):
    made = Valley(azimuth, size=SIZE, cell=cell, **{"slope": 0.01, "noise": 0.1, **more})
    return made, Terrain(made.write(tmp_path / "v.tif"))


def by_the_whole(streams, terrain, monkeypatch):
    with monkeypatch.context() as patch:
        patch.setattr(low_line, "plain_ways", lambda lines, *_: np.zeros(len(lines), dtype=int))
        return turn_streams(streams, terrain)


def same(one, other):
    (streams, findings), (others, more) = one, other
    assert findings == more
    assert all(a.equals_exact(b) for a, b in zip(streams.geometry, others.geometry, strict=True))


# --- lows ---------------------------------------------------------------------------------------------


def lows(levels, span=0.2):
    return np.array(levels)[None, :, None] + span * np.linspace(0.0, 1.0, ROWS)


def test_lows_that_fall_clear_of_what_they_span_tell_the_way():
    assert verdicts(lows([9.0, 7.0, 5.0, 3.0])).tolist() == [1]
    assert verdicts(lows([3.0, 5.0, 7.0, 9.0])).tolist() == [-1]
    assert verdicts(lows([9.0, 7.0, 5.0, 4.5])).tolist() == [0], "less than a metre"
    assert verdicts(lows([9.0, 7.0, 5.0, 3.0], span=1.5)).tolist() == [0], "less than twice the span"
    assert verdicts(lows([9.0, 5.0, 5.0, 1.0])).tolist() == [0], "level water"
    assert verdicts(lows([9.0, 7.0, 8.0, 3.0])).tolist() == [0]
    assert verdicts(np.empty((0, STRETCHES, ROWS))).tolist() == []


def test_rows_on_a_fill_do_not_count_but_more_of_them_do_and_so_do_unknown_ones():
    filled = lows([9.0, 7.0, 5.0, 3.0])
    filled[0, 1, 3:5] += 6.0
    assert verdicts(filled).tolist() == [1]
    filled[0, 1, 5] += 6.0
    assert verdicts(filled).tolist() == [0]
    unknown = lows([9.0, 7.0, 5.0, 3.0])
    unknown[0, 2, 4] = np.nan
    assert verdicts(unknown).tolist() == [0]


def walk(random, count, roughness):
    """A profile of random height whose waves grow as a power of their length."""
    frequency = np.fft.rfftfreq(2 * count)[1:]
    waves = frequency ** -(roughness + 0.5) * np.exp(2j * np.pi * random.random(frequency.size))
    heights = np.fft.irfft(np.concatenate([[0.0], waves]), 2 * count)[:count]
    return heights / np.ptp(heights)


def test_walks_of_random_height_are_told_only_what_their_whole_profile_tells():
    random = np.random.default_rng(4)
    count, spacing = 1000, 4.0
    share = np.linspace(FIRST, 1.0 - FIRST, STRETCHES)[:, None] + SHARE * np.linspace(-0.5, 0.5, ROWS)
    told = 0
    for number in range(4000):
        heights = (10.0, 40.0, 150.0)[number % 3] * walk(random, count, (0.3, 0.5, 0.7, 0.9)[number % 4])
        heights += random.normal(0.0, 0.1, count)
        way = verdicts(heights[np.round(share * (count - 1)).astype(int)][None])[0]
        if way:
            told += 1
            bed, usable, _ = free_of_humps(heights, spacing)
            found = robust_slope(spacing * np.flatnonzero(usable), bed[usable], confidence=0.98)
            assert np.sign(found.slope) == way
            fall = abs(found.slope) * found.length
            assert (fall >= LEAST_FALL and not found.low <= 0.0 <= found.high) or (
                fall >= CLEAR_FALL and found.agreeing >= AGREEING
            )
    assert told >= 20


# --- on terrain ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("azimuth", [0.0, 60.0, 205.0])
def test_a_stream_is_told_either_way_and_turned_with_the_same_words(azimuth, tmp_path, monkeypatch):
    made, terrain = valley(tmp_path, azimuth)
    line = made.line((-1200.0, 8.0), (-300.0, -6.0), (200.0, 9.0), (1200.0,))
    assert plain_ways(np.array([line, line.reverse()]), terrain, 20.0).tolist() == [1, -1]
    down = made.streams(line)
    asked = []
    real = low_line._falls
    monkeypatch.setattr(low_line, "_falls", lambda wholes, *more: asked.extend(wholes) or real(wholes, *more))
    assert turn_streams(down, terrain) == (down, [])
    assert not asked, "it need not be looked at further"
    up = down.set_geometry(down.geometry.reverse())
    turned, findings = turn_streams(up, terrain)
    assert [f.code for f in findings] == ["stream-turned"]
    assert len(asked) == 1
    same((turned, findings), by_the_whole(up, terrain, monkeypatch))


def test_parts_drawn_either_way_are_looked_at_in_whole(tmp_path, monkeypatch):
    made, terrain = valley(tmp_path)
    right = [made.line((-1200.0,), (-100.0,)), made.line((-100.0,), (1200.0,))]
    assert turn_streams(made.streams(*right), terrain)[1] == []
    against = made.streams(right[0], right[1].reverse())
    found = turn_streams(against, terrain)
    assert ["1 of 2 parts" in f.message for f in found[1]] == [True]
    same(found, by_the_whole(against, terrain, monkeypatch))


@pytest.mark.parametrize(
    "kind",
    [
        "flat",
        "reservoir",
        "tidal end",
        "over a hill",
        "swaths apart",
        "waterfall",
        "many fills",
        "gap",
        "rises",
    ],
)
def test_hard_ground_is_never_judged_otherwise_than_by_the_whole_low_line(kind, tmp_path, monkeypatch):
    beds = {
        "flat": lambda s: 0.0 * s,
        "reservoir": lambda s: np.where(s < -700, -0.02 * s, np.where(s < 500, 14.0, -0.02 * s + 4.0)),
        "tidal end": lambda s: np.maximum(-0.01 * s, 0.0),
        "over a hill": lambda s: 15.0 * np.exp(-((s / 500.0) ** 2)) - 0.003 * s,
        "swaths apart": lambda s: np.where(np.floor(s / 400.0) % 2 == 0, 0.3, 0.0),
        "waterfall": lambda s: -0.001 * s - np.where(s > 0.0, 20.0, 0.0),
        "many fills": lambda s: -0.01 * s + np.where(np.abs((s % 200.0) - 100.0) < 12.0, 4.0, 0.0),
        "gap": lambda s: np.where(np.abs(s - 400.0) < 300.0, np.nan, -0.01 * s),
        "rises": lambda s: 0.01 * np.abs(s),
    }
    made, terrain = valley(tmp_path, bed=beds[kind])
    down = made.streams(made.line((-1200.0,), (0.0, 5.0), (1200.0,)))
    for streams in (down, down.set_geometry(down.geometry.reverse())):
        same(turn_streams(streams, terrain), by_the_whole(streams, terrain, monkeypatch))
    if kind in ("flat", "reservoir", "tidal end", "over a hill", "swaths apart", "gap", "rises"):
        assert not plain_ways(down.geometry.to_numpy(), terrain, 20.0).any(), "not plain at all"


def test_lines_that_are_short_or_lie_off_the_terrain_are_not_told(tmp_path):
    made, terrain = valley(tmp_path)
    short = made.line((-0.4 * LEAST_LENGTH,), (0.4 * LEAST_LENGTH,))
    off = LineString([(EAST + 9000.0, NORTH), (EAST + 13000.0, NORTH)])
    half = made.line((-1200.0,), (2000.0,))
    assert not plain_ways(np.array([short, off, half]), terrain, 20.0).any()
    assert plain_ways(np.empty(0, dtype=object), terrain, 20.0).size == 0


def test_lines_across_real_terrain_are_told_only_what_their_low_lines_tell(tmp_path):
    """Lines that follow no stream, over the DEM that matplotlib ships: real, in degrees, cells of 90 m."""
    with matplotlib.cbook.get_sample_data("jacksboro_fault_dem.npz") as dem:
        ground = dem["elevation"].astype("float64")
        west, east, south, north = (float(dem[k]) for k in ("xmin", "xmax", "ymin", "ymax"))
    rows, columns = ground.shape
    with rasterio.open(
        tmp_path / "j.tif", "w", driver="GTiff", width=columns, height=rows, count=1, dtype="float64",
        crs="EPSG:4326", transform=from_bounds(west, south, east, north, columns, rows),
    ) as out:  # fmt: skip
        out.write(ground, 1)
        out.units = ("m",)
    terrain = Terrain(tmp_path / "j.tif")
    random = np.random.default_rng(3)
    ends = random.random((15000, 2, 2)) * [east - west, north - south] + [west, south]
    lines = shapely.linestrings(ends)
    snap = snap_distance(terrain, None)
    ways = plain_ways(lines, terrain, snap)
    told = np.flatnonzero(ways)
    assert told.size >= 5
    for number, (fall, sure, _) in zip(told, low_line._falls(lines[told], terrain, snap), strict=True):
        assert sure
        assert np.sign(fall) == ways[number]


def test_few_blocks_are_read_and_each_once(tmp_path, monkeypatch):
    """Four stretches of a stream of 8 km lie in one block each, of the sixteen that it runs through."""
    count = 8192
    path = tmp_path / "long.tif"
    with rasterio.open(
        path, "w", driver="GTiff", width=count, height=512, count=1, dtype="float32", crs=CRS, tiled=True,
        blockxsize=512, blockysize=512, transform=from_origin(EAST, NORTH, 1.0, 1.0),
    ) as out:  # fmt: skip
        along = np.arange(count, dtype=np.float32)
        out.write(np.broadcast_to(100.0 - 0.002 * along, (512, count)).astype(np.float32), 1)
        out.units = ("m",)
    read = []
    real = tiles._Readers.read
    monkeypatch.setattr(
        tiles._Readers, "read", lambda *a: read.append((a[2] // 512, a[3] // 512)) or real(*a)
    )
    terrain = Terrain(path)
    line = LineString([(EAST + 20.0, NORTH - 256.0), (EAST + count - 20.0, NORTH - 250.0)])
    assert plain_ways(np.array([line]), terrain, 15.0).tolist() == [1]
    assert len(read) == len(set(read)) == STRETCHES
