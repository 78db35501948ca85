"""The long profile of a stream: bed, fitted slopes, sections, crossings and the water at each event."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import matplotlib.pyplot as plt
import numpy as np
from matplotlib.axes import Axes

from terrain2q.ground.low_line import LowLines
from terrain2q.jobs.design_flows import SectionAnswer
from terrain2q.jobs.slopes import StreamPlaces, StreamSlopes
from terrain2q.output.looks import EARTHS, GROUND_EDGE, INK, WALL, WATER_LINES, WATERS
from terrain2q.units import UnitSystem

_MARKS = ("o", "s", "^", "D", "v")


@dataclass(frozen=True, eq=False)
class LongProfile:
    """One way of a stream from its spring down, in the study's units.

    Attributes
    ----------
    stream : str
    units : UnitSystem
    distance, ground, low, bed : ndarray, shape (n,)
        Stream distance; ground under the drawn line; ground on the lowest path; the same freed of fills and
        pits. NaN for gaps, and between parts that do not join.
    taken_out : tuple of (start, end, height)
        Fills (height above zero) and pits.
    section_id : tuple of str
        In order of distance.
    section_distance, lowest_ground, slope, slope_low, slope_high : ndarray, shape (s,)
        NaN where a section has none; the interval where the slope is that of the stream.
    fitted : tuple of (ndarray, ndarray)
        Distance and elevation of the fitted line in each section's window, where the slope is the stream's.
    waters : mapping of str to ndarray, shape (s,)
        Stage at each section by event, the lowest first; NaN where there is none.
    crossings : tuple of (name, distance, crest)
    """

    stream: str
    units: UnitSystem
    distance: np.ndarray
    ground: np.ndarray
    low: np.ndarray
    bed: np.ndarray
    taken_out: tuple[tuple[float, float, float], ...]
    section_id: tuple[str, ...]
    section_distance: np.ndarray
    lowest_ground: np.ndarray
    slope: np.ndarray
    slope_low: np.ndarray
    slope_high: np.ndarray
    fitted: tuple[tuple[np.ndarray, np.ndarray], ...]
    waters: dict[str, np.ndarray]
    crossings: tuple[tuple[str, float, float], ...] = ()


def long_profiles(
    answers: Sequence[SectionAnswer],
    low_lines: LowLines,
    units: UnitSystem,
    slopes: StreamSlopes | None = None,
    crossings: Sequence[tuple[str, str, float, float]] = (),
) -> list[LongProfile]:
    """Return the long profile of every way of the streams that has sections.

    Parameters
    ----------
    answers : sequence of SectionAnswer
    low_lines : LowLines
        Of the streams the sections were placed by.
    units : UnitSystem
        Of the study.
    slopes : StreamSlopes, optional
        Where the slopes are those of the stream: gives the fitted lines.
    crossings : sequence of (name, stream, stream distance, crest)
        Metres; crest NaN where it is not known.
    """
    places = StreamPlaces(low_lines.network)
    by_chain: dict[int, list[tuple[float, SectionAnswer]]] = {}
    for answer in answers:
        place = places.of(answer.built.line)
        if place is not None:
            by_chain.setdefault(place[0], []).append((place[1], answer))
    streams = {str(low_lines.network.chain_stream[chain]) for chain in by_chain}
    profiles = []
    main: set[str] = set()
    for way in low_lines.ways(streams):
        here = [placed for chain in way for placed in by_chain.get(chain, ())]
        stream = str(low_lines.network.chain_stream[way[0]])
        # A crossing is told by stream and distance only, which the longest way has for itself.
        mine = [c for c in crossings if c[1] == stream] if stream not in main else []
        main.add(stream)
        if here:
            here.sort(key=lambda placed: placed[0])
            profiles.append(_profile(stream, way, here, low_lines, units, slopes, mine))
    return profiles


def _profile(stream, way, placed, low_lines: LowLines, units: UnitSystem, slopes, crossings) -> LongProfile:
    factor = units.per_si("length")
    lines = [line for line in map(low_lines.of, way) if line is not None]
    gap = np.array([np.nan])

    def joined(name: str) -> np.ndarray:
        parts = [part for line in lines for part in (getattr(line, name), gap)]
        return np.concatenate(parts[:-1]) * factor if parts else np.empty(0)

    chosen = [answer for _, answer in placed]
    estimates = [None] * len(chosen)
    fitted = []
    if slopes is not None:
        found = [slopes.found.get(answer.section_id) for answer in chosen]
        estimates = [None if one is None else one.estimate for one in found]
        for one in found:
            if one is not None and one.estimate is not None:
                ends = one.estimate.middle + np.array([-0.5, 0.5]) * one.estimate.length
                fitted.append((ends * factor, one.estimate.line(ends) * factor))
    events = list(dict.fromkeys(event.event for answer in chosen for event in answer.events))
    waters = {
        name: np.array(
            [
                next((e.row.get("stage", np.nan) for e in answer.events if e.event == name), np.nan)
                for answer in chosen
            ]
        )
        * factor
        for name in events
    }
    known = [name for name in events if np.isfinite(waters[name]).any()]
    known.sort(key=lambda name: float(np.nanmean(waters[name])))
    return LongProfile(
        stream,
        units,
        joined("distance"),
        joined("drawn"),
        joined("low"),
        joined("bed"),
        tuple((h.start * factor, h.end * factor, h.height * factor) for line in lines for h in line.humps),
        tuple(answer.section_id for answer in chosen),
        np.array([distance for distance, _ in placed]) * factor,
        np.array([a.built.section.lowest_ground if a.built.section is not None else np.nan for a in chosen])
        * factor,
        np.array([answer.built.slope for answer in chosen]),
        np.array([np.nan if one is None else one.low for one in estimates]),
        np.array([np.nan if one is None else one.high for one in estimates]),
        tuple(fitted),
        {name: waters[name] for name in known},
        tuple((name, distance * factor, crest * factor) for name, _, distance, crest in crossings),
    )


def plot_long_profile(profile: LongProfile, ax: Axes | None = None) -> Axes:
    """Draw a long profile.

    Parameters
    ----------
    profile : LongProfile
    ax : matplotlib.axes.Axes, optional
        Where to draw; a new figure where absent.

    Returns
    -------
    matplotlib.axes.Axes
    """
    if ax is None:
        ax = plt.subplots(figsize=(11, 5.2), layout="constrained")[1]
    unit = profile.units.symbol("length")
    known = np.concatenate([profile.bed, profile.lowest_ground, *profile.waters.values()])
    known = known[np.isfinite(known)]
    low, high = (float(known.min()), float(known.max())) if known.size else (0.0, 1.0)
    relief = max(high - low, 1e-6)
    floor, top = low - 0.10 * relief, high + 0.24 * relief
    ax.fill_between(profile.distance, floor, profile.bed, color=EARTHS[0], lw=0, zorder=1)
    for number, (start, end, _) in enumerate(profile.taken_out):
        part = (profile.distance >= start) & (profile.distance <= end)
        ax.fill_between(
            profile.distance[part], profile.bed[part], profile.low[part], facecolor="none",
            edgecolor=GROUND_EDGE, hatch="////", lw=0.6, zorder=2,
            label=None if number else "fill or pit taken out",
        )  # fmt: skip
    ax.plot(
        profile.distance,
        profile.ground,
        color=EARTHS[3],
        lw=1.1,
        ls=":",
        zorder=2,
        label="ground under the line",
    )
    ax.plot(profile.distance, profile.bed, color=GROUND_EDGE, lw=1.4, zorder=4, label="low line")
    for number, (at, height) in enumerate(profile.fitted):
        label = None if number else "slope of the stream about a section"
        ax.plot(at, height, color=WALL, lw=1.3, ls=(0, (5, 2)), zorder=5, label=label)
    count = len(profile.waters)
    for number, (event, stage) in enumerate(profile.waters.items()):
        # not the palest, which is for areas
        tone = WATERS[1 + round(number * (len(WATERS) - 2) / max(count - 1, 1))]
        ax.plot(
            profile.section_distance, stage, color=tone, lw=1.8, ls=WATER_LINES[number % len(WATER_LINES)],
            marker=_MARKS[number % len(_MARKS)], ms=4.5, mec=INK, mew=0.5, zorder=6, label=event,
        )  # fmt: skip
    lowest = profile.lowest_ground
    ax.plot(profile.section_distance, lowest, ls="", marker="x", ms=6, mew=1.4, color=INK, zorder=7,
            label="lowest ground of a section")  # fmt: skip
    _name_sections(ax, profile, floor, top)
    for number, (name, at, crest) in enumerate(profile.crossings):
        ax.axvline(at, color=WALL, lw=0.9, ls="-.", zorder=3, label=None if number else "crossing")
        if np.isfinite(crest):
            ax.plot([at], [crest], marker="_", ms=16, mew=2.6, color=WALL, zorder=8)
        ax.annotate(
            name, (at, floor), xytext=(3, 4), textcoords="offset points", rotation=90, fontsize=7.5,
            color=WALL, va="bottom", ha="left",
        )  # fmt: skip
    ends = profile.distance[np.isfinite(profile.distance)]
    if ends.size:
        ax.set_xlim(ends.min(), ends.max())
    ax.set_ylim(floor, top)
    ax.set_xlabel(f"Stream distance [{unit}], downstream to the right", color=INK)
    ax.set_ylabel(f"Elevation [{unit}]", color=INK)
    ax.set_title(f"Long profile of {profile.stream}", loc="left", color=INK, fontsize=11)
    ax.spines[["top", "right"]].set_visible(False)
    ax.legend(loc="upper right", fontsize=8, frameon=True, framealpha=0.92, edgecolor="none", ncols=2)
    return ax


def _name_sections(ax: Axes, profile: LongProfile, floor: float, top: float) -> None:
    """Mark the sections, and name as many of them as there is room for."""
    at = profile.section_distance
    ax.vlines(at, floor, top, color=INK, lw=0.5, alpha=0.35, zorder=2)
    ends = profile.distance[np.isfinite(profile.distance)]
    room = (ends.max() - ends.min()) / 60.0 if ends.size else 0.0
    last = -np.inf
    for name, place in zip(profile.section_id, at, strict=True):
        if place - last >= room:
            ax.annotate(
                name, (place, 0.0), xycoords=("data", "axes fraction"), xytext=(-2, 4),
                textcoords="offset points", rotation=90, fontsize=7.5, color=INK, va="bottom", ha="right",
            )  # fmt: skip
            last = place
