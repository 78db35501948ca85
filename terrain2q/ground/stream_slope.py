"""The slope of a stretch of stream from the ground along it, with an interval that holds.

*Slope.* The median of the slopes between all pairs of points at least half the stretch apart. Theil and Sen
take all pairs; near pairs tell about noise and about the flat of a pool, not about the fall of the reach, so
they are left out. What remains shrugs off outliers as theirs does, and scatters hardly more than least
squares.

*Interval.* Neighbouring points are not independent: pools, riffles, bars and the lidar's own swaths bend the
profile over tens of metres, and an interval that takes the points as independent is several times too narrow.
What moves the slope is the long waves in the residuals. Their size is read from the residuals' projections
on the cosine waves of one to two and a half periods over the stretch, cleared of level and trend,

    Ω = max(mean(c₂², c₃²), mean(c₂², ..., c₅²))        half-width = t₄ · sqrt(Ω / Σ(s - mean s)²)

with Student's t at four degrees of freedom: long-run variance by equally weighted cosines (Lazarus, Lewis,
Stock and Watson 2018, from memory), here without the two waves that the fit takes up. The larger of the two
means widens it where waves grow towards the longest. A profile that is bent over the whole stretch has large
long waves too, so the interval also says how much the slope depends on the window.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cache

import numpy as np

CONFIDENCE = 0.90

WAVES = 4
"""Cosine waves from which the size of the long waves is read; also the degrees of freedom."""

LEAST_POINTS = 12
MOST_POINTS = 200
"""More points are brought together, as medians of groups, before pairs are made."""


@dataclass(frozen=True)
class SlopeEstimate:
    """The fall over run of a stretch of stream.

    Attributes
    ----------
    slope : float
        Positive where the ground falls downstream.
    low, high : float
        The interval.
    level, middle : float
        The fitted line passes through elevation `level` (m) at distance `middle` (m).
    length : float
        From the first point to the last, m.
    points : int
    agreeing : float
        Share of the pairs that fall the way the slope does.
    """

    slope: float
    low: float
    high: float
    level: float
    middle: float
    length: float
    points: int
    agreeing: float = 1.0

    def line(self, distance) -> np.ndarray:
        """Return the fitted line at distances, m."""
        return self.level - self.slope * (np.asarray(distance, dtype=float) - self.middle)

    def spanning(self, slope: float) -> SlopeEstimate:
        """Return the same estimate with an interval that reaches to another slope."""
        return replace(self, low=min(self.low, slope), high=max(self.high, slope))


def robust_slope(distance, elevation, confidence: float = CONFIDENCE) -> SlopeEstimate | None:
    """Return the slope of a stretch of stream.

    Parameters
    ----------
    distance : array_like, shape (n,)
        Stream distance, increasing, m.
    elevation : array_like, shape (n,)
        Ground along the stream, m.
    confidence : float
        Of the interval.

    Returns
    -------
    SlopeEstimate or None
        None with fewer than :data:`LEAST_POINTS` points.

    Examples
    --------
    >>> distance = np.arange(0.0, 200.0, 2.0)
    >>> round(robust_slope(distance, 50.0 - 0.003 * distance).slope, 6)
    0.003
    """
    s, z = (np.asarray(v, dtype=float) for v in (distance, elevation))
    count = s.size
    if count < LEAST_POINTS or not s[-1] > s[0]:
        return None
    length = float(s[-1] - s[0])
    if count > MOST_POINTS:
        s, z = _grouped(s, z)
    one, other = np.nonzero(s[None, :] - s[:, None] >= 0.5 * (s[-1] - s[0]) * (1.0 - 1e-12))
    rises = (z[other] - z[one]) / (s[other] - s[one])
    rise = float(np.median(rises))
    agreeing = float(np.mean(rises * np.sign(rise) > 0.0))
    middle = float(s.mean())
    rest = z - rise * (s - middle)
    level = float(np.median(rest))
    rest = rest - level
    # A few outliers, which the slope ignores, shall not make the interval of use to nobody.
    usual = 1.4826 * np.median(np.abs(rest))
    if usual > 0.0:
        rest = np.clip(rest, -4.0 * usual, 4.0 * usual)
    share = (s - s[0]) / (s[-1] - s[0])
    waves = [np.ones_like(share), share - 0.5]
    waves += [np.cos(np.pi * number * share) for number in range(2, WAVES + 2)]
    size = (np.linalg.qr(np.column_stack(waves))[0][:, 2:].T @ rest) ** 2
    long_waves = max(size.mean(), size[: WAVES // 2].mean())
    half = _critical(confidence) * np.sqrt(long_waves / np.sum((s - middle) ** 2))
    half = float(half)
    return SlopeEstimate(-rise, -rise - half, -rise + half, level, middle, length, count, agreeing)


@cache
def _critical(confidence: float) -> float:
    from scipy.stats import t as student  # slow to load, and most runs do not come here

    return float(student.ppf(0.5 + 0.5 * confidence, WAVES))


def _grouped(s: np.ndarray, z: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return means of distance and medians of elevation of groups of equal length."""
    edges = np.linspace(s[0], s[-1], MOST_POINTS + 1)
    group = np.clip(np.searchsorted(edges, s, side="right") - 1, 0, MOST_POINTS - 1)
    first = np.flatnonzero(np.diff(group, prepend=-1))
    size = np.diff(np.append(first, s.size))
    order = np.lexsort((z, group))
    sorted_z = z[order]
    middle = 0.5 * (sorted_z[first + (size - 1) // 2] + sorted_z[first + size // 2])
    return np.add.reduceat(s, first) / size, middle
