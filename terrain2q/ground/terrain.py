"""The terrain: elevations along lines, at true ground distances.

``Terrain(paths).sample(lines)`` gives one :class:`Profile` a line. Distances are those of
:mod:`terrain2q.ground.distances`, cells are read by :mod:`terrain2q.ground.tiles`; here the points are
laid along the lines and the elevation unit is settled.
"""

from __future__ import annotations

import gc
import os
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

import numpy as np
import pyproj
import shapely
from rasterio.transform import Affine

from terrain2q.errors import Finding, InputError
from terrain2q.ground.distances import GroundDistances, horizontal_crs
from terrain2q.ground.tiles import MANY, Mosaic, Tile, in_threads, open_tile, ranges, shifted
from terrain2q.units import ELEVATION_UNITS

SAMPLINGS = ("bilinear", "nearest")

POINTS_AT_ONCE = 20_000_000
"""Points worked on together; more are taken in batches of neighbouring lines."""

BEND = 0.1
"""How far a reprojected line may lie off the drawn one, in cells, before points are put in between."""


@dataclass(frozen=True, eq=False)
class Profile:
    """The ground along one line.

    Attributes
    ----------
    stations : ndarray, shape (n,)
        Ground distance from the line's first point, metres, increasing. Empty where the line has no
        length, or has coordinates that are not finite or not in the terrain's projection.
    elevations : ndarray, shape (n,)
        Metres; NaN where the terrain has a gap or ends.
    x, y : ndarray, shape (n,)
        In the terrain's CRS.
    is_vertex : ndarray of bool, shape (n,)
        Whether the point is a vertex of the line as it was drawn.
    """

    stations: np.ndarray
    elevations: np.ndarray
    x: np.ndarray
    y: np.ndarray
    is_vertex: np.ndarray

    def __len__(self) -> int:
        return self.stations.size

    def __repr__(self) -> str:
        if not len(self):
            return "Profile(no points)"
        gaps = np.count_nonzero(np.isnan(self.elevations))
        return f"Profile({len(self)} points, {self.stations[-1]:.2f} m long, {gaps} without elevation)"

    @cached_property
    def map_distances(self) -> np.ndarray:
        """Distance of each point from the first along the line in map units, shape (n,)."""
        steps = np.hypot(np.diff(self.x), np.diff(self.y))
        return np.concatenate([np.zeros(min(len(self), 1)), np.cumsum(steps)])

    def station_at(self, map_distance):
        """Return stations from distances along the line on the map.

        Parameters
        ----------
        map_distance : array_like
            Distance from the line's first point in units of the terrain's CRS, as shapely's ``project``
            gives it for this line. Beyond an end, that end's.

        Returns
        -------
        float or ndarray
            Stations in metres, of the same shape.
        """
        return np.interp(map_distance, self.map_distances, self.stations)

    def place_at(self, station):
        """Return the places of stations, straight between points.

        Parameters
        ----------
        station : array_like
            Metres. Beyond an end, that end.

        Returns
        -------
        x, y : float or ndarray
            In the terrain's CRS, of the same shape.
        """
        return np.interp(station, self.stations, self.x), np.interp(station, self.stations, self.y)


class Terrain:
    """An elevation raster, or several tiles of one.

    Parameters
    ----------
    source : path, or sequence of paths
        Any raster GDAL reads; the first band counts. Tiles have one CRS, unit and grid of cells and may
        overlap; where they do, the first listed that has data counts.
    elevation_unit : {"m", "ft", "us-ft"}, optional
        The unit of the elevations where the raster does not state it. It is never taken from the unit of
        the coordinates. Where both state one and differ, this one is used and a finding says so.
    sampling : {"bilinear", "nearest"}
        Between cell centres, or the cell that holds the point.

    Attributes
    ----------
    paths : list of str
    crs : pyproj.CRS
        The horizontal CRS.
    transform : Affine
        From (column, row) to (x, y), over all tiles.
    width, height : int
        Cells, over all tiles.
    bounds : tuple of float
        Least x, least y, greatest x, greatest y in the CRS.
    metres_per_unit : float
        Metres in one unit of the raster's elevations.
    unit_source : str
        Where the unit came from, in words.
    findings : list of Finding
    distances : GroundDistances
        Lengths in this CRS.

    Raises
    ------
    InputError
        ``file-missing``, ``file-unreadable``, ``crs-missing``, ``crs-unknown``, ``crs-local``,
        ``transform-missing``, ``elevation-unit-unknown``, ``tiles-differ`` or ``value-not-allowed``.
    """

    def __init__(
        self,
        source: str | Path | Sequence[str | Path],
        elevation_unit: str | None = None,
        sampling: str = "bilinear",
    ) -> None:
        paths = [source] if isinstance(source, str | os.PathLike) else list(source)
        if not paths:
            raise InputError(
                "value-not-allowed", "the list of terrain tiles is empty", where="dem", fix="name a raster"
            )
        if elevation_unit is not None and elevation_unit not in ELEVATION_UNITS:
            names = ", ".join(f'"{name}"' for name in ELEVATION_UNITS)
            raise InputError(
                "value-not-allowed",
                f"elevation_unit is {elevation_unit!r}",
                where="elevation_unit",
                fix=f"give one of {names}",
            )
        if sampling not in SAMPLINGS:
            raise InputError(
                "value-not-allowed",
                f"sampling is {sampling!r}",
                where="sampling",
                fix='give "bilinear" or "nearest"',
            )
        self.paths = [os.fspath(path) for path in paths]
        self.sampling = sampling
        self.findings: list[Finding] = []
        tiles = [open_tile(path) for path in self.paths]
        self.crs = tiles[0].crs
        try:
            self.distances = GroundDistances(self.crs)
        except InputError as error:
            raise error.at(self.paths[0]) from None
        _same_crs(tiles)
        self.metres_per_unit, self.unit_source = self._settle_unit(tiles, elevation_unit)
        self._mosaic = Mosaic(tiles)
        self.transform, self.width, self.height = (
            self._mosaic.transform,
            self._mosaic.width,
            self._mosaic.height,
        )
        x, y = self._to_map(
            np.array([0, self.width, 0, self.width]), np.array([0, 0, self.height, self.height])
        )
        self.bounds = (float(x.min()), float(y.min()), float(x.max()), float(y.max()))

    def __repr__(self) -> str:
        name = self.paths[0] if len(self.paths) == 1 else f"{len(self.paths)} tiles, {self.paths[0]!r} first"
        unit = next((n for n, metres in ELEVATION_UNITS.items() if _same(metres, self.metres_per_unit)), None)
        unit = unit or f"{self.metres_per_unit:g} m"
        across, down = self.cell_size
        return (
            f"Terrain({name!r}, {self.width} x {self.height} cells of {across:.4g} x {down:.4g} m, "
            f"{self.crs.name}, elevations in {unit} from {self.unit_source}, {self.sampling})"
        )

    def _settle_unit(self, tiles: list[Tile], asked: str | None) -> tuple[float, str]:
        """Return the metres in one unit of elevation, and where that comes from."""
        stated = [(tile, unit) for tile in tiles for unit in tile.units]
        for tile, unit in stated:
            if tile is not stated[0][0] and not _same(unit.metres, stated[0][1].metres):
                raise InputError(
                    "tiles-differ",
                    f"{unit.source} is not the elevation unit of {stated[0][0].path}: {stated[0][1].source}",
                    where=tile.path,
                )
        if asked is not None:
            metres = ELEVATION_UNITS[asked]
            for tile, unit in stated:
                if not _same(unit.metres, metres):
                    self.findings.append(
                        Finding(
                            "elevation-unit-contradicted",
                            f"the study says that elevations are in {asked!r}; {unit.source} of the raster "
                            f"says a unit of {unit.metres:.7g} m",
                            layer="terrain",
                            feature_id=str(tile.path),
                        )
                    )
                    break
            return metres, f'the study (elevation_unit = "{asked}")'
        for tile in tiles:
            if not tile.units:
                if stated:
                    raise InputError(
                        "tiles-differ",
                        f"the raster does not say the unit of its elevations, and {stated[0][0].path} does: "
                        f"{stated[0][1].source}",
                        where=tile.path,
                        fix='set `elevation_unit = "m"`, `"ft"` or `"us-ft"` under [terrain]',
                    )
                note = (
                    tile.unit_note or "neither the raster's band nor a vertical axis of its CRS says a unit"
                )
                raise InputError(
                    "elevation-unit-unknown", f"the unit of elevations is unknown: {note}", where=tile.path
                )
            if not all(_same(unit.metres, tile.units[0].metres) for unit in tile.units):
                says = " but ".join(unit.source for unit in tile.units)
                raise InputError(
                    "elevation-unit-unknown",
                    f"the raster states two units of elevation: {says}",
                    where=tile.path,
                )
        return stated[0][1].metres, stated[0][1].source

    def _to_map(self, column: np.ndarray, row: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        a, b, c, d, e, f = self.transform[:6]
        return a * column + b * row + c, d * column + e * row + f

    @cached_property
    def _inverse(self) -> tuple[float, float, float, float]:
        a, b, _, d, e, _ = self.transform[:6]
        determinant = a * e - b * d
        return e / determinant, -b / determinant, -d / determinant, a / determinant

    def _to_grid(self, x: np.ndarray, y: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        # Differences first, so that large coordinates lose no digits.
        a, b, d, e = self._inverse
        x, y = x - self.transform.c, y - self.transform.f
        return a * x + b * y, d * x + e * y

    def _cell_sizes(self, x, y) -> tuple[np.ndarray, np.ndarray]:
        a, b, _, d, e, _ = self.transform[:6]
        return self.distances.step_lengths(x, y, a, d), self.distances.step_lengths(x, y, b, e)

    @cached_property
    def cell_size(self) -> tuple[float, float]:
        """Ground size of a cell at the centre of the terrain, metres: along a row, along a column."""
        x, y = self._to_map(np.array([0.5 * self.width]), np.array([0.5 * self.height]))
        across, down = self._cell_sizes(x, y)
        return float(across[0]), float(down[0])

    def elevations(self, x, y) -> np.ndarray:
        """Return elevations at points.

        Parameters
        ----------
        x, y : array_like, shape (n,)
            In the terrain's CRS.

        Returns
        -------
        ndarray, shape (n,)
            Metres; NaN in gaps and outside.
        """
        x, y = np.asarray(x, dtype=float), np.asarray(y, dtype=float)
        if x.size >= MANY and len(self._mosaic.tiles) == 1:
            values = np.full(x.size, np.nan)
            self._fill_elevations(x, y, values, np.arange(x.size))
            return values
        column, row = self._to_grid(x, y)
        values = self._mosaic.elevations(column, row, bilinear=self.sampling == "bilinear")
        return values if self.metres_per_unit == 1.0 else values * self.metres_per_unit

    def blocks_at(self, x, y) -> np.ndarray:
        """Return the number of the block of the raster that must be read for points.

        Parameters
        ----------
        x, y : array_like
            In the terrain's CRS.

        Returns
        -------
        ndarray of int
            -1 outside.
        """
        column, row = self._to_grid(np.asarray(x, dtype=float), np.asarray(y, dtype=float))
        return self._mosaic.blocks_at(column, row)

    def _fill_elevations(
        self, x: np.ndarray, y: np.ndarray, values: np.ndarray, straight: np.ndarray
    ) -> None:
        """Fill in the elevations of many points where there is one tile; `values` are NaN.

        See :meth:`Mosaic.many_elevations`.
        """
        place = (*self._inverse, self.transform.c, self.transform.f)
        self._mosaic.many_elevations(x, y, place, self.sampling == "bilinear", values, straight)
        if self.metres_per_unit != 1.0:
            values *= self.metres_per_unit

    def read_window(self, bounds, dtype=np.float64) -> tuple[np.ndarray, Affine]:
        """Return the cells about some bounds.

        Parameters
        ----------
        bounds : sequence of four floats
            Least x, least y, greatest x, greatest y in the terrain's CRS. Every cell that they touch is
            read, as far as the terrain goes.
        dtype : dtype
            ``float64``, or ``float32`` to hold half as much.

        Returns
        -------
        elevations : ndarray, shape (rows, columns)
            Metres, NaN for gaps. No rows or columns where the bounds lie outside the terrain.
        transform : Affine
            From (column, row) of this array to (x, y).
        """
        left, bottom, right, top = (float(value) for value in bounds)
        column, row = self._to_grid(
            np.array([left, right, left, right]), np.array([bottom, bottom, top, top])
        )
        slack = 1e-6  # bounds that end on a cell's edge do not touch the next cell
        first_column = int(np.clip(np.floor(column.min() + slack), 0, self.width))
        first_row = int(np.clip(np.floor(row.min() + slack), 0, self.height))
        columns = max(int(np.clip(np.ceil(column.max() - slack), 0, self.width)) - first_column, 0)
        rows = max(int(np.clip(np.ceil(row.max() - slack), 0, self.height)) - first_row, 0)
        cells = self._mosaic.window(first_row, first_column, rows, columns, dtype)
        if self.metres_per_unit != 1.0:
            cells *= self.metres_per_unit
        return cells, shifted(self.transform, first_column, first_row)

    def sample(
        self, lines, spacing: float | None = None, crs=None, *, elevations: bool = True
    ) -> list[Profile]:
        """Return the ground along lines.

        Parameters
        ----------
        lines : GeoSeries, or sequence of shapely LineStrings or of arrays of shape (n, 2)
            A single LineString is taken as a list of one. Heights in them are not used.
        spacing : float, optional
            Largest ground distance between points, metres; one cell by default (its smaller side, at the
            middle of the line's bounds). Each segment between two vertices is divided evenly.
        crs : pyproj.CRS or anything it accepts, optional
            The lines' CRS where it is not the terrain's; a GeoSeries brings its own.
        elevations : bool
            False lays the points alone and reads no cell; every elevation is then NaN.

        Returns
        -------
        list of Profile
            One a line, in order; without points where a line cannot be used (no length, not finite).

        Raises
        ------
        InputError
            A line of several parts or another geometry (``geometry-kind``), a spacing not above zero
            (``value-not-allowed``), a CRS that is not known (``crs-unknown``).

        Notes
        -----
        Lines in another CRS are brought over vertex by vertex. Where the straight line between two of
        these would lie more than a tenth of a cell off the line as it was drawn, points in between are
        brought over too; they are points of the profile but not its vertices.

        Repeated vertices are dropped. Every block of the raster that is touched is decoded once for up
        to 20 million points (in a VRT, as far as its sources' blocks are kept in GDAL's cache).

        Examples
        --------
        Two cross-sections, points at most 2 m apart::

            profiles = Terrain("dem.tif").sample([[(0, 0), (50, 20)], [(0, 9), (50, 29)]], spacing=2.0)
        """
        if spacing is not None and not (np.isfinite(spacing) and spacing > 0.0):
            raise InputError(
                "value-not-allowed",
                f"spacing is {spacing}",
                where="spacing",
                fix="give metres of ground above zero",
            )
        if crs is None:
            crs = getattr(lines, "crs", None)
        x, y, line, count = _vertices(lines)
        x, y, line, drawn = self._bring_over(x, y, line, crs)
        x, y, line, drawn = self._usable(x, y, line, drawn, count)
        profiles = [_no_points()] * count
        if not x.size:
            return profiles
        first = np.flatnonzero(np.diff(line, prepend=-1))
        measured = self.distances.measure(x, y, first)
        good = np.logical_and.reduceat(np.isfinite(measured.vertex_stations), first)
        if not good.all():  # the projection has no such place
            keep = np.repeat(good, np.diff(np.append(first, x.size)))
            x, y, line, drawn = x[keep], y[keep], line[keep], drawn[keep]
            if not x.size:
                return profiles
            first = np.flatnonzero(np.diff(line, prepend=-1))
            measured = self.distances.measure(x, y, first)

        intervals = self._intervals(x, y, first, measured.largest_speed, spacing)
        points = np.add.reduceat(intervals, first)
        last = np.append(first[1:], x.size)
        for batch in self._batches(points, x[first], y[first]):
            vertex = ranges(first[batch], last[batch])
            self._fill(
                profiles,
                line[first[batch]],
                points[batch],
                vertex,
                x,
                y,
                drawn,
                intervals,
                measured,
                elevations,
            )
        return profiles

    def _bring_over(self, x, y, line, crs):
        """Return the vertices in the terrain's CRS, and which of them were drawn."""
        drawn = np.ones(x.size, dtype=bool)
        if crs is None or not x.size:
            return x, y, line, drawn
        crs = horizontal_crs(crs)
        if crs == self.crs:
            return x, y, line, drawn
        try:
            transform = pyproj.Transformer.from_crs(crs, self.crs, always_xy=True).transform
        except pyproj.exceptions.ProjError as error:
            raise InputError(
                "crs-unknown", f"there is no way from {crs.name} to {self.crs.name}: {error}", where="lines"
            ) from error
        step_x, step_y = np.append(np.diff(x), 0.0), np.append(np.diff(y), 0.0)
        last = np.append(np.diff(line) != 0, True)
        step_x[last] = step_y[last] = 0.0
        new_x, new_y = transform(x, y)
        with np.errstate(invalid="ignore"):
            column, row = self._to_grid(new_x, new_y)
            off = np.zeros(x.size)
            for part in (0.25, 0.5, 0.75):
                there = self._to_grid(*transform(x + part * step_x, y + part * step_y))
                for place, start in zip(there, (column, row), strict=True):
                    straight = start + part * (np.append(start[1:], start[-1:]) - start)
                    off = np.fmax(off, np.where(last, 0.0, np.abs(place - straight)))
        off = np.where(np.isfinite(off), off, 0.0)
        # The distance between a curve and its chord falls with the square of the chord.
        parts = np.where(off > BEND, np.ceil(np.sqrt(np.minimum(2.0 * off / BEND, 1e8))), 1.0).astype(
            np.int64
        )
        if parts.max() == 1:
            return new_x, new_y, line, drawn
        vertex = np.repeat(np.arange(x.size), parts)
        number = np.arange(vertex.size) - np.repeat(np.cumsum(parts) - parts, parts)
        fraction = number / parts[vertex]
        new_x, new_y = transform(x[vertex] + fraction * step_x[vertex], y[vertex] + fraction * step_y[vertex])
        return new_x, new_y, line[vertex], number == 0

    def _usable(self, x, y, line, drawn, count: int):
        """Return the vertices without repeated ones and without lines that cannot be measured."""
        if not x.size:
            return x, y, line, drawn
        bad = np.zeros(count, dtype=bool)
        bad[line[~(np.isfinite(x) & np.isfinite(y))]] = True
        keep = ~bad[line]
        x, y, line, drawn = x[keep], y[keep], line[keep], drawn[keep]
        column, row = self._to_grid(x, y)
        # The same place but for round-off in the coordinates.
        limit = (
            1e-9 + 4.0 * np.finfo(float).eps * max(np.abs(column).max(), np.abs(row).max()) if x.size else 0.0
        )
        moved = np.hypot(np.diff(column), np.diff(row)) > limit
        keep = np.concatenate([np.ones(min(x.size, 1), dtype=bool), moved | (np.diff(line) != 0)])
        # A drawn vertex on a point put in between counts as drawn.
        group = np.cumsum(keep) - 1
        was_drawn = np.zeros(np.count_nonzero(keep), dtype=bool)
        np.logical_or.at(was_drawn, group[drawn], True)
        x, y, line, drawn = x[keep], y[keep], line[keep], was_drawn
        keep = np.bincount(line, minlength=count)[line] > 1
        return x[keep], y[keep], line[keep], drawn[keep]

    def _intervals(self, x, y, first, largest_speed, spacing: float | None) -> np.ndarray:
        """Return into how many parts the segment from each vertex is divided; 1 for a line's last."""
        if spacing is not None:
            limit, slack = spacing, 1e-8
        else:
            middle_x = 0.5 * (np.minimum.reduceat(x, first) + np.maximum.reduceat(x, first))
            middle_y = 0.5 * (np.minimum.reduceat(y, first) + np.maximum.reduceat(y, first))
            sizes = np.minimum(*self._cell_sizes(middle_x, middle_y))
            limit, slack = np.repeat(sizes, np.diff(np.append(first, x.size))), 1e-6
        return np.maximum(np.ceil(largest_speed / limit * (1.0 - slack)), 1.0).astype(np.int64)

    def _batches(self, points: np.ndarray, x: np.ndarray, y: np.ndarray) -> list[np.ndarray]:
        """Return the numbers of the lines to be worked on together, neighbours in the raster."""
        if points.sum() <= POINTS_AT_ONCE:
            return [np.arange(points.size)]
        column, row = self._to_grid(x, y)
        order = np.lexsort((column, row // 512))
        return np.split(order, np.flatnonzero(np.diff(np.cumsum(points[order]) // POINTS_AT_ONCE)) + 1)

    def _fill(
        self, profiles, lines, points, vertex, x, y, drawn, intervals, measured, elevations: bool
    ) -> None:
        """Work out the profiles of some lines; `vertex` are the numbers of all their vertices."""
        parts = intervals[vertex]
        ends = np.cumsum(points).tolist()
        starts = [0, *ends[:-1]]
        if ends[-1] >= MANY:
            columns, read = self._many_points(vertex, parts, ends, x, y, drawn, measured)
            # first the profiles, of arrays filled later: made beside the reading they would stop its threads
            own = list(map(slice, starts, ends))
            pieces = [map(column.__getitem__, own) for column in columns]
            with _nothing_collected():
                for line, *piece in zip(lines.tolist(), *pieces, strict=True):
                    profiles[line] = _profile_of(*piece)
            if elevations:
                read()
            return
        owner = np.repeat(vertex, parts)
        number = np.arange(owner.size) - np.repeat(np.cumsum(parts) - parts, parts)
        fraction = number / np.repeat(parts, parts)
        following = np.minimum(owner + 1, x.size - 1)
        # A line's last vertex has no segment: its only point is at fraction 0.
        point_x = x[owner] + fraction * (x[following] - x[owner])
        point_y = y[owner] + fraction * (y[following] - y[owner])
        columns = [
            measured.stations(owner, fraction),
            self.elevations(point_x, point_y) if elevations else np.full(point_x.size, np.nan),
            point_x,
            point_y,
            (number == 0) & drawn[owner],
        ]
        for column in columns:
            column.flags.writeable = False
        for line, start, end in zip(lines.tolist(), starts, ends, strict=True):
            profiles[line] = Profile(*[column[start:end] for column in columns])

    def _many_points(self, vertex, parts, ends, x, y, drawn, measured) -> tuple[list[np.ndarray], Callable]:
        """Return what profiles have of each point, by compiled code, and what fills in the elevations.

        `ends` says where the points of each line end.
        """
        from terrain2q.ground.compiled_sampling import lay_points

        begin = np.cumsum(parts) - parts
        count = int(begin[-1] + parts[-1])
        station, point_x, point_y = np.empty((3, count))
        is_vertex = np.empty(count, dtype=bool)

        def lay(part: slice) -> None:
            lay_points(
                vertex[part], parts[part], begin[part], x, y, drawn, measured.panels, measured.first_panel,
                measured.panel_station, measured.speeds, station, point_x, point_y, is_vertex,
            )  # fmt: skip

        in_threads(lay, vertex.size)
        ground = np.full(count, np.nan)

        def read() -> None:
            if len(self._mosaic.tiles) == 1:
                # a line's last vertex lies straight on from the points before it
                straight = np.delete(begin, np.searchsorted(begin, np.array(ends) - 1))
                self._fill_elevations(point_x, point_y, ground, straight)
            else:
                ground[:] = self.elevations(point_x, point_y)

        columns = [column.view() for column in (station, ground, point_x, point_y, is_vertex)]
        for column in columns:
            column.flags.writeable = False
        return columns, read


@contextmanager
def _nothing_collected() -> Iterator[None]:
    """Make many objects without a look through all others for what can go; none of these can."""
    was = gc.isenabled()
    gc.disable()
    try:
        yield
    finally:
        if was:
            gc.enable()


def _profile_of(stations, elevations, x, y, is_vertex) -> Profile:
    """Return a profile of columns; a frozen class's own way takes three times as long."""
    profile = object.__new__(Profile)
    profile.__dict__.update(stations=stations, elevations=elevations, x=x, y=y, is_vertex=is_vertex)
    return profile


def _no_points() -> Profile:
    none = np.zeros(0)
    return Profile(none, none, none, none, np.zeros(0, dtype=bool))


def _same(one: float, other: float) -> bool:
    return abs(one - other) <= 1e-9 * abs(other)


def _same_crs(tiles: list[Tile]) -> None:
    first = tiles[0]
    for tile in tiles[1:]:
        if tile.crs != first.crs:
            raise InputError(
                "tiles-differ",
                f"the CRS is {tile.crs.name}, and that of {first.path} is {first.crs.name}",
                where=tile.path,
            )


def _vertices(lines) -> tuple[np.ndarray, np.ndarray, np.ndarray, int]:
    """Return x, y and the line's number of all vertices, and how many lines there are."""
    if isinstance(lines, shapely.Geometry):
        lines = [lines]
    lines = getattr(lines, "geometry", lines)
    lines = list(getattr(lines, "values", lines))
    if not lines:
        return np.zeros(0), np.zeros(0), np.zeros(0, dtype=np.int64), 0
    is_geometry = [line is None or isinstance(line, shapely.Geometry) for line in lines]
    if all(is_geometry):
        geometries = np.array(lines, dtype=object)
        kinds = shapely.get_type_id(geometries)
        single = (kinds == 5) & (shapely.get_num_geometries(geometries) == 1)
        geometries[single] = shapely.get_geometry(geometries[single], 0)
        wrong = np.flatnonzero(~np.isin(kinds, (-1, 1, 2)) & ~single & ~shapely.is_empty(geometries))
        if wrong.size:
            raise InputError(
                "geometry-kind",
                f"line {wrong[0] + 1} of {len(lines)} is a {lines[wrong[0]].geom_type}",
                where="lines",
                fix="give single lines; join the parts of a line, or give each its own row",
            )
        coordinates, index = shapely.get_coordinates(geometries, return_index=True)
        return coordinates[:, 0], coordinates[:, 1], index.astype(np.int64), len(lines)
    arrays = [
        shapely.get_coordinates(line) if geometry else np.asarray(line, dtype=float)
        for line, geometry in zip(lines, is_geometry, strict=True)
    ]
    arrays = [array.reshape(0, 2) if array.size == 0 else array for array in arrays]
    for number, array in enumerate(arrays):
        if array.ndim != 2 or array.shape[1] not in (2, 3):
            raise InputError(
                "geometry-kind",
                f"line {number + 1} of {len(lines)} is an array of the shape {array.shape}",
                where="lines",
                fix="give arrays of the shape (n, 2), x and y",
            )
    index = np.repeat(np.arange(len(arrays)), [len(array) for array in arrays])
    coordinates = np.concatenate([array[:, :2] for array in arrays])
    return coordinates[:, 0], coordinates[:, 1], index, len(lines)
