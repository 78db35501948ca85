"""Tops of bank, water and shelves in one profile, compiled.

In loops over numbers what :mod:`~terrain2q.hydraulics.banks`, :mod:`~terrain2q.hydraulics.submerged` and
:mod:`~terrain2q.hydraulics.review` say in arrays; those are the definition, with reasons and sources, and
the tests hold the two to each other.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from terrain2q.hydraulics import banks, review, submerged

_INNER, _OUTER, _STEEPEST = banks._INNER, banks._OUTER, banks._STEEPEST
_LOW_BENCH, _HIGH_BENCH, _WIDEST_BENCH = banks._LOW_BENCH, banks._HIGH_BENCH, banks._WIDEST_BENCH
_KNEE, _STEEP, _CLIMB, _LOW, _HIGH, _END = (
    banks._KNEE, banks._STEEP, banks._CLIMB, banks._LOW, banks._HIGH, banks._END,
)  # fmt: skip
_ASTRAY, _DEEPER, _SAME = banks._ASTRAY, banks._DEEPER, banks._SAME
_LEAST_EVEN, _EVEN, _MOSTLY, _TOGETHER = banks._LEAST_EVEN, banks._EVEN, banks._MOSTLY, banks._TOGETHER
_LAGS = banks._LAGS
_STANDS_OUT, _LITTLE = banks._STANDS_OUT, banks._LITTLE
_MOST_TOPS, _MOST_PITS = banks._MOST_TOPS, banks._MOST_PITS
_LEAST_POINTS, _LEVEL, _MOST_LEVEL, _BANK = (
    submerged.LEAST_POINTS, submerged.LEVEL, submerged.MOST_LEVEL, submerged.BANK,
)  # fmt: skip
_SHELF_WIDTH, _SHELF_DROP, _EDGE, _TELLING = (
    review.SHELF_WIDTH, review.SHELF_DROP, review._EDGE, review._TELLING,
)  # fmt: skip


# --- tops of bank ------------------------------------------------------------------------------------


@njit(cache=True, error_model="numpy")
def _last_not_above(values, value):
    """Return the last place whose value is not above `value`, within all but the last place."""
    low, high = 0, values.size
    while low < high:
        middle = (low + high) // 2
        if values[middle] <= value:
            low = middle + 1
        else:
            high = middle
    return min(max(low - 1, 0), values.size - 2)


@njit(cache=True, error_model="numpy")
def _first_not_below(values, value):
    low, high = 0, values.size
    while low < high:
        middle = (low + high) // 2
        if values[middle] < value:
            low = middle + 1
        else:
            high = middle
    return low


@njit(cache=True, error_model="numpy")
def _height_at(x, z, at):
    if at <= x[0]:
        return z[_last_not_above(x, x[0])] if at == x[0] else z[0]
    if at >= x[-1]:
        return z[-1]
    k = _last_not_above(x, at)
    return (z[k + 1] - z[k]) / (x[k + 1] - x[k]) * (at - x[k]) + z[k]


@njit(cache=True, error_model="numpy")
def _area(at, long_x, long_z, slope, area, per_point):
    """Return the area below the ground up to a station; `per_point` is points per length, a first guess."""
    last = long_x.size - 2
    k = min(max(int((at - long_x[0]) * per_point), 0), last)
    steps = 0
    while k < last and long_x[k + 1] <= at and steps < 8:
        k += 1
        steps += 1
    while k > 0 and long_x[k] > at and steps < 8:
        k -= 1
        steps += 1
    if steps == 8:
        k = _last_not_above(long_x, at)
    run = at - long_x[k]
    return area[k] + run * (long_z[k] + slope[k] * run / 2)


@njit(cache=True, error_model="numpy")
def _reach(d, h, highest, k, share):
    limit = (1 + share) * h[k] * (1 - _SAME)
    beyond = _first_not_below(highest, limit)
    if beyond >= d.size:
        return d[-1] - d[k]
    climb = h[beyond] - h[beyond - 1]
    part = (limit - h[beyond - 1]) / climb if climb > 0 else 1.0
    return d[beyond - 1] + part * (d[beyond] - d[beyond - 1]) - d[k]


@njit(cache=True, error_model="numpy")
def _side(x, z, start, step, least_height):
    """Return what one side offers as tops, a row each.

    Its columns: point, height, low bench, high bench, is an end, distance, logarithm of the height.
    """
    n = start + 1 if step < 0 else x.size - start
    d, h, highest = np.empty(n), np.empty(n), np.empty(n)
    for i in range(n):
        p = start + step * i
        d[i], h[i] = abs(x[p] - x[start]), z[p] - z[start]
        highest[i] = h[i] if i == 0 else max(highest[i - 1], h[i])
    found = np.empty((n, 7))
    kept = 0
    for i in range(n - 1):
        rise = h[i + 1] - h[i]
        if not (rise > 0 and h[i + 1] > highest[i] + least_height):
            continue
        if i < n - 2:
            inner, outer = rise * (d[i + 2] - d[i + 1]), (h[i + 2] - h[i + 1]) * (d[i + 1] - d[i])
            if not inner - outer > 1e-6 * (abs(inner) + abs(outer)):
                continue
        k = i + 1
        found[kept, 0], found[kept, 1] = start + step * k, h[k]
        found[kept, 2] = _reach(d, h, highest, k, _LOW_BENCH)
        found[kept, 3] = _reach(d, h, highest, k, _HIGH_BENCH)
        found[kept, 4] = 1.0 if k == n - 1 else 0.0
        found[kept, 5], found[kept, 6] = d[k], np.log(h[k])
        kept += 1
    if kept > _MOST_TOPS:
        widest = np.argsort(-found[:kept, 2] / found[:kept, 5], kind="mergesort")[:_MOST_TOPS]
        keep = np.zeros(kept, dtype=np.bool_)
        keep[widest] = True
        keep[kept - 1] = True
        return found[:kept][keep]
    return found[:kept]


@njit(cache=True, error_model="numpy")
def _reachable(left, right, width):
    """Return what a pair reaches if its banks are as steep as can be and nothing climbs behind them."""
    share = 1.0 / width
    low = min(left[2] * share, _WIDEST_BENCH) + min(right[2] * share, _WIDEST_BENCH)
    high = min(left[3] * share, _WIDEST_BENCH) + min(right[3] * share, _WIDEST_BENCH)
    uneven = left[6] - right[6]
    return (
        left[6] + right[6] - np.log(width) - uneven * uneven + _STEEP * 2 * _STEEPEST
        + _LOW * low + _HIGH * high - _END * (left[4] + right[4])
    )  # fmt: skip


@njit(cache=True, error_model="numpy")
def _most(tops, nearest):
    """Return each top's share of the most a pair reaches; `nearest` is the other side's least distance.

    The width of a pair is no less than the two distances, and its logarithm no less than that of two plus
    half of each of theirs.
    """
    most = np.full(tops.shape[0], np.inf)
    for i in range(tops.shape[0]):
        if tops[i, 5] > 0.0:
            width = tops[i, 5] + nearest
            most[i] = tops[i, 6] - 0.5 * np.log(tops[i, 5]) - _END * tops[i, 4]
            most[i] += _LOW * min(tops[i, 2] / width, _WIDEST_BENCH)
            most[i] += _HIGH * min(tops[i, 3] / width, _WIDEST_BENCH)
    return most


@njit(cache=True, error_model="numpy")
def _best_alone(tops):
    best, place = -np.inf, 0
    for i in range(tops.shape[0]):
        if not tops[i, 5] > 0.0:
            continue
        reached = _reachable(tops[i], tops[i], 2 * tops[i, 5])
        if reached > best:
            best, place = reached, i
    return place


@njit(cache=True, error_model="numpy")
def _score(base, long_x, long_z, slope, area, per_point, left, right, xl, xr, reachable, best):
    """Return the score of a pair of tops, of which the most it can be is known; -inf where it is none.

    Where one bank alone shows that it is not the best, -inf too.
    """
    width, score = xr - xl, reachable
    inner, outer = _INNER * width, _OUTER * width
    for side in range(2):
        at, h, is_end = (xl, left[1], left[4]) if side == 0 else (xr, right[1], right[4])
        inward = inner if side == 0 else -inner
        outward = -outer if side == 0 else outer
        here = _area(at, long_x, long_z, slope, area, per_point)
        inside = (_area(at + inward, long_x, long_z, slope, area, per_point) - here) / inward
        outside = (_area(at + outward, long_x, long_z, slope, area, per_point) - here) / outward
        gain, climb = 1 - (inside - base) / h, (outside - base) / h - 1
        if is_end == 0.0 and not (gain > _SAME and climb / _OUTER < _KNEE * gain / _INNER + _SAME):
            return -np.inf
        score -= _STEEP * (_STEEPEST - min(gain, _STEEPEST)) + _CLIMB * max(climb, 0.0)
        if score < best - 1e-6:
            return -np.inf
    return score


@njit(cache=True, error_model="numpy")
def _best_tops(x, z, long_x, long_z, slope, area, least_height, pit_left, pit_right):
    """Return the score and the points of the best pair of tops about a low point; no point where none is."""
    left, right = _side(x, z, pit_left, -1, least_height), _side(x, z, pit_right, 1, least_height)
    base = z[pit_left]
    n, m = left.shape[0], right.shape[0]
    score = np.full((n, m), -np.inf)
    best = -np.inf
    per_point = (long_x.size - 1) / (long_x[-1] - long_x[0])
    if n == 0 or m == 0:
        return best, -1, -1
    # two tops that do well each with its own image may well be the best: what is surely worse is passed over
    i, j = _best_alone(left), _best_alone(right)
    xl, xr = x[int(left[i, 0])], x[int(right[j, 0])]
    if xr > xl:
        reachable = _reachable(left[i], right[j], xr - xl)
        best = _score(
            base, long_x, long_z, slope, area, per_point, left[i], right[j], xl, xr, reachable, -np.inf
        )
    from_left, from_right = _most(left, right[0, 5]), _most(right, left[0, 5])
    log_left, log_right = left[:, 6].copy(), right[:, 6].copy()
    sure = _STEEP * 2 * _STEEPEST - np.log(2.0) + 1e-6
    for i in range(n):
        xl = x[int(left[i, 0])]
        for j in range(m):
            uneven = log_left[i] - log_right[j]
            if from_left[i] + from_right[j] - uneven * uneven + sure < best:
                continue
            xr = x[int(right[j, 0])]
            if not xr > xl:
                continue
            reachable = _reachable(left[i], right[j], xr - xl)
            if reachable < best - 1e-6:
                continue
            score[i, j] = _score(
                base, long_x, long_z, slope, area, per_point, left[i], right[j], xl, xr, reachable, best
            )
            best = max(best, score[i, j])
    at_left = at_right = -1
    if best > -np.inf:
        for i in range(left.shape[0]):
            for j in range(right.shape[0]):
                if score[i, j] >= best - _SAME:
                    at_left, at_right = max(at_left, i), max(at_right, j)
        return best, int(left[at_left, 0]), int(right[at_right, 0])
    return best, -1, -1


@njit(cache=True, error_model="numpy")
def _lowest(z):
    low = z.min()
    pits = np.empty((z.size, 2), dtype=np.int64)
    kept = 0
    for i in range(z.size):
        if z[i] == low:
            if i > 0 and z[i - 1] == low:
                pits[kept - 1, 1] = i
            else:
                pits[kept, 0] = pits[kept, 1] = i
                kept += 1
    return pits[:kept]


@njit(cache=True, error_model="numpy")
def _beside(x, z, origin):
    """Return the low points that can be seen from `origin`, the deepest first."""
    here = _height_at(x, z, origin)
    pits, barriers = np.empty((2 * z.size, 2), dtype=np.int64), np.empty(2 * z.size)
    kept = 0
    for step in (-1, 1):
        if step < 0:
            start = x.size - 1
            while start >= 0 and x[start] > origin:
                start -= 1
            n = start + 1
        else:
            start = 0
            while start < x.size and x[start] < origin:
                start += 1
            n = x.size - start
        below, fall = here, -1
        for i in range(n + 1):
            falls = False
            if i < n:
                h = z[start + step * i]
                below = min(below, h)
                falls = h <= below and (i == n - 1 or z[start + step * (i + 1)] > h)
            if not (falls or i == n):
                continue
            if fall >= 0:
                p = start + step * fall
                barrier = np.inf
                if i < n:
                    barrier = 0.0
                    for k in range(fall, i):
                        barrier = max(barrier, z[start + step * k] - z[p])
                first = last = p
                while first > 0 and z[first - 1] == z[first]:
                    first -= 1
                while last < z.size - 1 and z[last + 1] == z[last]:
                    last += 1
                known = False
                for k in range(kept):
                    if pits[k, 0] == first and pits[k, 1] == last:
                        barriers[k], known = max(barriers[k], barrier), True
                if not known:
                    pits[kept, 0], pits[kept, 1], barriers[kept] = first, last, barrier
                    kept += 1
            fall = i
    if kept == 0:
        at = 0
        for i in range(x.size):
            if abs(x[i] - origin) < abs(x[at] - origin):
                at = i
        pits[0, 0] = pits[0, 1] = at
        return pits[:1]
    order = np.argsort(-barriers[:kept], kind="mergesort")[:_MOST_PITS]
    return pits[:kept][order]


@njit(cache=True, error_model="numpy")
def _is_hollow(x, z):
    """Whether a profile is convex from end to end but for its noise; see `is_hollow`."""
    n = x.size
    if n < _LEAST_EVEN:
        return False
    run = x[1:] - x[:-1]
    step = np.median(run)
    even = 0
    for i in range(n - 1):
        if abs(run[i] - step) <= _EVEN * step:
            even += 1
    if even < _MOSTLY * (n - 1):
        return False
    bend = 0.0
    for lag in _LAGS:
        bend = max(bend, np.median(np.abs(z[2 * lag :] - 2.0 * z[lag:-lag] + z[: -2 * lag])))
    noise = 1.4826 / np.sqrt(6.0) * bend
    if noise <= _SAME * (z.max() - z.min()):
        return False
    count = n - _TOGETHER + 1
    at, mean = np.zeros(count), np.zeros(count)
    for i in range(count):
        for k in range(i, i + _TOGETHER):
            at[i] += (x[k] - x[0]) / _TOGETHER
            mean[i] += (z[k] - z[0]) / _TOGETHER
    depth = min(mean[0], mean[-1]) - mean.min()
    if depth <= _STANDS_OUT * noise:
        return False
    most = min(_STANDS_OUT * noise, _LITTLE * depth)
    corners = np.zeros(count, dtype=np.int64)
    last = 0
    for k in range(1, count):
        while last > 0:
            i, j = corners[last - 1], corners[last]
            if (mean[j] - mean[i]) * (at[k] - at[j]) < (mean[k] - mean[j]) * (at[j] - at[i]):
                break
            last -= 1
        last += 1
        corners[last] = k
    for c in range(last):
        i, j = corners[c], corners[c + 1]
        slope = (mean[j] - mean[i]) / (at[j] - at[i])
        for k in range(i + 1, j):
            if mean[k] - (mean[i] + slope * (at[k] - at[i])) > most:
                return False
    return True


@njit(cache=True, error_model="numpy")
def tops_of_bank(x, z, origin):
    """Return the points of the two tops of bank as stations and heights, and whether there are any.

    Parameters
    ----------
    x, z : ndarray, shape (m,)
        A checked profile.
    origin : float
        NaN where there is none.

    Returns
    -------
    found : bool
    left, right, stage : float
    """
    keep = np.ones(x.size, dtype=np.bool_)
    for i in range(1, x.size):
        keep[i] = x[i] > x[i - 1] or z[i] != z[i - 1]
    station, height = x[keep], z[keep]
    if height.max() - height.min() <= _SAME * np.abs(height).max():
        return False, 0.0, 0.0, 0.0
    if _is_hollow(station, height):
        return True, station[0], station[-1], min(height[0], height[-1])
    middle = station[0] + (station[-1] - station[0]) / 2
    x, z = station - middle, height - height.min()
    n = x.size
    least_height = _SAME * z.max()
    long_x, long_z = np.empty(3 * n - 2), np.empty(3 * n - 2)
    for i in range(n - 1):
        long_x[i], long_z[i] = 2 * x[0] - x[n - 1 - i], 2 * z[0] - z[n - 1 - i]
        long_x[2 * n - 1 + i], long_z[2 * n - 1 + i] = 2 * x[-1] - x[n - 2 - i], 2 * z[-1] - z[n - 2 - i]
    long_x[n - 1 : 2 * n - 1], long_z[n - 1 : 2 * n - 1] = x, z
    slope, area = np.zeros(3 * n - 3), np.zeros(3 * n - 2)
    for i in range(3 * n - 3):
        run = long_x[i + 1] - long_x[i]
        if run > 0:
            slope[i] = (long_z[i + 1] - long_z[i]) / run
        area[i + 1] = area[i] + run * (long_z[i + 1] + long_z[i]) / 2
    has_origin = not np.isnan(origin)
    at = origin - middle
    pits = _beside(x, z, at) if has_origin else _lowest(z)
    count = pits.shape[0]
    score, left, right = np.empty(count), np.empty(count, dtype=np.int64), np.empty(count, dtype=np.int64)
    depth, holds = np.zeros(count), np.zeros(count, dtype=np.bool_)
    here = _height_at(x, z, at) if has_origin else 0.0
    for p in range(count):
        score[p], left[p], right[p] = _best_tops(
            x, z, long_x, long_z, slope, area, least_height, pits[p, 0], pits[p, 1]
        )
        if left[p] >= 0 and has_origin:
            low = min(max(at, x[pits[p, 0]]), x[pits[p, 1]])
            score[p] -= _ASTRAY * abs(at - low) / (x[right[p]] - x[left[p]])
            depth[p] = min(z[left[p]], z[right[p]]) - z[pits[p, 0]]
            holds[p] = x[left[p]] <= at <= x[right[p]] and here - z[pits[p, 0]] <= 0.5 * depth[p]
    if has_origin:
        for p in range(count):
            if left[p] < 0 or holds[p]:
                continue
            # a channel beside the one whose bed the stream is drawn on must be much deeper
            deepest = -np.inf
            for other in range(count):
                if left[other] >= 0 and holds[other] and (right[p] <= left[other] or right[other] <= left[p]):
                    deepest = max(deepest, depth[other])
            if deepest > -np.inf and not depth[p] > _DEEPER * deepest:
                score[p] = -np.inf
    best = -np.inf
    for p in range(count):
        if left[p] >= 0:
            best = max(best, score[p])
    if not best > -np.inf:
        return False, 0.0, 0.0, 0.0
    first, last = n, -1
    for p in range(count):
        if left[p] >= 0 and score[p] >= best - _SAME:
            first, last = min(first, left[p]), max(last, right[p])
    return True, station[first], station[last], min(height[first], height[last])


# --- water ------------------------------------------------------------------------------------------


@njit(cache=True, error_model="numpy")
def level_water(x, z, low_limit, high_limit):
    """Return whether a section's lowest ground is water, its first and last point, its height and tolerance.

    See `find_water`; the limits are infinite where there are none.
    """
    n = x.size
    none = (False, 0, 0, 0.0, 0.0)
    first_inside, last_inside, inside = -1, -1, 0
    for i in range(n):
        if low_limit <= x[i] <= high_limit:
            inside += 1
            last_inside = i
            if first_inside < 0:
                first_inside = i
    if n < _LEAST_POINTS + 2 or inside < _LEAST_POINTS + 2:
        return none
    step = z[1:] - z[:-1]
    bend = step[1:] - step[:-1]
    noise = 1.4826 * np.median(np.abs(bend - np.median(bend))) / np.sqrt(6.0)
    within = min(max(2.5 * noise, _LEVEL), _MOST_LEVEL)
    smooth = np.empty(n)
    for i in range(n):
        a, b, c = z[max(i - 1, 0)], z[i], z[min(i + 1, n - 1)]
        smooth[i] = max(min(a, b), min(max(a, b), c))
    low = first_inside
    for i in range(first_inside, last_inside + 1):
        if smooth[i] < smooth[low]:
            low = i
    surface = smooth[low]
    first = last = low
    for _ in range(4):
        first = last = low
        while first > first_inside and abs(smooth[first - 1] - surface) <= within:
            first -= 1
        while last < last_inside and abs(smooth[last + 1] - surface) <= within:
            last += 1
        surface = np.median(z[first : last + 1])
    count = last - first + 1
    if count < _LEAST_POINTS:
        return none
    mean_x = mean_z = 0.0
    for i in range(first, last + 1):
        mean_x += (x[i] - x[first]) / count
        mean_z += z[i] / count
    top = bottom = 0.0
    for i in range(first, last + 1):
        top += (x[i] - x[first] - mean_x) * (z[i] - mean_z)
        bottom += (x[i] - x[first] - mean_x) ** 2
    if bottom > 0 and abs(top / bottom * (x[last] - x[first])) > within:
        return none
    reach = 0.5 * (x[last] - x[first])
    highest_left = highest_right = -np.inf
    for i in range(n):
        if x[first] - reach <= x[i] < x[first]:
            highest_left = max(highest_left, z[i])
        if x[last] < x[i] <= x[last] + reach:
            highest_right = max(highest_right, z[i])
    if highest_left < surface + _BANK or highest_right < surface + _BANK:
        return none
    return True, first, last, surface, within


# --- shelves ----------------------------------------------------------------------------------------


@njit(cache=True, error_model="numpy")
def _shelf(x, depth):
    """Whether ground that begins at the first point is a shelf beside deeper water."""
    whole = x[-1] - x[0]
    deepest = -np.inf
    for k in range(x.size):
        deepest = max(deepest, depth[k])
        if not (depth[k] == deepest and depth[k] > 0):
            continue
        width, edge = x[k] - x[0], depth[k]
        if width < _SHELF_WIDTH * edge or width < _TELLING * whole:
            continue
        for j in range(k, x.size):
            if depth[j] >= _SHELF_DROP * edge:
                reached = x[j] - (depth[j] - _SHELF_DROP * edge) / (depth[j] - depth[j - 1]) * (
                    x[j] - x[j - 1]
                )
                if reached - x[k] <= _EDGE * width:
                    return True
                break
    return False


@njit(cache=True, error_model="numpy")
def may_have_shelf(x, z, stage, start, end):
    """Whether the ground between two stations may hold a shelf; where not, it surely does not."""
    n = x.size
    if not end > start:
        return False
    first, last = 0, n
    while first < n and x[first] <= start:
        first += 1
    while last > first and x[last - 1] >= end:
        last -= 1
    # a vertical face at a limit: told in arrays
    if (first > 1 and x[first - 1] == start and x[first - 2] == start) or (
        last < n - 1 and x[last] == end and x[last + 1] == end
    ):
        return True
    m = last - first + 2
    station, depth = np.empty(2 * m), np.empty(2 * m)
    size = 0
    before = 0.0
    for i in range(m):
        if i == 0:
            at, height = start, _height_at(x, z, start)
        elif i == m - 1:
            at, height = end, _height_at(x, z, end)
        else:
            at, height = x[first + i - 1], z[first + i - 1]
        d = stage - height
        if i > 0 and before * d < 0:
            station[size] = station[size - 1] + before / (before - d) * (at - station[size - 1])
            depth[size] = 0.0
            size += 1
        station[size], depth[size] = at, d
        size += 1
        before = d
    i = 0
    while i < size - 1:
        if not (depth[i] > 0 or depth[i + 1] > 0):
            i += 1
            continue
        j = i
        while j < size - 1 and (depth[j] > 0 or depth[j + 1] > 0):
            j += 1
        some_x, some_depth = station[i : j + 1], np.maximum(depth[i : j + 1], 0.0)
        if _shelf(some_x, some_depth) or _shelf(-some_x[::-1], some_depth[::-1].copy()):
            return True
        i = j
    return False
