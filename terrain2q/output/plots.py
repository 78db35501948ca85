"""Pictures of a section and of its rating.

Subareas are told apart by hatching and by their label as well as by tone, water at several events by
tone, by its line and by its label; every picture can be read in grey.
"""

from __future__ import annotations

from collections.abc import Mapping
from itertools import cycle, pairwise
from types import MappingProxyType

import matplotlib.pyplot as plt
import numpy as np
from matplotlib.axes import Axes
from matplotlib.patches import Polygon
from matplotlib.ticker import MaxNLocator
from scipy.optimize import isotonic_regression

from terrain2q.columns import column_title
from terrain2q.errors import InputError
from terrain2q.hydraulics.section import DepthRoughness, FlowPath, Section
from terrain2q.output.looks import EARTHS, EXAGGERATIONS, GROUND_EDGE, HATCHES, INK, WALL, WATER_LINES, WATERS
from terrain2q.units import unit_system

_NARROW = 0.055
"""A subarea narrower than this share of the section has its n written upright."""

_UPRIGHT = 0.024
"""Room for an upright label, as a share of the section's width."""

_ROOMY = 5.0
"""Inches of width below which labels need a larger share of the picture."""

_PAPER = MappingProxyType({"boxstyle": "round,pad=0.15", "fc": "white", "ec": "none", "alpha": 0.8})


def plot_section(
    section: Section,
    *,
    slope: float | None = None,
    discharges: Mapping[str, float] | None = None,
    stages: Mapping[str, float] | None = None,
    exaggeration: float | None = None,
    ax: Axes | None = None,
    title: str | None = None,
) -> Axes:
    """Draw the ground of a section, its subareas with their n, and the water.

    Parameters
    ----------
    section : Section
    slope : float, optional
        Energy slope; needed with `discharges`.
    discharges : mapping of str to float, optional
        Events and their discharges: the water of each stands at its normal stage, in each flow path at
        that path's own. Hollows that it does not reach stay dry.
    stages : mapping of str to float, optional
        Events and their stages, in place of discharges.
    exaggeration : float, optional
        How many times the vertical scale is larger than the horizontal one; one that fits is chosen
        where absent. It is written below the picture.
    ax : matplotlib.axes.Axes, optional
        Where to draw; a new figure where absent.
    title : str, optional
        The section's id where absent.

    Returns
    -------
    matplotlib.axes.Axes

    Raises
    ------
    InputError
        ``key-missing``: discharges without a slope.
    """
    waters = _waters(section, slope, discharges, stages)
    if ax is None:
        ax = plt.subplots(figsize=(10, 4.6), layout="constrained")[1]
    x, z = section.stations, section.elevations
    unit = section.system.symbol("length")
    level = max([z.max(), *(p.stage for _, paths in waters for p in paths)])
    low = float(z.min())
    relief = max(level - low, 1e-6)
    floor = low - 0.42 * relief
    _draw_water(ax, section, waters)
    _draw_subareas(ax, section, floor, relief)
    ax.plot(x, z, color=GROUND_EDGE, lw=1.8, solid_joinstyle="round", zorder=6)
    _draw_walls(ax, section, waters)
    beside = 0.006 * (x[-1] - x[0])
    ax.set_xlim(x[0] - beside, x[-1] + beside)
    ax.set_ylim(floor, level + 0.08 * relief)
    ax.set_xlabel(f"Station [{unit}], from left to right looking downstream", color=INK)
    ax.set_ylabel(f"Elevation [{unit}]", color=INK)
    ax.yaxis.set_major_locator(MaxNLocator(6))
    ax.set_title(title if title is not None else section.section_id, loc="left", color=INK)
    for side in ("top", "right"):
        ax.spines[side].set_visible(False)
    _set_exaggeration(ax, exaggeration)
    if waters:
        ax.legend(
            loc="upper left", bbox_to_anchor=(1.0, 1.0), frameon=False, fontsize=8, labelcolor=INK,
            title="Water surface", title_fontsize=8,
        )  # fmt: skip
    return ax


def plot_rating(
    rating,
    *,
    events: Mapping[str, float] | None = None,
    marks: Mapping[str, float] | None = None,
    units: str | None = None,
    ax: Axes | None = None,
    title: str | None = None,
) -> Axes:
    """Draw a stage-discharge rating.

    Parameters
    ----------
    rating : pandas.DataFrame
        With columns ``stage`` and ``discharge``, as :meth:`Section.rating` gives it. Between the two
        rows of a bank's top the line is level and dashed: the hollow behind the bank is filling.
    events : mapping of str to float, optional
        Discharges to mark.
    marks : mapping of str to float, optional
        Stages to mark, such as the crest of a road.
    units : str, optional
        ``si`` or ``us``; as the rating says where absent.
    ax : matplotlib.axes.Axes, optional
        Where to draw; a new figure where absent.
    title : str, optional

    Returns
    -------
    matplotlib.axes.Axes
    """
    system = unit_system(units or rating.attrs.get("units", "si"))
    if ax is None:
        ax = plt.subplots(figsize=(5.6, 4.6), layout="constrained")[1]
    stage, discharge = rating["stage"].to_numpy(float), rating["discharge"].to_numpy(float)
    fills = np.flatnonzero(stage[1:] == stage[:-1])
    edges = [0, *(fills + 1), stage.size]
    for start, end in pairwise(edges):
        ax.plot(discharge[start:end], stage[start:end], color=WATERS[3], lw=2.0, solid_capstyle="round")
    for number, i in enumerate(fills):
        ax.plot(
            discharge[i : i + 2], stage[i : i + 2], color=WATERS[3], lw=1.6, ls=(0, (2.5, 1.5)),
            label="a hollow behind a bank fills" if number == 0 else None,
        )  # fmt: skip
    shown = {name: flow for name, flow in (events or {}).items() if discharge[0] <= flow <= discharge[-1]}
    if shown:
        # the whole rating may reach far above any event: show what they need
        most = 1.35 * max(shown.values())
        ax.set_xlim(right=most)
        highest = max([float(np.interp(most, discharge, stage)), *(marks or {}).values()])
        ax.set_ylim(top=stage[0] + 1.06 * (highest - stage[0]))
    ax.set_xlim(left=0)
    ordered = sorted(shown.items(), key=lambda item: item[1])
    places = [(flow, float(np.interp(flow, discharge, stage))) for _, flow in ordered]
    below, aside = [(4, -14), (4, -25)], [(4, -36), (-4, 6), (-4, 17), (8, -3)]
    choices = [[*(below if k % 2 == 0 else below[::-1]), *aside] for k in range(len(places))]
    names = [name for name, _ in ordered]
    offsets = free_places(ax, places, names, 8.0, choices, list((marks or {}).values()))
    for (name, _), (flow, at), offset in zip(ordered, places, offsets, strict=True):
        ax.plot([flow], [at], marker="o", ms=5.5, mfc="white", mec=INK, mew=1.3, zorder=5)
        ax.annotate(
            name, (flow, at), xytext=offset, textcoords="offset points", fontsize=8, color=INK,
            ha="left" if offset[0] > 0 else "right",
            arrowprops={"arrowstyle": "-", "color": INK, "lw": 0.5, "shrinkB": 3},
        )  # fmt: skip
    for name, level in (marks or {}).items():
        ax.axhline(level, color=WALL, lw=1.1, ls=(0, (5, 2)))
        ax.annotate(
            name, (1.0, level), xycoords=("axes fraction", "data"), xytext=(-4, 3), ha="right",
            textcoords="offset points", fontsize=8, color=WALL,
        )  # fmt: skip
    if fills.size:
        ax.legend(frameon=False, fontsize=8, loc="lower right", labelcolor=INK)
    ax.set_xlabel(column_title("discharge", system), color=INK)
    ax.set_ylabel(column_title("stage", system), color=INK)
    ax.set_title(title or "", loc="left", color=INK)
    ax.grid(color="#ddd6cc", lw=0.6)
    ax.set_axisbelow(True)
    for side in ("top", "right"):
        ax.spines[side].set_visible(False)
    return ax


def free_places(
    ax: Axes, places, texts, size: float, offsets, levels=(), mark: float = 3.5
) -> list[tuple[float, float]]:
    """Return where labels may stand beside their points without lying over each other.

    Parameters
    ----------
    ax : matplotlib.axes.Axes
        Its limits are as they will be drawn.
    places : sequence of (float, float)
        Points in the units of the axes.
    texts : sequence of str
    size : float
        Of the letters, in points.
    offsets : sequence of sequence of (float, float)
        For each point where its label may be, in points from it, the best first: its lower left corner where
        the first number is positive, else its lower right corner.
    levels : sequence of float
        Level lines that labels keep clear of.
    mark : float
        Half the size of the marks at the points, in points.

    Returns
    -------
    list of (float, float)
        One of the offsets for each point: the first that is free, else the one that lies over the least.
    """
    if not len(places):
        return []
    frame = ax.get_window_extent()
    point = ax.figure.dpi / 72.0
    xy = ax.transData.transform(np.asarray(places, dtype=float)) / point
    bounds = np.array([frame.x0, frame.y0, frame.x1, frame.y1]) / point
    taken = [(x - mark, y - mark, x + mark, y + mark) for x, y in xy]
    for level in levels:
        y = ax.transData.transform((0.0, level))[1] / point
        taken.append((bounds[0], y - 1.0, bounds[2], y + 1.0))
    chosen = []
    for (x, y), text, choices in zip(xy, texts, offsets, strict=True):
        width, height = 0.62 * size * len(text), 1.15 * size
        found = []
        for number, (dx, dy) in enumerate(choices):
            left = x + dx if dx > 0 else x + dx - width
            box = np.array([left, y + dy, left + width, y + dy + height])
            out = np.maximum(bounds[:2] - box[:2], 0.0).sum() + np.maximum(box[2:] - bounds[2:], 0.0).sum()
            hidden = sum(_shared(box, other) for other in taken) + out * size
            found.append((hidden, number, box))
        _, number, box = min(found, key=lambda f: f[:2])
        taken.append(tuple(box))
        chosen.append(choices[number])
    return chosen


def _shared(a, b) -> float:
    """Area that two boxes share."""
    return max(min(a[2], b[2]) - max(a[0], b[0]), 0.0) * max(min(a[3], b[3]) - max(a[1], b[1]), 0.0)


def _waters(section, slope, discharges, stages) -> list[tuple[str, list[FlowPath]]]:
    """Return the paths of each event, the lowest water first."""
    waters = []
    if discharges:
        if slope is None:
            raise InputError(
                "key-missing", "discharges are given without a slope", where="plot", fix="give slope="
            )
        waters += [(name, section.flow_paths(q, slope)) for name, q in discharges.items()]
    for name, stage in (stages or {}).items():
        waters.append((name, section.water_at(stage)))
    return sorted(waters, key=lambda w: w[1][0].stage if w[1] else -np.inf)


def _surface(section: Section, path: FlowPath) -> np.ndarray:
    """Outline of one path's water, shape (n, 2)."""
    ground = _ground_between(section, path.start, path.end)
    ground[:, 1] = np.minimum(ground[:, 1], path.stage)
    top = np.array([[path.end, path.stage], [path.start, path.stage]])
    return np.vstack([ground, top])


def _ground_between(section: Section, start: float, end: float) -> np.ndarray:
    """Ground from one station to another with vertical faces at both, shape (n, 2)."""
    x, z = section.stations, section.elevations
    inside = (x >= start) & (x <= end)
    ground = np.column_stack([x[inside], z[inside]])
    if not (x == start).any():
        ground = np.vstack([[start, np.interp(start, x, z)], ground])
    if not (x == end).any():
        ground = np.vstack([ground, [end, np.interp(end, x, z)]])
    return ground


def _draw_water(ax: Axes, section: Section, waters) -> None:
    tones = np.linspace(0, len(WATERS) - 1, max(len(waters), 2)).round().astype(int)
    unit = section.system.symbol("length")
    for order, (name, paths) in reversed(list(enumerate(waters))):
        style = WATER_LINES[order % len(WATER_LINES)]
        for number, path in enumerate(paths):
            ax.add_patch(
                Polygon(_surface(section, path), closed=True, fc=WATERS[tones[order]], ec="none", zorder=2)
            )
            label = f"{name}: {path.stage:.2f} {unit}" if number == 0 else None
            ax.plot(
                [path.start, path.end],
                [path.stage] * 2,
                color=WATERS[4],
                lw=1.1,
                ls=style,
                label=label,
                zorder=4,
            )


def _draw_subareas(ax: Axes, section: Section, floor: float, relief: float) -> None:
    x = section.stations
    looks = {}
    # the two cycles have no common length, so that a pair of tone and hatching comes back late
    fresh = zip(cycle(EARTHS), cycle(HATCHES), strict=False)
    width = x[-1] - x[0]
    # letters do not shrink with the picture
    crowded = max(1.0, _ROOMY / (ax.get_window_extent().width / ax.figure.dpi))
    narrow = []
    for number, subarea in enumerate(section.subareas):
        key = (subarea.label, str(subarea.n), subarea.zone)
        if key not in looks:
            looks[key] = next(fresh)
        tone, hatch = looks[key]
        start, end = max(subarea.start, x[0]), min(subarea.end, x[-1])
        edge = _ground_between(section, start, end)
        outline = np.vstack([edge, [[end, floor], [start, floor]]])
        ax.add_patch(Polygon(outline, closed=True, fc=tone, ec="#9b8a70", hatch=hatch, lw=0.0, zorder=3))
        if number:
            ax.plot(
                [start, start],
                [floor, edge[edge[:, 0] == start, 1].min()],
                color=GROUND_EDGE,
                lw=0.7,
                zorder=5,
            )
        share = (end - start) / width
        text = _n_text(subarea.n)
        if share < crowded * _NARROW:
            narrow.append((0.5 * (start + end), text))
            continue
        wide = share > 0.085 * crowded
        if subarea.label and wide:
            text = f"{_short(subarea.label, share)}\n{text}"
        ax.annotate(
            text,
            (0.5 * (start + end), floor + 0.03 * relief),
            ha="center", va="bottom", fontsize=7.5, color=INK, zorder=7, bbox=_PAPER,
        )  # fmt: skip
    _label_narrow(ax, narrow, floor, relief, x[0], width, crowded * _UPRIGHT)


def _label_narrow(ax: Axes, narrow, floor, relief, left: float, width: float, apart: float) -> None:
    """Write the n of narrow subareas upright, moved apart where they would meet, a line to each place."""
    if not narrow:
        return
    gap = apart * width
    places = np.array([place for place, _ in narrow])
    steps = gap * np.arange(places.size)
    # the least moves that keep every two a gap apart: rising values nearest to these
    moved = isotonic_regression(places - steps).x + steps
    moved += min(0.0, left + width - 0.5 * gap - moved[-1])
    moved += max(0.0, left + 0.5 * gap - moved[0])
    for (place, text), at in zip(narrow, moved, strict=True):
        ax.annotate(
            text, (place, floor + 0.36 * relief), (at, floor + 0.05 * relief), ha="center", va="bottom",
            fontsize=7.5, color=INK, zorder=7, rotation=90, bbox=_PAPER,
            arrowprops={"arrowstyle": "-", "color": INK, "lw": 0.5, "shrinkA": 0, "shrinkB": 0},
        )  # fmt: skip


def _short(label: str, share: float) -> str:
    room = max(8, int(110 * share))
    return label if len(label) <= room else label[: room - 1].rstrip() + "…"


def _n_text(n: float | DepthRoughness) -> str:
    if isinstance(n, DepthRoughness):
        return f"n {n.shallow:.3g} to {n.deep:.3g}"
    return f"n {n:.3g}"


def _draw_walls(ax: Axes, section: Section, waters) -> None:
    """Draw the imagined walls at the ends of the section that water stands against."""
    x, z = section.stations, section.elevations
    drawn = False
    for station, ground in ((x[0], z[0]), (x[-1], z[-1])):
        tops = [
            p.stage for _, paths in waters for p in paths if station in (p.start, p.end) and p.stage > ground
        ]
        if tops:
            ax.plot(
                [station] * 2, [ground, max(tops)], color=WALL, lw=3.2, ls=(0, (1.2, 0.8)), zorder=8,
                clip_on=False, label=None if drawn else "imagined wall at the end",
            )  # fmt: skip
            drawn = True


def _set_exaggeration(ax: Axes, exaggeration: float | None) -> None:
    """Set or find the ratio of the scales, and write it below the picture."""
    if exaggeration is not None:
        ax.set_aspect(exaggeration, adjustable="box")
        shown = exaggeration
    else:
        ax.get_figure(root=True).draw_without_rendering()
        box = ax.get_window_extent()
        (left, right), (bottom, top) = ax.get_xlim(), ax.get_ylim()
        fits = (box.height / (top - bottom)) / (box.width / (right - left))
        shown = max((e for e in EXAGGERATIONS if e <= fits), default=float(f"{fits:.1g}"))
        ax.set_aspect(shown, adjustable="box")
    ax.annotate(
        f"vertical scale {shown:g} times the horizontal", (1.0, 1.01), xycoords="axes fraction",
        ha="right", va="bottom", fontsize=7.5, color=INK,
    )  # fmt: skip
