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

:mod:`terrain2q.ground.valley` works *u* out with triangles. Necks of tight meanders may be narrower than
these, and streams are drawn with all sorts of wiggles; so every line is checked against its stream and all
others at the end, and is moved a little along the stream, cut short, or left out where it would break the
rules. Each of these is a finding.

Each line ends where the ground has reached `height` above the bed and stays there, so that a levee or
a road does not end it, or at half the `width` to each side, whichever comes first.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
import shapely
from scipy.spatial import cKDTree

from terrain2q.errors import NOTE, Finding, InputError
from terrain2q.ground.cut_lines import CutLine
from terrain2q.ground.streams import StreamNetwork, length_text
from terrain2q.ground.terrain import Profile, Terrain
from terrain2q.ground.valley import Valley, cuts_corners
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
    for number, run in enumerate(job.runs):
        if streams is None or run.stream in streams:
            job.lay_out(number, at)
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
    every_chain = np.arange(count)
    start = network.distance_at(every_chain, np.zeros(count))
    end = network.distance_at(every_chain, network.lengths)
    xy = [shapely.get_coordinates(chain) for chain in network.chains]
    first, last = np.array([points[0] for points in xy]), np.array([points[-1] for points in xy])
    joining = cKDTree(last).query_ball_point(first, 2.0 * network.ground.tolerance)
    used = np.zeros(count, dtype=bool)
    runs = []
    # The longest way down each stream first, then what is left of its branches.
    for bottom in np.argsort(-end, kind="stable"):
        if used[bottom]:
            continue
        chain, head = [], int(bottom)
        while head >= 0:
            used[head] = True
            chain.insert(0, head)
            head = next(
                (
                    c
                    for c in joining[head]
                    if not used[c]
                    and network.chain_stream[c] == network.chain_stream[head]
                    and abs(end[c] - start[head]) <= 1e-6 * max(end[c], 1.0)
                ),
                -1,
            )
        points = np.concatenate([xy[c][0 if c == chain[0] else 1 :] for c in chain])
        distances = np.concatenate(
            [_vertex_distances(network, c, xy[c])[0 if c == chain[0] else 1 :] for c in chain]
        )
        kept = np.concatenate([[True], np.diff(distances) > 0.0])
        if kept.sum() > 1:
            name = str(network.chain_stream[bottom])
            runs.append(_Run(name, points[kept], distances[kept], shapely.LineString(points)))
    return _receiving_first(runs, network)


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
        self.tree = shapely.STRtree([run.line for run in self.runs])
        self.by_stream: dict[str, list[_Run]] = {}
        for run in self.runs:
            self.by_stream.setdefault(run.stream, []).append(run)
        self.off: list[str] = []
        self.decimals = 8 if network.ground.crs.is_geographic else 3
        self.findings: list[Finding] = []
        self.done: dict[int, list[_Line]] = {}

    # -- distances ---------------------------------------------------------------------------------

    def _wanted(self, run: _Run, at) -> list[float]:
        first, last = float(run.at[0]), float(run.at[-1])
        if at is not None:
            # A line at a distance that the stream has twice, on branches, belongs to the longest.
            if run is not self.by_stream[run.stream][0]:
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
        left, bottom, right, top = self.terrain.bounds
        x, y = run.place(wanted).T if wanted else np.empty((2, 0))
        inside = (x >= left) & (x <= right) & (y >= bottom) & (y <= top)
        if not inside.all():
            if not inside.any():
                self.off.append(run.stream)
                return []
            message = f"{np.count_nonzero(~inside)} lines of stream {run.stream} would lie off the terrain"
            self.findings.append(Finding("line-left-out", message, _LAYER, severity=NOTE))
            wanted = [d for d, there in zip(wanted, inside, strict=True) if there]
        mine = [k for k in self.kept if k.stream == run.stream]
        near = [k.stream_distance for k in mine if first - every <= k.stream_distance <= last + every]
        ids = {k.section_id for k in mine}
        return [
            d for d in wanted
            if self._name(run, d) not in ids and not any(abs(d - other) < 0.25 * every for other in near)
        ]  # fmt: skip

    def _name(self, run: _Run, distance: float) -> str:
        value = distance * self.units.per_si("length")
        longest = max(r.at[-1] for r in self.by_stream[run.stream]) * self.units.per_si("length")
        digits = len(str(int(longest)))
        step = None if self.every is None else self.every * self.units.per_si("length")
        places = 0 if step is None or abs(step - round(step)) < 1e-6 or step > 10.0 else 1
        return f"{run.stream}-{value:0{max(digits, 3) + (places + 1 if places else 0)}.{places}f}"

    # -- one stream --------------------------------------------------------------------------------

    def lay_out(self, number: int, at) -> None:
        run = self.runs[number]
        wanted = self._wanted(run, at)
        if not wanted:
            return
        plane = _Plane.about(run, self.network)
        lines: list[_Line] = []
        for low, high in self._stretches(run, wanted, at is not None):
            inside = [d for d in wanted if low <= d <= high]
            lines += self._raw_lines(run, plane, low, high, inside)
        near = self._neighbours(run, self.width / plane.scale.min())
        self._end_on_high_ground(lines)
        self._end_at_mouths([self.runs[n] for n in near if n > number], plane, lines)
        self._keep_apart(run, [n for n in near if n < number], lines)
        self._report(run, lines)
        self.done[number] = [line for line in lines if not line.dropped]

    def _neighbours(self, run: _Run, distance: float) -> list[int]:
        """Return the numbers of the other runs whose lines may come near those of a run."""
        left, bottom, right, top = run.line.bounds
        box = shapely.box(left - distance, bottom - distance, right + distance, top + distance)
        return sorted(n for n in self.tree.query(box).tolist() if self.runs[n] is not run)

    def _stretches(self, run: _Run, wanted: list[float], few: bool) -> list[tuple[float, float]]:
        """Return the stretches of stream to work on: all of it, or what lies about the distances."""
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
        while step > least and cuts_corners(xy, step):
            step *= 0.7
        step = max(step, (high - low) / _MOST_STREAM_POINTS)
        valley = Valley(xy, at, step, corridor, reach)
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
    def _wings(valley: Valley, distance, place, reach, step) -> tuple[list[np.ndarray], bool]:
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

    def _end_at_mouths(self, joining: list[_Run], plane: _Plane, lines: list[_Line]) -> None:
        """End wings that would run on up the valley of a stream that joins.

        They end as far out as the lines up- and downstream find high ground: where that valley opens.
        """
        if not joining:
            return
        tree = shapely.STRtree([shapely.LineString(plane.to_plane(run.xy)) for run in joining])
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
                line.limits[side] = f"stream {joining[other].stream} joins there"

    # -- apart from each other ---------------------------------------------------------------------

    def _keep_apart(self, run: _Run, earlier: list[int], lines: list[_Line]) -> None:
        """Cut lines short, or leave them out, where they would meet a stream or another line."""
        gap = 0.01 * self.width / self.network.ground.metres_per_map_unit
        least = 0.25 * CORRIDOR * self.width / self.network.ground.metres_per_map_unit
        blocks = []
        for other, number in ((self.runs[n], n) for n in earlier):
            if other.stream != run.stream:
                blocks.append((other.line, f"stream {other.stream}"))
            blocks += [(line.shape, f"a line of stream {other.stream}") for line in self.done.get(number, ())]
        blocks += [(k.geometry, f"line {k.section_id}") for k in self.kept]
        shapes = np.array([shape for shape, _ in blocks], dtype=object)
        tree = shapely.STRtree(shapes) if blocks else None
        own_line = shapely.union_all([r.line for r in self.by_stream[run.stream]])
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
        if self.off:
            message = f"{len(self.off)} streams lie off the terrain and get no lines"
            self.findings.append(Finding("line-left-out", message, _LAYER, severity=NOTE))
        ordered = [(self.runs[n], line) for n in sorted(self.done) for line in self.done[n]]
        for run, line in ordered:
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
