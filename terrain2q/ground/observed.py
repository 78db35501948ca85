"""Observed stages: high-water marks and gaugings with the discharge that flowed."""

from __future__ import annotations

import difflib
import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from terrain2q.errors import Finding, InputError, raise_together
from terrain2q.ground.layers import clean_text, ignored_columns, read_layer, read_table, require_field
from terrain2q.units import UnitSystem

COLUMNS = ("section", "stage", "discharge")
_TEXT = (".csv", ".txt")
_PURPOSE = "observed stages"


@dataclass(frozen=True)
class Observation:
    """One observed stage with its discharge, in SI.

    Attributes
    ----------
    section_id : str
    stage : float
        Elevation of the water surface, m.
    discharge : float
        m³/s.
    place : str
        The line of the file, or the feature of the layer.
    x, y : float
        Where it was seen, in the CRS asked for; NaN where that is not known.
    """

    section_id: str
    stage: float
    discharge: float
    place: str = ""
    x: float = float("nan")
    y: float = float("nan")


def read_observations(
    spec: str, units: UnitSystem, section_ids: Sequence[str], crs: object = None
) -> tuple[list[Observation], list[Finding]]:
    """Read observed stages from a CSV or a point layer with the columns ``section, stage, discharge``.

    Parameters
    ----------
    spec : str
        A CSV file, or a vector file with or without a layer: ``path|layer=name``.
    units : UnitSystem
        Of stages and discharges.
    section_ids : sequence of str
        The ids there are.
    crs : pyproj.CRS, optional
        Of the places.

    Returns
    -------
    observations : list of Observation
    findings : list of Finding
        Columns whose names look misspelled.

    Raises
    ------
    InputError
        ``section-unknown``, ``number-not-positive``, ``number-not-finite``, ``value-not-allowed``,
        with file and line, all of them together; and the codes of reading a table or a layer.
    """
    rows, findings = _rows(spec, crs)
    known = set(section_ids)
    problems: list[InputError] = []
    found = []
    for place, row, (x, y) in rows:
        where = f"{_PURPOSE}: {spec}, {place}"
        name = clean_text(row["section"])
        if not name:
            problems.append(InputError("value-not-allowed", "the row has no section", where=where))
        elif name not in known:
            near = difflib.get_close_matches(name, section_ids, n=1, cutoff=0.0)
            fix = f"the nearest id is {near[0]!r}" if near else ""
            problems.append(
                InputError("section-unknown", f"there is no section {name!r}", where=where, fix=fix)
            )
        stage, discharge = _number(row["stage"]), _number(row["discharge"])
        if not math.isfinite(stage):
            what = f"stage is {row['stage']!r}, not a number"
            problems.append(InputError("number-not-finite", what, where=where))
        if not (math.isfinite(discharge) and discharge > 0):
            what = f"discharge is {row['discharge']!r}, not a number above zero"
            problems.append(InputError("number-not-positive", what, where=where))
        found.append(
            Observation(name, stage / units.per_si("length"), discharge / units.per_si("flow"), place, x, y)
        )
    raise_together(problems)
    return found, findings


def _rows(spec: str, crs: object):
    """Return (place, row, (x, y)) of every row, and findings."""
    nowhere = (float("nan"), float("nan"))
    if Path(spec).suffix.lower() in _TEXT:
        table = read_table(spec, COLUMNS, _PURPOSE)
        rows = [
            (f"line {line}", row, nowhere)
            for line, row in zip(table.index, table.to_dict("records"), strict=True)
        ]
        return rows, ignored_columns(table, COLUMNS, "observed")
    layer = read_layer(spec, purpose=_PURPOSE, geometry="point", crs=crs, repeated_ids=True)
    for name in COLUMNS:
        require_field(layer, name, key=f"column {name}", where=spec)
    records = layer[[*COLUMNS, "feature_id"]].to_dict("records")
    rows = []
    for row, point in zip(records, layer.geometry, strict=True):
        here = nowhere
        if point is not None and not point.is_empty:
            centre = point.centroid
            here = (centre.x, centre.y)
        rows.append((f"feature {row['feature_id']}", row, here))
    return rows, []


def _number(value: object) -> float:
    try:
        return float(value)  # type: ignore[arg-type]
    except (TypeError, ValueError):
        return math.nan
