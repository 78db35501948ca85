"""Layers as Arrow tables: many rows at once, without an object for any of them."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING

import numpy as np
import pyarrow as pa
import pyproj

from terrain2q.columns import COLUMNS, LAYERS
from terrain2q.units import UnitSystem

if TYPE_CHECKING:
    import pandas as pd

GEOMETRY = "geometry"
"""The column with shapes, as ISO WKB."""

_TYPES = {float: pa.float64(), int: pa.int64(), str: pa.string()}


def arrow_table(
    layer: str,
    columns: Mapping[str, object],
    units: UnitSystem,
    geometry: tuple[np.ndarray, np.ndarray] | None = None,
) -> pa.Table:
    """Return a table with the layer's columns in order, numbers turned into the study's units.

    Parameters
    ----------
    layer : str
    columns : mapping of str to ndarray, sequence or pyarrow.Array
        Numbers in SI.
    units : UnitSystem
    geometry : (offsets, data), optional
        WKB of each row: where it begins, shape (n + 1,), and the bytes; the column is called `GEOMETRY`.
    """
    out = {}
    for name in LAYERS[layer].columns:
        column, values = COLUMNS[name], columns[name]
        if column.dtype is float:
            factor = units.per_si(column.quantity)
            values = np.asarray(values, dtype=float)
            values = pa.array(values if factor == 1.0 else values * factor)
        elif not isinstance(values, pa.Array):
            values = pa.array(values, _TYPES[column.dtype])
        elif values.type != _TYPES[column.dtype]:
            values = values.cast(_TYPES[column.dtype])
        out[name] = values
    if geometry is not None:
        out[GEOMETRY] = _binary(*geometry)
    return pa.table(out)


def _binary(offsets: np.ndarray, data: np.ndarray) -> pa.Array:
    if data.size > 2**31 - 1:
        kind, offsets = pa.large_binary(), offsets.astype(np.int64)
    else:
        kind, offsets = pa.binary(), offsets.astype(np.int32)
    return pa.Array.from_buffers(kind, offsets.size - 1, [None, pa.py_buffer(offsets), pa.py_buffer(data)])


def table_of_frame(layer: str, frame: pd.DataFrame) -> pa.Table:
    """Return a layer that was made as a frame as a table; its numbers stay in their units."""
    import shapely

    out = {}
    for name in LAYERS[layer].columns:
        kind = COLUMNS[name].dtype
        values = frame[name].to_numpy(dtype=object if kind is str else None)
        out[name] = pa.array(values, _TYPES[kind], from_pandas=kind is str)
    if LAYERS[layer].geometry:
        shapes = frame[GEOMETRY].to_numpy()
        out[GEOMETRY] = pa.array(
            shapely.to_wkb(shapes, output_dimension=4, byte_order=1, flavor="iso"), pa.binary()
        )
    return pa.table(out)


def to_crs(x: np.ndarray, y: np.ndarray, source, target) -> tuple[np.ndarray, np.ndarray]:
    """Return coordinates in another CRS, x eastward first; unchanged where both are one."""
    source, target = pyproj.CRS.from_user_input(source), pyproj.CRS.from_user_input(target)
    if source.equals(target, ignore_axis_order=True) or not x.size:
        return x, y
    return pyproj.Transformer.from_crs(source, target, always_xy=True).transform(x, y)
