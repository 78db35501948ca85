"""Flow area, wetted perimeter and top width of a profile, exact in stage, and what water can reach.

Between two neighbouring elevations of a profile the wetted part of every ground segment changes
linearly with stage: its area is quadratic, its perimeter and width are linear. Every stage is
therefore answered from the segments themselves, without stage steps.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from terrain2q.errors import ProfileError

Floats = NDArray[np.float64]

_BLOCK = 30_000
"""Stages times segments that are worked on at once: the temporaries then stay in the processor's cache."""


def check_profile(stations: ArrayLike, elevations: ArrayLike) -> tuple[Floats, Floats]:
    """Return stations and elevations as arrays, or say what is wrong with them.

    Parameters
    ----------
    stations, elevations : array_like, shape (m,)
        Left to right; two equal stations make a vertical face.

    Raises
    ------
    ProfileError
        ``profile-too-short``, ``number-not-finite`` or ``station-decreases``, with the point.
    """
    x = np.array(stations, dtype=float)
    z = np.array(elevations, dtype=float)
    if x.ndim != 1 or x.shape != z.shape:
        raise ProfileError(
            "profile-too-short",
            f"stations have shape {x.shape} and elevations {z.shape}",
            where="profile",
            fix="give two lists of one length",
        )
    if x.size < 2:
        raise ProfileError("profile-too-short", f"the profile has {x.size} point(s)", where="profile")
    bad = np.flatnonzero(~(np.isfinite(x) & np.isfinite(z)))
    if bad.size:
        i = int(bad[0])
        raise ProfileError(
            "number-not-finite",
            f"station {x[i]}, elevation {z[i]}",
            where=f"point {i + 1} of {x.size}",
        )
    steps = np.diff(x)
    bad = np.flatnonzero(steps < 0)
    if bad.size:
        i = int(bad[0])
        raise ProfileError(
            "station-decreases",
            f"station {x[i]:g} is followed by {x[i + 1]:g}",
            where=f"point {i + 2} of {x.size}",
        )
    if x[-1] == x[0]:
        raise ProfileError("profile-too-short", f"all points are at station {x[0]:g}", where="profile")
    return x, z


def cut_at(x: Floats, z: Floats, limits: Floats) -> tuple[Floats, Floats]:
    """Return the profile with a point at every limit, on the straight ground between its points."""
    limits = limits[(limits > x[0]) & (limits < x[-1])]
    limits = limits[~np.isin(limits, x)]
    if not limits.size:
        return x, z
    where = np.searchsorted(x, limits)
    left, right = where - 1, where
    share = (limits - x[left]) / (x[right] - x[left])
    ground = z[left] + share * (z[right] - z[left])
    return np.insert(x, where, limits), np.insert(z, where, ground)


def without_outer_faces(x: Floats, z: Floats) -> tuple[Floats, Floats]:
    """Return the profile without vertical faces at its ends whose water would stand outside it."""
    first, last = 0, x.size - 1
    while x[first + 1] == x[first] and z[first + 1] >= z[first]:
        first += 1
    while x[last - 1] == x[last] and z[last - 1] >= z[last]:
        last -= 1
    return x[first : last + 1], z[first : last + 1]


def snapped(limits: Floats, x: Floats) -> Floats:
    """Return limits, each moved to the nearest station of the profile where only rounding parts the two."""
    near = 1e-12 * max(1.0, float(np.abs(x).max()))
    after = np.clip(np.searchsorted(x, limits), 1, x.size - 1)
    nearest = np.where(limits - x[after - 1] < x[after] - limits, x[after - 1], x[after])
    return np.where(np.abs(nearest - limits) <= near, nearest, limits)


def foot_of(z: Floats, start: int) -> int:
    """Return the point where water that runs downhill from point `start` comes to rest."""
    at = start
    while True:
        left = right = at
        # over level ground to where it falls
        while left > 0 and z[left - 1] == z[at]:
            left -= 1
        while right < z.size - 1 and z[right + 1] == z[at]:
            right += 1
        beside = [i for i in (left - 1, right + 1) if 0 <= i < z.size]
        step = min(beside, key=lambda i: z[i], default=at)
        if z[step] >= z[at]:
            return at
        at = step


def segment_subareas(x: Floats, z: Floats, starts: Floats) -> NDArray[np.intp]:
    """Return the subarea of each ground segment of a profile cut at the subareas' limits.

    A vertical face at a limit is the bank of the deeper side: one that rises to the right has its
    water on the left, and the other way round.

    Parameters
    ----------
    x, z : ndarray, shape (m,)
        The cut profile.
    starts : ndarray, shape (k,)
        First stations of the subareas, increasing.

    Returns
    -------
    ndarray of int, shape (m - 1,)
    """
    middle = 0.5 * (x[:-1] + x[1:])
    owner = np.searchsorted(starts, middle, side="right") - 1
    rises = (x[1:] == x[:-1]) & (z[1:] > z[:-1])
    owner[rises] = np.searchsorted(starts, middle[rises], side="left") - 1
    return np.clip(owner, 0, starts.size - 1)


def reach(z: Floats, sources: NDArray[np.intp]) -> Floats:
    """Return for each segment the stage above which water that spreads from `sources` gets to it.

    It is the highest ground between the segment's near end and the source; the least of these where
    there are several sources.

    Parameters
    ----------
    z : ndarray, shape (m,)
        Elevations of the profile's points.
    sources : ndarray of int, shape (k,)
        Points from which water spreads.

    Returns
    -------
    ndarray, shape (m - 1,)
    """
    best = np.full(z.size - 1, np.inf)
    for source in sources:
        rightward = np.maximum.accumulate(z[source:])
        leftward = np.maximum.accumulate(z[source::-1])
        np.minimum(best[source:], rightward[:-1], out=best[source:])
        np.minimum(best[:source], leftward[:-1][::-1], out=best[:source])
    return best


@dataclass(frozen=True)
class Pool:
    """A stretch of a profile under one level: points `first` to `last` bound it from outside."""

    first: int
    last: int
    start: float
    end: float


class Ground:
    """A profile cut at the limits of its subareas, ready for questions about stage.

    Parameters
    ----------
    x, z : ndarray, shape (m,)
        Stations and elevations, with a point at each limit (:func:`cut_at`).
    owner : ndarray of int, shape (m - 1,)
        Subarea of each segment.
    count : int
        Number of subareas.
    sources : ndarray of int or None
        Points from which water spreads; None lets water stand wherever the ground is low.
    """

    def __init__(self, x: Floats, z: Floats, owner: NDArray[np.intp], count: int, sources) -> None:
        self.x, self.z, self.owner, self.count, self.sources = x, z, owner, count, sources
        self.low = np.minimum(z[:-1], z[1:])
        self.rise = np.abs(np.diff(z))
        self.width = np.diff(x)
        with np.errstate(divide="ignore", over="ignore"):
            # A flat segment is wet at once: a rate this large makes min(depth * rate, 1) do that
            # without a special case, and stays finite when multiplied by any depth.
            self.rate = np.minimum(1.0 / self.rise, 1e300)
        self.flat = self.rise == 0
        self.length = np.hypot(self.width, self.rise)
        self.threshold = self.low if sources is None else reach(z, sources)
        member = np.zeros((owner.size, count))
        member[np.arange(owner.size), owner] = 1.0
        self._width = member * self.width[:, None]
        self._length = member * self.length[:, None]
        self._wedge = member * (0.5 * self.width * self.rise)[:, None]

    @property
    def breaks(self) -> Floats:
        """All stages at which the wetted geometry changes its law: the elevations, sorted, once each."""
        return np.unique(self.z)

    def wetted(self, stage: Floats, *, passed: bool = False) -> tuple[Floats, Floats, Floats]:
        """Return flow area, wetted perimeter and top width by subarea.

        Parameters
        ----------
        stage : ndarray, shape (k,)
        passed : bool
            At a stage equal to an elevation: False before level ground there is wet and before water
            passes a ridge of that height, True just after.

        Returns
        -------
        area, perimeter, width : ndarray, shape (k, number of subareas)
        """
        step = max(1, _BLOCK // self.low.size)
        parts = [self._wetted(stage[i : i + step], slice(None)) for i in range(0, max(stage.size, 1), step)]
        before = tuple(np.concatenate(p) for p in zip(*parts, strict=True)) if len(parts) > 1 else parts[0]
        return self.just_after(stage, before) if passed else before

    def just_after(
        self, stage: Floats, before: tuple[Floats, Floats, Floats]
    ) -> tuple[Floats, Floats, Floats]:
        """Return the same with what gets wet at the stage itself: level ground and ground behind a ridge."""
        at, segment = np.nonzero(stage[:, None] == self.threshold)
        depth = stage[at] - self.low[segment]
        share = np.where(self.flat[segment], 1.0, np.minimum(depth * self.rate[segment], 1.0))
        owner, width = self.owner[segment], self.width[segment]
        area, perimeter, top = (v.copy() for v in before)
        np.add.at(area, (at, owner), share * width * (depth - 0.5 * share * self.rise[segment]))
        np.add.at(perimeter, (at, owner), share * self.length[segment])
        np.add.at(top, (at, owner), share * width)
        return area, perimeter, top

    def wetted_between(self, first: int, last: int, stage: float, *, passed: bool = False):
        """Return the same by subarea, shape (number of subareas,), of points `first` to `last` alone."""
        part = slice(first, last)
        area, perimeter, width = (v[0] for v in self._wetted(np.array([stage]), part, reached=True))
        if passed:
            level = self.flat[part] & (self.low[part] == stage)
            perimeter, width = perimeter + level @ self._length[part], width + level @ self._width[part]
        return area, perimeter, width

    def _wetted(self, stage: Floats, part: slice, *, reached: bool = False):
        """Area, perimeter and width by subarea; `reached` says that water is everywhere below the stage."""
        depth = stage[:, None] - self.low[part]
        np.maximum(depth, 0.0, out=depth)
        # share of each segment's length that is under water
        share = depth * self.rate[part]
        np.minimum(share, 1.0, out=share)
        if not reached and self.threshold is not self.low:
            share[stage[:, None] <= self.threshold] = 0.0
        depth *= share
        area = depth @ self._width[part]
        perimeter = share @ self._length[part]
        width = share @ self._width[part]
        share *= share
        area -= share @ self._wedge[part]
        return area, perimeter, width

    def pool(self, source: int, stage: float, *, passed: bool = False) -> Pool:
        """Return the stretch about point `source` that one level at `stage` covers."""
        z = self.z
        dry = z > stage if passed else z >= stage
        right = np.flatnonzero(dry[source:])
        left = np.flatnonzero(dry[source::-1])
        last = source + int(right[0]) if right.size else z.size - 1
        first = source - int(left[0]) if left.size else 0
        return Pool(first, last, self.edge(first, first + 1, stage), self.edge(last, last - 1, stage))

    def edge(self, dry: int, wet: int, stage: float) -> float:
        """Return the station at which the water's edge lies between a dry point and its wet neighbour."""
        x, z = self.x, self.z
        if not 0 <= wet < z.size or z[dry] <= stage or z[wet] >= stage:
            return float(x[dry])
        return float(x[dry] + (z[dry] - stage) / (z[dry] - z[wet]) * (x[wet] - x[dry]))

    def pools(self, stage: float, *, passed: bool = False) -> list[Pool]:
        """Return every separate stretch of water at `stage`, from left to right."""
        if self.sources is None:
            wet = self.z <= stage if passed else self.z < stage
            edges = np.flatnonzero(np.diff(wet.astype(np.int8), prepend=0) == 1)
            found = [self.pool(int(i), stage, passed=passed) for i in edges]
        else:
            found = [
                self.pool(int(i), stage, passed=passed)
                for i in self.sources
                if self.z[i] < stage or (passed and self.z[i] == stage)
            ]
        unique = {(p.first, p.last): p for p in found}
        return [unique[key] for key in sorted(unique)]

    def part(self, first: int, last: int, sources: NDArray[np.intp]) -> Ground:
        """Return points `first` to `last` as a profile of its own, with the same subareas."""
        return Ground(
            self.x[first : last + 1], self.z[first : last + 1], self.owner[first:last], self.count, sources
        )
