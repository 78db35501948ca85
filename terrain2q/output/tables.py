"""The layers once more as CSV or Parquet, for programs that read no GeoPackage.

CSV files have the columns' names as header, and places of points as ``x`` and ``y``; lines and polygons
are left out, as they would not fit a cell. ``results_columns.csv`` says title, unit and meaning of every
column. Parquet files have whole geometries (GeoParquet) and carry title, unit and meaning with each
column.
"""

from __future__ import annotations

import os
from pathlib import Path
from typing import Any

import geopandas
import numpy as np
import pandas as pd
import pyarrow
import pyarrow.parquet
import shapely

from terrain2q.columns import COLUMNS, LAYERS
from terrain2q.output.folder import OutputFolder, read_folder
from terrain2q.output.whole_file import not_writable, whole_file

NONE, CSV, PARQUET, BOTH = "none", "csv", "parquet", "both"
TABLE_CHOICES = (NONE, CSV, PARQUET, BOTH)

COLUMNS_NAME = "results_columns.csv"


def write_tables(source: OutputFolder | str | os.PathLike, asked: str) -> list[Path]:
    """Write every layer of an output folder as a table beside it.

    Parameters
    ----------
    source : OutputFolder or path
        The folder, or what was read from it.
    asked : str
        One of :data:`TABLE_CHOICES`.

    Returns
    -------
    list of pathlib.Path
        ``results_<layer>.csv`` with ``results_columns.csv``, ``results_<layer>.parquet``, or both.

    Raises
    ------
    InputError
        The folder has no results.
    OutputError
        A file cannot be written (code ``output-not-writable``).
    """
    if not isinstance(source, OutputFolder):
        source = read_folder(source)
    if source.folder is None:
        raise ValueError("tables stand beside the layers of a folder")
    written = []
    if asked in (CSV, BOTH):
        for name, table in source.layers.items():
            written.append(_write(source.folder / f"results_{name}.csv", _write_csv, _flat(name, table)))
        written.append(_write(source.folder / COLUMNS_NAME, _write_csv, _columns(source)))
    if asked in (PARQUET, BOTH):
        for name, table in source.layers.items():
            path = source.folder / f"results_{name}.parquet"
            written.append(_write(path, _write_parquet, table, source))
    return written


def _write(path: Path, how: Any, *what: Any) -> Path:
    with whole_file(path) as temporary:
        try:
            how(temporary, *what)
        except OSError as error:
            raise not_writable(path, error) from error
    return path


def _write_csv(path: Path, table: pd.DataFrame) -> None:
    table.to_csv(path, index=False, encoding="utf-8", lineterminator="\n")


def _flat(name: str, table: pd.DataFrame) -> pd.DataFrame:
    """Return a layer without its geometry; points as two columns."""
    flat = pd.DataFrame(table.drop(columns="geometry", errors="ignore"))
    if LAYERS[name].geometry == "Point" and "geometry" in table:
        points = np.asarray(table["geometry"], dtype=object)
        flat["x"], flat["y"] = shapely.get_x(points), shapely.get_y(points)
    return flat


def _columns(source: OutputFolder) -> pd.DataFrame:
    rows = []
    for name, table in source.layers.items():
        for column in table.columns:
            if column == "geometry":
                if LAYERS[name].geometry == "Point":
                    place = f"In {source.crs.name}."
                    rows += [(name, axis, axis, "", f"Coordinate of the point. {place}") for axis in "xy"]
                continue
            about = COLUMNS[column]
            rows.append((name, column, about.title, source.units.symbol(about.quantity), about.meaning))
    return pd.DataFrame(rows, columns=["layer", "column", "title", "unit", "meaning"])


def _write_parquet(path: Path, table: pd.DataFrame, source: OutputFolder) -> None:
    if "geometry" in table:
        table = geopandas.GeoDataFrame(table, geometry="geometry", crs=source.crs)
    table.to_parquet(path, index=False)
    # once more, with what each column means
    read = pyarrow.parquet.read_table(path)
    fields = [
        field.with_metadata(_about(field.name, source)) if field.name in COLUMNS else field
        for field in read.schema
    ]
    schema = pyarrow.schema(fields, metadata=read.schema.metadata)
    pyarrow.parquet.write_table(read.cast(schema), path)


def _about(name: str, source: OutputFolder) -> dict[str, str]:
    column = COLUMNS[name]
    return {
        "title": column.title,
        "unit": source.units.symbol(column.quantity),
        "meaning": column.meaning,
    }
