"""Many sections at once: the same answers as `Section` gives, by compiled code where a section is plain.

A section is *plain* where n is one number in each subarea, no subareas share a composite n, and no
hollow is known to be reached from elsewhere. Others, and plain ones at a discharge for which water is
just filling a hollow behind a bank, are answered by :class:`~terrain2q.hydraulics.section.Section`.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache

import numpy as np
from numpy.typing import NDArray

from terrain2q.hydraulics.banks import Banks, find_banks
from terrain2q.hydraulics.divided import Wet
from terrain2q.hydraulics.paths import Path
from terrain2q.hydraulics.section import CHANNEL, DepthRoughness, FlowState, Section
from terrain2q.hydraulics.submerged import Water
from terrain2q.hydraulics.wetted import check_profile

Floats = NDArray[np.float64]

MANY, VERY_MANY = 300, 4000
"""Sections from which on compiled code is worth its loading, and its compiling of most of a minute."""


@cache
def can_compile() -> bool:
    """Whether the library that compiles is there; without it everything works, only slower."""
    try:
        import numba  # noqa: F401
    except ImportError:
        return False
    return True


@cache
def is_compiled() -> bool:
    """Whether compiled code lies ready on this machine, from an earlier run of this version."""
    if not can_compile():
        return False
    from terrain2q.hydraulics.compiled_batch import answer_plain

    try:
        # an index made from other source code counts as empty
        return bool(answer_plain._cache._cache_file._load_index())
    except (AttributeError, OSError, ValueError, EOFError):
        return False


def worth_compiling(sections: int) -> bool:
    """Whether so many sections are answered sooner by compiled code, its loading or compiling counted in."""
    return can_compile() and (sections >= VERY_MANY or (sections >= MANY and is_compiled()))


def compiled_banks(stations: Floats, elevations: Floats, origin: float | None = None) -> Banks:
    """Return the tops of bank as :func:`~terrain2q.hydraulics.banks.find_banks` does, errors included."""
    from terrain2q.hydraulics import compiled_shape

    x, z = check_profile(stations, elevations)
    if origin is None or x[0] <= origin <= x[-1]:
        found, left, right, stage = compiled_shape.tops_of_bank(x, z, np.nan if origin is None else origin)
        if found:
            return Banks(left, right, stage)
    return find_banks(stations, elevations, origin)


def compiled_water(
    stations: Floats, elevations: Floats, limits: tuple[float, float] | None = None
) -> Water | None:
    """Return the water as :func:`~terrain2q.hydraulics.submerged.find_water` does."""
    from terrain2q.hydraulics import compiled_shape

    x, z = np.asarray(stations, dtype=float), np.asarray(elevations, dtype=float)
    found, first, last, surface, within = compiled_shape.level_water(x, z, *(limits or (-np.inf, np.inf)))
    return Water(float(x[first]), float(x[last]), float(surface), float(within)) if found else None


def may_have_shelf(section: Section, stage: float, start: float, end: float) -> bool:
    """Whether the ground between two stations may hold a shelf; where not, it surely does not."""
    from terrain2q.hydraulics import compiled_shape

    return compiled_shape.may_have_shelf(section.stations, section.elevations, stage, start, end)


@dataclass(frozen=True)
class EventSolution:
    """A section at one discharge.

    Attributes
    ----------
    state : FlowState
    columns : dict of float
        The hydraulic columns of a rating.
    critical_stage : float
    channel_share : float
        NaN where there is no channel zone.
    """

    state: FlowState
    columns: dict[str, float]
    critical_stage: float
    channel_share: float


@dataclass(frozen=True)
class Solution:
    """A section's rating and its answers; None in the place of a discharge that `Section` must answer."""

    rating: dict[str, np.ndarray]
    events: tuple[EventSolution | None, ...]


def is_plain(section: Section) -> bool:
    """Whether compiled code can answer a section."""
    return (
        section.connected
        and not section._reached
        and not any(isinstance(s.n, DepthRoughness) for s in section.subareas)
        and (
            section.composite in ("divide", "lotter") or sum(s.zone == CHANNEL for s in section.subareas) < 2
        )
    )


def solve(
    section: Section, slope: float, steps: int, top: float | None, discharges: Sequence[float]
) -> Solution | None:
    """Return the rating and the answers of one section; None where it is not plain.

    Parameters
    ----------
    section : Section
    slope : float
        > 0.
    steps : int
        Even steps of the rating, >= 1.
    top : float or None
        How high they go above the lowest ground; to the lower end of the section where None.
    discharges : sequence of float
        > 0.
    """
    if not is_plain(section):
        return None
    from terrain2q.hydraulics import compiled

    x, z, owner = section._cut
    root = np.sqrt(slope)
    low = section.lowest_ground
    level, rating, tops, telling, stages, at_bank, critical, columns, share, places, parts = (
        compiled.rating_and_events(
            x,
            z,
            owner,
            section._source,
            section.system.manning / np.array([s.n for s in section.subareas], dtype=float),
            np.array([s.zone == CHANNEL for s in section.subareas]),
            root,
            section.system.gravity,
            steps,
            low + top if top is not None else section._rating_top(),
            np.asarray(discharges, dtype=float),
        )
    )
    # what has been worked out here is not worked out again
    section.__dict__["bank_tops"] = tuple(tops.tolist())
    section.__dict__["telling_bank_tops"] = tuple(tops[telling].tolist())
    table = {
        "section_id": np.full(level.size, section.section_id, dtype=object),
        "stage": level,
        "depth": np.maximum(level - low, 0.0),
        **dict(zip(compiled.COLUMNS, rating, strict=True)),
    }
    n = np.array([[s.n for s in section.subareas]], dtype=float)
    paths: list[list[Path]] = [[] for _ in discharges]
    left, right = x[0], x[-1]
    for (event, start, end, first, last, stage), part in zip(places.tolist(), parts, strict=True):
        area, perimeter, width, conveyance = part[:, None, :]
        paths[int(event)].append(
            Path(
                start,
                end,
                stage,
                Wet(area, perimeter, width, n, conveyance),
                bool(start == left and stage > z[int(first)]),
                bool(end == right and stage > z[int(last)]),
            )
        )
    events = []
    for i, discharge in enumerate(discharges):
        if at_bank[i][-1]:
            events.append(None)
            continue
        found = tuple(stages[i].tolist())
        events.append(
            EventSolution(
                FlowState(float(discharge), float(slope), found[-1], False, found, tuple(paths[i])),
                dict(zip(compiled.COLUMNS, columns[i].tolist(), strict=True)),
                float(critical[i]),
                float(share[i]),
            )
        )
    return Solution(table, tuple(events))
