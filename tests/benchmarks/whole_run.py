"""Whole runs against what the disk and the decoder allow, against a plain script, and their growth.

    python tests/benchmarks/whole_run.py [--cells 10000] [--sections 1000 10000] [--repeat 3] [--folder F]

For each number of sections: a run (200 points a section, 60 rating stages, 3 events) in a Python of its own,
the median of some repeats; the limit, measured between them: the touched blocks decoded once with rasterio on
all cores, and the same layers written with pyogrio; a plain script on 40 of the sections, scaled up.
"""

from __future__ import annotations

import argparse
import sys
import tempfile
from pathlib import Path
from statistics import median

sys.path.insert(0, str(Path(__file__).parents[2]))

from terrain2q.batches.work import cores
from tests.benchmarks import plain

PLAIN_LINES = 40


def measure(folder: Path, cells: int, sections: int, repeat: int) -> float:
    plain.make_data(folder, cells, sections)
    lines = plain.lines_of(folder)
    decoded, written, runs, memory = [], [], [], 0.0
    # the first loads what is compiled, or compiles it
    first, _ = plain.whole_run(folder / "study.toml", folder / "output")
    for _ in range(repeat):
        taken, peak = plain.whole_run(folder / "study.toml", folder / "output")
        runs.append(taken)
        memory = max(memory, peak)
        decoded.append(plain.decode_limit(folder / "dem.tif", lines)[0])
        written.append(plain.write_limit(folder / "output" / "results.gpkg", folder / "limit.gpkg"))
    _, script = plain.plain_script(folder / "dem.tif", lines[:PLAIN_LINES])
    script *= sections / PLAIN_LINES
    run, limit = median(runs), median(decoded) + median(written)
    print(
        f"{sections:9d} {run:8.1f} {first:8.1f} {median(decoded):8.1f} {median(written):8.1f} "
        f"{run / limit:11.2f} {script:12.0f} {script / run:10.0f} {memory:8.0f}",
        flush=True,
    )
    return run


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawTextHelpFormatter)
    parser.add_argument("--cells", type=int, default=10_000)
    parser.add_argument("--sections", type=int, nargs="+", default=[1_000, 10_000])
    parser.add_argument("--repeat", type=int, default=3)
    parser.add_argument("--folder", type=Path)
    asked = parser.parse_args()
    print(f"{asked.cells} x {asked.cells} cells, {cores()} cores; seconds, and megabytes of the main process")
    print(" sections      run    first   decode    write  run/limit  plain script  times faster   memory")
    before = None
    for sections in asked.sections:
        with tempfile.TemporaryDirectory(dir=asked.folder) as made:
            run = measure(Path(made), asked.cells, sections, asked.repeat)
        if before is not None:
            times = f"{run / before[1]:.1f} times the time for {sections / before[0]:.1f} times the sections"
            print(" " * 10 + times)
        before = sections, run


if __name__ == "__main__":
    main()
