"""Design flows: reading them, and which of them applies to a section."""

from __future__ import annotations

import csv
import difflib
import math
from collections.abc import Collection, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING

from terrain2q.errors import Finding, InputError, raise_together

if TYPE_CHECKING:
    from terrain2q.study import Study

NEEDED = ("event", "discharge")
COLUMNS = (*NEEDED, "probability", "stream", "section", "distance", "area", "crossing", "volume")
"""The columns of a table of flows."""

AREA_RATIOS = (0.5, 1.5)
"""Ratios of drainage areas within which a discharge is usually carried over (common practice)."""


@dataclass(frozen=True)
class Flow:
    """The discharge of an event, for all sections or for some.

    Attributes
    ----------
    event : str
        The event's name.
    discharge : float
        m³/s.
    probability : float or None
        Annual exceedance probability, where it is given.
    stream, section : str
        The stream or the section it applies to; empty for all.
    distance : float or None
        Stream distance (m) at which it takes effect, downstream of there; None for the whole stream.
    area : float or None
        Drainage area of the place the discharge holds for, in the unit of the sections' areas; None where
        it is not given.
    exponent : float or None
        With which the discharge goes with drainage area; None where it is not carried over.
    crossing : str
        The crossing it applies to; empty for all.
    volume : float or None
        Water of the whole event, m³, against which the room behind a road's fill is weighed.
    """

    event: str
    discharge: float
    probability: float | None = None
    stream: str = ""
    section: str = ""
    distance: float | None = None
    area: float | None = None
    exponent: float | None = None
    crossing: str = ""
    volume: float | None = None

    @property
    def carried_over(self) -> bool:
        """Whether the discharge is to be carried over to a section's own drainage area."""
        return self.area is not None and self.exponent is not None

    def over(self, area: float) -> Flow:
        """Return the flow carried over to another drainage area: discharge · (area / own area)^exponent.

        Parameters
        ----------
        area : float
            In the unit of :attr:`area`.

        Examples
        --------
        >>> Flow("10-year", 100.0, area=20.0, exponent=0.5).over(5.0).discharge
        50.0
        """
        return replace(self, discharge=self.discharge * (area / self.area) ** self.exponent, area=area)


def read_flows(study: Study) -> list[Flow]:
    """Return a study's design flows in SI, in the order given; empty where it has none.

    Raises
    ------
    InputError
        The table is wrong, with file and line; :class:`~terrain2q.errors.InputErrors` where there are
        several problems. Codes: ``file-unreadable``, ``layer-empty``, ``field-missing``,
        ``key-unknown``, ``key-missing``, ``key-conflict``, ``value-not-allowed``,
        ``number-not-positive``, ``id-duplicate``.
    """
    if study.flows is None:
        return []
    flow_factor = 1.0 / study.system.per_si("flow")
    if study.flows.path is not None:
        flows = _read_csv(study.flows.path, flow_factor, 1.0 / study.system.per_si("length"))
        if study.flows.area_field is None:
            return flows
        if all(flow.area is None for flow in flows):
            raise InputError(
                "field-missing",
                "flows.area_field is given, and the table of flows has no areas",
                where=str(study.flows.path),
                fix="add a column area with the drainage area each discharge holds for",
            )
        return [replace(flow, exponent=study.flows.exponent) for flow in flows]
    events = study.flows.events or {}
    return [Flow(event, discharge * flow_factor) for event, discharge in events.items()]


def event_names(flows: Sequence[Flow]) -> list[str]:
    """Return the events in the order first met.

    Examples
    --------
    >>> event_names([Flow("2-year", 1.0), Flow("10-year", 2.0), Flow("2-year", 1.5, stream="north")])
    ['2-year', '10-year']
    """
    return list(dict.fromkeys(flow.event for flow in flows))


def flow_for(
    flows: Sequence[Flow],
    event: str,
    section_id: str,
    stream: str = "",
    stream_distance: float = math.nan,
    crossing: str = "",
) -> Flow | None:
    """Return the flow of an event at a section or crossing: that of the most specific row.

    The section's (or crossing's) own row goes first; then the row of its stream with the greatest distance
    at or upstream of it; then the row of its stream without a distance; then the row for all.

    Parameters
    ----------
    flows : sequence of Flow
        All design flows.
    event, section_id : str
        The event and the section.
    stream : str
        The section's stream, empty where it has none.
    stream_distance : float
        Distance of the section along its stream, m, downstream positive; NaN where it has none.
    crossing : str
        The crossing that is asked about, empty for a section.

    Returns
    -------
    Flow or None
        None where no row applies.

    Examples
    --------
    >>> flows = [Flow("a", 1.0), Flow("a", 2.0, stream="n"), Flow("a", 3.0, stream="n", distance=100.0)]
    >>> [flow_for(flows, "a", "s", "n", d).discharge for d in (99.0, 100.0)]
    [2.0, 3.0]
    """
    rank_best: tuple[int, float] = (-1, 0.0)
    best = None
    for flow in flows:
        if flow.event != event or (flow.stream and flow.stream != stream):
            continue
        if flow.section or flow.crossing:
            if (flow.section and flow.section != section_id) or (flow.crossing and flow.crossing != crossing):
                continue
            rank = (3, float(bool(flow.stream)))
        elif flow.distance is not None:
            if not flow.distance <= stream_distance:
                continue
            rank = (2, flow.distance)
        else:
            rank = (1 if flow.stream else 0, 0.0)
        if rank > rank_best:
            rank_best, best = rank, flow
    return best


def flows_of_nowhere(
    flows: Sequence[Flow],
    sections: Collection[str] | None = None,
    streams: Collection[str] | None = None,
) -> list[Finding]:
    """Return a finding for each kind of place that rows of the flows name and the study does not have.

    Parameters
    ----------
    flows : sequence of Flow
    sections, streams : collection of str, optional
        The ids there are; None where rows for such places are none of this study's business.

    Examples
    --------
    >>> [f.message for f in flows_of_nowhere([Flow("a", 1.0, section="A1")], ["A-1", "B-1"])]
    ['1 row is for a section that is not there: "A1" (the nearest is "A-1")']
    """
    found = []
    for kind, known in (("section", sections), ("stream", streams)):
        if known is None:
            continue
        ids = dict.fromkeys(known)
        lost = [name for flow in flows if (name := getattr(flow, kind)) and name not in ids]
        if not lost:
            continue
        names = list(dict.fromkeys(lost))
        shown = []
        for name in names[:_SHOWN]:
            near = difflib.get_close_matches(name, ids, n=1, cutoff=0.0)
            shown.append(f'"{name}" (the nearest is "{near[0]}")' if near else f'"{name}"')
        more = f" and {len(names) - _SHOWN} more" if len(names) > _SHOWN else ""
        rows = "1 row is" if len(lost) == 1 else f"{len(lost)} rows are"
        message = f"{rows} for a {kind} that is not there: {', '.join(shown)}{more}"
        found.append(Finding("flow-place-unknown", message, "flows"))
    return found


_SHOWN = 5
"""Names shown in one finding."""


def _read_csv(path: Path, flow_factor: float, length_factor: float) -> list[Flow]:
    try:
        with path.open(newline="", encoding="utf-8-sig") as file:
            reader = csv.reader(file)
            rows = [
                (reader.line_num, [cell.strip() for cell in row])
                for row in reader
                if any(c.strip() for c in row)
            ]
    except (OSError, UnicodeDecodeError, csv.Error) as error:
        fix = "save the table in UTF-8" if isinstance(error, UnicodeDecodeError) else ""
        what = f"the flows cannot be read: {error}"
        raise InputError("file-unreadable", what, where=str(path), fix=fix) from None
    if not rows:
        raise InputError("layer-empty", "the table of flows is empty", where=str(path), fix=_HEADER_FIX)
    header_line, header = rows[0]
    header = [name.lower() for name in header]
    _check_header(header, f"{path}, line {header_line}")

    flows: list[Flow] = []
    problems: list[InputError] = []
    first_line: dict[tuple[object, ...], int] = {}
    for line, cells in rows[1:]:
        where = f"{path}, line {line}"
        try:
            flow = _read_row(header, cells, where, flow_factor, length_factor)
        except InputError as problem:
            problems.append(problem)
            continue
        same = (flow.event, flow.stream, flow.section, flow.distance, flow.crossing)
        if same in first_line:
            what = f'event "{flow.event}" is given twice for the same place, first in line {first_line[same]}'
            problems.append(InputError("id-duplicate", what, where=where, fix="keep one of the two lines"))
            continue
        first_line[same] = line
        flows.append(flow)
    problems += _probabilities_differ(flows, str(path))
    raise_together(problems)
    if not flows:
        raise InputError("layer-empty", "the table of flows has no rows", where=str(path), fix=_HEADER_FIX)
    return flows


_HEADER_FIX = "begin with the line event,discharge and add a line for each event"


def _check_header(header: list[str], where: str) -> None:
    problems = []
    for name in header:
        if name not in COLUMNS:
            known = f"columns are {', '.join(COLUMNS)}"
            # processes that know flows as they are read need no study file
            from terrain2q.study import nearest

            what = f'unknown column "{name}"; the nearest known is {nearest(name, COLUMNS)}'
            if ";" in name:
                known = f"separate the columns by commas; {known}"
            problems.append(InputError("key-unknown", what, where=where, fix=known))
        elif header.count(name) > 1:
            problems.append(InputError("key-conflict", f'two columns are called "{name}"', where=where))
            break
    if not problems:
        for name in NEEDED:
            if name not in header:
                what = f'no column "{name}"; there are {", ".join(header)}'
                problems.append(InputError("field-missing", what, where=where, fix=_HEADER_FIX))
    raise_together(problems)


def _read_row(
    header: list[str], cells: list[str], where: str, flow_factor: float, length_factor: float
) -> Flow:
    if len(cells) > len(header) and any(cells[len(header) :]):
        raise InputError(
            "value-not-allowed",
            f"{len(cells)} values under {len(header)} columns",
            where=where,
            fix='write numbers without thousands separators, and text with a comma in "quotes"',
        )
    row = dict(zip(header, cells, strict=False))
    event, section, stream = row.get("event", ""), row.get("section", ""), row.get("stream", "")
    if not event:
        raise InputError("value-not-allowed", "the event has no name", where=where, fix="name the event")
    discharge = _number(row.get("discharge", ""), "discharge", where)
    if discharge <= 0.0:
        what = f'discharge of "{event}" is {row["discharge"]}'
        raise InputError("number-not-positive", what, where=where)
    probability = distance = None
    if text := row.get("probability", ""):
        probability = _number(text, "probability", where)
        if not 0.0 < probability <= 1.0:
            raise InputError(
                "value-not-allowed",
                f"probability is {text}; needed is the annual exceedance probability, above 0 and at most 1",
                where=where,
                fix="write 0.01 for 1 % in a year",
            )
    if text := row.get("distance", ""):
        distance = _number(text, "distance", where) * length_factor
        if distance < 0.0:
            what = f"distance is {text}; it is measured from the stream's upper end"
            raise InputError("value-not-allowed", what, where=where, fix="give a distance of 0 or more")
        if not stream:
            raise InputError("key-missing", "a distance without a stream", where=where, fix="name the stream")
        if section or row.get("crossing"):
            own = "section" if section else "crossing"
            what = f"a distance and a {own} are both given"
            raise InputError("key-conflict", what, where=where, fix=f"keep the {own} or the distance")
    area = None
    if text := row.get("area", ""):
        area = _number(text, "area", where)
        if area <= 0.0:
            raise InputError("number-not-positive", f'area of "{event}" is {text}', where=where)
    volume = None
    if text := row.get("volume", ""):
        volume = _number(text, "volume", where) * flow_factor
        if volume <= 0.0:
            raise InputError("number-not-positive", f'volume of "{event}" is {text}', where=where)
    if section and row.get("crossing"):
        what = "a section and a crossing are both given"
        raise InputError("key-conflict", what, where=where, fix="give each its own row")
    return Flow(
        event, discharge * flow_factor, probability, stream, section, distance, area,
        crossing=row.get("crossing", ""), volume=volume,
    )  # fmt: skip


def _number(text: str, name: str, where: str) -> float:
    try:
        number = float(text)
    except ValueError:
        number = math.nan
    if not math.isfinite(number):
        shown = f'"{text}"' if text else "empty"
        raise InputError("value-not-allowed", f"{name} is {shown}; needed is a number", where=where)
    return number


def _probabilities_differ(flows: list[Flow], where: str) -> list[InputError]:
    given: dict[str, set[float]] = {}
    for flow in flows:
        if flow.probability is not None:
            given.setdefault(flow.event, set()).add(flow.probability)
    return [
        InputError(
            "key-conflict",
            f'the event "{event}" has the probabilities {", ".join(map(str, sorted(several)))}',
            where=where,
            fix="give one probability for an event",
        )
        for event, several in given.items()
        if len(several) > 1
    ]
