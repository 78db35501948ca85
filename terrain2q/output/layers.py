"""Answers become layers: one table each, in the study's units and the output's CRS."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING

import geopandas
import numpy as np
import pandas as pd
import shapely

from terrain2q.columns import COLUMNS, LAYERS
from terrain2q.errors import Finding
from terrain2q.ground.terrain import Profile
from terrain2q.jobs.design_flows import SUBAREA_COLUMNS, SectionAnswer
from terrain2q.output.arrow_tables import to_crs
from terrain2q.output.geopackage import linestring_zm
from terrain2q.units import UnitSystem

if TYPE_CHECKING:
    from terrain2q.jobs.extent import EventExtent


class _Projected:
    """Profiles with their points in the output's CRS."""

    def __init__(self, answers: Sequence[SectionAnswer], terrain_crs, crs) -> None:
        profiles = [a.built.profile for a in answers]
        lengths = [0 if p is None else p.x.size for p in profiles]
        x = np.concatenate([p.x for p in profiles if p is not None] or [np.zeros(0)])
        y = np.concatenate([p.y for p in profiles if p is not None] or [np.zeros(0)])
        x, y = to_crs(x, y, terrain_crs, crs)
        cuts = np.cumsum(lengths)[:-1] if lengths else []
        self.x, self.y = np.split(x, cuts), np.split(y, cuts)
        self.profiles = profiles

    def piece(self, index: int, start: float, end: float) -> np.ndarray:
        """Points of profile `index` from one station to another, shape (n, 2)."""
        profile: Profile = self.profiles[index]
        station, x, y = profile.stations, self.x[index], self.y[index]
        inside = (station > start) & (station < end)
        where = np.concatenate([[start], station[inside], [end]])
        return np.column_stack([np.interp(where, station, x), np.interp(where, station, y)])

    def section(self, index: int, factor: float):
        """Profile `index` as a line with z and m, None where there is none."""
        profile = self.profiles[index]
        if profile is None:
            return None
        return linestring_zm(
            np.column_stack(
                [
                    self.x[index],
                    self.y[index],
                    profile.elevations * factor,
                    profile.stations * factor,
                ]
            )
        )


def make_layers(
    answers: Sequence[SectionAnswer],
    findings: Sequence[Finding],
    units: UnitSystem,
    terrain_crs,
    crs,
    floods: Sequence[EventExtent] | None = None,
) -> dict[str, pd.DataFrame]:
    """Return every layer of the results.

    Parameters
    ----------
    answers : sequence of SectionAnswer
        In SI.
    findings : sequence of Finding
        All findings of the run, placed in the terrain's CRS.
    units : UnitSystem
        The study's.
    terrain_crs, crs : pyproj.CRS
        Of the answers' coordinates, and of the layers.
    floods : sequence of EventExtent, optional
        In SI, in the terrain's CRS; without, the layers of the flood extent are left out.

    Returns
    -------
    dict of str to DataFrame or GeoDataFrame
        By name of the layer, columns as registered.
    """
    placed = _Projected(answers, terrain_crs, crs)
    on_map = {} if floods is None else _floods(floods, units, terrain_crs, crs)
    return {
        "sections": _sections(answers, findings, placed, units, crs),
        "subareas": _subareas(answers, placed, units, crs),
        "ratings": _ratings(answers, units),
        "design_stages": _design_stages(answers, placed, units, crs),
        "subarea_flows": _subarea_flows(answers, units),
        **on_map,
        "findings": findings_layer(findings, terrain_crs, crs),
    }


def table_in_units(layer: str, columns: dict, units: UnitSystem) -> pd.DataFrame:
    """Return a table with the layer's columns in order, numbers turned into the study's units."""
    out = {}
    for name in LAYERS[layer].columns:
        column = COLUMNS[name]
        values = columns[name]
        if column.dtype is float:
            values = np.asarray(values, dtype=float) * units.per_si(column.quantity)
        elif column.dtype is int:
            values = np.asarray(values, dtype=np.int64)
        else:
            values = pd.array(values, dtype="str") if len(values) else pd.array([], dtype="str")
        out[name] = values
    return pd.DataFrame(out)


def _with_geometry(table: pd.DataFrame, geometry: Iterable, crs) -> geopandas.GeoDataFrame:
    return geopandas.GeoDataFrame(
        table, geometry=geopandas.GeoSeries(list(geometry), crs=crs, index=table.index)
    )


def _sections(answers, findings, placed: _Projected, units: UnitSystem, crs):
    about = pd.Series([f.feature_id for f in findings], dtype=object).value_counts()
    rows = {
        "section_id": [a.section_id for a in answers],
        "stream": [a.built.line.stream for a in answers],
        "stream_distance": [a.built.line.stream_distance for a in answers],
        "lowest_ground": [
            a.built.section.lowest_ground if a.built.section is not None else np.nan for a in answers
        ],
        "slope": [a.built.slope for a in answers],
        "slope_source": [a.built.slope_source for a in answers],
        "length": [
            p.stations[-1] - p.stations[0] if (p := a.built.profile) is not None else np.nan for a in answers
        ],
        "points": [p.stations.size if (p := a.built.profile) is not None else 0 for a in answers],
        "findings": [int(about.get(a.section_id, 0)) for a in answers],
    }
    factor = units.per_si("length")
    lines = [placed.section(i, factor) for i in range(len(answers))]
    return _with_geometry(table_in_units("sections", rows, units), lines, crs)


def _subareas(answers, placed: _Projected, units: UnitSystem, crs):
    rows = {name: [] for name in LAYERS["subareas"].columns}
    pieces = []
    for i, answer in enumerate(answers):
        if answer.built.section is None:
            continue
        for number, (spec, subarea) in enumerate(
            zip(answer.built.specs, answer.built.section.subareas, strict=True), 1
        ):
            rows["section_id"].append(answer.section_id)
            rows["subarea"].append(number)
            rows["zone"].append(subarea.zone)
            rows["land_class"].append(spec.land_class)
            rows["n"].append(spec.n)
            rows["n_source"].append(spec.n_source)
            rows["start_station"].append(spec.start)
            rows["end_station"].append(spec.end)
            pieces.append(placed.piece(i, spec.start, spec.end))
    return _with_geometry(table_in_units("subareas", rows, units), _lines(pieces), crs)


def _lines(pieces: list[np.ndarray]) -> list:
    if not pieces:
        return []
    index = np.repeat(np.arange(len(pieces)), [len(p) for p in pieces])
    return list(shapely.linestrings(np.concatenate(pieces), indices=index))


def _ratings(answers, units: UnitSystem):
    rated = [a.rating for a in answers if a.rating]
    names = LAYERS["ratings"].columns
    if not rated:
        return table_in_units("ratings", {name: [] for name in names}, units)
    return table_in_units(
        "ratings", {name: np.concatenate([r[name] for r in rated]) for name in names}, units
    )


def _design_stages(answers, placed: _Projected, units: UnitSystem, crs):
    names = LAYERS["design_stages"].columns
    rows = {name: [] for name in names}
    geometry = []
    for i, answer in enumerate(answers):
        for event in answer.events:
            known = {"section_id": answer.section_id, "event": event.event, "status": event.status}
            for name in names:
                rows[name].append(known[name] if name in known else event.row.get(name, np.nan))
            parts = [placed.piece(i, start, end) for start, end in event.wetted if end > start]
            geometry.append(shapely.multilinestrings(_lines(parts)) if parts else None)
    return _with_geometry(table_in_units("design_stages", rows, units), geometry, crs)


def _subarea_flows(answers, units: UnitSystem):
    rows = {name: [] for name in LAYERS["subarea_flows"].columns}
    for answer in answers:
        for event in answer.events:
            for row in event.subareas:
                rows["section_id"].append(answer.section_id)
                rows["event"].append(event.event)
                for name in SUBAREA_COLUMNS:
                    rows[name].append(row[name])
    return table_in_units("subarea_flows", rows, units)


def _floods(floods: Sequence[EventExtent], units: UnitSystem, terrain_crs, crs) -> dict[str, pd.DataFrame]:
    def moved(shape):
        return shapely.transform(
            shape, lambda xy: np.column_stack(to_crs(xy[:, 0], xy[:, 1], terrain_crs, crs))
        )

    rows = {
        "event": [f.event for f in floods],
        "area": [f.area for f in floods],
        "largest_depth": [f.largest_depth for f in floods],
        "boundary_points": [f.boundary_points for f in floods],
        "boundary_within_tolerance": [f.within for f in floods],
    }
    low = {
        "event": [f.event for f in floods],
        "area": [f.low_area for f in floods],
        "largest_depth": [f.low_depth for f in floods],
    }
    return {
        "flood_extent": _with_geometry(
            table_in_units("flood_extent", rows, units), [moved(f.polygons) for f in floods], crs
        ),
        "low_not_joined": _with_geometry(
            table_in_units("low_not_joined", low, units), [moved(f.low) for f in floods], crs
        ),
    }


def findings_layer(findings: Sequence[Finding], terrain_crs, crs) -> geopandas.GeoDataFrame:
    """Return the layer of findings, their places brought into the output's CRS."""
    rows = {name: [getattr(f, name) for f in findings] for name in LAYERS["findings"].columns}
    x, y = np.array([f.x for f in findings], dtype=float), np.array([f.y for f in findings], dtype=float)
    known = np.isfinite(x) & np.isfinite(y)
    places = np.full(len(findings), None, dtype=object)
    if known.any():
        places[known] = shapely.points(*to_crs(x[known], y[known], terrain_crs, crs))
    table = pd.DataFrame({name: pd.array(values, dtype="str") for name, values in rows.items()})
    return _with_geometry(table, places, crs)
