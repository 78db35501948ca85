"""Wetted geometry against shapely's own polygons: water is a box under the stage minus the ground."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
import shapely
from _random_sections import section

FAR = 50.0
"""How far the ground of the oracle goes on below the profile and beyond its ends."""


def water_polygons(x, z, stage):
    """Every separate body of water below `stage` between the ends of the section."""
    ground = shapely.Polygon([
        (x[0] - FAR, z.min() - FAR), (x[0] - FAR, z[0]), *zip(x, z, strict=True),
        (x[-1] + FAR, z[-1]), (x[-1] + FAR, z.min() - FAR),
    ])  # fmt: skip
    assert ground.is_valid
    water = shapely.box(x[0], z.min() - 1.0, x[-1], stage).difference(ground)
    return [p for p in shapely.get_parts(water) if p.geom_type == "Polygon" and p.area > 0]


def oracle(x, z, edges, stage, low=None):
    """Area, perimeter and width by subarea of the water at point `low` (x, z), or of all where it is None."""
    bodies = water_polygons(x, z, stage)
    if low is not None:
        point = shapely.Point(low)
        bodies = [b for b in bodies if low[1] < stage and b.distance(point) < 1e-9]
    count = len(edges) - 1
    strips = np.array([shapely.box(a, z.min() - 2.0, b, stage + 1.0) for a, b in pairwise(edges)])
    area, perimeter, width = np.zeros(count), np.zeros(count), np.zeros(count)
    for body in bodies:
        area += shapely.area(shapely.intersection(body, strips))
        ring = shapely.get_coordinates(shapely.normalize(body).exterior)
        if shapely.is_ccw(shapely.linearrings(ring)):
            ring = ring[::-1]
        # clockwise: the water lies to the right of every edge
        start, end = ring[:-1], ring[1:]
        level = (np.abs(start[:, 1] - stage) < 1e-10) & (np.abs(end[:, 1] - stage) < 1e-10)
        upright = start[:, 0] == end[:, 0]
        width += _lengths(start[level], end[level], strips)
        perimeter += _lengths(start[~level & ~upright], end[~level & ~upright], strips)
        for (xa, ya), (_, yb) in zip(start[upright], end[upright], strict=True):
            bottom, top = min(ya, yb), max(ya, yb)
            if xa in (x[0], x[-1]):
                # above the section's end stands an imagined wall, which has no friction
                top = min(top, z[0] if xa == x[0] else z[-1])
            side = "left" if yb < ya else "right"
            owner = np.searchsorted(edges, xa, side=side) - 1
            perimeter[np.clip(owner, 0, count - 1)] += max(top - bottom, 0.0)
    return area, perimeter, width


def _lengths(start, end, strips):
    lines = shapely.linestrings(np.stack([start, end], axis=1))
    return shapely.length(shapely.intersection(lines[:, None], strips[None, :])).sum(axis=0)


def same(found, wanted):
    scale = max(wanted.sum(), 1e-3)
    np.testing.assert_allclose(found, wanted, rtol=1e-9, atol=1e-12 * scale)
    assert found.sum() == pytest.approx(wanted.sum(), rel=1e-9)


@pytest.mark.parametrize("connected", [True, False])
def test_random_sections_agree_with_polygons(connected):
    random = np.random.default_rng(20261 + connected)
    hollows = faces_at_limits = 0
    for _ in range(500):
        s = section(random, int(random.integers(8, 32)), int(random.integers(1, 6)), connected=connected)
        x, z = s.stations, s.elevations
        edges = np.array([a.start for a in s.subareas] + [s.subareas[-1].end])
        faces_at_limits += np.isin(edges[1:-1], x[1:][np.diff(x) == 0]).any()
        stages = np.concatenate([
            random.uniform(z.min(), z.max() + 1.0, 2),
            random.choice(z, 1),  # exactly at ground: level ground there is dry, a ridge not yet passed
        ])  # fmt: skip
        found = s.geometry(stages)
        for k, stage in enumerate(stages):
            hollows += len(water_polygons(x, z, stage)) > 1
            low = (x[z.argmin()], z.min()) if connected else None
            wanted = oracle(x, z, edges, stage, low)
            parts = (found.subarea_area[k], found.subarea_perimeter[k], found.subarea_width[k])
            for mine, theirs in zip(parts, wanted, strict=True):
                same(mine, theirs)
            whole = (found.flow_area[k], found.wetted_perimeter[k], found.top_width[k])
            for mine, theirs in zip(whole, wanted, strict=True):
                assert mine == pytest.approx(theirs.sum(), rel=1e-9, abs=1e-12)
    # the sections are of the kind that matters
    assert hollows > 300
    assert faces_at_limits > 50


def lowest_inside(x, z, start, end):
    """The lowest ground of a stretch, its ends seen from inside."""
    clip = shapely.box(start + 1e-9, z.min() - 1.0, end - 1e-9, z.max() + 1.0)
    points = shapely.get_coordinates(shapely.intersection(shapely.LineString(zip(x, z, strict=True)), clip))
    near = np.clip(points[:, 0], start + 1e-9, end - 1e-9)
    points[np.abs(near - start) < 2e-9, 0] = start
    points[np.abs(near - end) < 2e-9, 0] = end
    return tuple(points[np.argmin(points[:, 1])])


def test_water_spreads_from_the_lowest_ground_of_the_channel_zone():
    random = np.random.default_rng(7)
    other = 0
    for _ in range(150):
        s = section(random, 24, 5, zones=True)
        x, z = s.stations, s.elevations
        edges = np.array([a.start for a in s.subareas] + [s.subareas[-1].end])
        channel = [a for a in s.subareas if a.zone == "channel"]
        low = lowest_inside(x, z, channel[0].start, channel[-1].end)
        assert s.lowest_ground == pytest.approx(low[1], abs=1e-7)
        stage = float(random.uniform(low[1], z.max()))
        found = s.geometry(stage)
        wanted = oracle(x, z, edges, stage, low)
        other += len(water_polygons(x, z, stage)) > 1
        for mine, theirs in zip(
            (found.subarea_area, found.subarea_perimeter, found.subarea_width), wanted, strict=True
        ):
            same(mine, theirs)
    assert other > 40


def test_hollows_reached_from_elsewhere_count():
    random = np.random.default_rng(8)
    counted = 0
    for _ in range(160):
        s = section(random, 24, 3)
        x, z = s.stations, s.elevations
        edges = np.array([a.start for a in s.subareas] + [s.subareas[-1].end])
        stage = float(random.uniform(z.min(), z.max()))
        apart = [b for b in water_polygons(x, z, stage) if b.distance(shapely.Point(x[z.argmin()], z.min()))]
        if not apart:
            continue
        hollow = apart[0]
        counted += 1
        left, _, right, _ = hollow.bounds
        found = s.reached([(left, right)]).geometry(stage)
        hollow_low = int(np.argmin(np.where((x >= left) & (x <= right), z, np.inf)))
        wanted = sum(
            np.array(oracle(x, z, edges, stage, (x[i], z[i]))) for i in (int(np.argmin(z)), hollow_low)
        )
        for mine, theirs in zip(
            (found.subarea_area, found.subarea_perimeter, found.subarea_width), wanted, strict=True
        ):
            same(mine, theirs)
    assert counted > 40
