"""Flow over a road as over a broad-crested weir."""

from __future__ import annotations

import numpy as np

from terrain2q.errors import InputError
from terrain2q.units import SI, UnitSystem, unit_system

COEFFICIENT = 1.6
"""Weir coefficient C of a road, m^(1/2)/s; 2.90 in feet. FHWA HDS-5 (from memory): about 1.4 to 1.7 for roads
(2.5 to 3.1 in feet); no weir without losses passes 1.705, see :func:`greatest_coefficient`."""


def greatest_coefficient(units: UnitSystem | str = SI) -> float:
    """Return the coefficient of critical flow over the crest without losses: (2/3)^1.5 sqrt(g).

    Examples
    --------
    >>> round(greatest_coefficient(), 3), round(greatest_coefficient("us"), 3)
    (1.705, 3.088)
    """
    return (2.0 / 3.0) ** 1.5 * float(np.sqrt(unit_system(units).gravity))


def weir_discharge(
    head: float,
    length: float,
    coefficient: float = COEFFICIENT,
    *,
    approach_area: float | None = None,
    corrections: int = 0,
    units: UnitSystem | str = SI,
) -> float:
    """Return the discharge over a level broad-crested weir, C L H^1.5.

    Parameters
    ----------
    head : float
        Height of the water upstream over the crest; nothing flows at 0 or below.
    length : float
        Of the crest, square to the flow.
    coefficient : float
        C, in the units given.
    approach_area : float, optional
        Area of the flow upstream. Its velocity head is added to `head`, `corrections` times, each time from
        the discharge before.
    corrections : int
        One is the custom of textbooks; 20 is as good as exact.
    units : UnitSystem or str
        ``si`` or ``us``, for the acceleration of gravity.

    Raises
    ------
    InputError
        ``number-not-positive``: length, coefficient or area.
    """
    for name, value in (("length", length), ("coefficient", coefficient), ("approach_area", approach_area)):
        if value is not None and not value > 0:
            raise InputError("number-not-positive", f"{name} is {value:g}", where="weir_discharge")
    if head <= 0:
        return 0.0
    flow = coefficient * length * head**1.5
    for _ in range(corrections if approach_area else 0):
        velocity_head = (flow / approach_area) ** 2 / (2 * unit_system(units).gravity)
        flow = coefficient * length * (head + velocity_head) ** 1.5
    return float(flow)


def road_overflow(stations, crest, stage: float, coefficient: float = COEFFICIENT) -> float:
    """Return the discharge over a road whose crest varies: the integral of C H^1.5 along it.

    Parameters
    ----------
    stations, crest : array_like, shape (n,)
        Along the road, increasing; its height. Straight between points; a NaN lets nothing over.
    stage : float
        Level of the water upstream.
    coefficient : float
        C, in the units of the lengths.

    Notes
    -----
    Between two points with heads a and b the mean of H^1.5 is (2/5) (b^2.5 - a^2.5) / (b - a), exactly.

    Examples
    --------
    A level crest is C L H^1.5; a triangular notch of half width L under a head H is (4/5) C L H^1.5:

    >>> round(road_overflow([0.0, 10.0], [1.0, 1.0], 2.0, 1.6), 6)
    16.0
    >>> round(road_overflow([-10.0, 0.0, 10.0], [2.0, 1.0, 2.0], 2.0, 1.6), 6)
    12.8
    """
    x, z = np.asarray(stations, dtype=float), np.asarray(crest, dtype=float)
    head = np.where(np.isfinite(z), stage - z, -np.inf)
    one, other = head[:-1], head[1:]
    known = np.isfinite(one) & np.isfinite(other)
    width = np.where(known, np.diff(x), 0.0)
    one, other = np.where(known, one, 0.0), np.where(known, other, 0.0)
    # a piece that the water's edge cuts flows over its wet part only
    low, high = np.minimum(one, other), np.maximum(one, other)
    wet_low = np.maximum(low, 0.0)
    share = np.divide(high - wet_low, high - low, out=np.ones_like(high), where=high - low > 1e-9)
    top, bottom = np.maximum(high, 0.0), wet_low
    rise = top - bottom
    mean = np.where(
        rise > 1e-6 * np.maximum(top, 1e-12),
        np.divide(0.4 * (top**2.5 - bottom**2.5), rise, out=np.zeros_like(top), where=rise > 0),
        (0.5 * (top + bottom)) ** 1.5,
    )
    return float(coefficient * np.sum(np.where(high > 0, width * share * mean, 0.0)))


def wetted_road(stations, crest, stage: float) -> tuple[float, float]:
    """Return the length of road under water and the greatest depth on it, both 0 where it is dry."""
    x, z = np.asarray(stations, dtype=float), np.asarray(crest, dtype=float)
    head = np.where(np.isfinite(z), stage - z, -np.inf)
    one, other = head[:-1], head[1:]
    high, low = np.maximum(one, other), np.minimum(one, other)
    share = np.ones_like(high)
    cut = (high > 0) & (low < 0)
    with np.errstate(invalid="ignore"):
        share[cut] = np.where(np.isfinite(low[cut]), high[cut] / (high[cut] - low[cut]), 0.0)
    width = float(np.sum(np.where(high > 0, np.diff(x) * share, 0.0)))
    return width, float(max(head.max(initial=-np.inf), 0.0))
