"""What the benchmarks measure against: invented data, the machine's own limits, and a plain script."""

from __future__ import annotations

import subprocess
import sys
import time
import warnings
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import geopandas
import numpy as np
import pyogrio
import rasterio
import shapely
from rasterio.transform import from_origin
from rasterio.windows import Window
from scipy.optimize import brentq

from terrain2q.batches.work import cores

EAST, NORTH = 500000.0, 4500000.0
VALLEY = 400
"""Cells from one valley to the next."""

FLOWS = {"a": 30.0, "b": 90.0, "c": 200.0}
SLOPE, STAGES = 0.002, 60
COVER = (
    (0, 120, "forest", 0.1),
    (120, 190, "crops", 0.04),
    (190, 210, "water", 0.03),
    (210, 290, "pasture", 0.035),
    (290, 400, "forest", 0.1),
)


def make_data(folder: Path, cells: int, sections: int) -> None:
    """Write a DEM of parallel valleys in noise, cut lines of 200 m, streams, land cover and a study."""
    random = np.random.default_rng(1)
    off = np.abs((np.arange(cells) + 0.5) % VALLEY - VALLEY / 2)
    shape = np.where(off < 6, 0, np.where(off < 10, (off - 6) / 2, 2 + 0.01 * (off - 10)))
    shape = shape + 0.15 * np.maximum(off - 70, 0)
    with rasterio.open(
        folder / "dem.tif", "w", driver="GTiff", width=cells, height=cells, count=1, crs="EPSG:26915",
        dtype="float32", transform=from_origin(EAST, NORTH, 1, 1), tiled=True, blockxsize=512, blockysize=512,
        compress="deflate", predictor=3, nodata=-9999,
    ) as out:  # fmt: skip
        for row in range(0, cells, 512):
            rows = min(512, cells - row)
            z = 200 - 0.002 * (row + np.arange(rows))[:, None] + shape + random.normal(0, 0.05, (rows, cells))
            out.write(np.round(z, 2).astype("float32"), 1, window=Window(0, row, cells, rows))
        out.units = ("m",)
    valleys = cells // VALLEY
    x = EAST + random.integers(0, valleys, sections) * VALLEY + VALLEY / 2
    y = NORTH - random.uniform(10, cells - 10, sections)
    ends = np.stack([np.stack([x + 100, y], 1), np.stack([x - 100, y], 1)], 1)
    streams = [
        [(EAST + (i + 0.5) * VALLEY, NORTH - 1), (EAST + (i + 0.5) * VALLEY, NORTH - cells + 1)]
        for i in range(valleys)
    ]
    strips = [
        (shapely.box(EAST + i * VALLEY + a, NORTH - r - 1000, EAST + i * VALLEY + b, NORTH - r), name)
        for i in range(valleys) for a, b, name, _ in COVER for r in range(0, cells, 1000)
    ]  # fmt: skip
    for layer, columns, shapes in (
        ("cut_lines", {"id": [f"s{i}" for i in range(sections)]}, shapely.linestrings(ends)),
        ("streams", {"id": [f"v{i}" for i in range(valleys)]}, shapely.linestrings(streams)),
        ("cover", {"class": [name for _, name in strips]}, [shape for shape, _ in strips]),
    ):
        frame = geopandas.GeoDataFrame(columns, geometry=list(shapes), crs="EPSG:26915")
        frame.to_file(folder / "data.gpkg", layer=layer)
    (folder / "n.csv").write_text(
        "class,n\n" + "".join(f"{name},{n}\n" for name, n in {(c, n) for _, _, c, n in COVER})
    )
    events = ", ".join(f"{name} = {flow}" for name, flow in FLOWS.items())
    (folder / "study.toml").write_text(f"""
[study]
units = "si"
[terrain]
dem = "dem.tif"
[streams]
path = "data.gpkg|layer=streams"
[cut_lines]
path = "data.gpkg|layer=cut_lines"
[land_cover]
path = "data.gpkg|layer=cover"
class_field = "class"
table = "n.csv"
[channel]
n = 0.035
[slope]
value = {SLOPE}
[flows]
events = {{ {events} }}
[rating]
stages = {STAGES}
[output]
overwrite = true
report = false
sheets = "none"
""")


def lines_of(folder: Path) -> np.ndarray:
    return geopandas.read_file(folder / "data.gpkg", layer="cut_lines").geometry.to_numpy()


def decode_limit(dem: Path, lines: np.ndarray) -> tuple[float, int]:
    """Return the seconds to decode the touched blocks once with rasterio on all cores, and their number."""
    xy = shapely.get_coordinates(shapely.segmentize(lines, 100.0))
    with rasterio.open(dem) as source:
        rows, columns = source.block_shapes[0]
        height, width = source.shape
        column, row = ~source.transform * (xy[:, 0], xy[:, 1])
    blocks = np.unique(np.stack([row // rows, column // columns], 1).astype(int), axis=0)
    parts = np.array_split(blocks, cores())

    def decode(some) -> None:
        with rasterio.open(dem) as source:
            for i, j in some.tolist():
                source.read(
                    1,
                    window=Window(
                        j * columns, i * rows, min(columns, width - j * columns), min(rows, height - i * rows)
                    ),
                )

    began = time.perf_counter()
    with ThreadPoolExecutor(len(parts)) as pool:
        list(pool.map(decode, parts))
    return time.perf_counter() - began, len(blocks)


def write_limit(results: Path, to: Path) -> float:
    """Return the seconds pyogrio takes to write the layers of a GeoPackage, and nothing else."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # the m of profiles is lost in reading
        layers = [
            (name, kind, pyogrio.raw.read(results, layer=name))
            for name, kind in pyogrio.list_layers(results)
            if name != "layer_styles"
        ]
    to.unlink(missing_ok=True)
    taken = 0.0
    for name, kind, (about, _, geometry, fields) in layers:
        has_shape = geometry is not None and kind not in (None, "None")
        began = time.perf_counter()
        pyogrio.raw.write(
            to, geometry if has_shape else None, fields, about["fields"], layer=name, driver="GPKG",
            geometry_type=kind if has_shape else None, crs=about["crs"] if has_shape else None,
        )  # fmt: skip
        taken += time.perf_counter() - began
    return taken


def plain_profile(source, line) -> tuple[np.ndarray, np.ndarray]:
    """Return stations and elevations along a line, a metre apart, by `sample`."""
    stations = np.arange(0.0, line.length + 1e-9, 1.0)
    points = [line.interpolate(s).coords[0] for s in stations]
    return stations, np.array([value[0] for value in source.sample(points)], dtype=float)


def plain_wetted(x, z, n_of, stage: float) -> dict[float, list[float]]:
    """Return area and perimeter by n, segment by segment."""
    parts: dict[float, list[float]] = {}
    for i in range(len(x) - 1):
        d1, d2 = stage - z[i], stage - z[i + 1]
        if d1 <= 0 and d2 <= 0:
            continue
        run, rise = x[i + 1] - x[i], abs(z[i + 1] - z[i])
        deep, shallow = max(d1, d2), min(d1, d2)
        share = 1.0 if shallow >= 0 else deep / rise
        part = parts.setdefault(n_of[i], [0.0, 0.0])
        part[0] += share * run * (deep + max(shallow, 0.0)) / 2
        part[1] += share * (run * run + rise * rise) ** 0.5
    return parts


def plain_discharge(x, z, n_of, stage: float) -> float:
    parts = plain_wetted(x, z, n_of, stage)
    return sum(a / n * (a / p) ** (2 / 3) for n, (a, p) in parts.items() if p > 0) * SLOPE**0.5


def plain_script(dem: Path, lines: np.ndarray) -> tuple[float, float]:
    """Return the seconds of a plain script for these lines: the sampling, and all with ratings and stages."""
    began = time.perf_counter()
    with rasterio.open(dem) as source:
        profiles = [plain_profile(source, line) for line in lines]
    sampled = time.perf_counter() - began
    for line, (x, z) in zip(lines, profiles, strict=True):
        across = ((line.coords[0][0] - x[:-1] - 0.5) - EAST) % VALLEY
        n_of = [next(n for a, b, _, n in COVER if a <= at < b) for at in across]
        low, high = z.min(), min(z[0], z[-1])
        for k in range(1, STAGES + 1):
            plain_discharge(x, z, n_of, low + (high - low) * k / STAGES)
        for flow in FLOWS.values():
            brentq(lambda s, x=x, z=z, n=n_of, q=flow: plain_discharge(x, z, n, s) - q, low + 1e-6, high + 50)
    return sampled, time.perf_counter() - began


_RUN = """
import resource, sys, time
began = time.perf_counter()
from terrain2q.process import run
run(sys.argv[1], {"output.folder": sys.argv[2]})
taken = time.perf_counter() - began
print(taken, resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024)
"""


def whole_run(study: Path, output: Path) -> tuple[float, float]:
    """Return seconds and peak megabytes of a run in a Python of its own, imports included."""
    done = subprocess.run(
        [sys.executable, "-c", _RUN, str(study), str(output)], check=True, capture_output=True, text=True
    )
    seconds, megabytes = done.stdout.split()[-2:]
    return float(seconds), float(megabytes)
