"""Compiled code for many sections, held to the arrays that define it."""

import numpy as np
import pytest

from terrain2q.errors import NoAnswerError
from terrain2q.hydraulics.banks import find_banks
from terrain2q.hydraulics.many import (
    can_compile,
    compiled_banks,
    compiled_water,
    is_plain,
    may_have_shelf,
    solve,
)
from terrain2q.hydraulics.review import undivided_shelves
from terrain2q.hydraulics.section import Section, Subarea, hydraulic_columns
from terrain2q.hydraulics.submerged import find_water
from terrain2q.jobs.design_flows import channel_share
from tests import _random_sections as invented

SLOPE, STEPS = 0.003, 25

pytestmark = pytest.mark.skipif(not can_compile(), reason="the compiler is not installed")


def valleys(random, count):
    """Yield profiles of channels in noise of many kinds: rounded, level, with repeated stations."""
    for _ in range(count):
        points = int(random.integers(8, 160))
        x = np.arange(points) * 1.0
        if random.random() < 0.5:
            x = np.sort(random.uniform(0, 100, points).round(int(random.integers(0, 3))))
        away = np.abs(x - x.mean())
        z = np.interp(away, [0, 6, 10, 30, 60], [0, 0, 2, 2.5, 8])
        z += random.normal(0, random.choice([0, 0.02, 0.05, 0.5]), points)
        yield x, z.round(int(random.integers(1, 5))) + 100.0 * (random.random() < 0.5)


@pytest.mark.parametrize("zones", [False, True])
def test_rating_and_events_are_those_of_the_section(zones):
    random = np.random.default_rng(11 + zones)
    paths = banks = several = 0
    for _ in range(120):
        section = invented.section(
            random, int(random.integers(6, 60)), int(random.integers(1, 6)), zones=zones
        )
        high = section.elevations.max()
        flows = section.discharge(np.linspace(section.lowest_ground, high, 6)[1:] + 0.013, SLOPE)
        tops = np.array(section.bank_tops[:3])
        # at a bank's top, between the water before and after it has filled the hollow behind
        between = 0.5 * sum(
            section._profile.wet(tops, passed=p).conveyance.sum(axis=1) for p in (False, True)
        )
        flows = np.concatenate([flows, between * np.sqrt(SLOPE)])
        solution = solve(section, SLOPE, STEPS, None, flows)
        fresh = Section(section.stations, section.elevations, section.subareas)
        table = fresh.rating_arrays(SLOPE, STEPS)
        assert list(solution.rating) == list(table)
        assert (section.bank_tops, section.telling_bank_tops) == (fresh.bank_tops, fresh.telling_bank_tops)
        for name, values in table.items():
            if name == "section_id":
                continue
            np.testing.assert_allclose(solution.rating[name], values, rtol=1e-11, atol=1e-12, err_msg=name)
        for flow, event in zip(flows, solution.events, strict=True):
            state = fresh.flow_state(flow, SLOPE)
            assert (event is None) == state.at_bank
            banks += state.at_bank
            if event is None:
                continue
            paths += len(state.paths)
            several += len(state.stages) > 1
            np.testing.assert_allclose(event.state.stages, state.stages, rtol=0, atol=1e-9)
            assert event.critical_stage == pytest.approx(fresh.critical_stage(flow), abs=1e-9)
            assert event.channel_share == pytest.approx(channel_share(fresh, state), rel=1e-9, nan_ok=True)
            columns = hydraulic_columns(state.parts, np.sqrt(SLOPE), fresh.system.gravity)
            for name, value in columns.items():
                assert event.columns[name] == pytest.approx(value[0], rel=1e-7), name
            assert event.state.above_ends == state.above_ends
            for mine, path in zip(event.state.paths, state.paths, strict=True):
                assert (mine.start, mine.end) == pytest.approx((path.start, path.end), abs=1e-7)
                for name in ("area", "perimeter", "width", "n", "conveyance"):
                    np.testing.assert_allclose(
                        getattr(mine.wet, name), getattr(path.wet, name), rtol=1e-7, atol=1e-9
                    )
    assert paths > 400
    assert banks > 100
    assert several > 20


def test_two_equal_low_points_are_both_filled():
    section = Section(
        [0, 1, 2, 3, 4, 5, 6], [5, 0, 0, 2, 0, 0, 5], [Subarea(0, 3, 0.03), Subarea(3, 6, 0.05)]
    )
    (event,) = solve(section, SLOPE, STEPS, None, [1.0]).events
    state = section.flow_state(1.0, SLOPE)
    assert len(event.state.paths) == len(state.paths) == 2
    assert [p.conveyance for p in event.state.paths] == pytest.approx([p.conveyance for p in state.paths])


def test_what_is_not_plain_is_left_to_the_section():
    random = np.random.default_rng(2)
    section = invented.section(random, 30, 3, zones=True)
    assert is_plain(section)
    assert not is_plain(section.reached([(section.stations[0], section.stations[-1])]))
    parts = (section.stations, section.elevations, section.subareas)
    assert not is_plain(Section(*parts, connected=False))
    assert is_plain(Section(*parts, composite="lotter"))
    assert not is_plain(Section(*parts, composite="horton"))
    varying = invented.section(random, 30, 6, varying=True)
    assert not is_plain(varying)
    assert solve(varying, SLOPE, STEPS, None, [1.0]) is None


def noisy_valleys(random, count):
    """Yield evenly sampled valleys with noise: a V, a trapezoid, or a channel in a flood plain."""
    for k in range(count):
        x = np.arange(0.0, random.uniform(12.0, 120.0), 1.0)
        u = np.abs(x - random.uniform(0.3, 0.7) * x[-1])
        z = np.maximum(u - [0.0, 4.0, 4.0][k % 3], 0.0) / random.uniform(1.5, 8.0)
        if k % 3 == 2:
            z = np.minimum(z, 1.0) + 0.01 * u
        yield x, z + random.normal(0.0, random.choice([0.02, 0.1, 0.3]), x.size)


def test_banks_are_those_of_the_arrays():
    random = np.random.default_rng(3)
    found = 0
    for x, z in [*valleys(random, 250), *noisy_valleys(random, 120)]:
        if x[0] == x[-1]:
            continue
        for origin in (None, float(random.uniform(x[0], x[-1])), float(random.choice(x))):
            try:
                expected = find_banks(x, z, origin)
            except NoAnswerError as error:
                expected = error
            if isinstance(expected, NoAnswerError):
                with pytest.raises(NoAnswerError) as raised:
                    compiled_banks(x, z, origin)
                assert str(raised.value) == str(expected)
                continue
            found += 1
            assert compiled_banks(x, z, origin) == expected
    assert found > 400


def test_water_is_that_of_the_arrays():
    random = np.random.default_rng(4)
    found = 0
    for x, z in valleys(random, 600):
        for limits in (None, (float(x[x.size // 4]), float(x[3 * x.size // 4]))):
            if x[0] == x[-1]:
                continue
            expected = find_water(x, z, limits)
            found += expected is not None
            assert compiled_water(x, z, limits) == expected
    assert found > 200


def test_no_shelf_is_overlooked():
    random = np.random.default_rng(5)
    found = told = 0
    for x, z in valleys(random, 600):
        if x[0] == x[1] or x[-1] == x[-2]:
            continue
        section = Section(x, z, n=0.03)
        for stage in z.min() + random.uniform(0.2, 6.0, 3):
            shelf = bool(undivided_shelves(x, z, stage))
            assert may_have_shelf(section, stage, float(x[0]), float(x[-1])) == shelf
            found += shelf
            told += not shelf
    assert found > 100
    assert told > 100
