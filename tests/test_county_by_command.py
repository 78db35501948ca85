"""Valleys of many makes through the command line, with every key at its default, against closed forms.

Each valley has its own course, section (trapezoid, V, or a channel in a flood plain), slope, road and slant;
the ground has 10 cm of noise. Nothing but files goes in, and nothing but the layers written is looked at.
"""

from __future__ import annotations

from dataclasses import dataclass

import geopandas
import numpy as np
import pytest
import rasterio
import shapely
from affine import Affine
from click.testing import CliRunner
from scipy.optimize import brentq

from terrain2q.commands import main

CRS = "EPSG:26915"
WEST, NORTH = 500_000.0, 4_650_000.0
WIDE = 480
"""Metres of the square about each crossing."""

COLUMNS = 4
N = 0.04
FREEBOARD = 0.3048
RIDGE = 5.0
"""Metres from the crest up to the flat ridges."""


@dataclass(frozen=True)
class Valley:
    """A straight valley with a road across, in metres; `u` downstream, `v` to the left of it.

    Attributes
    ----------
    azimuth, slant : float
        Course of the valley; the road's degrees off square.
    half_bed, side, bank, bank_side, plain : float
        Half the bed; run over rise of the valley's sides; height and run over rise of the channel's banks,
        and width of each flood plain, 0 where there is none.
    crest, curve, gap : float
        Lowest point of the road above the bed at the crossing; 1/(2 R) of its sag; width of the missing deck.
    off : float
        How far upstream the road's line is drawn off.
    """

    azimuth: float
    half_bed: float
    side: float
    slope: float
    crest: float
    slant: float = 0.0
    curve: float = 0.0
    gap: float = 0.0
    off: float = 0.0
    half_top: float = 4.5
    bank: float = 0.0
    bank_side: float = 1.0
    plain: float = 0.0
    bed: float = 200.0

    def axes(self):
        angle = np.radians(self.azimuth)
        down = np.array([np.sin(angle), np.cos(angle)])
        return down, np.array([-down[1], down[0]])

    def natural(self, v):
        """Return the height of the ground over the bed."""
        beyond = np.abs(v) - self.half_bed
        channel = np.clip(beyond / self.bank_side, 0.0, self.bank)
        beyond = beyond - self.bank_side * self.bank - self.plain
        return channel + np.clip(beyond / self.side, 0.0, self.crest + RIDGE - self.bank)

    def road(self, s):
        return self.bed + self.crest + self.curve * s**2

    def ground(self, u, v):
        angle = np.radians(self.slant)
        s, t = u * np.sin(angle) - v * np.cos(angle), -u * np.cos(angle) - v * np.sin(angle)
        natural = self.bed - self.slope * u + self.natural(v)
        beside = np.maximum(np.abs(t) - self.half_top, 0.0) / 2.0
        fill = self.road(s) - beside
        if self.gap:
            fill = np.minimum(fill, natural + 3.0 * np.maximum(np.abs(s) - 0.5 * self.gap, 0.0))
        return np.maximum(np.minimum(natural, self.road(s) + beside), fill)

    @property
    def lowest_road(self) -> float:
        """The lowest point of the road, with a straight deck where it is missing."""
        if not self.gap:
            return self.bed + self.crest
        angle = np.radians(self.slant)
        s = np.arange(-60.0, 60.0, 0.01)
        natural = self.bed - self.slope * s * np.sin(angle) + self.natural(s * np.cos(angle))
        whole = natural + 3.0 * np.maximum(np.abs(s) - 0.5 * self.gap, 0.0) >= self.road(s)
        return float(self.road(s[whole]).min())

    @property
    def bed_at_edge(self) -> float:
        """Height of the bed at the road's upstream edge."""
        return self.bed + self.slope * self.half_top / np.cos(np.radians(self.slant))

    def discharge(self, depth: float) -> float:
        """Manning's equation in the channel and in what stands over each flood plain (Chow 1959, divided)."""
        low = min(depth, self.bank) if self.plain else depth
        side = self.bank_side if self.plain else self.side
        area = (2 * self.half_bed + side * low) * low
        parts = [[area, 2 * self.half_bed + 2 * low * np.hypot(1.0, side)]]
        if depth > low:
            over = depth - low
            parts[0][0] += over * 2 * (self.half_bed + side * low)
            parts += 2 * [[over * (self.plain + 0.5 * self.side * over),
                           self.plain + over * np.hypot(1.0, self.side)]]  # fmt: skip
        return sum(a / N * (a / p) ** (2 / 3) for a, p in parts) * np.sqrt(self.slope)

    @property
    def crest_discharge(self) -> float:
        return self.discharge(self.lowest_road - self.bed_at_edge)

    def stage(self, discharge: float) -> float:
        """Stage of uniform flow at the road's upstream edge."""
        return self.bed_at_edge + brentq(lambda y: self.discharge(y) - discharge, 1e-6, 20.0)


VALLEYS = [
    Valley(20.0, 5.0, 3.0, 0.002, 3.0, off=3.0),
    Valley(200.0, 0.0, 5.0, 0.003, 2.8, slant=-30.0, curve=1 / 3000, off=-2.0),
    Valley(75.0, 6.0, 4.0, 0.004, 2.6, slant=20.0, gap=14.0, off=2.0),
    Valley(300.0, 4.0, 4.0, 0.002, 2.6, bank=1.4, bank_side=2.0, plain=25.0, curve=1 / 4000, off=4.0),
    Valley(133.0, 8.0, 6.0, 0.001, 3.4, slant=40.0, half_top=5.5, off=-3.0),
    Valley(250.0, 0.0, 4.0, 0.006, 3.2, half_top=3.5),
    Valley(10.0, 5.0, 2.0, 0.008, 3.5, slant=-20.0, curve=1 / 2500, half_top=5.0, off=1.0),
    # a wide opening in a low fill on a flood plain, at a slant: low abutments, and a slow descent between
    Valley(125.0, 4.4, 3.1, 0.007, 2.1, slant=-40.0, gap=19.0, half_top=5.6, off=-2.5,
           bank=1.3, bank_side=1.2, plain=35.0),
]  # fmt: skip
EVENTS = {"10-year": (0.1, -0.75), "50-year": (0.02, -0.17), "100-year": (0.01, 0.25)}
"""Probability, and how far above the crest (m) the water stands."""


@pytest.fixture(scope="module")
def written(tmp_path_factory):
    """Run a study of the valleys by the command line; return its crossings and findings."""
    folder = tmp_path_factory.mktemp("valleys")
    rows = -(-len(VALLEYS) // COLUMNS)
    z = np.full((rows * WIDE, COLUMNS * WIDE), -9999.0, dtype=np.float32)
    at = np.arange(WIDE) + 0.5 - WIDE / 2
    random = np.random.default_rng(1959)
    streams, roads, flows = [], [], ["event,discharge,probability,stream"]
    for k, valley in enumerate(VALLEYS):
        row, column = divmod(k, COLUMNS)
        down, left = valley.axes()
        x, y = at[None, :], -at[:, None]
        ground = valley.ground(x * down[0] + y * down[1], x * left[0] + y * left[1])
        ground = ground + random.normal(0.0, 0.1, ground.shape)
        z[row * WIDE : (row + 1) * WIDE, column * WIDE : (column + 1) * WIDE] = ground
        middle = np.array([WEST + (column + 0.5) * WIDE, NORTH - (row + 0.5) * WIDE])
        streams.append(shapely.LineString([middle - 238.0 * down, middle + 238.0 * down]))
        angle = np.radians(valley.slant)
        along = down * np.sin(angle) - left * np.cos(angle)
        upstream = -down * np.cos(angle) - left * np.sin(angle)
        drawn = middle + valley.off * upstream
        roads.append(shapely.LineString([drawn - 170.0 * along, drawn, drawn + 170.0 * along]))
        depth = valley.lowest_road - valley.bed_at_edge
        for event, (probability, height) in EVENTS.items():
            flows.append(f"{event},{valley.discharge(depth + height):.6g},{probability},S{k}")
    with rasterio.open(
        folder / "dem.tif", "w", driver="GTiff", height=z.shape[0], width=z.shape[1], count=1,
        dtype="float32", crs=CRS, nodata=-9999.0, transform=Affine(1.0, 0.0, WEST, 0.0, -1.0, NORTH),
        tiled=True, blockxsize=256, blockysize=256,
    ) as target:  # fmt: skip
        target.write(z, 1)
    for name, letter, shapes in (("streams", "S", streams), ("roads", "R", roads)):
        table = geopandas.GeoDataFrame(
            {"name": [f"{letter}{k}" for k in range(len(shapes))]}, geometry=shapes, crs=CRS
        )
        table.to_file(folder / "data.gpkg", layer=name)
    (folder / "flows.csv").write_text("\n".join(flows) + "\n", encoding="utf-8")
    (folder / "study.toml").write_text(
        f"""
[study]
units = "si"
[terrain]
dem = "dem.tif"
elevation_unit = "m"
[streams]
path = "data.gpkg|layer=streams"
id_field = "name"
[land_cover]
default_n = {N}
[flows]
path = "flows.csv"
[crossings]
roads = "data.gpkg|layer=roads"
""",
        encoding="utf-8",
    )
    ended = CliRunner().invoke(main, ["run", str(folder / "study.toml")])
    assert ended.exit_code == 0, ended.output
    results = folder / "output" / "results.gpkg"
    return geopandas.read_file(results, layer="crossings"), geopandas.read_file(results, layer="findings")


def test_every_crest_and_the_discharge_that_reaches_it(written):
    crossings, _ = written
    assert len(crossings) == len(VALLEYS) * len(EVENTS)
    for k, valley in enumerate(VALLEYS):
        row = crossings[crossings["stream"] == f"S{k}"].iloc[0]
        assert row["crest"] == pytest.approx(valley.lowest_road, abs=0.05), f"S{k}"
        assert row["crest_discharge"] == pytest.approx(valley.crest_discharge, rel=0.03), f"S{k}"


def test_every_verdict(written):
    for row in written[0].itertuples():
        valley = VALLEYS[int(row.stream[1:])]
        freeboard = valley.lowest_road - valley.stage(row.discharge)
        expected = "over the crest" if freeboard <= 0 else "crest not reached"
        if 0 < freeboard < FREEBOARD:
            expected = "within freeboard"
        assert row.verdict == expected, row.stream
        assert row.freeboard == pytest.approx(freeboard, abs=0.1)
        assert row.first_event_over == "100-year"


def test_missing_decks_are_marked(written):
    crossings, findings = written
    marked = set(findings.loc[findings["code"] == "deck-bridged", "feature_id"])
    found = set(crossings.loc[crossings["crossing_id"].isin(marked), "stream"])
    assert found == {f"S{k}" for k, valley in enumerate(VALLEYS) if valley.gap}
