"""Where water stands between cut lines: the ground between two lines, and a level for each cell of it.

All places here are in cells of the terrain: x is the column and y the row, 0.5 in the middle of the
first. Distances are measured with the ground size of a cell, so that degrees and metres act alike.

Between two lines the level goes over from one line's to the other's with the distance to each,
w = a / (a + b), which is the straight fall between parallel lines, follows bent ones, and is exactly
the line's own level on each line. It is worked out at nodes some cells apart and is straight between
them; distances to lines are given a sign there, so that nothing bends at the lines themselves.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import shapely
from rasterio.features import rasterize
from rasterio.transform import Affine
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components, minimum_spanning_tree
from scipy.spatial import cKDTree

NODES_BETWEEN = 32
"""At least so many nodes lie between two lines, where the cells allow it."""

LARGEST_STEP = 12
"""Most cells between two nodes: a stream's bends must still be seen."""

FEW_SEGMENTS = 8
"""Lines of no more segments are measured segment by segment, others through a search tree."""

MARGIN = 2
"""Cells beyond the ground between two lines that get a level too, so that the water's edge runs on to
the boundary and is cut there."""

INSIDE, BESIDE = 2, 1
"""What a cell is: between the lines, or within the margin around all of them."""

DIVIDE_CELLS = 2_000_000
"""Cells among which a divide is sought at once; where there are more, blocks of cells act as one."""


class Polyline:
    """A line of one or several parts that many places are measured against.

    Parameters
    ----------
    parts : sequence of ndarray, shape (n, 2)
        Vertices in cells, in order.
    size : tuple of float
        Ground size of a cell along x and along y, m.
    """

    def __init__(self, parts: Sequence[np.ndarray], size: tuple[float, float]) -> None:
        self.size = np.asarray(size, dtype=float)
        points, starts, stations = [], [], []
        few = sum(len(part) - 1 for part in parts) <= FEW_SEGMENTS
        for part in parts:
            part = np.asarray(part, dtype=float) * self.size
            steps = np.hypot(*np.diff(part, axis=0).T)
            keep = np.append(True, steps > 0)
            part, steps = part[keep], steps[steps > 0]
            if len(part) < 2:
                continue
            # close vertices, so that the nearest one lies on the nearest segment or beside it
            count = np.maximum(np.ceil(steps / (2.0 * self.size.min())), 1).astype(int)
            if few:
                count[:] = 1
            index = np.repeat(np.arange(count.size), count)
            share = (np.arange(index.size) - np.repeat(np.cumsum(count) - count, count)) / count[index]
            dense = part[index] + share[:, None] * (part[index + 1] - part[index])
            points.append(np.vstack([dense, part[-1:]]))
            starts.append(np.append(np.ones(len(dense), dtype=bool), False))
            stations.append(np.append(0.0, np.cumsum(np.hypot(*np.diff(points[-1], axis=0).T))))
        if not points:
            raise ValueError("a line without length")
        self.points, self.has_next = np.vstack(points), np.concatenate(starts)
        self.stations = np.concatenate(stations)
        self._few = few

    @cached_property
    def _tree(self) -> cKDTree:
        return cKDTree(self.points)

    def nearest(self, places: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Return distance, side and station of the nearest point of the line, each shape (n,).

        The distance is in metres of ground; the side is above zero where the place lies clockwise
        of the line's way in a frame whose y points down the rows; the station is from its part's start.
        """
        places = np.asarray(places, dtype=float) * self.size
        has_next = self.has_next
        if self._few:
            candidates = [(np.intp(first), np.bool_(True)) for first in np.flatnonzero(has_next)]
        else:
            _, near = self._tree.query(places, workers=-1)
            before = np.maximum(near - 1, 0)
            candidates = [(before, (near > 0) & has_next[before]), (near, has_next[near])]
        best = np.full(len(places), np.inf)
        station = np.zeros(len(places))
        way = np.zeros((len(places), 2))
        foot = np.zeros((len(places), 2))
        for first, there in candidates:
            a = self.points[first]
            b = self.points[np.minimum(first + 1, len(self.points) - 1)]
            step = b - a
            length = np.hypot(step[..., 0], step[..., 1])
            length = np.where(length == 0, 1.0, length)
            share = np.clip(((places - a) * step).sum(axis=1) / length**2, 0.0, 1.0)
            at = a + share[:, None] * step
            away = np.hypot(*(places - at).T)
            unit = np.broadcast_to(step / length[..., None], places.shape)
            # at a vertex the ways before and after it count alike
            same = there & np.isfinite(best) & (np.abs(away - best) <= 1e-9 * (away + 1.0))
            way[same] += unit[same]
            better = there & ~same & (away < best)
            best[better], foot[better] = away[better], at[better]
            way[better] = unit[better]
            station[better] = np.broadcast_to(self.stations[first] + share * length, best.shape)[better]
        toward = places - foot
        side = way[:, 0] * toward[:, 1] - way[:, 1] * toward[:, 0]
        return best, side, station


@dataclass(frozen=True, eq=False)
class Reach:
    """The ground between two neighbouring cut lines of a stream.

    Attributes
    ----------
    polygon : shapely.Geometry
        Bounded by the two lines and the lines that join their ends; in cells.
    row, column, rows, columns : int
        The cells about it with their margin.
    step : int
        Cells between nodes.
    share : ndarray, shape (node rows, node columns)
        At nodes: 0 on the upper line, 1 on the lower.
    aside : ndarray, shape (node rows, node columns)
        At nodes: distance from the stream, m, to the right positive.
    upper, lower, stream : Polyline
    hand : float
        1 where rows count northward on the map, -1 where they count southward.
    """

    polygon: shapely.Geometry
    row: int
    column: int
    rows: int
    columns: int
    step: int
    share: np.ndarray
    aside: np.ndarray
    upper: Polyline
    lower: Polyline
    stream: Polyline
    hand: float

    @classmethod
    def between(
        cls, upper: np.ndarray, lower: np.ndarray, stream: Sequence[np.ndarray], size, hand: float
    ) -> Reach | None:
        """Return the reach between two lines (left to right, shape (n, 2)), None where there is no ground.

        A `lower` of a single point is the mouth of a tributary: the reach narrows to it.
        """
        ring = np.vstack([upper, lower[::-1]])
        polygon = shapely.Polygon(ring)
        if not polygon.is_valid:
            polygon = shapely.make_valid(polygon)
            parts = [p for p in shapely.get_parts(polygon) if p.geom_type == "Polygon"]
            parts += [q for p in shapely.get_parts(polygon) if p.geom_type == "MultiPolygon" for q in p.geoms]
            polygon = shapely.union_all(parts)
        if polygon.is_empty or polygon.area <= 0:
            return None
        course = Polyline(stream, size)
        mouth = len(lower) == 1
        x0, y0, x1, y1 = polygon.bounds
        column, row = int(np.floor(x0)) - MARGIN, int(np.floor(y0)) - MARGIN
        columns, rows = int(np.ceil(x1)) + MARGIN - column, int(np.ceil(y1)) + MARGIN - row
        apart = np.median(Polyline([upper], size).nearest(lower)[0]) / min(size)
        step = int(np.clip(apart / NODES_BETWEEN, 1, LARGEST_STEP))
        # lines go on a little beyond their ends, as nodes lie there
        first = Polyline([_longer(upper, 2.0 * step)], size)
        # a mouth is a point: a line of nearly no length across the way to it
        last = Polyline([_longer(lower, 2.0 * step) if not mouth else _short_line(upper, lower[0])], size)
        nodes = (_node_count(rows, step), _node_count(columns, step))
        y, x = np.meshgrid(
            row + 0.5 + step * np.arange(nodes[0]), column + 0.5 + step * np.arange(nodes[1]), indexing="ij"
        )
        places = np.column_stack([x.ravel(), y.ravel()])
        inside = shapely.contains_xy(polygon, x, y).ravel()
        share = _share(first, last, places, hand, inside, mouth)
        away, side, _ = course.nearest(places)
        aside = np.where(side * hand < 0, away, -away)
        return cls(
            polygon, row, column, rows, columns, step, share.reshape(nodes),
            aside.reshape(nodes).astype(np.float32), first, last, course, hand,
        )  # fmt: skip

    def shares_at(self, places: np.ndarray) -> np.ndarray:
        """Return the share of the lower line at places in the reach, exactly, from 0 to 1."""
        a, b = self.upper.nearest(places)[0], self.lower.nearest(places)[0]
        return np.divide(a, a + b, out=np.full(a.size, 0.5), where=a + b > 0)

    def overlap(self, row: int, rows: int) -> tuple[int, int]:
        """Return the first and the end row, counted within the reach, of what some rows share with it."""
        return max(row - self.row, 0), min(row + rows - self.row, self.rows)

    def cells(self, first: int, end: int, margin) -> np.ndarray:
        """Return what the cells of rows `first` to `end` of the reach are: INSIDE, BESIDE or 0."""
        shapes = [] if margin is None or margin.is_empty else [(margin, BESIDE)]
        return rasterize(
            [*shapes, (self.polygon, INSIDE)],
            out_shape=(end - first, self.columns),
            transform=Affine.translation(self.column, self.row + first),
            dtype="uint8",
        )

    def spread(self, nodes: np.ndarray, first: int, end: int) -> np.ndarray:
        """Return values of cells of rows `first` to `end`, straight between nodes; float32."""
        step = self.step
        low = first // step
        part = nodes[low : (end - 1) // step + 2].astype(np.float32)
        j = np.arange(self.columns)
        beside = ((j % step) / step).astype(np.float32)
        j //= step
        across = part[:, j] + beside * (part[:, j + 1] - part[:, j])
        if step == 1:
            return across[: end - first]
        i = np.arange(first, end)
        below = ((i % step) / step).astype(np.float32)[:, None]
        i = i // step - low
        fall = np.diff(across, axis=0)
        values = fall[i]
        values *= below
        values += across[i]
        return values


def _node_count(cells: int, step: int) -> int:
    return (cells - 1) // step + 2


def _longer(line: np.ndarray, by: float) -> np.ndarray:
    ends = line[[0, -1]] - line[[1, -2]]
    ends = ends / np.hypot(*ends.T)[:, None] * by
    return np.vstack([line[0] + ends[0], line, line[-1] + ends[1]])


def _short_line(upper: np.ndarray, mouth: np.ndarray) -> np.ndarray:
    way = upper[-1] - upper[0]
    way = way / np.hypot(*way) * 1e-3
    return np.vstack([mouth - way, mouth + way])


def _share(first: Polyline, last: Polyline, places, hand: float, inside, mouth: bool) -> np.ndarray:
    """Return a / (a + b) from signed distances: below 0 beyond the upper line, above 1 beyond the lower."""
    a, side, _ = first.nearest(places)
    # lines run from left to right looking downstream: downstream lies to the left of their way
    a = np.where((side * hand < 0) & ~inside, -a, a)
    b, side, _ = last.nearest(places)
    if not mouth:
        b = np.where((side * hand > 0) & ~inside, -b, b)
    total = a + b
    far = total <= 1e-6 * (np.abs(a) + np.abs(b))
    share = np.divide(a, total, out=np.full(a.size, 0.5), where=~far)
    return np.clip(share, -0.5, 1.5)


def divide(ground: np.ndarray, seeds: dict[int, np.ndarray], wet: np.ndarray) -> np.ndarray:
    """Share cells out among waters that stand at different levels, along the ridges between them.

    Each cell goes to the water from which it is reached over the lowest pass: the watershed of the
    seeds, found as a spanning forest of the grid whose edges weigh as much as the higher of two cells
    (cells joined by their sides).

    Parameters
    ----------
    ground : ndarray, shape (rows, columns)
        NaN for gaps.
    seeds : dict of int to ndarray, shape (n, 2)
        Rows and columns of cells of each water, by its label.
    wet : ndarray of bool, shape (rows, columns)
        Cells that count; the others keep the label 0.

    Returns
    -------
    ndarray of int8, shape (rows, columns)
        The label of each cell; 0 where no seed reaches it.
    """
    rows, columns = ground.shape
    factor = int(np.ceil(np.sqrt(max(np.count_nonzero(wet) / DIVIDE_CELLS, 1.0))))
    if factor > 1:
        # ridges must stay closed, so a block is as high as its highest cell
        whole = np.full(
            (-(-rows // factor) * factor, -(-columns // factor) * factor), np.nan, dtype=np.float32
        )
        whole[:rows, :columns] = np.where(wet, ground, np.nan)
        blocks = whole.reshape(whole.shape[0] // factor, factor, -1, factor)
        coarse = np.where(np.isnan(blocks), -np.inf, blocks).max(axis=(1, 3))
        some = np.isfinite(coarse)
        labels = divide(coarse, {k: v // factor for k, v in seeds.items()}, some)
        return np.repeat(np.repeat(labels, factor, axis=0), factor, axis=1)[:rows, :columns]
    names = list(seeds)
    number = np.full(ground.shape, -1, dtype=np.int64)
    counted = wet & np.isfinite(ground)
    count = np.count_nonzero(counted)
    number[counted] = np.arange(count)
    height = ground[counted].astype(float)
    height -= height.min(initial=0.0) - 1.0
    one = np.concatenate([number[:, :-1].ravel(), number[:-1].ravel()])
    other = np.concatenate([number[:, 1:].ravel(), number[1:].ravel()])
    both = (one >= 0) & (other >= 0)
    one, other = one[both], other[both]
    weight = np.maximum(height[one], height[other])
    for place, name in enumerate(names):
        cells = seeds[name]
        here = np.unique(number[cells[:, 0], cells[:, 1]])
        here = here[here >= 0]
        one = np.concatenate([one, np.full(here.size, count + place), [count + place]])
        other = np.concatenate([other, here, [count + len(names)]])
        # seeds and the root that joins them come before all ground, the root first
        weight = np.concatenate([weight, np.full(here.size, 0.5), [0.25]])
    total = count + len(names) + 1
    # a cell may be a seed of two waters: then the first keeps it
    forest = minimum_spanning_tree(coo_array((weight, (one, other)), shape=(total, total)).tocsr()).tocoo()
    kept = forest.data > 0.3
    graph = coo_array((forest.data[kept], (forest.row[kept], forest.col[kept])), shape=(total, total))
    part = connected_components(graph, directed=False)[1]
    label_of = np.zeros(part.max() + 1, dtype=np.int8)
    for place, name in enumerate(names):
        label_of[part[count + place]] = name
    labels = np.zeros(ground.shape, dtype=np.int8)
    labels[counted] = label_of[part[:count]]
    return labels
