"""Many plain sections at once, as arrays: what `jobs.sections` and `jobs.design_flows` do one by one.

A section is answered here where numbers say all there is about it, with a few findings that numbers alone
make; any other is left over for those modules. The tests hold both ways to the same rows and findings.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import reduce

import numpy as np

from terrain2q.errors import DOUBTFUL, FAILED, Finding
from terrain2q.flows import Flow, event_names, flow_for
from terrain2q.ground.cover import (
    CHANNEL,
    LEFT,
    RIGHT,
    SMALLEST,
    CoverPiece,
    FlatPieces,
    SubareaSpec,
    joined_specs,
)
from terrain2q.ground.cut_lines import CutLine
from terrain2q.ground.terrain import Profile
from terrain2q.hydraulics.review import lowest_n_for_slope, n_outside_range
from terrain2q.hydraulics.submerged import Water
from terrain2q.jobs.design_flows import (
    HIGH_ALPHA,
    HIGH_VELOCITY,
    LEAVES,
    STEEP,
    Notes,
    WaterFacts,
    tell_water,
)
from terrain2q.jobs.remarks import TELLING_SHELF, published_range
from terrain2q.jobs.sections import SectionInputs, at_low_ground
from terrain2q.jobs.submerged import water_in_channel
from terrain2q.units import SI

_ZONES = (LEFT, CHANNEL, RIGHT)


@dataclass(frozen=True)
class PlainAnswers:
    """Answers of plain sections, in SI; the arrays are those of `answer_plain`.

    Attributes
    ----------
    answered : ndarray of bool, shape (lines,)
        Which of the lines are answered here.
    lines : sequence of CutLine, shape (n,)
        The sections that `facts` and the others speak of; those not answered have no rows.
    places : ndarray of int, shape (n,)
        Their numbers among the lines.
    profiles : sequence of Profile
    slope : ndarray, shape (n,)
    slope_source : sequence of str
    facts, subareas, ratings, paths, flows : ndarray
    events : ndarray, shape (n, k, 17)
    specs : sequence of SubareaSpec
        Every kind of subarea that occurs, without its stations.
    spec : ndarray of int
        Kind of each subarea.
    names : sequence of str
        Of the k events.
    discharge : ndarray, shape (n, k)
    doubtful : ndarray of bool, shape (n, k)
    built_findings, answer_findings : sequence of tuple of Finding
        By section.
    """

    answered: np.ndarray
    lines: Sequence[CutLine]
    places: np.ndarray
    profiles: Sequence[Profile]
    slope: np.ndarray
    slope_source: Sequence[str]
    facts: np.ndarray
    subareas: np.ndarray
    ratings: np.ndarray
    events: np.ndarray
    paths: np.ndarray
    flows: np.ndarray
    specs: Sequence[SubareaSpec]
    spec: np.ndarray
    names: Sequence[str]
    discharge: np.ndarray
    doubtful: np.ndarray
    built_findings: Sequence[tuple[Finding, ...]]
    answer_findings: Sequence[tuple[Finding, ...]]


def answer_plain_sections(
    lines: Sequence[CutLine], inputs: SectionInputs, flows: Sequence[Flow], stages: int, top: float | None
) -> PlainAnswers | None:
    """Return the answers of those cut lines whose sections are plain; None where none is.

    Parameters
    ----------
    lines : sequence of CutLine
        Turned, in the terrain's CRS.
    inputs : SectionInputs
    flows : sequence of Flow
        In SI.
    stages : int
        Steps of a rating.
    top : float or None
        Height of its last stage above the lowest ground, m.
    """
    from terrain2q.hydraulics.compiled_batch import FOUND, GIVEN, UNDIVIDED, answer_plain

    if inputs.submerged is not None or inputs.area_field is not None:
        return None
    usable = [i for i, line in enumerate(lines) if line.usable]
    sampled = inputs.terrain.sample(
        [np.column_stack([lines[i].x, lines[i].y]) for i in usable], spacing=inputs.spacing
    )
    chosen = [
        (i, profile)
        for i, profile in zip(usable, sampled, strict=True)
        if len(profile) >= 2 and not np.isnan(profile.elevations.sum())
    ]
    if not chosen:
        return None
    places = np.array([i for i, _ in chosen])
    profiles = [profile for _, profile in chosen]
    lines_of = [lines[i] for i in places]
    count = len(profiles)

    wanted = np.ones(count, dtype=bool)
    names = event_names(flows)
    discharge = _discharges(flows, names, lines_of, wanted)
    slopes = [inputs.slopes.of(line) for line in lines_of]
    slope = np.array([s.slope for s in slopes], dtype=float)
    wanted &= np.isfinite(slope) & (slope > 0)
    found: list[list[Finding]] = [[] for _ in range(count)]
    crossing = np.array([line.crossing for line in lines_of], dtype=float)
    source = np.full(count, FOUND if inputs.banks == "auto" else UNDIVIDED)
    banks = np.full((count, 2), np.nan)
    along = inputs.channel is None
    if not along:
        ids = [line.section_id for line in lines_of]
        crossing = np.array(
            [
                float(p.station_at(c)) if np.isfinite(c) else np.nan
                for p, c in zip(profiles, crossing, strict=True)
            ]
        )
        intervals, notes = inputs.channel.interval_many(profiles, crossing.tolist(), ids)
        source[:] = [FOUND if interval is None else GIVEN for interval in intervals]
        banks[:] = [(np.nan, np.nan) if interval is None else interval for interval in intervals]
        place = dict(zip(ids, range(count), strict=True))
        for finding in notes:
            found[place[finding.feature_id]].append(finding)
    for i, answer in enumerate(slopes):
        found[i] += [at_low_ground(profiles[i], finding) for finding in answer.findings]
        if any(f.severity == FAILED for f in found[i]):
            wanted[i] = False
    pieces = inputs.cover.flat_pieces(profiles)
    wanted &= ~pieces.told
    # water over ground whose n falls with depth is for the sections themselves
    falls = np.array([c.falling is not None for c in pieces.classes])
    if falls.any():
        falling = np.add.reduceat(falls[pieces.row], pieces.bounds[:-1]) > 0
        wanted &= ~falling

    sizes = np.array([len(p) for p in profiles])
    bounds = np.concatenate([[0], np.cumsum(sizes)])
    x, y, station, z = (
        np.concatenate([getattr(p, name) for p in profiles]) for name in ("x", "y", "stations", "elevations")
    )
    channel_n = np.nan if inputs.channel_n is None else float(inputs.channel_n)
    class_n = np.array([c.n for c in pieces.classes], dtype=float)
    class_n[~(class_n > 0)] = 1.0  # a gap without a default, which is told and so not answered here
    left_over, facts, subareas, codes, ratings, events, paths, water = answer_plain(
        wanted, bounds, x, y, station, z, crossing, along, pieces.bounds, pieces.start, pieces.end,
        pieces.row, class_n, source, banks, channel_n, np.where(wanted, slope, 1.0), discharge, stages,
        np.nan if top is None else float(top), SI.manning, SI.gravity, SMALLEST, TELLING_SHELF,
    )  # fmt: skip
    specs, spec, has_remark = _specs(
        codes, subareas[4], source[subareas[0].astype(int)] != UNDIVIDED, pieces, inputs
    )
    remarked = np.zeros(count, dtype=bool)
    remarked[subareas[0].astype(int)[has_remark]] = True
    left_over |= remarked | _low_n(events, slope)
    gone = left_over[subareas[0].astype(int)]
    subareas, spec = subareas[:, ~gone], spec[~gone]
    ratings, paths, water = (a[:, ~left_over[a[0].astype(int)]] for a in (ratings, paths, water))

    for i in np.flatnonzero(~left_over & np.isfinite(facts[:, 1])):
        level = Water(*facts[i, 1:5].tolist())
        found[i].append(water_in_channel(lines_of[i].section_id, profiles[i], level, inputs.units))
    doubtful = np.zeros(discharge.shape, dtype=bool)
    doubtful[[any(f.severity == DOUBTFUL for f in some) for some in found]] = True
    told = _tell(left_over, lines_of, profiles, slope, facts, events, paths, names, doubtful, inputs.units)
    answered = np.zeros(len(lines), dtype=bool)
    answered[places[~left_over]] = True
    return PlainAnswers(
        answered, lines_of, places, profiles, slope, [s.source for s in slopes], facts, subareas, ratings,
        events, paths, water, specs, spec, names, discharge, doubtful,
        [tuple(f) for f in found], told,
    )  # fmt: skip


def _discharges(
    flows: Sequence[Flow], names: Sequence[str], lines: Sequence[CutLine], wanted: np.ndarray
) -> np.ndarray:
    """Return the discharge of each event at each line; a line that lacks one is not wanted."""
    everywhere = not any(f.stream or f.section or f.crossing or f.distance is not None for f in flows)
    if everywhere:
        one = [flow_for(flows, name, "") for name in names]
        if all(flow is not None for flow in one):
            return np.tile(np.array([f.discharge for f in one], dtype=float), (len(lines), 1))
    found = np.ones((len(lines), len(names)))
    for i, line in enumerate(lines):
        for e, name in enumerate(names):
            flow = flow_for(flows, name, line.section_id, line.stream, line.stream_distance)
            if flow is None:
                wanted[i] = False
            else:
                found[i, e] = flow.discharge
    return found


def _specs(
    codes: np.ndarray, zone: np.ndarray, divided: np.ndarray, pieces: FlatPieces, inputs: SectionInputs
) -> tuple[list[SubareaSpec], np.ndarray, np.ndarray]:
    """Return every kind of subarea, the kind of each, and which have an n that is worth a remark."""
    kinds, kind = np.unique(
        np.stack([codes, np.where(divided, zone, -1).astype(np.int64)], axis=1), axis=0, return_inverse=True
    )
    base = len(pieces.classes) + 1
    specs, remark = [], []
    for code, zone_number in kinds.tolist():
        rows = []
        while code:
            code, digit = divmod(code, base)
            rows.append(pieces.classes[digit - 1])
        name = _ZONES[zone_number] if zone_number >= 0 else ""
        given = inputs.channel_n if name == CHANNEL else None
        spec = reduce(joined_specs, (_spec(row, name, given) for row in reversed(rows)))
        low, high, _ = published_range(spec, spec.zone)
        specs.append(spec)
        remark.append(n_outside_range(spec.n, low, high) is not None)
    kind = kind.ravel()
    return specs, kind, np.array(remark, dtype=bool)[kind] if kind.size else np.zeros(0, dtype=bool)


def _spec(piece: CoverPiece, zone: str, given: float | None) -> SubareaSpec:
    n = (piece.n, piece.n_low, piece.n_high, piece.n_source)
    if given is not None:
        n = (float(given), float("nan"), float("nan"), "study")
    return SubareaSpec(0.0, 0.0, *n, piece.land_class, zone)


def _low_n(events: np.ndarray, slope: np.ndarray) -> np.ndarray:
    """Return which sections have an n that is low for their slope at some event."""
    area, perimeter, conveyance = events[:, :, 3], events[:, :, 4], events[:, :, 5]
    with np.errstate(invalid="ignore", divide="ignore"):
        radius = area / perimeter
        n = SI.manning * area * radius ** (2 / 3) / conveyance
        least = lowest_n_for_slope(slope[:, None], radius)
    return (n < least).any(axis=1)


def _tell(
    left_over, lines, profiles, slope, facts, events, paths, names, doubtful, units
) -> list[tuple[Finding, ...]]:
    """Return the findings about the water, and take doubtful answers down in `doubtful`."""
    count = events.shape[1]
    number = paths[0].astype(int) * count + paths[1].astype(int)
    first = np.searchsorted(number, np.arange(len(lines) * count))
    last = np.searchsorted(number, np.arange(len(lines) * count), side="right")
    share = paths[4] / events[paths[0].astype(int), paths[1].astype(int), 6]
    several = (last - first).reshape(-1, count) > 1
    behind = np.zeros(len(lines) * count, dtype=bool)
    is_first = np.zeros(number.size, dtype=bool)
    is_first[first[first < last]] = True
    behind[number[~is_first & (share >= LEAVES)]] = True
    above = np.zeros((2, len(lines) * count), dtype=bool)
    for side in (0, 1):
        above[side, number[paths[5 + side] > 0]] = True
    froude, velocity, alpha = (events[:, :, 7 + i] for i in (6, 5, 8))
    stage, outside = events[:, :, 0], 1.0 - events[:, :, 2]
    passed = ~several & (facts[:, 5, None] < stage) & (outside >= LEAVES)
    worth = passed | behind.reshape(-1, count) | above.any(axis=0).reshape(-1, count)
    worth |= (froude > 1.0) | (velocity > HIGH_VELOCITY) | (alpha > HIGH_ALPHA)
    worth |= (slope > STEEP)[:, None]
    found: list[tuple[Finding, ...]] = [()] * len(lines)
    doubtful |= (slope > STEEP)[:, None]
    for i in np.flatnonzero(worth.any(axis=1) & ~left_over).tolist():
        notes = Notes(lines[i].section_id, profiles[i], units)
        if slope[i] > STEEP:
            notes.add("slope-steep", f"the slope is {slope[i]:.3g}")
        doubtful[i] |= notes.doubtful > 0
        z = profiles[i].elevations
        for e in np.flatnonzero(worth[i]).tolist():
            before = notes.doubtful
            here = range(first[i * count + e], last[i * count + e])
            level = float(stage[i, e])
            tell_water(
                WaterFacts(
                    (level,),
                    tuple(
                        level - float(end) if above[side, i * count + e] else np.nan
                        for side, end in enumerate((z[0], z[-1]))
                    ),
                    float(froude[i, e]),
                    float(events[i, e, 1]),
                    float(velocity[i, e]),
                    float(alpha[i, e]),
                    [(float(share[p]), *paths[2:4, p].tolist(), level) for p in here[1:]],
                    float(facts[i, 5]),
                    float(outside[i, e]),
                ),
                names[e],
                notes,
            )
            doubtful[i, e] |= notes.doubtful > before
        found[i] = notes.findings()
    return found
