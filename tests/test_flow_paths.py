"""Flow paths: closed forms of rectangles behind walls, and laws on random sections with hollows."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
import shapely
from _random_sections import mirrored, section
from scipy.optimize import brentq
from test_geometry_oracle import oracle, water_polygons

from terrain2q.hydraulics.paths import flow_paths
from terrain2q.hydraulics.section import Section, Subarea

SLOPE = 0.0016
ROOT = 0.04


class Troughs:
    """Rectangular troughs side by side, parted by walls without thickness; a closed form of its own.

    `tops` are the heights of the walls, one more than there are troughs; None is a section's end
    without a wall.
    """

    def __init__(self, widths, beds, tops, n):
        self.widths, self.beds, self.tops, self.n = widths, beds, tops, n
        self.edges = np.concatenate([[0.0], np.cumsum(widths)])
        x, z = [], []
        for i, top in enumerate(tops):
            at = self.edges[i]
            heights = [beds[i - 1]] if i else []
            heights += [] if top is None else [top]
            heights += [beds[i]] if i < len(beds) else []
            x += [at] * len(heights)
            z += heights
        self.x, self.z = x, z

    def section(self, channel, **options):
        zones = [
            "left floodplain" if i < channel else "channel" if i == channel else "right floodplain"
            for i in range(len(self.n))
        ]
        parts = [
            Subarea(a, b, n, f"trough {i}", zone)
            for i, ((a, b), n, zone) in enumerate(zip(pairwise(self.edges), self.n, zones, strict=True))
        ]
        return Section(self.x, self.z, parts, **options)

    def carried(self, i, stage):
        """Discharge of one trough, by Manning's equation for a rectangle."""
        depth = stage - self.beds[i]
        if depth <= 0:
            return 0.0
        faces = sum(min(stage, top) - self.beds[i] for top in self.tops[i : i + 2] if top is not None)
        area, around = self.widths[i] * depth, self.widths[i] + faces
        return area * (area / around) ** (2 / 3) / self.n[i] * ROOT

    def stage(self, troughs, discharge, low, high):
        return brentq(
            lambda y: sum(self.carried(i, y) for i in troughs) - discharge, low, high, xtol=1e-14, rtol=1e-15
        )


def check(paths, wanted, discharge):
    """Compare paths with (start, end, stage, discharge) of each."""
    assert len(paths) == len(wanted)
    for path, (start, end, stage, carried) in zip(paths, wanted, strict=True):
        assert (path.start, path.end) == pytest.approx((start, end), abs=1e-9)
        assert path.stage == pytest.approx(stage, abs=1e-9)
        assert path.discharge == pytest.approx(carried, rel=1e-9)
    assert sum(p.discharge for p in paths) == pytest.approx(discharge, rel=1e-9)


PERCHED = Troughs(widths=[10, 30], beds=[0, -0.5], tops=[9, 3, 9], n=[0.03, 0.06])
"""A channel whose floodplain lies lower than its own bed, behind a levee."""


def test_perched_channel_and_the_hollow_behind_its_bank():
    s = PERCHED.section(0)
    full, hollow = PERCHED.carried(0, 3.0), PERCHED.carried(1, 3.0)
    assert s.lowest_ground == 0.0
    assert s.bank_tops == (3.0,)
    # below the bank
    q = 0.7 * full
    check(s.flow_paths(q, SLOPE), [(0, 10, PERCHED.stage([0], q, 0, 3), q)], q)
    # the hollow fills at its own stage while the channel stands at the bank's top
    for share in (1e-6, 0.01, 0.5, 0.99, 1 - 1e-6):
        q = full + share * hollow
        behind = PERCHED.stage([1], share * hollow, -0.5, 3)
        check(s.flow_paths(q, SLOPE), [(0, 10, 3.0, full), (10, 40, behind, share * hollow)], q)
        assert s.normal_stage(q, SLOPE) == 3.0
        assert s.flow_state(q, SLOPE).at_bank
    # from there on both rise as one
    q = 1.3 * (full + hollow)
    check(s.flow_paths(q, SLOPE), [(0, 40, PERCHED.stage([0, 1], q, 3, 9), q)], q)


def test_rating_of_a_perched_channel_has_no_jump_at_the_bank():
    s = PERCHED.section(0)
    full, hollow = PERCHED.carried(0, 3.0), PERCHED.carried(1, 3.0)
    table = s.rating(SLOPE, [1.0, 3.0, 4.0])
    assert table["stage"].tolist() == [1.0, 3.0, 3.0, 4.0]
    assert table["discharge"].tolist() == pytest.approx(
        [PERCHED.carried(0, 1.0), full, full + hollow, PERCHED.carried(0, 4.0) + PERCHED.carried(1, 4.0)],
        rel=1e-12,
    )
    assert table["top_width"].tolist() == [10, 10, 40, 40]
    even = s.rating(SLOPE)
    assert np.count_nonzero(even["stage"] == 3.0) == 2
    assert even["discharge"].is_monotonic_increasing
    discharges = np.linspace(0.01, 3.0, 3001) * (full + hollow)
    stages = s.normal_stage(discharges, SLOPE)
    assert (np.diff(stages) >= 0).all()
    # a jump would be a step that does not shrink with the step of discharge
    assert np.diff(stages)[100:].max() < 0.01
    assert s.normal_stage(full * (1 - 1e-10), SLOPE) == pytest.approx(3.0, abs=1e-8)
    assert s.normal_stage((full + hollow) * (1 + 1e-10), SLOPE) == pytest.approx(3.0, abs=1e-8)


def test_a_bank_of_some_width_joins_when_it_is_wet():
    """Here the merged water wets the bank's top too, so that it carries less than both parts apart."""
    x = [10, 10, 20, 20, 22, 22, 52, 52]
    z = [10, 0, 0, 3, 3, 1, 1, 10]
    s = Section(x, z, [Subarea(10, 20, 0.03), Subarea(20, 52, 0.06)])

    def manning(area, around, n):
        return area * (area / around) ** (2 / 3) / n * ROOT

    full = manning(30, 16, 0.03)
    joined = full + manning(60, 2 + 2 + 30 + 2, 0.06)
    for share in (0.1, 0.6, 0.999):
        rest = share * (joined - full)
        behind = brentq(lambda d, rest=rest: manning(30 * d, 30 + 2 * d, 0.06) - rest, 1e-9, 2, xtol=1e-14)
        check(
            s.flow_paths(full + rest, SLOPE),
            [(10, 20, 3, full), (22, 52, 1 + behind, rest)],
            full + rest,
        )
    q = 1.2 * joined

    def as_one(h):
        return manning(10 * h, 13 + h, 0.03) + manning(2 * (h - 3) + 30 * (h - 1), 33 + h, 0.06)

    stage = brentq(lambda h: as_one(h) - q, 3, 10, xtol=1e-14)
    check(s.flow_paths(q, SLOPE), [(10, 52, stage, q)], q)


@pytest.mark.parametrize("small", ["left", "right"])
def test_banks_of_one_height_share_equally_until_one_side_is_full(small):
    t = Troughs([20, 10, 60], [1, 0, 0.5], [9, 3, 3, 9], [0.05, 0.03, 0.07])
    if small == "right":
        t = Troughs(t.widths[::-1], t.beds[::-1], t.tops[::-1], t.n[::-1])
    s = t.section(1)
    little, big = (0, 2) if small == "left" else (2, 0)
    full, least, most = (t.carried(i, 3.0) for i in (1, little, big))
    assert least < most
    ends = [(a, b) for a, b in pairwise(t.edges)]

    def by_place(paths):
        return [paths[0], *sorted(paths[1:], key=lambda p: p.start)]

    half = 0.4 * least
    wanted = [(*ends[i], t.stage([i], half, t.beds[i], 3), half) for i in (0, 2)]
    check(by_place(s.flow_paths(full + 2 * half, SLOPE)), [(*ends[1], 3, full), *wanted], full + 2 * half)
    # the small side is full and one with the channel; the rest goes to the other
    rest = 0.5 * (least + most)
    q = full + least + rest
    together = (min(ends[1][0], ends[little][0]), max(ends[1][1], ends[little][1]))
    check(
        s.flow_paths(q, SLOPE),
        [(*together, 3, full + least), (*ends[big], t.stage([big], rest, t.beds[big], 3), rest)],
        q,
    )
    q = 1.1 * (full + least + most)
    check(s.flow_paths(q, SLOPE), [(0, t.edges[-1], t.stage([0, 1, 2], q, 3, 9), q)], q)


def test_symmetric_banks_fill_alike():
    t = Troughs([20, 10, 20], [1, 0, 1], [9, 3, 3, 9], [0.05, 0.03, 0.05])
    full, side = t.carried(1, 3.0), t.carried(0, 3.0)
    q = full + side
    wanted = t.stage([0], side / 2, 1, 3)
    check(
        t.section(1).flow_paths(q, SLOPE),
        [(20, 30, 3, full), (0, 20, wanted, side / 2), (30, 50, wanted, side / 2)],
        q,
    )


ROW = {
    "beds fall outward": [0.5, 0.0, -0.5, -1.0],
    "beds rise outward": [0.0, 1.0, 1.5, 2.0],
}


@pytest.mark.parametrize("beds", ROW.values(), ids=ROW.keys())
@pytest.mark.parametrize("mirror", [False, True])
def test_three_hollows_in_a_row_spill_outward_before_they_are_full(beds, mirror):
    t = Troughs([10, 20, 25, 30], beds, [9, 5, 4, 3, 9], [0.03, 0.05, 0.06, 0.07])
    s = t.section(0)
    full, one, two, three = (t.carried(i, h) for i, h in ((0, 5), (1, 4), (2, 3), (3, 3)))
    as_one = t.carried(2, 4) + t.carried(3, 4)
    cases = []
    rest = 0.6 * one
    cases.append((full + rest, [(10, 30, t.stage([1], rest, beds[1], 4), rest)]))
    rest = 0.4 * two
    cases.append((full + one + rest, [(10, 30, 4, one), (30, 55, t.stage([2], rest, beds[2], 3), rest)]))
    rest = 0.7 * three
    cases.append((
        full + one + two + rest,
        [(10, 30, 4, one), (30, 55, 3, two), (55, 85, t.stage([3], rest, beds[3], 3), rest)],
    ))  # fmt: skip
    rest = 0.5 * (two + three) + 0.5 * as_one
    cases.append((full + one + rest, [(10, 30, 4, one), (30, 85, t.stage([2, 3], rest, 3, 4), rest)]))
    rest = 1.1 * (one + as_one)
    cases.append((full + rest, [(10, 85, t.stage([1, 2, 3], rest, 4, 5), rest)]))
    for q, behind in cases:
        wanted = [(0, 10, 5, full), *behind]
        if mirror:
            wanted = [(85 - b, 85 - a, h, part) for a, b, h, part in wanted]
        check((mirrored(s) if mirror else s).flow_paths(q, SLOPE), wanted, q)


def test_hollow_that_ends_with_the_section_stands_against_an_imagined_wall():
    t = Troughs([10, 30], [0, 1], [9, 3, None], [0.03, 0.06])
    s = t.section(0)
    full, rest = t.carried(0, 3.0), 0.5 * t.carried(1, 3.0)
    check(
        s.flow_paths(full + rest, SLOPE),
        [(0, 10, 3, full), (10, 40, t.stage([1], rest, 1, 3), rest)],
        full + rest,
    )
    assert s.flow_state(full + rest, SLOPE).above_ends == (False, True)
    assert s.flow_state(0.9 * full, SLOPE).above_ends == (False, False)
    assert s.water_above_ends(2.9) == (False, False)
    assert s.water_above_ends(3.1) == (False, True)


def test_ridges_of_equal_height_are_passed_one_after_the_other():
    t = Troughs([10, 20, 30], [0, 1, 0.5], [9, 4, 4, 9], [0.03, 0.05, 0.06])
    s = t.section(0)
    full, one, two = (t.carried(i, 4.0) for i in range(3))
    rest = 0.5 * one
    check(
        s.flow_paths(full + rest, SLOPE),
        [(0, 10, 4, full), (10, 30, t.stage([1], rest, 1, 4), rest)],
        full + rest,
    )
    rest = 0.5 * two
    q = full + one + rest
    check(s.flow_paths(q, SLOPE), [(0, 30, 4, full + one), (30, 60, t.stage([2], rest, 0.5, 4), rest)], q)
    table = s.rating(SLOPE, [4.0])
    assert table["discharge"].tolist() == pytest.approx([full, full + one + two], rel=1e-12)


def test_hollow_reached_from_elsewhere_stands_at_the_channels_stage():
    s = PERCHED.section(0).reached([(12, 38)])
    q = PERCHED.carried(0, 2.0) + PERCHED.carried(1, 2.0)
    assert s.normal_stage(q, SLOPE) == pytest.approx(2.0, abs=1e-9)
    check(
        s.flow_paths(q, SLOPE),
        [(0, 10, 2, PERCHED.carried(0, 2.0)), (10, 40, 2, PERCHED.carried(1, 2.0))],
        q,
    )
    assert s.bank_tops == ()


def test_a_reached_hollow_may_spill_too():
    """The bank that is passed bounds the hollow known to be reached, not the channel."""
    t = Troughs([10, 20, 30], [0, 1, 0.5], [9, 6, 4, 9], [0.03, 0.05, 0.06])
    s = t.section(0).reached([(11, 29)])
    channel, near, far = (t.carried(i, 4.0) for i in range(3))
    q = channel + near + 0.3 * far
    check(
        s.flow_paths(q, SLOPE),
        [(0, 10, 4, channel), (10, 30, 4, near), (30, 60, t.stage([2], 0.3 * far, 0.5, 4), 0.3 * far)],
        q,
    )
    # the channel and the reached hollow stay apart, the far one has become one with the near
    q = 1.1 * (channel + near + far)
    h = t.stage([0, 1, 2], q, 4, 6)
    check(
        s.flow_paths(q, SLOPE),
        [(0, 10, h, t.carried(0, h)), (10, 60, h, t.carried(1, h) + t.carried(2, h))],
        q,
    )


def test_not_connected_stands_at_one_level_everywhere():
    s = PERCHED.section(0, connected=False)
    assert s.bank_tops == ()
    q = PERCHED.carried(0, 2.0) + PERCHED.carried(1, 2.0)
    check(
        s.flow_paths(q, SLOPE),
        [(0, 10, 2, PERCHED.carried(0, 2.0)), (10, 40, 2, PERCHED.carried(1, 2.0))],
        q,
    )


def conveyance_of(s, path):
    """Conveyance and area of the water between a path's ends, from polygons cut by the subareas."""
    x, z = s.stations, s.elevations
    edges = np.array([a.start for a in s.subareas] + [s.subareas[-1].end])
    area, around = np.zeros(len(edges) - 1), np.zeros(len(edges) - 1)
    for body in water_polygons(x, z, path.stage):
        left, _, right, _ = body.bounds
        if left < path.start - 1e-9 or right > path.end + 1e-9:
            continue
        corners = shapely.get_coordinates(body)
        a, p, _ = oracle(x, z, edges, path.stage, tuple(corners[corners[:, 1].argmin()]))
        area, around = area + a, around + p
    radius = np.divide(area, around, out=np.zeros_like(area), where=around > 0)
    n = np.array([a.n for a in s.subareas])
    return float((area * radius ** (2 / 3) / n).sum()), float(area.sum())


def wanted_conveyances(s, random):
    """Conveyances that leave hollows filling, where a bank's top adds conveyance, and one besides."""
    tops = np.array(s.bank_tops)
    before = np.array(s.conveyance(tops))
    after = s._profile.wet(tops, passed=True).conveyance.sum(axis=1)
    inside = before + (after - before) * random.random((3, tops.size))
    chosen = [*inside[:, after > before].T.ravel()[:6]]
    return [*chosen, s.conveyance(float(random.uniform(s.lowest_ground + 0.1, s.elevations.max() + 1)))]


def test_random_sections_with_hollows():
    random = np.random.default_rng(20262)
    filling = spilling = 0
    for _ in range(500):
        # level ground is left out: at its own stage it is dry for the polygons and wet once passed
        s = section(random, int(random.integers(10, 26)), int(random.integers(1, 5)), flats=False)
        for k in wanted_conveyances(s, random):
            q = k * ROOT
            state, paths = s.flow_state(q, SLOPE), s.flow_paths(q, SLOPE)
            filling += state.at_bank
            spilling += len(paths) > 2
            # what they carry adds up without being made to
            raw = flow_paths(s._profile, k, state.stage, state.at_bank, int(s._source[0]))
            assert sum(p.conveyance for p in raw) == pytest.approx(k, rel=1e-9)
            assert state.parts.conveyance.sum() == pytest.approx(k, rel=1e-12)
            assert sum(p.discharge for p in paths) == pytest.approx(q, rel=1e-12)
            channel = paths[0]
            assert channel.stage == state.stage == s.normal_stage(q, SLOPE)
            assert channel.start <= s.stations[s.elevations.argmin()] <= channel.end
            for path in paths:
                carries, area = conveyance_of(s, path)
                assert path.discharge == pytest.approx(carries * ROOT, rel=1e-9, abs=1e-9 * q)
                assert path.flow_area == pytest.approx(area, rel=1e-9)
                for at in (path.start, path.end):
                    # dry outside: the edge is on the water's level, at a face, or at the section's end
                    ground = s.elevations[np.abs(s.stations - at) < 1e-9]
                    level = np.interp(at, s.stations, s.elevations)
                    assert level == pytest.approx(path.stage, abs=1e-7) or (
                        ground.size and (ground.max() >= path.stage or at in s.stations[[0, -1]])
                    )
            in_order = sorted(paths, key=lambda p: p.start)
            for one, other in pairwise(in_order):
                assert one.end <= other.start + 1e-9
                between = (s.stations >= one.end - 1e-9) & (s.stations <= other.start + 1e-9)
                ridge = s.elevations[between].max()
                assert max(one.stage, other.stage) <= ridge + 1e-9
            # no farther from the channel may water stand higher
            where = in_order.index(channel)
            outward = [p.stage for p in in_order[where:]], [p.stage for p in in_order[where::-1]]
            assert all(a >= b for side in outward for a, b in pairwise(side))
    assert filling > 700
    assert spilling > 50


def test_mirrored_sections_have_mirrored_paths():
    random = np.random.default_rng(20263)
    for _ in range(120):
        s = section(random, 20, 3)
        other, whole = mirrored(s), s.stations[0] + s.stations[-1]
        for k in wanted_conveyances(s, random):
            mine = [(p.start, p.end, p.stage, p.discharge) for p in s.flow_paths(k * ROOT, SLOPE)]
            theirs = [
                (whole - p.end, whole - p.start, p.stage, p.discharge)
                for p in other.flow_paths(k * ROOT, SLOPE)
            ]
            np.testing.assert_allclose(sorted(mine), sorted(theirs), rtol=1e-6, atol=1e-6 * k * ROOT)


def test_the_channels_stage_is_continuous_in_discharge_where_a_bank_adds_conveyance():
    random = np.random.default_rng(20264)
    looked_at = 0
    for _ in range(150):
        s = section(random, 18, 3)
        tops = np.array(s.bank_tops)
        before = np.array(s.conveyance(tops))
        after = s._profile.wet(tops, passed=True).conveyance.sum(axis=1)
        for top, low, high in zip(tops, before, after, strict=True):
            inside = s.normal_stage(0.5 * (low + high), 1.0)
            if high <= low or inside != top:
                continue  # a higher stage carries it as well
            looked_at += 1
            filling = s.normal_stage(low + (high - low) * np.linspace(0.001, 0.999, 7), 1.0)
            assert (filling == top).all()
            stage = s.normal_stage([low * (1 - 1e-9), high * (1 + 1e-9)], 1.0)
            if (low - s.conveyance(top - 1e-6)) > 0 and stage[0] <= top:
                assert stage[0] == pytest.approx(top, abs=1e-5)
            if s.conveyance(top + 1e-6) > high:
                assert stage[1] == pytest.approx(top, abs=1e-5)
    assert looked_at > 150


@pytest.mark.parametrize("kind", ["varying", "horton", "apart", "reached"])
def test_paths_add_up_where_the_whole_is_not_the_sum_of_its_parts(kind):
    random = np.random.default_rng(20271)
    filling = 0
    for _ in range(60):
        s = section(
            random, 20, int(random.integers(1, 5)), zones=True, varying=kind == "varying",
            composite="horton" if kind == "horton" else "divide", connected=kind != "apart",
        )  # fmt: skip
        if kind == "reached":
            low = np.flatnonzero(
                (s.elevations[1:-1] < s.elevations[:-2]) & (s.elevations[1:-1] < s.elevations[2:])
            )
            s = s.reached([(s.stations[i + 1] - 0.01, s.stations[i + 1] + 0.01) for i in low[:2]])
        for k in wanted_conveyances(s, random):
            state, paths = s.flow_state(k * ROOT, SLOPE), s.flow_paths(k * ROOT, SLOPE)
            filling += state.at_bank
            assert sum(p.discharge for p in paths) == pytest.approx(k * ROOT, rel=1e-12)
            assert state.parts.conveyance.sum() == pytest.approx(k, rel=1e-12)
            assert all(p.stage <= paths[0].stage for p in paths)
            assert all(p.discharge > 0 for p in paths[1:])
    assert filling > 10 or kind == "apart"
