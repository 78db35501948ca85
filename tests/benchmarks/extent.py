"""Flood extent and depth grids of a large DEM: time against a plain copy of its tiles, and peak memory.

    python tests/benchmarks/extent.py [CELLS_ACROSS] [FOLDER]

A winding invented valley of 1 m cells with 2 cm of noise (10 000 cells across by default: 100
megapixels), tiled and deflated; cut lines every 500 m over its whole width; one event. What is timed is
the extent with its boundary's audit and both grids as Cloud Optimized GeoTIFFs. The copy reads every
tile with rasterio and writes it to a GeoTIFF of the same tiling and compression.
"""

from __future__ import annotations

import resource
import sys
import tempfile
import time
from pathlib import Path

import geopandas
import numpy as np
import rasterio
from rasterio.transform import from_origin
from shapely import LineString

from terrain2q.flows import Flow
from terrain2q.ground.cover import UniformCover
from terrain2q.ground.cut_lines import orient_cut_lines
from terrain2q.ground.terrain import Terrain
from terrain2q.jobs.design_flows import answer_section, answer_sections
from terrain2q.jobs.extent import ExtentInputs, map_floods
from terrain2q.jobs.sections import SectionInputs, build_sections
from terrain2q.jobs.slopes import OneSlope
from terrain2q.output.rasters import flood_rasters
from terrain2q.units import SI

WEST, NORTH = 400_000.0, 4_600_000.0
LAYOUT = {"tiled": True, "blockxsize": 512, "blockysize": 512, "compress": "deflate", "predictor": 3}


def course(x, size):
    """Northing of the stream."""
    return 0.5 * size + 0.05 * size * np.sin(x / 700.0)


def make_dem(path: Path, size: int) -> None:
    random = np.random.default_rng(5)
    x = np.arange(size) + 0.5
    with rasterio.open(
        path, "w", driver="GTiff", width=size, height=size, count=1, dtype="float32", crs="EPSG:26915",
        transform=from_origin(WEST, NORTH, 1, 1), **LAYOUT,
    ) as out:  # fmt: skip
        for row in range(0, size, 512):
            y = size - (np.arange(row, min(row + 512, size)) + 0.5)
            off = np.abs(y[:, None] - course(x, size)[None, :])
            z = 300.0 - 0.001 * x[None, :] + np.clip((off - 10.0) / 4.0, 0, 3.0)
            z += (
                0.004 * np.maximum(off - 40.0, 0)
                + 0.3 * np.sin(x / 37.0)[None, :] * np.sin(y / 41.0)[:, None]
            )
            z += random.normal(0.0, 0.02, z.shape)
            out.write(z.astype("float32"), 1, window=((row, row + z.shape[0]), (0, size)))
        out.units = ("m",)


def copy(path: Path, to: Path) -> tuple[float, float]:
    start, worked = time.perf_counter(), time.process_time()
    with rasterio.open(path) as source:
        profile = {**source.profile, **LAYOUT}
        with rasterio.open(to, "w", **profile) as out:
            for _, window in source.block_windows(1):
                out.write(source.read(1, window=window), 1, window=window)
    return time.perf_counter() - start, time.process_time() - worked


def main(size: int, folder: Path) -> None:
    dem = folder / "dem.tif"
    make_dem(dem, size)
    x = np.arange(0.0, size, 20.0)
    streams = geopandas.GeoDataFrame(
        {"feature_id": ["river"]},
        geometry=[LineString(np.column_stack([WEST + x, NORTH - size + course(x, size)]))],
        crs="EPSG:26915",
    )
    places = np.arange(20.0, size - 10.0, 500.0)
    lines = geopandas.GeoDataFrame(
        {"feature_id": [f"{p:.0f}" for p in places]},
        geometry=[LineString([(WEST + p, NORTH - 10), (WEST + p, NORTH - size + 10)]) for p in places],
        crs="EPSG:26915",
    )
    plain = [copy(dem, folder / "copy.tif") for _ in range(2)]
    terrain = Terrain(dem)
    cut_lines, _ = orient_cut_lines(lines, streams, terrain.crs)
    inputs = SectionInputs(terrain, UniformCover(0.05), None, "none", None, OneSlope(0.001), None, SI)
    flows = [Flow("flood", 3000.0)]
    built = build_sections(cut_lines, inputs)
    answers = answer_sections(built, flows, 30, None, SI)

    def again(answer, reached):
        return answer_section(answer.built, flows, ["flood"], 30, None, SI, reached)

    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    start, worked = time.perf_counter(), time.process_time()
    floods = map_floods(answers, ExtentInputs(terrain, streams, ("flood",), None, SI, folder), again)
    mapped = time.perf_counter() - start
    with flood_rasters(folder, floods, SI, terrain.crs) as files:
        pass
    taken, work = time.perf_counter() - start, time.process_time() - worked
    # before and after, as other work on the machine comes and goes
    plain += [copy(dem, folder / "copy.tif") for _ in range(2)]
    event = floods.events[0]
    floods.close()
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(f"{size} x {size} cells; wet {event.area / 1e6:.2f} km², {event.boundary_points} boundary points, "
          f"{100 * event.within:.1f} % within a foot")  # fmt: skip
    wall, own = (float(np.median([each[k] for each in plain])) for k in (0, 1))
    print(f"copy of the tiles {wall:.1f} s ({own:.1f} s of work)")
    print(f"extent {mapped:.1f} s, with {len(files)} grids {taken:.1f} s ({work:.1f} s of work)")
    print(f"ratio {taken / wall:.2f} ({work / own:.2f} of work)")
    print(f"peak memory {peak:.0f} MB, before the extent {before:.0f} MB")


if __name__ == "__main__":
    cells = int(sys.argv[1]) if len(sys.argv) > 1 else 10_000
    with tempfile.TemporaryDirectory(dir=sys.argv[2] if len(sys.argv) > 2 else None) as made:
        main(cells, Path(made))
