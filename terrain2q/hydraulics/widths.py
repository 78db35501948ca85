"""Widths that pass a flow within a stage: a bench cut into the bank, an opening between walls.

Both are first passages. Discharge as a function of width has one closed form between two breaks
(widths at which the cut, or a wall, passes a point of the ground, a subarea's limit, the water's edge
or the top of a ridge); at a break it may jump. Breaks are walked from the narrowest; in each
interval the discharge is enclosed between bounds, so that the least width is found even where more
width first carries less.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.optimize import brentq

from terrain2q.errors import InputError, NoAnswerError
from terrain2q.hydraulics.divided import Roughness
from terrain2q.hydraulics.wetted import reach

if TYPE_CHECKING:
    from terrain2q.hydraulics.section import DepthRoughness, Section

Floats = NDArray[np.float64]

SIDES = ("both", "left", "right")
BENCH = "bench"
"""Label of the subareas that a bench makes."""

_NUDGE = 1e-9
"""How far beyond a jump the width is taken, as a share of the section's length."""

_SPLIT, _LEVELS = 32, 4
"""An interval in which discharge may turn is split 32-fold, four times over, before its ends alone decide."""

_LOOKED_INTO, _ZOOMED_INTO = 256, 4
"""Where no width suffices, the greatest discharge is sought inside so many intervals, closely in so many."""


@dataclass(frozen=True)
class Stretch:
    """A bench in plan.

    Attributes
    ----------
    side : str
        ``left`` or ``right``.
    start, floor_end, end : float
        Stations of the channel bank where the floor begins, of the floor's outer end, and of the top of
        the outer slope.
    """

    side: str
    start: float
    floor_end: float
    end: float


@dataclass(frozen=True)
class Bench:
    """A bench that passes a flow within a stage; lengths and flows in the section's units.

    Attributes
    ----------
    width : float
        Width of the floor on each side; 0 where the section passes the flow as it is.
    section : Section
        The section with the bench, ready for every other question.
    discharge, discharge_before : float
        What passes at the stage with the bench, and without.
    stage : float
    excavation : float
        Area of ground cut away: earth for each unit length of stream.
    side : str
        ``both``, ``left`` or ``right``.
    stretches : tuple of Stretch
        The bench in plan; empty where there is none.
    at_jump : bool
        More width than this by any amount passes clearly more, and less width clearly less: the discharge
        jumps here. At a width of next to nothing it is the division at the bank that passes the flow.
    """

    width: float
    section: Section
    discharge: float
    discharge_before: float
    stage: float
    excavation: float
    side: str
    stretches: tuple[Stretch, ...] = ()
    at_jump: bool = False

    @property
    def ground(self) -> tuple[Floats, Floats]:
        """Stations and elevations with the bench."""
        return self.section.stations, self.section.elevations


# --- the ground at one stage ----------------------------------------------------------------------


@dataclass(frozen=True)
class _Fine:
    """A profile with a point wherever it crosses one of some levels: no segment lies on both sides.

    Attributes
    ----------
    x, z : ndarray, shape (m,)
    given : ndarray of bool, shape (m,)
        Points of the profile itself.
    owner : ndarray of int, shape (m - 1,)
        Subarea of each segment.
    segment : ndarray of int, shape (m - 1,)
        The segment of the section's own cut profile that each came from.
    """

    x: Floats
    z: Floats
    given: NDArray[np.bool_]
    owner: NDArray[np.intp]
    segment: NDArray[np.intp]

    @classmethod
    def of(cls, section: Section, levels: tuple[float, ...]) -> _Fine:
        x, z, owner = section._cut
        low, high = np.minimum(z[:-1], z[1:]), np.maximum(z[:-1], z[1:])
        at, px, pz = [np.arange(x.size)], [x], [z]
        place = [np.zeros(x.size)]
        for level in levels:
            k = np.flatnonzero((low < level) & (level < high))
            share = (level - z[k]) / (z[k + 1] - z[k])
            at.append(k)
            place.append(share)
            px.append(x[k] + share * (x[k + 1] - x[k]))
            pz.append(np.full(k.size, level))
        order = np.lexsort((np.concatenate(place), np.concatenate(at)))
        where = np.concatenate(at)[order]
        fine_x = np.concatenate(px)[order]
        segment = np.minimum(where, x.size - 2)[:-1]
        on = np.zeros(order.size, dtype=bool)
        pairs = set(zip(section.stations.tolist(), section.elevations.tolist(), strict=True))
        own = np.array([(a, b) in pairs for a, b in zip(x.tolist(), z.tolist(), strict=True)])
        first = order < x.size
        on[first] = own[order[first]]
        # rounding must not let an inserted station fall behind its neighbour
        fine_x = np.maximum.accumulate(fine_x)
        return cls(fine_x, np.concatenate(pz)[order], on, owner[segment], segment)

    def source(self, section: Section, which: int) -> int:
        """Return the fine point at the first (0) or last (-1) low point of the channel."""
        cut = int(section._source[which])
        # a point of the cut profile is where its segment begins, or the very last point
        hit = np.searchsorted(self.segment, cut, side="left")
        return int(hit) if hit < self.segment.size else self.x.size - 1


def _sum_by(owner: NDArray[np.intp], count: int, values: Floats) -> Floats:
    """Sum values of shape (widths, segments) over the segments of each subarea."""
    member = np.zeros((owner.size, count))
    member[np.arange(owner.size), owner] = 1.0
    return values @ member


def _deepest(owner: NDArray[np.intp], count: int, depth: Floats) -> Floats:
    """Return the greatest of depths of shape (widths, segments) in each subarea; 0 where there is none."""
    out = np.zeros((depth.shape[0], count))
    for i in range(count):
        mine = owner == i
        if mine.any():
            out[:, i] = depth[:, mine].max(axis=1)
    return out


@dataclass(frozen=True)
class _Parts:
    """Area, wetted perimeter and n of the parts of a section, each of shape (widths, parts)."""

    area: Floats
    perimeter: Floats
    n: Floats

    def rows(self, index) -> _Parts:
        return _Parts(self.area[index], self.perimeter[index], self.n[index])


class _Question:
    """Conveyance as a function of width: the parts, the breaks, and the least width for a conveyance.

    Parameters
    ----------
    parts : callable
        Widths, shape (k,) -> :class:`_Parts`. Between two breaks each area only rises or only falls,
        each perimeter is linear and each n only rises or only falls.
    breaks : ndarray
        Increasing from 0 to the greatest width.
    """

    def __init__(
        self,
        parts: Callable[[Floats], _Parts],
        breaks: Floats,
        roughness: Roughness,
        constant: float,
        depth: float,
        nudge: float,
    ) -> None:
        self.parts, self.roughness, self.constant, self.depth = parts, roughness, constant, depth
        low, high = breaks[:-1] + nudge, breaks[1:] - nudge
        if high.size:
            high[-1] = breaks[-1]
        whole = high > low
        self.low, self.high = low[whole], high[whole]
        self.at_low, self.at_high = parts(self.low), parts(self.high)
        self.from_low, self.from_high = self.carried(self.at_low), self.carried(self.at_high)
        self.bound = self.most(self.at_low, self.at_high)

    def carried(self, parts: _Parts) -> Floats:
        """Return the conveyance, shape (widths,)."""
        return self.roughness.conveyance(parts.area, parts.perimeter, parts.n, self.constant).sum(axis=1)

    def conveyance(self, width: float) -> float:
        return float(self.carried(self.parts(np.array([width])))[0])

    def most(self, one: _Parts, other: _Parts) -> Floats:
        """Return a bound that no conveyance between two widths of one interval passes.

        Conveyance grows with area and falls with perimeter and n; and no hydraulic radius is more than
        the greatest depth.
        """
        area = np.maximum(one.area, other.area)
        perimeter = np.minimum(one.perimeter, other.perimeter)
        if self.roughness.together:
            perimeter = np.maximum(perimeter, 1e-12 * self.depth)
        else:
            perimeter = np.maximum(perimeter, area / self.depth)
        n = np.minimum(one.n, other.n)
        return (1 + 1e-9) * self.carried(_Parts(area, perimeter, n))

    def least(self, target: float) -> tuple[float, bool] | None:
        """Return the least width that carries at least `target` and whether it lies at a jump, or None."""
        for i in np.flatnonzero(self.bound >= target):
            if self.from_low[i] >= target:
                return float(self.low[i]), True
            found = self._first(int(i), target)
            if found is not None:
                return found, False
        return None

    def _first(self, i: int, target: float) -> float | None:
        """Return the least width in one interval, which is split until only its ends matter."""
        pending = [(float(self.low[i]), float(self.high[i]), 0)]
        while pending:
            low, high, depth = pending.pop()
            if depth == _LEVELS or high - low <= 4.0 * _SPLIT * np.spacing(high):
                if self.conveyance(high) >= target:
                    return self._polish(low, high, target)
                continue
            at = np.linspace(low, high, _SPLIT + 1)
            parts = self.parts(at)
            bound = self.most(parts.rows(slice(None, -1)), parts.rows(slice(1, None)))
            pending += [
                (float(at[k]), float(at[k + 1]), depth + 1) for k in np.flatnonzero(bound >= target)[::-1]
            ]
        return None

    def _polish(self, low: float, high: float, target: float) -> float:
        """Return the root between a width that is too narrow and one that is not, on the side that passes."""
        if self.conveyance(low) >= target:
            return low
        found = brentq(
            lambda w: self.conveyance(w) - target, low, high, xtol=1e-15 * max(high, 1e-300), rtol=8.9e-16
        )
        step = 2.0 * np.spacing(found)
        while self.conveyance(found) < target and found < high:
            found, step = min(found + step, high), 2.0 * step
        return float(found)

    def greatest(self) -> float:
        """Return the most that any width carries."""
        if not self.low.size:
            return 0.0
        best = float(max(self.from_low.max(), self.from_high.max()))
        open_ = np.flatnonzero(self.bound > best)
        open_ = open_[np.argsort(-self.bound[open_], kind="stable")][:_LOOKED_INTO]
        if not open_.size:
            return best
        at = np.linspace(self.low[open_], self.high[open_], 9, axis=1)
        tops = self.carried(self.parts(at.ravel())).reshape(at.shape)
        for i in np.argsort(-tops.max(axis=1), kind="stable")[:_ZOOMED_INTO]:
            k = int(tops[i].argmax())
            low, high = at[i, max(k - 1, 0)], at[i, min(k + 1, 8)]
            for _ in range(_LEVELS):
                near = np.linspace(low, high, _SPLIT + 1)
                carried = self.carried(self.parts(near))
                k = int(carried.argmax())
                best = max(best, float(carried[k]))
                low, high = near[max(k - 1, 0)], near[min(k + 1, _SPLIT)]
        return best


# --- the bench ------------------------------------------------------------------------------------


class _Side:
    """Ground outward of the channel bank on one side, with distances from the bank.

    Notes
    -----
    The outer slope of a bench of width w goes through a point of the ground at distance d and height
    r above the base if w = d - (side slope) r. It ends at the first point where that number is at least
    w, so the end of the slope is a first passage of a piecewise linear function.
    """

    def __init__(self, fine: _Fine, bank: int, step: int, stage, base, side_slope, wet_anyway, count) -> None:
        take = slice(bank, None) if step > 0 else slice(bank, None, -1)
        segments = slice(bank, None) if step > 0 else slice(bank - 1, None, -1) if bank > 0 else slice(0, 0)
        self.side = "right" if step > 0 else "left"
        self.step, self.stage, self.base, self.side_slope, self.count = step, stage, base, side_slope, count
        self.station, self.z, self.given = fine.x[take], fine.z[take], fine.given[take]
        self.bank = float(self.station[0])
        self.d = np.abs(self.station - self.bank)
        self.owner = fine.owner[segments]
        self.wet_anyway = wet_anyway[segments]
        self.launch = self.d - side_slope * np.maximum(self.z - base, 0.0)
        self.record = np.maximum.accumulate(self.launch)
        high = np.maximum(self.z[:-1], self.z[1:])
        low = np.minimum(self.z[:-1], self.z[1:])
        self.below = (high <= stage) & (low < stage)
        blocked = np.append(np.where(self.z >= stage, np.arange(self.z.size), self.z.size), self.z.size)
        self.next_ridge = np.minimum.accumulate(blocked[::-1])[::-1]

    @property
    def widest(self) -> float:
        return float(self.record[-1])

    @property
    def breaks(self) -> Floats:
        return np.unique(self.record)

    def meet(self, w: Floats):
        """Return where the outer slope ends: index of the ground point at or beyond it, distance, height."""
        j = np.clip(np.searchsorted(self.record, w, side="left"), 1, self.d.size - 1)
        before, after = self.launch[j - 1], self.launch[j]
        rise = after - before
        share = np.clip(np.divide(w - before, rise, out=np.zeros_like(w), where=rise > 0), 0.0, 1.0)
        return (
            j,
            self.d[j - 1] + share * (self.d[j] - self.d[j - 1]),
            self.z[j - 1] + share * (self.z[j] - self.z[j - 1]),
        )

    def floor_height(self, w: Floats) -> tuple[Floats, Floats]:
        """Return the far end of each segment's floor and its height, shape (widths, segments)."""
        near, far = self.d[:-1], self.d[1:]
        inner, outer = np.minimum(self.z[:-1], self.base), np.minimum(self.z[1:], self.base)
        end = np.clip(w[:, None], near, far)
        span = far - near
        share = np.where(
            span > 0, (end - near) / np.where(span > 0, span, 1.0), (near < w[:, None]).astype(float)
        )
        return end, inner + share * (outer - inner)

    def parts(self, w: Floats, varies: bool):
        """Return area, perimeter and depth of the bench, and of what is left of each subarea beyond it."""
        h, base, m = self.stage, self.base, self.side_slope
        j, end, top = self.meet(w)
        inner = np.minimum(self.z[:-1], base)
        floor_end, floor = self.floor_height(w)
        run = floor_end - self.d[:-1]
        area = (run * (h - 0.5 * (inner + floor))).sum(axis=1)
        perimeter = np.hypot(run, floor - inner).sum(axis=1)
        rise = np.maximum(np.minimum(top, h) - base, 0.0)
        area += m * rise * (h - base - 0.5 * rise)
        perimeter += rise * np.sqrt(1.0 + m * m)
        k = np.arange(self.owner.size)
        partial = k == j[:, None] - 1
        near = np.where(partial, end[:, None], self.d[:-1])
        start = np.where(partial, top[:, None], self.z[:-1])
        joined = (top[:, None] < h) & (k < self.next_ridge[j][:, None])
        wet = self.below & (k >= j[:, None] - 1) & (self.wet_anyway | joined)
        run = np.where(wet, self.d[1:] - near, 0.0)
        step = np.where(wet, self.z[1:] - start, 0.0)
        left_area = _sum_by(self.owner, self.count, run * (h - 0.5 * (start + self.z[1:])))
        left_perimeter = _sum_by(self.owner, self.count, np.hypot(run, step))
        depth = np.zeros(w.size)
        left_depth = np.zeros_like(left_area)
        if varies:
            under = np.where(w[:, None] > self.d[:-1], np.minimum(inner, floor), base)
            depth = h - under.min(axis=1, initial=base)
            deep = np.where(wet, h - np.minimum(start, self.z[1:]), 0.0)
            left_depth = _deepest(self.owner, self.count, deep)
        return (area, perimeter, depth), (left_area, left_perimeter, left_depth)

    def profile(self, width: float) -> tuple[Floats, Floats, float, float]:
        """Return stations and heights from the bank outward with the bench, and its two outer stations."""
        w = np.array([width])
        j, end, top = (a[0] for a in self.meet(w))
        # rounding must not put the slope's end behind the floor's, nor beyond the next point
        nearest = min if self.step > 0 else max
        outer = nearest(self.bank + self.step * max(float(end), width), float(self.station[j]))
        floor_end = nearest(self.bank + self.step * float(width), outer)
        if self.side_slope == 0.0:
            floor_end = outer
        inside = np.flatnonzero((self.d < width) & (self.z <= self.base))
        x, z = list(self.station[inside]), list(self.z[inside])
        x.append(floor_end)
        # where the floor ends over ground below the base there is no slope
        z.append(float(min(top, self.base)))
        if top > self.base:
            x.append(outer)
            z.append(float(top))
        else:
            outer = floor_end
        beyond = np.flatnonzero(self.given[j:]) + j
        stations = np.concatenate([x, self.station[beyond]])
        return (
            self.step * np.maximum.accumulate(self.step * stations),
            np.concatenate([z, self.z[beyond]]),
            floor_end,
            outer,
        )


class _Cut:
    """A bench of any width in one section at one stage."""

    def __init__(self, section: Section, stage: float, base: float, n, sides: str, side_slope: float) -> None:
        self.section, self.stage, self.base, self.n, self.sides = section, stage, base, n, sides
        self.fine = fine = _Fine.of(section, (base, stage))
        ground, rough = section._profile.ground, section._roughness
        count = len(section.subareas)
        extra = section._hollows
        if not section.connected:
            anyway = np.ones(ground.low.size, dtype=bool)
        elif extra.size:
            anyway = reach(ground.z, extra) < stage
        else:
            anyway = np.zeros(ground.low.size, dtype=bool)
        anyway = anyway[fine.segment]
        self.left = self._side(-1, side_slope, anyway, count) if sides in ("both", "left") else None
        self.right = self._side(1, side_slope, anyway, count) if sides in ("both", "right") else None
        first = self._bank(-1) if sides in ("both", "left") else 0
        last = self._bank(1) if sides in ("both", "right") else fine.x.size - 1
        # where the bank is the low point itself the bench is the channel there, and the face beyond it is the
        # bench's: that of the deeper side
        self.takes_low_point = tuple(
            bool(side is not None and bank == fine.source(section, which))
            for side, bank, which in ((self.left, first, 0), (self.right, last, -1))
        )
        self.core = (first, last)
        self.inner_face = [0.0, 0.0]
        if self.takes_low_point[0]:
            first = self._past_face(0, first, last, 1)
        if self.takes_low_point[1]:
            last = self._past_face(1, last, first, -1)
        self._counted = (first, last)
        self.roughness = self._tiled(rough, count)
        self._core = self._core_parts(ground.threshold[fine.segment] < stage, count)

    def _bank(self, step: int) -> int:
        """Return the fine point on one side beyond which the ground first rises above the base."""
        z = self.fine.z
        i = self.fine.source(self.section, -1 if step > 0 else 0)
        while 0 <= i + step < z.size and z[i + step] <= self.base:
            i += step
        return i

    def _past_face(self, side: int, i: int, end: int, step: int) -> int:
        """Return the point beyond a face that rises inward from the bank, and give the face to the bench."""
        x, z = self.fine.x, self.fine.z
        while i != end and x[i + step] == x[i] and z[i + step] > z[i]:
            self.inner_face[side] += float(min(z[i + step], self.stage) - min(z[i], self.stage))
            i += step
        return i

    def _side(self, step: int, side_slope: float, anyway, count: int) -> _Side:
        return _Side(self.fine, self._bank(step), step, self.stage, self.base, side_slope, anyway, count)

    @property
    def _zoned(self) -> bool:
        """Whether the section tells its channel apart."""
        return any(s.zone == "channel" for s in self.section.subareas)

    @property
    def used(self) -> list[_Side]:
        return [s for s in (self.left, self.right) if s is not None]

    @property
    def widest(self) -> float:
        """The greatest width whose outer slope still meets the ground within the section."""
        found = min(s.widest if s.d.size > 1 else 0.0 for s in self.used)
        return found if found > _NUDGE * self.section.length else 0.0

    def _tiled(self, rough: Roughness, count: int) -> Roughness:
        from terrain2q.hydraulics.section import DepthRoughness

        n = self.n if isinstance(self.n, DepthRoughness) else DepthRoughness(self.n, 0.0, self.n, 1.0)

        def tiled(values, own):
            return np.concatenate([values, values, values, [own, own]])

        channel = rough.channel
        grouped = np.array(self.takes_low_point) & bool(self._zoned and rough.composite != "divide")
        return Roughness(
            tiled(rough.shallow, n.shallow),
            tiled(rough.deep, n.deep),
            tiled(rough.shallow_depth, n.shallow_depth),
            tiled(rough.deep_depth, n.deep_depth),
            np.concatenate(
                [channel, channel + count, channel + 2 * count, 3 * count + np.flatnonzero(grouped)]
            ).astype(np.intp),
            rough.composite,
        )

    def _core_parts(self, reached, count: int):
        first, last = self._counted
        f = self.fine
        x, z, owner = f.x[first : last + 1], f.z[first : last + 1], f.owner[first:last]
        h = self.stage
        below = (np.maximum(z[:-1], z[1:]) <= h) & (np.minimum(z[:-1], z[1:]) < h)
        wet = below & reached[first:last]
        run, rise = np.where(wet, np.diff(x), 0.0), np.where(wet, np.diff(z), 0.0)
        depth = h - 0.5 * (z[:-1] + z[1:])
        deep = np.where(wet, h - np.minimum(z[:-1], z[1:]), 0.0)
        return (
            _sum_by(owner, count, (run * depth)[None]),
            _sum_by(owner, count, np.hypot(run, rise)[None]),
            _deepest(owner, count, deep[None]),
        )

    def parts(self, w: Floats) -> _Parts:
        """Hydraulics of the core, the remains on each side and the two benches, shape (widths, parts)."""
        count, varies = len(self.section.subareas), self.roughness.varies
        nothing = (np.zeros(w.size),) * 3, (np.zeros((w.size, count)),) * 3
        left = self.left.parts(w, varies) if self.left is not None else nothing
        right = self.right.parts(w, varies) if self.right is not None else nothing
        area, perimeter, depth = (
            np.concatenate(
                [
                    np.broadcast_to(self._core[i], (w.size, count)),
                    left[1][i],
                    right[1][i],
                    left[0][i][:, None] + (self.inner_face[0] if i == 1 else 0.0),
                    right[0][i][:, None] + (self.inner_face[1] if i == 1 else 0.0),
                ],
                axis=1,
            )
            for i in range(3)
        )
        return _Parts(area, perimeter, self.roughness.at(depth))

    def question(self) -> _Question:
        widest = self.widest
        breaks = np.unique(np.concatenate([[0.0, widest], *(s.breaks for s in self.used)]))
        breaks = breaks[(breaks >= 0) & (breaks <= widest)]
        system = self.section.system
        lowest = float(self.fine.z.min())
        return _Question(
            self.parts,
            breaks,
            self.roughness,
            system.manning,
            self.stage - lowest,
            _NUDGE * self.section.length,
        )

    def cut_section(self, width: float) -> tuple[Section, tuple[Stretch, ...]]:
        """Return the section with a bench of one width, and the bench in plan."""
        from terrain2q.hydraulics.section import Section, Subarea

        own, f = self.section, self.fine
        first, last = self.core
        keep = np.flatnonzero(f.given[first : last + 1]) + first
        x, z = [f.x[keep]], [f.z[keep]]
        zoned = any(s.zone for s in own.subareas)
        stretches, dry = [], []
        lowest, highest = -np.inf, np.inf
        outer_left, outer_right = -np.inf, np.inf
        for side in self.used:
            px, pz, floor_end, outer = side.profile(width)
            stretches.append(Stretch(side.side, side.bank, floor_end, outer))
            if side.step > 0:
                x.append(px)
                z.append(pz)
                highest, outer_right = side.bank, outer
            else:
                x.insert(0, px[::-1])
                z.insert(0, pz[::-1])
                lowest, outer_left = side.bank, outer
            dry.append((min(side.bank, outer), max(side.bank, outer)))
        x, z = np.concatenate(x), np.concatenate(z)
        fresh = np.append(True, (np.diff(x) != 0) | (np.diff(z) != 0))
        x, z = x[fresh], z[fresh]

        def within(low: float, high: float) -> list[Subarea]:
            found = []
            for s in own.subareas:
                a, b = max(s.start, low), min(s.end, high)
                if b > a and a < x[-1] and b > x[0]:
                    found.append(Subarea(a, b, s.n, s.label, s.zone))
            return found

        subareas = within(lowest, highest)
        for side, (low, high) in zip(self.used, dry, strict=True):
            zone = f"{side.side} floodplain" if zoned else ""
            if self._zoned and self.takes_low_point[0 if side.step < 0 else 1]:
                zone = "channel"
            bench = Subarea(low, high, self.n, BENCH, zone)
            if side.step > 0:
                subareas = [*subareas, bench, *within(outer_right, np.inf)]
            else:
                subareas = [*within(-np.inf, outer_left), bench, *subareas]
        low_point = float(own._cut[0][own._source[0]])
        cut = Section(
            x,
            z,
            subareas,
            own.units,
            own.connected,
            None if own.origin is None else low_point,
            composite=own.composite,
            section_id=own.section_id,
        )
        # a hollow that water is known to reach stays so where the bench has not taken its low point
        kept = []
        for (start, end), source in zip(own._reached, own._hollows, strict=True):
            at = float(own._cut[0][source])
            if outer_left < at < outer_right and not lowest <= at <= highest:
                continue
            if at >= outer_right:
                start = max(start, outer_right)
            elif at <= outer_left:
                end = min(end, outer_left)
            kept.append((start, end))
        return (cut.reached(kept) if kept else cut), tuple(sorted(stretches, key=lambda s: s.start))


def _checked(section: Section, stage: float, base: float, sides: str, side_slope: float) -> None:
    where = section.section_id or "required_bench"
    for name, value in (("stage", stage), ("base", base), ("side_slope", side_slope)):
        if not np.isfinite(value):
            raise InputError("number-not-finite", f"{name} is {value}", where=where)
    if sides not in SIDES:
        raise InputError(
            "value-not-allowed", f"sides is {sides!r}", where=where, fix="use one of: " + ", ".join(SIDES)
        )
    if side_slope < 0:
        raise InputError(
            "value-not-allowed",
            f"side_slope is {side_slope:g}",
            where=where,
            fix="give run over rise, 0 for a vertical face",
        )
    low = section.lowest_ground
    if not low <= base < stage:
        raise InputError(
            "value-not-allowed",
            f"the bench's base is {base:g}; lowest ground is {low:g} and the stage {stage:g}",
            where=where,
            fix="give a base at or above the lowest ground and below the stage",
        )


def _positive(name: str, value: float, where: str) -> float:
    if not (np.isfinite(value) and value > 0):
        raise InputError("number-not-positive", f"{name} is {value}", where=where)
    return float(value)


def required_bench(
    section: Section,
    discharge: ArrayLike,
    stage: ArrayLike,
    slope: float,
    base: float,
    n: float | DepthRoughness,
    sides: str = "both",
    side_slope: float = 0.0,
):
    """Return the narrowest bench with which a section passes a discharge at a stage.

    Parameters
    ----------
    section : Section
    discharge, stage : array_like
        > 0; broadcast together. Arrays give an array of :class:`Bench`.
    slope : float
        Energy slope, > 0.
    base : float
        Elevation of the bench's level floor: at or above the lowest ground, below the stage.
    n : float or DepthRoughness
        Roughness of the floor and the outer slope.
    sides : str
        ``both`` (the same width on each), ``left`` or ``right``.
    side_slope : float
        Run over rise of the outer slope; 0 is a vertical face.

    Returns
    -------
    Bench

    Raises
    ------
    InputError
        ``value-not-allowed``, ``number-not-positive`` or ``number-not-finite``.
    NoAnswerError
        No width within the section passes the discharge; `nearest` is the most that can pass.

    Notes
    -----
    The floor begins at the channel bank: where the ground, outward of the low point, first rises above
    the base. Only ground above the base is cut; a hollow under the floor stays as it is. The outer
    slope rises from the floor's end to the first ground it meets, which must lie within the section.
    Between bank and the slope's end there is one subarea ``bench``; what is left of the subareas beyond
    it keeps its roughness.

    Discharge jumps where the cut opens a hollow, undercuts ground steeper than its slope, or
    passes a vertical face; the width is then taken one part in 10⁹ of the section's length beyond the
    jump. One such jump is at width 0, because the divided-channel method divides the section at the bank
    as soon as there is a bench: a flow between those before and after it needs no width worth the name.
    """
    where = section.section_id or "required_bench"
    q, h = np.broadcast_arrays(np.asarray(discharge, dtype=float), np.asarray(stage, dtype=float))
    _positive("slope", slope, where)
    found = np.empty(q.shape, dtype=object)
    for place in np.ndindex(q.shape):
        found[place] = _one_bench(
            section,
            _positive("discharge", q[place], where),
            float(h[place]),
            slope,
            base,
            n,
            sides,
            side_slope,
        )
    return found if q.ndim else found[()]


def _one_bench(section: Section, discharge, stage, slope, base, n, sides, side_slope) -> Bench:
    _checked(section, stage, base, sides, side_slope)
    before = float(section.discharge(stage, slope))
    if before >= discharge:
        return Bench(0.0, section, before, before, stage, 0.0, sides)
    cut = _Cut(section, stage, base, n, sides, side_slope)
    question = cut.question()
    root = float(np.sqrt(slope))
    found = question.least(discharge / root)
    if found is None:
        most = max(question.greatest() * root, before)
        raise NoAnswerError(
            f"no bench within the section passes {discharge:g} at stage {stage:g}; the most is {most:g}",
            nearest=most,
            where=section.section_id,
            fix="raise the stage, lower the base, smooth the bench or lengthen the section",
        )
    width, at_jump = found
    after, stretches = cut.cut_section(width)
    excavation = _area_over(section, base) - _area_over(after, base)
    passes = float(after.discharge(stage, slope))
    return Bench(width, after, passes, before, stage, max(excavation, 0.0), sides, stretches, at_jump)


def _area_over(section: Section, level: float) -> float:
    return float(np.trapezoid(section.elevations - level, section.stations))


def bench_curve(
    section: Section,
    widths: ArrayLike,
    stage: float,
    slope: float,
    base: float,
    n: float | DepthRoughness,
    sides: str = "both",
    side_slope: float = 0.0,
) -> Floats:
    """Return the discharge that passes at a stage with benches of given widths.

    Parameters
    ----------
    widths : array_like
        >= 0; 0 is the section as it is.
    stage, slope, base, n, sides, side_slope
        As for :func:`required_bench`.

    Returns
    -------
    ndarray
        Of the shape of `widths`; NaN where the outer slope does not meet the ground within the section.
    """
    where = section.section_id or "bench_curve"
    _positive("slope", slope, where)
    _checked(section, stage, base, sides, side_slope)
    w = np.asarray(widths, dtype=float)
    if not (w >= 0).all():
        raise InputError("value-not-allowed", "a width is below zero or not a number", where=where)
    cut = _Cut(section, stage, base, n, sides, side_slope)
    question = cut.question()
    out = np.full(w.shape, np.nan)
    out[w == 0] = section.discharge(stage, slope)
    inside = (w > 0) & (w <= cut.widest)
    out[inside] = question.carried(cut.parts(w[inside])) * np.sqrt(slope)
    return out


# --- the opening ----------------------------------------------------------------------------------


def opening_centre(section: Section) -> float:
    """Return the station about which an opening is laid: the middle of the channel.

    It is halfway between the ends of the ``channel`` zone; without one, the middle of the level
    ground at the low point of the channel.
    """
    x, z, _ = section._cut
    channel = [s for s in section.subareas if s.zone == "channel"]
    if channel:
        return 0.5 * (max(channel[0].start, float(x[0])) + min(channel[-1].end, float(x[-1])))
    i = j = int(section._source[0])
    while j + 1 < z.size and z[j + 1] == z[i]:
        j += 1
    while i > 0 and z[i - 1] == z[j]:
        i -= 1
    return 0.5 * float(x[i] + x[j])


class _Opening:
    """An opening of any clear width in one section at one stage."""

    def __init__(self, section: Section, stage: float) -> None:
        self.section, self.stage = section, stage
        fine = _Fine.of(section, (stage,))
        ground = section._profile.ground
        self.x, self.z, self.owner = fine.x, fine.z, fine.owner
        self.count = len(section.subareas)
        low, high = np.minimum(self.z[:-1], self.z[1:]), np.maximum(self.z[:-1], self.z[1:])
        self.wet = (high <= stage) & (low < stage) & (ground.threshold[fine.segment] < stage)
        self.centre = opening_centre(section)
        self.start, self.end = float(self.x[0]), float(self.x[-1])

    def walls(self, w: Floats) -> tuple[Floats, Floats]:
        """Stations of the two walls: alike about the centre until one is at the section's end."""
        left, right = self.centre - 0.5 * w, self.centre + 0.5 * w
        left, right = left - np.maximum(right - self.end, 0.0), right + np.maximum(self.start - left, 0.0)
        return np.maximum(left, self.start), np.minimum(right, self.end)

    @property
    def breaks(self) -> Floats:
        reach = np.abs(self.x - self.centre)
        near = min(self.centre - self.start, self.end - self.centre)
        widths = np.where(reach <= near, 2.0 * reach, near + reach)
        return np.unique(np.concatenate([[0.0], widths]))

    def parts(self, w: Floats) -> _Parts:
        h, x, z = self.stage, self.x, self.z
        left, right = (a[:, None] for a in self.walls(w))
        span, fall = np.diff(x), np.diff(z)
        near, far = np.clip(left, x[:-1], x[1:]), np.clip(right, x[:-1], x[1:])
        width = np.where(span > 0, span, 1.0)
        upright = (span == 0) & (left < x[:-1]) & (x[:-1] < right)
        start = np.where(span > 0, z[:-1] + (near - x[:-1]) / width * fall, z[:-1])
        end = np.where(span > 0, z[:-1] + (far - x[:-1]) / width * fall, np.where(upright, z[1:], z[:-1]))
        inside = self.wet & ((far > near) | upright)
        run, rise = np.where(inside, far - near, 0.0), np.where(inside, end - start, 0.0)
        area = _sum_by(self.owner, self.count, run * (h - 0.5 * (start + end)))
        length = np.hypot(run, rise)
        # a wall stands in the segment that the opening enters last on its side
        length += np.where(inside & (x[:-1] <= left) & (left < x[1:]), h - start, 0.0)
        length += np.where(inside & (x[:-1] < right) & (right <= x[1:]), h - end, 0.0)
        perimeter = _sum_by(self.owner, self.count, length)
        rough = self.section._roughness
        depth = np.zeros_like(area)
        if rough.varies:
            deep = np.where(inside, h - np.minimum(start, end), 0.0)
            depth = _deepest(self.owner, self.count, deep)
        return _Parts(area, perimeter, rough.at(depth))

    def question(self) -> _Question:
        section = self.section
        return _Question(
            self.parts,
            self.breaks,
            section._roughness,
            section.system.manning,
            max(self.stage - float(self.z.min()), 1e-300),
            _NUDGE * section.length,
        )


@dataclass(frozen=True)
class OpeningParts:
    """An opening in a section at one stage, taken apart by subarea.

    Attributes
    ----------
    start, end : float
        Stations of its walls.
    flow_area, wetted_perimeter, n, conveyance : ndarray, shape (subareas,)
        Each wall is wetted perimeter of the subarea it stands in. Under a composite n the subareas of the
        channel share its conveyance by their areas.
    """

    start: float
    end: float
    flow_area: Floats
    wetted_perimeter: Floats
    n: Floats
    conveyance: Floats


def opening_parts(section: Section, width: float, stage: float) -> OpeningParts:
    """Return what an opening of a clear width is made of; see :func:`required_opening`.

    Parameters
    ----------
    section : Section
    width : float
        >= 0.
    stage : float
    """
    opening = _Opening(section, stage)
    left, right = opening.walls(np.array([width]))
    parts = opening.parts(np.array([width]))
    area, perimeter, n = parts.area[0], parts.perimeter[0], np.broadcast_to(parts.n, parts.area.shape)[0]
    conveyance = section._roughness.conveyance(area, perimeter, n, section.system.manning)
    return OpeningParts(float(left[0]), float(right[0]), area, perimeter, n, conveyance)


def required_opening(section: Section, discharge: ArrayLike, stage: ArrayLike, slope: ArrayLike):
    """Return the least clear width about the channel, between vertical walls, that passes a discharge.

    Parameters
    ----------
    section : Section
    discharge, stage, slope : array_like
        Broadcast together; discharge and slope > 0.

    Returns
    -------
    ndarray or float

    Raises
    ------
    InputError
        ``number-not-positive`` or ``number-not-finite``.
    NoAnswerError
        No opening within the section passes the discharge; `nearest` is the most that can pass.

    Notes
    -----
    The walls rise from the ground to the stage at equal distances from the middle of the channel
    (:func:`opening_centre`). Where one stands at an end of the section it stays there and the other goes
    on outward. Each wall is wetted perimeter with the roughness of the subarea it stands in. Water within
    the opening is that of the section at the stage. At the widest the walls stand at the section's ends; they
    have friction there, which the imagined wall of :meth:`Section.discharge` has not. There is no loss at the
    entry and none at the exit, and the stage is taken to be level: a first look at a span.
    """
    where = section.section_id or "required_opening"
    q, h, s = np.broadcast_arrays(*(np.asarray(a, dtype=float) for a in (discharge, stage, slope)))
    for name, values in (("discharge", q), ("stage", h), ("slope", s)):
        if not np.isfinite(values).all():
            raise InputError(
                "number-not-finite", f"{name} has a value that is not a finite number", where=where
            )
    for name, values in (("discharge", q), ("slope", s)):
        if (values <= 0).any():
            raise InputError("number-not-positive", f"{name} is {values[values <= 0].flat[0]:g}", where=where)
    questions: dict[float, _Question] = {}
    out = np.empty(q.shape)
    for place in np.ndindex(q.shape):
        level, root = float(h[place]), float(np.sqrt(s[place]))
        if level <= section.lowest_ground:
            raise NoAnswerError(
                f"the section is dry at stage {level:g}",
                nearest=0.0,
                where=where,
                fix=f"give a stage above the lowest ground, {section.lowest_ground:g}",
            )
        if level not in questions:
            questions[level] = _Opening(section, level).question()
        found = questions[level].least(float(q[place]) / root)
        if found is None:
            most = questions[level].greatest() * root
            raise NoAnswerError(
                f"no opening within the section passes {q[place]:g} at stage {level:g}; the most is {most:g}",
                nearest=most,
                where=where,
                fix="raise the stage or lengthen the section",
            )
        out[place] = found[0]
    return out if out.ndim else float(out)
