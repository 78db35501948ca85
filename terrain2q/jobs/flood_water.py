"""Sections as they lie on the map, and the water that stands on them and between them at an event."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import rasterio
from rasterio.transform import Affine

from terrain2q.ground.terrain import Terrain
from terrain2q.ground.tiles import shifted
from terrain2q.ground.water_edge import strips
from terrain2q.ground.water_surface import Reach
from terrain2q.jobs.design_flows import EventAnswer, SectionAnswer

Path = tuple[float, float, float]
"""A stretch of water on a section: start and end station, and stage."""


class PlacedSection:
    """A section that can be mapped: where its points lie in cells, and what water stands on it."""

    def __init__(self, index: int, answer: SectionAnswer, to_cells) -> None:
        profile = answer.built.profile
        self.index, self.name = index, answer.section_id
        self.stream = answer.built.line.stream
        self.distance = answer.built.line.stream_distance
        self.stations, self.elevations = profile.stations, profile.elevations
        self.column, self.row = to_cells(profile.x, profile.y)
        corner = profile.is_vertex.copy()
        corner[[0, -1]] = True
        self.line = np.column_stack([self.column[corner], self.row[corner]])
        section = answer.built.section
        self.subareas = section.subareas
        self.origin = section.origin

    def places(self, start: float, end: float, level: float) -> np.ndarray:
        """Return cells (row, column) under water between two stations, on the line and just beside it."""
        count = max(
            2, int(np.ceil((end - start) / (self.stations[-1] - self.stations[0]) * 2 * self._cells)) + 1
        )
        at = np.linspace(start, end, count)
        at = at[np.interp(at, self.stations, self.elevations) < level]
        column, row = np.interp(at, self.stations, self.column), np.interp(at, self.stations, self.row)
        step = np.gradient(self.column, self.stations), np.gradient(self.row, self.stations)
        along = np.array([np.interp(at, self.stations, s) for s in step])
        along /= np.maximum(np.hypot(*along), 1e-12)
        places = [
            np.column_stack([row + 0.75 * k * along[0], column - 0.75 * k * along[1]]) for k in (-1, 0, 1)
        ]
        return np.floor(np.vstack(places)).astype(np.int64)

    @cached_property
    def _cells(self) -> float:
        return float(np.hypot(np.diff(self.column), np.diff(self.row)).sum())


@dataclass(frozen=True)
class SectionWater:
    """What stands on a section at an event: the channel's path and the hollows, outward on each side.

    `origin` is the station of the stream; `slope` the section's.
    """

    channel: Path
    left: tuple[Path, ...]
    right: tuple[Path, ...]
    origin: float
    slope: float
    velocities: tuple[np.ndarray, float]

    @classmethod
    def of(cls, station: PlacedSection, answer: EventAnswer, bin_width: float) -> SectionWater:
        """Return the water of a section's answer; velocities in bins of `bin_width` metres."""
        channel, *others = answer.paths
        left = sorted((p for p in others if p[1] <= channel[0]), key=lambda p: -p[1])
        right = sorted((p for p in others if p[0] >= channel[1]), key=lambda p: p[0])
        origin = station.origin
        if origin is None or not channel[0] <= origin <= channel[1]:
            inside = np.flatnonzero((station.stations >= channel[0]) & (station.stations <= channel[1]))
            inside = inside if inside.size else np.arange(station.stations.size)
            origin = float(station.stations[inside[np.argmin(station.elevations[inside])]])
        velocities = _velocities(station, answer, origin, bin_width)
        return cls(channel, tuple(left), tuple(right), origin, answer.row["slope"], velocities)

    @property
    def stage(self) -> float:
        """Stage of the channel's path."""
        return self.channel[2]

    @property
    def has_own_stages(self) -> bool:
        """Whether a hollow stands at another stage than the channel."""
        return any(abs(p[2] - self.stage) > 1e-6 for p in (*self.left, *self.right))

    def side(self, label: int) -> tuple[Path, ...]:
        """Return the hollows on the side of a label, outward from the channel."""
        return self.right if label > 0 else self.left

    def level(self, label: int) -> float:
        """Return the level for ground of a label: 0 channel, 1, 2, ... hollows to the right, -1, ... left."""
        if label == 0 or not self.side(label):
            return self.stage
        mine = self.side(label)
        return mine[min(abs(label), len(mine)) - 1][2]

    def divide(self, side: int) -> float | None:
        """Return how far aside of the stream, m, channel and first hollow of a side part; None without."""
        mine = self.side(side)
        if not mine:
            return None
        edges = (self.channel[1], mine[0][0]) if side > 0 else (self.channel[0], mine[0][1])
        return abs(0.5 * sum(edges) - self.origin)

    def path(self, label: int) -> Path | None:
        """Return the path of a label, None where this section has none."""
        if label == 0:
            return self.channel
        mine = self.side(label)
        return mine[abs(label) - 1] if abs(label) <= len(mine) else None


def _velocities(
    station: PlacedSection, answer: EventAnswer, origin: float, width: float
) -> tuple[np.ndarray, float]:
    """Mean velocity of the subarea in bins of distance from the stream; the nearest one's where it is dry."""
    pieces = []
    for row in answer.subareas:
        path, subarea = answer.paths[int(row["path"])], station.subareas[int(row["subarea"]) - 1]
        start, end = max(path[0], subarea.start), min(path[1], subarea.end)
        if end > start:
            pieces.append((start, end, row["mean_velocity"]))
    if not pieces:
        return np.zeros(1, dtype=np.float32), 0.0
    pieces.sort()
    start, end, speed = np.array(pieces).T
    least, most = station.stations[0] - origin, station.stations[-1] - origin
    at = origin + least + width * (np.arange(int((most - least) / width) + 2) + 0.5)
    # distance to each piece, nought inside; the nearest counts
    away = np.maximum(np.maximum(start[None, :] - at[:, None], at[:, None] - end[None, :]), 0.0)
    return speed[np.argmin(away, axis=1)].astype(np.float32), float(least)


class MapCells:
    """The cells that are mapped: a window of the terrain."""

    def __init__(self, terrain: Terrain, bounds) -> None:
        self.terrain = terrain
        column, row, end_column, end_row = bounds
        self.row, self.column = max(row, 0), max(column, 0)
        self.rows = max(min(end_row, terrain.height) - self.row, 0)
        self.columns = max(min(end_column, terrain.width) - self.column, 0)
        self.transform = shifted(terrain.transform, self.column, self.row)
        with rasterio.open(terrain.paths[0]) as source:
            self.block = int(source.block_shapes[0][0])
        if self.block * self.columns > 2**23:
            self.block = 1

    def strips(self) -> list[tuple[int, int]]:
        """Return the first and the end row of each strip."""
        return strips(self.rows, self.columns, self.row, self.block)

    def ground(self, row: int, column: int, rows: int, columns: int) -> np.ndarray:
        """Return elevations of cells counted in the terrain, m, NaN in gaps and outside; float32."""
        terrain = self.terrain
        out = np.full((rows, columns), np.nan, dtype=np.float32)
        top, bottom = max(row, 0), min(row + rows, terrain.height)
        left, right = max(column, 0), min(column + columns, terrain.width)
        if top >= bottom or left >= right:
            return out
        x, y = to_map(
            terrain.transform,
            np.array([left + 0.5, right - 0.5, left + 0.5, right - 0.5]),
            np.array([top + 0.5, top + 0.5, bottom - 0.5, bottom - 0.5]),
        )
        cells, transform = terrain.read_window((x.min(), y.min(), x.max(), y.max()), dtype=np.float32)
        first_column, first_row = (
            round(float(v)) for v in to_cells(terrain.transform, transform.c, transform.f)
        )
        out[top - row : bottom - row, left - column : right - column] = cells[
            top - first_row : bottom - first_row, left - first_column : right - first_column
        ]
        return out


def to_map(transform: Affine, column, row):
    """Return x and y of places in cells."""
    a, b, c, d, e, f = transform[:6]
    return a * column + b * row + c, d * column + e * row + f


def to_cells(transform: Affine, x, y):
    """Return column and row of places on the map."""
    a, b, c, d, e, f = transform[:6]
    determinant = a * e - b * d
    x, y = x - c, y - f
    return (e * x - b * y) / determinant, (a * y - d * x) / determinant


@dataclass(frozen=True)
class Hollow:
    """Low ground of a section that no path covers: stations, area under the channel's stage, and cells."""

    section: int
    start: float
    end: float
    area: float
    places: np.ndarray


def cut_off_hollows(station: PlacedSection, water: SectionWater) -> list[Hollow]:
    """Return low ground that a section's own ridges cut off.

    A side where water has passed the bank and stands at a stage of its own is left out: what lies
    further out there cannot count at the channel's stage.
    """
    z, x, stage = station.elevations, station.stations, water.stage
    wet = z < stage
    edges = np.flatnonzero(np.diff(np.concatenate([[0], wet.astype(np.int8), [0]])))
    paths = (water.channel, *water.left, *water.right)
    found = []
    for first, end in zip(edges[::2], edges[1::2], strict=True):
        a, b = x[max(first - 1, 0)], x[min(end, x.size - 1)]
        start, last = x[first], x[end - 1]
        if any(p[0] < b and a < p[1] and p[0] <= last and start <= p[1] for p in paths):
            continue
        side = water.left if last <= water.channel[0] else water.right
        if any(abs(p[2] - stage) > 1e-6 for p in side):
            continue
        part = slice(max(first - 1, 0), end + 1)
        depth = np.maximum(stage - z[part], 0.0)
        area = float((0.5 * (depth[1:] + depth[:-1]) * np.diff(x[part])).sum())
        found.append(Hollow(station.index, float(start), float(last), area, station.places(a, b, stage)))
    return found


@dataclass(eq=False)
class FloodReach:
    """A reach at an event: its two waters, its margin, and its cells' labels where levels differ by side.

    `least` is the level below which the water does not stand, where no other reach is: that of the stream
    which a tributary joins.
    """

    reach: Reach
    upper: PlacedSection
    lower: PlacedSection | None
    waters: tuple[SectionWater, SectionWater]
    least: float | None = None
    margin: object = None
    labels: np.ndarray | None = None

    def level_nodes(self, label: int) -> np.ndarray:
        """Return levels for ground of a label at the reach's nodes."""
        a, b = (w.level(label) for w in self.waters)
        return a + self.reach.share * (b - a)

    def levels(self, first: int, end: int) -> np.ndarray:
        """Return levels of rows of the reach, float32."""
        level = self.reach.spread(self.level_nodes(0), first, end)
        if self.labels is not None:
            labels = self.labels[first:end]
            for label in np.unique(labels):
                if label:
                    mine = labels == label
                    level[mine] = self.reach.spread(self.level_nodes(int(label)), first, end)[mine]
        return level

    def side_names(self) -> tuple[str, str]:
        """Return what :meth:`sides` are, in words."""
        if self.lower is None:
            return tuple(
                f"from the {side} end of {self.upper.name} to the mouth" for side in ("left", "right")
            )
        return tuple(
            f"from the {side} end of {self.upper.name} to that of {self.lower.name}"
            for side in ("left", "right")
        )

    def sides(self) -> tuple[np.ndarray, np.ndarray]:
        """Return the lines that join the left and the right ends, in cells."""
        upper = self.upper.line
        lower = self.reach.lower.points / self.reach.lower.size if self.lower is None else self.lower.line
        return np.vstack([upper[0], lower[0]]), np.vstack([upper[-1], lower[-1]])
