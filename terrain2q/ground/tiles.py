"""Elevation rasters as one grid of cells, read block by block.

A :class:`Mosaic` is one raster or several that lie on one grid. Asked for values at many places, it
sorts them by the rasters' own blocks, so that every block touched is read and decoded once, by one of
a few threads that each hold at most one block; the place of a point in the file, not its place in the
list of lines, decides when it is served.

Which tile answers for a cell: the first listed that covers it, unless it has no data there; then the
next. A tile is therefore read after the earlier listed tiles that it overlaps (its *wave*).
"""

from __future__ import annotations

import os
import re
import threading
import unicodedata
import warnings
from collections import OrderedDict
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import pyproj
import rasterio
from rasterio.enums import MaskFlags
from rasterio.errors import NotGeoreferencedWarning, RasterioError
from rasterio.transform import Affine
from rasterio.windows import Window

from terrain2q.errors import InputError
from terrain2q.ground.distances import horizontal_crs
from terrain2q.units import FOOT, US_SURVEY_FOOT

GRID_TOLERANCE = 0.01
"""How far a tile's corners may lie off the common grid, in cells."""

EDGE_TOLERANCE = 1e-7
"""Round-off of a place in the grid, in cells: a neighbour with less weight does not count as a gap."""

IMPOSSIBLE = 1e30
"""A number at or above this size is a gap: writers leave such marks where the nodata tag is rounded."""

CHUNK_CELLS = 2**18
"""Strips of rows are read together up to about this many cells."""

MOST_THREADS = 16
"""Threads that read at once at most; 1 where several processes share a machine."""

MANY = 50_000
"""Points from which on compiled code is worth its loading."""

MEMORY = 2**30
"""Bytes of decoded blocks that all threads together may hold; one block is held in any case."""

_UNIT_WORDS = {
    "m": 1.0, "metre": 1.0, "metres": 1.0, "meter": 1.0, "meters": 1.0, "mtr": 1.0, "mtrs": 1.0,
    "metro": 1.0, "metros": 1.0,
    "dm": 0.1, "decimetre": 0.1, "decimetres": 0.1, "decimeter": 0.1, "decimeters": 0.1,
    "cm": 0.01, "centimetre": 0.01, "centimetres": 0.01, "centimeter": 0.01, "centimeters": 0.01,
    "mm": 0.001, "millimetre": 0.001, "millimetres": 0.001, "millimeter": 0.001, "millimeters": 0.001,
    "km": 1000.0, "kilometre": 1000.0, "kilometres": 1000.0, "kilometer": 1000.0, "kilometers": 1000.0,
    "ft": FOOT, "foot": FOOT, "feet": FOOT, "ift": FOOT, "intft": FOOT, "ftint": FOOT,
    "usft": US_SURVEY_FOOT, "ftus": US_SURVEY_FOOT, "usfoot": US_SURVEY_FOOT, "footus": US_SURVEY_FOOT,
    "usfeet": US_SURVEY_FOOT, "feetus": US_SURVEY_FOOT, "sft": US_SURVEY_FOOT, "ussft": US_SURVEY_FOOT,
    "surveyfoot": US_SURVEY_FOOT, "surveyfeet": US_SURVEY_FOOT,
    "ussurveyfoot": US_SURVEY_FOOT, "ussurveyfeet": US_SURVEY_FOOT, "ussurveyft": US_SURVEY_FOOT,
}  # fmt: skip


def in_threads(work: Callable[[slice], None], count: int) -> None:
    """Let a few threads work on the parts of a range each, as far as others leave them room."""
    threads = max(1, min(os.cpu_count() or 1, MOST_THREADS, 4))
    if threads == 1:
        work(slice(0, count))
        return
    share = -(-count // threads)
    with ThreadPoolExecutor(threads) as pool:
        list(pool.map(work, [slice(i, min(i + share, count)) for i in range(0, count, share)]))


def ranges(starts: np.ndarray, ends: np.ndarray) -> np.ndarray:
    """Return the whole numbers from each start up to its end, one range after another."""
    counts = ends - starts
    return np.arange(counts.sum()) + np.repeat(starts - (np.cumsum(counts) - counts), counts)


def metres_in(unit: str) -> float | None:
    """Return how many metres one unit of length makes, from the many ways its name is written.

    Parameters
    ----------
    unit : str
        A name or symbol; case, brackets, dots and a reference level after it do not matter. `foot` on
        its own is the international foot.

    Returns
    -------
    float or None
        None where the name is not a known unit of length.

    Examples
    --------
    >>> metres_in("Feet"), metres_in("m a.s.l.")
    (0.3048, 1.0)
    >>> metres_in("U.S. Survey Feet") == metres_in("ft_US") == 1200 / 3937
    True
    >>> metres_in("degree") is None
    True
    """
    text = unicodedata.normalize("NFKD", unit).encode("ascii", "ignore").decode().lower()
    text = re.sub(r"\b(above|a\.?\s*m?\.?\s*s\.?\s*l|navd\d*|ngvd\d*|egm\d*|nap|msl)\b.*", "", text)
    words = re.findall(r"[a-z]+", text.replace("(s)", "").replace("u.s", "us"))
    found = [word for word in words if word in _UNIT_WORDS]
    if len(found) != 1:
        return None
    rest = set(words) - set(found)
    if not rest:
        return _UNIT_WORDS[found[0]]
    if found[0] in ("ft", "foot", "feet"):
        if rest <= {"us", "s", "survey", "usa"}:
            return US_SURVEY_FOOT
        if rest <= {"international", "intl", "int"}:
            return FOOT
    return None


def shifted(transform: Affine, column: float, row: float) -> Affine:
    """Return the transform of the same grid counted from another cell."""
    a, b, c, d, e, f = transform[:6]
    return Affine(a, b, a * column + b * row + c, d, e, d * column + e * row + f)


@dataclass(frozen=True)
class StatedUnit:
    """A unit of elevation and who states it."""

    metres: float
    source: str


@dataclass(frozen=True, eq=False)
class Tile:
    """One raster file: what is needed to read its first band, and its place in the common grid.

    Attributes
    ----------
    path : str
    crs : pyproj.CRS
        The horizontal part.
    transform : Affine
        From (column, row) to map (x, y).
    width, height : int
    chunk_rows, chunk_columns : int
        What is read at once: a block of the file, or several small ones.
    dtype : numpy.dtype
    nodata : number or None
        In the band's own type; None where there is none that the type can hold.
    scale, offset : float
        Elevation = value * scale + offset.
    is_virtual : bool
        The blocks are nominal: the file names others that hold the cells (a VRT).
    masked : bool
        A mask is kept beside the values (a mask file, an inner mask or an alpha band).
    units : tuple of StatedUnit
        The elevation units that the file states; empty where it states none.
    unit_note : str
        A unit written in the file that could not be understood.
    column, row : int
        Of the first cell, in the common grid.
    """

    path: str
    crs: pyproj.CRS
    transform: Affine
    width: int
    height: int
    chunk_rows: int
    chunk_columns: int
    dtype: np.dtype
    nodata: object
    scale: float
    offset: float
    is_virtual: bool
    masked: bool
    units: tuple[StatedUnit, ...]
    unit_note: str
    column: int = 0
    row: int = 0


def open_tile(path: str | Path) -> Tile:
    """Read the header of a raster.

    Parameters
    ----------
    path : str or Path
        A file, or any name under which GDAL knows a raster.

    Raises
    ------
    InputError
        ``file-missing``, ``file-unreadable``, ``crs-missing``, ``crs-unknown`` or ``transform-missing``.
    """
    name = os.fspath(path)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", NotGeoreferencedWarning)  # said below, as an error
        try:
            dataset = rasterio.open(name)
        except RasterioError as error:
            # Names such as NETCDF:"file.nc":band and web addresses are not paths.
            if not re.match(r"[A-Za-z][\w+]+:|/vsi", name) and not Path(name).exists():
                raise InputError("file-missing", "the terrain raster is not there", where=name) from error
            raise InputError("file-unreadable", f"the raster cannot be read: {error}", where=name) from error
        with dataset:
            return _describe(name, dataset)


def _describe(name: str, dataset) -> Tile:
    if dataset.count == 0:
        inner = ", ".join(dataset.subdatasets[:5])
        fix = f"name one of the rasters in it: {inner}" if inner else ""
        raise InputError("file-unreadable", "the file holds no raster band of its own", where=name, fix=fix)
    dtype = np.dtype(dataset.dtypes[0])
    if dtype.kind not in "iuf":
        raise InputError("file-unreadable", f"values of the type {dtype} are no elevations", where=name)
    transform = dataset.transform
    points, _ = dataset.gcps
    if points or (transform.is_identity and dataset.crs is not None) or transform.is_degenerate:
        how = f"only {len(points)} ground control points" if points else "no usable transform"
        raise InputError(
            "transform-missing", f"the raster has {how}, so its cells have no exact place", where=name
        )
    if dataset.crs is None:
        raise InputError("crs-missing", "the raster has no coordinate reference system", where=name)
    try:
        full = pyproj.CRS.from_user_input(dataset.crs)
        crs = horizontal_crs(full)
    except (InputError, pyproj.exceptions.CRSError, RasterioError) as error:
        raise InputError("crs-unknown", f"the raster's CRS is not recognised: {error}", where=name) from error

    units, note = [], ""
    if len(full.axis_info) == 3:
        axis = full.axis_info[2]
        if axis.direction == "down":
            raise InputError(
                "crs-unknown",
                f"the vertical axis {axis.name!r} of the raster's CRS counts depths downwards",
                where=name,
                fix="convert the raster to heights before running",
            )
        units.append(
            StatedUnit(axis.unit_conversion_factor, f"the vertical axis of the CRS ({axis.unit_name})")
        )
    text = (dataset.units[0] or "").strip()
    if text:
        factor = metres_in(text)
        if factor is None:
            note = f"the band's unit {text!r} is no known unit of length"
        else:
            units.append(StatedUnit(factor, f"the band's unit ({text})"))

    nodata = dataset.nodatavals[0]
    if nodata is not None:
        if dtype.kind == "f":
            with np.errstate(over="ignore"):
                nodata = dtype.type(nodata)
        else:
            limits = np.iinfo(dtype)
            fits = np.isfinite(nodata) and nodata == int(nodata) and limits.min <= nodata <= limits.max
            nodata = dtype.type(int(nodata)) if fits else None
    rows, columns = _chunk(dataset)
    return Tile(
        name,
        crs,
        transform,
        dataset.width,
        dataset.height,
        rows,
        columns,
        dtype,
        nodata,
        float(dataset.scales[0]),
        float(dataset.offsets[0]),
        dataset.driver == "VRT",
        MaskFlags.per_dataset in dataset.mask_flag_enums[0],
        tuple(units),
        note,
    )


def _chunk(dataset) -> tuple[int, int]:
    """Return how many rows and columns to read at once: whole blocks, several where they are small."""
    rows, columns = dataset.block_shapes[0]
    rows, columns = min(rows, dataset.height), min(columns, dataset.width)
    if columns == dataset.width and rows < dataset.height:
        rows *= max(1, CHUNK_CELLS // (rows * columns))
    elif dataset.driver == "VRT" or rows * columns < 128 * 128:
        # A VRT's blocks are nominal; its sources are commonly in blocks of 256 or 512.
        rows *= max(1, 512 // rows)
        columns *= max(1, 512 // columns)
    return min(rows, dataset.height), min(columns, dataset.width)


class _Readers:
    """Open datasets, one handle a thread, the few used last."""

    def __init__(self, kept: int = 8) -> None:
        self._kept = kept
        self._local = threading.local()
        self._all: list[OrderedDict] = []

    def __enter__(self) -> _Readers:
        return self

    def __exit__(self, *_exception) -> None:
        for handles in self._all:
            for dataset in handles.values():
                dataset.close()

    def _open(self, path: str):
        handles = getattr(self._local, "handles", None)
        if handles is None:
            handles = self._local.handles = OrderedDict()
            self._all.append(handles)
        if path in handles:
            handles.move_to_end(path)
        else:
            handles[path] = rasterio.open(path)
            if len(handles) > self._kept:
                handles.popitem(last=False)[1].close()
        return handles[path]

    def _lent(self, tile: Tile, rows: int, columns: int) -> np.ndarray:
        kept = getattr(self._local, "lent", None)
        if kept is None or kept.dtype != tile.dtype or kept.size < rows * columns:
            kept = self._local.lent = np.empty(rows * columns, dtype=tile.dtype)
        return kept[: rows * columns].reshape(rows, columns)

    def read(
        self, tile: Tile, row: int, column: int, rows: int, columns: int, *, lend: bool = False
    ) -> _Cells:
        """Return cells; with `lend` they hold only until this thread reads again."""
        window = Window(column, row, columns, rows)
        try:
            dataset = self._open(tile.path)
            # fresh memory for each block costs a tenth of its decoding
            values = dataset.read(1, window=window, out=self._lent(tile, rows, columns) if lend else None)
            mask = dataset.read_masks(1, window=window) if tile.masked else None
        except RasterioError as error:
            # The block that fails is named by GDAL in the error behind it.
            reason = error.__cause__ or error
            raise InputError(
                "file-unreadable",
                f"the raster is damaged: rows {row} to {row + rows - 1}, columns {column} to "
                f"{column + columns - 1} cannot be read: {reason}",
                where=tile.path,
            ) from error
        return _Cells(tile, values.ravel(), None if mask is None else mask.ravel())


@dataclass(frozen=True)
class _Cells:
    """A piece of a tile as it was read, row by row."""

    tile: Tile
    values: np.ndarray
    mask: np.ndarray | None

    def elevations(self, index=slice(None), dtype=np.float64) -> np.ndarray:
        """Return elevations in the raster's unit, NaN for gaps."""
        tile, values = self.tile, self.values[index]
        with np.errstate(over="ignore"):  # marks of gaps may be beyond a smaller type
            elevations = values.astype(dtype)
        gap = None
        if tile.dtype.kind == "f":
            gap = ~(np.abs(elevations) < IMPOSSIBLE)  # catches NaN and infinities too
        if tile.nodata is not None and tile.nodata == tile.nodata:
            gap = values == tile.nodata if gap is None else gap | (values == tile.nodata)
        if self.mask is not None:
            gap = self.mask[index] == 0 if gap is None else gap | (self.mask[index] == 0)
        if gap is not None:
            elevations[gap] = np.nan
        if tile.scale != 1.0 or tile.offset != 0.0:
            elevations = elevations * tile.scale + tile.offset
        return elevations


def _interpolate(corners, right: np.ndarray, down: np.ndarray) -> np.ndarray:
    """Return the bilinear values between four corners: upper left, upper right, lower left, lower right.

    `right` and `down` are the parts of a cell, 0 to 1, from the upper left corner. A corner that is NaN
    makes the value NaN, unless its weight is nothing but round-off.
    """
    upper_left, upper_right, lower_left, lower_right = corners
    upper = upper_left + right * (upper_right - upper_left)
    lower = lower_left + right * (lower_right - lower_left)
    values = upper + down * (lower - upper)
    gaps = np.flatnonzero(np.isnan(values))
    if gaps.size:
        right, down = right[gaps], down[gaps]
        right = np.where(right < EDGE_TOLERANCE, 0.0, np.where(right > 1.0 - EDGE_TOLERANCE, 1.0, right))
        down = np.where(down < EDGE_TOLERANCE, 0.0, np.where(down > 1.0 - EDGE_TOLERANCE, 1.0, down))
        weights = ((1.0 - right) * (1.0 - down), right * (1.0 - down), (1.0 - right) * down, right * down)
        values[gaps] = sum(
            np.where(weight > 0.0, weight * corner[gaps], 0.0)
            for weight, corner in zip(weights, corners, strict=True)
        )
    return values


class Mosaic:
    """Tiles on one grid, asked for elevations by column and row.

    Parameters
    ----------
    tiles : list of Tile
        At least one, all of one CRS.

    Attributes
    ----------
    tiles : list of Tile
        With their place in the grid.
    transform : Affine
        From (column, row) of the grid to map (x, y); (0, 0) is the outer corner of the first cell.
    width, height : int

    Raises
    ------
    InputError
        ``tiles-differ``: another cell size, or cells that do not lie on the grid of the first tile.
    """

    def __init__(self, tiles: list[Tile]) -> None:
        first = tiles[0]
        placed = [self._place(tile, first) for tile in tiles]
        left, top = min(tile.column for tile in placed), min(tile.row for tile in placed)
        self.tiles = [replace(tile, column=tile.column - left, row=tile.row - top) for tile in placed]
        self.transform = next(
            (tile.transform for tile in self.tiles if tile.column == tile.row == 0),
            shifted(first.transform, left, top),
        )
        self.width = max(tile.column + tile.width for tile in self.tiles)
        self.height = max(tile.row + tile.height for tile in self.tiles)
        # Columns of the arrays below are tiles.
        self._column = np.array([tile.column for tile in self.tiles], dtype=np.int32)
        self._row = np.array([tile.row for tile in self.tiles], dtype=np.int32)
        self._chunk_rows = np.array([tile.chunk_rows for tile in self.tiles], dtype=np.int32)
        self._chunk_columns = np.array([tile.chunk_columns for tile in self.tiles], dtype=np.int32)
        self._across = np.array([-(-tile.width // tile.chunk_columns) for tile in self.tiles], dtype=np.int64)
        down = np.array([-(-tile.height // tile.chunk_rows) for tile in self.tiles], dtype=np.int64)
        self._first_chunk = np.concatenate([[0], np.cumsum(self._across * down)])
        self._find_cover()

    @staticmethod
    def _place(tile: Tile, first: Tile) -> Tile:
        between = np.linalg.inv(np.reshape(first.transform, (3, 3))) @ np.reshape(tile.transform, (3, 3))
        place = np.round(between[:2, 2])
        corners = np.array([(0, tile.width, 0, tile.width), (0, 0, tile.height, tile.height)], dtype=float)
        off = np.abs(between[:2, :2] @ corners + (between[:2, 2] - place)[:, None] - corners).max()
        if not off <= GRID_TOLERANCE:
            raise InputError(
                "tiles-differ",
                f"the cells do not lie on the grid of {first.path}: a corner is {off:.3g} cells off",
                where=tile.path,
            )
        return replace(tile, column=int(place[0]), row=int(place[1]))

    def _find_cover(self) -> None:
        """Cut the grid along the tiles' edges; note for each piece which tiles cover it, in order."""
        ends_x = [tile.column + tile.width for tile in self.tiles]
        ends_y = [tile.row + tile.height for tile in self.tiles]
        self._edges_x = np.unique(np.concatenate([self._column, ends_x]))
        self._edges_y = np.unique(np.concatenate([self._row, ends_y]))
        shape = (self._edges_y.size - 1, self._edges_x.size - 1)
        layers = [np.full(shape, -1, dtype=np.int32)]
        count = np.zeros(shape, dtype=np.int32)
        latest = np.full(shape, -1, dtype=np.int32)
        self._wave = np.zeros(len(self.tiles), dtype=np.int32)
        for number, tile in enumerate(self.tiles):
            piece = (
                slice(*np.searchsorted(self._edges_y, [tile.row, ends_y[number]])),
                slice(*np.searchsorted(self._edges_x, [tile.column, ends_x[number]])),
            )
            self._wave[number] = latest[piece].max() + 1
            latest[piece] = self._wave[number]
            while count[piece].max() >= len(layers):
                layers.append(np.full(shape, -1, dtype=np.int32))
            for depth, layer in enumerate(layers):
                view = layer[piece]
                view[count[piece] == depth] = number
            count[piece] += 1
        # One more layer of nothing, so that "the next tile" always has an answer.
        layers.append(np.full(shape, -1, dtype=np.int32))
        self._cover = np.stack([layer.ravel() for layer in layers])

    def _piece(self, column: np.ndarray, row: np.ndarray) -> np.ndarray:
        """Return the number of the piece of the grid in which cells lie."""
        across = np.searchsorted(self._edges_x, column, side="right") - 1
        down = np.searchsorted(self._edges_y, row, side="right") - 1
        return down * (self._edges_x.size - 1) + across

    def _chunk_number(self, tile, column: np.ndarray, row: np.ndarray) -> np.ndarray:
        """Return the running number over all tiles of the chunk that holds cells of given tiles."""
        across = (column - self._column[tile]) // self._chunk_columns[tile]
        down = (row - self._row[tile]) // self._chunk_rows[tile]
        return self._first_chunk[tile] + down * self._across[tile] + across

    def blocks_at(self, column: np.ndarray, row: np.ndarray) -> np.ndarray:
        """Return the number of what is read at once for places in the grid, -1 where no tile is.

        Where tiles overlap, that of the first counts.
        """
        column, row = np.floor(column), np.floor(row)
        inside = (column >= 0) & (column < self.width) & (row >= 0) & (row < self.height)
        numbers = np.full(column.shape, -1, dtype=np.int64)
        column, row = column[inside].astype(np.int64), row[inside].astype(np.int64)
        tile = self._cover[0][self._piece(column, row)]
        numbers[inside] = np.where(tile >= 0, self._chunk_number(tile, column, row), -1)
        return numbers

    def elevations(self, column: np.ndarray, row: np.ndarray, *, bilinear: bool = True) -> np.ndarray:
        """Return elevations at places in the grid.

        Parameters
        ----------
        column, row : ndarray, shape (n,)
            Places, 0.5 in the middle of the first cell.
        bilinear : bool
            Between the four cell centres around; in the half cell along the edge, the edge cells count
            on. Else the cell that holds the place.

        Returns
        -------
        ndarray, shape (n,)
            In the raster's unit; NaN outside and where a cell that counts is a gap.
        """
        with np.errstate(invalid="ignore"):
            inside = (
                (column >= -EDGE_TOLERANCE)
                & (column <= self.width + EDGE_TOLERANCE)
                & (row >= -EDGE_TOLERANCE)
                & (row <= self.height + EDGE_TOLERANCE)
            )
        if not inside.all():
            values = np.full(column.size, np.nan)
            if inside.any():
                values[inside] = self.elevations(column[inside], row[inside], bilinear=bilinear)
            return values

        return _Gathering(self, *self._cells_about(column, row, bilinear)).run()

    def _cells_about(self, column: np.ndarray, row: np.ndarray, bilinear: bool):
        """Return columns and rows of the cells about places within the grid, and the parts of a cell."""
        if bilinear:
            left, top = np.floor(column - 0.5), np.floor(row - 0.5)
            right, down = column - 0.5 - left, row - 0.5 - top
        else:
            left, top = np.floor(column), np.floor(row)
            right = down = np.zeros(column.size)
        step = 1 if bilinear else 0
        columns = [np.clip(left + side, 0, self.width - 1).astype(np.int32) for side in (0, step)]
        rows = [np.clip(top + side, 0, self.height - 1).astype(np.int32) for side in (0, step)]
        return columns, rows, right, down

    def many_elevations(
        self,
        x: np.ndarray,
        y: np.ndarray,
        place: tuple,
        bilinear: bool,
        values: np.ndarray,
        straight: np.ndarray,
    ) -> None:
        """Find elevations at many places of the map, by compiled code; there is one tile.

        Parameters
        ----------
        x, y : ndarray, shape (n,)
        place : tuple of six floats
            a, b, d, e, c and f: the column is a (x - c) + b (y - f), the row d (x - c) + e (y - f).
        bilinear : bool
            See :meth:`elevations`, which gives the same numbers.
        values : ndarray, shape (n,)
            NaN everywhere; filled.
        straight : ndarray of int, shape (pieces,)
            Where pieces begin whose places lie in order on a straight line.
        """
        many = _ManyPoints(self, x, y, place, bilinear, values, straight)
        a, b, d, e, c, f = place
        open_x, open_y = x[many.open] - c, y[many.open] - f
        left, top, right, down = self._cells_about(a * open_x + b * open_y, d * open_x + e * open_y, bilinear)
        gathering = _Gathering(self, left, top, right, down, many)
        values[many.open] = gathering.run()

    def window(self, row: int, column: int, rows: int, columns: int, dtype=np.float64) -> np.ndarray:
        """Return elevations of a block of cells in the raster's unit, NaN for gaps and where no tile is."""
        out = np.full((rows, columns), np.nan, dtype=dtype)
        with _Readers() as readers:
            for tile in self.tiles:
                top, left = max(row, tile.row), max(column, tile.column)
                bottom = min(row + rows, tile.row + tile.height)
                right = min(column + columns, tile.column + tile.width)
                # Some rows at a time, whole blocks of the file, to hold little beside the answer.
                step = tile.chunk_rows * max(1, 8 * CHUNK_CELLS // (tile.chunk_rows * max(1, right - left)))
                begin = top
                while begin < bottom and left < right:
                    end = min(bottom, tile.row + ((begin - tile.row) // step + 1) * step)
                    target = out[begin - row : end - row, left - column : right - column]
                    empty = np.isnan(target)
                    if empty.any():
                        cells = readers.read(
                            tile, begin - tile.row, left - tile.column, end - begin, right - left
                        )
                        np.copyto(target, cells.elevations(dtype=dtype).reshape(target.shape), where=empty)
                    begin = end
        return out


class _ManyPoints:
    """Very many points over one tile, worked out by compiled code where their cells lie in one chunk.

    Attributes
    ----------
    chunks : ndarray of int
        Numbers of the chunks that hold such points.
    open : ndarray of int
        The other points within the grid.
    """

    def __init__(
        self, mosaic: Mosaic, x, y, place: tuple, bilinear: bool, values: np.ndarray, straight: np.ndarray
    ) -> None:
        from terrain2q.ground import compiled_sampling as compiled

        self._compiled, self._values = compiled, values
        tile = mosaic.tiles[0]
        self._tile = tile
        self._points = x, y, *map(float, place), bilinear, mosaic.width, mosaic.height
        self._across = int(mosaic._across[0])
        self._nodata = np.nan if tile.nodata is None else float(tile.nodata)
        self._no_mask = np.zeros((0, 0), dtype=np.uint8)
        found = {}

        def find(part: slice) -> None:
            begin = straight[part.start]
            end = straight[part.stop] if part.stop < straight.size else x.size
            runs = np.empty((3, end - begin), dtype=np.int32)  # memory is only taken as far as it is filled
            count = compiled.find_runs(
                part.start, part.stop, straight, *self._points, EDGE_TOLERANCE, tile.chunk_rows,
                tile.chunk_columns, self._across, *runs,
            )  # fmt: skip
            found[part.start] = runs[:, :count]

        in_threads(find, straight.size)
        keys, starts, ends = np.concatenate([found[start] for start in sorted(found)], axis=1)
        if mosaic._first_chunk[-1] < 2**15:
            keys = keys.astype(np.int16)  # these are sorted by counting
        order = np.argsort(keys, kind="stable")
        keys, self._starts, self._ends = keys[order], starts[order], ends[order]
        numbers = np.arange(compiled.OUTSIDE, mosaic._first_chunk[-1] + 1)
        self._first = dict(zip(numbers.tolist(), np.searchsorted(keys, numbers).tolist(), strict=True))
        self.chunks = np.unique(keys[keys >= 0]).astype(np.int64)
        self.open = ranges(*self._runs(compiled.OPEN))

    def _runs(self, key: int) -> tuple[np.ndarray, np.ndarray]:
        """Return first places and ends of the runs with a key."""
        here = slice(self._first[key], self._first[key + 1])
        return self._starts[here], self._ends[here]

    def serve(self, chunk: int, readers: _Readers, columns: np.ndarray, rows: np.ndarray) -> np.ndarray:
        """Read a chunk, fill in the elevations of its points, and return those of single cells in it."""
        tile, (starts, ends) = self._tile, self._runs(chunk)
        # all of it, as GDAL decodes all of it anyway
        down, right = divmod(chunk, self._across)
        top, left = down * tile.chunk_rows, right * tile.chunk_columns
        height, width = min(tile.chunk_rows, tile.height - top), min(tile.chunk_columns, tile.width - left)
        cells = readers.read(tile, top, left, height, width, lend=True)
        piece = (
            cells.values.reshape(height, width),
            self._no_mask if cells.mask is None else cells.mask.reshape(height, width),
            top,
            left,
        )
        about = self._nodata, IMPOSSIBLE, float(tile.scale), float(tile.offset)
        if starts.size:
            self._compiled.interpolate(
                *piece, starts, ends, *self._points, EDGE_TOLERANCE, *about, self._values
            )
        single = np.empty(columns.size)
        if columns.size:
            self._compiled.cells_at(*piece, columns, rows, *about, single)
        return single


class _Gathering:
    """One pass over the blocks that some points need.

    A point whose four cells lie in one chunk of one tile is *simple* and is worked out where the chunk
    is read. The few others (about the edges of chunks and tiles, and where a tile has a gap that another
    may fill) are *open*: they keep their four corners until all are there.
    """

    def __init__(self, mosaic: Mosaic, columns, rows, right, down, many: _ManyPoints | None = None) -> None:
        self.mosaic, self.columns, self.rows, self.right, self.down = mosaic, columns, rows, right, down
        self.values = np.full(right.size, np.nan)
        self.several = len(mosaic.tiles) > 1
        self.many = many
        self.simple, self.simple_keys, open_points = self._sorted()
        self.found: list[tuple[np.ndarray, np.ndarray]] = []
        self.open = np.zeros(0, dtype=np.int64)
        self.corners = np.zeros((0, 4))
        self.pieces = np.zeros((0, 4), dtype=np.int64)
        self.depth = np.zeros((0, 4), dtype=np.int32)
        self._add_open(open_points, None)

    def _sorted(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Return the simple points by their chunks, the chunk of each, and the open points."""
        mosaic, columns, rows = self.mosaic, self.columns, self.rows
        pairs = ((0, 0), (1, 0), (0, 1), (1, 1))
        if self.several:
            tiles = [mosaic._cover[0][mosaic._piece(columns[i], rows[j])] for i, j in pairs]
            one_tile = (
                (tiles[0] == tiles[1]) & (tiles[0] == tiles[2]) & (tiles[0] == tiles[3]) & (tiles[0] >= 0)
            )
        else:
            tiles, one_tile = [0], True  # numbers instead of arrays, for speed
        first = mosaic._chunk_number(tiles[0], columns[0], rows[0])
        simple = one_tile & (first == mosaic._chunk_number(tiles[0], columns[1], rows[1]))
        points = np.flatnonzero(simple)
        keys = first[points]
        if mosaic._first_chunk[-1] < 2**16:
            keys = keys.astype(np.uint16)  # these are sorted by counting
        order = np.argsort(keys, kind="stable")
        return points[order], keys[order].astype(np.int64), np.flatnonzero(~simple)

    def _add_open(self, points: np.ndarray, corners: np.ndarray | None) -> None:
        """Take points among the open ones; `corners` as far as their first tile had them."""
        if not points.size:
            return
        self.open = np.concatenate([self.open, points])
        pieces = self.mosaic._piece(self._corner_columns(points), self._corner_rows(points))
        self.pieces = np.concatenate([self.pieces, pieces])
        known = corners is not None
        self.depth = np.concatenate([self.depth, np.full((points.size, 4), int(known), dtype=np.int32)])
        self.corners = np.concatenate([self.corners, corners if known else np.full((points.size, 4), np.nan)])

    def _corner_columns(self, points: np.ndarray) -> np.ndarray:
        return np.stack([self.columns[i][points] for i in (0, 1, 0, 1)], axis=1)

    def _corner_rows(self, points: np.ndarray) -> np.ndarray:
        return np.stack([self.rows[j][points] for j in (0, 0, 1, 1)], axis=1)

    def run(self) -> np.ndarray:
        """Read every chunk needed and return the elevations."""
        mosaic = self.mosaic
        simple_wave = None
        if self.several:
            owner = np.searchsorted(mosaic._first_chunk, self.simple_keys, side="right") - 1
            simple_wave = mosaic._wave[owner]
        with _Readers() as readers:
            for wave in range(int(mosaic._wave.max()) + 1):
                keys, points = self.simple_keys, self.simple
                if self.several:
                    keys, points = keys[simple_wave == wave], points[simple_wave == wave]
                tile = mosaic._cover[self.depth, self.pieces]
                wanted = np.isnan(self.corners) & (tile >= 0)
                if self.several:
                    wanted &= mosaic._wave[tile] == wave
                request = np.flatnonzero(wanted)
                point, corner = self.open[request // 4], request % 4
                column = np.where(corner % 2 == 0, self.columns[0][point], self.columns[1][point])
                row = np.where(corner < 2, self.rows[0][point], self.rows[1][point])
                request_keys = mosaic._chunk_number(tile.ravel()[request], column, row)
                order = np.argsort(request_keys, kind="stable")
                self._read(
                    readers, keys, points, request_keys[order], request[order], column[order], row[order]
                )
                self.depth.ravel()[request] += 1  # where it is still a gap, the next tile is asked
                for points, corners in self.found:
                    self._add_open(points, corners)
                self.found.clear()
        self._close_open()
        return self.values

    def _read(self, readers, keys, points, request_keys, request, column, row) -> None:
        """Serve sorted simple points and sorted requests for single corners, chunk by chunk."""
        mosaic = self.mosaic
        # Both are sorted: the first of each run of equal keys.
        chunks = np.union1d(
            *(some[np.flatnonzero(np.diff(some, prepend=-1))] for some in (keys, request_keys))
        )
        if self.many is not None:
            chunks = np.union1d(chunks, self.many.chunks)
        if not chunks.size:
            return
        tiles = np.searchsorted(mosaic._first_chunk, chunks, side="right") - 1
        bounds = [
            np.searchsorted(sorted_keys, chunks, side=side).tolist()
            for sorted_keys in (keys, request_keys)
            for side in ("left", "right")
        ]
        jobs = list(zip(chunks.tolist(), tiles.tolist(), *bounds, strict=True))
        columns, rows, right, down, corners = (
            self.columns,
            self.rows,
            self.right,
            self.down,
            self.corners.ravel(),
        )

        def serve(
            chunk: int, tile_number: int, begin: int, end: int, request_begin: int, request_end: int
        ) -> None:
            tile = mosaic.tiles[tile_number]
            if self.many is not None:
                # all points but the open ones are there
                single = slice(request_begin, request_end)
                corners[request[single]] = self.many.serve(chunk, readers, column[single], row[single])
                return
            here = points[begin:end]
            first_column, last_column = columns[0][here], columns[1][here]
            first_row, last_row = rows[0][here], rows[1][here]
            single_column, single_row = column[request_begin:request_end], row[request_begin:request_end]
            left = min(a.min() for a in (first_column, single_column) if a.size)
            width = int(max(a.max() for a in (last_column, single_column) if a.size) - left + 1)
            top = min(a.min() for a in (first_row, single_row) if a.size)
            height = int(max(a.max() for a in (last_row, single_row) if a.size) - top + 1)
            cells = readers.read(tile, int(top) - tile.row, int(left) - tile.column, height, width)
            if here.size:
                place = (first_row - top).astype(np.int64) * width + (first_column - left)
                beside = last_column - first_column
                below = (last_row - first_row) * width
                four = [
                    cells.elevations(index)
                    for index in (place, place + beside, place + below, place + beside + below)
                ]
                self.values[here] = _interpolate(four, right[here], down[here])
                if self.several:
                    four = np.stack(four, axis=1)
                    gaps = np.isnan(four).any(axis=1)
                    if gaps.any():
                        self.found.append((here[gaps], four[gaps]))
            if single_column.size:
                place = (single_row - top).astype(np.int64) * width + (single_column - left)
                corners[request[request_begin:request_end]] = cells.elevations(place)

        def serve_all(some: list) -> None:
            for job in some:
                serve(*job)

        largest = max(tile.chunk_rows * tile.chunk_columns * tile.dtype.itemsize for tile in mosaic.tiles)
        workers = max(1, min(os.cpu_count() or 1, MOST_THREADS, len(jobs) // 2, MEMORY // largest))
        if workers == 1:
            serve_all(jobs)
            return
        # Neighbouring chunks go to one thread, and long runs of them in a VRT, as they share blocks of its
        # sources, which each thread decodes for itself.
        runs = workers * (2 if any(tile.is_virtual for tile in mosaic.tiles) else 16)
        share = -(-len(jobs) // runs)
        with ThreadPoolExecutor(workers) as pool:
            for _ in pool.map(serve_all, [jobs[i : i + share] for i in range(0, len(jobs), share)]):
                pass

    def _close_open(self) -> None:
        """Interpolate the open points; along an outer edge inside the grid, the edge cells count on."""
        if not self.open.size:
            return
        right, down, corners = self.right[self.open], self.down[self.open], self.corners
        absent = self.mosaic._cover[0][self.pieces] < 0
        outside = np.zeros(self.open.size, dtype=bool)
        some = np.flatnonzero(absent.any(axis=1))
        if some.size:
            lacking, filled = absent[some], corners[some]
            each = np.arange(some.size)
            nearest = (right[some] >= 0.5) + 2 * (down[some] >= 0.5)
            home = nearest
            on_x = np.abs(right[some] - 0.5) < EDGE_TOLERANCE
            on_y = np.abs(down[some] - 0.5) < EDGE_TOLERANCE
            for flip, on in ((1, on_x), (2, on_y), (3, on_x & on_y)):
                home = np.where(
                    lacking[each, home] & on & ~lacking[each, nearest ^ flip], nearest ^ flip, home
                )
            outside[some] = lacking[each, home]
            for neighbour in (home ^ 1, home ^ 2):
                filled[each, neighbour] = np.where(
                    lacking[each, neighbour], filled[each, home], filled[each, neighbour]
                )
            across = home ^ 3
            beside = np.where(lacking[each, home ^ 1], filled[each, home ^ 2], filled[each, home ^ 1])
            filled[each, across] = np.where(lacking[each, across], beside, filled[each, across])
            corners[some] = filled
        values = _interpolate(tuple(corners.T), right, down)
        values[outside] = np.nan
        self.values[self.open] = values
