"""Laying out cut lines for a study: inputs -> lines -> a file to edit, or straight into a run."""

from __future__ import annotations

import os
from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import geopandas
import numpy as np
import pandas
import shapely

from terrain2q.errors import SEVERITIES, Finding, InputError
from terrain2q.ground.cover import UniformCover
from terrain2q.ground.cut_lines import CutLine, orient_cut_lines
from terrain2q.ground.layers import clean_texts, columns_of, read_layer, reproject
from terrain2q.ground.layout import KeptLine, Layout, lay_out
from terrain2q.ground.low_line import turn_streams
from terrain2q.ground.streams import StreamNetwork, feature_ids
from terrain2q.ground.terrain import Terrain
from terrain2q.jobs.crossings import HALF_SECTION, places_beside
from terrain2q.jobs.lines_at_crossings import lines_at_crossings
from terrain2q.jobs.sections import SectionInputs
from terrain2q.jobs.slopes import OneSlope
from terrain2q.output.cut_line_file import COLUMNS, read_cut_line_file, write_cut_line_file
from terrain2q.screening import crossing_inputs
from terrain2q.study import Study

FILE_NAME = "cut_lines.gpkg"
"""The file beside the study that lines are laid out into."""

SPACING, CROSSINGS = "spacing", "crossings"
"""Where lines are laid out: every so far along the streams, or up- and downstream of each crossing."""


@dataclass(frozen=True)
class LaidOut:
    """What laying out a study's lines gave.

    Attributes
    ----------
    file : pathlib.Path
    lines : geopandas.GeoDataFrame
        All lines in the file, lengths in the study's units.
    kept : tuple of str
        Ids of the lines that a person drew or edited.
    findings : tuple of Finding
    at : str
        :data:`SPACING` or :data:`CROSSINGS`.
    """

    file: Path
    lines: geopandas.GeoDataFrame
    kept: tuple[str, ...]
    findings: tuple[Finding, ...]
    at: str = SPACING

    def summary(self) -> dict:
        """Return what the command prints, as plain values for JSON."""
        found = Counter(f.severity for f in self.findings)
        return {
            "file": str(self.file),
            "lines": len(self.lines),
            "laid_out": len(self.lines) - len(self.kept),
            "kept": list(self.kept),
            "streams": dict(Counter(self.lines["stream"].fillna("").tolist())),
            "findings": {severity: found[severity] for severity in SEVERITIES},
        }

    def summary_text(self) -> str:
        """Return what the command prints."""
        new, streams = len(self.lines) - len(self.kept), self.lines["stream"].nunique()
        where = f"along {streams} streams" if self.at == SPACING else "up- and downstream of crossings"
        text = [f"{new} lines laid out {where}, written to {self.file}"]
        if self.kept:
            text.append(f"{len(self.kept)} lines that a person drew or edited were kept: {_some(self.kept)}")
        text += [
            "Edit them in a GIS; what you change is kept when you lay out again. To run the study on them",
            f'put path = "{self.file.name}|layer=cut_lines" under [cut_lines] '
            + ("in place of every and width." if self.at == SPACING else "in place of width and height."),
        ]
        return "\n".join(text)


def lay_out_lines(
    study: Study, terrain: Terrain, streams: geopandas.GeoDataFrame, kept: list[KeptLine] | None = None
) -> Layout:
    """Lay out the cut lines of a study whose inputs have been read.

    Parameters
    ----------
    study : Study
        With ``every`` and ``width`` under [cut_lines].
    terrain : Terrain
    streams : geopandas.GeoDataFrame
        In the terrain's CRS, turned downstream.
    kept : list of KeptLine, optional
    """
    network = StreamNetwork(streams, terrain.crs, study.system)
    return lay_out(
        network,
        terrain,
        every=study.in_si("cut_lines.every"),
        width=study.in_si("cut_lines.width"),
        height=study.in_si("cut_lines.height"),
        kept=kept or (),
        units=study.system,
    )


def lay_out_at_crossings(
    study: Study,
    terrain: Terrain,
    streams: geopandas.GeoDataFrame,
    kept: list[KeptLine] | None = None,
    progress: Callable[[int, int, str], None] | None = None,
) -> Layout:
    """Lay out a line up- and one downstream of each crossing of a study, clear of the fills of roads.

    Parameters
    ----------
    study : Study
        With [crossings]; ``width`` and ``height`` of [cut_lines] where given.
    terrain, streams, kept
        As for :func:`lay_out_lines`. A line with the id of a kept one is not laid out.
    progress : callable, optional
        ``progress(done, total, label)``.

    Returns
    -------
    Layout
        Ids are those of the crossings with ``approach`` or ``tailwater``.
    """
    sections = SectionInputs(
        terrain, UniformCover(0.05), None, "none", None, OneSlope(float("nan")), None, study.system
    )
    inputs, findings = crossing_inputs(study, sections, streams)
    places = places_beside(inputs, progress)
    findings = [*findings, *(f for place in places for f in place.findings)]
    table = study.cut_lines
    width = None if table is None else study.in_si("cut_lines.width")
    layout = lines_at_crossings(
        places,
        inputs.network,
        terrain,
        width=2.0 * HALF_SECTION if width is None else width,
        height=None if table is None else study.in_si("cut_lines.height"),
        kept=kept or (),
        units=study.system,
    )
    return Layout(layout.lines, [*findings, *layout.findings])


def lines_for_run(
    study: Study, terrain: Terrain, streams: geopandas.GeoDataFrame | None
) -> tuple[list[CutLine], list[Finding]]:
    """Return laid-out cut lines for a run, and what there is to know about them.

    Raises
    ------
    InputError
        There are no streams (code ``key-missing``), or the slope is to come from a field of lines that
        have none (``key-conflict``), or no line could be laid out (``layer-empty``).
    """
    _need_streams(study)
    if study.cut_lines.every is None:
        raise InputError(
            "key-missing",
            "[cut_lines] has no path and no every",
            where="[cut_lines]",
            fix="run `terrain2q layout --at crossings` and name its file as path, or add every; crossings "
            "alone need no [cut_lines]",
        )
    if study.slope is not None and study.slope.field is not None:
        raise InputError(
            "key-conflict",
            "laid-out cut lines have no fields, so slope.field has no slope to give",
            where="[slope] field",
            fix='give value or from = "stream" under [slope], or run `terrain2q layout`, fill the field in '
            "and name the file as path under [cut_lines]",
        )
    layout = lay_out_lines(study, terrain, streams)
    if not layout.lines:
        raise InputError(
            "layer-empty",
            "no cut line could be laid out" + (f": {layout.findings[0].message}" if layout.findings else ""),
            where="[cut_lines] every",
            fix="check that the streams lie on the terrain, or draw cut lines",
        )
    findings = layout.findings
    beside = study.folder / FILE_NAME
    earlier = read_cut_line_file(beside)
    if earlier is not None and earlier["edited"].any():
        message = f"{beside.name} holds {int(earlier['edited'].sum())} lines that a person drew or edited"
        findings.append(Finding("lines-not-used", message, "cut_lines"))
    return [line.as_cut_line() for line in layout.lines], findings


def lay_out_study(
    study: Study,
    file: str | os.PathLike | None = None,
    progress: Callable[[int, int, str], None] | None = None,
    at: str | None = None,
) -> LaidOut:
    """Lay out cut lines along a study's streams into a GeoPackage to edit.

    Lines in the file that a person drew or edited stay as they are, and keep their fields; the others are
    laid out again, and keep their fields by their id.

    Parameters
    ----------
    study : Study
        With [terrain] and [streams], and ``every`` and ``width`` under [cut_lines] or [crossings].
    file : path, optional
        The GeoPackage; ``cut_lines.gpkg`` beside the study where not given.
    progress : callable, optional
        ``progress(done, total, label)``.
    at : str, optional
        :data:`SPACING` for lines every so far, :data:`CROSSINGS` for one up- and one downstream of each
        crossing. Where not given, the latter for a study with [crossings] whose [cut_lines] has neither
        ``every`` nor ``path``.

    Raises
    ------
    InputError, OutputError
        An input is wrong, or the file cannot be written; nothing was written.
    """
    _need_streams(study)
    table = study.cut_lines
    if at is None:
        at = SPACING
        spaced = table is not None and (table.every is not None or table.path is not None)
        if study.crossings is not None and not spaced:
            at = CROSSINGS
    if at == CROSSINGS and study.crossings is None:
        raise InputError(
            "key-missing",
            "lines are to be laid out at crossings, and there are none",
            where=str(study.path or "the options"),
            fix="add [crossings] with path or roads",
        )
    if at == SPACING and (table is None or table.every is None):
        raise InputError(
            "key-missing",
            "[cut_lines] has no every and no width, by which lines are laid out",
            where=str(study.path or "the options"),
            fix="add every = 250.0 and width = 1500.0 under [cut_lines] in place of path, or give "
            "--cut_lines.every and --cut_lines.width",
        )
    file = study.folder / FILE_NAME if file is None else Path(file)
    if file.suffix.lower() != ".gpkg":
        raise InputError(
            "value-not-allowed",
            f"{file} is not a GeoPackage",
            where="--to",
            fix="name a file ending in .gpkg",
        )
    progress = progress or (lambda done, total, label: None)
    progress(0, 1, "laying out cut lines")
    dem = study.terrain.dem
    terrain = Terrain(
        list(dem) if len(dem) > 1 else dem[0],
        elevation_unit=study.terrain.elevation_unit,
        sampling=study.terrain.sampling,
    )
    streams = read_layer(
        study.streams.path,
        purpose="streams",
        geometry="line",
        crs=terrain.crs,
        id_field=study.streams.id_field,
        repeated_ids=True,
    )
    there = streams_on(terrain, streams)
    streams, turned = turn_streams(streams, terrain, study.in_si("streams.snap"), study.system, there)
    findings = [*terrain.findings, *turned]
    earlier = read_cut_line_file(file)
    own, kept = _own_lines(earlier, streams, terrain, study)
    if at == CROSSINGS:
        layout = lay_out_at_crossings(study, terrain, streams, kept, progress)
    else:
        layout = lay_out_lines(study, terrain, streams, kept)
    findings += layout.findings
    if kept:
        ids = [k.section_id for k in kept]
        message = f"{len(ids)} cut lines that a person drew or edited were kept: {_some(ids)}"
        findings.append(Finding("lines-kept", message, "cut_lines"))
    per_metre = study.system.per_si("length")
    new = geopandas.GeoDataFrame(
        {
            "section_id": [line.section_id for line in layout.lines],
            "stream": [line.stream for line in layout.lines],
            "stream_distance": [round(line.stream_distance * per_metre, 3) for line in layout.lines],
        },
        geometry=[line.geometry for line in layout.lines],
        crs=terrain.crs,
    )
    if earlier is not None:
        new = _with_fields(new, earlier)
    lines, edited = _together(new, own)
    write_cut_line_file(file, lines, study.system, edited)
    progress(1, 1, "laying out cut lines")
    findings.sort(key=lambda f: SEVERITIES.index(f.severity))
    return LaidOut(file, lines, tuple(k.section_id for k in kept), tuple(findings), at)


def streams_on(terrain: Terrain, streams: geopandas.GeoDataFrame) -> set[str]:
    """Return the ids of the streams that touch the terrain's bounds."""
    touching = shapely.intersects(streams.geometry.to_numpy(), shapely.box(*terrain.bounds))
    return set(np.asarray(feature_ids(streams), dtype=object)[touching])


def _need_streams(study: Study) -> None:
    if study.streams is None:
        raise InputError(
            "key-missing",
            "cut lines are laid out along streams, and there are none",
            where="[cut_lines] every",
            fix="add [streams] with path, or give path under [cut_lines]",
        )


def _own_lines(
    earlier: geopandas.GeoDataFrame | None, streams, terrain: Terrain, study: Study
) -> tuple[geopandas.GeoDataFrame | None, list[KeptLine]]:
    """Return the lines that a person drew or edited, with an id, stream and distance each."""
    if earlier is None or not earlier["edited"].any():
        return None, []
    own = earlier[earlier["edited"]].reset_index(drop=True)
    own = reproject(own[[c for c in own.columns if c not in ("edited", "feature_id")]], terrain.crs)
    names = clean_texts(own["section_id"]) if "section_id" in own.columns else [""] * len(own)
    # A copy of a laid-out line brings its id along.
    used = (
        set()
        if "section_id" not in earlier
        else set(clean_texts(earlier.loc[~earlier["edited"], "section_id"]))
    )
    for index, name in enumerate(names):
        base, number = name or "added", 1
        name = name or "added-1"
        while name in used:
            number += 1
            name = f"{base}-{number}"
        used.add(name)
        names[index] = name
    own["section_id"] = names
    placed, _ = orient_cut_lines(own.assign(feature_id=names), streams, terrain.crs, study.system)
    own["stream"] = np.array([line.stream or None for line in placed], dtype=object)
    own["stream_distance"] = [
        round(line.stream_distance * study.system.per_si("length"), 3) for line in placed
    ]
    kept = [
        KeptLine(line.section_id, line.stream, line.stream_distance, shape)
        for line, shape in zip(placed, shapely.force_2d(own.geometry.to_numpy()), strict=True)
    ]
    return own, kept


def _with_fields(new: geopandas.GeoDataFrame, earlier: geopandas.GeoDataFrame) -> geopandas.GeoDataFrame:
    """Give lines that were laid out again the other fields they had."""
    added = [c for c in columns_of(earlier) if c not in (*COLUMNS, "edited")]
    if not added or "section_id" not in earlier.columns:
        return new
    fields = earlier.loc[~earlier["edited"], ["section_id", *added]].drop_duplicates("section_id")
    return new.merge(fields, on="section_id", how="left")


def _together(new, own) -> tuple[geopandas.GeoDataFrame, np.ndarray]:
    if own is None:
        return new, np.zeros(len(new), dtype=bool)
    edited = np.concatenate([np.zeros(len(new), dtype=bool), np.ones(len(own), dtype=bool)])
    parts = [part.dropna(axis=1, how="all") for part in (new, own)]
    lines = pandas.concat([part for part in parts if len(part)], ignore_index=True)
    lines = geopandas.GeoDataFrame(lines, geometry="geometry", crs=new.crs)
    order = np.lexsort((lines["stream_distance"], lines["stream"].fillna("").astype(str)))
    for column in new.columns.union(own.columns).difference(lines.columns):
        lines[column] = None  # a field that nobody has filled in yet
    return lines.iloc[order].reset_index(drop=True), edited[order]


def _some(ids) -> str:
    shown = ", ".join(list(ids)[:8])
    return shown + (f" and {len(ids) - 8} more" if len(ids) > 8 else "")
