"""Sampling of many points, compiled: laying them along lines, sorting them by block, interpolating.

In loops over numbers what :mod:`~terrain2q.ground.terrain` and :mod:`~terrain2q.ground.tiles` say in arrays,
with the same operations in the same order; the tests hold the two to each other to the last bit.
"""

from __future__ import annotations

import numpy as np
from numba import njit

OPEN, OUTSIDE = -1, -2
"""In place of a chunk's number: the four cells do not lie in one chunk; the place is off the grid."""


@njit(cache=True, nogil=True, error_model="numpy")
def lay_points(
    vertex, parts, begin, x, y, drawn, panels, first_panel, panel_station, speeds, station, out_x, out_y,
    is_vertex,
):  # fmt: skip
    """Lay points along the segments that start at some vertices.

    Parameters
    ----------
    vertex, parts : ndarray of int, shape (n,)
        The vertices, and into how many parts the segment of each is divided.
    begin : ndarray of int, shape (n,)
        Where the points of each begin in what is filled.
    x, y, drawn : ndarray
        Of all vertices.
    panels, first_panel, panel_station, speeds : ndarray
        See `MeasuredLines`.
    station, out_x, out_y, is_vertex : ndarray
        Filled.
    """
    for i in range(vertex.size):
        v = vertex[i]
        following = min(v + 1, x.size - 1)
        x0, y0, run, rise = x[v], y[v], x[following] - x[v], y[following] - y[v]
        count, first, own, at = panels[v], first_panel[v], parts[i], begin[i]
        last = -1
        start = middle = end = base = a = b = 0.0
        for number in range(own):
            fraction = number / own
            out_x[at] = x0 + fraction * run
            out_y[at] = y0 + fraction * rise
            is_vertex[at] = number == 0 and drawn[v]
            u = fraction * count
            panel = min(int(u), count - 1)
            u -= panel
            if panel != last:
                last = panel
                start, middle, end = (
                    speeds[0, first + panel], speeds[1, first + panel], speeds[2, first + panel],
                )  # fmt: skip
                base = panel_station[first + panel]
                a, b = 0.5 * (4.0 * middle - 3.0 * start - end), start - 2.0 * middle + end
            station[at] = base + u * (start + u * (a + u * (2.0 / 3.0) * b))
            at += 1


@njit(cache=True, error_model="numpy")
def _cell(x, y, a, b, d, e, c, f, bilinear, width, height):
    """Return columns and rows of the cells about a place, and the parts of a cell to the right and down."""
    u, v = x - c, y - f
    column, row = a * u + b * v, d * u + e * v
    half = 0.5 if bilinear else 0.0
    step = 1.0 if bilinear else 0.0
    left, top = np.floor(column - half), np.floor(row - half)
    right = column - half - left if bilinear else 0.0
    down = row - half - top if bilinear else 0.0
    c0 = int(min(max(left, 0.0), width - 1.0))
    c1 = int(min(max(left + step, 0.0), width - 1.0))
    r0 = int(min(max(top, 0.0), height - 1.0))
    r1 = int(min(max(top + step, 0.0), height - 1.0))
    return c0, c1, r0, r1, right, down


@njit(cache=True, nogil=True, error_model="numpy")
def find_chunks(
    begin, end, x, y, a, b, d, e, c, f, bilinear, width, height, tolerance, chunk_rows, chunk_columns, across,
    keys, counts,
):  # fmt: skip
    """Find for some places the chunk that holds all their cells, and count the places of each chunk.

    Parameters
    ----------
    begin, end : int
        The places to look at.
    x, y : ndarray, shape (n,)
        Of all places.
    a, b, d, e, c, f : float
        From the map to the grid, see `Mosaic.many_elevations`.
    bilinear : bool
    width, height : int
        Cells of the grid.
    tolerance : float
        Cells within which a place lies on the grid's edge.
    chunk_rows, chunk_columns, across : int
        Cells of a chunk, and chunks side by side.
    keys : ndarray of int32, shape (n,)
        Filled with the chunk's number, `OPEN` where there is no such chunk, `OUTSIDE` off the grid.
    counts : ndarray of int, shape (chunks,)
        Added to.
    """
    per_row, per_column = 1.0 / chunk_rows, 1.0 / chunk_columns
    half, step = (0.5, 1.0) if bilinear else (0.0, 0.0)
    for i in range(begin, end):
        u, v = x[i] - c, y[i] - f
        column, row = a * u + b * v, d * u + e * v
        if not (-tolerance <= column <= width + tolerance and -tolerance <= row <= height + tolerance):
            keys[i] = OUTSIDE
            continue
        left, top = np.floor(column - half), np.floor(row - half)
        c0, r0 = int(min(max(left, 0.0), width - 1.0)), int(min(max(top, 0.0), height - 1.0))
        c1, r1 = int(min(max(left + step, 0.0), width - 1.0)), int(min(max(top + step, 0.0), height - 1.0))
        # a half keeps the quotient off whole numbers, where rounding would tell
        down, right = int((r0 + 0.5) * per_row), int((c0 + 0.5) * per_column)
        if r1 < (down + 1) * chunk_rows and c1 < (right + 1) * chunk_columns:
            key = down * across + right
            keys[i] = key
            counts[key] += 1
        else:
            keys[i] = OPEN


@njit(cache=True, nogil=True, error_model="numpy")
def sort_by_chunk(begin, end, keys, free, order):
    """Put the numbers of some places into the order of their chunks.

    Parameters
    ----------
    begin, end : int
        The places to look at.
    keys : ndarray of int32, shape (n,)
    free : ndarray of int, shape (chunks,)
        Where the next of each chunk goes; moved on.
    order : ndarray of int32
        Filled.
    """
    for i in range(begin, end):
        key = keys[i]
        if key >= 0:
            order[free[key]] = i
            free[key] += 1


@njit(cache=True, nogil=True, error_model="numpy")
def cells_at(cells, mask, first_row, first_column, columns, rows, nodata, impossible, scale, offset, out):
    """Fill `out` with the elevations of single cells; see `interpolate`."""
    for i in range(columns.size):
        row, column = rows[i] - first_row, columns[i] - first_column
        value = np.float64(cells[row, column])
        if not abs(value) < impossible or value == nodata or (mask.shape[0] > 0 and mask[row, column] == 0):
            out[i] = np.nan
        else:
            out[i] = value * scale + offset if scale != 1.0 or offset != 0.0 else value


@njit(cache=True, nogil=True, error_model="numpy")
def interpolate(
    cells, mask, first_row, first_column, here, x, y, a, b, d, e, c, f, bilinear, width, height, tolerance,
    nodata, impossible, scale, offset, out,
):  # fmt: skip
    """Interpolate at places whose cells lie in one piece of a raster.

    Parameters
    ----------
    cells, mask : ndarray, shape (rows, columns)
        As read; no mask where it has no rows.
    first_row, first_column : int
        In the grid, of the first of them.
    here : ndarray of int, shape (k,)
        Numbers of the places.
    x, y, a, b, d, e, c, f, bilinear, width, height
        See `find_chunks`.
    tolerance : float
        Parts of a cell that are rounding.
    nodata : float
        Value of gaps; NaN where there is none.
    impossible : float
        Values not below it in size are gaps.
    scale, offset : float
        From values to elevations.
    out : ndarray
        Filled at `here`.
    """
    scaled = scale != 1.0 or offset != 0.0
    masked = mask.shape[0] > 0
    corner, gap = np.empty(4), np.zeros(4, dtype=np.bool_)
    for p in here:
        c0, c1, r0, r1, u, v = _cell(x[p], y[p], a, b, d, e, c, f, bilinear, width, height)
        c0, c1, r0, r1 = c0 - first_column, c1 - first_column, r0 - first_row, r1 - first_row
        n, m = np.float64(cells[r0, c0]), np.float64(cells[r0, c1])
        o, q = np.float64(cells[r1, c0]), np.float64(cells[r1, c1])
        known = abs(n) < impossible and abs(m) < impossible and abs(o) < impossible and abs(q) < impossible
        known = known and n != nodata and m != nodata and o != nodata and q != nodata
        if known and not masked and not scaled:  # as nearly all are
            upper, lower = n + u * (m - n), o + u * (q - o)
            out[p] = upper + v * (lower - upper)
            continue
        gaps = False
        for k in range(4):
            i, j = r0 if k < 2 else r1, c0 if k % 2 == 0 else c1
            value = np.float64(cells[i, j])
            gap[k] = not abs(value) < impossible or value == nodata or (masked and mask[i, j] == 0)
            gaps |= gap[k]
            corner[k] = value * scale + offset if scaled else value
        if not gaps:
            upper = corner[0] + u * (corner[1] - corner[0])
            lower = corner[2] + u * (corner[3] - corner[2])
            out[p] = upper + v * (lower - upper)
            continue
        u = 0.0 if u < tolerance else (1.0 if u > 1.0 - tolerance else u)
        v = 0.0 if v < tolerance else (1.0 if v > 1.0 - tolerance else v)
        total = 0.0
        for k in range(4):
            weight = (1.0 - u if k % 2 == 0 else u) * (1.0 - v if k < 2 else v)
            if weight > 0.0:
                total += np.nan if gap[k] else weight * corner[k]
        out[p] = total
