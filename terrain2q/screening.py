"""Screening the crossings of a study: its inputs -> crossings -> layer, CSV and pictures."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from contextlib import closing
from dataclasses import dataclass
from pathlib import Path

import geopandas
import numpy as np
import shapely

from terrain2q.errors import Finding, InputError
from terrain2q.flows import Flow
from terrain2q.ground.layers import clean_texts, columns_of, read_layer
from terrain2q.ground.roads import Crossing, RoadNetwork, crossings_from_points, crossings_from_roads
from terrain2q.ground.streams import StreamNetwork, length_text
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
    field_findings,
    number_in,
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
    wanted = [(f"[crossings] {key_name}", name) for key_name, name in wanted]
    if study.slope is not None and study.cut_lines is None:
        wanted.append(("[slope] field", study.slope.field))
    for where, name in wanted:
        if name is not None and name not in known:
            own = ["probability", "freeboard"] if where.endswith("rank") else []
            near = nearest(name, [*own, *known]) if known else ""
            fix = f"the columns are {', '.join(known)}; the nearest is {near!r}" if near else ""
            raise InputError(
                "field-missing",
                f"neither the crossings nor the roads have a column {name!r}",
                where=where,
                fix=f"probability, freeboard or a column; {fix}" if own and fix else fix,
            )
    _check_rank(table.rank, [frame for frame in (points, roads) if frame is not None])
    return points, roads


def _check_rank(rank: Sequence[str], frames: Sequence[geopandas.GeoDataFrame]) -> None:
    """Raise where a field that decides the rank holds text alone."""
    for name in (n.removeprefix("-") for n in rank if n not in ("probability", "freeboard")):
        texts = [t for f in frames if name in f.columns for t in clean_texts(f[name]) if t]
        if texts and all(np.isnan(number_in(t)) for t in texts):
            raise InputError(
                "value-not-allowed",
                f"column {name!r} holds no number: {', '.join(repr(t) for t in dict.fromkeys(texts[:3]))}",
                where="[crossings] rank",
                fix="name a column with numbers, the larger first; with a minus before it the smaller first",
            )


def _with_field_findings(study: Study, crossings: Sequence[Crossing]) -> list[Crossing]:
    """Return crossings with what is wrong in those of their fields that the study uses."""
    table = study.crossings
    wanted = [
        (table.crest_field, "the surveyed crest", False),
        (table.opening_width_field, "the opening", True),
        (None if study.slope is None else study.slope.field, "the slope", True),
        *(
            (name.removeprefix("-"), "the rank", False)
            for name in table.rank
            if name not in ("probability", "freeboard")
        ),
    ]
    wanted = [w for w in wanted if w[0] is not None]
    return [one.noted(*field_findings(one, wanted)) for one in crossings] if wanted else list(crossings)


def find_crossings(
    study: Study, points, roads, network: StreamNetwork
) -> tuple[list[Crossing], list[Finding]]:
    """Return the crossings of a study's layers, and findings that belong to none of them.

    `roads` may be a layer or what was made of one.
    """
    merge = _or(study.in_si("crossings.merge"), MERGE)
    snap = _or(study.in_si("crossings.snap"), SNAP)
    lines = roads if roads is None or isinstance(roads, RoadNetwork) else RoadNetwork(roads)
    findings: list[Finding] = []
    if points is None:
        crossings, findings = crossings_from_roads(lines, network, merge, study.system)
        if not crossings and not findings:
            findings.append(_none(lines, network, study))
    else:
        crossings = crossings_from_points(points, network, lines, merge, snap, study.system)
    return _with_field_findings(study, crossings), findings


def _none(roads: RoadNetwork, network: StreamNetwork, study: Study) -> Finding:
    """Return the finding that no road meets a stream, with how far apart they are."""
    message = f"none of {len(roads.lines)} road lines crosses any of {len(network)} stream lines"
    if len(roads.lines) and len(network):
        pairs, _ = network.tree.query_nearest(roads.lines, all_matches=False, return_distance=True)
        ways = shapely.get_coordinates(
            shapely.shortest_line(roads.lines[pairs[0]], network.pieces[pairs[1]])
        ).reshape(-1, 2, 2)
        gaps = network.ground.inverse(*ways[:, 0].T, *ways[:, 1].T)[0]
        k = int(np.argmin(gaps))
        if gaps[k] > 0:
            message += f"; the nearest lie {length_text(float(gaps[k]), study.system)} apart"
        return Finding("crossings-none", message, "crossings").at(*ways[k, 0])
    return Finding("crossings-none", message, "crossings")


def flow_findings(study: Study, flows: Sequence[Flow], crossings: Sequence[Crossing]) -> list[Finding]:
    """Return what is wrong between the flows of a study and its crossings; nothing without [crossings]."""
    if study.crossings is None:
        return []
    if not flows:
        message = "the study has no flows, so that no crossing has an answer; add [flows] with path or events"
        return [Finding("flow-missing", message, "crossings")]
    known = [one.crossing_id for one in crossings]
    found = []
    for name in dict.fromkeys(f.crossing for f in flows if f.crossing):
        if name not in known:
            near = f"; the nearest is {nearest(name, known)!r}" if known else ""
            message = f"the flows name crossing {name!r}, which is not among the {len(known)} crossings{near}"
            found.append(Finding("crossing-unknown", message, "crossings", name))
    return found


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
    findings = [*findings, *flow_findings(study, flows, inputs.crossings)]
    findings += [f for a in answers for f in a.findings]
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
