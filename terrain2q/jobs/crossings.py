"""Crossings screened: which roads a design flood reaches, how much room is left, and which to look at first.

For each crossing: the road's surface and crest are found in the ground; an approach section is laid out
upstream, clear of the fill, and a tailwater section downstream; the stage of uniform flow in the approach
section is carried down the slope to the road's upstream edge and held against the crest. What that cannot
know, backwater and ponding above all, is said in findings.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
import shapely
import shapely.ops
from scipy.ndimage import minimum_filter1d

from terrain2q.errors import DOUBTFUL, FAILED, NOTE, Finding, NoAnswerError, Terrain2qError
from terrain2q.flows import Flow, event_names, flow_for
from terrain2q.ground.approach import (
    Bed,
    Courses,
    SectionPlace,
    along_line,
    bed_along,
    place_section,
    standing_water,
    storage_below,
)
from terrain2q.ground.cut_lines import CutLine
from terrain2q.ground.layers import clean_text
from terrain2q.ground.local_ground import LocalGround
from terrain2q.ground.road_surface import Crest, RoadSurface, fill_about, find_crest, find_road_surface
from terrain2q.ground.roads import BRIDGE, Crossing, RoadNetwork, says_so
from terrain2q.ground.stream_slope import robust_slope
from terrain2q.ground.streams import StreamNetwork, length_text
from terrain2q.ground.terrain import Profile, Terrain
from terrain2q.hydraulics.weir import road_overflow, wetted_road
from terrain2q.jobs.design_flows import SectionAnswer, answer_section
from terrain2q.jobs.sections import BuiltSection, SectionInputs, build_sections
from terrain2q.jobs.slopes import FLAT, SlopeAnswer
from terrain2q.units import UnitSystem

NOT_REACHED, WITHIN, OVER = "crest not reached", "within freeboard", "over the crest"
"""The verdicts."""

FREEBOARD = 0.3048
"""Freeboard asked for where nothing is said, m: a foot below the road's low point (common practice)."""

REACH = 150.0
"""Metres of road to each side of the stream on which the crest is looked for, where nothing is said."""

ROAD_WIDTH = 6.0
"""Least width of a road, m, where nothing is said (common practice: two narrow lanes)."""

SEARCH = 12.0
"""Metres to each side of the drawn line within which the road lies, where nothing is said."""

SNAP = 30.0
"""Metres from a point within which its stream and its road lie, where nothing is said."""

MERGE = 30.0
"""Metres within which crossings are one, where nothing is said: a divided road's two carriageways."""

SLOPE_WINDOW = 600.0
"""Metres of stream, half to each side of the road, over which the slope is taken, where nothing is said."""

FARTHEST = 200.0
"""Metres from the fill within which a place for a section is looked for."""

ALONG_ROADS = 350.0
"""Metres along roads for which their fills are kept out of sections: as far as a section can be."""

HALF_SECTION = 300.0
"""Metres to each side of the stream that a section may reach."""

CLEAR_ABOVE = 2.0
"""Metres above the crest to which sections reach, or the crest's height above the bed if that is more."""

DEEP_POND = 1.0
"""Mean depth, m, of water held back to the crest above which ponding is worth a finding."""

SMALL_STORAGE = 0.05
"""Share of the event's volume below which the room behind a fill does not matter."""

LOOKS_DOWNSTREAM = 500.0
"""Metres downstream within which standing water and larger streams are looked for."""

SURVEY_DIFFERS = 0.3
"""Metres between a surveyed crest and the one in the ground that are worth a finding."""

CLOSED_WITHIN = 60.0
"""Metres up- and downstream of a road within which higher ground across the stream is looked for."""

STRIP = 2
"""Cells to each side of a section, along the stream, over which its ground is averaged."""

AT_CREST = "crest reached"
"""Name of the event, in the sections of crossings, whose discharge is that at which the crest is reached."""

DEFAULT_RANK = ("probability", "freeboard")

BATCH = 24
"""Crossings whose sections are made together: few enough that little ground is held at once."""

_LAYER = "crossings"


@dataclass(frozen=True)
class CrossingInputs:
    """What crossings are screened with, in SI.

    Attributes
    ----------
    crossings : sequence of Crossing
    network : StreamNetwork
    sections : SectionInputs
        Terrain, cover, channel; its slopes are not used.
    flows : sequence of Flow
    freeboard, reach, road_width, search : float
        See the constants of the same names.
    weir_coefficient : float
        m^(1/2)/s.
    slope : float or None
        One slope for all; from the ground where None.
    slope_field : str or None
        Field of the crossings or roads with the slope, used where it holds one.
    slope_window : float
        m.
    crest_field, opening_field, tide_field : str or None
        Fields of the crossings or roads: the surveyed crest and the opening's width, in the study's units,
        and whether the tide reaches the crossing.
    roads : RoadNetwork or None
        Every road, so that no section runs over the fill of another one.
    rank : sequence of str
        What decides the rank, in order: ``probability``, ``freeboard``, or a field, the larger first;
        with a minus before it the smaller first.
    """

    crossings: Sequence[Crossing]
    network: StreamNetwork
    sections: SectionInputs
    flows: Sequence[Flow]
    weir_coefficient: float
    freeboard: float = FREEBOARD
    reach: float = REACH
    road_width: float = ROAD_WIDTH
    search: float = SEARCH
    slope: float | None = None
    slope_field: str | None = None
    slope_window: float = SLOPE_WINDOW
    crest_field: str | None = None
    opening_field: str | None = None
    tide_field: str | None = None
    roads: RoadNetwork | None = None
    rank: Sequence[str] = DEFAULT_RANK

    @property
    def units(self) -> UnitSystem:
        """The study's units, for messages and fields."""
        return self.sections.units


@dataclass(frozen=True)
class CrossingEvent:
    """One crossing at one event, in SI.

    Attributes
    ----------
    event, status, verdict : str
        `verdict` is empty where `status` is ``failed``.
    values : mapping of str to float
        ``discharge, stage, freeboard, probability, required_opening, opening_share,
        road_width_under_water, largest_depth_on_road, weir_discharge, tailwater_stage``, and
        ``weir_coefficient, allowed_stage`` (at the approach section) from which they come; ``opening_most``,
        what passes at that stage at the most, where no opening passes the event.
    """

    event: str
    status: str
    verdict: str = ""
    values: Mapping[str, float] = field(default_factory=dict)


@dataclass(frozen=True, eq=False)
class Road:
    """The road at a crossing, ready to be drawn.

    Attributes
    ----------
    stations, heights, ground : ndarray, shape (n,)
        Along the road from the crossing, left to right looking downstream; the road's surface, and the mean
        ground over its width; m.
    x, y : ndarray, shape (n,)
        Its middle, in the terrain's CRS.
    deck : tuple of float or None
        Stations of the abutments where the deck is missing in the ground.
    edges : tuple of float
        Upstream and downstream edge from the middle, m.
    offset : float
        How far the road lies upstream of the line at the crossing, m.
    noise : float
        Of the ground across the road about its fitted surface, m.
    fill : shapely.Geometry
        Ground under road and fill, in the terrain's CRS.
    """

    stations: np.ndarray
    heights: np.ndarray
    ground: np.ndarray
    x: np.ndarray
    y: np.ndarray
    deck: tuple[float, float] | None
    edges: tuple[float, float]
    offset: float
    noise: float
    fill: shapely.Geometry


@dataclass(frozen=True, eq=False)
class CrossingAnswer:
    """A crossing with all that was found, in SI.

    Attributes
    ----------
    crossing : Crossing
    road : Road or None
    crest, crest_station, crest_x, crest_y : float
        Where water would first pass; NaN where no road was found.
    approach, tailwater : BuiltSection or None
    to_road, from_road : float
        Metres along the stream from the approach section to the road's upstream edge, and from its downstream
        edge to the tailwater section.
    slope, slope_source : float, str
    crest_discharge, crest_probability : float
        Discharge at which the stage at the road is the crest; its probability between events, NaN beyond.
    first_event_over : str
        The smallest event whose stage passes the crest; empty where none does.
    events : tuple of CrossingEvent
    findings : tuple of Finding
    rank : int
        From 1, the first to look at.
    reach : float
        Metres of road to each side that were searched for the crest and for water on the road.
    """

    crossing: Crossing
    road: Road | None = None
    crest: float = float("nan")
    crest_station: float = float("nan")
    crest_x: float = float("nan")
    crest_y: float = float("nan")
    approach: BuiltSection | None = None
    tailwater: BuiltSection | None = None
    to_road: float = float("nan")
    from_road: float = float("nan")
    slope: float = float("nan")
    slope_source: str = ""
    crest_discharge: float = float("nan")
    crest_probability: float = float("nan")
    first_event_over: str = ""
    events: tuple[CrossingEvent, ...] = ()
    findings: tuple[Finding, ...] = ()
    rank: int = 0
    reach: float = REACH

    @property
    def status(self) -> str:
        """The worst status of its events."""
        found = {e.status for e in self.events}
        return next((s for s in (FAILED, DOUBTFUL) if s in found), "ok")


class _Strips:
    """A terrain whose profiles are means over a strip of ground along the stream.

    One line of cells has all the noise of the lidar in it; lines a few cells up- and downstream of it show
    the same valley. They lie evenly to both sides, so that the fall of the valley cancels out.
    """

    def __init__(self, terrain: Terrain) -> None:
        self._terrain = terrain

    def __getattr__(self, name: str):
        return getattr(self._terrain, name)

    def sample(self, lines, spacing=None, crs=None) -> list[Profile]:
        """Return the ground along lines, each the mean over its strip."""
        profiles = self._terrain.sample(lines, spacing=spacing, crs=crs)
        x, y = (np.concatenate([getattr(p, k) for p in profiles] or [np.zeros(0)]) for k in "xy")
        if not x.size:
            return profiles
        aside = np.concatenate([_aside(p) for p in profiles]) * self._terrain.transform.a
        z = np.concatenate([p.elevations for p in profiles])
        total, count = np.zeros_like(z), np.zeros_like(z)
        for k in range(-STRIP, STRIP + 1):
            more = z if k == 0 else self._terrain.elevations(x + k * aside[:, 0], y + k * aside[:, 1])
            total += np.nan_to_num(more)
            count += np.isfinite(more)
        mean = np.where(np.isfinite(z), total / np.maximum(count, 1), np.nan)
        parts = np.split(mean, np.cumsum([len(p) for p in profiles])[:-1])
        return [replace(p, elevations=part) for p, part in zip(profiles, parts, strict=True)]


def _aside(profile: Profile) -> np.ndarray:
    """Return unit vectors square to a line at each of its points, shape (n, 2)."""
    if len(profile) < 2:
        return np.zeros((len(profile), 2))
    dx, dy = np.gradient(profile.x), np.gradient(profile.y)
    size = np.maximum(np.hypot(dx, dy), 1e-300)
    return np.column_stack([-dy / size, dx / size])


class _AttributeSlopes:
    """The slope that was found with the place of the section."""

    def of(self, line: CutLine) -> SlopeAnswer:
        """Return the slope of a section."""
        return SlopeAnswer(line.attributes["slope"], line.attributes["slope_source"])


def screen_crossings(inputs: CrossingInputs, progress: Callable | None = None) -> list[CrossingAnswer]:
    """Screen every crossing.

    Parameters
    ----------
    inputs : CrossingInputs
    progress : callable, optional
        ``progress(done, total, label)``.

    Returns
    -------
    list of CrossingAnswer
        In the order of `inputs.crossings`, ranked. One that could not be worked out keeps its place, with
        events of status ``failed`` and a finding.

    Notes
    -----
    Ground is read about one crossing at a time, in an order in which neighbours follow each other.
    """
    batches = neighbouring_crossings(inputs.crossings, inputs.sections.terrain)
    courses = Courses(inputs.network)
    answers: list[CrossingAnswer | None] = [None] * len(inputs.crossings)
    done = 0
    for batch in batches:
        found = answer_crossings([inputs.crossings[i] for i in batch], inputs, courses)
        for i, answer in zip(batch, found, strict=True):
            answers[i] = answer
        done += len(batch)
        if progress is not None:
            progress(done, len(answers), "crossings")
    return ranked([a for a in answers if a is not None], inputs.rank)


def answer_crossings(
    crossings: Sequence[Crossing], inputs: CrossingInputs, courses: Courses
) -> list[CrossingAnswer]:
    """Answer some crossings that lie near each other, not ranked; see :func:`screen_crossings`.

    Parameters
    ----------
    crossings : sequence of Crossing
        Of which there are few, as the ground of all their sections is held at once.
    inputs : CrossingInputs
        Its own crossings are not used.
    courses : Courses
        Of the inputs' network.
    """
    events = event_names(inputs.flows)
    answers: dict[int, CrossingAnswer] = {}
    prepared = {}
    for i, crossing in enumerate(crossings):
        try:
            prepared[i] = _prepare(crossing, inputs, courses)
        except _EXPECTED as error:
            answers[i] = _failed(crossing, events, _reason(error))
    own = replace(
        inputs.sections,
        terrain=_Strips(inputs.sections.terrain),
        slopes=_AttributeSlopes(),
        area_field=None,
    )
    for i, made in _sections_of(prepared, own).items():
        try:
            if isinstance(made, Exception):
                raise made
            answers[i] = _answer(prepared[i], made, inputs, events)
        except _EXPECTED as error:
            answers[i] = _failed(crossings[i], events, _reason(error), prepared[i].findings)
    return [answers[i] for i in range(len(crossings))]


@dataclass(frozen=True, eq=False)
class Beside:
    """Where sections up- and downstream of a crossing lie clear of every fill.

    Attributes
    ----------
    crossing : Crossing
    distances : mapping of str to float
        Stream distance, m, of the ``approach`` and of the ``tailwater`` section, where there is a place.
    closed : shapely.Geometry
        Ground under roads and fills, and what a section keeps clear of them less one cell, as a section may
        stand on the very edge; in the terrain's CRS.
    findings : tuple of Finding
    """

    crossing: Crossing
    distances: Mapping[str, float]
    closed: shapely.Geometry
    findings: tuple[Finding, ...]


def places_beside(inputs: CrossingInputs, progress: Callable | None = None) -> list[Beside]:
    """Find places for sections up- and downstream of every crossing, as :func:`screen_crossings` does.

    A crossing for which there are none has no distances, and a finding.
    """
    courses = Courses(inputs.network)
    crossings = list(inputs.crossings)
    found: dict[int, Beside] = {}
    for done, i in enumerate(_neighbours(crossings, inputs.sections.terrain), 1):
        try:
            ready = _prepare(crossings[i], inputs, courses)
        except _EXPECTED as error:
            failed = _failed(crossings[i], (), _reason(error))
            found[i] = Beside(crossings[i], {}, shapely.Polygon(), failed.findings)
        else:
            distances = {line.section_id.rpartition(" ")[2]: line.stream_distance for line in ready.lines}
            found[i] = Beside(crossings[i], distances, ready.closed, tuple(crossings[i].findings))
        if progress is not None:
            progress(done, len(crossings), "crossings")
    return [found[i] for i in range(len(crossings))]


def _sections_of(prepared: Mapping[int, _Ready], inputs: SectionInputs) -> dict:
    """Return the sections of each crossing, or the exception that kept it from having any."""
    lines = [line for ready in prepared.values() for line in ready.lines]
    try:
        together = iter(build_sections(lines, inputs))
        return {i: [next(together) for _ in ready.lines] for i, ready in prepared.items()}
    except _EXPECTED:
        # one of them is to blame: each by itself
        found = {}
        for i, ready in prepared.items():
            try:
                found[i] = build_sections(ready.lines, inputs)
            except _EXPECTED as error:
                found[i] = error
        return found


_EXPECTED = (Terrain2qError, ArithmeticError, ValueError, IndexError, shapely.errors.GEOSException)


def _reason(error: Exception) -> str:
    return error.what if isinstance(error, Terrain2qError) else f"{type(error).__name__}: {error}"


def neighbouring_crossings(crossings: Sequence[Crossing], terrain: Terrain) -> list[list[int]]:
    """Return the places of crossings in batches that lie together, for :func:`answer_crossings`."""
    order = _neighbours(crossings, terrain)
    return [order[start : start + BATCH] for start in range(0, len(order), BATCH)]


def _neighbours(crossings: Sequence[Crossing], terrain: Terrain) -> list[int]:
    """Return an order in which crossings that lie together follow each other."""
    _, bottom, _, top = terrain.bounds
    x = np.array([c.x for c in crossings])
    y = np.array([c.y for c in crossings])
    band = np.floor(np.nan_to_num((y - bottom) / max(top - bottom, 1e-12) * 40.0))
    return [int(i) for i in np.lexsort((np.nan_to_num(x), band))]


@dataclass
class _Ready:
    """A crossing with its road and the places of its sections; metres are local."""

    crossing: Crossing
    surface: RoadSurface
    road: Road
    crest: Crest
    crest_xy: np.ndarray
    slope: float
    slope_source: str
    bed: Bed
    edges_at: tuple[float, float]
    places: list[SectionPlace | None]
    lines: list[CutLine]
    storage: tuple[float, float, bool] | None
    water: tuple[float, float, float] | None
    joins: tuple[float, str] | None
    closed: shapely.Geometry
    findings: list[Finding]


def _failed(crossing: Crossing, events, why: str, findings: Sequence[Finding] = ()) -> CrossingAnswer:
    found = [*crossing.findings, *findings]
    # where the place itself is wrong, that says it all
    if why and not any(f.severity == FAILED for f in crossing.findings):
        found.append(crossing.finding("crossing-failed", why))
    return CrossingAnswer(
        crossing, events=tuple(CrossingEvent(e, FAILED) for e in events), findings=_once(found)
    )


def _once(findings: Sequence[Finding]) -> tuple[Finding, ...]:
    return tuple(dict.fromkeys(findings))


def _number(crossing: Crossing, name: str | None) -> float:
    """Return the number in a field of a crossing, NaN where there is none."""
    return float("nan") if name is None else number_in(crossing.attributes.get(name))


def number_in(value: object) -> float:
    """Return a field's value as a number; NaN where it is empty, infinite or no plain number.

    Examples
    --------
    >>> number_in(" 12.5 "), number_in("1,200"), number_in(None)
    (12.5, nan, nan)
    """
    try:
        number = float(clean_text(value) or "nan")
    except ValueError:
        return float("nan")
    return number if np.isfinite(number) else float("nan")


def field_findings(crossing: Crossing, wanted: Sequence[tuple[str, str, bool]]) -> list[Finding]:
    """Return what is wrong with the numbers in a crossing's fields.

    Parameters
    ----------
    crossing : Crossing
    wanted : sequence of (str, str, bool)
        Name of a field, what it is for, and whether it must be above zero.
    """
    found = []
    for name, purpose, positive in wanted:
        text = clean_text(crossing.attributes.get(name))
        if not text or text.lower() == "nan":
            continue
        number = number_in(text)
        if np.isnan(number):
            wrong = "is not a plain number"
        elif positive and number <= 0:
            wrong = "is not above zero"
        else:
            continue
        # nothing but its place in the list hangs on the rank, and many tables write 0 for nothing
        mild = purpose == "the rank" or number == 0
        message = f"{name} = {text!r} {wrong}; it was left out for {purpose}"
        found.append(crossing.finding("field-not-number", message, NOTE if mild else ""))
    return found


# --- the ground at one crossing ----------------------------------------------------------------------


def _prepare(crossing: Crossing, inputs: CrossingInputs, courses: Courses) -> _Ready:
    if any(f.severity == FAILED for f in crossing.findings):
        raise NoAnswerError("see its other findings", where=crossing.crossing_id)
    units = inputs.units
    findings: list[Finding] = []
    unit = 1.0 / inputs.network.ground.metres_per_map_unit
    stretch = max(0.5 * inputs.slope_window + FARTHEST, LOOKS_DOWNSTREAM + FARTHEST) * 1.5 * unit
    course = courses.through(crossing.chain, crossing.along, stretch, stretch)
    ground, stream, at = _read(crossing, inputs, course)
    if not np.isfinite(ground.elevations).any():
        raise NoAnswerError("there is no ground at the crossing", where=crossing.crossing_id)
    downstream = along_line(stream, np.array([at]))[1][0]
    bed = bed_along(ground, stream)
    surface, lines, survey = _surface(crossing, inputs, ground, stream, bed, at, downstream, findings)
    drawn_at, at = at, _meeting(surface, stream, at)
    crest = find_crest(surface, ground, inputs.reach)
    if crest is None:
        raise NoAnswerError("the terrain has no road here", where=crossing.crossing_id)
    own = shapely.union_all([surface.footprint, *(s.footprint for s in lines)])
    fills = shapely.union_all([own, *_fills_beside(crossing, inputs, ground)])
    middle = _strip(surface)
    edges_at = _leaves(stream, at, middle, ground.cell)
    fill_at = _leaves(stream, at, own, ground.cell)
    bed = bed.without(fill_at[0] - 3.0, fill_at[1] + 3.0)
    slope, source = _slope(crossing, inputs, bed, fill_at, findings)
    low = bed.near(edges_at[0])
    crest, surface, surveyed = _surveyed(crossing, inputs, crest, surface, survey, low, findings)
    top = crest.height + max(CLEAR_ABOVE, crest.height - low)
    clear = (STRIP + 2) * ground.cell
    places, over = [], []
    for start, up in zip(fill_at, (True, False), strict=True):
        # streets may leave no room at all: then clear of its own road at least
        level = top + (slope * abs(edges_at[0] - start) if up else 0.0)
        for avoided in (fills, own):
            place = place_section(
                ground, stream, start, up, avoided, top=level, slope=slope, half_width=HALF_SECTION,
                farthest=FARTHEST, clear=clear,
            )  # fmt: skip
            if place is not None:
                break
        places.append(place)
        if place is not None and avoided is own and fills is not own:
            over.append("approach" if up else "tailwater")
    if over:
        findings.append(
            crossing.finding(
                "section-cut-by-road",
                f"the {' and the '.join(over)} section could not be kept clear of the fills of other roads",
            )
        )
    if places[0] is None:
        why = _no_place(ground, stream, fill_at[0], own, clear, units)
        raise NoAnswerError(
            f"there is no place for an approach section upstream: {why}", where=crossing.crossing_id
        )
    cut = [
        f"the {name} section"
        for name, p in zip(("approach", "tailwater"), places, strict=True)
        if p and p.cut
    ]
    if cut:
        findings.append(
            crossing.finding(
                "section-cut-by-road",
                f"a road's fill ends {' and '.join(cut)} before high ground; no place within "
                f"{length_text(FARTHEST, units)} of the fill is clear of it",
            )
        )
    crest_xy = ground.to_map(surface.place(crest.station))
    _closed_beside(crossing, inputs, ground, stream, bed, fills, fill_at, slope, crest, findings)
    _remarks_on_road(crossing, inputs, ground, surface, crest, crest_xy, low, surveyed, findings)
    made = [
        _cut_line(
            crossing,
            name,
            place,
            ground,
            inputs,
            crossing.stream_distance + place.at - drawn_at,
            slope,
            source,
        )
        for name, place in zip(("approach", "tailwater"), places, strict=True)
        if place is not None
    ]
    storage = None
    if surface.deck is None and crossing.structure != BRIDGE and crest.height - low > DEEP_POND:
        up, down = (
            stream.interpolate(a + d * 3.0 * ground.cell) for a, d in zip(fill_at, (-1, 1), strict=True)
        )
        storage = storage_below(ground, crest.height, np.array([up.x, up.y]), own, np.array([down.x, down.y]))
    water = standing_water(bed, fill_at[1], min(fill_at[1] + LOOKS_DOWNSTREAM, stream.length))
    joins = None
    if np.isfinite(course.joins):
        joined_at = stream.length * course.joins / course.line.length
        if joined_at - at < LOOKS_DOWNSTREAM:
            joins = (joined_at, course.joined)
    xy = ground.to_map(surface.points)
    road = Road(
        surface.stations, surface.heights, surface.ground, xy[:, 0], xy[:, 1], surface.deck, surface.edges,
        float(np.interp(0.0, surface.stations, surface.offsets)), surface.noise,
        shapely.transform(own.simplify(0.5 * ground.cell), ground.to_map),
    )  # fmt: skip
    return _Ready(
        crossing, surface, road, crest, crest_xy, slope, source, bed, edges_at, places, made, storage, water,
        joins, shapely.transform(fills.buffer(clear - ground.cell), ground.to_map), findings,
    )  # fmt: skip


def _no_place(ground: LocalGround, stream, start: float, own, clear: float, units: UnitSystem) -> str:
    """Return why no section can stand upstream of a fill that the stream enters at `start`."""
    room = start - clear
    if room <= 0.0:
        return (
            f"the stream line begins {length_text(max(start, 0.0), units)} above the road's fill, and a "
            f"section keeps {length_text(clear, units)} clear of it; draw the stream further up"
        )
    at = np.arange(max(room - FARTHEST, 0.0), room, max(2.0, ground.cell))
    points = shapely.get_coordinates(shapely.line_interpolate_point(stream, at))
    if not np.isfinite(ground.at(points)).any():
        return "the terrain has a gap along the stream there, or ends; fill the gap or add the tile"
    if shapely.contains_xy(own.buffer(clear), *points.T).all():
        return "the stream runs along the road's own fill; correct the road or the stream line"
    return (
        "the stream line does not run in a valley, or a road leaves too little of it; look at the stream "
        "line on the hillshade"
    )


def _read(crossing: Crossing, inputs: CrossingInputs, course):
    """Read the ground about a crossing; return it with the stream in local metres and the crossing on it."""
    terrain = inputs.sections.terrain
    frame = LocalGround(terrain, crossing.x, crossing.y, 0.0)
    stream = shapely.LineString(frame.to_local(shapely.get_coordinates(course.line)))
    at = float(stream.project(shapely.Point(frame.to_local(course.line.interpolate(course.at).coords[0]))))
    upper = max(at - FARTHEST - 0.5 * inputs.slope_window, 0.0)
    lower = min(at + max(FARTHEST + 0.5 * inputs.slope_window, LOOKS_DOWNSTREAM + FARTHEST), stream.length)
    far = shapely.ops.substring(stream, upper, lower)
    near = shapely.ops.substring(
        stream, max(at - FARTHEST - 60.0, 0.0), min(at + FARTHEST + 60.0, stream.length)
    )
    reach = max(inputs.reach, FARTHEST) + 60.0
    boxes = [far.buffer(30.0).bounds, near.buffer(HALF_SECTION).bounds, (-reach, -reach, reach, reach)]
    west, south = np.min([b[:2] for b in boxes], axis=0)
    east, north = np.max([b[2:] for b in boxes], axis=0)
    ground = LocalGround(terrain, crossing.x, crossing.y, (west, south, east, north))
    # what lies beyond was not read
    return ground, shapely.LineString(far.coords), float(at - upper)


def _surface(crossing, inputs: CrossingInputs, ground, stream, bed: Bed, at, downstream, findings):
    """Return the road's surface, those of the roads merged into the crossing, and the surveyed crest, m."""
    reach = max(inputs.reach, ALONG_ROADS)
    options = {"reach": reach, "width": inputs.road_width, "search": inputs.search}
    if crossing.line is None:
        line, place, azimuth = _line_through(ground, downstream, inputs)
        findings.append(
            crossing.finding(
                "road-line-missing",
                f"no road line is near; the road was taken to run at {azimuth:.0f}° from north, along the "
                "highest ground across the stream",
            )
        )
    else:
        line = _clipped(
            shapely.LineString(ground.to_local(shapely.get_coordinates(crossing.line))), reach + 60.0
        )
        place = float(line.project(stream.interpolate(at)))
    surface = find_road_surface(ground, line, place, downstream, **options)
    if surface is None or not np.isfinite(surface.heights).any():
        raise NoAnswerError("there is no ground under the road", where=crossing.crossing_id)
    surveys = [_survey(crossing.attributes, inputs)]
    others = []
    for other, fields in zip(crossing.others, crossing.other_attributes, strict=True):
        line = _clipped(shapely.LineString(ground.to_local(shapely.get_coordinates(other))), reach + 60.0)
        found = find_road_surface(
            ground, line, float(line.project(stream.interpolate(at))), downstream, **options
        )
        if found is not None:
            others.append(found)
            surveys.append(_survey(fields, inputs))
    # of two carriageways the higher one is passed last
    every = [surface, *others]
    crests = [find_crest(s, ground, inputs.reach) for s in every]
    heights = [-np.inf if c is None else c.height for c in crests]
    # a filler for "not known" is no height
    lowest = np.nanmin(bed.heights) if np.isfinite(bed.heights).any() else -np.inf
    heights = [s if s > lowest else h for h, s in zip(heights, surveys, strict=True)]
    best = int(np.argmax(heights))
    return every[best], [s for i, s in enumerate(every) if i != best], surveys[best]


def _survey(fields: Mapping, inputs: CrossingInputs) -> float:
    """Return the surveyed crest in a road's fields, m; NaN where there is none."""
    if inputs.crest_field is None:
        return float("nan")
    return number_in(fields.get(inputs.crest_field)) / inputs.units.per_si("length")


def _fills_beside(crossing, inputs: CrossingInputs, ground: LocalGround) -> list[shapely.Geometry]:
    """Return the fills of other roads near a crossing, local metres."""
    if inputs.roads is None:
        return []
    box = shapely.box(*ground.to_map([[-ALONG_ROADS] * 2, [ALONG_ROADS] * 2]).ravel())
    known = [crossing.line, *crossing.others]
    fills = []
    for k in np.sort(inputs.roads.near(box)):
        line = inputs.roads.lines[k]
        if any(line.equals(other) for other in known if other is not None):
            continue
        local = shapely.LineString(ground.to_local(shapely.get_coordinates(line)))
        for part in shapely.get_parts(shapely.clip_by_rect(local, *[-ALONG_ROADS] * 2, *[ALONG_ROADS] * 2)):
            if part.geom_type != "LineString" or part.length < 4.0 * ground.cell:
                continue
            found = fill_about(ground, part, 0.5 * inputs.road_width + inputs.search)
            if found is not None:
                fills.append(found)
    return fills


def _clipped(line: shapely.LineString, reach: float) -> shapely.LineString:
    """Return the part of a line about the origin, the piece that passes nearest to it."""
    box = shapely.clip_by_rect(line, -2 * reach, -2 * reach, 2 * reach, 2 * reach)
    parts = [p for p in shapely.get_parts(box) if p.geom_type == "LineString" and p.length > 0]
    return min(parts, key=lambda p: p.distance(shapely.Point(0, 0))) if parts else line


def _line_through(ground: LocalGround, downstream, inputs: CrossingInputs):
    """Return a straight line along the ridge that crosses the stream, where no road line is known."""
    half = min(inputs.reach, 80.0)
    step = max(ground.cell, 0.5)
    t = np.arange(-np.floor(half / step), np.floor(half / step) + 1) * step
    # a bridge without its deck leaves nothing at the stream itself
    used = np.abs(t) > 8.0
    base = np.arctan2(-downstream[0], downstream[1])
    best, way = -np.inf, None
    for turn in np.radians(np.arange(-60.0, 61.0, 3.0)):
        angle = base + turn
        course = np.array([np.cos(angle), np.sin(angle)])
        across = np.array([-course[1], course[0]])
        on = ground.at(course * t[used, None])
        beside = [ground.at(course * t[used, None] + across * side) for side in (-12.0, 12.0)]
        rise = on - np.maximum(*beside)
        # a ridge counts by how much of the line it is, not by how high it stands in one place
        score = float(np.nanmean(np.clip(rise, -0.5, 1.0))) - 0.002 * np.degrees(abs(turn))
        if score > best:
            best, way = score, course
    line = shapely.LineString([-way * half, way * half])
    return line, half, float(np.degrees(np.arctan2(way[0], way[1])) % 180.0)


def _meeting(surface: RoadSurface, stream: shapely.LineString, at: float) -> float:
    """Return where the stream passes under the road that was found, metres along the stream."""
    shared = shapely.LineString(surface.points).intersection(stream)
    points = [p for p in shapely.get_parts(shared) if p.geom_type == "Point"]
    places = [float(stream.project(p)) for p in points]
    return min(places, key=lambda a: abs(a - at)) if places else at


def _strip(surface: RoadSurface) -> shapely.Geometry:
    """Return the road without its fill, local metres."""
    flat = [np.full(surface.stations.size, e) for e in surface.edges]
    return replace(surface, toes=(flat[0], flat[1])).footprint


def _leaves(
    stream: shapely.LineString, at: float, area: shapely.Geometry, cell: float
) -> tuple[float, float]:
    """Return where the stream enters and leaves an area about a place, metres along it."""
    inside = stream.intersection(area)
    for part in shapely.get_parts(inside):
        if part.geom_type != "LineString":
            continue
        ends = sorted(stream.project(p) for p in (shapely.get_point(part, 0), shapely.get_point(part, -1)))
        if ends[0] - 2 * cell <= at <= ends[1] + 2 * cell:
            return float(ends[0]), float(ends[1])
    return at, at


def _slope(crossing, inputs: CrossingInputs, bed: Bed, fill_at, findings) -> tuple[float, str]:
    given = _number(crossing, inputs.slope_field)
    if inputs.slope_field is not None and given > 0:
        return given, f"field {inputs.slope_field}"
    if inputs.slope is not None:
        return inputs.slope, "slope.value"
    half = 0.5 * inputs.slope_window
    away = ((bed.at < fill_at[0] - 5.0) & (bed.at >= fill_at[0] - half)) | (
        (bed.at > fill_at[1] + 5.0) & (bed.at <= fill_at[1] + half)
    )
    away &= np.isfinite(bed.heights)
    found = robust_slope(bed.at[away], bed.heights[away]) if away.sum() >= 5 else None
    if found is None:
        raise NoAnswerError("too little ground is known along the stream to take a slope from")
    source = f"ground away from the fill, 90 % interval {found.low:.3g} to {found.high:.3g}"
    if not found.slope > 0:
        raise NoAnswerError(
            f"the ground along the stream does not fall away from the fill: slope {found.slope:.2g}"
        )
    if found.high - found.low > 0.5 * found.slope:
        findings.append(
            crossing.finding(
                "slope-uncertain",
                f"the slope is {found.slope:.2g}, 90 % interval {found.low:.3g} to {found.high:.3g}",
            )
        )
    if found.slope < FLAT:
        findings.append(crossing.finding("slope-flat", f"the slope is {found.slope:.2g}"))
    return found.slope, source


def _surveyed(crossing, inputs, crest: Crest, surface: RoadSurface, survey: float, low: float, findings):
    """Return crest and surface at the surveyed height, and whether there is one that can be used."""
    if not np.isfinite(survey):
        return crest, surface, False
    if survey <= low:
        # a filler for "not known", another datum or another unit
        bed, given = (length_text(v, inputs.units) for v in (low, survey))
        message = (
            f"the surveyed crest, {given}, is no higher than the stream's bed, {bed}; the one in the ground "
            "was used"
        )
        findings.append(crossing.finding("crest-survey-differs", message))
        return crest, surface, False
    off = survey - crest.height
    if abs(off) > SURVEY_DIFFERS:
        text = length_text(abs(off), inputs.units)
        message = (
            f"the surveyed crest is {text} {'above' if off > 0 else 'below'} the one in the ground; the "
            "surveyed one was used"
        )
        findings.append(crossing.finding("crest-survey-differs", message))
    return replace(crest, height=float(survey)), surface.raised(off), True


def _closed_beside(crossing, inputs, ground, stream, bed, fills, fill_at, slope, crest, findings) -> None:
    """Find ground that closes the valley higher than the crest beside a road, where no road is drawn."""
    known = np.isfinite(bed.heights)
    at, heights = bed.at[known], bed.heights[known]
    if not at.size:
        return
    # a steep stream is soon higher than the crest, but its bed never rises on the way down
    steps = max(1, round(CLOSED_WITHIN / (bed.at[1] - bed.at[0])))
    rise = heights - minimum_filter1d(heights, steps, origin=(steps - 1) // 2, mode="nearest")
    level = crest.height + slope * np.maximum(fill_at[0] - at, 0.0)
    higher = (at >= fill_at[0] - CLOSED_WITHIN) & (at <= fill_at[1] + CLOSED_WITHIN)
    higher &= (heights > level + 0.1) & (rise > 0.5)
    at, heights = at[higher], heights[higher]
    points = shapely.get_coordinates(shapely.line_interpolate_point(stream, at))
    undrawn = ~shapely.contains_xy(fills.buffer(3.0 * ground.cell), *points.T)
    if not undrawn.any():
        return
    k = int(np.argmax(np.where(undrawn, heights, -np.inf)))
    up = at[k] < fill_at[0]
    away = fill_at[0] - at[k] if up else at[k] - fill_at[1]
    higher, distance = (length_text(v, inputs.units) for v in (heights[k] - crest.height, max(away, 0.0)))
    message = (
        f"the ground across the stream is {higher} higher than the crest {distance} {'up' if up else 'down'}"
        "stream, where no road is drawn; if the road is there, correct its line or set a larger `search`"
    )
    place = ground.to_map(points[k])
    findings.append(crossing.finding("crest-doubtful", message).at(*place))


def _remarks_on_road(crossing, inputs, ground, surface, crest, crest_xy, low, survey: bool, findings) -> None:
    def text(metres: float) -> str:
        return length_text(metres, inputs.units)

    if surface.deck is not None:
        a, b = surface.deck
        between = (surface.stations > a) & (surface.stations < b)
        depth = surface.heights - surface.ground
        depth = depth[between & np.isfinite(depth)]
        dip = f"{text(float(depth.max()))} deep" if depth.size else "without ground"
        message = (
            f"the ground dips at the stream, {dip} over {text(b - a)} of the road; the road was taken "
            "straight from abutment to abutment"
        )
        findings.append(
            crossing.finding("deck-bridged", message, NOTE if crossing.structure == BRIDGE else "")
        )
    if abs(crest.station) > 30.0:
        here = float(np.interp(0.0, surface.stations, surface.heights))
        side = "right" if crest.station > 0 else "left"
        message = (
            f"water would first pass the road {text(abs(crest.station))} to the {side} of the stream, "
            f"{text(here - crest.height)} lower than at the stream"
        )
        findings.append(crossing.finding("overflow-aside", message).at(*crest_xy))
    if crest.at_end and not survey:
        findings.append(
            crossing.finding(
                "crest-at-end",
                f"the road still falls {text(abs(crest.station))} from the stream, where the search ends",
            ).at(*crest_xy)
        )
    doubts = []
    if surface.noise > 0.1:
        doubts.append(f"the ground across the road is uneven by {text(surface.noise)}")
    near = np.abs(surface.stations) <= 50.0
    if np.abs(surface.offsets[near]).max(initial=0.0) > inputs.search - 1.5 * ground.cell:
        doubts.append(f"it lies at the edge of the search, {text(inputs.search)} from its drawn line")
    if surface.crossfall > 0.1:
        doubts.append(f"it slopes {100 * surface.crossfall:.0f} % across")
    if ground.cell > 0.5 * inputs.road_width:
        doubts.append(f"cells of {text(ground.cell)} are wide for a road of {text(inputs.road_width)}")
    if crest.height - low < 0.3:
        doubts.append(f"it lies only {text(crest.height - low)} above the stream's bed")
    if doubts and not survey:
        findings.append(crossing.finding("crest-doubtful", "; ".join(doubts)).at(*crest_xy))


def _cut_line(crossing, name, place: SectionPlace, ground, inputs, distance, slope, source) -> CutLine:
    xy = ground.to_map(place.points)
    return CutLine(
        f"{crossing.crossing_id} {name}",
        xy[:, 0],
        xy[:, 1],
        crossing.stream,
        float(distance),
        float(np.hypot(*(xy[1] - xy[0]))),
        attributes={"slope": slope, "slope_source": source},
    )


# --- the answer at one crossing ----------------------------------------------------------------------


def _answer(ready: _Ready, made: list[BuiltSection], inputs: CrossingInputs, events) -> CrossingAnswer:
    crossing = ready.crossing
    approach = made[0]
    tailwater = made[1] if len(made) > 1 else None
    findings = [*crossing.findings, *ready.findings]
    for built in (approach, tailwater):
        if built is not None:
            findings += [_ours(crossing, built, f) for f in built.findings]
    if approach.section is None:
        return _failed(crossing, events, "there is no approach section", findings)
    to_road = ready.edges_at[0] - ready.places[0].at
    from_road = float("nan") if tailwater is None else ready.places[1].at - ready.edges_at[1]
    crest, slope, section = ready.crest.height, ready.slope, approach.section
    crest_level = crest + slope * to_road
    crest_discharge = (
        float(section.discharge(crest_level, slope)) if crest_level > section.lowest_ground else 0.0
    )
    if crest_level <= section.lowest_ground:
        findings.append(
            crossing.finding(
                "crest-doubtful", "the crest lies no higher than the bed of the approach section"
            )
        )
    flows = {event: _flow(crossing, event, inputs) for event in events}
    opening = _number(crossing, inputs.opening_field) / inputs.units.per_si("length")
    notes = _Notes(crossing)
    rows: dict[str, dict[str, float]] = {}
    for event, flow in flows.items():
        if flow is None:
            notes.add("flow-missing", "no discharge is given for it", event)
            continue
        rows[event] = _row(ready, approach, tailwater, to_road, from_road, flow, opening, inputs, notes)
    low = ready.bed.near(ready.edges_at[0])
    under = [e for e in rows if rows[e]["stage"] < low]
    if under:
        findings.append(
            crossing.finding(
                "slope-uncertain",
                f"{', '.join(under)}: the stage carried down to the road lies below the stream's bed there, "
                f"{length_text(low, inputs.units)}; the stream is steeper above than at the road",
            )
        )
    largest = max(rows, key=lambda e: rows[e]["discharge"], default=None)
    findings += _wrong_question(ready, inputs, rows.get(largest), flows.get(largest))
    findings += notes.findings()
    over = [e for e in rows if rows[e]["freeboard"] <= 0]
    first = min(over, key=lambda e: rows[e]["discharge"], default="")
    probability = _probability(crest_discharge, [f for f in flows.values() if f is not None])
    doubtful = any(f.severity == DOUBTFUL for f in findings)
    answered = tuple(
        CrossingEvent(e, FAILED)
        if e not in rows
        else CrossingEvent(
            e, DOUBTFUL if doubtful else "ok", _verdict(rows[e]["freeboard"], inputs.freeboard), rows[e]
        )
        for e in events
    )
    return CrossingAnswer(
        crossing, ready.road, crest, ready.crest.station, float(ready.crest_xy[0]), float(ready.crest_xy[1]),
        _light(approach), _light(tailwater), to_road, from_road, slope, ready.slope_source,
        crest_discharge, probability, first, answered, _once(findings), reach=inputs.reach,
    )  # fmt: skip


def _light(built: BuiltSection | None) -> BuiltSection | None:
    """Return a section without what was worked out along the way, as thousands of them are kept."""
    if built is None or built.section is None:
        return built
    return replace(built, section=built.section.reached(()))


def without_workings(answer: CrossingAnswer) -> CrossingAnswer:
    """Return the same answer with sections of its own, so that what is worked out in them goes with them."""
    return replace(answer, approach=_light(answer.approach), tailwater=_light(answer.tailwater))


def _ours(crossing: Crossing, built: BuiltSection, finding: Finding) -> Finding:
    """Return a finding about a section as one about its crossing."""
    name = built.section_id.removeprefix(crossing.crossing_id).strip()
    return replace(
        finding, layer=_LAYER, feature_id=crossing.crossing_id, message=f"{name} section: {finding.message}"
    )


def _flow(crossing: Crossing, event: str, inputs: CrossingInputs) -> Flow | None:
    flow = flow_for(
        inputs.flows, event, "", crossing.stream, crossing.stream_distance, crossing=crossing.crossing_id
    )
    area = _number(crossing, inputs.sections.area_field)
    return flow.over(area) if flow is not None and flow.carried_over and area > 0 else flow


def _verdict(freeboard: float, wanted: float) -> str:
    if freeboard <= 0:
        return OVER
    return WITHIN if freeboard < wanted else NOT_REACHED


def _row(
    ready, approach, tailwater, to_road, from_road, flow: Flow, opening, inputs, notes
) -> dict[str, float]:
    section, slope, crest = approach.section, ready.slope, ready.crest.height
    event, q = flow.event, flow.discharge
    state = section.flow_state(q, slope)
    stage = state.stage - slope * to_road
    near = np.abs(ready.surface.stations) <= inputs.reach
    stations, road = ready.surface.stations[near], ready.surface.heights[near]
    width, depth = wetted_road(stations, road, stage) if stage > crest else (0.0, 0.0)
    weir = road_overflow(stations, road, stage, inputs.weir_coefficient) if stage > crest else 0.0
    row = {
        "discharge": q,
        "stage": stage,
        "freeboard": crest - stage,
        "probability": np.nan if flow.probability is None else flow.probability,
        "road_width_under_water": width,
        "largest_depth_on_road": depth,
        "weir_discharge": weir,
        "tailwater_stage": np.nan,
        "required_opening": np.nan,
        "opening_share": np.nan,
        "opening_most": np.nan,
        "opening_width": opening if opening > 0 else np.nan,
        "weir_coefficient": inputs.weir_coefficient,
        "allowed_stage": crest - inputs.freeboard + slope * to_road,
    }
    if tailwater is not None and tailwater.section is not None:
        row["tailwater_stage"] = float(tailwater.section.normal_stage(q, slope)) + slope * from_road
    allowed = row["allowed_stage"]
    try:
        row["required_opening"] = float(section.required_opening(q, allowed, slope))
        if opening > 0:
            row["opening_share"] = opening / row["required_opening"]
    except NoAnswerError as error:
        row["opening_most"] = float(error.nearest)
        most = error.nearest * inputs.units.per_si("flow")
        level = length_text(allowed - slope * to_road, inputs.units)
        notes.add(
            "no-opening-passes",
            f"at {level} at the road the whole section passes {most:.4g} "
            f"{inputs.units.symbol('flow')} at the most",
            event,
        )
    froude = _froude(section, state)
    if froude > 1.0:
        notes.add("supercritical", f"Froude number {froude:.2f} in the approach section", event)
    ends = [name for name, above in zip(("left", "right"), state.above_ends, strict=True) if above]
    if ends:
        notes.add(
            "above-section-ends",
            f"water stands above the {' and '.join(ends)} end of the approach section",
            event,
        )
    if np.ptp(state.stages) > 0.01:
        notes.add("several-stages", "several stages carry the discharge in the approach section", event)
    if weir > 0 and row["tailwater_stage"] > crest:
        notes.add(
            "weir-drowned",
            "the tailwater stands above the crest too, so that less flows over the road than the weir says",
            event,
        )
    return row


def _froude(section, state) -> float:
    from terrain2q.hydraulics.section import hydraulic_columns

    columns = hydraulic_columns(state.parts, float(np.sqrt(state.slope)), section.system.gravity)
    return float(columns["froude"][0])


def _wrong_question(ready: _Ready, inputs: CrossingInputs, row, flow: Flow | None) -> list[Finding]:
    """Return what is known to make normal depth the wrong question."""
    crossing, found = ready.crossing, []

    def text(metres: float) -> str:
        return length_text(metres, inputs.units)

    low = ready.bed.near(ready.edges_at[0])
    depth = (row["stage"] - low) if row is not None else 1.0
    if ready.water is not None:
        start, end, level = ready.water
        if level > low - 0.1 * depth:
            found.append(
                crossing.finding(
                    "backwater",
                    f"water stands level at {text(level)} over {text(end - start)} from "
                    f"{text(start - ready.edges_at[1])} downstream; the stage at the road is not below what "
                    "that water rises to",
                )
            )
    if ready.joins is not None:
        at, name = ready.joins
        fall = low - ready.bed.near(at)
        if fall < depth:
            found.append(
                crossing.finding(
                    "backwater",
                    f"stream {name} is joined {text(at - ready.edges_at[1])} downstream and "
                    f"{text(max(fall, 0.0))} lower; when it is high, so is the water at the road",
                )
            )
    fill = ready.crest.height - low
    if ready.storage is not None and ready.storage[0] > DEEP_POND * ready.storage[1]:
        volume, _, whole = ready.storage
        factor = inputs.units.per_si("flow")
        unit = inputs.units.symbol("length") + "³"
        room = f"{'' if whole else 'at least '}{volume * factor:,.0f} {unit}"
        message = (
            f"the fill, without a gap, stands {text(fill)} above the bed; below its crest is room for {room}"
        )
        severity = ""
        if flow is not None and flow.volume is not None:
            share = volume / flow.volume
            message += f", {100 * share:.0f} % of the water of {flow.event}"
            severity = NOTE if share < SMALL_STORAGE else ""
        found.append(crossing.finding("culvert-ponds", message, severity))
    tide = clean_text(crossing.attributes.get(inputs.tide_field)) if inputs.tide_field else ""
    if says_so(tide):
        found.append(crossing.finding("tidal", f"field {inputs.tide_field} says {tide}"))
    return found


def _probability(discharge: float, flows: Sequence[Flow]) -> float:
    """Return the exceedance probability of a discharge between events; NaN beyond them.

    The logarithm of discharge goes straight with the normal variate of the probability between two events, as
    flood frequencies are drawn on log-normal paper (common practice).
    """
    known = sorted(
        {(f.discharge, f.probability) for f in flows if f.probability is not None and f.probability < 1}
    )
    if len(known) < 2 or not discharge > 0:
        return float("nan")
    q, p = (np.array(v) for v in zip(*known, strict=True))
    if not q[0] <= discharge <= q[-1] or (np.diff(q) <= 0).any() or (np.diff(p) >= 0).any():
        return float("nan")
    from scipy.stats import norm  # slow to load

    return float(norm.sf(np.interp(np.log(discharge), np.log(q), norm.isf(p))))


class _Notes:
    """Findings about one crossing, one a code, with the events they hold for."""

    def __init__(self, crossing: Crossing) -> None:
        self._crossing = crossing
        self._found: dict[tuple[str, str], list[str]] = {}

    def add(self, code: str, message: str, event: str) -> None:
        self._found.setdefault((code, message), []).append(event)

    def findings(self) -> list[Finding]:
        by_code: dict[str, list[str]] = {}
        for (code, message), events in self._found.items():
            by_code.setdefault(code, []).append(f"{', '.join(events)}: {message}")
        return [self._crossing.finding(code, "; ".join(texts)) for code, texts in by_code.items()]


def answered_sections(
    answers: Sequence[CrossingAnswer], units: UnitSystem, stages: int, top: float | None
) -> list[SectionAnswer]:
    """Return the sections of crossings, in order of rank, each with its rating and its stages.

    Parameters
    ----------
    answers : sequence of CrossingAnswer
    units : UnitSystem
        For messages.
    stages, top : int, float or None
        Of a rating; `top` in m.

    Returns
    -------
    list of SectionAnswer
        Approach and tailwater sections at the discharges of their crossing; the approach section also at
        that which reaches the crest, as the event `AT_CREST`.
    """
    out = []
    for answer in sorted(answers, key=lambda a: a.rank):
        flows = [Flow(e.event, e.values["discharge"]) for e in answer.events if e.values]
        for built in (answer.approach, answer.tailwater):
            if built is None:
                continue
            mine = list(flows)
            if built is answer.approach and answer.crest_discharge > 0:
                mine.append(Flow(AT_CREST, answer.crest_discharge))
            out.append(answer_section(built, mine, [f.event for f in mine], stages, top, units))
    return out


# --- rank --------------------------------------------------------------------------------------------


def ranked(answers: Sequence[CrossingAnswer], rule: Sequence[str] = DEFAULT_RANK) -> list[CrossingAnswer]:
    """Return the same answers with their ranks, 1 for the first to look at.

    Parameters
    ----------
    answers : sequence of CrossingAnswer
    rule : sequence of str
        See :class:`CrossingInputs`. ``probability`` is that of the crest being passed; beyond the events it
        lies above the most frequent or below the rarest one, and without probabilities the discharge at the
        crest over that of the largest event stands for it. ``freeboard`` is that of the largest event. What
        is equal goes by id. Crossings without an answer come last.
    """
    order = sorted(
        range(len(answers)),
        key=lambda i: (
            not any(e.status != FAILED for e in answers[i].events),
            [_rank_key(answers[i], name) for name in rule],
            answers[i].crossing.crossing_id,
        ),
    )
    place = {i: number for number, i in enumerate(order, 1)}
    return [replace(answer, rank=place[i]) for i, answer in enumerate(answers)]


def _rank_key(answer: CrossingAnswer, name: str) -> tuple[float, float]:
    rows = [e.values for e in answer.events if e.values]
    if not rows:
        return (np.inf, 0.0)
    largest = max(rows, key=lambda r: r["discharge"])
    if name == "probability":
        room = answer.crest_discharge / largest["discharge"]
        known = [r["probability"] for r in rows if np.isfinite(r["probability"])]
        if not known:
            return (room, 0.0)
        passed = answer.crest_probability
        if np.isfinite(passed):
            return (-passed, room)
        # beyond the events: more often than the most frequent, or more seldom than the rarest
        return (-1.0, room) if answer.first_event_over and room < 1 else (0.0, room)
    if name == "freeboard":
        return (largest["freeboard"], 0.0)
    sign = 1.0 if name.startswith("-") else -1.0
    value = _number(answer.crossing, name.removeprefix("-"))
    return (sign * value, 0.0) if np.isfinite(value) else (np.inf, 0.0)
