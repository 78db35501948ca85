"""Many plain sections in one call, compiled: from ground, cover and slope to every number of the results.

Section by section it does what :func:`terrain2q.jobs.sections.build_sections` and
:func:`terrain2q.jobs.design_flows.answer_sections` do with objects, and the tests hold the two to each other.
A section for which there is more to say than numbers (`LEFT_OVER`) is left to those.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from terrain2q.hydraulics import compiled, compiled_shape, compiled_shelf
from terrain2q.hydraulics.review import SLIVER_POINTS, SLIVER_SHARE

LEFT, CHANNEL, RIGHT = 0, 1, 2
"""Zones of a subarea."""

UNDIVIDED, FOUND, GIVEN = 0, 1, 2
"""Where the tops of bank come from: nowhere, the shape of the ground, or they are given."""

AREA, PERIMETER, CONVEYANCE = compiled.AREA, compiled.PERIMETER, compiled.CONVEYANCE
_COLUMNS = len(compiled.COLUMNS)
_LONGEST_CODE = 2**61


@njit(cache=True, error_model="numpy")
def _room(values, need):
    """Return `values` with room for `need` columns, what is there kept."""
    if need <= values.shape[1]:
        return values
    more = np.empty((values.shape[0], max(need, 2 * values.shape[1])))
    more[:, : values.shape[1]] = values
    return more


@njit(cache=True, error_model="numpy")
def _station_at(x, y, station, distance):
    """Return the station of a map distance along a line, as `Profile.station_at` does."""
    if np.isnan(distance):
        return np.nan
    if distance <= 0.0:
        return station[0]
    before = 0.0
    for i in range(x.size - 1):
        after = before + np.hypot(x[i + 1] - x[i], y[i + 1] - y[i])
        if distance < after:
            return (station[i + 1] - station[i]) / (after - before) * (distance - before) + station[i]
        before = after
    return station[-1]


@njit(cache=True, error_model="numpy")
def _onto(value, one, other, smallest):
    if abs(value - one) < smallest:
        return one
    if abs(value - other) < smallest:
        return other
    return value


@njit(cache=True, error_model="numpy")
def _split(
    starts, ends, classes, class_n, divided, bank_left, bank_right, channel_n, smallest, base, out, codes
):
    """Fill `out` (start, end, n, zone) and `codes` with subareas as `split_by_zone` does; return how many.

    A code has the classes of the pieces joined, in order, as digits. 0 subareas where a code is too long.
    """
    pieces = starts.size
    first, last = starts[0], ends[pieces - 1]
    low, high = first, last
    if divided:
        low = min(max(bank_left, first), last)
        high = min(max(bank_right, first), last)
    low, high = _onto(low, first, last, smallest), _onto(high, first, last, smallest)
    kept = 0
    begin = first
    for p in range(pieces):
        end = last if p == pieces - 1 else _onto(ends[p], low, high, smallest)
        for zone in range(3):
            a, b = begin, end
            if zone == LEFT:
                b = min(end, low)
            elif zone == CHANNEL:
                a, b = max(begin, low), min(end, high)
            else:
                a = max(begin, high)
            if b <= a:
                continue
            n = class_n[classes[p]]
            if zone == CHANNEL and not np.isnan(channel_n):
                n = channel_n
            digit = classes[p] + 1
            if kept > 0 and out[kept - 1, 3] == zone and out[kept - 1, 2] == n:
                out[kept - 1, 1] = b
                if codes[kept - 1] % base != digit:
                    if codes[kept - 1] > _LONGEST_CODE // base:
                        return 0
                    codes[kept - 1] = codes[kept - 1] * base + digit
            else:
                out[kept, 0], out[kept, 1], out[kept, 2], out[kept, 3] = a, b, n, zone
                codes[kept] = digit
                kept += 1
        begin = end
    return kept


@njit(cache=True, error_model="numpy")
def _cut(x, z, subareas):
    """Return the profile with a point at every limit of the subareas, and each segment's subarea."""
    count = subareas.shape[0]
    near = 1e-12 * max(1.0, abs(x[0]), abs(x[-1]))
    starts = np.empty(count)
    for s in range(count):
        v = subareas[s, 0]
        k = min(max(np.searchsorted(x, v), 1), x.size - 1)
        nearest = x[k - 1] if v - x[k - 1] < x[k] - v else x[k]
        starts[s] = nearest if abs(nearest - v) <= near else v
    out_x, out_z = np.empty(x.size + count), np.empty(x.size + count)
    owner = np.empty(x.size + count, dtype=np.int64)
    size, s = 0, 1
    for i in range(x.size):
        while s < count and starts[s] < x[i]:
            if i > 0 and starts[s] > x[i - 1]:
                share = (starts[s] - x[i - 1]) / (x[i] - x[i - 1])
                out_x[size], out_z[size] = starts[s], z[i - 1] + share * (z[i] - z[i - 1])
                size += 1
            s += 1
        out_x[size], out_z[size] = x[i], z[i]
        size += 1
    s = 0
    for i in range(size - 1):
        middle = 0.5 * (out_x[i] + out_x[i + 1])
        while s < count - 1 and starts[s + 1] <= middle:
            s += 1
        owner[i] = s
    return out_x[:size], out_z[:size], owner[: size - 1]


@njit(cache=True, error_model="numpy")
def _sources(z, owner, mine):
    """Return the low points of the ground in some subareas, one of each stretch of equally low ground."""
    n = z.size
    low = np.inf
    for i in range(n):
        if (i < n - 1 and mine[owner[i]]) or (i > 0 and mine[owner[i - 1]]):
            low = min(low, z[i])
    found = np.empty(n, dtype=np.int64)
    kept, before = 0, -2
    for i in range(n):
        if z[i] == low and ((i < n - 1 and mine[owner[i]]) or (i > 0 and mine[owner[i - 1]])):
            if i - before > 1:
                found[kept] = i
                kept += 1
            before = i
    return found[:kept]


@njit(cache=True, error_model="numpy")
def _has_sliver(subareas, x):
    count = subareas.shape[0]
    whole = subareas[count - 1, 1] - subareas[0, 0]
    for s in range(count):
        start = subareas[0, 0] if s == 0 else subareas[s - 1, 1]
        end = subareas[s, 1]
        if end - start < SLIVER_SHARE * whole:
            inside = np.searchsorted(x, end) - np.searchsorted(x, start, side="right")
            if inside < SLIVER_POINTS:
                return True
    return False


@njit(cache=True, nogil=True, error_model="numpy")
def answer_plain(
    wanted, bounds, x, y, station, z, crossing, along, piece_bounds, piece_start, piece_end, piece_class,
    class_n, source, banks, channel_n, slope, discharge, steps, top, manning, gravity, smallest,
    telling_shelf,
):  # fmt: skip
    """Return the numbers of plain sections.

    Parameters
    ----------
    wanted : ndarray of bool, shape (n,)
        Sections to be answered; others are left over.
    bounds : ndarray of int, shape (n + 1,)
        Where each section's points begin in `x`, `y` (map), `station` and `z` (m).
    crossing : ndarray, shape (n,)
        Where the stream crosses, NaN where it does not: a map distance if `along`, else a station.
    piece_bounds : ndarray of int, shape (n + 1,)
        Where each section's pieces of cover begin in `piece_start`, `piece_end` and `piece_class`.
    class_n : ndarray
        Manning's n by class.
    source : ndarray of int, shape (n,)
        `UNDIVIDED`, `FOUND` or `GIVEN`.
    banks : ndarray, shape (n, 2)
        The tops of bank where they are given.
    channel_n : float
        n of the channel; NaN leaves it to the cover.
    slope : ndarray, shape (n,)
        > 0.
    discharge : ndarray, shape (n, k)
        > 0.
    steps : int
    top : float
        Height of the highest stage of ratings; NaN takes the lower end of each section.
    manning, gravity : float
        The constant of Manning's equation, and gravity.
    smallest : float
        Length below which a piece of a section is nothing.
    telling_shelf : float
        Share by which dividing at a shelf's edge must change the discharge to be worth a word.

    Returns
    -------
    left_over : ndarray of bool, shape (n,)
    facts : ndarray, shape (n, 6)
        Lowest ground; first and last station of level water, its height and tolerance, NaN where there is
        none; the lowest top of a bank that tells, NaN where there is none.
    subareas : ndarray, shape (5, n_subareas)
        Section, start, end, n, zone.
    codes : ndarray of int, shape (n_subareas,)
        Classes of the subarea: digits to the base of the number of classes plus one, each one too large.
    ratings : ndarray, shape (13, rows)
        Section, stage, depth and the hydraulic columns.
    events : ndarray, shape (n, k, 7 + 10)
        Stage, critical stage, share of the channel, area, perimeter and conveyance of the channel (or of
        the one subarea that carries most) in the channel's path, conveyance of all; hydraulic columns.
    paths : ndarray, shape (7, paths)
        Section, event, start, end, conveyance, whether the water stands above the left end, the right end.
    flows : ndarray, shape (7, rows)
        Section, event, subarea (from 1), area, perimeter, conveyance, conveyance of all.
    """
    n, k = wanted.size, discharge.shape[1]
    base = class_n.size + 1
    left_over = np.ones(n, dtype=np.bool_)
    facts = np.full((n, 6), np.nan)
    events = np.full((n, k, 7 + _COLUMNS), np.nan)
    subareas, subarea_count = np.empty((5, 8 * n + 8)), 0
    all_codes = np.empty(8 * n + 8, dtype=np.int64)
    ratings, rows = np.empty((3 + _COLUMNS, (steps + 4) * n + 8)), 0
    paths, path_count = np.empty((7, 2 * k * n + 8)), 0
    flows, flow_count = np.empty((7, 8 * k * n + 8)), 0
    for i in range(n):
        if not wanted[i]:
            continue
        a, b = bounds[i], bounds[i + 1]
        s, h = station[a:b], z[a:b]
        plain = b - a >= 2
        for p in range(a, b - 1):
            if not station[p + 1] > station[p]:
                plain = False
        if not plain:
            continue
        at = _station_at(x[a:b], y[a:b], s, crossing[i]) if along else crossing[i]
        origin = at if s[0] <= at <= s[-1] else np.nan
        left, right, divided = banks[i, 0], banks[i, 1], source[i] == GIVEN
        if source[i] == FOUND:
            divided, left, right, _ = compiled_shape.tops_of_bank(s, h, origin)
            if not divided:
                continue
        elif source[i] == UNDIVIDED and not np.isnan(origin):
            continue
        first, last = piece_bounds[i], piece_bounds[i + 1]
        own, own_codes = np.empty((3 * (last - first), 4)), np.empty(3 * (last - first), dtype=np.int64)
        count = _split(
            piece_start[first:last], piece_end[first:last], piece_class[first:last], class_n, divided, left,
            right, channel_n if divided else np.nan, smallest, base, own, own_codes,
        )  # fmt: skip
        own = own[:count]
        if count == 0:  # a code is too long
            continue
        is_channel = np.zeros(count, dtype=np.bool_)
        for j in range(count):
            is_channel[j] = divided and own[j, 3] == CHANNEL
        if divided and not is_channel.any():
            continue
        if _has_sliver(own, s):
            continue
        cut_x, cut_z, owner = _cut(s, h, own)
        everywhere = np.ones(count, dtype=np.bool_)
        low_points = _sources(cut_z, owner, is_channel if divided else everywhere)
        low = cut_z[low_points[0]]
        ends = min(h[0], h[-1])
        if low >= ends:
            continue
        factor = np.empty(count)
        for j in range(count):
            factor[j] = manning / own[j, 2]
        root = np.sqrt(slope[i])
        (
            level, rating, tops, telling, stages, at_bank, critical, columns, share, places, parts,
        ) = compiled.rating_and_events(
            cut_x, cut_z, owner, low_points, factor, is_channel, root, gravity, steps,
            ends if np.isnan(top) else low + top, discharge[i],
        )  # fmt: skip
        plain = True
        for e in range(k):
            found = stages[e]
            if at_bank[e][-1] or found[-1] - found[0] > 0.01:
                plain = False
        if not plain:
            continue

        # the paths of each event and what flows in them, taken back should a shelf be there
        path_begin, flow_begin = path_count, flow_count
        begin = 0
        for e in range(k):
            end = begin
            total = 0.0
            while end < places.shape[0] and places[end, 0] == e:
                for j in range(count):
                    total += parts[end, CONVEYANCE, j]
                end += 1
            paths = _room(paths, path_count + end - begin)
            for p in range(begin, end):
                carried = 0.0
                for j in range(count):
                    carried += parts[p, CONVEYANCE, j]
                start, stop, stage = places[p, 1], places[p, 2], places[p, 5]
                paths[0, path_count], paths[1, path_count] = i, e
                paths[2, path_count], paths[3, path_count], paths[4, path_count] = start, stop, carried
                paths[5, path_count] = start == cut_x[0] and stage > cut_z[int(places[p, 3])]
                paths[6, path_count] = stop == cut_x[-1] and stage > cut_z[int(places[p, 4])]
                path_count += 1
            flows = _room(flows, flow_count + count * (end - begin))
            for j in range(count):
                for p in range(begin, end):
                    area = parts[p, AREA, j]
                    if not area > 0.0:
                        continue
                    share_here = parts[p, CONVEYANCE, j] / total
                    gained = compiled_shelf.most_gained(
                        s, h, places[p, 5], max(own[j, 0], places[p, 1]), min(own[j, 1], places[p, 2])
                    )
                    # a shelf that may be worth a word is looked at by those who know the words
                    if share_here * gained > (1.0 - 1e-6) * telling_shelf:
                        plain = False
                    flows[0, flow_count], flows[1, flow_count], flows[2, flow_count] = i, e, j + 1
                    flows[3, flow_count], flows[4, flow_count] = area, parts[p, PERIMETER, j]
                    flows[5, flow_count], flows[6, flow_count] = parts[p, CONVEYANCE, j], total
                    flow_count += 1
            # n of the channel against the slope is judged by these
            most = 0
            for j in range(count):
                if parts[begin, CONVEYANCE, j] > parts[begin, CONVEYANCE, most]:
                    most = j
            area = perimeter = conveyance = 0.0
            for j in range(count):
                if is_channel[j] if divided else j == most:
                    area += parts[begin, AREA, j]
                    perimeter += parts[begin, PERIMETER, j]
                    conveyance += parts[begin, CONVEYANCE, j]
            events[i, e, 0], events[i, e, 1], events[i, e, 2] = stages[e][-1], critical[e], share[e]
            events[i, e, 3], events[i, e, 4], events[i, e, 5] = area, perimeter, conveyance
            events[i, e, 6] = total
            events[i, e, 7:] = columns[e]
            begin = end
        if not plain:
            path_count, flow_count = path_begin, flow_begin
            continue

        left_over[i] = False
        facts[i, 0] = low
        has_water, water_first, water_last, surface, within = compiled_shape.level_water(
            s, h, left if divided else -np.inf, right if divided else np.inf
        )
        if has_water:
            facts[i, 1], facts[i, 2], facts[i, 3], facts[i, 4] = (
                s[water_first],
                s[water_last],
                surface,
                within,
            )
        for t in range(tops.size):
            if telling[t]:
                facts[i, 5] = tops[t]
                break
        subareas = _room(subareas, subarea_count + count)
        if subareas.shape[1] > all_codes.size:
            more = np.empty(subareas.shape[1], dtype=np.int64)
            more[: all_codes.size] = all_codes
            all_codes = more
        for j in range(count):
            subareas[0, subarea_count] = i
            subareas[1, subarea_count], subareas[2, subarea_count] = own[j, 0], own[j, 1]
            subareas[3, subarea_count], subareas[4, subarea_count] = own[j, 2], own[j, 3]
            all_codes[subarea_count] = own_codes[j]
            subarea_count += 1
        ratings = _room(ratings, rows + level.size)
        for r in range(level.size):
            ratings[0, rows + r], ratings[1, rows + r] = i, level[r]
            ratings[2, rows + r] = max(level[r] - low, 0.0)
        ratings[3:, rows : rows + level.size] = rating
        rows += level.size
    return (
        left_over, facts, subareas[:, :subarea_count], all_codes[:subarea_count], ratings[:, :rows], events,
        paths[:, :path_count], flows[:, :flow_count],
    )  # fmt: skip
