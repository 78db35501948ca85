"""The unit of work: neighbouring cut lines become rows of the results, by one function without side effects.

How the lines are cut into batches depends on the lines alone, never on who works on them, so that one
process, many, and a cluster give the same bytes.
"""

from __future__ import annotations

import os
from collections.abc import Sequence
from dataclasses import dataclass

import geopandas
import numpy as np
import pandas as pd
import pyproj
import shapely

from terrain2q.columns import COLUMNS, LAYERS
from terrain2q.errors import FAILED, Finding
from terrain2q.flows import Flow
from terrain2q.ground import tiles
from terrain2q.ground.cut_lines import CutLine
from terrain2q.ground.terrain import Terrain
from terrain2q.hydraulics.many import MANY, can_compile
from terrain2q.jobs.design_flows import SectionAnswer, answer_sections
from terrain2q.jobs.sections import SectionInputs, build_sections
from terrain2q.output.layers import make_layers

BATCH = 500
"""Cut lines in a batch: long enough to share blocks, short enough to bound the memory of a process."""

STRIP = 512
"""Rows of the terrain in which lines are taken from left to right."""

_GEOMETRY = "geometry"


@dataclass(frozen=True)
class Work:
    """What is the same for all batches.

    Attributes
    ----------
    inputs : SectionInputs
        With the terrain as a name that each worker opens itself.
    flows : sequence of Flow
    stages : int
        Steps of a rating.
    top : float or None
        Height of its last stage above the lowest ground, m.
    crs : pyproj.CRS
        Of the layers.
    compiled : bool
        Whether compiled code answers what it can.
    as_layers : bool
        Whether rows of layers come back, or the answers themselves.
    """

    inputs: SectionInputs
    flows: tuple[Flow, ...]
    stages: int
    top: float | None
    crs: pyproj.CRS
    compiled: bool
    as_layers: bool


@dataclass(frozen=True)
class Part:
    """What comes of one batch.

    Attributes
    ----------
    places : tuple of int
        Where its lines stand among all lines, rising.
    layers : dict of str to dict of str to ndarray
        Columns by layer; geometries as WKB under ``geometry``, None where there is none. Empty where the
        answers are asked for.
    built_findings, answer_findings : tuple of tuple of Finding
        By line.
    failed : tuple of str
        Sections without an answer, or without one at some event.
    answers : tuple of SectionAnswer
        Empty where rows are asked for.
    """

    places: tuple[int, ...]
    layers: dict[str, dict[str, np.ndarray]]
    built_findings: tuple[tuple[Finding, ...], ...]
    answer_findings: tuple[tuple[Finding, ...], ...]
    failed: tuple[str, ...]
    answers: tuple[SectionAnswer, ...] = ()

    @property
    def finding_count(self) -> int:
        """How many findings it brings."""
        return sum(map(len, self.built_findings)) + sum(map(len, self.answer_findings))


def plan_batches(lines: Sequence[CutLine], terrain: Terrain, size: int = BATCH) -> list[np.ndarray]:
    """Return the places of the lines of each batch: neighbours in the raster, rising within a batch.

    Parameters
    ----------
    lines : sequence of CutLine
        In the terrain's CRS.
    terrain : Terrain
    size : int
        Lines in a batch.
    """
    x = np.array([line.x[0] if line.x.size else np.nan for line in lines])
    y = np.array([line.y[0] if line.y.size else np.nan for line in lines])
    column, row = terrain._to_grid(x, y)
    order = np.lexsort((column, np.floor(np.nan_to_num(row, nan=-1.0) / STRIP)))
    return [np.sort(order[i : i + size]) for i in range(0, len(order), size)]


def answer_batch(work: Work, lines: Sequence[CutLine], places: Sequence[int]) -> Part:
    """Return what comes of some cut lines.

    Parameters
    ----------
    work : Work
    lines : sequence of CutLine
    places : sequence of int
        Where they stand among all lines.
    """
    built = build_sections(lines, work.inputs, compiled=work.compiled)
    answers = answer_sections(
        built, work.flows, work.stages, work.top, work.inputs.units, compiled=work.compiled
    )
    layers = {}
    if work.as_layers:
        made = make_layers(answers, (), work.inputs.units, work.inputs.terrain.crs, work.crs)
        made.pop("findings")
        layers = {name: _columns(table) for name, table in made.items()}
    return Part(
        tuple(int(i) for i in places),
        layers,
        tuple(b.findings for b in built),
        tuple(a.findings for a in answers),
        tuple(a.section_id for a in answers if is_failed(a)),
        () if work.as_layers else tuple(answers),
    )


def is_failed(answer: SectionAnswer) -> bool:
    """Whether a section has no answer at all, or none at some event."""
    return answer.built.section is None or any(e.status == FAILED for e in answer.events)


def wants_compiled(lines: Sequence[CutLine]) -> bool:
    """Whether a study has so many lines that compiled code is worth its loading."""
    return len(lines) >= MANY and can_compile()


def one_thread_each() -> None:
    """Let this process read the terrain with one thread: the others are at work as well."""
    tiles.MOST_THREADS = 1


def _columns(table: pd.DataFrame) -> dict[str, np.ndarray]:
    columns = {name: table[name].to_numpy() for name in table.columns if name != _GEOMETRY}
    columns = {k: v.astype(object) if v.dtype.kind not in "fi" else v for k, v in columns.items()}
    if _GEOMETRY in table.columns:
        columns[_GEOMETRY] = shapely.to_wkb(
            table[_GEOMETRY].to_numpy(), output_dimension=4, byte_order=1, flavor="iso"
        )
    return columns


def join_layers(
    parts: Sequence[Part], ids: Sequence[str], findings: Sequence[Finding], crs: pyproj.CRS
) -> dict[str, pd.DataFrame]:
    """Return the layers of all parts, their rows in the order of the lines.

    The parts are emptied as their rows are taken, so that no more than one layer is held twice.

    Parameters
    ----------
    parts : sequence of Part
        In any order, together of all lines.
    ids : sequence of str
        Of all lines, in order; no two are alike.
    findings : sequence of Finding
        All findings of the run, of which each section tells its number.
    crs : pyproj.CRS
    """
    place = pd.Series(np.arange(len(ids)), index=pd.Index(ids, dtype=object))
    about = pd.Series([f.feature_id for f in findings], dtype=object).value_counts()
    layers = {}
    for name in list(parts[0].layers):
        pieces = [part.layers.pop(name) for part in parts]
        joined = {column: np.concatenate([p.pop(column) for p in pieces]) for column in list(pieces[0])}
        order = np.argsort(place.reindex(joined["section_id"]).to_numpy(), kind="stable")
        out = {}
        for column in LAYERS[name].columns:
            values = joined[column][order]
            if column != "section_id":
                del joined[column]
            is_text = COLUMNS[column].dtype is str
            out[column] = pd.array(values, dtype="str") if is_text else values
        if name == "sections":
            out["findings"] = about.reindex(joined["section_id"][order], fill_value=0).to_numpy(
                dtype=np.int64
            )
        table = pd.DataFrame(out)
        if _GEOMETRY in joined:
            shapes = shapely.from_wkb(joined.pop(_GEOMETRY)[order])
            table = geopandas.GeoDataFrame(table, geometry=geopandas.GeoSeries(shapes, crs=crs))
        layers[name] = table
    return layers


def cores() -> int:
    """Return how many cores this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1
