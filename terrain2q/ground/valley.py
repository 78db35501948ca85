"""A function over the valley of a stream whose level lines are cut lines.

The function *u* equals the stream distance on the stream, and on a corridor to both sides of it along the
normals of the smoothed stream; elsewhere ∇²u = 0, with no flux through the rim of the valley. It is worked
out with linear triangles on points that lie close along the stream and ever wider away from it. With the
usual weights of the edges (half the sum of the cotangents facing them, any text on finite elements), none
below zero, each value is a mean of its neighbours', so there is no hill and no hollow in *u* and no level
line closes on itself.

Everything is in metres on a plane.
"""

from __future__ import annotations

from collections import defaultdict

import numpy as np
import shapely
from scipy.ndimage import gaussian_filter1d, minimum_filter1d
from scipy.sparse import coo_array, csc_array
from scipy.sparse.linalg import splu
from scipy.spatial import Delaunay, cKDTree


class Valley:
    """The function *u* about one stretch of stream, on triangles.

    Parameters
    ----------
    xy : ndarray, shape (n, 2)
        The stream in the plane.
    at : ndarray, shape (n,)
        Its distances.
    step : float
        Between points along the stream, m.
    corridor, reach : float
        Half widths of the corridor and of the valley, m.
    """

    def __init__(self, xy, at, step: float, corridor: float, reach: float) -> None:
        self.step, self.reach = step, reach
        stream, label, normal, real = self._stream_points(xy, at, corridor, reach)
        self.begin = int(np.argmax(real))
        self.count = int(real.sum())
        self.stream, self.label, self.normal = stream, label, normal
        tree = cKDTree(stream)
        fixed, values = [stream], [label]
        for side in (1.0, -1.0):
            room = self._room(side, tree, corridor)
            for share in (0.5, 1.0):
                # Closer ones would come between neighbouring points of the stream.
                there = share * room >= 0.55 * step
                fixed.append((stream + (side * share * room)[:, None] * normal)[there])
                values.append(label[there])
        fixed, values = np.concatenate(fixed), np.concatenate(values)
        free = self._free_points(stream, tree, fixed)
        beyond, labels, free = self._beyond_the_ends(free, tree)
        points = np.concatenate([fixed, beyond, free])
        self._solve(points, np.concatenate([values, labels]))

    def _stream_points(self, xy, at, corridor: float, reach: float):
        """Return points along the stream and straight beyond its ends, distances and unit normals (left)."""
        along = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(xy, axis=0).T))])
        points, place = _evenly(xy, self.step)
        label = np.interp(place, along, at)
        pieces = len(points) - 1
        step = along[-1] / pieces
        sigma = corridor / step
        beyond = np.arange(1, int(np.ceil(1.2 * reach / step)) + 1) * step
        # The course over half a width, not the last bend, tells where the stream comes from and goes to.
        few = min(max(round(reach / step), 1), pieces)
        up, down = points[0] - points[few], points[-1] - points[-1 - few]
        tree = cKDTree(points)
        parts = []
        for end, way in ((points[0], up), (points[-1], down)):
            size = np.hypot(*way)
            way = way / size if size > 0.0 else np.array([1.0, 0.0])
            extra = end + beyond[:, None] * way
            clear = tree.query(extra)[0] >= 0.7 * beyond
            parts.append(extra[: len(beyond) if clear.all() else int(np.argmin(clear))])
        before, after = parts[0][::-1], parts[1]
        rate = (label[-1] - label[0]) / along[-1]
        whole = np.concatenate([before, points, after])
        labels = np.concatenate([
            label[0] - rate * beyond[: len(before)][::-1], label, label[-1] + rate * beyond[: len(after)]
        ])  # fmt: skip
        tangent = np.gradient(_smoothed(whole, sigma), axis=0)
        size = np.hypot(*tangent.T)
        tangent = tangent / np.where(size > 0.0, size, 1.0)[:, None]
        normal = np.column_stack([-tangent[:, 1], tangent[:, 0]])
        real = np.zeros(len(whole), dtype=bool)
        real[len(before) : len(before) + len(points)] = True
        return whole, labels, normal, real

    def _room(self, side: float, tree: cKDTree, corridor: float) -> np.ndarray:
        """Return how far the corridor goes on one side at each point of the stream.

        Beyond the centre of a bend, or half way to another limb, a normal means nothing.
        """
        spacing = max(self.step, float(np.hypot(*np.diff(self.stream, axis=0).T).mean()))
        room = np.zeros(len(self.stream))
        for share in (0.2, 0.35, 0.5, 0.65, 0.8, 1.0):
            offset = share * corridor
            beside = self.stream + side * offset * self.normal
            sound = tree.query(beside)[0] >= 0.9 * offset
            # So much stream at most lies about the place if it is all of this limb.
            own = 4.0 * offset / spacing + 1.0
            asked = np.flatnonzero(sound)
            near = tree.query_ball_point(beside[asked], 1.8 * offset)
            place = np.repeat(asked, [len(some) for some in near])
            apart = np.abs(np.concatenate([*near, []]) - place)
            sound[place[apart > own]] = False
            room[sound & (room >= 0.99 * (share - 0.2) * corridor)] = offset
        few = max(1.0, 0.5 * corridor / spacing)
        return gaussian_filter1d(minimum_filter1d(room, 2 * int(few) + 1), few, mode="nearest")

    def _free_points(self, stream, tree: cKDTree, fixed) -> np.ndarray:
        """Return points of ever wider lattices away from the stream."""
        random = np.random.default_rng(0)
        found = []
        level = 0
        while True:
            size = self.step * 2.0**level
            inner = 0.75 * self.step if level == 0 else 3.0 * size
            last = 2.0 * size > self.reach / 4.0
            outer = 1.15 * self.reach + 1.5 * size if last else 6.0 * size
            self.coarsest = size
            lattice = _lattice(stream, size, outer)
            away = tree.query(lattice)[0]
            lattice = lattice[(away >= inner) & (away < outer)]
            # A little disorder, so that no four points lie on one circle.
            found.append(lattice + random.uniform(-0.05, 0.05, lattice.shape) * size)
            if last:
                break
            level += 1
        points = np.concatenate(found)
        return points[cKDTree(fixed).query(points)[0] >= 0.6 * self.step]

    def _beyond_the_ends(self, points: np.ndarray, tree: cKDTree):
        """Return the points past the stream's ends, their values as if it went straight on, and the rest.

        Left free they would draw the level lines of the last reaches in.
        """
        nearest = tree.query(points)[1]
        found, labels = [], []
        rate = (self.label[-1] - self.label[0]) / np.hypot(*np.diff(self.stream, axis=0).T).sum()
        for end in (0, len(self.stream) - 1):
            there = points[nearest == end]
            course = np.array([self.normal[end, 1], -self.normal[end, 0]])
            found.append(there)
            labels.append(self.label[end] + rate * ((there - self.stream[end]) @ course))
        inside = (nearest > 0) & (nearest < len(self.stream) - 1)
        return np.concatenate(found), np.concatenate(labels), points[inside]

    def _solve(self, points: np.ndarray, values: np.ndarray) -> None:
        mesh = Delaunay(points)
        triangles, neighbours = mesh.simplices, mesh.neighbors.copy()
        corner = points[triangles]
        sides = np.stack([corner[:, (k + 2) % 3] - corner[:, (k + 1) % 3] for k in range(3)], axis=1)
        lengths = np.hypot(sides[..., 0], sides[..., 1])
        area = np.abs(sides[:, 0, 0] * sides[:, 1, 1] - sides[:, 0, 1] * sides[:, 1, 0])
        kept = (lengths.max(axis=1) <= 4.0 * self.coarsest) & (area > 1e-9 * self.step**2)
        # Slivers along the rim would lead *u* along it.
        thin = area < 0.35 * lengths.max(axis=1) ** 2
        while True:
            neighbours[(neighbours >= 0) & ~kept[neighbours]] = -1
            slivers = kept & thin & (neighbours == -1).any(axis=1)
            if not slivers.any():
                break
            kept &= ~slivers
        count = len(points)
        # The cotangent at corner k weighs the edge that faces it.
        cotangent = [
            -np.einsum("ij,ij->i", sides[kept, (k + 1) % 3], sides[kept, (k + 2) % 3]) / area[kept]
            for k in range(3)
        ]
        one = np.concatenate([triangles[kept, (k + 1) % 3] for k in range(3)])
        other = np.concatenate([triangles[kept, (k + 2) % 3] for k in range(3)])
        weight = 0.5 * np.concatenate(cotangent)
        matrix = coo_array((weight, (np.minimum(one, other), np.maximum(one, other))), shape=(count, count))
        matrix = matrix.tocsr()
        matrix.sum_duplicates()
        # Only at the rim can a weight be below zero.
        matrix.data = np.maximum(matrix.data, 1e-6)
        matrix = matrix + matrix.T
        degree = np.asarray(matrix.sum(axis=1)).ravel()
        u = np.full(count, np.nan)
        known = len(values)
        u[:known] = values
        free = np.arange(known, count)
        free = free[degree[free] > 0.0]
        if len(free):
            block = matrix[free]
            inner = -block[:, free]
            inner = csc_array(inner + coo_array((degree[free], (np.arange(len(free)),) * 2)))
            u[free] = splu(inner, permc_spec="MMD_AT_PLUS_A").solve(block[:, np.arange(known)] @ values)
        self.points, self.u = points, u
        self._triangles, self._neighbours, self._kept = triangles.tolist(), neighbours.tolist(), kept
        self._edges = self._stream_edges(triangles, kept)

    def _stream_edges(self, triangles, kept) -> dict[int, list[int]]:
        """Return the triangles at the edge from each stream point to the next."""
        found = defaultdict(list)
        for k in range(3):
            one, other = triangles[:, (k + 1) % 3], triangles[:, (k + 2) % 3]
            low, high = np.minimum(one, other), np.maximum(one, other)
            for triangle in np.flatnonzero(kept & (high < len(self.stream)) & (high - low == 1)):
                found[int(low[triangle])].append(int(triangle))
        return found

    def normal_at(self, value: float) -> np.ndarray:
        """Return the unit normal, to the left, where the stream has a distance."""
        normal = np.array([np.interp(value, self.label, self.normal[:, k]) for k in (0, 1)])
        return normal / max(np.hypot(*normal), 1e-12)

    def wings(self, value: float) -> tuple[np.ndarray, np.ndarray, bool]:
        """Return the level line of a value as two polylines from the stream outward, left and right.

        Also whether it is one: where limbs all but touch, triangles may span the stream, and the wing is
        straight instead.
        """
        index = int(np.clip(np.searchsorted(self.label, value, side="right") - 1, 0, len(self.label) - 2))
        low, high = self.label[index], self.label[index + 1]
        share = min(max((value - low) / (high - low), 1e-6), 1.0 - 1e-6)
        value = low + share * (high - low)
        place = self.stream[index] + share * (self.stream[index + 1] - self.stream[index])
        way = self.stream[index + 1] - self.stream[index]
        normal = self.normal_at(value)
        wings = {1: np.array([place, place + self.reach * normal]),
                 -1: np.array([place, place - self.reach * normal])}  # fmt: skip
        for triangle in self._edges.get(index, ()):
            third = next(c for c in self._triangles[triangle] if c not in (index, index + 1))
            offset = self.points[third] - self.stream[index]
            side = 1 if way[0] * offset[1] - way[1] * offset[0] > 0.0 else -1
            wings[side] = self._follow(triangle, index, index + 1, value, place)
        return wings[1], wings[-1], len(self._edges.get(index, ())) == 2

    def _follow(self, triangle: int, low: int, high: int, value: float, place: np.ndarray) -> np.ndarray:
        """Follow the level line from an edge, whose ends lie below and above the value."""
        path, length = [place], 0.0
        u, points = self.u, self.points
        while length < 1.1 * self.reach:
            corners = self._triangles[triangle]
            third = next(k for k in range(3) if corners[k] not in (low, high))
            corner = corners[third]
            if not np.isfinite(u[corner]):
                break
            # The line leaves through the edge that faces the end on the third corner's side.
            if u[corner] > value:
                left, high = high, corner
            else:
                left, low = low, corner
            share = (value - u[low]) / (u[high] - u[low])
            place = points[low] + share * (points[high] - points[low])
            length += float(np.hypot(*(place - path[-1])))
            path.append(place)
            triangle = self._neighbours[triangle][corners.index(left)]
            if triangle < 0 or not self._kept[triangle]:
                break
        return np.array(path)


def _evenly(xy: np.ndarray, step: float) -> tuple[np.ndarray, np.ndarray]:
    """Return points at even distances of at most `step` along a line, and these distances."""
    along = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(xy, axis=0).T))])
    place = np.linspace(0.0, along[-1], max(int(np.ceil(along[-1] / step)), 2) + 1)
    return np.column_stack([np.interp(place, along, xy[:, k]) for k in (0, 1)]), place


def cuts_corners(xy: np.ndarray, step: float) -> bool:
    """Tell whether even points along a line miss its bends."""
    chord = shapely.LineString(_evenly(xy, step)[0])
    shapely.prepare(chord)
    near = shapely.dwithin(shapely.points(xy), chord, 0.2 * step)
    return not near.all()


def _smoothed(points: np.ndarray, sigma: float) -> np.ndarray:
    # Mirrored through its ends, so that the course there is not bent.
    size = min(int(4.0 * sigma) + 1, len(points) - 1)
    before = 2.0 * points[0] - points[size:0:-1]
    after = 2.0 * points[-1] - points[-2 : -2 - size : -1]
    whole = gaussian_filter1d(np.concatenate([before, points, after]), sigma, axis=0, mode="nearest")
    return whole[size : size + len(points)]


def _lattice(stream: np.ndarray, size: float, outer: float) -> np.ndarray:
    """Return the points of a lattice of triangles that lie within a box or two of the stream."""
    box = max(outer, 8.0 * size)
    squares = np.unique(np.floor(stream / box).astype(np.int64), axis=0)
    around = np.array([(i, j) for i in (-1, 0, 1) for j in (-1, 0, 1)])
    squares = np.unique((squares[:, None, :] + around).reshape(-1, 2), axis=0)
    rows = int(np.ceil(box / (size * np.sqrt(0.75))))
    columns = int(np.ceil(box / size))
    row, column = (v.ravel() for v in np.mgrid[0:rows, 0:columns])
    across, up = box / columns, box / rows
    inside = np.column_stack([(column + 0.25 + 0.5 * (row % 2)) * across, (row + 0.5) * up])
    return (squares[:, None, :] * box + inside).reshape(-1, 2)
