"""``terrain2q start``: look at a folder, recognise its data, write a study file to fill in.

What is recognised is written as a value, what was only likely is called a guess, and what was not found
is left as a comment. Nothing is invented: a slope, a roughness or a discharge is never filled in.
"""

from __future__ import annotations

import csv
import os
import warnings
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np
import pyogrio
import pyproj
import rasterio
import shapely
from rasterio.errors import NotGeoreferencedWarning, RasterioError

from terrain2q.errors import InputError, OutputError
from terrain2q.ground.layers import clean_texts
from terrain2q.ground.terrain import Terrain
from terrain2q.study import DEFAULTED, NEEDED_TO_RUN, TABLES, keys_of, shown_default

STUDY_FILE = "study.toml"

RASTERS = (".tif", ".tiff", ".vrt", ".img", ".asc", ".bil", ".flt", ".dem", ".hgt")
VECTORS = (".gpkg", ".shp", ".geojson", ".json", ".fgb", ".gml", ".kml")

DEM_WORDS = ("dem", "dtm", "elev", "terrain", "lidar", "ground", "bare")
NOT_DEM_WORDS = (
    "slope", "aspect", "shade", "depth", "cover", "class", "nlcd", "lulc", "canopy", "intensity",
    "accum", "direction", "fdr", "dsm", "surface", "mask",
)  # fmt: skip
COVER_WORDS = ("cover", "land", "lulc", "class", "vegetation", "roughness")
CHANNEL_WORDS = ("channel", "water", "river", "bank")
STREAM_WORDS = ("stream", "creek", "river", "flow", "brook", "centerline", "centreline", "thalweg")
CUT_WORDS = ("cut", "section", "xs", "transect", "profile")
ROAD_WORDS = ("road", "street", "highway", "rail", "track")
CLASS_WORDS = ("class", "cover", "lulc", "landuse", "land_use", "type", "code", "descr")
SLOPE_WORDS = ("slope", "gradient", "grade")
ID_FIELDS = {
    "cut_lines": ("section_id", "cut_line_id", "line_id", "id", "name"),
    "streams": ("stream_id", "stream", "name", "id"),
}

_MOST_FEATURES = 5000
"""Features of a layer looked at; enough to tell what it is."""


@dataclass(frozen=True)
class Value:
    """A value found for a key.

    Attributes
    ----------
    value : object
        The value, as the study file will hold it.
    note : str
        What it is, or why it is a guess.
    guess : bool
        Whether it is only likely.
    """

    value: object
    note: str = ""
    guess: bool = False


@dataclass(frozen=True)
class Found:
    """What a folder holds, by key of the study file.

    Attributes
    ----------
    path : pathlib.Path
        The study file written.
    values : dict of str to Value
        By ``table.key``.
    unused : tuple of str
        Data that the study file does not name, each with the reason or with the key that may take it.
    missing : tuple of str
        What a run still needs, in words.
    """

    path: Path
    values: dict[str, Value]
    unused: tuple[str, ...] = ()
    missing: tuple[str, ...] = ()

    def text(self) -> str:
        """Return what was found as lines to print."""
        lines = [f"{self.path} written", "", "Found"]
        width = max(map(len, self.values), default=0)
        for name, one in self.values.items():
            note = "; ".join(part for part in ("a guess" if one.guess else "", one.note) if part)
            lines.append(f"  {name:<{width}}  {toml_value(one.value)}" + (f"  ({note})" if note else ""))
        if len(lines) == 3:
            lines.append("  nothing that could be recognised")
        if self.unused:
            lines += ["", "Not used", *(f"  {each}" for each in self.unused)]
        if self.missing:
            lines += ["", "Still to fill in", *(f"  {each}" for each in self.missing)]
        lines += ["", f"Next: look through the file, then `terrain2q check {self.path}`"]
        return "\n".join(lines)

    def as_dict(self) -> dict[str, object]:
        """Return the same as plain values, for ``--json``."""
        return {
            "study": str(self.path),
            "found": {
                name: {"value": one.value, "guess": one.guess, "note": one.note}
                for name, one in self.values.items()
            },
            "unused": list(self.unused),
            "missing": list(self.missing),
        }


def start_study(folder: str | os.PathLike[str]) -> Found:
    """Recognise the data in a folder and write its study file.

    Parameters
    ----------
    folder : path-like
        The folder; it and the folders directly in it are looked at.

    Returns
    -------
    Found

    Raises
    ------
    InputError
        The folder is not there (``file-missing``).
    OutputError
        A study file is there already (``output-exists``), or cannot be written (``output-not-writable``).
    """
    folder = Path(folder)
    if not folder.is_dir():
        raise InputError(
            "file-missing", f"no folder {folder}", where=str(folder), fix="name the folder with the data"
        )
    path = folder / STUDY_FILE
    exists = OutputError(
        "output-exists",
        f"{path} is there already",
        where=str(path),
        fix="edit it, or move it away and start again",
    )
    if path.exists():
        raise exists
    found = replace(look_at(folder), path=path)
    try:
        with path.open("x", encoding="utf-8") as file:
            file.write(study_text(found.values))
    except FileExistsError:
        raise exists from None
    except OSError as error:
        raise OutputError("output-not-writable", f"{path}: {error.strerror}", where=str(path)) from None
    return found


def look_at(folder: Path) -> Found:
    """Return what a folder holds, without writing anything."""
    files = list(_files(folder))
    unused: list[str] = []
    values: dict[str, Value] = {"study.name": Value(folder.resolve().name, "the folder's name")}
    values |= _tables(files, folder, unused)
    terrain, crs = _terrain(files, folder, unused)
    values |= _units(crs)
    values |= terrain
    values |= _layers(files, folder, values, unused)
    order = [f"{table}.{name}" for table, cls in TABLES.items() for name in keys_of(cls)]
    values = {name: values[name] for name in order if name in values}
    missing = list(_missing(values))
    if "terrain.dem" in values:
        missing += _terrain_lacks(values["terrain.dem"].value, folder)
    return Found(folder / STUDY_FILE, values, tuple(unused), tuple(missing))


def _files(folder: Path) -> Iterator[Path]:
    """Yield the files of a folder and of those directly in it, leaving out results and what is hidden."""
    for entry in sorted(folder.iterdir()):
        if entry.name.startswith("."):
            continue
        if entry.is_file():
            yield entry
        elif entry.is_dir() and not (entry / "run.json").exists():
            yield from (
                inner for inner in sorted(entry.iterdir()) if inner.is_file() and inner.name[0] != "."
            )


def _has_word(name: str, words: Iterable[str]) -> bool:
    return any(word in name.lower() for word in words)


# --------------------------------------------------------------------------------------------------
# Tables


def _tables(files: Sequence[Path], folder: Path, unused: list[str]) -> dict[str, Value]:
    values: dict[str, Value] = {}
    for path in files:
        if path.suffix.lower() != ".csv":
            continue
        try:
            with path.open(newline="", encoding="utf-8-sig") as file:
                header = {name.strip().lower() for name in next(csv.reader(file), [])}
        except (OSError, UnicodeDecodeError, csv.Error):
            unused.append(f"{_relative(path, folder)}: cannot be read")
            continue
        name = "land_cover.table" if {"class", "n"} <= header else ""
        name = "flows.path" if {"event", "discharge"} <= header else name
        if name and name not in values:
            what = "event, discharge" if name == "flows.path" else "class, n"
            values[name] = Value(_relative(path, folder), f"has the columns {what}")
        else:
            reason = f"{values[name].value} was taken" if name else "no columns event, discharge or class, n"
            if not name and {"section", "stage", "discharge"} <= header:
                reason = "observed stages; observed.path may take them"
            unused.append(f"{_relative(path, folder)}: {reason}")
    return values


# --------------------------------------------------------------------------------------------------
# Terrain


@dataclass(frozen=True)
class _Raster:
    path: Path
    crs: pyproj.CRS | None
    cell: tuple[float, float]
    bounds: tuple[float, float, float, float]

    def same_grid(self, other: _Raster) -> bool:
        """Whether both have one CRS and cell size, and cells that fall on one another."""
        if self.crs != other.crs or not np.allclose(self.cell, other.cell, rtol=1e-6):
            return False
        shift = (np.subtract(other.bounds[::3], self.bounds[::3])) / self.cell
        return bool(np.all(np.abs(shift - np.round(shift)) < 0.01))

    def overlaps(self, other: _Raster) -> bool:
        """Whether the two share more than a rim of a few cells, which tiles may."""
        rim = 8 * np.array(self.cell)
        low = np.maximum(self.bounds[:2], other.bounds[:2]) + rim
        high = np.minimum(self.bounds[2:], other.bounds[2:]) - rim
        return bool(np.all(low < high))


def _terrain(
    files: Sequence[Path], folder: Path, unused: list[str]
) -> tuple[dict[str, Value], pyproj.CRS | None]:
    candidates: list[_Raster] = []
    for path in files:
        if path.suffix.lower() in RASTERS:
            raster = _read_raster(path)
            if isinstance(raster, str):
                unused.append(f"{_relative(path, folder)}: {raster}")
            else:
                candidates.append(raster)
    if not candidates:
        return {}, None
    groups: list[list[_Raster]] = []
    for raster in candidates:
        for group in groups:
            if all(raster.same_grid(other) and not raster.overlaps(other) for other in group):
                group.append(raster)
                break
        else:
            groups.append([raster])
    # A virtual mosaic stands for its tiles; then a name that says elevation; then the larger area.
    groups.sort(key=lambda group: (
        not _has_word(group[0].path.stem, DEM_WORDS),
        not any(raster.path.suffix.lower() == ".vrt" for raster in group),
        -sum((b[2] - b[0]) * (b[3] - b[1]) for b in (raster.bounds for raster in group)),
    ))  # fmt: skip
    chosen = groups[0]
    for raster in (raster for group in groups[1:] for raster in group):
        unused.append(f"{_relative(raster.path, folder)}: another raster that may be elevations")
    named = _has_word(chosen[0].path.stem, DEM_WORDS)
    first = chosen[0]
    note = f"cells of {first.cell[0]:g} by {first.cell[1]:g}, {_crs_name(first.crs)}"
    if len(chosen) > 1:
        note = f"{len(chosen)} tiles of one grid, {note}"
    if not named:
        note += "; the only likely elevations" if len(groups) == 1 else "; taken among several rasters"
    paths = [_relative(raster.path, folder) for raster in chosen]
    values = {"terrain.dem": Value(paths if len(paths) > 1 else paths[0], note, guess=not named)}
    return values, first.crs


def _read_raster(path: Path) -> _Raster | str:
    """Return a raster that may be elevations, or why it is none."""
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", NotGeoreferencedWarning)
            with rasterio.open(path) as source:
                if source.count != 1:
                    return f"{source.count} bands; elevations have one"
                if source.dtypes[0] in ("uint8", "int8") or "complex" in source.dtypes[0]:
                    return f"{source.dtypes[0]} values are classes or a picture, not elevations"
                if _has_word(path.stem, NOT_DEM_WORDS) and not _has_word(path.stem, DEM_WORDS):
                    return "by its name not the ground's elevations"
                crs = None if source.crs is None else pyproj.CRS.from_user_input(source.crs)
                return _Raster(path, crs, source.res, tuple(source.bounds))
    except (RasterioError, pyproj.exceptions.CRSError) as error:
        return f"cannot be read as a raster ({str(error).splitlines()[0]})"


def _terrain_lacks(dem: object, folder: Path) -> list[str]:
    """Return what a run would refuse in the terrain chosen."""
    paths = [folder / str(path) for path in (dem if isinstance(dem, list) else [dem])]
    try:
        Terrain(paths)
    except InputError as error:
        name = "elevation_unit" if error.code == "elevation-unit-unknown" else "dem"
        return [f"terrain.{name}: {error.what}; {error.fix}"]
    return []


def _crs_name(crs: pyproj.CRS | None) -> str:
    if crs is None:
        return "no CRS"
    code = crs.to_authority(min_confidence=100)
    return ":".join(code) if code else crs.name


def _units(crs: pyproj.CRS | None) -> dict[str, Value]:
    unit = "" if crs is None or crs.is_geographic or not crs.axis_info else crs.axis_info[0].unit_name
    if unit == "metre":
        note = "the terrain's map unit is the metre; check: discharges are then m³/s"
        return {"study.units": Value("si", note, guess=True)}
    if unit in ("foot", "US survey foot"):
        note = f"the terrain's map unit is the {unit}; check: discharges are then ft³/s"
        return {"study.units": Value("us", note, guess=True)}
    return {}


# --------------------------------------------------------------------------------------------------
# Layers


@dataclass
class _Layer:
    spec: str
    name: str
    kind: str
    fields: list[str]
    types: list[str]
    crs: str | None
    source: tuple[Path, str]
    _read: tuple[np.ndarray, dict[str, np.ndarray]] | None = field(default=None, repr=False)

    def read(self) -> tuple[np.ndarray, dict[str, np.ndarray]]:
        """Return the first features' geometries and columns."""
        if self._read is None:
            with warnings.catch_warnings():
                warnings.simplefilter("ignore")
                meta, _, geometry, columns = pyogrio.raw.read(
                    self.source[0], layer=self.source[1], max_features=_MOST_FEATURES
                )
            self._read = shapely.from_wkb(geometry), dict(zip(meta["fields"], columns, strict=True))
        return self._read


def _layers(
    files: Sequence[Path], folder: Path, values: dict[str, Value], unused: list[str]
) -> dict[str, Value]:
    layers: list[_Layer] = []
    for path in files:
        if path.suffix.lower() in VECTORS and path.name != "results.gpkg":
            layers += _list_layers(path, folder, unused)
    found: dict[str, Value] = {}
    polygons = [layer for layer in layers if layer.kind == "polygon"]
    lines = [layer for layer in layers if layer.kind == "line"]
    found |= _cover_and_channel(polygons, folder, values, unused)
    found |= _streams_and_cut_lines(lines, unused)
    for layer in layers:
        if layer.kind == "points":
            unused.append(f"{layer.spec}: points; crossings.path or observed.path may take them")
        elif layer.kind not in ("polygon", "line"):
            unused.append(f"{layer.spec}: {layer.kind}, which no key takes")
    return found


def _list_layers(path: Path, folder: Path, unused: list[str]) -> list[_Layer]:
    layers = []
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            names = [str(name) for name in pyogrio.list_layers(path)[:, 0]]
            for name in names:
                about = pyogrio.read_info(path, layer=name)
                spec = _relative(path, folder) + (f"|layer={name}" if len(names) > 1 else "")
                layer = _Layer(
                    spec,
                    name if len(names) > 1 else f"{path.stem} {name}",
                    _geometry_kind(about["geometry_type"]),
                    list(about["fields"]),
                    [str(kind) for kind in about["dtypes"]],
                    about["crs"],
                    (path, name),
                )
                if about["features"] == 0:
                    unused.append(f"{spec}: no features")
                    continue
                if layer.kind == "unknown":
                    kinds = {
                        _geometry_kind(shape.geom_type) for shape in layer.read()[0] if shape is not None
                    }
                    layer.kind = kinds.pop() if len(kinds) == 1 else "mixed geometry"
                layers.append(layer)
    except Exception as error:  # the reader's own exceptions differ by format
        if path.suffix.lower() != ".json":
            unused.append(f"{_relative(path, folder)}: cannot be read ({str(error).splitlines()[0]})")
    return layers


def _geometry_kind(name: str | None) -> str:
    if name is None:
        return "a table without geometry"
    for kind, word in (("polygon", "Polygon"), ("line", "LineString"), ("points", "Point")):
        if word in name:
            return kind
    return "unknown"


def _cover_and_channel(
    polygons: Sequence[_Layer], folder: Path, values: dict[str, Value], unused: list[str]
) -> dict[str, Value]:
    classes = _table_classes(values, folder)
    scored = []
    for layer in polygons:
        field_name, share = _class_field(layer, classes)
        named_cover, named_channel = _has_word(layer.name, COVER_WORDS), _has_word(layer.name, CHANNEL_WORDS)
        sure = share > 0.5
        score = 4 * sure + 2 * (named_cover and not named_channel) + (bool(field_name) and not named_channel)
        scored.append((score, layer, field_name, sure or (named_cover and bool(field_name))))
    scored.sort(key=lambda each: -each[0])
    found: dict[str, Value] = {}
    for score, layer, field_name, sure in scored:
        if score and field_name and "land_cover.path" not in found:
            note = (
                "its classes are in the roughness table"
                if score >= 4
                else "polygons with a field like a class"
            )
            found["land_cover.path"] = Value(layer.spec, note, guess=not sure)
            found["land_cover.class_field"] = Value(field_name, note, guess=score < 4)
        elif _has_word(layer.name, CHANNEL_WORDS) and "channel.path" not in found:
            found["channel.path"] = Value(layer.spec, "polygons named like a channel", guess=True)
        else:
            unused.append(f"{layer.spec}: polygons, not recognised as land cover or channel")
    return found


def _table_classes(values: dict[str, Value], folder: Path) -> set[str]:
    table = values.get("land_cover.table")
    if table is None:
        return set()
    with (folder / str(table.value)).open(newline="", encoding="utf-8-sig") as file:
        rows = [{(k or "").strip().lower(): v for k, v in row.items()} for row in csv.DictReader(file)]
    return set(clean_texts([row.get("class") for row in rows])) - {""}


def _class_field(layer: _Layer, classes: set[str]) -> tuple[str, float]:
    """Return the field most like a land-cover class, and the share of its classes that the table has."""
    best, share = "", 0.0
    if classes:
        for name, column in layer.read()[1].items():
            distinct = set(clean_texts(column)) - {""}
            matched = len(distinct & classes) / len(distinct) if distinct else 0.0
            if matched > share:
                best, share = name, matched
    if share > 0.5:
        return best, share
    likely = [name for word in CLASS_WORDS for name in layer.fields if word in name.lower()]
    return (likely[0] if likely else ""), 0.0


def _streams_and_cut_lines(lines: Sequence[_Layer], unused: list[str]) -> dict[str, Value]:
    found: dict[str, Value] = {}
    roles: dict[str, _Layer] = {}
    unnamed = []
    for layer in lines:
        # Cut lines first: a layer called stream_sections holds sections.
        if _has_word(layer.name, CUT_WORDS) and "cut_lines" not in roles:
            roles["cut_lines"] = layer
            found["cut_lines.path"] = Value(layer.spec, "lines named like cut lines")
        elif _has_word(layer.name, ROAD_WORDS):
            unused.append(f"{layer.spec}: by its name roads; crossings.roads may take them")
        elif _has_word(layer.name, STREAM_WORDS) and "streams" not in roles:
            roles["streams"] = layer
            found["streams.path"] = Value(layer.spec, "lines named like streams")
        else:
            unnamed.append(layer)
    for layer in list(unnamed):
        if "cut_lines" in roles and "streams" in roles:
            break
        others = [roles["streams"]] if "streams" in roles else [each for each in lines if each is not layer]
        if "cut_lines" not in roles:
            crossed = next((other for other in others if _are_cut_lines_of(layer, other)), None)
            if crossed is not None:
                unnamed.remove(layer)
                roles["cut_lines"] = layer
                found["cut_lines.path"] = Value(layer.spec, f"short lines across {crossed.spec}", guess=True)
    if "cut_lines" in roles and "streams" not in roles:
        for layer in list(unnamed):
            if _are_cut_lines_of(roles["cut_lines"], layer):
                unnamed.remove(layer)
                roles["streams"] = layer
                found["streams.path"] = Value(layer.spec, "long lines that the cut lines cross", guess=True)
                break
    unused += [f"{layer.spec}: lines, not recognised" for layer in unnamed]
    for role, layer in roles.items():
        found |= _id_field(role, layer)
    if "cut_lines" in roles:
        found |= _slope_field(roles["cut_lines"])
    return found


def _are_cut_lines_of(layer: _Layer, other: _Layer) -> bool:
    """Whether most lines of `layer` cross lines of `other`, which are longer."""
    own, theirs = _drawn(layer, layer.crs), _drawn(other, layer.crs)
    if own.size == 0 or theirs.size == 0:
        return False
    if np.median(shapely.length(own)) >= np.median(shapely.length(theirs)):
        return False
    tree = shapely.STRtree(theirs)
    crossing = np.unique(tree.query(own, predicate="crosses")[0])
    return bool(crossing.size > 0.5 * own.size)


def _drawn(layer: _Layer, crs: str | None) -> np.ndarray:
    shapes = shapely.force_2d(layer.read()[0])
    shapes = shapes[~(shapely.is_missing(shapes) | shapely.is_empty(shapes))]
    if crs is None or layer.crs is None or layer.crs == crs or shapes.size == 0:
        return shapes
    change = pyproj.Transformer.from_crs(layer.crs, crs, always_xy=True)
    return shapely.transform(shapes, lambda xy: np.column_stack(change.transform(xy[:, 0], xy[:, 1])))


def _id_field(role: str, layer: _Layer) -> dict[str, Value]:
    columns = layer.read()[1]
    lower = {name.lower(): name for name in reversed(layer.fields)}
    for wanted in ID_FIELDS[role]:
        if wanted in lower:
            texts = clean_texts(columns[lower[wanted]])
            if "" not in texts and (role == "streams" or len(set(texts)) == len(texts)):
                note = "a name on every line" if role == "streams" else "on every line, and no two alike"
                return {f"{role}.id_field": Value(lower[wanted], note)}
    return {}


def _slope_field(layer: _Layer) -> dict[str, Value]:
    columns = layer.read()[1]
    for name, kind in zip(layer.fields, layer.types, strict=True):
        if _has_word(name, SLOPE_WORDS) and kind.startswith(("float", "int")):
            slopes = np.asarray(columns[name], dtype=float)
            bad = int(np.count_nonzero(~(slopes > 0.0)))
            note = f"{bad} of {slopes.size} lines have none above zero" if bad else "above zero on every line"
            # A slope of one or more would be per cent or degrees.
            if np.any(slopes >= 0.5):
                note += "; looks like per cent or degrees, needed is fall over run"
            return {"slope.field": Value(name, note, guess=bool(bad or np.any(slopes >= 0.5)))}
    return {}


# --------------------------------------------------------------------------------------------------
# Writing


def _missing(values: dict[str, Value]) -> Iterator[str]:
    for table, cls in TABLES.items():
        if table not in ("study", *NEEDED_TO_RUN):
            continue
        given = [name for name in keys_of(cls) if f"{table}.{name}" in values]
        absent = [(name,) for name, about in keys_of(cls).items() if about.needed and name not in given]
        for names in [*absent, *cls.missing(given)]:
            yield " or ".join(f"{table}.{name}: {keys_of(cls)[name].help}" for name in names)
    if "flows.path" not in values:
        yield "flows.path or flows.events: design flows; without them there are ratings only"


def study_text(values: dict[str, Value]) -> str:
    """Return a study file with the values found, every other key a comment, and help on each."""
    lines = [
        "# A study for terrain2q. Paths are relative to this file; a vector path may carry a layer:",
        '# "data.gpkg|layer=name". A key behind "#" has no effect until the "#" is taken away.',
    ]
    for table, cls in TABLES.items():
        given = [name for name in keys_of(cls) if f"{table}.{name}" in values]
        needed = table in ("study", *NEEDED_TO_RUN)
        live = bool(given) or needed or table in DEFAULTED
        lines += ["", f"# {(cls.__doc__ or '').splitlines()[0]}", f"[{table}]" if live else f"# [{table}]"]
        for name, about in keys_of(cls).items():
            one = values.get(f"{table}.{name}")
            default = shown_default(cls, name)
            note = "needed" if about.needed else f"default {default}" if default else "optional"
            if one is not None:
                note = f"a guess: {one.note}" if one.guess else f"found: {one.note}"
            elif not live:
                note += f"; take the # from [{table}] too"
            elif about.needed:
                note += "; not found, fill in"
            lines.append(f"# {about.help} ({note})")
            if one is not None:
                lines.append(f"{name} = {toml_value(one.value)}")
            else:
                lines.append(f"# {name} = {default or about.example}")
        for pair in cls.either:
            lines.append(f"# Only one of {pair[0]} and {pair[1]} may be given.")
    return "\n".join(lines) + "\n"


def toml_value(value: Any) -> str:
    """Return a text, number, flag or list as TOML.

    Examples
    --------
    >>> print(toml_value(["a.tif", True, 0.5]))
    ["a.tif", true, 0.5]
    """
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, list | tuple):
        return "[" + ", ".join(map(toml_value, value)) + "]"
    if isinstance(value, str):
        escaped = value.replace("\\", "\\\\").replace('"', '\\"')
        escaped = "".join(c if c.isprintable() else f"\\U{ord(c):08x}" for c in escaped)
        return f'"{escaped}"'
    return str(value)


def _relative(path: Path, folder: Path) -> str:
    return path.relative_to(folder).as_posix()
