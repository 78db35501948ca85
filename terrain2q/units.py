"""SI and US customary units: the one place where a length or a flow changes its unit.

Inside the package everything is in metres, seconds and m³/s. A study in US customary units states
and receives feet (the international foot of exactly 0.3048 m), square feet and ft³/s; the factors
below are used once, at the edge. Manning's n keeps its tabulated value in both systems
(Chow 1959, section 5-6): the unit change sits in the constant of the equation.
"""

from __future__ import annotations

from dataclasses import dataclass
from types import MappingProxyType

from terrain2q.errors import InputError

FOOT = 0.3048
"""Metres in one international foot (exact)."""

US_SURVEY_FOOT = 1200.0 / 3937.0
"""Metres in one US survey foot (exact); only for elevations and coordinates of older data."""

STANDARD_GRAVITY = 9.80665
"""m/s², the standard value (exact by definition, CGPM 1901)."""

ELEVATION_UNITS = MappingProxyType({"m": 1.0, "ft": FOOT, "us-ft": US_SURVEY_FOOT})
"""Metres in one unit of elevation, by the names a study file uses."""


@dataclass(frozen=True)
class UnitSystem:
    """One system of units and the two constants that depend on it.

    Attributes
    ----------
    name : str
        ``si`` or ``us``.
    length : float
        Metres in one unit of length.
    manning : float
        The constant in Manning's equation, 1 in SI and 1/0.3048^(1/3) = 1.48592 in US customary units.
    gravity : float
        Standard gravity in this system's length per second squared.
    """

    name: str
    length: float
    symbols: MappingProxyType[str, str]

    @property
    def manning(self) -> float:
        """The constant in Manning's equation."""
        return self.length ** (-1.0 / 3.0)

    @property
    def gravity(self) -> float:
        """Standard gravity."""
        return STANDARD_GRAVITY / self.length

    def __reduce__(self):
        # a system travels by its name: its table of symbols cannot be pickled
        return (unit_system, (self.name,))

    def per_si(self, quantity: str) -> float:
        """Return how many of this system's units make one SI unit of `quantity`.

        Parameters
        ----------
        quantity : str
            ``length``, ``area``, ``flow``, ``velocity``, or one of the quantities that have the
            same value in both systems (``ratio``, ``roughness``, ``count``, ``text``, ``probability``).
        """
        return self.length ** -_LENGTH_POWER[quantity]

    def symbol(self, quantity: str) -> str:
        """Return the unit's symbol, as it is printed; empty for a plain number."""
        return self.symbols.get(quantity, "")


_LENGTH_POWER = MappingProxyType(
    {"length": 1, "area": 2, "flow": 3, "velocity": 1, "ratio": 0, "roughness": 0, "count": 0,
     "text": 0, "probability": 0, "weir_coefficient": 0.5}
)  # fmt: skip

SI = UnitSystem(
    "si",
    1.0,
    MappingProxyType(
        {
            "length": "m",
            "area": "m²",
            "flow": "m³/s",
            "velocity": "m/s",
            "ratio": "1",
            "roughness": "s/m^(1/3)",
            "weir_coefficient": "m^(1/2)/s",
        }
    ),
)
US = UnitSystem(
    "us",
    FOOT,
    MappingProxyType(
        {
            "length": "ft",
            "area": "ft²",
            "flow": "ft³/s",
            "velocity": "ft/s",
            "ratio": "1",
            "roughness": "s/m^(1/3)",
            "weir_coefficient": "ft^(1/2)/s",
        }
    ),
)

SYSTEMS = MappingProxyType({"si": SI, "us": US})


def unit_system(name: str | UnitSystem) -> UnitSystem:
    """Return the system called `name` (``si`` or ``us``).

    Raises
    ------
    InputError
        The name is neither (code ``value-not-allowed``).

    Examples
    --------
    >>> round(unit_system("us").manning, 5)
    1.48592
    """
    if isinstance(name, UnitSystem):
        return name
    try:
        return SYSTEMS[name]
    except KeyError:
        raise InputError(
            "value-not-allowed",
            f"units is {name!r}",
            where="units",
            fix='give "si" (metres, m³/s) or "us" (feet, ft³/s)',
        ) from None
