"""Straight valleys of closed form as rasters, with what makes a stream's low line hard to read."""

from __future__ import annotations

import geopandas
import numpy as np
import rasterio
from rasterio.transform import from_origin
from shapely import LineString

CRS = "EPSG:26915"
EAST, NORTH = 500_000.0, 4_500_000.0

BED, DEPTH, SIDE, RISE = 4.0, 1.5, 2.0, 0.1
"""Half the bed and bank height (m), run over rise of the banks, rise of the valley floor."""


class Valley:
    """A valley that falls towards an azimuth through the middle of a square raster.

    Places are given by (along, across): metres downstream of the middle, and to the right of the stream.
    """

    def __init__(
        self, azimuth=90.0, size=700.0, cell=1.0, slope=0.005, noise=0.0, seed=1, fill=None, bed=None
    ):
        self.azimuth, self.size, self.cell, self.slope = azimuth, size, cell, slope
        self.east, self.north = np.sin(np.radians(azimuth)), np.cos(np.radians(azimuth))
        count = round(size / cell)
        at = (np.arange(count) + 0.5) * cell
        x, y = np.meshgrid(at - size / 2, size / 2 - at)
        along, across = x * self.east + y * self.north, x * -self.north + y * self.east
        across = np.abs(across)
        height = np.clip((across - BED) / SIDE, 0.0, DEPTH)
        height += RISE * np.maximum(across - BED - SIDE * DEPTH, 0.0)
        profile = -slope * along if bed is None else bed(along)
        ground = 100.0 + profile + height
        if noise:
            ground += np.random.default_rng(seed).normal(0.0, noise, ground.shape)
        if fill is not None:
            start, width, top = fill
            # sides of 2:1 from a crest that is level across the valley
            crest = 100.0 - slope * start + top
            side = np.maximum(np.abs(along - start) - width / 2, 0.0) / 2.0
            ground = np.maximum(ground, crest - side)
        self.ground = ground

    def write(self, path):
        count = self.ground.shape[0]
        with rasterio.open(
            path, "w", driver="GTiff", width=count, height=count, count=1, dtype="float64", crs=CRS,
            transform=from_origin(EAST - self.size / 2, NORTH + self.size / 2, self.cell, self.cell),
        ) as out:  # fmt: skip
            out.write(self.ground, 1)
            out.units = ("m",)
        return path

    def place(self, along, across=0.0):
        return (
            EAST + along * self.east + across * self.north,
            NORTH + along * self.north - across * self.east,
        )

    def line(self, *places):
        return LineString([self.place(*np.atleast_1d(place)) for place in places])

    def streams(self, *lines, **columns):
        if not lines:
            reach = 0.45 * self.size
            lines = [self.line(-reach, reach)]
        columns = columns or {"feature_id": ["creek"] * len(lines)}
        return geopandas.GeoDataFrame(columns, geometry=list(lines), crs=CRS)

    def cut_lines(self, at, half=60.0, **columns):
        lines = [self.line((a, -half), (a, half)) for a in at]
        columns = columns or {"feature_id": [f"s{i}" for i in range(len(at))]}
        return geopandas.GeoDataFrame(columns, geometry=lines, crs=CRS)


def correlated(random, count, spacing, scale, size):
    """Noise with a correlation that falls to 1/e over `scale` metres."""
    keep = np.exp(-spacing / scale)
    steps = random.normal(0.0, size * np.sqrt(1.0 - keep**2), count)
    values = np.empty(count)
    values[0] = random.normal(0.0, size)
    for i in range(1, count):
        values[i] = keep * values[i - 1] + steps[i]
    return values
