"""Reading vector layers and tables: every check a reader needs before the work starts, in one place."""

from __future__ import annotations

import difflib
import re
import warnings
from collections import Counter
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import pyproj
import shapely

from terrain2q.errors import Finding, InputError
from terrain2q.ground.distances import horizontal_crs

if TYPE_CHECKING:
    import geopandas
    import pandas

GEOMETRY_KINDS = {
    "line": ("LineString", "MultiLineString"),
    "polygon": ("Polygon", "MultiPolygon"),
    "point": ("Point",),
}
"""Geometry types that a layer of each kind may hold."""

_ID_FIELDS = {
    "cut lines": ("section_id", "cut_line_id", "line_id"),
    "streams": ("stream_id",),
    "crossings": ("crossing_id",),
}
_COMMON_ID_FIELDS = ("id", "name", "fid")
LARGE_LAYER = 50_000
"""Features above which a layer is read only where it is needed; fewer are soon read."""

_WHOLE_NUMBER = re.compile(r"([+-]?\d+)\.0*")
_SHOWN = 5

# by name, so that text can be had without loading pandas
_MISSING = frozenset({"NAType", "NaTType"})


def clean_text(value: object) -> str:
    """Return an id or a class as text, the same whether it was stored as text, integer or float.

    Parameters
    ----------
    value : object
        Anything a table or layer holds. None, NaN and blank text give an empty string.

    Examples
    --------
    >>> clean_text(41), clean_text(41.0), clean_text(" 41.0 "), clean_text("041"), clean_text(None)
    ('41', '41', '41', '041', '')
    """
    if value is None or type(value).__name__ in _MISSING:
        return ""
    if isinstance(value, (float, np.floating)):
        if np.isnan(value):
            return ""
        if np.isfinite(value) and value == np.floor(value) and abs(value) < 1e15:
            return str(int(value))
    text = str(value).strip()
    whole = _WHOLE_NUMBER.fullmatch(text)
    return whole.group(1) if whole else text


def clean_texts(values: Sequence | pandas.Series) -> list[str]:
    """Return :func:`clean_text` of many values, each distinct value looked at once."""
    import pandas

    codes, distinct = pandas.factorize(np.asarray(values, dtype=object), use_na_sentinel=True)
    texts = [clean_text(value) for value in distinct]
    return [texts[code] if code >= 0 else "" for code in codes]


def split_spec(text: str | Path) -> tuple[Path, str | None]:
    """Split ``path|layer=name`` into the path and the layer's name.

    Parameters
    ----------
    text : str or Path
        A path, with or without a layer.

    Returns
    -------
    tuple of Path and str or None
        The layer is None where none is named.

    Raises
    ------
    InputError
        Something other than ``layer=name`` follows the bar (code ``value-not-allowed``).

    Examples
    --------
    >>> path, layer = split_spec("data.gpkg|layer=cut lines")
    >>> path.name, layer
    ('data.gpkg', 'cut lines')
    """
    path, bar, rest = str(text).partition("|")
    if not bar:
        return Path(path.strip()), None
    key, equals, layer = rest.partition("=")
    # GDAL's users also write layername; both mean the same.
    if not equals or key.strip().lower() not in ("layer", "layername") or not layer.strip():
        raise InputError(
            "value-not-allowed",
            f"{rest!r} after the bar does not name a layer",
            where=str(text),
            fix="write the layer as data.gpkg|layer=name",
        )
    return Path(path.strip()), layer.strip()


def read_layer(
    spec: str | Path,
    *,
    purpose: str,
    geometry: str,
    crs: object = None,
    id_field: str | None = None,
    repeated_ids: bool = False,
    within: tuple[float, float, float, float] | None = None,
) -> geopandas.GeoDataFrame:
    """Read one vector layer, checked and brought to one CRS.

    Parameters
    ----------
    spec : str or Path
        A path, or ``path|layer=name``. The layer may be left out where the file has one only.
    purpose : str
        What the layer is for, in the words of the errors: ``cut lines``, ``streams``, ``land cover``, ...
    geometry : str
        ``line``, ``polygon`` or ``point``. Multipart features count as their parts' kind; of points only
        those of a single part, which is what many a GIS makes of plain points.
    crs : object, optional
        CRS to bring the layer to (anything pyproj takes); its horizontal part is used.
    id_field : str, optional
        Column with the ids. Where it is None the first usable one of ``section_id`` (cut lines),
        ``stream_id`` (streams), ``crossing_id`` (crossings), ``id``, ``name``, ``fid`` is taken, else the
        features are numbered from 1.
    repeated_ids : bool
        Whether several features may share an id, as parts of one stream do.
    within : tuple of four floats, optional
        Least x, least y, greatest x, greatest y in `crs`. Of a layer of more than `LARGE_LAYER` features only
        those near these bounds are read, by the file's spatial index; a smaller one is read whole.

    Returns
    -------
    geopandas.GeoDataFrame
        The layer's columns and geometry (z and m dropped), with a column ``feature_id`` (str) added. Rows
        without geometry are kept. ``attrs["source"]`` holds `spec` as text, ``attrs["in_part"]`` whether
        features were left out.

    Raises
    ------
    InputError
        Codes ``file-missing``, ``file-unreadable``, ``layer-missing``, ``layer-empty``, ``geometry-kind``,
        ``crs-missing``, ``crs-unknown``, ``field-missing``, ``id-duplicate``, ``id-missing``.
    """
    import geopandas
    import pyogrio

    path, layer = split_spec(spec)
    where = f"{purpose}: {spec}"
    if not path.exists():
        raise InputError("file-missing", f"{path} is not there", where=where)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            layers = [str(name) for name in pyogrio.list_layers(path)[:, 0]]
    except Exception as error:  # the reader's own exceptions differ by format
        raise InputError(
            "file-unreadable", f"{path.name} is not a vector file: {error}", where=where
        ) from error
    if layer is None and len(layers) != 1:
        raise InputError(
            "layer-missing",
            f"{path.name} holds {len(layers)} layers and none is named: {', '.join(layers) or 'none'}",
            where=where,
            fix=f"name one of them, as {path.name}|layer={layers[0]}"
            if layers
            else "give a file that has layers",
        )
    if layer is None:
        layer = layers[0]
    elif layer not in layers:
        raise InputError(
            "layer-missing", f"{path.name} has no layer {layer!r}; it has {', '.join(layers)}", where=where
        )

    frame, fid_column, in_part = _read(path, layer, where, crs, within)
    if len(frame) == 0:
        raise InputError("layer-empty", f"layer {layer!r} of {path.name} has no features", where=where)
    if not isinstance(frame, geopandas.GeoDataFrame):
        raise InputError(
            "geometry-kind",
            f"layer {layer!r} of {path.name} is a table without geometry; {purpose} need {geometry}s",
            where=where,
        )
    if geometry == "point":
        frame = frame.set_geometry(_single_points(frame.geometry.to_numpy()), crs=frame.crs)
    _check_geometry(frame, geometry, purpose, layer, path, where)
    if frame.crs is None:
        raise InputError("crs-missing", f"layer {layer!r} of {path.name} has no CRS", where=where)
    frame["feature_id"] = _ids(frame, id_field, fid_column, repeated_ids, purpose, where)
    frame = frame.reset_index(drop=True)
    if crs is not None:
        frame = reproject(frame, crs, where)
    frame.attrs["source"] = str(spec)
    frame.attrs["in_part"] = in_part
    return frame


def texts_in(spec: str | Path, name: str) -> list[str]:
    """Return the different texts in a column of a whole layer, clean, without reading its geometry."""
    import pyogrio

    path, layer = split_spec(spec)
    _, table = pyogrio.read_arrow(path, layer=layer, columns=[name], read_geometry=False)
    return clean_texts(table[name].unique().to_pylist())


def _near(info: dict, crs: object, within: tuple | None) -> tuple | None:
    """Return bounds in a large layer's own CRS, a little wider; None where it is to be read whole."""
    if within is None or info["features"] <= LARGE_LAYER or info["crs"] is None or crs is None:
        return None
    try:
        back = pyproj.Transformer.from_crs(horizontal_crs(crs), horizontal_crs(info["crs"]), always_xy=True)
        left, bottom, right, top = back.transform_bounds(*within, densify_pts=21)
    except (InputError, pyproj.exceptions.ProjError):
        return None
    wider = 0.05 * max(right - left, top - bottom)
    bounds = (left - wider, bottom - wider, right + wider, top + wider)
    # bounds that reach over the 180th meridian come back with their ends exchanged
    return bounds if np.isfinite(bounds).all() and left <= right else None


def _read(path: Path, layer: str, where: str, crs: object, within: tuple | None):
    import geopandas
    import pyogrio

    try:
        with warnings.catch_warnings():
            # A note on m values and the like: plan geometry is all that is used here.
            warnings.simplefilter("ignore")
            info = pyogrio.read_info(path, layer=layer)
            how = {"layer": layer, "force_2d": True, "fid_as_index": True}
            near = _near(info, crs, within)
            frame = pyogrio.read_dataframe(path, bbox=near, **how)
            if near is not None and not len(frame):  # nothing is there: let it be said of the whole
                near, frame = None, pyogrio.read_dataframe(path, **how)
            if isinstance(frame, geopandas.GeoDataFrame):
                frame = frame.set_geometry(in_plan(frame.geometry.to_numpy()), crs=frame.crs)
    except Exception as error:  # the reader's own exceptions differ by format
        raise InputError("file-unreadable", f"{path.name} cannot be read: {error}", where=where) from error
    if near is None and not info["fid_column"]:
        frame = frame.reset_index(drop=True)  # a format's own numbers may have gaps
    return frame, info["fid_column"], near is not None


def in_plan(shapes: np.ndarray) -> np.ndarray:
    """Return a copy of an array of shapes without z and m; only shapes that have these are made anew."""
    shapes = shapes.copy()
    more = shapely.get_coordinate_dimension(shapes) > 2
    shapes[more] = shapely.force_2d(shapes[more])
    return shapes


def _single_points(shapes: np.ndarray) -> np.ndarray:
    """Return shapes with each multipoint of one part as that point."""
    shapes = shapes.copy()
    one = shapely.get_type_id(shapes) == shapely.GeometryType.MULTIPOINT
    one &= shapely.get_num_geometries(shapes) == 1
    shapes[one] = shapely.get_geometry(shapes[one], 0)
    return shapes


def _check_geometry(frame, geometry: str, purpose: str, layer: str, path: Path, where: str) -> None:
    shapes = frame.geometry.to_numpy()
    present = ~(shapely.is_missing(shapes) | shapely.is_empty(shapes))
    if not present.any():
        raise InputError(
            "layer-empty",
            f"none of the {len(frame)} features of layer {layer!r} of {path.name} has geometry",
            where=where,
        )
    kinds = frame.geometry[present].geom_type
    wrong = kinds[~kinds.isin(GEOMETRY_KINDS[geometry])]
    if len(wrong):
        counts = ", ".join(f"{count} {kind}" for kind, count in wrong.value_counts().items())
        raise InputError(
            "geometry-kind",
            f"{purpose} need {geometry}s; layer {layer!r} of {path.name} holds {counts}",
            where=where,
        )


def reproject(frame: geopandas.GeoDataFrame, crs: object, where: str = "") -> geopandas.GeoDataFrame:
    """Bring a plan layer to another CRS; z and heights play no part.

    Parameters
    ----------
    frame : geopandas.GeoDataFrame
        A layer with a CRS. Missing geometry stays missing.
    crs : object
        Anything pyproj takes. The answer carries it unchanged, also where it is compound.
    where : str
        The place named in an error.

    Raises
    ------
    InputError
        The CRS is not recognised, or there is no way from one to the other (code ``crs-unknown``).
    """
    target = horizontal_crs(crs)
    source = horizontal_crs(frame.crs)
    if source != target:
        try:
            frame = frame.set_crs(source, allow_override=True).to_crs(target)
        except pyproj.exceptions.ProjError as error:
            raise InputError(
                "crs-unknown",
                f"there is no way from {source.name!r} to {target.name!r}: {error}",
                where=where,
                fix="bring the layer to the terrain's CRS with a GIS first",
            ) from error
    return frame.set_crs(pyproj.CRS.from_user_input(crs), allow_override=True)


def columns_of(frame: pandas.DataFrame) -> list[str]:
    """Return the columns a user knows: without the geometry and without what was added on reading."""
    import geopandas

    hidden = {"feature_id"}
    if isinstance(frame, geopandas.GeoDataFrame):
        hidden.add(frame.geometry.name)
    return [str(name) for name in frame.columns if name not in hidden]


def require_field(frame: pandas.DataFrame, field: str, *, key: str, where: str) -> None:
    """Raise ``field-missing`` where a layer has no column `field`, naming the columns it has.

    Parameters
    ----------
    frame : DataFrame
        The layer or table.
    field : str
        The column that is needed.
    key : str
        What asked for it, e.g. ``class_field``.
    where : str
        The file and layer.
    """
    if field in columns_of(frame):
        return
    known = columns_of(frame)
    near = difflib.get_close_matches(field, known, n=1)
    listed = f"the columns are {', '.join(known)}" if known else "it has no columns"
    raise InputError(
        "field-missing",
        f"{key}: there is no column {field!r}; {listed}",
        fix=f"did you mean {near[0]!r}?" if near else "",
        where=where,
    )


def _ids(frame, id_field: str | None, fid_column: str, repeated: bool, purpose: str, where: str) -> list[str]:
    fids = [str(fid) for fid in frame.index] if fid_column else []
    if id_field is not None:
        if fids and id_field == fid_column and id_field not in frame.columns:
            return fids
        require_field(frame, id_field, key="id_field", where=where)
        ids = clean_texts(frame[id_field])
        missing = [number for number, text in enumerate(ids, 1) if not text]
        if missing:
            raise InputError(
                "id-missing",
                f"{len(missing)} of {len(ids)} features have no {id_field!r}: feature {_first(missing)}",
                where=where,
            )
        doubles = [f"{text!r} ({count} times)" for text, count in Counter(ids).items() if count > 1]
        if doubles and not repeated:
            raise InputError(
                "id-duplicate",
                f"ids in {id_field!r} that are not unique: {_first(doubles)}",
                where=where,
            )
        return ids
    # A default must never stop anybody: a column that does not serve as id is passed over.
    by_lower = {str(name).lower(): name for name in reversed(columns_of(frame))}
    for name in (*_ID_FIELDS.get(purpose, ()), *_COMMON_ID_FIELDS):
        if name in by_lower:
            ids = clean_texts(frame[by_lower[name]])
            if all(ids) and (repeated or len(set(ids)) == len(ids)):
                return ids
        elif fids and name == fid_column.lower():
            return fids
    # rows count from 0 in the index, also where some were left out
    return fids or [str(int(row) + 1) for row in frame.index]


def _first(items: list) -> str:
    shown = ", ".join(str(item) for item in items[:_SHOWN])
    return shown + (f" and {len(items) - _SHOWN} more" if len(items) > _SHOWN else "")


def read_table(
    path: str | Path, columns: Sequence[str], purpose: str, optional: Sequence[str] = ()
) -> pandas.DataFrame:
    """Read a CSV table as text, with the columns that are needed.

    Parameters
    ----------
    path : str or Path
        A CSV file with a header, commas, UTF-8.
    columns : sequence of str
        Columns it must have; capitals in the header do not matter.
    purpose : str
        What the table is for, in the words of the errors.
    optional : sequence of str
        Columns it may have, renamed to these spellings likewise.

    Returns
    -------
    pandas.DataFrame
        Every cell as text without blanks around it, empty where nothing stands. Rows without anything are
        dropped. ``attrs["source"]`` holds the path, the index the line in the file (header = 1, as long
        as no cell holds a line break).

    Raises
    ------
    InputError
        Codes ``file-missing``, ``file-unreadable``, ``field-missing``, ``layer-empty``.
    """
    import pandas

    path = Path(path)
    where = f"{purpose}: {path}"
    if not path.is_file():
        raise InputError("file-missing", f"{path} is not there", where=where)
    try:
        with warnings.catch_warnings():
            # A row longer than the header would lose its end with no more than a warning.
            warnings.simplefilter("error", pandas.errors.ParserWarning)
            table = pandas.read_csv(
                path,
                dtype=str,
                keep_default_na=False,
                encoding="utf-8-sig",
                skip_blank_lines=False,
                index_col=False,
            )
    except pandas.errors.EmptyDataError:
        raise InputError(
            "layer-empty", f"{path.name} is empty", where=where, fix="give a table with rows"
        ) from None
    except pandas.errors.ParserWarning as error:
        with path.open(encoding="utf-8-sig") as file:
            semicolons = ";" in (header := file.readline()) and "," not in header
        if semicolons:
            raise InputError(
                "file-unreadable",
                f"{path.name} has semicolons between its columns, and commas in its rows",
                where=where,
                fix="separate the columns with commas, and write decimals with a point",
            ) from error
        raise InputError("file-unreadable", f"{path.name}: {error}", where=where) from error
    except (ValueError, OSError) as error:  # the parser's errors and a wrong encoding are ValueErrors
        raise InputError(
            "file-unreadable", f"{path.name} is not a CSV table in UTF-8: {error}", where=where
        ) from error
    wanted = {name.lower(): name for name in (*columns, *optional)}
    headers = [str(name).strip() for name in table.columns]
    table.columns = [wanted.get(name.lower(), name) for name in headers]
    missing = [name for name in columns if name not in table.columns]
    if missing:
        semicolons = len(headers) == 1 and (";" in headers[0] or "\t" in headers[0])
        raise InputError(
            "field-missing",
            f"there is no column {', '.join(map(repr, missing))}; the columns are {', '.join(headers)}",
            where=where,
            fix="separate the columns with commas" if semicolons else "",
        )
    twice = [name for name in wanted.values() if list(table.columns).count(name) > 1]
    if twice:
        raise InputError("file-unreadable", f"{path.name} has the column {twice[0]!r} twice", where=where)
    table.index = pandas.RangeIndex(2, len(table) + 2)
    table = table.fillna("").apply(lambda column: column.str.strip())
    table = table[(table != "").any(axis=1)]
    if len(table) == 0:
        raise InputError("layer-empty", f"{path.name} has no rows", where=where, fix="give a table with rows")
    table.attrs["source"] = str(path)
    return table


def ignored_columns(table: pandas.DataFrame, known: Sequence[str], layer: str) -> list[Finding]:
    """Return a finding for each column that is not used but is spelled nearly like one that would be.

    Parameters
    ----------
    table : pandas.DataFrame
        As read by :func:`read_table`.
    known : sequence of str
        Columns that are used.
    layer : str
        The layer name the findings carry.
    """
    findings = []
    for name in map(str, table.columns):
        if name in known:
            continue
        near = difflib.get_close_matches(
            name.lower(), [k for k in known if k not in table.columns], n=1, cutoff=0.7
        )
        if near:
            message = (
                f"column {name!r} of {table.attrs.get('source', 'the table')} is not used; is it {near[0]!r}?"
            )
            findings.append(Finding("column-ignored", message, layer))
    return findings
