"""Screened crossings for people: a table sorted by rank, a map, and a page of pictures for each crossing.

Pages are drawn and written one by one, and the ground on each is read anew, so that memory does not grow with
the number of crossings.
"""

from __future__ import annotations

import textwrap
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

import numpy as np
import shapely
from matplotlib import patheffects
from matplotlib.axes import Axes
from matplotlib.backends.backend_pdf import PdfPages
from matplotlib.figure import Figure
from matplotlib.patches import Polygon
from matplotlib.ticker import MaxNLocator

from terrain2q.columns import CAUTION
from terrain2q.errors import SEVERITIES
from terrain2q.ground.local_ground import LocalGround
from terrain2q.ground.terrain import Terrain
from terrain2q.hydraulics.section import DepthRoughness, Section, Subarea
from terrain2q.jobs.crossings import OVER, WITHIN, CrossingAnswer, CrossingEvent, CrossingInputs
from terrain2q.output.looks import EARTHS, GROUND_EDGE, INK, WALL, WATER_LINES, WATERS, water_tones
from terrain2q.output.plots import free_places, plot_rating, plot_section
from terrain2q.output.whole_file import whole_file
from terrain2q.units import UnitSystem

PDF_NAME = "crossings.pdf"

ROWS = 34
"""Rows of the table on a page."""

PAGE = (11.0, 8.5)
"""Inches: a letter page on its side; it prints on A4 too."""

NUMBERS_WIDE, FINDINGS_WIDE = 130, 105
"""Letters in a line of the numbers and of the findings below the pictures."""

PLAN_CELLS = 700
"""Most cells of the hillshade along a side; more are thinned out."""

NUMBERED = 150
"""Most crossings whose ranks are written on the map; more would hide it."""

_MARKS = {OVER: ("v", WATERS[4]), WITHIN: ("D", WATERS[2]), "": ("X", WALL)}


def write_crossings_pdf(
    folder: Path, answers: Sequence[CrossingAnswer], inputs: CrossingInputs, panels: int, name: str = ""
) -> Path:
    """Write ``crossings.pdf``: table and map, then a page for each of the first crossings by rank.

    Parameters
    ----------
    folder : path
    answers : sequence of CrossingAnswer
    inputs : CrossingInputs
        What they were made from; its terrain is read for the plans.
    panels : int
        Pages of pictures at the most.
    name : str
        Of the study.

    Returns
    -------
    pathlib.Path
        The file.
    """
    target = Path(folder) / PDF_NAME
    ordered = sorted(answers, key=lambda a: a.rank)
    about = {
        "Title": f"{name or 'Crossings'}: crossings by rank",
        "CreationDate": None,
        "Creator": "terrain2q",
    }
    with whole_file(target) as temporary, PdfPages(temporary, metadata=about) as pdf:
        for start in range(0, max(len(ordered), 1), ROWS):
            pdf.savefig(draw_table(ordered[start : start + ROWS], inputs.units, name))
        pdf.savefig(draw_map(ordered, inputs, name))
        for answer in ordered[:panels]:
            pdf.savefig(draw_panel(answer, inputs, name))
    return target


# --- the table ---------------------------------------------------------------------------------------


def _page(name: str) -> Figure:
    """Return an empty page with what every page says at its foot, as pages are handed on one by one."""
    figure = Figure(figsize=PAGE)
    figure.text(0.04, 0.02, CAUTION, fontsize=6.5, color=INK)
    figure.text(0.97, 0.02, name, fontsize=6.5, color=INK, ha="right")
    return figure


def draw_table(answers: Sequence[CrossingAnswer], units: UnitSystem, name: str = "") -> Figure:
    """Return a page with one line for each crossing, as ordered."""
    figure = _page("")
    ax = figure.add_axes((0.04, 0.06, 0.92, 0.86))
    ax.set_axis_off()
    length, flow = units.symbol("length"), units.symbol("flow")
    heads = [
        "rank", "crossing", "road", "stream", f"crest\n[{length}]", f"discharge at\ncrest [{flow}]",
        "first event\nover", "probability\nin a year", f"freeboard,\nlargest [{length}]",
        "verdict,\nlargest event",
        f"required\nopening [{length}]", "share\nthere", "to know",
    ]  # fmt: skip
    rows = [_table_row(a, units) for a in answers]
    widths = np.array([4, 13, 15, 11, 8, 9, 9, 8, 9, 13, 9, 6, 24], dtype=float)
    left = np.concatenate([[0.0], np.cumsum(widths)[:-1]]) / widths.sum()
    figure.text(
        0.04, 0.95, f"{name + ': ' if name else ''}crossings by rank", fontsize=13, color=INK, va="center"
    )
    top, step = 0.98, 0.92 / ROWS
    for x, head in zip(left, heads, strict=True):
        ax.text(x, top, head, fontsize=6.5, color=INK, va="top", linespacing=1.1, transform=ax.transAxes)
    ax.plot([0, 1], [top - 0.043] * 2, color=INK, lw=0.8, transform=ax.transAxes)
    for number, row in enumerate(rows):
        y = top - 0.062 - number * step
        if number % 2:
            ax.fill_between(
                [0, 1], y - 0.5 * step, y + 0.5 * step, color="#f3eee6", lw=0, transform=ax.transAxes
            )
        for x, width, cell in zip(left, widths, row, strict=True):
            ax.text(
                x, y, _fit(cell, width), fontsize=6.5, color=INK, va="center", transform=ax.transAxes,
            )  # fmt: skip
    ax.set_xlim(0, 1)
    ax.set_ylim(0, 1)
    return figure


def _table_row(answer: CrossingAnswer, units: UnitSystem) -> list[str]:
    length, flow = units.per_si("length"), units.per_si("flow")
    known = [e for e in answer.events if e.values]
    largest = max(known, key=lambda e: e.values["discharge"], default=None)
    values = {} if largest is None else largest.values
    return [
        str(answer.rank),
        answer.crossing.crossing_id,
        answer.crossing.road,
        answer.crossing.stream,
        _number(answer.crest * length, 2),
        _figures(answer.crest_discharge * flow),
        answer.first_event_over or ("none" if known else ""),
        _probability_text(answer),
        _number(values.get("freeboard", np.nan) * length, 2),
        "no answer" if largest is None else largest.verdict,
        _number(values.get("required_opening", np.nan) * length, 1),
        ""
        if not np.isfinite(values.get("opening_share", np.nan))
        else f"{100 * values['opening_share']:.0f} %",
        _to_know(answer),
    ]


def _probability_text(answer: CrossingAnswer) -> str:
    if np.isfinite(answer.crest_probability):
        return f"{answer.crest_probability:.2g}"
    known = sorted((e.values["discharge"], e.values["probability"]) for e in answer.events if e.values)
    known = [(q, p) for q, p in known if np.isfinite(p)]
    if not known or not np.isfinite(answer.crest_discharge):
        return ""
    if answer.crest_discharge < known[0][0]:
        return f"> {known[0][1]:g}"
    return f"< {known[-1][1]:g}" if answer.crest_discharge > known[-1][0] else ""


def _to_know(answer: CrossingAnswer) -> str:
    """Return the codes of its findings, the worst first, without notes."""
    serious = [f for f in answer.findings if f.severity != "note"]
    serious.sort(key=lambda f: SEVERITIES.index(f.severity))
    return ", ".join(dict.fromkeys(f.code for f in serious))


def _fit(text: str, width: float) -> str:
    most = max(3, int(width * 1.45))
    return text if len(text) <= most else text[: most - 1].rstrip() + "…"


def _number(value: float, digits: int) -> str:
    return f"{value:.{digits}f}" if np.isfinite(value) else ""


def _figures(value: float) -> str:
    if not np.isfinite(value):
        return ""
    digits = max(0, 2 - int(np.floor(np.log10(abs(value))))) if value else 0
    return f"{value:,.{digits}f}"


# --- the map -----------------------------------------------------------------------------------------


def draw_map(answers: Sequence[CrossingAnswer], inputs: CrossingInputs, name: str = "") -> Figure:
    """Return a page with every crossing on its streams, numbered by rank, its verdict told by its mark."""
    figure = _page(name)
    ax = figure.add_axes((0.06, 0.09, 0.74, 0.84))
    for line in inputs.network.chains:
        ax.plot(*shapely.get_coordinates(line).T, color=WATERS[2], lw=0.9, zorder=2)
    for answer in answers:
        if answer.road is not None:
            ax.plot(answer.road.x, answer.road.y, color=GROUND_EDGE, lw=1.6, zorder=3)
    shown = [a for a in answers if np.isfinite(a.crossing.x)]
    xy = np.array([[a.crossing.x, a.crossing.y] for a in shown]).reshape(-1, 2)
    if len(xy):
        low, high = xy.min(axis=0), xy.max(axis=0)
        scale = LocalGround(inputs.sections.terrain, *(0.5 * (low + high)), 0.0).scale
        # the page is filled: crossings along one stream would leave a map of a few lines
        box = ax.get_window_extent()
        page = np.array([box.width, box.height])
        span = np.maximum(1.12 * (high - low) * scale, 300.0)
        half = 0.5 * page * (span / page).max() / scale
        middle = 0.5 * (low + high)
        ax.set_xlim(middle[0] - half[0], middle[0] + half[0])
        ax.set_ylim(middle[1] - half[1], middle[1] + half[1])
        ax.set_aspect(float(scale[1] / scale[0]), adjustable="box")
        _scale_and_north(ax, float(scale[0]), inputs.units)
    seen = set()
    for answer, (x, y) in zip(shown, xy, strict=True):
        verdict = _largest_verdict(answer)
        mark, colour = _MARKS.get(verdict, ("o", "white"))
        label = verdict or "no answer"
        ax.plot(
            x, y, marker=mark, ms=7, mfc=colour, mec=INK, mew=1.0, ls="none", zorder=5,
            label=None if label in seen else label,
        )  # fmt: skip
        seen.add(label)
    if len(shown) <= NUMBERED:
        whole = len(shown) <= 15
        texts = [f"{a.rank}  {a.crossing.crossing_id}" if whole else str(a.rank) for a in shown]
        beside = [(6, 5), (-6, 5), (6, -11), (-6, -11), (6, 14), (-6, 14), (6, -20), (-6, -20)]
        places = free_places(ax, xy, texts, 7.0, [beside] * len(xy))
        for text, place, offset in zip(texts, xy, places, strict=True):
            ax.annotate(
                text, place, xytext=offset, textcoords="offset points", fontsize=7, color=INK, zorder=6,
                ha="left" if offset[0] > 0 else "right", annotation_clip=True,
            )  # fmt: skip
    _plain_map(ax)
    figure.text(
        0.06, 0.955, "Crossings, numbered by rank; verdict at the largest event", fontsize=12, color=INK
    )
    figure.text(0.82, 0.11, _crs_text(inputs.sections.terrain), fontsize=6.5, color=INK)
    if seen:
        ax.legend(loc="upper left", bbox_to_anchor=(1.01, 1.0), frameon=False, fontsize=8, labelcolor=INK)
    return figure


def _crs_text(terrain: Terrain) -> str:
    return "\n".join(["coordinates:", *textwrap.wrap(terrain.crs.name, 30)])


def _scale_and_north(ax: Axes, metres: float, units: UnitSystem) -> None:
    """Draw a scale bar and an arrow to the map's north into a map's lower left corner.

    `metres` of ground lie in one unit of the map along x.
    """
    (left, right), (bottom, top) = ax.get_xlim(), ax.get_ylim()
    factor = units.per_si("length")
    room = 0.22 * (right - left) * metres * factor
    size = 10.0 ** np.floor(np.log10(room))
    length = max(size * k for k in (1, 2, 5) if size * k <= room)
    x, y = left + 0.04 * (right - left), bottom + 0.04 * (top - bottom)
    end = x + length / factor / metres
    halo = [patheffects.withStroke(linewidth=3.0, foreground="white")]
    ax.plot([x, end], [y, y], color=INK, lw=2.0, solid_capstyle="butt", zorder=9, path_effects=halo)
    ax.annotate(
        f"{length:,.0f} {units.symbol('length')}", (0.5 * (x + end), y), xytext=(0, 3),
        textcoords="offset points", ha="center", fontsize=7, color=INK, zorder=9, path_effects=halo,
    )  # fmt: skip
    foot = ax.transData.transform((x, y)) + np.array([4.0, 16.0]) * ax.figure.dpi / 72.0
    head = foot + np.array([0.0, 22.0]) * ax.figure.dpi / 72.0
    foot, head = ax.transData.inverted().transform([foot, head])
    ax.annotate(
        "N", head, foot, ha="center", va="top", fontsize=8, color=INK, zorder=9, path_effects=halo,
        arrowprops={"arrowstyle": "-|>", "color": INK, "lw": 1.2, "path_effects": halo},
    )  # fmt: skip


def _largest_verdict(answer: CrossingAnswer) -> str:
    known = [e for e in answer.events if e.values]
    return max(known, key=lambda e: e.values["discharge"]).verdict if known else ""


def _plain_map(ax: Axes) -> None:
    ax.tick_params(labelsize=6, colors=INK)
    ax.ticklabel_format(useOffset=False, style="plain")
    ax.xaxis.set_major_locator(MaxNLocator(5))
    ax.yaxis.set_major_locator(MaxNLocator(5))
    for side in ("top", "right"):
        ax.spines[side].set_visible(False)


# --- one crossing ------------------------------------------------------------------------------------


def draw_panel(answer: CrossingAnswer, inputs: CrossingInputs, name: str = "") -> Figure:
    """Return a page on one crossing: plan, approach section, road with water, rating with the crest."""
    figure = _page(name)
    units = inputs.units
    crossing = answer.crossing
    title = f"{answer.rank}.  {crossing.crossing_id}"
    title += f"   {crossing.road}" if crossing.road and crossing.road not in crossing.crossing_id else ""
    figure.text(0.04, 0.955, title, fontsize=13, color=INK)
    figure.text(0.04, 0.932, f"stream {crossing.stream}" if crossing.stream else "", fontsize=8, color=INK)
    if answer.road is None or answer.approach is None or answer.approach.section is None:
        _reasons(figure, answer)
        return figure
    tones = _tones(answer)
    # first, as it draws the page once to find its scale
    section = figure.add_axes((0.06, 0.235, 0.33, 0.185))
    _draw_section(answer, units, section)
    plan = figure.add_axes((0.06, 0.55, 0.38, 0.365))
    draw_plan(answer, inputs.sections.terrain, units, ax=plan)
    road = figure.add_axes((0.53, 0.635, 0.44, 0.265))
    draw_road(answer, units, tones, inputs.reach, ax=road)
    rating = figure.add_axes((0.63, 0.235, 0.34, 0.225))
    _draw_rating(answer, units, rating)
    _text_block(figure, answer, units)
    return figure


def _tones(answer: CrossingAnswer) -> dict[str, tuple[str, object]]:
    """Tone and stroke of each event, from the lowest water to the highest."""
    known = sorted((e for e in answer.events if e.values), key=lambda e: e.values["stage"])
    return {
        e.event: (tone, WATER_LINES[i % len(WATER_LINES)])
        for i, (e, tone) in enumerate(zip(known, water_tones(len(known)), strict=True))
    }


def draw_plan(answer: CrossingAnswer, terrain: Terrain, units: UnitSystem, ax: Axes) -> Axes:
    """Draw the ground about a crossing as a hillshade, with road, fill, sections and the overflow place."""
    road, crossing = answer.road, answer.crossing
    lines = [
        b.profile for b in (answer.approach, answer.tailwater) if b is not None and b.profile is not None
    ]
    frame = LocalGround(terrain, crossing.x, crossing.y, 0.0)
    near = np.abs(road.stations) <= max(150.0, abs(answer.crest_station) + 20.0)
    places = [np.column_stack([road.x[near], road.y[near]])]
    places += [np.column_stack([p.x, p.y]) for p in lines]
    local = frame.to_local(np.concatenate(places))
    low, high = local.min(axis=0) - 15.0, local.max(axis=0) + 15.0
    # a narrow strip shows too little of the valley
    missing = np.maximum(0.9 * (high - low).max() - (high - low), 0.0)
    low, high = low - 0.5 * missing, high + 0.5 * missing
    ground = LocalGround(terrain, crossing.x, crossing.y, (*low, *high))
    z = ground.elevations
    thin = max(1, int(np.ceil(max(z.shape) / PLAN_CELLS)))
    z = z[::thin, ::thin]
    if min(z.shape) > 2:
        left, top = ground.transform * (0, 0)
        right, bottom = ground.transform * (ground.elevations.shape[1], ground.elevations.shape[0])
        ax.imshow(
            hillshade(z, ground.cell * thin), cmap="gray", vmin=0.0, vmax=1.0,
            extent=(left, right, bottom, top),
            interpolation="bilinear", zorder=1,
        )  # fmt: skip
    for part in shapely.get_parts(road.fill):
        if part.geom_type == "Polygon":
            ax.add_patch(
                Polygon(
                    shapely.get_coordinates(part.exterior),
                    closed=True,
                    fill=False,
                    ec=EARTHS[2],
                    lw=0.8,
                    zorder=3,
                )
            )
    if crossing.line is not None:
        ax.plot(
            *shapely.get_coordinates(crossing.line).T, color=WALL, lw=0.8, ls=(0, (3, 2)), zorder=4,
            label="road as drawn",
        )  # fmt: skip
    ax.plot(road.x, road.y, color=WALL, lw=1.6, zorder=4, label="road as found")
    for built, name in ((answer.approach, "approach section"), (answer.tailwater, "tailwater section")):
        if built is not None and built.profile is not None:
            ax.plot(
                built.profile.x, built.profile.y, color="white", lw=2.6, zorder=5, solid_capstyle="butt",
            )  # fmt: skip
            ax.plot(
                built.profile.x, built.profile.y, color=WATERS[4], lw=1.4, zorder=6,
                ls="-" if name.startswith("approach") else (0, (4, 1.5)), label=name,
            )  # fmt: skip
    ax.plot(
        answer.crest_x, answer.crest_y, marker="v", ms=8, mfc="#f2c14e", mec=INK, ls="none", zorder=8,
        label="where water first passes",
    )  # fmt: skip
    ax.plot(crossing.x, crossing.y, marker="+", ms=9, mec="white", mew=2.0, ls="none", zorder=7)
    (x0, y0), (x1, y1) = ground.to_map(low), ground.to_map(high)
    ax.set_xlim(x0, x1)
    ax.set_ylim(y0, y1)
    ax.set_aspect(float(ground.scale[1] / ground.scale[0]), adjustable="box")
    ax.apply_aspect()
    _scale_and_north(ax, float(ground.scale[0]), units)
    _plain_map(ax)
    ax.legend(
        loc="upper center", bbox_to_anchor=(0.5, -0.06), ncols=3, frameon=False, fontsize=6.5, labelcolor=INK
    )
    return ax


def hillshade(elevations: np.ndarray, cell: float) -> np.ndarray:
    """Return the light on the ground from the north-west, from 0 to 1; NaN in gaps.

    Parameters
    ----------
    elevations : ndarray, shape (rows, columns)
        Row 0 in the north.
    cell : float
        Size of a cell in the unit of the elevations.
    """
    down, right = np.gradient(np.asarray(elevations, dtype=float), cell)
    # twice the true height, so that a low fill can be seen
    right, down = 2.0 * right, 2.0 * down
    altitude = np.radians(45.0)
    toward = np.array([-1.0, 1.0]) / np.sqrt(2.0)  # east, north
    light = np.sin(altitude) + np.cos(altitude) * (-right * toward[0] + down * toward[1])
    return np.clip(light / np.sqrt(1.0 + right**2 + down**2), 0.0, 1.0) * 0.8 + 0.15


def draw_road(answer: CrossingAnswer, units: UnitSystem, tones, most: float, ax: Axes) -> Axes:
    """Draw the road, `most` metres to each side at the most, with the water of each event at the road."""
    road, factor = answer.road, units.per_si("length")
    unit = units.symbol("length")
    reach = max(60.0, 1.25 * abs(answer.crest_station))
    deepest = max((e.values["stage"] for e in answer.events if e.values), default=answer.crest)
    wet = road.stations[road.heights < deepest]
    if wet.size:
        reach = max(reach, 1.1 * float(np.abs(wet).max()))
    reach = min(reach, most)
    near = (np.abs(road.stations) <= reach) & np.isfinite(road.heights)
    s, top, ground = (v[near] * factor for v in (road.stations, road.heights, road.ground))
    bridged = np.zeros(s.size, dtype=bool)
    if road.deck is not None:
        bridged = (s >= road.deck[0] * factor) & (s <= road.deck[1] * factor)
    stages = [e.values["stage"] * factor for e in answer.events if e.values]
    lowest = float(min([np.nanmin(np.minimum(ground, top)), *stages]))
    highest = max(float(top.max()), deepest * factor)
    floor = lowest - 0.1 * (highest - lowest)
    ax.fill_between(s, floor, np.minimum(ground, top), color=EARTHS[1], lw=0, zorder=3)
    ax.plot(s, ground, color=EARTHS[3], lw=0.8, zorder=4, label="ground across the road")
    for event in sorted((e for e in answer.events if e.values), key=lambda e: -e.values["stage"]):
        level = event.values["stage"] * factor
        tone, stroke = tones[event.event]
        ax.fill_between(s, np.minimum(top, level), level, where=top < level, color=tone, lw=0, zorder=2)
        under = bridged & (ground < level)
        ax.fill_between(s, ground, np.minimum(level, top), where=under, color=tone, lw=0, zorder=2)
        ax.axhline(
            level, color=WATERS[4], lw=1.0, ls=stroke, zorder=5, label=f"{event.event}: {level:.2f} {unit}"
        )
    ax.plot(s, top, color=WALL, lw=1.8, zorder=6, label="road surface as found")
    if road.deck is not None:
        ax.plot(s[bridged], top[bridged], color="white", lw=1.0, ls=(0, (2, 2)), zorder=7, label="bridged")
    ax.plot(
        [answer.crest_station * factor], [answer.crest * factor], marker="v", ms=8, mfc="#f2c14e", mec=INK,
        ls="none", zorder=8, label=f"crest: {answer.crest * factor:.2f} {unit}",
    )  # fmt: skip
    ax.axvline(0.0, color=INK, lw=0.5, ls=(0, (1, 2)), zorder=1)
    ax.set_xlim(s[0], s[-1])
    ax.set_ylim(floor, highest + 0.08 * (highest - floor))
    ax.set_title("Road, with water at its upstream edge", loc="left", fontsize=9, color=INK)
    ax.set_xlabel(
        f"Along the road from the stream [{unit}], left to right looking downstream", fontsize=7, color=INK
    )
    ax.set_ylabel(f"Elevation [{unit}]", fontsize=7, color=INK)
    ax.tick_params(labelsize=7, colors=INK)
    for side in ("top", "right"):
        ax.spines[side].set_visible(False)
    ax.legend(
        loc="upper center", bbox_to_anchor=(0.5, -0.17), ncols=4, frameon=False, fontsize=6.5, labelcolor=INK
    )
    return ax


def section_in_units(section: Section, units: UnitSystem) -> Section:
    """Return a section of SI in another system of units."""
    factor = units.per_si("length")
    if factor == 1.0:
        return section

    def roughness(n):
        if isinstance(n, DepthRoughness):
            return replace(n, shallow_depth=n.shallow_depth * factor, deep_depth=n.deep_depth * factor)
        return n

    subareas = [
        Subarea(s.start * factor, s.end * factor, roughness(s.n), s.label, s.zone) for s in section.subareas
    ]
    stations = section.stations * factor
    origin = (
        None if section.origin is None else float(np.clip(section.origin * factor, stations[0], stations[-1]))
    )
    return Section(
        stations, section.elevations * factor, subareas, units=units.name, connected=section.connected,
        origin=origin, composite=section.composite, section_id=section.section_id,
    )  # fmt: skip


def _draw_section(answer: CrossingAnswer, units: UnitSystem, ax: Axes) -> None:
    section = section_in_units(answer.approach.section, units)
    flow = units.per_si("flow")
    discharges = {e.event: e.values["discharge"] * flow for e in answer.events if e.values}
    plot_section(section, slope=answer.slope, discharges=discharges, ax=ax, title="Approach section")
    crest = (answer.crest + answer.slope * answer.to_road) * units.per_si("length")
    ax.axhline(crest, color=WALL, lw=1.0, ls=(0, (5, 2)), zorder=9)
    ax.annotate(
        "crest",
        (0.01, crest),
        xycoords=("axes fraction", "data"),
        fontsize=7,
        color=WALL,
        va="bottom",
        zorder=9,
    )
    low, high = ax.get_ylim()
    ax.set_ylim(low, max(high, crest + 0.05 * (crest - low)))
    _small(ax)
    legend = ax.get_legend()
    for text in (*legend.get_texts(), legend.get_title()) if legend is not None else ():
        text.set_fontsize(6.5)
    for text in ax.texts:
        text.set_fontsize(6.5)


def _draw_rating(answer: CrossingAnswer, units: UnitSystem, ax: Axes) -> None:
    section = section_in_units(answer.approach.section, units)
    length, flow = units.per_si("length"), units.per_si("flow")
    lift = answer.slope * answer.to_road
    known = [e for e in answer.events if e.values]
    top = max([answer.crest, *(e.values["stage"] for e in known)]) + lift
    low = answer.approach.section.lowest_ground
    rating = section.rating(answer.slope, (low + (top - low) * 1.08 * np.linspace(0.02, 1.0, 60)) * length)
    # at the road, as the crest is
    rating["stage"] = rating["stage"] - lift * length
    plot_rating(
        rating,
        events={e.event: e.values["discharge"] * flow for e in known},
        marks={"crest": answer.crest * length} if answer.crest + lift > low else None,
        units=units.name,
        ax=ax,
        title="Rating at the road",
    )
    _small(ax)


def _small(ax: Axes) -> None:
    ax.tick_params(labelsize=7, colors=INK)
    ax.xaxis.label.set_size(7)
    ax.yaxis.label.set_size(7)
    ax.title.set_size(9)
    ax.set_title(ax.get_title(loc="left"), loc="left", fontsize=9, color=INK)


def _event_line(event: CrossingEvent, units: UnitSystem) -> str:
    v = event.values
    if not v:
        return f"{event.event}: no answer"
    length, unit = units.per_si("length"), units.symbol("length")
    flow, flow_unit = units.per_si("flow"), units.symbol("flow")
    text = (
        f"{event.event}: {_figures(v['discharge'] * flow)} {flow_unit}, stage {v['stage'] * length:.2f} "
        f"{unit}, freeboard {v['freeboard'] * length:+.2f} {unit}: {event.verdict}"
    )
    if v["largest_depth_on_road"] > 0:
        text += (
            f"; {v['road_width_under_water'] * length:.0f} {unit} of road under up to "
            f"{v['largest_depth_on_road'] * length:.2f} {unit}, weir "
            f"{_figures(v['weir_discharge'] * flow)} {flow_unit}"
        )
    if np.isfinite(v["required_opening"]):
        text += f"; required opening {v['required_opening'] * length:.1f} {unit}"
    if np.isfinite(v["opening_share"]):
        text += f", {100 * v['opening_share']:.0f} % of it there"
    return text


def _text_block(figure: Figure, answer: CrossingAnswer, units: UnitSystem) -> None:
    """Write the numbers below the pictures on the left, and the findings on the right."""
    length, flow = units.per_si("length"), units.per_si("flow")
    unit, flow_unit = units.symbol("length"), units.symbol("flow")
    lines = []
    if np.isfinite(answer.crest_discharge):
        lines = [
            f"Crest {answer.crest * length:.2f} {unit}, reached at "
            f"{_figures(answer.crest_discharge * flow)} {flow_unit} "
            f"(probability {_probability_text(answer) or 'not known'}); first event over: "
            f"{answer.first_event_over or 'none'}",
            *textwrap.wrap(
                f"Slope {answer.slope:.5f}, {answer.slope_source}; approach section "
                f"{answer.to_road * length:.0f} {unit} upstream",
                NUMBERS_WIDE,
            ),
        ]
    top, step, foot = 0.17, 0.0145, 0.035
    room = int((top - foot) / step) - len(lines)
    # the larger the event, the more it matters whether there is room for it
    known = sorted((e for e in answer.events if e.values), key=lambda e: -e.values["discharge"])
    texts = [_event_line(e, units) for e in (*known, *(e for e in answer.events if not e.values))]
    wrapped = [textwrap.wrap(text, NUMBERS_WIDE, subsequent_indent="    ") for text in texts]
    shown = 0
    while wrapped and sum(map(len, wrapped[: shown + 1])) <= room - (shown + 1 < len(wrapped)):
        shown += 1
        if shown == len(wrapped):
            break
    lines += [line for text in wrapped[:shown] for line in text]
    if shown < len(wrapped):
        lines.append(f"… and {len(wrapped) - shown} smaller events in crossings.csv")
    figure.text(0.04, top, "\n".join(lines), fontsize=6.2, color=INK, va="top", linespacing=1.3)
    found = [textwrap.wrap(text, FINDINGS_WIDE, subsequent_indent="    ") for text in _finding_texts(answer)]
    room = int((top - foot) / (0.93 * step))
    lines, number = [], 0
    for number, text in enumerate(found):
        if len(lines) + len(text) > room - (number + 1 < len(found)):
            lines.append(f"… and {len(found) - number} more in the layer findings")
            break
        lines += text
    figure.text(0.56, top, "\n".join(lines), fontsize=6.0, color=INK, va="top", linespacing=1.3)


def _finding_texts(answer: CrossingAnswer) -> list[str]:
    """Return what was found at a crossing, the worst first."""
    found = sorted(answer.findings, key=lambda f: SEVERITIES.index(f.severity))
    return [f"{f.severity}: {f.message} [{f.code}]" for f in found]


def _reasons(figure: Figure, answer: CrossingAnswer) -> None:
    """Write why a crossing has no answer on its page, which has no pictures."""
    lines = ["No answer at any event.", ""]
    for text in _finding_texts(answer):
        lines += textwrap.wrap(text, 130, subsequent_indent="    ")
    figure.text(0.04, 0.89, "\n".join(lines[:60]), fontsize=8, color=INK, va="top", linespacing=1.4)
