"""The path of least cost through rows of ground, compiled; `lowest_path` in arrays is the definition."""

from __future__ import annotations

import numpy as np
from numba import njit


@njit(cache=True)
def cheapest_path(cost, side_cost):
    """Return the column of the cheapest path in each row; it moves by one column at most from row to row."""
    count, places = cost.shape
    came = np.zeros((count, places), dtype=np.int8)
    total, following = cost[0].copy(), np.empty(places)
    for row in range(1, count):
        for k in range(places):
            # the left one first, then straight on, then the right one, as the first of equals is taken
            best, least = 0, total[k]
            if k > 0 and total[k - 1] + side_cost <= least:
                best, least = -1, total[k - 1] + side_cost
            if k < places - 1 and total[k + 1] + side_cost < least:
                best, least = 1, total[k + 1] + side_cost
            came[row, k] = best
            following[k] = cost[row, k] + least
        total, following = following, total
    path = np.empty(count, dtype=np.int64)
    path[count - 1] = np.argmin(total)
    for row in range(count - 1, 0, -1):
        path[row - 1] = path[row] + came[row, path[row]]
    return path
