"""Cut lines up- and downstream of crossings, clear of the fills of roads.

Each stands at the nearest place that is found for a section of the crossing
(:func:`terrain2q.jobs.crossings.places_beside`). Unlike that section it may bend with its valley; where it
would run onto a fill it moves further away from the road, and where no place near is clear of the fill it
ends there.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import shapely

from terrain2q.errors import Finding
from terrain2q.ground.layout import KeptLine, LaidOutLine, Layout, lay_out_at
from terrain2q.ground.streams import StreamNetwork, length_text
from terrain2q.ground.terrain import Terrain
from terrain2q.jobs.crossings import Beside
from terrain2q.units import SI, UnitSystem

FURTHER, STEPS = 10.0, 5
"""m by which a line moves away from a crossing where it would run onto a fill, and how often it may."""

SHORTEST = 0.05
"""Share of a line that must be left where a fill ends it."""

_APART = 0.01
_LAYER = "cut_lines"


@dataclass
class _Wanted:
    """A line wanted beside a crossing, and how far from its first place it is tried."""

    section_id: str
    distance: float
    away: float
    closed: shapely.Geometry
    steps: int = 0
    settled: bool = False

    @property
    def place(self) -> float:
        return self.distance + self.away * FURTHER * self.steps


def lines_at_crossings(
    places: Sequence[Beside],
    network: StreamNetwork,
    terrain: Terrain,
    *,
    width: float,
    height: float | None = None,
    kept: Sequence[KeptLine] = (),
    units: UnitSystem = SI,
) -> Layout:
    """Lay out a line up- and one downstream of each crossing.

    Parameters
    ----------
    places : sequence of Beside
    network, terrain, width, height, units
        As for :func:`~terrain2q.ground.layout.lay_out`.
    kept : sequence of KeptLine
        Lines that stay as they are. A line with the id of one of them is not laid out.

    Returns
    -------
    Layout
        Ids are those of the crossings with ``approach`` or ``tailwater``. Codes of findings are those of
        :func:`~terrain2q.ground.layout.lay_out` and ``section-cut-by-road``.
    """
    wanted: dict[str, list[_Wanted]] = {}
    ids = {k.section_id for k in kept}
    for place in places:
        for name, distance in place.distances.items():
            section_id = f"{place.crossing.crossing_id} {name}"
            if section_id not in ids:
                away = -1.0 if name == "approach" else 1.0
                one = _Wanted(section_id, distance, away, place.closed)
                wanted.setdefault(place.crossing.stream, []).append(one)
    options = {"width": width, "height": height, "units": units}
    answer = Layout()
    # longer streams first, as they receive the others more often
    for stream in sorted(wanted, key=lambda name: (-_length(network, name), name)):
        there = [KeptLine(n.section_id, n.stream, n.stream_distance, n.geometry) for n in answer.lines]
        layout = _of_stream(network, terrain, stream, wanted[stream], [*kept, *there], options)
        answer.lines.extend(layout.lines)
        answer.findings.extend(layout.findings)
    return answer


def _length(network: StreamNetwork, stream: str) -> float:
    return float(network.lengths[network.chain_stream == stream].sum())


def _of_stream(network, terrain, stream: str, wanted: list[_Wanted], kept, options) -> Layout:
    moved = True
    while moved:
        made, layout = _made(network, terrain, stream, wanted, kept, options)
        moved = False
        for number, one in enumerate(wanted):
            line = made.get(number)
            if one.settled or line is None or not line.geometry.intersects(one.closed):
                continue
            # on another road's fill: beyond it stands another crossing's water
            if one.steps < STEPS and not one.closed.contains(_crossing(line)):
                one.steps += 1
                moved = True
            else:
                moved = moved or one.steps > 0
                one.steps, one.settled = 0, True
    lines, findings = [], []
    names = {line.section_id: wanted[number].section_id for number, line in made.items()}
    for number, line in sorted(made.items(), key=lambda item: item[1].stream_distance):
        one = wanted[number]
        line = replace(line, section_id=one.section_id)
        if not line.geometry.intersects(one.closed):
            lines.append(line)
            continue
        where = _crossing(line)
        short = _ended_at(line, one.closed)
        if short is None:
            message = f"no line was laid out for {one.section_id}: a road's fill is in the way"
            finding = Finding("line-left-out", message, _LAYER, one.section_id)
        else:
            lines.append(short)
            near = length_text(FURTHER * STEPS, options["units"])
            message = (
                f"a road's fill ends line {one.section_id}; no line within {near} further is clear of it"
            )
            finding = Finding("section-cut-by-road", message, _LAYER, one.section_id)
        findings.append(finding.at(where.x, where.y))
    for found in layout.findings:
        name = names.get(found.feature_id)
        if name is not None:
            message = found.message.replace(f"line {found.feature_id} ", f"line {name} ")
            found = replace(found, feature_id=name, message=message)
        findings.append(found)
    return Layout(lines, findings)


def _made(network, terrain, stream, wanted, kept, options) -> tuple[dict[int, LaidOutLine], Layout]:
    """Return lines by the number of what is wanted, and the whole layout."""
    asked: dict[float, int] = {}
    for number, one in enumerate(wanted):
        place = one.place
        # two crossings may ask for lines at one place
        while place in asked:
            place += one.away * _APART
        asked[place] = number
    layout = lay_out_at(network, terrain, stream, list(asked), kept=kept, **options)
    return {asked[line.asked]: line for line in layout.lines}, layout


def _crossing(line: LaidOutLine) -> shapely.Point:
    return shapely.line_interpolate_point(line.geometry, line.crossing)


def _ended_at(line: LaidOutLine, closed) -> LaidOutLine | None:
    """Return the part of a line about its stream that is clear of an area; None where there is hardly any."""
    at = _crossing(line)
    whole = line.geometry
    parts = shapely.get_parts(shapely.difference(whole, closed))
    own = min(parts, key=lambda part: part.distance(at), default=None)
    if own is None or own.length < SHORTEST * whole.length or own.distance(at) > 1e-6 * whole.length:
        return None
    crossing = float(shapely.line_locate_point(own, at))
    if not 0.0 < crossing < own.length:
        return None
    xy = shapely.get_coordinates(own)
    # which of its ends still are those of high ground
    same = np.all(np.isclose(xy[[0, -1]], line.xy[[0, -1]]), axis=1)
    heights = tuple(h if known else float("nan") for h, known in zip(line.heights, same, strict=True))
    return replace(line, xy=xy, crossing=crossing, heights=heights)
