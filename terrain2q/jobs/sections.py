"""Profiles, cover, channel and slope become sections."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np

from terrain2q.errors import Finding, InputError, NoAnswerError, Terrain2qError
from terrain2q.ground.cover import ChannelPolygons, Cover, SubareaSpec, UniformCover, split_by_zone
from terrain2q.ground.cut_lines import CutLine
from terrain2q.ground.streams import length_text
from terrain2q.ground.terrain import Profile, Terrain
from terrain2q.hydraulics.banks import find_banks
from terrain2q.hydraulics.many import compiled_banks, compiled_water, worth_compiling
from terrain2q.hydraulics.section import DepthRoughness, Section, Subarea
from terrain2q.hydraulics.submerged import find_water
from terrain2q.jobs.slopes import Slopes
from terrain2q.jobs.submerged import Submerged, drainage_area, with_bed
from terrain2q.units import UnitSystem

BRIDGED_CELLS = 5
"""A gap in the terrain up to this many cells wide is bridged (common practice: a few cells)."""

_LAYER = "sections"


@dataclass(frozen=True)
class BuiltSection:
    """A cut line with all that was made of it, in SI.

    Attributes
    ----------
    line : CutLine
    profile : Profile or None
        The usable part of the sampled ground, without gaps, with the bed that was put below water; None
        where there is none.
    section : Section or None
        None where the section failed.
    specs : tuple of SubareaSpec
        The subareas with their class and the source of n.
    slope, slope_source : float, str
        NaN where there is none.
    findings : tuple of Finding
        About this section.
    drainage_area : float or None
        In the unit of its field; NaN where the field holds none, None where no field is named.
    """

    line: CutLine
    profile: Profile | None = None
    section: Section | None = None
    specs: tuple[SubareaSpec, ...] = ()
    slope: float = float("nan")
    slope_source: str = ""
    findings: tuple[Finding, ...] = field(default=())
    drainage_area: float | None = None

    @property
    def section_id(self) -> str:
        """Id of the cut line."""
        return self.line.section_id


@dataclass(frozen=True)
class SectionInputs:
    """What all sections are made from.

    Attributes
    ----------
    terrain : Terrain
    cover : Cover or UniformCover
    channel : ChannelPolygons or None
        None where banks are found in the profile, or not at all.
    banks : str
        ``auto`` or ``none``; without effect where there are channel polygons.
    channel_n : float or None
    slopes : Slopes
    spacing : float or None
        Between stations, m; one cell where None.
    units : UnitSystem
        For lengths in messages.
    submerged : Submerged or None
        What lies below water; None where nothing is said about it.
    area_field : str or None
        Field of the cut lines with the drainage area to which discharges are carried over.
    composite : str
        How several n in the channel act together: ``divide``, ``horton``, ``lotter`` or ``pavlovskii``.
    """

    terrain: Terrain
    cover: Cover | UniformCover
    channel: ChannelPolygons | None
    banks: str
    channel_n: float | None
    slopes: Slopes
    spacing: float | None
    units: UnitSystem
    submerged: Submerged | None = None
    area_field: str | None = None
    composite: str = "divide"


def build_sections(
    lines: Sequence[CutLine], inputs: SectionInputs, progress=None, compiled: bool | None = None
) -> list[BuiltSection]:
    """Sample the ground along cut lines and make a section of each.

    Parameters
    ----------
    lines : sequence of CutLine
        Turned, in the terrain's CRS.
    inputs : SectionInputs
    progress : callable, optional
        ``progress(done, total, label)``.
    compiled : bool, optional
        Whether compiled code looks at the ground; where there are many lines if left out.

    Returns
    -------
    list of BuiltSection
        One for each line, in order. A line that gives no section has findings that say why.
    """
    if compiled is None:
        compiled = worth_compiling(len(lines))
    usable = [i for i, line in enumerate(lines) if line.usable]
    sampled = inputs.terrain.sample(
        [np.column_stack([lines[i].x, lines[i].y]) for i in usable], spacing=inputs.spacing
    )
    built: list[BuiltSection] = [BuiltSection(line) for line in lines]
    kept: list[int] = []
    profiles: list[Profile] = []
    crossings: list[float] = []
    notes: dict[int, list[Finding]] = {i: [] for i in range(len(lines))}
    for i, whole in zip(usable, sampled, strict=True):
        crossing = _crossing_station(lines[i], whole)
        profile = _usable_part(lines[i], whole, crossing, inputs, notes[i])
        if profile is not None:
            kept.append(i)
            profiles.append(profile)
            crossings.append(crossing)
    ids = [lines[i].section_id for i in kept]
    pieces = inputs.cover.pieces_many(profiles, ids)
    intervals: Sequence = [None] * len(kept)
    if inputs.channel is not None:
        intervals, found = inputs.channel.interval_many(profiles, crossings, ids)
        place = dict(zip(ids, kept, strict=True))
        for finding in found:
            notes[place[finding.feature_id]].append(finding)
    for done, (i, profile, crossing, (cover, cover_notes), interval) in enumerate(
        zip(kept, profiles, crossings, pieces, intervals, strict=True), 1
    ):
        notes[i] += cover_notes
        try:
            built[i] = _build(lines[i], profile, crossing, cover, interval, inputs, notes[i], compiled)
        except Terrain2qError as error:
            notes[i].append(
                at_low_ground(profile, Finding("section-failed", error.what, _LAYER, lines[i].section_id))
            )
            built[i] = BuiltSection(lines[i], profile)
        if progress is not None and (done % 200 == 0 or done == len(kept)):
            progress(done, len(kept), "sections")
    areas = [None if inputs.area_field is None else drainage_area(b.line, inputs.area_field) for b in built]
    return [
        replace(b, findings=tuple(notes[i]), drainage_area=area)
        for i, (b, area) in enumerate(zip(built, areas, strict=True))
    ]


def _crossing_station(line: CutLine, profile: Profile) -> float:
    """Station at which the stream crosses, NaN where it does not."""
    return float(profile.station_at(line.crossing)) if np.isfinite(line.crossing) else float("nan")


def _usable_part(
    line: CutLine, whole: Profile, crossing: float, inputs: SectionInputs, notes
) -> Profile | None:
    """Return the ground between gaps that are too wide to bridge; what was done is noted."""
    known = np.isfinite(whole.elevations)
    name = line.section_id

    def note(code: str, message: str, index: int) -> None:
        notes.append(Finding(code, message, _LAYER, name, x=float(whole.x[index]), y=float(whole.y[index])))

    if known.sum() < 2:
        note("line-off-terrain", "there is no ground under the line", whole.x.size // 2)
        return None
    if known.all():
        return whole
    first, last = (int(i) for i in np.flatnonzero(known)[[0, -1]])
    station = whole.stations

    def shown(length: float) -> str:
        return length_text(length, inputs.units)

    for end, index, missing in (
        ("left", first, station[first] - station[0]),
        ("right", last, station[-1] - station[last]),
    ):
        if missing > 0:
            note("line-leaves-terrain", f"no ground under {shown(missing)} at the {end} end", index)
    # runs of points without ground between points that have it
    edges = np.flatnonzero(np.diff(known[first : last + 1].astype(np.int8))) + first
    gaps = list(zip(edges[::2], edges[1::2] + 1, strict=True))
    limit = BRIDGED_CELLS * min(inputs.terrain.cell_size) * (1 + 1e-6)
    walls = [(a, b) for a, b in gaps if station[b] - station[a] > limit]
    for a, b in gaps:
        if (a, b) not in walls:
            note(
                "gap-bridged",
                f"a gap of {shown(station[b] - station[a])} at station {shown(station[a])} was bridged",
                a,
            )
    starts = [first, *(b for _, b in walls)]
    ends = [*(a for a, _ in walls), last]
    parts = list(zip(starts, ends, strict=True))
    if np.isfinite(crossing):
        inside = [(a, b) for a, b in parts if station[a] <= crossing <= station[b]]
        if not inside:
            note(
                "gap-at-stream",
                f"there is no ground at station {shown(crossing)}",
                int(np.searchsorted(station, crossing)) - 1,
            )
            return None
        start, end = inside[0]
    else:
        start, end = max(parts, key=lambda p: station[p[1]] - station[p[0]])
    for a, b in walls:
        note(
            "gap-ends-section",
            f"a gap of {shown(station[b] - station[a])} at station {shown(station[a])} ends the section",
            a,
        )
    keep = np.arange(start, end + 1)
    keep = keep[known[keep]]
    if keep.size < 2:
        note("line-off-terrain", "too little ground under the line", start)
        return None
    return Profile(station[keep], whole.elevations[keep], whole.x[keep], whole.y[keep], whole.is_vertex[keep])


def at_low_ground(profile: Profile, finding: Finding) -> Finding:
    """Return a finding placed at the lowest ground of a profile."""
    low = int(np.argmin(profile.elevations))
    return finding.at(profile.x[low], profile.y[low])


def _build(
    line, profile, crossing, cover, interval, inputs: SectionInputs, notes, compiled: bool
) -> BuiltSection:
    answer = inputs.slopes.of(line)
    slope, source = answer.slope, answer.source
    notes += [at_low_ground(profile, finding) for finding in answer.findings]
    failed = any(f.severity == "failed" for f in notes)
    if failed:
        return BuiltSection(line, profile, slope=slope, slope_source=source)
    station, z = profile.stations, profile.elevations
    origin = crossing if station[0] <= crossing <= station[-1] else None
    wants_banks = inputs.channel is None and inputs.banks == "auto"
    if inputs.channel is not None and interval is None:
        wants_banks = True
    if wants_banks:
        try:
            banks = (compiled_banks if compiled else find_banks)(station, z, origin)
            interval = (banks.left, banks.right)
        except (NoAnswerError, InputError) as error:
            notes.append(
                at_low_ground(profile, Finding("channel-not-found", error.what, _LAYER, line.section_id))
            )
    divided = interval is not None
    specs = split_by_zone(cover, interval, inputs.channel_n if divided else None)
    profile, found = with_bed(
        line, profile, interval, specs, slope, inputs.submerged, inputs.units,
        compiled_water if compiled else find_water,
    )  # fmt: skip
    notes += found
    section = Section(
        profile.stations,
        profile.elevations,
        [Subarea(s.start, s.end, _n_of(s), s.land_class, s.zone if divided else "") for s in specs],
        origin=origin,
        composite=inputs.composite,
        section_id=line.section_id,
    )
    if not _has_low_ground(section, line, profile, inputs, notes):
        return BuiltSection(line, profile, None, tuple(specs), slope, source)
    return BuiltSection(line, profile, section, tuple(specs), slope, source)


def _n_of(spec: SubareaSpec) -> float | DepthRoughness:
    f = spec.falling
    return spec.n if f is None else DepthRoughness(f.shallow, f.shallow_depth, f.deep, f.deep_depth)


def _has_low_ground(section: Section, line: CutLine, profile: Profile, inputs: SectionInputs, notes) -> bool:
    """Whether the channel lies lower than the section's ends; noted where it does not."""
    z, low = section.elevations, section.lowest_ground
    ends = float(min(z[0], z[-1]))
    if low >= ends and z[1:-1].min(initial=np.inf) >= ends:
        message = f"the lowest ground, {length_text(low, inputs.units)}, is at an end of the section"
        notes.append(at_low_ground(profile, Finding("no-low-ground", message, _LAYER, line.section_id)))
        return False
    if low >= ends:
        message = (
            f"an end of the section, {length_text(ends, inputs.units)}, "
            f"is no higher than the channel's lowest ground, {length_text(low, inputs.units)}"
        )
        notes.append(at_low_ground(profile, Finding("end-is-lowest", message, _LAYER, line.section_id)))
    return True
