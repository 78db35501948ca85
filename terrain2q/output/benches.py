"""Required benches as a layer, as a table to print, and as pictures: each section before and after."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import geopandas
import numpy as np
import pandas as pd
import shapely
from matplotlib.axes import Axes
from matplotlib.backends.backend_pdf import PdfPages
from matplotlib.figure import Figure
from matplotlib.patches import Polygon

from terrain2q.columns import CAUTION, LAYERS, column_title
from terrain2q.errors import FAILED
from terrain2q.hydraulics.section import DepthRoughness, Section, Subarea
from terrain2q.hydraulics.widths import Bench, bench_curve
from terrain2q.jobs.sizing import SizedEvent, SizedSection
from terrain2q.output.layers import table_in_units, to_crs
from terrain2q.output.looks import INK, WALL, WATERS
from terrain2q.output.plots import plot_section
from terrain2q.output.whole_file import whole_file
from terrain2q.units import UnitSystem

LAYER = "required_widths"
PICTURES_NAME = "benches.pdf"

MOST_PAGES = 100
"""So many sections get a page: the first ones that need a bench, and then the others."""

_CURVE_POINTS = 81


def required_widths_layer(
    sized: Sequence[SizedSection], units: UnitSystem, terrain_crs, crs
) -> geopandas.GeoDataFrame:
    """Return the layer ``required_widths``: a row for each side of a section at each event.

    Parameters
    ----------
    sized : sequence of SizedSection
        In SI, in the terrain's CRS.
    units : UnitSystem
        The study's.
    terrain_crs, crs : pyproj.CRS
        Of the profiles' coordinates, and of the layer.
    """
    rows: dict[str, list] = {name: [] for name in LAYERS[LAYER].columns}
    shapes = []
    for one in sized:
        for event in one.events:
            stretches = {} if event.bench is None else {s.side: s for s in event.bench.stretches}
            for side in one.wish.each_side:
                known = {
                    "section_id": one.section_id,
                    "event": event.event,
                    "discharge": event.discharge,
                    "stage": event.stage,
                    "side": side,
                    "width": np.nan if event.bench is None else event.bench.width,
                    "discharge_before": event.discharge_before,
                    "status": event.status,
                }
                for name, values in rows.items():
                    values.append(known[name])
                stretch = stretches.get(side)
                shapes.append(None if stretch is None else _in_plan(one, stretch.start, stretch.end))
    whole = shapely.transform(
        np.array(shapes, dtype=object),
        lambda xy: np.column_stack(to_crs(xy[:, 0], xy[:, 1], terrain_crs, crs)),
    )
    return geopandas.GeoDataFrame(
        table_in_units(LAYER, rows, units), geometry=geopandas.GeoSeries(list(whole), crs=crs)
    )


def _in_plan(one: SizedSection, start: float, end: float) -> shapely.LineString | None:
    """Return the cut line between two stations."""
    start, end = min(start, end), max(start, end)
    profile = one.answer.built.profile
    if not end > start:
        return None
    inside = (profile.stations > start) & (profile.stations < end)
    at = np.concatenate([[start], profile.stations[inside], [end]])
    return shapely.LineString(
        np.column_stack([np.interp(at, profile.stations, v) for v in (profile.x, profile.y)])
    )


# --- what is printed ------------------------------------------------------------------------------


def widths_text(layer: pd.DataFrame, units: UnitSystem) -> str:
    """Return the layer ``required_widths`` as a table: a line for each section, a column for each event."""
    unit = units.symbol("length")
    events, ids = list(dict.fromkeys(layer["event"])), list(dict.fromkeys(layer["section_id"]))
    sides = list(dict.fromkeys(layer["side"]))
    first = {(r.section_id, r.event): r for r in layer.iloc[::-1].itertuples()}
    head = ["section", f"stage [{unit}]", *(f"{event} [{unit}]" for event in events), "status"]
    lines = []
    for name in ids:
        rows = [first.get((name, event)) for event in events]
        known = [r for r in rows if r is not None]
        stage = next((f"{r.stage:.2f}" for r in known if np.isfinite(r.stage)), "-")
        cells = [f"{r.width:.1f}" if r is not None and np.isfinite(r.width) else "-" for r in rows]
        status = {r.status for r in known}
        worst = next((s for s in ("failed", "doubtful", "ok") if s in status), "")
        lines.append([name, stage, *cells, worst])
    widths = [max(len(line[i]) for line in [head, *lines]) for i in range(len(head))]
    where = "on each side" if len(sides) > 1 else f"on the {sides[0]} side" if sides else ""
    text = [f"Width of the bench required {where}, by event:"]
    for cell, *rest in [head, *lines]:
        text.append(
            "  " + cell.ljust(widths[0]) + "  "
            + "  ".join(c.rjust(w) for c, w in zip(rest, widths[1:], strict=True))
        )  # fmt: skip
    return "\n".join(text)


def widths_records(layer: pd.DataFrame) -> list[dict[str, object]]:
    """Return the rows of the layer without their geometry, for ``--json``."""
    return pd.DataFrame(layer.drop(columns="geometry")).to_dict("records")


# --- pictures -------------------------------------------------------------------------------------


def in_units(section: Section, units: UnitSystem) -> Section:
    """Return a section in SI in the study's units."""
    k = units.per_si("length")

    def n_of(n: float | DepthRoughness) -> float | DepthRoughness:
        if not isinstance(n, DepthRoughness):
            return n
        return DepthRoughness(n.shallow, n.shallow_depth * k, n.deep, n.deep_depth * k)

    return Section(
        section.stations * k,
        section.elevations * k,
        [Subarea(s.start * k, s.end * k, n_of(s.n), s.label, s.zone) for s in section.subareas],
        units.name,
        section.connected,
        None if section.origin is None else section.origin * k,
        composite=section.composite,
        section_id=section.section_id,
    )


def write_benches(path: Path, sized: Sequence[SizedSection], units: UnitSystem) -> list[Path]:
    """Write a PDF with a page for each section: before and after, and width against discharge.

    Parameters
    ----------
    path : pathlib.Path
    sized : sequence of SizedSection
        In SI.
    units : UnitSystem
        The study's.

    Returns
    -------
    list of pathlib.Path
        What was written: nothing where no section could be sized.
    """
    shown = [one for one in sized if any(np.isfinite(e.discharge_before) for e in one.events)]
    if not shown:
        return []
    shown = sorted(shown, key=lambda one: not any(e.bench and e.bench.width > 0 for e in one.events))
    with whole_file(path) as temporary:
        with PdfPages(temporary, metadata={"CreationDate": None, "Title": "Required benches"}) as pages:
            for one in shown[:MOST_PAGES]:
                pages.savefig(bench_figure(one, units))
    return [path]


def bench_figure(one: SizedSection, units: UnitSystem) -> Figure:
    """Return the page of one section: the ground before and after, and the curve of width and discharge."""
    figure = Figure(figsize=(11.0, 8.0), layout="constrained")
    above, below = figure.add_gridspec(2, 1, height_ratios=(1.0, 0.85))
    left, right = below.subgridspec(1, 2, width_ratios=(1.25, 1.0))
    _draw_before_and_after(figure.add_subplot(above), one, units)
    _draw_curve(figure.add_subplot(left), one, units)
    _write_numbers(figure.add_subplot(right), one, units)
    figure.supxlabel(CAUTION, fontsize=7, color=INK)
    return figure


def _widest(one: SizedSection) -> SizedEvent | None:
    found = [e for e in one.events if e.bench is not None]
    return max(found, key=lambda e: e.bench.width, default=None)


def _draw_before_and_after(ax: Axes, one: SizedSection, units: UnitSystem) -> None:
    event, k = _widest(one), units.per_si("length")
    before = in_units(one.answer.built.section, units)
    bench = None if event is None else event.bench
    after = before if bench is None else in_units(bench.section, units)
    stage = next(e.stage for e in one.events if np.isfinite(e.stage)) * k
    title = f"{one.section_id}: no bench within the section is wide enough"
    if bench is not None:
        title = f"{one.section_id}: before and after, {event.event}"
        if bench.width == 0:
            title = f"{one.section_id}: passes every flow as it is"
    plot_section(after, stages={"allowed": stage}, ax=ax, title=title)
    if bench is None or bench.width == 0:
        return
    for number, stretch in enumerate(bench.stretches):
        low, high = sorted((stretch.start * k, stretch.end * k))
        ax.add_patch(
            Polygon(
                _between(before, after, low, high), closed=True, fc="none", ec=WALL, hatch="|||", lw=0.0,
                zorder=5, label=None if number else "ground cut away",
            )
        )  # fmt: skip
    reach = [v * k for s in bench.stretches for v in (s.start, s.end)]
    inside = (before.stations >= min(reach)) & (before.stations <= max(reach))
    ax.plot(
        before.stations[inside], before.elevations[inside], color=WALL, lw=1.3, ls=(0, (4, 2)), zorder=7,
        label="ground before",
    )  # fmt: skip
    ax.legend(
        loc="upper left", bbox_to_anchor=(1.0, 1.0), frameon=False, fontsize=8, labelcolor=INK,
    )  # fmt: skip


def _between(before: Section, after: Section, low: float, high: float) -> np.ndarray:
    """Outline of the ground that is cut away between two stations, shape (n, 2)."""
    outline = []
    for section, step in ((before, 1), (after, -1)):
        x, z = section.stations, section.elevations
        inside = (x >= low) & (x <= high)
        points = np.column_stack([x[inside], z[inside]])
        for station, place in ((low, 0), (high, len(points))):
            if not (x == station).any():
                points = np.insert(points, place, [station, np.interp(station, x, z)], axis=0)
        outline.append(points[::step])
    return np.vstack(outline)


def _draw_curve(ax: Axes, one: SizedSection, units: UnitSystem) -> None:
    section, slope = one.answer.built.section, one.answer.built.slope
    k, flow = units.per_si("length"), units.per_si("flow")
    stage = next(e.stage for e in one.events if np.isfinite(e.stage))
    widest = max((e.bench.width for e in one.events if e.bench is not None), default=0.0)
    # where a flow does not pass, the whole curve shows why
    limit = section.length if any(e.bench is None for e in one.events) or widest == 0 else 1.25 * widest
    widths = np.linspace(0.0, limit, _CURVE_POINTS)
    wish = one.wish
    passes = bench_curve(section, widths, stage, slope, one.base, wish.n, wish.sides, wish.side_slope)
    known = np.isfinite(passes)
    ax.plot(widths[known] * k, passes[known] * flow, color=WATERS[3], lw=2.0)
    shown = [e for e in one.events if np.isfinite(e.discharge)]
    for number, event in enumerate(sorted(shown, key=lambda e: e.discharge)):
        level = event.discharge * flow
        ax.axhline(level, color=INK, lw=0.6, ls=(0, (1, 2)))
        ax.annotate(
            event.event, (1.0, level), xycoords=("axes fraction", "data"), xytext=(-3, 2), ha="right",
            textcoords="offset points", fontsize=8, color=INK,
        )  # fmt: skip
        if event.bench is not None:
            mark = "osD^v"[number % 5]
            ax.plot(
                [event.bench.width * k], [level], marker=mark, ms=6, mfc="white", mec=INK, mew=1.3, zorder=5
            )
    each = "on each side" if wish.sides == "both" else f"on the {wish.sides} side"
    ax.set_xlabel(f"Width of the bench {each} [{units.symbol('length')}]", color=INK)
    ax.set_ylabel(column_title("discharge", units), color=INK)
    ax.set_title("Width against discharge at the allowed stage", loc="left", color=INK, fontsize=10)
    ax.set_xlim(left=0.0)
    ax.set_ylim(bottom=0.0)
    ax.grid(color="#ddd6cc", lw=0.6)
    ax.set_axisbelow(True)
    for side in ("top", "right"):
        ax.spines[side].set_visible(False)


def _write_numbers(ax: Axes, one: SizedSection, units: UnitSystem) -> None:
    ax.set_axis_off()
    k, flow, area = (units.per_si(q) for q in ("length", "flow", "area"))
    length, rate = (units.symbol(q) for q in ("length", "flow"))
    first = next(e for e in one.events if np.isfinite(e.stage))
    wish = one.wish
    lines = [
        f"bench at elevation {one.base * k:.2f} {length}, n {wish.n:g}, outer slope {wish.side_slope:g} to 1",
        f"allowed stage {first.stage * k:.2f} {length}, slope {one.answer.built.slope:.4g}",
        f"passes before: {first.discharge_before * flow:,.0f} {rate}",
        "",
    ]
    for event in one.events:
        lines.append(f"{event.event}: {_in_words(event, k, flow, area, length, rate)}")
    ax.text(
        0.0, 1.0, "\n".join(lines), transform=ax.transAxes, va="top", fontsize=8.5, color=INK, linespacing=1.6
    )


def _in_words(event: SizedEvent, k, flow, area, length, rate) -> str:
    if not np.isfinite(event.discharge):
        return "no discharge is given"
    wanted = f"{event.discharge * flow:,.0f} {rate}"
    if event.bench is None:
        if not np.isfinite(event.most):
            return FAILED
        return f"{wanted} does not pass;\n    the most is {event.most * flow:,.0f} {rate}"
    bench: Bench = event.bench
    if bench.width == 0:
        return f"{wanted} passes as it is"
    return (
        f"{wanted}: width {bench.width * k:,.1f} {length},\n"
        f"    {bench.excavation * area:,.0f} {length}³ of ground to cut away per {length} of stream"
    )
