"""Screen many crossings on a mosaic of tiles: crossings per second, share of time reading the DEM, memory.

Run ``python tests/benchmarks/crossings.py [CROSSINGS] [FOLDER]``; 1,000 crossings in ten tiles of 1 m cells
take some 800 MB of disk, in FOLDER (kept) or a temporary one. One crossing is broken on purpose and lies off
the terrain; it has to come back as failed, alone.
"""

from __future__ import annotations

import resource
import sys
import tempfile
import time
from dataclasses import replace
from multiprocessing import Process
from pathlib import Path

import numpy as np
import pytest

sys.path.insert(0, str(Path(__file__).parents[1]))

from _county import CRS, WIDE, N, make_valleys, roads, streams, write_dem

from terrain2q.batches.crossings import SectionRows, rows_in_batches, screen_in_batches
from terrain2q.batches.work import cores
from terrain2q.flows import Flow
from terrain2q.ground.cover import UniformCover
from terrain2q.ground.roads import RoadNetwork, crossings_from_roads
from terrain2q.ground.streams import StreamNetwork
from terrain2q.ground.terrain import Terrain
from terrain2q.ground.tiles import Mosaic
from terrain2q.jobs.crossings import CrossingInputs, screen_crossings
from terrain2q.jobs.sections import SectionInputs
from terrain2q.jobs.slopes import OneSlope
from terrain2q.output.crossing_table import write_crossing_sections
from terrain2q.units import SI

VALLEYS_A_TILE = 100


class Clock:
    """Seconds spent in some methods, calls within calls counted once."""

    def __init__(self) -> None:
        self.seconds, self._inside = 0.0, False

    def watch(self, cls: type, name: str) -> None:
        plain = getattr(cls, name)

        def timed(*args, **kwargs):
            if self._inside:
                return plain(*args, **kwargs)
            self._inside, began = True, time.perf_counter()
            try:
                return plain(*args, **kwargs)
            finally:
                self.seconds += time.perf_counter() - began
                self._inside = False

        setattr(cls, name, timed)


def peak_memory() -> float:
    """Return the most memory this process has held, MB."""
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024


def main(count: int, folder: Path) -> None:
    valleys = make_valleys(count, seed=11)
    began = time.perf_counter()
    tiles = []
    for start in range(0, count, VALLEYS_A_TILE):
        path = folder / f"county_{start:05d}.tif"
        columns = slice(start * WIDE, min(start + VALLEYS_A_TILE, count) * WIDE)
        if not path.exists():
            # in a process of its own, so that its memory is not counted
            making = Process(target=write_dem, args=(path, valleys, 0.1, start, columns))
            making.start()
            making.join()
        tiles.append(path)
    print(f"{len(tiles)} tiles of 1 m cells made in {time.perf_counter() - began:.1f} s")

    terrain = Terrain(tiles)
    # one valley lies off the terrain
    every = [*valleys, replace(valleys[0], number=count + 50)]
    table = streams(every)
    table["feature_id"] = table["stream_id"]
    network = StreamNetwork(table, CRS)
    began = time.perf_counter()
    lines = RoadNetwork(roads(every))
    crossings, _ = crossings_from_roads(lines, network, 30.0)
    print(f"{len(crossings)} crossings of roads and streams found in {time.perf_counter() - began:.1f} s")

    flows = [
        Flow(event, v.crest_discharge * share, probability, stream=f"S{v.number}")
        for v in every
        for event, share, probability in (
            ("10-year", 0.5, 0.1),
            ("50-year", 0.9, 0.02),
            ("100-year", 1.3, 0.01),
        )
    ]
    sections = SectionInputs(terrain, UniformCover(N), None, "none", None, OneSlope(1.0), None, SI)
    inputs = CrossingInputs(crossings, network, sections, flows, 1.6, roads=lines)
    clock = Clock()
    for name in ("window", "elevations", "many_elevations"):
        clock.watch(Mosaic, name)
    few = peak_memory()
    began = time.perf_counter()
    answers = screen_crossings(inputs)
    seconds = time.perf_counter() - began
    most = peak_memory()
    began = time.perf_counter()
    rows = rows_in_batches(answers, SectionRows(SI, CRS, CRS, 30, None), 1, None)
    kept = write_crossing_sections(folder, answers, SI, CRS, CRS, rows)
    print(
        f"sections and steps of all written in {time.perf_counter() - began:.1f} s: "
        f"{kept.stat().st_size / 1e6:.0f} MB; memory then {peak_memory():.0f} MB"
    )
    began = time.perf_counter()
    together = screen_in_batches(inputs, cores(), None, lambda *_: None)
    several = time.perf_counter() - began
    assert [a.crest_discharge for a in together] == pytest.approx(
        [a.crest_discharge for a in answers], rel=0, abs=0, nan_ok=True
    )
    failed = [a.crossing.crossing_id for a in answers if a.status == "failed"]
    off = np.array([
        a.crest_discharge / every[int(a.crossing.stream[1:])].crest_discharge - 1.0
        for a in answers if a.status != "failed"
    ])  # fmt: skip
    crest = np.array([
        a.crest - every[int(a.crossing.stream[1:])].crest_height for a in answers if a.status != "failed"
    ])  # fmt: skip
    print(f"{len(answers)} crossings at 3 events in {seconds:.1f} s: {len(answers) / seconds:.1f} a second")
    print(f"by {cores()} processes, as a run does it, {len(answers) / several:.1f} a second")
    print(f"reading the DEM took {100 * clock.seconds / seconds:.0f} % of the time")
    print(f"memory of the screening {most:.0f} MB, of which {few:.0f} MB before the first crossing")
    print(f"failed: {', '.join(failed) or 'none'}")
    print(
        f"crest off by {1000 * np.abs(crest).max():.0f} mm at the most, "
        f"{1000 * np.abs(crest).mean():.0f} mm in the mean; discharge at crest by "
        f"{100 * np.abs(off).max():.1f} % at the most, {100 * np.abs(off).mean():.1f} %"
    )


if __name__ == "__main__":
    number = int(sys.argv[1]) if len(sys.argv) > 1 else 1000
    if len(sys.argv) > 2:
        main(number, Path(sys.argv[2]))
    else:
        with tempfile.TemporaryDirectory() as temporary:
            main(number, Path(temporary))
