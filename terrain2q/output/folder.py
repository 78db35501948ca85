"""Results read back from an output folder, so that pages can be made long after the run."""

from __future__ import annotations

import json
import os
import sqlite3
from collections.abc import Mapping
from contextlib import closing
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path

import numpy as np
import pandas as pd
import pyproj
import shapely

from terrain2q.columns import COLUMNS, LAYERS
from terrain2q.errors import InputError
from terrain2q.output.geopackage import RESULT_NAME
from terrain2q.output.run_record import RECORD_NAME, sha256_of
from terrain2q.units import UnitSystem, unit_system

CROSSING_SECTIONS_NAME = "crossing_sections.gpkg"

# Bytes before the WKB in a GeoPackage geometry, by the kind of its envelope (OGC 12-128r17, 2.1.3).
_HEADER = {0: 8, 1: 40, 2: 56, 3: 56, 4: 72}


@dataclass(frozen=True)
class OutputFolder:
    """What an output folder holds.

    Attributes
    ----------
    layers : mapping of str to DataFrame
        Every registered layer that is there, columns as registered; where the layer has a geometry, a
        column ``geometry`` of shapely geometries (None where a row has none), with z and m in `sections`.
    units : UnitSystem
        Of the numbers.
    crs : pyproj.CRS
        Of the geometries.
    record : mapping
        What ``run.json`` says; empty where it is not there.
    folder : pathlib.Path or None
    crossing_layers : mapping of str to DataFrame
        The layers of ``crossing_sections.gpkg``, where the run wrote it.
    """

    layers: Mapping[str, pd.DataFrame]
    units: UnitSystem
    crs: pyproj.CRS
    record: Mapping = field(default_factory=dict)
    folder: Path | None = None
    crossing_layers: Mapping[str, pd.DataFrame] = field(default_factory=dict)

    @property
    def name(self) -> str:
        """Name of the study; empty where it has none."""
        return self.settings.get("study", {}).get("name", "")

    @property
    def settings(self) -> Mapping:
        """The study as it was run, by table."""
        return self.record.get("settings", {})

    @cached_property
    def events(self) -> list[str]:
        """Names of the events, in the order of the study."""
        stages = self.layers.get("design_stages")
        return [] if stages is None else list(stages["event"].unique())

    @cached_property
    def is_of_record(self) -> bool:
        """Whether the layers are byte for byte those that ``run.json`` speaks of."""
        if self.folder is None:
            return False
        path = self.folder / RESULT_NAME
        digests = {entry["sha256"] for entry in self.record.get("outputs", ()) if "sha256" in entry}
        return path.exists() and sha256_of(path) in digests


def read_folder(folder: str | os.PathLike) -> OutputFolder:
    """Read ``results.gpkg`` and ``run.json`` of an output folder.

    Raises
    ------
    InputError
        There are no results (code ``file-missing``), or they cannot be read (``file-unreadable``).
    """
    folder = Path(folder).absolute()
    package, record_path = folder / RESULT_NAME, folder / RECORD_NAME
    if not package.is_file():
        raise InputError(
            "file-missing",
            f"no {RESULT_NAME} in {folder}",
            where=str(folder),
            fix="name the folder that `terrain2q run` wrote into",
        )
    record = {}
    if record_path.is_file():
        try:
            record = json.loads(record_path.read_text(encoding="utf-8"))
        except (OSError, ValueError) as error:
            raise InputError("file-unreadable", f"{RECORD_NAME}: {error}", where=str(record_path)) from None
    try:
        with closing(sqlite3.connect(f"{package.as_uri()}?mode=ro", uri=True)) as database:
            there = {name for (name,) in database.execute("SELECT table_name FROM gpkg_contents")}
            layers = {name: _read_layer(database, name) for name in LAYERS if name in there}
            crs = _crs(database)
            units = record.get("units") or _units(database)
    except sqlite3.Error as error:
        raise InputError("file-unreadable", f"{RESULT_NAME}: {error}", where=str(package)) from None
    return OutputFolder(layers, unit_system(units), crs, record, folder, _crossing_layers(folder, record))


def _crossing_layers(folder: Path, record: Mapping) -> dict[str, pd.DataFrame]:
    """Return the sections of crossings; nothing where the file is not the one that the run wrote."""
    path = folder / CROSSING_SECTIONS_NAME
    digests = {entry["sha256"] for entry in record.get("outputs", ()) if "sha256" in entry}
    if not path.is_file() or sha256_of(path) not in digests:
        return {}
    try:
        with closing(sqlite3.connect(f"{path.as_uri()}?mode=ro", uri=True)) as database:
            there = {name for (name,) in database.execute("SELECT table_name FROM gpkg_contents")}
            return {name: _read_layer(database, name) for name in LAYERS if name in there}
    except sqlite3.Error as error:
        raise InputError("file-unreadable", f"{path.name}: {error}", where=str(path)) from None


def _read_layer(database: sqlite3.Connection, name: str) -> pd.DataFrame:
    there = {row[1] for row in database.execute(f'PRAGMA table_info("{name}")')}
    names = [column for column in LAYERS[name].columns if column in there]
    listed = ", ".join(f'"{column}"' for column in [*names, *(["geom"] if "geom" in there else [])])
    rows = database.execute(f'SELECT {listed} FROM "{name}" ORDER BY fid').fetchall()
    table = {}
    for i, column in enumerate(names):
        values = [row[i] for row in rows]
        kind = COLUMNS[column].dtype
        if kind is str:
            table[column] = pd.array(["" if v is None else str(v) for v in values], dtype="str")
        else:
            numbers = np.array([np.nan if v is None else v for v in values], dtype=float)
            whole = kind is int and bool(np.isfinite(numbers).all())
            table[column] = numbers.astype(np.int64) if whole else numbers
    if "geom" in there:
        table["geometry"] = _geometries([row[-1] for row in rows])
    return pd.DataFrame(table)


def _geometries(blobs: list[bytes | None]) -> np.ndarray:
    found = np.full(len(blobs), None, dtype=object)
    for i, blob in enumerate(blobs):
        if blob is not None:
            found[i] = shapely.from_wkb(blob[_HEADER[(blob[3] >> 1) & 7] :])
    return found


def _crs(database: sqlite3.Connection) -> pyproj.CRS:
    row = database.execute(
        "SELECT s.organization, s.organization_coordsys_id, s.definition FROM gpkg_geometry_columns AS g "
        "JOIN gpkg_spatial_ref_sys AS s USING (srs_id) LIMIT 1"
    ).fetchone()
    organisation, number, definition = row
    if organisation.upper() == "EPSG":
        return pyproj.CRS.from_epsg(number)
    return pyproj.CRS.from_user_input(definition)


def _units(database: sqlite3.Connection) -> str:
    """Return the units that the file's own description names."""
    for (text,) in database.execute(
        "SELECT metadata FROM gpkg_metadata WHERE mime_type = 'application/json'"
    ):
        if "units" in (about := json.loads(text)):
            return about["units"]
    raise InputError("file-unreadable", f"{RESULT_NAME} does not say its units", where=RESULT_NAME)
