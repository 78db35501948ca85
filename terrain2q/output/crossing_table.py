"""Screened crossings as a layer, and as a CSV beside it."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path

import geopandas
import numpy as np
import pandas as pd
import pyarrow as pa
import shapely

from terrain2q.columns import COLUMNS, LAYERS
from terrain2q.errors import DOUBTFUL
from terrain2q.hydraulics.widths import opening_parts
from terrain2q.jobs.crossings import CrossingAnswer, answered_sections, without_workings
from terrain2q.output.arrow_tables import table_of_frame
from terrain2q.output.folder import CROSSING_SECTIONS_NAME as SECTIONS_NAME
from terrain2q.output.geopackage import GeoPackageWriter
from terrain2q.output.layers import make_layers, table_in_units, to_crs
from terrain2q.output.whole_file import whole_file
from terrain2q.units import UnitSystem

CSV_NAME = "crossings.csv"

_NARROWER = 0.999
"""How much narrower an opening is that must not pass the event."""

_SECTION_LAYERS = ("sections", "subareas", "ratings", "design_stages", "subarea_flows")
_STEP_LAYERS = ("road_profiles", "crossing_steps", "opening_parts")
_ROW_LAYERS = (*_SECTION_LAYERS, *_STEP_LAYERS, "findings")


def crossings_layer(
    answers: Sequence[CrossingAnswer], units: UnitSystem, terrain_crs, crs
) -> geopandas.GeoDataFrame:
    """Return the layer ``crossings``: a row for each crossing at each event, in order of rank.

    Parameters
    ----------
    answers : sequence of CrossingAnswer
        In SI, in the terrain's CRS.
    units : UnitSystem
        The study's.
    terrain_crs, crs : pyproj.CRS
        Of the answers' coordinates, and of the layer.
    """
    names = LAYERS["crossings"].columns
    rows: dict[str, list] = {name: [] for name in names}
    owners = []
    for answer in sorted(answers, key=lambda a: a.rank):
        for event in answer.events:
            known = {
                "crossing_id": answer.crossing.crossing_id,
                "road": answer.crossing.road,
                "stream": answer.crossing.stream,
                "event": event.event,
                "crest": answer.crest,
                "crest_discharge": answer.crest_discharge,
                "first_event_over": answer.first_event_over,
                "verdict": event.verdict,
                "rank": answer.rank,
                "status": event.status,
                "probability": answer.crest_probability,
                "overflow_station": answer.crest_station,
                "slope": answer.slope,
                "approach_distance": answer.to_road,
            }
            for name in names:
                rows[name].append(known[name] if name in known else event.values.get(name, np.nan))
            owners.append(answer.crossing)
    table = table_in_units("crossings", rows, units)
    x, y = (np.array([getattr(c, k) for c in owners], dtype=float) for k in "xy")
    placed = np.isfinite(x) & np.isfinite(y)
    points = np.full(len(owners), None, dtype=object)
    if placed.any():
        points[placed] = shapely.points(*to_crs(x[placed], y[placed], terrain_crs, crs))
    return geopandas.GeoDataFrame(
        table, geometry=geopandas.GeoSeries(list(points), crs=crs, index=table.index)
    )


def write_crossings_csv(folder: Path, layer: geopandas.GeoDataFrame) -> Path:
    """Write the layer as ``crossings.csv``: its columns, and x and y in its CRS; return the file.

    Numbers have the digits that a reader can use; the layer has them all.
    """
    target = Path(folder) / CSV_NAME
    table = layer.drop(columns=layer.geometry.name)
    for name in table.columns:
        if COLUMNS[name].dtype is float:
            digits = 6 if COLUMNS[name].quantity in ("ratio", "probability") else 3
            table[name] = table[name].round(digits)
    known = ~(layer.geometry.isna() | layer.geometry.is_empty)
    for axis in ("x", "y"):
        values = np.full(len(layer), np.nan)
        values[known.to_numpy()] = getattr(layer.geometry[known], axis)
        table[axis] = np.round(values, 2)
    with whole_file(target) as temporary:
        table.to_csv(temporary, index=False, encoding="utf-8", lineterminator="\n")
    return target


def step_layers(answers: Sequence[CrossingAnswer], units: UnitSystem) -> dict[str, pd.DataFrame]:
    """Return what the numbers of crossings are worked out with, beside the approach and tailwater sections.

    Parameters
    ----------
    answers : sequence of CrossingAnswer
        In SI.
    units : UnitSystem
        The study's.
    """
    rows: dict[str, dict[str, list]] = {
        layer: {name: [] for name in LAYERS[layer].columns} for layer in _STEP_LAYERS
    }

    def add(layer: str, **values) -> None:
        for name, column in rows[layer].items():
            column.append(values.get(name, np.nan))

    for answer in sorted(answers, key=lambda a: a.rank):
        name, section = answer.crossing.crossing_id, answer.approach and answer.approach.section
        if section is None or answer.road is None:
            continue
        near = np.abs(answer.road.stations) <= answer.reach
        for station, height in zip(answer.road.stations[near], answer.road.heights[near], strict=True):
            add("road_profiles", crossing_id=name, station=station, road_elevation=height)
        for event in (e for e in answer.events if e.values):
            values = event.values
            known = {
                "crossing_id": name,
                "event": event.event,
                "discharge": values["discharge"],
                "event_probability": values["probability"],
                "weir_coefficient": values["weir_coefficient"],
                "tailwater_distance": answer.from_road,
                "allowed_stage": values["allowed_stage"],
                "opening_most": values["opening_most"],
                "opening_width": values["opening_width"],
            }
            if np.isfinite(values["required_opening"]):
                parts = opening_parts(section, values["required_opening"], values["allowed_stage"])
                narrower = opening_parts(
                    section, _NARROWER * values["required_opening"], values["allowed_stage"]
                )
                known |= {
                    "opening_start": parts.start,
                    "opening_end": parts.end,
                    "opening_narrower": narrower.conveyance.sum() * np.sqrt(answer.slope),
                }
                # a wall just over a limit of subareas stands in next to no water
                for i in np.flatnonzero(parts.conveyance > 1e-9 * parts.conveyance.sum()):
                    add(
                        "opening_parts",
                        crossing_id=name,
                        event=event.event,
                        subarea=i + 1,
                        n=parts.n[i],
                        flow_area=parts.flow_area[i],
                        wetted_perimeter=parts.wetted_perimeter[i],
                        conveyance=parts.conveyance[i],
                        discharge=parts.conveyance[i] * np.sqrt(answer.slope),
                    )
            add("crossing_steps", **known)
    return {layer: table_in_units(layer, columns, units) for layer, columns in rows.items()}


def crossing_tables(
    answers: Sequence[CrossingAnswer],
    units: UnitSystem,
    terrain_crs,
    crs,
    stages: int = 30,
    top: float | None = None,
) -> dict[str, pa.Table]:
    """Return the rows of ``crossing_sections.gpkg`` but for its cut lines, by layer; crossings by rank.

    Parameters
    ----------
    answers : sequence of CrossingAnswer
        In SI, in the terrain's CRS.
    units : UnitSystem
        The study's.
    terrain_crs, crs : pyproj.CRS
        Of the answers' coordinates, and of the layers.
    stages, top : int, float or None
        Of a rating; `top` in m.
    """
    own = [without_workings(a) for a in answers]
    answered = answered_sections(own, units, stages, top)
    # why a section's row is doubtful; what is only good to know is left out
    doubts = [f for a in answered for f in a.findings if f.severity == DOUBTFUL]
    layers = make_layers(answered, doubts, units, terrain_crs, crs) | step_layers(own, units)
    return {name: table_of_frame(name, layers[name]) for name in _ROW_LAYERS}


def write_crossing_sections(
    folder: Path,
    answers: Sequence[CrossingAnswer],
    units: UnitSystem,
    terrain_crs,
    crs,
    tables: Iterable[Mapping[str, pa.Table]],
) -> Path | None:
    """Write the approach and tailwater sections into ``crossing_sections.gpkg``; return the file.

    It has the very sections from which the numbers of the crossings come, in layers as of the results
    (``sections`` to ``subarea_flows``, and ``findings`` with what is doubtful in their rows), for each event
    of the crossing and at the discharge that reaches the crest; what else the numbers are worked out with
    (:func:`step_layers`); and the lines of the sections in the layer ``cut_lines``, which another study can
    take. None where no crossing has a section. `tables` are the rows of some crossings after others, by
    :func:`crossing_tables`.
    """
    rows: dict[str, list] = {
        name: []
        for name in ("section_id", "crossing_id", "stream", "stream_distance", "slope", "slope_source")
    }
    lines = []
    for answer in sorted(answers, key=lambda a: a.rank):
        for built in (answer.approach, answer.tailwater):
            if built is None:
                continue
            line = built.line
            values = (
                line.section_id, answer.crossing.crossing_id, line.stream,
                line.stream_distance * units.per_si("length"), answer.slope, answer.slope_source,
            )  # fmt: skip
            for name, value in zip(rows, values, strict=True):
                rows[name].append(value)
            lines.append(shapely.LineString(np.column_stack(to_crs(line.x, line.y, terrain_crs, crs))))
    if not lines:
        return None
    target = Path(folder) / SECTIONS_NAME
    with whole_file(target) as temporary:
        with GeoPackageWriter(
            temporary,
            _ROW_LAYERS,
            units=units,
            crs=crs,
            description="Sections above and below the roads of crossings",
        ) as writer:
            for some in tables:
                for name in writer.counts:
                    writer.append(name, some[name])
        geopandas.GeoDataFrame(rows, geometry=lines, crs=crs).to_file(
            temporary, layer="cut_lines", driver="GPKG", engine="pyogrio", mode="a"
        )
    return target
