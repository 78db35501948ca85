"""Flow paths: where water goes when it passes a bank.

Ground along a section is a row of hollows parted by ridges. Water rises in the channel until it
reaches the lower bank; what is more than the channel carries then passes over and flows in the
hollow behind, at that hollow's own stage, until the hollow is full to the bank's top and both rise
as one. A hollow may spill outward in turn. Where both banks are reached at one height the water
that passes is shared equally until one side is full.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from terrain2q.hydraulics.divided import DividedProfile, Wet


@dataclass(frozen=True)
class Path:
    """One stretch of water: its ends, its stage, and the hydraulics by subarea, shape (1, subareas)."""

    start: float
    end: float
    stage: float
    wet: Wet
    at_left_end: bool
    at_right_end: bool

    @property
    def conveyance(self) -> float:
        """Conveyance of the whole path."""
        return float(self.wet.conveyance.sum())


def _path(profile: DividedProfile, first: int, last: int, stage: float, passed: bool, ends) -> Path:
    """Water between points `first` and `last`; `ends` are the outermost stations of the section."""
    ground = profile.ground
    start = ground._edge(first, first + 1, stage)
    end = ground._edge(last, last - 1, stage)
    z = ground.z
    return Path(
        start,
        end,
        stage,
        profile.wet_between(first, last, stage, passed=passed),
        bool(start == ends[0] and stage > z[first]),
        bool(end == ends[1] and stage > z[last]),
    )


def flow_paths(
    profile: DividedProfile, target: float, stage: float, at_bank: bool, source: int
) -> list[Path]:
    """Return the stretches of water that together carry a conveyance, the channel's first.

    Parameters
    ----------
    profile : DividedProfile
    target : float
        Conveyance to be carried.
    stage, at_bank : float, bool
        The channel's stage, and whether it is a bank's top with the hollow behind it filling.
    source : int
        Low point of the channel.

    Returns
    -------
    list of Path
    """
    ground = profile.ground
    ends = (ground.x[0], ground.x[-1])
    main = ground.pool(source, stage)
    # hollows known to be reached from elsewhere stand at the channel's level beside it
    beside = [p for p in ground.pools(stage) if (p.first, p.last) != (main.first, main.last)]
    others = [_path(profile, p.first, p.last, stage, False, ends) for p in beside]
    if not at_bank:
        return [_path(profile, main.first, main.last, stage, False, ends), *others]
    rest = target - sum(p.conveyance for p in others)
    return _spill(profile, main.first, main.last, stage, rest, ends) + others


def _spill(profile: DividedProfile, first: int, last: int, level: float, target: float, ends) -> list[Path]:
    """Water that stands at `level` between points `first` and `last` and spills over one or both of them."""
    ground = profile.ground
    z = ground.z
    grown = False
    while True:
        carried = float(profile.wet_between(first, last, level, passed=grown).conveyance.sum())
        rest = max(target - carried, 0.0)
        sides = [
            side
            for side in (
                _Side.beyond(profile, first, -1, level),
                _Side.beyond(profile, last, 1, level),
            )
            if side is not None
        ]
        if not sides:
            return [_path(profile, first, last, level, grown, ends)]
        share = rest / len(sides)
        full = [side for side in sides if share >= side.capacity]
        if not full:
            main = _path(profile, first, last, level, grown, ends)
            return [main] + [p for side in sides for p in side.fill(share, ends)]
        for side in full:
            # the hollow stands at the bank's top: from here it is one with the water inside
            first, last = min(first, side.far), max(last, side.far)
        grown = True


@dataclass(frozen=True)
class _Side:
    """Ground beyond a ridge that water has reached, seen from its first hollow."""

    profile: DividedProfile
    level: float
    capacity: float
    far: int

    @classmethod
    def beyond(cls, profile: DividedProfile, ridge: int, step: int, level: float) -> _Side | None:
        """Return the side beyond point `ridge`, or None where the ground does not fall away there."""
        z = profile.ground.z
        if z[ridge] != level:
            return None
        crest = ridge
        while 0 <= crest + step < z.size and z[crest + step] == level:
            crest += step
        if not 0 <= crest + step < z.size or z[crest + step] > level:
            return None
        low = crest + step
        while 0 <= low + step < z.size and z[low + step] <= z[low]:
            low += step
        if step > 0:
            part = profile.ground.part(crest, z.size - 1, np.array([low - crest]))
            shift, bottom = crest, low - crest
        else:
            part = profile.ground.part(0, crest, np.array([low]))
            shift, bottom = 0, low
        hollow = DividedProfile(part, profile.roughness, profile.constant)
        full = part.pool(bottom, level)
        far = (full.last if step > 0 else full.first) + shift
        capacity = float(hollow.wet_between(full.first, full.last, level).conveyance.sum())
        return cls(hollow, level, capacity, far)

    def fill(self, target: float, ends) -> list[Path]:
        """Return the water beyond the ridge that carries `target`, less than the hollow's capacity."""
        if target <= 0:
            return []
        stages = self.profile.stages_for(target, self.level)
        if not stages:
            return []
        stage, at_bank = stages[-1]
        if not at_bank:
            pool = self.profile.ground.pool(int(self.profile.ground.sources[0]), stage)
            return [_path(self.profile, pool.first, pool.last, stage, False, ends)]
        pool = self.profile.ground.pool(int(self.profile.ground.sources[0]), stage)
        return _spill(self.profile, pool.first, pool.last, stage, target, ends)
