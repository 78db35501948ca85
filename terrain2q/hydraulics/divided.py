"""A profile divided into subareas with their roughness: conveyance as an exact function of stage.

Between two neighbouring breaks (elevations of the profile) area is quadratic and perimeter linear
in stage, so that conveyance there is known in closed form, and with it where it rises and where it
falls. Stages are sought break by break: none is missed, and none is approximate.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq

from terrain2q.hydraulics.conveyance import manning_conveyance
from terrain2q.hydraulics.wetted import Ground

Floats = NDArray[np.float64]

_ROUNDING = 1e-12
"""Two conveyances, or two stages above the lowest ground, that differ by less are the same number."""


@dataclass(frozen=True)
class Roughness:
    """Manning's n of the subareas; it may fall with depth, straight between two depths.

    Attributes
    ----------
    shallow, deep : ndarray, shape (subareas,)
        n at and below `shallow_depth`, and at and above `deep_depth`; equal where n is one number.
    shallow_depth, deep_depth : ndarray, shape (subareas,)
        Depths of water over the lowest ground that water has reached in the subarea.
    channel : ndarray of int
        Subareas that are taken together under one composite n; empty where each stands alone.
    composite : str
        ``divide``, ``horton``, ``lotter`` or ``pavlovskii``.
    """

    shallow: Floats
    deep: Floats
    shallow_depth: Floats
    deep_depth: Floats
    channel: NDArray[np.intp]
    composite: str = "divide"

    @classmethod
    def constant(cls, n: Floats) -> Roughness:
        """Return a roughness that is the same at every depth."""
        none = np.zeros_like(n)
        return cls(n, n, none, none, np.zeros(0, dtype=np.intp))

    @property
    def varies(self) -> bool:
        """Whether n of any subarea depends on depth."""
        return bool((self.shallow != self.deep).any())

    @property
    def together(self) -> bool:
        """Whether some subareas share a composite n that differs from dividing them."""
        # Lotter's rule adds the conveyances of the parts, which is what dividing does
        return self.channel.size > 1 and self.composite in ("horton", "pavlovskii")

    def at(self, depth: Floats) -> Floats:
        """Return n at a depth of water, shape (..., subareas)."""
        if not self.varies:
            return np.broadcast_to(self.shallow, depth.shape)
        span = self.deep_depth - self.shallow_depth
        share = np.clip((depth - self.shallow_depth) / np.where(span > 0, span, 1.0), 0.0, 1.0)
        return self.shallow + share * (self.deep - self.shallow)

    def scaled(self, factor) -> Roughness:
        """Return the same with every n multiplied by `factor` (a number, or one for each subarea)."""
        return Roughness(
            self.shallow * factor,
            self.deep * factor,
            self.shallow_depth,
            self.deep_depth,
            self.channel,
            self.composite,
        )

    def conveyance(self, area: Floats, perimeter: Floats, n: Floats, constant: float) -> Floats:
        """Return the conveyance of each subarea, shape (..., subareas).

        Under a composite n the water of the channel's subareas has one velocity, so that each
        carries its share of the area.
        """
        by_subarea = manning_conveyance(area, perimeter, n, constant)
        if self.together:
            c = self.channel
            a, p = area[..., c], perimeter[..., c]
            whole, around = a.sum(axis=-1), p.sum(axis=-1)
            mixed = composite_n(p, a, n[..., c], self.composite)
            total = manning_conveyance(whole, around, np.where(mixed > 0, mixed, 1.0), constant)
            share = np.divide(a, whole[..., None], out=np.zeros_like(a), where=whole[..., None] > 0)
            by_subarea[..., c] = total[..., None] * share
        return by_subarea


def composite_n(perimeter: Floats, area: Floats, n: Floats, rule: str) -> Floats:
    r"""Return one Manning's n for parts that lie along one bed.

    Parameters
    ----------
    perimeter, area, n : ndarray, shape (..., parts)
        Wetted perimeter, flow area and roughness of the parts. Only Lotter's rule needs the area.
    rule : str
        ``horton``: one velocity, :math:`n = [\sum P_i n_i^{3/2} / P]^{2/3}` (Horton 1933, Einstein 1934);
        ``pavlovskii``: forces add, :math:`n = [\sum P_i n_i^2 / P]^{1/2}` (Pavlovskii 1931);
        ``lotter``: discharges add, :math:`n = P R^{5/3} / \sum (P_i R_i^{5/3} / n_i)` (Lotter 1933).
        All three after Chow (1959), section 6-5.

    Returns
    -------
    ndarray, shape (...)
        0 where nothing is wet.

    Examples
    --------
    A flume 0.5 m wide and 0.35 m deep with glass walls (n 0.01022) and a rough bed (n 0.016):

    >>> p, n = np.array([0.35, 0.5, 0.35]), np.array([0.01022, 0.016, 0.01022])
    >>> round(float(composite_n(p, p, n, "horton")), 5)
    0.01279
    """
    around = perimeter.sum(axis=-1)
    wet = around > 0
    if rule == "lotter":
        radius = np.divide(area, perimeter, out=np.zeros_like(area), where=perimeter > 0)
        whole = np.divide(area.sum(axis=-1), around, out=np.zeros_like(around), where=wet)
        carried = (perimeter * radius ** (5 / 3) / n).sum(axis=-1)
        return np.divide(around * whole ** (5 / 3), carried, out=np.zeros_like(around), where=carried > 0)
    power = {"horton": 1.5, "pavlovskii": 2.0}[rule]
    mean = np.divide((perimeter * n**power).sum(axis=-1), around, out=np.zeros_like(around), where=wet)
    return mean ** (1 / power)


@dataclass(frozen=True)
class Wet:
    """Hydraulics by subarea, each array of shape (stages, subareas)."""

    area: Floats
    perimeter: Floats
    width: Floats
    n: Floats
    conveyance: Floats


@dataclass(frozen=True)
class _Laws:
    """Right-hand values at every break and rates up to the next one: the closed form between breaks."""

    breaks: Floats  # (b,)
    span: Floats  # (b,) up to the next break; the last is infinite
    area: Floats  # (b, subareas) just above the break, and so on
    width: Floats
    width_rate: Floats
    perimeter: Floats
    perimeter_rate: Floats
    n: Floats
    n_rate: Floats
    above: Floats  # (b,) conveyance just above the break
    below: Floats  # (b,) conveyance just below it
    rising: NDArray[np.bool_]  # (b,) conveyance surely rises all the way to the next break


class DividedProfile:
    """Ground with roughness.

    Parameters
    ----------
    ground : Ground
    roughness : Roughness
    constant : float
        The constant in Manning's equation for the units of the ground.
    """

    def __init__(self, ground: Ground, roughness: Roughness, constant: float) -> None:
        self.ground, self.roughness, self.constant = ground, roughness, constant

    # --- forward ---------------------------------------------------------------------------------

    def wet(self, stage: Floats, *, passed: bool = False) -> Wet:
        """Return the hydraulics by subarea at each stage, shape (stages, subareas)."""
        area, perimeter, width = self.ground.wetted(stage, passed=passed)
        return self._with_conveyance(area, perimeter, width, self._depth(stage, passed))

    def wet_between(self, first: int, last: int, stage: float, *, passed: bool = False) -> Wet:
        """Return the hydraulics of points `first` to `last` alone under one level, shape (1, subareas)."""
        area, perimeter, width = (
            a[None, :] for a in self.ground.wetted_between(first, last, stage, passed=passed)
        )
        depth = np.zeros_like(area)
        if self.roughness.varies:
            inside = np.maximum(stage - self.ground.low[first:last], 0.0)
            np.maximum.at(depth[0], self.ground.owner[first:last], inside)
        return self._with_conveyance(area, perimeter, width, depth)

    def _with_conveyance(self, area, perimeter, width, depth) -> Wet:
        n = self.roughness.at(depth)
        conveyance = self.roughness.conveyance(area, perimeter, n, self.constant)
        return Wet(area, perimeter, width, n, conveyance)

    def _depth(self, stage: Floats, passed: bool) -> Floats:
        """Depth over the lowest ground that water has reached, by subarea; zeros where n never asks."""
        ground = self.ground
        depth = np.zeros((stage.size, ground.count))
        if self.roughness.varies:
            for i, s in enumerate(stage):
                reached = (ground.threshold <= s) if passed else (ground.threshold < s)
                inside = np.where(reached, np.maximum(s - ground.low, 0.0), 0.0)
                np.maximum.at(depth[i], ground.owner, inside)
        return depth

    def total(self, stage: float, *, passed: bool = False) -> float:
        """Return the whole conveyance at one stage."""
        return float(self.wet(np.array([stage]), passed=passed).conveyance.sum())

    # --- the closed form between breaks ------------------------------------------------------------

    @cached_property
    def breaks(self) -> Floats:
        """Stages between which conveyance has one closed form."""
        found = self.ground.breaks
        if self.roughness.varies:
            ground, rough = self.ground, self.roughness
            extra = [found]
            for i in np.flatnonzero(rough.shallow != rough.deep):
                mine = np.flatnonzero(ground.owner == i)
                order = mine[np.argsort(ground.threshold[mine], kind="stable")]
                lows = np.unique(np.minimum.accumulate(ground.low[order]))
                extra += [lows + rough.shallow_depth[i], lows + rough.deep_depth[i]]
            found = np.unique(np.concatenate(extra))
        return found

    @cached_property
    def laws(self) -> _Laws:
        """The closed form between all breaks."""
        breaks = self.breaks
        above, below = self.wet(breaks, passed=True), self.wet(breaks)
        span = np.append(np.diff(breaks), np.inf)[:, None]

        def rate(start: Floats, end: Floats) -> Floats:
            return (np.vstack([end[1:], start[-1:]]) - start) / span

        width_rate = np.maximum(rate(above.width, below.width), 0.0)
        perimeter_rate = np.maximum(rate(above.perimeter, below.perimeter), 0.0)
        # K of one subarea goes as A^(5/3) P^(-2/3). Its derivative has the sign of 5 T P - 2 A P',
        # which can only grow between two breaks: if it is not negative at the start, K rises.
        signs = 5.0 * above.width * above.perimeter - 2.0 * above.area * perimeter_rate
        rising = (signs >= 0).all(axis=1)
        if self.roughness.together:
            rising &= self._composite_rises(above, perimeter_rate)
        return _Laws(
            breaks,
            span[:, 0],
            above.area,
            above.width,
            width_rate,
            above.perimeter,
            perimeter_rate,
            above.n,
            rate(above.n, below.n),
            above.conveyance.sum(axis=1),
            below.conveyance.sum(axis=1),
            rising,
        )

    def _composite_rises(self, above: Wet, perimeter_rate: Floats) -> NDArray[np.bool_]:
        """Whether the channel's composite conveyance surely rises; the perimeters count by their n."""
        c = self.roughness.channel
        area, width = above.area[:, c].sum(axis=1), above.width[:, c].sum(axis=1)
        sure = np.ones(area.size, dtype=bool)
        for power in (0.0, 1.5) if self.roughness.composite == "horton" else (0.0, 2.0):
            weight = above.n[:, c] ** power
            around = (above.perimeter[:, c] * weight).sum(axis=1)
            growth = (perimeter_rate[:, c] * weight).sum(axis=1)
            sure &= 5.0 * width * around - 2.0 * area * growth >= 0
        if (self.roughness.shallow[c] != self.roughness.deep[c]).any():
            sure[:] = False  # the weights change with depth: no proof, so the search looks closer
        return sure

    def _between(self, index, offset: Floats) -> tuple[Floats, Floats, Floats, Floats]:
        """Area, width, perimeter and n by subarea at an offset above breaks `index`, from the closed form."""
        law, d = self.laws, offset[:, None]
        area = law.area[index] + d * (law.width[index] + 0.5 * d * law.width_rate[index])
        width = law.width[index] + d * law.width_rate[index]
        return (
            area,
            width,
            law.perimeter[index] + d * law.perimeter_rate[index],
            law.n[index] + d * law.n_rate[index],
        )

    def _total_between(self, index, offset: Floats) -> tuple[Floats, Floats]:
        """Conveyance and (close to) its derivative at an offset above breaks `index`."""
        area, width, perimeter, n = self._between(index, offset)
        k = self.roughness.conveyance(area, perimeter, n, self.constant)
        grows = self._growth(index, area, width, perimeter, n)
        return k.sum(axis=1), (k * grows).sum(axis=1)

    def _growth(self, index, area: Floats, width: Floats, perimeter: Floats, n: Floats) -> Floats:
        """Derivative of the logarithm of each subarea's conveyance with stage; 0 where it is dry."""
        p_rate, n_rate = self.laws.perimeter_rate[index], self.laws.n_rate[index]
        wet = area > 0

        def over(top: Floats, bottom: Floats, where) -> Floats:
            return np.divide(top, bottom, out=np.zeros_like(bottom), where=where)

        widens = over(width, area, wet)
        grows = 5 / 3 * widens - over(2 / 3 * p_rate, perimeter, wet) - np.where(wet, n_rate / n, 0.0)
        if self.roughness.together:
            c = self.roughness.channel
            whole, around = area[:, c].sum(axis=1), perimeter[:, c].sum(axis=1)
            under = whole > 0
            power, share = (1.5, 2 / 3) if self.roughness.composite == "horton" else (2.0, 1 / 2)
            rough = perimeter[:, c] * n[:, c] ** power
            rougher = p_rate[:, c] * n[:, c] ** power + power * rough * n_rate[:, c] / n[:, c]
            group = 2 / 3 * over(width[:, c].sum(axis=1), whole, under)
            group -= share * over(rougher.sum(axis=1), rough.sum(axis=1), under)
            group -= (2 / 3 - share) * over(p_rate[:, c].sum(axis=1), around, under)
            # each carries its share of the area at the velocity of the whole
            grows[:, c] = np.where(wet[:, c], group[:, None] + widens[:, c], 0.0)
        return grows

    def _enclosure(self, index: int, low: float, high: float) -> tuple[float, float]:
        """Bounds of the conveyance between two offsets: it grows with area and falls with perimeter and n."""
        a, _, p, n = self._between(np.array([index, index]), np.array([low, high]))
        least = self.roughness.conveyance(a[:1], p[1:], n.max(axis=0)[None], self.constant)
        most = self.roughness.conveyance(a[1:], p[:1], n.min(axis=0)[None], self.constant)
        return float(least.sum()), float(most.sum())

    def _direction(self, index: int, low: float, high: float) -> int:
        """1 where conveyance surely rises between two offsets, -1 where it surely falls, else 0."""
        if self.roughness.together:
            return 0
        law = self.laws
        a, t, p, n = self._between(np.array([index, index]), np.array([low, high]))
        p_rate, n_rate = law.perimeter_rate[index], law.n_rate[index]
        k_least = self.roughness.conveyance(a[:1], p[1:], n.max(axis=0)[None], self.constant)[0]
        k_most = self.roughness.conveyance(a[1:], p[:1], n.min(axis=0)[None], self.constant)[0]
        least = most = 0.0
        for i in range(a.shape[1]):
            if a[1, i] <= 0:
                continue
            widen = 5 / 3 * t[:, i]
            if a[0, i] <= 0 or p[0, i] <= 0:
                # water has only just come here: it can only rise, by how much is not bounded
                most = np.inf
                continue
            narrow = 2 / 3 * p_rate[i]
            smooth = -n_rate[i] / n[:, i]
            slowest = widen[0] / a[1, i] - narrow / p[0, i] + min(smooth)
            fastest = widen[1] / a[0, i] - narrow / p[1, i] + max(smooth)
            least += slowest * (k_most[i] if slowest < 0 else k_least[i])
            most += fastest * (k_most[i] if fastest > 0 else k_least[i])
        return 1 if least > 0 else -1 if most < 0 else 0

    # --- backward: every stage that carries a conveyance -------------------------------------------

    def stages_for(self, target: float, cap: float = np.inf) -> list[tuple[float, bool]]:
        """Return every stage whose conveyance is `target`, from the lowest to the highest.

        Parameters
        ----------
        target : float
            Conveyance, > 0.
        cap : float
            Stages above it are not looked at.

        Returns
        -------
        list of (stage, at_bank)
            `at_bank` is True where the stage is a bank's top: the target lies between the conveyance
            just before and just after the hollow behind it has filled.
        """
        law = self.laws
        breaks, above, below = law.breaks, law.above, law.below
        inside = breaks <= cap
        found: list[tuple[float, bool]] = []
        # where conveyance jumps up at a break, the rating is closed by the filling of the hollow
        for k in np.flatnonzero((below < target) & (target <= above) & inside):
            found.append((float(breaks[k]), bool(above[k] - below[k] > _ROUNDING * above[k])))
        reachable = breaks < cap
        ends = np.append(below[1:], np.inf)
        simple = np.flatnonzero(law.rising & (above < target) & (target <= ends) & reachable)
        if simple.size:
            spans = law.span[simple]
            if not np.isfinite(spans[-1]):
                spans = spans.copy()
                spans[-1] = self._reach_up(target)
            offsets = self._solve(simple, np.zeros(simple.size), spans, target)
            found += [(float(breaks[k] + d), False) for k, d in zip(simple, offsets, strict=True)]
        for k in np.flatnonzero(~law.rising & reachable):
            span = float(law.span[k]) if np.isfinite(law.span[k]) else self._reach_up(target)
            found += [(float(breaks[k] + d), False) for d in self._search(int(k), span, target)]
        return self._distinct([f for f in found if f[0] <= cap])

    def _distinct(self, found: list[tuple[float, bool]]) -> list[tuple[float, bool]]:
        found.sort()
        near = _ROUNDING * max(1.0, float(np.ptp(self.ground.z)))
        kept: list[tuple[float, bool]] = []
        for stage, at_bank in found:
            if kept and stage - kept[-1][0] <= near:
                kept[-1] = (kept[-1][0], kept[-1][1]) if kept[-1][1] else (stage, at_bank)
            else:
                kept.append((stage, at_bank))
        return kept

    def _reach_up(self, target: float) -> float:
        """An offset above the highest break at which the conveyance is more than `target`."""
        last, step = np.array([self.laws.breaks.size - 1]), max(1.0, float(np.ptp(self.ground.z)))
        while self._total_between(last, np.array([step]))[0][0] < target:
            step *= 2.0
        return step

    def _solve(self, index, low: Floats, high: Floats, target: float, falling: bool = False) -> Floats:
        """Offsets at which a conveyance that only rises (or falls) meets `target`: Newton within brackets."""
        low, high = low.astype(float), np.array(high, dtype=float)
        x = 0.5 * (low + high)
        for _ in range(200):
            value, slope = self._total_between(index, x)
            miss = value - target
            too_high = (miss > 0) != falling
            high, low = np.where(too_high, x, high), np.where(too_high, low, x)
            with np.errstate(divide="ignore", invalid="ignore"):
                step = x - miss / slope
            inside = np.isfinite(step) & (step > low) & (step < high)
            following = np.where(inside, step, 0.5 * (low + high))
            done = (np.abs(miss) <= 4e-16 * target) | (following == x) | (high - low <= 1e-16 * high)
            if done.all():
                break
            x = np.where(done, x, following)
        return x

    def _search(self, index: int, span: float, target: float) -> list[float]:
        """Every offset in an interval where conveyance may fall: bisected until each piece is settled."""
        found: list[float] = []
        pending = [(0.0, span, 0)]
        at = np.array([index])
        while pending:
            low, high, depth = pending.pop()
            least, most = self._enclosure(index, low, high)
            if not least <= target <= most:
                continue
            direction = self._direction(index, low, high)
            if direction or depth >= 50:
                first, last = (self._total_between(at, np.array([o]))[0][0] - target for o in (low, high))
                if first == 0:
                    found.append(low)
                elif first * last < 0 or last == 0:
                    found.append(
                        float(self._solve(at, np.array([low]), np.array([high]), target, last < 0)[0])
                    )
                continue
            middle = 0.5 * (low + high)
            pending += [(low, middle, depth + 1), (middle, high, depth + 1)]
        return found

    # --- critical flow ----------------------------------------------------------------------------

    def critical_stage(self, discharge: float, gravity: float) -> float:
        r"""Return the stage of least specific energy :math:`y + \alpha Q^2 / (2 g A^2)`.

        Parameters
        ----------
        discharge : float
            > 0.
        gravity : float

        Notes
        -----
        Chow (1959), chapter 3; alpha changes with stage and is taken into the derivative. Where
        specific energy has several minima (overbank flow) the least of all is taken.
        """
        law = self.laws
        bottom = float(law.breaks[0])
        head = discharge * discharge / (2.0 * gravity)

        def energy(stage: Floats, wet: Wet) -> Floats:
            spread = _energy_spread(wet.area, wet.conveyance)[0]
            return stage - bottom + head * spread

        ends = np.append(law.breaks, law.breaks[-1] + self._critical_reach(head))
        above = self.wet(law.breaks, passed=True)
        below = self.wet(ends)
        with np.errstate(invalid="ignore"):
            tried = np.concatenate([energy(law.breaks, above), energy(ends, below)])
        places = np.concatenate([law.breaks, ends])
        k = int(np.nanargmin(tried))
        best, where = float(tried[k]), float(places[k])
        # alpha is never below 1, so specific energy in an interval is at least that of its whole area
        area = below.area[1:].sum(axis=1)
        bound = (
            law.breaks - bottom + np.divide(head, area * area, out=np.full(area.size, np.inf), where=area > 0)
        )
        for i in np.flatnonzero(bound < best):
            span = ends[i + 1] - law.breaks[i]
            offsets = np.linspace(0.0, span, 17)
            index = np.full(offsets.size, i)
            slopes = self._energy_slope(index, offsets, head)
            for j in np.flatnonzero((slopes[:-1] < 0) & (slopes[1:] > 0)):
                low, high = float(offsets[j]), float(offsets[j + 1])
                offset = self._flat_energy(int(i), low, high, head)
                area_, _, perimeter, n = self._between(np.array([i]), np.array([offset]))
                conveyance = self.roughness.conveyance(area_, perimeter, n, self.constant)
                value = law.breaks[i] - bottom + offset + head * _energy_spread(area_, conveyance)[0][0]
                if value < best:
                    best, where = float(value), float(law.breaks[i] + offset)
        return where

    def _critical_reach(self, head: float) -> float:
        """An offset above the highest ground beyond which specific energy only rises."""
        width = self.laws.width[-1].sum()
        # above all ground alpha stays within the number of parts squared; critical depth of a
        # rectangle of the whole width with that alpha is further up than any minimum
        parts = max(1, self.ground.count) ** 2
        return float(max(1.0, np.cbrt(2.0 * head * parts / width**2)) * 2.0)

    def _energy_slope(self, index, offset: Floats, head: float) -> Floats:
        """Derivative of specific energy with stage from the closed form."""
        area, width, perimeter, n = self._between(index, offset)
        k = self.roughness.conveyance(area, perimeter, n, self.constant)
        grows = self._growth(index, area, width, perimeter, n)
        spread, terms, total = _energy_spread(area, k)
        widens = np.divide(width, area, out=np.zeros_like(area), where=area > 0)
        rate = np.divide((k * grows).sum(axis=1), total, out=np.zeros_like(total), where=total > 0)
        slope = (terms * (3.0 * (grows - rate[:, None]) - 2.0 * widens)).sum(axis=1)
        return np.where(total > 0, 1.0 + head * slope, -np.inf)

    def _flat_energy(self, index: int, low: float, high: float, head: float) -> float:
        at = np.array([index])
        if not np.isfinite(self._energy_slope(at, np.array([low]), head)[0]):
            # at the very bottom the energy is infinite: step off it
            while high - low > 0 and self._energy_slope(at, np.array([0.5 * (low + high)]), head)[0] > 0:
                high = 0.5 * (low + high)
            low = 0.5 * (low + high)
        return brentq(
            lambda offset: float(self._energy_slope(at, np.array([offset]), head)[0]),
            low, high, xtol=1e-15, rtol=8.9e-16,
        )  # fmt: skip


def _energy_spread(area: Floats, conveyance: Floats) -> tuple[Floats, Floats, Floats]:
    """alpha / A² = sum(K_i³ / A_i²) / K³, its terms, and K; infinite where there is no water."""
    total = conveyance.sum(axis=1)
    share = np.divide(conveyance, total[:, None], out=np.zeros_like(area), where=total[:, None] > 0)
    terms = np.divide(share**3, area * area, out=np.zeros_like(area), where=area > 0)
    spread = np.where(total > 0, terms.sum(axis=1), np.inf)
    return spread, terms, total
