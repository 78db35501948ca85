"""Calculation sheets: pages a second on one core, and memory, for a county of sections.

    python tests/benchmarks/sheets.py [sections]

Prints pages, seconds of work, pages a second of one core, bytes a page, and how far memory rose while the
pages were written. Beside it stands what the same table and lines take as a picture of matplotlib a page.
"""

from __future__ import annotations

import resource
import sys
import tempfile
import time
from pathlib import Path

import matplotlib as mpl
import numpy as np
from matplotlib.backends.backend_pdf import PdfPages
from matplotlib.figure import Figure

sys.path.insert(0, str(Path(__file__).parents[1]))

from _results import US, built, folder_of

from terrain2q.flows import Flow
from terrain2q.output.sheets import write_sheets


def section(number: int):
    """Return a section of 400 points and seven subareas, as a one-metre terrain gives them."""
    random = np.random.default_rng(number)
    x = np.linspace(0.0, 400.0, 400)
    z = 4.0 * np.abs((x - 200.0) / 200.0) ** 1.5 + 0.15 * random.standard_normal(x.size).cumsum() / 8
    z -= 2.5 * np.exp(-(((x - 200.0) / 8.0) ** 2))
    edges = [0.0, 60.0, 120.0, 185.0, 215.0, 260.0, 330.0, 400.0]
    zones = ["left floodplain"] * 3 + ["channel"] + ["right floodplain"] * 3
    parts = [
        (a, b, 0.03 + 0.01 * i, zone, f"class {i}")
        for i, (a, b, zone) in enumerate(zip(edges[:-1], edges[1:], zones, strict=True))
    ]
    return built(f"S-{number:05d}", np.column_stack([x, z]), parts, north=30.0 * number)


def picture_pages(folder: Path, count: int) -> float:
    """Return the pages a second of a page of 260 texts and a line of 400 points drawn by matplotlib."""
    began = time.process_time()
    with PdfPages(folder / "pictures.pdf") as pages:
        for number in range(count):
            figure = Figure(figsize=(8.5, 11))
            figure.add_axes([0.1, 0.6, 0.8, 0.2]).plot(np.arange(400), np.sin(np.arange(400) / 9))
            for i in range(260):
                figure.text(
                    0.05 + 0.09 * (i % 10), 0.55 - 0.02 * (i // 10), f"{number + i * 1.2345:.3f}", size=7
                )
            pages.savefig(figure)
    return count / (time.process_time() - began)


def main(count: int, folder: Path) -> None:
    """Write and time."""
    flows = [Flow("10-year", 60.0), Flow("50-year", 150.0), Flow("100-year", 300.0)]
    source = folder_of([section(i) for i in range(count)], flows, US)
    write_sheets(folder_of([section(0)], flows, US), "all", folder / "warm.pdf")
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    began, work = time.perf_counter(), time.process_time()
    path = write_sheets(source, "all", folder / "sheets.pdf")
    wall, work = time.perf_counter() - began, time.process_time() - work
    rose = (resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before) / 1024
    with path.open("rb") as file:
        pages = file.read().count(b"/Type/Page/")
    print(f"{count} sections, {len(flows)} events: {pages} pages in {wall:.1f} s ({work:.1f} s of work)")
    print(
        f"{pages / work:.0f} pages a second of one core, {path.stat().st_size / pages / 1000:.1f} kB a page"
    )
    print(f"memory rose by {rose:.0f} MB")
    print(f"matplotlib {mpl.__version__}: {picture_pages(folder, 8):.1f} pages a second")


if __name__ == "__main__":
    with tempfile.TemporaryDirectory() as made:
        main(int(sys.argv[1]) if len(sys.argv) > 1 else 500, Path(made))
