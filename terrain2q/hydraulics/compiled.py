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


@njit(cache=True, error_model="numpy")
def _conveyance(area, perimeter, factor):
    if perimeter > 0.0:
        radius = area / perimeter
        return factor * area * np.cbrt(radius * radius)
    return 0.0


@njit(cache=True, error_model="numpy")
def _over(top, bottom):
    return top / bottom if bottom > 0.0 else 0.0


@njit(cache=True, error_model="numpy")
def _wet_between(first, last, stage, ground, owner, out):
    """Fill `out` with what is wet between two points under one level, wherever it lies below it."""
    low, rise, rate, width, length, _, _ = ground
    out[:, :] = 0.0
    for i in range(first, last):
        depth = stage - low[i]
        if depth > 0.0:
            part = min(depth * rate[i], 1.0)
            s = owner[i]
            out[AREA, s] += part * width[i] * (depth - 0.5 * part * rise[i])
            out[PERIMETER, s] += part * length[i]
            out[WIDTH, s] += part * width[i]


@njit(cache=True, error_model="numpy")
def _convey(wet, factor):
    """Fill the row of conveyances and return their sum."""
    total = 0.0
    for s in range(factor.size):
        wet[CONVEYANCE, s] = _conveyance(wet[AREA, s], wet[PERIMETER, s], factor[s])
        total += wet[CONVEYANCE, s]
    return total


@njit(cache=True, error_model="numpy")
def _ground(x, z, sources):
    """Return what is asked of every segment of a profile, see `Ground`, and its elevations in order.

    The ranks are places among the breaks: of the higher end of each segment, and of the stage above which
    water gets to it.
    """
    m = z.size - 1
    order = np.argsort(z)
    breaks, rank = np.empty(z.size), np.empty(z.size, dtype=np.int64)
    kept = 0
    for i in order:
        if kept == 0 or z[i] > breaks[kept - 1]:
            breaks[kept] = z[i]
            kept += 1
        rank[i] = kept - 1
    low, rise, rate = np.empty(m), np.empty(m), np.empty(m)
    width, length = np.empty(m), np.empty(m)
    high_rank, rank_reached = np.empty(m, dtype=np.int64), np.full(m, kept)
    for i in range(m):
        low[i] = min(z[i], z[i + 1])
        rise[i] = abs(z[i + 1] - z[i])
        rate[i] = 1e300 if rise[i] < 1e-300 else 1.0 / rise[i]
        width[i] = x[i + 1] - x[i]
        length[i] = np.hypot(width[i], rise[i])
        high_rank[i] = max(rank[i], rank[i + 1])
    for source in sources:
        high = rank[source]
        for i in range(source, m):
            high = max(high, rank[i])
            rank_reached[i] = min(rank_reached[i], high)
        high = rank[source]
        for i in range(source - 1, -1, -1):
            high = max(high, rank[i + 1])
            rank_reached[i] = min(rank_reached[i], high)
    return breaks[:kept].copy(), (low, rise, rate, width, length, high_rank, rank_reached)


@njit(cache=True, error_model="numpy")
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


@njit(cache=True, error_model="numpy")
def _add_wet(i, stage, ground, s, out):
    """Add a segment that water has reached to its subarea."""
    low, rise, rate, width, length, _, _ = ground
    depth = stage - low[i]
    part = 1.0 if rise[i] == 0.0 else min(depth * rate[i], 1.0)
    out[AREA, s] += part * width[i] * (depth - 0.5 * part * rise[i])
    out[PERIMETER, s] += part * length[i]
    out[WIDTH, s] += part * width[i]


@njit(cache=True, error_model="numpy")
def _laws(breaks, ground, owner, factor):
    """Return hydraulics just above and below each break, rates to the next, and where K surely rises.

    The water rises from break to break: what is wholly wet only grows deeper, and no more than the segments
    that are wet in part are looked at. Everything that is summed is positive, so no digit is lost.
    """
    low, rise, _, width, length, high_rank, rank_reached = ground
    b, count, m = breaks.size, factor.size, low.size
    above, below = np.zeros((b, 4, count)), np.zeros((b, 4, count))
    total_above, total_below = np.empty(b), np.empty(b)
    # the segments that water reaches at each break, one after another
    first, following = np.full(b, -1), np.full(m, -1)
    for i in range(m - 1, -1, -1):
        k = rank_reached[i]
        if k < b:
            following[i], first[k] = first[k], i
    whole, in_part, parts = np.zeros((3, count)), np.empty(m, dtype=np.int64), 0
    gained = np.zeros(count, dtype=np.bool_)
    for k in range(b):
        stage = breaks[k]
        if k > 0:
            span = stage - breaks[k - 1]
            for s in range(count):
                whole[AREA, s] += span * whole[WIDTH, s]
        here, then = below[k], above[k]
        for s in range(count):
            here[AREA, s], here[PERIMETER, s] = whole[AREA, s], whole[PERIMETER, s]
            here[WIDTH, s] = whole[WIDTH, s]
            gained[s] = False
        p = 0
        while p < parts:
            i = in_part[p]
            s = owner[i]
            _add_wet(i, stage, ground, s, here)
            if high_rank[i] <= k:
                whole[AREA, s] += width[i] * (stage - low[i] - 0.5 * rise[i])
                whole[PERIMETER, s] += length[i]
                whole[WIDTH, s] += width[i]
                parts -= 1
                in_part[p] = in_part[parts]
            else:
                p += 1
        total_below[k] = _convey(here, factor)
        for s in range(count):
            then[AREA, s], then[PERIMETER, s] = here[AREA, s], here[PERIMETER, s]
            then[WIDTH, s], then[CONVEYANCE, s] = here[WIDTH, s], here[CONVEYANCE, s]
        i = first[k]
        while i >= 0:
            s = owner[i]
            gained[s] = True
            _add_wet(i, stage, ground, s, then)
            if high_rank[i] <= k:
                whole[AREA, s] += width[i] * (stage - low[i] - 0.5 * rise[i])
                whole[PERIMETER, s] += length[i]
                whole[WIDTH, s] += width[i]
            else:
                in_part[parts] = i
                parts += 1
            i = following[i]
        total = 0.0
        for s in range(count):
            if gained[s]:
                then[CONVEYANCE, s] = _conveyance(then[AREA, s], then[PERIMETER, s], factor[s])
            total += then[CONVEYANCE, s]
        total_above[k] = total
    width_rate, perimeter_rate = np.zeros((b, count)), np.zeros((b, count))
    rising = np.ones(b, dtype=np.bool_)
    least, most = np.zeros(b), np.full(b, np.inf)
    for k in range(b - 1):
        span = breaks[k + 1] - breaks[k]
        for s in range(count):
            if not below[k + 1, PERIMETER, s] > 0.0:
                continue
            width_rate[k, s] = max((below[k + 1, WIDTH, s] - above[k, WIDTH, s]) / span, 0.0)
            perimeter_rate[k, s] = max((below[k + 1, PERIMETER, s] - above[k, PERIMETER, s]) / span, 0.0)
            sign = (
                5.0 * above[k, WIDTH, s] * above[k, PERIMETER, s]
                - 2.0 * above[k, AREA, s] * perimeter_rate[k, s]
            )
            if not sign >= 0.0:
                rising[k] = False
        if not rising[k]:
            # between the two breaks area and perimeter only grow: rough bounds of the conveyance
            slow = fast = 0.0
            for s in range(count):
                before, after = above[k, PERIMETER, s], below[k + 1, PERIMETER, s]
                if before > 0.0:
                    slow += above[k, CONVEYANCE, s] * (before / after)
                    fast += below[k + 1, CONVEYANCE, s] * (after / before)
                else:
                    fast += below[k + 1, CONVEYANCE, s]
            least[k], most[k] = slow * (1.0 - 1e-9), fast * (1.0 + 1e-9)
    return above, below, total_above, total_below, width_rate, perimeter_rate, rising, least, most


@njit(cache=True, error_model="numpy")
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


@njit(cache=True, error_model="numpy")
def _growth(wet, perimeter_rate, s):
    """Return the derivative of the logarithm of a subarea's conveyance with stage; 0 where it is dry."""
    if wet[AREA, s] <= 0.0:
        return 0.0
    return 5 / 3 * (wet[WIDTH, s] / wet[AREA, s]) - _over(2 / 3 * perimeter_rate[s], wet[PERIMETER, s])


@njit(cache=True, error_model="numpy")
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


@njit(cache=True, error_model="numpy")
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


@njit(cache=True, error_model="numpy")
def _stages(target, breaks, laws, factor, near):
    """Return every stage that carries a conveyance, from the lowest, and whether it is a bank's top."""
    above, _, total_above, total_below, width_rate, perimeter_rate, rising, rough_least, rough_most = laws
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
        if rising[k]:
            if not (short_above and (last or not total_below[k + 1] < target)):
                continue
        elif not (
            min(rough_least[k], total_above[k], total_below[k + 1])
            <= target
            <= max(rough_most[k], total_above[k], total_below[k + 1])
        ):
            continue
        pieces = [(0.0, 0.0, False) for _ in range(0)]
        if rising[k]:
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


@njit(cache=True, error_model="numpy")
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


@njit(cache=True, error_model="numpy")
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


@njit(cache=True, error_model="numpy")
def _areas_at_breaks(breaks, laws):
    """Return the area of all subareas just above and just below each break."""
    above, below = laws[0], laws[1]
    b, count = breaks.size, above.shape[2]
    just_above, just_below = np.zeros(b), np.zeros(b)
    for k in range(b):
        for s in range(count):
            just_above[k] += above[k, AREA, s]
            just_below[k] += below[k, AREA, s]
    return just_above, just_below


@njit(cache=True, error_model="numpy")
def _least_spread(k, laws):
    """Return a lower bound of alpha / A² between a break and the next, where all that is wet only grows."""
    above, below = laws[0], laws[1]
    count = above.shape[2]
    fast = by_share = 0.0
    for s in range(count):
        before, after = above[k, PERIMETER, s], below[k + 1, PERIMETER, s]
        fast += below[k + 1, CONVEYANCE, s] * (after / before if before > 0.0 else 1.0)
    for s in range(count):
        before, after = above[k, PERIMETER, s], below[k + 1, PERIMETER, s]
        if before > 0.0 and below[k + 1, AREA, s] > 0.0:
            slow = above[k, CONVEYANCE, s] * (before / after)
            by_share += (slow / fast) ** 3 / (below[k + 1, AREA, s] * below[k + 1, AREA, s])
    return by_share * (1.0 - 1e-9)


@njit(cache=True, error_model="numpy")
def _over_square(area):
    return 1.0 / (area * area) if area > 0.0 else np.inf


@njit(cache=True, error_model="numpy")
def _critical(discharge, gravity, breaks, laws, areas, factor):
    """Return the stage of least specific energy."""
    above, below, width_rate, perimeter_rate = laws[0], laws[1], laws[4], laws[5]
    area_above, area_below = areas
    b, count = breaks.size, factor.size
    wet = np.empty((4, count))
    head = discharge * discharge / (2.0 * gravity)
    width = 0.0
    for s in range(count):
        width += above[b - 1, WIDTH, s]
    parts = max(1, count) ** 2
    reach = max(1.0, np.cbrt(2.0 * head * parts / (width * width))) * 2.0
    # alpha is one at least: where the energy is least by that, it is near its least
    likely, lowest = 0, np.inf
    for k in range(b):
        bound = breaks[k] - breaks[0] + head * _over_square(area_above[k])
        if bound < lowest:
            likely, lowest = k, bound
    best, place = breaks[likely] - breaks[0] + head * _spread(above[likely]), breaks[likely]
    for k in range(b):
        height = breaks[k] - breaks[0]
        if height + head * _over_square(area_above[k]) < best:
            tried = height + head * _spread(above[k])
            if tried < best:
                best, place = tried, breaks[k]
    for k in range(1, b):
        height = breaks[k] - breaks[0]
        if height + head * _over_square(area_below[k]) < best:
            tried = height + head * _spread(below[k])
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
        if not height < limit:
            break
        # the area is no more than at the next break
        area = area_below[k + 1] if k < b - 1 else area_top
        if not height + head * _over_square(area) < limit:
            continue
        if k < b - 1 and not height + head * _least_spread(k, laws) < limit:
            continue
        span = reach if k == b - 1 else breaks[k + 1] - breaks[k]
        before, at_before = 0.0, 0.0
        here, here_width, here_perimeter = above[k], width_rate[k], perimeter_rate[k]
        for j in range(_SAMPLES):
            offset = j / (_SAMPLES - 1) * span
            value = _energy_slope(here, here_width, here_perimeter, offset, head, factor, wet)
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


@njit(cache=True, error_model="numpy")
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


@njit(cache=True, error_model="numpy")
def _bank_tops(breaks, ground, laws):
    """Return the tops of banks, their places among the breaks, and whether the hollow behind tells."""
    low, rank_reached = ground[0], ground[6]
    above, below, total_above, total_below = laws[0], laws[1], laws[2], laws[3]
    b, count = breaks.size, above.shape[2]
    behind = np.zeros(b, dtype=np.bool_)
    for i in range(low.size):
        k = rank_reached[i]
        if k < b and breaks[k] > low[i]:
            behind[k] = True
    tops, places, telling = np.empty(b), np.empty(b, dtype=np.int64), np.empty(b, dtype=np.bool_)
    kept = 0
    for k in range(b):
        if not behind[k]:
            continue
        before = after = 0.0
        for s in range(count):
            before += below[k, AREA, s]
            after += above[k, AREA, s]
        if after > before:
            tops[kept], places[kept] = breaks[k], k
            telling[kept] = total_above[k] - total_below[k] > 0.01 * total_above[k]
            kept += 1
    return tops[:kept].copy(), places[:kept].copy(), telling[:kept].copy()


@njit(cache=True, error_model="numpy")
def _edge(x, z, dry, wet, stage):
    if wet < 0 or wet >= z.size or z[dry] <= stage or z[wet] >= stage:
        return x[dry]
    return x[dry] + (z[dry] - stage) / (z[dry] - z[wet]) * (x[wet] - x[dry])


@njit(cache=True, error_model="numpy")
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


@njit(cache=True, error_model="numpy")
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
    breaks, ground = _ground(x, z, sources)
    count = factor.size
    near = _ROUNDING * max(1.0, breaks[-1] - breaks[0])
    laws = _laws(breaks, ground, owner, factor)
    above, below, width_rate, perimeter_rate = laws[0], laws[1], laws[4], laws[5]
    tops, top_places, telling = _bank_tops(breaks, ground, laws)

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
    rows, at_break = np.empty(2 * level.size), np.empty(2 * level.size, dtype=np.int64)
    passed = np.zeros(2 * level.size, dtype=np.bool_)
    size = k = 0
    last = -1  # the last break below the stage
    for stage in level:
        while k < tops.size and tops[k] < stage:
            k += 1
        while last + 1 < breaks.size and breaks[last + 1] < stage:
            last += 1
        rows[size], at_break[size] = stage, last
        size += 1
        if k < tops.size and tops[k] == stage:
            rows[size], at_break[size], passed[size] = stage, top_places[k], True
            size += 1
    level = rows[:size].copy()
    rating = np.empty((10, size))
    row, wet = np.empty(10), np.zeros((4, count))
    for i in range(size):
        k = at_break[i]
        if passed[i]:
            wet[:, :] = above[k]
        elif k + 1 < breaks.size and level[i] == breaks[k + 1]:
            wet[:, :] = below[k + 1]
        elif k < 0:
            wet[:, :] = 0.0
        else:
            _between(above[k], width_rate[k], perimeter_rate[k], level[i] - breaks[k], factor, wet)
        _columns(wet[AREA], wet[PERIMETER], wet[WIDTH], wet[CONVEYANCE], root, gravity, row)
        rating[:, i] = row

    k = discharges.size
    stages = [np.empty(0) for _ in range(0)]
    at_bank = [np.empty(0, dtype=np.bool_) for _ in range(0)]
    critical, share, columns = np.empty(k), np.full(k, np.nan), np.full((k, 10), np.nan)
    places = np.empty((k * sources.size, 6))
    parts = np.empty((k * sources.size, 4, count))
    paths = 0
    areas = _areas_at_breaks(breaks, laws)
    divided = channel.any()
    for i in range(k):
        target = discharges[i] / root
        found, banks = _stages(target, breaks, laws, factor, near)
        stages.append(found)
        at_bank.append(banks)
        critical[i] = _critical(discharges[i], gravity, breaks, laws, areas, factor)
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
