"""Crossings: where roads meet streams, from points or from the lines themselves.

- Road lines that join end to end are one road line, whatever their names: maps split a road at each bridge.
- A meeting counts where the road passes from one side of the stream to the other and gets away from it. A
  road that follows a stream meets it again and again without leaving it: two meetings between which the road
  stays near the stream (:data:`NEAR` of the merge distance) cancel each other, so that such a stretch leaves
  one crossing where the road ends up on the other side, and none where it does not. Either way it is a
  finding.
- Crossings nearer to each other than the merge distance are one: the two carriageways of a road, a road and
  the path beside it.
- A tunnel has no crest that water could pass: it is a finding and no crossing. A bridge stays one, with the
  flag.
"""

from __future__ import annotations

import itertools
import re
from collections import defaultdict
from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import geopandas
import numpy as np
import shapely
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components
from scipy.spatial import cKDTree

from terrain2q.errors import Finding
from terrain2q.ground.layers import clean_text, columns_of
from terrain2q.ground.streams import StreamNetwork, length_text
from terrain2q.units import SI, UnitSystem

NEAR = 0.5
"""Share of the merge distance within which a road that turns back has not left the stream."""

SHALLOW = 20.0
"""Degrees between road and stream below which a crossing is doubtful (common practice)."""

BRIDGE, TUNNEL = "bridge", "tunnel"

_LAYER = "crossings"
_ROAD_NAMES = ("road", "road_name", "name", "street", "ref", "road_id")
_STREAM_NAMES = ("stream", "stream_id")
_STRUCTURES = ("structure", "structuretype", "structtype", "type", "kind", "brunnel")
_FLAGS = ("{}", "is{}", "has{}", "on{}", "in{}", "{}flag", "{}yn")
_NO = ("no", "n", "false", "f", "none", "not")
_UNKNOWN = ("unknown", "unk", "null", "na", "nan")
_WORDS = {
    "tunnel": ("tunnel", "tunnels"),
    "bridge": ("bridge", "bridges", "roadbridge", "footbridge", "viaduct", "viaducts", "overpass"),
}


@dataclass(frozen=True)
class Crossing:
    """A place where a road meets a stream.

    Attributes
    ----------
    crossing_id, road, stream : str
        `road` is empty where no name is known.
    x, y : float
        In the terrain's CRS.
    chain : int
        The stream's chain in the network, -1 where no stream is near.
    along : float
        Map distance along the chain.
    stream_distance : float
        Metres of ground along the stream, NaN where no stream is near.
    line : shapely.LineString or None
        The road, in the terrain's CRS; None where only the point is known.
    others : tuple of shapely.LineString
        Roads of the crossings that were merged into this one.
    other_attributes : tuple of mapping
        The fields of each of these.
    structure : str
        ``bridge``, ``tunnel`` or empty, as an attribute says.
    attributes : mapping
        The fields of the point and of the road line, the point's first.
    findings : tuple of Finding
    """

    crossing_id: str
    road: str
    stream: str
    x: float
    y: float
    chain: int
    along: float
    stream_distance: float
    line: shapely.LineString | None = None
    others: tuple[shapely.LineString, ...] = ()
    other_attributes: tuple[Mapping, ...] = ()
    structure: str = ""
    attributes: Mapping = field(default_factory=dict)
    findings: tuple[Finding, ...] = ()

    def finding(self, code: str, message: str, severity: str = "") -> Finding:
        """Return a finding about this crossing, at its place."""
        return Finding(code, message, _LAYER, self.crossing_id, severity=severity, x=self.x, y=self.y)

    def noted(self, *found: Finding) -> Crossing:
        """Return the same crossing with more findings."""
        return replace(self, findings=(*self.findings, *found))


def structure_of(attributes: Mapping) -> str:
    """Return ``bridge``, ``tunnel`` or an empty string from the fields of a road or crossing.

    A field called ``tunnel`` or ``bridge`` (or ``is_tunnel``, ``IsBridge``, ``bridge_flag``) counts unless it
    says no, or that nobody knows; so does a field ``structure`` that names one. A culvert is neither: it is
    the stream that is in the pipe, and the road runs over it.

    Examples
    --------
    >>> [structure_of(f) for f in ({"bridge": "yes"}, {"bridge": "F"}, {"Structure": "Box bridge"})]
    ['bridge', '', 'bridge']
    >>> [structure_of(f) for f in ({"IsTunnel": True}, {"tunnel": "unknown"}, {"tunnel": "culvert"})]
    ['tunnel', '', '']
    """
    texts = {
        "".join(c for c in str(name).lower() if c.isalnum()): clean_text(value).lower()
        for name, value in attributes.items()
    }
    for kind in (TUNNEL, BRIDGE):
        if any(says_so(texts.get(name.format(kind), "")) for name in _FLAGS):
            return kind
    for kind in (TUNNEL, BRIDGE):
        for name in _STRUCTURES:
            words = _words(texts.get(name, ""))
            if says_so(texts.get(name, "")) and any(word in words for word in _WORDS[kind]):
                return kind
    return ""


def _words(text: str) -> list[str]:
    return re.findall(r"[^\W\d_]+", text)


def says_so(text: str) -> bool:
    """Whether a flag says anything but no, that nobody knows, or that the stream is piped.

    Examples
    --------
    >>> [says_so(t) for t in ("yes", "-1", "Bridge no. 5", "", "0", "N/A", "not here", "box culvert")]
    [True, True, True, False, False, False, False, False]
    """
    words = _words(text.lower().replace("n/a", "na"))
    if not words:
        return any(c in "123456789" for c in text)
    return words[0] not in (*_NO, *_UNKNOWN) and not {"culvert", "culverts"} & {*words}


class RoadNetwork:
    """Road lines joined end to end, with the fields of the piece at any place.

    Parameters
    ----------
    roads : geopandas.GeoDataFrame
        Lines in the terrain's CRS. Rows without geometry are left out.
    """

    def __init__(self, roads: geopandas.GeoDataFrame) -> None:
        shapes = roads.geometry.to_numpy()
        coordinates, owner = shapely.get_coordinates(shapes, return_index=True)
        sound = ~shapely.is_missing(shapes)
        sound[owner[~np.isfinite(coordinates).all(axis=1)]] = False
        rows = np.flatnonzero(sound)
        parts, index = shapely.get_parts(shapely.force_2d(shapes[rows]), return_index=True)
        parts = shapely.remove_repeated_points(parts)
        keep = shapely.length(parts) > 0
        self.parts, self._row = parts[keep], rows[index][keep]
        self._attributes = roads[columns_of(roads)].to_dict("records") or [{} for _ in range(len(roads))]
        self.lines = shapely.get_parts(shapely.line_merge(shapely.multilinestrings(list(self.parts))))
        self._part_tree, self._line_tree = shapely.STRtree(self.parts), shapely.STRtree(self.lines)

    def attributes(self, part: int) -> dict:
        """Return the fields of the row that a part comes from."""
        return self._attributes[self._row[part]]

    def part_at(self, point: shapely.Point) -> int:
        """Return the part nearest to a point."""
        return int(self._part_tree.nearest(point))

    def line_at(self, point: shapely.Point) -> int:
        """Return the joined line nearest to a point."""
        return int(self._line_tree.nearest(point))

    def near(self, area: shapely.Geometry) -> np.ndarray:
        """Return the numbers of the joined lines that come into an area."""
        return self._line_tree.query(area, predicate="intersects")

    def meetings(self, network: StreamNetwork) -> dict[tuple[int, int], list[tuple[float, float, float]]]:
        """Return where lines meet streams: by line and chain, positions along both and the part's number.

        A stretch that both share counts once, at its middle.
        """
        part, piece = network.tree.query(self.parts, predicate="intersects")
        shared = shapely.intersection(self.parts[part], network.pieces[piece])
        several = shapely.get_type_id(shared) == shapely.GeometryType.MULTILINESTRING
        shared[several] = shapely.line_merge(shared[several])
        points, pair = shapely.get_parts(shared, return_index=True)
        if not len(points):
            return {}
        stretch = shapely.get_type_id(points) == shapely.GeometryType.LINESTRING
        points[stretch] = shapely.line_interpolate_point(points[stretch], 0.5, normalized=True)
        part, piece = part[pair], piece[pair]
        along = network.locate(piece, points)
        tolerance = network.ground.tolerance
        found: dict[tuple[int, int], list[tuple[float, float, float]]] = defaultdict(list)
        for point, p, chain, a in zip(points, part, network.piece_chain[piece], along, strict=True):
            line = self.line_at(point)
            found[line, int(chain)].append((float(self.lines[line].project(point)), float(a), int(p)))
        for key, places in found.items():
            places.sort()
            once = [places[0]]
            once += [b for a, b in itertools.pairwise(places) if b[0] - a[0] > 2 * tolerance]
            found[key] = once
        return found


def crossings_from_roads(
    roads: RoadNetwork, network: StreamNetwork, merge: float, units: UnitSystem = SI
) -> tuple[list[Crossing], list[Finding]]:
    """Return the crossings where roads pass over streams.

    Parameters
    ----------
    roads : RoadNetwork
    network : StreamNetwork
        In the same CRS.
    merge : float
        Metres within which crossings are one.
    units : UnitSystem
        For lengths in messages.

    Returns
    -------
    crossings : list of Crossing
        Named after road and stream, in the order of streams and of stream distance.
    findings : list of Finding
        Of places that are no crossing: ``road-grazes-stream``, ``road-in-tunnel``.
    """
    findings: list[Finding] = []
    found: list[Crossing] = []
    for (line, chain), places in sorted(roads.meetings(network).items()):
        kept, dropped = _passages(roads.lines[line], network.chains[chain], places, merge, network)
        stream = str(network.chain_stream[chain])
        for at, along, part in kept:
            fields = roads.attributes(part)
            point = roads.lines[line].interpolate(at)
            one = Crossing(
                "", _named(fields, _ROAD_NAMES), stream, point.x, point.y, chain, along,
                float(network.distance_at(np.array([chain]), np.array([along]))[0]),
                roads.lines[line], structure=structure_of(fields), attributes=fields,
            )  # fmt: skip
            if one.structure == TUNNEL:
                message = f"{one.road or 'a road'} runs in a tunnel at stream {stream}"
                findings.append(one.finding("road-in-tunnel", message))
                continue
            angle = _angle(roads.lines[line], at, network.chains[chain], along, merge, network)
            if angle < SHALLOW:
                one = one.noted(
                    one.finding("road-grazes-stream", f"the road is only {angle:.0f}° off the stream here")
                )
            found.append(one)
        if dropped:
            at, along, part = dropped[len(dropped) // 2]
            point = roads.lines[line].interpolate(at)
            name = _named(roads.attributes(part), _ROAD_NAMES)
            count = len(dropped) + len(kept)
            message = (
                f"{name or 'a road'} follows stream {stream} and meets it {count} times; "
                f"{len(kept) or 'none'} of them {'is' if len(kept) == 1 else 'are'} taken for a crossing"
            )
            findings.append(
                Finding("road-grazes-stream", message, _LAYER, name, severity="note").at(point.x, point.y)
            )
    found.sort(key=lambda c: (c.stream, c.stream_distance, c.road))
    taken: dict[str, int] = defaultdict(int)
    named = []
    for one in found:
        name = f"{one.road or 'road'} at {one.stream}"
        taken[name] += 1
        name += f" {taken[name]}" if taken[name] > 1 else ""
        one = replace(one, crossing_id=name)
        named.append(replace(one, findings=tuple(replace(f, feature_id=name) for f in one.findings)))
    return merged(named, network, merge, units), findings


def crossings_from_points(
    points: geopandas.GeoDataFrame,
    network: StreamNetwork,
    roads: RoadNetwork | None,
    merge: float,
    snap: float,
    units: UnitSystem = SI,
) -> list[Crossing]:
    """Return the crossings that points name.

    Parameters
    ----------
    points : geopandas.GeoDataFrame
        In the CRS of the network, with a column ``feature_id``.
    network : StreamNetwork
    roads : RoadNetwork or None
        Where roads run; the nearest within `snap` is taken.
    merge : float
        Metres within which crossings are one.
    snap : float
        Metres within which a stream, and a road, belong to a point.
    units : UnitSystem
        For lengths in messages.

    Returns
    -------
    list of Crossing
        In the order of the points. A point without a place, without a stream or in a tunnel keeps its
        place, with a finding of severity ``failed``.
    """
    ids = [str(v) for v in points["feature_id"]]
    fields = points[columns_of(points)].to_dict("records") or [{} for _ in ids]
    return merged(
        [
            _from_point(name, shape, about, network, roads, snap, units)
            for name, shape, about in zip(ids, points.geometry.to_numpy(), fields, strict=True)
        ],
        network,
        merge,
        units,
    )


def _from_point(name, shape, fields, network: StreamNetwork, roads, snap, units) -> Crossing:
    blank = Crossing(
        name, _named(fields, _ROAD_NAMES[:2]), _named(fields, _STREAM_NAMES),
        np.nan, np.nan, -1, np.nan, np.nan,
        structure=structure_of(fields), attributes=fields,
    )  # fmt: skip
    if shape is None or shape.is_empty or not np.isfinite([shape.x, shape.y]).all():
        return blank.noted(
            Finding("crossing-off-stream", "the crossing has no place", _LAYER, name, "failed")
        )
    blank = replace(blank, x=shape.x, y=shape.y)
    if not len(network):
        return blank.noted(blank.finding("crossing-off-stream", "there is no stream", "failed"))
    if blank.structure == TUNNEL:
        return blank.noted(blank.finding("road-in-tunnel", "the road runs in a tunnel here", "failed"))
    if blank.stream in network.stream_names:
        mine = np.flatnonzero(network.chain_stream[network.piece_chain] == blank.stream)
        piece = int(mine[np.argmin(shapely.distance(shape, network.pieces[mine]))])
    else:
        piece = int(network.tree.nearest(shape))
    chain = int(network.piece_chain[piece])
    way = shapely.get_coordinates(shapely.shortest_line(shape, network.pieces[piece]))
    gap = float(network.ground.inverse(*way[0], *way[1])[0][0])
    if gap > snap:
        message = f"stream {network.chain_stream[chain]} is {length_text(gap, units)} away"
        return blank.noted(blank.finding("crossing-off-stream", message, "failed"))
    place = shapely.Point(way[1])
    line = None
    if roads is not None:
        nearest = roads.lines[roads.line_at(shape)]
        step = shapely.get_coordinates(shapely.shortest_line(shape, nearest))
        away = float(network.ground.inverse(*step[0], *step[1])[0][0])
        if away <= snap:
            line = nearest
            part = roads.part_at(shape)
            about = roads.attributes(part)
            # an empty field of the point leaves room for the road's
            fields = {**about, **{k: v for k, v in fields.items() if k not in about or clean_text(v)}}
            reach = 2.0 * snap / network.ground.metres_per_map_unit * 1.5
            near = shapely.intersection(
                shapely.clip_by_rect(
                    line, shape.x - reach, shape.y - reach, shape.x + reach, shape.y + reach
                ),
                network.chains[chain],
            )
            meets = [p for p in shapely.get_parts(near) if p.geom_type == "Point"]
            if meets:
                place = min(meets, key=shape.distance)
            blank = replace(
                blank,
                attributes=fields,
                road=blank.road or _named(roads.attributes(part), _ROAD_NAMES),
                structure=blank.structure or structure_of(roads.attributes(part)),
            )
            if blank.structure == TUNNEL:
                name = blank.road or "the road"
                return blank.noted(blank.finding("road-in-tunnel", f"{name} runs in a tunnel here", "failed"))
    along = float(network.chains[chain].project(place))
    return replace(
        blank, stream=str(network.chain_stream[chain]), x=place.x, y=place.y, chain=chain, along=along,
        stream_distance=float(network.distance_at(np.array([chain]), np.array([along]))[0]), line=line,
    )  # fmt: skip


def merged(
    crossings: list[Crossing], network: StreamNetwork, distance: float, units: UnitSystem = SI
) -> list[Crossing]:
    """Return crossings of which none is nearer to another than a distance.

    Of crossings that lie together the one on the stream that has come furthest stays, and among these the
    one nearest to their middle; it names the others in a note.
    """
    usable = [i for i, one in enumerate(crossings) if one.chain >= 0]
    if len(usable) < 2:
        return crossings
    xy = np.array([[crossings[i].x, crossings[i].y] for i in usable])
    # wide enough for any projection; true distances decide
    pairs = cKDTree(xy).query_pairs(
        5.0 * distance / network.ground.metres_per_map_unit, output_type="ndarray"
    )
    if not len(pairs):
        return crossings
    length = network.ground.inverse(*xy[pairs[:, 0]].T, *xy[pairs[:, 1]].T)[0]
    pairs = pairs[length <= distance]
    graph = coo_array((np.ones(len(pairs)), (pairs[:, 0], pairs[:, 1])), shape=(len(usable), len(usable)))
    group = connected_components(graph, directed=False)[1]
    gone: set[int] = set()
    answer = list(crossings)
    for number in np.flatnonzero(np.bincount(group) > 1):
        members = [usable[i] for i in np.flatnonzero(group == number)]
        furthest = max(members, key=lambda i: crossings[i].stream_distance)
        own = [i for i in members if crossings[i].chain == crossings[furthest].chain]
        middle = np.mean([[crossings[i].x, crossings[i].y] for i in members], axis=0)
        off = {i: np.hypot(crossings[i].x - middle[0], crossings[i].y - middle[1]) for i in own}
        # two lie equally far from their middle, but for rounding: the first of them, whatever the CRS
        least = (1.0 + 1e-6) * min(off.values())
        kept = next(i for i in own if off[i] <= least)
        others = [i for i in members if i != kept]
        gone.update(others)
        one = crossings[kept]
        lines: list[shapely.LineString] = []
        fields: list[Mapping] = []
        for i in others:
            line = crossings[i].line
            if line is not None and line is not one.line and all(line is not known for known in lines):
                lines.append(line)
                fields.append(crossings[i].attributes)
        listed = ", ".join(crossings[i].crossing_id for i in others)
        message = f"{listed} within {length_text(distance, units)} of it is counted with this crossing"
        one = one.noted(one.finding("crossings-merged", message))
        answer[kept] = replace(one, others=tuple(lines), other_attributes=tuple(fields))
    return [one for i, one in enumerate(answer) if i not in gone]


def _named(fields: Mapping, names) -> str:
    lower = {str(name).lower(): value for name, value in fields.items()}
    return next((text for name in names if (text := clean_text(lower.get(name)))), "")


def _scale(line, at: float, network: StreamNetwork) -> float:
    """Metres in one map unit at a place of a line, the mean of both directions."""
    point = line.interpolate(at)
    across = network.ground.distances.step_lengths([point.x] * 2, [point.y] * 2, [1e-4, 0.0], [0.0, 1e-4])
    return float(np.sqrt(np.prod(across))) * 1e4


def _passages(road, chain, places, merge: float, network: StreamNetwork):
    """Return the meetings at which a road passes over a stream and leaves it, and the others."""
    near = NEAR * merge / _scale(road, places[0][0], network)
    cuts = [0.0, *(p[0] for p in places), road.length]
    stretches = [
        _excursion(road, chain, a, b, near, i in (0, len(places)))
        for i, (a, b) in enumerate(itertools.pairwise(cuts))
    ]
    meetings, dropped = list(places), []
    # a meeting that leaves the road on its side is a touch
    i = 0
    while i < len(meetings):
        (far, side), (next_far, next_side) = stretches[i], stretches[i + 1]
        if side == next_side or 0 in (side, next_side):
            dropped.append(meetings.pop(i))
            stretches[i : i + 2] = [(max(far, next_far), side or next_side)]
        else:
            i += 1
    # two meetings with a stretch between them that stays near cancel each other, the smallest first
    while len(meetings) > 1:
        inner = range(1, len(meetings))
        least = min(inner, key=lambda k: stretches[k][0])
        if stretches[least][0] >= near:
            break
        dropped += meetings[least - 1 : least + 1]
        before, after = stretches[least - 1], stretches[least + 1]
        stretches[least - 1 : least + 2] = [(max(before[0], after[0]), before[1])]
        del meetings[least - 1 : least + 1]
    return meetings, sorted(dropped)


def _excursion(road, chain, start: float, end: float, near: float, at_end: bool) -> tuple[float, int]:
    """Return how far a road gets from a stream between two places, and on which side (+1 left, -1 right)."""
    reach = 20.0 * near
    a, b = start, end
    if at_end:
        # beyond a meeting it is enough to see that the road leaves
        a, b = (max(start, end - reach), end) if start == 0.0 else (start, min(end, start + reach))
    if b - a <= 0.0:
        return (np.inf if at_end else 0.0), 0
    count = int(np.clip(np.ceil(8.0 * (b - a) / near), 8, 4000))
    points = shapely.line_interpolate_point(road, a + (b - a) * (np.arange(count) + 0.5) / count)
    left, bottom, right, top = shapely.total_bounds(points)
    pad = 10.0 * near
    piece = shapely.clip_by_rect(chain, left - pad, bottom - pad, right + pad, top + pad)
    target = chain if piece.is_empty else piece
    shapely.prepare(target)
    away = shapely.distance(points, target)
    far = int(np.argmax(away))
    along = chain.project(points[far])
    step = max(1e-6 * chain.length, 1e-3 * near)
    p, q = (
        shapely.get_coordinates(chain.interpolate(np.clip(along + d, 0.0, chain.length)))[0]
        for d in (-step, step)
    )
    here = shapely.get_coordinates(points[far])[0]
    cross = (q - p)[0] * (here - p)[1] - (q - p)[1] * (here - p)[0]
    return (np.inf if at_end else float(away[far])), int(np.sign(cross))


def _angle(road, at: float, chain, along: float, merge: float, network: StreamNetwork) -> float:
    """Degrees between a road and a stream, over half the merge distance to each side."""
    reach = 0.5 * merge / _scale(road, at, network)

    def course(line, place):
        ends = [line.interpolate(np.clip(place + d, 0.0, line.length)) for d in (-reach, reach)]
        return np.array([ends[1].x - ends[0].x, ends[1].y - ends[0].y])

    one, other = course(road, at), course(chain, along)
    size = np.hypot(*one) * np.hypot(*other)
    return (
        float(np.degrees(np.arcsin(min(abs(one[0] * other[1] - one[1] * other[0]) / size, 1.0))))
        if size
        else 90.0
    )
