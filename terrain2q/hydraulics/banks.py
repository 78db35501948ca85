"""Tops of bank of a stream channel, found from the shape of the ground alone."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from terrain2q.errors import NoAnswerError, ProfileError
from terrain2q.hydraulics.wetted import Floats, check_profile

# All constants are pure numbers: lengths enter only as ratios, so feet and metres give one answer.
_INNER, _OUTER = 0.2, 0.4
"""How far inside and outside of a top the ground is looked at, in widths between the tops."""
_STEEPEST = 0.7
"""A bank that gains this share of its height inside is as steep as it can be."""
_LOW_BENCH, _HIGH_BENCH, _WIDEST_BENCH = 0.1, 0.4, 0.5
"""The benches: ground outside of a top, up to these shares of its height above it; so many widths at most."""
_KNEE = 0.8
"""Outside of a top the ground climbs at less than this share of its slope inside."""
_STEEP, _CLIMB, _LOW, _HIGH, _END = 2.0, 0.5, 1.0, 1.5, 0.5
"""Weights of the terms of the score against its logarithms."""
_ASTRAY = 4.0
"""What each channel's width between the origin and a channel's low point costs."""
_DEEPER = 3.0
"""A channel beside the origin counts only where it is this much deeper than any that holds the origin."""
_LEAST_EVEN, _EVEN, _MOSTLY = 15, 0.2, 0.75
"""Noise is told in so many points at least, of whose steps this last share are near (a share) the median."""
_LAGS = (1, 3)
"""Points apart between which noise is told: interpolated from a raster, it is alike from one to the next."""
_TOGETHER = 5
"""Points whose mean is looked at where noise is told."""
_STANDS_OUT, _LITTLE = 3.5, 0.1
"""A shelf stands out of a hollow by more than so many times the noise, or by this share of the depth."""
_SAME = 1e-9
"""Differences of this share are rounding."""
_MOST_TOPS, _MOST_PITS = 80, 6
"""Tops on one side, and low points beside an origin, that are looked at; more are only found in noise."""


@dataclass(frozen=True)
class Banks:
    """The tops of a channel's two banks.

    Attributes
    ----------
    left, right : float
        Stations of the tops of bank.
    stage : float
        The elevation of the lower of the two tops: the bankfull stage.
    """

    left: float
    right: float
    stage: float


def find_banks(stations: ArrayLike, elevations: ArrayLike, origin: float | None = None) -> Banks:
    r"""Find a stream channel's tops of bank in a profile.

    Of all pairs of ground that could be the two tops, the pair is taken that is deep for its width, even,
    steep inside and flat outside.

    Parameters
    ----------
    stations, elevations : array_like, shape (m,)
        Left to right, in one unit of length; two equal stations make a vertical face. Any unit: only
        ratios of lengths count.
    origin : float, optional
        The station where the stream crosses; it may lie beside the low point or on the bank. Without it
        the channel is about the lowest ground of the section.

    Returns
    -------
    Banks
        Stations of the two tops, which are points of the profile, and the elevation of the lower one.

    Raises
    ------
    ProfileError
        ``station-decreases``, ``profile-too-short``, ``number-not-finite``, or ``station-outside`` for
        an `origin` off the profile.
    NoAnswerError
        No channel can be told apart: flat ground, a slope that falls all the way, the low point at an
        end of the section.

    Notes
    -----
    The rule, for one low point at elevation :math:`z_0`:

    1. *Tops.* Walk outward from the low point. A point is a possible top when it is higher than all
       ground passed and convex: the ground rises less steeply behind it than before it. The section's
       end is one when it is higher than all ground passed.
    2. *Pairs.* For every pair of a left and a right top let :math:`W` be the width between them and
       :math:`h` each one's height above :math:`z_0`. On each side,

       - *gain* :math:`g`: the top less the mean ground over the :math:`0.2\,W` inside of it, over :math:`h`;
       - *climb* :math:`c`: the mean ground over the :math:`0.4\,W` outside of it less the top, over
         :math:`h`. Beyond its end the section goes on as its own image through the end point;
       - *low bench* :math:`b` and *high bench* :math:`B`: how far the ground outside stays below the top
         plus :math:`0.1\,h` and plus :math:`0.4\,h`, to the section's end at most, over :math:`W`; bench
         indices in the sense of Riley (1972).

       A pair is passed over when the ground outside of a top that is not the section's end climbs at
       more than 0.8 of the slope inside (:math:`c / 0.4 > 0.8\, g / 0.2`): that bank has not ended yet;
       and when the ground inside of such a top is no lower than the top (:math:`g \le 0`).
    3. *Score.* The pair with the highest

       .. math:: \ln\frac{h_l h_r}{W} - \ln^2\frac{h_l}{h_r} + \sum_{l, r} \left(2 \min(g, 0.7)
                 - \frac{\max(c, 0)}{2} + \min(b, 0.5) + \frac{3}{2} \min(B, 0.5) - \frac{e}{2}\right)

       is the channel, with :math:`e` = 1 for a top that is the section's end, else 0. Of equal pairs
       the outermost tops count.

    *No bank at all.* The sides of a V or of a trapezoid rise evenly, or ever more steeply, from the bed to
    the ends of the section, which are its only tops. In noise each point that sticks out of such a side
    looks like the top of a bank. So this is asked first where a profile shows its noise, as evenly spaced
    points do: :math:`\sigma` is 1.4826 times the median of their absolute second differences, over
    :math:`\sqrt 6`, from one point to the next or to the third, whichever is more. Where the means of five
    points lie nowhere higher above the largest convex line below them than :math:`3.5\,\sigma`, or 0.1 of
    the depth if that is less, the section's ends are the tops.

    The first term is Wolman's (1955) least ratio of width to depth, with one more power of depth: a V,
    whose ratio is the same at every stage, is filled to the highest. The tops need not be level.

    *With an origin* the low points tried are those that can be seen from it: going left and right, the
    bottom of each hollow that is lower than all ground on the way there (at most six, those shut off from
    the next by the highest ground). Each one's score is lowered by four times its distance from the
    origin in widths of its channel. A channel that holds the origin in its lower half goes before one
    that lies beside it, unless that is more than three times as deep: the stream may be drawn beside its
    channel, but when it is drawn on a bed it is not in the hollow behind the bank. So a channel that lies
    higher than its flood plain is kept.

    *How good it is.* The form of the rule and its round weights were chosen on half of the sites of 77 stream
    sections surveyed and classed by the US Geological Survey (Smith Creek, Virginia; channels 4 to 45 m
    wide). Within 15 % of the surveyed width lay 67 of 78 tops (86 %) there and 62 of 76 (82 %) on the other
    half, against 55 % and 67 % by the least ratio alone; at 1 m stations with 5 cm of noise 81 % and 77 %.
    The second number was looked at twice: a first form with one bench gave 58 of 76 (76 %). It is one
    stream; ``tests/benchmarks/bank_tops.py`` repeats the count for any such table.

    *Where it errs.* A low bench within the channel, or the rounded shoulder of a bank, may be taken for
    the top. Where a section reaches up over steep valley sides on to flat ground, the valley itself is a
    deep, steep trench and may be taken for the channel: end the line on the valley side.

    References
    ----------
    Wolman, M. G. (1955), The natural channel of Brandywine Creek, Pennsylvania. US Geological Survey
    Professional Paper 271.
    Riley, S. J. (1972), A comparison of morphometric measures of bankfull. Journal of Hydrology 17.

    Examples
    --------
    A bed 4 m wide, banks 1:1 and 2 m high, and flat flood plains:

    >>> find_banks([0, 30, 32, 36, 38, 68], [2, 2, 0, 0, 2, 2])
    Banks(left=30.0, right=38.0, stage=2.0)
    """
    x, z = check_profile(stations, elevations)
    if origin is not None:
        if not np.isfinite(origin):
            raise ProfileError("number-not-finite", f"origin {origin}", where="origin")
        if not x[0] <= origin <= x[-1]:
            raise ProfileError(
                "station-outside", f"origin {origin:g} lies outside {x[0]:g} to {x[-1]:g}", where="origin"
            )
    x, z = _without_repeats(x, z)
    middle = x[0] + (x[-1] - x[0]) / 2
    ground = _Ground(x - middle, z - z.min())
    if z.max() - z.min() <= _SAME * np.abs(z).max():
        raise _no_channel(f"the ground is flat at elevation {z[0]:g}")
    if is_hollow(x, z):
        return Banks(float(x[0]), float(x[-1]), float(min(z[0], z[-1])))
    if origin is None:
        pits = _lowest(ground.z)
    else:
        pits = _beside(ground, float(origin) - middle)

    found = [(pit, tops) for pit in pits if (tops := _best_tops(ground, pit)) is not None]
    if origin is not None:
        found = _about(ground, origin - middle, found)
    best = max((score for _, (score, _, _) in found), default=-np.inf)
    answers = [(left, right) for _, (score, left, right) in found if score >= best - _SAME]
    if not answers:
        low = x[pits[0][0]]
        raise _no_channel(f"the ground does not rise on both sides of the low point at station {low:g}")
    # Channels that are equally good (two alike, side by side) are one: no side is preferred.
    left, right = min(left for left, _ in answers), max(right for _, right in answers)
    return Banks(float(x[left]), float(x[right]), float(min(z[left], z[right])))


def noise_of(x: Floats, z: Floats) -> float:
    """Return the standard deviation of the noise in a profile; 0 where it cannot be told.

    Of points spaced evenly, as ground is sampled from a raster, few are corners of the ground's shape.
    Surveyed points are put on the corners, and say nothing about noise.
    """
    run = np.diff(x)
    step = np.median(run)
    if x.size < _LEAST_EVEN or np.count_nonzero(np.abs(run - step) <= _EVEN * step) < _MOSTLY * run.size:
        return 0.0
    bends = (z[2 * lag :] - 2.0 * z[lag:-lag] + z[: -2 * lag] for lag in _LAGS)
    return float(1.4826 / np.sqrt(6.0) * max(np.median(np.abs(bend)) for bend in bends))


def is_hollow(x: Floats, z: Floats) -> bool:
    """Whether a profile is one hollow without a shelf: convex from end to end, but for its noise."""
    noise = noise_of(x, z)
    if noise <= _SAME * np.ptp(z):
        return False
    share = np.full(_TOGETHER, 1 / _TOGETHER)
    x, z = (np.convolve(values - values[0], share, mode="valid") for values in (x, z))
    depth = min(z[0], z[-1]) - z.min()
    if depth <= _STANDS_OUT * noise:
        return False
    most = min(_STANDS_OUT * noise, _LITTLE * depth)
    # the largest convex line below the points: its corners
    corners = [0]
    for k in range(1, x.size):
        while len(corners) > 1:
            i, j = corners[-2:]
            if (z[j] - z[i]) * (x[k] - x[j]) < (z[k] - z[j]) * (x[j] - x[i]):
                break
            corners.pop()
        corners.append(k)
    return bool((z - np.interp(x, x[corners], z[corners])).max() <= most)


def _about(ground: _Ground, origin: float, found: list) -> list:
    """Return those channels that the stream at `origin` can be in, marked down by their distance from it."""
    x, z = ground.x, ground.z
    here = float(np.interp(origin, x, z))
    inside, beside = [], []
    for pit, (score, left, right) in found:
        low = np.clip(origin, x[pit[0]], x[pit[1]])
        score -= _ASTRAY * abs(origin - low) / (x[right] - x[left])
        depth = min(z[left], z[right]) - z[pit[0]]
        holds = x[left] <= origin <= x[right] and here - z[pit[0]] <= 0.5 * depth
        (inside if holds else beside).append((depth, (pit, (score, left, right))))
    kept = []
    for depth, channel in beside:
        _, (_, left, right) = channel
        # two channels side by side, of which the stream is drawn on the bed of one
        rivals = [d for d, (_, (_, i, j)) in inside if right <= i or j <= left]
        if not rivals or depth > _DEEPER * max(rivals):
            kept.append((depth, channel))
    return [channel for _, channel in inside + kept]


def _no_channel(what: str) -> NoAnswerError:
    return NoAnswerError(
        f"no channel can be told apart: {what}",
        where="profile",
        fix="lengthen the line to higher ground on both sides, give the station where the stream crosses, "
        "or draw the channel as a polygon",
    )


def _without_repeats(x: Floats, z: Floats) -> tuple[Floats, Floats]:
    """Drop points that repeat the one before."""
    keep = np.r_[True, (np.diff(x) > 0) | (np.diff(z) != 0)]
    return x[keep], z[keep]


class _Ground:
    """A profile and what is asked of it again and again. Heights count from the lowest ground of all."""

    def __init__(self, x: Floats, z: Floats) -> None:
        self.x, self.z = x, z
        self.least_height = _SAME * z.max()
        # Beyond its ends the ground goes on as its own image through the end point: a straight slope
        # stays straight, and an end of the section is no break in slope by itself.
        self._x = np.concatenate([2 * x[0] - x[:0:-1], x, 2 * x[-1] - x[-2::-1]])
        long = np.concatenate([2 * z[0] - z[:0:-1], z, 2 * z[-1] - z[-2::-1]])
        run = np.diff(self._x)
        self._z = long
        self._slope = np.divide(np.diff(long), run, out=np.zeros_like(run), where=run > 0)
        self._area = np.concatenate([[0.0], np.cumsum(run * (long[1:] + long[:-1]) / 2)])

    def area(self, at: Floats) -> Floats:
        """Return the area under the ground from a fixed start to each station."""
        k = np.clip(np.searchsorted(self._x, at, side="right") - 1, 0, self._x.size - 2)
        run = at - self._x[k]
        return self._area[k] + run * (self._z[k] + self._slope[k] * run / 2)


@dataclass(frozen=True)
class _Side:
    """What one side of a low point offers as tops of bank, outward."""

    points: Floats  # indices into the profile
    height: Floats  # above the low point
    low_bench: Floats  # how far outward the ground stays below the top and a little of its height
    high_bench: Floats  # the same for more of its height
    is_end: Floats  # the section ends here


def _side(ground: _Ground, start: int, step: int) -> _Side | None:
    """Collect the tops outward of a low point: higher than all ground passed, and convex."""
    path = np.arange(start, -1, -1) if step < 0 else np.arange(start, ground.x.size)
    d, h = np.abs(ground.x[path] - ground.x[start]), ground.z[path] - ground.z[start]
    highest = np.maximum.accumulate(h)
    run, rise = np.diff(d), np.diff(h)
    inner, outer = rise[:-1] * run[1:], rise[1:] * run[:-1]
    convex = inner - outer > 1e-6 * (np.abs(inner) + np.abs(outer))
    k = np.flatnonzero((rise > 0) & (h[1:] > highest[:-1] + ground.least_height) & np.r_[convex, True]) + 1
    if k.size == 0:
        return None
    low, high = (_bench(d, h, highest, k, share) for share in (_LOW_BENCH, _HIGH_BENCH))
    if k.size > _MOST_TOPS:
        widest = np.argsort(-low / d[k], kind="stable")[:_MOST_TOPS]
        kept = np.union1d(widest, k.size - 1)
        k, low, high = k[kept], low[kept], high[kept]
    return _Side(path[k], h[k], low, high, k == d.size - 1)


def _bench(d: Floats, h: Floats, highest: Floats, k: Floats, share: float) -> Floats:
    """Return how far outward of each top the ground stays below the top and a share of its height."""
    limit = (1 + share) * h[k] * (1 - _SAME)  # ground just as high has been reached, in any unit
    beyond = np.searchsorted(highest, limit)
    last = np.minimum(beyond, d.size - 1)
    climb = h[last] - h[last - 1]
    part = np.divide(limit - h[last - 1], climb, out=np.ones_like(climb), where=climb > 0)
    reach = np.where(beyond < d.size, d[last - 1] + part * (d[last] - d[last - 1]), d[-1])
    return reach - d[k]


def _terms(ground: _Ground, pit: tuple[int, int]):
    """Return the terms of the score of every pair of tops, and which pairs can be a channel."""
    left, right = _side(ground, pit[0], -1), _side(ground, pit[1], 1)
    if left is None or right is None:
        return None
    xl, xr = ground.x[left.points][:, None], ground.x[right.points][None, :]
    hl, hr = left.height[:, None], right.height[None, :]
    base = ground.z[pit[0]]
    width = xr - xl
    allowed = width > 0
    width = np.where(allowed, width, 1.0)
    inner, outer = _INNER * width, _OUTER * width
    to_left, to_right = ground.area(xl), ground.area(xr)
    # Mean height of the ground inside below the top and outside above it, in heights of the bank.
    gain_left = 1 - ((ground.area(xl + inner) - to_left) / inner - base) / hl
    gain_right = 1 - ((to_right - ground.area(xr - inner)) / inner - base) / hr
    climb_left = ((to_left - ground.area(xl - outer)) / outer - base) / hl - 1
    climb_right = ((ground.area(xr + outer) - to_right) / outer - base) / hr - 1
    for gain, climb, is_end in (
        (gain_left, climb_left, left.is_end[:, None]),
        (gain_right, climb_right, right.is_end[None, :]),
    ):
        # a share of rounding either way, so that a unit of length does not decide an even case
        allowed &= is_end | ((gain > _SAME) & (climb / _OUTER < _KNEE * gain / _INNER + _SAME))
    terms = (
        np.log(hl * hr / width),
        np.log(hl / hr) ** 2,
        np.minimum(gain_left, _STEEPEST) + np.minimum(gain_right, _STEEPEST),
        np.maximum(climb_left, 0) + np.maximum(climb_right, 0),
        np.minimum(left.low_bench[:, None] / width, _WIDEST_BENCH)
        + np.minimum(right.low_bench[None, :] / width, _WIDEST_BENCH),
        np.minimum(left.high_bench[:, None] / width, _WIDEST_BENCH)
        + np.minimum(right.high_bench[None, :] / width, _WIDEST_BENCH),
        left.is_end[:, None] * 1.0 + right.is_end[None, :],
    )
    return terms, allowed, left.points, right.points


def _best_tops(ground: _Ground, pit: tuple[int, int]) -> tuple[float, int, int] | None:
    """Return the score and the points of the best pair of tops about a low point."""
    found = _terms(ground, pit)
    if found is None:
        return None
    (size, unlike, steep, climb, low, high, ends), allowed, left, right = found
    if not allowed.any():
        return None
    score = size - unlike + _STEEP * steep - _CLIMB * climb + _LOW * low + _HIGH * high - _END * ends
    score = np.where(allowed, score, -np.inf)
    best = score.max()
    i, j = np.nonzero(score >= best - _SAME)
    # Equally good tops: the outermost, on either side alike.
    return float(best), int(left[i.max()]), int(right[j.max()])


def _lowest(z: Floats) -> list[tuple[int, int]]:
    """Return first and last point of each stretch of lowest ground."""
    low = np.flatnonzero(z == z.min())
    return [(int(s[0]), int(s[-1])) for s in np.split(low, np.flatnonzero(np.diff(low) > 1) + 1)]


def _beside(ground: _Ground, origin: float) -> list[tuple[int, int]]:
    """Return the low points that can be seen from `origin`: each lower than all ground between."""
    x, z = ground.x, ground.z
    here = float(np.interp(origin, x, z))
    pits: dict[tuple[int, int], float] = {}
    for path in (np.flatnonzero(x <= origin)[::-1], np.flatnonzero(x >= origin)):
        h = z[path]
        below = np.minimum.accumulate(np.minimum(h, here))
        # the last point of each run of points that go on falling (or stay as low)
        falls = np.flatnonzero((h <= below) & (np.r_[h[1:], np.inf] > h))
        for n, k in enumerate(falls):
            until = falls[n + 1] if n + 1 < falls.size else h.size
            barrier = np.inf if until == h.size else float(h[k:until].max() - h[k])
            i = j = int(path[k])
            while i > 0 and z[i - 1] == z[i]:
                i -= 1
            while j < z.size - 1 and z[j + 1] == z[j]:
                j += 1
            pits[(i, j)] = max(barrier, pits.get((i, j), 0.0))
    if not pits:
        at = int(np.argmin(np.abs(x - origin)))
        return [(at, at)]
    return sorted(pits, key=lambda pit: -pits[pit])[:_MOST_PITS]
