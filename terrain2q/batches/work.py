"""The unit of work: neighbouring cut lines become rows of the results, by one function without side effects.

How the lines are cut into batches depends on the lines alone, never on who works on them, so that one
process, many, and a cluster give the same bytes.
"""

from __future__ import annotations

import os
from collections.abc import Sequence
from dataclasses import dataclass, fields

import numpy as np
import pyarrow as pa
import pyproj

from terrain2q.errors import FAILED, Finding
from terrain2q.flows import Flow
from terrain2q.ground.cut_lines import CutLine
from terrain2q.ground.terrain import Terrain
from terrain2q.jobs.design_flows import SectionAnswer, answer_sections
from terrain2q.jobs.plain_sections import answer_plain_sections
from terrain2q.jobs.sections import SectionInputs, build_sections
from terrain2q.output.arrow_tables import table_of_frame
from terrain2q.output.plain_layers import plain_layers

BATCH = 500
"""Cut lines in a batch: long enough to share blocks, short enough to bound the memory of a process."""

STRIP = 512
"""Rows of the terrain in which lines are taken from left to right."""

_AS_THEY_COME = 1.25
"""Lines stay in their order where their batches then touch at most so many times the least of the terrain."""

LAYER_NAMES = ("sections", "subareas", "ratings", "design_stages", "subarea_flows")
"""The layers that come of cut lines."""


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

    def answer(self, items: Sequence[CutLine], places: Sequence[int]) -> Part:
        """Return what comes of some cut lines (:func:`answer_batch`)."""
        return answer_batch(self, items, places)


@dataclass(frozen=True)
class Part:
    """What comes of one batch.

    Attributes
    ----------
    places : tuple of int
        Where its lines stand among all lines, rising.
    layers : dict of str to pyarrow.Table
        Rows of each of `LAYER_NAMES`, of a line together and in the order of the lines. Empty where the
        answers are asked for.
    built_findings, answer_findings : tuple of tuple of Finding
        By line.
    failed : tuple of str
        Sections without an answer, or without one at some event.
    answers : tuple of SectionAnswer
        Empty where rows are asked for.
    """

    places: tuple[int, ...]
    layers: dict[str, pa.Table]
    built_findings: tuple[tuple[Finding, ...], ...]
    answer_findings: tuple[tuple[Finding, ...], ...]
    failed: tuple[str, ...]
    answers: tuple[SectionAnswer, ...] = ()

    def __getstate__(self) -> dict:
        # tables travel as bytes, so that a part that was kept is read without running anything
        state = {f.name: getattr(self, f.name) for f in fields(self)}
        return state | {"layers": {name: _to_bytes(table) for name, table in self.layers.items()}}

    def __setstate__(self, state: dict) -> None:
        tables = {name: pa.ipc.open_stream(data).read_all() for name, data in state["layers"].items()}
        for name, value in (state | {"layers": tables}).items():
            object.__setattr__(self, name, value)

    @property
    def finding_count(self) -> int:
        """How many findings it brings."""
        return sum(map(len, self.built_findings)) + sum(map(len, self.answer_findings))


def _to_bytes(table: pa.Table) -> bytes:
    sink = pa.BufferOutputStream()
    with pa.ipc.new_stream(sink, table.schema) as stream:
        stream.write_table(table)
    return sink.getvalue().to_pybytes()


def plan_batches(lines: Sequence[CutLine], terrain: Terrain, size: int = BATCH) -> list[np.ndarray]:
    """Return the places of the lines of each batch: neighbours in the raster, rising within a batch.

    Lines that follow one another along streams are neighbours already and keep their order; others are
    taken strip by strip of the raster.

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
    column, row = (np.nan_to_num(v, nan=-1.0) for v in terrain._to_grid(x, y))
    in_strips = np.lexsort((column, np.floor(row / STRIP)))
    as_they_come = np.arange(len(lines))
    block = np.stack([np.floor(row / STRIP), np.floor(column / STRIP)])

    def touched(order: np.ndarray) -> int:
        return np.unique(np.concatenate([[as_they_come // size], block[:, order]]), axis=1).shape[1]

    order = in_strips
    if touched(as_they_come) <= _AS_THEY_COME * touched(in_strips):
        order = as_they_come
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
    inputs = work.inputs
    plain = None
    if work.compiled and work.as_layers:
        plain = answer_plain_sections(lines, inputs, work.flows, work.stages, work.top)
    answered = np.zeros(len(lines), dtype=bool) if plain is None else plain.answered
    others = [line for line, done in zip(lines, answered, strict=True) if not done]
    built = build_sections(others, inputs, compiled=work.compiled) if others else []
    answers = answer_sections(built, work.flows, work.stages, work.top, inputs.units, compiled=work.compiled)
    built_findings: list[tuple[Finding, ...]] = [()] * len(lines)
    answer_findings: list[tuple[Finding, ...]] = [()] * len(lines)
    for place, answer in zip(np.flatnonzero(~answered).tolist(), answers, strict=True):
        built_findings[place], answer_findings[place] = answer.built.findings, answer.findings
    if plain is not None:
        for i, place in enumerate(plain.places.tolist()):
            if answered[place]:
                built_findings[place] = plain.built_findings[i]
                answer_findings[place] = plain.answer_findings[i]
    layers = {}
    if work.as_layers:
        made = None if plain is None else plain_layers(plain, inputs.units, inputs.terrain.crs, work.crs)
        layers = _in_order(made, answers, lines, work)
    return Part(
        tuple(int(i) for i in places),
        layers,
        tuple(built_findings),
        tuple(answer_findings),
        tuple(a.section_id for a in answers if is_failed(a)),
        () if work.as_layers else tuple(answers),
    )


def _in_order(
    made: tuple[dict[str, pa.Table], dict[str, np.ndarray]] | None,
    answers: Sequence[SectionAnswer],
    lines: Sequence[CutLine],
    work: Work,
) -> dict[str, pa.Table]:
    """Return the rows of plain sections and those of the answers, in the order of the lines."""
    if made is not None and not answers:
        return made[0]
    from terrain2q.output.layers import make_layers

    findings = [f for a in answers for f in (*a.built.findings, *a.findings)]
    frames = make_layers(answers, findings, work.inputs.units, work.inputs.terrain.crs, work.crs)
    others = {name: table_of_frame(name, frames[name]) for name in LAYER_NAMES}
    if made is None:
        return others
    number = {line.section_id: i for i, line in enumerate(lines)}
    joined = {}
    for name, table in others.items():
        rows = np.array([number[i] for i in table["section_id"].to_pylist()], dtype=np.int64)
        order = np.argsort(np.concatenate([made[1][name], rows]), kind="stable")
        joined[name] = pa.concat_tables([made[0][name], table]).take(pa.array(order)).combine_chunks()
    return joined


def is_failed(answer: SectionAnswer) -> bool:
    """Whether a section has no answer at all, or none at some event."""
    return answer.built.section is None or any(e.status == FAILED for e in answer.events)


def cores() -> int:
    """Return how many cores this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1
