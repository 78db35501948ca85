"""Cells under water joined to each other, and the water's edge as polygons; strip by strip, in little memory.

A grid too large to hold stays in a file without a name, which is gone when the run ends, however it
ends; a few rows at a time are worked on.

Cells are joined by their sides, not by their corners. So water passes a gap one cell wide, and a ridge
one cell wide holds it also where the ridge runs at a slant to the grid.
"""

from __future__ import annotations

import os
import tempfile
from itertools import pairwise

import contourpy
import numpy as np
import shapely
from scipy import ndimage
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

STRIP_CELLS = 2_500_000
"""About so many cells are worked on at once."""


class GridFile:
    """A grid in a nameless temporary file, read and written by rows.

    Parameters
    ----------
    rows, columns : int
    dtype : dtype
    folder : path, optional
        Where there is room; the system's own folder for temporary files where absent.
    """

    def __init__(self, rows: int, columns: int, dtype, folder: str | os.PathLike | None = None) -> None:
        self.rows, self.columns, self.dtype = rows, columns, np.dtype(dtype)
        self._file = tempfile.TemporaryFile(dir=folder)
        self._file.truncate(rows * columns * self.dtype.itemsize)

    def _seek(self, row: int) -> None:
        self._file.seek(row * self.columns * self.dtype.itemsize)

    def write(self, row: int, values: np.ndarray) -> None:
        """Write whole rows from `row` on."""
        self._seek(row)
        self._file.write(np.ascontiguousarray(values, dtype=self.dtype).data)

    def read(self, row: int, end: int) -> np.ndarray:
        """Return rows `row` to `end`, shape (end - row, columns)."""
        values = np.empty((end - row, self.columns), dtype=self.dtype)
        self._seek(row)
        self._file.readinto(values.data)
        return values

    def read_around(self, row: int, end: int, around: int, fill) -> np.ndarray:
        """Return rows `row - around` to `end + around`, with `fill` in rows that the grid does not have."""
        low, high = max(row - around, 0), min(end + around, self.rows)
        values = self.read(low, high)
        add = (low - (row - around), end + around - high)
        return np.pad(values, (add, (0, 0)), constant_values=fill) if any(add) else values

    def pick(self, rows: np.ndarray, columns: np.ndarray) -> np.ndarray:
        """Return the values of single cells, shape (n,)."""
        whole = np.memmap(self._file, dtype=self.dtype, mode="r", shape=(self.rows, self.columns))
        return np.array(whole[rows, columns])

    def close(self) -> None:
        """Give the room on the disk back."""
        self._file.close()


def strips(rows: int, columns: int, first: int = 0, block: int = 1) -> list[tuple[int, int]]:
    """Return the rows of strips: about :data:`STRIP_CELLS` each, ending where a block of rows ends.

    Parameters
    ----------
    rows, columns : int
        Of the grid.
    first : int
        The row of the raster where the grid starts.
    block : int
        Rows in a block of the raster.
    """
    height = max(STRIP_CELLS // max(columns, 1), 1)
    height = max(height // block, 1) * block
    edges = [0, *range(height - first % height, rows, height), rows]
    edges = sorted(set(edges))
    return list(pairwise(edges))


class Joins:
    """Patches of wet cells over all strips: which are one, how large they are, and which are marked."""

    def __init__(self) -> None:
        self._pairs: list[np.ndarray] = []
        self._sizes: list[np.ndarray] = []
        self._first: list[int] = []
        self._count = 0
        self._last: np.ndarray | None = None

    def add(self, wet: np.ndarray) -> tuple[np.ndarray, int]:
        """Label the wet cells of the next strip; return labels (0 dry) and the number of the first patch."""
        labels, count = ndimage.label(wet) if wet.any() else (np.zeros(wet.shape, dtype=np.int32), 0)
        first = self._count
        if self._last is not None and count:
            above, below = self._last, labels[0]
            touch = (above > 0) & (below > 0)
            pairs = np.column_stack([above[touch] - 1, below[touch] - 1 + first])
            self._pairs.append(np.unique(pairs, axis=0))
        self._sizes.append(np.bincount(labels.ravel())[1:] if count else np.zeros(0, dtype=np.int64))
        self._first.append(first)
        self._count += count
        last = labels[-1].astype(np.int64)
        self._last = np.where(last > 0, last + first, 0)
        return labels, first

    def settle(self) -> None:
        """Find out which patches are one; to be called after the last strip."""
        pairs = np.concatenate(self._pairs) if self._pairs else np.zeros((0, 2), dtype=np.int64)
        graph = coo_array((np.ones(len(pairs)), (pairs[:, 0], pairs[:, 1])), shape=(self._count, self._count))
        self.whole = connected_components(graph, directed=False)[1] if self._count else np.zeros(0, dtype=int)
        sizes = np.concatenate(self._sizes) if self._sizes else np.zeros(0, dtype=int)
        self.sizes = np.bincount(self.whole, weights=sizes).astype(np.int64) if self._count else sizes

    def holding(self, patches: np.ndarray) -> np.ndarray:
        """Return for each whole patch whether one of `patches` (numbers of parts) is in it."""
        held = np.zeros(self.sizes.size, dtype=bool)
        held[self.whole[patches]] = True
        return held

    def table(self, strip: int, values: np.ndarray) -> np.ndarray:
        """Return a table from the labels of one strip to `values` of the whole patches; 0 for dry."""
        first = self._first[strip]
        own = self.whole[first : first + len(self._sizes[strip])]
        return np.concatenate([np.zeros(1, dtype=values.dtype), values[own]])


def edge_field(depth: np.ndarray, state: np.ndarray, wanted: int, beside: int) -> np.ndarray:
    """Return a field that is above zero exactly under the water wanted, and zero on its edge.

    Parameters
    ----------
    depth : ndarray, shape (rows, columns)
        Level less ground; ``-inf`` where either is not known.
    state : ndarray of uint8, shape (rows, columns)
        What each cell is; 0 where it does not matter.
    wanted, beside : int
        The state of the water wanted, and that of cells beyond the boundary, where the water is
        continued so that its edge can be cut at the boundary.

    Returns
    -------
    ndarray of float64, shape (rows, columns)
    """
    mine = state == wanted
    near = np.argwhere((state == beside) & (depth > 0))
    for _ in range(2):
        # the water goes on into the few cells beyond the boundary that touch it, two cells far
        around = [near + np.array([i, j]) for i in (-1, 0, 1) for j in (-1, 0, 1)]
        inside = [((a >= 0) & (a < mine.shape)).all(axis=1) for a in around]
        touched = np.zeros(len(near), dtype=bool)
        for a, ok in zip(around, inside, strict=True):
            touched[ok] |= mine[tuple(a[ok].T)]
        mine[tuple(near[touched].T)] = True
    field = np.abs(depth, dtype=np.float64)
    unknown = ~np.isfinite(field)
    field[unknown] = 1.0
    around = unknown & (state != 0)
    if around.any():
        around &= ndimage.binary_dilation(mine, np.ones((3, 3), dtype=bool))
    if around.any():
        # water at a gap ends at the sides of the gap's cells: half way between the centres
        highest = ndimage.maximum_filter(np.where(mine, field, 0.0), size=3)
        field[around] = highest[around]
    field += 1e-9
    np.negative(field, out=field, where=~mine)
    return field


def outlines(field: np.ndarray, row: int, column: int) -> np.ndarray:
    """Return polygons about the cells above zero, by marching squares between the cells' centres.

    Parameters
    ----------
    field : ndarray, shape (rows, columns)
    row, column : int
        Of its first cell.

    Returns
    -------
    ndarray of Polygon
        In cells; (0.5, 0.5) is the middle of the first cell of the terrain.
    """
    if min(field.shape) < 2 or not (field > 0).any():
        return np.zeros(0, dtype=object)
    generator = contourpy.contour_generator(z=field, fill_type=contourpy.FillType.OuterOffset)
    points, offsets = generator.filled(0.0, np.inf)
    if not points:
        return np.zeros(0, dtype=object)
    coordinates = np.concatenate(points) + np.array([column + 0.5, row + 0.5])
    start = np.cumsum([0, *(len(p) for p in points)])
    rings = np.concatenate([[0], *(o[1:].astype(np.int64) + s for o, s in zip(offsets, start, strict=False))])
    polygons = np.cumsum([0, *(len(o) - 1 for o in offsets)])
    made = shapely.from_ragged_array(shapely.GeometryType.POLYGON, coordinates, (rings, polygons))
    return made


def made_valid(polygons: np.ndarray) -> np.ndarray:
    """Return polygons, those that touch themselves cut into valid ones."""
    sound = shapely.is_valid(polygons)
    if sound.all():
        return polygons
    mended = np.array(polygons_of(shapely.make_valid(polygons[~sound])), dtype=object)
    return np.concatenate([polygons[sound], mended])


def polygons_of(geometry) -> list[shapely.Polygon]:
    """Return the polygons in a geometry, without lines and points."""
    parts = shapely.get_parts(np.atleast_1d(np.asarray(geometry, dtype=object)))
    kinds = shapely.get_type_id(parts)
    found = list(parts[kinds == 3])
    for nested in parts[kinds > 3]:
        found += polygons_of(nested)
    return found


def tidy(polygons, smallest: float) -> np.ndarray:
    """Return polygons without those, and without the holes, that are smaller than `smallest` (in cells)."""
    filled = fill_small_holes(polygons, smallest)
    return filled[shapely.area(filled) >= smallest]


def fill_small_holes(polygons, smallest: float) -> np.ndarray:
    """Return polygons without the holes that are smaller than `smallest` (in cells)."""
    polygons = np.array(polygons, dtype=object)
    rings, owner = shapely.get_rings(polygons, return_index=True)
    if len(rings) == len(polygons):
        return polygons
    shell = np.append(True, np.diff(owner) != 0)
    hole = ~shell & (shapely.area(shapely.polygons(rings)) >= smallest)
    touched = np.bincount(owner[~shell & ~hole], minlength=len(polygons)) > 0
    if touched.any():
        mine = hole & touched[owner]
        number = np.cumsum(touched) - 1
        made = shapely.polygons(rings[shell & touched[owner]])
        with_holes = np.unique(owner[mine])
        if with_holes.size:
            place = np.searchsorted(with_holes, owner[mine])
            shells = shapely.get_exterior_ring(made[number[with_holes]])
            made[number[with_holes]] = shapely.polygons(shells, holes=_by_shell(rings[mine], place))
        polygons[touched] = made
    return polygons


def _by_shell(rings: np.ndarray, place: np.ndarray) -> np.ndarray:
    """Return rings as rows, one row a shell, filled up with None."""
    within = np.arange(place.size) - np.searchsorted(place, place)
    table = np.full((place[-1] + 1, within.max() + 1), None, dtype=object)
    table[place, within] = rings
    return table
