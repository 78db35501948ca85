"""Cut lines laid out along streams: square to them, never meeting, from high ground to high ground.

What is wanted of the lines of one stream: each crosses it once, no two meet, each is square to the channel
where it crosses and to the valley further out, so that in a bend the lines fan or bend at the floodplain.

All this holds for the level lines of a function *u* over the valley that equals the stream distance on
the stream and is as smooth as can be elsewhere (∇²u = 0, no flux through the rim). A level line meets the
stream only where the stream has that distance, which is once; two level lines of different value never
meet; and away from the stream the wiggles of *u* die out within about a meander's length, so that the
lines straighten up square to the valley. To make them square to the channel, *u* is also given on a
corridor: at a fortieth and a twentieth of `width` to each side, along the normals of the stream smoothed
over that distance.

*u* is worked out with linear triangles on points that lie close along the stream and ever wider away from
it. With the usual weights of the edges (half the sum of the cotangents facing them, any text on finite
elements), none below zero, each value is a mean of its neighbours', so there is no hill and no hollow in
*u* and no level line closes on itself. The streets between tight meanders may be narrower than the
triangles, and streams are drawn with all sorts of wiggles; so every line is checked against its stream and
all others at the end, and is moved a little along the stream, cut short, or left out where it would
break the rules. Each of these is a finding.

Each line ends where the ground has reached `height` above the bed and stays there, so that a levee or
a road does not end it, or at half the `width` to each side, whichever comes first.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
import shapely
from scipy.ndimage import gaussian_filter1d, minimum_filter1d
from scipy.sparse import coo_array, csc_array
from scipy.sparse.linalg import splu
from scipy.spatial import Delaunay, cKDTree

from terrain2q.errors import NOTE, Finding, InputError
from terrain2q.ground.cut_lines import CutLine
from terrain2q.ground.streams import StreamNetwork, length_text
from terrain2q.ground.terrain import Profile, Terrain
from terrain2q.units import SI, UnitSystem, unit_system

HEIGHT = 6.0
"""Metres above the bed at which a line may end: above most floods of streams whose valleys a study of this
kind maps (common practice; give a larger one for large rivers)."""

CORRIDOR = 1.0 / 20.0
"""Half the corridor about the stream within which lines are straight and square to it, and the length over
which the stream is smoothed, as a share of the width."""

HOLD = 1.0 / 20.0
"""How far the ground must stay high before a line ends on it, as a share of the width: further than a levee
or a road is wide."""

_LAYER = "cut_lines"
_MOST_STREAM_POINTS = 8000
_SHIFTS = (0.06, -0.06, 0.12, -0.12, 0.18, -0.18, 0.25, -0.25, 0.32, -0.32, 0.4, -0.4)


@dataclass(frozen=True, eq=False)
class LaidOutLine:
    """One cut line, laid out.

    Attributes
    ----------
    section_id : str
        The stream and the stream distance in the study's units, such as ``Ambersole-0500``.
    stream : str
    stream_distance : float
        Where the line crosses its stream, m from the stream's upstream end.
    xy : ndarray, shape (n, 2)
        Vertices in the terrain's CRS, left to right looking downstream.
    crossing : float
        Map distance along the line to the crossing.
    asked : float
        The stream distance asked for, m; the line may have been moved a little.
    heights : tuple of float
        Ground at the left and the right end above the bed, m; NaN where there is no ground.
    """

    section_id: str
    stream: str
    stream_distance: float
    xy: np.ndarray
    crossing: float
    asked: float
    heights: tuple[float, float] = (float("nan"), float("nan"))

    @property
    def geometry(self) -> shapely.LineString:
        """The line."""
        return shapely.LineString(self.xy)

    def as_cut_line(self) -> CutLine:
        """Return the line as one that has been read and turned."""
        x, y = self.xy.T.copy()
        return CutLine(self.section_id, x, y, self.stream, self.stream_distance, self.crossing)


@dataclass(frozen=True)
class KeptLine:
    """A line that is there already and that others keep clear of.

    Attributes
    ----------
    section_id, stream : str
    stream_distance : float
        m; NaN where the line crosses no stream.
    geometry : LineString
        In the terrain's CRS.
    """

    section_id: str
    stream: str
    stream_distance: float
    geometry: shapely.LineString


@dataclass(frozen=True)
class Layout:
    """The lines laid out, by stream and downstream, and what there is to know about them.

    Attributes
    ----------
    lines : list of LaidOutLine
    findings : list of Finding
        Codes ``line-ends-low``, ``line-moved``, ``line-left-out``.
    """

    lines: list[LaidOutLine] = field(default_factory=list)
    findings: list[Finding] = field(default_factory=list)


def lay_out(
    network: StreamNetwork,
    terrain: Terrain,
    *,
    width: float,
    every: float | None = None,
    at: Sequence[float] | None = None,
    height: float | None = None,
    streams: Sequence[str] | None = None,
    kept: Sequence[KeptLine] = (),
    units: str | UnitSystem = SI,
) -> Layout:
    """Lay out cut lines square to streams.

    Parameters
    ----------
    network : StreamNetwork
        Streams drawn downstream, in the terrain's CRS.
    terrain : Terrain
    width : float
        Greatest length of a line, m; half of it to each side of the stream.
    every : float, optional
        Distance between lines along the stream, m. Lines stand at its whole multiples from the upstream
        end; a stream that is shorter gets one in its middle.
    at : sequence of float, optional
        Stream distances of the lines, m, instead of `every`.
    height : float, optional
        Lines end where the ground is this far above the bed, m; :data:`HEIGHT` where not given.
    streams : sequence of str, optional
        The streams that get lines; all where not given.
    kept : sequence of KeptLine
        Lines that stay as they are: no line is laid out with the id of one or within a quarter of
        `every` of one, and none meets one.
    units : str or UnitSystem
        For the ids and for lengths in the findings' messages.

    Returns
    -------
    Layout
        A stream that flows into another has its lines cut off at that one and at its lines; of two that
        do not join, the shorter one's are cut off.

    Raises
    ------
    InputError
        Not exactly one of `every` and `at` is given (``key-conflict``, ``key-missing``); a length is not
        above zero (``number-not-positive``); `streams` names one that is not there
        (``value-not-allowed``).
    """
    units = unit_system(units)
    height = HEIGHT if height is None else height
    if (every is None) == (at is None):
        code = "key-missing" if every is None else "key-conflict"
        raise InputError(code, "lines are laid out at a spacing or at distances", fix="give `every` or `at`")
    for name, value in (("width", width), ("every", every), ("height", height)):
        if value is not None and not (np.isfinite(value) and value > 0.0):
            raise InputError("number-not-positive", f"{name} is {value}", where="the layout of cut lines")
    unknown = sorted(set(streams or ()) - network.stream_names)
    if unknown:
        raise InputError(
            "value-not-allowed",
            f"there is no stream {unknown[0]!r}",
            where="the layout of cut lines",
            fix=f"the streams are {', '.join(sorted(network.stream_names))}",
        )
    if not len(network):
        return Layout()
    job = _Job(network, terrain, float(width), every, float(height), units, kept)
    for run in job.runs:
        if streams is None or run.stream in streams:
            job.lay_out(run, at)
    return job.finish()


def lay_out_at(
    network: StreamNetwork,
    terrain: Terrain,
    stream: str,
    distances: Sequence[float],
    *,
    width: float,
    height: float | None = None,
    kept: Sequence[KeptLine] = (),
    units: str | UnitSystem = SI,
) -> Layout:
    """Lay out cut lines at given distances of one stream, such as up- and downstream of a crossing.

    Parameters
    ----------
    network, terrain, width, height, kept, units
        As for :func:`lay_out`.
    stream : str
    distances : sequence of float
        Stream distances, m. Those beyond the stream's ends get no line and a finding.

    Returns
    -------
    Layout
        :attr:`LaidOutLine.asked` tells which line stands for which distance.
    """
    return lay_out(
        network, terrain, width=width, at=distances, height=height, streams=[stream], kept=kept, units=units
    )


# --------------------------------------------------------------------------------------------------
# Runs: whole streams, joined from the network's chains


@dataclass(frozen=True, eq=False)
class _Run:
    """A stretch of one stream without branches; `at` is the ground distance of each vertex."""

    stream: str
    xy: np.ndarray
    at: np.ndarray
    line: shapely.LineString

    def place(self, distance) -> np.ndarray:
        return np.column_stack([np.interp(distance, self.at, self.xy[:, k]) for k in (0, 1)])


def _runs(network: StreamNetwork) -> list[_Run]:
    """Return the runs, a receiving one before those that flow into it, else the longer one first."""
    count = len(network)
    length = network.lengths
    every_chain = np.arange(count)
    start = network.distance_at(every_chain, np.zeros(count))
    end = network.distance_at(every_chain, length)
    xy = [shapely.get_coordinates(chain) for chain in network.chains]
    tolerance = 2.0 * network.ground.tolerance
    left = set(range(count))
    runs = []
    while left:
        last = max(left, key=lambda c: (end[c], -c))
        chain = [last]
        left.discard(last)
        while True:
            head = chain[0]
            before = [
                c for c in left
                if network.chain_stream[c] == network.chain_stream[head]
                and np.hypot(*(xy[c][-1] - xy[head][0])) <= tolerance
                and abs(end[c] - start[head]) <= 1e-6 * max(end[c], 1.0)
            ]  # fmt: skip
            if not before:
                break
            chain.insert(0, before[0])
            left.discard(before[0])
        points = [xy[chain[0]]] + [xy[c][1:] for c in chain[1:]]
        distances = [_vertex_distances(network, c, xy[c])[0 if i == 0 else 1 :] for i, c in enumerate(chain)]
        points, distances = np.concatenate(points), np.concatenate(distances)
        kept = np.concatenate([[True], np.diff(distances) > 0.0])
        line = shapely.LineString(points)
        runs.append(_Run(str(network.chain_stream[last]), points[kept], distances[kept], line))
    return _receiving_first([r for r in runs if len(r.xy) > 1], network)


def _vertex_distances(network: StreamNetwork, chain: int, xy: np.ndarray) -> np.ndarray:
    along = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(xy, axis=0).T))])
    return network.distance_at(np.full(len(xy), chain), along)


def _receiving_first(runs: list[_Run], network: StreamNetwork) -> list[_Run]:
    lines = np.array([r.line for r in runs], dtype=object)
    # Ends of tributaries are often drawn a little short of the stream they join.
    near = 10.0 / network.ground.metres_per_map_unit
    tree = shapely.STRtree(lines)
    ends = shapely.get_point(lines, -1)
    receiver = np.full(len(runs), -1)
    best = np.full(len(runs), np.inf)
    for one, other in zip(*tree.query(ends, predicate="dwithin", distance=near), strict=True):
        gap = shapely.distance(ends[one], lines[other])
        # Of two that end in one point the longer one receives.
        ends_too = shapely.distance(ends[one], ends[other]) <= near
        longer = (lines[other].length, -other) > (lines[one].length, -one)
        if one != other and gap < best[one] and (not ends_too or longer):
            receiver[one], best[one] = other, gap
    depth = np.zeros(len(runs), dtype=int)
    for number in range(len(runs)):
        seen, at = {number}, int(receiver[number])
        while at >= 0 and at not in seen:
            seen.add(at)
            depth[number] += 1
            at = int(receiver[at])
    order = sorted(range(len(runs)), key=lambda n: (depth[n], -lines[n].length, n))
    return [runs[n] for n in order]


# --------------------------------------------------------------------------------------------------
# The plane: metres of ground about one run


@dataclass(frozen=True)
class _Plane:
    """Metres east and north of an origin, and back; true on the ground about one run."""

    origin: np.ndarray
    scale: np.ndarray

    @classmethod
    def about(cls, run: _Run, network: StreamNetwork) -> _Plane:
        low, high = run.xy.min(axis=0), run.xy.max(axis=0)
        middle = 0.5 * (low + high)
        step = np.maximum(0.01 * (high - low).max(), 1e3 * network.ground.tolerance)
        measure = network.ground.distances.step_lengths
        scale = [float(np.ravel(measure(*middle, dx, dy))[0]) / step for dx, dy in ((step, 0.0), (0.0, step))]
        return cls(middle, np.array(scale))

    def to_plane(self, xy: np.ndarray) -> np.ndarray:
        return (xy - self.origin) * self.scale

    def to_map(self, xy: np.ndarray) -> np.ndarray:
        return xy / self.scale + self.origin


# --------------------------------------------------------------------------------------------------
# The function over the valley, and its level lines


class _Valley:
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


def _cuts_corners(xy: np.ndarray, step: float) -> bool:
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


# --------------------------------------------------------------------------------------------------
# The job


@dataclass
class _Line:
    """A line while it is being laid out; wings run from the stream outward, in map coordinates."""

    asked: float
    distance: float
    wings: list[np.ndarray]
    limits: list[str] = field(default_factory=lambda: ["width", "width"])
    profiles: list[Profile] = field(default_factory=list)
    bed: float = float("nan")
    sound: bool = True
    dropped: str = ""

    @property
    def xy(self) -> np.ndarray:
        return shapely.get_coordinates(self.shape)

    @property
    def shape(self) -> shapely.LineString:
        return _joined(self.wings)


class _Job:
    """One layout: its streams in order, and the lines so far."""

    def __init__(self, network, terrain, width, every, height, units, kept) -> None:
        self.network, self.terrain, self.units = network, terrain, units
        self.width, self.every, self.height = width, every, height
        self.kept = list(kept)
        self.runs = _runs(network)
        self.decimals = 8 if network.ground.crs.is_geographic else 3
        self.findings: list[Finding] = []
        self.done: list[tuple[_Run, _Line]] = []
        self.earlier: list[_Run] = []

    # -- distances ---------------------------------------------------------------------------------

    def _wanted(self, run: _Run, at) -> list[float]:
        first, last = float(run.at[0]), float(run.at[-1])
        if at is not None:
            # A line at a distance that the stream has twice, on branches, belongs to the longest.
            if any(r.stream == run.stream for r in self.earlier):
                return []
            inside = [d for d in map(float, at) if first <= d <= last]
            for d in map(float, at):
                if not first <= d <= last:
                    self._left_out(run, d, f"stream {run.stream} ends at {length_text(last, self.units)}")
            return sorted(inside)
        every = self.every
        clear = min(0.5 * every, CORRIDOR * self.width)
        start, stop = int(np.floor(first / every)) + 1, int(np.ceil(last / every)) - 1
        wanted = [k * every for k in range(start, stop + 1)]
        wanted = [d for d in wanted if first + clear <= d <= last - clear]
        if not wanted and run.at[-1] - run.at[0] > clear:
            wanted = [0.5 * (first + last)]
        mine = [k for k in self.kept if k.stream == run.stream]
        near = [k.stream_distance for k in mine if first - every <= k.stream_distance <= last + every]
        ids = {k.section_id for k in mine}
        return [
            d for d in wanted
            if self._name(run, d) not in ids and not any(abs(d - other) < 0.25 * every for other in near)
        ]  # fmt: skip

    def _name(self, run: _Run, distance: float) -> str:
        value = distance * self.units.per_si("length")
        longest = max(r.at[-1] for r in self.runs if r.stream == run.stream) * self.units.per_si("length")
        digits = len(str(int(longest)))
        step = None if self.every is None else self.every * self.units.per_si("length")
        places = 0 if step is None or abs(step - round(step)) < 1e-6 or step > 10.0 else 1
        return f"{run.stream}-{value:0{max(digits, 3) + (places + 1 if places else 0)}.{places}f}"

    # -- one stream --------------------------------------------------------------------------------

    def lay_out(self, run: _Run, at) -> None:
        wanted = self._wanted(run, at)
        plane = _Plane.about(run, self.network)
        lines: list[_Line] = []
        for low, high in self._stretches(run, wanted, at is not None):
            inside = [d for d in wanted if low <= d <= high]
            lines += self._raw_lines(run, plane, low, high, inside)
        self._end_on_high_ground(lines)
        self._end_at_mouths(run, plane, lines)
        self._keep_apart(run, lines)
        self._report(run, lines)
        self.done += [(run, line) for line in lines if not line.dropped]
        self.earlier.append(run)

    def _stretches(self, run: _Run, wanted: list[float], few: bool) -> list[tuple[float, float]]:
        """Return the stretches of stream to work on: all of it, or what lies about the distances."""
        if not wanted:
            return []
        if not few:
            return [(float(run.at[0]), float(run.at[-1]))]
        found: list[list[float]] = []
        for d in wanted:
            low, high = max(d - 1.5 * self.width, run.at[0]), min(d + 1.5 * self.width, run.at[-1])
            if found and low <= found[-1][1]:
                found[-1][1] = high
            else:
                found.append([low, high])
        return [(float(low), float(high)) for low, high in found]

    def _raw_lines(self, run: _Run, plane: _Plane, low: float, high: float, wanted) -> list[_Line]:
        inside = (run.at > low) & (run.at < high)
        at = np.concatenate([[low], run.at[inside], [high]])
        xy = plane.to_plane(run.place(at))
        corridor, reach = CORRIDOR * self.width, 0.5 * self.width
        step = corridor if self.every is None else min(max(self.every / 3.0, 0.35 * corridor), corridor)
        least = max(0.1 * corridor, (high - low) / _MOST_STREAM_POINTS)
        while step > least and _cuts_corners(xy, step):
            step *= 0.7
        step = max(step, (high - low) / _MOST_STREAM_POINTS)
        valley = _Valley(xy, at, step, corridor, reach)
        stream = shapely.LineString(plane.to_plane(shapely.get_coordinates(run.line)))
        shapely.prepare(stream)
        slack = self.every if self.every is not None else 2.0 * corridor
        lines = []
        for asked in wanted:
            best = None
            for shift in (0.0, *(share * slack for share in _SHIFTS)):
                distance = asked + shift
                if not low <= distance <= high:
                    continue
                place = plane.to_plane(run.place([distance]))[0]
                wings, sound = self._wings(valley, distance, place, reach, step)
                clear = min(_clear_length(wing, stream, 1e-3) for wing in wings)
                course = plane.to_plane(run.place(distance + np.array([-0.01, 0.01]))) - place
                clear = min(clear, reach) if sound else 0.1 * min(clear, reach)
                clear = clear if _passes(wings, course) else 0.0
                if best is None or clear > 1.5 * best[0]:
                    best = (clear, distance, wings, sound, course)
                if clear >= 2.0 * corridor:
                    break
            lines.append((asked, *best[1:]))
        plain = self._plain([line[2] for line in lines], [line[4] for line in lines], stream, step)
        return [
            _Line(asked, distance, [plane.to_map(_shortened(w, reach)) for w in wings], sound=sound)
            for (asked, distance, _, sound, _), wings in zip(lines, plain, strict=True)
        ]

    @staticmethod
    def _plain(pairs: list[list[np.ndarray]], courses, stream, step: float) -> list[list[np.ndarray]]:
        """Return the wings with as few vertices as can be, where that makes nothing meet."""
        coarse = [[_simplified(w, 0.5 * step) for w in wings] for wings in pairs]
        answer = list(coarse)
        fine = np.zeros(len(pairs), dtype=bool)
        while pairs:
            shapes = np.array([_joined(wings) for wings in answer], dtype=object)
            one, other = shapely.STRtree(shapes).query(shapes, predicate="intersects")
            wrong = np.zeros(len(pairs), dtype=bool)
            wrong[one[one != other]] = True
            wrong |= [
                any(np.isfinite(_clear_length(w, stream, 1e-3)) for w in wings) or not _passes(wings, course)
                for wings, course in zip(answer, courses, strict=True)
            ]
            wrong &= ~fine
            if not wrong.any():
                break
            fine |= wrong
            answer = [pairs[n] if fine[n] else coarse[n] for n in range(len(pairs))]
        return answer

    @staticmethod
    def _wings(valley: _Valley, distance, place, reach, step) -> tuple[list[np.ndarray], bool]:
        left, right, sound = valley.wings(distance)
        answer = []
        for wing in (left, right):
            # The stream's own place, not that of the chord between two of the valley's points.
            wing = np.concatenate([[place], wing[1:]])
            answer.append(_shortened(_simplified(wing, 0.12 * step), 1.08 * reach))
        return answer, sound

    # -- high ground -------------------------------------------------------------------------------

    def _end_on_high_ground(self, lines: list[_Line]) -> None:
        wings = [wing for line in lines for wing in line.wings]
        profiles = self.terrain.sample([shapely.LineString(wing) for wing in wings]) if wings else []
        for number, line in enumerate(lines):
            pair = profiles[2 * number : 2 * number + 2]
            bed = _bed(pair, CORRIDOR * self.width)
            if not np.isfinite(bed):
                line.dropped = "the terrain has no ground at the stream"
                continue
            line.profiles, line.bed = pair, bed
            for side, profile in enumerate(pair):
                # A hole in the terrain is passed over; its rim ends the line.
                known = np.isfinite(profile.elevations)
                ended = "width" if known[-1:].all() else "terrain"
                station, line.limits[side] = _high_ground(
                    profile.stations[known], profile.elevations[known], ended,
                    bed + self.height, HOLD * self.width,
                )  # fmt: skip
                reach = float(np.interp(station, profile.stations, profile.map_distances))
                line.wings[side] = self._rounded(_shortened(line.wings[side], reach))

    def _end_at_mouths(self, run: _Run, plane: _Plane, lines: list[_Line]) -> None:
        """End wings that would run on up the valley of a stream that joins.

        They end as far out as the lines up- and downstream find high ground: where that valley opens.
        """
        later = [shapely.LineString(plane.to_plane(r.xy)) for r in self.runs if r not in (run, *self.earlier)]
        names = [r.stream for r in self.runs if r not in (run, *self.earlier)]
        if not later:
            return
        tree = shapely.STRtree(later)
        alive = [line for line in lines if not line.dropped]
        for side in (0, 1):
            shapes = [shapely.LineString(plane.to_plane(line.wings[side])) for line in alive]
            found = [_astray(shape, tree, CORRIDOR * self.width) for shape in shapes]
            sound = [n for n, line in enumerate(alive) if found[n] is None and line.limits[side] == "height"]
            for line, shape, astray in zip(alive, shapes, found, strict=True):
                if astray is None:
                    continue
                reach, other = astray
                if sound:
                    wide = [shapes[n].length for n in sound]
                    opening = float(np.interp(line.distance, [alive[n].distance for n in sound], wide))
                    reach = max(reach, min(opening, shape.length))
                share = max(reach, min(2.0 * CORRIDOR * self.width, shape.length)) / shape.length
                wing = line.wings[side]
                line.wings[side] = self._rounded(_shortened(wing, share * _length(wing)))
                line.limits[side] = f"stream {names[other]} joins there"

    # -- apart from each other ---------------------------------------------------------------------

    def _keep_apart(self, run: _Run, lines: list[_Line]) -> None:
        """Cut lines short, or leave them out, where they would meet a stream or another line."""
        gap = 0.01 * self.width / self.network.ground.metres_per_map_unit
        least = 0.25 * CORRIDOR * self.width / self.network.ground.metres_per_map_unit
        own = [r.line for r in self.runs if r.stream == run.stream]
        blocks = [(r.line, f"stream {r.stream}") for r in self.earlier if r.stream != run.stream]
        blocks += [(line.shape, f"a line of stream {r.stream}") for r, line in self.done]
        blocks += [(k.geometry, f"line {k.section_id}") for k in self.kept]
        shapes = np.array([shape for shape, _ in blocks], dtype=object)
        tree = shapely.STRtree(shapes) if blocks else None
        own_line = shapely.union_all(own)
        for line in lines:
            if line.dropped:
                continue
            for side in (0, 1):
                wing = line.wings[side]
                clear = _clear_length(wing, own_line, self.network.ground.tolerance)
                self._cut(line, side, clear, gap, "its stream comes back", least)
                if tree is None:
                    continue
                shape = shapely.LineString(line.wings[side])
                nearest, what = np.inf, ""
                for index in tree.query(shape, predicate="intersects"):
                    hit = _first_meeting(shape, shapes[index])
                    if hit < nearest:
                        nearest, what = hit, blocks[index][1]
                if what:
                    self._cut(line, side, nearest, gap, f"{what} is there", least)
        for line in lines:
            # Where the stream winds within the line's first metres there is no place for a line.
            if not line.dropped and shapely.get_type_id(shapely.intersection(line.shape, own_line)) != 0:
                line.dropped = "the stream winds too much there"
        self._untangle(lines, gap, least)

    def _cut(self, line: _Line, side: int, clear: float, gap: float, why: str, least: float) -> None:
        wing = line.wings[side]
        if clear > _length(wing):
            return
        left = clear - min(gap, 0.25 * clear)
        if left < least:
            line.dropped = line.dropped or why
            left = max(left, 0.0)
        line.wings[side] = self._rounded(_shortened(wing, left))
        line.limits[side] = why

    def _untangle(self, lines: list[_Line], gap: float, least: float) -> None:
        """Cut short what meets, the one of two lines that is there further from its own crossing."""
        while True:
            alive = [line for line in lines if not line.dropped]
            shapes = np.array([line.shape for line in alive], dtype=object)
            if len(alive) < 2:
                return
            one, other = shapely.STRtree(shapes).query(shapes, predicate="intersects")
            pairs = [(int(a), int(b)) for a, b in zip(one, other, strict=True) if a < b]
            if not pairs:
                return
            for a, b in pairs:
                if alive[a].dropped or alive[b].dropped:
                    continue
                hits = []
                for line, mate in ((alive[a], alive[b]), (alive[b], alive[a])):
                    reach = [_first_meeting(shapely.LineString(w), mate.shape) for w in line.wings]
                    side = int(np.argmin(reach))
                    hits.append((reach[side], side, line, mate))
                if not np.isfinite(hits[0][0]) or not np.isfinite(hits[1][0]):
                    continue  # one of them has been cut short in this round
                far, side, line, mate = max(hits, key=lambda h: h[0])
                why = f"the line at {length_text(mate.distance, self.units)} is there"
                self._cut(line, side, far, gap, why, least)

    def _rounded(self, xy: np.ndarray) -> np.ndarray:
        return np.round(xy, self.decimals)

    # -- findings ----------------------------------------------------------------------------------

    def _left_out(self, run: _Run, distance: float, why: str) -> None:
        where = run.place([distance])[0]
        message = f"no line was laid out at {length_text(distance, self.units)} of stream {run.stream}: {why}"
        self.findings.append(Finding("line-left-out", message, _LAYER, self._name(run, distance)).at(*where))

    def _report(self, run: _Run, lines: list[_Line]) -> None:
        for line in lines:
            if line.dropped:
                self._left_out(run, line.asked, line.dropped)
                continue
            name, where = self._name(run, line.asked), run.place([line.distance])[0]
            if line.distance != line.asked:
                message = (
                    f"line {name} stands at {length_text(line.distance, self.units)} of stream {run.stream}, "
                    f"as its stream winds too much at {length_text(line.asked, self.units)}"
                )
                self.findings.append(Finding("line-moved", message, _LAYER, name).at(*where))
            low = [
                (side, limit, rise)
                for side, limit, rise in zip(("left", "right"), line.limits, self._heights(line), strict=True)
                if not rise >= self.height - 0.05
            ]
            if low:
                message = f"line {name} ends " + " and ".join(
                    f"{length_text(rise, self.units)} above the bed on the {side}, "
                    f"as {_REASONS.get(why, why)}"
                    for side, why, rise in low
                )
                # The width was asked for; anything else is a surprise.
                severity = NOTE if all(why == "width" for _, why, _ in low) else ""
                finding = Finding("line-ends-low", message, _LAYER, name, severity)
                self.findings.append(finding.at(*line.wings[0 if low[0][0] == "left" else 1][-1]))

    @staticmethod
    def _heights(line: _Line) -> tuple[float, float]:
        """Return the ground at the left and right end above the bed, NaN where there is none."""
        found = []
        for profile, wing in zip(line.profiles, line.wings, strict=True):
            known = np.isfinite(profile.elevations)
            at = profile.station_at(_length(wing))
            ground = (
                np.interp(at, profile.stations[known], profile.elevations[known]) if known.any() else np.nan
            )
            found.append(float(ground) - line.bed)
        return found[0], found[1]

    def finish(self) -> Layout:
        """Return the lines with their ids, each stream's own downstream."""
        used = {k.section_id for k in self.kept}
        answer = []
        for run, line in sorted(self.done, key=lambda d: (self.runs.index(d[0]), d[1].distance)):
            name = base = self._name(run, line.asked)
            for letter in "bcdefghijklmnopqrstuvwxyz":
                if name not in used:
                    break
                name = f"{base}{letter}"
            used.add(name)
            answer.append(
                LaidOutLine(
                    name, run.stream, line.distance, line.xy, _length(line.wings[0]), line.asked,
                    self._heights(line),
                )
            )  # fmt: skip
        return Layout(answer, self.findings)


_REASONS = {
    "width": "it has half the width",
    "terrain": "the terrain ends",
    "ridge": "the ground falls away behind a ridge",
}


# --------------------------------------------------------------------------------------------------
# Wings: polylines from the stream outward


def _simplified(wing: np.ndarray, tolerance: float) -> np.ndarray:
    return shapely.get_coordinates(shapely.simplify(shapely.LineString(wing), tolerance))


def _length(wing: np.ndarray) -> float:
    return float(np.hypot(*np.diff(wing, axis=0).T).sum())


def _joined(wings: Sequence[np.ndarray]) -> shapely.LineString:
    left, right = wings
    return shapely.LineString(np.concatenate([left[::-1], right[1:]]))


def _shortened(wing: np.ndarray, length: float) -> np.ndarray:
    """Return the first `length` of a polyline."""
    along = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(wing, axis=0).T))])
    if length >= along[-1]:
        return wing
    place = [np.interp(length, along, wing[:, k]) for k in (0, 1)]
    return np.concatenate([wing[:1], wing[1:][along[1:] < length], [place]])


def _astray(wing: shapely.LineString, streams: shapely.STRtree, corridor: float) -> tuple[float, int] | None:
    """Return how far along a wing it begins to run up another stream, and which; None where it does not."""
    step = 0.25 * corridor
    away = np.arange(step, wing.length, step)
    if not len(away) or not len(streams.query(wing, predicate="dwithin", distance=0.4 * wing.length)):
        return None
    places = shapely.line_interpolate_point(wing, away)
    (_, index), gap = streams.query_nearest(places, return_distance=True, all_matches=False)
    other = streams.geometries[index]
    along = shapely.line_locate_point(other, places)
    course = _coordinates(other, along + 2.0 * corridor) - _coordinates(other, along - 2.0 * corridor)
    way = _coordinates(np.full(len(away), wing), away + step) - shapely.get_coordinates(places)
    size = np.hypot(*course.T) * np.hypot(*way.T)
    cosine = np.abs(np.sum(course * way, axis=1)) / np.where(size > 0.0, size, 1.0)
    # Nearer to the other stream by far than to its own, and more along than across it.
    astray = (gap < 0.4 * away) & (cosine > np.sqrt(0.5))
    turns = np.flatnonzero(np.diff(np.concatenate([[0], astray, [0]]).astype(int)))
    for begin, end in zip(turns[::2], turns[1::2] - 1, strict=True):
        if away[end] - away[begin] >= 1.5 * corridor:
            return float(away[begin]), int(index[begin])
    return None


def _coordinates(lines, along) -> np.ndarray:
    length = shapely.length(lines)
    return shapely.get_coordinates(shapely.line_interpolate_point(lines, np.clip(along, 0.0, length)))


def _first_meeting(line: shapely.LineString, other, after: float = -1.0) -> float:
    """Return how far along a line it first meets another geometry, beyond `after`; infinite where never."""
    shared = shapely.intersection(line, other)
    if shared.is_empty:
        return np.inf
    along = shapely.line_locate_point(line, shapely.points(shapely.get_coordinates(shared)))
    along = along[along > after]
    return float(along.min()) if len(along) else np.inf


def _clear_length(wing: np.ndarray, stream, tolerance: float) -> float:
    """Return how far along a wing the stream is met again; infinite where never."""
    return _first_meeting(shapely.LineString(wing), stream, 3.0 * tolerance)


def _passes(wings: Sequence[np.ndarray], course: np.ndarray) -> bool:
    """Tell whether wings leave the stream on its two sides, at an angle, where a stream's wiggle is small.

    `course` holds the ways to the stream's places just up- and downstream.
    """
    for side, wing in zip((1.0, -1.0), wings, strict=True):
        way = wing[1] - wing[0]
        for sign, along in zip((-1.0, 1.0), course, strict=True):
            cross = sign * side * (along[0] * way[1] - along[1] * way[0])
            if cross <= 0.05 * np.hypot(*along) * np.hypot(*way):
                return False
    return True


def _bed(wings: Sequence[Profile], reach: float) -> float:
    near = [p.elevations[p.stations <= reach] for p in wings]
    near = np.concatenate([e[np.isfinite(e)] for e in near])
    return float(near.min()) if len(near) else float("nan")


def _high_ground(stations, ground, ended: str, level: float, hold: float) -> tuple[float, str]:
    """Return the station at which a wing ends, and why; `ended` says why the ground itself ends."""
    if not len(stations):
        return 0.0, "terrain"
    high = np.concatenate([[False], ground >= level, [False]])
    turns = np.flatnonzero(np.diff(high.astype(int)))
    for begin, end in zip(turns[::2], turns[1::2] - 1, strict=True):
        if end == len(ground) - 1 or stations[end] - stations[begin] >= hold:
            return float(stations[begin]), "height"
    if len(turns):
        ridge = slice(turns[0], turns[1])
        return float(stations[ridge][np.argmax(ground[ridge])]), "ridge"
    return float(stations[-1]), ended
