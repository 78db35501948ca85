"""What a reviewer would remark on: found where it is, silent where it is not."""

import numpy as np
import pytest

from terrain2q import Section, Subarea
from terrain2q.ground.cover import FallingN, SubareaSpec
from terrain2q.hydraulics.review import undivided_shelves
from terrain2q.jobs.remarks import CHANNEL_N, division_gain, section_remarks, state_remarks
from terrain2q.roughness_tables import table_rows
from terrain2q.units import SI, US

NAN = float("nan")
# a channel 3 m deep and 10 m wide beside a shelf 60 m wide, all upright
X = [0.0, 0.0, 60.0, 60.0, 70.0, 70.0]
Z = [6.0, 3.0, 3.0, 0.0, 0.0, 6.0]


def spec(start, end, n, low=NAN, high=NAN, source="a book", zone="", falling=None, land_class="pasture"):
    return SubareaSpec(start, end, n, low, high, source, land_class, zone, falling)


def remarks_on(specs, units=SI):
    section = Section(X, Z, [Subarea(s.start, s.end, s.n, s.land_class, s.zone) for s in specs])
    return [(r.code, r.message) for r in section_remarks(tuple(specs), section, units)]


def test_range_of_a_channel_is_that_of_the_published_table():
    rows = [r for r in table_rows("chow1959") if not r["description"].startswith("flood plain")]
    assert CHANNEL_N == (min(r["n_low"] for r in rows), max(r["n_high"] for r in rows))


def test_n_outside_its_range_is_told_once_for_each_class():
    specs = [spec(0, 20, 0.06, 0.03, 0.05), spec(20, 60, 0.07, 0.03, 0.1), spec(60, 70, 0.06, 0.03, 0.05)]
    assert remarks_on(specs) == [("n-outside-range", "n 0.06 of pasture lies outside 0.03 to 0.05")]
    assert remarks_on([spec(0, 70, 0.05, 0.03, 0.05)]) == []
    assert remarks_on([spec(0, 70, 0.5)]) == []
    assert remarks_on([spec(0, 70, 0.02, 0.03)])[0][1].endswith("outside what is at least 0.03")


def test_both_ends_of_a_falling_n_are_held_to_the_range():
    falling = FallingN(0.2, 0.5, 0.04, 2.0)
    found = remarks_on([spec(0, 70, 0.04, 0.03, 0.1, falling=falling)])
    assert found == [("n-outside-range", "n 0.2 of pasture lies outside 0.03 to 0.1")]


@pytest.mark.parametrize(("n", "count"), [(0.012, 1), (0.016, 0), (0.15, 0), (0.2, 1)])
def test_n_that_the_study_gives_a_channel_has_the_range_of_channels(n, count):
    specs = [spec(0, 60, 0.05, zone="left floodplain"), spec(60, 70, n, source="study", zone="channel")]
    assert len(remarks_on(specs)) == count


def test_sliver_is_named_with_its_place():
    specs = [spec(0, 20.1, 0.05), spec(20.1, 20.4, 0.1, land_class="road"), spec(20.4, 70, 0.05)]
    assert remarks_on(specs, US) == [
        ("subarea-sliver", "subarea 2 (road) is 0.984 ft wide, from station 65.9 ft")
    ]  # fmt: skip


def state_of(section, discharge=100.0, slope=0.002):
    return section.flow_state(discharge, slope)


def test_shelf_in_one_subarea_with_the_channel_is_found_and_one_divided_is_not():
    whole = Section(X, Z, n=0.04)
    state = state_of(whole)
    found = state_remarks(whole, state, SI)
    assert [r.code for r in found] == ["shelf-undivided"]
    # divided by hand: what is promised is what the divided section carries
    apart = Section(X, Z, [Subarea(0, 60, 0.04), Subarea(60, 70, 0.04)])
    gain = apart.discharge(state.stage, 0.002) / whole.discharge(state.stage, 0.002) - 1
    assert found[0].weight == pytest.approx(gain, rel=1e-9)
    assert f"{100 * gain:.0f} % more" in found[0].message
    assert state_remarks(apart, state_of(apart), SI) == []


def test_shelf_that_hardly_matters_is_passed_over():
    # the same shelf in a floodplain that carries a small part beside a large channel
    x = [0.0, 0.0, 8.0, 8.0, 9.0, 9.0, 209.0, 209.0]
    z = [6.0, 3.0, 3.0, 2.4, 2.4, 0.0, 0.0, 6.0]
    section = Section(x, z, [Subarea(0, 9, 0.1), Subarea(9, 209, 0.03)])
    state = section.flow_state(2000.0, 0.002)
    shelves = undivided_shelves(x[:6], z[:6], state.stage)
    assert state.stage > 3.0
    assert state_remarks(section, state, SI) == []
    assert all(s.width >= 5 * s.depth for s in shelves)


def test_gain_of_division_is_that_of_two_sections():
    random = np.random.default_rng(4)
    checked = 0
    for _ in range(200):
        x = np.sort(random.choice(np.repeat(np.arange(0.0, 100.0, 6.0), 2), 14, replace=False))
        x[0], x[-1] = x[0] - 1.0, x[-1] + 1.0
        z = np.round(random.choice([0.0, 3.0, 3.2], x.size) + random.uniform(0, 0.2, x.size), 3)
        for shelf in undivided_shelves(x, z, 4.5):
            edge = shelf.end if shelf.side == "left" else shelf.start
            if not x[0] < edge < x[-1]:
                continue
            one = Section(x, z, n=0.05, connected=False)
            two = Section(x, z, [Subarea(x[0], edge, 0.05), Subarea(edge, x[-1], 0.05)], connected=False)
            expected = two.conveyance(4.5) / one.conveyance(4.5) - 1
            assert division_gain(x, z, 4.5, shelf) == pytest.approx(expected, rel=1e-9, abs=1e-12)
            checked += 1
    assert checked > 10


@pytest.mark.parametrize(
    ("n", "slope", "told"), [(0.02, 0.03, True), (0.05, 0.03, False), (0.02, 0.0015, False)]
)
def test_smooth_steep_channel_is_told(n, slope, told):
    parts = [Subarea(0, 60, 0.1, zone="left floodplain"), Subarea(60, 70, n, zone="channel")]
    section = Section(X, Z, parts)
    found = state_remarks(section, state_of(section, 60.0, slope), SI)
    assert ([r.code for r in found] == ["n-low-for-slope"]) is told
    if told:
        assert "n 0.02 of the channel" in found[0].message
