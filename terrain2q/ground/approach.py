"""The ground up- and downstream of a road: the stream's course, its bed, and places for sections."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import shapely
from rasterio.features import rasterize
from scipy.ndimage import label, uniform_filter1d
from scipy.spatial import cKDTree
from shapely.ops import substring

from terrain2q.ground.local_ground import LocalGround
from terrain2q.ground.streams import StreamNetwork

SWATH = 8.0
"""Metres to each side of the stream line within which its bed is looked for."""

LEAST_CELLS = 4
"""Cells that a section must be wide at the least."""

LOW_SHARE = 0.3
"""Share of the ground across the swath whose mean is the bed: one cell alone is noise."""

FLAT_WATER = 100.0
"""Metres of level ground along a stream that are taken for standing water."""

LEVEL_WITHIN = 0.05
"""Metres within which ground is level (lidar over water, or water that was levelled in the terrain)."""


@dataclass(frozen=True)
class Course:
    """A stretch of stream through a crossing.

    Attributes
    ----------
    line : shapely.LineString
        Downstream, in the CRS of the network.
    at : float
        Map distance along it to the crossing.
    joins : float
        Map distance along it at which another stream, that has come further, is joined; infinite where none
        is.
    joined : str
        That stream.
    """

    line: shapely.LineString
    at: float
    joins: float = float("inf")
    joined: str = ""


class Courses:
    """Stretches of stream that go on from one chain into the next.

    Parameters
    ----------
    network : StreamNetwork
    """

    def __init__(self, network: StreamNetwork) -> None:
        self.network = network

    @cached_property
    def _ends(self):
        first = shapely.get_coordinates(shapely.get_point(self.network.chains, 0))
        last = shapely.get_coordinates(shapely.get_point(self.network.chains, -1))
        return first, last, cKDTree(first), cKDTree(last)

    def through(self, chain: int, along: float, upstream: float, downstream: float) -> Course:
        """Return the stream about a place, so many map units up- and downstream as far as it goes."""
        network, (first, last, starts, ends) = self.network, self._ends
        tolerance = 2.0 * network.ground.tolerance
        pieces = [substring(network.chains[chain], max(along - upstream, 0.0), along + downstream)]
        at = along - max(along - upstream, 0.0)
        joins, joined = np.inf, ""
        used = {chain}
        here, have = chain, network.lengths[chain] - along
        while have < downstream:
            follow = [k for k in starts.query_ball_point(last[here], tolerance) if k not in used]
            if not follow:
                break
            here = min(follow)
            used.add(here)
            name = str(network.chain_stream[here])
            if joins == np.inf and name != str(network.chain_stream[chain]):
                before = [k for k in ends.query_ball_point(first[here], tolerance) if k not in used]
                mine = (
                    network.chain_start[chain]
                    + network.distance_at(np.array([chain]), np.array([network.lengths[chain]]))[0]
                    - network.chain_start[chain]
                )
                if before or network.chain_start[here] > mine:
                    joins, joined = at + have, name
            pieces.append(substring(network.chains[here], 0.0, downstream - have))
            have += network.lengths[here]
        if joins == np.inf and have < downstream:
            joins, joined = self._into(chain, here, at + have)
        here, have = chain, along
        while have < upstream:
            before = [k for k in ends.query_ball_point(first[here], tolerance) if k not in used]
            if not before:
                break
            own = [k for k in before if network.chain_stream[k] == network.chain_stream[here]] or before
            here = max(own, key=lambda k: network.chain_start[k])
            used.add(here)
            length = network.lengths[here]
            part = substring(network.chains[here], max(length - (upstream - have), 0.0), length)
            pieces.insert(0, part)
            at += part.length
            joins += part.length
            have += length
        points = [shapely.get_coordinates(p) for p in pieces if p.geom_type == "LineString"]
        xy = np.concatenate([points[0], *(p[1:] for p in points[1:])])
        return Course(shapely.LineString(xy), at, joins, joined)

    def _into(self, chain: int, here: int, at: float) -> tuple[float, str]:
        """Return where a stream that ends meets another in its middle."""
        network = self.network
        end = shapely.Point(self._ends[1][here])
        pieces = network.tree.query(end, predicate="dwithin", distance=2.0 * network.ground.tolerance)
        others = [p for p in pieces if network.piece_chain[p] != here]
        if not others:
            return np.inf, ""
        return at, str(network.chain_stream[network.piece_chain[others[0]]])


@dataclass(frozen=True, eq=False)
class Bed:
    """The low ground along a stream.

    Attributes
    ----------
    at : ndarray, shape (n,)
        Metres along the local line of the stream.
    heights : ndarray, shape (n,)
        Mean of the lowest ground about the line, m; NaN in gaps.
    spread : ndarray, shape (n,)
        How much the ground within a few metres varies across the stream, m.
    """

    at: np.ndarray
    heights: np.ndarray
    spread: np.ndarray

    def without(self, start: float, end: float) -> Bed:
        """Return the same bed with nothing known on a stretch, such as under a fill."""
        gone = (self.at > start) & (self.at < end)
        return Bed(self.at, np.where(gone, np.nan, self.heights), self.spread)

    def near(self, at: float) -> float:
        """Return the height of the bed at a place, straight over what is not known, m."""
        known = np.isfinite(self.heights)
        return float(np.interp(at, self.at[known], self.heights[known])) if known.any() else float("nan")


def bed_along(ground: LocalGround, stream: shapely.LineString) -> Bed:
    """Return the low ground along a stream.

    Parameters
    ----------
    ground : LocalGround
    stream : LineString
        Local metres, downstream.
    """
    step = max(ground.cell, 0.5)
    at = np.arange(0.0, stream.length, step)
    points, way = along_line(stream, at)
    normals = np.column_stack([way[:, 1], -way[:, 0]])
    half = max(SWATH, 3.0 * step)
    t = np.arange(-np.ceil(half / step), np.ceil(half / step) + 1) * step
    values = ground.at(points[:, None, :] + normals[:, None, :] * t[None, :, None])
    count = max(2, int(LOW_SHARE * t.size))
    ordered = np.sort(np.where(np.isfinite(values), values, np.inf), axis=1)
    with np.errstate(invalid="ignore"):
        heights = ordered[:, :count].mean(axis=1)
        middle = np.abs(t) <= max(5.0, step)
        spread = np.ptp(values[:, middle], axis=1)
    return Bed(at, np.where(np.isfinite(heights), heights, np.nan), spread)


def along_line(line: shapely.LineString, at: np.ndarray, smooth: float = 20.0):
    """Return points of a line and its course there, smoothed over some metres; each shape (n, 2)."""
    points = shapely.get_coordinates(shapely.line_interpolate_point(line, at))
    behind, ahead = (
        shapely.get_coordinates(shapely.line_interpolate_point(line, np.clip(at + d, 0, line.length)))
        for d in (-smooth, smooth)
    )
    way = ahead - behind
    return points, way / np.maximum(np.hypot(*way.T), 1e-12)[:, None]


def standing_water(bed: Bed, start: float, end: float) -> tuple[float, float, float] | None:
    """Return where along a stream the ground is level as only water is: from, to, and its level.

    Parameters
    ----------
    bed : Bed
    start, end : float
        The stretch to look at, metres along the stream's local line.
    """
    inside = (bed.at >= start) & (bed.at <= end) & np.isfinite(bed.heights)
    at, level, spread = bed.at[inside], bed.heights[inside], bed.spread[inside]
    if at.size < 3 or at[-1] - at[0] < FLAT_WATER:
        return None
    count = max(3, int(FLAT_WATER / (at[1] - at[0])))
    if at.size < count:
        return None
    windows = np.lib.stride_tricks.sliding_window_view(level, count)
    across = np.lib.stride_tricks.sliding_window_view(spread, count)
    flat = (np.ptp(windows, axis=1) <= LEVEL_WITHIN) & (np.nanmedian(across, axis=1) <= LEVEL_WITHIN)
    found = np.flatnonzero(flat)
    if not found.size:
        return None
    first = int(found[0])
    last = first
    while last + 1 < flat.size and flat[last + 1]:
        last += 1
    return float(at[first]), float(at[last + count - 1]), float(np.median(level[first : last + count]))


@dataclass(frozen=True, eq=False)
class SectionPlace:
    """A place for a section beside a road.

    Attributes
    ----------
    at : float
        Metres along the stream's local line.
    points : ndarray, shape (3, 2)
        Left end, the stream, right end, looking downstream; local metres.
    cut : bool
        Whether a road ends the section before it reaches high ground.
    """

    at: float
    points: np.ndarray
    cut: bool


def place_section(
    ground: LocalGround,
    stream: shapely.LineString,
    start: float,
    upstream: bool,
    fills: shapely.Geometry,
    *,
    top: float,
    slope: float,
    half_width: float,
    farthest: float,
    clear: float,
) -> SectionPlace | None:
    """Find the nearest place for a section that is clear of the fill of every road.

    Parameters
    ----------
    ground : LocalGround
    stream : LineString
        Local metres, downstream.
    start : float
        Where the stream leaves the fill, metres along it.
    upstream : bool
        Which way to look from there.
    fills : geometry
        Ground under roads and their fills, local metres.
    top : float
        Level to which the section must reach, m, at `start`.
    slope : float
        Fall of the valley, which lifts `top` upstream.
    half_width : float
        Metres to each side at the most.
    farthest : float
        Metres along the stream at the most.
    clear : float
        Metres that a section keeps from every fill.

    Returns
    -------
    SectionPlace or None
        Square to the stream, ended where the ground passes `top`. Where no line within `farthest` is clear,
        the one with the most room, ended at the fill. None where the stream ends or has no ground.
    """
    step = max(ground.cell, 0.5)
    sign = -1.0 if upstream else 1.0
    closed = fills.buffer(clear)
    shapely.prepare(closed)
    t = np.arange(-np.floor(half_width / step), np.floor(half_width / step) + 1) * step
    best: tuple[float, SectionPlace] | None = None
    outside = False
    stride = max(2.0, step)
    for k in range(int(farthest / stride) + 1):
        at = start + sign * (clear + k * stride)
        if not 0.0 < at < stream.length:
            break
        point, way = (v[0] for v in along_line(stream, np.array([at])))
        if shapely.contains_xy(closed, *point):
            # beyond another road the stream has another crossing's water
            if outside:
                break
            continue
        outside = True
        # from left to right looking downstream
        across = np.array([way[1], -way[0]])
        z = ground.at(point + across * t[:, None])
        middle = t.size // 2
        if not np.isfinite(z[middle]):
            continue
        level = top - slope * (at - start)
        left, right = _high_ends(z, middle, level)
        if right - left < LEAST_CELLS:
            # the stream line runs over ground as high as that: no valley to be seen
            continue
        ends = [point + across * t[left], point + across * t[right]]
        line = shapely.LineString([ends[0], point, ends[1]])
        if not closed.intersects(line):
            return SectionPlace(float(at), np.array([ends[0], point, ends[1]]), False)
        rest = line.difference(closed)
        own = min(shapely.get_parts(rest), key=lambda p: p.distance(shapely.Point(point)))
        if own.length > LEAST_CELLS * step and (best is None or own.length > best[0]):
            xy = shapely.get_coordinates(own)
            best = own.length, SectionPlace(float(at), np.array([xy[0], point, xy[-1]]), True)
    return None if best is None else best[1]


def _high_ends(z: np.ndarray, middle: int, level: float) -> tuple[int, int]:
    """Return the indexes at which ground on each side of the middle has passed a level and stays there."""
    high = np.where(np.isfinite(z), z, -np.inf) > level
    # three points together, so that a noisy one does not end the section
    stays = uniform_filter1d(high.astype(float), 3, mode="nearest") > 0.99
    right = np.flatnonzero(stays[middle:])
    left = np.flatnonzero(stays[: middle + 1][::-1])
    return (
        middle - int(left[0]) if left.size else 0,
        middle + int(right[0]) if right.size else z.size - 1,
    )


def storage_below(
    ground: LocalGround, level: float, seed: np.ndarray, fills: shapely.Geometry, other_side: np.ndarray
) -> tuple[float, float, bool] | None:
    """Return the room upstream of a road below a level.

    Parameters
    ----------
    ground : LocalGround
    level : float
        Its crest, m.
    seed : ndarray, shape (2,)
        A place in the stream upstream of the fill, local metres.
    fills : geometry
        The fill, which holds the water back.
    other_side : ndarray, shape (2,)
        A place in the stream downstream.

    Returns
    -------
    volume, area : float
        m³ and m².
    whole : bool
        Whether all of it lies within the ground that was read.
    None
        Where water goes round the fill.
    """
    z, transform = ground.elevations, ground.transform
    wet = z < level
    corners = shapely.transform(fills, ground.to_map)
    if corners.is_empty:
        return None
    wall = rasterize([(corners, 1)], out_shape=z.shape, transform=transform, dtype="uint8", all_touched=True)
    wet &= wall == 0
    pools, _ = label(wet)
    a, b = (_cell(ground, place) for place in (seed, other_side))
    if a is None or pools[a] == 0:
        return None
    pool = pools == pools[a]
    if b is not None and pools[b] == pools[a]:
        return None
    size = float(np.abs(transform.a * transform.e - transform.b * transform.d) * np.prod(ground.scale))
    edge = pool[0].any() or pool[-1].any() or pool[:, 0].any() or pool[:, -1].any()
    return float((level - z[pool]).sum(dtype=float) * size), float(pool.sum() * size), not edge


def _cell(ground: LocalGround, place: np.ndarray) -> tuple[int, int] | None:
    column, row = ~ground.transform * tuple(ground.to_map(place))
    row, column = int(np.floor(row)), int(np.floor(column))
    height, width = ground.elevations.shape
    return (row, column) if 0 <= row < height and 0 <= column < width else None
