"""Manning's n from its parts, from plants, from slope and from the bed's stones.

Estimates to start from and to check against; a calibrated n beats each of them. Every function says
where it holds and refuses to answer outside.
"""

from __future__ import annotations

import csv
from dataclasses import dataclass
from functools import cache
from importlib import resources

import numpy as np

from terrain2q.errors import InputError
from terrain2q.units import FOOT, US, unit_system

PARTS = ("base", "irregularity", "variation", "obstructions", "vegetation", "meandering")
"""What n is made of, in the order of Arcement and Schneider's formula."""

PART_ZONES = ("channel", "floodplain")

JARRETT_ERROR = 0.28
"""Standard error of :func:`jarrett_n` as a share of n: 28 % (Jarrett 1984, from memory)."""


@dataclass(frozen=True)
class PartRange:
    """A published range of one part of n.

    Attributes
    ----------
    zone, part, condition : str
        Where it is for, which part (:data:`PARTS`), and what it describes.
    low, high : float
    source : str
    """

    zone: str
    part: str
    condition: str
    low: float
    high: float
    source: str


@cache
def part_ranges(zone: str = "channel") -> tuple[PartRange, ...]:
    """Return the published ranges of the parts of n.

    Parameters
    ----------
    zone : str
        ``channel`` or ``floodplain``. The base values of a flood plain are those of the channel table.

    Raises
    ------
    InputError
        ``value-not-allowed``.
    """
    if zone not in PART_ZONES:
        raise InputError(
            "value-not-allowed", f"zone is {zone!r}", where="n from parts", fix="use channel or floodplain"
        )
    text = resources.files("terrain2q").joinpath("tables", "arcement_schneider_1989.csv").read_text("utf-8")
    return tuple(
        PartRange(zone, row["term"], row["condition"], float(row["low"]), float(row["high"]), row["source"])
        for row in csv.DictReader(text.splitlines())
        if row["zone"] == zone or row["term"] == "base"
    )


def roughness_from_parts(
    base: float,
    irregularity: float = 0.0,
    variation: float = 0.0,
    obstructions: float = 0.0,
    vegetation: float = 0.0,
    meandering: float = 1.0,
    zone: str = "channel",
) -> float:
    r"""Return Manning's n from a base value and adjustments.

    Parameters
    ----------
    base : float
        n of a straight, uniform, smooth channel in the bed's material; on a flood plain, of its bare soil.
    irregularity, variation, obstructions, vegetation : float
        What uneven banks, changes of shape, obstructions and plants add [s/m^(1/3)].
    meandering : float
        Factor on the sum.
    zone : str
        ``channel`` or ``floodplain``. On a flood plain there is no variation and no meandering.

    Returns
    -------
    float

    Raises
    ------
    InputError
        ``value-not-allowed``: a part lies outside all that is published for the zone.

    Notes
    -----
    Arcement and Schneider (1989), USGS Water-Supply Paper 2339:
    :math:`n = (n_b + n_1 + n_2 + n_3 + n_4)\,m`, after Cowan (1956). :func:`part_ranges` gives the
    published ranges; between two of them (a variation of 0.007, say) judgement decides.

    Examples
    --------
    A channel in firm soil with minor irregularity and some plants on the banks:

    >>> round(roughness_from_parts(0.025, irregularity=0.003, vegetation=0.007), 4)
    0.035
    """
    given = dict(
        zip(PARTS, (base, irregularity, variation, obstructions, vegetation, meandering), strict=True)
    )
    ranges = part_ranges(zone)
    for part, value in given.items():
        mine = [r for r in ranges if r.part == part]
        low, high = min(r.low for r in mine), max(r.high for r in mine)
        if part not in ("base", "meandering"):
            low = 0.0  # what is not there adds nothing
        if not low <= value <= high:  # also where it is not a number
            span = f"{low:g}" if low == high else f"from {low:g} to {high:g}"
            raise InputError(
                "value-not-allowed",
                f"{part} is {value:g}; published for a {zone} is {span}",
                where="n from parts",
                fix="see part_ranges() for what each range describes",
            )
    *parts, factor = given.values()
    return float(sum(parts) * factor)


def vegetation_n(boundary_n: float, density: float, drag: float, radius: float, units: str = "si") -> float:
    r"""Return Manning's n of a wooded flood plain from how densely it is wooded.

    Parameters
    ----------
    boundary_n : float
        n of the ground, of low plants and of all but the trunks, > 0.
    density : float
        Vegetation density: frontal area of trunks in a unit volume of water [1/L], >= 0.
    drag : float
        Effective drag coefficient, >= 0; up to about 25 in US studies of wooded flood plains.
    radius : float
        Hydraulic radius [L], > 0.
    units : str
        ``si`` or ``us``.

    Raises
    ------
    InputError
        ``number-not-positive``.

    Notes
    -----
    Petryk and Bosmajian (1975) as used by Arcement and Schneider (1989), formula from memory:
    :math:`n = n_0 \sqrt{1 + V_d C_* (k / n_0)^2 R^{4/3} / (2 g)}`, with k = 1 in SI.

    Examples
    --------
    Thompson Creek near Clara, Mississippi (Arcement and Schneider 1989: n = 0.20):

    >>> round(vegetation_n(0.055, 0.0115, 22.7, 2.9, units="us"), 2)
    0.2
    """
    system = unit_system(units)
    for name, value in (("boundary n", boundary_n), ("radius", radius)):
        _above_zero(name, value)
    for name, value in (("density", density), ("drag", drag)):
        if not (np.isfinite(value) and value >= 0):
            raise InputError("number-not-positive", f"{name} is {value}", where="n from vegetation density")
    share = density * drag * (system.manning / boundary_n) ** 2 * radius ** (4 / 3) / (2 * system.gravity)
    return float(boundary_n * np.sqrt(1.0 + share))


JARRETT_SLOPES = (0.002, 0.04)
JARRETT_RADII = (0.5 * FOOT, 7.0 * FOOT)
"""Where :func:`jarrett_n` holds: slopes, and hydraulic radii in metres (Jarrett 1984, from memory)."""


def jarrett_n(slope: float, radius: float, units: str = "si") -> float:
    r"""Return Manning's n of a steep mountain stream within its banks.

    Parameters
    ----------
    slope : float
        Energy slope, 0.002 to 0.04.
    radius : float
        Hydraulic radius [L], 0.15 to 2.1 m (0.5 to 7 ft).
    units : str
        ``si`` or ``us``.

    Raises
    ------
    InputError
        ``value-not-allowed``: outside that range.

    Notes
    -----
    Jarrett (1984), J. Hydraulic Engineering 110(11), from memory: :math:`n = 0.39\,S^{0.38} R^{-0.16}`
    with R in feet; standard error 28 %. For clear water over cobbles and boulders.

    Examples
    --------
    >>> round(jarrett_n(0.02, 3.0, units="us"), 3)
    0.074
    """
    feet = radius * unit_system(units).length / FOOT
    low, high = JARRETT_RADII
    _within("slope", slope, *JARRETT_SLOPES, "Jarrett's n")
    _within("hydraulic radius in feet", feet, low / FOOT, high / FOOT, "Jarrett's n")
    return float(jarrett_law(slope, feet))


def jarrett_law(slope, feet):
    """Return :func:`jarrett_n` of arrays, unchecked; the hydraulic radius is in feet."""
    return 0.39 * slope**0.38 * feet**-0.16


LIMERINOS_RATIOS = (1.0, 70.0)
"""R/d84 for which :func:`limerinos_n` holds (Limerinos 1970, from memory)."""


def limerinos_n(radius: float, d84: float, units: str = "si") -> float:
    r"""Return Manning's n of a bed of gravel and cobbles from the size of its stones.

    Parameters
    ----------
    radius : float
        Hydraulic radius [L], > 0.
    d84 : float
        Intermediate diameter that 84 % of the stones do not exceed [L]; radius/d84 from 1 to 70.
    units : str
        ``si`` or ``us``: of both.

    Raises
    ------
    InputError
        ``number-not-positive`` or ``value-not-allowed``.

    Notes
    -----
    Limerinos (1970), USGS Water-Supply Paper 1898-B, from memory:
    :math:`n = 0.0926\,R^{1/6} / (1.16 + 2 \log_{10}(R / d_{84}))` with R in feet. For wide channels within
    their banks with little vegetation.

    Examples
    --------
    >>> round(limerinos_n(1.5, 0.15), 4)
    0.0382
    """
    _above_zero("radius", radius)
    _above_zero("d84", d84)
    _within("radius/d84", radius / d84, *LIMERINOS_RATIOS, "Limerinos' n")
    feet = radius * unit_system(units).length / US.length
    return float(0.0926 * feet ** (1 / 6) / (1.16 + 2.0 * np.log10(radius / d84)))


def _above_zero(name: str, value: float) -> None:
    if not (np.isfinite(value) and value > 0):
        raise InputError("number-not-positive", f"{name} is {value}", where="roughness")


def _within(name: str, value: float, low: float, high: float, where: str) -> None:
    # a limit that went through a change of unit is still the limit
    if not low * (1 - 1e-9) <= value <= high * (1 + 1e-9):
        raise InputError(
            "value-not-allowed",
            f"{name} is {value:g}; the formula holds from {low:g} to {high:g}",
            where=where,
            fix="use a published table or a calibrated n",
        )
