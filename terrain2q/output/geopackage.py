"""Results as one GeoPackage: every layer in the order of the registry, written whole or not at all.

Layers are written by GDAL through pyogrio's raw interface from ISO WKB, the route that keeps M; the
column descriptions, the data set's own description and the styles are added with sqlite3. Standard: OGC
GeoPackage 1.3 (12-128r17) with its extensions Schema, Metadata and RTree Spatial Indexes.
"""

from __future__ import annotations

import json
import os
import sqlite3
import struct
import tempfile
from collections.abc import Iterator, Mapping
from contextlib import closing, contextmanager, suppress
from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import pandas as pd
import pyogrio
import pyogrio.raw
import shapely
from pyproj import CRS

from terrain2q.columns import CAUTION, COLUMNS, FID, LAYERS, Column, Layer, column_description, column_title
from terrain2q.errors import OutputError
from terrain2q.output.run_record import plain
from terrain2q.output.styles import STYLES_TABLE, write_styles
from terrain2q.output.whole_file import not_writable, whole_file
from terrain2q.units import UnitSystem, unit_system

RESULT_NAME = "results.gpkg"

# GDAL's names of the geometry kinds, shapely's type numbers that may stand in such a layer, and the
# number of coordinates written.
_KINDS = {
    "LineString ZM": ("Measured 3D LineString", {1}, 4),
    "LineString": ("LineString", {1}, 2),
    "MultiLineString": ("MultiLineString", {1, 5}, 2),
    "MultiPolygon": ("MultiPolygon", {3, 6}, 2),
    "Point": ("Point", {0}, 2),
}

# The version that older readers (GDAL 3.6) open without a warning.
_VERSION = "1.3"


def check_output(folder: str | os.PathLike, overwrite: bool = False, name: str = RESULT_NAME) -> None:
    """Say no before any work where results could not be written; make nothing.

    Parameters
    ----------
    folder : path
        The output folder; it need not be there yet.
    overwrite : bool
        Whether earlier results may be replaced.
    name : str
        The file that says that the folder holds results.

    Raises
    ------
    OutputError
        Results are there and may not be replaced (code ``output-exists``), or the folder cannot be
        made or written (code ``output-not-writable``).
    """
    folder = Path(folder)
    target = folder / name
    try:
        if target.exists() and not overwrite:
            raise OutputError("output-exists", f"{name} is already there", where=str(folder))
        if target.is_dir():
            raise IsADirectoryError(21, "a folder has this name", str(target))
        nearest = folder
        while not nearest.exists() and nearest != nearest.parent:
            nearest = nearest.parent
        # To try is the only sure test: permission bits say nothing on network drives or to an administrator.
        with tempfile.TemporaryFile(dir=nearest):
            pass
    except OutputError:
        raise
    except OSError as error:
        raise not_writable(target, error) from error


def linestring_zm(xyzm) -> shapely.LineString:
    """Return a line with z and m.

    Parameters
    ----------
    xyzm : array_like, shape (n, 4)
        x, y, z and m of each point; none for an empty line.

    Notes
    -----
    Write such a line, do not edit it: shapely 2 loses z and m in several operations and in reprojection.

    Examples
    --------
    >>> linestring_zm([[0, 0, 10, 0], [3, 4, 11, 5]])
    <LINESTRING ZM (0 0 10 0, 3 4 11 5)>
    """
    return shapely.from_wkb(_linestring_zm_wkb(xyzm))


def write_geopackage(
    path: str | os.PathLike,
    layers: Mapping[str, pd.DataFrame],
    *,
    units: UnitSystem | str,
    crs,
    description: str,
    metadata: dict | None = None,
    overwrite: bool = False,
    date: str | None = None,
) -> None:
    """Write the layers into one GeoPackage, whole or not at all.

    A reader of `path` sees the earlier file or the whole new one at every moment.

    Parameters
    ----------
    path : path
        The file, ending in ``.gpkg``.
    layers : mapping of str to DataFrame or GeoDataFrame
        By name of the layer, with exactly its columns of :data:`terrain2q.columns.LAYERS`, numbers in
        `units`. NaN and None become NULL. Geometries may be missing. The layer ``sections`` has lines
        with z and m as geometry, or instead a column ``xyzm`` of arrays of shape (n, 4) or None.
    units : UnitSystem or str
        The system the numbers are in.
    crs : pyproj.CRS or what it takes
        The CRS of every geometry.
    description : str
        One line on what the results are.
    metadata : dict, optional
        More about the run, kept as JSON in the file.
    overwrite : bool
        Whether an earlier file may be replaced.
    date : str, optional
        The time of writing, such as ``2026-01-01T00:00:00.000Z``; now where not given. The same layers
        and the same date give the same bytes.

    Raises
    ------
    OutputError
        The file is there and may not be replaced (code ``output-exists``), or it cannot be written
        (code ``output-not-writable``).
    ValueError
        A layer is not as registered: a mistake in the program, not in the inputs.
    """
    target, units, crs = Path(path), unit_system(units), CRS.from_user_input(crs)
    unknown = sorted(set(layers) - set(LAYERS))
    if unknown:
        raise ValueError(f"layers that are not registered: {', '.join(unknown)}")
    wanted = [layer for name, layer in LAYERS.items() if name in layers]
    if not wanted:
        raise ValueError("no layer to write")
    about = {**(metadata or {}), "description": description, "caution": CAUTION, "units": units.name}
    about = json.dumps(plain(about), ensure_ascii=False, allow_nan=False)
    date = date or datetime.now(UTC).strftime("%Y-%m-%dT%H:%M:%S.000Z")

    check_output(target.parent, overwrite, target.name)
    with whole_file(target) as temporary:
        try:
            with _gdal_options(OGR_CURRENT_DATE=date, OGR_SQLITE_SYNCHRONOUS="OFF"):
                # one after another, so that no more than one layer is held as it is written
                for layer in wanted:
                    table = layers[layer.name]
                    _write_layer(temporary, layer, _fields(layer, table), _wkb(layer, table, crs), units, crs)
            counts = {layer.name: len(layers[layer.name]) for layer in wanted}
            counts |= _describe(temporary, layers, units, about, date)
            _check(temporary, counts)
        except (RuntimeError, sqlite3.Error, OSError) as error:  # pyogrio's own are RuntimeErrors
            raise not_writable(target, error) from error
        check_output(target.parent, overwrite, target.name)
        _settle(target)


def _linestring_zm_wkb(xyzm) -> bytes:
    # shapely's own constructors take no fourth coordinate.
    points = np.ascontiguousarray(xyzm, dtype="<f8").reshape(-1, 4)
    return struct.pack("<BII", 1, 3002, len(points)) + points.tobytes()


def _geometry_name(table: pd.DataFrame) -> str:
    return getattr(table, "active_geometry_name", None) or "geometry"


def _fields(layer: Layer, table: pd.DataFrame) -> list[tuple[np.ndarray, np.ndarray | None]]:
    """Return the values and the mask of NULLs of each registered column, checked."""
    names = [str(name) for name in table.columns]
    shape = (
        {getattr(table, "_geometry_column_name", None) or "geometry", "geometry"} if layer.geometry else set()
    )
    if layer.geometry == "LineString ZM":
        shape.add("xyzm")
    missing = [name for name in layer.columns if name not in names]
    unknown = [name for name in names if name not in layer.columns and name not in shape]
    if missing or unknown or len(set(names)) != len(names):
        raise ValueError(f"columns of {layer.name}: missing {missing}, unknown {unknown}, given {names}")
    return [_values(layer, COLUMNS[name], table[name]) for name in layer.columns]


def _values(layer: Layer, column: Column, series: pd.Series) -> tuple[np.ndarray, np.ndarray | None]:
    where = f"{layer.name}.{column.name}"
    empty = series.isna().to_numpy(dtype=bool)
    if column.dtype is str:
        values = series.to_numpy(dtype=object, copy=True)
        values[empty] = None
        wrong = next((value for value in values if value is not None and not isinstance(value, str)), None)
        if wrong is not None:
            raise ValueError(f"{where} holds {wrong!r}, which is not text")
        return values, None
    if pd.api.types.is_bool_dtype(series) and not empty.all():
        raise ValueError(f"{where} holds true and false, not numbers")
    try:
        numbers = pd.to_numeric(series).to_numpy(dtype=float, na_value=np.nan)
    except (TypeError, ValueError) as error:
        raise ValueError(f"{where} holds what is not a number: {error}") from error
    if np.isinf(numbers).any():
        raise ValueError(f"{where} holds an infinite number in row {int(np.argmax(np.isinf(numbers)))}")
    if column.dtype is float:
        return numbers, None
    if (numbers[~empty] != np.round(numbers[~empty])).any():
        raise ValueError(f"{where} holds a number that is not whole")
    return np.where(empty, 0.0, numbers).astype(np.int64), empty if empty.any() else None


def _wkb(layer: Layer, table: pd.DataFrame, crs: CRS) -> np.ndarray | None:
    """Return the geometries as ISO WKB with None where there is none; None for a table."""
    if not layer.geometry:
        return None
    if "xyzm" in table.columns and layer.geometry == "LineString ZM":
        lines = [None if xyzm is None else _linestring_zm_wkb(xyzm) for xyzm in table["xyzm"]]
        return _objects(lines)
    name = _geometry_name(table)
    if name not in table.columns:
        raise ValueError(f"{layer.name} has no geometry")
    own = getattr(table[name], "crs", None)
    if own is not None and not own.equals(crs, ignore_axis_order=True):
        raise ValueError(f"{layer.name} is in {own.name}, the file in {crs.name}")
    geometry = table[name].to_numpy(dtype=object, copy=True)
    geometry[pd.isna(geometry)] = None
    geometry[shapely.is_empty(geometry)] = None
    _, allowed, dimension = _KINDS[layer.geometry]
    kinds = shapely.get_type_id(geometry)
    if not set(np.unique(kinds)) <= allowed | {-1}:
        raise ValueError(f"{layer.name} holds geometries other than {layer.geometry}")
    present = kinds >= 0
    if dimension == 4 and not (shapely.has_z(geometry) & shapely.has_m(geometry))[present].all():
        raise ValueError(f"{layer.name} holds lines without z and m")
    if layer.geometry == "MultiLineString":
        for row in np.flatnonzero(kinds == 1):
            geometry[row] = shapely.multilinestrings([geometry[row]])
    if layer.geometry == "MultiPolygon":
        for row in np.flatnonzero(kinds == 3):
            geometry[row] = shapely.multipolygons([geometry[row]])
    return _objects(shapely.to_wkb(geometry, output_dimension=dimension, byte_order=1, flavor="iso"))


def _objects(items) -> np.ndarray:
    array = np.empty(len(items), dtype=object)
    array[:] = list(items)
    return array


@contextmanager
def _gdal_options(**options: str) -> Iterator[None]:
    before = {name: pyogrio.get_gdal_config_option(name) for name in options}
    pyogrio.set_gdal_config_options(options)
    try:
        yield
    finally:
        pyogrio.set_gdal_config_options(before)


def _write_layer(path: Path, layer: Layer, fields, geometry, units: UnitSystem, crs: CRS) -> None:
    options = {"IDENTIFIER": layer.title, "DESCRIPTION": f"{layer.meaning} {_units_sentence(units)}"}
    if layer.geometry:
        options |= {"GEOMETRY_NAME": "geom", "SPATIAL_INDEX": "YES"}
    pyogrio.raw.write(
        str(path),
        geometry=geometry,
        field_data=[values for values, _ in fields],
        fields=list(layer.columns),
        field_mask=[mask for _, mask in fields],
        layer=layer.name,
        driver="GPKG",
        geometry_type=_KINDS[layer.geometry][0] if layer.geometry else None,
        crs=crs.to_wkt() if layer.geometry else None,
        encoding="UTF-8",
        dataset_options={"VERSION": _VERSION} if not path.exists() else None,
        layer_options=options,
    )


def _units_sentence(units: UnitSystem) -> str:
    length, flow = units.symbol("length"), units.symbol("flow")
    return f"Lengths and elevations are in {length}, flows in {flow}."


_SCHEMA = """
CREATE TABLE gpkg_data_columns (table_name TEXT NOT NULL, column_name TEXT NOT NULL, name TEXT, title TEXT,
    description TEXT, mime_type TEXT, constraint_name TEXT,
    CONSTRAINT pk_gdc PRIMARY KEY (table_name, column_name), CONSTRAINT gdc_tn UNIQUE (table_name, name));
CREATE TABLE gpkg_data_column_constraints (constraint_name TEXT NOT NULL, constraint_type TEXT NOT NULL,
    value TEXT, min NUMERIC, min_is_inclusive BOOLEAN, max NUMERIC, max_is_inclusive BOOLEAN,
    description TEXT, CONSTRAINT gdcc_ntv UNIQUE (constraint_name, constraint_type, value));
CREATE TABLE gpkg_metadata (id INTEGER CONSTRAINT m_pk PRIMARY KEY ASC NOT NULL,
    md_scope TEXT NOT NULL DEFAULT 'dataset', md_standard_uri TEXT NOT NULL,
    mime_type TEXT NOT NULL DEFAULT 'text/xml', metadata TEXT NOT NULL DEFAULT '');
CREATE TABLE gpkg_metadata_reference (reference_scope TEXT NOT NULL, table_name TEXT, column_name TEXT,
    row_id_value INTEGER, timestamp DATETIME NOT NULL DEFAULT (strftime('%Y-%m-%dT%H:%M:%fZ','now')),
    md_file_id INTEGER NOT NULL, md_parent_id INTEGER,
    CONSTRAINT crmr_mfi_fk FOREIGN KEY (md_file_id) REFERENCES gpkg_metadata(id),
    CONSTRAINT crmr_mpi_fk FOREIGN KEY (md_parent_id) REFERENCES gpkg_metadata(id));
CREATE TABLE IF NOT EXISTS gpkg_extensions (table_name TEXT, column_name TEXT, extension_name TEXT NOT NULL,
    definition TEXT NOT NULL, scope TEXT NOT NULL,
    CONSTRAINT ge_tce UNIQUE (table_name, column_name, extension_name));
"""

_EXTENSIONS = [
    ("gpkg_data_columns", "gpkg_schema", "http://www.geopackage.org/spec121/#extension_schema"),
    ("gpkg_data_column_constraints", "gpkg_schema", "http://www.geopackage.org/spec121/#extension_schema"),
    ("gpkg_metadata", "gpkg_metadata", "http://www.geopackage.org/spec121/#extension_metadata"),
    ("gpkg_metadata_reference", "gpkg_metadata", "http://www.geopackage.org/spec121/#extension_metadata"),
]


def _describe(
    path: Path, layers: Mapping[str, pd.DataFrame], units: UnitSystem, about: str, date: str
) -> dict[str, int]:
    """Add the column descriptions (extension Schema), the data set's own (extension Metadata) and styles.

    Returns
    -------
    dict of str to int
        Rows of each table that was added to the contents of the file.
    """
    rows = []
    for layer in (layer for name, layer in LAYERS.items() if name in layers):
        described = [(column.name, column_title(column, units), column_description(column, units))
                     for column in (FID, *(COLUMNS[name] for name in layer.columns))]  # fmt: skip
        if layer.geometry:
            shape = layer.shape
            if layer.geometry == "LineString ZM":
                shape += f" Unit of z and m: {units.symbol('length')}."
            described.insert(1, ("geom", "Geometry", shape))
        # `name` is what a GIS shows as the column's alias, so it carries the unit as well.
        rows += [(layer.name, name, title, title, text) for name, title, text in described]
    with closing(sqlite3.connect(path)) as database:
        database.execute("PRAGMA synchronous = OFF")  # the whole file is flushed before it is renamed
        database.executescript(f"BEGIN;{_SCHEMA}")
        database.executemany("INSERT INTO gpkg_data_columns VALUES (?, ?, ?, ?, ?, NULL, NULL)", rows)
        database.executemany(
            "INSERT INTO gpkg_extensions VALUES (?, NULL, ?, ?, 'read-write')",
            [(table, name, definition) for table, name, definition in _EXTENSIONS],
        )
        database.execute(
            "INSERT INTO gpkg_metadata VALUES (1, 'dataset', ?, 'application/json', ?)",
            ("https://www.rfc-editor.org/rfc/rfc8259", about),
        )
        database.execute(
            "INSERT INTO gpkg_metadata_reference VALUES ('geopackage', NULL, NULL, NULL, ?, 1, NULL)", (date,)
        )
        styles = write_styles(database, layers, units, date)
        database.commit()
    return {STYLES_TABLE: styles}


def _check(path: Path, counts: dict[str, int]) -> None:
    """Raise sqlite3.DatabaseError where the file is not what was to be written."""
    with closing(sqlite3.connect(path)) as database:
        state = database.execute("PRAGMA integrity_check").fetchone()[0]
        if state != "ok":
            raise sqlite3.DatabaseError(state)
        if database.execute("PRAGMA foreign_key_check").fetchone():
            raise sqlite3.DatabaseError("a reference between its tables is broken")
        listed = {name for (name,) in database.execute("SELECT table_name FROM gpkg_contents")}
        found = {name: database.execute(f'SELECT count(*) FROM "{name}"').fetchone()[0] for name in listed}
    if found != counts:
        raise sqlite3.DatabaseError(f"it holds the rows {found}, not {counts}")


def _settle(target: Path) -> None:
    # A GIS that has the earlier file open keeps its changes in files beside it. Left there they would be
    # taken for changes of the new file. So they are brought into the earlier file, which stays whole
    # should we be stopped here, and removed.
    beside = [target.with_name(target.name + ending) for ending in ("-journal", "-wal", "-shm")]
    if not any(path.exists() for path in beside):
        return
    if target.exists():
        with suppress(sqlite3.Error), closing(sqlite3.connect(target, timeout=2.0)) as database:
            database.execute("PRAGMA wal_checkpoint(TRUNCATE)").fetchall()
    for path in beside:
        try:
            path.unlink(missing_ok=True)
        except OSError as error:
            raise not_writable(target, error) from error
