"""Conveyance of a divided section, composite roughness, velocity coefficients, Froude number."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


def manning_conveyance(area: Floats, perimeter: Floats, n: Floats, constant: float = 1.0) -> Floats:
    r"""Return the conveyance of parts of a section by Manning's equation.

    Parameters
    ----------
    area, perimeter : ndarray
        Flow area and wetted perimeter of the parts.
    n : ndarray
        Manning's roughness [s/m^(1/3)], tabulated values, > 0.
    constant : float
        1 in SI, 1.48592 in US customary units.

    Returns
    -------
    ndarray
        :math:`K = \frac{k}{n} A (A/P)^{2/3}`, 0 where there is no water; then :math:`Q = K \sqrt{S}`.

    Notes
    -----
    Chow (1959), Open-Channel Hydraulics, section 6-1.

    Examples
    --------
    A rectangle 5 m wide, 0.8 m deep, n 0.015 on a slope of 0.0025 carries 9.55 m³/s:

    >>> k = manning_conveyance(np.array(4.0), np.array(6.6), np.array(0.015))
    >>> round(float(k * 0.0025**0.5), 2)
    9.55
    """
    radius = np.divide(area, perimeter, out=np.zeros_like(area), where=perimeter > 0)
    return constant / n * area * np.cbrt(radius * radius)


def velocity_coefficients(area: Floats, conveyance: Floats) -> tuple[Floats, Floats]:
    r"""Return the energy coefficient alpha and the momentum coefficient beta.

    Parameters
    ----------
    area, conveyance : ndarray, shape (..., parts)
        Of the parts of the section; one slope drives them all.

    Returns
    -------
    alpha, beta : ndarray, shape (...)
        :math:`\alpha = A^2 \sum (K_i^3 / A_i^2) / K^3`, :math:`\beta = A \sum (K_i^2 / A_i) / K^2`;
        NaN where there is no water.

    Notes
    -----
    Chow (1959), section 2-7.
    """
    wet = area > 0
    velocity = np.divide(conveyance, area, out=np.zeros_like(conveyance), where=wet)
    total_area, total = area.sum(axis=-1), conveyance.sum(axis=-1)
    alpha = np.full(total.shape, np.nan)
    beta = np.full(total.shape, np.nan)
    mean = np.divide(total, total_area, out=np.ones_like(total), where=total_area > 0)
    relative = velocity / mean[..., None]
    flowing = total > 0
    # relative to the mean velocity, so that no power of a large conveyance overflows
    np.divide((area * relative**3).sum(axis=-1), total_area, out=alpha, where=flowing)
    np.divide((area * relative**2).sum(axis=-1), total_area, out=beta, where=flowing)
    return alpha, beta


def froude_number(discharge: Floats, area: Floats, width: Floats, alpha: Floats, gravity: float) -> Floats:
    r"""Return the Froude number of a section.

    Returns
    -------
    ndarray
        :math:`\sqrt{\alpha Q^2 T / (g A^3)}`, with the hydraulic depth A/T; NaN where there is no water.

    Notes
    -----
    Chow (1959), sections 3-3 and 3-4.
    """
    out = np.full(np.shape(area), np.nan)
    depth = np.divide(area, width, out=np.zeros_like(area), where=width > 0)
    velocity = np.divide(discharge, area, out=np.zeros_like(area), where=area > 0)
    np.divide(velocity * np.sqrt(alpha), np.sqrt(gravity * depth), out=out, where=depth > 0)
    return out
