"""A reviewer's remarks: where each begins, and where there is nothing to say."""

import numpy as np
import pytest

from terrain2q.errors import CATALOGUE
from terrain2q.hydraulics import review
from terrain2q.hydraulics.review import (
    n_low_for_slope,
    n_outside_range,
    sliver_subareas,
    undivided_shelves,
)
from terrain2q.hydraulics.roughness import jarrett_n

FOOT = 0.3048


def test_codes_are_in_the_catalogue():
    codes = {review.N_OUTSIDE_RANGE, review.N_LOW_FOR_SLOPE, review.SHELF_UNDIVIDED, review.SUBAREA_SLIVER}
    assert codes <= set(CATALOGUE)


@pytest.mark.parametrize(
    ("n", "low", "high", "said"),
    [
        (0.03, 0.025, 0.05, False),
        (0.025, 0.025, 0.05, False),
        (0.05, 0.025, 0.05, False),
        (0.024, 0.025, 0.05, True),
        (0.051, 0.025, 0.05, True),
        (0.5, np.nan, np.nan, False),
        (0.5, 0.025, np.nan, False),
        (0.5, np.nan, 0.05, True),
    ],
)
def test_n_outside_range(n, low, high, said):
    remark = n_outside_range(n, low, high)
    assert (remark is not None) == said
    if said:
        assert remark.n == n


def test_n_low_for_slope_begins_at_two_standard_errors():
    # standard error 28 % (Jarrett 1984, from memory)
    limit = (1 - 2 * 0.28) * jarrett_n(0.01, 1.0)
    assert n_low_for_slope(1.001 * limit, 0.01, 1.0) is None
    remark = n_low_for_slope(0.999 * limit, 0.01, 1.0)
    assert remark.estimate == pytest.approx(jarrett_n(0.01, 1.0))
    assert remark.limit == pytest.approx(limit)
    assert n_low_for_slope(0.999 * limit, 0.01, 1.0 / FOOT, units="us") is not None
    assert n_low_for_slope(1.001 * limit, 0.01, 1.0 / FOOT, units="us") is None


def test_n_low_for_slope_beyond_the_range_errs_towards_silence():
    assert n_low_for_slope(0.001, 0.0019, 1.0) is None
    assert n_low_for_slope(0.001, 0.01, 0.0) is None
    assert n_low_for_slope(0.001, float("nan"), 1.0) is None
    # Jarrett's n (from memory) grows with slope and falls with radius
    steep = n_low_for_slope(0.001, 0.1, 1.0)
    assert steep.estimate == pytest.approx(jarrett_n(0.04, 1.0))
    deep = n_low_for_slope(0.001, 0.01, 4.0)
    assert deep.estimate == pytest.approx(0.39 * 0.01**0.38 * (4.0 / FOOT) ** -0.16)
    shallow = n_low_for_slope(0.001, 0.01, 0.05)
    assert shallow.estimate == pytest.approx(jarrett_n(0.01, 0.5 * FOOT))


def test_a_bench_beside_a_channel_is_a_shelf():
    x, z = [0, 30, 30, 40, 40, 100], [6, 3, 0, 0, 3, 3.5]
    found = undivided_shelves(x, z, 4.0)
    assert [s.side for s in found] == ["left", "right"]
    left, right = found
    # the left slope is wet from station 20 (3 in 30) and 1 deep at its edge, the right floor ends at a limit
    assert (left.start, left.end, left.width, left.depth) == pytest.approx((20, 30, 10, 1.0))
    assert (right.start, right.end, right.depth) == pytest.approx((40, 100, 1.0))
    # 4 deep on the bench and 7 in the channel: no longer twice as deep
    assert undivided_shelves(x, z, 7.0) == []
    assert undivided_shelves(x, z, -1.0) == []


def test_five_times_the_depth_is_where_a_shelf_begins():
    # Davidian (1984), from memory
    def section(width):
        return [0, 0, width, width, width + 8], [9, 3, 3, 0, 0]

    assert undivided_shelves(*section(4.9), 4.0) == []
    assert len(undivided_shelves(*section(5.1), 4.0)) == 1


@pytest.mark.parametrize("slope", [1, 3, 10, 40, 200])
def test_even_slopes_and_troughs_have_no_shelf(slope):
    for points in (3, 21):
        x = np.linspace(-slope * 3, slope * 3, points)
        assert undivided_shelves(x, np.abs(x) / slope, 2.5) == []
    assert undivided_shelves([0, 2 * slope, 30 + 2 * slope, 30 + 4 * slope], [2, 0, 0, 2], 1.5) == []


def test_shelves_do_not_care_about_direction_or_unit():
    random = np.random.default_rng(9)
    some = 0
    for _ in range(200):
        x = np.sort(random.uniform(0, 100, 15))
        z = np.round(random.choice([0.0, 3.0, 3.3, 3.6], 15) + random.uniform(0, 0.2, 15), 3)
        found = undivided_shelves(x, z, 4.5)
        turned = undivided_shelves(-x[::-1], z[::-1], 4.5)
        assert [s.start for s in found] == pytest.approx([-s.end for s in reversed(turned)])
        assert [s.end for s in found] == pytest.approx([-s.start for s in reversed(turned)])
        feet = undivided_shelves(x / FOOT, z / FOOT, 4.5 / FOOT)
        assert [s.width * FOOT for s in feet] == pytest.approx([s.width for s in found])
        some += bool(found)
        assert all(s.width >= 5 * s.depth for s in found)
    assert some > 20


def test_slivers():
    stations = np.arange(0.0, 401.0, 10.0)
    found = sliver_subareas([0.0, 101.0, 102.5, 300.0, 400.0], stations)
    assert [(s.subarea, s.width, s.points) for s in found] == [(1, 1.5, 0)]
    assert found[0].share == pytest.approx(1.5 / 400)
    # a width of 1/200 is none; two points inside make it real ground
    assert sliver_subareas([0.0, 101.0, 103.0, 400.0], stations) == []
    assert sliver_subareas([0.0, 101.0, 102.5, 400.0], np.append(stations, [101.5, 102.0])) == []
    assert sliver_subareas([0.0, 400.0], stations) == []
