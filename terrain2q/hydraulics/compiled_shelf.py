"""What an undivided shelf adds to a discharge, compiled.

In loops over numbers what :func:`~terrain2q.hydraulics.review.undivided_shelves` and
:func:`terrain2q.jobs.remarks.division_gain` say in arrays, for profiles without vertical faces. It only sorts
out sections without a shelf worth a word; those with one are told by the arrays.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from terrain2q.hydraulics import review

_WIDTH, _DROP, _EDGE, _TELLING = review.SHELF_WIDTH, review.SHELF_DROP, review._EDGE, review._TELLING


@njit(cache=True, error_model="numpy")
def _height(x, z, at):
    if at <= x[0]:
        return z[0]
    if at >= x[-1]:
        return z[-1]
    k = np.searchsorted(x, at, side="right") - 1
    return (z[k + 1] - z[k]) / (x[k + 1] - x[k]) * (at - x[k]) + z[k]


@njit(cache=True, error_model="numpy")
def _shelf(x, depth, first, last, step):
    """Return how many points from the first the most shelf-like ground ends; 0 where there is none."""
    whole = abs(x[last] - x[first])
    deepest, best, found = -np.inf, 0.0, 0
    count = abs(last - first) + 1
    for k in range(count):
        p = first + step * k
        d = max(depth[p], 0.0)
        deepest = max(deepest, d)
        if not (d == deepest and d > 0.0):
            continue
        width = abs(x[p] - x[first])
        if width < _WIDTH * d or width < _TELLING * whole:
            continue
        for j in range(k + 1, count):
            q = first + step * j
            deep = max(depth[q], 0.0)
            if deep >= _DROP * d:
                before = max(depth[q - step], 0.0)
                reached = abs(x[q] - x[first]) - (deep - _DROP * d) / (deep - before) * abs(
                    x[q] - x[q - step]
                )
                if reached - width <= _EDGE * width and width / d > best:
                    best, found = width / d, k
                break
    return found


@njit(cache=True, error_model="numpy")
def _part(x, depth, first, last):
    area = perimeter = 0.0
    for i in range(first, last):
        if depth[i] >= 0.0 and depth[i + 1] >= 0.0 and (depth[i] > 0.0 or depth[i + 1] > 0.0):
            run, rise = x[i + 1] - x[i], depth[i + 1] - depth[i]
            area += run * 0.5 * (depth[i] + depth[i + 1])
            perimeter += np.hypot(run, rise)
    return area, perimeter


@njit(cache=True, error_model="numpy")
def most_gained(x, z, stage, start, end):
    """Return by what share at most the conveyance between two stations rises by dividing at a shelf's edge.

    Parameters
    ----------
    x, z : ndarray, shape (m,)
        Stations that increase, and elevations.
    stage, start, end : float
    """
    if not end > start:
        return 0.0
    first = np.searchsorted(x, start, side="right")
    last = np.searchsorted(x, end, side="left")
    m = max(last - first, 0) + 2
    at, depth = np.empty(2 * m), np.empty(2 * m)
    size = 0
    for i in range(m):
        if i == 0:
            here, height = start, _height(x, z, start)
        elif i == m - 1:
            here, height = end, _height(x, z, end)
        else:
            here, height = x[first + i - 1], z[first + i - 1]
        d = stage - height
        if size > 0 and depth[size - 1] * d < 0.0:
            before = depth[size - 1]
            at[size] = at[size - 1] + before / (before - d) * (here - at[size - 1])
            depth[size] = 0.0
            size += 1
        at[size], depth[size] = here, d
        size += 1
    area, perimeter = _part(at, depth, 0, size - 1)
    if not perimeter > 0.0:
        return 0.0
    whole = area ** (5.0 / 3.0) / perimeter ** (2.0 / 3.0)
    most = 0.0
    i = 0
    while i < size - 1:
        if not (depth[i] > 0.0 or depth[i + 1] > 0.0):
            i += 1
            continue
        j = i
        while j < size - 1 and (depth[j] > 0.0 or depth[j + 1] > 0.0):
            j += 1
        for side in range(2):
            edge = i + _shelf(at, depth, i, j, 1) if side == 0 else j - _shelf(at, depth, j, i, -1)
            if edge == (i if side == 0 else j):
                continue
            apart = 0.0
            for a, b in ((0, edge), (edge, size - 1)):
                part, around = _part(at, depth, a, b)
                if around > 0.0:
                    apart += part ** (5.0 / 3.0) / around ** (2.0 / 3.0)
            most = max(most, apart / whole - 1.0)
        i = j
    return most
