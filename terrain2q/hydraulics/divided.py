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

from terrain2q.hydraulics.conveyance import manning_conveyance
from terrain2q.hydraulics.wetted import Ground

Floats = NDArray[np.float64]

_ROUNDING = 1e-12
"""Two conveyances, or two stages above the lowest ground, that differ by less are the same number."""

_HALVINGS = 50
"""How often an interval in which conveyance turns is halved at most: down to rounding."""

_SAMPLES = 17
"""Points of an interval at which the slope of specific energy is looked at for turns."""


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
        depth = np.zeros((stage.size, self.ground.count))
        for i, (thresholds, lowest) in self._lowest_reached.items():
            reached = np.searchsorted(thresholds, stage, side="right" if passed else "left")
            depth[:, i] = np.maximum(stage - np.append(np.inf, lowest)[reached], 0.0)
        return depth

    @cached_property
    def _lowest_reached(self) -> dict[int, tuple[Floats, Floats]]:
        """For each subarea whose n asks for depth: stages, and the lowest ground reached from each on."""
        ground, rough, found = self.ground, self.roughness, {}
        for i in np.flatnonzero(rough.shallow != rough.deep):
            mine = np.flatnonzero(ground.owner == i)
            order = mine[np.argsort(ground.threshold[mine], kind="stable")]
            found[int(i)] = ground.threshold[order], np.minimum.accumulate(ground.low[order])
        return found

    def total(self, stage: float, *, passed: bool = False) -> float:
        """Return the whole conveyance at one stage."""
        return float(self.wet(np.array([stage]), passed=passed).conveyance.sum())

    # --- the closed form between breaks ------------------------------------------------------------

    @cached_property
    def breaks(self) -> Floats:
        """Stages between which conveyance has one closed form."""
        found = self.ground.breaks
        if self.roughness.varies:
            rough, extra = self.roughness, [found]
            for i, (_, lowest) in self._lowest_reached.items():
                extra += [np.unique(lowest) + d[i] for d in (rough.shallow_depth, rough.deep_depth)]
            found = np.unique(np.concatenate(extra))
        return found

    @cached_property
    def _at_breaks(self) -> tuple[Wet, Wet]:
        """Hydraulics just above and just below every break."""
        before = self.ground.wetted(self.breaks)
        after = self.ground.just_after(self.breaks, before)
        return (
            self._with_conveyance(*after, self._depth(self.breaks, True)),
            self._with_conveyance(*before, self._depth(self.breaks, False)),
        )

    @cached_property
    def laws(self) -> _Laws:
        """The closed form between all breaks."""
        breaks = self.breaks
        above, below = self._at_breaks
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
        """Return the derivative of each subarea's log conveyance with stage; 0 where it is dry."""
        p_rate, n_rate = self.laws.perimeter_rate[index], self.laws.n_rate[index]
        widens = _over(width, area)
        grows = 5 / 3 * widens - _over(2 / 3 * p_rate, perimeter)
        if self.roughness.varies:
            grows -= n_rate / n
        grows[area <= 0] = 0.0
        if self.roughness.together:
            c = self.roughness.channel
            power, share = (1.5, 2 / 3) if self.roughness.composite == "horton" else (2.0, 1 / 2)
            rough = perimeter[:, c] * n[:, c] ** power
            rougher = p_rate[:, c] * n[:, c] ** power + power * rough * n_rate[:, c] / n[:, c]
            group = 2 / 3 * _over(width[:, c].sum(axis=1), area[:, c].sum(axis=1))
            group -= share * _over(rougher.sum(axis=1), rough.sum(axis=1))
            group -= (2 / 3 - share) * _over(p_rate[:, c].sum(axis=1), perimeter[:, c].sum(axis=1))
            # each carries its share of the area at the velocity of the whole
            grows[:, c] = np.where(area[:, c] > 0, group[:, None] + widens[:, c], 0.0)
        return grows

    def _bounds(self, index, low: Floats, high: Floats) -> tuple[Floats, Floats, NDArray[np.bool_]]:
        """Bounds of the conveyance between two offsets, and whether it surely only rises or only falls there.

        Conveyance grows with area and falls with perimeter and n, each of which is known at both ends.
        """
        a_low, t_low, p_low, n_low = self._between(index, low)
        a_high, t_high, p_high, n_high = self._between(index, high)
        p_rate, n_rate = self.laws.perimeter_rate[index], self.laws.n_rate[index]
        least = self.roughness.conveyance(a_low, p_high, n_low, self.constant)
        most = self.roughness.conveyance(a_high, p_low, n_high, self.constant)
        # the derivative of each logarithm, at its least and at its most; n only falls with stage
        slowest = _over(5 / 3 * t_low, a_high) - _over(2 / 3 * p_rate, p_low) - n_rate / n_low
        fastest = _over(5 / 3 * t_high, a_low) - _over(2 / 3 * p_rate, p_high) - n_rate / n_high
        fresh = (a_low <= 0) | (p_low <= 0)
        # where water has only just come conveyance rises, by how much is not bounded
        slowest, fastest = np.where(fresh, 0.0, slowest), np.where(fresh, np.inf, fastest)
        parts = [(least, most, slowest, fastest)]
        if self.roughness.together:
            c = self.roughness.channel
            alone = np.setdiff1d(np.arange(a_low.shape[1]), c)
            group = self._group_growth(
                *(v[:, c] for v in (a_low, t_low, p_low, n_low, a_high, t_high, p_high, n_high)),
                p_rate[:, c],
                n_rate[:, c],
            )
            parts = [
                tuple(v[:, alone] for v in parts[0]),
                (least[:, c].sum(axis=1)[:, None], most[:, c].sum(axis=1)[:, None], *group),
            ]
        lower = upper = 0.0
        for k_least, k_most, slow, fast in parts:
            wet = k_most > 0
            slow, fast = np.where(wet, slow, 0.0), np.where(wet, fast, 0.0)
            lower = lower + (slow * np.where(slow < 0, k_most, k_least)).sum(axis=1)
            upper = upper + (fast * np.where(fast > 0, np.where(wet, k_most, 1.0), k_least)).sum(axis=1)
        return least.sum(axis=1), most.sum(axis=1), (lower > 0) | (upper < 0)

    def _group_growth(self, a_low, t_low, p_low, n_low, a_high, t_high, p_high, n_high, p_rate, n_rate):
        """Bounds of the derivative of the logarithm of the composite conveyance, each shape (rows, 1)."""

        def whole(values: Floats) -> Floats:
            return values.sum(axis=1, keepdims=True)

        power, share = (1.5, 2 / 3) if self.roughness.composite == "horton" else (2.0, 1 / 2)
        # perimeters weighted with roughness: bounds of their sum and of its growth
        thin, thick = whole(p_low * n_high**power), whole(p_high * n_low**power)
        grows_most = whole(p_rate * n_low**power + power * p_low * n_high ** (power - 1) * n_rate)
        grows_least = whole(p_rate * n_high**power + power * p_high * n_low ** (power - 1) * n_rate)
        slowest = 5 / 3 * _over(whole(t_low), whole(a_high))
        slowest -= share * _over(grows_most, np.where(grows_most > 0, thin, thick))
        slowest -= (2 / 3 - share) * _over(whole(p_rate), whole(p_low))
        fastest = 5 / 3 * _over(whole(t_high), whole(a_low))
        fastest -= share * _over(grows_least, np.where(grows_least > 0, thick, thin))
        fastest -= (2 / 3 - share) * _over(whole(p_rate), whole(p_high))
        fresh = (whole(a_low) <= 0) | (whole(p_low) <= 0)
        # with n constant it can only rise at first; where n changes that is not proven
        return np.where(fresh, -np.inf if (n_rate != 0).any() else 0.0, slowest), np.where(
            fresh, np.inf, fastest
        )

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
        return self.stages_for_each(np.array([target], dtype=float), cap)[0]

    def stages_for_each(self, targets: Floats, cap: float = np.inf) -> list[list[tuple[float, bool]]]:
        """Return :meth:`stages_for` of each of several conveyances, found together."""
        law = self.laws
        wanted = targets[:, None]
        # Conveyance is followed through all breaks, just below and just above each, so that every
        # passage from less than the target to the target or more, or back, lies in one step.
        short_below, short_above = law.below < wanted, law.above < wanted
        jump, k = np.nonzero(short_below & ~short_above & (law.breaks <= cap))
        at_bank = law.above[k] - law.below[k] > _ROUNDING * law.above[k]
        found = [(jump, law.breaks[k], at_bank)]
        # a target may touch a peak or a trough at a break without passing it, or miss it by rounding
        near = (np.abs(law.below - wanted) <= _ROUNDING * wanted) & (law.breaks <= cap)
        peak = ~law.rising | (law.above < law.below * (1.0 - _ROUNDING))
        trough = np.append(False, ~law.rising[:-1])
        row, k = np.nonzero(near & ((short_below & short_above & peak) | (~short_below & trough)))
        found.append((row, law.breaks[k], np.zeros(k.size, dtype=bool)))
        short_end = np.append(short_below[:, 1:], np.zeros((targets.size, 1), dtype=bool), axis=1)
        reachable = law.breaks < cap
        spans = np.broadcast_to(law.span, short_above.shape)
        if reachable[-1]:
            spans = spans.copy()
            spans[:, -1] = self._reach_up(targets.max(initial=0.0))
        row, k = np.nonzero(short_above & ~short_end & law.rising & reachable)
        pieces = [(row, k, np.zeros(k.size), spans[row, k], np.zeros(k.size, dtype=bool))]
        turning = np.flatnonzero(~law.rising & reachable)
        if turning.size:
            row, k = (v.ravel() for v in np.meshgrid(np.arange(targets.size), turning, indexing="ij"))
            pieces += self._search(row, k, spans[row, k], targets)
        row, k, low, high, falling = (np.concatenate(v) for v in zip(*pieces, strict=True))
        if row.size:
            stages = law.breaks[k] + self._solve(k, low, high, targets[row], falling)
            # rounding must not carry a stage over a break, where conveyance may jump
            stages = np.maximum(stages, np.nextafter(law.breaks[k], np.inf))
            stages = np.minimum(stages, np.append(law.breaks[1:], np.inf)[k])
            found.append((row, stages, np.zeros(row.size, dtype=bool)))
        row, stages, at_bank = (np.concatenate(v) for v in zip(*found, strict=True))
        out: list[list[tuple[float, bool]]] = [[] for _ in targets]
        for i, stage, bank in zip(row.tolist(), stages.tolist(), at_bank.tolist(), strict=True):
            if stage <= cap:
                out[i].append((stage, bank))
        return [self._distinct(one) for one in out]

    def _distinct(self, found: list[tuple[float, bool]]) -> list[tuple[float, bool]]:
        found.sort()
        near = _ROUNDING * max(1.0, float(np.ptp(self.ground.z)))
        kept: list[tuple[float, bool]] = []
        for stage, at_bank in found:
            if kept and stage - kept[-1][0] <= near:
                if at_bank:
                    kept[-1] = (stage, at_bank)
            else:
                kept.append((stage, at_bank))
        return kept

    def _reach_up(self, target: float) -> float:
        """Return an offset above the highest break at which the conveyance is not less than `target`."""
        last, step = np.array([self.laws.breaks.size - 1]), max(1.0, float(np.ptp(self.ground.z)))
        while self._total_between(last, np.array([step]))[0][0] < target:
            step *= 2.0
        return step

    def _solve(self, index, low: Floats, high: Floats, target: Floats, falling) -> Floats:
        """Offsets at which conveyances that only rise (or fall) meet `target`: Newton within brackets."""
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

    def _search(self, row, index, span: Floats, targets: Floats) -> list[tuple]:
        """Pieces of intervals where conveyance may fall, each with one stage: halved until all are settled.

        Returns
        -------
        list of (row, index, low, high, falling)
            Arrays: row of the target, interval, offsets about the stage, and which way conveyance goes.
        """
        law = self.laws
        low, high = np.zeros(index.size), span
        first, last = law.above[index], np.append(law.below[1:], np.inf)[index]
        pieces = []
        for depth in range(_HALVINGS + 1):
            least, most, settled = self._bounds(index, low, high)
            target = targets[row]
            # the ends count too: they decide to which side of a break a target belongs
            kept = (np.minimum(least, np.minimum(first, last)) <= target) & (
                target <= np.maximum(most, np.maximum(first, last))
            )
            crosses = (first < target) != (last < target)
            if depth == _HALVINGS:
                settled[:] = True
            take = kept & settled & crosses
            pieces.append((row[take], index[take], low[take], high[take], last[take] < target[take]))
            split = kept & ~settled
            if not split.any():
                break
            row, index, low, high, first, last = (v[split] for v in (row, index, low, high, first, last))
            middle = 0.5 * (low + high)
            value = self._total_between(index, middle)[0]
            row, index = np.tile(row, 2), np.tile(index, 2)
            low, high = np.concatenate([low, middle]), np.concatenate([middle, high])
            first, last = np.concatenate([first, value]), np.concatenate([value, last])
        return pieces

    # --- critical flow ----------------------------------------------------------------------------

    def critical_stages(self, discharge: Floats, gravity: float) -> Floats:
        r"""Return the stages of least specific energy :math:`y + \alpha Q^2 / (2 g A^2)`.

        Parameters
        ----------
        discharge : ndarray, shape (k,)
            > 0.
        gravity : float

        Notes
        -----
        Chow (1959), chapter 3; alpha changes with stage and is taken into the derivative. Where
        specific energy has several minima (overbank flow) the least of all is taken.
        """
        law = self.laws
        height = law.breaks - law.breaks[0]
        head = discharge * discharge / (2.0 * gravity)
        # above all ground, as far up as a minimum can be
        top = np.full(head.size, height.size - 1)
        reach = self._critical_reach(head)
        area_top, _, perimeter_top, n_top = self._between(top, reach)
        spread_top = _energy_spread(
            area_top, self.roughness.conveyance(area_top, perimeter_top, n_top, self.constant)
        )[0]
        just_above, just_below, least = self._energy_at_breaks
        tried = np.column_stack([
            height + head[:, None] * just_above,
            height[1:] + head[:, None] * just_below[1:],
            height[-1] + reach + head * spread_top,
        ])  # fmt: skip
        places = np.column_stack([
            np.broadcast_to(law.breaks, (head.size, height.size)),
            np.broadcast_to(law.breaks[1:], (head.size, height.size - 1)),
            law.breaks[-1] + reach,
        ])  # fmt: skip
        # the least inside an interval is sought only where its bound leaves room for it
        bound = np.column_stack([
            height[:-1] + head[:, None] * least,
            height[-1] + head / area_top.sum(axis=1) ** 2,
        ])  # fmt: skip
        row, index = np.nonzero(bound < tried.min(axis=1)[:, None])
        span = np.where(index == height.size - 1, reach[row], law.span[index])
        part = np.linspace(0.0, 1.0, _SAMPLES)
        offsets = part * span[:, None]
        slopes = self._energy_slope(
            np.repeat(index, _SAMPLES), offsets.ravel(), np.repeat(head[row], _SAMPLES)
        ).reshape(offsets.shape)
        inside, j = np.nonzero((slopes[:, :-1] < 0) & (slopes[:, 1:] > 0))
        if inside.size:
            row, index = row[inside], index[inside]
            offset = self._flat_energy(
                index, offsets[inside, j], offsets[inside, j + 1],
                slopes[inside, j], slopes[inside, j + 1], head[row],
            )  # fmt: skip
            area, _, perimeter, n = self._between(index, offset)
            conveyance = self.roughness.conveyance(area, perimeter, n, self.constant)
            energy = height[index] + offset + head[row] * _energy_spread(area, conveyance)[0]
            found = np.full((head.size, inside.size), np.inf)
            found[row, np.arange(inside.size)] = energy
            tried = np.column_stack([tried, found])
            stages = law.breaks[index] + offset
            places = np.column_stack([places, np.broadcast_to(stages, found.shape)])
        return places[np.arange(head.size), tried.argmin(axis=1)]

    @cached_property
    def _energy_at_breaks(self) -> tuple[Floats, Floats, Floats]:
        """Return alpha / A² just above and below each break, and its lower bound up to the next break."""
        above, below = self._at_breaks
        index = np.arange(self.breaks.size - 1)
        area_low, _, perimeter_low, n_low = self._between(index, np.zeros(index.size))
        area, _, perimeter, n = self._between(index, self.laws.span[:-1])
        slow = self.roughness.conveyance(area_low, perimeter, n_low, self.constant)
        fast = self.roughness.conveyance(area, perimeter_low, n, self.constant).sum(axis=1)[:, None]
        by_share = _over(_over(slow, np.broadcast_to(fast, slow.shape)) ** 3, area * area).sum(axis=1)
        whole = area.sum(axis=1)
        by_area = np.divide(1.0, whole * whole, out=np.full(whole.size, np.inf), where=whole > 0)
        return (
            _energy_spread(above.area, above.conveyance)[0],
            _energy_spread(below.area, below.conveyance)[0],
            np.maximum(by_share, by_area),  # alpha is never below 1
        )

    def _critical_reach(self, head: Floats) -> Floats:
        """Offsets above the highest ground beyond which specific energy only rises."""
        width = self.laws.width[-1].sum()
        # above all ground alpha stays within the number of parts squared; critical depth of a
        # rectangle of the whole width with that alpha is further up than any minimum
        parts = max(1, self.ground.count) ** 2
        return np.maximum(1.0, np.cbrt(2.0 * head * parts / width**2)) * 2.0

    def _energy_slope(self, index, offset: Floats, head: Floats) -> Floats:
        """Return the derivative of specific energy with stage, from the closed form."""
        area, width, perimeter, n = self._between(index, offset)
        k = self.roughness.conveyance(area, perimeter, n, self.constant)
        grows = self._growth(index, area, width, perimeter, n)
        _, terms, total = _energy_spread(area, k)
        widens = _over(width, area)
        rate = _over((k * grows).sum(axis=1), total)
        slope = (terms * (3.0 * (grows - rate[:, None]) - 2.0 * widens)).sum(axis=1)
        return np.where(total > 0, 1.0 + head * slope, -np.inf)

    def _flat_energy(self, index, low, high, at_low, at_high, head: Floats) -> Floats:
        """Offsets at which specific energy turns from falling to rising: secants within brackets."""
        kept = np.zeros(low.size)  # which end the last step has kept
        x = low
        for _ in range(200):
            before = x
            with np.errstate(invalid="ignore"):
                secant = high - at_high * (high - low) / (at_high - at_low)
            middle = 0.5 * (low + high)
            # at the very bottom energy falls without bound, and a secant says nothing
            x = np.where(np.isfinite(at_low) & (secant > low) & (secant < high), secant, middle)
            value = self._energy_slope(index, x, head)
            falls = value < 0
            # an end that stays twice counts half (the Illinois rule), so that both ends close in
            at_high = np.where(falls, np.where(kept == 1, 0.5 * at_high, at_high), value)
            at_low = np.where(falls, value, np.where(kept == -1, 0.5 * at_low, at_low))
            low, high = np.where(falls, x, low), np.where(falls, high, x)
            kept = np.where(falls, 1, -1)
            if ((value == 0) | (np.minimum(high - low, np.abs(x - before)) <= 4e-16 * high)).all():
                break
        return x


def _over(top: Floats, bottom: Floats) -> Floats:
    """Return a quotient, 0 where the divisor is not above 0."""
    return np.divide(top, bottom, out=np.zeros_like(bottom), where=bottom > 0)


def _energy_spread(area: Floats, conveyance: Floats) -> tuple[Floats, Floats, Floats]:
    """Return alpha / A² = sum(K_i³ / A_i²) / K³, infinite where there is no water, its terms, and K."""
    total = conveyance.sum(axis=1)
    share = np.divide(conveyance, total[:, None], out=np.zeros_like(area), where=total[:, None] > 0)
    terms = np.divide(share**3, area * area, out=np.zeros_like(area), where=area > 0)
    spread = np.where(total > 0, terms.sum(axis=1), np.inf)
    return spread, terms, total
