"""One section at one event, as a person with a calculator would work it out, from rows of the layers.

The layers hold area, perimeter and conveyance of each subarea under water. Here the roughness that joins
them is put beside them: it is that of the layer `subareas`, but where n falls with depth, where a
composite n acts in the channel, or where parts of the water share what the whole carries.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import shapely

from terrain2q.hydraulics.divided import composite_n
from terrain2q.units import UnitSystem

_SAME = 1e-5
"""Numbers that differ by a smaller part are one number to a reader."""

_ONE_N = ("horton", "pavlovskii")
"""Rules by which several n in the channel become one (Lotter's adds conveyances, as dividing does)."""


@dataclass(frozen=True)
class Part:
    """A subarea under water.

    Attributes
    ----------
    number : int
        Of the subarea, from 1 at the left.
    zone, land_class, n_source : str
    n, n_table : float
        The roughness that acts, and that of the layer `subareas`.
    start, end : float
        Stations of the subarea.
    stage : float
        Of the water over it.
    area, perimeter, radius, conveyance, discharge, velocity : float
    together : bool
        Whether it is one of those that share a composite n: its conveyance is its share by area.
    """

    number: int
    zone: str
    land_class: str
    n_source: str
    n: float
    n_table: float
    start: float
    end: float
    stage: float
    area: float
    perimeter: float
    radius: float
    conveyance: float
    discharge: float
    velocity: float
    together: bool = False

    @property
    def n_differs(self) -> bool:
        """Whether the roughness that acts is not that of the layer `subareas`."""
        return abs(self.n / self.n_table - 1.0) > _SAME


@dataclass(frozen=True)
class Together:
    """Subareas of the channel under one composite n."""

    numbers: tuple[int, ...]
    rule: str
    n: float
    area: float
    perimeter: float
    conveyance: float


@dataclass(frozen=True)
class Calculation:
    """A section at an event.

    Attributes
    ----------
    row : mapping
        The row of `design_stages`.
    parts : tuple of Part
        Empty where there is no answer.
    together : tuple of Together
    factor : float
        What every conveyance was multiplied by, so that stretches of water that share a subarea, or a
        composite n, carry what the whole carries; 1 in nearly all sections.
    """

    row: Mapping[str, Any]
    parts: tuple[Part, ...] = ()
    together: tuple[Together, ...] = ()
    factor: float = 1.0

    @property
    def event(self) -> str:
        """Name of the design flow."""
        return self.row["event"]

    @property
    def answered(self) -> bool:
        """Whether there is a stage."""
        return bool(self.parts) and math.isfinite(self.row["stage"])

    def total(self, name: str) -> float:
        """Return the sum of an attribute over the parts."""
        return math.fsum(getattr(part, name) for part in self.parts)

    @property
    def levels(self) -> list[float]:
        """Stages of the water, the channel's first."""
        others = sorted({p.stage for p in self.parts} - {self.row["stage"]}, reverse=True)
        return [self.row["stage"], *others]


def calculate(
    row: Mapping[str, Any],
    subareas: Sequence[Mapping[str, Any]],
    flows: Sequence[Mapping[str, Any]],
    units: UnitSystem,
    composite: str = "divide",
) -> Calculation:
    """Put rows of the layers together.

    Parameters
    ----------
    row : mapping
        Of `design_stages`.
    subareas, flows : sequence of mapping
        Rows of `subareas` of this section, and of `subarea_flows` of this section and event.
    units : UnitSystem
    composite : str
        The study's rule for several n in the channel.
    """
    about = {int(s["subarea"]): s for s in subareas}
    parts = [_part(about[int(f["subarea"])], f, units) for f in flows if int(f["subarea"]) in about]
    together: list[Together] = []
    if composite in _ONE_N:
        for stage in dict.fromkeys(p.stage for p in parts):
            mine = [p for p in parts if p.stage == stage and p.zone == "channel"]
            if len(mine) > 1:
                together.append(_together(mine, composite))
                parts = [replace(p, together=True, n=p.n_table) if p in mine else p for p in parts]
    # what is printed and what was carried: one factor for all where shares were given
    factors = [p.n_table / p.n for p in parts if not p.together]
    factors += [
        t.conveyance / (units.manning / t.n * t.area * (t.area / t.perimeter) ** (2 / 3)) for t in together
    ]
    factor = factors[0] if factors else 1.0
    shared = abs(factor - 1.0) > _SAME and all(abs(f / factor - 1.0) <= _SAME for f in factors)
    if shared and (together or len({p.number for p in parts}) < len(parts)):
        parts = [replace(p, n=p.n_table) for p in parts]
    else:
        factor = 1.0
        # a composite n that does not give what was carried falls with depth: say the one that does
        own = factors[len(factors) - len(together) :]
        together = [
            replace(t, n=t.n / f) if abs(f - 1.0) > _SAME else t for t, f in zip(together, own, strict=True)
        ]
    return Calculation(row, tuple(parts), tuple(together), factor)


def _part(about: Mapping[str, Any], flow: Mapping[str, Any], units: UnitSystem) -> Part:
    area, perimeter = float(flow["flow_area"]), float(flow["wetted_perimeter"])
    radius = area / perimeter if perimeter > 0 else float("nan")
    conveyance = float(flow["conveyance"])
    acting = units.manning * area * radius ** (2 / 3) / conveyance if conveyance > 0 else float("nan")
    table = float(about["n"])
    if abs(acting / table - 1.0) <= _SAME:
        acting = table
    return Part(
        int(about["subarea"]), about["zone"], about["land_class"], about["n_source"], acting, table,
        float(about["start_station"]), float(about["end_station"]), float(flow["stage"]), area, perimeter,
        radius, conveyance, float(flow["discharge"]), float(flow["mean_velocity"]),
    )  # fmt: skip


def _together(parts: Sequence[Part], rule: str) -> Together:
    perimeter = np.array([p.perimeter for p in parts])
    area = np.array([p.area for p in parts])
    n = np.array([p.n_table for p in parts])
    return Together(
        tuple(p.number for p in parts), rule, float(composite_n(perimeter, area, n, rule)), float(area.sum()),
        float(perimeter.sum()), sum(p.conveyance for p in parts),
    )  # fmt: skip


@dataclass(frozen=True)
class Stretch:
    """Water of one level along a section, from station to station."""

    start: float
    end: float
    stage: float


def stretches(row: Mapping[str, Any], profile: np.ndarray, levels: Sequence[float]) -> list[Stretch]:
    """Return the stretches of water of a section at an event.

    Parameters
    ----------
    row : mapping
        Of `design_stages`, with its geometry: the wetted parts.
    profile : ndarray, shape (n, 4)
        x, y, elevation and station of the section's points.
    levels : sequence of float
        The stages that water has there, the channel's first. Each stretch stands at the one that is
        nearest to the ground at its ends; where it ends at the section's end, at the channel's.
    """
    geometry = row.get("geometry")
    if geometry is None or len(profile) < 2 or not levels or not np.isfinite(levels[0]):
        return []
    line = shapely.linestrings(profile[:, :2])
    along = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(profile[:, :2], axis=0).T))])
    z, station = profile[:, 2], profile[:, 3]
    parts = [shapely.get_coordinates(p)[[0, -1]] for p in shapely.get_parts(geometry)]
    places = shapely.line_locate_point(line, shapely.points(np.concatenate(parts))).reshape(-1, 2)
    out = []
    for pair in np.sort(np.interp(places, along, station), axis=1):
        start, end = float(pair[0]), float(pair[1])
        stage = levels[0]
        meets = [s for s in (start, end) if station[0] < s < station[-1]]
        if meets and len(levels) > 1:
            ground = float(np.interp(meets, station, z).max())
            stage = min(levels, key=lambda level: abs(level - ground))
        out.append(Stretch(start, end, float(stage)))
    return sorted(out, key=lambda s: s.start)


def area_below(profile: np.ndarray, water: Sequence[Stretch]) -> float:
    """Return the area between the ground of a profile and the water over it."""
    total = 0.0
    for stretch in water:
        edge = _ground(profile, stretch)
        depth = stretch.stage - edge[:, 1]
        one, two, width = depth[:-1], depth[1:], np.diff(edge[:, 0])
        share = np.ones(width.size)  # of the segment that lies under water
        cut = one * two < 0
        share[cut] = np.maximum(one, two)[cut] / np.abs(one - two)[cut]
        total += float((0.5 * (np.maximum(one, 0.0) + np.maximum(two, 0.0)) * share * width).sum())
    return total


def outline(profile: np.ndarray, stretch: Stretch) -> np.ndarray:
    """Return the outline of a stretch of water, shape (n, 2), station and elevation."""
    edge = _ground(profile, stretch)
    edge[:, 1] = np.minimum(edge[:, 1], stretch.stage)
    top = [[stretch.end, stretch.stage], [stretch.start, stretch.stage]]
    return np.vstack([edge, top])


def _ground(profile: np.ndarray, stretch: Stretch) -> np.ndarray:
    z, station = profile[:, 2], profile[:, 3]
    inside = (station > stretch.start) & (station < stretch.end)
    ends = np.interp([stretch.start, stretch.end], station, z)
    x = np.concatenate([[stretch.start], station[inside], [stretch.end]])
    return np.column_stack([x, np.concatenate([ends[:1], z[inside], ends[1:]])])
