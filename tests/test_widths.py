"""The least bench and the least opening: closed forms, the ordinary solver, and brute force beside them."""

from itertools import pairwise

import numpy as np
import pytest
from _random_sections import mirrored
from _random_sections import section as random_section
from scipy.optimize import brentq

from terrain2q.errors import InputError, NoAnswerError
from terrain2q.hydraulics.section import DepthRoughness, Section, Subarea
from terrain2q.hydraulics.widths import _Cut, bench_curve, opening_centre

SLOPE = 0.002


def natural(random, *, connected=True, faces=True, varying=False, zones=True, composite="divide") -> Section:
    """A channel in a valley with an uneven flood plain, ridges and hollows."""
    points = int(random.integers(12, 40))
    x = np.sort(random.uniform(0.0, 120.0, points)).round(2)
    x[0], x[-1] = 0.0, 120.0
    middle = random.uniform(45.0, 75.0)
    z = np.abs(x - middle) * random.uniform(0.01, 0.1) + random.normal(0.0, random.uniform(0.1, 1.0), points)
    z = z.round(2)
    if faces:
        for i in random.choice(points - 2, 2, replace=False):
            x[i + 1] = x[i] if i > 0 else x[i + 1]
    low = int(np.argmin(np.abs(x - middle)))
    z[low] = z.min() - random.uniform(0.5, 3.0)
    bank = random.uniform(3.0, 10.0)
    left, right = max(x[low] - bank, 1.0), min(x[low] + bank, 119.0)
    edges = [0.0, *sorted([random.uniform(2.0, left - 1.0)] if left > 4.0 else []), left, right, 120.0]
    made = []
    for a, b in pairwise(edges):
        n = float(random.uniform(0.02, 0.12))
        if varying and random.random() < 0.7:
            n = DepthRoughness(n, float(random.uniform(0, 0.5)), 0.6 * n, float(random.uniform(0.6, 3.0)))
        zone = "channel" if a == left else "left floodplain" if b <= left else "right floodplain"
        made.append(Subarea(a, b, n, "ground", zone if zones else ""))
    if composite != "divide":
        c = len(edges) - 3
        half = 0.5 * (made[c].start + made[c].end)
        first, second = (
            Subarea(a, b, float(random.uniform(0.02, 0.12)), "bed", "channel")
            for a, b in ((made[c].start, half), (half, made[c].end))
        )
        made[c : c + 1] = [first, second]
    return Section(x, z, made, connected=connected, composite=composite)


def asked(random, section):
    """A stage, a base, sides and a side slope for a section."""
    low = section.lowest_ground
    stage = low + random.uniform(1.0, 5.0)
    base = low + random.uniform(0.1, 0.9) * (stage - low)
    return (
        stage,
        base,
        str(random.choice(["both", "left", "right"])),
        float(random.choice([0, 0, 0.5, 1, 2, 4])),
    )


# --- bench ------------------------------------------------------------------------------------------


def two_stage(**more) -> Section:
    """A channel 10 m wide with vertical walls up to 5 m, flat ground beyond."""
    return Section(
        [0, 0, 80, 80, 90, 90, 170, 170],
        [9, 5, 5, 0, 0, 5, 5, 9],
        [
            Subarea(0, 80, 0.08, "wood"),
            Subarea(80, 90, 0.03, "bed", "channel"),
            Subarea(90, 170, 0.08, "wood"),
        ],
        **more,
    )


@pytest.mark.parametrize("sides", ["both", "left", "right"])
@pytest.mark.parametrize("factor", [1.4, 2.0, 4.0])
def test_two_stage_bench_solves_its_closed_form(sides, factor):
    stage, base, n = 4.0, 1.5, 0.05
    section = two_stage()
    target = factor * section.discharge(stage, SLOPE)
    count = 2 if sides == "both" else 1

    def passed(width):
        # each side with a bench loses its wall above the base to the bench, which has one outer face
        over = stage - base
        channel = 40.0 / 0.03 * (40.0 / (10.0 + count * base + (2 - count) * stage)) ** (2 / 3)
        bench = width * over / n * (width * over / (width + over)) ** (2 / 3)
        return (channel + count * bench) * SLOPE**0.5

    expected = brentq(lambda w: passed(w) - target, 0.01, 100.0, xtol=1e-14, rtol=1e-15)
    bench = section.required_bench(target, stage, SLOPE, base, n, sides)
    assert bench.width == pytest.approx(expected, rel=1e-9)
    assert bench.discharge == pytest.approx(target, rel=1e-9)
    assert bench.excavation == pytest.approx(count * expected * 3.5, rel=1e-9)
    assert [s.side for s in bench.stretches] == (["left", "right"] if count == 2 else [sides])
    assert [s.label for s in bench.section.subareas].count("bench") == count
    assert bench.section.discharge(stage, SLOPE) == bench.discharge
    assert bench.section.normal_stage(target, SLOPE) == pytest.approx(stage, rel=1e-9)
    assert not bench.at_jump


def test_sloped_face_solves_its_closed_form():
    stage, base, n, m = 4.0, 1.5, 0.05, 2.0
    section = two_stage()
    target = 2.5 * section.discharge(stage, SLOPE)
    over = stage - base

    def passed(width):
        channel = 40.0 / 0.03 * (40.0 / (10.0 + 2 * base)) ** (2 / 3)
        area, around = width * over + 0.5 * m * over**2, width + over * (1 + m * m) ** 0.5
        return (channel + 2 * area / n * (area / around) ** (2 / 3)) * SLOPE**0.5

    expected = brentq(lambda w: passed(w) - target, 0.0, 100.0, xtol=1e-14, rtol=1e-15)
    bench = section.required_bench(target, stage, SLOPE, base, n, side_slope=m)
    assert bench.width == pytest.approx(expected, rel=1e-9)
    assert bench.excavation == pytest.approx(2 * (expected * 3.5 + 0.5 * m * 3.5**2), rel=1e-9)
    right = bench.stretches[1]
    assert (right.start, right.floor_end, right.end) == pytest.approx((90, 90 + expected, 97 + expected))


def answered(random, count, **kind):
    """Yield sections with a bench that passes a flow, `count` of them."""
    found = 0
    while found < count:
        section = natural(random, **kind)
        stage, base, sides, side_slope = asked(random, section)
        before = section.discharge(stage, SLOPE)
        if before <= 0:
            continue
        target = before * random.uniform(1.02, 2.5)
        try:
            bench = section.required_bench(target, stage, SLOPE, base, 0.045, sides, side_slope)
        except NoAnswerError:
            continue
        found += 1
        yield section, bench, target, (stage, base, sides, side_slope)


@pytest.mark.parametrize(
    "kind",
    [
        {},
        {"connected": False},
        {"varying": True},
        {"zones": False},
        {"composite": "horton"},
        {"composite": "pavlovskii"},
    ],
    ids=lambda k: "-".join(map(str, k.values())) or "plain",
)
def test_bench_passes_and_a_narrower_one_does_not(kind):
    random = np.random.default_rng(7)
    wide = 0
    for section, bench, target, (stage, base, sides, side_slope) in answered(
        random, 500 if not kind else 40, **kind
    ):
        assert bench.section.discharge(stage, SLOPE) >= target * (1 - 1e-9)
        if not bench.at_jump:
            assert bench.section.discharge(stage, SLOPE) == pytest.approx(target, rel=1e-9)
        if bench.width < 1e-6:
            # the division at the bank alone passes it: the section with the bench says so
            assert bench.at_jump
            continue
        wide += 1
        narrower, _ = _Cut(section, stage, base, 0.045, sides, side_slope).cut_section(0.99 * bench.width)
        assert narrower.discharge(stage, SLOPE) < target
        if wide % 6:
            continue
        curve = bench_curve(
            section, bench.width * np.linspace(0, 0.999, 400), stage, SLOPE, base, 0.045, sides, side_slope
        )
        assert (curve < target).all()
    assert wide > 0.7 * (500 if not kind else 40)


def test_ground_is_cut_as_described():
    random = np.random.default_rng(11)
    for section, bench, _, (_, base, sides, side_slope) in answered(random, 80, faces=False):
        x = np.linspace(section.stations[0], section.stations[-1], 4001)
        before = np.interp(x, section.stations, section.elevations)
        expected = before.copy()
        low = float(section._cut[0][section._source[0]])
        for side, step in (("left", -1), ("right", 1)):
            if sides not in ("both", side):
                continue
            out = step * (x - low)
            order = np.argsort(out)
            order = order[out[order] >= 0]
            bank = bench.stretches[0 if step < 0 else -1].start
            distance = step * (x[order] - bank)
            assert (before[order][distance < 0] <= base + 1e-9).all()
            slope = (
                base + np.maximum(distance - bench.width, 0) / side_slope
                if side_slope
                else np.where(distance <= bench.width, base, np.inf)
            )
            met = np.flatnonzero((distance >= bench.width) & (before[order] <= slope))
            here = (distance >= 0) & (np.arange(order.size) < (met[0] if met.size else order.size))
            expected[order[here]] = np.minimum(before[order], slope)[here]
        after = np.interp(x, bench.section.stations, bench.section.elevations)
        # beside the outer face a vertical step is met by the sampling, not by the rule
        off = np.abs(after - expected) > 1e-6
        assert off.sum() <= 4
        assert bench.excavation == pytest.approx(
            np.trapezoid(before - after, x), abs=0.05 * max(1.0, np.ptp(section.elevations))
        )


def test_least_width_where_more_width_first_carries_less():
    # rough bench beside smooth ground: the discharge falls before it rises
    section = Section(
        [0, 20, 20, 30, 30, 50, 50, 190],
        [6, 3.2, 0, 0, 3.2, 3.2, 6, 6],
        [Subarea(0, 20, 0.03, zone="left floodplain"), Subarea(20, 30, 0.03, zone="channel"),
         Subarea(30, 190, 0.02, zone="right floodplain")],
    )  # fmt: skip
    widths = np.linspace(0.01, 155, 3001)
    curve = bench_curve(section, widths, 5.0, SLOPE, 3.0, 0.05, "right")
    falls = np.diff(curve) < 0
    assert falls.any()
    before = section.discharge(5.0, SLOPE)
    target = max(before, curve[0]) * 1.001
    first = np.flatnonzero(curve >= target)[0]
    bench = section.required_bench(target, 5.0, SLOPE, 3.0, 0.05, "right")
    assert widths[first - 1] < bench.width <= widths[first]
    assert falls[:first].any()


def test_ridge_cut_away_joins_the_hollow_behind_it():
    # a ridge from 20 to 24 above the water, ground at 1 behind it
    section = Section([0, 0, 10, 12, 20, 21, 23, 24, 60, 60], [8, 0, 0, 2, 2, 6, 6, 1, 1, 8], n=0.04)
    dry = bench_curve(section, [0.5, 3.3], 4.0, SLOPE, 2.0, 0.04, "right")
    joined = float(bench_curve(section, [3.6], 4.0, SLOPE, 2.0, 0.04, "right")[0])
    assert joined > 2 * dry.max()
    bench = section.required_bench(0.5 * (dry.max() + joined), 4.0, SLOPE, 2.0, 0.04, "right")
    # the ridge's outer side falls 5 m in 1 m: its crest is below the water from station 23.4 on
    assert bench.at_jump
    assert bench.width == pytest.approx(3.4, abs=1e-6)
    assert bench.section.discharge(4.0, SLOPE) == pytest.approx(joined, rel=0.2)
    # the same bench is reached from the channel in the section that comes back
    assert bench.section.geometry(4.0).top_width > 55


def test_hollow_under_the_floor_stays_as_it_is():
    section = Section([0, 0, 10, 11, 20, 20, 25, 25, 80, 80], [9, 0, 0, 5, 5, 1, 1, 5, 5, 9], n=0.04)
    target = bench_curve(section, 20.0, 4.0, SLOPE, 2.0, 0.04, "right")
    bench = section.required_bench(target, 4.0, SLOPE, 2.0, 0.04, "right")
    x, z = bench.ground
    assert bench.width == pytest.approx(20.0, rel=1e-9)
    assert z[(x >= 20) & (x <= 25)].min() == 1.0
    cut = (5 - 2) * (bench.width - 5 - 0.6) + 0.5 * 0.6 * 3
    assert bench.excavation == pytest.approx(cut, rel=1e-9)


@pytest.mark.parametrize("composite", ["divide", "horton", "pavlovskii"])
@pytest.mark.parametrize("sides", ["both", "left", "right"])
def test_base_at_the_lowest_ground_takes_the_channel_over(sides, composite):
    # the low point is the foot of a vertical face: nothing of the old channel is left on the bench's side
    section = Section(
        [0, 20, 30, 40, 40, 50, 60, 90],
        [6, 4, 3, 0, 1, 2, 4, 6],
        [
            Subarea(0, 32, 0.05, zone="left floodplain"),
            Subarea(32, 40, 0.03, zone="channel"),
            Subarea(40, 48, 0.04, zone="channel"),
            Subarea(48, 90, 0.06, zone="right floodplain"),
        ],
        composite=composite,
    )
    for width in (0.5, 3.0, 12.0, 25.0):
        curve = bench_curve(section, width, 3.5, SLOPE, 0.0, 0.045, sides, 1.0)
        made, stretches = _Cut(section, 3.5, 0.0, 0.045, sides, 1.0).cut_section(width)
        assert made.discharge(3.5, SLOPE) == pytest.approx(float(curve), rel=1e-12)
        assert made.lowest_ground == 0.0
        assert {s.start for s in stretches} == {40.0}


def test_stages_and_bases_at_points_of_the_ground():
    # level ground, ridge tops and vertical faces at the very heights asked about
    random = np.random.default_rng(13)
    found = 0
    while found < 60:
        section = random_section(random, int(random.integers(8, 30)), 4, zones=True, digits=0)
        heights = np.unique(section.elevations)
        heights = heights[heights >= section.lowest_ground]
        slots = (np.diff(section.stations)[1:] == 0) & (np.diff(section.stations)[:-1] == 0)
        if heights.size < 3 or slots.any():  # a slot without width holds no water and divides nothing
            continue
        base, stage = np.sort(random.choice(heights, 2, replace=False))
        cut = _Cut(section, stage, base, 0.045, "both", float(random.choice([0, 1, 4])))
        if cut.widest == 0 or section.discharge(stage, SLOPE) == 0:
            continue
        found += 1
        for width in random.uniform(0.01, 0.99, 3) * cut.widest:
            made, _ = cut.cut_section(width)
            expected = float(cut.question().conveyance(width)) * SLOPE**0.5
            assert made.discharge(stage, SLOPE) == pytest.approx(expected, rel=1e-9)


def test_enough_already_is_no_bench():
    section = two_stage()
    before = section.discharge(4.0, SLOPE)
    bench = section.required_bench(0.5 * before, 4.0, SLOPE, 1.0, 0.05)
    assert bench.width == 0.0
    assert bench.section is section
    assert bench.discharge == bench.discharge_before == before
    assert (bench.excavation, bench.stretches) == (0.0, ())


def test_no_width_suffices_says_the_most_that_passes():
    section = two_stage()
    with pytest.raises(NoAnswerError) as caught:
        section.required_bench(1e5, 4.0, SLOPE, 1.5, 0.05)
    cut = _Cut(section, 4.0, 1.5, 0.05, "both", 0.0)
    widths = np.linspace(0.001, cut.widest, 5001)
    most = bench_curve(section, widths, 4.0, SLOPE, 1.5, 0.05).max()
    assert caught.value.nearest == pytest.approx(most, rel=1e-6)
    assert caught.value.code == "no-answer"
    # no ground above the base on one side
    low = Section([0, 10, 20, 30], [5, 0, 0, 0], n=0.03)
    with pytest.raises(NoAnswerError) as caught:
        low.required_bench(1e5, 4.0, SLOPE, 1.0, 0.05, "right")
    assert caught.value.nearest == pytest.approx(low.discharge(4.0, SLOPE))


def test_feet_and_metres_give_one_bench():
    foot = 0.3048
    random = np.random.default_rng(3)
    for section, bench, target, (stage, base, sides, side_slope) in answered(random, 25):
        subareas = [Subarea(s.start / foot, s.end / foot, s.n, s.label, s.zone) for s in section.subareas]
        other = Section(section.stations / foot, section.elevations / foot, subareas, units="us")
        answer = other.required_bench(
            target / foot**3, stage / foot, SLOPE, base / foot, 0.045, sides, side_slope
        )
        assert answer.width * foot == pytest.approx(bench.width, rel=1e-7, abs=1e-6)
        assert answer.excavation * foot**2 == pytest.approx(bench.excavation, rel=1e-6, abs=1e-4)
        clear = section.required_opening(0.5 * section.discharge(stage, SLOPE), stage, SLOPE)
        in_feet = other.required_opening(0.5 * other.discharge(stage / foot, SLOPE), stage / foot, SLOPE)
        assert in_feet * foot == pytest.approx(clear, rel=1e-7)


def test_left_and_right_are_alike():
    random = np.random.default_rng(5)
    other = {"left": "right", "right": "left", "both": "both"}
    for section, bench, target, (stage, base, sides, side_slope) in answered(random, 25):
        seen = mirrored(section)
        answer = seen.required_bench(target, stage, SLOPE, base, 0.045, other[sides], side_slope)
        assert answer.width == pytest.approx(bench.width, rel=1e-9, abs=1e-6)
        half = 0.5 * section.discharge(stage, SLOPE)
        assert seen.required_opening(half, stage, SLOPE) == pytest.approx(
            section.required_opening(half, stage, SLOPE), rel=1e-9
        )


def test_a_hollow_reached_from_elsewhere_stays_reached():
    # a ridge at 40 to 44 above the water; the hollow behind it is wet all the same
    ground = Section([0, 0, 10, 10, 40, 44, 46, 60, 60], [8, 0, 0, 3, 6, 6, 1, 1, 8], n=0.04)
    section = ground.reached([(45, 60)])
    target = 1.4 * section.discharge(4.0, SLOPE)
    bench = section.required_bench(target, 4.0, SLOPE, 2.0, 0.04, "right")
    assert 10 < bench.stretches[0].end < 40
    assert bench.section.discharge(4.0, SLOPE) == pytest.approx(target, rel=1e-9)
    # cut through the ridge, the hollow is one with the channel: nothing is counted twice
    through = float(bench_curve(section, 35.5, 4.0, SLOPE, 2.0, 0.04, "right"))
    made, _ = _Cut(section, 4.0, 2.0, 0.04, "right", 0.0).cut_section(35.5)
    assert made.discharge(4.0, SLOPE) == pytest.approx(through, rel=1e-9)
    alone, _ = _Cut(ground, 4.0, 2.0, 0.04, "right", 0.0).cut_section(35.5)
    assert made.discharge(4.0, SLOPE) == pytest.approx(alone.discharge(4.0, SLOPE), rel=1e-12)


def test_arrays_in_arrays_out():
    section = two_stage()
    before = section.discharge(4.0, SLOPE)
    benches = section.required_bench(np.array([1.5, 2.0]) * before, 4.0, SLOPE, 1.5, 0.05)
    assert benches.shape == (2,)
    assert benches[1].width == section.required_bench(2.0 * before, 4.0, SLOPE, 1.5, 0.05).width
    curve = bench_curve(section, [[0.0, benches[0].width], [benches[1].width, 1e3]], 4.0, SLOPE, 1.5, 0.05)
    assert curve[0] == pytest.approx([before, 1.5 * before])
    assert curve[1, 0] == pytest.approx(2.0 * before)
    assert np.isnan(curve[1, 1])
    widths = section.required_opening([20.0, 40.0], [[3.0], [4.0]], SLOPE)
    assert widths.shape == (2, 2)
    assert widths[1, 0] == section.required_opening(20.0, 4.0, SLOPE)
    assert isinstance(widths[0, 0].item(), float)


@pytest.mark.parametrize(
    ("change", "code"),
    [
        ({"base": -0.1}, "value-not-allowed"),
        ({"base": 4.0}, "value-not-allowed"),
        ({"sides": "middle"}, "value-not-allowed"),
        ({"side_slope": -1.0}, "value-not-allowed"),
        ({"n": 0.0}, "number-not-positive"),
        ({"discharge": -1.0}, "number-not-positive"),
        ({"slope": 0.0}, "number-not-positive"),
        ({"stage": np.nan}, "number-not-finite"),
    ],
)
def test_wrong_questions_are_refused(change, code):
    given = {"discharge": 1e3, "stage": 4.0, "slope": SLOPE, "base": 1.5, "n": 0.05} | change
    with pytest.raises(InputError) as caught:
        two_stage().required_bench(**given)
    assert caught.value.code == code


# --- opening ----------------------------------------------------------------------------------------


def test_opening_on_level_ground_is_a_rectangle():
    section = Section([0, 40, 60, 100], [3, 0, 0, 3], n=0.03)
    stage, width = 2.0, 12.5
    expected = width * stage / 0.03 * (width * stage / (width + 2 * stage)) ** (2 / 3) * SLOPE**0.5
    assert section.required_opening(expected, stage, SLOPE) == pytest.approx(width, rel=1e-9)


def between_walls(section: Section, width: float, stage: float) -> Section:
    """The section between two walls about the middle of its channel, made by hand."""
    x, z = section.stations, section.elevations
    centre = opening_centre(section)
    left, right = centre - width / 2, centre + width / 2
    if left < x[0]:
        left, right = x[0], x[0] + width
    if right > x[-1]:
        left, right = x[-1] - width, x[-1]
    left, right = max(left, x[0]), min(right, x[-1])
    inside = (x > left) & (x < right)
    xs = np.concatenate([[left, left], x[inside], [right, right]])
    ends = np.interp([left, right], x, z)
    zs = np.concatenate([[max(stage, ends[0]) + 1, ends[0]], z[inside], [ends[1], max(stage, ends[1]) + 1]])
    parts = [
        Subarea(max(s.start, left), min(s.end, right), s.n, s.label, s.zone)
        for s in section.subareas
        if min(s.end, right) > max(s.start, left)
    ]
    return Section(xs, zs, parts, connected=False, composite=section.composite)


def test_walls_pass_the_flow_and_narrower_ones_do_not():
    random = np.random.default_rng(23)
    found = 0
    for trial in range(160):
        section = natural(random, connected=False, faces=False, varying=trial % 3 == 0)
        low = section.lowest_ground
        stage = low + random.uniform(1.0, 5.0)
        target = section.discharge(stage, SLOPE) * random.uniform(0.05, 0.95)
        try:
            width = section.required_opening(target, stage, SLOPE)
        except NoAnswerError:
            continue
        made = between_walls(section, width, stage)
        # walls above dry ground stand clear of the water and change nothing
        passed = made.discharge(stage, SLOPE)
        assert passed >= target * (1 - 1e-9)
        assert between_walls(section, 0.99 * width, stage).discharge(stage, SLOPE) < target
        for share in (0.3, 0.6, 0.9):
            assert between_walls(section, share * width, stage).discharge(stage, SLOPE) < target
        found += 1
    assert found > 120


def test_opening_meets_the_discharge_where_it_does_not_jump():
    section = Section([0, 30, 40, 60, 70, 100], [6, 3, 0, 0, 3, 6], n=0.03)
    for share in (0.1, 0.4, 0.7, 0.95):
        target = share * section.discharge(5.0, SLOPE)
        width = section.required_opening(target, 5.0, SLOPE)
        assert between_walls(section, width, 5.0).discharge(5.0, SLOPE) == pytest.approx(target, rel=1e-9)


def test_wall_at_the_sections_end_stays_and_the_other_goes_on():
    # the channel is near the left end
    section = Section(
        [0, 4, 16, 100],
        [0.5, 0, 0, 0.5],
        [Subarea(0, 4, 0.03), Subarea(4, 16, 0.03, zone="channel"), Subarea(16, 100, 0.03)],
    )
    assert opening_centre(section) == 10.0
    target = between_walls(section, 50.0, 2.0).discharge(2.0, SLOPE)
    width = section.required_opening(target, 2.0, SLOPE)
    assert width == pytest.approx(50.0, rel=1e-9)


def test_opening_that_cannot_pass_says_the_most():
    section = two_stage()
    with pytest.raises(NoAnswerError) as caught:
        section.required_opening(1e6, 4.0, SLOPE)
    assert caught.value.nearest == pytest.approx(section.discharge(4.0, SLOPE), rel=1e-6)
    with pytest.raises(NoAnswerError, match="dry"):
        section.required_opening(1.0, -1.0, SLOPE)
    with pytest.raises(InputError):
        section.required_opening(-1.0, 4.0, SLOPE)
