"""n from parts and from formulas, against published checks and across units."""

import numpy as np
import pytest

from terrain2q.errors import InputError
from terrain2q.hydraulics.roughness import (
    PARTS,
    jarrett_n,
    limerinos_n,
    part_ranges,
    roughness_from_parts,
    vegetation_n,
)

FOOT = 0.3048


def test_parts_add_and_meandering_multiplies():
    n = roughness_from_parts(0.025, 0.004, 0.002, 0.01, 0.02, 1.15)
    assert n == pytest.approx((0.025 + 0.004 + 0.002 + 0.01 + 0.02) * 1.15, rel=1e-15)
    assert roughness_from_parts(0.03) == 0.03


def test_flood_plain_has_no_variation_and_no_meandering():
    # Arcement and Schneider (1989), USGS WSP 2339: n2 = 0 and m = 1 on a flood plain
    assert roughness_from_parts(0.028, 0.005, vegetation=0.15, zone="floodplain") == pytest.approx(0.183)
    for wrong in ({"variation": 0.002}, {"meandering": 1.15}):
        with pytest.raises(InputError, match="floodplain") as caught:
            roughness_from_parts(0.028, zone="floodplain", **wrong)
        assert caught.value.code == "value-not-allowed"


@pytest.mark.parametrize("zone", ["channel", "floodplain"])
def test_every_published_range_is_accepted_and_beyond_is_not(zone):
    ranges = part_ranges(zone)
    assert {r.part for r in ranges} == set(PARTS)
    for part in PARTS:
        mine = [r for r in ranges if r.part == part]
        low, high = min(r.low for r in mine), max(r.high for r in mine)
        if part in PARTS[1:5]:
            low = 0.0
        for r in mine:
            assert r.low <= r.high
            assert "Arcement and Schneider (1989)" in r.source
            for value in (r.low, r.high):
                roughness_from_parts(**({"base": 0.03} | {part: value}), zone=zone)
        for value in (low - 1e-4, high + 1e-4, float("nan")):
            with pytest.raises(InputError, match=part):
                roughness_from_parts(**({"base": 0.03} | {part: value}), zone=zone)


def test_published_parts():
    # Arcement and Schneider (1989), USGS WSP 2339, Tables 1 and 2, as read in secondary copies
    found = {(r.part, r.condition): (r.low, r.high) for r in part_ranges("channel")}
    assert found["base", "sand, upper regime, median size mm = 0.5"] == (0.022, 0.022)
    assert found["irregularity", "minor"] == (0.001, 0.005)
    assert found["vegetation", "very large"] == (0.05, 0.1)
    assert found["obstructions", "severe (>50 %)"] == (0.04, 0.05)


def test_unknown_zone():
    with pytest.raises(InputError, match="overbank"):
        roughness_from_parts(0.03, zone="overbank")


def test_vegetation_density_at_thompson_creek():
    # Arcement and Schneider (1989), USGS WSP 2339, Thompson Creek near Clara, Mississippi: n0 0.055, density
    # 0.0115 /ft, C* 22.7, depth 2.9 ft, n printed as 0.20; formula from memory
    n = vegetation_n(0.055, 0.0115, 22.7, 2.9, units="us")
    assert n == pytest.approx(0.20, abs=0.005)
    assert vegetation_n(0.055, 0.0115 / FOOT, 22.7, 2.9 * FOOT) == pytest.approx(n, rel=1e-12)
    assert vegetation_n(0.055, 0.0, 22.7, 2.9) == 0.055
    for wrong in ((0.0, 0.01, 1, 1), (0.05, -0.01, 1, 1), (0.05, 0.01, 1, 0.0), (0.05, 0.01, np.nan, 1)):
        with pytest.raises(InputError):
            vegetation_n(*wrong)


def test_jarrett():
    # n and velocity are two printings of one regression (Jarrett 1984, from memory): n = 0.39 S^0.38 R^-0.16
    # and V = 3.81 R^0.83 S^0.12 in feet agree within their rounded coefficients
    for slope, radius in ((0.002, 0.5), (0.02, 3.0), (0.04, 7.0)):
        n = jarrett_n(slope, radius, units="us")
        through_n = 1.486 / n * radius ** (2 / 3) * slope**0.5
        assert through_n == pytest.approx(3.81 * radius**0.83 * slope**0.12, rel=0.01)
        assert jarrett_n(slope, radius * FOOT) == pytest.approx(n, rel=1e-12)
    # 0.32 in metres (from memory), to its two printed digits
    assert jarrett_n(0.01, 1.0) == pytest.approx(0.32 * 0.01**0.38, rel=0.01)
    for slope, radius in ((0.0019, 1.0), (0.041, 1.0), (0.01, 0.1), (0.01, 2.2)):
        with pytest.raises(InputError, match="holds"):
            jarrett_n(slope, radius)


def test_limerinos():
    # 0.1129 in metres beside 0.0926 in feet (Limerinos 1970, from memory)
    expected = 0.1129 * 1.5 ** (1 / 6) / (1.16 + 2 * np.log10(10))
    assert limerinos_n(1.5, 0.15) == pytest.approx(expected, rel=1e-3)
    assert limerinos_n(1.5 / FOOT, 0.15 / FOOT, units="us") == pytest.approx(
        limerinos_n(1.5, 0.15), rel=1e-12
    )
    for wrong in ((1.0, 1.1), (8.0, 0.1), (0.0, 0.1), (1.0, -1.0)):
        with pytest.raises(InputError):
            limerinos_n(*wrong)
