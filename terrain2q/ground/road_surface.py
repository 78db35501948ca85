"""The road's own surface, found in the ground across its line; its crest; and where its fill ends.

Road lines are drawn metres off, ditches run beside roads, and lidar is noisy. So the surface is looked for on
a grid of stations along the line and offsets across it:

1. *Where the road lies.* At each station every offset within the search distance is judged as the middle of a
   road: how even the ground is over a road's width, how level across, whether it falls away beyond both
   edges, and how far off the line it is. The way through the stations with the least sum, and without jumps,
   is the road (dynamic programming).
2. *How high it is.* The mean across the found width, to which the crown is added, is fitted along the road by
   local parabolas over the longest stretch that agrees with shorter ones within the noise, so that ten
   centimetres of noise become about one, and a sag of some tens of metres stays.
3. *Where there is none.* A road seldom climbs faster than :data:`STEEPEST`. A dip at the stream with steeper
   sides is no road but the ground under a bridge's deck; it is bridged straight from abutment to abutment.
4. *How wide the fill is.* From the road's edges outward the fill goes on as long as the ground falls.

Stations run along the road from left to right looking downstream, 0 at the crossing; offsets are positive
upstream. All in metres.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import shapely
from scipy.ndimage import grey_closing, uniform_filter1d

from terrain2q.ground.local_ground import LocalGround

STEEPEST = 0.2
"""Grade above which the sides of a dip are no road (common practice: public roads stay below 12 to 15 %)."""

SHARPEST_SAG = 100.0
"""Least radius, metres, of a road's sag (common practice: public roads have some hundreds of metres)."""

FACE = 0.3
"""Least slope of an abutment's face over three metres, or over less where it is low, across the whole road
(built at 1:2 or steeper)."""

SETS_BACK = 6.0
"""Metres from the edge of a dip within which the dip's slanting or rounded edge may lower the road."""

NO_ROAD = 2.5
"""Cost from which on a place does not look like a road at all; one that leans by a tenth costs 4."""

STANDS_OUT = 0.3
"""Metres of a road above the ground to both its sides by which its edges are seen."""

DIP = 0.3
"""Metres a dip must be deep, beyond the noise, to be one."""

FILL_FALLS = 0.08
"""Slope at which ground beside a road still counts as its fill (fills are built at 1:4 or steeper)."""

LARGEST_FILL = 45.0
"""Metres from the road's edge at which the search for the foot of the fill ends."""

LONGEST_DECK = 200.0
"""Longest dip, metres, that is taken for one bridge."""

SPREADS = (10.0, 15.0, 25.0, 40.0, 60.0)
"""Half lengths, metres, over which the road's height is fitted."""

_MISFIT, _EVEN = 1.6, 0.005
"""Of the noise, and m: misfit about a parabola from which on a kink lies within its span."""

_AGREE = 2.5


@dataclass(frozen=True, eq=False)
class RoadSurface:
    """The surface of a road about a crossing.

    Attributes
    ----------
    stations : ndarray, shape (n,)
        Along the road, m, 0 at the crossing, from left to right looking downstream.
    points : ndarray, shape (n, 2)
        The middle of the road, local metres.
    normals : ndarray, shape (n, 2)
        Unit vectors across the road, pointing upstream.
    heights : ndarray, shape (n,)
        The road's surface, m; NaN beyond gaps in the terrain.
    ground : ndarray, shape (n,)
        The mean ground over the road's width, unsmoothed, m.
    offsets : ndarray, shape (n,)
        How far the middle lies upstream of the line as it was drawn, m.
    edges : tuple of float
        Offsets of the upstream and the downstream edge from the middle, m (both positive).
    deck : tuple of float or None
        Stations of the abutments where the deck was removed from the ground at the crossing.
    other_decks : tuple of (float, float)
        The same elsewhere along the road: over other streams, or over roads.
    noise : float
        Standard deviation of the ground's mean over the width about the fitted surface, m.
    toes : tuple of ndarray, shape (n,)
        Distances from the middle to the foot of the fill, upstream and downstream, m.
    crossfall : float
        Median slope across the road, absolute.
    """

    stations: np.ndarray
    points: np.ndarray
    normals: np.ndarray
    heights: np.ndarray
    ground: np.ndarray
    offsets: np.ndarray
    edges: tuple[float, float]
    deck: tuple[float, float] | None
    other_decks: tuple[tuple[float, float], ...]
    noise: float
    toes: tuple[np.ndarray, np.ndarray]
    crossfall: float

    @property
    def footprint(self) -> shapely.Geometry:
        """Ground under the road and its fill, a polygon in local metres."""
        return _outline(self.points, self.normals, *self.toes)

    def place(self, station: float) -> np.ndarray:
        """Return the middle of the road at a station, local metres, shape (2,)."""
        return np.array([np.interp(station, self.stations, self.points[:, k]) for k in (0, 1)])

    def raised(self, by: float) -> RoadSurface:
        """Return the same surface, higher by a length."""
        return replace(self, heights=self.heights + by)


def _outline(points, normals, upstream: np.ndarray, downstream: np.ndarray) -> shapely.Geometry:
    """Return the ground from one distance to another beside a line."""
    up = points + normals * upstream[:, None]
    down = points - normals * downstream[:, None]
    whole = shapely.Polygon(np.concatenate([up, down[::-1]]))
    if whole.is_valid:
        return whole
    # piece by piece: at a sharp bend a single outline crosses itself
    corners = np.stack([up[:-1], up[1:], down[1:], down[:-1], up[:-1]], axis=1)
    return shapely.union_all(shapely.convex_hull(shapely.linestrings(corners)))


@dataclass(frozen=True)
class Crest:
    """Where water would first pass a road.

    Attributes
    ----------
    station : float
        Along the road from the crossing, m.
    height : float
        Level at which water passes, m.
    reached_over : float
        Level of the ground, upstream of the road, that water must pass on its way to the station, m.
    at_end : bool
        Whether the lowest point found is where the search ends, so that the road may go on falling.
    """

    station: float
    height: float
    reached_over: float
    at_end: bool


@dataclass(frozen=True, eq=False)
class _Strip:
    """The ground in a strip along a road line: stations by offsets."""

    stations: np.ndarray
    offsets: np.ndarray
    points: np.ndarray
    normals: np.ndarray
    ground: np.ndarray
    step: float


def find_road_surface(
    ground: LocalGround,
    line: shapely.LineString,
    at: float,
    downstream: np.ndarray,
    *,
    reach: float,
    width: float,
    search: float,
    streams: shapely.Geometry | None = None,
) -> RoadSurface | None:
    """Find the surface of a road about a crossing.

    Parameters
    ----------
    ground : LocalGround
    line : LineString
        The road as drawn, local metres.
    at : float
        Where it meets the stream, metres along the line.
    downstream : ndarray, shape (2,)
        The stream's course at the crossing.
    reach : float
        Metres to each side of the crossing, as far as the line goes.
    width : float
        Least width of a road, m.
    search : float
        Metres to each side of the line within which the road lies.
    streams : geometry, optional
        Streams in local metres: a dip with steep sides at one of them is a missing deck. The one at the
        crossing where absent.

    Returns
    -------
    RoadSurface or None
        None where there is no ground under the line.
    """
    strip = _strip(ground, line, at, downstream, reach, search)
    if strip is None:
        return None
    half = 0.5 * width
    cost = _cost(strip, half, search)
    offset = _best_way(cost, strip, search, np.ones(strip.stations.size, dtype=bool))
    mean = _across_mean(strip, offset, half, half)
    deck, others = _decks(strip, offset, mean, half)
    if deck is not None or others:
        # again, without the ground under decks
        offset = _best_way(cost, strip, search, _outside(strip.stations, deck, others))
        mean = _across_mean(strip, offset, half, half)
        again, others = _decks(strip, offset, mean, half)
        deck = again or deck
    there = _outside(strip.stations, deck, others)
    offset = offset + _off_middle(strip, offset, there, half)
    upper, lower, *_ = _edges(strip, offset, there & np.isfinite(mean), half)
    offset = offset + 0.5 * (upper - lower)
    upper, lower, core, crown, crossfall = _edges(strip, offset, there & np.isfinite(mean), half)
    mean = _across_mean(strip, offset, *core)
    heights, noise = _fitted(strip, mean, there & np.isfinite(mean))
    toes = _toes(strip, offset, (upper, lower), there)
    middle = strip.points + strip.normals * offset[:, None]
    return RoadSurface(
        strip.stations, middle, strip.normals, heights + crown, mean, offset, (upper, lower), deck, others,
        noise, toes, crossfall,
    )  # fmt: skip


def _outside(stations: np.ndarray, deck, others) -> np.ndarray:
    outside = np.ones(stations.size, dtype=bool)
    for start, end in (*others, *([] if deck is None else [deck])):
        outside &= (stations <= start) | (stations >= end)
    return outside


def fill_about(ground: LocalGround, line: shapely.LineString, beside: float) -> shapely.Geometry | None:
    """Return the ground that a road and its fill may take, without finding the road itself.

    Parameters
    ----------
    ground : LocalGround
    line : LineString
        The road as drawn, local metres.
    beside : float
        Metres to each side within which its edges lie; the fill goes on from there as far as the ground
        falls.
    """
    strip = _strip(ground, line, 0.5 * line.length, np.array([0.0, -1.0]), 0.5 * line.length, beside)
    if strip is None:
        return None
    here = np.zeros(strip.stations.size)
    toes = _toes(strip, here, (beside, beside), np.ones(here.size, dtype=bool))
    return _outline(strip.points, strip.normals, *toes)


def find_crest(surface: RoadSurface, ground: LocalGround, reach: float) -> Crest | None:
    """Find where water from the stream would first pass the road.

    Parameters
    ----------
    surface : RoadSurface
    ground : LocalGround
    reach : float
        Metres along the road to each side of the crossing.

    Returns
    -------
    Crest or None
        None where the road has no height within reach.

    Notes
    -----
    A sag along the road counts where water gets there: at each station the level is the road's height, or
    the highest ground on the way from the stream along the road's upstream side if that is higher. The
    lowest level is the crest.
    """
    s, road = surface.stations, surface.heights
    way = _way_along(surface, ground)
    level = np.full(s.size, np.nan)
    passed = np.full(s.size, np.nan)
    middle = int(np.argmin(np.abs(s)))
    for run in (slice(middle, None), slice(middle, None, -1)):
        passed[run] = np.maximum.accumulate(np.where(np.isfinite(way[run]), way[run], -np.inf))
    level = np.where(np.isfinite(road), np.maximum(road, passed), np.nan)
    near = np.flatnonzero((np.abs(s) <= reach) & np.isfinite(level))
    if not near.size:
        return None
    lowest = float(level[near].min())
    # where the way there decides, several stations are passed together: the road is lowest at one of them
    least = near[level[near] <= lowest + 1e-9]
    least = least[road[least] <= road[least].min() + 1e-9]
    best = int(least[np.argmin(np.abs(s[least]))])
    ends = (near[0], near[-1])
    step = s[1] - s[0]
    inner = max(2, round(15.0 / step))
    at_end = False
    if best in ends or min(best - ends[0], ends[1] - best) < 2:
        other = best + inner if best - ends[0] < ends[1] - best else best - inner
        other = int(np.clip(other, *ends))
        at_end = bool(level[other] > lowest + 0.05)
    return Crest(float(s[best]), lowest, float(passed[best]), at_end)


def _strip(ground: LocalGround, line, at, downstream, reach, search) -> _Strip | None:
    step = max(ground.cell, 0.5)
    length = line.length
    left, right = min(reach, at), min(reach, length - at)
    if left + right < 4.0 * step:
        return None
    stations = np.arange(-np.floor(left / step), np.floor(right / step) + 1) * step
    points = shapely.get_coordinates(shapely.line_interpolate_point(line, at + stations))
    span = max(3, round(9.0 / step) | 1)
    if len(points) > span:
        # a corner of the drawn line is a bend of the road
        ends = [points[: span // 2], points[-(span // 2) :]]
        points = uniform_filter1d(points, span, axis=0, mode="nearest")
        points[: span // 2], points[-(span // 2) :] = ends
    way = np.gradient(points, axis=0)
    way = uniform_filter1d(way, span, axis=0, mode="nearest")
    way /= np.maximum(np.hypot(*way.T), 1e-12)[:, None]
    middle = int(np.argmin(np.abs(stations)))
    course = np.asarray(downstream, dtype=float)
    rightward = np.array([course[1], -course[0]])
    if way[middle] @ rightward < 0:
        stations, points, way = -stations[::-1], points[::-1], -way[::-1]
    normals = np.column_stack([way[:, 1], -way[:, 0]])
    across = np.ceil((search + LARGEST_FILL) / step)
    offsets = np.arange(-across, across + 1) * step
    places = points[:, None, :] + normals[:, None, :] * offsets[None, :, None]
    values = ground.at(places)
    if np.isfinite(values[:, np.abs(offsets) <= search]).mean() < 0.05:
        return None
    return _Strip(stations, offsets, points, normals, values, step)


def _smooth(values: np.ndarray, count: int, axis: int) -> np.ndarray:
    """Return the running mean over what is known."""
    if count <= 1:
        return values
    known = np.isfinite(values)
    total = uniform_filter1d(np.where(known, values, 0.0), count, axis=axis, mode="nearest")
    share = uniform_filter1d(known.astype(float), count, axis=axis, mode="nearest")
    return np.where(share > 1e-9, total / np.maximum(share, 1e-9), np.nan)


def _cells(length: float, step: float) -> int:
    return max(1, round(length / step))


def _cost(strip: _Strip, half: float, search: float) -> np.ndarray:
    """How little each offset looks like the middle of a road, shape (stations, offsets)."""
    step, t = strip.step, strip.offsets
    z = _smooth(strip.ground, _cells(7.0, step) | 1, 0)
    count = _cells(2 * half, step) | 1
    filled = np.where(np.isfinite(z), z, np.nanmean(z))
    level = filled - filled.mean()

    def mean(values):
        return uniform_filter1d(values, count, axis=1, mode="nearest")

    middle = mean(level)
    square = mean(level**2) - middle**2
    spread = mean(t**2 * np.ones_like(level)) - mean(t * np.ones_like(level)) ** 2
    slope = np.zeros_like(level)
    if count >= 3:
        slope = (mean(level * t) - middle * mean(t * np.ones_like(level))) / np.maximum(spread, 1e-9)
    rough = np.sqrt(np.maximum(square - slope**2 * spread, 0.0))
    beyond = _cells(3.0, step)
    aside = count // 2 + 1 + beyond // 2
    outer = uniform_filter1d(level, beyond | 1, axis=1, mode="nearest")
    upper = middle - np.roll(outer, -aside, axis=1)
    lower = middle - np.roll(outer, aside, axis=1)

    def edge(drop):
        return np.clip(drop, 0.0, 1.0) + 0.3 * np.clip(-drop, 0.0, 1.0)

    cost = (
        np.minimum((rough / 0.05) ** 2, 6.0)
        + np.minimum((slope / 0.05) ** 2, 6.0)
        + (t / search) ** 2
        - 1.5 * (edge(upper) + edge(lower))
    )
    cost = np.where(np.isfinite(z), cost, 12.0)
    return _smooth(cost, _cells(12.0, step) | 1, 0)


def _best_way(cost: np.ndarray, strip: _Strip, search: float, there: np.ndarray) -> np.ndarray:
    """Offset of the road's middle at each station: least sum of costs, at most one column a station."""
    within = np.flatnonzero(np.abs(strip.offsets) <= search + 1e-9)
    local = cost[:, within]
    # what looks like a road nowhere, or everywhere alike, does not lead it aside
    best, worst = local.min(axis=1), np.quantile(local, 0.9, axis=1)
    weight = np.clip(NO_ROAD - best, 0.0, 1.0) * np.clip(worst - best - 1.0, 0.0, 1.0) * there
    local = local * weight[:, None] + 0.02 * (strip.offsets[within] / search) ** 2
    bend = 2.0
    total = local[0].copy()
    back = np.zeros(local.shape, dtype=np.int8)
    wall = np.array([np.inf])
    for k in range(1, len(local)):
        moves = np.stack([
            np.concatenate([wall, total[:-1]]) + bend, total, np.concatenate([total[1:], wall]) + bend,
        ])  # fmt: skip
        choice = np.argmin(moves, axis=0)
        back[k] = choice - 1
        total = moves[choice, np.arange(len(total))] + local[k]
    path = np.empty(len(local), dtype=int)
    path[-1] = int(np.argmin(total))
    for k in range(len(local) - 1, 0, -1):
        path[k - 1] = path[k] + back[k, path[k]]
    found = strip.offsets[within[path]]
    # a road does not jump a cell aside
    span = _cells(15.0, strip.step) | 1
    return uniform_filter1d(found, span, mode="nearest") if len(found) > span else found


def _about(strip: _Strip, offset: np.ndarray, upstream: float, downstream: float) -> np.ndarray:
    """Ground from one distance beside the road's middle to another, shape (stations, columns)."""
    steps = np.arange(-round(downstream / strip.step), round(upstream / strip.step) + 1)
    column = (offset[:, None] - strip.offsets[0]) / strip.step + steps
    column = np.clip(column, 0, strip.offsets.size - 1.000001)
    first = column.astype(int)
    share = column - first
    low = np.take_along_axis(strip.ground, first, axis=1)
    high = np.take_along_axis(strip.ground, first + 1, axis=1)
    return np.where(share > 1e-6, low + share * (high - low), low)


def _across_mean(strip: _Strip, offset: np.ndarray, upstream: float, downstream: float) -> np.ndarray:
    values = _about(strip, offset, upstream, downstream)
    known = np.isfinite(values)
    count = known.sum(axis=1)
    total = np.where(known, values, 0.0).sum(axis=1)
    return np.where(2 * count > values.shape[1], total / np.maximum(count, 1), np.nan)


def _level_of_noise(mean: np.ndarray) -> float:
    """Return the standard deviation of the ground's noise along the road, from second differences."""
    bend = mean[2:] - 2.0 * mean[1:-1] + mean[:-2]
    bend = bend[np.isfinite(bend)]
    return float(1.4826 * np.median(np.abs(bend)) / np.sqrt(6.0)) if bend.size else 0.0


def _standing(values: np.ndarray, middle: np.ndarray) -> np.ndarray:
    """Return by how much the middle lies above the ground furthest to both sides, shape (stations,)."""
    return middle - 0.5 * (values[:, 0] + values[:, -1])


def _beside(strip: _Strip, offset: np.ndarray, half: float) -> np.ndarray:
    """Return the ground across a road and as far again to each side, shape (stations, columns)."""
    return _about(strip, offset, 3.0 * half, 3.0 * half)


def _off_middle(strip: _Strip, offset: np.ndarray, there: np.ndarray, half: float) -> np.ndarray:
    """Return how far the middle between a road's edges lies from a way along it, shape (stations,)."""
    step = strip.step
    z = _smooth(_smooth(strip.ground, _cells(7.0, step) | 1, 0), _cells(3.0, step) | 1, 1)
    values = _about(replace(strip, ground=z), offset, 3.0 * half, 3.0 * half)
    count, inner = values.shape[1] // 2, int(np.floor(half / step))
    middle = values[:, count - inner : count + inner + 1].mean(axis=1)
    seen = np.flatnonzero(there & (_standing(values, middle) > STANDS_OUT))
    if seen.size < _cells(5.0, step):
        return np.zeros(offset.size)
    level = np.abs(values - middle[:, None]) <= 0.1
    upper = np.argmin(np.column_stack([level[:, count + 1 :], np.zeros(offset.size, dtype=bool)]), axis=1)
    lower = np.argmin(np.column_stack([level[:, count - 1 :: -1], np.zeros(offset.size, dtype=bool)]), axis=1)
    edged = seen[(upper[seen] < count) & (lower[seen] < count)]
    if edged.size < _cells(5.0, step):
        return np.zeros(offset.size)
    shift = 0.5 * step * (upper - lower)[edged]
    span = _cells(15.0, step) | 1
    padded = np.pad(shift, span // 2, mode="edge")
    shift = np.median(np.lib.stride_tricks.sliding_window_view(padded, span), axis=1)
    return np.interp(np.arange(offset.size), edged, shift)


def _decks(strip: _Strip, offset: np.ndarray, mean: np.ndarray, half: float):
    """Return where the ground dips as no road does: about the stream (None where not), and elsewhere."""
    known = np.isfinite(mean)
    if not known.any():
        return None, ()
    # a hillside that the line runs up may be steeper than any road: first without what does not stand out
    out = known & (_standing(_beside(strip, offset, half), mean) > STANDS_OUT)
    near = np.abs(strip.stations) <= LONGEST_DECK
    if (out & near & (strip.stations < 0)).any() and (out & near & (strip.stations > 0)).any():
        deck, others = _dips(strip.stations, mean, out)
        if deck is not None:
            return deck, others
    return _dips(strip.stations, mean, known)


def _dips(stations: np.ndarray, mean: np.ndarray, road_there: np.ndarray):
    """Return dips below a line over the ground where there may be a road; see :func:`_decks`."""
    known = np.isfinite(mean)
    noise = _level_of_noise(mean)
    z = np.where(road_there, mean, -np.inf)
    climb = STEEPEST * stations
    # the lowest line over the ground that nowhere climbs or falls faster
    road = np.maximum(
        np.maximum.accumulate(z + climb) - climb, np.maximum.accumulate((z - climb)[::-1])[::-1] + climb
    )
    # water without data at the stream is under the deck too
    below = np.where(known, road - np.where(known, mean, 0.0), np.inf)
    # a wide dip may be no steeper than a road, but it bends as none does
    deep = np.maximum(below, np.where(known, _sagging(stations, z) - np.where(known, mean, 0.0), np.inf))
    dips = _runs(deep > max(DIP, 4.0 * noise))
    quiet = max(0.05, 2.0 * noise)

    def between(first: int, last: int) -> tuple[float, float] | None:
        if not (_face(stations, mean, first, -1) > DIP and _face(stations, mean, last, 1) > DIP):
            return None
        while first > 0 and below[first] > quiet:
            first -= 1
        while last < z.size - 1 and below[last] > quiet:
            last += 1
        # one station more on each side: an abutment's edge is rounded off in a raster
        first, last = max(first - 1, 0), min(last + 1, z.size - 1)
        first, last = (_set_back(stations, mean, k, way, noise) for k, way in ((first, -1), (last, 1)))
        if first == 0 or last == z.size - 1 or stations[last] - stations[first] > LONGEST_DECK:
            return None
        return float(stations[first]), float(stations[last])

    deck = None
    about = [k for k, (a, b) in enumerate(dips) if stations[a] <= 10.0 and stations[b - 1] >= -10.0]
    if about:
        first, last = dips[about[0]][0], dips[about[-1]][1] - 1
        # where the ground under the deck is wide and level, its far ends are dips of their own
        for a, _ in reversed(dips[: about[0]]):
            if stations[first] - stations[a] < LONGEST_DECK and _face(stations, mean, a, -1) > DIP:
                first = a
        for _, b in dips[about[-1] + 1 :]:
            if stations[b - 1] - stations[last] < LONGEST_DECK and _face(stations, mean, b - 1, 1) > DIP:
                last = b - 1
        deck = between(first, last)
    start, end = deck if deck is not None else (0.0, 0.0)
    found = [between(a, b - 1) for a, b in dips if stations[b - 1] < start or stations[a] > end]
    return deck, tuple(d for d in found if d is not None)


def _face(stations: np.ndarray, mean: np.ndarray, edge: int, outward: int) -> float:
    """Rise, m, of a face that goes up outward at the edge of a dip, if it is steep as an abutment; else 0."""
    step = stations[1] - stations[0]
    longest = max(2, _cells(3.0, step))
    around = np.clip(edge + outward * np.arange(-2 * longest, longest + 1), 0, mean.size - 1)
    best, known = 0.0, False
    for span in range(1, longest + 1):
        rise = mean[around[span:]] - mean[around[:-span]]
        rise = rise[np.isfinite(rise)]
        known |= bool(rise.size)
        if rise.size and rise.max() > FACE * span * step:
            best = max(best, float(rise.max()))
    # water without data below the face leaves nothing to measure
    return best if known else np.inf


def _sagging(stations: np.ndarray, ground: np.ndarray) -> np.ndarray:
    """Return the lowest line over the ground that nowhere sags more sharply than a road does."""
    known = np.isfinite(ground)
    step = stations[1] - stations[0]
    reach = _cells(0.5 * LONGEST_DECK, step)
    arc = -((np.arange(-reach, reach + 1) * step) ** 2) / (2.0 * SHARPEST_SAG)
    return grey_closing(np.where(known, ground, ground[known].min()), structure=arc, mode="nearest")


def _set_back(stations: np.ndarray, mean: np.ndarray, edge: int, outward: int, noise: float) -> int:
    """Return the edge of a dip, moved outward to where the ground is as high as the road beyond lets expect.

    Where a stream passes at a slant, the ground's mean across the road goes down little by little.
    """
    step = stations[1] - stations[0]
    near, far = _cells(SETS_BACK, step), _cells(SETS_BACK + 15.0, step)
    beyond = np.clip(edge + outward * np.arange(near, far + 1), 0, mean.size - 1)
    beyond = beyond[np.isfinite(mean[beyond])]
    if beyond.size < 3 or np.ptp(beyond) * step < 5.0:
        return edge
    line = np.polyfit(stations[beyond], mean[beyond], 1)
    off = np.std(mean[beyond] - np.polyval(line, stations[beyond]))
    if abs(line[0]) > STEEPEST or off > 2.0 * noise + 0.02:
        return edge
    moved = edge
    for _ in range(near):
        if not 0 < moved < mean.size - 1:
            break
        short = np.polyval(line, stations[moved]) - mean[moved]
        if not short > max(0.05, 2.0 * noise):
            break
        moved += outward
    return moved


def _runs(flags: np.ndarray) -> list[tuple[int, int]]:
    edges = np.flatnonzero(np.diff(np.concatenate([[0], flags.astype(np.int8), [0]])))
    return list(zip(edges[::2].tolist(), edges[1::2].tolist(), strict=True))


def _edges(strip: _Strip, offset, there, half: float):
    """Return the road's edges, the part that is surely road, its crown above that, and its slope across."""
    step = strip.step
    count = round(3.0 * half / step)
    inner = int(np.floor(half / step))
    values = _about(strip, offset, count * step, count * step)
    middle = values[:, count - inner : count + inner + 1]
    usable = there & np.isfinite(middle).all(axis=1)
    if not usable.any():
        return half, half, (half, half), 0.0, 0.0
    # nearest to the stream the road stands out; further up the valley's side it may lie in the ground
    standing = usable & (_standing(values, middle.mean(axis=1)) > STANDS_OUT)
    chosen = np.flatnonzero(standing if np.count_nonzero(standing) >= _cells(5.0, step) else usable)
    chosen = chosen[np.argsort(np.abs(strip.stations[chosen]), kind="stable")[: _cells(60.0, step)]]
    shape = values[chosen] - middle[chosen].mean(axis=1)[:, None]
    typical = np.array([np.median(c[np.isfinite(c)]) if np.isfinite(c).any() else np.nan for c in shape.T])
    t = np.arange(-count, count + 1) * step
    near = slice(count - inner, count + inner + 1)
    tilt = float(np.polyfit(t[near], typical[near], 1)[0]) if inner else 0.0
    flat = np.abs(typical - tilt * t) <= 0.1
    upper = lower = inner
    while upper + 1 <= count and flat[count + upper + 1]:
        upper += 1
    while lower + 1 <= count and flat[count - lower - 1]:
        lower += 1
    # no edge to be seen: no wider than is known
    upper, lower = (inner if e == count else e for e in (upper, lower))
    # a cell in, so that a shoulder that is not quite straight stays out
    core = tuple(max(e - 1, min(e, inner)) for e in (upper, lower))
    inside = typical[count - core[1] : count + core[0] + 1]
    smooth = np.convolve(inside, np.ones(3) / 3.0, mode="valid") if inside.size >= 5 else inside
    crown = float(np.clip(np.nanmax(smooth) - np.nanmean(inside), 0.0, 0.3))
    return (
        max(upper, 0.5) * step, max(lower, 0.5) * step, (core[0] * step, core[1] * step), crown, abs(tilt),
    )  # fmt: skip


def _fitted(strip: _Strip, mean: np.ndarray, there: np.ndarray) -> tuple[np.ndarray, float]:
    """Return the road's height at every station, and the noise about it.

    A parabola is fitted about each station to what is known of the road, on both sides of a missing deck, and
    outliers are drawn in; at each station over the longest span whose fit agrees with those of all shorter
    ones within their errors. Where the road has a kink nearby, as where it comes out of a hillside, no
    parabola goes through both its arms, and the one to the side that one fits is taken.
    """
    heights = np.full(mean.size, np.nan)
    if not there.any():
        return heights, 0.0
    half = _cells(SPREADS[0], strip.step)
    fit = _local_parabolas(mean, there, half, half)[0]
    off = np.where(there, mean - fit, np.nan)
    limit = 3.0 * 1.4826 * np.nanmedian(np.abs(off)) + 1e-6
    tame = fit + np.clip(np.nan_to_num(off), -limit, limit)
    fit = _local_parabolas(tame, there, half, half)[0]
    noise = float(1.4826 * np.median(np.abs((mean - fit)[there])))
    (whole, _, fits_it), *arms = (
        _one_fit(values, there, before, after, strip.step, noise)
        # outliers are those of the parabola through both arms, which says nothing about one of them
        for values, before, after in ((tame, 1, 1), (mean, 1, 0), (mean, 0, 1))
    )
    heights = np.where(fits_it, whole, _at_kink(arms, whole, noise))
    heights = np.where(there, heights, np.nan)
    inside, span = np.arange(mean.size), np.flatnonzero(there)
    bridged = np.interp(inside, span, heights[span])
    return np.where((inside >= span[0]) & (inside <= span[-1]), bridged, np.nan), noise


def _one_fit(
    values: np.ndarray, there: np.ndarray, before: int, after: int, step: float, noise: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return heights, their errors, and whether a parabola goes through what is near, to one side or both."""
    fits = []
    for spread in SPREADS:
        half = _cells(spread, step)
        fits.append(_local_parabolas(values, there, before * half, after * half))
        if 2 * half > values.size:
            break
    return *_longest_agreeing(fits, noise), fits[0][2] <= _MISFIT * noise + _EVEN


def _at_kink(arms: Sequence, whole: np.ndarray, noise: float) -> np.ndarray:
    """Return the height of the better arm where one or both fit, else that of the whole."""
    (left, left_error, left_fits), (right, right_error, right_fits) = arms
    better = np.where(left_error <= right_error, left, right)
    # a point next to a kink hardly tells from which arm it is: where arms differ it is from the higher one,
    # as a road that comes out of a hillside lies on what is higher
    apart = np.abs(left - right) > _AGREE * noise * np.hypot(left_error, right_error)
    both = np.where(apart, np.maximum(left, right), better)
    one = np.where(left_fits, left, np.where(right_fits, right, whole))
    return np.where(left_fits & right_fits, both, one)


def _local_parabolas(
    values: np.ndarray, known: np.ndarray, before: int, after: int
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return parabolas fitted at each point to what is known within some points, their errors and misfits.

    The errors are for noise of 1. Where little is known, the fit leans towards a straight line. The misfit is
    the standard deviation of the values about the parabola.
    """
    weight = np.pad(known.astype(float), (before, after))
    middle = np.median(values[known])
    value = np.pad(np.where(known, values - middle, 0.0), (before, after))
    k = np.arange(-before, after + 1) / max(before, after, 1)
    moments = [np.correlate(weight, k**j, mode="valid") for j in range(5)]
    right = np.stack([np.correlate(value, k**j, mode="valid") for j in range(3)], axis=-1)
    matrix = np.stack([np.stack([moments[i + j] for j in range(3)], axis=-1) for i in range(3)], axis=-2)
    matrix[:, 1, 1] += 1e-6
    matrix[:, 2, 2] += 1e-3
    matrix[:, 0, 0] = np.maximum(matrix[:, 0, 0], 1e-9)
    inverse = np.linalg.inv(matrix)
    parabola = np.einsum("ijk,ik->ij", inverse, right)
    squares = np.correlate(value**2, np.ones(k.size), mode="valid") - (parabola * right).sum(axis=1)
    misfit = np.sqrt(np.maximum(squares, 0.0) / np.maximum(moments[0] - 3.0, 1.0))
    return parabola[:, 0] + middle, np.sqrt(np.maximum(inverse[:, 0, 0], 0.0)), misfit


def _longest_agreeing(fits: list, noise: float) -> tuple[np.ndarray, np.ndarray]:
    """Return of each point the fit over the longest span that agrees with those over shorter ones; errors."""
    best, best_error, _ = fits[0]
    low, high = best - _AGREE * noise * best_error, best + _AGREE * noise * best_error
    going = np.ones(best.size, dtype=bool)
    for fit, error, _ in fits[1:]:
        going &= (fit >= low - 1e-9) & (fit <= high + 1e-9)
        best, best_error = np.where(going, fit, best), np.where(going, error, best_error)
        low = np.maximum(low, fit - _AGREE * noise * error)
        high = np.minimum(high, fit + _AGREE * noise * error)
    return best, best_error


def _toes(strip: _Strip, offset: np.ndarray, edges, there) -> tuple[np.ndarray, np.ndarray]:
    """Distances from the middle to where the ground beside the road no longer falls away from it."""
    step = strip.step
    z = _smooth(strip.ground, _cells(7.0, step) | 1, 0)
    z = _smooth(z, _cells(2.0, step) | 1, 1)
    ahead = _cells(4.0, step)
    answer = []
    for sign, edge in zip((1, -1), edges, strict=True):
        ordered = z if sign > 0 else z[:, ::-1]
        falls = np.zeros(ordered.shape, dtype=bool)
        falls[:, :-ahead] = ordered[:, :-ahead] - ordered[:, ahead:] > FILL_FALLS * ahead * step
        start = np.rint((sign * offset + edge - strip.offsets[0]) / step).astype(int)
        columns = np.arange(ordered.shape[1])
        # the fill may begin a little beyond the edge
        begin = start[:, None] + _cells(1.5, step)
        stops = ~falls & (columns >= begin)
        stops[:, -1] = True
        foot = np.argmax(stops, axis=1)
        foot = np.minimum(foot, start + _cells(LARGEST_FILL - 5.0, step))
        reach = edge + (foot - start) * step
        reach = np.where(there, reach, np.nan)
        known = np.isfinite(reach)
        reach = (
            np.interp(np.arange(reach.size), np.flatnonzero(known), reach[known])
            if known.any()
            else np.full(reach.size, edge)
        )
        span = _cells(7.0, step) | 1
        if reach.size > span:
            padded = np.pad(reach, span // 2, mode="edge")
            reach = np.lib.stride_tricks.sliding_window_view(padded, span)
            reach = np.median(reach, axis=1)
        answer.append(reach)
    return answer[0], answer[1]


def _way_along(surface: RoadSurface, ground: LocalGround) -> np.ndarray:
    """Lowest ground beside the road, upstream, at each station: the way along the road's fill."""
    step = max(ground.cell, 0.5)
    beyond = np.arange(0.0, 20.0 + step, step)
    start = surface.toes[0]
    away = start[:, None] + beyond
    places = surface.points[:, None, :] + surface.normals[:, None, :] * away[:, :, None]
    values = ground.at(places)
    lowest = np.where(np.isfinite(values), values, np.inf).min(axis=1)
    return np.where(np.isfinite(lowest), lowest, np.nan)
