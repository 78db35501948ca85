"""Cut lines: checked against the streams and each other, and turned to run left to right looking downstream.

How a line and its stream are brought together:

- A line that touches a stream crosses it, also with its end (within a millimetre). Where one stream is stored
  in several parts, parts with the same id are one stream, and a crossing at a shared end counts once. Where
  different streams join in one point and a line passes through it, the line crosses the stream that goes on
  through the point, else the one that begins there.
- A line belongs to the stream its own field ``stream`` (or ``stream_id``) names, where it has one that holds
  the id of a stream; else to the stream whose crossing is nearest to the line's middle, where people put the
  channel.
- The direction is that in which the stream passes from one side of the line to the other. A line that
  crosses a bend several times is turned by the sum of these passages, and its crossing is the one nearest to
  the middle among those that agree with the sum. Where they cancel out, the stream's general course decides.
- A line that misses every stream is turned by the nearest one, if that is no further away than the line is
  long; it keeps that stream and stream distance, and is a finding.
- Square to the stream is judged over a quarter of the line's length to each side of the crossing: a section
  should lie square to the way the valley's water goes, not to a single wiggle.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
import shapely

from terrain2q.errors import Finding
from terrain2q.ground.layers import clean_text, columns_of
from terrain2q.ground.streams import StreamNetwork, feature_ids, length_text
from terrain2q.units import SI, UnitSystem, unit_system

if TYPE_CHECKING:
    import geopandas

OBLIQUE = 30.0
"""Degrees off square from which a line is a finding (common practice; 30° makes a section 15 % too wide)."""

_LAYER = "cut_lines"
_STREAM_FIELDS = ("stream", "stream_id")
_ALONG = np.sin(np.radians(10.0))


@dataclass(frozen=True)
class CutLine:
    """One cut line, ready to be sampled.

    Attributes
    ----------
    section_id : str
    x, y : ndarray, shape (n,)
        Vertices in the terrain's CRS, left to right looking downstream; empty where the line is not usable.
    stream : str
        The stream the line belongs to, empty where there is none.
    stream_distance : float
        Distance along the stream from its upstream end [m ground], NaN where there is none.
    crossing : float
        Map distance along the line to the stream's crossing, NaN where it does not cross.
    turned : bool
        Whether the line was drawn the other way.
    usable : bool
        Whether it can be sampled at all.
    attributes : mapping
        The other fields of the source row.
    """

    section_id: str
    x: np.ndarray
    y: np.ndarray
    stream: str = ""
    stream_distance: float = float("nan")
    crossing: float = float("nan")
    turned: bool = False
    usable: bool = True
    attributes: Mapping = field(default_factory=dict)


@dataclass
class _Placed:
    """What is known of one usable line while it is being placed; distances are along the line as drawn."""

    stream: str = ""
    stream_distance: float = float("nan")
    crossing: float = float("nan")
    turned: bool = False


def orient_cut_lines(
    cut_lines: geopandas.GeoDataFrame,
    streams: geopandas.GeoDataFrame | None,
    crs: object,
    units: str | UnitSystem = SI,
) -> tuple[list[CutLine], list[Finding]]:
    """Check cut lines and turn them to run from left to right looking downstream.

    Parameters
    ----------
    cut_lines : geopandas.GeoDataFrame
        Lines in `crs`, with a column ``feature_id``.
    streams : geopandas.GeoDataFrame or None
        Stream lines in `crs`, drawn downstream, with a column ``feature_id``; rows that share it are
        one stream.
    crs : object
        The CRS of both (the terrain's).
    units : str or UnitSystem
        For lengths in the findings' messages.

    Returns
    -------
    lines : list of CutLine
        One for each row, in the rows' order, the unusable ones included.
    findings : list of Finding
        Codes ``line-empty``, ``line-not-finite``, ``line-multipart``, ``line-parts-joined``,
        ``line-crosses-itself``, ``direction-unknown``, ``line-turned``, ``line-misses-stream``,
        ``line-crosses-stream-again``, ``line-crosses-streams``, ``line-oblique``, ``lines-meet``,
        and those of :class:`~terrain2q.ground.streams.StreamNetwork`.
    """
    units = unit_system(units)
    findings: list[Finding] = []
    ids = feature_ids(cut_lines)
    shapes = _single_lines(cut_lines, ids, findings)
    rows = np.array([row for row, shape in enumerate(shapes) if shape is not None], dtype=int)
    lines = np.array([shapes[row] for row in rows], dtype=object)
    names = [ids[row] for row in rows]
    attributes = cut_lines[columns_of(cut_lines)].to_dict("records")
    if not attributes:
        attributes = [{} for _ in ids]

    itself = np.flatnonzero(~shapely.is_simple(lines)) if len(lines) else np.empty(0, dtype=int)
    for number, place in zip(itself.tolist(), _middles(lines[itself]), strict=True):
        name = names[number]
        finding = Finding("line-crosses-itself", f"cut line {name} crosses itself", _LAYER, name)
        findings.append(finding.at(*place))
    network = None
    if streams is not None:
        network = StreamNetwork(streams, crs, units)
        findings += network.findings
    if network is None or not len(network):
        placed = [_Placed() for _ in rows]
        for name, place in zip(names, _middles(lines), strict=True):
            message = f"no stream line tells which way cut line {name} runs; it is taken as drawn"
            findings.append(Finding("direction-unknown", message, _LAYER, name).at(*place))
        findings += _meetings(lines, names, None)
    else:
        wanted = [""] * len(rows)
        if any(str(name).lower() in _STREAM_FIELDS for name in cut_lines.columns):
            wanted = [_own_stream(attributes[row], network) for row in rows]
        placed = _place(lines, names, wanted, network, units, findings)
        findings += _meetings(lines, names, [place.stream for place in placed])

    xs, ys = _vertices(lines, np.array([place.turned for place in placed], dtype=bool))
    lengths = shapely.length(lines).tolist() if len(lines) else []
    number = dict(zip(rows.tolist(), range(len(rows)), strict=True))
    answer = []
    for row, name in enumerate(ids):
        at = number.get(row)
        if at is None:
            empty = np.empty(0)
            answer.append(CutLine(name, empty, empty.copy(), usable=False, attributes=attributes[row]))
            continue
        place = placed[at]
        crossing = lengths[at] - place.crossing if place.turned else place.crossing
        answer.append(
            CutLine(
                name, xs[at], ys[at], place.stream, place.stream_distance, crossing, place.turned, True,
                attributes[row],
            )
        )  # fmt: skip
    return answer, findings


def _vertices(lines: np.ndarray, turned: np.ndarray) -> tuple[list[np.ndarray], list[np.ndarray]]:
    """Return x and y of each line, those of turned lines from their last vertex to the first."""
    xy, owner = shapely.get_coordinates(lines, return_index=True)
    count = np.bincount(owner, minlength=len(lines))
    ends = np.cumsum(count)
    order = np.arange(len(xy))
    back = turned[owner]
    # the first and the last place of a line add up to the same as any two that change places
    order[back] = (2 * ends - count - 1)[owner[back]] - order[back]
    x, y = xy[order].T
    return tuple(
        [v[a:b].copy() for a, b in zip((ends - count).tolist(), ends.tolist(), strict=True)] for v in (x, y)
    )


def _middles(lines: np.ndarray) -> list[list[float]]:
    """Return x and y half way along each line."""
    if not len(lines):
        return []
    return shapely.get_coordinates(shapely.line_interpolate_point(lines, 0.5, normalized=True)).tolist()


def _at_middle(finding: Finding, line) -> Finding:
    middle = line.interpolate(0.5, normalized=True)
    return finding.at(middle.x, middle.y)


def _single_lines(frame, ids: list[str], findings: list[Finding]) -> list:
    """Return one plain line for each row, or None where it cannot be used."""
    shapes = frame.geometry.to_numpy()
    coordinates, owner = shapely.get_coordinates(shapes, return_index=True)
    broken = np.zeros(len(shapes), dtype=bool)
    broken[owner[~np.isfinite(coordinates).all(axis=1)]] = True
    lengths = np.zeros(len(shapes))
    sound = ~broken & ~shapely.is_missing(shapes)
    lengths[sound] = shapely.length(shapes[sound])
    # a plain line needs no more than this
    plain = sound & (lengths > 0.0) & (shapely.get_type_id(shapes) == 1)
    tidy = np.full(len(shapes), None, dtype=object)
    tidy[plain] = shapely.remove_repeated_points(shapely.force_2d(shapes[plain]))
    answer = []
    for row, (shape, name) in enumerate(zip(shapes, ids, strict=True)):
        line = None
        if plain[row]:
            answer.append(tidy[row])
            continue
        if broken[row]:
            findings.append(
                Finding(
                    "line-not-finite", f"cut line {name} has coordinates that are not numbers", _LAYER, name
                )
            )
        elif lengths[row] <= 0.0:
            what = "no geometry" if shape is None or shape.is_empty else "no length"
            finding = Finding("line-empty", f"cut line {name} has {what}", _LAYER, name)
            if what == "no length":
                finding = finding.at(*shapely.get_coordinates(shape)[0])
            findings.append(finding)
        else:
            line = _joined(shape, name, findings)
        if line is not None:
            line = shapely.remove_repeated_points(shapely.force_2d(line))
        answer.append(line)
    return answer


def _joined(shape, name: str, findings: list[Finding]):
    parts = [part for part in shapely.get_parts(shape) if part.length > 0.0]
    if len(parts) == 1:
        return parts[0]
    line = shapely.line_merge(shapely.MultiLineString(parts), directed=True)
    if line.geom_type != "LineString":
        line = shapely.line_merge(shapely.MultiLineString(parts))
    if line.geom_type != "LineString":
        message = f"cut line {name} has {len(parts)} parts that do not join into one line"
        findings.append(_at_middle(Finding("line-multipart", message, _LAYER, name), parts[0]))
        return None
    # The joined line runs as its first part was drawn.
    start, end = (line.project(shapely.get_point(parts[0], place)) for place in (0, -1))
    if start > end:
        line = shapely.reverse(line)
    message = f"cut line {name} came in {len(parts)} parts, which join end to end"
    findings.append(_at_middle(Finding("line-parts-joined", message, _LAYER, name), line))
    return line


def _own_stream(attributes: Mapping, network: StreamNetwork) -> str:
    known = network.stream_names
    for key, value in attributes.items():
        if str(key).lower() in _STREAM_FIELDS and clean_text(value) in known:
            return clean_text(value)
    return ""


@dataclass(frozen=True)
class _Crossings:
    """Places where lines meet streams, ordered by line and distance along it; all arrays of one length."""

    line: np.ndarray
    chain: np.ndarray
    stream: np.ndarray
    at: np.ndarray
    along: np.ndarray
    distance: np.ndarray
    x: np.ndarray
    y: np.ndarray

    def take(self, chosen) -> _Crossings:
        return _Crossings(*(getattr(self, name)[chosen] for name in self.__dataclass_fields__))


def _crossings(lines: np.ndarray, network: StreamNetwork) -> _Crossings:
    tolerance = network.ground.tolerance
    line, piece = network.tree.query(lines, predicate="dwithin", distance=tolerance)
    shared = shapely.intersection(lines[line], network.pieces[piece])
    apart = shapely.is_empty(shared)
    # Ends that miss each other by rounding meet where the stream is.
    nearest = shapely.shortest_line(lines[line[apart]], network.pieces[piece[apart]])
    shared[apart] = shapely.get_point(nearest, -1)
    several = shapely.get_type_id(shared) == shapely.GeometryType.MULTILINESTRING
    shared[several] = shapely.line_merge(shared[several])
    points, pair = shapely.get_parts(shared, return_index=True)
    # A stretch that both share counts as one crossing at its middle.
    stretch = shapely.get_type_id(points) == shapely.GeometryType.LINESTRING
    points[stretch] = shapely.line_interpolate_point(points[stretch], 0.5, normalized=True)
    line, piece = line[pair], piece[pair]
    chain = network.piece_chain[piece]
    at = shapely.line_locate_point(lines[line], points)
    along = network.locate(piece, points)
    distance = network.distance_at(chain, along)
    stream = network.chain_stream[chain]
    xy = shapely.get_coordinates(points)

    # One place of one stream counts once; where its parts join, the way furthest from upstream is it.
    number = {name: index for index, name in enumerate(sorted(network.stream_names))}
    stream_number = np.array([number[name] for name in stream], dtype=int)
    order = np.lexsort((at, stream_number, line))
    new = np.ones(len(order), dtype=bool)
    new[1:] = (
        (np.diff(line[order]) != 0)
        | (np.diff(stream_number[order]) != 0)
        | (np.diff(at[order]) > 2.0 * tolerance)
    )
    place = np.cumsum(new) - 1
    best = np.lexsort((-distance[order], place))
    _, first = np.unique(place[best], return_index=True)
    kept = order[best[first]]
    found = _Crossings(line, chain, stream, at, along, distance, xy[:, 0], xy[:, 1]).take(kept)

    # Where different streams join in one place, the one that goes on through it counts.
    order = np.lexsort((found.at, found.line))
    found = found.take(order)
    length = network.lengths[found.chain]
    rank = np.full(len(order), 2)
    rank[network.begins[found.chain] & (found.along <= 2.0 * tolerance)] = 1
    rank[network.ends[found.chain] & (found.along >= length - 2.0 * tolerance)] = 0
    new = np.ones(len(order), dtype=bool)
    new[1:] = (np.diff(found.line) != 0) | (np.diff(found.at) > 2.0 * tolerance)
    place = np.cumsum(new) - 1
    if len(place):
        top = np.full(place[-1] + 1, -1)
        np.maximum.at(top, place, rank)
        found = found.take((rank == top[place]) | (rank == 2))
    return found


def _passages(found: _Crossings, lines: np.ndarray, network: StreamNetwork) -> np.ndarray:
    """Return for each crossing +1 where the line runs from the left bank to the right, -1 where it runs back.

    0 where the stream touches the line and stays on its side; half values where the line or the stream ends.
    """
    length = shapely.length(lines[found.line])
    room = np.full(len(found.line), np.inf)
    gap = np.where(np.diff(found.line) == 0, np.diff(found.at), np.inf)
    room[1:] = np.minimum(room[1:], gap)
    room[:-1] = np.minimum(room[:-1], gap)
    # So near that between the crossing and these places nothing else happens.
    reach = np.minimum(1e-3 * length, room / 3.0)
    before, after = _along_line(lines[found.line], found.at - reach, found.at + reach, length)
    up, down = network.stretch(found.chain, found.along - reach, found.along + reach)

    def side(points):
        return _cross(down - up, points - up)

    return (np.sign(side(before)) - np.sign(side(after))) / 2.0


def _along_line(lines, low, high, lengths) -> tuple[np.ndarray, np.ndarray]:
    return tuple(
        shapely.get_coordinates(shapely.line_interpolate_point(lines, np.clip(v, 0.0, lengths)))
        for v in (low, high)
    )


def _cross(a: np.ndarray, b: np.ndarray) -> np.ndarray:
    return a[..., 0] * b[..., 1] - a[..., 1] * b[..., 0]


def _place(lines, names, wanted, network: StreamNetwork, units, findings: list[Finding]) -> list[_Placed]:
    placed = [_Placed() for _ in lines]
    if not len(lines):
        return placed
    found = _crossings(lines, network)
    passage = _passages(found, lines, network)
    lengths = shapely.length(lines)
    xy = shapely.get_coordinates(lines)
    count = shapely.get_num_coordinates(lines)
    measured = network.ground.distances.measure(xy[:, 0], xy[:, 1], np.cumsum(count) - count)
    metres = measured.vertex_stations[np.cumsum(count) - 1]

    first = np.searchsorted(found.line, np.arange(len(lines)))
    last = np.searchsorted(found.line, np.arange(len(lines)), side="right")
    chosen = np.full(len(lines), -1)
    done = _place_plain(placed, wanted, found, passage, first, last, chosen)
    for number in np.flatnonzero(~done & (last > first)).tolist():
        place, name = placed[number], names[number]
        here = np.arange(first[number], last[number])
        streams_here = found.stream[here]
        if wanted[number]:
            place.stream = wanted[number]
        elif len(here):
            middle = np.argmin(np.abs(found.at[here] - 0.5 * lengths[number]))
            place.stream = str(streams_here[middle])
        own = here[streams_here == place.stream] if len(here) > 1 or wanted[number] else here
        if len(own) == 0:
            continue
        net = passage[own].sum() if len(own) > 1 else passage[own[0]]
        agreeing = own[passage[own] * net > 0.0] if net != 0.0 else own
        best = agreeing[np.argmin(np.abs(found.at[agreeing] - 0.5 * lengths[number]))]
        chosen[number] = best
        place.crossing = float(found.at[best])
        place.stream_distance = float(found.distance[best])
        if net == 0.0:
            net = _general_passage(found, own, lines[number], network)
        if net == 0.0:
            message = (
                f"cut line {name} runs along stream {place.stream}, which does not tell which way it runs"
            )
            findings.append(
                Finding("direction-unknown", message, _LAYER, name).at(found.x[best], found.y[best])
            )
        place.turned = bool(net < 0.0)
        scale = metres[number] / lengths[number]

        def station(index, turned=place.turned, length=lengths[number], scale=scale):
            at = length - found.at[index] if turned else found.at[index]
            return at * scale

        if len(own) > 1:
            stations = ", ".join(length_text(value, units) for value in sorted(map(station, own)))
            message = (
                f"cut line {name} crosses stream {place.stream} {len(own)} times, at {stations} from its "
                f"left end; the crossing at {length_text(station(best), units)} was taken"
            )
            other = next(index for index in own if index != best)
            findings.append(
                Finding("line-crosses-stream-again", message, _LAYER, name).at(found.x[other], found.y[other])
            )
        if len(own) < len(here):
            others = list(dict.fromkeys(str(s) for s in streams_here if s != place.stream))
            message = f"cut line {name} crosses stream {place.stream}, its own, and also {', '.join(others)}"
            other = here[streams_here != place.stream][0]
            findings.append(
                Finding("line-crosses-streams", message, _LAYER, name).at(found.x[other], found.y[other])
            )

    _place_missing(lines, names, np.flatnonzero(chosen < 0), placed, lengths, network, units, findings)
    turned = np.flatnonzero([place.turned for place in placed])
    for number, at in zip(turned.tolist(), _middles(lines[turned]), strict=True):
        message = f"cut line {names[number]} was drawn right to left and has been turned"
        findings.append(Finding("line-turned", message, _LAYER, names[number]).at(*at))
    _oblique(lines, names, chosen, found, lengths, network, findings)
    return placed


def _place_plain(placed, wanted, found: _Crossings, passage, first, last, chosen) -> np.ndarray:
    """Place the lines that cross one stream, their own, once and clearly; return which these are.

    Lines that cross no stream are given the stream they name.
    """
    done = np.zeros(len(placed), dtype=bool)
    for number in np.flatnonzero(first == last).tolist():
        placed[number].stream = wanted[number]
    number = np.flatnonzero(last - first == 1)
    at = first[number]
    named = np.array(wanted, dtype=object)[number]
    plain = (passage[at] != 0.0) & ((named == "") | (named == found.stream[at]))
    number, at = number[plain], at[plain]
    done[number], chosen[number] = True, at
    columns = (found.stream[at], found.distance[at], found.at[at], passage[at] < 0.0)
    for line, stream, distance, crossing, turned in zip(
        number.tolist(), *(column.tolist() for column in columns), strict=True
    ):
        placed[line] = _Placed(str(stream), distance, crossing, turned)
    return done


def _general_passage(found: _Crossings, own, line, network: StreamNetwork) -> float:
    """Return which way a line runs by the course of its stream, where its passages cancel out."""
    course = np.zeros(2)
    reach = 0.5 * line.length
    for chain in np.unique(found.chain[own]):
        along = found.along[own][found.chain[own] == chain]
        up, down = network.stretch(
            np.array([chain]), np.array([along.min() - reach]), np.array([along.max() + reach])
        )
        course += (down - up)[0]
    xy = shapely.get_coordinates(line)
    return _decided(course, xy[-1] - xy[0])


def _decided(course: np.ndarray, chord: np.ndarray) -> float:
    """Return +1 or -1 as the chord runs left to right of the course or back, 0 where it runs along it."""
    size = np.hypot(*course) * np.hypot(*chord)
    if size == 0.0:
        return 0.0
    sine = -_cross(course, chord) / size
    return float(np.sign(sine)) if abs(sine) > _ALONG else 0.0


def _place_missing(lines, names, missing, placed, lengths, network: StreamNetwork, units, findings) -> None:
    if not len(missing):
        return
    lines, lengths = lines[missing], lengths[missing]
    pieces = network.tree.nearest(lines)
    pieces_of: dict[str, np.ndarray] = {}
    for index, number in enumerate(missing.tolist()):
        if name := placed[number].stream:
            if name not in pieces_of:
                pieces_of[name] = np.flatnonzero(network.chain_stream[network.piece_chain] == name)
            mine = pieces_of[name]
            pieces[index] = mine[np.argmin(shapely.distance(lines[index], network.pieces[mine]))]
    chains = network.piece_chain[pieces]
    ways = shapely.get_coordinates(shapely.shortest_line(lines, network.pieces[pieces])).reshape(-1, 2, 2)
    gaps = network.ground.inverse(*ways[:, 0].T, *ways[:, 1].T)[0].tolist()
    near = np.hypot(*(ways[:, 1] - ways[:, 0]).T) <= lengths
    along = network.locate(pieces, shapely.points(ways[:, 1]))
    distances = network.distance_at(chains, along).tolist()
    reach = 0.25 * lengths
    up, down = network.stretch(chains, along - reach, along + reach)
    first, last = (shapely.get_coordinates(shapely.get_point(lines, place)) for place in (0, -1))
    for index, (number, middle) in enumerate(zip(missing.tolist(), _middles(lines), strict=True)):
        place, name, stream = placed[number], names[number], str(network.chain_stream[chains[index]])
        what = f"its own stream {stream}, which" if place.stream else f"any stream; the nearest, {stream},"
        message = f"cut line {name} does not cross {what} is {length_text(gaps[index], units)} away"
        if near[index] or place.stream:
            place.stream, place.stream_distance = stream, distances[index]
        net = _decided((down - up)[index], (last - first)[index]) if near[index] else 0.0
        place.turned = bool(net < 0.0)
        message += "" if net else "; it is taken as drawn"
        findings.append(Finding("line-misses-stream", message, _LAYER, name).at(*middle))


def _oblique(lines, names, chosen, found, lengths, network: StreamNetwork, findings) -> None:
    number = np.flatnonzero(chosen >= 0)
    best = chosen[number]
    reach = 0.25 * lengths[number]
    up, down = network.stretch(found.chain[best], found.along[best] - reach, found.along[best] + reach)
    before, after = _along_line(
        lines[number], found.at[best] - reach, found.at[best] + reach, lengths[number]
    )
    course_length, course = network.ground.inverse(*up.T, *down.T)
    line_length, way = network.ground.inverse(*before.T, *after.T)
    # Degrees off square, whichever way the line is drawn.
    off = np.abs(90.0 - np.abs((way - course + 180.0) % 360.0 - 180.0))
    for index in np.flatnonzero((off > OBLIQUE) & (course_length > 0.0) & (line_length > 0.0)):
        name, at = names[number[index]], best[index]
        message = f"cut line {name} is {off[index]:.0f}° off square to stream {found.stream[at]}"
        findings.append(Finding("line-oblique", message, _LAYER, name).at(found.x[at], found.y[at]))


def _meetings(lines: np.ndarray, names: list[str], streams: list[str] | None) -> list[Finding]:
    """Return a finding for each two lines of one stream that meet; of any two where there are no streams."""
    if len(lines) < 2:
        return []
    tree = shapely.STRtree(lines)
    one, other = tree.query(lines, predicate="intersects")
    pairs = (one < other) & (one != other)
    if streams is not None:
        own = np.asarray(streams, dtype=object)
        pairs &= (own[one] == own[other]) & (own[one] != "")
    one, other = one[pairs], other[pairs]
    order = np.lexsort((other, one))
    one, other = one[order], other[order]
    places = shapely.get_coordinates(shapely.point_on_surface(shapely.intersection(lines[one], lines[other])))
    return [
        Finding(
            "lines-meet",
            f"cut lines {names[a]} and {names[b]}{f' of stream {streams[a]}' if streams else ''} meet",
            _LAYER,
            names[a],
        ).at(*place)
        for a, b, place in zip(one, other, places, strict=True)
    ]
