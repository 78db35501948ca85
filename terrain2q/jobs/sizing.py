"""Widths of a bench that pass each flow within an allowed stage, section by section."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from terrain2q.errors import DOUBTFUL, FAILED, Finding, InputError, NoAnswerError
from terrain2q.ground.streams import length_text
from terrain2q.hydraulics.section import CHANNEL, Section
from terrain2q.hydraulics.widths import Bench
from terrain2q.jobs.design_flows import OK, SectionAnswer
from terrain2q.units import UnitSystem

_LAYER = "required_widths"

_NOTHING = 1e-3
"""A width (m) that is none: what passes the flow is the division of the section at the bank."""


@dataclass(frozen=True)
class BenchWish:
    """The bench that is asked for, in SI.

    Attributes
    ----------
    base : float
        Height of its floor above the lowest ground, m.
    n : float
    sides : str
        ``both``, ``left`` or ``right``.
    side_slope : float
        Run over rise.
    event : str or None
        The event to be passed; every one where None.
    stage : float or None
        Height above the lowest ground that the water may reach, m; the lower top of bank where None.
    """

    base: float
    n: float
    sides: str = "both"
    side_slope: float = 0.0
    event: str | None = None
    stage: float | None = None

    @property
    def each_side(self) -> tuple[str, ...]:
        """The sides on which a bench is cut."""
        return ("left", "right") if self.sides == "both" else (self.sides,)


@dataclass(frozen=True)
class SizedEvent:
    """The bench required at one section for one event, in SI.

    Attributes
    ----------
    event : str
    status : str
        ``ok``, ``doubtful`` or ``failed``.
    discharge : float
        To be passed; NaN where no flow is given.
    stage : float
        Allowed elevation of the water surface; NaN where there is none.
    discharge_before : float
        What passes at that stage as the section is.
    bench : Bench or None
        None where no width suffices.
    most : float
        The most that any width passes, where none suffices; NaN otherwise.
    """

    event: str
    status: str
    discharge: float = float("nan")
    stage: float = float("nan")
    discharge_before: float = float("nan")
    bench: Bench | None = None
    most: float = float("nan")


@dataclass(frozen=True)
class SizedSection:
    """A section with the bench required for each event."""

    answer: SectionAnswer
    wish: BenchWish
    events: tuple[SizedEvent, ...]
    findings: tuple[Finding, ...]

    @property
    def section_id(self) -> str:
        """Id of the cut line."""
        return self.answer.section_id

    @property
    def base(self) -> float:
        """Elevation of the bench's floor; NaN where there is no section."""
        section = self.answer.built.section
        return float("nan") if section is None else section.lowest_ground + self.wish.base


def size_sections(
    answers: Sequence[SectionAnswer], wish: BenchWish, units: UnitSystem, progress: Callable | None = None
) -> list[SizedSection]:
    """Return the bench required at every section for each event.

    Parameters
    ----------
    answers : sequence of SectionAnswer
        Sections with their discharges.
    wish : BenchWish
    units : UnitSystem
        For messages.
    progress : callable, optional
        ``progress(done, total, label)``.

    Raises
    ------
    InputError
        No flow has the event asked for (``value-not-allowed``).
    """
    known = list(dict.fromkeys(e.event for a in answers for e in a.events))
    if wish.event is not None and wish.event not in known:
        raise InputError(
            "value-not-allowed",
            f"no flow has the event {wish.event!r}",
            where="[bench] event",
            fix=f"the flows have {', '.join(map(repr, known))}",
        )
    sized = []
    for done, answer in enumerate(answers, 1):
        sized.append(size_section(answer, wish, units))
        if progress is not None and (done % 50 == 0 or done == len(answers)):
            progress(done, len(answers), "widths")
    return sized


def size_section(answer: SectionAnswer, wish: BenchWish, units: UnitSystem) -> SizedSection:
    """Return the bench required at one section for each event."""
    wanted = [e for e in answer.events if wish.event in (None, e.event)]
    section, slope = answer.built.section, answer.built.slope
    if section is None or not np.isfinite(slope):
        # why there is no section is told where it was built
        return SizedSection(answer, wish, tuple(SizedEvent(e.event, FAILED) for e in wanted), ())
    notes = _Notes(answer, units)
    base, stage = section.lowest_ground + wish.base, allowed_stage(section, wish)
    problem = _not_possible(section, base, stage, units)
    if problem:
        notes.add("bench-not-possible", problem)
        failed = (SizedEvent(e.event, FAILED, e.row.get("discharge", np.nan), stage) for e in wanted)
        return SizedSection(answer, wish, tuple(failed), notes.findings())
    before = float(section.discharge(stage, slope))
    doubtful = answer.status == DOUBTFUL
    ends = float(min(section.elevations[0], section.elevations[-1]))
    if stage > ends:
        notes.add(
            "above-section-ends", f"the allowed stage is {length_text(stage - ends, units)} above an end"
        )
        doubtful = True
    events = []
    for event in wanted:
        discharge = event.row.get("discharge", np.nan)
        if not np.isfinite(discharge):
            events.append(SizedEvent(event.event, FAILED, stage=stage, discharge_before=before))
            continue
        try:
            bench = section.required_bench(discharge, stage, slope, base, wish.n, wish.sides, wish.side_slope)
        except NoAnswerError as error:
            notes.not_enough(event.event, discharge, stage, error.nearest)
            events.append(
                SizedEvent(event.event, FAILED, discharge, stage, before, most=float(error.nearest))
            )
            continue
        if bench.at_jump:
            notes.add(
                "width-at-jump",
                f"at a width of {_width_text(bench.width, units)} the discharge jumps "
                f"to {notes.flow(bench.discharge)}",
                event.event,
            )
        status = DOUBTFUL if doubtful else OK
        events.append(SizedEvent(event.event, status, discharge, stage, before, bench))
    return SizedSection(answer, wish, tuple(events), notes.findings())


def _width_text(width: float, units: UnitSystem) -> str:
    return "next to nothing" if width < _NOTHING else length_text(width, units)


def allowed_stage(section: Section, wish: BenchWish) -> float:
    """Return the elevation that the water may reach; NaN where no top of bank is known.

    Parameters
    ----------
    section : Section
        In SI.
    wish : BenchWish
    """
    if wish.stage is not None:
        return section.lowest_ground + wish.stage
    channel = [s for s in section.subareas if s.zone == CHANNEL]
    if not channel:
        return float("nan")
    return min(_top(section, channel[0].start), _top(section, channel[-1].end))


def _top(section: Section, station: float) -> float:
    """Return the height of the ground at a station: the top of a face, where one stands there."""
    here = section.elevations[section.stations == station]
    return float(here.max() if here.size else np.interp(station, section.stations, section.elevations))


def _not_possible(section: Section, base: float, stage: float, units: UnitSystem) -> str:
    if not np.isfinite(stage):
        return "no channel is told apart, so that there is no top of bank to stay below"
    if base < stage:
        return ""
    low = section.lowest_ground
    return (
        f"the bench's base, {length_text(base - low, units)} above the lowest ground, is not below the "
        f"allowed stage, {length_text(stage - low, units)} above it"
    )


class _Notes:
    """Findings about the bench of one section."""

    def __init__(self, answer: SectionAnswer, units: UnitSystem) -> None:
        self._answer, self._units = answer, units
        self._found: dict[str, list[str]] = {}

    def flow(self, discharge: float) -> str:
        value = discharge * self._units.per_si("flow")
        return (
            f"{value:,.0f} {self._units.symbol('flow')}"
            if value >= 1000
            else (f"{value:.4g} {self._units.symbol('flow')}")
        )

    def add(self, code: str, message: str, event: str = "") -> None:
        self._found.setdefault(code, []).append(f"{event}: {message}" if event else message)

    def not_enough(self, event: str, discharge: float, stage: float, most: float) -> None:
        level = f"{stage * self._units.per_si('length'):.2f} {self._units.symbol('length')}"
        self.add(
            "width-not-enough",
            f"{self.flow(discharge)} does not pass at stage {level}; the most is {self.flow(most)}",
            event,
        )

    def findings(self) -> tuple[Finding, ...]:
        built = self._answer.built
        low = int(np.argmin(built.profile.elevations))
        x, y = float(built.profile.x[low]), float(built.profile.y[low])
        return tuple(
            Finding(code, "; ".join(messages), _LAYER, built.section_id, x=x, y=y)
            for code, messages in self._found.items()
        )
