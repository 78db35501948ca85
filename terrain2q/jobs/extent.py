"""The flood on the map: extent, low ground not joined, depth, and how good the boundary is.

For each event the water of every answered section is carried over the ground between the sections
(:mod:`terrain2q.ground.water_surface`), path by path: ground between two lines looks at the water on
both, on its own side of the stream. Where a hollow stands at a stage of its own, the ground is shared
out between the waters along the ridges that part them. Wet is what lies below the level and joins a
stream, or a section's own water, over the ground (:mod:`terrain2q.ground.water_edge`).

Nothing is mapped above the first and below the last section of a stream, nor beyond the lines that join
the sections' ends: there is no level there that anybody has worked out. A tributary is mapped down to
its mouth, on ground that narrows from its last section to the mouth: its water falls from that section's
stage with that section's slope, as uniform flow does. The level of the stream that it joins backs up into
it as far as it is the higher one. Where mapped grounds overlap, the higher level holds.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from itertools import pairwise

import geopandas
import numpy as np
import shapely
from rasterio.transform import Affine

from terrain2q.errors import DOUBTFUL, FAILED, NOTE, SEVERITIES, Finding
from terrain2q.ground.streams import StreamNetwork, length_text
from terrain2q.ground.terrain import Terrain
from terrain2q.ground.water_edge import GridFile
from terrain2q.ground.water_surface import MARGIN, Reach, divide
from terrain2q.jobs.design_flows import EventAnswer, SectionAnswer
from terrain2q.jobs.flood_sweep import JOINED, LOW, Sweep
from terrain2q.jobs.flood_water import (
    FloodReach,
    Hollow,
    MapCells,
    PlacedSection,
    SectionWater,
    cut_off_hollows,
    to_cells,
    to_map,
)
from terrain2q.units import FOOT, UnitSystem

TOLERANCE = FOOT
"""m between water and ground at a good boundary: FEMA Procedure Memorandum 38 (revised 17 October 2007),
Table 1, from memory: 1.0 ft for detailed studies, half a contour for approximate ones. The stricter is
taken, as a DEM has no contours."""

SMALLEST_AREA, SMALLEST_CELLS = 25.0, 4
"""Default of the smallest patch or hole kept: 25 m², and no fewer cells than that (common practice)."""

ROUNDS = 3
"""Most rounds in which stages are solved again for hollows that the map shows to be reached."""

TELLING_AREA = 0.01
"""Hollows reached from elsewhere count where they add more than this share to a section's flow area."""

RISE = 0.1 * FOOT
"""m by which water may rise downstream before it is a finding: levels of floods are given to a tenth of a
foot (common practice), and the noise of the ground moves a stage by centimetres."""

DOUBTFUL_DIFFERENCE = 0.5 * FOOT
"""m; a stage that moves further is doubtful (FIA's tolerance for flood profiles, letter of 1975: 0.5 ft)."""

PARTING = 1e-3
"""m of height by a metre aside: too little to matter where a ridge parts two waters, enough where none is."""

_LAYER = "flood_extent"
_ON_BOUNDARY = 1e-3
_NUMBER = "\0"


@dataclass(frozen=True, eq=False)
class EventExtent:
    """The flood of one event, in SI and the terrain's CRS.

    Attributes
    ----------
    event : str
    polygons, low : shapely.MultiPolygon
        Under water; and below the water's level but not joined.
    area, low_area : float
        On the ellipsoid, m².
    largest_depth, low_depth : float
        m; NaN where there is none.
    boundary_points : int
    within : float
        Share of the points within :data:`TOLERANCE`, NaN where there is no point.
    """

    event: str
    polygons: shapely.MultiPolygon
    area: float
    largest_depth: float
    boundary_points: int
    within: float
    low: shapely.MultiPolygon
    low_area: float
    low_depth: float
    _depth: GridFile = field(repr=False)
    _velocity: GridFile = field(repr=False)
    _state: GridFile = field(repr=False)

    def depth(self, row: int, end: int) -> np.ndarray:
        """Return depths of rows `row` to `end` of the map, m, NaN where dry; float32."""
        joined = self._state.read(row, end) == JOINED
        if not joined.any():
            return np.full(joined.shape, np.nan, dtype=np.float32)
        values = self._depth.read(row, end)
        values[~joined] = np.nan
        return values

    def depth_velocity(self, row: int, end: int) -> np.ndarray:
        """Return depth times velocity of rows `row` to `end`, m²/s, NaN where dry; float32."""
        values = self.depth(row, end)
        values *= self._velocity.read(row, end)
        return values

    def close(self) -> None:
        """Give the room on the disk back; depths cannot be read any more."""
        for grid in (self._depth, self._velocity, self._state):
            grid.close()


@dataclass(frozen=True, eq=False)
class FloodMap:
    """All events on one grid of cells, the terrain's own.

    Attributes
    ----------
    events : tuple of EventExtent
    rows, columns : int
    transform : Affine
        From (column, row) to (x, y).
    block_rows : int
        Rows that are best read together.
    answers : tuple of SectionAnswer
        Of the sections, with the hollows that the map shows to be reached.
    findings : tuple of Finding
    """

    events: tuple[EventExtent, ...]
    rows: int
    columns: int
    transform: Affine
    block_rows: int
    answers: tuple[SectionAnswer, ...]
    findings: tuple[Finding, ...]

    @classmethod
    def nothing(cls) -> FloodMap:
        """Return a map without events."""
        return cls((), 0, 0, Affine.identity(), 1, (), ())

    def close(self) -> None:
        """Give the room on the disk back."""
        for event in self.events:
            event.close()


@dataclass(frozen=True)
class ExtentInputs:
    """What a flood map is made from, beside the sections.

    Attributes
    ----------
    terrain : Terrain
    streams : GeoDataFrame
        In the terrain's CRS, with ``feature_id``.
    events : tuple of str
        In order.
    smallest : float or None
        Area of the smallest patch or hole kept, m²; a default where None.
    units : UnitSystem
        For messages.
    folder : path or None
        Where temporary files without a name may lie.
    """

    terrain: Terrain
    streams: geopandas.GeoDataFrame
    events: tuple[str, ...]
    smallest: float | None
    units: UnitSystem
    folder: object = None


AnswerAgain = Callable[[SectionAnswer, Mapping[str, Sequence[tuple[float, float]]]], SectionAnswer]


def map_floods(
    answers: Sequence[SectionAnswer],
    inputs: ExtentInputs,
    answer_again: AnswerAgain,
    progress: Callable[[int, int, str], None] | None = None,
) -> FloodMap:
    """Map the flood of each event between the sections.

    Parameters
    ----------
    answers : sequence of SectionAnswer
    inputs : ExtentInputs
    answer_again : callable
        ``answer_again(answer, reached)`` returns the answer of a section with hollows that water is
        known to reach, given by event.
    progress : callable, optional
        ``progress(done, total, label)``.

    Returns
    -------
    FloodMap
    """
    job = _Job(list(answers), inputs, answer_again)
    made = []
    for done, event in enumerate(inputs.events):
        if progress is not None:
            progress(done, len(inputs.events), "flood extent")
        made.append(job.event(event))
    if progress is not None:
        progress(len(made), len(made), "flood extent")
    return FloodMap(
        tuple(made), job.frame.rows, job.frame.columns, job.frame.transform, job.frame.block,
        tuple(job.answers), (*job.findings, *job.remarks.findings()),
    )  # fmt: skip


class _Remarks:
    """Findings about places, one a place, with the events that they hold for."""

    def __init__(self) -> None:
        self._found: dict[tuple, tuple[Finding, dict[tuple[str, ...], dict[str, list[str]]]]] = {}

    def add(self, finding: Finding, place: object, event: str, numbers: Sequence[str] = ()) -> None:
        """Note a finding about a place at an event.

        `numbers` stand where its message has :data:`_NUMBER`; those of several events are told together.
        """
        first, texts = self._found.setdefault((finding.code, place), (finding, {}))
        if SEVERITIES.index(finding.severity) < SEVERITIES.index(first.severity):
            self._found[finding.code, place] = (finding, texts)
        texts.setdefault(finding.message, {})[event] = list(numbers)

    def findings(self) -> list[Finding]:
        """Return the findings, each place's in one."""
        made = []
        for finding, texts in self._found.values():
            told = []
            for message, by_event in texts.items():
                columns = [_listed(column) for column in zip(*by_event.values(), strict=True)]
                first, *rest = message.split(_NUMBER)
                text = first + "".join(number + part for number, part in zip(columns, rest, strict=True))
                told.append(f"{', '.join(by_event)}: {text}")
            made.append(replace(finding, message="; ".join(told)))
        return made


def _listed(numbers: Sequence[str]) -> str:
    """Return numbers of several events in one: their common unit once, and alike ones once.

    Examples
    --------
    >>> _listed(["0.75 ft", "0.68 ft", "0.93 ft"]), _listed(["12 m", "12 m"])
    ('0.75, 0.68 and 0.93 ft', '12 m')
    """
    if len(set(numbers)) == 1:
        return numbers[0]
    unit = numbers[0].rpartition(" ")[2]
    return f"{', '.join(n.removesuffix(' ' + unit) for n in numbers[:-1])} and {numbers[-1]}"


class _Job:
    def __init__(self, answers: list[SectionAnswer], inputs: ExtentInputs, answer_again: AnswerAgain) -> None:
        self.answers, self.inputs, self.answer_again = answers, inputs, answer_again
        self.first_answers = list(answers)
        self.terrain = inputs.terrain
        self.size = self.terrain.cell_size
        a, b, _, d, e, _ = self.terrain.transform[:6]
        self.hand = float(np.sign(a * e - b * d))
        self.network = StreamNetwork(inputs.streams, self.terrain.crs, inputs.units)
        self._courses: dict[str, list[tuple[np.ndarray, np.ndarray]]] = {}
        self._reaches: dict[object, Reach | None] = {}
        self.reached: dict[int, dict[str, list[tuple[float, float]]]] = {}
        self.findings: list[Finding] = []
        self.remarks = _Remarks()
        self.stations = self._place()
        cell = self.size[0] * self.size[1]
        smallest = (
            inputs.smallest if inputs.smallest is not None else max(SMALLEST_AREA, SMALLEST_CELLS * cell)
        )
        self.smallest = smallest / cell
        self.frame = self._frame()

    def _text(self, metres: float) -> str:
        return length_text(metres, self.inputs.units)

    def _height(self, metres: float) -> str:
        """Return a level or a difference of levels; water is told apart by hundredths."""
        units = self.inputs.units
        return f"{metres * units.per_si('length'):.2f} {units.symbol('length')}"

    # --- sections, streams, reaches ----------------------------------------------------------------

    def _place(self) -> dict[int, PlacedSection]:
        """Return the sections that lie on a stream; the others are findings."""
        transform = self.terrain.transform
        placed = {}
        for index, answer in enumerate(self.answers):
            line = answer.built.line
            why = ""
            if answer.built.section is None:
                why = "it has no section"
            elif not line.stream or not np.isfinite(line.stream_distance):
                why = "it lies on no stream"
            if not why:
                placed[index] = PlacedSection(index, answer, lambda x, y: to_cells(transform, x, y))
                continue
            finding = Finding(
                "extent-without-section",
                f"section {answer.section_id} is not used for the flood extent: {why}",
                "sections",
                answer.section_id,
            )
            if line.x.size:
                finding = finding.at(line.x.mean(), line.y.mean())
            self.findings.append(finding)
        return placed

    def _answer(self, index: int, event: str) -> EventAnswer:
        return next(e for e in self.answers[index].events if e.event == event)

    def _answered(self, event: str) -> dict[str, list[PlacedSection]]:
        """Sections with an answer at an event, by stream, from upstream."""
        streams: dict[str, list[PlacedSection]] = {}
        for station in sorted(self.stations.values(), key=lambda s: s.distance):
            if self._answer(station.index, event).status != FAILED:
                streams.setdefault(station.stream, []).append(station)
        return streams

    def _course(self, stream: str, start: float, end: float) -> list[np.ndarray]:
        """Parts of a stream between two stream distances, vertices in cells."""
        if stream not in self._courses:
            parts = []
            for chain in np.flatnonzero(self.network.chain_stream == stream):
                xy = shapely.get_coordinates(self.network.chains[chain])
                along = np.append(0.0, np.cumsum(np.hypot(*np.diff(xy, axis=0).T)))
                distance = self.network.distance_at(np.full(along.size, chain), along)
                cells = np.column_stack(to_cells(self.terrain.transform, xy[:, 0], xy[:, 1]))
                parts.append((distance, cells))
            self._courses[stream] = parts
        found = []
        for distance, cells in self._courses[stream]:
            low, high = max(start, distance[0]), min(end, distance[-1])
            if low < high:
                inside = (distance > low) & (distance < high)
                at = np.concatenate([[low], distance[inside], [high]])
                found.append(np.column_stack([np.interp(at, distance, cells[:, k]) for k in (0, 1)]))
        return found

    def _mouth(self, stream: str) -> tuple[np.ndarray, float]:
        """Where a stream ends, in cells, and its stream distance there."""
        distance, cells = max(((d, c) for d, c in self._courses_of(stream)), key=lambda part: part[0][-1])
        return cells[-1], float(distance[-1])

    def _courses_of(self, stream: str):
        self._course(stream, 0.0, 0.0)
        return self._courses[stream]

    def _reach(self, upper: PlacedSection, lower: PlacedSection | None) -> Reach | None:
        key = (upper.index, None if lower is None else lower.index)
        if key not in self._reaches:
            if lower is None:
                mouth, end = self._mouth(upper.stream)
                line = mouth[None, :]
            else:
                line, end = lower.line, lower.distance
            stream = self._course(upper.stream, upper.distance, end)
            if not stream:
                stream = [np.vstack([upper.line.mean(axis=0), line.mean(axis=0)])]
            self._reaches[key] = Reach.between(upper.line, line, stream, self.size, self.hand)
        return self._reaches[key]

    def _frame(self) -> MapCells:
        bounds = []
        for event in self.inputs.events:
            for stations in self._answered(event).values():
                for upper, lower in pairwise(stations):
                    reach = self._reach(upper, lower)
                    if reach is not None:
                        bounds.append(reach)
                if self._joins_another(stations[-1].stream, event):
                    reach = self._reach(stations[-1], None)
                    if reach is not None:
                        bounds.append(reach)
        if not bounds:
            return MapCells(self.terrain, (0, 0, 0, 0))
        return MapCells(
            self.terrain,
            (
                min(r.column for r in bounds), min(r.row for r in bounds),
                max(r.column + r.columns for r in bounds), max(r.row + r.rows for r in bounds),
            ),
        )  # fmt: skip

    def _joins_another(self, stream: str, event: str) -> tuple[PlacedSection, PlacedSection] | None:
        """Return the two sections of another stream between which this stream ends."""
        mouth, _ = self._mouth(stream)
        for other, stations in self._answered(event).items():
            if other == stream:
                continue
            for upper, lower in pairwise(stations):
                reach = self._reach(upper, lower)
                if reach is not None and reach.polygon.distance(shapely.Point(mouth)) < 1.0:
                    return upper, lower
        return None

    def _pieces(self, event: str) -> list[FloodReach]:
        """Reaches with the water on their two lines."""
        width = 0.5 * min(self.size)
        streams = self._answered(event)
        waters = {
            s.index: SectionWater.of(s, self._answer(s.index, event), width)
            for group in streams.values()
            for s in group
        }
        pieces = []
        for stream, group in streams.items():
            least = self._joined_level(stream, event, waters)
            for upper, lower in pairwise(group):
                reach = self._reach(upper, lower)
                if reach is not None:
                    both = waters[upper.index], waters[lower.index]
                    pieces.append(FloodReach(reach, upper, lower, both, least))
            reach = self._reach(group[-1], None) if least is not None else None
            if reach is not None:
                water = waters[group[-1].index]
                way = self._mouth(stream)[1] - group[-1].distance
                end = (*water.channel[:2], water.stage - water.slope * way)
                mouth = replace(water, channel=end, left=(), right=())
                pieces.append(FloodReach(reach, group[-1], None, (water, mouth), least))
        # a stream that others join comes first: on its own ground its own level counts
        pieces.sort(key=lambda piece: piece.least is not None)
        if pieces:
            whole = shapely.union_all([p.reach.polygon for p in pieces])
            for piece in pieces:
                piece.margin = piece.reach.polygon.buffer(MARGIN, quad_segs=2).difference(whole)
        return pieces

    def _joined_level(self, stream: str, event: str, waters, seen: tuple[str, ...] = ()) -> float | None:
        """Return the level, at this stream's mouth, of the stream it joins; None where it joins none."""
        into = self._joins_another(stream, event)
        if into is None or stream in seen:
            return None
        share = float(self._reach(*into).shares_at(self._mouth(stream)[0][None, :])[0])
        a, b = (waters[s.index].stage for s in into)
        further = self._joined_level(into[0].stream, event, waters, (*seen, stream))
        level = a + share * (b - a)
        return level if further is None else max(level, further)

    def _share_out(self, piece: FloodReach) -> None:
        """Give the cells of a reach their labels where a hollow on a line has a stage of its own."""
        upper, lower = piece.waters
        if not (upper.has_own_stages or lower.has_own_stages):
            return
        reach = piece.reach
        right, left = (max(len(w.side(side)) for w in piece.waters) for side in (1, -1))
        labels = [0, *range(1, right + 1), *range(-left, 0)]
        ground = self.frame.ground(reach.row, reach.column, reach.rows, reach.columns)
        levels = [piece.level_nodes(k) for k in labels]
        with np.errstate(invalid="ignore"):
            low = ground < reach.spread(np.max(levels, axis=0), 0, reach.rows) + 1.0
        low &= reach.cells(0, reach.rows, piece.margin) > 0
        # under water of any level the shape of the ground says nothing: there the waters part as far aside
        # of the stream as they do on the lines
        np.maximum(ground, reach.spread(np.min(levels, axis=0), 0, reach.rows), out=ground)
        aside = reach.spread(reach.aside, 0, reach.rows)
        seeds: dict[int, list[np.ndarray]] = {label: [] for label in labels}
        seeds[0].append(self._stream_places(piece))
        for side in (1, -1):
            known = [w.divide(side) for w in piece.waters]
            if known == [None, None]:
                continue
            first, last = (k if k is not None else other for k, other in zip(known, known[::-1], strict=True))
            part = reach.spread(side * (first + reach.share * (last - first)), 0, reach.rows)
            mine = aside * side > 0
            ground[mine] -= PARTING * np.abs(aside - part)[mine]
        for station, water, other in zip(
            (piece.upper, piece.lower), piece.waters, piece.waters[::-1], strict=True
        ):
            if station is None:
                continue
            start, end, stage = water.channel
            for side in (1, -1):
                for label, path in enumerate(water.side(side), 1):
                    seeds[side * label].append(station.places(*path))
                away = other.divide(side)
                if water.side(side) or away is None:
                    continue
                # on this line one water reaches from the channel over the side that the other line parts
                at = water.origin + side * away
                if start < at < end:
                    beyond = (at, end, stage) if side > 0 else (start, at, stage)
                    seeds[side].append(station.places(*beyond))
                    start, end = (start, at) if side > 0 else (at, end)
            seeds[0].append(station.places(start, end, stage))
        cells = {}
        for label, places in seeds.items():
            found = (
                np.concatenate(places) - (reach.row, reach.column) if places else np.zeros((0, 2), dtype=int)
            )
            cells[label] = found[((found >= 0) & (found < (reach.rows, reach.columns))).all(axis=1)]
        piece.labels = divide(ground, cells, low)

    def _stream_places(self, piece: FloodReach) -> np.ndarray:
        course = piece.reach.stream
        return np.floor(course.points / course.size)[:, ::-1].astype(np.int64)

    # --- one event -----------------------------------------------------------------------------------

    def event(self, event: str) -> EventExtent:
        frame = self.frame
        pieces = self._pieces(event)
        for round_number in range(ROUNDS + 1):
            if round_number:
                pieces = self._pieces(event)
            hollows = self._cut_off_hollows(event, pieces) if round_number < ROUNDS else []
            for piece in pieces:
                self._share_out(piece)
            sweep = Sweep(frame, pieces, self.inputs.folder)
            seeds = [self._own_water(piece) for piece in pieces]
            seeds = np.concatenate(seeds) if seeds else np.zeros((0, 2), dtype=np.int64)
            sweep.run(
                seeds, np.concatenate([h.places for h in hollows]) if hollows else np.zeros((0, 2), dtype=int)
            )
            if not self._solve_again(event, hollows, sweep):
                break
            sweep.close()
        self._remark_surface(event, pieces)
        for stream, stations in self._answered(event).items():
            if len(stations) < 2 and not self._joins_another(stream, event):
                where = to_map(self.terrain.transform, *stations[0].line.mean(axis=0))
                finding = Finding(
                    "extent-one-section",
                    f"stream {stream} has one section with an answer, {stations[0].name}",
                    _LAYER,
                    stations[0].name,
                )
                self.remarks.add(finding.at(*where), stream, event)
        polygons, low = sweep.finish(self.smallest)
        return self._measured(event, pieces, sweep, polygons, low)

    def _own_water(self, piece: FloodReach) -> np.ndarray:
        places = [self._stream_places(piece)]
        for station, water in zip((piece.upper, piece.lower), piece.waters, strict=True):
            if station is not None:
                places += [station.places(*path) for path in (water.channel, *water.left, *water.right)]
        return np.concatenate(places)

    # --- hollows that the map shows to be reached -------------------------------------------------------

    def _cut_off_hollows(self, event: str, pieces: list[FloodReach]) -> list[Hollow]:
        """Ground on sections below the channel's stage that no path covers."""
        found, seen = [], set()
        for piece in pieces:
            for station, water in zip((piece.upper, piece.lower), piece.waters, strict=True):
                if station is None or station.index in seen:
                    continue
                seen.add(station.index)
                found += cut_off_hollows(station, water)
        return found

    def _solve_again(self, event: str, hollows: list[Hollow], sweep: Sweep) -> bool:
        """Let reached hollows count in their sections; return whether any did."""
        at = np.cumsum([0, *(len(h.places) for h in hollows)])
        by_section: dict[int, list[Hollow]] = {}
        for hollow, start, end in zip(hollows, at, at[1:], strict=False):
            if sweep.asked_is_joined[start:end].any():
                by_section.setdefault(hollow.section, []).append(hollow)
        changed = False
        for index, mine in by_section.items():
            area = self._answer(index, event).row["flow_area"]
            if sum(h.area for h in mine) < TELLING_AREA * area:
                continue
            reached = self.reached.setdefault(index, {})
            before = list(reached.get(event, []))
            reached[event] = [*before, *((h.start, h.end) for h in mine)]
            again = self.answer_again(self.first_answers[index], reached)
            if next(e for e in again.events if e.event == event).status == FAILED:
                reached[event] = before
                continue
            self.answers[index] = again
            changed = True
        return changed

    def _remark_surface(self, event: str, pieces: list[FloodReach]) -> None:
        for index, reached in self.reached.items():
            if event not in reached:
                continue
            first = next(e for e in self.first_answers[index].events if e.event == event)
            now = self._answer(index, event)
            difference = first.row["stage"] - now.row["stage"]
            station = self.stations[index]
            middle = 0.5 * sum(reached[event][0])
            column, row = (np.interp(middle, station.stations, v) for v in (station.column, station.row))
            where = " and ".join(f"{self._text(a)} to {self._text(b)}" for a, b in sorted(reached[event]))
            finding = Finding(
                "hollow-reached",
                f"on the map water reaches the low ground at stations {where}, which the section's own "
                f"ridges cut off; with it the stage is {_NUMBER}, without it {_NUMBER}: {_NUMBER} lower",
                "design_stages",
                station.name,
                severity=DOUBTFUL if abs(difference) > DOUBTFUL_DIFFERENCE else NOTE,
            )
            self.remarks.add(
                finding.at(*to_map(self.terrain.transform, column, row)), index, event,
                [self._height(v) for v in (now.row["stage"], first.row["stage"], difference)],
            )  # fmt: skip
        for piece in pieces:
            self._remark_rise(event, piece)

    def _remark_rise(self, event: str, piece: FloodReach) -> None:
        upper, lower = piece.waters
        rises = [(0.0, 0)]
        for label in (0, *range(1, len(upper.right) + 1), *range(-len(upper.left), 0)):
            if upper.path(label) is not None:
                rises.append((lower.level(label) - upper.level(label), label))
        rise, label = max(rises)
        name = piece.upper.name
        place = "" if label == 0 else f" behind the {'right' if label > 0 else 'left'} bank"
        if piece.lower is None:
            rise = max(rise, piece.least - upper.stage)
            message = f"the stream that {piece.upper.stream} joins stands {_NUMBER} above the water on {name}"
        else:
            message = f"water{place} rises by {_NUMBER} from {name} to {piece.lower.name}"
        if rise <= RISE:
            return
        where = np.mean(
            [piece.upper.line.mean(axis=0), piece.reach.lower.points.mean(axis=0) / self.size], axis=0
        )
        finding = Finding("water-rises-downstream", message, _LAYER, name)
        self.remarks.add(
            finding.at(*to_map(self.terrain.transform, *where)),
            _reach_key(piece),
            event,
            [self._height(rise)],
        )

    # --- measuring ---------------------------------------------------------------------------------------

    def _measured(self, event: str, pieces: list[FloodReach], sweep: Sweep, polygons, low) -> EventExtent:
        points = _along(polygons)
        within, count = float("nan"), 0
        if len(points):
            cut = self._cut_off(event, pieces, sweep.region, points)
            points = points[~cut]
            ground = self.terrain.elevations(*to_map(self.terrain.transform, points[:, 0], points[:, 1]))
            known = np.isfinite(ground)
            level = sweep.levels_at(points[known])
            gap = np.abs(level - ground[known])
            gap = gap[np.isfinite(gap)]
            count = gap.size
            within = float(np.mean(gap <= TOLERANCE)) if count else float("nan")
        return EventExtent(
            event,
            self._on_map(polygons), self._area(polygons), sweep.largest[JOINED], count, within,
            self._on_map(low), self._area(low), sweep.largest[LOW],
            sweep.depth, sweep.velocity, sweep.state,
        )  # fmt: skip

    def _cut_off(self, event: str, pieces: list[FloodReach], region, points: np.ndarray) -> np.ndarray:
        """Return which boundary points lie where the mapped ground ends, and note where water would go on."""
        edges = shapely.get_coordinates(shapely.boundary(region), return_index=False)
        tree = shapely.STRtree(_segments(shapely.boundary(region)))
        places = shapely.points(points)
        cut = np.zeros(len(points), dtype=bool)
        if len(edges):
            cut[np.unique(tree.query(places, predicate="dwithin", distance=_ON_BOUNDARY)[0])] = True
        step = float(np.sqrt(self.size[0] * self.size[1]))
        on = np.flatnonzero(cut)
        for piece in pieces:
            for line, name in zip(piece.sides(), piece.side_names(), strict=True):
                mine = on[shapely.dwithin(shapely.LineString(line), places[on], _ON_BOUNDARY)]
                if not mine.size:
                    continue
                finding = Finding(
                    "extent-cut-off",
                    f"water reaches the line {name} over {_NUMBER}; beyond it nothing is mapped",
                    _LAYER,
                    piece.upper.name,
                ).at(*to_map(self.terrain.transform, *points[mine[mine.size // 2]]))
                length = step * mine.size * self.inputs.units.per_si("length")
                self.remarks.add(
                    finding, (*_reach_key(piece), name), event,
                    [f"{length:.0f} {self.inputs.units.symbol('length')}"],
                )  # fmt: skip
        return cut

    def _on_map(self, polygons: list) -> shapely.MultiPolygon:
        transform = self.terrain.transform
        moved = shapely.transform(
            shapely.MultiPolygon(polygons), lambda xy: np.column_stack(to_map(transform, xy[:, 0], xy[:, 1]))
        )
        return shapely.normalize(moved)

    def _area(self, polygons: list) -> float:
        """Area on the ellipsoid, m²."""
        total = 0.0
        rings, owner = shapely.get_rings(np.array(polygons, dtype=object), return_index=True)
        outer = np.append(True, np.diff(owner) != 0)
        for ring, is_outer in zip(rings, outer, strict=False):
            x, y = to_map(self.terrain.transform, *shapely.get_coordinates(ring).T)
            area = self.terrain.distances.ring_area(x, y)
            total += area if is_outer else -area
        return total


def _reach_key(piece: FloodReach) -> tuple[int, int | None]:
    return piece.upper.index, None if piece.lower is None else piece.lower.index


def _segments(boundary) -> np.ndarray:
    lines = shapely.get_parts(boundary)
    xy, owner = shapely.get_coordinates(lines, return_index=True)
    same = np.flatnonzero(owner[1:] == owner[:-1])
    return (
        shapely.linestrings(np.stack([xy[same], xy[same + 1]], axis=1))
        if same.size
        else np.zeros(0, dtype=object)
    )


def _along(polygons: list) -> np.ndarray:
    """Points about a cell apart along the boundaries of polygons, shape (n, 2)."""
    points = []
    for ring in shapely.get_rings(np.array(polygons, dtype=object)):
        xy = shapely.get_coordinates(ring)
        at = np.append(0.0, np.cumsum(np.hypot(*np.diff(xy, axis=0).T)))
        count = max(round(float(at[-1])), 1)
        where = (np.arange(count) + 0.5) * at[-1] / count
        points.append(np.column_stack([np.interp(where, at, xy[:, k]) for k in (0, 1)]))
    return np.concatenate(points) if points else np.zeros((0, 2))
