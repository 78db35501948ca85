"""Land cover and channel polygons under a section: where each roughness begins and ends.

A polygon's edge divides a section where the line really crosses it, not at the nearest point of the profile.
Between two such places the polygon is found that holds the middle of the piece:

- Where several polygons of different classes hold it, they overlap; the higher roughness counts, which puts
  the water on the high side (finding ``cover-overlap``).
- Where the line runs along an edge, within a micrometre, both neighbours touch it and neither holds it; the
  higher roughness counts, which is neither a gap nor an overlap.
- Where none holds it the cover has a gap (finding ``cover-gap`` or ``cover-gap-no-default``).

Pieces shorter than a micrometre belong to their neighbour.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from pathlib import Path
from types import MappingProxyType
from typing import TYPE_CHECKING, Protocol

import numpy as np
import shapely

from terrain2q.errors import Finding, InputError
from terrain2q.ground.layers import (
    clean_text,
    clean_texts,
    ignored_columns,
    in_plan,
    read_table,
    require_field,
)
from terrain2q.ground.streams import Ground, feature_ids, length_text
from terrain2q.units import SI, UnitSystem, unit_system

if TYPE_CHECKING:
    import geopandas

SMALLEST = 1e-6
"""Metres below which a piece is nothing, and within which a line runs along an edge."""

LEFT, CHANNEL, RIGHT = "left floodplain", "channel", "right floodplain"
"""The zones of a section."""

_CHUNK = 4_000_000

_MANY = 300
"""Profiles from which on compiled code is worth its loading."""


class _Profile(Protocol):
    """What is needed of a sampled cut line: stations [m] and map coordinates of its points."""

    stations: np.ndarray
    x: np.ndarray
    y: np.ndarray
    is_vertex: np.ndarray


PARTS = ("base", "irregularity", "variation", "obstructions", "vegetation", "meandering")
"""What n is made of where a table gives its parts."""

CHANNEL_PARTS = ("variation", "meandering")
"""Parts that only a channel has: a row that gives one of them is a channel's, else a flood plain's."""


@dataclass(frozen=True)
class FallingN:
    """Manning's n that falls with depth: level, then straight between two depths, then level.

    Attributes
    ----------
    shallow, deep : float
        n at and below `shallow_depth`, at and above `deep_depth` [s/m^(1/3)].
    shallow_depth, deep_depth : float
        Depth of water over the lowest ground of the subarea, m.
    """

    shallow: float
    shallow_depth: float
    deep: float
    deep_depth: float


@dataclass(frozen=True)
class Roughness:
    """Manning's n of one class: the value, its likely low and high (NaN where not stated), its source.

    Where n falls with depth, `n` is that of deep water and `falling` holds the rule.
    """

    n: float
    n_low: float = float("nan")
    n_high: float = float("nan")
    source: str = ""
    falling: FallingN | None = None


@dataclass(frozen=True)
class RoughnessTable:
    """Manning's n by land-cover class.

    Attributes
    ----------
    rows : mapping of str to Roughness
        By class as clean text, so that 41, 41.0 and "41" are one class.
    source : str
        The file or the name of the table.
    findings : tuple of Finding
        Columns whose names look misspelled.
    """

    rows: Mapping[str, Roughness]
    source: str = ""
    findings: tuple[Finding, ...] = ()

    def __reduce__(self):
        # a mapping that cannot be changed cannot be pickled either
        return RoughnessTable, (dict(self.rows), self.source, self.findings)

    def __getitem__(self, land_class: object) -> Roughness:
        return self.rows[clean_text(land_class)]

    def __contains__(self, land_class: object) -> bool:
        return clean_text(land_class) in self.rows

    @classmethod
    def from_csv(
        cls,
        path: str | Path,
        units: str | UnitSystem = SI,
        n_from_parts: Callable[..., float] | None = None,
    ) -> RoughnessTable:
        """Read a table with the column ``class`` and, row by row, n in one of three ways.

        - ``n``: one number;
        - ``n_shallow, depth_shallow, n_deep, depth_deep``: n that falls with depth, straight between two
          depths of water and level beyond them;
        - ``base`` and any of ``irregularity, variation, obstructions, vegetation, meandering``: n from its
          parts. A row with ``variation`` or ``meandering`` is a channel's, any other a flood plain's.

        ``n_low, n_high, source`` are optional. Other columns are ignored.

        Parameters
        ----------
        path : str or Path
            A CSV file.
        units : str or UnitSystem
            Of the depths.
        n_from_parts : callable, optional
            Returns n from the parts, given by name, and from ``zone`` (``channel`` or ``floodplain``).
            Without it a table may not give parts.

        Raises
        ------
        InputError
            Codes of :func:`~terrain2q.ground.layers.read_table`; ``number-not-positive`` where n is not a
            number above zero; ``value-not-allowed`` where n_low is above n_high, n rises with depth,
            a part is outside what is published, or a row has no class; ``key-conflict`` and ``key-missing``
            where a row gives n in two ways, or in none; ``class-duplicate``.
        """
        known = ("class", "n", *_FALLING, *PARTS, "n_low", "n_high", "source")
        table = read_table(path, known[:1], "land-cover table", known[1:])
        if not {"n", "n_shallow", "base"}.intersection(table.columns):
            raise InputError(
                "field-missing",
                f"there is no column 'n'; the columns are {', '.join(map(str, table.columns))}",
                where=f"land-cover table: {path}",
                fix=f"add a column n; or {', '.join(_FALLING)}; or base and other parts of n",
            )
        units = unit_system(units)
        rows: dict[str, Roughness] = {}
        doubles: list[str] = []
        for line, row in zip(table.index, table.to_dict("records"), strict=True):
            where = f"land-cover table: {path}, line {line}"
            name = clean_text(row["class"])
            if not name:
                raise InputError(
                    "value-not-allowed", "the row has no class", where=where, fix="fill in the class"
                )
            if name in rows:
                doubles.append(name)
            n, falling, how = _row_n(row, name, where, units, n_from_parts)
            low = _number(row["n_low"], "n_low", name, where) if row.get("n_low") else np.nan
            high = _number(row["n_high"], "n_high", name, where) if row.get("n_high") else np.nan
            if low > high:
                raise InputError(
                    "value-not-allowed",
                    f"class {name}: n_low = {low:g} is above n_high = {high:g}",
                    where=where,
                    fix="give n_low <= n_high, or leave both empty",
                )
            source = ", ".join(filter(None, (row.get("source") or Path(path).name, how)))
            rows[name] = Roughness(n, float(low), float(high), source, falling)
        if doubles:
            raise InputError(
                "class-duplicate",
                f"more than one row for class {', '.join(dict.fromkeys(doubles))}",
                where=f"land-cover table: {path}",
            )
        findings = tuple(ignored_columns(table, known, "land_cover"))
        return cls(MappingProxyType(rows), str(path), findings)


_FALLING = ("n_shallow", "depth_shallow", "n_deep", "depth_deep")


def _row_n(
    row: Mapping[str, str],
    name: str,
    where: str,
    units: UnitSystem,
    n_from_parts: Callable[..., float] | None,
) -> tuple[float, FallingN | None, str]:
    """Return n of one row, how it falls with depth, and how it was made, in words."""
    given = {key: [c for c in columns if row.get(c)] for key, columns in _WAYS.items()}
    ways = [key for key, columns in given.items() if columns]
    if len(ways) > 1:
        named = " and ".join(given[way][0] for way in ways)
        raise InputError(
            "key-conflict", f"class {name}: {named} are both given", where=where, fix="give n in one way only"
        )
    if ways == ["falling"]:
        return _falling_n(row, name, where, units)
    if ways == ["parts"]:
        return _n_of_parts(row, given["parts"], name, where, n_from_parts)
    return _number(row.get("n", ""), "n", name, where), None, ""


_WAYS = MappingProxyType({"n": ("n",), "falling": _FALLING, "parts": PARTS})


def _falling_n(row, name: str, where: str, units: UnitSystem) -> tuple[float, FallingN, str]:
    missing = [column for column in _FALLING if not row.get(column)]
    if missing:
        raise InputError(
            "key-missing",
            f"class {name}: n falls with depth and {', '.join(missing)} is not given",
            where=where,
            fix=f"fill in all of {', '.join(_FALLING)}",
        )
    shallow, deep = (_number(row[c], c, name, where) for c in ("n_shallow", "n_deep"))
    low, high = (_number(row[c], c, name, where) for c in ("depth_shallow", "depth_deep"))
    if not (deep <= shallow and low < high):
        raise InputError(
            "value-not-allowed",
            f"class {name}: n is {shallow:g} at depth {low:g} and {deep:g} at depth {high:g}",
            where=where,
            fix="n falls (or stays) as depth grows: let n_deep <= n_shallow and depth_shallow < depth_deep",
        )
    symbol, metres = units.symbol("length"), 1.0 / units.per_si("length")
    how = f"n {shallow:g} to a depth of {low:g} {symbol}, {deep:g} from {high:g} {symbol} on"
    return deep, FallingN(shallow, low * metres, deep, high * metres), how


def _n_of_parts(row, given: list[str], name: str, where: str, n_from_parts) -> tuple[float, None, str]:
    if n_from_parts is None:
        raise InputError("value-not-allowed", f"class {name}: n is given in parts", where=where, fix="give n")
    if "base" not in given:
        raise InputError(
            "key-missing", f"class {name}: {given[0]} is given without base", where=where, fix="fill in base"
        )
    zone = "channel" if set(CHANNEL_PARTS).intersection(given) else "floodplain"
    parts = {c: _part(row[c], c, name, where) for c in given}
    try:
        n = n_from_parts(**parts, zone=zone)
    except InputError as error:
        raise error.at(f"{where}: class {name}") from None
    return (
        n,
        None,
        f"n from parts ({zone}): " + ", ".join(f"{part} {value:g}" for part, value in parts.items()),
    )


def _part(text: str, column: str, land_class: str, where: str) -> float:
    # a part may be zero: what is not there adds nothing
    try:
        if float(text) == 0.0:
            return 0.0
    except ValueError:
        pass
    return _number(text, column, land_class, where)


def _number(text: str, column: str, land_class: str, where: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = float("nan")
    if not (np.isfinite(value) and value > 0.0):
        raise InputError(
            "number-not-positive",
            f"class {land_class}: {column} is {text!r}, not a number above zero",
            where=where,
        )
    return value


@dataclass(frozen=True)
class CoverPiece:
    """A stretch of a section with one land-cover class.

    Attributes
    ----------
    start, end : float
        Stations [m].
    land_class : str
        Empty in a gap.
    n, n_low, n_high : float
        Manning's n [s/m^(1/3)]; NaN where not known.
    n_source : str
    falling : FallingN or None
        How n falls with depth, where it does; `n` is then that of deep water.
    """

    start: float
    end: float
    land_class: str
    n: float
    n_low: float = float("nan")
    n_high: float = float("nan")
    n_source: str = ""
    falling: FallingN | None = None


@dataclass(frozen=True)
class SubareaSpec:
    """A stretch of a section with one roughness in one zone: a :class:`CoverPiece` with its zone."""

    start: float
    end: float
    n: float
    n_low: float
    n_high: float
    n_source: str
    land_class: str
    zone: str
    falling: FallingN | None = None


def _check_default(default_n: float | None) -> None:
    if default_n is not None and not (np.isfinite(default_n) and default_n > 0.0):
        raise InputError("number-not-positive", f"default_n is {default_n}", where="land_cover: default_n")


@dataclass(frozen=True)
class FlatPieces:
    """What many profiles run over, as arrays.

    Attributes
    ----------
    told : ndarray of bool, shape (profiles,)
        Where there is a finding to tell; the pieces of such a profile are those of :meth:`Cover.pieces` all
        the same.
    bounds : ndarray of int, shape (profiles + 1,)
        Where each profile's pieces begin.
    start, end : ndarray, shape (pieces,)
        Stations.
    row : ndarray of int, shape (pieces,)
        Number of the piece's class in `classes`.
    classes : sequence of CoverPiece
        Class, n and source of every class that occurs, from station 0 to 0.
    """

    told: np.ndarray
    bounds: np.ndarray
    start: np.ndarray
    end: np.ndarray
    row: np.ndarray
    classes: Sequence[CoverPiece]


class UniformCover:
    """One roughness everywhere: what a study has that gives `default_n` and no polygons.

    Parameters
    ----------
    n : float
        Manning's n [s/m^(1/3)], above zero.
    source : str
        Where it is from.

    Raises
    ------
    InputError
        n is not above zero (code ``number-not-positive``).
    """

    findings: tuple[Finding, ...] = ()

    def __init__(self, n: float, source: str = "default_n") -> None:
        _check_default(n)
        self.default_n = float(n)
        self.source = source

    def pieces(self, profile: _Profile, section_id: str = "") -> tuple[list[CoverPiece], list[Finding]]:
        """Return one piece from the first to the last station, and no finding."""
        if not len(profile.stations):
            return [], []
        start, end = float(profile.stations[0]), float(profile.stations[-1])
        return [CoverPiece(start, end, "", self.default_n, n_source=self.source)], []

    def pieces_many(
        self, profiles: Sequence[_Profile], section_ids: Sequence[str] | None = None
    ) -> list[tuple[list[CoverPiece], list[Finding]]]:
        """Return :meth:`pieces` of many profiles."""
        return [self.pieces(profile) for profile in profiles]

    def flat_pieces(self, profiles: Sequence[_Profile]) -> FlatPieces:
        """Return the same as arrays; every profile has points."""
        count = len(profiles)
        return FlatPieces(
            np.zeros(count, dtype=bool),
            np.arange(count + 1),
            np.array([p.stations[0] for p in profiles], dtype=float),
            np.array([p.stations[-1] for p in profiles], dtype=float),
            np.zeros(count, dtype=np.int64),
            [CoverPiece(0.0, 0.0, "", self.default_n, n_source=self.source)],
        )


class Cover:
    """Land-cover polygons with their roughness.

    Parameters
    ----------
    polygons : geopandas.GeoDataFrame
        Polygons in the CRS of the profiles, with a column ``feature_id``. Invalid ones are mended.
    class_field : str
        The column with the class.
    roughness : RoughnessTable
        Manning's n of every class that occurs.
    default_n : float, optional
        Manning's n where the cover has a gap.
    units : str or UnitSystem
        For lengths in the findings' messages.
    every_class : sequence of str, optional
        The classes of the whole layer where `polygons` are a part of it.

    Attributes
    ----------
    findings : list of Finding
        On the layer and the table: ``polygon-mended``, ``polygon-dropped``, ``class-empty``,
        ``column-ignored``.

    Raises
    ------
    InputError
        Codes ``field-missing``, ``class-missing`` (lists every class of the layer that the table lacks) and
        ``number-not-positive``.
    """

    def __init__(
        self,
        polygons: geopandas.GeoDataFrame,
        class_field: str,
        roughness: RoughnessTable,
        default_n: float | None = None,
        units: str | UnitSystem = SI,
        every_class: Sequence[str] | None = None,
    ) -> None:
        _check_default(default_n)
        where = f"land cover: {polygons.attrs.get('source', 'polygons')}"
        require_field(polygons, class_field, key="class_field", where=where)
        classes = np.asarray(clean_texts(polygons[class_field]), dtype=object)
        there = set(classes if every_class is None else every_class) - {""}
        missing = sorted(there - set(roughness.rows), key=_natural)
        if missing:
            raise InputError(
                "class-missing",
                f"{len(missing)} of the classes in {class_field!r} are not in "
                f"{roughness.source or 'the table'}: {', '.join(missing)}",
                where=where,
            )
        self.units = unit_system(units)
        self.default_n = None if default_n is None else float(default_n)
        self.roughness = roughness
        self.findings: list[Finding] = list(roughness.findings)
        shapes, kept = mended(polygons, "land_cover", self.findings)
        blank = kept & (classes == "")
        if blank.any():
            ids = feature_ids(polygons)
            rows = np.flatnonzero(blank)
            first = shapes[rows[0]].representative_point()
            named = ", ".join(ids[row] for row in rows[:5]) + (" ..." if len(rows) > 5 else "")
            message = f"{len(rows)} of {len(ids)} polygons have no class in {class_field!r} ({named})"
            self.findings.append(
                Finding("class-empty", message, "land_cover", ids[rows[0]]).at(first.x, first.y)
            )
        kept &= ~blank
        self._classes = classes[kept]
        self._n = np.array([roughness.rows[name].n for name in self._classes], dtype=float)
        self._lines = _PolygonsUnderLines(shapes[kept], polygons.crs)

    def pieces(self, profile: _Profile, section_id: str = "") -> tuple[list[CoverPiece], list[Finding]]:
        """Return what one profile runs over.

        Parameters
        ----------
        profile : Profile
        section_id : str
            For the findings.

        Returns
        -------
        pieces : list of CoverPiece
            From the first station to the last without gap or overlap; n is NaN in a gap without default.
        findings : list of Finding
            Codes ``cover-overlap``, ``cover-gap``, ``cover-gap-no-default``.
        """
        return self.pieces_many([profile], [section_id])[0]

    def pieces_many(
        self, profiles: Sequence[_Profile], section_ids: Sequence[str] | None = None
    ) -> list[tuple[list[CoverPiece], list[Finding]]]:
        """Return :meth:`pieces` of many profiles, worked out together.

        Parameters
        ----------
        profiles : sequence of Profile
        section_ids : sequence of str, optional
            For the findings, as many as profiles.
        """
        section_ids = [""] * len(profiles) if section_ids is None else list(section_ids)
        cut = self._lines.cut(profiles)
        # The first of each interval's polygons, sorted by falling n (then class, then order), counts.
        order = np.lexsort((cut.polygon, -self._n[cut.polygon], ~cut.holds, cut.interval))
        interval, polygon, holds = cut.interval[order], cut.polygon[order], cut.holds[order]
        first = np.searchsorted(interval, np.arange(len(cut.start)))
        last = np.searchsorted(interval, np.arange(len(cut.start)), side="right")
        by_profile = np.searchsorted(cut.profile, np.arange(len(profiles) + 1))
        answer = []
        for number, section_id in enumerate(section_ids):
            pieces: list[CoverPiece] = []
            overlaps: dict[tuple[str, str], list[tuple[float, float]]] = {}
            gaps: list[tuple[float, float]] = []
            for index in range(by_profile[number], by_profile[number + 1]):
                span = (float(cut.start[index]), float(cut.end[index]))
                here = slice(first[index], last[index])
                classes = list(dict.fromkeys(self._classes[polygon[here][holds[here]]].tolist()))
                if first[index] == last[index]:
                    gaps.append(span)
                    piece = CoverPiece(*span, "", np.nan)
                    if self.default_n is not None:
                        piece = CoverPiece(*span, "", self.default_n, n_source="default_n")
                else:
                    name = str(self._classes[polygon[first[index]]])
                    row = self.roughness.rows[name]
                    piece = CoverPiece(*span, name, row.n, row.n_low, row.n_high, row.source, row.falling)
                for other in classes[1:]:
                    overlaps.setdefault((str(classes[0]), str(other)), []).append(span)
                if pieces and (
                    pieces[-1].land_class == piece.land_class or piece.end - piece.start < SMALLEST
                ):
                    pieces[-1] = replace(pieces[-1], end=piece.end)
                else:
                    pieces.append(piece)
            answer.append((pieces, self._findings(profiles[number], section_id, overlaps, gaps)))
        return answer

    def flat_pieces(self, profiles: Sequence[_Profile]) -> FlatPieces:
        """Return the pieces of :meth:`pieces_many` as arrays, and where there are findings beside them.

        Parameters
        ----------
        profiles : sequence of Profile
            Each with points.
        """
        cut = self._lines.cut(profiles)
        order = np.lexsort((cut.polygon, -self._n[cut.polygon], ~cut.holds, cut.interval))
        interval, polygon, holds = cut.interval[order], cut.polygon[order], cut.holds[order]
        number = self._class_number[polygon]
        intervals = len(cut.start)
        row = np.full(intervals, len(self._class_names))
        first = np.flatnonzero(np.diff(interval, prepend=-1))
        row[interval[first]] = number[first]
        told = np.zeros(len(profiles), dtype=bool)
        told[cut.profile[row == len(self._class_names)]] = True
        # several classes hold the interval: the first of those that hold is the first of all
        other = holds & (number != row[interval])
        told[cut.profile[interval[other]]] = True

        length = cut.end - cut.start
        begins = np.diff(cut.profile, prepend=-1) != 0
        kept = np.flatnonzero(begins | (length >= SMALLEST))
        new = (np.diff(cut.profile[kept], prepend=-1) != 0) | (np.diff(row[kept], prepend=-1) != 0)
        piece = kept[new]
        profile = cut.profile[piece]
        ends_at = np.append(piece[1:] - 1, intervals - 1)[: len(piece)]
        return FlatPieces(
            told,
            np.searchsorted(profile, np.arange(len(profiles) + 1)),
            cut.start[piece],
            cut.end[ends_at],
            row[piece],
            self._class_pieces,
        )

    @cached_property
    def _class_names(self) -> list[str]:
        return list(dict.fromkeys(self._classes.tolist()))

    @cached_property
    def _class_number(self) -> np.ndarray:
        place = {name: i for i, name in enumerate(self._class_names)}
        return np.array([place[name] for name in self._classes], dtype=np.int64)

    @cached_property
    def _class_pieces(self) -> list[CoverPiece]:
        rows = [(name, self.roughness.rows[name]) for name in self._class_names]
        gap = np.nan if self.default_n is None else self.default_n
        return [
            *(CoverPiece(0.0, 0.0, name, r.n, r.n_low, r.n_high, r.source, r.falling) for name, r in rows),
            CoverPiece(0.0, 0.0, "", gap, n_source="" if self.default_n is None else "default_n"),
        ]

    def _findings(self, profile, section_id: str, overlaps, gaps) -> list[Finding]:
        findings = []
        name = f"section {section_id}" if section_id else "the section"
        for (taken, other), spans in overlaps.items():
            spans = _joined(spans)
            message = (
                f"{name} runs over {taken} and {other} at once from {self._ranges(spans)}; "
                f"n = {self.roughness[taken].n:g} of {taken} was used"
            )
            findings.append(
                Finding("cover-overlap", message, "land_cover", section_id).at(*_middle(profile, spans[0]))
            )
        if gaps:
            spans = _joined(gaps)
            total = length_text(sum(end - start for start, end in spans), self.units)
            message = f"{name} has no land cover over {total}, from {self._ranges(spans)}"
            code = "cover-gap-no-default"
            if self.default_n is not None:
                code, message = "cover-gap", f"{message}; n = {self.default_n:g} was used"
            findings.append(Finding(code, message, "land_cover", section_id).at(*_middle(profile, spans[0])))
        return findings

    def _ranges(self, spans: list[tuple[float, float]]) -> str:
        return _ranges(spans, self.units)


def _ranges(spans: list[tuple[float, float]], units: UnitSystem) -> str:
    factor, symbol = units.per_si("length"), units.symbol("length")
    shown = [f"{start * factor:.2f} to {end * factor:.2f} {symbol}" for start, end in spans[:4]]
    return ", ".join(shown) + (f" and {len(spans) - 4} more" if len(spans) > 4 else "")


def _joined(spans: list[tuple[float, float]], tolerance: float = 0.0) -> list[tuple[float, float]]:
    """Return spans in order, those that touch made one."""
    answer: list[tuple[float, float]] = []
    for start, end in spans:
        if answer and start <= answer[-1][1] + tolerance:
            answer[-1] = (answer[-1][0], max(end, answer[-1][1]))
        else:
            answer.append((start, end))
    return answer


def _middle(profile: _Profile, span: tuple[float, float]) -> tuple[float, float]:
    station = 0.5 * (span[0] + span[1])
    return tuple(float(np.interp(station, profile.stations, values)) for values in (profile.x, profile.y))


def _natural(text: str):
    """Sort classes that are numbers by their value, before those that are words."""
    return (0, int(text), text) if text.isdecimal() else (1, 0, text)


class ChannelPolygons:
    """Polygons of the channel, from bank to bank.

    Several polygons that touch are one channel. Islands (holes) belong to the channel; an island that should
    not is drawn as the end of one polygon and the start of others.

    Parameters
    ----------
    polygons : geopandas.GeoDataFrame
        Polygons in the CRS of the profiles, with a column ``feature_id``. Invalid ones are mended.
    units : str or UnitSystem
        For lengths in the findings' messages.

    Attributes
    ----------
    findings : list of Finding
        On the layer: ``polygon-mended``, ``polygon-dropped``.
    """

    def __init__(self, polygons: geopandas.GeoDataFrame, units: str | UnitSystem = SI) -> None:
        self.units = unit_system(units)
        self.findings: list[Finding] = []
        shapes, kept = mended(polygons, "channel", self.findings)
        parts = shapely.get_parts(shapes[kept])
        self._lines = _PolygonsUnderLines(shapely.polygons(shapely.get_exterior_ring(parts)), polygons.crs)

    def interval_many(
        self,
        profiles: Sequence[_Profile],
        crossings: Sequence[float],
        section_ids: Sequence[str] | None = None,
    ) -> tuple[list[tuple[float, float] | None], list[Finding]]:
        """Return where the channel lies on each profile.

        Of several pieces the one that holds the stream's crossing is taken, else the one nearest to it; the
        longest where the crossing is not known.

        Parameters
        ----------
        profiles : sequence of Profile
        crossings : sequence of float
            Station [m] where the stream crosses each profile, NaN where it is not known.
        section_ids : sequence of str, optional
            For the findings, as many as profiles.

        Returns
        -------
        intervals : list of (float, float) or None
            First and last station [m] of the channel, None where no polygon meets the profile.
        findings : list of Finding
            Codes ``channel-by-polygon-missing``, ``channel-in-pieces``, ``channel-off-stream``.
        """
        section_ids = [""] * len(profiles) if section_ids is None else list(section_ids)
        cut = self._lines.cut(profiles)
        inside = np.zeros(len(cut.start), dtype=bool)
        inside[cut.interval] = True
        by_profile = np.searchsorted(cut.profile, np.arange(len(profiles) + 1))
        intervals: list[tuple[float, float] | None] = []
        findings: list[Finding] = []
        for number, (profile, crossing, section_id) in enumerate(
            zip(profiles, crossings, section_ids, strict=True)
        ):
            here = np.arange(by_profile[number], by_profile[number + 1])
            here = here[inside[here]]
            spans = _joined(list(zip(cut.start[here].tolist(), cut.end[here].tolist(), strict=True)))
            interval, found = self._choose(spans, float(crossing), profile, section_id)
            intervals.append(interval)
            findings += found
        return intervals, findings

    def _choose(self, spans, crossing: float, profile, section_id: str):
        name = f"section {section_id}" if section_id else "the section"
        known = np.isfinite(crossing)
        if not spans:
            finding = Finding(
                "channel-by-polygon-missing", f"no channel polygon meets {name}", "channel", section_id
            )
            if not len(profile.stations):
                return None, [finding]
            at = crossing if known else 0.5 * float(profile.stations[0] + profile.stations[-1])
            return None, [finding.at(*_middle(profile, (at, at)))]
        findings = []
        if known:
            away = [max(start - crossing, crossing - end, 0.0) for start, end in spans]
            best = int(np.argmin(away))
            if away[best] > SMALLEST:
                message = (
                    f"the stream crosses {name} at {length_text(crossing, self.units)}, "
                    f"{length_text(away[best], self.units)} outside the nearest channel polygon"
                )
                findings.append(
                    Finding("channel-off-stream", message, "channel", section_id).at(
                        *_middle(profile, (crossing, crossing))
                    )
                )
        else:
            best = int(np.argmax([end - start for start, end in spans]))
        if len(spans) > 1:
            which = (
                "the longest"
                if not known
                else "the nearest to the stream"
                if findings
                else "the one at the stream"
            )
            message = (
                f"{name} runs over channel polygons from {_ranges(spans, self.units)}; "
                f"{which}, {_ranges([spans[best]], self.units)}, was taken"
            )
            findings.append(
                Finding("channel-in-pieces", message, "channel", section_id).at(
                    *_middle(profile, spans[best])
                )
            )
        return spans[best], findings


def mended(
    polygons: geopandas.GeoDataFrame, layer: str, findings: list[Finding]
) -> tuple[np.ndarray, np.ndarray]:
    """Mend the invalid polygons of a layer.

    Parameters
    ----------
    polygons : geopandas.GeoDataFrame
    layer : str
        The layer name of the findings.
    findings : list of Finding
        Added to: ``polygon-mended``, ``polygon-dropped``.

    Returns
    -------
    shapes : ndarray of Polygon or MultiPolygon, shape (n,)
    kept : ndarray of bool, shape (n,)
        Which of them can be used.
    """
    shapes = in_plan(polygons.geometry.to_numpy())
    missing = shapely.is_missing(shapes) | shapely.is_empty(shapes)
    # a polygon with coordinates that are not numbers is never valid, so only these need be looked at
    invalid = np.flatnonzero(~missing)[~shapely.is_valid(shapes[~missing])]
    coordinates, owner = shapely.get_coordinates(shapes[invalid], return_index=True)
    broken = np.zeros(len(shapes), dtype=bool)
    broken[invalid[owner[~np.isfinite(coordinates).all(axis=1)]]] = True
    kept = ~broken & ~missing
    if kept.all() and not invalid.size:
        return shapes, kept
    ids = feature_ids(polygons)
    places = coordinates[np.searchsorted(owner, np.arange(len(invalid)))][kept[invalid]]
    invalid = invalid[kept[invalid]]
    reasons = shapely.is_valid_reason(shapes[invalid])
    for row, reason, place in zip(invalid, reasons, places, strict=True):
        parts = shapely.get_parts(shapely.make_valid(shapes[row]))
        parts = [part for group in parts for part in shapely.get_parts(group) if part.geom_type == "Polygon"]
        parts = [part for part in parts if part.area > 0.0]
        if not parts:
            kept[row] = False
            message = f"polygon {ids[row]} is invalid and has no area: {reason}"
            findings.append(Finding("polygon-dropped", message, layer, ids[row]).at(*place))
            continue
        shapes[row] = parts[0] if len(parts) == 1 else shapely.union_all(parts)
        message = f"polygon {ids[row]} was invalid and has been mended: {reason}"
        findings.append(Finding("polygon-mended", message, layer, ids[row]).at(*place))
    for row in np.flatnonzero(broken | missing):
        what = "coordinates that are not numbers" if broken[row] else "no geometry"
        findings.append(Finding("polygon-dropped", f"polygon {ids[row]} has {what}", layer, ids[row]))
    return shapes, kept


@dataclass(frozen=True)
class _Cut:
    """Profiles cut where they cross polygon edges.

    `profile`, `start`, `end` have one entry for each interval (in order; stations in metres); `interval`,
    `polygon`, `holds` one for each polygon under an interval, `holds` False where the interval runs along the
    polygon's edge.
    """

    profile: np.ndarray
    start: np.ndarray
    end: np.ndarray
    interval: np.ndarray = field(repr=False)
    polygon: np.ndarray = field(repr=False)
    holds: np.ndarray = field(repr=False)


class _Segments:
    """The straight stretches of profiles, all in one array.

    Attributes
    ----------
    profile : ndarray of int, shape (s,)
    a, b : ndarray, shape (s, 2)
        Ends of each stretch on the map.
    begin, end : ndarray, shape (s,)
        Stations of the profile's map distance at both ends.
    length : ndarray, shape (s,)
        Map length.
    geometry : ndarray of LineString, shape (s,)
    """

    def __init__(self, profiles: Sequence[_Profile], tolerance: float) -> None:
        sizes = np.array([len(profile.stations) for profile in profiles], dtype=int)
        xy = np.column_stack([np.concatenate([getattr(p, v) for p in profiles] or [[]]) for v in ("x", "y")])
        owner = np.repeat(np.arange(len(sizes)), sizes)
        last = np.cumsum(sizes)[sizes > 0] - 1
        kept = np.zeros(len(xy), dtype=bool)
        if len(xy):
            kept = np.concatenate([p.is_vertex for p in profiles]).astype(bool)
            kept[last] = True
            kept[last - sizes[sizes > 0] + 1] = True
            kept |= self._bent(xy, kept, tolerance, owner)
        corners = np.flatnonzero(kept)
        same = owner[corners[1:]] == owner[corners[:-1]]
        self._first, self._last = corners[:-1][same], corners[1:][same]
        length = np.hypot(*(xy[self._last] - xy[self._first]).T)
        self._first, self._last, self.length = (v[length > 0.0] for v in (self._first, self._last, length))
        self.profile = owner[self._first]
        self.a, self.b = xy[self._first], xy[self._last]
        self.geometry = (
            shapely.linestrings(np.stack([self.a, self.b], axis=1)) if len(self.a) else np.empty(0, object)
        )
        self._tolerance = tolerance
        self._profiles = profiles
        self._xy = xy
        self._along: np.ndarray | None = None
        self._offset = np.cumsum(sizes) - sizes

    @staticmethod
    def _bent(xy: np.ndarray, kept: np.ndarray, tolerance: float, owner: np.ndarray) -> np.ndarray:
        """Return every point of the profiles that are not straight between the points kept."""
        corners = np.flatnonzero(kept)
        after = np.searchsorted(corners, np.arange(len(xy)), side="right")
        a = xy[corners[after - 1]]
        chord = xy[corners[np.minimum(after, len(corners) - 1)]] - a
        size = np.hypot(*chord.T)
        offset = xy - a
        across = np.abs(chord[:, 0] * offset[:, 1] - chord[:, 1] * offset[:, 0])
        away = np.where(size > 0.0, across / np.where(size > 0.0, size, 1.0), np.hypot(*offset.T))
        away[kept] = 0.0
        bent = np.zeros(owner[-1] + 1, dtype=bool)
        bent[owner[away > tolerance]] = True
        return bent[owner]

    def crossed(self, segment: np.ndarray, a: np.ndarray, b: np.ndarray):
        """Return where edges from `a` to `b` cross segments, as shares of the segments' length.

        Returns
        -------
        pair, share : ndarray
            Which of the pairs cross, and where. A place too many does no harm, one too few would.
        along_pair, low, high : ndarray
            Which edges run along their segment, and from where to where.
        """
        length = self.length[segment]
        direction = (self.b[segment] - self.a[segment]) / length[:, None]
        from_a, from_b = a - self.a[segment], b - self.a[segment]
        across_a = direction[:, 0] * from_a[:, 1] - direction[:, 1] * from_a[:, 0]
        across_b = direction[:, 0] * from_b[:, 1] - direction[:, 1] * from_b[:, 0]
        at_a, at_b = (direction * from_a).sum(axis=1), (direction * from_b).sum(axis=1)
        flat = (np.abs(across_a) <= self._tolerance) & (np.abs(across_b) <= self._tolerance)
        along = np.flatnonzero(flat & (np.maximum(at_a, at_b) > 0.0) & (np.minimum(at_a, at_b) < length))
        low, high = (
            np.minimum(at_a, at_b)[along] / length[along],
            np.maximum(at_a, at_b)[along] / length[along],
        )

        meets = ~flat & (np.minimum(across_a, across_b) <= self._tolerance)
        meets &= np.maximum(across_a, across_b) >= -self._tolerance
        difference = across_a - across_b
        pair = np.flatnonzero(meets & (difference != 0.0))
        part = np.clip(across_a[pair] / difference[pair], 0.0, 1.0)
        share = (at_a[pair] + part * (at_b[pair] - at_a[pair])) / length[pair]
        pair, share = np.concatenate([pair, along, along]), np.concatenate([share, low, high])
        within = (share > 0.0) & (share < 1.0)
        return pair[within], share[within], along, np.clip(low, 0.0, 1.0), np.clip(high, 0.0, 1.0)

    def intervals(self, segment: np.ndarray, share: np.ndarray):
        """Cut the segments at shares of their length.

        Returns
        -------
        segment : ndarray of int, shape (m,)
        low, high : ndarray, shape (m,)
            Shares of the segment's length.
        start, end : ndarray, shape (m,)
            Stations.
        """
        length = self.length[segment]
        inner = (share * length > self._tolerance) & ((1.0 - share) * length > self._tolerance)
        segment, share = segment[inner], share[inner]
        order = np.lexsort((share, segment))
        segment, share = segment[order], share[order]
        new = np.ones(len(segment), dtype=bool)
        new[1:] = (np.diff(segment) != 0) | (np.diff(share) * self.length[segment[1:]] > self._tolerance)
        segment, share = segment[new], share[new]
        count = np.bincount(segment, minlength=len(self.length)) + 1
        owner = np.repeat(np.arange(len(self.length)), count)
        first = np.cumsum(count) - count
        low, high = np.zeros(len(owner)), np.ones(len(owner))
        is_first = np.zeros(len(owner), dtype=bool)
        is_first[first] = True
        low[~is_first] = share
        is_last = np.zeros(len(owner), dtype=bool)
        is_last[first + count - 1] = True
        high[~is_last] = share
        start, end = self._stations(owner, low), self._stations(owner, high)
        return owner, low, high, start, end

    def _stations(self, segment: np.ndarray, share: np.ndarray) -> np.ndarray:
        """Return stations by interpolating the map distance along the profile's own points."""
        if len(self._profiles) >= _MANY:
            return self._many_stations(segment, share)
        stations = np.empty(len(segment))
        bounds = np.searchsorted(self.profile[segment], np.arange(len(self._profiles) + 1)).tolist()
        first, last = self._first[segment], self._last[segment]
        for number, (profile, start, stop) in enumerate(
            zip(self._profiles, bounds[:-1], bounds[1:], strict=True)
        ):
            if start == stop:
                continue
            distance = self._distances[number]
            offset, part = self._offset[number], share[start:stop]
            begin, end = distance[first[start:stop] - offset], distance[last[start:stop] - offset]
            # At the ends of a segment the share is 0 or 1 and the station is the point's own.
            position = np.where(part < 1.0, begin + part * (end - begin), end)
            stations[start:stop] = np.interp(position, distance, profile.stations)
        return stations

    def _many_stations(self, segment: np.ndarray, share: np.ndarray) -> np.ndarray:
        from terrain2q.ground.compiled_cover import map_distances, stations_between

        bounds = np.append(self._offset, len(self._xy))
        if self._along is None:
            self._along = map_distances(bounds, self._xy)
        return stations_between(
            bounds,
            self._along,
            np.concatenate([p.stations for p in self._profiles]),
            self.profile[segment],
            self._first[segment],
            self._last[segment],
            share,
        )

    @cached_property
    def _distances(self) -> list[np.ndarray]:
        """Map distances along each profile from its first point."""
        found = []
        for profile in self._profiles:
            distance = np.zeros(len(profile.x))
            np.cumsum(np.hypot(np.diff(profile.x), np.diff(profile.y)), out=distance[1:])
            found.append(distance)
        return found


class _PolygonsUnderLines:
    """Finds the polygons under profiles, exactly and many at a time."""

    def __init__(self, polygons: np.ndarray, crs: object) -> None:
        self._polygons, self._owner = np.asarray(polygons, dtype=object), np.arange(len(polygons))
        if (shapely.get_type_id(self._polygons) != shapely.GeometryType.POLYGON).any():
            self._polygons, self._owner = shapely.get_parts(self._polygons, return_index=True)
        self._tree = shapely.STRtree(self._polygons)
        self._tolerance = SMALLEST / (1.0 if crs is None else Ground(crs).metres_per_map_unit)

    def __getstate__(self) -> dict:
        # as arrays of coordinates: polygons pickled one by one take several times as long
        state = self.__dict__ | {"_tree": None}
        if len(self._polygons):
            state["_polygons"] = shapely.to_ragged_array(self._polygons)[1:]
        return state

    def __setstate__(self, state: dict) -> None:
        self.__dict__.update(state)
        if isinstance(self._polygons, tuple):
            self._polygons = shapely.from_ragged_array(shapely.GeometryType.POLYGON, *self._polygons)
        self._tree = shapely.STRtree(self._polygons)

    def cut(self, profiles: Sequence[_Profile]) -> _Cut:
        """Cut profiles at polygon edges and find the polygons under each interval."""
        segments = _Segments(profiles, self._tolerance)
        if not len(segments.geometry):
            numbers, whole = np.empty(0), np.empty(0, dtype=int)
            return _Cut(whole, numbers, numbers, whole, whole, np.empty(0, dtype=bool))
        candidates = np.unique(self._tree.query(segments.geometry)[1])
        crossed, along = self._edges(segments, candidates)
        segment, low, high, start, end = segments.intervals(*crossed)
        middle = 0.5 * (low + high)
        points = segments.a[segment] + middle[:, None] * (segments.b - segments.a)[segment]

        shapely.prepare(self._polygons[candidates])
        interval, polygon = (
            self._tree.query(shapely.points(points)) if len(points) else np.empty((2, 0), dtype=int)
        )
        x, y = points[interval].T
        holds = shapely.contains_xy(self._polygons[polygon], x, y)

        # An edge under the line: its polygon touches and does not hold, wherever the middle is rounded to.
        edge_segment, edge_polygon, edge_low, edge_high = along
        key = segment + middle
        begin, stop = (np.searchsorted(key, edge_segment + share) for share in (edge_low, edge_high))
        count = np.maximum(stop - begin, 0)
        step = np.arange(count.sum()) - np.repeat(np.cumsum(count) - count, count)
        many = max(len(self._polygons), 1)
        touched = (np.repeat(begin, count) + step) * many + np.repeat(edge_polygon, count)
        pairs = np.union1d(interval[holds] * many + polygon[holds], touched)
        interval, polygon = np.divmod(pairs, many)
        holds = ~np.isin(pairs, touched)
        return _Cut(segments.profile[segment], start, end, interval, self._owner[polygon], holds)

    def _edges(self, segments: _Segments, candidates: np.ndarray):
        """Return where edges of the candidate polygons cross segments, and which run along them."""
        rings, ring_polygon = shapely.get_rings(self._polygons[candidates], return_index=True)
        xy, ring = shapely.get_coordinates(rings, return_index=True)
        first = np.flatnonzero(ring[1:] == ring[:-1])
        tree = shapely.STRtree(segments.geometry)
        total = shapely.total_bounds(segments.geometry)
        pad = 2.0 * self._tolerance
        crossed = [(np.empty(0, dtype=int), np.empty(0))]
        along = [(np.empty(0, dtype=int), np.empty(0, dtype=int), np.empty(0), np.empty(0))]
        for begin in range(0, len(first), _CHUNK):
            at = first[begin : begin + _CHUNK]
            # Boxes a little wider than the edges, so that rounding loses none.
            low, high = np.minimum(xy[at], xy[at + 1]) - pad, np.maximum(xy[at], xy[at + 1]) + pad
            near = ((high >= total[:2]) & (low <= total[2:])).all(axis=1)
            at, low, high = at[near], low[near], high[near]
            edge, segment = tree.query(shapely.box(low[:, 0], low[:, 1], high[:, 0], high[:, 1]))
            at = at[edge]
            pair, share, flat, start, end = segments.crossed(segment, xy[at], xy[at + 1])
            crossed.append((segment[pair], share))
            along.append((segment[flat], candidates[ring_polygon[ring[at[flat]]]], start, end))
        return tuple(tuple(map(np.concatenate, zip(*rows, strict=True))) for rows in (crossed, along))


def split_by_zone(
    pieces: Sequence[CoverPiece],
    channel: tuple[float, float] | None,
    channel_n: float | None = None,
) -> list[SubareaSpec]:
    """Divide a section into subareas: cut at the channel's limits, then join what is alike.

    Neighbouring pieces of one zone with the same n become one subarea, since a face between waters of one
    roughness would add conveyance that is not there. Their classes and sources are listed in order of
    appearance; the low and high n of the subarea are the lowest and highest stated.

    Parameters
    ----------
    pieces : sequence of CoverPiece
        From the first station to the last without gap or overlap.
    channel : (float, float) or None
        First and last station of the channel; None makes the whole section one channel.
    channel_n : float, optional
        Manning's n of the channel, where the study states one; else the cover's counts there too.

    Returns
    -------
    list of SubareaSpec
        From the first station to the last without gap or overlap.

    Raises
    ------
    InputError
        `channel_n` is not above zero (code ``number-not-positive``).

    Examples
    --------
    >>> pieces = [CoverPiece(0.0, 6.0, "pasture", 0.035), CoverPiece(6.0, 20.0, "wood", 0.1)]
    >>> for s in split_by_zone(pieces, (8.0, 12.0), 0.04):
    ...     print(s.start, s.end, s.zone, s.n, s.land_class)
    0.0 6.0 left floodplain 0.035 pasture
    6.0 8.0 left floodplain 0.1 wood
    8.0 12.0 channel 0.04 wood
    12.0 20.0 right floodplain 0.1 wood
    """
    if channel_n is not None and not (np.isfinite(channel_n) and channel_n > 0.0):
        raise InputError("number-not-positive", f"the channel's n is {channel_n}", where="channel: n")
    if not pieces:
        return []
    first, last = pieces[0].start, pieces[-1].end
    low, high = (first, last) if channel is None else (min(max(v, first), last) for v in channel)
    # The channel's limits hold; an edge of the cover that all but coincides with one moves onto it.
    low, high = (_onto(v, (first, last)) for v in (low, high))
    limits = [first, *(_onto(piece.end, (low, high)) for piece in pieces[:-1]), last]
    subareas: list[SubareaSpec] = []
    for piece, start, end in zip(pieces, limits[:-1], limits[1:], strict=True):
        for zone, a, b in (
            (LEFT, start, min(end, low)),
            (CHANNEL, max(start, low), min(end, high)),
            (RIGHT, max(start, high), end),
        ):
            if b <= a:
                continue
            n, falling = (piece.n, piece.n_low, piece.n_high, piece.n_source), piece.falling
            if zone == CHANNEL and channel_n is not None:
                n, falling = (float(channel_n), float("nan"), float("nan"), "study"), None
            subareas.append(SubareaSpec(a, b, *n, piece.land_class, zone, falling))
    joined: list[SubareaSpec] = []
    for subarea in subareas:
        last = joined[-1] if joined else None
        if last and (last.zone, last.n, last.falling) == (subarea.zone, subarea.n, subarea.falling):
            joined[-1] = joined_specs(joined[-1], subarea)
        else:
            joined.append(subarea)
    return joined


def _onto(value: float, marks: Sequence[float]) -> float:
    return next((mark for mark in marks if abs(value - mark) < SMALLEST), value)


def joined_specs(one: SubareaSpec, other: SubareaSpec) -> SubareaSpec:
    """Return two neighbours of one zone with the same n as one subarea."""
    return replace(
        one,
        end=other.end,
        n_low=float(np.fmin(one.n_low, other.n_low)),
        n_high=float(np.fmax(one.n_high, other.n_high)),
        n_source=_listed(one.n_source, other.n_source),
        land_class=_listed(one.land_class, other.land_class),
    )


def _listed(one: str, other: str) -> str:
    return "; ".join(dict.fromkeys(text for text in (*one.split("; "), *other.split("; ")) if text))
