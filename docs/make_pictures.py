"""Make the pictures of the README, of the gallery and of the theory page.

Run it in the repository: ``python docs/make_pictures.py``. The pictures of the report page need
Chromium; where there is none, those that are there are kept.
"""

from __future__ import annotations

import io
import os
import shutil
import sys
import tempfile
from pathlib import Path

import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from PIL import Image

from terrain2q import Section, Subarea, run
from terrain2q.output.folder import OutputFolder, read_folder
from terrain2q.output.looks import INK, WALL, WATERS
from terrain2q.output.plots import plot_rating, plot_section

ROOT = Path(__file__).parents[1]
SECTION = "M-200"
"""The section shown: three waters well apart, the largest over both floodplains."""


def section_of(source: OutputFolder, name: str) -> tuple[Section, float]:
    """Return a section of an output folder, and its slope."""
    row = source.layers["sections"].set_index("section_id").loc[name]
    mine = source.layers["subareas"].query("section_id == @name")
    points = [(m, z) for _, _, z, m in _points(row["geometry"])]
    section = Section(
        [m for m, _ in points],
        [z for _, z in points],
        [Subarea(s.start_station, s.end_station, s.n, s.land_class, s.zone) for s in mine.itertuples()],
        units=source.units.name,
        section_id=name,
    )
    return section, float(row["slope"])


def _points(line):
    import shapely

    return shapely.get_coordinates(line, include_z=True, include_m=True).tolist()


def section_picture(source: OutputFolder, name: str = SECTION) -> bytes:
    """Return a section with its water at the design flows, and its rating, as PNG."""
    section, slope = section_of(source, name)
    answers = source.layers["design_stages"].query("section_id == @name")
    flows = dict(zip(answers["event"], answers["discharge"], strict=True))
    figure = Figure(figsize=(11.5, 6.6), layout="constrained")
    FigureCanvasAgg(figure)
    above, below = figure.subplots(2, 1, height_ratios=(5, 4))
    plot_section(
        section, slope=slope, discharges=flows, ax=above, title=f"Section {name}, looking downstream"
    )
    rating = section.rating(slope, 60)
    plot_rating(rating, events=flows, ax=below, title=f"Rating of section {name}")
    memory = io.BytesIO()
    figure.savefig(memory, dpi=110, format="png")
    return smaller(memory.getvalue())


RULES = ("horton", "pavlovskii", "lotter")
_STROKES = {"horton": "-", "pavlovskii": (0, (5, 2)), "lotter": (0, (1.5, 1.5))}


def brushy_channel(composite: str) -> Section:
    """Return the channel of the theory page: a bed of n 0.03 and banks of n 0.08, 10 m wide and 3 m deep."""
    parts = [
        Subarea(0, 6, 0.08, "brush", "channel"),
        Subarea(6, 16, 0.03, "gravel bed", "channel"),
        Subarea(16, 22, 0.08, "brush", "channel"),
    ]
    return Section([0, 6, 16, 22], [3, 0, 0, 3], parts, composite=composite)


def one_n(section: Section, depth: np.ndarray) -> np.ndarray:
    """Return the one n with which the section as a whole carries what it carries."""
    wet = section.geometry(depth)
    return wet.flow_area * wet.hydraulic_radius ** (2 / 3) / section.conveyance(depth)


def composite_picture() -> bytes:
    """Return a channel with rough banks, and the one n that each rule gives it by depth, as PNG."""
    figure = Figure(figsize=(11.0, 3.9), layout="constrained")
    FigureCanvasAgg(figure)
    left, right = figure.subplots(1, 2, width_ratios=(5, 4))
    plot_section(
        brushy_channel("divide"), stages={"full": 3.0}, exaggeration=1.5, ax=left, title="Bed and banks"
    )
    depth = np.linspace(0.02, 3.0, 150)
    for rule, tone in zip(RULES, (INK, WATERS[3], WALL), strict=True):
        label = "Lotter, and dividing" if rule == "lotter" else rule.capitalize()
        n = one_n(brushy_channel(rule), depth)
        right.plot(n, depth, color=tone, ls=_STROKES[rule], lw=2.0, label=label)
    right.set_xlabel("n of the channel as a whole [s/m^(1/3)]", color=INK)
    right.set_ylabel("Depth [m]", color=INK)
    right.set_title("What each rule makes of it", loc="left", color=INK)
    right.set_ylim(0.0, 3.0)
    right.legend(frameon=False, fontsize=9, labelcolor=INK)
    right.grid(color="#ddd6cc", lw=0.6)
    for side in ("top", "right"):
        right.spines[side].set_visible(False)
    memory = io.BytesIO()
    figure.savefig(memory, dpi=100, format="png")
    return smaller(memory.getvalue())


def smaller(png: bytes, colours: int = 256) -> bytes:
    """Return a picture with few colours, as PNG."""
    picture = Image.open(io.BytesIO(png)).convert("RGB")
    # by octree, so that the few warm lines keep their colour beside a large grey map
    picture = picture.quantize(colours, method=Image.Quantize.FASTOCTREE, dither=Image.Dither.NONE)
    memory = io.BytesIO()
    picture.save(memory, "png", optimize=True)
    return memory.getvalue()


def report_pictures(page_file: Path, browser) -> dict[str, bytes]:
    """Return pictures of the report page, by file name, as PNG."""
    # so tall that nothing scrolls, and the bar of events stays in its place
    wide = browser.new_page(viewport={"width": 1180, "height": 6000})
    wide.goto(page_file.as_uri())
    wide.locator("#sections-table tbody button", has_text=SECTION).click()
    wide.locator("h1").click()
    events, rating = wide.locator("#events").bounding_box(), wide.locator("#rating-picture").bounding_box()
    height = rating["y"] + rating["height"] - events["y"] + 12
    clip = {"x": 0, "y": events["y"], "width": 1180, "height": height}
    found = {"report.png": smaller(wide.screenshot(clip=clip))}
    narrow = browser.new_page(viewport={"width": 360, "height": 760})
    narrow.goto(page_file.as_uri())
    narrow.evaluate("scrollTo(0, document.getElementById('events').offsetTop)")
    found["report_narrow.png"] = smaller(narrow.screenshot())
    wide.close()
    narrow.close()
    return found


def main() -> None:
    """Write every picture into the folder of this file."""
    docs = Path(__file__).parent
    (docs / "composite_n.png").write_bytes(composite_picture())
    chromium = shutil.which("chromium") or "/usr/bin/chromium"
    with tempfile.TemporaryDirectory() as folder:
        run(ROOT / "sample_dem" / "study.toml", {"output.folder": folder})
        (docs / "section.png").write_bytes(section_picture(read_folder(folder)))
        if not os.path.exists(chromium):
            print("no chromium here: the pictures of the report page are kept as they are", file=sys.stderr)
            return
        from playwright.sync_api import sync_playwright

        with sync_playwright() as playwright:
            browser = playwright.chromium.launch(
                executable_path=chromium, args=["--no-sandbox", "--disable-gpu"]
            )
            for name, png in report_pictures(Path(folder) / "report.html", browser).items():
                (docs / name).write_bytes(png)
            browser.close()


if __name__ == "__main__":
    main()
