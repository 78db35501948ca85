"""Below the water that a terrain shows: find the water in a section, and put a bed under it.

Airborne laser light of the usual kind does not pass through water: where the channel was wet on the survey
day, a section's lowest ground is the water surface, level from side to side within the noise.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from terrain2q.errors import InputError, NoAnswerError
from terrain2q.hydraulics.conveyance import manning_conveyance
from terrain2q.hydraulics.wetted import Floats

SHAPES = ("rectangle", "triangle", "parabola")

LEAST_POINTS = 4
"""Level points that may be water; fewer are any stream bed."""

LEVEL, MOST_LEVEL = 0.05, 0.15
"""Metres about its middle height within which water lies: at least, and at most where the ground is noisy."""

BANK = 0.3
"""Metres by which the ground rises on both sides of the water within half the water's width."""

_PARTS = 16
"""Straight pieces of a parabola; they hold 0.4 % less than the curve."""


@dataclass(frozen=True)
class Water:
    """A level stretch in a channel that is likely water.

    Attributes
    ----------
    start, end : float
        Stations of its edges, m; points of the profile.
    surface : float
        Its height, m.
    within : float
        Metres about `surface` within which its points lie.
    """

    start: float
    end: float
    surface: float
    within: float

    @property
    def width(self) -> float:
        """Metres between the edges."""
        return self.end - self.start


def find_water(
    stations: ArrayLike, elevations: ArrayLike, limits: tuple[float, float] | None = None
) -> Water | None:
    """Find a flat water surface at the lowest ground of a section.

    Parameters
    ----------
    stations, elevations : array_like, shape (m,)
        Metres; no gaps.
    limits : (float, float), optional
        The tops of bank, between which the water lies; else the whole section is looked at.

    Returns
    -------
    Water or None
        None where the lowest ground is not level over :data:`LEAST_POINTS` points, or has no banks.

    Notes
    -----
    The run grows from the lowest ground (smoothed over three points) while the ground stays within a
    tolerance of its middle height: 2.5 times the noise, read from the second differences of the whole
    profile, between :data:`LEVEL` and :data:`MOST_LEVEL`. It must not tilt by more than the tolerance.
    A dry bed as level as that cannot be told from water.
    """
    x, z = np.asarray(stations, dtype=float), np.asarray(elevations, dtype=float)
    inside = np.ones(x.size, dtype=bool) if limits is None else (x >= limits[0]) & (x <= limits[1])
    if x.size < LEAST_POINTS + 2 or inside.sum() < LEAST_POINTS + 2:
        return None
    bend = np.diff(z, 2)
    # The second difference of independent noise of one variance has six times that variance.
    noise = 1.4826 * float(np.median(np.abs(bend - np.median(bend)))) / np.sqrt(6.0)
    within = float(np.clip(2.5 * noise, LEVEL, MOST_LEVEL))
    from scipy.ndimage import median_filter

    smooth = median_filter(z, 3, mode="nearest")
    first_inside, last_inside = np.flatnonzero(inside)[[0, -1]]
    low = first_inside + int(np.argmin(smooth[first_inside : last_inside + 1]))
    surface = float(smooth[low])
    first = last = low
    for _ in range(4):
        near = np.abs(smooth - surface) <= within
        first = last = low
        while first > first_inside and near[first - 1]:
            first -= 1
        while last < last_inside and near[last + 1]:
            last += 1
        surface = float(np.median(z[first : last + 1]))
    if last - first + 1 < LEAST_POINTS:
        return None
    run = slice(first, last + 1)
    tilt = float(np.polyfit(x[run] - x[first], z[run], 1)[0]) * (x[last] - x[first])
    if abs(tilt) > within:
        return None
    reach = 0.5 * (x[last] - x[first])
    for side in ((x < x[first]) & (x >= x[first] - reach), (x > x[last]) & (x <= x[last] + reach)):
        if not side.any() or z[side].max() < surface + BANK:
            return None
    return Water(float(x[first]), float(x[last]), surface, within)


def bed_below(start: float, end: float, surface: float, depth: float, shape: str) -> tuple[Floats, Floats]:
    """Return the bed below a water surface, from edge to edge.

    Parameters
    ----------
    start, end : float
        Stations of the water's edges.
    surface, depth : float
        Height of the water, and greatest depth below it; any one unit of length.
    shape : {"rectangle", "triangle", "parabola"}

    Returns
    -------
    stations, elevations : ndarray
        A rectangle has vertical faces: two equal stations.

    Raises
    ------
    InputError
        ``value-not-allowed``, ``number-not-positive``.
    """
    if shape not in SHAPES:
        raise InputError(
            "value-not-allowed", f"shape is {shape!r}", where="shape", fix=f"use one of: {', '.join(SHAPES)}"
        )
    if not (np.isfinite(depth) and depth > 0.0):
        raise InputError("number-not-positive", f"depth is {depth}", where="depth")
    if shape == "rectangle":
        return np.array([start, start, end, end]), surface - np.array([0.0, depth, depth, 0.0])
    share = np.array([0.0, 0.5, 1.0]) if shape == "triangle" else np.linspace(0.0, 1.0, _PARTS + 1)
    below = 1.0 - (2.0 * np.abs(share - 0.5)) ** (1.0 if shape == "triangle" else 2.0)
    return start + share * (end - start), surface - depth * below


def deepened(
    stations: ArrayLike, elevations: ArrayLike, water: Water, depth: float, shape: str
) -> tuple[Floats, Floats]:
    """Return a profile with a bed below its water in place of the water surface.

    Parameters
    ----------
    stations, elevations : array_like, shape (m,)
    water : Water
    depth : float
        Greatest depth below the surface.
    shape : {"rectangle", "triangle", "parabola"}

    Returns
    -------
    stations, elevations : ndarray
        Outside of the water's edges as given.
    """
    x, z = np.asarray(stations, dtype=float), np.asarray(elevations, dtype=float)
    bed_x, bed_z = bed_below(water.start, water.end, water.surface, depth, shape)
    left, right = x < water.start, x > water.end
    return np.concatenate([x[left], bed_x, x[right]]), np.concatenate([z[left], bed_z, z[right]])


def discharge_below(width: float, depth: float, n: float, slope: float, shape: str) -> float:
    """Return what flows below the water surface at normal depth [m³/s], all lengths in metres."""
    x, z = bed_below(0.0, width, 0.0, depth, shape)
    area = np.array(-np.trapezoid(z, x))
    perimeter = np.array(np.hypot(np.diff(x), np.diff(z)).sum())
    return float(manning_conveyance(area, perimeter, np.array(n))) * float(np.sqrt(slope))


def depth_for_flow(
    width: float, discharge: float, n: float | Callable[[float], float], slope: float, shape: str
) -> float:
    """Return the depth of water of a known width that carries a discharge at normal depth.

    Parameters
    ----------
    width : float
        Of the water surface, m.
    discharge : float
        m³/s.
    n : float or callable
        Manning's n, or a function of the depth that does not rise with it.
    slope : float
    shape : {"rectangle", "triangle", "parabola"}

    Returns
    -------
    float
        Greatest depth, m.

    Raises
    ------
    NoAnswerError
        The water would be deeper than half its width; `nearest` is the discharge at that depth.

    Examples
    --------
    A rectangle 5 m wide, n 0.015 on a slope of 0.0025 carries 9.55 m³/s at a depth of 0.8 m:

    >>> round(depth_for_flow(5.0, 9.5508, 0.015, 0.0025, "rectangle"), 3)
    0.8
    """

    def carried(depth: float) -> float:
        return discharge_below(width, depth, n(depth) if callable(n) else n, slope, shape)

    deepest = 0.5 * width
    most = carried(deepest)
    if discharge > most:
        raise NoAnswerError(
            f"water {width:.3g} m wide would be deeper than half its width",
            nearest=most,
            where="survey flow",
            fix="check the survey flow, the slope and n",
        )
    least = 1e-6 * width
    if discharge <= carried(least):
        return least
    from scipy.optimize import brentq

    return float(brentq(lambda depth: carried(depth) - discharge, least, deepest, xtol=1e-9))
