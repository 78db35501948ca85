"""Lines as ISO WKB, many at once, compiled: bytes and where each begins, as Arrow holds them.

Little-endian, as the headers say; the numbers are written as this machine holds them, and machines on which
Python runs today are little-endian.
"""

from __future__ import annotations

import numpy as np
from numba import njit

_LINE, _LINE_ZM, _MULTILINE = 2, 3002, 5


@njit(cache=True)
def _whole(out, at, value):
    for k in range(4):
        out[at + k] = (value >> (8 * k)) & 255
    return at + 4


@njit(cache=True)
def _head(out, at, kind, count):
    out[at] = 1
    return _whole(out, _whole(out, at + 1, kind), count)


@njit(cache=True, nogil=True)
def profile_lines(bounds, columns):
    """Return lines with z and m.

    Parameters
    ----------
    bounds : ndarray of int, shape (n + 1,)
        Where each line's points begin.
    columns : ndarray, shape (points, 4)
        x, y, z and m.

    Returns
    -------
    offsets : ndarray of int64, shape (n + 1,)
    data : ndarray of uint8
    """
    n = bounds.size - 1
    offsets = np.zeros(n + 1, dtype=np.int64)
    for i in range(n):
        offsets[i + 1] = offsets[i] + 9 + 32 * (bounds[i + 1] - bounds[i])
    out = np.empty(offsets[n], dtype=np.uint8)
    raw = columns.ravel().view(np.uint8)
    for i in range(n):
        at = _head(out, offsets[i], _LINE_ZM, bounds[i + 1] - bounds[i])
        out[at : offsets[i + 1]] = raw[32 * bounds[i] : 32 * bounds[i + 1]]
    return offsets, out


@njit(cache=True)
def _between(station, x, y, start, end, first, last, places):
    """Fill `places` with the points of a profile from one station to another."""
    places[0, 0], places[0, 1] = _place(station, x, y, start)
    for i in range(first, last):
        places[1 + i - first, 0], places[1 + i - first, 1] = x[i], y[i]
    places[1 + last - first, 0], places[1 + last - first, 1] = _place(station, x, y, end)


@njit(cache=True)
def _place(station, x, y, at):
    if at <= station[0]:
        return x[0], y[0]
    if at >= station[-1]:
        return x[-1], y[-1]
    k = np.searchsorted(station, at, side="right") - 1
    run = at - station[k]
    step = station[k + 1] - station[k]
    return (x[k + 1] - x[k]) / step * run + x[k], (y[k + 1] - y[k]) / step * run + y[k]


@njit(cache=True, nogil=True)
def stretches(bounds, station, x, y, owner, start, end, group_bounds, multi):
    """Return stretches of profiles as lines, or groups of them as lines of several parts.

    Parameters
    ----------
    bounds : ndarray of int, shape (profiles + 1,)
        Where each profile's points begin in `station`, `x` and `y`.
    owner : ndarray of int, shape (n,)
        Profile of each stretch.
    start, end : ndarray, shape (n,)
        Stations, start < end.
    group_bounds : ndarray of int, shape (groups + 1,)
        Where each group's stretches begin; a group has one where not `multi`.
    multi : bool
        Whether a group is a multi-part line.

    Returns
    -------
    offsets : ndarray of int64, shape (groups + 1,)
    data : ndarray of uint8
    """
    n, groups = owner.size, group_bounds.size - 1
    inner = np.empty((n, 2), dtype=np.int64)
    points = 0
    offsets = np.zeros(groups + 1, dtype=np.int64)
    for g in range(groups):
        size = 9 if multi else 0
        for i in range(group_bounds[g], group_bounds[g + 1]):
            here = station[bounds[owner[i]] : bounds[owner[i] + 1]]
            inner[i, 0] = np.searchsorted(here, start[i], side="right")
            inner[i, 1] = max(np.searchsorted(here, end[i], side="left"), inner[i, 0])
            points = max(points, inner[i, 1] - inner[i, 0] + 2)
            size += 9 + 16 * (inner[i, 1] - inner[i, 0] + 2)
        offsets[g + 1] = offsets[g] + size
    out = np.empty(offsets[groups], dtype=np.uint8)
    places = np.empty((points, 2))
    raw = places.ravel().view(np.uint8)
    for g in range(groups):
        at = offsets[g]
        if multi:
            at = _head(out, at, _MULTILINE, group_bounds[g + 1] - group_bounds[g])
        for i in range(group_bounds[g], group_bounds[g + 1]):
            a, b = bounds[owner[i]], bounds[owner[i] + 1]
            count = inner[i, 1] - inner[i, 0] + 2
            _between(station[a:b], x[a:b], y[a:b], start[i], end[i], inner[i, 0], inner[i, 1], places)
            at = _head(out, at, _LINE, count)
            out[at : at + 16 * count] = raw[: 16 * count]
            at += 16 * count
    return offsets, out
