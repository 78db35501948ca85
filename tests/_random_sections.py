"""Seeded random sections for the tests of the hydraulics: vertical faces, ridges, hollows, subareas."""

from __future__ import annotations

from itertools import pairwise

import numpy as np

from terrain2q.hydraulics.section import CHANNEL, DepthRoughness, Section, Subarea


def profile(random, points: int, *, faces: bool = True, flats: bool = True, digits: int | None = 2):
    """Return stations and elevations of an irregular section whose lowest ground is one point."""
    steps = random.uniform(0.5, 12.0, points - 1)
    x = np.concatenate([[0.0], np.cumsum(steps)])
    z = np.cumsum(random.normal(0.0, 1.0, points)) + 6.0 * np.abs(np.linspace(-1, 1, points)) ** 2
    if digits is not None:
        x, z = x.round(digits), z.round(digits)
    if flats:
        for i in random.choice(points - 1, size=points // 6, replace=False):
            z[i + 1] = z[i]
    if faces:
        # a face never follows another: three points at one station would make a wall without thickness
        for i in random.choice(np.arange(1, points - 2, 2), size=points // 8, replace=False):
            x[i + 1] = x[i]
    low = int(random.integers(points // 4, points - points // 4))
    z[low] = z.min() - 0.5
    return x, z


def limits(random, x, count: int):
    """Return the limits of `count` subareas: at points, at vertical faces and between points."""
    faces = x[1:][np.diff(x) == 0]
    between = random.uniform(x[0], x[-1], count)
    pool = np.concatenate([random.choice(x[1:-1], count), between, faces])
    inner = np.unique(pool[(pool > x[0]) & (pool < x[-1])])
    inner = np.sort(random.choice(inner, size=min(count - 1, inner.size), replace=False))
    return np.concatenate([[x[0]], inner, [x[-1]]])


def subareas(random, edges, *, zones: bool = False, low: float | None = None, varying: bool = False):
    """Return subareas between `edges`; the one that holds station `low` (and one beside) is the channel's."""
    made = []
    holds = int(np.clip(np.searchsorted(edges, low, side="right") - 1, 0, len(edges) - 2)) if zones else -1
    for i, (start, end) in enumerate(pairwise(edges)):
        n = float(random.uniform(0.02, 0.12))
        if varying and random.random() < 0.7:
            shallow, span = random.uniform(0.0, 0.8), random.uniform(0.2, 2.0)
            n = DepthRoughness(n, shallow, n * random.uniform(0.2, 0.9), shallow + span)
        zone = ""
        if zones:
            zone = (
                CHANNEL if holds <= i <= holds + 1 else "left floodplain" if i < holds else "right floodplain"
            )
        made.append(Subarea(float(start), float(end), n, f"ground {i}", zone))
    return made


def section(random, points: int, count: int = 1, **options) -> Section:
    """Return a random section; options go to the profile, the subareas or the section."""
    shape = {k: options.pop(k) for k in ("faces", "flats", "digits") if k in options}
    kind = {k: options.pop(k) for k in ("zones", "varying") if k in options}
    x, z = profile(random, points, **shape)
    edges = limits(random, x, count)
    return Section(x, z, subareas(random, edges, low=x[np.argmin(z)], **kind), **options)


def mirrored(of: Section) -> Section:
    """Return the section seen from the other bank."""
    x = of.stations[0] + of.stations[-1] - of.stations[::-1]
    first, last = of.stations[0], of.stations[-1]
    other = {"left floodplain": "right floodplain", "right floodplain": "left floodplain"}
    turned = [
        Subarea(first + last - s.end, first + last - s.start, s.n, s.label, other.get(s.zone, s.zone))
        for s in reversed(of.subareas)
    ]
    origin = None if of.origin is None else first + last - of.origin
    return Section(x, of.elevations[::-1], turned, of.units, of.connected, origin, composite=of.composite)
