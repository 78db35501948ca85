"""A study from its inputs to its results: reading, the jobs, the layers, the files."""

from __future__ import annotations

import json
import os
import time
from collections import Counter
from collections.abc import Callable, Iterable, Mapping, Sequence
from contextlib import ExitStack, closing, suppress
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, NamedTuple

import geopandas
import numpy as np
import pandas as pd
import pyarrow as pa
import pyogrio
import pyproj
from pyproj.exceptions import CRSError

from terrain2q.batches.engines import Crew
from terrain2q.batches.kept import KeptParts, study_hash
from terrain2q.batches.run import answer_lines, in_order
from terrain2q.batches.work import BATCH, LAYER_NAMES, Part, Work, cores, is_failed, plan_batches
from terrain2q.columns import CAUTION
from terrain2q.errors import FAILED, SEVERITIES, Finding, InputError, worst_first
from terrain2q.flows import Flow, event_names, flow_for, flows_of_nowhere, read_flows
from terrain2q.ground.cover import ChannelPolygons, Cover, RoughnessTable, UniformCover
from terrain2q.ground.cut_lines import CutLine, orient_cut_lines
from terrain2q.ground.layers import read_layer, require_field, split_spec, texts_in
from terrain2q.ground.low_line import LowLines, streams_near, turn_streams
from terrain2q.ground.streams import StreamNetwork
from terrain2q.ground.terrain import Terrain
from terrain2q.hydraulics.many import worth_compiling
from terrain2q.hydraulics.roughness import roughness_from_parts
from terrain2q.jobs.design_flows import SectionAnswer, answer_section
from terrain2q.jobs.sections import SectionInputs, build_sections
from terrain2q.jobs.slopes import FieldSlopes, OneSlope, Slopes, StreamSlopes
from terrain2q.jobs.submerged import Submerged
from terrain2q.output.arrow_tables import table_of_frame
from terrain2q.output.folder import OutputFolder, StoredLayers
from terrain2q.output.geopackage import RESULT_NAME, GeoPackageWriter, check_output, write_geopackage
from terrain2q.output.layers import findings_layer, make_layers
from terrain2q.output.pages import write_pages
from terrain2q.output.run_record import (
    files_of_record,
    hashed_ahead,
    note_pages,
    remove_earlier,
    run_record,
    write_run_record,
)
from terrain2q.output.whole_file import whole_folder
from terrain2q.study import Study, load_study
from terrain2q.units import UnitSystem

# What only some runs need is loaded where it is needed: a large study should begin at once.
if TYPE_CHECKING:
    from terrain2q.jobs.extent import FloodMap
    from terrain2q.jobs.fitting import Fit
    from terrain2q.jobs.sizing import SizedSection
    from terrain2q.output.report import Explorer
    from terrain2q.screening import Screened

Progress = Callable[[int, int, str], None]

RECORD_NAME = "run.json"

_SHOWN = 8
"""Sections shown in the table at the end of a run, the doubtful ones apart."""


@dataclass(frozen=True)
class Results:
    """What a study gives: one table a layer, and the findings.

    Attributes
    ----------
    layers : mapping of str to DataFrame or GeoDataFrame
        By name of the layer; each is an attribute too, such as ``results.design_stages``. Numbers are in
        the study's units.
    findings_list : tuple of Finding
    units : UnitSystem
    crs : pyproj.CRS
        Of every geometry.
    folder : pathlib.Path or None
        Where the files are.
    files : tuple of pathlib.Path
    seconds : float
        How long it took.
    name : str
        Of the study.
    left_files : tuple of pathlib.Path
        Files of an earlier run that this one did not write, but that have changed since; they were left.
    """

    layers: Mapping[str, pd.DataFrame]
    findings_list: tuple[Finding, ...]
    units: UnitSystem
    crs: pyproj.CRS
    folder: Path | None = None
    files: tuple[Path, ...] = ()
    seconds: float = 0.0
    name: str = ""
    failed: frozenset[str] = field(default=frozenset())
    left_files: tuple[Path, ...] = ()

    def __getattr__(self, name: str) -> pd.DataFrame:
        layers = self.__dict__.get("layers", {})
        if name in layers:
            return layers[name]
        raise AttributeError(f"Results have no layer {name!r}; there are {', '.join(layers)}")

    def __dir__(self) -> list[str]:
        return [*super().__dir__(), *self.layers]

    def __repr__(self) -> str:
        counts = ", ".join(f"{len(table)} {name}" for name, table in self.layers.items())
        return f"<Results {self.name!r}: {counts}>"

    @property
    def failed_sections(self) -> int:
        """How many sections have no answer at all, or none at some event."""
        return len(self.failed)

    @property
    def answered_sections(self) -> int:
        """How many sections have a rating, and an answer at one event at least where there are events."""
        stages = self.layers["design_stages"]
        if not len(stages):
            return self.layers["ratings"]["section_id"].nunique()
        return stages.loc[stages["status"] != FAILED, "section_id"].nunique()

    @property
    def failed_widths(self) -> int:
        """How many sections have no bench that passes some event, where benches are asked for."""
        widths = self.layers.get("required_widths")
        if widths is None:
            return 0
        return widths.loc[widths["status"] == FAILED, "section_id"].nunique()

    @property
    def failed_crossings(self) -> int:
        """How many crossings have no answer at all, or none at some event."""
        crossings = self.layers.get("crossings")
        if crossings is None:
            return 0
        return crossings.loc[crossings["status"] == FAILED, "crossing_id"].nunique()

    @property
    def answered_crossings(self) -> int:
        """How many crossings have an answer at one event at least."""
        crossings = self.layers.get("crossings")
        if crossings is None:
            return 0
        return crossings.loc[crossings["status"] != FAILED, "crossing_id"].nunique()

    def finding_counts(self) -> dict[str, int]:
        """Return how many findings there are of each severity."""
        found = Counter(f.severity for f in self.findings_list)
        return {severity: found[severity] for severity in SEVERITIES}

    def summary(self) -> dict:
        """Return what a run prints, as plain values for JSON."""
        stages = self.layers["design_stages"]
        shown = ["section_id", "event", "discharge", "stage", "depth", "status"]
        return {
            "study": self.name,
            "units": self.units.name,
            "crs": self.crs.to_string(),
            "sections": len(self.layers["sections"]),
            "failed_sections": self.failed_sections,
            "rows": {name: len(table) for name, table in self.layers.items()},
            "design_stages": pd.DataFrame(stages[shown]).to_dict("records"),
            **self._crossing_summary(),
            "findings": self.finding_counts(),
            "worst_findings": [
                {"severity": f.severity, "code": f.code, "feature_id": f.feature_id, "message": f.message}
                for f in self.worst_findings(3)
            ],
            "folder": None if self.folder is None else str(self.folder),
            "files": [str(f) for f in self.files],
            "left_files": [str(f) for f in self.left_files],
            "seconds": round(self.seconds, 2),
            "caution": CAUTION,
        }

    def _crossing_summary(self) -> dict:
        if "crossings" not in self.layers:
            return {}
        table = self.layers["crossings"]
        shown = [
            "crossing_id",
            "event",
            "discharge",
            "stage",
            "crest",
            "freeboard",
            "verdict",
            "rank",
            "status",
        ]
        return {
            "failed_crossings": self.failed_crossings,
            "crossings": pd.DataFrame(table[shown]).to_dict("records"),
        }

    def worst_findings(self, count: int) -> list[Finding]:
        """Return findings in order of severity, at first one for each feature."""
        return worst_first(self.findings_list)[:count]

    def explore(self, height: int = 760) -> Explorer:
        """Return the map of the report, which shows itself in a notebook.

        Parameters
        ----------
        height : int
            Of its place in the notebook, in pixels.
        """
        from terrain2q.output.report import Explorer

        record = {}
        if self.folder is not None and (self.folder / RECORD_NAME).is_file():
            record = json.loads((self.folder / RECORD_NAME).read_text(encoding="utf-8"))
        return Explorer(OutputFolder(self.layers, self.units, self.crs, record, self.folder), height)

    def _repr_html_(self) -> str:
        from terrain2q.output.notebook import results_html

        return results_html(self)

    def summary_text(self) -> str:
        """Return what a run prints: stages by event, findings, files, time and the caution."""
        sections = len(self.layers["sections"])
        parts = [f"{self.name or 'Study'}: {sections} sections, {self.failed_sections} without a full answer"]
        table = self._stage_table()
        if table:
            parts += ["", table]
        if "crossings" in self.layers:
            parts += ["", *self._crossing_lines()]
        counts = self.finding_counts()
        parts += ["", "Findings: " + ", ".join(f"{n} {severity}" for severity, n in counts.items())]
        parts += [
            f"  {f.severity}: {' '.join(filter(None, (f.layer, f.feature_id)))}: {f.message}  [{f.code}]"
            for f in self.worst_findings(3)
        ]
        if self.folder is not None:
            parts += ["", f"Written to {self.folder}: {', '.join(f.name for f in self.files)}"]
        if self.left_files:
            names = ", ".join(f.name for f in self.left_files)
            parts += [f"Not of this run, but changed since an earlier one and so not removed: {names}"]
        parts += [f"Took {self.seconds:.1f} s.", "", CAUTION]
        return "\n".join(parts)

    def _crossing_lines(self) -> list[str]:
        """Return the first crossings by rank, a line each."""
        table = self.layers["crossings"]
        count = table["crossing_id"].nunique()
        unit, flow = self.units.symbol("length"), self.units.symbol("flow")
        head = f"{count} crossings, {self.failed_crossings} without a full answer"
        lines = [f"{head}; the first by rank:" if count else head]
        for _, rows in list(table.groupby("rank"))[:_SHOWN]:
            one = rows.iloc[0]
            name = f"{one.crossing_id}, {one.road}" if one.road not in one.crossing_id else one.crossing_id
            if not np.isfinite(one.crest):
                lines.append(f"  {one['rank']}. {name}: no answer")
                continue
            verdicts = ", ".join(f"{r.event} {r.verdict or 'no answer'}" for r in rows.itertuples())
            crest = f"crest {one.crest:.2f} {unit} at {one.crest_discharge:,.0f} {flow}"
            lines.append(f"  {one['rank']}. {name}: {crest}; {verdicts}")
        if count > _SHOWN:
            lines.append(f"  ... and {count - _SHOWN} more in crossings")
        return lines

    def _stage_table(self) -> str:
        stages = self.layers["design_stages"]
        if not len(stages):
            return ""
        unit = self.units.symbol("length")
        events = list(dict.fromkeys(stages["event"]))
        ids = list(dict.fromkeys(stages["section_id"]))
        status = stages.groupby("section_id", sort=False)["status"].agg(set)
        first = ids[:_SHOWN]
        doubtful = [i for i in ids[_SHOWN:] if status[i] != {"ok"}]
        shown = first + doubtful[:_SHOWN]
        rows = {(r.section_id, r.event): r for r in stages.itertuples()}
        head = ["section", *(f"{event} [{unit}]" for event in events), "status"]
        lines = []
        for name in shown:
            cells = []
            for event in events:
                row = rows.get((name, event))
                known = row is not None and row.status != FAILED
                cells.append(f"{row.stage:.2f} ({row.depth:.2f})" if known else "-")
            worst = next((s for s in ("failed", "doubtful", "ok") if s in status[name]), "")
            lines.append([name, *cells, worst])
        widths = [max(len(str(line[i])) for line in [head, *lines]) for i in range(len(head))]
        text = ["Stage (depth) by event:"]
        for line in [head, *lines]:
            first_cell, *rest = (str(c) for c in line)
            text.append(
                "  " + first_cell.ljust(widths[0]) + "  "
                + "  ".join(c.rjust(w) for c, w in zip(rest, widths[1:], strict=True))
            )  # fmt: skip
        left = len(ids) - len(shown)
        if left:
            text.append(f"  ... and {left} more in design_stages")
        return "\n".join(text)


@dataclass(frozen=True)
class _Inputs:
    """A study's inputs, read and checked."""

    lines: list[CutLine]
    sections: SectionInputs
    crs: pyproj.CRS
    findings: list[Finding]
    streams: geopandas.GeoDataFrame | None


def _silent(done: int, total: int, label: str) -> None:
    pass


def _output_crs(study: Study, terrain: Terrain) -> pyproj.CRS:
    wanted = study.study.crs
    if not wanted:
        return terrain.crs.to_2d() if len(terrain.crs.axis_info) > 2 else terrain.crs
    try:
        crs = pyproj.CRS.from_user_input(wanted)
    except CRSError as error:
        raise InputError("crs-unknown", f"{wanted!r} is not a CRS: {error}", where="[study] crs") from None
    if not crs.is_projected:
        raise InputError(
            "value-not-allowed",
            f"{wanted!r} is not a projected CRS",
            where="[study] crs",
            fix="name a projected CRS such as EPSG:26915, or leave the key out",
        )
    return crs


def _read_inputs(study: Study) -> _Inputs:
    dem = study.terrain.dem
    terrain = Terrain(
        list(dem) if len(dem) > 1 else dem[0],
        elevation_unit=study.terrain.elevation_unit,
        sampling=study.terrain.sampling,
    )
    out_crs = _output_crs(study, terrain)
    findings = list(terrain.findings)
    cut_lines = None
    if study.cut_lines is not None and study.cut_lines.path is not None:
        cut_lines = read_layer(
            study.cut_lines.path,
            purpose="cut lines",
            geometry="line",
            crs=terrain.crs,
            id_field=study.cut_lines.id_field,
        )
    streams = None
    if study.streams is not None:
        streams = read_layer(
            study.streams.path,
            purpose="streams",
            geometry="line",
            crs=terrain.crs,
            id_field=study.streams.id_field,
            repeated_ids=True,
        )
        if cut_lines is None:
            from terrain2q.laying_out import streams_on

            near = streams_on(terrain, streams)
        else:
            near = streams_near(cut_lines, streams)
        streams, turned = turn_streams(streams, terrain, study.in_si("streams.snap"), study.system, near)
        findings += turned
    if study.cut_lines is None:
        # crossings lay out their own sections
        lines, line_findings = [], []
    elif cut_lines is None:
        from terrain2q.laying_out import lines_for_run

        lines, line_findings = lines_for_run(study, terrain, streams)
    else:
        for key_name, name in _cut_line_fields(study):
            require_field(cut_lines, name, key=key_name, where=study.cut_lines.path)
        lines, line_findings = orient_cut_lines(cut_lines, streams, terrain.crs, study.system)
    findings += line_findings
    cover = _read_cover(study, terrain, _where_sections_are(study, terrain, lines))
    channel = None
    if study.channel.path is not None:
        polygons = read_layer(study.channel.path, purpose="channel", geometry="polygon", crs=terrain.crs)
        channel = ChannelPolygons(polygons, study.system)
        findings += channel.findings
    findings += cover.findings
    slopes = (
        _slopes(study, lines, streams, terrain) if study.cut_lines is not None else OneSlope(float("nan"))
    )
    if isinstance(slopes, StreamSlopes):
        findings += slopes.findings
    sections = SectionInputs(
        terrain,
        cover,
        channel,
        study.channel.banks,
        study.channel.n,
        slopes,
        study.in_si("terrain.spacing"),
        study.system,
        _submerged(study),
        None if study.flows is None else study.flows.area_field,
        study.channel.composite,
    )
    return _Inputs(lines, sections, out_crs, findings, streams)


def _flow_findings(study: Study, inputs: _Inputs, flows: Sequence[Flow]) -> list[Finding]:
    """Return what is to know about the places that the flows name; those of crossings are told with them."""
    # the flows of a study of crossings alone may name the sections of another study, and the other way
    sections = None if study.cut_lines is None else [line.section_id for line in inputs.lines]
    streams = [] if inputs.streams is None else inputs.streams["feature_id"].unique().tolist()
    return flows_of_nowhere(flows, sections, streams)


def _cut_line_fields(study: Study) -> list[tuple[str, str]]:
    """Return key and name of every field that the cut lines must have."""
    named = [
        ("[slope] field", study.slope.field),
        ("[submerged] area_field", study.submerged and study.submerged.area_field),
        ("[flows] area_field", study.flows and study.flows.area_field),
    ]
    return [(key_name, name) for key_name, name in named if name]


def _slopes(study: Study, lines: Sequence[CutLine], streams, terrain: Terrain) -> Slopes:
    if study.slope.value is not None:
        return OneSlope(study.slope.value)
    if study.slope.field is not None:
        return FieldSlopes(study.slope.field)
    if streams is None:
        raise InputError(
            "key-missing",
            "a slope from the stream needs stream lines",
            where="[slope] from",
            fix="add [streams] with path, or give value or field under [slope]",
        )
    network = StreamNetwork(streams, terrain.crs, study.system)
    low_lines = LowLines(network, terrain, study.in_si("streams.snap"), study.system)
    cell = max(terrain.cell_size)
    return StreamSlopes(lines, low_lines, study.in_si("slope.window"), cell, study.system)


def _submerged(study: Study) -> Submerged | None:
    table = study.submerged
    if table is None:
        return None
    return Submerged(
        table.shape,
        study.in_si("submerged.depth"),
        study.in_si("submerged.coefficient"),
        table.exponent,
        table.area_field,
        study.in_si("submerged.survey_flow"),
    )


def _where_sections_are(
    study: Study, terrain: Terrain, lines: Sequence[CutLine]
) -> tuple[float, float, float, float]:
    """Return bounds in the terrain's CRS that hold every section there will be."""
    x, y = (np.concatenate([np.zeros(0), *(getattr(line, k) for line in lines)]) for k in "xy")
    known = np.isfinite(x) & np.isfinite(y)
    bounds = []
    if known.any():
        x, y = x[known], y[known]
        bounds = [(x.min(), y.min(), x.max(), y.max())]
    if study.crossings is not None or not bounds:
        # sections of crossings are laid out later, and end where the terrain does
        bounds.append(terrain.bounds)
    low, high = np.min(bounds, axis=0), np.max(bounds, axis=0)
    return float(low[0]), float(low[1]), float(high[2]), float(high[3])


def _read_cover(study: Study, terrain: Terrain, within: tuple) -> Cover | UniformCover:
    table = study.land_cover
    if table.path is None:
        return UniformCover(table.default_n)
    polygons = read_layer(
        table.path, purpose="land cover", geometry="polygon", crs=terrain.crs, within=within
    )
    return Cover(
        polygons,
        table.class_field,
        RoughnessTable.from_csv(table.table, study.system, roughness_from_parts),
        table.default_n,
        study.system,
        # a class that the table lacks is wrong wherever it is
        texts_in(table.path, table.class_field) if polygons.attrs["in_part"] else None,
    )


def _all_findings(
    inputs: _Inputs, about_sections: Sequence[Finding], others: Sequence[Finding] = ()
) -> list[Finding]:
    found = [*inputs.findings, *others, *about_sections]
    return sorted(found, key=lambda f: SEVERITIES.index(f.severity))


def _findings_of(answers: Sequence[SectionAnswer]) -> list[Finding]:
    return [f for a in answers for f in a.built.findings] + [f for a in answers for f in a.findings]


def _crew(study: Study, jobs: int, scheduler: str | None) -> Crew:
    """Call other processes at once where there are lines for several batches."""
    count = 0
    if scheduler is None and study.cut_lines is not None and study.cut_lines.path is not None:
        path, layer = split_spec(study.cut_lines.path)
        with suppress(Exception):  # what is wrong with the file is said where it is read
            count = pyogrio.read_info(path, layer=layer)["features"]
    return Crew(min(jobs - 1, count // (2 * BATCH)))


def _files_of(study: Study) -> list[str]:
    return [path for paths in study.inputs().values() for path in paths]


def _begin(
    study: Study, inputs: _Inputs, flows: Sequence[Flow], as_rows: bool, progress: Progress
) -> tuple[Work, list, KeptParts | None]:
    """Return the work on the cut lines, its batches, and where parts are kept; nowhere where there is one."""
    batches = plan_batches(inputs.lines, inputs.sections.terrain)
    as_rows = as_rows and len(batches) > 1
    work = Work(
        inputs.sections,
        tuple(flows),
        study.rating.stages,
        study.in_si("rating.top"),
        inputs.crs,
        worth_compiling(len(inputs.lines)),
        as_rows,
    )
    kept = None
    if len(batches) > 1:
        settings = {**study.as_dict(), "as_rows": as_rows, "compiled": work.compiled}
        kept = KeptParts(study.output.folder, study_hash(settings, study.inputs(), len(batches)))
        if kept.refused:
            progress(0, 1, "parts of an unfinished run with other inputs are there; they are not used")
    return work, batches, kept


def _write_rows(
    writer: GeoPackageWriter, parts: Iterable[Part], inputs: _Inputs
) -> tuple[list[Finding], frozenset[str]]:
    """Write the rows of all parts as they come; return the findings, and the sections without an answer."""
    known = Counter(f.feature_id for f in inputs.findings)
    told = []
    for part in parts:
        for name, table in part.layers.items():
            if name == "sections" and known:
                place = table.schema.get_field_index("findings")
                before = [known[section_id] for section_id in table["section_id"].to_pylist()]
                counts = table["findings"].to_numpy() + np.array(before, dtype=np.int64)
                table = table.set_column(place, "findings", pa.array(counts))
            writer.append(name, table)
        told.append(replace(part, layers={}))
    findings, _, failed = in_order(told)
    return findings, failed


def _extent_events(study: Study, flows: Sequence[Flow]) -> tuple[str, ...]:
    """Return the events whose extent is asked for, in the order of the flows."""
    if study.extent is None:
        return ()
    if study.streams is None:
        raise InputError(
            "key-missing",
            "an extent needs stream lines, which put the sections in order",
            where="[extent]",
            fix="add [streams] with path, or take [extent] away",
        )
    known = event_names(flows)
    wanted = known if study.extent.events is None else study.extent.events
    unknown = [event for event in wanted if event not in known]
    if unknown:
        raise InputError(
            "value-not-allowed",
            f"no flow has the event {', '.join(map(repr, unknown))}",
            where="[extent] events",
            fix=f"the flows have {', '.join(map(repr, known))}",
        )
    return tuple(event for event in known if event in wanted)


def _check_bench_event(study: Study, flows: Sequence[Flow]) -> None:
    """Say no where a bench is asked for an event that no flow has."""
    known = event_names(flows)
    if study.bench is None or study.bench.event is None or not known or study.bench.event in known:
        return
    raise InputError(
        "value-not-allowed",
        f"no flow has the event {study.bench.event!r}",
        where="[bench] event",
        fix=f"the flows have {', '.join(map(repr, known))}",
    )


def _missing_flows(inputs: _Inputs, flows: Sequence[Flow]) -> list[Finding]:
    """Return a finding for each cut line to which no discharge of some event applies."""
    names = event_names(flows)
    everywhere = {f.event for f in flows if not (f.stream or f.section or f.crossing)}
    names = [name for name in names if name not in everywhere]
    found = []
    for line in inputs.lines if names else ():
        lacks = [
            n for n in names if flow_for(flows, n, line.section_id, line.stream, line.stream_distance) is None
        ]
        if lacks:
            message = f"{', '.join(lacks)}: no discharge is given for it"
            found.append(Finding("flow-missing", message, "cut_lines", line.section_id))
    return found


def _map_floods(study: Study, events, flows, inputs: _Inputs, answers, progress) -> FloodMap:
    from terrain2q.jobs.extent import ExtentInputs, FloodMap, map_floods

    if not events:
        return FloodMap.nothing()

    def again(answer: SectionAnswer, reached) -> SectionAnswer:
        return answer_section(
            answer.built, flows, event_names(flows), study.rating.stages, study.in_si("rating.top"),
            study.system, reached,
        )  # fmt: skip

    wanted = ExtentInputs(
        inputs.sections.terrain, inputs.streams, events, study.in_si("extent.smallest"), study.system,
        study.output.folder,
    )  # fmt: skip
    return map_floods(answers, wanted, again, progress)


def _screen(
    study: Study, inputs: _Inputs, flows: Sequence[Flow], progress: Progress, who: _Workers
) -> Screened | None:
    if study.crossings is None:
        return None
    from terrain2q.screening import screen_study

    return screen_study(study, inputs.sections, inputs.streams, flows, progress, who.jobs, who.scheduler)


def _check_crossings(study: Study, inputs: _Inputs, flows: Sequence[Flow]) -> list[Finding]:
    """Return what is to know about the places of crossings, before any of them is screened."""
    if study.crossings is None:
        return []
    from terrain2q.screening import crossing_layers, find_crossings, flow_findings

    crs = inputs.sections.terrain.crs
    points, roads = crossing_layers(study, crs)
    network = StreamNetwork(inputs.streams, crs, study.system)
    crossings, findings = find_crossings(study, points, roads, network)
    findings = [*findings, *flow_findings(study, flows, crossings)]
    return [*findings, *(f for c in crossings for f in c.findings)]


def _size(study: Study, answers: Sequence[SectionAnswer], progress: Progress) -> list[SizedSection]:
    from terrain2q.jobs.sizing import BenchWish, size_sections

    bench = study.bench
    wish = BenchWish(
        study.in_si("bench.base"),
        bench.n,
        bench.sides,
        bench.side_slope,
        bench.event,
        study.in_si("bench.stage"),
    )
    return size_sections(answers, wish, study.system, progress)


def fit_study(study: Study, progress: Progress | None = None) -> tuple[Fit, Path]:
    """Return the roughness that reproduces a study's observed stages, and the table that was written.

    Raises
    ------
    InputError, OutputError
        An input is wrong, or the output cannot be written; nothing was written.
    """
    from terrain2q.ground.observed import read_observations
    from terrain2q.jobs.fitting import fit_observations
    from terrain2q.output.fitted import check_table, write_table

    progress = progress or _silent
    folder = Path(study.output.folder)
    check_table(folder, study.output.overwrite)
    inputs = _read_inputs(study)
    ids = [line.section_id for line in inputs.lines]
    observations, findings = read_observations(
        study.observed.path, study.system, ids, inputs.sections.terrain.crs
    )
    seen = {o.section_id for o in observations}
    wanted = [line for line in inputs.lines if line.section_id in seen]
    built = build_sections(wanted, inputs.sections, progress)
    fit = fit_observations(observations, {b.section_id: b for b in built}, study.system, progress)
    about = [f for f in inputs.findings if not f.feature_id or f.feature_id in seen]
    about += [*findings, *(f for b in built for f in b.findings)]
    fit = replace(fit, findings=tuple(worst_first([*about, *fit.findings])))
    return fit, write_table(folder, fit, study.system)


def check_study(study: Study, progress: Progress | None = None) -> list[Finding]:
    """Look at every input of a study and return the findings, the worst first; write nothing.

    Raises
    ------
    InputError
        An input is wrong.
    """
    from terrain2q.ground.observed import read_observations

    flows = read_flows(study)
    _extent_events(study, flows)
    _check_bench_event(study, flows)
    inputs = _read_inputs(study)
    inputs.findings.extend(_flow_findings(study, inputs, flows))
    inputs.findings.extend(_missing_flows(inputs, flows))
    if study.observed is not None:
        ids = [line.section_id for line in inputs.lines]
        crs = inputs.sections.terrain.crs
        inputs.findings.extend(read_observations(study.observed.path, study.system, ids, crs)[1])
    built = build_sections(inputs.lines, inputs.sections, progress or _silent)
    about_crossings = _check_crossings(study, inputs, flows)
    return _all_findings(inputs, [f for b in built for f in b.findings], about_crossings)


def run_study(
    study: Study,
    progress: Progress | None = None,
    *,
    widths: bool = False,
    jobs: int | None = None,
    scheduler: str | None = None,
) -> Results:
    """Do everything a study asks for and write it into its output folder.

    Parameters
    ----------
    study : Study
    progress : callable, optional
        ``progress(done, total, label)``.
    widths : bool
        Whether the required benches are what is asked for; the study must have [bench]. They are found
        for every study that has [bench] and flows.
    jobs : int, optional
        Processes that work on the sections and crossings of a large study; one a core if left out.
    scheduler : str, optional
        Address of a Dask scheduler, whose cluster works on them instead.

    Raises
    ------
    InputError, OutputError
        An input is wrong, or the output cannot be written; nothing was written.
    """
    began = time.perf_counter()
    progress = progress or _silent
    folder = Path(study.output.folder)
    check_output(folder, study.output.overwrite)
    flows = read_flows(study)
    events = _extent_events(study, flows)
    _check_bench_event(study, flows)
    widths = widths or (study.bench is not None and bool(flows))
    jobs = jobs or cores()
    who = _Workers(jobs, scheduler)
    earlier = files_of_record(folder)
    with ExitStack() as helpers:
        crew = helpers.enter_context(closing(_crew(study, jobs, scheduler)))
        helpers.enter_context(hashed_ahead(_files_of(study)))
        inputs = _read_inputs(study)
        inputs.findings.extend(_flow_findings(study, inputs, flows))
        # the flood extent and the benches need the answers themselves, the layers only their rows
        work, batches, kept = _begin(study, inputs, flows, not (events or widths), progress)
        parts = answer_lines(work, inputs.lines, batches, kept, jobs, scheduler, progress, crew)
        try:
            # results and pages come into the folder together: one without the other would be half a run
            with whole_folder(folder, first=[RESULT_NAME], last=[RECORD_NAME]) as place:
                if work.as_layers:
                    made = _finish_rows(study, inputs, flows, parts, progress, who, place)
                else:
                    made = _finish_answers(study, inputs, flows, events, widths, parts, progress, who, place)
                helpers.close()
                record = run_record(
                    inputs=study.inputs(),
                    settings=study.as_dict(),
                    units=study.system.name,
                    crs=inputs.crs.to_string(),
                    counts=made.counts,
                    findings=made.findings,
                    seconds=time.perf_counter() - began,
                    outputs=made.files,
                    earlier=earlier,
                )
                for entry in record["outputs"]:
                    entry["path"] = str(folder / Path(entry["path"]).name)
                write_run_record(place / RECORD_NAME, record)
                pages = write_pages(place, study.as_dict()["output"])
        except InputError:
            if kept is not None:
                kept.remove(all_new=True)
            raise
    if kept is not None:
        kept.remove()
    pages = [folder / path.name for path in pages]
    files = (*(folder / path.name for path in made.files), folder / RECORD_NAME, *pages)
    # only now that all is there: what a run before wrote and this one did not would be taken for its own
    left = remove_earlier(folder, earlier, files)
    note_pages(folder, pages, alone=True)
    progress(1, 1, "writing")
    return Results(
        StoredLayers(folder / RESULT_NAME, made.counts) if made.layers is None else made.layers,
        tuple(made.findings),
        study.system,
        inputs.crs,
        folder,
        files,
        time.perf_counter() - began,
        study.study.name,
        made.failed,
        tuple(left),
    )


class _Workers(NamedTuple):
    """Who works on sections and crossings: so many processes here, or the cluster of a scheduler."""

    jobs: int
    scheduler: str | None


@dataclass(frozen=True)
class _Made:
    """What a run has written before its record, and what the record and the results tell of it.

    Without `layers` these are to be read from the file.
    """

    layers: Mapping[str, pd.DataFrame] | None
    counts: Mapping[str, int]
    findings: list[Finding]
    failed: frozenset[str]
    files: tuple[Path, ...]


def _package(study: Study, inputs: _Inputs) -> dict:
    """Return how the package of results is described."""
    return {
        "units": study.system,
        "crs": inputs.crs,
        "description": f"{study.study.name or 'terrain2q study'}: sections, ratings, design stages",
        "metadata": {"settings": study.as_dict()},
        "overwrite": study.output.overwrite,
    }


def _finish_rows(
    study: Study,
    inputs: _Inputs,
    flows,
    parts: Iterable[Part],
    progress: Progress,
    who: _Workers,
    folder: Path,
) -> _Made:
    """Write the rows of many sections as they come, with what there is beside them, into a folder."""
    package = folder / RESULT_NAME
    terrain_crs = inputs.sections.terrain.crs
    names = [*LAYER_NAMES, *(["crossings"] if study.crossings is not None else []), "findings"]
    with GeoPackageWriter(package, names, **_package(study, inputs)) as writer:
        about_sections, failed = _write_rows(writer, parts, inputs)
        screened = _screen(study, inputs, flows, progress, who)
        others = screened.findings if screened is not None else ()
        findings = _all_findings(inputs, about_sections, others)
        progress(0, 1, "writing")
        crossings = None
        if screened is not None:
            from terrain2q.output.crossing_table import crossings_layer

            crossings = crossings_layer(screened.answers, study.system, terrain_crs, inputs.crs)
            writer.append("crossings", table_of_frame("crossings", crossings))
        writer.append(
            "findings", table_of_frame("findings", findings_layer(findings, terrain_crs, inputs.crs))
        )
    about_crossings = []
    if screened is not None:
        from terrain2q.screening import write_crossings

        about_crossings = write_crossings(screened, crossings, study, folder, *who)
    return _Made(None, writer.counts, findings, failed, (package, *about_crossings))


def _finish_answers(
    study: Study,
    inputs: _Inputs,
    flows,
    events,
    widths: bool,
    parts: Iterable[Part],
    progress: Progress,
    who: _Workers,
    folder: Path,
) -> _Made:
    """Write what comes of the answers of all sections together into a folder."""
    from terrain2q.output.benches import PICTURES_NAME, required_widths_layer, write_benches
    from terrain2q.output.crossing_table import crossings_layer
    from terrain2q.output.rasters import flood_rasters
    from terrain2q.screening import write_crossings

    about_sections, answers, failed = in_order(list(parts))
    screened = _screen(study, inputs, flows, progress, who)
    terrain_crs = inputs.sections.terrain.crs
    package = folder / RESULT_NAME
    with closing(_map_floods(study, events, flows, inputs, answers, progress)) as floods:
        if floods.answers:
            answers = floods.answers
            about_sections = _findings_of(answers)
            failed = frozenset(a.section_id for a in answers if is_failed(a))
        sized = _size(study, answers, progress) if widths else []
        others = [*floods.findings, *(screened.findings if screened is not None else ())]
        others += [f for one in sized for f in one.findings]
        findings = _all_findings(inputs, about_sections, others)
        layers = make_layers(
            answers, findings, study.system, terrain_crs, inputs.crs, floods.events if events else None
        )
        if screened is not None:
            layers["crossings"] = crossings_layer(screened.answers, study.system, terrain_crs, inputs.crs)
        if sized:
            layers["required_widths"] = required_widths_layer(sized, study.system, terrain_crs, inputs.crs)
        progress(0, 1, "writing")
        # the rasters wait beside their places until the layers are there
        with flood_rasters(folder, floods, study.system, terrain_crs) as rasters:
            write_geopackage(package, layers, **_package(study, inputs))
    about_crossings = []
    if screened is not None:
        about_crossings = write_crossings(screened, layers["crossings"], study, folder, *who)
    pictures = [] if not sized else write_benches(folder / PICTURES_NAME, sized, study.system)
    files = (package, *rasters, *about_crossings, *pictures)
    counts = {name: len(table) for name, table in layers.items()}
    return _Made(layers, counts, findings, failed, files)


def run(
    study: str | os.PathLike | Study,
    options: Mapping[str, object] | None = None,
    jobs: int | None = None,
    scheduler: str | None = None,
) -> Results:
    """Run a study file: everything it asks for, into its output folder.

    Parameters
    ----------
    study : path or Study
        A study file, or a study already loaded.
    options : mapping, optional
        Values by ``table.key`` that go before those of the file.
    jobs : int, optional
        Processes that work on the sections and crossings of a large study; one a core if left out.
    scheduler : str, optional
        Address of a Dask scheduler, whose cluster works on them instead.

    Returns
    -------
    Results
        One GeoDataFrame or DataFrame a layer, in the study's units.

    Raises
    ------
    InputError, OutputError
        An input is wrong, or the output cannot be written; nothing was written.
    """
    if not isinstance(study, Study):
        study = load_study(Path(study), options or {})
    return run_study(study, jobs=jobs, scheduler=scheduler)
