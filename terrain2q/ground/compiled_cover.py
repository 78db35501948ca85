"""Stations of places on many profiles, compiled; `_Segments` in arrays is the definition."""

from __future__ import annotations

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def map_distances(bounds, xy):
    """Return the map distance of each point from the first of its profile.

    Parameters
    ----------
    bounds : ndarray of int, shape (profiles + 1,)
        Where each profile's points begin.
    xy : ndarray, shape (points, 2)
    """
    distance = np.zeros(xy.shape[0])
    for p in range(bounds.size - 1):
        for i in range(bounds[p] + 1, bounds[p + 1]):
            distance[i] = distance[i - 1] + np.hypot(xy[i, 0] - xy[i - 1, 0], xy[i, 1] - xy[i - 1, 1])
    return distance


@njit(cache=True, nogil=True)
def stations_between(bounds, distance, station, profile, first, last, share):
    """Return the stations of places between two points of a profile each.

    Parameters
    ----------
    bounds : ndarray of int, shape (profiles + 1,)
    distance, station : ndarray, shape (points,)
    profile, first, last : ndarray of int, shape (n,)
        The profile, and the two points.
    share : ndarray, shape (n,)
        How far on the map from the one to the other.
    """
    out = np.empty(profile.size)
    for k in range(profile.size):
        a, b = bounds[profile[k]], bounds[profile[k] + 1]
        begin, end = distance[first[k]], distance[last[k]]
        at = begin + share[k] * (end - begin) if share[k] < 1.0 else end
        if at >= distance[b - 1]:
            out[k] = station[b - 1]
            continue
        low, high = a, b
        while low < high:
            middle = (low + high) // 2
            if distance[middle] <= at:
                low = middle + 1
            else:
                high = middle
        j = low - 1
        run, rise = distance[j + 1] - distance[j], station[j + 1] - station[j]
        out[k] = rise / run * (at - distance[j]) + station[j]
    return out
