"""An invented county: straight valleys side by side, a road across each, every answer of closed form.

A valley runs due south. Its section is a trapezoid: a flat bed and even sides up to the ridges between the
valleys. A road crosses it on a fill, square or at a slant; its long section is a parabola with its lowest
point at the stream or aside. Where a deck is said to be removed, the fill stops at two steep abutments.
"""

from __future__ import annotations

from dataclasses import dataclass

import geopandas
import numpy as np
import rasterio
import shapely
from affine import Affine

CRS = "EPSG:26915"
WEST, NORTH = 500_000.0, 4_650_000.0
WIDE, LONG = 260, 760
"""Metres of a valley from ridge to ridge, and along."""

ROAD_AT = 380.0
"""Metres from the upper edge at which every road meets its stream."""

HALF_TOP = 4.5
N = 0.04


@dataclass(frozen=True)
class Valley:
    """One valley and its road; metres.

    Attributes
    ----------
    number : int
    half_bed, side : float
        Half the width of the bed; run over rise of the sides.
    slope, bed : float
        Fall of the bed; its height at the road.
    crest : float
        Height of the road's lowest point above the bed at the crossing.
    sag, curve : float
        Where along the road (from the stream, to the right looking downstream) it is lowest; 1/(2 R).
    slant : float
        Degrees off square.
    opening : float
        Half the width of the missing deck along the road; 0 where the fill is whole.
    drawn_off : float
        How far the road line is drawn off, downstream.
    """

    number: int
    half_bed: float
    side: float
    slope: float
    bed: float
    crest: float
    sag: float
    curve: float
    slant: float
    opening: float
    drawn_off: float

    @property
    def centre(self) -> float:
        return WEST + WIDE * (self.number + 0.5)

    def top(self, s):
        """Return the height of the road's surface, as it was built."""
        return self.bed + self.crest + self.curve * (s - self.sag) ** 2

    @property
    def crest_height(self) -> float:
        """The lowest point of the road; where the deck is missing, of what is left with a straight deck."""
        if not self.opening:
            return self.bed + self.crest
        s = np.arange(-60.0, 60.0, 0.01)
        angle = np.radians(self.slant)
        x, y = self.centre - s * np.cos(angle), NORTH - ROAD_AT + s * np.sin(angle)
        whole = self.ground(x, y) > self.top(s) - 1e-6
        left, right = s[whole & (s < 0)].max(), s[whole & (s > 0)].min()
        return float(
            min(self.top(np.array([left, right])).min(), self.top(s[(s < left) | (s > right)]).min())
        )

    @property
    def upper_edge(self) -> float:
        """Metres along the stream from the road's middle to its upstream edge."""
        return HALF_TOP / np.cos(np.radians(self.slant))

    def discharge(self, depth: float) -> float:
        """Manning's equation for the trapezoid."""
        area = (2 * self.half_bed + self.side * depth) * depth
        perimeter = 2 * self.half_bed + 2 * depth * np.hypot(1.0, self.side)
        return area / N * (area / perimeter) ** (2 / 3) * np.sqrt(self.slope)

    def depth(self, discharge: float) -> float:
        low, high = 0.0, 20.0
        for _ in range(80):
            middle = 0.5 * (low + high)
            low, high = (middle, high) if self.discharge(middle) < discharge else (low, middle)
        return 0.5 * (low + high)

    def stage(self, discharge: float) -> float:
        """Stage of uniform flow at the road's upstream edge."""
        return self.bed + self.slope * self.upper_edge + self.depth(discharge)

    @property
    def crest_discharge(self) -> float:
        return self.discharge(self.crest_height - self.bed - self.slope * self.upper_edge)

    def along_and_across(self, x, y):
        """Return distance along the road from the stream, and off its middle, upstream positive."""
        angle = np.radians(self.slant)
        # looking downstream (south) the road runs from the left (east) to the right (west)
        way = np.array([-np.cos(angle), np.sin(angle)])
        dx, dy = x - self.centre, y - (NORTH - ROAD_AT)
        return dx * way[0] + dy * way[1], dx * way[1] - dy * way[0]

    def ground(self, x, y):
        """Return the height of the ground."""
        down = NORTH - y
        bed = self.bed + self.slope * (ROAD_AT - down)
        natural = bed + np.maximum(np.abs(x - self.centre) - self.half_bed, 0.0) / self.side
        s, t = self.along_and_across(x, y)
        fill = self.top(s) - np.maximum(np.abs(t) - HALF_TOP, 0.0) / 2.0
        if self.opening:
            fill = np.minimum(fill, natural + 2.0 * np.maximum(np.abs(s) - self.opening, 0.0))
        return np.maximum(natural, fill)

    @property
    def stream(self) -> shapely.LineString:
        return shapely.LineString([(self.centre, NORTH - 2.0), (self.centre, NORTH - LONG + 2.0)])

    @property
    def road(self) -> shapely.LineString:
        angle = np.radians(self.slant)
        way = np.array([-np.cos(angle), np.sin(angle)])
        aside = np.array([-way[1], way[0]]) * self.drawn_off
        middle = np.array([self.centre, NORTH - ROAD_AT]) + aside
        half = (0.5 * WIDE - 8.0) / np.cos(angle)
        return shapely.LineString([middle + way * s for s in np.linspace(-half, half, 9)])


def make_valleys(count: int = 40, seed: int = 7) -> list[Valley]:
    """Return valleys of many shapes."""
    random = np.random.default_rng(seed)
    valleys = []
    for k in range(count):
        half_bed = float(random.uniform(3.0, 8.0))
        side = float(random.uniform(8.0, 14.0))
        crest = float(random.uniform(1.8, 4.0))
        aside = k % 5 == 3
        deck = k % 4 == 1
        valleys.append(
            Valley(
                k, half_bed, side, float(random.uniform(0.0015, 0.008)),
                200.0 + float(random.uniform(0.0, 5.0)),
                crest, float(random.choice([-1.0, 1.0]) * 12.0) if aside else 0.0,
                float(random.uniform(1 / 4000, 1 / 2500)),
                [0.0, 15.0, -25.0, 35.0][k % 4 if not aside else 0],
                half_bed + 2.0 if deck else 0.0, float(random.uniform(-4.0, 4.0)),
            )
        )  # fmt: skip
    return valleys


def write_dem(path, valleys, noise: float = 0.1, seed: int = 1, columns=slice(None)) -> None:
    """Write the ground of the valleys, 1 m cells; `columns` of the whole where a tile is asked for."""
    random = np.random.default_rng(seed)
    width = WIDE * (max(v.number for v in valleys) + 1)
    start, stop, _ = columns.indices(width)
    y = (NORTH - 0.5 - np.arange(LONG))[:, None]
    z = np.empty((LONG, stop - start), dtype=np.float32)
    for v in valleys:
        a, b = max(v.number * WIDE, start), min((v.number + 1) * WIDE, stop)
        if a < b:
            z[:, a - start : b - start] = v.ground((WEST + 0.5 + np.arange(a, b))[None, :], y)
    if noise:
        z += random.normal(0.0, noise, z.shape).astype(np.float32)
    with rasterio.open(
        path, "w", driver="GTiff", height=LONG, width=stop - start, count=1, dtype="float32", crs=CRS,
        transform=Affine(1.0, 0.0, WEST + start, 0.0, -1.0, NORTH),
        tiled=True, blockxsize=256, blockysize=256,
    ) as target:  # fmt: skip
        target.write(z, 1)
        target.units = ["m"]


def streams(valleys) -> geopandas.GeoDataFrame:
    return geopandas.GeoDataFrame(
        {"stream_id": [f"S{v.number}" for v in valleys]}, geometry=[v.stream for v in valleys], crs=CRS
    )


def roads(valleys) -> geopandas.GeoDataFrame:
    return geopandas.GeoDataFrame(
        {
            "name": [f"R{v.number}" for v in valleys],
            "bridge": ["yes" if v.opening and v.number % 8 == 1 else "no" for v in valleys],
        },
        geometry=[v.road for v in valleys],
        crs=CRS,
    )
