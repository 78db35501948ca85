"""Results made from sections of few points, without a terrain: an output folder's layers for page tests."""

from __future__ import annotations

import numpy as np
import pyproj

from terrain2q.ground.cover import FallingN, SubareaSpec
from terrain2q.ground.cut_lines import CutLine
from terrain2q.ground.terrain import Profile
from terrain2q.hydraulics.section import DepthRoughness, Section, Subarea
from terrain2q.jobs.design_flows import answer_section
from terrain2q.jobs.sections import BuiltSection
from terrain2q.output.folder import OutputFolder
from terrain2q.output.layers import make_layers
from terrain2q.units import SI, US

CRS = pyproj.CRS.from_epsg(26915)
WEST, SOUTH = 500000.0, 4600000.0

VALLEY = [(0, 6), (30, 3), (40, 3), (44, 0), (56, 0), (60, 3), (90, 3.5), (120, 6)]
"""A channel 3 m deep between floodplains and valley sides; metres."""

HOLLOW = [(0, 8), (20, 2.0), (60, 2.2), (70, 3.0), (76, 0), (84, 0), (90, 3.2), (110, 8)]
"""A channel with a bank on its left and lower ground behind it."""


def built(name, points, parts, slope=0.002, composite="divide", north=0.0, findings=()):
    """Return a section from (station, elevation) and parts (start, end, n, zone, class)."""
    x, z = np.array(points, dtype=float).T
    n_of = [p[2] for p in parts]
    specs = tuple(
        SubareaSpec(
            start, end, n if isinstance(n, float) else n.deep, float("nan"), float("nan"),
            f"table, {kind}", kind, zone,
            None if isinstance(n, float) else FallingN(n.shallow, n.shallow_depth, n.deep, n.deep_depth),
        )
        for start, end, n, zone, kind in parts
    )  # fmt: skip
    section = Section(
        x, z,
        [Subarea(s.start, s.end, n, s.land_class, s.zone) for s, n in zip(specs, n_of, strict=True)],
        composite=composite, section_id=name,
    )  # fmt: skip
    places = np.full(x.size, SOUTH + north)
    profile = Profile(x, z, WEST + x, places, np.ones(x.size, dtype=bool))
    line = CutLine(name, WEST + x[[0, -1]], places[[0, -1]], "Mill Creek", 100.0)
    return BuiltSection(line, profile, section, specs, slope, "value in the study", tuple(findings))


def folder_of(sections, flows, units=SI, settings=None, extra=(), findings=()):
    """Return the results of sections at flows, as they would be read back from an output folder."""
    events = list(dict.fromkeys(f.event for f in flows))
    answers = [answer_section(b, flows, events, 20, None, units) for b in sections]
    found = [*findings, *(f for b in sections for f in b.findings), *(f for a in answers for f in a.findings)]
    layers = make_layers(answers, found, units, CRS, CRS) | dict(extra)
    record = {
        "finished": "2026-01-01T00:00:00+00:00",
        "versions": {"terrain2q": "0.1.0"},
        "settings": {"study": {"name": "Mill Creek"}, **(settings or {})},
    }
    return OutputFolder(layers, units, CRS, record)


THREE = [
    (0.0, 42.0, 0.08, "left floodplain", "forest"),
    (42.0, 58.0, 0.035, "channel", "open water"),
    (58.0, 120.0, 0.05, "right floodplain", "pasture"),
]

FALLING = DepthRoughness(0.12, 0.3, 0.06, 1.5)

__all__ = ["CRS", "FALLING", "HOLLOW", "SI", "THREE", "US", "VALLEY", "built", "folder_of"]
