"""Results as one GeoPackage: every layer in the order of the registry, written whole or not at all.

Rows are written by GDAL from Arrow tables with shapes as ISO WKB, the route that keeps M and the fastest
one; the spatial indexes, the column descriptions, the data set's own description and the styles are added
with sqlite3. Standard: OGC GeoPackage 1.3 (12-128r17) with its extensions Schema, Metadata and RTree
Spatial Indexes.
"""

from __future__ import annotations

import json
import os
import sqlite3
import struct
import tempfile
from collections.abc import Iterable, Iterator, Mapping
from contextlib import ExitStack, closing, contextmanager, suppress
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc
import pyogrio
import shapely
from pyproj import CRS

from terrain2q.columns import CAUTION, COLUMNS, FID, LAYERS, Column, Layer, column_description, column_title
from terrain2q.errors import OutputError
from terrain2q.output.arrow_tables import GEOMETRY
from terrain2q.output.run_record import hashed_ahead, plain
from terrain2q.output.spatial_index import fill_index
from terrain2q.output.styles import EVENT_MEASURES, STYLES_TABLE, write_styles
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

# The same kinds as numbers of ISO WKB, in which tables of rows hold them.
_WKB_KINDS = {
    "LineString ZM": 3002, "LineString": 2, "MultiLineString": 5, "MultiPolygon": 6, "Point": 1,
}  # fmt: skip

_ARROW_TYPES = {float: (pa.float64(),), int: (pa.int64(),), str: (pa.string(), pa.large_string())}

# Bytes of rows that wait. GDAL opens and commits once for each layer that is written out, some 10 ms, which
# this makes small beside the writing itself; a hundred times more would gain nothing and cost memory.
_WAITING_BYTES = 64_000_000

# Pieces below this size are joined: to pass one on costs 0.1 ms, and so does to copy this much.
_PIECE_BYTES = 100_000

# As much of the finished file as this is checked where the system holds it, not copied page by page, which
# halves the time. It is seen as memory of this process, though the system can take it back; so a limit.
_MAPPED_BYTES = 256_000_000

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
    with GeoPackageWriter(
        path,
        layers,
        units=units,
        crs=crs,
        description=description,
        metadata=metadata,
        overwrite=overwrite,
        date=date,
    ) as writer:
        for name in writer.counts:
            # one after another, so that no more than one layer is held as it is written
            writer.append(name, _table(LAYERS[name], layers[name], writer.crs))


class GeoPackageWriter:
    """A GeoPackage that takes rows as they come and is put in its place when the block ends well.

    A reader of `path` sees the earlier file or the whole new one at every moment; where the block raises,
    nothing is left. Rows wait until there are many, so pieces may be small; memory does not grow with the
    number of rows.

    Parameters
    ----------
    path : path
        The file, ending in ``.gpkg``.
    layers : iterable of str
        The layers it will have, in any order; one without rows stands there empty.
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
        The time of writing, such as ``2026-01-01T00:00:00.000Z``; now where not given. The same pieces
        and the same date give the same bytes; other pieces of the same rows the same rows.

    Raises
    ------
    OutputError
        The file is there and may not be replaced (code ``output-exists``), or it cannot be written
        (code ``output-not-writable``): when the block is entered, by :meth:`append`, or at its end.
    ValueError
        A layer is not registered, or there is none.

    Examples
    --------
    >>> from tempfile import TemporaryDirectory
    >>> piece = pa.table({"event": ["2-year"], "area": [10.0], "largest_depth": [0.5], "geometry": [None]})
    >>> piece = piece.set_column(3, "geometry", piece["geometry"].cast(pa.binary()))
    >>> options = {"units": "si", "crs": 26915, "description": "An example"}
    >>> with TemporaryDirectory() as folder:
    ...     with GeoPackageWriter(f"{folder}/a.gpkg", ["low_not_joined"], **options) as writer:
    ...         writer.append("low_not_joined", piece)
    ...         writer.append("low_not_joined", piece)
    ...     writer.counts
    {'low_not_joined': 2}
    """

    def __init__(
        self,
        path: str | os.PathLike,
        layers: Iterable[str],
        *,
        units: UnitSystem | str,
        crs,
        description: str,
        metadata: dict | None = None,
        overwrite: bool = False,
        date: str | None = None,
    ) -> None:
        wanted = set(layers)
        unknown = sorted(wanted - set(LAYERS))
        if unknown:
            raise ValueError(f"layers that are not registered: {', '.join(unknown)}")
        if not wanted:
            raise ValueError("no layer to write")
        self.path, self.units, self.crs = Path(path), unit_system(units), CRS.from_user_input(crs)
        self.counts: dict[str, int] = {name: 0 for name in LAYERS if name in wanted}
        """Rows taken so far, by layer in the order of the file."""
        about = {**(metadata or {}), "description": description, "caution": CAUTION, "units": self.units.name}
        self._about = json.dumps(plain(about), ensure_ascii=False, allow_nan=False)
        self._date = date or datetime.now(UTC).strftime("%Y-%m-%dT%H:%M:%S.000Z")
        self._overwrite = overwrite
        self._waiting: dict[str, list[pa.Table]] = {name: [] for name in self.counts}
        self._bytes = dict.fromkeys(self.counts, 0)
        self._measured: dict[str, list[tuple[pa.Array, np.ndarray]]] = {
            name: [] for name in EVENT_MEASURES if name in self.counts
        }
        self._stack = ExitStack()

    def __enter__(self) -> GeoPackageWriter:
        check_output(self.path.parent, self._overwrite, self.path.name)
        with ExitStack() as stack:
            self._temporary = stack.enter_context(whole_file(self.path))
            with self._saying_why():
                for name in self.counts:
                    self._write(name, _no_rows(LAYERS[name]))
                self._put_off = _put_off(self._temporary, self.counts)
            self._stack = stack.pop_all()
        return self

    def append(self, layer: str, table: pa.Table) -> None:
        """Take rows, which follow those that the layer has.

        Parameters
        ----------
        layer : str
            One of those the file was made for.
        table : pyarrow.Table
            The layer's columns of :data:`terrain2q.columns.LAYERS` in their order, float64, int64 or
            string, numbers in the units of the file; and, where the layer has shapes, a last column
            ``geometry`` of little-endian ISO WKB of the registered kind. NaN, null and empty shapes
            become NULL.

        Raises
        ------
        OutputError
            The file cannot be written (code ``output-not-writable``).
        ValueError
            The layer or its rows are not as registered: a mistake in the program, not in the inputs.
        """
        if layer not in self.counts:
            raise ValueError(f"the file was not made for the layer {layer}")
        table = _checked(LAYERS[layer], table)
        if not table.num_rows:
            return
        self._waiting[layer].append(table)
        self._bytes[layer] += table.nbytes
        self.counts[layer] += table.num_rows
        if layer in self._measured:
            # copies: a view would keep alive all that the rows came with
            measure = table[EVENT_MEASURES[layer]].to_numpy().copy()
            self._measured[layer].append((_encoded(table["event"]), measure))
        while sum(self._bytes.values()) > _WAITING_BYTES:
            # the layer with the most bytes goes first, so that each opening of the file is worth it
            self._write_out(max(self._bytes, key=self._bytes.get))

    def __exit__(self, kind, error, trace) -> bool | None:
        if kind is not None:
            return self._stack.__exit__(kind, error, trace)
        with self._stack:
            for name in self.counts:
                self._write_out(name)
            with self._saying_why():
                _bring_back(self._temporary, self._put_off, self.counts)
                styled = _describe(self._temporary, self._events(), self.units, self._about, self._date)
                # the record of a run will ask for the hash, and this looks at every byte as well
                with hashed_ahead([self._temporary]):
                    _check(self._temporary, self.counts | styled)
            check_output(self.path.parent, self._overwrite, self.path.name)
            _settle(self.path)
        return None

    def _events(self) -> dict[str, pd.DataFrame]:
        """Return each layer with no more of its columns than the tones of its events are found from."""
        tables = {name: pd.DataFrame() for name in self.counts}
        for name, pieces in self._measured.items():
            if pieces:
                events = pa.chunked_array([events.dictionary_decode() for events, _ in pieces])
                measures = np.concatenate([measures for _, measures in pieces])
                tables[name] = pd.DataFrame({"event": events.to_pandas(), EVENT_MEASURES[name]: measures})
        return tables

    def _write_out(self, name: str) -> None:
        tables, size = self._waiting[name], self._bytes[name]
        self._waiting[name], self._bytes[name] = [], 0
        if not tables:
            return
        table = pa.concat_tables(tables, promote_options="permissive")
        if size < _PIECE_BYTES * table.column(0).num_chunks:
            table = table.combine_chunks()
        with self._saying_why():
            self._write(name, table, append=True)

    def _write(self, name: str, table: pa.Table, *, append: bool = False) -> None:
        with _gdal_options(OGR_CURRENT_DATE=self._date, OGR_SQLITE_SYNCHRONOUS="OFF"):
            _write_rows(self._temporary, LAYERS[name], table, self.units, self.crs, append=append)

    @contextmanager
    def _saying_why(self) -> Iterator[None]:
        try:
            yield
        except (RuntimeError, sqlite3.Error, OSError) as error:  # pyogrio's own are RuntimeErrors
            raise not_writable(self.path, error) from error


def _linestring_zm_wkb(xyzm) -> bytes:
    # shapely's own constructors take no fourth coordinate.
    points = np.ascontiguousarray(xyzm, dtype="<f8").reshape(-1, 4)
    return struct.pack("<BII", 1, 3002, len(points)) + points.tobytes()


def _geometry_name(table: pd.DataFrame) -> str:
    return getattr(table, "active_geometry_name", None) or "geometry"


def _table(layer: Layer, table: pd.DataFrame, crs: CRS) -> pa.Table:
    """Return a frame as rows to write, checked."""
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
    columns = {name: _values(layer, COLUMNS[name], table[name]) for name in layer.columns}
    if layer.geometry:
        columns[GEOMETRY] = pa.array(_wkb(layer, table, crs), pa.large_binary())
    return pa.table(columns)


def _values(layer: Layer, column: Column, series: pd.Series) -> pa.Array:
    where = f"{layer.name}.{column.name}"
    empty = series.isna().to_numpy(dtype=bool)
    if column.dtype is str:
        values = series.to_numpy(dtype=object, copy=True)
        values[empty] = None
        wrong = next((value for value in values if value is not None and not isinstance(value, str)), None)
        if wrong is not None:
            raise ValueError(f"{where} holds {wrong!r}, which is not text")
        return pa.array(values, pa.large_string())
    if pd.api.types.is_bool_dtype(series) and not empty.all():
        raise ValueError(f"{where} holds true and false, not numbers")
    try:
        numbers = pd.to_numeric(series).to_numpy(dtype=float, na_value=np.nan)
    except (TypeError, ValueError) as error:
        raise ValueError(f"{where} holds what is not a number: {error}") from error
    if column.dtype is float:
        return pa.array(numbers)
    _check_finite(layer, column.name, numbers)
    if (numbers[~empty] != np.round(numbers[~empty])).any():
        raise ValueError(f"{where} holds a number that is not whole")
    return pa.array(np.where(empty, 0.0, numbers).astype(np.int64), mask=empty)


def _check_finite(layer: Layer, column: str, numbers: np.ndarray, first: int = 0) -> None:
    if np.isinf(numbers).any():
        row = first + int(np.argmax(np.isinf(numbers)))
        raise ValueError(f"{layer.name}.{column} holds an infinite number in row {row}")


def _checked(layer: Layer, table: pa.Table) -> pa.Table:
    """Return rows as they go into the file; raise where they are not as registered."""
    expected = [*layer.columns, *([GEOMETRY] if layer.geometry else [])]
    if table.column_names != expected:
        raise ValueError(f"columns of {layer.name}: {table.column_names}, not {expected}")
    columns = {}
    for name in layer.columns:
        values, kinds = table[name], _ARROW_TYPES[COLUMNS[name].dtype]
        if values.type not in kinds:
            raise ValueError(f"{layer.name}.{name} is {values.type}, not {kinds[0]}")
        if COLUMNS[name].dtype is float:
            first = 0
            for chunk in values.chunks:
                _check_finite(layer, name, chunk.to_numpy(zero_copy_only=False), first)
                first += len(chunk)
        columns[name] = values
    if layer.geometry:
        shapes = table[GEOMETRY]
        if shapes.type not in (pa.binary(), pa.large_binary()):
            raise ValueError(f"{layer.name}.{GEOMETRY} is {shapes.type}, not binary")
        columns[GEOMETRY] = pa.chunked_array([_shapes(layer, chunk) for chunk in shapes.chunks], shapes.type)
    return pa.table(columns)  # without what a schema may say beside names and types


def _shapes(layer: Layer, shapes: pa.Array) -> pa.Array:
    """Return WKB with null for empty shapes; raise where one is of another kind."""
    present = np.flatnonzero(shapes.is_valid().to_numpy(zero_copy_only=False))
    if not present.size:
        return shapes
    offset_type = np.int64 if shapes.type == pa.large_binary() else np.int32
    _, offsets, data = shapes.buffers()
    begins = np.frombuffer(offsets, offset_type)[shapes.offset :][: len(shapes) + 1].astype(np.int64)
    sizes, begins = np.diff(begins)[present], begins[present]
    data = np.frombuffer(data, np.uint8)
    point = layer.geometry == "Point"
    if (sizes < (21 if point else 9)).any():
        raise ValueError(f"{layer.name} holds geometries that are no WKB")
    kinds = data[begins[:, None] + np.arange(1, 5)].view("<u4").ravel()
    wrong = (data[begins] != 1) | (kinds != _WKB_KINDS[layer.geometry])
    if wrong.any():
        kind = int(kinds[np.argmax(wrong)])
        raise ValueError(f"{layer.name} holds geometries other than {layer.geometry}: WKB of kind {kind}")
    if point:
        empty = np.isnan(data[begins[:, None] + np.arange(5, 13)].view("<f8").ravel())
    else:
        empty = data[begins[:, None] + np.arange(5, 9)].view("<u4").ravel() == 0
    if not empty.any():
        return shapes
    mask = np.zeros(len(shapes), dtype=bool)
    mask[present[empty]] = True
    return pc.if_else(pa.array(mask), pa.scalar(None, shapes.type), shapes)


def _encoded(texts: pa.ChunkedArray) -> pa.Array:
    return texts.cast(pa.string()).combine_chunks().dictionary_encode()


def _no_rows(layer: Layer) -> pa.Table:
    kinds = {name: _ARROW_TYPES[COLUMNS[name].dtype][0] for name in layer.columns}
    if layer.geometry:
        kinds[GEOMETRY] = pa.binary()
    return pa.schema(kinds).empty_table()


def _wkb(layer: Layer, table: pd.DataFrame, crs: CRS) -> np.ndarray:
    """Return the geometries as ISO WKB with None where there is none."""
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


def _write_rows(
    path: Path, layer: Layer, table: pa.Table, units: UnitSystem, crs: CRS, *, append: bool
) -> None:
    """Make a layer with the rows of a table, or append them to it."""
    options = {"IDENTIFIER": layer.title, "DESCRIPTION": f"{layer.meaning} {_units_sentence(units)}"}
    if layer.geometry:
        options |= {"GEOMETRY_NAME": "geom", "SPATIAL_INDEX": "YES"}
    pyogrio.write_arrow(
        table,
        str(path),
        layer=layer.name,
        driver="GPKG",
        geometry_name=GEOMETRY if layer.geometry else None,
        geometry_type=_KINDS[layer.geometry][0] if layer.geometry else None,
        crs=crs.to_wkt() if layer.geometry else None,
        encoding="UTF-8",
        append=append,
        dataset_options={"VERSION": _VERSION} if not path.exists() else None,
        layer_options=None if append else options,
    )


@dataclass(frozen=True)
class _PutOff:
    """What tables lack while rows are written, to be given back."""

    tables: list[tuple[str, str]]
    """Statements that make them as they are to be in the end, each with the table's name."""
    indexes: list[tuple[str, ...]]
    """Rows of the list of extensions that stand for the spatial indexes."""
    made_by: list[str]
    """Statements that make the spatial indexes and their triggers."""


@contextmanager
def _edited(path: Path) -> Iterator[sqlite3.Connection]:
    with closing(sqlite3.connect(path)) as database:
        database.execute("PRAGMA synchronous = OFF")  # the whole file is flushed before it is renamed
        yield database
        database.commit()


def _put_off(path: Path, names: Iterable[str]) -> _PutOff:
    """Free empty tables of what costs time at each row; keep it where SQLite was built to refuse."""
    with closing(sqlite3.connect(path)) as database:
        made = dict(database.execute("SELECT name, sql FROM sqlite_master WHERE type = 'table'"))
    missing = [name for name in names if name not in made]
    if missing:
        raise sqlite3.DatabaseError(f"the layers {', '.join(missing)} could not be made")
    tables, indexes, made_by = [(name, made[name]) for name in names], [], []
    try:
        # For AUTOINCREMENT SQLite looks up and stores a table's last row number at each row, a quarter of a
        # row's time.
        with _edited(path) as database:
            _write_schema(database, [(name, sql.replace(" AUTOINCREMENT", "")) for name, sql in tables])
    except sqlite3.OperationalError:
        tables = []
    if "gpkg_extensions" in made:  # not where no layer has shapes
        with suppress(sqlite3.OperationalError), _edited(path) as database:
            indexes, made_by = _take_indexes(database)
    return _PutOff(tables, indexes, made_by)


def _take_indexes(database: sqlite3.Connection) -> tuple[list[tuple[str, ...]], list[str]]:
    """Remove the spatial indexes; return their rows among the extensions, and what makes them anew."""
    listed = "FROM gpkg_extensions WHERE extension_name = 'gpkg_rtree_index'"
    indexes = database.execute(f"SELECT * {listed} ORDER BY rowid").fetchall()
    parts = []
    for table, column, *_ in indexes:
        index = f"rtree_{table}_{column}"
        parts += database.execute(
            "SELECT type, name, sql FROM sqlite_master WHERE (type = 'table' AND name = ?) "
            "OR (type = 'trigger' AND tbl_name = ? AND substr(name, 1, ?) = ?) ORDER BY rowid",
            (index, table, len(index), index),
        ).fetchall()
    database.execute("BEGIN")
    for kind, name, _ in parts:
        database.execute(f'DROP {kind} "{name}"')
    database.execute(f"DELETE {listed}")
    return indexes, [sql for _, _, sql in parts]


def _bring_back(path: Path, put_off: _PutOff, counts: Mapping[str, int]) -> None:
    """Give tables with all their rows back what was put off, and fill their spatial indexes."""
    if put_off.tables:
        with _edited(path) as database:
            _write_schema(database, put_off.tables)
            database.executemany(
                "INSERT INTO sqlite_sequence VALUES (?, ?)",
                [(name, counts[name]) for name, _ in put_off.tables if counts[name]],
            )
    if put_off.indexes:
        with _edited(path) as database:
            database.execute("BEGIN")
            for statement in put_off.made_by:
                database.execute(statement)
            for table, column, *_ in put_off.indexes:
                fill_index(database, table, column)
            database.executemany("INSERT INTO gpkg_extensions VALUES (?, ?, ?, ?, ?)", put_off.indexes)


def _write_schema(database: sqlite3.Connection, tables: Iterable[tuple[str, str]]) -> None:
    # The way that SQLite's page on ALTER TABLE gives for changes that leave what is stored as it is.
    database.execute("PRAGMA writable_schema = ON")
    database.executemany(
        "UPDATE sqlite_master SET sql = ? WHERE type = 'table' AND name = ?", [(sql, n) for n, sql in tables]
    )
    database.execute("PRAGMA writable_schema = OFF")


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
    for layer in (LAYERS[name] for name in layers):
        described = [(column.name, column_title(column, units), column_description(column, units))
                     for column in (FID, *(COLUMNS[name] for name in layer.columns))]  # fmt: skip
        if layer.geometry:
            shape = layer.shape
            if layer.geometry == "LineString ZM":
                shape += f" Unit of z and m: {units.symbol('length')}."
            described.insert(1, ("geom", "Geometry", shape))
        # `name` is what a GIS shows as the column's alias, so it carries the unit as well.
        rows += [(layer.name, name, title, title, text) for name, title, text in described]
    with _edited(path) as database:
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
    return {STYLES_TABLE: styles}


def _check(path: Path, counts: dict[str, int]) -> None:
    """Raise sqlite3.DatabaseError where the file is not what was to be written."""
    with closing(sqlite3.connect(path)) as database:
        database.execute(f"PRAGMA mmap_size = {_MAPPED_BYTES}")
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
