"""A section of 500 points rated at 60 stages: milliseconds, and the ratio to a plain Python loop.

Run alone: ``python -m pytest -n 0 -s tests/benchmarks/test_rating_speed.py``.
"""

from __future__ import annotations

import math
import time

import numpy as np

from terrain2q import Section, Subarea

POINTS, STAGES, SLOPE = 500, 60, 0.002
LEAST_RATIO, MOST_MILLISECONDS = 50.0, 1.0


def section() -> Section:
    random = np.random.default_rng(7)
    x = np.linspace(0.0, 400.0, POINTS)
    z = np.abs(x - 200.0) ** 1.2 / 60.0 + np.convolve(
        random.normal(0, 0.3, POINTS + 8), np.ones(9) / 9, "valid"
    )
    parts = [
        Subarea(0, 150, 0.08, zone="left floodplain"), Subarea(150, 250, 0.035, zone="channel"),
        Subarea(250, 400, 0.06, zone="right floodplain"),
    ]  # fmt: skip
    return Section(x, z, parts)


def plain_rating(x, z, parts, low_point, levels):
    """Return the discharge at each level by loops over lists, of the ground that water has reached."""
    answer = []
    for level in levels:
        total = 0.0
        for start, end, n in parts:
            area = perimeter = 0.0
            for i in range(len(x) - 1):
                if x[i] < start or x[i + 1] > end:
                    continue
                lower, upper = min(z[i], z[i + 1]), max(z[i], z[i + 1])
                if lower >= level:
                    continue
                between = z[i + 1 : low_point + 1] if i < low_point else z[low_point : i + 1]
                if between and max(between) >= level:
                    continue
                width, length = x[i + 1] - x[i], math.hypot(x[i + 1] - x[i], z[i + 1] - z[i])
                if upper <= level:
                    area += width * (level - 0.5 * (lower + upper))
                    perimeter += length
                else:
                    share = (level - lower) / (upper - lower)
                    area += 0.5 * share * width * (level - lower)
                    perimeter += share * length
            if perimeter > 0:
                total += area * (area / perimeter) ** (2 / 3) / n
        answer.append(total * math.sqrt(SLOPE))
    return answer


def best_of(times: int, work) -> float:
    """Return the least time of several runs, in seconds."""
    found = []
    for _ in range(times):
        began = time.perf_counter()
        work()
        found.append(time.perf_counter() - began)
    return min(found)


def test_rating_of_a_section():
    one = section()
    # the limits of the subareas are points of the profile here, so that the plain loop need not cut there
    x = np.union1d(one.stations, [150.0, 250.0])
    z = np.interp(x, one.stations, one.elevations)
    one = Section(x, z, one.subareas)
    levels = np.linspace(one.lowest_ground, min(z[0], z[-1]), STAGES + 1)[1:]
    parts = [(s.start, s.end, s.n) for s in one.subareas]
    channel = np.flatnonzero((x >= 150) & (x <= 250))
    low_point = int(channel[np.argmin(z[channel])])
    plain = plain_rating(x.tolist(), z.tolist(), parts, low_point, levels.tolist())
    # both give the same numbers, so that the ratio compares like with like
    np.testing.assert_allclose(one.discharge(levels, SLOPE), plain, rtol=1e-9)
    ready = best_of(200, lambda: one.rating_arrays(SLOPE, levels))
    fresh = best_of(300, lambda: Section(x, z, one.subareas).rating_arrays(SLOPE, levels))
    loop = best_of(3, lambda: plain_rating(x.tolist(), z.tolist(), parts, low_point, levels.tolist()))
    print(
        f"\n{x.size} points at {STAGES} stages: {1e3 * ready:.3f} ms, {1e3 * fresh:.3f} ms with the section "
        f"made anew; plain Python {1e3 * loop:.1f} ms: {loop / ready:.0f} and {loop / fresh:.0f} times that"
    )
    assert 1e3 * fresh < MOST_MILLISECONDS
    assert loop / fresh >= LEAST_RATIO
