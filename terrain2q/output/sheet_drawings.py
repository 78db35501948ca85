"""Plan and section of a calculation sheet, in the look of the other pictures."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import shapely

from terrain2q.output.calculation import Stretch, outline
from terrain2q.output.looks import EARTHS, EXAGGERATIONS, GROUND_EDGE, HATCHES, INK, WALL, WATERS
from terrain2q.output.pdf import Page, text_width
from terrain2q.output.sheet_layout import GREY, RULE, fitted, roughness_text

_DASHES = ((), (6, 2), (2, 1.5), (7, 2, 1.5, 2), (1, 1))


@dataclass(frozen=True)
class Water:
    """Water of one event in a section: its name, stage, stretches and area, and how it is drawn."""

    event: str
    stage: float
    stretches: tuple[Stretch, ...]
    area: float
    tone: str
    dash: Sequence[float] = ()


def stroke(order: int) -> Sequence[float]:
    """Return the dashes of the `order`-th event's surface."""
    return _DASHES[order % len(_DASHES)]


# --------------------------------------------------------------------------------------------------
# The section


def draw_section(
    page: Page,
    left: float,
    top: float,
    width: float,
    height: float,
    profile: np.ndarray,
    subareas: Sequence[Mapping[str, Any]],
    waters: Sequence[Water],
    unit: str,
    marks: Mapping[str, float] | None = None,
    along: str = "",
) -> float:
    """Draw ground, subareas and water; return the height used.

    Parameters
    ----------
    page : Page
    left, top, width, height : float
        The room, in points.
    profile : ndarray, shape (n, 4)
        x, y, elevation and station.
    subareas : sequence of mapping
        Rows of `subareas`; the ground has one tone where there are none.
    waters : sequence of Water
        The lowest first.
    unit : str
        Of length.
    marks : mapping of str to float, optional
        Levels to mark, such as the crest of a road.
    along : str, optional
        What stands below the axis, where it is not the stations of a section.
    """
    marks = marks or {}
    station, z = profile[:, 3], profile[:, 2]
    levels = [s.stage for w in waters for s in w.stretches] + [v for v in marks.values() if np.isfinite(v)]
    low, high = float(z.min()), float(max([z.max(), *levels]))
    relief, span = max(high - low, 1e-6), max(float(np.ptp(station)), 1e-6)
    floor, ceiling = low - 0.34 * relief, high + 0.06 * relief
    x0, x1, y1 = left + 40, left + width - 132, top - 12
    across = (x1 - x0) / span
    most = (height - 40) / (ceiling - floor)
    exaggeration = max((e for e in EXAGGERATIONS if e * across <= most), default=most / across)
    up = exaggeration * across
    y0 = y1 - (ceiling - floor) * up

    def place(points: np.ndarray) -> np.ndarray:
        return np.column_stack([x0 + (points[:, 0] - station[0]) * across, y0 + (points[:, 1] - floor) * up])

    page.clip(x0, y0, x1 - x0, y1 - y0)
    for water in reversed(waters):
        for stretch in water.stretches:
            page.area(_thin(place(outline(profile, stretch))), water.tone)
    line = np.column_stack([station, z])
    if not subareas:
        page.area(
            _thin(place(np.vstack([line, [[station[-1], floor], [station[0], floor]]]))), EARTHS[0]
        )  # fmt: skip
    _subareas(page, line, subareas, place, floor, across)
    page.line(_thin(place(line)), 1.5, GROUND_EDGE)
    page.unclip()
    for water in waters:
        for stretch in water.stretches:
            ends = place(np.array([[stretch.start, stretch.stage], [stretch.end, stretch.stage]]))
            page.line(ends, 0.9, WATERS[4], water.dash)
    _walls(page, profile, waters, place)
    for name, level in marks.items():
        if np.isfinite(level):
            y = y0 + (level - floor) * up
            page.line([(x0, y), (x1, y)], 0.9, WALL, (5, 2))
            wide = text_width(name, 6.3)
            page.box(x1 - wide - 4, y + 0.8, wide + 4, 7.4, "#ffffff")
            page.text(x1 - 2, y + 2.4, name, 6.3, colour=WALL, align="right")
    along = along or f"Station [{unit}], from left to right looking downstream"
    _axes(page, (x0, y0, x1, y1), (station[0], station[-1]), (floor, ceiling), low, unit, along)
    page.text(
        x1, y1 + 4, f"vertical scale {exaggeration:.3g} times the horizontal", 6.3, colour=GREY, align="right"
    )
    _legend(page, x1 + 10, y1 - 6, waters, unit)
    return top - (y0 - 26)


def _thin(points: np.ndarray) -> np.ndarray:
    """Return points without those that print would not show."""
    if len(points) < 8:
        return points
    return shapely.get_coordinates(shapely.linestrings(points).simplify(0.15, preserve_topology=False))


def _subareas(page: Page, line: np.ndarray, subareas, place, floor: float, across: float) -> None:
    looks: dict[tuple, int] = {}
    x, z = line[:, 0], line[:, 1]
    base = float(place(np.array([[x[0], floor]]))[0, 1])
    middles = []
    for row in subareas:
        # the same look for the same ground, as in the report
        look = looks.setdefault((row["land_class"], row["n"], row["zone"]), len(looks))
        start, end = max(row["start_station"], x[0]), min(row["end_station"], x[-1])
        if not end > start:
            continue
        inside = (x > start) & (x < end)
        ends = np.interp([start, end], x, z)
        edge = np.vstack([[start, ends[0]], line[inside], [end, ends[1]]])
        bottom = [[end, floor], [start, floor]]
        tone, hatch = EARTHS[look % len(EARTHS)], HATCHES[look % len(HATCHES)]
        points = place(np.vstack([edge, bottom]))
        page.area(_thin(points), tone, hatch)
        page.line([points[0], points[-1]], 0.5, GROUND_EDGE)
        middles.append((row, (end - start) * across, 0.5 * (points[0, 0] + points[-2, 0])))
    last = -math.inf
    for row, width, middle in middles:
        # labels: as much as the width has room for, two rows where neighbours would meet
        number, n = str(int(row["subarea"])), f"n {roughness_text(row['n'])}"
        texts = [number, n] if width > text_width(n, 6.2) + 3 else [number]
        half = 0.5 * max(text_width(t, 6.2) for t in texts) + 1
        y = base + (3 if middle - half > last else 12)
        if middle - half > last:
            last = middle + half
        for text in reversed(texts):
            wide = text_width(text, 6.2)
            page.box(middle - 0.5 * wide - 1, y - 1.2, wide + 2, 7.2, "#ffffff")
            page.text(middle, y, text, 6.2, colour=INK, align="center")
            y += 7.6


def _walls(page: Page, profile: np.ndarray, waters: Sequence[Water], place) -> None:
    for end, ground in (
        (profile[0, 3], profile[0, 2]),
        (profile[-1, 3], profile[-1, 2]),
    ):
        tops = [
            s.stage
            for w in waters
            for s in w.stretches
            if abs(end - s.start) < 1e-6 * max(1.0, abs(end)) or abs(end - s.end) < 1e-6 * max(1.0, abs(end))
        ]
        if tops and max(tops) > ground:
            page.line(place(np.array([[end, ground], [end, max(tops)]])), 2.6, WALL, (1.6, 1.0))


def nice_steps(low: float, high: float, about: int) -> list[float]:
    """Return round numbers from `low` to `high`.

    Examples
    --------
    >>> nice_steps(803.2, 811.9, 4)
    [805.0, 810.0]
    """
    rough = (high - low) / max(about, 1)
    power = 10.0 ** math.floor(math.log10(rough))
    step = next(s * power for s in (1, 2, 5, 10) if s * power >= rough * 0.999)
    first, last = math.ceil(low / step - 1e-9), math.floor(high / step + 1e-9)
    return [i * step for i in range(first, last + 1)]


def _axes(page: Page, frame, across, up, low: float, unit: str, along: str) -> None:
    x0, y0, x1, y1 = frame
    page.line([(x0, y1), (x0, y0), (x1, y0)], 0.6, INK)
    for level in nice_steps(low, up[1], 5):
        y = y0 + (level - up[0]) / (up[1] - up[0]) * (y1 - y0)
        page.line([(x0 - 3, y), (x0, y)], 0.5, INK)
        page.text(x0 - 5, y - 2.2, f"{level:g}", 6.3, colour=INK, align="right")
    for station in nice_steps(*across, 7):
        x = x0 + (station - across[0]) / (across[1] - across[0]) * (x1 - x0)
        page.line([(x, y0 - 3), (x, y0)], 0.5, INK)
        page.text(x, y0 - 10, f"{station:g}", 6.3, colour=INK, align="center")
    page.text(0.5 * (x0 + x1), y0 - 20, along, 6.8, colour=INK, align="center")
    page.text(x0 - 32, 0.5 * (y0 + y1), f"Elevation [{unit}]", 6.8, colour=INK, align="center", turned=True)


def _legend(page: Page, x: float, y: float, waters: Sequence[Water], unit: str) -> None:
    if not waters:
        return
    page.text(x, y, "Water surface", 6.8, face="bold", colour=INK)
    for water in reversed(waters):
        y -= 15
        page.box(x, y - 2.5, 16, 9, water.tone)
        page.line([(x, y + 6.5), (x + 16, y + 6.5)], 0.9, WATERS[4], water.dash)
        page.text(x + 21, y + 2.6, fitted(water.event, 100, 6.5), 6.5, colour=INK)
        page.text(x + 21, y - 4.6, f"{water.stage:.2f} {unit}", 6.5, colour=GREY)


# --------------------------------------------------------------------------------------------------
# The plan


@dataclass(frozen=True)
class Plan:
    """What stands about sections on the map: other cut lines and streams, quick to search."""

    lines: shapely.STRtree
    streams: shapely.STRtree
    geographic: bool


def draw_plan(
    page: Page, left: float, top: float, width: float, height: float, plan: Plan, line: Any,
    length: float, unit: str, *, wet: Any = None, tone: str = WATERS[2], point: Any = None,
    shown: bool = True,
) -> None:  # fmt: skip
    """Draw a piece of map about a cut line, north up, with the water across it and a scale.

    Parameters
    ----------
    page : Page
    left, top, width, height : float
        The room, in points.
    plan : Plan
    line : shapely.LineString
        The cut line, from left to right looking downstream.
    length : float
        Of the line on the ground, in `unit`; it gives the scale.
    unit : str
    wet : shapely geometry, optional
        The part under water.
    tone : str
        Its colour.
    point : shapely.Point, optional
        A crossing to mark.
    shown : bool
        Whether the line itself is drawn; where not, it only says what part of the map and its scale.
    """
    bounds = np.array(shapely.bounds(line))
    middle = 0.5 * (bounds[1] + bounds[3])
    squeeze = max(math.cos(math.radians(middle)), 0.01) if plan.geographic else 1.0
    spans = max((bounds[2] - bounds[0]) * squeeze / width, (bounds[3] - bounds[1]) / height, 1e-12)
    scale = 1.0 / (1.3 * spans)
    centre = 0.5 * (bounds[0] + bounds[2])
    x_middle, y_middle = left + 0.5 * width, top - 0.5 * height

    def place(points: np.ndarray) -> np.ndarray:
        return np.column_stack([
            x_middle + (points[:, 0] - centre) * squeeze * scale, y_middle + (points[:, 1] - middle) * scale
        ])  # fmt: skip

    reach = np.array([0.5 * width / (scale * squeeze), 0.5 * height / scale])
    window = shapely.box(*(np.array([centre, middle]) - reach), *(np.array([centre, middle]) + reach))
    page.box(left, top - height, width, height, "#ffffff")
    page.clip(left, top - height, width, height)
    for other in plan.lines.geometries[plan.lines.query(window)]:
        _polyline(page, other, place, 0.5, RULE)
    for stream in plan.streams.geometries[plan.streams.query(window, predicate="intersects")]:
        for part in shapely.get_parts(shapely.intersection(stream, window)):
            if shapely.get_type_id(part) == 1:
                _polyline(page, part, place, 1.2, WATERS[3])
                _arrow(page, place(shapely.get_coordinates(part)), WATERS[3])
    if shown:
        _polyline(page, line, place, 1.3, INK)
    if wet is not None and not shapely.is_empty(wet):
        for part in shapely.get_parts(wet):
            _polyline(page, part, place, 3.2, tone)
        _polyline(page, line, place, 0.6, INK)
    ends = place(shapely.get_coordinates(line)[[0, -1]])
    for text, end, other in (("L", ends[0], ends[1]), ("R", ends[1], ends[0])) if shown else ():
        away = (end - other) / max(float(np.hypot(*(end - other))), 1e-9)
        page.text(end[0] + 7 * away[0], end[1] + 7 * away[1] - 2.5, text, 7.5, face="bold", align="center")
    if point is not None:
        x, y = place(shapely.get_coordinates(point))[0]
        page.area([(x - 4, y), (x, y + 4), (x + 4, y), (x, y - 4)], "#ffffff", edge=WALL, width=1.4)
    page.unclip()
    page.box(left, top - height, width, height, None, RULE)
    # north, straight up
    x, y = left + width - 11, top - 24
    page.area([(x, y + 14), (x - 3.6, y), (x, y + 3), (x + 3.6, y)], INK)
    page.text(x, y - 8, "N", 7, face="bold", align="center")
    # the line's own length on the ground says how long the bar is
    drawn = np.diff(place(shapely.get_coordinates(line)), axis=0)
    per_point = length / max(float(np.hypot(drawn[:, 0], drawn[:, 1]).sum()), 1e-9)
    if math.isfinite(per_point) and per_point > 0:
        about = 0.3 * width * per_point
        power = 10.0 ** math.floor(math.log10(about))
        bar = max(step * power for step in (1, 2, 5) if step * power <= about)
        x, y = left + 6, top - height + 6
        page.box(x - 2, y - 3, bar / per_point + 4, 14, "#ffffff")
        page.line([(x, y + 3), (x, y), (x + bar / per_point, y), (x + bar / per_point, y + 3)], 0.8, INK)
        page.text(x + 0.5 * bar / per_point, y + 3, f"{bar:g} {unit}", 6.2, colour=INK, align="center")


def _polyline(page: Page, geometry: Any, place, width: float, colour: str) -> None:
    for part in shapely.get_parts(geometry):
        points = shapely.get_coordinates(part)
        if len(points) > 1:
            page.line(_thin(place(points)), width, colour)


def _arrow(page: Page, points: np.ndarray, colour: str) -> None:
    """Draw a head on a stream, which points downstream."""
    steps = np.hypot(*np.diff(points, axis=0).T)
    if steps.sum() < 25:
        return
    along = np.concatenate([[0.0], np.cumsum(steps)])
    at = np.array([0.8 * along[-1] - 3, 0.8 * along[-1] + 3])
    (x0, y0), (x1, y1) = np.column_stack([np.interp(at, along, points[:, k]) for k in (0, 1)])
    length = math.hypot(x1 - x0, y1 - y0)
    if length < 1e-6:
        return
    dx, dy = (x1 - x0) / length, (y1 - y0) / length
    tip, back = (x1 + 3 * dx, y1 + 3 * dy), (x1 - 4 * dx, y1 - 4 * dy)
    page.area(
        [tip, (back[0] - 3 * dy, back[1] + 3 * dx), (back[0] + 3 * dy, back[1] - 3 * dx)], colour
    )  # fmt: skip
