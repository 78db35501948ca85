"""The low line of the ground along a stream: snapped to the lowest path, freed of fills and pits, turned.

A stream line is seldom drawn where the terrain has the channel, and a terrain has things in the channel that
are not bed: road fills over culverts, pits, noise. Four steps bring out the bed:

1. *Lowest path.* At each cell's length along the line the ground is sampled square to it, out to the snap
   distance. The path of least cost through these rows is the low line: a place costs what it lies above the
   lowest place of its row (a metre at most), and a step sideways costs :data:`SIDE_COST`. It serves
   elevations only; stream distances stay those of the drawn line.
2. *Humps.* Water never flows uphill, so ground that stands above both what lies upstream and what lies
   downstream of it is no bed. The opening of the profile (the highest, over all windows that hold a place, of
   the lowest ground in the window) leaves ground that falls all the way as it is and cuts off every hump
   shorter than the window: :data:`LONGEST_FILL` for fills, and at last :data:`LONGEST_HILL` for what stands
   out by a metre. What stands clearly above the opening is a hump, with a margin for its toes. It is taken
   out, and nothing is put in its place but a straight bridge for plots, so a hump cannot flatten the stretch
   upstream of it as filling or carving would.
3. *Pits.* The same upside down, over :data:`LONGEST_PIT`.
4. *Noise* stays in; :func:`terrain2q.ground.stream_slope.robust_slope` takes account of it.
"""

from __future__ import annotations

from collections.abc import Collection, Iterator, Sequence
from dataclasses import dataclass, field
from functools import cache, cached_property
from typing import TYPE_CHECKING

import numpy as np
import shapely

from terrain2q.errors import Finding
from terrain2q.ground.plain_fall import plain_ways
from terrain2q.ground.stream_slope import robust_slope
from terrain2q.ground.streams import StreamNetwork, feature_ids, length_text
from terrain2q.ground.terrain import POINTS_AT_ONCE, Terrain
from terrain2q.units import SI, UnitSystem

if TYPE_CHECKING:
    import geopandas

SNAP_CELLS, SNAP_LEAST = 5.0, 15.0
"""The snap distance where none is given: so many cells, and so many metres at least."""

SIDE_COST = 0.3
"""Metres of height that the lowest path must gain for each cell sideways: three times usual lidar noise."""

HIGH_COST = 1.0
"""Metres above the lowest place of its row from which a place is not dearer still."""

LONGEST_PIT, LONGEST_FILL, LONGEST_HILL = 30.0, 100.0, 500.0
"""Metres along the stream. A hill that a stream runs over is a tunnel, or a wrong line or terrain."""

CLEAR, CLEAR_HILL = 0.3, 1.0
"""Metres above (below) the opening (closing) from which ground may be a fill or a hill (a pit)."""

NOTABLE_CELLS, NOTABLE_GAIN = 2.0, 0.15
"""A shift is worth a finding when it is so many cells and the ground is so many metres lower there."""

LEAST_FALL = 0.3
"""Metres of fall below which the ground does not tell which way a stream flows."""

CLEAR_FALL, AGREEING = 2.0, 0.9
"""Metres of fall, and share of pairs of points that agree, that tell it even where the profile is bent."""

_LAYER = "streams"

_MANY_ROWS = 5000
"""Rows of ground from which on compiled code is worth its loading."""


@dataclass(frozen=True)
class Hump:
    """A stretch that was taken out of a low line: a fill where `height` is above zero, else a pit.

    Attributes
    ----------
    start, end : float
        Stream distances, m.
    height : float
        Greatest height above (below, negative) the bridge, m.
    x, y : float
        Its highest or lowest place.
    """

    start: float
    end: float
    height: float
    x: float
    y: float


@dataclass(frozen=True, eq=False)
class LowLine:
    """The ground along one chain of a stream, at even distances; arrays of shape (n,).

    Attributes
    ----------
    stream : str
    distance : ndarray
        Along the drawn line from the stream's upper end, m ground.
    x, y : ndarray
        Places on the lowest path, in the terrain's CRS.
    drawn, low : ndarray
        Ground under the drawn line and on the lowest path, m; NaN in gaps.
    bed : ndarray
        The low line with humps and pits bridged, noise left in; NaN where the ground is not known at all.
    usable : ndarray of bool
        Where `bed` is ground and not a bridge.
    shift : ndarray
        Ground distance from the drawn line, m, positive to the left.
    humps : tuple of Hump
    """

    stream: str
    distance: np.ndarray
    x: np.ndarray
    y: np.ndarray
    drawn: np.ndarray
    low: np.ndarray
    bed: np.ndarray
    usable: np.ndarray
    shift: np.ndarray
    humps: tuple[Hump, ...] = field(default=())

    @cached_property
    def ground(self) -> tuple[np.ndarray, np.ndarray]:
        """Distance and bed where the bed is ground and not a bridge, each shape (m,)."""
        return self.distance[self.usable], self.bed[self.usable]

    def between(self, low: float, high: float) -> tuple[np.ndarray, np.ndarray]:
        """Return distance and bed of :attr:`ground` from one stream distance to another."""
        distance, bed = self.ground
        first, last = np.searchsorted(distance, [low - 1e-6, high + 1e-6])
        return distance[first:last], bed[first:last]


# ---- arrays ---------------------------------------------------------------------------------------


@cache
def _can_compile() -> bool:
    try:
        import numba  # noqa: F401
    except ImportError:
        return False
    return True


def lowest_path(rows: np.ndarray, side_cost: float = SIDE_COST, compiled: bool | None = None) -> np.ndarray:
    """Return the column of the path of least cost through rows of ground.

    Parameters
    ----------
    rows : ndarray, shape (n, m)
        Ground at m places square to the stream, m odd with the drawn line in the middle; NaN for gaps.
    side_cost : float
        Cost of moving by one column from one row to the next, m. A path moves by one column at most.
    compiled : bool, optional
        False keeps to arrays also where there are many rows.

    Returns
    -------
    ndarray of int, shape (n,)
    """
    count, places = rows.shape
    if not count:
        return np.empty(0, dtype=int)
    known = np.isfinite(rows)
    least = np.where(known, rows, np.inf).min(axis=1, keepdims=True)
    cost = np.where(known, np.minimum(rows - np.where(np.isfinite(least), least, 0.0), HIGH_COST), HIGH_COST)
    # On level ground the path stays at the drawn line.
    cost += 1e-3 * np.abs(np.arange(places) - places // 2)
    if count >= _MANY_ROWS and compiled is not False and _can_compile():
        from terrain2q.ground.compiled_path import cheapest_path

        return cheapest_path(cost, side_cost)
    came = np.zeros((count, places), dtype=np.int8)
    total = cost[0]
    choices = np.full((3, places), np.inf)
    for row in range(1, count):
        choices[1] = total
        choices[0, 1:] = total[:-1] + side_cost
        choices[2, :-1] = total[1:] + side_cost
        best = choices.argmin(axis=0)
        came[row] = best - 1
        total = cost[row] + choices[best, np.arange(places)]
    path = np.empty(count, dtype=int)
    path[-1] = total.argmin()
    for row in range(count - 1, 0, -1):
        path[row - 1] = path[row] + came[row, path[row]]
    return path


def opening(values: np.ndarray, window: int) -> np.ndarray:
    """Return the highest, over all windows that hold a place, of the lowest value in the window.

    Values that never rise, or never fall, stay as they are, to the ends: a window may reach past them.

    Parameters
    ----------
    values : ndarray, shape (n,)
    window : int
        Number of values.

    Examples
    --------
    >>> opening(np.array([5.0, 4.0, 9.0, 3.0, 2.0]), 3)
    array([5., 4., 4., 3., 2.])
    """
    window = 2 * (window // 2) + 1
    padded = np.pad(values, window, constant_values=np.inf)
    from scipy.ndimage import maximum_filter1d, minimum_filter1d

    lowest = minimum_filter1d(padded, window, mode="nearest")
    lowest[~np.isfinite(lowest)] = -np.inf
    return maximum_filter1d(lowest, window, mode="nearest")[window:-window]


def find_humps(
    elevations: np.ndarray, spacing: float, longest: float, clear: float = CLEAR
) -> list[tuple[int, int]]:
    """Return humps of a profile along a stream: ground above what lies on both sides of it.

    Parameters
    ----------
    elevations : ndarray, shape (n,)
        Without NaN, at even distances, m.
    spacing : float
        m.
    longest : float
        Longest hump, m.
    clear : float
        Least height, m; more where the whole profile is rough.

    Returns
    -------
    list of (first, last)
        Points, both included, with the toes.
    """
    count = elevations.size
    if count < 5 or spacing <= 0:
        return []
    from scipy.ndimage import median_filter

    smooth = median_filter(elevations, 5, mode="nearest")
    above = smooth - opening(smooth, max(round(longest / spacing), 4))
    middle = np.median(above)
    rough = 1.4826 * np.median(np.abs(above - middle))
    limit = max(clear, middle + 6.0 * rough)
    # A hump is told by its height, and reaches as far as the ground stays above the usual.
    standing = above > min(limit, max(CLEAR, middle + 2.0 * rough))
    edges = np.flatnonzero(np.diff(np.concatenate([[0], standing.astype(np.int8), [0]])))
    found: list[tuple[int, int]] = []
    for first, end in zip(edges[::2].tolist(), edges[1::2].tolist(), strict=True):
        if not (above[first:end] > limit).any():
            continue
        # The toes lie lower than that, and the downstream toe lower than the upstream one.
        margin = max(2, round(3.0 / spacing), round(0.25 * min(end - first, LONGEST_FILL / spacing)))
        first, last = max(first - margin, 0), min(end - 1 + margin, count - 1)
        if found and first <= found[-1][1] + 1:
            found[-1] = (found[-1][0], last)
        else:
            found.append((first, last))
    return found


def free_of_humps(
    elevations: np.ndarray, spacing: float
) -> tuple[np.ndarray, np.ndarray, list[tuple[int, int]]]:
    """Return the profile with fills and pits bridged, where it is ground, and the stretches taken out.

    Parameters
    ----------
    elevations : ndarray, shape (n,)
        m, NaN for gaps.
    spacing : float
        m.

    Returns
    -------
    bed : ndarray, shape (n,)
        NaN only before the first and after the last known ground.
    usable : ndarray of bool, shape (n,)
    stretches : list of (first, last)
        Points, both included.
    """
    known = np.isfinite(elevations)
    usable = known.copy()
    bed = elevations.copy()
    if known.sum() < 2:
        return bed, usable, []
    first, last = np.flatnonzero(known)[[0, -1]]
    place = np.arange(elevations.size)

    def bridge() -> None:
        # From the middle of a few points on each side, so that the noise of one point does not tilt it.
        inside = np.flatnonzero(usable)
        from scipy.ndimage import median_filter

        level = median_filter(elevations[inside], 5, mode="nearest")
        gone = ~usable & (place >= first) & (place <= last)
        bed[gone] = np.interp(place[gone], inside, level)

    bridge()
    stretches: list[tuple[int, int]] = []
    for sign, longest, clear in (
        (1.0, LONGEST_FILL, CLEAR),
        (-1.0, LONGEST_PIT, CLEAR),
        (1.0, LONGEST_HILL, CLEAR_HILL),
    ):
        found = find_humps(sign * bed[first : last + 1], spacing, longest, clear)
        for begin, end in found:
            begin, end = begin + int(first), end + int(first)
            # A stretch that would leave nothing at one end is no hump between two sides.
            if usable[:begin].any() and usable[end + 1 :].any():
                usable[begin : end + 1] = False
                stretches.append((begin, end))
        bridge()
    joined: list[tuple[int, int]] = []
    for begin, end in sorted(stretches):
        if joined and begin <= joined[-1][1] + 1:
            joined[-1] = (joined[-1][0], max(end, joined[-1][1]))
        else:
            joined.append((begin, end))
    return bed, usable, joined


# ---- on the terrain -------------------------------------------------------------------------------


def snap_distance(terrain: Terrain, given: float | None) -> float:
    """Return the snap distance in metres: as given, else :data:`SNAP_CELLS`, :data:`SNAP_LEAST` at least."""
    return float(given) if given is not None else max(SNAP_CELLS * max(terrain.cell_size), SNAP_LEAST)


def low_line(line, terrain: Terrain, snap: float, stream: str = "", start: float = 0.0) -> LowLine | None:
    """Return the low line along a stream line.

    Parameters
    ----------
    line : shapely.LineString
        In the terrain's CRS.
    terrain : Terrain
    snap : float
        How far the lowest path may lie from the line, m ground.
    stream : str
        Its name.
    start : float
        Stream distance of the line's first point, m.

    Returns
    -------
    LowLine or None
        None where the line has no length.
    """
    return next(_low_lines([line], terrain, snap, stream, start))


def _low_lines(
    lines: Sequence, terrain: Terrain, snap: float, stream: str = "", start: float = 0.0
) -> Iterator[LowLine | None]:
    """Give the low line of each of some lines, in order; the terrain is read for many of them at once."""
    cell = min(terrain.cell_size)
    sides = round(snap / cell)
    offsets = np.arange(-sides, sides + 1) * cell
    most = max(POINTS_AT_ONCE // (8 * offsets.size), 1)
    for some in _groups(lines, terrain, most):
        # the lines' own ground is in the rows laid across them below
        profiles = terrain.sample(some, elevations=False)
        laid = [_across(p, terrain, cell, snap) if len(p) > 1 else None for p in profiles]
        _, x, y, left_x, left_y = (np.concatenate(v) for v in zip(_NOWHERE, *filter(None, laid), strict=True))
        rows = np.empty((x.size, offsets.size))
        for at in range(0, x.size, most):
            part = slice(at, at + most)
            at_x = x[part, None] + offsets * left_x[part, None]
            at_y = y[part, None] + offsets * left_y[part, None]
            rows[part] = terrain.elevations(at_x.ravel(), at_y.ravel()).reshape(at_x.shape)
        first = 0
        for one in laid:
            if one is None:
                yield None
                continue
            end = first + one[0].size
            yield _of_rows(*one, rows[first:end], offsets, stream, start)
            first = end


_NOWHERE = tuple(np.empty((5, 0)))


def _groups(lines: Sequence, terrain: Terrain, most: int) -> Iterator[list]:
    """Give lines in their order, as many at a time as are about so many cells long together."""
    a, _, _, d, _, _ = terrain.transform[:6]
    group, cells = [], 0.0
    for line in lines:
        long = 1.0 + line.length / np.hypot(a, d)
        if group and cells + long > most:
            yield group
            group, cells = [], 0.0
        group.append(line)
        cells += long
    if group:
        yield group


def _across(profile, terrain: Terrain, cell: float, snap: float) -> tuple[np.ndarray, ...]:
    """Return stations at each cell's length, their places, and a metre to the left there in map units."""
    length = float(profile.stations[-1])
    station = np.linspace(0.0, length, max(round(length / cell), 1) + 1)
    x, y = profile.place_at(station)
    # Ground metres in a map unit, east and north; a cell is small enough to take them as they are.
    ones, none = np.ones_like(x), np.zeros_like(x)
    unit = cell / terrain.distances.step_lengths(x[:1], y[:1], ones[:1], none[:1])[0]
    east = terrain.distances.step_lengths(x, y, unit * ones, none) / unit
    north = terrain.distances.step_lengths(x, y, none, unit * ones) / unit
    # The course over about the snap distance, so that a kink does not swing the row.
    reach = max(snap, 2.0 * cell)
    x0, y0 = profile.place_at(np.maximum(station - reach, 0.0))
    x1, y1 = profile.place_at(np.minimum(station + reach, length))
    course = np.stack([(x1 - x0) * east, (y1 - y0) * north])
    size = np.hypot(*course)
    course = np.where(size > 0.0, course / np.where(size > 0.0, size, 1.0), [[1.0], [0.0]])
    return station, x, y, -course[1] / east, course[0] / north


def _of_rows(
    station: np.ndarray,
    x: np.ndarray,
    y: np.ndarray,
    left_x: np.ndarray,
    left_y: np.ndarray,
    rows: np.ndarray,
    offsets: np.ndarray,
    stream: str,
    start: float,
) -> LowLine:
    """Return the low line through rows of ground, shape (stations, offsets)."""
    path = lowest_path(rows)
    shift = offsets[path]
    low = rows[np.arange(station.size), path]
    spacing = float(station[-1]) / max(station.size - 1, 1)
    bed, usable, stretches = free_of_humps(low, spacing)
    low_x, low_y = x + shift * left_x, y + shift * left_y
    humps = []
    for first, last in stretches:
        over = low[first : last + 1] - bed[first : last + 1]
        if not np.isfinite(over).any():
            continue
        top = first + int(np.nanargmax(np.abs(over)))
        humps.append(
            Hump(
                start + float(station[first]),
                start + float(station[last]),
                float(low[top] - bed[top]),
                float(low_x[top]),
                float(low_y[top]),
            )
        )
    drawn = rows[:, offsets.size // 2].copy()
    return LowLine(stream, start + station, low_x, low_y, drawn, low, bed, usable, shift, tuple(humps))


def shift_finding(line: LowLine, snap: float, cell: float, units: UnitSystem) -> Finding | None:
    """Return a finding where the lowest path lies well beside the drawn line and well below it."""
    # Over a few points, as noise alone makes one place lower than another.
    from scipy.ndimage import median_filter

    gain = median_filter(np.nan_to_num(line.drawn - line.low), 11, mode="nearest")
    beside = (np.abs(line.shift) >= NOTABLE_CELLS * cell * (1 - 1e-9)) & (gain > NOTABLE_GAIN)
    # The path leaves a fill by its side, which says nothing about the stream line.
    for hump in line.humps:
        beside &= (line.distance < hump.start - snap) | (line.distance > hump.end + snap)
    if not beside.any():
        return None
    far = int(np.argmax(np.where(beside, np.abs(line.shift), 0.0)))
    at_limit = np.abs(line.shift[far]) > snap - 0.75 * cell
    message = (
        f"the low line lies up to {length_text(abs(line.shift[far]), units)} beside stream {line.stream}, "
        f"{length_text(gain[far], units)} lower than the ground under it there, and is off it over "
        f"{100 * beside.mean():.0f} % of {length_text(line.distance[-1] - line.distance[0], units)}"
    )
    if at_limit:
        message += f"; that is as far as snap, {length_text(snap, units)}, lets it go"
    return Finding("stream-shifted", message, _LAYER, line.stream).at(line.x[far], line.y[far])


# ---- direction ------------------------------------------------------------------------------------


def streams_near(cut_lines: geopandas.GeoDataFrame, streams: geopandas.GeoDataFrame) -> set[str]:
    """Return the ids of the streams that cut lines touch, and of those nearest to lines that touch none."""
    names = np.asarray(feature_ids(streams), dtype=object)

    def sound(frame):
        shapes = frame.geometry.to_numpy()
        xy, owner = shapely.get_coordinates(shapes, return_index=True)
        good = ~shapely.is_missing(shapes) & ~shapely.is_empty(shapes)
        good[owner[~np.isfinite(xy).all(axis=1)]] = False
        return np.flatnonzero(good), shapes[good]

    rows, shapes = sound(streams)
    _, lines = sound(cut_lines)
    if not len(shapes) or not len(lines):
        return set()
    tree = shapely.STRtree(shapes)
    line, touched = tree.query(lines, predicate="intersects")
    near = set(names[rows[touched]])
    missing = np.setdiff1d(np.arange(len(lines)), line)
    if missing.size:
        near |= set(names[rows[tree.nearest(lines[missing])]])
    return near


def turn_streams(
    streams: geopandas.GeoDataFrame,
    terrain: Terrain,
    snap: float | None = None,
    units: UnitSystem = SI,
    names: set[str] | None = None,
) -> tuple[geopandas.GeoDataFrame, list[Finding]]:
    """Return the streams with those turned that are drawn upstream, told by the ground.

    Parts of one id that join end to end, whichever way each is drawn, are judged together. They are turned
    only where the 98 % interval of the slope over their whole length is against the drawn direction, with a
    fall of :data:`LEAST_FALL` in all, or where the fall is so clear (:data:`CLEAR_FALL`, :data:`AGREEING`)
    that a bend in the profile cannot hide it. Else the drawn direction stays. Parts that plainly fall as they
    are drawn (:mod:`terrain2q.ground.plain_fall`) are not looked at further.

    Parameters
    ----------
    streams : geopandas.GeoDataFrame
        Lines in the terrain's CRS; rows that share an id are one stream.
    terrain : Terrain
    snap : float, optional
        See :func:`snap_distance`, m.
    units : UnitSystem
        For lengths in findings.
    names : set of str, optional
        The streams to look at; all where None.

    Returns
    -------
    streams : geopandas.GeoDataFrame
        The same rows in the same order.
    findings : list of Finding
        Codes ``stream-turned`` and ``stream-direction-uncertain``.
    """
    ids = np.asarray(feature_ids(streams), dtype=object)
    shapes = streams.geometry.to_numpy().copy()
    reach = snap_distance(terrain, snap)
    findings: list[Finding] = []
    turned = False
    found = _drawn(shapes, ids, names)
    ways = plain_ways(
        np.array([whole for one in found for whole in one.wholes], dtype=object), terrain, reach
    )
    plain, doubtful, first = [], [], 0
    for stream in found:
        way = ways[first : first + len(stream.wholes)]
        first += len(stream.wholes)
        as_drawn = [
            w != 0 and bool((stream.along[stream.member == n] == w).all()) for n, w in enumerate(way.tolist())
        ]
        plain.append(as_drawn)
        doubtful += [whole for whole, done in zip(stream.wholes, as_drawn, strict=True) if not done]
    verdicts = _falls(doubtful, terrain, reach)
    for stream, as_drawn in zip(found, plain, strict=True):
        name, parts, along = stream.name, stream.parts, stream.along
        turned_here = False
        for number, whole in enumerate(stream.wholes):
            if as_drawn[number]:
                continue
            mine = np.flatnonzero(stream.member == number)
            verdict = next(verdicts)
            if not mine.size or verdict is None:
                continue
            fall, sure, length = verdict
            against = mine[along[mine] != np.sign(fall)] if fall else mine[:0]
            middle = whole.interpolate(0.5, normalized=True)
            lost = f"{length_text(abs(fall) * length, units)} over {length_text(length, units)}"
            if not sure:
                message = f"the ground along stream {name} falls {lost}, which does not tell its direction"
                findings.append(
                    Finding("stream-direction-uncertain", message, _LAYER, name).at(middle.x, middle.y)
                )
            elif against.size:
                turned_here = True
                for part in against:
                    parts[part] = shapely.reverse(parts[part])
                whose = "" if against.size == mine.size else f"{against.size} of {mine.size} parts of "
                message = f"{whose}stream {name} ran upstream: the ground falls {lost} the other way"
                findings.append(Finding("stream-turned", message, _LAYER, name).at(middle.x, middle.y))
        if turned_here:
            turned = True
            for one in np.unique(stream.row):
                own = parts[stream.row == one]
                shapes[one] = own[0] if own.size == 1 else shapely.multilinestrings(own)
    if not turned:
        return streams, findings
    import geopandas

    return streams.set_geometry(geopandas.GeoSeries(shapes, index=streams.index, crs=streams.crs)), findings


@dataclass(frozen=True, eq=False)
class _Drawn:
    """A stream as it is drawn.

    Attributes
    ----------
    name : str
    parts : ndarray of LineString, shape (p,)
    row : ndarray of int, shape (p,)
        The row of the layer that each part comes from.
    wholes : ndarray of LineString, shape (w,)
        Parts that join end to end, whichever way each is drawn, as one.
    member : ndarray of int, shape (p,)
        The whole that each part belongs to, -1 where there is none.
    along : ndarray, shape (p,)
        +1 where a part runs as its whole does, else -1.
    """

    name: str
    parts: np.ndarray
    row: np.ndarray
    wholes: np.ndarray
    member: np.ndarray
    along: np.ndarray


def _drawn(shapes: np.ndarray, ids: np.ndarray, names: set[str] | None) -> list[_Drawn]:
    """Return the streams, or those of some names, that have some length."""
    xy, owner = shapely.get_coordinates(shapes, return_index=True)
    good = ~shapely.is_missing(shapes)
    good[owner[~np.isfinite(xy).all(axis=1)]] = False
    if names is not None:
        good &= [name in names for name in ids.tolist()]
    parts, row = shapely.get_parts(shapes[good], return_index=True)
    parts, row = shapely.remove_repeated_points(shapely.force_2d(parts)), np.flatnonzero(good)[row]
    has_length = shapely.length(parts) > 0.0
    parts, row = parts[has_length], row[has_length]
    members: dict[object, list[int]] = {}
    for number, name in enumerate(ids[row].tolist()):
        members.setdefault(name, []).append(number)
    found = []
    for name, numbers in members.items():
        own = wholes = parts[numbers]
        member, along = np.zeros(1, dtype=int), np.ones(1)
        if len(own) > 1:
            wholes = shapely.get_parts(shapely.line_merge(shapely.multilinestrings(own)))
            member, along = _members(own, wholes)
        found.append(_Drawn(str(name), own, row[numbers], wholes, member, along))
    return found


def _members(parts: np.ndarray, wholes: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return for each part the whole it belongs to, and +1 where it runs as the whole does, else -1."""
    member = np.full(len(parts), -1)
    along = np.zeros(len(parts))
    tree = shapely.STRtree(wholes)
    for number, part in enumerate(parts):
        a, b = shapely.get_coordinates(part)[:2]
        segment = shapely.LineString([a, b])
        for candidate in np.sort(tree.query(segment)):
            xy = shapely.get_coordinates(wholes[candidate])
            one = (xy[:-1] == a).all(axis=1) & (xy[1:] == b).all(axis=1)
            other = (xy[:-1] == b).all(axis=1) & (xy[1:] == a).all(axis=1)
            if one.any() or other.any():
                member[number], along[number] = candidate, 1.0 if one.any() else -1.0
                break
    return member, along


def _falls(wholes: Sequence, terrain: Terrain, snap: float) -> Iterator[tuple[float, bool, float] | None]:
    """Give slope, whether its sign is sure, and length of each line; None where ground is hardly known."""
    for line in _low_lines(wholes, terrain, snap):
        estimate = None
        if line is not None:
            estimate = robust_slope(line.distance[line.usable], line.bed[line.usable], confidence=0.98)
        if estimate is None:
            yield None
            continue
        fall = abs(estimate.slope) * estimate.length
        sure = fall >= LEAST_FALL and not estimate.low <= 0.0 <= estimate.high
        sure |= fall >= CLEAR_FALL and estimate.agreeing >= AGREEING
        yield estimate.slope, bool(sure), estimate.length


class LowLines:
    """The low lines of streams, made chain by chain when first asked for.

    Parameters
    ----------
    network : StreamNetwork
        Turned downstream, in the terrain's CRS.
    terrain : Terrain
    snap : float, optional
        See :func:`snap_distance`, m.
    units : UnitSystem
        For lengths in findings.

    Attributes
    ----------
    network : StreamNetwork
    snap : float
        m.
    findings : list of Finding
        Codes ``stream-shifted`` and ``stream-fill``, of the chains made so far.
    """

    def __init__(
        self, network: StreamNetwork, terrain: Terrain, snap: float | None = None, units: UnitSystem = SI
    ) -> None:
        self.network, self._terrain, self._units = network, terrain, units
        self.snap = snap_distance(terrain, snap)
        self.findings: list[Finding] = []
        self._made: dict[int, LowLine | None] = {}

    def of(self, chain: int) -> LowLine | None:
        """Return the low line of one chain; None where it has none."""
        if chain not in self._made:
            made = low_line(
                self.network.chains[chain],
                self._terrain,
                self.snap,
                str(self.network.chain_stream[chain]),
                float(self.network.chain_start[chain]),
            )
            self._made[chain] = made
            if made is not None:
                self._note(made)
        return self._made[chain]

    def made(self) -> list[LowLine]:
        """Return the low lines made so far, by stream and distance."""
        lines = [line for line in self._made.values() if line is not None]
        return sorted(lines, key=lambda line: (line.stream, line.distance[0]))

    def _note(self, line: LowLine) -> None:
        shifted = shift_finding(line, self.snap, min(self._terrain.cell_size), self._units)
        if shifted is not None:
            self.findings.append(shifted)
        for hump in line.humps:
            if hump.height <= 0.0:
                continue
            high, begin, end = (
                length_text(value, self._units) for value in (hump.height, hump.start, hump.end)
            )
            what = (
                "fill" if hump.end - hump.start <= 1.5 * LONGEST_FILL else "hill, too long for a road fill,"
            )
            message = (
                f"a {what} {high} high across stream {line.stream} from stream distance {begin} to {end} "
                "was taken out of its low line"
            )
            self.findings.append(Finding("stream-fill", message, _LAYER, line.stream).at(hump.x, hump.y))

    def ways(self, streams: Collection[str]) -> list[list[int]]:
        """Return the chains of streams in ways from a spring down: the longest first, then what joins it."""
        network = self.network
        ways, used = [], set()
        size = network.chain_start + network.ground_length
        for last in np.argsort(-size, kind="stable").tolist():
            if last in used or str(network.chain_stream[last]) not in streams:
                continue
            way = [last]
            used.add(last)
            while (above := network.next_chain(way[0], False, used)) is not None:
                way.insert(0, above)
                used.add(above)
            ways.append(way)
        return ways

    def about(self, chain: int, at: float, window: float) -> tuple[np.ndarray, np.ndarray, float]:
        """Return the usable bed in a window about a place, over the joins of the stream's parts.

        Parameters
        ----------
        chain : int
        at : float
            Stream distance on this chain, m.
        window : float
            Length, m. A window that would pass an end of the stream is moved inward.

        Returns
        -------
        distance, bed : ndarray, shape (n,)
            Distances run on from those of this chain; none where the ground is not known.
        length : float
            Of the window: shorter than asked for where the stream is shorter.
        """
        line = self.of(chain)
        if line is None:
            return np.empty(0), np.empty(0), 0.0
        # Each part with the offset of its distances from those of this chain, from upstream to downstream.
        parts = [(line, 0.0)]
        begin, end = float(line.distance[0]), float(line.distance[-1])
        used = {chain}
        for downstream in (False, True):
            here = chain
            # A window moved inward from one end may need a whole window on the other side.
            while (end < at + window) if downstream else (begin > at - window):
                following = self.network.next_chain(here, downstream, used)
                other = None if following is None else self.of(following)
                if other is None:
                    break
                used.add(following)
                size = float(other.distance[-1] - other.distance[0])
                offset = (end if downstream else begin - size) - float(other.distance[0])
                parts.insert(len(parts) if downstream else 0, (other, offset))
                begin, end = (begin, end + size) if downstream else (begin - size, end)
                here = following
        # The stream ends, for this purpose, where its known ground ends.
        known = [part.ground[0][[0, -1]] + offset for part, offset in parts if part.ground[0].size]
        if not known:
            return np.empty(0), np.empty(0), 0.0
        begin, end = float(known[0][0]), float(known[-1][1])
        low = min(max(at - 0.5 * window, begin), max(end - window, begin))
        high = min(low + window, end)
        pieces = [part.between(low - offset, high - offset) for part, offset in parts]
        distance = np.concatenate(
            [piece[0] + offset for piece, (_, offset) in zip(pieces, parts, strict=True)]
        )
        return distance, np.concatenate([piece[1] for piece in pieces]), high - low
