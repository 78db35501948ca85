"""The study file -> frozen, checked dataclasses. Defaults live here and nowhere else.

A study is a few tables of keys. Each table is a dataclass below, each key one field made by
:func:`key`, with its kind, its checks and a line of help; the options of the command line, the
commented file that ``terrain2q start`` writes and the page of keys in the docs are made from them.

To add a key, add a field. To add a table, add a class and a field of :class:`Study`.
"""

# ruff: noqa: RUF009
# `key` and `_table` make dataclass fields, which that rule does not know.

from __future__ import annotations

import difflib
import keyword
import math
import os
import re
import tomllib
from collections.abc import Callable, Collection, Iterator, Mapping
from dataclasses import MISSING, dataclass, field, fields
from pathlib import Path
from types import MappingProxyType
from typing import Any, ClassVar

from terrain2q.errors import InputError, raise_together
from terrain2q.roughness_tables import table_names, table_path
from terrain2q.units import ELEVATION_UNITS, SYSTEMS, UnitSystem, unit_system

NEEDED_TO_RUN = ("terrain", "cut_lines", "land_cover", "slope")
"""Tables without which no section can be worked out."""

# --------------------------------------------------------------------------------------------------
# Keys and tables


@dataclass(frozen=True)
class Key:
    """What one key of the study file is.

    Attributes
    ----------
    help : str
        One line for the options, the commented study file and the docs.
    kind : str
        One of :data:`KINDS`.
    example : str
        A value as it is written in TOML.
    needed : bool
        The table cannot do without it.
    quantity : str
        ``length`` and so on (see :mod:`terrain2q.units`) where the value is in the study's units.
    choices : tuple of str
        The values allowed, for the kind ``choice``.
    least : int
        The least value allowed, for the kind ``count``.
    """

    help: str
    kind: str
    example: str
    needed: bool = False
    quantity: str = ""
    choices: tuple[str, ...] = ()
    least: int = 0


def key(help: str, kind: str, example: str, *, default: object = None, **more: Any) -> Any:
    """Return a dataclass field for one key; see :class:`Key`."""
    return field(default=default, metadata={"key": Key(help, kind, example, **more)})


@dataclass(frozen=True)
class Table:
    """One table of the study file: a frozen dataclass whose fields are made by :func:`key`."""

    either: ClassVar[tuple[tuple[str, str], ...]] = ()
    """Pairs of keys of which only one may be given."""

    only_with: ClassVar[Mapping[str, str]] = MappingProxyType({})
    """Keys that mean something only beside another: an option that takes the other's place removes them."""

    def __post_init__(self) -> None:
        given = {_key_name(f.name): getattr(self, f.name) for f in fields(self)}
        given = {name: value for name, value in given.items() if value != default_of(type(self), name)}
        values, problems = _read_table(type(self), given, lambda name: f"[{_table_name(type(self))}] {name}")
        raise_together(problems)
        for name, value in values.items():
            object.__setattr__(self, attribute_of(name), value)

    @classmethod
    def missing(cls, given: Collection[str]) -> Iterator[tuple[str, ...]]:
        """Yield keys of which one more must be given, beside those that are always needed."""
        return iter(())


def attribute_of(name: str) -> str:
    """Return the attribute that holds a key: its name, with an underscore where it is a word of Python.

    Examples
    --------
    >>> attribute_of("window"), attribute_of("from")
    ('window', 'from_')
    """
    return f"{name}_" if keyword.iskeyword(name) else name


def _key_name(attribute: str) -> str:
    return attribute.removesuffix("_")


def keys_of(table: type[Table]) -> dict[str, Key]:
    """Return the keys of a table's class, by name, in order."""
    return {_key_name(f.name): f.metadata["key"] for f in fields(table)}


def default_of(table: type[Table], name: str) -> object:
    """Return the default of a key; None where there is none."""
    return next(f.default for f in fields(table) if f.name == attribute_of(name))


@dataclass(frozen=True)
class StudyTable(Table):
    """The study as a whole."""

    name: str = key("name of the study, for pages and reports", "text", '"Mill Creek"', default="")
    units: str = key(
        "units the study states and receives: us (feet, ft³/s) or si (metres, m³/s)",
        "choice", '"us"', choices=tuple(sorted(SYSTEMS, reverse=True)), needed=True,
    )  # fmt: skip
    crs: str | None = key("projected CRS to work in; the terrain's where absent", "text", '"EPSG:26915"')

    @property
    def system(self) -> UnitSystem:
        """The system of units."""
        return unit_system(self.units)


@dataclass(frozen=True)
class TerrainTable(Table):
    """The ground."""

    dem: tuple[str, ...] = key(
        "elevation raster, or a list of tiles of one grid", "rasters", '"dem.tif"', needed=True
    )
    elevation_unit: str | None = key(
        "unit of the elevations, needed only where the raster does not say: m, ft or us-ft",
        "choice", '"m"', choices=tuple(ELEVATION_UNITS),
    )  # fmt: skip
    sampling: str = key(
        "how the ground between cell centres is read: bilinear or nearest",
        "choice", '"bilinear"', choices=("bilinear", "nearest"), default="bilinear",
    )  # fmt: skip
    spacing: float | None = key(
        "distance between stations, in the study's length unit; one cell where absent",
        "number", "3.0", quantity="length",
    )  # fmt: skip


@dataclass(frozen=True)
class StreamsTable(Table):
    """Stream lines, drawn downstream; they tell left from right and give stream distances."""

    path: str = key("line layer of streams", "layer", '"data.gpkg|layer=streams"', needed=True)
    id_field: str | None = key("field with the stream's name or id", "text", '"name"')
    snap: float | None = key(
        "how far beside the stream its low line may lie, for the stream's slope and direction; "
        "5 cells, 50 ft (15 m) at least, where absent",
        "number", "50.0", quantity="length",
    )  # fmt: skip


@dataclass(frozen=True)
class CutLinesTable(Table):
    """Cut lines, drawn across the stream from high ground to high ground, or laid out along the streams."""

    either = (("path", "every"), ("path", "width"), ("path", "height"), ("id_field", "every"))
    path: str | None = key("line layer of cut lines", "layer", '"data.gpkg|layer=cut_lines"')
    id_field: str | None = key("field with the cut line's id", "text", '"section_id"')
    every: float | None = key(
        "lay lines out at this distance along the streams, in the study's length unit",
        "number", "250.0", quantity="length",
    )  # fmt: skip
    width: float | None = key(
        "greatest length of a laid-out line, half of it to each side", "number", "1500.0", quantity="length"
    )
    height: float | None = key(
        "height above the bed on which a laid-out line ends; 6 m (20 ft) where absent",
        "number", "20.0", quantity="length",
    )  # fmt: skip

    @classmethod
    def missing(cls, given: Collection[str]) -> Iterator[tuple[str, ...]]:
        """Yield what is missing for lines."""
        if not {"path", "every", "width", "height"}.intersection(given):
            yield ("path", "every")
        if "every" in given and "width" not in given:
            yield ("width",)


@dataclass(frozen=True)
class LandCoverTable(Table):
    """Land cover, which gives the roughness. `default_n` alone is one roughness everywhere."""

    path: str | None = key("polygon layer of land cover", "layer", '"data.gpkg|layer=land_cover"')
    class_field: str | None = key("field with the land-cover class", "text", '"class"')
    table: Path | None = key(
        "CSV with the columns class, n and optionally n_low, n_high, source; or the name of a built-in table "
        "(`terrain2q tables` lists them). In place of n a row may give n_shallow, depth_shallow, n_deep, "
        "depth_deep; or base, irregularity, variation, obstructions, vegetation, meandering",
        "table", '"roughness.csv"',
    )  # fmt: skip
    default_n: float | None = key(
        "roughness n where the cover has a gap; alone, one roughness everywhere",
        "number", "0.05", quantity="roughness",
    )  # fmt: skip

    @classmethod
    def missing(cls, given: Collection[str]) -> Iterator[tuple[str, ...]]:
        """Yield what is missing for a roughness everywhere."""
        together = ("path", "class_field", "table")
        if any(name in given for name in together):
            yield from ((name,) for name in together if name not in given)
        elif "default_n" not in given:
            yield "path", "default_n"


@dataclass(frozen=True)
class ChannelTable(Table):
    """The channel: drawn as polygons, or found in each profile."""

    either = (("path", "banks"), ("n", "composite"))
    path: str | None = key("polygon layer of channels", "layer", '"data.gpkg|layer=channel"')
    banks: str = key(
        "auto finds the tops of bank in each profile; none leaves the section undivided",
        "choice", '"auto"', choices=("auto", "none"), default="auto",
    )  # fmt: skip
    n: float | None = key(
        "roughness n of the channel; that of its land cover where absent",
        "number", "0.035", quantity="roughness",
    )  # fmt: skip
    composite: str = key(
        "how several n of the land cover act together in the channel: divide (each by itself), or one "
        "composite n by horton, lotter or pavlovskii",
        "choice", '"horton"', choices=("divide", "horton", "lotter", "pavlovskii"), default="divide",
    )  # fmt: skip


@dataclass(frozen=True)
class SubmergedTable(Table):
    """What lies below the water that the terrain shows in the channel."""

    either = (("depth", "coefficient"), ("depth", "survey_flow"), ("coefficient", "survey_flow"))
    only_with = MappingProxyType({"exponent": "coefficient", "area_field": "coefficient"})
    depth: float | None = key(
        "greatest depth of the bed below the water surface", "number", "3.0", quantity="length"
    )
    coefficient: float | None = key(
        "a in depth = a · area^b, for depth in the study's length unit and the drainage area of area_field",
        "number", "1.2", quantity="length",
    )  # fmt: skip
    exponent: float | None = key("b in depth = a · area^b", "number", "0.3", quantity="ratio")
    area_field: str | None = key("field of the cut lines with the drainage area", "text", '"area"')
    survey_flow: float | None = key(
        "discharge on the day the terrain was surveyed; the bed is put where the water below the surface "
        "carries it at normal depth",
        "number", "25.0", quantity="flow",
    )  # fmt: skip
    shape: str = key(
        "shape of the bed below the water: rectangle, triangle or parabola",
        "choice", '"parabola"', choices=("rectangle", "triangle", "parabola"), default="parabola",
    )  # fmt: skip

    @classmethod
    def missing(cls, given: Collection[str]) -> Iterator[tuple[str, ...]]:
        """Yield what is missing for a depth."""
        together = ("coefficient", "exponent", "area_field")
        if any(name in given for name in together):
            yield from ((name,) for name in together if name not in given)
        elif not {"depth", "survey_flow"}.intersection(given):
            yield "depth", "coefficient", "survey_flow"


@dataclass(frozen=True)
class SlopeTable(Table):
    """The energy slope, which normal flow takes as the slope of the stream."""

    either = (("value", "field"), ("value", "from"), ("field", "from"))
    only_with = MappingProxyType({"window": "from"})
    value: float | None = key(
        "one slope for every section, fall over run", "number", "0.002", quantity="ratio"
    )
    field: str | None = key("field of the cut lines with the slope", "text", '"slope"')
    from_: str | None = key(
        "stream takes the slope from the ground along the stream", "choice", '"stream"', choices=("stream",)
    )
    window: float | None = key(
        "length along the stream over which its slope is taken, in the middle of which the section lies; "
        "1000 ft (305 m), 60 cells at least, where absent",
        "number", "1000.0", quantity="length",
    )  # fmt: skip

    @classmethod
    def missing(cls, given: Collection[str]) -> Iterator[tuple[str, ...]]:
        """Yield what is missing for a slope."""
        if not given:
            yield "value", "field", "from"
        elif "window" in given and "from" not in given:
            yield ("from",)


@dataclass(frozen=True)
class FlowsTable(Table):
    """Design flows."""

    either = (("path", "events"), ("events", "area_field"))
    only_with = MappingProxyType({"exponent": "area_field"})
    path: Path | None = key(
        "CSV with the columns event, discharge and optionally probability, stream, section, distance, "
        "crossing, area, volume",
        "file", '"flows.csv"',
    )  # fmt: skip
    events: Mapping[str, float] | None = key(
        "discharge of each event, the same for every section",
        "events", '{ "10-year" = 850, "100-year" = 2400 }', quantity="flow",
    )  # fmt: skip
    area_field: str | None = key(
        "field of the cut lines with the drainage area, in the unit of the flows' column area; discharges of "
        "rows with an area are carried over to the section",
        "text", '"area"',
    )  # fmt: skip
    exponent: float | None = key(
        "b in discharge · (area of the section / area of the row)^b", "number", "0.7", quantity="ratio"
    )

    @classmethod
    def missing(cls, given: Collection[str]) -> Iterator[tuple[str, ...]]:
        """Yield what is missing for a flow."""
        if not {"path", "events"}.intersection(given):
            yield "path", "events"
        together = ("area_field", "exponent")
        if any(name in given for name in together):
            yield from ((name,) for name in together if name not in given)


@dataclass(frozen=True)
class RatingTable(Table):
    """The rating of each section."""

    stages: int = key("number of stages in a rating", "count", "30", default=30, least=2)
    top: float | None = key(
        "height of the last stage above the lowest ground; the lower end of the section where absent",
        "number", "15.0", quantity="length",
    )  # fmt: skip


@dataclass(frozen=True)
class ExtentTable(Table):
    """The flood on the map: extent and depths between the sections; an empty table maps every event."""

    events: tuple[str, ...] | None = key(
        "names of the events to map; all where absent", "names", '["10-year", "100-year"]'
    )
    smallest: float | None = key(
        "area of the smallest patch or hole kept, in the study's unit of length squared; 25 m² and at least "
        "4 cells where absent",
        "number", "300.0", quantity="area",
    )  # fmt: skip


@dataclass(frozen=True)
class CrossingsTable(Table):
    """Crossings of roads and streams to screen; the page on crossings has the rules."""

    path: str | None = key(
        "point layer of crossings; roads alone give the places where they meet streams",
        "layer", '"data.gpkg|layer=crossings"',
    )  # fmt: skip
    id_field: str | None = key("field with the crossing's id", "text", '"crossing_id"')
    roads: str | None = key(
        "line layer of roads; fields bridge and tunnel are respected", "layer", '"data.gpkg|layer=roads"'
    )
    freeboard: float | None = key(
        "height asked for between stage and crest, in the study's length unit; 1 ft (0.3048 m) where absent",
        "number or zero", "1.0", quantity="length",
    )  # fmt: skip
    opening_width_field: str | None = key(
        "field of the crossings or roads with the clear width of the opening, in the study's length unit",
        "text", '"opening_width"',
    )  # fmt: skip
    crest_field: str | None = key(
        "field of the crossings or roads with the surveyed crest, in the study's length unit; empty where "
        "there is none",
        "text", '"crest"',
    )  # fmt: skip
    tide_field: str | None = key(
        "field of the crossings or roads that says whether the tide reaches it", "text", '"tidal"'
    )
    reach: float | None = key(
        "length of road to each side of the stream on which the crest is looked for; 150 m (492 ft) where "
        "absent",
        "number", "500.0", quantity="length",
    )  # fmt: skip
    road_width: float | None = key(
        "least width of a road; 6 m (20 ft) where absent", "number", "20.0", quantity="length"
    )
    search: float | None = key(
        "distance to each side of a drawn road within which the road lies; 12 m (39 ft) where absent",
        "number", "40.0", quantity="length",
    )  # fmt: skip
    snap: float | None = key(
        "distance from a point within which its stream and its road lie; 30 m (98 ft) where absent",
        "number", "100.0", quantity="length",
    )  # fmt: skip
    merge: float | None = key(
        "distance within which crossings are one; 30 m (98 ft) where absent",
        "number",
        "100.0",
        quantity="length",
    )
    weir_coefficient: float | None = key(
        "C of the flow over the road, C L H^1.5, in the study's units; 1.6 m^(1/2)/s (2.90 ft^(1/2)/s) "
        "where absent",
        "number", "2.9", quantity="weir_coefficient",
    )  # fmt: skip
    rank: tuple[str, ...] = key(
        "what decides the rank, in order: probability, freeboard, or a field, the larger first; with a minus "
        "before it, the smaller first",
        "names", '["probability", "freeboard", "traffic"]', default=("probability", "freeboard"),
    )  # fmt: skip
    panels: int = key(
        "how many crossings get a page of pictures, by rank", "count", "100", default=100, least=0
    )

    @classmethod
    def missing(cls, given: Collection[str]) -> Iterator[tuple[str, ...]]:
        """Yield what is missing for crossings."""
        if "path" not in given and "roads" not in given:
            yield "path", "roads"


@dataclass(frozen=True)
class BenchTable(Table):
    """A bench to be cut beside the channel; `run` and `size` find the width required to pass each flow."""

    base: float = key(
        "height of the bench's floor above the lowest ground",
        "number", "4.0", needed=True, quantity="length",
    )  # fmt: skip
    n: float = key("roughness n of the bench", "number", "0.05", needed=True, quantity="roughness")
    sides: str = key(
        "where the bench is cut: both (alike), left or right, looking downstream",
        "choice", '"both"', choices=("both", "left", "right"), default="both",
    )  # fmt: skip
    side_slope: float = key(
        "run over rise of the bench's outer slope; 0 is a vertical face",
        "number or zero", "2.0", default=0.0, quantity="ratio",
    )  # fmt: skip
    event: str | None = key("the event to be passed; each of them where absent", "text", '"100-year"')
    stage: float | None = key(
        "height above the lowest ground that the water may reach; the lower top of bank where absent",
        "number", "10.0", quantity="length",
    )  # fmt: skip


@dataclass(frozen=True)
class ObservedTable(Table):
    """Observed stages; `terrain2q fit` finds the roughness that reproduces them."""

    path: str = key(
        "CSV or point layer with the columns section, stage (an elevation) and discharge",
        "layer", '"observed.csv"', needed=True,
    )  # fmt: skip


@dataclass(frozen=True)
class OutputTable(Table):
    """What is written."""

    folder: Path = key("folder for the results", "folder", '"output"', default=Path("output"))
    overwrite: bool = key("true replaces earlier results in the folder", "flag", "false", default=False)
    report: bool = key("true writes report.html, a page to read and to print", "flag", "true", default=True)
    sheets: str = key(
        "calculation_sheets.pdf: flagged gives a sheet to sections with findings and to crossings, all to "
        "every section, none writes no file",
        "choice", '"all"', choices=("flagged", "all", "none"), default="flagged",
    )  # fmt: skip
    tables: str = key(
        "the layers also as tables beside results.gpkg: csv, parquet, both or none",
        "choice", '"csv"', choices=("none", "csv", "parquet", "both"), default="none",
    )  # fmt: skip


def _table(cls: type[Table], *, when_absent: str = "none") -> Any:
    return field(metadata={"table": cls, "when_absent": when_absent})


@dataclass(frozen=True)
class Study:
    """A checked study: one attribute a table, paths made absolute.

    Values stand as the study states them; :meth:`in_si` turns one into SI. A table that is absent is
    None, or has its defaults where every key has one (`channel`, `rating`, `output`).

    Attributes
    ----------
    path : pathlib.Path or None
        The study file; None where the study came from options alone.
    folder : pathlib.Path
        Where relative paths of the study file start.
    """

    study: StudyTable = _table(StudyTable)
    terrain: TerrainTable | None = _table(TerrainTable)
    streams: StreamsTable | None = _table(StreamsTable)
    cut_lines: CutLinesTable | None = _table(CutLinesTable)
    land_cover: LandCoverTable | None = _table(LandCoverTable)
    channel: ChannelTable = _table(ChannelTable, when_absent="defaults")
    submerged: SubmergedTable | None = _table(SubmergedTable)
    slope: SlopeTable | None = _table(SlopeTable)
    flows: FlowsTable | None = _table(FlowsTable)
    rating: RatingTable = _table(RatingTable, when_absent="defaults")
    crossings: CrossingsTable | None = _table(CrossingsTable)
    extent: ExtentTable | None = _table(ExtentTable)
    bench: BenchTable | None = _table(BenchTable)
    observed: ObservedTable | None = _table(ObservedTable)
    output: OutputTable = _table(OutputTable, when_absent="defaults")
    path: Path | None = None
    folder: Path = field(default_factory=Path.cwd)

    @property
    def system(self) -> UnitSystem:
        """The study's system of units."""
        return self.study.system

    def in_si(self, name: str) -> float | None:
        """Return the value of a numeric key in SI; None where it is not given.

        Parameters
        ----------
        name : str
            Table and key, such as ``terrain.spacing``.
        """
        table_name, _, key_name = name.partition(".")
        table = getattr(self, table_name)
        value = None if table is None else getattr(table, attribute_of(key_name))
        if value is None:
            return None
        return float(value) / self.system.per_si(keys_of(TABLES[table_name])[key_name].quantity or "ratio")

    def inputs(self) -> dict[str, tuple[str, ...]]:
        """Return the files the study reads, by ``table.key``, without layer names."""
        found: dict[str, tuple[str, ...]] = {}
        for table_name, cls in TABLES.items():
            table = getattr(self, table_name)
            for name, about in keys_of(cls).items():
                value = None if table is None else getattr(table, attribute_of(name))
                if value is not None and about.kind in ("file", "table", "layer", "rasters"):
                    paths = value if isinstance(value, tuple) else (value,)
                    found[f"{table_name}.{name}"] = tuple(split_layer(str(path))[0] for path in paths)
        return found

    def as_dict(self) -> dict[str, dict[str, object]]:
        """Return tables of plain values, without what is absent, as a study file would hold them."""
        tables: dict[str, dict[str, object]] = {}
        for table_name, cls in TABLES.items():
            table = getattr(self, table_name)
            if table is not None:
                values = {name: getattr(table, attribute_of(name)) for name in keys_of(cls)}
                for first, second in cls.either:
                    # a default beside the key that excludes it would read as a contradiction
                    for name, other in ((first, second), (second, first)):
                        if values[other] is not None and values[name] == default_of(cls, name):
                            values[name] = None
                tables[table_name] = {name: _plain(v) for name, v in values.items() if v is not None}
        return tables


TABLES: dict[str, type[Table]] = {f.name: f.metadata["table"] for f in fields(Study) if "table" in f.metadata}
"""The class of each table, by its name in the study file, in order."""

DEFAULTED = frozenset(f.name for f in fields(Study) if f.metadata.get("when_absent") == "defaults")
"""The tables that are there with their defaults where the study has none."""


def _table_name(cls: type[Table]) -> str:
    return next(name for name, other in TABLES.items() if other is cls)


def _plain(value: object) -> object:
    if isinstance(value, Path):
        return str(value)
    if isinstance(value, tuple):
        return [_plain(v) for v in value]
    return dict(value) if isinstance(value, Mapping) else value


# --------------------------------------------------------------------------------------------------
# Kinds: what a value must be, and how an option's text is read


class _Refused(Exception):
    """A value is not of its kind: what is needed, in words, and the code if not the usual one."""

    def __init__(self, needed: str, code: str = "value-not-allowed", fix: str = "") -> None:
        super().__init__(needed)
        self.needed, self.code, self.fix = needed, code, fix


def _text(about: Key, value: object) -> str:
    if not isinstance(value, str):
        raise _Refused('text in quotes, such as "north"')
    return value


def _choice(about: Key, value: object) -> str:
    if not isinstance(value, str) or value not in about.choices:
        raise _Refused(" or ".join(f'"{choice}"' for choice in about.choices))
    return value


def _number(about: Key, value: object) -> float:
    # To Python true is a number; to a person it is not.
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise _Refused("a number above zero")
    try:
        number = float(value)
    except OverflowError:
        number = math.inf
    if not math.isfinite(number):
        raise _Refused("a finite number above zero")
    if number <= 0.0:
        raise _Refused("a number above zero", "number-not-positive")
    return number


def _number_or_zero(about: Key, value: object) -> float:
    if not isinstance(value, bool) and isinstance(value, int | float) and value == 0:
        return 0.0
    try:
        return _number(about, value)
    except _Refused as refused:
        raise _Refused("zero or a number above zero", refused.code) from None


def _count(about: Key, value: object) -> int:
    if isinstance(value, bool) or not isinstance(value, int) or value < about.least:
        raise _Refused(f"a whole number, {about.least} or more")
    return value


def _flag(about: Key, value: object) -> bool:
    if not isinstance(value, bool):
        raise _Refused("true or false")
    return value


def _path_text(about: Key, value: object) -> str:
    if isinstance(value, os.PathLike):
        value = os.fspath(value)
    if not isinstance(value, str) or not value.strip():
        raise _Refused("a path in quotes")
    return value


def _path(about: Key, value: object) -> Path:
    return Path(_path_text(about, value))


def _layer(about: Key, value: object) -> str:
    text = _path_text(about, value)
    layer = split_layer(text)[1]
    if layer == "" or (layer is None and "|" in text):
        raise _Refused("a path, or a path and a layer", fix='write "file.gpkg|layer=name"')
    return text


def _rasters(about: Key, value: object) -> tuple[str, ...]:
    values = value if isinstance(value, list | tuple) else [value]
    if not values:
        raise _Refused("a path, or a list of paths")
    return tuple(_path_text(about, v) for v in values)


def _names(about: Key, value: object) -> tuple[str, ...]:
    values = value if isinstance(value, list | tuple) else [value]
    if not values or not all(isinstance(v, str) and v.strip() for v in values):
        raise _Refused("a name in quotes, or a list of names")
    return tuple(dict.fromkeys(values))


def _events(about: Key, value: object) -> dict[str, float]:
    if not isinstance(value, Mapping) or not value:
        raise _Refused("a table of events and discharges", fix='write events = { "10-year" = 850 }')
    numbers = {}
    for name, discharge in value.items():
        if not isinstance(name, str) or not name.strip():
            raise _Refused("a name for each event")
        try:
            numbers[name] = _number(about, discharge)
        except _Refused as refused:
            raise _Refused(f'{refused.needed} for "{name}"', refused.code) from None
    return numbers


KINDS = {
    "text": _text,
    "choice": _choice,
    "number": _number,
    "number or zero": _number_or_zero,
    "count": _count,
    "flag": _flag,
    "file": _path,
    "table": _path,
    "folder": _path,
    "layer": _layer,
    "rasters": _rasters,
    "events": _events,
    "names": _names,
}
"""The kinds of key: each a function that returns the checked value or refuses."""


def _from_option(kind: str, given: object) -> object:
    """Return the value that an option's text (or texts) stands for; what cannot be read stays text."""
    if kind in ("rasters", "events", "names") and isinstance(given, list | tuple):
        if kind != "events" or not all(isinstance(part, str) for part in given):
            return list(given)
        pairs = [part.rpartition("=") for part in given]
        if len(pairs) == 1 and given[0].lstrip().startswith("{"):
            return _from_option(kind, given[0])
        return {name.strip(): _as_number(value, float) for name, _, value in pairs}
    if not isinstance(given, str):
        return given
    if (kind in ("rasters", "names") and given.startswith("[")) or (
        kind == "events" and given.lstrip().startswith("{")
    ):
        try:
            return tomllib.loads(f"value = {given}")["value"]
        except tomllib.TOMLDecodeError:
            return given
    if kind == "events":
        return _from_option(kind, given.split(","))
    if kind in ("number", "number or zero"):
        return _as_number(given, float)
    if kind == "count":
        return _as_number(given, int)
    if kind == "flag":
        return {"true": True, "false": False}.get(given.strip().lower(), given)
    return given


def _as_number(text: str, kind: type) -> object:
    try:
        return kind(text)
    except ValueError:
        return text


# --------------------------------------------------------------------------------------------------
# Paths


def split_layer(spec: str) -> tuple[str, str | None]:
    """Return the path and the layer's name (None where none is named) of ``path|layer=name``.

    Examples
    --------
    >>> split_layer("data.gpkg|layer=roads")
    ('data.gpkg', 'roads')
    >>> split_layer("roads.shp")
    ('roads.shp', None)
    """
    # GDAL's users also write layername; both mean the same.
    path, bar, layer = spec.replace("|layername=", "|layer=", 1).partition("|layer=")
    return path.strip(), (layer.strip() if bar else None)


def _is_virtual(path: str) -> bool:
    # Names that only the raster and vector libraries can open: inside an archive, on a server, a
    # part of a file. One letter before a colon is a drive.
    return path.startswith("/vsi") or re.match(r"[A-Za-z][A-Za-z0-9_+.-]+:", path) is not None


def _absolute(path: str, folder: Path) -> str:
    if _is_virtual(path):
        return path
    return os.path.normpath(os.path.join(folder, os.path.expanduser(path)))


def _placed(kind: str, value: Any, folder: Path) -> Any:
    """Return a checked value with its paths made absolute."""
    if kind == "table" and str(value) in table_names():
        # a file of that name beside the study is what its owner means
        own = Path(_absolute(str(value), folder))
        return own if own.is_file() else table_path(str(value))
    if kind in ("file", "table", "folder"):
        return Path(_absolute(str(value), folder))
    if kind == "layer":
        path, layer = split_layer(value)
        return _absolute(path, folder) + ("" if layer is None else f"|layer={layer}")
    if kind == "rasters":
        return tuple(_absolute(path, folder) for path in value)
    return value


def _absent_files(kind: str, value: Any) -> list[str]:
    """Return those of the paths in a placed value that are not there."""
    if kind in ("file", "table"):
        return [] if value.is_file() else [str(value)]
    if kind not in ("layer", "rasters"):
        return []
    paths = [split_layer(value)[0]] if kind == "layer" else value
    return [path for path in paths if not _is_virtual(path) and not os.path.exists(path)]


# --------------------------------------------------------------------------------------------------
# Reading


def nearest(word: str, known: Collection[str]) -> str:
    """Return the known word most like `word`.

    Examples
    --------
    >>> nearest("spacng", ["sampling", "spacing"])
    'spacing'
    """
    return difflib.get_close_matches(word.lower(), known, n=1, cutoff=0.0)[0]


def _read_table(
    cls: type[Table],
    given: Mapping[str, object],
    place: Callable[[str], str],
    needed: Collection[str] = (),
) -> tuple[dict[str, Any], list[InputError]]:
    """Return the checked values of the keys given, and every problem; `place` says where a key stands.

    `needed` are keys that the other tables of the study ask for.
    """
    table_name, keys = _table_name(cls), keys_of(cls)
    values: dict[str, Any] = {}
    problems: list[InputError] = []
    for name, value in given.items():
        if name not in keys:
            problems.append(_unknown_key(table_name, name, place(name)))
            continue
        try:
            values[name] = KINDS[keys[name].kind](keys[name], value)
        except _Refused as refused:
            problems.append(
                InputError(
                    refused.code,
                    f"{table_name}.{name} is {_shown(value)}; needed is {refused.needed}",
                    where=place(name),
                    fix=refused.fix or f"for example {name} = {keys[name].example}",
                )
            )
    # A key that was most likely misspelt is reported once, as unknown, not as missing too.
    meant = {
        close for name in given if name not in keys for close in difflib.get_close_matches(name, keys, n=1)
    }
    absent: list[tuple[str, ...]] = [
        (name,) for name, about in keys.items() if about.needed and name not in given
    ]
    absent += cls.missing([name for name in given if name in keys])
    absent += [(name,) for name in needed if name not in given and (name,) not in absent]
    for names in absent:
        if not meant.intersection(names):
            lines = " or ".join(f"{name} = {keys[name].example}" for name in names)
            options = " or ".join(f"--{table_name}.{name}" for name in names)
            problems.append(
                InputError(
                    "key-missing",
                    f"[{table_name}] has no {' and no '.join(names)}",
                    where=place(""),
                    fix=f"add {lines} under [{table_name}], or give {options}",
                )
            )
    for first, second in cls.either:
        if first in given and second in given:
            problems.append(
                InputError(
                    "key-conflict",
                    f"{table_name}.{first} and {table_name}.{second} are both given",
                    where=place(second),
                    fix=f"keep {first} or {second}, not both",
                )
            )
    return values, problems


def _shown(value: object) -> str:
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, str):
        return f'"{value}"'
    if isinstance(value, dict):
        return ", ".join(f"{name} = {_shown(inner)}" for name, inner in value.items())
    if isinstance(value, list | tuple):
        return f"[{', '.join(_shown(inner) for inner in value)}]"
    return str(value)


def _unknown_key(table_name: str, name: str, where: str) -> InputError:
    known = list(keys_of(TABLES[table_name]))
    elsewhere = [f"{other}.{name}" for other, cls in TABLES.items() if name in keys_of(cls)]
    close = difflib.get_close_matches(name.lower(), known, n=1)
    best = close[0] if close or not elsewhere else elsewhere[0]
    if not close and not elsewhere:
        best = nearest(name, known)
    return InputError(
        "key-unknown",
        f'unknown key "{name}" in [{table_name}]; the nearest known is {best}',
        where=where,
        fix=f"[{table_name}] takes {', '.join(known)}",
    )


def _unknown_table(name: str, value: object, where: str) -> InputError:
    if isinstance(value, dict | list):
        what = f"unknown table [{name}]; the nearest known is [{nearest(name, list(TABLES))}]"
    else:
        homes = [f"{table}.{name}" for table, cls in TABLES.items() if name in keys_of(cls)]
        every = [f"{table}.{k}" for table, cls in TABLES.items() for k in keys_of(cls)]
        best = homes[0] if homes else nearest(name, every)
        what = f'key "{name}" stands before any table; the nearest known is {best}'
    return InputError("key-unknown", what, where=where, fix=f"tables are {', '.join(TABLES)}")


def _read_toml(path: Path) -> tuple[dict[str, Any], str]:
    """Return the tables of a TOML file and its text."""
    try:
        raw = path.read_bytes()
    except FileNotFoundError:
        raise InputError(
            "file-missing",
            f"no study file {path}",
            where=str(path),
            fix="`terrain2q start FOLDER` writes one",
        ) from None
    except OSError as error:
        raise InputError("file-unreadable", f"{path}: {error.strerror}", where=str(path)) from None
    try:
        text = raw.decode("utf-8-sig")
        return tomllib.loads(text.replace("\r\n", "\n")), text
    except UnicodeDecodeError as error:
        line = raw.count(b"\n", 0, error.start) + 1
        raise InputError(
            "study-not-toml",
            "the text is not UTF-8",
            where=f"{path}, line {line}",
            fix="save the file as UTF-8",
        ) from None
    except tomllib.TOMLDecodeError as error:
        raise _not_toml(path, text, str(error)) from None


def _not_toml(path: Path, text: str, message: str) -> InputError:
    what, _, position = message.rstrip(")").partition(" (at ")
    found = re.match(r"line (\d+), column (\d+)", position)
    lines = text.splitlines() or [""]
    number = int(found[1]) if found else len(lines)
    line = lines[min(number, len(lines)) - 1].strip()
    fix = "write paths with / or in single quotes: 'C:\\data\\dem.tif'" if "\\" in line else ""
    return InputError("study-not-toml", f"{what}: {line}", where=f"{path}, line {number}", fix=fix)


def _line_numbers(text: str) -> dict[tuple[str, str], int]:
    """Return the line of each table and key. Only for messages: text in quotes over lines may mislead it."""
    found: dict[tuple[str, str], int] = {}
    table = ""
    for number, line in enumerate(text.splitlines(), start=1):
        if header := re.match(r"\s*\[+\s*([^\]]+?)\s*\]", line):
            table, _, inner = header[1].replace('"', "").partition(".")
            found.setdefault((table, inner), number)
        elif name := re.match(r"""\s*["']?([\w.-]+)["']?\s*=""", line):
            found.setdefault((table, name[1]), number)
    return found


class _Given:
    """What a study file and options give, and every problem met on the way."""

    def __init__(self, path: Path | None) -> None:
        self.path = path
        self.here = Path.cwd()
        self.folder = self.here if path is None else path.absolute().parent
        self.values: dict[str, dict[str, object]] = {}
        self.from_options: set[tuple[str, str]] = set()
        self.problems: list[InputError] = []
        # A table that was most likely misspelt is reported once, as unknown, not as missing too.
        self.meant: set[str] = set()
        self.lines: dict[tuple[str, str], int] = {}
        if path is not None:
            self._take_file(path)

    def _take_file(self, path: Path) -> None:
        tables, text = _read_toml(path)
        self.lines = _line_numbers(text)
        for name, value in tables.items():
            where = self.place(name, "") if (name, "") in self.lines else self.place("", name)
            if name not in TABLES:
                self.meant.update(difflib.get_close_matches(name, TABLES, n=1))
                self.problems.append(_unknown_table(name, value, where))
            elif isinstance(value, dict):
                self.values[name] = dict(value)
            else:
                self.meant.add(name)
                what, fix = f"{name} is not a table of keys", f"begin it with [{name}]"
                self.problems.append(InputError("value-not-allowed", what, where=where, fix=fix))

    def take_options(self, options: Mapping[str, object]) -> None:
        """Put options before the file; one that excludes a key of the file takes its place."""
        every = {f"{table}.{name}": (table, name) for table, cls in TABLES.items() for name in keys_of(cls)}
        for option, value in options.items():
            if option not in every:
                what = f'unknown option "{option}"; the nearest known is {nearest(option, every)}'
                self.problems.append(InputError("key-unknown", what, where=f"--{option}"))
                continue
            table, name = every[option]
            self.from_options.add((table, name))
            kind = keys_of(TABLES[table])[name].kind
            self.values.setdefault(table, {})[name] = _from_option(kind, value)
        for table, name in self.from_options:
            for pair in TABLES[table].either:
                if name in pair:
                    other = pair[1 - pair.index(name)]
                    if (table, other) not in self.from_options and other in self.values[table]:
                        del self.values[table][other]
                        self._drop_with(table, other)

    def _drop_with(self, table: str, gone: str) -> None:
        """Take away the file's keys that mean something only beside a key that is gone."""
        for name, other in TABLES[table].only_with.items():
            if other == gone and (table, name) not in self.from_options:
                self.values[table].pop(name, None)

    def place(self, table: str, name: str) -> str:
        """Return where a key stands (a table, where `name` is empty), in words."""
        if (table, name) in self.from_options:
            return f"--{table}.{name}"
        if self.path is None:
            return "the options"
        line = self.lines.get((table, name), self.lines.get((table, "")))
        return f"{self.path}" + (f", line {line}" if line else "") + (f", [{table}]" if table else "")

    def table(self, table: str) -> Table | None:
        """Return a table, checked and with its paths made absolute; None where it has problems."""
        cls = TABLES[table]
        given = self.values.get(table, {})
        # only lines at crossings have no spacing
        spaced = table == "cut_lines" and "crossings" not in self.values and "path" not in given
        needed = ("every",) if spaced and {"width", "height"}.intersection(given) else ()
        values, problems = _read_table(cls, given, lambda name: self.place(table, name), needed)
        for name, about in keys_of(cls).items():
            if about.kind == "folder":
                values.setdefault(name, default_of(cls, name))
            if name in values:
                is_option = (table, name) in self.from_options
                values[name] = _placed(about.kind, values[name], self.here if is_option else self.folder)
                for absent in _absent_files(about.kind, values[name]):
                    what = f"{table}.{name}: no file {absent}"
                    fix = "correct the path; it starts at the current folder" if is_option else ""
                    if about.kind == "table":
                        fix = f"correct the path, or name a built-in table: {', '.join(table_names())}"
                    problems.append(InputError("file-missing", what, where=self.place(table, name), fix=fix))
        self.problems += problems
        return None if problems else cls(**{attribute_of(name): value for name, value in values.items()})


def load_study(
    path: str | os.PathLike[str] | None,
    options: Mapping[str, object] | None = None,
    *,
    needs: Collection[str] = NEEDED_TO_RUN,
) -> Study:
    """Read and check a study file, options, or both.

    Parameters
    ----------
    path : path-like or None
        The study file; None where the options are the whole study.
    options : mapping of str to object, optional
        Values by ``table.key``, as text or already of the key's kind. They go before the file's; an
        option that excludes a key of the file (``slope.value`` against ``field``) takes its place.
        Relative paths in options start at the current folder, those of the file at the file.
    needs : collection of str
        The tables that may not be absent.

    Returns
    -------
    Study

    Raises
    ------
    InputError
        The study is wrong; :class:`~terrain2q.errors.InputErrors` where there are several problems.
        Codes: ``file-missing``, ``file-unreadable``, ``study-not-toml``, ``key-unknown``,
        ``key-missing``, ``key-conflict``, ``value-not-allowed``, ``number-not-positive``.
    """
    given = _Given(None if path is None else Path(path))
    given.take_options(options or {})
    made = {}
    if "crossings" in given.values and "cut_lines" not in given.values:
        # crossings lay out their own sections and take the slope from the ground
        needs = [name for name in needs if name not in ("cut_lines", "slope")]
    for name in TABLES:
        needed = name == "study" or (name in needs and name not in given.meant)
        made[name] = given.table(name) if needed or name in given.values or name in DEFAULTED else None
    raise_together(given.problems)
    return Study(**made, path=given.path, folder=given.folder)  # type: ignore[arg-type]


# --------------------------------------------------------------------------------------------------
# The page of keys


def shown_default(table: type[Table], name: str) -> str:
    """Return a key's default as it is written in TOML; empty where there is none."""
    value = default_of(table, name)
    if value is MISSING or value is None or value == "":
        return ""
    return f'"{value}"' if isinstance(value, Path) else _shown(value)


def keys_page() -> str:
    """Return every table and key as Markdown, for the docs."""
    parts = [
        "# The study file",
        "",
        "A TOML file; `terrain2q start FOLDER` writes one. Paths are relative to it; a vector path may",
        "carry a layer: `data.gpkg|layer=name`. Unknown keys are errors. Every key is also an option of",
        "the commands, such as `--terrain.dem dem.tif`; options go before the file, and their relative",
        "paths start at the current folder.",
        "",
        "This page is written by `python -m terrain2q.study > docs/study_file.md`.",
        "",
    ]
    for table_name, cls in TABLES.items():
        parts += [f"## [{table_name}]", "", (cls.__doc__ or "").splitlines()[0], ""]
        parts += ["| key | meaning | default | example |", "|---|---|---|---|"]
        for name, about in keys_of(cls).items():
            default = (
                "needed" if about.needed else f"`{shown}`" if (shown := shown_default(cls, name)) else ""
            )
            parts.append(
                f"| `{name}` | {about.help} | {default} | `{about.example.replace('|', chr(92) + '|')}` |"
            )
        if cls.either:
            parts += ["", *(f"Only one of `{a}` and `{b}` may be given." for a, b in cls.either)]
        parts.append("")
    return "\n".join(parts)


if __name__ == "__main__":
    print(keys_page(), end="")
