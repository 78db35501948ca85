"""Sampling against decoding the touched blocks once, and against a plain script.

    python tests/benchmarks/sampling.py [--cells 10000] [--sections 10000] [--repeat 5] [--folder F]

The plain script is rasterio's `sample` along each line, on 100 of the lines, scaled up. Limit and sampling
are measured in turn, and the medians compared.
"""

from __future__ import annotations

import argparse
import sys
import tempfile
import time
from pathlib import Path
from statistics import median

sys.path.insert(0, str(Path(__file__).parents[2]))

from terrain2q.batches.work import cores
from terrain2q.ground.terrain import Terrain
from tests.benchmarks import plain

PLAIN_LINES = 100


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawTextHelpFormatter)
    parser.add_argument("--cells", type=int, default=10_000)
    parser.add_argument("--sections", type=int, default=10_000)
    parser.add_argument("--repeat", type=int, default=5)
    parser.add_argument("--folder", type=Path)
    asked = parser.parse_args()
    with tempfile.TemporaryDirectory(dir=asked.folder) as made:
        folder = Path(made)
        plain.make_data(folder, asked.cells, asked.sections)
        lines, dem = plain.lines_of(folder), folder / "dem.tif"
        terrain = Terrain(dem)
        sampled, decoded, blocks = [], [], 0
        for _ in range(asked.repeat):
            taken, blocks = plain.decode_limit(dem, lines)
            decoded.append(taken)
            began = time.perf_counter()
            profiles = terrain.sample(lines)
            sampled.append(time.perf_counter() - began)
            del profiles  # to give memory back is not part of it
        script, _ = _plain_sampling(dem, lines[:PLAIN_LINES])
        script *= asked.sections / PLAIN_LINES
    run, limit = median(sampled), median(decoded)
    print(f"{asked.cells} x {asked.cells} cells, {asked.sections} lines of 201 points, {cores()} cores")
    print(
        f"sampling {run:.2f} s; {blocks} blocks decoded once {limit:.2f} s: {run / limit:.2f} times the limit"
    )
    print(f"plain script {script:.0f} s (scaled): {script / run:.0f} times faster")


def _plain_sampling(dem: Path, lines) -> tuple[float, int]:
    import rasterio

    began = time.perf_counter()
    with rasterio.open(dem) as source:
        for line in lines:
            plain.plain_profile(source, line)
    return time.perf_counter() - began, len(lines)


if __name__ == "__main__":
    main()
