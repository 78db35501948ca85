"""Screening the crossings of a study: its inputs -> crossings -> layer, CSV and pictures."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from contextlib import closing
from dataclasses import dataclass
from pathlib import Path

import geopandas

from terrain2q.errors import Finding, InputError
from terrain2q.flows import Flow, flows_of_nowhere
from terrain2q.ground.layers import columns_of, read_layer
from terrain2q.ground.roads import Crossing, RoadNetwork, crossings_from_points, crossings_from_roads
from terrain2q.ground.streams import StreamNetwork
from terrain2q.hydraulics.weir import COEFFICIENT
from terrain2q.jobs.crossings import (
    FREEBOARD,
    MERGE,
    REACH,
    ROAD_WIDTH,
    SEARCH,
    SLOPE_WINDOW,
    SNAP,
    CrossingAnswer,
    CrossingInputs,
)
from terrain2q.jobs.sections import SectionInputs
from terrain2q.study import Study, nearest


@dataclass(frozen=True)
class Screened:
    """The crossings of a study.

    Attributes
    ----------
    inputs : CrossingInputs
    answers : tuple of CrossingAnswer
    findings : tuple of Finding
        Of the layers and of every crossing.
    """

    inputs: CrossingInputs
    answers: tuple[CrossingAnswer, ...]
    findings: tuple[Finding, ...]

    @property
    def failed(self) -> frozenset[str]:
        """Ids of the crossings without an answer at some event."""
        return frozenset(a.crossing.crossing_id for a in self.answers if a.status == "failed")


def crossing_layers(study: Study, crs) -> tuple[geopandas.GeoDataFrame | None, geopandas.GeoDataFrame | None]:
    """Return the points and the roads of a study in a CRS, checked; None where it has none.

    Raises
    ------
    InputError
        There are no streams (code ``key-missing``), or a layer is wrong.
    """
    table = study.crossings
    if study.streams is None:
        raise InputError(
            "key-missing",
            "crossings need stream lines",
            where="[crossings]",
            fix="add [streams] with path, or take [crossings] away",
        )
    points = roads = None
    if table.path is not None:
        points = read_layer(
            table.path, purpose="crossings", geometry="point", crs=crs, id_field=table.id_field
        )
    if table.roads is not None:
        roads = read_layer(table.roads, purpose="roads", geometry="line", crs=crs)
    known = [name for frame in (points, roads) if frame is not None for name in columns_of(frame)]
    wanted = [("opening_width_field", table.opening_width_field), ("crest_field", table.crest_field),
              ("tide_field", table.tide_field)]  # fmt: skip
    wanted += [
        ("rank", name.removeprefix("-")) for name in table.rank if name not in ("probability", "freeboard")
    ]
    for key_name, name in wanted:
        if name is not None and name not in known:
            near = nearest(name, known) if known else ""
            raise InputError(
                "field-missing",
                f"neither the crossings nor the roads have a column {name!r}",
                where=f"[crossings] {key_name}",
                fix=f"the columns are {', '.join(known)}; the nearest is {near!r}" if near else "",
            )
    return points, roads


def find_crossings(
    study: Study, points, roads, network: StreamNetwork
) -> tuple[list[Crossing], list[Finding]]:
    """Return the crossings of a study's layers, and findings that belong to none of them.

    `roads` may be a layer or what was made of one.
    """
    merge = _or(study.in_si("crossings.merge"), MERGE)
    snap = _or(study.in_si("crossings.snap"), SNAP)
    lines = roads if roads is None or isinstance(roads, RoadNetwork) else RoadNetwork(roads)
    if points is None:
        return crossings_from_roads(lines, network, merge, study.system)
    return crossings_from_points(points, network, lines, merge, snap, study.system), []


def crossing_inputs(
    study: Study,
    sections: SectionInputs,
    streams: geopandas.GeoDataFrame,
    flows: Sequence[Flow] = (),
) -> tuple[CrossingInputs, list[Finding]]:
    """Return a study's crossings and what they are screened with, and findings that belong to none of them.

    Parameters
    ----------
    study : Study
        With [crossings].
    sections : SectionInputs
        What sections are made from.
    streams : geopandas.GeoDataFrame
        In the terrain's CRS, turned downstream.
    flows : sequence of Flow
    """
    crs = sections.terrain.crs
    points, roads = crossing_layers(study, crs)
    network = StreamNetwork(streams, crs, study.system)
    road_lines = None if roads is None else RoadNetwork(roads)
    crossings, findings = find_crossings(study, points, road_lines, network)
    table = study.crossings
    slope = study.slope
    inputs = CrossingInputs(
        crossings,
        network,
        sections,
        flows,
        weir_coefficient=_or(study.in_si("crossings.weir_coefficient"), COEFFICIENT),
        freeboard=_or(study.in_si("crossings.freeboard"), FREEBOARD),
        reach=_or(study.in_si("crossings.reach"), REACH),
        road_width=_or(study.in_si("crossings.road_width"), ROAD_WIDTH),
        search=_or(study.in_si("crossings.search"), SEARCH),
        slope=None if slope is None else slope.value,
        slope_field=None if slope is None else slope.field,
        slope_window=_or(None if slope is None else study.in_si("slope.window"), SLOPE_WINDOW),
        crest_field=table.crest_field,
        opening_field=table.opening_width_field,
        tide_field=table.tide_field,
        roads=road_lines,
        rank=table.rank,
    )
    return inputs, findings


def screen_study(
    study: Study,
    sections: SectionInputs,
    streams: geopandas.GeoDataFrame,
    flows: Sequence[Flow],
    progress: Callable[[int, int, str], None],
    jobs: int = 1,
    scheduler: str | None = None,
) -> Screened:
    """Screen the crossings of a study.

    Parameters
    ----------
    study, sections, streams, flows
        As for :func:`crossing_inputs`.
    progress : callable
        ``progress(done, total, label)``.
    jobs : int
        Processes on this machine.
    scheduler : str, optional
        Address of a Dask scheduler, whose cluster then does the work.
    """
    from terrain2q.batches.crossings import screen_in_batches

    inputs, findings = crossing_inputs(study, sections, streams, flows)
    answers = tuple(screen_in_batches(inputs, jobs, scheduler, progress))
    findings += flows_of_nowhere(flows, crossings=[c.crossing_id for c in inputs.crossings])
    findings = [*findings, *(f for a in answers for f in a.findings)]
    return Screened(inputs, answers, tuple(findings))


def write_crossings(
    screened: Screened,
    layer: geopandas.GeoDataFrame,
    study: Study,
    folder: Path,
    jobs: int = 1,
    scheduler: str | None = None,
) -> list[Path]:
    """Write the crossings' CSV, their sections and their pages into the output folder; return the files."""
    from terrain2q.batches.crossings import SectionRows, rows_in_batches
    from terrain2q.output.crossing_panels import write_crossings_pdf
    from terrain2q.output.crossing_table import write_crossing_sections, write_crossings_csv

    crs = screened.inputs.sections.terrain.crs
    files = [write_crossings_csv(folder, layer)]
    rows = SectionRows(study.system, crs, layer.crs, study.rating.stages, study.in_si("rating.top"))
    with closing(rows_in_batches(screened.answers, rows, jobs, scheduler)) as tables:
        sections = write_crossing_sections(folder, screened.answers, study.system, crs, layer.crs, tables)
    files += [] if sections is None else [sections]
    if study.crossings.panels:
        files.append(
            write_crossings_pdf(
                folder, screened.answers, screened.inputs, study.crossings.panels, study.study.name
            )
        )
    return files


def _or(value: float | None, default: float) -> float:
    return default if value is None else value
