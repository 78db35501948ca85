"""What a reviewer would remark on in a section and in one of its answers: roughness and division."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from terrain2q.ground.cover import SubareaSpec
from terrain2q.ground.streams import length_text
from terrain2q.hydraulics.many import may_have_shelf
from terrain2q.hydraulics.review import (
    N_LOW_FOR_SLOPE,
    N_OUTSIDE_RANGE,
    SHELF_UNDIVIDED,
    SUBAREA_SLIVER,
    Shelf,
    n_low_for_slope,
    n_outside_range,
    sliver_subareas,
    undivided_shelves,
)
from terrain2q.hydraulics.section import CHANNEL, FlowState, Section
from terrain2q.units import UnitSystem

CHANNEL_N = (0.016, 0.15)
"""n of natural and excavated channels, from the cleanest to the weediest (Chow 1959, Table 5-6)."""

TELLING_SHELF = 0.05
"""A shelf is remarked on where dividing at its edge changes the section's discharge by this share (ours)."""


@dataclass(frozen=True)
class Remark:
    """One remark, before it becomes a finding.

    Attributes
    ----------
    code, message : str
    place : str
        What tells remarks of one code apart, such as the subarea.
    weight : float
        The greater, the worse; of one place only the worst is told.
    """

    code: str
    message: str
    place: str = ""
    weight: float = 0.0


def published_range(spec: SubareaSpec, zone: str) -> tuple[float, float, str]:
    """Return the published low and high n of a subarea, NaN where there is none, and what they hold for.

    A class has the range of its row in the roughness table; a channel to which the study gives its n,
    that of all natural and excavated channels.
    """
    if zone == CHANNEL and spec.n_source == "study":
        return (*CHANNEL_N, "natural and excavated channels (Chow 1959, Table 5-6)")
    return spec.n_low, spec.n_high, spec.land_class


def section_remarks(specs: tuple[SubareaSpec, ...], section: Section, units: UnitSystem) -> list[Remark]:
    """Return the remarks on a section that hold whatever flows in it.

    Parameters
    ----------
    specs : tuple of SubareaSpec
        The section's subareas.
    section : Section
    units : UnitSystem
        For messages.
    """
    found = []
    told: set[tuple] = set()
    for spec, subarea in zip(specs, section.subareas, strict=True):
        low, high, what = published_range(spec, subarea.zone)
        each = [spec.n] if spec.falling is None else [spec.falling.shallow, spec.falling.deep]
        for n in each:
            remark = n_outside_range(n, low, high)
            if remark is None or (n, what) in told:
                continue
            told.add((n, what))
            found.append(
                Remark(N_OUTSIDE_RANGE, f"n {n:.3g} of {what} lies outside {span_text(low, high)}", what)
            )
    limits = [section.subareas[0].start, *(s.end for s in section.subareas)]
    for sliver in sliver_subareas(limits, section.stations):
        subarea = section.subareas[sliver.subarea]
        message = (
            f"{_name(section, sliver.subarea)} is {length_text(sliver.width, units)} wide, "
            f"from station {length_text(subarea.start, units)}"
        )
        found.append(Remark(SUBAREA_SLIVER, message, str(sliver.subarea)))
    return found


def span_text(low: float, high: float) -> str:
    """Return a published range in words; a limit that is not a number does not bound."""
    if np.isfinite(low) and np.isfinite(high):
        return f"{low:.3g} to {high:.3g}"
    return f"what is at most {high:.3g}" if np.isfinite(high) else f"what is at least {low:.3g}"


def _name(section: Section, index: int) -> str:
    subarea = section.subareas[index]
    about = ", ".join(filter(None, (subarea.label, subarea.zone)))
    return f"subarea {index + 1}" + (f" ({about})" if about else "")


def state_remarks(
    section: Section, state: FlowState, units: UnitSystem, compiled: bool = False
) -> list[Remark]:
    """Return the remarks on a section at one discharge.

    Parameters
    ----------
    section : Section
        In SI.
    state : FlowState
    units : UnitSystem
        For messages.
    compiled : bool
        Whether compiled code may say where there is no shelf.
    """
    return [*_low_n(section, state, units), *_shelves(section, state, units, compiled)]


def _low_n(section: Section, state: FlowState, units: UnitSystem) -> Iterator[Remark]:
    wet = state.paths[0].wet
    mine = [i for i, s in enumerate(section.subareas) if s.zone == CHANNEL]
    if not mine:
        mine = [int(wet.conveyance[0].argmax())]
    area, perimeter, conveyance = (
        float(values[0, mine].sum()) for values in (wet.area, wet.perimeter, wet.conveyance)
    )
    if not (area > 0 and perimeter > 0):
        return
    radius = area / perimeter
    n = section.system.manning * area * radius ** (2 / 3) / conveyance
    remark = n_low_for_slope(n, state.slope, radius, section.units)
    if remark is not None:
        yield Remark(
            N_LOW_FOR_SLOPE,
            f"n {n:.3g} of the channel; on a slope of {state.slope:.3g}, at a hydraulic radius of "
            f"{length_text(radius, units)}, streams show about {remark.estimate:.2g} (Jarrett 1984)",
            "channel",
            remark.limit / n,
        )


def _shelves(section: Section, state: FlowState, units: UnitSystem, compiled: bool) -> Iterator[Remark]:
    whole = sum(p.conveyance for p in state.paths)
    for path in state.paths:
        for i in np.flatnonzero(path.wet.area[0] > 0):
            subarea = section.subareas[i]
            start, end = max(subarea.start, path.start), min(subarea.end, path.end)
            if compiled and not may_have_shelf(section, path.stage, start, end):
                continue
            x, z = _ground(section, start, end)
            if x.size < 2:
                continue
            share = float(path.wet.conveyance[0, i]) / whole
            for shelf in undivided_shelves(x, z, path.stage):
                gain = share * division_gain(x, z, path.stage, shelf)
                if gain < TELLING_SHELF:
                    continue
                yield Remark(
                    SHELF_UNDIVIDED,
                    f"{_name(section, int(i))} has a shelf {length_text(shelf.width, units)} wide and "
                    f"{length_text(shelf.depth, units)} deep, from station {length_text(shelf.start, units)} "
                    f"to {length_text(shelf.end, units)}; divided there the section would carry "
                    f"{100 * gain:.0f} % more at this stage",
                    f"{i} {shelf.side}",
                    gain,
                )


def _ground(section: Section, start: float, end: float) -> tuple[np.ndarray, np.ndarray]:
    """Return the ground between two stations, with a point at each.

    A vertical face at one of them counts where the ground between them is the deeper side.
    """
    x, z = section.stations, section.elevations
    if not end > start:
        return np.zeros(0), np.zeros(0)
    first, last = int(np.searchsorted(x, start, side="right")), int(np.searchsorted(x, end, side="left"))
    left, right = np.flatnonzero(x == start)[::-1], np.flatnonzero(x == end)
    left_z, right_z = _face(z[left]), _face(z[right])
    if not left.size:
        left_z = np.interp([start], x, z)
    if not right.size:
        right_z = np.interp([end], x, z)
    return (
        np.concatenate([np.full(left_z.size, start), x[first:last], np.full(right_z.size, end)]),
        np.concatenate([left_z[::-1], z[first:last], right_z]),
    )


def _face(z: np.ndarray) -> np.ndarray:
    """Return the heights at a limit, from the inside out, as far as they rise."""
    falls = np.flatnonzero(np.diff(z) < 0)
    return z[: falls[0] + 1] if falls.size else z


def division_gain(x: np.ndarray, z: np.ndarray, stage: float, shelf: Shelf) -> float:
    """Return by what share conveyance rises where ground of one n is divided at a shelf's edge.

    Parameters
    ----------
    x, z : ndarray, shape (m,)
        Ground of the subarea.
    stage : float
    shelf : Shelf

    Notes
    -----
    Areas and wetted perimeters of the parts, by Manning's equation with one n, which falls out.
    """
    edge = shelf.end if shelf.side == "left" else shelf.start
    # a face at the edge belongs to the deeper side
    face = z[x == edge]
    rises = face.size > 1 and face[-1] > face[0]
    parts = [
        _wetted(x, z, stage, x[0], edge, face_at_end=rises),
        _wetted(x, z, stage, edge, x[-1], face_at_start=not rises),
    ]
    area, perimeter = (sum(values) for values in zip(*parts, strict=True))
    if not perimeter > 0:
        return 0.0
    apart = sum(a ** (5 / 3) / p ** (2 / 3) for a, p in parts if p > 0)
    return float(apart / (area ** (5 / 3) / perimeter ** (2 / 3)) - 1.0)


def _wetted(
    x: np.ndarray,
    z: np.ndarray,
    stage: float,
    start: float,
    end: float,
    face_at_start: bool = True,
    face_at_end: bool = True,
) -> tuple[float, float]:
    """Return area and wetted perimeter below a level between two stations, with faces there or without."""
    depth = stage - z
    at = np.flatnonzero(depth[:-1] * depth[1:] < 0)
    share = depth[at] / (depth[at] - depth[at + 1])
    x = np.insert(x, at + 1, x[at] + share * (x[at + 1] - x[at]))
    depth = np.insert(depth, at + 1, 0.0)
    for cut in (start, end):
        if not (x == cut).any():
            k = int(np.searchsorted(x, cut))
            x, depth = np.insert(x, k, cut), np.insert(depth, k, np.interp(cut, x, depth))
    inside = (x[:-1] >= start) & (x[1:] <= end) & (depth[:-1] >= 0) & (depth[1:] >= 0)
    inside &= (depth[:-1] > 0) | (depth[1:] > 0)
    for limit, counts in ((start, face_at_start), (end, face_at_end)):
        inside &= counts | (x[:-1] != limit) | (x[1:] != limit)
    run, rise = np.diff(x)[inside], np.diff(depth)[inside]
    mean = 0.5 * (depth[:-1] + depth[1:])[inside]
    return float((run * mean).sum()), float(np.hypot(run, rise).sum())
