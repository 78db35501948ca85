"""What a reviewer would write about a section's roughness and division, from numbers alone.

Each function answers with the facts of one remark, or with nothing. The codes are those of the
findings the remarks become.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import ArrayLike, NDArray

from terrain2q.hydraulics.roughness import JARRETT_ERROR, JARRETT_RADII, JARRETT_SLOPES, jarrett_law
from terrain2q.units import FOOT, unit_system

Floats = NDArray[np.float64]

N_OUTSIDE_RANGE = "n-outside-range"
N_LOW_FOR_SLOPE = "n-low-for-slope"
SHELF_UNDIVIDED = "shelf-undivided"
SUBAREA_SLIVER = "subarea-sliver"

SHELF_WIDTH = 5.0
"""A shelf wider than this many times its depth is divided off (Davidian 1984, from memory)."""

SHELF_DROP = 2.0
"""Beyond a shelf's edge the water is at least this many times as deep (Davidian 1984, from memory)."""

_EDGE = 0.2
"""The depth grows that much within this share of the shelf's width: an edge, and no even slope (ours)."""

_TELLING = 0.1
"""A shelf narrower than this share of its stretch of water is not worth a word (ours)."""

SLIVER_SHARE = 1 / 200
SLIVER_POINTS = 2
"""A sliver is narrower than this share of the section and holds fewer points (common practice)."""


@dataclass(frozen=True)
class OutsideRange:
    """A roughness outside the published range of its class."""

    n: float
    low: float
    high: float


def n_outside_range(n: float, low: float, high: float) -> OutsideRange | None:
    """Return the remark where a roughness lies outside the published range of its class.

    Parameters
    ----------
    n, low, high : float
        A limit that is not a number does not bound.

    Examples
    --------
    >>> n_outside_range(0.06, 0.025, 0.05)
    OutsideRange(n=0.06, low=0.025, high=0.05)
    >>> n_outside_range(0.05, 0.025, 0.05) is None
    True
    """
    # a limit printed in a table and read back is still the limit
    near = 1e-9 * abs(n)
    return OutsideRange(n, low, high) if n < low - near or n > high + near else None


@dataclass(frozen=True)
class LowForSlope:
    """A roughness far below what steep streams show.

    Attributes
    ----------
    n, estimate, limit : float
        The roughness, Jarrett's estimate, and the least n that passes without a remark.
    """

    n: float
    estimate: float
    limit: float


def n_low_for_slope(n: float, slope: float, radius: float, units: str = "si") -> LowForSlope | None:
    """Return the remark where the n of a steep channel lies far below Jarrett's estimate.

    Parameters
    ----------
    n : float
        Of the channel.
    slope : float
    radius : float
        Hydraulic radius of the channel [L].
    units : str
        ``si`` or ``us``.

    Returns
    -------
    LowForSlope or None
        None on slopes below 0.002, where the estimate does not apply, and where the channel is dry.

    Notes
    -----
    Far below is two standard errors of 28 % (Jarrett 1984, from memory): n < 0.44 of the estimate. Steeper
    or shallower than what the estimate was made from, it is taken at the nearest limit; deeper, it is
    extended. Each way errs towards a lower estimate, and so towards silence.

    Examples
    --------
    A smooth channel on a slope of 3 %, 0.6 m deep:

    >>> round(n_low_for_slope(0.03, 0.03, 0.6).estimate, 3)
    0.092
    """
    if not (slope >= JARRETT_SLOPES[0] and radius > 0):
        return None
    limit = float(lowest_n_for_slope(slope, radius * unit_system(units).length))
    return LowForSlope(n, limit / (1.0 - 2.0 * JARRETT_ERROR), limit) if n < limit else None


def lowest_n_for_slope(slope: ArrayLike, radius: ArrayLike) -> Floats:
    """Return the least n that passes :func:`n_low_for_slope` without a remark.

    Parameters
    ----------
    slope : array_like
    radius : array_like
        Hydraulic radius of the channel, m; broadcast with `slope`.

    Returns
    -------
    ndarray
        NaN on slopes below 0.002, and where the channel is dry.
    """
    slope, radius = np.broadcast_arrays(np.asarray(slope, dtype=float), np.asarray(radius, dtype=float))
    deepest = JARRETT_RADII[1]
    applies = (slope >= JARRETT_SLOPES[0]) & (radius > 0)
    radius = np.where(applies, radius, 1.0)
    feet = np.clip(radius, JARRETT_RADII[0], deepest) / FOOT
    estimate = jarrett_law(np.minimum(slope, JARRETT_SLOPES[1]), feet)
    estimate = estimate * (np.maximum(radius, deepest) / deepest) ** -0.16
    return np.where(applies, (1.0 - 2.0 * JARRETT_ERROR) * estimate, np.nan)


@dataclass(frozen=True)
class Shelf:
    """A bench that shares a subarea with deeper water.

    Attributes
    ----------
    start, end : float
        Its stations: the water's edge or the subarea's limit on one side, its edge to the deep on the other.
    width, depth : float
        `depth` is that at its edge to the deep.
    side : str
        ``left`` or ``right`` of the deeper water.
    """

    start: float
    end: float
    width: float
    depth: float
    side: str


def undivided_shelves(stations: ArrayLike, elevations: ArrayLike, stage: float) -> list[Shelf]:
    """Return the shelves within the ground of one subarea that should be subareas of their own.

    Parameters
    ----------
    stations, elevations : array_like, shape (m,)
        Ground of one subarea, with a point at each of its limits.
    stage : float

    Returns
    -------
    list of Shelf
        From left to right.

    Notes
    -----
    Davidian (1984), from memory: divide where a bench is at least five times as wide as it is deep, or the
    main water at least twice as deep as at the edge of the bench. Here both must hold, and the depth must
    double within a fifth of the bench's width: on an even side slope, however flat, there is no edge
    to divide at. A shelf counts from a tenth of the width of its stretch of water.
    """
    x, z = np.asarray(stations, dtype=float), np.asarray(elevations, dtype=float)
    found = []
    for wet_x, depth in _stretches(x, stage - z):
        left = _shelf(wet_x, depth)
        right = _shelf(-wet_x[::-1], depth[::-1])
        if left is not None:
            width, deep = left
            found.append(Shelf(float(wet_x[0]), float(wet_x[0] + width), width, deep, "left"))
        if right is not None:
            width, deep = right
            found.append(Shelf(float(wet_x[-1] - width), float(wet_x[-1]), width, deep, "right"))
    return found


def _stretches(x: Floats, depth: Floats):
    """Yield stations and depths of every stretch under water, with points at the water's edges."""
    cross = np.flatnonzero(depth[:-1] * depth[1:] < 0)
    share = depth[cross] / (depth[cross] - depth[cross + 1])
    x = np.insert(x, cross + 1, x[cross] + share * (x[cross + 1] - x[cross]))
    depth = np.insert(depth, cross + 1, 0.0)
    wet = np.append(False, (depth[:-1] > 0) | (depth[1:] > 0))
    wet = np.append(wet, False).astype(np.int8)
    starts, ends = np.flatnonzero(np.diff(wet) == 1), np.flatnonzero(np.diff(wet) == -1)
    for first, last in zip(starts, ends, strict=True):
        yield x[first : last + 1], np.maximum(depth[first : last + 1], 0.0)


def _shelf(x: Floats, depth: Floats) -> tuple[float, float] | None:
    """Return width and depth of the most shelf-like ground that begins at the first point."""
    best = None
    whole = x[-1] - x[0]
    deepest = np.maximum.accumulate(depth)
    for k in np.flatnonzero((depth == deepest) & (depth > 0)):
        width, edge = float(x[k] - x[0]), float(depth[k])
        if width < SHELF_WIDTH * edge or width < _TELLING * whole:
            continue
        beyond = np.flatnonzero(depth[k:] >= SHELF_DROP * edge)
        if not beyond.size:
            continue
        j = k + int(beyond[0])
        rise = depth[j] - depth[j - 1]
        reached = x[j] - (depth[j] - SHELF_DROP * edge) / rise * (x[j] - x[j - 1])
        if reached - x[k] <= _EDGE * width and (best is None or width / edge > best[0] / best[1]):
            best = width, edge
    return best


@dataclass(frozen=True)
class Sliver:
    """A subarea too narrow to mean anything.

    Attributes
    ----------
    subarea : int
    width, share : float
        Its width, and that as a share of the section's.
    points : int
        Points of the profile between its limits.
    """

    subarea: int
    width: float
    share: float
    points: int


def sliver_subareas(limits: ArrayLike, stations: ArrayLike) -> list[Sliver]:
    """Return the subareas of a sliver's width.

    Parameters
    ----------
    limits : array_like, shape (k + 1,)
        Stations that bound the k subareas, increasing.
    stations : array_like, shape (m,)
        Of the profile's points.

    Notes
    -----
    Narrower than 1/200 of the section and with fewer than two points of the ground inside (common practice).
    Such pieces come from edges of the land cover that do not quite match; dividing at them adds conveyance
    that is not there.
    """
    edges, x = np.asarray(limits, dtype=float), np.asarray(stations, dtype=float)
    whole = edges[-1] - edges[0]
    found = []
    for i, (start, end) in enumerate(pairwise(edges)):
        inside = int(((x > start) & (x < end)).sum())
        if end - start < SLIVER_SHARE * whole and inside < SLIVER_POINTS:
            found.append(Sliver(i, float(end - start), float((end - start) / whole), inside))
    return found
