"""A little folder of data for tests: a plane with a stream across it, and everything a study needs."""

from __future__ import annotations

import geopandas
import numpy as np
import rasterio
from affine import Affine
from shapely.geometry import LineString, Point, box

CRS = "EPSG:26915"
WEST, SOUTH = 500000.0, 4600000.0


def write_raster(
    path, *, crs=CRS, west=WEST, north=SOUTH + 60.0, shape=(60, 100), dtype="float32", bands=1, unit="m"
):
    """Write a plane; one metre cells."""
    with rasterio.open(
        path, "w", driver="GTiff", height=shape[0], width=shape[1], count=bands, dtype=dtype, crs=crs,
        transform=Affine(1.0, 0.0, west, 0.0, -1.0, north),
    ) as target:  # fmt: skip
        for band in range(1, bands + 1):
            target.write(np.full(shape, 7, dtype=dtype), band)
        if unit:
            target.units = [unit] * bands
    return path


def line(*points):
    return LineString([(WEST + x, SOUTH + y) for x, y in points])


def frame(shapes, crs=CRS, **columns):
    return geopandas.GeoDataFrame(columns, geometry=list(shapes), crs=crs)


CUT_LINES = [line((x, 10), (x, 50)) for x in (20, 40, 60)]
STREAM = [line((0, 30), (100, 30))]
COVER = [box(WEST, SOUTH, WEST + 100, SOUTH + 30), box(WEST, SOUTH + 30, WEST + 100, SOUTH + 60)]


def write_folder(
    folder, *, layers=("cut_lines", "streams", "land_cover", "channel", "roads", "wells"), slope=True
):
    """Write dem.tif, data.gpkg, roughness.csv and flows.csv."""
    folder.mkdir(parents=True, exist_ok=True)
    write_raster(folder / "dem.tif")
    slopes = {"bed_slope": [0.002, 0.003, 0.001]} if slope else {}
    frames = {
        "cut_lines": frame(CUT_LINES, section_id=["a", "b", "c"], **slopes),
        "streams": frame(STREAM, name=["Mill Creek"]),
        "land_cover": frame(COVER, kind=["a", "b"], cover=["pasture", "forest"]),
        "channel": frame([box(WEST, SOUTH + 27, WEST + 100, SOUTH + 33)], note=["drawn"]),
        "roads": frame([line((10, 0), (10, 60))], name=["Mill Road"]),
        "wells": frame([Point(WEST + 5, SOUTH + 5)], depth=[4.0]),
    }
    for name in layers:
        frames[name].to_file(folder / "data.gpkg", layer=name)
    (folder / "roughness.csv").write_text("class,n\npasture,0.035\nforest,0.1\n", encoding="utf-8")
    (folder / "flows.csv").write_text("event,discharge\n10-year,40\n100-year,90\n", encoding="utf-8")
    return folder
