"""Results read back from an output folder, so that pages can be made long after the run.

Rows are read by GDAL as Arrow tables with shapes as ISO WKB, which keeps M.
"""

from __future__ import annotations

import json
import os
import sqlite3
import warnings
from collections.abc import Iterator, Mapping
from contextlib import closing
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path

import geopandas
import numpy as np
import pandas as pd
import pyarrow as pa
import pyogrio
import pyproj
import shapely

from terrain2q.columns import COLUMNS, LAYERS
from terrain2q.errors import InputError
from terrain2q.output.geopackage import RESULT_NAME
from terrain2q.output.run_record import RECORD_NAME, sha256_of
from terrain2q.units import UnitSystem, unit_system

CROSSING_SECTIONS_NAME = "crossing_sections.gpkg"

# What sqlite3 and pyogrio raise; pyogrio's own are RuntimeErrors.
_UNREADABLE = (sqlite3.Error, RuntimeError, OSError)


class StoredLayers(Mapping[str, pd.DataFrame]):
    """Layers of a GeoPackage, each read when it is first asked for and kept then.

    Columns and their types are those that :func:`terrain2q.output.layers.make_layers` gives: a layer with
    shapes is a GeoDataFrame, `sections` with z and m. None stands for an empty shape, as the file keeps it.

    Parameters
    ----------
    path : path
        A file that :func:`~terrain2q.output.geopackage.write_geopackage` wrote.
    counts : mapping of str to int, optional
        Rows of each layer, where they are known, as the writer does; else they are counted when asked for.

    Raises
    ------
    InputError
        The file cannot be read (code ``file-unreadable``), now or when a layer is asked for.
    """

    def __init__(self, path: str | os.PathLike, counts: Mapping[str, int] | None = None) -> None:
        self.path = Path(path).absolute()
        try:
            with closing(_opened(self.path)) as database:
                self._names = _layers_in(database)
                self._crs = _crs(database) if any(LAYERS[name].geometry for name in self._names) else None
        except _UNREADABLE as error:
            raise _unreadable(self.path, error) from None
        self._counts = None if counts is None else {name: counts[name] for name in self._names}
        self._read: dict[str, pd.DataFrame] = {}

    def __getitem__(self, name: str) -> pd.DataFrame:
        if name not in self._names:
            raise KeyError(name)
        if name not in self._read:
            try:
                table = _read_layer(self.path, name)
            except _UNREADABLE as error:
                raise _unreadable(self.path, error) from None
            if "geometry" in table:
                table = geopandas.GeoDataFrame(table, geometry="geometry", crs=self._crs)
            self._read[name] = table
        return self._read[name]

    def __iter__(self) -> Iterator[str]:
        return iter(self._names)

    def __len__(self) -> int:
        return len(self._names)

    def __contains__(self, name: object) -> bool:
        return name in self._names

    @property
    def counts(self) -> dict[str, int]:
        """Rows of each layer, none of which is read for it."""
        if self._counts is None:
            try:
                with closing(_opened(self.path)) as database:
                    self._counts = {
                        name: database.execute(f'SELECT count(*) FROM "{name}"').fetchone()[0]
                        for name in self._names
                    }
            except _UNREADABLE as error:
                raise _unreadable(self.path, error) from None
        return dict(self._counts)


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
        """Names of the events, in the order of the study: of sections, and of crossings without any."""
        tables = [self.layers[name] for name in ("design_stages", "crossings") if name in self.layers]
        return list(dict.fromkeys(event for table in tables for event in table["event"].unique()))

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
        with closing(_opened(package)) as database:
            names, crs = _layers_in(database), _crs(database)
            units = record.get("units") or _units(database)
        layers = {name: _with_texts(_read_layer(package, name)) for name in names}
    except _UNREADABLE as error:
        raise _unreadable(package, error) from None
    return OutputFolder(layers, unit_system(units), crs, record, folder, _crossing_layers(folder, record))


def _crossing_layers(folder: Path, record: Mapping) -> dict[str, pd.DataFrame]:
    """Return the sections of crossings; nothing where the file is not the one that the run wrote."""
    path = folder / CROSSING_SECTIONS_NAME
    digests = {entry["sha256"] for entry in record.get("outputs", ()) if "sha256" in entry}
    if not path.is_file() or sha256_of(path) not in digests:
        return {}
    try:
        with closing(_opened(path)) as database:
            names = _layers_in(database)
        return {name: _with_texts(_read_layer(path, name)) for name in names}
    except _UNREADABLE as error:
        raise _unreadable(path, error) from None


def _opened(path: Path) -> sqlite3.Connection:
    return sqlite3.connect(f"{path.as_uri()}?mode=ro", uri=True)


def _unreadable(path: Path, error: Exception) -> InputError:
    return InputError("file-unreadable", f"{path.name}: {error}", where=str(path))


def _layers_in(database: sqlite3.Connection) -> list[str]:
    there = {name for (name,) in database.execute("SELECT table_name FROM gpkg_contents")}
    return [name for name in LAYERS if name in there]


def _read_layer(path: Path, name: str) -> pd.DataFrame:
    """Return the registered columns that a layer has, in their order, then ``geometry`` as an array."""
    with warnings.catch_warnings():
        # what it says of M is not so of the rows, only of the kind that it names
        warnings.filterwarnings("ignore", "Measured", UserWarning)
        about, rows = pyogrio.read_arrow(path, layer=name)
    table = {}
    for column in LAYERS[name].columns:
        if column not in rows.column_names:
            continue
        values, kind = rows[column], COLUMNS[column].dtype
        if kind is str:
            table[column] = pd.array(values.cast(pa.string()), dtype="str")
        elif kind is int and not values.null_count:
            table[column] = np.array(values, dtype=np.int64)
        else:
            table[column] = np.array(values.cast(pa.float64()), dtype=float)
    shapes = about["geometry_name"] or "wkb_geometry"
    if LAYERS[name].geometry and shapes in rows.column_names:
        found = np.full(len(rows), None, dtype=object)
        found[:] = shapely.from_wkb(rows[shapes].to_numpy())
        table["geometry"] = found
    return pd.DataFrame(table)


def _with_texts(table: pd.DataFrame) -> pd.DataFrame:
    """Return a table with empty text where there was none, as pages show it."""
    for column in table.columns:
        if column != "geometry" and COLUMNS[column].dtype is str and table[column].isna().any():
            table[column] = pd.array(table[column].fillna(""), dtype="str")
    return table


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
