"""The answers about one plain section, compiled: what many thousands of sections are worked out with.

Everything here repeats, in loops over numbers, what :mod:`~terrain2q.hydraulics.wetted`,
:mod:`~terrain2q.hydraulics.divided` and :mod:`~terrain2q.hydraulics.conveyance` say in arrays. Those are
the definition, and the tests hold the two to each other; look there for the reasons and the sources.
Only plain sections come here: n does not change with depth, and subareas share no composite n.
"""

from __future__ import annotations

import numpy as np
from numba import njit

_ROUNDING = 1e-12
_HALVINGS = 50
_SAMPLES = 17

AREA, PERIMETER, WIDTH, CONVEYANCE = 0, 1, 2, 3
"""Rows of the arrays of hydraulics by subarea."""

COLUMNS = (
    "discharge", "flow_area", "wetted_perimeter", "hydraulic_radius", "top_width", "mean_velocity", "froude",
    "conveyance", "alpha", "beta",
)  # fmt: skip


@njit(cache=True)
def _conveyance(area, perimeter, factor):
    if perimeter > 0.0:
        radius = area / perimeter
        return factor * area * np.cbrt(radius * radius)
    return 0.0


@njit(cache=True)
def _over(top, bottom):
    return top / bottom if bottom > 0.0 else 0.0


@njit(cache=True)
def _wet(stage, ground, owner, out):
    """Fill `out` (area, perimeter, width by subarea) with what is wet, before a ridge is passed."""
    low, rise, rate, width, length, threshold = ground
    out[:, :] = 0.0
    for i in range(low.size):
        if stage > threshold[i]:
            depth = stage - low[i]
            part = min(depth * rate[i], 1.0)
            s = owner[i]
            out[AREA, s] += part * width[i] * (depth - 0.5 * part * rise[i])
            out[PERIMETER, s] += part * length[i]
            out[WIDTH, s] += part * width[i]


@njit(cache=True)
def _wet_after(stage, ground, owner, before, out):
    """Fill `out` with `before` and what gets wet at the stage itself: level ground, and behind a ridge."""
    low, rise, rate, width, length, threshold = ground
    out[:, :] = before
    for i in range(low.size):
        if stage == threshold[i]:
            depth = stage - low[i]
            part = 1.0 if rise[i] == 0.0 else min(depth * rate[i], 1.0)
            s = owner[i]
            out[AREA, s] += part * width[i] * (depth - 0.5 * part * rise[i])
            out[PERIMETER, s] += part * length[i]
            out[WIDTH, s] += part * width[i]


@njit(cache=True)
def _wet_between(first, last, stage, ground, owner, out):
    """Fill `out` with what is wet between two points under one level, wherever it lies below it."""
    low, rise, rate, width, length, _ = ground
    out[:, :] = 0.0
    for i in range(first, last):
        depth = stage - low[i]
        if depth > 0.0:
            part = min(depth * rate[i], 1.0)
            s = owner[i]
            out[AREA, s] += part * width[i] * (depth - 0.5 * part * rise[i])
            out[PERIMETER, s] += part * length[i]
            out[WIDTH, s] += part * width[i]


@njit(cache=True)
def _convey(wet, factor):
    """Fill the row of conveyances and return their sum."""
    total = 0.0
    for s in range(factor.size):
        wet[CONVEYANCE, s] = _conveyance(wet[AREA, s], wet[PERIMETER, s], factor[s])
        total += wet[CONVEYANCE, s]
    return total


@njit(cache=True)
def _ground(x, z, sources):
    """Return what is asked of every segment of a profile: see `Ground`."""
    m = z.size - 1
    low, rise, rate = np.empty(m), np.empty(m), np.empty(m)
    width, length, threshold = np.empty(m), np.empty(m), np.full(m, np.inf)
    for i in range(m):
        low[i] = min(z[i], z[i + 1])
        rise[i] = abs(z[i + 1] - z[i])
        rate[i] = 1e300 if rise[i] < 1e-300 else 1.0 / rise[i]
        width[i] = x[i + 1] - x[i]
        length[i] = np.hypot(width[i], rise[i])
    for source in sources:
        high = z[source]
        for i in range(source, m):
            high = max(high, z[i])
            threshold[i] = min(threshold[i], high)
        high = z[source]
        for i in range(source - 1, -1, -1):
            high = max(high, z[i + 1])
            threshold[i] = min(threshold[i], high)
    return low, rise, rate, width, length, threshold


@njit(cache=True)
def _spread(wet):
    """Return alpha / A², infinite where there is no water."""
    total = 0.0
    for s in range(wet.shape[1]):
        total += wet[CONVEYANCE, s]
    if not total > 0.0:
        return np.inf
    spread = 0.0
    for s in range(wet.shape[1]):
        if wet[AREA, s] > 0.0:
            share = wet[CONVEYANCE, s] / total
            spread += share**3 / (wet[AREA, s] * wet[AREA, s])
    return spread


@njit(cache=True)
def _laws(breaks, ground, owner, factor):
    """Return hydraulics just above and below each break, rates to the next, and where K surely rises."""
    b, count = breaks.size, factor.size
    above, below = np.zeros((b, 4, count)), np.zeros((b, 4, count))
    total_above, total_below = np.empty(b), np.empty(b)
    for k in range(b):
        _wet(breaks[k], ground, owner, below[k])
        _wet_after(breaks[k], ground, owner, below[k], above[k])
        total_below[k] = _convey(below[k], factor)
        total_above[k] = _convey(above[k], factor)
    width_rate, perimeter_rate = np.zeros((b, count)), np.zeros((b, count))
    rising = np.ones(b, dtype=np.bool_)
    for k in range(b - 1):
        span = breaks[k + 1] - breaks[k]
        for s in range(count):
            width_rate[k, s] = max((below[k + 1, WIDTH, s] - above[k, WIDTH, s]) / span, 0.0)
            perimeter_rate[k, s] = max((below[k + 1, PERIMETER, s] - above[k, PERIMETER, s]) / span, 0.0)
            sign = (
                5.0 * above[k, WIDTH, s] * above[k, PERIMETER, s]
                - 2.0 * above[k, AREA, s] * perimeter_rate[k, s]
            )
            if not sign >= 0.0:
                rising[k] = False
    return above, below, total_above, total_below, width_rate, perimeter_rate, rising


@njit(cache=True)
def _between(above, width_rate, perimeter_rate, offset, factor, out):
    """Fill `out` with the hydraulics at an offset above a break; return the conveyance."""
    total = 0.0
    for s in range(factor.size):
        out[AREA, s] = above[AREA, s] + offset * (above[WIDTH, s] + 0.5 * offset * width_rate[s])
        out[WIDTH, s] = above[WIDTH, s] + offset * width_rate[s]
        out[PERIMETER, s] = above[PERIMETER, s] + offset * perimeter_rate[s]
        out[CONVEYANCE, s] = _conveyance(out[AREA, s], out[PERIMETER, s], factor[s])
        total += out[CONVEYANCE, s]
    return total


@njit(cache=True)
def _growth(wet, perimeter_rate, s):
    """Return the derivative of the logarithm of a subarea's conveyance with stage; 0 where it is dry."""
    if wet[AREA, s] <= 0.0:
        return 0.0
    return 5 / 3 * (wet[WIDTH, s] / wet[AREA, s]) - _over(2 / 3 * perimeter_rate[s], wet[PERIMETER, s])


@njit(cache=True)
def _solve(above, width_rate, perimeter_rate, low, high, target, falling, factor, wet):
    x = 0.5 * (low + high)
    for _ in range(200):
        value = _between(above, width_rate, perimeter_rate, x, factor, wet)
        slope = 0.0
        for s in range(factor.size):
            slope += wet[CONVEYANCE, s] * _growth(wet, perimeter_rate, s)
        miss = value - target
        if (miss > 0.0) != falling:
            high = x
        else:
            low = x
        following = 0.5 * (low + high)
        if slope != 0.0:
            step = x - miss / slope
            if np.isfinite(step) and low < step < high:
                following = step
        if abs(miss) <= 4e-16 * target or following == x or high - low <= 1e-16 * high:
            break
        x = following
    return x


@njit(cache=True)
def _bounds(low, high, perimeter_rate, factor):
    """Return bounds of the conveyance between two offsets, and whether it surely only rises or falls."""
    least = most = lower = upper = 0.0
    for s in range(factor.size):
        k_least = _conveyance(low[AREA, s], high[PERIMETER, s], factor[s])
        k_most = _conveyance(high[AREA, s], low[PERIMETER, s], factor[s])
        least += k_least
        most += k_most
        if not k_most > 0.0:
            continue
        if low[AREA, s] <= 0.0 or low[PERIMETER, s] <= 0.0:
            slow, fast = 0.0, np.inf
        else:
            rate = 2 / 3 * perimeter_rate[s]
            slow = 5 / 3 * _over(low[WIDTH, s], high[AREA, s]) - _over(rate, low[PERIMETER, s])
            fast = 5 / 3 * _over(high[WIDTH, s], low[AREA, s]) - _over(rate, high[PERIMETER, s])
        lower += slow * (k_most if slow < 0.0 else k_least)
        upper += fast * (k_most if fast > 0.0 else k_least)
    return least, most, lower > 0.0 or upper < 0.0


@njit(cache=True)
def _stages(target, breaks, laws, factor, near):
    """Return every stage that carries a conveyance, from the lowest, and whether it is a bank's top."""
    above, _, total_above, total_below, width_rate, perimeter_rate, rising = laws
    b, count = breaks.size, factor.size
    found, banks = [0.0 for _ in range(0)], [False for _ in range(0)]
    wet, other = np.empty((4, count)), np.empty((4, count))
    for k in range(b):
        short_below, short_above = total_below[k] < target, total_above[k] < target
        if short_below and not short_above:
            found.append(breaks[k])
            banks.append(total_above[k] - total_below[k] > _ROUNDING * total_above[k])
        if abs(total_below[k] - target) <= _ROUNDING * target:
            peak = not rising[k] or total_above[k] < total_below[k] * (1.0 - _ROUNDING)
            trough = k > 0 and not rising[k - 1]
            if (short_below and short_above and peak) or (not short_below and trough):
                found.append(breaks[k])
                banks.append(False)
        last = k == b - 1
        pieces = [(0.0, 0.0, False) for _ in range(0)]
        if rising[k]:
            if short_above and (last or not total_below[k + 1] < target):
                span = 0.0
                if last:
                    span = max(1.0, breaks[-1] - breaks[0])
                    while _between(above[k], width_rate[k], perimeter_rate[k], span, factor, wet) < target:
                        span *= 2.0
                else:
                    span = breaks[k + 1] - breaks[k]
                pieces.append((0.0, span, False))
        else:
            # halved until each piece surely only rises or only falls
            waiting = [(0.0, breaks[k + 1] - breaks[k], total_above[k], total_below[k + 1], 0)]
            while len(waiting) > 0:
                low, high, at_low, at_high, depth = waiting.pop()
                _between(above[k], width_rate[k], perimeter_rate[k], low, factor, wet)
                _between(above[k], width_rate[k], perimeter_rate[k], high, factor, other)
                least, most, settled = _bounds(wet, other, perimeter_rate[k], factor)
                if not min(least, at_low, at_high) <= target <= max(most, at_low, at_high):
                    continue
                if settled or depth == _HALVINGS:
                    if (at_low < target) != (at_high < target):
                        pieces.append((low, high, at_high < target))
                else:
                    middle = 0.5 * (low + high)
                    value = _between(above[k], width_rate[k], perimeter_rate[k], middle, factor, wet)
                    waiting.append((low, middle, at_low, value, depth + 1))
                    waiting.append((middle, high, value, at_high, depth + 1))
        for low, high, falling in pieces:
            stage = breaks[k] + _solve(
                above[k], width_rate[k], perimeter_rate[k], low, high, target, falling, factor, wet
            )
            stage = max(stage, np.nextafter(breaks[k], np.inf))
            if not last:
                stage = min(stage, breaks[k + 1])
            found.append(stage)
            banks.append(False)
    stages, at_bank = np.array(found), np.array(banks)
    order = np.argsort(stages)
    kept = 0
    for i in order:
        if kept > 0 and stages[i] - found[kept - 1] <= near:
            if at_bank[i]:
                found[kept - 1], banks[kept - 1] = stages[i], True
        else:
            found[kept], banks[kept] = stages[i], at_bank[i]
            kept += 1
    return np.array(found[:kept]), np.array(banks[:kept])


@njit(cache=True)
def _energy_slope(above, width_rate, perimeter_rate, offset, head, factor, wet):
    total = _between(above, width_rate, perimeter_rate, offset, factor, wet)
    if not total > 0.0:
        return -np.inf
    rate = 0.0
    for s in range(factor.size):
        rate += wet[CONVEYANCE, s] * _growth(wet, perimeter_rate, s)
    rate /= total
    slope = 0.0
    for s in range(factor.size):
        area = wet[AREA, s]
        if area > 0.0:
            share = wet[CONVEYANCE, s] / total
            grows = _growth(wet, perimeter_rate, s)
            slope += share**3 / (area * area) * (3.0 * (grows - rate) - 2.0 * (wet[WIDTH, s] / area))
    return 1.0 + head * slope


@njit(cache=True)
def _flat_energy(above, width_rate, perimeter_rate, low, high, at_low, at_high, head, factor, wet):
    kept = 0
    x = low
    for _ in range(200):
        before = x
        x = 0.5 * (low + high)
        if np.isfinite(at_low):
            secant = high - at_high * (high - low) / (at_high - at_low)
            if low < secant < high:
                x = secant
        value = _energy_slope(above, width_rate, perimeter_rate, x, head, factor, wet)
        if value < 0.0:
            if kept == 1:
                at_high *= 0.5
            low, at_low, kept = x, value, 1
        else:
            if kept == -1:
                at_low *= 0.5
            high, at_high, kept = x, value, -1
        if value == 0.0 or min(high - low, abs(x - before)) <= 4e-16 * high:
            break
    return x


@njit(cache=True)
def _energy_at_breaks(breaks, laws, factor):
    """Return alpha / A² just above and below each break, and its lower bound up to the next."""
    above, below, _, _, width_rate, perimeter_rate, _ = laws
    b, count = breaks.size, factor.size
    just_above, just_below, least = np.empty(b), np.empty(b), np.zeros(b)
    end = np.empty((4, count))
    for k in range(b):
        just_above[k], just_below[k] = _spread(above[k]), _spread(below[k])
        if k == b - 1:
            continue
        _between(above[k], width_rate[k], perimeter_rate[k], breaks[k + 1] - breaks[k], factor, end)
        fast = whole = by_share = 0.0
        for s in range(count):
            fast += _conveyance(end[AREA, s], above[k, PERIMETER, s], factor[s])
            whole += end[AREA, s]
        for s in range(count):
            slow = _conveyance(above[k, AREA, s], end[PERIMETER, s], factor[s])
            by_share += _over(_over(slow, fast) ** 3, end[AREA, s] * end[AREA, s])
        least[k] = max(by_share, 1.0 / (whole * whole) if whole > 0.0 else np.inf)
    return just_above, just_below, least


@njit(cache=True)
def _critical(discharge, gravity, breaks, laws, energy, factor):
    """Return the stage of least specific energy."""
    above, _, _, _, width_rate, perimeter_rate, _ = laws
    just_above, just_below, least = energy
    b, count = breaks.size, factor.size
    wet = np.empty((4, count))
    head = discharge * discharge / (2.0 * gravity)
    width = 0.0
    for s in range(count):
        width += above[b - 1, WIDTH, s]
    parts = max(1, count) ** 2
    reach = max(1.0, np.cbrt(2.0 * head * parts / (width * width))) * 2.0
    best, place = np.inf, breaks[0]
    for k in range(b):
        tried = breaks[k] - breaks[0] + head * just_above[k]
        if tried < best:
            best, place = tried, breaks[k]
    for k in range(1, b):
        tried = breaks[k] - breaks[0] + head * just_below[k]
        if tried < best:
            best, place = tried, breaks[k]
    _between(above[b - 1], width_rate[b - 1], perimeter_rate[b - 1], reach, factor, wet)
    area_top = 0.0
    for s in range(count):
        area_top += wet[AREA, s]
    tried = breaks[b - 1] - breaks[0] + reach + head * _spread(wet)
    if tried < best:
        best, place = tried, breaks[b - 1] + reach
    limit = best
    for k in range(b):
        height = breaks[k] - breaks[0]
        bound = height + head * (least[k] if k < b - 1 else 1.0 / (area_top * area_top))
        if not bound < limit:
            continue
        span = reach if k == b - 1 else breaks[k + 1] - breaks[k]
        before, at_before = 0.0, 0.0
        for j in range(_SAMPLES):
            offset = j / (_SAMPLES - 1) * span
            value = _energy_slope(above[k], width_rate[k], perimeter_rate[k], offset, head, factor, wet)
            if j > 0 and at_before < 0.0 and value > 0.0:
                inside = _flat_energy(
                    above[k], width_rate[k], perimeter_rate[k], before, offset, at_before, value, head,
                    factor, wet,
                )  # fmt: skip
                _between(above[k], width_rate[k], perimeter_rate[k], inside, factor, wet)
                tried = height + inside + head * _spread(wet)
                if tried < best:
                    best, place = tried, breaks[k] + inside
            before, at_before = offset, value
    return place


@njit(cache=True)
def _columns(area, perimeter, width, conveyance, root, gravity, out):
    """Fill one row of hydraulic columns (`COLUMNS`) from its parts."""
    whole = around = top = total = 0.0
    for s in range(area.size):
        whole += area[s]
        around += perimeter[s]
        top += width[s]
        total += conveyance[s]
    discharge = total * root
    alpha = beta = froude = np.nan
    if total > 0.0:
        mean = total / whole
        cubes = squares = 0.0
        for s in range(area.size):
            if area[s] > 0.0:
                relative = conveyance[s] / area[s] / mean
                cubes += area[s] * relative**3
                squares += area[s] * relative**2
        alpha, beta = cubes / whole, squares / whole
    velocity = _over(discharge, whole)
    depth = _over(whole, top)
    if depth > 0.0:
        froude = velocity * np.sqrt(alpha) / np.sqrt(gravity * depth)
    out[0], out[1], out[2] = discharge, whole, around
    out[3], out[4], out[5] = _over(whole, around), top, velocity
    out[6], out[7], out[8], out[9] = froude, total, alpha, beta


@njit(cache=True)
def _bank_tops(ground, owner, factor):
    """Return the tops of banks, and whether the hollow behind adds more than a hundredth."""
    low, threshold = ground[0], ground[5]
    behind = threshold[threshold > low]
    crossed = np.unique(behind)
    tops, telling = np.empty(crossed.size), np.empty(crossed.size, dtype=np.bool_)
    before, after = np.empty((4, factor.size)), np.empty((4, factor.size))
    kept = 0
    for stage in crossed:
        _wet(stage, ground, owner, before)
        _wet_after(stage, ground, owner, before, after)
        if after[AREA].sum() > before[AREA].sum():
            at_first, then = _convey(before, factor), _convey(after, factor)
            tops[kept], telling[kept] = stage, then - at_first > 0.01 * then
            kept += 1
    return tops[:kept], telling[:kept]


@njit(cache=True)
def _edge(x, z, dry, wet, stage):
    if wet < 0 or wet >= z.size or z[dry] <= stage or z[wet] >= stage:
        return x[dry]
    return x[dry] + (z[dry] - stage) / (z[dry] - z[wet]) * (x[wet] - x[dry])


@njit(cache=True)
def _pools(z, sources, stage):
    """Return first and last point of every stretch of water: the first source's, then from left to right."""
    out = np.empty((sources.size, 2), dtype=np.int64)
    kept = 0
    for number in range(sources.size):
        source = sources[number]
        if number > 0 and not z[source] < stage:
            continue
        first = source
        while first > 0 and z[first] < stage:
            first -= 1
        last = source
        while last < z.size - 1 and z[last] < stage:
            last += 1
        known = False
        for i in range(kept):
            known |= out[i, 0] == first and out[i, 1] == last
        if not known:
            out[kept, 0], out[kept, 1] = first, last
            kept += 1
    rest = out[1:kept]
    out[1:kept] = rest[np.argsort(rest[:, 0])]
    return out[:kept]


@njit(cache=True)
def rating_and_events(x, z, owner, sources, factor, channel, root, gravity, steps, top, discharges):
    """Return the rating and the answers at discharges of one section.

    Parameters
    ----------
    x, z : ndarray, shape (m,)
        The cut profile.
    owner : ndarray of int, shape (m - 1,)
    sources : ndarray of int
        Points from which water spreads, the channel's low point first.
    factor : ndarray, shape (subareas,)
        The constant of Manning's equation over n.
    channel : ndarray of bool, shape (subareas,)
        Subareas of the channel zone.
    root, gravity : float
        Square root of the slope; gravity.
    steps : int
        Even steps of the rating.
    top : float
        Its highest stage.
    discharges : ndarray, shape (k,)
        > 0.

    Returns
    -------
    level : ndarray, shape (rows,)
    rating : ndarray, shape (10, rows)
        The rows of `COLUMNS`.
    tops, telling : ndarray
        Tops of banks and whether they tell.
    stages, at_bank : list of ndarray
        By discharge.
    critical : ndarray, shape (k,)
    columns : ndarray, shape (k, 10)
        Hydraulic columns; NaN where the stage is a bank's top, whose paths are not worked out here.
    share : ndarray, shape (k,)
        Of the channel zone.
    places : ndarray, shape (paths, 6)
        Number of the discharge, start, end, first and last point, stage.
    parts : ndarray, shape (paths, 4, subareas)
        Area, perimeter, width and conveyance of every path.
    """
    ground = _ground(x, z, sources)
    count = factor.size
    breaks = np.unique(z)
    near = _ROUNDING * max(1.0, breaks[-1] - breaks[0])
    tops, telling = _bank_tops(ground, owner, factor)

    lowest = z[sources[0]]
    level = np.empty(steps + tops.size)
    for i in range(steps):
        level[i] = lowest + (top - lowest) * (i + 1) / steps
    size = steps
    for i in range(tops.size):
        if telling[i] and tops[i] <= top:
            level[size] = tops[i]
            size += 1
    level = np.unique(level[:size])
    rows = np.empty(2 * level.size)
    passed = np.zeros(2 * level.size, dtype=np.bool_)
    size = k = 0
    for stage in level:
        while k < tops.size and tops[k] < stage:
            k += 1
        rows[size] = stage
        size += 1
        if k < tops.size and tops[k] == stage:
            rows[size], passed[size] = stage, True
            size += 1
    level = rows[:size].copy()
    rating = np.empty((10, size))
    row, wet, before = np.empty(10), np.empty((4, count)), np.empty((4, count))
    for i in range(size):
        _wet(level[i], ground, owner, before)
        if passed[i]:
            _wet_after(level[i], ground, owner, before, wet)
        else:
            wet[:, :] = before
        _convey(wet, factor)
        _columns(wet[AREA], wet[PERIMETER], wet[WIDTH], wet[CONVEYANCE], root, gravity, row)
        rating[:, i] = row

    k = discharges.size
    stages = [np.empty(0) for _ in range(0)]
    at_bank = [np.empty(0, dtype=np.bool_) for _ in range(0)]
    critical, share, columns = np.empty(k), np.full(k, np.nan), np.full((k, 10), np.nan)
    places = np.empty((k * sources.size, 6))
    parts = np.empty((k * sources.size, 4, count))
    paths = 0
    laws = _laws(breaks, ground, owner, factor)
    energy = _energy_at_breaks(breaks, laws, factor)
    divided = channel.any()
    for i in range(k):
        target = discharges[i] / root
        found, banks = _stages(target, breaks, laws, factor, near)
        stages.append(found)
        at_bank.append(banks)
        critical[i] = _critical(discharges[i], gravity, breaks, laws, energy, factor)
        if banks[-1]:
            continue
        stage = found[-1]
        begin = paths
        total = 0.0
        for first, last in _pools(z, sources, stage):
            places[paths, 0], places[paths, 5] = i, stage
            places[paths, 1] = _edge(x, z, first, first + 1, stage)
            places[paths, 2] = _edge(x, z, last, last - 1, stage)
            places[paths, 3], places[paths, 4] = first, last
            _wet_between(first, last, stage, ground, owner, parts[paths])
            total += _convey(parts[paths], factor)
            paths += 1
        for p in range(begin, paths):
            for s in range(count):
                parts[p, CONVEYANCE, s] *= target / total
        some = parts[begin:paths]
        _columns(
            some[:, AREA].copy().ravel(), some[:, PERIMETER].copy().ravel(), some[:, WIDTH].copy().ravel(),
            some[:, CONVEYANCE].copy().ravel(), root, gravity, row,
        )  # fmt: skip
        columns[i] = row
        if divided:
            carried = whole = 0.0
            for p in range(begin, paths):
                for s in range(count):
                    whole += parts[p, CONVEYANCE, s]
                    if channel[s]:
                        carried += parts[p, CONVEYANCE, s]
            share[i] = carried / whole
    return (
        level, rating, tops, telling, stages, at_bank, critical, columns, share, places[:paths].copy(),
        parts[:paths].copy(),
    )  # fmt: skip
