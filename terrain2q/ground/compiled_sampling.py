"""Sampling of many points, compiled: laying them along lines, finding their blocks, interpolating.

In loops over numbers what :mod:`~terrain2q.ground.terrain` and :mod:`~terrain2q.ground.tiles` say in arrays,
with the same operations in the same order; the tests hold the two to each other to the last bit.
"""

from __future__ import annotations

import numpy as np
from numba import njit

OPEN, OUTSIDE = -1, -2
"""In place of a chunk's number: the four cells do not lie in one chunk; the place is off the grid."""

MARGIN = 1e-6
"""Cells that the ends of a run keep from a chunk's edge, as rounding may move places between them."""


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


@njit(cache=True, error_model="numpy")
def _chunk(
    x, y, a, b, d, e, c, f, bilinear, width, height, tolerance, chunk_rows, chunk_columns, across, margin
):
    """Return the number of the chunk that holds all cells of a place and of those within a margin of it."""
    u, v = x - c, y - f
    column, row = a * u + b * v, d * u + e * v
    if not (-tolerance <= column <= width + tolerance and -tolerance <= row <= height + tolerance):
        return OUTSIDE
    half, step = (0.5, 1.0) if bilinear else (0.0, 0.0)
    c0 = int(min(max(np.floor(column - half - margin), 0.0), width - 1.0))
    c1 = int(min(max(np.floor(column - half + margin) + step, 0.0), width - 1.0))
    r0 = int(min(max(np.floor(row - half - margin), 0.0), height - 1.0))
    r1 = int(min(max(np.floor(row - half + margin) + step, 0.0), height - 1.0))
    down, right = r0 // chunk_rows, c0 // chunk_columns
    if r1 < (down + 1) * chunk_rows and c1 < (right + 1) * chunk_columns:
        return down * across + right
    return OPEN


@njit(cache=True, nogil=True, error_model="numpy")
def find_runs(
    begin, end, straight, x, y, a, b, d, e, c, f, bilinear, width, height, tolerance, chunk_rows,
    chunk_columns, across, keys, starts, ends,
):  # fmt: skip
    """Find runs of places whose cells all lie in one chunk.

    Parameters
    ----------
    begin, end : int
        The straight pieces to look at.
    straight : ndarray of int, shape (pieces,)
        The first place of each; they go on to the next one's, the last to the end. The places of a piece lie
        in order on a straight line, so that between two in a chunk all are in it.
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
    keys, starts, ends : ndarray of int32
        Filled with the chunk's number (`OPEN` where there is no such chunk, `OUTSIDE` off the grid) and the
        places of each run; as long as there are places.

    Returns
    -------
    int
        How many runs there are.
    """
    count = 0
    for piece in range(begin, end):
        i = straight[piece]
        stop = straight[piece + 1] if piece + 1 < straight.size else x.size
        while i < stop:
            last = i
            key = OPEN
            if stop - i > 1:
                key = _chunk(
                    x[i], y[i], a, b, d, e, c, f, bilinear, width, height, tolerance, chunk_rows,
                    chunk_columns, across, MARGIN,
                )  # fmt: skip
            if key >= 0:
                beyond = stop
                while beyond - last > 1:
                    middle = beyond - 1 if beyond == stop else (last + beyond) // 2
                    if key == _chunk(
                        x[middle], y[middle], a, b, d, e, c, f, bilinear, width, height, tolerance,
                        chunk_rows, chunk_columns, across, MARGIN,
                    ):  # fmt: skip
                        last = middle
                    else:
                        beyond = middle
            else:
                key = _chunk(
                    x[i], y[i], a, b, d, e, c, f, bilinear, width, height, tolerance, chunk_rows,
                    chunk_columns, across, 0.0,
                )  # fmt: skip
            if count and keys[count - 1] == key and ends[count - 1] == i:
                ends[count - 1] = last + 1
            else:
                keys[count], starts[count], ends[count] = key, i, last + 1
                count += 1
            i = last + 1
    return count


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
    cells, mask, first_row, first_column, starts, ends, x, y, a, b, d, e, c, f, bilinear, width, height,
    tolerance, nodata, impossible, scale, offset, out,
):  # fmt: skip
    """Interpolate at places whose cells lie in one piece of a raster.

    Parameters
    ----------
    cells, mask : ndarray, shape (rows, columns)
        As read; no mask where it has no rows.
    first_row, first_column : int
        In the grid, of the first of them.
    starts, ends : ndarray of int, shape (k,)
        Runs of places.
    x, y, a, b, d, e, c, f, bilinear, width, height
        See `find_runs`.
    tolerance : float
        Parts of a cell that are rounding.
    nodata : float
        Value of gaps; NaN where there is none.
    impossible : float
        Values not below it in size are gaps.
    scale, offset : float
        From values to elevations.
    out : ndarray
        Filled at the places.
    """
    scaled = scale != 1.0 or offset != 0.0
    masked = mask.shape[0] > 0
    plain = not masked and not scaled
    # all cells lie in the piece: away from the grid's edge none is held there
    inner = first_row > 0 and first_row + cells.shape[0] < height
    inner = inner and first_column > 0 and first_column + cells.shape[1] < width
    corner, gap = np.empty(4), np.zeros(4, dtype=np.bool_)
    for run in range(starts.size):
        for p in range(starts[run], ends[run]):
            if inner and bilinear:
                right, below = x[p] - c, y[p] - f
                u, v = a * right + b * below - 0.5, d * right + e * below - 0.5
                left, top = np.floor(u), np.floor(v)
                u, v = u - left, v - top
                c0, r0 = np.uint64(int(left) - first_column), np.uint64(int(top) - first_row)
                c1, r1 = c0 + np.uint64(1), r0 + np.uint64(1)
            else:
                at = _cell(x[p], y[p], a, b, d, e, c, f, bilinear, width, height)
                c0, c1 = np.uint64(at[0] - first_column), np.uint64(at[1] - first_column)
                r0, r1 = np.uint64(at[2] - first_row), np.uint64(at[3] - first_row)
                u, v = at[4], at[5]
            n, m = np.float64(cells[r0, c0]), np.float64(cells[r0, c1])
            o, q = np.float64(cells[r1, c0]), np.float64(cells[r1, c1])
            known = abs(n) + abs(m) + abs(o) + abs(q) < impossible  # and not NaN
            known = known and n != nodata and m != nodata and o != nodata and q != nodata
            if known and plain:  # as nearly all are
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
