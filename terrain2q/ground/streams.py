"""Stream lines: parts of one stream joined, ground distances along it, and its direction at a place."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Collection
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
import pyproj
import shapely

from terrain2q.errors import Finding
from terrain2q.ground.distances import GroundDistances
from terrain2q.units import SI, UnitSystem

if TYPE_CHECKING:
    import geopandas

JOIN_TOLERANCE = 1e-3
"""Metres within which two ends, or an end and a line, are taken to meet."""

_PIECE = 50
_MOST_BRIDGED = 200


def length_text(metres: float, units: UnitSystem = SI) -> str:
    """Return a length as it is read in a finding, in the study's units.

    Examples
    --------
    >>> length_text(12.345)
    '12.3 m'
    """
    value = metres * units.per_si("length")
    return (
        f"{value:.1f} {units.symbol('length')}"
        if abs(value) >= 1.0
        else f"{value:.3g} {units.symbol('length')}"
    )


class Ground:
    """Lengths and directions on the ellipsoid between places of one CRS.

    Parameters
    ----------
    crs : object
        Anything pyproj takes; its horizontal part is used.

    Attributes
    ----------
    crs : pyproj.CRS
    distances : GroundDistances
        Lengths along lines.
    metres_per_map_unit : float
        At most, where the unit is a degree.
    tolerance : float
        :data:`JOIN_TOLERANCE` in map units.

    Raises
    ------
    InputError
        Codes ``crs-unknown``, ``crs-local``.
    """

    def __init__(self, crs: object) -> None:
        self.distances = GroundDistances(crs)
        self.crs = self.distances.crs
        unit = self.crs.axis_info[0].unit_conversion_factor
        self.metres_per_map_unit = unit * self.distances.geod.a if self.crs.is_geographic else unit
        self.tolerance = JOIN_TOLERANCE / self.metres_per_map_unit
        geographic = self.crs.geodetic_crs.to_2d()
        self._to_geographic = pyproj.Transformer.from_crs(self.crs, geographic, always_xy=True)
        # Degrees, or grads in some older systems.
        self._degrees = np.degrees(geographic.axis_info[0].unit_conversion_factor)

    def inverse(self, x0, y0, x1, y1) -> tuple[np.ndarray, np.ndarray]:
        """Return length [m] and azimuth [degrees, clockwise from north] of the way from place to place.

        Parameters
        ----------
        x0, y0, x1, y1 : array_like, shape (n,)
            Map coordinates, x east and y north.

        Returns
        -------
        tuple of ndarray, shape (n,)
        """
        ends = [np.atleast_1d(np.asarray(v, dtype=float)) for v in (x0, y0, x1, y1)]
        degrees = (*self._to_geographic.transform(*ends[:2]), *self._to_geographic.transform(*ends[2:]))
        azimuth, _, length = self.distances.geod.inv(*(np.asarray(v) * self._degrees for v in degrees))
        return np.asarray(length), np.asarray(azimuth)


class StreamNetwork:
    """The streams of a layer, each one joined from its parts in drawn (downstream) direction.

    Parts of one id that join end to end become one chain. Where the parts of one id branch, stream distance
    is measured along the longest way from upstream. Parts that lie apart are put in order by the shortest
    gaps, and distance runs straight over the gap (finding ``stream-gap``).

    Parameters
    ----------
    streams : geopandas.GeoDataFrame
        Lines with a column ``feature_id``; rows that share it are one stream.
    crs : object
        The CRS of the layer.
    units : UnitSystem
        For lengths in findings.

    Attributes
    ----------
    chains : ndarray of LineString, shape (c,)
    chain_stream : ndarray of str, shape (c,)
        The stream each chain belongs to.
    chain_start : ndarray, shape (c,)
        Stream distance [m] at the first point of each chain.
    begins, ends : ndarray of bool, shape (c,)
        Whether nothing of the same stream comes before, or after, a chain.
    findings : list of Finding
        Codes ``stream-unusable``, ``stream-gap``, ``stream-parts-oppose``.
    """

    def __init__(self, streams: geopandas.GeoDataFrame, crs: object, units: UnitSystem = SI) -> None:
        self.ground = Ground(crs)
        self.findings: list[Finding] = []
        self._units = units
        parts, names = self._parts(streams)
        self._join(parts, names)

    def __len__(self) -> int:
        return len(self.chains)

    def _parts(self, streams) -> tuple[np.ndarray, np.ndarray]:
        shapes = streams.geometry.to_numpy()
        names = feature_ids(streams)
        coordinates, owner = shapely.get_coordinates(shapes, return_index=True)
        broken = np.zeros(len(shapes), dtype=bool)
        broken[owner[~np.isfinite(coordinates).all(axis=1)]] = True
        usable = ~broken & ~shapely.is_missing(shapes)
        usable[usable] = shapely.length(shapes[usable]) > 0.0
        for row in np.flatnonzero(~usable):
            what = "coordinates that are not numbers" if broken[row] else "no geometry or no length"
            self.findings.append(
                Finding("stream-unusable", f"stream {names[row]} has {what}", "streams", names[row])
            )
        parts, owner = shapely.get_parts(shapes[usable], return_index=True)
        parts = shapely.remove_repeated_points(shapely.force_2d(parts))
        kept = shapely.length(parts) > 0.0
        return parts[kept], np.asarray(names, dtype=object)[usable][owner[kept]]

    def _join(self, parts: np.ndarray, names: np.ndarray) -> None:
        first = shapely.get_coordinates(shapely.get_point(parts, 0))
        last = shapely.get_coordinates(shapely.get_point(parts, -1))
        nodes, place = _nodes(np.vstack([first, last]), np.concatenate([names, names]), self.ground.tolerance)
        start, end = nodes[: len(parts)], nodes[len(parts) :]
        count = len(place)
        into, out_of = np.bincount(end, minlength=count), np.bincount(start, minlength=count)
        for node in np.flatnonzero(((into == 2) & (out_of == 0)) | ((into == 0) & (out_of == 2))):
            name = names[np.flatnonzero((end if into[node] else start) == node)[0]]
            way = "end" if into[node] else "begin"
            message = f"two parts of stream {name} both {way} here, so one of them is drawn upstream"
            self.findings.append(
                Finding("stream-parts-oppose", message, "streams", str(name)).at(*place[node])
            )

        through = (into == 1) & (out_of == 1)
        leaving = dict(zip(start[through[start]], np.flatnonzero(through[start]), strict=True))
        used = np.zeros(len(parts), dtype=bool)
        chains, chain_names, chain_from, chain_to = [], [], [], []
        # Parts that begin a chain come first; what is left over runs in a circle and begins anywhere.
        for part in (*np.flatnonzero(~through[start]), *np.flatnonzero(through[start])):
            if used[part]:
                continue
            run, at = [], part
            while at is not None and not used[at]:
                used[at] = True
                run.append(at)
                at = leaving.get(end[at])
            points = [shapely.get_coordinates(parts[run[0]])]
            points += [shapely.get_coordinates(parts[other])[1:] for other in run[1:]]
            chains.append(shapely.LineString(np.concatenate(points)) if len(run) > 1 else parts[part])
            chain_names.append(names[part])
            chain_from.append(start[part])
            chain_to.append(end[run[-1]])

        self.chains = np.asarray(chains, dtype=object)
        self.chain_stream = np.asarray(chain_names, dtype=object)
        self.lengths = shapely.length(self.chains) if len(chains) else np.empty(0)
        source, target = np.asarray(chain_from, dtype=int), np.asarray(chain_to, dtype=int)
        self.begins = into[source] == 0
        self.ends = out_of[target] == 0
        self._source, self._target = source, target
        self._measure()
        self.chain_start = self._distances(source, target, self._ground_length, place)

    def _measure(self) -> None:
        xy, owner = shapely.get_coordinates(self.chains, return_index=True)
        self._xy = xy
        self._offsets = np.concatenate(
            [[0], np.cumsum(np.bincount(owner, minlength=len(self.chains)))]
        ).astype(int)
        steps = np.zeros(len(xy))
        steps[1:] = np.where(owner[1:] == owner[:-1], np.hypot(*np.diff(xy, axis=0).T), 0.0)
        # Chain by chain, so that a distance does not depend on the other streams, to the last bit.
        self._map_at = np.concatenate([np.cumsum(run) for run in np.split(steps, self._offsets[1:-1])])
        self._base = np.cumsum(self.lengths) - self.lengths
        self._measured = None
        self._ground_length = np.zeros(len(self.chains))
        if len(xy):
            self._measured = self.ground.distances.measure(xy[:, 0], xy[:, 1], self._offsets[:-1])
            self._ground_length = self._measured.vertex_stations[self._offsets[1:] - 1]

    def _distances(self, source, target, lengths, place) -> np.ndarray:
        """Return the stream distance at the start of each chain: the longest way from upstream."""
        edges = [(int(a), int(b), float(w)) for a, b, w in zip(source, target, lengths, strict=True)]
        edges += self._bridges(source, target, place)
        following, waiting = defaultdict(list), defaultdict(int)
        for a, b, weight in edges:
            following[a].append((b, weight))
            waiting[b] += 1
        distance = defaultdict(float)
        ready = [node for node in following if not waiting[node]]
        pending = {node for node in waiting if waiting[node]}
        while ready or pending:
            if not ready:
                # Only circles are left; the walk goes on from where it has come furthest.
                node = max(sorted(pending), key=lambda n: distance[n])
                pending.discard(node)
                ready.append(node)
            node = ready.pop()
            for other, weight in following[node]:
                if other in pending:
                    distance[other] = max(distance[other], distance[node] + weight)
                    waiting[other] -= 1
                    if not waiting[other]:
                        pending.discard(other)
                        ready.append(other)
        return np.array([distance[int(node)] for node in source], dtype=float)

    def _bridges(self, source, target, place) -> list[tuple[int, int, float]]:
        """Return straight ways over the gaps between parts of one stream that lie apart."""
        count = len(place)
        group = _components(count, np.stack([source, target], axis=1))
        members = defaultdict(list)
        for chain, name in enumerate(self.chain_stream):
            members[name].append(chain)
        bridges = []
        for name, chains in members.items():
            chains = np.asarray(chains)
            groups = np.unique(group[source[chains]])
            if len(groups) < 2:
                continue
            if len(groups) > _MOST_BRIDGED:
                message = f"stream {name} lies in {len(groups)} parts apart; distance begins anew on each"
                self.findings.append(Finding("stream-gap", message, "streams", str(name)))
                continue
            sinks = np.unique(target[chains[self.ends[chains]]])
            springs = np.unique(source[chains[self.begins[chains]]])
            gaps = np.hypot(*(place[sinks][:, None, :] - place[springs][None, :, :]).transpose(2, 0, 1))
            free_sinks, free_springs = set(sinks.tolist()), set(springs.tolist())
            merged = {int(g): int(g) for g in groups}

            def top(g, merged=merged):
                while merged[g] != g:
                    g = merged[g]
                return g

            for flat in np.argsort(gaps, axis=None, kind="stable"):
                sink, spring = (int(v) for v in (sinks[flat // len(springs)], springs[flat % len(springs)]))
                one, other = top(int(group[sink])), top(int(group[spring]))
                if one == other or sink not in free_sinks or spring not in free_springs:
                    continue
                merged[one] = other
                free_sinks.discard(sink)
                free_springs.discard(spring)
                gap = float(self.ground.inverse(*place[sink], *place[spring])[0][0])
                bridges.append((sink, spring, gap))
                message = (
                    f"stream {name} has a gap of {length_text(gap, self._units)} between two of its parts"
                )
                self.findings.append(Finding("stream-gap", message, "streams", str(name)).at(*place[sink]))
        return bridges

    @property
    def ground_length(self) -> np.ndarray:
        """Length of each chain, m ground, shape (c,)."""
        return self._ground_length

    def next_chain(self, chain: int, downstream: bool, but: Collection[int] = ()) -> int | None:
        """Return the chain of the same stream that goes on from one end of a chain, None where it ends.

        Where several do, the one on the longest way: upstream the one whose spring is furthest, downstream
        the longest.

        Parameters
        ----------
        chain : int
        downstream : bool
        but : collection of int
            Chains that do not count.
        """
        if downstream:
            found = np.flatnonzero(self._source == self._target[chain])
            size = self._ground_length[found]
        else:
            found = np.flatnonzero(self._target == self._source[chain])
            size = self.chain_start[found] + self._ground_length[found]
        order = found[np.argsort(-size, kind="stable")]
        return next((int(other) for other in order if other != chain and other not in but), None)

    @cached_property
    def stream_names(self) -> frozenset[str]:
        """The ids of the streams."""
        return frozenset(str(name) for name in self.chain_stream)

    @cached_property
    def _pieces(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Short pieces of the chains, so that a search touches few points: geometry, chain, map position."""
        first, chain = [], []
        for number, (begin, end) in enumerate(zip(self._offsets[:-1], self._offsets[1:], strict=True)):
            starts = range(begin, end - 1, _PIECE)
            first += starts
            chain += [number] * len(starts)
        first, chain = np.asarray(first, dtype=int), np.asarray(chain, dtype=int)
        last = np.minimum(first + _PIECE, self._offsets[chain + 1] - 1)
        sizes = last - first + 1
        owner = np.repeat(np.arange(len(first)), sizes)
        within = np.arange(len(owner)) - np.repeat(np.cumsum(sizes) - sizes, sizes)
        geometry = shapely.linestrings(self._xy[np.repeat(first, sizes) + within], indices=owner)
        return geometry, chain, self._map_at[first]

    @property
    def pieces(self) -> np.ndarray:
        """Short pieces of the chains, shape (p,), for searching."""
        return self._pieces[0]

    @property
    def piece_chain(self) -> np.ndarray:
        """The chain of each piece, shape (p,)."""
        return self._pieces[1]

    @cached_property
    def tree(self) -> shapely.STRtree:
        """Search tree over :attr:`pieces`."""
        return shapely.STRtree(self.pieces)

    def locate(self, pieces: np.ndarray, points: np.ndarray) -> np.ndarray:
        """Return the map distance along its chain of each place nearest to `points`, shape (n,)."""
        geometry, chain, begin = self._pieces
        along = begin[pieces] + shapely.line_locate_point(geometry[pieces], points)
        return np.clip(along, 0.0, self.lengths[chain[pieces]])

    def distance_at(self, chains: np.ndarray, along: np.ndarray) -> np.ndarray:
        """Return the stream distance [m ground] at a map distance along a chain.

        Parameters
        ----------
        chains : ndarray of int, shape (n,)
        along : ndarray, shape (n,)
            Map distance from the chain's first point.
        """
        chains, along = np.atleast_1d(chains), np.atleast_1d(along)
        if not len(chains):
            return np.empty(0)
        return self.chain_start[chains] + self._measured.stations(*self._segments(chains, along))

    @cached_property
    def _key(self) -> np.ndarray:
        return self._map_at + np.repeat(self._base, np.diff(self._offsets))

    def _segments(self, chains: np.ndarray, along: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return the vertex before each place at a map distance along a chain, and how far on to the next."""
        begin, end = self._offsets[chains], self._offsets[chains + 1]
        place = np.searchsorted(self._key, self._base[chains] + along, side="right") - 1
        segment = np.clip(place, begin, end - 2)
        step = self._map_at[segment + 1] - self._map_at[segment]
        return segment, np.clip((along - self._map_at[segment]) / step, 0.0, 1.0)

    def stretch(self, chains: np.ndarray, low: np.ndarray, high: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return the places at two map distances along a chain, upstream and downstream, each shape (n, 2).

        Distances beyond a chain's end are taken at its end.
        """
        if not len(chains):
            return np.empty((0, 2)), np.empty((0, 2))
        places = []
        for along in (low, high):
            segment, share = self._segments(chains, along)
            start, end = self._xy[segment], self._xy[segment + 1]
            places.append(start + share[:, None] * (end - start))
        return tuple(places)


def feature_ids(frame: geopandas.GeoDataFrame) -> list[str]:
    """Return the ids of a layer's features: the column ``feature_id``, else a running number from 1."""
    if "feature_id" in frame.columns:
        return [str(value) for value in frame["feature_id"].tolist()]
    return [str(number) for number in range(1, len(frame) + 1)]


def _nodes(xy: np.ndarray, names: np.ndarray, tolerance: float) -> tuple[np.ndarray, np.ndarray]:
    """Return the node of each end, one for all ends of a stream that meet, and the place of each node."""
    count = len(xy)
    if not count:
        return np.empty(0, dtype=int), np.empty((0, 2))
    points = shapely.points(xy)
    pairs = shapely.STRtree(points).query(points, predicate="dwithin", distance=tolerance).T
    pairs = pairs[(pairs[:, 0] < pairs[:, 1]) & (names[pairs[:, 0]] == names[pairs[:, 1]])]
    nodes = _components(count, pairs)
    place = np.empty((nodes.max() + 1, 2))
    place[nodes] = xy
    return nodes, place


def _components(count: int, pairs: np.ndarray) -> np.ndarray:
    """Return the number of the group of each of `count` things of which some pairs belong together.

    Groups are numbered as they first appear. (Written out, as loading a library for it takes longer than the
    work.)
    """
    least = np.arange(count)
    a, b = np.asarray(pairs, dtype=np.int64).reshape(-1, 2).T
    while (least[a] != least[b]).any():
        low = np.minimum(least[a], least[b])
        np.minimum.at(least, least[a], low)
        np.minimum.at(least, least[b], low)
        np.minimum.at(least, a, low)
        np.minimum.at(least, b, low)
        least = least[least]
    return np.unique(least, return_inverse=True)[1]
