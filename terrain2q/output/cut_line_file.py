"""Laid-out cut lines as a GeoPackage to edit: read back, told apart from edited ones, written whole."""

from __future__ import annotations

import hashlib
import os
import sqlite3
from contextlib import closing
from pathlib import Path

import geopandas
import numpy as np
import pyogrio
import shapely

from terrain2q.errors import InputError
from terrain2q.ground.layers import clean_texts, read_layer
from terrain2q.output.geopackage import _settle, check_output
from terrain2q.output.whole_file import not_writable, whole_file
from terrain2q.units import UnitSystem

LAYER = "cut_lines"
COLUMNS = ("section_id", "stream", "stream_distance", "laid_out")


def mark(geometry: shapely.Geometry | None) -> str:
    """Return a text that changes when a line is moved by a millimetre or more; empty where there is none.

    Examples
    --------
    >>> mark(shapely.LineString([(0, 0), (1, 1)])) == mark(shapely.LineString([(0, 0), (1, 1.1)]))
    False
    """
    if geometry is None or geometry.is_empty:
        return ""
    xy = shapely.get_coordinates(geometry)
    # A millimetre on the ground, in degrees as well as in metres and feet.
    small = np.abs(xy).max() <= 400.0
    text = (np.round(xy, 8 if small else 3) + 0.0).tobytes()
    return hashlib.sha256(text).hexdigest()[:16]


def read_cut_line_file(path: str | os.PathLike) -> geopandas.GeoDataFrame | None:
    """Return the lines of an earlier layout, the person's own among them; None where there are none.

    Parameters
    ----------
    path : path

    Returns
    -------
    geopandas.GeoDataFrame or None
        The layer ``cut_lines`` as it is, with a column ``edited``: whether a person drew or changed the
        line. Rows without geometry are left out.

    Raises
    ------
    InputError
        The file cannot be read (code ``file-unreadable``) or its lines are not lines.
    """
    path = Path(path)
    if not path.exists():
        return None
    try:
        names = {str(name) for name in pyogrio.list_layers(path)[:, 0]}
        empty = (
            LAYER not in names
            or not pyogrio.read_info(path, layer=LAYER, force_feature_count=True)["features"]
        )
    except Exception as error:  # the reader's own exceptions differ by format
        raise InputError(
            "file-unreadable", f"{path.name} is not a GeoPackage: {error}", where=str(path),
            fix="give another file to write to",
        ) from error  # fmt: skip
    if empty:
        return None
    frame = read_layer(f"{path}|layer={LAYER}", purpose="cut lines", geometry="line")
    shapes = frame.geometry.to_numpy()
    frame = frame[~(shapely.is_missing(shapes) | shapely.is_empty(shapes))].reset_index(drop=True)
    marks = clean_texts(frame["laid_out"]) if "laid_out" in frame.columns else [""] * len(frame)
    frame["edited"] = [
        not given or given != mark(shape) for given, shape in zip(marks, frame.geometry, strict=True)
    ]
    return frame


def write_cut_line_file(
    path: str | os.PathLike, lines: geopandas.GeoDataFrame, units: UnitSystem, edited: np.ndarray
) -> None:
    """Write cut lines into the layer ``cut_lines`` of a GeoPackage; its other layers stay.

    A reader of `path` sees the earlier file or the whole new one at every moment.

    Parameters
    ----------
    path : path
        Ending in ``.gpkg``.
    lines : geopandas.GeoDataFrame
        With the columns section_id, stream, stream_distance (in `units`) and any others.
    units : UnitSystem
    edited : ndarray of bool, shape (n,)
        The lines that a person drew or changed. The others get a mark in the column ``laid_out``, by
        which the next layout knows them.

    Raises
    ------
    OutputError
        Code ``output-not-writable``.
    """
    target = Path(path)
    lines = lines.copy()
    marks = [None if own else mark(shape) for shape, own in zip(lines.geometry, edited, strict=True)]
    lines["laid_out"] = np.array(marks, dtype=object)
    others = [c for c in lines.columns if c not in COLUMNS and c != lines.geometry.name]
    lines = lines[[*COLUMNS, *others, lines.geometry.name]]
    parts = (lines.geom_type == "MultiLineString").any()
    about = (
        f"Cut lines from left to right looking downstream. stream_distance is in {units.symbol('length')}. "
        "Move, add and delete lines as needed: what a person has changed is kept when lines are laid out "
        "again. laid_out is the mark of a line nobody has changed."
    )
    check_output(target.parent, True, target.name)
    with whole_file(target) as temporary:
        try:
            if target.exists():
                # Not a plain copy: what a GIS that has it open keeps beside it belongs to it.
                with closing(sqlite3.connect(target)) as old, closing(sqlite3.connect(temporary)) as new:
                    old.backup(new)
            pyogrio.write_dataframe(
                lines,
                temporary,
                layer=LAYER,
                driver="GPKG",
                geometry_type="MultiLineString" if parts else "LineString",
                promote_to_multi=bool(parts),
                layer_options={"IDENTIFIER": "Cut lines", "DESCRIPTION": about, "GEOMETRY_NAME": "geom"},
            )
        except (RuntimeError, sqlite3.Error, OSError) as error:  # pyogrio's own are RuntimeErrors
            raise not_writable(target, error) from error
        _settle(target)
