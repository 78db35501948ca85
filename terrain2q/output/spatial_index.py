"""Spatial indexes of a GeoPackage made at once, when all rows are there.

To keep an index up to date row by row costs more than the rows themselves where layers grow in many steps.
Here the finished rows are sorted into tiles and the index is packed from its leaves upward. Sources: OGC
GeoPackage 1.3 (12-128r17), annex F.3; the SQLite documentation, "The SQLite R*Tree Module" (shadow tables),
which fixes how a node is stored; the order of packing is the sort-tile-recursive one of Leutenegger, Lopez
and Edgington (1997), from memory.
"""

from __future__ import annotations

import sqlite3
import struct
from collections.abc import Iterator

import numpy as np

# What SQLite itself gives a node of two dimensions on pages of 4096 bytes: 51 cells after its head.
_CELLS = 51
_CELL = np.dtype([("number", ">i8"), ("box", ">f4", 4)])

# Rows that are sorted together: some 40 MB. More would cost memory and gain nothing for a reader.
_BLOCK = 2**17

# Rows that stand as objects at a time.
_FETCHED = 5000

_Entries = tuple[np.ndarray, np.ndarray]


def fill_index(database: sqlite3.Connection, table: str, column: str = "geom") -> None:
    """Fill the index of a table from the envelopes of its geometries.

    Parameters
    ----------
    database : sqlite3.Connection
        With the index there and empty.
    table, column : str
        The table, and its column of GeoPackage geometries, none of which is empty.

    Raises
    ------
    sqlite3.Error
        A geometry has no envelope, or the index cannot be written.
    """
    index = f"rtree_{table}_{column}"
    try:
        _pack(database, table, column, index)
    except sqlite3.OperationalError:
        # Some builds of SQLite keep the tables behind an index to themselves; row by row always goes.
        for part in ("node", "rowid", "parent"):
            if database.execute(f'SELECT count(*) FROM "{index}_{part}"').fetchone()[0] > (part == "node"):
                raise
        for numbers, boxes in _envelopes(database, table, column):
            database.executemany(
                f'INSERT INTO "{index}" VALUES (?, ?, ?, ?, ?)',
                zip(numbers.tolist(), *boxes.T.tolist(), strict=True),
            )


def _pack(database: sqlite3.Connection, table: str, column: str, index: str) -> None:
    first, leaves = 2, []  # the root is number 1
    for numbers, boxes in _envelopes(database, table, column):
        order = _tiles(boxes)
        numbers, boxes = numbers[order], _outward(boxes[order])
        owners, above = _write_nodes(database, index, first, numbers, boxes)
        by_row = np.argsort(numbers, kind="stable")
        database.executemany(
            f'INSERT INTO "{index}_rowid" VALUES (?, ?)',
            zip(numbers[by_row].tolist(), owners[by_row].tolist(), strict=True),
        )
        leaves.append(above)
        first += len(above[0])
    if not leaves:
        return
    numbers, boxes = (np.concatenate(parts) for parts in zip(*leaves, strict=True))
    depth = 1
    while True:
        order = _tiles(boxes)
        numbers, boxes = numbers[order], boxes[order]
        top = len(numbers) <= _CELLS
        owners, above = _write_nodes(
            database, index, 1 if top else first, numbers, boxes, depth if top else 0
        )
        database.executemany(
            f'INSERT INTO "{index}_parent" VALUES (?, ?)', zip(numbers.tolist(), owners.tolist(), strict=True)
        )
        if top:
            return
        numbers, boxes = above
        first, depth = first + len(numbers), depth + 1


def _write_nodes(
    database: sqlite3.Connection,
    index: str,
    first: int,
    numbers: np.ndarray,
    boxes: np.ndarray,
    depth: int = 0,
) -> tuple[np.ndarray, _Entries]:
    """Write nodes, `first` being the first one's number; return the node of each entry, and the nodes."""
    starts = np.arange(0, len(numbers), _CELLS)
    sizes = np.diff(starts, append=len(numbers))
    nodes = first + np.arange(len(starts))
    cells = np.zeros(len(starts) * _CELLS, dtype=_CELL)
    cells["number"][: len(numbers)], cells["box"][: len(numbers)] = numbers, boxes
    data, length = cells.tobytes(), _CELLS * _CELL.itemsize
    database.executemany(
        f'INSERT OR REPLACE INTO "{index}_node" VALUES (?, ?)',
        (
            (node, struct.pack(">HH", depth, size) + data[i * length : (i + 1) * length])
            for i, (node, size) in enumerate(zip(nodes.tolist(), sizes.tolist(), strict=True))
        ),
    )
    least, most = np.minimum.reduceat(boxes, starts), np.maximum.reduceat(boxes, starts)
    return np.repeat(nodes, sizes), (nodes, np.where([True, False, True, False], least, most))


def _envelopes(database: sqlite3.Connection, table: str, column: str) -> Iterator[_Entries]:
    """Give row numbers, and least x, greatest x, least y and greatest y of each row, by blocks."""
    cursor = database.execute(
        f'SELECT fid, substr("{column}", 1, 40) FROM "{table}" WHERE "{column}" IS NOT NULL ORDER BY fid'
    )
    parts, waiting = [], 0
    while rows := cursor.fetchmany(_FETCHED):
        numbers, heads = zip(*rows, strict=True)
        # Eight bytes of flags and CRS; then the envelope, which a point does without: order, kind, x and y.
        kinds = {head[3] & 0b11111 for head in heads}
        data = np.frombuffer(b"".join(heads), dtype=np.uint8).reshape(len(heads), -1)
        if kinds == {0b00001}:
            boxes = data[:, 13:29].copy().view("<f8")[:, [0, 0, 1, 1]]
        elif kinds <= {0b00011, 0b00101, 0b00111, 0b01001}:
            boxes = data[:, 8:40].copy().view("<f8")
        else:
            raise sqlite3.DatabaseError(f"{table} holds geometries without an envelope")
        parts.append((np.array(numbers, dtype=np.int64), boxes))
        waiting += len(rows)
        if waiting >= _BLOCK:
            yield tuple(np.concatenate(one) for one in zip(*parts, strict=True))
            parts, waiting = [], 0
    if parts:
        yield tuple(np.concatenate(one) for one in zip(*parts, strict=True))


def _outward(boxes: np.ndarray) -> np.ndarray:
    """Return boxes in single precision, none smaller than it was."""
    rounded = boxes.astype(np.float32)
    back = rounded.astype(float)
    least = np.where(back > boxes, np.nextafter(rounded, np.float32(-np.inf)), rounded)
    most = np.where(back < boxes, np.nextafter(rounded, np.float32(np.inf)), rounded)
    return np.where([True, False, True, False], least, most)


def _tiles(boxes: np.ndarray) -> np.ndarray:
    """Return an order in which boxes near each other follow each other: strips in x, sorted by y."""
    nodes = -(-len(boxes) // _CELLS)
    strips = int(np.ceil(np.sqrt(nodes)))
    width = -(-nodes // strips) * _CELLS
    strip = np.empty(len(boxes), dtype=np.int64)
    strip[np.argsort(boxes[:, 0] + boxes[:, 1], kind="stable")] = np.arange(len(boxes)) // width
    return np.lexsort((boxes[:, 2] + boxes[:, 3], strip))
