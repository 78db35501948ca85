"""Ratings, and stages at design flows, of built sections."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np

from terrain2q.errors import CATALOGUE, DOUBTFUL, FAILED, NOTE, Finding, Terrain2qError
from terrain2q.flows import AREA_RATIOS, Flow, event_names, flow_for
from terrain2q.ground.streams import length_text
from terrain2q.ground.terrain import Profile
from terrain2q.hydraulics.many import EventSolution, Solution, solve, worth_compiling
from terrain2q.hydraulics.section import CHANNEL, FlowState, Section, hydraulic_columns
from terrain2q.jobs.remarks import Remark, section_remarks, state_remarks
from terrain2q.jobs.sections import BuiltSection
from terrain2q.units import SI, UnitSystem

OK = "ok"

HIGH_VELOCITY = 6.0
"""Mean velocity (m/s) above which a row is doubtful (from memory: floods seldom pass 4 m/s over a reach)."""

HIGH_ALPHA = 2.0
"""Velocity coefficient above which a row is doubtful (Chow 1959, Table 2-1, from memory: at most 2.0)."""

STEEP = 0.04
"""Slope above which normal depth is seldom trusted (Jarrett 1984, upper end of his range; from memory)."""

LEAVES = 0.01
"""Share of the discharge beyond a bank that is worth a finding."""

APART = 0.01
"""Stages (m) nearer to each other than this are one to a reader; noise in the ground makes many of them."""

_LAYER = "design_stages"

SUBAREA_COLUMNS = (
    "subarea", "stage", "flow_area", "wetted_perimeter", "conveyance", "discharge", "mean_velocity", "share",
)  # fmt: skip


@dataclass(frozen=True)
class EventAnswer:
    """One section at one event, in SI.

    Attributes
    ----------
    event : str
    status : str
        ``ok``, ``doubtful`` or ``failed``.
    row : dict of float
        The columns of a rating with `slope`, `critical_stage` and `channel_share`; empty where failed.
    wetted : tuple of (start, end)
        Stations of the water's edges, one pair a path.
    subareas : tuple of dict
        One for each wet subarea of each path, with `SUBAREA_COLUMNS` and the number of its `path`.
    paths : tuple of (start, end, stage)
        Each stretch of water with one level, the channel's first.
    """

    event: str
    status: str
    row: dict[str, float] = field(default_factory=dict)
    wetted: tuple[tuple[float, float], ...] = ()
    subareas: tuple[dict[str, float], ...] = ()
    paths: tuple[tuple[float, float, float], ...] = ()


@dataclass(frozen=True)
class SectionAnswer:
    """A built section with its rating (arrays by column, SI) and its answers by event."""

    built: BuiltSection
    rating: dict[str, np.ndarray]
    events: tuple[EventAnswer, ...]
    findings: tuple[Finding, ...]

    @property
    def section_id(self) -> str:
        """Id of the cut line."""
        return self.built.section_id

    @property
    def status(self) -> str:
        """The section's own status: ``failed`` where it has no section at all."""
        if self.built.section is None:
            return FAILED
        return DOUBTFUL if any(f.severity == DOUBTFUL for f in self.built.findings) else OK


def answer_sections(
    built: Sequence[BuiltSection],
    flows: Sequence[Flow],
    stages: int,
    top: float | None,
    units: UnitSystem,
    progress: Callable | None = None,
    compiled: bool | None = None,
) -> list[SectionAnswer]:
    """Return rating and design stages of every section.

    Parameters
    ----------
    built : sequence of BuiltSection
    flows : sequence of Flow
        In SI.
    stages : int
        Steps of a rating.
    top : float or None
        Height of its last stage above the lowest ground, m.
    units : UnitSystem
        For messages.
    progress : callable, optional
        ``progress(done, total, label)``.
    compiled : bool, optional
        Whether compiled code answers what it can; where there are many sections if left out.

    Returns
    -------
    list of SectionAnswer
        In order; a section without an answer keeps its place.
    """
    events = event_names(flows)
    if compiled is None:
        compiled = worth_compiling(len(built))
    answers = []
    for done, one in enumerate(built, 1):
        answers.append(answer_section(one, flows, events, stages, top, units, compiled=compiled))
        if progress is not None and (done % 200 == 0 or done == len(built)):
            progress(done, len(built), "ratings and stages")
    return answers


def answer_section(
    built: BuiltSection,
    flows: Sequence[Flow],
    events: Sequence[str],
    stages: int,
    top: float | None,
    units: UnitSystem,
    reached: Mapping[str, Sequence[tuple[float, float]]] | None = None,
    compiled: bool = False,
) -> SectionAnswer:
    """Return the rating and the design stages of one section.

    `reached` has, by event, hollows (start, end) that water is known to reach from elsewhere. Where
    `compiled`, compiled code answers what it can (:mod:`terrain2q.hydraulics.many`).
    """
    section = built.section
    failed = tuple(EventAnswer(event, FAILED) for event in events)
    if section is None or not np.isfinite(built.slope):
        return SectionAnswer(built, {}, failed, ())
    notes = Notes(built.section_id, built.profile, units)
    wanted = {event: _flow(flows, event, built) for event in events}
    try:
        solution = _solved(built, wanted, stages, top) if compiled and not reached else None
        rating = section.rating_arrays(built.slope, stages, top) if solution is None else solution.rating
    except Terrain2qError as error:
        notes.add("section-failed", error.what)
        return SectionAnswer(built, {}, failed, notes.findings())
    doubtful = any(f.severity == DOUBTFUL for f in built.findings)
    if built.slope > STEEP:
        notes.add("slope-steep", f"the slope is {built.slope:.3g}")
    for remark in section_remarks(built.specs, section, units):
        notes.remark(remark)
    doubtful = doubtful or notes.doubtful > 0
    answers = []
    for number, event in enumerate(events):
        flow = wanted[event]
        if flow is None:
            notes.add("flow-missing", "no discharge is given for it", event)
            answers.append(EventAnswer(event, FAILED))
            continue
        before = notes.doubtful
        flow = _carried_over(flow, built, notes)
        hollows = (reached or {}).get(event)
        known = section.reached(hollows) if hollows else section
        solved = None if solution is None else solution.events[number]
        answers.append(_answer_event(known, built, flow, doubtful or notes.doubtful > before, notes, solved))
    return SectionAnswer(built, rating, tuple(answers), notes.findings())


def _flow(flows: Sequence[Flow], event: str, built: BuiltSection) -> Flow | None:
    return flow_for(flows, event, built.section_id, built.line.stream, built.line.stream_distance)


def _solved(
    built: BuiltSection, wanted: Mapping[str, Flow | None], stages: int, top: float | None
) -> Solution | None:
    """Return what compiled code answers; an event without a flow keeps its place."""
    silent = Notes(built.section_id, built.profile, SI)
    discharges = [
        _carried_over(flow, built, silent).discharge if flow is not None else 1.0 for flow in wanted.values()
    ]
    return solve(built.section, built.slope, stages, top, discharges)


def _carried_over(flow: Flow, built: BuiltSection, notes: Notes) -> Flow:
    """Return the flow at the section's own drainage area, where both areas are known."""
    area = built.drainage_area
    if not flow.carried_over or area is None:
        return flow
    if not np.isfinite(area):
        notes.add(
            "drainage-area-missing",
            "the discharge was taken as given, as the section has no area",
            flow.event,
        )
        return flow
    ratio = area / flow.area
    if not AREA_RATIOS[0] <= ratio <= AREA_RATIOS[1]:
        notes.add(
            "drainage-area-far",
            f"the discharge was carried over from a drainage area of {flow.area:g} to one of {area:g}, "
            f"{ratio:.2g} times as large",
            flow.event,
        )
    return flow.over(area)


def _answer_event(
    section: Section,
    built: BuiltSection,
    flow: Flow,
    doubtful: bool,
    notes: Notes,
    solved: EventSolution | None = None,
) -> EventAnswer:
    root = np.sqrt(built.slope)
    if solved is None:
        try:
            state = section.flow_state(flow.discharge, built.slope)
            critical = float(section.critical_stage(flow.discharge))
        except Terrain2qError as error:
            notes.add("section-failed", error.what, flow.event)
            return EventAnswer(flow.event, FAILED)
        columns = {
            k: float(v[0]) for k, v in hydraulic_columns(state.parts, root, section.system.gravity).items()
        }
        share = channel_share(section, state)
    else:
        state, columns = solved.state, solved.columns
        critical, share = solved.critical_stage, solved.channel_share
    # the discharge that was asked for, not its image after solving
    columns["discharge"] = flow.discharge
    row = {
        "stage": state.stage,
        "depth": state.stage - section.lowest_ground,
        **columns,
        "slope": built.slope,
        "critical_stage": critical,
        "channel_share": share,
    }
    before = notes.doubtful
    _remark(section, state, row, share, flow.event, notes, solved is not None)
    status = DOUBTFUL if doubtful or notes.doubtful > before or built.slope > STEEP else OK
    return EventAnswer(
        flow.event,
        status,
        row,
        tuple((p.start, p.end) for p in state.paths),
        _subarea_rows(state, root),
        tuple((p.start, p.end, p.stage) for p in state.paths),
    )


def channel_share(section: Section, state: FlowState) -> float:
    """Return the share of the discharge that the channel zone carries; NaN where there is no such zone."""
    mine = [i for i, s in enumerate(section.subareas) if s.zone == CHANNEL]
    if not mine:
        return float("nan")
    carried = sum(float(p.wet.conveyance[0, mine].sum()) for p in state.paths)
    return carried / sum(p.conveyance for p in state.paths)


def _subarea_rows(state: FlowState, root: float) -> tuple[dict[str, float], ...]:
    rows = []
    total = sum(p.conveyance for p in state.paths)
    for number, path in enumerate(state.paths):
        wet = path.wet
        for i in np.flatnonzero(wet.area[0] > 0):
            area, conveyance = float(wet.area[0, i]), float(wet.conveyance[0, i])
            rows.append({
                "subarea": int(i) + 1,
                "stage": path.stage,
                "flow_area": area,
                "wetted_perimeter": float(wet.perimeter[0, i]),
                "conveyance": conveyance,
                "discharge": conveyance * root,
                "mean_velocity": conveyance * root / area,
                "share": conveyance / total,
                "path": number,
            })  # fmt: skip
    return tuple(sorted(rows, key=lambda r: r["subarea"]))


def _remark(
    section: Section, state: FlowState, row: dict, share: float, event: str, notes: Notes, compiled: bool
) -> None:
    """Note what a reviewer must know about one answer."""
    z = section.elevations
    above = [np.nan, np.nan]
    for side, (is_above, height) in enumerate(zip(state.above_ends, (z[0], z[-1]), strict=True)):
        if is_above:
            top = max(p.stage for p in state.paths if (p.at_right_end if side else p.at_left_end))
            above[side] = top - height
    total = sum(p.conveyance for p in state.paths)
    passed = [top for top in section.telling_bank_tops if top < state.stage]
    facts = WaterFacts(
        state.stages,
        (above[0], above[1]),
        row["froude"],
        row["critical_stage"],
        row["mean_velocity"],
        row["alpha"],
        tuple((p.conveyance / total, p.start, p.end, p.stage) for p in state.paths[1:]),
        passed[0] if passed else np.nan,
        1.0 - share,
    )
    tell_water(facts, event, notes)
    for remark in state_remarks(section, state, notes.units, compiled):
        notes.remark(remark, event)


@dataclass(frozen=True)
class WaterFacts:
    """The numbers of one answer about which there may be something to tell, in SI.

    Attributes
    ----------
    stages : sequence of float
        Every stage that carries the discharge; the last is the answer.
    above : (float, float)
        How high the water stands above the left and the right end, NaN where it does not.
    froude, critical_stage, mean_velocity, alpha : float
    behind : sequence of (share, start, end, stage)
        Paths behind banks with their share of the discharge.
    passed : float
        The lowest top of a bank below the stage behind which there is more than a hundredth, NaN where none.
    outside : float
        Share of the discharge outside the channel, NaN where there is no channel zone.
    """

    stages: Sequence[float]
    above: tuple[float, float]
    froude: float
    critical_stage: float
    mean_velocity: float
    alpha: float
    behind: Sequence[tuple[float, float, float, float]]
    passed: float
    outside: float


def tell_water(facts: WaterFacts, event: str, notes: Notes) -> None:
    """Note what a reviewer must know about the water of one answer."""
    text, level = notes.length, notes.level
    stage = facts.stages[-1]
    for height, end in zip(facts.above, ("left", "right"), strict=True):
        if np.isfinite(height):
            notes.add("above-section-ends", f"water stands {text(height)} above the {end} end", event)
    if stage - facts.stages[0] > APART:
        listed = ", ".join(level(s) for s in facts.stages)
        notes.add("several-stages", f"stages {listed} carry the discharge", event)
    if facts.froude > 1.0:
        notes.add(
            "supercritical",
            f"Froude number {facts.froude:.2f}, critical stage {level(facts.critical_stage)}",
            event,
        )
    if facts.mean_velocity > HIGH_VELOCITY:
        notes.add("velocity-high", f"mean velocity {notes.velocity(facts.mean_velocity)}", event)
    if facts.alpha > HIGH_ALPHA:
        notes.add("alpha-high", f"alpha {facts.alpha:.2f}", event)
    for part, start, end, behind in facts.behind:
        if part >= LEAVES:
            notes.add(
                "bank-passed",
                f"{100 * part:.0f} % of the discharge leaves the channel and flows behind a bank "
                f"from station {text(start)} to {text(end)} at stage {level(behind)}, "
                f"{text(stage - behind)} below the channel's",
                event,
            )
    if not facts.behind and facts.passed < stage and facts.outside >= LEAVES:
        notes.add(
            "bank-passed",
            f"water has passed a bank's top at {level(facts.passed)} and stands at one level behind it; "
            f"{100 * facts.outside:.0f} % of the discharge is outside the channel",
            event,
        )


class Notes:
    """Findings about one section, one for each code and text, with the events they hold for."""

    def __init__(self, section_id: str, profile: Profile, units: UnitSystem) -> None:
        self._section_id, self._profile, self.units = section_id, profile, units
        self._found: dict[tuple[str, str], list[str]] = {}
        self._worst: dict[tuple[str, str], tuple[Remark, list[str]]] = {}
        self.doubtful = 0

    def length(self, metres: float) -> str:
        """Return a length in the study's units."""
        return length_text(metres, self.units)

    def level(self, metres: float) -> str:
        """Return an elevation; water is told apart by hundredths."""
        return f"{metres * self.units.per_si('length'):.2f} {self.units.symbol('length')}"

    def velocity(self, value: float) -> str:
        """Return a velocity in the study's units."""
        return f"{value * self.units.per_si('velocity'):.1f} {self.units.symbol('velocity')}"

    def add(self, code: str, message: str, event: str = "") -> None:
        """Note a finding at an event; empty where it holds for the section."""
        self.doubtful += CATALOGUE[code].severity != NOTE
        self._found.setdefault((code, message), []).append(event)

    def remark(self, remark: Remark, event: str = "") -> None:
        """Take up a remark; of those on one place the worst is told, with the events they hold for."""
        self.doubtful += CATALOGUE[remark.code].severity != NOTE
        worst, events = self._worst.get((remark.code, remark.place), (remark, []))
        self._worst[remark.code, remark.place] = (
            max(worst, remark, key=lambda r: r.weight),
            [*events, event],
        )

    def findings(self) -> tuple[Finding, ...]:
        """Return all that was noted, one finding a code."""
        for remark, events in self._worst.values():
            self._found.setdefault((remark.code, remark.message), []).extend(events)
        self._worst.clear()
        profile = self._profile
        low = int(np.argmin(profile.elevations))
        out = []
        by_code: dict[str, list[str]] = {}
        for (code, message), events in self._found.items():
            named = ", ".join(e for e in events if e)
            by_code.setdefault(code, []).append(f"{named}: {message}" if named else message)
        for code, messages in by_code.items():
            out.append(
                Finding(
                    code,
                    "; ".join(messages),
                    _LAYER if code != "section-failed" else "sections",
                    self._section_id,
                    x=float(profile.x[low]),
                    y=float(profile.y[low]),
                )
            )
        return tuple(out)
