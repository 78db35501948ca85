"""How often found tops of bank lie where surveyors put them.

    python tests/benchmarks/bank_tops.py SURVEYED_SECTIONS.csv

The table has the columns section, point, station_m, elevation_m, class (bed, bank, floodplain). A
surveyed top is where bank meets flood plain; a side without flood plain is left out. A found top is a
hit within 15 % of the surveyed width between the tops. Sections of one site (repeat surveys, parts of
one survey) are kept together, and the sites are dealt with a fixed seed into a half the rule was tuned
on and a half it never saw. No answer is a miss.
"""

from __future__ import annotations

import csv
import random
import sys
from collections import defaultdict
from pathlib import Path

import numpy as np

from terrain2q.errors import NoAnswerError
from terrain2q.hydraulics.banks import find_banks

NEAR = 0.15
FEET = 1 / 0.3048


def read(path):
    """Return {section: (stations, elevations, left top, right top, middle of the bed)}."""
    rows = defaultdict(list)
    with Path(path).open(newline="", encoding="utf-8") as file:
        for row in csv.DictReader(file):
            rows[row["section"]].append((float(row["station_m"]), float(row["elevation_m"]), row["class"]))
    sections = {}
    for name, points in rows.items():
        # an undercut bank runs backwards in station: it is made a vertical face
        x = np.maximum.accumulate([p[0] for p in points])
        z = np.array([p[1] for p in points])
        inside = [i for i, p in enumerate(points) if p[2] != "floodplain"]
        bed = [i for i, p in enumerate(points) if p[2] == "bed"]
        left = x[inside[0]] if inside[0] > 0 else None
        right = x[inside[-1]] if inside[-1] < len(points) - 1 else None
        sections[name] = (x, z, left, right, (x[bed[0]] + x[bed[-1]]) / 2)
    return sections


def halves(sections):
    """Deal the sites into a tuning and a held-out half; return two lists of section names."""
    names = list(sections)
    site = {name: name for name in names}

    def first(name):
        while site[name] != name:
            name = site[name]
        return name

    for k, one in enumerate(names):
        for other in names[:k]:
            (xa, za, *_), (xb, zb, *_) = sections[one], sections[other]
            low, high = max(xa[0], xb[0]), min(xa[-1], xb[-1])
            if high - low < 0.9 * min(np.ptp(xa), np.ptp(xb)):
                continue
            at = np.linspace(low, high, 400)
            a, b = np.interp(at, xa, za), np.interp(at, xb, zb)
            apart = np.median(np.abs(a - b))
            if apart < 0.07 or (np.corrcoef(a, b)[0, 1] > 0.85 and apart < 0.2):
                site[first(one)] = first(other)
    groups = defaultdict(list)
    for name in names:
        groups[first(name)].append(name)
    groups = sorted(sorted(group) for group in groups.values())
    random.Random(1955).shuffle(groups)
    half = (len(groups) + 1) // 2
    return tuple(sorted(name for group in part for name in group) for part in (groups[:half], groups[half:]))


def found(x, z, origin=None):
    """Return the two tops, or None."""
    try:
        banks = find_banks(x, z, origin)
    except NoAnswerError:
        return None
    return banks.left, banks.right


def least_ratio(x, z, origin=None):
    """Return the ends of the pool of least width to mean depth about the lowest ground (plain Wolman)."""
    low, best = int(np.argmin(z)), None
    for stage in np.unique(z[z > z[low]]):
        left = low
        while left > 0 and z[left - 1] < stage:
            left -= 1
        right = low
        while right < z.size - 1 and z[right + 1] < stage:
            right += 1
        if left == 0 or right == z.size - 1:
            break

        def crossing(dry, wet, stage=stage):
            return x[wet] + (x[dry] - x[wet]) * (stage - z[wet]) / (z[dry] - z[wet])

        ends = crossing(left - 1, left), crossing(right + 1, right)
        xs = np.r_[ends[0], x[left : right + 1], ends[1]]
        depth = stage - np.r_[stage, z[left : right + 1], stage]
        width, area = xs[-1] - xs[0], np.sum(np.diff(xs) * (depth[1:] + depth[:-1]) / 2)
        if area > 0 and (best is None or width**2 / area <= best[0]):
            best = width**2 / area, *ends
    return None if best is None else best[1:]


def lidar(x, z, seed):
    """Return the profile at stations 1 m apart with 5 cm of noise."""
    at = np.arange(x[0], x[-1], 1.0)
    faces = x + np.arange(x.size) * 1e-9
    return at, np.interp(at, faces, z) + np.random.default_rng(seed).normal(0, 0.05, at.size)


def share(sections, names, rule, change=None, repeats=1, origin=False):
    """Return hits and tops, over the named sections."""
    hits = tops = 0
    for name in names:
        x, z, left, right, middle = sections[name]
        width = (x[-1] if right is None else right) - (x[0] if left is None else left)
        for repeat in range(repeats):
            profile = (x, z) if change is None else change(x, z, [int(name.strip("S")), repeat])
            answer = rule(*profile, middle if origin else None)
            for k, top in enumerate((left, right)):
                if top is not None:
                    tops += 1
                    hits += answer is not None and abs(answer[k] - top) <= NEAR * width
    return hits, tops


def plain(x, z):
    """Return the profile with a wide flat flood plain added on either side."""
    wide = x[-1] - x[0]
    return np.r_[x[0] - wide, x, x[-1] + wide], np.r_[z[0], z, z[-1]]


def main(path):
    """Print the shares, and how the answers stand up to changes that must not matter."""
    sections = read(path)
    tuning, held_out = halves(sections)
    print(f"{len(sections)} sections: {len(tuning)} in the tuning half, {len(held_out)} held out")
    print("tops within 15 % of the width of the surveyed ones   tuning          held out")
    for label, rule, more in (
        ("find_banks, from the lowest ground", found, {}),
        ("find_banks, origin in the middle of the bed", found, {"origin": True}),
        ("find_banks, 1 m stations and 5 cm noise, 5 draws", found, {"change": lidar, "repeats": 5}),
        ("least width to mean depth alone", least_ratio, {}),
        ("least ratio alone, 1 m stations and 5 cm noise", least_ratio, {"change": lidar, "repeats": 5}),
    ):
        cells = [share(sections, names, rule, **more) for names in (tuning, held_out)]
        print(f"{label:50}", *(f"{h / n:6.1%} ({h}/{n})".ljust(15) for h, n in cells))
    same = defaultdict(int)
    for x, z, *_ in sections.values():
        answer = np.array(found(x, z))
        same["mirrored"] += np.allclose(np.array(found(-x[::-1], z[::-1])), -answer[::-1])
        same["shifted"] += np.allclose(np.array(found(x + 5e5, z + 3e3)) - 5e5, answer, atol=1e-6)
        same["in feet"] += np.allclose(np.array(found(x * FEET, z * FEET)) / FEET, answer)
        same["with flat flood plain added"] += np.allclose(np.array(found(*plain(x, z))), answer)
    for label, count in same.items():
        print(f"same answer {label}: {count} of {len(sections)}")


if __name__ == "__main__":
    main(sys.argv[1])
