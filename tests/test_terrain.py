"""The terrain: sampling, true distances, units, tiles and what bad rasters get."""

from __future__ import annotations

import pickle
import subprocess
import sys

import geopandas
import numpy as np
import pyproj
import pytest
import rasterio
import shapely
from rasterio.transform import Affine
from scipy.ndimage import map_coordinates

from terrain2q import units
from terrain2q.errors import InputError
from terrain2q.ground import terrain as terrain_module
from terrain2q.ground import tiles as tiles_module
from terrain2q.ground.distances import GroundDistances, horizontal_crs
from terrain2q.ground.terrain import Terrain
from terrain2q.ground.tiles import metres_in

UTM = "EPSG:26915"
NORTH_UP = Affine(2.0, 0.0, 480_000.0, 0.0, -2.0, 4_980_000.0)


def chain(*transforms):
    """Return one transform for several, the last applied first."""
    return Affine(
        *np.linalg.multi_dot([np.reshape(t, (3, 3)) for t in (Affine.identity(), *transforms)]).ravel()[:6]
    )


def write(
    path, cells, *, crs=UTM, transform=NORTH_UP, unit="metre", mask=None, scale=None, offset=None, **profile
):
    cells = np.asarray(cells)
    with rasterio.open(
        path,
        "w",
        driver="GTiff",
        height=cells.shape[0],
        width=cells.shape[1],
        count=1,
        dtype=cells.dtype,
        crs=crs,
        transform=transform,
        **profile,
    ) as dataset:
        dataset.write(cells, 1)
        if unit:
            dataset.units = (unit,)
        if mask is not None:
            dataset.write_mask(mask)
        if scale is not None:
            dataset.scales, dataset.offsets = (scale,), (offset,)
    return path


def rough_ground(rows, columns, seed=1, dtype=np.float64):
    random = np.random.default_rng(seed)
    return (300.0 + random.normal(0.0, 3.0, (rows, columns))).astype(dtype)


def to_map(transform, column, row):
    a, b, c, d, e, f = transform[:6]
    return a * column + b * row + c, d * column + e * row + f


def independent_bilinear(cells, column, row):
    """Bilinear by scipy; gaps from the four cells written out, point by point."""
    filled = np.where(np.isnan(cells), 0.0, cells)
    values = map_coordinates(filled, [row - 0.5, column - 0.5], order=1, mode="nearest")
    last_row, last_column = cells.shape[0] - 1, cells.shape[1] - 1
    for k in range(values.size):
        if not (0.0 <= column[k] <= last_column + 1 and 0.0 <= row[k] <= last_row + 1):
            values[k] = np.nan
            continue
        u, v = column[k] - 0.5, row[k] - 0.5
        for i in (int(np.floor(u)), int(np.floor(u)) + 1):
            for j in (int(np.floor(v)), int(np.floor(v)) + 1):
                weight = (1.0 - abs(u - i)) * (1.0 - abs(v - j))
                cell = cells[min(max(j, 0), last_row), min(max(i, 0), last_column)]
                if weight > 0.0 and np.isnan(cell):
                    values[k] = np.nan
    return values


def random_places(count, columns, rows, seed=2, beyond=0.0):
    random = np.random.default_rng(seed)
    return random.uniform(-beyond, columns + beyond, count), random.uniform(-beyond, rows + beyond, count)


# --- elevations ----------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "layout",
    [
        {"tiled": True, "blockxsize": 64, "blockysize": 32},
        {"blockysize": 1},
        {"blockysize": 7, "compress": "deflate"},
    ],
)
def test_bilinear_agrees_with_scipy_on_random_points_edges_and_gaps(tmp_path, layout):
    cells = rough_ground(310, 270)
    random = np.random.default_rng(5)
    cells[random.uniform(size=cells.shape) < 0.02] = np.nan
    cells[:3, 100:140] = np.nan
    path = write(tmp_path / "a.tif", np.where(np.isnan(cells), -9999.0, cells), nodata=-9999.0, **layout)
    column, row = random_places(10_000, 270, 310, beyond=1.5)
    # Many places in the half cell along the edges, and some exactly on them.
    column[:500] = random.uniform(0.0, 0.5, 500)
    row[500:1000] = random.uniform(309.5, 310.0, 500)
    column[1000:1010], row[1010:1020] = 0.0, 310.0
    got = Terrain(path).elevations(*to_map(NORTH_UP, column, row))
    expected = independent_bilinear(cells, column, row)
    assert np.array_equal(np.isnan(got), np.isnan(expected))
    assert 500 < np.isnan(expected).sum() < 2500
    known = ~np.isnan(expected)
    assert np.abs(got[known] - expected[known]).max() < 1e-6


def test_nearest_takes_the_cell_that_holds_the_point(tmp_path):
    cells = rough_ground(90, 70)
    cells[10:20, 5:9] = np.nan
    path = write(tmp_path / "a.tif", cells, tiled=True, blockxsize=16, blockysize=16)
    column, row = random_places(5_000, 70, 90)
    got = Terrain(path, sampling="nearest").elevations(*to_map(NORTH_UP, column, row))
    assert np.array_equal(got, cells[row.astype(int), column.astype(int)], equal_nan=True)


def test_a_cell_centre_beside_a_gap_has_its_own_value(tmp_path):
    cells = rough_ground(9, 9)
    cells[4, 5] = np.nan
    terrain = Terrain(write(tmp_path / "a.tif", cells))
    # The neighbour weighs nothing; round-off of the coordinates must not make a gap of it.
    x, y = to_map(NORTH_UP, np.array([4.5, 4.5 + 2e-9, 4.5 + 1e-3]), np.array([4.5, 4.5, 4.5]))
    got = terrain.elevations(x, y)
    assert got[:2] == pytest.approx([cells[4, 4]] * 2, abs=1e-6)
    assert np.isnan(got[2])


def test_rotated_and_sheared_rasters_are_placed_by_their_transform(tmp_path):
    transform = chain(
        Affine.translation(480_000.0, 4_980_000.0), Affine.rotation(27.0), Affine(2.0, 0.4, 0, 0, -3.0, 0)
    )
    cells = rough_ground(60, 80)
    terrain = Terrain(write(tmp_path / "a.tif", cells, transform=transform))
    column, row = random_places(3_000, 80, 60, beyond=2.0)
    got = terrain.elevations(*to_map(transform, column, row))
    expected = independent_bilinear(cells, column, row)
    assert np.array_equal(np.isnan(got), np.isnan(expected))
    assert np.nanmax(np.abs(got - expected)) < 1e-6
    lonely = terrain.sample([np.array(to_map(transform, np.array([5.0, 70.0]), np.array([9.0, 50.0]))).T])[0]
    assert not np.isnan(lonely.elevations).any()
    # The smaller side, 2 m along a row, on a zone whose scale is 0.9996 near its middle.
    assert np.diff(lonely.stations).max() <= terrain.cell_size[0] * (1 + 1e-6)
    assert terrain.cell_size == pytest.approx((2.0 / 0.9996, np.hypot(0.4, 3.0) / 0.9996), rel=1e-4)


def test_scale_and_offset_are_applied_before_the_unit(tmp_path):
    raw = np.random.default_rng(3).integers(0, 60_000, (40, 50)).astype(np.uint16)
    raw[8, 9] = 65_535
    path = write(tmp_path / "a.tif", raw, nodata=65_535, scale=0.01, offset=-50.0, unit="ft")
    terrain = Terrain(path)
    column, row = np.meshgrid(np.arange(50) + 0.5, np.arange(40) + 0.5)
    got = terrain.elevations(*to_map(NORTH_UP, column.ravel(), row.ravel()))
    expected = (raw * 0.01 - 50.0) * 0.3048
    expected[8, 9] = np.nan
    np.testing.assert_allclose(got, expected.ravel(), atol=1e-7)
    np.testing.assert_allclose(terrain.read_window(terrain.bounds)[0], expected, atol=1e-9)


def test_every_kind_of_gap_is_a_gap(tmp_path):
    cells = np.full((3, 6), 7.0, dtype=np.float32)
    cells[1, :5] = [np.nan, np.inf, -np.inf, -9999.0, -3.4028235e38]
    path = write(tmp_path / "a.tif", cells, nodata=-9999.0)
    expected = np.full((3, 6), 7.0)
    expected[1, :5] = np.nan
    assert np.array_equal(Terrain(path).read_window(Terrain(path).bounds)[0], expected, equal_nan=True)


@pytest.mark.parametrize("inner", ["YES", "NO"])
def test_a_mask_kept_beside_the_values_is_honoured(tmp_path, inner):
    cells = rough_ground(20, 30)
    mask = np.full(cells.shape, 255, dtype=np.uint8)
    mask[5:8, 10:14] = 0
    with rasterio.Env(GDAL_TIFF_INTERNAL_MASK=inner):
        path = write(tmp_path / "a.tif", cells, mask=mask)
    terrain = Terrain(path)
    column, row = random_places(2_000, 30, 20)
    expected = independent_bilinear(np.where(mask == 0, np.nan, cells), column, row)
    assert np.isnan(expected).any()
    np.testing.assert_allclose(terrain.elevations(*to_map(NORTH_UP, column, row)), expected, atol=1e-6)


# --- tiles ---------------------------------------------------------------------------------------------


def write_tiles(folder, cells, pieces, **options):
    """Write pieces (first row, first column, rows, columns) of one grid as files of their own."""
    paths = []
    for number, (row, column, rows, columns) in enumerate(pieces):
        transform = chain(NORTH_UP, Affine.translation(column, row))
        piece = cells[row : row + rows, column : column + columns]
        paths.append(write(folder / f"tile{number}.tif", piece, transform=transform, **options))
    return paths


PIECES = [
    [(0, 0, 100, 70), (0, 70, 100, 80), (100, 0, 60, 70), (100, 70, 60, 80)],
    [(100, 70, 60, 80), (0, 66, 104, 84), (0, 0, 103, 70), (96, 0, 64, 73)],
]


@pytest.mark.parametrize("pieces", PIECES, ids=["abutting", "overlapping, in another order"])
def test_tiles_give_exactly_what_one_file_gives(tmp_path, pieces):
    cells = rough_ground(160, 150, dtype=np.float32)
    cells[np.random.default_rng(8).uniform(size=cells.shape) < 0.01] = np.nan
    whole = Terrain(write(tmp_path / "whole.tif", cells, tiled=True, blockxsize=32, blockysize=32))
    tiles = Terrain(write_tiles(tmp_path, cells, pieces, tiled=True, blockxsize=16, blockysize=48))
    column, row = random_places(20_000, 150, 160, beyond=1.0)
    seam = np.random.default_rng(4).uniform(-0.7, 0.7, 4_000)
    column[:4_000] = 70.0 + seam
    row[2_000:6_000] = 100.0 + seam
    x, y = to_map(NORTH_UP, column, row)
    one, many = whole.elevations(x, y), tiles.elevations(x, y)
    assert np.count_nonzero(~np.isnan(one)) > 15_000
    assert np.array_equal(one, many, equal_nan=True)
    assert tiles.bounds == whole.bounds
    bounds = (480_050.0, 4_979_750.0, 480_222.0, 4_979_900.0)
    one, where = whole.read_window(bounds)
    many, there = tiles.read_window(bounds)
    assert np.array_equal(one, many, equal_nan=True)
    assert where == there
    line = [(480_001.0, 4_979_999.0), (480_299.0, 4_979_681.0)]
    assert np.array_equal(
        whole.sample([line])[0].elevations, tiles.sample([line])[0].elevations, equal_nan=True
    )


def test_the_first_listed_tile_with_data_counts(tmp_path):
    first, second, third = np.full((10, 10), 1.0), np.full((10, 10), 2.0), np.full((10, 10), 3.0)
    first[:, 6:] = np.nan
    second[3:5, :] = np.nan
    shifted = chain(NORTH_UP, Affine.translation(4, 0))
    paths = [
        write(tmp_path / "1.tif", first),
        write(tmp_path / "2.tif", second, transform=shifted),
        write(tmp_path / "3.tif", third, transform=shifted),
    ]
    expected = np.concatenate([np.full((10, 6), 1.0), np.full((10, 8), 2.0)], axis=1)
    expected[3:5, 6:] = 3.0
    terrain = Terrain(paths)
    assert np.array_equal(terrain.read_window(terrain.bounds)[0], expected)
    column, row = random_places(4_000, 14, 10)
    got = terrain.elevations(*to_map(NORTH_UP, column, row))
    np.testing.assert_allclose(got, independent_bilinear(expected, column, row), atol=1e-9)
    backwards = Terrain(paths[::-1])
    assert np.array_equal(backwards.read_window(terrain.bounds)[0][:, 4:], np.full((10, 10), 3.0))


def test_the_edge_cells_count_on_along_a_corner_that_no_tile_fills(tmp_path):
    # An L of three tiles; the fourth quarter is not there.
    cells = rough_ground(20, 20)
    terrain = Terrain(write_tiles(tmp_path, cells, [(0, 0, 10, 10), (0, 10, 10, 10), (10, 0, 10, 10)]))
    places = np.array([(15.2, 9.8), (9.8, 15.2), (15.2, 10.2), (10.3, 10.3), (9.0, 9.0), (15.2, 10.0)])
    got = terrain.elevations(*to_map(NORTH_UP, places[:, 0], places[:, 1]))
    assert got[0] == pytest.approx(cells[9, 14] * 0.3 + cells[9, 15] * 0.7, abs=1e-6)
    assert got[1] == pytest.approx(cells[14, 9] * 0.3 + cells[15, 9] * 0.7, abs=1e-6)
    assert np.isnan(got[2:4]).all()
    assert got[4] == pytest.approx(cells[8:10, 8:10].mean(), abs=1e-6)
    assert got[5] == pytest.approx(got[0], abs=1e-6)  # on the very edge
    window, _ = terrain.read_window(terrain.bounds)
    assert np.isnan(window[10:, 10:]).all()
    assert np.array_equal(window[:10], cells[:10])


def test_a_virtual_raster_is_read_like_its_sources(tmp_path):
    cells = rough_ground(60, 90, dtype=np.float32)
    write_tiles(tmp_path, cells, [(0, 0, 60, 40), (0, 40, 60, 50)])
    source = (
        "<SimpleSource><SourceFilename relativeToVRT='1'>tile{n}.tif</SourceFilename>"
        "<SourceBand>1</SourceBand><SrcRect xOff='0' yOff='0' xSize='{w}' ySize='60'/>"
        "<DstRect xOff='{x}' yOff='0' xSize='{w}' ySize='60'/></SimpleSource>"
    )
    a, b, c, d, e, f = NORTH_UP[:6]
    (tmp_path / "all.vrt").write_text(
        f"<VRTDataset rasterXSize='90' rasterYSize='60'><SRS>{UTM}</SRS>"
        f"<GeoTransform>{c}, {a}, {b}, {f}, {d}, {e}</GeoTransform>"
        "<VRTRasterBand dataType='Float32' band='1'><UnitType>ft</UnitType>"
        + source.format(n=0, w=40, x=0)
        + source.format(n=1, w=50, x=40)
        + "</VRTRasterBand></VRTDataset>"
    )
    terrain = Terrain(tmp_path / "all.vrt")
    column, row = random_places(3_000, 90, 60)
    got = terrain.elevations(*to_map(NORTH_UP, column, row))
    np.testing.assert_allclose(got, independent_bilinear(cells, column, row) * 0.3048, atol=1e-6)


def test_every_block_touched_is_read_once_and_no_other(tmp_path, monkeypatch):
    cells = rough_ground(640, 640, dtype=np.float32)
    path = write(tmp_path / "a.tif", cells, tiled=True, blockxsize=128, blockysize=128)
    read, plain = [], tiles_module._Readers.read

    def noting(self, tile, row, column, rows, columns):
        # A window within one block.
        assert row // 128 == (row + rows - 1) // 128
        assert column // 128 == (column + columns - 1) // 128
        read.append((row // 128, column // 128))
        return plain(self, tile, row, column, rows, columns)

    monkeypatch.setattr(tiles_module._Readers, "read", noting)
    random = np.random.default_rng(9)
    column, row = random.uniform(0, 640, 20_000), random.uniform(0, 380, 20_000)
    got = Terrain(path).elevations(*to_map(NORTH_UP, column, row))
    assert sorted(read) == [(j, i) for j in range(3) for i in range(5)]
    np.testing.assert_allclose(got, independent_bilinear(cells, column, row), atol=1e-6)


def test_strips_of_single_rows_are_read_many_at_a_time(tmp_path, monkeypatch):
    terrain = Terrain(write(tmp_path / "a.tif", rough_ground(600, 4_096, dtype=np.float32), blockysize=1))
    shapes, plain = [], tiles_module._Readers.read

    def noting(self, tile, row, column, rows, columns):
        shapes.append((rows, columns))
        return plain(self, tile, row, column, rows, columns)

    monkeypatch.setattr(tiles_module._Readers, "read", noting)
    terrain.elevations(*to_map(NORTH_UP, *random_places(5_000, 4_096, 600)))
    # 2^18 cells are 64 rows here.
    assert len(shapes) == 10
    assert max(rows for rows, _ in shapes) == 64


def test_overlapping_tiles_with_gaps_are_still_read_once_a_block(tmp_path, monkeypatch):
    cells = rough_ground(160, 150)
    cells[np.random.default_rng(8).uniform(size=cells.shape) < 0.05] = np.nan
    terrain = Terrain(write_tiles(tmp_path, cells, PIECES[1], tiled=True, blockxsize=128, blockysize=128))
    read, plain = [], tiles_module._Readers.read

    def noting(self, tile, row, column, *shape):
        read.append((tile.path, row // 128, column // 128))
        return plain(self, tile, row, column, *shape)

    monkeypatch.setattr(tiles_module._Readers, "read", noting)
    terrain.elevations(*to_map(NORTH_UP, *random_places(20_000, 150, 160)))
    assert {path for path, _, _ in read} == set(terrain.paths)
    assert len(read) == len(set(read))


# --- units ---------------------------------------------------------------------------------------------

US = units.US_SURVEY_FOOT


@pytest.mark.parametrize(
    ("text", "metres"),
    [(name, 1.0) for name in ("m", "metre", "Metres", "METER", "meters", "[m]", "m.", "m a.s.l.", "meter(s)")]
    + [(name, 0.3048) for name in ("ft", "foot", "Feet", "international foot", "foot (intl)", "ft NAVD88")]
    + [
        (name, US)
        for name in ("US survey foot", "us-ft", "US_survey_foot", "ftUS", "ft (US survey)", "U.S. Feet",
                     "foot_us", "Survey foot", "USft", "sft", "US Survey Feet")
    ]
    + [("cm", 0.01), ("dm", 0.1), ("kilometre", 1000.0)]
    + [(name, None) for name in ("", "degree", "unknown", "Clarke's foot", "Indian foot", "DN", "m or ft")],
)  # fmt: skip
def test_spellings_of_units(text, metres):
    assert metres_in(text) == metres


def test_the_unit_comes_from_the_vertical_axis(tmp_path):
    cells = np.full((4, 4), 100.0)
    path = write(tmp_path / "a.tif", cells, crs="EPSG:26915+6360", unit=None)
    terrain = Terrain(path)
    assert terrain.metres_per_unit == pytest.approx(1200 / 3937, rel=1e-12)
    assert "vertical axis" in terrain.unit_source
    assert terrain.crs == pyproj.CRS(UTM)
    assert terrain.read_window(terrain.bounds)[0] == pytest.approx(np.full((4, 4), 120_000 / 3937))


def test_the_unit_comes_from_the_band(tmp_path):
    terrain = Terrain(write(tmp_path / "a.tif", np.full((4, 4), 100.0), unit="us-ft"))
    assert terrain.metres_per_unit == 1200 / 3937
    assert terrain.unit_source == "the band's unit (us-ft)"
    assert terrain.findings == []


@pytest.mark.parametrize(("name", "metres"), [("m", 1.0), ("ft", 0.3048), ("us-ft", 1200 / 3937)])
def test_the_unit_comes_from_the_study(tmp_path, name, metres):
    terrain = Terrain(write(tmp_path / "a.tif", np.full((4, 4), 100.0), unit=None), elevation_unit=name)
    assert terrain.metres_per_unit == metres
    assert "study" in terrain.unit_source
    assert terrain.findings == []


def test_the_study_wins_over_the_raster_and_a_finding_says_so(tmp_path):
    path = write(tmp_path / "a.tif", np.full((4, 4), 100.0), unit="metre")
    terrain = Terrain(path, elevation_unit="ft")
    assert terrain.metres_per_unit == 0.3048
    assert [finding.code for finding in terrain.findings] == ["elevation-unit-contradicted"]
    assert "'ft'" in terrain.findings[0].message
    assert terrain.findings[0].layer == "terrain"
    assert Terrain(path, elevation_unit="m").findings == []


@pytest.mark.parametrize("crs", [UTM, "EPSG:2277", "EPSG:4326"])
def test_the_unit_is_never_guessed_from_the_coordinates(tmp_path, crs):
    path = write(tmp_path / "a.tif", np.ones((4, 4)), crs=crs, unit=None, transform=Affine(1, 0, 5, 0, -1, 9))
    assert error_code(path) == "elevation-unit-unknown"


def test_a_unit_that_is_not_understood_is_named(tmp_path):
    path = write(tmp_path / "a.tif", np.ones((4, 4)), unit="cubits")
    with pytest.raises(InputError, match="cubits") as caught:
        Terrain(path)
    assert caught.value.code == "elevation-unit-unknown"


def test_two_units_in_one_raster_settle_nothing(tmp_path):
    path = write(tmp_path / "a.tif", np.ones((4, 4)), crs="EPSG:26915+5703", unit="ft")
    assert error_code(path) == "elevation-unit-unknown"
    assert Terrain(path, elevation_unit="m").findings[0].code == "elevation-unit-contradicted"


# --- true distances ------------------------------------------------------------------------------------

FOUR = ["EPSG:4269", "EPSG:26914", "EPSG:2277", "EPSG:3857"]
"""Degrees, UTM metres, US survey feet (Texas Central, NAD83), web Mercator."""


def dense_stations(crs, x, y, fraction):
    """Geod.inv over thousands of pieces of one straight map segment, up to each fraction."""
    fine = np.union1d(np.linspace(0.0, 1.0, 4_001), fraction)
    to_degrees = pyproj.Transformer.from_crs(crs, crs.geodetic_crs, always_xy=True).transform
    longitude, latitude = to_degrees(x[0] + fine * (x[1] - x[0]), y[0] + fine * (y[1] - y[0]))
    steps = crs.get_geod().inv(longitude[:-1], latitude[:-1], longitude[1:], latitude[1:])[2]
    return np.concatenate([[0.0], np.cumsum(steps)])[np.searchsorted(fine, fraction)]


@pytest.mark.parametrize(
    "crs", ["EPSG:4326", "EPSG:26915", "EPSG:2277", "EPSG:3857", "EPSG:5070", "EPSG:3413"]
)
@pytest.mark.parametrize("degrees", [0.0, 35.0, 90.0, 230.0])
@pytest.mark.parametrize("length", [900.0, 25_000.0])
def test_stations_agree_with_dense_geodesics(crs, degrees, length):
    crs = pyproj.CRS(crs)
    from_degrees = pyproj.Transformer.from_crs(crs.geodetic_crs, crs, always_xy=True).transform
    x0, y0 = from_degrees(-97.1, 60.2)
    reach = length / 111_000.0 if crs.is_geographic else length
    angle = np.radians(degrees)
    x, y = np.array([x0, x0 + reach * np.cos(angle)]), np.array([y0, y0 + reach * np.sin(angle)])
    fraction = np.sort(np.random.default_rng(6).uniform(0.0, 1.0, 200))
    got = GroundDistances(crs).measure(x, y, [0])
    assert got.stations(np.zeros(200, dtype=int), fraction) == pytest.approx(
        dense_stations(crs, x, y, fraction), rel=1e-8, abs=1e-6
    )
    end = dense_stations(crs, x, y, np.array([1.0]))[0]
    assert got.vertex_stations[-1] == pytest.approx(end, rel=1e-8)


def analytic_ground(longitude, latitude):
    """Return a smooth invented valley, metres, from degrees."""
    east, north = (longitude + 98.0) * 95_000.0, (latitude - 31.0) * 111_000.0
    return 200.0 + 6.0 * np.sin(east / 140.0) + 4.0 * np.cos(north / 170.0) + 0.01 * east


def test_one_terrain_in_four_systems_gives_one_profile(tmp_path):
    profiles = []
    for number, name in enumerate(FOUR):
        crs = pyproj.CRS(name)
        geographic = crs.geodetic_crs
        to_map_crs = pyproj.Transformer.from_crs(geographic, crs, always_xy=True).transform
        to_degrees = pyproj.Transformer.from_crs(crs, geographic, always_xy=True).transform
        # About 2 m cells.
        cell = {0: 2e-5, 1: 2.0, 2: 6.5, 3: 2.3}[number]
        x0, y0 = to_map_crs(-98.0, 31.0)
        size = 700
        transform = Affine(cell, 0.0, x0 - cell * size / 2, 0.0, -cell, y0 + cell * size / 2)
        column, row = np.meshgrid(np.arange(size) + 0.5, np.arange(size) + 0.5)
        longitude, latitude = to_degrees(*to_map(transform, column.ravel(), row.ravel()))
        cells = analytic_ground(np.asarray(longitude), np.asarray(latitude)).reshape(size, size)
        path = write(tmp_path / f"{number}.tif", cells, crs=name, transform=transform)
        terrain = Terrain(path)
        vertices = np.array([(-98.003, 30.9985), (-98.0, 31.0004), (-97.9972, 31.0015)])
        line = np.array(to_map_crs(vertices[:, 0], vertices[:, 1])).T
        profile = terrain.sample([line], spacing=1.0)[0]
        assert not np.isnan(profile.elevations).any()
        assert np.diff(profile.stations).max() <= 1.0 + 1e-7
        assert terrain.cell_size == pytest.approx((2.0, 2.0), rel=0.12)
        profiles.append(profile)
        geod = crs.get_geod()
        ground = geod.line_lengths(vertices[:, 0], vertices[:, 1])
        # A segment of 300 m is bent against the geodesic by less than 1e-9 of its length here.
        assert np.diff(profile.stations[profile.is_vertex]) == pytest.approx(ground[:2], rel=2e-9)
    # WGS84 and GRS80 differ by 1e-10 in flattening: the same length to far below a millimetre.
    for profile in profiles[1:]:
        assert profile.stations[-1] == pytest.approx(profiles[0].stations[-1], rel=1e-8)
        same = np.interp(profiles[0].stations, profile.stations, profile.elevations)
        # Bilinear in 2 m cells of this ground: curvature 6/140² per m, times (2 m)²/8, is 0.2 mm.
        assert np.abs(same - profiles[0].elevations).max() < 1e-3


def test_a_map_metre_of_web_mercator_is_not_a_ground_metre(tmp_path):
    transform = Affine(2.0, 0.0, 0.0, 0.0, -2.0, 8_399_837.89)  # about 60° north
    terrain = Terrain(write(tmp_path / "a.tif", rough_ground(100, 100), crs="EPSG:3857", transform=transform))
    profile = terrain.sample([[(10.0, 8_399_737.89), (110.0, 8_399_737.89)]])[0]
    # Along a parallel, by hand: N cos φ dλ on WGS84.
    e2 = 0.0066943799901413165
    radius = 6_378_137.0 / np.sqrt(1.0 - e2 * np.sin(np.radians(60.0)) ** 2) * np.cos(np.radians(60.0))
    assert profile.stations[-1] == pytest.approx(radius * 100.0 / 6_378_137.0, rel=1e-8)
    # The cell's smaller side is the one along the meridian, M/N as long: 1.00083 m, so 50.09 cells.
    assert len(profile) == 52


def test_vertices_are_kept_and_segments_divided_evenly(tmp_path):
    terrain = Terrain(write(tmp_path / "a.tif", rough_ground(200, 200)))
    x0, y0 = 480_100.0, 4_979_800.0
    line = np.add([(0, 0), (0, 0), (30, 0), (30, 0), (30, 41), (33, 41.5)], [x0, y0])
    profile = terrain.sample([line], spacing=7.0)[0]
    assert np.array_equal(np.stack([profile.x, profile.y], axis=1)[profile.is_vertex], line[[0, 2, 4, 5]])
    assert np.flatnonzero(profile.is_vertex).tolist() == [0, 5, 11, 12]
    assert (np.diff(profile.stations) > 0.0).all()
    # Near the zone's middle a map metre is 1/0.9996 ground metres.
    assert np.diff(profile.stations)[:5] == pytest.approx(np.full(5, 6.0 / 0.9996), rel=1e-5)
    assert np.diff(profile.stations).max() <= 7.0
    assert profile.map_distances[-1] == pytest.approx(71.0 + np.hypot(3.0, 0.5))
    assert profile.station_at(30.0) == pytest.approx(profile.stations[5], rel=1e-12)
    assert profile.place_at(profile.stations[11]) == pytest.approx((x0 + 30.0, y0 + 41.0))
    assert len(terrain.sample([line])[0]) == 15 + 21 + 2 + 1  # the default, cells of 2 m


def test_a_line_drawn_backwards_gives_the_same_points(tmp_path):
    terrain = Terrain(write(tmp_path / "a.tif", rough_ground(200, 200)))
    line = np.array([(480_020.0, 4_979_990.0), (480_200.3, 4_979_800.7), (480_301.0, 4_979_650.0)])
    there, back = terrain.sample([line, line[::-1]])
    np.testing.assert_allclose(back.stations[-1] - back.stations[::-1], there.stations, atol=1e-7)
    np.testing.assert_allclose(back.elevations[::-1], there.elevations, atol=1e-6)


def test_a_line_running_off_the_terrain_has_gaps_there(tmp_path):
    cells = np.full((50, 50), 12.0)
    cells[:, 20:22] = np.nan
    terrain = Terrain(write(tmp_path / "a.tif", cells))
    profile = terrain.sample([[(479_980.0, 4_979_951.0), (480_150.0, 4_979_951.0)]], spacing=0.5)[0]
    known = ~np.isnan(profile.elevations)
    # Cells of 2 m; a gap reaches to the next cell centres, the edge to the raster's own.
    expected = ((profile.x >= 480_000) & (profile.x <= 480_039)) | (
        (profile.x >= 480_045) & (profile.x <= 480_100)
    )
    assert np.array_equal(known, expected)
    assert (profile.elevations[known] == 12.0).all()
    assert np.isnan(terrain.sample([[(0.0, 0.0), (1.0, 5.0)]])[0].elevations).all()


def test_one_line_does_not_depend_on_the_others(tmp_path):
    path = write(tmp_path / "a.tif", rough_ground(300, 300), tiled=True, blockxsize=64, blockysize=64)
    terrain = Terrain(path)
    random = np.random.default_rng(7)
    lines = random.uniform(0, 600, (50, 4, 2)) * [1, -1] + [480_000.0, 4_980_000.0]
    together = terrain.sample(lines)
    for k in (0, 17, 49):
        alone = terrain.sample([lines[k]])[0]
        for field in ("stations", "elevations", "x", "y", "is_vertex"):
            assert np.array_equal(getattr(alone, field), getattr(together[k], field)), field


def test_many_points_are_taken_in_batches(tmp_path, monkeypatch):
    terrain = Terrain(write(tmp_path / "a.tif", rough_ground(300, 300)))
    random = np.random.default_rng(7)
    lines = list(random.uniform(0, 600, (40, 2, 2)) * [1, -1] + [480_000.0, 4_980_000.0])
    lines[3] = lines[3][:1]
    whole = terrain.sample(lines)
    monkeypatch.setattr(terrain_module, "POINTS_AT_ONCE", 1_000)
    calls, plain = [], Terrain.elevations
    monkeypatch.setattr(Terrain, "elevations", lambda self, x, y: calls.append(x.size) or plain(self, x, y))
    parts = terrain.sample(lines)
    assert len(calls) > 3
    assert max(calls) < 1_500
    for one, other in zip(whole, parts, strict=True):
        assert np.array_equal(one.elevations, other.elevations)
        assert np.array_equal(one.stations, other.stations)


# --- lines ---------------------------------------------------------------------------------------------


def test_lines_come_in_many_forms(tmp_path):
    terrain = Terrain(write(tmp_path / "a.tif", rough_ground(50, 50)))
    points = [(480_010.0, 4_979_990.0), (480_080.0, 4_979_930.0)]
    line = shapely.LineString([(*p, 5.0) for p in points])
    expected = terrain.sample([np.array(points)])[0].elevations
    multi = shapely.MultiLineString([line])
    forms = [
        line,
        [line],
        [points],
        [multi],
        np.array([points]),
        geopandas.GeoSeries([line], crs=UTM, index=[7]),
    ]
    forms.append(geopandas.GeoDataFrame(geometry=[line], crs=UTM))
    for form in forms:
        (profile,) = terrain.sample(form)
        assert np.array_equal(profile.elevations, expected)
    assert terrain.sample([]) == []
    assert terrain.sample(geopandas.GeoSeries([], crs=UTM)) == []


def test_lines_without_length_have_no_points_and_harm_no_other(tmp_path):
    terrain = Terrain(write(tmp_path / "a.tif", rough_ground(50, 50)))
    good = np.array([(480_010.0, 4_979_990.0), (480_080.0, 4_979_930.0)])
    bad = [None, shapely.LineString(), shapely.LineString([good[0], good[0]]), shapely.Point(), None]
    profiles = terrain.sample([shapely.LineString(good), *bad, shapely.LineString(good)])
    assert [len(profile) for profile in profiles[1:-1]] == [0] * len(bad)
    assert len(profiles[0]) == len(profiles[-1]) > 30
    profiles = terrain.sample([good * np.nan, good, np.array([good[0], (np.inf, 0.0)]), np.zeros((0, 2))])
    assert [len(profile) > 0 for profile in profiles] == [False, True, False, False]
    assert [len(profile) for profile in terrain.sample(bad)] == [0] * len(bad)


@pytest.mark.parametrize(
    "line",
    [shapely.Point(1, 2), shapely.box(0, 0, 1, 1), np.zeros((3, 5)),
     shapely.MultiLineString([[(0, 0), (1, 1)], [(2, 2), (3, 3)]])],
)  # fmt: skip
def test_what_is_no_single_line_is_refused(tmp_path, line):
    terrain = Terrain(write(tmp_path / "a.tif", rough_ground(5, 5)))
    with pytest.raises(InputError) as caught:
        terrain.sample([line])
    assert caught.value.code == "geometry-kind"


def test_lines_in_another_crs_are_brought_over(tmp_path):
    terrain = Terrain(write(tmp_path / "a.tif", rough_ground(200, 200)))
    line = np.array([(480_020.0, 4_979_990.0), (480_200.0, 4_979_800.0), (480_301.0, 4_979_650.0)])
    there = pyproj.Transformer.from_crs(UTM, "EPSG:4269", always_xy=True).transform(*line.T)
    degrees = shapely.LineString(np.array(there).T)
    expected = terrain.sample([line])[0]
    for profile in (
        terrain.sample([degrees], crs="EPSG:4269")[0],
        terrain.sample(geopandas.GeoSeries([degrees], crs="EPSG:4269"))[0],
    ):
        np.testing.assert_allclose(profile.elevations, expected.elevations, atol=1e-5)
        np.testing.assert_allclose(profile.stations, expected.stations, atol=1e-6)
        assert np.array_equal(profile.is_vertex, expected.is_vertex)


def test_a_long_line_in_another_crs_stays_where_it_was_drawn(tmp_path):
    transform = Affine(30.0, 0.0, 400_000.0, 0.0, -30.0, 5_020_000.0)
    terrain = Terrain(
        write(tmp_path / "a.tif", rough_ground(2_000, 4_000, dtype=np.float32), transform=transform)
    )
    parallel = np.array([(-93.9, 45.0), (-93.0, 45.0), (-92.6, 45.0)])
    profile = terrain.sample([parallel], crs="EPSG:4269")[0]
    back = pyproj.Transformer.from_crs(UTM, "EPSG:4269", always_xy=True)
    longitude, latitude = back.transform(profile.x, profile.y)
    # Straight in UTM, the first segment would lie off the parallel by about tan φ/R (71 km)²/8, 100 m.
    assert np.abs(latitude - 45.0).max() * 111_132.0 < 3.0
    assert longitude[profile.is_vertex] == pytest.approx(parallel[:, 0])
    parallel_length = GroundDistances("EPSG:4269").along(*parallel.T)[-1]
    assert profile.stations[-1] == pytest.approx(parallel_length, rel=1e-6)
    assert np.diff(profile.stations).max() <= 30.02


def test_lines_beyond_the_projection_have_no_points(tmp_path):
    terrain = Terrain(write(tmp_path / "a.tif", rough_ground(5, 5)))
    far = [(1e9, 1e9), (1.1e9, 1e9)]
    near = [(480_001.0, 4_979_999.0), (480_008.0, 4_979_992.0)]
    assert [len(profile) > 0 for profile in terrain.sample([far, near])] == [False, True]


def test_read_window_gives_every_cell_touched(tmp_path):
    cells = rough_ground(50, 60)
    terrain = Terrain(write(tmp_path / "a.tif", cells, unit="ft"))
    window, transform = terrain.read_window(
        (480_003.0, 4_979_960.0, 480_010.0, 4_979_979.0), dtype=np.float32
    )
    assert window.dtype == np.float32
    # Cells of 2 m: columns 1 to 4, rows 10 to 19.
    assert (transform.c, transform.f) == (480_002.0, 4_979_980.0)
    np.testing.assert_allclose(window, cells[10:20, 1:5] * 0.3048, rtol=1e-6)
    everything, transform = terrain.read_window((0.0, 0.0, 1e7, 1e7))
    assert everything.shape == (50, 60)
    assert transform == NORTH_UP
    assert terrain.read_window((0.0, 0.0, 1.0, 1.0))[0].size == 0


def test_a_terrain_speaks_for_itself_and_travels_to_another_process(tmp_path):
    terrain = Terrain(write(tmp_path / "a.tif", rough_ground(50, 60)), sampling="nearest")
    text = repr(terrain)
    for part in ("60 x 50 cells", "UTM zone 15N", "elevations in m", "nearest", "a.tif"):
        assert part in text
    line = [(480_010.0, 4_979_990.0), (480_080.0, 4_979_930.0)]
    profile = terrain.sample([line])[0]
    again = pickle.loads(pickle.dumps(terrain)).sample([line])[0]
    assert np.array_equal(profile.elevations, again.elevations)
    assert (
        repr(profile)
        == f"Profile({len(profile)} points, {profile.stations[-1]:.2f} m long, 0 without elevation)"
    )
    assert horizontal_crs("EPSG:26915+5703") == terrain.crs


# --- what bad input gets -------------------------------------------------------------------------------


def error_code(*arguments, **options):
    with pytest.raises(InputError) as caught:
        Terrain(*arguments, **options)
    assert caught.value.what
    assert caught.value.fix
    return caught.value.code


def test_files_that_are_missing_or_no_rasters(tmp_path):
    assert error_code(tmp_path / "none.tif") == "file-missing"
    (tmp_path / "text.tif").write_text("no raster")
    assert error_code(tmp_path / "text.tif") == "file-unreadable"
    assert error_code(tmp_path) == "file-unreadable"
    assert error_code([]) == "value-not-allowed"
    complex_cells = np.zeros((3, 3), dtype=np.complex64)
    assert error_code(write(tmp_path / "complex.tif", complex_cells)) == "file-unreadable"


def test_a_file_with_damaged_blocks_is_named(tmp_path):
    path = write(
        tmp_path / "a.tif",
        rough_ground(400, 400),
        compress="deflate",
        tiled=True,
        blockxsize=64,
        blockysize=64,
    )
    whole = path.read_bytes()
    third = len(whole) // 3
    path.write_bytes(whole[:third] + b"\xff" * third + whole[2 * third :])
    terrain = Terrain(path)
    with pytest.raises(InputError) as caught:
        terrain.sample([[(480_001.0, 4_979_999.0), (480_799.0, 4_979_201.0)]])
    assert caught.value.code == "file-unreadable"
    assert "a.tif" in caught.value.where


@pytest.mark.filterwarnings("ignore::rasterio.errors.NotGeoreferencedWarning")
def test_rasters_without_a_place(tmp_path):
    assert error_code(write(tmp_path / "plain.tif", np.ones((3, 3)), crs=None)) == "crs-missing"
    assert (
        error_code(write(tmp_path / "no.tif", np.ones((3, 3)), transform=Affine.identity()))
        == "transform-missing"
    )
    points = [
        rasterio.control.GroundControlPoint(r, c, 9.0 + c, 50.0 - r)
        for r, c in ((0, 0), (0, 3), (3, 0), (3, 3))
    ]
    path = write(tmp_path / "points.tif", np.ones((3, 3)), crs=None, transform=None)
    with rasterio.open(path, "r+") as dataset:
        dataset.gcps = (points, rasterio.crs.CRS.from_epsg(4326))
    assert error_code(path) == "transform-missing"


def test_a_crs_that_is_not_tied_to_the_earth(tmp_path):
    local = 'LOCAL_CS["site grid",UNIT["metre",1],AXIS["X",EAST],AXIS["Y",NORTH]]'
    assert error_code(write(tmp_path / "a.tif", np.ones((3, 3)), crs=local)) == "crs-local"


def test_settings_that_are_not_known(tmp_path):
    path = write(tmp_path / "a.tif", rough_ground(9, 9))
    assert error_code(path, elevation_unit="yards") == "value-not-allowed"
    assert error_code(path, sampling="cubic") == "value-not-allowed"
    for spacing in (0.0, -1.0, np.nan, np.inf):
        with pytest.raises(InputError) as caught:
            Terrain(path).sample([[(480_001.0, 4_979_999.0), (480_009.0, 4_979_999.0)]], spacing=spacing)
        assert caught.value.code == "value-not-allowed"


@pytest.mark.parametrize(
    "other",
    [
        {"transform": chain(NORTH_UP, Affine.translation(10.3, 0))},
        {"transform": chain(NORTH_UP, Affine.translation(10, 0), Affine.scale(1.01))},
        {"transform": chain(NORTH_UP, Affine.translation(10, 0), Affine.rotation(1.0))},
        {"crs": "EPSG:26914"},
        {"unit": "ft"},
        {"unit": None},
    ],
    ids=["off the grid", "cell size", "rotated", "crs", "unit", "unit not stated"],
)
def test_tiles_that_do_not_fit_together(tmp_path, other):
    first = write(tmp_path / "1.tif", np.ones((10, 10)))
    second = write(
        tmp_path / "2.tif",
        np.ones((10, 10)),
        **({"transform": chain(NORTH_UP, Affine.translation(10, 0))} | other),
    )
    with pytest.raises(InputError) as caught:
        Terrain([first, second])
    assert caught.value.code == "tiles-differ"
    assert "1.tif" in caught.value.what
    assert "2.tif" in caught.value.where


def test_tiles_off_by_round_off_fit_together(tmp_path):
    first = write(tmp_path / "1.tif", np.ones((10, 10)))
    nearly = chain(NORTH_UP, Affine.translation(10 + 1e-4, -1e-4), Affine.scale(1 + 1e-6))
    assert Terrain([first, write(tmp_path / "2.tif", np.ones((10, 10)), transform=nearly)]).width == 20


def test_importing_the_names_does_not_open_anything():
    code = "import sys, terrain2q; sys.exit('rasterio' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0


@pytest.mark.parametrize("sampling", ["bilinear", "nearest"])
@pytest.mark.parametrize("kind", ["float32", "int16", "masked", "rotated"])
def test_many_points_are_those_of_few(tmp_path, monkeypatch, kind, sampling):
    """Compiled code and arrays give the same numbers to the last bit: gaps, edges, blocks, outside."""
    random = np.random.default_rng(12)
    values = random.normal(300, 40, (200, 260))
    values[random.random(values.shape) < 0.03] = -9999
    transform = Affine(2.0, 0.0, 500000.0, 0.0, -2.0, 4500000.0)
    if kind == "rotated":
        transform = chain(transform, Affine.rotation(20))
    path = tmp_path / "dem.tif"
    dtype = "int16" if kind == "int16" else "float32"
    with rasterio.open(
        path, "w", driver="GTiff", width=260, height=200, count=1, dtype=dtype, crs=UTM, transform=transform,
        tiled=True, blockxsize=32, blockysize=16, nodata=None if kind == "masked" else -9999,
    ) as out:  # fmt: skip
        out.write(values.astype(dtype), 1)
        if kind == "masked":
            out.write_mask(values > 0)
        if kind == "int16":
            out.scales, out.offsets = (0.1,), (5.0,)

    def place(column, row):
        a, b, c, d, e, f = transform[:6]
        return a * column + b * row + c, d * column + e * row + f

    (x0, y0), (x1, y1) = place(0, 0), place(260, 200)
    lines = [
        np.stack([random.uniform(min(x0, x1) - 9, max(x0, x1) + 9, n), random.uniform(y1 - 9, y0 + 9, n)], 1)
        for n in random.integers(2, 6, 60)
    ]
    # along cell centres, edges of cells and the outer edge
    lines += [np.array([place(0, r), place(260, r)]) for r in (0.0, 0.5, 16.0, 16.5, 200.0)]
    # by a hair to this or that side of where blocks part, and from one side to the other
    for off in (-1e-6, -1e-9, 1e-9, 1e-6, 3e-6):
        lines += [np.array([place(0, 32.5 + off), place(260, 32.5 + off)])]
        lines += [np.array([place(64.5 - off, 3), place(64.5 + off, 190)])]
    # more vertices than cells, wavering about such a place
    waver = 96.5 + 0.4 * np.sin(np.arange(600))
    lines += [np.column_stack(place(waver, np.linspace(2, 180, 600)))]
    terrain = Terrain(path, "m", sampling=sampling)
    few = terrain.sample(lines)
    for module in (terrain_module, tiles_module):
        monkeypatch.setattr(module, "MANY", 1)
    many = terrain.sample(lines)
    assert sum(np.isnan(p.elevations).sum() for p in few) > 100
    for one, other in zip(few, many, strict=True):
        for name in ("stations", "elevations", "x", "y", "is_vertex"):
            np.testing.assert_array_equal(getattr(one, name), getattr(other, name), err_msg=name)
            assert not getattr(other, name).flags.writeable
